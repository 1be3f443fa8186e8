"""Recipe of ``data/extinction.ecsv``: broad-band extinction from a curve integrated over the star's own light.

Needs astropy, dust_extinction, the passbands of the package ``speclite`` 1.0.0 and the atlas of Pickles (1998, PASP
110, 863) as carried by ``Barak`` 0.3.2; both unpacked, and only their data files read:

    python -m starfathom.distance.extinction_recipe --filters speclite/data/filters --atlas barak/data/templates/pickles
"""

from __future__ import annotations

import argparse
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from starfathom.distance.tables import DATA

FloatArray = NDArray[np.float64]

PASSBANDS = {
    "U": "bessell-U", "B": "bessell-B", "V": "bessell-V", "R": "bessell-R", "I": "bessell-I",
    "G": "gaiadr3-G", "BP": "gaiadr3-BP", "RP": "gaiadr3-RP",
    "J": "twomass-J", "H": "twomass-H", "Ks": "twomass-Ks",
    "g": "sdss2010-g", "r": "sdss2010-r", "i": "sdss2010-i", "z": "sdss2010-z",
}  # fmt: skip
#: Spectra of the atlas that stand for each temperature: dwarfs down to G, giants and dwarfs below.
ATLAS: tuple[tuple[str, str, float], ...] = (
    ("O5V", "O5", 5), ("B0V", "B0", 5), ("B3V", "B3", 5), ("B8V", "B8", 5), ("A0V", "A0", 5), ("A3V", "A3", 5),
    ("A5V", "A5", 5),
    ("F0V", "F0", 5), ("F5V", "F5", 5), ("G0V", "G0", 5), ("G5V", "G5", 5), ("K0V", "K0", 5), ("K0III", "K0", 3),
    ("K5V", "K5", 5), ("K5III", "K5", 3), ("M0III", "M0", 3), ("M2V", "M2", 5), ("M4V", "M4", 5), ("M5V", "M5", 5),
)  # fmt: skip
CURVE_RV = np.linspace(2.35, 5.55, 9)
A_V_GRID = np.array([0.02, 1.0, 2.5, 4.5, 7.0])
#: Terms of the fit, powers of (R_V - 3.1) and of E(B-V).
POWERS = ((0, 0), (1, 0), (2, 0), (3, 0), (0, 1), (1, 1), (0, 2))


def band_extinction(
    wave_angstrom: FloatArray, flux: FloatArray, response: FloatArray, curve: FloatArray, a_v: float
) -> float:
    """Extinction in mag of one band (photon counting) for a curve A(lambda)/A(V) scaled by ``a_v``."""
    light = flux * response * wave_angstrom
    return float(-2.5 * np.log10((light * 10 ** (-0.4 * curve * a_v)).sum() / light.sum()))


def fit_terms(rv: FloatArray, ebv: FloatArray, ratio: FloatArray) -> tuple[FloatArray, float]:
    """Least-squares coefficients of :data:`POWERS` and the largest residual."""
    design = np.stack([(rv - 3.1) ** p * ebv**q for p, q in POWERS], axis=1)
    coefficients = np.asarray(np.linalg.lstsq(design, ratio, rcond=None)[0], np.float64)
    return coefficients, float(np.abs(design @ coefficients - ratio).max())


def atlas_spectra(folder: Path, wave: FloatArray) -> list[tuple[float, FloatArray]]:
    """Effective temperature (this package's scale) and flux per unit wavelength of :data:`ATLAS`, hot to cool."""
    from astropy.io import fits

    from starfathom.distance.grid import cell_of
    from starfathom.distance.intrinsic import intrinsic
    from starfathom.templates.subtypes import t_code_of

    out = []
    for name, subtype, lum in ATLAS:
        with fits.open(folder / f"{name}.fits") as file:
            data = file[1].data
            flux = np.interp(wave, np.asarray(data["wa"], float), np.asarray(data["fl"], float))
        out.append((float(np.exp(intrinsic().ln_teff[int(cell_of(t_code_of(subtype), lum))])), flux))
    return sorted(out, key=lambda item: -item[0])


