"""From the command line's words to a night: files, or the stars of a run."""

from __future__ import annotations

from collections.abc import Sequence
from pathlib import Path

from starfathom.classify.errors import RequestError
from starfathom.decisions import FILE_NAME, DecisionLog, log_path
from starfathom.desk.night import Night, Star, name_stars


def gather(paths: Sequence[str]) -> Night:
    """The night that ``paths`` (spectrum files, or one run folder) make. Nothing is read or typed yet.

    Raises
    ------
    RequestError : nothing there, or a folder that is not a run
    """
    if not paths:
        raise RequestError("name the spectra to check, or a run folder")
    if len(paths) == 1 and Path(paths[0]).is_dir():
        return of_run(Path(paths[0]))
    missing = [p for p in paths if not Path(p).is_file()]
    if missing:
        others = f", nor {len(missing) - 1} others" if missing[1:] else ""
        raise RequestError(f"there is no file {missing[0]}{others}")
    from starfathom.classify import Classifier, Settings
    from starfathom.classify.reading import read_plain

    stars = [Star(name, path, Settings()) for name, path in zip(name_stars(paths), paths)]
    return Night(stars, Classifier.load(), DecisionLog(beside(paths)), read_plain)


def beside(paths: Sequence[str]) -> Path:
    """Where the decisions about loose files are kept: in their folder, or the current one when they have several."""
    folders = {Path(p).parent for p in paths}
    return (folders.pop() if len(folders) == 1 else Path(".")) / FILE_NAME


def of_run(run_dir: Path) -> Night:
    """The stars of a finished (or stopped) run, settings as they were in it."""
    import csv

    from starfathom.classify import Classifier, Settings
    from starfathom.classify.reading import read_plain

    table = run_dir / "results.ecsv"
    if not table.is_file():
        raise RequestError(f"{run_dir} is not a run folder: it has no results.ecsv")
    with open(table, encoding="utf-8", newline="") as f:
        rows = list(csv.DictReader(line for line in f if not line.startswith("#")))
    stars = [Star(r["name"], r["file"], Settings(), row=dict(r)) for r in rows if r.get("file")]
    if not stars:
        raise RequestError(f"no star of {run_dir} has a spectrum to check")
    return Night(stars, Classifier.load(), DecisionLog(log_path(run_dir)), read_plain)
