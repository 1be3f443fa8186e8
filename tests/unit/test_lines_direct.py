"""Direct measurement against lines of known equivalent width, with known noise."""

from __future__ import annotations

import numpy as np
import pytest
from numpy.typing import NDArray

from starfathom.classify.errors import SpectrumError
from starfathom.classify.lines import FEATURES, Feature, FeatureTable, measure_many
from starfathom.classify.lines.noise import estimate_sigma, resampling_correlation

FloatArray = NDArray[np.float64]

LINE = Feature("line", "line", 4500.0, (4490.0, 4510.0), (4460.0, 4485.0), (4515.0, 4540.0))
TABLE = FeatureTable((LINE,))
ROOT_2PI = float(np.sqrt(2 * np.pi))


def gaussian_line(wave: FloatArray, ew: float = 1.5, fwhm: float = 4.0, centre: float = 4500.0) -> FloatArray:
    sigma = fwhm / 2.3548200450309493
    return 1.0 - ew / (sigma * ROOT_2PI) * np.exp(-0.5 * ((wave - centre) / sigma) ** 2)


def measure(wave: FloatArray, flux: FloatArray, sigma: FloatArray | None = None, **keys: object):  # type: ignore[no-untyped-def]
    flux = np.atleast_2d(flux)
    valid = keys.pop("valid", np.ones(flux.shape, bool))
    return measure_many(wave, flux, sigma, valid, keys.pop("fwhm", 3.0), features=TABLE, **keys)  # type: ignore[arg-type]


@pytest.mark.parametrize("step", [0.5, 1.0, 2.0])
@pytest.mark.parametrize("slope", [0.0, 2e-3, -3e-3])
def test_analytic_width_on_any_slope_and_scale(step: float, slope: float) -> None:
    wave = np.arange(4400.0, 4600.0, step)
    continuum = 7e-15 * (1.0 + slope * (wave - 4500.0))
    found = measure(wave, continuum * gaussian_line(wave), np.full((1, wave.size), 1e-17))
    assert found.ew[0, 0] == pytest.approx(1.5, rel=2e-3)


def test_uneven_and_logarithmic_sampling() -> None:
    wave = 4400.0 * np.exp(np.arange(0, 0.045, 2.2e-4))
    assert measure(wave, gaussian_line(wave), np.full((1, wave.size), 0.01)).ew[0, 0] == pytest.approx(1.5, rel=2e-3)


@pytest.mark.parametrize("noise", ["constant", "poisson"])
@pytest.mark.parametrize("snr", [10, 100])
@pytest.mark.parametrize("step", [0.5, 2.0])
def test_stated_error_is_the_scatter(noise: str, snr: float, step: float) -> None:
    rng = np.random.default_rng(7)
    wave = np.arange(4400.0, 4600.0, step)
    clean = gaussian_line(wave)
    sigma = np.full(wave.size, 1 / snr) if noise == "constant" else np.sqrt(clean) / snr
    flux = clean + sigma * rng.standard_normal((600, wave.size))
    found = measure(wave, flux, np.broadcast_to(sigma, flux.shape))
    scatter = found.ew[:, 0].std(ddof=1)
    # 600 draws know a scatter to 2.9 %, so three of those
    assert np.median(found.ew_err[:, 0]) / scatter == pytest.approx(1.0, abs=0.09)
    assert found.ew[:, 0].mean() == pytest.approx(1.5, abs=4 * scatter / np.sqrt(600))


def test_correlated_pixels_widen_the_error() -> None:
    rng = np.random.default_rng(3)
    old = np.arange(4400.0, 4600.0, 1.0)
    new = np.arange(4402.0, 4598.0, 0.61)
    draws = old.size, 800
    noise = 0.02 * rng.standard_normal((draws[1], draws[0]))
    flux = np.array([np.interp(new, old, gaussian_line(old) + row) for row in noise])
    left = np.searchsorted(old, new, "right") - 1
    share = new - old[left]
    sigma = np.broadcast_to(0.02 * np.hypot(1 - share, share), flux.shape)
    rho = resampling_correlation(old, new)
    scatter = measure(new, flux, sigma).ew[:, 0].std(ddof=1)
    plain = np.median(measure(new, flux, sigma).ew_err[:, 0])
    with_correlation = np.median(measure(new, flux, sigma, correlation=rho).ew_err[:, 0])
    assert plain < 0.88 * scatter
    assert with_correlation == pytest.approx(scatter, rel=0.09)


def test_noise_from_the_spectrum_itself() -> None:
    rng = np.random.default_rng(5)
    wave = np.arange(4000.0, 5000.0, 1.0)
    clean = gaussian_line(wave) * (1 + 3e-4 * (wave - 4500))
    sigma = np.sqrt(clean) / 40
    flux = clean + sigma * rng.standard_normal((200, wave.size))
    estimate = estimate_sigma(flux, np.ones(flux.shape, bool))
    assert np.median(estimate / sigma) == pytest.approx(1.0, abs=0.05)
    found = measure(wave, flux)
    assert np.median(found.ew_err[:, 0]) / found.ew[:, 0].std(ddof=1) == pytest.approx(1.0, abs=0.15)


