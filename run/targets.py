"""The target list of a run: ECSV, CSV, FITS or Parquet, checked whole before any work, read in chunks.

A target has a ``name``, a ``spectrum`` path (relative paths count from the list's own folder) or an ``mk_type``, and
any of: magnitudes in columns named by band with ``e_`` errors, ``ra``, ``dec`` (degrees), ``parallax``, ``e_parallax``
(mas), ``ebv``, ``e_ebv``, ``group``, ``fwhm`` (angstrom), ``velocity`` (km/s). Other columns are left alone.

Lists of ten million rows are fine: one chunk is in memory at a time, besides eight bytes a row to find doubled names.
"""

from __future__ import annotations

import csv
import gzip
import hashlib
import itertools
import math
import os
import re
from array import array
from collections.abc import Iterable, Iterator
from dataclasses import dataclass, field
from pathlib import Path
from typing import IO, Any

import numpy as np
from numpy.typing import NDArray

from starfathom.classify.errors import RequestError
from starfathom.distance.photometry import BANDS, DEFAULT_ERROR_MAG

FloatArray = NDArray[np.float64]

#: Apparent magnitudes outside this range belong to no star (the Sun is at -26.7; 99.99 is a filler).
MAG_RANGE = (-30.0, 35.0)

#: Largest error of a magnitude that is of any use.
MAX_MAG_ERROR = 5.0

#: Rows read and checked at a time.
CHUNK_ROWS = 16384

TEXT_COLUMNS = ("name", "spectrum", "mk_type", "group")

#: name: (unit, smallest, largest) of the numbers besides magnitudes.
NUMBER_COLUMNS = {
    "ra": ("deg", -180.0, 360.0),
    "dec": ("deg", -90.0, 90.0),
    "parallax": ("mas", -1000.0, 1000.0),
    "e_parallax": ("mas", 0.0, 1000.0),
    "ebv": ("mag", -1.0, 20.0),
    "e_ebv": ("mag", 0.0, 20.0),
    "fwhm": ("Angstrom", 0.05, 60.0),
    "velocity": ("km / s", -20000.0, 20000.0),
}

#: Texts that stand for "no value" in a number column.
_ABSENT = {"", "nan", "--", "null", "none", "n/a", "...", "-"}

#: What a single-letter or two-letter column can only have meant: a band that is not known here.
_LIKE_A_BAND = re.compile(r"^[A-Za-z]$")


@dataclass(frozen=True)
class Target:
    """One row of the list. Pairs are (value, one standard deviation); None or "" where the list says nothing."""

    index: int
    name: str
    spectrum: str = ""
    mk_type: str = ""
    magnitudes: dict[str, tuple[float, float]] = field(default_factory=dict)
    ra_deg: float | None = None
    dec_deg: float | None = None
    parallax: tuple[float, float] | None = None
    ebv: tuple[float, float] | None = None
    group: str = ""
    fwhm_angstrom: float | None = None
    velocity_kms: float | None = None


@dataclass(frozen=True)
class _Chunk:
    """Columns of ``size`` consecutive rows, the first of them number ``start`` (from 0)."""

    start: int
    size: int
    text: dict[str, list[str]]
    numbers: dict[str, FloatArray]


