"""Profile fits of every line and blend in many spectra: Gaussian against Voigt, blends together, all in batches."""

from __future__ import annotations

from collections.abc import Callable, Iterator, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from starfathom.classify.lines.direct import FIXED_DEPTHS, BulkLines
from starfathom.classify.lines.fitting import NODE_WEIGHTS, NODES, Fits, Jobs, Ties, fit_jobs, tie
from starfathom.classify.lines.profiles import (
    SIGMA_TO_FWHM,
    gaussian,
    intrinsic_fwhm,
    voigt,
    voigt_fwhm,
    width_at_depth,
)
from starfathom.classify.lines.windows import Gather, growth_angstrom, plan_for

FloatArray = NDArray[np.float64]
BoolArray = NDArray[np.bool_]
IntArray = NDArray[np.intp]

#: A line counts as there when its fitted area is this many standard deviations from zero.
DETECTION_SIGMA = 3.0
#: Below this nobody would see a line, and none is fitted freely.
_TRACE_SIGMA = 2.0
#: A fit with centre and width held is passed on only up to this chi2 per degree of freedom.
_HELD_MISFIT = 3.0
#: Nothing can be narrower than this share of the line spread; what is, is a spike or a gap between neighbours.
_NARROWEST = 0.8
#: Components closer than this share of the line spread share one width and shift.
_PARTED = 0.7
#: Below this significance a Voigt profile is not tried: its extra number could not be told.
_VOIGT_SIGMA = 5.0
#: A profile with more numbers must win by this much in the criterion: strong evidence (Kass & Raftery 1995).
_STRONG_EVIDENCE = 6.0
#: Evidence that counts as positive on the same scale.
_POSITIVE_EVIDENCE = 2.0
_BUCKETS = (8, 12, 16, 20, 26, 34, 44, 60, 80, 110, 150, 210, 300, 500, 1000, 4000)


@dataclass(frozen=True)
class BulkFits:
    """Fitted components, one column each: a line, or one component of a blend. Arrays are (n spectra, c), NaN if unfit.

    Attributes
    ----------
    labels, wavelength, feature : (c,) name for people, rest wavelength, column number in the feature table
    ew, ew_err : area of the profile, angstrom, wings outside the window included; the error counts in the other
        profile's answer where the evidence leaves the choice open
    center, center_err : rest-frame wavelength of the centre, angstrom; NaN where it was held at rest
    fwhm, fwhm_err : full width at half depth of the profile
    intrinsic, intrinsic_err : the same with the instrument taken out; the 3-sigma upper limit where ``unresolved``
    depth, depth_err : central depth of the profile
    sigma, gamma : Gaussian sigma and Lorentzian half width of the profile (gamma 0 for a Gaussian)
    width_at, width_at_err : (n, c, 3) full width of the profile at depths 0.1, 0.2, 0.3
    chi2, dof : of the window, shared by the components of a blend
    residual_rms : scatter of the normalised residuals in the window
    voigt : the Voigt profile won by the information criterion
    undecided : a Gaussian is kept though a Voigt profile is ahead, by less than strong evidence
    detected : area at least 3 sigma from zero, fit converged
    held : not detected; area fitted with centre at rest and the instrument's width, for the limit's sake
    blue_loss, red_loss : mean depth of the fitted profiles in the side bands, put back into the continuum
    """

    labels: tuple[str, ...]
    wavelength: FloatArray
    feature: IntArray
    ew: FloatArray
    ew_err: FloatArray
    center: FloatArray
    center_err: FloatArray
    fwhm: FloatArray
    fwhm_err: FloatArray
    intrinsic: FloatArray
    intrinsic_err: FloatArray
    unresolved: BoolArray
    depth: FloatArray
    depth_err: FloatArray
    sigma: FloatArray
    gamma: FloatArray
    width_at: FloatArray
    width_at_err: FloatArray
    chi2: FloatArray
    dof: FloatArray
    residual_rms: FloatArray
    voigt: BoolArray
    undecided: BoolArray
    detected: BoolArray
    held: BoolArray
    blue_loss: FloatArray
    red_loss: FloatArray


