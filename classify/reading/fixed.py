"""Numbers in fixed columns, as most programs write them, read all rows at once.

Parsing 12 000 numbers one by one takes 3 ms; when every row has its digits, points and signs in the same places,
each column of numbers is one matrix product.
"""

from __future__ import annotations

import re

import numpy as np

from starfathom.classify.spectrum import FloatArray

#: Fewest rows for which this pays, and longest row.
MIN_ROWS, MAX_ROW = 100, 240
#: Most digits whose whole-number value is exact in a float64 here.
MAX_DIGITS = 14
_NUMBER = re.compile(r"([+s-]?)(d*)(\.?)(d*)(?:[eE]([+s-]?)(d{1,3}))?")


def parse_fixed(body: bytes) -> FloatArray | None:
    """Numbers of shape (rows, columns), or None when the rows are not laid out alike.

    ``body`` holds digits, points, signs, exponents and blanks only. Numbers without exponent, and with one of up to 22
    decimal places, come out as ``float`` would read them; others within two units in the last place.
    """
    width = body.find(b"\n") + 1
    if not 4 <= width <= MAX_ROW:
        return None
    if not body.endswith(b"\n"):
        body += b"\n"
    rows, odd = divmod(len(body), width)
    if odd or rows < MIN_ROWS:
        return None
    grid = np.frombuffer(body, np.uint8).reshape(rows, width)
    low, high = grid.min(axis=0), grid.max(axis=0)
    layout = []
    for i, (a, b) in enumerate(zip(low.tolist(), high.tolist())):
        if 48 <= a and b <= 57:
            layout.append("d")
        elif a == b:
            layout.append(chr(a))
        elif a == 43 and b == 45 and not (grid[:, i] == 44).any():
            layout.append("s")
        elif a == 32 and b == 45 and np.isin(grid[:, i], (32, 45)).all():
            layout.append("s")  # a blank where others have a minus
        else:
            return None
    row = "".join(layout)
    if row[-1] != "\n":
        return None
    columns: list[FloatArray] = []
    for found in re.finditer(r"\S+", row):
        number = _NUMBER.fullmatch(found.group())
        if number is None or not 1 <= len(number.group(2) + number.group(4)) <= MAX_DIGITS:
            return None
        start = found.start()
        columns.append(_column(grid, start, number))
    return np.column_stack(columns) if columns else None


def _whole(grid: np.ndarray, at: list[int]) -> FloatArray:
    """The whole number that the digits in the places ``at`` make, each row."""
    weights = 10.0 ** np.arange(len(at) - 1, -1, -1)
    return (grid[:, at] @ weights) - 48.0 * weights.sum()


def _column(grid: np.ndarray, start: int, number: re.Match[str]) -> FloatArray:
    places = [start + i for group in (2, 4) for i in range(number.start(group), number.end(group))]
    values = _whole(grid, places)
    shift = -len(number.group(4))
    if number.group(6):
        power = _whole(grid, [start + i for i in range(number.start(6), number.end(6))])
        if number.group(5):
            power = np.where(grid[:, start + number.start(5)] == 45, -power, power)
        for k in np.unique(power):
            same = power == k
            values[same] = _scaled(values[same], int(k) + shift)
    else:
        values = _scaled(values, shift)
    if number.group(1):
        values = np.where(grid[:, start + number.start(1)] == 45, -values, values)
    return values


def _scaled(values: FloatArray, power: int) -> FloatArray:
    """``values`` times ten to ``power``; exact powers of ten divide, so that the result is rounded once."""
    if -22 <= power < 0:
        return values / 10.0**-power
    return values if power == 0 else values * float(f"1e{power}")
