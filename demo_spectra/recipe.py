"""Make the demonstration's files from real spectra: ``python -m starfathom.demo_spectra.recipe [FOLDER]``.

``stars.ecsv`` says what becomes of each star. A library spectrum is moved to a velocity, reddened, blurred to the line
spread of the invented spectrograph, put on its pixels, given a sensitivity curve and noise, and written the way some
observatory or other writes its files. The same recipe and library give the same files.

What is simulated, in order: emission (one Be star), rest to observed wavelengths, reddening by the mean law of Gordon
et al. 2023 (ApJ 950, 86) with R_V = 3.1, Gaussian line spread, sampling at 2.5 pixels a FWHM, counts with photon noise
and a floor of 10 % of it, flux calibration good to a smooth 3 %. Magnitudes follow from the absolute magnitude, the
distance and the reddening, with errors of 0.015 (V) and 0.02 mag (B, I).
"""

from __future__ import annotations

import gzip
import io
import sys
import tarfile
from pathlib import Path
from typing import Any

import numpy as np
from astropy.io import fits
from astropy.table import Table
from numpy.typing import NDArray

FloatArray = NDArray[np.float64]

HERE = Path(__file__).parent
SEED = 17
LIGHT_KMS = 299792.458
FWHM_TO_SIGMA = 1 / 2.3548200450309493
R_V = 3.1
LIBRARY_FWHM_ANGSTROM = {"miles": 2.5, "stelib": 3.0, "sdss": 2.6}
SIMULATED = "simulated from a real spectrum; see demo_spectra/README.md"


def base_spectrum(base: str) -> tuple[FloatArray, FloatArray, float]:
    """Rest air wavelengths (angstrom), flux and FWHM (angstrom) of a base such as ``miles HD206165``."""
    library, star = base.split(" ", 1)
    if library == "sdss":
        wave, flux = _sdss(star)
    else:
        from starfathom.templates.library import load_library

        shelf = load_library()
        rows = np.flatnonzero((shelf.catalogue["library"] == library) & (shelf.catalogue["star"] == star))
        if len(rows) != 1:
            raise LookupError(f"{base}: {len(rows)} such spectra in the library")
        good = shelf.valid[rows[0]]
        wave, flux = shelf.wave_angstrom[good], shelf.flux[rows[0]][good].astype(float)
    return wave, flux / np.median(flux), LIBRARY_FWHM_ANGSTROM[library]


def _sdss(name: str) -> tuple[FloatArray, FloatArray]:
    """A survey template out of the pinned registry package; vacuum wavelengths turned to air."""
    import astropy.units as u
    from specutils.utils.wcs_utils import vac_to_air

    from starfathom.templates.recipe import fetch

    with tarfile.open(fetch("barak")) as package:
        member = package.extractfile(f"Barak-0.3.2/barak/data/templates/sdss/{name}.fits")
        assert member is not None
        data = fits.getdata(io.BytesIO(member.read()), 1)
    wave, flux = np.asarray(data["wa"], float), np.asarray(data["fl"], float)
    good = flux > 0
    return vac_to_air(wave[good] * u.AA).to_value(u.AA), flux[good]


def with_emission(wave: FloatArray, flux: FloatArray) -> FloatArray:
    """Double-peaked Balmer emission, as of a disc around a B star: H alpha 25, H beta 3, H gamma 0.8 A strong."""
    out = flux.copy()
    for centre, width in ((6562.8, 25.0), (4861.3, 3.0), (4340.5, 0.8)):
        level = np.interp(centre, wave, flux)
        sigma = 120.0 / LIGHT_KMS * centre
        for shift in (-110.0, 110.0):
            at = centre * (1 + shift / LIGHT_KMS)
            out += level * width / 2 * np.exp(-0.5 * ((wave - at) / sigma) ** 2) / (sigma * np.sqrt(2 * np.pi))
    return out


