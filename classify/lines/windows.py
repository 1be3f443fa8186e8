"""Whole-pixel windows of every feature on one wavelength grid, laid end to end so that numpy can sum them at once."""

from __future__ import annotations

from collections import OrderedDict
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from starfathom.classify.lines.features import Feature, FeatureTable, Interval

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.intp]
BoolArray = NDArray[np.bool_]

#: The windows of the table hold up to this line spread (FWHM, angstrom) ...
NATIVE_FWHM = 5.0
#: ... and each edge moves out by this many angstrom for every angstrom beyond it.
GROWTH = 1.1


def growth_angstrom(fwhm_angstrom: FloatArray | float) -> FloatArray:
    """How far window edges move out for a line spread, in steps of whole angstroms of FWHM so that plans are shared."""
    return GROWTH * np.ceil(np.maximum(np.asarray(fwhm_angstrom, float) - NATIVE_FWHM, 0.0))


def grown(feature: Feature, growth: float) -> tuple[Interval, Interval | None, Interval | None]:
    """Window and side bands of ``feature`` moved out by ``growth`` angstrom (unless its definition is fixed)."""
    g = 0.0 if feature.fixed else growth
    blue = None if feature.blue is None else (feature.blue[0] - g, feature.blue[1] - g)
    red = None if feature.red is None else (feature.red[0] + g, feature.red[1] + g)
    return (feature.window[0] - g, feature.window[1] + g), blue, red


@dataclass(frozen=True)
class Gather:
    """Pixel numbers of one interval per feature, concatenated; ``starts`` marks where each feature begins.

    ``which`` (k,) are the feature numbers that have any pixel, ``pixels`` (p,) the pixel numbers, ``count`` (k,).
    """

    which: IntArray
    pixels: IntArray
    starts: IntArray
    count: IntArray

    def sum(self, values: FloatArray) -> FloatArray:
        """Sums over each interval of ``values`` (n, p), shape (n, k)."""
        if self.which.size == 0:
            return np.zeros((values.shape[0], 0))
        return np.add.reduceat(values, self.starts, axis=1)

    def spread(self, values: FloatArray) -> FloatArray:
        """Repeat per-interval ``values`` (n, k) over their pixels, shape (n, p)."""
        return np.repeat(values, self.count, axis=1)


@dataclass(frozen=True)
class WindowPlan:
    """All windows on one grid.

    Attributes
    ----------
    window, blue, red, core : :class:`Gather` of the summed window, the side bands and the line core (none for a band)
    complete : (f,) whole window on the grid
    wants_blue, wants_red : (f,) the definition has that side band
    blue_ok, red_ok : (f,) at least half of it is on the grid (False where there is none by definition)
    dlambda : (p,) pixel widths inside the windows, angstrom
    weight_red : (p,) share of the red side band in the linear pseudo-continuum at each window pixel (blue: 1 - that)
    core_weight_red : the same for the core pixels
    width : (f,) summed pixel width of each window, angstrom
    """

    window: Gather
    blue: Gather
    red: Gather
    core: Gather
    complete: BoolArray
    wants_blue: BoolArray
    wants_red: BoolArray
    blue_ok: BoolArray
    red_ok: BoolArray
    dlambda: FloatArray
    weight_red: FloatArray
    core_weight_red: FloatArray
    width: FloatArray


def pixel_widths(wave_angstrom: FloatArray) -> FloatArray:
    """Width of each pixel (m,), edges midway between centres, end pixels as wide as their neighbour's half allows."""
    mid = 0.5 * (wave_angstrom[1:] + wave_angstrom[:-1])
    edges = np.concatenate([[1.5 * wave_angstrom[0] - 0.5 * wave_angstrom[1]], mid,
                            [1.5 * wave_angstrom[-1] - 0.5 * wave_angstrom[-2]]])
    return np.diff(edges)


def _inside(wave: FloatArray, interval: Interval | None, widths: FloatArray, at_least_one: bool) -> tuple[int, int]:
    """Pixel range [i, j) whose centres lie in the closed interval; a narrow band takes the nearest pixel if allowed."""
    if interval is None:
        return 0, 0
    i = int(np.searchsorted(wave, interval[0], "left"))
    j = int(np.searchsorted(wave, interval[1], "right"))
    if j > i or not at_least_one:
        return i, j
    middle = 0.5 * (interval[0] + interval[1])
    k = int(np.clip(np.searchsorted(wave, middle), 1, wave.size - 1))
    k -= int(middle - wave[k - 1] < wave[k] - middle)
    return (k, k + 1) if abs(wave[k] - middle) <= widths[k] else (i, i)


