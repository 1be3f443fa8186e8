"""A run gives the same tables however it is carried out, interrupted, spread or broken."""

from __future__ import annotations

import os
import random
import resource
import signal
import subprocess
import sys
import time
from pathlib import Path

import pytest
import run_fakes

from starfathom.chain import RunSettings
from starfathom.classify.errors import RequestError, StarfathomError
from starfathom.record import open_record
from starfathom.survey import RunOutcome, run_survey
from starfathom.targets import TargetList

HERE = Path(__file__).parent
NAMES = [f"s{i:04d}" for i in range(500)]


def tables_of(run_dir: Path) -> dict[str, bytes]:
    return {p.name: p.read_bytes() for p in sorted(run_dir.iterdir()) if p.suffix not in (".sqlite", ".lock")}


def do(listed: Path, run_dir: Path, **options: object) -> RunOutcome:
    options = {"work": run_fakes.quick, "progress": False} | options
    return run_survey(TargetList(listed), run_dir, RunSettings(seed=5), **options)  # type: ignore[arg-type]


@pytest.fixture(scope="module")
def listed(tmp_path_factory: pytest.TempPathFactory) -> Path:
    return run_fakes.write_list(tmp_path_factory.mktemp("list") / "stars.csv", NAMES)


@pytest.fixture(scope="module")
def expected(listed: Path, tmp_path_factory: pytest.TempPathFactory) -> dict[str, bytes]:
    run_dir = tmp_path_factory.mktemp("whole") / "run"
    do(listed, run_dir, workers=1)
    return tables_of(run_dir)


def test_every_star_once_and_in_order(listed: Path, tmp_path: Path) -> None:
    outcome = do(listed, tmp_path / "run", workers=1, formats=["csv"])
    with open_record(tmp_path / "run") as record:
        assert [r["name"] for r in record.rows()] == NAMES
    assert outcome.counts() == {"rows": 500, "refused": 0, "failed": 0}
    lines = (tmp_path / "run" / "results.csv").read_text().splitlines()
    assert [line.split(",")[0] for line in lines[1:]] == NAMES


def test_all_formats_are_written_by_default(expected: dict[str, bytes]) -> None:
    assert set(expected) == {"run.json", *(f"{stem}.{suffix}" for stem in ("results", "budget")
                             for suffix in ("ecsv", "csv", "fits", "vot", "parquet"))}  # fmt: skip


def test_two_workers_give_the_same_bytes_as_one(listed: Path, expected: dict[str, bytes], tmp_path: Path) -> None:
    do(listed, tmp_path / "run", workers=2)
    assert tables_of(tmp_path / "run") == expected


def test_another_seed_gives_other_numbers(listed: Path, expected: dict[str, bytes], tmp_path: Path) -> None:
    run_survey(
        TargetList(listed), tmp_path / "run", RunSettings(seed=6), workers=1, work=run_fakes.quick, progress=False
    )
    assert tables_of(tmp_path / "run")["results.csv"] != expected["results.csv"]


def _batches_in(run_dir: Path) -> int:
    import sqlite3

    try:
        with open_record(run_dir) as record:
            return len(record.done())
    except (RequestError, StarfathomError, sqlite3.Error):
        return 0


def _start(listed: Path, run_dir: Path, work: str, workers: int, resume: bool) -> subprocess.Popen[bytes]:
    command = [sys.executable, str(HERE / "run_fakes.py"), str(listed), str(run_dir), work, str(workers)]
    return subprocess.Popen(
        command + ["resume"] * resume, stderr=subprocess.PIPE, env=os.environ | {"PYTHONPATH": str(HERE)}
    )


@pytest.mark.slow
def test_killed_five_times_at_random_and_resumed(listed: Path, expected: dict[str, bytes], tmp_path: Path) -> None:
    run_dir = tmp_path / "run"
    rng = random.Random(int(os.environ.get("STARFATHOM_TEST_SEED", "17")))
    sizes = []
    for kill in range(5):
        process = _start(listed, run_dir, "slow", 1 + kill % 2, resume=(run_dir / "record.sqlite").exists())
        # Sixteen batches of 0.2 s. The first kill may come before the record is there, the others at any moment of
        # the two or three batches that follow.
        deadline = time.monotonic() + 30
        while kill and _batches_in(run_dir) < 2 * kill and process.poll() is None and time.monotonic() < deadline:
            time.sleep(0.02)
        time.sleep(rng.uniform(0.0, 0.5))
        assert process.poll() is None, process.stderr.read().decode()  # type: ignore[union-attr]
        process.kill()
        process.wait()
        sizes.append(_batches_in(run_dir))
    assert 0 < sizes[1] and sizes[-1] < 16, "the kills missed the work"
    assert sizes == sorted(sizes), "a batch was lost"
    if (run_dir / "record.sqlite").exists():
        do(listed, run_dir, workers=2, resume=True)
    else:
        do(listed, run_dir, workers=2)
    assert tables_of(run_dir) == expected


