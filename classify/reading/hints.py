"""What headers say besides the spectrum: air or vacuum, object, place, exposure, resolution, velocity."""

from __future__ import annotations

import re
from collections.abc import Iterable
from typing import Any

from starfathom.classify.reading.fitsio import Header
from starfathom.classify.spectrum import Medium

#: Speed of light in km/s (exact).
C_KMS = 299792.458
#: Wavelength at which a resolving power is turned into a line width, angstrom.
REFERENCE_ANGSTROM = 5000.0
_OBJECT = ("OBJECT", "OBJNAME", "TARGNAME", "TARGET", "OBJ", "NAME", "STAR", "DESIG", "TITLE", "SPEC_NAME")
_EXPTIME = (
    "EXPTIME",
    "EXPOSURE",
    "TEXPTIME",
    "ITIME",
    "EXP_TIME",
    "INTTIME",
    "TEXPOSED",
    "EXPOTIME",
    "TOTALEXP",
    "DARKTIME",
)
_RA = (
    "RA_DEG",
    "RADEG",
    "RA_TARG",
    "RAJ2000",
    "RA",
    "RA_OBJ",
    "OBJCTRA",
    "TELRA",
    "PLUG_RA",
    "RAOBJ",
    "OBJRA",
    "CAT-RA",
    "ALPHA",
)
_DEC = (
    "DEC_DEG",
    "DECDEG",
    "DEC_TARG",
    "DEJ2000",
    "DEC",
    "DEC_OBJ",
    "OBJCTDEC",
    "TELDEC",
    "PLUG_DEC",
    "DECOBJ",
    "OBJDEC",
    "CAT-DEC",
    "DELTA",
)
_SNR = (
    "SNR",
    "S/N",
    "SN",
    "S_N",
    "SNR_MED",
    "SN_MEDIAN_ALL",
    "SN_MED",
    "SNRMED",
    "MEDSNR",
    "SNRG",
    "SN_G",
    "SNR_G",
    "SPECSNR",
)
_RESOLVING = (
    "SPEC_RES",
    "RESOLVIN",
    "SPECRP",
    "RESPOW",
    "RESOLPOW",
    "R_POWER",
    "RESOL",
    "SPECRES",
    "RESOLUTI",
    "RESOLVE",
    "R",
)
_VELOCITY = ("RADVEL", "VRAD", "RAD_VEL", "RV", "VEL_RAD", "RADIALV", "VELOCITY", "RVEL", "VHELIO", "HRV", "VOBS")


def medium_of(headers: Iterable[Header]) -> tuple[Medium, str]:
    """Air or vacuum as the headers say it, and where they say it; ("unknown", "not stated") when they do not."""
    headers = list(headers)
    for header in headers:
        for i in (1, 2, 3):
            word = header.word(f"CTYPE{i}").upper()
            if word.startswith("AWAV"):
                return "air", f"header CTYPE{i} = {word}"
    for header in headers:
        for key in header.keys():
            plain = key.upper()
            if plain in (
                "AIRORVAC",
                "AIR_VAC",
                "AIRVAC",
                "VACORAIR",
                "WAVEMED",
                "MEDIUM",
                "WAVEREF",
                "WAVETYPE",
                "WAVE_MED",
                "WAVEMEDI",
                "LAMBDTYP",
                "SPECSYSW",
                "WAVSYS",
                "WAVELENG",
                "WLTYPE",
                "WAVE_TYP",
                "WAVFRAME",
                "WAVESYS",
                "VACAIR",
                "WLMEDIUM",
            ):
                found = _word_medium(header.word(key))
                if found != "unknown":
                    return found, f"header {key} = {header.word(key)}"
            if plain in ("VACUUM", "ISVACUUM", "VAC", "INVACUUM", "VACWAVE", "VAC_WAVE", "VACWL", "VACLAMB"):
                value = _truth(header.get(key))
                if value is not None:
                    return ("vacuum" if value else "air"), f"header {key} = {'T' if value else 'F'}"
            if plain in ("AIR", "INAIR", "AIRWAVE", "AIR_WAVE", "ISAIR", "AIRWL"):
                value = _truth(header.get(key))
                if value is not None:
                    return ("air" if value else "vacuum"), f"header {key} = {'T' if value else 'F'}"
    for header in headers:
        for i in (1, 2, 3):
            word = header.word(f"CTYPE{i}").upper()
            if word.startswith(("WAVE-", "FREQ", "WAVN", "ENER")) or word == "WAVE":
                return "vacuum", f"header CTYPE{i} = {word}"
    for header in headers:
        for key in (
            "CTYPE1",
            "CUNIT1",
            "WAT1_001",
            "CRVAL1",
            "CDELT1",
            "CD1_1",
            "COEFF0",
            "CRPIX1",
            "CTYPE2",
            "CUNIT2",
        ):
            if key in header:
                found = text_medium(header.comment(key) + " " + (header.word(key) if not key.startswith("CR") else ""))
                if found != "unknown":
                    return found, f"header {key}"
        found = text_medium(header.remarks())
        if found != "unknown":
            return found, "header comment"
    for header in headers:
        maker = survey_of(header)
        if maker:
            return "vacuum", f"{maker} spectra are in vacuum"
    return "unknown", "not stated"


