"""The spectrum as plain arrays: what the readers make and what every later step works on."""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import TYPE_CHECKING, Any, Literal

import numpy as np
from numpy.typing import NDArray

if TYPE_CHECKING:
    from specutils import Spectrum

FloatArray = NDArray[np.float64]
BoolArray = NDArray[np.bool_]
Medium = Literal["air", "vacuum", "unknown"]


@dataclass(frozen=True)
class PlainSpectrum:
    """One 1-D spectrum, wavelengths ascending in angstrom, flux per unit wavelength up to a constant.

    Attributes
    ----------
    wave_angstrom : (n,) float array, strictly ascending, in the medium that ``medium`` names
    flux : (n,) float array, proportional to f_lambda (converted from f_nu, magnitudes ... by the reader);
        finite everywhere (invalid pixels hold 0)
    sigma : (n,) float array of one standard deviation in the unit of ``flux``, or None when the file gives none
    valid : (n,) bool array, True where the pixel may be used
    medium : "air", "vacuum" or "unknown" (then air is assumed downstream and said so)
    medium_source : where that came from, such as "header CTYPE1 = AWAV", "asked for", "not stated"
    path : the file as given, or ""
    notes : what the reader assumed, one sentence each
    meta : anything else worth keeping (``object``, ``exptime_s``, ``ra_deg``, ``dec_deg``, ``flux_calibrated``,
        ``fwhm_angstrom``, ``velocity_kms`` when the header gives them); never used to type the star
    """

    wave_angstrom: FloatArray
    flux: FloatArray
    sigma: FloatArray | None
    valid: BoolArray
    medium: Medium = "unknown"
    medium_source: str = "not stated"
    path: str = ""
    notes: tuple[str, ...] = ()
    meta: dict[str, Any] = field(default_factory=dict)

    def to_specutils(self) -> Spectrum:
        """The same spectrum as a ``specutils.Spectrum`` (flux dimensionless, wavelengths in angstrom)."""
        import astropy.units as u
        from astropy.nddata import StdDevUncertainty
        from specutils import Spectrum

        sigma = None if self.sigma is None else StdDevUncertainty(self.sigma)
        return Spectrum(
            flux=self.flux * u.dimensionless_unscaled,
            spectral_axis=self.wave_angstrom * u.AA,
            uncertainty=sigma,
            mask=~self.valid,
            meta={"plain": {k: self.meta[k] for k in ("object",) if k in self.meta}, "medium": self.medium,
                  "medium_source": self.medium_source, "path": self.path, "notes": self.notes},
        )
