"""A page of line fits: the whole spectrum above, one small panel for each of the strongest features below."""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from starfathom.classify.errors import RequestError
from starfathom.classify.lines.profiles import gaussian, voigt
from starfathom.classify.lines.windows import grown, growth_angstrom

if TYPE_CHECKING:
    from matplotlib.axes import Axes

    from starfathom.classify.lines.table import LineTable

FloatArray = NDArray[np.float64]

SUFFIXES = (".png", ".pdf", ".svg")
#: A4 across, inches.
PAGE = (11.69, 8.27)
_COLUMNS, _ROWS = 6, 4
_INK, _SOFT, _FIT, _PART, _BAND = "#12181f", "#6b7682", "#c24e00", "#0a62b8", "#e4e8ec"
_STYLE: Any = {"font.size": 7, "axes.linewidth": 0.5, "axes.edgecolor": _SOFT, "xtick.color": _SOFT,
               "ytick.color": _SOFT, "xtick.labelsize": 6, "ytick.labelsize": 6, "xtick.major.width": 0.5,
               "ytick.major.width": 0.5, "pdf.fonttype": 42, "svg.hashsalt": "starfathom"}


def draw(table: LineTable, path: str | Path, title: str = "") -> Path:
    """Draw the fits of ``table`` to ``path`` (.png, .pdf or .svg) and return it.

    Raises
    ------
    RequestError : a suffix that names no picture format, or a place that cannot be written
    """
    import matplotlib
    from matplotlib.figure import Figure

    target = Path(path)
    if target.suffix.lower() not in SUFFIXES:
        raise RequestError(f"{target}: the suffix names no picture format; use one of {', '.join(SUFFIXES)}")
    shown = _choose(table)
    with matplotlib.rc_context(_STYLE):
        rows = max(1, -(-len(shown) // _COLUMNS))
        figure = Figure(figsize=(PAGE[0], PAGE[1] * (0.30 + 0.70 * rows / _ROWS)), layout="constrained")
        grid = figure.add_gridspec(rows + 1, _COLUMNS, height_ratios=[1.15] + [1.0] * rows)
        _overview(figure.add_subplot(grid[0, :]), table, shown)
        for n, k in enumerate(shown):
            draw_feature(table, k, figure.add_subplot(grid[1 + n // _COLUMNS, n % _COLUMNS]))
        figure.suptitle(title or _title(table), fontsize=9, color=_INK, x=0.01, ha="left")
        try:
            figure.savefig(target, dpi=150, metadata={"Date": None} if target.suffix.lower() == ".svg" else None)
        except OSError as error:
            raise RequestError(f"{target}: cannot be written ({error.strerror or error}); give another place") from None
    return target


def _title(table: LineTable) -> str:
    return (f"{table.path or 'spectrum'}     at rest (velocity {table.velocity_kms:.0f} km/s taken out), "
            f"line spread {table.fwhm_angstrom:.2f} A FWHM")


def _choose(table: LineTable) -> list[int]:
    """Features to draw: fitted and there, the most significant ones, in order of wavelength."""
    fits = table.fits
    strength: dict[int, float] = {}
    for c in np.flatnonzero(fits.detected[0]):
        k = int(fits.feature[c])
        significance = abs(fits.ew[0, c]) / fits.ew_err[0, c]
        # a profile that leaves large residuals is a poor thing to show among the first
        strength[k] = max(strength.get(k, 0.0), significance / np.sqrt(max(1.0, fits.chi2[0, c] / fits.dof[0, c])))
    best = sorted(strength, key=lambda k: -strength[k])[: _COLUMNS * _ROWS]
    return sorted(best, key=lambda k: table.lines.features[k].wavelength)


def _overview(ax: Axes, table: LineTable, shown: list[int]) -> None:
    wave, flux = table.wave_angstrom, table.lines.filled_flux[0]
    good = table.lines.good[0]
    ax.plot(wave, np.where(good, flux, np.nan), color=_INK, lw=0.5)
    top = float(np.nanpercentile(flux[good], 99.8)) if good.any() else 1.0
    for k in shown:
        feature = table.lines.features[k]
        ax.axvspan(*feature.window, color=_BAND, lw=0)
    last = -np.inf
    for k in shown:
        feature = table.lines.features[k]
        if feature.wavelength - last > 0.028 * (wave[-1] - wave[0]):
            ax.annotate(feature.label.split(" (")[0], (feature.wavelength, 1.02 * top), rotation=55, ha="left",
                        va="bottom", fontsize=5.5, color=_SOFT, annotation_clip=False)
            last = feature.wavelength
    ax.set_ylim(min(0.0, float(np.nanmin(flux[good]))) if good.any() else 0.0, 1.05 * top)
    ax.set_xlim(wave[0], wave[-1])
    ax.set_xlabel("rest wavelength in air, A", labelpad=1)
    ax.set_ylabel("flux")


def model_of(table: LineTable, k: int, wave: FloatArray) -> tuple[FloatArray, list[FloatArray]]:
    """Summed depth of the fitted components of feature ``k`` at ``wave``, and each component's."""
    fits = table.fits
    parts = []
    for c in np.flatnonzero(fits.feature == k):
        if not fits.detected[0, c]:
            continue
        centre = fits.center[0, c] if np.isfinite(fits.center[0, c]) else fits.wavelength[c]
        sigma, gamma = np.array(fits.sigma[0, c]), np.array(fits.gamma[0, c])
        shape = voigt(wave, centre, sigma, gamma)[0] if gamma > 0 else gaussian(wave, centre, sigma)[0]
        parts.append(fits.ew[0, c] * shape)
    return (np.sum(parts, axis=0) if parts else np.zeros(wave.size)), parts


def draw_feature(table: LineTable, k: int, ax: Axes) -> Axes:
    """Draw one feature on ``ax``: normalised flux, window and side bands, fit and components; returns ``ax``."""
    lines, fits = table.lines, table.fits
    feature = lines.features[k]
    window, blue, red = grown(feature, float(growth_angstrom(lines.fwhm_angstrom[0])))
    lo, hi = (blue or window)[0], (red or window)[1]
    margin = 0.03 * (hi - lo)
    a, b = np.searchsorted(table.wave_angstrom, [lo - margin, hi + margin])
    x = table.wave_angstrom[a:b]
    xb, xr = (float(np.mean(band)) if band else float(np.mean(window)) for band in (blue, red))
    share = (x - xb) / (xr - xb) if xr > xb else np.zeros(x.size)
    level = lines.blue[0, k] + (lines.red[0, k] - lines.blue[0, k]) * share
    columns = np.flatnonzero(fits.feature == k)
    loss_blue, loss_red = (float(np.nan_to_num(v[0, columns[0]])) for v in (fits.blue_loss, fits.red_loss))
    raised = level / (1.0 - (loss_blue + (loss_red - loss_blue) * share))
    y = np.where(lines.good[0, a:b], lines.filled_flux[0, a:b] / raised, np.nan)
    for band in (blue, red):
        if band:
            ax.axvspan(*band, color=_BAND, lw=0)
    for edge in window:
        ax.axvline(edge, color=_SOFT, lw=0.4, ls=":")
    ax.axhline(1.0, color=_SOFT, lw=0.4)
    ax.step(x, y, where="mid", color=_INK, lw=0.7)
    fine = np.linspace(*window, 300)
    total, parts = model_of(table, k, fine)
    if len(parts) > 1:
        for part in parts:
            ax.plot(fine, 1.0 - part, color=_PART, lw=0.6, ls="--")
    if parts:
        ax.plot(fine, 1.0 - total, color=_FIT, lw=0.9)
    row = table[feature.name]
    words = [f"{row['ew_angstrom']:.3f} ± {row['ew_err_angstrom']:.3f} A", row["profile"], *row["flags"].split(",")]
    ax.set_title(feature.label, fontsize=6.5, loc="left", color=_INK, pad=9)
    ax.text(0.0, 1.03, ", ".join(w for w in words if w), transform=ax.transAxes, fontsize=5.5, color=_SOFT, va="bottom")
    ax.set_xlim(x[0], x[-1])
    ax.xaxis.set_major_locator(_few_ticks(4))
    ax.yaxis.set_major_locator(_few_ticks(4))
    return ax


def _few_ticks(count: int) -> Any:
    from matplotlib.ticker import MaxNLocator

    return MaxNLocator(count, min_n_ticks=2)