def survey_of(header: Header) -> str:
    """Either "SDSS" or "LAMOST" when the header is one of theirs, else ""."""
    telescope = header.word("TELESCOP").upper()
    if "LAMOST" in telescope or "LAMOST" in header.word("DATA_V").upper() or "LAMOST" in header.word("ORIGIN").upper():
        return "LAMOST"
    if (
        "SDSS" in telescope
        or "SDSS" in header.word("ORIGIN").upper()
        or ("PLATEID" in header and "FIBERID" in header)
        or (
            "COEFF0" in header
            and "COEFF1" in header
            and ("SPEC1_G" in header or "RUN2D" in header or "PLATEID" in header)
        )
    ):
        return "SDSS"
    return ""


def _truth(value: Any) -> bool | None:
    if isinstance(value, bool):
        return value
    if isinstance(value, (int, float)) and value in (0, 1):
        return bool(value)
    word = str(value).strip().lower()
    return {
        "t": True,
        "true": True,
        "yes": True,
        "y": True,
        "1": True,
        "f": False,
        "false": False,
        "no": False,
        "n": False,
        "0": False,
        "vacuum": True,
        "vac": True,
    }.get(word)


def _word_medium(word: str) -> Medium:
    word = word.strip().lower()
    if word.startswith("vac"):
        return "vacuum"
    if word.startswith("air") and not word.startswith("airm"):
        return "air"
    return text_medium(word)


_VACUUM = re.compile(r"\bvac(uum)?\b|_vac(uum)?\b|\bvac_|in vacuo", re.I)
_AIR = re.compile(r"(\b|_)air(\b(?!\s*mass)|_)", re.I)
_CONTEXT = re.compile(r"wave|lambda|angstrom|\bwl\b|dispersion|spectral|\bnm\b|micron|awav|λ", re.I)
_DEWAR = re.compile(r"dewar|pressure|pump|temperature|torr|mbar|gauge|cryo|valve", re.I)


def text_medium(text: str) -> Medium:
    """Air or vacuum as free text says it of wavelengths; both or neither named counts as unknown."""
    lower = text.lower()
    if "vac" not in lower and "air" not in lower:
        return "unknown"
    found: set[Medium] = set()
    for line in text.splitlines():
        if _DEWAR.search(line) or not (_CONTEXT.search(line) or len(line.split()) <= 3):
            continue
        vac, air = bool(_VACUUM.search(line)), bool(_AIR.search(line))
        if vac and air:
            turned = re.search(
                r"\b(?:air|vac(?:uum)?)\b[\w ]{0,40}\b(?:to|into|2)\s+(?:the\s+)?(air|vac(?:uum)?)\b",
                line,
                re.I,
            )
            negated = re.search(r"\b(not|no|non)[ -]+(in )?(vac(?:uum)?|air)\b", line, re.I)
            if turned:
                found.add("vacuum" if turned.group(1).lower().startswith("vac") else "air")
            elif negated:
                found.add("air" if negated.group(3).lower().startswith("vac") else "vacuum")
        elif vac:
            found.add("air" if re.search(r"\b(not|non)[ -]+(in )?vac", line, re.I) else "vacuum")
        elif air:
            found.add("vacuum" if re.search(r"\bnot (in )?air", line, re.I) else "air")
    return found.pop() if len(found) == 1 else "unknown"


