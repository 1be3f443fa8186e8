"""The one list of temperature subtypes and luminosity classes, and the codes that number them.

Two numberings are in use. ``t_code`` is the outward one, plain tenths: O0 = 0, B0 = 10, A0 = 20, F0 = 30, G0 = 40,
K0 = 50, M0 = 60, so K7 is 57. The trade has no K6, K8 or K9 worth the name, so inside a fit K5, K7 and M0 count as
consecutive steps: ``step`` is that inner numbering, equal to ``t_code`` up to K5 and three less from M0 on.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import ArrayLike, NDArray

LETTERS = "OBAFGKM"

#: Luminosity classes in order of falling luminosity, and the code of each.
CLASSES: tuple[str, ...] = ("Ia0", "Ia", "Iab", "Ib", "II", "III", "IV", "V")
LUM_CODES: tuple[float, ...] = (0.0, 1.0, 1.3, 1.6, 2.0, 3.0, 4.0, 5.0)


def _subtype_names() -> tuple[str, ...]:
    halves = [d / 2 for d in range(20)]
    names = []
    for letter in LETTERS:
        for digit in halves:
            if letter == "O" and digit < 2:
                continue
            if letter == "K" and digit > 5 and digit != 7:
                continue
            if letter == "M" and digit > 9:
                continue
            names.append(f"{letter}{digit:g}")
            if letter == "O" and digit == 9.5:
                names.append("O9.7")
    return tuple(names)


#: Every subtype an assignment may name, from O2 to M9.
SUBTYPES: tuple[str, ...] = _subtype_names()


def t_code_of(subtype: str) -> float:
    """Plain-tenths code of a subtype such as ``B0.5`` (10.5)."""
    return 10.0 * LETTERS.index(subtype[0]) + float(subtype[1:])


#: ``t_code`` of each entry of :data:`SUBTYPES`, shape (n_subtypes,).
T_CODES: NDArray[np.float64] = np.array([t_code_of(s) for s in SUBTYPES])

_T_KNOTS = np.array([-10.0, 55.0, 57.0, 60.0, 85.0])
_STEP_KNOTS = np.array([-10.0, 55.0, 56.0, 57.0, 82.0])


def step_of(t_code: ArrayLike) -> NDArray[np.float64]:
    """Inner step number of ``t_code`` (any shape): K5, K7 and M0 become consecutive."""
    return np.interp(np.asarray(t_code, float), _T_KNOTS, _STEP_KNOTS)


def t_code_from_step(step: ArrayLike) -> NDArray[np.float64]:
    """Inverse of :func:`step_of`."""
    return np.interp(np.asarray(step, float), _STEP_KNOTS, _T_KNOTS)


#: Inner step number of each entry of :data:`SUBTYPES`.
STEPS: NDArray[np.float64] = step_of(T_CODES)


def nearest_subtype(t_code: float) -> str:
    """Name of the subtype nearest to ``t_code``, distance counted in inner steps."""
    return SUBTYPES[int(np.argmin(np.abs(STEPS - step_of(t_code))))]


def class_of(lum_code: float) -> str:
    """Name of the luminosity class nearest to ``lum_code``."""
    return CLASSES[int(np.argmin(np.abs(np.array(LUM_CODES) - lum_code)))]
