"""``starfathom plan``: what S/N and line spread it takes, answered before the night from injected library stars."""

from __future__ import annotations

import json
import math
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from itertools import combinations
from typing import Any

import numpy as np
from numpy.typing import NDArray

from starfathom.advice import Wanted
from starfathom.advice_grid import (
    ABS_MAG,
    ABS_MAG_ERR,
    ABS_MAG_OK,
    FEWEST_STARS,
    GROUPS,
    P_GROUP,
    STEP,
    STEP_ERR,
    WIDEST_FWHM,
    Near,
    Setup,
    Trials,
    coverage_shares,
    group_of,
    load_trials,
    orderly,
)
from starfathom.classify.errors import RequestError

FloatArray = NDArray[np.float64]

DEFAULT_FWHM, DEFAULT_RANGE = 5.0, (3900.0, 6800.0)
#: S/N per angstrom shown in the table, and the finer ladder searched.
SHOWN = (5.0, 10.0, 20.0, 40.0, 100.0)
_SEARCHED = np.geomspace(3.0, 100.0, 181)
TABLE_FWHM = (4.6, 6.5, 9.0, 12.5)
#: Types of the table over the whole diagram.
DIAGRAM = ("B2", "B8", "A2", "A8", "F2", "F8", "G2", "G8", "K2", "K5", "M2")
#: Columns of that table: classes told apart, or single classes for distances.
PAIRS = (("V", "IV"), ("V", "III"), ("III", "Ib"))
SINGLES = (("V",), ("III",), ("Ib",))
_CODES = {"V": 5.0, "IV": 4.0, "III": 3.0, "II": 2.0, "Ib": 1.6}
NOISE = ("S/N is per Å and even along the spectrum. Limited by photons of star or sky, twice the S/N takes four times "
         "the exposure.")


@dataclass(frozen=True)
class Kind:
    """A type asked about: its name, subtype step and class as counted."""

    name: str
    step: float
    lum_code: float

    @property
    def group(self) -> int:
        return group_of(self.lum_code)


def parse_types(text: str) -> list[Kind]:
    """Types from a comma-separated list. Raises RequestError for one that cannot be asked about."""
    from starfathom.classify.mktype import MKType
    from starfathom.templates.subtypes import step_of

    out: list[Kind] = []
    for part in (p.strip() for p in text.split(",")):
        if not part:
            continue
        mk = MKType.parse(part)
        if mk.kind != "star" or not math.isfinite(mk.t_code):
            raise RequestError(f"--types: {part} is not a type on the MK sequence; give types such as G8 III.")
        if not math.isfinite(mk.lum_code):
            raise RequestError(f"--types: {part} has no luminosity class; write it out, such as {part} V.")
        kind = Kind(str(mk), float(step_of(mk.t_code)), float(mk.lum_code))
        if any(abs(k.step - kind.step) < 0.25 and k.group == kind.group for k in out):
            raise RequestError(f"--types: {part} is named twice, or is told from another by a shade of class I alone; "
                               "give types that differ.")
        out.append(kind)
    if not out:
        raise RequestError('--types names no type; give such as --types "G8 III,G8 V", or leave it out for them all.')
    if len(out) > 6:
        raise RequestError(f"--types names {len(out)} types; six at a time are enough.")
    return out


def parse_range(text: str | None) -> tuple[float, float]:
    """A wavelength range in angstrom. Raises RequestError where it is none, or shows nothing of use."""
    if text is None:
        return DEFAULT_RANGE
    low, dash, high = text.strip().partition("-")
    try:
        lo, hi = float(low), float(high)
    except ValueError:
        raise RequestError(f"--range {text}: write two wavelengths in angstrom, such as 3900-6800.") from None
    if not dash or not (math.isfinite(lo) and math.isfinite(hi)) or not 0 < lo < hi:
        raise RequestError(f"--range {text}: the first wavelength must be below the second, such as 3900-6800.")
    seen = min(hi, 6800.0) - max(lo, 3850.0)
    if seen < 300:
        unit = " (angstrom, not nanometres)" if hi < 1200 else ""
        raise RequestError(f"--range {text}: types are told from 3850 to 6800 Å, and at least 300 Å of that must be "
                           f"observed{unit}.")
    return lo, hi