def meta_of(headers: Iterable[Header]) -> dict[str, Any]:
    """Header hints: ``object``, ``exptime_s``, ``ra_deg``, ``dec_deg``, ``snr``, ``resolution``, ``fwhm_angstrom``,
    ``velocity_kms``, ``flux_calibrated``, each only when stated sensibly."""
    meta: dict[str, Any] = {}
    for header in headers:
        _put(meta, "object", _first_word(header, _OBJECT))
        _put(meta, "exptime_s", _first_number(header, _EXPTIME, 0, 1e7))
        ra, dec = _coordinates(header)
        if ra is not None and dec is not None:
            _put(meta, "ra_deg", ra)
            _put(meta, "dec_deg", dec)
        _put(meta, "snr", _first_number(header, _SNR, 0, 1e5))
        _put(meta, "resolution", _first_number(header, _RESOLVING, 50, 5e5))
        _put(meta, "fwhm_angstrom", _fwhm(header))
        power = _first_number(header, ("SPEC_RES", "SPECRP", "RESPOW", "R_POWER"), 100, 5e5)
        _put(meta, "fwhm_angstrom", None if power is None else REFERENCE_ANGSTROM / power)
        _put(meta, "velocity_kms", _velocity(header))
        _put(meta, "flux_calibrated", _calibrated(header))
    return meta


def _put(meta: dict[str, Any], key: str, value: Any) -> None:
    if value is not None and key not in meta:
        meta[key] = value


def _first_word(header: Header, keys: tuple[str, ...]) -> str | None:
    for key in keys:
        word = header.word(key)
        if word and word.lower() not in ("unknown", "none", "n/a", "object", "''"):
            return word
    return None


def _first_number(header: Header, keys: tuple[str, ...], lo: float, hi: float) -> float | None:
    for key in keys:
        if key in header:
            value = header.number(key)
            if lo < value < hi:
                return value
    return None


def _coordinates(header: Header) -> tuple[float | None, float | None]:
    for ra_key, dec_key in zip(_RA, _DEC):
        if ra_key in header and dec_key in header:
            ra = angle(header.word(ra_key), hours=True)
            dec = angle(header.word(dec_key), hours=False)
            if ra is not None and dec is not None and 0 <= ra <= 360 and -90 <= dec <= 90:
                return ra, dec
    return None, None


def angle(text: str, hours: bool) -> float | None:
    """Degrees from ``12:34:56.7``, ``12 34 56.7``, ``12h34m56.7s`` or plain degrees; hours when ``hours``."""
    text = text.strip()[:40]
    try:
        return float(text)
    except ValueError:
        pass
    match = re.fullmatch(r"([-+]?)\s*(\d{1,3})[:hd° ]\s*(\d{1,2})(?:[:m'′ ]\s*(\d{1,2}(?:\.\d*)?))?\s*[s\"″]?", text)
    if match is None:
        return None
    value = int(match.group(2)) + int(match.group(3)) / 60 + float(match.group(4) or 0) / 3600
    value *= 15.0 if hours and "d" not in text and "°" not in text else 1.0
    return -value if match.group(1) == "-" else value


def _fwhm(header: Header) -> float | None:
    for key in (
        "SPEC_FWHM",
        "FWHM_A",
        "FWHMANG",
        "FWHM_ANG",
        "LSF_FWHM",
        "LSFFWHM",
        "SPECFWHM",
        "FWHM",
        "RESOLUTN",
        "INSTFWHM",
        "RES_A",
        "RESOLUTI",
        "RESOL",
        "SPECRES",
    ):
        if key in header:
            value = header.number(key)
            said = header.comment(key).lower()
            sure = key not in ("FWHM", "RESOLUTN", "RESOLUTI", "RESOL", "SPECRES")
            if re.search(r"arcsec|seeing|pixel|\bpix", said):
                continue
            if (sure or re.search(r"angstrom|\[a\]|\(a\)|\ba\b", said)) and 0.01 < value < 50:
                return value
            if re.search(r"\bnm\b", said) and 0.001 < value < 5:
                return 10 * value
    return None


def _velocity(header: Header) -> float | None:
    for key in _VELOCITY:
        if key in header:
            value = header.number(key)
            if re.search(r"\bm/s|m s-1|\[m/s\]", header.comment(key)) and "km" not in header.comment(key):
                value /= 1000.0
            if abs(value) < 2000 and value != 0:
                return value
    if survey_of(header) and "Z" in header:
        value = header.number("Z")
        if abs(value) < 0.005 and value != 0:
            return C_KMS * value
    return None


def _calibrated(header: Header) -> bool | None:
    word = header.word("FLUXCAL").upper()
    if word.startswith("ABS") or word == "RELATIVE":
        return True
    if word.startswith("UNCAL"):
        return False
    flag = header.whole("CA-FLAG", -99) if "CA-FLAG" in header else -99
    if flag in (0, 1):
        return flag == 1
    return None
