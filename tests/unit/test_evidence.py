"""What criteria add, what they are said to point to, and the remark."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from starfathom.classify.assignment import Assignment, Criterion
from starfathom.classify.criteria import load_criteria
from starfathom.classify.engine import Classifier
from starfathom.classify.evidence import Evidence, line_rung, remark_on
from starfathom.templates.subtypes import CLASSES, SUBTYPES, step_of


@pytest.mark.parametrize(("fwhm", "rung"), [(2.0, 3.2), (3.24, 3.2), (3.3, 4.6), (6.5, 6.5), (9.1, 12.5), (40.0, 17.0)])
def test_lines_are_measured_at_the_next_coarser_rung(fwhm, rung):
    assert line_rung(fwhm) == rung


def evidence(error: float = 0.05, n: int = 2) -> Evidence:
    """Every criterion at the value 0.2, with the scales of the shipped model."""
    scales = Classifier.load().model(4.6).criteria
    k = len(load_criteria())
    return Evidence(np.zeros((n, 1, 8)), np.full((n, k), 0.2), np.full((n, k), error), (scales,) * n)


def test_only_criteria_that_speak_near_the_type_are_listed_and_their_weights_add_up():
    found = evidence().criteria(np.array([42.0, 8.0]))
    rules = {r.label: r for r in load_criteria()}
    for t_code, own in zip((42.0, 8.0), found):
        assert own
        assert all(rules[c.name].t_lo - 1 <= t_code <= rules[c.name].t_hi + 1 for c in own)
        weights = [c.weight for c in own]
        assert weights == sorted(weights, reverse=True)
        assert sum(weights) == pytest.approx(1.0, abs=1e-3)
    assert {c.name for c in found[0]} != {c.name for c in found[1]}


def test_a_criterion_weighs_by_how_sharply_it_points():
    """Inverse variance in subtypes, and in half classes."""
    found = evidence().criteria(np.array([42.0, 42.0]))[0]
    for c in found:
        says = [1 / c.t_code_err ** 2 if np.isfinite(c.t_code_err) else 0.0,
                0.25 / c.lum_code_err ** 2 if np.isfinite(c.lum_code_err) else 0.0]
        total = sum((1 / d.t_code_err ** 2 if np.isfinite(d.t_code_err) else 0.0)
                    + (0.25 / d.lum_code_err ** 2 if np.isfinite(d.lum_code_err) else 0.0) for d in found)
        assert c.weight == pytest.approx(sum(says) / total, abs=1e-4)


def test_what_is_not_measured_is_not_listed():
    e = evidence()
    values = e.values.copy()
    values[0, ::2] = np.nan
    names = {c.name for c in replace(e, values=values).criteria(np.array([42.0, 42.0]))[0]}
    assert names <= {r.label for r in load_criteria()[1::2]}


def answer(**changes: object) -> Assignment:
    posterior = np.zeros((len(SUBTYPES), len(CLASSES)))
    posterior[SUBTYPES.index("G2"), [CLASSES.index(c) for c in ("V", "IV", "III")]] = 0.7, 0.25, 0.05
    base = Assignment("star", "typed", "star", mk_type="G2 V", t_code=42.0, t_code_err=0.8, posterior=posterior)
    return replace(base, **changes)   # type: ignore[arg-type]


def criterion(name: str, t_code: float, t_err: float, weight: float, word: str) -> Criterion:
    nan = float("nan")
    return Criterion(name, 1.0, 0.1, word, weight, t_code, t_err, nan, nan, (), "")


def test_the_remark_names_rivals_support_and_objections():
    said = (criterion("agrees", 42.5, 0.7, 0.6, "G2"), criterion("far", 52.0, 1.0, 0.3, "K2"),
            criterion("whispers", 10.0, 1.0, 0.01, "B0"))
    text = remark_on(answer(evidence=said), 0.0)
    assert "subtype good to 0.8" in text
    assert "class IV (25 %) not excluded" in text and "III" not in text
    assert "rests on agrees (G2), far (K2)" in text and "whispers" not in text
    assert "far objects (points to K2)" in text
    assert "[Fe/H]" not in text


def test_no_objection_within_three_standard_deviations():
    # 0.8 and 1.0 in quadrature: 3 sigma is 3.84 subtypes
    inside, outside = (remark_on(answer(evidence=(criterion("c", 42.0 + d, 1.0, 0.5, "G5"),)), 0.0) for d in (3.7, 4.0))
    assert "objects" not in inside and "objects" in outside


def test_metal_weak_stars_are_told_so():
    assert remark_on(answer(flags=("metal-weak",)), -1.32).endswith("metals weak for the type, [Fe/H] about -1.3")


def test_criteria_of_a_real_star_agree_with_its_type():
    """The evidence of a library star, by the whole chain, points within a few subtypes of the answer on average."""
    from starfathom.classify.spectrum import PlainSpectrum
    from starfathom.templates.library import load_library

    lib = load_library()
    i = int(np.flatnonzero((lib.catalogue["label"] == "G2V") & (lib.catalogue["kind"] == "normal"))[0])
    spectrum = PlainSpectrum(lib.wave_angstrom, lib.flux[i].astype(float), None, lib.valid[i], "air", "t", "star")
    a = Classifier.load().classify_one(spectrum)
    steps = [(float(step_of(c.t_code)), c.t_code_err) for c in a.evidence if np.isfinite(c.t_code) and c.weight > 0.02]
    assert len(steps) >= 3
    weight = np.array([1 / e ** 2 for _, e in steps])
    assert np.average([s for s, _ in steps], weights=weight) == pytest.approx(float(step_of(a.t_code)), abs=3.0)
