"""Writing result tables: ECSV, CSV, FITS, VOTable or Parquet, chosen by the suffix of the file name.

A table is described once, by columns of the form (name, unit, decimals or None for text, meaning) such as
:data:`starfathom.classify.assignment.COLUMNS`; units, meanings and UCDs go into every format that takes them. Text
formats and Parquet are written row by row in flat memory and without astropy. Every file is written aside and
renamed when whole, so that a table on disk is never half a table. Nothing in a table depends on the clock.
"""

from __future__ import annotations

import csv
import io
import itertools
import math
import os
from collections.abc import Callable, Iterable, Iterator, Mapping, Sequence
from contextlib import contextmanager
from pathlib import Path
from typing import IO, TYPE_CHECKING, Any

from starfathom.classify.errors import RequestError

if TYPE_CHECKING:
    import pyarrow as pa
    from astropy.table import Table

#: (name, unit or "", decimals or None for text, meaning)
Column = tuple[str, str, int | None, str]
Row = Mapping[str, Any]
#: A function that starts the rows from the beginning each time it is called (two passes are needed for FITS).
RowSource = Callable[[], Iterable[Row]]

SUFFIXES = {
    ".ecsv": "ecsv",
    ".csv": "csv",
    ".fits": "fits",
    ".fit": "fits",
    ".vot": "votable",
    ".xml": "votable",
    ".votable": "votable",
    ".parquet": "parquet",
    ".pq": "parquet",
}

#: Rows held at a time when a format is streamed.
CHUNK_ROWS = 4096

#: IVOA UCD1+ words of the columns that have one (Preite Martinez et al. 2018, IVOA Recommendation).
UCDS = {
    "name": "meta.id;meta.main",
    "file": "meta.id;meta.file",
    "mk_type": "src.spType",
    "object_kind": "src.class",
    "other_type": "src.spType",
    "status": "meta.code.status",
    "abs_mag_v": "phot.mag;em.opt.V;phys.magAbs",
    "abs_mag_v_err": "stat.error;phys.magAbs;em.opt.V",
    "log_g": "phys.gravity",
    "log_g_err": "stat.error;phys.gravity",
    "velocity_kms": "spect.dopplerVeloc.opt",
    "velocity_err_kms": "stat.error;spect.dopplerVeloc.opt",
    "snr": "stat.snr",
    "fwhm_angstrom": "spect.resolution",
    "ra": "pos.eq.ra",
    "dec": "pos.eq.dec",
    "ebv": "phot.color.excess",
    "ebv_err": "stat.error;phot.color.excess",
    "a_v": "phys.absorption;em.opt.V",
    "a_v_err": "stat.error;phys.absorption;em.opt.V",
    "distance_pc": "pos.distance;stat.median",
    "distance_lo_pc": "pos.distance;stat.min",
    "distance_hi_pc": "pos.distance;stat.max",
    "distance_lo95_pc": "pos.distance;stat.min",
    "distance_hi95_pc": "pos.distance;stat.max",
    "distance_class_pc": "pos.distance",
    "distance_spec_pc": "pos.distance",
    "teff_k": "phys.temperature.effective",
    "teff_k_err": "stat.error;phys.temperature.effective",
    "log_lum_lsun": "phys.luminosity",
    "log_lum_lsun_err": "stat.error;phys.luminosity",
    "radius_rsun": "phys.size.radius",
    "radius_rsun_err": "stat.error;phys.size.radius",
    "ew_angstrom": "spect.line.eqWidth",
    "ew_err_angstrom": "stat.error;spect.line.eqWidth",
    "wavelength_angstrom": "em.wl",
    "center_angstrom": "em.wl.central;spect.line",
    "depth": "spect.line.intensity",
    "notes": "meta.note",
    "remark": "meta.note",
}


def ucd_of(name: str) -> str:
    """UCD1+ of a column, or "" where none is stated."""
    if name.startswith("p_"):
        return "stat.probability"
    return UCDS.get(name, "")


