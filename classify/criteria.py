"""The trade's criteria: ratios and indices of measured features, what they tell, and the types they point to.

A criterion is a row of ``data/criteria.ecsv``. Its value comes from the bulk line measurement with an error; it is
usable where its features are on the spectrum, their lines part at the spectrum's line spread, and what it needs is
significantly there. Where not, it is absent: NaN, and not usable.

A scale says how a criterion runs with type: its mean and spread at every subtype and luminosity class. Published
scales (``data/criteria_scales.ecsv``) are taken where there are any, the rest is learned from typed stars by a local
regression in type and class. A scale gives each criterion's likelihood over the whole plane of types, and from that
what it points to by itself.
"""

from __future__ import annotations

import csv
from dataclasses import dataclass
from functools import lru_cache
from pathlib import Path

import numpy as np
from numpy.typing import ArrayLike, NDArray

from starfathom.classify.assignment import Criterion
from starfathom.classify.errors import RequestError
from starfathom.classify.lines.direct import BulkLines
from starfathom.classify.lines.features import FeatureTable
from starfathom.templates.subtypes import (
    LUM_CODES,
    STEPS,
    T_CODES,
    class_of,
    nearest_subtype,
    step_of,
    t_code_from_step,
)

FloatArray = NDArray[np.float64]
BoolArray = NDArray[np.bool_]

DATA = Path(__file__).parent / "data"
#: A feature counts as there at this many of its own standard deviations, floor included.
DETECTION_SIGMA = 3.0
#: Forms a criterion may take.
FORMS = ("log", "share", "difference", "value", "width", "index", "index_ratio")
_WIDTH_INDEX = 1          # width at 20 % depth
#: Flux calibrations ripple: the same stars on two instruments differ by 1 to 2 % over some 80 A, mostly where the
#: standard star had its Balmer lines. Relative error of a pseudo-continuum whose side bands are that far apart; a
#: straight line follows the ripple the better, the closer they are.
RIPPLE, RIPPLE_ANGSTROM = 0.012, 80.0
_LUM = np.array(LUM_CODES)


@dataclass(frozen=True)
class CriterionRule:
    """One row of the table of criteria; see its header for the meaning of the columns."""

    name: str
    label: str
    form: str
    numerator: tuple[str, ...]
    denominator: tuple[str, ...]
    t_lo: float
    t_hi: float
    tells: str
    coarsest_fwhm: float
    floor: float
    citation: str

    @property
    def features(self) -> tuple[str, ...]:
        """Names of all features it rests on."""
        return self.numerator + self.denominator


def _rows(name: str) -> list[dict[str, str]]:
    with (DATA / name).open(newline="", encoding="utf-8") as stream:
        return list(csv.DictReader(line for line in stream if not line.startswith("#")))


@lru_cache(maxsize=1)
def load_criteria() -> tuple[CriterionRule, ...]:
    """All criteria in the order of the table."""
    found = []
    for row in _rows("criteria.ecsv"):
        if row["form"] not in FORMS:
            raise RequestError(f"criterion {row['name']}: the form {row['form']!r} is not one of {', '.join(FORMS)}")
        found.append(CriterionRule(
            row["name"], row["label"], row["form"], tuple(row["numerator"].split("+")),
            tuple(x for x in row["denominator"].split("+") if x), float(row["t_lo"]), float(row["t_hi"]),
            row["tells"], float(row["coarsest_fwhm"]), float(row["floor"]), row["citation"]))
    return tuple(found)


def criterion_names() -> tuple[str, ...]:
    """Names of the criteria, in the order of all arrays here."""
    return tuple(rule.name for rule in load_criteria())


