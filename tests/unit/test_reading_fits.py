"""FITS images and tables in every usual layout come out with the right wavelengths, flux and uncertainties.

The files are written by astropy, which the quick reader does not use.
"""

from __future__ import annotations

import bz2
import gzip
import io
import lzma
import zipfile

import numpy as np
import pytest
from astropy.io import fits
from reading_star import FLUX, SIGMA, WAVE, N, flux_at, read, same_star

from starfathom.classify.errors import SpectrumError

STEP = WAVE[1] - WAVE[0]
LOG_WAVE = np.log10(3801.25) + 2.4e-4 * np.arange(N)
FLUX_LOG = flux_at(10**LOG_WAVE)


def as_bytes(*units: object) -> bytes:
    out = io.BytesIO()
    fits.HDUList(list(units)).writeto(out, output_verify="silentfix+ignore")
    return out.getvalue()


def image(data: np.ndarray, cls: type = fits.PrimaryHDU, name: str = "", **cards: object) -> object:
    unit = cls(np.asarray(data))
    if name:
        unit.name = name
    for key, value in cards.items():
        unit.header[key.replace("__", "-")] = value
    return unit


LINEAR = {"CRVAL1": WAVE[0], "CDELT1": STEP, "CRPIX1": 1.0}


def table(
    columns: dict[str, np.ndarray],
    units: dict[str, str] | None = None,
    header: dict[str, object] | None = None,
    primary: dict[str, object] | None = None,
    formats: dict[str, str] | None = None,
    name: str = "",
) -> bytes:
    made = []
    for key, values in columns.items():
        values = np.asarray(values)
        form = (formats or {}).get(key) or {"f": "D", "i": "J", "b": "L", "u": "J"}[values.dtype.kind]
        if values.ndim == 2 and not form[0].isdigit():
            form = f"{values.shape[1]}{form}"
        made.append(fits.Column(name=key, format=form, array=values, unit=(units or {}).get(key)))
    unit = fits.BinTableHDU.from_columns(made, name=name or None)
    for key, value in (header or {}).items():
        unit.header[key] = value
    first = fits.PrimaryHDU()
    for key, value in (primary or {}).items():
        first.header[key] = value
    return as_bytes(first, unit)


# --- images ---------------------------------------------------------------------------------------------------------

IMAGES = {
    "CDELT1": image(FLUX, **LINEAR),
    "CD1_1": image(FLUX, CRVAL1=WAVE[0], CD1_1=STEP, CRPIX1=1.0),
    "CD1_1 and CDELT1 of 1": image(FLUX, CRVAL1=WAVE[0], CD1_1=STEP, CDELT1=1.0, CRPIX1=1.0),
    "no CRPIX1": image(FLUX, CRVAL1=WAVE[0], CDELT1=STEP),
    "CRPIX1 in the middle": image(FLUX, CRVAL1=WAVE[0] + 600 * STEP, CDELT1=STEP, CRPIX1=601.0),
    "CRPIX1 outside": image(FLUX, CRVAL1=WAVE[0] - 50 * STEP, CDELT1=STEP, CRPIX1=-49.0),
    "negative step": image(FLUX[::-1], CRVAL1=WAVE[-1], CDELT1=-STEP),
    "PC1_1": image(FLUX, CRVAL1=WAVE[0], CDELT1=STEP / 2, PC1_1=2.0),
    "single precision": image(FLUX.astype(">f4"), **LINEAR),
    "unit angstrom": image(FLUX, CUNIT1="Angstrom", CTYPE1="WAVE", **LINEAR),
    "unit nm": image(FLUX, CUNIT1="nm", CRVAL1=WAVE[0] / 10, CDELT1=STEP / 10),
    "no unit, nm": image(FLUX, CRVAL1=WAVE[0] / 10, CDELT1=STEP / 10),
    "unit um": image(FLUX, CUNIT1="um", CRVAL1=WAVE[0] / 1e4, CDELT1=STEP / 1e4),
    "unit m": image(FLUX, CUNIT1="m", CTYPE1="WAVE", CRVAL1=WAVE[0] / 1e10, CDELT1=STEP / 1e10),
    "no unit, m": image(FLUX, CTYPE1="AWAV", CRVAL1=WAVE[0] / 1e10, CDELT1=STEP / 1e10),
    "IRAF linear": image(
        FLUX,
        WCSDIM=1,
        CTYPE1="LINEAR",
        WAT0_001="system=equispec",
        WAT1_001="wtype=linear label=Wavelength units=angstroms",
        DC__FLAG=0,
        CRVAL1=WAVE[0],
        CD1_1=STEP,
    ),
    "1 x N": image(FLUX[None, :], **LINEAR),
    "1 x 1 x N": image(FLUX[None, None, :], **LINEAR),
    "N x 1, axis 2": image(FLUX[:, None], CRVAL2=WAVE[0], CDELT2=STEP, CRPIX2=1.0),
    "axis 3": image(FLUX[:, None, None], CRVAL3=WAVE[0], CDELT3=STEP, CTYPE3="WAVE"),
    "W0 and WPC": image(FLUX, W0=WAVE[0], WPC=STEP),
    "number as text": image(FLUX, CRVAL1=f"{WAVE[0]:.6f}", CDELT1=f"{STEP:.12f}"),
    "unit deg by mistake": image(FLUX, CUNIT1="deg", **LINEAR),
    "long header": image(FLUX, **LINEAR, **{f"KEY{i}": f"value {i}" for i in range(300)}),
    "blank cards and history": image(FLUX, HISTORY="reduced", COMMENT="fine", **LINEAR),
}


@pytest.mark.parametrize("name", IMAGES)
def test_linear_images(tmp_path, name):
    same_star(read(tmp_path, as_bytes(IMAGES[name])))


