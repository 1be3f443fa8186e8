"""Profile fits against profiles of known area and width, and the line table made from them."""

from __future__ import annotations

import numpy as np
import pytest
from numpy.typing import NDArray

from starfathom.classify.lines import Feature, FeatureTable, measure_lines, measure_many
from starfathom.classify.lines.profile_fits import BulkFits, fit_many
from starfathom.classify.lines.profiles import SIGMA_TO_FWHM, gaussian, voigt, voigt_fwhm, width_at_depth
from starfathom.classify.spectrum import PlainSpectrum

FloatArray = NDArray[np.float64]

WAVE = np.arange(4350.0, 4650.0, 1.0)
SINGLE = Feature("HeI_test", "line", 4500.0, (4488.0, 4512.0), (4460.0, 4485.0), (4515.0, 4540.0))
PAIR = Feature("pair", "pair", 4500.0, SINGLE.window, SINGLE.blue, SINGLE.red, kind="blend",
               components=(("first", 4498.0), ("second", 4502.0)))


def profile(wave: FloatArray, centre: float, fwhm: float, gamma: float = 0.0) -> FloatArray:
    return voigt(wave, np.array(centre), np.array(fwhm / SIGMA_TO_FWHM), np.array(gamma))[0]


def fit(flux: FloatArray, sigma: float, feature: Feature = SINGLE, fwhm: float = 3.0, wave: FloatArray = WAVE,
        **keys: object) -> BulkFits:
    flux = np.atleast_2d(flux)
    lines = measure_many(wave, flux, np.full(flux.shape, sigma), np.ones(flux.shape, bool), fwhm,
                         features=FeatureTable((feature,)))
    return fit_many(wave, lines, **keys)  # type: ignore[arg-type]


def plain(flux: FloatArray, sigma: FloatArray | None = None, wave: FloatArray = WAVE) -> PlainSpectrum:
    return PlainSpectrum(wave, flux, sigma, np.ones(wave.size, bool), medium="air")


def test_profiles_have_unit_area_and_true_derivatives() -> None:
    x = np.linspace(-3000.0, 3000.0, 600001)
    for gamma in (0.0, 0.4, 2.0):
        value = voigt(x, np.array(0.3), np.array(1.1), np.array(gamma))[0]
        tail = 2 * gamma / np.pi / 3000.0
        assert np.trapezoid(value, x) + tail == pytest.approx(1.0, abs=2e-6)
    at = np.array([-1.7, 0.2, 2.5])
    h = 1e-5
    base = [np.array(v) for v in (0.3, 1.1, 0.7)]
    _, *slopes = voigt(at, *base)
    for i, slope in enumerate(slopes):
        up, down = [b.copy() for b in base], [b.copy() for b in base]
        up[i] = up[i] + h
        down[i] = down[i] - h
        np.testing.assert_allclose(slope, (voigt(at, *up)[0] - voigt(at, *down)[0]) / (2 * h), rtol=1e-6, atol=1e-9)
    _, *slopes = gaussian(at, *base[:2])
    for i, slope in enumerate(slopes):
        np.testing.assert_allclose(slope, voigt(at, *base[:2], np.array(0.0))[1 + i], rtol=1e-9)


def test_voigt_width_formula_against_the_profile_itself() -> None:
    for gamma in (0.0, 0.3, 1.0, 5.0):
        sigma, g = np.array(1.0), np.array(gamma)
        top = voigt(np.array(0.0), np.array(0.0), sigma, g)[0]
        assert voigt_fwhm(sigma, g) == pytest.approx(width_at_depth(np.array(1.0), sigma, g, float(top / 2)), rel=3e-4)


@pytest.mark.parametrize("phase", [0.0, 0.31, 0.77])
@pytest.mark.parametrize(("intrinsic", "gamma"), [(4.0, 0.0), (2.0, 1.5), (0.5, 3.0)])
def test_area_width_and_centre_without_noise(phase: float, intrinsic: float, gamma: float) -> None:
    total = float(np.hypot(intrinsic, 3.0))
    flux = 1.0 - 1.8 * profile(WAVE, 4500.0 + phase, total, gamma)
    found = fit(flux, 1e-3)
    assert found.detected[0, 0]
    assert bool(found.voigt[0, 0]) == (gamma > 0)
    assert found.ew[0, 0] == pytest.approx(1.8, rel=0.005)
    assert found.center[0, 0] == pytest.approx(4500.0 + phase, abs=0.01)
    truth = voigt_fwhm(np.array(intrinsic / SIGMA_TO_FWHM), np.array(gamma))
    assert found.intrinsic[0, 0] == pytest.approx(float(truth), rel=0.02)
    assert not found.unresolved[0, 0]


