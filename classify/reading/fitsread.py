"""Spectra in FITS files: which part of the file holds one, and which rows or columns of it are what."""

from __future__ import annotations

from typing import Any

import numpy as np

from starfathom.classify.errors import SpectrumError
from starfathom.classify.reading import dispersion, fitsio, hints
from starfathom.classify.reading.fitsio import FitsBeyond, FitsError, Hdu
from starfathom.classify.reading.names import is_companion, log_of, never_wavelength, role_of, split_unit
from starfathom.classify.reading.raw import ErrorKind, RawSpectrum
from starfathom.classify.reading.request import Request
from starfathom.classify.reading.text import in_reach, is_steady
from starfathom.classify.reading.units import flux_word
from starfathom.classify.spectrum import FloatArray

#: Most rows an image may have and still count as one spectrum with its companions (error, sky ...).
MAX_COMPANIONS = 6


def read_fits(data: bytes, path: str, request: Request) -> RawSpectrum:
    """The first spectrum of a FITS file, or the one in the HDU asked for.

    Raises
    ------
    SpectrumError
        with the reason why no HDU holds a spectrum.
    FitsBeyond
        when only a general reader could tell.
    """
    units: list[Hdu] = []
    broken = ""
    try:
        for hdu in fitsio.hdus(data):
            units.append(hdu)
            if not hdu.complete:
                break
    except FitsError as error:
        broken = str(error)
    if not units:
        raise SpectrumError(f"{path}: {broken or 'is not a FITS file'}; get the file again from its source.")
    reasons: list[tuple[int, str]] = []
    beyond: FitsBeyond | None = None
    for hdu in _wanted(units, request, path):
        try:
            raw = _from_hdu(hdu, units, request)
        except FitsBeyond as error:
            beyond = error
            continue
        except FitsError as error:
            reasons.append((5 if hdu.complete else 6, str(error)))
            continue
        if isinstance(raw, RawSpectrum):
            headers = [hdu.header] if hdu.number == 0 else [hdu.header, units[0].header]
            _describe(raw, headers)
            if broken or any(not h.complete for h in units):
                raw.notes.append("the file is cut off behind the spectrum")
            return raw
        reasons.append(raw)
    if beyond is not None:
        raise beyond
    if broken:
        reasons.append((6, broken))
    weight, why = max(reasons, default=(0, "the FITS file holds no data"))
    cure = (
        "the file is cut off or damaged: get it again from its source."
        if weight >= 6
        else "check that this is an extracted, wavelength-calibrated spectrum."
    )
    raise SpectrumError(f"{path}: {why}; {cure}")


def _wanted(units: list[Hdu], request: Request, path: str) -> list[Hdu]:
    if request.hdu is None:
        return units
    want = str(request.hdu).strip().upper()
    chosen = [h for h in units if h.name == want or str(h.number) == want]
    if not chosen:
        names = ", ".join(str(h) for h in units[:12])
        raise SpectrumError(f"{path}: has no HDU {request.hdu}; it has {names}.")
    return chosen


def _describe(raw: RawSpectrum, headers: list[fitsio.Header]) -> None:
    if raw.medium == "unknown":
        raw.medium, raw.medium_source = hints.medium_of(headers)
    for key, value in hints.meta_of(headers).items():
        raw.meta.setdefault(key, value)


def _from_hdu(hdu: Hdu, units: list[Hdu], request: Request) -> RawSpectrum | tuple[int, str]:
    """The spectrum in one HDU, or (weight, reason) why there is none; the weightiest reason is told."""
    if hdu.kind == "image":
        return _from_image(hdu, units, request)
    if hdu.kind == "table":
        if hdu.header.get("ZIMAGE") is True:
            raise FitsBeyond(f"{hdu} is a compressed image")
        return _from_table(hdu, units, request)
    if hdu.kind == "ascii table":
        raise FitsBeyond(f"{hdu} is an ASCII table")
    return 0, f"{hdu} is of kind {hdu.kind}, which holds no spectrum"


# --- images ---------------------------------------------------------------------------------------------------------


