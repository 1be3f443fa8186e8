"""Hand decisions and groups reach the tables; the record keeps what the machine said."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest

from starfathom.chain import RunSettings, assignment_of, detail_of, given_type, row_of, work_batch
from starfathom.classify.assignment import Assignment, Criterion
from starfathom.decisions import Decision, DecisionLog, log_path
from starfathom.overrides import budget_with
from starfathom.record import open_record
from starfathom.survey import run_survey
from starfathom.targets import Target, TargetList

LIST = """name,mk_type,V,e_V,B,e_B
a,G2 V,10.1,0.01,10.8,0.01
b,K0 III,9.1,0.01,10.2,0.01
c,A0 V,8.1,0.01,8.15,0.01
"""


def rows_of(run_dir: Path) -> dict[str, dict[str, str]]:
    import csv

    with open(run_dir / "results.csv", newline="") as stream:
        return {row["name"]: row for row in csv.DictReader(stream)}


def go(run_dir: Path, resume: bool = False) -> dict[str, dict[str, str]]:
    path = run_dir.parent / "list.csv"
    path.write_text(LIST)
    run_survey(
        TargetList(path), run_dir, RunSettings(n_samples=400), workers=1, resume=resume, formats=["csv"], progress=False
    )
    return rows_of(run_dir)


def test_an_amended_type_changes_the_distance(tmp_path: Path) -> None:
    before = go(tmp_path / "run")
    log = DecisionLog(log_path(tmp_path / "run"))
    machine = {"mk_type": "K0 III"}
    log.append(Decision("b", "amend", mk_type="K0 V", remark="no CN at 4216", who="x", machine=machine))
    after = go(tmp_path / "run", resume=True)
    assert after["b"]["mk_type"] == "K0 V"
    assert float(after["b"]["distance_pc"]) < 0.3 * float(before["b"]["distance_pc"])
    assert after["b"]["remark"].startswith("by hand (x): no CN at 4216") and "K0 III" in after["b"]["remark"]
    assert "typed-by-hand" in after["b"]["flags"]
    assert after["a"] == before["a"] and after["c"] == before["c"]
    with open_record(tmp_path / "run") as record:
        assert [r["mk_type"] for r in record.rows()] == ["G2 V", "K0 III", "A0 V"]
    log.undo()
    assert go(tmp_path / "run", resume=True) == before


def test_set_aside_leaves_no_distance(tmp_path: Path) -> None:
    go(tmp_path / "run")
    DecisionLog(log_path(tmp_path / "run")).append(Decision("c", "set aside", remark="blended with a neighbour"))
    after = go(tmp_path / "run", resume=True)
    assert after["c"]["status"] == "refused" and "blended" in after["c"]["reason"]
    assert after["c"]["distance_pc"] == ""
    import csv

    with open(tmp_path / "run" / "budget.csv", newline="") as stream:
        assert {row["name"] for row in csv.DictReader(stream)} == {"a", "b"}


def test_accepted_only_marks(tmp_path: Path) -> None:
    before = go(tmp_path / "run")
    DecisionLog(log_path(tmp_path / "run")).append(Decision("a", "accept", mk_type="G2 V", machine={"mk_type": "G2 V"}))
    after = go(tmp_path / "run", resume=True)
    assert "checked-by-hand" in after["a"]["flags"]
    assert after["a"]["distance_pc"] == before["a"]["distance_pc"]


def test_a_decision_on_a_file_that_has_changed_does_not_hold(tmp_path: Path) -> None:
    from starfathom.overrides import _still_holds

    spectrum = tmp_path / "a.txt"
    spectrum.write_text("4000 1\n")
    target = Target(0, "a", spectrum=str(spectrum))
    from starfathom.decisions import file_digest

    decision = Decision("a", "amend", mk_type="K0 V", digest=file_digest(spectrum))
    assert _still_holds(decision, target)
    spectrum.write_text("4000 2\n")
    assert not _still_holds(decision, target)


def test_an_assignment_survives_the_record() -> None:
    posterior = np.zeros_like(given_type("G2 V").posterior)
    posterior[40, 5], posterior[41, 7] = 0.75, 0.25
    answer = Assignment(
        file="a.fits", status="typed", object_kind="star", mk_type="G2 III", t_code=42.0, posterior=posterior,
        type_set_90=("G2 III", "G3 V"), nearest=("HD 1",), flags=("emission",), notes=("one", "two"),
        evidence=(Criterion("CN", 0.1, 0.02, "G8 III", features=("CN 4216",)),),
    )  # fmt: skip
    target = Target(0, "a", spectrum="a.fits")
    again = assignment_of(row_of(target, answer, None), detail_of(target, answer, None))
    assert np.allclose(again.posterior, posterior)  # type: ignore[arg-type]
    assert (again.mk_type, again.nearest, again.flags, again.notes, again.evidence, again.type_set_90) == (
        answer.mk_type, answer.nearest, answer.flags, answer.notes, answer.evidence, answer.type_set_90)  # fmt: skip


def test_the_budget_keeps_the_order_of_the_rows() -> None:
    from starfathom.overrides import Override

    rows = [{"name": n} for n in "abcd"]
    budget = [{"name": n, "step": s} for n in "abd" for s in ("x", "y")]
    new = {"c": Override({}, [{"name": "c", "step": "z"}]), "b": Override({}, [])}
    assert [b["name"] for b in budget_with(rows, budget, new)] == ["a", "a", "c", "d", "d"]


@pytest.mark.parametrize(
    ("text", "status"), [("K0-K2 III-IV", "typed"), ("B5", "typed"), ("DA", "refused"), ("sdB", "refused")]
)
def test_given_types(text: str, status: str) -> None:
    answer = given_type(text)
    assert answer.status == status
    if answer.posterior is not None:
        assert answer.posterior.sum() == pytest.approx(1.0)


def test_a_row_without_type_or_spectrum_fails_alone() -> None:
    result = work_batch(0, [Target(0, "a"), Target(1, "b", mk_type="G2 V", magnitudes={"V": (9.0, 0.01)})],
                        RunSettings(n_samples=400))  # fmt: skip
    assert [r["status"] for r in result.rows] == ["failed", "typed"]
    assert "neither a spectrum nor a type" in result.rows[0]["reason"]
    assert result.rows[1]["distance_pc"] > 0


def test_the_budget_adds_up_to_its_total() -> None:
    result = work_batch(0, [Target(0, "b", mk_type="K0 III", magnitudes={"V": (9.0, 0.01), "B": (10.2, 0.01)})],
                        RunSettings(n_samples=2000))  # fmt: skip
    parts = {b["step"]: b["sigma_mag"] for b in result.budget}
    total = parts.pop("total")
    assert sum(s**2 for s in parts.values()) == pytest.approx(total**2, rel=1e-6)
