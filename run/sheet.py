"""One star's evidence as a page to print: star over template, the windows that decide, what each criterion says."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from starfathom.classify.assignment import Assignment, Criterion
from starfathom.classify.errors import RequestError, SpectrumError
from starfathom.classify.prepared import Prepared
from starfathom.desk.palette import LIGHT
from starfathom.desk.scatter import template_scatter
from starfathom.desk.windows import (
    Mark,
    Window,
    choose_marks,
    known_marks,
    misfit,
    rms,
    windows_for,
    windows_on,
    within,
)
from starfathom.templates.subtypes import LETTERS, class_of, nearest_subtype

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

FloatArray = NDArray[np.float64]

SUFFIXES = (".png", ".pdf", ".svg")
#: A4 across, inches.
PAGE = (11.69, 8.27)
MOST_WINDOWS = 8
CLIP_SIGMA = 6.0
STYLE: Any = {"font.size": 8, "axes.linewidth": 0.6, "axes.edgecolor": LIGHT.soft, "xtick.color": LIGHT.soft,
         "ytick.color": LIGHT.soft, "xtick.labelsize": 7, "ytick.labelsize": 7, "text.color": LIGHT.ink,
         "axes.labelcolor": LIGHT.soft, "xtick.major.width": 0.6, "ytick.major.width": 0.6, "pdf.fonttype": 42,
         "svg.hashsalt": "starfathom"}


@dataclass(frozen=True)
class Evidence:
    """All that a sheet shows of one star: ``template`` is (m,) on the grid of ``prepared``, NaN where there is none."""

    title: str
    assignment: Assignment
    prepared: Prepared
    template: FloatArray
    template_name: str
    t_code: float
    lum_code: float
    marks: Sequence[Mark]


def run(path: str, with_type: str | None = None, output: str | None = None, *, medium: str | None = None,
        fwhm_angstrom: float | None = None, velocity_kms: float | None = None) -> Path:
    """Draw the sheet of one spectrum, print where it is, return its path.

    Parameters
    ----------
    path : spectrum
    with_type : MK type to compare with; the one the machine finds if not given
    output : picture to write (.png, .pdf or .svg); ``NAME-sheet.png`` in the current folder if not given
    medium, fwhm_angstrom, velocity_kms : as for typing; found out if not given

    Raises
    ------
    SpectrumError : the spectrum cannot be read or measured
    RequestError : the type is no MK type, or the picture cannot be written
    """
    target = Path(output) if output else Path(Path(path).name.split(".")[0] + "-sheet.png")
    if target.suffix.lower() not in SUFFIXES:
        raise RequestError(f"{target}: a sheet is drawn as {', '.join(SUFFIXES)}; give a name that ends so")
    figure = draw(gather(path, with_type, medium=medium, fwhm_angstrom=fwhm_angstrom, velocity_kms=velocity_kms))
    save(figure, target)
    print(target)
    return target


def gather(path: str, with_type: str | None = None, *, medium: str | None = None, fwhm_angstrom: float | None = None,
           velocity_kms: float | None = None) -> Evidence:
    """Read and type a spectrum, and put beside it the template of ``with_type`` or of the machine's own type."""
    from starfathom.classify import Classifier, Settings
    from starfathom.classify.mktype import MKType
    from starfathom.classify.reading import read_plain

    asked = None if with_type is None else MKType.parse(with_type)
    if asked is not None and not math.isfinite(asked.t_code):
        raise RequestError(f"--with {with_type}: there is no template of that; give a type such as G2 V")
    spectrum = read_plain(path, medium=medium)
    classifier = Classifier.load()
    settings = Settings(medium=medium, fwhm_angstrom=fwhm_angstrom, velocity_kms=velocity_kms)
    said = classifier.classify_one(spectrum, settings)
    if said.status == "failed":
        raise SpectrumError(said.reason)
    ready = classifier.prepare(spectrum, settings)
    if asked is not None:
        t, lum = asked.t_code, asked.lum_code if math.isfinite(asked.lum_code) else 5.0
        name = str(asked)
    else:
        t, lum, name = said.t_code, said.lum_code, said.mk_type
    template = np.full(ready.wave_angstrom.shape, np.nan)
    if math.isfinite(t):
        template = np.asarray(classifier.template(t, lum if math.isfinite(lum) else 5.0, ready), float)
    return Evidence(Path(path).name, said, ready, template, name, t, lum, known_marks())


