"""The pictures of a report: the H-R diagram; a star's spectrum, plane, distance and budget."""

from __future__ import annotations

import math
from collections.abc import Sequence
from typing import Any

import numpy as np
from numpy.typing import NDArray

from starfathom.classify.assignment import Assignment
from starfathom.classify.prepared import Prepared
from starfathom.desk import plane
from starfathom.desk.scatter import template_scatter
from starfathom.desk.windows import Mark, choose_marks, misfit
from starfathom.report.gather import LOG_L_EDGES, LOG_T_EDGES, StarResult
from starfathom.report.svg import Plot, ticks_between
from starfathom.templates.subtypes import CLASSES, LETTERS, SUBTYPES

FloatArray = NDArray[np.float64]

SPECTRUM_POINTS = 1300
CLIP_SIGMA = 6.0


def hr_diagram(stars: Sequence[StarResult], links: dict[int, str]) -> str:
    """Luminosity against temperature, both from the run; hollow where there is a caution. "" when there is no star."""
    points = []
    for s in stars:
        t, lum = s.number_of("teff_k"), s.number_of("log_lum_lsun")
        if math.isfinite(t) and t > 0 and math.isfinite(lum):
            points.append((s, math.log10(t), lum))
    if not points:
        return ""
    plot = _hr_axes([p[1] for p in points], [p[2] for p in points])
    for s, a, b in points:
        e_t, e_l = s.number_of("teff_k_err"), s.number_of("log_lum_lsun_err")
        if len(points) <= 400:
            if math.isfinite(e_l):
                plot.line([a, a], [b - e_l, b + e_l], "thin")
            if math.isfinite(e_t) and e_t > 0:
                half = e_t / 10**a / math.log(10)
                plot.line([a - half, a + half], [b, b], "thin")
    for s, a, b in points:
        note = f"{s.name}: {s.text_of('mk_type')}, {10**a:.0f} K, log L {b:.2f}"
        plot.dot(a, b, "hollow" if s.cautions else "dot", 4 if len(points) <= 400 else 1.6, note,
                 links.get(s.number, ""))
    return str(plot)


def crowded_hr_diagram(counts: FloatArray) -> str:
    """The same of very many stars, as shade; ``counts`` over the cells of :class:`starfathom.report.gather.Tally`."""
    seen = np.argwhere(counts > 0)
    if len(seen) == 0:
        return ""
    t, lum = LOG_T_EDGES, LOG_L_EDGES
    plot = _hr_axes([t[seen[:, 0].min()], t[seen[:, 0].max() + 1]], [lum[seen[:, 1].min()], lum[seen[:, 1].max() + 1]])
    top = math.log1p(counts.max())
    for i, j in seen:
        plot.bar(t[i], t[i + 1], lum[j], lum[j + 1], "dot", 0.15 + 0.85 * math.log1p(counts[i, j]) / top)
    return str(plot)


def _hr_axes(log_t: Sequence[float], log_lum: Sequence[float]) -> Plot:
    lo, hi = min(*log_t, 3.58) - 0.04, max(*log_t, 3.85) + 0.05
    bottom, top = min(*log_lum, 0.0) - 0.5, max(*log_lum, 2.0) + 0.5
    plot = Plot(600, 430, (hi, lo), (bottom, top), left=52, title="H-R diagram of the run")
    temperatures = [2500, 3000, 4000, 5000, 6000, 8000, 10000, 15000, 20000, 30000, 40000]
    plot.x_axis([(math.log10(t), str(t)) for t in temperatures if lo < math.log10(t) < hi], "effective temperature, K")
    return plot.y_axis([(v, f"{v:g}") for v in ticks_between(bottom, top, 6)], "log luminosity, Sun = 0")


