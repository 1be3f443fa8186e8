"""What would settle it: for one star, the observations that would help most, each with its expected effect.

What a better spectrum would bring is counted among injected library stars (:mod:`starfathom.advice_grid`), given how
certain the star is now; what it, a band or a dust value would do to the distance is worked out by the distance step
itself with the hypothetical data. Exposure times scale as the square of S/N, as they do where photons
of star and sky limit it; near the read noise less time is needed, near the moon or in cloud more.
"""

from __future__ import annotations

import math
import re
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from starfathom.advice_grid import FEWEST_STARS, GROUPS, Setup, Trials, load_trials, predicted, state_rate
from starfathom.classify.errors import RequestError

if TYPE_CHECKING:
    from starfathom.classify.assignment import Assignment
    from starfathom.classify.spectrum import PlainSpectrum
    from starfathom.distance import Fathoming, Request

FloatArray = NDArray[np.float64]

#: Times the exposure so far that are weighed.
EXPOSURES = (2, 4, 10)
#: Best S/N per angstrom that the trials tell apart; more is not promised.
_MOST_SNR = 100.0
_FINEST_FWHM = 4.6
_FULL = (3900.0, 6800.0)
#: Advice that gains less than this of what is open is not given.
_LEAST_SCORE = 0.04
_COST = 0.03             # taken off a score for each doubling of the time
_SAMPLES = (400, 4000)
_LEAST_SAMPLES = 25
_BAND_ERROR, _DUST_ERROR = 0.02, 0.03
#: Bands worth adding, with the ones that make each needless.
_BANDS = (("Ks", ("J", "H", "Ks")), ("V", ("V", "G")), ("B", ("B", "BP", "g")), ("I", ("I", "RP", "i", "R", "r")))
DISTANCE_WANTED = 15.0


@dataclass(frozen=True)
class Wanted:
    """What should be reached: the class right with probability ``success``, and the distance to ``distance`` per cent
    (None: no matter)."""

    success: float = 0.9
    distance: float | None = DISTANCE_WANTED

    @classmethod
    def parse(cls, text: str) -> Wanted:
        """From words: ``class``, ``class 95%`` or ``distance 15%``. Raises RequestError for anything else."""
        match = re.fullmatch(r"\s*(class|distance)\s*(?:(\d+(?:\.\d+)?)\s*(?:%|per ?cent)?)?\s*", text.lower())
        if match is None or (match[1] == "distance" and match[2] is None):
            raise RequestError(f'--want {text!r}: say "class", "class 95%" or such as "distance 15%".')
        if match[1] == "class":
            share = float(match[2]) / 100 if match[2] else 0.9
            if not 0.5 < share < 1:
                raise RequestError(f"--want {text!r}: a class can be asked for in more than 50 and less than 100 %.")
            return cls(share, None)
        percent = float(match[2])
        if not 1 <= percent <= 200:
            raise RequestError(f"--want {text!r}: a distance can be asked for to between 1 and 200 %.")
        return cls(0.9, percent)


@dataclass(frozen=True)
class Advice:
    """One thing to do and what it should bring.

    ``kind`` is one of ``exposure``, ``resolution``, ``range``, ``band``, ``dust``, ``parallax``. ``success_*`` is the
    probability that the luminosity class comes out right, ``subtype_*`` the 68 % error of the subtype, ``distance_*``
    that of the distance in per cent, each now and then (NaN where it does not apply). ``stars`` is how many library
    stars the counts rest on (NaN: no counts). ``score`` ranks: the share of what is open that would be gained.
    """

    kind: str
    action: str
    effect: str
    score: float
    setup: Setup | None = None
    time_factor: float = math.nan
    extra_seconds: float = math.nan
    success_now: float = math.nan
    success_then: float = math.nan
    subtype_now: float = math.nan
    subtype_then: float = math.nan
    distance_now: float = math.nan
    distance_then: float = math.nan
    stars: float = math.nan

    def __str__(self) -> str:
        return f"{self.action} {self.effect}" if self.kind == "none" else f"{self.action}: {self.effect}"


@dataclass(frozen=True)
class Known:
    """What is known of a star besides its spectrum, for the distance: see :func:`starfathom.distance.fathom`."""

    magnitudes: Mapping[str, Any]
    parallax: tuple[float, float] | None = None
    ebv: tuple[float, float] | None = None
    ra_deg: float | None = None
    dec_deg: float | None = None
    rv: float | None = None
    scale: Any = None
    prior: str | None = None


