"""The chain over a batch: a star's answer does not depend on its neighbours."""

from __future__ import annotations

import math

import pytest

from starfathom.chain import RunSettings, fathom_targets, given_type
from starfathom.classify.assignment import Assignment
from starfathom.targets import Target


def test_neighbours_with_and_without_a_luminosity_of_their_own() -> None:
    given = given_type("A2 V")
    seen = Assignment(
        status="typed", object_kind="star", mk_type="A2 V", t_code=22.0, posterior=given.posterior,
        abs_mag_v=1.4, abs_mag_v_err=0.4, abs_mag_v_ok=True,
    )  # fmt: skip
    mags = {"V": (8.62, 0.015), "B": (8.65, 0.02)}
    targets = [Target(0, "a", magnitudes=mags), Target(1, "b", magnitudes=mags)]
    settings = RunSettings(n_samples=400)
    together = fathom_targets(targets, [given, seen], settings)
    alone = [fathom_targets([t], [a], settings)[0] for t, a in zip(targets, [given, seen])]
    for one, other in zip(together, alone):
        assert one is not None and other is not None and not isinstance(one, str) and not isinstance(other, str)
        assert math.isfinite(one.median("distance_pc"))
        assert one.row() == pytest.approx(other.row(), nan_ok=True)
