"""Windows on the spectrum: where each criterion looks, and how far a template is from the star there."""

from __future__ import annotations

import re
from collections.abc import Iterable, Sequence
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from starfathom.classify.assignment import Criterion
from starfathom.classify.prepared import Prepared
from starfathom.templates.subtypes import LETTERS

FloatArray = NDArray[np.float64]

MARGIN_ANGSTROM = 6.0
LEAST_WIDTH_ANGSTROM = 30.0
MOST_WIDTH_ANGSTROM = 60.0
MOST_WINDOWS = 9
#: All windows together; more would be too narrow to see on 1280 pixels.
MOST_ANGSTROM = 420.0


@dataclass(frozen=True)
class Mark:
    """A named line or band: where it is, the stretch it is measured over, what it tells.

    ``key`` is its name in the table of features, ``name`` its name for people; ``line`` is False for bands, ``index``
    True for the definitions of an index system, which go by the name of a line and are not named a second time.
    """

    key: str
    name: str
    wave_angstrom: float
    lo_angstrom: float
    hi_angstrom: float
    tells: str = ""
    line: bool = True
    types: str = ""
    index: bool = False

    @property
    def at_angstrom(self) -> float:
        """Where to mark it: its wavelength, or the middle of its stretch where that lies aside (the head of a band)."""
        inside = self.lo_angstrom <= self.wave_angstrom <= self.hi_angstrom
        return self.wave_angstrom if inside else (self.lo_angstrom + self.hi_angstrom) / 2

    def serves(self, letter: str) -> bool:
        """True when the feature tells something in stars of a spectral letter (or says nothing about which)."""
        letters = [c for c in self.types if c in LETTERS]
        return not letters or LETTERS.index(letters[0]) <= LETTERS.index(letter) <= LETTERS.index(letters[-1])


def known_marks() -> tuple[Mark, ...]:
    """Every feature of the line stage's table, telluric bands left out."""
    from starfathom.classify.lines.features import FEATURES

    return tuple(Mark(f.name, re.split(r",? \(?Lick", f.label)[0], f.wavelength, f.window[0], f.window[1],
                      f.tells + (f" ({f.types})" if f.types else ""), f.kind != "band", f.types, "Lick" in f.label)
                 for f in FEATURES)


@dataclass(frozen=True)
class Window:
    """One stretch of the spectrum that a criterion, or several, looks at."""

    lo_angstrom: float
    hi_angstrom: float
    marks: tuple[Mark, ...]
    criteria: tuple[str, ...] = ()

    @property
    def title(self) -> str:
        return ", ".join(dict.fromkeys(m.name for m in self.marks))


def windows_for(evidence: Iterable[Criterion], marks: Sequence[Mark], lo: float, hi: float,
                most: int = MOST_WINDOWS, fwhm_angstrom: float = 4.0) -> list[Window]:
    """The stretches that the evidence rests on, weightiest first to be kept, in order of wavelength.

    Parameters
    ----------
    evidence : criteria; those without features add nothing
    marks : every known feature
    lo, hi : reach of the spectrum, angstrom; features beyond it are left out
    most : how many windows at most
    fwhm_angstrom : line spread; coarser spectra need wider windows
    """
    known = {m.key: m for m in marks if lo < m.lo_angstrom and m.hi_angstrom < hi}
    wanted: list[tuple[Mark, str]] = []
    for criterion in sorted(evidence, key=lambda c: -c.weight):
        wanted += [(known[f], criterion.name) for f in criterion.features if f in known]
    windows: list[Window] = []
    for mark, criterion_name in wanted:
        short = LEAST_WIDTH_ANGSTROM - (mark.hi_angstrom - mark.lo_angstrom)
        spare = max(MARGIN_ANGSTROM, 1.2 * fwhm_angstrom, short / 2)
        a, b = mark.lo_angstrom - spare, mark.hi_angstrom + spare
        if mark.line and b - a > MOST_WIDTH_ANGSTROM:      # the wings run on; their shoulders say enough
            a, b = (mark.wave_angstrom + side * MOST_WIDTH_ANGSTROM / 2 for side in (-1, 1))
        touching = [w for w in windows if a < w.hi_angstrom and b > w.lo_angstrom]
        grown = b - a + sum(w.hi_angstrom - w.lo_angstrom for w in windows)
        if not touching:
            if len(windows) < most and (grown <= MOST_ANGSTROM or not windows):
                windows.append(Window(a, b, (mark,), (criterion_name,)))
            continue
        for w in touching:
            windows.remove(w)
            a, b = min(a, w.lo_angstrom), max(b, w.hi_angstrom)
        all_marks = {mark, *(m for w in touching for m in w.marks)}
        names = dict.fromkeys([*(c for w in touching for c in w.criteria), criterion_name])
        windows.append(Window(a, b, tuple(sorted(all_marks, key=lambda m: m.at_angstrom)), tuple(names)))
    return sorted(windows, key=lambda w: w.lo_angstrom)


