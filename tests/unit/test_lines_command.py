"""``starfathom lines``: what it prints and writes, and how it fails."""

from __future__ import annotations

import json
from pathlib import Path

import numpy as np
import pytest

from starfathom import lines_command
from starfathom.classify.errors import RequestError, SpectrumError


@pytest.fixture
def star(tmp_path: Path) -> Path:
    rng = np.random.default_rng(6)
    wave = np.arange(4000.0, 5000.0, 0.9)
    flux = 1.0 - 0.5 * np.exp(-0.5 * ((wave - 4861.3) / 4.0) ** 2) - 0.1 * np.exp(-0.5 * ((wave - 4471.5) / 1.4) ** 2)
    flux += 0.005 * rng.standard_normal(wave.size)
    path = tmp_path / "star.txt"
    np.savetxt(path, np.column_stack([wave, flux, np.full(wave.size, 0.005)]), header="wavelength flux error")
    return path


def test_prints_writes_and_draws(star: Path, tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    from astropy.table import Table

    table, picture = tmp_path / "lines.ecsv", tmp_path / "fits.png"
    code = lines_command.run(str(star), output=str(table), fwhm_angstrom=2.5, velocity_kms=0.0, plot=str(picture))
    assert code == 0
    said = capsys.readouterr().out
    assert "H beta" in said and "He I 4471" in said and "line spread 2.50 A" in said
    assert "Not there" in said and "Not on the spectrum" in said
    rows = Table.read(table)
    beta = rows[rows["feature"] == "H beta"][0]
    assert abs(beta["ew_angstrom"] - 0.5 * 4.0 * np.sqrt(2 * np.pi)) < 3 * beta["ew_err_angstrom"] < 0.6
    assert str(rows["ew_angstrom"].unit) == "Angstrom"
    for name in ("wavelength_angstrom", "kind", "ew_err_angstrom", "ew_direct_angstrom", "ew_fit_angstrom",
                 "fwhm_angstrom", "fwhm_err_angstrom", "intrinsic_fwhm_angstrom", "depth", "center_angstrom",
                 "limit_angstrom", "flags"):
        assert name in rows.colnames
    assert picture.read_bytes()[:4] == b"\x89PNG" and picture.stat().st_size > 20000


def test_json_is_one_document_without_nan(star: Path, capsys: pytest.CaptureFixture[str]) -> None:
    lines_command.run(str(star), fwhm_angstrom=2.5, velocity_kms=0.0, as_json=True)
    told = json.loads(capsys.readouterr().out, parse_constant=lambda word: pytest.fail(word))
    assert {r["feature"] for r in told["lines"] if r["detected_ok"]} >= {"H beta", "He I 4471"}


def test_a_picture_of_no_known_kind_is_refused(star: Path, tmp_path: Path) -> None:
    with pytest.raises(RequestError, match="picture format"):
        lines_command.run(str(star), fwhm_angstrom=2.5, velocity_kms=0.0, plot=str(tmp_path / "fits.doc"))


def test_a_missing_file_is_refused() -> None:
    with pytest.raises(SpectrumError):
        lines_command.run("no-such-file.fits", fwhm_angstrom=2.5, velocity_kms=0.0)
