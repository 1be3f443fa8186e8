"""Target lists: read alike from every format, faults told in one sentence."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest
from astropy.table import MaskedColumn, Table

from starfathom.classify.errors import RequestError
from starfathom.distance import Photometry
from starfathom.targets import BANDS, DEFAULT_ERROR_MAG, Target, TargetList

HEAD = "name,mk_type,V,e_V,B,e_B"


def listed(folder: Path, text: str, name: str = "list.csv") -> TargetList:
    path = folder / name
    path.write_text(text)
    return TargetList(path)


def whole() -> Table:
    return Table({
        "name": ["HD 1", "HD 2"],
        "spectrum": ["a.fits", ""],
        "mk_type": ["", "K0 III"],
        "V": [9.81, 10.2],
        "e_V": [0.02, 0.01],
        "B": MaskedColumn([10.44, 0.0], mask=[False, True]),
        "ra": [10.5, 11.5],
        "dec": [-5.0, 5.0],
        "parallax": [5.9, np.nan],
        "e_parallax": [0.3, np.nan],
        "group": ["g", ""],
        "comment": ["x", "y"],
    })  # fmt: skip


@pytest.mark.parametrize("suffix", ("csv", "ecsv", "fits", "parquet", "vot", "tsv", "csv.gz"))
def test_the_same_targets_from_every_format(tmp_path: Path, suffix: str) -> None:
    path = tmp_path / f"list.{suffix}"
    table = whole()
    if suffix == "parquet":
        import pyarrow as pa
        import pyarrow.parquet as pq

        pq.write_table(pa.Table.from_pylist([
            {k: None if v is np.ma.masked else v.item() for k, v in zip(table.colnames, row)} for row in table
        ]), path)  # fmt: skip
    elif suffix == "vot":
        table.write(path, format="votable")
    elif suffix == "tsv":
        table.write(path, format="ascii.tab")
    elif suffix == "csv.gz":
        import gzip

        table.write(tmp_path / "list.csv")
        path.write_bytes(gzip.compress((tmp_path / "list.csv").read_bytes()))
    else:
        table.write(path)
    targets = TargetList(path)
    assert targets.check() == 2
    assert targets.ignored_columns == ("comment",)
    first, second = targets.targets()
    mags = {"B": (10.44, DEFAULT_ERROR_MAG), "V": (9.81, 0.02)}
    assert first == Target(
        index=0, name="HD 1", spectrum=str(tmp_path / "a.fits"), magnitudes=mags,
        ra_deg=10.5, dec_deg=-5.0, parallax=(5.9, 0.3), group="g",
    )  # fmt: skip
    assert second == Target(
        index=1, name="HD 2", mk_type="K0 III", magnitudes={"V": (10.2, 0.01)}, ra_deg=11.5, dec_deg=5.0
    )


def test_units_are_honoured(tmp_path: Path) -> None:
    table = Table({"name": ["a"], "mk_type": ["G2 V"], "V": [9.0], "parallax": [0.0059], "e_parallax": [0.0003],
                   "ra": [12.0], "dec": [5.0], "velocity": [20000.0], "fwhm": [0.5]})  # fmt: skip
    for name, unit in (("parallax", "arcsec"), ("e_parallax", "arcsec"), ("ra", "hourangle"), ("velocity", "m / s"),
                       ("fwhm", "nm")):  # fmt: skip
        table[name].unit = unit
    table.write(tmp_path / "list.ecsv")
    targets = TargetList(tmp_path / "list.ecsv")
    targets.check()
    (target,) = targets.targets()
    assert target.parallax == pytest.approx((5.9, 0.3))
    assert target.ra_deg == pytest.approx(180.0)
    assert target.velocity_kms == pytest.approx(20.0)
    assert target.fwhm_angstrom == pytest.approx(5.0)
    table["parallax"].unit = "kg"
    table.write(tmp_path / "list.ecsv", overwrite=True)
    with pytest.raises(RequestError, match="kg"):
        TargetList(tmp_path / "list.ecsv")


def test_every_band_is_one_that_photometry_knows() -> None:
    for band in BANDS:
        assert Photometry({band: (10.0, 0.01)})[band] == (10.0, 0.01)


FAULTS = {
    "doubled names": (
        f"{HEAD}\na,G2 V,9,.1,10,.1\nb,G2 V,9,.1,10,.1\na,K0 V,9,.1,10,.1\n",
        "the name a is in rows 1 and 3",
    ),
    "text for a magnitude": (f"{HEAD}\na,G2 V,bright,.1,10,.1\n", "row 1 \\(a\\): V is 'bright'"),
    "filler magnitude": (f"{HEAD}\na,G2 V,9,.1,10,.1\nb,G2 V,99.99,.1,10,.1\n", "row 2 \\(b\\): magnitude V is 99.99"),
    "infinite magnitude": (f"{HEAD}\na,G2 V,inf,.1,10,.1\n", "magnitude V is inf"),
    "negative error": (f"{HEAD}\na,G2 V,9,-.1,10,.1\n", "e_V is -0.1"),
    "not a type": (f"{HEAD}\na,Q7 V,9,.1,10,.1\n", "Q7 V"),
    "no name": (f"{HEAD}\n,G2 V,9,.1,10,.1\n", "has no name"),
    "no rows": (f"{HEAD}\n", "no rows"),
    "empty": ("", "is empty"),
    "unknown band": ("name,mk_type,W,e_W\na,G2 V,9,.1\n", "W is no band"),
    "lower-case band": ("name,mk_type,v\na,G2 V,9\n", "v is no band"),
    "error of nothing": ("name,mk_type,e_V\na,G2 V,.1\n", "no V for it"),
    "doubled column": ("name,mk_type,V,V\na,G2 V,9,9\n", "column V is there twice"),
    "no name column": ("star,mk_type,V\na,G2 V,9\n", "no column called name"),
    "nothing to go by": ("name,V\na,9\n", "neither a spectrum nor an mk_type"),
    "parallax without errors": ("name,mk_type,parallax\na,G2 V,9\n", "without errors"),
    "parallax without its error": ("name,mk_type,parallax,e_parallax\na,G2 V,9,\n", "the parallax has no error"),
    "position off the sky": ("name,mk_type,ra,dec\na,G2 V,9,95\n", "dec is 95"),
    "cells missing": (f"{HEAD}\na,G2 V,9,.1\n", "row 1 has 4 cells"),
}


@pytest.mark.parametrize("fault", FAULTS)
def test_faults_are_one_sentence(tmp_path: Path, fault: str) -> None:
    text, words = FAULTS[fault]
    with pytest.raises(RequestError, match=words) as caught:
        listed(tmp_path, text).check()
    message = str(caught.value)
    assert "list.csv" in message and "\n" not in message and message.rstrip().endswith(".")


def test_negative_parallaxes_and_missing_spectra_are_no_faults(tmp_path: Path) -> None:
    targets = listed(tmp_path, "name,spectrum,parallax,e_parallax\na,not_there.fits,-0.4,0.3\nb,,,\n")
    assert targets.check() == 2
    assert [t.parallax for t in targets.targets()] == [(-0.4, 0.3), None]


def test_broken_files_are_one_sentence(tmp_path: Path) -> None:
    for suffix in ("fits", "parquet", "vot", "ecsv"):
        path = tmp_path / f"list.{suffix}"
        path.write_bytes(b"# %ECSV 1.0\n# ---\n# datatype: {{\n\x00\xff junk")
        with pytest.raises(RequestError) as caught:
            TargetList(path).check()
        assert str(path) in str(caught.value) and "\n" not in str(caught.value)
    with pytest.raises(RequestError, match="no such"):
        TargetList(tmp_path / "none.csv")
    (tmp_path / "list.xls").write_text("x")
    with pytest.raises(RequestError, match="names no kind of table"):
        TargetList(tmp_path / "list.xls")


def test_batches_depend_on_place_alone(tmp_path: Path) -> None:
    text = "name,mk_type\n" + "".join(f"s{i},G2 V\n" for i in range(25))
    batches = dict(listed(tmp_path, text).batches(10))
    assert {n: [t.index for t in b] for n, b in batches.items()} == {
        0: list(range(10)), 1: list(range(10, 20)), 2: list(range(20, 25))}  # fmt: skip


@pytest.mark.slow
def test_long_lists_are_streamed(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    import tracemalloc

    import pyarrow as pa
    import pyarrow.parquet as pq

    monkeypatch.setattr("starfathom.targets.CHUNK_ROWS", 2_000)
    peaks = []
    for n in (8_000, 40_000):
        pq.write_table(pa.table({"name": [f"s{i}" for i in range(n)], "mk_type": ["G2 V"] * n, "V": np.full(n, 9.0)}),
                       tmp_path / "list.parquet", row_group_size=4_000)  # fmt: skip
        targets = TargetList(tmp_path / "list.parquet")
        tracemalloc.start()
        assert targets.check() == n
        assert sum(len(b) for _, b in targets.batches(512)) == n
        peaks.append(tracemalloc.get_traced_memory()[1])
        tracemalloc.stop()
    # Eight bytes a row are kept to find doubled names, and once more while they are sorted.
    assert peaks[1] - peaks[0] < 24 * 32_000 + 200_000
