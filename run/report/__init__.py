"""The report of a run: a self-contained page that opens without a server, and a page a star."""

from __future__ import annotations

from pathlib import Path

__all__ = ["write_report"]


def write_report(run_dir: str | Path) -> Path:
    """Write the report of a finished run into its folder; return the path of its first page, ``report.html``.

    Raises
    ------
    RequestError : the folder holds no run, or cannot be written
    """
    from starfathom.report.write import write_report as write

    return write(run_dir)