class TargetList:
    """A target list on disk.

    Parameters
    ----------
    path : the list; its format follows from the suffix (.ecsv, .csv, .tsv, .txt, .dat, .fits, .parquet, .vot; .gz too)

    Raises
    ------
    RequestError
        when it cannot be opened or its columns are not those of a target list.
    """

    def __init__(self, path: str | os.PathLike[str]) -> None:
        self.path = Path(path)
        if not self.path.is_file():
            raise RequestError(f"{self.path}: no such target list.")
        self.folder = self.path.parent
        self._reader = _reader_of(self.path)
        try:
            self.all_columns, self._units = self._reader.head()
        except RequestError:
            raise
        except UnicodeDecodeError as fault:
            raise RequestError(f"{self.path}: is not text in UTF-8; save the list as UTF-8.") from fault
        except Exception as fault:
            raise RequestError(f"{self.path}: cannot be read as a table ({_first_line(fault)}).") from fault
        self._columns = self._recognise()
        self.bands = tuple(b for b in BANDS if b in self._columns)
        self._factors = self._unit_factors()

    # columns

    def _recognise(self) -> dict[str, str]:
        """Known name -> the column's name as the list spells it."""
        where = self.path
        doubled = [c for i, c in enumerate(self.all_columns) if c in self.all_columns[:i]]
        if doubled:
            raise RequestError(f"{where}: column {doubled[0]} is there twice; keep one of them.")
        known: dict[str, str] = {}
        for column in self.all_columns:
            low = column.lower()
            if low in TEXT_COLUMNS or low in NUMBER_COLUMNS:
                if low in known:
                    raise RequestError(f"{where}: columns {known[low]} and {column} mean the same; keep one of them.")
                known[low] = column
            elif column in BANDS or (column[:2] == "e_" and column[2:] in BANDS):
                known[column] = column
        for column in self.all_columns:
            if column in known.values():
                continue
            stem = column[2:] if column.startswith("e_") else column
            if column.startswith("e_") or f"e_{column}" in self.all_columns or _LIKE_A_BAND.match(column):
                raise RequestError(
                    f"{where}: column {column}: {stem} is no band known here; "
                    f"known are {', '.join(BANDS)} (as written: V, not v)."
                )
        if "name" not in known:
            raise RequestError(
                f"{where}: has no column called name (it has: {', '.join(self.all_columns[:12])}); "
                "every target needs a name."
            )
        if "spectrum" not in known and "mk_type" not in known:
            raise RequestError(f"{where}: has neither a spectrum nor an mk_type column, so there is nothing to go by.")
        for quantity in ("parallax", "ebv", *BANDS):
            if f"e_{quantity}" in known and quantity not in known:
                raise RequestError(f"{where}: has a column e_{quantity} but no {quantity} for it to belong to.")
        if "parallax" in known and "e_parallax" not in known:
            raise RequestError(f"{where}: has parallaxes without errors; add a column e_parallax (mas).")
        return known

    def _unit_factors(self) -> dict[str, float]:
        """What turns a column into the unit of this module, for columns that state another unit."""
        factors: dict[str, float] = {}
        for name, column in self._columns.items():
            stated = (self._units.get(column) or "").strip()
            if name not in NUMBER_COLUMNS or not stated or stated == NUMBER_COLUMNS[name][0]:
                continue
            import astropy.units as u

            try:
                factor = float(u.Unit(stated).to(u.Unit(NUMBER_COLUMNS[name][0])))
            except ValueError as fault:
                raise RequestError(
                    f"{self.path}: column {column} is in {stated}, which is not a unit for it; "
                    f"give it in {NUMBER_COLUMNS[name][0]}."
                ) from fault
            if not math.isclose(factor, 1.0, rel_tol=1e-12):
                factors[name] = factor
        return factors

    @property
    def has_spectra(self) -> bool:
        """Whether any row may name a spectrum."""
        return "spectrum" in self._columns

    @property
    def has_groups(self) -> bool:
        """Whether any row may belong to a group."""
        return "group" in self._columns

    @property
    def ignored_columns(self) -> tuple[str, ...]:
        """Columns of the list that mean nothing here."""
        return tuple(c for c in self.all_columns if c not in self._columns.values())

    # rows

    def _chunks(self) -> Iterator[_Chunk]:
        start = 0
        wanted = list(self._columns.values())
        try:
            for raw in self._reader.chunks(wanted):
                size = len(next(iter(raw.values())))
                text = {k: [_text(v) for v in raw[c]] for k, c in self._columns.items() if k in TEXT_COLUMNS}
                numbers = {
                    k: self._numbers(k, raw[c], start, text["name"])
                    for k, c in self._columns.items()
                    if k not in TEXT_COLUMNS
                }
                yield _Chunk(start, size, text, numbers)
                start += size
        except RequestError:
            raise
        except UnicodeDecodeError as fault:
            raise RequestError(f"{self.path}: is not text in UTF-8; save the list as UTF-8.") from fault
        except Exception as fault:
            raise RequestError(f"{self.path}: cannot be read beyond row {start} ({_first_line(fault)}).") from fault

    def _numbers(self, name: str, cells: Any, start: int, names: list[str]) -> FloatArray:
        try:
            out = np.array(cells, dtype=np.float64)
        except (TypeError, ValueError):
            out = np.empty(len(cells))
            for i, cell in enumerate(cells):
                shown = _text(cell)
                try:
                    out[i] = math.nan if shown.lower() in _ABSENT else float(shown)
                except ValueError:
                    raise RequestError(
                        f"{self._place(start + i, names[i])}: {name} is {shown!r}, which is not a number."
                    ) from None
        return out * self._factors[name] if name in self._factors else out

    def _place(self, index: int, name: str) -> str:
        return f"{self.path}: row {index + 1} ({name or 'no name'})"

    def check(self) -> int:
        """Read the whole list once and return the number of rows.

        Raises
        ------
        RequestError
            at the first fault, in one sentence: doubled names, text where a number should be, impossible magnitudes,
            negative errors, types that are not MK notation, no rows. A spectrum that is not there is not a fault of
            the list: that row fails by itself later.
        """
        digests = array("Q")
        types: set[str] = set()
        n_rows = 0
        for chunk in self._chunks():
            self._check_values(chunk)
            for i, name in enumerate(chunk.text["name"]):
                if not name:
                    raise RequestError(f"{self._place(chunk.start + i, '')}: has no name; every target needs one.")
                digests.append(_digest(name))
            for i, text in enumerate(chunk.text.get("mk_type", ())):
                if text and text not in types:
                    self._check_type(text, self._place(chunk.start + i, chunk.text["name"][i]))
                    types.add(text)
            n_rows += chunk.size
        if n_rows == 0:
            raise RequestError(f"{self.path}: the target list has no rows.")
        self._check_doubles(digests)
        return n_rows

    def _check_values(self, chunk: _Chunk) -> None:
        for name, values in chunk.numbers.items():
            error = name.startswith("e_")
            if name in BANDS:
                low, high = MAG_RANGE
                what = f"magnitude {name} is %s, which no star has; leave the cell empty where there is none"
            elif error:
                low, high = 0.0, NUMBER_COLUMNS.get(name, ("", 0.0, MAX_MAG_ERROR))[2]
                what = f"{name} is %s; an error must be between 0 and {high:g}"
            else:
                unit, low, high = NUMBER_COLUMNS[name]
                what = f"{name} is %s, outside {low:g} to {high:g} {unit}"
            with np.errstate(invalid="ignore"):
                bad = np.isinf(values) | (values < low) | (values > high)
            if bad.any():
                i = int(np.argmax(bad))
                place = self._place(chunk.start + i, chunk.text["name"][i])
                raise RequestError(f"{place}: {what % f'{values[i]:g}'}.")
        if "parallax" in chunk.numbers:
            orphan = np.isfinite(chunk.numbers["parallax"]) & ~(chunk.numbers["e_parallax"] > 0)
            if orphan.any():
                i = int(np.argmax(orphan))
                raise RequestError(
                    f"{self._place(chunk.start + i, chunk.text['name'][i])}: the parallax has no error; "
                    "give e_parallax above 0, or leave both cells empty."
                )

    @staticmethod
    def _check_type(text: str, place: str) -> None:
        from starfathom.classify.mktype import MKType

        try:
            MKType.parse(text)
        except RequestError as fault:
            raise RequestError(f"{place}: {fault}") from None

    def _check_doubles(self, digests: array[int]) -> None:
        ordered = np.sort(np.frombuffer(digests, dtype=np.uint64))
        suspects = set(ordered[1:][ordered[1:] == ordered[:-1]].tolist())
        if not suspects:
            return
        # A shared digest is nearly always a shared name; look at the names themselves before saying so.
        seen: dict[str, int] = {}
        for chunk in self._chunks():
            for i, name in enumerate(chunk.text["name"]):
                if _digest(name) not in suspects:
                    continue
                row = chunk.start + i
                if name in seen:
                    raise RequestError(
                        f"{self.path}: the name {name} is in rows {seen[name] + 1} and {row + 1}; "
                        "every target needs a name of its own."
                    )
                seen[name] = row

    def targets(self) -> Iterator[Target]:
        """The rows in order, as :class:`Target`."""
        for chunk in self._chunks():
            text, numbers = chunk.text, {k: v.tolist() for k, v in chunk.numbers.items()}
            for i in range(chunk.size):
                mags = {}
                for band in self.bands:
                    value = numbers[band][i]
                    if value == value:
                        error = numbers[f"e_{band}"][i] if f"e_{band}" in numbers else math.nan
                        mags[band] = (value, error if error == error else DEFAULT_ERROR_MAG)
                yield Target(
                    index=chunk.start + i,
                    name=text["name"][i],
                    spectrum=self._resolved(text["spectrum"][i]) if "spectrum" in text else "",
                    mk_type=text["mk_type"][i] if "mk_type" in text else "",
                    magnitudes=mags,
                    ra_deg=_number(numbers, "ra", i),
                    dec_deg=_number(numbers, "dec", i),
                    parallax=_pair(numbers, "parallax", i, math.nan),
                    ebv=_pair(numbers, "ebv", i, 0.03),
                    group=text["group"][i] if "group" in text else "",
                    fwhm_angstrom=_number(numbers, "fwhm", i),
                    velocity_kms=_number(numbers, "velocity", i),
                )

    def _resolved(self, spectrum: str) -> str:
        if not spectrum or os.path.isabs(spectrum):
            return spectrum
        return os.path.normpath(self.folder / spectrum)

    def batches(self, size: int) -> Iterator[tuple[int, list[Target]]]:
        """(batch number, targets) with ``size`` targets a batch, which rows share one fixed by their place alone."""
        stream = self.targets()
        for number in itertools.count():
            batch = list(itertools.islice(stream, size))
            if not batch:
                return
            yield number, batch

    def checksum(self) -> str:
        """SHA-256 of the file, by which a resumed run knows its list again."""
        digest = hashlib.sha256()
        with open(self.path, "rb") as stream:
            while block := stream.read(1 << 20):
                digest.update(block)
        return digest.hexdigest()