def save(figure: Figure, path: Path) -> None:
    """Write a figure; the same figure gives the same bytes.

    Raises
    ------
    RequestError : the file cannot be written
    """
    kinds: dict[str, dict[str, Any]] = {".pdf": {"CreationDate": None, "Creator": "Starfathom"},
                                        ".svg": {"Date": None}, ".png": {"Software": "Starfathom"}}
    metadata = kinds[path.suffix.lower()]
    import matplotlib

    try:
        with matplotlib.rc_context(STYLE):
            figure.savefig(path, dpi=200, metadata=metadata)
    except OSError as error:
        raise RequestError(f"{path}: the sheet cannot be written there ({error.strerror})") from error


def draw(e: Evidence) -> Figure:
    """The whole page."""
    import matplotlib
    from matplotlib.figure import Figure

    with matplotlib.rc_context(STYLE):
        figure = Figure(figsize=PAGE)
        grid = figure.add_gridspec(2, 2, width_ratios=(2.9, 1.0), height_ratios=(1.0, 1.42), left=0.05, right=0.985,
                                   top=0.885, bottom=0.075, wspace=0.11, hspace=0.2)
        own = e.assignment.t_code if math.isfinite(e.assignment.t_code) else e.t_code
        scatter = template_scatter(e.prepared.wave_angstrom, own if math.isfinite(own) else 45.0,
                                   e.prepared.fwhm_angstrom)
        sigmas = misfit(e.prepared, e.template, scatter)
        _heading(figure, e, sigmas)
        draw_spectrum(figure.add_subplot(grid[0, :]), e)
        draw_windows(figure, grid[1, 0], e, sigmas)
        draw_pointers(figure, grid[1, 1], e)
        figure.text(0.05, 0.022, _footnote(e.prepared), fontsize=6.5, color=LIGHT.soft)
    return figure


def _heading(figure: Figure, e: Evidence, sigmas: FloatArray) -> None:
    said = e.assignment
    figure.text(0.05, 0.945, e.title, fontsize=15, weight="bold")
    if said.status == "typed":
        classes = ", ".join(f"{c} {100 * p:.0f} %" for c, p in
                            sorted(said.class_probabilities.items(), key=lambda x: -x[1])[:3] if p >= 0.01)
        figure.text(0.985, 0.945, said.mk_type, fontsize=15, weight="bold", ha="right")
        right = f"± {said.t_code_err:.1f} subtype; class {classes}"
    else:
        figure.text(0.985, 0.945, "no MK type", fontsize=15, weight="bold", ha="right")
        right = said.reason
    size = rms(sigmas)
    left = "no template to compare"
    if math.isfinite(size):
        left = f"compared with {e.template_name}: misfit {size:.2f} sigma"
    extra = [f"flags: {', '.join(said.flags)}"] if said.flags else []
    figure.text(0.05, 0.918, "; ".join([left, *extra]), color=LIGHT.soft)
    figure.text(0.985, 0.918, right, color=LIGHT.soft, ha="right")


def _footnote(p: Prepared) -> str:
    from starfathom import __version__

    return (f"S/N {p.snr:.0f} per angstrom at {p.snr_window} Å; "
            f"velocity {p.velocity_kms:+.0f} km/s ({p.velocity_source}); "
            f"line spread {p.fwhm_angstrom:.1f} Å ({p.fwhm_source}); wavelengths in {p.wave_medium}. "
            f"Black: the star. Orange: the template. Bars: star less template in sigmas. starfathom {__version__}")


