"""What injected library stars say: how often a class comes out right at a line spread, a coverage and an S/N.

The trials of :mod:`starfathom.advice_recipe` are kept star by star, so that a question about any types is answered by
counting the stars like them. Counts are smoothed towards those of a wider neighbourhood, made to rise with S/N and to
fall with the width of the line spread (isotonic regression), and interpolated between the set-ups tried.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from functools import cache, cached_property
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

FloatArray = NDArray[np.float64]

DATA_FILE = Path(__file__).parent / "data" / "advice.npz"
#: Classes as counted: supergiants together.
GROUPS = ("I", "II", "III", "IV", "V")
#: Columns of the trials' outcomes.
P_GROUP, STEP, STEP_ERR, ABS_MAG, ABS_MAG_ERR, ABS_MAG_OK = slice(0, 5), 5, 6, 7, 8, 9
#: Widest line spread the classifier was tried at, angstrom; finer than the finest tried counts as that.
WIDEST_FWHM = 17.0
_WIDTHS = (2.0, 3.0, 4.5, 7.0)       # of the neighbourhood, subtypes
_STARS_WANTED = 8.0
#: Below so many stars like it a type is not spoken of.
FEWEST_STARS = 2.0
_SHRINK = 1.5                        # stars' worth of weight of the wider neighbourhood
_CHANCE_SNR = 1.0                    # where nothing is known
_CLASS_CHANCE, _PAIR_CHANCE = 0.25, 0.5


def group_of(lum_code: float) -> int:
    """Index into :data:`GROUPS` of a luminosity code."""
    return int(np.digitize(lum_code, (1.8, 2.5, 3.5 + 1e-6, 4.5)))


def logit(p: FloatArray | float) -> FloatArray:
    """ln(p / (1 - p)), p kept within 0.01 to 0.99."""
    q = np.clip(p, 0.01, 0.99)
    return np.log(q / (1 - q))


def expit(x: FloatArray | float) -> FloatArray:
    """Inverse of :func:`logit`."""
    return np.asarray(1 / (1 + np.exp(-np.asarray(x, float))))


def rising(y: FloatArray) -> FloatArray:
    """Least-squares rising fit along the last axis (isotonic regression by its max-min formula: the axis is short)."""
    k = y.shape[-1]
    sums = np.concatenate([np.zeros((*y.shape[:-1], 1)), np.cumsum(y, axis=-1)], axis=-1)
    out = np.empty_like(y)
    for at in range(k):
        least = [np.min([(sums[..., j + 1] - sums[..., i]) / (j + 1 - i) for j in range(at, k)], axis=0)
                 for i in range(at + 1)]
        out[..., at] = np.max(least, axis=0)
    return out


@dataclass(frozen=True)
class Setup:
    """A way of observing: line spread (FWHM, angstrom), range (angstrom) and S/N per angstrom."""

    fwhm_angstrom: float
    range_angstrom: tuple[float, float]
    snr: float

    def at(self, **changes: float | tuple[float, float]) -> Setup:
        """The same with changes."""
        return replace(self, **changes)      # type: ignore[arg-type]


@dataclass(frozen=True)
class Near:
    """Stars like a type: their weights (n,), how many they count for, and how far they reach in subtypes."""

    weight: FloatArray
    count: float
    reach: float


@dataclass(frozen=True)
class Trials:
    """The injected stars (n) and what came out at each line spread (f), coverage (c) and S/N (s).

    ``outcome`` (n, f, c, s, 10) has the columns named above, NaN where the spectrum was refused. ``prediction`` holds
    the coefficients of :func:`predicted`.
    """

    step: FloatArray
    lum_code: FloatArray
    hip: NDArray[np.int64]
    fwhm: FloatArray
    coverage: FloatArray
    snr: FloatArray
    outcome: FloatArray
    prediction: FloatArray

    @cached_property
    def group(self) -> NDArray[np.int64]:
        """Class as counted, index into :data:`GROUPS`."""
        return np.array([group_of(float(v)) for v in self.lum_code])

    @cached_property
    def right(self) -> FloatArray:
        """1 where the class came out right, (n, f, c, s)."""
        p = np.nan_to_num(self.outcome[..., P_GROUP], nan=-1.0)
        found = p.argmax(axis=-1)
        return ((found == self.group[:, None, None, None]) & (p.max(axis=-1) > 0)).astype(float)

    def near(self, step: float, group: int, without: int | None = None) -> Near:
        """Stars of one class about a subtype; the neighbourhood widens until it holds enough."""
        own = (self.group == group).astype(float)
        if without is not None:
            own[without] = 0.0
        best = Near(own * 0, 0.0, 0.0)
        for width in _WIDTHS:
            weight = own * np.exp(-0.5 * ((self.step - step) / width) ** 2)
            weight[np.abs(self.step - step) > 2.5 * width] = 0.0
            best = Near(weight, float(weight.sum()), width)
            if best.count >= _STARS_WANTED:
                break
        return best

    def rate(self, hits: FloatArray, weight: FloatArray, wide: FloatArray) -> FloatArray:
        """Share of ``hits`` (n, f, c, s) among the stars, smoothed and made orderly: (f, c, s)."""
        floor = np.tensordot(wide, hits, 1) / max(float(wide.sum()), 1e-9)
        raw = (np.tensordot(weight, hits, 1) + _SHRINK * floor) / (float(weight.sum()) + _SHRINK)
        return orderly(raw)

    def class_rates(self, step: float, group: int, without: int | None = None) -> FloatArray:
        """How often the class comes out right for stars of a type, (f, c, s)."""
        near = self.near(step, group, without)
        wide = np.exp(-0.5 * ((self.step - step) / 12.0) ** 2)
        if without is not None:
            wide[without] = 0.0
        return self.rate(self.right, near.weight, wide)

    def pair_hits(self, d_step: float, rival: int) -> FloatArray:
        """1 where the star looks more like itself than like a rival ``d_step`` later in class group ``rival``."""
        o = self.outcome
        p = np.clip(np.nan_to_num(o[..., P_GROUP], nan=0.0), 1e-6, 1)
        own = np.take_along_axis(p, np.broadcast_to(self.group[:, None, None, None, None], (*p.shape[:-1], 1)), -1)
        lead = np.log(own[..., 0] / p[..., rival])
        off = o[..., STEP] - self.step[:, None, None, None]
        err = np.maximum(np.nan_to_num(o[..., STEP_ERR], nan=9.0), 0.4)
        lead = lead + 0.5 * ((off - d_step) ** 2 - off ** 2) / err ** 2
        return np.where(np.isfinite(lead), lead > 0, False).astype(float)

    def pair_rates(self, step: float, group: int, rival_step: float, rival_group: int) -> tuple[FloatArray, Near]:
        """How often stars of a type are told from a rival type, (f, c, s); and which stars were counted."""
        near = self.near(step, group)
        hits = self.pair_hits(rival_step - step, rival_group)
        wide = (self.group == group) * np.exp(-0.5 * ((self.step - step) / 12.0) ** 2)
        return self.rate(hits, near.weight, wide), near

    def subtype_errors(self, step: float, group: int) -> FloatArray:
        """68 % error of the subtype for stars like a type, of nearby classes too, (f, c, s)."""
        weight = np.exp(-0.5 * ((self.step - step) / 5.0) ** 2) * np.where(self.group == group, 1.0, 0.4)
        off = np.abs(self.outcome[..., STEP] - self.step[:, None, None, None])
        off = np.where(np.isfinite(off), off, 9.0)
        order = np.argsort(off, axis=0)
        total = np.cumsum(weight[order], axis=0)
        at = (total < 0.683 * total[-1]).sum(axis=0)
        found = np.take_along_axis(np.take_along_axis(off, order, 0), at[None], 0)[0]
        return 1 / orderly(1 / np.maximum(found, 0.1))

    def between(self, values: FloatArray, setup: Setup, chance: float | None) -> float:
        """A quantity (f, c, s) at a set-up: linear in ln S/N and ln FWHM, coverages mixed by what they hold.

        ``chance`` is the value where nothing is seen, at S/N 1; None holds the value of the poorest S/N tried.
        """
        # a rare class is found less often than by chance: then nothing seen is no better than the poorest tried
        lowest = values[..., :1] if chance is None else np.minimum(chance, values[..., :1])
        table = np.concatenate([lowest, values], axis=-1)
        snr = np.concatenate([[_CHANCE_SNR], self.snr])
        blue, red = coverage_shares(setup.range_angstrom)
        share = np.array([blue * red, blue * (1 - red), red * (1 - blue)])
        mixed = np.tensordot(table, share, axes=(1, 0)) + (1 - share.sum()) * table[:, 0, :1]
        x = np.log(np.clip(setup.snr, snr[0], snr[-1]))
        column = np.array([np.interp(x, np.log(snr), row) for row in mixed])
        f = np.log(np.clip(setup.fwhm_angstrom, self.fwhm[0], WIDEST_FWHM))
        grid = np.log(self.fwhm)
        if f > grid[-1]:      # beyond the widest tried, the slope goes on
            slope = (column[-1] - column[-2]) / (grid[-1] - grid[-2])
            return float(column[-1] + slope * (f - grid[-1]))
        return float(np.interp(f, grid, column))

    def class_rate(self, step: float, group: int, setup: Setup) -> float:
        """How often the class comes out right for stars of a type at a set-up."""
        return float(expit(self.between(logit(self.class_rates(step, group)), setup, float(logit(_CLASS_CHANCE)))))

    def pair_rate(self, rates: FloatArray, setup: Setup) -> float:
        """A pair's rates at a set-up."""
        return float(expit(self.between(logit(rates), setup, float(logit(_PAIR_CHANCE)))))

    def subtype_error(self, step: float, group: int, setup: Setup) -> float:
        """68 % error of the subtype for stars of a type at a set-up."""
        return float(np.exp(self.between(np.log(self.subtype_errors(step, group)), setup, None)))


