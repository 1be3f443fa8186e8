"""Start-up: what help, an import and one cold classification cost, against importing specutils alone."""

from __future__ import annotations

import subprocess
import sys
import tempfile
import time
from pathlib import Path
from typing import Any


def seconds(*arguments: str, times: int = 5) -> float:
    """Least wall time of a fresh interpreter, the disk cache being warm."""
    best = float("inf")
    for _ in range(times):
        start = time.perf_counter()
        subprocess.run([sys.executable, *arguments], check=True, capture_output=True)
        best = min(best, time.perf_counter() - start)
    return best


def rows() -> list[dict[str, Any]]:
    """Rows of the speed table."""
    sys.path.insert(0, str(Path(__file__).parent))
    from bench_survey import make_files

    specutils = seconds("-c", "import specutils")
    out = []

    def add(task: str, ours: float, against: float, words: str, target: str) -> None:
        out.append(
            {
                "task": task,
                "ours": f"{ours:.2f} s",
                "against": f"{against:.2f} s {words}",
                "ratio": ours / against,
                "target": target,
            }
        )

    add("import starfathom", seconds("-c", "import starfathom"), specutils, "import specutils", "<= 0.2")
    add("starfathom --help", seconds("-m", "starfathom", "--help"), specutils, "import specutils", "at once")
    with tempfile.TemporaryDirectory() as folder:
        (path,) = make_files(Path(folder), 1)
        cold = seconds("-m", "starfathom", "classify", str(path))
        add(
            "starfathom classify, one spectrum, cold", cold, 1.5 * specutils + 1, "1.5 x import specutils + 1 s", "<= 1"
        )
        table = str(Path(folder) / "out.ecsv")
        cold = seconds("-m", "starfathom", "classify", str(path), "-o", table)
        add("the same, writing a table", cold, 1.5 * specutils + 1, "1.5 x import specutils + 1 s", "<= 1")
    return out


if __name__ == "__main__":
    for row in rows():
        print(f"{row['task']:45s} {row['ours']:>8s} {row['against']:>40s} {row['ratio']:8.2f} {row['target']}")
