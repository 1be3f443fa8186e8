"""Advice and plans: what must hold whatever the trials say, and what follows from the trials that are shipped."""

from __future__ import annotations

import json
import math
import subprocess
import sys
from typing import Any

import numpy as np
import pytest

from starfathom import advice, advice_grid, advice_plan
from starfathom.advice import Known, Wanted, advise
from starfathom.advice_grid import DATA_FILE, Setup, fit_logistic, load_trials, orderly, rising
from starfathom.classify.assignment import Assignment, Criterion
from starfathom.classify.errors import RequestError
from starfathom.cli import main
from starfathom.templates.subtypes import CLASSES, STEPS, step_of, t_code_of

FULL = (3900.0, 6800.0)


def typed(shares: dict[str, float], subtype: str = "G8", *, spread: float = 1.0, snr: float = 6.0, fwhm: float = 6.5,
          wave: tuple[float, float] = FULL, **more: Any) -> Assignment:
    """A star of one subtype whose class is spread over ``shares``."""
    along = np.exp(-0.5 * ((STEPS - float(step_of(t_code_of(subtype)))) / spread) ** 2)
    across = np.array([shares.get(c, 0.0) for c in CLASSES])
    p = np.outer(along, across)
    best = max(shares, key=lambda c: shares[c])
    given = {"status": "typed", "object_kind": "star", "mk_type": f"{subtype} {best}", "t_code": t_code_of(subtype),
             "t_code_err": spread, "lum_code": 4.0, "lum_code_err": 1.0, "posterior": p / p.sum(), "snr": snr,
             "fwhm_angstrom": fwhm, "meta": {"range_angstrom": wave}}
    return Assignment(**(given | more))


# Counting ------------------------------------------------------------------------------------------------------------

def test_rising_fit_is_the_least_squares_one() -> None:
    from sklearn.isotonic import IsotonicRegression

    rng = np.random.default_rng(3)
    for y in rng.normal(size=(50, 6)):
        assert rising(y) == pytest.approx(IsotonicRegression().fit_transform(np.arange(6), y), abs=1e-12)


def test_orderly_rises_with_snr_and_falls_with_fwhm() -> None:
    values = orderly(np.random.default_rng(1).random((3, 2, 5)))
    assert (np.diff(values, axis=-1) >= -1e-12).all()
    assert (np.diff(values, axis=0) <= 1e-12).all()


def test_logistic_regression_finds_the_coefficients_again() -> None:
    rng = np.random.default_rng(5)
    x = np.column_stack([np.ones(20000), rng.normal(size=(20000, 2))])
    true = np.array([0.3, -1.0, 0.7])
    y = (rng.random(20000) < advice_grid.expit(x @ true)).astype(float)
    assert fit_logistic(x, y) == pytest.approx(true, abs=0.06)


def test_shipped_trials_are_small_and_hold_no_star_kept_for_testing() -> None:
    from starfathom.templates.library import load_library

    trials = load_trials()
    c = load_library().catalogue
    miles = set(c["hip"][c["library"] == "miles"].tolist())
    assert DATA_FILE.stat().st_size < 1_000_000
    assert len(trials.hip) >= 100
    assert set(trials.hip.tolist()) <= miles - {0, -1}


