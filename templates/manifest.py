"""Hashes of everything that is shipped and learned, and whether the parts fit one another.

    python -m starfathom.templates.manifest          write templates/data/manifest.json (after building or training)
"""

from __future__ import annotations

import hashlib
import json
from pathlib import Path

import numpy as np

from starfathom.templates.library import DATA, load_library

MANIFEST = DATA / "manifest.json"
_ROOT = DATA.parent.parent
_SHIPPED = ("templates/data/library.npz", "templates/data/catalogue.ecsv", "templates/data/sources.json",
            "classify/data/foreign.npz")
_MODELS = "classify/data/model"


def _folder(relative: str) -> Path:
    """A path of the checkout or of the installed package, which are laid out alike but for the root."""
    return _ROOT / relative


def shipped_files() -> list[str]:
    """Names of the files watched over, relative to the package."""
    models = sorted(p.name for p in _folder(_MODELS).glob("*.npz"))
    return [*_SHIPPED, *(f"{_MODELS}/{name}" for name in models)]


def hashes() -> dict[str, str]:
    """sha256 of every file that is there."""
    return {name: hashlib.sha256(_folder(name).read_bytes()).hexdigest()
            for name in shipped_files() if _folder(name).exists()}


def write() -> None:
    """Record the present state."""
    MANIFEST.write_text(json.dumps(hashes(), indent=1) + "\n")


def faults() -> list[str]:
    """What is wrong with the shipped files, one sentence each; empty when all is well."""
    out = []
    wanted = json.loads(MANIFEST.read_text()) if MANIFEST.exists() else {}
    if not wanted:
        out.append("templates/data/manifest.json is missing: the hashes cannot be compared")
    found = hashes()
    for name, digest in wanted.items():
        if name not in found:
            out.append(f"{name} is missing: install the package again")
        elif found[name] != digest:
            out.append(f"{name} is not the file that was shipped (sha256 {found[name][:12]}, expected {digest[:12]})")
    out.extend(f"{name} is not in the manifest" for name in found if wanted and name not in wanted)
    return out + _misfits()


def _misfits() -> list[str]:
    library = load_library()
    c = library.catalogue
    out = []
    rows = len(c["star"])
    if rows != len(library.flux):
        out.append(f"the catalogue has {rows} rows and the library {len(library.flux)} spectra")
    empty = int((library.valid.sum(axis=1) < 500).sum())
    if empty:
        out.append(f"{empty} library spectra have fewer than 500 valid pixels")
    names = set(c["star"].tolist())
    for path in sorted(_folder(_MODELS).glob("rung_*.npz")):
        with np.load(path) as z:
            strangers = set(z["names"].tolist()) - names
            broken = [k for k in z.files if z[k].dtype.kind == "f" and k.startswith("surface.")
                      and not np.isfinite(z[k]).all()]
        if strangers:
            out.append(f"{path.name} has learned from {len(strangers)} stars that the library does not hold")
        if broken:
            out.append(f"{path.name} holds numbers that are not finite: {', '.join(broken)}")
    return out


if __name__ == "__main__":
    write()
