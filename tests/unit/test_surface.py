"""The template surface on made-up stars whose truth is known."""

from __future__ import annotations

import numpy as np
import pytest

from starfathom.classify.grid import WAVE
from starfathom.classify.surface import (
    BANDS,
    CLASS_AT,
    CORE,
    FLOOR,
    PIXELS,
    TAIL,
    WIDE,
    Surface,
    class_index,
    fit_surface,
    local_linear,
    match,
)
from starfathom.templates.subtypes import CLASSES, STEPS, SUBTYPES

W = WAVE[PIXELS]
G2, V = SUBTYPES.index("G2"), CLASSES.index("V")


def plane(a: float = 0.02, b: float = -0.3) -> Surface:
    """A surface of one component that is linear in step and class."""
    nodes = (a * STEPS[:, None] + b * CLASS_AT)[..., None]
    return Surface(np.zeros(len(PIXELS)), np.ones((len(PIXELS), 1)), np.full(len(PIXELS), FLOOR), nodes,
                   np.ones(nodes.shape[:2]), np.tile(np.eye(1), (len(BANDS) - 1, 1, 1)))


def test_between_nodes_it_is_linear_and_outside_it_ends():
    s = plane()
    step, lum = np.array([20.3, 41.77, 55.5, 3.1]), np.array([5.0, 3.4, 1.45, 2.2])
    np.testing.assert_allclose(s.components_at(step, lum)[:, 0], 0.02 * step - 0.3 * lum, rtol=1e-9)
    np.testing.assert_allclose(s.components_at(np.array([99.0]), np.array([9.0]))[0, 0], 0.02 * STEPS[-1] - 1.5)
    np.testing.assert_allclose(s.spectrum(30.0, 4.0), 1 + 0.6 - 1.2)


def test_pixels_of_the_core_and_of_the_wide_match():
    assert 3640 < W.min() < 3642 and 7388 < W.max() < 7390
    assert 3700 < W[CORE].min() < 3703 and 6797 < W[CORE].max() < 6800
    assert 7330 < W[WIDE].max() < 7390
    assert not ((W[CORE] > 5862) & (W[CORE] < 5918)).any(), "interstellar sodium"
    # every second pixel of 60 km/s
    assert np.median(np.diff(W[CORE]) / W[CORE][:-1]) * 299792.458 == pytest.approx(120.0, abs=0.2)


@pytest.mark.parametrize(("along", "width"), [("step", 1.2), ("class", 0.5)])
def test_a_node_is_the_kernel_weighted_mean(along, width):
    """Ten stars on a node and five on either side, one kernel width off: weights 1 and exp(-1/2), slopes cancel."""
    off = np.repeat([0.0, -width, width], [10, 5, 5])
    value = (off != 0).astype(float)[:, None]
    step = np.full(20, 42.0) + (off if along == "step" else 0)
    lum = np.full(20, 3.0) + (off if along == "class" else 0)
    nodes, _ = local_linear(value, step, lum, np.ones(20))
    e = np.exp(-0.5)
    assert nodes[G2, CLASSES.index("III"), 0] == pytest.approx(e / (1 + e), rel=1e-4)


def test_where_stars_are_few_the_kernel_widens():
    """Three stars never reach the six wanted: the kernel ends 1.3^8 times as wide."""
    nodes, _ = local_linear(np.array([[0.0], [1.0], [1.0]]), np.array([42.0, 39.0, 45.0]), np.full(3, 5.0), np.ones(3))
    e = np.exp(-0.5 * (3 / (1.2 * 1.3 ** 8)) ** 2)
    assert nodes[G2, V, 0] == pytest.approx(2 * e / (1 + 2 * e), rel=1e-4)
    # six on the spot and the far ones count for nothing
    nodes, _ = local_linear(np.array([[0.0]] * 6 + [[1.0]] * 2), np.array([42.0] * 6 + [36.0, 48.0]), np.full(8, 5.0),
                            np.ones(8))
    assert abs(nodes[G2, V, 0]) < 1e-4


