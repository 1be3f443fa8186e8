"""The stars that calibrate the scale: MK standards, and library stars with published types."""

from __future__ import annotations

from collections.abc import Collection
from dataclasses import dataclass, fields
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from starfathom.distance.tables import DATA, read_table
from starfathom.templates.subtypes import step_of

FloatArray = NDArray[np.float64]

#: Kinds of library star that count as normal, and the lowest metallicity that does.
NORMAL = "normal"
LOWEST_FE_H = -0.7


@dataclass(frozen=True)
class Calibrators:
    """Stars with type, V, B-V and parallax; every array has shape (n,).

    ``library`` is empty for standards; ``step`` and ``lum_code`` place the star, magnitudes in mag, parallax in mas.
    """

    hip: NDArray[np.int64]
    library: NDArray[np.str_]
    mk_type: NDArray[np.str_]
    step: FloatArray
    t_code: FloatArray
    lum_code: FloatArray
    v_mag: FloatArray
    b_v: FloatArray
    e_b_v: FloatArray
    parallax: FloatArray
    e_parallax: FloatArray

    def __len__(self) -> int:
        return len(self.hip)

    def where(self, keep: NDArray) -> Calibrators:
        """The stars selected by a mask or index array."""
        return Calibrators(*(getattr(self, f.name)[keep] for f in fields(self)))


def standards() -> Calibrators:
    """The MK standards of ``data/standards.ecsv``."""
    t = read_table("standards")
    n = len(t["hip"])
    return Calibrators(
        t["hip"].astype(int), np.full(n, "", "U16"), t["mk_type"].astype(str), step_of(t["t_code"]), t["t_code"],
        t["lum_code"], t["v_mag"], t["b_v"], np.maximum(t["e_b_v"], 0.005), t["parallax_mas"], t["e_parallax_mas"],
    )  # fmt: skip


def library_stars() -> Calibrators:
    """Normal library stars with a full type and a parallax, one entry a star (its first library)."""
    t = _catalogue()
    keep = (t["kind"] == NORMAL) & (t["hip"] > 0)
    for column in ("t_code", "lum_code", "parallax_mas", "e_parallax_mas", "v_mag", "b_v"):
        keep &= np.isfinite(t[column])
    keep &= (t["e_parallax_mas"] > 0) & ~(t["fe_h"] < LOWEST_FE_H) & (t["doubtful"] != "True")
    index = np.flatnonzero(keep)
    order = index[np.argsort(t["library"][index], kind="stable")]
    _, first = np.unique(t["hip"][order], return_index=True)
    pick = np.sort(order[first])
    col = {k: v[pick] for k, v in t.items()}
    return Calibrators(
        col["hip"].astype(int), col["library"].astype("U16"), col["label"].astype(str),
        step_of(col["t_code"]), col["t_code"],
        col["lum_code"], col["v_mag"], col["b_v"], np.maximum(np.nan_to_num(col["e_b_v"], nan=0.02), 0.005),
        col["parallax_mas"], col["e_parallax_mas"],
    )  # fmt: skip


def _catalogue() -> dict[str, NDArray]:
    """Columns of the library's catalogue."""
    import csv

    path = Path(DATA).parent.parent / "templates" / "data" / "catalogue.ecsv"
    with open(path, encoding="utf-8", newline="") as file:
        rows = list(csv.reader(line for line in file if not line.startswith("#")))
    out: dict[str, NDArray] = {}
    for i, name in enumerate(rows[0]):
        text = [r[i] for r in rows[1:]]
        try:
            out[name] = np.array([float(t) if t not in ("", '""') else np.nan for t in text])
        except ValueError:
            out[name] = np.array(text)
    return out


def calibrators(without_libraries: Collection[str] = (), without_stars: Collection[int] = ()) -> Calibrators:
    """All calibrators; a library star that is also a standard counts as the standard.

    ``without_libraries`` leaves libraries out by name, ``without_stars`` stars by Hipparcos number, wherever they
    stand.
    """
    first, second = standards(), library_stars()
    keep = ~np.isin(second.hip, first.hip) & ~np.isin(second.library, [n.lower() for n in without_libraries])
    second = second.where(keep)
    both = Calibrators(*(np.concatenate([getattr(first, f.name), getattr(second, f.name)]) for f in fields(first)))
    return both.where(~np.isin(both.hip, [int(h) for h in without_stars]))
