"""Colour and reddening from the spectrum's own slope."""

import numpy as np
import pytest

from starfathom.distance import fathom
from starfathom.distance.slope import ZERO_POINT_MAG, slope_excess, synthetic_b_v

WAVE = np.arange(3500.0, 7300.0, 2.0)


def test_flat_spectrum_by_hand():
    # equal flux everywhere: the ratio of the areas under the two curves, 959.2 and 893.1 A (Bessell 1990, trapezium
    # rule)
    assert synthetic_b_v(WAVE, np.ones(len(WAVE))) == pytest.approx(
        -2.5 * np.log10(959.2 / 893.1) + ZERO_POINT_MAG, abs=3e-3
    )


def test_scale_does_not_matter_and_a_step_does():
    flux = np.where(WAVE < 4700, 1.0, 1.0)
    assert synthetic_b_v(WAVE, 1e-14 * flux) == pytest.approx(synthetic_b_v(WAVE, flux), abs=1e-9)
    # a tilt by one magnitude between the effective wavelengths of B and V, 4400 and 5500 A
    tilted = 10 ** (0.4 * (WAVE - 4400) / 1100)
    assert synthetic_b_v(WAVE, tilted) - synthetic_b_v(WAVE, flux) == pytest.approx(1.0, abs=0.06)


def test_black_body_of_the_sun():
    flux = WAVE**-5.0 / np.expm1(1.4387769e8 / (WAVE * 5772.0))
    # the Sun has 0.653 (Ramirez et al. 2012); without its lines it would be bluer
    assert 0.4 < synthetic_b_v(WAVE, flux) < 0.66


def test_gaps():
    flux = np.ones(len(WAVE))
    valid = (WAVE < 5570) | (WAVE > 5585)
    spiked = np.where(valid, flux, 0.0)
    assert synthetic_b_v(WAVE, spiked, valid) == pytest.approx(synthetic_b_v(WAVE, flux), abs=1e-9)
    assert np.isnan(synthetic_b_v(WAVE, flux, WAVE > 4300))
    assert np.isnan(synthetic_b_v(WAVE, flux, WAVE < 6000))
    assert np.isnan(synthetic_b_v(WAVE, -flux))


def test_excess_for_the_chain():
    flux = 10 ** (0.4 * 0.6 * (WAVE - 4400) / 1100)
    value, error = slope_excess(WAVE, flux, None, 12.0, 5.0)
    assert value == pytest.approx(synthetic_b_v(WAVE, flux) + 0.215, abs=1e-6)
    assert error == pytest.approx(np.hypot(0.06, 0.0215), abs=2e-3)
    f = fathom("B2 V", {"V": 8.0}, ebv_slope=(value, error))
    assert f.median("ebv") == pytest.approx(value, abs=0.03)
    assert slope_excess(WAVE, flux, WAVE > 5000, 12.0, 5.0) is None
