"""Column names, extension names and units in the spellings people use, and what they mean."""

from __future__ import annotations

import re
from functools import lru_cache
from typing import Literal

Role = Literal["wave", "flux", "std", "var", "ivar", "snr", "bad", "good", "index", "other"]

_WAVE = {
    "wavelength", "wavelengths", "wave", "waves", "wavel", "waveln", "wavelen", "lambda", "lambdas", "lam", "lamb", "lbda",
    "wl", "wvl", "wlen", "wln", "wav", "wlength", "wvlength", "w", "l", "x", "spectralaxis", "ang", "angs", "angstrom",
    "angstroms", "nm", "nanometer", "nanometers", "nanometre", "micron", "microns", "um", "freq", "frequency",
    "frequencies", "wavenumber", "longueur", "wellenlaenge", "wellenlange", "longitud", "onda", "awav", "λ", "wa",
}
_LOG_WAVE = {"loglam": "log10", "loglambda": "log10", "logwave": "log10", "logwl": "log10", "logwavelength": "log10",
             "loglambdas": "log10", "lnlam": "ln", "lnlambda": "ln", "lnwave": "ln", "lnwavelength": "ln"}
_FLUX = {
    "flux": 10, "fluxes": 10, "flam": 10, "flambda": 10, "fl": 8, "fλ": 10, "fnu": 9, "fv": 7, "f": 8, "spec": 8, "spectrum": 8,
    "fluxdensity": 10, "fluxcal": 10, "calflux": 10, "fluxreduced": 10, "relflux": 9, "relativeflux": 9, "flx": 10,
    "intensity": 8, "intens": 8, "int": 7, "counts": 7, "count": 7, "cts": 7, "adu": 7, "electrons": 7, "photons": 7,
    "dn": 7, "signal": 7, "sci": 7, "science": 7, "data": 6, "normflux": 9, "fluxnorm": 9, "normalizedflux": 9, "value": 4, "values": 4,
    "normalisedflux": 9, "normalized": 6, "normalised": 6, "norm": 5, "fnorm": 9, "nflux": 9, "mag": 5, "magnitude": 5, "abmag": 6, "magab": 6, "stmag": 6,
    "net": 4, "object": 3, "obj": 3, "star": 3, "y": 3, "i": 3, "s": 2, "primary": 3, "brightness": 4, "energy": 2,
}
_STD_WORDS = {"err", "er", "error", "errors", "sigma", "sig", "std", "stdev", "stddev", "unc", "uncert", "uncertainty",
              "uncertainties", "noise", "rms", "errs", "sd", "stat", "staterr", "staterror", "dflux", "df", "eflux", "ef", "fluxerr", "fluxerror",
              "fluxsig", "fluxsigma", "sigflux", "sigmaflux", "errflux", "errorflux", "fluxunc", "uncflux", "ferr", "fsig",
              "flamerr", "fluxe", "fluxuncertainty", "delta", "deltaflux", "dy", "yerr", "dev", "e", "fluxstd", "stdflux", "fluxrms", "abserr"}
_VAR_WORDS = {"var", "variance", "variances", "fluxvar", "varflux", "fluxvariance", "sigma2", "err2"}
_IVAR_WORDS = {"ivar", "invvar", "inversevariance", "invvariance", "fluxivar", "ivarflux", "weight", "weights", "iv"}
_SNR_WORDS = {"snr", "sn", "s2n", "ston", "signaltonoise", "snratio", "ston", "snrpix"}
_BAD_WORDS = {"mask", "andmask", "ormask", "dq", "flag", "flags", "bad", "badpix", "quality", "qual", "dataqual",
              "dataquality", "badpixel", "qualityflag", "pixmask", "maskand", "bpm", "quals", "dqf"}
