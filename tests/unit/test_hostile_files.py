"""Broken, absurd and hostile files end in one sentence, soon, and without much memory."""

from __future__ import annotations

import bz2
import gzip
import io
import lzma
import os
import re
import socket
import time
import tracemalloc
import zipfile

import numpy as np
import pytest
from astropy.io import fits
from reading_star import FLUX, SIGMA, WAVE, N, lines, read, save

from starfathom.classify.errors import RequestError, SpectrumError
from starfathom.classify.reading import files, read_plain

STEP = WAVE[1] - WAVE[0]


def as_bytes(*units: object) -> bytes:
    out = io.BytesIO()
    fits.HDUList(list(units)).writeto(out, output_verify="silentfix+ignore")
    return out.getvalue()


def image(data: np.ndarray, **cards: object) -> fits.PrimaryHDU:
    unit = fits.PrimaryHDU(np.asarray(data))
    for key, value in cards.items():
        unit.header[key.replace("__", "-")] = value
    return unit


def linear(data: np.ndarray, **cards: object) -> bytes:
    return as_bytes(image(data, **{"CRVAL1": WAVE[0], "CDELT1": STEP, **cards}))


def one_sentence(error: BaseException) -> None:
    text = str(error)
    assert text.strip() and "\n" not in text and "Traceback" not in text and len(text) < 600, text
    assert text.rstrip().endswith("."), text


def fails(folder, content: bytes | str, why: str, **kwargs: object) -> None:
    path = save(folder, content)
    start = time.perf_counter()
    with pytest.raises(SpectrumError) as caught:
        read_plain(path, **kwargs)  # type: ignore[arg-type]
    assert time.perf_counter() - start < 5
    one_sentence(caught.value)
    assert re.search(why, str(caught.value)), str(caught.value)
    assert "star.dat" in str(caught.value)
    assert "cannot be read as a spectrum" not in str(caught.value), "an unforeseen exception reached the edge"


def cards(*rows: str, data: bytes = b"") -> bytes:
    header = "".join(r.ljust(80) for r in (*rows, "END")).encode()
    out = header + b" " * (-len(header) % 2880) + data
    return out + b"\0" * (-len(out) % 2880)


def card(key: str, value: object) -> str:
    return f"{key:8s}= {value!s:>20s}"


GOOD = linear(FLUX)
TABLE = as_bytes(
    fits.PrimaryHDU(),
    fits.BinTableHDU.from_columns([fits.Column("WAVE", "D", array=WAVE), fits.Column("FLUX", "D", array=FLUX)]),
)
RNG = np.random.default_rng(5)

