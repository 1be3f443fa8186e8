"""The stars on the desk: read, typed in the background, queued by need, with the decisions about them."""

from __future__ import annotations

import threading
from collections.abc import Callable, Iterable, Sequence
from dataclasses import dataclass, field, replace
from pathlib import Path
from typing import Any

from starfathom.classify.assignment import Assignment
from starfathom.classify.errors import SpectrumError, StarfathomError
from starfathom.classify.prepared import Prepared
from starfathom.classify.spectrum import PlainSpectrum
from starfathom.decisions import Action, Decision, DecisionLog, file_digest
from starfathom.desk.needs import MagnitudeGrid, Need, need

#: Stars typed together; small, so that the first is on the page at once.
BATCH = 12
#: Stars kept ready to compare, nudges counted apart.
PREPARED_KEPT = 24


@dataclass
class Star:
    """One star of the night.

    ``assignment`` is None until the machine has had its say; ``row`` and ``target`` are what a run knows of the star
    (columns of its results; magnitudes, parallax and the like), empty for a loose file.
    """

    name: str
    file: str
    settings: Any
    assignment: Assignment | None = None
    need: Need = field(default_factory=lambda: Need(0.0, ""))
    row: dict[str, Any] = field(default_factory=dict)
    target: dict[str, Any] = field(default_factory=dict)

    @property
    def shown(self) -> bool:
        """True when there is a spectrum to look at, as far as is known."""
        return self.assignment is None or self.assignment.status != "failed"


