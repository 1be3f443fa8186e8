"""The posterior of many stars at once, by weighted samples.

Each sample of a star draws a type from its assignment, a place in the scatter of the scale, a companion and an R_V.
Given these, apparent brightness, colour excess E and the deviation of the intrinsic colour follow from the magnitudes
as a Gaussian in three dimensions, worked out in closed form. E is drawn from that Gaussian times the dust prior at the
distance the type leads to expect. E itself is never negative, but a measured excess below zero is taken up by the
errors and the intrinsic colour, so it neither is lost nor piles up at zero. The dust prior speaks of E alone: it does
not move a star to the distance where the layer would make up the dust it has, for dust is too patchy for that. Weights
then bring in the colours' own verdict on the type, luminosities measured otherwise, and the prior on distance.

All stars share one set of stratified numbers (a Latin hypercube), so that the answer for a star depends on its own
data and the seed alone, not on its neighbours in the list.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache

import numpy as np
from numpy.typing import NDArray

from starfathom.distance import binaries, dust, priors
from starfathom.distance.extinction import RV_MEAN, RV_RANGE, RV_SIGMA, band_terms, evaluate
from starfathom.distance.grid import CELL_LUM, CELL_STEP
from starfathom.distance.intrinsic import intrinsic
from starfathom.distance.photometry import BANDS
from starfathom.distance.scale import TAIL_WIDTH, Scale

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.intp]

#: Share of stars whose colours are off for a reason of their own (activity, variability, a wrong type), how many times
#: wider these scatter, and how far, in ordinary widths, the colour term of the scale still follows.
ODD_SHARE, ODD_WIDTH, ODD_FOLLOW = 0.04, 4.0, 3.0
_NUMBERS = 12
#: Samples that must carry an answer at the least.
LEAST_SAMPLES = 60.0
_NO_COLOUR_PRECISION = 1e-2


@dataclass(frozen=True)
class Star:
    """One star ready for sampling; magnitudes in mag, parallax in mas.

    ``cells`` and ``shares`` are the cells its type may be and their probabilities. ``abs_mag`` is a luminosity read
    otherwise (value, error, correlation of its error with that of the class), NaN where there is none.
    """

    cells: IntArray
    shares: FloatArray
    magnitudes: dict[str, tuple[float, float]]
    sin_b: float = np.nan
    ebv_prior: tuple[float, float] | None = None
    ebv_measured: tuple[float, float] | None = None
    rv: tuple[float, float] | None = None
    abs_mag: tuple[float, float, float] = (np.nan, np.nan, 0.0)
    parallax: tuple[float, float] | None = None
    sigma_factor: float = 1.0


@dataclass
class Draws:
    """Equally weighted posterior samples, each of shape (n_stars, n_samples); see :mod:`starfathom.distance.budget`.

    ``modulus`` true distance modulus, ``ebv``, ``a_v`` in mag, ``m_v`` of the star without its companion,
    ``scatter``, ``companion``, ``colour`` (deviation of B-V), ``rv``, ``v_noise`` in mag, ``ln_teff``, ``cell``.
    ``n_eff`` (n_stars,) is the effective number of samples before they were made equal, ``log_evidence`` the log of the
    mean weight. ``ebv_colours`` (n_stars, 2) is the excess as the colours alone have it, with its error (a Gaussian
    that may reach below zero, no dust prior in it). ``prior_part`` and ``own_part`` (n_stars,) are the shares of the
    variance of the excess, type and colour given, that dust prior and colour scatter have in it.
    """

    cell: IntArray
    modulus: FloatArray
    ebv: FloatArray
    a_v: FloatArray
    m_v: FloatArray
    scatter: FloatArray
    companion: FloatArray
    colour: FloatArray
    rv: FloatArray
    v_noise: FloatArray
    ln_teff: FloatArray
    n_eff: FloatArray
    log_evidence: FloatArray
    prior_part: FloatArray
    own_part: FloatArray
    ebv_colours: FloatArray


@lru_cache(maxsize=4)
def stratified_numbers(n: int, seed: int) -> FloatArray:
    """Latin hypercube in (0, 1), shape (12, n): every row has one number in each of ``n`` equal strata."""
    rng = np.random.default_rng(seed)
    rows = [(rng.permutation(n) + rng.random(n)) / n for _ in range(_NUMBERS)]
    return np.clip(np.stack(rows), 1e-12, 1 - 1e-12)


@lru_cache(maxsize=4)
def _normals(n: int, seed: int) -> FloatArray:
    from scipy.special import ndtri

    return ndtri(stratified_numbers(n, seed))


def _pick_cells(stars: list[Star], u: FloatArray) -> IntArray:
    out = np.empty((len(stars), len(u)), np.intp)
    for row, star in zip(out, stars):
        if len(star.cells) == 1:
            row[:] = star.cells[0]
        else:
            edges = np.cumsum(star.shares)
            row[:] = star.cells[np.minimum(np.searchsorted(edges / edges[-1], u, side="right"), len(edges) - 1)]
    return out


def usable_bands(star: Star) -> list[str]:
    """Bands of the star whose intrinsic colour is known at every cell its type may be."""
    offset = intrinsic().offset
    return [b for b in star.magnitudes if np.isfinite(offset[b][star.cells]).all()]


def _spread_out(weights: FloatArray, n_eff: FloatArray, least: float) -> FloatArray:
    """Weights (n_stars, n_samples) flattened by a power until at least ``least`` samples carry each answer.

    Where type, colours and dust agree badly a handful of samples would take all the weight, and their interval would be
    far too narrow; ``n_eff`` itself is left as it was, and told in the cautions.
    """
    out = weights.copy()
    for i in np.flatnonzero(n_eff < least):
        log_w = np.log(np.maximum(weights[i], 1e-300))
        low, high = 0.0, 1.0
        for _ in range(30):
            power = 0.5 * (low + high)
            w = np.exp(power * (log_w - log_w.max()))
            w /= w.sum()
            low, high = (power, high) if 1.0 / (w**2).sum() > least else (low, power)
        w = np.exp(low * (log_w - log_w.max()))
        out[i] = w / w.sum()
    return out



def draw(stars: list[Star], scale: Scale, prior: str, n_samples: int, seed: int) -> Draws:
    """Posterior samples of a handful of stars (keep n_stars x n_samples below a million or so)."""
    from scipy.special import log_ndtr, ndtri_exp

    look = intrinsic()
    u, z = stratified_numbers(n_samples, seed), _normals(n_samples, seed)
    cell = _pick_cells(stars, u[0])
    step, lum = CELL_STEP[cell], CELL_LUM[cell]

    def column(values: list[float]) -> FloatArray:
        return np.array(values, float)[:, None]

    sin_b = column([dust.SIN_B_UNKNOWN if np.isnan(s.sin_b) else s.sin_b for s in stars])
    rv = column([s.rv[0] if s.rv else RV_MEAN for s in stars])
    rv = np.clip(rv + column([s.rv[1] if s.rv else RV_SIGMA for s in stars]) * z[5], *RV_RANGE)

    # --- magnitudes: m0 + k E + r * colour, weighted least squares in closed form
    follow = scale.bv_scatter[cell]
    odd = u[11] < ODD_SHARE
    width = np.where(odd, ODD_WIDTH, 1.0) * follow
    shape = cell.shape
    w_, k_, g_, y_, kk, kg, gg, ky, gy, yy = (np.zeros(shape) for _ in range(10))
    usable = [set(usable_bands(s)) for s in stars]
    # E(B-V) enters the coefficients weakly; a first look at B - V is good enough for that
    first = column(
        [s.magnitudes["B"][0] - s.magnitudes["V"][0] if {"B", "V"} <= set(s.magnitudes) else 0.0 for s in stars]
    )
    ebv_first = np.clip(first - look.offset["B"][cell], 0.0, 2.5) if first.any() else np.zeros(shape)
    a_v_terms = band_terms("V")[:, cell]
    k_v = evaluate(a_v_terms, rv, ebv_first)
    for band in BANDS:
        has = np.array([band in good for good in usable])
        if not has.any():
            continue
        own = look.own_scatter[band]
        value = column([s.magnitudes[band][0] if h else 0.0 for s, h in zip(stars, has)])
        error = column([max(s.magnitudes[band][1], 1e-4) if h else 1.0 for s, h in zip(stars, has)])
        weight = np.where(has[:, None], 1.0 / (error**2 + own**2), 0.0)
        k = k_v if band == "V" else k_v + 1.0 if band == "B" else evaluate(band_terms(band)[:, cell], rv, ebv_first)
        shift = scale.bv_shift[cell] * look.response[band]
        y = value - np.nan_to_num(look.offset[band][cell]) - shift
        g = look.response[band]
        wk = weight * k
        w_ += weight
        k_ += wk
        g_ += weight * g
        y_ += weight * y
        kk += wk * k
        kg += wk * g
        gg += weight * (g * g)
        ky += wk * y
        gy += weight * g * y
        yy += weight * y * y
    gg += 1.0 / width**2
    kk -= k_ * k_ / w_
    kg -= k_ * g_ / w_
    gg -= g_ * g_ / w_
    ky -= k_ * y_ / w_
    gy -= g_ * y_ / w_
    yy -= y_ * y_ / w_
    precision = kk - kg * kg / gg
    pull = ky - kg * gy / gg
    chi2 = yy - gy * gy / gg
    given_prior = [s.ebv_prior for s in stars]
    for source in (given_prior, [s.ebv_measured for s in stars]):
        if any(source):
            p = column([1.0 / max(v[1], 1e-3) ** 2 if v else 0.0 for v in source])
            e = column([v[0] if v else 0.0 for v in source])
            precision = precision + p
            pull = pull + p * e
            chi2 = chi2 + p * e * e
    precision = precision + _NO_COLOUR_PRECISION
    centre = pull / precision
    chi2 = chi2 - pull * centre
    spread = 1.0 / np.sqrt(precision)
    log_w = -0.5 * chi2 - 0.5 * np.log(gg) - np.log(width) + np.log(spread)

    # --- place in the scatter of the scale, a companion
    # a published scale is taken as it stands: its scatter has the companions in it
    companion = binaries.brightening(u[3], u[4], lum) if scale.fitted else np.zeros(shape)
    sigma_factor = column([s.sigma_factor for s in stars])
    sigma = scale.sigma[cell] * sigma_factor * np.where(u[1] < scale.tail[cell], TAIL_WIDTH, 1.0)
    sigma = np.hypot(sigma, scale.mean_err[cell])
    mean, slope = scale.mean[cell], scale.slope[cell]
    if scale.fitted:  # the scale states the middle of all stars; a single one is a little fainter
        mean = mean + binaries.median_shift(lum, scale.sigma[cell])
    spec, spec_err, rho = (column([s.abs_mag[i] for s in stars]) for i in range(3))
    has_spec = np.isfinite(spec)
    # a star without its own luminosity beside stars with one must not spread its NaN
    spec_err = np.where(has_spec, spec_err, 0.0)
    plx_mu = column([5 * np.log10(100.0 / s.parallax[0]) if s.parallax else 0.0 for s in stars])
    plx_var = column([(2.1715 * s.parallax[1] / s.parallax[0]) ** 2 if s.parallax else np.inf for s in stars])

    def place(base: FloatArray, m0: FloatArray) -> tuple[FloatArray, FloatArray, FloatArray]:
        """Mean, width and log evidence of the scatter, given luminosities measured otherwise."""
        p, q = 1.0 / sigma**2, np.zeros(shape)
        evidence = np.zeros(shape)
        if has_spec.any():
            # error of the spectrum's M_V: -rho (spec_err / sigma) scatter + an independent part
            slope_s = 1.0 - rho * spec_err / sigma
            var = np.where(has_spec, spec_err**2 * (1 - rho**2), np.inf)
            r = np.where(has_spec, spec - base, 0.0)
            total = var + (slope_s * sigma) ** 2
            evidence = np.where(has_spec, -0.5 * r * r / total - 0.5 * np.log(np.where(has_spec, total, 1.0)), 0.0)
            p = p + slope_s**2 / var
            q = q + slope_s * r / var
        if np.isfinite(plx_var).any():
            r = m0 + companion - plx_mu - base
            now = q / p
            total = plx_var + 1.0 / p
            evidence = evidence - 0.5 * np.where(np.isfinite(plx_var), (r - now) ** 2 / total + np.log(total), 0.0)
            p = p + 1.0 / plx_var
            q = q + np.where(np.isfinite(plx_var), r / plx_var, 0.0)
        return q / p, 1.0 / np.sqrt(p), evidence

    def follow_of(colour: FloatArray) -> FloatArray:
        return np.clip(colour, -ODD_FOLLOW * follow, ODD_FOLLOW * follow)

    # --- distance expected, and the dust there
    guess = np.maximum(centre, 0.0) * centre**2 / (centre**2 + spread**2)
    colour_guess = (gy - kg * guess) / gg
    m0_guess = (y_ - k_ * guess - g_ * colour_guess) / w_
    base = mean + slope * follow_of(colour_guess)
    middle, _, _ = place(base, m0_guess)
    d_guess = 10 ** (0.2 * np.clip(m0_guess - base - middle + companion, -10, 30) + 1)
    layer, cloud, share = dust.smooth_width(d_guess, sin_b), dust.mean_cloud(d_guess), dust.cloud_share(d_guess)

    # --- E(B-V): the Gaussian times a half-normal or an exponential (or nothing, where the user gave a prior of their
    # own)
    own_prior = np.array([v is not None for v in given_prior])[:, None]
    tight = precision + 1.0 / layer**2
    centre_layer, spread_layer = centre * precision / tight, 1.0 / np.sqrt(tight)
    log_layer = (
        np.log((1 - share) * np.sqrt(2 / np.pi) / layer)
        - 0.5 * centre * centre_layer / layer**2
        + np.log(spread_layer / spread)
        + log_ndtr(centre_layer / spread_layer)
    )
    centre_cloud = centre - 1.0 / (cloud * precision)
    log_cloud = np.log(share / cloud) + (0.5 / (cloud * precision) - centre) / cloud + log_ndtr(centre_cloud / spread)
    log_sum = np.where(own_prior, log_ndtr(centre / spread), np.logaddexp(log_layer, log_cloud))
    use_cloud = u[6] > np.exp(log_layer - log_sum)
    middle_e = np.where(own_prior, centre, np.where(use_cloud, centre_cloud, centre_layer))
    spread_e = np.where(use_cloud | own_prior, spread, spread_layer)
    ebv = middle_e - spread_e * ndtri_exp(np.log(u[7]) + log_ndtr(middle_e / spread_e))
    ebv = np.maximum(ebv, 0.0)
    colour = (gy - kg * ebv) / gg + z[8] / np.sqrt(gg)
    v_noise = z[9] / np.sqrt(w_)
    m0 = (y_ - k_ * ebv - g_ * colour) / w_ + v_noise
    base = mean + slope * follow_of(colour)
    middle, narrow, evidence = place(base, m0)
    scatter = middle + narrow * z[2]
    m_v = base + scatter
    modulus = np.clip(m0 - m_v + companion, -12.0, 30.0)
    distance = 10 ** (0.2 * modulus + 1)
    log_w = log_w + log_sum + evidence
    log_w = log_w + priors.log_prior(prior, distance, sin_b, step)
    # with no colour the excess is the prior's alone, drawn where the star would stand undimmed: hold it to the dust
    # there is where the star then comes to stand, or a thick cloud would put it inside the Local Bubble
    blind = (kk < 1e-9) & ~own_prior & np.array([s.ebv_measured is None for s in stars])[:, None]
    if blind.any():
        there, drawn = (dust.log_density(ebv, d, sin_b) for d in (distance, d_guess))
        log_w = log_w + np.where(blind, np.minimum(there - drawn, 0.0), 0.0)

    # --- equal weights
    top = log_w.max(axis=1, keepdims=True)
    weights = np.exp(log_w - top)
    total = weights.sum(axis=1, keepdims=True)
    weights /= total
    n_eff = 1.0 / (weights**2).sum(axis=1)
    weights = _spread_out(weights, n_eff, min(LEAST_SAMPLES, n_samples / 4))
    edges = np.cumsum(weights, axis=1)
    marks = (np.arange(n_samples) + 0.5) / n_samples
    pick = np.stack([np.minimum(np.searchsorted(row, marks * row[-1]), n_samples - 1) for row in edges])

    def taken(values: FloatArray) -> FloatArray:
        return np.take_along_axis(np.broadcast_to(values, shape), pick, axis=1)

    cell = np.take_along_axis(cell, pick, axis=1)
    colour, ebv, rv = taken(colour), taken(ebv), taken(rv)
    prior_var = np.where(use_cloud, cloud, layer) ** 2
    by_data = kk + np.array([1.0 / max(v[1], 1e-3) ** 2 if v else 0.0 for v in given_prior])[:, None]
    prior_part = np.clip(taken(1.0 / (1.0 + by_data * prior_var)).mean(axis=1), 0, 1)
    limit = ODD_FOLLOW * scale.bv_scatter[cell]
    followed = np.clip(colour, -limit, limit)
    ln_teff = look.ln_teff[cell] + look.ln_teff_per_bv[cell] * followed + look.ln_teff_scatter[cell] * z[10]
    free = taken(centre)
    ebv_colours = np.stack([free.mean(axis=1), np.sqrt((taken(spread) ** 2).mean(axis=1) + free.var(axis=1))], axis=1)
    own_part = np.clip(_own_share(stars, usable), 0, 1)
    return Draws(
        cell=cell,
        modulus=taken(modulus),
        ebv=ebv,
        a_v=ebv * taken(k_v),
        m_v=taken(m_v),
        scatter=taken(scatter),
        companion=taken(companion),
        colour=colour,
        rv=rv,
        v_noise=taken(v_noise),
        ln_teff=ln_teff,
        n_eff=n_eff,
        log_evidence=(top + np.log(total / n_samples))[:, 0],
        prior_part=prior_part,
        own_part=own_part,
        ebv_colours=ebv_colours,
    )


def _own_share(stars: list[Star], usable: list[set[str]]) -> FloatArray:
    """Share that the colours' own scatter has in the variance of the colours beside the errors of measurement."""
    own = intrinsic().own_scatter
    out = []
    for star, good in zip(stars, usable):
        scatter = sum(own[b] ** 2 for b in good)
        noise = sum(star.magnitudes[b][1] ** 2 for b in good)
        out.append(scatter / (scatter + noise) if scatter + noise > 0 else 0.0)
    return np.array(out)
