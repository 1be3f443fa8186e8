"""What a person decided about each star: an append-only log that survives a crash.

The log is one file of JSON lines, ``decisions.jsonl`` in a run folder. A decision is never changed or removed: an
undo is a further line that names the decision it takes back, so the file tells the whole story in order. Every line
is on the disk (``fsync``) before the desk says "kept". A half-written last line, all that a crash can leave behind,
is skipped on reading and closed off before the next line is written.
"""

from __future__ import annotations

import json
import os
import secrets
from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import asdict, dataclass, field, replace
from datetime import UTC, datetime
from hashlib import sha256
from pathlib import Path
from typing import Any, Literal

from starfathom.classify.errors import RequestError

FILE_NAME = "decisions.jsonl"
FORMAT = 1

Action = Literal["accept", "amend", "set aside", "undo"]


@dataclass(frozen=True)
class Decision:
    """One line of the log.

    Attributes
    ----------
    name : the star, as the run or the desk calls it
    action : "accept" (the machine's type stands), "amend" (``mk_type`` replaces it), "set aside" (leave this star
        out of the distances) or "undo" (``undoes`` names the decision taken back)
    mk_type : the type that holds after the decision; empty when set aside
    flags : such as "emission", "composite"
    remark : why, in the person's own words
    who : initials, or ""
    when : UTC, ISO 8601
    machine : what the machine had said: ``status``, ``mk_type``, ``t_code``, ``lum_code`` and their errors,
        ``type_set_90``, ``probability`` it gave the type decided for, ``version``
    file, digest : the spectrum's path as given and the SHA-256 of its bytes ("" when it could not be read), so that a
        decision is not carried over to a file that has changed since
    id : unlike any other
    """

    name: str
    action: Action
    mk_type: str = ""
    flags: tuple[str, ...] = ()
    remark: str = ""
    who: str = ""
    when: str = ""
    machine: dict[str, Any] = field(default_factory=dict)
    file: str = ""
    digest: str = ""
    undoes: str = ""
    id: str = ""

    @property
    def differs(self) -> bool:
        """True when the star's type, or its being in the run at all, is not what the machine had said."""
        return self.action == "set aside" or (self.action == "amend" and self.mk_type != self.machine.get("mk_type"))

    def __str__(self) -> str:
        text = {"accept": f"accepted {self.mk_type}", "amend": f"amended to {self.mk_type}",
                "set aside": "set aside", "undo": "took back the last decision"}[self.action]
        return f"{self.name}: {text}" + (f" by {self.who}" if self.who else "") + f", {self.when}"


def file_digest(path: str | Path) -> str:
    """SHA-256 of a file's bytes as hex, "" when it cannot be read."""
    try:
        return sha256(Path(path).read_bytes()).hexdigest()
    except OSError:
        return ""


def log_path(run_dir: str | Path) -> Path:
    """Where the log of a run folder is kept."""
    return Path(run_dir) / FILE_NAME


class DecisionLog:
    """The log in one file; ``path`` need not exist yet."""

    def __init__(self, path: str | Path) -> None:
        self.path = Path(path)

    def history(self) -> list[Decision]:
        """Every line in the order written, undos included.

        Raises
        ------
        RequestError : the file is there but cannot be read
        """
        try:
            data = self.path.read_bytes()
        except FileNotFoundError:
            return []
        except OSError as error:
            raise RequestError(f"the decisions in {self.path} cannot be read: {error.strerror}") from error
        return [d for d in map(_parse, data.split(b"\n")) if d is not None]

    def standing(self) -> list[Decision]:
        """Every decision that has not been taken back, in the order written."""
        lines = self.history()
        undone = {d.undoes for d in lines if d.action == "undo"}
        return [d for d in lines if d.action != "undo" and d.id not in undone]

    def current(self) -> dict[str, Decision]:
        """The decision that holds for each star that has one, by name: the last one not taken back."""
        return {d.name: d for d in self.standing()}

    def append(self, decision: Decision) -> Decision:
        """Write one decision; return it with ``id`` and ``when`` filled in, once it is on the disk.

        Raises
        ------
        RequestError : the file cannot be written
        """
        kept = replace(decision, id=decision.id or secrets.token_hex(8),
                       when=decision.when or datetime.now(UTC).isoformat(timespec="milliseconds"))
        line = json.dumps({"format": FORMAT, **asdict(kept)}, ensure_ascii=False, allow_nan=False,
                          default=_plain).encode("utf-8") + b"\n"
        try:
            with self._open() as fd:
                if _torn(fd):
                    line = b"\n" + line
                _write_all(fd, line)
                os.fsync(fd)
        except OSError as error:
            raise RequestError(f"the decision could not be kept in {self.path}: {error.strerror}") from error
        return kept

    def undo(self, who: str = "") -> Decision | None:
        """Take back the last decision that stands, whichever star it was for; return it, None when there is none."""
        standing = self.standing()
        if not standing:
            return None
        last = standing[-1]
        self.append(Decision(last.name, "undo", who=who, file=last.file, digest=last.digest, undoes=last.id))
        return last

    @contextmanager
    def _open(self) -> Iterator[int]:
        """The file open for appending and locked against other desks; made, with its folder entry, when new."""
        self.path.parent.mkdir(parents=True, exist_ok=True)
        new = not self.path.exists()
        fd = os.open(self.path, os.O_RDWR | os.O_APPEND | os.O_CREAT, 0o644)
        try:
            _lock(fd)
            if new:
                _sync_folder(self.path.parent)
            yield fd
        finally:
            os.close(fd)


def read(run_dir: str | Path) -> dict[str, Decision]:
    """The decisions that hold in a run folder, by star name; empty when there are none."""
    return DecisionLog(log_path(run_dir)).current()


def _parse(line: bytes) -> Decision | None:
    """One line as a decision; None for an empty, torn or foreign line."""
    try:
        raw = json.loads(line)
        known = {k: raw[k] for k in Decision.__dataclass_fields__ if k in raw}
        known["flags"] = tuple(known.get("flags", ()))
        return Decision(**known) if known["id"] and known["action"] in Action.__args__ else None  # type: ignore[attr-defined]
    except (ValueError, TypeError, KeyError):
        return None


def _plain(value: Any) -> Any:
    """Numpy scalars and arrays as JSON."""
    return value.tolist() if hasattr(value, "tolist") else str(value)


def _torn(fd: int) -> bool:
    size = os.fstat(fd).st_size
    return size > 0 and os.pread(fd, 1, size - 1) != b"\n"


def _write_all(fd: int, data: bytes) -> None:
    while data:
        data = data[os.write(fd, data):]


def _lock(fd: int) -> None:
    """Wait for the only pen; released when the file is closed. Systems without ``fcntl`` go without."""
    try:
        import fcntl
    except ImportError:
        return
    fcntl.flock(fd, fcntl.LOCK_EX)


def _sync_folder(folder: Path) -> None:
    """Make a new file's entry in its folder survive a power cut, where the system allows it."""
    try:
        fd = os.open(folder, os.O_RDONLY)
    except OSError:
        return
    try:
        os.fsync(fd)
    finally:
        os.close(fd)
