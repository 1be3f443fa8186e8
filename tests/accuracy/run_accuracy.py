"""Measured quality, across libraries, of one frozen configuration: prints the tables and writes RESULTS.md.

    make accuracy

Everything is trained on MILES alone and scored on STELIB spectra as they come from the registry, or on stars left out
of everything learned. The first run trains several models (some minutes each) and keeps them in the cache directory.
"""

from __future__ import annotations

import importlib
import io
import sys
import time
from collections.abc import Callable
from dataclasses import replace
from pathlib import Path

import numpy as np

sys.path.insert(0, str(Path(__file__).parent))

from stars import Held, group_of_type, stelib

from starfathom.classify.assignment import Assignment
from starfathom.classify.engine import Classifier, Settings
from starfathom.classify.grid import WAVE, blur_matrix, rectify
from starfathom.classify.posterior import cell_of
from starfathom.classify.spectrum import PlainSpectrum
from starfathom.templates.library import load_library
from starfathom.templates.subtypes import CLASSES, SUBTYPES, step_of, t_code_from_step

HERE = Path(__file__).parent
GROUPS = ("I", "II", "III", "IV", "V")
out = io.StringIO()


def say(text: str = "") -> None:
    print(text, flush=True)
    out.write(text + "\n")
    if text.startswith("\n## "):      # a run that is stopped leaves the sections it finished
        (HERE / "RESULTS.md").write_text(out.getvalue().rsplit("\n## ", 1)[0])


def boot(statistic: Callable[[np.ndarray], float], n: int, draws: int = 400, seed: int = 0) -> tuple[float, float]:
    """68 % bootstrap interval of a statistic of an index array."""
    rng = np.random.default_rng(seed)
    values = [statistic(rng.integers(0, n, n)) for _ in range(draws)]
    return float(np.nanpercentile(values, 16)), float(np.nanpercentile(values, 84))


def p68(values: np.ndarray) -> float:
    """68th percentile of absolute values."""
    values = np.abs(values[np.isfinite(values)])
    return float(np.percentile(values, 68)) if values.size else float("nan")


def row(label: str, value: float, n: int, statistic: Callable[[np.ndarray], float], target: str, form: str = ".2f"
        ) -> None:
    lo, hi = boot(statistic, n) if n > 1 else (float("nan"), float("nan"))
    say(f"| {label} | {value:{form}} | {lo:{form}} to {hi:{form}} | {n} | {target} |")


def steps(answers: list[Assignment]) -> np.ndarray:
    return np.array([float(step_of(a.t_code)) if a.status == "typed" else np.nan for a in answers])


def groups(answers: list[Assignment]) -> np.ndarray:
    return np.array([group_of_type(a.mk_type) if a.status == "typed" else "refused" for a in answers])


def neighbours(held: Held, train_without: tuple[str, ...]) -> tuple[np.ndarray, np.ndarray]:
    """Plain five nearest neighbours on rectified spectra, velocity aligned, 3850-6800 A: the yardstick."""
    library = load_library().without(train_without)
    c = library.catalogue
    use = (c["kind"] == "normal") & np.isfinite(c["lum_code"]) & np.isfinite(c["t_code"])
    library = library.select(use)
    c = library.catalogue
    width = np.sqrt(4.6 ** 2 - c["fwhm_angstrom"][0] ** 2)
    matrix = blur_matrix(round(float(width), 2))
    weight = (matrix @ library.valid.T.astype(float)).T
    flux = (matrix @ np.where(library.valid, library.flux, 0).T).T / np.maximum(weight, 1e-9)
    flat, _ = rectify(flux, library.valid & (weight > 0.5))
    window = np.flatnonzero((WAVE > 3850) & (WAVE < 6800) & ((WAVE < 5860) | (WAVE > 5920)))[::2]
    templates = flat[:, window]
    classifier = Classifier.load(train_without)
    found_step, found_group = [], []
    for spectrum in held.spectra:
        prepared = classifier.prepare(spectrum, Settings(fwhm_angstrom=3.0))
        smooth = np.sqrt(4.6 ** 2 - 3.0 ** 2)
        m = blur_matrix(round(float(smooth), 2))
        w = m @ prepared.valid.astype(float)
        f = (m @ np.where(prepared.valid, prepared.flux, 0)) / np.maximum(w, 1e-9)
        star, _ = rectify(f[None], (prepared.valid & (w > 0.5))[None])
        ok = (prepared.valid & (w > 0.5))[window]
        distance = (((templates - star[0][window]) ** 2) * ok).sum(axis=1)
        near = np.argsort(distance)[:5]
        share = 1 / np.maximum(distance[near], 1e-9)
        found_step.append(float((step_of(c["t_code"][near]) * share).sum() / share.sum()))
        votes: dict[str, float] = {}
        for k, s in zip(near, share):
            g = "I" if c["lum_code"][k] < 1.8 else GROUPS[int(np.clip(round(float(c["lum_code"][k])) - 1, 0, 4))]
            votes[g] = votes.get(g, 0) + float(s)
        found_group.append(max(votes, key=lambda v: votes[v]))
    return np.array(found_step), np.array(found_group)


