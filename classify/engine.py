"""The classifier: from plain spectra to assignments, in batches."""

from __future__ import annotations

import hashlib
import os
from collections.abc import Sequence
from dataclasses import dataclass, replace
from functools import lru_cache
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from starfathom.classify import alignment
from starfathom.classify import posterior as post
from starfathom.classify.alignment import Nodes
from starfathom.classify.assignment import Assignment
from starfathom.classify.errors import RequestError, SpectrumError
from starfathom.classify.evidence import gather_evidence, remark_on
from starfathom.classify.foreign import judge_foreign_many
from starfathom.classify.grid import PIXEL_ANGSTROM, WAVE, blur, continuum, rectify
from starfathom.classify.learn import MODEL_DIR, Aligned, align_library, average, learn_rung, load_nodes
from starfathom.classify.linespread import line_spread
from starfathom.classify.model import RUNGS, Model
from starfathom.classify.prepared import Prepared
from starfathom.classify.resample import Native
from starfathom.classify.spectrum import PlainSpectrum
from starfathom.classify.surface import CORE, PIXELS, Match, match
from starfathom.templates import user
from starfathom.templates.library import Library, load_library
from starfathom.templates.subtypes import CLASSES, STEPS, SUBTYPES, step_of, t_code_from_step

FloatArray = NDArray[np.float64]
BoolArray = NDArray[np.bool_]

#: Classification never works finer than this rung: what differs between instruments grows faster than what is learned.
_FINEST = 4.6
_LEAST_PIXELS = 100          # valid grid pixels between 3640 and 7390 A
_LEAST_SNR = 2.0
_VELOCITY_LIMIT_KMS = 450.0
_AIR_VACUUM_KMS = 83.5
_METAL_WEAK = -0.8           # [Fe/H] below which the flag is set; the regression is good to 0.1 dex there
_BATCH = 32
_EDGE_ANGSTROM = 100.0       # beside a long gap: less than two widths of the smooth that stands for the continuum
_GAP_ANGSTROM = 50.0
_PASSES = 2                  # of the match of partly covered spectra


@dataclass(frozen=True)
class Settings:
    """What the user says of a spectrum: ``medium`` "air" or "vacuum", ``fwhm_angstrom`` or ``resolution`` (lambda over
    FWHM at 5000 A), ``velocity_kms`` (receding, as observed). None means: find out."""

    medium: str | None = None
    fwhm_angstrom: float | None = None
    resolution: float | None = None
    velocity_kms: float | None = None

    def __post_init__(self) -> None:
        if self.medium not in (None, "air", "vacuum"):
            raise RequestError(f"the medium is 'air' or 'vacuum', not {self.medium!r}")
        if self.fwhm_angstrom is not None and not 0.05 <= self.fwhm_angstrom <= 60:
            raise RequestError(f"a line-spread FWHM of {self.fwhm_angstrom:g} A is outside 0.05 to 60 A")
        if self.resolution is not None and not 100 <= self.resolution <= 100000:
            raise RequestError(f"a resolution R of {self.resolution:g} is outside 100 to 100000")
        if self.velocity_kms is not None and not abs(self.velocity_kms) <= 1500:
            raise RequestError(f"a velocity of {self.velocity_kms:g} km/s is outside -1500 to 1500 km/s")

    @property
    def fwhm(self) -> float | None:
        if self.fwhm_angstrom is not None:
            return self.fwhm_angstrom
        return 5000.0 / self.resolution if self.resolution else None


@dataclass(frozen=True)
class PreparedBatch:
    """n spectra at rest on the common grid (n, m), at their own resolution, and what was found on the way."""

    flux: FloatArray
    valid: BoolArray
    sigma: FloatArray           # of flux, white, a grid pixel
    flat: FloatArray            # rectified at own resolution
    level: FloatArray           # pseudo-continuum of flux
    velocity_kms: FloatArray
    velocity_err_kms: FloatArray
    velocity_given: BoolArray
    fwhm_angstrom: FloatArray
    fwhm_given: BoolArray
    unexplained: FloatArray
    snr: FloatArray
    snr_window: tuple[str, ...]
    best_snr: FloatArray        # the highest of all windows
    medium: tuple[str, ...]
    notes: tuple[tuple[str, ...], ...]
    best: NDArray[np.int64]


