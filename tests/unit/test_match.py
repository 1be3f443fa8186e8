"""The template surface, the regressions, and the posterior made of them."""

from __future__ import annotations

import numpy as np
import pytest

from starfathom.classify import posterior as post
from starfathom.classify.engine import Classifier
from starfathom.classify.gaussian_process import Regressor, fit
from starfathom.classify.learn import perturb
from starfathom.classify.model import Blend, Model
from starfathom.classify.surface import CORE, PIXELS, TAIL, match
from starfathom.templates.subtypes import CLASSES, LUM_CODES, STEPS, SUBTYPES


@pytest.fixture(scope="module")
def model():
    return Classifier.load().model(4.6)


def test_the_fast_likelihood_is_the_dense_one(model):
    """Student's t of the distance under P C P' + W^-1, written out for a few nodes, against the k-dimensional form."""
    s = model.surface
    rng = np.random.default_rng(0)
    flat = s.spectrum(45.0, 5.0)[None] + rng.normal(0, 0.02, (1, len(PIXELS)))
    valid = np.ones(flat.shape, bool)
    valid[0, CORE[400:]] = False
    valid[0, CORE[300:330]] = False
    valid[0, CORE[800:]] = True
    sigma = np.full(flat.shape, 0.02)
    found = match(s, flat, valid, sigma)
    use = CORE[valid[0, CORE]]
    p, y = s.loadings[use], flat[0, use] - 1 - s.mean[use]
    noise = np.diag(s.floor[use] ** 2 + sigma[0, use] ** 2 / 2)
    z_free = np.linalg.solve(p.T @ np.linalg.solve(noise, p), p.T @ np.linalg.solve(noise, y))
    rest = (y - p @ z_free) @ np.linalg.solve(noise, y - p @ z_free)
    values = []
    for i, j in ((SUBTYPES.index("G5"), 7), (SUBTYPES.index("G0"), 5)):
        band = int(np.clip(np.searchsorted((-9.0, 14.0, 26.0, 37.0, 47.0, 56.0, 90.0), STEPS[i]) - 1, 0, 5))
        cov = p @ s.scatter[band] @ p.T + noise
        r = y - p @ s.nodes[i, j]
        far = r @ np.linalg.solve(cov, r) - rest
        dense = -0.5 * (TAIL + p.shape[1]) * np.log1p(far / TAIL) - 0.5 * np.linalg.slogdet(cov)[1]
        values.append((dense, found.log_like[0, i, j]))
    (dense_a, fast_a), (dense_b, fast_b) = values
    assert fast_a - fast_b == pytest.approx(dense_a - dense_b, rel=1e-3, abs=0.05)


def test_a_node_is_recognised_as_itself(model):
    s = model.surface
    for t, c in (("B5", 7), ("A2", 1), ("F5", 7), ("K2", 5), ("M4", 5)):
        i = SUBTYPES.index(t)
        flat = s.spectrum(STEPS[i], (0.6, *LUM_CODES[1:])[c])[None]
        found = match(s, flat, np.ones(flat.shape, bool), np.full(flat.shape, 0.003))
        best = np.unravel_index(found.log_like[0].argmax(), found.log_like[0].shape)
        assert abs(STEPS[best[0]] - STEPS[i]) <= 1.0


def test_noise_widens_what_is_known(model):
    flat = model.surface.spectrum(42.0, 5.0)[None]
    every = np.ones(flat.shape, bool)
    sharp, dull = (match(model.surface, flat, every, np.full(flat.shape, q)) for q in (0.003, 0.3))
    assert dull.noise_share[0] > 3 * sharp.noise_share[0]
    assert np.trace(dull.spread[0]) > 5 * np.trace(sharp.spread[0])


def test_regression_learns_a_function_and_its_error():
    rng = np.random.default_rng(2)
    x = rng.uniform(-2, 2, (400, 2))
    y = np.sin(x[:, 0]) + 0.3 * x[:, 1]
    r = fit(x, y + rng.normal(0, 0.05, 400), np.full(400, 0.05), components=2, with_variance=True, lengths=(0.5,),
            jitters=(0.02,))
    at = rng.uniform(-1.8, 1.8, (200, 2))
    value, sd = r.predict(at)
    assert np.abs(value - np.sin(at[:, 0]) - 0.3 * at[:, 1]).max() < 0.1
    assert np.all(sd < 0.2)
    far, far_sd = r.predict(np.array([[30.0, 30.0]]))
    assert far[0] == pytest.approx(y.mean(), abs=0.05) and far_sd[0] > 1.0


