"""MK notation: taking a spectral type in the trade's writing apart, and printing it.

The grammar follows common practice as laid down in Gray & Corbally 2009, *Stellar Spectral Classification*, with the
spellings that catalogues use. Nothing of the text is lost: what has no meaning here is kept and printed again.
"""

from __future__ import annotations

import re
from dataclasses import dataclass
from functools import cached_property

from starfathom.classify.errors import RequestError
from starfathom.templates.subtypes import LETTERS

NAN = float("nan")
#: Longest text taken for a spectral type.
MAX_LENGTH = 120

#: Code of each luminosity class word; classes without a letter among the supergiants count as Iab.
CLASS_CODES: dict[str, float] = {
    "Ia0": 0.0,
    "Ia": 1.0,
    "Iab": 1.3,
    "I": 1.3,
    "Ib": 1.6,
    "II": 2.0,
    "III": 3.0,
    "IV": 4.0,
    "V": 5.0,
    "VI": 6.0,
}
#: Code that a prefix stands for where no class is written: subdwarf, dwarf, subgiant, giant, supergiant (``c``).
PREFIX_CODES: dict[str, float] = {"esd": 6.0, "usd": 6.0, "sd": 6.0, "d": 5.0, "sg": 4.0, "g": 3.0, "c": 1.3}

_TYPE = r"[OBAFGKM](?:\d{1,2}(?:\.\d{1,2})?)"
_SUBTYPE = re.compile(r"(\d{1,2}(?:\.\d{0,2})?)|\((\d(?:\.\d)?)\)")
_AGAIN = re.compile(r"\s?([-/])\s?([OBAFGKM])(\d(?:\.\d{1,2})?)")
_CAPITALS = re.compile(r"(?<=I)(AB|A0|A|B)(?![A-Za-z\d.])")
_MARKS = re.compile(r"[:?]{1,3}")
_PREFIX = re.compile(r"(esd|usd|sd|sg|d|g|c|w|r)(?=[OBAFGKM](?:[^a-z]|e\b|$))")
_METALLIC = re.compile(rf"(?:[khm]{_TYPE}(?:[-/]{_TYPE})?:?){{2,3}}")
_METAL_SUFFIX = re.compile(rf"\s?m{_TYPE}(?:[-/](?:{_TYPE}|\d(?:\.\d)?))?:?")
_CLASS = re.compile(
    r"0-Ia|Ia-0|Ia\s?0|Ia\+(?!\s*[OBAFGKMWDCSLT](?:\d|$|\s|[A-Z-]))|Iab|Ia|Ib|III|II|IV|VII|VI|V|I|0(?![.\d])"
)
_CLASS_LETTERS = re.compile(r"(?:ab|a|b)[+-]?(?=[enpms(]|var)|(?:ab|a|b)[+-]?(?![a-z])")
_COMPANION = re.compile(
    r"[+&]\s*(?=(?:sd|esd|usd|sg|[dgckh])?[OBAFGKM](?:\d|\(|[IV/:?+-]|[NC]\d|[emp]?(?:$|[\s+)]))|W[NCOR]\d?|WD|D[ABCOQZX]|C[-\d]|S\d|[LTY]\d|sd[OB])"
)
_WHITE_DWARF = re.compile(r"(?:D[ABCOQZX][ABCOQZXPHVEe]{0,5}|WD)(?![a-df-z])\s?(\d{0,2}(?:\.\d{1,2})?)")
_WOLF_RAYET = re.compile(
    r"(WN/WC|WN/C|WNL|WNE|WCL|WCE|WN|WC|WO|WR)(?![a-gi-z])\s?(\d{1,2}(?:\.\d)?(?:[-/]\d{1,2}(?:\.\d)?)?)?"
)
_CARBON = re.compile(
    r"C-?(?:Hd|[NRJH])(?![a-z])\s?(\d(?:\.\d)?(?:[-/]\d(?:\.\d)?)?)?|C\s?(\d(?:\.\d)?)(?:[-,/](?:\d(?:\.\d)?))?(?:J|e|ch)?|[RN](\d)(?![\d.])|C$"
)
_S_STAR = re.compile(r"(?:SC|MS|S)\s?(\d(?:\.\d)?)(?:[+-])?(?:[-]\d(?:\.\d)?)?(?:[,/*]\d{1,2}(?:\.\d)?)?|SC|MS|S$")
_ULTRACOOL = re.compile(r"(?:esd|usd|sd|d)?([LTY])(\d(?:\.\d)?)(?:[-/][LTY]?\d(?:\.\d)?)?[:?]?")
_HOT_SUBDWARF = re.compile(r"(?:He-?)?sd(OBA?|OA|O|B)(\d(?:\.\d)?)?")

