"""Spectra in text: columns with any usual separator, header, comment style and decimal sign."""

from __future__ import annotations

import io
import re
from collections import Counter
from dataclasses import dataclass, field
from typing import Any

import numpy as np

from starfathom.classify.errors import SpectrumError
from starfathom.classify.reading import hints
from starfathom.classify.reading.finish import guess_spectral_unit
from starfathom.classify.reading.fixed import parse_fixed
from starfathom.classify.reading.names import log_of, never_wavelength, role_of, split_unit
from starfathom.classify.reading.raw import ErrorKind, RawSpectrum
from starfathom.classify.reading.request import Request
from starfathom.classify.reading.units import flux_kind, flux_word, spectral_unit
from starfathom.classify.spectrum import FloatArray

# Bounds that keep any text below ten seconds and 1 GB: bytes; rows of plain even columns; lines of any other text;
# length of a line; length of the lines of a text of many lines.
MAX_TEXT = 32 << 20
MAX_ROWS = 1_000_000
MAX_LINES = 150_000
MAX_LINE = 1 << 20
MAX_USUAL_LINE = 5000
_LONG_HEADING = 500
# digits are counted in all patterns here: without that, a long run of digits takes quadratic time
_NUMBER = rb"[-+]?(?:\d{1,40}\.?\d{0,40}|\.\d{1,40})(?:[eEdD][-+]?\d{1,4})?"
_FIRST_ROW = re.compile(rb"^[ \t]*" + _NUMBER + rb"(?:[ \t]+|[ \t]*[,;][ \t]*)" + _NUMBER + rb"(?=[\s,;]|$)", re.M)
_MISSING = {
    "",
    *"""
    nan null none indef -- - --- n/a na masked ... nodata ? * inf -inf +inf . undef infinity missing bad
""".split(),
}
_FORTRAN = re.compile(r"([-+]?(?:\d+\.?\d*|\.\d+))(?:[dDqQ]([-+]?\d+)|([-+]\d{2,3}))")
#: Separators ("" is any blank space) and decimal signs, in the order of preference.
_SEPARATORS = (
    ("\t", "."),
    ("\t", ","),
    (";", "."),
    (";", ","),
    ("|", "."),
    ("|", ","),
    (",", "."),
    ("", "."),
    ("", ","),
    (":", "."),
    ("&", "."),
)
_NO_ROWS = "no rows of numbers found; a text spectrum needs at least wavelength and flux in columns"
_ONE_COLUMN = "holds one column of numbers only, so no wavelengths; give wavelength and flux in columns"
_COMMENT = "#%!;*\"'\\/>"


@dataclass
class Table:
    """Numbers of a text file, shape (rows, columns), the headings if any, and the rest of the text."""

    values: FloatArray
    names: list[str] = field(default_factory=list)
    units: list[str] = field(default_factory=list)
    remarks: str = ""
    notes: list[str] = field(default_factory=list)


def read_text(data: bytes, path: str, request: Request) -> RawSpectrum:
    """The spectrum in a text file.

    Raises
    ------
    SpectrumError
        when the content is not text, holds no table of numbers, or its columns cannot be told apart.
    """
    if len(data) > MAX_TEXT:
        raise SpectrumError(
            f"{path}: {len(data) >> 20} MB of text is too much for one spectrum; extract the spectrum first."
        )
    table = _quick(data)
    if table is None:
        table = _slow(decode(data, path), path)
    return assign_columns(table, path, request)


def read_array(data: bytes, path: str, request: Request) -> RawSpectrum:
    """A saved numpy array of shape (n, 2 or more) or (2 or more, n), or with named fields."""
    try:
        array = np.load(io.BytesIO(data), allow_pickle=False)
    except Exception:
        raise SpectrumError(f"{path}: the numpy array is damaged or holds objects; save plain numbers.") from None
    if array.dtype.names:
        names = [
            n
            for n in array.dtype.names
            if array.dtype[n].kind in "iufb" and array.ndim == 1 and not array.dtype[n].shape
        ]
        table = Table(
            np.column_stack([array[n].astype(np.float64) for n in names]) if names else np.empty((0, 0)),
            names,
            [""] * len(names),
        )
    elif array.ndim == 2 and array.dtype.kind in "iuf":
        table = Table((array.T if array.shape[0] < array.shape[1] else array).astype(np.float64))
    else:
        table = Table(np.empty((0, 0)))
    if not 2 <= table.values.shape[1] <= 50:
        raise SpectrumError(
            f"{path}: a numpy array of shape {array.shape} is not a table of wavelength and flux; save two columns."
        )
    return assign_columns(table, path, request)


