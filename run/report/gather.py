"""What a report shows, read back from a finished run's folder."""

from __future__ import annotations

import csv
import math
from dataclasses import dataclass, field
from functools import cached_property
from pathlib import Path
from typing import Any

from starfathom.classify.assignment import Assignment
from starfathom.decisions import Decision, DecisionLog, log_path
from starfathom.desk.needs import Need, need

#: A page a star up to this many stars; above it only for those that want a look.
STAR_PAGES = 500
#: So many stars are listed as wanting a look.
WANTED = 12


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
class RunResult:
    """A whole run: ``facts`` are its settings and versions, ``tables`` the result files beside the report."""

    folder: Path
    facts: dict[str, Any]
    stars: list[StarResult]
    tables: list[Path]

    @property
    def wanted(self) -> list[StarResult]:
        """The stars that want a look, neediest first."""
        worth = [s for s in self.stars if s.need.score >= 5.0]
        return sorted(worth, key=lambda s: -s.need.score)[:WANTED]


def read_run(run_dir: str | Path) -> RunResult:
    """Everything the report needs.

    Raises
    ------
    RequestError : the folder holds no run
    """
    from starfathom.record import open_record

    folder = Path(run_dir)
    with open_record(folder) as record:
        facts = record.facts()
        details = record.details()
        machine = {row["name"]: row for row in record.rows()} if details else {}
        rows = _final_rows(folder) or list(record.rows())
        budgets = _budgets(folder) or list(record.budget())
    log = DecisionLog(log_path(folder))
    history, holding = log.history(), log.current()
    told: dict[str, list[Decision]] = {}
    for d in history:
        told.setdefault(d.name, []).append(d)
    parts: dict[str, list[dict[str, Any]]] = {}
    for part in budgets:
        parts.setdefault(str(part["name"]), []).append(part)
    stars = []
    for k, row in enumerate(rows):
        name = str(row["name"])
        detail = details.get(name)
        if detail is not None:
            detail = {**detail, "row": machine.get(name, row)}
        stars.append(StarResult(k, row, parts.get(name, []), detail, told.get(name, []), holding.get(name)))
    tables = sorted(p for stem in ("results", "budget") for p in folder.glob(f"{stem}.*") if p.is_file())
    return RunResult(folder, facts, stars, tables)


def spectrum_path(facts: dict[str, Any], path: str) -> str:
    """Where a run's spectrum is now: as the run named it, else beside the target list, wherever one stands."""
    if Path(path).is_file():
        return path
    beside = Path(str(facts.get("targets", ""))).parent / Path(path).name
    return str(beside) if beside.is_file() else path


def _final_rows(folder: Path) -> list[dict[str, Any]]:
    """Rows of the results as written, hand decisions and all; empty when the run was asked for no ECSV."""
    return _read_ecsv(folder / "results.ecsv")


def _budgets(folder: Path) -> list[dict[str, Any]]:
    return _read_ecsv(folder / "budget.ecsv")


def _read_ecsv(path: Path) -> list[dict[str, Any]]:
    if not path.is_file():
        return []
    with open(path, encoding="utf-8", newline="") as stream:
        lines = (line for line in stream if not line.startswith("#"))
        return [dict(row) for row in csv.DictReader(lines)]
