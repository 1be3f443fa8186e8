"""The same measurements by specutils, call by call: the slow reference the quick path is held to.

Values come from ``specutils.analysis.equivalent_width``, ``specutils.analysis.fwhm`` and
``specutils.fitting.fit_lines``. Uncertainties do not: the equivalent width's there is too large by the square root of
the pixel count, and its direct width fails without a word where the window cuts the line.
"""

from __future__ import annotations

import warnings
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from starfathom.classify.lines.direct import BulkLines
from starfathom.classify.lines.features import Feature
from starfathom.classify.lines.profile_fits import BulkFits
from starfathom.classify.lines.windows import grown, growth_angstrom

if TYPE_CHECKING:
    from specutils import Spectrum

FloatArray = NDArray[np.float64]


@dataclass(frozen=True)
class ReferenceLines:
    """specutils values of one spectrum: ``ew_direct``, ``fwhm_direct`` (f,), ``ew_fit``, ``fwhm_fit``, ``center_fit``
    (c,) as in ``BulkFits``; NaN where not measured or where our fit found no line."""

    ew_direct: FloatArray
    fwhm_direct: FloatArray
    ew_fit: FloatArray
    fwhm_fit: FloatArray
    center_fit: FloatArray


def reference_lines(wave_angstrom: FloatArray, lines: BulkLines, fits: BulkFits, i: int = 0) -> ReferenceLines:
    """Measure spectrum ``i`` of ``lines`` with specutils on the same windows and pseudo-continua.

    The pseudo-continuum is a straight line through our side-band means; for fits it is raised by what our profile
    takes from the side bands. Fits start from the rest wavelengths and the line spread, not from our answer.
    """
    import astropy.units as u
    from specutils import SpectralRegion
    from specutils.analysis import equivalent_width, fwhm

    f, c = len(lines.features), len(fits.labels)
    ew_direct, fwhm_direct = np.full(f, np.nan), np.full(f, np.nan)
    out = {name: np.full(c, np.nan) for name in ("ew_fit", "fwhm_fit", "center_fit")}
    growth = float(growth_angstrom(lines.fwhm_angstrom[i]))
    for k, feature in enumerate(lines.features):
        if not np.isfinite(lines.ew[i, k]):
            continue
        window, _, _ = grown(feature, growth)
        span = _span(wave_angstrom, window)
        level = _continuum(wave_angstrom[span], feature, growth, lines, i, k, wave_angstrom)
        flux, sigma = lines.filled_flux[i, span] / level, lines.sigma[i, span] / level
        region = SpectralRegion(window[0] * u.AA, window[1] * u.AA)
        ew_direct[k] = equivalent_width(_spectrum(wave_angstrom[span], flux, sigma), regions=[region])[0].to_value(u.AA)
        bump = _spectrum(wave_angstrom[span], 1.0 - flux, sigma)
        if feature.kind != "band":
            fwhm_direct[k] = fwhm(bump, regions=[region])[0].to_value(u.AA)
        columns = np.flatnonzero(fits.feature == k)
        if columns.size and fits.detected[i, columns].all():
            loss = fits.blue_loss[i, columns[0]], fits.red_loss[i, columns[0]]
            level = _continuum(wave_angstrom[span], feature, growth, lines, i, k, wave_angstrom, loss)
            bump = _spectrum(wave_angstrom[span], 1.0 - lines.filled_flux[i, span] / level,
                             lines.sigma[i, span] / level)
            for name, values in _fit(bump, feature, window, lines, fits, i, columns).items():
                out[name][columns] = values
    return ReferenceLines(ew_direct, fwhm_direct, **out)


def _span(wave: FloatArray, window: tuple[float, float]) -> slice:
    """The window and three pixels on either side, so that pixel edges in the window are those of the whole spectrum."""
    return slice(max(0, int(np.searchsorted(wave, window[0], "left")) - 3),
                 int(np.searchsorted(wave, window[1], "right")) + 3)


def _spectrum(wave: FloatArray, values: FloatArray, sigma: FloatArray) -> Spectrum:
    import astropy.units as u
    from astropy.nddata import StdDevUncertainty
    from specutils import Spectrum

    return Spectrum(flux=values * u.dimensionless_unscaled, spectral_axis=wave * u.AA,
                    uncertainty=StdDevUncertainty(sigma))