# Words ---------------------------------------------------------------------------------------------------------------

def in_ten(p: float) -> str:
    """A probability as a count in ten, or in a hundred near certainty."""
    return f"{100 * p:.0f} of 100" if p > 0.955 else f"{10 * p:.0f} of 10"


def time_words(seconds: float) -> str:
    """A length of time as an observer says it."""
    if seconds < 90:
        return f"{seconds:.0f} s"
    if seconds < 5400:
        minutes = seconds / 60
        return f"{minutes:.0f} minutes" if minutes >= 10 else f"{minutes:.1f}".removesuffix(".0") + " minutes"
    return f"{seconds / 3600:.1f} hours"


# The star as it is ---------------------------------------------------------------------------------------------------

def setup_of(a: Assignment) -> Setup | None:
    """How the star was observed; None where no spectrum was."""
    if not (math.isfinite(a.snr) and math.isfinite(a.fwhm_angstrom) and a.snr > 0):
        return None
    lo, hi = a.meta.get("range_angstrom", (math.nan, math.nan))
    if not (math.isfinite(lo) and math.isfinite(hi)):
        lo, hi = _range_of_evidence(a)
    return Setup(float(a.fwhm_angstrom), (float(lo), float(hi)), float(a.snr))


def _range_of_evidence(a: Assignment) -> tuple[float, float]:
    """Range observed, from what could be measured, where nobody says."""
    if "partial-coverage" not in a.flags:
        return _FULL
    waves = [float(m) for c in a.evidence for m in re.findall(r"\b([3-6]\d{3})\b", c.name)]
    return (min(waves) - 50, max(waves) + 50) if waves else _FULL


def group_shares(a: Assignment) -> FloatArray:
    """Probability of each class as counted, (5,)."""
    p = np.zeros(len(GROUPS))
    for name, share in a.class_probabilities.items():
        p[GROUPS.index(name) if name in GROUPS else 0] += share
    return p / max(p.sum(), 1e-9)


def rivals(a: Assignment) -> list[str]:
    """Classes in play, most probable first."""
    p = group_shares(a)
    return [GROUPS[k] for k in np.argsort(-p, kind="stable") if p[k] >= 0.1]


def telling_feature(a: Assignment) -> str:
    """The class criterion to aim at: one that speaks of the class but not yet clearly, or that objects."""
    codes = {"I": 1.3, "II": 2.0, "III": 3.0, "IV": 4.0, "V": 5.0}
    two = rivals(a)[:2]
    if len(two) < 2:
        return ""
    gap = abs(codes[two[0]] - codes[two[1]])
    best, most = "", 0.0
    for c in a.evidence:
        if not (math.isfinite(c.lum_code) and c.lum_code_err > 0):
            continue
        power = gap / c.lum_code_err                       # sigma between the two classes as it stands
        worth = power / (1 + (power / 3) ** 2)             # decided already: nothing left to gain
        if abs(c.lum_code - a.lum_code) > 1.5 * c.lum_code_err:
            worth *= 1.5                                   # it objects: worth a better look
        if worth > most:
            best, most = c.name, worth
    return best


def needs_advice(a: Assignment, wanted: Wanted) -> bool:
    """Whether the type itself leaves something open."""
    if a.status != "typed" or a.posterior is None:
        return False
    return float(group_shares(a).max()) < wanted.success or a.t_code_err >= 1.5


# The distance with hypothetical data ---------------------------------------------------------------------------------

def _percent(f: Any) -> float:
    """Half the 68 % interval of a distance, per cent; NaN where too few samples carry it to say."""
    if not hasattr(f, "percentiles") or f.n_eff < _LEAST_SAMPLES:
        return math.nan
    low, middle, high = f.percentiles["distance_pc"][1:4]
    return float(50.0 * (high - low) / middle)


def _request(source: Any, known: Known, **changes: Any) -> Request:
    from starfathom.distance import Photometry, Request

    given: dict[str, Any] = {"parallax": None, "ebv": known.ebv, "ra_deg": known.ra_deg, "dec_deg": known.dec_deg,
                             "rv": known.rv, "magnitudes": dict(known.magnitudes)} | changes
    return Request(source, Photometry(given.pop("magnitudes")), **given)


