"""What library stars teach: colours, labels made steady, absolute magnitudes freed of dust, filled gaps."""

from __future__ import annotations

import numpy as np
import pytest

from starfathom.classify.training import fill_gaps, intrinsic_b_v, lessons_from, steady_steps
from starfathom.templates.library import Library
from starfathom.templates.subtypes import step_of

NAN = float("nan")


# (B-V)_0: dwarfs Pecaut & Mamajek 2013, ApJS 208, 9, Table 5; giants, Ib Schmidt-Kaler 1982, Landolt-Boernstein VI/2b
@pytest.mark.parametrize(("t_code", "lum_code", "published"), [
    (10, 5.0, -0.301), (42, 5.0, 0.650), (10, 3.0, -0.29), (11, 3.0, -0.26), (10, 1.6, -0.24), (12, 1.6, -0.18)])
def test_intrinsic_colours_are_the_published_ones(t_code, lum_code, published):
    assert intrinsic_b_v(step_of([t_code]), np.array([lum_code]))[0] == pytest.approx(published, abs=0.011)


def test_colours_are_linear_between_the_classes():
    step = step_of([50.0])
    ib, ii, iii, iv, v, v_plus = (float(intrinsic_b_v(step, np.array([c]))[0]) for c in (1.6, 2.3, 3.0, 4.0, 5.0, 6.0))
    assert ii == pytest.approx((ib + iii) / 2) and iv == pytest.approx((iii + v) / 2)
    assert v_plus == v
    assert float(intrinsic_b_v(step, np.array([1.0]))[0]) == ib


def sequence(n: int = 200) -> tuple[np.ndarray, np.ndarray, np.ndarray, np.ndarray]:
    """Dwarfs of solar metallicity whose temperature is a smooth function of the step."""
    step = np.linspace(30.0, 52.0, n)
    return step, 10 ** (3.9 - 0.009 * (step - 30.0)), np.full(n, 4.3), np.zeros(n)


def test_a_label_at_odds_with_its_temperature_is_drawn_back_but_keeps_three_tenths():
    step, teff, log_g, fe_h = sequence()
    wrong = step.copy()
    wrong[100] += 6.0
    out = steady_steps(wrong, teff, log_g, fe_h, np.ones(len(step), bool))
    assert out[100] == pytest.approx(step[100] + 0.3 * 6.0, abs=0.25)
    others = np.delete(np.arange(len(step)), [98, 99, 100, 101, 102])
    assert np.abs(out - step)[others].max() < 0.25


def test_labels_stand_where_types_are_better_than_parameters():
    step, teff, log_g, fe_h = sequence()
    step = step + np.random.default_rng(1).normal(0, 1.0, len(step))
    step[0], step[-1], step[50] = 18.0, 57.0, 40.0
    teff[50] = NAN
    unused = np.ones(len(step), bool)
    unused[60] = False
    out = steady_steps(step, teff, log_g, fe_h, unused)
    for i in (0, -1, 50, 60):
        assert out[i] == step[i]
    # with fewer than sixty stars there is no function to draw towards
    few = np.arange(len(step)) < 59
    np.testing.assert_array_equal(steady_steps(step, teff, log_g, fe_h, few), step)


def library(**columns: object) -> Library:
    """A library of catalogue rows alone: a solar twin at 10 pc, changed as told."""
    row = {"star": "twin", "library": "own", "kind": "normal", "doubtful": False, "hip": 0, "t_code": 42.0,
           "lum_code": 5.0, "teff_k": 5772.0, "log_g": 4.44, "fe_h": 0.0, "b_v": 0.65, "v_mag": 4.83,
           "parallax_mas": 100.0, "e_parallax_mas": 1.0, **columns}
    n = max(len(v) if isinstance(v, list) else 1 for v in row.values())
    catalogue = {k: np.array(v if isinstance(v, list) else [v] * n) for k, v in row.items()}
    return Library(np.ones(1), np.ones((n, 1), np.float32), np.ones((n, 1), bool), catalogue)


def test_absolute_magnitude_is_pogson_and_its_error_that_of_the_parallax():
    found = lessons_from(library())
    assert found.abs_mag_v[0] == pytest.approx(4.83)                      # at 10 pc, by definition
    # d(5 log10 p) = 5 / ln 10 dp / p, and 0.03 mag of photometry
    assert found.abs_mag_v_err[0] == pytest.approx(np.hypot(5 / np.log(10) * 0.01, 0.03), rel=1e-3)
    assert found.trust[0] == 1.0 and found.step[0] == 42.0


