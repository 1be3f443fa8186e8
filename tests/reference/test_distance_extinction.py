"""Extinction coefficients against published ones, with the differences that are known.

Known offsets: integrated over a passband a coefficient differs from a curve read at one wavelength by a few per cent;
Gordon et al. 2023 has less extinction in the near infrared than Cardelli, Clayton & Mathis 1989.
"""

import numpy as np
import pytest

from starfathom.distance.extinction import RV_MEAN, evaluate, ratio
from starfathom.distance.extinction_recipe import ATLAS, PASSBANDS, POWERS, band_extinction, build, fit_terms


@pytest.mark.parametrize(
    ("band", "value", "tolerance", "source"),
    [
        ("J", 0.243, 0.05, "Wang & Chen 2019; 0.282 in Cardelli et al. 1989"),
        ("H", 0.131, 0.05, "Wang & Chen 2019; 0.190 in Cardelli et al. 1989"),
        ("Ks", 0.078, 0.04, "Wang & Chen 2019; 0.114 in Cardelli et al. 1989"),
        ("BP", 1.002, 0.12, "Wang & Chen 2019, for red giants"),
        ("RP", 0.589, 0.06, "Wang & Chen 2019, for red giants"),
    ],
)
def test_ratio_to_a_v(band, value, tolerance, source):
    assert ratio(band, 5000.0) / ratio("V", 5000.0) == pytest.approx(value, abs=tolerance)


@pytest.mark.parametrize(
    ("band", "value", "tolerance", "source"),
    [
        ("V", 3.07, 0.25, "McCall 2004 AJ 128 2144"),
        ("B", 4.053, 0.25, "McCall 2004"),
        ("I", 1.714, 0.15, "McCall 2004; 1.57 Fitzpatrick 1999"),
        ("J", 0.819, 0.09, "McCall 2004; 0.748 Zhang & Yuan 2023"),
        ("H", 0.519, 0.07, "McCall 2004; 0.453 Zhang & Yuan 2023"),
        ("Ks", 0.343, 0.04, "McCall 2004"),
        ("RP", 1.737, 0.35, "Zhang & Yuan 2023"),
    ],
)
def test_coefficient_per_unit_excess(band, value, tolerance, source):
    assert ratio(band, 8000.0) == pytest.approx(value, abs=tolerance)


def test_b_to_v_of_early_stars():
    # Wang & Chen 2019, R_V = 3.16; Cardelli et al. 1989 print 1.337 and their formula gives 1.323
    assert ratio("B", 9000.0) / ratio("V", 9000.0) == pytest.approx(1.317, abs=0.012)


def test_gaia_g_of_a_red_giant():
    # Wang & Chen 2019: A_G/A_V 0.789 for red clump stars behind some dust
    assert ratio("G", 4700.0, 3.1, 0.5) / ratio("V", 4700.0, 3.1, 0.5) == pytest.approx(0.789, abs=0.03)


def test_excess_is_that_of_the_star_itself():
    for teff in (3000.0, 5772.0, 20000.0):
        for rv, ebv in ((3.1, 0.0), (4.5, 1.0)):
            assert ratio("B", teff, rv, ebv) - ratio("V", teff, rv, ebv) == pytest.approx(1.0, abs=0.02)


def test_r_v_is_that_of_a_hot_star():
    for rv in (2.6, 3.1, 4.5):
        assert ratio("V", 30000.0, rv) == pytest.approx(rv, abs=0.02)


def test_cool_stars_have_more_a_v_for_the_same_excess():
    # Schmidt-Kaler 1982: R_V grows by 0.28 per mag of (B-V)_0; from B0 (-0.30) to K5 (1.5) that is 0.5
    assert ratio("V", 3950.0) - ratio("V", 30000.0) == pytest.approx(0.5, abs=0.1)


def test_olson_relation_for_hot_stars():
    # Olson 1975: A_V = 3.25 E + 0.25 (B-V)_0 E + 0.05 E^2, at (B-V)_0 = -0.3 and E = 1
    assert ratio("V", 30000.0, 3.1, 1.0) == pytest.approx(3.25 - 0.075 + 0.05, abs=0.12)