def sharpened(a: Assignment, group: int, success: float, narrow: float, mag_err: float) -> Assignment:
    """The assignment as a better spectrum might leave it, were the star of class ``group``.

    ``success`` goes to that class; ``narrow`` (at most 1) is by how much the spread of the subtype shrinks.
    """
    from starfathom.templates.subtypes import CLASSES

    assert a.posterior is not None
    p = a.posterior / a.posterior.sum()
    member = np.array([GROUPS.index(c) if c in GROUPS else 0 for c in CLASSES])
    p = np.maximum(p, 1e-12) ** (1 / max(narrow, 0.3) ** 2)
    mine = member == group
    inside, outside = float(p[:, mine].sum()), float(p[:, ~mine].sum())
    p = p * np.where(mine, success / max(inside, 1e-30), (1 - success) / max(outside, 1e-30))
    best = int(np.argmax(group_shares(a)))
    return replace(a, posterior=p / p.sum(), abs_mag_v_err=mag_err, abs_mag_v_ok=a.abs_mag_v_ok and group == best)


# Advice --------------------------------------------------------------------------------------------------------------

@dataclass(frozen=True)
class _Option:
    kind: str
    action: str
    setup: Setup | None = None
    time_factor: float = 1.0
    extra_seconds: float = math.nan
    changes: Mapping[str, Any] | None = None


def _spectra(a: Assignment, now: Setup, exptime_s: float | None) -> list[_Option]:
    """Better spectra worth weighing."""
    out = []
    feature = telling_feature(a)
    for k in EXPOSURES:
        snr = now.snr * math.sqrt(k)
        if now.snr >= _MOST_SNR or (k > 2 and snr > 1.6 * _MOST_SNR):
            continue
        extra = (k - 1) * exptime_s if exptime_s else math.nan
        time = f"{time_words(extra)} more" if exptime_s else f"{k} times the exposure"
        at = f"S/N {snr:.0f} at {feature}" if feature else f"S/N {snr:.0f} per Å"
        out.append(_Option("exposure", f"{time} at the same set-up, {at}", now.at(snr=snr), float(k), extra))
    again = f"{time_words(exptime_s)} with" if exptime_s else "the same exposure again with"
    for fwhm in (6.5, _FINEST_FWHM):
        if now.fwhm_angstrom > 1.35 * fwhm:
            out.append(_Option("resolution", f"{again} a finer line spread, FWHM {fwhm:.3g} Å at the same S/N per Å",
                               now.at(fwhm_angstrom=fwhm), 2.0, exptime_s or math.nan))
    lo, hi = now.range_angstrom
    if lo > 4150 or hi < 4750:
        out.append(_Option("range", f"{again} the blue too, 3900-4900 Å at S/N {now.snr:.0f} per Å",
                           now.at(range_angstrom=(min(lo, 3900.0), max(hi, 4900.0))), 2.0, exptime_s or math.nan))
    if hi < 6200 or lo > 5200:
        out.append(_Option("range", f"{again} the green and red too, 4900-6800 Å at S/N {now.snr:.0f} per Å",
                           now.at(range_angstrom=(min(lo, 4900.0), max(hi, 6800.0))), 2.0, exptime_s or math.nan))
    return out


