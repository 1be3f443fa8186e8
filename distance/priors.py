"""How the star came to be looked at: what that says about its distance at a given brightness.

The scale is the distribution of M_V among stars picked by apparent brightness from space of even density. There, at
any apparent magnitude, the luminous are over-represented by the volume they can be seen through (Malmquist 1922), and
the calibrators have that built in. Each prior below is the factor by which another way of picking differs from that,
so the shift is counted once.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from starfathom.classify.errors import RequestError

FloatArray = NDArray[np.float64]

#: Name and meaning of each prior; the first is the default.
PRIORS: dict[str, str] = {
    "bright": "picked by brightness, space evenly filled: the scale as calibrated (default)",
    "disc": "picked by brightness, space density falling away from the Galactic plane",
    "nearby": "picked by distance or as a complete sample of a volume: the luminous lose their extra volume",
}
#: Scale heights in pc of the stars of each kind: young and old disc (common practice).
YOUNG_HEIGHT_PC, OLD_HEIGHT_PC = 90.0, 300.0
_YOUNG_UNTIL_STEP = 30.0


def prior_names() -> tuple[str, ...]:
    """Names that ``prior=`` accepts; the first is the default."""
    return tuple(PRIORS)


def check_prior(name: str | None) -> str:
    """The name itself, or the default for None; raises RequestError for an unknown one."""
    if name is None:
        return "bright"
    if name not in PRIORS:
        raise RequestError(f"There is no prior {name!r}; use one of {', '.join(PRIORS)}.")
    return name


def log_prior(name: str, distance_pc: FloatArray, sin_b: FloatArray, step: FloatArray) -> FloatArray:
    """Natural log of the weight a prior gives to a distance in pc (arrays broadcast; constant terms left out)."""
    if name == "nearby":
        return -3.0 * np.log(distance_pc)
    if name == "disc":
        height = np.where(step < _YOUNG_UNTIL_STEP, YOUNG_HEIGHT_PC, OLD_HEIGHT_PC)
        return -distance_pc * sin_b / height
    return np.zeros(np.broadcast_shapes(distance_pc.shape, step.shape))
