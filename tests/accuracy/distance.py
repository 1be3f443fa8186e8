"""Measured quality of distances: cross-validation over the calibrators, simulated dust, routes and speed of recovery.

``tables()`` returns rows (dicts) with ``measure``, ``sample``, ``n``, the figure and the target; the accuracy run
prints them. Held-out stars are predicted from type, V and B-V alone by a scale fitted without them; a star is never on
both sides, whichever list it comes from.
"""

from __future__ import annotations

from collections.abc import Callable
from concurrent.futures import ProcessPoolExecutor

import numpy as np
from numpy.typing import NDArray

from starfathom.distance.calibrators import Calibrators, calibrators
from starfathom.distance.engine import Request, fathom_many
from starfathom.distance.extinction import band_terms, evaluate
from starfathom.distance.fathoming import Fathoming
from starfathom.distance.fit import fit
from starfathom.distance.intrinsic import intrinsic
from starfathom.distance.scale import Scale, load_scale

FOLDS = 10
#: A parallax good to 5 % counts as the truth.
TRUTH_SNR = 20.0


def _requests(stars: Calibrators) -> list[Request]:
    return [
        Request(
            # one standard is written with its classes the unusual way round
            str(stars.mk_type[i]).replace("IIb-IIIa", "II-III"),
            {"V": (stars.v_mag[i], 0.01), "B": (stars.v_mag[i] + stars.b_v[i], max(stars.e_b_v[i], 0.005))},
        )
        for i in range(len(stars))
    ]


def _predict(stars: Calibrators, scale: Scale) -> NDArray[np.float64]:
    """Rows (ratio to the true distance, inside 68 %, inside 95 %) of stars from type, V and B-V."""
    answers = fathom_many(_requests(stars), scale=scale, n_samples=1000, with_budget=False, workers=1)
    out = np.full((len(stars), 3), np.nan)
    for i, answer in enumerate(answers):
        if isinstance(answer, Fathoming):
            p, d = answer.percentiles["distance_pc"], 1000.0 / stars.parallax[i]
            out[i] = p[2] / d, p[1] < d < p[3], p[0] < d < p[4]
    return out


def _one_fold(job: tuple[int, bool, int]) -> tuple[NDArray, NDArray]:
    fold, colour, seed = job
    stars = calibrators()
    folds = np.random.default_rng(seed).integers(0, FOLDS, len(stars))
    test = np.flatnonzero((folds == fold) & (stars.parallax > TRUTH_SNR * stars.e_parallax))
    scale, _ = fit(stars.where(folds != fold), colour=colour)
    return test, _predict(stars.where(test), scale)


def cross_validate(*, colour: bool = True, seed: int = 1) -> tuple[Calibrators, NDArray[np.float64]]:
    """Calibrators with a 5 % parallax, and the prediction for each by a scale fitted without it."""
    with ProcessPoolExecutor(2) as pool:
        parts = list(pool.map(_one_fold, [(k, colour, seed) for k in range(FOLDS)]))
    index = np.concatenate([p[0] for p in parts])
    return calibrators().where(index), np.concatenate([p[1] for p in parts])


Select = Callable[[Calibrators], NDArray]
SAMPLES: dict[str, tuple[Select, float]] = {
    "V": (lambda c: c.lum_code == 5, 17.0),
    "V, F to K": (lambda c: (c.lum_code == 5) & (c.t_code >= 30) & (c.t_code < 60), 15.0),
    "IV": (lambda c: np.abs(c.lum_code - 4) < 0.3, 28.0),
    "III": (lambda c: np.abs(c.lum_code - 3) < 0.35, 22.0),
}


def _rows(title: str, stars: Calibrators, got: NDArray, keep: NDArray, targets: bool) -> list[dict[str, object]]:
    rows: list[dict[str, object]] = []
    for name, (select, target) in SAMPLES.items():
        mine = select(stars) & keep & np.isfinite(got[:, 0])
        if mine.sum() < 5:
            continue
        ratio = got[mine, 0]
        low, high = np.percentile(ratio, [16, 84])
        scatter = 50 * (high - low)
        rows.append(
            {
                "measure": f"distance ratio, {title}",
                "sample": name,
                "n": int(mine.sum()),
                "scatter_percent": round(float(scatter), 1),
                "median_percent": round(100 * (float(np.median(ratio)) - 1), 1),
                "median_se": round(1.25 * float(scatter) / np.sqrt(mine.sum()), 1),
                "inside_68": round(100 * float(got[mine, 1].mean())),
                "inside_95": round(100 * float(got[mine, 2].mean())),
                "target": f"scatter <= {target:g}" if targets else "",
            }
        )
    return rows


