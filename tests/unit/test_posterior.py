"""From evidence to posterior to words, against densities and moments written out."""

from __future__ import annotations

import numpy as np
import pytest
from scipy import stats

from starfathom.classify import posterior as post
from starfathom.classify.model import Loci
from starfathom.classify.surface import Surface
from starfathom.templates.subtypes import CLASSES, LUM_CODES, STEPS, SUBTYPES

SHAPE = (len(SUBTYPES), len(CLASSES))


def cells(**mass: float) -> np.ndarray:
    """A posterior from ``G2_V=0.5`` and the like."""
    p = np.zeros(SHAPE)
    for name, value in mass.items():
        subtype, cls = name.replace("h", ".").split("_")
        p[SUBTYPES.index(subtype), CLASSES.index(cls)] = value
    return p


def test_the_tail_is_students_with_five_degrees_of_freedom():
    x = np.array([-7.0, -1.0, 0.0, 0.4, 3.0])
    np.testing.assert_allclose(post.student(x), stats.t.logpdf(x, 5) - stats.t.logpdf(0, 5))


def surface(support: float) -> Surface:
    none = np.zeros(0)
    return Surface(none, np.zeros((0, 1)), none, np.zeros((*SHAPE, 1)), np.full(SHAPE, support), np.zeros((0, 1, 1)))


def pieces(support: float = 5.0) -> tuple[np.ndarray, ...]:
    loci = Loci(np.full(SHAPE, 4.8), np.full(SHAPE, 0.3), np.full(SHAPE, 4.4), np.full(SHAPE, 0.1),
                np.full(SHAPE[0], 2.0))
    one = np.ones(1)
    return post.evidence_pieces(np.zeros((1, *SHAPE)), 4.0 * one, 0.4 * one, 4.0 * one, 0.0 * one, 42.0 * one,
                                1.5 * one, np.zeros((1, *SHAPE)), surface(support), loci)


def test_each_piece_is_a_density_widened_by_its_own_noise():
    _, abs_mag, log_g, step, _, _ = pieces()

    def t(off: float, sd: float) -> float:
        return stats.t.logpdf(off, 5, 0, sd) - stats.t.logpdf(0, 5)

    np.testing.assert_allclose(abs_mag, t(0.8, 0.5))         # 0.3 of the locus and 0.4 of the star in quadrature
    np.testing.assert_allclose(log_g, t(0.4, 0.1))
    np.testing.assert_allclose(step[0, SUBTYPES.index("G7"), 0], t(5.0, 2.5))


def test_types_without_library_stars_cost_three_e_folds_and_half_that_among_the_o_stars():
    thick, thin = pieces(5.0)[-1][0], pieces(0.2)[-1][0]
    lost = (thick - thin)[:, 0]
    o = np.array([s.startswith("O") and float(s[1:]) < 9.6 for s in SUBTYPES])
    np.testing.assert_allclose(lost[~o], 3.0)
    np.testing.assert_allclose(lost[o], 1.5)
    np.testing.assert_allclose(pieces(0.31)[-1], pieces(5.0)[-1])


def test_the_prior_is_flat_in_step_and_halves_are_rare():
    prior = np.exp(pieces()[-1][0, :, 0])
    by = dict(zip(SUBTYPES, prior))
    assert by["G2"] == pytest.approx(0.5)                                # cells of G stars are half a subtype wide
    assert by["G2.5"] == pytest.approx(0.5 * 0.05)
    assert by["B0.5"] == pytest.approx(0.25) and by["B3.5"] == pytest.approx(0.05)
    assert by["K7"] == pytest.approx(np.gradient(STEPS)[SUBTYPES.index("K7")])


def test_probabilities_are_exponentials():
    log_p = np.random.default_rng(0).normal(0, 3, (2, *SHAPE)) + 1e4      # must not overflow
    p = post.normalise(log_p)
    np.testing.assert_allclose(p.sum(axis=(1, 2)), 1.0)
    assert np.log(p[0, 3, 2] / p[0, 40, 1]) == pytest.approx(log_p[0, 3, 2] - log_p[0, 40, 1])


def test_moments_of_two_cells():
    step, step_sd, lum, lum_sd = (float(v[0]) for v in post.codes(cells(G0_V=0.75, G4_III=0.25)[None]))
    assert (step, lum) == pytest.approx((41.0, 4.5))
    assert (step_sd, lum_sd) == pytest.approx((np.sqrt(3.0), np.sqrt(0.75)))


def test_without_widening_nothing_changes():
    p = cells(G2_V=1.0)[None]
    assert post.widen(p, 0.0) is p
    wide = post.widen(p, 2.0)
    assert wide[0, :, CLASSES.index("V")].sum() == pytest.approx(1.0), "the class is left alone"
    assert wide[0, SUBTYPES.index("G2.5")].sum() < 0.2 * wide[0, SUBTYPES.index("G3")].sum(), "halves stay rare"
    ratio = wide[0, SUBTYPES.index("G4"), 7] / wide[0, SUBTYPES.index("G2"), 7]
    assert ratio == pytest.approx(np.exp(-0.5 * (2.0 / 2.0) ** 2))


def test_the_subtype_named_is_the_likeliest_near_the_mean():
    name = lambda p: SUBTYPES[post.best_type(p)[0]]   # noqa: E731
    assert name(cells(G2_V=0.5, G3_V=0.3, G1_V=0.2)) == "G2"
    assert name(cells(G2_V=0.3, G2h5_V=0.4, G3_V=0.3)) == "G2.5"
    # a far lump moves the mean, and the name goes with the mean
    assert name(cells(G2_V=0.5, G4_V=0.3, G8_V=0.2)) == "G4"
    # an empty cell at the mean is not named
    assert name(cells(G2_V=0.5, G3_V=0.5)) in ("G2", "G3")


def test_sets_stop_at_their_mass():
    p = cells(G2_V=0.5, G3_V=0.3, G5_V=0.15, K0_III=0.05)
    assert post.type_set(p, 0.45) == ("G2 V",)
    assert post.type_set(p, 0.7) == ("G2 V", "G3 V")
    assert post.type_set(p, 0.9) == ("G2 V", "G3 V", "G5 V")
    assert len(post.type_set(p, 1.0)) == 4


def test_the_nearest_cell():
    i, j = post.cell_of(42.3, 4.6)
    assert (SUBTYPES[i], CLASSES[j]) == ("G2.5", "V")
    assert LUM_CODES[post.cell_of(10.0, 1.4)[1]] == 1.3


def test_cells_that_cover_more_are_not_named_for_that_alone():
    """Between K5 and K7 with equal mass the denser cell is named: K5 stands for 0.75 of a step, K7 for a whole one."""
    p = cells(K5_V=0.5, K7_V=0.5)
    assert SUBTYPES[post.best_type(p)[0]] == "K5"


def test_a_set_that_is_to_hold_everything_leaves_out_the_impossible():
    p = np.full(SHAPE, 1e-9)
    p[SUBTYPES.index("G2"), 7] = 1.0
    assert post.type_set(p / p.sum(), 1.0) == ("G2 V",)
