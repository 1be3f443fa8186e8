"""What a report shows, read back from a finished run's folder."""

from __future__ import annotations

import csv
import heapq
import math
from collections import Counter
from collections.abc import Iterator
from dataclasses import dataclass, field
from functools import cached_property
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from starfathom.classify.assignment import Assignment
from starfathom.decisions import Decision, DecisionLog, log_path
from starfathom.desk.needs import Need, need

FloatArray = NDArray[np.float64]

#: A page a star up to this many stars; above it only for those that want a look.
STAR_PAGES = 500
#: So many stars are listed as wanting a look, and with what need at least.
WANTED = 12
WORTH_A_LOOK = 5.0
#: The summary table lists so many stars; beyond that the tables beside it are the better tool.
TABLE_ROWS = 5000
#: Table files, by suffix, and what they are.
KINDS = {".ecsv": "text with units and descriptions (astropy)", ".csv": "plain text", ".fits": "FITS binary table",
         ".vot": "VOTable, with UCDs", ".parquet": "Parquet"}
LOG_T_EDGES: FloatArray = np.linspace(3.3, 4.8, 121)
LOG_L_EDGES: FloatArray = np.linspace(-4.0, 6.6, 107)


@dataclass
class StarResult:
    """One star of a run: its row of results, its budget, its detail (None when the run kept none), its decisions."""

    number: int
    row: dict[str, Any]
    budget: list[dict[str, Any]] = field(default_factory=list)
    detail: dict[str, Any] | None = None
    decisions: list[Decision] = field(default_factory=list)
    decision: Decision | None = None

    @property
    def name(self) -> str:
        return str(self.row["name"])

    @property
    def page(self) -> str:
        """File name of the star's page; a number, since a name may hold anything."""
        return f"star-{self.number + 1:04d}.html"

    def number_of(self, column: str) -> float:
        """A column as a number, NaN where there is none."""
        try:
            value = self.row.get(column)
            return float("nan") if value in (None, "") else float(value)
        except (TypeError, ValueError):
            return float("nan")

    def text_of(self, column: str) -> str:
        """A column as text."""
        value = self.row.get(column)
        return "" if value is None else str(value)

    @property
    def cautions(self) -> list[str]:
        """Sentences on what to keep in mind."""
        text = self.text_of("cautions").strip()
        return [part.strip().rstrip(".") + "." for part in text.replace(".; ", ". ").split(". ") if part.strip()]

    @cached_property
    def assignment(self) -> Assignment | None:
        """The machine's own answer, when the run kept its details."""
        from starfathom.chain import assignment_of

        if self.detail is None:
            return None
        return assignment_of(self.detail.get("row", self.row), self.detail)

    @cached_property
    def need(self) -> Need:
        """How much it needs a look: from the posterior where it was kept, else from the spread of the distance."""
        if self.decision is not None:
            return Need(-2.0, "decided by hand")
        if self.assignment is not None:
            return need(self.assignment)
        status = self.text_of("status")
        if status != "typed":
            return Need(1000.0 if status == "refused" else -1.0, status)
        lo, hi, mid = (self.number_of(c) for c in ("distance_lo_pc", "distance_hi_pc", "distance_pc"))
        spread = 50.0 * (hi - lo) / mid if math.isfinite(mid) and mid > 0 else 0.0
        why = self.text_of("flags").split(",")[0] or "spread of distance"
        return Need(spread if math.isfinite(spread) else 0.0, why)