@dataclass
class _Slot:
    """One feature of one group of spectra on its way into a batch."""

    feature: int
    column: int
    rows: IntArray
    pixels: IntArray
    share_red: FloatArray
    nodes: FloatArray


#: A fit is preferred to the direct sum where the line is this significant, or this where it is much the sharper.
_FIT_SIGMA, _SHARP_SIGMA = 25.0, 5.0


def prefer_fit(lines: BulkLines, fits: BulkFits) -> BoolArray:
    """Whether to quote each component's fitted equivalent width rather than its feature's direct sum, (n, c).

    The fit, where the line is strong, its profile is decided and explains the window: residuals like the noise, or
    small beside the depth. A weak line's fit picks its own width and place out of the noise and cannot tell a wing; its
    direct sum needs to do neither. A narrow line in a window made for broad ones is the exception: its sum is mostly
    noise and neighbours.
    """
    with np.errstate(invalid="ignore", divide="ignore"):
        significance = np.abs(fits.ew) / fits.ew_err
        sharper = fits.ew_err < 0.5 * lines.ew_err[:, fits.feature]
        explained = (fits.chi2 <= 2.0 * fits.dof) | (fits.residual_rms <= 0.1 * np.abs(fits.depth)) | sharper
    return fits.detected & ~fits.undecided & explained & (significance >= np.where(sharper, _SHARP_SIGMA, _FIT_SIGMA))


def fit_many(wave_angstrom: FloatArray, lines: BulkLines, *, profiles: Sequence[str] = ("gaussian", "voigt"),
             correlation: FloatArray | None = None, fwhm_err_angstrom: float = 0.0,
             fixed_depths: bool = True) -> BulkFits:
    """Fit all lines and blends of ``lines``, which :func:`measure_many` measured on the grid ``wave_angstrom``.

    ``fwhm_err_angstrom`` is the error of the line spread itself and goes into the intrinsic widths.
    """
    wave = np.ascontiguousarray(wave_angstrom, float)
    features = lines.features
    n = lines.ew.shape[0]
    labels: list[str] = []
    wavelengths: list[float] = []
    owner: list[int] = []
    first: dict[int, int] = {}
    for k, feature in enumerate(features):
        first[k] = len(labels)
        for label, rest in feature.lines:
            labels.append(label)
            wavelengths.append(rest)
            owner.append(k)
    c = len(labels)
    out = {name: np.full((n, c), np.nan) for name in _FLOATS}
    out["width_at"] = np.full((n, c, len(FIXED_DEPTHS)), np.nan)
    out["width_at_err"] = np.full((n, c, len(FIXED_DEPTHS)), np.nan)
    flags = {name: np.zeros((n, c), bool) for name in _FLAGS}
    rho = None if correlation is None else np.atleast_2d(np.asarray(correlation, float))
    for batch in _batches(wave, lines, first):
        _fit_batch(wave, lines, batch, profiles, rho, fwhm_err_angstrom, fixed_depths, out, flags)
    return BulkFits(labels=tuple(labels), wavelength=np.array(wavelengths), feature=np.array(owner, np.intp),
                    **out, **flags)


_FLAGS = ("unresolved", "voigt", "undecided", "detected", "held")
_FLOATS = ("ew", "ew_err", "center", "center_err", "fwhm", "fwhm_err", "intrinsic", "intrinsic_err", "depth",
           "depth_err", "sigma", "gamma", "chi2", "dof", "residual_rms", "blue_loss", "red_loss")