def format_of(path: str | os.PathLike[str]) -> str:
    """Format named by the suffix of ``path``: ecsv, csv, fits, votable or parquet.

    Raises
    ------
    RequestError
        for any other suffix.
    """
    suffix = Path(path).suffix.lower()
    if suffix not in SUFFIXES:
        raise RequestError(
            f"{os.fspath(path)}: the suffix {suffix or '(none)'} names no table format; "
            f"use one of {', '.join(SUFFIXES)}."
        )
    return SUFFIXES[suffix]


@contextmanager
def written_aside(path: str | os.PathLike[str]) -> Iterator[Path]:
    """Give a scratch name beside ``path``; rename it to ``path`` when the block ends well, else remove it.

    The contents reach the disk before the name does, so that a power cut leaves the old file or the new one.

    Raises
    ------
    RequestError
        when the folder does not exist, or the file cannot be written (disk full, no permission).
    """
    path = Path(path)
    if path.is_dir():
        raise RequestError(f"{path}: this is a folder; give the name of a file to write.")
    scratch = path.with_name(f".{path.stem}.{os.getpid()}.partial{path.suffix}")
    try:
        yield scratch
        with open(scratch, "rb") as written:
            os.fsync(written.fileno())
        os.replace(scratch, path)
    except OSError as fault:
        _remove(scratch)
        raise RequestError(
            f"{path}: cannot be written ({fault.strerror or fault}); free some space or choose another place with -o."
        ) from fault
    except BaseException:
        _remove(scratch)
        raise


def _remove(path: Path) -> None:
    try:
        path.unlink()
    except OSError:
        pass


def write_text_aside(path: str | os.PathLike[str], text: str) -> None:
    """Write ``text`` (UTF-8) to ``path``, aside and then renamed."""
    with written_aside(path) as scratch:
        scratch.write_text(text, encoding="utf-8", newline="\n")


def write_table(
    path: str | os.PathLike[str],
    rows: Sequence[Row] | RowSource,
    columns: Sequence[Column],
    meta: Mapping[str, Any] | None = None,
) -> None:
    """Write a table in the format that the suffix of ``path`` names.

    Parameters
    ----------
    path : file to write; an old one is replaced only when the new one is whole
    rows : a sequence of dicts with the columns' names as keys, or a function that returns a fresh iterable of them
    columns : (name, unit or "", decimals or None for text, meaning) of each column, in order
    meta : keys and plain values (text, numbers) to keep with the table where the format has a place for them

    Raises
    ------
    RequestError
        for an unknown suffix or a place that cannot be written.
    """
    kind = format_of(path)
    source: RowSource = rows if callable(rows) else (lambda: rows)
    facts = dict(meta or {})
    with written_aside(path) as scratch:
        if kind in ("ecsv", "csv"):
            with open(scratch, "w", encoding="utf-8", newline="") as stream:
                _write_csv(stream, source(), columns, facts, header=kind == "ecsv")
        elif kind == "parquet":
            _write_parquet(scratch, source(), columns, facts)
        else:
            table = to_table(source(), columns, facts)
            if kind == "fits":
                _write_fits(scratch, table)
            else:
                _write_votable(scratch, table)


def write_parts(
    folder: str | os.PathLike[str],
    rows: Iterable[Row],
    columns: Sequence[Column],
    part_rows: int,
    meta: Mapping[str, Any] | None = None,
) -> list[Path]:
    """Write ``rows`` as numbered Parquet files of ``part_rows`` rows; returns their paths in order.

    Parts left there by an earlier, longer table are removed, so that the folder read as one data set is the table.
    """
    folder = Path(folder)
    folder.mkdir(parents=True, exist_ok=True)
    stream, paths = iter(rows), []
    for number in itertools.count():
        part = itertools.islice(stream, part_rows)
        first = next(part, None)
        if first is None:
            break
        path = folder / f"part-{number:05d}.parquet"
        with written_aside(path) as scratch:
            _write_parquet(scratch, itertools.chain([first], part), columns, dict(meta or {}))
        paths.append(path)
    for old in set(folder.glob("part-*.parquet")) - set(paths):
        old.unlink()
    return paths


