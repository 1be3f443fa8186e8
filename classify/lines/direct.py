"""Direct measurement of every feature in many spectra at once: equivalent width, depth, widths at given depths.

The equivalent width is the sum of (1 - F/Fc) dlambda over whole pixels of a closed window, with Fc the straight line
through the means of two side bands. Its error follows from the pixels' own errors:

    sigma^2 = sum (sigma_i dlambda / Fc)^2 + covariance of resampled pixels + (width - W)^2 (sigma_c / Fc)^2,

the last term written out band by band, since both bands carry their own error.
"""

from __future__ import annotations

from dataclasses import dataclass, field
from functools import lru_cache
from typing import Any

import numpy as np
from numpy.typing import ArrayLike, NDArray

from starfathom.classify.errors import SpectrumError
from starfathom.classify.lines.features import FEATURES, TELLURIC, FeatureTable
from starfathom.classify.lines.noise import estimate_sigma
from starfathom.classify.lines.windows import Gather, WindowPlan, grown, growth_angstrom, plan_for

FloatArray = NDArray[np.float64]
BoolArray = NDArray[np.bool_]
LIGHT_KMS = 299792.458

#: Share of a window that may be interpolated over bad pixels.
MAX_MISSING = 0.2
#: Depths below the pseudo-continuum at which the full width of pressure-broadened lines is taken.
FIXED_DEPTHS = (0.1, 0.2, 0.3)


@dataclass(frozen=True)
class BulkLines:
    """Direct measurements, each array (n spectra, f features), NaN where a feature could not be measured.

    Attributes
    ----------
    features : the columns
    ew, ew_err : equivalent width, angstrom, positive in absorption, and one standard deviation
    depth, depth_err : 1 - F/Fc in the line's core (mean over the window for a band)
    continuum, continuum_err : pseudo-continuum at the window's middle, in the unit of the flux
    blue, red : the two side-band means (equal where one is missing)
    width : summed pixel width of the window, angstrom, so that a band's flux ratio is 1 - ew / width
    ok : measured with everything its definition asks for on the spectrum
    off_edge : window or a side band not on the spectrum
    gappy : bad pixels inside the window were interpolated
    telluric : overlaps a telluric band
    too_coarse : the line spread is wider than the feature's coarsest
    width_at, width_at_err : (n, f, 3) full width at depths 0.1, 0.2, 0.3; only for features with ``wings``, else NaN
    fwhm_angstrom : (n,) line spread
    band_var : (n, f, 2) variance of the blue and red side-band means (all in one where the other is missing)
    filled_flux, sigma, good : (n, m) what was measured: flux interpolated over bad pixels, its error, usable pixels
    """

    features: FeatureTable
    ew: FloatArray
    ew_err: FloatArray
    depth: FloatArray
    depth_err: FloatArray
    continuum: FloatArray
    continuum_err: FloatArray
    blue: FloatArray
    red: FloatArray
    width: FloatArray
    ok: BoolArray
    off_edge: BoolArray
    gappy: BoolArray
    telluric: BoolArray
    too_coarse: BoolArray
    width_at: FloatArray
    width_at_err: FloatArray
    fwhm_angstrom: FloatArray
    band_var: FloatArray = field(repr=False)
    filled_flux: FloatArray = field(repr=False)
    sigma: FloatArray = field(repr=False)
    good: BoolArray = field(repr=False)

    def column(self, name: str) -> tuple[FloatArray, FloatArray]:
        """(ew, ew_err) of one feature by name, each (n,)."""
        i = self.features.index_of(name)
        return self.ew[:, i], self.ew_err[:, i]