@dataclass
class Tally:
    """What is counted over every star of a run, however many."""

    status: Counter[str] = field(default_factory=Counter)
    with_distance: int = 0
    by_hand: int = 0
    #: Stars a cell of the H-R diagram, edges :data:`LOG_T_EDGES` x :data:`LOG_L_EDGES`.
    diagram: FloatArray = field(default_factory=lambda: np.zeros((len(LOG_T_EDGES) - 1, len(LOG_L_EDGES) - 1)))

    def add(self, star: StarResult) -> None:
        """Count one star in."""
        self.status[star.text_of("status")] += 1
        self.with_distance += math.isfinite(star.number_of("distance_pc"))
        self.by_hand += star.decision is not None
        t, lum = star.number_of("teff_k"), star.number_of("log_lum_lsun")
        if t > 0 and math.isfinite(lum):
            i = int(np.searchsorted(LOG_T_EDGES, math.log10(t), "right")) - 1
            j = int(np.searchsorted(LOG_L_EDGES, lum, "right")) - 1
            if 0 <= i < self.diagram.shape[0] and 0 <= j < self.diagram.shape[1]:
                self.diagram[i, j] += 1


@dataclass
class RunResult:
    """A whole run: ``facts`` are its settings and versions, ``tables`` the result files beside the report.

    ``stars`` are the first :data:`TABLE_ROWS` of them, ``wanted`` those of all that want a look, neediest first.
    """

    folder: Path
    facts: dict[str, Any]
    stars: list[StarResult]
    wanted: list[StarResult]
    tally: Tally
    tables: list[Path]


def read_run(run_dir: str | Path) -> RunResult:
    """Everything the report needs, in memory that does not grow with the number of stars.

    Raises
    ------
    RequestError : the folder holds no run
    """
    from starfathom.record import open_record

    folder = Path(run_dir)
    log = DecisionLog(log_path(folder))
    history, holding = log.history(), log.current()
    told: dict[str, list[Decision]] = {}
    for d in history:
        told.setdefault(d.name, []).append(d)
    tally = Tally()
    stars: list[StarResult] = []
    wanted: list[tuple[float, int, StarResult]] = []
    with open_record(folder) as record:
        facts = record.facts()
        details = record.details() if record.counts()["rows"] <= STAR_PAGES else {}
        machine = {row["name"]: row for row in record.rows()} if details else {}
        # the results as written hold hand decisions and all; without them (no ECSV asked for), the record's own
        for k, row in enumerate(_read_ecsv(folder / "results.ecsv") or record.rows()):
            name = str(row["name"])
            detail = details.get(name)
            if detail is not None:
                detail = {**detail, "row": machine.get(name, row)}
            star = StarResult(k, row, [], detail, told.get(name, []), holding.get(name))
            tally.add(star)
            if len(stars) < TABLE_ROWS:
                stars.append(star)
            if star.need.score >= WORTH_A_LOOK:
                heapq.heappush(wanted, (star.need.score, -k, star))
                if len(wanted) > WANTED:
                    heapq.heappop(wanted)
        if len(stars) <= STAR_PAGES:
            by_name = {s.name: s for s in stars}
            for part in _read_ecsv(folder / "budget.ecsv") or record.budget():
                if str(part["name"]) in by_name:
                    by_name[str(part["name"])].budget.append(part)
    tables = sorted(p for stem in ("results", "budget") for p in folder.glob(f"{stem}*")
                    if p.suffix in KINDS or p.is_dir())
    return RunResult(folder, facts, stars, [s for _, _, s in sorted(wanted, reverse=True)], tally, tables)


def spectrum_path(run_dir: Path, facts: dict[str, Any], path: str) -> str:
    """Where a run's spectrum is, wherever one stands now: as the run named it, beside the target list, or that path
    counted from one of the folders the run is in. The path itself when it is in none of these places."""
    listed = Path(str(facts.get("targets", ""))).parent / Path(path).name
    for place in (Path(path), listed, *(folder / path for folder in run_dir.resolve().parents)):
        if place.is_file():
            return str(place)
    return path


def _read_ecsv(path: Path) -> Iterator[dict[str, Any]] | None:
    """Rows one by one as text; None when there is no such file."""
    if not path.is_file():
        return None
    return _rows_of(path)


def _rows_of(path: Path) -> Iterator[dict[str, Any]]:
    with open(path, encoding="utf-8", newline="") as stream:
        yield from csv.DictReader(line for line in stream if not line.startswith("#"))