LOG_IMAGES = {
    "DC-FLAG": image(FLUX_LOG, CRVAL1=LOG_WAVE[0], CDELT1=2.4e-4, CRPIX1=1.0, DC__FLAG=1),
    "DC-FLAG, CD1_1, WAT": image(
        FLUX_LOG,
        CRVAL1=LOG_WAVE[0],
        CD1_1=2.4e-4,
        DC__FLAG=1,
        CTYPE1="LINEAR",
        WAT1_001="wtype=linear label=Wavelength units=Angstroms",
    ),
    "no flag": image(FLUX_LOG, CRVAL1=LOG_WAVE[0], CDELT1=2.4e-4),
    "no flag but unit": image(FLUX_LOG, CRVAL1=LOG_WAVE[0], CDELT1=2.4e-4, CUNIT1="Angstrom"),
    "CTYPE1 LOGLAM": image(FLUX_LOG, CRVAL1=LOG_WAVE[0], CDELT1=2.4e-4, CTYPE1="LOGLAM"),
    "unit log(Angstrom)": image(FLUX_LOG, CRVAL1=LOG_WAVE[0], CDELT1=2.4e-4, CUNIT1="log(Angstrom)"),
    "unit log(nm)": image(FLUX_LOG, CRVAL1=LOG_WAVE[0] - 1, CDELT1=2.4e-4, CUNIT1="log(nm)"),
    "natural": image(FLUX_LOG, CRVAL1=LOG_WAVE[0] * np.log(10), CDELT1=2.4e-4 * np.log(10)),
    "WAVE-LOG": image(
        FLUX_LOG,
        CTYPE1="WAVE-LOG",
        CUNIT1="Angstrom",
        CRVAL1=10 ** LOG_WAVE[0],
        CDELT1=10 ** LOG_WAVE[0] * 2.4e-4 * np.log(10),
        CRPIX1=1.0,
    ),
    "COEFF0": image(FLUX_LOG, COEFF0=LOG_WAVE[0], COEFF1=2.4e-4),
}


@pytest.mark.parametrize("name", LOG_IMAGES)
def test_logarithmic_images(tmp_path, name):
    same_star(read(tmp_path, as_bytes(LOG_IMAGES[name])), 10**LOG_WAVE, FLUX_LOG)


def test_frequency_axis(tmp_path):
    hz = np.linspace(4.1e14, 7.7e14, N)
    w = 2.99792458e18 / hz
    f = flux_at(w)
    spec = read(
        tmp_path, as_bytes(image(f * w**2, CTYPE1="FREQ", CUNIT1="Hz", CRVAL1=hz[0], CDELT1=hz[1] - hz[0], BUNIT="Jy"))
    )
    same_star(spec, w[::-1], f[::-1])
    assert spec.medium == "vacuum"


def test_scaled_integers_and_blanks(tmp_path):
    unit = fits.PrimaryHDU(np.round(FLUX * 100).astype(np.int16))
    unit.header.update(LINEAR)
    data = bytearray(as_bytes(unit))
    raw = np.round((FLUX - 100) * 200).astype(">i2")
    raw[5:9] = -32768
    header = unit.header.copy()
    header["BSCALE"], header["BZERO"], header["BLANK"] = 0.005, 100.0, -32768
    data = bytearray(header.tostring().encode()) + raw.tobytes()
    data += b"\0" * (-len(data) % 2880)
    spec = read(tmp_path, bytes(data))
    assert not spec.valid[5:9].any() and spec.valid.sum() == N - 4
    keep = spec.valid
    np.testing.assert_allclose(spec.flux[keep], raw[keep] * 0.005 + 100, rtol=1e-12)


def test_unsigned_integers(tmp_path):
    same_star(read(tmp_path, as_bytes(image((FLUX * 300).astype(np.uint16), **LINEAR))), rtol=1e-4)


def test_nan_pixels(tmp_path):
    f = FLUX.copy()
    f[30:40] = np.nan
    f[50] = np.inf
    spec = read(tmp_path, as_bytes(image(f, **LINEAR)))
    assert spec.valid.sum() == N - 11 and np.isfinite(spec.flux).all()


@pytest.mark.parametrize(
    "pack,name",
    [
        (gzip.compress, "a.fits.gz"),
        (bz2.compress, "a.fits.bz2"),
        (lzma.compress, "a.fits.xz"),
        (lambda b: gzip.compress(gzip.compress(b)), "a"),
        (lambda b: gzip.compress(b[:4000]) + gzip.compress(b[4000:]), "a"),
    ],
)
def test_packed(tmp_path, pack, name):
    same_star(read(tmp_path, pack(as_bytes(IMAGES["CDELT1"])), name))


def test_zip_of_one(tmp_path):
    out = io.BytesIO()
    with zipfile.ZipFile(out, "w", zipfile.ZIP_DEFLATED) as archive:
        archive.writestr("star.fits", as_bytes(IMAGES["CDELT1"]))
    same_star(read(tmp_path, out.getvalue()))


def test_missing_padding_is_no_harm(tmp_path):
    data = as_bytes(IMAGES["CDELT1"])
    header = data.index(b"END" + b" " * 77) // 2880 + 1
    same_star(read(tmp_path, data[: header * 2880 + FLUX.size * 8]))


# --- stacks of rows -------------------------------------------------------------------------------------------------

IRAF_BANDS = {
    "BANDID1": "spectrum - background fit, weights variance, clean yes",
    "BANDID2": "raw - background fit, weights none, clean no",
    "BANDID3": "background - background fit",
    "BANDID4": "sigma - background fit, weights variance, clean yes",
}
STACKS = {
    "flux and error": (image(np.vstack([FLUX, SIGMA]), **LINEAR), True),
    "wavelength and flux": (image(np.vstack([WAVE, FLUX])), False),
    "flux and wavelength": (image(np.vstack([FLUX, WAVE])), False),
    "wavelength, flux, error": (image(np.vstack([WAVE, FLUX, SIGMA])), True),
    "columns": (image(np.column_stack([WAVE, FLUX])), False),
    "columns of three": (image(np.column_stack([WAVE, FLUX, SIGMA])), True),
    "columns, nm": (image(np.column_stack([WAVE / 10, FLUX])), False),
    "IRAF bands": (image(np.stack([FLUX, 1.1 * FLUX, 0.1 * FLUX, SIGMA])[:, None, :], **LINEAR, **IRAF_BANDS), True),
    "IRAF bands without names": (image(np.stack([FLUX, 1.1 * FLUX, 0.1 * FLUX, SIGMA])[:, None, :], **LINEAR), True),
    "named rows": (image(np.stack([SIGMA, FLUX]), ARRAY1="ERROR", ARRAY2="FLUX", **LINEAR), True),
    "flux, raw, background": (image(np.stack([FLUX, 1.1 * FLUX, -0.1 * FLUX])[:, None, :], **LINEAR), False),
}


@pytest.mark.parametrize("name", STACKS)
def test_stacks(tmp_path, name):
    unit, has_error = STACKS[name]
    same_star(read(tmp_path, as_bytes(unit)), sigma=SIGMA if has_error else None)


