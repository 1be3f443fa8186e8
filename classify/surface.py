"""The template surface: what a star of any type and class looks like, and how far real stars scatter about it.

Spectra are held as k principal components. At every node of (subtype, class) a local-linear regression gives the mean
components; residuals of real stars give the scatter about it, in a few temperature bands. A star is compared with all
nodes at once by the likelihood of its valid pixels under node + scatter + noise, which needs no pixel filled in.
"""

from __future__ import annotations

from dataclasses import dataclass
from itertools import pairwise

import numpy as np
from numpy.typing import NDArray

from starfathom.classify.alignment import telluric_free
from starfathom.classify.grid import WAVE
from starfathom.templates.subtypes import LUM_CODES, STEPS

FloatArray = NDArray[np.float64]
BoolArray = NDArray[np.bool_]

#: Grid pixels the surface knows: 3640 to 7390 A.
PIXELS = np.flatnonzero((WAVE > 3640.0) & (WAVE < 7390.0))
_W = WAVE[PIXELS]
#: Of those, the ones matched by default (every second, 120 km/s): 3700 to 6800 A without Na D.
CORE = np.flatnonzero((_W > 3700.0) & (_W < 6800.0) & telluric_free(_W))[::2]
#: And with the red end, for spectra that have little else.
WIDE = np.flatnonzero((_W > 3700.0) & telluric_free(_W))[::2]
#: Class coordinate at which each class is evaluated: Ia0 has next to no stars of its own.
CLASS_AT = np.array([0.6, *LUM_CODES[1:]])
BANDS = (-9.0, 14.0, 26.0, 37.0, 47.0, 56.0, 90.0)
#: Misfit of a pixel that no component describes: library noise and what differs between instruments.
FLOOR = 0.008
#: Degrees of freedom of the multivariate Student's t that stands for the scatter: a star that lies far from every node
#: (an odd instrument, an odd star) must not be drawn to whatever type scatters most.
TAIL = 20.0


@dataclass(frozen=True)
class Surface:
    """Arrays of one rung of the resolution ladder (k components, b bands)."""

    mean: FloatArray        # (p,) over PIXELS, rectified minus one
    loadings: FloatArray    # (p, k)
    floor: FloatArray       # (p,)
    nodes: FloatArray       # (n_subtypes, 8, k)
    support: FloatArray     # (n_subtypes, 8) effective number of stars near each node
    scatter: FloatArray     # (b, k, k)

    def spectrum(self, step: float, lum_code: float) -> FloatArray:
        """Rectified spectrum (p,) over :data:`PIXELS`, interpolated linearly between nodes."""
        return 1.0 + self.mean + self.loadings @ self.components_at(np.array([step]), np.array([lum_code]))[0]

    def components_at(self, step: FloatArray, lum_code: FloatArray) -> FloatArray:
        """Mean components (n, k) at any (step, lum_code)."""
        i = np.clip(np.searchsorted(STEPS, step) - 1, 0, len(STEPS) - 2)
        a = np.clip((step - STEPS[i]) / (STEPS[i + 1] - STEPS[i]), 0, 1)[:, None]
        j = np.clip(np.searchsorted(CLASS_AT, lum_code) - 1, 0, len(CLASS_AT) - 2)
        b = np.clip((lum_code - CLASS_AT[j]) / (CLASS_AT[j + 1] - CLASS_AT[j]), 0, 1)[:, None]
        n = self.nodes
        return (1 - a) * ((1 - b) * n[i, j] + b * n[i, j + 1]) + a * ((1 - b) * n[i + 1, j] + b * n[i + 1, j + 1])


@dataclass(frozen=True)
class Match:
    """What :func:`match` found for n spectra."""

    log_like: FloatArray     # (n, n_subtypes, 8)
    components: FloatArray   # (n, k) at the best node
    spread: FloatArray       # (n, k, k) their covariance from noise and missing pixels
    chi2: FloatArray         # (n,) per pixel, of the residual about the surface's reach
    noise_share: FloatArray  # (n,) 0 when scatter of stars dominates, 1 when noise does
    level: FloatArray        # (n, p) reconstructed rectified spectrum over PIXELS


def local_linear(components: FloatArray, step: FloatArray, lum_code: FloatArray, weight: FloatArray,
                 width_step: float = 1.2, width_class: float = 0.5, wanted: float = 6.0
                 ) -> tuple[FloatArray, FloatArray]:
    """Node means (n_subtypes, 8, k) by local-linear regression, wider where stars are few; and the support."""
    n, k = components.shape
    nodes = np.zeros((len(STEPS), len(CLASS_AT), k))
    support = np.zeros((len(STEPS), len(CLASS_AT)))
    ones = np.ones(n)
    for i, at_step in enumerate(STEPS):
        ds = step - at_step
        for j, at_class in enumerate(CLASS_AT):
            dl = lum_code - at_class
            widen = 1.0
            for _ in range(9):
                w = weight * np.exp(-0.5 * (ds / (width_step * widen)) ** 2
                                    - 0.5 * (dl / (width_class * min(widen, 2.5))) ** 2)
                if w.sum() >= wanted:
                    break
                widen *= 1.3
            design = np.column_stack([ones, ds / (width_step * widen), dl / (width_class * widen)])
            normal = design.T @ (design * w[:, None]) + np.diag([1e-6, 0.3, 0.3]) * w.sum()
            nodes[i, j] = np.linalg.solve(normal, design.T @ (components * w[:, None]))[0]
            support[i, j] = np.exp(-0.5 * (ds / 1.5) ** 2 - 0.5 * (dl / 0.7) ** 2).sum()
    return nodes, support


