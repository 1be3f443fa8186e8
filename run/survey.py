"""A run over a target list: batches spread over processes or a Dask cluster, a record that survives anything.

What decides the result is fixed before the work starts: which rows share a batch (their place in the list), the seed,
the settings. Who does a batch, in which order, how often it had to be tried: none of it shows in the tables.
"""

from __future__ import annotations

import os
import re
import threading
from collections import deque
from collections.abc import Callable, Iterable, Iterator, Mapping, Sequence
from contextlib import closing, contextmanager
from dataclasses import asdict, dataclass, replace
from pathlib import Path
from typing import TYPE_CHECKING, Any

from starfathom.classify.errors import RequestError, StarfathomError
from starfathom.progress import Progress
from starfathom.record import DETAIL_ROWS, BatchResult, Record, create_record, open_record
from starfathom.targets import Target, TargetList

if TYPE_CHECKING:
    from starfathom.chain import RunSettings

#: The work on one batch; any importable function of this shape may take the place of ``chain.work_batch``.
Work = Callable[[int, Sequence[Target], "RunSettings"], BatchResult]
Job = tuple[int, list[Target]]

#: Stars a batch: enough for matrix products to pay, few enough that a kill loses little.
BATCH_WITH_SPECTRA = 32
BATCH_TYPES_ONLY = 512

#: Above this many stars the tables are written as Parquet parts of that size.
PART_ROWS = 1_000_000
#: Above this many stars only the formats that are streamed are written unless others are asked for.
ALL_FORMATS_ROWS = 100_000
ALL_FORMATS = ("ecsv", "csv", "fits", "vot", "parquet")
STREAMED_FORMATS = ("ecsv", "parquet")

#: Up to this many stars each is told what would settle more, which takes about as long as its type and distance.
ADVICE_ROWS = 500

#: How long a Dask scheduler may take to answer.
CONNECT_SECONDS = 15

#: How often a batch whose worker died is tried before its stars are tried one by one.
TRIES = 3

RESULTS, BUDGET = "results", "budget"

_THREADS = ("OMP_NUM_THREADS", "OPENBLAS_NUM_THREADS", "MKL_NUM_THREADS", "VECLIB_MAXIMUM_THREADS")


@dataclass(frozen=True)
class RunOutcome:
    """What a run did: ``rows``, ``refused``, ``failed`` (numbers of stars) and the ``files`` written."""

    run_dir: Path
    rows: int
    refused: int
    failed: int
    files: tuple[Path, ...]

    def counts(self) -> dict[str, int]:
        """The numbers as :func:`starfathom.terminal.summary` wants them."""
        return {"rows": self.rows, "refused": self.refused, "failed": self.failed}


def usable_cores() -> int:
    """Cores this process may run on."""
    try:
        return len(os.sched_getaffinity(0))
    except AttributeError:
        return os.cpu_count() or 1


def run_survey(
    targets: TargetList,
    run_dir: str | os.PathLike[str],
    settings: RunSettings,
    *,
    workers: int | None = None,
    scheduler: str | None = None,
    resume: bool = False,
    formats: Sequence[str] | None = None,
    work: Work | None = None,
    progress: bool = True,
) -> RunOutcome:
    """Carry a target list through the chain and write the tables.

    Parameters
    ----------
    targets : the list; it is checked whole first
    run_dir : folder of the run, made if need be; holds the record and the tables
    settings : what is asked; on ``resume`` those the run was started with are used
    workers : processes on this machine (default: as many as there are cores; one for a short list)
    scheduler : address of a Dask scheduler, such as ``tcp://host:8786``, instead of processes here
    resume : go on with the run in ``run_dir``
    formats : suffixes of the tables wanted (default: all up to 100,000 stars, ECSV and Parquet up to a million)
    work : what to do with a batch (default ``starfathom.chain.work_batch``)
    progress : whether to show how far it is

    Raises
    ------
    RequestError
        for an unusable list or folder, another list than the run was started with, an unknown format.
    StarfathomError
        when the disk is full or the scheduler cannot be reached; the run can be resumed.
    """
    if work is None:
        from starfathom.chain import work_batch

        work = work_batch
    if workers is not None and workers < 1:
        raise RequestError(f"--workers {workers}: at least one worker is needed.")
    for suffix in formats or ():
        if suffix not in ALL_FORMATS:
            raise RequestError(f"{suffix} names no table format; use {', '.join(ALL_FORMATS)}.")
    n_rows = targets.check()
    size = BATCH_WITH_SPECTRA if targets.has_spectra else BATCH_TYPES_ONLY
    settings = replace(settings, details=n_rows <= DETAIL_ROWS, advice=n_rows <= ADVICE_ROWS)
    with _started(targets, run_dir, settings, n_rows, size, resume) as record:
        facts = record.facts()
        settings, size = _settings_from(facts), facts["batch_size"]
        done = record.done()
        left = n_rows - record.counts()["rows"]
        jobs = ((number, batch) for number, batch in targets.batches(size) if number not in done)
        with Progress("stars", n_rows, done=n_rows - left, wanted=progress) as bar:
            for result in _spread(jobs, work, settings, _count_workers(workers, left, size), scheduler):
                if record.add(result):
                    bar.advance(len(result.rows))
        return finish(record, targets, settings, formats)