def orderly(values: FloatArray) -> FloatArray:
    """Rising with S/N (last axis), not rising with FWHM (first axis)."""
    out = rising(values)
    out = np.moveaxis(rising(np.moveaxis(out, 0, -1)[..., ::-1])[..., ::-1], -1, 0)
    return rising(out)


def coverage_shares(range_angstrom: tuple[float, float]) -> tuple[float, float]:
    """Share of the blue (3850-4900 A) and of the rest (4900-6800 A) that a range holds."""
    def share(lo: float, hi: float) -> float:
        return float(np.clip((min(hi, range_angstrom[1]) - max(lo, range_angstrom[0])) / (hi - lo), 0, 1))

    # from 3950 A on all but a percent of the information is there (H and K are saturated in most types)
    return min(1.0, share(3850, 4900) / 0.95), min(1.0, share(4900, 6800) / 0.95)


# Prediction for one star -------------------------------------------------------------------------------------------

def state_rate(rates: FloatArray, shares: FloatArray) -> FloatArray:
    """logit of the class rate of a star that may be of several classes: ``rates`` (5, ...), ``shares`` (5,)."""
    return logit(np.tensordot(shares, rates, 1))


def features(best: FloatArray, rate_now: FloatArray, rate_then: FloatArray) -> FloatArray:
    """What a prediction rests on, (..., 5): the star's own certainty, and what the trials promise now and then."""
    own, gain = logit(best), rate_then - rate_now
    return np.stack([np.ones_like(gain + own), own + 0 * gain, gain + 0 * own, rate_now + 0 * own + 0 * gain,
                     own * gain], axis=-1)