def test_old_sdss_image(tmp_path):
    """spSpec files of the first data releases: flux, continuum-subtracted flux, error, mask over log10 wavelength."""
    error = 0.01 * FLUX_LOG
    rows = np.stack([FLUX_LOG, FLUX_LOG - 100, error, np.zeros(N), np.zeros(N)])
    unit = image(
        rows.astype(">f4"),
        COEFF0=LOG_WAVE[0],
        COEFF1=2.4e-4,
        TELESCOP="SDSS 2.5-M",
        PLATEID=1,
        FIBERID=2,
        DC__FLAG=1,
        CRVAL1=LOG_WAVE[0],
        CD1_1=2.4e-4,
        BUNIT="1.0E-17 erg/cm/s/Ang",
        RAOBJ=150.1,
        DECOBJ=2.2,
        Z=-1e-4,
        NAME="spec",
    )
    spec = read(tmp_path, as_bytes(unit))
    same_star(spec, 10**LOG_WAVE, FLUX_LOG, error)
    assert spec.medium == "vacuum" and "SDSS" in spec.medium_source
    assert spec.meta["ra_deg"] == 150.1 and spec.meta["dec_deg"] == 2.2
    assert spec.meta["velocity_kms"] == pytest.approx(-29.979, abs=0.001)


def test_old_sdss_image_masks_pixels_without_error(tmp_path):
    error = 0.01 * FLUX_LOG
    error[100:120] = 0
    rows = np.stack([FLUX_LOG, FLUX_LOG - 100, error, np.zeros(N), np.zeros(N)])
    spec = read(tmp_path, as_bytes(image(rows, COEFF0=LOG_WAVE[0], COEFF1=2.4e-4)))
    assert not spec.valid[100:120].any() and spec.valid.sum() == N - 20


@pytest.mark.parametrize("cards", [{"TELESCOP": "LAMOST"}, {}])
def test_old_lamost_image(tmp_path, cards):
    """Flux, inverse variance, wavelength, and-mask, or-mask."""
    mask = np.zeros(N)
    mask[20:25] = 4
    rows = np.stack([FLUX_LOG, (0.01 * FLUX_LOG) ** -2.0, 10**LOG_WAVE, mask, mask])
    spec = read(tmp_path, as_bytes(image(rows.astype(">f4"), COEFF0=LOG_WAVE[0], COEFF1=2.4e-4, **cards)))
    assert not spec.valid[20:25].any() and spec.valid.sum() == N - 5
    np.testing.assert_allclose(spec.wave_angstrom, 10**LOG_WAVE, rtol=1e-6)
    keep = spec.valid
    np.testing.assert_allclose(spec.sigma[keep] / spec.flux[keep], 0.01, rtol=1e-4)
    if cards:
        assert spec.medium == "vacuum" and "LAMOST" in spec.medium_source


# --- several image extensions ---------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    "name,values",
    [
        ("ERR", SIGMA),
        ("SIGMA", SIGMA),
        ("error", SIGMA),
        ("VAR", SIGMA**2),
        ("VARIANCE", SIGMA**2),
        ("IVAR", SIGMA**-2.0),
        ("STDEV", SIGMA),
        ("UNCERT", SIGMA),
        ("SNR", FLUX / SIGMA),
        ("NOISE", SIGMA),
    ],
)
def test_error_extension(tmp_path, name, values):
    spec = read(tmp_path, as_bytes(image(FLUX, **LINEAR), image(values, fits.ImageHDU, name)))
    same_star(spec, sigma=SIGMA)


def test_flux_in_an_extension_with_mask_and_error(tmp_path):
    mask = np.zeros(N, np.int16)
    mask[3:6] = 2
    spec = read(
        tmp_path,
        as_bytes(
            fits.PrimaryHDU(),
            image(FLUX, fits.ImageHDU, "SCI", **LINEAR),
            image(SIGMA, fits.ImageHDU, "ERR"),
            image(mask, fits.ImageHDU, "DQ"),
        ),
    )
    assert spec.valid.sum() == N - 3 and spec.sigma is not None


def test_error_before_flux(tmp_path):
    spec = read(
        tmp_path,
        as_bytes(
            fits.PrimaryHDU(),
            image(SIGMA, fits.ImageHDU, "ERR", **LINEAR),
            image(FLUX, fits.ImageHDU, "FLUX", **LINEAR),
        ),
    )
    same_star(spec, sigma=SIGMA)


@pytest.mark.parametrize(
    "name,values,unit",
    [("WAVELENGTH", WAVE, "Angstrom"), ("WAVE", WAVE / 10, "nm"), ("LAMBDA", WAVE, ""), ("LOGLAM", np.log10(WAVE), "")],
)
def test_wavelength_extension(tmp_path, name, values, unit):
    other = image(values, fits.ImageHDU, name)
    if unit:
        other.header["BUNIT"] = unit
    same_star(read(tmp_path, as_bytes(image(FLUX), other)))


def test_wavelength_table_beside_an_image(tmp_path):
    unit = fits.BinTableHDU.from_columns([fits.Column("WAVELENGTH", "D", unit="nm", array=WAVE / 10)])
    same_star(read(tmp_path, as_bytes(image(FLUX), unit)))


def test_hdu_asked_for(tmp_path):
    data = as_bytes(image(FLUX, **LINEAR), image(2 * FLUX[::-1], fits.ImageHDU, "SKYLESS", **LINEAR))
    same_star(read(tmp_path, data, columns={"hdu": 1}), f=FLUX[::-1])
    same_star(read(tmp_path, data, columns="hdu=skyless"), f=FLUX[::-1])
    from starfathom.classify.reading import read_plain

    same_star(read_plain(f"{tmp_path / 'star.dat'}[SKYLESS]"), f=FLUX[::-1])
    same_star(read_plain(f"{tmp_path / 'star.dat'}[0]"))
    with pytest.raises(SpectrumError, match="no HDU 7"):
        read(tmp_path, data, columns="hdu=7")


def test_plate_of_spectra_by_row(tmp_path):
    """Stacks of fibres with inverse variances and masks in extensions of the same shape."""
    stack = np.stack([FLUX_LOG * (i + 1) for i in range(20)])
    mask = np.zeros(stack.shape, np.int32)
    mask[3, 8] = 1
    data = as_bytes(
        image(stack, COEFF0=LOG_WAVE[0], COEFF1=2.4e-4),
        image((0.01 * stack) ** -2.0, fits.ImageHDU, "IVAR"),
        image(mask, fits.ImageHDU, "ANDMASK"),
    )
    spec = read(tmp_path, data, columns="row=4")
    assert spec.valid.sum() == N - 1 and not spec.valid[8]
    keep = spec.valid
    np.testing.assert_allclose(spec.flux[keep], stack[3][keep], rtol=1e-12)
    np.testing.assert_allclose(spec.sigma[keep] / spec.flux[keep], 0.01, rtol=1e-9)
    with pytest.raises(SpectrumError, match="row of it can be picked: read as row=1"):
        read(tmp_path, data)


