"""What is not a normal star, as examples: the coarse view in which spectra are held against them.

Kinds of objects differ in features some hundred angstrom wide, so the comparison is made on a coarse view: 300 km/s
pixels, blurred to 16 A, over a pseudo-continuum 200 A wide (the 60 A one of the classifier would flatten the wings of
a white dwarf). The same view of every library star stands for what normal stars look like, odd ones included.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from functools import lru_cache
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy import sparse

from starfathom.classify.alignment import telluric_free
from starfathom.classify.grid import FWHM_TO_SIGMA, WAVE

FloatArray = NDArray[np.float64]
BoolArray = NDArray[np.bool_]
FILE = Path(__file__).parent / "data" / "foreign.npz"

_BIN = 5
_SIZE = len(WAVE) // _BIN
#: Centres of the coarse pixels, angstrom, 300 km/s apart.
COARSE_WAVE: FloatArray = WAVE[: _SIZE * _BIN].reshape(_SIZE, _BIN).mean(axis=1)
LN_COARSE_STEP = float(np.log(COARSE_WAVE[1] / COARSE_WAVE[0]))
VIEW_FWHM_ANGSTROM = 16.0
_LEAST_KERNEL_ANGSTROM = 10.0
_CONTINUUM_SIGMA_ANGSTROM = 200.0
_BLOCK = 8
_BLOCKS = _SIZE // _BLOCK
_BLOCK_WAVE = COARSE_WAVE[: _BLOCKS * _BLOCK].reshape(_BLOCKS, _BLOCK).mean(axis=1)
#: Coarse pixels compared with the library: 3640 to 7390 A without Na D and the telluric bands.
COMMON = np.flatnonzero((COARSE_WAVE > 3640.0) & (COARSE_WAVE < 7390.0) & telluric_free(COARSE_WAVE))
#: One part in this is what two instruments differ by, a coarse pixel.
VIEW_FLOOR = 0.012
_QUANTUM = 1.0 / 4000.0
_HIDDEN = np.int16(-32768)


@dataclass(frozen=True)
class View:
    """n spectra in the coarse view: ``depth`` (n, 964) is flux over pseudo-continuum minus one, clipped to +-1, and
    ``sigma`` its noise, white, a coarse pixel."""

    depth: NDArray[np.float32]
    valid: BoolArray
    sigma: NDArray[np.float32]

    def __getitem__(self, rows: Any) -> View:
        return View(self.depth[rows], self.valid[rows], self.sigma[rows])


@lru_cache(maxsize=32)
def _blur(fwhm_angstrom: float) -> sparse.csr_matrix:
    sigma = fwhm_angstrom * FWHM_TO_SIGMA
    off = COARSE_WAVE[:, None] - COARSE_WAVE
    kernel = np.where(np.abs(off) < 3.5 * sigma, np.exp(-0.5 * (off / sigma) ** 2), 0.0) * np.gradient(COARSE_WAVE)
    return sparse.csr_matrix(kernel)


@lru_cache(maxsize=1)
def _smooth() -> tuple[FloatArray, NDArray[np.int64], FloatArray, FloatArray]:
    kernel = np.exp(-0.5 * ((_BLOCK_WAVE[:, None] - _BLOCK_WAVE) / _CONTINUUM_SIGMA_ANGSTROM) ** 2)
    position = np.interp(COARSE_WAVE, _BLOCK_WAVE, np.arange(_BLOCKS, dtype=float))
    left = np.minimum(position.astype(np.int64), _BLOCKS - 2)
    x = np.log(_BLOCK_WAVE / 5500.0) * 2
    return (kernel * np.gradient(_BLOCK_WAVE)).T, left, position - left, np.vander(x, 4)


def rectify_coarse(flux: FloatArray, valid: BoolArray) -> tuple[FloatArray, FloatArray]:
    """Flux over pseudo-continuum minus one, (n, 964), 0 where invalid; and that continuum.

    The continuum is a cubic in log flux, which takes slope and reddening, times a masked Gaussian smooth.
    """
    kernel, left, fraction, powers = _smooth()
    n, cut = len(flux), _BLOCKS * _BLOCK
    count = valid[:, :cut].reshape(n, _BLOCKS, _BLOCK).sum(axis=2).astype(float)
    total = np.where(valid, flux, 0.0)[:, :cut].reshape(n, _BLOCKS, _BLOCK).sum(axis=2)
    mean = total / np.maximum(count, 1.0)
    typical = np.abs(total).sum(axis=1, keepdims=True) / np.maximum(count.sum(axis=1, keepdims=True), 1.0) + 1e-30
    log_mean = np.log(np.maximum(mean, 0.01 * typical))
    normal = np.einsum("nb,bi,bj->nij", count, powers, powers) + np.eye(4) * 1e-3
    curve = np.linalg.solve(normal, ((count * log_mean) @ powers)[:, :, None])[:, :, 0] @ powers.T
    slope = np.exp(np.clip(curve - np.log(typical), -8, 8)) * typical
    level = ((total / slope) @ kernel) / np.maximum(count @ kernel, 1e-9)
    level = level * slope
    fine = level[:, left] * (1 - fraction) + level[:, left + 1] * fraction
    safe = np.where(np.abs(fine) > 1e-3 * typical, fine, typical)
    return np.where(valid, flux / safe - 1.0, 0.0), safe


def view_of(flux: FloatArray, valid: BoolArray, sigma: FloatArray, fwhm_angstrom: FloatArray) -> View:
    """Coarse view of (n, m) spectra on the common grid whose line spread is ``fwhm_angstrom`` (n,)."""
    n, cut = len(flux), _SIZE * _BIN
    v = valid[:, :cut].reshape(n, _SIZE, _BIN)
    count = v.sum(axis=2)
    mean = np.where(v, flux[:, :cut].reshape(n, _SIZE, _BIN), 0.0).sum(axis=2) / np.maximum(count, 1)
    noise = np.sqrt(np.where(v, sigma[:, :cut].reshape(n, _SIZE, _BIN) ** 2, 0.0).sum(axis=2)) / np.maximum(count, 1)
    return view_of_coarse(mean, count >= 3, noise, fwhm_angstrom)


def view_of_coarse(flux: FloatArray, valid: BoolArray, sigma: FloatArray, fwhm_angstrom: FloatArray) -> View:
    """The same from spectra already averaged over coarse pixels, (n, 964)."""
    out = np.empty_like(flux)
    width = np.round(np.sqrt(np.maximum(VIEW_FWHM_ANGSTROM ** 2 - fwhm_angstrom ** 2, _LEAST_KERNEL_ANGSTROM ** 2)))
    for w in np.unique(width):
        rows = width == w
        kernel = _blur(float(w))
        weight = (kernel @ valid[rows].T.astype(float)).T
        out[rows] = (kernel @ np.where(valid[rows], flux[rows], 0.0).T).T / np.maximum(weight, 1e-9)
    depth, level = rectify_coarse(out, valid)
    return View(np.clip(depth, -1.0, 1.0).astype(np.float32), valid, (sigma / np.abs(level)).astype(np.float32))


def encode(view: View) -> NDArray[np.int16]:
    """Depths in quanta of 1/4000, invalid pixels marked."""
    return np.where(view.valid, np.round(view.depth / _QUANTUM), _HIDDEN).astype(np.int16)


def decode(codes: NDArray[np.int16]) -> tuple[NDArray[np.float32], BoolArray]:
    """Inverse of :func:`encode`."""
    valid = codes != _HIDDEN
    return np.where(valid, codes * np.float32(_QUANTUM), np.float32(0)), valid


@dataclass(frozen=True)
class Examples:
    """Examples in the coarse view: normal library stars (``kind`` "star") and foreign ones.

    ``label`` is a type such as ``DA3``, ``source`` the library it came from, ``hip`` 0 where none.
    """

    depth: NDArray[np.float32]   # (n, 964)
    valid: BoolArray
    kind: NDArray[np.str_]
    name: NDArray[np.str_]
    label: NDArray[np.str_]
    source: NDArray[np.str_]
    hip: NDArray[np.int64]

    def __len__(self) -> int:
        return len(self.depth)

    def select(self, keep: BoolArray) -> Examples:
        """Those where ``keep`` is True."""
        return Examples(*(getattr(self, f)[keep] for f in self.__dataclass_fields__))

    def without(self, libraries: Sequence[str], hips: Sequence[int], names: Sequence[str] = ()) -> Examples:
        """Leave out sources by name, stars by HIP number, and (for tests) examples by name."""
        drop = np.isin(self.source, list(libraries)) | np.isin(self.hip, [h for h in hips if h > 0])
        return self.select(~(drop | np.isin(self.name, list(names))))


@dataclass(frozen=True)
class FarExamples:
    """Galaxies and quasars by rest flux on a long logarithmic grid, from which any redshift is made."""

    flux: NDArray[np.float32]    # (n, q), 0 where there is nothing
    ln_first: float
    kind: NDArray[np.str_]
    name: NDArray[np.str_]
    source: NDArray[np.str_]

    def at(self, index: int, steps: int) -> tuple[FloatArray, BoolArray]:
        """Flux and mask (964,) of one example redshifted by ``steps`` coarse pixels."""
        start = round(float(np.log(COARSE_WAVE[0]) - self.ln_first) / LN_COARSE_STEP) - steps
        at = start + np.arange(_SIZE)
        inside = (at >= 0) & (at < self.flux.shape[1])
        row = np.where(inside, self.flux[index][np.clip(at, 0, self.flux.shape[1] - 1)], 0.0)
        return row.astype(float), row > 0


@lru_cache(maxsize=1)
def load_examples() -> tuple[Examples, FarExamples]:
    """The shipped examples (about 2300 kB, 0.05 s)."""
    with np.load(FILE) as z:
        depth, valid = decode(z["codes"])
        near = Examples(depth, valid, z["kind"], z["name"], z["label"], z["source"], z["hip"])
        far = FarExamples(z["far_flux"].astype(np.float32), float(z["far_ln_first"]), z["far_kind"], z["far_name"],
                          z["far_source"])
    return near, far
