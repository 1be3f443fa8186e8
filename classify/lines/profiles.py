"""Gaussian and Voigt profiles of unit area with their derivatives, and the widths that follow from them."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

FloatArray = NDArray[np.float64]

SIGMA_TO_FWHM = float(np.sqrt(8.0 * np.log(2.0)))
_ROOT_2 = float(np.sqrt(2.0))
_ROOT_2PI = float(np.sqrt(2.0 * np.pi))


def gaussian(x: FloatArray, centre: FloatArray, sigma: FloatArray) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Unit-area Gaussian at ``x`` (..., p) and its derivatives by centre and sigma; parameters broadcast (..., 1)."""
    inverse = 1.0 / sigma
    z = (x - centre) * inverse
    z2 = z * z
    value = np.exp(-0.5 * z2) * (inverse / _ROOT_2PI)
    return value, value * z * inverse, value * (z2 - 1.0) * inverse


def voigt(x: FloatArray, centre: FloatArray, sigma: FloatArray,
          gamma: FloatArray) -> tuple[FloatArray, FloatArray, FloatArray, FloatArray]:
    """Unit-area Voigt profile and its derivatives by centre, sigma (Gaussian) and gamma (Lorentzian half width).

    The real part of the Faddeeva function w(z), with w'(z) = -2 z w + 2 i / sqrt(pi).
    """
    from scipy.special import wofz

    z = ((x - centre) + 1j * gamma) / (sigma * _ROOT_2)
    w = wofz(z)
    slope = -2.0 * z * w + 2j / np.sqrt(np.pi)
    norm = 1.0 / (sigma * _ROOT_2PI)
    value = w.real * norm
    by_x = slope.real * norm / (sigma * _ROOT_2)
    by_gamma = -slope.imag * norm / (sigma * _ROOT_2)
    by_sigma = -(value + (slope * z).real * norm) / sigma
    return value, -by_x, by_sigma, by_gamma


def voigt_fwhm(sigma: FloatArray, gamma: FloatArray) -> FloatArray:
    """FWHM of a Voigt profile (Olivero & Longbothum 1977, good to 0.02 %); a Gaussian's for gamma = 0."""
    lorentz, gauss = 2.0 * gamma, SIGMA_TO_FWHM * sigma
    return 0.5346 * lorentz + np.sqrt(0.2166 * lorentz**2 + gauss**2)


def intrinsic_fwhm(sigma: FloatArray, gamma: FloatArray, instrument_fwhm: FloatArray) -> FloatArray:
    """FWHM left when a Gaussian instrument is taken out of the Gaussian part; 0 where nothing is left."""
    left = np.maximum((SIGMA_TO_FWHM * sigma) ** 2 - instrument_fwhm**2, 0.0)
    lorentz = 2.0 * gamma
    return 0.5346 * lorentz + np.sqrt(0.2166 * lorentz**2 + left)


def width_at_depth(area: FloatArray, sigma: FloatArray, gamma: FloatArray, depth: float) -> FloatArray:
    """Full width of area x profile where it is ``depth`` deep; 0 where it is not that deep. Bisection, any shape."""
    area, sigma, gamma = np.broadcast_arrays(np.asarray(area, float), sigma, gamma)
    zero = np.zeros(area.shape)
    with np.errstate(invalid="ignore", over="ignore"):
        top = area * voigt(zero, zero, sigma, gamma)[0]
        lo, hi = zero.copy(), 60.0 * np.maximum(voigt_fwhm(sigma, gamma), 1e-6)
        for _ in range(44):
            half = 0.5 * (lo + hi)
            deeper = area * voigt(half, zero, sigma, gamma)[0] > depth
            lo, hi = np.where(deeper, half, lo), np.where(deeper, hi, half)
    return np.where(np.isnan(top), np.nan, np.where(top > depth, lo + hi, 0.0))