def spectrum(ready: Prepared, template: FloatArray | None, t_code: float, marks: Sequence[Mark]) -> str:
    """The star over its template of type ``t_code`` (NaN if it has none), names above, misfit in sigmas below."""
    reach = np.flatnonzero(ready.valid)
    if len(reach) == 0:
        return ""
    cut = slice(int(reach[0]), int(reach[-1]) + 1)
    wave = ready.wave_angstrom[cut]
    star = np.where(ready.valid[cut], ready.rectified[cut], np.nan)
    step = max(1, math.ceil(len(wave) / SPECTRUM_POINTS))
    low, high = (float(v) for v in np.nanpercentile(star, [0.3, 99.7]))
    span = max(high - low, 0.05)
    base, top = low - 0.42 * span, high + 0.75 * span
    plot = Plot(1200, 330, (float(wave[0]), float(wave[-1])), (base, top), left=46, title="spectrum over its template")
    plot.line(_thin(wave, step), _thin(star, step), "ink")
    if template is not None and np.isfinite(template).any():
        plot.line(_thin(wave, step), _thin(np.where(ready.valid, template, np.nan)[cut], step), "here")
        scatter = template_scatter(ready.wave_angstrom, t_code, ready.fwhm_angstrom)
        z = np.clip(np.nan_to_num(_thin(misfit(ready, template, scatter)[cut], step)), -CLIP_SIGMA, CLIP_SIGMA)
        middle = low - 0.22 * span
        plot.area(_thin(wave, step), middle + z / CLIP_SIGMA * 0.16 * span, middle)
        plot.text(float(wave[0]), middle, "misfit", "label", "end", dx=-6, dy=4)
    letter = LETTERS[int(np.clip(t_code // 10, 0, len(LETTERS) - 1))] if math.isfinite(t_code) else "F"
    names = choose_marks(marks, ready.wave_angstrom, template if template is not None else ready.rectified,
                         float(wave[0]), float(wave[-1]), letter)
    for m in names:
        plot.text(m.wave_angstrom, high + 0.1 * span, m.name.split(" (")[0], "word", dx=4, turn=True)
    plot.x_axis([(v, f"{v:g}") for v in ticks_between(float(wave[0]), float(wave[-1]), 8)], "wavelength at rest, Å")
    plot.y_axis([(v, f"{v:g}") for v in ticks_between(low, high, 3)], "flux over continuum")
    return str(plot)


def type_plane(said: Assignment, decided: plane.Cell | None = None) -> str:
    """The posterior as shade, the machine's best marked, a hand decision framed."""
    if said.posterior is None or said.posterior.sum() <= 0:
        return ""
    p = said.posterior / said.posterior.sum()
    held = np.flatnonzero(plane.inner_set(p, 0.99).any(axis=1))
    first, last = int(held[0]), int(held[-1]) + 1
    if decided is not None:
        first, last = min(first, decided[0]), max(last, decided[0] + 1)
    spare = max(2, (22 - (last - first)) // 2)
    first, last = max(0, first - spare), min(plane.N_TYPES, last + spare)
    m = len(CLASSES)
    plot = Plot(580, 240, (first, last), (-0.5, m - 0.5), left=82, title="probability of each type")
    for j in range(m + 1):
        plot.line([first, last], [j - 0.5, j - 0.5], "grid")
    for i, j in zip(*np.nonzero(p > 0.002)):
        if first <= i < last:
            y = m - 1 - int(j)
            plot.bar(float(i), i + 1.0, y - 0.5, y + 0.5, "shade", math.sqrt(float(p[i, j] / p.max())),
                     f"{plane.cell_name((int(i), int(j)))}: {100 * p[i, j]:.1f} %")
            if p[i, j] >= 0.02 and last - first <= 30:
                plot.text(i + 0.5, y, f"{100 * p[i, j]:.0f}", "word", "middle", dy=4)
    marked: tuple[plane.Cell | None, ...] = (plane.cell_named(said.mk_type), decided)
    for cell in marked:
        if cell is not None and first <= cell[0] < last:
            y = m - 1 - cell[1]
            plot.bar(cell[0], cell[0] + 1, y - 0.5, y + 0.5, "frame")
            if cell == decided:
                plot.text(cell[0] + 0.5, y, "by hand", "strong", "middle", dy=-14)
    shares = p.sum(axis=0)
    wide = last - first > 26
    plot.x_axis([(k + 0.5, SUBTYPES[k]) for k in range(first, last)
                 if "." not in SUBTYPES[k] and (not wide or SUBTYPES[k][1] in "05")])
    plot.y_axis([(m - 1 - j, f"{c}  {100 * shares[j]:.0f} %") for j, c in enumerate(CLASSES)])
    return str(plot)


def distance_curve(star: StarResult) -> str:
    """The posterior of the distance, its 68 % shaded darker; a given parallax beside it."""
    quantiles = (star.detail or {}).get("distance_samples_pc")
    if not quantiles or (star.decision is not None and star.decision.differs):
        return ""
    q = np.maximum.accumulate(np.asarray(quantiles, float))
    share = np.linspace(0, 1, len(q))
    lo, hi = np.interp([0.004, 0.996], share, q)
    if not (hi > lo > 0):
        return ""
    x = np.linspace(lo, hi, 121)
    steps = np.interp(x, q, share)
    density = np.gradient(steps, x)
    kernel = np.exp(-0.5 * (np.arange(-9, 10) / 3.5) ** 2)
    density = np.convolve(np.pad(density, 9, mode="edge"), kernel / kernel.sum(), "valid")
    density = density / density.max()
    plot = Plot(580, 220, (float(lo), float(hi)), (0, 1.12), left=20, title="probability of the distance")
    plot.area(x, density, 0.0, "inset")
    a, mid, b = (star.number_of(c) for c in ("distance_lo_pc", "distance_pc", "distance_hi_pc"))
    inner = (x >= a) & (x <= b)
    if inner.sum() > 1:
        plot.area(x[inner], density[inner])
    plot.line(x, density)
    if math.isfinite(mid):
        plot.line([mid, mid], [0, 1.03], "ink").text(mid, 1.04, f"{mid:.4g} pc", "word", "middle")
    parallax = ((star.detail or {}).get("target") or {}).get("parallax")
    if parallax and parallax[0] > 0:
        d = 1000.0 / parallax[0]
        err = d * parallax[1] / parallax[0]
        plot.line([max(lo, d - err), min(hi, d + err)], [0.1, 0.1], "here")
        if lo < d < hi:
            plot.dot(d, 0.1, "best", 4, "from the parallax given").text(d, 0.1, "parallax", "strong", "middle", dy=-8)
    plot.x_axis([(v, f"{v:g}") for v in ticks_between(float(lo), float(hi), 6)], "distance, pc")
    return str(plot)


def budget_bars(budget: Sequence[dict[str, Any]]) -> str:
    """What each step added to the uncertainty of the distance, per cent."""
    parts = [(str(b["step"]), float(b["per_cent"])) for b in budget if _finite(b.get("per_cent"))]
    if not parts:
        return ""
    top = max(v for _, v in parts)
    if top <= 0:
        return ""
    height = 26 * len(parts) + 40
    plot = Plot(580, height, (0, top * 1.18), (len(parts) - 0.5, -0.5), left=130, title="budget of the distance")
    for k, (step, value) in enumerate(parts):
        plot.bar(0, value, k - 0.36, k + 0.36, "shade")
        plot.text(value, k, f"{value:.1f} %", "word", dx=5, dy=4)
        plot.text(0, k, step, "word", "end", dx=-7, dy=4)
    plot.x_axis([(v, f"{v:g}") for v in ticks_between(0, top * 1.18, 5)], "error of the distance, per cent")
    return str(plot)


def _finite(value: Any) -> bool:
    try:
        return math.isfinite(float(value))
    except (TypeError, ValueError):
        return False


def _thin(y: FloatArray, step: int) -> FloatArray:
    n = len(y) // step * step
    return y if step == 1 else y[:n].reshape(-1, step).mean(axis=1)