def measure_criteria(lines: BulkLines) -> tuple[FloatArray, FloatArray, BoolArray]:
    """Values, errors (one standard deviation) and usability of every criterion, each (n spectra, k criteria).

    Errors combine those of the equivalent widths with each rule's floor and the ripple of flux calibrations under
    windows with distant side bands, in quadrature. NaN where not usable.
    """
    rules = load_criteria()
    n = lines.ew.shape[0]
    values, errors = np.full((n, len(rules)), np.nan), np.full((n, len(rules)), np.nan)
    usable = np.zeros((n, len(rules)), bool)
    for k, rule in enumerate(rules):
        value, error, ok = _measure(rule, lines)
        ok = ok & np.isfinite(value) & np.isfinite(error) & (error > 0)
        ok &= lines.fwhm_angstrom <= rule.coarsest_fwhm
        values[ok, k], errors[ok, k], usable[:, k] = value[ok], error[ok], ok
    return values, errors, usable


@lru_cache(maxsize=8)
def _ripple(features: FeatureTable) -> FloatArray:
    """(f,) relative error of each pseudo-continuum from the ripple of flux calibrations."""
    out = []
    for feature in features:
        blue, red = (float(np.mean(b)) if b else float(np.mean(feature.window)) for b in (feature.blue, feature.red))
        out.append(RIPPLE * min(1.0, ((red - blue) / RIPPLE_ANGSTROM) ** 2))
    return np.array(out)


def _sum(lines: BulkLines, names: tuple[str, ...], floor: float) -> tuple[FloatArray, FloatArray, BoolArray]:
    index = [lines.features.index_of(name) for name in names]
    ripple = (_ripple(lines.features) * lines.width)[:, index]
    ew, variance = lines.ew[:, index].sum(axis=1), (lines.ew_err[:, index] ** 2 + ripple**2).sum(axis=1)
    return ew, np.sqrt(variance + floor**2), np.asarray(lines.ok[:, index].all(axis=1), bool)


def _measure(rule: CriterionRule, lines: BulkLines) -> tuple[FloatArray, FloatArray, BoolArray]:
    with np.errstate(invalid="ignore", divide="ignore"):
        if rule.form in ("index", "index_ratio"):
            return _index(rule, lines)
        if rule.form == "width":
            k = lines.features.index_of(rule.numerator[0])
            width, error = lines.width_at[:, k, _WIDTH_INDEX], lines.width_at_err[:, k, _WIDTH_INDEX]
            return width, np.hypot(error, rule.floor), lines.ok[:, k] & (width > 0)
        top, top_err, ok = _sum(lines, rule.numerator, rule.floor)
        if rule.form == "value":
            return top, top_err, ok
        base, base_err, base_ok = _sum(lines, rule.denominator, rule.floor)
        ok = ok & base_ok
        if rule.form == "difference":
            return top - base, np.hypot(top_err, base_err), ok
        top_there, base_there = top >= DETECTION_SIGMA * top_err, base >= DETECTION_SIGMA * base_err
        if rule.form == "log":
            return (np.log10(top / base), np.hypot(top_err / top, base_err / base) / np.log(10.0),
                    ok & top_there & base_there)
        # a share stays defined when one of the two is absent; below zero an equivalent width says "absent"
        t, b = np.maximum(top, 0.0), np.maximum(base, 0.0)
        total = t + b
        error = np.hypot(b * top_err, t * base_err) / total**2
        # where one is absent the linear error vanishes with it; half a sigma of the other stands in
        error = np.hypot(error, 0.5 * np.minimum(top_err, base_err) / total)
        return t / total, error, ok & (top_there | base_there)


def _index(rule: CriterionRule, lines: BulkLines) -> tuple[FloatArray, FloatArray, BoolArray]:
    k = lines.features.index_of(rule.numerator[0])
    ratio, error = 1.0 - lines.ew[:, k] / lines.width[:, k], lines.ew_err[:, k] / lines.width[:, k]
    ok = lines.ok[:, k]
    if rule.form == "index":
        return ratio, np.hypot(error, rule.floor), ok
    m = lines.features.index_of(rule.denominator[0])
    base, base_err = 1.0 - lines.ew[:, m] / lines.width[:, m], lines.ew_err[:, m] / lines.width[:, m]
    error, base_err = np.hypot(error, rule.floor), np.hypot(base_err, rule.floor)
    value = np.log10(np.maximum(ratio, 1e-3) / np.maximum(base, 1e-3))
    good = ok & lines.ok[:, m] & (ratio > 2 * error) & (base > 2 * base_err)
    return value, np.hypot(error / ratio, base_err / base) / np.log(10.0), good


