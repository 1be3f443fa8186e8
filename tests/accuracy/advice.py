"""Predictions of gain held against what came true, on STELIB stars left out of everything learned.

The stars are those of STELIB that MILES has not: none of them was injected for the advice, and the classifier is the
one trained without STELIB. Each is made worse, the advice for the result is asked for, every better spectrum it weighs
is then really made (with fresh noise) and typed, and the classes that come out right are counted.
"""

from __future__ import annotations

import sys
from dataclasses import dataclass
from itertools import pairwise
from pathlib import Path

import numpy as np

sys.path.insert(0, str(Path(__file__).parent))

from run_accuracy import degraded
from stars import Held, group_of_type, stelib

from starfathom.advice import Advice, Known, advise, weigh_spectra
from starfathom.advice_grid import GROUPS, Setup, load_trials
from starfathom.classify.assignment import Assignment
from starfathom.classify.engine import Classifier, Settings
from starfathom.templates.library import load_library
from starfathom.templates.subtypes import step_of

_FULL = (3900.0, 6800.0)
STARTS = (Setup(12.5, _FULL, 4.0), Setup(6.5, (3900.0, 4900.0), 5.0), Setup(6.5, (4900.0, 6800.0), 8.0),
          Setup(4.6, _FULL, 4.0))
_BINS = (0.0, 0.45, 0.6, 0.7, 0.8, 0.9, 1.01)
_CURVE_SNR = (2.5, 3.5, 5.0, 7.0, 10.0, 20.0, 50.0, 100.0)


def observed(held: Held, setups: list[Setup], which: list[int], seed: int, classifier: Classifier) -> list[Assignment]:
    """Stars ``which`` as each of ``setups`` would show them, typed. STELIB has 1 A a pixel, so S/N a pixel is per A."""
    rng = np.random.default_rng(seed)
    spectra = [degraded(held.spectra[i], rng, snr=s.snr, fwhm=s.fwhm_angstrom, window=s.range_angstrom)
               for i, s in zip(which, setups)]
    answers = classifier.classify_many(spectra, [Settings(fwhm_angstrom=s.fwhm_angstrom) for s in setups])
    for a, s in zip(answers, setups):
        a.meta["range_angstrom"] = s.range_angstrom
    return answers


@dataclass(frozen=True)
class Trial:
    """One proposed spectrum of one star: what was predicted and what came out."""

    star: int
    start: int
    advice: Advice
    right: bool
    off: float               # subtype, in steps
    answer: Assignment


def run_trials(held: Held, classifier: Classifier) -> list[Trial]:
    """Every better spectrum weighed for every star and start, really made."""
    who: list[tuple[int, int, Advice]] = []
    for k, start in enumerate(STARTS):
        for i, a in enumerate(observed(held, [start] * len(held), list(range(len(held))), 100 + k, classifier)):
            who += [(i, k, x) for x in weigh_spectra(a)]
    setups = [x.setup for _, _, x in who if x.setup is not None]
    answers = observed(held, setups, [i for i, _, _ in who], 7, classifier)
    out = []
    for (i, k, x), a in zip(who, answers):
        typed = a.status == "typed"
        right = typed and group_of_type(a.mk_type) == held.group[i]
        out.append(Trial(i, k, x, right, float(step_of(a.t_code)) - held.step[i] if typed else np.nan, a))
    return out


def agreement(trials: list[Trial]) -> list[dict[str, object]]:
    """Predicted against realised success by prediction, and by kind of action."""
    told = np.array([t.advice.success_then for t in trials])
    came = np.array([t.right for t in trials], float)
    kind = np.array([t.advice.kind for t in trials])
    rows: list[dict[str, object]] = []

    def row(label: str, mine: np.ndarray) -> None:
        if mine.sum() >= 20:
            rows.append({"trials of": label, "n": int(mine.sum()), "stars": len({trials[k].star for k in
                         np.flatnonzero(mine)}), "predicted, %": 100 * told[mine].mean(), "realised, %":
                         100 * came[mine].mean(), "difference, points": 100 * (told[mine].mean() - came[mine].mean())})

    row("all", np.ones(len(told), bool))
    for lo, hi in pairwise(_BINS):
        row(f"predicted {100 * lo:.0f} to {min(100 * hi, 100):.0f} %", (told >= lo) & (told < hi))
    for name in sorted(set(kind)):
        row(name, kind == name)
    for k, s in enumerate(STARTS):
        row(f"from FWHM {s.fwhm_angstrom:g}, {s.range_angstrom[0]:.0f}-{s.range_angstrom[1]:.0f}, S/N {s.snr:g}",
            np.array([t.start == k for t in trials]))
    return rows


