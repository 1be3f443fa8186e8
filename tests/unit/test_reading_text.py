"""Text spectra in every usual dress come out with the right wavelengths, flux and uncertainties."""

from __future__ import annotations

import gzip
import io

import numpy as np
import pytest
from reading_star import FLUX, SIGMA, WAVE, flux_at, lines, read, same_star

from starfathom.classify.errors import RequestError, SpectrumError
from starfathom.classify.reading.text import cell, text_meta

TWO = lines([WAVE, FLUX])
THREE = lines([WAVE, FLUX, SIGMA])


def comma(text: str) -> str:
    return text.replace(".", ",")


TWO_COLUMNS = {
    "blanks": TWO,
    "tabs": lines([WAVE, FLUX], "\t"),
    "many blanks": lines([WAVE, FLUX], "     "),
    "leading blanks": "".join("   " + row + "\n" for row in TWO.splitlines()),
    "trailing blanks": "".join(row + "   \n" for row in TWO.splitlines()),
    "comma": lines([WAVE, FLUX], ","),
    "comma and blank": lines([WAVE, FLUX], ", "),
    "blank comma blank": lines([WAVE, FLUX], " , "),
    "semicolon": lines([WAVE, FLUX], ";"),
    "bar": lines([WAVE, FLUX], "|"),
    "bars around": "".join(f"| {row.replace(' ', ' | ')} |\n" for row in TWO.splitlines()),
    "colon": lines([WAVE, FLUX], ":"),
    "trailing comma": "".join(row + ",\n" for row in lines([WAVE, FLUX], ",").splitlines()),
    "trailing semicolon": "".join(row + ";\n" for row in lines([WAVE, FLUX], ";").splitlines()),
    "decimal comma, blanks": comma(TWO),
    "decimal comma, tabs": comma(lines([WAVE, FLUX], "\t")),
    "decimal comma, semicolons": comma(lines([WAVE, FLUX], ";")),
    "decimal comma, semicolon and blank": comma(lines([WAVE, FLUX], "; ")),
    "windows line ends": TWO.replace("\n", "\r\n"),
    "windows line ends, comma": lines([WAVE, FLUX], ",").replace("\n", "\r\n"),
    "old mac line ends": TWO.replace("\n", "\r"),
    "no last line end": TWO.rstrip("\n"),
    "blank lines at the end": TWO + "\n\n\n",
    "blank lines between": TWO.replace("\n", "\n\n"),
    "hash comments": "# a star\n# taken on a good night\n" + TWO,
    "percent comments": "% a star\n%\n" + TWO,
    "exclamation comments": "! a star\n!\n" + TWO,
    "semicolon comments": "; a star\n;;\n" + TWO,
    "slash comments": "// a star, 12 minutes\n" + TWO,
    "star comments": "* a star\n* 12 3\n" + TWO,
    "quoted comments": '"a star"\n' + TWO,
    "letter comments": "C a star\nC 1995\n" + TWO,
    "comments between": TWO.replace("\n", "\n# cloud passes\n", 3),
    "comments behind": "".join(row + "   # fine\n" for row in TWO.splitlines()),
    "comment at the end": TWO + "# end of spectrum\n",
    "text header": "Spectrum of the night\nObserver: the usual\n\n" + TWO,
    "word header": "wavelength flux\n" + TWO,
    "hash word header": "# wavelength flux\n" + TWO,
    "hash glued header": "#wavelength\tflux\n" + TWO,
    "header with units": "Wavelength (A)  Flux (erg/s/cm2/A)\n" + TWO,
    "header with bracket units": "# Wavelength [Angstrom] Flux [erg/s/cm^2/A]\n" + TWO,
    "units on a second line": "WAVE FLUX\nAngstrom counts\n" + TWO,
    "csv header": "wavelength,flux\n" + lines([WAVE, FLUX], ","),
    "csv quoted header": '"Wavelength","Flux"\n' + lines([WAVE, FLUX], ","),
    "csv quoted cells": "wave,flux\n" + "".join(f'"{a:.6f}","{b:.6f}"\n' for a, b in zip(WAVE, FLUX)),
    "semicolon csv, decimal comma": "lambda;flux\n" + comma(lines([WAVE, FLUX], ";")),
    "exponents": lines([WAVE, FLUX], fmt="%.8e"),
    "capital exponents": lines([WAVE, FLUX], fmt="%.8E"),
    "fortran exponents": lines([WAVE, FLUX], fmt="%.8e").replace("e", "D"),
    "plus signs": lines([WAVE, FLUX], fmt="%+.6f"),
    "byte-order mark": "\ufeff" + TWO,
    "byte-order mark and header": "\ufeffwavelength,flux\n" + lines([WAVE, FLUX], ","),
    "accents": "# étoile à l'œil nu, λ en Å\n" + TWO,
    "index column": "".join(f"{i} {a:.6f} {b:.6f}\n" for i, (a, b) in enumerate(zip(WAVE, FLUX))),
    "index column from one, named": "pixel,wave,flux\n"
    + "".join(f"{i + 1},{a:.6f},{b:.6f}\n" for i, (a, b) in enumerate(zip(WAVE, FLUX))),
    "flux before wavelength, named": "flux wavelength\n" + lines([FLUX, WAVE]),
    "flux before wavelength, unnamed": lines([FLUX, WAVE]),
    "ipac table": "|  wave    |  flux    |\n|  double  |  double  |\n|  Angstrom |  |\n" + TWO,
    "fits header above": "SIMPLE  = T / not really FITS\nBITPIX  =  8 / ASCII\nEND\n\n" + TWO,
    "sextractor header": "#   1 WAVE   wavelength [Angstrom]\n#   2 FLUX   flux [adu]\n" + TWO,
    "numbered header": "# column 1: wavelength (angstrom)\n# column 2: flux\n" + TWO,
    "cells that say nothing": "wave flux note\n" + "".join(f"{a:.6f} {b:.6f} good\n" for a, b in zip(WAVE, FLUX)),
    "form feed at the end": TWO + "\x1a",
    "german, decimal comma": "Wellenlänge;Fluss\n" + comma(lines([WAVE, FLUX], ";")),
    "spanish, nm": "Longitud de onda (nm);Flujo\n" + lines([WAVE / 10, FLUX], ";", "%.7f"),
    "french, nm": "Longueur d'onde (nm)\tIntensité\n" + lines([WAVE / 10, FLUX], "\t", "%.7f"),
    "index without a name": ",wave,flux\n"
    + "".join(f"{i},{a:.6f},{b:.6f}\n" for i, (a, b) in enumerate(zip(WAVE, FLUX))),
    "thousands commas": "".join(f"{a:,.3f} {b:.5f}\n" for a, b in zip(WAVE, FLUX)),
    "quoted decimal commas": "".join(f'"{a:.4f}";"{b:.5f}"\n'.replace(".", ",") for a, b in zip(WAVE, FLUX)),
    "decimal and dividing commas": "".join(
        f"{a:.4f},{b:.5f}\n".replace(".", ";").replace(",", "\t").replace(";", ",").replace("\t", ",")
        for a, b in zip(WAVE, FLUX)
    ),
    "separator named": "sep=;\nwave;flux\n" + lines([WAVE, FLUX], ";"),
    "count line": f"{WAVE.size}\n" + TWO,
    "count line of two": f"{WAVE.size} 2\n" + TWO,
    "name line": "HD 12345\n" + TWO,
    "name line with numbers": "BD+20 1234 V=9.5\n" + TWO,
    "dashes": "-----\nWave  Flux\n-----\n" + TWO + "-----\n",
    "begin and end": "BEGIN SPECTRUM\n" + TWO + "END SPECTRUM\n",
    "markdown": "| wave | flux |\n|---|---|\n" + "".join(f"| {a:.6f} | {b:.6f} |\n" for a, b in zip(WAVE, FLUX)),
    "typeset table": "".join(f"{a:.6f} & {b:.6f} \\\\\n" for a, b in zip(WAVE, FLUX)),
    "columns as rows": lines([*np.stack([WAVE, FLUX]).T], " "),
    "log of a quotient": "log10(lambda/nm) flux\n" + lines([np.log10(WAVE / 10), FLUX], fmt="%.12g"),
    "log with its unit inside": "log(lambda [A]),flux\n" + lines([np.log10(WAVE), FLUX], ",", "%.12g"),
    "wavelength error beside": "wave,wave_err,flux\n" + lines([WAVE, 0 * WAVE + 0.1, FLUX], ","),
    "bin width beside": "lambda dlambda flux\n" + lines([WAVE, 0 * WAVE + 3, FLUX]),
    "non-breaking blanks": TWO.replace(" ", "\u00a0"),
    "unit among superscripts": "wave (Å)\tflux (10⁻¹⁶ erg/cm²/s/Å)\n" + lines([WAVE, FLUX], "\t"),
    "a sentence with as many words": "# vac. wavelengths [A]\n" + TWO,
}


