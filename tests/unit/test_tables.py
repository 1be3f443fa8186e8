"""Result tables: what is written is what is read back, in every format, and never half of it."""

from __future__ import annotations

import math
from pathlib import Path
from typing import Any

import pytest
from astropy.table import Table

from starfathom import tables
from starfathom.classify.assignment import COLUMNS, Assignment
from starfathom.classify.errors import RequestError

SUFFIXES = ("ecsv", "csv", "fits", "vot", "parquet")


@pytest.fixture
def rows() -> list[dict[str, Any]]:
    first = Assignment(
        file="night, first/a 'b' \"c\".fits", status="typed", mk_type="G2 V", t_code=42.04, abs_mag_v=4.81,
        abs_mag_v_ok=True, velocity_kms=-0.0, nearest=("HD 1", "HD 2"), remark="line one\nline two",
    )  # fmt: skip
    return [first.row(), Assignment(file="b.fits", reason="It is empty.").row()]


def read(path: Path) -> Table:
    if path.suffix == ".parquet":
        import pyarrow.parquet as pq

        return Table(rows=pq.read_table(path).to_pylist())
    return Table.read(path)


@pytest.mark.parametrize("suffix", SUFFIXES)
def test_read_back(rows: list[dict[str, Any]], tmp_path: Path, suffix: str) -> None:
    path = tmp_path / f"out.{suffix}"
    tables.write_table(path, rows, COLUMNS, {"made_by": "starfathom", "seed": 3})
    table = read(path)
    assert table.colnames == [c[0] for c in COLUMNS]
    assert list(table["file"]) == [rows[0]["file"], "b.fits"]
    assert table["t_code"][0] == 42.04
    assert table["t_code"][1] is table.masked or math.isnan(
        float(Table(table, masked=True)["t_code"].filled(math.nan)[1])
    )
    assert list(table["abs_mag_v_ok"]) in ([True, False], ["True", "False"])
    assert next(iter(table["nearest"])) == "HD 1,HD 2"


@pytest.mark.parametrize("suffix", ("ecsv", "fits", "vot"))
def test_units_descriptions_and_ucds(rows: list[dict[str, Any]], tmp_path: Path, suffix: str) -> None:
    path = tmp_path / f"out.{suffix}"
    tables.write_table(path, rows, COLUMNS)
    table = read(path)
    assert str(table["velocity_kms"].unit) == "km / s"
    assert str(table["abs_mag_v"].unit) == "mag"
    assert table["fwhm_angstrom"].unit.to("nm") == pytest.approx(0.1)
    if suffix == "fits":
        number = table.colnames.index("velocity_kms") + 1
        assert table.meta[f"TCOMM{number}"] == "as observed, positive receding"
        assert table.meta[f"TUCD{number}"] == "spect.dopplerVeloc.opt"
    else:
        assert table["velocity_kms"].description == "as observed, positive receding"
        assert table["velocity_kms"].meta["ucd"] == "spect.dopplerVeloc.opt"


def test_parquet_carries_units(rows: list[dict[str, Any]], tmp_path: Path) -> None:
    import pyarrow.parquet as pq

    tables.write_table(tmp_path / "out.parquet", rows, COLUMNS, {"seed": 3})
    schema = pq.read_schema(tmp_path / "out.parquet")
    assert schema.field("abs_mag_v").metadata[b"unit"] == b"mag"
    assert schema.metadata[b"seed"] == b"3"


def test_every_ucd_is_of_the_standard_vocabulary() -> None:
    from astropy.io.votable.ucd import parse_ucd

    for ucd in {*tables.UCDS.values(), "stat.probability"}:
        parse_ucd(ucd, check_controlled_vocabulary=True)


@pytest.mark.parametrize("suffix", SUFFIXES)
def test_the_same_rows_give_the_same_bytes(rows: list[dict[str, Any]], tmp_path: Path, suffix: str) -> None:
    paths = [tmp_path / f"{name}.{suffix}" for name in "ab"]
    for path in paths:
        tables.write_table(path, rows, COLUMNS, {"seed": 3})
    assert paths[0].read_bytes() == paths[1].read_bytes()


@pytest.mark.parametrize("suffix", SUFFIXES)
def test_a_failure_in_the_middle_leaves_the_old_table(rows: list[dict[str, Any]], tmp_path: Path, suffix: str) -> None:
    path = tmp_path / f"out.{suffix}"
    tables.write_table(path, rows, COLUMNS)
    before = path.read_bytes()

    def broken() -> Any:
        yield rows[0]
        raise KeyboardInterrupt

    with pytest.raises(KeyboardInterrupt):
        tables.write_table(path, broken, COLUMNS)
    assert path.read_bytes() == before
    assert list(tmp_path.iterdir()) == [path]


def test_streamed_formats_hold_a_few_rows_at_a_time(rows: list[dict[str, Any]], tmp_path: Path) -> None:
    import tracemalloc

    def many(n: int) -> Any:
        return lambda: (rows[0] for _ in range(n))

    peaks = []
    for n in (4_200, 9_000):
        tracemalloc.start()
        tables.write_table(tmp_path / "out.ecsv", many(n), COLUMNS)
        tables.write_table(tmp_path / "out.parquet", many(n), COLUMNS)
        peaks.append(tracemalloc.get_traced_memory()[1])
        tracemalloc.stop()
    assert peaks[1] < 1.3 * peaks[0]


def test_parts_are_numbered_and_old_ones_removed(rows: list[dict[str, Any]], tmp_path: Path) -> None:
    import pyarrow.dataset as ds

    many = [rows[0] | {"file": f"{i}.fits"} for i in range(25)]
    assert len(tables.write_parts(tmp_path / "p", many, COLUMNS, 10)) == 3
    paths = tables.write_parts(tmp_path / "p", many[:15], COLUMNS, 10)
    assert sorted((tmp_path / "p").iterdir()) == paths
    assert ds.dataset(tmp_path / "p").to_table()["file"].to_pylist() == [f"{i}.fits" for i in range(15)]


@pytest.mark.parametrize("name", ("out.xlsx", "out", "out.fits.bz2"))
def test_an_unknown_suffix_is_named(rows: list[dict[str, Any]], tmp_path: Path, name: str) -> None:
    with pytest.raises(RequestError, match="names no table format"):
        tables.write_table(tmp_path / name, rows, COLUMNS)


def test_a_missing_folder_is_one_sentence(rows: list[dict[str, Any]], tmp_path: Path) -> None:
    with pytest.raises(RequestError, match="cannot be written"):
        tables.write_table(tmp_path / "no" / "out.csv", rows, COLUMNS)
    with pytest.raises(RequestError, match="a folder"):
        (tmp_path / "d.csv").mkdir()
        tables.write_table(tmp_path / "d.csv", rows, COLUMNS)


def test_no_rows_are_a_table_too(tmp_path: Path) -> None:
    for suffix in SUFFIXES:
        tables.write_table(tmp_path / f"out.{suffix}", [], COLUMNS)
        assert len(read(tmp_path / f"out.{suffix}")) == 0
