"""Blurring, rectifying and resampling on the common grid."""

from __future__ import annotations

import numpy as np
import pytest

from starfathom.classify.grid import FWHM_TO_SIGMA, PIXEL_ANGSTROM, WAVE, blur, continuum, rectify
from starfathom.classify.resample import Native, air_from_vacuum, noise_from_pixels
from starfathom.classify.spectrum import PlainSpectrum

ALL = np.ones((1, len(WAVE)), bool)


def line(centre: float, fwhm: float, depth: float = 0.5) -> np.ndarray:
    return 1 - depth * np.exp(-0.5 * ((WAVE - centre) / (fwhm * FWHM_TO_SIGMA)) ** 2)


def width_of(flux: np.ndarray, centre: float) -> float:
    near = np.abs(WAVE - centre) < 60
    weight = (1 - flux[near]) * PIXEL_ANGSTROM[near]
    mean = (weight * WAVE[near]).sum() / weight.sum()
    return float(np.sqrt((weight * (WAVE[near] - mean) ** 2).sum() / weight.sum()) / FWHM_TO_SIGMA)


@pytest.mark.parametrize("centre", [4300.0, 6500.0])
def test_blurs_add_in_quadrature_and_keep_the_equivalent_width(centre):
    flux = line(centre, 4.0)[None]
    out, ok = blur(flux, ALL, 6.0)
    assert width_of(out[0], centre) == pytest.approx(np.hypot(4.0, 6.0), rel=0.01)
    before, after = ((1 - f) @ PIXEL_ANGSTROM for f in (flux[0], np.where(ok[0], out[0], 1)))
    assert after == pytest.approx(before, rel=2e-3)


def test_invalid_pixels_never_leak():
    flux = line(4500.0, 5.0)[None].copy()
    valid = ALL.copy()
    valid[0, 1000:1100] = False
    spoiled = flux.copy()
    spoiled[0, 1000:1100] = 1e9
    np.testing.assert_array_equal(blur(flux, valid, 5.0)[0], blur(spoiled, valid, 5.0)[0])
    np.testing.assert_allclose(rectify(flux, valid)[0], rectify(spoiled, valid)[0], atol=1e-12)


def test_rectifying_is_blind_to_smooth_slopes():
    star = (line(4340.0, 12.0) * line(4861.0, 12.0) * line(5180.0, 8.0))[None]
    slope = (WAVE / 5000.0) ** 4 * (1 + 0.3 * np.sin(WAVE / 1500.0))
    inside = (WAVE > 3800) & (WAVE < 7000)
    change = rectify(star * slope, ALL)[0] - rectify(star, ALL)[0]
    assert np.abs(change[0, inside]).max() < 0.012


def test_continuum_of_a_constant_is_that_constant():
    np.testing.assert_allclose(continuum(np.full((1, len(WAVE)), 3.5), ALL), 3.5, rtol=1e-9)


def test_sodium_d_in_air():
    # NIST Atomic Spectra Database: Na I D2 5891.583 A in vacuum, 5889.951 A in air
    assert air_from_vacuum(np.array([5891.583]))[0] == pytest.approx(5889.951, abs=0.003)


def plain(wave: np.ndarray, flux: np.ndarray, valid: np.ndarray | None = None) -> PlainSpectrum:
    return PlainSpectrum(wave, flux, None, np.ones(len(wave), bool) if valid is None else valid, "air")


@pytest.mark.parametrize("step", [0.4, 1.0, 2.2])
def test_resampling_keeps_a_line_where_it_is_and_as_strong(step):
    wave = np.arange(3700.0, 7000.0, step)
    flux = 1 - 0.5 * np.exp(-0.5 * ((wave - 5000.0) / 3.0) ** 2)
    got, ok, _ = Native(plain(wave, flux), False).on_grid(0.0)
    inside = ok & (np.abs(WAVE - 5000) < 40)
    strength = ((1 - got) * PIXEL_ANGSTROM)[inside]
    assert strength.sum() == pytest.approx(0.5 * 3.0 * np.sqrt(2 * np.pi), rel=3e-3)
    assert (strength * WAVE[inside]).sum() / strength.sum() == pytest.approx(5000.0, abs=0.02)


def test_a_receding_star_is_brought_to_rest():
    wave = np.arange(3700.0, 7000.0, 0.9)
    centre = 5000.0 * (1 + 300.0 / 299792.458)
    flux = 1 - 0.5 * np.exp(-0.5 * ((wave - centre) / 3.0) ** 2)
    got, ok, _ = Native(plain(wave, flux), False).on_grid(300.0)
    inside = ok & (np.abs(WAVE - 5000) < 40)
    weight = ((1 - got) * PIXEL_ANGSTROM)[inside]
    assert (weight * WAVE[inside]).sum() / weight.sum() == pytest.approx(5000.0, abs=0.02)


def test_masked_pixels_and_gaps_stay_invalid():
    wave = np.concatenate([np.arange(3700.0, 4500.0), np.arange(4700.0, 6900.0)])
    valid = np.ones(len(wave), bool)
    valid[100:130] = False
    _, ok, _ = Native(plain(wave, np.ones(len(wave)), valid), False).on_grid(0.0)
    assert not ok[(WAVE > 4502) & (WAVE < 4698)].any()
    assert not ok[(WAVE > 3801) & (WAVE < 3828)].any()
    assert ok[(WAVE > 5000) & (WAVE < 6800)].all()


def test_noise_is_found_from_the_pixels():
    rng = np.random.default_rng(4)
    flux = 100 + rng.normal(0, 2.0, 6000)
    sigma = noise_from_pixels(flux, np.ones(6000, bool))
    assert np.median(sigma) == pytest.approx(2.0, rel=0.05)


def test_cosmic_rays_are_left_out_and_lines_are_not():
    from starfathom.classify.resample import spikes

    rng = np.random.default_rng(5)
    x = np.arange(3000.0)
    flux = 100 + rng.normal(0, 1.0, 3000)
    flux += 400 * np.exp(-0.5 * ((x - 1500) / 1.3) ** 2)        # an emission line of 3 pixels
    flux[[200, 900, 901, 2500]] += (500, 300, 250, 90)
    found = spikes(flux, np.ones(3000, bool))
    assert set(np.flatnonzero(found)) == {200, 900, 901, 2500}
