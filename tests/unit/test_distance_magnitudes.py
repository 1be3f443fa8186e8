"""Magnitudes at the door: what is taken, and the one sentence for what is not."""

import pytest
from hypothesis import given
from hypothesis import strategies as st

from starfathom.classify.errors import RequestError
from starfathom.distance.photometry import BANDS, DEFAULT_ERROR_MAG, Photometry


def test_values_errors_and_order():
    p = Photometry(V=(9.81, 0.03), B=10.44)
    assert list(p) == ["B", "V"]
    assert p["V"] == (9.81, 0.03)
    assert p["B"] == (10.44, DEFAULT_ERROR_MAG) == (10.44, 0.02)
    assert len(p) == 2
    assert dict(Photometry({"g": [12, 0.1]})) == {"g": (12.0, 0.1)}
    assert repr(p) == "Photometry(B=(10.44, 0.02), V=(9.81, 0.03))"


@pytest.mark.parametrize(
    ("bands", "words"),
    [
        ({"W1": 5.0}, "W1"),
        ({"v": 5.0}, "case matters"),
        ({"V": "bright"}, "not a number"),
        ({"V": None}, "not a number"),
        ({"V": float("nan")}, "not a finite number"),
        ({"V": float("inf")}, "not a finite number"),
        ({"V": 99.99}, "not a magnitude a star can have"),
        ({"V": 35.1}, "expected -30 to 35"),
        ({"V": -30.5}, "expected -30 to 35"),
        ({"V": (9.0, -0.01)}, "must not be negative"),
        ({"V": (9.0, 5.1)}, "too large"),
        ({"V": (9.0, float("nan"))}, "The error of V"),
        ({"V": (9.0, 0.1, 3)}, "3 numbers"),
    ],
)
def test_refusals_are_one_sentence(bands, words):
    with pytest.raises(RequestError) as error:
        Photometry(bands)
    text = str(error.value)
    assert words in text
    assert "\n" not in text and text.endswith(".")


def test_edges_are_taken():
    assert Photometry(V=(35.0, 5.0))["V"] == (35.0, 5.0)
    assert Photometry(V=(-30.0, 0.0))["V"] == (-30.0, 0.0)


@given(
    st.dictionaries(st.text(max_size=3), st.one_of(st.floats(), st.text(max_size=5), st.none(), st.tuples(st.floats())))
)
def test_nothing_but_a_request_error_comes_out(magnitudes):
    try:
        got = Photometry(magnitudes)
    except RequestError:
        return
    assert set(got) <= set(BANDS)
