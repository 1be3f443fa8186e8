"""Oddities of stars that keep their type: Balmer emission, and metal lines at odds with Ca II K.

Both are read off the rectified spectrum at the rung. ``metal_lines.csv`` holds where each line of an A star stands by
type: depths of normal library stars (B4 to F3, class III to V), a quartic in ``t_code``, and the scatter about it.

    python -m starfathom.classify.oddities           fit the table again from the library
"""

from __future__ import annotations

import csv
from functools import lru_cache
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from starfathom.classify.grid import WAVE
from starfathom.classify.surface import PIXELS

FloatArray = NDArray[np.float64]
BoolArray = NDArray[np.bool_]
FILE = Path(__file__).parent / "data" / "metal_lines.csv"
_W = WAVE[PIXELS]

_H_ALPHA = 6562.8
#: Core of H alpha above its shoulders by more than this is emission. Normal library stars from A0 to K7 stay 0.04 and
#: more below; among M stars the shoulders are TiO bands.
_EMISSION, _EMISSION_M = 0.03, 0.08
_FILLED_IN = -0.03     # from A0 to K2, where the line is always deeper than this

#: Lines of metals in A stars, angstrom: centre, half width of the core, shoulders from and to.
METALS = {"Mn 4030": (4031.5, 3.5, 7, 12), "Fe 4045": (4045.8, 2.5, 5, 9), "Sr 4077": (4077.7, 2.5, 5, 9),
          "4172": (4173.5, 4.5, 8, 13), "Sr 4215": (4215.5, 2.5, 5, 10), "Fe 4233": (4233.2, 2.5, 5, 8),
          "Fe 4383": (4384.5, 4.5, 10, 16), "4549": (4550.0, 4, 8, 14), "Cr 4558": (4558.6, 3, 6, 10),
          "Fe 4583": (4583.8, 3, 6, 10), "Fe 5018": (5018.4, 3, 7, 12), "Fe 5169": (5170.5, 5, 10, 16),
          "Fe 5270": (5269.5, 4, 9, 15), "Fe 5317": (5316.6, 3, 7, 12)}
LINES = {"Ca K": (3933.7, 4, 9, 14), "Si 4129": (4129.5, 4, 7, 13), **METALS}
#: Rungs of the resolution ladder at which the lines still part.
FINE_RUNGS = (3.2, 4.6, 6.5)
_FROM, _TO, _PIVOT = 14.0, 33.0, 23.0
#: Metals less half of K, in scatters, and single lines: of the normal library stars 2 % reach 1.6.
_METALS_OVER_K, _SILICON, _STRONTIUM = 1.8, 6.0, 6.5


def depth_of(flat: FloatArray, valid: BoolArray, line: tuple[float, float, float, float]) -> float:
    """Mean depth of a line below the median of its shoulders, in a rectified spectrum over PIXELS; NaN if masked."""
    centre, half, start, stop = line
    off = np.abs(_W - centre)
    core, shoulder = off < half, (off > start) & (off < stop)
    if valid[core | shoulder].mean() < 0.95:
        return float("nan")
    return float(np.median(flat[shoulder]) - flat[core].mean())


def h_alpha_emission(flat: FloatArray, valid: BoolArray, noise: float, t_code: float) -> bool:
    """Whether the core of H alpha stands above its shoulders, four standard deviations clear (a dip that is all
    filled in counts, from A0 to K2). ``noise`` is of one pixel of ``flat``, white."""
    height = -depth_of(flat, valid, (_H_ALPHA, 4.5, 14.0, 32.0))
    least = _EMISSION_M if t_code > 58 else _FILLED_IN if 20.0 <= t_code < 52.0 else _EMISSION
    return bool(height - 4 * noise / np.sqrt(6.0) > least)


@lru_cache(maxsize=1)
def _loci() -> dict[tuple[float, str], tuple[FloatArray, float]]:
    with FILE.open() as fh:
        rows = list(csv.DictReader(line for line in fh if not line.startswith("#")))
    return {(float(r["rung"]), r["line"]): (np.array([float(r[f"c{k}"]) for k in range(5)]), float(r["scatter"]))
            for r in rows}


def chemically_peculiar(flat: FloatArray, valid: BoolArray, noise: float, t_code: float, lum_code: float, rung: float
                        ) -> str:
    """What is odd about the metals of a star from B4 to F3, class III to V, in words, empty if nothing is.

    The metal lines point to another type than Ca II K does (Am), or Si II or Sr II stand alone (Ap). ``noise`` is of
    one pixel of ``flat``.
    """
    if rung not in FINE_RUNGS or not _FROM < t_code < _TO or lum_code < 2.4:
        return ""
    z = {}
    for name, line in LINES.items():
        coefficients, scatter = _loci()[rung, name]
        depth = depth_of(flat, valid, line)
        expected = float(np.polyval(coefficients, t_code - _PIVOT))
        z[name] = (depth - expected) / np.hypot(scatter, noise / np.sqrt(line[1]))
    metals = np.array([z[name] for name in METALS])
    if np.isfinite(metals).sum() < 6 or not np.isfinite(z["Ca K"]):
        return ""
    over = float(np.nanmean(metals)) - 0.5 * z["Ca K"]
    if z["Si 4129"] > _SILICON:
        return "Si II stands out"
    if z["Sr 4077"] > _STRONTIUM and not z["Sr 4215"] < 2.0:
        return "Sr II stands out"
    if over > _METALS_OVER_K:
        return "metal lines are too strong for Ca II K"
    return ""


def fit_table() -> list[dict[str, str]]:
    """Rows of ``metal_lines.csv`` from the shipped library, by its own labels."""
    from starfathom.classify.grid import blur, rectify
    from starfathom.templates.library import load_library

    library = load_library()
    c = library.catalogue
    rows = []
    use = (c["kind"] == "normal") & (c["t_code"] > _FROM) & (c["t_code"] < _TO) & (c["lum_code"] > 2.4)
    part = library.select(use & ~c["doubtful"])
    x = part.catalogue["t_code"] - _PIVOT
    for rung in FINE_RUNGS:
        flats, valids = [], []
        for flux, ok, fwhm in zip(part.flux, part.valid, part.catalogue["fwhm_angstrom"]):
            f, v = blur(flux[None].astype(float), ok[None], float(np.sqrt(max(rung ** 2 - fwhm ** 2, 0.0))))
            flats.append(rectify(f, v)[0][0, PIXELS])
            valids.append(v[0, PIXELS])
        for name, line in LINES.items():
            y = np.array([depth_of(f, v, line) for f, v in zip(flats, valids)])
            good = np.isfinite(y)
            for _ in range(4):
                coefficients = np.polyfit(x[good], y[good], 4)
                off = y - np.polyval(coefficients, x)
                scatter = 1.4826 * float(np.median(np.abs(off[good])))
                good &= np.abs(off) < 3 * scatter
            rows.append({"rung": f"{rung:g}", "line": name, **{f"c{k}": f"{v:.4e}" for k, v in enumerate(coefficients)},
                         "scatter": f"{scatter:.5f}", "stars": str(int(good.sum()))})
    return rows


def main() -> None:
    rows = fit_table()
    with FILE.open("w", newline="") as fh:
        fh.write("# Depth of lines in normal stars, B4 to F3, class III to V: quartic in t_code - 23\n")
        fh.write("# (c0 highest power), and scatter. Fitted by classify/oddities.py to MILES and STELIB stars.\n")
        writer = csv.DictWriter(fh, list(rows[0]), lineterminator="\n")
        writer.writeheader()
        writer.writerows(rows)


if __name__ == "__main__":
    main()