def classes_table(held: Held, answers: list[Assignment]) -> None:
    truth, found = held.group, groups(answers)
    for g, target in (("V", ">= 90 %"), ("III", ">= 85 %"), ("I", ">= 92 %")):
        mine = np.flatnonzero(truth == g)
        right = (found[mine] == g).astype(float) * 100
        row(f"{g} given exactly that class, %", right.mean(), len(mine), lambda k, r=right: r[k].mean(), target, ".0f")
    right = (found == truth).astype(float) * 100
    row("class exact, all, %", right.mean(), len(held), lambda k: right[k].mean(), "-", ".0f")


def calibration(held: Held, answers: list[Assignment]) -> None:
    """Class probabilities above 0.8, expected calibration error against a perfectly calibrated classifier, 90 % set."""
    member = [("Ia0", "Ia", "Iab", "Ib"), ("II",), ("III",), ("IV",), ("V",)]
    p = np.array([[sum(a.class_probabilities[c] for c in m) for m in member] for a in answers])
    truth = np.array([GROUPS.index(g) for g in held.group])
    top, chosen = p.max(axis=1), p.argmax(axis=1)
    for g, target in (("V", ">= 98 %"), ("III", ">= 92 %"), ("I", ">= 90 %")):
        mine = np.flatnonzero((top > 0.8) & (chosen == GROUPS.index(g)))
        if len(mine):
            right = (truth[mine] == chosen[mine]) * 100.0
            row(f"{g} with probability > 0.8 right, %", right.mean(), len(mine), lambda k, r=right: r[k].mean(), target,
                ".0f")

    def ece(confidence: np.ndarray, right: np.ndarray) -> float:
        edges = np.quantile(confidence, np.linspace(0, 1, 6))
        which = np.clip(np.searchsorted(edges, confidence, side="right") - 1, 0, 4)
        return float(sum(abs(confidence[which == b].mean() - right[which == b].mean()) * (which == b).mean()
                         for b in range(5) if (which == b).any()))

    rng = np.random.default_rng(0)
    perfect = [ece(top, rng.random(len(top)) < top) for _ in range(2000)]
    say(f"| expected calibration error of class probability | {ece(top, truth == chosen):.3f} | - | {len(top)} | "
        f"<= {np.percentile(perfect, 95):.3f} (95th percentile of a perfect classifier) |")
    inside, sizes = [], []
    for i, a in enumerate(answers):
        t, j = cell_of(float(t_code_from_step(np.round(2 * held.step[i]) / 2)), held.lum_code[i])
        inside.append(f"{SUBTYPES[t]} {CLASSES[j]}" in a.type_set_90)
        sizes.append(len(a.type_set_90))
    hit = np.array(inside) * 100.0
    row("90 % set holds the literature type, %", hit.mean(), len(hit), lambda k: hit[k].mean(), "87 to 95 %", ".0f")
    size = np.array(sizes, float)
    row("its median size, cells", float(np.median(size)), len(size), lambda k: float(np.median(size[k])), "<= 12",
        ".0f")


def magnitudes(held: Held, answers: list[Assignment]) -> None:
    mag = np.array([a.abs_mag_v for a in answers])
    err = np.array([a.abs_mag_v_err for a in answers])
    for g, target in (("V", "<= 0.40 mag"), ("III", "<= 0.50 mag")):
        mine = np.flatnonzero((held.group == g) & (held.abs_mag_v_err < 0.22))
        off = (mag - held.abs_mag_v)[mine]
        row(f"M_V from the spectrum against parallax, {g}, 68 %", p68(off), len(mine), lambda k, o=off: p68(o[k]),
            target)
        pull = off / np.hypot(err[mine], held.abs_mag_v_err[mine])
        say(f"| its bias; 68 % of off / error | {np.median(off):+.2f}; {p68(pull):.2f} | - | {len(mine)} | - |")


