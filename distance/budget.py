"""What each step added to the uncertainty of the distance: a variance decomposition that adds up.

The variance of the distance modulus over the posterior samples is shared out step by step, in a fixed order, by
least squares: each step is charged with the variance it explains beyond the steps before it (sequential sums of
squares), so no share is negative and together they are the whole. What is left once type, class, companion, scatter,
intrinsic colour and R_V are accounted for is what is not known about the dust; it is charged to the measured colours,
to their own scatter, and to the dust prior ("reddening") in the measure each leaves the excess open.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from starfathom.distance.extinction import RV_MEAN
from starfathom.distance.grid import CELL_LUM, CELL_STEP
from starfathom.distance.intrinsic import intrinsic
from starfathom.distance.sampler import Draws
from starfathom.distance.scale import Scale

FloatArray = NDArray[np.float64]

#: Steps in the order of the chain, with what a reader should understand by each.
STEPS: dict[str, str] = {
    "subtype": "which temperature subtype",
    "class": "which luminosity class",
    "scale scatter": "stars of one type differ; and the scale is known only so well",
    "binarity": "light of an unresolved companion",
    "photometry": "errors of the magnitudes, through brightness and colour",
    "intrinsic colour": "stars of one type differ in colour",
    "reddening": "dust the colours leave open, filled in by the prior",
    "extinction law": "R_V",
}
#: Distance changes by this many per cent per 0.01 mag, for small changes: 100 ln(10)/5.
PER_CENT_PER_MAG = 100.0 * np.log(10.0) / 5.0


@dataclass(frozen=True)
class BudgetRow:
    """One step: its standard deviation in mag of distance modulus, the same in per cent of distance, and its share."""

    step: str
    sigma_mag: float
    per_cent: float
    share: float


def _features(draws: Draws, scale: Scale, rows: slice) -> list[tuple[str, FloatArray]]:
    cell = draws.cell[:, rows]
    lum, step = CELL_LUM[cell], CELL_STEP[cell]
    colour, rv, ebv = draws.colour[:, rows], draws.rv[:, rows], draws.ebv[:, rows]
    c_b = intrinsic().offset["B"][cell]
    lum_in, step_in = lum / 5.0, step / 60.0
    return [
        ("class", lum_in), ("class", lum_in**2), ("class", lum_in**3), ("class", lum_in**4),
        ("subtype", step_in), ("subtype", step_in**2), ("subtype", step_in * lum_in), ("subtype", scale.mean[cell]),
        ("subtype", c_b),
        ("binarity", draws.companion[:, rows]),
        ("scale scatter", draws.scatter[:, rows]),
        ("intrinsic colour", colour), ("intrinsic colour", colour**2), ("intrinsic colour", scale.slope[cell] * colour),
        ("extinction law", rv), ("extinction law", (rv - RV_MEAN) * ebv),
        ("photometry", draws.v_noise[:, rows]),
    ]  # fmt: skip


def decompose(draws: Draws, scale: Scale, max_samples: int = 4000) -> FloatArray:
    """Variance in mag^2 that each of :data:`STEPS` has in the distance modulus, shape (n_stars, 8)."""
    every = max(1, draws.modulus.shape[1] // max_samples)
    rows = slice(None, None, every)
    named = _features(draws, scale, rows)
    x = np.stack([f for _, f in named], axis=1)
    x = x - x.mean(axis=2, keepdims=True)
    width = x.std(axis=2, keepdims=True)
    x = x / np.where(width > 1e-9, width, np.inf)
    y = draws.modulus[:, rows]
    y = y - y.mean(axis=1, keepdims=True)
    n = y.shape[1]
    gram = x @ x.transpose(0, 2, 1) / n
    size = gram.shape[1]
    gram[:, np.arange(size), np.arange(size)] += 1e-7
    along = (x @ y[:, :, None])[:, :, 0] / n
    root = np.linalg.cholesky(gram)
    explained = np.linalg.solve(root, along[:, :, None])[:, :, 0] ** 2
    # a feature with nothing new to say is left with the jitter alone on its diagonal
    explained = np.where(root[:, np.arange(size), np.arange(size)] > 3e-3, explained, 0.0)
    total = draws.modulus.var(axis=1)
    names = list(STEPS)
    out = np.zeros((len(total), len(names)))
    for i, (name, _) in enumerate(named):
        out[:, names.index(name)] += explained[:, i]
    out *= np.minimum(1.0, total / np.maximum(out.sum(axis=1), 1e-30))[:, None]
    rest = np.maximum(total - out.sum(axis=1), 0.0)
    out[:, names.index("reddening")] += rest * draws.prior_part
    data = rest * (1 - draws.prior_part)
    out[:, names.index("intrinsic colour")] += data * draws.own_part
    out[:, names.index("photometry")] += data * (1 - draws.own_part)
    return out


def budget_rows(variance: FloatArray) -> tuple[BudgetRow, ...]:
    """The table of one star from its row of :func:`decompose`, the last row being the total."""
    total = float(variance.sum())
    rows = [_row(name, float(v), total) for name, v in zip(STEPS, variance)]
    return (*rows, _row("total", total, total))


def _row(name: str, variance: float, total: float) -> BudgetRow:
    sigma = float(np.sqrt(variance))
    return BudgetRow(name, sigma, PER_CENT_PER_MAG * sigma, variance / total if total > 0 else 0.0)


def draw_budget(rows: tuple[BudgetRow, ...], ax=None, title: str = ""):
    """Bar picture of a budget on matplotlib axes ``ax`` (new ones when None); returns the axes."""
    import matplotlib.pyplot as plt

    if ax is None:
        _, ax = plt.subplots(figsize=(6.4, 3.4), layout="constrained")
    steps = rows[:-1]
    place = np.arange(len(steps))[::-1]
    ax.barh(place, [r.per_cent for r in steps], color="#4477aa", height=0.65)
    ax.axvline(rows[-1].per_cent, color="#bb5566", lw=1.5)
    ax.text(rows[-1].per_cent, len(steps) - 0.45, "total", color="#bb5566", ha="center", va="bottom", fontsize=9)
    for y, row in zip(place, steps):
        ax.text(
            row.per_cent + 0.01 * rows[-1].per_cent, y, f"{row.sigma_mag:.2f} mag", va="center", fontsize=8, color="0.3"
        )
    ax.set_yticks(place, [r.step for r in steps])
    ax.set_xlim(0, 1.18 * rows[-1].per_cent)
    ax.set_xlabel("contribution to the distance, per cent (shares add in squares)")
    ax.set_title(title or None, fontsize=10)
    for side in ("top", "right"):
        ax.spines[side].set_visible(False)
    return ax