def test_spread_of_the_features_becomes_spread_of_the_answer():
    x = np.linspace(-3, 3, 200)[:, None]
    r = fit(x, 2 * x[:, 0], np.full(200, 0.01), components=1, lengths=(1.0,), jitters=(0.01,))
    _, sd = r.predict(np.array([[0.5]]), np.array([[[0.1 ** 2]]]))
    _, own = r.predict(np.array([[0.5]]))
    assert np.sqrt(sd[0] ** 2 - own[0] ** 2) == pytest.approx(0.2, rel=0.05)


def test_a_regressor_survives_storage():
    rng = np.random.default_rng(3)
    r = fit(rng.normal(size=(50, 3)), rng.normal(size=50), np.full(50, 0.1), components=3)
    again = Regressor.from_arrays(r.arrays("x"), "x")
    at = rng.normal(size=(5, 3))
    np.testing.assert_allclose(again.predict(at)[0], r.predict(at)[0])


def test_a_model_survives_storage(model, tmp_path):
    model.save(tmp_path / "m.npz")
    again = Model.load(tmp_path / "m.npz")
    assert again.blend.temper == model.blend.temper
    np.testing.assert_allclose(again.surface.nodes, model.surface.nodes, atol=1e-6)
    assert again.names.tolist() == model.names.tolist()


def test_weights_multiply_the_evidence():
    pieces = tuple(np.full((1, 2, 8), float(k)) for k in (1, 2, 3, 4, 5, 6))
    blend = Blend(0.1, 0.2, 0.3, 0.4, 0.5, np.zeros(8), 0.0)
    np.testing.assert_allclose(post.weigh(pieces, blend), 0.1 + 0.4 + 0.9 + 1.6 + 2.5 + 6.0)


def peaked(name: str, cls: str) -> np.ndarray:
    p = np.full((len(SUBTYPES), len(CLASSES)), 1e-9)
    p[SUBTYPES.index(name), CLASSES.index(cls)] = 1.0
    return p / p.sum()


def test_best_type_set_and_codes_of_a_sharp_posterior():
    p = peaked("K7", "V")
    assert post.best_type(p) == (SUBTYPES.index("K7"), CLASSES.index("V"))
    assert post.type_set(p, 0.9) == ("K7 V",)
    step, sd, lum, lum_sd = post.codes(p[None])
    assert step[0] == pytest.approx(56.0, abs=0.01) and sd[0] == pytest.approx(0.1, abs=0.02)
    assert lum[0] == pytest.approx(5.0, abs=0.01) and lum_sd[0] < 0.05


def test_supergiants_are_added_up_before_the_class_is_chosen():
    p = np.zeros((len(SUBTYPES), len(CLASSES)))
    i = SUBTYPES.index("F5")
    p[i, :4] = (0.1, 0.15, 0.2, 0.15)
    p[i, 5] = 0.3
    p[i, 7] = 0.1
    assert CLASSES[post.best_type(p)[1]] == "Iab"


def test_widening_keeps_the_sum_and_adds_spread():
    p = peaked("A5", "V")[None]
    wide = post.widen(p, 1.0)
    assert wide.sum() == pytest.approx(1.0)
    assert post.codes(wide)[1][0] == pytest.approx(1.0, rel=0.1)


def test_the_set_score_counts_the_mass_above():
    p = np.zeros((len(SUBTYPES), len(CLASSES)))
    p[40, 7], p[41, 7], p[42, 7] = 0.5, 0.3, 0.2
    assert post.set_score(p, 40, 7) == pytest.approx(0.25)
    assert post.set_score(p, 42, 7) == pytest.approx(0.9)
    assert len(post.type_set(p, 0.75)) == 2


def test_perturbed_spectra_differ_a_little_and_by_seed():
    from starfathom.classify.grid import WAVE

    flux = np.ones((2, len(WAVE))) * (1 - 0.4 * np.exp(-0.5 * ((WAVE - 5000) / 4) ** 2))
    valid = np.ones(flux.shape, bool)
    a, _ = perturb(flux, valid, np.random.default_rng(1))
    b, _ = perturb(flux, valid, np.random.default_rng(1))
    np.testing.assert_array_equal(a, b)
    assert 0.005 < np.std(a / flux - 1) < 0.05