def _batches(wave: FloatArray, lines: BulkLines, first: dict[int, int]) -> Iterator[list[_Slot]]:
    """Windows of like pixel number and equally many components, gathered over features and line spreads."""
    growth = growth_angstrom(lines.fwhm_angstrom)
    keys = np.round(lines.fwhm_angstrom, 1)
    groups: dict[tuple[int, int], list[_Slot]] = {}
    for key in np.unique(keys):
        members = np.flatnonzero(keys == key)
        plan = plan_for(wave, lines.features, float(growth[members[0]]), float(key))
        where = {int(f): i for i, f in enumerate(plan.window.which)}
        nodes = {side: _band_nodes(wave, band) for side, band in (("blue", plan.blue), ("red", plan.red))}
        for k, feature in enumerate(lines.features):
            if not feature.lines or k not in where:
                continue
            rows = members[np.isfinite(lines.ew[members, k])]
            start, count = plan.window.starts[where[k]], plan.window.count[where[k]]
            size = len(feature.lines)
            if rows.size == 0 or count < size + 3:
                continue
            bucket = next(b for b in _BUCKETS if b >= count)
            blue, red = nodes["blue"].get(k), nodes["red"].get(k)
            pair = np.array([blue if blue is not None else red, red if red is not None else blue], float)
            groups.setdefault((size, bucket), []).append(_Slot(
                k, first[k], rows, plan.window.pixels[start:start + count],
                plan.weight_red[start:start + count], pair - feature.wavelength))
    for slots in groups.values():
        pending: list[_Slot] = []
        total = 0
        for slot in slots:
            pending.append(slot)
            total += slot.rows.size
            if total * slot.pixels.size >= 40000:
                yield pending
                pending, total = [], 0
        if pending:
            yield pending


def _band_nodes(wave: FloatArray, band: Gather) -> dict[int, FloatArray]:
    out = {}
    for f, s, count in zip(band.which, band.starts, band.count):
        lo, hi = wave[band.pixels[s]], wave[band.pixels[s + count - 1]]
        out[int(f)] = 0.5 * (lo + hi) + 0.5 * (hi - lo) * NODES
    return out


def _build(wave: FloatArray, lines: BulkLines, slots: list[_Slot]) -> tuple[Jobs, IntArray, IntArray, IntArray]:
    p = max(s.pixels.size for s in slots)
    count = sum(s.rows.size for s in slots)
    size = len(lines.features[slots[0].feature].lines)
    x, y, weight, share = (np.zeros((count, p)) for _ in range(4))
    y[:] = 1.0
    nodes, band_var, offsets = np.zeros((count, 2, 3)), np.zeros((count, 2)), np.zeros((count, size))
    row, column, feature_of = (np.zeros(count, np.intp) for _ in range(3))
    at = 0
    for s in slots:
        feature = lines.features[s.feature]
        here = slice(at, at + s.rows.size)
        m = s.pixels.size
        blue, red = lines.blue[s.rows, s.feature, None], lines.red[s.rows, s.feature, None]
        level = blue + (red - blue) * s.share_red
        grid = np.ix_(s.rows, s.pixels)
        x[here, :m] = wave[s.pixels] - feature.wavelength
        x[here, m:] = x[here, m - 1:m]
        y[here, :m] = lines.filled_flux[grid] / level
        noise = lines.sigma[grid] / level
        with np.errstate(divide="ignore", invalid="ignore"):
            weight[here, :m] = np.where(lines.good[grid] & (noise > 0) & np.isfinite(noise), noise**-2.0, 0.0)
        share[here, :m] = s.share_red
        nodes[here] = s.nodes
        band_var[here] = lines.band_var[s.rows, s.feature] / (0.5 * (blue + red)) ** 2
        offsets[here] = [rest - feature.wavelength for _, rest in feature.lines]
        row[here], column[here], feature_of[here] = s.rows, s.column, s.feature
        at += s.rows.size
    return Jobs(x, y, weight, share, nodes, band_var, offsets), row, column, feature_of