def _gather(ranges: list[tuple[int, int]]) -> Gather:
    count = np.array([j - i for i, j in ranges], dtype=np.intp)
    which = np.flatnonzero(count)
    pixels = np.concatenate([np.arange(*ranges[k]) for k in which]) if which.size else np.zeros(0, np.intp)
    kept = count[which]
    starts = np.concatenate([[0], np.cumsum(kept)[:-1]]).astype(np.intp) if which.size else np.zeros(0, np.intp)
    return Gather(which, pixels.astype(np.intp), starts, kept)


def make_plan(wave_angstrom: FloatArray, features: FeatureTable, growth: float, fwhm_angstrom: float) -> WindowPlan:
    """Lay out the windows of ``features`` on the grid ``wave_angstrom`` (m,), ascending.

    ``fwhm_angstrom`` sets the core: pixels within 0.35 FWHM of the rest wavelength, at least the nearest one.
    """
    wave = np.asarray(wave_angstrom, float)
    widths = pixel_widths(wave)
    lo_edge, hi_edge = wave[0] - 0.5 * widths[0], wave[-1] + 0.5 * widths[-1]
    windows, blues, reds, cores = [], [], [], []
    complete, blue_ok, red_ok = [], [], []

    def on_grid(interval: Interval | None) -> bool:
        if interval is None:
            return False
        overlap = min(interval[1], hi_edge) - max(interval[0], lo_edge)
        return overlap >= 0.5 * (interval[1] - interval[0])

    for feature in features:
        window, blue, red = grown(feature, growth)
        windows.append(_inside(wave, window, widths, False))
        blues.append(_inside(wave, blue, widths, True))
        reds.append(_inside(wave, red, widths, True))
        half = 0.35 * fwhm_angstrom
        core = None if feature.kind == "band" else (feature.wavelength - half, feature.wavelength + half)
        cores.append(_inside(wave, core, widths, True))
        i, j = windows[-1]
        complete.append(bool(window[0] >= lo_edge and window[1] <= hi_edge and j - i >= 2))
        blue_ok.append(on_grid(blue) and blues[-1][1] > blues[-1][0])
        red_ok.append(on_grid(red) and reds[-1][1] > reds[-1][0])

    def centre(r: tuple[int, int]) -> float:
        return float(wave[r[0]:r[1]].mean()) if r[1] > r[0] else np.nan

    def red_share(ranges: list[tuple[int, int]]) -> FloatArray:
        parts = [np.zeros(0)]
        for k, (i, j) in enumerate(ranges):
            if blue_ok[k] and red_ok[k]:
                xb, xr = centre(blues[k]), centre(reds[k])
                parts.append((wave[i:j] - xb) / (xr - xb))
            else:
                parts.append(np.full(j - i, 1.0 if red_ok[k] else 0.0))
        return np.concatenate(parts)

    gather = _gather(windows)
    return WindowPlan(
        window=gather, blue=_gather(blues), red=_gather(reds), core=_gather(cores),
        complete=np.array(complete), wants_blue=np.array([x.blue is not None for x in features]),
        wants_red=np.array([x.red is not None for x in features]), blue_ok=np.array(blue_ok), red_ok=np.array(red_ok),
        dlambda=widths[gather.pixels], weight_red=red_share(windows), core_weight_red=red_share(cores),
        width=np.array([widths[i:j].sum() for i, j in windows]))


_plans: OrderedDict[tuple[int, int, bytes, FeatureTable, float, float], WindowPlan] = OrderedDict()


def plan_for(wave_angstrom: FloatArray, features: FeatureTable, growth: float, fwhm_angstrom: float) -> WindowPlan:
    """:func:`make_plan`, remembering the last 64 plans; FWHM is rounded to a tenth of an angstrom."""
    wave = np.ascontiguousarray(wave_angstrom, float)
    fwhm = round(float(fwhm_angstrom), 1)
    key = (wave.size, hash(wave.tobytes()), wave[:2].tobytes(), features, growth, fwhm)
    plan = _plans.get(key)
    if plan is None:
        plan = _plans[key] = make_plan(wave, features, growth, fwhm)
        if len(_plans) > 64:
            _plans.popitem(last=False)
    else:
        _plans.move_to_end(key)
    return plan