def draw_spectrum(ax: Axes, e: Evidence) -> Axes:
    """The star over its template, line names above."""
    ready = e.prepared
    wave = ready.wave_angstrom
    star = np.where(ready.valid, ready.rectified, np.nan)
    reach = wave[ready.valid]
    if len(reach) == 0:
        return ax
    for w in _windows(e):
        ax.axvspan(w.lo_angstrom, w.hi_angstrom, color=LIGHT.paper, lw=0)
    ax.plot(wave, star, color=LIGHT.ink, lw=0.7)
    ax.plot(wave, np.where(ready.valid, e.template, np.nan), color=LIGHT.here, lw=0.7, alpha=0.9)
    low, high = np.nanpercentile(star, [0.2, 99.8])
    span = high - low
    ax.set_xlim(reach[0], reach[-1])
    ax.set_ylim(low - 0.08 * span, high + 0.65 * span)
    ax.set_ylabel("flux over continuum")
    base = e.template if np.isfinite(e.template).any() else star
    for m in choose_marks(e.marks, wave, base, float(reach[0]), float(reach[-1]), _letter(e.t_code)):
        ax.plot([m.wave_angstrom] * 2, [high + 0.04 * span, high + 0.1 * span], color=LIGHT.soft, lw=0.5)
        ax.text(m.wave_angstrom, high + 0.12 * span, m.name.split(" (")[0], rotation=90, ha="center", va="bottom",
                fontsize=6.5)
    for side in ("top", "right"):
        ax.spines[side].set_visible(False)
    return ax


def _windows(e: Evidence) -> list[Window]:
    reach = e.prepared.wave_angstrom[e.prepared.valid]
    if len(reach) == 0:
        return []
    lo, hi = float(reach[0]), float(reach[-1])
    found = windows_for(e.assignment.evidence, e.marks, lo, hi, MOST_WINDOWS, e.prepared.fwhm_angstrom)
    if found or not np.isfinite(e.template).any():
        return found
    return windows_on(e.marks, e.prepared, e.template, lo, hi, _letter(e.t_code))


