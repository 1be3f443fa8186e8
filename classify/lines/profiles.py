"""Gaussian and Voigt profiles of unit area with their derivatives, and the widths that follow from them."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

FloatArray = NDArray[np.float64]

SIGMA_TO_FWHM = float(np.sqrt(8.0 * np.log(2.0)))
_ROOT_2 = float(np.sqrt(2.0))
_ROOT_2PI = float(np.sqrt(2.0 * np.pi))
_ROOT_PI = float(np.sqrt(np.pi))


def gaussian(x: FloatArray, centre: FloatArray, sigma: FloatArray) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Unit-area Gaussian at ``x`` (..., p) and its derivatives by centre and sigma; parameters broadcast (..., 1)."""
    inverse = 1.0 / sigma
    z = (x - centre) * inverse
    z2 = z * z
    value = np.exp(-0.5 * z2) * (inverse / _ROOT_2PI)
    return value, value * z * inverse, value * (z2 - 1.0) * inverse


def gaussian_parts(x: FloatArray, centre: FloatArray, sigma: FloatArray, area: FloatArray,
                   out: FloatArray) -> FloatArray:
    """area x :func:`gaussian` (j, p); its derivatives by area, centre and sigma go into ``out`` (j, 3, p), in place."""
    inverse = 1.0 / sigma
    z, value, by_sigma = out[:, 1], out[:, 0], out[:, 2]
    np.subtract(x, centre, out=z)
    z *= inverse
    np.multiply(z, z, out=by_sigma)
    np.multiply(by_sigma, -0.5, out=value)
    np.exp(value, out=value)
    value *= inverse / _ROOT_2PI
    scaled = value * area
    by_sigma -= 1.0
    slope = scaled * inverse
    by_sigma *= slope
    z *= slope
    return scaled


def voigt(x: FloatArray, centre: FloatArray, sigma: FloatArray,
          gamma: FloatArray) -> tuple[FloatArray, FloatArray, FloatArray, FloatArray]:
    """Unit-area Voigt profile and its derivatives by centre, sigma (Gaussian) and gamma (Lorentzian half width).

    The real part of the Faddeeva function w(z), with w'(z) = -2 z w + 2 i / sqrt(pi).
    """
    from scipy.special import wofz

    root = 1.0 / (sigma * _ROOT_2)
    norm = root / _ROOT_PI
    re_z = (x - centre) * root
    im_z = gamma * root
    z = np.empty(np.broadcast_shapes(re_z.shape, im_z.shape), complex)
    z.real, z.imag = re_z, im_z
    w = wofz(z)
    re_w, im_w = w.real, w.imag
    re_slope = 2.0 * (im_z * im_w - re_z * re_w)
    im_slope = 2.0 / _ROOT_PI - 2.0 * (re_z * im_w + im_z * re_w)
    value = re_w * norm
    steep = norm * root
    by_x = re_slope * steep
    by_gamma = -im_slope * steep
    by_sigma = -(value + (re_slope * re_z - im_slope * im_z) * norm) / sigma
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
    from scipy.special import wofz

    area, sigma, gamma = (np.asarray(a, float) for a in np.broadcast_arrays(area, sigma, gamma))
    with np.errstate(invalid="ignore", divide="ignore"):
        root = 1.0 / (sigma * _ROOT_2)
        y = 1j * gamma * root
        wanted = depth * _ROOT_PI / (area * root)          # of Re w at the crossing
        top = wofz(y).real
        deep = (area > 0) & (top > wanted)
        lo, hi = np.zeros(area.shape), 60.0 * np.maximum(voigt_fwhm(sigma, gamma), 1e-6) * root
        for _ in range(36):
            half = 0.5 * (lo + hi)
            deeper = wofz(half + y).real > wanted
            lo, hi = np.where(deeper, half, lo), np.where(deeper, hi, half)
        width = (lo + hi) / root
    return np.where(np.isnan(area + sigma + gamma), np.nan, np.where(deep, width, 0.0))
