"""What the classifier says of one spectrum: type, posterior, evidence."""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import Any

import numpy as np
from numpy.typing import NDArray

from starfathom.templates.subtypes import CLASSES, LUM_CODES, SUBTYPES, T_CODES

FloatArray = NDArray[np.float64]
NAN = float("nan")

#: Columns of a results table in order: (name, unit or "", decimals or None for text, what it means).
COLUMNS: tuple[tuple[str, str, int | None, str], ...] = (
    ("file", "", None, "path as given"),
    ("status", "", None, "typed, refused or failed"),
    ("object_kind", "", None, "star, white dwarf, carbon star, galaxy ..."),
    ("other_type", "", None, "type outside the MK system, such as DA"),
    ("reason", "", None, "why refused or failed, one sentence"),
    ("mk_type", "", None, "MK type"),
    ("t_code", "", 2, "temperature subtype in tenths, O0 = 0, M0 = 60"),
    ("t_code_err", "", 2, "one standard deviation of t_code"),
    ("lum_code", "", 2, "luminosity class, 0 = Ia0, 1 = Ia, 1.3 = Iab, 1.6 = Ib, 2 = II ... 5 = V"),
    ("lum_code_err", "", 2, "one standard deviation of lum_code"),
    *((f"p_{c}", "", 4, f"probability of class {c}") for c in CLASSES),
    ("type_set_90", "", None, "members of the 90 % set"),
    ("abs_mag_v", "mag", 2, "absolute V magnitude read from the spectrum"),
    ("abs_mag_v_err", "mag", 2, "one standard deviation of abs_mag_v"),
    ("abs_mag_v_ok", "", None, "true where the training parallaxes constrain it"),
    ("log_g", "", 2, "log10 surface gravity (cgs) read from the spectrum"),
    ("log_g_err", "", 2, "one standard deviation of log_g"),
    ("velocity_kms", "km / s", 1, "as observed, positive receding"),
    ("velocity_err_kms", "km / s", 1, "one standard deviation of velocity_kms"),
    ("snr", "", 1, "signal to noise per angstrom"),
    ("snr_window", "", None, "where snr was taken, angstrom"),
    ("fwhm_angstrom", "Angstrom", 2, "full width at half maximum of the line spread"),
    ("wave_medium", "", None, "air or vacuum, and where that came from"),
    ("nearest", "", None, "the three nearest templates"),
    ("flags", "", None, "comma-separated"),
    ("remark", "", None, "the remark column, in words"),
    ("notes", "", None, "what was assumed in reading and preparing"),
)


@dataclass(frozen=True)
class Criterion:
    """One piece of evidence.

    ``t_code``/``lum_code`` (and errors) say what the criterion points to on its own, NaN where it says nothing.
    ``weight`` is the share of the say it has in the final posterior, 0 to 1.
    """

    name: str
    value: float
    error: float
    points_to: str
    weight: float = 0.0
    t_code: float = NAN
    t_code_err: float = NAN
    lum_code: float = NAN
    lum_code_err: float = NAN
    features: tuple[str, ...] = ()
    source: str = ""


@dataclass(frozen=True)
class Assignment:
    """The classifier's answer for one spectrum.

    ``posterior`` has shape (n_subtypes, 8): probability over ``SUBTYPES`` x ``CLASSES``, summing to 1 when typed.
    ``abs_mag_v_err`` is one standard deviation in mag. See :data:`COLUMNS` for the meaning of the other fields.
    """

    file: str = ""
    status: str = "failed"
    object_kind: str = "unknown"
    other_type: str = ""
    reason: str = ""
    mk_type: str = ""
    t_code: float = NAN
    t_code_err: float = NAN
    lum_code: float = NAN
    lum_code_err: float = NAN
    posterior: FloatArray | None = None
    type_set_90: tuple[str, ...] = ()
    abs_mag_v: float = NAN
    abs_mag_v_err: float = NAN
    abs_mag_v_ok: bool = False
    log_g: float = NAN
    log_g_err: float = NAN
    velocity_kms: float = NAN
    velocity_err_kms: float = NAN
    snr: float = NAN
    snr_window: str = ""
    fwhm_angstrom: float = NAN
    wave_medium: str = ""
    nearest: tuple[str, ...] = ()
    flags: tuple[str, ...] = ()
    remark: str = ""
    notes: tuple[str, ...] = ()
    evidence: tuple[Criterion, ...] = ()
    meta: dict[str, Any] = field(default_factory=dict)

    @property
    def class_probabilities(self) -> dict[str, float]:
        """Probability of each luminosity class; all zero when the spectrum was not typed."""
        p = np.zeros(len(CLASSES)) if self.posterior is None else self.posterior.sum(axis=0)
        return dict(zip(CLASSES, p.tolist()))

    @property
    def subtype_probabilities(self) -> dict[str, float]:
        """Probability of each temperature subtype; all zero when the spectrum was not typed."""
        p = np.zeros(len(SUBTYPES)) if self.posterior is None else self.posterior.sum(axis=1)
        return dict(zip(SUBTYPES, p.tolist()))

    def sample(self, n: int, rng: np.random.Generator) -> tuple[FloatArray, FloatArray]:
        """Draw ``n`` types from the posterior: (t_code, lum_code), each of shape (n,)."""
        if self.posterior is None:
            raise ValueError("this spectrum was not typed, so there is nothing to sample")
        cells = rng.choice(self.posterior.size, size=n, p=self.posterior.ravel() / self.posterior.sum())
        i, j = np.unravel_index(cells, self.posterior.shape)
        return T_CODES[i], np.asarray(LUM_CODES)[j]

    def row(self) -> dict[str, Any]:
        """The answer as one row of a results table, keys and order of :data:`COLUMNS`, numbers rounded for print."""
        p = self.class_probabilities
        out: dict[str, Any] = {}
        for name, _unit, decimals, _doc in COLUMNS:
            if name.startswith("p_"):
                value: Any = p[name[2:]]
            else:
                value = getattr(self, name)
            if isinstance(value, tuple):
                value = ("; " if name == "notes" else ",").join(value)
            if decimals is not None:
                value = round(float(value), decimals)
            out[name] = value
        return out

    def __str__(self) -> str:
        if self.status != "typed":
            return f"{self.file}: {self.status} ({self.object_kind}): {self.reason}"
        return f"{self.file}: {self.mk_type} (t_code {self.t_code:.1f} +- {self.t_code_err:.1f})"
