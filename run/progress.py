"""A progress bar with rate and time left, on the terminal; a plain line now and then where there is none."""

from __future__ import annotations

import sys
import time
from types import TracebackType
from typing import Any

#: Work shorter than this shows nothing.
QUIET_SECONDS = 2.0
#: How often a line is written where there is no terminal to draw on.
LOG_SECONDS = 30.0


class Progress:
    """``with Progress("stars", total) as bar: ... bar.advance(n)``; writes to standard error only.

    ``done`` counts what an earlier run left, which is shown as progress but not counted in the rate.
    """

    def __init__(self, unit: str, total: int, *, done: int = 0, wanted: bool = True) -> None:
        self.unit, self.total, self.done, self.wanted = unit, total, done, wanted
        self._first = done
        self._start = self._logged = time.monotonic()
        self._bar: Any = None
        self._task: Any = None
        self._drawing = wanted and sys.stderr.isatty()

    def __enter__(self) -> Progress:
        return self

    def advance(self, n: int) -> None:
        """Count ``n`` more as done."""
        self.done += n
        now = time.monotonic()
        if not self.wanted or now - self._start < QUIET_SECONDS:
            return
        if self._drawing:
            if self._bar is None:
                self._open()
            self._bar.update(self._task, completed=self.done, rate=self.rate())
        elif now - self._logged > LOG_SECONDS:
            self._logged = now
            print(self.line(), file=sys.stderr, flush=True)

    def rate(self) -> str:
        """Such as "118 stars/s", or "3.2 s a star" when slow."""
        seconds = max(time.monotonic() - self._start, 1e-9)
        per_second = (self.done - self._first) / seconds
        if per_second >= 1:
            return f"{per_second:.0f} {self.unit}/s"
        return f"{1 / per_second:.1f} s each" if per_second > 0 else ""

    def line(self) -> str:
        """The state as one plain line."""
        seconds = time.monotonic() - self._start
        fresh = self.done - self._first
        left = (self.total - self.done) * seconds / fresh if fresh else 0.0
        return f"{self.done} of {self.total} {self.unit}, {self.rate()}, {_clock(left)} left"

    def _open(self) -> None:
        from rich.console import Console
        from rich.progress import BarColumn, MofNCompleteColumn, TextColumn, TimeRemainingColumn
        from rich.progress import Progress as Bar

        self._bar = Bar(
            BarColumn(bar_width=None),
            MofNCompleteColumn(),
            TextColumn(self.unit),
            TextColumn("{task.fields[rate]}"),
            TimeRemainingColumn(compact=True),
            TextColumn("left"),
            console=Console(stderr=True),
            transient=True,
        )
        self._bar.start()
        self._task = self._bar.add_task("", total=self.total, completed=self.done, rate="")

    def __exit__(
        self, _kind: type[BaseException] | None, _fault: BaseException | None, _trace: TracebackType | None
    ) -> None:
        if self._bar is not None:
            self._bar.stop()


def _clock(seconds: float) -> str:
    minutes, seconds = divmod(round(seconds), 60)
    hours, minutes = divmod(minutes, 60)
    return f"{hours}:{minutes:02d}:{seconds:02d}" if hours else f"{minutes}:{seconds:02d}"
