"""From a request to an answer: the chain, its switches, and its refusals."""

import dataclasses

import numpy as np
import pytest

from starfathom.classify.assignment import Assignment
from starfathom.classify.errors import RequestError, StarfathomError
from starfathom.classify.mktype import MKType
from starfathom.distance import COLUMNS, Fathoming, Photometry, Request, fathom, fathom_many, load_scale
from starfathom.distance.grid import cell_of
from starfathom.distance.intrinsic import intrinsic
from starfathom.distance.sampler import stratified_numbers
from starfathom.distance.sources import cells_of_assignment, cells_of_range, fine_lum_code
from starfathom.templates.subtypes import CLASSES, SUBTYPES, t_code_of

SUNLIKE = {"V": (8.0, 0.01), "B": (8.65, 0.01)}


def typed(cells=(("G2", "V", 1.0),), **fields):
    posterior = np.zeros((len(SUBTYPES), len(CLASSES)))
    for subtype, lum, p in cells:
        posterior[SUBTYPES.index(subtype), CLASSES.index(lum)] = p
    base = Assignment(
        file="star.fits",
        status="typed",
        object_kind="star",
        mk_type="G2 V",
        posterior=posterior,
        t_code=42.0,
        lum_code=5.0,
    )
    return dataclasses.replace(base, **fields)


def test_sun_like_star_by_hand():
    # a published scale with fixed R_V: V - M_V = 8 - 4.80 = 3.2 gives 43.65 pc less a little dust
    f = fathom("G2 V", SUNLIKE, scale="mamajek", rv=3.1, n_samples=20000)
    d = 10 ** (0.2 * (8.0 - f.median("a_v") - 4.80) + 1)
    assert f.median("distance_pc") == pytest.approx(d, rel=0.01)
    assert f.median("a_v") < 0.06
    # 0.3 mag of scatter is 14.8 %
    low, high = f.interval("distance_pc")
    assert np.log(high / low) / 2 == pytest.approx(0.3 * np.log(10) / 5, rel=0.06)
    assert f.median("teff_k") == pytest.approx(5770, rel=0.01)
    # L is that of M_V 4.80 and BC -0.085
    assert f.median("log_lum_lsun") == pytest.approx(0.010, abs=0.02)
    assert f.median("radius_rsun") == pytest.approx(1.0123, rel=0.03)
    assert f.median("angular_diameter_mas") == pytest.approx(9.301 * 1.0123 / 43.65, rel=0.04)


def test_extinction_by_hand():
    # E = 1.0 on a B0 V star: A_V = 3.1, V 9 -> 5.9 + 3.9 = 9.8 -> 912 pc
    f = fathom("B0 V", {"V": (9.0, 0.01), "B": (9.699, 0.01)}, scale="mamajek", rv=3.1)
    assert f.median("ebv") == pytest.approx(1.0, abs=0.02)
    assert f.median("a_v") == pytest.approx(3.13, abs=0.08)
    assert f.median("distance_pc") == pytest.approx(10 ** (0.2 * (9.0 - f.median("a_v") + 3.9) + 1), rel=0.02)


def test_r_v_changes_extinction_but_not_excess():
    low, high = (fathom("B0 V", {"V": 9.0, "B": 9.7}, rv=r) for r in (2.6, 4.5))
    assert high.median("a_v") / low.median("a_v") == pytest.approx(4.5 / 2.6, rel=0.03)
    assert high.median("ebv") == pytest.approx(low.median("ebv"), abs=0.01)
    wide = fathom("B0 V", {"V": 9.0, "B": 9.7}, rv=(3.1, 0.5))
    assert wide.error("a_v") > 2 * fathom("B0 V", {"V": 9.0, "B": 9.7}, rv=3.1).error("a_v")