def head(title: str) -> None:
    say(f"\n## {title}\n")
    say("| measure | value | 68 % bootstrap | n | target |")
    say("| --- | --- | --- | --- | --- |")


def worst(held: Held, answers: list[Assignment], off: np.ndarray, count: int = 10) -> None:
    say("\nWorst cases:\n")
    for i in np.argsort(-np.abs(np.nan_to_num(off, nan=99)))[:count]:
        a = answers[i]
        say(f"- {held.names[i]}: literature {held.label[i]}, found {a.mk_type or a.status} (off {off[i]:+.1f}); "
            f"nearest {', '.join(a.nearest)}")
    say("\nClass differs:\n")
    for i in np.flatnonzero(groups(answers) != held.group):
        a = answers[i]
        p = ", ".join(f"{c} {v:.2f}" for c, v in a.class_probabilities.items() if v > 0.1)
        say(f"- {held.names[i]}: literature {held.label[i]}, found {a.mk_type or a.reason} ({p})")


def teff_scatter(held: Held, answers: list[Assignment]) -> None:
    """Scatter of types about a cubic in log Teff (published), for F, G and K: ours and the catalogue's."""
    found = steps(answers)
    for letter, lo, hi, target in (("F", 30, 40, "<= 0.9"), ("G", 40, 50, "<= 1.0"), ("K", 50, 57, "<= 0.85")):
        mine = np.flatnonzero((held.step >= lo) & (held.step < hi) & (held.teff_k > 2500) & np.isfinite(found)
                              & (held.lum_code > 2.5))
        if len(mine) < 8:
            continue
        x = np.log10(held.teff_k[mine])
        design = np.column_stack([np.ones(len(mine)), x - x.mean(), held.lum_code[mine] - 4,
                                  (x - x.mean()) * (held.lum_code[mine] - 4)])

        def scatter(y: np.ndarray, design: np.ndarray = design) -> float:
            keep = np.ones(len(y), bool)
            for _ in range(3):
                fit = np.linalg.lstsq(design[keep], y[keep], rcond=None)[0]
                left = y - design @ fit
                keep = np.abs(left) < 4 * max(p68(left), 0.2)
            return p68(left)

        row(f"{letter}: scatter of our types about a function of published Teff and class", scatter(found[mine]),
            len(mine), lambda k, m=mine, f=scatter, d=design: f(found[m][k], d[k]), target)
        say(f"| {letter}: the catalogue types', same stars | {scatter(held.step[mine]):.2f} | - | {len(mine)} | - |")


def degraded(spectrum: PlainSpectrum, rng: np.random.Generator, *, snr: float = 0, fwhm: float = 0, ebv: float = 0,
             velocity: float = 0, window: tuple[float, float] | None = None, slope: bool = False) -> PlainSpectrum:
    """A spectrum made worse: noise (S/N a pixel), blur, reddening, velocity, coverage, smooth slope wiped or tilted."""
    wave, flux, valid = spectrum.wave_angstrom.copy(), spectrum.flux.copy(), spectrum.valid.copy()
    sigma = None
    if fwhm > 3.0:
        from scipy.ndimage import gaussian_filter1d

        width = np.sqrt(fwhm ** 2 - 3.0 ** 2) / 2.3548 / float(np.median(np.diff(wave)))
        weight = gaussian_filter1d(valid.astype(float), width)
        flux = np.where(valid, gaussian_filter1d(np.where(valid, flux, 0.0), width) / np.maximum(weight, 1e-6), 0.0)
    if ebv:
        import astropy.units as u
        from dust_extinction.parameter_averages import F99

        inside = (wave > 1000 / 10.0) & (wave < 33000)
        flux = flux * np.where(inside, F99(Rv=3.1).extinguish(wave * u.AA, Ebv=ebv), 1.0)
    if slope:
        flux = flux * (wave / 5000.0) ** 2.5 * (1 + 0.2 * np.sin(wave / 900.0))
    if snr:
        level = np.convolve(np.where(valid, flux, 0.0), np.ones(51) / 51, "same")
        sigma = np.maximum(np.abs(level) / snr, 1e-30)
        flux = np.where(valid, flux + rng.normal(0, 1, len(flux)) * sigma, 0.0)
    if velocity:
        wave = wave * (1 + velocity / 299792.458)
    if window:
        valid = valid & (wave > window[0]) & (wave < window[1])
    return replace(spectrum, wave_angstrom=wave, flux=flux, valid=valid, sigma=sigma)