@pytest.mark.parametrize("name", TWO_COLUMNS)
def test_two_columns(tmp_path, name):
    same_star(read(tmp_path, TWO_COLUMNS[name]))


THREE_COLUMNS = {
    "unnamed": THREE,
    "comma": lines([WAVE, FLUX, SIGMA], ","),
    "tabs": lines([WAVE, FLUX, SIGMA], "\t"),
    "decimal comma": comma(lines([WAVE, FLUX, SIGMA], "; ")),
    "named sigma": "wave flux sigma\n" + THREE,
    "named err": "# LAMBDA FLUX FLUX_ERR\n" + THREE,
    "named error": "Wavelength,Flux,Error\n" + lines([WAVE, FLUX, SIGMA], ","),
    "named e_flux": "wl\tflux\te_flux\n" + lines([WAVE, FLUX, SIGMA], "\t"),
    "named uncertainty": "spectral_axis,flux,uncertainty\n" + lines([WAVE, FLUX, SIGMA], ","),
    "error before flux": "wave,err,flux\n" + lines([WAVE, SIGMA, FLUX], ","),
    "camel case": "waveLength,fluxValue,fluxErr\n" + lines([WAVE, FLUX, SIGMA], ","),
    "variance": "wave,flux,variance\n" + lines([WAVE, FLUX, SIGMA**2], ",", "%.9g"),
    "ivar": "wave,flux,ivar\n" + lines([WAVE, FLUX, SIGMA**-2.0], ",", "%.9g"),
    "inverse variance in words": "wave,flux,inverse variance\n" + lines([WAVE, FLUX, SIGMA**-2.0], ",", "%.9g"),
    "snr": "wave,flux,snr\n" + lines([WAVE, FLUX, FLUX / SIGMA], ",", "%.9g"),
    "s/n": "wave flux S/N\n" + lines([WAVE, FLUX, FLUX / SIGMA], " ", "%.9g"),
    "sky between": "wave,sky,flux,sigma\n" + lines([WAVE, 3 * FLUX, FLUX, SIGMA], ","),
    "continuum and model beside": "wave,flux,sigma,continuum,model\n" + lines([WAVE, FLUX, SIGMA, FLUX, FLUX], ","),
    "index, wave, flux, sigma": "".join(
        f"{i} {a:.6f} {b:.6f} {c:.6f}\n" for i, (a, b, c) in enumerate(zip(WAVE, FLUX, SIGMA))
    ),
}