def test_infrared_tells_dust_from_colour():
    scale, look = load_scale(), intrinsic()
    cell = int(cell_of(50.0, 3.0))
    from starfathom.distance.extinction import ratio

    magnitudes = {}
    for band in ("B", "V", "J", "H", "Ks"):
        k = ratio(band, float(np.exp(look.ln_teff[cell])), 3.1, 0.8)
        own = look.offset[band][cell] + scale.bv_shift[cell] * look.response[band]
        magnitudes[band] = (float(9.0 + own + 0.8 * (k - ratio("V", 4692.0, 3.1, 0.8))), 0.01)
    f = fathom("K0 III", magnitudes, rv=3.1)
    assert f.bands == ("B", "V", "J", "H", "Ks")
    assert f.median("ebv") == pytest.approx(0.8, abs=0.03)
    assert f.error("ebv") < fathom("K0 III", {b: magnitudes[b] for b in "BV"}).error("ebv")


def test_negative_excess_does_not_pile_up_at_zero():
    bluer = fathom("G2 V", {"V": (8.0, 0.03), "B": (8.58, 0.03)})
    redder = fathom("G2 V", {"V": (8.0, 0.03), "B": (8.72, 0.03)})
    assert (bluer.samples["ebv"] >= 0).all()
    assert (bluer.samples["ebv"] == 0).mean() < 0.01
    assert 0 < bluer.median("ebv") < redder.median("ebv")


def test_map_value_replaces_the_dust_prior():
    without = fathom("G2 V", {"V": 8.0})
    given = fathom("G2 V", {"V": 8.0}, ebv=(0.40, 0.02))
    assert given.median("ebv") == pytest.approx(0.40, abs=0.01)
    assert given.error("ebv") == pytest.approx(0.02, abs=0.003)
    assert without.median("ebv") < 0.05
    assert given.median("distance_pc") < 0.7 * without.median("distance_pc")


def test_slope_of_the_spectrum_counts_as_a_measurement():
    f = fathom("B2 V", {"V": 8.0}, ebv_slope=(0.5, 0.05))
    assert f.median("ebv") == pytest.approx(0.5, abs=0.02)
    assert f.error("ebv") == pytest.approx(0.05, abs=0.006)


def test_latitude_matters_to_the_dust():
    # far stars without a colour: in the plane (the Galactic centre's direction) and at the pole
    plane = fathom("K0 III", {"V": 11.0}, ra_deg=266.4, dec_deg=-28.9)
    pole = fathom("K0 III", {"V": 11.0}, ra_deg=192.9, dec_deg=27.1)
    assert np.percentile(plane.samples["ebv"], 30) > 1.8 * np.percentile(pole.samples["ebv"], 30)
    unknown = fathom("K0 III", {"V": 11.0}, ra_deg=float("nan"), dec_deg=1.0)
    assert unknown.percentiles == fathom("K0 III", {"V": 11.0}).percentiles


def test_priors_move_the_distance_the_right_way():
    bright, nearby, disc = (fathom("K0 III", {"V": 9.0, "B": 10.0}, prior=p) for p in ("bright", "nearby", "disc"))
    # at a scatter of s mag the shift is 0.6 ln 10 s^2 mag toward the faint
    assert nearby.median("distance_pc") < 0.85 * bright.median("distance_pc")
    assert nearby.median("distance_pc") < disc.median("distance_pc") < bright.median("distance_pc")
    assert nearby.prior == "nearby"


def test_malmquist_shift_has_its_textbook_size():
    # Malmquist 1922: for a Gaussian scatter the mean M of a magnitude-limited sample is 0.6 ln 10 sigma^2 = 1.382
    # sigma^2 brighter
    kw = {"scale": "mamajek", "rv": 3.1, "ebv": (0.0, 0.001), "n_samples": 20000}
    bright, nearby = (fathom("G2 V", {"V": (8.0, 0.001)}, prior=p, **kw) for p in ("bright", "nearby"))
    shift = nearby.median("abs_mag_v") - bright.median("abs_mag_v")
    assert shift == pytest.approx(0.6 * np.log(10) * 0.3**2, abs=0.012)


