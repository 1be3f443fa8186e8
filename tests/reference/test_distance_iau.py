"""IAU 2015 nominal values and worked chains, against arithmetic done by hand.

Sources: IAU 2015 Resolutions B2 (arXiv:1510.06262) and B3 (arXiv:1510.07674); the chains use printed M_V, colour and
BC of the source named and R_V = 3.1. Sums are good to the last printed digit.
"""

import numpy as np
import pytest

from starfathom.distance import nominal


def test_bolometric_zero_point_is_consistent_with_the_nominal_luminosities():
    assert nominal.L_ZERO_WATT == 3.0128e28
    assert nominal.L_SUN_WATT == 3.828e26
    m_bol = -2.5 * np.log10(nominal.L_SUN_WATT / nominal.L_ZERO_WATT)
    assert m_bol == pytest.approx(4.739996, abs=1e-6)
    assert nominal.M_BOL_SUN == 4.74


def test_nominal_sun_obeys_stefan_and_boltzmann():
    # sigma_SB, CODATA 2018
    luminosity = 4 * np.pi * nominal.R_SUN_METRE**2 * 5.670374419e-8 * nominal.TEFF_SUN_K**4
    assert luminosity / nominal.L_SUN_WATT == pytest.approx(1.0, abs=3e-4)


def test_parsec_is_648000_over_pi_astronomical_units():
    assert nominal.PARSEC_METRE == pytest.approx(648000 / np.pi * 149597870700.0, rel=1e-14)


def test_sun_at_one_parsec_subtends_9_3_milliarcseconds():
    # twice the nominal radius over a parsec; one au at one parsec is an arcsecond by definition
    expected = 2 * 6.957e8 / 149597870700.0 * 1000.0
    assert nominal.THETA_MAS_RSUN_PC == pytest.approx(expected, rel=1e-10)
    assert nominal.angular_diameter_mas(2.0, 10.0) == pytest.approx(expected / 5, rel=1e-10)


CHAINS = [
    # source, V, M_V, E(B-V), Teff, BC, distance pc, log L, radius
    ("G2V, Pecaut & Mamajek", 10.00, 4.80, 0.000, 5770, -0.085, 109.65, 0.0100, 1.0123),
    ("Sun at 10 pc", 4.81, 4.81, 0.000, 5772, -0.070, 10.00, 0.0000, 1.0000),
    ("B0V, Pecaut & Mamajek", 6.00, -3.90, 0.300, 31400, -2.990, 622.30, 4.6520, 7.1580),
    ("K0III, Mamajek", 3.00, 0.85, 0.020, 4820, -0.380, 26.16, 1.7080, 10.2461),
    ("A0Ib, Schmidt-Kaler", 5.00, -5.20, 0.250, 9980, -0.290, 767.36, 4.0920, 37.1870),
    ("M2Iab, Cox", 2.00, -5.60, 0.500, 3660, -1.550, 162.18, 4.7560, 593.8688),
]


@pytest.mark.parametrize(("name", "v", "m_v", "ebv", "teff", "bc", "distance", "log_lum", "radius"), CHAINS)
def test_worked_chain(name, v, m_v, ebv, teff, bc, distance, log_lum, radius):
    assert nominal.distance_pc(v - 3.1 * ebv - m_v) == pytest.approx(distance, abs=0.006)
    got = nominal.log_luminosity(m_v + bc)
    assert got == pytest.approx(log_lum, abs=6e-5)
    assert nominal.radius_rsun(got, teff) == pytest.approx(radius, rel=1e-4)


def test_distance_modulus_five_is_a_hundred_parsec_and_back():
    assert nominal.distance_pc(5.0) == pytest.approx(100.0, rel=1e-14)
    assert nominal.distance_modulus(100.0) == pytest.approx(5.0, abs=1e-14)
    assert nominal.distance_modulus(nominal.distance_pc(np.array([-3.2, 0.0, 14.7]))) == pytest.approx(
        [-3.2, 0.0, 14.7]
    )


def test_vega_from_its_parallax():
    # 130.23 mas (van Leeuwen 2007), V = 0.03
    d = 1000 / 130.23
    assert d == pytest.approx(7.6787, abs=1e-4)
    assert 0.03 - nominal.distance_modulus(d) == pytest.approx(0.604, abs=1e-3)
