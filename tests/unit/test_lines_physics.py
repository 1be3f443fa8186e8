"""What common practice says of line strengths, read off the reference library."""

from __future__ import annotations

from functools import lru_cache

import numpy as np
from numpy.typing import NDArray

from starfathom.classify.lines import FEATURES, BulkLines, measure_many
from starfathom.templates.library import load_library

FloatArray = NDArray[np.float64]


@lru_cache(maxsize=1)
def library_lines() -> tuple[BulkLines, dict[str, NDArray[np.generic]]]:
    library = load_library()
    kept = library.select(library.catalogue["kind"] == "normal")
    flux = kept.flux.astype(float)
    lines = measure_many(kept.wave_angstrom, flux, 0.01 * flux + 1e-6, kept.valid, kept.catalogue["fwhm_angstrom"])
    return lines, kept.catalogue


def run(name: str, centres: FloatArray, classes: tuple[float, float] = (4.0, 5.0), half: float = 1.25) -> FloatArray:
    """Median equivalent width at each type among the given luminosity classes; NaN with fewer than two stars."""
    lines, c = library_lines()
    k = FEATURES.index_of(name)
    values = np.where(lines.ok[:, k], lines.ew[:, k], np.nan)
    right = (c["lum_code"] >= classes[0]) & (c["lum_code"] <= classes[1]) & np.isfinite(values)
    out = []
    for t in centres:
        near = values[right & (np.abs(c["t_code"] - t) <= half)]
        out.append(np.median(near) if near.size >= 2 else np.nan)
    return np.array(out)


def test_balmer_lines_peak_near_a2() -> None:
    types = np.arange(14.0, 36.0, 1.0)
    for name in ("HgammaF", "HdeltaF", "HdeltaA", "HbetaLick", "Halpha"):
        strength = run(name, types, half=2.0)
        assert 20.0 <= types[np.nanargmax(strength)] <= 24.0, name
    for name in ("Hgamma", "Hdelta", "Hbeta"):                 # wide windows hold metal lines too and peak later
        strength = run(name, types, half=2.0)
        assert 20.0 <= types[np.nanargmax(strength)] <= 27.0, name
        assert np.nanmax(strength) > 1.6 * run(name, np.array([17.0]))[0]
        assert np.nanmax(strength) > 1.7 * run(name, np.array([32.0]))[0]


def test_calcium_k_rises_against_balmer_from_b_to_k() -> None:
    types = np.array([17.0, 20.0, 23.0, 26.0, 30.0, 33.0, 38.0])
    k = run("CaII_K", types, half=1.6)
    ratio = k / run("Hgamma", types, half=1.6)
    steps = ratio[np.isfinite(ratio)]
    assert steps.size >= 6
    assert (np.diff(steps) > -0.02).all() and steps[-1] > 10 * abs(steps[0])
    wide = run("CaII_K_wide", np.array([20.0, 30.0, 40.0, 50.0]), half=1.6)
    assert (np.diff(wide) > 0).all()


def test_helium_peaks_near_b2_and_is_gone_in_a() -> None:
    types = np.arange(8.0, 26.0, 1.0)
    for name in ("HeI_4471", "HeI_4026", "HeI_4388"):
        strength = run(name, types, half=1.0)
        assert 11.0 <= types[np.nanargmax(strength)] <= 14.5, name
        assert run(name, np.array([22.0]))[0] < 0.35 * np.nanmax(strength), name


def test_ionised_helium_lives_in_o_and_dies_by_b1() -> None:
    lines, c = library_lines()
    for name, last, dead in (("HeII_4541", 9.8, 10.5), ("HeII_4686", 10.2, 11.5)):
        k = FEATURES.index_of(name)
        ew = np.where(lines.ok[:, k], lines.ew[:, k], np.nan)
        emission = ew < -0.3                                   # supergiants show 4686 in emission
        hot = (c["t_code"] <= last) & np.isfinite(ew) & ~emission
        cool = (c["t_code"] >= dead) & (c["t_code"] <= 20) & np.isfinite(ew)
        assert hot.sum() >= 4 and cool.sum() >= 30
        assert np.median(ew[hot]) > 0.15, name
        assert np.percentile(ew[cool], 90) < 0.12, name


def test_g_band_is_an_f_to_k_affair() -> None:
    types = np.array([25.0, 30.0, 35.0, 40.0, 45.0, 50.0, 54.0, 61.0, 64.0])
    g = run("Gband", types, half=1.6)
    peak = types[np.nanargmax(g)]
    assert 40.0 <= peak <= 54.0
    assert g[1] < 0.4 * np.nanmax(g) and g[-1] < 0.8 * np.nanmax(g)


def test_titanium_oxide_from_k5_on() -> None:
    for classes in ((4.0, 5.0), (3.0, 3.0)):
        before = run("TiO2", np.array([45.0, 50.0, 53.0]), classes)
        after = run("TiO2", np.array([57.0, 60.5, 62.5, 65.0]), classes, half=1.6)
        assert np.nanmax(np.abs(before)) < 0.15 * np.nanmax(after)
        known = after[np.isfinite(after)]
        assert known.size >= 3 and (np.diff(known) > 0).all() and known[-1] > 10


def test_balmer_wings_are_broader_in_dwarfs_than_in_supergiants() -> None:
    lines, c = library_lines()
    for name in ("Hgamma", "Hdelta", "Hbeta"):
        width = lines.width_at[:, FEATURES.index_of(name), 1]
        compared = 0
        for t in (17.0, 19.0, 21.0, 23.0):
            near = (np.abs(c["t_code"] - t) <= 1.5) & np.isfinite(width)
            dwarfs, supergiants = width[near & (c["lum_code"] >= 4.5)], width[near & (c["lum_code"] <= 1.3)]
            if dwarfs.size >= 3 and supergiants.size >= 1:
                assert np.median(dwarfs) > 2.0 * np.median(supergiants), (name, t)
                assert np.percentile(dwarfs, 10) > np.max(supergiants) * 0.9, (name, t)
                compared += 1
        assert compared >= 2, name


def test_gravity_and_luminosity_among_cool_stars() -> None:
    at = np.array([53.0])
    assert run("Mgb", at, half=2.0)[0] > 1.3 * run("Mgb", at, (3.0, 3.0), half=2.0)[0]
    assert run("CN_4216", at, (3.0, 3.0), half=2.0)[0] > run("CN_4216", at, half=2.0)[0] + 2.0
    g5 = np.array([45.0])
    assert run("SrII_4077", g5, (1.0, 2.0), half=4.0)[0] > 1.8 * run("SrII_4077", g5, half=4.0)[0]
