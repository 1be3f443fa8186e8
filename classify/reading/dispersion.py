"""Wavelengths from header keywords: linear, logarithmic, survey coefficients and IRAF's ``multispec`` functions.

World coordinates follow Greisen et al. 2006 A&A 446, 747; the attribute strings of the ``multispec`` format follow
Valdes 1993, "The IRAF/NOAO Spectral World Coordinate Systems".
"""

from __future__ import annotations

import re
from dataclasses import dataclass

import numpy as np

from starfathom.classify.reading.fitsio import FitsBeyond, FitsError, Header
from starfathom.classify.reading.units import spectral_unit
from starfathom.classify.spectrum import FloatArray


@dataclass(frozen=True)
class Axis:
    """Values of a spectral axis, shape (n,), with their unit ("" when not stated) and whether they are logarithms."""

    values: FloatArray
    unit: str = ""
    log: str = ""
    note: str = ""


def axis_of(header: Header, n: int, axis: int = 1, row: int = 0) -> Axis | None:
    """The spectral axis ``axis`` of ``n`` pixels that a header describes; None when it describes none.

    ``row`` picks the aperture of a ``multispec`` image. Raises FitsError when the description is broken.
    """
    if header.word("CTYPE1").upper().startswith("MULTISPE") or "multispec" in header.word("WAT0_001").lower():
        found = multispec(header, n, row)
        if found is not None:
            return found
    if "COEFF0" in header and "COEFF1" in header and axis == 1:
        start, step = header.number("COEFF0"), header.number("COEFF1")
        if np.isfinite(start) and np.isfinite(step) and step != 0:
            return Axis(start + step * np.arange(n, dtype=np.float64), "", "log10")
    return _from_wcs(header, n, axis)


def _from_wcs(header: Header, n: int, axis: int) -> Axis | None:
    ctype = header.word(f"CTYPE{axis}").upper()
    if ctype.endswith(("-TAB", "-GRI", "-GRA")):
        raise FitsBeyond(f"CTYPE{axis} = {ctype} needs a general reader")
    start = header.number(f"CRVAL{axis}")
    step = header.number(f"CD{axis}_{axis}")
    if not step or not np.isfinite(step):
        step = header.number(f"CDELT{axis}")
        scale = header.number(f"PC{axis}_{axis}", 1.0)
        if np.isfinite(step) and scale:
            step *= scale
    reference = header.number(f"CRPIX{axis}", 1.0)
    if not np.isfinite(start) and "W0" in header and "WPC" in header:
        start, step = header.number("W0"), header.number("WPC")
    if not (np.isfinite(start) and np.isfinite(step)) or step == 0:
        return None
    offset = np.arange(1, n + 1, dtype=np.float64) - reference
    unit = header.word(f"CUNIT{axis}") or _wat_unit(header, axis)
    if ctype.endswith("-LOG"):
        with np.errstate(over="ignore", divide="ignore", invalid="ignore"):
            values = start * np.exp(offset * step / start)  # Greisen et al. 2006, eq. 5
        return Axis(values, unit or _CTYPE_UNITS.get(ctype[:4], ""))
    values = start + offset * step
    log = ""
    if header.whole("DC-FLAG", 0) == 1 or re.match(r"LOG|WAVE?LOG", ctype) or ctype in ("WLOG", "LLAM"):
        log = "log10"
    elif re.search(r"\blog", unit.lower()) or "log10" in header.comment(f"CRVAL{axis}").lower():
        log = "log10"
    elif _looks_log(values):
        log = "log10" if values.max() <= 4.4 else "ln"
    said = spectral_unit(unit)
    if log and said is not None and not 2000 < _median_power(values, log) * said.scale < 26000:
        # logarithms of angstrom stand under any unit word; natural ones are told by their size
        if values.min() >= 7.6 and values.max() <= 10.2:
            log = "ln"
        else:
            unit = ""
    if not log and abs(start) <= 1.0 and step == 1.0 and spectral_unit(unit) is None:
        return None  # pixel numbers, not wavelengths
    if not log and ctype in ("PIXEL", "PIXELS", "PIX") and spectral_unit(unit) is None:
        return None
    if unit.lower() in ("pixel", "pixels", "pix"):
        return None
    if spectral_unit(unit) is None and ctype[:4] in _CTYPE_UNITS:
        unit = _CTYPE_UNITS[ctype[:4]]
    if unit.lower() in _NO_UNITS:
        unit = ""
    return Axis(values, unit, log)


#: Default units of the coordinate types that are not wavelengths (Greisen et al. 2006, table 1).
_CTYPE_UNITS = {"FREQ": "Hz", "WAVN": "1/m", "ENER": "eV"}
#: Words found in CUNIT that name no unit of wavelength.
_NO_UNITS = ("deg", "degree", "degrees", "''", "none", "unknown", "lambda", "wavelength", "1", "erg/cm2/s/a")


def _looks_log(values: FloatArray) -> bool:
    lo, hi = float(values.min()), float(values.max())
    return (lo >= 3.3 and hi <= 4.4) or (lo >= 7.6 and hi <= 10.13)


def _median_power(values: FloatArray, log: str) -> float:
    middle = min(float(np.median(values)), 300.0)
    return float(10.0**middle if log == "log10" else np.exp(middle))


def _wat_unit(header: Header, axis: int) -> str:
    match = re.search(r"units\s*=\s*\"?([A-Za-z0-9_./^-]+)", header.word(f"WAT{axis}_001"))
    return match.group(1) if match else ""