# Scales -------------------------------------------------------------------------------------------------------------

#: Width of the local regression: in temperature steps and in luminosity-class code, and how far it may be widened.
_STEP_WIDTH, _LUM_WIDTH = 1.5, 0.8
_WIDENINGS = (1.0, 1.6, 2.6)
_LEAST_STARS = 4.0
_ROBUST = 3.0


@dataclass(frozen=True)
class CriterionScales:
    """How each criterion runs with type; plain arrays, to be kept in an ``.npz``.

    Attributes
    ----------
    names : (k,) criteria, as :func:`criterion_names`
    mean, spread : (k, s, 8) value and its one-sigma spread at each of ``SUBTYPES`` x ``CLASSES``, NaN out of reach
    stars : (k, s, 8) effective number of stars behind each cell; 0 where the scale is published
    published : (k, s, 8) the cell comes from a published scale
    """

    names: NDArray[np.str_]
    mean: FloatArray
    spread: FloatArray
    stars: FloatArray
    published: BoolArray

    def arrays(self) -> dict[str, NDArray[np.generic]]:
        """Everything as plain arrays, for ``numpy.savez``."""
        return {f"criteria_{k}": np.asarray(v) for k, v in vars(self).items()}

    @classmethod
    def from_arrays(cls, arrays: dict[str, NDArray[np.generic]]) -> CriterionScales:
        """Inverse of :meth:`arrays`; ``arrays`` may hold more."""
        return cls(**{k: np.asarray(arrays[f"criteria_{k}"]) for k in cls.__dataclass_fields__})


def learn_criterion_scales(values: FloatArray, errors: FloatArray, t_code: ArrayLike, lum_code: ArrayLike,
                           weights: ArrayLike | None = None, *, published: bool = True) -> CriterionScales:
    """Learn the scales from typed stars.

    Parameters
    ----------
    values, errors : (n, k) of :func:`measure_criteria`, NaN where not usable
    t_code, lum_code : (n,) types; stars without either are left out
    weights : (n,) trust in each star's type; default 1
    published : let published scales replace what was learned where there are any
    """
    rules = load_criteria()
    step, lum = step_of(t_code), np.asarray(lum_code, float)
    trust = np.ones(step.size) if weights is None else np.asarray(weights, float)
    typed = np.isfinite(step) & np.isfinite(lum) & (trust > 0)
    shape = (len(rules), STEPS.size, _LUM.size)
    mean, spread, stars = np.full(shape, np.nan), np.full(shape, np.nan), np.zeros(shape)
    for k in range(len(rules)):
        # over all types, not only where the criterion tells: a value that also fits elsewhere must be known to
        use = typed & np.isfinite(values[:, k]) & np.isfinite(errors[:, k])
        if use.sum() >= 2 * _LEAST_STARS:
            mean[k], spread[k], stars[k] = _local(values[use, k], errors[use, k], step[use], lum[use], trust[use],
                                                  STEPS)
    is_published = np.zeros(shape, bool)
    if published:
        _put_published(mean, spread, stars, is_published)
    return CriterionScales(np.array(criterion_names()), mean, spread, stars, is_published)


