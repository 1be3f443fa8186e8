"""The fine grid over type and class on which every calibration is laid out, and its lookup.

Steps run from O2 to M9 in quarters, luminosity codes from 0 (Ia0) to 5 (V) in tenths, so that each class and each
half subtype is a cell of its own. A quantity is one flat array of ``N_STEP * N_LUM`` cells.
"""

from __future__ import annotations

from collections.abc import Mapping

import numpy as np
from numpy.typing import ArrayLike, NDArray

from starfathom.templates.subtypes import step_of

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.intp]

STEP_AXIS: FloatArray = np.arange(2.0, 66.01, 0.25)
LUM_AXIS: FloatArray = np.round(np.arange(0.0, 5.01, 0.1), 1)
N_STEP, N_LUM = len(STEP_AXIS), len(LUM_AXIS)
#: Step and luminosity code of every cell, shape (N_STEP * N_LUM,).
CELL_STEP: FloatArray = np.repeat(STEP_AXIS, N_LUM)
CELL_LUM: FloatArray = np.tile(LUM_AXIS, N_STEP)


def cell_of(t_code: ArrayLike, lum_code: ArrayLike) -> IntArray:
    """Index of the cell nearest to a type (any shape); types beyond the grid take its edge."""
    step = step_of(np.asarray(t_code, float))
    i = np.clip(np.rint((step - STEP_AXIS[0]) * 4).astype(np.intp), 0, N_STEP - 1)
    j = np.clip(np.rint(np.asarray(lum_code, float) * 10).astype(np.intp), 0, N_LUM - 1)
    return i * N_LUM + j


def along_steps(steps: ArrayLike, values: ArrayLike, *, hold: bool = True) -> FloatArray:
    """Linear interpolation of a tabulated quantity onto :data:`STEP_AXIS`; NaN entries are skipped.

    Beyond the tabulated ends the end value is held, or NaN where ``hold`` is false.
    """
    x, y = np.asarray(steps, float), np.asarray(values, float)
    good = np.isfinite(y)
    if not good.any():
        return np.full(N_STEP, np.nan)
    order = np.argsort(x[good])
    x, y = x[good][order], y[good][order]
    outside = {} if hold else {"left": np.nan, "right": np.nan}
    return np.interp(STEP_AXIS, x, y, **outside)


def from_nodes(nodes: Mapping[float, FloatArray], *, skip_gaps: bool = True) -> FloatArray:
    """Flat cell array from columns along steps at some luminosity codes, linear in the code between them.

    A node that is NaN at a step is passed over there, or leaves NaN where ``skip_gaps`` is false; outside the given
    nodes the nearest one is held.
    """
    codes = np.array(sorted(nodes))
    table = np.stack([nodes[c] for c in codes])
    out = np.full((N_STEP, N_LUM), np.nan)
    for i in range(N_STEP):
        good = np.isfinite(table[:, i])
        if not skip_gaps:
            good[:] = True
        if good.any():
            out[i] = np.interp(LUM_AXIS, codes[good], table[good, i])
    return out.ravel()
