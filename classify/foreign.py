"""What is not a normal star: told apart before a normal type is given.

A spectrum is held, in the coarse view of :mod:`starfathom.classify.foreign_library`, against every library star and
against examples of white dwarfs, hot subdwarfs, carbon stars, Wolf-Rayet stars, L dwarfs, galaxies and quasars, and
against no feature at all. Each comparison is a chi-squared with the noise and a floor for what differs between
instruments; the nearest example wins only by a clear margin. Galaxies and quasars are searched over redshift, but only
where no star fits. What fits nothing is refused as ``unknown``.
"""

from __future__ import annotations

import re
from collections.abc import Sequence
from dataclasses import dataclass, replace
from functools import lru_cache
from itertools import pairwise
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from starfathom.classify.alignment import telluric_free
from starfathom.classify.assignment import Assignment
from starfathom.classify.composite import Pair, PairFinder
from starfathom.classify.foreign_library import (
    COARSE_WAVE,
    COMMON,
    LN_COARSE_STEP,
    VIEW_FLOOR,
    View,
    load_examples,
    rectify_coarse,
    view_of,
    view_of_coarse,
)
from starfathom.classify.oddities import chemically_peculiar, h_alpha_emission
from starfathom.classify.surface import Match

if TYPE_CHECKING:
    from starfathom.classify.engine import PreparedBatch

FloatArray = NDArray[np.float64]
BoolArray = NDArray[np.bool_]

#: Coarse pixels in which late M and L dwarfs are told apart: 6600 to 9150 A without the telluric bands.
RED = np.flatnonzero((COARSE_WAVE > 6600.0) & (COARSE_WAVE < 9150.0) & telluric_free(COARSE_WAVE)
                     & ((COARSE_WAVE < 7590.0) | (COARSE_WAVE > 7640.0))
                     & ((COARSE_WAVE < 8130.0) | (COARSE_WAVE > 8350.0)) & (COARSE_WAVE < 8950.0))

#: The nearest foreign example must be nearer than this share of the distance of the nearest star ...
_RATIO = 0.9
#: ... by at least this much chi-squared.
_GAIN = 12.0
#: Chi-squared a pixel within which the example of a hot subdwarf fits by itself.
_RELATION_FITS = 1.5
#: A pair of stars is sought above this chi-squared a pixel of the nearest star, and is flagged ``composite`` when it
#: comes below this share of it, by at least this much, and below this share of the nearest foreign example.
_PAIR_ABOVE, _PAIR_RATIO, _PAIR_GAIN, _PAIR_OTHER = 0.6, 0.55, 100.0, 0.4
#: Within this ratio the foreign example is no worse than a tie: flagged ``kind-doubtful``.
_DOUBT = 1.1
#: Less than this in chi-squared between the nearest star and no feature at all: nothing stands above the noise.
_FEATURE_GAIN = 15.0
#: Nothing fits: share of the structure left by the alignment node, chi-squared a pixel of the nearest star and of the
#: template surface. Met by no normal library star that is not an extreme emission object.
_STRANGE_UNEXPLAINED, _STRANGE_STAR, _STRANGE_SURFACE = 0.8, 1.2, 0.75
_STRANGE_EMISSION = 6.0      # with H alpha in emission and the Balmer lines left out
#: Swan bands of C2, step across the head in the coarse view: where 4737 and 5165 are both seen, and one alone. Normal
#: stars reach 0.06, a barium star 0.11.
_SWAN_PAIR, _SWAN_ALONE = 0.14, 0.3
#: Height of the broad emission blend at 4630-4710 A (N III, C III, He II) of a Wolf-Rayet star.
_WR_HEIGHT = 0.12
#: Above this chi-squared a pixel of the nearest star, redshifts are searched.
_SEARCH_ABOVE = 1.2
_SEARCH_UNEXPLAINED = 0.75
_MIN_COMMON = 0.6
_SHIFTS = (-2, 0, 2)            # of 300 km/s: foreign examples against a velocity found with normal stars
_NEAR_SHIFTS = (-3, -2, -1, 0, 1, 2, 3)
_Z_STEP = 2                      # coarse pixels, 600 km/s
_Z_MAX = {"galaxy": 0.8, "quasar": 4.5}
#: How much weaker or stronger than the example the features of a foreign object may be.
_STRENGTH = (0.6, 1.5)