def _local(value: FloatArray, error: FloatArray, step: FloatArray, lum: FloatArray, trust: FloatArray,
           at: FloatArray) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Local-linear regression on (step, class) at every cell of ``at`` x classes: mean, spread, effective stars."""
    cells = (at.size, _LUM.size)
    mean, spread, count = np.full(cells, np.nan), np.full(cells, np.nan), np.zeros(cells)
    typical = np.median(error)
    weight_of_error = 1.0 / (1.0 + (error / max(typical, 1e-12)) ** 2)
    for widening in _WIDENINGS:
        d_step = (step - at[:, None]) / (_STEP_WIDTH * widening)
        d_lum = (lum - _LUM[:, None]) / (_LUM_WIDTH * min(widening, 1.6))
        near = np.exp(-0.5 * d_step**2)[:, None, :] * np.exp(-0.5 * d_lum**2)[None, :, :]
        base = (near * trust * weight_of_error).reshape(-1, value.size)
        x, y = np.broadcast_to(d_step[:, None, :], near.shape), np.broadcast_to(d_lum[None, :, :], near.shape)
        x, y = x.reshape(base.shape), y.reshape(base.shape)
        w = base
        for _ in range(3):
            # a ridge on the slopes keeps them sober where stars lie on one side only
            total = w.sum(axis=1)
            terms = (np.ones_like(x), x, y)
            matrix = np.array([[(w * p * q).sum(axis=1) for q in terms] for p in terms])
            matrix[1, 1] += 0.15 * total
            matrix[2, 2] += 0.15 * total
            vector = np.array([(w * p * value).sum(axis=1) for p in terms])
            solvable = total > 1e-6
            safe = np.where(solvable[:, None, None], np.moveaxis(matrix, 2, 0), np.eye(3))
            coefficient = np.linalg.solve(safe, np.where(solvable[:, None], vector.T, 0.0)[:, :, None])[:, :, 0]
            residual = value - (coefficient[:, :1] + coefficient[:, 1:2] * x + coefficient[:, 2:] * y)
            with np.errstate(invalid="ignore", divide="ignore"):
                rms = np.sqrt((w * residual**2).sum(axis=1) / total)
                far = np.abs(residual) / (_ROBUST * rms[:, None])
            w = base / np.clip(np.nan_to_num(far), 1.0, 1e3) ** 2
        effective = w.sum(axis=1) ** 2 / np.maximum((w**2).sum(axis=1), 1e-300)
        # stars that stand where the cell is, not merely under the far wing of the kernel
        reach = base.sum(axis=1)
        good = (effective >= _LEAST_STARS) & (reach >= 1.0) & np.isfinite(rms)
        own = np.sqrt((w * np.minimum(error, 3 * typical) ** 2).sum(axis=1) / np.maximum(w.sum(axis=1), 1e-300))
        inner = np.sqrt(np.maximum(rms**2 * (1.0 + 2.0 / np.maximum(effective, 1.0)) - own**2, (0.3 * rms) ** 2))
        fresh = good.reshape(cells) & np.isnan(mean)
        mean[fresh] = coefficient[:, 0].reshape(cells)[fresh]
        spread[fresh] = (inner * widening**0.5).reshape(cells)[fresh]
        count[fresh] = effective.reshape(cells)[fresh]
    return mean, spread, count


@lru_cache(maxsize=1)
def published_scales() -> dict[str, tuple[tuple[float, float, float, float, float], ...]]:
    """Published scales by criterion: (t_code, value, scatter, lum_lo, lum_hi), in order of t_code."""
    out: dict[str, list[tuple[float, float, float, float, float]]] = {}
    for row in _rows("criteria_scales.ecsv"):
        out.setdefault(row["name"], []).append(tuple(  # type: ignore[arg-type]
            float(row[c]) for c in ("t_code", "value", "scatter", "lum_lo", "lum_hi")))
    return {name: tuple(sorted(points)) for name, points in out.items()}


def _put_published(mean: FloatArray, spread: FloatArray, stars: FloatArray, flag: BoolArray) -> None:
    names = criterion_names()
    for name, points in published_scales().items():
        k = names.index(name)
        for lo, hi in {p[3:] for p in points}:
            mine = np.array([p[:3] for p in points if p[3:] == (lo, hi)])
            steps = step_of(mine[:, 0])
            cells = np.flatnonzero((STEPS >= steps[0] - 1e-9) & (STEPS <= steps[-1] + 1e-9))
            classes = np.flatnonzero((_LUM >= lo) & (_LUM <= hi))
            grid = np.ix_(np.array([k]), cells, classes)
            mean[grid] = np.interp(STEPS[cells], steps, mine[:, 1])[None, :, None]
            spread[grid] = np.interp(STEPS[cells], steps, mine[:, 2])[None, :, None]
            stars[grid], flag[grid] = 0.0, True


def compare_with_published(values: FloatArray, errors: FloatArray, t_code: ArrayLike, lum_code: ArrayLike,
                           ) -> list[dict[str, float | str]]:
    """Measured stars against the published scales: per criterion, the number of stars, the median difference
    (measured minus published) and its 68 % half width, in the criterion's own unit."""
    t, lum = np.asarray(t_code, float), np.asarray(lum_code, float)
    names = criterion_names()
    out: list[dict[str, float | str]] = []
    for name, points in published_scales().items():
        k = names.index(name)
        found = []
        for lo, hi in {p[3:] for p in points}:
            mine = np.array([p[:3] for p in points if p[3:] == (lo, hi)])
            use = np.isfinite(values[:, k]) & (t >= mine[0, 0]) & (t <= mine[-1, 0]) & (lum >= lo) & (lum <= hi)
            found.append(values[use, k] - np.interp(step_of(t[use]), step_of(mine[:, 0]), mine[:, 1]))
        difference = np.concatenate(found)
        if difference.size:
            low, middle, high = np.percentile(difference, [16, 50, 84])
            out.append({"criterion": name, "stars": float(difference.size), "difference": float(middle),
                        "half_width_68": float(high - low) / 2})
    return out