def _others(a: Assignment, known: Known, base: Any, wanted: Wanted) -> list[_Option]:
    """Bands, dust values and parallaxes worth weighing."""
    from starfathom.classify.mktype import MKType
    from starfathom.distance.grid import cell_of
    from starfathom.distance.intrinsic import intrinsic

    out = []
    mk = MKType.parse(a.mk_type)
    cell = int(cell_of(mk.t_code, mk.lum_code if math.isfinite(mk.lum_code) else 5.0))
    ebv = float(base.median("ebv"))
    # A(band)/E(B-V), rounded (common practice): only to place a likely magnitude
    per_ebv = {"B": 4.1, "V": 3.1, "I": 1.85, "Ks": 0.35}
    v_band = "V" if "V" in known.magnitudes else next(iter(known.magnitudes))
    first = known.magnitudes[v_band]
    first = float(first[0] if isinstance(first, tuple | list) else first)
    offset = intrinsic().offset
    v = first if v_band == "V" else first - np.nan_to_num(float(offset[v_band][cell]))
    for band, enough in _BANDS:
        value = v + float(offset[band][cell]) + (per_ebv[band] - 3.1) * ebv
        if not any(b in known.magnitudes for b in enough) and math.isfinite(value):
            added = dict(known.magnitudes) | {band: (value, _BAND_ERROR)}
            article = "an" if band == "I" else "a"
            out.append(_Option("band", f"{article} {band} magnitude to {_BAND_ERROR:g} mag",
                               changes={"magnitudes": added}))
    if known.ebv is None or known.ebv[1] > 1.5 * _DUST_ERROR:
        out.append(_Option("dust", f"a value of E(B-V) to {_DUST_ERROR:g} mag, from a map or from neighbours",
                           changes={"ebv": (max(ebv, 0.0), _DUST_ERROR)}))
    parsec = float(base.median("distance_pc"))
    relative = (wanted.distance or DISTANCE_WANTED) / 100 / 1.5
    need = 1000.0 / parsec * relative
    held = known.parallax
    if held is None or held[1] > need:
        out.append(_Option("parallax", f"a parallax good to {need:.2g} mas",
                           changes={"parallax": (1000.0 / parsec, need)}))
    elif held[0] > 3 * held[1]:
        out.append(_Option("parallax", f"the parallax you have ({held[0]:g} ± {held[1]:g} mas), used and not only "
                           "compared", changes={"parallax": held}))
    return out


def advise(assignment: Assignment, fathoming: Fathoming | None = None, wanted: Wanted | str | None = None, *,
           known: Known | None = None, exptime_s: float | None = None, most: int = 4, trials: Trials | None = None
           ) -> list[Advice]:
    """What would help most with one star, best first; empty where nothing is open or nothing tried would help.

    Parameters
    ----------
    assignment : the star's type; ``meta`` may hold ``exptime_s`` and ``range_angstrom`` (lo, hi)
    fathoming : its distance, where there is one
    wanted : the goal, such as "class" or "distance 15%"; both when None
    known : magnitudes and the like, without which nothing is said about the distance
    exptime_s : exposure so far in seconds; else the header's, else times are given as multiples
    most : entries wanted at most
    trials : counts to use instead of the shipped ones
    """
    goal = Wanted.parse(wanted) if isinstance(wanted, str) else wanted or Wanted()
    if assignment.status != "typed" or assignment.posterior is None:
        return []
    now = setup_of(assignment)
    base = fathoming
    far = _percent(base) if base is not None else math.nan
    type_open = needs_advice(assignment, goal) and now is not None
    distance_open = goal.distance is not None and math.isfinite(far) and far > goal.distance and known is not None
    if not type_open and not distance_open:
        return []
    seconds = exptime_s or assignment.meta.get("exptime_s")
    seconds = float(seconds) if seconds and math.isfinite(float(seconds)) and float(seconds) > 0 else None
    options = _spectra(assignment, now, seconds) if now is not None else []
    state = _State.of(assignment, now, trials) if now is not None else None
    if state is not None and state.stars < FEWEST_STARS:      # nobody like it was tried: nothing to promise
        state, options, type_open = None, [], False
    if distance_open and known is not None and known.magnitudes:
        options += _others(assignment, known, base, goal)
    if not options:
        return [_no_spectrum_helps(state)] if type_open and state is not None else []
    gains = [state.then(o.setup) if state is not None and o.setup is not None else None for o in options]
    distances = _distances(assignment, options, gains, known) if distance_open and known is not None else None
    out = [_weigh(o, g, state, None if distances is None else (distances[0], distances[k + 1]), goal,
                  type_open, distance_open) for k, (o, g) in enumerate(zip(options, gains))]
    kept = sorted((x for x in out if x.score >= _LEAST_SCORE and x.effect), key=lambda x: -x.score)
    told = _one_a_kind(kept)[:most]
    if type_open and state is not None and not any(x.setup for x in told):
        told.append(_no_spectrum_helps(state))
    return told


def weigh_spectra(assignment: Assignment, exptime_s: float | None = None, trials: Trials | None = None) -> list[Advice]:
    """Every better spectrum that is weighed for a star, in no order, with its score for the type alone."""
    now = setup_of(assignment)
    if now is None or assignment.status != "typed" or assignment.posterior is None:
        return []
    state = _State.of(assignment, now, trials)
    return [_weigh(o, state.then(o.setup), state, None, Wanted(0.999, None), True, False)
            for o in _spectra(assignment, now, exptime_s) if o.setup is not None]