@dataclass(frozen=True)
class Verdict:
    """What the comparison says of n spectra.

    ``star`` and ``other`` are chi-squared of the nearest star and of the nearest foreign example over ``pixels``
    pixels, ``flat`` that of no feature at all; ``kind``, ``label``, ``name`` describe the foreign example, ``redshift``
    its redshift where it was searched (else 0).
    """

    star: FloatArray
    star_label: list[str]
    other: FloatArray
    flat: FloatArray
    pixels: FloatArray
    kind: list[str]
    label: list[str]
    name: list[str]
    redshift: FloatArray


@dataclass(frozen=True)
class _Bank:
    """Examples ready to compare: depth and mask over COMMON."""

    depth: NDArray[np.float32]
    valid: NDArray[np.float32]
    square: NDArray[np.float32]
    whole: NDArray[np.float32]      # over the whole coarse grid, to be rectified again over part of it
    whole_valid: BoolArray
    owner: NDArray[np.int64]        # row of the example each came from
    partner: NDArray[np.int64]      # and of the one it was mixed with, else the same
    steps: NDArray[np.int64]        # shift or redshift, coarse pixels

    @classmethod
    def of(cls, depth: NDArray[Any], valid: BoolArray, owner: NDArray[np.int64], partner: NDArray[np.int64],
           steps: NDArray[np.int64]) -> _Bank:
        d = depth.astype(np.float32)
        near = np.where(valid, d, np.float32(0))[:, COMMON]
        return cls(near, valid[:, COMMON].astype(np.float32), near ** 2, d, valid, owner, partner, steps)

    def within(self, reach: BoolArray) -> _Bank:
        """The same with the pseudo-continuum drawn over ``reach`` only, as it is for a partial spectrum."""
        ok = self.whole_valid & reach
        depth, _ = rectify_coarse(np.where(ok, self.whole + 1.0, 0.0).astype(float), ok)
        return _Bank.of(np.clip(depth, -1, 1), ok, self.owner, self.partner, self.steps)


def _shifted(depth: NDArray[np.float32], valid: BoolArray, step: int) -> tuple[NDArray[np.float32], BoolArray]:
    d, v = np.roll(depth, step), np.roll(valid, step)
    if step > 0:
        v[:step] = False
    elif step < 0:
        v[step:] = False
    return d, v


_BALMER_FREE = np.ones(len(COARSE_WAVE), bool)
for _line, _half in ((6562.8, 60.0), (4861.3, 45.0), (4340.5, 35.0)):
    _BALMER_FREE &= np.abs(COARSE_WAVE - _line) > _half