def decode(data: bytes, path: str) -> str:
    """Bytes to text: UTF-8, UTF-16 with a mark, else Latin-1."""
    if len(data) > 40 and not any(data[1:40:2]) and all(data[0:40:2]):
        data = b"\xff\xfe" + data  # UTF-16 without its mark
    if data.startswith((b"\xff\xfe", b"\xfe\xff")):
        try:
            return data.decode("utf-16")
        except UnicodeDecodeError:
            raise SpectrumError(f"{path}: the text is damaged UTF-16; save it again as plain text.") from None
    head = data[:65536]
    odd = len(head.translate(None, bytes(range(32, 256)) + b"\t\n\r\f\x1a"))
    if b"\x00" in head or odd > 0.02 * len(head) + 1:
        raise SpectrumError(f"{path}: is neither FITS nor text that can be read; check that it is a spectrum.")
    try:
        return data.decode("utf-8-sig")
    except UnicodeDecodeError:
        return data.decode("latin-1")


def _quick(data: bytes) -> Table | None:
    """Plain numbers in even columns, the common case; None when anything is out of the ordinary."""
    data = data.removeprefix(b"\xef\xbb\xbf")
    match = _FIRST_ROW.search(data)
    if match is None or b"ECSV" in data[:40]:
        return None
    start = match.start()
    head, body = data[:start], data[start:]
    if len(head) > 200_000 or (b"\r" in body and b"\n" not in body):
        return None
    line_end = body.find(b"\n")
    first = body[:line_end] if line_end >= 0 else body
    if len(first) > MAX_LINE:
        return None
    strange = body.translate(None, b"0123456789+-.eE \t\r\n")
    notes: list[str] = []
    if strange and b"." not in body and _decimal_commas(first, strange):
        body = body.replace(b",", b".").replace(b";", b" ")
        first = first.replace(b";", b" ")
        strange = b""
        notes.append("decimal commas read")
    if strange:
        separator = strange[:1]
        if separator not in b",;" or strange.strip(separator):
            return None
        if separator == b"," and b"." not in first:
            return None
        if separator * 2 in body or separator + b"\n" in body or separator + b"\r" in body or b" " + separator in body:
            return None
        body = body.replace(separator, b" ")
        columns = first.count(separator) + 1
        if columns < 2 or len(strange) % (columns - 1):
            return None
    else:
        columns = len(first.split())
    rows = body.count(b"\n") + (not body.endswith(b"\n"))
    if rows > MAX_ROWS or len(first) > MAX_USUAL_LINE:
        return None
    fixed = parse_fixed(body)
    if fixed is not None and fixed.shape[1] >= 2:
        values = fixed
        columns = values.shape[1]
    else:
        try:
            values = np.fromstring(body, dtype=np.float64, sep=" ")
        except ValueError:
            return None
        if rows * columns != values.size or columns < 2 or rows < 5:
            return None
        values = values.reshape(rows, columns)
    step = np.diff(values[:, 0])
    if not (np.all(step > 0) or np.all(step < 0)):
        return None  # ragged rows would show here; the careful reader sorts it out
    try:
        text = head.decode("utf-8-sig")
    except UnicodeDecodeError:
        text = head.decode("latin-1")
    table = Table(values, remarks=text, notes=notes)
    _headings(table, text.splitlines(), columns)
    return table