def _cache_dir() -> Path:
    root = os.environ.get("STARFATHOM_CACHE") or os.path.join(
        os.environ.get("XDG_CACHE_HOME", os.path.expanduser("~/.cache")), "starfathom")
    path = Path(root) / "models"
    path.mkdir(parents=True, exist_ok=True)
    return path


@lru_cache(maxsize=1)
def _recipe_fingerprint() -> str:
    """Changes whenever the library or the code that learns from it changes."""
    here = Path(__file__).parent
    digest = hashlib.sha256()
    for name in ("alignment", "criteria", "gaussian_process", "grid", "learn", "model", "posterior", "surface",
                 "training", "lines/direct", "lines/windows"):
        digest.update((here / f"{name}.py").read_bytes())
    for path in (here / "data" / "criteria.ecsv", here / "data" / "criteria_scales.ecsv",
                 here / "lines" / "data" / "features.ecsv", here.parent / "templates" / "data" / "library.npz"):
        if path.exists():
            digest.update(path.read_bytes())
    digest.update(str(len(load_library())).encode())
    return digest.hexdigest()[:12]


class Classifier:
    """Holds nodes and one model a rung, opened (or trained, when stars are left out) on first use.

    Parameters
    ----------
    without_libraries, without_stars : source libraries by name and stars by HIP number that nothing may be learned
        from. Names of libraries that are not in use are no error. Training takes about a minute a rung, kept in the
        user's cache directory.
    vetted : False takes catalogue labels as they are, to measure what vetting them is worth.
    """

    def __init__(self, without_libraries: Sequence[str] = (), without_stars: Sequence[int] = (), *,
                 vetted: bool = True) -> None:
        self.vetted = vetted
        self.without_libraries = tuple(sorted({str(s).strip().lower() for s in without_libraries if str(s).strip()}))
        try:
            self.without_stars = tuple(sorted({int(s) for s in without_stars if int(s) > 0}))
        except ValueError as error:
            raise RequestError(f"stars are left out by HIP number: {error}") from None
        known = set(self.library_all.catalogue["library"].tolist())
        hips = set(self.library_all.catalogue["hip"].tolist())
        self._own = user.fingerprint() if user.LIBRARY_NAME in known - set(self.without_libraries) else ""
        left_out = (known - {user.LIBRARY_NAME}) & set(self.without_libraries)
        self._default = vetted and not self._own and not left_out and not (hips & set(self.without_stars))
        self._models: dict[float, Model] = {}
        self._nodes: Nodes | None = None
        self._aligned: Aligned | None = None
        self._own_cache: dict[tuple[float, str], tuple[NDArray[Any], NDArray[Any], FloatArray] | None] = {}

    @classmethod
    def load(cls, without_libraries: Sequence[str] = (), without_stars: Sequence[int] = ()) -> Classifier:
        """A classifier, shared between calls that leave out the same."""
        return _shared(tuple(without_libraries), tuple(int(s) for s in without_stars))

    @property
    def library_all(self) -> Library:
        return load_library()

    @property
    def library(self) -> Library:
        """The library this classifier has learned from."""
        return self.library_all.without(self.without_libraries, self.without_stars)

    @property
    def named_stars(self) -> Library:
        """The library and all the user's own standards, learned from or not: what has a name."""
        own = None if user.LIBRARY_NAME in self.without_libraries else user.user_standards()
        learned = self.library
        return user.joined(learned.select(learned.catalogue["library"] != user.LIBRARY_NAME), own) if own else learned

    def _folder(self) -> Path:
        if self._default:
            return MODEL_DIR
        told = (self.without_libraries, self.without_stars, self.vetted, *([self._own] if self._own else []))
        folder = _cache_dir() / f"{_recipe_fingerprint()}-{hashlib.sha256(repr(told).encode()).hexdigest()[:12]}"
        folder.mkdir(exist_ok=True)
        return folder

    def _align(self) -> Aligned:
        if self._aligned is None:
            library = self.library
            if len(library) < 150:
                raise RequestError(f"leaving out {', '.join(self.without_libraries)} leaves {len(library)} library "
                                   "stars, too few to learn from")
            self._aligned = align_library(library, vetted=self.vetted)
        return self._aligned

    @property
    def nodes(self) -> Nodes:
        """Alignment nodes."""
        if self._nodes is None:
            path = self._folder() / "nodes.npz"
            if not path.exists():
                from starfathom.classify.learn import save_nodes

                _write_aside(path, lambda p: save_nodes(self._align().nodes, p))
            self._nodes = load_nodes(path)
        return self._nodes

    def model(self, rung: float) -> Model:
        """The model of one rung of the ladder."""
        if rung not in self._models:
            path = self._folder() / f"rung_{rung:g}.npz"
            if not path.exists():
                c = self.library.catalogue
                model = learn_rung(self._align(), c["star"], c["label"], rung)
                _write_aside(path, model.save)
            self._models[rung] = Model.load(path)
        return self._models[rung]

    # ---------------------------------------------------------------- preparing

    def prepare_batch(self, natives: list[Native], spectra: Sequence[PlainSpectrum], settings: Sequence[Settings]
                      ) -> PreparedBatch:
        """Rest frame, line spread, wander, noise of several spectra at once."""
        nodes = self.nodes
        quick = [n.quick() for n in natives]
        flux = np.array([f for f, _ in quick])
        valid = np.array([v for _, v in quick])
        given_v = np.array([np.nan if s.velocity_kms is None else s.velocity_kms for s in settings])
        has_v = np.isfinite(given_v)
        given_f = np.array([s.fwhm or float(p.meta.get("fwhm_angstrom") or np.nan)
                            for s, p in zip(settings, spectra)])
        has_f = np.isfinite(given_f) & (given_f > 0.05)

        coarse, ok = blur(flux, valid, 5.0)
        flat, _ = rectify(coarse, ok)
        velocity, scatter, best, unexplained = alignment.first_velocity(flat, ok, nodes)
        if has_v.any():      # look for the best nodes at the velocity that is known
            rest = [n.on_grid(v)[:2] for n, v, h in zip(natives, given_v, has_v) if h]
            c2, ok2 = blur(np.array([f for f, _ in rest]), np.array([v for _, v in rest]), 5.0)
            f2, _ = rectify(c2, ok2)
            _, _, best[has_v], unexplained[has_v] = alignment.first_velocity(f2, ok2, nodes)
        velocity = np.where(has_v, given_v, velocity)
        scatter = np.where(has_v, 0.0, scatter)

        def at(shift: Sequence[FloatArray | float]) -> tuple[FloatArray, BoolArray, FloatArray]:
            parts = [n.on_grid(v) for n, v in zip(natives, shift)]
            f, v, s = (np.array(p) for p in zip(*parts))
            return f, v, s

        flux, valid, sigma = at(list(velocity))
        flat, _ = rectify(flux, valid)
        fwhm = np.where(has_f, given_f, 5.0)
        if (~has_f).any():
            rows = np.flatnonzero(~has_f)
            fwhm[rows] = line_spread(flux[rows], flat[rows], valid[rows], best[rows], nodes,
                                               np.array([natives[i].pixel_angstrom for i in rows]))
        curve, error = alignment.wander(flat, valid, best, np.clip(fwhm, alignment.LADDER[0], None), nodes)
        reach = nodes.valid
        total = np.where(has_v[:, None], curve - np.mean(curve[:, reach], axis=1, keepdims=True), curve)
        total = total + velocity[:, None]
        flux, valid, sigma = at(list(total))
        level = continuum(flux, valid)
        flat = np.clip(np.where(valid, flux / np.where(level > 0, level, 1.0), 1.0), 0, 3)
        sigma = self._own_noise(natives, flat, valid, sigma, level, best, fwhm)
        velocity = np.where(has_v, given_v, np.mean(total[:, reach], axis=1))
        snr, window, best_snr = _signal_to_noise(flux, sigma, valid)
        medium, notes = [], []
        for i, p in enumerate(spectra):
            words, said = _medium_words(p, settings[i])
            medium.append(words)
            remarks = list(p.notes)
            if said:
                remarks.append(said)
            if not has_v[i] and abs(abs(velocity[i]) - _AIR_VACUUM_KMS) < 12 and "assumed" in words:
                remarks.append(f"a velocity of {velocity[i]:.0f} km/s is what air taken for vacuum (or the other way "
                               "round) would give: check the wavelength medium")
            if count := int(natives[i].struck.sum()):
                remarks.append(f"{count} pixel{'s' if count > 1 else ''} left out that stand alone like cosmic rays")
            if natives[i].sigma_estimated:
                remarks.append("no uncertainties given: noise estimated from the spectrum")
            if not has_f[i]:
                remarks.append(f"line spread measured as {fwhm[i]:.1f} A")
            notes.append(tuple(remarks))
        return PreparedBatch(flux, valid, sigma, flat, level, velocity, np.hypot(error, scatter / 2), has_v, fwhm,
                             has_f, unexplained, snr, window, best_snr, tuple(medium), tuple(notes), best)

    def _own_noise(self, natives: list[Native], flat: FloatArray, valid: BoolArray, sigma: FloatArray,
                   level: FloatArray, best: NDArray[np.int64], fwhm: FloatArray) -> FloatArray:
        """Where noise had to be estimated: never more than the scatter about the best nodes."""
        out = sigma.copy()
        for i, native in enumerate(natives):
            if not native.sigma_estimated:
                continue
            rung = int(np.argmin(np.abs(np.log(np.array(alignment.LADDER) / fwhm[i]))))
            mean = self.nodes.rect[rung][best[i, :2]].mean(axis=0)
            use = valid[i] & self.nodes.valid
            left = (flat[i] - 1 - mean)[use]
            if left.size < 60:
                continue
            rough = left - np.convolve(left, np.ones(25) / 25, "same")
            own = max(float(np.median(sigma[i][use] / np.abs(level[i][use]))), 1e-9)
            scale = float(1.4826 * np.median(np.abs(rough))) / own
            out[i] *= min(1.0, scale)
        return out

    def prepare(self, spectrum: PlainSpectrum, settings: Settings | None = None) -> Prepared:
        """One spectrum made ready (see :class:`Prepared`). Raises SpectrumError when it has too little to work on."""
        settings = settings or Settings()
        native = self._native(spectrum, settings)
        with np.errstate(all="ignore"):
            b = self.prepare_batch([native], [spectrum], [settings])
        scale = np.median(b.flux[0][b.valid[0]])
        level = np.where(b.level[0] > 0, b.level[0], 1.0)
        return Prepared(spectrum, WAVE, b.flux[0] / scale, b.flat[0], b.sigma[0] / level, b.valid[0],
                        float(b.velocity_kms[0]), float(b.velocity_err_kms[0]),
                        "given" if b.velocity_given[0] else "measured", float(b.fwhm_angstrom[0]),
                        "given" if b.fwhm_given[0] else "measured", b.medium[0], float(b.snr[0]), b.snr_window[0],
                        b.notes[0])

    @staticmethod
    def _native(spectrum: PlainSpectrum, settings: Settings) -> Native:
        medium = settings.medium or (spectrum.medium if spectrum.medium != "unknown" else "air")
        native = Native(spectrum, medium == "vacuum")
        where = spectrum.path or "the spectrum"
        if native.count < _LEAST_PIXELS:
            raise SpectrumError(f"{where} has {native.count} valid pixels between 3540 and 9300 A, and "
                                f"{_LEAST_PIXELS} are needed: check the wavelength unit and the mask")
        return native

    # ---------------------------------------------------------------- classifying

    def classify_one(self, spectrum: PlainSpectrum, settings: Settings | None = None) -> Assignment:
        """One spectrum; never raises for what is in the spectrum."""
        return self.classify_many([spectrum], settings or Settings())[0]

    def classify_many(self, spectra: Sequence[PlainSpectrum | SpectrumError],
                      settings: Settings | Sequence[Settings] | None = None) -> list[Assignment]:
        """One assignment a spectrum, in order. A spectrum that could not be read is passed as its SpectrumError."""
        each = [settings or Settings()] * len(spectra) if settings is None or isinstance(settings, Settings) \
            else list(settings)
        out: list[Assignment | None] = [None] * len(spectra)
        ready: list[tuple[int, Native]] = []
        for i, s in enumerate(spectra):
            if isinstance(s, SpectrumError):
                out[i] = Assignment(status="failed", reason=str(s))
                continue
            try:
                native = self._native(s, each[i])
                ok = native.quick()[1]
                if int(ok[PIXELS].sum()) < _LEAST_PIXELS:
                    out[i] = Assignment(file=s.path, status="refused", reason="almost nothing of the spectrum lies "
                                        "between 3640 and 7390 A, where the templates are", notes=s.notes)
                    continue
                ready.append((i, native))
            except SpectrumError as error:
                out[i] = Assignment(file=s.path, status="failed", reason=str(error), notes=s.notes)
        for start in range(0, len(ready), _BATCH):
            part = ready[start:start + _BATCH]
            rows = [i for i, _ in part]
            answers = self._classify_batch([n for _, n in part], [spectra[i] for i in rows],  # type: ignore[misc]
                                           [each[i] for i in rows])
            for i, answer in zip(rows, answers):
                out[i] = answer
        return [a if a is not None else Assignment() for a in out]

    def _classify_batch(self, natives: list[Native], spectra: list[PlainSpectrum], settings: list[Settings]
                        ) -> list[Assignment]:
        with np.errstate(all="ignore"):
            batch = self.prepare_batch(natives, spectra, settings)
            rung_of = np.array([next((r for r in RUNGS if r >= max(_FINEST, f) - 0.05), RUNGS[-1])
                                for f in batch.fwhm_angstrom])
            out: list[Assignment] = [Assignment()] * len(natives)
            for rung in np.unique(rung_of):
                rows = np.flatnonzero(rung_of == rung)
                for i, answer in zip(rows, self._at_rung(batch, rows, float(rung), spectra)):
                    out[i] = answer
        return out

    def matched(self, batch: PreparedBatch, rows: NDArray[np.int64], model: Model
                ) -> tuple[Match, FloatArray, BoolArray]:
        """Match rows of a batch at the rung of ``model``: the match, the rectified pixels and their mask."""
        rung = model.fwhm_angstrom
        flux, ok = np.empty((len(rows), len(WAVE))), np.empty((len(rows), len(WAVE)), bool)
        width = np.round(np.sqrt(np.maximum(rung ** 2 - batch.fwhm_angstrom[rows] ** 2, 0)), 1)
        for w in np.unique(width):
            q = width == w
            flux[q], ok[q] = blur(batch.flux[rows][q], batch.valid[rows][q], float(w))
        flat, level = rectify(flux, ok)
        sigma = batch.sigma[rows] / np.where(np.abs(level) > 0, np.abs(level), 1.0)
        f, v, s = flat[:, PIXELS], ok[:, PIXELS].copy(), sigma[:, PIXELS]
        partial = np.flatnonzero(v.mean(axis=1) < 0.985)
        # Next to a long gap the pseudo-continuum is one-sided and follows the slope of the flux: leave that out.
        if partial.size:
            v[partial] &= ~_beside_gaps(ok[partial])[:, PIXELS]
        found = match(model.surface, f, v, s)
        if not partial.size:
            return found, f, v
        # A pseudo-continuum over part of the range differs from the library's over all of it: give the templates' own
        # smooth over the same pixels back to the star, and match again.
        first = f
        for _ in range(_PASSES):
            full = np.ones((partial.size, len(WAVE)))
            full[:, PIXELS] = found.level[partial]
            mask = ok[partial] & _IN_PIXELS
            smooth = continuum(np.where(mask, full, 0.0), mask)
            f = first.copy()
            f[partial] = np.where(v[partial], first[partial] * smooth[:, PIXELS], 1.0)
            second = match(model.surface, f[partial], v[partial], s[partial])
            merged = {}
            for name in ("log_like", "components", "spread", "chi2", "noise_share", "level"):
                whole = getattr(found, name).copy()
                whole[partial] = getattr(second, name)
                merged[name] = whole
            found = Match(**merged)
        return found, f, v

    def _at_rung(self, batch: PreparedBatch, rows: NDArray[np.int64], rung: float, spectra: list[PlainSpectrum]
                 ) -> list[Assignment]:
        model = self.model(rung)
        found, flat, valid = self.matched(batch, rows, model)
        mag, mag_extra = average(model.abs_mag, found.components, found.spread)
        grav, grav_extra = average(model.log_g, found.components, found.spread)
        fe_h, fe_h_extra = average((model.fe_h,), found.components, found.spread)
        by_regression, by_regression_extra = average(model.step, found.components, found.spread)
        evidence = gather_evidence(batch, rows, self.model, by_regression, model.blend.criteria_weight)
        log_p = post.weigh(post.evidence_pieces(found.log_like, mag, mag_extra, grav, grav_extra, by_regression,
                                                by_regression_extra, evidence.log_like, model.surface, model.loci),
                           model.blend)
        p = post.widen(post.normalise(log_p), model.blend.step_sd_floor)
        step, step_sd, lum, lum_sd = post.codes(p)
        mag_sd = self._mag_error(model, step, mag, mag_extra)
        mass = float(np.quantile(model.conformal, 0.9))
        near = self._nearest(model, found)
        code_of = t_code_from_step(step)
        with np.errstate(all="ignore"):
            criteria = evidence.criteria(code_of)
        answers = []
        for q, i in enumerate(rows):
            spectrum = spectra[i]
            common: dict[str, Any] = {
                "file": spectrum.path, "velocity_kms": float(batch.velocity_kms[i]),
                "velocity_err_kms": float(batch.velocity_err_kms[i]), "snr": float(batch.snr[i]),
                "snr_window": batch.snr_window[i], "fwhm_angstrom": float(batch.fwhm_angstrom[i]),
                "wave_medium": batch.medium[i], "notes": batch.notes[i],
                "meta": {k: v for k, v in spectrum.meta.items() if k in ("object", "exptime_s", "ra_deg", "dec_deg")}}
            if not batch.best_snr[i] >= _LEAST_SNR:
                answers.append(Assignment(status="refused", object_kind="unknown", **common,
                                          reason=f"signal to noise {batch.best_snr[i]:.1f} per angstrom at its best is "
                                                 f"below {_LEAST_SNR:g}: too poor to say anything"))
                continue
            i_t, j = post.best_type(p[q])
            code = float(code_of[q])
            ok_mag = self._mag_valid(model, found.components[q], p[q], step[q])
            flags: list[str] = []
            share = float(batch.valid[i][PIXELS][CORE].mean())
            if share < 0.9:
                flags.append("partial-coverage")
            if not batch.velocity_given[i] and abs(batch.velocity_kms[i]) > _VELOCITY_LIMIT_KMS:
                flags.append("velocity-doubtful")
            if fe_h[q] + fe_h_extra[q] < _METAL_WEAK and step[q] > 28 and p[q][:, 5:].sum() > 0.3:
                flags.append("metal-weak")
                ok_mag = False      # few such stars have a parallax good enough to learn from
            if abs(np.interp(step[q], STEPS, np.arange(len(STEPS))) - i_t) > 3:
                flags.append("types-disagree")
            answer = Assignment(
                status="typed", object_kind="star", mk_type=f"{SUBTYPES[i_t]} {CLASSES[j]}", t_code=code,
                t_code_err=float(step_sd[q]), lum_code=float(lum[q]), lum_code_err=float(lum_sd[q]), posterior=p[q],
                type_set_90=post.type_set(p[q], mass), abs_mag_v=float(mag[q]), abs_mag_v_err=float(mag_sd[q]),
                abs_mag_v_ok=bool(ok_mag), log_g=float(grav[q]), log_g_err=float(np.hypot(0.25, grav_extra[q])),
                nearest=near[q], flags=tuple(flags), evidence=criteria[q], **common)
            answers.append(answer)
        judged = judge_foreign_many(answers, batch, rows, found, np.arange(len(rows)), flat, valid, fe_h,
                                    (self.without_libraries, self.without_stars), rung)
        return [replace(a, remark=remark_on(a, float(fe_h[q]))) if a.status == "typed" else a
                for q, a in enumerate(judged)]

    @staticmethod
    def _mag_error(model: Model, step: FloatArray, mag: FloatArray, extra: FloatArray) -> FloatArray:
        """Standard deviation of the absolute magnitude: cross-validated residuals of like stars, plus noise."""
        r = model.residuals
        near = np.exp(-0.5 * ((step[:, None] - r[:, 0]) / 4) ** 2 - 0.5 * ((mag[:, None] - r[:, 1]) / 1.2) ** 2) + 1e-6
        capped = np.clip(r[:, 2], 0, 2.0)
        return np.sqrt(np.maximum((near @ capped) / near.sum(axis=1), 0.15 ** 2) + extra ** 2)

    @staticmethod
    def _mag_valid(model: Model, components: FloatArray, p: FloatArray, step: float) -> bool:
        """Whether stars with good parallaxes stand near: not among supergiants, nor earlier than B1."""
        r = model.abs_mag[0]
        k = r.points.shape[1]
        d2 = ((components[:k] / r.scale - r.points) ** 2).sum(axis=1)
        crowd = float(np.exp(-d2 / (2 * 0.25 * r.length2)).sum())
        return crowd > 1.0 and float(p[:, :5].sum()) < 0.5 and step > 11.0

    def _nearest(self, model: Model, found: Match) -> list[tuple[str, ...]]:
        names, labels, z = model.names, model.labels, model.components.astype(float)
        if (own := self._own_components(model)) is not None:
            names, labels = np.concatenate([names, own[0]]), np.concatenate([labels, own[1]])
            z = np.concatenate([z, own[2]])
        scale = np.sqrt(np.mean([np.diag(c) for c in model.surface.scatter], axis=0))
        d2 = (((found.components[:, None, :] - z[None]) / scale) ** 2).sum(axis=2)
        order = np.argsort(d2, axis=1)[:, :3]
        return [tuple(f"{names[k]} ({labels[k].replace(' ', '')})" for k in row) for row in order]

    def _own_components(self, model: Model) -> tuple[NDArray[Any], NDArray[Any], FloatArray] | None:
        """Names, labels and components of the user's standards that the model has not learned from."""
        key = (model.fwhm_angstrom, user.fingerprint(learned_only=False))
        if key[1] == "" or user.LIBRARY_NAME in self.without_libraries:
            return None
        if key not in self._own_cache:
            own = user.user_standards()
            new = own.select(~np.isin(own.catalogue["star"], model.names)) if own else None
            if new is None or not len(new):
                self._own_cache[key] = None
            else:
                kernel = np.sqrt(np.maximum(model.fwhm_angstrom ** 2 - new.catalogue["fwhm_angstrom"] ** 2, 0.0))
                parts = [blur(new.flux[k:k + 1].astype(float), new.valid[k:k + 1], float(kernel[k]))
                         for k in range(len(new))]
                flux, ok = (np.concatenate(p) for p in zip(*parts))
                flat, _ = rectify(flux, ok)
                noise = np.full((len(new), len(PIXELS)), 0.01)
                z = match(model.surface, flat[:, PIXELS], ok[:, PIXELS], noise).components
                self._own_cache[key] = new.catalogue["star"], new.catalogue["label"], z
        return self._own_cache[key]

    # ---------------------------------------------------------------- for the eye

    def template(self, t_code: float, lum_code: float, prepared: Prepared) -> FloatArray:
        """Interpolated template (m,) rectified like ``prepared.rectified``, at its FWHM; NaN beyond the library."""
        rung = max((r for r in RUNGS if r <= prepared.fwhm_angstrom + 0.3), default=RUNGS[0])
        spectrum = np.ones(len(WAVE))
        spectrum[PIXELS] = self.model(rung).surface.spectrum(float(step_of(t_code)), lum_code)
        return self._like(spectrum, _IN_PIXELS, rung, prepared)

    def _like(self, spectrum: FloatArray, valid: BoolArray, fwhm: float, prepared: Prepared) -> FloatArray:
        kernel = float(np.sqrt(max(prepared.fwhm_angstrom ** 2 - fwhm ** 2, 0)))
        blurred, ok = blur(spectrum[None], valid[None], kernel)
        seen = ok & prepared.valid[None]
        level = continuum(np.where(seen, blurred, 0.0), seen if seen.any() else ok)
        with np.errstate(all="ignore"):
            return np.where(ok[0], blurred[0] / np.where(level[0] > 0, level[0], 1.0), np.nan)

    def standards(self, t_code: float, lum_code: float, n: int = 5) -> list[str]:
        """Names of the library stars whose labels are nearest to a type."""
        c = self.named_stars.catalogue
        far = np.hypot((step_of(c["t_code"]) - float(step_of(t_code))) / 1.0, (c["lum_code"] - lum_code) / 0.5)
        far = np.where((c["kind"] == "normal") & np.isfinite(far), far + 0.3 * c["doubtful"], np.inf)
        return [str(c["star"][k]) for k in np.argsort(far, kind="stable")[:n] if np.isfinite(far[k])]

    def library_spectrum(self, name: str, prepared: Prepared) -> FloatArray:
        """A named library star (m,), rectified and blurred like ``prepared``; RequestError for a strange name."""
        library = self.named_stars
        where = np.flatnonzero(library.catalogue["star"] == name)
        if not where.size:
            raise RequestError(f"the library has no star named {name!r}: see 'starfathom templates coverage'")
        k = int(where[0])
        return self._like(library.flux[k].astype(float), library.valid[k], float(library.catalogue["fwhm_angstrom"][k]),
                          prepared)


