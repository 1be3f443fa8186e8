"""From the command line's words to a night: files, or the stars of a run."""

from __future__ import annotations

import heapq
from collections.abc import Iterable, Sequence
from pathlib import Path
from typing import Any

from starfathom.classify.errors import RequestError
from starfathom.decisions import FILE_NAME, DecisionLog, log_path
from starfathom.desk.night import Night, Star, name_stars
from starfathom.report.gather import StarResult, spectrum_path

#: Of a longer run only so many stars come to the desk, the neediest.
MOST_STARS = 2000


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


def _rows_to_look_at(rows: Iterable[dict[str, Any]], count: int) -> list[dict[str, Any]]:
    """Rows with a spectrum; of a long run those alone whose distance is the least certain."""
    seen = (row for row in rows if row.get("file"))
    if count <= MOST_STARS:
        return list(seen)
    return heapq.nlargest(MOST_STARS, seen, key=lambda row: StarResult(0, row).need.score)


def of_run(run_dir: Path) -> Night:
    """The stars of a run, with the settings and the answers of the run where its record keeps them.

    Raises
    ------
    RequestError : the folder holds no run, or none of its stars has a spectrum
    """
    from starfathom.chain import assignment_of
    from starfathom.classify import Classifier, Settings
    from starfathom.classify.reading import read_plain
    from starfathom.record import open_record

    with open_record(run_dir) as record:
        facts = record.facts()
        asked: dict[str, Any] = facts.get("settings", {})
        count = record.counts()["rows"]
        rows = _rows_to_look_at(record.rows(), count)
        details = record.details() if count <= MOST_STARS else {}
    if not rows:
        raise RequestError(f"{run_dir}: no star of this run has a spectrum to check")
    medium = asked.get("medium")
    stars = []
    for row in rows:
        detail = details.get(row["name"])
        target = {} if detail is None else detail["target"]
        settings = Settings(medium=medium, fwhm_angstrom=target.get("fwhm_angstrom"),
                            velocity_kms=target.get("velocity_kms"))
        said = None if detail is None else assignment_of(row, detail)
        path = spectrum_path(run_dir, facts, row["file"])
        stars.append(Star(row["name"], path, settings, said, row=row, target=target))
    classifier = Classifier.load(without_libraries=tuple(asked.get("without_libraries", ())),
                                 without_stars=tuple(asked.get("without_stars", ())))
    return Night(stars, classifier, DecisionLog(log_path(run_dir)), lambda path: read_plain(path, medium=medium),
                 scaling={k: asked.get(k) for k in ("scale", "prior", "rv")},
                 afterwards=f"To carry them into the distances: starfathom run {facts.get('targets', 'TARGETS')} "
                            f"-o {run_dir} --resume")
