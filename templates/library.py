"""Open the shipped reference library: spectra on one logarithmic grid and their catalogue."""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

FloatArray = NDArray[np.float64]
LIGHT_KMS = 299792.458
GRID_KMS = 60.0
LIBRARY_FILE = "library.npz"
DATA = Path(__file__).parent / "data"
_LN_STEP = float(np.log1p(GRID_KMS / LIGHT_KMS))
_QUANTUM = 1.0 / 6000.0     # of ln flux: far below the noise of any library spectrum
_INVALID = np.int16(-32768)


@dataclass(frozen=True)
class LibraryGrid:
    """The logarithmic grid of the library file, in air: 3540 to 9300 A, ``GRID_KMS`` a step."""

    first_angstrom: float = 3541.0
    size: int = 4824

    @property
    def wave_angstrom(self) -> FloatArray:
        return self.first_angstrom * np.exp(_LN_STEP * np.arange(self.size))


def encode_flux(flux: FloatArray, valid: NDArray[np.bool_]) -> tuple[NDArray[np.int16], float]:
    """ln(flux / median) in quanta, as 16-bit first differences, invalid pixels marked; and the median."""
    good = valid & (flux > 0)
    reference = float(np.median(flux[good]))
    level = np.where(good, np.log(np.where(good, flux, 1.0) / reference) / _QUANTUM, 0.0)
    code = np.clip(np.round(level), -30000, 30000).astype(np.int64)
    index = np.maximum.accumulate(np.where(good, np.arange(len(code)), -1))
    held = np.where(index >= 0, code[np.maximum(index, 0)], 0)
    step = np.diff(held, prepend=0)
    # a jump that does not fit 16 bits cannot happen between neighbouring pixels of a star
    out = np.clip(step, -32767, 32767).astype(np.int16)
    out[~good] = _INVALID
    return out, reference


def decode_flux(codes: NDArray[np.int16]) -> tuple[NDArray[np.float32], NDArray[np.bool_]]:
    """Inverse of :func:`encode_flux` for an (n, m) block: flux over its median, and the mask of valid pixels."""
    valid = codes != _INVALID
    level = np.cumsum(np.where(valid, codes, 0), axis=1, dtype=np.int32)
    flux = np.exp(level.astype(np.float32) * np.float32(_QUANTUM))
    return np.where(valid, flux, np.float32(0)), valid


@dataclass(frozen=True)
class Library:
    """The library: ``flux`` and ``valid`` of shape (n_stars, n_pixels) on ``wave_angstrom``; ``catalogue`` maps a
    column name to an array of length n_stars (columns and units in the header of ``catalogue.ecsv``)."""

    wave_angstrom: FloatArray
    flux: NDArray[np.float32]
    valid: NDArray[np.bool_]
    catalogue: dict[str, NDArray[Any]]

    def __len__(self) -> int:
        return len(self.flux)

    def select(self, keep: NDArray[np.bool_]) -> Library:
        """The stars where ``keep`` is True."""
        return Library(self.wave_angstrom, self.flux[keep], self.valid[keep],
                       {k: v[keep] for k, v in self.catalogue.items()})

    def without(self, libraries: tuple[str, ...] = (), hips: tuple[int, ...] = ()) -> Library:
        """Leave out source libraries by name and stars by HIP number."""
        c = self.catalogue
        return self.select(~(np.isin(c["library"], libraries) | np.isin(c["hip"], [h for h in hips if h > 0])))


def read_catalogue(path: Path = DATA / "catalogue.ecsv") -> dict[str, NDArray[Any]]:
    """Columns of the catalogue as arrays, read without astropy so that opening stays quick."""
    import csv

    with path.open(newline="") as fh:
        rows = list(csv.reader(line for line in fh if not line.startswith("#")))
    columns = list(zip(*rows[1:]))
    out: dict[str, NDArray[Any]] = {}
    for name, column in zip(rows[0], columns):
        if name in ("star", "library", "file", "label", "kind"):
            out[name] = np.array(column)
        elif name == "doubtful":
            out[name] = np.array([v == "True" for v in column])
        elif name == "hip":
            out[name] = np.array(column, int)
        else:
            out[name] = np.array([float(v) if v not in ("", "nan") else np.nan for v in column])
    return out


def load_library() -> Library:
    """The shipped library (about 0.2 s), with those of the user's standards that the models are to learn from."""
    from starfathom.templates.user import fingerprint

    return _open(fingerprint())


@lru_cache(maxsize=2)
def _open(learned: str) -> Library:
    from starfathom.templates.user import joined, user_standards

    shipped = _shipped()
    return joined(shipped, user_standards(learned_only=True)) if learned else shipped


@lru_cache(maxsize=1)
def _shipped() -> Library:
    with np.load(DATA / LIBRARY_FILE) as z:
        flux, valid = decode_flux(z["codes"])
        first, _kms, size = z["grid"]
    return Library(LibraryGrid(float(first), int(size)).wave_angstrom, flux, valid, read_catalogue())
