"""From the arrays of a file to a plain spectrum: units, order, blemishes, and the reasons why it may be no use."""

from __future__ import annotations

import numpy as np

from starfathom.classify.errors import SpectrumError
from starfathom.classify.reading.raw import RawSpectrum, as_float
from starfathom.classify.reading.units import (
    C_ANGSTROM_PER_S,
    HC_EV_ANGSTROM,
    SpectralUnit,
    flux_kind,
    logarithm_of,
    spectral_unit,
)
from starfathom.classify.spectrum import BoolArray, FloatArray, PlainSpectrum

#: Wavelengths that can be used at all, in angstrom.
WAVE_MIN_ANGSTROM, WAVE_MAX_ANGSTROM = 2000.0, 25000.0
#: Fewest valid pixels a spectrum must have.
MIN_PIXELS = 100
#: Most pixels a one-dimensional spectrum may have.
MAX_PIXELS = 4_000_000
_NO_WAVELENGTHS = "the wavelengths are all missing, infinite or not numbers; check the dispersion"
#: d(flux)/flux per magnitude, 0.4 ln 10.
FLUX_PER_MAG = 0.4 * np.log(10.0)


def finish(raw: RawSpectrum, path: str) -> PlainSpectrum:
    """Turn what a format reader found into a :class:`PlainSpectrum`.

    Raises
    ------
    SpectrumError
        when wavelengths lie outside 2000 A to 2.5 um, or fewer than 100 pixels are valid, or the flux is all NaN,
        all zero, constant or negative throughout.
    """
    notes = list(raw.notes)
    wave = as_float(raw.wave)
    flux = as_float(raw.flux)
    if wave.size != flux.size:
        raise SpectrumError(
            f"{path}: {wave.size} wavelengths for {flux.size} flux values in {raw.where or 'the file'}; "
            "check which columns belong together."
        )
    if wave.size > MAX_PIXELS:
        raise SpectrumError(f"{path}: {wave.size} pixels are too many for one spectrum; extract or rebin it first.")
    error = None if raw.error is None else as_float(raw.error)
    if error is not None and error.size != flux.size:
        notes.append(f"{error.size} uncertainties for {flux.size} flux values: uncertainties left out")
        error = None
    bad = np.zeros(flux.size, bool)
    if raw.bad is not None:
        marked = np.asarray(raw.bad).ravel()
        if marked.size == flux.size:
            bad = marked.astype(bool)
        else:
            notes.append("the mask has another length than the flux: mask left out")

    wave, from_frequency = _to_angstrom(wave, raw, path, notes)
    medium, medium_source = raw.medium, raw.medium_source
    if from_frequency and medium == "unknown":
        medium, medium_source = "vacuum", "computed from frequency"

    kind = flux_kind(raw.flux_unit)
    in_magnitudes = kind in ("mag", "mag_ab", "mag_st")
    flux = _despike(flux)
    sigma, doubtful = _to_sigma(flux, error, raw.error_kind, in_magnitudes, notes)
    if not in_magnitudes:
        _check_content(flux, path)
        bad |= filled(flux)
    flux, sigma = _to_f_lambda(wave, flux, sigma, kind, notes)

    with np.errstate(invalid="ignore"):
        reach = (wave >= WAVE_MIN_ANGSTROM) & (wave <= WAVE_MAX_ANGSTROM)
        valid = reach & ~bad & ~doubtful & np.isfinite(flux)
        if sigma is not None:
            valid &= np.isfinite(sigma) & (sigma > 0)
    _check_reach(wave, reach, path, raw.wave_unit)
    if sigma is not None and not valid.any() and (reach & ~bad & np.isfinite(flux)).sum() >= MIN_PIXELS:
        notes.append("the uncertainties are nowhere positive: left out")
        sigma = None
        valid = reach & ~bad & np.isfinite(flux)

    keep = reach
    if not keep.all():
        outside = int(np.count_nonzero(np.isfinite(wave) & ~reach))
        if outside:
            notes.append(f"{outside} pixels outside {WAVE_MIN_ANGSTROM:.0f}-{WAVE_MAX_ANGSTROM:.0f} A left out")
        wave, flux, valid = wave[keep], flux[keep], valid[keep]
        sigma = None if sigma is None else sigma[keep]
    wave, flux, sigma, valid = _ascending(wave, flux, sigma, valid, notes)
    flux, sigma = _scaled(flux, sigma, valid)
    valid &= np.isfinite(flux)
    if sigma is not None:
        valid &= np.isfinite(sigma) & (sigma > 0)
    _check_pixels(flux, valid, path)

    flux = np.where(valid, flux, 0.0)
    if sigma is not None:
        sigma = np.where(valid, sigma, float(np.max(sigma[valid])))
    meta = dict(raw.meta)
    if "flux_calibrated" not in meta and kind in ("f_lambda", "f_nu", "nu_f_nu", "mag_ab", "mag_st", "photons"):
        meta["flux_calibrated"] = True
    elif kind in ("counts", "normalised"):
        meta["flux_calibrated"] = False
    return PlainSpectrum(wave, flux, sigma, valid, medium, medium_source, path, tuple(dict.fromkeys(notes)), meta)


