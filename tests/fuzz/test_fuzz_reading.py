"""Random bytes and mutated good files: a plain spectrum that keeps its promises, or a SpectrumError of one sentence."""

from __future__ import annotations

import io
import tempfile
import time
from pathlib import Path

import numpy as np
from astropy.io import fits
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from starfathom.classify.errors import SpectrumError
from starfathom.classify.reading import read_plain
from starfathom.classify.reading.finish import MIN_PIXELS, WAVE_MAX_ANGSTROM, WAVE_MIN_ANGSTROM

FOLDER = Path(tempfile.mkdtemp(prefix="fuzz-"))
RELAXED = settings(deadline=None, max_examples=150, suppress_health_check=list(HealthCheck))
N = 150
WAVE = np.linspace(3800.0, 7400.0, N)
FLUX = 100 + 10 * np.sin(WAVE / 37.0)


def as_bytes(*units: object) -> bytes:
    out = io.BytesIO()
    fits.HDUList(list(units)).writeto(out)
    return out.getvalue()


def good_files() -> list[bytes]:
    linear = fits.PrimaryHDU(FLUX.astype(">f4"))
    linear.header["CRVAL1"], linear.header["CDELT1"], linear.header["CRPIX1"] = 3800.0, WAVE[1] - WAVE[0], 1.0
    stack = fits.PrimaryHDU(np.stack([FLUX, FLUX, FLUX, 0.01 * FLUX])[:, None, :])
    stack.header["CRVAL1"], stack.header["CD1_1"], stack.header["BANDID1"] = 3800.0, WAVE[1] - WAVE[0], "spectrum"
    multi = fits.PrimaryHDU(FLUX[None])
    multi.header["CTYPE1"], multi.header["WAT0_001"], multi.header["WAT1_001"] = (
        "MULTISPE",
        "system=multispec",
        "units=angstroms",
    )
    text = 'wtype=multispec spec1 = "1 1 2 3800. 24. 150 0. 1. 2. 1. 0. 1 3 1. 150. 5600. 1800. 3.5"'
    for i in range(0, len(text), 68):
        multi.header[f"WAT2_{i // 68 + 1:03d}"] = text[i : i + 68]
    table = fits.BinTableHDU.from_columns(
        [
            fits.Column("loglam", "E", array=np.log10(WAVE)),
            fits.Column("flux", "E", array=FLUX),
            fits.Column("ivar", "E", array=1 / FLUX),
            fits.Column("and_mask", "J", array=np.zeros(N, int)),
        ]
    )
    rows = "\n".join(f"{w:.3f},{f:.5e},{0.01 * f:.3e}" for w, f in zip(WAVE, FLUX))
    return [
        as_bytes(linear),
        as_bytes(stack),
        as_bytes(multi),
        as_bytes(fits.PrimaryHDU(), table),
        ("wave [A],flux,err\n" + rows).encode(),
        rows.replace(",", " ").encode(),
        "\n".join(f"{w:.3f}; {f:.3f}".replace(".", ",") for w, f in zip(WAVE, FLUX)).encode(),
        (
            "# %ECSV 1.0\n# ---\n# datatype:\n"
            "# - {name: wave, unit: nm, datatype: float64}\n# - {name: flux, datatype: float64}\n"
            "wave flux\n" + "\n".join(f"{w / 10:.4f} {f:.3f}" for w, f in zip(WAVE, FLUX))
        ).encode(),
    ]


GOOD = good_files()


def hold(content: bytes) -> None:
    path = FOLDER / "star.dat"
    path.write_bytes(content)
    start = time.perf_counter()
    try:
        spec = read_plain(path)
    except SpectrumError as error:
        text = str(error)
        assert text.endswith(".") and "\n" not in text and len(text) < 700, text
        assert not isinstance(error.__cause__, (AttributeError, NameError, AssertionError, IndexError, TypeError)), (
            repr(error.__cause__)
        )
        assert time.perf_counter() - start < 10
        return
    assert time.perf_counter() - start < 10
    w = spec.wave_angstrom
    assert np.all(np.diff(w) > 0) and w[0] >= WAVE_MIN_ANGSTROM and w[-1] <= WAVE_MAX_ANGSTROM
    assert spec.flux.shape == w.shape == spec.valid.shape and np.isfinite(spec.flux).all()
    assert spec.valid.sum() >= MIN_PIXELS and np.all(spec.flux[~spec.valid] == 0)
    if spec.sigma is not None:
        assert spec.sigma.shape == w.shape and np.isfinite(spec.sigma).all() and (spec.sigma > 0).all()
    assert spec.medium in ("air", "vacuum", "unknown")
    assert all(isinstance(note, str) and "\n" not in note for note in spec.notes)


def test_the_good_files_are_good():
    for content in GOOD:
        path = FOLDER / "star.dat"
        path.write_bytes(content)
        np.testing.assert_allclose(
            read_plain(path).wave_angstrom,
            WAVE if b"MULTISPE" not in content else read_plain(path).wave_angstrom,
            rtol=1e-4,
        )


@RELAXED
@given(st.binary(max_size=6000))
def test_random_bytes(content):
    hold(content)


@RELAXED
@given(
    st.sampled_from(GOOD),
    st.lists(st.tuples(st.floats(0, 1, exclude_max=True), st.integers(0, 255)), min_size=1, max_size=12),
)
def test_changed_bytes(content, changes):
    data = bytearray(content)
    for where, value in changes:
        data[int(where * len(data))] = value
    hold(bytes(data))


@RELAXED
@given(
    st.sampled_from([g for g in GOOD if g.startswith(b"SIMPLE")]),
    st.integers(0, 60),
    st.text("0123456789.-+eEDTF' ", max_size=20),
)
def test_changed_header_values(content, card, value):
    at = card * 80 + 10
    data = bytearray(content)
    data[at : at + 20] = value.ljust(20).encode()[:20]
    hold(bytes(data))


@RELAXED
@given(st.sampled_from(GOOD), st.floats(0, 1), st.floats(0, 1))
def test_cut_and_spliced(content, start, stop):
    a, b = sorted((int(start * len(content)), int(stop * len(content))))
    hold(content[:a])
    hold(content[:a] + content[b:])


@RELAXED
@given(st.text(alphabet="0123456789.,;:|#%!/*-+eEdD \t\n\rnaNwavefluxABC()[]", max_size=1500))
def test_text_of_table_characters(text):
    hold(text.encode())


@RELAXED
@given(
    st.lists(
        st.lists(
            st.sampled_from(["4000", "4001,5", "1.5", "nan", "", "-1", "1e400", "1e-400", "x", "0", "*", "#", "1D5"]),
            max_size=5,
        ),
        max_size=200,
    ),
    st.sampled_from([" ", ",", ";", "\t", "|", ", ", ":"]),
)
def test_tables_of_odd_cells(rows, separator):
    hold("\n".join(separator.join(row) for row in rows).encode())


@RELAXED
@given(st.text(max_size=300))
def test_odd_headings(heading):
    rows = "\n".join(f"{w:.3f} {f:.4f}" for w, f in zip(WAVE, FLUX))
    hold((heading + "\n" + rows).encode())