def test_a_slope_is_followed_beyond_the_stars_but_pulled_towards_none():
    step = np.linspace(40, 44, 41)
    nodes, _ = local_linear(0.1 * (step - 42)[:, None], step, np.full(41, 5.0), np.ones(41))
    at = np.flatnonzero(STEPS == 43.0)[0]
    assert 0.0 < nodes[at, V, 0] < 0.1
    assert nodes[G2, V, 0] == pytest.approx(0.0, abs=1e-9)


def test_support_counts_the_stars_nearby():
    """Effective number: exp(-ds^2 / 2 1.5^2 - dl^2 / 2 0.7^2) summed."""
    _, support = local_linear(np.zeros((3, 1)), np.array([42.0, 43.5, 42.0]), np.array([5.0, 5.0, 4.3]), np.ones(3))
    assert support[G2, V] == pytest.approx(1 + 2 * np.exp(-0.5))


def stars(n: int = 240, seed: int = 3) -> tuple[np.ndarray, np.ndarray, np.ndarray, np.ndarray]:
    """Flat spectra with one line that goes with the step and one with the class, and one that wanders by 0.03."""
    rng = np.random.default_rng(seed)
    step, lum = rng.uniform(27, 46, n), rng.choice([3.0, 4.0, 5.0], n)
    own = rng.normal(0, 0.03, n)
    lines = [np.exp(-0.5 * ((W - c) / 6.0) ** 2) for c in (4300.0, 4861.0, 5175.0)]
    depths = np.column_stack([0.02 * (step - 27), 0.1 * lum - 0.2, own])
    flat = 1 - depths @ np.array(lines)
    return flat + rng.normal(0, 0.002, flat.shape), step, lum, own


def test_a_fitted_surface_gives_back_the_lines_and_the_scatter():
    flat, step, lum, own = stars()
    surface, z = fit_surface(flat, step, lum, np.ones(len(step)), components=6)
    at = [int(np.argmin(np.abs(W - c))) for c in (4300.0, 4861.0, 5175.0)]
    for s, c in ((32.0, 5.0), (38.0, 3.0), (42.0, 4.0)):
        got = 1 - surface.spectrum(s, c)[at]
        assert got == pytest.approx([0.02 * (s - 27), 0.1 * c - 0.2, 0.0], abs=0.02)
    # what real stars do about the mean: the wandering line, and next to nothing in the one of the class. Stars weigh
    # 1 / (1 + (d / 3)^2) by their squared distance d in medians, which makes the spread of a normal variable smaller.
    band = int(np.searchsorted(BANDS, 40.0)) - 1
    p = surface.loadings[at]
    sd = np.sqrt(np.diag(p @ surface.scatter[band] @ p.T))
    weight = 1 / (1 + (own ** 2 / np.median(own ** 2) / 3) ** 2)
    assert sd[2] == pytest.approx(np.sqrt((weight * own ** 2).sum() / weight.sum()), rel=0.15)
    assert sd[1] < 0.015
    assert z.shape == (len(step), 6)
    assert np.allclose(surface.floor[CORE], 0.008)


def test_one_wrong_label_hardly_moves_the_surface():
    flat, step, lum, _ = stars()
    good, _ = fit_surface(flat, step, lum, np.ones(len(step)), components=6)
    wrong = step.copy()
    i = int(np.argmin(np.abs(step - 30.0)))
    wrong[i] = 44.0
    bad, _ = fit_surface(flat, wrong, lum, np.ones(len(step)), components=6)
    at = int(np.argmin(np.abs(W - 4300.0)))
    assert bad.spectrum(44.0, lum[i])[at] == pytest.approx(good.spectrum(44.0, lum[i])[at], abs=0.02)
    none = np.where(np.arange(len(step)) == i, 0.0, 1.0)
    trusted, _ = fit_surface(flat, wrong, lum, none, components=6)
    assert trusted.spectrum(44.0, lum[i])[at] == pytest.approx(good.spectrum(44.0, lum[i])[at], abs=0.006)


