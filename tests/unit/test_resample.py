"""From own pixels to the grid: refraction, noise, scale, holes; and the smooth that stands for the continuum."""

from __future__ import annotations

import numpy as np
import pytest

from starfathom.classify.grid import FWHM_TO_SIGMA, PIXEL_ANGSTROM, WAVE, blur, blur_matrix, continuum, rectify
from starfathom.classify.resample import Native, air_from_vacuum, noise_from_pixels
from starfathom.classify.spectrum import PlainSpectrum

ALL = np.ones((1, len(WAVE)), bool)


def plain(wave, flux, sigma=None, valid=None) -> PlainSpectrum:
    return PlainSpectrum(wave, flux, sigma, np.ones(len(wave), bool) if valid is None else valid, "air")


# NIST Atomic Spectra Database: vacuum and air wavelengths of Ca II K, H beta and H alpha
@pytest.mark.parametrize(("vacuum", "air"), [(3934.777, 3933.663), (4862.683, 4861.325), (6564.632, 6562.819)])
def test_air_wavelengths_of_lines(vacuum, air):
    assert air_from_vacuum(np.array([vacuum]))[0] == pytest.approx(air, abs=0.02)


def test_refraction_is_that_of_specutils():
    import astropy.units as u
    from specutils.utils.wcs_utils import vac_to_air

    wave = np.linspace(2100.0, 20000.0, 300)
    other = vac_to_air(wave * u.AA, method="Morton2000").to_value(u.AA)
    np.testing.assert_allclose(air_from_vacuum(wave), other, rtol=1e-7)
    np.testing.assert_array_equal(air_from_vacuum(np.array([1500.0])), [1500.0])


def test_noise_follows_the_spectrum_block_by_block_and_ignores_masked_pixels():
    rng = np.random.default_rng(9)
    true = np.where(np.arange(6000) < 3000, 1.0, 5.0)
    flux, valid = 200 + rng.normal(0, 1, 6000) * true, np.ones(6000, bool)
    flux[700:760], valid[700:760] = 1e6, False
    sigma = noise_from_pixels(flux, valid)
    assert sigma[:2500] == pytest.approx(1.0, rel=0.12)
    assert sigma[3500:] == pytest.approx(5.0, rel=0.12)
    smooth = 50 + 0.01 * np.arange(6000.0)
    assert np.all(noise_from_pixels(smooth, np.ones(6000, bool)) < 1e-6), "a slope is not noise"


def test_noise_of_next_to_nothing():
    assert noise_from_pixels(np.arange(10.0), np.zeros(10, bool)) == pytest.approx(1.0)
    few = np.tile([1.0, 3.0], 12)
    assert noise_from_pixels(few, np.ones(24, bool)) == pytest.approx(0.0, abs=1e-8)
    lone = np.zeros(24, bool)
    lone[:10] = True
    assert noise_from_pixels(few, lone) == pytest.approx(1.0), "the plain standard deviation, where differences are few"


@pytest.mark.parametrize("step", [0.3, 0.9, 2.5])
def test_noise_on_the_grid_is_that_of_white_noise_there(step):
    """A line's equivalent width has the same error from the grid's sigma as from the pixels' own (Monte Carlo)."""
    wave = np.arange(4000.0, 6000.0, step)
    rng = np.random.default_rng(1)
    window = (WAVE > 4900) & (WAVE < 5000)
    sums = []
    for _ in range(150):
        native = Native(plain(wave, 10 + rng.normal(0, 0.5, len(wave)), np.full(len(wave), 0.5)), False)
        flux, _, sigma = native.on_grid(0.0)
        sums.append((flux * native.scale * PIXEL_ANGSTROM)[window].sum())
    told = np.sqrt(((sigma * native.scale * PIXEL_ANGSTROM)[window] ** 2).sum())
    assert np.std(sums) == pytest.approx(told, rel=0.2)


def test_scale_sampling_and_origin_of_the_noise_are_kept():
    wave = np.arange(4000.0, 5000.0, 1.3)
    told = Native(plain(wave, np.full(len(wave), -40.0), np.full(len(wave), 2.0)), False)
    assert told.scale == 40.0 and told.pixel_angstrom == pytest.approx(1.3)
    assert not told.sigma_estimated and told.sigma == pytest.approx(0.05)
    assert Native(plain(wave, np.full(len(wave), 1.0)), False).sigma_estimated
    assert Native(plain(wave[:19], np.ones(19)), False).count == 19


def test_vacuum_wavelengths_are_taken_to_air():
    wave = np.arange(4500.0, 5500.0, 0.8)
    flux = 1 - 0.5 * np.exp(-0.5 * ((wave - 4862.683) / 3) ** 2)        # H beta in vacuum
    got, ok, _ = Native(plain(wave, flux), True).on_grid(0.0)
    inside = ok & (np.abs(WAVE - 4861) < 30)
    weight = (1 - got / got[ok].max())[inside] * PIXEL_ANGSTROM[inside]
    assert (weight * WAVE[inside]).sum() / weight.sum() == pytest.approx(4861.325, abs=0.03)


