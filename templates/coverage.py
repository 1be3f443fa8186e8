"""How many stars stand behind each type and class, and where that is too few to trust a result.

Gaps are stated, not filled from elsewhere. The Pickles atlas and the SDSS star templates were looked at. The models
already type their M dwarfs well (Pickles M2, M4, M5 V: off by 0.1, -0.4, -0.3; SDSS M1, M3, M5, M8: 1.5, 1, -1, -1), so
little is missing there. The atlas spectra of other types are means of several stars with labels in ranges or whole
subtypes, and lie 1.5 subtypes (68 %) from the models. The SDSS templates named O, O/B and B look like hot subdwarfs and
a DB white dwarf. Kept out of the library, both serve as independent checks; no model was trained with them to compare.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np

from starfathom.templates.library import Library
from starfathom.templates.subtypes import CLASSES, LETTERS, LUM_CODES

#: Fewer distinct stars than this leave a cell weak; the template surface wants about six (see classify/surface.py).
FEW = 4
#: Parallax over error from which a star helps to calibrate luminosities (classify/training.py uses the same).
GOOD_PARALLAX = 1 / 0.15
_BINS = ((0.0, 2.0), (2.0, 5.0), (5.0, 8.0), (8.0, 10.0))


@dataclass(frozen=True)
class Cell:
    """One box of the grid: ``types`` such as ``G5-G7``, ``lum_class``, distinct ``stars``, the libraries they come
    from, how many have good parallaxes, and why a result would be weak there (empty where it is not)."""

    types: str
    lum_class: str
    stars: int
    libraries: tuple[str, ...]
    with_parallax: int
    weak: tuple[str, ...]

    def row(self) -> dict[str, Any]:
        """As plain values for JSON."""
        return {"types": self.types, "class": self.lum_class, "stars": self.stars, "libraries": list(self.libraries),
                "with_parallax": self.with_parallax, "weak": list(self.weak)}


def _type_bins() -> list[tuple[str, float, float]]:
    out = []
    for k, letter in enumerate(LETTERS):
        for lo, hi in _BINS:
            first, last = (2, 5) if (letter, lo) == ("O", 2.0) else (lo, hi)
            if letter == "O" and lo == 0.0:
                continue
            if letter == "K" and lo == 8.0:      # K7 is the last K type
                continue
            name = f"{letter}{first:.0f}-{letter}{last - 1:.0f}"
            out.append((name, 10.0 * k + lo, 10.0 * k + hi))
    return out


def cells(library: Library) -> list[Cell]:
    """The grid over types (rows of three subtypes or so) and classes, in that order, normal stars only."""
    c = library.catalogue
    # emission is the rule among early supergiants, so those count as normal (as they do in classify/training.py)
    usable = (c["kind"] == "normal") | ((c["kind"] == "emission") & (c["t_code"] < 26))
    normal = usable & np.isfinite(c["t_code"]) & np.isfinite(c["lum_code"])
    column = np.array([int(np.argmin(np.abs(np.array(LUM_CODES) - v))) if np.isfinite(v) else -1
                       for v in c["lum_code"]])
    identity = np.array([f"HIP {h}" if h > 0 else str(s) for h, s in zip(c["hip"], c["star"])])
    with np.errstate(invalid="ignore", divide="ignore"):
        measured = c["parallax_mas"] / c["e_parallax_mas"] > GOOD_PARALLAX
    out = []
    for name, lo, hi in _type_bins():
        for j, lum_class in enumerate(CLASSES):
            here = normal & (c["t_code"] >= lo) & (c["t_code"] < hi) & (column == j)
            stars = len(set(identity[here]))
            libraries = tuple(sorted(set(c["library"][here].tolist())))
            parallaxes = len(set(identity[here & measured]))
            weak = []
            if stars < FEW:
                weak.append(f"{stars} star{'' if stars == 1 else 's'}" if stars else "no star")
            elif len(libraries) == 1:
                weak.append(f"only {libraries[0]}")
            if stars and not parallaxes:
                weak.append("no good parallax")
            out.append(Cell(name, lum_class, stars, libraries, parallaxes, tuple(weak)))
    return out


def as_text(grid: list[Cell]) -> str:
    """The grid for a terminal, 80 columns: counts, ``-`` for none, ``!`` few, ``1`` one library, ``p`` no parallax."""
    lines = ["Distinct normal stars by type and luminosity class", "",
             "          " + "".join(f"{c:>6} " for c in CLASSES) + "   total"]
    names = list(dict.fromkeys(cell.types for cell in grid))
    letter = names[0][0]
    for name in names:
        if name[0] != letter:
            lines.append("")
            letter = name[0]
        row = [cell for cell in grid if cell.types == name]
        words = [("-" if not cell.stars else str(cell.stars)) + _mark(cell) for cell in row]
        lines.append(f"  {name:<8}" + "".join(f"{w:>7}" for w in words) + f"{sum(c.stars for c in row):>8}")
    lines += ["", f"  -  none: types here are interpolated or carried over   !  fewer than {FEW} stars",
              "  s  stars of a single library",
              "  p  no good parallax: the luminosity is carried over from elsewhere"]
    return "\n".join(lines)


def _mark(cell: Cell) -> str:
    if not cell.stars:
        return "  "
    few = "!" if cell.stars < FEW else "s" if len(cell.libraries) == 1 else ""
    return f"{few}{'p' if not cell.with_parallax else ''}".ljust(2)


def weak_places(grid: list[Cell]) -> list[str]:
    """Where a result would be weak, one sentence a class: runs of neighbouring types together."""
    out = []
    for lum_class in CLASSES:
        column = [cell for cell in grid if cell.lum_class == lum_class]
        empty = [cell.types for cell in column if not cell.stars]
        few = [cell.types for cell in column if 0 < cell.stars < FEW]
        words = []
        if empty:
            words.append("no star at " + ", ".join(_runs(empty, [c.types for c in column])))
        if few:
            words.append(f"fewer than {FEW} at " + ", ".join(_runs(few, [c.types for c in column])))
        if words:
            out.append(f"{lum_class}: " + "; ".join(words))
    return out


def _runs(names: list[str], order: list[str]) -> list[str]:
    runs: list[list[str]] = []
    for name in names:
        if runs and order.index(name) == order.index(runs[-1][-1]) + 1:
            runs[-1].append(name)
        else:
            runs.append([name])
    return [f"{run[0].split('-')[0]}-{run[-1].split('-')[1]}" for run in runs]