@pytest.mark.parametrize("name", THREE_COLUMNS)
def test_three_columns(tmp_path, name):
    same_star(read(tmp_path, THREE_COLUMNS[name]), sigma=SIGMA)


UNITS = {
    "nm": (WAVE / 10, "wavelength [nm]"),
    "um": (WAVE / 1e4, "wavelength [um]"),
    "µm": (WAVE / 1e4, "wavelength (µm)"),
    "m": (WAVE / 1e10, "wavelength (m)"),
    "angstrom word": (WAVE, "wavelength (Angstroms)"),
    "Å": (WAVE, "λ (Å)"),
    "log10": (np.log10(WAVE), "loglam"),
    "log wave with unit": (np.log10(WAVE), "log wavelength [Angstrom]"),
    "ln": (np.log(WAVE), "ln_lambda"),
    "unit as the name": (WAVE / 10, "nm"),
    "no unit, nm": (WAVE / 10, "wavelength"),
    "no unit, um": (WAVE / 1e4, "wavelength"),
    "no unit, m": (WAVE / 1e10, "wavelength"),
    "no unit, log10": (np.log10(WAVE), "x"),
    "no unit, ln": (np.log(WAVE), "x"),
    "wavenumber": (1e8 / WAVE, "wavenumber [cm-1]"),
    "Hz": (2.99792458e18 / WAVE, "frequency [Hz]"),
    "THz": (2.99792458e6 / WAVE, "frequency [THz]"),
    "no unit, Hz": (2.99792458e18 / WAVE, "frequency"),
    "eV": (12398.419843320026 / WAVE, "energy [eV]"),
}


@pytest.mark.parametrize("name", UNITS)
def test_wavelength_units(tmp_path, name):
    values, heading = UNITS[name]
    spec = read(tmp_path, f"{heading},flux\n" + lines([values, FLUX], ",", "%.12g"))
    same_star(spec)
    if name in ("Hz", "THz", "no unit, Hz", "wavenumber", "eV"):
        assert spec.medium == "vacuum" and spec.medium_source == "computed from frequency"
    if name.startswith("no unit"):
        assert any("wavelength unit not stated" in n for n in spec.notes)


