"""Velocity and the wander of the wavelength scale, found against the same template nodes.

Two steps, each on a batch, with :func:`starfathom.classify.linespread.line_spread` between them:

1. :func:`first_velocity`: masked least squares over shifts of +-840 km/s against some eighty typed nodes.
2. :func:`wander`: velocities of overlapping chunks, smoothed by a Gaussian process. Wavelength scales of real
   spectrographs bend by tens of km/s between arc lines; left in, that costs a third of the luminosity error.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from starfathom.classify.grid import WAVE, blur, rectify
from starfathom.templates.library import GRID_KMS

FloatArray = NDArray[np.float64]
BoolArray = NDArray[np.bool_]

#: Line-spread ladder at which the nodes are kept, FWHM in angstrom.
LADDER: tuple[float, ...] = (3.2, 4.0, 5.0, 6.3, 8.0, 10.0, 12.5, 16.0)
_SEARCH_FWHM = 6.3
_SEARCH = np.flatnonzero((WAVE > 3720) & (WAVE < 7380))[::2]
_SEARCH_SHIFTS = np.arange(-7, 8)                    # of 120 km/s
_TELLURIC = ((5860.0, 5920.0), (6865.0, 6935.0), (7160.0, 7330.0))
#: Effective number of independent pieces in a spectrum, for weighing one velocity peak against another.
_PIECES = 120.0
_PRIOR_KMS = 300.0

_CHUNKS = np.array([3800.0, 4050.0, 4300.0, 4600.0, 4950.0, 5350.0, 5850.0, 6500.0, 7100.0])
_HALF_WIDTHS = np.array([130.0, 150.0, 170.0, 190.0, 220.0, 260.0, 330.0, 400.0, 350.0])
_WANDER_SIGMA_KMS, _WANDER_LENGTH, _WANDER_FLOOR_KMS = 20.0, 0.12, 8.0


def telluric_free(wave_angstrom: FloatArray) -> BoolArray:
    """True outside interstellar Na D and the telluric bands that stand in the range of the library."""
    ok = np.ones(wave_angstrom.shape, bool)
    for lo, hi in _TELLURIC:
        ok &= (wave_angstrom < lo) | (wave_angstrom > hi)
    return ok


@dataclass(frozen=True)
class Nodes:
    """Template nodes for alignment: ``rect[f]`` is (K, m) rectified flux minus one at FWHM ``LADDER[f]``."""

    rect: NDArray[np.float32]      # (n_ladder, K, m)
    valid: BoolArray               # (m,) where the nodes reach
    step: FloatArray               # (K,)
    lum_code: FloatArray           # (K,)

    def __post_init__(self) -> None:
        use = self.valid[_SEARCH] & telluric_free(WAVE[_SEARCH])
        pixels = _SEARCH[use]
        block = self.rect[LADDER.index(_SEARCH_FWHM)]
        shifted = np.stack([block[:, pixels - 2 * s] for s in _SEARCH_SHIFTS], axis=1)   # (K, S, p)
        object.__setattr__(self, "_pixels", pixels)
        object.__setattr__(self, "_shifted", shifted.reshape(-1, len(pixels)).astype(np.float32))
        object.__setattr__(self, "_squared", (self._shifted ** 2))   # type: ignore[attr-defined]

    @classmethod
    def from_fine(cls, rect: FloatArray, valid: BoolArray, step: FloatArray, lum_code: FloatArray) -> Nodes:
        """Build the ladder from nodes at the finest width, (K, m) rectified flux."""
        every = np.broadcast_to(valid, rect.shape)
        rungs = []
        for fwhm in LADDER:
            blurred, ok = blur(rect, every, float(np.sqrt(max(fwhm ** 2 - LADDER[0] ** 2, 0.0))))
            flat, _ = rectify(blurred, ok)
            rungs.append(np.where(ok, flat - 1.0, 0.0).astype(np.float32))
        return cls(np.array(rungs), valid, step, lum_code)


def parabola(chi: FloatArray, axis_values: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Minimum of (n, s) curves by a parabola through the lowest point: its place and the curvature."""
    n, s = chi.shape
    j = np.clip(chi.argmin(axis=1), 1, s - 2)
    r = np.arange(n)
    a, b, c = chi[r, j - 1], chi[r, j], chi[r, j + 1]
    bend = np.maximum(a - 2 * b + c, 1e-12)
    spacing = axis_values[1] - axis_values[0]
    return axis_values[j] + spacing * np.clip(0.5 * (a - c) / bend, -1, 1), bend


