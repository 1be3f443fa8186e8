"""What each criterion says, in numbers and in words, and what it adds to the posterior."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from starfathom.classify.assignment import Assignment, Criterion
from starfathom.classify.criteria import CriterionScales, load_criteria, log_likelihood, measure_criteria, point
from starfathom.classify.grid import WAVE, blur
from starfathom.classify.lines.direct import BulkLines, measure_many
from starfathom.classify.model import RUNGS, Model
from starfathom.templates.subtypes import CLASSES, SUBTYPES, class_of, nearest_subtype

if TYPE_CHECKING:
    from starfathom.classify.engine import PreparedBatch

FloatArray = NDArray[np.float64]


@dataclass(frozen=True)
class Evidence:
    """Criteria of n spectra, (n, k) in the order of the table; ``log_like`` (n, n_subtypes, 8) is their sum."""

    log_like: FloatArray
    values: FloatArray
    errors: FloatArray
    scales: tuple[CriterionScales, ...]

    def criteria(self, t_code: FloatArray) -> list[tuple[Criterion, ...]]:
        """The usable criteria of each spectrum near its type ``t_code`` (n,), what each points to, weightiest first.

        The weight goes by how sharply a criterion points, in subtypes and in half classes.
        """
        rules = load_criteria()
        n, k = self.values.shape
        low, high = np.array([r.t_lo - 1 for r in rules]), np.array([r.t_hi + 1 for r in rules])
        listed = np.isfinite(self.values) & (t_code[:, None] >= low) & (t_code[:, None] <= high)
        near = np.where(listed, self.values, np.nan)
        t, t_err, lum, lum_err = (np.full((n, k), np.nan) for _ in range(4))
        for scales in {id(s): s for s in self.scales}.values():
            mine = np.flatnonzero([s is scales for s in self.scales])
            said = point(scales, near[mine], self.errors[mine], t_code[mine])
            t[mine], t_err[mine], lum[mine], lum_err[mine] = said
        say = np.nan_to_num(1 / t_err ** 2) + np.nan_to_num(0.25 / lum_err ** 2)
        say = np.where(listed, say, 0.0)
        weight = say / np.maximum(say.sum(axis=1, keepdims=True), 1e-12)
        out = []
        for i in range(n):
            found = []
            for j in np.flatnonzero(listed[i])[np.argsort(-weight[i, listed[i]], kind="stable")]:
                rule = rules[j]
                words = [nearest_subtype(float(t[i, j]))] if np.isfinite(t[i, j]) else []
                words += [class_of(float(lum[i, j]))] if np.isfinite(lum[i, j]) else []
                found.append(Criterion(
                    rule.label, float(self.values[i, j]), float(self.errors[i, j]), " ".join(words),
                    round(float(weight[i, j]), 4), float(t[i, j]), float(t_err[i, j]), float(lum[i, j]),
                    float(lum_err[i, j]), rule.features, rule.citation))
            out.append(tuple(found))
        return out


#: The published He II criteria of O stars, how much they count, and the regressed subtype before which they do.
_HELIUM = [i for i, rule in enumerate(load_criteria()) if rule.name in ("he1_he2", "he2_4686")]
_RATIO = next(i for i, rule in enumerate(load_criteria()) if rule.name == "he1_he2")
_HELIUM_WEIGHT = 1.0
_HELIUM_BEFORE_STEP = 18.0
#: Spectra whose criteria are laid over the plane of types at once: half a megabyte a spectrum, several times over.
_AT_ONCE = 8


def _limit_helium(bulk: BulkLines, values: FloatArray, errors: FloatArray) -> None:
    """Where He II 4541 is there and He I 4471 is not: the ratio at what 4471 may be at most, for the earliest O stars.

    Fills ``values`` and ``errors`` in place. The error is that of a line seen at one standard deviation.
    """
    (neutral, neutral_err), (ionised, ionised_err) = bulk.column("HeI_4471"), bulk.column("HeII_4541")
    rule = load_criteria()[_RATIO]
    there = ionised > 4.0 * np.hypot(ionised_err, rule.floor)
    fill = np.isnan(values[:, _RATIO]) & there & (bulk.fwhm_angstrom <= rule.coarsest_fwhm)
    least = np.hypot(neutral_err, rule.floor)
    with np.errstate(all="ignore"):
        values[fill, _RATIO] = np.log10(np.maximum(neutral, least) / ionised)[fill]
    errors[fill, _RATIO] = 0.2


def line_rung(fwhm_angstrom: float) -> float:
    """Rung at which lines are measured for the criteria: the finest that is not finer than the star."""
    return next((r for r in RUNGS if r >= fwhm_angstrom - 0.05), RUNGS[-1])


def gather_evidence(batch: PreparedBatch, rows: NDArray[np.int64], model_of: Callable[[float], Model],
                    step: FloatArray, criteria_weight: float) -> Evidence:
    """Criteria for ``rows`` of a prepared batch, measured at the rung next to each spectrum's own line spread.

    ``step`` (n,) is the regressed subtype, ``criteria_weight`` the weight their sum will get in the posterior.
    """
    n, k = len(rows), len(load_criteria())
    log_like = np.zeros((n, len(SUBTYPES), len(CLASSES)))
    all_values, all_errors = np.full((n, k), np.nan), np.full((n, k), np.nan)
    scales: list[CriterionScales | None] = [None] * n
    rung = np.array([line_rung(f) for f in batch.fwhm_angstrom[rows]])
    kernel = np.round(np.sqrt(np.maximum(rung ** 2 - batch.fwhm_angstrom[rows] ** 2, 0)), 1)
    for r in np.unique(rung):
        mine = np.flatnonzero(rung == r)
        flux, ok = batch.flux[rows[mine]].copy(), batch.valid[rows[mine]].copy()
        for width in np.unique(kernel[mine]):
            q = kernel[mine] == width
            flux[q], ok[q] = blur(flux[q], ok[q], float(width))
        bulk = measure_many(WAVE, flux, batch.sigma[rows[mine]], ok, np.full(len(mine), r),
                            velocity_kms=batch.velocity_kms[rows[mine]])
        values, errors, _ = measure_criteria(bulk)
        _limit_helium(bulk, values, errors)
        own = model_of(float(r)).criteria
        for part in np.split(np.arange(len(mine)), range(_AT_ONCE, len(mine), _AT_ONCE)):
            each = log_likelihood(own, values[part], errors[part])
            # O types rest on the published He criteria, which are few: near O they have their full say, where the
            # learned ones, many and akin, are tempered together (``criteria_weight``)
            near_o = np.where(step[mine[part]] < _HELIUM_BEFORE_STEP, _HELIUM_WEIGHT / criteria_weight - 1.0, 0.0)
            log_like[mine[part]] = each.sum(axis=1) + near_o[:, None, None] * each[:, _HELIUM].sum(axis=1)
        all_values[mine], all_errors[mine] = values, errors
        for q in mine:
            scales[q] = own
    return Evidence(log_like, all_values, all_errors, tuple(s for s in scales if s is not None))


def remark_on(answer: Assignment, fe_h: float) -> str:
    """The sentence a person would write in the remark column."""
    p = answer.class_probabilities
    order = sorted(p, key=lambda c: -p[c])
    own = answer.mk_type.split()[-1]
    words = [f"subtype good to {answer.t_code_err:.1f}"]
    rivals = [c for c in order if c != own and p[c] > 0.15]
    if rivals:
        words.append("class " + " or ".join(f"{c} ({100 * p[c]:.0f} %)" for c in rivals) + " not excluded")
    strong = [c for c in answer.evidence if c.points_to and c.weight > 0.02][:3]
    if strong:
        words.append("rests on " + ", ".join(f"{c.name} ({c.points_to})" for c in strong))
    away = [c for c in answer.evidence if c.weight > 0.02 and np.isfinite(c.t_code)
            and abs(c.t_code - answer.t_code) > 3 * np.hypot(c.t_code_err, answer.t_code_err)]
    if away:
        words.append(f"{away[0].name} objects (points to {away[0].points_to})")
    if "metal-weak" in answer.flags:
        words.append(f"metals weak for the type, [Fe/H] about {fe_h:.1f}")
    return "; ".join(words)


__all__ = ["Evidence", "gather_evidence", "line_rung", "remark_on"]