def measure_many(
    wave_angstrom: FloatArray,
    flux: FloatArray,
    sigma: FloatArray | None,
    valid: BoolArray,
    fwhm_angstrom: ArrayLike,
    *,
    velocity_kms: ArrayLike = 0.0,
    features: FeatureTable = FEATURES,
    correlation: FloatArray | None = None,
    wings: bool = True,
) -> BulkLines:
    """Measure all ``features`` directly in ``n`` spectra on one grid.

    Parameters
    ----------
    wave_angstrom : (m,) rest-frame air wavelengths, ascending
    flux : (n, m) flux per unit wavelength, any unit, any smooth slope
    sigma : (n, m) one standard deviation of each pixel; None to estimate it from the spectra
    valid : (n, m) True where the pixel may be used
    fwhm_angstrom : (n,) or a number, line-spread FWHM
    velocity_kms : (n,) or a number, velocity already taken out; tells where telluric bands fall
    correlation : (k,) or (n, k) correlation of the noise between pixels 1 ... k apart, for resampled spectra
    wings : also take the widths at fixed depths (costs as much again)

    Raises
    ------
    SpectrumError : shapes do not match, or fewer than 12 pixels
    """
    wave = np.ascontiguousarray(wave_angstrom, float)
    flux = np.atleast_2d(np.asarray(flux, float))
    good = np.atleast_2d(np.asarray(valid, bool))
    n, m = flux.shape
    if wave.shape != (m,) or good.shape != (n, m):
        raise SpectrumError(f"the line stage needs flux and mask of one shape over {wave.size} wavelengths, "
                            f"and got {flux.shape} and {good.shape}")
    if m < 12:
        raise SpectrumError(f"only {m} pixels: too few to measure a line; give a longer spectrum")
    fwhm = np.broadcast_to(np.asarray(fwhm_angstrom, float), (n,))
    if not np.all(np.isfinite(fwhm) & (fwhm > 0)):
        raise SpectrumError("the line-spread width must be a positive number of angstroms; give it with --fwhm")
    if sigma is None:
        noise = estimate_sigma(flux, good)
    else:
        noise = np.atleast_2d(np.asarray(sigma, float))
        good = good & np.isfinite(noise)
    good = good & np.isfinite(flux)
    filled, noise = _fill(flux, noise, good)
    rho = None if correlation is None else np.atleast_2d(np.asarray(correlation, float))

    f = len(features)
    out = _empty(n, f)
    # one plan for each step of window growth and each tenth of FWHM (which sets the core)
    growth = growth_angstrom(fwhm)
    keys = np.round(fwhm, 1)
    for key in np.unique(keys):
        same = np.flatnonzero(keys == key)
        plan = plan_for(wave, features, float(growth[same[0]]), float(key))
        for rows in np.array_split(same, -(-same.size // _CHUNK)):
            block = _measure(plan, filled[rows], noise[rows], good[rows],
                             None if rho is None else (rho if rho.shape[0] == 1 else rho[rows]))
            for name, value in block.items():
                out[name][rows] = value
            if wings:
                _measure_wings(plan, features, wave, filled[rows], noise[rows], out, rows, float(key))
    coarsest = np.array([x.coarsest_fwhm for x in features])
    measured: dict[str, Any] = {k: (v > 0 if k in _FLAGS else v) for k, v in out.items()}
    return BulkLines(
        features=features, telluric=_telluric(features, np.broadcast_to(velocity_kms, (n,))),
        too_coarse=fwhm[:, None] > coarsest, fwhm_angstrom=fwhm.copy(), filled_flux=filled, sigma=noise, good=good,
        **measured)


#: Spectra measured at once: few enough for their windows to stay in the processor's cache.
_CHUNK = 24
_FLAGS = ("ok", "off_edge", "gappy")


def _empty(n: int, f: int) -> dict[str, FloatArray]:
    names = ("ew", "ew_err", "depth", "depth_err", "continuum", "continuum_err", "blue", "red", "width", *_FLAGS)
    out = {name: np.full((n, f), np.nan if name not in _FLAGS else 0.0) for name in names}
    out["width_at"] = np.full((n, f, len(FIXED_DEPTHS)), np.nan)
    out["width_at_err"] = np.full((n, f, len(FIXED_DEPTHS)), np.nan)
    out["band_var"] = np.zeros((n, f, 2))
    return out


def _fill(flux: FloatArray, sigma: FloatArray, good: BoolArray) -> tuple[FloatArray, FloatArray]:
    """Interpolate over bad pixels, so that window sums have no holes; errors of the filled pixels are doubled."""
    bad_rows = np.flatnonzero(~good.all(axis=1))
    if bad_rows.size == 0:
        return flux, sigma
    flux, sigma = flux.copy(), sigma.copy()
    pixel = np.arange(flux.shape[1])
    for i in bad_rows:
        known = good[i]
        if known.any():
            bad = ~known
            flux[i, bad] = np.interp(pixel[bad], pixel[known], flux[i, known])
            sigma[i, bad] = 2.0 * np.interp(pixel[bad], pixel[known], sigma[i, known])
        else:
            flux[i], sigma[i] = np.nan, np.nan
    return flux, sigma


def _band_mean(plan_band: Gather, flux: FloatArray, variance: FloatArray, good: FloatArray | None, f: int,
               rho: FloatArray | None) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Mean, variance of the mean and share of good pixels of one side band, each (n, f); share 0 where none."""
    n = flux.shape[0]
    mean, var, share = np.full((n, f), np.nan), np.full((n, f), np.nan), np.zeros((n, f))
    if plan_band.which.size == 0:
        return mean, var, share
    values, noise = flux[:, plan_band.pixels], variance[:, plan_band.pixels]
    if good is None:
        count = np.broadcast_to(plan_band.count.astype(float), (n, plan_band.which.size))
        share[:, plan_band.which] = 1.0
    else:
        weight = good[:, plan_band.pixels]
        values, noise = values * weight, noise * weight
        count = plan_band.sum(weight)
        share[:, plan_band.which] = count / plan_band.count
        count = np.where(count > 0, count, np.nan)
    mean[:, plan_band.which] = plan_band.sum(values) / count
    total = plan_band.sum(noise)
    if rho is not None:
        total = total + _lagged(plan_band, np.sqrt(noise), rho)
    var[:, plan_band.which] = total / count**2
    return mean, var, share


def _lagged(gather: Gather, scaled: FloatArray, rho: FloatArray) -> FloatArray:
    """2 sum_k rho_k sum_i s_i s_(i+k) within each interval: what correlation adds to the variance of a sum."""
    group = np.repeat(np.arange(gather.which.size), gather.count)
    extra = np.zeros((scaled.shape[0], gather.which.size))
    for k in range(1, rho.shape[1] + 1):
        if not np.any(rho[:, k - 1]):
            continue
        product = np.zeros_like(scaled)
        same = group[k:] == group[:-k]
        product[:, :-k] = np.where(same, scaled[:, k:] * scaled[:, :-k], 0.0)
        extra += 2.0 * rho[:, k - 1:k] * gather.sum(product)
    return extra


def _measure(plan: WindowPlan, flux: FloatArray, sigma: FloatArray, valid: BoolArray,
             rho: FloatArray | None) -> dict[str, FloatArray]:
    n, f = flux.shape[0], plan.width.size
    good = None if valid.all() else valid.astype(float)
    variance = sigma**2
    blue, blue_var, blue_share = _band_mean(plan.blue, flux, variance, good, f, rho)
    red, red_var, red_share = _band_mean(plan.red, flux, variance, good, f, rho)
    has_blue = plan.blue_ok & (blue_share >= 0.5)
    has_red = plan.red_ok & (red_share >= 0.5)
    # one band lost: a flat continuum at the other's level, said so by the flag
    blue, red = np.where(has_blue, blue, red), np.where(has_red, red, blue)
    blue = np.where(has_blue | has_red, blue, np.nan)
    red = np.where(has_blue | has_red, red, np.nan)
    blue_only, red_only = has_blue & ~has_red, has_red & ~has_blue
    blue_var, red_var = np.where(has_blue, blue_var, 0.0), np.where(has_red, red_var, 0.0)

    w = plan.window
    out = _empty(n, f)
    del out["width_at"], out["width_at_err"]
    with np.errstate(invalid="ignore", divide="ignore"):
        b, r = blue[:, w.which], red[:, w.which]
        level = w.spread(b)
        level += w.spread(r - b) * plan.weight_red
        scaled = plan.dlambda / level                      # dlambda / Fc
        ratio = flux[:, w.pixels] * scaled                 # (F/Fc) dlambda
        kept = w.sum(ratio)
        ew = plan.width[w.which] - kept
        part = (sigma[:, w.pixels] * scaled) ** 2
        pixel_var = w.sum(part)
        if rho is not None:
            pixel_var = pixel_var + _lagged(w, np.sqrt(part), rho)
        # dW/dFblue and dW/dFred: sum of F/Fc^2 dlambda, weighted with each band's share in the continuum
        ratio /= level
        lean_all = w.sum(ratio)
        ratio *= plan.weight_red
        lean_red = w.sum(ratio)
        lean_blue = lean_all - lean_red
        bo, ro = blue_only[:, w.which], red_only[:, w.which]
        lean_red, lean_blue = (np.where(ro, lean_all, np.where(bo, 0.0, lean_red)),
                               np.where(bo, lean_all, np.where(ro, 0.0, lean_blue)))
        total_var = pixel_var + lean_blue**2 * blue_var[:, w.which] + lean_red**2 * red_var[:, w.which]
        ew_err = np.sqrt(total_var)

        # depth and continuum: in the core of a line, at the middle of the window of a band
        c = plan.core
        share_red = np.zeros(f)
        share_red[w.which] = np.add.reduceat(plan.weight_red, w.starts) / w.count if w.which.size else 0.0
        share_red[c.which] = np.add.reduceat(plan.core_weight_red, c.starts) / c.count if c.which.size else 0.0
        middle = blue + (red - blue) * share_red
        one = has_blue ^ has_red
        middle_var = np.where(one, blue_var + red_var, (1 - share_red) ** 2 * blue_var + share_red**2 * red_var)
        depth, depth_err = np.full((n, f), np.nan), np.full((n, f), np.nan)
        depth[:, w.which], depth_err[:, w.which] = ew / plan.width[w.which], ew_err / plan.width[w.which]
        core_flux = c.sum(flux[:, c.pixels]) / c.count
        core_var = c.sum(variance[:, c.pixels]) / c.count**2
        ratio_core = core_flux / middle[:, c.which]
        depth[:, c.which] = 1.0 - ratio_core
        depth_err[:, c.which] = np.sqrt(core_var + ratio_core**2 * middle_var[:, c.which]) / middle[:, c.which]

    share = np.ones((n, w.which.size)) if good is None else w.sum(good[:, w.pixels]) / w.count
    enough = (share >= 1.0 - MAX_MISSING) & plan.complete[w.which] & (b > 0) & (r > 0)
    out["ew"][:, w.which] = np.where(enough, ew, np.nan)
    out["ew_err"][:, w.which] = np.where(enough, ew_err, np.nan)
    measured = np.isfinite(out["ew"])
    out["depth"] = np.where(measured, depth, np.nan)
    out["depth_err"] = np.where(measured, depth_err, np.nan)
    out["continuum"] = np.where(measured, middle, np.nan)
    out["continuum_err"] = np.where(measured, np.sqrt(middle_var), np.nan)
    out["blue"], out["red"] = np.where(measured, blue, np.nan), np.where(measured, red, np.nan)
    out["width"][:] = plan.width
    out["band_var"] = np.stack([blue_var, red_var], axis=-1)
    wants_blue, wants_red = plan.wants_blue, plan.wants_red
    lost_band = (wants_blue & ~has_blue) | (wants_red & ~has_red)
    out["gappy"][:, w.which] = (share < 1.0) & measured[:, w.which]
    out["off_edge"][:] = ~plan.complete | lost_band
    out["ok"][:] = measured & ~lost_band
    return out


def _measure_wings(plan: WindowPlan, features: FeatureTable, wave: FloatArray, flux: FloatArray,
                   sigma: FloatArray, out: dict[str, FloatArray], part: NDArray[np.intp], fwhm: float) -> None:
    """Full widths at fixed depths, read off the lightly smoothed data outward from the line's core."""
    starts = dict(zip(plan.window.which.tolist(), zip(plan.window.starts.tolist(), plan.window.count.tolist())))
    for k, feature in enumerate(features):
        if not feature.wings or k not in starts or not plan.complete[k]:
            continue
        s, count = starts[k]
        pixels = plan.window.pixels[s:s + count]
        share = plan.weight_red[s:s + count]
        blue, red = out["blue"][part, k], out["red"][part, k]
        level = blue[:, None] * (1 - share) + red[:, None] * share
        with np.errstate(invalid="ignore", divide="ignore"):
            depth = 1.0 - flux[:, pixels] / level
            noise = sigma[:, pixels] / level
            band = np.sqrt((out["band_var"][part, k] * 0.25).sum(axis=1)) / level.mean(axis=1)
        x = wave[pixels]
        span = max(1, round(fwhm / float(np.diff(x).mean())) | 1)
        widths, errors = widths_at_depths(x, _running_mean(depth, span), noise / np.sqrt(span), band,
                                          feature.wavelength)
        out["width_at"][part, k], out["width_at_err"][part, k] = widths, errors


def _running_mean(values: FloatArray, span: int) -> FloatArray:
    if span <= 1 or values.shape[1] < span:
        return values
    half = span // 2
    padded = np.pad(values, ((0, 0), (half + 1, half)), mode="edge")
    total = np.cumsum(padded, axis=1)
    return (total[:, span:] - total[:, :-span]) / span


def widths_at_depths(x: FloatArray, depth: FloatArray, noise: FloatArray, continuum_err: FloatArray, centre: float,
                     depths: tuple[float, ...] = FIXED_DEPTHS) -> tuple[FloatArray, FloatArray]:
    """Full widths (n, k) where ``depth`` (n, p) first falls below each of ``depths`` on both sides of the core.

    The core is the deepest of the pixels within 4 A of ``centre``. 0 where the core is not that deep, NaN where the
    line is still deeper at the window's edge. The errors, second, are those of the depth, ``noise`` (n, p) and the
    relative ``continuum_err`` (n,), over the slope of the profile at the crossings.
    """
    n, p = depth.shape
    near = np.flatnonzero(np.abs(x - centre) <= 4.0)
    if near.size == 0:
        near = np.array([int(np.argmin(np.abs(x - centre)))])
    peak = near[np.argmax(np.nan_to_num(depth[:, near], nan=-np.inf), axis=1)]
    rows, columns = np.arange(n), np.arange(p)
    widths, errors = np.full((n, len(depths)), np.nan), np.full((n, len(depths)), np.nan)
    top = depth[rows, peak]
    for j, d in enumerate(depths):
        below = depth < d
        right = below & (columns > peak[:, None])
        left = below & (columns < peak[:, None])
        i_right = np.where(right.any(axis=1), right.argmax(axis=1), -1)
        i_left = np.where(left.any(axis=1), p - 1 - left[:, ::-1].argmax(axis=1), -1)
        found = (i_right > 0) & (i_left >= 0)
        ir, il = np.clip(i_right, 1, p - 1), np.clip(i_left, 0, p - 2)
        with np.errstate(invalid="ignore", divide="ignore"):
            slope_r = (depth[rows, ir] - depth[rows, ir - 1]) / (x[ir] - x[ir - 1])
            slope_l = (depth[rows, il + 1] - depth[rows, il]) / (x[il + 1] - x[il])
            hi = x[ir] + (d - depth[rows, ir]) / slope_r
            lo = x[il] + (d - depth[rows, il]) / slope_l
            # the slope over a wider base: between two pixels noise can make it anything
            wide_r = _slope(x, depth, rows, ir)
            wide_l = _slope(x, depth, rows, il)
            random = np.hypot(noise[rows, ir] / wide_r, noise[rows, il] / wide_l)
            common = continuum_err * (1.0 - d) * (1.0 / np.abs(wide_r) + 1.0 / np.abs(wide_l))
            width = hi - lo
        absent = top < d
        widths[:, j] = np.where(absent, 0.0, np.where(found, width, np.nan))
        errors[:, j] = np.where(absent, np.nan, np.where(found, np.hypot(random, common), np.nan))
        widths[~np.isfinite(top), j] = np.nan
    return widths, errors


def _slope(x: FloatArray, depth: FloatArray, rows: NDArray[np.intp], at: NDArray[np.intp]) -> FloatArray:
    lo, hi = np.maximum(at - 2, 0), np.minimum(at + 2, x.size - 1)
    return (depth[rows, hi] - depth[rows, lo]) / (x[hi] - x[lo])


@lru_cache(maxsize=16)
def _reach(features: FeatureTable) -> tuple[FloatArray, FloatArray]:
    """Lowest and highest wavelength (f, 3) of window, blue and red band; an interval that no band can touch if none."""
    pieces = [[i if i is not None else (np.inf, -np.inf) for i in grown(x, 0.0)] for x in features]
    bounds = np.array(pieces, float)
    return bounds[..., 0], bounds[..., 1]


def _telluric(features: FeatureTable, velocity_kms: FloatArray) -> BoolArray:
    """(n, f): the window or a side band falls on a telluric band, which stands still in the observer's frame."""
    lo, hi = _reach(features)
    factor = 1.0 / (1.0 + np.unique(velocity_kms) / LIGHT_KMS)
    hit = np.zeros((factor.size, len(features)), bool)
    for band in TELLURIC:
        start, stop = band.window[0] * factor, band.window[1] * factor
        hit |= ((start[:, None, None] <= hi) & (stop[:, None, None] >= lo)).any(axis=2)
    return hit[np.searchsorted(np.unique(velocity_kms), velocity_kms)]
