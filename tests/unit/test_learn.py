"""Training, on a third of the library at the coarsest rung."""

from __future__ import annotations

import numpy as np
import pytest

from starfathom.classify.engine import Classifier
from starfathom.classify.learn import align_library, average, learn_rung, load_nodes, save_nodes
from starfathom.classify.model import RUNGS
from starfathom.classify.surface import CORE
from starfathom.templates.library import load_library


@pytest.mark.slow
def test_a_third_of_the_library_teaches_much_the_same(tmp_path):
    library = load_library()
    part = library.select(np.arange(len(library)) % 3 == 0)
    aligned = align_library(part)
    model = learn_rung(aligned, part.catalogue["star"], part.catalogue["label"], RUNGS[-1])
    whole = Classifier.load().model(RUNGS[-1])

    # templates of well-populated types agree with those of the whole library to about their own scatter
    for step, lum in ((20.0, 5.0), (35.0, 5.0), (42.0, 5.0), (50.0, 3.0), (55.0, 3.0)):
        off = (model.surface.spectrum(step, lum) - whole.surface.spectrum(step, lum))[CORE]
        assert np.sqrt(np.mean(off ** 2)) < 0.015, (step, lum)

    # subtypes regressed from the components of each star stand near its label
    z = model.components.astype(float)
    found, _ = average(model.step, z, np.zeros((len(z), z.shape[1], z.shape[1])))
    label = dict(zip(part.catalogue["star"], aligned.lessons.step))
    assert np.median(np.abs(found - [label[name] for name in model.names])) < 1.0

    # the conformal scores are masses, and by construction spread over the range
    assert np.all((model.conformal >= 0) & (model.conformal <= 1)) and np.all(np.diff(model.conformal) >= 0)
    assert 0.2 < np.median(model.conformal) < 0.8
    weights = (model.blend.temper, model.blend.abs_mag_weight, model.blend.log_g_weight, model.blend.step_weight)
    assert all(0.02 < w < 3 for w in weights)
    assert 0.2 <= model.blend.step_sd_floor < 2.5

    save_nodes(aligned.nodes, tmp_path / "nodes.npz")
    again = load_nodes(tmp_path / "nodes.npz")
    for name in ("step", "lum_code", "valid"):
        np.testing.assert_array_equal(getattr(again, name), getattr(aligned.nodes, name))
    assert again.rect.shape == aligned.nodes.rect.shape
