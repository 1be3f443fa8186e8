"""The decision log: nothing is lost, nothing is rewritten."""

from __future__ import annotations

import json
import multiprocessing
import os
import signal
import subprocess
import sys

import pytest

from starfathom import decisions
from starfathom.classify.errors import RequestError
from starfathom.decisions import Decision, DecisionLog

MACHINE = {"mk_type": "G2 V", "t_code": 42.3, "t_code_err": 0.6}


def test_decisions_hold_until_taken_back(tmp_path):
    log = DecisionLog(tmp_path / "decisions.jsonl")
    log.append(Decision("a", "accept", "G2 V", machine=MACHINE))
    log.append(Decision("b", "amend", "K0 III", flags=("emission",), remark="CN strong", who="xy", machine=MACHINE))
    log.append(Decision("a", "set aside", remark="trailed", machine=MACHINE))
    assert {n: d.action for n, d in log.current().items()} == {"a": "set aside", "b": "amend"}
    b = log.current()["b"]
    assert (b.flags, b.remark, b.who, b.machine["t_code"]) == (("emission",), "CN strong", "xy", 42.3)
    assert b.when.endswith("+00:00") and b.differs

    undone = log.undo()
    assert undone is not None and undone.name == "a"
    assert log.current()["a"].action == "accept"          # the earlier decision holds again
    assert log.undo().name == "b" and log.undo().name == "a" and log.undo() is None
    assert log.current() == {}
    assert len(log.history()) == 6                         # three decisions, three undos: nothing erased


def test_only_a_change_differs(tmp_path):
    assert not Decision("a", "accept", "G2 V", machine=MACHINE).differs
    assert not Decision("a", "amend", "G2 V", flags=("composite",), machine=MACHINE).differs
    assert Decision("a", "amend", "G5 V", machine=MACHINE).differs
    assert Decision("a", "set aside", machine=MACHINE).differs


@pytest.mark.parametrize("torn", [
    b'{"format": 1, "name": "c", "act', b"\xff\xfe\x00", b'{"name": "c"}', b"[1, 2]", b"7",
])
def test_a_torn_or_foreign_line_costs_only_itself(tmp_path, torn):
    log = DecisionLog(tmp_path / "decisions.jsonl")
    log.append(Decision("a", "accept", "G2 V"))
    with open(log.path, "ab") as f:
        f.write(torn)                                      # no newline: the machine stopped here
    assert list(log.current()) == ["a"]
    log.append(Decision("b", "accept", "G2 V"))
    assert list(log.current()) == ["a", "b"]


def test_text_of_any_kind_comes_back(tmp_path):
    log = DecisionLog(tmp_path / "decisions.jsonl")
    remark = "line\nbreak \u2028 \"quotes\" <b>β Cep?</b> \x00"
    log.append(Decision("<script>alert(1)</script>", "amend", "B2 III", remark=remark))
    assert log.current()["<script>alert(1)</script>"].remark == remark
    assert len(log.path.read_bytes().splitlines()) == 1
    json.loads(log.path.read_text())


def test_earlier_bytes_never_change(tmp_path):
    log = DecisionLog(tmp_path / "decisions.jsonl")
    before = b""
    for k in range(5):
        log.append(Decision(f"s{k}", "accept", "A0 V")) if k != 3 else log.undo()
        now = log.path.read_bytes()
        assert now.startswith(before) and len(now) > len(before)
        before = now


def test_a_killed_process_leaves_what_it_had_kept(tmp_path):
    code = ("import sys\nfrom starfathom.decisions import *\nlog = DecisionLog(sys.argv[1])\n"
            "for k in range(10**6):\n    print(log.append(Decision(str(k), 'accept', 'A0 V')).name, flush=True)\n")
    path = tmp_path / "decisions.jsonl"
    writer = subprocess.Popen([sys.executable, "-c", code, str(path)], stdout=subprocess.PIPE, text=True)
    told = [writer.stdout.readline().strip() for _ in range(25)]
    os.kill(writer.pid, signal.SIGKILL)
    writer.communicate()
    assert told[-1] == "24"
    assert set(told) <= set(DecisionLog(path).current())


def _write_many(path, who):
    for k in range(40):
        DecisionLog(path).append(Decision(f"{who}{k}", "accept", "A0 V", who=who))


def test_two_desks_share_one_log(tmp_path):
    path = tmp_path / "decisions.jsonl"
    context = multiprocessing.get_context("spawn")
    writers = [context.Process(target=_write_many, args=(path, w)) for w in "pq"]
    for w in writers:
        w.start()
    for w in writers:
        w.join()
    assert len(DecisionLog(path).current()) == 80


def test_read_of_a_run_folder(tmp_path):
    assert decisions.read(tmp_path) == {}
    DecisionLog(decisions.log_path(tmp_path)).append(Decision("a", "amend", "K1 III", machine=MACHINE))
    assert decisions.read(tmp_path)["a"].mk_type == "K1 III"


def test_a_log_that_cannot_be_written_says_so(tmp_path):
    (tmp_path / "decisions.jsonl").mkdir()
    with pytest.raises(RequestError, match="could not be kept"):
        DecisionLog(tmp_path / "decisions.jsonl").append(Decision("a", "accept", "A0 V"))
