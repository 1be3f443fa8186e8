"""The whole classifier on real library spectra, disturbed in known ways."""

from __future__ import annotations

import numpy as np
import pytest

from starfathom.classify import classify
from starfathom.classify.engine import Classifier, Settings
from starfathom.classify.errors import RequestError, SpectrumError
from starfathom.classify.grid import WAVE
from starfathom.classify.spectrum import PlainSpectrum
from starfathom.templates.library import load_library
from starfathom.templates.subtypes import CLASSES, SUBTYPES, step_of


@pytest.fixture(scope="module")
def classifier():
    return Classifier.load()


def star(label: str, library: str = "miles", **how: object) -> tuple[PlainSpectrum, float]:
    """The first library star of a type, perhaps moved, noisy, cut; and its step."""
    lib = load_library()
    c = lib.catalogue
    i = int(np.flatnonzero((c["label"] == label) & (c["library"] == library) & (c["kind"] == "normal"))[0])
    wave, flux, valid = WAVE.copy(), lib.flux[i].astype(float), lib.valid[i].copy()
    sigma = None
    if snr := how.get("snr"):
        rng = np.random.default_rng(7)
        sigma = np.where(valid, flux, 1.0) / float(snr)   # type: ignore[arg-type]
        flux = np.where(valid, flux + rng.normal(0, 1, len(flux)) * sigma, 0.0)
    if velocity := how.get("velocity"):
        wave = wave * (1 + float(velocity) / 299792.458)   # type: ignore[arg-type]
    if window := how.get("window"):
        valid = valid & (wave > window[0]) & (wave < window[1])   # type: ignore[index]
    spectrum = PlainSpectrum(wave, np.where(valid, flux, 0.0), sigma, valid, "air", "test", label)
    return spectrum, float(step_of(c["t_code"][i]))


@pytest.mark.parametrize("label", ["B5V", "A0V", "F5V", "G2V", "K0III", "K5V", "M2III"])
def test_known_stars_come_out_near_their_types(classifier, label):
    spectrum, step = star(label)
    a = classifier.classify_one(spectrum)
    assert a.status == "typed"
    assert abs(float(step_of(a.t_code)) - step) < 3.0
    assert a.posterior is not None and a.posterior.sum() == pytest.approx(1.0)
    assert sum(a.class_probabilities.values()) == pytest.approx(1.0)
    assert a.class_probabilities["V" if "V" in label else "III"] > 0.3
    assert a.mk_type.split()[0] in SUBTYPES and a.mk_type.split()[1] in CLASSES
    assert len(a.nearest) == 3 and a.evidence and a.remark
    assert a.type_set_90


@pytest.mark.parametrize("velocity", [-500.0, -80.0, 0.0, 150.0, 500.0])
def test_velocity_is_found(classifier, velocity):
    spectrum, step = star("G8III", velocity=velocity)
    a = classifier.classify_one(spectrum)
    assert a.velocity_kms == pytest.approx(velocity, abs=15.0)
    assert abs(float(step_of(a.t_code)) - step) < 3.0


def test_a_given_velocity_is_kept(classifier):
    spectrum, _ = star("G8III", velocity=100.0)
    a = classifier.classify_one(spectrum, Settings(velocity_kms=100.0))
    assert a.velocity_kms == 100.0


def test_line_spread_is_found_and_a_given_one_kept(classifier):
    from starfathom.classify.grid import blur

    spectrum, _ = star("K0III")
    wide, ok = blur(spectrum.flux[None], spectrum.valid[None], float(np.sqrt(8.0 ** 2 - 2.5 ** 2)))
    coarse = PlainSpectrum(WAVE[::3], wide[0][::3], None, ok[0][::3], "air", "test")
    assert classifier.classify_one(coarse).fwhm_angstrom == pytest.approx(8.0, rel=0.15)
    assert classifier.classify_one(coarse, Settings(fwhm_angstrom=7.0)).fwhm_angstrom == 7.0
    assert classifier.classify_one(coarse, Settings(resolution=500)).fwhm_angstrom == 10.0


def test_vacuum_wavelengths_move_the_velocity_by_83(classifier):
    spectrum, _ = star("G8III")
    taken = classifier.classify_one(spectrum, Settings(medium="vacuum"))
    right = classifier.classify_one(spectrum)
    # the refractive index of air, 1.00028, times c (common practice)
    assert taken.velocity_kms - right.velocity_kms == pytest.approx(-83.5, abs=4.0)