_IN_PIXELS = np.zeros(len(WAVE), bool)
_IN_PIXELS[PIXELS] = True
_SNR_WINDOWS = ((4400.0, 4600.0), (4900.0, 5100.0), (5300.0, 5600.0), (4000.0, 4200.0), (6100.0, 6400.0),
                (6600.0, 6800.0), (7000.0, 7300.0), (3540.0, 9300.0))
_WINDOW_PIXELS = [(np.flatnonzero((WAVE > lo) & (WAVE < hi)), lo, hi) for lo, hi in _SNR_WINDOWS]


def _beside_gaps(valid: BoolArray) -> BoolArray:
    """Pixels (n, m) within ``_EDGE_ANGSTROM`` of a stretch of ``_GAP_ANGSTROM`` without data."""
    per_pixel = PIXEL_ANGSTROM
    out = np.zeros_like(valid)
    for i, row in enumerate(valid):
        edges = np.flatnonzero(np.diff(np.concatenate([[True], row, [True]]).astype(np.int8)))
        for start, stop in zip(edges[::2], edges[1::2]):           # runs of invalid pixels
            if per_pixel[start:stop].sum() > _GAP_ANGSTROM:
                lo, hi = WAVE[start] - _EDGE_ANGSTROM, WAVE[stop - 1] + _EDGE_ANGSTROM
                out[i] |= (WAVE > lo) & (WAVE < hi)
    return out


