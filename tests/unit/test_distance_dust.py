"""The dust prior, the priors on distance, and companions."""

import numpy as np
import pytest

from starfathom.classify.errors import RequestError
from starfathom.distance import binaries, dust, priors


def test_galactic_latitude():
    # the pole of the Galaxy, the Galactic centre (17h45.6m, -28.94), and Vega (b = +19.2)
    assert dust.galactic_latitude_sine(192.85948, 27.12825) == pytest.approx(1.0)
    assert dust.galactic_latitude_sine(266.405, -28.936) == pytest.approx(0.0, abs=2e-3)
    assert dust.galactic_latitude_sine(279.2347, 38.7837) == pytest.approx(np.sin(np.radians(19.24)), abs=2e-3)
    # the southern pole counts the same
    assert dust.galactic_latitude_sine(12.85948, -27.12825) == pytest.approx(1.0)


def test_smooth_layer_by_hand():
    # 1 kpc at |sin b| = 0.25: path 125/0.25 (1 - e^-2) = 432.3 pc, all but outside the bubble
    assert dust.mean_smooth(1000.0, 0.25) == pytest.approx(0.28e-3 * 432.33 + 0.001, rel=1e-3)
    # 80 pc: 1 - exp(-(80/120)^2) = 0.3588
    path = 500 * (1 - np.exp(-80 * 0.25 / 125))
    assert dust.mean_smooth(80.0, 0.25) == pytest.approx(0.28e-3 * path * (0.1 + 0.9 * 0.35882) + 0.001, rel=1e-4)
    assert dust.smooth_width(80.0, 0.25) == pytest.approx(1.2533141 * dust.mean_smooth(80.0, 0.25))


def test_dust_grows_with_distance_and_falls_with_latitude():
    d = np.array([10.0, 50.0, 100.0, 300.0, 1000.0, 3000.0])
    assert (np.diff(dust.mean_smooth(d, 0.1)) > 0).all()
    assert (np.diff(dust.mean_smooth(1000.0, np.array([0.0, 0.1, 0.3, 1.0]))) < 0).all()
    # out of the layer nothing is added
    assert dust.mean_smooth(5000.0, 1.0) == pytest.approx(dust.mean_smooth(50000.0, 1.0), rel=1e-6)


def test_clouds():
    assert dust.cloud_share(5.0) == pytest.approx(0.3 * (0.05 + 0.95 * (1 - np.exp(-((5 / 120) ** 2)))))
    assert dust.cloud_share(3000.0) == pytest.approx(0.3)
    assert dust.mean_cloud(3000.0) == pytest.approx(1.0)
    assert dust.mean_cloud(1.0) == pytest.approx(1.0 * 0.03, rel=0.01)


@pytest.mark.parametrize("distance", [10.0, 120.0, 800.0])
def test_density_is_a_density_with_the_mean_it_says(distance):
    e = np.concatenate([np.linspace(0, 0.2, 20001), np.linspace(0.2, 30, 60000)[1:]])
    p = np.exp(dust.log_density(e, distance, 0.25))
    assert np.trapezoid(p, e) == pytest.approx(1.0, abs=2e-3)
    share = dust.cloud_share(distance)
    mean = (1 - share) * dust.mean_smooth(distance, 0.25) + share * dust.mean_cloud(distance)
    assert np.trapezoid(p * e, e) == pytest.approx(mean, rel=5e-3)


def test_priors():
    assert priors.prior_names() == ("bright", "disc", "nearby")
    assert priors.check_prior(None) == "bright"
    assert priors.check_prior("disc") == "disc"
    with pytest.raises(RequestError, match="no prior 'flat'"):
        priors.check_prior("flat")
    d, step = np.array([[100.0, 200.0]]), np.array([[20.0, 50.0]])
    assert priors.log_prior("bright", d, np.array([[0.5]]), step) == pytest.approx(np.zeros((1, 2)))
    # picked from a volume: at a given V, twice the distance means eight times fewer
    assert np.diff(priors.log_prior("nearby", d, np.array([[0.5]]), step))[0, 0] == pytest.approx(-np.log(8.0))
    # an A star's disc is 90 pc thick, a K star's 300 pc
    assert priors.log_prior("disc", d, np.array([[0.5]]), step)[0] == pytest.approx([-100 * 0.5 / 90, -200 * 0.5 / 300])


def test_companions():
    assert binaries.share(5.0) == 0.25
    assert binaries.share(3.0) == binaries.share(1.0) == 0.08
    assert binaries.share(4.0) == pytest.approx(0.165)
    assert binaries.TWIN_MAG == pytest.approx(0.7526, abs=1e-4)
    assert binaries.brightening(0.1, 1.0, 5.0) == pytest.approx(binaries.TWIN_MAG)
    assert binaries.brightening(0.1, 0.0, 5.0) == 0.0
    assert binaries.brightening(0.3, 1.0, 5.0) == 0.0


@pytest.mark.parametrize("sigma", [0.2, 0.3, 0.45])
def test_median_shift_against_simulation(sigma):
    rng = np.random.default_rng(4)
    n = 400_000
    light = binaries.brightening(rng.random(n), rng.random(n), 5.0)
    middle = np.median(sigma * rng.standard_normal(n) - light)
    # error of a median of this many: 1.25 sigma / sqrt(n) < 0.001
    assert -middle == pytest.approx(binaries.median_shift(5.0, sigma), abs=0.004)