def _from_image(hdu: Hdu, units: list[Hdu], request: Request) -> RawSpectrum | tuple[int, str]:
    shape = hdu.shape
    long = [i for i, length in enumerate(shape) if length > 1]
    if not shape or 0 in shape or not long:
        return 0, f"{hdu} holds no data"
    role = role_of(hdu.name)[0] if hdu.name else "flux"
    if role in ("std", "var", "ivar", "snr", "bad", "wave") and request.hdu is None:
        return 1, f"{hdu} holds no flux"
    sizes = [shape[i] for i in long]
    if len(long) > 2 or (len(long) == 2 and min(sizes) > MAX_COMPANIONS and request.row is None):
        text = " x ".join(str(s) for s in shape[:4]) + (" x ..." if len(shape) > 4 else "")
        several = len(long) == 2 and ("COEFF0" in hdu.header or max(sizes) > 4 * min(sizes))
        hint = " (a row of it can be picked: read as row=1, row=2 ...)" if several else ""
        return 4, f"{hdu} is a {text} image, not a one-dimensional spectrum{hint}"
    if max(sizes) > fitsio.MAX_CELLS:
        hdu.need()
        return 4, f"{hdu} has {max(sizes)} pixels along the spectrum, too many for one spectrum"
    values = fitsio.image(hdu)
    values = values.reshape([s for s in values.shape if s > 1])
    axis = long[0] + 1
    if values.ndim == 1:
        rows = values[None, :]
    elif sizes[0] < sizes[1] and request.row is None and sizes[0] <= MAX_COMPANIONS:
        rows, axis = values.T, long[1] + 1
    else:
        rows = values
    n = rows.shape[1]
    if request.row is None and "APNUM2" in hdu.header and len(rows) > 1 and axis == 1 and shape[1:2] == (len(rows),):
        return 5, f"{hdu} holds {len(rows)} apertures; pick one (read as row=1, row=2 ...)"
    pick = request.row or 0
    if request.row is not None:
        if not 0 <= pick < len(rows):
            return 5, f"{hdu} has {len(rows)} rows, so there is no row {pick + 1}"
    found = dispersion.axis_of(hdu.header, n, axis, pick)
    if request.row is not None:
        rows = rows[pick : pick + 1]
    raw = _name_rows(rows, hdu, found)
    if found is not None:
        raw.wave, raw.wave_unit, raw.wave_is_log = found.values, found.unit, found.log
    if raw.wave.size == 0 or role_of(_extension_of(units, hdu, "wave"))[0] == "wave":
        _wave_extension(raw, hdu, units)
    if raw.wave.size == 0:
        return 3, f"{hdu} says nothing about wavelengths (no CRVAL1 with CDELT1 or CD1_1, no wavelength row or column)"
    raw.where = str(hdu)
    raw.flux_unit = raw.flux_unit or hdu.header.word("BUNIT")
    if raw.error is None and request.hdu is None:
        _companions(raw, hdu, units, request.row)
    return raw


def _extension_of(units: list[Hdu], hdu: Hdu, role: str) -> str:
    for other in units:
        if other is not hdu and other.kind == "image" and other.name and role_of(other.name)[0] == role:
            return other.name
    return ""


def _flat(hdu: Hdu) -> FloatArray:
    return fitsio.image(hdu).ravel()


def _wave_extension(raw: RawSpectrum, hdu: Hdu, units: list[Hdu]) -> None:
    for other in units:
        if other is hdu or not other.complete:
            continue
        if other.kind == "image" and other.name and role_of(other.name)[0] == "wave":
            values = _flat(other)
            if values.size == raw.flux.size:
                raw.wave, raw.wave_unit = values, other.header.word("BUNIT")
                raw.wave_is_log = log_of(other.name)
                return
        if other.kind == "table" and raw.wave.size == 0 and other.header.get("ZIMAGE") is not True:
            for column in fitsio.columns(other):
                if role_of(column.name)[0] == "wave" and column.code not in "ACM":
                    values = fitsio.column_values(other, column).ravel()
                    if values.size == raw.flux.size:
                        raw.wave, raw.wave_unit, raw.wave_is_log = values, column.unit, log_of(column.name)
                        return


