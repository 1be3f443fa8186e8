"""Speed of the whole classification, from files: rate a core, where it goes, workers, numbers of spectra, memory.

Every row is a ratio of two times (or sizes) taken in the same run on the same machine.
"""

from __future__ import annotations

import os
import resource
import subprocess
import sys
import tempfile
import time
from collections.abc import Callable
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

FloatArray = NDArray[np.float64]

PIXELS = 4000
WAVE = np.linspace(3760.0, 7350.0, PIXELS)
#: Spectra of the largest run.
MANY = int(os.environ.get("STARFATHOM_BENCH_SPECTRA", "10000"))
BATCH = 32


def make_files(folder: Path, n: int, seed: int = 3) -> list[Path]:
    """``n`` FITS images of library stars of all types, 4000 pixels, S/N 20 to 200, moved by up to 200 km/s."""
    from astropy.io import fits

    from starfathom.templates.library import load_library

    rng = np.random.default_rng(seed)
    library = load_library()
    kept = (library.wave_angstrom > 3740) & (library.wave_angstrom < 7370)
    full = np.flatnonzero(library.valid[:, kept].mean(axis=1) > 0.99)
    normal = full[library.catalogue["kind"][full] == "normal"]
    head = fits.Header(
        {"CTYPE1": "AWAV", "CUNIT1": "Angstrom", "CRPIX1": 1.0, "CRVAL1": WAVE[0], "CDELT1": WAVE[1] - WAVE[0]}
    )
    paths = []
    for i in range(n):
        star = rng.choice(normal)
        flux = np.interp(WAVE / (1 + rng.uniform(-200, 200) / 299792.458), library.wave_angstrom, library.flux[star])
        flux += rng.standard_normal(PIXELS) * np.median(flux) / rng.uniform(20, 200)
        paths.append(folder / f"s{i:05d}.fits")
        fits.PrimaryHDU(flux.astype(np.float32), head).writeto(paths[-1])
    return paths


def write_list(path: Path, spectra: list[Path]) -> Path:
    """A target list of these spectra, without magnitudes: what is timed is the classification."""
    path.write_text("name,spectrum\n" + "".join(f"{p.stem},{p}\n" for p in spectra))
    return path


def best_of(times: int, call: Callable[[], object]) -> float:
    """Least seconds of several calls."""
    seconds = []
    for _ in range(times):
        start = time.perf_counter()
        call()
        seconds.append(time.perf_counter() - start)
    return min(seconds)


def _stages(paths: list[Path]) -> dict[str, float]:
    """Milliseconds a spectrum: reading, all of it, and the bare matrix product of the same match."""
    from starfathom.classify.engine import Classifier, Settings
    from starfathom.classify.reading import read_plain
    from starfathom.classify.surface import WIDE as MATCHED

    classifier = Classifier.load()
    spectra = [read_plain(p) for p in paths]
    classifier.classify_many(spectra[:BATCH], Settings())
    rng = np.random.default_rng(1)
    block = rng.standard_normal((BATCH, len(MATCHED)))
    shelf = rng.standard_normal((len(classifier.library), block.shape[1]))
    natives = [classifier._native(s, Settings()) for s in spectra]

    def prepare() -> None:
        for start in range(0, len(spectra), BATCH):
            part = slice(start, start + BATCH)
            classifier.prepare_batch(natives[part], spectra[part], [Settings()] * len(spectra[part]))

    n = len(paths)
    found = {
        "read": best_of(3, lambda: [read_plain(p) for p in paths]) / n,
        "prepare": best_of(3, prepare) / n,
        "classify": best_of(3, lambda: classifier.classify_many(spectra, Settings())) / n,
        "product": best_of(5, lambda: block @ shelf.T) / BATCH,
    }
    return {name: 1e3 * seconds for name, seconds in found.items()}


def _templates(paths: list[Path]) -> list[tuple[int, float]]:
    """(templates, milliseconds a spectrum) with one source library, with the other, with both."""
    from starfathom.classify.engine import Classifier, Settings
    from starfathom.classify.reading import read_plain

    spectra = [read_plain(p) for p in paths]
    found = []
    for left_out in (("miles",), ("stelib",), ()):
        classifier = Classifier.load(without_libraries=left_out)
        classifier.classify_many(spectra[:BATCH], Settings())
        spent = best_of(3, lambda c=classifier: c.classify_many(spectra, Settings()))  # type: ignore[misc]
        found.append((len(classifier.library), 1e3 * spent / len(spectra)))
    return found


def _run(listed: Path, workers: int) -> tuple[float, float]:
    """Seconds and the sum of the peak memories (MB) of a run in processes of its own."""
    with tempfile.TemporaryDirectory() as folder:
        command = [sys.executable, __file__, "run", str(listed), folder + "/run", str(workers)]
        out = subprocess.run(command, capture_output=True, text=True, check=True).stdout.split()
    return float(out[0]), float(out[1])