def fit_surface(flat: FloatArray, step: FloatArray, lum_code: FloatArray, trust: FloatArray, *, components: int = 60,
                shrink: float = 0.1) -> tuple[Surface, FloatArray]:
    """Fit to (n, p) rectified spectra over :data:`PIXELS` (no gaps); also returns the components (n, k).

    ``trust`` (n,) weighs each label. Rare types are weighted up, and once, outliers down.
    """
    x = flat - 1.0
    crowd = np.exp(-0.5 * ((step[:, None] - step) / 2) ** 2 - 0.5 * ((lum_code[:, None] - lum_code) / 0.6) ** 2)
    weight = trust / np.sqrt(crowd.sum(axis=1))
    weight /= weight.mean()
    core = x[:, CORE]
    centre = (core * weight[:, None]).sum(axis=0) / weight.sum()
    _, _, directions = np.linalg.svd((core - centre) * np.sqrt(weight)[:, None], full_matrices=False)
    directions = directions[:components]
    z = (core - centre) @ directions.T
    # the same components over all pixels, those beyond the core by regression
    design = np.column_stack([np.ones(len(z)), z])
    ridge = np.eye(design.shape[1]) * 1e-3
    ridge[0, 0] = 1e-9
    solution = np.linalg.solve(design.T @ (design * weight[:, None]) + ridge, design.T @ (x * weight[:, None]))
    mean, loadings = solution[0], solution[1:].T.copy()
    residual = x - mean - z @ loadings.T
    spread = np.sqrt((residual ** 2 * weight[:, None]).sum(axis=0) / weight.sum())
    mean[CORE], loadings[CORE] = centre, directions.T
    outside = np.ones(len(_W), bool)
    outside[CORE] = False
    floor = np.where(outside & (_W > 6800.0), np.maximum(2 * spread, FLOOR), FLOOR)

    nodes, support = local_linear(z, step, lum_code, weight)
    surface = Surface(mean, loadings, floor, nodes, support, np.zeros((0, 0, 0)))
    size = ((z - surface.components_at(step, lum_code)) ** 2).sum(axis=1)
    usual = np.array([np.median(size[np.abs(step - s) < 3]) for s in step])
    weight = weight / (1 + (size / usual / 3) ** 2)
    nodes, support = local_linear(z, step, lum_code, weight)
    surface = Surface(mean, loadings, floor, nodes, support, np.zeros((0, 0, 0)))
    r = z - surface.components_at(step, lum_code)
    scatter = []
    for lo, hi in pairwise(BANDS):
        near = weight * np.exp(-0.5 * (np.maximum(0, np.maximum(lo - step, step - hi)) / 2) ** 2)
        cov = (r * near[:, None]).T @ r / near.sum()
        cov = (1 - shrink) * cov + shrink * np.diag(np.diag(cov)) + np.eye(len(cov)) * np.trace(cov) / len(cov) * 0.02
        scatter.append(cov)
    return Surface(mean, loadings, floor, nodes, support, np.array(scatter)), z


def match(surface: Surface, flat: FloatArray, valid: BoolArray, sigma: FloatArray) -> Match:
    """Compare (n, p) rectified spectra over :data:`PIXELS` with every node.

    ``sigma`` is the noise a 60 km/s pixel, white. The log likelihood of node g is that of the valid pixels under
    N(P z_g, P C P' + W^-1), by the matrix inversion lemma in k dimensions (Rasmussen & Williams 2006, A.9).
    """
    n, k = len(flat), surface.loadings.shape[1]
    log_like = np.empty((n, *surface.nodes.shape[:2]))
    components, spread = np.empty((n, k)), np.empty((n, k, k))
    chi2, noise_share = np.empty(n), np.empty(n)
    wide = valid[:, CORE].mean(axis=1) < 0.6
    for use, rows in ((CORE, np.flatnonzero(~wide)), (WIDE, np.flatnonzero(wide))):
        if rows.size:
            part = _match_rows(surface, use, flat[np.ix_(rows, use)], valid[np.ix_(rows, use)],
                               sigma[np.ix_(rows, use)])
            log_like[rows], components[rows], spread[rows], chi2[rows], noise_share[rows] = part
    level = 1.0 + surface.mean + components @ surface.loadings.T
    return Match(log_like, components, spread, chi2, noise_share, level)


