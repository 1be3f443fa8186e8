"""What is not a normal star is refused, what is one keeps its type. Spectra are drawn from the shipped examples with
noise, blur and redshift; the example itself is left out of the judge where a kind has several."""

from __future__ import annotations

import numpy as np
import pytest

from starfathom.classify.composite import PairFinder
from starfathom.classify.engine import Classifier
from starfathom.classify.foreign import Judge, judge_for
from starfathom.classify.foreign_library import COARSE_WAVE, COMMON, View, load_examples, rectify_coarse
from starfathom.classify.grid import WAVE
from starfathom.classify.oddities import chemically_peculiar, depth_of, h_alpha_emission
from starfathom.classify.spectrum import PlainSpectrum
from starfathom.classify.surface import PIXELS
from starfathom.templates.library import load_library

RNG = np.random.default_rng(11)


def view_of_depth(depth: np.ndarray, noise: float) -> View:
    """A coarse view with white noise added."""
    noisy = depth + RNG.normal(0, noise, depth.shape)
    return View(noisy.astype(np.float32), np.ones(depth.shape, bool), np.full(depth.shape, noise, np.float32))


def star(name: str, snr: float = 60.0, seed: int = 0) -> PlainSpectrum:
    """A library star with noise."""
    library = load_library()
    k = list(library.catalogue["star"]).index(name)
    ok = library.valid[k]
    rng = np.random.default_rng(seed)
    flux = library.flux[k].astype(float)
    sigma = np.where(ok, np.median(flux[ok]) / snr, 1.0)
    return PlainSpectrum(library.wave_angstrom, np.where(ok, flux + rng.normal(0, 1, ok.size) * sigma, 0.0), sigma, ok,
                         medium="air")


@pytest.mark.parametrize(("kind", "doubt"), [("white dwarf", 0.9), ("hot subdwarf", 1.1), ("Wolf-Rayet star", 0.9)])
def test_left_out_examples_are_still_not_stars(kind: str, doubt: float) -> None:
    """Refused, or at least flagged ``kind-doubtful`` (hot subdwarfs, some of which are B stars in all but gravity)."""
    near, _ = load_examples()
    rows = [k for k in np.flatnonzero(near.kind == kind) if near.valid[k][COMMON].mean() > 0.97]
    v = judge_for().compare(view_of_depth(near.depth[rows], 0.02), np.zeros(len(rows)),
                            [frozenset([str(near.name[k])]) for k in rows])
    found = (v.other < doubt * v.star).mean()
    assert found >= 0.8, f"{found:.2f} of {len(rows)}"


def test_galaxy_and_quasar_redshifts_come_back() -> None:
    judge = judge_for()
    _, far = load_examples()
    for name, z in (("sdss galaxy 1", 0.12), ("kc96 Sb", 0.2), ("composite quasar", 1.4), ("composite quasar", 2.6)):
        k = list(far.name).index(name)
        steps = round(np.log1p(z) / np.log(COARSE_WAVE[1] / COARSE_WAVE[0]))
        flux, valid = far.at(k, steps)
        depth, _ = rectify_coarse(flux[None], valid[None])
        found = judge.compare(View(np.clip(depth, -1, 1).astype(np.float32), valid[None],
                                   np.full(depth.shape, 0.02, np.float32)), np.array([1.0]))
        assert found.kind[0] == far.kind[k]
        assert found.redshift[0] == pytest.approx(z, abs=0.006)


def test_normal_stars_are_not_refused() -> None:
    library = load_library()
    c = library.catalogue
    rows = np.flatnonzero((c["kind"] == "normal") & ~c["doubtful"] & (library.valid[:, :2400].mean(axis=1) > 0.95))
    names = [str(c["star"][k]) for k in rows[::20]]
    answers = Classifier.load().classify_many([star(n, 20.0, i) for i, n in enumerate(names)])
    assert sum(a.status != "typed" for a in answers) <= max(1, 0.02 * len(names))