def _count_workers(asked: int | None, rows: int, size: int) -> int:
    batches = -(-rows // size)
    # Starting processes costs a second or two: not worth it for a handful of stars unless asked for.
    usual = usable_cores() if batches > 2 else 1
    return max(1, min(asked if asked is not None else usual, batches))


# The record at start ------------------------------------------------------------------------------------------------


@contextmanager
def _started(
    targets: TargetList, run_dir: str | os.PathLike[str], settings: RunSettings, n_rows: int, size: int, resume: bool
) -> Iterator[Record]:
    with closing(open_record(run_dir) if resume else create_record(run_dir)) as record:
        record.lock()
        facts = record.facts()
        checksum = targets.checksum()
        if not facts:
            record.set_facts(
                {
                    "settings": asdict(settings),
                    "batch_size": size,
                    "n_rows": n_rows,
                    "targets": str(targets.path),
                    "targets_sha256": checksum,
                    "versions": versions(),
                }
            )
        elif facts["targets_sha256"] != checksum:
            raise RequestError(
                f"{targets.path}: is not the list that the run in {Path(run_dir)} was started with; "
                "give that list, or start anew in another folder."
            )
        elif facts["versions"]["starfathom"] != versions()["starfathom"]:
            raise RequestError(
                f"{Path(run_dir)}: was started with version {facts['versions']['starfathom']}, this is "
                f"{versions()['starfathom']}; finish it with that one, or start anew."
            )
        yield record


def _settings_from(facts: dict[str, Any]) -> RunSettings:
    from starfathom.chain import RunSettings

    kept = dict(facts["settings"])
    for name in ("without_libraries", "without_stars"):
        kept[name] = tuple(kept[name])
    return RunSettings(**kept)


def versions() -> dict[str, str]:
    """Versions of what a result depends on, without importing any of it."""
    import platform
    from importlib.metadata import PackageNotFoundError, version

    import starfathom

    found = {"starfathom": starfathom.__version__, "python": platform.python_version()}
    for name in ("numpy", "scipy", "astropy", "scikit-learn", "dust_extinction"):
        try:
            found[name] = version(name)
        except PackageNotFoundError:
            found[name] = "absent"
    return found


# Spreading the work -------------------------------------------------------------------------------------------------

_at_work = threading.Lock()


def do_batch(work: Work, number: int, batch: list[Target], settings: RunSettings) -> BatchResult:
    """One batch, in one thread of the matrix library; no fault in it reaches the others."""
    from threadpoolctl import threadpool_limits

    # One at a time in a process: a Dask worker may offer several threads. One thread inside: sums are then taken
    # in the same order on every machine.
    with _at_work, threadpool_limits(limits=1):
        try:
            return work(number, batch, settings)
        except MemoryError:
            raise
        except Exception as fault:
            if len(batch) == 1:
                return _failed(number, batch, f"could not be measured ({type(fault).__name__}: {fault})")
            return _one_by_one(work, number, batch, settings)


def _one_by_one(work: Work, number: int, batch: list[Target], settings: RunSettings) -> BatchResult:
    parts = []
    for target in batch:
        try:
            parts.append(work(number, [target], settings))
        except Exception as fault:
            parts.append(_failed(number, [target], f"could not be measured ({type(fault).__name__}: {fault})"))
    return _merged(number, parts)


def _merged(number: int, parts: Iterable[BatchResult]) -> BatchResult:
    rows: list[dict[str, Any]] = []
    budget: list[dict[str, Any]] = []
    details: list[dict[str, Any] | None] = []
    for part in parts:
        rows += part.rows
        budget += part.budget
        details += part.details if part.details is not None else [None] * len(part.rows)
    return BatchResult(number, rows, budget, details if any(details) else None)


def _failed(number: int, batch: Sequence[Target], reason: str) -> BatchResult:
    from starfathom.chain import row_of
    from starfathom.classify.assignment import Assignment

    sentence = " ".join(reason.split())
    return BatchResult(number, [row_of(t, Assignment(file=t.spectrum, reason=sentence), None) for t in batch])


def _spread(
    jobs: Iterator[Job], work: Work, settings: RunSettings, workers: int, scheduler: str | None
) -> Iterator[BatchResult]:
    if scheduler:
        return on_dask(jobs, work, settings, scheduler)
    if workers == 1:
        return (do_batch(work, number, batch, settings) for number, batch in jobs)
    return on_processes(jobs, work, settings, workers)


def _watch_parent() -> None:
    """End this worker when the run that started it is gone: a killed parent cannot tell its workers to stop."""
    from multiprocessing import parent_process
    from multiprocessing.connection import wait

    parent = parent_process()
    if parent is not None:

        def watch() -> None:
            wait([parent.sentinel])
            os._exit(1)

        threading.Thread(target=watch, daemon=True).start()


def _start_worker() -> None:
    import signal

    # Ctrl-C goes to the whole group; the parent answers for all.
    signal.signal(signal.SIGINT, signal.SIG_IGN)
    _watch_parent()


@contextmanager
def _single_threaded() -> Iterator[None]:
    """Child processes started inside get one thread each for the matrix library."""
    before = {name: os.environ.get(name) for name in _THREADS}
    os.environ.update(dict.fromkeys(_THREADS, "1"))
    try:
        yield
    finally:
        for name, value in before.items():
            if value is None:
                os.environ.pop(name, None)
            else:
                os.environ[name] = value


def on_processes(jobs: Iterator[Job], work: Work, settings: RunSettings, workers: int) -> Iterator[BatchResult]:
    """Results in the order they come, from ``workers`` fresh processes; a batch whose worker died is done again."""
    import multiprocessing
    from concurrent.futures import FIRST_COMPLETED, Future, ProcessPoolExecutor, wait
    from concurrent.futures.process import BrokenProcessPool

    context = multiprocessing.get_context("spawn")
    again: deque[Job] = deque()
    losses: dict[int, int] = {}

    while True:
        pool = ProcessPoolExecutor(workers, mp_context=context, initializer=_start_worker)
        waiting: dict[Future[BatchResult], Job] = {}
        broken = False
        try:
            with _single_threaded():
                while not broken:
                    # Two batches a worker in hand: never idle, never a list of ten million in memory.
                    while len(waiting) < 2 * workers:
                        job = again.popleft() if again else next(jobs, None)
                        if job is None:
                            break
                        try:
                            waiting[pool.submit(do_batch, work, *job, settings)] = job
                        except BrokenProcessPool:
                            again.append(job)
                            broken = True
                            break
                    if not waiting:
                        if not broken:
                            return
                        break
                    for future in wait(waiting, return_when=FIRST_COMPLETED).done:
                        job = waiting.pop(future)
                        try:
                            yield future.result()
                        except BrokenProcessPool:
                            again.append(job)
                            broken = True
        finally:
            pool.shutdown(wait=True, cancel_futures=True)
        for future, job in waiting.items():
            if future.done() and not future.cancelled() and future.exception() is None:
                yield future.result()
            else:
                again.append(job)
        # Who killed the pool cannot be told from outside, so every batch it held is suspected; one suspected too
        # often is tried alone, star by star.
        for job in list(again):
            losses[job[0]] = losses.get(job[0], 0) + 1
            if losses[job[0]] >= TRIES:
                again.remove(job)
                yield _one_by_one_apart(work, job, settings)


def _one_by_one_apart(work: Work, job: Job, settings: RunSettings) -> BatchResult:
    """The stars of a batch one by one, in a process that each may kill."""
    import multiprocessing
    from concurrent.futures import ProcessPoolExecutor
    from concurrent.futures.process import BrokenProcessPool

    number, batch = job
    context = multiprocessing.get_context("spawn")
    parts: list[BatchResult] = []
    with _single_threaded():
        while len(parts) < len(batch):
            with ProcessPoolExecutor(1, mp_context=context, initializer=_start_worker) as pool:
                for target in batch[len(parts) :]:
                    try:
                        parts.append(pool.submit(do_batch, work, number, [target], settings).result())
                    except BrokenProcessPool:
                        reason = "The process that worked on it was killed (out of memory?)."
                        parts.append(_failed(number, [target], reason))
                        break
    return _merged(number, parts)


def on_dask(jobs: Iterator[Job], work: Work, settings: RunSettings, address: str) -> Iterator[BatchResult]:
    """Results in the order they come, from the workers of a Dask scheduler, which must see the same files.

    Dask itself hands the batches of a lost worker to another; a batch it gives up on is sent anew, and each is
    recorded once whatever comes back twice.
    """
    try:
        from distributed import Client, as_completed
    except ImportError as fault:
        raise RequestError(
            "--scheduler needs Dask, which is not installed; install it with: pip install 'starfathom[survey]'."
        ) from fault
    if not re.fullmatch(r"[a-z]+://.+:\d+", address):  # Dask itself would print more than a sentence
        raise RequestError(f"--scheduler {address}: is no address; give one such as tcp://127.0.0.1:8786.")
    try:
        client = Client(address, timeout=CONNECT_SECONDS, set_as_default=False)
    except (OSError, ValueError, TimeoutError) as fault:
        raise StarfathomError(
            f"{address}: no Dask scheduler answers there ({fault}); start one, or leave out --scheduler."
        ) from fault
    jobs_of: dict[Any, Job] = {}
    tries: dict[int, int] = {}

    def submit(job: Job) -> Any:
        tries[job[0]] = tries.get(job[0], 0) + 1
        future = client.submit(
            do_batch,
            work,
            *job,
            settings,
            key=f"starfathom-{os.getpid()}-{job[0]}-{tries[job[0]]}",
            pure=False,
            retries=TRIES,
        )
        jobs_of[future.key] = job
        return future

    with client:
        stream = as_completed(loop=client.loop, raise_errors=False)
        finished = False
        while True:
            in_hand = 2 * max(1, sum(client.nthreads().values())) + 2
            while not finished and len(jobs_of) < in_hand:
                job = next(jobs, None)
                if job is None:
                    finished = True
                else:
                    stream.add(submit(job))
            if not jobs_of:
                return
            future = next(stream)
            job = jobs_of.pop(future.key)
            try:
                if future.status == "cancelled":
                    raise ConnectionError("cancelled")
                result = future.result()
            except Exception as fault:
                if tries[job[0]] < TRIES:
                    stream.add(submit(job))
                    continue
                result = _failed(job[0], job[1], f"The workers lost it {TRIES} times ({type(fault).__name__}).")
            tries.pop(job[0], None)
            future.release()
            yield result


# Tables -------------------------------------------------------------------------------------------------------------


def finish(
    record: Record, targets: TargetList, settings: RunSettings, formats: Sequence[str] | None = None
) -> RunOutcome:
    """Write the tables of a run whose batches are all in; doing it twice gives the same files."""
    import json

    from starfathom import tables
    from starfathom.chain import BUDGET_COLUMNS, result_columns
    from starfathom.overrides import budget_with, find_overrides, rows_with

    run_dir = record.path.parent
    counts = record.counts()
    n_rows = counts["rows"]
    facts = record.facts()
    meta = {
        "made_by": f"starfathom {facts['versions']['starfathom']}",
        "targets_sha256": facts["targets_sha256"],
        "seed": settings.seed,
    }
    overrides = find_overrides(record, targets, settings)

    def rows() -> Iterator[Mapping[str, Any]]:
        return rows_with(record.rows(), overrides)

    def budget() -> Iterator[Mapping[str, Any]]:
        return budget_with(record.rows(), record.budget(), overrides)

    files: list[Path] = []
    for stem, source, columns in ((RESULTS, rows, result_columns()), (BUDGET, budget, BUDGET_COLUMNS)):
        if n_rows > PART_ROWS and formats is None:
            files += tables.write_parts(run_dir / stem, source(), columns, PART_ROWS, meta)
            continue
        wanted = formats or (ALL_FORMATS if n_rows <= ALL_FORMATS_ROWS else STREAMED_FORMATS)
        for suffix in wanted:
            path = run_dir / f"{stem}.{suffix}"
            tables.write_table(path, source, columns, meta)
            files.append(path)

    told = {k: facts[k] for k in ("settings", "targets", "targets_sha256", "versions", "n_rows", "batch_size")}
    tables.write_text_aside(run_dir / "run.json", json.dumps(told | counts, indent=1, sort_keys=True) + "\n")
    return RunOutcome(run_dir, n_rows, counts["refused"], counts["failed"], tuple(files))
