"""From the pieces of evidence to one posterior over subtype x class, and from it the words and numbers."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from starfathom.classify.model import Blend, Loci
from starfathom.classify.surface import Surface
from starfathom.templates.subtypes import CLASSES, LUM_CODES, STEPS, SUBTYPES, T_CODES

FloatArray = NDArray[np.float64]
#: The classes as scored: supergiants together, then II, III, IV, V.
GROUPS: tuple[tuple[int, ...], ...] = ((0, 1, 2, 3), (4,), (5,), (6,), (7,))
_SUPPORT_WANTED = 0.3
_UNSUPPORTED = -3.0
#: Cells are not equally wide in step (O9.7; K5-K7-M0): the prior is per unit of step.
_CELL_WIDTH = np.gradient(STEPS)

#: How often a half subtype is used, against the whole ones beside it: counted among the library's catalogue types.
_HALF_USAGE = {"O": 0.5, "B": 0.1, "A": 0.02, "F": 0.03, "G": 0.05, "K": 0.07, "M": 0.17}
_COMMON_HALVES = ("O9.5", "O9.7", "B0.5", "B1.5", "B2.5", "B9.5")
USAGE: FloatArray = np.array([1.0 if "." not in name else 0.5 if name in _COMMON_HALVES else _HALF_USAGE[name[0]]
                              for name in SUBTYPES])


def student(deviation: FloatArray, dof: float = 5.0) -> FloatArray:
    """Log density of Student's t up to a constant: outliers must not decide."""
    return -0.5 * (dof + 1) * np.log1p(deviation ** 2 / dof)


def evidence_pieces(log_like: FloatArray, abs_mag: FloatArray, abs_mag_extra: FloatArray, log_g: FloatArray,
                    log_g_extra: FloatArray, step: FloatArray, step_extra: FloatArray, criteria: FloatArray,
                    surface: Surface, loci: Loci) -> tuple[FloatArray, ...]:
    """Log evidence of each kind over the plane of types, (n, n_subtypes, 8) each, and last what is the same for all.

    ``*_extra`` (n,) are standard deviations from noise and missing pixels, on top of the loci's own scatter.
    ``criteria`` (n, n_subtypes, 8) is the summed log likelihood of the ratio criteria.
    """
    def against(value: FloatArray, extra: FloatArray, mean: FloatArray, sd: FloatArray) -> FloatArray:
        total = np.sqrt(sd ** 2 + extra[:, None, None] ** 2)
        return student((value[:, None, None] - mean) / total) - np.log(total)

    thin = np.where(surface.support < _SUPPORT_WANTED, _UNSUPPORTED, 0.0)
    # where the He criteria speak, they and not the thin library of O stars say what is possible
    thin[STEPS < 9.6] = np.maximum(thin[STEPS < 9.6], _UNSUPPORTED / 2)
    fixed = thin + np.log(_CELL_WIDTH * USAGE)[:, None]
    return (log_like, against(abs_mag, abs_mag_extra, loci.abs_mag, loci.abs_mag_sd),
            against(log_g, log_g_extra, loci.log_g, loci.log_g_sd),
            against(step, step_extra, STEPS[:, None], loci.step_sd[:, None]), criteria, fixed[None])


def weigh(pieces: tuple[FloatArray, ...], blend: Blend) -> FloatArray:
    """Unnormalised log posterior (n, n_subtypes, 8) from :func:`evidence_pieces`."""
    weights = (blend.temper, blend.abs_mag_weight, blend.log_g_weight, blend.step_weight, blend.criteria_weight, 1.0)
    total = sum(w * piece for w, piece in zip(weights, pieces))
    return np.asarray(total + blend.log_prior_class)


def normalise(log_p: FloatArray) -> FloatArray:
    """Probabilities over the last two axes."""
    p = np.exp(log_p - log_p.max(axis=(-2, -1), keepdims=True))
    return p / p.sum(axis=(-2, -1), keepdims=True)


def widen(posterior: FloatArray, sd_step: float) -> FloatArray:
    """Posterior blurred along the subtype by ``sd_step``: labels themselves are that uncertain."""
    if sd_step <= 0:
        return posterior
    kernel = np.exp(-0.5 * ((STEPS[:, None] - STEPS[None]) / sd_step) ** 2) * _CELL_WIDTH[:, None]
    kernel *= USAGE[:, None]
    kernel /= kernel.sum(axis=0)
    out = np.einsum("ij,njc->nic", kernel, posterior)
    return out / out.sum(axis=(1, 2), keepdims=True)


def codes(posterior: FloatArray) -> tuple[FloatArray, FloatArray, FloatArray, FloatArray]:
    """Mean and standard deviation of step and of lum_code, each (n,)."""
    pt, pl = posterior.sum(axis=2), posterior.sum(axis=1)
    lum = np.array(LUM_CODES)
    step = pt @ STEPS
    step_sd = np.sqrt(np.maximum(pt @ STEPS ** 2 - step ** 2, 0.01))
    lum_mean = pl @ lum
    lum_sd = np.sqrt(np.maximum(pl @ lum ** 2 - lum_mean ** 2, 1e-4))
    return step, step_sd, lum_mean, lum_sd


def best_type(posterior: FloatArray) -> tuple[int, int]:
    """(subtype index, class index) of one posterior (n_subtypes, 8): most probable class group, then within it."""
    by_class = posterior.sum(axis=0)
    group = max(GROUPS, key=lambda g: float(by_class[list(g)].sum()))
    j = max(group, key=lambda c: float(by_class[c]))
    given = posterior[:, list(group)].sum(axis=1)
    mean = float(given @ STEPS / given.sum())
    # of the subtypes about the mean the most probable, so that a half is printed only where halves are in use
    near = np.flatnonzero(np.abs(STEPS - mean) <= 0.55)
    share = given[near] / _CELL_WIDTH[near] * np.exp(-0.5 * ((STEPS[near] - mean) / 0.25) ** 2)
    return int(near[share.argmax()]), j


def set_score(posterior: FloatArray, i: int, j: int) -> float:
    """Probability mass of all cells more probable than cell (i, j), plus half its own."""
    density = posterior
    here = density[i, j]
    return float(posterior[density > here].sum() + 0.5 * posterior[i, j])


def type_set(posterior: FloatArray, mass: float) -> tuple[str, ...]:
    """Cells in falling probability until their mass reaches ``mass``, as MK types, most probable first."""
    density = posterior.ravel()
    order = np.argsort(-density, kind="stable")
    total = np.cumsum(posterior.ravel()[order])
    count = int(np.searchsorted(total, min(mass, 0.9999))) + 1
    return tuple(f"{SUBTYPES[k // len(CLASSES)]} {CLASSES[k % len(CLASSES)]}" for k in order[:count])


def cell_of(t_code: float, lum_code: float) -> tuple[int, int]:
    """Nearest cell to a label."""
    return int(np.argmin(np.abs(T_CODES - t_code))), int(np.argmin(np.abs(np.array(LUM_CODES) - lum_code)))