def wat_text(header: Header, axis: int) -> str:
    """The attribute string of one axis, put together from its WATaxis_nnn cards (68 characters each but the last)."""
    pieces: list[str] = []
    for i in range(1, 1000):
        key = f"WAT{axis}_{i:03d}"
        if key not in header:
            break
        pieces.append(header.raw_string(key))
    return "".join(p.ljust(68) for p in pieces[:-1]) + (pieces[-1] if pieces else "")


def multispec(header: Header, n: int, row: int = 0) -> Axis | None:
    """The spectral axis of aperture ``row`` (0-based) of an IRAF ``multispec`` image.

    Dispersion types 0 (linear), 1 (log-linear) and 2 with Chebyshev, Legendre, cubic spline, linear spline and
    pixel or sampled coordinate functions, weights, zero offsets and the Doppler factor.
    """
    text = wat_text(header, 2)
    found = {int(k): v for k, v in re.findall(r"spec(\d{1,4})\s*=\s*\"([^\"]*)\"?", text)}
    if not found:
        return None
    spec = found.get(row + 1)
    if spec is None:
        raise FitsError(f"the multispec dispersion of aperture {row + 1} is missing")
    # numbers may run together or be split by the card limit only at blanks; exponents may be written with D
    words = spec.replace("D", "E").split()
    try:
        numbers = [float(w) for w in words]
    except ValueError:
        raise FitsError("the multispec dispersion holds something that is not a number") from None
    if len(numbers) < 6:
        raise FitsError("the multispec dispersion is cut off")
    kind, first, step = int(numbers[2]), numbers[3], numbers[4]
    z = numbers[6] if len(numbers) > 6 else 0.0
    unit = _wat_unit(header, 1)
    physical = _physical_pixels(header, n)
    if kind in (-1,):
        return None
    if kind in (0, 1):
        values = first + step * (physical - 1.0)
        if kind == 1:
            values = 10.0**values
        return Axis(values / (1.0 + z), unit)
    if kind != 2:
        raise FitsError(f"multispec dispersion type {kind} is not known")
    values = _functions(numbers[9:], physical)
    return Axis(values / (1.0 + z), unit)


def _physical_pixels(header: Header, n: int) -> FloatArray:
    """Physical pixel numbers of the n image pixels (LTV1 and LTM1_1 remember a section copied from a longer image)."""
    shift, scale = header.number("LTV1", 0.0), header.number("LTM1_1", 1.0)
    return (np.arange(1, n + 1, dtype=np.float64) - shift) / (scale or 1.0)


def _functions(numbers: list[float], pixel: FloatArray) -> FloatArray:
    total = np.zeros(pixel.size)
    at = 0
    while at < len(numbers):
        if len(numbers) - at < 4:
            raise FitsError("the multispec dispersion function is cut off")
        weight, zero, code = numbers[at], numbers[at + 1], int(numbers[at + 2])
        at += 3
        if code in (1, 2):
            order = int(numbers[at])
            if not 1 <= order <= 200 or len(numbers) < at + 3 + order:
                raise FitsError("the multispec dispersion function is cut off")
            low, high = numbers[at + 1], numbers[at + 2]
            coefficients = np.array(numbers[at + 3 : at + 3 + order])
            at += 3 + order
            if high == low:
                raise FitsError("the multispec dispersion function has an empty pixel range")
            x = (pixel - (high + low) / 2) / ((high - low) / 2)
            series = np.polynomial.chebyshev.chebval if code == 1 else np.polynomial.legendre.legval
            value = series(x, coefficients)
        elif code in (3, 4):
            pieces = int(numbers[at])
            count = pieces + (3 if code == 3 else 1)
            if not 1 <= pieces <= 200 or len(numbers) < at + 3 + count:
                raise FitsError("the multispec dispersion function is cut off")
            low, high = numbers[at + 1], numbers[at + 2]
            coefficients = np.array(numbers[at + 3 : at + 3 + count])
            at += 3 + count
            if high == low:
                raise FitsError("the multispec dispersion function has an empty pixel range")
            value = _spline((pixel - low) / (high - low) * pieces, coefficients, pieces, cubic=code == 3)
        elif code == 5:
            count = int(numbers[at])
            if not 2 <= count <= 1_000_000 or len(numbers) < at + 1 + count:
                raise FitsError("the multispec pixel array is cut off")
            value = np.interp(pixel, np.arange(1, count + 1), numbers[at + 1 : at + 1 + count])
            at += 1 + count
        elif code == 6:
            count = int(numbers[at])
            pairs = np.array(numbers[at + 1 : at + 1 + 2 * count])
            if count < 2 or pairs.size < 2 * count:
                raise FitsError("the multispec sampled array is cut off")
            value = np.interp(pixel, pairs[::2], pairs[1::2])
            at += 1 + 2 * count
        else:
            raise FitsError(f"multispec function type {code} is not known")
        total += weight * (zero + value)
    return total


def _spline(s: FloatArray, c: FloatArray, pieces: int, cubic: bool) -> FloatArray:
    """IRAF splines: ``s`` runs from 0 to ``pieces``; basis functions as in Valdes 1993."""
    j = np.clip(np.floor(s).astype(int), 0, pieces - 1)
    b = s - j
    a = 1.0 - b
    if not cubic:
        return c[j] * a + c[j + 1] * b
    return c[j] * a**3 + c[j + 1] * (1 + 3 * a * (1 + a * b)) + c[j + 2] * (1 + 3 * b * (1 + a * b)) + c[j + 3] * b**3
