"""A classifier of a few Gaussian lines, quick and with known answers, to try the desk, the sheet and the report on."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from starfathom.classify.assignment import Assignment, Criterion
from starfathom.classify.errors import SpectrumError
from starfathom.classify.prepared import Prepared
from starfathom.classify.spectrum import PlainSpectrum
from starfathom.decisions import DecisionLog
from starfathom.desk.night import Night, Star
from starfathom.templates.subtypes import CLASSES, LUM_CODES, SUBTYPES, T_CODES

WAVE = np.exp(np.arange(np.log(3800.0), np.log(6800.0), 2e-4))


@dataclass(frozen=True)
class FakeSettings:
    medium: str | None = None
    fwhm_angstrom: float | None = None
    velocity_kms: float | None = None


def lines(t_code: float, lum_code: float) -> np.ndarray:
    """H beta weakens with subtype, Ca II K grows, Sr II 4077 grows with luminosity."""
    def line(centre, depth, width=4.0):
        return depth * np.exp(-0.5 * ((WAVE - centre) / width) ** 2)

    return (1.0 - line(4861.3, 0.6 - 0.006 * t_code, 6.0) - line(3933.7, 0.01 * t_code, 5.0)
            - line(4077.7, 0.25 - 0.04 * lum_code))


class FakeClassifier:
    """Answers with the type the file name holds, such as ``G2_V.txt`` (see :func:`read`)."""

    def prepare(self, spectrum, settings=None):
        fwhm = getattr(settings, "fwhm_angstrom", None) or 4.0
        velocity = getattr(settings, "velocity_kms", None)
        return Prepared(spectrum, WAVE, spectrum.flux, spectrum.flux, np.full(WAVE.shape, 0.01),
                        np.ones(WAVE.shape, bool), velocity or 0.0, 3.0, "given" if velocity else "measured",
                        fwhm, "given", "air (assumed)", 90.0, "4400-4600")

    def template(self, t_code, lum_code, prepared):
        return lines(t_code, lum_code)

    def standards(self, t_code, lum_code, n=5):
        return ["Standard one", "Standard two"]

    def library_spectrum(self, name, prepared):
        return lines(41.0, 5.0) if name == "Standard one" else lines(43.0, 3.0)

    def classify_many(self, spectra, settings):
        return [self.classify_one(s, t) for s, t in zip(spectra, settings)]

    def classify_one(self, spectrum, settings=None):
        if isinstance(spectrum, SpectrumError):
            return Assignment(reason=str(spectrum))
        text = spectrum.meta["object"]
        if text == "galaxy":
            return Assignment(status="refused", object_kind="galaxy", reason="Redshifted lines of a galaxy.")
        subtype, lum_class = text.split()
        i, j = SUBTYPES.index(subtype), CLASSES.index(lum_class)
        posterior = np.zeros((len(SUBTYPES), len(CLASSES)))
        posterior[i, j], posterior[i + 1, j] = 0.6, 0.1
        posterior[i + 4, max(j - 2, 0)] = 0.3
        return Assignment(
            file=spectrum.path, status="typed", object_kind="star", mk_type=text, t_code=float(T_CODES[i]),
            t_code_err=1.0, lum_code=LUM_CODES[j], lum_code_err=0.5, posterior=posterior, type_set_90=(text,),
            snr=90.0, fwhm_angstrom=4.0, velocity_kms=0.0, velocity_err_kms=3.0,
            evidence=(
                Criterion("Ca II K / H beta", 1.2, 0.1, "G1 to G4", 0.5, float(T_CODES[i]) + 1.0, 1.0,
                          features=("CaII_K", "Hbeta"), source="own"),
                Criterion("Sr II 4077 / Fe I 4046", 0.4, 0.05, "class V", 0.2, lum_code=5.0, lum_code_err=0.5,
                          features=("SrII_4077", "FeI_4046"), source="own"),
                Criterion("template match", 1.0, 0.1, text, 0.3),
            ))


def read(path: str) -> PlainSpectrum:
    """``G2_V-3.txt`` is a G2 V; ``broken.txt`` cannot be read; ``galaxy.txt`` is one."""
    name = path.split(".txt")[0].split("-")[0].replace("_", " ")
    if name == "broken":
        raise SpectrumError(f"{path}: is not a spectrum")
    flux = np.ones(WAVE.shape)
    if name != "galaxy":
        subtype, lum_class = name.split()
        flux = lines(float(T_CODES[SUBTYPES.index(subtype)]), LUM_CODES[CLASSES.index(lum_class)])
    rng = np.random.default_rng(7)
    return PlainSpectrum(WAVE, flux + 0.01 * rng.standard_normal(WAVE.shape), None, np.ones(WAVE.shape, bool),
                         path=path, meta={"object": name})


def make_night(folder, *files: str) -> Night:
    """A night of named spectra, typed, its decisions kept in ``folder``."""
    stars = [Star(f.split(".txt")[0], f, FakeSettings()) for f in files]
    night = Night(stars, FakeClassifier(), DecisionLog(folder / "decisions.jsonl"), read)
    night.type_all()
    return night