def test_routes():
    far = fathom(typed(abs_mag_v=4.0, abs_mag_v_err=0.2, abs_mag_v_ok=True), SUNLIKE)
    assert far.distance_spec_pc > 1.2 * far.distance_class_pc
    assert far.distance_class_pc < far.median("distance_pc") < far.distance_spec_pc
    assert far.distance_spec_pc == pytest.approx(10 ** (0.2 * (8.0 - 4.0) + 1), rel=0.03)
    # 0.2 mag from the spectrum, about 0.3 from the class, and a possible companion of 15 %: tighter than the class
    # alone
    assert far.error("distance_pc") / far.median("distance_pc") < 0.14 < 0.17
    assert -2.5 < far.routes_sigma < -1
    odd = fathom(typed(abs_mag_v=1.0, abs_mag_v_err=0.2, abs_mag_v_ok=True), SUNLIKE)
    assert odd.routes_sigma < -2.5
    assert any("brighter than the class" in c for c in odd.cautions)
    faint = fathom(typed(abs_mag_v=8.0, abs_mag_v_err=0.2, abs_mag_v_ok=True), SUNLIKE)
    assert any("fainter than the class" in c for c in faint.cautions)
    not_ok = fathom(typed(abs_mag_v=1.0, abs_mag_v_err=0.2, abs_mag_v_ok=False), SUNLIKE)
    assert np.isnan(not_ok.distance_spec_pc) and np.isnan(not_ok.routes_sigma)
    assert not_ok.distance_class_pc == not_ok.median("distance_pc")


def test_the_spectrum_route_picks_the_class():
    both = (("G8", "V", 0.5), ("G8", "III", 0.5))
    f = fathom(typed(both, abs_mag_v=5.4, abs_mag_v_err=0.4, abs_mag_v_ok=True), {"V": 9.0, "B": 9.75})
    assert (f.samples["abs_mag_v"] > 3).mean() > 0.97


def test_colours_weigh_the_types():
    # half B8, half G8 by the spectrum; the colour of a B8 star cannot be a G8's
    f = fathom(typed((("B8", "V", 0.5), ("G8", "V", 0.5))), {"V": (8.0, 0.01), "B": (7.9, 0.01)})
    assert (f.samples["teff_k"] > 9000).mean() > 0.99


def test_parallax_is_compared_and_if_wanted_combined():
    f = fathom("G2 V", SUNLIKE, parallax=(23.0, 0.2))
    alone = fathom("G2 V", SUNLIKE)
    assert f.row()["distance_pc"] == alone.row()["distance_pc"]
    assert abs(f.parallax_sigma) < 1
    assert f.parallax_percent == pytest.approx(100 * (1000 / 23.0 / alone.median("distance_pc") - 1), abs=2)
    joined = fathom("G2 V", SUNLIKE, parallax=(20.0, 0.2), use_parallax=True)
    assert joined.median("distance_pc") == pytest.approx(50.0, abs=0.3)
    assert joined.error("distance_pc") == pytest.approx(0.5, abs=0.06)
    assert joined.median("abs_mag_v") < alone.median("abs_mag_v")
    assert joined.parallax_sigma == pytest.approx(fathom("G2 V", SUNLIKE, parallax=(20.0, 0.2)).parallax_sigma, abs=0.1)
    far = fathom("G2 V", SUNLIKE, parallax=(5.0, 0.2))
    assert far.parallax_sigma > 2.5
    assert any("farther" in c and "more luminous" in c for c in far.cautions)
    weak = fathom("G2 V", SUNLIKE, parallax=(0.2, 0.2), use_parallax=True)
    assert weak.row()["distance_pc"] == alone.row()["distance_pc"]
    assert any("compared but not combined" in c for c in weak.cautions)


def test_same_seed_same_answer_whatever_the_neighbours():
    alone = fathom("K2 III", {"V": 6.0, "B": 7.2}, n_samples=1000)
    requests = [{"source": t, "photometry": {"V": 7.0, "B": 7.5, "Ks": 5.0}} for t in ("A0 V", "G5 V")]
    requests.insert(1, {"source": "K2 III", "photometry": {"V": 6.0, "B": 7.2}})
    among = fathom_many(requests, n_samples=1000)[1]
    assert among.percentiles == alone.percentiles
    assert fathom("K2 III", {"V": 6.0, "B": 7.2}, n_samples=1000, seed=1).percentiles != alone.percentiles
    other = fathom("K2 III", {"V": 6.0, "B": 7.2}, n_samples=4000, seed=1)
    assert other.median("distance_pc") == pytest.approx(alone.median("distance_pc"), rel=0.04)


