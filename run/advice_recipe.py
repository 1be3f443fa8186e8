"""Recipe of ``data/advice.npz``: library stars made worse, put through the classifier, and what came of it.

    python -m starfathom.advice_recipe

Stars are injected into a classifier that has learned nothing of them: the STELIB library is left out as a whole, and
so is every injected star by its HIP number. First come the STELIB spectra of stars that MILES has too: another
instrument's spectra of left-out stars, so what differs between instruments is in the count. Where these are few, MILES
stars of the same kind are added, never more than a third of those that MILES has (``_LOTS`` = 2 leaves out and
injects a second lot of them in the same way, at twice the time). STELIB stars that are not in MILES
are injected nowhere: they are kept for testing the predictions.

Every star is seen with each line spread and coverage at a rising S/N, the noise of the poorer spectrum being part of
that of the better one, as when exposures are added. Noise is white at a constant S/N per angstrom along the spectrum.
Finished set-ups are kept in the cache directory, so a run that was stopped goes on where it was.
"""

from __future__ import annotations

from itertools import pairwise
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from starfathom.advice_grid import GROUPS, Trials, expit, fit_logistic, prediction_table
from starfathom.classify.assignment import Assignment
from starfathom.classify.engine import Classifier, Settings, _cache_dir, _recipe_fingerprint
from starfathom.classify.grid import PIXEL_ANGSTROM, WAVE, blur, continuum
from starfathom.classify.spectrum import PlainSpectrum
from starfathom.classify.training import lessons_from
from starfathom.templates.library import Library, load_library
from starfathom.templates.subtypes import step_of

FloatArray = NDArray[np.float64]

FWHM_ANGSTROM = (4.6, 6.5, 12.5)
#: Stretches observed, angstrom: all of it, the blue, the green and red.
COVERAGES = ((3850.0, 6800.0), (3850.0, 4900.0), (4900.0, 6800.0))
SNR_PER_ANGSTROM = (2.5, 5.0, 10.0, 20.0, 40.0, 100.0)
DATA_FILE = Path(__file__).parent / "data" / "advice.npz"
_GROUP_COLUMNS = ((0, 1, 2, 3), (4,), (5,), (6,), (7,))
_WANTED = 12             # stars of one letter and class a lot
_LOTS = 1
_BATCH = 24
_SEED = 20260


def group_index(lum_code: FloatArray) -> NDArray[np.int64]:
    """Index into :data:`GROUPS`; a range such as III-IV goes to the nearer class, the brighter at a tie."""
    return np.digitize(np.asarray(lum_code, float), (1.8, 2.5, 3.5 + 1e-6, 4.5))


def chosen_stars(library: Library) -> list[NDArray[np.int64]]:
    """Rows of the library to inject, by the rule above: several lots, each left out together."""
    lots: list[NDArray[np.int64]] = []
    for lot in range(_LOTS):
        lots.append(_lot(library, np.concatenate([np.zeros(0, np.int64), *lots]), with_stelib=lot == 0))
    return lots


