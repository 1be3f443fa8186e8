"""What is settled only when a run's batches are all in: hand decisions, and the common distance of groups.

Both replace single rows of the record on their way into the tables; the record itself keeps what the machine said.
"""

from __future__ import annotations

import itertools
from collections.abc import Iterable, Iterator, Mapping
from dataclasses import dataclass, replace
from typing import TYPE_CHECKING, Any

from starfathom.chain import BY_HAND, assignment_of, budget_of, fathom_targets, given_type, row_of
from starfathom.targets import Target, TargetList

if TYPE_CHECKING:
    from starfathom.chain import RunSettings
    from starfathom.classify.assignment import Assignment
    from starfathom.decisions import Decision
    from starfathom.record import Record

Row = Mapping[str, Any]
CHECKED = "checked-by-hand"


@dataclass(frozen=True)
class Override:
    """The row and budget that take the place of a star's own."""

    row: dict[str, Any]
    budget: list[dict[str, Any]]


def find_overrides(record: Record, targets: TargetList, settings: RunSettings) -> dict[str, Override]:
    """New rows by star name, for stars decided by hand and for members of groups."""
    from starfathom import decisions

    decided = {name: d for name, d in decisions.read(record.path.parent).items() if d.action != "undo"}
    grouped = targets.has_groups
    if not decided and not grouped:
        return {}
    details = record.details()
    wanted = set(decided) | {n for n, d in details.items() if d["target"]["group"]}
    found = {t.name: t for t in targets.targets() if t.name in wanted}
    rows = {row["name"]: row for row in record.rows() if row["name"] in found}
    chosen: list[Target] = []
    assignments: list[Assignment] = []
    for name, target in found.items():
        assignment = assignment_of(rows[name], details.get(name))
        decision = decided.get(name)
        if decision is not None and _still_holds(decision, target):
            assignment = decide(assignment, decision)
        chosen.append(target)
        assignments.append(assignment)
    answers = fathom_targets(chosen, assignments, settings, common_groups=True)
    return {t.name: Override(row_of(t, a, f), budget_of(t, f)) for t, a, f in zip(chosen, assignments, answers)}


def _still_holds(decision: Decision, target: Target) -> bool:
    """Whether the spectrum is the one that was looked at."""
    from starfathom.decisions import file_digest

    return not decision.digest or not target.spectrum or file_digest(target.spectrum) == decision.digest


def decide(assignment: Assignment, decision: Decision) -> Assignment:
    """The assignment as a person's decision leaves it."""
    said = f"by hand{f' ({decision.who})' if decision.who else ''}: {decision.remark}".rstrip(": ")
    flags = tuple(dict.fromkeys((*assignment.flags, *decision.flags, CHECKED)))
    remark = "; ".join(part for part in (said, assignment.remark) if part)
    if decision.action == "set aside":
        return replace(
            assignment, status="refused", reason=f"Set aside {said}.", mk_type="", posterior=None, flags=flags
        )
    if not decision.differs:
        return replace(assignment, flags=flags, remark=remark)
    new = given_type(decision.mk_type)
    machine = decision.machine.get("mk_type") or decision.machine.get("status") or "nothing"
    return replace(
        assignment,
        status=new.status,
        object_kind=new.object_kind,
        other_type=new.other_type,
        reason=new.reason,
        mk_type=new.mk_type,
        t_code=new.t_code,
        t_code_err=new.t_code_err,
        lum_code=new.lum_code,
        lum_code_err=new.lum_code_err,
        posterior=new.posterior,
        type_set_90=(new.mk_type,) if new.mk_type else (),
        flags=(*flags, BY_HAND),
        remark=f"{said}; the machine had said {machine}",
    )


def rows_with(rows: Iterable[Row], overrides: Mapping[str, Override]) -> Iterator[Row]:
    """The rows, with the overrides in place."""
    for row in rows:
        override = overrides.get(row["name"])
        yield override.row if override is not None else row


def budget_with(rows: Iterable[Row], budget: Iterable[Row], overrides: Mapping[str, Override]) -> Iterator[Row]:
    """The budget in the order of the rows, with the overrides in place."""
    if not overrides:
        yield from budget
        return
    groups = itertools.groupby(budget, key=lambda entry: entry["name"])
    waiting = next(groups, None)
    for row in rows:
        name = row["name"]
        own: list[Row] = []
        if waiting is not None and waiting[0] == name:
            own = list(waiting[1])
            waiting = next(groups, None)
        yield from overrides[name].budget if name in overrides else own
