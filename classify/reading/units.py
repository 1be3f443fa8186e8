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


_LENGTHS = {
    "a": 1.0, "å": 1.0, "Å": 1.0, "ang": 1.0, "angs": 1.0, "angstrom": 1.0, "angstroms": 1.0, "aa": 1.0, "angstroem": 1.0, "ångström": 1.0, "ångstrom": 1.0,
    "0.1nm": 1.0, "0.1 nm": 1.0, "10^-10m": 1.0, "angström": 1.0, "ängström": 1.0, "angst": 1.0, "anstrom": 1.0, "anstroms": 1.0,
    "nm": 10.0, "nanometer": 10.0, "nanometers": 10.0, "nanometre": 10.0, "nanometres": 10.0, "nanom": 10.0, "mu": 1e4, "millimicron": 10.0,
    "um": 1e4, "µm": 1e4, "μm": 1e4, "micron": 1e4, "microns": 1e4, "micrometer": 1e4, "micrometers": 1e4, "µ": 1e4, "μ": 1e4,
    "micrometre": 1e4, "micrometres": 1e4, "mum": 1e4, "mm": 1e7, "cm": 1e8, "m": 1e10, "meter": 1e10, "meters": 1e10, "metre": 1e10,
    "metres": 1e10, "pm": 0.01, "10a": 10.0, "10 a": 10.0, "km": 1e13,
}
_FREQUENCIES = {"hz": 1.0, "hertz": 1.0, "khz": 1e3, "mhz": 1e6, "ghz": 1e9, "thz": 1e12, "phz": 1e15, "1/s": 1.0, "s-1": 1.0, "s^-1": 1.0}
_WAVENUMBERS = {"cm-1": 1.0, "cm^-1": 1.0, "1/cm": 1.0, "cm**-1": 1.0, "kayser": 1.0, "m-1": 0.01, "1/m": 0.01, "um-1": 1e4, "1/um": 1e4,
                "micron-1": 1e4, "um^-1": 1e4}
_ENERGIES = {"ev": 1.0, "kev": 1e3, "mev": 1e-3}


@lru_cache(maxsize=512)
def spectral_unit(text: str) -> SpectralUnit | None:
    """The spectral unit a string names in any usual spelling, or None."""
    bare = text.strip().strip("'\"").strip("[](){}").strip().rstrip(".").lower()
    bare = re.sub(r"^unit=", "", bare)
    if bare in _LENGTHS:
        return SpectralUnit("wavelength", _LENGTHS[bare])
    if bare in _FREQUENCIES:
        return SpectralUnit("frequency", _FREQUENCIES[bare])
    squeezed = bare.replace(" ", "").replace("{", "").replace("}", "")
    if squeezed in _WAVENUMBERS:
        return SpectralUnit("wavenumber", _WAVENUMBERS[squeezed])
    if bare in _ENERGIES:
        return SpectralUnit("energy", _ENERGIES[bare])
    return _LENGTH_WORD(bare)


def _LENGTH_WORD(bare: str) -> SpectralUnit | None:
    """Units buried in words, as in ``Angstroms (air)`` or ``log(Angstrom)``."""
    for word in re.split(r"[^a-zåäöµμ]+", bare[:80]):
        if len(word) >= 2 and word in _LENGTHS and word not in ("mu", "mm", "cm", "km", "pm"):
            return SpectralUnit("wavelength", _LENGTHS[word])
    return None


#: Ways of stating brightness. "f_lambda" needs nothing; the others are turned into it up to a constant.
FluxKind = Literal["f_lambda", "f_nu", "nu_f_nu", "counts", "photons", "normalised", "mag_ab", "mag_st", "mag", "unknown"]


@lru_cache(maxsize=512)
def flux_kind(text: str) -> FluxKind:
    """What kind of flux a unit string (or a column heading) stands for."""
    t = text.strip().lower().replace("ångström", "angstrom").replace("å", "a").replace("**", "^").replace("{", "").replace("}", "")
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
    energy = re.search(r"\b(erg|ergs|w|mw|kw|watt|watts|j|joule|joules)\b|\d(erg|w)", t.replace("e-17erg", "1 erg"))
    per_hz = re.search(r"hz|/\s*ghz", t)
    if energy and per_hz:
        return "f_nu"
    per_length = re.search(
        r"\b(a|aa|ang|angs|angstrom|angstroms|nm|um|µm|μm|micron|microns|cm-3|cm\^-3|cm3|cm\^3)\b|\ba-1|\ba\^|nm-1|um-1|ang", t)
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
