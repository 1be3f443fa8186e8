"""Groups: common distance and reddening, outliers by name."""

import numpy as np
import pytest

from starfathom.distance import fathom_many, load_scale
from starfathom.distance.grid import cell_of
from starfathom.distance.groups import combine, find_outliers, of_the_others, weighted, without_one
from starfathom.distance.intrinsic import intrinsic
from starfathom.templates.subtypes import t_code_of

MODULUS = np.array([6.0, 6.2, 5.8, 6.1, 9.0])
ERRORS = np.array([0.3, 0.3, 0.3, 0.3, 0.3])
EBV = np.array([0.10, 0.12, 0.08, 0.10, 0.11])
EBV_ERR = np.full(5, 0.02)


def test_weighted_mean():
    mean, error = weighted(np.array([1.0, 2.0]), np.array([1.0, 2.0]))
    assert mean == pytest.approx((1 + 2 / 4) / 1.25)
    assert error == pytest.approx(1.25**-0.5)
    # scatter beyond the errors widens the result: chi2 = 50 for one degree of freedom
    _, error = weighted(np.array([0.0, 10.0]), np.array([1.0, 1.0]))
    assert error == pytest.approx(np.sqrt(0.5) * np.sqrt(50))
    assert weighted(np.array([3.0]), np.array([0.2])) == (3.0, pytest.approx(0.2))


def test_outlier_in_distance_and_in_reddening():
    assert find_outliers(MODULUS, ERRORS, EBV, EBV_ERR).tolist() == [False] * 4 + [True]
    red = EBV.copy()
    red[0] = 0.6
    even = np.full(5, 6.0)
    assert find_outliers(even, ERRORS, red, EBV_ERR).tolist() == [True] + [False] * 4
    assert not find_outliers(even, ERRORS, EBV, EBV_ERR).any()


def test_at_most_half_may_go():
    wild = np.array([1.0, 5.0, 9.0, 13.0])
    assert find_outliers(wild, np.full(4, 0.1), np.zeros(4), np.full(4, 0.1)).sum() == 2


def test_combine():
    got = combine("knot", list("abcde"), MODULUS, ERRORS, EBV, EBV_ERR)
    assert got is not None
    assert got.outliers == ("e",) and got.is_outlier == (False,) * 4 + (True,)
    assert got.distance_pc == pytest.approx(10 ** (0.2 * 6.025 + 1), rel=1e-9)
    # 0.15 mag from four stars, 0.05 shared
    assert got.distance_err_pc == pytest.approx(got.distance_pc * 0.2 * np.log(10) * np.hypot(0.15, 0.05))
    assert got.ebv == pytest.approx(0.10)
    assert got.ebv_err == pytest.approx(np.hypot(np.hypot(0.02, 0.03) / 2, 0.01))
    assert "knot: 4 stars" in str(got) and "apart from the rest: e" in str(got)


def test_what_the_others_say_leaves_the_star_out():
    keep = np.array([True, True, True, True, False])
    (plx, plx_err), (e, _) = without_one(0, keep, MODULUS, ERRORS, EBV, EBV_ERR)
    mu = np.mean([6.2, 5.8, 6.1])
    assert plx == pytest.approx(1000 / 10 ** (0.2 * mu + 1))
    assert plx_err / plx == pytest.approx(0.2 * np.log(10) * np.hypot(0.3 / np.sqrt(3), 0.05), rel=0.02)
    assert e == pytest.approx(0.10)


def test_excess_of_the_others():
    ebv, err = np.array([0.9, 0.10, 0.12, 0.11]), np.array([0.02, 0.02, 0.02, 0.02])
    value, error = of_the_others(1, ebv, err)
    assert value == pytest.approx(0.12)
    one = np.hypot(0.02, 0.03) / np.sqrt(3)
    assert error == pytest.approx(np.hypot(1.25 * one, 0.03))
    assert of_the_others(0, np.array([0.5, -0.1, -0.2, -0.1]), err)[0] == 0.0
    # a star without a colour has no say
    assert of_the_others(0, np.array([0.0, 5.0, 0.2, 0.3]), np.array([0.1, 9.0, 0.02, 0.02]))[0] == pytest.approx(
        0.25, abs=0.06
    )


@pytest.fixture(scope="module")
def cluster():
    """Eight stars at 200 pc behind E(B-V) 0.1, and one in front; M_V with the scale's own scatter."""
    scale, look, rng = load_scale(), intrinsic(), np.random.default_rng(8)
    requests = []
    for i, kind in enumerate(("B8 V", "A0 V", "A2 V", "F0 V", "F5 V", "G0 V", "G5 V", "K0 V", "G2 V")):
        subtype = kind.split()[0]
        cell = int(cell_of(t_code_of(subtype), 5.0))
        mu = 5 * np.log10(200 / 10) if i < 8 else 2.0
        ebv = 0.1 if i < 8 else 0.0
        v = scale.mean[cell] + scale.sigma[cell] * rng.standard_normal() + mu + 3.3 * ebv
        b = v + look.offset["B"][cell] + scale.bv_shift[cell] + ebv
        requests.append({"source": kind, "photometry": {"V": v, "B": b}, "name": f"s{i}", "group": "knot"})
    requests.append({"source": "G2 V", "photometry": {"V": 8.0, "B": 8.65}, "name": "lone"})
    return requests


def test_a_cluster_gets_one_distance(cluster):
    together = fathom_many(cluster, n_samples=1000)
    alone = fathom_many(cluster, n_samples=1000, common_groups=False)
    inside = together[:8]
    assert len({f.median("distance_pc") for f in inside}) == 1
    d, err = inside[0].group_distance_pc, inside[0].group_distance_err_pc
    assert abs(d - 200) < 2.5 * err and err < 0.1 * d
    assert inside[0].interval("distance_pc") == pytest.approx(
        (d * np.exp(-0.99446 * err / d), d * np.exp(0.99446 * err / d))
    )
    assert inside[0].group_ebv == pytest.approx(0.1, abs=0.03)
    assert all(f.error("distance_pc") < a.error("distance_pc") for f, a in zip(inside, alone))
    assert not any(f.group_outlier for f in inside)
    front = together[8]
    assert front.group_outlier and "stands apart from the group knot" in front.cautions[0]
    assert front.percentiles == alone[8].percentiles
    assert np.isnan(together[9].group_distance_pc)
    # the luminosity of each star follows the common distance
    star = inside[4]
    expected = cluster[4]["photometry"]["V"] - star.median("a_v") - (5 * np.log10(d) - 5)
    # the star without its possible companion is a little fainter than the light received
    assert expected - 0.05 < star.median("abs_mag_v") < expected + 0.35
    assert star.row()["group_distance_pc"] == round(d, 2)


def test_two_stars_are_no_group(cluster):
    pair = fathom_many(cluster[:2], n_samples=500)
    assert all(np.isnan(f.group_distance_pc) for f in pair)


def test_samples_of_members_are_kept_on_request(cluster):
    kept = fathom_many(cluster[:4], n_samples=500, keep_samples=True, with_budget=False)
    assert kept[0].samples["abs_mag_v"].shape == (500,)
    assert kept[0].budget == ()