def _starts(jobs: Jobs, spread: FloatArray, window: FloatArray) -> tuple[FloatArray, FloatArray]:
    """First guess of areas (j, k) and of one width (j,), from the depth at each component and the window's area."""
    j, k = jobs.offsets.shape
    depth = np.empty((j, k))
    rows = np.arange(j)
    for i in range(k):
        nearest = np.argmin(np.where(jobs.weight > 0, np.abs(jobs.x - jobs.offsets[:, i, None]), np.inf), axis=1)
        depth[:, i] = 1.0 - jobs.y[rows, nearest]
    step = np.gradient(jobs.x, axis=1) if jobs.x.shape[1] > 1 else np.ones_like(jobs.x)
    area = ((1.0 - jobs.y) * (jobs.weight > 0) * step).sum(axis=1)
    root = np.sqrt(2 * np.pi)
    total = depth.sum(axis=1)
    with np.errstate(divide="ignore", invalid="ignore"):
        guess = np.where(np.abs(total) > 1e-6, area / (total * root), spread)
    width = np.clip(np.where(np.isfinite(guess), guess, spread), 0.9 * spread, np.maximum(window / 5.0, spread))
    return depth * width[:, None] * root, width


def _fit_batch(wave: FloatArray, lines: BulkLines, slots: list[_Slot], profiles: Sequence[str],
               rho: FloatArray | None, fwhm_err: float, fixed_depths: bool, out: dict[str, FloatArray],
               flags: dict[str, BoolArray]) -> None:
    jobs, row, column, feature_of = _build(wave, lines, slots)
    j, k = jobs.offsets.shape
    fwhm = lines.fwhm_angstrom[row]
    spread = fwhm / SIGMA_TO_FWHM
    window = np.ptp(jobs.x, axis=1)
    step = window / np.maximum((jobs.weight > 0).sum(axis=1) - 1, 1)
    is_wide = np.array([lines.features[f].wings for f in feature_of])
    areas, width = _starts(jobs, spread, window)
    drift = np.where(is_wide, 6.0, np.maximum(2.0, fwhm))
    gaps = np.diff(jobs.offsets, axis=1).min(axis=1) if k > 1 else np.full(j, np.inf)
    drift = np.minimum(drift, np.maximum(0.5 * gaps, 0.75 * fwhm))
    # where components merge, a shift would trade one for the other: they stay at rest
    merged = gaps < _PARTED * fwhm
    drift[merged] = 0.0
    correlation = None if rho is None else (rho[row] if rho.shape[0] > 1 else rho)

    best = _Best(j, k)

    def attempt(is_voigt: bool, shared: bool, rows: IntArray, held: bool = False) -> None:
        if rows.size == 0:
            return
        ties = tie(k, is_voigt, shared)
        start, low, high, base = _setup(ties, jobs.offsets[rows], areas[rows], width[rows], drift[rows], window[rows],
                                        step[rows], spread[rows], merged[rows], shared,
                                        best.full[rows] if is_voigt else None)
        if held:
            for i, value in ((k, np.zeros(rows.size)), (k + 1, spread[rows])):
                start[:, i] = low[:, i] = high[:, i] = value
        part = jobs.take(rows)
        fits = fit_jobs(part, start, base, ties, low, high,
                        correlation if correlation is None or correlation.shape[0] == 1 else correlation[rows],
                        to_beat=best.chi2[rows] if is_voigt else None)
        best.offer(rows, fits, ties)

    # with centre and width held, the area is a matched filter; where neither it nor the direct sum sees a trace of a
    # line, there is nothing a free fit could find
    everyone = np.arange(j)
    attempt(False, True, everyone, held=True)
    direct = np.abs(lines.ew[row, feature_of]) / lines.ew_err[row, feature_of]
    trace = (best.significance().max(axis=1) >= _TRACE_SIGMA) | (direct >= _TRACE_SIGMA)
    held = best
    best = _Best(j, k)
    attempt(False, True, everyone[trace])
    apart = everyone[trace & ~merged] if k > 1 else everyone[:0]
    attempt(False, False, apart)
    if "voigt" in profiles:
        strong = np.maximum(best.significance().max(axis=1), best.total_significance()) >= _VOIGT_SIGMA
        strong &= (jobs.weight > 0).sum(axis=1) >= 3 * k + 3
        # a Voigt profile is wider than the line spread, and where no Gaussian holds no Voigt will
        strong &= best.converged & (best.full[:, :, 2].max(axis=1) >= 0.95 * spread)
        attempt(True, True, everyone[strong])
        attempt(True, False, apart[strong[apart]])
    if k > 1:
        # weak components in noise wander and trade with each other: they too stay at rest
        weak = (best.significance().min(axis=1) < _VOIGT_SIGMA) & trace & ~merged
        still = _Best(j, k)
        drift[weak] = 0.0
        strong_one, best = best, still
        attempt(False, True, everyone[weak])
        best = strong_one
        best.take(everyone[weak & still.converged], still)
    # components that cannot be parted are each uncertain while their sum is not
    seen = (best.significance().max(axis=1) >= DETECTION_SIGMA) | (best.total_significance() >= DETECTION_SIGMA)
    lost = ~(seen & best.converged)
    best.take(everyone[lost], held)
    rest = np.array([lines.features[f].wavelength for f in feature_of])
    best.store(jobs, row, column, rest, fwhm, fwhm_err, fixed_depths, lost, out, flags)


