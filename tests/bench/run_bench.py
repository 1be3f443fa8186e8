"""All speed measurements in one table: ``make bench``. Writes ``RESULTS.md`` beside this file.

Every module ``bench_*.py`` here has a function ``rows()`` giving dicts with ``task``, ``ours``, ``against``, ``ratio``
(of the two, in one run) and, where there is one, ``target``.
"""

from __future__ import annotations

import importlib
import os
import platform
import sys
import time
from pathlib import Path
from typing import Any

HERE = Path(__file__).parent
HEAD = ("what", "this", "against", "ratio", "target")


def machine() -> str:
    """The machine in one sentence."""
    from starfathom.survey import usable_cores, versions

    memory = os.sysconf("SC_PAGE_SIZE") * os.sysconf("SC_PHYS_PAGES") / 2**30
    name = platform.processor() or platform.machine()
    info = Path("/proc/cpuinfo")
    if info.exists():
        models = [
            line.split(":", 1)[1].strip() for line in info.read_text().splitlines() if line.startswith("model name")
        ]
        name = models[0] if models else name
    found = versions()
    load = os.getloadavg()[0] if hasattr(os, "getloadavg") else float("nan")
    return (
        f"{usable_cores()} cores ({name}), {memory:.0f} GB, {platform.system()}, Python {found['python']}, numpy "
        f"{found['numpy']}, one thread a process; load {load:.1f} at the start."
    )


def normal(row: dict[str, Any]) -> tuple[str, str, str, str, str]:
    """A row as text; modules that time a loop against a bulk path may give ``loop_ms`` and ``ours_ms`` instead."""
    if "loop_ms" in row:
        ours, against = f"{row['ours_ms']:.3f} ms", f"{row['loop_ms']:.1f} ms specutils loop"
        return str(row["task"]), ours, against, f"{row['ratio']:.0f}", str(row.get("target", ">= 100"))
    ratio = float(row["ratio"])
    shown = f"{ratio:.0f}" if ratio >= 100 else f"{ratio:.3g}"
    return str(row["task"]), str(row["ours"]), str(row["against"]), shown, str(row.get("target", ""))


def main() -> None:
    """Run every module, print the table as it grows, write it at the end."""
    sys.path.insert(0, str(HERE))
    about = machine()
    print(about, flush=True)
    wanted = sys.argv[1:]
    names = [p.stem for p in sorted(HERE.glob("bench_*.py")) if not wanted or p.stem.removeprefix("bench_") in wanted]
    lines = []
    failed = []
    for name in names:
        start = time.perf_counter()
        try:
            rows = importlib.import_module(name).rows()
        except Exception as fault:
            failed.append(f"{name}: {type(fault).__name__}: {fault}")
            print(failed[-1], file=sys.stderr)
            continue
        for row in rows:
            lines.append("| " + " | ".join(normal(row)) + " |")
            print(lines[-1], flush=True)
        print(f"({name}: {time.perf_counter() - start:.0f} s)", file=sys.stderr, flush=True)
    if not wanted:
        from starfathom.tables import write_text_aside

        table = [f"| {' | '.join(HEAD)} |", "| --- " * len(HEAD) + "|", *lines]
        text = "# Speed\n\nWritten by `make bench`. Every ratio was taken in one run on one machine.\n\n"
        write_text_aside(HERE / "RESULTS.md", text + f"Machine: {about}\n\n" + "\n".join(table) + "\n")
    if failed:
        sys.exit(1)


if __name__ == "__main__":
    main()
