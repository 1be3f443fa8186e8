"""Units of wavelength and flux: what a unit string means, without a units library on the quick path."""

from __future__ import annotations

import re
from functools import lru_cache
from typing import Literal, NamedTuple

#: Speed of light in angstrom per second: 299792458 m/s, exact (SI).
C_ANGSTROM_PER_S = 2.99792458e18
#: Planck constant times speed of light in eV angstrom: h = 6.62607015e-34 J s, e = 1.602176634e-19 C, exact (SI 2019).
HC_EV_ANGSTROM = 12398.419843320026

SpectralKind = Literal["wavelength", "frequency", "wavenumber", "energy"]


class SpectralUnit(NamedTuple):
    """A spectral axis: wavelength = value * scale, or constant / (value * scale) for the other kinds (angstrom)."""

    kind: SpectralKind
    scale: float


def _table(rows: dict[float, str]) -> dict[str, float]:
    return {word: scale for scale, words in rows.items() for word in words.split()}


#: Angstrom per unit, spellings in lower case with blanks taken out.
_LENGTHS = _table(
    {
        1.0: "a å ang angs angst angstrom angstroms aa angstroem ångström ångstrom angström ängström anstrom anstroms "
        "0.1nm "
        "10^-10m 1e-10m",
        10.0: "nm nanometer nanometers nanometre nanometres millimicron mu 10a",
        1e4: "um µm μm micron microns micrometer micrometers micrometre micrometres mum µ μ",
        0.01: "pm",
        1e7: "mm",
        1e8: "cm",
        1e10: "m meter meters metre metres",
        1e13: "km",
    }
)
#: Hz per unit.
_FREQUENCIES = _table(
    {
        1.0: "hz hertz 1/s s-1 s^-1",
        1e3: "khz",
        1e6: "mhz",
        1e9: "ghz",
        1e12: "thz",
        1e15: "phz",
    }
)
#: Inverse centimetres per unit.
_WAVENUMBERS = _table(
    {
        1.0: "cm-1 cm^-1 1/cm cm**-1 kayser",
        0.01: "m-1 1/m m^-1",
        1e4: "um-1 1/um micron-1 um^-1",
    }
)
#: Electronvolt per unit.
_ENERGIES = _table({1.0: "ev", 1e3: "kev", 1e-3: "mev"})


@lru_cache(maxsize=512)
def spectral_unit(text: str) -> SpectralUnit | None:
    """The spectral unit a string names in any usual spelling, or None."""
    bare = text.strip().strip("'\"").strip("[](){}").strip().rstrip(".").lower().removeprefix("unit=")
    squeezed = re.sub(r"[\s{}]", "", bare)
    kinds: tuple[tuple[SpectralKind, dict[str, float]], ...] = (
        ("wavelength", _LENGTHS),
        ("frequency", _FREQUENCIES),
        ("wavenumber", _WAVENUMBERS),
        ("energy", _ENERGIES),
    )
    for kind, table in kinds:
        if squeezed in table:
            return SpectralUnit(kind, table[squeezed])
    # units among words, as in "Angstroms (air)"; short ones could be anything
    for word in re.split(r"[^a-zåäöµμ]+", bare[:80]):
        if len(word) >= 2 and word in _LENGTHS and word not in ("mu", "mm", "cm", "km", "pm"):
            return SpectralUnit("wavelength", _LENGTHS[word])
    return None


def logarithm_of(text: str) -> tuple[str, str]:
    """Kind of logarithm ("log10", "ln") and unit inside, of ``log(Angstrom)`` or ``dex(nm)``; ("", text) of others."""
    match = re.fullmatch(r"\s*(log(?:10)?|lg|ln|dex)\s*[\s(\[]\s*([^)\]]*)[)\]]?\s*", text[:80], re.I)
    if match is None:
        return ("log10", "") if text.strip().lower() in ("log", "log10", "dex") else ("", text)
    return "ln" if match.group(1).lower() == "ln" else "log10", match.group(2).strip()


#: Ways of stating brightness. "f_lambda" needs nothing; the others are turned into it up to a constant.
FluxKind = Literal[
    "f_lambda", "f_nu", "nu_f_nu", "counts", "photons", "normalised", "mag_ab", "mag_st", "mag", "unknown"
]


@lru_cache(maxsize=512)
def flux_kind(text: str) -> FluxKind:
    """What kind of flux a unit string (or a column heading) stands for."""
    t = re.sub(r"[{}]", "", text.strip().lower().replace("ångström", "angstrom").replace("å", "a").replace("**", "^"))
    if not t:
        return "unknown"
    if re.search(r"\bst[ _]?mag|\bmag(nitude)?s?[ _(\[]*st\b", t):
        return "mag_st"
    if re.search(r"\bab[ _]?mag|\bmag(nitude)?s?[ _(\[]*ab\b|\bab[ _]?nu\b|^ab$", t):
        return "mag_ab"
    if re.search(r"\bm?mag(nitude)?s?\b", t):
        return "mag"
    if re.search(r"\b(m|u|µ|μ|n|k)?jy\b|jansky|\bf_?nu\b|flux_nu|\bfν", t):
        return "f_nu"
    if re.search(r"photlam|photon|\bph\b|\bphot\b", t):
        return "photons"
    energy = re.search(r"\b(erg|ergs|w|mw|kw|watt|watts|j|joule|joules)\b|\d(erg|w)", t)
    per_hz = re.search(r"hz|/\s*ghz", t)
    if energy and per_hz:
        return "f_nu"
    per_length = re.search(r"\b(a|aa|nm|um|µm|μm|microns?|cm-3|cm\^-3|cm3|cm\^3)\b|\ba-1|\ba\^|nm-1|um-1|ang", t)
    if energy and per_length:
        return "f_lambda"
    if energy and re.search(r"cm|m2|m\^2|m-2", t):
        return "nu_f_nu"
    if re.search(r"\b(flam|f_?lam|f_?lambda)\b|fλ", t):
        return "f_lambda"
    if re.search(r"\b(counts?|cts?|adu|dn|electrons?|e-|ct/s)(?![a-z])", t):
        return "counts"
    if re.search(r"normali[sz]ed|continuum|\bnorm\b|rectified", t):
        return "normalised"
    return "unknown"


def flux_word(name: str, unit: str) -> str:
    """First text that tells the kind of flux: a column's unit, its name and unit together, its name; else the unit."""
    for text in (unit, f"{name} [{unit}]", name):
        kind = flux_kind(text)
        if kind == "mag" and flux_kind(f"{name} [{unit}]") != "unknown":
            return f"{name} [{unit}]"
        if kind != "unknown":
            return text
    return unit