def _run_here(listed: str, run_dir: str, workers: str) -> None:
    """Child of :func:`_run`: prints the seconds of the work and the peak memory, starting excluded from neither."""
    from starfathom.chain import RunSettings
    from starfathom.survey import run_survey
    from starfathom.targets import TargetList

    start = time.perf_counter()
    run_survey(TargetList(listed), run_dir, RunSettings(), workers=int(workers), formats=["ecsv"], progress=False)
    seconds = time.perf_counter() - start
    own = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1024
    # The largest child; a run has as many as workers.
    child = resource.getrusage(resource.RUSAGE_CHILDREN).ru_maxrss / 1024
    print(seconds, own + (int(workers) * child if int(workers) > 1 else 0.0))


def rows() -> list[dict[str, Any]]:
    """Rows of the speed table."""
    out: list[dict[str, Any]] = []

    def add(task: str, ours: str, against: str, ratio: float, target: str = "") -> None:
        out.append({"task": task, "ours": ours, "against": against, "ratio": ratio, "target": target})

    with tempfile.TemporaryDirectory() as folder:
        paths = make_files(Path(folder), MANY)
        stage = _stages(paths[: 4 * BATCH])
        whole = stage["read"] + stage["classify"]
        rate = 1000 / whole
        add(
            f"whole classification from FITS files, {PIXELS} px, full library, one core, warm",
            f"{rate:.0f} spectra/s",
            "100 spectra/s",
            rate / 100,
            ">= 1",
        )
        for name, text in (("read", "reading"), ("prepare", "preparing (velocity, width, rectifying)")):
            add(f"of that, {text}", f"{stage[name]:.2f} ms", f"{whole:.2f} ms", stage[name] / whole)
        rest = stage["classify"] - stage["prepare"]
        add(
            "of that, matching, criteria, posterior, absolute magnitude",
            f"{rest:.2f} ms",
            f"{whole:.2f} ms",
            rest / whole,
        )
        add(
            "whole classification against the bare matrix product with every template",
            f"{whole:.2f} ms",
            f"{stage['product']:.3f} ms",
            whole / stage["product"],
        )
        *fewer, (number, milliseconds) = _templates(paths[: 2 * BATCH])
        for fewer_number, fewer_milliseconds in fewer:
            add(
                f"classification with {number} templates against {fewer_number}", f"{milliseconds:.2f} ms",
                f"{fewer_milliseconds:.2f} ms", milliseconds / fewer_milliseconds,
            )  # fmt: skip
        lists = {n: write_list(Path(folder) / f"list{n}.csv", paths[:n]) for n in sorted({100, 1000, MANY // 2, MANY})}
        seconds: dict[tuple[int, int], float] = {}
        memory: dict[int, float] = {}
        for n, workers in ((100, 2), (1000, 1), (1000, 2), (MANY // 2, 2), (MANY, 2)):
            seconds[n, workers], memory[n] = _run(lists[n], workers)
        # What a run of 100 costs is nearly all starting up; taken off, the rest is the rate.
        one = (seconds[1000, 1] - seconds[100, 2]) / 900
        two = (seconds[1000, 2] - seconds[100, 2]) / 900
        add(
            "two workers against one, 1000 spectra, starting taken off",
            f"{1e3 * two:.2f} ms",
            f"{1e3 * one:.2f} ms",
            one / two,
            ">= 1.8",
        )
        half = seconds[MANY // 2, 2] - seconds[100, 2]
        full = seconds[MANY, 2] - seconds[100, 2]
        add(
            f"time of {MANY} spectra against {MANY // 2}, starting taken off, two workers",
            f"{full:.1f} s",
            f"{half:.1f} s",
            full / half,
            "1.8 to 2.2",
        )
        add(
            f"time of {MANY} spectra against 1000, two workers, as it is",
            f"{seconds[MANY, 2]:.1f} s",
            f"{seconds[1000, 2]:.1f} s",
            seconds[MANY, 2] / seconds[1000, 2],
        )
        add(
            f"peak memory of all processes, {MANY} spectra, two workers",
            f"{memory[MANY]:.0f} MB",
            "1024 MB",
            memory[MANY] / 1024,
            "<= 1",
        )
        add(
            f"peak memory of {MANY} spectra against 1000",
            f"{memory[MANY]:.0f} MB",
            f"{memory[1000]:.0f} MB",
            memory[MANY] / memory[1000],
            "about 1",
        )
    return out


if __name__ == "__main__":
    if sys.argv[1:2] == ["run"]:
        _run_here(*sys.argv[2:])
    else:
        for row in rows():
            print(f"{row['task']:90s} {row['ours']:>16s} {row['against']:>16s} {row['ratio']:8.2f} {row['target']}")