def predicted(trials: Trials, best: float, rate_now: float, rate_then: float) -> float:
    """Probability that the class comes out right at a set-up, for a star whose best class now has probability ``best``.

    ``rate_now`` and ``rate_then`` are logits from :func:`state_rate`. Logistic regression on the trials, each star
    predicted by the others.
    """
    x = features(np.array(best), np.array(rate_now), np.array(rate_then))
    return float(expit(x @ trials.prediction))


def prediction_table(trials: Trials) -> tuple[FloatArray, FloatArray, NDArray[np.int64]]:
    """Features, successes and star of every pair of a poorer and a better set-up among the trials."""
    n, f, c, s = trials.outcome.shape[:4]
    where = np.array([(i, j, k) for i in range(f) for j in range(c) for k in range(s)])
    better = np.array([[(b[0] <= a[0]) & ((b[1] == a[1]) | (b[1] == 0)) & (b[2] >= a[2]) for b in where]
                       for a in where])
    right = trials.right.reshape(n, -1)
    state = trials.outcome.reshape(n, -1, 10)
    x, y, star = [], [], []
    for i in range(n):
        for a in range(len(where)):
            shares = state[i, a, P_GROUP]
            if not np.isfinite(shares).all():
                continue
            rates = np.array([trials.class_rates(float(state[i, a, STEP]), g, i) for g in range(len(GROUPS))])
            q = state_rate(rates.reshape(len(GROUPS), -1), shares)
            then = np.flatnonzero(better[a])
            x.append(features(shares.max(), q[a], q[then]))
            y.append(right[i, then])
            star.append(np.full(len(then), i))
    return np.concatenate(x), np.concatenate(y), np.concatenate(star)


def fit_logistic(x: FloatArray, y: FloatArray, ridge: float = 1.0) -> FloatArray:
    """Coefficients of a logistic regression, by Newton's method with a slight ridge."""
    beta = np.zeros(x.shape[1])
    penalty = ridge * np.eye(x.shape[1])
    for _ in range(30):
        p = expit(x @ beta)
        hessian = (x * (p * (1 - p))[:, None]).T @ x + penalty
        step = np.linalg.solve(hessian, x.T @ (y - p) - penalty @ beta)
        beta = beta + step
        if np.abs(step).max() < 1e-8:
            break
    return beta


@cache
def load_trials(path: Path = DATA_FILE) -> Trials:
    """The shipped trials."""
    with np.load(path) as z:
        a = {name: z[name] for name in z.files}
    return Trials(a["step"].astype(float), a["lum_code"].astype(float), a["hip"].astype(int), a["fwhm"].astype(float),
                  a["coverage"].astype(float), a["snr"].astype(float), a["outcome"].astype(float),
                  a["prediction"].astype(float))
