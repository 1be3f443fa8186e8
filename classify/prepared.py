"""A spectrum made ready to compare: rest frame, common grid, mask, noise, rectified."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from starfathom.classify.spectrum import PlainSpectrum

FloatArray = NDArray[np.float64]
BoolArray = NDArray[np.bool_]


@dataclass(frozen=True)
class Prepared:
    """One spectrum at rest, in air, on the common logarithmic grid.

    Attributes
    ----------
    spectrum : as it was read
    wave_angstrom : (m,) the common grid, air, rest frame
    flux : (m,) flux on the grid at the spectrum's own resolution, divided by its median; 0 where invalid
    rectified : (m,) flux over its own pseudo-continuum (a masked Gaussian smooth), 1 where there is no feature
    sigma : (m,) one standard deviation of ``rectified``
    valid : (m,) bool
    velocity_kms, velocity_err_kms : as observed, positive receding; ``velocity_source`` is "measured" or "given"
    fwhm_angstrom : line-spread FWHM; ``fwhm_source`` is "measured", "given" or "header"
    wave_medium : such as "air (header)", "air (assumed)", "vacuum (asked for)"
    snr : per angstrom, in ``snr_window``
    notes : what was assumed
    """

    spectrum: PlainSpectrum
    wave_angstrom: FloatArray
    flux: FloatArray
    rectified: FloatArray
    sigma: FloatArray
    valid: BoolArray
    velocity_kms: float
    velocity_err_kms: float
    velocity_source: str
    fwhm_angstrom: float
    fwhm_source: str
    wave_medium: str
    snr: float
    snr_window: str
    notes: tuple[str, ...] = ()
