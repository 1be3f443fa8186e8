"""Progress is quiet when there is nothing to wait for, and tells rate and time left otherwise."""

from __future__ import annotations

import pytest

from starfathom import progress
from starfathom.progress import Progress


def test_short_work_shows_nothing(capsys: pytest.CaptureFixture[str]) -> None:
    with Progress("stars", 10) as bar:
        bar.advance(10)
    assert capsys.readouterr() == ("", "")


def test_lines_where_there_is_no_terminal(capsys: pytest.CaptureFixture[str], monkeypatch: pytest.MonkeyPatch) -> None:
    clock = [100.0]
    monkeypatch.setattr(progress.time, "monotonic", lambda: clock[0])
    with Progress("stars", 1000, done=200) as bar:
        clock[0] += 40
        bar.advance(400)
        clock[0] += 1
        bar.advance(10)
    assert capsys.readouterr().err == "600 of 1000 stars, 10 stars/s, 0:40 left\n"


def test_a_bar_on_a_terminal(monkeypatch: pytest.MonkeyPatch) -> None:
    import io

    class Screen(io.StringIO):
        def isatty(self) -> bool:
            return True

    screen, clock = Screen(), [0.0]
    monkeypatch.setattr(progress.sys, "stderr", screen)
    monkeypatch.setenv("TERM", "xterm")
    monkeypatch.setattr(progress.time, "monotonic", lambda: clock[0])
    with Progress("stars", 100) as bar:
        clock[0] = 5.0
        bar.advance(50)
        bar._bar.refresh()
    assert "50/100" in screen.getvalue() and "10 stars/s" in screen.getvalue()


def test_slow_work_is_told_by_the_piece(monkeypatch: pytest.MonkeyPatch) -> None:
    clock = [0.0]
    monkeypatch.setattr(progress.time, "monotonic", lambda: clock[0])
    bar = Progress("stars", 10)
    clock[0] = 10.0
    bar.advance(2)
    assert bar.rate() == "5.0 s each"
