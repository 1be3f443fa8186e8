"""From a spectrum's own pixels to the common grid, at rest and in air."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray
from scipy.interpolate import CubicSpline, PPoly

from starfathom.classify.grid import LN_STEP, PIXEL_ANGSTROM, WAVE
from starfathom.classify.spectrum import PlainSpectrum
from starfathom.templates.library import LIGHT_KMS

FloatArray = NDArray[np.float64]
BoolArray = NDArray[np.bool_]
_LN_WAVE = np.log(WAVE)
_LN_EDGES = np.append(_LN_WAVE - LN_STEP / 2, _LN_WAVE[-1] + LN_STEP / 2)


def air_from_vacuum(wave_angstrom: FloatArray) -> FloatArray:
    """Air wavelengths of vacuum ones, angstrom: Edlen 1966 as given by Morton 2000, ApJS 130, 403, eq. 8."""
    s2 = (1e4 / wave_angstrom) ** 2
    index = 1.0 + 8.34254e-5 + 2.406147e-2 / (130.0 - s2) + 1.5998e-4 / (38.9 - s2)
    return np.where(wave_angstrom > 2000.0, wave_angstrom / index, wave_angstrom)


def noise_from_pixels(flux: FloatArray, valid: BoolArray, blocks: int = 12) -> FloatArray:
    """One standard deviation a pixel, from differences two pixels apart, block by block.

    The estimator is the median of |2 f(i) - f(i-2) - f(i+2)|, 1.4826 / sqrt(6) of it, as in Stoehr et al. 2008
    (ADASS XVII, ASP Conf. 394, 505). Lines narrower than four pixels count as noise, so it is an upper bound.
    """
    n = len(flux)
    blocks = max(1, min(blocks, n // 60))
    second = np.full(n, np.nan)
    second[2:-2] = np.abs(2 * flux[2:-2] - flux[:-4] - flux[4:])
    whole = valid.copy()
    whole[2:-2] &= valid[:-4] & valid[4:]
    second[~whole] = np.nan
    size = n // blocks
    block = np.sort(second[: size * blocks].reshape(blocks, size), axis=1)       # NaN sorts last
    count = np.isfinite(block).sum(axis=1)
    use = np.flatnonzero(count >= 20)
    if not use.size:
        return np.full(n, float(np.std(flux[valid])) if valid.any() else 1.0)
    middle = 1.482602 / 6 ** 0.5 * block[use, count[use] // 2]
    least = 1e-9 * float(np.median(np.abs(flux[valid])))
    return np.interp(np.arange(n), (use + 0.5) * size, np.maximum(middle, least))


def spikes(flux: FloatArray, valid: BoolArray) -> BoolArray:
    """Pixels struck by cosmic rays: one or two pixels that stand alone, half as high again as all around them.

    A line of the sky or of the star is spread over more pixels than that. The height must also be ten times the scatter
    of the neighbourhood (median of absolute deviations from a running median of nine pixels).
    """
    from scipy.ndimage import median_filter

    around = median_filter(flux, size=9, mode="nearest")
    off = np.where(valid, flux - around, 0.0)
    high = off > 0.5 * np.abs(around)
    if not high.any():
        return high
    scatter = 1.4826 * median_filter(np.abs(off), size=201, mode="nearest")
    high &= off > 10.0 * scatter
    if not high.any():
        return high
    out = np.zeros_like(high)
    starts = np.flatnonzero(high & ~np.concatenate([[False], high[:-1]]))
    for i in starts:
        j = i
        while j + 1 < len(high) and high[j + 1]:
            j += 1
        beside = off[[k for k in (i - 1, j + 1) if 0 <= k < len(off)]]
        if j - i < 2 and (beside < 0.25 * off[i:j + 1].max()).all():
            out[i:j + 1] = True
    return out


class Native:
    """A spectrum on its own pixels, in air, ready to be put on the grid at any velocity.

    ``sigma`` is the file's, or estimated from the pixels when it gives none (``sigma_estimated``).
    """

    def __init__(self, spectrum: PlainSpectrum, vacuum: bool) -> None:
        wave = np.asarray(spectrum.wave_angstrom, float)
        near = (wave > WAVE[0] * 0.995) & (wave < WAVE[-1] * 1.005)
        wave = wave[near]
        self.valid = np.asarray(spectrum.valid, bool)[near].copy()
        flux = np.asarray(spectrum.flux, float)[near]
        self.count = int(self.valid.sum())
        if self.count < 20:
            self.scale = 1.0
            return
        if vacuum:
            wave = air_from_vacuum(wave)
        self.struck = spikes(flux, self.valid)
        self.valid &= ~self.struck
        self.scale = float(np.median(np.abs(flux[self.valid]))) or 1.0
        flux = flux / self.scale
        good = np.flatnonzero(self.valid)
        self.ln_wave = np.log(wave)
        self.flux = np.interp(self.ln_wave, self.ln_wave[good], flux[good])
        self.step_angstrom = np.gradient(wave)
        self.pixel_angstrom = float(np.median(self.step_angstrom))
        self.sigma_estimated = spectrum.sigma is None
        if spectrum.sigma is None:
            self.sigma = noise_from_pixels(self.flux, self.valid)
        else:
            self.sigma = np.asarray(spectrum.sigma, float)[near] / self.scale
            self.sigma = np.where(self.valid, self.sigma, np.median(self.sigma[self.valid]))
        # a hole in the sampling is a stretch without data, not something to interpolate across
        step = np.diff(self.ln_wave)
        typical = np.median(step)
        self._bad = (~self.valid).astype(float)
        holes = np.flatnonzero(step > 3.5 * typical)
        self._integral: PPoly | None = None
        self._holes = [(self.ln_wave[i], self.ln_wave[i + 1]) for i in holes]

    def quick(self) -> tuple[FloatArray, BoolArray]:
        """Linear interpolation on to the grid as observed, with the mask: enough for a first velocity."""
        flux = np.interp(_LN_WAVE, self.ln_wave, self.flux)
        return flux, self._mask(_LN_WAVE)

    def _mask(self, ln_wave: FloatArray) -> BoolArray:
        bad = np.interp(ln_wave, self.ln_wave, self._bad, left=1.0, right=1.0)
        ok = bad < 1e-3
        for lo, hi in self._holes:
            ok &= (ln_wave < lo) | (ln_wave > hi)
        return ok

    def on_grid(self, velocity_kms: FloatArray | float = 0.0) -> tuple[FloatArray, BoolArray, FloatArray]:
        """Flux, mask and white-noise-equivalent sigma a grid pixel, at rest after taking out ``velocity_kms``.

        ``velocity_kms`` may be an array on the grid (a slowly varying velocity: a wavelength scale that wanders).
        Flux is the mean over each grid pixel of a cubic spline, so sampling coarser or finer than the grid is alike.
        """
        ln_shift = np.log1p(np.asarray(velocity_kms, float) / LIGHT_KMS)
        edge_shift = ln_shift if ln_shift.ndim == 0 else np.interp(_LN_EDGES, _LN_WAVE, ln_shift)
        edges = np.clip(_LN_EDGES + edge_shift, self.ln_wave[0], self.ln_wave[-1])
        if self._integral is None:
            self._integral = CubicSpline(self.ln_wave, self.flux).antiderivative()
        integral = self._integral
        width = np.maximum(np.diff(edges), 1e-12)
        centre = _LN_WAVE + ln_shift
        flux = np.diff(integral(edges)) / width
        ok = self._mask(centre) & (centre > self.ln_wave[0]) & (centre < self.ln_wave[-1])
        sigma = np.interp(centre, self.ln_wave, self.sigma * np.sqrt(self.step_angstrom)) / np.sqrt(PIXEL_ANGSTROM)
        return np.where(ok, flux, 0.0), ok, sigma