def _lot(library: Library, used: NDArray[np.int64], with_stelib: bool) -> NDArray[np.int64]:
    """One lot: the STELIB stars if asked for, and MILES stars not ``used`` before."""
    c = library.catalogue
    window = (WAVE > 3900) & (WAVE < 6800)
    typed = (c["kind"] == "normal") & np.isfinite(c["lum_code"]) & np.isfinite(c["t_code"]) & (c["hip"] > 0)
    typed &= library.valid[:, window].mean(axis=1) >= 0.95
    miles, stelib = typed & (c["library"] == "miles"), typed & (c["library"] == "stelib")
    known = set(c["hip"][c["library"] == "miles"].tolist())
    first = np.flatnonzero(stelib & np.isin(c["hip"], list(known))) if with_stelib else np.zeros(0, np.int64)
    own = set(c["hip"][first].tolist())
    in_stelib = set(c["hip"][c["library"] == "stelib"].tolist())
    spare = miles & ~np.isin(c["hip"], list(in_stelib)) & ~np.isin(np.arange(len(c["hip"])), used)
    letter, group = (c["t_code"] // 10).astype(float), group_index(c["lum_code"])
    rows = list(first)
    for ell in range(7):
        for g in range(len(GROUPS)):
            cell = (letter == ell) & (group == g)
            have = int((cell[first]).sum())
            taken = sum(int(h) in own for h in c["hip"][cell & miles])
            more = min(_WANTED - have, int((cell & miles).sum()) // 3 - taken)
            of = np.flatnonzero(cell & spare)
            of = of[np.argsort(c["t_code"][of], kind="stable")]
            if more > 0 and len(of):
                pick = np.unique(np.linspace(0, len(of) - 1, min(more, len(of)) + 2)[1:-1].round().astype(int))
                rows += list(of[pick])
    return np.array(rows, np.int64)


def noise_ladder(rng: np.random.Generator, size: int, snr: tuple[float, ...]) -> FloatArray:
    """Noise of unit level at each S/N (k, size): that of the poorer spectrum is part of that of the better."""
    time = np.array(snr) ** 2
    gained = np.diff(time, prepend=0.0)
    counts = rng.normal(0, 1, (len(snr), size)) * np.sqrt(gained)[:, None]
    return np.cumsum(counts, axis=0) / time[:, None]


def worse(wave: FloatArray, flux: FloatArray, valid: NDArray[np.bool_], own_fwhm: float, fwhm: float,
          coverage: tuple[float, float], seed: int) -> list[PlainSpectrum]:
    """One library star on the common grid at each S/N of the ladder."""
    kernel = float(np.sqrt(max(fwhm ** 2 - own_fwhm ** 2, 0.0)))
    blurred, ok = blur(np.where(valid, flux, 0.0)[None].astype(float), valid[None], kernel)
    level = continuum(blurred, ok)[0]
    ok = ok[0] & (wave > coverage[0]) & (wave < coverage[1])
    noise = noise_ladder(np.random.default_rng(seed), len(wave), SNR_PER_ANGSTROM)
    out = []
    for snr, one in zip(SNR_PER_ANGSTROM, noise):
        root = np.sqrt(PIXEL_ANGSTROM)
        sigma = np.maximum(np.abs(level), 1e-9) / (snr * root)
        out.append(PlainSpectrum(wave, np.where(ok, blurred[0] + level * one / root, 0.0), sigma, ok, "air", "library"))
    return out


def outcome(answers: list[Assignment]) -> FloatArray:
    """What is kept of n answers, (n, 10): five class probabilities, step and its error, M_V and its error, M_V valid.

    NaN where the spectrum was refused.
    """
    out = np.full((len(answers), 10), np.nan)
    for i, a in enumerate(answers):
        if a.status != "typed" or a.posterior is None:
            continue
        p = a.posterior.sum(axis=0)
        out[i, :5] = [p[list(columns)].sum() for columns in _GROUP_COLUMNS]
        out[i, 5:] = (float(step_of(a.t_code)), a.t_code_err, a.abs_mag_v, a.abs_mag_v_err, float(a.abs_mag_v_ok))
    return out


def inject(classifier: Classifier, library: Library, rows: NDArray[np.int64], folder: Path) -> FloatArray:
    """Outcomes (n_stars, n_fwhm, n_coverages, n_snr, 10), set-up by set-up, each kept in ``folder``."""
    own = library.catalogue["fwhm_angstrom"]
    out = np.full((len(rows), len(FWHM_ANGSTROM), len(COVERAGES), len(SNR_PER_ANGSTROM), 10), np.nan)
    for f, fwhm in enumerate(FWHM_ANGSTROM):
        for k, coverage in enumerate(COVERAGES):
            for start in range(0, len(rows), _BATCH):
                mine = rows[start:start + _BATCH]
                path = folder / f"fwhm{fwhm:g}_{coverage[0]:.0f}-{coverage[1]:.0f}_{start}.npy"
                if not path.exists():
                    spectra = [s for i in mine for s in worse(WAVE, library.flux[i], library.valid[i], float(own[i]),
                                                              fwhm, coverage, _SEED + 1000 * int(i) + 10 * f + k)]
                    answers = classifier.classify_many(spectra, Settings(fwhm_angstrom=fwhm))
                    np.save(path, outcome(answers).reshape(len(mine), len(SNR_PER_ANGSTROM), 10))
                    print(f"FWHM {fwhm:g} A, {coverage[0]:.0f}-{coverage[1]:.0f} A, star {start} on", flush=True)
                out[start:start + _BATCH, f, k] = np.load(path)
    return out


def build(path: Path = DATA_FILE) -> None:
    """Inject and write the file."""
    library = load_library()
    c = library.catalogue
    parts = []
    lots = chosen_stars(library)
    for number, lot in enumerate(lots):
        print(f"lot {number}: {len(lot)} stars, {int((c['library'][lot] == 'stelib').sum())} from STELIB", flush=True)
        folder = _cache_dir().parent / "advice" / f"{_recipe_fingerprint()}-{number}"
        folder.mkdir(parents=True, exist_ok=True)
        classifier = Classifier.load(("stelib",), tuple(sorted({int(h) for h in c["hip"][lot]})))
        parts.append(inject(classifier, library, lot, folder))
    rows, found = np.concatenate(lots), np.concatenate(parts)
    lessons = lessons_from(library)
    facts: dict[str, Any] = {
        "step": step_of(c["t_code"][rows]).astype(np.float32), "lum_code": c["lum_code"][rows].astype(np.float32),
        "hip": c["hip"][rows].astype(np.int32), "stelib": c["library"][rows] == "stelib",
        "abs_mag": lessons.abs_mag_v[rows].astype(np.float32), "fwhm": np.array(FWHM_ANGSTROM),
        "abs_mag_err": lessons.abs_mag_v_err[rows].astype(np.float32),
        "coverage": np.array(COVERAGES), "snr": np.array(SNR_PER_ANGSTROM), "outcome": found.astype(np.float16)}
    trials = Trials(facts["step"].astype(float), facts["lum_code"].astype(float), facts["hip"], facts["fwhm"],
                    facts["coverage"], facts["snr"], found.astype(np.float16).astype(float), np.zeros(5))
    facts["prediction"] = learn_prediction(trials)
    np.savez_compressed(path, **facts)
    print(f"{path}: {path.stat().st_size / 1e3:.0f} kB")


def learn_prediction(trials: Trials) -> FloatArray:
    """Coefficients for one star's prediction; prints how well they do on stars not fitted (five folds)."""
    x, y, star = prediction_table(trials)
    told = np.empty(len(y))
    for fold in range(5):
        held = star % 5 == fold
        told[held] = expit(x[held] @ fit_logistic(x[~held], y[~held]))
    for lo, hi in pairwise((0.0, 0.3, 0.5, 0.6, 0.7, 0.8, 0.9, 1.0)):
        mine = (told >= lo) & (told < hi)
        if mine.any():
            print(f"predicted {lo:.1f} to {hi:.1f}: {told[mine].mean():.3f} predicted, {y[mine].mean():.3f} realised "
                  f"({mine.sum()} pairs of set-ups, {len(np.unique(star[mine]))} stars)")
    return fit_logistic(x, y)


if __name__ == "__main__":
    build()
