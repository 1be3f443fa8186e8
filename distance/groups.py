"""Stars that belong together: one distance and one reddening for a group, outliers named."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from starfathom.distance.nominal import distance_pc

FloatArray = NDArray[np.float64]

#: A group needs this many members to speak; a member this many sigma off, in distance or reddening, is an outlier.
FEWEST, OUTLIER_SIGMA = 3, 3.0
#: Errors members share, which averaging does not remove: of the scale (mag of modulus) and of the colours (mag of
#: E(B-V)).
SHARED_MODULUS, SHARED_EBV = 0.05, 0.01
#: Patchy dust: how much E(B-V) may differ between members, mag (common practice for nearby clusters).
PATCHY_EBV = 0.03


@dataclass(frozen=True)
class GroupResult:
    """Common distance (pc) and E(B-V) of a group, each with one standard deviation, its members and outliers."""

    name: str
    distance_pc: float
    distance_err_pc: float
    ebv: float
    ebv_err: float
    members: tuple[str, ...]
    outliers: tuple[str, ...]
    is_outlier: tuple[bool, ...]

    def __str__(self) -> str:
        off = f"; apart from the rest: {', '.join(self.outliers)}" if self.outliers else ""
        return (
            f"{self.name}: {len(self.members) - len(self.outliers)} stars at {self.distance_pc:.4g} +- "
            f"{self.distance_err_pc:.2g} pc, E(B-V) {self.ebv:.3f} +- {self.ebv_err:.3f}{off}"
        )


def weighted(values: FloatArray, errors: FloatArray) -> tuple[float, float]:
    """Weighted mean and its standard error, widened by the root of the reduced chi-squared where that is above one."""
    weights = 1.0 / errors**2
    mean = float((weights * values).sum() / weights.sum())
    error = float(weights.sum() ** -0.5)
    if len(values) > 1:
        error *= float(np.sqrt(max(1.0, (weights * (values - mean) ** 2).sum() / (len(values) - 1))))
    return mean, error


def find_outliers(
    modulus: FloatArray, modulus_err: FloatArray, ebv: FloatArray, ebv_err: FloatArray
) -> NDArray[np.bool_]:
    """Members off the others by more than :data:`OUTLIER_SIGMA`; the worst goes first, and half at most."""
    off = np.zeros(len(modulus), bool)
    ebv_err = np.hypot(ebv_err, PATCHY_EBV)
    while (~off).sum() > max(FEWEST - 1, (len(off) + 1) // 2):
        worst, at = 0.0, -1
        for i in np.flatnonzero(~off):
            rest = ~off & (np.arange(len(off)) != i)
            size = 0.0
            for value, error in ((modulus, modulus_err), (ebv, ebv_err)):
                # the median of the others is not pulled by a second outlier
                middle = float(np.median(value[rest]))
                spread = float(1.25 * np.sqrt((error[rest] ** 2).mean() / rest.sum()))
                size = max(size, abs(value[i] - middle) / float(np.hypot(error[i], spread)))
            if size > worst:
                worst, at = size, int(i)
        if worst <= OUTLIER_SIGMA:
            break
        off[at] = True
    return off


def combine(
    name: str,
    members: Sequence[str],
    modulus: FloatArray,
    modulus_err: FloatArray,
    ebv: FloatArray,
    ebv_err: FloatArray,
) -> GroupResult:
    """The common distance and reddening of a group from those of its members (mag), at least three of them."""
    off = find_outliers(modulus, modulus_err, ebv, ebv_err)
    mu, mu_err = weighted(modulus[~off], modulus_err[~off])
    e, e_err = weighted(ebv[~off], np.hypot(ebv_err[~off], PATCHY_EBV))
    d = float(distance_pc(mu))
    return GroupResult(
        name, d, d * 0.2 * np.log(10) * float(np.hypot(mu_err, SHARED_MODULUS)), max(e, 0.0), float(np.hypot(e_err,
        SHARED_EBV)), tuple(members), tuple(m for m, o in zip(members, off) if o), tuple(bool(o) for o in off),
    )  # fmt: skip


def without_one(
    i: int, keep: NDArray[np.bool_], modulus: FloatArray, modulus_err: FloatArray, ebv: FloatArray, ebv_err: FloatArray
) -> tuple[tuple[float, float], tuple[float, float]]:
    """What the other members say of member ``i``: parallax (mas) with error, and E(B-V) with error."""
    rest = keep & (np.arange(len(keep)) != i)
    mu, mu_err = weighted(modulus[rest], modulus_err[rest])
    e, e_err = weighted(ebv[rest], np.hypot(ebv_err[rest], PATCHY_EBV))
    plx = 1000.0 / float(distance_pc(mu))
    return (plx, plx * 0.2 * np.log(10) * float(np.hypot(mu_err, SHARED_MODULUS))), (
        e,
        float(np.hypot(e_err, PATCHY_EBV)),
    )


def of_the_others(i: int, ebv: FloatArray, ebv_err: FloatArray) -> tuple[float, float]:
    """E(B-V) of the other members, at least zero; its error allows for patchy dust; the median forgives outliers."""
    rest = np.arange(len(ebv)) != i
    error = float((np.hypot(ebv_err[rest], PATCHY_EBV) ** -2).sum() ** -0.5)
    return max(float(_weighted_median(ebv[rest], ebv_err[rest])), 0.0), float(np.hypot(1.25 * error, PATCHY_EBV))


def _weighted_median(values: FloatArray, errors: FloatArray) -> float:
    order = np.argsort(values)
    share = np.cumsum(1.0 / np.hypot(errors[order], PATCHY_EBV) ** 2)
    return float(values[order][np.searchsorted(share, 0.5 * share[-1])])
