"""From an assignment, an MK type or its text to the cells of the grid a star may occupy."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from starfathom.classify.assignment import Assignment
from starfathom.classify.errors import RequestError
from starfathom.classify.mktype import MKType
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


#: Suffixes of class III carry luminosity (Keenan & Barnbaum 1999 ApJ 518 859: IIIb is the split-off clump); the codes
#: are a convention of this table.
_SUFFIX_CODES = {"IIIa": 2.7, "IIIab": 2.9, "IIIb": 3.3, "IIa": 1.9, "IIab": 2.0, "IIb": 2.2, "IVa": 3.8, "IVb": 4.2}


def fine_lum_code(mk_type: MKType) -> float:
    """Luminosity code of a parsed type, with the suffixes a, ab and b of the classes II to IV told apart."""
    return _SUFFIX_CODES.get(mk_type.lum_class.rstrip("+-"), mk_type.lum_code)


def cells_of_type(mk_type: MKType) -> tuple[IntArray, FloatArray]:
    """Cells and probabilities of a parsed MK type; raises RequestError for what has no place on the grid."""
    if mk_type.kind != "star":
        raise RequestError(f"{mk_type} is a {mk_type.kind}; the distance scale knows MK types from O to M only.")
    if not np.isfinite(mk_type.t_code):
        raise RequestError(f"{mk_type} has no temperature subtype, so it has no place on the distance scale.")
    lum = fine_lum_code(mk_type)
    if not np.isfinite(lum):
        raise RequestError(f"{mk_type} has no luminosity class; give one (such as {mk_type.text} V) to get a distance.")
    lum_hi = mk_type.lum_code_hi if mk_type.lum_code_hi != mk_type.lum_code else lum
    return cells_of_range(mk_type.t_code, lum, mk_type.t_code_hi, lum_hi)


def parse_type(text: str) -> MKType:
    """An MK type from its text; raises RequestError, in one sentence, where it cannot be read."""
    return MKType.parse(text)
