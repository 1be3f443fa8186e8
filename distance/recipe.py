"""Rebuild the shipped distance scale from the project's own tables: ``python -m starfathom.distance.recipe``."""

from __future__ import annotations

import numpy as np

from starfathom.distance.calibrators import calibrators
from starfathom.distance.fit import fit
from starfathom.distance.scale import to_arrays
from starfathom.distance.tables import DATA


def main() -> None:
    """Fit and write ``data/scale.npz``; about ten seconds."""
    stars = calibrators()
    scale, _ = fit(stars)
    np.savez_compressed(DATA / "scale.npz", **to_arrays(scale))
    print(f"fitted {len(stars)} stars, {(stars.library == '').sum()} of them standards; wrote {DATA / 'scale.npz'}")


if __name__ == "__main__":
    main()
