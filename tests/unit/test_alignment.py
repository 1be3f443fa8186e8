"""Velocity, wander and line spread, on template nodes moved and blurred by known amounts."""

from __future__ import annotations

import numpy as np
import pytest

from starfathom.classify.alignment import LADDER, first_velocity, parabola, telluric_free, wander
from starfathom.classify.engine import Classifier
from starfathom.classify.grid import LN_STEP, WAVE, blur, rectify
from starfathom.classify.linespread import line_spread
from starfathom.templates.library import GRID_KMS, LIGHT_KMS

LN_WAVE = np.log(WAVE)


@pytest.fixture(scope="module")
def nodes():
    return Classifier.load().nodes


def node_near(nodes, step: float, lum_code: float) -> int:
    return int(np.argmin(np.abs(nodes.step - step) + 3 * np.abs(nodes.lum_code - lum_code)))


def moved(nodes, k: int, velocity_kms, rung: int = 3) -> np.ndarray:
    """Rectified spectrum of node ``k`` receding at ``velocity_kms`` (a number, or one a pixel), (1, m)."""
    return 1 + np.interp(LN_WAVE - np.log1p(np.asarray(velocity_kms) / LIGHT_KMS), LN_WAVE, nodes.rect[rung, k])[None]


def test_sodium_and_the_telluric_bands_are_kept_out_and_stellar_lines_in():
    # Na D 5890, 5896 (interstellar); the O2 B band from 6867; H2O 7160 to 7330. And H alpha, Mg b, Ca I 6162.
    out = np.array([5889.95, 5895.92, 6867.2, 6884.0, 6920.0, 7170.0, 7250.0, 7320.0])
    kept = np.array([6562.8, 5183.6, 6162.2, 5780.0, 5950.0, 6820.0, 6980.0, 7120.0, 7345.0])
    assert not telluric_free(out).any()
    assert telluric_free(kept).all()


def test_a_parabola_is_found_exactly():
    axis = np.arange(-7, 8) * 120.0
    for place, stiff in ((37.0, 2e-4), (-222.0, 5e-3), (700.0, 1.0)):
        at, bend = parabola((stiff * (axis - place) ** 2 + 3.0)[None], axis)
        assert at[0] == pytest.approx(place, abs=1e-6)
        assert bend[0] == pytest.approx(2 * stiff * 120.0 ** 2)


def test_a_minimum_on_the_border_stays_within_a_step_of_it():
    axis = np.arange(5.0)
    at, _ = parabola(np.array([[0.0, 1.0, 2.0, 3.0, 4.0], [4.0, 3.0, 2.0, 1.0, 0.0]]), axis)
    np.testing.assert_allclose(at, [0.0, 4.0])


@pytest.mark.parametrize("velocity", [-650.0, -240.0, 30.0, 95.0, 410.0])
@pytest.mark.parametrize("label", [(12.0, 5.0), (32.0, 5.0), (50.0, 3.0), (60.0, 5.0)])
def test_the_velocity_of_a_moved_node_is_found(nodes, velocity, label):
    k = node_near(nodes, *label)
    flat = moved(nodes, k, velocity)
    valid = np.broadcast_to(nodes.valid, flat.shape)
    found, scatter, best, unexplained = first_velocity(flat, valid, nodes)
    assert found[0] == pytest.approx(velocity, abs=12.0)
    assert k in best[0]
    assert scatter[0] < 60.0
    assert unexplained[0] < 0.05


def test_line_depth_is_no_matter_for_the_velocity(nodes):
    """Amplitudes from 0.4 to 1.6 are fitted away: shallow lines (scattered light) are explained as well as deep."""
    k = node_near(nodes, 42.0, 5.0)
    flat = moved(nodes, k, 120.0)
    valid = np.broadcast_to(nodes.valid, flat.shape)
    for depth in (0.45, 1.5):
        found, _, best, unexplained = first_velocity(1 + depth * (flat - 1), valid, nodes)
        assert found[0] == pytest.approx(120.0, abs=12.0)
        assert k in best[0] and unexplained[0] < 0.03
    # one that is beyond is not explained whole: least squares leaves (1 - 1.6 / 3)^2 of the power and more
    assert first_velocity(1 + 3.0 * (flat - 1), valid, nodes)[3][0] > 0.15


