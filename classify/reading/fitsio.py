"""A thin FITS reader: headers by card, data by the few bytes wanted, sizes checked before anything is allocated.

Follows the FITS standard 4.0 (Pence et al. 2010 A&A 524, A42). It reads what one-dimensional spectra come in and says
so when it meets anything else, so that a slower general reader can be asked.
"""

from __future__ import annotations

import re
from collections.abc import Iterator
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

BLOCK, CARD = 2880, 80
MAX_HEADER_BLOCKS = 4000
MAX_HDUS = 400
#: Most values read from one column or image, so that a few float64 copies stay well below 1 GB.
MAX_CELLS = 5_000_000
_END = re.compile(rb"END {77}")
_NUMBER = re.compile(r"[-+]?(\d+\.?\d*|\.\d+)([EeDd][-+]?\d+)?")
_IMAGE_TYPES = {8: "u1", 16: ">i2", 32: ">i4", 64: ">i8", -32: ">f4", -64: ">f8"}
_TABLE_TYPES = {
    "L": "S1",
    "B": "u1",
    "I": ">i2",
    "J": ">i4",
    "K": ">i8",
    "E": ">f4",
    "D": ">f8",
    "A": "S",
    "C": ">c8",
    "M": ">c16",
}


class FitsError(ValueError):
    """The file breaks the FITS rules or goes beyond this reader; the text is the reason without the path."""


class FitsBeyond(FitsError):
    """Proper FITS of a kind this reader leaves to a general one (compressed images, random groups)."""


class Header:
    """Cards of one header. Values are parsed when asked for; of a doubled keyword the first counts."""

    def __init__(self, block: bytes) -> None:
        self.text = block.decode("latin-1")
        self._cards: dict[str, int] = {}
        text = self.text
        for at in range(0, len(text), CARD):
            key = text[at : at + 8].rstrip()
            if key == "HIERARCH":
                key = text[at + 8 : text.find("=", at, at + CARD)].strip().upper()
            if key not in self._cards:
                self._cards[key] = at

    def __contains__(self, key: str) -> bool:
        return key in self._cards

    def keys(self) -> list[str]:
        return list(self._cards)

    def __len__(self) -> int:
        return len(self._cards)

    def get(self, key: str, default: Any = None) -> Any:
        """Value of a keyword: str, bool, int, float, or ``default`` when absent or blank."""
        at = self._cards.get(key)
        if at is None:
            return default
        value = parse_value(self.text[at : at + CARD])
        return default if value is None else value

    def number(self, key: str, default: float = float("nan")) -> float:
        """Value as a float, also when it was written as a string; ``default`` when it is no number."""
        value = self.get(key)
        if isinstance(value, bool) or value is None:
            return default
        try:
            return float(str(value).replace("D", "E").replace("d", "e"))
        except ValueError:
            return default

    def whole(self, key: str, default: int = 0) -> int:
        value = self.number(key, float(default))
        return int(value) if abs(value) < 1e18 else 10**18

    def word(self, key: str, default: str = "") -> str:
        """Value as text without surrounding blanks."""
        value = self.get(key)
        return default if value is None else str(value).strip()

    def raw_string(self, key: str) -> str:
        """A string value with its trailing blanks kept, as long records split over cards need."""
        at = self._cards[key]
        card = self.text[at : at + CARD]
        start = card.find("'")
        end = card.rfind("'")
        return card[start + 1 : end].replace("''", "'") if 0 <= start < end else ""

    def comment(self, key: str) -> str:
        """The comment after the slash of a keyword, or ""."""
        at = self._cards.get(key)
        if at is None:
            return ""
        card = self.text[at : at + CARD]
        card = re.sub(r"'(?:[^']|'')*'", "", card)
        return card.partition("/")[2].strip()

    def remarks(self) -> str:
        """All COMMENT and HISTORY text, one line a card."""
        lines = [
            self.text[at + 8 : at + CARD].strip()
            for at in range(0, len(self.text), CARD)
            if self.text[at : at + 8] in ("COMMENT ", "HISTORY ", "        ")
        ]
        return "\n".join(lines)


def parse_value(card: str) -> Any:
    """Value of one 80-character card, None when it has none."""
    if card.startswith("HIERARCH"):
        body = card.partition("=")[2]
    elif card[8:10] in ("= ", "=\t") or card[8:9] == "=":
        body = card[9:]
    else:
        return None
    body = body.strip()
    if body.startswith("'"):
        end = 1
        while True:
            end = body.find("'", end)
            if end < 0:
                return body[1:].rstrip()
            if body[end + 1 : end + 2] != "'":
                return body[1:end].replace("''", "'").rstrip()
            end += 2
    word = body.partition("/")[0].strip()
    if not word:
        return None
    if word in ("T", "F"):
        return word == "T"
    if _NUMBER.fullmatch(word):
        try:
            return int(word)
        except ValueError:
            return float(word.replace("D", "E").replace("d", "e"))
    return word


