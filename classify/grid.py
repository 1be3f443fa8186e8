"""The common logarithmic grid and what is done on it: blurring, rectifying, resampling. All of it in batches."""

from __future__ import annotations

from functools import lru_cache

import numpy as np
from numpy.typing import NDArray
from scipy import sparse

from starfathom.templates.library import GRID_KMS, LIGHT_KMS, LibraryGrid

FloatArray = NDArray[np.float64]
BoolArray = NDArray[np.bool_]
FWHM_TO_SIGMA = 1.0 / (8.0 * np.log(2.0)) ** 0.5

GRID = LibraryGrid()
#: Rest wavelengths of the common grid in air, angstrom, 60 km/s a step.
WAVE: FloatArray = GRID.wave_angstrom
LN_STEP = float(np.log1p(GRID_KMS / LIGHT_KMS))
PIXEL_ANGSTROM: FloatArray = WAVE * LN_STEP

#: Width (sigma) of the Gaussian smooth that stands for the continuum. 40 to 100 A do alike, 200 does worse.
CONTINUUM_SIGMA_ANGSTROM = 60.0
_COARSE = 8   # the continuum is smooth on 60 A, so it is computed on every eighth pixel (some 7 A)


@lru_cache(maxsize=256)
def blur_matrix(kernel_fwhm_angstrom: float, start: int = 0, stop: int | None = None) -> sparse.csr_matrix:
    """Sparse (m, m) matrix that convolves with a Gaussian of constant width in angstrom; rows sum to one."""
    wave = WAVE[start:stop]
    size = len(wave)
    sigma_px = kernel_fwhm_angstrom * FWHM_TO_SIGMA / PIXEL_ANGSTROM[start:stop]
    reach = int(np.ceil(3.5 * sigma_px.max()))
    offsets = np.arange(-reach, reach + 1)
    rows = np.repeat(np.arange(size), len(offsets))
    cols = (np.arange(size)[:, None] + offsets).ravel()
    weight = np.exp(-0.5 * (offsets / sigma_px[:, None]) ** 2)
    weight[np.abs(offsets) > 3.5 * sigma_px[:, None]] = 0.0
    weight /= weight.sum(axis=1, keepdims=True)
    flat = weight.ravel()
    keep = (cols >= 0) & (cols < size) & (flat > 0)
    return sparse.csr_matrix((flat[keep], (rows[keep], cols[keep])), shape=(size, size))


def blur(flux: FloatArray, valid: BoolArray, kernel_fwhm_angstrom: float) -> tuple[FloatArray, BoolArray]:
    """Blur (n, m) spectra by a Gaussian of constant FWHM, never mixing in invalid pixels.

    A pixel stays valid when at least half of the kernel fell on valid pixels.
    """
    if kernel_fwhm_angstrom < 0.15:
        return flux, valid
    matrix = blur_matrix(round(float(kernel_fwhm_angstrom), 2))
    weight = (matrix @ valid.T.astype(float)).T
    total = (matrix @ np.where(valid, flux, 0.0).T).T
    ok = valid & (weight > 0.5)
    return np.where(ok, total / np.where(ok, weight, 1.0), 0.0), ok


@lru_cache(maxsize=8)
def _smooth_pieces(sigma_angstrom: float) -> tuple[FloatArray, NDArray[np.int64], FloatArray]:
    """Dense coarse smoothing matrix, and the linear interpolation back to the fine grid."""
    size = len(WAVE) // _COARSE
    coarse = WAVE[: size * _COARSE].reshape(size, _COARSE).mean(axis=1)
    width = PIXEL_ANGSTROM[: size * _COARSE : _COARSE] * _COARSE
    kernel = np.exp(-0.5 * ((coarse[:, None] - coarse[None, :]) / sigma_angstrom) ** 2) * width[None, :]
    position = np.interp(WAVE, coarse, np.arange(size, dtype=float))
    left = np.minimum(position.astype(np.int64), size - 2)
    return kernel, left, position - left


def continuum(flux: FloatArray, valid: BoolArray, sigma_angstrom: float = CONTINUUM_SIGMA_ANGSTROM) -> FloatArray:
    """Masked Gaussian smooth of (n, m) spectra on the common grid, shape (n, m)."""
    kernel, left, fraction = _smooth_pieces(sigma_angstrom)
    size = kernel.shape[0]
    n = len(flux)
    cut = size * _COARSE
    total = np.where(valid, flux, 0.0)[:, :cut].reshape(n, size, _COARSE).sum(axis=2)
    count = valid[:, :cut].reshape(n, size, _COARSE).sum(axis=2).astype(float)
    # the weight is a Gaussian at coarse spacing; where nothing is near, the nearest level is carried on
    level = (total @ kernel.T) / np.maximum(count @ kernel.T, 1e-12)
    return level[:, left] * (1.0 - fraction) + level[:, left + 1] * fraction


def rectify(flux: FloatArray, valid: BoolArray, sigma_angstrom: float = CONTINUUM_SIGMA_ANGSTROM
            ) -> tuple[FloatArray, FloatArray]:
    """Flux over its masked smooth, (n, m), 1 where invalid; and that smooth."""
    level = continuum(flux, valid, sigma_angstrom)
    safe = np.where(np.abs(level) > 0, level, 1.0)
    out = np.where(valid, flux / safe, 1.0)
    return np.clip(out, 0.0, 3.0), level