def test_stratified_numbers():
    u = stratified_numbers(500, 3)
    assert u.shape == (12, 500)
    for row in u:
        assert (np.sort((row * 500).astype(int)) == np.arange(500)).all()
    assert not np.array_equal(u[0], u[1])


def test_many_keeps_order_and_carries_errors():
    out = fathom_many(
        [
            Request("G2 V", SUNLIKE, name="one"),
            {"source": "G2", "photometry": SUNLIKE},
            {"source": "G2 V", "photometry": {"V": 99}},
            {"source": "G2 V", "photometry": SUNLIKE, "colour": "red"},
            {"source": "K0 III", "photometry": {"Ks": 5.0}, "name": "last"},
        ],
        n_samples=500,
        keep_samples=True,
        with_budget=False,
    )
    assert [type(o).__name__ for o in out] == ["Fathoming", "RequestError", "RequestError", "RequestError", "Fathoming"]
    assert "luminosity class" in str(out[1]) and "magnitude" in str(out[2]) and "star 4" in str(out[3])
    assert out[0].name == "one" and out[4].name == "last"
    assert out[0].budget == () and out[0].samples["distance_pc"].shape == (500,)
    assert fathom_many([]) == []


@pytest.mark.parametrize(
    ("call", "words"),
    [
        (lambda: fathom("hello", SUNLIKE), "MK notation"),
        (lambda: fathom("DA2", SUNLIKE), "white dwarf"),
        (lambda: fathom("G2", SUNLIKE), "luminosity class"),
        (lambda: fathom(3.5, SUNLIKE), "MK type or an assignment"),
        (lambda: fathom(Assignment(file="x.fits", status="refused", reason="a galaxy"), SUNLIKE), "a galaxy"),
        (lambda: fathom("G2 V", {}), "give at least V"),
        (lambda: fathom("G2 V", SUNLIKE, parallax=(5.0, 0.0)), "greater than zero"),
        (lambda: fathom("G2 V", SUNLIKE, parallax=(5.0, -1.0)), "greater than zero"),
        (lambda: fathom("G2 V", SUNLIKE, parallax="near"), "in mas"),
        (lambda: fathom("G2 V", SUNLIKE, parallax=(float("nan"), 1.0)), "finite"),
        (lambda: fathom("G2 V", SUNLIKE, rv=9.0), "outside 2 to 6"),
        (lambda: fathom("G2 V", SUNLIKE, rv="standard"), "R_V"),
        (lambda: fathom("G2 V", SUNLIKE, ebv=(-0.1, 0.02)), "negative"),
        (lambda: fathom("G2 V", SUNLIKE, ebv=(0.1, -0.02)), "not negative"),
        (lambda: fathom("G2 V", SUNLIKE, ebv=(0.1,)), "value and error"),
        (lambda: fathom("G2 V", SUNLIKE, ra_deg=10.0, dec_deg=95.0), "not on the sky"),
        (lambda: fathom("G2 V", SUNLIKE, scale="guess"), "no distance scale"),
        (lambda: fathom("G2 V", SUNLIKE, prior="guess"), "no prior"),
        (lambda: fathom("G2 V", SUNLIKE, n_samples=10), "out of range"),
        (lambda: fathom("M9 III", {"Ks": 5.0}), "published intrinsic colour"),
    ],
)
def test_refusals_are_one_sentence(call, words):
    with pytest.raises(RequestError) as error:
        call()
    assert words in str(error.value)
    assert "\n" not in str(error.value)
    assert isinstance(error.value, StarfathomError)


def test_row_has_the_columns_and_rounds():
    row = fathom("A2 V", Photometry(V=(7.31, 0.01), B=(7.42, 0.01))).row()
    assert list(row) == [c[0] for c in COLUMNS]
    assert row["distance_lo95_pc"] < row["distance_lo_pc"] < row["distance_pc"] < row["distance_hi_pc"]
    assert row["distance_hi_pc"] < row["distance_hi95_pc"]
    assert row["distance_pc"] == round(row["distance_pc"], 2)
    assert row["scale"] == "starfathom" and row["prior"] == "bright"
    assert np.isnan(row["parallax_sigma"]) and row["group_outlier"] is False
    assert "one colour" in row["cautions"].lower()