@dataclass
class Hdu:
    """One header-data unit: ``number``, header, and where its data lie in ``buffer`` (offset, bytes)."""

    number: int
    header: Header
    buffer: bytes
    offset: int
    size: int

    @property
    def name(self) -> str:
        return self.header.word("EXTNAME").upper()

    @property
    def kind(self) -> str:
        """One of "image", "table" and "ascii table", or the extension's own word."""
        if self.number == 0:
            return "image"
        word = self.header.word("XTENSION").upper()
        return {
            "IMAGE": "image",
            "IUEIMAGE": "image",
            "BINTABLE": "table",
            "A3DTABLE": "table",
            "TABLE": "ascii table",
        }.get(word, word.lower())

    @property
    def shape(self) -> tuple[int, ...]:
        """Axis lengths in FITS order (NAXIS1 first), () when there are no data."""
        n = self.header.whole("NAXIS")
        return tuple(max(self.header.whole(f"NAXIS{i + 1}"), 0) for i in range(min(n, 999)))

    @property
    def complete(self) -> bool:
        return self.offset + self.size <= len(self.buffer)

    def __str__(self) -> str:
        return f"HDU {self.number}" + (f" ({self.name})" if self.name else "")

    def need(self, size: int | None = None) -> None:
        """Raise FitsError unless the data are all there."""
        size = self.size if size is None else size
        if self.offset + size > len(self.buffer):
            have = max(len(self.buffer) - self.offset, 0)
            raise FitsError(f"{self} announces {size} bytes of data but the file ends after {have} of them")


