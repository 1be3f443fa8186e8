"""The budget adds up, and each step answers to what it is named after."""

import numpy as np
import pytest

from starfathom.classify.assignment import Assignment
from starfathom.distance import fathom
from starfathom.distance.budget import PER_CENT_PER_MAG, STEPS, budget_rows, draw_budget
from starfathom.templates.subtypes import CLASSES, SUBTYPES


def shares(f):
    return {row.step: row.sigma_mag for row in f.budget}


def assignment(cells):
    posterior = np.zeros((len(SUBTYPES), len(CLASSES)))
    for subtype, lum, p in cells:
        posterior[SUBTYPES.index(subtype), CLASSES.index(lum)] = p
    return Assignment(file="a.fits", status="typed", object_kind="star", mk_type=f"{cells[0][0]} {cells[0][1]}",
                      posterior=posterior, t_code=40.0, lum_code=5.0)  # fmt: skip


@pytest.mark.parametrize(
    ("source", "photometry"),
    [
        ("A2 V", {"V": 7.31, "B": 7.42}),
        ("K0 III", {"V": (9.0, 0.05), "B": (10.6, 0.05), "Ks": (6.0, 0.05)}),
        ("M2 Iab", {"V": 5.0}),
        (assignment([("G2", "V", 0.4), ("G5", "V", 0.3), ("G5", "IV", 0.2), ("G8", "III", 0.1)]), {"V": 9.0, "B": 9.7}),
    ],
)
def test_the_budget_adds_up_to_the_variance_of_the_samples(source, photometry):
    f = fathom(source, photometry)
    modulus = 5 * np.log10(f.samples["distance_pc"]) - 5
    parts = np.array([row.sigma_mag for row in f.budget[:-1]])
    total = f.budget[-1]
    assert [row.step for row in f.budget] == [*STEPS, "total"]
    assert total.sigma_mag == pytest.approx(modulus.std(), rel=1e-3)
    assert (parts**2).sum() == pytest.approx(total.sigma_mag**2, rel=0.02)
    assert sum(row.share for row in f.budget[:-1]) == pytest.approx(1.0, abs=0.02)
    assert (parts >= 0).all()
    assert total.per_cent == pytest.approx(46.0517 * total.sigma_mag, rel=1e-5)


def test_per_cent_of_a_tenth_of_a_magnitude():
    assert PER_CENT_PER_MAG * 0.1 == pytest.approx(4.605, abs=1e-3)


def test_a_type_as_given_has_no_error_of_type():
    got = shares(fathom("G2 V", {"V": 8.0, "B": 8.65}))
    assert got["subtype"] == 0 and got["class"] == 0
    assert got["scale scatter"] > 0.15
    assert 0.1 < got["binarity"] < 0.3


def test_subtype_and_class_are_told_apart():
    by_class = shares(fathom(assignment([("G8", "V", 0.5), ("G8", "III", 0.5)]), {"V": 9.0}, ebv=(0, 0.01)))
    # two classes five magnitudes apart, half and half: a standard deviation of about 2.4
    assert by_class["class"] == pytest.approx(2.4, abs=0.3)
    assert by_class["subtype"] < 0.2
    by_type = shares(fathom(assignment([("F0", "V", 0.5), ("K0", "V", 0.5)]), {"V": 9.0}, ebv=(0, 0.01)))
    assert by_type["subtype"] == pytest.approx(1.6, abs=0.4)
    assert by_type["class"] < 0.05


def test_photometry_answers_to_its_error():
    good = shares(fathom("B2 V", {"V": (8.0, 0.005), "B": (8.3, 0.005)}))
    poor = shares(fathom("B2 V", {"V": (8.0, 0.1), "B": (8.3, 0.1)}))
    assert good["photometry"] < 0.1
    # 0.1 mag in each band: the excess is off by 0.14, A_V by 3.1 times that, V itself by 0.1: 0.3 to 0.6
    assert 0.25 < poor["photometry"] < 0.65


def test_reddening_is_the_priors_without_a_colour():
    blind = shares(fathom("B2 V", {"V": (8.0, 0.005)}))
    seeing = shares(fathom("B2 V", {"V": (8.0, 0.005), "B": (8.3, 0.005)}))
    assert blind["reddening"] > 0.5
    assert seeing["reddening"] < 0.1


def test_law_answers_to_r_v():
    free = shares(fathom("B0 V", {"V": 9.0, "B": 9.7}))
    fixed = shares(fathom("B0 V", {"V": 9.0, "B": 9.7}, rv=3.1))
    assert free["extinction law"] == pytest.approx(0.18, abs=0.05)  # E = 1, sigma of R_V 0.18
    assert fixed["extinction law"] < 0.02


def test_rows_from_variances():
    rows = budget_rows(np.array([0.04, 0.0, 0.09, 0.0, 0.0, 0.0, 0.0, 0.0]))
    assert rows[0].sigma_mag == pytest.approx(0.2)
    assert rows[2].share == pytest.approx(9 / 13)
    assert rows[-1].sigma_mag == pytest.approx(0.13**0.5)
    assert budget_rows(np.zeros(8))[0].share == 0.0


def test_picture():
    import matplotlib

    matplotlib.use("Agg")
    import matplotlib.pyplot as plt

    f = fathom("K0 III", {"V": 9.0, "B": 10.1})
    ax = draw_budget(f.budget, title="a giant")
    assert [t.get_text() for t in ax.get_yticklabels()] == list(STEPS)
    assert len(ax.patches) == len(STEPS)
    assert ax.patches[2].get_width() == pytest.approx(f.budget[2].per_cent)
    _, mine = plt.subplots()
    assert draw_budget(f.budget, ax=mine) is mine
    plt.close("all")
