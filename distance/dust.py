"""How much dust to expect on the way: a smooth layer that thins with height, and the chance of a cloud."""

from __future__ import annotations

import numpy as np
from numpy.typing import ArrayLike, NDArray

FloatArray = NDArray[np.float64]

#: E(B-V) per kiloparsec in the plane beyond the Local Bubble, about 0.9 mag of A_V (common practice, 0.7 to 1).
EBV_PER_KPC = 0.28
#: Scale height of the dust layer in pc (common practice, 100 to 150).
DUST_HEIGHT_PC = 125.0
#: Inside the Local Bubble (about 80 pc; Lallement et al. 2003 A&A 411 447) dust is scarce.
BUBBLE_PC = 80.0
#: Share of sightlines through a cloud, and mean excess behind one. Broad on purpose: zeta Oph has 0.32 at 112 pc.
CLOUD_SHARE, CLOUD_EBV = 0.3, 1.0
#: Latitude factor |sin b| taken when the direction is not known: that of stars crowding to the plane.
SIN_B_UNKNOWN = 0.25


def galactic_latitude_sine(ra_deg: ArrayLike, dec_deg: ArrayLike) -> FloatArray:
    """|sin b| of ICRS positions in degrees (any shape); the pole of the Galaxy is at 192.85948, +27.12825 (J2000)."""
    ra, dec = np.radians(np.asarray(ra_deg, float)), np.radians(np.asarray(dec_deg, float))
    pole_ra, pole_dec = np.radians(192.85948), np.radians(27.12825)
    sine = np.sin(pole_dec) * np.sin(dec) + np.cos(pole_dec) * np.cos(dec) * np.cos(ra - pole_ra)
    return np.abs(sine)


def outside_bubble(distance_pc: ArrayLike) -> FloatArray:
    """How far outside the Local Bubble a distance in pc lies: 0 near the Sun, 1 well beyond."""
    return -np.expm1(-((np.asarray(distance_pc, float) / (1.5 * BUBBLE_PC)) ** 2))


def mean_smooth(distance_pc: ArrayLike, sin_b: ArrayLike) -> FloatArray:
    """Mean E(B-V) of the smooth layer to a distance in pc, at |sin b|; the two broadcast."""
    d = np.asarray(distance_pc, float)
    s = np.maximum(np.asarray(sin_b, float), 0.01)
    path = DUST_HEIGHT_PC / s * -np.expm1(-d * s / DUST_HEIGHT_PC)
    return EBV_PER_KPC / 1000.0 * path * (0.1 + 0.9 * outside_bubble(d)) + 0.001


def smooth_width(distance_pc: ArrayLike, sin_b: ArrayLike) -> FloatArray:
    """Width in mag of the half-normal distribution whose mean is :func:`mean_smooth`."""
    return mean_smooth(distance_pc, sin_b) * np.sqrt(np.pi / 2.0)


def cloud_share(distance_pc: ArrayLike) -> FloatArray:
    """Chance of a cloud on the way to a distance in pc: slight inside the Local Bubble, :data:`CLOUD_SHARE` beyond."""
    return CLOUD_SHARE * (0.05 + 0.95 * outside_bubble(distance_pc))


def mean_cloud(distance_pc: ArrayLike) -> FloatArray:
    """Mean E(B-V) behind a cloud at up to this distance in pc: next to nothing nearby, :data:`CLOUD_EBV` beyond.

    It does not grow farther out: a thick cloud may stand anywhere.
    """
    return CLOUD_EBV * (0.03 + 0.97 * outside_bubble(distance_pc))


def log_density(ebv: ArrayLike, distance_pc: ArrayLike, sin_b: ArrayLike) -> FloatArray:
    """Natural log of the prior density of E(B-V) >= 0 at a distance in pc, per mag.

    A half-normal for the smooth layer and an exponential for clouds. The smooth part has no long tail: else a star with
    much dust would be taken for one whose intrinsic colour is off.
    """
    e, width = np.asarray(ebv, float), smooth_width(distance_pc, sin_b)
    cloud, share = mean_cloud(distance_pc), cloud_share(distance_pc)
    smooth = np.log((1 - share) * np.sqrt(2 / np.pi) / width) - 0.5 * (e / width) ** 2
    return np.logaddexp(smooth, np.log(share / cloud) - e / cloud)
