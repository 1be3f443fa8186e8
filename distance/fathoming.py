"""The answer for one star: distance, dust, luminosity, temperature, radius, and where the uncertainty comes from."""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from starfathom.distance.budget import BudgetRow
from starfathom.distance.nominal import angular_diameter_mas, distance_pc, log_luminosity, radius_rsun

if TYPE_CHECKING:
    from astropy.units import Quantity

FloatArray = NDArray[np.float64]
NAN = float("nan")

#: Columns of a results table in order: (name, unit or "", decimals or None for text, what it means).
COLUMNS: tuple[tuple[str, str, int | None, str], ...] = (
    ("ebv", "mag", 3, "colour excess E(B-V) of the star, median"),
    ("ebv_err", "mag", 3, "half the 68 % interval of ebv"),
    ("a_v", "mag", 3, "extinction in V, median"),
    ("a_v_err", "mag", 3, "half the 68 % interval of a_v"),
    ("distance_pc", "pc", 2, "distance, median"),
    ("distance_lo_pc", "pc", 2, "16 % of the distance"),
    ("distance_hi_pc", "pc", 2, "84 % of the distance"),
    ("distance_lo95_pc", "pc", 2, "2.5 % of the distance"),
    ("distance_hi95_pc", "pc", 2, "97.5 % of the distance"),
    ("distance_class_pc", "pc", 2, "distance by the class route: type, scale"),
    ("distance_spec_pc", "pc", 2, "distance by the spectrum route: abs_mag_v"),
    ("routes_sigma", "", 2, "spectrum route less class route in absolute magnitude, over the error of the difference"),
    ("teff_k", "K", 0, "effective temperature, median"),
    ("teff_k_err", "K", 0, "half the 68 % interval of teff_k"),
    ("log_lum_lsun", "", 3, "log10 of the luminosity in nominal solar units, companion not included, median"),
    ("log_lum_lsun_err", "", 3, "half the 68 % interval of log_lum_lsun"),
    ("radius_rsun", "solRad", 3, "radius in nominal solar radii, median"),
    ("radius_rsun_err", "solRad", 3, "half the 68 % interval of radius_rsun"),
    ("angular_diameter_mas", "mas", 4, "angular diameter, median"),
    ("angular_diameter_mas_err", "mas", 4, "half the 68 % interval of angular_diameter_mas"),
    ("parallax_sigma", "", 2, "tension with the given parallax, positive where the parallax says farther"),
    ("parallax_percent", "", 1, "distance by the given parallax over distance by type, less one, in per cent"),
    ("group_distance_pc", "pc", 2, "common distance of the star's group"),
    ("group_distance_err_pc", "pc", 2, "one standard deviation of group_distance_pc"),
    ("group_ebv", "mag", 3, "common E(B-V) of the star's group"),
    ("group_outlier", "", None, "true where the star stands apart from its group"),
    ("scale", "", None, "distance scale used"),
    ("prior", "", None, "prior used"),
    ("cautions", "", None, "what to keep in mind, sentences"),
)

#: Percentiles kept for every quantity.
PERCENTS = (2.5, 16.0, 50.0, 84.0, 97.5)
QUANTITIES = ("distance_pc", "ebv", "a_v", "abs_mag_v", "teff_k", "log_lum_lsun", "radius_rsun", "angular_diameter_mas")


def derived(modulus: FloatArray, m_v: FloatArray, bc_v: FloatArray, teff_k: FloatArray) -> dict[str, FloatArray]:
    """Distance (pc), log L, radius (solar) and angular diameter (mas) of samples of any one shape."""
    distance = distance_pc(modulus)
    log_lum = log_luminosity(m_v + bc_v)
    radius = radius_rsun(log_lum, teff_k)
    return {
        "distance_pc": distance,
        "log_lum_lsun": log_lum,
        "radius_rsun": radius,
        "angular_diameter_mas": angular_diameter_mas(radius, distance),
    }