def curves(held: Held, classifier: Classifier) -> None:
    say("\n## What worse spectra cost\n")
    say("STELIB stars not in MILES, MILES-trained. Change is the 68 % of our own type against the undisturbed one; set "
        "is the median size of the 90 % set.\n")
    say("| spectra | 68 % against literature | change, 68 % | median change | class exact, % | set | refused |")
    say("| --- | --- | --- | --- | --- | --- | --- |")
    clean = classifier.classify_many(held.spectra)
    base = steps(clean)
    trials: list[tuple[str, dict[str, object]]] = [("as they are", {})]
    trials += [(f"S/N {s} a pixel", {"snr": s}) for s in (100, 50, 20, 10, 5)]
    trials += [(f"FWHM {f} A", {"fwhm": float(f)}) for f in (5, 8, 12, 15)]
    trials += [(f"E(B-V) {e}", {"ebv": e}) for e in (0.5, 1.0, 2.0)]
    trials += [(f"velocity {v:+d} km/s", {"velocity": v}) for v in (-500, -150, 150, 500)]
    trials += [("slope tilted and rippled", {"slope": True}), ("blue only, 3900-4900 A", {"window": (3900.0, 4900.0)}),
               ("red only, 6000-7400 A", {"window": (6000.0, 7400.0)})]
    for label, how in trials:
        rng = np.random.default_rng(11)
        answers = classifier.classify_many([degraded(s, rng, **how) for s in held.spectra])  # type: ignore[arg-type]
        found = steps(answers)
        typed = [a for a in answers if a.status == "typed"]
        say(f"| {label} | {p68(found - held.step):.2f} | {p68(found - base):.2f} | {np.nanmedian(found - base):+.2f} | "
            f"{100 * np.mean(groups(answers) == held.group):.0f} | "
            f"{np.median([len(a.type_set_90) for a in typed]):.0f} | {len(answers) - len(typed)} |")


def pairs(held: Held, folds: int = 3) -> tuple[list[Assignment], list[Assignment]]:
    """The same star from both libraries, with the star left out of everything learned (in ``folds`` groups)."""
    library = load_library()
    c = library.catalogue
    of_hip = {int(h): i for i, h in enumerate(c["hip"]) if c["library"][i] == "miles" and h > 0}
    first: list[Assignment] = [Assignment()] * len(held)
    second: list[Assignment] = [Assignment()] * len(held)
    for f in range(folds):
        mine = np.arange(f, len(held), folds)
        classifier = Classifier.load((), tuple(int(h) for h in held.hip[mine]))
        other = []
        for k in mine:
            i = of_hip[int(held.hip[k])]
            other.append(PlainSpectrum(WAVE, np.where(library.valid[i], library.flux[i], 0).astype(float), None,
                                       library.valid[i], "air", "library"))
        for k, a, b in zip(mine, classifier.classify_many(held.subset(mine).spectra), classifier.classify_many(other)):
            first[k], second[k] = a, b
    return first, second


def extra(name: str, title: str) -> None:
    """Tables that another module of this folder computes: ``tables()`` gives lines of text or rows."""
    try:
        module = importlib.import_module(name)
    except ModuleNotFoundError:
        return
    say(f"\n## {title}\n")
    columns: list[str] = []
    for line in module.tables() if hasattr(module, "tables") else module.rows():
        if isinstance(line, str):
            say(line)
            columns = []
        elif isinstance(line, dict):
            if list(line) != columns:
                columns = list(line)
                say("\n| " + " | ".join(columns) + " |\n|" + " --- |" * len(columns))
            say("| " + " | ".join(f"{v:.3g}" if isinstance(v, float) else str(v) for v in line.values()) + " |")
        else:
            say("| " + " | ".join(str(v) for v in line) + " |")