def _letter(t_code: float) -> str:
    return LETTERS[int(np.clip(t_code // 10, 0, 6))] if math.isfinite(t_code) else "F"


def draw_windows(figure: Figure, place: Any, e: Evidence, sigmas: FloatArray) -> None:
    """The windows enlarged, each with its misfit."""
    windows = _windows(e)
    if not windows:
        ax = figure.add_subplot(place)
        ax.axis("off")
        ax.text(0, 1, "No criterion could be measured on this spectrum.", va="top", color=LIGHT.soft)
        return
    rows = 1 if len(windows) <= 3 else 2
    columns = math.ceil(len(windows) / rows)
    grid = place.subgridspec(rows, columns, wspace=0.13, hspace=0.3)
    wave, ready = e.prepared.wave_angstrom, e.prepared
    for k, w in enumerate(windows):
        flux, bars = grid[k // columns, k % columns].subgridspec(2, 1, height_ratios=(2.2, 1), hspace=0.0).subplots()
        cut = within(wave, w)
        star = np.where(ready.valid[cut], ready.rectified[cut], np.nan)
        flux.plot(wave[cut], star, color=LIGHT.ink, lw=1.1)
        flux.plot(wave[cut], e.template[cut], color=LIGHT.here, lw=1.0)
        for m in w.marks:
            flux.axvline(m.at_angstrom, color=LIGHT.soft, lw=0.5, ls=(0, (1, 3)))
            bars.axvline(m.at_angstrom, color=LIGHT.soft, lw=0.5, ls=(0, (1, 3)))
        flux.set_title(_cut(w.title, 132 // columns), fontsize=7.5, loc="left", pad=3, weight="bold")
        draw_ribbon(bars, wave[cut], sigmas[cut])
        size = rms(sigmas[cut])
        if math.isfinite(size):
            bars.text(0.99, 0.96, f"{size:.1f} σ", transform=bars.transAxes, ha="right", va="top", fontsize=7,
                      weight="bold", color=LIGHT.here)
        for ax in (flux, bars):
            ax.set_xlim(w.lo_angstrom, w.hi_angstrom)
        flux.set_xticks([])
        flux.locator_params(axis="y", nbins=4)
        bars.locator_params(axis="x", nbins=4)
        if k % columns:
            bars.set_yticklabels([])


def draw_ribbon(ax: Axes, wave: FloatArray, sigmas: FloatArray) -> Axes:
    """Misfit in sigmas, pixel by pixel; the darker, the larger."""
    if len(wave) > 1:
        z = np.clip(np.nan_to_num(sigmas), -CLIP_SIGMA, CLIP_SIGMA)
        alpha = np.where(np.abs(z) < 1, 0.3, np.where(np.abs(z) < 3, 0.6, 1.0))
        for a in (0.3, 0.6, 1.0):
            chosen = alpha == a
            ax.bar(wave[chosen], z[chosen], width=np.gradient(wave)[chosen], color=LIGHT.here, alpha=a, lw=0)
    ax.axhline(0, color=LIGHT.soft, lw=0.5)
    for level in (-3, 3):
        ax.axhline(level, color=LIGHT.faint, lw=0.6, zorder=0)
    ax.set_ylim(-CLIP_SIGMA, CLIP_SIGMA)
    ax.set_yticks([-3, 0, 3], ["−3 σ", "0", "+3 σ"])
    return ax


def _cut(text: str, most: int) -> str:
    return text if len(text) <= most else text[:most - 1] + "…"


def draw_pointers(figure: Figure, place: Any, e: Evidence) -> None:
    """What each criterion points to: subtype across, one line a criterion, class in words; the page's margin."""
    said = e.assignment
    ax = figure.add_subplot(place)
    speaking = [c for c in said.evidence if c.points_to or math.isfinite(c.t_code) or math.isfinite(c.lum_code)]
    criteria = sorted(speaking or said.evidence, key=lambda c: -c.weight)[:14]
    if not criteria:
        ax.axis("off")
        words = "No criterion has a say here;\nthe windows are on the strongest\nfeatures of the type compared."
        ax.text(0, 1, words, va="top", color=LIGHT.soft)
        return
    centre = e.t_code if math.isfinite(e.t_code) else said.t_code
    lo, hi = _reach(criteria, centre)
    for row, c in enumerate(criteria):
        y = -row
        value = f"{c.value:.3g}" + (f" ± {c.error:.2g}" if math.isfinite(c.error) and c.error > 0 else "") \
            if math.isfinite(c.value) else ""
        words = _points(c)
        ax.text(lo, y + 0.12, _cut(c.name, 26), fontsize=6.8, va="bottom", weight="bold")
        ax.text(hi, y + 0.12, value + (f"  →  {words}" if words else ""), fontsize=6.5, va="bottom", ha="right",
                color=LIGHT.soft, bbox={"facecolor": "white", "edgecolor": "none", "pad": 0.5})
        ax.plot([lo, hi], [y, y], color=LIGHT.faint, lw=0.6, zorder=0)
        if math.isfinite(c.t_code):
            error = c.t_code_err if math.isfinite(c.t_code_err) else 0.0
            ax.errorbar(np.clip(c.t_code, lo, hi), y, xerr=error, fmt="o", ms=3 + 4 * math.sqrt(max(c.weight, 0.0)),
                        color=LIGHT.ink, lw=0.9)
    if math.isfinite(centre):
        ax.axvline(centre, color=LIGHT.here, lw=1.0)
        ax.text(centre, 1.0, e.template_name or said.mk_type, color=LIGHT.here, ha="center", va="bottom",
                fontsize=7.5, weight="bold")
    ax.set_xlim(lo, hi)
    ax.set_ylim(-max(len(criteria), 6) + 0.5, 1.0)
    ax.set_yticks([])
    ticks = np.arange(math.ceil(lo), math.floor(hi) + 1, max(1, round((hi - lo) / 6)))
    ax.set_xticks(ticks, [nearest_subtype(float(t)) for t in ticks])
    for side in ("top", "left", "right"):
        ax.spines[side].set_visible(False)


def _reach(criteria: Sequence[Criterion], centre: float) -> tuple[float, float]:
    codes = [c.t_code for c in criteria if math.isfinite(c.t_code)]
    if math.isfinite(centre):
        codes.append(centre)
        codes = [float(np.clip(t, centre - 8, centre + 8)) for t in codes]
    if not codes:
        return 0.0, 69.0
    return min(codes) - 2.5, max(codes) + 2.5


def _points(c: Criterion) -> str:
    if c.points_to:
        return _cut(c.points_to, 18)
    return f"class {class_of(c.lum_code)}" if math.isfinite(c.lum_code) else ""
