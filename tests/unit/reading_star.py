"""A made-up star for the reader tests (smooth light, a few lines, a little noise), to hold results against."""

from __future__ import annotations

from pathlib import Path

import numpy as np

from starfathom.classify.reading import read_plain
from starfathom.classify.spectrum import PlainSpectrum

N = 1200


def wave(n: int = N, lo: float = 3801.25, hi: float = 7398.75) -> np.ndarray:
    return np.linspace(lo, hi, n)


def flux_at(w: np.ndarray, seed: int = 3) -> np.ndarray:
    """Positive flux near 100 with Balmer-like lines and 1 % noise, at wavelengths ``w`` in angstrom."""
    smooth = 100.0 * (w / 5500.0) ** -0.7
    for centre, depth in ((4101.7, 0.3), (4340.5, 0.35), (4861.3, 0.4), (6562.8, 0.3), (5895.0, 0.1)):
        smooth = smooth * (1 - depth * np.exp(-0.5 * ((w - centre) / 9.0) ** 2))
    return smooth * (1 + 0.01 * np.random.default_rng(seed).standard_normal(w.size))


WAVE = wave()
FLUX = flux_at(WAVE)
SIGMA = 0.01 * FLUX


def save(folder: Path, content: bytes | str, name: str = "star.dat") -> Path:
    path = folder / name
    path.write_bytes(content.encode() if isinstance(content, str) else content)
    return path


def lines(columns: list[np.ndarray], sep: str = " ", fmt: str = "%.6f") -> str:
    return "\n".join(sep.join(fmt % v for v in row) for row in zip(*columns)) + "\n"


def same_star(
    spec: PlainSpectrum,
    w: np.ndarray = WAVE,
    f: np.ndarray = FLUX,
    sigma: np.ndarray | None = None,
    rtol: float = 2e-5,
    wtol: float = 2e-3,
) -> None:
    """Wavelengths, flux up to one factor, and uncertainties under the same factor."""
    assert spec.wave_angstrom.size == w.size, (spec.wave_angstrom.size, w.size)
    np.testing.assert_allclose(spec.wave_angstrom, w, rtol=0, atol=wtol)
    assert spec.valid.all()
    factor = np.median(spec.flux / f)
    np.testing.assert_allclose(spec.flux, factor * f, rtol=rtol)
    if sigma is None:
        assert spec.sigma is None
    else:
        assert spec.sigma is not None
        np.testing.assert_allclose(spec.sigma, factor * sigma, rtol=20 * rtol)


def read(folder: Path, content: bytes | str, name: str = "star.dat", **kwargs: object) -> PlainSpectrum:
    return read_plain(save(folder, content, name), **kwargs)  # type: ignore[arg-type]