def main() -> None:
    start = time.time()
    say("# Measured quality\n\nWritten by `make accuracy`. Types are scored on `t_code` in steps (K5, K7, M0 "
        "consecutive) against catalogue types, which themselves scatter by about one subtype.")
    held, only, both = stelib()
    new = held.subset(only)
    classifier = Classifier.load(("stelib",))
    answers = classifier.classify_many(new.spectra)
    off = steps(answers) - new.step
    head("MILES-trained, STELIB stars not in MILES")
    row("subtype error, 68 %", p68(off), len(new), lambda k: p68(off[k]), "<= 0.90")
    say(f"| off by more than 5 subtypes | {int((np.abs(off) > 5).sum())} | - | {len(new)} | <= 1 |")
    say(f"| median off | {np.nanmedian(off):+.2f} | - | {len(new)} | - |")
    classes_table(new, answers)
    magnitudes(new, answers)
    calibration(new, answers)
    refused = sum(a.status != "typed" for a in answers)
    say(f"| normal stars refused | {refused} | - | {len(new)} | <= 2 % |")
    n_step, n_group = neighbours(new, ("stelib",))
    say(f"| plain nearest neighbours, same stars: subtype error, 68 % | {p68(n_step - new.step):.2f} | - | {len(new)} "
        "| - |")
    say("| plain nearest neighbours: V / III / I exact, % | "
        + " / ".join(f"{100 * np.mean(n_group[new.group == g] == g):.0f}" for g in ("V", "III", "I"))
        + f" | - | {len(new)} | - |")
    hot = np.flatnonzero(new.step < 10)
    if len(hot):
        say(f"| O stars, 68 % | {p68(off[hot]):.2f} | - | {len(hot)} | <= 0.6 |")
    worst(new, answers, off)

    head("The same, catalogue labels taken as they are (no vetting)")
    plain = Classifier(("stelib",), vetted=False)
    raw = plain.classify_many(new.spectra)
    off_raw = steps(raw) - new.step
    row("subtype error, 68 %", p68(off_raw), len(new), lambda k: p68(off_raw[k]), "-")
    classes_table(new, raw)

    two = held.subset(both)
    first, second = pairs(two)
    head("Stars in both libraries, left out of everything learned")
    off2 = steps(first) - two.step
    row("STELIB spectra: subtype error, 68 %", p68(off2), len(two), lambda k: p68(off2[k]), "-")
    classes_table(two, first)
    difference = steps(first) - steps(second)
    row("same star, two instruments: subtype difference, 68 %", p68(difference), len(two), lambda k: p68(difference[k]),
        "<= 0.20")
    same = (groups(first) == groups(second)) * 100.0
    row("same star, two instruments: same class, %", same.mean(), len(two), lambda k: same[k].mean(), ">= 97 %", ".0f")
    magnitudes(two, first)

    head("Types against published effective temperature (STELIB spectra of both sets)")
    everyone = Held([*new.names, *two.names], [*new.spectra, *two.spectra],
                    *(np.concatenate([getattr(new, n), getattr(two, n)]) for n in
                      ("label", "step", "lum_code", "group", "hip", "teff_k", "abs_mag_v", "abs_mag_v_err")))
    teff_scatter(everyone, answers + first)

    head("O stars of both libraries, left out of everything learned")
    o_stars()
    curves(new, classifier)
    extra("foreign", "Not normal stars")
    extra("lines", "Lines")
    extra("distance", "Distances")
    extra("advice", "What would settle it")
    say(f"\nTook {(time.time() - start) / 60:.0f} minutes.")
    (HERE / "RESULTS.md").write_text(out.getvalue())


def o_stars() -> None:
    """Every O star of the library (label O, any kind), left out in two groups."""
    library = load_library()
    c = library.catalogue
    index = np.flatnonzero((c["t_code"] < 10) & (library.valid[:, (WAVE > 4000) & (WAVE < 5000)].mean(axis=1) > 0.9)
                           & (c["hip"] > 0))
    off = np.full(len(index), np.nan)
    words = []
    for f in range(2):
        mine = np.arange(f, len(index), 2)
        classifier = Classifier.load((), tuple(int(h) for h in c["hip"][index[mine]]))
        spectra = [PlainSpectrum(WAVE, np.where(library.valid[i], library.flux[i], 0).astype(float), None,
                                 library.valid[i], "air", "library") for i in index[mine]]
        for k, a in zip(mine, classifier.classify_many(spectra)):
            if a.status == "typed":
                off[k] = float(step_of(a.t_code)) - float(step_of(c["t_code"][index[k]]))
            words.append(f"{c['label'][index[k]]} -> {a.mk_type or a.object_kind}")
    row("subtype error, 68 %", p68(off), len(off), lambda k: p68(off[k]), "<= 0.6")
    say("\n" + "; ".join(words))


if __name__ == "__main__":
    main()