def _digest(name: str) -> int:
    return int.from_bytes(hashlib.blake2b(name.encode(), digest_size=8).digest(), "big")


def _number(numbers: dict[str, list[float]], key: str, i: int) -> float | None:
    value = numbers[key][i] if key in numbers else math.nan
    return value if value == value else None


def _pair(numbers: dict[str, list[float]], key: str, i: int, default_error: float) -> tuple[float, float] | None:
    value = _number(numbers, key, i)
    if value is None:
        return None
    error = _number(numbers, f"e_{key}", i)
    return value, default_error if error is None else error


def _text(cell: Any) -> str:
    """A cell as text without blanks around; nothing for masked, None and NaN."""
    if isinstance(cell, str):
        return cell.strip()
    if cell is None or np.ma.is_masked(cell) or (isinstance(cell, float) and math.isnan(cell)):
        return ""
    if isinstance(cell, bytes):
        return cell.decode("utf-8", "replace").strip()
    return str(cell).strip()


def _first_line(fault: BaseException) -> str:
    lines = str(fault).strip().splitlines()
    return lines[0] if lines else type(fault).__name__


# Readers: ``head()`` gives (column names, unit of each that states one); ``chunks(columns)`` gives dicts of cells.


class _CsvReader:
    """CSV, TSV, blank-separated text and ECSV, with or without gzip."""

    def __init__(self, path: Path) -> None:
        self.path = path
        self._delimiter: str | None = None

    def _open(self) -> IO[str]:
        if self.path.suffix.lower() == ".gz":
            return gzip.open(self.path, "rt", encoding="utf-8-sig", newline="")
        return open(self.path, encoding="utf-8-sig", newline="")

    def head(self) -> tuple[list[str], dict[str, str]]:
        comments: list[str] = []
        with self._open() as stream:
            for line in stream:
                if line.startswith("#"):
                    comments.append(line[1:].strip())
                elif line.strip():
                    break
            else:
                raise RequestError(f"{self.path}: the target list is empty.")
        ecsv = bool(comments) and comments[0].startswith("%ECSV")
        delimiter, units = self._ecsv_facts(comments) if ecsv else (None, {})
        if delimiter is None:
            delimiter = next((d for d in ("\t", ",", ";") if d in line), " ")
        self._delimiter = delimiter
        return [c.strip() for c in next(self._rows([line]))], units

    def _ecsv_facts(self, comments: list[str]) -> tuple[str, dict[str, str]]:
        import yaml

        class Loader(yaml.SafeLoader):
            """Takes every tag (ECSV has its own) as the plain value under it."""

        def plain(loader: Any, _suffix: str, node: Any) -> Any:
            if isinstance(node, yaml.MappingNode):
                return loader.construct_mapping(node, deep=True)
            if isinstance(node, yaml.SequenceNode):
                return loader.construct_sequence(node, deep=True)
            return loader.construct_scalar(node)

        Loader.add_multi_constructor("", plain)
        lines = "\n".join(c for c in self._header_lines() if not c.startswith("%"))
        try:
            facts = yaml.load(lines, Loader)
            units = {c["name"]: str(c.get("unit", "")) for c in facts["datatype"]}
        except (yaml.YAMLError, KeyError, TypeError) as fault:
            raise RequestError(f"{self.path}: its ECSV header cannot be read ({_first_line(fault)}).") from fault
        return facts.get("delimiter", " "), units

    def _header_lines(self) -> Iterator[str]:
        with self._open() as stream:
            for line in stream:
                if not line.startswith("#"):
                    return
                yield line[2:].rstrip("\n\r") if line.startswith("# ") else line[1:].rstrip("\n\r")

    def _rows(self, lines: Iterable[str]) -> Iterator[list[str]]:
        if self._delimiter == " ":
            return csv.reader((" ".join(line.split()) for line in lines), delimiter=" ")
        return csv.reader(lines, delimiter=self._delimiter or ",")

    def chunks(self, columns: list[str]) -> Iterator[dict[str, Any]]:
        with self._open() as stream:
            rows = (r for r in self._rows(line for line in stream if not line.startswith("#")) if r)
            names = [c.strip() for c in next(rows)]
            places = {c: names.index(c) for c in columns}
            row_number = 0
            while chunk := list(itertools.islice(rows, CHUNK_ROWS)):
                for i, row in enumerate(chunk):
                    if len(row) != len(names):
                        raise RequestError(
                            f"{self.path}: row {row_number + i + 1} has {len(row)} cells where the "
                            f"header names {len(names)} columns; quote cells that hold the separator."
                        )
                row_number += len(chunk)
                yield {c: [row[p] for row in chunk] for c, p in places.items()}