def _companions(raw: RawSpectrum, hdu: Hdu, units: list[Hdu], row: int | None) -> None:
    """Uncertainties and mask in image extensions of their own; of a stack of spectra, those of the row picked."""
    n = raw.flux.size
    for other in units:
        if other is hdu or other.kind != "image" or not other.complete or not other.shape:
            continue
        size = int(np.prod(other.shape, dtype=object))
        if size != n and (row is None or other.shape != hdu.shape):
            continue
        role = role_of(other.name)[0] if other.name else ""
        if role not in ("std", "var", "ivar", "snr", "bad", ""):
            continue
        values = _flat(other)
        if size != n and row is not None:
            values = values.reshape(-1, n)[row]
        if role == "bad":
            raw.bad = values != 0
        elif role and raw.error is None:
            raw.error, raw.error_kind = values, _error_kind(role)
        elif not role and raw.error is None and other.number == hdu.number + 1:
            _second(raw, values, f"unnamed {other}")


def _error_kind(role: str) -> ErrorKind:
    kinds: dict[str, ErrorKind] = {"std": "std", "var": "var", "ivar": "ivar", "snr": "snr"}
    return kinds[role]


def _name_rows(rows: FloatArray, hdu: Hdu, found: dispersion.Axis | None) -> RawSpectrum:
    """Which row of a small stack is flux, wavelength, uncertainty or mask."""
    header = hdu.header
    raw = RawSpectrum(np.empty(0), rows[0])
    if len(rows) == 1:
        return raw
    said = [_row_word(header, i + 1) for i in range(len(rows))]
    if any(said):
        for row, word in zip(rows, said):
            low = word.lower()
            role = role_of(word)[0]
            if low.startswith("sigma") or role == "std":
                raw.error, raw.error_kind = row, "std"
            elif role in ("var", "ivar", "snr"):
                raw.error, raw.error_kind = row, _error_kind(role)
            elif role == "wave":
                raw.wave = row
        flux = [
            i
            for i, word in enumerate(said)
            if word.lower().startswith(("spectrum", "flux")) or role_of(word)[0] == "flux"
        ]
        raw.flux = rows[flux[0] if flux else 0]
        return raw
    survey = hints.survey_of(header)
    waves = [i for i, row in enumerate(rows) if _is_wave(row)]
    if survey == "LAMOST" or (len(rows) == 5 and waves == [2]):
        raw.flux, raw.error, raw.error_kind = rows[0], rows[1], "ivar"
        raw.wave = rows[2]
        if len(rows) > 3:
            _mark(raw, rows[3])
        return raw
    if "COEFF0" in header and len(rows) >= 3:
        raw.flux, raw.error, raw.error_kind = rows[0], rows[2], "std"
        return raw
    if waves and len(waves) < len(rows):
        raw.wave = rows[waves[0]]
        rest = [row for i, row in enumerate(rows) if i not in waves]
        raw.flux = rest[0]
        if len(rest) > 1:
            _second(raw, rest[1])
        return raw
    if len(rows) == 4 and len(hdu.shape) == 3:
        raw.error, raw.error_kind = rows[3], "std"
        raw.notes.append("four bands: taken as spectrum, raw, background, sigma")
        return raw
    _second(raw, rows[-1] if len(rows) != 2 else rows[1])
    return raw


def _second(raw: RawSpectrum, row: FloatArray, what: str = "a further row") -> None:
    """Take values that nothing names as one standard deviation, if they can be."""
    finite = row[np.isfinite(row)]
    if finite.size and finite.min() >= 0 and np.nanmedian(row) < np.nanmedian(np.abs(raw.flux)):
        raw.error, raw.error_kind = row, "std"
        raw.notes.append(f"{what} taken as one standard deviation")
    else:
        raw.notes.append(f"{what} left out")


