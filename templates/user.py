"""Standards that a user adds, taken with their own instrument.

Each is one small npz file in :func:`user_dir`, on the grid of the library, at rest, in air. They are named standards at
once: ``nearest``, the desk and ``library_spectrum`` know them. The models learn from them only when that is asked for
(``learn``), because training takes minutes and changes every later result; :func:`fingerprint` changes with every file,
so that models kept in the cache are not used for another set.
"""

from __future__ import annotations

import hashlib
import json
import math
import os
import re
from functools import lru_cache
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from starfathom.templates.labels import read_label
from starfathom.templates.library import Library, LibraryGrid, decode_flux, encode_flux, read_catalogue

#: The name that ``--without`` knows the user's standards by.
LIBRARY_NAME = "user"


def user_dir() -> Path:
    """``STARFATHOM_TEMPLATES``, or ``starfathom/templates`` in the user's data directory (``XDG_DATA_HOME``)."""
    if given := os.environ.get("STARFATHOM_TEMPLATES"):
        return Path(given)
    root = os.environ.get("XDG_DATA_HOME") or os.path.expanduser("~/.local/share")
    return Path(root) / "starfathom" / "templates"


def user_files() -> list[Path]:
    """The standards added so far, by name."""
    folder = user_dir()
    return sorted(folder.glob("*.npz")) if folder.is_dir() else []


def fingerprint(learned_only: bool = True) -> str:
    """Changes with every standard added, taken away or altered; empty when there is none."""
    digest = hashlib.sha256()
    count = 0
    for path in user_files():
        raw = path.read_bytes()
        if learned_only and not _meta(path)["learn"]:
            continue
        count += 1
        digest.update(path.name.encode() + raw)
    return digest.hexdigest()[:12] if count else ""


def _meta(path: Path) -> dict[str, Any]:
    with np.load(path) as z:
        return dict(json.loads(str(z["meta"])))


def save_standard(name: str, label: str, flux: NDArray[np.float64], valid: NDArray[np.bool_], fwhm_angstrom: float,
                  *, learn: bool = False, origin: str = "") -> Path:
    """Keep one standard: ``flux`` and ``valid`` (4824,) on the library's grid, at rest, in air.

    Raises
    ------
    ValueError : the label names no subtype and class, or too little of the grid is covered
    """
    read = read_label(label)
    if not (math.isfinite(read.t_code) and math.isfinite(read.lum_code)):
        raise ValueError(f"{label!r} names no temperature subtype and luminosity class, such as 'K2 III'")
    if int(valid.sum()) < 500:
        raise ValueError(f"only {int(valid.sum())} pixels between 3540 and 9300 A are valid, and 500 are needed")
    codes, reference = encode_flux(np.asarray(flux, float), np.asarray(valid, bool))
    folder = user_dir()
    folder.mkdir(parents=True, exist_ok=True)
    slug = re.sub(r"[^A-Za-z0-9+.-]+", "_", name.strip()).strip("_.") or "standard"
    path = folder / f"{slug}.npz"
    meta = {"star": name.strip(), "label": label.strip(), "fwhm_angstrom": float(fwhm_angstrom), "learn": bool(learn),
            "origin": origin}
    aside = folder / f".{os.getpid()}-{slug}.npz"
    np.savez_compressed(aside, codes=codes, reference=np.float32(reference), meta=np.array(json.dumps(meta)))
    os.replace(aside, path)
    _read.cache_clear()
    return path


@lru_cache(maxsize=4)
def _read(key: tuple[tuple[str, int], ...]) -> tuple[list[dict[str, Any]], NDArray[np.int16]]:
    metas, codes = [], []
    for name, _ in key:
        with np.load(name) as z:
            metas.append(dict(json.loads(str(z["meta"]))))
            codes.append(z["codes"])
    return metas, np.array(codes, np.int16)


def user_standards(learned_only: bool = False) -> Library | None:
    """The user's standards as a library of their own, or None when there is none."""
    files = tuple((str(p), p.stat().st_mtime_ns) for p in user_files())
    if not files:
        return None
    metas, codes = _read(files)
    keep = [i for i, m in enumerate(metas) if m["learn"] or not learned_only]
    if not keep:
        return None
    flux, valid = decode_flux(codes[keep])
    columns: dict[str, list[Any]] = {name: [] for name in read_catalogue()}
    for i in keep:
        label = read_label(metas[i]["label"])
        known = {"star": metas[i]["star"], "library": LIBRARY_NAME, "file": metas[i]["star"],
                 "label": metas[i]["label"], "kind": label.kind, "doubtful": label.doubtful, "t_code": label.t_code,
                 "lum_code": label.lum_code, "fwhm_angstrom": metas[i]["fwhm_angstrom"], "av_removed": 0.0, "hip": 0}
        for name, column in columns.items():
            column.append(known.get(name, math.nan))
    return Library(LibraryGrid().wave_angstrom, flux, valid, {k: np.array(v) for k, v in columns.items()})


def joined(library: Library, extra: Library | None) -> Library:
    """``library`` with the stars of ``extra`` behind its own."""
    if extra is None:
        return library
    return Library(library.wave_angstrom, np.concatenate([library.flux, extra.flux]),
                   np.concatenate([library.valid, extra.valid]),
                   {k: np.concatenate([v, extra.catalogue[k].astype(v.dtype) if v.dtype.kind in "biuf"
                                       else extra.catalogue[k]]) for k, v in library.catalogue.items()})