_ABUNDANCE = (
    r"(?:HgMn|SrCrEu|SiSrCr|CrEuSr|EuCrSr|SrEuCr|CN|CH|C2|Ca|Fe|Si|Sr|Cr|Eu|Mn|Hg|Ba|Ti|Mg|He|Li|Zr|La|Ce|Nd|Na|Ni|OB|SB[12]?"
    r"|[CNOPYH](?=[-+]?\d|wk|str|-rich|weak|$|\s))(?:[-+]?\d(?:\.\d{1,2})?|[-+](?!\S))?"
    r"(?:-?(?:strong|weak|str|wk|st|rich|r|s|w|p|n))?"
)
_TOKEN = re.compile(
    r"\(\([^()]{1,20}\)\)|\([^()]{1,30}\)|\[[^\[\]]{1,12}\]"
    rf"|{_ABUNDANCE}"
    rf"|[khm]{_TYPE}(?:-{_TYPE})?"
    r"|shell|mild|metal|met|neb|comp|var|pec|(?:lam(?:bda)?|λ)\s?Boo|e(?=var)|sg|delDel|deltaDel|alpha|beta|gamma|delta|strong|weak|lines?|early|late|abs|"
    r"wk|wl|sh|em|ev|eq|ep|pe|ha|nn|ss|f\*|f\+|fc|f|e|n|s|m|p|q|v|w|x|z|h|k|d|l|!|\*|α|β|γ|δ|:|\?"
)
_DASHES = str.maketrans(
    {"–": "-", "—": "-", "−": "-", "‐": "-", "‑": "-", "_": " ", "\u00a0": " ", "\u2009": " ", "’": "'", "Ⅴ": "V"}
)


