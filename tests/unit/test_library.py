"""The reference library: what it holds, how it is stored, how labels are read, that the recipe makes it again."""

from __future__ import annotations

import numpy as np
import pytest

from starfathom.templates.labels import read_label
from starfathom.templates.library import DATA, LIBRARY_FILE, decode_flux, encode_flux, load_library
from starfathom.templates.subtypes import (
    CLASSES,
    LUM_CODES,
    STEPS,
    SUBTYPES,
    nearest_subtype,
    step_of,
    t_code_from_step,
)


def test_it_is_compact_and_holds_enough_normal_stars():
    assert (DATA / LIBRARY_FILE).stat().st_size <= 12e6
    library = load_library()
    c = library.catalogue
    normal = (c["kind"] == "normal") & np.isfinite(c["t_code"]) & np.isfinite(c["lum_code"])
    assert normal.sum() >= 450
    for letter, lo in zip("OBAFGKM", range(0, 70, 10)):
        assert ((c["t_code"][normal] >= lo) & (c["t_code"][normal] < lo + 10)).any(), letter
    for lo, hi in ((0, 1.8), (1.8, 2.5), (2.5, 3.5), (3.5, 4.5), (4.5, 5.5)):
        assert ((c["lum_code"][normal] >= lo) & (c["lum_code"][normal] < hi)).sum() >= 10
    assert (c["hip"] > 0).sum() > 900


def test_every_star_has_spectrum_catalogue_row_and_source():
    library = load_library()
    assert len(library.catalogue["star"]) == len(library) == len(library.valid)
    assert set(library.catalogue["library"]) == {"miles", "stelib"}
    head = (DATA / "catalogue.ecsv").read_text()[:6000]
    assert "Sanchez-Blazquez" in head and "Le Borgne" in head and "licence" in head


def test_leaving_out_by_library_and_star():
    library = load_library()
    assert set(library.without(("stelib",)).catalogue["library"]) == {"miles"}
    hip = int(library.catalogue["hip"][library.catalogue["hip"] > 0][0])
    assert hip not in library.without((), (hip,)).catalogue["hip"]
    assert len(library.without((), (0,))) == len(library)


def test_flux_survives_storage():
    rng = np.random.default_rng(1)
    flux = np.exp(np.cumsum(rng.normal(0, 0.02, 4000))) * 37.0
    valid = np.ones(4000, bool)
    valid[100:140] = False
    valid[:7] = False
    code, reference = encode_flux(flux, valid)
    back, ok = decode_flux(code[None])
    assert np.array_equal(ok[0], valid)
    assert np.abs(back[0][valid] * reference / flux[valid] - 1).max() < 2e-4


@pytest.mark.parametrize(("text", "t_code", "lum_code", "kind"), [
    ("G2V", 42, 5, "normal"), ("07Ia", 7, 1, "normal"), ("K4/K5III", 54.5, 3, "normal"), ("M4IIIa", 64, 3, "normal"),
    ("K1IIIb", 51, 3, "normal"), ("M2Iab", 62, 1.3, "normal"), ("G8III-IV", 48, 3.5, "normal"),
    ("A3Ia+...", 23, 0, "normal"), ("F8 Ib-II", 38, 1.8, "normal"), ("B2Iave", 12, 1, "emission"),
    ("G5IIIw", 45, 3, "metal-weak"), ("A0p...", 20, np.nan, "peculiar"), ("G6 IV + M6 V", 46, 4, "composite"),
    ("WN", np.nan, np.nan, "foreign"), ("DA:", np.nan, np.nan, "foreign"), ("", np.nan, np.nan, "none"),
    ("F6VI", 36, np.nan, "metal-weak"), ("sdF8", 38, np.nan, "metal-weak"),
    ("G0V-VI", 40, 5, "metal-weak"), ("G8IIIvar", 48, 3, "normal")])
def test_labels(text, t_code, lum_code, kind):
    label = read_label(text)
    np.testing.assert_equal([label.t_code, label.lum_code], [t_code, lum_code])
    assert label.kind == kind


def test_subtypes_run_from_o2_to_m9_with_k7_beside_m0():
    assert SUBTYPES[0] == "O2" and SUBTYPES[-1] == "M9" and len(set(SUBTYPES)) == len(SUBTYPES)
    assert "K6" not in SUBTYPES and "O9.7" in SUBTYPES
    assert np.all(np.diff(STEPS) > 0)
    assert step_of(60.0) - step_of(57.0) == 1.0 == step_of(57.0) - step_of(55.0)
    assert nearest_subtype(57.2) == "K7"
    np.testing.assert_allclose(t_code_from_step(step_of([3.0, 41.5, 57.0, 64.0])), [3.0, 41.5, 57.0, 64.0])
    assert len(CLASSES) == len(LUM_CODES) == 8


@pytest.mark.registry
@pytest.mark.slow
def test_the_recipe_makes_the_shipped_library_again():
    from starfathom.templates.recipe import build

    arrays, rows = build()
    with np.load(DATA / LIBRARY_FILE) as shipped:
        assert np.array_equal(arrays["grid"], shipped["grid"])
        # a quantum is 1/6000 of ln flux; another machine's rounding may move a pixel by one
        same = np.abs(arrays["codes"].astype(int) - shipped["codes"]) <= 1
        assert same.mean() > 0.9999 and arrays["codes"].shape == shipped["codes"].shape
    c = load_library().catalogue
    assert [r["star"] for r in rows] == c["star"].tolist()
    np.testing.assert_allclose([r["parallax_mas"] for r in rows], c["parallax_mas"])
