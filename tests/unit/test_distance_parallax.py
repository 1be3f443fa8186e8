"""Parallax: checks, tension, meaning, and the Gaia zero point through its public package."""

import sys

import numpy as np
import pytest

from starfathom.classify.errors import RequestError
from starfathom.distance import fathom
from starfathom.distance.parallax import GAIA_INPUTS, gaia_zero_point_mas, meaning, tension

GAIA = {
    "phot_g_mean_mag": 13.0,
    "nu_eff_used_in_astrometry": 1.5,
    "pseudocolour": np.nan,
    "ecl_lat": 20.0,
    "astrometric_params_solved": 31,
}


def test_tension_by_hand():
    # samples of parallax 10 +- 1 mas, Gaussian; measured 13 +- 0.5: (10 - 13)/sqrt(1 + 0.25)
    rng = np.random.default_rng(0)
    samples = 1000.0 / (10.0 + rng.standard_normal(200_000))
    sigma, per_cent = tension(samples, (13.0, 0.5))
    assert sigma == pytest.approx(-3 / np.sqrt(1.25), abs=0.03)
    assert per_cent == pytest.approx(100 * (10 / 13 - 1), abs=0.1)
    sigma, per_cent = tension(samples, (8.0, 0.5))
    assert sigma == pytest.approx(2 / np.sqrt(1.25), abs=0.03)
    assert per_cent == pytest.approx(25.0, abs=0.2)


def test_tension_uses_the_side_that_faces_the_parallax():
    # skew samples: the wide side reaches down to small parallaxes
    samples = 1000.0 / np.concatenate([np.linspace(4, 10, 5000), np.linspace(10, 11, 5000)])
    low, _ = tension(samples, (5.0, 0.001))
    high, _ = tension(samples, (15.0, 0.001))
    p = np.percentile(1000 / samples, [16, 50, 84])
    assert low == pytest.approx((p[1] - 5) / (p[1] - p[0]), rel=1e-3)
    assert high == pytest.approx((p[1] - 15) / (p[2] - p[1]), rel=1e-3)


def test_no_per_cent_from_a_poor_parallax():
    samples = np.full(100, 100.0) + np.linspace(-1, 1, 100)
    assert np.isnan(tension(samples, (2.9, 1.0))[1])
    assert np.isfinite(tension(samples, (3.1, 1.0))[1])
    assert np.isfinite(tension(samples, (-1.0, 1.0))[0])


def test_meaning():
    assert meaning(2.4, 10.0) == "" and meaning(-2.4, 10.0) == ""
    assert "farther by 3.0 sigma (40 % farther)" in meaning(3.0, 40.0)
    assert "less luminous" in meaning(-3.0, -30.0) and "30 % nearer" in meaning(-3.0, -30.0)
    assert "%" not in meaning(3.0, float("nan"))


def test_gaia_zero_point():
    zero_point = pytest.importorskip("zero_point")
    value = gaia_zero_point_mas(GAIA)
    # Lindegren et al. 2021: between -0.1 and +0.02 mas everywhere, about -0.02 to -0.05 at this magnitude
    assert -0.06 < value < 0.0
    zero_point.zpt.load_tables()
    one = [np.atleast_1d(GAIA[k]) for k in GAIA_INPUTS]
    assert value == pytest.approx(float(zero_point.zpt.get_zpt(*one)[0]))
    plain = fathom("G2 V", {"V": 13.0, "B": 13.7}, parallax=(2.0, 0.02))
    shifted = fathom("G2 V", {"V": 13.0, "B": 13.7}, parallax=(2.0, 0.02), gaia=GAIA)
    # a negative zero point makes the parallax larger, the star nearer
    assert shifted.parallax_percent < plain.parallax_percent
    ratio = (1 + shifted.parallax_percent / 100) / (1 + plain.parallax_percent / 100)
    assert ratio == pytest.approx(2.0 / (2.0 - value), rel=1e-6)


def test_gaia_zero_point_refusals(monkeypatch):
    with pytest.raises(RequestError, match="ecl_lat"):
        gaia_zero_point_mas({k: v for k, v in GAIA.items() if k != "ecl_lat"})
    pytest.importorskip("zero_point")
    with pytest.raises(RequestError, match="Gaia zero point"):
        gaia_zero_point_mas({**GAIA, "phot_g_mean_mag": 2.0})
    with pytest.raises(RequestError, match="Gaia zero point"):
        gaia_zero_point_mas({**GAIA, "astrometric_params_solved": 7})
    with pytest.raises(RequestError, match="Gaia zero point"):
        gaia_zero_point_mas({**GAIA, "phot_g_mean_mag": "bright"})
    monkeypatch.setitem(sys.modules, "zero_point", None)
    with pytest.raises(RequestError, match=r"\[gaia\]"):
        gaia_zero_point_mas(GAIA)