def _no_spectrum_helps(state: _State) -> Advice:
    """Said where the class is open and nothing tried would close it, so that nobody wastes a night on it."""
    classes = rivals(state.a)
    between = f"{', '.join(classes[:-1])} or {classes[-1]}" if len(classes) > 1 else f"{classes[0]} or not"
    best = max(state.then(state.now.at(snr=_MOST_SNR, fwhm_angstrom=_FINEST_FWHM, range_angstrom=_FULL)).success,
               state.success_now)
    return Advice("none", "a better spectrum of this kind", f"would hardly settle {between}: the class comes out right "
                  f"in {in_ten(best)} such stars even at S/N {_MOST_SNR:.0f}", 0.0, success_now=state.success_now,
                  success_then=best, stars=state.stars)


def _one_a_kind(found: Sequence[Advice]) -> list[Advice]:
    """The best of each kind of action first met; of exposures the two best."""
    out: list[Advice] = []
    for x in found:
        if sum(y.kind == x.kind for y in out) < (2 if x.kind in ("exposure", "range", "band") else 1):
            out.append(x)
    return out


@dataclass(frozen=True)
class _Then:
    success: float
    subtype: float
    mag_err: float


@dataclass(frozen=True)
class _State:
    """A star now, and what the trials expect of it at other set-ups."""

    a: Assignment
    now: Setup
    trials: Trials
    rates: FloatArray
    shares: FloatArray
    step: float
    group: int
    stars: float

    @classmethod
    def of(cls, a: Assignment, now: Setup, trials: Trials | None) -> _State:
        from starfathom.templates.subtypes import step_of

        trials = trials or load_trials()
        step = float(step_of(a.t_code))
        shares = group_shares(a)
        rates = np.array([trials.class_rates(step, g) for g in range(len(GROUPS))])
        stars = float(shares @ [trials.near(step, g).count for g in range(len(GROUPS))])
        return cls(a, now, trials, state_rate(rates, shares), shares, step, int(np.argmax(shares)), stars)

    def _rate(self, setup: Setup) -> float:
        return self.trials.between(self.rates, setup, -1.1)

    def then(self, setup: Setup) -> _Then:
        success = predicted(self.trials, float(self.shares.max()), self._rate(self.now), self._rate(setup))
        before = self.trials.subtype_error(self.step, self.group, self.now)
        ratio = min(1.0, self.trials.subtype_error(self.step, self.group, setup) / before)
        return _Then(success, ratio * self.a.t_code_err, max(0.3, ratio) * self.a.abs_mag_v_err)

    @property
    def success_now(self) -> float:
        return self.then(self.now).success


def _distances(a: Assignment, options: Sequence[_Option], gains: Sequence[_Then | None], known: Known) -> list[float]:
    """Error of the distance in per cent now and after each option, all by the distance step at once."""
    from starfathom.distance import fathom_many

    requests, owner, weight = [_request(a, known)], [0], [1.0]
    shares = group_shares(a)
    for k, (option, gain) in enumerate(zip(options, gains), start=1):
        if option.kind == "parallax":
            continue
        if gain is None:
            requests.append(_request(a, known, **(option.changes or {})))
            owner.append(k)
            weight.append(1.0)
            continue
        for g in np.flatnonzero(shares > 0.05):
            narrow = gain.subtype / max(a.t_code_err, 1e-6)
            requests.append(_request(sharpened(a, int(g), max(gain.success, float(shares.max())), narrow,
                                               gain.mag_err), known))
            owner.append(k)
            weight.append(float(shares[g]))
    percent, share = np.full(len(requests), math.nan), np.array(weight)
    for n_samples in _SAMPLES:       # more where too few of the samples carry the answer
        todo = np.flatnonzero(np.isnan(percent))
        found = fathom_many([requests[k] for k in todo], scale=known.scale, prior=known.prior, n_samples=n_samples,
                            seed=0, with_budget=False, workers=1, common_groups=False)
        percent[todo] = [_percent(f) for f in found]
    out: list[float] = []
    for k in range(len(options) + 1):
        if k and options[k - 1].kind == "parallax":      # two independent distances, weighted
            value, error = (options[k - 1].changes or {})["parallax"]
            out.append(1 / math.hypot(1 / out[0], value / (100 * error)))
            continue
        mine = np.flatnonzero((np.array(owner) == k) & np.isfinite(percent))
        out.append(float(np.average(percent[mine], weights=share[mine])) if mine.size else math.nan)
    return out