def _decimal_commas(first: bytes, strange: bytes) -> bool:
    """Whether the commas in a body without full stops are decimal ones: each cell of the first row has one at most,
    between digits, and something else parts the cells."""
    if strange.strip(b",;"):
        return False
    cells = first.split(b";") if b";" in first else first.split()
    if b";" in strange and strange.count(b";") % max(first.count(b";"), 1):
        return False
    return (
        len(cells) > 1
        and b"," in strange
        and all(re.fullmatch(rb"\s*[-+]?\d+(,\d+)?([eE][-+]?\d+)?\s*", c) for c in cells)
    )


def cell(text: str) -> float:
    """A number as people and programs write it; NaN for the usual words for nothing; ValueError otherwise."""
    if len(text) > 60:
        raise ValueError("too long for a number")
    try:
        return float(text)
    except ValueError:
        pass
    bare = text.strip().strip("\"'").strip()
    if bare.lower() in _MISSING or set(bare) == {"*"}:
        return float("nan")
    match = _FORTRAN.fullmatch(bare)
    if match:
        return float(f"{match.group(1)}e{match.group(2) or match.group(3)}")
    return float(bare)


def _is_number(text: str) -> bool:
    try:
        return cell(text) == cell(text)
    except ValueError:
        return False


def _slow(text: str, path: str) -> Table:
    if max(text.count("\n"), text.count("\r")) > MAX_LINES:
        raise SpectrumError(
            f"{path}: more than {MAX_LINES} lines of text are too many for one spectrum; extract it first."
        )
    lines = text.replace("\r\n", "\n").replace("\r", "\n").replace("\x1a", "").split("\n")
    if lines and "%ECSV" in lines[0]:
        return _ecsv(lines, path)
    if max(map(len, lines)) > MAX_LINE:
        raise SpectrumError(
            f"{path}: a line of more than {MAX_LINE >> 20} MB is no part of a spectrum; check what the file is."
        )
    sample = [line for line in lines[:20000] if _may_be_data(line)][:400]
    if not sample:
        raise SpectrumError(f"{path}: {_NO_ROWS}.")
    if len(sample) > 4 and sorted(map(len, sample))[len(sample) // 2] > MAX_USUAL_LINE:
        raise SpectrumError(f"{path}: rows of more than {MAX_USUAL_LINE} characters are no spectrum; extract it first.")
    best: tuple[int, str, str] | None = None
    for separator, decimal in _SEPARATORS:
        score = _score(sample, separator, decimal)
        if score and (best is None or score > best[0]):
            best = (score, separator, decimal)
    if best is None:
        one = sum(_is_number(line.strip().rstrip(",;")) for line in sample)
        if one > len(sample) // 2:
            raise SpectrumError(f"{path}: {_ONE_COLUMN}.")
        raise SpectrumError(f"{path}: {_NO_ROWS}.")
    _, separator, decimal = best
    pairs = separator == "," and _paired(sample)
    if pairs:
        lines = [_PAIR.sub(r"\1.\2", line) if _may_be_data(line) else line for line in lines]
    rows: list[list[float]] = []
    remarks: list[str] = []
    heading: list[str] = []
    odd = 0
    for line in lines:
        cells = _row(line, separator, decimal)
        if cells is None:
            if line.strip():
                remarks.append(line)
                if not rows:
                    heading.append(line)
                elif not line.lstrip()[:1] or line.lstrip()[0] not in _COMMENT:
                    odd += 1
            continue
        rows.append(cells)
    if not rows:
        raise SpectrumError(f"{path}: {_NO_ROWS}.")
    if 2 <= len(rows) <= 4 and len(rows[0]) >= 100 and len({len(r) for r in rows}) == 1:
        rows = [list(r) for r in zip(*rows)]
        table_notes = ["columns written as rows"]
    else:
        table_notes = []
    width = Counter(len(r) for r in rows).most_common(1)[0][0]
    if width < 2:
        raise SpectrumError(f"{path}: {_ONE_COLUMN}.")
    kept = [r[:width] for r in rows if len(r) >= width]
    values = np.array(kept, dtype=np.float64)
    while values.shape[1] > 2 and np.isnan(values[:, -1]).all():
        values = values[:, :-1]  # a separator at the end of each row
    table = Table(values, remarks="\n".join(remarks[:2000]), notes=table_notes)
    if len(kept) < len(rows):
        table.notes.append(f"{len(rows) - len(kept)} short rows left out")
    if odd:
        table.notes.append(f"{odd} lines that hold no numbers left out")
    if decimal == "," or pairs:
        table.notes.append("decimal commas read")
    _headings(table, heading, table.values.shape[1], separator)
    return table


def _may_be_data(line: str) -> bool:
    bare = line.lstrip(" \t|\"'")[:1]
    return bare.isdigit() or (bare in "+-." and bool(bare))


def _split(line: str, separator: str) -> list[str]:
    line = line.strip(" \r\n") if separator == "\t" else line.strip()
    for mark in ("#", "!"):
        if mark in line[1:]:
            line = line[: line.index(mark, 1)].rstrip()
    if separator == "|":
        line = line.strip("|")
    elif separator == "&":
        line = line.rstrip("\\ ")
    if separator == "":
        return line.split()
    return [c.strip() for c in line.split(separator)]


def _decimal(text: str, decimal: str) -> str:
    if "," in text:
        if decimal == ",":
            return text.replace(".", "").replace(",", ".") if text.count(",") == 1 else text
        if re.fullmatch(r"[-+]?\d{1,3}(,\d{3})+(\.\d*)?", text):
            return text.replace(",", "")
    return text


def _row(line: str, separator: str, decimal: str) -> list[float] | None:
    """Cells of a data row, None for any other line; cells behind the second that are words become NaN."""
    if not _may_be_data(line):
        return None
    parts = _split(line, separator)
    out: list[float] = []
    for i, part in enumerate(parts):
        try:
            out.append(cell(_decimal(part.strip("\"'") if '"' in part or "'" in part else part, decimal)))
        except ValueError:
            if i < 2:
                return None
            out.append(float("nan"))
    return out if out and out[0] == out[0] else None


def _score(sample: list[str], separator: str, decimal: str) -> int:
    """How many sample lines split cleanly; 0 when the separator is not in use."""
    good = commas = 0
    widths: Counter[int] = Counter()
    for line in sample:
        if separator and separator not in line.strip():
            continue
        parts = _split(line, separator)
        numbers = sum(1 for p in parts[:2] if _is_number(_decimal(p, decimal)))
        if len(parts) < 2 or not parts[0] or not _is_number(_decimal(parts[0], decimal)):
            continue
        if decimal == "," and any("," in p for p in parts[:2]):
            commas += 1
        if numbers == 2 or all(_known_cell(_decimal(p, decimal)) for p in parts[:2]):
            good += 2
            widths[len(parts)] += 1
    if decimal == "," and not commas:
        return 0
    if not widths:
        return 0
    return good + widths.most_common(1)[0][1]


def _known_cell(text: str) -> bool:
    try:
        cell(text)
    except ValueError:
        return False
    return True


_PAIRS = re.compile(r"\s*[-+]?\d+,\d+(,[-+]?\d+,\d+)+\s*")
_PAIR = re.compile(r"([-+]?\d+),(\d+)")


def _paired(sample: list[str]) -> bool:
    """Whether rows such as "4000,05,1,25" are decimal commas with commas between the columns.

    They are when zeros lead a second half, as no whole number is written, or when the first halves repeat while the
    pairs run one way.
    """
    if len(sample) < 20 or not all(_PAIRS.fullmatch(line) for line in sample):
        return False
    first = [_PAIR.findall(line)[0] for line in sample]
    if any(len(half) > 1 and half[0] == "0" for line in sample for _, half in _PAIR.findall(line)):
        return True
    whole = np.array([float(a) for a, _ in first])
    merged = np.array([float(f"{a}.{b}") for a, b in first])
    return not np.all(np.diff(whole) != 0) and bool(np.all(np.diff(merged) > 0) or np.all(np.diff(merged) < 0))


# --- headings -------------------------------------------------------------------------------------------------------


def _bare(line: str) -> str:
    return line.strip().lstrip("#%!;*\"'\\/>| ").rstrip(" |\r")


def _headings(table: Table, lines: list[str], columns: int, separator: str = "") -> None:
    """Find column names and units in the lines above the data."""
    lines = [line for line in lines[-500:] if len(line) <= _LONG_HEADING]
    listed = _listed(lines, columns)
    if listed:
        table.names = [split_unit(n)[0] for n in listed]
        table.units = [split_unit(n)[1] for n in listed]
        return
    nearest = [line for line in lines if _bare(line)][-12:]
    for back, line in enumerate(reversed(nearest)):
        for names in _name_splits(_bare(line), separator):
            if (
                len(names) == columns
                and any(role_of(n)[0] in ("wave", "flux") for n in names)
                and not any(_is_number(n) for n in names)
                and _tells(names)
            ):
                table.names = [split_unit(n)[0] for n in names]
                table.units = [split_unit(n)[1] for n in names]
                if not any(table.units) and back:
                    below = nearest[len(nearest) - back]
                    for units in _name_splits(_bare(below), separator):
                        if len(units) == columns and any(spectral_unit(x) for x in units):
                            table.units = [x.strip("[]() ") for x in units]
                            break
                return


def _tells(names: list[str]) -> bool:
    """A row of headings rather than a sentence that happens to have as many words."""
    if any(len(split_unit(n)[0].split()) > 3 for n in names):
        return False
    roles = [role_of(n)[0] for n in names]
    return roles.count("wave") == 1 or (roles.count("flux") >= 1 and roles.count("other") < len(names) - 1)


def _name_splits(line: str, separator: str) -> list[list[str]]:
    out: list[list[str]] = []
    for sep in ([separator] if separator else []) + ["\t", ";", "|", ","]:
        if sep in line:
            out.append([n.strip().strip("\"'").strip() for n in line.split(sep)])
    out.append(re.findall(r"[^\s(\[]+(?:\s*[(\[][^)\]]*[)\]])?", line))
    out.append(line.split())
    out.append([p for p in re.split(r"\s{2,}|\t", line) if p])
    return [[n.strip("\"'") for n in names] for names in out]


def _listed(lines: list[str], columns: int) -> list[str] | None:
    """Names given one a line, as in ``# column 1: wavelength [nm]``."""
    found: dict[int, str] = {}
    for line in lines:
        match = re.match(
            r"\s*(?:col(?:umn)?s?\.?)?\s*#?\s*(\d{1,2})\s*(?:[:=.)-]|\s)\s*([A-Za-zλ].*)", _bare(line), re.I
        )
        if match and 1 <= int(match.group(1)) <= columns:
            found.setdefault(int(match.group(1)), match.group(2).strip())
    if len(found) < 2 or 1 not in found:
        return None
    names = [found.get(i + 1, "") for i in range(columns)]
    if not any(role_of(_lead(n))[0] == "wave" for n in names):
        return None
    return [_lead(n) for n in names]


def _lead(text: str) -> str:
    """First word of a description with its unit, so that "Wavelength of the bin [nm]" gives "Wavelength [nm]"."""
    unit = re.search(r"[(\[]([^)\]]*)[)\]]", text) or re.search(r"\bin ([\w/^.-]+)\s*$", text)
    word = re.match(r"[^\s(\[,;:]+(?: (?:err\w*|unc\w*|density|sigma))?", text)
    return (word.group(0) if word else text) + (f" [{unit.group(1)}]" if unit else "")


# --- ECSV -----------------------------------------------------------------------------------------------------------


def _ecsv(lines: list[str], path: str) -> Table:
    """Enhanced CSV (Astropy Proposal for Enhancement 6): the flat columns of it, without a YAML library."""
    names: list[str] = []
    units: list[str] = []
    separator = " "
    end = 0
    for end, line in enumerate(lines):
        if not line.startswith("#"):
            break
        match = re.match(r"#\s*delimiter:\s*['\"]?(.)", line)
        if match and match.group(1) != " ":
            separator = match.group(1)
        match = re.match(r"#\s*-\s*\{\s*name:\s*(.*)", line)
        if match:
            block = match.group(1)
            look = end
            while "}" not in block and look + 1 < len(lines) and lines[look + 1].startswith("#"):
                look += 1
                block += " " + lines[look].lstrip("# ")
            names.append(re.split(r",|\}", block)[0].strip().strip("\"'"))
            unit = re.search(r"\bunit:\s*([^,}]+)", block)
            units.append(unit.group(1).strip().strip("\"'") if unit else "")
    if not names or end >= len(lines):
        raise SpectrumError(f"{path}: the ECSV header lists no columns; write the table again.")
    rows = []
    for line in lines[end + 1 :]:
        if not line.strip() or line.startswith("#"):
            continue
        parts = re.findall(r'"[^"]*"|[^\s"]+', line) if separator == " " else line.split(separator)
        if len(parts) != len(names):
            raise SpectrumError(
                f"{path}: an ECSV row has {len(parts)} cells for {len(names)} columns; the file is cut off or damaged."
            )
        row = []
        for part in parts:
            word = part.strip().strip('"')
            try:
                row.append(
                    {"true": 1.0, "false": 0.0}[word.lower()] if word.lower() in ("true", "false") else cell(word)
                )
            except ValueError:
                row.append(float("nan"))
        rows.append(row)
    if not rows:
        raise SpectrumError(f"{path}: the ECSV table has no rows; write the table again.")
    return Table(np.array(rows, dtype=np.float64), names, units, "\n".join(lines[:end]))


# --- which column is what -------------------------------------------------------------------------------------------


def assign_columns(table: Table, path: str, request: Request) -> RawSpectrum:
    values, names, units = table.values, table.names, table.units
    n_columns = values.shape[1]
    picked: dict[str, int] = {}
    if names:
        best: dict[str, int] = {}
        for i, name in enumerate(names):
            role, rank = role_of(name) if name else ("other", 0)
            if role in ("other", "index"):
                continue
            if rank > best.get(role, -1):
                best[role], picked[role] = rank, i
    for asked, want in request.columns.items():
        lowered = [n.lower() for n in names]
        if want.lower() in lowered:
            index = lowered.index(want.lower())
        elif want.isdecimal() and 1 <= int(want) <= n_columns:
            index = int(want) - 1
        else:
            held = f"columns {', '.join(names)}" if names else f"{n_columns} columns without names"
            raise SpectrumError(f"{path}: has no column {want}; it has {held}.")
        if asked in ("std", "var", "ivar", "snr"):
            for other in ("std", "var", "ivar", "snr"):
                picked.pop(other, None)
        picked[asked] = index
    if "wave" in picked and "wave" not in request.columns and not is_steady(values[:, picked["wave"]]):
        better = _find_wave(values, set())
        if better != picked["wave"] and is_steady(values[:, better]) and in_reach(values[:, better]):
            names, units = [], []  # a sentence was taken for headings
            picked = {r: i for r, i in picked.items() if r in request.columns}
    named = bool(picked)
    notes = list(table.notes)
    if "wave" not in picked:
        picked["wave"] = _find_wave(values, set(picked.values()), names)
    if "flux" not in picked:
        taken = set(picked.values()) | {i for i, n in enumerate(names) if n and role_of(n)[0] == "index"}
        free = [i for i in range(n_columns) if i not in taken and i > picked["wave"]] or [
            i for i in range(n_columns) if i not in taken
        ]
        if not free:
            raise SpectrumError(f"{path}: no flux column found; name the columns.")
        picked["flux"] = free[0]
    kinds = [r for r in ("std", "ivar", "var", "snr") if r in picked]
    error: FloatArray | None = None
    error_kind: ErrorKind = "std"
    if kinds:
        error, error_kind = values[:, picked[kinds[0]]], kinds[0]
    elif not named or not names:
        free = [i for i in range(n_columns) if i not in picked.values() and i > picked["flux"]]
        if free:
            error, error_kind = _third(values[:, picked["flux"]], values[:, free[0]], free[0] + 1, notes)
    wave_name = names[picked["wave"]] if names else ""
    flux_name = names[picked["flux"]] if names else ""
    wave_unit = request.unit or (units[picked["wave"]] if units else "")
    if not wave_unit and spectral_unit(wave_name):
        wave_unit = wave_name
    if not wave_unit:
        wave_unit = _unit_in_words(table.remarks, values[:, picked["wave"]])
    log = log_of(wave_name)
    flux_unit = flux_word(flux_name, units[picked["flux"]] if units else "")
    if flux_kind(flux_unit) == "unknown":
        flux_unit = _flux_in_words(table.remarks) or flux_unit
    raw = RawSpectrum(
        values[:, picked["wave"]],
        values[:, picked["flux"]],
        wave_unit,
        flux_unit,
        log,
        error,
        error_kind,
        where=f"columns {picked['wave'] + 1} and {picked['flux'] + 1}",
        notes=notes,
    )
    if "bad" in picked:
        raw.bad = values[:, picked["bad"]] != 0
    elif "good" in picked:
        raw.bad = values[:, picked["good"]] == 0
    _words_around(raw, table.remarks, wave_name, units[picked["wave"]] if units else "")
    return raw


def _find_wave(values: FloatArray, taken: set[int], names: list[str] | None = None) -> int:
    """The wavelength column by its values: the first steady one in a likely range, not a running number."""
    free = [i for i in range(values.shape[1]) if i not in taken and not (names and never_wavelength(names[i]))]
    steady = [i for i in free[:8] if is_steady(values[:, i])]
    for i in steady:
        if in_reach(values[:, i]):
            return i
    return steady[0] if steady else free[0] if free else 0


def is_steady(column: FloatArray) -> bool:
    """Whether values run one way throughout, a few slips apart, and are not just 0, 1, 2 ..."""
    finite = column[np.isfinite(column)]
    if finite.size < 2:
        return False
    step = np.diff(finite)
    counter = bool(np.all(step == 1.0)) and finite[0] in (0.0, 1.0)
    return bool(np.mean(step > 0) > 0.98 or np.mean(step < 0) > 0.98) and not counter


def in_reach(column: FloatArray) -> bool:
    """Whether values without a unit can be wavelengths of an optical spectrum."""
    finite = column[np.isfinite(column)]
    if finite.size == 0:
        return False
    try:
        guess_spectral_unit(finite, "")
    except SpectrumError:
        return False
    return True


def _third(flux: FloatArray, other: FloatArray, number: int, notes: list[str]) -> tuple[FloatArray | None, ErrorKind]:
    """What an unnamed third column is, judged by the noise seen in the flux itself."""
    finite = np.isfinite(other) & np.isfinite(flux)
    if not finite.any() or np.nanmin(other[finite]) < 0 or not (other[finite] > 0).any():
        notes.append(f"column {number} is not an uncertainty: left out")
        return None, "std"
    if np.all((other[finite] == 0) | (other[finite] == 1)):
        notes.append(f"column {number} holds only 0 and 1: left out")
        return None, "std"
    positive = finite & (other > 0)
    f, o = flux[positive], other[positive]
    if f.size < 50:
        return other, "std"
    seen = 1.4826 * float(np.median(np.abs(f[2:-2] - (f[:-4] + f[4:]) / 2))) / np.sqrt(1.5)
    middle = float(np.median(np.abs(f)))
    with np.errstate(all="ignore"):
        guesses: dict[ErrorKind, float] = {
            "std": float(np.median(o)),
            "ivar": float(np.median(1 / np.sqrt(o))),
            "snr": float(np.median(np.abs(f) / o)),
            "var": float(np.median(np.sqrt(o))),
        }
    noise = max(seen, 1e-4 * middle)
    if guesses["std"] > middle and seen < 0.3 * middle:
        kind = min(guesses, key=lambda k: abs(np.log(guesses[k] / noise)) if guesses[k] > 0 else np.inf)
        if kind != "std" and abs(np.log(guesses[kind] / noise)) < 1.5:
            said = {"ivar": "inverse variance", "snr": "signal to noise", "var": "variance"}[kind]
            notes.append(f"column {number} taken as {said}, from the noise seen in the flux")
            return other, kind
        notes.append(f"column {number} is too large for an uncertainty: left out")
        return None, "std"
    notes.append(f"column {number} taken as one standard deviation")
    return other, "std"


_SPECTRAL_WORDS = re.compile(
    r"(?:wave\w*|lambda|\bwl\b|spectral axis|x[- ]?axis|dispersion|freq\w*)[^\n]{0,60}?(?<![A-Za-z])"
    r"(nm|nanomet\w+|angstroms?|ångströms?|Å|A|microns?|micromet\w+|um|µm|μm|Hz|GHz|THz|met(?:er|re)s?)(?![A-Za-z/^])",
    re.I,
)


def _unit_in_words(remarks: str, wave: FloatArray) -> str:
    """A wavelength unit named in a comment, believed only where it puts the values in reach."""
    match = _SPECTRAL_WORDS.search(remarks[:20000]) if remarks else None
    if match is None:
        return ""
    unit = spectral_unit(match.group(1))
    middle = float(np.nanmedian(wave))
    if unit is None or not np.isfinite(middle) or middle == 0:
        return ""
    angstrom = middle * unit.scale if unit.kind == "wavelength" else 2.99792458e18 / (middle * unit.scale)
    return match.group(1) if 1000 <= angstrom <= 50000 or not 1000 <= middle <= 50000 else ""


def _flux_in_words(remarks: str) -> str:
    for line in remarks[:20000].splitlines():
        match = re.search(r"\b(?:flux|f_?lambda|f_?nu|intensity|y[- ]?axis)\b(.{0,80})", line, re.I)
        if match and flux_kind(match.group(0)) != "unknown":
            return match.group(0)
    return ""


def _words_around(raw: RawSpectrum, remarks: str, wave_name: str, wave_unit: str) -> None:
    """Air or vacuum, object and the like from headings and comments."""
    found = hints.text_medium(f"wavelength {wave_name} {wave_unit}".replace("_", " "))
    if found != "unknown":
        raw.medium, raw.medium_source = found, f"column heading {wave_name!r}"
    elif remarks:
        found = hints.text_medium(remarks[:20000])
        if found != "unknown":
            raw.medium, raw.medium_source = found, "comment in the file"
    if remarks:
        for key, value in text_meta(remarks).items():
            raw.meta.setdefault(key, value)


def text_meta(remarks: str) -> dict[str, Any]:
    """Hints from comment lines of the form ``key = value`` or ``key: value``."""
    out: dict[str, Any] = {}
    for line in remarks[:20000].splitlines():
        match = re.match(r"\s*([A-Za-z_][\w -]{0,24}?)\s*[:=]\s*(.+)", _bare(line))
        if not match:
            continue
        key = re.sub(r"[\s_-]+", "_", match.group(1).lower())
        value = re.split(r"\s+/\s+", match.group(2))[0].strip().strip("'\"").strip()
        if key in ("object", "target", "star", "object_name", "objname", "name") and value:
            out.setdefault("object", value[:200])
            continue
        number = re.match(r"[-+]?\d+\.?\d*(?:[eE][-+]?\d+)?", value)
        if key in ("ra", "ra_deg", "dec", "dec_deg"):
            degrees = hints.angle(value, hours=key == "ra")
            if degrees is not None:
                out.setdefault(key[:3].rstrip("_") + "_deg", degrees)
        elif number:
            x = float(number.group())
            if key in ("exptime", "exposure", "exptime_s", "exposure_time", "exposure_s") and 0 < x < 1e7:
                out.setdefault("exptime_s", x)
            elif key in ("snr", "s/n", "sn") and 0 < x < 1e5:
                out.setdefault("snr", x)
            elif key in ("fwhm_angstrom", "fwhm_a") and 0.01 < x < 50:
                out.setdefault("fwhm_angstrom", x)
            elif key in ("velocity_kms", "rv", "radial_velocity", "rv_kms", "vrad", "radvel") and abs(x) < 2000:
                out.setdefault("velocity_kms", x)
            elif key in ("resolution", "resolving_power", "r") and 50 < x < 5e5:
                out.setdefault("resolution", x)
    return out