def test_unit_named_in_a_comment(tmp_path):
    same_star(read(tmp_path, "# wavelengths are in nm, flux in counts\n" + lines([WAVE / 10, FLUX])))


def test_unit_in_a_comment_is_not_believed_against_the_values(tmp_path):
    same_star(read(tmp_path, "# wavelength calibrated to 0.02 nm\n" + TWO))


FLUXES = {
    "f_lambda": (FLUX * 1e-15, "flux [erg/s/cm2/A]", True),
    "f_lambda, W/m2/nm": (FLUX * 1e-17, "flux [W m-2 nm-1]", True),
    "f_lambda name": (FLUX * 1e-15, "f_lambda", None),
    "Jy": (FLUX * WAVE**2 * 1e-9, "flux [Jy]", True),
    "mJy": (FLUX * WAVE**2 * 1e-9, "flux (mJy)", True),
    "fnu": (FLUX * WAVE**2 * 1e-30, "F_nu", True),
    "erg/s/cm2/Hz": (FLUX * WAVE**2 * 1e-30, "flux [erg/s/cm2/Hz]", True),
    "erg s-1 cm-2 Hz-1": (FLUX * WAVE**2 * 1e-30, "flux [erg s-1 cm-2 Hz-1]", True),
    "nuFnu": (FLUX * WAVE * 1e-12, "flux [erg/s/cm2]", True),
    "photons": (FLUX * WAVE * 1e-3, "flux [photon/s/cm2/A]", True),
    "counts": (FLUX * 30, "counts", False),
    "adu": (FLUX * 30, "flux [adu]", False),
    "normalised": (FLUX / 100, "normalized flux", False),
    "AB magnitudes": (15 - 2.5 * np.log10(FLUX * WAVE**2), "mag [AB]", True),
    "AB mag name": (15 - 2.5 * np.log10(FLUX * WAVE**2), "ABmag", True),
    "ST magnitudes": (15 - 2.5 * np.log10(FLUX), "mag [ST]", True),
    "plain magnitudes": (15 - 2.5 * np.log10(FLUX * WAVE**2), "mag", None),
}


@pytest.mark.parametrize("name", FLUXES)
def test_flux_units_all_become_f_lambda(tmp_path, name):
    values, heading, calibrated = FLUXES[name]
    spec = read(tmp_path, f"wavelength [Angstrom]\t{heading}\n" + lines([WAVE, values], "\t", "%.12g"))
    same_star(spec)
    if calibrated is not None:
        assert spec.meta["flux_calibrated"] is calibrated


def test_magnitude_errors_become_flux_errors(tmp_path):
    """sigma_f / f = 0.4 ln 10 sigma_m = 0.92103 sigma_m."""
    mags = 15 - 2.5 * np.log10(FLUX * WAVE**2)
    errors = np.full(WAVE.size, 0.02)
    spec = read(tmp_path, "wave,ABmag,err\n" + lines([WAVE, mags, errors], ",", "%.10g"))
    np.testing.assert_allclose(spec.sigma / spec.flux, 0.0184207, rtol=1e-5)


def test_fnu_errors_follow_the_flux(tmp_path):
    spec = read(tmp_path, "wave,fnu,err\n" + lines([WAVE, FLUX * WAVE**2, SIGMA * WAVE**2], ",", "%.10g"))
    same_star(spec, sigma=SIGMA)


# --- order, doubles, gaps, blemishes --------------------------------------------------------------------------------


def test_reversed(tmp_path):
    same_star(read(tmp_path, lines([WAVE[::-1], FLUX[::-1], SIGMA[::-1]])), sigma=SIGMA)


def test_unsorted(tmp_path):
    order = np.random.default_rng(1).permutation(WAVE.size)
    spec = read(tmp_path, "wave flux sigma\n" + lines([WAVE[order], FLUX[order], SIGMA[order]]))
    same_star(spec, sigma=SIGMA)
    assert any("out of order" in n for n in spec.notes)


