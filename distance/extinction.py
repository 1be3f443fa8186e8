"""Extinction in each band per unit of the star's own colour excess, by temperature and R_V.

``data/extinction.ecsv`` holds the curve of Gordon et al. (2023, ApJ 950, 86) integrated over the passbands and an
observed spectrum of each temperature; ``extinction_recipe`` makes it. E(B-V) everywhere in this package is the excess
of the star itself, A_B - A_V; R_V is A_V/E(B-V) of a B0 star, so a cool star has a little more A_V for the same excess.
"""

from __future__ import annotations

from functools import cache

import numpy as np
from numpy.typing import ArrayLike, NDArray

from starfathom.distance.intrinsic import intrinsic
from starfathom.distance.photometry import BANDS
from starfathom.distance.tables import read_table

FloatArray = NDArray[np.float64]

TERMS = ("c00", "c10", "c20", "c30", "c01", "c11", "c02")
RV_MEAN, RV_SIGMA = (
    3.1,
    0.18,
)  #: prior of R_V: the usual mean, and its scatter between sightlines (Fitzpatrick & Massa 2007)
RV_RANGE = (2.5, 5.7)
_EBV_OF_TERMS_MAX = 2.5


@cache
def band_terms(band: str) -> FloatArray:
    """Coefficients of one band on the cells of the grid, shape (7, n_cells)."""
    table = read_table("extinction")
    mine = table["band"] == band
    x = np.log(table["teff_k"][mine])[::-1]
    ln_teff = intrinsic().ln_teff
    return np.stack([np.interp(ln_teff, x, table[term][mine][::-1]) for term in TERMS])


def evaluate(terms: FloatArray, rv: ArrayLike, ebv: ArrayLike) -> FloatArray:
    """A_band/E(B-V) from coefficients whose first axis is :data:`TERMS`; E(B-V) enters the small terms up to 2.5."""
    r = np.asarray(rv, float) - 3.1
    e = np.clip(np.asarray(ebv, float), 0.0, _EBV_OF_TERMS_MAX)
    return terms[0] + r * (terms[1] + r * (terms[2] + r * terms[3])) + e * (terms[4] + r * terms[5] + e * terms[6])


def ratio(band: str, teff_k: float, rv: float = RV_MEAN, ebv: float = 0.0) -> float:
    """A_band/E(B-V) for one star; raises ValueError for a band without extinction coefficients."""
    if band not in BANDS:
        raise ValueError(f"no extinction coefficients for band {band!r}")
    table = read_table("extinction")
    mine = table["band"] == band
    x = np.log(table["teff_k"][mine])[::-1]
    terms = np.array([np.interp(np.log(teff_k), x, table[term][mine][::-1]) for term in TERMS])
    return float(evaluate(terms, rv, ebv))
