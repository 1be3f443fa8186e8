"""Column names, extension names and units in the spellings people use, and what they mean."""

from __future__ import annotations

import re
import unicodedata
from functools import lru_cache
from typing import Literal

Role = Literal["wave", "flux", "std", "var", "ivar", "snr", "bad", "good", "index", "other"]


def _set(words: str) -> frozenset[str]:
    return frozenset(words.split())


_WAVE = _set("""
    wavelength wavelengths wave waves wavel waveln wavelen lambda lambdas lam lamb lbda wl wvl wlen wln wav wlength
    wvlength w l x wa spectralaxis ang angs angstrom angstroms nm nanometer nanometers nanometre micron microns um freq
    frequency frequencies wavenumber energy longueur lunghezza wellenlaenge wellenlange longitud onda awav λ
""")
#: Those of the above that are wavelengths beyond doubt, and names of steps of it.
_WAVE_STEMS = _set("wavelength wavelengths wave lambda lam wl")
_WAVE_STEPS = _set("dlambda dwave dlam dwavelength dwl deltalambda")
_LOG_WAVE = {
    **dict.fromkeys(_set("loglam loglambda logwave logwl logwavelength loglambdas logw"), "log10"),
    **dict.fromkeys(_set("lnlam lnlambda lnwave lnwavelength"), "ln"),
}
#: Names of flux columns; of two in one file the one that says so more clearly is taken.
_FLUX_RANKS = {
    10: "flux fluxes fluss flujo flusso flam flambda fλ fluxdensity fluxcal calflux fluxreduced fluxcalibrated",
    9: "fnu flx relflux relativeflux normflux fluxnorm normalizedflux normalisedflux fnorm nflux",
    8: "fl f spec spectrum intensity intens intensite intensitat intensidad intensita",
    7: "fv int counts count cts adu electrons photons dn signal sci science",
    6: "data normalized normalised abmag magab stmag",
    5: "norm mag magnitude",
    4: "value values net brightness",
    3: "object obj star y i primary",
    2: "s",
}
_FLUX = {word: rank for rank, words in _FLUX_RANKS.items() for word in words.split()}
_STD_WORDS = _set("""
    err er error errors errs sigma sig std stdev stddev unc uncert uncertainty uncertainties noise rms sd stat staterr
    staterror dflux df eflux ef fluxerr fluxerror fluxsig fluxsigma sigflux sigmaflux errflux errorflux fluxunc uncflux
    ferr fsig flamerr fluxe fluxuncertainty delta deltaflux dy yerr dev e fluxstd stdflux fluxrms abserr
""")
_VAR_WORDS = _set("var variance variances fluxvar varflux fluxvariance sigma2 err2")
_IVAR_WORDS = _set("ivar invvar inversevariance invvariance fluxivar ivarflux weight weights iv")
_SNR_WORDS = _set("snr sn s2n ston signaltonoise snratio snrpix")
_BAD_WORDS = _set("""
    mask andmask ormask dq flag flags bad badpix quality qual dataqual dataquality badpixel qualityflag pixmask maskand
    bpm quals dqf
""")
_GOOD_WORDS = _set("good valid goodpix goodpixel use ok")
_INDEX_WORDS = _set("pixel pix index idx no row number num id channel n bin px")
_OTHER_WORDS = _set("""
    sky bkg background model continuum cont wdisp fwhm res resolution telluric response sens sensitivity throughput
    gross exptime exposure raw contsub disp fit bestfit template residual airmass width binwidth step tot totexp
    syserror sys syserr
""")
#: With these, "sky" or "continuum" names what was done to the flux: "sky-subtracted flux".
_DONE_WORDS = _set("norm normalized normalised sub subtracted corrected corr removed cleaned free rectified divided")
#: Columns of catalogues and light curves that run one way as wavelengths do.
_NEVER_WAVE = _set("""
    time date jd mjd hjd bjd phase ra dec teff temp temperature logg mag vmag bmag gmag z redshift velocity vel rv mass
    age radius parallax plx distance dist altitude height order name
""")
#: Words that keep a name with "wave" in it from being the wavelength: "wave_err", "flux_per_wave".
_NOT_WAVE = (_STD_WORDS | set(_FLUX)) - _set("data int i s y object spec")


def _words(name: str) -> list[str]:
    name = re.sub(r"(?<=[a-z])(?=[A-Z])", "_", name[:80])
    if not name.isascii():  # accents off: Wellenlänge, intensité
        name = "".join(
            c for c in unicodedata.normalize("NFKD", name.replace("ß", "ss")) if not unicodedata.combining(c)
        )
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
    if set(words) & _WAVE_STEPS or (set(words) & _WAVE_STEMS and kinds & _STD_WORDS and not set(words) & set(_FLUX)):
        return "other", 0  # bin widths, uncertainties of the wavelength
    wave = glued in _WAVE or glued in _LOG_WAVE or bool(set(words) & (_WAVE - {"w", "l", "x"}))
    if wave and not set(words) & _NOT_WAVE:
        return "wave", 3 if len(glued) == 1 else 10 if glued in _WAVE or glued in _LOG_WAVE else 6
    if wave and words[0] in ("log", "ln") and len(words) == 2 and words[1] in _WAVE:
        return "wave", 8
    if kinds & _OTHER_WORDS and not kinds & _DONE_WORDS:
        return "other", 0
    if kinds & _STD_WORDS:
        return "std", 9 if "sys" not in kinds else 3
    if glued in _FLUX:
        return "flux", _FLUX[glued]
    bare_words = [w.rstrip("0123456789") for w in words]
    hits = [_FLUX[w] for w in bare_words if w in _FLUX and len(w) > 2]
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
    words = set(_words(split_unit(name)[0]))
    return bool(words & _OTHER_WORDS) and not words & _DONE_WORDS


def never_wavelength(name: str) -> bool:
    """Whether a name says time, place, temperature or the like, so that steady values are no wavelengths."""
    return bool(set(_words(split_unit(name)[0])) & _NEVER_WAVE)


def log_of(name: str) -> str:
    """Either "log10" or "ln" when a wavelength column's name says it holds logarithms, else ""."""
    words = _words(split_unit(name)[0])
    glued = "".join(words)
    if glued in _LOG_WAVE:
        return _LOG_WAVE[glued]
    if words and words[0] in ("log", "log10", "ln"):
        return "ln" if words[0] == "ln" else "log10"
    return ""


def split_unit(name: str) -> tuple[str, str]:
    """A column heading taken apart: ``Wavelength (nm)`` gives ``("Wavelength", "nm")``."""
    logged = re.fullmatch(
        r"\s*(log(?:10)?|lg|ln)\s*[(\[]\s*(\w+)\s*(?:[/(\[]\s*([\w^-]+)[)\]\s]*)?[)\]]?\s*", name[:80], re.I
    )
    if logged:
        return f"{'ln' if logged.group(1).lower() == 'ln' else 'log'} {logged.group(2)}", logged.group(3) or ""
    match = re.fullmatch(r"\s*([^\[\](){}]*?)[\s_]*[\[({](.*)[\])}]\s*", name[:200])
    if match and match.group(1):
        return match.group(1), match.group(2).strip()
    return name.strip(), ""
