"""Catalogue type strings of library stars to codes: what a label is worth as training, not a full MK parser."""

from __future__ import annotations

import math
import re
from dataclasses import dataclass

from starfathom.templates.subtypes import LETTERS

_CLASS_CODES = {"Ia+": 0.0, "Ia0": 0.0, "Ia-ab": 1.15, "Iab": 1.3, "Ia": 1.0, "Ib": 1.6, "III": 3.0, "II": 2.0,
                "IV": 4.0, "VI": 6.0, "V": 5.0}
_CLASS = "|".join(re.escape(word) for word in ("Ia+", "Ia0", "Ia-ab", "Iab", "Ia", "Ib", "III", "II", "IV", "VI", "V"))
_CLASS_RANGE = re.compile(rf"({_CLASS})[ab]*(?:[-/]({_CLASS}))?")

@dataclass(frozen=True)
class Label:
    """``t_code`` and ``lum_code`` (NaN where the label says nothing), what it is, and how far it is to be trusted."""

    t_code: float
    lum_code: float
    kind: str          # normal, peculiar, metal-weak, emission, composite, foreign, none
    doubtful: bool


def read_label(text: str) -> Label:
    """Parse a catalogue label such as ``G8IIIvar``, ``07Ia`` (a zero for an O), ``K4/K5III`` or ``sdF6``."""
    label = text.strip().replace(" ", "")
    if re.match(r"0\d", label):
        label = "O" + label[1:]
    kind = "normal"
    if re.match(r"(W[NC]|D[ABCOQZ]|C\d|R\.)", label):
        return Label(math.nan, math.nan, "foreign", False)
    if label.startswith("sd") or label.endswith(("HB", "HB)", "GB")):
        kind = "metal-weak"
    body = re.sub(r"^(sd:?)", "", label)
    match = re.match(r"([OBAFGKM])(:?)(\d+\.?\d*)?(?:[-/]([OBAFGKM])?(\d+\.?\d*))?", body)
    t_code, doubtful = math.nan, ":" in label or "?" in label
    if match and match.group(3) is not None:
        first = 10.0 * LETTERS.index(match.group(1)) + float(match.group(3))
        t_code = first
        if match.group(5) is not None:
            letter = match.group(4) or match.group(1)
            t_code = (first + 10.0 * LETTERS.index(letter) + float(match.group(5))) / 2
            doubtful = True
    rest = body[match.end():] if match else body
    lum_code = math.nan
    if words := _CLASS_RANGE.search(rest):
        codes = [_CLASS_CODES[word] for word in words.groups() if word]
        lum_code = sum(codes) / len(codes)
    if lum_code > 5.0:   # VI or V-VI: a subdwarf
        kind, lum_code = "metal-weak", (5.0 if lum_code < 6.0 else math.nan)
    tail = re.sub(r"var|V|I|ab?|b|s\b|n\b", "", rest)
    if kind == "normal":
        if "w" in tail:
            kind = "metal-weak"
        elif re.search(r"\+", rest) and not rest.endswith(("Ia+", "+...", "+?", "Ia+...")):
            kind = "composite"
        elif "e" in tail.replace("...", ""):
            kind = "emission"
        elif re.search(r"p|m|S|CN", tail) or label in ("Am", "Ap", "Fm", "Fp"):
            kind = "peculiar"
    if math.isnan(t_code) and kind == "normal":
        kind = "none"
    return Label(t_code, lum_code, kind, doubtful)
