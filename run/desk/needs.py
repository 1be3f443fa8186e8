"""How much a star needs a look: how uncertain its distance is because its type is."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cache

import numpy as np
from numpy.typing import NDArray

from starfathom.advice import worth
from starfathom.classify.assignment import Assignment
from starfathom.desk.plane import inner_set
from starfathom.templates.subtypes import LUM_CODES, T_CODES

FloatArray = NDArray[np.float64]

#: (n_subtypes, n_classes) absolute V magnitude of every cell, NaN where the scale does not reach.
MagnitudeGrid = FloatArray


@dataclass(frozen=True)
class Need:
    """``score``: the larger, the sooner one should look. ``why``: a few words. ``percent``: scatter of the distance
    from the spread of types alone, NaN where there is none."""

    score: float
    why: str
    percent: float = float("nan")


def need(assignment: Assignment, magnitudes: MagnitudeGrid | None = None) -> Need:
    """How much one star needs a look.

    For a typed star the score is the scatter, in per cent of the distance, that the spread of types in the posterior
    brings (0.46 of the scatter in absolute magnitude: d ln r = 0.2 ln 10 dM), and a tenth of the share of probability
    that the best type leaves to the others, so that equals in distance go by certainty; and the per cent by which a
    better spectrum would raise the chance that the class is right, since such a star can still be observed tonight. A
    star refused has no distance at all and comes first; one whose file failed shows nothing and comes last.
    """
    if assignment.status == "failed":
        return Need(-1.0, "not readable")
    if assignment.status != "typed" or assignment.posterior is None:
        what = assignment.object_kind
        return Need(1000.0, f"refused: {what}" if what not in ("", "unknown", "star") else "refused")
    p = assignment.posterior / assignment.posterior.sum()
    left = 1.0 - float(p.max())
    percent = distance_scatter(p, magnitudes)
    # a small share of a class far off can matter more for the distance than a large one of a neighbour
    least = 0.12 if percent < 25 else 0.03
    classes = [c for c, share in sorted(assignment.class_probabilities.items(), key=lambda x: -x[1]) if share >= least]
    if len(classes) > 1:
        why = " or ".join(classes[:3])
    elif assignment.flags:
        why = assignment.flags[0]
    elif assignment.t_code_err >= 1.5:
        why = f"subtype ±{assignment.t_code_err:.1f}"
    else:
        why = "clear"
    return Need(percent + 10.0 * left + 100.0 * worth(assignment), why, percent)


def distance_scatter(posterior: FloatArray, magnitudes: MagnitudeGrid | None = None) -> float:
    """Scatter of the distance, per cent, from the spread of the posterior over types alone."""
    grid = scale_magnitudes() if magnitudes is None else magnitudes
    use = inner_set(posterior, 0.99) & np.isfinite(grid)
    if not use.any():
        return 0.0
    p = posterior[use] / posterior[use].sum()
    mean = float(np.sum(p * grid[use]))
    return 46.05 * float(np.sqrt(np.sum(p * (grid[use] - mean) ** 2)))


@cache
def scale_magnitudes() -> MagnitudeGrid:
    """Absolute V magnitude of every cell of the plane on the distance scale in use."""
    from starfathom.distance.grid import cell_of
    from starfathom.distance.scale import load_scale

    return load_scale().mean[cell_of(T_CODES[:, None], np.asarray(LUM_CODES)[None, :])]