def test_apertures_of_one_image_are_several_spectra(tmp_path):
    unit = image(np.stack([FLUX, FLUX[::-1], FLUX + 5]), APNUM1="1 1", APNUM2="2 2", APNUM3="3 3", **LINEAR)
    with pytest.raises(SpectrumError, match="3 apertures"):
        read(tmp_path, as_bytes(unit))
    same_star(read(tmp_path, as_bytes(unit), columns="row=2"), f=FLUX[::-1])


def test_bits_that_mark_a_whole_survey_spectrum_are_left_out(tmp_path):
    ivar = SIGMA**-2.0
    ivar[:20] = 0
    data = table({"wave": WAVE, "flux": FLUX, "ivar": ivar, "and_mask": np.full(N, 1 << 27)})
    spec = read(tmp_path, data)
    assert spec.valid.sum() == N - 20 and not spec.valid[:20].any()
    assert any("marks 100 %" in n for n in spec.notes)


@pytest.mark.parametrize(
    "name,unit,power", [("STMAG", "mag", 0), ("MAG_ST", "mag", 0), ("ABMAG", "mag", 2), ("mag", "", 2)]
)
def test_magnitude_columns(tmp_path, name, unit, power):
    mags = 15 - 2.5 * np.log10(FLUX * WAVE**power)
    same_star(read(tmp_path, table({"wave": WAVE, name: mags}, {name: unit} if unit else None)))


def test_unnamed_extension_of_likely_errors(tmp_path):
    spec = read(tmp_path, as_bytes(image(FLUX, **LINEAR), fits.ImageHDU(SIGMA)))
    same_star(spec, sigma=SIGMA)
    assert any("unnamed HDU 1 taken as one standard deviation" in n for n in spec.notes)
    same_star(read(tmp_path, as_bytes(image(FLUX, **LINEAR), fits.ImageHDU(-SIGMA))))


@pytest.mark.parametrize("name,medium", [("Wave_vac", "vacuum"), ("LAMBDA_AIR", "air"), ("WAVE", "unknown")])
def test_air_or_vacuum_in_a_column_name(tmp_path, name, medium):
    assert read(tmp_path, table({name: WAVE, "FLUX": FLUX})).medium == medium


@pytest.mark.parametrize("name", ["TEFF", "TIME", "RA", "MJD"])
def test_steady_columns_of_catalogues_are_no_wavelengths(tmp_path, name):
    with pytest.raises(SpectrumError, match="without a wavelength column"):
        read(tmp_path, table({name: WAVE, "FLUX": FLUX}))


def test_resolving_power_gives_a_line_width(tmp_path):
    """A resolving power of 2500 is an FWHM of 2 A at 5000 A."""
    spec = read(tmp_path, as_bytes(image(FLUX, SPEC_RES=2500.0, **LINEAR)))
    assert spec.meta["fwhm_angstrom"] == 2.0


def test_table_coordinate_type_without_its_table(tmp_path):
    with pytest.raises(SpectrumError, match="WAVE-TAB needs a general reader"):
        read(tmp_path, as_bytes(image(FLUX, CTYPE1="WAVE-TAB", CRVAL1=1.0, CDELT1=1.0)))


def test_row_asked_for(tmp_path):
    stack = np.stack([FLUX * (i + 1) + i * WAVE / 100 for i in range(12)])
    data = as_bytes(image(stack, **LINEAR))
    same_star(read(tmp_path, data, columns="row=5"), f=stack[4])
    with pytest.raises(SpectrumError, match="no row 13"):
        read(tmp_path, data, columns="row=13")
    with pytest.raises(SpectrumError, match="12 image"):
        read(tmp_path, data)


# --- multispec ------------------------------------------------------------------------------------------------------


def multispec(spec: str, n: int = N, extra: dict[str, object] | None = None, strip: bool = False) -> bytes:
    text = f'wtype=multispec spec1 = "{spec}"'
    cards: dict[str, object] = {
        "WCSDIM": 2,
        "CTYPE1": "MULTISPE",
        "CTYPE2": "MULTISPE",
        "CDELT1": 1.0,
        "CD1_1": 1.0,
        "CD2_2": 1.0,
        "WAT0_001": "system=multispec",
        "WAT1_001": "wtype=multispec label=Wavelength units=angstroms",
    }
    unit = image(np.zeros((1, n)), **cards, **(extra or {}))
    for i in range(0, len(text), 68):
        piece = text[i : i + 68]
        unit.header[f"WAT2_{i // 68 + 1:03d}"] = piece.rstrip() if strip else piece
    return unit


def read_multispec(tmp_path, spec, w, **kwargs):
    unit = multispec(spec, w.size, **kwargs)
    unit.data = flux_at(w)[None, :]
    same_star(read(tmp_path, as_bytes(unit)), w, flux_at(w), wtol=1e-5)


def test_multispec_linear(tmp_path):
    read_multispec(
        tmp_path, f"1 1 0 {WAVE[0]!r} {STEP!r} {N} 0. 1. 10.".replace("np.float64(", "").replace(")", ""), WAVE
    )


def test_multispec_logarithmic(tmp_path):
    read_multispec(tmp_path, f"1 1 1 {float(LOG_WAVE[0])!r} 2.4E-4 {N} 0. 1. 10.", 10**LOG_WAVE)


def test_multispec_doppler(tmp_path):
    read_multispec(tmp_path, f"1 1 0 {float(WAVE[0])!r} {float(STEP)!r} {N} 0.001 1. 10.", WAVE / 1.001)


PIXEL = np.arange(1, N + 1.0)
COEFFICIENTS = [5600.0, 1795.0, -12.5, 3.25, 0.7]


@pytest.mark.parametrize("strip", [False, True])
def test_multispec_chebyshev(tmp_path, strip):
    """Recursion of Valdes 1993: x_1 = 1, x_2 = n, x_k = 2 n x_(k-1) - x_(k-2)."""
    x = (PIXEL - (N + 1) / 2) / ((N - 1) / 2)
    terms = [np.ones(N), x]
    for _ in range(3):
        terms.append(2 * x * terms[-1] - terms[-2])
    w = sum(c * t for c, t in zip(COEFFICIENTS, terms))
    spec = f"1 1 2 {w[0]:.10f} 3.0 {N} 0. 1. 10. 1. 0. 1 5 1. {N}. " + " ".join(f"{c:.14f}" for c in COEFFICIENTS)
    read_multispec(tmp_path, spec, w, strip=strip)


def test_multispec_legendre_with_offset(tmp_path):
    """Recursion of Valdes 1993: x_k = ((2k-3) n x_(k-1) - (k-2) x_(k-2)) / (k-1)."""
    x = (PIXEL - (N + 1) / 2) / ((N - 1) / 2)
    terms = [np.ones(N), x]
    for k in range(3, 6):
        terms.append(((2 * k - 3) * x * terms[-1] - (k - 2) * terms[-2]) / (k - 1))
    w = sum(c * t for c, t in zip(COEFFICIENTS, terms)) + 4.5
    spec = f"1 1 2 {w[0]:.10f} 3.0 {N} 0. 1. 10. 1. 4.5 2 5 1. {N}. " + " ".join(f"{c:.14f}" for c in COEFFICIENTS)
    read_multispec(tmp_path, spec, w)


