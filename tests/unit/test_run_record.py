"""The record of a run: whole batches or nothing, each once."""

from __future__ import annotations

import sqlite3
from pathlib import Path

import pytest

from starfathom.classify.errors import RequestError, StarfathomError
from starfathom.record import RECORD_NAME, BatchResult, create_record, open_record


def batch(number: int, *names: str, status: str = "typed") -> BatchResult:
    return BatchResult(number, [{"name": n, "status": status, "x": float("nan")} for n in names],
                       [{"name": n, "step": "total"} for n in names], [{"name": n} for n in names])  # fmt: skip


def test_rows_come_back_in_the_order_of_the_list(tmp_path: Path) -> None:
    with create_record(tmp_path / "run") as record:
        for number, names in ((2, "ef"), (0, "ab"), (1, "cd")):
            assert record.add(batch(number, *names))
        assert [r["name"] for r in record.rows()] == list("abcdef")
        assert [b["name"] for b in record.budget()] == list("abcdef")
        assert list(record.details()) == list("abcdef")
        assert record.done() == {0, 1, 2}


def test_a_batch_that_comes_twice_counts_once(tmp_path: Path) -> None:
    with create_record(tmp_path / "run") as record:
        assert record.add(batch(0, "a", "b"))
        assert not record.add(batch(0, "a", "b", status="failed"))
        assert record.counts() == {"rows": 2, "refused": 0, "failed": 0}


def test_counts_and_facts_survive(tmp_path: Path) -> None:
    with create_record(tmp_path / "run") as record:
        record.set_facts({"seed": 3, "settings": {"a": [1, 2]}})
        record.add(batch(0, "a", status="refused"))
        record.add(batch(1, "b", "c", status="failed"))
    with open_record(tmp_path / "run") as record:
        assert record.facts() == {"seed": 3, "settings": {"a": [1, 2]}}
        assert record.counts() == {"rows": 3, "refused": 1, "failed": 2}


def test_what_is_no_record_is_said_so(tmp_path: Path) -> None:
    with pytest.raises(RequestError, match="holds no run"):
        open_record(tmp_path)
    (tmp_path / RECORD_NAME).write_bytes(b"not a database, " * 100)
    with pytest.raises(RequestError, match="not a readable record"):
        open_record(tmp_path)
    with pytest.raises(RequestError, match="holds a run already"):
        create_record(tmp_path)
    (tmp_path / "file").write_text("x")
    with pytest.raises(RequestError, match="cannot be made a run folder"):
        create_record(tmp_path / "file" / "run")


def test_a_record_that_cannot_grow_says_how_to_go_on(tmp_path: Path) -> None:
    with create_record(tmp_path / "run") as record:
        record.add(batch(0, "a"))
        record._db.execute("PRAGMA max_page_count = 6")
        with pytest.raises(StarfathomError, match="--resume"):
            record.add(BatchResult(1, [{"name": f"{i}" * 50, "x": hash(str(i))} for i in range(2000)]))
        assert record.done() == {0}


def test_another_writer_is_kept_out(tmp_path: Path) -> None:
    with create_record(tmp_path / "run") as record, open_record(tmp_path / "run") as second:
        record.lock()
        with pytest.raises(RequestError, match="another process"):
            second.lock()
    with open_record(tmp_path / "run") as third:
        third.lock()


def test_the_file_is_plain_sqlite(tmp_path: Path) -> None:
    with create_record(tmp_path / "run") as record:
        record.add(batch(0, "a"))
    db = sqlite3.connect(tmp_path / "run" / RECORD_NAME)
    assert db.execute("SELECT number, n_rows FROM batches").fetchall() == [(0, 1)]
    db.close()