def test_the_search_ends_at_840_kilometres_a_second(nodes):
    k = node_near(nodes, 50.0, 3.0)
    for sign in (-1, 1):
        flat = moved(nodes, k, sign * 960.0)
        found = first_velocity(flat, np.broadcast_to(nodes.valid, flat.shape), nodes)[0]
        assert abs(found[0]) <= 840.0


def test_noise_is_not_explained_by_any_node(nodes):
    flat = 1 + np.random.default_rng(5).normal(0, 0.2, (1, len(WAVE)))
    *_, unexplained = first_velocity(flat, np.broadcast_to(nodes.valid, flat.shape), nodes)
    assert unexplained[0] > 0.9


def test_masked_pixels_have_no_say_in_the_velocity(nodes):
    k = node_near(nodes, 48.0, 3.0)
    flat = moved(nodes, k, 60.0)
    valid = np.broadcast_to(nodes.valid, flat.shape).copy()
    valid[0, 900:1100] = False
    spoiled = flat.copy()
    spoiled[0, 900:1100] = 40.0
    for a, b in zip(first_velocity(flat, valid, nodes), first_velocity(spoiled, valid, nodes)):
        np.testing.assert_array_equal(a, b)


def test_a_bent_wavelength_scale_is_straightened(nodes):
    k = node_near(nodes, 50.0, 3.0)
    bend = 35.0 * np.sin((LN_WAVE - np.log(3800.0)) / np.log(7100.0 / 3800.0) * np.pi) - 10.0
    flat = moved(nodes, k, bend, rung=2)
    valid = np.broadcast_to(nodes.valid, flat.shape)
    curve, error = wander(flat, valid, np.full((1, 5), k), np.array([LADDER[2]]), nodes)
    inside = (WAVE > 3900) & (WAVE < 7000)
    assert np.abs(curve[0] - bend)[inside].max() < 12.0
    assert np.abs(curve[0] - bend)[inside].mean() < 4.0
    # nothing but the floor of 8 km/s a chunk is left, and there are nine chunks or, in short nodes, eight
    assert 8.0 / 3 - 0.02 < error[0] < 8.0 / np.sqrt(7)


def test_without_information_the_scale_is_taken_as_straight(nodes):
    flat = np.full((1, len(WAVE)), 1.3)
    curve, error = wander(flat, np.zeros(flat.shape, bool), np.zeros((1, 5), int), np.array([5.0]), nodes)
    np.testing.assert_allclose(curve, 0.0)
    assert error[0] > 1e3


def test_a_chunk_the_star_does_not_reach_follows_its_neighbours(nodes):
    """Prior of the wander: 20 km/s over 0.12 in ln(wavelength) on a common 25 km/s, all that is left far away."""
    k = node_near(nodes, 50.0, 3.0)
    flat = moved(nodes, k, 50.0, rung=2)
    valid = np.broadcast_to(nodes.valid & (WAVE < 4800), flat.shape)
    curve, _ = wander(flat, valid, np.full((1, 5), k), np.array([LADDER[2]]), nodes)
    at = np.interp([4050.0, 4300.0, 7100.0], WAVE, curve[0])
    assert at[:2] == pytest.approx([50.0, 50.0], abs=5.0)
    measured, far = np.log([3800.0, 4050.0, 4300.0, 4600.0]), np.log(7100.0)

    def prior(a, b):
        return 20.0 ** 2 * np.exp(-0.5 * ((a - b) / 0.12) ** 2) + 25.0 ** 2

    noise = np.eye(4) * 8.0 ** 2
    expected = prior(far, measured) @ np.linalg.solve(prior(measured[:, None], measured) + noise, np.full(4, 50.0))
    assert at[2] == pytest.approx(expected, abs=1.5)