def test_a_noisy_star_is_matched_within_its_noise_and_the_fit_is_good():
    flat, step, lum, _ = stars()
    surface, _ = fit_surface(flat, step, lum, np.ones(len(step)), components=6)
    rng = np.random.default_rng(8)
    noisy = np.tile(surface.spectrum(38.0, 5.0), (40, 1)) + rng.normal(0, 0.05, (40, len(W)))
    every = np.ones(noisy.shape, bool)
    # sigma is per 60 km/s pixel of white noise after the pairs the match takes: 0.05 a matched pixel is 0.0707
    found = match(surface, noisy, every, np.full(noisy.shape, 0.05 * np.sqrt(2.0)))
    assert found.chi2.mean() == pytest.approx(1.0, abs=0.05)
    assert np.all((found.noise_share > 0) & (found.noise_share <= 1))
    assert found.level.shape == noisy.shape
    half = every.copy()
    half[:, CORE[: len(CORE) // 2]] = False
    partly = match(surface, noisy, half, np.full(noisy.shape, 0.05 * np.sqrt(2.0)))
    assert partly.chi2.mean() == pytest.approx(1.0, abs=0.07)
    assert np.trace(partly.spread.mean(axis=0)) > np.trace(found.spread.mean(axis=0))


def test_what_masked_pixels_hold_does_not_matter():
    flat, step, lum, _ = stars(120)
    surface, _ = fit_surface(flat, step, lum, np.ones(len(step)), components=6)
    valid = np.ones((1, len(W)), bool)
    valid[0, 300:420] = False
    spoiled = flat[:1].copy()
    spoiled[0, 300:420] = 55.0
    sigma = np.full((1, len(W)), 0.01)
    a, b = match(surface, flat[:1], valid, sigma), match(surface, spoiled, valid, sigma)
    np.testing.assert_allclose(a.log_like, b.log_like)
    np.testing.assert_allclose(a.components, b.components)


@pytest.mark.parametrize(("lum_code", "name"), [(0.4, "Ia0"), (1.2, "Iab"), (2.4, "II"), (3.6, "IV"), (5.5, "V")])
def test_the_nearest_class(lum_code, name):
    assert CLASSES[class_index(lum_code)] == name


def test_shrinking_takes_from_what_components_share_and_nothing_from_their_own():
    flat, step, lum, _ = stars()
    none, some, whole = (fit_surface(flat, step, lum, np.ones(len(step)), components=4, shrink=s)[0].scatter[2]
                         for s in (0.0, 0.3, 1.0))
    own = np.eye(4, dtype=bool)
    np.testing.assert_allclose(some[own], none[own])
    np.testing.assert_allclose(whole[own], none[own])
    np.testing.assert_allclose(some[~own], 0.7 * none[~own], atol=1e-12)
    np.testing.assert_allclose(whole[~own], 0.0, atol=1e-12)
    # and 2 per cent of the mean variance are added to every direction
    assert np.linalg.eigvalsh(none).min() >= 0.02 * np.trace(none) / 1.02 / 4 * (1 - 1e-9)


def test_types_of_different_scatter_are_weighed_by_their_determinants():
    """Student's t with one component, written out with its normalisation, for nodes in two temperature bands."""
    bands = np.array([0.1, 0.1, 0.1, 0.1, 0.9, 0.9])[:, None, None]
    base = plane(0.001, 0.0)
    k_loadings = np.where(np.arange(len(PIXELS)) % 3 == 0, 1.0, -0.4)[:, None]
    s = Surface(base.mean, k_loadings, base.floor, base.nodes, base.support, bands)
    flat = 1 + 0.046 * k_loadings.T
    sigma = np.full(flat.shape, 0.3)
    found = match(s, flat, np.ones(flat.shape, bool), sigma).log_like[0, :, V]
    p = k_loadings[CORE, 0]
    noise = FLOOR ** 2 + 0.3 ** 2 / 2
    information = (p ** 2).sum() / noise
    values = []
    for name, scatter in (("G5", 0.1), ("K2", 0.9)):
        off = 0.046 - 0.001 * STEPS[SUBTYPES.index(name)]
        quad = off ** 2 / (scatter + 1 / information)
        determinant = np.log(scatter) + np.log(1 / scatter + information)
        values.append(-0.5 * (TAIL + 1) * np.log1p(quad / TAIL) - 0.5 * determinant)
    got = found[SUBTYPES.index("G5")] - found[SUBTYPES.index("K2")]
    assert got == pytest.approx(values[0] - values[1], rel=1e-3)