@pytest.mark.parametrize("what", ["lamp", "noise", "step", "arc"])
def test_instrument_junk_gets_no_type(what: str) -> None:
    wave = np.arange(3700.0, 7400.0, 1.8)
    rng = np.random.default_rng(3)
    lines = np.exp(-0.5 * ((wave[:, None] - rng.uniform(3700, 7400, 60)) / 1.6) ** 2)
    flux = {"lamp": np.exp((wave - 5000) / 1500), "noise": np.ones(wave.size),
            "step": np.where(wave < 5500, 1.0, 3.0), "arc": 0.02 + lines @ rng.exponential(1, 60)}[what]
    level = 0.1 if what == "noise" else 0.01
    noisy = flux + rng.normal(0, level, wave.size) * np.median(flux)
    answer = Classifier.load().classify_one(PlainSpectrum(wave, noisy, None, np.ones(wave.size, bool), medium="air"))
    assert answer.status == "refused"
    assert answer.mk_type == "" and answer.posterior is None and answer.reason


def test_carbon_star_and_white_dwarf_say_what_they_are() -> None:
    carbon, dwarf = Classifier.load().classify_many([star("HD187216", 30.0), star("LTT4364", 60.0)])
    assert (carbon.status, carbon.object_kind) == ("refused", "carbon star") and "C2" in carbon.reason
    assert (dwarf.status, dwarf.object_kind, dwarf.other_type) == ("refused", "white dwarf", "DQ6")


def test_a_blend_is_flagged_and_typed() -> None:
    hot, cool = star("HD095418", 200.0, 1), star("HD083618", 200.0, 2)
    ok = hot.valid & cool.valid
    wave = hot.wave_angstrom[ok]
    near = (wave > 5150) & (wave < 5250)
    parts = [f.flux[ok] / np.median(f.flux[ok][near]) for f in (hot, cool)]
    blend = PlainSpectrum(wave, 0.35 * parts[0] + 0.65 * parts[1], np.full(wave.size, 0.01), np.ones(wave.size, bool),
                          medium="air")
    both, single = Classifier.load().classify_many([blend, star("HD143761", 100.0)])
    assert both.status == single.status == "typed"
    assert "composite" in both.flags and "composite" not in single.flags


def test_pair_finder_recovers_the_share() -> None:
    near, _ = load_examples()
    stars = near.select(near.kind == "star")
    finder = PairFinder(stars)
    labels = [str(t) for t in stars.label]
    a, b = stars.depth[labels.index("A1V")], stars.depth[labels.index("K3III")]
    pair = finder.best(view_of_depth((0.4 * a + 0.6 * b)[None], 0.01), 0)
    shares = {pair.first[0]: pair.share, pair.second[0]: 1 - pair.share}
    assert set(shares) <= {"A", "B", "K", "G"} and len(shares) == 2
    assert shares.get("A", shares.get("B")) == pytest.approx(0.4, abs=0.12)


def test_emission_and_metals_flagged_with_the_type_kept() -> None:
    wave = WAVE[PIXELS]
    flat, valid = np.ones(wave.size), np.ones(wave.size, bool)
    absorbed = flat - 0.3 * np.exp(-0.5 * ((wave - 6562.8) / 4) ** 2)
    assert depth_of(absorbed, valid, (6562.8, 4.5, 14.0, 32.0)) > 0.15
    assert not h_alpha_emission(absorbed, valid, 0.01, 25.0)
    assert h_alpha_emission(2 - absorbed, valid, 0.01, 15.0)
    assert not h_alpha_emission(2 - absorbed, valid, 0.4, 15.0), "noise must not make emission"
    assert chemically_peculiar(flat, valid, 0.01, 45.0, 5.0, 4.6) == "", "only A stars"
    am, normal = Classifier.load().classify_many([star("HD078209", 100.0), star("HD095418", 100.0)])
    assert "peculiar" in am.flags and am.status == "typed"
    assert "peculiar" not in normal.flags


def test_leaving_a_library_out_leaves_its_examples_out() -> None:
    judge = Judge(without_libraries=("stelib",), without_stars=(95418,))
    assert "stelib" not in set(judge.stars.source) | set(judge.others.source)
    near, _ = load_examples()
    hips = near.hip[near.hip > 0]
    assert not np.isin(Judge(without_stars=(int(hips[0]),)).stars.hip, hips[0]).any()