def build(filters: Path, atlas: Path) -> list[list[object]]:
    """Rows (band, teff_k, coefficients...) of the table; R_V is that of a hot star in Johnson B and V."""
    import astropy.units as u
    from astropy.table import Table
    from dust_extinction.parameter_averages import G23

    wave = np.arange(2900.0, 24500.0, 10.0)
    response = {}
    for band, name in PASSBANDS.items():
        table = Table.read(filters / f"{name}.ecsv")
        response[band] = np.interp(
            wave, np.asarray(table["wavelength"], float), np.asarray(table["response"], float), left=0, right=0
        )
        if name.startswith("bessell"):  # printed as response to energy; the sums below count photons
            response[band] = response[band] / wave
    curves = [G23(Rv=float(rv))(wave * u.AA) for rv in CURVE_RV]
    spectra = atlas_spectra(atlas, wave)
    hot = next(flux for teff, flux in reversed(spectra) if teff > 30000)
    hot_rv = []
    for curve in curves:
        a_b, a_v = (band_extinction(wave, hot, response[b], curve, 0.05) for b in "BV")
        hot_rv.append(a_v / (a_b - a_v))
    rows: list[list[object]] = []
    for teff, flux in spectra:
        rv, ebv = [], []
        ratio: dict[str, list[float]] = {band: [] for band in PASSBANDS}
        for curve, r in zip(curves, hot_rv):
            for a_v in A_V_GRID:
                a = {b: band_extinction(wave, flux, response[b], curve, float(a_v)) for b in PASSBANDS}
                rv.append(r)
                ebv.append(a["B"] - a["V"])
                for b in PASSBANDS:
                    ratio[b].append(a[b] / ebv[-1])
        for band in PASSBANDS:
            coefficients, worst = fit_terms(np.array(rv), np.array(ebv), np.array(ratio[band]))
            rows.append([band, round(teff), *(round(float(c), 5) for c in coefficients), round(worst, 3)])
    return rows


def main() -> None:
    """Write the table."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--filters", type=Path, required=True, help="folder with the passband tables of speclite")
    parser.add_argument(
        "--atlas", type=Path, required=True, help="folder with the spectra of Pickles 1998 as FITS tables"
    )
    args = parser.parse_args()
    rows = build(args.filters, args.atlas)
    names = ["band", "teff_k", *(f"c{p}{q}" for p, q in POWERS), "worst"]
    with open(DATA / "extinction.ecsv", "w", encoding="utf-8") as file:
        file.write("# %ECSV 1.0\n# ---\n# datatype:\n")
        file.write("# - {name: band, datatype: string}\n# - {name: teff_k, unit: K, datatype: int64}\n")
        for p, q in POWERS:
            file.write(
                f"# - {{name: c{p}{q}, datatype: float64, "
                f"description: 'A_band/E(B-V), times (R_V-3.1)^{p} E(B-V)^{q}'}}\n"
            )
        file.write("# - {name: worst, datatype: float64, description: 'largest residual of the fit'}\n")
        file.write(
            "# delimiter: ','\n# meta: !!omap\n# - title: 'Broad-band extinction per unit E(B-V) of the star itself'\n"
            "# - curve: 'Gordon et al. 2023 ApJ 950 86, as in dust_extinction'\n"
            "# - passbands: 'Bessell 1990, Gaia DR3, 2MASS, SDSS 2010, as carried by speclite 1.0.0'\n"
            "# - shape: 'spectra of Pickles 1998 PASP 110 863, as carried by Barak 0.3.2 (BSD-3-Clause)'\n"
            "# - rv: 'A_V/E(B-V) of a B0 V star in these B and V, so that R_V = 3.1 keeps its usual meaning'\n"
            "# schema: astropy-2.0\n"
        )
        file.write(",".join(names) + "\n")
        for row in rows:
            file.write(",".join(str(v) for v in row) + "\n")


if __name__ == "__main__":
    main()