def test_workers_end_when_the_run_is_killed(listed: Path, tmp_path: Path) -> None:
    process = _start(listed, tmp_path / "run", "slow", 2, resume=False)
    children: list[int] = []
    deadline = time.monotonic() + 20
    while len(children) < 2 and time.monotonic() < deadline:
        time.sleep(0.1)
        children = _children(process.pid)
    assert len(children) >= 2
    process.kill()
    process.wait()
    deadline = time.monotonic() + 15
    while any(_alive(pid) for pid in children) and time.monotonic() < deadline:
        time.sleep(0.1)
    assert not any(_alive(pid) for pid in children)


def _children(pid: int) -> list[int]:
    import psutil

    return [c.pid for c in psutil.Process(pid).children(recursive=True) if "spawn_main" in " ".join(c.cmdline())]


def _alive(pid: int) -> bool:
    import psutil

    return psutil.pid_exists(pid) and psutil.Process(pid).status() != psutil.STATUS_ZOMBIE


def test_a_worker_killed_once_costs_nothing(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    names = [*NAMES[:100], "once-a", *NAMES[100:200], "once-b"]
    listed = run_fakes.write_list(tmp_path / "stars.csv", names)
    monkeypatch.setenv("RUN_FAKES_MARKS", str(tmp_path))
    do(listed, tmp_path / "whole", workers=1)
    outcome = do(listed, tmp_path / "run", workers=2, work=run_fakes.deadly)
    assert outcome.failed == 0
    assert tables_of(tmp_path / "run") == tables_of(tmp_path / "whole")


@pytest.mark.slow
def test_a_star_that_kills_every_worker_fails_alone(tmp_path: Path) -> None:
    names = [*NAMES[:40], "killer", *NAMES[40:80]]
    listed = run_fakes.write_list(tmp_path / "stars.csv", names)
    outcome = do(listed, tmp_path / "run", workers=2, work=run_fakes.deadly)
    assert outcome.counts() == {"rows": 81, "refused": 0, "failed": 1}
    with open_record(tmp_path / "run") as record:
        rows = list(record.rows())
    assert [r["name"] for r in rows] == names
    assert rows[40]["status"] == "failed" and "killed" in rows[40]["reason"]


@pytest.mark.parametrize("workers", [1, 2])
def test_one_bad_star_never_stops_the_rest(tmp_path: Path, workers: int) -> None:
    names = [*NAMES[:33], "bad-one", "broken-one", *NAMES[33:90]]
    listed = run_fakes.write_list(tmp_path / "stars.csv", names)
    outcome = do(listed, tmp_path / "run", workers=workers)
    assert outcome.counts() == {"rows": 92, "refused": 0, "failed": 2}
    with open_record(tmp_path / "run") as record:
        rows = {r["name"]: r for r in record.rows()}
    assert "cannot be worked on" in rows["bad-one"]["reason"]
    assert rows["broken-one"]["reason"] == "The file is broken."
    assert all(rows[n]["status"] == "typed" for n in NAMES[:90])


def test_a_full_disk_is_one_sentence_and_can_be_resumed(
    listed: Path, expected: dict[str, bytes], tmp_path: Path
) -> None:
    def small_files() -> None:
        signal.signal(signal.SIGXFSZ, signal.SIG_IGN)
        resource.setrlimit(resource.RLIMIT_FSIZE, (24_000, 24_000))

    code = "import sys, run_fakes\nfrom starfathom.cli import _guarded\n_guarded(run_fakes.main)"
    command = [sys.executable, "-c", code, str(listed), str(tmp_path / "run"), "quick", "1"]
    # the process must not be measured for coverage: that writes a file of its own, which would not fit either
    env = {k: v for k, v in os.environ.items() if not k.startswith("COV")} | {"PYTHONPATH": str(HERE)}
    done = subprocess.run(command, capture_output=True, text=True, preexec_fn=small_files, env=env)
    assert done.returncode == 1
    assert "--resume" in done.stderr and "Traceback" not in done.stderr and len(done.stderr.splitlines()) == 1
    assert not list((tmp_path / "run").glob("results*"))
    do(listed, tmp_path / "run", workers=1, resume=True)
    assert tables_of(tmp_path / "run") == expected


def test_a_full_disk_at_the_tables_leaves_no_half_table(
    listed: Path, expected: dict[str, bytes], tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    real = os.fsync

    def full(fd: int) -> None:
        raise OSError(28, "No space left on device")

    monkeypatch.setattr(os, "fsync", full)
    with pytest.raises(RequestError, match="No space left"):
        do(listed, tmp_path / "run", workers=1)
    monkeypatch.setattr(os, "fsync", real)
    assert [p.name for p in sorted((tmp_path / "run").iterdir())] == ["record.lock", "record.sqlite"]
    do(listed, tmp_path / "run", workers=1, resume=True)
    assert tables_of(tmp_path / "run") == expected


def test_refuses_what_would_mix_two_runs(listed: Path, tmp_path: Path) -> None:
    do(listed, tmp_path / "run", workers=1, formats=["csv"])
    with pytest.raises(RequestError, match="--resume"):
        do(listed, tmp_path / "run", workers=1)
    other = run_fakes.write_list(tmp_path / "other.csv", NAMES[:50])
    with pytest.raises(RequestError, match="not the list"):
        do(other, tmp_path / "run", workers=1, resume=True)
    with pytest.raises(RequestError, match="holds no run"):
        do(listed, tmp_path / "nothing", workers=1, resume=True)
    with pytest.raises(RequestError, match="names no table format"):
        do(listed, tmp_path / "run2", workers=1, formats=["xlsx"])
    with pytest.raises(RequestError, match="at least one"):
        do(listed, tmp_path / "run2", workers=0)


def test_two_processes_cannot_work_on_one_run(listed: Path, tmp_path: Path) -> None:
    do(listed, tmp_path / "run", workers=1, formats=["csv"])
    with open_record(tmp_path / "run") as record:
        record.lock()
        with pytest.raises(RequestError, match="another process"):
            do(listed, tmp_path / "run", workers=1, resume=True)


def test_resume_keeps_the_settings_the_run_was_started_with(listed: Path, tmp_path: Path) -> None:
    do(listed, tmp_path / "run", workers=1, formats=["csv"])
    before = (tmp_path / "run" / "results.csv").read_bytes()
    run_survey(TargetList(listed), tmp_path / "run", RunSettings(seed=99), workers=1, resume=True, formats=["csv"],
               work=run_fakes.quick, progress=False)  # fmt: skip
    assert (tmp_path / "run" / "results.csv").read_bytes() == before


def test_above_a_million_rows_the_tables_come_in_parts(
    listed: Path, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    import pyarrow.dataset as ds

    monkeypatch.setattr("starfathom.survey.PART_ROWS", 200)
    outcome = do(listed, tmp_path / "run", workers=1)
    assert [p.name for p in outcome.files if p.parent.name == "results"] == [f"part-0000{i}.parquet" for i in range(3)]
    assert ds.dataset(tmp_path / "run" / "results").to_table()["name"].to_pylist() == NAMES


# Beyond one machine -------------------------------------------------------------------------------------------------


@pytest.fixture
def cluster(tmp_path: Path):  # type: ignore[no-untyped-def]
    """A Dask scheduler and two worker processes on the loopback interface: (address, worker processes)."""
    pytest.importorskip("distributed")
    env = os.environ | {"PYTHONPATH": str(HERE), "DASK_DISTRIBUTED__COMM__TIMEOUTS__CONNECT": "20s"}
    note = tmp_path / "scheduler.json"

    def start(kind: str, *arguments: str) -> subprocess.Popen[bytes]:
        command = [sys.executable, "-m", "dask", kind, *arguments]
        return subprocess.Popen(command, env=env, cwd=tmp_path, stdout=subprocess.DEVNULL, stderr=subprocess.DEVNULL)

    processes = [start("scheduler", "--host", "127.0.0.1", "--port", "0", "--no-dashboard", "--no-show",
                       "--scheduler-file", str(note))]  # fmt: skip
    workers = [start("worker", "--scheduler-file", str(note), "--nthreads", "1", "--no-nanny", "--no-dashboard",
                     "--host", "127.0.0.1") for _ in range(2)]  # fmt: skip
    try:
        deadline = time.monotonic() + 60
        while not note.exists() and time.monotonic() < deadline:
            time.sleep(0.1)
        import json

        address = json.loads(note.read_text())["address"]
        from distributed import Client

        with Client(address, set_as_default=False) as client:
            client.wait_for_workers(2, timeout=60)
        yield address, workers
    finally:
        for process in (*workers, *processes):
            process.kill()
            process.wait()


@pytest.mark.slow
def test_dask_with_a_worker_killed_loses_and_doubles_nothing(
    cluster: tuple[str, list[subprocess.Popen[bytes]]], listed: Path, expected: dict[str, bytes], tmp_path: Path
) -> None:
    import threading

    address, workers = cluster
    run_dir = tmp_path / "run"

    def kill_one() -> None:
        deadline = time.monotonic() + 60
        while time.monotonic() < deadline:
            time.sleep(0.05)
            if (run_dir / "record.sqlite").exists():
                with open_record(run_dir) as record:
                    if 3 <= len(record.done()) < 12:
                        workers[0].kill()
                        killed.append(len(record.done()))
                        return

    killed: list[int] = []
    killer = threading.Thread(target=kill_one)
    killer.start()
    outcome = do(listed, run_dir, scheduler=address, work=run_fakes.slow)
    killer.join()
    assert killed, "the run was over before a worker could be killed"
    assert workers[0].wait(10) == -signal.SIGKILL
    assert outcome.counts() == {"rows": 500, "refused": 0, "failed": 0}
    assert tables_of(run_dir) == expected


def test_no_scheduler_is_one_sentence(listed: Path, tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr("starfathom.survey.CONNECT_SECONDS", 1)
    with pytest.raises(StarfathomError, match="no Dask scheduler answers"):
        do(listed, tmp_path / "run", scheduler="tcp://127.0.0.1:9")