class Judge:
    """Stars and foreign examples, less what was left out.

    Parameters
    ----------
    without_libraries, without_stars : as for the classifier
    without_names : examples to leave out by name (for honest tests)
    """

    def __init__(self, without_libraries: Sequence[str] = (), without_stars: Sequence[int] = (),
                 without_names: Sequence[str] = ()) -> None:
        near, far = load_examples()
        near = near.without(without_libraries, without_stars, without_names)
        is_star = near.kind == "star"
        self.stars = near.select(is_star)
        self.others = near.select(~is_star)
        self.far = far
        self.far_rows = np.flatnonzero(~np.isin(far.source, list(without_libraries))
                                       & ~np.isin(far.name, list(without_names)))
        count = np.arange(len(self.stars))
        self._star_bank = _Bank.of(self.stars.depth, self.stars.valid, count, count, np.zeros(len(count), np.int64))
        self._near_bank = self._make_near()
        cool = np.array([bool(re.match(r"[KM]", t)) for t in self.stars.label])
        cool &= self.stars.valid[:, RED].mean(axis=1) > 0.9
        red, l_dwarfs = self.stars.select(cool), self.others.select(self.others.kind == "L dwarf")
        self._red_depth, self._red_valid, self._red_kind, self._red_label = (
            np.concatenate([getattr(red, f), getattr(l_dwarfs, f)]) for f in ("depth", "valid", "kind", "label"))
        self.pairs = PairFinder(self.stars)
        self._far_bank: _Bank | None = None
        self._partial: dict[tuple[str, bytes], _Bank] = {}

    def _make_near(self) -> _Bank:
        """Foreign examples at rest, shifted by up to 900 km/s, with galaxies and DA white dwarfs between examples."""
        rows: list[tuple[NDArray[np.float32], BoolArray, int, int, int]] = []
        gal = [int(k) for k in self.far_rows if self.far.kind[k] == "galaxy"]
        pairs = [(j, k) for j in gal for k in gal if j < k and self.far.source[j] == self.far.source[k] == "sdss"]
        o, count = self.others, len(self.others)
        dwarfs = sorted((k for k in range(count) if re.fullmatch(r"DA[\d.]+", str(o.label[k]))),
                        key=lambda k: float(o.label[k][2:]))
        for shift in _NEAR_SHIFTS:
            for k in range(count):
                rows.append((*_shifted(o.depth[k], o.valid[k], shift), k, k, shift))
            for j, k in pairwise(dwarfs):
                middle, both = 0.5 * (o.depth[j] + o.depth[k]), o.valid[j] & o.valid[k]
                rows.append((*_shifted(middle, both, shift), k, j, shift))
        mixed = [(j, k, shift) for shift in _NEAR_SHIFTS for j, k in [(k, k) for k in gal] + pairs]
        if mixed:
            rows.extend((d, v, count + k, count + j, shift)
                        for d, v, (j, k, shift) in zip(*self._far_views(mixed), mixed))
        depth, valid, owner, partner, steps = zip(*rows)
        return _Bank.of(np.array(depth), np.array(valid), np.array(owner), np.array(partner), np.array(steps))

    def _far_views(self, mixed: list[tuple[int, int, int]]) -> tuple[NDArray[np.float32], BoolArray]:
        """Views of the sum of two far examples each, shifted by coarse pixels."""
        fluxes, masks = [], []
        for first, second, steps in mixed:
            (one, seen), (two, seen_too) = self.far.at(first, steps), self.far.at(second, steps)
            both = seen & seen_too
            masks.append(both)
            fluxes.append(np.where(both, one / np.median(one[both]) + two / np.median(two[both]), 0.0))
        ok = np.array(masks)
        view = view_of_coarse(np.array(fluxes), ok, np.zeros(ok.shape), np.full(len(ok), 10.0))
        return view.depth, view.valid

    @property
    def far_bank(self) -> _Bank:
        """Every galaxy and quasar at every redshift (made on first use, some 0.3 s)."""
        if self._far_bank is None:
            flux, valid, owner, steps = [], [], [], []
            for k in self.far_rows:
                top = int(np.log1p(_Z_MAX[str(self.far.kind[k])]) / LN_COARSE_STEP)
                for step in range(4, top, _Z_STEP):
                    f, v = self.far.at(int(k), step)
                    if v[COMMON].mean() > 0.7:
                        flux.append(f)
                        valid.append(v)
                        owner.append(len(self.others) + k)
                        steps.append(step)
            ok = np.array(valid)
            view = view_of_coarse(np.array(flux), ok, np.zeros(ok.shape), np.full(len(ok), 10.0))
            self._far_bank = _Bank.of(view.depth, view.valid, np.array(owner), np.array(owner), np.array(steps))
        return self._far_bank

    def _bank(self, which: str, reach: BoolArray | None) -> _Bank:
        bank = {"star": lambda: self._star_bank, "near": lambda: self._near_bank, "far": lambda: self.far_bank}[which]()
        if reach is None:
            return bank
        key = (which, reach.tobytes())
        if key not in self._partial:
            # a bank over part of the range weighs up to a hundred megabytes: keep few, and of the redshifts only one
            for old in [k for k in self._partial if k[0] == which == "far"]:
                del self._partial[old]
            while len(self._partial) >= 6:
                del self._partial[next(iter(self._partial))]
            self._partial[key] = bank.within(reach)
        return self._partial[key]

    def _blank_foreign(self, chi2: FloatArray, bank: _Bank, exclude: Sequence[frozenset[str]]) -> None:
        names = np.concatenate([self.others.name, self.far.name])
        for row, drop in zip(chi2, exclude):
            out = np.isin(names, list(drop))
            row[out[bank.owner] | out[bank.partner]] = 1e12

    def _about(self, owner: int) -> tuple[str, str, str]:
        if owner < len(self.others):
            o = self.others
            return str(o.kind[owner]), str(o.label[owner]), str(o.name[owner])
        k = owner - len(self.others)
        return str(self.far.kind[k]), "", str(self.far.name[k])

    def red_kind(self, view: View) -> list[tuple[str, str]]:
        """Kind and label of the nearest example over 6600 to 9150 A; empty where little of that is there.

        Only there L dwarfs show anything: bluer than that they have next to no light.
        """
        reach = self._red_valid[:, RED].mean(axis=1) > 0.9
        depth, valid = self._red_depth[reach][:, RED], self._red_valid[reach][:, RED].astype(np.float32)
        kinds, labels = self._red_kind[reach], self._red_label[reach]
        y, ok = view.depth[:, RED], view.valid[:, RED]
        w = (ok / (view.sigma[:, RED] ** 2 + np.float32(VIEW_FLOOR ** 2))).astype(np.float32)
        d = (w * y * y) @ valid.T - 2 * (w * y) @ (depth * valid).T + w @ (depth * depth * valid).T
        best = d.argmin(axis=1)
        return [(str(kinds[k]), str(labels[k])) if seen > 0.8 else ("", "") for k, seen in zip(best, ok.mean(axis=1))]

    def compare(self, view: View, unexplained: FloatArray, exclude: Sequence[frozenset[str]] | None = None) -> Verdict:
        """Hold n spectra against everything.

        ``unexplained`` (n,) is the share of the spectrum's structure that the nearest alignment node leaves, which
        says where to search redshifts. ``exclude`` (one set of names a spectrum) is for honest tests.
        """
        n = len(view.depth)
        out: dict[str, Any] = {"star": np.zeros(n), "other": np.zeros(n), "flat": np.zeros(n), "pixels": np.zeros(n),
                               "redshift": np.zeros(n), "star_label": [""] * n, "kind": [""] * n, "label": [""] * n,
                               "name": [""] * n}
        groups: dict[bytes, list[int]] = {}
        for i in range(n):
            groups.setdefault(_reach_key(view.valid[i]), []).append(i)
        for key, members in groups.items():
            rows = np.array(members)
            reach = np.frombuffer(key, bool) if key else None
            self._compare_group(view[rows], rows, reach, out, unexplained[rows],
                                [exclude[i] for i in rows] if exclude else None)
        return Verdict(**out)

    def _compare_group(self, view: View, rows: NDArray[np.int64], reach: BoolArray | None, out: dict[str, Any],
                       unexplained: FloatArray, exclude: Sequence[frozenset[str]] | None) -> None:
        y, ok = view.depth[:, COMMON], view.valid[:, COMMON]
        w = (ok / (view.sigma[:, COMMON] ** 2 + np.float32(VIEW_FLOOR ** 2))).astype(np.float32)
        star = _chi2(y, w, self._bank("star", reach))
        near = _chi2(y, w, self._bank("near", reach), _STRENGTH)
        near_bank = self._bank("near", reach)
        if exclude is not None:
            for row, drop in zip(star, exclude):
                row[np.isin(self.stars.name, list(drop))] = 1e12
            self._blank_foreign(near, near_bank, exclude)
        out["pixels"][rows] = ok.sum(axis=1)
        again, _ = rectify_coarse(np.where(view.valid, view.depth + 1.0, 0.0).astype(float), view.valid)
        out["flat"][rows] = np.minimum((w * y * y).sum(axis=1), (w * again[:, COMMON] ** 2).sum(axis=1))
        best_star, best_near = star.argmin(axis=1), near.argmin(axis=1)
        for q, row in enumerate(rows):
            out["star"][row] = star[q, best_star[q]]
            out["star_label"][row] = str(self.stars.label[best_star[q]])
            out["other"][row] = near[q, best_near[q]]
            out["kind"][row], out["label"][row], out["name"][row] = self._about(int(near_bank.owner[best_near[q]]))
        misfit = out["star"][rows] / np.maximum(out["pixels"][rows], 1)
        search = np.flatnonzero((misfit > _SEARCH_ABOVE) | (unexplained > _SEARCH_UNEXPLAINED))
        if search.size:
            bank = self._bank("far", reach)
            far = _chi2(y[search], w[search], bank, _STRENGTH)
            if exclude is not None:
                self._blank_foreign(far, bank, [exclude[int(q)] for q in search])
            best = far.argmin(axis=1)
            for q, i, row in zip(range(len(search)), best, rows[search]):
                if far[q, i] < out["other"][row]:
                    out["other"][row] = far[q, i]
                    out["kind"][row], out["label"][row], out["name"][row] = self._about(int(bank.owner[i]))
                    out["redshift"][row] = float(np.expm1(bank.steps[i] * LN_COARSE_STEP))