def test_quantities_carry_units():
    import astropy.units as u

    f = fathom("G2 V", SUNLIKE)
    assert f.distance.unit == u.pc and f.distance.value == f.median("distance_pc")
    assert f.ebv.unit == f.a_v.unit == f.abs_mag_v.unit == u.mag
    assert f.teff.unit == u.K and f.angular_diameter.unit == u.mas
    assert f.luminosity.to_value(u.W) == pytest.approx(10 ** f.median("log_lum_lsun") * 3.828e26)
    assert f.radius.to_value(u.m) == pytest.approx(f.median("radius_rsun") * 6.957e8)
    low, high = f.interval("distance_pc", 95)
    assert low == f.percentiles["distance_pc"][0] and high == f.percentiles["distance_pc"][4]
    assert np.percentile(f.samples["distance_pc"], 16) == pytest.approx(f.interval("distance_pc")[0], rel=1e-3)
    with pytest.raises(ValueError, match="68 and 95"):
        f.interval("distance_pc", 90)
    assert "pc" in str(f) and "Rsun" in str(f)
    assert isinstance(f, Fathoming)


def test_types_on_the_grid():
    cells, share = cells_of_range(50.0, 3.0, 52.0, 3.0)
    assert len(cells) == 9 and share.sum() == pytest.approx(1)
    cells, _ = cells_of_range(50.0, 3.0, 50.0, 4.0)
    assert len(cells) == 11
    cells, share = cells_of_assignment(typed((("G2", "V", 3.0), ("G5", "IV", 1.0))))
    assert set(cells) == {int(cell_of(42.0, 5.0)), int(cell_of(45.0, 4.0))}
    assert sorted(share) == pytest.approx([0.25, 0.75])
    for text, code in (("K0 IIIb", 3.3), ("G8 IIIa", 2.7), ("M1 IIIab", 2.9), ("G2 V", 5.0), ("G5 III-IV", 3.5)):
        assert fine_lum_code(MKType.parse(text)) == code
    assert t_code_of("K7") == 57
    # K5, K7, M0 are consecutive: a quarter of a step is one cell
    assert int(cell_of(57.0, 5.0)) - int(cell_of(55.0, 5.0)) == 4 * 51


def test_suffix_and_range_change_the_distance():
    d = {
        t: fathom(t, {"V": 6.0, "B": 7.0}).median("distance_pc") for t in ("K0 IIIa", "K0 III", "K0 IIIb", "K0 III/IV")
    }
    assert d["K0 IIIa"] > d["K0 III"] > d["K0 IIIb"]
    wide = fathom("K0 III/IV", {"V": 6.0, "B": 7.0})
    assert dict((r.step, r.sigma_mag) for r in wide.budget)["class"] > 0.2


@pytest.mark.parametrize(
    ("source", "photometry", "words"),
    [
        ("M2 Iab", {"V": 2.0, "B": 4.1}, "bright giants"),
        ("M4 III", {"V": 5.0, "B": 6.6}, "vary"),
        ("B2 V e", {"V": 5.0, "B": 5.0}, "Emission"),
        ("A0 V p", {"V": 5.0, "B": 5.0}, "peculiar"),
        ("G2 V + K0 III", {"V": 5.0, "B": 5.8}, "composite"),
        ("B0 V", {"V": 9.0, "B": 10.0}, "dust is thick"),
        ("G2 V", {"V": 5.0}, "prior's alone"),
        ("A5 Ia", {"V": 5.0, "B": 5.1}, "published scales"),
        ("sdF5", {"V": 9.0, "B": 9.4}, "metal-weak"),
    ],
)
def test_cautions(source, photometry, words):
    said = fathom(source, photometry).cautions
    assert any(words in c for c in said), said
    assert all(c.endswith(".") for c in said)


def test_cautions_of_a_plain_star_are_few():
    f = fathom("G2 V", {"V": 8.0, "B": 8.65, "J": 6.8, "H": 6.51, "Ks": 6.44})
    assert f.cautions == ()