def is_truth(name: str) -> bool:
    """Whether a column holds true or false: by the naming rule of the project, those ending in ``_ok``."""
    return name.endswith("_ok")


def _cell(value: Any, column: Column) -> Any:
    """The value in the column's own type: text, float (NaN for none) or bool."""
    name, _unit, decimals, _doc = column
    if decimals is not None:
        if value is None or value == "":
            return math.nan
        # "+ 0.0" turns a rounded -0.0 into 0.0.
        return round(float(value), decimals) + 0.0
    if is_truth(name):
        return bool(value)
    return "" if value is None else str(value)


# ECSV and CSV ------------------------------------------------------------------------------------------------------


def _yaml_text(text: str) -> str:
    """A double-quoted YAML scalar (JSON strings are valid YAML)."""
    import json

    return json.dumps(str(text), ensure_ascii=False)


def ecsv_header(columns: Sequence[Column], meta: Mapping[str, Any]) -> str:
    """The comment block that opens an ECSV 1.0 file (astropy APE 6)."""
    out = ["%ECSV 1.0", "---", "delimiter: ','", "datatype:"]
    for name, unit, decimals, doc in columns:
        kind = "float64" if decimals is not None else "bool" if is_truth(name) else "string"
        entry = f"- {{name: {_yaml_text(name)}, "
        if unit:
            entry += f"unit: {_yaml_text(unit)}, "
        entry += f"datatype: {kind}, description: {_yaml_text(doc)}"
        ucd = ucd_of(name)
        out.append(entry + (f", meta: {{ucd: {_yaml_text(ucd)}}}}}" if ucd else "}"))
    if meta:
        out.append("meta: !!omap")
        for key, value in meta.items():
            shown = value if isinstance(value, int | float) and not isinstance(value, bool) else _yaml_text(value)
            out.append(f"- {{{_yaml_text(key)}: {shown}}}")
    out.append("schema: astropy-2.0")
    return "".join(f"# {line}\n" for line in out)


def _write_csv(
    stream: IO[str], rows: Iterable[Row], columns: Sequence[Column], meta: Mapping[str, Any], *, header: bool
) -> None:
    if header:
        stream.write(ecsv_header(columns, meta))
    writer = csv.writer(stream, lineterminator="\n")
    writer.writerow([c[0] for c in columns])
    for row in rows:
        writer.writerow([_csv_cell(row.get(c[0]), c, header) for c in columns])


def _csv_cell(value: Any, column: Column, ecsv: bool) -> str:
    value = _cell(value, column)
    if isinstance(value, bool):
        return "True" if value else "False"
    if isinstance(value, float):
        if math.isnan(value):
            return "nan" if ecsv else ""
        decimals = column[2]
        return f"{value:.{decimals}f}" if decimals is not None else repr(value)
    # A line break inside a cell is legal CSV but breaks line-by-line readers.
    return " ".join(value.splitlines()) if "\n" in value or "\r" in value else value


# Parquet -----------------------------------------------------------------------------------------------------------


def parquet_schema(columns: Sequence[Column], meta: Mapping[str, Any]) -> pa.Schema:
    """Arrow schema with unit, meaning and UCD of each column in the field's own metadata."""
    import pyarrow as pa

    fields = []
    for name, unit, decimals, doc in columns:
        kind = pa.float64() if decimals is not None else pa.bool_() if is_truth(name) else pa.string()
        facts = {"unit": unit, "description": doc, "ucd": ucd_of(name)}
        fields.append(pa.field(name, kind, metadata={k: v for k, v in facts.items() if v}))
    return pa.schema(fields, metadata={str(k): str(v) for k, v in meta.items()})


