"""Absolute V magnitude by type and class: the scale fitted here, and the published ones as printed.

A scale says what stars *picked by brightness* look like, as its calibrators were; the shift that picking by distance
or by a falling density would bring is applied once, in :mod:`starfathom.distance.priors`.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from functools import cache

import numpy as np
from numpy.typing import NDArray

from starfathom.classify.errors import RequestError
from starfathom.distance.grid import CELL_LUM, CELL_STEP, N_STEP, along_steps, from_nodes
from starfathom.distance.tables import DATA, read_table
from starfathom.templates.subtypes import step_of, t_code_of

FloatArray = NDArray[np.float64]

#: Luminosity codes of the columns of ``absolute_magnitudes.ecsv``; ``I`` stands for all of Ia to Ib.
CODE_OF_CLASS: dict[str, tuple[float, ...]] = {
    "V": (5.0,), "IV": (4.0,), "III": (3.0,), "II": (2.0,), "Ib": (1.6,), "Iab": (1.3,), "Ia": (1.0,), "Ia0": (0.0,),
    "I": (1.6, 1.3, 1.0),
}  # fmt: skip
#: The scale fitted here, as standards have it; and as types of mixed origin in catalogues have it, wider and a little
#: off.
OWN, PUBLISHED_TYPES = "starfathom", "starfathom-published"
PUBLISHED: dict[str, str] = {
    "mamajek": "Pecaut & Mamajek 2013 (V) and Mamajek's notes (IV, III)",
    "schmidt-kaler": "Schmidt-Kaler 1982 (V; III from memory)",
    "cox": "Cox 2000 Table 15.7 (V, III, I)",
    "straizys": "Straizys & Kuriliene 1981 (V to Ia)",
    "de-jager": "de Jager & Nieuwenhuijzen 1987 (V to Ia0)",
}
#: Scatter of a star about a published scale, mag: Schmidt-Kaler 1982 as quoted by Jaschek & Gomez 1998 A&A 330 619.
PUBLISHED_SCATTER_V, PUBLISHED_SCATTER_OTHER = 0.3, 0.7
#: The wide part of the scatter is this many times wider than the narrow one.
TAIL_WIDTH = 2.5


@dataclass(frozen=True)
class Scale:
    """M_V over the cells of :mod:`starfathom.distance.grid`; every array has shape (n_cells,).

    ``mean`` is the middle of M_V and ``mean_err`` how well that is known; ``sigma`` is the width of a
    star's scatter, of which a share ``tail`` is :data:`TAIL_WIDTH` times wider; ``slope`` is the change of M_V per mag
    of (B-V)_0 beyond the type's; ``bv_shift`` is the mean (B-V)_0 of real stars less the tabulated one; ``bv_scatter``
    its scatter. ``weight`` is about how many parallaxes hold the cell, zero where only the published scales speak.
    """

    name: str
    source: str
    mean: FloatArray
    mean_err: FloatArray
    sigma: FloatArray
    tail: FloatArray
    slope: FloatArray
    bv_shift: FloatArray
    bv_scatter: FloatArray
    weight: FloatArray

    @property
    def fitted(self) -> bool:
        """Whether the scale comes from the parallaxes (and so carries its own scatter and colour term)."""
        return self.name.startswith(OWN)


def published_nodes(column_prefix: str) -> dict[float, FloatArray]:
    """Columns of the table of published magnitudes along the steps, by luminosity code (NaN where not printed)."""
    table = read_table("absolute_magnitudes")
    steps = step_of(np.array([t_code_of(str(t)) for t in table["type"]]))
    nodes = {}
    for column, values in table.items():
        prefix, _, name = column.partition("_")
        if prefix == column_prefix:
            for code in CODE_OF_CLASS[name]:
                nodes[code] = along_steps(steps, values, hold=False)
    return nodes


def composite_nodes() -> dict[float, FloatArray]:
    """The published scales put together, each class from the one that serves it best; used as prior mean.

    V: Pecaut & Mamajek. III: Straizys & Kuriliene, Martins for O stars. The rest: Straizys & Kuriliene, filled from
    de Jager & Nieuwenhuijzen, whose Ia+ serves hypergiants. Ends are held.
    """
    straizys, dejager = published_nodes("straizys"), published_nodes("dejager")
    martins = published_nodes("martins")
    nodes = {}
    for code in (0.0, 1.0, 1.3, 1.6, 2.0, 3.0, 4.0, 5.0):
        value = straizys.get(code, np.full(N_STEP, np.nan)).copy()
        if code == 5.0:
            value = published_nodes("mamajek")[5.0].copy()
        if code in martins:
            value = np.where(np.isfinite(martins[code]), martins[code], value)
        value = np.where(np.isfinite(value), value, np.clip(dejager[code], -9.0, None))
        steps = np.arange(N_STEP, dtype=float)
        good = np.isfinite(value)
        nodes[code] = np.interp(steps, steps[good], value[good])
    return nodes


def _plain_scatter() -> FloatArray:
    return np.where(CELL_LUM >= 4.5, PUBLISHED_SCATTER_V, PUBLISHED_SCATTER_OTHER)


@cache
def _published_scale(name: str) -> Scale:
    from starfathom.distance.intrinsic import intrinsic

    prefix = {"schmidt-kaler": "schmidtkaler", "de-jager": "dejager"}.get(name, name)
    printed = published_nodes(prefix)
    filler = composite_nodes()
    nodes = {}
    weight = {}
    for code, fill in filler.items():
        own = printed.get(code, np.full(N_STEP, np.nan))
        nodes[code] = np.where(np.isfinite(own), own, fill)
        weight[code] = np.isfinite(own).astype(float)
    n = len(CELL_STEP)
    return Scale(
        name=name,
        source=PUBLISHED[name],
        mean=from_nodes(nodes),
        mean_err=np.zeros(n),
        sigma=_plain_scatter(),
        tail=np.zeros(n),
        slope=np.zeros(n),
        bv_shift=np.zeros(n),
        bv_scatter=intrinsic().bv_scatter,
        weight=from_nodes(weight),
    )


def scale_names() -> tuple[str, ...]:
    """Names that ``scale=`` accepts; the first is the default."""
    return (OWN, PUBLISHED_TYPES, *PUBLISHED)


def load_scale(name: str | None = None) -> Scale:
    """A scale by name (None for the default); raises RequestError for a name that is not one of :func:`scale_names`."""
    if name is None or name in (OWN, PUBLISHED_TYPES):
        return _own_scale(name or OWN)
    if name not in PUBLISHED:
        raise RequestError(f"There is no distance scale {name!r}; use one of {', '.join(scale_names())}.")
    return _published_scale(name)


@cache
def _own_scale(name: str) -> Scale:
    with np.load(DATA / "scale.npz", allow_pickle=False) as file:
        prefix = f"{name}/"
        return from_arrays({k.removeprefix(prefix): file[k] for k in file.files if k.startswith(prefix)})


def mean_in_band(scale: Scale, band: str) -> FloatArray:
    """Absolute magnitude in another band on the cells: M_V and the intrinsic colour (NaN where no cited colour is)."""
    from starfathom.distance.intrinsic import intrinsic

    look = intrinsic()
    if band not in look.offset:
        raise RequestError(f"Band {band!r} is not known; use one of {', '.join(look.offset)} (case matters).")
    return scale.mean + look.offset[band] + look.response[band] * scale.bv_shift


def from_arrays(arrays: Mapping[str, NDArray]) -> Scale:
    """A scale from the arrays :func:`to_arrays` wrote."""
    fields = ("mean", "mean_err", "sigma", "tail", "slope", "bv_shift", "bv_scatter", "weight")
    return Scale(str(arrays["name"]), str(arrays["source"]), *(np.asarray(arrays[f], float) for f in fields))


def to_arrays(scale: Scale) -> dict[str, NDArray]:
    """The scale as plain arrays, for an ``.npz`` file; single precision is ample."""
    fields = ("mean", "mean_err", "sigma", "tail", "slope", "bv_shift", "bv_scatter", "weight")
    out: dict[str, NDArray] = {f: getattr(scale, f).astype(np.float32) for f in fields}
    return {"name": np.array(scale.name), "source": np.array(scale.source), **out}
