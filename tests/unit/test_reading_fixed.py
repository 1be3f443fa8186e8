"""Fixed columns are read as ``float`` reads them, or not at all."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from starfathom.classify.reading.fixed import MAX_DIGITS, MAX_ROW, MIN_ROWS, parse_fixed

RNG = np.random.default_rng(4)
N = 300


def rows(fmt: str, *columns: np.ndarray) -> bytes:
    return "".join(fmt % tuple(c) + "\n" for c in zip(*columns)).encode()


W = np.linspace(3800.0, 7400.0, N)
F = RNG.uniform(1, 9.9, N)


@pytest.mark.parametrize(
    "fmt,columns",
    [
        ("%.3f %.5f", (W, F)),
        ("%.3f   %.5e", (W, F * 1e-15)),
        ("%8.2f\t%11.4E", (W, F * 1e7)),
        ("  %.3f %+.5f  ", (W, F - 5)),
        ("%.3f % .5f", (W, F - 5)),
        ("%.0f %.4f", (W, F)),
        ("%.2f %.3e %.1e", (W, F * 10.0 ** RNG.integers(-9, 9, N), F)),
        ("%.3f %.5e\r", (W, F)),
        ("%.3f %.5e", (W, F * 1e-200)),
        ("%.4f %.9f", (W, F)),
    ],
    ids=str,
)
def test_same_as_float(fmt, columns):
    body = rows(fmt, *columns)
    found = parse_fixed(body)
    expected = np.array([[float(x) for x in line.split()] for line in body.splitlines()])
    assert found is not None and found.shape == expected.shape
    np.testing.assert_allclose(found, expected, rtol=5e-16, atol=0)
    if "e" not in fmt.lower():
        np.testing.assert_array_equal(found, expected)
    stripped = parse_fixed(body.rstrip(b"\n"))
    assert stripped is not None and stripped.shape == expected.shape


@pytest.mark.parametrize(
    "body",
    [
        rows("%.3f %.5g", W, F * 10.0 ** RNG.integers(-3, 3, N)),
        rows("%.3f %.5f", W * 2, F),
        rows("%9.3f %9.5f", W * 2, F),
        rows("%.3f %.5f", W, F)[:-3],
        rows("%.3f %.5f", W[: MIN_ROWS - 1], F),
        rows("%.3f %.17f", W, F),
        rows("%.3f" + " " * MAX_ROW + "%.5f", W, F),
        rows("%.3f 1.2.3 %.5f", W, F),
        rows("%.3f - %.5f", W, F),
        rows("%.3f e5 %.5f", W, F),
        b"",
        b"\n",
        b"12 34",
        b"\n" * 500,
    ],
    ids=range(14),
)
def test_anything_else_is_left_to_others(body):
    assert parse_fixed(body) is None


@settings(deadline=None, max_examples=200)
@given(
    st.lists(
        st.tuples(st.integers(0, 99999), st.integers(0, 10**6 - 1), st.integers(-30, 30), st.sampled_from("+-")),
        min_size=MIN_ROWS,
        max_size=MIN_ROWS + 20,
    ),
)
def test_any_digits(cells):
    body = "".join(f"{a:05d}.{b:06d} {s}{b:06d}.{a:05d}e{k:+03d}\n" for a, b, k, s in cells).encode()
    found = parse_fixed(body)
    expected = np.array([[float(x) for x in line.split()] for line in body.splitlines()])
    assert found is not None
    np.testing.assert_allclose(found, expected, rtol=5e-16, atol=0)
    np.testing.assert_array_equal(found[:, 0], expected[:, 0])


def test_the_limit_of_digits_is_exact():
    whole = RNG.integers(10 ** (MAX_DIGITS - 1), 10**MAX_DIGITS, N)
    found = parse_fixed("".join(f"{w} 1.0\n" for w in whole).encode())
    assert found is not None
    np.testing.assert_array_equal(found[:, 0], whole.astype(float))


@settings(deadline=None, max_examples=300)
@given(st.binary(max_size=30), st.integers(MIN_ROWS, MIN_ROWS + 3))
def test_repeated_junk_does_not_break_it(line, count):
    found = parse_fixed((line.replace(b"\n", b"") + b"\n") * count)
    assert found is None or np.isfinite(found).all() or b"e" in line.lower()
