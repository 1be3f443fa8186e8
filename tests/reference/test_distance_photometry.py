"""Intrinsic colours, temperatures and bolometric corrections against the sources they were taken from.

Printed values of Pecaut & Mamajek 2013 (class V), Schmidt-Kaler 1982 (B-V of the others), Bessell & Brett 1988, van
Belle 2021, Levesque 2005 and others. A printed type must come back exactly; half a type between lies between.
"""

import numpy as np
import pytest

from starfathom.distance.grid import cell_of
from starfathom.distance.intrinsic import bands_reaching, intrinsic
from starfathom.distance.photometry import BANDS
from starfathom.templates.subtypes import t_code_of


def cell(subtype, lum):
    return int(cell_of(t_code_of(subtype), lum))


@pytest.mark.parametrize(
    ("subtype", "lum", "b_v"),
    [
        ("O9", 5, -0.312), ("A0", 5, 0.0), ("G2", 5, 0.65), ("K7", 5, 1.34), ("M0", 5, 1.42), ("M5", 5, 1.83),
        ("B5", 3, -0.17), ("K0", 3, 1.0), ("K5", 3, 1.5), ("M2", 3, 1.60),
        ("G5", 2, 0.89), ("G8", 1.6, 1.14), ("F5", 1.3, 0.32), ("A0", 1.0, 0.02), ("K2", 1.0, 1.36),
    ],
)  # fmt: skip
def test_intrinsic_b_v(subtype, lum, b_v):
    assert intrinsic().offset["B"][cell(subtype, lum)] == pytest.approx(b_v, abs=1e-9)


@pytest.mark.parametrize(
    ("subtype", "lum", "teff", "bc"),
    [
        ("G2", 5, 5770, -0.085), ("A0", 5, 9700, -0.21), ("M3", 5, 3430, -1.93), ("O5", 5, 41400, -3.76),
        ("K0", 3, 4692, -0.344), ("M0", 3, 3816, -1.213), ("B0", 3, 29070, -2.835), ("M2", 3, 3644, -1.50),
        ("M2", 1.3, 3660, -1.55), ("A0", 1.6, 9840, -0.29), ("G5", 1.0, 4930, -0.21),
    ],
)  # fmt: skip
def test_temperature_and_bolometric_correction(subtype, lum, teff, bc):
    at = cell(subtype, lum)
    assert np.exp(intrinsic().ln_teff[at]) == pytest.approx(teff, rel=1e-6)
    assert intrinsic().bc_v[at] == pytest.approx(bc, abs=1e-6)


def test_bolometric_corrections_are_on_the_iau_scale():
    # with M_bol(Sun) = 4.74 and M_V about 4.81 the Sun's BC must be near -0.07, not the -0.20 of older tables
    assert -0.11 < intrinsic().bc_v[cell("G2", 5)] < -0.05


def test_colours_of_a_g2_dwarf():
    # Pecaut & Mamajek: U-B 0.133, V-Rc 0.363, V-Ic 0.713, V-Ks 1.564, J-H 0.293, H-Ks 0.073, G-V -0.155, Bp-Rp 0.823,
    # G-Rp 0.459
    off = {b: float(o[cell("G2", 5)]) for b, o in intrinsic().offset.items()}
    assert off["U"] - off["B"] == pytest.approx(0.133, abs=1e-9)
    assert off["R"] == pytest.approx(-0.363, abs=1e-9)
    assert off["I"] == pytest.approx(-0.713, abs=1e-9)
    assert off["Ks"] == pytest.approx(-1.564, abs=1e-9)
    assert off["J"] - off["H"] == pytest.approx(0.293, abs=1e-9)
    assert off["H"] - off["Ks"] == pytest.approx(0.073, abs=1e-9)
    assert off["G"] == pytest.approx(-0.155, abs=1e-9)
    assert off["BP"] - off["RP"] == pytest.approx(0.823, abs=1e-9)
    assert off["G"] - off["RP"] == pytest.approx(0.459, abs=1e-9)


def test_sloan_colours_of_the_sun():
    # Willmer 2018 ApJS 236 47 (from memory): g-r 0.46, r-i 0.12, i-z 0.02 for the Sun
    off = {b: float(o[cell("G2", 5)]) for b, o in intrinsic().offset.items()}
    assert off["g"] - off["r"] == pytest.approx(0.46, abs=0.03)
    assert off["r"] - off["i"] == pytest.approx(0.12, abs=0.03)
    assert off["i"] - off["z"] == pytest.approx(0.03, abs=0.04)


def test_gaia_colours_from_v_i_meet_the_tabulated_ones():
    # the transformation fills types without tabulated Gaia colours; where both exist they must agree
    from starfathom.distance.intrinsic import _BP_RP_OF_V_I, _G_V_OF_V_I, _polynomial
    from starfathom.distance.tables import read_table

    t = read_table("dwarfs")
    good = np.isfinite(t["BP-RP"]) & np.isfinite(t["V-I"]) & (t["V-I"] > 0) & (t["V-I"] < 1.3)
    assert good.sum() > 20
    assert np.abs(_polynomial(_G_V_OF_V_I, t["V-I"][good]) - t["G-V"][good]).max() < 0.06
    assert np.abs(np.median(_polynomial(_BP_RP_OF_V_I, t["V-I"][good]) - t["BP-RP"][good])) < 0.02


def test_giant_infrared_colours_are_in_the_2mass_system():
    # Bessell & Brett K0 III: V-K 2.31, J-H 0.54, H-K 0.095; Carpenter's relations turn them over
    off = {b: float(o[cell("K0", 3)]) for b, o in intrinsic().offset.items()}
    assert -off["Ks"] == pytest.approx(2.31 + 0.039, abs=1e-6)
    assert off["J"] - off["H"] == pytest.approx(-0.045 + 0.980 * 0.54, abs=1e-6)
    assert off["H"] - off["Ks"] == pytest.approx(0.028 + 0.996 * 0.095, abs=1e-6)


def test_subgiants_lie_between_giants_and_dwarfs():
    for band in ("B", "Ks"):
        offset = intrinsic().offset[band]
        middle = 0.5 * (offset[cell("K0", 3)] + offset[cell("K0", 5)])
        assert offset[cell("K0", 4)] == pytest.approx(middle, abs=1e-9)


def test_bolometric_slope_is_the_dwarfs_relation():
    # from 5660 K (BC -0.105) to 6050 K (-0.05): about 0.8 mag per unit ln T
    assert intrinsic().bc_slope[cell("G2", 5)] == pytest.approx(0.85, abs=0.25)
    # a hot star's correction falls by some 2.5 to 3 mag per unit ln T
    assert -3.2 < intrinsic().bc_slope[cell("B2", 5)] < -2.0


def test_colour_response_follows_the_main_sequence():
    response = intrinsic().response
    assert response["V"] == 0.0
    assert response["B"] == pytest.approx(1.0)
    # between F0 V and K0 V: B-V 0.521, V-Ks 1.219, V-I 0.514
    assert response["Ks"] == pytest.approx(-1.219 / 0.521, abs=0.15)
    assert response["I"] == pytest.approx(-0.514 / 0.521, abs=0.1)


def test_bands_that_reach():
    assert set(bands_reaching(5.0, 42.0)) == set(BANDS)
    assert "Ks" in bands_reaching(3.0, 50.0)
