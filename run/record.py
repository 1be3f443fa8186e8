"""The record of a run: one SQLite file in the run folder, one commit a batch.

The record is the only thing a run writes while it works; the tables are made from it when every batch is in. A run
killed at any moment therefore holds a whole number of batches, and finishing it later gives the same tables.

Schema::

    facts   (key TEXT PRIMARY KEY, value TEXT)          settings, versions and the target table's checksum, as JSON
    batches (number INTEGER PRIMARY KEY,                the batch's place in the target list
             n_rows, n_refused, n_failed INTEGER,
             rows BLOB,                                 zlib-compressed JSON list, one dict a star, in list order
             budget BLOB,                               the same for the error budget, any number of rows a star
             details BLOB)                              the same for what the report shows a star, or NULL

Use :func:`open_record` to read a finished run::

    record = open_record("my_run")
    for row in record.rows(): ...
    detail = record.details()["HD 12345"]     # evidence, posterior, as :mod:`starfathom.chain` documents it
"""

from __future__ import annotations

import json
import os
import sqlite3
import zlib
from collections.abc import Iterator
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

from starfathom.classify.errors import RequestError, StarfathomError

RECORD_NAME = "record.sqlite"
LOCK_NAME = "record.lock"

#: Details (posterior, evidence, curves) are kept a star up to this many stars; above it they would dwarf the run.
DETAIL_ROWS = 500

_SCHEMA = """
CREATE TABLE IF NOT EXISTS facts (key TEXT PRIMARY KEY, value TEXT NOT NULL);
CREATE TABLE IF NOT EXISTS batches (number INTEGER PRIMARY KEY, n_rows INTEGER NOT NULL, n_refused INTEGER NOT NULL,
    n_failed INTEGER NOT NULL, rows BLOB NOT NULL, budget BLOB NOT NULL, details BLOB);
"""


@dataclass(frozen=True)
class BatchResult:
    """What the work on one batch gives back: dicts ready to be written, in the order of the target list."""

    number: int
    rows: list[dict[str, Any]]
    budget: list[dict[str, Any]] = field(default_factory=list)
    details: list[dict[str, Any] | None] | None = None


def _pack(value: Any) -> bytes:
    return zlib.compress(json.dumps(value, separators=(",", ":"), ensure_ascii=False).encode(), 6)


def _unpack(blob: bytes) -> Any:
    return json.loads(zlib.decompress(blob))


class Record:
    """A run's SQLite file. Open through :func:`create_record` or :func:`open_record`; close when done."""

    def __init__(self, path: Path, connection: sqlite3.Connection) -> None:
        self.path = path
        self._db = connection
        self._lock: int | None = None

    # facts

    def set_facts(self, facts: dict[str, Any]) -> None:
        """Keep ``facts`` (JSON values) under their keys, in one commit."""
        with _disk_faults(self.path), self._db:
            self._db.executemany(
                "INSERT OR REPLACE INTO facts VALUES (?, ?)", [(k, json.dumps(v)) for k, v in facts.items()]
            )

    def facts(self) -> dict[str, Any]:
        """Everything kept with :meth:`set_facts`."""
        return {k: json.loads(v) for k, v in self._db.execute("SELECT key, value FROM facts ORDER BY key")}

    # batches

    def add(self, result: BatchResult) -> bool:
        """Commit one batch; False when it was there already (then nothing changes, so no star can be doubled)."""
        states = [row.get("status") for row in result.rows]
        values = (
            result.number,
            len(result.rows),
            states.count("refused"),
            states.count("failed"),
            _pack(result.rows),
            _pack(result.budget),
            _pack(result.details) if result.details and any(result.details) else None,
        )
        with _disk_faults(self.path), self._db:
            done = self._db.execute("INSERT OR IGNORE INTO batches VALUES (?, ?, ?, ?, ?, ?, ?)", values)
        return done.rowcount == 1

    def done(self) -> set[int]:
        """Numbers of the batches that are in."""
        return {n for (n,) in self._db.execute("SELECT number FROM batches")}

    def counts(self) -> dict[str, int]:
        """Stars in the record: ``rows``, ``refused``, ``failed``."""
        rows, refused, failed = self._db.execute(
            "SELECT COALESCE(SUM(n_rows), 0), COALESCE(SUM(n_refused), 0), COALESCE(SUM(n_failed), 0) FROM batches"
        ).fetchone()
        return {"rows": rows, "refused": refused, "failed": failed}

    def _stream(self, column: str) -> Iterator[dict[str, Any]]:
        cursor = self._db.cursor()
        for (blob,) in cursor.execute(f"SELECT {column} FROM batches ORDER BY number"):
            if blob is not None:
                yield from _unpack(blob)

    def rows(self) -> Iterator[dict[str, Any]]:
        """Result rows in the order of the target list, one batch in memory at a time."""
        return self._stream("rows")

    def budget(self) -> Iterator[dict[str, Any]]:
        """Error-budget rows in the order of the target list."""
        return self._stream("budget")

    def details(self) -> dict[str, dict[str, Any]]:
        """What was kept a star for the report and the desk, by name; above :data:`DETAIL_ROWS` stars only for members
        of groups. :mod:`starfathom.chain` says what is in it."""
        return {d["name"]: d for d in self._stream("details") if d}

    # life

    def lock(self) -> None:
        """Make this process the only one that may work on the run; freed by the system however the process ends.

        Raises
        ------
        RequestError
            when another process holds it.
        """
        try:
            import fcntl
        except ImportError:  # no such locks on this system; SQLite's own still keep the file whole
            return
        handle = os.open(self.path.with_name(LOCK_NAME), os.O_RDWR | os.O_CREAT, 0o644)
        try:
            fcntl.flock(handle, fcntl.LOCK_EX | fcntl.LOCK_NB)
        except OSError:
            os.close(handle)
            raise RequestError(
                f"{self.path.parent}: another process is working on this run; wait for it to end, "
                "or choose another folder with -o."
            ) from None
        self._lock = handle

    def close(self) -> None:
        """Close the file and free the lock."""
        self._db.close()
        if self._lock is not None:
            os.close(self._lock)
            self._lock = None

    def __enter__(self) -> Record:
        return self

    def __exit__(self, *_: object) -> None:
        self.close()


