"""Pictures of a finished run as files: the H-R diagram, and a star over its template.

``python -m starfathom.pictures RUN_DIR FOLDER [STAR]`` draws the ones in the README.
"""

from __future__ import annotations

import math
import sys
from collections.abc import Iterable, Mapping
from pathlib import Path
from typing import TYPE_CHECKING, Any

from starfathom.classify.errors import RequestError

if TYPE_CHECKING:
    from matplotlib.axes import Axes

    from starfathom.distance import Fathoming


def fathomings_of(rows: Iterable[Mapping[str, Any]]) -> list[Fathoming]:
    """What an H-R diagram needs of result rows: temperature and luminosity with their errors, type and name."""
    from starfathom.distance import Fathoming

    def points(row: Mapping[str, Any], key: str) -> tuple[float, ...]:
        middle, error = float(row[key]), float(row[f"{key}_err"])
        return tuple(middle + k * error for k in (-2.0, -1.0, 0.0, 1.0, 2.0))

    return [
        Fathoming(
            percentiles={key: points(row, key) for key in ("teff_k", "log_lum_lsun")},
            name=str(row["name"]), mk_type=str(row["mk_type"]),
        )
        for row in rows
        if math.isfinite(row["teff_k"]) and math.isfinite(row["log_lum_lsun"])
    ]  # fmt: skip


def hr_diagram(run_dir: str | Path, ax: Axes | None = None) -> Axes:
    """The H-R diagram of a run, as its record has it; returns the axes.

    Raises
    ------
    RequestError
        when the folder holds no run, or no star of it has a luminosity.
    """
    from starfathom.distance import draw_hr_diagram
    from starfathom.record import open_record

    with open_record(run_dir) as record:
        stars = fathomings_of(record.rows())
    if not stars:
        raise RequestError(f"{run_dir}: no star of this run has a luminosity, so there is no H-R diagram to draw.")
    axes: Axes = draw_hr_diagram(stars, ax)
    return axes


def over_template(spectrum: str | Path, ax: Axes) -> Axes:
    """A spectrum over the template of the type found for it, rectified, at rest; returns the axes.

    Raises
    ------
    SpectrumError
        when it cannot be read or typed.
    """
    from starfathom import sheet

    evidence = sheet.gather(str(spectrum))
    sheet.draw_spectrum(ax, evidence)
    ax.set_xlabel("wavelength at rest in air (Å)")
    ax.set_title(f"{evidence.title} and the template of {evidence.template_name}", loc="left", fontsize=9)
    return ax


def main(run_dir: str, folder: str, star: str = "TH17-10") -> None:
    """Write ``hr_diagram.png`` and ``spectrum.png`` (of ``star``) into ``folder``."""
    import matplotlib

    matplotlib.use("Agg")
    import matplotlib.pyplot as plt

    from starfathom.record import open_record

    place = Path(folder)
    place.mkdir(parents=True, exist_ok=True)
    figure, ax = plt.subplots(figsize=(7.0, 7.4), layout="constrained")
    hr_diagram(run_dir, ax)
    figure.savefig(place / "hr_diagram.png", dpi=110, metadata={"Software": None})
    with open_record(run_dir) as record:
        path = next((row["file"] for row in record.rows() if row["name"] == star), "")
    if not path:
        raise RequestError(f"{run_dir}: has no spectrum of a star called {star}.")
    figure, ax = plt.subplots(figsize=(10.0, 3.8), layout="constrained")
    over_template(path, ax)
    figure.savefig(place / "spectrum.png", dpi=110, metadata={"Software": None})


if __name__ == "__main__":
    main(*sys.argv[1:])