def test_doubled_wavelengths_are_averaged(tmp_path):
    w = np.concatenate([WAVE, WAVE[500:700]])
    f = np.concatenate([FLUX, FLUX[500:700] * 1.2])
    s = np.concatenate([SIGMA, SIGMA[500:700]])
    spec = read(tmp_path, "wave flux sigma\n" + lines([w, f, s]))
    expected, error = FLUX.copy(), SIGMA.copy()
    expected[500:700] *= 1.1
    error[500:700] /= np.sqrt(2)
    same_star(spec, f=expected, sigma=error)
    assert any("200 pixels at doubled wavelengths" in n for n in spec.notes)


def test_gap(tmp_path):
    keep = (WAVE < 5000) | (WAVE > 5400)
    same_star(read(tmp_path, lines([WAVE[keep], FLUX[keep]])), WAVE[keep], FLUX[keep])


@pytest.mark.parametrize("word", ["nan", "NaN", "NAN", "INDEF", "null", "--", "N/A", "inf", "****", "-999.0"])
def test_words_for_nothing_are_invalid_pixels(tmp_path, word):
    rows = TWO.splitlines()
    for i in range(300, 310):
        rows[i] = rows[i].split()[0] + " " + word
    spec = read(tmp_path, "\n".join(rows))
    assert not spec.valid[300:310].any() and spec.valid.sum() == WAVE.size - 10
    assert np.all(spec.flux[300:310] == 0) and np.isfinite(spec.flux).all()


def test_empty_csv_cells_are_invalid_pixels(tmp_path):
    rows = lines([WAVE, FLUX, SIGMA], ",").splitlines()
    rows[40] = rows[40].split(",")[0] + ",,"
    rows[41] = ",".join(rows[41].split(",")[:2]) + ","
    spec = read(tmp_path, "wave,flux,err\n" + "\n".join(rows))
    assert not spec.valid[40] and not spec.valid[41] and spec.valid.sum() == WAVE.size - 2


def test_zeros_are_invalid(tmp_path):
    f = FLUX.copy()
    f[:100] = 0
    f[777] = 0
    spec = read(tmp_path, lines([WAVE, f]))
    assert not spec.valid[:100].any() and not spec.valid[777] and spec.valid.sum() == WAVE.size - 101


def test_lone_zeros_among_small_counts_are_counts(tmp_path):
    counts = np.random.default_rng(0).poisson(4, WAVE.size)
    counts[200:230] = 0
    spec = read(tmp_path, lines([WAVE, counts.astype(float)]))
    assert not spec.valid[200:230].any()
    lone = (counts == 0) & (np.arange(WAVE.size) < 190)
    assert lone.any() and spec.valid[lone].all()


def test_saturated_plateau_is_invalid(tmp_path):
    f = np.minimum(FLUX * 1000, 65535)
    f[600:610] = 65535 * 3
    spec = read(tmp_path, lines([WAVE, f]))
    assert not spec.valid[600:610].any()


@pytest.mark.parametrize("bad", [0.0, -1.0, np.nan, np.inf])
def test_errors_that_are_not_positive_make_invalid_pixels(tmp_path, bad):
    s = SIGMA.copy()
    s[10:20] = bad
    spec = read(tmp_path, "wave flux err\n" + lines([WAVE, FLUX, s]))
    assert not spec.valid[10:20].any() and spec.valid.sum() == WAVE.size - 10
    assert np.isfinite(spec.sigma).all() and (spec.sigma > 0).all()


def test_errors_that_are_nowhere_positive_are_left_out(tmp_path):
    spec = read(tmp_path, "wave flux err\n" + lines([WAVE, FLUX, 0 * FLUX]))
    same_star(spec)
    assert any("nowhere positive" in n for n in spec.notes)


@pytest.mark.parametrize("name,good", [("mask", 0), ("flag", 0), ("quality", 0), ("good", 1)])
def test_mask_columns(tmp_path, name, good):
    m = np.full(WAVE.size, float(good))
    m[50:60] = 1 - good
    spec = read(tmp_path, f"wave,flux,{name}\n" + lines([WAVE, FLUX, m], ",", "%.6f"))
    assert not spec.valid[50:60].any() and spec.valid.sum() == WAVE.size - 10


def test_unnamed_third_column_of_flags_is_left_out(tmp_path):
    m = np.zeros(WAVE.size)
    m[5] = 1
    spec = read(tmp_path, lines([WAVE, FLUX, m]))
    same_star(spec)
    assert any("0 and 1" in n for n in spec.notes)