@dataclass(frozen=True)
class Fathoming:
    """Posterior of one star, summarised.

    ``percentiles[name]`` holds the 2.5, 16, 50, 84 and 97.5 % points of each of ``QUANTITIES``, in the unit its name
    says. ``samples`` holds the samples themselves where they were kept. Intervals include the scatter of stars
    about the scale, companions, dust and errors of measurement; not a wrong type beyond the posterior given.
    """

    percentiles: dict[str, tuple[float, ...]]
    budget: tuple[BudgetRow, ...] = ()
    cautions: tuple[str, ...] = ()
    name: str = ""
    mk_type: str = ""
    scale: str = ""
    prior: str = ""
    group: str = ""
    group_distance_pc: float = NAN
    group_distance_err_pc: float = NAN
    group_ebv: float = NAN
    group_outlier: bool = False
    distance_class_pc: float = NAN
    distance_spec_pc: float = NAN
    routes_sigma: float = NAN
    parallax_sigma: float = NAN
    parallax_percent: float = NAN
    bands: tuple[str, ...] = ()
    n_eff: float = NAN
    samples: dict[str, FloatArray] = field(default_factory=dict, repr=False)

    def interval(self, quantity: str, per_cent: int = 68) -> tuple[float, float]:
        """Central interval of one of ``QUANTITIES``, 68 or 95 %; raises ValueError for another level or name."""
        if quantity not in self.percentiles or per_cent not in (68, 95):
            raise ValueError(f"intervals are kept at 68 and 95 % for {', '.join(self.percentiles)}")
        p = self.percentiles[quantity]
        return (p[1], p[3]) if per_cent == 68 else (p[0], p[4])

    def median(self, quantity: str) -> float:
        """Median of one of ``QUANTITIES``, in the unit its name says."""
        return self.percentiles[quantity][2]

    def error(self, quantity: str) -> float:
        """Half the 68 % interval of one of ``QUANTITIES``."""
        p = self.percentiles[quantity]
        return 0.5 * (p[3] - p[1])

    def _quantity(self, name: str, unit: str) -> Quantity:
        import astropy.units as u

        return self.median(name) * u.Unit(unit)

    @property
    def distance(self) -> Quantity:
        """Median distance."""
        return self._quantity("distance_pc", "pc")

    @property
    def ebv(self) -> Quantity:
        """Median colour excess of the star."""
        return self._quantity("ebv", "mag")

    @property
    def a_v(self) -> Quantity:
        """Median extinction in V."""
        return self._quantity("a_v", "mag")

    @property
    def abs_mag_v(self) -> Quantity:
        """Median absolute V magnitude of the star (without a companion)."""
        return self._quantity("abs_mag_v", "mag")

    @property
    def teff(self) -> Quantity:
        """Median effective temperature."""
        return self._quantity("teff_k", "K")

    @property
    def luminosity(self) -> Quantity:
        """Median luminosity, in nominal solar luminosities (3.828e26 W)."""
        import astropy.units as u

        from starfathom.distance.nominal import L_SUN_WATT

        return (10 ** self.median("log_lum_lsun") * L_SUN_WATT * u.W).to(u.L_sun)

    @property
    def radius(self) -> Quantity:
        """Median radius, in nominal solar radii (6.957e8 m)."""
        import astropy.units as u

        from starfathom.distance.nominal import R_SUN_METRE

        return (self.median("radius_rsun") * R_SUN_METRE * u.m).to(u.R_sun)

    @property
    def angular_diameter(self) -> Quantity:
        """Median angular diameter."""
        return self._quantity("angular_diameter_mas", "mas")

    def row(self) -> dict[str, Any]:
        """One row of a results table: the keys and order of :data:`COLUMNS`, numbers rounded for print."""
        d = self.percentiles["distance_pc"]
        special = {
            "distance_lo_pc": d[1], "distance_hi_pc": d[3], "distance_lo95_pc": d[0], "distance_hi95_pc": d[4],
            "cautions": " ".join(self.cautions),
        }  # fmt: skip
        out: dict[str, Any] = {}
        for name, _unit, decimals, _doc in COLUMNS:
            if name in special:
                value: Any = special[name]
            elif name in self.percentiles:
                value = self.median(name)
            elif name.endswith("_err"):
                value = self.error(name.removesuffix("_err"))
            else:
                value = getattr(self, name)
            out[name] = value if decimals is None else round(float(value), decimals)
        return out

    def __str__(self) -> str:
        lo, hi = self.interval("distance_pc")
        return (
            f"{self.name or self.mk_type}: {self.median('distance_pc'):.4g} pc ({lo:.4g} to {hi:.4g}), "
            f"E(B-V) {self.median('ebv'):.3f}, Teff {self.median('teff_k'):.0f} K, "
            f"log L {self.median('log_lum_lsun'):.2f}, R {self.median('radius_rsun'):.3g} Rsun"
        )
