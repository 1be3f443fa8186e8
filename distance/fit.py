"""The distance scale, fitted to parallaxes.

M_V is a smooth surface over type and class: a Gaussian process about the published scales, narrow about them on the
main sequence and loose elsewhere. Library stars may lie off it by a smooth offset of their own and scatter more, for
their types come from many hands. A colour term, itself a smooth surface, makes M_V depend on how much redder a star is
than its type; what dust does to the colour is taken out first, with the dust prior at the star's own distance. Each
star scatters about the surface with a heavy tail, and a share of the stars has a companion that makes it brighter by
up to 0.75 mag.

The fit is made in parallax space: a star's parallax is Gaussian about what its M_V and V predict, so small and even
negative parallaxes count with their proper weight and no star is left out for a poor one, which would bias the
rest. Stars were picked by apparent brightness; at given V the mean is then that of a magnitude-limited sample, and it
is this mean that the scale states.
"""

from __future__ import annotations

from collections.abc import Collection
from dataclasses import dataclass, replace
from functools import lru_cache

import numpy as np
from numpy.typing import NDArray

from starfathom.distance import binaries, dust
from starfathom.distance.calibrators import Calibrators, calibrators
from starfathom.distance.extinction import RV_MEAN, band_terms, evaluate
from starfathom.distance.grid import CELL_LUM, CELL_STEP, cell_of, from_nodes
from starfathom.distance.intrinsic import intrinsic
from starfathom.distance.scale import OWN, PUBLISHED_TYPES, TAIL_WIDTH, Scale, composite_nodes

FloatArray = NDArray[np.float64]


@dataclass(frozen=True)
class Recipe:
    """The few numbers the fit leaves free to choose; lengths in subtypes and luminosity codes, the rest in mag."""

    length_step: float = 5.0
    length_lum: float = 1.0
    hold_dwarfs: float = 0.08
    hold_others: float = 0.6
    offset_length_step: float = 12.0
    offset: float = 0.4
    slope_length_step: float = 6.0
    slope: float = 5.0
    slope_offset: float = 4.0
    scatter_length: float = 4.0
    scatter_weight: float = 5.0
    library_scatter: float = 1.25
    library_vote: float = 0.2
    tail: float = 0.10
    rounds: int = 14


#: Guess of the scatter before any star is seen: main sequence, subgiants and giants, bright giants and supergiants.
_SCATTER_GUESS = ((5.0, 0.25), (4.0, 0.60), (3.0, 0.38), (2.0, 0.80), (0.0, 0.80))
#: Guess of the colour term in mag per mag of (B-V)_0: (class, step, value). On the main sequence a star too red for
#: its type is fainter; a red giant too red for it is brighter.
_SLOPE_GUESS: tuple[tuple[float, tuple[tuple[float, float], ...]], ...] = (
    (5.0, ((46, 0.0), (52, 3.0), (58, 6.0), (66, 7.0))),
    (4.0, ((34, 0.0), (42, -5.0), (50, -10.0), (56, -8.0))),
    (3.0, ((30, 0.0), (42, -9.0), (50, -11.0), (56, -6.0), (62, -2.0))),
    (2.0, ((30, 0.0), (45, -3.0), (60, -2.0))),
    (1.0, ((0, 0.0),)),
    (0.0, ((0, 0.0),)),
)
_COMPANION_NODES = np.array([0.10, 0.28, 0.47, 0.66])


def _nodes(table: tuple[tuple[float, tuple[tuple[float, float], ...]], ...]) -> FloatArray:
    from starfathom.distance.grid import STEP_AXIS

    return from_nodes({code: np.interp(STEP_AXIS, [p[0] for p in line], [p[1] for p in line]) for code, line in table})


def _kernel(a: tuple[FloatArray, FloatArray], b: tuple[FloatArray, FloatArray], step: float, lum: float) -> FloatArray:
    """Squared-exponential correlation between two sets of (step, luminosity code), shape (len a, len b)."""
    ds = (a[0][:, None] - b[0][None, :]) / step
    dl = (_warp(a[1])[:, None] - _warp(b[1])[None, :]) / lum
    return np.exp(-0.5 * (ds * ds + dl * dl))


