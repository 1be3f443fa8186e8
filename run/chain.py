"""The whole chain for one batch of targets: read, classify, fathom; rows, budget and details come back.

This is the unit of work that a run hands to its worker processes or to a cluster. What is in a batch follows from the
target list alone and every star has its own seed, so a batch gives the same result wherever and whenever it is done.
"""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace
from typing import TYPE_CHECKING, Any

import numpy as np

from starfathom.advice import Advice, Known, advise, lines, range_of, summary
from starfathom.classify.errors import RequestError, SpectrumError, StarfathomError
from starfathom.record import BatchResult
from starfathom.targets import Target

if TYPE_CHECKING:
    from starfathom.classify.assignment import Assignment
    from starfathom.classify.mktype import MKType
    from starfathom.classify.spectrum import PlainSpectrum
    from starfathom.distance import Fathoming
    from starfathom.tables import Column

#: Columns of the error budget on disk.
BUDGET_COLUMNS: tuple[Column, ...] = (
    ("name", "", None, "star"),
    ("step", "", None, "what contributed"),
    ("sigma_mag", "mag", 4, "its share of the error of the distance modulus, one standard deviation"),
    ("per_cent", "", 2, "the same as per cent of the distance"),
    ("share", "", 4, "part of the variance of the total"),
)

#: Last column of the results.
ADVICE_COLUMN: Column = ("advice", "", None, "what would settle more, the best of what was weighed")

#: Flags of a star whose type the target list, or a person at the desk, gave.
TYPE_GIVEN = "type-given"
BY_HAND = "typed-by-hand"


@dataclass(frozen=True)
class RunSettings:
    """What a run is asked to do, besides its targets. Small and plain: it travels to the workers.

    ``medium`` is "air", "vacuum" or None (from the files). ``scale``, ``prior`` and ``rv`` go to the distance step,
    None for its defaults.
    """

    seed: int = 0
    scale: str | None = None
    prior: str | None = None
    rv: float | None = None
    without_libraries: tuple[str, ...] = ()
    without_stars: tuple[int, ...] = ()
    medium: str | None = None
    n_samples: int = 2000
    details: bool = True
    advice: bool = True


def result_columns() -> tuple[Column, ...]:
    """Columns of a run's results: the name, the assignment's, then the distance's."""
    from starfathom.classify.assignment import COLUMNS as ASSIGNED
    from starfathom.distance import COLUMNS as FATHOMED

    first: tuple[Column, ...] = (("name", "", None, "star, as the target list calls it"), *ASSIGNED)
    taken = {c[0] for c in first}
    return (*first, *(c for c in FATHOMED if c[0] not in taken), ADVICE_COLUMN)


def given_type(text: str) -> Assignment:
    """An assignment that only repeats a type from the target list (a range spreads evenly over its subtypes).

    Raises
    ------
    RequestError
        when ``text`` is no MK notation.
    """
    from starfathom.classify.assignment import Assignment
    from starfathom.classify.mktype import MKType

    mk = MKType.parse(text)
    if mk.kind != "star" or not math.isfinite(mk.t_code):
        return Assignment(
            status="refused",
            object_kind=mk.kind,
            other_type=text,
            reason=f"{text} is not a type on the MK sequence, so no luminosity follows from it.",
        )
    posterior = _even_posterior(mk)
    return Assignment(
        status="typed",
        object_kind="star",
        mk_type=str(mk),
        t_code=mk.t_code,
        lum_code=mk.lum_code,
        posterior=posterior,
        flags=(TYPE_GIVEN,),
        notes=("type as given in the target list",),
    )


def _even_posterior(mk: MKType) -> np.ndarray:
    from starfathom.templates.subtypes import LUM_CODES, STEPS, step_of

    def share(codes: np.ndarray, low: float, high: float) -> np.ndarray:
        if not math.isfinite(low):
            return np.ones(len(codes)) / len(codes)
        top = high if math.isfinite(high) else low
        low, top = min(low, top), max(low, top)
        inside = (codes >= low - 1e-6) & (codes <= top + 1e-6)
        if not inside.any():
            inside = np.abs(codes - low) == np.abs(codes - low).min()
        return inside / inside.sum()

    t = share(STEPS, float(step_of(mk.t_code)), float(step_of(mk.t_code_hi)))
    lum = share(np.array(LUM_CODES), mk.lum_code, mk.lum_code_hi)
    return np.outer(t, lum)