def _weigh(option: _Option, gain: _Then | None, state: _State | None, distance: tuple[float, float] | None,
           goal: Wanted, type_open: bool, distance_open: bool) -> Advice:
    """One option with its effect in words and numbers, and its score."""
    gained, words = [], []
    now = then = sub_now = sub_then = math.nan
    if state is not None and gain is not None:
        now, then = state.success_now, max(gain.success, state.success_now)
        sub_now, sub_then = state.a.t_code_err, gain.subtype
        if type_open:
            gained.append((then - now) / max(1 - now, 0.05))
            gained.append(1 - sub_then / sub_now) if sub_now >= 1.5 else None
            told = rivals(state.a)[:2]
            what = f"separates {told[0]} from {told[1]}" if len(told) > 1 else f"finds class {told[0]} rightly"
            if then - now > 0.02:
                words.append(f"{what} in {in_ten(then)} such stars (now {in_ten(now)})")
            if sub_now - sub_then > 0.15:
                words.append(f"subtype ± {sub_now:.1f} → {sub_then:.1f}")
    elif type_open:
        gained.append(0.0)
    far_now, far_then = distance if distance is not None else (math.nan, math.nan)
    if distance_open and math.isfinite(far_then):
        far_then = min(far_then, far_now)
        gain_there = far_now - far_then if far_now - far_then >= 1 else 0.0
        gained.append(gain_there / max(far_now - (goal.distance or 0.0), 3.0))
        if gain_there:
            words.append(f"distance error {far_now:.0f} → {far_then:.0f} %")
    best = float(np.mean(np.clip(gained, 0, 1))) if gained else 0.0
    score = best - _COST * math.log2(max(option.time_factor, 1.0))
    return Advice(option.kind, option.action, "; ".join(words), score, option.setup, option.time_factor,
                  option.extra_seconds, now, then, sub_now, sub_then, far_now, far_then,
                  state.stars if gain is not None and state is not None else math.nan)


def worth(assignment: Assignment, trials: Trials | None = None) -> float:
    """By how much a better spectrum would raise the chance that the class is right, 0 to 1: for ordering stars."""
    now = setup_of(assignment)
    if now is None or not needs_advice(assignment, Wanted()):
        return 0.0
    state = _State.of(assignment, now, trials)
    return max([state.then(o.setup).success - state.success_now for o in _spectra(assignment, now, None) if o.setup]
               + [0.0])


def range_of(spectrum: PlainSpectrum) -> tuple[float, float]:
    """First and last wavelength of a spectrum that hold something, angstrom, for ``meta["range_angstrom"]``."""
    wave = spectrum.wave_angstrom[spectrum.valid]
    return (float(wave[0]), float(wave[-1])) if len(wave) else (math.nan, math.nan)


#: What an observer can do with the telescope.
_AT_TELESCOPE = ("exposure", "resolution", "range", "band", "none")


def _sentence(x: Advice) -> str:
    text = str(x)
    return f"{text[:1].upper()}{text[1:]}."


def summary(found: Sequence[Advice]) -> str:
    """The best advice as a sentence for a table, and the best for the telescope where that is another; "" for none."""
    told = list(found[:1])
    if told and told[0].kind not in _AT_TELESCOPE:
        told += [x for x in found if x.kind in _AT_TELESCOPE][:1]
    return " ".join(_sentence(x) for x in told)


def lines(found: Sequence[Advice]) -> list[str]:
    """The advice as sentences for a terminal or a page, best first."""
    return [_sentence(x) for x in found]


def run_plan(types: str | None = None, fwhm_angstrom: float | None = None, wave_range: str | None = None,
             want: str = "class", as_json: bool = False, figure: str | None = None) -> None:
    """``starfathom plan``: see :mod:`starfathom.advice_plan`."""
    from starfathom.advice_plan import run

    run(types, fwhm_angstrom=fwhm_angstrom, wave_range=wave_range, want=want, as_json=as_json, figure=figure)


__all__ = ["Advice", "Known", "Wanted", "advise", "lines", "needs_advice", "range_of", "run_plan", "summary",
           "weigh_spectra", "worth"]