def log_likelihood(scales: CriterionScales, values: FloatArray, errors: FloatArray, *,
                   clip_sigma: float = 4.0) -> FloatArray:
    """Log likelihood of each criterion over the plane of types, (n, k, s, 8).

    Gaussian in the criterion with spread and error in quadrature, its chi2 levelling off beyond ``clip_sigma`` so
    that one broken measurement cannot veto a type. 0 everywhere where the criterion is absent; where the scale does
    not reach a type, the criterion's own best level minus half of ``clip_sigma`` squared stands in, so that being out
    of a criterion's range neither wins nor rules out.
    """
    with np.errstate(invalid="ignore", divide="ignore"):
        variance = scales.spread**2 + errors[:, :, None, None] ** 2
        chi2 = (values[:, :, None, None] - scales.mean) ** 2 / variance
        limit = clip_sigma**2
        level = -0.5 * limit * (1.0 - np.exp(-chi2 / limit)) - 0.5 * np.log(variance)
    known = np.isfinite(level)
    best = np.where(known, level, -np.inf).max(axis=(2, 3), keepdims=True)
    present = np.isfinite(values)[:, :, None, None] & np.isfinite(best)
    floor = np.where(np.isfinite(best), best, 0.0) - 0.25 * limit
    return np.where(present, np.where(known, level, floor), 0.0)


