"""The colour of a flux-calibrated spectrum, and the reddening it tells of."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from starfathom.distance.grid import cell_of
from starfathom.distance.intrinsic import intrinsic
from starfathom.distance.tables import read_table

FloatArray = NDArray[np.float64]

#: Added to -2.5 log10 of the ratio of fluxes through B and V to give B-V: median over the spectra of Pickles 1998
#: (PASP 110 863) from O5 V to K5 V and III against the colours of their types, which scatter 0.03 mag about it.
ZERO_POINT_MAG = 0.690
#: Error of the colour of a spectrum called flux-calibrated, mag: slit losses and the sensitivity curve (common
#: practice).
CALIBRATION_ERROR_MAG = 0.06
#: At least this share of a passband's light must fall on valid pixels.
_LEAST_COVERED = 0.97


def synthetic_b_v(wave_angstrom: FloatArray, flux: FloatArray, valid: NDArray[np.bool_] | None = None) -> float:
    """Johnson B-V in mag of a spectrum (flux per unit wavelength, any scale); NaN where B or V is not covered.

    ``wave_angstrom`` ascending, ``flux`` and ``valid`` (True where a pixel may be used) of the same shape (n,).
    """
    wave, light = np.asarray(wave_angstrom, float), np.asarray(flux, float)
    good = np.isfinite(light) if valid is None else np.asarray(valid, bool) & np.isfinite(light)
    table = read_table("passbands")
    total = []
    width = np.gradient(wave)
    for band in ("B", "V"):
        mine = table["band"] == band
        curve_wave, curve = table["wavelength_angstrom"][mine], table["response"][mine]
        response = np.interp(wave, curve_wave, curve, left=0, right=0) * width
        whole = float(np.trapezoid(curve, curve_wave))
        if response[good].sum() < _LEAST_COVERED * whole:
            return float("nan")
        filled = np.interp(wave, wave[good], light[good])
        total.append(float((filled * response).sum()))
    if min(total) <= 0:
        return float("nan")
    return float(-2.5 * np.log10(total[0] / total[1]) + ZERO_POINT_MAG)


def slope_excess(
    wave_angstrom: FloatArray,
    flux: FloatArray,
    valid: NDArray[np.bool_] | None,
    t_code: float,
    lum_code: float,
    error_mag: float = CALIBRATION_ERROR_MAG,
) -> tuple[float, float] | None:
    """E(B-V) and its error from a flux-calibrated spectrum of a known type, for ``fathom(ebv_slope=...)``.

    The error holds that of the calibration and the scatter of the intrinsic colour. None where B or V is not covered.
    """
    b_v = synthetic_b_v(wave_angstrom, flux, valid)
    if not np.isfinite(b_v):
        return None
    cell = int(cell_of(t_code, lum_code))
    look = intrinsic()
    return b_v - float(look.offset["B"][cell]), float(np.hypot(error_mag, look.bv_scatter[cell]))
