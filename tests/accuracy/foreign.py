"""How often what is not a normal star is given a normal type, and how often a normal star is refused.

Foreign spectra are the examples themselves, each with every spectrum of that object left out of the judge, with noise
added; the rule that refuses what no template fits is off here, so that the numbers are of the comparison alone. Normal
stars are library stars, each left out of the judge with every other spectrum of the same star, and that rule is as
strict as it gets. (The models have learned from the library stars; the verdict rests on the comparison, which has not.)

    python -m tests.accuracy.foreign
"""

from __future__ import annotations

from collections import Counter
from typing import Any

import numpy as np

from starfathom.classify.assignment import Assignment
from starfathom.classify.engine import Classifier, Settings
from starfathom.classify.foreign import Judge, decide, judge_for
from starfathom.classify.foreign_library import COARSE_WAVE, View, load_examples, view_of, view_of_coarse
from starfathom.classify.resample import Native
from starfathom.classify.spectrum import PlainSpectrum
from starfathom.templates.library import load_library

#: Name, S/N a library pixel (0: as it is), range in angstrom, velocity in km/s.
CASES = (("as is", 0, 0.0, 1e5, 0.0), ("S/N 20", 20, 0.0, 1e5, 0.0), ("S/N 10", 10, 0.0, 1e5, 0.0),
         ("blue 3900-4900", 50, 3900.0, 4900.0, 0.0), ("red 6000-7400", 50, 6000.0, 7400.0, 0.0),
         ("+500 km/s", 50, 0.0, 1e5, 500.0))
#: Noise added a coarse pixel of 300 km/s (5 A), relative to the continuum.
NOISE = (0.0, 0.02, 0.06)


def _same_object(name: str) -> frozenset[str]:
    near, far = load_examples()
    plain = "".join(c for c in name.lower() if c.isalnum())
    known = [*near.name.tolist(), *far.name.tolist()]
    return frozenset(k for k in known if "".join(c for c in str(k).lower() if c.isalnum()) == plain) | {name}


def _judged(judge: Judge, view: View, names: list[frozenset[str]]) -> list[Assignment]:
    """Verdicts without the help of the surface's misfit."""
    unexplained = np.ones(len(view.depth))
    verdict = judge.compare(view, unexplained, names)
    typed = Assignment(status="typed", object_kind="star", mk_type="?", t_code=40.0)
    return [decide(typed, verdict, i, view, 1.0, 0.0) for i in range(len(names))]


def _noisy(view: View, noise: float, rng: np.random.Generator) -> View:
    depth = view.depth + rng.normal(0, max(noise, 1e-4), view.depth.shape)
    return View(depth.astype(np.float32), view.valid, np.full(depth.shape, max(noise, 0.003), np.float32))


def foreign_rows(seed: int = 0) -> list[dict[str, Any]]:
    """A row a kind and noise: how many, how many given a normal type, and what they were called."""
    rng = np.random.default_rng(seed)
    near, far = load_examples()
    judge = judge_for()
    rows = []
    for kind in [k for k in dict.fromkeys(near.kind.tolist()) if k not in ("star", "L dwarf")]:
        pick = np.flatnonzero(near.kind == kind)
        view = View(near.depth[pick], near.valid[pick], np.full(near.depth[pick].shape, 0.003, np.float32))
        for noise in NOISE:
            answers = _judged(judge, _noisy(view, noise, rng), [_same_object(str(near.name[k])) for k in pick])
            rows.append(_row(kind, noise, answers))
    for kind, redshifts in (("galaxy", (0.0, 0.05, 0.15, 0.3)), ("quasar", (0.4, 1.0, 1.8, 2.3, 3.0))):
        flux, mask, names = [], [], []
        for k in np.flatnonzero(far.kind == kind):
            for z in redshifts:
                f, ok = far.at(int(k), round(float(np.log1p(z) / np.log(COARSE_WAVE[1] / COARSE_WAVE[0]))))
                if ok.mean() > 0.6:
                    flux.append(f)
                    mask.append(ok)
                    names.append(_same_object(str(far.name[k])))
        view = view_of_coarse(np.array(flux), np.array(mask), np.full((len(flux), len(COARSE_WAVE)), 1e-3),
                              np.full(len(flux), 10.0))
        for noise in NOISE:
            rows.append(_row(kind, noise, _judged(judge, _noisy(view, noise, rng), names)))
    return rows


def _row(kind: str, noise: float, answers: list[Assignment]) -> dict[str, Any]:
    called = Counter(a.object_kind if a.status != "typed" else "TYPED" for a in answers)
    typed = called.pop("TYPED", 0)
    return {"kind": kind, "snr_5A": round(1 / noise) if noise else "as is", "n": len(answers),
            "given_normal_type": typed, "called": ", ".join(f"{k} {v}" for k, v in called.most_common())}


def normal_rows(every: int = 4, seed: int = 0) -> list[dict[str, Any]]:
    """Refusals among library stars, through the whole classifier, themselves left out of the comparison."""
    library = load_library()
    c = library.catalogue
    classifier = Classifier.load()
    judge = judge_for()
    rng = np.random.default_rng(seed)
    by_hip: dict[int, set[str]] = {}
    for star, hip in zip(c["star"], c["hip"]):
        by_hip.setdefault(int(hip), set()).add(str(star).strip())
    pick = np.flatnonzero(np.isin(c["kind"], ("normal", "metal-weak", "emission", "peculiar", "none")))[::every]
    rows = []
    for case, snr, lo, hi, velocity in CASES:
        spectra, names = [], []
        for k in pick:
            wave = library.wave_angstrom * (1 + velocity / 299792.458)
            ok = library.valid[k] & (wave > lo) & (wave < hi)
            if ok.sum() < 300:
                continue
            flux = library.flux[k].astype(float)
            sigma = np.median(flux[ok]) / snr if snr else 0.0
            spectra.append(PlainSpectrum(wave, np.where(ok, flux + rng.normal(0, 1, ok.size) * sigma, 0.0),
                                         np.full(ok.size, sigma) if snr else None, ok, medium="air"))
            name = str(c["star"][k]).strip()
            names.append(frozenset(by_hip[int(c["hip"][k])] if c["hip"][k] > 0 else {name}))
        refused = []
        for start in range(0, len(spectra), 32):
            part = spectra[start:start + 32]
            batch = classifier.prepare_batch([Native(s, False) for s in part], part, [Settings()] * len(part))
            view = view_of(batch.flux, batch.valid, batch.sigma, batch.fwhm_angstrom)
            verdict = judge.compare(view, batch.unexplained, names[start:start + 32])
            for i, answer in enumerate(classifier.classify_many(part)):
                typed = answer if answer.status == "typed" else Assignment(status="typed", t_code=40.0)
                judged = decide(typed, verdict, i, view, float(batch.unexplained[i]), 1.0)
                if judged.status != "typed":
                    refused.append(f"{sorted(names[start + i])[0]} ({judged.object_kind})")
        rows.append({"case": case, "n": len(spectra), "refused": len(refused),
                     "per_cent": round(100 * len(refused) / len(spectra), 2), "which": ", ".join(refused[:8])})
    return rows


def tables() -> dict[str, list[dict[str, Any]]]:
    """The two tables for the accuracy report."""
    return {"foreign objects given a normal type (each object left out)": foreign_rows(),
            "normal stars refused (each star left out)": normal_rows()}


def main() -> None:
    for title, rows in tables().items():
        print(title)
        for row in rows:
            print("  " + "  ".join(f"{k}={v}" for k, v in row.items()))


if __name__ == "__main__":
    main()