def check_fwhm(fwhm: float | None) -> float:
    """The line spread asked for, or the default."""
    if fwhm is None:
        return DEFAULT_FWHM
    if not math.isfinite(fwhm) or not 0.1 <= fwhm <= WIDEST_FWHM:
        raise RequestError(f"--fwhm {fwhm:g}: typing has been tried from 0.1 to {WIDEST_FWHM:g} Å.")
    return fwhm


# Counting ------------------------------------------------------------------------------------------------------------

@dataclass(frozen=True)
class Curve:
    """Success of a question: ``at`` gives it for a set-up, counted on ``stars`` library stars within ``reach``."""

    label: str
    at: Callable[[Setup], float]
    stars: float
    reach: float


def _counted(near: Near, kind: Kind) -> None:
    if near.count < FEWEST_STARS:
        raise RequestError(f"{kind.name}: fewer than {FEWEST_STARS:.0f} library stars like it could be tried, so "
                           "nothing is known of what it takes.")


def curves_of(trials: Trials, kinds: Sequence[Kind]) -> list[Curve]:
    """One curve for each direction of each pair of rivals; for a single type, its class against all others."""
    out = []
    if len(kinds) == 1:
        kind = kinds[0]
        near = trials.near(kind.step, kind.group)
        _counted(near, kind)
        return [Curve(f"{kind.name} given class {GROUPS[kind.group]}",
                      lambda s: trials.class_rate(kind.step, kind.group, s), near.count, near.reach)]
    for pair in combinations(kinds, 2):
        for own, other in (pair, pair[::-1]):
            rates, near = trials.pair_rates(own.step, own.group, other.step, other.group)
            _counted(near, own)
            out.append(Curve(f"{own.name} not taken for {other.name}",
                             lambda s, r=rates: trials.pair_rate(r, s), near.count, near.reach))  # type: ignore[misc]
    return out


def success(curves: Sequence[Curve], setup: Setup) -> float:
    """The success that counts: the mean of the two ways a pair can be mistaken, the worst of all pairs."""
    values = [c.at(setup) for c in curves]
    if len(values) == 1:
        return values[0]
    return min((values[k] + values[k + 1]) / 2 for k in range(0, len(values), 2))


def snr_needed(reaches: Callable[[Setup], float], setup: Setup, goal: float) -> float | None:
    """Least S/N per angstrom at which ``reaches`` is at least ``goal``; None when even 100 does not do."""
    for snr in _SEARCHED:
        if reaches(setup.at(snr=float(snr))) >= goal - 1e-9:
            return float(snr)
    return None


def distance_errors(trials: Trials, kind: Kind, range_angstrom: tuple[float, float], fwhm: Sequence[int],
                    most: int = 10) -> FloatArray:
    """Error of the distance in per cent at each line spread (indices ``fwhm``) and S/N tried, for stars like a type.

    The library stars most like the type are taken with what the classifier said of them, their brightness put at
    V = 10 with B, both to 0.02 mag, and the dust known to 0.03 mag; the middle of their errors is given, made to fall
    with S/N and to rise with the line spread.
    """
    from starfathom.distance import Request, fathom_many

    near = trials.near(kind.step, kind.group)
    _counted(near, kind)
    rows = np.argsort(-near.weight, kind="stable")[:most]
    rows = rows[near.weight[rows] > 0.02]
    blue, red = coverage_shares(range_angstrom)
    c = int(np.argmax([blue * red, blue * (1 - red), red * (1 - blue)]))
    photometry = _colours(kind)
    requests, place = [], []
    for at, f in enumerate(fwhm):
        for i in rows:
            for s in range(len(trials.snr)):
                made = _assignment(trials, int(i), f, c, s, kind)
                if made is not None:
                    requests.append(Request(made, photometry, ebv=(0.05, 0.03)))
                    place.append((at, s))
    found = fathom_many(requests, n_samples=200, seed=0, with_budget=False, workers=1, common_groups=False)
    percent, where = np.array([_percent_of(x) for x in found]), np.array(place)
    table = np.full((len(fwhm), len(trials.snr)), 200.0)
    for at in range(len(fwhm)):
        for s in range(len(trials.snr)):
            mine = (where[:, 0] == at) & (where[:, 1] == s) & np.isfinite(percent)
            if mine.any():
                table[at, s] = float(np.median(percent[mine]))
    return -orderly(-table)


