"""Stand-ins for the work on a batch: quick, deterministic, and able to misbehave where a star's name says so."""

from __future__ import annotations

import os
import signal
import time
from collections.abc import Sequence
from hashlib import sha256
from pathlib import Path

from starfathom.chain import RunSettings, row_of
from starfathom.classify.assignment import Assignment
from starfathom.record import BatchResult
from starfathom.targets import Target


def number_from(*parts: object) -> float:
    """A number between 0 and 1 that depends on ``parts`` alone."""
    return int(sha256(repr(parts).encode()).hexdigest()[:12], 16) / 16**12


def quick(number: int, targets: Sequence[Target], settings: RunSettings) -> BatchResult:
    """Rows made of the names and the seed; a star called bad... raises, one called broken... fails by itself."""
    rows, budget = [], []
    for target in targets:
        if target.name.startswith("bad"):
            raise ValueError("this star cannot be worked on")
        x = number_from(target.name, target.index, settings.seed)
        if target.name.startswith("broken"):
            answer = Assignment(file=target.spectrum, reason="The file is broken.")
        else:
            answer = Assignment(file=target.spectrum, status="typed", object_kind="star", mk_type="G2 V", t_code=60 * x)
        rows.append(row_of(target, answer, None) | {"distance_pc": round(1000 * x, 2)})
        budget.append({"name": target.name, "step": "total", "sigma_mag": x, "per_cent": 46 * x, "share": 1.0})
    return BatchResult(number, rows, budget)


def slow(number: int, targets: Sequence[Target], settings: RunSettings) -> BatchResult:
    """Like ``quick``, a fifth of a second a batch."""
    time.sleep(0.2)
    return quick(number, targets, settings)


def deadly(number: int, targets: Sequence[Target], settings: RunSettings) -> BatchResult:
    """Like ``quick``; a star called killer... takes its process with it, one called once... the first time only."""
    for target in targets:
        mark = Path(os.environ.get("RUN_FAKES_MARKS", "/nonexistent")) / target.name
        if target.name.startswith("killer"):
            os.kill(os.getpid(), signal.SIGKILL)
        if target.name.startswith("once") and not mark.exists():
            mark.touch()
            os.kill(os.getpid(), signal.SIGKILL)
    return quick(number, targets, settings)


def write_list(path: Path, names: Sequence[str]) -> Path:
    """A target list with a (nonexistent) spectrum a star, so that batches are small."""
    path.write_text("name,spectrum,V,e_V\n" + "".join(f"{n},{n}.fits,10.0,0.01\n" for n in names))
    return path


def main() -> None:
    """``python run_fakes.py LIST RUN_DIR WORK WORKERS [resume]``: a run to be killed from outside."""
    import sys

    from starfathom.survey import run_survey
    from starfathom.targets import TargetList

    targets, run_dir, work, workers, *more = sys.argv[1:]
    import run_fakes

    run_survey(
        TargetList(targets), run_dir, RunSettings(seed=5), workers=int(workers), resume="resume" in more,
        work=getattr(run_fakes, work), progress=False,
    )  # fmt: skip


if __name__ == "__main__":
    main()