def _to_angstrom(wave: FloatArray, raw: RawSpectrum, path: str, notes: list[str]) -> tuple[FloatArray, bool]:
    """Wavelengths in angstrom, and whether they came from frequencies (so are vacuum by nature)."""
    if not np.isfinite(wave).any():
        raise SpectrumError(f"{path}: {_NO_WAVELENGTHS}.")
    with np.errstate(over="ignore", divide="ignore", invalid="ignore"):
        log, inner = logarithm_of(raw.wave_unit)
        if log:
            raw.wave_is_log, raw.wave_unit = raw.wave_is_log or log, inner
        unit = spectral_unit(raw.wave_unit) if raw.wave_unit else None
        if raw.wave_is_log:
            wave = 10.0**wave if raw.wave_is_log == "log10" else np.exp(wave)
            if unit is None:
                inside = _share_inside(wave)
                unit = SpectralUnit("wavelength", 1.0) if inside > 0 or _share_inside(wave * 10) == 0 else None
        if (
            unit is not None
            and unit.kind == "wavelength"
            and not raw.wave_is_log
            and _share_inside(wave * unit.scale) == 0
        ):
            finite = wave[np.isfinite(wave)]
            if finite.min() >= 3.3 and finite.max() <= 4.4:
                notes.append(f"wavelengths stated in {raw.wave_unit} look like log10 of angstrom: taken so")
                return 10.0**wave, False
        if unit is None:
            if raw.wave_unit:
                notes.append(f"wavelength unit {raw.wave_unit!r} is not known: told from the values")
            unit, log = guess_spectral_unit(wave, path)
            if log:
                wave = 10.0**wave if log == "log10" else np.exp(wave)
            if not raw.wave_unit:
                told = {1.0: "A", 10.0: "nm", 1e4: "um", 1e10: "m"}.get(unit.scale, "Hz")
                if unit.kind == "frequency":
                    told = "Hz"
                if told != "A" or log:
                    notes.append(f"wavelength unit not stated: {log + ' of ' if log else ''}{told} from the values")
        if unit.kind == "wavelength":
            return wave * unit.scale if unit.scale != 1.0 else wave, False
        constant = {"frequency": C_ANGSTROM_PER_S, "wavenumber": 1e8, "energy": HC_EV_ANGSTROM}[unit.kind]
        return constant / (wave * unit.scale), True


def _share_inside(wave: FloatArray, lo: float = WAVE_MIN_ANGSTROM, hi: float = WAVE_MAX_ANGSTROM) -> float:
    finite = wave[np.isfinite(wave)]
    return float(np.mean((finite >= lo) & (finite <= hi))) if finite.size else 0.0


def guess_spectral_unit(wave: FloatArray, path: str) -> tuple[SpectralUnit, str]:
    """Unit told from the values alone, and "log10" or "ln" when they look like logarithms of angstrom.

    Raises SpectrumError when the values fit no unit that would put them in the optical.
    """
    finite = wave[np.isfinite(wave)]
    if finite.size == 0:
        raise SpectrumError(f"{path}: {_NO_WAVELENGTHS}.")
    lo, mid, hi = float(finite.min()), float(np.median(finite)), float(finite.max())

    def optical(scale: float) -> bool:
        return _share_inside(finite, 3000.0 / scale, 11000.0 / scale) > 0.05

    if lo >= 850 and (optical(1.0) or (lo >= WAVE_MIN_ANGSTROM and hi <= WAVE_MAX_ANGSTROM)):
        return SpectralUnit("wavelength", 1.0), ""
    if 150 <= lo <= 700 and optical(10.0):
        return SpectralUnit("wavelength", 10.0), ""
    if 0.15 <= lo <= 0.7 and optical(1e4):
        return SpectralUnit("wavelength", 1e4), ""
    if lo >= 3.3 and hi <= 4.4:
        return SpectralUnit("wavelength", 1.0), "log10"
    if lo >= 7.6 and hi <= 10.13:
        return SpectralUnit("wavelength", 1.0), "ln"
    if 2e-7 <= mid <= 2.5e-6 and lo > 0 and hi < 1e-4:
        return SpectralUnit("wavelength", 1e10), ""
    if 1.2e14 <= mid <= 1.5e15 and lo > 1e13:
        return SpectralUnit("frequency", 1.0), ""
    if 1.2e5 <= mid <= 1.5e6 and lo > 1e4:
        return SpectralUnit("frequency", 1e9), ""
    raise SpectrumError(
        f"{path}: wavelengths from {lo:g} to {hi:g} with no unit fit nothing between 2000 A and 2.5 um; "
        "check the dispersion, or state the unit."
    )


