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
CLOUD_SHARE, CLOUD_EBV = 0.4, 1.2
#: Latitude factor |sin b| taken when the direction is not known: that of stars crowding to the plane.
SIN_B_UNKNOWN = 0.25


def galactic_latitude_sine(ra_deg: ArrayLike, dec_deg: ArrayLike) -> FloatArray:
    """|sin b| of ICRS positions in degrees (any shape); the pole of the Galaxy is at 192.85948, +27.12825 (J2000)."""
    ra, dec = np.radians(np.asarray(ra_deg, float)), np.radians(np.asarray(dec_deg, float))
    pole_ra, pole_dec = np.radians(192.85948), np.radians(27.12825)
    sine = np.sin(pole_dec) * np.sin(dec) + np.cos(pole_dec) * np.cos(dec) * np.cos(ra - pole_ra)
    return np.abs(sine)


def mean_smooth(distance_pc: ArrayLike, sin_b: ArrayLike) -> FloatArray:
    """Mean E(B-V) of the smooth layer to a distance in pc, at |sin b|; the two broadcast."""
    d = np.asarray(distance_pc, float)
    s = np.maximum(np.asarray(sin_b, float), 0.01)
    path = DUST_HEIGHT_PC / s * -np.expm1(-d * s / DUST_HEIGHT_PC)
    inside = -np.expm1(-((d / (1.5 * BUBBLE_PC)) ** 2))
    return EBV_PER_KPC / 1000.0 * path * (0.1 + 0.9 * inside) + 0.001


def mean_cloud(distance_pc: ArrayLike, sin_b: ArrayLike) -> FloatArray:
    """Mean E(B-V) behind a cloud at up to this distance in pc: next to nothing nearby, :data:`CLOUD_EBV` beyond.

    It does not grow farther out: a thick cloud may stand anywhere, and must not push its star away.
    """
    d = np.asarray(distance_pc, float)
    inside = -np.expm1(-((d / (1.5 * BUBBLE_PC)) ** 2))
    return CLOUD_EBV * (0.03 + 0.97 * inside) + 0.0 * np.asarray(sin_b, float)


def smooth_width(distance_pc: ArrayLike, sin_b: ArrayLike) -> FloatArray:
    """Width in mag of the half-normal distribution whose mean is :func:`mean_smooth`."""
    return mean_smooth(distance_pc, sin_b) * np.sqrt(np.pi / 2.0)


def log_density(ebv: ArrayLike, distance_pc: ArrayLike, sin_b: ArrayLike) -> FloatArray:
    """Natural log of the prior density of E(B-V) >= 0 at a distance in pc, per mag.

    A half-normal for the smooth layer and an exponential for clouds. The smooth part has no long tail: else a star with
    much dust would be pushed to the distance where the layer alone could make it.
    """
    return np.log(density(ebv, smooth_width(distance_pc, sin_b), mean_cloud(distance_pc, sin_b)))


def density(ebv: ArrayLike, width: FloatArray, cloud: FloatArray) -> FloatArray:
    """Prior density of E(B-V) >= 0 per mag, for a half-normal of ``width`` and a cloud of mean ``cloud`` (mag)."""
    e = np.asarray(ebv, float)
    smooth = (1 - CLOUD_SHARE) * np.sqrt(2 / np.pi) / width * np.exp(-0.5 * (e / width) ** 2)
    return smooth + CLOUD_SHARE / cloud * np.exp(-e / cloud)