def _setup(ties: Ties, offsets: FloatArray, areas: FloatArray, width: FloatArray, drift: FloatArray,
           window: FloatArray, step: FloatArray, spread: FloatArray, merged: BoolArray, shared: bool,
           known: FloatArray | None) -> tuple[FloatArray, FloatArray, FloatArray, FloatArray]:
    """Start, bounds and base of the fitted numbers; ``known`` (j, k, 4) are the Gaussian results to start from."""
    j, k = offsets.shape
    size = ties.per_component
    base = np.zeros((j, k, size))
    base[:, :, 1] = offsets
    full = np.zeros((j, k, size))
    full[:, :, 0], full[:, :, 2] = areas, width[:, None]
    if known is not None:
        ok = np.isfinite(known).all(axis=(1, 2))
        full[ok, :, :3] = known[ok, :, :3]
        full[ok, :, 1] -= offsets[ok]
        full[..., 3] = 0.35 * full[..., 2]
        full[..., 2] *= 0.8
    low, high = np.zeros_like(full), np.zeros_like(full)
    low[:, :, 0], high[:, :, 0] = -3.0 * window[:, None], 3.0 * window[:, None]
    # components too close to be parted must at least agree in sign, or they cancel without limit
    total = areas.sum(axis=1)
    low[merged & (total >= 0), :, 0] = 0.0
    high[merged & (total < 0), :, 0] = 0.0
    low[:, :, 1], high[:, :, 1] = -drift[:, None], drift[:, None]
    low[:, :, 2], high[:, :, 2] = 0.3 * step[:, None], np.maximum(window / 3.0, 2.0 * width)[:, None]
    if size == 4:
        low[:, :, 2], high[:, :, 3] = spread[:, None], window[:, None]

    def pack(values: FloatArray) -> FloatArray:
        if not shared:
            return values.reshape(j, -1).copy()
        return np.concatenate([values[:, :, 0], values[:, :, 1:].mean(axis=1)], axis=1)

    return pack(full), pack(low), pack(high), base.reshape(j, -1)


