"""The fit of the scale, on stars made with a known truth, and on the shipped ones."""

import numpy as np
import pytest

from starfathom.classify.errors import RequestError
from starfathom.distance import binaries, fit_scale, load_scale
from starfathom.distance.calibrators import Calibrators, calibrators, library_stars, standards
from starfathom.distance.fit import Recipe, _expect, _slope_amplitude, _split_colour, fit
from starfathom.distance.grid import cell_of, from_nodes
from starfathom.distance.intrinsic import intrinsic
from starfathom.distance.scale import composite_nodes, from_arrays, mean_in_band, to_arrays
from starfathom.templates.subtypes import step_of, t_code_of


def made(n_each=60, offset=0.5, slope=-10.0, sigma=0.35, lib_offset=0.0, seed=2, plx_err=0.02, kinds=None):
    """Giants and dwarfs whose M_V is the published one plus a known offset, within 100 pc and without dust."""
    rng = np.random.default_rng(seed)
    prior = from_nodes(composite_nodes())
    rows = []
    for subtype, lum in kinds or (("K0", 3.0), ("K2", 3.0), ("K4", 3.0)):
        cell = int(cell_of(t_code_of(subtype), lum))
        for i in range(n_each):
            lib = "miles" if lib_offset and i % 2 else ""
            dev = 0.05 * rng.standard_normal()
            m_v = prior[cell] + offset + slope * dev + sigma * rng.standard_normal() + (lib_offset if lib else 0.0)
            d = rng.uniform(20, 60)
            plx = 1000 / d
            err = plx_err * plx
            rows.append(
                (len(rows) + 1, lib, f"{subtype} III", step_of(t_code_of(subtype)), t_code_of(subtype), lum,
                 m_v + 5 * np.log10(d / 10), intrinsic().offset["B"][cell] + dev, 0.005, plx + err *
                 rng.standard_normal(), err)
            )  # fmt: skip
    columns = [np.array(c) for c in zip(*rows)]
    return Calibrators(*columns), prior


def test_known_offset_slope_and_scatter_come_back():
    stars, prior = made()
    scale, _ = fit(stars)
    cell = int(cell_of(t_code_of("K2"), 3.0))
    # 180 stars, 0.35 mag: 0.03; the mean is that of all stars, companions included as they come (none here)
    assert scale.mean[cell] - prior[cell] == pytest.approx(0.5, abs=0.09)
    assert scale.slope[cell] == pytest.approx(-10.0, abs=2.0)
    assert scale.sigma[cell] == pytest.approx(0.34, abs=0.06)
    assert scale.bv_scatter[cell] == pytest.approx(0.05, abs=0.008)
    assert scale.mean_err[cell] < 0.08
    assert scale.weight[cell] > 20
    # where there is no star the published scale stands, with its uncertainty
    far = int(cell_of(t_code_of("B5"), 1.0))
    assert scale.mean[far] == pytest.approx(prior[far] - binaries.median_shift(1.0, scale.sigma[far]), abs=0.02)
    assert scale.mean_err[far] == pytest.approx(0.6, abs=0.02)
    assert scale.weight[far] < 0.01
    assert scale.slope[far] == 0


def test_without_colour_the_slope_goes_into_the_scatter():
    stars, _ = made()
    scale, _ = fit(stars, colour=False)
    cell = int(cell_of(t_code_of("K2"), 3.0))
    assert (scale.slope == 0).all()
    # 0.35 and 10 x 0.05 in quadrature
    assert scale.sigma[cell] == pytest.approx(0.61, abs=0.1)


def test_library_stars_have_an_offset_of_their_own():
    stars, prior = made(n_each=120, offset=0.3, lib_offset=-0.5)
    scale, at_large = fit(stars)
    cell = int(cell_of(t_code_of("K2"), 3.0))
    assert scale.mean[cell] - prior[cell] == pytest.approx(0.3, abs=0.12)
    assert at_large.mean[cell] - scale.mean[cell] == pytest.approx(-0.5, abs=0.15)
    assert at_large.sigma[cell] >= scale.sigma[cell]
    assert at_large.name == "starfathom-published"


def test_poor_parallaxes_do_not_bias():
    # parallaxes with errors of 60 %: cut to the positive or inverted, they would be off by half a magnitude
    stars, prior = made(n_each=400, slope=0.0, plx_err=0.6, seed=5)
    assert (stars.parallax < 0).any()
    scale, _ = fit(stars, colour=False)
    cell = int(cell_of(t_code_of("K2"), 3.0))
    assert scale.mean[cell] - prior[cell] == pytest.approx(0.5, abs=0.2)


def test_an_outlier_is_held_down_by_the_tail():
    stars, _ = made(n_each=20, slope=0.0)
    v = stars.v_mag.copy()
    v[0] += 5.0
    columns = [v if name == "v_mag" else getattr(stars, name) for name in stars.__dataclass_fields__]
    wild = Calibrators(*columns)
    cell = int(cell_of(t_code_of("K2"), 3.0))
    moved = fit(wild)[0].mean[cell] - fit(stars)[0].mean[cell]
    # a plain mean of sixty would move by 0.083
    assert abs(moved) < 0.05


