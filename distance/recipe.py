"""Rebuild the shipped distance scale from the project's own tables: ``python -m starfathom.distance.recipe``."""

from __future__ import annotations

from typing import Any

import numpy as np

from starfathom.distance.calibrators import calibrators
from starfathom.distance.fit import fit
from starfathom.distance.scale import to_arrays
from starfathom.distance.tables import DATA


def main() -> None:
    """Fit and write ``data/scale.npz``; about ten seconds."""
    stars = calibrators()
    arrays: dict[str, Any] = {}
    for scale in fit(stars):
        arrays |= {f"{scale.name}/{key}": value for key, value in to_arrays(scale).items()}
    np.savez_compressed(DATA / "scale.npz", **arrays)
    print(f"fitted {len(stars)} stars, {(stars.library == '').sum()} of them standards; wrote {DATA / 'scale.npz'}")


if __name__ == "__main__":
    main()