def _signal_to_noise(flux: FloatArray, sigma: FloatArray, valid: BoolArray
                     ) -> tuple[FloatArray, tuple[str, ...], FloatArray]:
    """S/N per angstrom in 4400-4600 A or the nearest window that is mostly valid; and the best of all windows."""
    out, best, names = np.full(len(flux), np.nan), np.full(len(flux), np.nan), []
    ratio = flux / np.maximum(sigma, 1e-30) / np.sqrt(PIXEL_ANGSTROM)
    for i in range(len(flux)):
        name = ""
        for w, lo, hi in _WINDOW_PIXELS:
            if hi > 9000 and name:
                continue      # the whole range is for spectra that have none of the windows
            inside = valid[i, w]
            if inside.mean() > 0.7 or (not name and hi > 9000 and inside.any()):
                here = float(np.median(ratio[i, w][inside]))
                if not name:
                    out[i], name = here, f"{lo:.0f}-{hi:.0f}"
                best[i] = np.nanmax([best[i], here])
        names.append(name)
    return out, tuple(names), best


def _medium_words(spectrum: PlainSpectrum, settings: Settings) -> tuple[str, str]:
    if settings.medium:
        return f"{settings.medium} (asked for)", ""
    if spectrum.medium != "unknown":
        return f"{spectrum.medium} ({spectrum.medium_source})", ""
    return "air (assumed)", "wavelengths taken to be in air: the file does not say"


def _write_aside(path: Path, write: Any) -> None:
    """Write through a temporary name, so that a killed run leaves no half file behind."""
    aside = path.with_name(f".{os.getpid()}-{path.name}")
    write(aside)
    os.replace(aside, path)


@lru_cache(maxsize=4)
def _shared(without_libraries: tuple[str, ...], without_stars: tuple[int, ...]) -> Classifier:
    return Classifier(without_libraries, without_stars)


__all__ = ["Classifier", "PreparedBatch", "Settings"]