def _percent_of(f: Any) -> float:
    if not hasattr(f, "percentiles"):
        return math.nan
    low, middle, high = f.percentiles["distance_pc"][1:4]
    return float(50 * (high - low) / middle)


def _assignment(trials: Trials, i: int, f: int, c: int, s: int, kind: Kind) -> Any:
    """What the classifier said of an injected star, moved to the type asked about."""
    from starfathom.classify.assignment import Assignment
    from starfathom.templates.subtypes import CLASSES, STEPS, t_code_from_step

    o = trials.outcome[i, f, c, s]
    if not np.isfinite(o[STEP]):
        return None
    member = np.array([GROUPS.index(x) if x in GROUPS else 0 for x in CLASSES])
    own = np.array([1.0 if x in ("II", "III", "IV", "V") else 0.0 for x in CLASSES])
    own[CLASSES.index("Ib")] = 1.0      # supergiants are counted together; the class asked about stands for them
    if kind.group == 0:
        own[:4] = 0.0
        own[int(np.argmin(np.abs(np.array((0.0, 1.0, 1.3, 1.6)) - kind.lum_code)))] = 1.0
    across = np.nan_to_num(o[P_GROUP])[member] * own
    centre = kind.step + float(o[STEP] - trials.step[i])
    along = np.exp(-0.5 * ((STEPS - centre) / max(float(o[STEP_ERR]), 0.4)) ** 2)
    p = np.outer(along, across)
    if not p.sum() > 0:
        return None
    shift = _scale_mag(kind.step, kind.lum_code) - _scale_mag(float(trials.step[i]), float(trials.lum_code[i]))
    return Assignment(status="typed", object_kind="star", mk_type=kind.name, t_code=float(t_code_from_step(centre)),
                      lum_code=kind.lum_code, posterior=p / p.sum(), abs_mag_v=float(o[ABS_MAG]) + shift,
                      abs_mag_v_err=float(o[ABS_MAG_ERR]), abs_mag_v_ok=bool(o[ABS_MAG_OK] > 0.5))


def _scale_mag(step: float, lum_code: float) -> float:
    """Absolute magnitude of a type on the distance scale."""
    from starfathom.distance import load_scale
    from starfathom.distance.grid import cell_of
    from starfathom.templates.subtypes import t_code_from_step

    return float(load_scale().mean[int(cell_of(float(t_code_from_step(step)), lum_code))])


def _colours(kind: Kind) -> Any:
    from starfathom.distance import Photometry
    from starfathom.distance.grid import cell_of
    from starfathom.distance.intrinsic import intrinsic
    from starfathom.templates.subtypes import t_code_from_step

    cell = int(cell_of(float(t_code_from_step(kind.step)), kind.lum_code))
    b_v = float(intrinsic().offset["B"][cell]) + 0.05
    return Photometry({"V": (10.0, 0.02)} | ({"B": (10.0 + b_v, 0.02)} if math.isfinite(b_v) else {}))


