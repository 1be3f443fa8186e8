"""Wavelengths, air and vacuum, units and header coordinates against outside sources.

What is compared, with what, and how far apart they may be:

- lines of known wavelength in air and vacuum: the iodine-stabilised He-Ne line, the sodium D lines and H alpha
- the refractive index against Ciddor 1996 (Applied Optics 35, 1566) and Morton 2000, as specutils has them
- FITS axes against ``astropy.wcs`` (wcslib), which the readers do not use
- flux conversions against ``astropy.units`` spectral densities
- survey files against specutils' own loaders
"""

from __future__ import annotations

import io

import astropy.units as u
import numpy as np
import pytest
from astropy.coordinates import Angle
from astropy.io import fits
from astropy.wcs import WCS

from starfathom.classify.reading import plain_from_specutils, read_plain, read_spectrum
from starfathom.classify.reading.hints import angle
from starfathom.classify.reading.units import C_ANGSTROM_PER_S, HC_EV_ANGSTROM, spectral_unit
from starfathom.classify.resample import air_from_vacuum

N = 900
RNG = np.random.default_rng(11)
SHAPE = 100 + 20 * np.sin(np.arange(N) / 25) + RNG.normal(0, 0.5, N)


def save(folder, *units):
    path = folder / "star.fits"
    fits.HDUList(list(units)).writeto(path, overwrite=True)
    return path


# --- air and vacuum -------------------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    "vacuum,air,what",
    [
        # mise en pratique of the metre: 632.99121 nm in vacuum; 632.816 nm in standard air (common practice)
        (6329.9121, 6328.16, "He-Ne laser"),
        # NIST Atomic Spectra Database, from memory
        (5891.5833, 5889.9510, "Na D2"),
        (5897.5581, 5895.9242, "Na D1"),
        (6564.61, 6562.80, "H alpha"),
        (4862.69, 4861.33, "H beta"),
        (4341.69, 4340.47, "H gamma"),
        (3934.77, 3933.66, "Ca II K"),
        (8500.35, 8498.02, "Ca II triplet"),
    ],
)
def test_lines_of_known_wavelength(vacuum, air, what):
    assert air_from_vacuum(np.array([vacuum]))[0] == pytest.approx(air, abs=0.012), what


@pytest.mark.parametrize("method,tolerance", [("Morton2000", 1e-6), ("Ciddor1996", 2e-4), ("Edlen1953", 2e-3)])
def test_refractive_index_against_specutils(method, tolerance):
    from specutils.utils.wcs_utils import vac_to_air

    wave = np.linspace(3500, 10000, 50)
    theirs = vac_to_air(wave * u.AA, method=method).to_value(u.AA)
    np.testing.assert_allclose(air_from_vacuum(wave), theirs, rtol=0, atol=tolerance * 10)


def test_air_taken_for_vacuum_is_a_shift_of_82_to_86_kms():
    """Nearly the same shift all along the optical, so lines alone cannot tell the two apart."""
    wave = np.linspace(3700, 9000, 30)
    shift = 299792.458 * (wave / air_from_vacuum(wave) - 1)
    assert 82 < shift.min() and shift.max() < 86


# --- constants and units --------------------------------------------------------------------------------------------


def test_constants_against_astropy():
    from astropy.constants import c, h

    assert c.to_value("AA/s") == pytest.approx(C_ANGSTROM_PER_S, rel=1e-15)
    assert (h * c).to_value("eV AA") == pytest.approx(HC_EV_ANGSTROM, rel=1e-12)


@pytest.mark.parametrize(
    "word",
    [
        "Angstrom",
        "nm",
        "um",
        "micron",
        "mm",
        "cm",
        "m",
        "pm",
        "Hz",
        "kHz",
        "MHz",
        "GHz",
        "THz",
        "eV",
        "keV",
        "1/cm",
        "1/m",
        "1/um",
    ],
)
def test_spectral_units_against_astropy(word):
    unit = spectral_unit(word)
    assert unit is not None
    values = np.array([0.5, 2.0, 7.0])
    theirs = (values * u.Unit(word)).to_value(u.AA, u.spectral())
    constant = {"wavelength": None, "frequency": C_ANGSTROM_PER_S, "wavenumber": 1e8, "energy": HC_EV_ANGSTROM}[
        unit.kind
    ]
    ours = values * unit.scale if constant is None else constant / (values * unit.scale)
    np.testing.assert_allclose(ours, theirs, rtol=1e-12)