class _disk_faults:
    """Turn SQLite's disk errors into one sentence that says how to go on."""

    def __init__(self, path: Path) -> None:
        self.path = path

    def __enter__(self) -> None:
        return None

    def __exit__(self, _kind: object, fault: BaseException | None, _trace: object) -> None:
        if isinstance(fault, sqlite3.OperationalError | OSError):
            raise StarfathomError(
                f"{self.path}: the record cannot be written ({fault}); every batch so far is safe: "
                "free some space and run again with --resume."
            ) from fault


def _connect(path: Path) -> sqlite3.Connection:
    connection = sqlite3.connect(path, timeout=30)
    # A rollback journal and full syncing: slower than the alternatives by a few milliseconds a batch, whole after a
    # power cut, and safe on network disks.
    connection.execute("PRAGMA journal_mode = DELETE")
    connection.execute("PRAGMA synchronous = FULL")
    return connection


def create_record(run_dir: str | os.PathLike[str]) -> Record:
    """Start the record of a new run, making the folder.

    Raises
    ------
    RequestError
        when the folder holds a run already or cannot be made.
    """
    folder = Path(run_dir)
    path = folder / RECORD_NAME
    if path.exists() and path.stat().st_size:
        raise RequestError(f"{folder}: holds a run already; finish it with --resume or choose another folder with -o.")
    try:
        folder.mkdir(parents=True, exist_ok=True)
        connection = _connect(path)
    except (OSError, sqlite3.Error) as fault:
        raise RequestError(f"{folder}: cannot be made a run folder ({fault}); choose another with -o.") from fault
    record = Record(path, connection)
    with _disk_faults(path):
        connection.executescript(_SCHEMA)
    return record


def open_record(run_dir: str | os.PathLike[str]) -> Record:
    """Open the record of an existing run.

    Raises
    ------
    RequestError
        when the folder holds none, or a damaged one.
    """
    path = Path(run_dir) / RECORD_NAME
    if not path.is_file():
        raise RequestError(f"{Path(run_dir)}: holds no run (no {RECORD_NAME}); start one without --resume.")
    try:
        connection = _connect(path)
        # A run killed in its first instants may have left the file before its tables.
        connection.executescript(_SCHEMA)
    except sqlite3.DatabaseError as fault:
        raise RequestError(
            f"{path}: is not a readable record ({fault}); start the run again in a new folder."
        ) from fault
    return Record(path, connection)