BROKEN = {
    "empty": (b"", "empty"),
    "blanks only": (b" \n\n   \n", "blanks"),
    "zeros only": (b"\0" * 5000, "blanks or zeros"),
    "binary junk": (RNG.bytes(20000), "neither FITS nor text"),
    "text then junk": (b"hello world\n" + RNG.bytes(5000), "neither FITS nor text|no rows"),
    "prose": ("It was a clear night and nothing was written down.\n" * 30, "no rows of numbers"),
    "one column": ("\n".join(f"{f:.4f}" for f in FLUX), "one column"),
    "header only": ("# wavelength flux\n", "no rows of numbers"),
    "few rows": (lines([WAVE[:50], FLUX[:50]]), "only 50 of 50 pixels"),
    "ninety-nine rows": (lines([WAVE[:99], FLUX[:99]]), "fewer than 100"),
    "one row": ("5000 1.0\n", "."),
    "all NaN": ("\n".join(f"{w:.3f} nan" for w in WAVE), "NaN"),
    "all zero": (lines([WAVE, 0 * FLUX]), "zero in every pixel"),
    "constant": (lines([WAVE, 0 * FLUX + 3.5]), "constant"),
    "constant but for zeros": (lines([WAVE, np.where(np.arange(N) < 300, 0, 2.0)]), "constant"),
    "negative": (lines([WAVE, -FLUX]), "negative throughout"),
    "negative and zero": (lines([WAVE, np.where(np.arange(N) % 7, -FLUX, 0)]), "negative throughout"),
    "far ultraviolet": ("wave [A],flux\n" + lines([np.linspace(900, 1900, N), FLUX], ","), "2000 A to 2.5 um"),
    "mid infrared": ("wave [um],flux\n" + lines([np.linspace(5, 30, N), FLUX], ","), "2000 A to 2.5 um"),
    "far ultraviolet, no unit": (lines([np.linspace(1000, 1900, N), FLUX]), "2000 A and 2.5 um"),
    "far infrared, no unit": (lines([np.linspace(50000, 90000, N), FLUX]), "2000 A and 2.5 um"),
    "radio": ("frequency [GHz],flux\n" + lines([np.linspace(1, 100, N), FLUX], ","), "2000 A to 2.5 um"),
    "pixel numbers": (lines([np.arange(N) + 1.0, FLUX], fmt="%.4f"), "2000 A and 2.5 um|no wavelength"),
    "one wavelength": (lines([0 * WAVE + 5000, FLUX]), "only 1 of|fit nothing|wavelength"),
    "negative wavelengths": (lines([-WAVE, FLUX]), "2000 A and 2.5 um"),
    "all masked": ("wave,flux,mask\n" + lines([WAVE, FLUX, 1 + 0 * WAVE], ","), "only 0 of"),
    "too few left by the mask": (
        "wave,flux,mask\n" + lines([WAVE, FLUX, (np.arange(N) > 80) * 1.0], ","),
        "only 81 of",
    ),
    "web page": ("<!DOCTYPE html><html><body>404</body></html>", "web page"),
    "PDF": (b"%PDF-1.4\n" + RNG.bytes(3000), "PDF"),
    "PNG": (b"\x89PNG\r\n\x1a\n" + RNG.bytes(3000), "PNG"),
    "JPEG": (b"\xff\xd8\xff\xe0" + RNG.bytes(3000), "JPEG"),
    "HDF5": (b"\x89HDF\r\n\x1a\n" + RNG.bytes(3000), "HDF5"),
    "JSON": ('{"wave": [1, 2, 3], "flux": [1, 2, 3]}', "no rows of numbers"),
    "python pickle": (b"\x80\x04\x95\x10\x00\x00\x00\x00\x00\x00\x00" + RNG.bytes(300), "neither FITS nor text"),
    "damaged UTF-16": (b"\xff\xfe" + b"\x00\xd8" * 999 + b"x", "UTF-16|no rows"),
    "gzip cut off": (gzip.compress(lines([WAVE, FLUX]).encode())[:-2000], "damaged or cut off"),
    "gzip damaged": (gzip.compress(lines([WAVE, FLUX]).encode())[:50] + b"xxxx" * 100, "damaged or cut off"),
    "gzip head only": (b"\x1f\x8b", "damaged or cut off"),
    "gzip of nothing": (gzip.compress(b""), "empty"),
    "bzip2 cut off": (bz2.compress(GOOD)[:-50], "damaged or cut off"),
    "xz cut off": (lzma.compress(GOOD)[:-50], "damaged or cut off"),
    # FITS
    "FITS cut in the header": (GOOD[:400], "no END|cut off"),
    "FITS cut after the header": (GOOD[:2880], "ends after 0"),
    "FITS cut in the data": (GOOD[: 2880 + 4000], "announces 9600 bytes of data but the file ends after 4000"),
    "FITS table cut": (TABLE[: len(TABLE) // 2], "announces|ends after"),
    "FITS table cut in its header": (TABLE[: 2880 + 500], "no END|cut off"),
    "FITS word only": (b"SIMPLE  =                    T", "no END|cut off|END"),
    "FITS header of junk": (b"SIMPLE  =                    T" + RNG.bytes(6000), "END|cut off|damaged"),
    "FITS header without an end": (
        b"SIMPLE  =                    T".ljust(80) + b"COMMENT x".ljust(80) * 4000,
        "no END",
    ),
    "FITS without data": (as_bytes(fits.PrimaryHDU()), "no data"),
    "FITS picture": (linear(np.tile(FLUX, (50, 1))), "1200 x 50 image"),
    "FITS cube": (linear(np.tile(FLUX, (9, 9, 1))), "image"),
    "FITS picture of a few long rows": (linear(np.tile(FLUX, (7, 1))), "1200 x 7 image"),
    "FITS square picture": (linear(RNG.normal(size=(300, 300))), "300 x 300 image"),
    "FITS without dispersion": (as_bytes(image(FLUX)), "nothing about wavelengths"),
    "FITS in pixels": (as_bytes(image(FLUX, CRVAL1=1.0, CDELT1=1.0, CTYPE1="PIXEL")), "nothing about wavelengths"),
    "FITS in pixels without type": (as_bytes(image(FLUX, CRVAL1=1.0, CDELT1=1.0)), "nothing about wavelengths"),
    "FITS step of zero": (linear(FLUX, CDELT1=0.0), "nothing about wavelengths"),
    "FITS step of words": (linear(FLUX, CDELT1="three"), "nothing about wavelengths"),
    "FITS out of reach": (linear(FLUX, CRVAL1=100.0, CDELT1=0.5), "2000 A"),
    "FITS in the infrared": (linear(FLUX, CRVAL1=50000.0, CDELT1=10.0, CUNIT1="Angstrom"), "2000 A to 2.5 um"),
    "FITS all NaN": (linear(FLUX * np.nan), "NaN"),
    "FITS all zero": (linear(FLUX * 0), "zero in every pixel"),
    "FITS constant": (linear(FLUX * 0 + 7), "constant"),
    "FITS negative": (linear(-FLUX), "negative throughout"),
    "FITS short": (linear(FLUX[:60]), "only 60 of 60"),
    "FITS of one pixel": (linear(FLUX[:1]), "."),
    "FITS catalogue": (
        as_bytes(
            fits.PrimaryHDU(),
            fits.BinTableHDU.from_columns(
                [
                    fits.Column("RA", "D", array=RNG.uniform(0, 360, 500)),
                    fits.Column("VMAG", "D", array=RNG.uniform(5, 9, 500)),
                ]
            ),
        ),
        "without a",
    ),
    "FITS table of words": (
        as_bytes(
            fits.PrimaryHDU(), fits.BinTableHDU.from_columns([fits.Column("NAME", "9A", array=np.array(["a"] * 200))])
        ),
        "without a flux column",
    ),
    "FITS table of wavelengths only": (
        as_bytes(fits.PrimaryHDU(), fits.BinTableHDU.from_columns([fits.Column("WAVE", "D", array=WAVE)])),
        "without a flux column",
    ),
    "FITS table of flux only": (
        as_bytes(fits.PrimaryHDU(), fits.BinTableHDU.from_columns([fits.Column("FLUX", "D", array=FLUX)])),
        "without a wavelength column",
    ),
    "FITS table without rows": (
        as_bytes(
            fits.PrimaryHDU(),
            fits.BinTableHDU.from_columns(
                [fits.Column("WAVE", "D", array=np.empty(0)), fits.Column("FLUX", "D", array=np.empty(0))]
            ),
        ),
        "no rows|no data|missing",
    ),
    "FITS absurd NAXIS1": (
        cards(
            card("SIMPLE", "T"),
            card("BITPIX", -32),
            card("NAXIS", 1),
            card("NAXIS1", 10**12),
            card("CRVAL1", 4000.0),
            card("CDELT1", 1.0),
            data=b"\0" * 5760,
        ),
        "announces 4000000000000 bytes",
    ),
    "FITS absurd NAXIS": (
        cards(
            card("SIMPLE", "T"),
            card("BITPIX", -32),
            card("NAXIS", 999),
            *(card(f"NAXIS{i + 1}", 2) for i in range(999)),
            card("CRVAL1", 4000.0),
            card("CDELT1", 1.0),
        ),
        "image|announces",
    ),
    "FITS absurd everything": (
        cards(card("SIMPLE", "T"), card("BITPIX", -64), card("NAXIS", 10**30), card("NAXIS1", 10**30)),
        ".",
    ),
    "FITS negative NAXIS1": (
        cards(card("SIMPLE", "T"), card("BITPIX", -32), card("NAXIS", 1), card("NAXIS1", -5)),
        "not allowed",
    ),
    "logarithms beyond any number": ("loglam,flux\n" + lines([WAVE, FLUX], ","), "infinite"),
    "wavelengths that are not numbers": (
        "wave flux\n" + "".join(f"5000 {f:.4f}\n" for f in FLUX[:3]),
        "fewer than 100",
    ),
    "FITS log axis beyond any number": (linear(FLUX, CRVAL1=4000.0, CTYPE1="LOGLAM"), "infinite"),
    "FITS without BITPIX": (
        cards(card("SIMPLE", "T"), card("NAXIS", 1), card("NAXIS1", 200), card("CRVAL1", 4000.0), data=b"\0" * 2000),
        "not allowed",
    ),
    "one comma in a row of blanks": ("4000 1\n4001 1,\n" * 200, "."),
    "FITS odd BITPIX": (
        cards(card("SIMPLE", "T"), card("BITPIX", 7), card("NAXIS", 1), card("NAXIS1", 5)),
        "not allowed",
    ),
    "FITS table of absurd rows": (
        as_bytes(fits.PrimaryHDU())
        + cards(
            "XTENSION= 'BINTABLE'",
            card("BITPIX", 8),
            card("NAXIS", 2),
            card("NAXIS1", 16),
            card("NAXIS2", 10**12),
            card("PCOUNT", 0),
            card("GCOUNT", 1),
            card("TFIELDS", 2),
            "TTYPE1  = 'WAVE    '",
            "TFORM1  = 'D       '",
            "TTYPE2  = 'FLUX    '",
            "TFORM2  = 'D       '",
        ),
        "too many|announces",
    ),
    "FITS table of odd form": (
        as_bytes(fits.PrimaryHDU())
        + cards(
            "XTENSION= 'BINTABLE'",
            card("BITPIX", 8),
            card("NAXIS", 2),
            card("NAXIS1", 16),
            card("NAXIS2", 3),
            card("PCOUNT", 0),
            card("GCOUNT", 1),
            card("TFIELDS", 1),
            "TTYPE1  = 'WAVE    '",
            "TFORM1  = 'Q7!     '",
            data=b"\0" * 48,
        ),
        "TFORM1|wider",
    ),
    "FITS table wider than its rows": (
        as_bytes(fits.PrimaryHDU())
        + cards(
            "XTENSION= 'BINTABLE'",
            card("BITPIX", 8),
            card("NAXIS", 2),
            card("NAXIS1", 8),
            card("NAXIS2", 300),
            card("PCOUNT", 0),
            card("GCOUNT", 1),
            card("TFIELDS", 2),
            "TTYPE1  = 'WAVE    '",
            "TFORM1  = 'D       '",
            "TTYPE2  = 'FLUX    '",
            "TFORM2  = 'D       '",
            data=b"\0" * 2400,
        ),
        "wider than its rows",
    ),
    "FITS table pointing outside": (
        as_bytes(fits.PrimaryHDU())
        + cards(
            "XTENSION= 'BINTABLE'",
            card("BITPIX", 8),
            card("NAXIS", 2),
            card("NAXIS1", 16),
            card("NAXIS2", 1),
            card("PCOUNT", 0),
            card("GCOUNT", 1),
            card("TFIELDS", 2),
            "TTYPE1  = 'WAVE    '",
            "TFORM1  = 'PD(999) '",
            "TTYPE2  = 'FLUX    '",
            "TFORM2  = 'PD(999) '",
            data=np.array([2**31 - 1, 2**31 - 1] * 2, ">i4").tobytes(),
        ),
        "beyond the end",
    ),
    "FITS compressed image of absurd size": (
        as_bytes(fits.PrimaryHDU())
        + cards(
            "XTENSION= 'BINTABLE'",
            card("BITPIX", 8),
            card("NAXIS", 2),
            card("NAXIS1", 8),
            card("NAXIS2", 1),
            card("PCOUNT", 0),
            card("GCOUNT", 1),
            card("TFIELDS", 1),
            "TTYPE1  = 'COMPRESSED_DATA'",
            "TFORM1  = '1PB(0)  '",
            card("ZIMAGE", "T"),
            "ZCMPTYPE= 'RICE_1  '",
            card("ZBITPIX", 16),
            card("ZNAXIS", 1),
            card("ZNAXIS1", 10**10),
            data=b"\0" * 8,
        ),
        "too many pixels",
    ),
}


@pytest.mark.parametrize("name", BROKEN)
def test_broken_files(tmp_path, name):
    content, why = BROKEN[name]
    fails(tmp_path, content, why)


def test_no_such_file(tmp_path):
    with pytest.raises(SpectrumError, match="no such file") as caught:
        read_plain(tmp_path / "absent.fits")
    one_sentence(caught.value)


def test_folder(tmp_path):
    with pytest.raises(SpectrumError, match="folder") as caught:
        read_plain(tmp_path)
    one_sentence(caught.value)


def test_pipe_and_socket_and_device(tmp_path):
    os.mkfifo(tmp_path / "pipe")
    listener = socket.socket(socket.AF_UNIX)
    listener.bind(str(tmp_path / "socket"))
    try:
        for name in (tmp_path / "pipe", tmp_path / "socket", "/dev/zero", "/dev/null"):
            with pytest.raises(SpectrumError, match="device, pipe or socket") as caught:
                read_plain(name)
            one_sentence(caught.value)
    finally:
        listener.close()


@pytest.mark.skipif(os.name != "posix" or os.geteuid() == 0, reason="the superuser may read anything")
def test_no_permission(tmp_path):
    path = save(tmp_path, GOOD)
    path.chmod(0)
    with pytest.raises(SpectrumError, match="no permission"):
        read_plain(path)


def test_no_permission_as_told_by_the_system(tmp_path, monkeypatch):
    path = save(tmp_path, GOOD)

    def refuse(*_args: object, **_kwargs: object) -> None:
        raise PermissionError(13, "Permission denied")

    monkeypatch.setattr("builtins.open", refuse)
    with pytest.raises(SpectrumError, match="no permission"):
        files.load_bytes(path)


def test_disk_error(tmp_path, monkeypatch):
    path = save(tmp_path, GOOD)

    def refuse(*_args: object, **_kwargs: object) -> None:
        raise OSError(5, "Input/output error")

    monkeypatch.setattr("builtins.open", refuse)
    with pytest.raises(SpectrumError, match="input/output error"):
        files.load_bytes(path)


def test_link_in_a_circle(tmp_path):
    (tmp_path / "a").symlink_to(tmp_path / "b")
    (tmp_path / "b").symlink_to(tmp_path / "a")
    with pytest.raises(SpectrumError, match="cannot be looked at"):
        read_plain(tmp_path / "a")


@pytest.mark.parametrize("path", ["", "a\0b", "x" * 5000, "star\nsecond line", "star\rsecond line"])
def test_odd_paths(path):
    with pytest.raises(SpectrumError) as caught:
        read_plain(path)
    one_sentence(caught.value)


def test_path_of_the_wrong_kind():
    with pytest.raises(RequestError, match="named by its path"):
        read_plain(42)  # type: ignore[arg-type]


def test_huge_file_is_not_read(tmp_path):
    path = tmp_path / "huge.fits"
    with path.open("wb") as out:
        out.truncate(40 << 30)  # sparse: no disk is used
    start = time.perf_counter()
    with pytest.raises(SpectrumError, match="too large"):
        read_plain(path)
    assert time.perf_counter() - start < 1


def zip_of(*contents: bytes) -> bytes:
    out = io.BytesIO()
    with zipfile.ZipFile(out, "w", zipfile.ZIP_DEFLATED) as archive:
        for i, content in enumerate(contents):
            archive.writestr(f"{i}.txt", content)
    return out.getvalue()


def test_zip_of_many(tmp_path):
    fails(tmp_path, zip_of(b"a", b"b"), "2 files")


@pytest.mark.parametrize("pack", ["gzip", "bzip2", "xz", "zip"])
def test_decompression_bombs_are_capped(tmp_path, monkeypatch, pack):
    monkeypatch.setattr(files, "MAX_BYTES", 4 << 20)
    zeros = b"0" * (40 << 20)
    data = {"gzip": gzip.compress, "bzip2": bz2.compress, "xz": lzma.compress, "zip": zip_of}[pack](zeros)
    path = save(tmp_path, data)
    tracemalloc.start()
    with pytest.raises(SpectrumError, match="unpacks to more than 4 MB"):
        read_plain(path)
    peak = tracemalloc.get_traced_memory()[1]
    tracemalloc.stop()
    assert peak < 30 << 20


def test_text_of_absurd_length(tmp_path):
    fails(tmp_path, b"4000 1\n" * 6_000_000, "too much for one spectrum")


def test_one_endless_line(tmp_path):
    fails(tmp_path, "1 " * 2_000_000, ".")


def test_many_numbers_run_together(tmp_path):
    fails(tmp_path, "1" * 5_000_000, ".")
    fails(tmp_path, "9" * 1000 + " " + "9" * 1000 + "\n", ".")


def test_table_of_absurdly_many_columns(tmp_path):
    fails(tmp_path, ("1 " * 50_000 + "\n") * 60, "rows of more than 5000 characters")


def test_votable_of_absurd_length(tmp_path):
    fails(tmp_path, b"<?xml version='1.0'?><VOTABLE>" + b" " * (4 << 20), "too much for one spectrum")


def test_too_many_values(tmp_path, monkeypatch):
    from starfathom.classify.reading import fitsio

    monkeypatch.setattr(fitsio, "MAX_CELLS", 1000)
    fails(tmp_path, GOOD, "1200 pixels along the spectrum, too many")
    fails(tmp_path, TABLE, "1200 rows, too many")
    unit = fits.BinTableHDU.from_columns(
        [fits.Column("WAVE", f"{N}D", array=WAVE[None]), fits.Column("FLUX", f"{N}D", array=FLUX[None])]
    )
    fails(tmp_path, as_bytes(fits.PrimaryHDU(), unit), "too many values")


def test_endless_comment(tmp_path):
    fails(tmp_path, "# " + "wave (" * 300_000 + "\n5000 1\n", ".")


def test_million_comment_lines(tmp_path):
    fails(tmp_path, "# wave = flux\n" * 120_000, "no rows of numbers")
    fails(tmp_path, "# wave = flux\n" * 500_000, "more than 150000 lines")


def test_spectrum_cut_off_behind_its_data_is_still_read(tmp_path):
    data = TABLE + as_bytes(fits.PrimaryHDU(), fits.ImageHDU(np.ones((50, 50)), name="THUMB"))[2880:][:4000]
    spec = read(tmp_path, data)
    assert spec.valid.all() and any("cut off" in n for n in spec.notes)


def test_unforeseen_errors_become_one_sentence(tmp_path, monkeypatch):
    from starfathom.classify.reading import finish

    def burst(*_args: object) -> None:
        raise ZeroDivisionError("float\ndivision by zero")

    monkeypatch.setattr(finish, "finish", burst)
    with pytest.raises(SpectrumError, match="cannot be read as a spectrum") as caught:
        read(tmp_path, lines([WAVE, FLUX]))
    one_sentence(caught.value)


def test_memory_errors_become_one_sentence(tmp_path, monkeypatch):
    from starfathom.classify.reading import finish

    def burst(*_args: object) -> None:
        raise MemoryError

    monkeypatch.setattr(finish, "finish", burst)
    with pytest.raises(SpectrumError, match="not enough memory"):
        read(tmp_path, lines([WAVE, FLUX]))


def test_read_as_fits_of_text(tmp_path):
    fails(tmp_path, lines([WAVE, FLUX]), "not a FITS file", read_as="fits")


def test_control_characters_do_not_reach_the_terminal(tmp_path):
    path = tmp_path / "star\x1b[31m.txt"
    path.write_text("nothing here")
    with pytest.raises(SpectrumError) as caught:
        read_plain(path)
    assert "\x1b" not in str(caught.value)


def test_lengths_that_do_not_agree(tmp_path):
    """Columns of different lengths in one row."""
    unit = fits.BinTableHDU.from_columns(
        [
            fits.Column("WAVE", f"{N}D", array=WAVE[None]),
            fits.Column("FLUX", "200D", array=FLUX[None, :200]),
            fits.Column("ERR", "7D", array=SIGMA[None, :7]),
        ]
    )
    fails(tmp_path, as_bytes(fits.PrimaryHDU(), unit), "1200 wavelengths for 200 flux values")