def point(scales: CriterionScales, values: FloatArray, errors: FloatArray, t_guess: ArrayLike, *,
          reach_steps: float = 8.0) -> tuple[FloatArray, FloatArray, FloatArray, FloatArray]:
    """What each criterion points to on its own: (t_code, t_err, lum_code, lum_err), each (n, k), NaN for nothing.

    A temperature criterion speaks within its own range and within ``reach_steps`` of ``t_guess`` (n,), all classes
    alike; a luminosity criterion over the classes at types about ``t_guess`` (+-1 step). One that leaves the range
    as open as it was says nothing.
    """
    rules = load_criteria()
    guess = step_of(t_guess)
    n, k = values.shape
    out = [np.full((n, k), np.nan) for _ in range(4)]
    spread2 = scales.spread**2
    for j, rule in enumerate(rules):
        rows = np.flatnonzero(np.isfinite(values[:, j]) & np.isfinite(guess))
        if rows.size == 0:
            continue
        known = np.isfinite(scales.mean[j])
        variance = spread2[j] + errors[rows, j, None, None] ** 2
        with np.errstate(invalid="ignore"):
            level = -0.5 * (values[rows, j, None, None] - scales.mean[j]) ** 2 / variance - 0.5 * np.log(variance)
        if not known.any():
            continue
        level = np.where(known, level, -np.inf)
        like = np.exp(level - level.max(axis=(1, 2), keepdims=True))
        distance = np.abs(STEPS[None, :] - guess[rows, None])
        if rule.tells in ("temperature", "both"):
            inside = (distance <= reach_steps) & known.any(axis=1)[None, :] & _in_range(rule)[None, :]
            share = like.sum(axis=2) / np.maximum(known.sum(axis=1), 1)[None, :]
            # subtypes are not evenly spaced: each stands for the steps half way to its neighbours
            middle, sigma, prior = _moments(share * inside * _CELL_WIDTH, inside * _CELL_WIDTH, STEPS)
            says = sigma < 0.7 * prior
            out[0][rows, j] = np.where(says, t_code_from_step(middle), np.nan)
            out[1][rows, j] = np.where(says, sigma, np.nan)
        if rule.tells in ("luminosity", "both"):
            near = np.exp(-0.5 * distance**2) * _in_range(rule)[None, :]
            weight = (like * near[:, :, None]).sum(axis=1)
            open_ = (known[None] * near[:, :, None]).sum(axis=1)
            with np.errstate(invalid="ignore", divide="ignore"):
                share = np.where(open_ > 0.2, weight / open_, 0.0)
            middle, sigma, prior = _moments(share, (open_ > 0.2).astype(float), _LUM)
            says = sigma < 0.75 * prior
            # the best class, not the mean: at the ends of the scale a mean could never reach V or Ia
            best = _LUM[share.argmax(axis=1)]
            out[2][rows, j] = np.where(says, best, np.nan)
            out[3][rows, j] = np.where(says, np.hypot(sigma, middle - best), np.nan)
    return out[0], out[1], out[2], out[3]


_CELL_WIDTH = np.gradient(STEPS)


def _in_range(rule: CriterionRule) -> BoolArray:
    return np.asarray((T_CODES >= rule.t_lo) & (T_CODES <= rule.t_hi))


def _moments(weight: FloatArray, prior: FloatArray, x: FloatArray) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Mean and standard deviation of ``x`` under ``weight`` (n, m), and the standard deviation under ``prior``."""
    with np.errstate(invalid="ignore", divide="ignore"):
        def of(w: FloatArray) -> tuple[FloatArray, FloatArray]:
            total = w.sum(axis=1)
            mean = (w * x).sum(axis=1) / total
            return mean, np.sqrt((w * (x - mean[:, None]) ** 2).sum(axis=1) / total)

        mean, sigma = of(weight)
        return mean, np.maximum(sigma, 0.15), of(prior)[1]


def criteria_for(lines: BulkLines, i: int = 0, *, scales: CriterionScales | None = None,
                 t_guess: float = float("nan"), weights: FloatArray | None = None) -> tuple[Criterion, ...]:
    """The usable criteria of spectrum ``i`` as evidence, with what they point to when ``scales`` are given.

    Only criteria that speak within their type range of ``t_guess`` are listed (all, when it is NaN). ``weights``
    (k,) are the shares each has in the posterior.
    """
    values, errors, usable = measure_criteria(lines)
    rules = load_criteria()
    pointing = None
    if scales is not None and np.isfinite(t_guess):
        pointing = point(scales, values[i:i + 1], errors[i:i + 1], np.array([t_guess]))
    out = []
    for k, rule in enumerate(rules):
        if not usable[i, k] or (np.isfinite(t_guess) and not rule.t_lo - 1.0 <= t_guess <= rule.t_hi + 1.0):
            continue
        t, t_err, lum, lum_err = (float(p[0, k]) for p in pointing) if pointing else (float("nan"),) * 4
        words = []
        if np.isfinite(t):
            words.append(nearest_subtype(t))
        if np.isfinite(lum):
            words.append(class_of(lum))
        out.append(Criterion(
            name=rule.label, value=float(values[i, k]), error=float(errors[i, k]), points_to=" ".join(words),
            weight=0.0 if weights is None else float(weights[k]), t_code=t, t_code_err=t_err, lum_code=lum,
            lum_code_err=lum_err, features=rule.features, source=rule.citation))
    return tuple(out)