def test_multispec_cubic_spline(tmp_path):
    """The basis of Valdes 1993 is six times the uniform cubic B-spline."""
    from scipy.interpolate import BSpline

    pieces = 4
    c = np.array([600.0, 750.0, 905.0, 1052.0, 1200.0, 1340.0, 1490.0])
    w = BSpline(np.arange(-3, pieces + 4), 6 * c, 3)((PIXEL - 1) / (N - 1) * pieces)
    spec = f"1 1 2 {w[0]:.8f} 3.0 {N} 0. 1. 10. 1. 0. 3 {pieces} 1. {N}. " + " ".join(f"{v:.10f}" for v in c)
    read_multispec(tmp_path, spec, w)


def test_multispec_linear_spline(tmp_path):
    knots = [3800.0, 5050.0, 6120.0, 7400.0]
    w = np.interp((PIXEL - 1) / (N - 1) * 3, [0, 1, 2, 3], knots)
    spec = f"1 1 2 {w[0]:.8f} 3.0 {N} 0. 1. 10. 1. 0. 4 3 1. {N}. " + " ".join(f"{v:.6f}" for v in knots)
    read_multispec(tmp_path, spec, w)


def test_multispec_two_functions_weighted(tmp_path):
    x = (PIXEL - (N + 1) / 2) / ((N - 1) / 2)
    w = 0.25 * (5600 + 1800 * x) + 0.75 * (5604 + 1790 * x)
    spec = f"1 1 2 {w[0]:.8f} 3.0 {N} 0. 1. 10. 0.25 0. 1 2 1. {N}. 5600. 1800. 0.75 0. 2 2 1. {N}. 5604. 1790."
    read_multispec(tmp_path, spec, w)


def test_multispec_pixel_array_and_samples(tmp_path):
    n = 150
    w = np.linspace(3900, 6900, n) + 3 * np.sin(np.arange(n) / 40)
    array = f"1 1 2 3900. 3.0 {n} 0. 1. 10. 1. 0. 5 {n} " + " ".join(f"{v:.6f}" for v in w)
    read_multispec(tmp_path, array, w)
    samples = f"1 1 2 3900. 3.0 {n} 0. 1. 10. 1. 0. 6 3 1. 3900. 75. 5400. 150. 6900."
    read_multispec(tmp_path, samples, np.interp(np.arange(1, n + 1), [1, 75, 150], [3900, 5400, 6900]))


def test_multispec_section_of_a_longer_image(tmp_path):
    """LTV1 = -100 says that pixel 1 was pixel 101 before the spectrum was cut."""
    w = 3501.25 + 3.0 * (PIXEL + 100 - 1)
    spec = f"1 1 0 3501.25 3.0 {N + 100} 0. 1. 10."
    read_multispec(tmp_path, spec, w, extra={"LTV1": -100.0, "LTM1_1": 1.0})


def test_multispec_binned_by_two(tmp_path):
    """LTM1_1 = 0.5 and LTV1 = 0.25: image pixel 1 is the mean of pixels 1 and 2."""
    w = 3801.25 + 1.5 * (2 * PIXEL - 0.5 - 1)
    spec = f"1 1 0 3801.25 1.5 {2 * N} 0. 1. 10."
    read_multispec(tmp_path, spec, w, extra={"LTV1": 0.25, "LTM1_1": 0.5})


@pytest.mark.parametrize(
    "spec,why",
    [
        ("1 1 2 3800. 3. 1200 0. 1. 10. 1. 0. 1 5 1. 1200. 1. 2.", "cut off"),
        ("1 1 2 3800. 3. 1200 0. 1. 10. 1. 0. 9 5 1. 1200. 1. 2.", "not known"),
        ("1 1 7 3800. 3. 1200 0. 1. 10.", "not known"),
        ("1 1 2 3800. x. 1200 0. 1. 10.", "not a number"),
        ("1 1 2", "cut off"),
        ("1 1 2 3800. 3. 1200 0. 1. 10. 1. 0. 1 2 5. 5. 1. 2.", "empty pixel range"),
    ],
)
def test_broken_multispec(tmp_path, spec, why):
    unit = multispec(spec)
    unit.data = FLUX[None, :]
    with pytest.raises(SpectrumError, match=why):
        read(tmp_path, as_bytes(unit))


# --- tables ---------------------------------------------------------------------------------------------------------

NAMES = [
    ("WAVELENGTH", "FLUX", "ERROR"),
    ("wave", "flux", "sigma"),
    ("Lambda", "Flux", "Flux_Err"),
    ("LAMBDA", "F_LAMBDA", "STAT"),
    ("wl", "fl", "er"),
    ("wavelength", "flux", "uncertainty"),
    ("WAVE", "FLUX_REDUCED", "ERR_FLUX"),
    ("Wave", "Counts", "Noise"),
    ("spectral_axis", "flux", "std"),
    ("LAM", "SPEC", "E_SPEC"),
    ("wvl", "intensity", "stddev"),
    ("WAVELENGTH", "FLUX", "STATERROR"),
    ("ANGSTROM", "Flux Density", "Error"),
]


@pytest.mark.parametrize("names", NAMES, ids=lambda n: n[0] + "-" + n[1])
@pytest.mark.parametrize("vector", [False, True], ids=["rows", "one row"])
def test_table_names(tmp_path, names, vector):
    columns = {k: (v[None, :] if vector else v) for k, v in zip(names, (WAVE, FLUX, SIGMA))}
    same_star(read(tmp_path, table(columns)), sigma=SIGMA)


@pytest.mark.parametrize(
    "name,values",
    [("IVAR", SIGMA**-2.0), ("InvVar", SIGMA**-2.0), ("VAR", SIGMA**2), ("variance", SIGMA**2), ("SNR", FLUX / SIGMA)],
)
def test_table_error_kinds(tmp_path, name, values):
    same_star(read(tmp_path, table({"wave": WAVE, "flux": FLUX, name: values})), sigma=SIGMA)