def test_noise_widens_the_posterior_and_the_set(classifier):
    sharp, dull = (classifier.classify_one(star("G2V", snr=s)[0]) for s in (100, 6))
    assert dull.snr < 0.15 * sharp.snr
    assert len(dull.type_set_90) > len(sharp.type_set_90)
    assert dull.abs_mag_v_err > sharp.abs_mag_v_err


def test_snr_per_angstrom_is_measured(classifier):
    a = classifier.classify_one(star("G2V", snr=40)[0])
    # 40 a pixel of 0.90 A at 4500 A
    assert a.snr == pytest.approx(40 / np.sqrt(0.9), rel=0.1)
    assert a.snr_window == "4400-4600"


def test_partial_coverage_is_typed_and_flagged(classifier):
    for window in ((3900.0, 4900.0), (5800.0, 7350.0)):
        spectrum, step = star("K0III", window=window)
        a = classifier.classify_one(spectrum)
        assert a.status == "typed" and "partial-coverage" in a.flags
        assert abs(float(step_of(a.t_code)) - step) < 4.0


def test_hopeless_spectra_are_refused_or_failed_and_cost_the_rest_nothing(classifier):
    good, _ = star("F5V")
    rng = np.random.default_rng(0)
    noise = PlainSpectrum(WAVE, rng.normal(1, 3, len(WAVE)), np.full(len(WAVE), 3.0), np.ones(len(WAVE), bool), "air")
    red = PlainSpectrum(np.linspace(7500, 9200, 2000), np.ones(2000), None, np.ones(2000, bool), "air")
    few = PlainSpectrum(WAVE[:50], np.ones(50), None, np.ones(50, bool), "air")
    answers = classifier.classify_many([SpectrumError("no such file"), noise, good, red, few])
    assert [a.status for a in answers] == ["failed", "refused", "typed", "refused", "failed"]
    assert all(a.reason and "\n" not in a.reason for a in answers if a.status != "typed")
    assert answers[0].reason == "no such file"


def test_company_does_not_change_an_answer(classifier):
    spectra = [star(label)[0] for label in ("B5V", "G2V", "K0III", "M2III")]
    alone = [classifier.classify_one(s) for s in spectra]
    for a, b in zip(alone, classifier.classify_many(spectra)):
        assert a.row() == b.row()


def test_settings_out_of_reason_are_rejected():
    for how in ({"medium": "water"}, {"fwhm_angstrom": -1.0}, {"resolution": 3.0}, {"velocity_kms": 1e6}):
        with pytest.raises(RequestError):
            Settings(**how)


def test_leaving_out_what_is_not_in_use_changes_nothing(classifier):
    assert Classifier(("pickles", "sdss"), (1,))._folder() == classifier._folder()


def test_templates_and_standards_for_the_eye(classifier):
    spectrum, _ = star("G2V")
    prepared = classifier.prepare(spectrum)
    template = classifier.template(42.0, 5.0, prepared)
    use = prepared.valid & np.isfinite(template) & (WAVE > 4000) & (WAVE < 6800)
    assert np.std((prepared.rectified - template)[use]) < 0.03
    other = classifier.template(20.0, 5.0, prepared)
    assert np.std((prepared.rectified - other)[use]) > 0.06
    names = classifier.standards(42.0, 5.0)
    assert len(names) == 5
    assert classifier.library_spectrum(names[0], prepared).shape == WAVE.shape
    with pytest.raises(RequestError):
        classifier.library_spectrum("no such star", prepared)


def test_the_public_function_takes_specutils_and_plain_spectra():
    spectrum, _ = star("G2V")
    a = classify(spectrum)
    b = classify(spectrum.to_specutils())
    assert a.mk_type == b.mk_type


@pytest.mark.parametrize("start", [3650.0, 3700.0, 3800.0, 3900.0, 4000.0])
def test_where_a_spectrum_begins_does_not_change_its_type(classifier, start):
    """The pseudo-continuum of an A star next to its first pixel is not that of the library, which begins at 3541 A."""
    whole, step = star("A1V")
    cut, _ = star("A1V", window=(start, 7000.0))
    a, b = (classifier.classify_one(s, Settings(fwhm_angstrom=2.5)) for s in (whole, cut))
    assert abs(float(step_of(a.t_code)) - float(step_of(b.t_code))) < 1.0
    assert abs(float(step_of(b.t_code)) - step) < 2.5