def test_unknown_band_is_refused():
    with pytest.raises(ValueError, match="W1"):
        ratio("W1", 5000.0)


def test_r_v_default():
    assert RV_MEAN == 3.1


def planck(wave_angstrom, teff_k):
    return wave_angstrom**-5.0 / np.expm1(1.4387769e8 / (wave_angstrom * teff_k))


def test_grey_extinction_comes_through_unchanged():
    wave = np.linspace(4000.0, 6000.0, 200)
    assert band_extinction(wave, planck(wave, 6000.0), np.ones(200), np.ones(200), 1.7) == pytest.approx(1.7)


def test_photon_counting_weights_by_wavelength():
    # two lines of equal energy, one dimmed by 1 mag: photons, not energy, are averaged
    wave = np.array([4000.0, 6000.0])
    got = band_extinction(wave, np.ones(2), np.ones(2), np.array([1.0, 0.0]), 1.0)
    assert got == pytest.approx(-2.5 * np.log10((4000 * 10**-0.4 + 6000) / 10000))


def test_terms_of_the_fit_are_found_again():
    rng = np.random.default_rng(1)
    rv, ebv = rng.uniform(2.5, 5.5, 60), rng.uniform(0, 2, 60)
    terms = np.array([3.2, 1.01, -0.02, 0.003, 0.05, -0.01, 0.002])
    truth = evaluate(terms, rv, ebv)
    found, worst = fit_terms(rv, ebv, truth)
    assert found == pytest.approx(terms, abs=1e-9)
    assert worst < 1e-9
    assert len(POWERS) == 7


def test_recipe_runs_from_passbands_and_an_atlas(tmp_path):
    from astropy.table import Table

    from starfathom.distance.grid import cell_of
    from starfathom.distance.intrinsic import intrinsic
    from starfathom.templates.subtypes import t_code_of

    centres = {"U": 3600, "B": 4400, "V": 5500, "R": 6500, "I": 8000, "G": 6200, "BP": 5100, "RP": 7800, "J": 12350,
               "H": 16500, "Ks": 21600, "g": 4750, "r": 6200, "i": 7500, "z": 8900}  # fmt: skip
    for band, name in PASSBANDS.items():
        wave = np.linspace(centres[band] - 400, centres[band] + 400, 41)
        body = "\n".join(f"{w:g} {max(0.0, 1 - abs(w - centres[band]) / 400):g}" for w in wave)
        head = "# %ECSV 1.0\n# ---\n# datatype:\n# - {name: wavelength, datatype: float64}\n"
        head += "# - {name: response, datatype: float64}\n"
        (tmp_path / f"{name}.ecsv").write_text(f"{head}wavelength response\n{body}\n")
    wave = np.arange(1150.0, 25000.0, 5.0)
    for name, subtype, lum in ATLAS:
        teff = float(np.exp(intrinsic().ln_teff[int(cell_of(t_code_of(subtype), lum))]))
        Table({"wa": wave, "fl": planck(wave, teff) / planck(5556.0, teff)}).write(tmp_path / f"{name}.fits")
    rows = build(tmp_path, tmp_path)
    assert len(rows) == 15 * len(ATLAS)
    hot_v = next(r for r in rows if r[0] == "V" and r[1] == 31400)
    assert hot_v[2] == pytest.approx(3.1, abs=0.01)
    cool_v = next(r for r in rows if r[0] == "V" and r[1] == 3902)
    assert cool_v[2] > hot_v[2] + 0.03  # the passbands here are narrow
    assert all(r[-1] < 0.05 for r in rows)
    assert [r[1] for r in rows[:: len(PASSBANDS)]] == sorted((r[1] for r in rows[:: len(PASSBANDS)]), reverse=True)


def test_the_shipped_table_is_what_the_fit_left():
    from starfathom.distance.tables import read_table

    table = read_table("extinction")
    assert len(table["band"]) == 15 * len(ATLAS)
    assert table["worst"].max() < 0.025