def _row_word(header: fitsio.Header, i: int) -> str:
    for stem in ("BANDID", "ARRAY", "ROW", "PLANE", "CRAY", "EXTID", "NAXISN"):
        word = header.word(f"{stem}{i}")
        if word and not word.replace(".", "").isdigit():
            return word
    return ""


def _mark(raw: RawSpectrum, flags: FloatArray) -> None:
    """Bad pixels from flags; bits that mark most of a spectrum are remarks on it, and then zero weight tells."""
    bad = flags != 0
    if raw.error is not None and raw.error_kind == "ivar" and np.mean(bad) > 0.5 and np.nanmax(flags) > 1:
        raw.notes.append(
            f"the mask marks {100 * np.mean(bad):.0f} % of the pixels: left out, zero weights tell the bad ones"
        )
        return
    raw.bad = bad


def _is_wave(row: FloatArray) -> bool:
    if row.size < 3 or not np.all(np.isfinite(row)):
        return False
    step = np.diff(row)
    if not (np.all(step > 0) or np.all(step < 0)):
        return False
    lo, hi = min(row[0], row[-1]), max(row[0], row[-1])
    return bool(
        (lo > 900 and hi < 60000) or (lo > 150 and hi < 2600) or (lo > 0.15 and hi < 2.6) or (lo > 3.2 and hi < 4.5)
    )


#: Columns (lower case, no underscores) that only the tables of these surveys have together.
_SURVEY_COLUMNS = {
    "SDSS": {"loglam", "flux", "ivar", "andmask"},
    "LAMOST": {"wavelength", "flux", "ivar", "andmask", "ormask"},
}


# --- binary tables --------------------------------------------------------------------------------------------------


def _from_table(hdu: Hdu, units: list[Hdu], request: Request) -> RawSpectrum | tuple[int, str]:
    header = hdu.header
    all_columns = [c for c in fitsio.columns(hdu)]
    usable = [c for c in all_columns if c.code not in "AXCM"]
    picked = _pick(usable, request, hdu)
    if "wave" not in picked or "flux" not in picked:
        _pick_by_values(picked, usable, hdu)
    wave, flux = picked.get("wave"), picked.get("flux")
    names = ", ".join(c.name for c in all_columns[:12])
    axis: dispersion.Axis | None = None
    if flux is None and header.whole("NAXIS2") < 1:
        return 2, f"{hdu} is a table with no rows"
    if flux is None:
        return 2, f"{hdu} is a table without a flux column (it has {names})"
    if header.whole("NAXIS2") > fitsio.MAX_CELLS:
        hdu.need()
        return 4, f"{hdu} has {header.whole('NAXIS2')} rows, too many for one spectrum"
    flux_values = _cells(hdu, flux, request)
    if wave is None:
        if "COEFF0" in header or "CRVAL1" in header:
            axis = dispersion.axis_of(header, flux_values.size)
        if axis is None and "COEFF0" in units[0].header:
            axis = dispersion.axis_of(units[0].header, flux_values.size)
        if axis is None:
            return 2, f"{hdu} is a table without a wavelength column (it has {names})"
        raw = RawSpectrum(axis.values, flux_values, axis.unit, "", axis.log)
    else:
        raw = RawSpectrum(
            _cells(hdu, wave, request), flux_values, wave.unit or split_unit(wave.name)[1], "", log_of(wave.name)
        )
    raw.flux_unit = flux_word(flux.name, flux.unit or split_unit(flux.name)[1])
    for role in ("std", "ivar", "var", "snr"):
        column = picked.get(role)
        if column is not None:
            raw.error, raw.error_kind = _cells(hdu, column, request), _error_kind(role)
            break
    if "bad" in picked:
        _mark(raw, _cells(hdu, picked["bad"], request))
    elif "good" in picked:
        raw.bad = _cells(hdu, picked["good"], request) == 0
    raw.where = f"columns {wave.name if wave else 'of the header'} and {flux.name} of {hdu}"
    if wave is not None:
        found = hints.text_medium(f"wavelength {wave.name} {wave.unit}".replace("_", " "))
        if found != "unknown":
            raw.medium, raw.medium_source = found, f"column name {wave.name}"
        elif hints.medium_of([u.header for u in units])[0] == "unknown":
            # survey tables cut out of their file keep their columns and lose the header that names the survey
            have = {c.name.lower().replace("_", "") for c in all_columns}
            for survey, columns in _SURVEY_COLUMNS.items():
                if columns <= have:
                    raw.medium, raw.medium_source = "vacuum", f"{survey} spectra are in vacuum, by the columns"
    _wdisp(raw, hdu, all_columns)
    return raw