@pytest.mark.parametrize(
    "unit",
    [
        "Jy",
        "mJy",
        "erg / (s cm2 Hz)",
        "W / (m2 Hz)",
        "W / (m2 um)",
        "erg / (s cm2 AA)",
        "ph / (s cm2 AA)",
        "mag(AB)",
        "mag(ST)",
    ],
)
def test_flux_units_against_astropy(tmp_path, unit):
    wave = np.linspace(4000, 7000, N) * u.AA
    f_lambda = SHAPE * 1e-15 * u.erg / u.s / u.cm**2 / u.AA
    if unit.startswith("mag"):
        target = u.ABmag if "AB" in unit else u.STmag
        values = f_lambda.to(target.physical_unit, u.spectral_density(wave)).to(target).value
    else:
        values = f_lambda.to_value(u.Unit(unit), u.spectral_density(wave))
    path = tmp_path / "star.txt"
    rows = "\n".join(f"{w:.4f}\t{v:.12g}" for w, v in zip(wave.value, values))
    path.write_text(f"wavelength [Angstrom]\tflux [{unit}]\n{rows}\n")
    spec = read_plain(path)
    factor = np.median(spec.flux / SHAPE)
    np.testing.assert_allclose(spec.flux, factor * SHAPE, rtol=1e-7)


@pytest.mark.parametrize(
    "text,hours",
    [("05:14:32.27", True), ("-08:12:05.9", False), ("18h36m56.3s", True), ("+38d47m01s", False), ("6 45 8.9", True)],
)
def test_angles_against_astropy(text, hours):
    theirs = Angle(text, unit=None if text[-1] == "s" else u.hourangle if hours else u.deg).deg
    assert angle(text, hours) == pytest.approx(theirs, abs=1e-9)


# --- FITS axes ------------------------------------------------------------------------------------------------------

AXES = {
    "linear": {"CTYPE1": "WAVE", "CUNIT1": "Angstrom", "CRVAL1": 4321.5, "CDELT1": 2.75, "CRPIX1": 17.5},
    "linear in nm": {"CTYPE1": "AWAV", "CUNIT1": "nm", "CRVAL1": 532.15, "CDELT1": 0.275, "CRPIX1": 317.25},
    "PC": {"CTYPE1": "WAVE", "CUNIT1": "um", "CRVAL1": 0.45, "CDELT1": 1e-4, "PC1_1": 2.5, "CRPIX1": 3.0},
    "CD": {"CTYPE1": "WAVE", "CUNIT1": "m", "CRVAL1": 4.5e-7, "CD1_1": 2.5e-10, "CRPIX1": -12.0},
    "logarithmic": {"CTYPE1": "WAVE-LOG", "CUNIT1": "Angstrom", "CRVAL1": 5000.0, "CDELT1": 1.5, "CRPIX1": 401.0},
    "air, logarithmic": {"CTYPE1": "AWAV-LOG", "CUNIT1": "nm", "CRVAL1": 410.0, "CDELT1": 0.12, "CRPIX1": 1.0},
    "frequency": {"CTYPE1": "FREQ", "CUNIT1": "THz", "CRVAL1": 500.0, "CDELT1": 0.21, "CRPIX1": 300.0},
    "frequency, default unit": {"CTYPE1": "FREQ", "CRVAL1": 5e14, "CDELT1": 2.1e11, "CRPIX1": 300.0},
    "wavenumber": {"CTYPE1": "WAVN", "CUNIT1": "m-1", "CRVAL1": 1.6e6, "CDELT1": 800.0, "CRPIX1": 1.0},
    "energy": {"CTYPE1": "ENER", "CUNIT1": "eV", "CRVAL1": 1.7, "CDELT1": 1.4e-3, "CRPIX1": 1.0},
}


