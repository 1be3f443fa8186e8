"""Magnitudes as the user gives them, checked at the door."""

from __future__ import annotations

import math
from collections.abc import Iterator, Mapping
from typing import Any

from starfathom.classify.errors import RequestError

#: Bands understood: Johnson U B V, Cousins R I, Gaia DR3 G BP RP, 2MASS J H Ks, SDSS g r i z (AB). The order is fixed.
BANDS: tuple[str, ...] = ("U", "B", "V", "R", "I", "G", "BP", "RP", "J", "H", "Ks", "g", "r", "i", "z")

#: Error taken for a magnitude given without one, mag (common practice for catalogue photometry).
DEFAULT_ERROR_MAG = 0.02
_FAINTEST, _BRIGHTEST = 35.0, -30.0
_LARGEST_ERROR = 5.0


def _number(value: Any, what: str) -> float:
    try:
        number = float(value)
    except (TypeError, ValueError):
        raise RequestError(f"{what} is {value!r}, which is not a number; give a magnitude such as 9.81.") from None
    if not math.isfinite(number):
        raise RequestError(
            f"{what} is {value!r}, which is not a finite number; leave the band out if it was not measured."
        )
    return number


class Photometry(Mapping[str, tuple[float, float]]):
    """Apparent magnitudes by band, each a ``(value, error)`` pair in mag.

    ``Photometry(V=(9.81, 0.02), B=10.44)``: a bare number gets an error of 0.02 mag. Bands are those of
    :data:`BANDS` (case matters: ``g`` is SDSS, ``G`` is Gaia). Raises RequestError, in one sentence, for an unknown
    band, a value that is no number, an impossible magnitude, or an error that is negative or beyond use.
    """

    def __init__(self, magnitudes: Mapping[str, Any] | None = None, /, **bands: Any) -> None:
        given: dict[str, Any] = {**(dict(magnitudes) if magnitudes else {}), **bands}
        values: dict[str, tuple[float, float]] = {}
        for band, entry in given.items():
            if band not in BANDS:
                raise RequestError(f"Band {band!r} is not known; use one of {', '.join(BANDS)} (case matters).")
            if isinstance(entry, (tuple, list)):
                if len(entry) != 2:
                    raise RequestError(f"{band} has {len(entry)} numbers; give the magnitude, or magnitude and error.")
                value, error = _number(entry[0], band), _number(entry[1], f"The error of {band}")
            else:
                value, error = _number(entry, band), DEFAULT_ERROR_MAG
            if not _BRIGHTEST <= value <= _FAINTEST:
                raise RequestError(
                    f"{band} = {value:g} is not a magnitude a star can have; expected {_BRIGHTEST:g} to {_FAINTEST:g}."
                )
            if error < 0:
                raise RequestError(f"The error of {band} is {error:g}; it must not be negative.")
            if error > _LARGEST_ERROR:
                raise RequestError(f"The error of {band} is {error:g} mag, too large to use; leave the band out.")
            values[band] = (value, error)
        self._values = {b: values[b] for b in BANDS if b in values}

    def __getitem__(self, band: str) -> tuple[float, float]:
        return self._values[band]

    def __iter__(self) -> Iterator[str]:
        return iter(self._values)

    def __len__(self) -> int:
        return len(self._values)

    def __repr__(self) -> str:
        return f"Photometry({', '.join(f'{b}=({v:g}, {e:g})' for b, (v, e) in self._values.items())})"
