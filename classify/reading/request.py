"""What the caller said about a file: kind, columns, HDU, row, unit."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field

from starfathom.classify.errors import RequestError

#: Accepted values of ``read_as``; ``specutils:NAME`` asks for one of specutils' own loaders.
KINDS = ("text", "fits", "votable", "specutils")

_ROLES = {
    **dict.fromkeys(("wave", "wavelength", "lambda"), "wave"),
    "flux": "flux",
    **dict.fromkeys(("std", "sigma", "err", "error", "uncertainty"), "std"),
    **dict.fromkeys(("var", "variance"), "var"),
    "ivar": "ivar",
    "snr": "snr",
    **dict.fromkeys(("mask", "bad"), "bad"),
    "good": "good",
}
_SETTINGS = ("hdu", "row", "unit", "flux_unit")


@dataclass(frozen=True)
class Request:
    """``columns``: role (wave, flux, std, var, ivar, snr, bad, good) to column name or 1-based number as text;
    ``row`` is 0-based."""

    kind: str = ""
    loader: str = ""
    columns: dict[str, str] = field(default_factory=dict)
    hdu: str | None = None
    row: int | None = None
    unit: str = ""
    flux_unit: str = ""


def _pair(part: str) -> tuple[str, str]:
    role, sep, name = part.partition("=")
    if not sep or not name.strip():
        raise RequestError(f"column {part!r} is not of the form role=name, such as wave=LAMBDA.")
    return role.strip().lower(), name.strip()


def request_of(read_as: str | None, columns: Mapping[str, str | int] | str | None) -> Request:
    """Check and gather what was asked.

    ``read_as`` is a kind, and may carry columns too: ``text,wave=2,flux=3`` or ``hdu=2,row=5``.

    ``columns`` is a mapping, or text such as ``wave=LAMBDA,flux=3,sigma=ERR``; besides the roles it may name ``hdu``,
    ``row`` (1-based), ``unit`` (of wavelength) and ``flux_unit``.

    Raises
    ------
    RequestError
        on an unknown kind, role or a row that is not a whole number.
    """
    pairs: dict[str, str] = {}
    first, _, rest = (read_as or "").strip().partition(",")
    if "=" in first:
        first, rest = "", (read_as or "")
    for part in filter(None, (p.strip() for p in rest.split(","))):
        pairs.update([_pair(part)])
    kind, _, loader = first.strip().partition(":")
    kind = {"": "", "ascii": "text", "csv": "text", "ecsv": "text", "txt": "text"}.get(kind.lower(), kind.lower())
    if kind and kind not in KINDS:
        raise RequestError(f"cannot read as {read_as!r}; known kinds are {', '.join(KINDS)} and specutils:NAME.")
    if isinstance(columns, str):
        for part in filter(None, (p.strip() for p in columns.split(","))):
            pairs.update([_pair(part)])
    elif columns:
        pairs.update({str(k).strip().lower(): str(v).strip() for k, v in columns.items()})
    chosen: dict[str, str] = {}
    settings: dict[str, str] = {}
    for key, value in pairs.items():
        if key in _ROLES:
            chosen[_ROLES[key]] = value
        elif key in _SETTINGS:
            settings[key] = value
        else:
            raise RequestError(f"unknown column role {key!r}; known are {', '.join(_ROLES)}, {', '.join(_SETTINGS)}.")
    row: int | None = None
    if "row" in settings:
        if not settings["row"].isdecimal() or int(settings["row"]) < 1:
            raise RequestError(f"row {settings['row']!r} is not a whole number from 1 up.")
        row = int(settings["row"]) - 1
    return Request(
        kind, loader, chosen, settings.get("hdu"), row, settings.get("unit", ""), settings.get("flux_unit", "")
    )
