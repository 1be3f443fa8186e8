"""The Hertzsprung-Russell diagram of a run: the numbers, and the picture."""

from __future__ import annotations

from collections import Counter
from collections.abc import Iterable
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from starfathom.distance.fathoming import Fathoming
from starfathom.distance.grid import CELL_STEP, LUM_AXIS, N_LUM
from starfathom.distance.intrinsic import intrinsic
from starfathom.distance.nominal import TEFF_SUN_K, log_luminosity
from starfathom.distance.scale import load_scale

FloatArray = NDArray[np.float64]

#: Luminosity code and colour (a palette told apart by the colour-blind, Tol 2021) of each class drawn.
CLASS_COLOURS: dict[str, str] = {
    "Ia": "#aa3377", "Iab": "#aa3377", "Ib": "#aa3377",
    "II": "#ee6677", "III": "#ccbb44", "IV": "#228833", "V": "#4477aa",
}  # fmt: skip
_SEQUENCES = (("V", 5.0, 4.0, 64.0), ("III", 3.0, 20.0, 65.0), ("Ib", 1.6, 9.0, 62.0), ("Ia", 1.0, 9.0, 62.0))


@dataclass(frozen=True)
class HRPoints:
    """Points of the diagram, one a star: log10 Teff (K), log10 L (solar), their errors, class; counts, a note."""

    names: tuple[str, ...]
    classes: tuple[str, ...]
    log_teff: FloatArray
    log_teff_err: FloatArray
    log_lum: FloatArray
    log_lum_err: FloatArray
    counts: dict[str, int]
    note: str


def class_word(mk_type: str) -> str:
    """Luminosity class of a type in the words of :data:`CLASS_COLOURS`, or "" where there is none."""
    from starfathom.classify.errors import RequestError
    from starfathom.classify.mktype import MKType
    from starfathom.templates.subtypes import class_of

    try:
        code = MKType.parse(mk_type).lum_code
    except RequestError:
        return ""
    return class_of(code) if np.isfinite(code) else ""


def sample_note(counts: dict[str, int]) -> str:
    """One sentence on what the mix of classes says about how the stars were picked; empty for fewer than ten."""
    total = sum(counts.values())
    if total < 10:
        return ""
    evolved = sum(n for c, n in counts.items() if c in ("Ia0", "Ia", "Iab", "Ib", "II", "III"))
    share = evolved / total
    start = f"{evolved} of {total} stars are giants or brighter"
    if share > 0.4:
        return f"{start}, as in a list of the brightest in the sky, which favours the luminous; space holds few."
    if share < 0.1:
        return (
            f"{start}, as in a list of the nearest, which favours dwarfs; among the brightest in the sky half would be."
        )
    return (
        f"{start}; lists of the brightest favour giants, lists of the nearest dwarfs, so the counts tell of the choice."
    )


def hr_points(fathomings: Iterable[Any]) -> HRPoints:
    """Points of the diagram from fathomings; whatever is not one (an error in a list) is passed over."""
    stars = [f for f in fathomings if isinstance(f, Fathoming)]
    classes = tuple(class_word(f.mk_type) for f in stars)
    teff = np.array([f.median("teff_k") for f in stars])
    counts = dict(Counter(c for c in classes if c))
    return HRPoints(
        names=tuple(f.name or f.mk_type for f in stars),
        classes=classes,
        log_teff=np.log10(teff),
        log_teff_err=np.array([f.error("teff_k") for f in stars]) / teff / np.log(10),
        log_lum=np.array([f.median("log_lum_lsun") for f in stars]),
        log_lum_err=np.array([f.error("log_lum_lsun") for f in stars]),
        counts=counts,
        note=sample_note(counts),
    )