@dataclass(frozen=True)
class MKType:
    """One spectral type.

    Attributes
    ----------
    text : the temperature part as printed, such as ``K0-K1``, ``kA5hF0mF2``, ``sdB``, ``DA3``
    letter, subtype : ``K`` and 0.0; letter-only types have subtype NaN. Of a range, its first end
    letter_hi, subtype_hi : the second end of a range, equal to the first end otherwise
    lum_text : the luminosity class as printed, with marks of doubt, such as ``(III):``
    tail : the rest as written, with the blank before it if any: peculiarities and what has no meaning here
    prefix : ``sd``, ``d``, ``g`` ... or ""
    kind : ``star``, ``white dwarf``, ``hot subdwarf``, ``carbon star``, ``S star``, ``Wolf-Rayet``, ``ultracool dwarf``
    composite : the companions of a composite type, primary not included
    """

    text: str
    letter: str
    subtype: float
    letter_hi: str
    subtype_hi: float
    lum_text: str = ""
    tail: str = ""
    prefix: str = ""
    kind: str = "star"
    composite: tuple[MKType, ...] = ()

    @classmethod
    def parse(cls, text: str) -> MKType:
        """Read a spectral type.

        Raises
        ------
        RequestError
            when the text is not MK notation (or a related one: white dwarfs, Wolf-Rayet, carbon, S, L and T types).
        """
        if not isinstance(text, str):
            raise RequestError(f"a spectral type is text such as 'G2 V', not {type(text).__name__}.")
        if len(text) > MAX_LENGTH:
            raise RequestError(f"'{text[:20]}...' is too long for a spectral type; write it like 'G2 V'.")
        clean = " ".join(text.translate(_DASHES).split()).strip("'\"").strip()
        if not clean:
            raise RequestError("the spectral type is empty; write it like 'G2 V'.")
        if not clean.isprintable() or any(c in clean for c in '<>{}|\\"`'):
            raise _not_mk(text)
        starts = [m.start() for m in _COMPANION.finditer(clean)]
        pieces = [clean[a:b] for a, b in zip([0, *(s + 1 for s in starts)], [*starts, len(clean)])]
        first, *others = (_component(p.strip(), text) for p in pieces)
        if not others:
            return first
        return cls(
            first.text,
            first.letter,
            first.subtype,
            first.letter_hi,
            first.subtype_hi,
            first.lum_text,
            first.tail,
            first.prefix,
            first.kind,
            tuple(others),
        )

    def __str__(self) -> str:
        own = self.text + (" " if self.lum_text else "") + self.lum_text + self.tail
        return " + ".join([own, *map(str, self.composite)])

    @property
    def lum_class(self) -> str:
        """Luminosity class without marks of doubt, such as ``III-IV``; "" when none is written."""
        return re.sub(r"[():?]", "", self.lum_text)

    @property
    def uncertain(self) -> bool:
        """Whether a colon, question mark or bracket marks the type or class as doubtful."""
        return any(c in self.text + self.lum_text for c in ":?(")

    @property
    def t_code(self) -> float:
        """Subtype in tenths (O0 = 0, B0 = 10 ...): the first end of a range; NaN outside O to M."""
        return _t_code(self.letter, self.subtype, 0.0) if self.kind == "star" else NAN

    @property
    def t_code_hi(self) -> float:
        """The second end of a range; equal to ``t_code`` when there is none. A bare letter ranges over its subtypes."""
        return _t_code(self.letter_hi, self.subtype_hi, 9.0) if self.kind == "star" else NAN

    @cached_property
    def _lum_ends(self) -> tuple[float, float, str]:
        if self.kind != "star":
            return NAN, NAN, ""
        text = self.lum_class
        if not text:
            code = PREFIX_CODES.get(self.prefix, NAN)
            return code, code, ""
        found = _read_class(text, 0)
        return (found.code, found.code_hi, found.joint) if found is not None else (NAN, NAN, "")

    @property
    def lum_code(self) -> float:
        """Luminosity class as a number: 0 = Ia0, 1 = Ia, 1.3 = Iab, 1.6 = Ib, 2 = II ... 6 = VI; NaN when not known.

        A class written with a hyphen lies between (``III-IV`` is 3.5); of two with a slash it is the first.
        """
        low, high, joint = self._lum_ends
        return (low + high) / 2 if joint == "-" else low

    @property
    def lum_code_hi(self) -> float:
        """Of two classes with a slash the second; otherwise equal to ``lum_code``."""
        return self._lum_ends[1] if self._lum_ends[2] == "/" else self.lum_code

    @cached_property
    def _tokens(self) -> tuple[tuple[str, ...], str]:
        known: list[str] = []
        unknown: list[str] = []
        for word in re.findall(
            r"(?:lam(?:bda)?|λ)\s?Boo|\([^()]*\)|[^\s(]+|\(", self.tail.replace("((", "\x01").replace("))", "\x02")
        ):
            word = word.replace("\x01", "((").replace("\x02", "))")
            found, at = [], 0
            while at < len(word):
                match = _TOKEN.match(word, at)
                if match is None:
                    break
                found.append(match.group())
                at = match.end()
            run = word.isalpha() and word.islower() and len(word) > 3 and len(found) > 2
            if run or (at < len(word) and word[at].isalpha()):
                found, at = [], 0  # a word of its own, not a string of marks
            known += found
            if at < len(word):
                unknown.append(word[at:])
        return tuple(known), " ".join(unknown)

    @property
    def peculiarities(self) -> tuple[str, ...]:
        """Marks behind the class that are in use, such as ``e``, ``((f))``, ``p``, ``Ba0.5``, in order."""
        return self._tokens[0]

    @property
    def rest(self) -> str:
        """Text that carries no meaning known here."""
        return self._tokens[1]


def _not_mk(text: str) -> RequestError:
    shown = "".join(c if c.isprintable() else "?" for c in text[:40])
    return RequestError(f"'{shown}' is not MK notation; write a type like 'G2 V', 'B0.5 Ia' or 'K0 III'.")


def _t_code(letter: str, subtype: float, missing: float) -> float:
    if len(letter) != 1 or letter not in LETTERS:
        return NAN
    return 10.0 * LETTERS.index(letter) + (subtype if subtype == subtype else missing)


def _tail(piece: str, at: int) -> str:
    """What follows the class, with one blank before it where there was one or where it would run into the class."""
    tail = piece[at:].strip()
    if not tail:
        return ""
    first = tail[0]
    apart = (
        piece[at : at + 1] == " " or first.isupper() or first.isdigit() or not (first.isalpha() or first in "([!*:?")
    )
    return " " + tail if apart else tail


@dataclass(frozen=True)
class _Class:
    text: str
    code: float
    code_hi: float
    joint: str
    end: int