@pytest.mark.parametrize("kind,values", [("inverse variance", SIGMA**-2.0 * 1e6), ("signal to noise", FLUX / SIGMA)])
def test_unnamed_third_column_too_large_for_an_error_is_told_by_the_noise(tmp_path, kind, values):
    f = FLUX / 1000
    spec = read(tmp_path, lines([WAVE, f, values], " ", "%.9g"))
    np.testing.assert_allclose(spec.sigma / spec.flux, 0.01, rtol=1e-4)
    assert any(kind in n for n in spec.notes)


def test_pixels_out_of_reach_are_left_out(tmp_path):
    w = np.linspace(1500, 9000, 1500)
    spec = read(tmp_path, "wave [A],flux\n" + lines([w, 50 + 0 * w + np.sin(w)], ","))
    assert spec.wave_angstrom[0] >= 2000 and any("left out" in n for n in spec.notes)


def test_ragged_rows(tmp_path):
    rows = THREE.splitlines()
    rows[10] = " ".join(rows[10].split()[:1])
    rows[20] += " 99 98"
    spec = read(tmp_path, "\n".join(rows))
    keep = np.arange(WAVE.size) != 10
    same_star(spec, WAVE[keep], FLUX[keep], SIGMA[keep])
    assert any("short rows" in n for n in spec.notes)


def test_compensating_ragged_rows_do_not_slip(tmp_path):
    """A row short by one and a row long by one leave the total right, and must not shift the columns."""
    rows = TWO.splitlines()
    rows[10] = rows[10].split()[0]
    rows[11] += " 5.0"
    spec = read(tmp_path, "\n".join(rows))
    keep = np.arange(WAVE.size) != 10
    same_star(spec, WAVE[keep], FLUX[keep])


def test_utf16(tmp_path):
    same_star(read(tmp_path, ("# wavelength flux\n" + TWO).encode("utf-16")))


def test_utf16_without_a_mark(tmp_path):
    same_star(read(tmp_path, TWO.encode("utf-16-le")))


def test_latin1(tmp_path):
    same_star(read(tmp_path, "# longueur d'onde en \xc5, étoile\n".encode("latin-1") + TWO.encode()))


def test_gzip(tmp_path):
    same_star(read(tmp_path, gzip.compress(TWO.encode())))


def test_the_name_does_not_matter(tmp_path):
    same_star(read(tmp_path, TWO, "star.fits"))
    same_star(read(tmp_path, TWO, "star.jpg"))
    same_star(read(tmp_path, lines([WAVE, FLUX], ";"), "star.csv"))


def test_decimal_and_dividing_commas_without_leading_zeros(tmp_path):
    """Half-angstrom steps: the whole angstroms repeat while the pairs run on."""
    w = 4000 + 0.5 * np.arange(1000)
    f = np.round(flux_at(w), 1)
    rows = "".join(f"{int(a)},{round(a % 1 * 10)},{int(b)},{round(b % 1 * 10)}\n" for a, b in zip(w, f))
    spec = read(tmp_path, rows)
    same_star(spec, w, f)
    assert "decimal commas read" in spec.notes


def test_whole_numbers_between_commas_are_not_decimals(tmp_path):
    w = 4000.0 + 3 * np.arange(1000)
    f = np.round(100 * flux_at(w))
    rows = "".join(f"{a:.0f},{b:.0f},{c:.0f},{d:.0f}\n" for a, b, c, d in zip(w, f, f / 50 + 1, f / 3))
    spec = read(tmp_path, rows)
    np.testing.assert_array_equal(spec.wave_angstrom, w)
    np.testing.assert_array_equal(spec.flux, f)


# --- ECSV, numpy ----------------------------------------------------------------------------------------------------


def ecsv(unit: str, delimiter: str | None = None, scale: float = 1.0) -> bytes:
    import astropy.units as u
    from astropy.table import Table

    table = Table({"wavelength": WAVE * scale, "flux": FLUX, "flux_error": SIGMA})
    if unit:
        table["wavelength"].unit = u.Unit(unit)
        table["flux"].unit = u.Unit("erg / (s cm2 Angstrom)")
    table.meta["comments"] = ["made up"]
    out = io.StringIO()
    table.write(out, format="ascii.ecsv", **({"delimiter": delimiter} if delimiter else {}))
    return out.getvalue().encode()


@pytest.mark.parametrize("delimiter", [None, ","])
@pytest.mark.parametrize("unit,scale", [("Angstrom", 1.0), ("nm", 0.1), ("um", 1e-4), ("", 1.0)])
def test_ecsv(tmp_path, unit, scale, delimiter):
    spec = read(tmp_path, ecsv(unit, delimiter, scale))
    same_star(spec, sigma=SIGMA)