class _Best:
    """The winning fit of each job so far, by the information criterion."""

    def __init__(self, jobs: int, components: int) -> None:
        self.full = np.full((jobs, components, 4), np.nan)
        self.covariance = np.full((jobs, components, 4, 4), np.nan)
        self.chi2, self.evidence_chi2, self.dof, self.total_err = (np.full(jobs, np.nan) for _ in range(4))
        self.free = np.zeros(jobs)
        self.pixels = np.ones(jobs)
        self.voigt = np.zeros(jobs, bool)
        self.converged = np.zeros(jobs, bool)
        # the best Gaussian (0) and the best Voigt (1), whichever won: areas, chi2, free parameters
        self.rival_area = np.full((jobs, 2, components), np.nan)
        self.rival_chi2 = np.full((jobs, 2), np.inf)
        self.rival_free = np.zeros((jobs, 2))

    def ahead(self) -> FloatArray:
        """(j,) by how much the winning profile leads the other in the criterion; negative where the Voigt profile is
        ahead, but not by enough to be taken."""
        with np.errstate(invalid="ignore"):
            scale = np.maximum(self.chi2 / self.dof, 1.0)
            bic = self.rival_chi2 / scale[:, None] + self.rival_free * np.log(np.maximum(self.pixels, 1.0))[:, None]
            winner = self.voigt.astype(int)
            rows = np.arange(winner.size)
            return bic[rows, 1 - winner] - bic[rows, winner]

    def model_variance(self) -> FloatArray:
        """(j, k) variance of an area from not knowing which profile is right.

        Where the Voigt profile is ahead by positive evidence, but not by enough to be taken: its weight,
        exp(-BIC / 2) shared between the two, times the difference squared.
        """
        ahead = self.ahead()
        with np.errstate(invalid="ignore", over="ignore"):
            weight = 1.0 / (1.0 + np.exp(np.clip(ahead, -60.0, 60.0) / 2.0))
            weight = np.where(ahead < -_POSITIVE_EVIDENCE, weight, 0.0)
            apart = self.rival_area[np.arange(ahead.size), 1 - self.voigt.astype(int)] - self.full[:, :, 0]
            return np.nan_to_num(weight[:, None] * apart**2)

    def significance(self) -> FloatArray:
        with np.errstate(invalid="ignore", divide="ignore"):
            return np.nan_to_num(np.abs(self.full[:, :, 0]) / np.sqrt(self.covariance[:, :, 0, 0]), posinf=0.0)

    def total_significance(self) -> FloatArray:
        with np.errstate(invalid="ignore", divide="ignore"):
            return np.nan_to_num(np.abs(self.full[:, :, 0].sum(axis=1)) / self.total_err, posinf=0.0)

    def offer(self, rows: IntArray, fits: Fits, ties: Ties) -> None:
        """Take the fit where it beats what is known.

        Where even the best profile leaves more than the noise (neighbouring lines, chi2 > dof), both chi2 are scaled
        down alike, so that an extra parameter has to explain part of the misfit and not only outrun the noise.
        """
        k, size = ties.components, ties.per_component
        family = int(ties.is_voigt)
        log_n = np.log(np.maximum(fits.pixels, 1.0))
        leads = self.rival_chi2[rows, family] + self.rival_free[rows, family] * log_n
        leads = fits.converged & (fits.evidence_chi2 + fits.free * log_n < leads)
        self.rival_area[rows[leads], family] = fits.full[leads, :, 0]
        self.rival_chi2[rows[leads], family] = fits.evidence_chi2[leads]
        self.rival_free[rows[leads], family] = fits.free
        scale = np.maximum(np.fmin(fits.chi2 / fits.dof, self.chi2[rows] / self.dof[rows]), 1.0)
        mine = fits.evidence_chi2 / scale + fits.free * log_n
        known = self.evidence_chi2[rows] / scale + self.free[rows] * log_n
        wins = np.isnan(known) | (fits.converged & ~self.converged[rows])
        margin = np.where(fits.free > self.free[rows], _STRONG_EVIDENCE, 0.0)
        wins |= (mine < known - margin) & (fits.converged | ~self.converged[rows])
        at = rows[wins]
        self.full[at, :, 3] = 0.0
        self.full[at, :, :size] = fits.full[wins]
        self.covariance[at] = 0.0
        for i in range(k):
            block = slice(i * size, (i + 1) * size)
            self.covariance[at, i, :size, :size] = fits.covariance[wins, block, block]
        between = fits.covariance[wins][:, ::size, ::size]
        self.total_err[at] = np.sqrt(np.maximum(between.sum(axis=(1, 2)), 0.0))
        self.evidence_chi2[at] = fits.evidence_chi2[wins]
        self.chi2[at], self.dof[at], self.free[at] = fits.chi2[wins], fits.dof[wins], fits.free
        self.pixels[at], self.converged[at] = fits.pixels[wins], fits.converged[wins]
        self.voigt[at] = ties.is_voigt

    def take(self, rows: IntArray, other: _Best) -> None:
        """Copy the given jobs from ``other``."""
        for name, mine in vars(self).items():
            mine[rows] = getattr(other, name)[rows]

    def store(self, jobs: Jobs, row: IntArray, column: IntArray, rest: FloatArray, fwhm: FloatArray, fwhm_err: float,
              fixed_depths: bool, lost: BoolArray, out: dict[str, FloatArray], flags: dict[str, BoolArray]) -> None:
        """Turn parameters into what is tabulated and write them to rows and columns of ``out`` and ``flags``."""
        significance = self.significance()
        loss_blue, loss_red, rms = self._residuals(jobs)
        between = self.model_variance()
        for i in range(self.full.shape[1]):
            at = (row, column + i)
            area, centre, sigma, gamma = (self.full[:, i, q] for q in range(4))
            cov = self.covariance[:, i]
            detected = (significance[:, i] >= DETECTION_SIGMA) & self.converged & ~lost
            peak, by_sigma, by_gamma = _peak(sigma, gamma)
            width = voigt_fwhm(sigma, gamma)
            zero = np.zeros_like(area)
            grad_depth = np.stack([peak, zero, area * by_sigma, area * by_gamma], axis=1)
            grad_width = _gradient(voigt_fwhm, sigma, gamma)
            inner = intrinsic_fwhm(sigma, gamma, fwhm)
            grad_inner = _gradient(lambda s, g: intrinsic_fwhm(s, g, fwhm), sigma, gamma)
            inner_var = _quadratic(grad_inner, cov) + _lsf_variance(sigma, gamma, fwhm, fwhm_err)
            # an unresolved width is known through its square: w^2 - I^2 with error 2 w s(w)
            width_err = np.sqrt(_quadratic(grad_width, cov))
            placed = detected & ~(cov[:, 1, 1] == 0.0)
            slack = np.where(self.chi2 <= 2.0 * self.dof, 2.0 * width_err, 0.0)
            detected &= width + slack >= _NARROWEST * fwhm
            square = np.maximum(width**2 - fwhm**2, 0.0)
            square_err = 2.0 * np.hypot(width * width_err, fwhm * fwhm_err)
            narrow = square < 3.0 * square_err
            limit = np.sqrt(square + 3.0 * square_err)
            shown = {
                "ew": area, "ew_err": np.sqrt(cov[:, 0, 0] + between[:, i]),
                "center": rest + centre, "center_err": np.sqrt(cov[:, 1, 1]),
                "fwhm": width, "fwhm_err": width_err, "depth": area * peak,
                "depth_err": np.sqrt(_quadratic(grad_depth, cov)),
                "intrinsic": np.where(narrow, limit, inner),
                "intrinsic_err": np.where(narrow, np.nan, np.sqrt(inner_var)), "sigma": sigma, "gamma": gamma,
                "chi2": self.chi2, "dof": self.dof, "residual_rms": rms, "blue_loss": loss_blue, "red_loss": loss_red}
            only_placed = ("center", "center_err")
            only_seen = ("fwhm", "fwhm_err", "depth", "depth_err", "intrinsic", "intrinsic_err",
                         "sigma", "gamma")
            # a held profile that does not explain its window says nothing of the line
            usable = self.converged & ~(lost & (self.chi2 > _HELD_MISFIT * self.dof))
            for name, value in shown.items():
                mask = detected if name in only_seen else placed & detected if name in only_placed else usable
                out[name][at] = np.where(mask, value, np.nan)
            flags["detected"][at], flags["voigt"][at] = detected, self.voigt & detected
            flags["undecided"][at] = detected & ~self.voigt & (self.ahead() < 0)
            flags["unresolved"][at], flags["held"][at] = narrow & detected, lost & usable
            if fixed_depths and detected.any():
                w = np.flatnonzero(detected)
                for d, depth in enumerate(FIXED_DEPTHS):
                    value = width_at_depth(area[w], sigma[w], gamma[w], depth)
                    out["width_at"][row[w], column[w] + i, d] = value
                    out["width_at_err"][row[w], column[w] + i, d] = _width_at_err(
                        value, area[w], sigma[w], gamma[w], cov[w])

    def _residuals(self, jobs: Jobs) -> tuple[FloatArray, FloatArray, FloatArray]:
        x = np.concatenate([jobs.x, jobs.nodes.reshape(-1, 6)], axis=1)
        depth = np.zeros(x.shape)
        for i in range(self.full.shape[1]):
            area, centre, sigma, gamma = (self.full[:, i, q, None] for q in range(4))
            depth += area * _value(x, centre, sigma, gamma)
        p = jobs.x.shape[1]
        blue, red = depth[:, p:p + 3] @ NODE_WEIGHTS, depth[:, p + 3:] @ NODE_WEIGHTS
        model = (1.0 - depth[:, :p]) / (1.0 - (blue[:, None] + (red - blue)[:, None] * jobs.share_red))
        used = jobs.weight > 0
        rms = np.sqrt((np.where(used, jobs.y - model, 0.0) ** 2).sum(axis=1) / np.maximum(used.sum(axis=1), 1))
        return blue, red, rms


