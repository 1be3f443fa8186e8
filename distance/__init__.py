"""From an MK type and photometry to reddening, distance, luminosity and radius."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from starfathom.distance.engine import Request, fathom, fathom_many
    from starfathom.distance.fathoming import COLUMNS, Fathoming
    from starfathom.distance.fit import fit_scale
    from starfathom.distance.hrd import draw_hr_diagram
    from starfathom.distance.photometry import BANDS, Photometry
    from starfathom.distance.priors import prior_names
    from starfathom.distance.scale import load_scale, scale_names

_HOME = {
    "Request": "engine",
    "fathom": "engine",
    "fathom_many": "engine",
    "COLUMNS": "fathoming",
    "Fathoming": "fathoming",
    "fit_scale": "fit",
    "draw_hr_diagram": "hrd",
    "BANDS": "photometry",
    "Photometry": "photometry",
    "prior_names": "priors",
    "load_scale": "scale",
    "scale_names": "scale",
}

__all__ = [
    "BANDS",
    "COLUMNS",
    "Fathoming",
    "Photometry",
    "Request",
    "draw_hr_diagram",
    "fathom",
    "fathom_many",
    "fit_scale",
    "load_scale",
    "prior_names",
    "scale_names",
]


def __getattr__(name: str) -> Any:
    from importlib import import_module

    if name in _HOME:
        return getattr(import_module(f"starfathom.distance.{_HOME[name]}"), name)
    raise AttributeError(f"module {__name__!r} has no attribute {name!r}")
