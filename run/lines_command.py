"""``starfathom lines FILE``: measure the diagnostic lines, say so on the terminal, write the table, draw the fits."""

from __future__ import annotations

import json
import math
from typing import TYPE_CHECKING, Any

from starfathom.classify.errors import SpectrumError

if TYPE_CHECKING:
    from starfathom.classify.lines.table import LineTable
    from starfathom.classify.spectrum import PlainSpectrum

#: A velocity less certain than this, or larger than this, is not taken out.
_VELOCITY_ERROR_KMS = 60.0
_VELOCITY_LIMIT_KMS = 450.0
#: Columns of the printed table; some only where there is room.
_HEADINGS = ("feature", "for", "rest A", "EW A", "by", "FWHM A", "intrinsic", "depth", "km/s", "flags")
_ROOMY_ONLY = ("for", "by", "intrinsic", "depth", "km/s")
_ROOMY_WIDTH = 112
_PIPED_WIDTH = 130


def run(path: str, *, output: str | None = None, fwhm_angstrom: float | None = None, medium: str | None = None,
        velocity_kms: float | None = None, read_as: str | None = None, reference: bool = False,
        plot: str | None = None, as_json: bool = False) -> int:
    """Measure one spectrum; returns the exit code 0.

    Parameters
    ----------
    path : spectrum
    output : table to write, format by suffix
    fwhm_angstrom : line-spread FWHM; measured against the library if neither given nor in the header
    medium : "air" or "vacuum", whatever the file says
    velocity_kms : velocity to take out; measured against the library if neither given nor in the header
    read_as : kind of file
    reference : take the values from specutils, call by call
    plot : picture of the fits to draw
    as_json : print JSON and nothing else

    Raises
    ------
    SpectrumError : the file cannot be read or measured
    RequestError : an option or a place to write cannot be used
    """
    from starfathom.classify.lines.table import COLUMNS, measure_lines
    from starfathom.classify.reading import read_plain

    spectrum = read_plain(path, medium=medium, read_as=read_as)
    velocity_kms, fwhm_angstrom, notes = _frame(spectrum, medium, velocity_kms, fwhm_angstrom)
    table = measure_lines(spectrum, fwhm_angstrom=fwhm_angstrom, velocity_kms=velocity_kms, reference=reference,
                          notes=notes)
    if output is not None:
        from starfathom.tables import write_table

        meta = {k: "; ".join(v) if isinstance(v, list) else v for k, v in table.meta.items()}
        write_table(output, table.rows, COLUMNS, meta)
    if plot is not None:
        from starfathom.classify.lines.figure import draw

        draw(table, plot)
    if as_json:
        rows = [{k: _plain(v) for k, v in row.items()} for row in table.rows]
        print(json.dumps(table.meta | {"lines": rows}, ensure_ascii=False))
    else:
        show(table, [p for p in (output, plot) if p])
    return 0


def _frame(spectrum: PlainSpectrum, medium: str | None, velocity_kms: float | None,
           fwhm_angstrom: float | None) -> tuple[float | None, float | None, tuple[str, ...]]:
    """Velocity and line spread: as given, else of the header, else measured against the library where that holds."""
    notes: list[str] = []
    need_velocity = velocity_kms is None and "velocity_kms" not in spectrum.meta
    need_fwhm = fwhm_angstrom is None and "fwhm_angstrom" not in spectrum.meta
    if not (need_velocity or need_fwhm):
        return velocity_kms, fwhm_angstrom, ()
    from starfathom.classify.engine import Classifier, Settings

    try:
        prepared = Classifier.load().prepare(
            spectrum, Settings(medium=medium, fwhm_angstrom=fwhm_angstrom, velocity_kms=velocity_kms))
    except SpectrumError:
        return velocity_kms, fwhm_angstrom, ("velocity and line spread could not be measured against the library",)
    if need_velocity:
        sure = prepared.velocity_err_kms <= _VELOCITY_ERROR_KMS and abs(prepared.velocity_kms) <= _VELOCITY_LIMIT_KMS
        velocity_kms = prepared.velocity_kms if sure else 0.0
        notes.append(f"velocity {velocity_kms:.0f} +- {prepared.velocity_err_kms:.0f} km/s measured against the library"
                     if sure else "the velocity could not be measured: taken as zero; give it with --velocity")
    if need_fwhm:
        fwhm_angstrom = prepared.fwhm_angstrom
        notes.append(f"line spread {fwhm_angstrom:.2f} A {prepared.fwhm_source}; give a better one with --fwhm")
    return velocity_kms, fwhm_angstrom, tuple(notes)