def _reach_key(valid: BoolArray) -> bytes:
    """The reach of a spectrum in coarse steps where it leaves out part of the common range, else empty."""
    if valid[COMMON].mean() > 0.97:
        return b""
    where = np.flatnonzero(valid)
    lo, hi = (where[0] // 12) * 12, -(-(where[-1] + 1) // 12) * 12
    reach = np.zeros(len(valid), bool)
    reach[lo:hi] = True
    return reach.tobytes()


def _chi2(y: NDArray[np.float32], w: NDArray[np.float32], bank: _Bank, strength: tuple[float, float] = (1.0, 1.0)
          ) -> FloatArray:
    """(n, j) chi-squared over common pixels, scaled to all pixels of the spectrum; huge where too few are common.

    Features may be stronger or weaker than the example's, by a factor within ``strength``.
    """
    wy = w * y
    cross, square = wy @ bank.depth.T, w @ bank.square.T
    a = np.clip(cross / np.maximum(square, 1e-9), *strength)
    total = (wy * y) @ bank.valid.T - 2 * a * cross + a * a * square
    share = (w @ bank.valid.T) / np.maximum(w.sum(axis=1, keepdims=True), 1e-9)
    return np.where(share > _MIN_COMMON, total / np.maximum(share, 0.1), 1e12).astype(float)


@lru_cache(maxsize=4)
def judge_for(without_libraries: tuple[str, ...] = (), without_stars: tuple[int, ...] = ()) -> Judge:
    """A judge, shared between calls that leave out the same."""
    return Judge(without_libraries, without_stars)


def judge_foreign_many(answers: Sequence[Assignment], batch: PreparedBatch, rows: NDArray[np.int64], found: Match,
                       match_rows: NDArray[np.int64], flat: FloatArray, valid: BoolArray, fe_h: FloatArray,
                       without: tuple[tuple[str, ...], tuple[int, ...]] = ((), ()), rung: float = 4.6
                       ) -> list[Assignment]:
    """The answers as they stand, or refused with ``object_kind`` and the reason, or flagged.

    ``batch`` rows ``rows`` hold the prepared spectra, ``found`` rows ``match_rows`` their matches, ``flat``/``valid``
    (n, p) the rectified pixels at the rung over ``surface.PIXELS``. ``without`` names libraries and HIP numbers that
    nothing may be learned from; ``rung`` is the FWHM that ``flat`` was blurred to, angstrom.
    """
    if not answers:
        return []
    judge = judge_for(*without)
    view = view_of(batch.flux[rows], batch.valid[rows], batch.sigma[rows], batch.fwhm_angstrom[rows])
    flagged = []
    for i, a in enumerate(answers):
        noise = 1.0 / max(a.snr, 1.0)
        emission = a.status == "typed" and h_alpha_emission(flat[i], valid[i], noise, a.t_code)
        odd = "" if a.status != "typed" else chemically_peculiar(flat[i], valid[i], noise, a.t_code, a.lum_code, rung)
        words = (*a.flags, *(["emission"] if emission else []), *(["peculiar"] if odd else []))
        notes = (*a.notes, f"chemically peculiar: {odd}") if odd else a.notes
        flagged.append(replace(a, flags=tuple(dict.fromkeys(words)), notes=notes) if emission or odd else a)
        if emission:      # a Be star is judged by the rest of its spectrum
            view.valid[i] &= _BALMER_FREE
    verdict = judge.compare(view, batch.unexplained[rows])
    out = []
    for i, a in enumerate(flagged):
        pair = None
        whole = not _reach_key(view.valid[i])
        if a.status == "typed" and whole and verdict.star[i] > _PAIR_ABOVE * verdict.pixels[i]:
            pair = judge.pairs.best(view, i)
        chi2 = float(found.chi2[match_rows[i]])
        out.append(decide(a, verdict, i, view, float(batch.unexplained[rows[i]]), chi2, pair))
    return _late_dwarfs(out, judge, view)


def _late_dwarfs(answers: list[Assignment], judge: Judge, view: View) -> list[Assignment]:
    """L dwarfs among what was typed K7 or later, or refused as nothing known or beyond the stars."""
    ask = [i for i, a in enumerate(answers) if (a.status == "typed" and a.t_code > 56)
           or (a.status == "refused" and a.object_kind in ("unknown", "galaxy", "quasar", "L dwarf"))]
    if not ask:
        return answers
    for i, (kind, label) in zip(ask, judge.red_kind(view[np.array(ask)])):
        if kind == "L dwarf":
            answers[i] = _refuse(answers[i], kind, label, "the red end looks like an L dwarf: hydrides and broad K I "
                                 "in place of TiO")
    return answers


def decide(answer: Assignment, verdict: Verdict, index: int, view: View, unexplained: float, chi2_surface: float,
           pair: Pair | None = None) -> Assignment:
    """What row ``index`` of the comparison makes of one answer; ``pair`` is the best pair of stars, if sought."""
    if answer.status != "typed":
        return answer
    pixels = max(float(verdict.pixels[index]), 1.0)
    star, other, flat = (float(v[index]) for v in (verdict.star, verdict.other, verdict.flat))
    depth, seen = view.depth[index], view.valid[index]
    emission = "emission" in answer.flags
    if flat - star < _FEATURE_GAIN and flat - other < _FEATURE_GAIN and not emission:
        return _refuse(answer, "unknown", "", "no spectral feature stands above the noise, so a type would be a guess")
    if swan := _swan_bands(depth, seen):
        return _refuse(answer, "carbon star", "C", swan)
    if pair is not None and _two_stars(pair, star, other):
        words = (f"two stars rather than one: {pair.first} and {pair.second} together (share of the first "
                 f"{100 * pair.share:.0f} % at 5200 A) fit {star / pair.chi2:.1f} times better than any single star")
        return replace(answer, flags=(*answer.flags, "composite"), notes=(*answer.notes, words))
    # a hot subdwarf is a near relation of O and B stars, which the library has few of: its example must fit by itself
    near_relation = verdict.kind[index] == "hot subdwarf" and other > _RELATION_FITS * pixels and other > 0.5 * star
    if other < _RATIO * star and star - other > _GAIN and not near_relation:
        return _refuse(answer, verdict.kind[index], _other_type(verdict, index),
                       _fits_better(verdict, index, star / pixels, other / pixels))
    cool = verdict.star_label[index].startswith(("K", "M")) and other > 1.3 * star      # gaps between TiO bands
    if (height := _wolf_rayet(depth, seen)) and unexplained > 0.7 and not cool:
        return _refuse(answer, "Wolf-Rayet star", "", "broad emission around 4650 A stands "
                       f"{100 * height:.0f} % above the continuum, as in a Wolf-Rayet star")
    least = _STRANGE_EMISSION if emission else _STRANGE_STAR
    if (unexplained > _STRANGE_UNEXPLAINED and star / pixels > least and chi2_surface > _STRANGE_SURFACE
            and not (verdict.star_label[index].startswith("M") and other > 1.8 * star)):    # M stars beyond the library
        near = f"; nearest is a {verdict.kind[index]}" if other < 1.5 * star else ""
        return _refuse(answer, "unknown", "", "no normal star in the library looks like it (chi-squared "
                       f"{star / pixels:.1f} a pixel at best){near}")
    if other < _DOUBT * star:
        answer = replace(answer, flags=(*answer.flags, "kind-doubtful"))
    return answer


def _two_stars(pair: Pair, star: float, other: float) -> bool:
    """A pair beats every single star, and every foreign object by far (a galaxy is a sum of stars too)."""
    return pair.chi2 < _PAIR_RATIO * star and star - pair.chi2 > _PAIR_GAIN and pair.chi2 < _PAIR_OTHER * other


def _refuse(answer: Assignment, kind: str, other_type: str, reason: str) -> Assignment:
    """The same spectrum without a normal type."""
    nan = float("nan")
    return replace(answer, status="refused", object_kind=kind, other_type=other_type, reason=reason, mk_type="",
                   t_code=nan, t_code_err=nan, lum_code=nan, lum_code_err=nan, posterior=None, type_set_90=(),
                   abs_mag_v=nan, abs_mag_v_err=nan, abs_mag_v_ok=False, log_g=nan, log_g_err=nan, nearest=(),
                   remark="")


def _other_type(verdict: Verdict, index: int) -> str:
    if verdict.kind[index] == "galaxy" or verdict.kind[index] == "quasar":
        return f"z = {verdict.redshift[index]:.3f}" if verdict.redshift[index] else ""
    return verdict.label[index]


def _fits_better(verdict: Verdict, index: int, star: float, other: float) -> str:
    kind, name = verdict.kind[index], verdict.name[index]
    where = f" at redshift {verdict.redshift[index]:.3f}" if verdict.redshift[index] else ""
    return (f"it looks like a {kind}{where} (example: {name}; chi-squared {other:.2f} a pixel) and not like any normal "
            f"star ({star:.2f} at best)")


def _step_across(depth: NDArray[np.float32], seen: BoolArray, blue: tuple[float, float], red: tuple[float, float]
                 ) -> float:
    means = []
    for lo, hi in (blue, red):
        inside = (COARSE_WAVE > lo) & (COARSE_WAVE < hi)
        if not seen[inside].all():
            return float("nan")
        means.append(float(depth[inside].mean()))
    return means[1] - means[0]


def _swan_bands(depth: NDArray[np.float32], seen: BoolArray) -> str:
    """The Swan bands of C2 absorb blueward of their heads, TiO redward: a sentence if they are there, else empty."""
    at = {"4737": _step_across(depth, seen, (4700.0, 4734.0), (4750.0, 4780.0)),
          "5165": _step_across(depth, seen, (5120.0, 5160.0), (5178.0, 5210.0)),
          "5636": _step_across(depth, seen, (5585.0, 5630.0), (5645.0, 5680.0))}
    strong = [name for name, v in at.items() if v > _SWAN_PAIR]
    first_two = at["4737"] > _SWAN_PAIR and at["5165"] > _SWAN_PAIR
    alone = [name for name in ("4737", "5165") if at[name] > _SWAN_ALONE]
    partner_missing = np.isnan(at["4737"]) or np.isnan(at["5165"])
    if (first_two or (alone and partner_missing)) and not at["5636"] < 0.06:
        return f"the Swan bands of C2 are there (heads at {', '.join(strong)} A)"
    return ""


def _wolf_rayet(depth: NDArray[np.float32], seen: BoolArray) -> float:
    """Height of broad emission at 4630-4710 A, 0 where there is none or H beta and [O III] stand above it."""
    blend = (COARSE_WAVE > 4630.0) & (COARSE_WAVE < 4710.0)
    beside = (COARSE_WAVE > 4845.0) & (COARSE_WAVE < 5030.0)
    if not seen[blend].all():
        return 0.0
    height = float(np.sort(depth[blend])[-5:].mean())
    rival = float(np.sort(depth[beside])[-5:].mean()) if seen[beside].all() else 0.0
    skew = float((depth[COMMON][seen[COMMON]] ** 3).mean())      # emission, not a gap between absorption bands
    return height if height > _WR_HEIGHT and height > rival and skew > 0 else 0.0