def _one_class(text: str, at: int) -> tuple[str, float, int] | None:
    match = _CLASS.match(text, at)
    if match is None:
        return None
    word, end = match.group().replace(" ", ""), match.end()
    if word in ("0-Ia", "Ia-0", "Ia0", "Ia+", "0"):
        return "Ia0", 0.0, end
    if word not in CLASS_CODES:
        return None  # VII is not in use any more
    code = CLASS_CODES[word]
    if word in ("II", "III", "IV", "V"):
        letters = _CLASS_LETTERS.match(text, end)
        if letters is not None:
            word, end = word + letters.group(), letters.end()
    if end < len(text) and text[end] in "IVX":
        return None
    return word, code, end


def _read_class(text: str, at: int) -> _Class | None:
    """A luminosity class, single or joined, at position ``at``; None when there is none."""
    first = _one_class(text, at)
    if first is None:
        return None
    word, code, end = first
    match = re.compile(r"\s?([-/])\s?").match(text, end)
    if match is not None:
        second = _one_class(text, match.end())
        if second is None and word.startswith("I") and code < 2:  # Ia/ab, Iab-b
            letters = re.compile(r"(?:ab|b)(?![a-z])").match(text, match.end())
            if letters is not None:
                second = "I" + letters.group(), CLASS_CODES["I" + letters.group()], letters.end()
        if second is not None and second[0] != "Ia0":
            return _Class(f"{word}{match.group(1)}{second[0]}", code, second[1], match.group(1), second[2])
    return _Class(word, code, code, "", end)


def _component(piece: str, whole: str) -> MKType:
    """One component of a type."""
    if not piece:
        raise _not_mk(whole)
    for read in (_other_kinds, _metallic, _ordinary):
        found = read(piece, whole)
        if found is not None:
            return found
    lowered = re.match(r"([obafgkm])(\s?\d(?:\.\d+)?)(\s?)(i{1,3}v?|iv|vi?)?(a0|ab|a|b)?(.*)", piece)
    if lowered is not None:
        letter, number, gap, roman, sub, tail = lowered.groups()
        again = letter.upper() + number + gap + (roman or "").upper() + (sub or "") + tail
        found = _ordinary(again, whole)
        if found is not None:
            return found
    raise _not_mk(whole)


def _other_kinds(piece: str, whole: str) -> MKType | None:
    """White dwarfs, hot subdwarfs, Wolf-Rayet, carbon, S, L and T types."""
    for kind, pattern, letter in (
        ("white dwarf", _WHITE_DWARF, "D"),
        ("hot subdwarf", _HOT_SUBDWARF, ""),
        ("Wolf-Rayet", _WOLF_RAYET, "W"),
        ("carbon star", _CARBON, "C"),
        ("S star", _S_STAR, "S"),
        ("ultracool dwarf", _ULTRACOOL, ""),
    ):
        match = pattern.match(piece)
        if match is None:
            continue
        tail = _tail(piece, match.end())
        groups = [g for g in match.groups() if g]
        number = re.match(r"\d*\.?\d+", groups[-1]) if groups else None
        if kind in ("hot subdwarf", "ultracool dwarf"):
            letter = groups[0][:1]
        value = float(number.group()) if number else NAN
        found = MKType(match.group().strip().replace(" ", ""), letter, value, letter, value, tail=tail, kind=kind)
        glued = match.end() < len(piece) and piece[match.end()].isalpha()
        if found.rest and (glued or (not number and not found.peculiarities)):
            return None  # a word that happens to start like a type
        return found
    return None


def _metallic(piece: str, whole: str) -> MKType | None:
    """Am types given by K line, hydrogen and metals: ``kA5hF0mF2``; the hydrogen type counts."""
    match = _METALLIC.match(piece)
    if match is None:
        return None
    parts = {m.group(1): m.group(2) for m in re.finditer(rf"([khm])({_TYPE})", match.group())}
    chosen = parts.get("h") or parts.get("k") or next(iter(parts.values()))
    subtype = _checked(chosen[0], chosen[1:], whole)
    lum, at = _class_at(piece, match.end(), whole)
    return MKType(match.group(), chosen[0], subtype, chosen[0], subtype, lum, _tail(piece, at))


def _checked(letter: str, digits: str, whole: str) -> float:
    value = float(digits)
    if value >= 10 and not (letter == "M" and value == 10):
        raise _not_mk(whole)
    return value