@pytest.mark.parametrize("name", AXES)
def test_axes_against_wcslib(tmp_path, name):
    unit = fits.PrimaryHDU(SHAPE)
    for key, value in AXES[name].items():
        unit.header[key] = value
    spec = read_plain(save(tmp_path, unit))
    wcs = WCS(unit.header)
    theirs = (wcs.all_pix2world(np.arange(N), 0)[0] * wcs.wcs.cunit[0]).to_value(u.AA, u.spectral())
    # wcslib converts energies with constants older than the SI of 2019, 8e-8 apart
    rtol = 1e-7 if name == "energy" else 1e-10
    np.testing.assert_allclose(spec.wave_angstrom, np.sort(theirs), rtol=rtol)
    assert spec.medium == ("air" if AXES[name]["CTYPE1"].startswith("AWAV") else "vacuum")


# --- the same files through specutils -------------------------------------------------------------------------------


def test_table_against_specutils(tmp_path):
    from specutils import Spectrum

    wave = np.linspace(4000, 7000, N)
    table = fits.BinTableHDU.from_columns(
        [
            fits.Column("wavelength", "D", unit="Angstrom", array=wave),
            fits.Column("flux", "D", unit="erg / (s cm2 Angstrom)", array=SHAPE),
            fits.Column("uncertainty", "D", unit="erg / (s cm2 Angstrom)", array=0.01 * SHAPE),
        ]
    )
    path = save(tmp_path, fits.PrimaryHDU(), table)
    theirs = plain_from_specutils(Spectrum.read(path, format="tabular-fits"))
    ours = read_plain(path)
    np.testing.assert_allclose(ours.wave_angstrom, theirs.wave_angstrom, rtol=1e-12)
    np.testing.assert_allclose(ours.flux, theirs.flux, rtol=1e-12)
    np.testing.assert_allclose(ours.sigma, theirs.sigma, rtol=1e-12)
    assert ours.meta["flux_calibrated"] is theirs.meta["flux_calibrated"] is True


def test_image_against_specutils(tmp_path):
    from specutils import Spectrum

    unit = fits.PrimaryHDU(SHAPE)
    for key, value in {
        "CTYPE1": "AWAV",
        "CUNIT1": "Angstrom",
        "CRVAL1": 4000.0,
        "CDELT1": 3.0,
        "CRPIX1": 1.0,
        "BUNIT": "Jy",
    }.items():
        unit.header[key] = value
    path = save(tmp_path, unit)
    theirs = plain_from_specutils(Spectrum.read(path, format="wcs1d-fits"))
    ours = read_plain(path)
    np.testing.assert_allclose(ours.wave_angstrom, theirs.wave_angstrom, rtol=1e-12)
    np.testing.assert_allclose(ours.flux / ours.flux[0], theirs.flux / theirs.flux[0], rtol=1e-10)
    assert ours.medium == theirs.medium == "air"
    asked = read_plain(path, read_as="specutils:wcs1d-fits")
    np.testing.assert_allclose(asked.wave_angstrom, ours.wave_angstrom, rtol=1e-12)


def test_sdss_spec_file_against_specutils(tmp_path):
    from specutils import Spectrum

    loglam = 3.58 + 1e-4 * np.arange(3000)
    flux = np.interp(np.arange(3000), np.linspace(0, 3000, N), SHAPE)
    table = fits.BinTableHDU.from_columns(
        [
            fits.Column("flux", "E", array=flux),
            fits.Column("loglam", "E", array=loglam),
            fits.Column("ivar", "E", array=1 / (0.01 * flux) ** 2),
            fits.Column("and_mask", "J", array=np.zeros(3000)),
        ],
        name="COADD",
    )
    table.header["BUNIT"] = "1E-17 erg/cm^2/s/Ang"
    first = fits.PrimaryHDU()
    first.header["TELESCOP"], first.header["FIBERID"], first.header["PLATEID"] = "SDSS 2.5-M", 1, 266
    path = save(tmp_path, first, table, fits.BinTableHDU.from_columns([fits.Column("Z", "E", array=[0.0])]))
    theirs = Spectrum.read(path, format="SDSS-III/IV spec")
    ours = read_plain(path)
    np.testing.assert_allclose(ours.wave_angstrom, theirs.spectral_axis.to_value(u.AA), rtol=1e-6)
    np.testing.assert_allclose(ours.flux, theirs.flux.value, rtol=1e-6)
    np.testing.assert_allclose(ours.sigma, theirs.uncertainty.array**-0.5, rtol=1e-5)
    assert ours.medium == "vacuum"