class _FitsReader:
    """The first binary or ASCII table of a FITS file."""

    def __init__(self, path: Path) -> None:
        self.path = path

    def _table(self, hdus: Any) -> Any:
        for hdu in hdus:
            if getattr(hdu, "columns", None) is not None and hdu.header.get("NAXIS", 0) == 2:
                return hdu
        raise RequestError(f"{self.path}: this FITS file holds no table.")

    def head(self) -> tuple[list[str], dict[str, str]]:
        from astropy.io import fits

        with fits.open(self.path, memmap=True) as hdus:
            columns = self._table(hdus).columns
            return list(columns.names), {c.name: c.unit or "" for c in columns}

    def chunks(self, columns: list[str]) -> Iterator[dict[str, Any]]:
        from astropy.io import fits

        with fits.open(self.path, memmap=True) as hdus:
            table = self._table(hdus)
            for start in range(0, len(table.data), CHUNK_ROWS):
                part = table.data[start : start + CHUNK_ROWS]
                yield {
                    c: part[c].tolist() if part[c].dtype.kind in "SUO" else np.asarray(part[c], dtype=np.float64)
                    for c in columns
                }


class _ParquetReader:
    """A Parquet file, read by row groups; units from the fields' own metadata."""

    def __init__(self, path: Path) -> None:
        self.path = path

    def head(self) -> tuple[list[str], dict[str, str]]:
        import pyarrow.parquet as pq

        schema = pq.ParquetFile(self.path).schema_arrow
        units = {f.name: f.metadata.get(b"unit", b"").decode() for f in schema if f.metadata}
        return list(schema.names), units

    def chunks(self, columns: list[str]) -> Iterator[dict[str, Any]]:
        import pyarrow.parquet as pq

        with pq.ParquetFile(self.path) as table:
            for batch in table.iter_batches(batch_size=CHUNK_ROWS, columns=columns):
                yield {c: batch.column(c).to_pylist() for c in columns}