def test_bad_pixels_are_bridged_or_the_feature_is_given_up() -> None:
    wave = np.arange(4400.0, 4600.0, 1.0)
    flux = np.repeat(gaussian_line(wave)[None], 3, axis=0)
    valid = np.ones(flux.shape, bool)
    valid[1, (wave > 4505) & (wave < 4508)] = False
    valid[2, (wave > 4495) & (wave < 4504)] = False
    flux[~valid] = 0.0
    found = measure(wave, flux, np.full(flux.shape, 0.01), valid=valid)
    assert found.ew[1, 0] == pytest.approx(found.ew[0, 0], rel=0.01)
    assert found.gappy[:, 0].tolist() == [False, True, False]
    assert np.isnan(found.ew[2, 0]) and not found.ok[2, 0]


def test_a_lost_side_band_is_said() -> None:
    wave = np.arange(4488.0, 4600.0, 1.0)
    found = measure(wave, gaussian_line(wave), np.full((1, wave.size), 0.01))
    assert found.off_edge[0, 0] and not found.ok[0, 0]
    assert found.ew[0, 0] == pytest.approx(1.5, rel=5e-3)
    cut = measure(np.arange(4495.0, 4600.0, 1.0), gaussian_line(np.arange(4495.0, 4600.0, 1.0)))
    assert np.isnan(cut.ew[0, 0]) and cut.off_edge[0, 0]


def test_windows_widen_for_coarse_spectra() -> None:
    wave = np.arange(4300.0, 4700.0, 3.0)
    found = measure(wave, gaussian_line(wave, ew=3.0, fwhm=15.0), np.full((1, wave.size), 0.01), fwhm=15.0)
    assert found.ew[0, 0] == pytest.approx(3.0, rel=0.01)


def test_telluric_bands_stand_in_the_observers_frame() -> None:
    wave = np.arange(6400.0, 7300.0, 1.0)
    flux = np.ones((2, wave.size))
    found = measure_many(wave, flux, flux * 0.01, flux > 0, 3.0, velocity_kms=np.array([0.0, -5000.0]))
    k = FEATURES.index_of("HeI_6678")
    # with -5000 km/s taken out the B band, 6864 to 6950 A as observed, lies on the side band of TiO5 at 7042 A
    assert not found.telluric[:, k].any()
    tio5 = FEATURES.index_of("TiO5")
    assert found.telluric[:, tio5].tolist() == [False, True]


def test_fixed_depth_widths_of_a_triangular_line() -> None:
    balmer = FeatureTable((Feature("b", "b", 4500.0, (4450.0, 4550.0), (4420.0, 4445.0), (4555.0, 4580.0),
                                   wings=True),))
    wave = np.arange(4400.0, 4600.0, 0.5)
    depth = np.clip(0.6 * (1 - np.abs(wave - 4500) / 30), 0, None)
    found = measure_many(wave, (1 - depth)[None], np.full((1, wave.size), 0.005), np.ones((1, wave.size), bool), 1.0,
                         features=balmer)
    assert found.width_at[0, 0] == pytest.approx([50.0, 40.0, 30.0], abs=0.1)
    assert (found.width_at_err[0, 0] > 0).all()


def test_errors_of_fixed_depth_widths_are_the_scatter() -> None:
    balmer = FeatureTable((Feature("b", "b", 4500.0, (4450.0, 4550.0), (4420.0, 4445.0), (4555.0, 4580.0),
                                   wings=True),))
    rng = np.random.default_rng(11)
    wave = np.arange(4400.0, 4600.0, 1.0)
    clean = gaussian_line(wave, ew=14.0, fwhm=22.0)
    flux = clean + 0.01 * rng.standard_normal((400, wave.size))
    found = measure_many(wave, flux, np.full(flux.shape, 0.01), np.ones(flux.shape, bool), 3.0, features=balmer)
    for d in (1, 2):
        ratio = np.median(found.width_at_err[:, 0, d]) / found.width_at[:, 0, d].std(ddof=1)
        assert 0.8 < ratio < 1.3


def test_misuse_is_refused_in_words() -> None:
    wave = np.arange(4400.0, 4600.0, 1.0)
    flux = gaussian_line(wave)[None]
    with pytest.raises(SpectrumError, match="one shape"):
        measure_many(wave[:-1], flux, None, flux > 0, 3.0)
    with pytest.raises(SpectrumError, match="positive"):
        measure_many(wave, flux, None, flux > 0, 0.0)
    with pytest.raises(SpectrumError, match="too few"):
        measure_many(wave[:5], flux[:, :5], None, flux[:, :5] > 0, 3.0)


def test_same_input_same_output_alone_or_in_company() -> None:
    rng = np.random.default_rng(2)
    wave = np.linspace(3700, 7400, 3000)
    flux = 1 + 0.02 * rng.standard_normal((60, wave.size))
    sigma = np.full(flux.shape, 0.02)
    fwhm = rng.choice([2.5, 7.3, 12.0], 60)
    together = measure_many(wave, flux, sigma, flux > 0, fwhm)
    alone = measure_many(wave, flux[41:42], sigma[41:42], flux[41:42] > 0, fwhm[41:42])
    np.testing.assert_allclose(alone.ew[0], together.ew[41], rtol=1e-12, atol=1e-13)