@pytest.mark.parametrize(
    "unit,values",
    [
        ("Angstrom", WAVE),
        ("nm", WAVE / 10),
        ("um", WAVE / 1e4),
        ("micron", WAVE / 1e4),
        ("m", WAVE / 1e10),
        ("0.1 nm", WAVE),
        ("Angstroms", WAVE),
        ("log(Angstrom)", np.log10(WAVE)),
        ("dex(Angstrom)", np.log10(WAVE)),
        ("log(nm)", np.log10(WAVE / 10)),
        ("log10 nm", np.log10(WAVE / 10)),
        ("ln(Angstrom)", np.log(WAVE)),
        ("Angstrom", np.log10(WAVE)),
        ("Hz", 2.99792458e18 / WAVE),
    ],
)
def test_table_wavelength_units(tmp_path, unit, values):
    same_star(read(tmp_path, table({"wave": values, "flux": FLUX}, {"wave": unit})))


@pytest.mark.parametrize(
    "unit,values,calibrated",
    [
        ("erg/s/cm2/A", FLUX, True),
        ("erg s**-1 cm**-2 Angstrom**-1", FLUX, True),
        ("1e-17 erg/cm^2/s/Ang", FLUX, True),
        ("W/m2/um", FLUX, True),
        ("Jy", FLUX * WAVE**2, True),
        ("erg/s/cm2/Hz", FLUX * WAVE**2, True),
        ("W m-2 Hz-1", FLUX * WAVE**2, True),
        ("count", FLUX, False),
        ("ADU", FLUX, False),
        ("electron", FLUX, False),
        ("ph/s/cm2/A", FLUX * WAVE, True),
    ],
)
def test_table_flux_units(tmp_path, unit, values, calibrated):
    spec = read(tmp_path, table({"wave": WAVE, "flux": values}, {"flux": unit, "wave": "Angstrom"}))
    same_star(spec)
    assert spec.meta["flux_calibrated"] is calibrated


ROLES = [
    (
        "wave",
        "WAVELENGTH wave Lambda lambda_A wavelength_nm wave_air WAVE_VAC loglam log_lambda lnlam freq wl x λ Wave[nm]",
    ),
    (
        "flux",
        "FLUX flux_lambda f_lam F Fnu fluxErgs flux_norm counts ADU relative_flux obsFlux flux1 SPEC intensity_adu",
    ),
    ("flux", "continuum_normalized_flux sky_subtracted_flux flux_telluric_corrected ABmag Flux(Jy) y"),
    (
        "std",
        "ERR error sigma flux_err fluxErr FLUX_ERROR e_flux eflux dflux STATERROR uncertainty noise FluxSigma yerr σ",
    ),
    ("var", "VAR variance flux_var FLUX_VARIANCE"),
    ("ivar", "IVAR invvar inverse_variance flux_ivar INV_VAR weight"),
    ("snr", "SNR S/N s_n signal_to_noise SN"),
    ("bad", "mask AND_MASK or_mask DQ flags quality bad_pixel DATAQUAL"),
    ("good", "good valid use"),
    ("index", "pixel index n row"),
    (
        "other",
        "sky SKYFLUX_model background model continuum flux_cont wdisp wave_err dlambda lambda_sigma fwhm response note",
    ),
]


@pytest.mark.parametrize("role,names", ROLES, ids=[f"{r[0]} {i}" for i, r in enumerate(ROLES)])
def test_roles_of_names(role, names):
    from starfathom.classify.reading.names import role_of

    assert {name: role_of(name)[0] for name in names.split()} == dict.fromkeys(names.split(), role)


def test_names_that_tell_nothing(tmp_path):
    same_star(read(tmp_path, table({"col1": WAVE, "col2": FLUX})))
    same_star(read(tmp_path, table({"A": FLUX, "B": WAVE})))


def test_columns_asked_for_in_a_table(tmp_path):
    data = table({"p": FLUX, "q": WAVE, "r": SIGMA, "flux": 2 * WAVE})
    same_star(read(tmp_path, data, columns="wave=q,flux=p,sigma=R"), sigma=SIGMA)
    same_star(read(tmp_path, data, columns="wave=2,flux=1,err=3"), sigma=SIGMA)
    with pytest.raises(SpectrumError, match="no numeric column zz"):
        read(tmp_path, data, columns="wave=zz")


def test_integer_scaling_and_null(tmp_path):
    counts = np.round(FLUX * 100).astype(np.int32)
    counts[4:8] = -99
    unit = fits.BinTableHDU.from_columns(
        [fits.Column("wave", "E", array=WAVE.astype(np.float32)), fits.Column("flux", "J", array=counts, null=-99)]
    )
    spec = read(tmp_path, as_bytes(fits.PrimaryHDU(), unit))
    assert not spec.valid[4:8].any() and spec.valid.sum() == N - 4


def test_scaled_column(tmp_path):
    counts = np.round((FLUX - 100) * 100).astype(np.int16)
    data = table({"wave": WAVE, "flux": counts}, header={"XSCAL2": 0.01, "XZERO2": 100.0}, formats={"flux": "I"})
    data = data.replace(b"XSCAL2  ", b"TSCAL2  ").replace(b"XZERO2  ", b"TZERO2  ")
    same_star(read(tmp_path, data), f=counts * 0.01 + 100)


def test_variable_length_arrays(tmp_path):
    made = [
        fits.Column(k, "PD()", array=np.array([v], dtype=object))
        for k, v in (("WAVE", WAVE), ("FLUX", FLUX), ("ERR", SIGMA))
    ]
    same_star(read(tmp_path, as_bytes(fits.PrimaryHDU(), fits.BinTableHDU.from_columns(made))), sigma=SIGMA)


def test_header_wavelengths_for_a_table(tmp_path):
    same_star(
        read(tmp_path, table({"flux": FLUX_LOG}, header={"COEFF0": LOG_WAVE[0], "COEFF1": 2.4e-4})),
        10**LOG_WAVE,
        FLUX_LOG,
    )
    same_star(
        read(tmp_path, table({"flux": FLUX_LOG}, primary={"COEFF0": LOG_WAVE[0], "COEFF1": 2.4e-4})),
        10**LOG_WAVE,
        FLUX_LOG,
    )