def _distance_curve(trials: Trials, kinds: Sequence[Kind], range_angstrom: tuple[float, float],
                    near_fwhm: float | None = None) -> Callable[[Setup], float]:
    """Minus the error of the distance (so that more is better), the worst of the types, at any line spread and S/N.

    ``near_fwhm`` looks at the line spread next to it alone, which is quicker.
    """
    which = list(range(len(trials.fwhm)))
    if near_fwhm is not None:
        which = [int(np.argmin(np.abs(np.log(trials.fwhm / near_fwhm))))]
    many = 10 if near_fwhm is None else 4
    worst = np.max([distance_errors(trials, k, range_angstrom, which, many) for k in kinds], axis=0)
    snr, width = np.log(trials.snr), np.log(trials.fwhm[which])

    def at(s: Setup) -> float:
        column = [np.interp(math.log(max(s.snr, 1e-3)), snr, row) for row in worst]
        return -float(np.interp(math.log(s.fwhm_angstrom), width, column))

    return at


# The answer ----------------------------------------------------------------------------------------------------------

def plan(types: str | None, *, fwhm_angstrom: float | None = None, wave_range: str | None = None, want: str = "class",
         trials: Trials | None = None) -> dict[str, Any]:
    """What S/N it takes: a dict ready for JSON. ``snr_needed`` is per angstrom, None when no S/N tried reaches it.

    Raises
    ------
    RequestError : types, range, line spread or goal that cannot be asked about, in one sentence
    """
    goal, fwhm, wave = Wanted.parse(want), check_fwhm(fwhm_angstrom), parse_range(wave_range)
    trials = trials or load_trials()
    setup = Setup(fwhm, wave, 30.0)
    head: dict[str, Any] = {"want": want.strip(), "fwhm_angstrom": fwhm, "range_angstrom": list(wave), "noise": NOISE}
    if goal.distance is None:
        head["success_wanted"] = goal.success
    else:
        head["distance_percent_wanted"] = goal.distance
    if types is None:
        return head | _diagram(trials, setup, goal)
    kinds = parse_types(types)
    head["types"] = [k.name for k in kinds]
    widths = sorted({*TABLE_FWHM, fwhm})
    if goal.distance is None:
        curves = curves_of(trials, kinds)

        def reach(s: Setup) -> float:
            return success(curves, s)

        table = [{"fwhm_angstrom": w, "snr_needed": snr_needed(reach, setup.at(fwhm_angstrom=w), goal.success),
                  "success": {f"{s:g}": reach(setup.at(fwhm_angstrom=w, snr=s)) for s in SHOWN}} for w in widths]
        head |= {"snr_needed": snr_needed(reach, setup, goal.success), "by_fwhm": table,
                 "curves": [{"question": c.label, "stars": round(c.stars, 1), "within_subtypes": c.reach,
                             "success": {f"{s:g}": c.at(setup.at(snr=s)) for s in SHOWN}} for c in curves]}
        best = reach(setup.at(snr=100.0))
        if head["snr_needed"] is None:
            head["reason"] = (f"At S/N 100 per Å {100 * best:.0f} % come out right, not the "
                              f"{100 * goal.success:.0f} % asked for; more exposure alone will not do.")
    else:
        table = []
        curve = _distance_curve(trials, kinds, wave)
        for w in widths:
            own = setup.at(fwhm_angstrom=w)
            table.append({"fwhm_angstrom": w, "snr_needed": snr_needed(curve, own, -goal.distance),
                          "distance_percent": {f"{s:g}": -curve(own.at(snr=s)) for s in SHOWN}})
        mine = next(t for t in table if t["fwhm_angstrom"] == fwhm)
        head |= {"snr_needed": mine["snr_needed"], "by_fwhm": table,
                 "assumes": "B and V to 0.02 mag, dust known to 0.03 mag in E(B-V), no parallax"}
        if head["snr_needed"] is None:
            left = mine["distance_percent"]["100"]  # type: ignore[index]
            head["reason"] = (f"At S/N 100 per Å the distance is still good to {left:.0f} %, not the "
                              f"{goal.distance:g} % asked for: stars of one type differ by that much. A parallax "
                              "would do.")
    head["trials"] = int(np.isfinite(trials.step).sum()) * int(np.prod(trials.outcome.shape[1:4]))
    return head


