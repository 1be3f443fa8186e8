"""One real star, end to end, against its parallax: ``python tests/accuracy/real_case.py [STAR ...] [--all]``.

The star's STELIB spectrum is typed by a classifier that has learned from no STELIB spectrum and from no spectrum of
that star, and its distance is taken from a scale fitted without the star. Magnitudes (V from Hp, B-V) and the parallax
are those of Hipparcos (van Leeuwen 2007, A&A 474, 653), the parallax used for nothing but the comparison.

The star of the README was chosen before any result was seen: a single dwarf not much unlike the Sun, not in MILES,
whole from 3900 to 6800 A, parallax better than 2 %. ``--all`` does every STELIB star of which the last three are true,
as a check that the one is no exception.
"""

from __future__ import annotations

import sys
from dataclasses import dataclass

import numpy as np

from starfathom.chain import RunSettings, fathom_targets
from starfathom.classify.assignment import Assignment
from starfathom.classify.engine import Classifier
from starfathom.classify.spectrum import PlainSpectrum
from starfathom.distance import Fathoming
from starfathom.targets import Target
from starfathom.templates.library import load_library

STAR = "HD041593"


@dataclass(frozen=True)
class Case:
    """What came out for one star, and what its parallax says."""

    star: str
    label: str
    hip: int
    assignment: Assignment
    fathoming: Fathoming
    parallax: tuple[float, float]

    @property
    def per_cent(self) -> float:
        """Distance found over distance by parallax, less one, in per cent."""
        return 100 * (self.fathoming.median("distance_pc") * self.parallax[0] / 1000 - 1)

    def line(self) -> str:
        """The comparison on one line."""
        f = self.fathoming
        low, high = f.interval("distance_pc")
        true = 1000 / self.parallax[0]
        return (
            f"{self.star} (HIP {self.hip}): literature {self.label}, found {self.assignment.mk_type}; "
            f"{f.median('distance_pc'):.1f} pc ({low:.1f} to {high:.1f}) against {true:.2f} pc by parallax: "
            f"{self.per_cent:+.1f} %, {f.parallax_sigma:+.2f} sigma"
        )


def stars_to_try() -> list[str]:
    """Every STELIB star not in MILES, normal, whole from 3900 to 6800 A, parallax better than 2 %."""
    library = load_library()
    c = library.catalogue
    elsewhere = set(c["hip"][c["library"] == "miles"].tolist())
    inside = (library.wave_angstrom > 3900) & (library.wave_angstrom < 6800)
    good = (c["library"] == "stelib") & (c["kind"] == "normal") & (library.valid[:, inside].mean(axis=1) > 0.98)
    good &= (c["parallax_mas"] > 50 * c["e_parallax_mas"]) & np.isfinite(c["lum_code"]) & np.isfinite(c["b_v"])
    return [str(s) for s, h, ok in zip(c["star"], c["hip"], good) if ok and int(h) not in elsewhere]


def work_out(star: str) -> Case:
    """Type and fathom one star of STELIB, left out of everything learned."""
    library = load_library()
    c = library.catalogue
    (row,) = np.flatnonzero((c["library"] == "stelib") & (c["star"] == star))
    hip = int(c["hip"][row])
    settings = RunSettings(without_libraries=("stelib",), without_stars=(hip,), details=True)
    # Same models for every star: none of these is in MILES, so leaving out STELIB leaves each of them out.
    classifier = Classifier.load(without_libraries=("stelib",))
    assert hip not in classifier.library.catalogue["hip"]
    spectrum = PlainSpectrum(
        library.wave_angstrom,
        library.flux[row].astype(float),
        None,
        library.valid[row],
        medium="air",
        medium_source="library",
        path=star,
    )
    assignment = classifier.classify_one(spectrum)
    if assignment.status != "typed":
        raise LookupError(f"{star} was not typed: {assignment.reason}")
    v, b_v = float(c["v_mag"][row]), float(c["b_v"][row])
    parallax = float(c["parallax_mas"][row]), float(c["e_parallax_mas"][row])
    error = float(np.nan_to_num(c["e_b_v"][row], nan=0.02))
    target = Target(0, star, magnitudes={"V": (v, 0.01), "B": (v + b_v, max(error, 0.005))}, parallax=parallax)
    (found,) = fathom_targets([target], [assignment], settings)
    if not isinstance(found, Fathoming):
        raise LookupError(f"{star} has no distance: {found}")
    return Case(star, str(c["label"][row]), hip, assignment, found, parallax)


def main(arguments: list[str]) -> None:
    """Print the comparison of the stars asked for."""
    if "--all" not in arguments:
        for star in arguments or [STAR]:
            case = work_out(star)
            print(case.line())
            for part in case.fathoming.budget:
                print(f"  {part.step:18s} {part.sigma_mag:5.2f} mag  {part.per_cent:5.1f} %")
        return
    cases = []
    for star in stars_to_try():
        try:
            cases.append(work_out(star))
            print(cases[-1].line(), flush=True)
        except LookupError as fault:
            print(fault)
    off = np.array([c.per_cent for c in cases])
    sigma = np.array([c.fathoming.parallax_sigma for c in cases])
    print(
        f"{len(cases)} stars: median {np.median(off):+.1f} %, 68 % within {np.percentile(np.abs(off), 68):.1f} %; "
        f"{np.mean(np.abs(sigma) < 1):.0%} within one sigma, {np.mean(np.abs(sigma) < 2):.0%} within two"
    )


if __name__ == "__main__":
    main(sys.argv[1:])
