"""A measured parallax held against the distance from type and brightness."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

import numpy as np

from starfathom.classify.errors import RequestError

#: Inputs of the Gaia DR3 zero point (Lindegren et al. 2021 A&A 649 A4), as the archive names them.
GAIA_INPUTS = ("phot_g_mean_mag", "nu_eff_used_in_astrometry", "pseudocolour", "ecl_lat", "astrometric_params_solved")

#: No star but the Sun has a larger one (Proxima: 768 mas).
MAX_PARALLAX_MAS = 1000.0


def gaia_zero_point_mas(inputs: Mapping[str, Any]) -> float:
    """Parallax zero point in mas (to be subtracted) of one Gaia DR3 star, by the public package gaiadr3-zeropoint.

    ``inputs`` holds :data:`GAIA_INPUTS`. Raises RequestError where one is missing, the package is not installed, or
    the star lies outside the range of the recipe (G 6 to 21).
    """
    missing = [name for name in GAIA_INPUTS if name not in inputs]
    if missing:
        raise RequestError(f"The Gaia zero point needs {', '.join(missing)} as well.")
    try:
        from zero_point import zpt
    except ImportError:
        raise RequestError(
            "The Gaia zero point needs the package gaiadr3-zeropoint; install starfathom with the extra [gaia]."
        ) from None
    try:
        g_mag = float(inputs["phot_g_mean_mag"])
    except (TypeError, ValueError):
        g_mag = float("nan")
    if not 6.0 <= g_mag <= 21.0:
        raise RequestError("The Gaia zero point is defined for G from 6 to 21 only.")
    zpt.load_tables()
    try:
        # arrays of one: the package fails on plain numbers
        arrays = [np.atleast_1d(np.asarray(inputs[name], float)) for name in GAIA_INPUTS[:-1]]
        solved = np.atleast_1d(np.asarray(inputs[GAIA_INPUTS[-1]], int))
        value = float(zpt.get_zpt(*arrays, solved)[0])
    except (ValueError, TypeError) as error:
        raise RequestError(f"The Gaia zero point could not be worked out: {str(error).splitlines()[0]}") from None
    if not np.isfinite(value):
        raise RequestError("The Gaia zero point is not defined for this star; its colour may be out of range.")
    return value


def check_parallax(parallax: Any) -> tuple[float, float]:
    """``(value, error)`` in mas as floats; raises RequestError for no numbers or an error not positive."""
    try:
        value, error = (float(v) for v in parallax)
    except (TypeError, ValueError):
        raise RequestError(f"The parallax is {parallax!r}; give value and error in mas, such as (5.9, 0.3).") from None
    if not (np.isfinite(value) and np.isfinite(error)):
        raise RequestError(f"The parallax is {parallax!r}; both value and error must be finite, in mas.")
    if abs(value) > MAX_PARALLAX_MAS:
        raise RequestError(f"The parallax is {value:g} mas, beyond that of the nearest star; give it in mas.")
    if error <= 0:
        raise RequestError(f"The parallax error is {error:g} mas; it must be greater than zero.")
    return value, error


def tension(distance_pc: np.ndarray, parallax: tuple[float, float]) -> tuple[float, float]:
    """How far a parallax (mas) lies from the samples of distance: (sigma, per cent of distance).

    Both are positive where the parallax puts the star farther than the type does. The sigma is the difference of the
    parallaxes over the errors of both, the error of the type's parallax being taken on the side facing the other; the
    per cent is NaN where the parallax is less than three times its error, and no distance can be had from it.
    """
    value, error = parallax
    low, middle, high = np.percentile(1000.0 / np.asarray(distance_pc), [16, 50, 84])
    own = high - middle if value > middle else middle - low
    sigma = (middle - value) / np.hypot(own, error)
    per_cent = 100.0 * (middle / value - 1.0) if value > 3 * error else float("nan")
    return float(sigma), float(per_cent)


def meaning(sigma: float, per_cent: float) -> str:
    """One sentence on what a tension beyond 2.5 sigma would mean; empty below that."""
    if abs(sigma) < 2.5:
        return ""
    far = sigma > 0
    size = f" ({abs(per_cent):.0f} % {'farther' if far else 'nearer'})" if np.isfinite(per_cent) else ""
    reasons = (
        "more luminous than its type says (a higher class, an unresolved companion) or less reddened"
        if far
        else "less luminous than its type says (a lower class, a subdwarf) or more reddened"
    )
    return (
        f"The parallax puts the star {'farther' if far else 'nearer'} by {abs(sigma):.1f} sigma{size}: "
        f"it is {reasons}, or the parallax is disturbed by an orbit."
    )
