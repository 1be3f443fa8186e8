"""How long 10,000 stars take: type and photometry to distance, 2,000 samples each, with budget.

python tests/bench/bench_distance.py [N_STARS]
"""

from __future__ import annotations

import sys
import time

import numpy as np

from starfathom.distance import fathom_many
from starfathom.distance.fathoming import Fathoming

TYPES = ("B2 V", "A0 V", "A7 III", "F5 V", "G2 V", "G8 III", "K0 III", "K1 IV", "K5 V", "M2 III", "M3 V", "B1 Ib")


def make_requests(n: int, seed: int = 0) -> list[dict[str, object]]:
    """Stars of all kinds with B, V and, for every other one, J, H, Ks."""
    rng = np.random.default_rng(seed)
    out: list[dict[str, object]] = []
    for i in range(n):
        v = rng.uniform(6, 14)
        magnitudes = {"V": (v, 0.02), "B": (v + rng.uniform(0, 1.4), 0.02)}
        if i % 2:
            magnitudes |= {"J": (v - 1.2, 0.03), "H": (v - 1.5, 0.03), "Ks": (v - 1.6, 0.03)}
        out.append({"source": TYPES[i % len(TYPES)], "photometry": magnitudes, "name": f"star {i}"})
    return out


def time_many(n: int = 10_000, n_samples: int = 2000, workers: int = 2) -> dict[str, float]:
    """Seconds for ``n`` stars, and stars a second."""
    requests = make_requests(n)
    fathom_many(requests[:10], n_samples=n_samples, workers=workers)  # tables and numbers are made once
    start = time.perf_counter()
    answers = fathom_many(requests, n_samples=n_samples, workers=workers)
    seconds = time.perf_counter() - start
    done = sum(isinstance(a, Fathoming) for a in answers)
    return {"stars": float(done), "samples": float(n_samples), "seconds": seconds, "stars_per_second": done / seconds}


def rows() -> list[dict[str, object]]:
    """Rows of the speed table."""
    spent = time_many()
    return [{
        "task": f"{spent['stars']:.0f} distances from types and magnitudes, {spent['samples']:.0f} samples each",
        "ours": f"{spent['seconds']:.1f} s", "against": "60 s", "ratio": spent["seconds"] / 60, "target": "<= 1",
    }]  # fmt: skip


if __name__ == "__main__":
    print(time_many(int(sys.argv[1]) if len(sys.argv) > 1 else 10_000))
