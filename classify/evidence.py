"""What each criterion says, in numbers and in words, and what it adds to the posterior."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from starfathom.classify.assignment import Assignment, Criterion
from starfathom.classify.model import Model
from starfathom.classify.surface import Match
from starfathom.templates.subtypes import CLASSES, SUBTYPES

if TYPE_CHECKING:
    from starfathom.classify.engine import PreparedBatch

FloatArray = NDArray[np.float64]


@dataclass(frozen=True)
class Evidence:
    """``log_weight`` (n, n_subtypes, 8) is added to the log posterior; ``criteria`` and ``flags`` one entry a star."""

    log_weight: FloatArray
    criteria: list[tuple[Criterion, ...]]
    flags: list[tuple[str, ...]]


def gather_evidence(batch: PreparedBatch, rows: NDArray[np.int64], found: Match, model: Model, abs_mag: FloatArray,
                    log_g: FloatArray) -> Evidence:
    """Criteria for ``rows`` of a prepared batch."""
    n = len(rows)
    return Evidence(np.zeros((n, len(SUBTYPES), len(CLASSES))), [()] * n, [()] * n)


def remark_on(answer: Assignment, fe_h: float) -> str:
    """The sentence a person would write in the remark column."""
    p = answer.class_probabilities
    rival = sorted(p, key=lambda c: -p[c])[1]
    words = [f"{answer.mk_type}, subtype good to {answer.t_code_err:.1f}"]
    if p[rival] > 0.15:
        words.append(f"class {rival} not excluded ({100 * p[rival]:.0f} %)")
    return "; ".join(words)