def simulate(
    mk_types: tuple[str, ...], bands: tuple[str, ...], n: int = 60, seed: int = 3, distance_pc: float = 600.0
) -> list[tuple[Request, float, float]]:
    """Stars reddened by E(B-V) 0 to 1.5 at R_V 3.1, drawn from the shipped scale; each with its true E and distance."""
    look, scale, rng = intrinsic(), load_scale(), np.random.default_rng(seed)
    out = []
    from starfathom.distance.sources import cells_of_type, parse_type

    for k in range(n):
        text = mk_types[k % len(mk_types)]
        cell = int(cells_of_type(parse_type(text))[0][0])
        ebv = 1.5 * (k + 0.5) / n
        deviation = scale.bv_scatter[cell] * rng.standard_normal()
        m_v = scale.mean[cell] + scale.slope[cell] * deviation + scale.sigma[cell] * rng.standard_normal()
        d = distance_pc * np.exp(rng.uniform(-0.5, 0.5))
        v = m_v + 5 * np.log10(d / 10)
        rv = 3.1 + 0.18 * rng.standard_normal()
        magnitudes = {}
        for band in bands:
            extinction = evaluate(band_terms(band)[:, cell], rv, ebv) * ebv
            own = (scale.bv_shift[cell] + deviation) * look.response[band] + look.own_scatter[
                band
            ] * rng.standard_normal()
            magnitudes[band] = (
                float(v + look.offset[band][cell] + own + extinction + 0.02 * rng.standard_normal()),
                0.02,
            )
        out.append((Request(text, magnitudes), ebv, float(d)))
    return out


def _dust_rows() -> list[dict[str, object]]:
    rows: list[dict[str, object]] = []
    for bands in (("B", "V", "J", "H", "Ks"), ("B", "V")):
        for kind, types in (
            ("giants", ("G8 III", "K0 III", "K2 III", "K5 III")),
            ("dwarfs", ("A0 V", "F0 V", "F8 V", "G2 V")),
        ):
            made = simulate(types, bands, n=200)
            got = fathom_many([m[0] for m in made], n_samples=1000, with_budget=False)
            off = np.array([g.median("ebv") - m[1] for g, m in zip(got, made) if isinstance(g, Fathoming)])
            ratio = np.array([g.median("distance_pc") / m[2] for g, m in zip(got, made) if isinstance(g, Fathoming)])
            rows.append(
                {
                    "measure": "simulated dust, E(B-V) 0 to 1.5",
                    "sample": f"{kind}, {' '.join(bands)}",
                    "n": len(off),
                    "ebv_bias": round(float(np.median(off)), 3),
                    "ebv_scatter": round(float(np.std(off)), 3),
                    "distance_bias_percent": round(100 * (float(np.median(ratio)) - 1), 1),
                    "target": "bias of E(B-V) <= 0.03, of distance <= 3 %"
                    if len(bands) > 2
                    else "what two bands allow",
                }
            )
    return rows


def tables(seed: int = 1) -> list[dict[str, object]]:
    """All rows; about two minutes."""
    rows: list[dict[str, object]] = []
    for colour, title in ((True, "with colour"), (False, "class alone")):
        stars, got = cross_validate(colour=colour, seed=seed)
        standards = stars.library == ""
        rows += _rows(f"standards, {title}", stars, got, standards, colour)
        rows += _rows(f"published types, {title}", stars, got, ~standards, False)
    stars = calibrators()
    stars = stars.where((stars.library == "") & (stars.parallax > TRUTH_SNR * stars.e_parallax))
    for name in ("mamajek", "straizys"):
        rows += _rows(
            f"standards, scale {name}", stars, _predict(stars, load_scale(name)), np.ones(len(stars), bool), False
        )
    return rows + _dust_rows()


if __name__ == "__main__":
    for row in tables():
        print(row)