def assign_targets(targets: Sequence[Target], settings: RunSettings) -> list[Assignment]:
    """Type every target: from its spectrum where it names one, else from its ``mk_type``. Never raises for one star."""
    from starfathom.classify.assignment import Assignment

    assignments: list[Assignment | None] = [None] * len(targets)
    with_spectrum = [i for i, t in enumerate(targets) if t.spectrum]
    for i, target in enumerate(targets):
        if not target.spectrum:
            if not target.mk_type:
                assignments[i] = Assignment(status="failed", reason="The list gives neither a spectrum nor a type.")
                continue
            try:
                assignments[i] = given_type(target.mk_type)
            except RequestError as fault:
                assignments[i] = Assignment(status="failed", reason=str(fault))
    if with_spectrum:
        for i, answer in zip(with_spectrum, _classify([targets[i] for i in with_spectrum], settings)):
            assignments[i] = answer
    return [a for a in assignments if a is not None]


def _classify(targets: Sequence[Target], settings: RunSettings) -> list[Assignment]:
    from starfathom.classify.engine import Classifier, Settings
    from starfathom.classify.reading import read_plain

    classifier = Classifier.load(without_libraries=settings.without_libraries, without_stars=settings.without_stars)
    spectra: list[PlainSpectrum | SpectrumError] = []
    asked: list[Settings] = []
    for target in targets:
        try:
            spectra.append(read_plain(target.spectrum, medium=settings.medium))
        except SpectrumError as fault:
            spectra.append(fault)
        asked.append(
            Settings(medium=settings.medium, fwhm_angstrom=target.fwhm_angstrom, velocity_kms=target.velocity_kms)
        )
    answers = classifier.classify_many(spectra, asked)
    out = []
    for answer, target, spectrum in zip(answers, targets, spectra):
        seen = {} if isinstance(spectrum, SpectrumError) else {"range_angstrom": range_of(spectrum)}
        out.append(replace(answer, file=target.spectrum, meta=answer.meta | seen))
    return out


def advise_targets(
    targets: Sequence[Target],
    assignments: Sequence[Assignment],
    fathomings: Sequence[Fathoming | str | None],
    settings: RunSettings,
) -> list[list[Advice]]:
    """What would help most with each star, best first (see :func:`starfathom.advice.advise`)."""
    if not settings.advice:
        return [[] for _ in targets]
    scale = _scale(settings)
    out = []
    for target, assignment, fathoming in zip(targets, assignments, fathomings):
        known = Known(target.magnitudes, target.parallax, target.ebv, target.ra_deg, target.dec_deg, settings.rv,
                      scale, settings.prior)  # fmt: skip
        found = None if isinstance(fathoming, str) else fathoming
        try:
            out.append(advise(assignment, found, known=known if target.magnitudes else None))
        except StarfathomError:      # a set-up that no star could have was tried: no advice, but the result stands
            out.append([])
    return out


def fathom_targets(
    targets: Sequence[Target], assignments: Sequence[Assignment], settings: RunSettings, *, common_groups: bool = False
) -> list[Fathoming | str | None]:
    """Distance of every typed target with photometry; a sentence where it cannot be had, None where not typed.

    A star's answer depends on its own data and the run's seed alone, unless ``common_groups`` gives the members of a
    group a common distance and reddening: then all of them must be in the call.
    """
    from starfathom.classify.mktype import MKType
    from starfathom.distance import Photometry, Request, fathom_many

    out: list[Fathoming | str | None] = [None] * len(targets)
    places, requests = [], []
    for i, (target, assignment) in enumerate(zip(targets, assignments)):
        if assignment.status != "typed":
            continue
        if not target.magnitudes:
            out[i] = "No photometry, so no distance."
            continue
        given = TYPE_GIVEN in assignment.flags or BY_HAND in assignment.flags
        places.append(i)
        requests.append(
            Request(
                MKType.parse(assignment.mk_type) if given else assignment,
                Photometry(target.magnitudes),
                parallax=target.parallax,
                ra_deg=target.ra_deg,
                dec_deg=target.dec_deg,
                ebv=target.ebv,
                rv=settings.rv,
                group=target.group,
                name=target.name,
            )
        )
    if requests:
        found = fathom_many(
            requests,
            scale=_scale(settings),
            prior=settings.prior,
            n_samples=settings.n_samples,
            seed=settings.seed,
            keep_samples=settings.details,
            workers=1,
            common_groups=common_groups,
        )
        for i, answer in zip(places, found):
            out[i] = str(answer) if isinstance(answer, StarfathomError) else answer
    return out


