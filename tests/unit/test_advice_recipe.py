"""Making library stars worse: S/N, coverage and what is kept of each answer."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest

from starfathom import advice_recipe
from starfathom.advice_recipe import SNR_PER_ANGSTROM, inject, outcome, worse
from starfathom.classify.assignment import Assignment
from starfathom.classify.grid import PIXEL_ANGSTROM, WAVE
from starfathom.templates.library import load_library
from starfathom.templates.subtypes import CLASSES, SUBTYPES


def test_a_star_made_worse_has_the_noise_and_the_range_asked_for():
    flux = np.full(len(WAVE), 4.0)
    made = worse(WAVE, flux, np.ones(len(WAVE), bool), 2.5, 2.5, (4000.0, 7000.0), 3)
    assert len(made) == len(SNR_PER_ANGSTROM)
    for snr, one in zip(SNR_PER_ANGSTROM, made):
        ok = one.valid
        assert WAVE[ok].min() > 4000 and WAVE[ok].max() < 7000
        noise = (one.flux - 4.0)[ok] * np.sqrt(PIXEL_ANGSTROM[ok]) / 4.0     # of one angstrom
        assert np.std(noise) == pytest.approx(1 / snr, rel=0.06)
        assert (one.sigma * np.sqrt(PIXEL_ANGSTROM) / 4.0)[ok] == pytest.approx(1 / snr, rel=1e-6)


def test_the_kept_outcome_sums_the_supergiants_and_leaves_refused_stars_out():
    p = np.zeros((len(SUBTYPES), len(CLASSES)))
    p[SUBTYPES.index("K7"), :4] = 0.1
    p[SUBTYPES.index("K7"), CLASSES.index("V")] = 0.6
    typed = Assignment("a", "typed", "star", posterior=p, t_code=57.0, t_code_err=0.4, abs_mag_v=8.1, abs_mag_v_err=0.2,
                       abs_mag_v_ok=True)
    got = outcome([typed, Assignment("b", "refused")])
    # K7 is one inner step past K5
    assert got[0] == pytest.approx([0.4, 0.0, 0.0, 0.0, 0.6, 56.0, 0.4, 8.1, 0.2, 1.0])
    assert np.isnan(got[1]).all()


def test_injection_goes_on_where_it_was_cut(tmp_path: Path, monkeypatch: pytest.MonkeyPatch):
    library = load_library()
    monkeypatch.setattr(advice_recipe, "FWHM_ANGSTROM", advice_recipe.FWHM_ANGSTROM[:1])
    monkeypatch.setattr(advice_recipe, "COVERAGES", advice_recipe.COVERAGES[:2])
    calls = []

    class Known:
        def classify_many(self, spectra, settings):
            calls.append(len(spectra))
            return [Assignment("x", "refused")] * len(spectra)

    rows = np.array([3, 8])
    first = inject(Known(), library, rows, tmp_path)   # type: ignore[arg-type]
    assert first.shape == (2, 1, 2, len(SNR_PER_ANGSTROM), 10)
    assert calls == [2 * len(SNR_PER_ANGSTROM)] * 2
    next(iter(tmp_path.glob("*.npy"))).unlink()
    inject(Known(), library, rows, tmp_path)   # type: ignore[arg-type]
    assert len(calls) == 3, "only what is missing is done again"