def test_cautions_from_flags_and_scale():
    f = fathom(typed(flags=("emission", "metal-weak")), SUNLIKE)
    assert sum("Emission" in c or "metal-weak" in c for c in f.cautions) == 2
    assert any("fills in" in c for c in fathom("G2 IV", SUNLIKE, scale="schmidt-kaler").cautions)
    unused = fathom("M9 III", {"V": 10.0, "B": 11.5, "Ks": 2.5})
    assert unused.bands == ("B", "V")
    assert any("Ks" in c for c in unused.cautions)


def test_exports_match():
    import starfathom.distance as package

    for name in package.__all__:
        assert getattr(package, name) is not None
    assert set(package.__all__) == set(package._HOME)
    with pytest.raises(AttributeError, match="nothing"):
        _ = package.nothing


def test_scatter_has_the_tail_it_says():
    f = fathom("K0 III", {"V": (6.0, 0.001)}, ebv=(0.0, 0.001), rv=3.1, n_samples=20000)
    scale, cell = load_scale(), int(cell_of(50.0, 3.0))
    width = np.hypot(np.hypot(scale.sigma[cell], scale.mean_err[cell]), scale.slope[cell] * scale.bv_scatter[cell])
    beyond = np.mean(np.abs(f.samples["abs_mag_v"] - np.median(f.samples["abs_mag_v"])) > 2.5 * width)
    # a Gaussian has 0.012 there; a tenth of the stars scatter two and a half times wider
    assert 0.017 < beyond < 0.05


def test_two_equal_routes_meet_halfway_with_their_correlation():
    # 0.3 mag each, correlation 0.35: the mean of the two, and 0.3 sqrt((1 + 0.35)/2) = 0.2465 mag
    source = typed(abs_mag_v=4.3, abs_mag_v_err=0.3, abs_mag_v_ok=True)
    f = fathom(source, {"V": (8.0, 0.001)}, ebv=(0.0, 0.001), rv=3.1, scale="mamajek", n_samples=20000)
    assert f.median("abs_mag_v") == pytest.approx(4.55, abs=0.01)
    assert np.std(f.samples["abs_mag_v"]) == pytest.approx(0.2465, abs=0.006)


def test_redder_is_cooler_and_the_correction_follows():
    plain, red = (fathom("K0 V", {"V": (6.0, 0.01), "B": (6.0 + c, 0.01)}) for c in (0.816, 0.90))
    # 0.084 mag at -0.5 per mag: 4 % cooler
    assert red.median("teff_k") / plain.median("teff_k") == pytest.approx(np.exp(-0.5 * 0.08), abs=0.012)
    for f, sign in ((plain, 1), (fathom("B2 V", {"V": 6.0, "B": 5.8}), -1)):
        bc = 4.74 - 2.5 * f.samples["log_lum_lsun"] - f.samples["abs_mag_v"]
        # a warmer K star needs less correction, a hotter B star more
        assert sign * np.corrcoef(bc, np.log(f.samples["teff_k"]))[0, 1] > 0.9


def test_an_odd_colour_moves_the_luminosity_only_so_far():
    scale, cell = load_scale(), int(cell_of(55.0, 3.0))
    f = fathom("K5 III", {"V": (1.0, 0.01), "B": (1.0 + 2.1, 0.01)}, ebv=(0.0, 0.001))
    reach = abs(scale.slope[cell]) * 3 * scale.bv_scatter[cell]
    assert f.median("abs_mag_v") > scale.mean[cell] - reach - 0.3


def test_without_a_colour_no_thick_cloud_stands_within_the_local_bubble():
    f = fathom("G2 V", {"V": (10.0, 0.02)})
    assert np.percentile(f.samples["distance_pc"], 2.5) > 45.0


def test_few_samples_never_make_a_narrow_interval():
    """A B0 dwarf reddened by 3.8 mag at 50 pc: type, colour and dust agree badly; the scale's own scatter remains."""
    found = fathom("B0 V", Photometry(V=(10.0, 0.02), B=(13.5, 0.02)), seed=3)
    low, high = found.interval("distance_pc")
    assert (high - low) / (2 * found.median("distance_pc")) > 0.15
    assert any("agree badly" in caution for caution in found.cautions)