def hdus(data: bytes) -> Iterator[Hdu]:
    """The header-data units of a FITS file, headers only; stops where the file does."""
    at = 0
    for number in range(MAX_HDUS):
        if at >= len(data) or not data[at : at + BLOCK].strip(b"\x00 \r\n"):
            return
        start = data[at : at + 9]
        if number == 0 and not start.startswith(b"SIMPLE  ="):
            raise FitsError("does not start like FITS")
        if number > 0 and start != b"XTENSION=":
            return  # special records or padding after the last HDU
        end = _find_end(data, at)
        if end < 0:
            raise FitsError(f"the header of HDU {number} has no END; the file is cut off or damaged")
        header = Header(data[at:end])
        offset = at + -(-(end + CARD - at) // BLOCK) * BLOCK
        size = data_size(header, number)
        hdu = Hdu(number, header, data, offset, size)
        yield hdu
        at = offset + -(-size // BLOCK) * BLOCK


def _find_end(data: bytes, at: int) -> int:
    """Offset of the END card of the header at ``at``, -1 when there is none in reach."""
    limit = min(len(data), at + MAX_HEADER_BLOCKS * BLOCK)
    pos = at
    while True:
        match = _END.search(data, pos, limit)
        if match is None:
            # a last header may be cut right after the word END
            tail = data[at:limit].rstrip(b" \x00\r\n")
            if len(tail) < BLOCK * MAX_HEADER_BLOCKS and tail.endswith(b"END") and (len(tail) - 3) % CARD == 0:
                return at + len(tail) - 3
            return -1
        if (match.start() - at) % CARD == 0:
            return match.start()
        pos = match.start() + 1


def data_size(header: Header, number: int) -> int:
    """Bytes of data a header announces (FITS standard 4.0, section 3.3.2)."""
    naxis = header.whole("NAXIS")
    if naxis <= 0:
        return 0
    bitpix = abs(header.whole("BITPIX", 8))
    if bitpix not in (8, 16, 32, 64):
        raise FitsError(f"BITPIX = {header.word('BITPIX')} in HDU {number} is not allowed")
    size = 1
    first = header.whole("NAXIS1")
    groups = number == 0 and first == 0 and header.get("GROUPS") is True
    for i in range(1 if not groups else 2, min(naxis, 999) + 1):
        length = header.whole(f"NAXIS{i}")
        if length < 0:
            raise FitsError(f"NAXIS{i} = {length} in HDU {number} is not allowed")
        size *= length
        if size > 10**18:
            break
    pcount, gcount = (header.whole("PCOUNT"), header.whole("GCOUNT", 1)) if number or groups else (0, 1)
    return max(bitpix // 8 * max(gcount, 0) * (max(pcount, 0) + size), 0)


def image(hdu: Hdu, rows: slice | None = None) -> NDArray[np.float64]:
    """Image data as float64, scaled, blanks as NaN, last FITS axis first."""
    header = hdu.header
    if header.get("ZIMAGE") is True or (hdu.number == 0 and header.get("GROUPS") is True and hdu.shape[:1] == (0,)):
        raise FitsBeyond(f"{hdu} is compressed or in groups")
    hdu.need()
    if header.whole("BITPIX") not in _IMAGE_TYPES:
        raise FitsError(f"BITPIX = {header.word('BITPIX')} in {hdu} is not allowed")
    kind = np.dtype(_IMAGE_TYPES[header.whole("BITPIX")])
    count = int(np.prod(hdu.shape, dtype=object)) if hdu.shape else 0
    values = np.frombuffer(hdu.buffer, kind, count, hdu.offset)
    out = values.astype(np.float64)
    if kind.kind in "iu" and "BLANK" in header:
        blank = values == header.whole("BLANK")
        if blank.any():
            out[blank] = np.nan
    scale, zero = header.number("BSCALE", 1.0), header.number("BZERO", 0.0)
    if scale != 1.0 or zero != 0.0:
        out = out * scale + zero
    return out.reshape(tuple(reversed(hdu.shape)))


@dataclass(frozen=True)
class Column:
    """One table column: where its cells lie, and how they are scaled."""

    name: str
    unit: str
    code: str
    repeat: int
    offset: int
    width: int
    scale: float
    zero: float
    null: int | None
    pointer: str = ""


def columns(hdu: Hdu) -> list[Column]:
    """The columns of a binary table (ASCII tables: :func:`ascii_columns`)."""
    header = hdu.header
    out: list[Column] = []
    at = 0
    for i in range(1, min(header.whole("TFIELDS"), 999) + 1):
        form = header.word(f"TFORM{i}").upper()
        match = re.fullmatch(r"(\d{0,18})(?:([LXBIJKAEDCM]).*|([PQ])([LXBIJKAEDCM]?)(?:\(.*)?)", form)
        if match is None:
            raise FitsError(f"TFORM{i} = {form!r} in {hdu} is not allowed")
        repeat = int(match.group(1)) if match.group(1) else 1
        code, pointer = match.group(2) or "", match.group(3) or ""
        if pointer:
            code, width = match.group(4) or "E", (8 if pointer == "P" else 16) * repeat
        elif code == "X":
            width = (repeat + 7) // 8
        elif code == "A":
            width = repeat
        else:
            width = repeat * np.dtype(_TABLE_TYPES[code]).itemsize
        null = header.whole(f"TNULL{i}") if f"TNULL{i}" in header else None
        out.append(
            Column(
                header.word(f"TTYPE{i}") or f"col{i}",
                header.word(f"TUNIT{i}"),
                code,
                repeat,
                at,
                width,
                header.number(f"TSCAL{i}", 1.0),
                header.number(f"TZERO{i}", 0.0),
                null,
                pointer,
            )
        )
        at += width
    if at > hdu.header.whole("NAXIS1"):
        raise FitsError(f"the columns of {hdu} are wider than its rows")
    return out


def column_values(hdu: Hdu, column: Column) -> NDArray[np.float64]:
    """A numeric column as float64, shape (rows, repeat); variable-length columns as (1, n) of the first row's array."""
    header = hdu.header
    row_bytes, rows = header.whole("NAXIS1"), header.whole("NAXIS2")
    if column.code not in _TABLE_TYPES or column.code in "ACM":
        raise FitsError(f"column {column.name} of {hdu} is not numeric")
    kind = np.dtype(_TABLE_TYPES[column.code])
    if rows < 1:
        raise FitsError(f"{hdu} is a table with no rows")
    hdu.need(row_bytes * rows)
    if rows * column.repeat > MAX_CELLS:
        raise FitsError(f"column {column.name} of {hdu} has too many values for one spectrum")
    if column.pointer:
        values = _from_heap(hdu, column, kind, row_bytes, rows)
    else:
        values = np.ndarray(
            (rows, column.repeat), kind, hdu.buffer, hdu.offset + column.offset, (row_bytes, kind.itemsize)
        )
    if column.code == "L":
        return np.where(values == b"T", 1.0, 0.0)
    out = values.astype(np.float64)
    if column.null is not None and kind.kind in "iu":
        out[values == column.null] = np.nan
    if column.scale != 1.0 or column.zero != 0.0:
        out = out * column.scale + column.zero
    return out


def _from_heap(hdu: Hdu, column: Column, kind: np.dtype[Any], row_bytes: int, rows: int) -> NDArray[Any]:
    if rows != 1 or column.repeat != 1:
        raise FitsBeyond(f"column {column.name} of {hdu} has arrays of varying length in {rows} rows")
    word = ">i4" if column.pointer == "P" else ">i8"
    count, start = (int(v) for v in np.frombuffer(hdu.buffer, word, 2, hdu.offset + column.offset))
    heap = hdu.offset + hdu.header.whole("THEAP", row_bytes * rows)
    if count < 0 or start < 0 or heap + start + count * kind.itemsize > len(hdu.buffer):
        raise FitsError(f"column {column.name} of {hdu} points beyond the end of the file")
    return np.frombuffer(hdu.buffer, kind, count, heap + start).reshape(1, count)