def _scale(settings: RunSettings) -> Any:
    """The scale asked for; our own is fitted afresh without what is to be left out (some seconds, once a process)."""
    from starfathom.distance import fit_scale, load_scale

    left_out = settings.without_libraries or settings.without_stars
    if left_out and load_scale(settings.scale).fitted:
        return fit_scale(settings.without_libraries, settings.without_stars)
    return settings.scale


def row_of(
    target: Target, assignment: Assignment, fathoming: Fathoming | str | None, advice: Sequence[Advice] = ()
) -> dict[str, Any]:
    """One row of the results: every column of :func:`result_columns`, numbers NaN where there is no distance."""
    row: dict[str, Any] = {
        name: math.nan if decimals is not None else "" for name, _u, decimals, _d in result_columns()
    }
    row |= {"name": target.name} | assignment.row()
    if isinstance(fathoming, str):
        row["cautions"] = fathoming
    elif fathoming is not None:
        row |= {k: v for k, v in fathoming.row().items() if k in row and k not in ("name", "file", "status")}
    row["advice"] = summary(advice)
    return row


def budget_of(target: Target, fathoming: Fathoming | str | None) -> list[dict[str, Any]]:
    """The star's rows of the budget, keyed by :data:`BUDGET_COLUMNS`."""
    if fathoming is None or isinstance(fathoming, str):
        return []
    return [
        {
            "name": target.name,
            "step": part.step,
            "sigma_mag": part.sigma_mag,
            "per_cent": part.per_cent,
            "share": part.share,
        }
        for part in fathoming.budget
    ]


def detail_of(
    target: Target, assignment: Assignment, fathoming: Fathoming | str | None, advice: Sequence[Advice] = ()
) -> dict[str, Any]:
    """What the report and the desk show of a star beyond its row.

    Keys: ``name``; ``target`` (the fields of :class:`starfathom.targets.Target`); ``posterior`` (cells of at least 1e-6
    as [subtype index, class index, probability]); ``evidence`` (the fields of each criterion); ``distance_samples_pc``
    (101 quantiles, 0 to 100 %, or None); ``advice`` (sentences, best first).
    """
    from dataclasses import asdict

    cells: list[list[Any]] = []
    if assignment.posterior is not None:
        for i, j in zip(*np.nonzero(assignment.posterior >= 1e-6)):
            cells.append([int(i), int(j), round(float(assignment.posterior[i, j]), 7)])
    quantiles = None
    if fathoming is not None and not isinstance(fathoming, str):
        samples = fathoming.samples.get("distance_pc")
        if samples is not None:
            quantiles = [float(f"{q:.5g}") for q in np.quantile(samples, np.linspace(0, 1, 101))]
    return {
        "name": target.name,
        "target": asdict(target),
        "posterior": cells,
        "evidence": [asdict(c) for c in assignment.evidence],
        "distance_samples_pc": quantiles,
        "advice": lines(advice),
    }


def assignment_of(row: Mapping[str, Any], detail: Mapping[str, Any] | None) -> Assignment:
    """The assignment again from a row of the record, rounded as there, and its detail (without: no posterior)."""
    from starfathom.classify.assignment import Assignment, Criterion
    from starfathom.templates.subtypes import CLASSES, SUBTYPES

    posterior = None
    if detail is not None and detail["posterior"]:
        posterior = np.zeros((len(SUBTYPES), len(CLASSES)))
        for i, j, p in detail["posterior"]:
            posterior[i, j] = p
        posterior /= posterior.sum()
    names = Assignment.__dataclass_fields__
    kept = {k: v for k, v in row.items() if k in names}
    for name in ("type_set_90", "nearest", "flags"):
        kept[name] = tuple(str(row[name]).split(",")) if row[name] else ()
    kept["notes"] = tuple(str(row["notes"]).split("; ")) if row["notes"] else ()
    told = detail["evidence"] if detail is not None else []
    evidence = tuple(Criterion(**{**c, "features": tuple(c["features"])}) for c in told)
    return Assignment(**kept, posterior=posterior, evidence=evidence)


def work_batch(number: int, targets: Sequence[Target], settings: RunSettings) -> BatchResult:
    """Do the whole chain for one batch."""
    assignments = assign_targets(targets, settings)
    fathomings = fathom_targets(targets, assignments, settings)
    advice = advise_targets(targets, assignments, fathomings, settings)
    stars = list(zip(targets, assignments, fathomings, advice))
    return BatchResult(
        number,
        rows=[row_of(*s) for s in stars],
        budget=[b for target, _a, f, _advice in stars for b in budget_of(target, f)],
        details=[detail_of(*s) if settings.details or s[0].group else None for s in stars],
    )