def sequence(lum_code: float, first_step: float, last_step: float) -> tuple[FloatArray, FloatArray]:
    """log10 Teff and log10 L along a luminosity class, by the default scale."""
    look, scale = intrinsic(), load_scale()
    j = int(np.argmin(np.abs(LUM_AXIS - lum_code)))
    cells = np.arange(len(CELL_STEP) // N_LUM) * N_LUM + j
    cells = cells[(CELL_STEP[cells] >= first_step) & (CELL_STEP[cells] <= last_step)]
    return look.ln_teff[cells] / np.log(10), log_luminosity(scale.mean[cells] + look.bc_v[cells])


def radius_line(radius_rsun: float, log_teff: FloatArray) -> FloatArray:
    """log10 L of stars of one radius (solar) at some log10 Teff (Stefan-Boltzmann)."""
    return 2 * np.log10(radius_rsun) + 4 * (np.asarray(log_teff) - np.log10(TEFF_SUN_K))


def draw_hr_diagram(fathomings: Iterable[Any], ax: Any = None) -> Any:
    """Draw the diagram on matplotlib axes ``ax`` (new ones when None) and return them.

    log L upward, temperature increasing to the left, lines of equal radius, and the classes as labelled sequences.
    """
    import matplotlib.pyplot as plt
    from matplotlib.ticker import FixedLocator, FuncFormatter, NullLocator

    points = hr_points(fathomings)
    if ax is None:
        _, ax = plt.subplots(figsize=(7.0, 7.4), layout="constrained")
    hot = max(4.1, float(points.log_teff.max(initial=4.0)) + 0.06)
    cool = min(3.48, float(points.log_teff.min(initial=3.6)) - 0.05)
    top = max(5.2, float(points.log_lum.max(initial=0)) + 0.5)
    bottom = min(-2.2, float(points.log_lum.min(initial=0)) - 0.5)
    x = np.linspace(cool, hot, 50)
    for radius in (0.01, 0.1, 1.0, 10.0, 100.0, 1000.0):
        y = radius_line(radius, x)
        ax.plot(x, y, color="0.82", lw=0.8, zorder=0)
        # the label sits where the line leaves the picture: at the hot edge, or at the top
        at = min(hot - 0.015, np.log10(TEFF_SUN_K) + (top - 0.15 - 2 * np.log10(radius)) / 4)
        if cool + 0.1 < at and bottom + 0.1 < radius_line(radius, np.array(at)) < top:
            word = f"{radius:g} $R_\\odot$"
            ax.text(
                at, float(radius_line(radius, np.array(at))), word, color="0.6", fontsize=7.5, ha="left", va="bottom"
            )
    for word, code, first, last in _SEQUENCES:
        log_t, log_l = sequence(code, first, last)
        shown = (log_t < hot) & (log_t > cool) & (log_l < top) & (log_l > bottom)
        if not shown.any():
            continue
        colour = CLASS_COLOURS[word]
        ax.plot(log_t[shown], log_l[shown], color=colour, lw=5, alpha=0.18, solid_capstyle="round", zorder=1)
        # at the cool end, but inside the picture
        edge = max(log_t[shown][-1] - 0.008, cool + 0.03)
        ax.text(edge, log_l[shown][-1] + 0.08, word, color=colour, fontsize=10, va="bottom", ha="left")
    for word in dict.fromkeys((*CLASS_COLOURS, "")):
        mine = np.array([c == word for c in points.classes], bool)
        if mine.any():
            ax.errorbar(
                points.log_teff[mine], points.log_lum[mine], xerr=points.log_teff_err[mine],
                yerr=points.log_lum_err[mine], fmt="o", ms=4.5, lw=0.7, color=CLASS_COLOURS.get(word, "0.4"),
                mec="white", mew=0.4, zorder=3, label=f"{word or 'no class'}  ({int(mine.sum())})",
            )  # fmt: skip
    ax.set_xlim(hot, cool)
    ax.set_ylim(bottom, top)
    ticks = [t for t in (50000, 30000, 20000, 10000, 7000, 5000, 4000, 3000, 2500) if cool < np.log10(t) < hot]
    ax.xaxis.set_major_locator(FixedLocator([float(np.log10(t)) for t in ticks]))
    ax.xaxis.set_minor_locator(NullLocator())
    ax.xaxis.set_major_formatter(FuncFormatter(lambda value, _: f"{10**value:.0f}"))
    ax.set_xlabel("effective temperature (K)")
    ax.set_ylabel(r"log$_{10}$ luminosity ($L_\odot$)")
    if points.counts:
        ax.legend(
            title="class (stars)", fontsize=8, title_fontsize=8, loc="lower left", framealpha=0.9, edgecolor="none"
        )
    if points.note:
        ax.set_title(points.note, fontsize=8, color="0.35", wrap=True)
    return ax
