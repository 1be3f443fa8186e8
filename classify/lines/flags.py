"""Flags of a measured feature: named bits, each with the sentence that explains it."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from starfathom.classify.lines.direct import BulkLines
from starfathom.classify.lines.features import Feature
from starfathom.classify.lines.profile_fits import BulkFits

FloatArray = NDArray[np.float64]

#: Every flag and what it means.
FLAGS: dict[str, str] = {
    "emission": "rises above the pseudo-continuum and above its surroundings",
    "filled-in": "core shallower than its own shoulders: emission inside the absorption",
    "blended": "cannot be parted from its neighbours at this line spread",
    "saturated": "core at zero flux, or pixels clipped at one value",
    "off-edge": "window or a side band not on the spectrum",
    "telluric": "overlaps a telluric band",
    "gap": "bad pixels in the window were interpolated",
    "unresolved": "no wider than the line spread; the intrinsic width is an upper limit",
}
#: Lines that can show emission in their core.
_CORE_EMISSION = ("CaII_K", "CaII_8498", "CaII_8542", "CaII_8662")


def flags_of(wave: FloatArray, lines: BulkLines, fits: BulkFits, i: int, k: int, columns: list[int],
             component: bool = False) -> list[str]:
    """Flags of feature ``k`` of spectrum ``i``; ``columns`` are its fitted components (one of them for a component)."""
    feature = lines.features[k]
    out = []
    detected = [c for c in columns if fits.detected[i, c]]
    measured = bool(np.isfinite(lines.ew[i, k]))
    if measured and _emission(wave, lines, fits, i, k, detected):
        out.append("emission")
    if measured and not component and _filled_in(wave, lines, i, k, detected):
        out.append("filled-in")
    if lines.too_coarse[i, k] or _merged(feature, lines.fwhm_angstrom[i], component):
        out.append("blended")
    if measured and _saturated(wave, lines, i, k):
        out.append("saturated")
    for name, flag in (("off-edge", lines.off_edge), ("telluric", lines.telluric), ("gap", lines.gappy)):
        if flag[i, k]:
            out.append(name)
    if detected and all(fits.unresolved[i, c] for c in detected):
        out.append("unresolved")
    return out


def _normalised(wave: FloatArray, lines: BulkLines, i: int, k: int, lo: float,
                hi: float) -> tuple[FloatArray, FloatArray, FloatArray]:
    """(wavelength, F/Fc, sigma/Fc) of the pixels between ``lo`` and ``hi``; a flat continuum outside the side bands."""
    a, b = np.searchsorted(wave, [lo, hi])
    feature = lines.features[k]
    blue, red = lines.blue[i, k], lines.red[i, k]
    if feature.blue is None or feature.red is None:
        level = np.full(b - a, 0.5 * (blue + red))
    else:
        xb, xr = np.mean(feature.blue), np.mean(feature.red)
        level = blue + (red - blue) * np.clip((wave[a:b] - xb) / (xr - xb), 0.0, 1.0)
    return wave[a:b], lines.filled_flux[i, a:b] / level, lines.sigma[i, a:b] / level


def _emission(wave: FloatArray, lines: BulkLines, fits: BulkFits, i: int, k: int, detected: list[int]) -> bool:
    feature = lines.features[k]
    spread = lines.fwhm_angstrom[i]
    for c in detected:
        if fits.ew[i, c] >= -3.0 * fits.ew_err[i, c] or fits.fwhm[i, c] < 0.6 * spread:
            continue
        centre = fits.center[i, c] if np.isfinite(fits.center[i, c]) else fits.wavelength[c]
        if abs(centre - fits.wavelength[c]) > max(spread, 1.5):
            continue
        x, y, noise = _normalised(wave, lines, i, k, feature.wavelength - 50.0, feature.wavelength + 50.0)
        core = np.abs(x - centre) <= 0.35 * fits.fwhm[i, c]
        around = (np.abs(x - centre) > 1.3 * fits.fwhm[i, c]) & (x > feature.window[0] - 35.0) \
            & (x < feature.window[1] + 35.0)
        if not core.any() or around.sum() < 5:
            continue
        peak, error = y[core].mean(), np.sqrt((noise[core] ** 2).sum()) / core.sum()
        span = max(1, round(spread / float(np.median(np.diff(x)))))
        smooth = np.convolve(y, np.ones(span) / span, mode="same")
        if peak - np.max(smooth[around]) > max(3.0 * error, 0.02):
            return True
    return False


def _filled_in(wave: FloatArray, lines: BulkLines, i: int, k: int, detected: list[int]) -> bool:
    """A significant reversal at the very centre of a line that is otherwise in absorption."""
    feature = lines.features[k]
    if not (feature.wings or feature.name in _CORE_EMISSION or feature.name.startswith("HeI_")):
        return False
    spread = lines.fwhm_angstrom[i]
    x, y, noise = _normalised(wave, lines, i, k, feature.wavelength - 1.6 * spread, feature.wavelength + 1.6 * spread)
    off = x - feature.wavelength
    core = np.abs(off) <= 0.4 * spread
    left, right = (off > -1.5 * spread) & (off < -0.7 * spread), (off < 1.5 * spread) & (off > 0.7 * spread)
    if not (core.any() and left.any() and right.any()):
        return False
    centre, error = y[core].mean(), np.sqrt((noise[core] ** 2).sum()) / core.sum()
    shoulder = max(y[left].mean(), y[right].mean())
    shoulder_error = max(np.sqrt((noise[s] ** 2).sum()) / s.sum() for s in (left, right))
    rise = centre - shoulder
    return bool(max(shoulder, centre) < 1.0 and rise > max(3.0 * np.hypot(error, shoulder_error), 0.01))


def _merged(feature: Feature, spread: float, component: bool) -> bool:
    if not component or len(feature.components) < 2:
        return False
    return min(np.diff([w for _, w in feature.components])) < 0.7 * spread


def _saturated(wave: FloatArray, lines: BulkLines, i: int, k: int) -> bool:
    feature = lines.features[k]
    if feature.kind == "band":
        return False
    _, y, noise = _normalised(wave, lines, i, k, *feature.window)
    if y.size == 0:
        return False
    lowest = int(np.argmin(y))
    if y[lowest] < 0.05 or (y[lowest] < 0.2 and y[lowest] < 2.0 * noise[lowest]):
        return True
    a, b = np.searchsorted(wave, feature.window)
    raw = lines.filled_flux[i, a:b]
    flat = (np.diff(raw) == 0) & lines.good[i, a + 1:b]
    return bool(flat.size >= 3 and np.any(flat[:-2] & flat[1:-1] & flat[2:]) and np.ptp(raw) > 0)