def _continuum(x: FloatArray, feature: Feature, growth: float, lines: BulkLines, i: int, k: int, wave: FloatArray,
               loss: tuple[float, float] = (0.0, 0.0)) -> FloatArray:
    _, blue, red = grown(feature, growth)
    low, high = lines.blue[i, k], lines.red[i, k]
    if low == high or blue is None or red is None:
        return np.full(x.size, low / (1.0 - max(loss, key=abs)))
    middles = []
    for lo, hi in (blue, red):
        inside = wave[(wave >= lo) & (wave <= hi)]
        middles.append(inside.mean() if inside.size else 0.5 * (lo + hi))
    share = (x - middles[0]) / (middles[1] - middles[0])
    return (low + (high - low) * share) / (1.0 - (loss[0] + (loss[1] - loss[0]) * share))


def _fit(bump: Spectrum, feature: Feature, window: tuple[float, float], lines: BulkLines, fits: BulkFits, i: int,
         columns: NDArray[np.intp]) -> dict[str, FloatArray]:
    """Fit the profile that won our comparison, tied as there, with ``fit_lines``."""
    import astropy.units as u
    from astropy.modeling.fitting import TRFLSQFitter
    from specutils.fitting import fit_lines

    shared = len(columns) > 1 and np.ptp(fits.sigma[i, columns]) == 0.0
    model: Any = None
    for n, c in enumerate(columns):
        part = _start(bump, fits, i, int(c), float(lines.fwhm_angstrom[i]))
        if np.isnan(fits.center[i, c]):
            getattr(part, "x_0" if fits.voigt[i, c] else "mean").fixed = True
        if n and shared:
            _tie_to_first(part, float(fits.wavelength[c] - fits.wavelength[columns[0]]))
        model = part if model is None else model + part
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        fitted = fit_lines(bump, model, fitter=TRFLSQFitter(), window=(window[0] * u.AA, window[1] * u.AA),
                           weights="unc", estimate_jacobian=shared)   # analytic derivatives do not know of ties
    parts = [fitted] if len(columns) == 1 else [fitted[n] for n in range(len(columns))]
    areas, widths, centres = [], [], []
    for part in parts:
        if "fwhm_G" in part.param_names:
            lorentz, gauss = abs(_number(part.fwhm_L)), abs(_number(part.fwhm_G))
            areas.append(_number(part.amplitude_L) * np.pi * lorentz / 2.0)
            widths.append(0.5346 * lorentz + np.sqrt(0.2166 * lorentz**2 + gauss**2))
            centres.append(_number(part.x_0))
        else:
            areas.append(_number(part.amplitude) * abs(_number(part.stddev)) * np.sqrt(2.0 * np.pi))
            widths.append(abs(_number(part.stddev)) * np.sqrt(8.0 * np.log(2.0)))
            centres.append(_number(part.mean))
    return {"ew_fit": np.array(areas), "fwhm_fit": np.array(widths), "center_fit": np.array(centres)}


def _number(parameter: Any) -> float:
    return float(getattr(parameter, "value", parameter))


def _start(bump: Spectrum, fits: BulkFits, i: int, c: int, spread: float) -> Any:
    import astropy.units as u
    from astropy.modeling.models import Gaussian1D, Voigt1D

    rest = float(fits.wavelength[c])
    x, y = bump.spectral_axis.to_value(u.AA), bump.flux.value
    depth = float(y[np.argmin(np.abs(x - rest))]) or 0.01
    if fits.voigt[i, c]:
        return Voigt1D(x_0=rest * u.AA, amplitude_L=2.0 * depth, fwhm_L=spread * u.AA, fwhm_G=1.3 * spread * u.AA,
                       bounds={"fwhm_G": (spread, None), "fwhm_L": (1e-3, None)})
    return Gaussian1D(amplitude=depth, mean=rest * u.AA, stddev=1.2 * spread / 2.3548 * u.AA)


def _tie_to_first(part: Any, offset: float) -> None:
    import astropy.units as u

    if "mean" in part.param_names:
        part.mean.tied = lambda m: (m.mean_0.quantity if m.mean_0.unit else m.mean_0.value * u.AA) + offset * u.AA
        part.stddev.tied = lambda m: m.stddev_0
    else:
        part.x_0.tied = lambda m: m.x_0_0 + offset
        part.fwhm_G.tied = lambda m: m.fwhm_G_0
        part.fwhm_L.tied = lambda m: m.fwhm_L_0