def _diagram(trials: Trials, setup: Setup, goal: Wanted) -> dict[str, Any]:
    """The S/N needed over the whole H-R diagram: for each pair of classes of a subtype, or each class."""
    from starfathom.templates.subtypes import step_of, t_code_of

    rows = []
    for name in DIAGRAM:
        step = float(step_of(t_code_of(name)))
        for column in (PAIRS if goal.distance is None else SINGLES):
            kinds = [Kind(f"{name} {lum}", step, _CODES[lum]) for lum in column]
            stars = min(trials.near(k.step, k.group).count for k in kinds)
            entry: dict[str, Any] = {"types": [k.name for k in kinds], "stars": round(stars, 1), "snr_needed": None,
                                     "best": None}
            if stars >= FEWEST_STARS:
                if goal.distance is None:
                    curves = curves_of(trials, kinds)
                    reach: Callable[[Setup], float] = lambda s, c=curves: success(c, s)  # type: ignore[misc]  # noqa: E731
                    entry |= {"snr_needed": snr_needed(reach, setup, goal.success), "best": reach(setup.at(snr=100.0))}
                else:
                    reach = _distance_curve(trials, kinds, setup.range_angstrom, setup.fwhm_angstrom)
                    entry |= {"snr_needed": snr_needed(reach, setup, -goal.distance),
                              "best": -reach(setup.at(snr=100.0))}
                entry["subtype_error"] = trials.subtype_error(kinds[0].step, kinds[0].group, setup)
            rows.append(entry)
    return {"diagram": rows, "subtype_error_at_snr": setup.snr}


# In words ------------------------------------------------------------------------------------------------------------

def _snr(value: float | None) -> str:
    """An S/N for a table; the lowest tried may be more than is needed."""
    return "none" if value is None else f"{value:.0f}" if value > _SEARCHED[0] + 0.01 else f"{value:.0f} or less"


def text_of(answer: dict[str, Any]) -> str:
    """The answer as lines for the terminal."""
    lo, hi = answer["range_angstrom"]
    where = f"FWHM {answer['fwhm_angstrom']:g} Å, {lo:.0f}-{hi:.0f} Å"
    if "diagram" in answer:
        return _diagram_text(answer, where)
    by_class = "success_wanted" in answer
    types = " against ".join(answer["types"])
    needed = answer["snr_needed"]
    goal = f"{100 * answer['success_wanted']:.0f} % right" if by_class \
        else f"the distance to {answer['distance_percent_wanted']:g} %"
    say = [f"{types}, {where}"]
    say += _wrapped(f"To have {goal}: S/N {_snr(needed)} per Å." if needed is not None else answer["reason"])
    say += ["", "  " + ("Right, of 100 stars" if by_class else "Error of the distance, per cent")]
    key = "success" if by_class else "distance_percent"
    say.append("  FWHM, Å   " + "".join(f"{f'S/N {s:g}':>9}" for s in SHOWN) + "   S/N needed")
    for row in answer["by_fwhm"]:
        values = [row[key][f"{s:g}"] * (100 if by_class else 1) for s in SHOWN]
        mark = "  <- yours" if row["fwhm_angstrom"] == answer["fwhm_angstrom"] else ""
        say.append(f"  {row['fwhm_angstrom']:<10g}" + "".join(f"{v:>9.0f}" for v in values)
                   + f"   {_snr(row['snr_needed']):>10}{mark}")
    if by_class:
        say.append("")
        for c in answer["curves"]:
            at = c["success"]
            say.append(f"  {c['question']}: {100 * at['10']:.0f} of 100 at S/N 10, {100 * at['40']:.0f} at 40 "
                       f"({c['stars']:.0f} stars within {c['within_subtypes'] * 2:.0f} subtypes)")
    taken = "" if by_class else f" Taken: {answer['assumes']}."
    say += ["", *_wrapped(answer["noise"] + taken + " Counted on library stars made worse and put through the "
                          "classifier, which had not learned them.")]
    return "\n".join(say)