def test_sdss_spec_file(tmp_path):
    """spec-PLATE-MJD-FIBER files: HDU 1 COADD with flux, loglam, ivar, masks, wdisp; HDU 2 the catalogue row."""
    ivar = (0.01 * FLUX_LOG) ** -2.0
    ivar[300:310] = 0
    and_mask = np.zeros(N, np.int32)
    and_mask[5] = 1 << 20
    columns = [
        fits.Column("flux", "E", array=FLUX_LOG),
        fits.Column("loglam", "E", array=LOG_WAVE),
        fits.Column("ivar", "E", array=ivar),
        fits.Column("and_mask", "J", array=and_mask),
        fits.Column("or_mask", "J", array=np.full(N, 4)),
        fits.Column("wdisp", "E", array=np.full(N, 1.2)),
        fits.Column("sky", "E", array=FLUX_LOG),
        fits.Column("model", "E", array=FLUX_LOG),
    ]
    row = fits.BinTableHDU.from_columns(
        [fits.Column("Z", "E", array=[0.0]), fits.Column("CLASS", "6A", array=["STAR"])]
    )
    first = fits.PrimaryHDU()
    first.header["TELESCOP"], first.header["PLUG_RA"], first.header["PLUG_DEC"] = "SDSS 2.5-M", 10.0, -1.0
    spec = read(tmp_path, as_bytes(first, fits.BinTableHDU.from_columns(columns, name="COADD"), row))
    np.testing.assert_allclose(spec.wave_angstrom, 10**LOG_WAVE, rtol=1e-6)
    assert not spec.valid[300:310].any() and not spec.valid[5] and spec.valid.sum() == N - 11
    keep = spec.valid
    np.testing.assert_allclose(spec.sigma[keep] / spec.flux[keep], 0.01, rtol=1e-4)
    assert spec.medium == "vacuum" and spec.meta["ra_deg"] == 10.0
    # 2.3548 x 1.2 pixels of 1e-4 dex: 2.99 A at 4600 A
    assert 2.5 < spec.meta["fwhm_angstrom"] < 3.6


def test_new_lamost_table(tmp_path):
    """One row of arrays: FLUX, IVAR, WAVELENGTH, ANDMASK, ORMASK."""
    mask = np.zeros((1, N), np.int16)
    mask[0, 9] = 1
    data = table(
        {
            "FLUX": FLUX_LOG[None],
            "IVAR": (0.01 * FLUX_LOG[None]) ** -2.0,
            "WAVELENGTH": 10 ** LOG_WAVE[None],
            "ANDMASK": mask,
            "ORMASK": np.ones((1, N), np.int16),
        },
        primary={"TELESCOP": "LAMOST", "OBJECT": "LAMOST J000", "RA": 12.5, "DEC": 41.0},
        formats={"ANDMASK": "I", "ORMASK": "I"},
    )
    spec = read(tmp_path, data)
    assert spec.valid.sum() == N - 1 and not spec.valid[9]
    assert spec.medium == "vacuum" and spec.meta["object"] == "LAMOST J000"
    assert (spec.meta["ra_deg"], spec.meta["dec_deg"]) == (12.5, 41.0)


def test_flux_standard_table(tmp_path):
    """A table with statistical and systematic errors, resolution and exposure columns, over 1150 A to 3 um."""
    w = np.geomspace(1150, 29999, 3000)
    data = table(
        {
            "WAVELENGTH": w,
            "FLUX": flux_at(w) * 1e-13,
            "STATERROR": flux_at(w) * 2e-15,
            "SYSERROR": flux_at(w) * 9e-15,
            "FWHM": np.full(w.size, 5.0),
            "DATAQUAL": np.zeros(w.size, np.int16),
            "TOTEXP": np.ones(w.size),
        },
        {"WAVELENGTH": "ANGSTROMS", "FLUX": "FLAM", "STATERROR": "FLAM"},
    )
    spec = read(tmp_path, data)
    assert spec.wave_angstrom[0] >= 2000 and spec.wave_angstrom[-1] <= 25000
    np.testing.assert_allclose(spec.sigma / spec.flux, 0.02, rtol=1e-6)
    assert spec.meta["flux_calibrated"] is True


def test_spectrograph_row(tmp_path):
    """One row with gross, background, net and flux arrays beside scalar columns."""
    data = table(
        {
            "SPORDER": np.array([1]),
            "NELEM": np.array([N]),
            "WAVELENGTH": WAVE[None],
            "GROSS": 3 * FLUX[None],
            "BACKGROUND": FLUX[None],
            "NET": 2 * FLUX[None],
            "FLUX": FLUX[None],
            "ERROR": SIGMA[None],
            "DQ": np.zeros((1, N), np.int16),
        },
        {"WAVELENGTH": "Angstroms", "FLUX": "erg/s/cm**2/Angstrom"},
        formats={"DQ": "I"},
    )
    same_star(read(tmp_path, data), sigma=SIGMA)


def test_several_rows_of_arrays_need_a_row(tmp_path):
    data = table({"WAVE": np.stack([WAVE, WAVE + 1]), "FLUX": np.stack([FLUX, FLUX[::-1]])})
    with pytest.raises(SpectrumError, match="2 spectra"):
        read(tmp_path, data)
    same_star(read(tmp_path, data, columns="row=2"), WAVE + 1, FLUX[::-1])


def test_catalogue_before_the_spectrum(tmp_path):
    other = fits.BinTableHDU.from_columns(
        [fits.Column("NAME", "5A", array=["a", "b"]), fits.Column("MAG", "E", array=[1.0, 2.0])], name="INFO"
    )
    main = fits.BinTableHDU.from_columns(
        [fits.Column("WAVE", "D", array=WAVE), fits.Column("FLUX", "D", array=FLUX)], name="SPECTRUM"
    )
    same_star(read(tmp_path, as_bytes(fits.PrimaryHDU(), other, main)))


def test_ascii_table_extension(tmp_path):
    unit = fits.TableHDU.from_columns(
        [fits.Column("WAVELENGTH", "F12.4", array=WAVE), fits.Column("FLUX", "E16.8", array=FLUX)]
    )
    same_star(read(tmp_path, as_bytes(fits.PrimaryHDU(), unit)))


def test_compressed_image(tmp_path):
    unit = fits.CompImageHDU(np.round(FLUX * 1000).astype(np.int32)[None, :], compression_type="RICE_1")
    for key, value in LINEAR.items():
        unit.header[key] = value
    same_star(read(tmp_path, as_bytes(fits.PrimaryHDU(), unit)), rtol=1e-4)


def test_table_masked_by_a_logical_column(tmp_path):
    good = np.ones(N, bool)
    good[10:15] = False
    spec = read(tmp_path, table({"wave": WAVE, "flux": FLUX, "good": good}))
    assert spec.valid.sum() == N - 5