_TRIANGLE: dict[tuple[object, ...], tuple[NDArray[np.float32], tuple[NDArray[np.intp], NDArray[np.intp]]]] = {}


def _products(loadings: FloatArray) -> tuple[NDArray[np.float32], tuple[NDArray[np.intp], NDArray[np.intp]]]:
    """Products of all pairs of components at each pixel, (p, k(k+1)/2): P' W P of a batch as one matrix product."""
    key = (loadings.shape, float(loadings[0, 0]), float(loadings[-1, -1]))
    if key not in _TRIANGLE:
        if len(_TRIANGLE) > 16:
            _TRIANGLE.clear()
        i, j = np.triu_indices(loadings.shape[1])
        _TRIANGLE[key] = ((loadings[:, i] * loadings[:, j]).astype(np.float32), (i, j))
    return _TRIANGLE[key]


def _match_rows(surface: Surface, use: NDArray[np.int64], flat: FloatArray, valid: BoolArray, sigma: FloatArray
                ) -> tuple[FloatArray, FloatArray, FloatArray, FloatArray, FloatArray]:
    p = surface.loadings[use]
    r, k = len(flat), p.shape[1]
    w = valid / (surface.floor[use] ** 2 + sigma ** 2 / 2.0)
    y = flat - 1.0 - surface.mean[use]
    b = (w * y) @ p
    yy = (w * y * y).sum(axis=1)
    pairs, (ti, tj) = _products(p)
    g = np.empty((r, k, k))
    g[:, ti, tj] = w.astype(np.float32) @ pairs
    g[:, tj, ti] = g[:, ti, tj]

    band_of = np.clip(np.searchsorted(BANDS, STEPS) - 1, 0, len(BANDS) - 2)
    # a first look, scatter ignored, tells which temperature bands can matter at all
    all_z = surface.nodes.reshape(-1, k)
    # what no combination of components can fit is the same for every node and has no say
    rest = yy - np.einsum("ni,ni->n", b, np.linalg.solve(g + 1e-6 * np.trace(g, axis1=1, axis2=2)[:, None, None]
                                                         / k * np.eye(k), b[..., None])[..., 0])
    bend = np.array([np.einsum("zi,zi->z", all_z @ one, all_z) for one in g])
    rough = (bend - 2 * b @ all_z.T).reshape(r, *log_shape(surface))
    centre = band_of[rough.min(axis=2).argmin(axis=1)]

    out = np.full((r, *log_shape(surface)), np.nan)
    best = np.full(r, -np.inf)
    z_best, m_best = np.zeros((r, k)), np.zeros((r, k, k))
    share = np.zeros(r)
    for band, scatter in enumerate(surface.scatter):
        rows = np.flatnonzero(np.abs(centre - band) <= 1)
        if not rows.size:
            continue
        inverse = np.linalg.inv(scatter)
        total = inverse + g[rows]
        m = np.linalg.inv(total)
        gm = g[rows] @ m
        h_vec = b[rows] - np.einsum("nij,nj->ni", gm, b[rows])
        h_mat = g[rows] - gm @ g[rows]
        inside = np.flatnonzero(band_of == band)
        z = surface.nodes[inside].reshape(-1, k)
        quad = (yy[rows] - np.einsum("ni,nij,nj->n", b[rows], m, b[rows]))[:, None] - 2 * h_vec @ z.T
        quad += np.einsum("nzj,zj->nz", z[None] @ h_mat, z)
        value = -0.5 * (TAIL + k) * np.log1p(np.maximum(quad - rest[rows, None], 0.0) / TAIL)
        value -= 0.5 * (np.linalg.slogdet(scatter)[1] + np.linalg.slogdet(total)[1])[:, None]
        out[np.ix_(rows, inside)] = value.reshape(len(rows), len(inside), -1)
        top = value.argmax(axis=1)
        peak = value[np.arange(len(rows)), top]
        better = peak > best[rows]
        q = rows[better]
        best[q], z_best[q], m_best[q] = peak[better], z[top[better]], m[better]
        share[q] = np.einsum("ij,nji->n", inverse, m[better]) / k
    lowest = np.nanmin(out, axis=(1, 2))
    out = np.where(np.isnan(out), (lowest - 50.0)[:, None, None], out)
    components = z_best + np.einsum("nij,nj->ni", m_best, b - np.einsum("nij,nj->ni", g, z_best))
    left = y - components @ p.T
    chi2 = (w * left ** 2).sum(axis=1) / np.maximum((w > 0).sum(axis=1), 1)
    return out, components, m_best, chi2, np.clip(share, 0, 1)


def log_shape(surface: Surface) -> tuple[int, int]:
    """(subtypes, classes) of the plane of types."""
    return surface.nodes.shape[0], surface.nodes.shape[1]


def class_index(lum_code: float) -> int:
    """Column of the class nearest to ``lum_code``."""
    return int(np.argmin(np.abs(np.array(LUM_CODES) - lum_code)))
