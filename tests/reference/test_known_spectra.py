"""Spectra of known objects from other instruments, carried by the registry: what they are is not ours to say.

Sources: SDSS spectral cross-correlation templates (labels in the README beside them: vacuum wavelengths, coarse types);
CALSPEC spectra of the Sun (Colina, Bohlin & Castelli 1996, AJ 112, 307) and of Vega (Bohlin & Gilliland 2004, AJ 127,
3508), all in the package Barak 0.3.2; Vega is the standard A0 V (or A0 Va) of Morgan & Keenan 1973, ARA&A 11, 29,
the Sun is G2 V by definition of the system. The Pickles atlas: Pickles 1998, PASP 110, 863.
"""

from __future__ import annotations

import tarfile
from pathlib import Path

import numpy as np
import pytest

from starfathom.classify.engine import Classifier, Settings
from starfathom.classify.mktype import MKType
from starfathom.classify.reading import read_plain
from starfathom.templates.recipe import cache_dir, fetch
from starfathom.templates.subtypes import step_of

pytestmark = pytest.mark.registry


@pytest.fixture(scope="module")
def examples() -> Path:
    """The templates folder of the package, unpacked once."""
    folder = cache_dir() / "barak-templates"
    if not folder.exists():
        aside = cache_dir() / "barak-templates.part"
        with tarfile.open(fetch("barak")) as archive:
            for member in archive.getmembers():
                parts = member.name.split("/templates/")
                if len(parts) == 2 and member.isfile() and parts[1].split("/")[0] in ("sdss", "reference", "pickles"):
                    target = aside / parts[1]
                    target.parent.mkdir(parents=True, exist_ok=True)
                    stream = archive.extractfile(member)
                    assert stream is not None
                    target.write_bytes(stream.read())
        aside.rename(folder)
    return folder


@pytest.fixture(scope="module")
def classifier() -> Classifier:
    return Classifier.load()


@pytest.mark.parametrize(("name", "lo", "hi"), [
    ("starFA", "A5", "F3"), ("starF_1", "F0", "F9"), ("starF_2", "F0", "G2"), ("starG_1", "F8", "G9"),
    ("starG_2", "G0", "K0"), ("starK", "K0", "K7"), ("starM1", "K7", "M3"), ("starM3", "M2", "M5"),
    ("starM5", "M3", "M6")])
def test_survey_stars_fall_within_their_coarse_types(examples, classifier, name, lo, hi):
    a = classifier.classify_one(read_plain(examples / "sdss" / f"{name}.fits"), Settings(medium="vacuum"))
    assert a.status == "typed", a.reason
    # a coarse label is taken to be good to its letter and a subtype on either side (common practice)
    step = float(step_of(a.t_code))
    assert step_of(MKType.parse(lo).t_code) - 1 <= step <= step_of(MKType.parse(hi).t_code) + 1


@pytest.mark.parametrize("name", ["starC_1", "starC_2", "starC_3", "starWD", "starBWD", "starWDmag", "galLRG", "gal_1",
                                  "gal_2", "gal_3", "gal_4", "gal_5", "qso", "qso_highlum", "starL1"])
def test_what_is_no_normal_star_gets_no_normal_type(examples, classifier, name):
    a = classifier.classify_one(read_plain(examples / "sdss" / f"{name}.fits"), Settings(medium="vacuum"))
    assert a.status == "refused" and a.mk_type == "" and a.reason and a.object_kind != "star"


def test_vega_and_the_sun(examples, classifier):
    vega = classifier.classify_one(read_plain(examples / "reference" / "Vega_bohlin2006"))
    assert vega.status == "typed" and abs(vega.t_code - 20) < 2.0 and vega.mk_type.split()[1] in ("V", "IV")
    sun = classifier.classify_one(read_plain(examples / "reference" / "sun_stis"))
    assert sun.status == "typed" and abs(sun.t_code - 42) < 4.0 and sun.mk_type.split()[1] == "V"


def test_the_atlas_of_pickles_comes_out_near_its_types(examples, classifier):
    """Five angstrom a pixel, composites of several stars: types within 2 subtypes for two thirds, V as V for 80 %."""
    spectra, truth = [], []
    for path in sorted((examples / "pickles").glob("*.fits")):
        try:
            mk = MKType.parse(path.stem)
        except Exception:  # names such as rK0III, wF5V: metal-rich and metal-weak sequences
            continue
        if mk.kind == "star" and path.stem[0] in "OBAFGKM" and np.isfinite(mk.lum_code):
            spectra.append(read_plain(path))
            truth.append(mk)
    answers = classifier.classify_many(spectra)
    typed = [(a, t) for a, t in zip(answers, truth) if a.status == "typed"]
    assert len(typed) >= 0.95 * len(truth) and len(truth) > 60
    off = np.array([float(step_of(a.t_code)) - float(step_of(t.t_code)) for a, t in typed])
    assert np.percentile(np.abs(off), 68) < 2.0
    dwarfs = [a.mk_type.split()[1] == "V" for a, t in typed if t.lum_code == 5]
    assert np.mean(dwarfs) >= 0.8