# --- headers --------------------------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    "cards,medium",
    [
        ({"CTYPE1": "AWAV"}, "air"),
        ({"CTYPE1": "WAVE"}, "vacuum"),
        ({"CTYPE1": "WAVE-LOG", "CUNIT1": "Angstrom"}, "vacuum"),
        ({"AIRORVAC": "air"}, "air"),
        ({"AIRORVAC": "vac"}, "vacuum"),
        ({"VACUUM": True}, "vacuum"),
        ({"VACUUM": 1}, "vacuum"),
        ({"VACUUM": False}, "air"),
        ({"COMMENT": "Wavelengths are in vacuum"}, "vacuum"),
        ({"HISTORY": "air wavelength scale"}, "air"),
        ({"CTYPE1": "LINEAR"}, "unknown"),
        ({"AIRMASS": 1.2}, "unknown"),
        ({"COMMENT": "dewar vacuum pressure fine"}, "unknown"),
        ({"TELESCOP": "LAMOST"}, "vacuum"),
        ({"CTYPE1": "WAVE", "AIRORVAC": "air"}, "air"),
        ({"CTYPE1": "WAVE", "VACUUM": False}, "air"),
        ({"INAIR": True}, "air"),
        ({"VACUUM": "yes"}, "vacuum"),
        ({"COMMENT": "wavelengths in air, not vacuum"}, "air"),
        ({"CTYPE1": "AWAV", "TELESCOP": "LAMOST"}, "air"),
        ({"CTYPE1": "WAVE", "COMMENT": "spectrum taken in the air"}, "vacuum"),
        ({"CRVAL1": (WAVE[0], "first wavelength [Angstrom, air]")}, "air"),
    ],
)
def test_air_or_vacuum_from_the_header(tmp_path, cards, medium):
    spec = read(tmp_path, as_bytes(image(FLUX, **{**LINEAR, **cards})))
    assert spec.medium == medium
    assert (spec.medium_source == "not stated") is (medium == "unknown")


def test_header_hints(tmp_path):
    spec = read(
        tmp_path,
        as_bytes(
            image(
                FLUX,
                OBJECT="BD-99 77",
                EXPTIME=900.0,
                RA="10:30:00.0",
                DEC="-20:15:00",
                SNR=55.0,
                VRAD=-31.5,
                SPEC_RES=(2000.0, "resolving power"),
                FWHM=(2.7, "line spread FWHM [Angstrom]"),
                BUNIT="erg/cm2/s/A",
                **LINEAR,
            )
        ),
    )
    assert spec.meta == {
        "object": "BD-99 77",
        "exptime_s": 900.0,
        "ra_deg": 157.5,
        "dec_deg": -20.25,
        "snr": 55.0,
        "velocity_kms": -31.5,
        "resolution": 2000.0,
        "fwhm_angstrom": 2.7,
        "flux_calibrated": True,
    }


@pytest.mark.parametrize(
    "cards,key,value",
    [
        ({"VRAD": (-31500.0, "[m/s] radial velocity")}, "velocity_kms", -31.5),
        ({"VRAD": (-31.5, "[km/s]")}, "velocity_kms", -31.5),
        ({"VRAD": 0.0}, "velocity_kms", None),
        ({"FWHM": (0.27, "line width in nm")}, "fwhm_angstrom", 2.7),
        ({"FWHM": 2.7}, "fwhm_angstrom", None),
        ({"SPEC_FWHM": 2.7}, "fwhm_angstrom", 2.7),
        ({"FLUXCAL": "ABSOLUTE"}, "flux_calibrated", True),
        ({"FLUXCAL": "UNCALIBRATED"}, "flux_calibrated", False),
        ({"CA-FLAG": 0}, "flux_calibrated", False),
        ({"CA-FLAG": 1}, "flux_calibrated", True),
        ({"OBJECT": "unknown"}, "object", None),
        ({"EXPTIME": -5.0}, "exptime_s", None),
        ({"RA": 400.0, "DEC": 10.0}, "ra_deg", None),
    ],
)
def test_single_hints(tmp_path, cards, key, value):
    spec = read(tmp_path, as_bytes(image(FLUX, **{**LINEAR, **cards})))
    assert spec.meta.get(key) == (None if value is None else pytest.approx(value))


@pytest.mark.parametrize(
    "cards,log",
    [
        ({"CRVAL1": np.log(3801.25), "CDELT1": 5e-4, "CUNIT1": "Angstrom", "DC-FLAG": 1}, "ln"),
        ({"CRVAL1": LOG_WAVE[0], "CDELT1": 2.4e-4, "CUNIT1": "nm", "DC-FLAG": 1}, "log10"),
    ],
)
def test_logarithms_under_a_unit_that_does_not_fit(tmp_path, cards, log):
    exponent = cards["CRVAL1"] + cards["CDELT1"] * np.arange(N)
    w = np.exp(exponent) if log == "ln" else 10**exponent
    same_star(read(tmp_path, as_bytes(image(flux_at(w), **cards))), w, flux_at(w))


@pytest.mark.parametrize("unit", ["pixel", "PIX"])
def test_axes_in_pixels_are_no_wavelengths(tmp_path, unit):
    with pytest.raises(SpectrumError, match="nothing about wavelengths"):
        read(tmp_path, as_bytes(image(FLUX, CRVAL1=4000.0, CDELT1=1.0, CUNIT1=unit)))


def test_errors_and_masks_of_another_length_are_left_out(tmp_path):
    data = table({"WAVE": WAVE[None], "FLUX": FLUX[None], "ERR": SIGMA[None, :7], "MASK": np.ones((1, 9))})
    spec = read(tmp_path, data)
    same_star(spec)
    assert any("uncertainties left out" in n for n in spec.notes) and any("mask left out" in n for n in spec.notes)


def test_seeing_is_not_resolution(tmp_path):
    spec = read(tmp_path, as_bytes(image(FLUX, FWHM=(2.7, "seeing in arcsec"), **LINEAR)))
    assert "fwhm_angstrom" not in spec.meta


@pytest.mark.parametrize(
    "text,hours,degrees",
    [
        ("12:00:00", True, 180.0),
        ("-00:30:00", False, -0.5),
        ("12 30 36", True, 187.65),
        ("1h30m00s", True, 22.5),
        ("45.5", True, 45.5),
        ("+12d15m00s", False, 12.25),
        ("nowhere", True, None),
    ],
)
def test_angles(text, hours, degrees):
    from starfathom.classify.reading.hints import angle

    assert angle(text, hours) == (None if degrees is None else pytest.approx(degrees, abs=1e-9))


def test_survey_columns_tell_vacuum_without_the_survey_header(tmp_path):
    ivar, mask = (0.01 * FLUX_LOG) ** -2.0, np.zeros(N, np.int32)
    sdss = {"flux": FLUX_LOG, "loglam": LOG_WAVE, "ivar": ivar, "and_mask": mask}
    assert read(tmp_path, table(sdss)).medium == "vacuum"
    lamost = {"FLUX": FLUX_LOG, "IVAR": ivar, "WAVELENGTH": 10**LOG_WAVE, "ANDMASK": mask, "ORMASK": mask}
    assert read(tmp_path, table(lamost)).medium == "vacuum"
    assert read(tmp_path, table({"flux": FLUX_LOG, "loglam": LOG_WAVE, "ivar": ivar})).medium == "unknown"