def test_wings_in_the_side_bands_are_put_back() -> None:
    flux = 1.0 - 4.0 * profile(WAVE, 4500.0, 3.5, 3.0)
    lines = measure_many(WAVE, flux[None], np.full((1, WAVE.size), 1e-3), np.ones((1, WAVE.size), bool), 3.0,
                         features=FeatureTable((SINGLE,)))
    found = fit_many(WAVE, lines)
    assert found.blue_loss[0, 0] > 0.005                      # the side bands do lose light to the line
    assert lines.ew[0, 0] < 3.6                               # so the direct sum falls short
    assert found.ew[0, 0] == pytest.approx(4.0, rel=0.005)    # and the fit does not


@pytest.mark.parametrize(("intrinsic", "gamma", "snr"), [(4.0, 0.0, 60), (4.0, 0.0, 300), (0.2, 0.0, 100),
                                                         (2.0, 1.5, 300)])
def test_stated_errors_are_the_scatter(intrinsic: float, gamma: float, snr: int) -> None:
    rng = np.random.default_rng(snr)
    flux = 1.0 - 2.0 * profile(WAVE, 4500.2, float(np.hypot(intrinsic, 3.0)), gamma)
    found = fit(flux + rng.standard_normal((500, WAVE.size)) / snr, 1.0 / snr)
    for value, error in ((found.ew, found.ew_err), (found.fwhm, found.fwhm_err), (found.center, found.center_err),
                         (found.depth, found.depth_err)):
        ratio = np.sqrt(np.mean(error[:, 0] ** 2)) / value[:, 0].std(ddof=1)
        assert 0.88 < ratio < 1.16
    # bias: within what 500 draws can tell, plus half a per cent
    slack = 4 * found.ew[:, 0].std() / np.sqrt(500) + 0.01
    assert found.ew[:, 0].mean() == pytest.approx(2.0, abs=slack)


def test_blended_pair_in_noise() -> None:
    rng = np.random.default_rng(4)
    flux = 1.0 - 1.2 * profile(WAVE, 4498.0, 3.4) - 0.6 * profile(WAVE, 4502.0, 3.4)
    found = fit(flux + rng.standard_normal((400, WAVE.size)) / 100, 0.01, PAIR)
    for column, truth in ((0, 1.2), (1, 0.6)):
        scatter = found.ew[:, column].std(ddof=1)
        assert found.ew[:, column].mean() == pytest.approx(truth, abs=4 * scatter / 20 + 0.005)
        assert np.sqrt(np.mean(found.ew_err[:, column] ** 2)) / scatter == pytest.approx(1.0, abs=0.15)


def test_components_too_close_to_part_keep_their_sum() -> None:
    close = Feature("pair", "pair", 4500.0, SINGLE.window, SINGLE.blue, SINGLE.red, kind="blend",
                    components=(("first", 4499.5), ("second", 4500.5)))
    flux = 1.0 - 0.9 * profile(WAVE, 4499.5, 3.1) - 0.5 * profile(WAVE, 4500.5, 3.1)
    found = fit(flux, 0.01, close)
    assert found.ew[0].sum() == pytest.approx(1.4, rel=0.01)
    assert np.isnan(found.center[0]).all()                     # held at rest, so no velocity is claimed


def test_unresolved_width_is_an_upper_limit_that_holds() -> None:
    rng = np.random.default_rng(8)
    flux = 1.0 - 1.0 * profile(WAVE, 4500.0, float(np.hypot(0.3, 3.0)))
    found = fit(flux + rng.standard_normal((300, WAVE.size)) / 100, 0.01)
    assert found.unresolved[:, 0].mean() > 0.97
    assert np.mean(found.intrinsic[found.unresolved[:, 0], 0] >= 0.3) > 0.99


def test_no_line_gives_no_detection_and_a_limit_that_holds() -> None:
    rng = np.random.default_rng(9)
    flux = 1.0 + rng.standard_normal((400, WAVE.size)) / 50
    found = fit(flux, 0.02)
    assert found.detected[:, 0].mean() < 0.05
    table = measure_lines(plain(flux[0], np.full(WAVE.size, 0.02)), fwhm_angstrom=3.0, velocity_kms=0.0,
                          features=FeatureTable((SINGLE,)))
    row = table["line"]
    assert not row["detected_ok"]
    assert row["limit_angstrom"] == pytest.approx(3 * row["ew_err_angstrom"])
    assert abs(row["ew_angstrom"]) < row["limit_angstrom"]