def _value(x: FloatArray, centre: FloatArray, sigma: FloatArray, gamma: FloatArray) -> FloatArray:
    value = np.empty(x.shape)
    round_ = gamma[:, 0] <= 0
    if round_.any():
        value[round_] = gaussian(x[round_], centre[round_], sigma[round_])[0]
    if not round_.all():
        rest = ~round_
        value[rest] = voigt(x[rest], centre[rest], sigma[rest], gamma[rest])[0]
    return value


def _peak(sigma: FloatArray, gamma: FloatArray) -> tuple[FloatArray, FloatArray, FloatArray]:
    value, _, by_sigma, by_gamma = voigt(np.zeros_like(sigma), np.zeros_like(sigma), sigma, gamma)
    return value, by_sigma, by_gamma


def _gradient(function: Callable[[FloatArray, FloatArray], FloatArray], sigma: FloatArray,
              gamma: FloatArray) -> FloatArray:
    """(j, 4) derivative of a function of (sigma, gamma) by (area, centre, sigma, gamma), central differences."""
    h = 1e-4 * np.maximum(sigma, 1e-6)
    zero = np.zeros_like(sigma)
    by_sigma = (function(sigma + h, gamma) - function(sigma - h, gamma)) / (2 * h)
    by_gamma = (function(sigma, gamma + h) - function(sigma, np.maximum(gamma - h, 0.0))) \
        / (h + np.minimum(gamma, h))
    return np.stack([zero, zero, by_sigma, by_gamma], axis=1)


