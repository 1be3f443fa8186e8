"""The H-R diagram: points, counts, note, and what is drawn."""

import matplotlib
import numpy as np
import pytest

from starfathom.classify.errors import RequestError
from starfathom.distance import draw_hr_diagram, fathom_many
from starfathom.distance.hrd import class_word, hr_points, radius_line, sample_note, sequence

matplotlib.use("Agg")


@pytest.fixture(scope="module")
def stars():
    kinds = ("G2 V", "A0 V", "K0 III", "K5 III", "M2 Iab", "G8 IV", "B5 V")
    out = fathom_many([{"source": k, "photometry": {"V": 7.0, "B": 7.8}, "name": k} for k in kinds], n_samples=500)
    return [*out, RequestError("no magnitude")]


def test_points(stars):
    points = hr_points(stars)
    assert points.names[0] == "G2 V" and len(points.names) == 7
    assert points.counts == {"V": 3, "III": 2, "Iab": 1, "IV": 1}
    assert 10 ** points.log_teff[0] == pytest.approx(stars[0].median("teff_k"))
    assert points.log_lum[2] == stars[2].median("log_lum_lsun")
    assert points.log_lum_err[2] == stars[2].error("log_lum_lsun")
    assert points.log_teff_err[0] == pytest.approx(stars[0].error("teff_k") / stars[0].median("teff_k") / np.log(10))
    assert points.note == ""


def test_class_words():
    assert class_word("K0 III-IV") in ("III", "IV")
    assert class_word("B0.5 Ia") == "Ia"
    assert class_word("G2") == "" and class_word("nonsense") == ""


def test_note():
    assert sample_note({"V": 9}) == ""
    assert "5 of 10" in sample_note({"V": 4, "IV": 1, "III": 4, "Ib": 1}) and "brightest" in sample_note(
        {"V": 5, "III": 5}
    )
    assert "nearest" in sample_note({"V": 19, "III": 1}) and "0 of 12" in sample_note({"V": 12})
    middling = sample_note({"V": 8, "III": 2})
    assert "brightest favour giants" in middling and "nearest dwarfs" in middling


def test_equal_radius():
    # the Sun's radius at the Sun's temperature is one solar luminosity; ten times the radius a hundred times the light
    assert radius_line(1.0, np.log10(5772.0)) == pytest.approx(0.0)
    assert radius_line(10.0, np.log10(5772.0)) == pytest.approx(2.0)
    assert radius_line(1.0, np.log10(11544.0)) == pytest.approx(4 * np.log10(2))


def test_sequences_lie_where_they_should():
    log_t, log_l = sequence(5.0, 42.0, 42.0)
    assert log_t[0] == pytest.approx(np.log10(5770), abs=1e-3)
    assert log_l[0] == pytest.approx(0.03, abs=0.1)
    giants = sequence(3.0, 50.0, 50.0)[1][0]
    supergiants = sequence(1.0, 50.0, 50.0)[1][0]
    assert log_l[0] < giants < supergiants


def test_picture(stars):
    ax = draw_hr_diagram(stars)
    left, right = ax.get_xlim()
    bottom, top = ax.get_ylim()
    assert left > right, "temperature increases to the left"
    assert top > bottom
    words = {t.get_text() for t in ax.texts}
    assert {"V", "III", "Ib", "Ia"} <= words
    assert any("R_\\odot" in w for w in words)
    legend = [t.get_text() for t in ax.get_legend().get_texts()]
    assert "V  (3)" in legend and "III  (2)" in legend
    points = hr_points(stars)
    assert (points.log_lum < top).all() and (points.log_lum > bottom).all()
    assert (points.log_teff < left).all() and (points.log_teff > right).all()
    assert [t.get_text() for t in ax.get_xticklabels()][1:3] == ["10000", "7000"] or "10000" in [
        t.get_text() for t in ax.get_xticklabels()
    ]


def test_picture_on_given_axes_and_of_nothing():
    import matplotlib.pyplot as plt

    _, mine = plt.subplots()
    assert draw_hr_diagram([], ax=mine) is mine
    assert mine.get_legend() is None
    many = fathom_many([{"source": "G2 V", "photometry": {"V": 8.0}} for _ in range(12)], n_samples=200)
    assert "0 of 12" in draw_hr_diagram(many).get_title()
    plt.close("all")
