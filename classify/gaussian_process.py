"""A small Gaussian-process regression with plain arrays, so that a trained one is stored without pickles."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.linalg import cholesky, solve_triangular

FloatArray = NDArray[np.float64]


@dataclass(frozen=True)
class Regressor:
    """Squared-exponential process on scaled features.

    ``points`` (t, k) are the training features over ``scale`` (k,); prediction is ``mean + K alpha``; ``root`` is the
    inverse Cholesky factor for the variance, (t, t) in single precision, or empty when variance is not wanted.
    """

    points: NDArray[np.float32]
    scale: FloatArray
    alpha: FloatArray
    mean: float
    amplitude: float
    length2: float
    jitter: float
    root: NDArray[np.float32]

    def predict(self, features: FloatArray, spread: FloatArray | None = None) -> tuple[FloatArray, FloatArray]:
        """Mean and one standard deviation for (n, k') features; ``spread`` (n, k', k') is their own covariance.

        Only the first k features are used, so one set of components serves regressors of different size.
        """
        k = self.points.shape[1]
        z = features[:, :k] / self.scale
        p = self.points.astype(float)
        d2 = (z ** 2).sum(1)[:, None] + (p ** 2).sum(1)[None, :] - 2 * z @ p.T
        kernel = self.amplitude * np.exp(-np.maximum(d2, 0) / (2 * self.length2))
        value = self.mean + kernel @ self.alpha
        variance = np.full(len(z), self.amplitude + self.jitter ** 2)
        if self.root.size:
            variance = variance - ((kernel @ self.root.T.astype(float)) ** 2).sum(axis=1)
        if spread is not None:
            slope = ((kernel * self.alpha) @ p - (kernel @ self.alpha)[:, None] * z) / self.length2 / self.scale
            variance = variance + np.einsum("ni,nij,nj->n", slope, spread[:, :k, :k], slope)
        return value, np.sqrt(np.maximum(variance, 1e-6))

    def arrays(self, prefix: str) -> dict[str, NDArray[np.generic]]:
        """The regressor as named arrays for an npz file."""
        numbers = np.array([self.mean, self.amplitude, self.length2, self.jitter])
        return {f"{prefix}.points": self.points, f"{prefix}.scale": self.scale, f"{prefix}.alpha": self.alpha,
                f"{prefix}.numbers": numbers, f"{prefix}.root": self.root}

    @classmethod
    def from_arrays(cls, arrays: dict[str, NDArray[np.generic]], prefix: str) -> Regressor:
        mean, amplitude, length2, jitter = (float(v) for v in np.asarray(arrays[f"{prefix}.numbers"], float))
        points, scale, alpha, root = (np.asarray(arrays[f"{prefix}.{n}"]) for n in ("points", "scale", "alpha", "root"))
        return cls(points.astype(np.float32), scale.astype(float), alpha.astype(float), mean, amplitude, length2,
                   jitter, root.astype(np.float32))


def fit(features: FloatArray, target: FloatArray, error: FloatArray, *, components: int, with_variance: bool = False,
        lengths: tuple[float, ...] = (2.0,), jitters: tuple[float, ...] = (0.2,)) -> Regressor:
    """Fit on (n, >= components) features; length and jitter by marginal likelihood when several are given.

    The defaults are what that likelihood chose for absolute magnitude and gravity, in units of the median squared
    distance and of half the target's standard deviation.

    Features are scaled by the square root of their standard deviation, between equal say and say by variance.
    """
    z = features[:, :components]
    scale = np.sqrt(z.std(axis=0) + 1e-12)
    z = z / scale
    mean = float(target.mean())
    y = target - mean
    unit = float(max(target.std(), 1e-6))
    amplitude = 9.0 * unit ** 2
    d2 = np.maximum((z ** 2).sum(1)[:, None] + (z ** 2).sum(1)[None, :] - 2 * z @ z.T, 0)
    typical = float(np.median(d2))
    best: tuple[float, float, float, FloatArray, FloatArray] | None = None
    for length in lengths:
        base = amplitude * np.exp(-d2 / (2 * length * typical))
        for jitter in jitters:
            matrix = base + np.diag(error ** 2 + (jitter * unit / 2) ** 2)
            low = cholesky(matrix, lower=True, check_finite=False)
            half = solve_triangular(low, y, lower=True, check_finite=False)
            score = -0.5 * float(half @ half) - float(np.log(np.diag(low)).sum())
            if best is None or score > best[0]:
                weights = solve_triangular(low, half, lower=True, trans=1, check_finite=False)
                best = (score, length, jitter * unit / 2, low, weights)
    assert best is not None
    _, length, jitter, low, alpha = best
    root = np.linalg.inv(low).astype(np.float32) if with_variance else np.empty((0, 0), np.float32)
    return Regressor(z.astype(np.float32), scale, alpha, mean, amplitude, length * typical, jitter, root)