def test_ecsv_masked_cells(tmp_path):
    from astropy.table import MaskedColumn, Table

    mask = np.zeros(WAVE.size, bool)
    mask[7:12] = True
    table = Table({"wave": WAVE, "flux": MaskedColumn(FLUX, mask=mask)})
    out = io.StringIO()
    table.write(out, format="ascii.ecsv")
    spec = read(tmp_path, out.getvalue())
    assert not spec.valid[7:12].any() and spec.valid.sum() == WAVE.size - 5


def test_ecsv_cut_off(tmp_path):
    whole = ecsv("nm", scale=0.1)
    with pytest.raises(SpectrumError, match=r"cut off|damaged"):
        read(tmp_path, whole[: whole.rindex(b" ", 0, len(whole) // 2)])


def test_ecsv_without_columns(tmp_path):
    with pytest.raises(SpectrumError, match="lists no columns"):
        read(tmp_path, "# %ECSV 1.0\n# ---\nwave flux\n1 2\n")


@pytest.mark.parametrize("array", [np.column_stack([WAVE, FLUX]), np.vstack([WAVE, FLUX])])
def test_numpy_array(tmp_path, array):
    out = io.BytesIO()
    np.save(out, array)
    same_star(read(tmp_path, out.getvalue()))


def test_numpy_fields(tmp_path):
    array = np.zeros(WAVE.size, dtype=[("flux", ">f8"), ("wave", "f8"), ("ivar", "f4")])
    array["wave"], array["flux"], array["ivar"] = WAVE, FLUX, SIGMA**-2.0
    out = io.BytesIO()
    np.save(out, array)
    same_star(read(tmp_path, out.getvalue()), sigma=SIGMA)


def test_numpy_objects_are_refused(tmp_path):
    out = io.BytesIO()
    np.save(out, np.array([{"a": 1}], dtype=object), allow_pickle=True)
    with pytest.raises(SpectrumError, match="numpy array"):
        read(tmp_path, out.getvalue())


def test_votable(tmp_path):
    from astropy.io.votable import from_table
    from astropy.table import Table

    table = Table({"wave": WAVE / 10, "flux": FLUX, "err": SIGMA})
    table["wave"].unit = "nm"
    out = io.BytesIO()
    from_table(table).to_xml(out)
    same_star(read(tmp_path, out.getvalue()), sigma=SIGMA)


def test_votable_without_spectrum(tmp_path):
    text = '<?xml version="1.0"?>\n<VOTABLE version="1.3"><RESOURCE></RESOURCE></VOTABLE>'
    with pytest.raises(SpectrumError, match="VOTable"):
        read(tmp_path, text)


def test_votable_with_entities_is_refused(tmp_path):
    text = '<?xml version="1.0"?>\n<!DOCTYPE x [<!ENTITY a "aaaa">]>\n<VOTABLE version="1.3">&a;</VOTABLE>'
    with pytest.raises(SpectrumError, match="entities"):
        read(tmp_path, text)


# --- asked for ------------------------------------------------------------------------------------------------------


def test_columns_asked_for_by_number_and_name(tmp_path):
    text = "a b c d\n" + lines([SIGMA, FLUX, 2 * FLUX + WAVE, WAVE])
    same_star(read(tmp_path, text, columns="wave=4,flux=2,sigma=1"), sigma=SIGMA)
    same_star(read(tmp_path, text.replace("a b c d", "a flux x wave"), columns={"sigma": "a"}), sigma=SIGMA)
    same_star(read(tmp_path, text, read_as="text,wave=4,flux=2,sigma=1"), sigma=SIGMA)
    same_star(read(tmp_path, text, read_as="wave=4, flux=2, sigma=1"), sigma=SIGMA)


def test_unit_asked_for(tmp_path):
    same_star(read(tmp_path, lines([WAVE / 1e7, FLUX], fmt="%.12g"), columns={"unit": "mm"}))


def test_flux_unit_asked_for(tmp_path):
    same_star(read(tmp_path, lines([WAVE, FLUX * WAVE**2], fmt="%.12g"), columns={"flux_unit": "Jy"}))


@pytest.mark.parametrize("medium", ["air", "vacuum"])
def test_medium_asked_for(tmp_path, medium):
    spec = read(tmp_path, "# wavelengths in air\n" + TWO, medium=medium)
    assert (spec.medium, spec.medium_source) == (medium, "asked for")
    np.testing.assert_allclose(spec.wave_angstrom, WAVE, atol=1e-5)


def test_no_such_column(tmp_path):
    with pytest.raises(SpectrumError, match="no column 9"):
        read(tmp_path, TWO, columns="flux=9")
    with pytest.raises(SpectrumError, match="no column light"):
        read(tmp_path, "wave flux\n" + TWO, columns="flux=light")


@pytest.mark.parametrize(
    "kwargs",
    [
        {"medium": "ether"},
        {"read_as": "tea leaves"},
        {"columns": "wave"},
        {"read_as": "text,wave"},
        {"columns": "colour=3"},
        {"columns": "row=0"},
        {"columns": {"row": "x"}},
    ],
)
def test_requests_that_make_no_sense(tmp_path, kwargs):
    with pytest.raises(RequestError):
        read(tmp_path, TWO, **kwargs)


def test_read_as_text_reads_what_looks_like_something_else(tmp_path):
    same_star(read(tmp_path, "%PDF is how my notes begin\n" + TWO, read_as="text"))


# --- air and vacuum, hints ------------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    "text,medium",
    [
        ("# wavelength (air) flux\n", "air"),
        ("# wavelengths in vacuum\n", "vacuum"),
        ("# vacuum wavelengths, angstrom\n", "vacuum"),
        ("# Wavelength_air\tflux\n", "air"),
        ("wave_vac flux\n", "vacuum"),
        ("# air wavelengths converted to vacuum wavelengths\n", "vacuum"),
        ("# wavelengths converted from vacuum to air\n", "air"),
        ("# wavelengths not in vacuum\n", "air"),
        ("# airmass 1.2 at wavelength 5000\n", "unknown"),
        ("# vacuum pressure 1e-6 mbar\n", "unknown"),
        ("# fair night\n", "unknown"),
        ("", "unknown"),
    ],
)
def test_air_or_vacuum_in_words(tmp_path, text, medium):
    spec = read(tmp_path, text + TWO)
    assert spec.medium == medium
    assert (spec.medium_source == "not stated") is (medium == "unknown")


def test_hints_in_comments():
    text = (
        "# Object: BD+99 1\n# EXPTIME = 1200. / seconds\n# RA: 12:30:00\n# DEC: -45:30:00\n# SNR = 87\n"
        "# R = 1500\n# RV = -12.5 km/s\n# FWHM_A = 3.2\n"
    )
    assert text_meta(text) == {
        "object": "BD+99 1",
        "exptime_s": 1200.0,
        "ra_deg": 187.5,
        "dec_deg": -45.5,
        "snr": 87.0,
        "resolution": 1500.0,
        "velocity_kms": -12.5,
        "fwhm_angstrom": 3.2,
    }


@pytest.mark.parametrize(
    "text,value",
    [
        ("1.5", 1.5),
        ("1,5e3", None),
        ("1.5D-3", 1.5e-3),
        ("1.234-105", 1.234e-105),
        ("-2.5+03", -2500.0),
        (".5", 0.5),
        ("5.", 5.0),
        ("abc", None),
    ],
)
def test_cell(text, value):
    if value is None:
        with pytest.raises(ValueError):
            cell(text)
    else:
        assert cell(text) == pytest.approx(value, rel=1e-12)


@pytest.mark.parametrize("size", [1e-290, 1e-80, 1e80, 1e200])
def test_flux_of_any_size(tmp_path, size):
    """Squares of the flux must stay within the range of a float, so extreme fluxes are scaled."""
    spec = read(tmp_path, "wave flux err\n" + lines([WAVE, FLUX * size, SIGMA * size], fmt="%.9e"))
    same_star(spec, sigma=SIGMA)
    assert 1e-60 < np.median(spec.flux) < 1e60


def test_flux_of_usual_size_is_kept(tmp_path):
    spec = read(tmp_path, lines([WAVE, FLUX * 1e-17], fmt="%.9e"))
    np.testing.assert_allclose(spec.flux, FLUX * 1e-17, rtol=1e-8)


def test_odd_numbers_raise_no_warnings(tmp_path, recwarn):
    f = FLUX.copy()
    f[3], f[5], f[7] = 1e308, -1e308, 1e-320
    read(tmp_path, "wave flux err\n" + lines([WAVE, f, SIGMA], fmt="%.9e"))
    assert not recwarn.list


def test_path_and_notes(tmp_path):
    spec = read(tmp_path, TWO, "my star.txt")
    assert spec.path == str(tmp_path / "my star.txt")
    assert any("flux unit not stated" in n for n in spec.notes)
