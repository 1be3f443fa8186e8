"""A small, quick reader for this package's own ECSV tables, so that no astropy import is needed to look a number up."""

from __future__ import annotations

import csv
from functools import cache
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

DATA = Path(__file__).parent / "data"


@cache
def read_table(name: str) -> dict[str, NDArray]:
    """Columns of ``data/<name>.ecsv``: float64 where every entry is a number (``nan`` for none), else text.

    The files are comma-delimited ECSV; sources stand in the description of each column or in a column of their own.
    """
    with open(DATA / f"{name}.ecsv", encoding="utf-8", newline="") as file:
        rows = list(csv.reader(line for line in file if not line.startswith("#")))
    names, body = rows[0], rows[1:]
    out: dict[str, NDArray] = {}
    for i, column in enumerate(names):
        text = [row[i] for row in body]
        try:
            out[column] = np.array([float(t) for t in text])
        except ValueError:
            out[column] = np.array(text)
    return out
