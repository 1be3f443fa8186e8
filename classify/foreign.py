"""What is not a normal star: told apart before a normal type is given."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from starfathom.classify.assignment import Assignment
from starfathom.classify.surface import Match

if TYPE_CHECKING:
    from starfathom.classify.engine import PreparedBatch

FloatArray = NDArray[np.float64]


def judge_foreign(answer: Assignment, batch: PreparedBatch, index: int, found: Match, row: int, flat: FloatArray,
                  valid: NDArray[np.bool_], fe_h: float) -> Assignment:
    """The answer as it stands, or refused with ``object_kind`` and the reason.

    ``batch`` row ``index`` holds the prepared spectrum, ``found`` row ``row`` its match, ``flat``/``valid`` the
    rectified pixels at the rung over ``surface.PIXELS``.
    """
    return answer
