"""From an assignment, an MK type or its text to the cells of the grid a star may occupy."""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from starfathom.classify.assignment import Assignment
from starfathom.classify.errors import RequestError
from starfathom.distance.grid import LUM_AXIS, cell_of
from starfathom.templates.subtypes import LUM_CODES, T_CODES, step_of, t_code_from_step

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.intp]


def cells_of_assignment(assignment: Assignment) -> tuple[IntArray, FloatArray]:
    """Cells and probabilities of a typed spectrum; raises RequestError where there is no type to work from."""
    if assignment.posterior is None:
        why = assignment.reason or assignment.status
        raise RequestError(f"{assignment.file or 'The spectrum'} has no MK type to take a distance from ({why}).")
    p = np.asarray(assignment.posterior, float)
    keep = p > 1e-5 * p.max()
    i, j = np.nonzero(keep)
    shares = p[keep] / p[keep].sum()
    return cell_of(T_CODES[i], np.asarray(LUM_CODES)[j]), shares


def cells_of_range(t_code: float, lum_code: float, t_hi: float, lum_hi: float) -> tuple[IntArray, FloatArray]:
    """Cells of a type, even over a range such as K0-K2 or III-IV, each with the same probability."""
    low, high = sorted((float(step_of(t_code)), float(step_of(t_hi))))
    steps = np.arange(low, high + 1e-9, 0.25)
    bottom, top = sorted((lum_code, lum_hi))
    codes = LUM_AXIS[(LUM_AXIS >= bottom - 0.01) & (LUM_AXIS <= top + 0.01)] if top > bottom else np.array([lum_code])
    t, lum = np.meshgrid(t_code_from_step(steps), codes, indexing="ij")
    cells = np.unique(cell_of(t.ravel(), lum.ravel()))
    return cells, np.full(len(cells), 1.0 / len(cells))


def cells_of_type(mk_type: Any) -> tuple[IntArray, FloatArray]:
    """Cells and probabilities of a parsed MK type; raises RequestError for what has no place on the grid."""
    if mk_type.kind != "star":
        raise RequestError(f"{mk_type} is a {mk_type.kind}; the distance scale knows MK types from O to M only.")
    if not np.isfinite(mk_type.t_code):
        raise RequestError(f"{mk_type} has no temperature subtype, so it has no place on the distance scale.")
    if not np.isfinite(mk_type.lum_code):
        raise RequestError(f"{mk_type} has no luminosity class; give one (such as {mk_type} V) to get a distance.")
    t_hi = mk_type.t_code_hi if np.isfinite(mk_type.t_code_hi) else mk_type.t_code
    lum_hi = mk_type.lum_code_hi if np.isfinite(mk_type.lum_code_hi) else mk_type.lum_code
    return cells_of_range(mk_type.t_code, mk_type.lum_code, t_hi, lum_hi)


def parse_type(text: str) -> Any:
    """An MK type from its text; raises RequestError, in one sentence, where it cannot be read."""
    try:
        from starfathom.classify.mktype import MKType
    except ModuleNotFoundError:  # the full reader of types is not there yet
        return _plain_type(text)
    return MKType.parse(text)


def _plain_type(text: str) -> Any:
    import re
    from types import SimpleNamespace

    from starfathom.templates.subtypes import CLASSES, t_code_of

    found = re.match(r"^\s*([OBAFGKM])(\d(?:\.\d+)?)\s*(Ia0|Iab|Ia|Ib|III|II|IV|V)\b", text)
    if not found:
        raise RequestError(f"{text!r} is not an MK type that can be read; write it like G2 V or B0.5 Ia.")
    lum = LUM_CODES[CLASSES.index(found[3])]
    t = t_code_of(found[1] + found[2])
    return SimpleNamespace(t_code=t, lum_code=lum, t_code_hi=t, lum_code_hi=lum, kind="star", peculiarities=(), composite=())