def _check_reach(wave: FloatArray, reach: BoolArray, path: str, unit: str) -> None:
    if reach.any():
        return
    finite = wave[np.isfinite(wave)]
    if finite.size == 0:
        raise SpectrumError(f"{path}: {_NO_WAVELENGTHS}.")
    said = f" (unit read as {unit})" if unit else ""
    raise SpectrumError(
        f"{path}: wavelengths from {finite.min():.5g} to {finite.max():.5g} A{said} lie outside 2000 A to 2.5 um; "
        "check the dispersion and its unit."
    )


def _check_content(flux: FloatArray, path: str) -> None:
    finite = flux[np.isfinite(flux)]
    if finite.size == 0:
        raise SpectrumError(f"{path}: the flux is NaN or missing in every pixel; extract the spectrum again.")
    if not finite.any():
        raise SpectrumError(f"{path}: the flux is zero in every pixel; extract the spectrum again.")
    nonzero = finite[finite != 0]
    if finite.size >= 3 and nonzero.min() == nonzero.max():
        raise SpectrumError(f"{path}: the flux is constant ({nonzero[0]:g}), so there is no spectrum in it.")
    if nonzero.max() <= 0:
        raise SpectrumError(f"{path}: the flux is negative throughout; check the sky subtraction or the sign.")


def _check_pixels(flux: FloatArray, valid: BoolArray, path: str) -> None:
    n = int(np.count_nonzero(valid))
    if n < MIN_PIXELS:
        raise SpectrumError(
            f"{path}: only {n} of {flux.size} pixels between 2000 A and 2.5 um are valid, fewer than {MIN_PIXELS}; "
            "check the mask, the zeros and the uncertainties."
        )
    good = flux[valid]
    if good.min() == good.max():
        raise SpectrumError(f"{path}: the flux is constant ({good[0]:g}), so there is no spectrum in it.")
    if np.mean(good > 0) < 0.01:
        raise SpectrumError(f"{path}: the flux is negative throughout; check the sky subtraction or the sign.")


def _despike(flux: FloatArray) -> FloatArray:
    """Numbers no flux can be (1e30 and the like used as a blank) as NaN."""
    with np.errstate(invalid="ignore"):
        size = np.abs(flux)
        blank = size >= 1e29
    if blank.any() and not blank.all():
        rest = size[~blank & np.isfinite(size)]
        if rest.size and np.median(rest) < 1e25:
            return np.where(blank, np.nan, flux)
    return flux


def filled(flux: FloatArray) -> BoolArray:
    """Pixels that hold a filling rather than a measurement, shape as ``flux``.

    Exact zeros count (except single zeros among small whole-number counts), and so does any other negative number or
    top value repeated without a break, as blanks and saturation are.
    """
    bad = flux == 0.0
    if bad.any():
        some = flux[~bad & np.isfinite(flux)]
        if some.size and np.median(np.abs(some)) < 30 and np.all(some == np.rint(some)):
            bad = bad & _in_runs(bad, 5)
    repeat = np.zeros(flux.size, bool)
    if flux.size > 4:
        same = flux[1:] == flux[:-1]
        if same.any():
            repeat[1:] |= same
            repeat[:-1] |= same
            top = np.nanmax(flux)
            suspect = repeat & ((flux < 0) | (flux == top))
            if suspect.any():
                # a top value counts as saturated only where it stays for four pixels; rounded data repeat by chance
                bad = bad | (suspect & _in_equal_runs(flux, 4) & _far(flux, top))
    return bad


def _far(flux: FloatArray, top: float) -> BoolArray:
    """Negative fillings, or a plateau at a top that is well above the median."""
    finite = flux[np.isfinite(flux)]
    middle = float(np.median(finite))
    return (flux < 0) | ((flux == top) & (top > 1.5 * abs(middle)))


def _in_runs(mask: BoolArray, n: int) -> BoolArray:
    """True where ``mask`` is True for at least ``n`` pixels on end."""
    edges = np.flatnonzero(np.diff(np.concatenate(([0], mask.view(np.int8), [0]))))
    out = np.zeros(mask.size, bool)
    for start, stop in zip(edges[::2], edges[1::2]):
        if stop - start >= n:
            out[start:stop] = True
    return out