class _VOTableReader:
    """A VOTable, read whole: for lists of ordinary size."""

    def __init__(self, path: Path) -> None:
        self.path = path
        self._table: Any = None

    def head(self) -> tuple[list[str], dict[str, str]]:
        from astropy.table import Table

        self._table = Table.read(self.path, format="votable")
        return list(self._table.colnames), {c.name: str(c.unit or "") for c in self._table.columns.values()}

    def chunks(self, columns: list[str]) -> Iterator[dict[str, Any]]:
        for start in range(0, len(self._table), CHUNK_ROWS):
            part = self._table[start : start + CHUNK_ROWS]
            yield {
                c: list(part[c])
                if part[c].dtype.kind in "SUO"
                else np.ma.filled(np.ma.asarray(part[c], dtype=np.float64), np.nan)
                for c in columns
            }


_READERS: dict[str, type[_CsvReader] | type[_FitsReader] | type[_ParquetReader] | type[_VOTableReader]] = {
    ".ecsv": _CsvReader,
    ".csv": _CsvReader,
    ".tsv": _CsvReader,
    ".txt": _CsvReader,
    ".dat": _CsvReader,
    ".fits": _FitsReader,
    ".fit": _FitsReader,
    ".parquet": _ParquetReader,
    ".pq": _ParquetReader,
    ".vot": _VOTableReader,
    ".xml": _VOTableReader,
    ".votable": _VOTableReader,
}


def _reader_of(path: Path) -> _CsvReader | _FitsReader | _ParquetReader | _VOTableReader:
    suffixes = [s.lower() for s in path.suffixes]
    suffix = suffixes[-1] if suffixes else ""
    if suffix == ".gz" and len(suffixes) > 1:
        suffix = suffixes[-2]
        if _READERS.get(suffix) is _ParquetReader:
            suffix = ""
    if suffix not in _READERS:
        raise RequestError(
            f"{path}: the suffix {suffix or '(none)'} names no kind of table; "
            "a target list is .ecsv, .csv, .fits or .parquet."
        )
    return _READERS[suffix](path)