def _class_at(piece: str, at: int, whole: str) -> tuple[str, int]:
    """Luminosity class text (canonical, with marks of doubt) at ``at`` and where it ends; ("", at) when none."""
    start = at
    while start < len(piece) and piece[start] == " ":
        start += 1
    bracket = start < len(piece) and piece[start] == "("
    found = _read_class(piece, start + bracket)
    if found is None:
        if re.compile(r"\(?[IVX]{1,}(?![a-z])").match(piece, start):
            raise _not_mk(whole)
        return "", at
    text, end = found.text, found.end
    if bracket:
        if piece[end : end + 1] != ")":
            return "", at
        text, end = f"({text})", end + 1
    marks = _MARKS.match(piece, end)
    if marks is not None:
        text, end = text + marks.group(), marks.end()
    return text, end


def _ordinary(piece: str, whole: str) -> MKType | None:
    """O to M types."""
    piece = _CAPITALS.sub(lambda m: m.group().lower(), piece)  # catalogues in capitals: A2IAB
    match = _PREFIX.match(piece)
    prefix = match.group(1) if match else ""
    at = len(prefix)
    if piece[at : at + 1] not in tuple(LETTERS):
        return None
    letter = piece[at]
    if prefix == "sd" and letter in "OB":
        return None  # hot subdwarfs are no Population I types
    if piece[at : at + 2] == "OB" and not piece[at + 2 : at + 3].isdigit():
        sign = piece[at + 2 : at + 3] if piece[at + 2 : at + 3] in ("+", "-") else ""
        lum, end = _class_at(piece, at + 2 + len(sign), whole)
        found = MKType(prefix + "OB" + sign, "O", NAN, "B", NAN, lum, _tail(piece, end), prefix)
        return None if found.rest else found
    text, at = prefix + letter, at + 1
    if letter in "OB" and piece[at : at + 1] in ("N", "C") and piece[at + 1 : at + 2].isdigit():
        text, at = text + piece[at], at + 1  # nitrogen and carbon sequences: ON9.7, BC1.5
    digits = _SUBTYPE.match(piece, at + (piece[at : at + 1] == " " and piece[at + 1 : at + 2].isdigit()))
    subtype = NAN
    letter_hi, subtype_hi = letter, NAN
    if digits is not None:
        number = (digits.group(1) or digits.group(2)).rstrip(".")
        subtype = subtype_hi = _checked(letter, number, whole)
        text += f"({number})" if digits.group(2) else number
        at = digits.end()
        text, at = _marks(piece, at, text)
        second = re.compile(r"\s?([-/])\s?(?:([OBAFGKM]?)(\d(?:\.\d{1,2})?)(?![.\d])|([OBAFGKM])(?![a-z\d]))").match(
            piece, at
        )
        if second is not None:
            letter_hi = second.group(2) or second.group(4) or letter
            subtype_hi = _checked(letter_hi, second.group(3), whole) if second.group(3) else NAN
            text += second.group(1) + letter_hi + (second.group(3) or "")
            at = second.end()
            text, at = _marks(piece, at, text)
        step = re.compile(r"[+-](?=\s|$|\(?[IV]|[:?])").match(piece, at)
        if step is not None:
            text, at = text + step.group(), step.end()
            text, at = _marks(piece, at, text)
        metals = _METAL_SUFFIX.match(piece, at)
        if metals is not None:
            text, at = text + metals.group().strip(), metals.end()
    else:
        bare = re.compile(r"[-/]([OBAFGKM])(?![a-z\d])").match(piece, at)
        if bare is not None:
            letter_hi = bare.group(1)
            text, at = text + bare.group(), bare.end()
        text, at = _marks(piece, at, text)
    lum, at = _class_at(piece, at, whole)
    if lum and digits is not None and text == f"{prefix}{letter}{digits.group(1)}":
        again = _AGAIN.match(piece, at)  # B1V-B2V
        if again is not None:
            lum_hi, end = _class_at(piece, again.end(), whole)
            if lum_hi == lum:
                letter_hi, subtype_hi = again.group(2), _checked(again.group(2), again.group(3), whole)
                text, at = text + again.group(1) + letter_hi + again.group(3), end
    found = MKType(text, letter, subtype, letter_hi, subtype_hi, lum, _tail(piece, at), prefix)
    if found.rest and (digits is None or not (lum or found.peculiarities or found.rest.startswith(("+", ".")))):
        return None
    return found


def _marks(piece: str, at: int, text: str) -> tuple[str, int]:
    marks = _MARKS.match(piece, at)
    return (text + marks.group(), marks.end()) if marks is not None else (text, at)