def test_injected_stars_leave_two_thirds_of_each_kind_to_learn_from() -> None:
    from starfathom.advice_recipe import chosen_stars, group_index
    from starfathom.templates.library import load_library

    library = load_library()
    c = library.catalogue
    lots = chosen_stars(library)
    together = set().union(*(c["hip"][lot].tolist() for lot in lots))
    assert len(together) == sum(len(set(c["hip"][lot].tolist())) for lot in lots)      # no star in two lots
    normal = (c["library"] == "miles") & (c["kind"] == "normal") & np.isfinite(c["lum_code"]) & (c["hip"] > 0)
    for lot in lots:
        hips = set(c["hip"][lot].tolist())
        own = [int(i) for i in lot if c["library"][i] == "miles"]
        for letter, group in {(int(c["t_code"][i] // 10), int(group_index(c["lum_code"][i]))) for i in own}:
            cell = normal & (c["t_code"] // 10 == letter) & (group_index(c["lum_code"]) == group)
            assert sum(int(h) in hips for h in c["hip"][cell]) <= cell.sum() / 3 + 1e-9


def test_noise_of_the_poorer_spectrum_is_part_of_the_better() -> None:
    from starfathom.advice_recipe import noise_ladder

    noise = noise_ladder(np.random.default_rng(0), 200_000, (5.0, 10.0, 40.0))
    assert noise.std(axis=1) == pytest.approx([1 / 5, 1 / 10, 1 / 40], rel=0.01)
    # noise of a sum of exposures: correlation is the ratio of the S/N
    assert np.corrcoef(noise)[0, 1:] == pytest.approx([5 / 10, 5 / 40], abs=0.01)


@pytest.mark.parametrize("kinds", ["G8 III,G8 V", "K2 III", "F5 IV,F5 V", "A2 V,A2 III"])
def test_success_never_falls_with_snr_nor_rises_with_fwhm(kinds: str) -> None:
    curves = advice_plan.curves_of(load_trials(), advice_plan.parse_types(kinds))
    snr = np.geomspace(1.5, 150, 30)
    by_snr = [advice_plan.success(curves, Setup(6.0, FULL, float(s))) for s in snr]
    by_fwhm = [advice_plan.success(curves, Setup(w, FULL, 10.0)) for w in (1.0, 4.6, 5.5, 8.0, 12.5, 16.0)]
    assert (np.diff(by_snr) >= -1e-9).all() and (np.diff(by_fwhm) <= 1e-9).all()
    assert 0 <= by_snr[0] <= by_snr[-1] <= 1


def test_part_of_the_range_tells_no_more_than_all_of_it() -> None:
    trials = load_trials()
    whole = np.mean([trials.class_rate(s, g, Setup(5.0, FULL, 8.0)) for s in (25, 35, 45, 52) for g in (2, 4)])
    for part in ((3900.0, 4900.0), (4900.0, 6800.0), (5500.0, 6800.0)):
        assert np.mean([trials.class_rate(s, g, Setup(5.0, part, 8.0)) for s in (25, 35, 45, 52) for g in (2, 4)]
                       ) < whole + 0.02


# The plan ------------------------------------------------------------------------------------------------------------

def test_snr_needed_is_where_the_goal_is_met() -> None:
    answer = advice_plan.plan("G8 III,G8 V", fwhm_angstrom=6.0, wave_range="3900-6800")
    needed = answer["snr_needed"]
    curves = advice_plan.curves_of(load_trials(), advice_plan.parse_types("G8 III,G8 V"))
    assert advice_plan.success(curves, Setup(6.0, FULL, needed)) >= 0.9
    assert needed <= 3.001 or advice_plan.success(curves, Setup(6.0, FULL, 0.95 * needed)) < 0.9


def test_more_asked_needs_more() -> None:
    needed = [advice_plan.plan("G8 III,G8 V", fwhm_angstrom=6.0, want=f"class {w}%")["snr_needed"]
              for w in (80, 90, 95)]
    assert needed == sorted(needed)


def test_what_no_snr_reaches_is_null_and_says_why(capsys: pytest.CaptureFixture[str]) -> None:
    main_exits(["plan", "--types", "F5 IV,F5 V", "--want", "class 99%", "--json"], 0)
    answer = json.loads(capsys.readouterr().out)
    assert answer["snr_needed"] is None
    assert "not the 99 % asked for" in answer["reason"]


def test_distance_goal_gives_a_finite_need_or_says_what_is_left() -> None:
    loose = advice_plan.plan("G8 V", want="distance 60%")
    tight = advice_plan.plan("G8 V", want="distance 2%")
    assert loose["snr_needed"] is not None
    assert tight["snr_needed"] is None and "A parallax would do" in tight["reason"]


def test_whole_diagram(capsys: pytest.CaptureFixture[str], tmp_path: Any) -> None:
    picture = tmp_path / "plan.png"
    main_exits(["plan", "--figure", str(picture)], 0)
    text = capsys.readouterr().out
    assert all(name in text for name in advice_plan.DIAGRAM)
    assert picture.stat().st_size > 10_000


@pytest.mark.parametrize("arguments, word", [
    (["--types", "DA"], "MK sequence"),
    (["--types", "G8"], "luminosity class"),
    (["--types", "what"], ""),
    (["--types", ","], "names no type"),
    (["--types", "G8 V,G8 V"], "twice"),
    (["--types", "G8 V,G8 III", "--range", "390-680"], "not nanometres"),
    (["--types", "G8 V,G8 III", "--range", "6800-3900"], "below the second"),
    (["--types", "G8 V,G8 III", "--range", "blue"], "two wavelengths"),
    (["--types", "G8 V,G8 III", "--range", "7000-9000"], "300"),
    (["--types", "G8 V,G8 III", "--fwhm", "40"], "17"),
    (["--types", "G8 V,G8 III", "--fwhm", "-1"], "above 0"),
    (["--types", "G8 V,G8 III", "--want", "soon"], "distance 15%"),
    (["--types", "G8 V,G8 III", "--want", "class 100%"], "less than 100"),
    (["--types", "G8 V,G8 III", "--want", "distance 0%"], "between"),
    (["--types", "G8 V,G8 III", "--figure", "plan.doc"], ".png"),
    (["--types", "M9 Ia,O2 V"], ""),
])
def test_bad_requests_get_one_sentence(arguments: list[str], word: str, capsys: pytest.CaptureFixture[str]) -> None:
    main_exits(["plan", *arguments], 2)
    told = capsys.readouterr()
    assert word in told.err and told.err.startswith("starfathom: ") and len(told.err.strip().splitlines()) == 1


def main_exits(arguments: list[str], code: int) -> None:
    try:
        main(arguments)
    except SystemExit as done:
        assert (done.code or 0) == code
    else:
        assert code == 0


def test_plan_opens_nothing_heavy() -> None:
    script = ("import sys\nfrom starfathom.cli import main\n"
              "try:\n main(['plan', '--types', 'G8 III,G8 V', '--json'])\nexcept SystemExit:\n pass\n"
              "print([m for m in ('matplotlib', 'sklearn', 'specutils', 'astropy', 'scipy') if m in sys.modules])")
    told = subprocess.run([sys.executable, "-c", script], capture_output=True, text=True, check=True).stdout
    assert told.strip().splitlines()[-1] == "[]"


# Advice for a star ---------------------------------------------------------------------------------------------------

def test_a_certain_star_needs_none() -> None:
    assert advise(typed({"V": 0.99, "IV": 0.01}, spread=0.6)) == []


def test_what_was_not_typed_gets_none() -> None:
    assert advise(Assignment(status="refused", reason="too poor")) == []


def test_time_follows_from_the_exposure_so_far() -> None:
    a = typed({"III": 0.55, "V": 0.45}, "G2", snr=4.0, spread=2.0)
    options = {x.time_factor: x for x in advice.weigh_spectra(a, exptime_s=600.0) if x.kind == "exposure"}
    assert options[4.0].extra_seconds == 1800.0 and options[4.0].action.startswith("30 minutes more")
    assert options[4.0].setup is not None and options[4.0].setup.snr == pytest.approx(8.0)
    assert next(x for x in advice.weigh_spectra(a) if x.time_factor == 4).action.startswith("4 times the exposure")


def test_header_exposure_is_used() -> None:
    a = typed({"III": 0.55, "V": 0.45}, "K0", snr=4.0, spread=2.5,
              meta={"exptime_s": 120.0, "range_angstrom": FULL})
    assert any("more at the same set-up" in str(x) for x in advise(a, wanted="class"))


def test_more_of_the_same_is_never_promised_to_do_worse() -> None:
    for shares in ({"III": 0.6, "V": 0.4}, {"V": 0.5, "IV": 0.5}, {"Ib": 0.5, "III": 0.5}):
        found = [x for x in advice.weigh_spectra(typed(shares, "G5", snr=3.0)) if x.kind == "exposure"]
        told = [x.success_then for x in sorted(found, key=lambda x: x.time_factor)]
        assert told == sorted(told) and told[0] >= found[0].success_now and told[-1] <= 1


def test_a_missing_stretch_is_proposed_and_a_finer_line_spread() -> None:
    kinds = {x.kind for x in advice.weigh_spectra(typed({"III": 0.6, "V": 0.4}, wave=(4900.0, 6800.0), fwhm=12.0))}
    assert {"range", "resolution", "exposure"} <= kinds
    assert "range" not in {x.kind for x in advice.weigh_spectra(typed({"III": 0.6, "V": 0.4}))}


def test_nothing_more_is_promised_where_nothing_helps() -> None:
    told = advise(typed({"III": 0.34, "IV": 0.33, "V": 0.33}, "A8", snr=120.0, fwhm=4.6), wanted="class")
    assert [x.kind for x in told] == ["none"] and "would hardly settle" in str(told[0])


def test_feature_to_aim_at_is_the_one_that_is_not_yet_clear() -> None:
    evidence = (
        Criterion("clear", 1.0, 0.1, "III", 0.5, lum_code=3.0, lum_code_err=0.1),
        Criterion("Sr II 4077 / Fe I 4063", 1.0, 0.3, "III", 0.3, lum_code=3.2, lum_code_err=0.7),
        Criterion("mute", 1.0, 0.1, "", 0.2),
        Criterion("hopeless", 1.0, 3.0, "V", 0.1, lum_code=4.0, lum_code_err=9.0))
    a = typed({"III": 0.6, "V": 0.4}, evidence=evidence)
    assert advice.telling_feature(a) == "Sr II 4077 / Fe I 4063"
    assert "at Sr II 4077" in advice.weigh_spectra(a)[0].action


def fathomed(a: Assignment, bands: dict[str, Any]) -> Any:
    from starfathom.distance import Photometry, fathom

    return fathom(a, Photometry(bands), n_samples=1000, seed=1)


def test_distance_actions_and_their_numbers() -> None:
    bands = {"V": (9.0, 0.02), "B": (9.95, 0.02)}
    a = typed({"III": 0.97, "IV": 0.03}, spread=0.7, snr=80.0)
    told = advise(a, fathomed(a, bands), known=Known(bands), most=10)
    kinds = [x.kind for x in told]
    assert kinds[0] == "parallax" and "none" not in kinds
    best = told[0]
    # two independent distances: 1/e^2 adds
    assert best.distance_then == pytest.approx(1 / math.hypot(1 / best.distance_now, 1 / 10.0), rel=0.01)
    assert all(x.distance_then <= x.distance_now for x in told)


def test_bands_one_has_are_not_proposed_and_a_good_parallax_is_pointed_at() -> None:
    bands = {"V": (9.0, 0.02), "B": (9.95, 0.02), "Ks": (6.6, 0.02), "I": (8.0, 0.02)}
    a = typed({"III": 0.97, "IV": 0.03}, spread=0.7, snr=80.0)
    told = advise(a, fathomed(a, bands), known=Known(bands, parallax=(5.0, 0.05)), most=10)
    assert "band" not in {x.kind for x in told}
    assert told[0].action.startswith("the parallax you have (5 ± 0.05 mas)")


def test_what_the_telescope_can_do_is_told_beside_a_parallax() -> None:
    a = advice.Advice("parallax", "a parallax good to 1 mas", "distance error 30 → 10 %", 0.9)
    b = advice.Advice("dust", "a value of E(B-V)", "distance error 30 → 25 %", 0.3)
    c = advice.Advice("band", "a Ks magnitude", "distance error 30 → 27 %", 0.1)
    assert advice.summary([a, b, c]) == (
        "A parallax good to 1 mas: distance error 30 → 10 %. A Ks magnitude: distance error 30 → 27 %.")
    assert advice.summary([c, a]) == "A Ks magnitude: distance error 30 → 27 %."
    assert advice.summary([]) == ""


def test_distance_already_good_enough_leaves_only_the_type() -> None:
    bands = {"V": (9.0, 0.02), "B": (9.95, 0.02)}
    a = typed({"V": 0.99, "IV": 0.01}, spread=0.5, snr=80.0)
    assert advise(a, fathomed(a, bands), Wanted.parse("distance 90%"), known=Known(bands)) == []


@pytest.mark.parametrize("text", ["", "distance", "class 30%", "distance 900%", "class -5%", "parallax"])
def test_goals_that_mean_nothing(text: str) -> None:
    with pytest.raises(RequestError):
        Wanted.parse(text)


def test_desk_puts_a_star_that_can_still_be_settled_first() -> None:
    from starfathom.desk.needs import need

    shares = {"III": 0.5, "V": 0.5}
    now = need(typed(shares, "K0", snr=3.0))
    late = need(typed(shares, "K0", snr=3.0, fwhm_angstrom=math.nan))      # the same, with no set-up to improve on
    assert now.score > late.score