def _plain(value: Any) -> Any:
    if isinstance(value, float):
        return round(value, 6) if math.isfinite(value) else None
    return value if isinstance(value, str | bool | int) or value is None else float(value)


def show(table: LineTable, written: list[str] | None = None) -> None:
    """Print the table: what is there line by line, limits and gaps in a few words below."""
    from rich.console import Console
    from rich.table import Table
    from rich.text import Text

    console = Console(highlight=False)
    if not console.is_terminal:
        console = Console(highlight=False, width=_PIPED_WIDTH)
    narrow = console.width < _ROOMY_WIDTH
    console.print(Text(f"{table.path or 'spectrum'}", style="bold"))
    errors = "errors estimated from the spectrum" if table.sigma_estimated else "errors from the file"
    console.print(f"velocity {table.velocity_kms:.0f} km/s taken out, line spread {table.fwhm_angstrom:.2f} A")
    console.print(errors)
    grid = Table(box=None, padding=(0, 1), header_style="dim", pad_edge=False)
    for name in _HEADINGS:
        if not (narrow and name in _ROOMY_ONLY):
            grid.add_column(name, justify="left" if name in ("feature", "for", "flags") else "right",
                            no_wrap=name != "flags")
    for row in table.rows:
        if row["detected_ok"]:
            grid.add_row(*(cell for name, cell in zip(_HEADINGS, _cells(row)) if not (narrow and name in _ROOMY_ONLY)))
    console.print(grid)
    whole = [r for r in table.rows if r["kind"] != "component"]
    absent = [r for r in whole if not r["detected_ok"] and _finite(r["limit_angstrom"])]
    missing = [r["feature"] for r in whole if not _finite(r["limit_angstrom"])]
    if absent:
        console.print(Text("Not there (3-sigma limit in A): ", style="dim")
                      + Text(", ".join(f"{r['feature']} < {r['limit_angstrom']:.2g}" for r in absent)))
    if missing:
        console.print(Text("Not on the spectrum: ", style="dim") + Text(", ".join(missing)))
    for note in table.notes:
        console.print(Text("Note: ", style="dim") + Text(note + "."))
    for path in written or []:
        console.print(Text("Written: ", style="dim") + Text(path))


def _finite(value: Any) -> bool:
    return isinstance(value, float) and math.isfinite(value)


def _pair(value: float, error: float, digits: int) -> str:
    if not _finite(value):
        return ""
    return f"{value:.{digits}f} ± {error:.{digits}f}" if _finite(error) else f"{value:.{digits}f}"


def _cells(row: dict[str, Any]) -> list[str]:
    """The cells of one row, in the order of the headings."""
    indent = "  " if row["kind"] == "component" else ""
    inner = f"{row['intrinsic_fwhm_angstrom']:.2f}" if _finite(row["intrinsic_fwhm_angstrom"]) else ""
    if inner and not row["intrinsic_ok"]:
        inner = f"< {inner}"
    return [indent + row["feature"], row["types"] if not indent else "", f"{row['wavelength_angstrom']:.1f}",
            _pair(row["ew_angstrom"], row["ew_err_angstrom"], 3), row["ew_from"],
            _pair(row["fwhm_angstrom"], row["fwhm_err_angstrom"], 2), inner, _pair(row["depth"], math.nan, 3),
            _pair(row["velocity_kms"], row["velocity_err_kms"], 0), row["flags"].replace(",", ", ")]
