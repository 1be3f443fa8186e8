"""Nominal values of the IAU and the arithmetic that hangs on them.

IAU 2015 Resolution B2 (bolometric zero point; arXiv:1510.06262) and B3 (nominal solar values; arXiv:1510.07674). The
nominal radius and temperature of the Sun are quoted from memory of B3 and checked against the Stefan-Boltzmann law.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import ArrayLike, NDArray

FloatArray = NDArray[np.float64]

M_BOL_SUN = 4.74  #: mag, B2
L_ZERO_WATT = 3.0128e28  #: luminosity of M_bol = 0, B2
L_SUN_WATT = 3.828e26  #: B3
R_SUN_METRE = 6.957e8  #: B3
TEFF_SUN_K = 5772.0  #: B3
PARSEC_METRE = 3.085677581491367e16  #: 648000/pi au, B2

#: Angular diameter in milliarcseconds of one nominal solar radius at one parsec.
THETA_MAS_RSUN_PC = 2.0 * R_SUN_METRE / PARSEC_METRE * (180.0 / np.pi) * 3600.0e3


def distance_pc(modulus: ArrayLike) -> FloatArray:
    """Distance in parsec of a true distance modulus in mag (any shape): modulus 5 is 100 pc."""
    return 10.0 ** (0.2 * np.asarray(modulus, float) + 1.0)


def distance_modulus(distance: ArrayLike) -> FloatArray:
    """True distance modulus in mag of a distance in parsec (any shape)."""
    return 5.0 * np.log10(np.asarray(distance, float)) - 5.0


def log_luminosity(m_bol: ArrayLike) -> FloatArray:
    """log10 of the luminosity in nominal solar units from the absolute bolometric magnitude."""
    return 0.4 * (M_BOL_SUN - np.asarray(m_bol, float))


def radius_rsun(log_lum: ArrayLike, teff_k: ArrayLike) -> FloatArray:
    """Radius in nominal solar radii from log10(L/Lsun) and effective temperature in K (Stefan-Boltzmann)."""
    return 10.0 ** (0.5 * np.asarray(log_lum, float)) * (TEFF_SUN_K / np.asarray(teff_k, float)) ** 2


def angular_diameter_mas(radius: ArrayLike, distance: ArrayLike) -> FloatArray:
    """Angular diameter in milliarcseconds of a radius in nominal solar radii at a distance in parsec."""
    return THETA_MAS_RSUN_PC * np.asarray(radius, float) / np.asarray(distance, float)
