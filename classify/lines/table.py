"""The line table of one spectrum: every feature with its numbers, errors and flags, as a person would quote them."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass, field, replace
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from starfathom.classify.errors import RequestError, SpectrumError
from starfathom.classify.lines.direct import LIGHT_KMS, BulkLines, measure_many
from starfathom.classify.lines.features import FEATURES, FeatureTable
from starfathom.classify.lines.flags import flags_of
from starfathom.classify.lines.profile_fits import DETECTION_SIGMA, BulkFits, fit_many, prefer_fit
from starfathom.classify.prepared import Prepared
from starfathom.classify.spectrum import PlainSpectrum

if TYPE_CHECKING:
    from astropy.table import QTable
    from specutils import Spectrum

FloatArray = NDArray[np.float64]
NAN = float("nan")

#: Columns in order: (name, unit or "", decimals or None for text and flags, what it means).
COLUMNS: tuple[tuple[str, str, int | None, str], ...] = (
    ("feature", "", None, "feature or component, as people call it"),
    ("name", "", None, "name of the feature in code and criteria; empty for a component"),
    ("wavelength_angstrom", "Angstrom", 3, "rest wavelength in air"),
    ("kind", "", None, "line, blend, component (of the blend named in blend) or band"),
    ("blend", "", None, "blend a component belongs to"),
    ("ew_angstrom", "Angstrom", 4, "preferred equivalent width, positive in absorption"),
    ("ew_err_angstrom", "Angstrom", 4, "one standard deviation of ew_angstrom"),
    ("ew_from", "", None, "fit or direct: which one ew_angstrom is"),
    ("ew_direct_angstrom", "Angstrom", 4, "equivalent width summed over the window"),
    ("ew_direct_err_angstrom", "Angstrom", 4, "one standard deviation"),
    ("ew_fit_angstrom", "Angstrom", 4, "area of the fitted profile, wings included"),
    ("ew_fit_err_angstrom", "Angstrom", 4, "one standard deviation"),
    ("limit_angstrom", "Angstrom", 4, "3 sigma detection limit of the equivalent width"),
    ("detected_ok", "", None, "true where the feature is there at 3 sigma"),
    ("fwhm_angstrom", "Angstrom", 3, "full width at half depth of the fitted profile"),
    ("fwhm_err_angstrom", "Angstrom", 3, "one standard deviation"),
    ("intrinsic_fwhm_angstrom", "Angstrom", 3, "the same with the line spread taken out; upper limit if unresolved"),
    ("intrinsic_fwhm_err_angstrom", "Angstrom", 3, "one standard deviation; empty for an upper limit"),
    ("intrinsic_ok", "", None, "true where intrinsic_fwhm_angstrom is a width, false where it is a limit"),
    ("depth", "", 4, "central depth of the profile (mean depth over the window for a band)"),
    ("depth_err", "", 4, "one standard deviation"),
    ("center_angstrom", "Angstrom", 3, "centre of the profile, rest frame, air"),
    ("center_err_angstrom", "Angstrom", 3, "one standard deviation"),
    ("velocity_kms", "km / s", 1, "velocity of the centre as observed, positive receding"),
    ("velocity_err_kms", "km / s", 1, "one standard deviation"),
    ("width_10_angstrom", "Angstrom", 3, "full width where the line is 10 % below the continuum; 0 if not that deep"),
    ("width_10_err_angstrom", "Angstrom", 3, "one standard deviation"),
    ("width_20_angstrom", "Angstrom", 3, "full width where the line is 20 % below the continuum; 0 if not that deep"),
    ("width_20_err_angstrom", "Angstrom", 3, "one standard deviation"),
    ("width_30_angstrom", "Angstrom", 3, "full width where the line is 30 % below the continuum; 0 if not that deep"),
    ("width_30_err_angstrom", "Angstrom", 3, "one standard deviation"),
    ("flux_ratio", "", 4, "bands: mean flux in the window over the pseudo-continuum (TiO5, CaH2 ...)"),
    ("flux_ratio_err", "", 4, "one standard deviation"),
    ("profile", "", None, "gaussian or voigt, whichever the evidence favours"),
    ("chi2", "", 2, "chi-squared of the fit over the window"),
    ("dof", "", 0, "its degrees of freedom"),
    ("continuum", "", 6, "pseudo-continuum at the feature, unit of the flux"),
    ("continuum_err", "", 6, "one standard deviation"),
    ("window_lo_angstrom", "Angstrom", 2, "window the direct sum runs over"),
    ("window_hi_angstrom", "Angstrom", 2, "window the direct sum runs over"),
    ("flags", "", None, "comma-separated"),
    ("tells", "", None, "what it tells"),
    ("types", "", None, "for which types"),
    ("citation", "", None, "source of wavelength and definition"),
)


@dataclass(frozen=True)
class LineTable:
    """All features of one spectrum.

    Attributes
    ----------
    rows : one dict a feature or component, keys of :data:`COLUMNS`, numbers unrounded, NaN where not measured
    wave_angstrom : (m,) rest wavelengths in air on which it was measured
    lines, fits : the arrays behind the rows (one spectrum)
    velocity_kms, fwhm_angstrom : what was taken out, and the line spread, with where they came from
    notes : what was assumed
    """

    rows: tuple[dict[str, Any], ...]
    wave_angstrom: FloatArray = field(repr=False)
    lines: BulkLines = field(repr=False)
    fits: BulkFits = field(repr=False)
    velocity_kms: float
    fwhm_angstrom: float
    sigma_estimated: bool
    path: str = ""
    notes: tuple[str, ...] = ()

    def __len__(self) -> int:
        return len(self.rows)

    def __iter__(self) -> Iterator[dict[str, Any]]:
        return iter(self.rows)

    def __getitem__(self, feature: str) -> dict[str, Any]:
        """The row of one feature or component by name; raises RequestError when there is none."""
        for row in self.rows:
            if feature in (row["feature"], row["name"]) and feature:
                return row
        raise RequestError(f"the line table has no row called {feature!r}")

    @property
    def meta(self) -> dict[str, Any]:
        """What a table header should say."""
        return {"file": self.path, "velocity_kms": round(self.velocity_kms, 2),
                "line_spread_fwhm_angstrom": round(self.fwhm_angstrom, 3),
                "errors": "estimated from the spectrum" if self.sigma_estimated else "from the file",
                "notes": list(self.notes)}

    def to_table(self) -> QTable:
        """An astropy QTable with units, descriptions and the meta data; columns of :data:`COLUMNS`."""
        import astropy.units as u
        from astropy.table import Column, QTable

        table = QTable(meta=self.meta)
        for name, unit, decimals, description in COLUMNS:
            values = [row[name] for row in self.rows]
            if decimals is not None:
                numbers = np.round(np.array(values, float), decimals + 2)
                table[name] = numbers * u.Unit(unit) if unit else numbers
                table[name].info.description = description
            else:
                table[name] = Column(values, description=description)
        return table

    def __str__(self) -> str:
        there = [r for r in self.rows if r["detected_ok"]]
        head = f"{self.path or 'spectrum'}: {len(there)} of {len(self.rows)} features there"
        body = [f"{r['feature']:24s} {r['ew_angstrom']:8.3f} +- {r['ew_err_angstrom']:.3f} A  {r['flags']}"
                for r in there]
        return "\n".join([head, *body])


def measure_lines(
    spectrum: PlainSpectrum | Prepared | Spectrum,
    *,
    fwhm_angstrom: float | None = None,
    velocity_kms: float | None = None,
    features: FeatureTable = FEATURES,
    correlation: FloatArray | None = None,
    fwhm_err_angstrom: float = 0.0,
    profiles: tuple[str, ...] = ("gaussian", "voigt"),
    reference: bool = False,
    notes: tuple[str, ...] = (),
) -> LineTable:
    """Measure every feature of one spectrum on its own pixels (nothing is resampled).

    Parameters
    ----------
    spectrum : as read (``PlainSpectrum`` or ``specutils.Spectrum``), or ``Prepared``, whose velocity, medium and
        line spread are then used
    fwhm_angstrom : line-spread FWHM; default: of the preparation, of the header, else 2.5 pixels, said so in a note
    velocity_kms : velocity to take out; default: of the preparation, of the header, else 0
    features : what to measure
    correlation : noise correlation between pixels 1, 2, ... apart when the file's pixels were resampled
        (:func:`starfathom.classify.lines.noise.resampling_correlation`)
    fwhm_err_angstrom : error of the line spread, carried into intrinsic widths
    profiles : which profiles compete
    reference : take equivalent widths, widths and centres from specutils, call by call (slow); errors stay ours
    notes : sentences to carry along

    Raises
    ------
    SpectrumError : too few pixels, or a line spread that is not positive
    """
    said = list(notes)
    vacuum: bool | None = None
    if isinstance(spectrum, Prepared):
        plain = spectrum.spectrum
        velocity_kms = spectrum.velocity_kms if velocity_kms is None else velocity_kms
        fwhm_angstrom = spectrum.fwhm_angstrom if fwhm_angstrom is None else fwhm_angstrom
        vacuum = spectrum.wave_medium.startswith("vacuum")
    elif isinstance(spectrum, PlainSpectrum):
        plain = spectrum
    else:
        from starfathom.classify.reading import plain_from_specutils

        plain = plain_from_specutils(spectrum)
    if vacuum is None:
        vacuum = plain.medium == "vacuum"
        if plain.medium == "unknown":
            said.append("wavelengths taken to be in air: the file does not say")
    wave = np.asarray(plain.wave_angstrom, float)
    if wave.size < 12:
        raise SpectrumError(f"{plain.path or 'the spectrum'} has {wave.size} pixels: too few to measure a line; "
                            "give a longer spectrum")
    if vacuum:
        from starfathom.classify.resample import air_from_vacuum

        wave = air_from_vacuum(wave)
    if velocity_kms is None:
        velocity_kms = float(plain.meta.get("velocity_kms", 0.0))
        if "velocity_kms" not in plain.meta:
            said.append("velocity taken as zero: none given")
    if fwhm_angstrom is None:
        if "fwhm_angstrom" in plain.meta:
            fwhm_angstrom = float(plain.meta["fwhm_angstrom"])
        else:
            fwhm_angstrom = 2.5 * float(np.median(np.diff(wave)))
            said.append(f"line spread taken as 2.5 pixels ({fwhm_angstrom:.2f} A): none given")
    rest = wave / (1.0 + velocity_kms / LIGHT_KMS)
    flux, valid = plain.flux[None, :], plain.valid[None, :]
    sigma = None if plain.sigma is None else plain.sigma[None, :]
    if sigma is None:
        said.append("the file gives no errors: noise estimated from the spectrum itself")
    lines = measure_many(rest, flux, sigma, valid, fwhm_angstrom, velocity_kms=velocity_kms, features=features,
                         correlation=correlation)
    fits = fit_many(rest, lines, profiles=profiles, correlation=correlation, fwhm_err_angstrom=fwhm_err_angstrom)
    if reference:
        lines, fits = _by_reference(rest, lines, fits)
        said.append("values by specutils, errors by ours")
    return LineTable(rows=tuple(_rows(rest, lines, fits, velocity_kms)), wave_angstrom=rest, lines=lines, fits=fits,
                     velocity_kms=float(velocity_kms), fwhm_angstrom=float(fwhm_angstrom),
                     sigma_estimated=sigma is None, path=plain.path, notes=tuple(said))


def _by_reference(wave: FloatArray, lines: BulkLines, fits: BulkFits) -> tuple[BulkLines, BulkFits]:
    """The same measurements with the values specutils finds put in their place."""
    from starfathom.classify.lines.reference import reference_lines

    found = reference_lines(wave, lines, fits)

    def put(ours: FloatArray, theirs: FloatArray) -> FloatArray:
        return np.where(np.isfinite(theirs), theirs, ours)

    return (replace(lines, ew=put(lines.ew, found.ew_direct[None])),
            replace(fits, ew=put(fits.ew, found.ew_fit[None]), fwhm=put(fits.fwhm, found.fwhm_fit[None]),
                    center=np.where(np.isnan(fits.center), np.nan, put(fits.center, found.center_fit[None]))))


def _rows(wave: FloatArray, lines: BulkLines, fits: BulkFits, velocity_kms: float) -> Iterator[dict[str, Any]]:
    fit_is_better = prefer_fit(lines, fits)
    for k, feature in enumerate(lines.features):
        columns = [int(c) for c in np.flatnonzero(fits.feature == k)]
        common = {"tells": feature.tells, "types": feature.types, "citation": feature.citation,
                  "window_lo_angstrom": feature.window[0], "window_hi_angstrom": feature.window[1],
                  "continuum": lines.continuum[0, k], "continuum_err": lines.continuum_err[0, k]}
        ew, err = float(lines.ew[0, k]), float(lines.ew_err[0, k])
        seen = bool(np.isfinite(ew) and ew >= DETECTION_SIGMA * err)
        top = _blank() | common | {
            "feature": feature.label, "name": feature.name, "kind": feature.kind,
            "wavelength_angstrom": feature.wavelength, "ew_angstrom": ew, "ew_err_angstrom": err, "ew_from": "direct",
            "ew_direct_angstrom": ew, "ew_direct_err_angstrom": err, "limit_angstrom": DETECTION_SIGMA * err,
            "detected_ok": seen, "depth": float(lines.depth[0, k]), "depth_err": float(lines.depth_err[0, k])}
        if feature.kind == "band" and np.isfinite(ew):
            width = lines.width[0, k]
            top |= {"flux_ratio": 1.0 - ew / width, "flux_ratio_err": err / width}
        if not np.isfinite(ew):
            top["ew_from"] = ""
        if feature.kind == "line":
            top |= _fitted(fits, columns[0], feature.wavelength, velocity_kms)
            top["detected_ok"] = seen or bool(fits.detected[0, columns[0]] and fits.ew[0, columns[0]] > 0)
            if fit_is_better[0, columns[0]]:
                top |= {"ew_angstrom": top["ew_fit_angstrom"], "ew_err_angstrom": top["ew_fit_err_angstrom"],
                        "ew_from": "fit"}
            if not top["detected_ok"]:
                top["depth"], top["depth_err"] = float(lines.depth[0, k]), float(lines.depth_err[0, k])
        if feature.wings:
            for d, percent in enumerate((10, 20, 30)):
                top[f"width_{percent}_angstrom"] = float(lines.width_at[0, k, d])
                top[f"width_{percent}_err_angstrom"] = float(lines.width_at_err[0, k, d])
        flags = flags_of(wave, lines, fits, 0, k, columns)
        top["flags"] = ",".join(flags)
        top["detected_ok"] |= "emission" in flags
        yield top
        if feature.kind == "blend":
            for c in columns:
                row = _blank() | common | {
                    "feature": fits.labels[c], "kind": "component", "blend": feature.label,
                    "wavelength_angstrom": float(fits.wavelength[c]), "detected_ok": bool(fits.detected[0, c])}
                row |= _fitted(fits, c, float(fits.wavelength[c]), velocity_kms)
                if np.isfinite(row["ew_fit_angstrom"]):
                    row |= {"ew_angstrom": row["ew_fit_angstrom"], "ew_err_angstrom": row["ew_fit_err_angstrom"],
                            "ew_from": "fit", "limit_angstrom": DETECTION_SIGMA * row["ew_fit_err_angstrom"]}
                row["flags"] = ",".join(flags_of(wave, lines, fits, 0, k, [c], component=True))
                yield row


def _blank() -> dict[str, Any]:
    row: dict[str, Any] = {name: ("" if decimals is None else NAN) for name, _, decimals, _ in COLUMNS}
    row["detected_ok"] = False
    row["intrinsic_ok"] = False
    return row


def _fitted(fits: BulkFits, c: int, rest_angstrom: float, velocity_kms: float) -> dict[str, Any]:
    """What the fit says of component ``c``."""
    found = bool(fits.detected[0, c])
    out: dict[str, Any] = {
        "ew_fit_angstrom": float(fits.ew[0, c]), "ew_fit_err_angstrom": float(fits.ew_err[0, c]),
        "fwhm_angstrom": float(fits.fwhm[0, c]), "fwhm_err_angstrom": float(fits.fwhm_err[0, c]),
        "intrinsic_fwhm_angstrom": float(fits.intrinsic[0, c]),
        "intrinsic_fwhm_err_angstrom": float(fits.intrinsic_err[0, c]),
        "intrinsic_ok": bool(np.isfinite(fits.intrinsic[0, c]) and not fits.unresolved[0, c]),
        "center_angstrom": float(fits.center[0, c]), "center_err_angstrom": float(fits.center_err[0, c]),
        "profile": ("voigt" if fits.voigt[0, c] else "gaussian") if found else "",
        "chi2": float(fits.chi2[0, c]), "dof": float(fits.dof[0, c])}
    if found and np.isfinite(out["center_angstrom"]):
        shift = out["center_angstrom"] / rest_angstrom
        out["velocity_kms"] = (shift * (1.0 + velocity_kms / LIGHT_KMS) - 1.0) * LIGHT_KMS
        out["velocity_err_kms"] = out["center_err_angstrom"] / rest_angstrom * LIGHT_KMS
    if found:
        out |= {"depth": float(fits.depth[0, c]), "depth_err": float(fits.depth_err[0, c])}
    for d, percent in enumerate((10, 20, 30)):
        out[f"width_{percent}_angstrom"] = float(fits.width_at[0, c, d])
        out[f"width_{percent}_err_angstrom"] = float(fits.width_at_err[0, c, d])
    return out