class Night:
    """Every star, the queue through them, and the log of decisions.

    Parameters
    ----------
    stars : in the order given
    classifier : has ``classify_many``, ``prepare``, ``template``, ``standards``, ``library_spectrum``
    log : where decisions are kept
    read : reads one file, raising SpectrumError
    magnitudes : absolute magnitudes of the plane's cells, for the order of the queue
    scaling : ``scale``, ``prior`` and ``rv`` of the run, for distances
    afterwards : what to do with the decisions, said at the end
    """

    def __init__(self, stars: Sequence[Star], classifier: Any, log: DecisionLog,
                 read: Callable[[str], PlainSpectrum], magnitudes: MagnitudeGrid | None = None,
                 scaling: dict[str, Any] | None = None, afterwards: str = "") -> None:
        self.stars = list(stars)
        self.classifier = classifier
        self.log = log
        self.magnitudes = magnitudes
        self.afterwards = afterwards
        self._read = read
        self._scaling = scaling or {}
        self._far: dict[tuple[int, str], tuple[float, float, float] | None] = {}
        self._lock = threading.RLock()     # the classifier and the cache serve one thread at a time
        self._prepared: dict[tuple[int, float, float], Prepared] = {}
        self._order()

    # ---- the machine's say ----------------------------------------------------------------------------------------

    def _order(self) -> None:
        """Put the queue in order: typed stars by need, then those not typed yet, as given."""
        for star in self.stars:
            if star.assignment is not None and not star.need.why:
                star.need = need(star.assignment, self.magnitudes)
        typed = [k for k, star in enumerate(self.stars) if star.assignment is not None]
        waiting = [k for k, star in enumerate(self.stars) if star.assignment is None]
        self.queue = [*sorted(typed, key=lambda k: (-self.stars[k].need.score, k)), *waiting]

    def type_all(self, told: Callable[[], None] = lambda: None) -> None:
        """Read and type every star that has not been, batch by batch, calling ``told`` after each."""
        while not self.ready:
            self.type_some()
            told()

    def type_some(self, most: int = BATCH) -> None:
        """Read and type the next few stars."""
        batch = [star for star in self.stars if star.assignment is None][:most]
        spectra: list[PlainSpectrum | SpectrumError] = []
        for star in batch:
            try:
                spectra.append(self._read(star.file))
            except SpectrumError as error:
                spectra.append(error)
        with self._lock:
            try:
                said = self.classifier.classify_many(spectra, [s.settings for s in batch])
            except Exception as fault:             # a fault in one batch must not leave the rest of the night waiting
                said = [Assignment(file=s.file, reason=f"could not be measured ({type(fault).__name__}: {fault})")
                        for s in batch]
        for star, assignment in zip(batch, said):
            star.assignment = assignment
        self._order()

    @property
    def typed(self) -> int:
        """Number of stars the machine has had its say on."""
        return sum(star.assignment is not None for star in self.stars)

    @property
    def ready(self) -> bool:
        """True when the machine has had its say on every star."""
        return self.typed == len(self.stars)

    def prepared(self, index: int, blur_angstrom: float = 0.0, nudge_kms: float = 0.0) -> Prepared:
        """A star made ready to compare, its line spread and velocity nudged by the given amounts.

        Raises
        ------
        SpectrumError : the file cannot be read any more, or has too little to compare
        """
        key = (index, blur_angstrom, nudge_kms)
        found = self._prepared.get(key)
        if found is not None:
            return found
        with self._lock:
            if key not in self._prepared:
                ready = self._prepare(index, blur_angstrom, nudge_kms)
                if len(self._prepared) >= PREPARED_KEPT:
                    self._prepared.pop(next(iter(self._prepared)))
                self._prepared[key] = ready
            return self._prepared[key]

    def _prepare(self, index: int, blur_angstrom: float, nudge_kms: float) -> Prepared:
        if blur_angstrom:
            plain = self.prepared(index, 0.0, nudge_kms)
            return replace(plain, fwhm_angstrom=max(0.2, plain.fwhm_angstrom + blur_angstrom))
        star = self.stars[index]
        settings = star.settings
        if nudge_kms:
            settings = replace(settings, velocity_kms=self.prepared(index).velocity_kms + nudge_kms)
        ready: Prepared = self.classifier.prepare(self._read(star.file), settings)
        return ready

    def make_ready(self, index: int | None) -> None:
        """Prepare a star ahead of its turn, so that going on is quick; faults wait until it is looked at."""
        if index is None or (index, 0.0, 0.0) in self._prepared:
            return
        try:
            self.prepared(index)
        except StarfathomError:
            return

    def distance_if(self, index: int, mk_type: str) -> tuple[float, float, float] | None:
        """Distance of a star in pc, if it were of a given type: median, 16 % and 84 %; None without photometry."""
        key = (index, mk_type)
        if key not in self._far:
            self._far[key] = self._distance(self.stars[index].target, mk_type)
        return self._far[key]

    def _distance(self, target: dict[str, Any], mk_type: str) -> tuple[float, float, float] | None:
        if not target.get("magnitudes"):
            return None
        from starfathom.classify.mktype import MKType
        from starfathom.distance import Photometry, fathom

        ebv = target.get("ebv")
        try:
            found = fathom(MKType.parse(mk_type), Photometry(target["magnitudes"]), ra_deg=target.get("ra_deg"),
                           dec_deg=target.get("dec_deg"), ebv=None if ebv is None else tuple(ebv), n_samples=600,
                           **self._scaling)
        except StarfathomError:
            return None
        lo, hi = found.interval("distance_pc")
        return found.median("distance_pc"), lo, hi

    # ---- the person's say -----------------------------------------------------------------------------------------

    def decisions(self) -> dict[str, Decision]:
        """The decision that holds for each star that has one."""
        return self.log.current()

    def undecided(self, decided: Iterable[str] | None = None) -> list[int]:
        """Stars that can be looked at and have no decision yet, neediest first."""
        known = set(self.decisions() if decided is None else decided)
        return [k for k in self.queue if self.stars[k].name not in known and self.stars[k].shown]

    def decide(self, index: int, action: Action, mk_type: str = "", flags: tuple[str, ...] = (), remark: str = "",
               who: str = "", probability: float | None = None) -> Decision:
        """Keep a decision about one star, with what the machine had said. Returns it once it is on the disk."""
        from importlib.metadata import version

        star = self.stars[index]
        said = star.assignment
        machine: dict[str, Any] = {"version": version("starfathom")}
        if said is not None:
            machine |= {k: getattr(said, k) for k in ("status", "object_kind", "mk_type", "reason")}
            machine |= {k: _finite(getattr(said, k)) for k in ("t_code", "t_code_err", "lum_code", "lum_code_err")}
            machine |= {"type_set_90": list(said.type_set_90), "flags": list(said.flags), "probability": probability}
        return self.log.append(Decision(star.name, action, mk_type, flags, remark, who,
                                        machine=machine, file=star.file, digest=file_digest(star.file)))


def _finite(x: float) -> float | None:
    return round(float(x), 3) if x == x else None


def name_stars(paths: Sequence[str]) -> list[str]:
    """Short names for files: without folder and suffix where that keeps them apart, else the path."""
    names = [Path(p).name.split(".")[0] or Path(p).name for p in paths]
    return [n if names.count(n) == 1 else str(p) for n, p in zip(names, paths)]