_GOOD_WORDS = {"good", "valid", "goodpix", "goodpixel", "use", "ok"}
_INDEX_WORDS = {"pixel", "pix", "index", "idx", "no", "row", "number", "num", "id", "channel", "n", "bin", "px"}
_OTHER_WORDS = {"sky", "bkg", "background", "model", "continuum", "cont", "wdisp", "fwhm", "res", "resolution", "telluric",
                "response", "sens", "sensitivity", "throughput", "gross", "exptime", "exposure", "raw", "contsub", "disp",
                "fit", "bestfit", "template", "residual", "airmass", "width", "binwidth", "step", "tot", "totexp", "syserror", "sys", "syserr"}


def _words(name: str) -> list[str]:
    name = re.sub(r"(?<=[a-z])(?=[A-Z])", "_", name[:80])
    return [w for w in re.split(r"[^0-9a-zλσΔ²]+", name.lower()) if w]


@lru_cache(maxsize=4096)
def role_of(name: str) -> tuple[Role, int]:
    """What a column called ``name`` holds, and how well the name says so (higher is better).

    The unit may still be attached, as in ``Wavelength [nm]``; case and punctuation do not count.
    """
    bare = split_unit(name)[0]
    words = _words(bare)
    glued = "".join(words)
    if not words:
        return "other", 0
    kinds = set(words) | {glued}
    if glued in ("σ", "δ") or "σ" in kinds:
        return "std", 9
    if words[0] in ("s", "signal") and words[-1] in ("n", "noise") and len(words) <= 4:
        return "snr", 9
    if kinds & _IVAR_WORDS or {"inverse", "variance"} <= kinds or {"inv", "var"} <= kinds:
        return "ivar", 9
    if kinds & _SNR_WORDS:
        return "snr", 9
    if kinds & _BAD_WORDS:
        return "bad", 9 if words[0] in ("and", "andmask", "mask", "dq") else 7
    if kinds & _VAR_WORDS:
        return "var", 9
    wave = glued in _WAVE or glued in _LOG_WAVE or bool(set(words) & (_WAVE - {"w", "l", "x"}))
    if wave and not (set(words) & (_STD_WORDS | set(_FLUX) - {"data", "int", "i", "s", "y", "object", "spec"})):
        return "wave", 3 if len(glued) == 1 else 10 if glued in _WAVE or glued in _LOG_WAVE else 6
    if wave and words[0] in ("log", "ln") and len(words) == 2 and words[1] in _WAVE:
        return "wave", 8
    if kinds & _OTHER_WORDS:
        return "other", 0
    if kinds & _STD_WORDS:
        return "std", 9 if "sys" not in kinds else 3
    if glued in _FLUX:
        return "flux", _FLUX[glued]
    hits = [_FLUX[w] for w in words if w in _FLUX and len(w) > 2]
    if hits:
        return "flux", max(hits) - 2
    if words[0] == "f" and len(words) == 2 and words[1] in ("lambda", "lam", "nu", "λ"):
        return "flux", 10
    if kinds & _GOOD_WORDS:
        return "good", 5
    if kinds & _INDEX_WORDS:
        return "index", 5
    return "other", 0


def is_companion(name: str) -> bool:
    """Whether a name says sky, model, response or the like: something beside the flux, never the flux itself."""
    return bool(set(_words(split_unit(name)[0])) & _OTHER_WORDS)


def log_of(name: str) -> str:
    """"log10" or "ln" when a wavelength column's name says it holds logarithms, else ""."""
    words = _words(split_unit(name)[0])
    glued = "".join(words)
    if glued in _LOG_WAVE:
        return _LOG_WAVE[glued]
    if words and words[0] in ("log", "log10", "ln"):
        return "ln" if words[0] == "ln" else "log10"
    return ""


def split_unit(name: str) -> tuple[str, str]:
    """A column heading taken apart: ``Wavelength (nm)`` gives ``("Wavelength", "nm")``."""
    match = re.fullmatch(r"\s*([^\[\](){}]*?)[\s_]*[\[({](.*)[\])}]\s*", name[:200])
    if match and match.group(1):
        return match.group(1), match.group(2).strip()
    return name.strip(), ""