def _in_equal_runs(flux: FloatArray, n: int) -> BoolArray:
    """True where the same value stands for at least ``n`` pixels on end."""
    starts = np.flatnonzero(np.concatenate(([True], flux[1:] != flux[:-1])))
    lengths = np.diff(np.append(starts, flux.size))
    return np.repeat(lengths >= n, lengths)


def _to_sigma(
    flux: FloatArray, error: FloatArray | None, kind: str, in_magnitudes: bool, notes: list[str]
) -> tuple[FloatArray | None, BoolArray]:
    """One standard deviation in the unit of ``flux``, and the pixels it shows to be bad."""
    doubtful = np.zeros(flux.size, bool)
    if error is None:
        return None, doubtful
    with np.errstate(all="ignore"):
        doubtful = ~np.isfinite(error) | (error <= 0)
        if kind == "std":
            sigma = error.copy()
        elif kind == "var":
            sigma = np.sqrt(error)
        elif kind == "ivar":
            sigma = 1.0 / np.sqrt(error)
        else:
            sigma = np.abs(flux) / error if not in_magnitudes else 1.0 / (error * FLUX_PER_MAG)
    if doubtful.all():
        notes.append("the uncertainties are nowhere positive: left out")
        return None, np.zeros(flux.size, bool)
    return sigma, doubtful


def _to_f_lambda(
    wave: FloatArray, flux: FloatArray, sigma: FloatArray | None, kind: str, notes: list[str]
) -> tuple[FloatArray, FloatArray | None]:
    """Flux per unit wavelength up to a constant."""
    with np.errstate(all="ignore"):
        if kind in ("mag", "mag_ab", "mag_st"):
            zero = np.nanmedian(flux)
            linear = 10.0 ** (-0.4 * (flux - zero))
            sigma = None if sigma is None else linear * FLUX_PER_MAG * sigma
            flux = linear
            if kind == "mag":
                notes.append("magnitudes taken as AB (per unit frequency)")
        factor: FloatArray | None = None
        if kind in ("f_nu", "mag_ab", "mag"):
            factor = 1.0 / wave**2
        elif kind in ("nu_f_nu", "photons"):
            factor = 1.0 / wave
        if factor is not None:
            factor = factor / np.nanmedian(factor)
            flux = flux * factor
            sigma = None if sigma is None else sigma * factor
    if kind == "unknown":
        notes.append("flux unit not stated: taken as per unit wavelength")
    return flux, sigma


def _ascending(
    wave: FloatArray, flux: FloatArray, sigma: FloatArray | None, valid: BoolArray, notes: list[str]
) -> tuple[FloatArray, FloatArray, FloatArray | None, BoolArray]:
    """Sorted by wavelength, pixels at the same wavelength averaged."""
    step = np.diff(wave)
    if np.all(step > 0):
        return wave, flux, sigma, valid
    if np.all(step < 0):
        order = np.arange(wave.size)[::-1]
    else:
        order = np.argsort(wave, kind="stable")
        if np.any(step < 0):
            notes.append("wavelengths were out of order: sorted")
    wave, flux, valid = wave[order], flux[order], valid[order]
    sigma = None if sigma is None else sigma[order]
    same = np.diff(wave) <= 0
    if not same.any():
        return wave, flux, sigma, valid
    group = np.concatenate(([0], np.cumsum(~same)))
    n = int(group[-1]) + 1
    notes.append(f"{wave.size - n} pixels at doubled wavelengths: averaged")
    weight = valid.astype(float)
    count = np.bincount(group, weight, n)
    with np.errstate(all="ignore"):
        mean = np.bincount(group, np.where(valid, flux, 0.0), n) / count
        if sigma is not None:
            sigma = np.sqrt(np.bincount(group, np.where(valid, sigma, 0.0) ** 2, n)) / count
    first = np.concatenate(([True], ~same))
    return wave[first], mean, sigma, count > 0


def _scaled(flux: FloatArray, sigma: FloatArray | None, valid: BoolArray) -> tuple[FloatArray, FloatArray | None]:
    """Flux as it is, or divided by its median size where squares of it would leave the range of a float."""
    size = float(np.median(np.abs(flux[valid]))) if valid.any() else 1.0
    if not np.isfinite(size) or size == 0 or 1e-60 < size < 1e60:
        return flux, sigma
    with np.errstate(all="ignore"):
        return flux / size, None if sigma is None else sigma / size