def first_velocity(flat: FloatArray, valid: BoolArray, nodes: Nodes) -> tuple[FloatArray, FloatArray, NDArray[np.int64],
                                                                             FloatArray]:
    """Velocity of (n, m) rectified spectra (flux, 1 = continuum) from shifts against every node.

    Returns velocity (km/s), its scatter among the best nodes, the five best nodes (n, 5), and the share of the
    star's structure that the best node leaves unexplained (1 = nothing explained).
    """
    pixels = nodes._pixels                                    # type: ignore[attr-defined]
    weight = valid[:, pixels].astype(np.float32)
    y = ((flat[:, pixels] - 1.0) * weight).astype(np.float32)
    power = (y.astype(float) ** 2).sum(axis=1)
    k, s = len(nodes.step), len(_SEARCH_SHIFTS)
    cross = (y @ nodes._shifted.T).astype(float).reshape(-1, k, s)      # type: ignore[attr-defined]
    norm = (weight @ nodes._squared.T).astype(float).reshape(-1, k, s)  # type: ignore[attr-defined]
    amplitude = np.clip(cross / np.maximum(norm, 1e-9), 0.4, 1.6)
    left = power[:, None, None] - 2 * amplitude * cross + amplitude ** 2 * norm
    left = np.maximum(left, 1e-6 * power[:, None, None] + 1e-12)
    shifts_kms: FloatArray = (_SEARCH_SHIFTS * 2.0 * GRID_KMS).astype(float)
    # the penalty keeps a chance peak at hundreds of km/s from beating a fit as good near rest
    score = _PIECES * np.log(left) + np.minimum((shifts_kms / _PRIOR_KMS) ** 2, 6.0)
    per_node = score.min(axis=2)
    best = np.argsort(per_node, axis=1)[:, :5]
    rows = np.arange(len(y))
    found = np.array([parabola(left[rows, best[:, i]], shifts_kms)[0] for i in range(best.shape[1])])
    # nodes that fit clearly worse have no say
    worse = np.take_along_axis(per_node, best, 1) - per_node.min(axis=1, keepdims=True)
    found = np.where(worse.T < 20.0, found, np.nan)
    velocity = np.nanmedian(found, axis=0)
    scatter = np.nanmax(np.abs(found - velocity), axis=0)
    unexplained = left.min(axis=(1, 2)) / np.maximum(power, 1e-12)
    return velocity, scatter, best, unexplained


def wander(flat: FloatArray, valid: BoolArray, best: NDArray[np.int64], fwhm_angstrom: FloatArray, nodes: Nodes
           ) -> tuple[FloatArray, FloatArray]:
    """Residual velocity along the spectrum, (n, m) km/s, and one standard deviation of its mean, (n,)."""
    n = len(flat)
    rung = np.argmin(np.abs(np.log(np.array(LADDER))[None, :] - np.log(fwhm_angstrom)[:, None]), axis=1)
    mean = nodes.rect[rung[:, None], best[:, :4]].mean(axis=1).astype(float)     # (n, m)
    shifts = np.arange(-4, 5)
    reach = np.flatnonzero(nodes.valid)
    lo_edge, hi_edge = reach[0] + 5, reach[-1] - 5
    clean = telluric_free(WAVE)
    velocity = np.zeros((n, len(_CHUNKS)))
    precision = np.full((n, len(_CHUNKS)), 1e-9)
    for c, (centre, half) in enumerate(zip(_CHUNKS, _HALF_WIDTHS)):
        w = np.flatnonzero(np.abs(WAVE - centre) < half)
        w = w[(w >= lo_edge) & (w <= hi_edge) & clean[w]]
        if len(w) < 60:
            continue
        ok = valid[:, w]
        y = np.where(ok, flat[:, w] - 1.0, 0.0)
        chi = np.array([(np.where(ok, y - mean[:, w - s], 0.0) ** 2).sum(axis=1) for s in shifts]).T
        place, bend = parabola(chi, shifts.astype(float))
        enough = ok.mean(axis=1) > 0.6
        variance = 6.0 * chi.min(axis=1) / np.maximum(ok.sum(axis=1), 1) / bend * GRID_KMS ** 2
        velocity[:, c] = np.where(enough, place * GRID_KMS, 0.0)
        precision[:, c] = np.where(enough, 1.0 / (variance + _WANDER_FLOOR_KMS ** 2), 1e-9)
    ln_chunks = np.log(_CHUNKS)
    prior = (_WANDER_SIGMA_KMS ** 2 * np.exp(-0.5 * ((ln_chunks[:, None] - ln_chunks) / _WANDER_LENGTH) ** 2)
             + 25.0 ** 2)
    total = prior[None] + np.eye(len(_CHUNKS))[None] / precision[:, None, :]
    smooth = (prior[None] @ np.linalg.solve(total, velocity[..., None]))[..., 0]
    ln_wave = np.log(WAVE)
    curve = np.array([np.interp(ln_wave, ln_chunks, row) for row in smooth])
    error = np.sqrt(1.0 / precision.sum(axis=1))
    return curve, error