def test_log_linear_image_where_specutils_reads_it_as_linear(tmp_path):
    """The known trap: with DC-FLAG = 1 the values of the axis are log10 of angstrom."""
    unit = fits.PrimaryHDU(SHAPE)
    for key, value in {
        "CTYPE1": "LINEAR",
        "CRVAL1": 3.7,
        "CDELT1": 1e-4,
        "CD1_1": 1e-4,
        "CRPIX1": 1.0,
        "DC-FLAG": 1,
        "WCSDIM": 1,
    }.items():
        unit.header[key] = value
    spec = read_plain(save(tmp_path, unit))
    np.testing.assert_allclose(spec.wave_angstrom, 10 ** (3.7 + 1e-4 * np.arange(N)), rtol=1e-12)


# --- to specutils and back ------------------------------------------------------------------------------------------


def test_to_specutils_and_back(tmp_path):
    wave = np.linspace(4000, 7000, N)
    flux = SHAPE.copy()
    flux[5:9] = 0
    path = tmp_path / "star.txt"
    rows = "\n".join(f"{w:.5f} {f:.6f} {s:.6f}" for w, f, s in zip(wave, flux, 0.01 * SHAPE))
    path.write_text(f"# Object: test star\n# wavelengths in vacuum\nwave flux err\n{rows}\n")
    ours = read_plain(path)
    there = read_spectrum(path)
    assert there.spectral_axis.unit == u.AA and there.mask.sum() == 4
    back = plain_from_specutils(there)
    np.testing.assert_allclose(back.wave_angstrom, ours.wave_angstrom, rtol=1e-12)
    np.testing.assert_allclose(back.flux, ours.flux, rtol=1e-12)
    np.testing.assert_allclose(back.sigma[back.valid], ours.sigma[ours.valid], rtol=1e-12)
    assert (back.valid == ours.valid).all() and (back.medium, back.path) == (ours.medium, ours.path)
    assert back.meta["object"] == "test star"


@pytest.mark.parametrize("kind", ["var", "ivar"])
def test_uncertainty_kinds_of_specutils(kind):
    from astropy.nddata import InverseVariance, VarianceUncertainty
    from specutils import Spectrum

    error = 0.02 * SHAPE
    made = VarianceUncertainty(error**2) if kind == "var" else InverseVariance(error**-2.0)
    plain = plain_from_specutils(
        Spectrum(flux=SHAPE * u.Jy, spectral_axis=np.linspace(400, 700, N) * u.nm, uncertainty=made)
    )
    np.testing.assert_allclose(plain.sigma / plain.flux, 0.02, rtol=1e-10)


def test_specutils_frequency_axis_and_errors():
    from specutils import Spectrum

    from starfathom.classify.errors import SpectrumError

    plain = plain_from_specutils(Spectrum(flux=SHAPE * u.Jy, spectral_axis=np.linspace(430, 700, N) * u.THz))
    assert plain.medium == "vacuum" and plain.wave_angstrom[0] == pytest.approx(2997924.58 / 700)
    with pytest.raises(SpectrumError, match="not one spectrum"):
        plain_from_specutils(Spectrum(flux=np.ones((3, N)) * u.Jy, spectral_axis=np.linspace(400, 700, N) * u.nm))
    with pytest.raises(SpectrumError, match="gives no wavelengths"):
        plain_from_specutils(Spectrum(flux=SHAPE * u.Jy, spectral_axis=np.arange(N) * u.pix))


def test_asking_specutils_for_what_it_cannot_read(tmp_path):
    from starfathom.classify.errors import SpectrumError

    path = tmp_path / "star.txt"
    path.write_bytes(io.BytesIO(b"nothing at all").getvalue())
    with pytest.raises(SpectrumError, match="specutils cannot read it"):
        read_plain(path, read_as="specutils")
