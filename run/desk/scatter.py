"""How far good spectra of normal stars lie from the interpolated template of their own type.

A template is never perfect: stars of one type differ, and two instruments see one star differently. Without this
share the ribbons of a good spectrum would cry out everywhere. It is measured, not chosen: library stars are typed like
any spectrum, compared with the template of the type found, and what is left beyond their noise is tabled by spectral
letter, wavelength and line spread in ``data/template_scatter.ecsv``. To measure it again after the templates have
changed, run ``python -m starfathom.desk.scatter``.
"""

from __future__ import annotations

import csv
from functools import cache
from itertools import pairwise
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from starfathom.templates.subtypes import LETTERS

FloatArray = NDArray[np.float64]

TABLE = Path(__file__).parent / "data" / "template_scatter.ecsv"
EDGES_ANGSTROM = (3650.0, 3800.0, 4000.0, 4200.0, 4500.0, 4900.0, 5300.0, 5900.0, 6600.0, 7380.0)
FWHM_ANGSTROM = (3.0, 5.0, 9.0)


@cache
def _cube() -> FloatArray:
    """The table as (letters, stretches of wavelength, line spreads)."""
    with open(TABLE, encoding="utf-8", newline="") as stream:
        rows = list(csv.DictReader(line for line in stream if not line.startswith("#")))
    cube = np.array([[float(row[f"fwhm_{f:g}"]) for f in FWHM_ANGSTROM] for row in rows])
    return cube.reshape(len(LETTERS), len(EDGES_ANGSTROM) - 1, len(FWHM_ANGSTROM))


def template_scatter(wave_angstrom: FloatArray, t_code: float, fwhm_angstrom: float) -> FloatArray:
    """One standard deviation of star less template, as a share of the continuum, (m,).

    Linear in ``t_code`` between the middles of the letters, in wavelength between the middles of the stretches, and in
    the logarithm of the line spread; the ends are held.
    """
    cube = _cube()
    at = np.clip(t_code / 10.0 - 0.5, 0.0, len(LETTERS) - 1.0)
    low = min(int(at), len(LETTERS) - 2)
    by_wave = cube[low] + (at - low) * (cube[low + 1] - cube[low])
    log_fwhm = np.log(np.clip(fwhm_angstrom, FWHM_ANGSTROM[0], FWHM_ANGSTROM[-1]))
    values = [np.interp(log_fwhm, np.log(FWHM_ANGSTROM), row) for row in by_wave]
    middles = (np.array(EDGES_ANGSTROM[1:]) + EDGES_ANGSTROM[:-1]) / 2
    return np.interp(wave_angstrom, middles, values)


def measure(classifier: Any, n: int = 400, seed: int = 0) -> FloatArray:
    """Measure the table on ``n`` normal library stars: (letters, stretches, line spreads).

    In each cell what 68 % of the stars stay below of the square root of (mean squared residual less mean squared
    noise); a cell with fewer than four stars takes its neighbour's.
    """
    from starfathom.classify.engine import Settings
    from starfathom.classify.grid import WAVE, blur
    from starfathom.classify.spectrum import PlainSpectrum

    library = classifier.library
    catalogue = library.catalogue
    normal = np.flatnonzero((catalogue["kind"] == "normal") & (np.asarray(catalogue["doubtful"], float) == 0))
    chosen = np.random.default_rng(seed).permutation(normal)[:n]
    shape = (len(LETTERS), len(EDGES_ANGSTROM) - 1, len(FWHM_ANGSTROM))
    found: dict[tuple[int, int, int], list[float]] = {cell: [] for cell in np.ndindex(shape)}
    for f, fwhm in enumerate(FWHM_ANGSTROM):
        spectra, settings = [], []
        for k in chosen:
            own = float(catalogue["fwhm_angstrom"][k])
            flux, valid = blur(library.flux[k].astype(float)[None], library.valid[k][None],
                               float(np.sqrt(max(fwhm**2 - own**2, 0.0))))
            spectra.append(PlainSpectrum(WAVE, np.where(valid[0], flux[0], 0.0), None, valid[0], medium="air"))
            settings.append(Settings(fwhm_angstrom=max(fwhm, own), velocity_kms=0.0))
        for spectrum, asked, said in zip(spectra, settings, classifier.classify_many(spectra, settings)):
            if said.status != "typed":
                continue
            ready = classifier.prepare(spectrum, asked)
            left = ready.rectified - classifier.template(said.t_code, said.lum_code, ready)
            use = ready.valid & np.isfinite(left)
            letter = int(np.clip(said.t_code // 10, 0, len(LETTERS) - 1))
            for w, (lo, hi) in enumerate(pairwise(EDGES_ANGSTROM)):
                here = use & (ready.wave_angstrom >= lo) & (ready.wave_angstrom < hi)
                if here.sum() > 30:
                    beyond_noise = np.mean(left[here] ** 2) - np.mean(ready.sigma[here] ** 2)
                    found[letter, w, f].append(float(np.sqrt(max(beyond_noise, 0.0))))
    count = np.array([len(v) for v in found.values()]).reshape(shape)
    table = np.array([np.percentile(v, 68) if v else 0.0 for v in found.values()]).reshape(shape)
    for letter, w, f in np.argwhere(count < 4):
        known = np.flatnonzero(count[:, w, f] >= 4)
        table[letter, w, f] = table[known[np.argmin(np.abs(known - letter))], w, f]
    return table


def write(table: FloatArray, path: Path = TABLE) -> None:
    """Write a measured table."""
    lines = ["# %ECSV 1.0", "# ---", "# datatype:", "# - {name: letter, datatype: string}",
             "# - {name: wave_lo, datatype: float64, unit: Angstrom}",
             "# - {name: wave_hi, datatype: float64, unit: Angstrom}"]
    lines += [f"# - {{name: fwhm_{f:g}, datatype: float64, description: 'scatter, share of the continuum, at a line "
              f"spread of {f:g} A FWHM'}}" for f in FWHM_ANGSTROM]
    lines += ["# delimiter: ','", "# meta:",
              "#   comments: [own measurement on the reference library by starfathom.desk.scatter]",
              "# schema: astropy-2.0", "letter,wave_lo,wave_hi," + ",".join(f"fwhm_{f:g}" for f in FWHM_ANGSTROM)]
    for letter, rows in zip(LETTERS, table):
        for lo, hi, row in zip(EDGES_ANGSTROM, EDGES_ANGSTROM[1:], rows):
            lines.append(f"{letter},{lo:g},{hi:g}," + ",".join(f"{v:.4f}" for v in row))
    path.write_text("\n".join(lines) + "\n", encoding="utf-8")


if __name__ == "__main__":
    from starfathom.classify import Classifier

    write(measure(Classifier.load()))
