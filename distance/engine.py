"""From a type and magnitudes to a distance: one star, or many at once."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from starfathom.classify.assignment import Assignment
from starfathom.classify.errors import RequestError, StarfathomError
from starfathom.classify.mktype import MKType
from starfathom.distance import cautions as caution_text
from starfathom.distance.budget import budget_rows, decompose
from starfathom.distance.dust import galactic_latitude_sine
from starfathom.distance.fathoming import NAN, PERCENTS, Fathoming, derived
from starfathom.distance.intrinsic import intrinsic
from starfathom.distance.parallax import check_parallax, gaia_zero_point_mas, tension
from starfathom.distance.photometry import Photometry
from starfathom.distance.priors import check_prior
from starfathom.distance.sampler import Draws, Star, draw, usable_bands
from starfathom.distance.scale import Scale, load_scale
from starfathom.distance.sources import cells_of_assignment, cells_of_type, parse_type

FloatArray = NDArray[np.float64]

#: Correlation of the errors of the two routes, class and spectrum: measured as 0.35 on 70 stars of one library with
#: good parallaxes, typed by models trained without that library.
ROUTE_CORRELATION = 0.35
#: Largest E(B-V) in mag that makes sense as a prior.
MAX_EBV = 20.0
#: Samples x stars worked on at a time; keeps the arrays in the processor's cache.
_CHUNK = 60_000
#: Where a normal distribution has the percentiles kept.
_NORMAL_POINTS = (-1.95996, -0.99446, 0.0, 0.99446, 1.95996)


@dataclass(frozen=True)
class Request:
    """One star to fathom; see :func:`fathom` for the meaning of the fields."""

    source: Any
    photometry: Photometry | Mapping[str, Any]
    parallax: tuple[float, float] | None = None
    ra_deg: float | None = None
    dec_deg: float | None = None
    ebv: tuple[float, float] | None = None
    ebv_slope: tuple[float, float] | None = None
    rv: float | tuple[float, float] | None = None
    gaia: Mapping[str, Any] | None = None
    use_parallax: bool = False
    group: str = ""
    name: str = ""


def _pair(value: Any, what: str, default_error: float) -> tuple[float, float] | None:
    if value is None:
        return None
    try:
        pair = (float(value[0]), float(value[1])) if isinstance(value, (tuple, list)) else (float(value), default_error)
    except (TypeError, ValueError, IndexError):
        raise RequestError(f"{what} is {value!r}; give a number, or value and error.") from None
    if not all(np.isfinite(pair)) or pair[1] < 0:
        raise RequestError(f"{what} is {value!r}; value and error must be finite and the error not negative.")
    return pair


def _sin_b(request: Request) -> float:
    if request.ra_deg is None or request.dec_deg is None:
        return NAN
    ra, dec = float(request.ra_deg), float(request.dec_deg)
    if not np.isfinite(ra) or not np.isfinite(dec):
        return NAN
    if not -90 <= dec <= 90 or not -360 <= ra <= 360:
        raise RequestError(f"The position ra={ra:g}, dec={dec:g} is not on the sky; give degrees, ICRS.")
    return float(galactic_latitude_sine(ra, dec))


def prepare(request: Request) -> tuple[Star, Any]:
    """Check one request; returns the star ready for sampling and the parsed type or assignment."""
    source = request.source
    if isinstance(source, str):
        source = parse_type(source)
    if isinstance(source, Assignment):
        cells, shares = cells_of_assignment(source)
    elif isinstance(source, MKType):
        cells, shares = cells_of_type(source)
    else:
        raise RequestError(f"A distance needs an MK type or an assignment, not {type(source).__name__}.")
    photometry = request.photometry if isinstance(request.photometry, Photometry) else Photometry(request.photometry)
    if not len(photometry):
        raise RequestError("There is no magnitude to take a distance from; give at least V.")
    rv = _pair(request.rv, "R_V", 0.0)
    if rv is not None and not 2.0 <= rv[0] <= 6.0:
        raise RequestError(f"R_V = {rv[0]:g} is outside 2 to 6, where extinction curves are known.")
    ebv = _pair(request.ebv, "E(B-V)", 0.03)
    if ebv is not None and ebv[0] < 0:
        raise RequestError(f"E(B-V) = {ebv[0]:g} as a prior is negative; dust does not make a star bluer.")
    if ebv is not None and ebv[0] > MAX_EBV:
        raise RequestError(f"E(B-V) = {ebv[0]:g} as a prior is above {MAX_EBV:g} mag, behind which no star is typed.")
    parallax = None
    if request.parallax is not None:
        parallax = check_parallax(request.parallax)
        if request.gaia is not None:
            parallax = (parallax[0] - gaia_zero_point_mas(request.gaia), parallax[1])
    abs_mag = (NAN, NAN, 0.0)
    if (
        isinstance(source, Assignment)
        and source.abs_mag_v_ok
        and source.abs_mag_v_err > 0
        and np.isfinite(source.abs_mag_v)
    ):
        abs_mag = (float(source.abs_mag_v), float(source.abs_mag_v_err), ROUTE_CORRELATION)
    star = Star(
        cells=cells,
        shares=shares,
        magnitudes=dict(photometry),
        sin_b=_sin_b(request),
        ebv_prior=ebv,
        ebv_measured=_pair(request.ebv_slope, "E(B-V) from the spectrum", 0.1),
        rv=rv,
        abs_mag=abs_mag,
        parallax=parallax,
    )
    if not usable_bands(star):
        reach = ", ".join(photometry)
        raise RequestError(f"None of the bands given ({reach}) has a published intrinsic colour for this type; give V.")
    return star, source


def _summaries(draws: Draws) -> tuple[dict[str, FloatArray], dict[str, FloatArray]]:
    """Percentiles (5, n_stars) of every quantity, and the samples behind them."""
    look = intrinsic()
    teff = np.exp(draws.ln_teff)
    bc = look.bc_v[draws.cell] + look.bc_slope[draws.cell] * (draws.ln_teff - look.ln_teff[draws.cell])
    samples = derived(draws.modulus, draws.m_v, bc, teff)
    samples |= {"ebv": draws.ebv, "a_v": draws.a_v, "abs_mag_v": draws.m_v, "teff_k": teff}
    n = draws.modulus.shape[1]
    at = np.clip(np.rint(np.array(PERCENTS) / 100 * n - 0.5).astype(int), 0, n - 1)
    percentiles = {}
    for name, values in samples.items():
        percentiles[name] = np.partition(values, np.unique(at), axis=1)[:, at].T
    return percentiles, samples


@dataclass(frozen=True)
class _Job:
    scale: Scale
    prior: str
    n_samples: int
    seed: int
    keep_samples: bool
    with_budget: bool


def _run(stars: list[Star], requests: list[Request], parsed: list[Any], job: _Job) -> list[Fathoming]:
    main = [
        s if s.parallax is None or (r.use_parallax and s.parallax[0] > 3 * s.parallax[1]) else replace(s, parallax=None)
        for s, r in zip(stars, requests)
    ]
    draws = draw(main, job.scale, job.prior, job.n_samples, job.seed)
    percentiles, samples = _summaries(draws)
    variance = decompose(draws, job.scale, 1000) if job.with_budget else np.zeros((len(stars), 8))
    routes = _routes(main, job)
    out = []
    for i, (star, request, source) in enumerate(zip(stars, requests, parsed)):
        own = {name: tuple(values[:, i].tolist()) for name, values in percentiles.items()}
        sigma = per_cent = NAN
        if star.parallax is not None:
            # always held against the distance that does not know of it
            blind = routes[i][3]
            sigma, per_cent = tension(samples["distance_pc"][i] if blind is None else blind, star.parallax)
        result = Fathoming(
            percentiles=own,
            budget=budget_rows(variance[i]) if job.with_budget else (),
            name=request.name or (source.file if isinstance(source, Assignment) else ""),
            mk_type=source.mk_type if isinstance(source, Assignment) else str(request.source),
            scale=job.scale.name,
            prior=job.prior,
            group=request.group or "",
            distance_class_pc=routes[i][0] if np.isfinite(routes[i][0]) else own["distance_pc"][2],
            distance_spec_pc=routes[i][1],
            routes_sigma=routes[i][2],
            parallax_sigma=sigma,
            parallax_percent=per_cent,
            bands=tuple(usable_bands(star)),
            n_eff=float(draws.n_eff[i]),
            samples={k: v[i] for k, v in samples.items()} if job.keep_samples else {},
        )
        weight = float(job.scale.weight[draws.cell[i]].mean())
        spread = float(draws.ebv[i].mean() * draws.rv[i].std())
        out.append(
            replace(result, cautions=caution_text.cautions(result, star, request, source, job.scale, weight, spread))
        )
    return out


def _routes(stars: list[Star], job: _Job) -> list[tuple[float, float, float, FloatArray | None]]:
    """By star: distance by class, distance by spectrum, their difference in sigma, samples blind to the parallax."""
    out: list[tuple[float, float, float, FloatArray | None]] = [(NAN, NAN, NAN, None)] * len(stars)
    n = max(400, job.n_samples // 2)
    two = [i for i, s in enumerate(stars) if np.isfinite(s.abs_mag[0])]
    if two:
        blank = [replace(stars[i], abs_mag=(NAN, NAN, 0.0), parallax=None) for i in two]
        by_class = draw(blank, job.scale, job.prior, n, job.seed)
        only = np.array([stars[i].abs_mag[0] for i in two]), np.array([stars[i].abs_mag[1] for i in two])
        # the spectrum route leaves the scale out: same dust and types, M_V from the spectrum alone
        wide = replace(
            job.scale,
            sigma=np.full_like(job.scale.sigma, 30.0),
            tail=np.zeros_like(job.scale.tail),
            slope=np.zeros_like(job.scale.slope),
        )
        by_spec = draw([replace(b, abs_mag=(v, e, 0.0)) for b, v, e in zip(blank, *only)], wide, job.prior, n, job.seed)
        for row, i in enumerate(two):
            m_class = by_class.m_v[row]
            middle, width = float(np.median(m_class)), float(0.5 * np.subtract(*np.percentile(m_class, [84, 16])))
            value, error, rho = stars[i].abs_mag
            difference = np.sqrt(max(width**2 + error**2 - 2 * rho * width * error, 1e-4))
            out[i] = (
                float(10 ** (0.2 * np.median(by_class.modulus[row]) + 1)),
                float(10 ** (0.2 * np.median(by_spec.modulus[row]) + 1)),
                (value - middle) / float(difference),
                None,
            )
    held = [i for i, s in enumerate(stars) if s.parallax is not None]
    if held:
        blind = draw([replace(stars[i], parallax=None) for i in held], job.scale, job.prior, n, job.seed)
        for row, i in enumerate(held):
            out[i] = (*out[i][:3], 10 ** (0.2 * blind.modulus[row] + 1))
    return out


def _scale(scale: Scale | str | None) -> Scale:
    return scale if isinstance(scale, Scale) else load_scale(scale)


def fathom(
    source: Any,
    photometry: Photometry | Mapping[str, Any],
    *,
    parallax: tuple[float, float] | None = None,
    ra_deg: float | None = None,
    dec_deg: float | None = None,
    ebv: tuple[float, float] | None = None,
    ebv_slope: tuple[float, float] | None = None,
    scale: Scale | str | None = None,
    prior: str | None = None,
    rv: float | tuple[float, float] | None = None,
    gaia: Mapping[str, Any] | None = None,
    use_parallax: bool = False,
    group: str | None = None,
    name: str = "",
    n_samples: int = 4000,
    seed: int = 0,
) -> Fathoming:
    """Distance, dust, luminosity, temperature and radius of one star, with the budget of the uncertainty.

    ``source`` is an Assignment, an MKType or its text ("A2 V"); ``photometry`` the magnitudes. ``parallax`` in mas
    with its error is compared (``gaia`` gives the inputs of the Gaia zero point), and used only if ``use_parallax``.
    ``ra_deg`` and ``dec_deg`` (ICRS) let the dust prior know the latitude; ``ebv`` (value, error) replaces that
    prior, as a map would; ``ebv_slope`` is the excess from the slope of a flux-calibrated spectrum. ``rv`` fixes R_V
    or gives its value and error. ``scale`` and ``prior`` are names (``scale_names()``, ``prior_names()``).

    Raises RequestError, one sentence, for anything that cannot be worked with.
    """
    request = Request(
        source, photometry, parallax, ra_deg, dec_deg, ebv, ebv_slope, rv, gaia, use_parallax, group or "", name
    )
    chosen, prior = _scale(scale), check_prior(prior)
    _check_samples(n_samples)
    star, parsed = prepare(request)
    return _run([star], [request], [parsed], _Job(chosen, prior, n_samples, seed, True, True))[0]


def _check_samples(n_samples: int) -> None:
    if not 100 <= n_samples <= 1_000_000:
        raise RequestError(f"{n_samples} samples is out of range; give 100 to 1000000.")


def fathom_many(
    requests: Sequence[Request | Mapping[str, Any]],
    *,
    scale: Scale | str | None = None,
    prior: str | None = None,
    n_samples: int = 2000,
    seed: int = 0,
    keep_samples: bool = False,
    with_budget: bool = True,
    workers: int = 2,
    common_groups: bool = True,
) -> list[Fathoming | StarfathomError]:
    """Many stars at once; the list answers ``requests`` one by one, an error standing where a star could not be done.

    Each request is a :class:`Request` or a mapping of its fields. The answer for a star does not depend on the
    others in the list, except that members of a ``group`` (at least three) are drawn to a common distance and
    reddening where ``common_groups`` is true. ``workers`` threads share the work.
    """
    from concurrent.futures import ThreadPoolExecutor

    chosen, prior = _scale(scale), check_prior(prior)
    _check_samples(n_samples)
    job = _Job(chosen, prior, n_samples, seed, keep_samples, with_budget)
    out: list[Fathoming | StarfathomError | None] = [None] * len(requests)
    ready: list[tuple[int, Star, Request, Any]] = []
    for i, given in enumerate(requests):
        try:
            request = given if isinstance(given, Request) else Request(**given)
            ready.append((i, *_prepared(request)))
        except StarfathomError as error:
            out[i] = error
        except TypeError as error:
            out[i] = RequestError(f"The request for star {i + 1} cannot be read: {error}.")
    size = max(1, _CHUNK // n_samples)
    # stars with the same bands go together, so that no chunk works on bands it has not
    ready.sort(key=lambda item: (tuple(item[1].magnitudes), item[0]))
    chunks = [ready[k : k + size] for k in range(0, len(ready), size)]

    def work(chunk: list[tuple[int, Star, Request, Any]]) -> list[Fathoming]:
        return _run([c[1] for c in chunk], [c[2] for c in chunk], [c[3] for c in chunk], job)

    intrinsic()
    with ThreadPoolExecutor(max(1, workers)) as pool:
        for chunk, results in zip(chunks, pool.map(work, chunks)):
            for item, result in zip(chunk, results):
                out[item[0]] = result
    if common_groups:
        for index, member in _grouped(ready, out, job):
            out[index] = member
    return [r for r in out if r is not None]


def _grouped(
    ready: list[tuple[int, Star, Request, Any]], out: list[Fathoming | StarfathomError | None], job: _Job
) -> list[tuple[int, Fathoming]]:
    """Members of groups once more, each knowing what the others say of distance and dust; index and new result."""
    from starfathom.distance import groups

    by_name: dict[str, list[tuple[int, Star, Request, Any]]] = {}
    for item in sorted(ready, key=lambda r: r[0]):
        if item[2].group:
            by_name.setdefault(item[2].group, []).append(item)
    done = []
    for name, items in by_name.items():
        first = [r for r in (out[item[0]] for item in items) if isinstance(r, Fathoming)]
        if len(first) < groups.FEWEST:
            continue
        names = [r.name or f"star {item[0] + 1}" for r, item in zip(first, items)]
        stars = [item[1] for item in items]
        n = max(400, job.n_samples // 2)
        # dust first, from the colours without the dust prior, which would count once for every member
        ebv, ebv_err = draw(stars, job.scale, job.prior, n, job.seed).ebv_colours.T
        reddened = [replace(s, ebv_prior=groups.of_the_others(i, ebv, ebv_err)) for i, s in enumerate(stars)]
        moduli = draw(reddened, job.scale, job.prior, n, job.seed).modulus
        low, modulus, high = np.percentile(moduli, [16, 50, 84], axis=1)
        modulus_err = 0.5 * (high - low)
        group = groups.combine(name, names, modulus, modulus_err, ebv, ebv_err)
        inside = ~np.array(group.is_outlier)
        stars = []
        for i, item in enumerate(items):
            parallax, excess = groups.without_one(i, inside, modulus, modulus_err, ebv, ebv_err)
            stars.append(replace(item[1], parallax=parallax, ebv_prior=excess) if inside[i] else item[1])
        again = draw(stars, job.scale, job.prior, job.n_samples, job.seed)
        percentiles, samples = _summaries(again)
        variance = decompose(again, job.scale, 1000) if job.with_budget else np.zeros((len(stars), 8))
        for i, (item, before) in enumerate(zip(items, first)):
            said = before.cautions
            before = replace(
                before,
                group_distance_pc=group.distance_pc,
                group_distance_err_pc=group.distance_err_pc,
                group_ebv=group.ebv,
                group_outlier=not inside[i],
            )
            if not inside[i]:
                apart = f"The star stands apart from the group {name} in distance or reddening and was left on its own."
                done.append((item[0], replace(before, cautions=(apart, *said))))
                continue
            own = {k: tuple(v[:, i].tolist()) for k, v in percentiles.items()}
            sigma = group.distance_err_pc / group.distance_pc
            own["distance_pc"] = tuple(float(group.distance_pc * np.exp(z * sigma)) for z in _NORMAL_POINTS)
            budget = budget_rows(variance[i]) if job.with_budget else ()
            kept = {k: v[i] for k, v in samples.items()} if job.keep_samples else {}
            done.append((item[0], replace(before, percentiles=own, budget=budget, samples=kept)))
    return done


def _prepared(request: Request) -> tuple[Star, Request, Any]:
    star, source = prepare(request)
    return star, request, source