def _warp(lum_code: FloatArray) -> FloatArray:
    """Luminosity code stretched so that Ia to II, which lie close in code, do not share everything."""
    return np.interp(lum_code, [0.0, 1.0, 1.3, 1.6, 2.0, 3.0, 4.0, 5.0], [-0.8, 0.2, 0.6, 1.0, 1.6, 3.0, 4.0, 5.0])


def _slope_amplitude(step: FloatArray, lum_code: FloatArray, recipe: Recipe) -> FloatArray:
    """How far the colour term may leave its guess: not at all where dust and rotation rule the colour."""
    ramp = np.where(lum_code >= 4.5, np.interp(step, [46, 52], [0.0, 1.0]), np.interp(step, [36, 44], [0.0, 1.0]))
    return recipe.slope * ramp


def _amplitude(lum_code: FloatArray, recipe: Recipe) -> FloatArray:
    return np.interp(lum_code, [4.0, 4.6], [recipe.hold_others, recipe.hold_dwarfs])


@dataclass(frozen=True)
class _Colours:
    """Dust and intrinsic colour of the calibrators: excess, deviation of (B-V)_0 and its error, V without dust."""

    ebv: FloatArray
    ebv_err: FloatArray
    deviation: FloatArray
    deviation_err: FloatArray
    v_zero: FloatArray


def _split_colour(stars: Calibrators, distance_pc: FloatArray, bv_zero: FloatArray, scatter: FloatArray) -> _Colours:
    """Share the excess of B-V between dust and the star, at a known distance."""
    x = stars.b_v - bv_zero
    grid = np.concatenate([np.arange(0, 0.1, 0.004), np.arange(0.1, 1.6, 0.02)])
    width = np.gradient(grid)
    noise = stars.e_b_v
    total = np.hypot(scatter, noise)[:, None]
    log_p = -0.5 * ((x[:, None] - grid) / total) ** 2
    # a star may be odd: one in twenty-five scatters four times wider
    log_p = np.logaddexp(np.log(0.96) + log_p, np.log(0.01) - 0.5 * ((x[:, None] - grid) / (4 * total)) ** 2)
    log_p = log_p + dust.log_density(grid[None, :], distance_pc[:, None], dust.SIN_B_UNKNOWN)
    p = np.exp(log_p - log_p.max(axis=1, keepdims=True)) * width
    p /= p.sum(axis=1, keepdims=True)
    ebv = (p * grid).sum(axis=1)
    ebv_err = np.sqrt(np.maximum((p * grid**2).sum(axis=1) - ebv**2, 0))
    keep = scatter**2 / (scatter**2 + noise**2)
    deviation = np.clip((x - ebv) * keep, -3 * scatter, 3 * scatter)
    cell = cell_of(stars.t_code, stars.lum_code)
    k_v = evaluate(band_terms("V")[:, cell], RV_MEAN, ebv)
    return _Colours(ebv, ebv_err, deviation, np.sqrt(keep) * noise, stars.v_mag - k_v * ebv)


