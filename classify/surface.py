"""The template surface: what a star of any type and class looks like, and how far real stars scatter about it.

Spectra are held as k principal components. At every node of (subtype, class) a local-linear regression gives the mean
components; residuals of real stars give the scatter about it, in a few temperature bands. A star is compared with all
nodes at once by the likelihood of its valid pixels under node + scatter + noise, which needs no pixel filled in.
"""

from __future__ import annotations

from dataclasses import dataclass

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
    for lo, hi in zip(BANDS, BANDS[1:]):
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
    n = len(flat)
    k = surface.loadings.shape[1]
    core_share = valid[:, CORE].mean(axis=1)
    log_like = np.empty((n, *surface.nodes.shape[:2]))
    components, spread = np.empty((n, k)), np.empty((n, k, k))
    chi2, noise_share = np.empty(n), np.empty(n)
    band_of = np.clip(np.searchsorted(BANDS, STEPS) - 1, 0, len(BANDS) - 2)
    inverse = [np.linalg.inv(c) for c in surface.scatter]
    log_det_c = [np.linalg.slogdet(c)[1] for c in surface.scatter]
    for wide in (False, True):
        rows = np.flatnonzero((core_share < 0.6) == wide)
        if not rows.size:
            continue
        use = WIDE if wide else CORE
        p = surface.loadings[use]
        variance = surface.floor[use] ** 2 + sigma[np.ix_(rows, use)] ** 2 / 2.0
        w = valid[np.ix_(rows, use)] / variance
        y = flat[np.ix_(rows, use)] - 1.0 - surface.mean[use]
        b = (w * y) @ p                                             # (r, k)
        yy = (w * y * y).sum(axis=1)
        for q, row in enumerate(rows):
            g = p.T @ (p * w[q][:, None])
            best_value = -np.inf
            for band in range(len(surface.scatter)):
                inside = band_of == band
                m = np.linalg.inv(inverse[band] + g)
                gm = g @ m
                h_vec = b[q] - gm @ b[q]
                h_mat = g - gm @ g
                z = surface.nodes[inside].reshape(-1, k)
                quad = yy[q] - b[q] @ m @ b[q] - 2 * z @ h_vec + np.einsum("ij,ij->i", z @ h_mat, z)
                log_det = log_det_c[band] + np.linalg.slogdet(inverse[band] + g)[1]
                value = -0.5 * quad - 0.5 * log_det
                log_like[row, inside] = value.reshape(-1, len(CLASS_AT))
                i = int(value.argmax())
                if value[i] > best_value:
                    best_value, best_z, best_m, best_band = value[i], z[i], m, band
            components[row] = best_z + best_m @ (b[q] - g @ best_z)
            spread[row] = best_m
            left = y[q] - p @ components[row]
            chi2[row] = float((w[q] * left ** 2).sum() / max((w[q] > 0).sum(), 1))
            noise_share[row] = float(np.clip(np.trace(inverse[best_band] @ best_m) / k, 0, 1))
    level = 1.0 + surface.mean + components @ surface.loadings.T
    return Match(log_like, components, spread, chi2, noise_share, level)


def class_index(lum_code: float) -> int:
    """Column of the class nearest to ``lum_code``."""
    return int(np.argmin(np.abs(np.array(LUM_CODES) - lum_code)))
