"""What a format reader hands on: arrays as the file has them, with the units and roles it could make out."""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import Any, Literal

import numpy as np
from numpy.typing import NDArray

from starfathom.classify.spectrum import Medium

AnyArray = NDArray[Any]

#: How a file states its uncertainties: one standard deviation, its square, one over its square, or flux over it.
ErrorKind = Literal["std", "var", "ivar", "snr"]


@dataclass
class RawSpectrum:
    """One spectrum before units, order and blemishes are seen to.

    Attributes
    ----------
    wave : (n,) wavelengths, frequencies or their logarithms, in any order
    flux : (n,)
    wave_unit : a unit in any usual spelling, or "" when the file does not say (then it is told from the values)
    flux_unit : likewise; "" counts as relative f_lambda
    wave_is_log : "" for plain values, "log10" or "ln"
    error, error_kind : (n,) uncertainties and what they are, or None
    bad : (n,) bool, True where the file marks the pixel bad, or None
    medium, medium_source : "air" or "vacuum" and where that was said
    where : the part of the file, for messages, such as "HDU 1" or "columns 1 and 2"
    notes : what was assumed, one sentence each
    meta : header hints
    """

    wave: AnyArray
    flux: AnyArray
    wave_unit: str = ""
    flux_unit: str = ""
    wave_is_log: str = ""
    error: AnyArray | None = None
    error_kind: ErrorKind = "std"
    bad: AnyArray | None = None
    medium: Medium = "unknown"
    medium_source: str = "not stated"
    where: str = ""
    notes: list[str] = field(default_factory=list)
    meta: dict[str, Any] = field(default_factory=dict)


def as_float(values: AnyArray) -> NDArray[np.float64]:
    """A flat float64 copy in native byte order; masked entries become NaN."""
    if isinstance(values, np.ma.MaskedArray):
        values = np.ma.filled(values.astype(np.float64), np.nan)
    return np.array(values, dtype=np.float64).ravel()