def _components(lum_code: FloatArray, sigma: FloatArray, tail: float) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Weights, brightenings and widths of the scatter as a sum of Gaussians, each (n, 10)."""
    share = binaries.share(lum_code)[:, None]
    light = np.concatenate([[0.0], _COMPANION_NODES])
    one = np.concatenate([1 - share, np.repeat(share / 4, 4, axis=1)], axis=1)
    weight = np.concatenate([(1 - tail) * one, tail * one], axis=1)
    width = np.concatenate(
        [np.repeat(sigma[:, None], 5, axis=1), np.repeat(TAIL_WIDTH * sigma[:, None], 5, axis=1)], axis=1
    )
    return weight, np.tile(np.concatenate([light, light]), (len(sigma), 1)), width


@dataclass(frozen=True)
class _Expected:
    """What the scatter of each star is expected to be, given the surface: see :func:`_expect`."""

    precision: FloatArray
    target: FloatArray
    square: FloatArray


def _expect(
    f: FloatArray, v_zero: FloatArray, v_err: FloatArray, stars: Calibrators, sigma: FloatArray, tail: float
) -> _Expected:
    """Precision and target of the surface at each star, and the squared scatter in units of the narrow width.

    The likelihood of a parallax is Gaussian in parallax; where it is better than 12 % the same Gaussian in magnitude is
    used, elsewhere the integral over M_V is done by sums.
    """
    weight, light, width = _components(stars.lum_code, sigma, tail)
    snr = stars.parallax / stars.e_parallax
    good = snr > 8
    precision, target, square = np.empty(len(f)), np.empty(len(f)), np.empty(len(f))
    wide = np.where(width > 1.5 * sigma[:, None], TAIL_WIDTH**2, 1.0)
    if good.any():
        m_obs = v_zero[good] - 10 + 5 * np.log10(stars.parallax[good])
        var = (2.1715 / snr[good]) ** 2 + v_err[good] ** 2
        r = (m_obs - f[good])[:, None] + light[good]
        total = width[good] ** 2 + var[:, None]
        log_g = np.log(weight[good]) - 0.5 * r * r / total - 0.5 * np.log(total)
        g = np.exp(log_g - log_g.max(axis=1, keepdims=True))
        g /= g.sum(axis=1, keepdims=True)
        precision[good] = (g / total).sum(axis=1)
        target[good] = f[good] + (g * r / total).sum(axis=1) / precision[good]
        inner = width[good] ** 2 / total
        square[good] = (g * (r * r * inner**2 + width[good] ** 2 * (1 - inner)) / wide[good]).sum(axis=1)
    poor = np.flatnonzero(~good)
    if len(poor):
        grid = np.linspace(-5.0, 5.0, 251)
        m = f[poor, None] + grid
        predicted = 10 ** (0.2 * (m - v_zero[poor, None] + 10))
        like = (
            -0.5
            * (
                (stars.parallax[poor, None] - predicted)
                / np.hypot(stars.e_parallax[poor, None], 0.46 * v_err[poor, None] * predicted)
            )
            ** 2
        )
        r = grid[None, None, :] + light[poor][:, :, None]
        s = width[poor][:, :, None]
        log_g = np.log(weight[poor])[:, :, None] - 0.5 * (r / s) ** 2 - np.log(s) + like[:, None, :]
        g = np.exp(log_g - log_g.max(axis=(1, 2), keepdims=True))
        g /= g.sum(axis=(1, 2), keepdims=True)
        slope = (g * r / s**2).sum(axis=(1, 2))
        bend = (g / s**2).sum(axis=(1, 2)) - (g * (r / s**2) ** 2).sum(axis=(1, 2)) + slope**2
        # precision x (target - f) must be the slope of the log likelihood, whatever precision is taken
        precision[poor] = np.maximum(bend, 0.1 / sigma[poor] ** 2)
        target[poor] = f[poor] + slope / precision[poor]
        square[poor] = (g * r * r / wide[poor][:, :, None]).sum(axis=(1, 2))
    return _Expected(precision, target, square)


def _smooth_scatter(
    at: tuple[FloatArray, FloatArray], stars: Calibrators, square: FloatArray, use: FloatArray, recipe: Recipe
) -> FloatArray:
    """Width of the scatter at some types: local mean of the squares about a guess that counts as a few stars."""
    guess = np.interp(at[1], [p[0] for p in _SCATTER_GUESS[::-1]], [p[1] for p in _SCATTER_GUESS[::-1]])
    near = _kernel(at, (stars.step, stars.lum_code), recipe.scatter_length, 0.5) * use
    return np.sqrt((recipe.scatter_weight * guess**2 + near @ square) / (recipe.scatter_weight + near.sum(axis=1)))


def _library_ratio(stars: Calibrators, square: FloatArray, own: FloatArray, recipe: Recipe) -> FloatArray:
    """How many times wider library stars scatter than standards of their class, smooth over class; (n,)."""
    lib = stars.library != ""
    near = np.exp(-0.5 * ((stars.lum_code[:, None] - stars.lum_code[None, :]) / 0.5) ** 2) * lib
    mean = (20 * recipe.library_scatter**2 + near @ (square / own**2)) / (20 + near.sum(axis=1))
    return np.sqrt(np.clip(mean, 1.0, 4.0))


def _bv_surface(
    stars: Calibrators, distance_pc: FloatArray, scatter0: FloatArray
) -> tuple[FloatArray, FloatArray, FloatArray, FloatArray]:
    """Mean shift of (B-V)_0 from the tables and its scatter, from stars near enough to have no dust to speak of.

    Returns both at the stars and on the cells.
    """
    cell = cell_of(stars.t_code, stars.lum_code)
    x = stars.b_v - intrinsic().offset["B"][cell]
    reach = np.where(stars.lum_code > 3.5, 80.0, 150.0)
    near = (distance_pc < reach) & (stars.parallax > 8 * stars.e_parallax) & (stars.step > 18)
    x_near = np.clip(x, -3 * scatter0, 3 * scatter0)
    noise = np.hypot(scatter0, stars.e_b_v)
    weight = near / noise**2
    out = []
    for at in ((stars.step, stars.lum_code), (CELL_STEP, CELL_LUM)):
        k = _kernel(at, (stars.step, stars.lum_code), 3.0, 0.6) * weight
        shift = (k @ x_near) / (k.sum(axis=1) + 1 / 0.02**2)
        out.append(shift)
    left = np.minimum(np.abs(x - out[0]), 3 * scatter0)
    for at, guess in (((stars.step, stars.lum_code), scatter0), ((CELL_STEP, CELL_LUM), intrinsic().bv_scatter)):
        k = _kernel(at, (stars.step, stars.lum_code), 4.0, 0.5) * near
        out.append(np.sqrt((8 * guess**2 + k @ np.maximum(left**2 - stars.e_b_v**2, 0)) / (8 + k.sum(axis=1))))
    return out[0], out[1], out[2], out[3]


def fit(stars: Calibrators, recipe: Recipe = Recipe(), *, colour: bool = True) -> tuple[Scale, Scale]:
    """Fit the scale to calibrators; returns the scale of standards, and that of published types at large.

    ``colour=False`` leaves the colour term out.
    """
    mean_cells = from_nodes(composite_nodes())
    slope_cells = _nodes(_SLOPE_GUESS) * colour
    cell = cell_of(stars.t_code, stars.lum_code)
    at = (stars.step, stars.lum_code)
    cells = (CELL_STEP, CELL_LUM)
    prior_mean = mean_cells[cell]
    by_type = 10 ** (0.2 * (stars.v_mag - prior_mean) + 1)
    snr = stars.parallax / stars.e_parallax
    distance = np.where(snr > 4, 1000.0 / np.maximum(stars.parallax, 0.1), np.minimum(by_type, 3000.0))
    shift, shift_cells, bv_scatter, bv_scatter_cells = _bv_surface(stars, distance, intrinsic().bv_scatter[cell])
    colours = _split_colour(stars, distance, intrinsic().offset["B"][cell] + shift, bv_scatter)
    delta = colours.deviation
    lib = (stars.library != "").astype(float)
    base = prior_mean + slope_cells[cell] * delta

    def covariance(a: tuple[FloatArray, FloatArray], b: tuple[FloatArray, FloatArray]) -> FloatArray:
        k = _kernel(a, b, recipe.length_step, recipe.length_lum)
        return _amplitude(a[1], recipe)[:, None] * _amplitude(b[1], recipe)[None, :] * k

    k_mean = covariance(at, at)
    free = _slope_amplitude(*at, recipe) * colour
    k_slope = np.outer(free, free) * _kernel(at, at, recipe.slope_length_step, recipe.length_lum)
    k_offset = recipe.offset**2 * _kernel(at, at, recipe.offset_length_step, 1.2) * np.outer(lib, lib)
    mine = lib * free / recipe.slope * recipe.slope_offset
    k_slope += np.outer(mine, mine) * _kernel(at, at, recipe.slope_length_step, recipe.length_lum)
    k_all = k_mean + delta[:, None] * k_slope * delta[None, :] + k_offset
    v_err = 3.2 * colours.ebv_err
    use = np.where(lib > 0, recipe.library_vote, 1.0)
    ratio = np.where(lib > 0, recipe.library_scatter, 1.0)
    sigma = np.interp(stars.lum_code, [2.0, 3.0, 4.0, 5.0], [0.8, 0.6, 0.6, 0.4]) * ratio
    f = base.copy()
    expected = _expect(f, colours.v_zero, v_err, stars, sigma, recipe.tail)
    alpha: FloatArray = np.zeros(len(stars))
    for _ in range(recipe.rounds):
        noise = 1.0 / expected.precision
        alpha = np.asarray(np.linalg.solve(k_all + np.diag(noise), expected.target - base), np.float64)
        f = base + k_all @ alpha
        expected = _expect(f, colours.v_zero, v_err, stars, sigma, recipe.tail)
        own = _smooth_scatter(at, stars, expected.square / ratio**2, use, recipe)
        ratio = np.where(lib > 0, _library_ratio(stars, expected.square, own, recipe), 1.0)
        sigma = own * ratio
    noise = 1.0 / expected.precision
    inverse = np.linalg.inv(k_all + np.diag(noise))
    alpha = inverse @ (expected.target - base)
    cross = covariance(cells, at)
    width = _smooth_scatter(cells, stars, expected.square / ratio**2, use, recipe)
    mean = mean_cells + cross @ alpha - binaries.median_shift(CELL_LUM, width)
    variance = _amplitude(CELL_LUM, recipe) ** 2 - np.einsum("ij,ij->i", cross @ inverse, cross)
    near = _kernel(cells, at, recipe.slope_length_step, recipe.length_lum)
    free_cells = _slope_amplitude(*cells, recipe)
    cross_slope = np.outer(free_cells, free * delta) * near
    cross_slope_lib = np.outer(free_cells / recipe.slope * recipe.slope_offset, mine * delta) * near
    slope = slope_cells + cross_slope @ alpha
    held = (_kernel(cells, at, 2.0, 0.4) * np.minimum(1.0, 0.6**2 * expected.precision)).sum(axis=1)
    scale = Scale(
        name=OWN,
        source="fitted to Hipparcos parallaxes (van Leeuwen 2007) of MK standards and library stars",
        mean=mean,
        mean_err=np.sqrt(np.maximum(variance, 1e-4)),
        sigma=width,
        tail=np.full(len(mean), recipe.tail),
        slope=slope if colour else np.zeros(len(mean)),
        bv_shift=shift_cells,
        bv_scatter=bv_scatter_cells,
        weight=held,
    )
    cross_offset = recipe.offset**2 * _kernel(cells, at, recipe.offset_length_step, 1.2) * lib
    at_large = replace(
        scale,
        name=PUBLISHED_TYPES,
        mean=mean + cross_offset @ alpha,
        slope=scale.slope + colour * (cross_slope_lib @ alpha),
        sigma=scale.sigma * np.interp(CELL_LUM, *_by_class(stars.lum_code[lib > 0], ratio[lib > 0])),
    )
    return scale, at_large


def _by_class(lum_code: FloatArray, ratio: FloatArray) -> tuple[FloatArray, FloatArray]:
    code, first = np.unique(lum_code, return_index=True)
    return (code, ratio[first]) if len(code) else (np.array([5.0]), np.array([1.0]))


@lru_cache(maxsize=16)
def _fit_cached(libraries: tuple[str, ...], stars: tuple[int, ...]) -> tuple[Scale, Scale]:
    return fit(calibrators(libraries, stars))


def fit_scale(
    without_libraries: Collection[str] = (), without_stars: Collection[int] = (), *, published_types: bool = False
) -> Scale:
    """The scale fitted afresh without some libraries (by name) and stars (Hipparcos numbers); a few seconds, cached.

    ``published_types`` gives the scale of types of mixed origin, wider and slightly off, instead of the standards'.
    """
    libraries = tuple(sorted({name.lower() for name in without_libraries}))
    return _fit_cached(libraries, tuple(sorted({int(h) for h in without_stars})))[int(published_types)]