def _wdisp(raw: RawSpectrum, hdu: Hdu, all_columns: list[fitsio.Column]) -> None:
    """SDSS column ``wdisp``: one standard deviation of the line spread in pixels of 1e-4 dex."""
    column = next((c for c in all_columns if c.name.lower() == "wdisp"), None)
    if column is None or column.repeat != 1:
        return
    sigma_pixels = fitsio.column_values(hdu, column).ravel()
    wave = 10.0**raw.wave if raw.wave_is_log else raw.wave
    if sigma_pixels.size == wave.size and np.any(sigma_pixels > 0):
        near = (sigma_pixels > 0) & (wave > 4000) & (wave < 5500)
        if near.any():
            raw.meta["fwhm_angstrom"] = float(np.median(2.3548 * sigma_pixels[near] * wave[near] * 1e-4 * np.log(10.0)))


def _pick(columns: list[fitsio.Column], request: Request, hdu: Hdu) -> dict[str, fitsio.Column]:
    """The column of each role: those asked for, else the best name of each."""
    best: dict[str, tuple[int, fitsio.Column]] = {}
    for column in columns:
        role, rank = role_of(column.name)
        if role in ("other", "index"):
            continue
        if role not in best or rank > best[role][0]:
            best[role] = (rank, column)
    out = {role: column for role, (_rank, column) in best.items()}
    for asked, want in request.columns.items():
        match = [
            c for i, c in enumerate(columns) if c.name == want or c.name.lower() == want.lower() or str(i + 1) == want
        ]
        if not match:
            raise FitsError(f"{hdu} has no numeric column {want}")
        if asked in ("std", "var", "ivar", "snr"):
            for other in ("std", "var", "ivar", "snr"):
                out.pop(other, None)
        out[asked] = match[0]
    return out


def _pick_by_values(picked: dict[str, fitsio.Column], columns: list[fitsio.Column], hdu: Hdu) -> None:
    """Where names tell nothing: the first steady column in reach is the wavelength, the next of its size the flux."""
    if not hdu.complete or not 1 <= hdu.header.whole("NAXIS2") <= 5_000_000:
        return
    if "wave" not in picked and "COEFF0" not in hdu.header and "CRVAL1" not in hdu.header:
        for column in columns[:8]:
            if column in picked.values() or column.pointer or never_wavelength(column.name):
                continue
            values = fitsio.column_values(hdu, column)
            if min(values.shape) == 1 and values.size >= 10 and is_steady(values.ravel()) and in_reach(values.ravel()):
                picked["wave"] = column
                break
    if "wave" in picked and "flux" not in picked:
        wave = picked["wave"]
        for column in columns[columns.index(wave) + 1 :] + columns[: columns.index(wave)]:
            if (
                column not in picked.values()
                and column.repeat == wave.repeat
                and role_of(column.name)[0] == "other"
                and not is_companion(column.name)
            ):
                picked["flux"] = column
                break


def _cells(hdu: Hdu, column: fitsio.Column, request: Request) -> Any:
    values = fitsio.column_values(hdu, column)
    if values.shape[0] == 1 or values.shape[1] == 1:
        return values.ravel()
    if request.row is not None:
        if request.row >= values.shape[0]:
            raise FitsError(f"{hdu} has {values.shape[0]} rows, so there is no row {request.row + 1}")
        return values[request.row]
    raise FitsError(f"{hdu} holds {values.shape[0]} spectra, one a row; pick one (read as row=1, row=2 ...)")
