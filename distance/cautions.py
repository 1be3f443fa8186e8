"""Sentences that keep a reader from being misled by a number."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import numpy as np

from starfathom.classify.assignment import Assignment
from starfathom.distance.parallax import meaning

if TYPE_CHECKING:
    from starfathom.distance.engine import Request
    from starfathom.distance.fathoming import Fathoming
    from starfathom.distance.sampler import Star
    from starfathom.distance.scale import Scale

#: Routes that disagree by more than this many sigma are reported.
ROUTES_LIMIT = 2.5
_FEW_PARALLAXES = 1.0


def _words(source: Any) -> tuple[str, ...]:
    """Flags or peculiarities as lower-case text."""
    if isinstance(source, Assignment):
        return tuple(f.lower() for f in source.flags)
    return tuple(str(p).lower() for p in getattr(source, "peculiarities", ()) or ())


def cautions(
    result: Fathoming, star: Star, request: Request, source: Any, scale: Scale, weight: float, law_mag: float
) -> tuple[str, ...]:
    """All cautions that apply to one star, most important first; each a sentence."""
    said = []
    if abs(result.routes_sigma) > ROUTES_LIMIT:
        brighter = "brighter" if result.routes_sigma < 0 else "fainter"
        said.append(
            f"The spectrum reads an absolute magnitude {brighter} than the class by "
            f"{abs(result.routes_sigma):.1f} sigma: "
            "the class may be wrong, or the star peculiar."
        )
    if np.isfinite(result.parallax_sigma):
        said.append(meaning(result.parallax_sigma, result.parallax_percent))
        if request.use_parallax and star.parallax is not None and star.parallax[0] <= 3 * star.parallax[1]:
            said.append("The parallax is less than three times its error, so it was compared but not combined.")
    colours = [b for b in result.bands if b in star.magnitudes]
    unused = [b for b in star.magnitudes if b not in result.bands]
    if unused:
        said.append(f"No published intrinsic colour of this type reaches {', '.join(unused)}; left out.")
    if len(colours) < 2 and star.ebv_prior is None and star.ebv_measured is None:
        said.append("There is no colour to measure dust with; the reddening is the prior's alone.")
    elif len(colours) == 2 and star.ebv_prior is None:
        said.append("One colour cannot tell dust from a star redder than its type; a band in the infrared would.")
    if scale.fitted and weight < _FEW_PARALLAXES:
        said.append("Few or no parallaxes hold the scale at this type; it rests on published scales there.")
    elif not scale.fitted and weight < 0.5:
        said.append(f"The scale {scale.name} has no entry for this type; another published scale fills in.")
    if result.interval("ebv")[0] > 0.25 and star.rv is None:
        said.append(
            f"The dust is thick here, and R_V alone may move V by {max(law_mag, 0.0):.2f} mag; unusual dust by more."
        )
    lum = _lum_code(source)
    if lum <= 2.0:
        said.append("Supergiants and bright giants of one class differ by a magnitude and more; many vary.")
    elif lum < 3.5 and _t_code(source) >= 60:
        said.append("Giants of type M vary in light and colour; magnitudes of one night may mislead.")
    words = " ".join(_words(source))
    if "composite" in words or "+" in words or bool(getattr(source, "composite", None)):
        said.append("The spectrum is composite; the scale is for single stars.")
    if "emission" in words or any(w in ("e", "(e)", "ne", "[e]") for w in _words(source)):
        said.append("Emission stars vary and redden themselves; the colour is not a safe measure of dust.")
    if "metal-weak" in words or "subdwarf" in words or lum > 5.4:
        said.append("The star is metal-weak, where dwarfs are fainter and giants bluer than the scale has them.")
    if any(w in ("p", "m", "var", "peculiar", "am", "ap") for w in _words(source)):
        said.append("The type is peculiar; colours and luminosity of normal stars serve only roughly.")
    if result.n_eff < 50:
        said.append(
            "Type, colours and dust agree badly, and few samples carry the answer; take the interval with care."
        )
    return tuple(s for s in said if s)


def _lum_code(source: Any) -> float:
    value = float(getattr(source, "lum_code", np.nan))
    return value if np.isfinite(value) else 4.0


def _t_code(source: Any) -> float:
    value = float(getattr(source, "t_code", np.nan))
    return value if np.isfinite(value) else 0.0