def reddened(wave: FloatArray, flux: FloatArray, ebv: float) -> FloatArray:
    """``flux`` behind E(B-V) = ``ebv`` more dust (less where negative)."""
    import astropy.units as u
    from dust_extinction.parameter_averages import G23

    return flux * 10 ** (-0.4 * ebv * R_V * G23(Rv=R_V)(wave * u.AA))


def blurred(wave: FloatArray, flux: FloatArray, fwhm_angstrom: float) -> tuple[FloatArray, FloatArray]:
    """On 0.25 A steps, convolved with a Gaussian of that FWHM."""
    from scipy.ndimage import gaussian_filter1d

    fine = np.arange(wave[0], wave[-1], 0.25)
    return fine, gaussian_filter1d(np.interp(fine, wave, flux), fwhm_angstrom * FWHM_TO_SIGMA / 0.25, mode="nearest")


def observed(star: Any, rng: np.random.Generator) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Wavelength (air, angstrom), flux and its standard deviation as the spectrograph delivers them."""
    wave, flux, fwhm = base_spectrum(star["base"])
    if "emission added" in star["story"]:
        flux = with_emission(wave, flux)
    wave = wave * (1 + star["velocity_kms"] / LIGHT_KMS)
    flux = reddened(wave, flux, star["ebv"] - star["ebv_in_base"])
    fine, flux = blurred(wave, flux, np.sqrt(star["fwhm"] ** 2 - fwhm**2))
    pixel = star["fwhm"] / 2.5
    low, high = max(star["wave_lo"], fine[0] + 1), min(star["wave_hi"], fine[-1] - 1)
    if star["form"] in ("log-linear image", "survey table"):
        step = pixel / 5000.0
        grid = low * np.exp(step * np.arange(int(np.log(high / low) / step)))
    else:
        grid = low + pixel * np.arange(int((high - low) / pixel))
    flux = np.interp(grid, fine, flux)
    flux *= 1 + 0.03 * np.sin((grid - 3600) / 900 + rng.uniform(0, 2 * np.pi))
    middle = flux[np.abs(grid - 5500) < 50].mean()
    width = np.gradient(grid)
    sigma = middle / star["snr"] * np.sqrt((np.clip(flux, 0, None) / middle + 0.1) / 1.1 / width)
    return grid, flux + rng.normal(0, sigma), sigma


def photometry(star: Any, rng: np.random.Generator) -> dict[str, float]:
    """Magnitudes as a careful observer would have them: the true ones with their errors."""
    errors = {"V": 0.015, "B": 0.02, "I": 0.02}
    noise = {band: rng.normal(0, error) for band, error in errors.items()}
    if not np.isfinite(star["abs_mag_v"]):
        # The galaxy: magnitudes of its middle as a star's would be measured.
        true = {"V": 15.1, "B": 15.95, "I": np.nan}
    else:
        v = star["abs_mag_v"] + 5 * np.log10(star["distance_pc"] / 10) + R_V * star["ebv"]
        v -= 0.75 if "unresolved pair" in star["story"] else 0.0
        # E(V-I)/E(B-V) = 1.25 for Cousins I and R_V = 3.1 (common practice).
        true = {"V": v, "B": v + star["b_v0"] + star["ebv"], "I": v - star["v_i0"] - 1.25 * star["ebv"]}
    out = {}
    for band, error in errors.items():
        out[band] = round(true[band] + noise[band], 3)
        out[f"e_{band}"] = error if np.isfinite(true[band]) else np.nan
    return out


# Files --------------------------------------------------------------------------------------------------------------


def write(path: Path, form: str, name: str, wave: FloatArray, flux: FloatArray, sigma: FloatArray) -> None:
    """Write one spectrum in the layout that ``form`` names."""
    if "image" in form:
        _put(path, _fits_bytes(_image(form, name, wave, flux)))
    elif "table" in form:
        _put(path, _fits_bytes(_table(form, name, wave, flux, sigma)))
    else:
        _put(path, _text(form, name, wave, flux, sigma).encode())


def _put(path: Path, data: bytes) -> None:
    # No time stamp inside, so that the same recipe gives the same bytes.
    path.write_bytes(gzip.compress(data, mtime=0) if path.suffix == ".gz" else data)


def _fits_bytes(hdus: fits.HDUList) -> bytes:
    held = io.BytesIO()
    hdus.writeto(held)
    return held.getvalue()


def _image(form: str, name: str, wave: FloatArray, flux: FloatArray) -> fits.HDUList:
    hdu = fits.PrimaryHDU((flux * 1000).astype(np.float32))
    head = hdu.header
    head["OBJECT"] = name
    head["COMMENT"] = SIMULATED
    head["BUNIT"] = "counts"
    head["CRPIX1"] = 1.0
    if form.startswith("log-linear"):
        head["CTYPE1"], head["DC-FLAG"] = "LINEAR", 1
        head["CRVAL1"], head["CDELT1"] = float(np.log10(wave[0])), float(np.log10(wave[1] / wave[0]))
    elif form.startswith("cd matrix"):
        head["CTYPE1"], head["CUNIT1"], head["AIRORVAC"] = "LINEAR", "Angstrom", "air"
        head["CRVAL1"], head["CD1_1"] = wave[0], wave[1] - wave[0]
    else:
        head["CTYPE1"], head["CUNIT1"] = "AWAV", "Angstrom"
        head["CRVAL1"], head["CDELT1"] = wave[0], wave[1] - wave[0]
    return fits.HDUList([hdu])


def _table(form: str, name: str, wave: FloatArray, flux: FloatArray, sigma: FloatArray) -> fits.HDUList:
    head = fits.PrimaryHDU()
    head.header["OBJECT"] = name
    head.header["COMMENT"] = SIMULATED
    if form == "survey table":
        import astropy.units as u
        from specutils.utils.wcs_utils import air_to_vac

        head.header["VACUUM"] = (True, "wavelengths are in vacuum")
        vacuum = air_to_vac(wave * u.AA).to_value(u.AA)
        columns = [
            fits.Column("loglam", "E", array=np.log10(vacuum)),
            fits.Column("flux", "E", array=flux),
            fits.Column("ivar", "E", array=sigma**-2),
        ]
        extension = "COADD"
    else:
        columns = [
            fits.Column("WAVELENGTH", "D", unit="Angstrom", array=wave),
            fits.Column("FLUX", "E", array=flux),
            fits.Column("ERROR", "E", array=sigma),
        ]
        extension = "SPECTRUM"
    return fits.HDUList([head, fits.BinTableHDU.from_columns(columns, name=extension)])


def _text(form: str, name: str, wave: FloatArray, flux: FloatArray, sigma: FloatArray) -> str:
    triples = list(zip(wave.tolist(), flux.tolist(), sigma.tolist()))
    if form.startswith("plain text"):
        return "".join(f"{w:9.3f} {f:.5f}\n" for w, f, _s in triples)
    if form == "text with errors":
        head = f"# {name}, {SIMULATED}\n# wavelength[A] flux error\n"
        return head + "".join(f"{w:9.3f}  {f:.5f}  {s:.5f}\n" for w, f, s in triples)
    if form == "csv":
        return "wavelength,flux,flux_error\n" + "".join(f"{w:.3f},{f:.5f},{s:.5f}\n" for w, f, s in triples)
    if form == "decimal comma":
        rows = "".join(f"{w:.3f};{f:.5f}\n".replace(".", ",") for w, f, _s in triples)
        return "lambda;intensity\n" + rows
    if form == "ecsv nm":
        head = (
            "# %ECSV 1.0\n# ---\n# datatype:\n# - {name: wavelength, unit: nm, datatype: float64}\n"
            "# - {name: flux, unit: erg / (s cm2 AA), datatype: float64}\n"
            "# - {name: uncertainty, unit: erg / (s cm2 AA), datatype: float64}\n"
            f"# meta: !!omap\n# - {{comments: [{name}]}}\n# schema: astropy-2.0\n"
        )
        return (
            head
            + "wavelength flux uncertainty\n"
            + "".join(f"{w / 10:.4f} {f * 1e-14:.5e} {s * 1e-14:.5e}\n" for w, f, s in triples)
        )
    raise ValueError(f"no layout called {form}")


TARGETS_HEADER = """# %ECSV 1.0
# ---
# delimiter: ','
# datatype:
# - {name: name, datatype: string}
# - {name: spectrum, datatype: string, description: path from this folder}
# - {name: mk_type, datatype: string, description: where there is no spectrum}
# - {name: ra, unit: deg, datatype: float64}
# - {name: dec, unit: deg, datatype: float64}
# - {name: V, unit: mag, datatype: float64}
# - {name: e_V, unit: mag, datatype: float64}
# - {name: B, unit: mag, datatype: float64}
# - {name: e_B, unit: mag, datatype: float64}
# - {name: I, unit: mag, datatype: float64, description: Cousins}
# - {name: e_I, unit: mag, datatype: float64}
# - {name: parallax, unit: mas, datatype: float64}
# - {name: e_parallax, unit: mas, datatype: float64}
# meta: !!omap
# - {comments: ['@']}
# schema: astropy-2.0
name,spectrum,mk_type,ra,dec,V,e_V,B,e_B,I,e_I,parallax,e_parallax
"""


def _cell(value: float, decimals: int) -> str:
    return f"{value:.{decimals}f}" if np.isfinite(value) else ""


def build(folder: Path = HERE) -> list[Path]:
    """Write every spectrum and the target list into ``folder``; returns their paths."""
    paths = []
    rows = []
    for number, star in enumerate(Table.read(HERE / "stars.ecsv").filled("")):
        # A stream of its own for each star: changing one leaves the others as they were.
        rng = np.random.default_rng([SEED, number])
        mags = photometry(star, rng)
        parallax = 1000 / star["distance_pc"] + star["e_parallax"] * rng.normal()
        ra, dec = 297.60 + rng.uniform(-0.4, 0.4), 24.15 + rng.uniform(-0.35, 0.35)
        if star["file"]:
            write(folder / star["file"], star["form"], star["name"], *observed(star, rng))
            paths.append(folder / star["file"])
        rows.append(
            ",".join(
                [
                    star["name"],
                    star["file"],
                    "" if star["file"] else star["true_type"],
                    f"{ra:.5f}",
                    f"{dec:.5f}",
                    *(_cell(mags[key], 3) for band in "VBI" for key in (band, f"e_{band}")),
                    _cell(parallax, 3),
                    _cell(star["e_parallax"], 3),
                ]
            )
            + "\n"
        )
    path = folder / "targets.ecsv"
    path.write_text(TARGETS_HEADER.replace("@", SIMULATED) + "".join(rows))
    return [*paths, path]


def truth_table() -> str:
    """What is true of each star, as the Markdown table of ``README.md``."""

    def shown(value: float, form: str) -> str:
        return format(value, form) if np.isfinite(value) else ""

    titles = ("star", "file", "layout", "type", "M_V", "distance, pc", "E(B-V)", "velocity, km/s", "FWHM, Å", "S/N")
    out = [f"| {' | '.join(titles)} | what is special |", "| --- " * (len(titles) + 1) + "|"]
    for s in Table.read(HERE / "stars.ecsv").filled(""):
        out.append(
            f"| {s['name']} | {s['file']} | {s['form']} | {s['true_type']} | {shown(s['abs_mag_v'], '.2f')} "
            f"| {shown(s['distance_pc'], '.0f')} | {shown(s['ebv'], '.2f')} | {shown(s['velocity_kms'], '+.0f')} "
            f"| {shown(s['fwhm'], '.0f')} | {shown(s['snr'], '.0f')} | {s['story']} |"
        )
    return "\n".join(out) + "\n"


if __name__ == "__main__":
    for written in build(Path(sys.argv[1]) if len(sys.argv) > 1 else HERE):
        print(written)