def test_only_what_lies_far_off_the_grid_is_dropped():
    wave = np.arange(3000.0, 10000.0, 2.0)
    native = Native(plain(wave, np.ones(len(wave))), False)
    assert np.exp(native.ln_wave[0]) == pytest.approx(WAVE[0] * 0.995, abs=3.0)
    assert np.exp(native.ln_wave[-1]) == pytest.approx(WAVE[-1] * 1.005, abs=3.0)


@pytest.mark.parametrize(("missing", "hole"), [(2, False), (3, True)])
def test_a_missing_pixel_or_two_are_bridged_and_more_is_a_hole(missing, hole):
    """Steps of three times the usual are interpolated, of four are a hole."""
    wave = np.delete(np.arange(4000.0, 5000.0), np.arange(500, 500 + missing))
    _, ok, _ = Native(plain(wave, np.ones(len(wave))), False).on_grid(0.0)
    inside = (WAVE > 4500.0) & (WAVE < 4499.0 + missing)
    assert inside.any()
    assert ok[inside].all() == (not hole)


def test_a_velocity_that_drifts_along_the_spectrum_is_taken_out():
    wave = np.arange(3800.0, 7200.0, 0.8)
    rest = np.array([4200.0, 5000.0, 6000.0, 7000.0])
    drift = 200 * (rest - 4200) / 2800
    flux = 1 - sum(0.5 * np.exp(-0.5 * ((wave - r * (1 + d / 299792.458)) / 3) ** 2) for r, d in zip(rest, drift))
    got, _, _ = Native(plain(wave, flux), False).on_grid(np.interp(WAVE, [4200.0, 7000.0], [0.0, 200.0]))
    for r in rest:
        near = np.abs(WAVE - r) < 25
        weight = (got.max() - got)[near] * PIXEL_ANGSTROM[near]
        assert (weight * WAVE[near]).sum() / weight.sum() == pytest.approx(r, abs=0.03)


def test_the_quick_look_is_linear_and_masks_alike():
    wave = np.arange(4000.0, 5000.0)
    valid = np.ones(len(wave), bool)
    valid[300:310] = False
    native = Native(plain(wave, 2.0 + 0.001 * (wave - 4500), valid=valid), False)
    flux, ok = native.quick()
    assert (flux * native.scale)[ok] == pytest.approx(2.0 + 0.001 * (WAVE[ok] - 4500), rel=1e-5)
    assert not ok[(WAVE > 4300) & (WAVE < 4309)].any() and not ok[WAVE < 3999].any() and not ok[WAVE > 5000].any()


@pytest.mark.parametrize("period", [250.0, 350.0, 500.0])
def test_the_smooth_is_a_gaussian_of_sixty_angstrom(period):
    """A Gaussian passes exp(-2 pi^2 sigma^2 / L^2) of a wave of length L."""
    flux = (1 + 0.1 * np.cos(2 * np.pi * WAVE / period))[None]
    inside = (WAVE > 4200) & (WAVE < 8500)
    swing = (continuum(flux, ALL)[0] - 1)[inside]
    size = 2 * np.mean(swing * np.cos(2 * np.pi * WAVE / period)[inside])
    assert size == pytest.approx(0.1 * np.exp(-2 * np.pi ** 2 * 60.0 ** 2 / period ** 2), abs=0.002)


def test_rectified_flux_is_held_between_nothing_and_three_and_one_where_invalid():
    flux = np.ones((1, len(WAVE)))
    flux[0, 1000], flux[0, 2000] = 500.0, -30.0
    valid = ALL.copy()
    valid[0, 1500] = False
    flat, level = rectify(flux, valid, 600.0)
    assert flat[0, 1000] == 3.0 and flat[0, 2000] == 0.0 and flat[0, 1500] == 1.0
    assert rectify(np.zeros((1, len(WAVE))), ALL)[0] == pytest.approx(0.0), "no flux is no error"
    assert level.shape == flux.shape


def test_a_blur_is_a_gaussian_of_that_width_whose_rows_add_up_to_one():
    matrix = blur_matrix(6.0)
    i = int(np.argmin(np.abs(WAVE - 5000)))
    row = matrix[i].toarray()[0]
    near = row > 0
    sd = np.sqrt((row * (WAVE - WAVE[i]) ** 2).sum())
    assert sd / FWHM_TO_SIGMA == pytest.approx(6.0, rel=0.01)
    assert np.abs(WAVE[near] - WAVE[i]).max() == pytest.approx(3.5 * 6.0 * FWHM_TO_SIGMA, abs=PIXEL_ANGSTROM[i])
    assert row.sum() == pytest.approx(1.0)
    assert FWHM_TO_SIGMA == pytest.approx(1 / 2.354820045)


def test_too_little_blur_is_none_and_pixels_with_half_their_kernel_stay():
    flux = np.ones((1, len(WAVE)))
    assert blur(flux, ALL, 0.1)[0] is flux
    assert blur(flux, ALL, 0.2)[0] is not flux
    valid = ALL.copy()
    valid[0, 2000:] = False
    _, ok = blur(flux, valid, 8.0)
    assert ok[0, 1999], "at an edge half the kernel and the pixel itself are left"
    lone = np.zeros_like(ALL)
    lone[0, 2000:2003] = True
    assert not blur(flux, lone, 12.0)[1].any()