def test_close_and_poor_parallaxes_meet():
    # at a parallax of 8 sigma both ways of doing the integral must agree
    stars, _ = made(n_each=1, plx_err=0.1)
    stars = stars.where(np.zeros(1, int))
    out = []
    for error in (stars.parallax[0] / 8.001, stars.parallax[0] / 7.999):
        columns = [np.array([error]) if k == "e_parallax" else getattr(stars, k) for k in stars.__dataclass_fields__]
        out.append(_expect(np.array([0.6]), stars.v_mag, np.zeros(1), Calibrators(*columns), np.array([0.4]), 0.1))
    pull = [float(e.precision[0] * (e.target[0] - 0.6)) for e in out]
    assert pull[0] == pytest.approx(pull[1], abs=0.25)
    assert out[0].square[0] == pytest.approx(out[1].square[0], rel=0.15)


def test_a_near_red_giant_is_red_itself_a_far_hot_star_is_dusty():
    stars, _ = made(n_each=1, kinds=(("K2", 3.0), ("B0", 5.0)))
    bv = intrinsic().offset["B"][cell_of(stars.t_code, stars.lum_code)]
    columns = [bv + np.array([0.08, 0.4]) if k == "b_v" else getattr(stars, k) for k in stars.__dataclass_fields__]
    got = _split_colour(Calibrators(*columns), np.array([40.0, 600.0]), bv, np.array([0.06, 0.02]))
    assert got.ebv[0] < 0.02 and got.deviation[0] > 0.05
    assert got.ebv[1] == pytest.approx(0.4, abs=0.03) and abs(got.deviation[1]) < 0.02
    assert got.v_zero[1] == pytest.approx(stars.v_mag[1] - 3.1 * 0.4, abs=0.15)


def test_the_colour_term_is_free_only_where_colour_carries_luminosity():
    recipe = Recipe()
    amplitude = _slope_amplitude(np.array([12.0, 24.0, 42.0, 56.0]), np.full(4, 5.0), recipe)
    assert amplitude.tolist() == [0.0, 0.0, 0.0, recipe.slope]
    assert _slope_amplitude(np.array([20.0, 50.0]), np.full(2, 3.0), recipe).tolist() == [0.0, recipe.slope]


def test_calibrators_without():
    every = calibrators()
    assert (calibrators(without_libraries=["MILES"]).library != "miles").all()
    some = calibrators(without_stars=[91262, int(every.hip[-1])])
    assert len(some) == len(every) - 2 and 91262 not in some.hip
    assert not np.isin(library_stars().hip, [0]).any()
    assert (standards().library == "").all() and 91262 in standards().hip


def test_fit_without_libraries_and_stars():
    shipped = load_scale()
    whole = fit_scale()
    # the shipped file is what the recipe makes, in single precision
    assert whole.mean == pytest.approx(shipped.mean, abs=2e-3)
    assert whole.sigma == pytest.approx(shipped.sigma, abs=2e-3)
    assert whole.slope == pytest.approx(shipped.slope, abs=2e-2)
    assert fit_scale() is whole
    without = fit_scale(without_libraries=["stelib", "miles"])
    assert not np.allclose(without.mean, whole.mean, atol=1e-3)
    sun = int(cell_of(42.0, 5.0))
    assert without.mean[sun] == pytest.approx(whole.mean[sun], abs=0.25)
    assert fit_scale(without_libraries=["nosuch"]).mean == pytest.approx(whole.mean, abs=1e-6)
    one = fit_scale(without_stars=[91262])
    vega = int(cell_of(20.0, 5.0))
    assert 1e-4 < abs(one.mean[vega] - whole.mean[vega]) < 0.1
    published = fit_scale(published_types=True)
    assert published.mean == pytest.approx(load_scale("starfathom-published").mean, abs=2e-3)


def test_arrays_and_back():
    scale = load_scale("mamajek")
    again = from_arrays(to_arrays(scale))
    assert again.name == "mamajek" and again.source == scale.source
    assert again.mean == pytest.approx(scale.mean, abs=1e-5)
    assert again.weight == pytest.approx(scale.weight)


def test_magnitudes_in_other_bands():
    scale = load_scale("mamajek")
    cell = int(cell_of(42.0, 5.0))
    # Pecaut & Mamajek: M_Ks 3.236, M_G 4.635 (V-band scale and colours give 4.645) for G2 V
    assert mean_in_band(scale, "Ks")[cell] == pytest.approx(3.236, abs=1e-6)
    assert mean_in_band(scale, "G")[cell] == pytest.approx(4.645, abs=1e-6)
    with pytest.raises(RequestError, match="W1"):
        mean_in_band(scale, "W1")


def test_recipe_writes_the_file(tmp_path, monkeypatch, capsys):
    from starfathom.distance import recipe

    stars, _ = made(n_each=5)
    monkeypatch.setattr(recipe, "calibrators", lambda: stars)
    monkeypatch.setattr(recipe, "DATA", tmp_path)
    recipe.main()
    assert "fitted 15 stars, 15 of them standards" in capsys.readouterr().out
    with np.load(tmp_path / "scale.npz") as file:
        assert "starfathom/mean" in file.files and "starfathom-published/sigma" in file.files
