"""The regression, against an independent implementation."""

from __future__ import annotations

import numpy as np
import pytest

from starfathom.classify.gaussian_process import fit


def data(n: int = 80, seed: int = 6) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    rng = np.random.default_rng(seed)
    x = rng.normal(size=(n, 3)) * np.array([3.0, 1.0, 0.2])
    return x, np.sin(x[:, 0]) + x[:, 1] + 5.0, rng.uniform(0.05, 0.3, n)


def test_mean_and_variance_are_those_of_scikit_learn():
    from sklearn.gaussian_process import GaussianProcessRegressor
    from sklearn.gaussian_process.kernels import RBF, ConstantKernel

    x, y, error = data()
    r = fit(x, y, error, components=3, with_variance=True, lengths=(0.7,), jitters=(0.4,))
    # by the docstring: features over the root of their standard deviation, length in units of the median squared
    # distance, jitter of half the target's standard deviation; prior of three of those
    z = x / np.sqrt(x.std(axis=0))
    d2 = ((z[:, None] - z) ** 2).sum(axis=2)
    unit = y.std()
    kernel = ConstantKernel(9.0 * unit ** 2, "fixed") * RBF(np.sqrt(0.7 * np.median(d2)), "fixed")
    jitter = 0.4 * unit / 2
    other = GaussianProcessRegressor(kernel, alpha=error ** 2 + jitter ** 2, optimizer=None).fit(z, y - y.mean())
    at = np.random.default_rng(1).normal(size=(30, 3)) * np.array([3.0, 1.0, 0.2])
    value, sd = r.predict(at)
    expected, expected_sd = other.predict(at / np.sqrt(x.std(axis=0)), return_std=True)
    np.testing.assert_allclose(value, expected + y.mean(), atol=2e-3)
    np.testing.assert_allclose(sd, np.hypot(expected_sd, jitter), rtol=5e-3)


def test_length_and_jitter_go_by_the_marginal_likelihood():
    from sklearn.gaussian_process import GaussianProcessRegressor
    from sklearn.gaussian_process.kernels import RBF, ConstantKernel

    x, y, error = data()
    lengths, jitters = (0.1, 0.4, 1.5, 8.0), (0.05, 0.5)
    z = x / np.sqrt(x.std(axis=0))
    typical = np.median(((z[:, None] - z) ** 2).sum(axis=2))
    scores = {}
    for length in lengths:
        for jitter in jitters:
            kernel = ConstantKernel(9 * y.var(), "fixed") * RBF(np.sqrt(length * typical), "fixed")
            alpha = error ** 2 + (jitter * y.std() / 2) ** 2
            g = GaussianProcessRegressor(kernel, alpha=alpha, optimizer=None).fit(z, y - y.mean())
            scores[length, jitter] = g.log_marginal_likelihood_value_
    length, jitter = max(scores, key=lambda k: scores[k])
    r = fit(x, y, error, components=3, lengths=lengths, jitters=jitters)
    assert r.length2 == pytest.approx(length * typical, rel=1e-6)
    assert r.jitter == pytest.approx(jitter * y.std() / 2)


def test_the_error_of_a_feature_enters_by_the_slope():
    """Variance added by features known with a covariance: g' S g, the slope g by finite differences."""
    x, y, error = data()
    r = fit(x, y, error, components=3, with_variance=True)
    at = np.array([[0.7, -0.3, 0.05]])
    h = 1e-3
    slope = np.array([(r.predict(at + h * e)[0][0] - r.predict(at - h * e)[0][0]) / (2 * h) for e in np.eye(3)])
    root = np.array([[0.1, 0.0, 0.0], [0.05, 0.2, 0.0], [0.0, 0.01, 0.02]])
    own, more = r.predict(at)[1][0], r.predict(at, (root @ root.T)[None])[1][0]
    assert more ** 2 - own ** 2 == pytest.approx(float(slope @ root @ root.T @ slope), rel=1e-3)


def test_a_regressor_of_fewer_components_ignores_the_rest():
    x, y, error = data()
    r = fit(x, y, error, components=2)
    changed = x.copy()
    changed[:, 2] = 99.0
    np.testing.assert_array_equal(r.predict(x)[0], r.predict(changed)[0])
    assert r.root.size == 0
