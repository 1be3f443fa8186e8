"""What each criterion says, in numbers and in words, and what it adds to the posterior."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from starfathom.classify.assignment import Assignment, Criterion
from starfathom.classify.criteria import CriterionScales, criteria_for, log_likelihood, measure_criteria
from starfathom.classify.grid import WAVE, blur
from starfathom.classify.lines.direct import BulkLines, measure_many
from starfathom.classify.model import RUNGS, Model
from starfathom.templates.subtypes import CLASSES, SUBTYPES

if TYPE_CHECKING:
    from starfathom.classify.engine import PreparedBatch

FloatArray = NDArray[np.float64]


@dataclass(frozen=True)
class Evidence:
    """``log_like`` (n, n_subtypes, 8) is the summed log likelihood of the criteria."""

    log_like: FloatArray
    lines: tuple[tuple[BulkLines, int], ...]
    scales: tuple[CriterionScales, ...]
    flags: list[tuple[str, ...]]

    def criteria_for(self, row: int, t_code: float) -> tuple[Criterion, ...]:
        """Criteria of one spectrum as evidence, what each points to near ``t_code`` and its share of the say."""
        lines, index = self.lines[row]
        found = criteria_for(lines, index, scales=self.scales[row], t_guess=t_code)
        # the share goes by how sharply a criterion points
        say = [sum(1 / e ** 2 for e in (c.t_code_err, 2 * c.lum_code_err) if np.isfinite(e) and e > 0) for c in found]
        total = sum(say) or 1.0
        weighted = [Criterion(**{**vars(c), "weight": round(s / total, 4)}) for c, s in zip(found, say)]
        return tuple(sorted(weighted, key=lambda c: -c.weight))


def line_rung(fwhm_angstrom: float) -> float:
    """Rung at which lines are measured for the criteria: the finest that is not finer than the star."""
    return next((r for r in RUNGS if r >= fwhm_angstrom - 0.05), RUNGS[-1])


def gather_evidence(batch: PreparedBatch, rows: NDArray[np.int64], model_of: Callable[[float], Model],
                    step: FloatArray) -> Evidence:
    """Criteria for ``rows`` of a prepared batch, measured at the rung next to each spectrum's own line spread."""
    n = len(rows)
    log_like = np.zeros((n, len(SUBTYPES), len(CLASSES)))
    lines: list[tuple[BulkLines, int]] = [None] * n   # type: ignore[list-item]
    scales: list[CriterionScales] = [None] * n        # type: ignore[list-item]
    rung = np.array([line_rung(f) for f in batch.fwhm_angstrom[rows]])
    kernel = np.round(np.sqrt(np.maximum(rung ** 2 - batch.fwhm_angstrom[rows] ** 2, 0)), 1)
    for r in np.unique(rung):
        mine = np.flatnonzero(rung == r)
        flux, ok = batch.flux[rows[mine]].copy(), batch.valid[rows[mine]].copy()
        for k in np.unique(kernel[mine]):
            q = kernel[mine] == k
            flux[q], ok[q] = blur(flux[q], ok[q], float(k))
        bulk = measure_many(WAVE, flux, batch.sigma[rows[mine]], ok, np.full(len(mine), r),
                            velocity_kms=batch.velocity_kms[rows[mine]])
        values, errors, _ = measure_criteria(bulk)
        own = model_of(float(r)).criteria
        log_like[mine] = log_likelihood(own, values, errors).sum(axis=1)
        for i, q in enumerate(mine):
            lines[q], scales[q] = (bulk, i), own
    return Evidence(log_like, tuple(lines), tuple(scales), [()] * n)


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
