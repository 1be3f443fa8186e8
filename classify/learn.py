"""Train the classifier from a library: alignment, then one :class:`Model` a rung.

    python -m starfathom.classify.learn          retrain on the whole library and write classify/data/model/

Training on part of the library (``--without`` on the command line) goes through the same :func:`learn_rung`.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from dataclasses import fields as dataclass_fields
from itertools import pairwise
from pathlib import Path

import numpy as np
from numpy.typing import NDArray
from scipy.interpolate import CubicSpline
from scipy.optimize import minimize

from starfathom.classify import alignment
from starfathom.classify.alignment import Nodes
from starfathom.classify.criteria import CriterionScales, learn_criterion_scales, log_likelihood, measure_criteria
from starfathom.classify.gaussian_process import Regressor, fit
from starfathom.classify.grid import WAVE, blur, continuum, rectify
from starfathom.classify.lines.direct import measure_many
from starfathom.classify.model import RUNGS, Blend, Loci, Model
from starfathom.classify.posterior import (
    GROUPS,
    cell_of,
    evidence_pieces,
    normalise,
    set_score,
    student,
    weigh,
    widen,
)
from starfathom.classify.surface import BANDS, CLASS_AT, CORE, PIXELS, Surface, fit_surface, local_linear, match
from starfathom.classify.training import Lessons, fill_gaps, lessons_from
from starfathom.templates.library import GRID_KMS, Library
from starfathom.templates.subtypes import STEPS, t_code_from_step

FloatArray = NDArray[np.float64]
BoolArray = NDArray[np.bool_]
MODEL_DIR = Path(__file__).parent / "data" / "model"
_FOLDS = 5
_NOISE = 0.005      # white noise given to library spectra in training, a 60 km/s pixel
_PERTURBED_NOISE = 0.006
#: (components, weight) of the regressors that are averaged.
_SIZES = (20, 40)
_MIN_COVERAGE = 0.9
#: Share of library labels taken to have a plainly wrong class; assumed, not measured.
_WRONG_LABELS = 0.05
_BALMER = np.array([3889.1, 3970.1, 4101.7, 4340.5, 4861.3, 6562.8])


@dataclass(frozen=True)
class Aligned:
    """A library at rest with straightened wavelength scales, at its own resolution, (n, m)."""

    flux: FloatArray
    valid: BoolArray
    fwhm_angstrom: FloatArray
    lessons: Lessons
    nodes: Nodes


def _blur_each(flux: FloatArray, valid: BoolArray, fwhm: FloatArray, target: float) -> tuple[FloatArray, BoolArray]:
    out, ok = np.empty_like(flux), np.empty_like(valid)
    for width in np.unique(fwhm):
        rows = fwhm == width
        out[rows], ok[rows] = blur(flux[rows], valid[rows], float(np.sqrt(max(target ** 2 - width ** 2, 0.0))))
    return out, ok


def make_nodes(flat: FloatArray, valid: BoolArray, lessons: Lessons) -> Nodes:
    """Alignment nodes: weighted means of like stars, at the finest width of the ladder."""
    plan = [(s, 5.0) for s in np.arange(8.0, 63.0, 1.5)] + [(s, 3.0) for s in np.arange(10.0, 67.0, 2.0)] \
        + [(s, 1.4) for s in np.arange(8.0, 60.0, 2.5)]
    spectra, kept = [], []
    lum = np.where(np.isfinite(lessons.lum_code), lessons.lum_code, 99.0)
    step = np.where(lessons.trust > 0, lessons.step, 999.0)
    weighted = np.where(valid, flat, 0.0)
    for at_step, at_class in plan:
        w = lessons.trust * np.exp(-0.5 * ((step - at_step) / 1.2) ** 2 - 0.5 * ((lum - at_class) / 0.5) ** 2)
        if w.sum() < 1.5:
            continue
        total = w @ valid.astype(float)
        spectra.append(np.where(total > 0.3 * w.sum(), (w @ weighted) / np.maximum(total, 1e-9), 1.0))
        kept.append((at_step, at_class))
    reach = valid[lessons.trust > 0].mean(axis=0) > 0.5
    steps, classes = np.array(kept).T
    return Nodes.from_fine(np.array(spectra), reach & (WAVE < 7400), steps, classes)


def align_library(library: Library, passes: int = 2, *, vetted: bool = True) -> Aligned:
    """Bring every library star to the rest frame of the library as a whole, wander taken out."""
    flux, valid = library.flux.astype(float), library.valid
    fwhm = library.catalogue["fwhm_angstrom"].astype(float)
    lessons = lessons_from(library, vetted=vetted)
    pixel = np.arange(flux.shape[1], dtype=float)
    splines, bad = [], []
    for row, ok in zip(flux, valid):
        good = np.flatnonzero(ok)
        splines.append(CubicSpline(pixel, np.interp(pixel, good, row[good])))
        bad.append((~ok).astype(float))
    velocity = np.zeros_like(flux)
    moved, ok_moved = flux, valid
    for _ in range(passes):
        fine, ok = _blur_each(moved, ok_moved, fwhm, alignment.LADDER[0])
        flat, _ = rectify(fine, ok)
        nodes = make_nodes(flat, ok, lessons)
        coarse, ok_c = blur(moved, ok_moved, 5.0)
        level, _ = rectify(coarse, ok_c)
        first, _, best, _ = alignment.first_velocity(level, ok_c, nodes)
        first = np.where(np.abs(first) < 400, first, 0.0)
        trial, trial_ok = _shift(splines, bad, velocity + first[:, None])
        fine, ok = _blur_each(trial, trial_ok, fwhm, alignment.LADDER[0])
        flat, _ = rectify(fine, ok)
        curve, _ = alignment.wander(flat, ok, best, np.full(len(flat), alignment.LADDER[0]), nodes)
        velocity = velocity + first[:, None] + curve
        moved, ok_moved = _shift(splines, bad, velocity)
    fine, ok = _blur_each(moved, ok_moved, fwhm, alignment.LADDER[0])
    flat, _ = rectify(fine, ok)
    return Aligned(moved, ok_moved, fwhm, lessons, make_nodes(flat, ok, lessons))


def _shift(splines: list[CubicSpline], bad: list[FloatArray], velocity: FloatArray) -> tuple[FloatArray, BoolArray]:
    pixel = np.arange(velocity.shape[1], dtype=float)
    flux, valid = np.empty_like(velocity), np.empty(velocity.shape, bool)
    for i, spline in enumerate(splines):
        at = pixel + velocity[i] / GRID_KMS
        valid[i] = (np.interp(at, pixel, bad[i], left=1, right=1) < 1e-3)
        flux[i] = np.where(valid[i], spline(np.clip(at, 0, pixel[-1])), 0.0)
    return flux, valid


def perturb(flux: FloatArray, valid: BoolArray, rng: np.random.Generator) -> tuple[FloatArray, BoolArray]:
    """Spectra as another instrument might give them.

    Wavelength error and wander (10 km/s), line spread off by some 8 %, 4 % scattered light or its opposite,
    calibration ripple on 30 A (0.8 %) and more of it across the Balmer lines (1.5 %, for flux standards are mostly hot
    stars whose Balmer lines are badly divided out), pixel noise (0.6 %).
    """
    n, m = flux.shape
    pixel = np.arange(m, dtype=float)
    ln = np.log(WAVE)
    soft, _ = blur(flux, valid, 2.0)
    level = continuum(flux, valid)
    knots, fine = np.linspace(ln[0], ln[-1], 9), np.linspace(ln[0], ln[-1], 120)
    bumps = np.exp(-0.5 * ((WAVE - _BALMER[:, None]) / 25.0) ** 2)
    out = np.empty_like(flux)
    for i in range(n):
        wander = np.interp(ln, knots, rng.normal(0, 10.0, 9)) + rng.normal(0, 8.0)
        mix = rng.normal(0, 0.35)
        row = (1 - mix) * flux[i] + mix * soft[i] + rng.normal(0, 0.04) * level[i]
        good = np.flatnonzero(valid[i])
        row = np.interp(pixel + wander / GRID_KMS, good, row[good])
        ripple = 1 + np.interp(ln, fine, rng.normal(0, 0.008, 120)) + rng.normal(0, 0.015, len(_BALMER)) @ bumps
        out[i] = row * ripple * (1 + rng.normal(0, _PERTURBED_NOISE, m))
    return np.where(valid, out, 0.0), valid


def _regressors(z: FloatArray, target: FloatArray, error: FloatArray, rows: NDArray[np.int64]
                ) -> tuple[Regressor, ...]:
    return tuple(fit(z[rows], target[rows], error[rows], components=k) for k in _SIZES)


def _step_regressor(z: FloatArray, moved: FloatArray, lessons: Lessons, typed: NDArray[np.int64],
                    keep: NDArray[np.int64]) -> Regressor:
    """Subtype from the components of ``typed[keep]`` and of their perturbed copies (``moved``, a row a typed star)."""
    rows = typed[keep]
    points = np.concatenate([z[rows], moved[keep]])
    error = np.tile(1.1 / np.sqrt(np.clip(lessons.trust[rows], 0.2, 1.0)), 2)
    return fit(points, np.tile(lessons.step[rows], 2), error, components=40, jitters=(0.02,))


def average(regressors: tuple[Regressor, ...], z: FloatArray, spread: FloatArray | None = None
            ) -> tuple[FloatArray, FloatArray]:
    """Mean prediction of several regressors and the standard deviation that ``spread`` alone brings."""
    values = [r.predict(z, spread) for r in regressors]
    extra = [np.maximum(sd ** 2 - r.amplitude - r.jitter ** 2, 0) for (_, sd), r in zip(values, regressors)]
    return np.mean([v for v, _ in values], axis=0), np.sqrt(np.mean(extra, axis=0))


def class_loci(step: FloatArray, lum_code: FloatArray, value: FloatArray, least_sd: float
               ) -> tuple[FloatArray, FloatArray]:
    """Robust local mean and scatter of ``value`` along the subtypes for each class, (n_subtypes, 8) each."""
    have = np.isfinite(value)
    step, lum_code, value = step[have], lum_code[have], value[have]
    mean, sd = np.empty((len(STEPS), 8)), np.empty((len(STEPS), 8))
    for j, code in enumerate(CLASS_AT):
        close = np.exp(-0.5 * ((lum_code - code) / (0.3 if code < 2.4 else 0.25)) ** 2)
        for i, at in enumerate(STEPS):
            widen_by = 1.0
            for _ in range(8):
                w = close * np.exp(-0.5 * ((step - at) / (3 * widen_by)) ** 2)
                if w.sum() > 5:
                    break
                widen_by *= 1.4
            design = np.column_stack([np.ones(len(step)), (step - at) / 3])
            robust = w.copy()
            for _ in range(3):
                normal = design.T @ (design * robust[:, None]) + np.diag([1e-6, 2.0])
                line = np.linalg.solve(normal, design.T @ (robust * value))
                r = value - design @ line
                spread = float(np.sqrt((w * np.minimum(r ** 2, 4.5)).sum() / w.sum()))
                robust = w / (1 + (r / (3 * spread + 0.05)) ** 2)
            mean[i, j], sd[i, j] = line[0], np.hypot(spread, least_sd)
    return mean, sd


@dataclass(frozen=True)
class _Held:
    """Cross-validated pieces for the calibration spectra."""

    rows: NDArray[np.int64]
    log_like: FloatArray
    abs_mag: FloatArray
    abs_mag_extra: FloatArray
    log_g: FloatArray
    log_g_extra: FloatArray
    step: FloatArray
    step_extra: FloatArray
    criteria: FloatArray


def _fit_blend(held: _Held, lessons: Lessons, surface: Surface, loci: Loci) -> Blend:
    """Weights by log loss of the true class and of the subtype, with a mild pull towards where they start."""
    rows = held.rows
    group_of = {j: g for g, members in enumerate(GROUPS) for j in members}
    truth = np.array([group_of[cell_of(20.0, lessons.lum_code[i])[1]] for i in rows])
    target = lessons.label_step[rows]
    pieces = evidence_pieces(held.log_like, held.abs_mag, held.abs_mag_extra, held.log_g, held.log_g_extra, held.step,
                             held.step_extra, held.criteria, surface, loci)
    start = np.log(np.array([0.2, 0.35, 0.35, 1.0, 0.05, 0.4, 0.4]))

    def unpack(x: FloatArray) -> Blend:
        prior = np.array([-1.2, 0, 0, 0, x[5], 0, x[6], 0])
        temper, abs_mag, log_g, step, criteria = (float(v) for v in np.exp(x[:5]))
        return Blend(temper, abs_mag, log_g, step, criteria, prior, 0.0)

    def moments(blend: Blend) -> tuple[FloatArray, FloatArray, FloatArray]:
        p = normalise(weigh(pieces, blend))
        pt = p.sum(axis=2)
        mean = pt @ STEPS
        return p, mean, np.maximum(pt @ STEPS ** 2 - mean ** 2, 0.01)

    def loss(x: FloatArray) -> float:
        p, mean, own = moments(unpack(x))
        by_group = np.stack([p[:, :, list(g)].sum(axis=(1, 2)) for g in GROUPS], axis=1)
        # some labels are plainly wrong; what they say must not blunt the rest
        chosen = (1 - _WRONG_LABELS) * by_group[np.arange(len(rows)), truth] + _WRONG_LABELS / len(GROUPS)
        sd2 = own + 0.8 ** 2
        off = student((target - mean) / np.sqrt(sd2)) - 0.5 * np.log(sd2)
        return float(-np.log(chosen).mean() - 0.5 * off.mean() + 0.02 * ((x - start) ** 2).sum())

    found = minimize(loss, start, method="Nelder-Mead", options={"maxfev": 220, "xatol": 0.05, "fatol": 1e-4})
    blend = unpack(found.x)
    _, mean, own = moments(blend)
    # what the labels scatter beyond the posterior's own spread
    excess = np.percentile(np.abs(target - mean), 68) ** 2 - np.median(own)
    return replace(blend, step_sd_floor=float(np.sqrt(max(excess, 0.04))))


def _criteria(flux: FloatArray, valid: BoolArray, fwhm: float) -> tuple[FloatArray, FloatArray]:
    """Values and errors of the ratio criteria of (n, m) spectra already at ``fwhm``."""
    values, errors, _ = measure_criteria(measure_many(WAVE, flux, np.abs(flux) * _NOISE + 1e-9, valid,
                                                      np.full(len(flux), fwhm)))
    return values, errors


def features(aligned: Aligned, fwhm: float, flux: FloatArray | None = None) -> tuple[FloatArray, BoolArray]:
    """Rectified spectra over PIXELS at a rung, (n, p), and their validity."""
    blurred, ok = _blur_each(aligned.flux if flux is None else flux, aligned.valid, aligned.fwhm_angstrom, fwhm)
    flat, _ = rectify(blurred, ok)
    return flat[:, PIXELS], ok[:, PIXELS]


def learn_rung(aligned: Aligned, names: NDArray[np.str_], labels: NDArray[np.str_], fwhm: float, seed: int = 0
               ) -> Model:
    """Train one rung: surface, regressors, loci, blend and conformal scores."""
    lessons = aligned.lessons
    flat, valid = features(aligned, fwhm)
    covered = valid[:, CORE].mean(axis=1) >= _MIN_COVERAGE
    typed = np.flatnonzero((lessons.trust > 0) & covered)
    filled = fill_gaps(flat, valid, lessons.step, lessons.lum_code)
    surface, z_typed = fit_surface(filled[typed], lessons.step[typed], lessons.lum_code[typed], lessons.trust[typed])
    z = (filled - 1.0 - surface.mean)[:, CORE] @ surface.loadings[CORE]
    bright = np.flatnonzero(np.isfinite(lessons.abs_mag_v) & covered)
    heavy = np.flatnonzero(np.isfinite(lessons.log_g) & covered)
    metal = np.flatnonzero(np.isfinite(lessons.fe_h) & covered & (lessons.step > 25))
    unit = np.ones(len(z))

    rng = np.random.default_rng(seed)
    moved, _ = perturb(aligned.flux[typed], aligned.valid[typed], rng)
    sub = Aligned(moved, aligned.valid[typed], aligned.fwhm_angstrom[typed], lessons, aligned.nodes)
    flat_p, valid_p = features(sub, fwhm)
    z_moved = (np.where(valid_p, flat_p, filled[typed]) - 1.0 - surface.mean)[:, CORE] @ surface.loadings[CORE]
    surface = _add_instrument(surface, z_moved - z_typed, lessons.step[typed])

    blurred, ok = _blur_each(aligned.flux[typed], aligned.valid[typed], aligned.fwhm_angstrom[typed], fwhm)
    values, errors = _criteria(blurred, ok, fwhm)
    blurred, ok = _blur_each(moved, aligned.valid[typed], aligned.fwhm_angstrom[typed], fwhm)
    values_p, errors_p = _criteria(blurred, ok, fwhm)

    def scales(rows: NDArray[np.int64]) -> CriterionScales:
        return learn_criterion_scales(values[rows], errors[rows], t_code_from_step(lessons.step[typed[rows]]),
                                      lessons.lum_code[typed[rows]], lessons.trust[typed[rows]])

    groups, inverse = np.unique(lessons.group[typed], return_inverse=True)
    fold = rng.integers(0, _FOLDS, len(groups))[inverse]
    fold_of_group = dict(zip(lessons.group[typed], fold))
    held_parts = []
    sigma = np.full(flat_p.shape, _PERTURBED_NOISE)
    for f in range(_FOLDS):
        test = np.flatnonzero(fold == f)
        train = np.flatnonzero(fold != f)
        out_groups = {g for g, q in fold_of_group.items() if q == f}
        nodes, support = local_linear(z_typed[train], lessons.step[typed][train], lessons.lum_code[typed][train],
                                      _weights(lessons, typed[train]))
        part = Surface(surface.mean, surface.loadings, surface.floor, nodes, support, surface.scatter)
        found = match(part, flat_p[test], valid_p[test], sigma[test])
        keep = np.array([g not in out_groups for g in lessons.group])
        m, me = average(_regressors(z, lessons.abs_mag_v, lessons.abs_mag_v_err, bright[keep[bright]]),
                        found.components, found.spread)
        g, ge = average(_regressors(z, lessons.log_g, 0.15 * unit, heavy[keep[heavy]]), found.components, found.spread)
        t, te = average((_step_regressor(z, z_moved, lessons, typed, train),), found.components, found.spread)
        own = scales(train)
        says = np.concatenate([log_likelihood(own, values_p[q], errors_p[q]).sum(axis=1)
                               for q in np.array_split(test, max(1, len(test) // 30))])
        held_parts.append(_Held(typed[test], found.log_like, m, me, g, ge, t, te, says))
    held = _Held(*(np.concatenate([getattr(h, f.name) for h in held_parts]) for f in dataclass_fields(_Held)))
    loci = Loci(*class_loci(lessons.step[held.rows], lessons.lum_code[held.rows], held.abs_mag, 0.3),
                *class_loci(lessons.step[held.rows], lessons.lum_code[held.rows], held.log_g, 0.15),
                _step_scatter(held.step, lessons.step[held.rows]))
    blend = _fit_blend(held, lessons, surface, loci)
    pieces = evidence_pieces(held.log_like, held.abs_mag, held.abs_mag_extra, held.log_g, held.log_g_extra, held.step,
                             held.step_extra, held.criteria, surface, loci)
    p = widen(normalise(weigh(pieces, blend)), blend.step_sd_floor)
    scores = np.sort([set_score(p[i], *cell_of(float(t_code_from_step(lessons.label_step[r])), lessons.lum_code[r]))
                      for i, r in enumerate(held.rows)])
    off = held.abs_mag - lessons.abs_mag_v[held.rows]
    have = np.isfinite(off)
    residuals = np.column_stack([lessons.step[held.rows], held.abs_mag,
                                 off ** 2 - lessons.abs_mag_v_err[held.rows] ** 2])[have]
    everyone = np.arange(len(typed))
    return Model(fwhm, surface, _regressors(z, lessons.abs_mag_v, lessons.abs_mag_v_err, bright),
                 _regressors(z, lessons.log_g, 0.15 * unit, heavy),
                 (_step_regressor(z, z_moved, lessons, typed, everyone),),
                 fit(z[metal], lessons.fe_h[metal], 0.12 * unit[metal], components=40), scales(everyone), loci, blend,
                 residuals, scores, names[typed], labels[typed], z_typed.astype(np.float32))


def _add_instrument(surface: Surface, moved: FloatArray, step: FloatArray) -> Surface:
    """The surface with the covariance of what instruments change (``moved`` components) added to that of the stars."""
    scatter = []
    for own, (lo, hi) in zip(surface.scatter, pairwise(BANDS)):
        near = (step > lo - 2) & (step < hi + 2)
        delta = moved[near]
        scatter.append(own + delta.T @ delta / max(len(delta), 1))
    return replace(surface, scatter=np.array(scatter))


def _step_scatter(found: FloatArray, label: FloatArray) -> FloatArray:
    """Robust local standard deviation of the regressed subtype, at every subtype: (n_subtypes,)."""
    off = np.minimum((found - label) ** 2, 16.0)
    near = np.exp(-0.5 * ((STEPS[:, None] - found[None]) / 4.0) ** 2) + 1e-9
    return np.sqrt(np.maximum((near @ off) / near.sum(axis=1), 0.5))


def _weights(lessons: Lessons, rows: NDArray[np.int64]) -> FloatArray:
    step, lum = lessons.step[rows], lessons.lum_code[rows]
    crowd = np.exp(-0.5 * ((step[:, None] - step) / 2) ** 2 - 0.5 * ((lum[:, None] - lum) / 0.6) ** 2).sum(axis=1)
    weight = lessons.trust[rows] / np.sqrt(crowd)
    return weight / weight.mean()


def main() -> None:
    from starfathom.templates.library import load_library

    library = load_library()
    aligned = align_library(library)
    MODEL_DIR.mkdir(parents=True, exist_ok=True)
    save_nodes(aligned.nodes, MODEL_DIR / "nodes.npz")
    for fwhm in RUNGS:
        model = learn_rung(aligned, library.catalogue["star"], library.catalogue["label"], fwhm)
        model.save(MODEL_DIR / f"rung_{fwhm:g}.npz")
        print(f"rung {fwhm:g} A: {len(model.names)} typed stars, blend {model.blend}")


def save_nodes(nodes: Nodes, path: Path) -> None:
    """Only the finest rung is stored; the ladder is rebuilt on opening."""
    np.savez_compressed(path, rect=nodes.rect[0].astype(np.float16), valid=nodes.valid, step=nodes.step,
                        lum_code=nodes.lum_code)


def load_nodes(path: Path) -> Nodes:
    """Inverse of :func:`save_nodes`."""
    with np.load(path) as z:
        return Nodes.from_fine(z["rect"].astype(float) + 1.0, z["valid"], z["step"], z["lum_code"])


if __name__ == "__main__":
    main()