def _width_at_err(width: FloatArray, area: FloatArray, sigma: FloatArray, gamma: FloatArray,
                  cov: FloatArray) -> FloatArray:
    """Error of a width at a fixed depth: the depth's error there over the profile's slope, both sides moving alike."""
    value, by_centre, by_sigma, by_gamma = voigt(0.5 * width, np.zeros_like(width), sigma, gamma)
    gradient = np.stack([value, np.zeros_like(width), area * by_sigma, area * by_gamma], axis=1)
    with np.errstate(divide="ignore", invalid="ignore"):
        error = 2.0 * np.sqrt(_quadratic(gradient, cov)) / np.abs(area * by_centre)
    return np.where(width > 0, error, np.nan)


def _lsf_variance(sigma: FloatArray, gamma: FloatArray, fwhm: FloatArray, fwhm_err: float) -> FloatArray:
    if fwhm_err <= 0:
        return np.zeros_like(sigma)
    by_lsf = (intrinsic_fwhm(sigma, gamma, fwhm * 1.001) - intrinsic_fwhm(sigma, gamma, fwhm * 0.999)) / (0.002 * fwhm)
    return (by_lsf * fwhm_err) ** 2


def _quadratic(gradient: FloatArray, covariance: FloatArray) -> FloatArray:
    return np.maximum(np.einsum("ja,jab,jb->j", gradient, covariance, gradient), 0.0)
