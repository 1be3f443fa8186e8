"""Speed of the line stage: our bulk path against a plain loop over specutils, same features, same spectra, one run.

The loop is what one would write first: a continuum-normalised ``Spectrum`` once, then for every feature
``equivalent_width`` and ``fwhm`` over its region, and ``fit_lines`` for every line and blend. Ours does more in the
same time: side-band pseudo-continua, uncertainties, flags of coverage, and (last row) Voigt against Gaussian. Times are
of the processor, one thread, so that a busy machine does not tip the scales.
"""

from __future__ import annotations

import time
import warnings
from typing import Any

import numpy as np
from numpy.typing import NDArray

from starfathom.classify.lines import FEATURES, measure_many
from starfathom.classify.lines.profile_fits import fit_many

FloatArray = NDArray[np.float64]

LOOP_SPECTRA = 4
BULK_SPECTRA = 200
PIXELS = 4000
FWHM = 2.5


def _spectra(seed: int = 1) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Wavelengths, flux and sigma of library stars of all types on 4000 pixels, S/N 100."""
    from starfathom.templates.library import load_library

    rng = np.random.default_rng(seed)
    library = load_library()
    full = library.valid[:, (library.wave_angstrom > 3760) & (library.wave_angstrom < 7350)].mean(axis=1) > 0.99
    chosen = rng.choice(np.flatnonzero(full), BULK_SPECTRA, replace=True)
    wave = np.linspace(3760.0, 7350.0, PIXELS)
    flux = np.array([np.interp(wave, library.wave_angstrom, library.flux[i]) for i in chosen])
    sigma = flux / 100.0
    return wave, flux + sigma * rng.standard_normal(flux.shape), sigma


def _loop(wave: FloatArray, flux: FloatArray, sigma: FloatArray) -> dict[str, float]:
    """Seconds a spectrum of each specutils call over all features on the spectrum."""
    import astropy.units as u
    from astropy.modeling.fitting import LMLSQFitter
    from astropy.modeling.models import Gaussian1D
    from astropy.nddata import StdDevUncertainty
    from specutils import SpectralRegion, Spectrum
    from specutils.analysis import equivalent_width, fwhm
    from specutils.fitting import fit_lines

    inside = [f for f in FEATURES if f.window[0] > wave[0] and f.window[1] < wave[-1]]
    regions = [SpectralRegion(f.window[0] * u.AA, f.window[1] * u.AA) for f in inside]
    spent = {"equivalent_width": 0.0, "fwhm": 0.0, "fit_lines": 0.0}
    for row, error in zip(flux, sigma):
        level = np.polyval(np.polyfit(wave - wave.mean(), row, 5), wave - wave.mean())
        spectrum = Spectrum(flux=row / level * u.dimensionless_unscaled, spectral_axis=wave * u.AA,
                            uncertainty=StdDevUncertainty(error / level))
        bump = Spectrum(flux=(1.0 - row / level) * u.dimensionless_unscaled, spectral_axis=wave * u.AA,
                        uncertainty=StdDevUncertainty(error / level))
        start = time.process_time()
        equivalent_width(spectrum, continuum=1, regions=regions)
        spent["equivalent_width"] += time.process_time() - start
        start = time.process_time()
        fwhm(bump, regions=regions)
        spent["fwhm"] += time.process_time() - start
        start = time.process_time()
        for feature in inside:
            model: Any = None
            for _, rest in feature.lines:
                part = Gaussian1D(amplitude=0.1, mean=rest * u.AA, stddev=FWHM / 2.0 * u.AA)
                model = part if model is None else model + part
            if model is not None:
                fit_lines(bump, model, fitter=LMLSQFitter(calc_uncertainties=True), weights="unc",
                          window=(feature.window[0] * u.AA, feature.window[1] * u.AA))
        spent["fit_lines"] += time.process_time() - start
    return {name: value / len(flux) for name, value in spent.items()}


def _bulk(wave: FloatArray, flux: FloatArray, sigma: FloatArray) -> dict[str, float]:
    """Seconds a spectrum of our path: direct, direct and Gaussian fits, everything."""
    valid = np.ones(flux.shape, bool)
    measure_many(wave, flux[:2], sigma[:2], valid[:2], FWHM)
    out = {}
    start = time.process_time()
    measure_many(wave, flux, sigma, valid, FWHM, wings=False)
    out["direct"] = time.process_time() - start
    start = time.process_time()
    lines = measure_many(wave, flux, sigma, valid, FWHM)
    middle = time.process_time()
    fit_many(wave, lines, profiles=("gaussian",), fixed_depths=False)
    out["gaussian"] = time.process_time() - start
    out["gaussian fits alone"] = time.process_time() - middle
    start = time.process_time()
    fit_many(wave, measure_many(wave, flux, sigma, valid, FWHM))
    out["everything"] = time.process_time() - start
    return {name: value / len(flux) for name, value in out.items()}


def rows() -> list[dict[str, Any]]:
    """Rows of the speed table: task, milliseconds a spectrum by the loop and by us, ratio."""
    wave, flux, sigma = _spectra()
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        _loop(wave, flux[:1], sigma[:1])
        half = LOOP_SPECTRA // 2
        first = _loop(wave, flux[:half], sigma[:half])
        bulk = _bulk(wave, flux, sigma)
        second = _loop(wave, flux[half:LOOP_SPECTRA], sigma[half:LOOP_SPECTRA])
    loop = {name: 0.5 * (first[name] + second[name]) for name in first}
    count = f"{len(FEATURES)} features, {PIXELS} px"
    table = [
        ("equivalent widths, direct", loop["equivalent_width"], bulk["direct"], ""),
        ("Gaussian fits", loop["fit_lines"], bulk["gaussian fits alone"], ""),
        ("equivalent widths, widths and Gaussian fits", sum(loop.values()), bulk["gaussian"], ">= 100"),
        ("the same, and Voigt against Gaussian by us", sum(loop.values()), bulk["everything"], ""),
    ]
    return [{"task": f"{task} ({count})", "loop_ms": 1e3 * slow, "ours_ms": 1e3 * quick, "ratio": slow / quick,
             "target": target} for task, slow, quick, target in table]


if __name__ == "__main__":
    for row in rows():
        print(f"{row['task']:80s} specutils {row['loop_ms']:8.1f} ms   ours {row['ours_ms']:7.3f} ms   "
              f"{row['ratio']:7.0f} x")
