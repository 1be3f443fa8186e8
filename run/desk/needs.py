"""How much a star needs a look: how uncertain its distance is because its type is."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from starfathom.classify.assignment import Assignment
from starfathom.desk.plane import N_CLASSES, N_TYPES, inner_set

FloatArray = NDArray[np.float64]

#: (n_subtypes, n_classes) absolute V magnitude of every cell, NaN where the scale does not reach.
MagnitudeGrid = FloatArray


@dataclass(frozen=True)
class Need:
    """``score``: the larger, the sooner one should look. ``why``: a few words."""

    score: float
    why: str


def need(assignment: Assignment, magnitudes: MagnitudeGrid | None = None) -> Need:
    """How much one star needs a look.

    For a typed star the score is the scatter, in per cent of the distance, that the spread of types in the posterior
    brings (0.46 of the scatter in absolute magnitude: d ln r = 0.2 ln 10 dM), and a tenth of the share of probability
    that the best type leaves to the others, so that equals in distance go by certainty. A star refused has no
    distance at all and comes first; one whose file failed shows nothing and comes last.
    """
    if assignment.status == "failed":
        return Need(-1.0, "not readable")
    if assignment.status != "typed" or assignment.posterior is None:
        what = assignment.other_type or assignment.object_kind
        return Need(1000.0, f"refused: {what}" if what not in ("", "unknown") else "refused")
    p = assignment.posterior / assignment.posterior.sum()
    left = 1.0 - float(p.max())
    percent = distance_scatter(p, magnitudes)
    classes = [c for c, share in sorted(assignment.class_probabilities.items(), key=lambda x: -x[1]) if share >= 0.12]
    if len(classes) > 1:
        why = " or ".join(classes[:3])
    elif assignment.flags:
        why = assignment.flags[0]
    elif assignment.t_code_err >= 1.5:
        why = f"subtype ±{assignment.t_code_err:.1f}"
    else:
        why = "clear"
    return Need(percent + 10.0 * left, why)


def distance_scatter(posterior: FloatArray, magnitudes: MagnitudeGrid | None = None) -> float:
    """Scatter of the distance, per cent, from the spread of the posterior over types alone."""
    grid = rough_magnitudes() if magnitudes is None else magnitudes
    use = inner_set(posterior, 0.99) & np.isfinite(grid)
    if not use.any():
        return 0.0
    p = posterior[use] / posterior[use].sum()
    mean = float(np.sum(p * grid[use]))
    return 46.05 * float(np.sqrt(np.sum(p * (grid[use] - mean) ** 2)))


def rough_magnitudes() -> MagnitudeGrid:
    """A stand-in scale for the ordering alone: straight lines in subtype for each class, good to a magnitude or so.

    Common practice: dwarfs fall from -5.5 at O5 to +9 at M0, giants stay near 0, supergiants between -5 and -8.
    """
    t = np.linspace(2.0, 69.0, N_TYPES)
    dwarf = np.interp(t, [3, 10, 20, 40, 60, 69], [-5.6, -4.0, 0.8, 4.4, 8.8, 17.0])
    giant = np.interp(t, [3, 10, 20, 40, 60, 69], [-6.0, -5.0, 0.0, 0.8, -0.5, -0.3])
    classes = [np.full(N_TYPES, -8.5), np.full(N_TYPES, -7.0), np.full(N_TYPES, -6.3), np.full(N_TYPES, -5.2),
               np.full(N_TYPES, -2.6), giant, (dwarf + 2 * np.minimum(giant, dwarf)) / 3, dwarf]
    assert len(classes) == N_CLASSES
    return np.stack(classes, axis=1)


def order_by_need(assignments: list[Assignment], scorer: Callable[[Assignment], Need]) -> list[int]:
    """Indices of the stars, the neediest first; equals keep their order."""
    return sorted(range(len(assignments)), key=lambda k: -scorer(assignments[k]).score)
