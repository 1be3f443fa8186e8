"""Unresolved companions: how much brighter than its primary a star of a class may be.

A share of the stars carries a companion that adds light, up to an equal twin (0.753 mag); the ratio of the lights is
taken as even between none and one (common practice). Companions of evolved stars are seldom bright enough to matter.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import ArrayLike, NDArray

FloatArray = NDArray[np.float64]

SHARE_DWARFS, SHARE_EVOLVED = 0.25, 0.08
TWIN_MAG = 2.5 * np.log10(2.0)


def share(lum_code: ArrayLike) -> FloatArray:
    """Share of stars whose light has a companion worth counting, by luminosity code."""
    return np.interp(np.asarray(lum_code, float), [3.0, 5.0], [SHARE_EVOLVED, SHARE_DWARFS])


def brightening(pick: ArrayLike, ratio: ArrayLike, lum_code: ArrayLike) -> FloatArray:
    """Mag by which the system outshines its primary, from two uniform numbers in (0, 1); arrays broadcast."""
    return np.where(np.asarray(pick) < share(lum_code), 2.5 * np.log10(1.0 + np.asarray(ratio, float)), 0.0)


#: Median brightening over the mean one, for a scatter of so many mag (found by simulation, share 0.25).
_MEDIAN_OVER_MEAN = ((0.2, 0.3, 0.45), (0.61, 0.77, 0.88))


def median_shift(lum_code: ArrayLike, sigma: ArrayLike) -> FloatArray:
    """How much brighter in mag the middle star of a class is than the middle of the single ones.

    ``sigma`` is the scatter of single stars in mag: the narrower it is, the more the brightened stand apart. The mean
    brightening of a companion whose light ratio is even in (0, 1) is 2.5/ln 10 (2 ln 2 - 1) = 0.419 mag.
    """
    mean = 2.5 / np.log(10.0) * (2.0 * np.log(2.0) - 1.0)
    return np.interp(np.asarray(sigma, float), *_MEDIAN_OVER_MEAN) * mean * share(lum_code)