@pytest.mark.parametrize("fwhm", [3.6, 5.7, 9.0, 14.0])
@pytest.mark.parametrize("label", [(30.0, 5.0), (45.0, 5.0), (53.0, 3.0)])
def test_the_blur_of_a_node_is_found(nodes, fwhm, label):
    k = node_near(nodes, *label)
    valid = np.broadcast_to(nodes.valid, (1, len(WAVE)))
    flux, ok = blur(1.0 + nodes.rect[0, k].astype(float)[None], valid, float(np.sqrt(fwhm ** 2 - LADDER[0] ** 2)))
    flat, _ = rectify(flux, ok)
    found = line_spread(flux, flat, ok, np.full((1, 5), k), nodes, np.array([fwhm / 2.7]))
    assert found[0] == pytest.approx(fwhm, rel=0.06)
    # the prior is broad: half the sampling moves it little in a star with lines
    again = line_spread(flux, flat, ok, np.full((1, 5), k), nodes, np.array([fwhm / 5.4]))
    assert again[0] == pytest.approx(fwhm, rel=0.10)


def test_sharper_than_the_nodes_is_found_too(nodes):
    """Nodes one rung up stand for the star: what is as fine as the finest node gives the nodes' own width."""
    k = node_near(nodes, 50.0, 3.0)
    flux = 1.0 + nodes.rect[0, k].astype(float)[None]
    valid = np.broadcast_to(nodes.valid, flux.shape)
    flat, _ = rectify(flux, valid)
    found = line_spread(flux, flat, valid, np.full((1, 5), k), nodes, np.array([3.2 / 2.7]))
    assert found[0] == pytest.approx(3.2, rel=0.08)


@pytest.mark.parametrize("pixel", [2.0, 3.0])
def test_without_lines_the_sampling_decides(nodes, pixel):
    """2.7 pixels a resolution element: all there is to go by where no pixel is valid."""
    k = node_near(nodes, 42.0, 5.0)
    flat = np.ones((1, len(WAVE)))
    found = line_spread(flat, flat, np.zeros(flat.shape, bool), np.full((1, 5), k), nodes, np.array([pixel]))
    assert found[0] == pytest.approx(2.7 * pixel, rel=0.03)


def test_balmer_wings_of_hot_stars_tell_nothing_of_the_instrument(nodes):
    """A hot star with its Balmer lines twice as deep has the same line spread."""
    k = node_near(nodes, 18.0, 5.0)
    flat = 1.0 + nodes.rect[4, k].astype(float)[None]
    deep = flat.copy()
    for centre in (3970.1, 4101.7, 4340.5, 4861.3, 6562.8):
        deep[:, np.abs(WAVE - centre) < 44.0] *= 0.8
    valid = np.broadcast_to(nodes.valid, flat.shape)
    a, b = (line_spread(f, f, valid, np.full((1, 5), k), nodes, np.array([3.0])) for f in (flat, deep))
    assert a[0] == b[0]
    assert a[0] == pytest.approx(8.0, rel=0.15)


def test_the_grid_step_is_sixty_kilometres_a_second():
    assert np.diff(LN_WAVE).mean() == pytest.approx(np.log1p(60.0 / 299792.458), rel=1e-9)
    assert LN_STEP == pytest.approx(np.log1p(GRID_KMS / LIGHT_KMS), rel=1e-12)


def test_chunks_of_the_wander_follow_one_another_and_overlap():
    from starfathom.classify.alignment import _CHUNKS, _HALF_WIDTHS

    assert np.all(np.diff(_CHUNKS) > 0), "interpolation between them needs them in order"
    assert np.all(_CHUNKS[1:] - _HALF_WIDTHS[1:] < _CHUNKS[:-1] + _HALF_WIDTHS[:-1])
    # steps in ln(wavelength) are shorter than the length over which the scale is taken to bend
    assert np.all(np.diff(np.log(_CHUNKS)) < 0.12)
