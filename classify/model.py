"""A trained classifier of one rung of the resolution ladder, as plain arrays that an npz file holds."""

from __future__ import annotations

from dataclasses import dataclass, fields
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from starfathom.classify.criteria import CriterionScales
from starfathom.classify.gaussian_process import Regressor
from starfathom.classify.surface import Surface

FloatArray = NDArray[np.float64]

#: The resolution ladder: a star is blurred up to the next rung and matched with templates of that width.
RUNGS: tuple[float, ...] = (3.2, 4.6, 6.5, 9.0, 12.5, 17.0)


_SEVERAL = ("abs_mag", "log_g", "step")


@dataclass(frozen=True)
class Loci:
    """Where each type stands in what the regressors say of it (cross-validated), each (n_subtypes, 8)."""

    abs_mag: FloatArray
    abs_mag_sd: FloatArray
    log_g: FloatArray
    log_g_sd: FloatArray
    step_sd: FloatArray          # (n_subtypes,) scatter of the regressed subtype


@dataclass(frozen=True)
class Blend:
    """How the pieces of evidence are weighed; fitted by cross-validated log loss on perturbed spectra."""

    temper: float                # power of the surface likelihood
    abs_mag_weight: float
    log_g_weight: float
    step_weight: float
    criteria_weight: float
    log_prior_class: FloatArray  # (8,)
    step_sd_floor: float         # added in quadrature to the posterior's own spread of the subtype


@dataclass(frozen=True)
class Model:
    """Everything one rung needs."""

    fwhm_angstrom: float
    surface: Surface
    abs_mag: tuple[Regressor, ...]
    log_g: tuple[Regressor, ...]
    step: tuple[Regressor, ...]
    fe_h: Regressor
    criteria: CriterionScales
    loci: Loci
    blend: Blend
    residuals: FloatArray        # (r, 3) step, predicted abs_mag, squared residual less the parallax part
    conformal: FloatArray        # sorted set scores of the calibration spectra
    names: NDArray[Any]          # (n,) library stars with full coverage, typed
    labels: NDArray[Any]         # (n,) their catalogue types
    components: NDArray[np.float32]   # (n, k)

    def save(self, path: Path) -> None:
        """Write as npz, float32 where precision does not matter."""
        out: dict[str, Any] = {"fwhm_angstrom": np.array(self.fwhm_angstrom)}
        for f in fields(Surface):
            out[f"surface.{f.name}"] = getattr(self.surface, f.name).astype(np.float32)
        for name in _SEVERAL:
            for i, r in enumerate(getattr(self, name)):
                out |= r.arrays(f"{name}{i}")
        out |= self.fe_h.arrays("fe_h")
        out |= {k: v.astype(np.float32) if v.dtype == float else v for k, v in self.criteria.arrays().items()}
        for f in fields(Loci):
            out[f"loci.{f.name}"] = getattr(self.loci, f.name)
        for f in fields(Blend):
            out[f"blend.{f.name}"] = np.asarray(getattr(self.blend, f.name))
        for name in ("residuals", "conformal", "names", "labels", "components"):
            out[name] = getattr(self, name)
        np.savez_compressed(path, **out)

    @classmethod
    def load(cls, path: Path) -> Model:
        """Read what :meth:`save` wrote."""
        with np.load(path) as z:
            a = {k: z[k] for k in z.files}
        surface = Surface(**{f.name: a[f"surface.{f.name}"].astype(float) for f in fields(Surface)})
        several = {name: tuple(Regressor.from_arrays(a, f"{name}{i}") for i in range(9) if f"{name}{i}.alpha" in a)
                   for name in _SEVERAL}
        loci = Loci(**{f.name: a[f"loci.{f.name}"] for f in fields(Loci)})
        weights = {f.name: float(a[f"blend.{f.name}"]) for f in fields(Blend) if f.name != "log_prior_class"}
        blend = Blend(log_prior_class=a["blend.log_prior_class"], **weights)
        return cls(float(a["fwhm_angstrom"]), surface, several["abs_mag"], several["log_g"], several["step"],
                   Regressor.from_arrays(a, "fe_h"), CriterionScales.from_arrays(a), loci, blend, a["residuals"],
                   a["conformal"], a["names"], a["labels"], a["components"])