def _cells(answer: dict[str, Any]) -> tuple[list[str], list[list[dict[str, Any]]]]:
    """Column heads and rows of the table over the diagram."""
    columns = PAIRS if "success_wanted" in answer else SINGLES
    heads = [" or ".join(c).replace("Ib", "I") for c in columns]
    n = len(columns)
    return heads, [answer["diagram"][k:k + n] for k in range(0, len(answer["diagram"]), n)]


def _diagram_text(answer: dict[str, Any], where: str) -> str:
    by_class = "success_wanted" in answer
    goal = f"two classes told apart in {100 * answer['success_wanted']:.0f} %" if by_class \
        else f"the distance to {answer['distance_percent_wanted']:g} %"
    heads, rows = _cells(answer)
    at = answer["subtype_error_at_snr"]
    say = [f"S/N per Å it takes to have {goal}; {where}", "",
           f"  {'':6}" + "".join(f"{h:>15}" for h in heads) + f"   subtype at S/N {at:.0f}"]
    for name, row in zip(DIAGRAM, rows):
        cells = []
        for cell in row:
            if cell["best"] is None:
                cells.append("not tried")
            elif cell["snr_needed"] is None:
                cells.append(f"- ({100 * cell['best']:.0f} %)" if by_class else f"- ({cell['best']:.0f} %)")
            else:
                cells.append(_snr(cell["snr_needed"]))
        error = row[0].get("subtype_error")
        say.append(f"  {name:6}" + "".join(f"{c:>15}" for c in cells) + (f"   ± {error:.1f}" if error else ""))
    best = "how many come out right at S/N 100" if by_class else "what S/N 100 leaves"
    say += ["", *_wrapped(f"- (..): no S/N up to 100 does it; in brackets {best}. {answer['noise']}")]
    return "\n".join(say)


def _wrapped(text: str) -> list[str]:
    import textwrap

    return textwrap.wrap(text, 86, initial_indent="  ", subsequent_indent="  ")


# The picture ---------------------------------------------------------------------------------------------------------

def draw(answer: dict[str, Any], path: str, trials: Trials | None = None) -> None:
    """The answer as a picture (.png, .pdf or .svg). Raises RequestError where it cannot be written."""
    import matplotlib

    matplotlib.use("Agg")
    from matplotlib import pyplot as plt

    if not path.lower().endswith((".png", ".pdf", ".svg")):
        raise RequestError(f"--figure {path}: give a name that ends in .png, .pdf or .svg.")
    with plt.rc_context({"font.size": 10, "axes.spines.top": False, "axes.spines.right": False}):
        figure, ax = plt.subplots(figsize=(7.2, 5.2), layout="constrained")
        if "diagram" in answer:
            _draw_diagram(answer, ax, figure)
        else:
            _draw_curves(answer, ax, trials or load_trials())
        try:
            figure.savefig(path, dpi=150)
        except OSError as error:
            raise RequestError(f"--figure {path}: cannot be written ({error.strerror or error}).") from None
        finally:
            plt.close(figure)