def test_dust_is_taken_out_beyond_seventy_parsec_only():
    near, far, bluer = lessons_from(library(
        parallax_mas=[1000 / 60.0, 1000 / 80.0, 1000 / 80.0], e_parallax_mas=[0.1] * 3, b_v=[0.75, 0.75, 0.60],
        v_mag=[8.0, 8.0, 8.0])).abs_mag_v
    excess = 0.75 - float(intrinsic_b_v(np.array([42.0]), np.array([5.0]))[0])
    assert near == pytest.approx(8.0 + 5 * np.log10(1 / 6.0))
    assert far == pytest.approx(8.0 + 5 * np.log10(1 / 8.0) - 3.1 * excess)      # R_V 3.1
    assert bluer == pytest.approx(8.0 + 5 * np.log10(1 / 8.0)), "no star is dereddened to the red"


def test_a_poor_or_missing_parallax_teaches_no_magnitude():
    found = lessons_from(library(parallax_mas=[10.0, 10.0, -3.0, NAN], e_parallax_mas=[1.4, 1.6, 1.0, NAN]))
    assert np.isfinite(found.abs_mag_v).tolist() == [True, False, False, False]


def test_labels_that_gravity_contradicts_are_not_used():
    found = lessons_from(library(
        t_code=[50.0, 50.0, 50.0, 50.0, 15.0, 15.0], lum_code=[5.0, 5.0, 3.0, 3.0, 5.0, 5.0],
        log_g=[2.9, 3.1, 4.4, 4.3, 5.0, 4.8]))
    assert found.trust.tolist() == [0.0, 1.0, 0.0, 1.0, 0.0, 1.0]
    assert lessons_from(library(log_g=[2.0]), vetted=False).trust.tolist() == [1.0]


def test_kinds_and_doubts_weigh():
    found = lessons_from(library(
        kind=["normal", "normal", "emission", "emission", "composite"], doubtful=[False, True, False, False, False],
        t_code=[42.0, 42.0, 22.0, 40.0, 42.0], log_g=[NAN] * 5))
    assert found.trust.tolist() == [1.0, 0.5, 1.0, 0.0, 0.0]


def test_one_star_in_two_libraries_is_one_group():
    found = lessons_from(library(star=["a", "b", "c", "d"], hip=[71683, 71683, 0, 0]))
    assert found.group[0] == found.group[1] != found.group[2]
    assert found.group[2] != found.group[3]


def test_gaps_are_filled_from_stars_of_like_type():
    rng = np.random.default_rng(0)
    step = np.repeat([20.0, 45.0], 30)
    flat = np.where(step[:, None] < 30, 0.5, 0.9) + rng.normal(0, 0.001, (60, 5))
    valid = np.ones(flat.shape, bool)
    valid[3, 2] = valid[50, 4] = False
    spoiled = np.where(valid, flat, 77.0)
    out = fill_gaps(spoiled, valid, step, np.full(60, 5.0))
    assert out[3, 2] == pytest.approx(0.5, abs=0.002) and out[50, 4] == pytest.approx(0.9, abs=0.002)
    np.testing.assert_array_equal(out[valid], flat[valid])
    whole = np.ones(flat.shape, bool)
    assert fill_gaps(flat, whole, step, np.full(60, 5.0)) is flat


def test_a_gap_is_filled_by_the_distance_in_type_and_class():
    """Two neighbours, weights exp(-dstep^2 / 2 2^2 - dclass^2 / 2 0.7^2), written out."""
    step, lum = np.array([40.0, 42.0, 40.0]), np.array([5.0, 5.0, 4.3])
    flat = np.array([[9.0], [0.6], [0.8]])
    out = fill_gaps(flat, np.array([[False], [True], [True]]), step, lum)
    assert out[0, 0] == pytest.approx(0.7, abs=1e-4), "one scale off in either coordinate weighs alike"
    lone = fill_gaps(flat, np.array([[False], [True], [True]]), np.array([40.0, 44.0, 40.0]), np.array([5.0, 5.0, 5.0]))
    assert lone[0, 0] == pytest.approx((0.6 * np.exp(-2.0) + 0.8) / (np.exp(-2.0) + 1), abs=1e-4)
