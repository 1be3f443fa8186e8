"""What a library star can teach: labels made steady, absolute magnitudes freed of dust, gaps filled."""

from __future__ import annotations

import csv
from dataclasses import dataclass
from functools import lru_cache
from typing import Any

import numpy as np
from numpy.typing import NDArray

from starfathom.templates.library import DATA, Library
from starfathom.templates.subtypes import step_of, t_code_of

FloatArray = NDArray[np.float64]
BoolArray = NDArray[np.bool_]

#: Share of a catalogue label kept when a star's published parameters say something else (see :func:`steady_steps`).
LABEL_SHARE = 0.3
_NEAR_PC = 70.0      # within this no dust is taken out
_R_V = 3.1


@lru_cache(maxsize=1)
def _colour_tables() -> dict[float, tuple[FloatArray, FloatArray]]:
    with (DATA / "bv0.csv").open() as fh:
        rows = list(csv.DictReader(line for line in fh if not line.startswith("#")))
    out = {}
    for column, lum_code in (("bv0_ib", 1.6), ("bv0_iii", 3.0), ("bv0_v", 5.0)):
        have = [r for r in rows if r[column]]
        out[lum_code] = (step_of([t_code_of(r["subtype"]) for r in have]), np.array([float(r[column]) for r in have]))
    return out


def intrinsic_b_v(step: FloatArray, lum_code: FloatArray) -> FloatArray:
    """(B-V)_0 by step and class, linear between Ib, III and V (sources in ``templates/data/bv0.csv``)."""
    table = _colour_tables()
    ib, iii, v = (np.interp(step, *table[code]) for code in (1.6, 3.0, 5.0))
    upper = iii + (v - iii) * np.clip((lum_code - 3.0) / 2.0, 0, 1)
    lower = ib + (iii - ib) * np.clip((lum_code - 1.6) / 1.4, 0, 1)
    return np.where(lum_code > 3.0, upper, lower)


@dataclass(frozen=True)
class Lessons:
    """Labels and targets of n library stars, plain arrays; NaN where a star teaches nothing."""

    step: FloatArray          # label made steady
    label_step: FloatArray    # label as catalogued
    lum_code: FloatArray
    trust: FloatArray         # weight of the type label, 0 = not used for types
    abs_mag_v: FloatArray
    abs_mag_v_err: FloatArray
    log_g: FloatArray
    fe_h: FloatArray
    group: NDArray[Any]       # stars of one group never stand on both sides of a cross-validation


def steady_steps(step: FloatArray, teff_k: FloatArray, log_g: FloatArray, fe_h: FloatArray, use: BoolArray
                 ) -> FloatArray:
    """Catalogue subtypes drawn towards a smooth function of published Teff, log g and [Fe/H].

    The catalogue types of F, G and K stars scatter by 1.3 to 1.9 subtypes about such a function (a Gaussian process,
    leave-one-out), most of it mixed literature quality. Each star keeps ``LABEL_SHARE`` of its own label, and all of
    it earlier than B9, later than K7 or without parameters, where parameters are rarer or poorer than types.
    """
    out = step.copy()
    have = use & np.isfinite(step) & np.isfinite(teff_k) & np.isfinite(log_g) & (teff_k > 0)
    if have.sum() < 60:
        return out
    x = np.column_stack([8 * np.log10(teff_k[have]), 0.8 * log_g[have], 0.8 * np.nan_to_num(fe_h[have])])
    y = step[have] - 40.0
    d2 = ((x[:, None] - x[None]) ** 2).sum(-1)
    kernel = 900.0 * np.exp(-d2 / (2 * 2.5 ** 2)) + 4.0 * np.exp(-d2 / (2 * 0.6 ** 2))
    weight = np.ones(len(y))
    for _ in range(3):
        inverse = np.linalg.inv(kernel + np.diag(1.3 ** 2 / weight))
        smooth = y - (inverse @ y) / np.diag(inverse)          # leave-one-out
        weight = 1 / (1 + ((y - smooth) / 3.5) ** 2)
    smooth = smooth + 40.0
    own = step[have]
    cool_or_hot = (own < 19) | (own > 56)
    out[have] = np.where(cool_or_hot, own, (1 - LABEL_SHARE) * smooth + LABEL_SHARE * own)
    return out


def lessons_from(library: Library, *, vetted: bool = True) -> Lessons:
    """Labels and targets of a library, by the recorded rules above; nothing is looked up by name.

    ``vetted`` False leaves the labels as catalogued.
    """
    c = library.catalogue
    step, lum = step_of(c["t_code"]), c["lum_code"].astype(float)
    hot_emission = (c["kind"] == "emission") & (step < 26)     # emission is the rule among early supergiants
    normal = (c["kind"] == "normal") | hot_emission
    typed = normal & np.isfinite(step) & np.isfinite(lum)
    trust = np.where(typed, np.where(c["doubtful"], 0.5, 1.0), 0.0)
    # a label that the published gravity contradicts outright is not used
    with np.errstate(invalid="ignore"):
        contradicted = ((lum > 4.4) & (c["log_g"] < 3.0)) | ((lum < 3.4) & (c["log_g"] > 4.35) & (step > 30))
        contradicted |= (c["log_g"] > 4.9) & (step < 30)       # a hot subdwarf under a B label
    trust = np.where(contradicted & vetted, 0.0, trust)
    steady = steady_steps(step, c["teff_k"], c["log_g"], c["fe_h"], typed) if vetted else step.copy()
    parallax, error = c["parallax_mas"], c["e_parallax_mas"]
    with np.errstate(invalid="ignore", divide="ignore"):
        distance = np.where(parallax > 0, 1000.0 / parallax, np.nan)
        excess = np.clip(c["b_v"] - intrinsic_b_v(steady, np.where(np.isfinite(lum), lum, 4.0)), 0, None)
        dust = np.where(distance < _NEAR_PC, 0.0, excess)
        abs_mag = c["v_mag"] + 5 * np.log10(parallax / 100.0) - _R_V * dust
        abs_mag_err = np.hypot(2.1715 * error / parallax, 0.03 + _R_V * 0.03 * (dust > 0))
        good = (parallax > 0) & (error / parallax < 0.15) & np.isfinite(abs_mag) & normal & np.isfinite(step)
    good &= np.isfinite(lum)
    group = np.where(c["hip"] > 0, c["hip"].astype(str), c["star"])
    return Lessons(steady, step, lum, trust, np.where(good, abs_mag, np.nan), np.where(good, abs_mag_err, np.nan),
                   c["log_g"].astype(float), c["fe_h"].astype(float), group)


def fill_gaps(flat: FloatArray, valid: BoolArray, step: FloatArray, lum_code: FloatArray) -> FloatArray:
    """Rectified spectra with invalid pixels replaced by the mean of stars of like label (n, p)."""
    if valid.all():
        return flat
    s = np.where(np.isfinite(step), step, 40.0)
    lum = np.where(np.isfinite(lum_code), lum_code, 4.0)
    rows = np.flatnonzero(~valid.all(axis=1))
    near = np.exp(-0.5 * ((s[rows, None] - s) / 2.0) ** 2 - 0.5 * ((lum[rows, None] - lum) / 0.7) ** 2) + 1e-9
    weight = near @ valid.astype(float)
    mean = (near @ np.where(valid, flat, 0.0)) / np.maximum(weight, 1e-12)
    out = flat.copy()
    out[rows] = np.where(valid[rows], flat[rows], mean)
    return out