def test_emission_and_filled_in_and_saturated_flags() -> None:
    features = FeatureTable((Feature("HeI_x", "x", 4500.0, (4480.0, 4520.0), (4450.0, 4475.0), (4525.0, 4550.0),
                                     wings=True),))

    def flags(flux: FloatArray) -> str:
        table = measure_lines(plain(flux, np.full(WAVE.size, 0.005)), fwhm_angstrom=3.0, velocity_kms=0.0,
                              features=features)
        return str(table["x"]["flags"])

    absorption = 1.0 - 5.0 * profile(WAVE, 4500.0, 12.0)
    assert "emission" not in flags(absorption) and "filled-in" not in flags(absorption)
    assert "emission" in flags(1.0 + 3.0 * profile(WAVE, 4500.0, 4.0))
    assert "filled-in" in flags(absorption + 0.8 * profile(WAVE, 4500.0, 3.0))
    assert "saturated" in flags(np.clip(1.0 - 9.0 * profile(WAVE, 4500.0, 6.0), 0.0, None))


def test_velocity_of_a_line_is_as_observed() -> None:
    shift = 1.0 + 150.0 / 299792.458
    flux = 1.0 - 1.5 * profile(WAVE, 4500.0 * shift, 4.0)
    table = measure_lines(plain(flux, np.full(WAVE.size, 0.003)), fwhm_angstrom=3.0, velocity_kms=120.0,
                          features=FeatureTable((SINGLE,)))
    row = table["line"]
    assert row["velocity_kms"] == pytest.approx(150.0, abs=4 * row["velocity_err_kms"])
    assert row["velocity_err_kms"] < 3.0


def test_vacuum_wavelengths_are_moved_to_air() -> None:
    flux = 1.0 - 1.5 * profile(WAVE, 4501.26, 4.0)             # 4500.0 A in air
    spectrum = PlainSpectrum(WAVE, flux, np.full(WAVE.size, 0.003), np.ones(WAVE.size, bool), medium="vacuum")
    table = measure_lines(spectrum, fwhm_angstrom=3.0, velocity_kms=0.0, features=FeatureTable((SINGLE,)))
    assert table["line"]["center_angstrom"] == pytest.approx(4500.0, abs=0.02)


def test_table_keeps_units_and_names() -> None:
    import astropy.units as u

    from starfathom.classify.lines.table import COLUMNS

    flux = 1.0 - 1.2 * profile(WAVE, 4498.0, 3.4) - 0.6 * profile(WAVE, 4502.0, 3.4)
    table = measure_lines(plain(flux, np.full(WAVE.size, 0.005)), fwhm_angstrom=3.0, velocity_kms=0.0,
                          features=FeatureTable((PAIR,)))
    assert [r["kind"] for r in table] == ["blend", "component", "component"]
    made = table.to_table()
    assert made.colnames == [c[0] for c in COLUMNS]
    assert made["ew_angstrom"].unit == u.AA and made["velocity_kms"].unit == u.km / u.s
    assert made["ew_angstrom"][1].to_value(u.AA) == pytest.approx(1.2, abs=0.02)


def test_specutils_spectrum_with_any_uncertainty() -> None:
    import astropy.units as u
    from astropy.nddata import InverseVariance, StdDevUncertainty, VarianceUncertainty
    from specutils import Spectrum

    flux = 1.0 - 1.5 * profile(WAVE, 4500.0, 4.0)
    sigma = np.full(WAVE.size, 0.01)
    kinds = (StdDevUncertainty(sigma), VarianceUncertainty(sigma**2), InverseVariance(sigma**-2))
    found = []
    for uncertainty in kinds:
        spectrum = Spectrum(flux=flux * u.Jy, spectral_axis=WAVE * u.AA, uncertainty=uncertainty)
        table = measure_lines(spectrum, fwhm_angstrom=3.0, velocity_kms=0.0, features=FeatureTable((SINGLE,)))
        found.append(table["line"]["ew_direct_err_angstrom"])
    assert found == pytest.approx([found[0]] * 3, rel=1e-9)
    assert found[0] > 0
