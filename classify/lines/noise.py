"""Noise of a spectrum from the spectrum itself, and the correlation that resampling leaves between pixels."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

FloatArray = NDArray[np.float64]
BoolArray = NDArray[np.bool_]

#: Fourth difference of neighbours: blind to whatever is smooth over five pixels, unit noise gain after division.
_STENCIL = np.array([1.0, -4.0, 6.0, -4.0, 1.0])
_GAIN = float(np.sqrt((_STENCIL**2).sum()))
_BLOCK = 300


def estimate_sigma(flux: FloatArray, valid: BoolArray) -> FloatArray:
    """One standard deviation of each pixel from the scatter of fourth differences, shape as ``flux`` (n, m).

    The scatter (1.4826 times the median absolute value) is taken in blocks of 300 pixels in units of the square root
    of the smoothed flux, so that within a block the noise follows the photons: the Poisson form used only where a
    file gives no errors. Pixels are taken as independent; a spectrum that was resampled needs ``correlation``.
    """
    flux = np.atleast_2d(np.asarray(flux, float))
    good = np.atleast_2d(valid)
    n, m = flux.shape
    if m < 12:
        return np.full(flux.shape, np.nan)
    filled = np.where(good, flux, 0.0)
    kernel = 9
    total = _boxcar(filled, kernel)
    count = _boxcar(good.astype(float), kernel)
    smooth = np.where(count > 0, total / np.maximum(count, 1e-9), np.nan)
    floor = 0.05 * np.nanmedian(np.abs(np.where(good, flux, np.nan)), axis=1, keepdims=True)
    root = np.sqrt(np.maximum(np.nan_to_num(smooth), np.maximum(np.nan_to_num(floor), 1e-300)))
    diff = sum(c * filled[:, k:m - 4 + k] for k, c in enumerate(_STENCIL)) / (_GAIN * root[:, 2:-2])
    usable = np.logical_and.reduce([good[:, k:m - 4 + k] for k in range(5)])
    diff = np.where(usable, np.abs(diff), np.nan)
    blocks = max(1, round(diff.shape[1] / _BLOCK))
    edges = np.linspace(0, diff.shape[1], blocks + 1).astype(int)
    centres = 0.5 * (edges[1:] + edges[:-1]) + 2
    levels = np.full((n, blocks), np.nan)
    for b in range(blocks):
        part = diff[:, edges[b]:edges[b + 1]]
        enough = np.isfinite(part).sum(axis=1) >= 20
        if enough.any():
            levels[enough, b] = 1.4826 * np.nanmedian(part[enough], axis=1)
    out = np.full((n, m), np.nan)
    pixel = np.arange(m)
    for i in range(n):
        known = np.isfinite(levels[i])
        if known.any():
            out[i] = np.interp(pixel, centres[known], levels[i][known]) * root[i]
    return out


def _boxcar(values: FloatArray, width: int) -> FloatArray:
    half = width // 2
    padded = np.pad(values, ((0, 0), (half + 1, half)))
    cumulative = np.cumsum(padded, axis=1)
    return cumulative[:, width:] - cumulative[:, :-width]


def resampling_correlation(old_wave: FloatArray, new_wave: FloatArray, max_lag: int = 5) -> FloatArray:
    """Mean correlation between pixels 1, 2, ... ``max_lag`` apart after linear interpolation of independent pixels.

    Shape (max_lag,). Pass it as ``correlation`` when a spectrum was resampled and its errors were carried pixel by
    pixel: a sum over a window is then noisier than independent pixels would make it.
    """
    old, new = np.asarray(old_wave, float), np.asarray(new_wave, float)
    inside = new[(new >= old[0]) & (new < old[-1])]
    if inside.size < max_lag + 2:
        return np.zeros(max_lag)
    left = np.clip(np.searchsorted(old, inside, "right") - 1, 0, old.size - 2)
    right_share = (inside - old[left]) / (old[left + 1] - old[left])
    a, b = 1.0 - right_share, right_share
    sigma = np.sqrt(a**2 + b**2)
    out = np.zeros(max_lag)
    for k in range(1, max_lag + 1):
        step = left[k:] - left[:-k]
        cov = np.where(step == 0, a[:-k] * a[k:] + b[:-k] * b[k:], np.where(step == 1, b[:-k] * a[k:], 0.0))
        out[k - 1] = float(np.mean(cov / (sigma[:-k] * sigma[k:])))
    return out