def windows_on(marks: Sequence[Mark], ready: Prepared, template: FloatArray, lo: float, hi: float,
               letter: str) -> list[Window]:
    """Windows on the strongest features of a template, for stars that no criterion speaks of."""
    fit = [m for m in marks if m.line or letter in "KM"]
    strongest = choose_marks(fit, ready.wave_angstrom, template, lo, hi, letter, 8)
    stand_in = [Criterion("", float("nan"), float("nan"), "", features=(m.key,)) for m in strongest]
    return [replace(w, criteria=()) for w in windows_for(stand_in, marks, lo, hi,
                                                                 fwhm_angstrom=ready.fwhm_angstrom)]


def misfit(prepared: Prepared, template: FloatArray, scatter: FloatArray | float) -> FloatArray:
    """Star less template, in sigmas: noise of the star and imperfection of the template in quadrature.

    Parameters
    ----------
    template : (m,) rectified like the star
    scatter : one standard deviation of stars about their template, see :mod:`starfathom.desk.scatter`

    Returns
    -------
    (m,) float array; NaN where either is not valid. Above 0 the star is brighter (its line is weaker).
    """
    sigma = np.hypot(prepared.sigma, scatter)
    ok = prepared.valid & np.isfinite(template) & (sigma > 0)
    out = np.full(template.shape, np.nan)
    out[ok] = (prepared.rectified[ok] - template[ok]) / sigma[ok]
    return out


def rms(sigmas: FloatArray) -> float:
    """Root mean square of the misfit over the valid pixels; NaN when there are none."""
    ok = np.isfinite(sigmas)
    return float(np.sqrt(np.mean(sigmas[ok] ** 2))) if ok.any() else float("nan")


def within(wave: FloatArray, window: Window) -> slice:
    """The pixels of a window."""
    a, b = np.searchsorted(wave, [window.lo_angstrom, window.hi_angstrom])
    return slice(int(a), int(b))


def choose_marks(marks: Sequence[Mark], wave: FloatArray, template: FloatArray, lo: float, hi: float,
                 letter: str, most: int = 26) -> list[Mark]:
    """The features to name on a plot: those that are deep (or high) in the template, none too near another.

    ``lo`` to ``hi`` is the stretch on view, names keep 1/32 of it apart; ``letter`` is the spectral letter.
    """
    gap = (hi - lo) / 32.0
    depth = []
    for m in marks:
        if m.index or not m.serves(letter) or not lo + 0.3 * gap < m.wave_angstrom < hi - 0.3 * gap:
            continue
        near = np.abs(wave - m.at_angstrom) < 4.0
        values = template[near]
        values = values[np.isfinite(values)]
        if len(values):
            # bands are named after lines, save where bands rule
            depth.append((float(np.max(np.abs(1.0 - values))) * (1.0 if m.line or letter in "KM" else 0.5), m))
    chosen: list[Mark] = []
    for d, m in sorted(depth, key=lambda x: -x[0]):
        if d > 0.015 and len(chosen) < most and all(abs(m.wave_angstrom - c.wave_angstrom) > gap for c in chosen):
            chosen.append(m)
    return sorted(chosen, key=lambda m: m.wave_angstrom)