def best_against_random(trials: list[Trial]) -> list[dict[str, object]]:
    """The best-ranked spectrum of each star and start against the mean of all weighed, where advice is called for."""
    by: dict[tuple[int, int], list[Trial]] = {}
    for t in trials:
        by.setdefault((t.star, t.start), []).append(t)
    groups = [g for g in by.values() if len(g) > 1 and g[0].advice.success_now < 0.9]
    best = [max(g, key=lambda t: t.advice.score) for g in groups]
    gain = np.array([float(b.right) - np.mean([t.right for t in g]) for b, g in zip(best, groups)])
    off = np.array([abs(b.off) - np.nanmean([abs(t.off) for t in g]) for b, g in zip(best, groups)])
    worst = [min(g, key=lambda t: t.advice.score) for g in groups]
    return [{"choice": "best ranked", "n": len(groups), "class right, %": 100 * np.mean([t.right for t in best]),
             "mean subtype error": float(np.nanmean([abs(t.off) for t in best]))},
            {"choice": "random", "n": len(groups),
             "class right, %": 100 * np.mean([np.mean([t.right for t in g]) for g in groups]),
             "mean subtype error": float(np.nanmean([np.nanmean([abs(t.off) for t in g]) for g in groups]))},
            {"choice": "worst ranked", "n": len(groups), "class right, %": 100 * np.mean([t.right for t in worst]),
             "mean subtype error": float(np.nanmean([abs(t.off) for t in worst]))},
            {"choice": "best less random (error)", "n": len(groups), "class right, %": f"{100 * gain.mean():+.1f} "
             f"({100 * gain.std() / np.sqrt(len(gain)):.1f})", "mean subtype error": f"{np.nanmean(off):+.2f} "
             f"({np.nanstd(off) / np.sqrt(len(off)):.2f})"}]


def plan_against_curves(held: Held, classifier: Classifier) -> list[dict[str, object]]:
    """The plan's success against S/N, for the types of the held-out stars, against what these stars do."""
    trials = load_trials()
    rows: list[dict[str, object]] = []
    for fwhm, window in ((4.6, _FULL), (4.6, (4900.0, 6800.0))):
        setups = [Setup(fwhm, window, s) for s in _CURVE_SNR for _ in range(len(held))]
        answers = observed(held, setups, list(range(len(held))) * len(_CURVE_SNR), 31, classifier)
        found = np.array([group_of_type(a.mk_type) if a.status == "typed" else "" for a in answers])
        came = (found.reshape(len(_CURVE_SNR), -1) == held.group[None]).mean(axis=1)
        told = np.array([np.mean([trials.class_rate(float(t), GROUPS.index(str(g)), Setup(fwhm, window, s))
                                  for t, g in zip(held.step, held.group)]) for s in _CURVE_SNR])
        for s, a, b in zip(_CURVE_SNR, told, came):
            rows.append({"range": f"{window[0]:.0f}-{window[1]:.0f}", "S/N per A": s, "plan, class right %": 100 * a,
                         "counted, class right %": 100 * b})
        rows.append({"range": f"{window[0]:.0f}-{window[1]:.0f}", "S/N per A": "for 9/10 of the best",
                     "plan, class right %": _snr_at(told), "counted, class right %": _snr_at(came)})
    return rows


def _snr_at(success: np.ndarray, share: float = 0.9) -> str:
    """S/N at which a curve first reaches a share of its own best."""
    rising = np.maximum.accumulate(success)
    return f"S/N {np.exp(np.interp(share * rising[-1], rising, np.log(_CURVE_SNR))):.1f}"


def distances(held: Held, classifier: Classifier) -> list[dict[str, object]]:
    """Error of the distance predicted for four times the exposure against the error found with the real spectrum."""
    from starfathom.distance import Photometry, Request, fathom_many

    c = load_library().catalogue
    row_of = {str(n): k for k, n in enumerate(c["star"]) if c["library"][k] == "stelib"}
    out: list[dict[str, object]] = []
    for start in STARTS[:2]:
        first = observed(held, [start] * len(held), list(range(len(held))), 5, classifier)
        then = observed(held, [start.at(snr=2 * start.snr)] * len(held), list(range(len(held))), 6, classifier)
        told, came = [], []
        for i, (a, b) in enumerate(zip(first, then)):
            k = row_of[held.names[i]]
            v, b_v = float(c["v_mag"][k]), float(c["b_v"][k])
            if a.status != "typed" or b.status != "typed" or not (np.isfinite(v) and np.isfinite(b_v)):
                continue
            bands = {"V": (v, 0.02), "B": (v + b_v, 0.02)}
            now, later = fathom_many([Request(a, Photometry(bands)), Request(b, Photometry(bands))], seed=1, workers=1,
                                     n_samples=1000)
            if not (hasattr(now, "percentiles") and hasattr(later, "percentiles")):
                continue
            got = [x for x in advise(a, now, known=Known(bands), most=20) if x.kind == "exposure"
                   and x.time_factor == 4 and np.isfinite(x.distance_then)]
            if got:
                low, middle, high = later.percentiles["distance_pc"][1:4]
                told.append(got[0].distance_then)
                came.append(50 * (high - low) / middle)
        if told:
            out.append({"from": f"FWHM {start.fwhm_angstrom:g}, S/N {start.snr:g}, 4 x the exposure",
                        "stars": len(told), "median predicted error, %": float(np.median(told)),
                        "median error then, %": float(np.median(came)),
                        "median ratio": float(np.median(np.array(told) / np.array(came)))})
    return out


def tables() -> list[dict[str, object]]:
    """All rows; some minutes, most of it training where the models are not kept yet."""
    held, only, _ = stelib()
    new, classifier = held.subset(only), Classifier.load(("stelib",))
    trials = run_trials(new, classifier)
    return [*agreement(trials), *best_against_random(trials), *plan_against_curves(new, classifier),
            *distances(new, classifier)]


if __name__ == "__main__":
    for line in tables():
        print({k: round(v, 2) if isinstance(v, float) else v for k, v in line.items()}, flush=True)