def _draw_curves(answer: dict[str, Any], ax: Any, trials: Trials) -> None:
    by_class = "success_wanted" in answer
    kinds = parse_types(",".join(answer["types"]))
    base = Setup(answer["fwhm_angstrom"], tuple(answer["range_angstrom"]), 30.0)
    x = np.geomspace(3, 100, 60)
    reach = curves_of(trials, kinds) if by_class else None
    shades = ("#0b3c5d", "#328cc1", "#d9812e", "#a23b2a", "#666666")
    for colour, row in zip(shades, answer["by_fwhm"]):
        width = row["fwhm_angstrom"]
        if by_class and reach is not None:
            y = [100 * success(reach, base.at(fwhm_angstrom=width, snr=float(s))) for s in x]
        else:
            known = row["distance_percent"]
            y = list(np.interp(np.log(x), np.log([float(s) for s in known]), list(known.values())))
        own = width == answer["fwhm_angstrom"]
        ax.plot(x, y, color=colour, lw=2.6 if own else 1.2, label=f"FWHM {width:g} Å" + (" (yours)" if own else ""))
    goal = 100 * answer["success_wanted"] if by_class else answer["distance_percent_wanted"]
    ax.axhline(goal, color="0.4", lw=1, ls="--")
    ax.text(3.05, goal, " wanted", va="bottom", color="0.3")
    needed = answer["snr_needed"]
    if needed is not None:
        ax.plot([needed], [goal], "o", ms=9, mfc="white", mec="black", zorder=5)
        ax.annotate(f"S/N {needed:.0f}", (needed, goal), xytext=(8, -16), textcoords="offset points", weight="bold")
    ax.set_xscale("log")
    ax.set_xticks([3, 5, 10, 20, 50, 100], ["3", "5", "10", "20", "50", "100"])
    ax.minorticks_off()
    ax.set_xlabel("S/N per Å")
    ax.set_ylabel("right, of 100 stars" if by_class else "error of the distance, per cent")
    ax.set_ylim((45, 101) if by_class and min(ax.get_ylim()) > 45 else (0, None))
    lo, hi = answer["range_angstrom"]
    ax.set_title(f"{' against '.join(answer['types'])}, {lo:.0f}-{hi:.0f} Å", loc="left")
    ax.legend(frameon=False)
    ax.grid(alpha=0.2)


def _draw_diagram(answer: dict[str, Any], ax: Any, figure: Any) -> None:
    from matplotlib.colors import LogNorm

    by_class = "success_wanted" in answer
    heads, rows = _cells(answer)
    table = np.array([[row[r]["snr_needed"] or math.nan for row in rows] for r in range(len(heads))], float)
    shown = ax.imshow(table, aspect="auto", cmap="viridis_r", norm=LogNorm(3, 100))
    for k, row in enumerate(rows):
        for r, cell in enumerate(row):
            if cell["snr_needed"] is not None:
                dark = cell["snr_needed"] > 25
                ax.text(k, r, f"{cell['snr_needed']:.0f}", ha="center", va="center", color="white" if dark else "black")
            else:
                best = cell["best"]
                words = "not\ntried" if best is None else f"at best\n{100 * best if by_class else best:.0f} %"
                ax.text(k, r, words, ha="center", va="center", color="0.45", fontsize=8)
    ax.set_xticks(range(len(DIAGRAM)), DIAGRAM)
    ax.set_yticks(range(len(heads)), heads)
    for side in ax.spines.values():
        side.set_visible(False)
    lo, hi = answer["range_angstrom"]
    goal = f"classes told apart in {100 * answer['success_wanted']:.0f} %" if by_class \
        else f"distance to {answer['distance_percent_wanted']:g} %"
    ax.set_title(f"S/N per Å needed: {goal}\nFWHM {answer['fwhm_angstrom']:g} Å, {lo:.0f}-{hi:.0f} Å", loc="left")
    bar = figure.colorbar(shown, ax=ax, orientation="horizontal", shrink=0.6, pad=0.08, label="S/N per Å")
    bar.set_ticks([3, 10, 30, 100], labels=["3", "10", "30", "100"])
    bar.ax.minorticks_off()


def run(types: str | None, *, fwhm_angstrom: float | None = None, wave_range: str | None = None, want: str = "class",
        as_json: bool = False, figure: str | None = None) -> None:
    """The command: print the answer, draw it where asked."""
    answer = plan(types, fwhm_angstrom=fwhm_angstrom, wave_range=wave_range, want=want)
    if figure:
        draw(answer, figure)
    if as_json:
        print(json.dumps(answer, ensure_ascii=False, indent=1))
        return
    text = text_of(answer) + (f"\n  Picture: {figure}" if figure else "")
    try:
        print(text)
    except UnicodeEncodeError:
        print(text.replace("Å", "A").replace("→", "->").replace("±", "+-").encode("ascii", "replace").decode())