def _write_parquet(path: Path, rows: Iterable[Row], columns: Sequence[Column], meta: Mapping[str, Any]) -> None:
    import pyarrow as pa
    import pyarrow.parquet as pq

    schema = parquet_schema(columns, meta)
    stream = iter(rows)
    with pq.ParquetWriter(path, schema, compression="zstd") as writer:
        while chunk := list(itertools.islice(stream, CHUNK_ROWS)):
            arrays = [
                pa.array([_cell(row.get(c[0]), c) for row in chunk], type=schema.field(c[0]).type) for c in columns
            ]
            writer.write_table(pa.Table.from_arrays(arrays, schema=schema))


# FITS and VOTable, through astropy ---------------------------------------------------------------------------------


def to_table(rows: Iterable[Row], columns: Sequence[Column], meta: Mapping[str, Any] | None = None) -> Table:
    """The rows as an ``astropy.table.Table`` with units, descriptions and UCDs (``column.meta['ucd']``)."""
    import numpy as np
    from astropy.table import Column as AstropyColumn
    from astropy.table import Table

    held: list[list[Any]] = [[] for _ in columns]
    for row in rows:
        for cells, column in zip(held, columns):
            cells.append(_cell(row.get(column[0]), column))
    table = Table(meta=dict(meta or {}))
    for cells, (name, unit, decimals, doc) in zip(held, columns):
        dtype = float if decimals is not None else bool if is_truth(name) else str
        ucd = ucd_of(name)
        table[name] = AstropyColumn(
            np.array(cells, dtype=dtype), unit=unit or None, description=doc, meta={"ucd": ucd} if ucd else {}
        )
    return table


def _write_fits(path: Path, table: Table) -> None:
    """FITS bintable with TUNITn, and the meaning (TCOMMn) and UCD (TUCDn) of each column."""
    import numpy as np
    from astropy.io import fits

    plain = table.copy()
    facts, plain.meta = dict(plain.meta), {}
    for name in plain.colnames:
        if plain[name].dtype.kind == "U":
            # FITS tables hold ASCII only; a text column also needs at least one character of width.
            plain[name] = np.array([_ascii(v) for v in plain[name]] or [""], dtype="S")[: len(plain)]
            plain[name] = plain[name].astype(f"S{max(1, plain[name].dtype.itemsize)}")
    hdu = fits.table_to_hdu(plain)
    hdu.header["EXTNAME"] = "RESULTS"
    for number, name in enumerate(table.colnames, start=1):
        hdu.header[f"TCOMM{number}"] = _ascii(table[name].description)
        if table[name].unit is not None:
            hdu.header[f"TUNIT{number}"] = table[name].unit.to_string("fits")
        if table[name].meta.get("ucd"):
            hdu.header[f"TUCD{number}"] = table[name].meta["ucd"]
    for key, value in facts.items():
        hdu.header.add_comment(_ascii(f"{key} = {value}"))
    fits.HDUList([fits.PrimaryHDU(), hdu]).writeto(path)


def _ascii(text: str) -> str:
    return str(text).encode("ascii", "replace").decode("ascii")


def _write_votable(path: Path, table: Table) -> None:
    import warnings

    from astropy.io.votable.tree import Info, VOTableFile
    from astropy.units import UnitsWarning

    facts, table.meta = dict(table.meta), {}
    held = io.BytesIO()
    with warnings.catch_warnings():
        # VOUnit would rather have 0.1 nm; every VO tool reads Angstrom.
        warnings.simplefilter("ignore", UnitsWarning)
        tree = VOTableFile.from_table(table, table_id="results")
        for field in tree.get_first_table().fields:
            ucd = ucd_of(field.name)
            if ucd:
                field.ucd = ucd
        for key, value in facts.items():
            tree.infos.append(Info(ID=_xml_id(key), name=str(key), value=str(value)))
        tree.to_xml(held)
    path.write_bytes(held.getvalue())


def _xml_id(key: str) -> str:
    return "".join(c if c.isalnum() else "_" for c in f"info_{key}")
