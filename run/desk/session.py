"""What one person at the desk is doing: where the cursor stands, what is pinned, what the keys and buttons do."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass, field, replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from starfathom.classify.errors import StarfathomError
from starfathom.classify.prepared import Prepared
from starfathom.decisions import Action
from starfathom.desk import plane
from starfathom.desk.night import Night, Star
from starfathom.desk.plane import Cell
from starfathom.desk.scatter import template_scatter
from starfathom.desk.windows import Mark, Window, misfit, rms, windows_for, windows_on, within

FloatArray = NDArray[np.float64]

FLAGS = ("emission", "composite", "metal-weak", "strong lines", "fast rotator", "poor data")
WELCOME = "Look whether the orange template fits. A accepts, E amends, X sets aside; ? lists every key."
BLUR_STEP_ANGSTROM = 0.5
VELOCITY_STEP_KMS = 10.0


@dataclass(frozen=True)
class Place:
    """A point to compare the star with: a cell of the plane, or a real star of the library that stands near it."""

    cell: Cell
    standard: str = ""

    @property
    def label(self) -> str:
        return plane.cell_name(self.cell) + (f" ({self.standard})" if self.standard else "")


@dataclass(frozen=True)
class Comparison:
    """A template beside the star: rectified (m,), misfit in sigmas (m,), and its size overall and in each window."""

    place: Place
    template: FloatArray
    sigmas: FloatArray
    overall: float
    by_window: tuple[float, ...]


@dataclass(frozen=True)
class Look:
    """How one star is being looked at."""

    place: Place
    pin: Place | None = None
    measured: bool = False
    names: bool = True
    blink: bool = False
    blur_angstrom: float = 0.0
    nudge_kms: float = 0.0
    third: int = 0          # 0 the whole spectrum, 1 to 3 a third of it
    flags: frozenset[str] = field(default_factory=frozenset)


class Session:
    """The desk without its page. ``do(command, values)`` is all that a key or a button can ask for."""

    def __init__(self, night: Night, marks: Sequence[Mark]) -> None:
        self.night = night
        self.marks = tuple(marks)
        self.said = WELCOME
        self.editing = False
        self.dark = False
        history = night.log.history()
        self.who = history[-1].who if history else ""      # whoever decided last is likely the one who goes on
        self._looks: dict[int, Look] = {}
        self._standards: dict[Cell, list[str]] = {}
        self._templates: dict[tuple[Any, ...], FloatArray] = {}
        self._decided = night.decisions()
        todo = night.undecided(self._decided)
        shown = [k for k in night.queue if night.stars[k].shown]
        self.index = (todo or shown or night.queue)[0]
        self._commands: dict[str, Callable[[dict[str, Any]], None]] = {
            "move": self._move, "best": self._best, "peak": self._peak, "rival": self._rival, "pin": self._pin,
            "swap": self._swap, "blink": self._blink, "standard": self._standard, "measured": self._measured,
            "names": self._names, "blur": self._blur, "velocity": self._velocity, "plain": self._plain,
            "next": self._next, "previous": self._previous, "open": self._open, "accept": self._accept,
            "edit": self._edit, "amend": self._amend, "cancel": self._cancel, "aside": self._aside,
            "undo": self._undo, "flag": self._flag, "enlarge": self._enlarge, "theme": self._theme,
            "hello": self._hello,
        }

    # ---- what stands on the desk ----------------------------------------------------------------------------------

    @property
    def star(self) -> Star:
        return self.night.stars[self.index]

    @property
    def look(self) -> Look:
        if self.index not in self._looks:
            self._looks[self.index] = Look(Place(self.best_cell() or self._nearest_cell()))
        return self._looks[self.index]

    @look.setter
    def look(self, value: Look) -> None:
        self._looks[self.index] = value

    @property
    def posterior(self) -> FloatArray | None:
        said = self.star.assignment
        return None if said is None or said.posterior is None or said.posterior.sum() <= 0 else said.posterior

    def best_cell(self) -> Cell | None:
        """Where the machine's own type stands (or the highest cell, when its type has no plain name)."""
        said = self.star.assignment
        named = plane.cell_named(said.mk_type) if said is not None else None
        if named is not None:
            return named
        if self.posterior is None:
            return None
        i, j = np.unravel_index(int(self.posterior.argmax()), self.posterior.shape)
        return int(i), int(j)

    def _nearest_cell(self) -> Cell:
        """Where the template comes nearest to a star without a type, on a coarse net of whole subtypes."""
        try:
            ready = self.night.prepared(self.index)
        except StarfathomError:
            return plane.cell_near(40.0, 5.0)
        net = [(i, j) for i in range(0, plane.N_TYPES, 4) for j in (1, 5, 7)]
        scatter = self._scatter(ready)
        sizes = [rms(misfit(ready, np.asarray(self.night.classifier.template(*plane.cell_codes(c), ready), float),
                            scatter)) for c in net]
        if not np.isfinite(sizes).any():
            return plane.cell_near(40.0, 5.0)
        return net[int(np.nanargmin(sizes))]

    def _scatter(self, ready: Prepared) -> FloatArray:
        """Scatter of templates for the star's own type, wherever the cursor stands, so that misfits compare."""
        best = self.best_cell()
        types = [plane.cell_codes(best)[0]] if best is not None else [5.0, 15.0, 25.0, 35.0, 45.0, 55.0, 65.0]
        return np.mean([template_scatter(ready.wave_angstrom, t, ready.fwhm_angstrom) for t in types], axis=0)

    def upcoming(self) -> int | None:
        """The star that is next in the queue, None at its end."""
        queue = [k for k in self.night.queue if self.night.stars[k].shown]
        at = queue.index(self.index) + 1 if self.index in queue else len(queue)
        return queue[at] if at < len(queue) else None

    def probability(self, cell: Cell) -> float | None:
        """What the machine gives a cell; None when the star was not typed."""
        return None if self.posterior is None else float(self.posterior[cell])

    @property
    def decided(self) -> dict[str, Any]:
        return dict(self._decided)

    def prepared(self) -> Prepared:
        return self.night.prepared(self.index, self.look.blur_angstrom, self.look.nudge_kms)

    def windows(self) -> list[Window]:
        said, ready = self.star.assignment, self.prepared()
        wave = ready.wave_angstrom[ready.valid]
        if len(wave) == 0:
            return []
        lo, hi = float(wave[0]), float(wave[-1])
        found = [] if said is None else windows_for(said.evidence, self.marks, lo, hi,
                                                           fwhm_angstrom=ready.fwhm_angstrom)
        return found or self._plain_windows(ready, lo, hi)

    def _plain_windows(self, ready: Prepared, lo: float, hi: float) -> list[Window]:
        """Without evidence (a star that is not normal, say): round the strongest features of the type compared."""
        cell = self.best_cell() or self.look.place.cell
        template = np.asarray(self.night.classifier.template(*plane.cell_codes(cell), ready), float)
        return windows_on(self.marks, ready, template, lo, hi, plane.cell_name(cell)[0])

    def compare(self, place: Place) -> Comparison:
        """The template of a place beside the star as it is being looked at."""
        ready = self.prepared()
        key = (self.index, self.look.blur_angstrom, self.look.nudge_kms, place)
        if key not in self._templates:
            if len(self._templates) > 200:
                self._templates.clear()
            if place.standard:
                template = self.night.classifier.library_spectrum(place.standard, ready)
            else:
                template = self.night.classifier.template(*plane.cell_codes(place.cell), ready)
            self._templates[key] = np.asarray(template, float)
        template = self._templates[key]
        sigmas = misfit(ready, template, self._scatter(ready))
        by_window = tuple(rms(sigmas[within(ready.wave_angstrom, w)]) for w in self.windows())
        return Comparison(place, template, sigmas, rms(sigmas), by_window)

    # ---- commands -------------------------------------------------------------------------------------------------

    def do(self, command: str, values: dict[str, Any] | None = None) -> None:
        """Carry out a command; what went wrong, if anything, is left in ``said`` as one sentence."""
        self.said = ""
        action = self._commands.get(command)
        if action is None:
            self.said = f"There is no command '{command}'."
            return
        try:
            action(values or {})
        except StarfathomError as error:
            self.said = str(error)

    def _move(self, v: dict[str, Any]) -> None:
        if "cell" in v:
            cell: Cell = (int(v["cell"][0]), int(v["cell"][1]))
        else:
            cell = (self.look.place.cell[0] + int(v.get("right", 0)), self.look.place.cell[1] - int(v.get("up", 0)))
        self.look = replace(self.look, place=Place(plane.clamp(cell)))

    def _go(self, cell: Cell | None, words: str) -> None:
        if cell is None:
            self.said = words
        else:
            self.look = replace(self.look, place=Place(cell))

    def _best(self, v: dict[str, Any]) -> None:
        self._go(self.best_cell(), "The machine gave this star no MK type.")

    def _peak(self, v: dict[str, Any]) -> None:
        if self.posterior is None:
            return self._go(None, "The machine gave this star no MK type, so there are no peaks.")
        cells = plane.peaks(self.posterior)
        here = self.look.place.cell
        nxt = cells[(cells.index(here) + 1) % len(cells)] if here in cells else cells[0]
        self._go(nxt, "")
        self.said = "There is only one peak." if len(cells) == 1 else f"Peak {cells.index(nxt) + 1} of {len(cells)}."

    def _rival(self, v: dict[str, Any]) -> None:
        best = self.best_cell()
        other = None if self.posterior is None or best is None else plane.rival(self.posterior, best[1])
        self._go(other, "No other luminosity class has any share in this star.")

    def _pin(self, v: dict[str, Any]) -> None:
        same = self.look.pin == self.look.place
        self.look = replace(self.look, pin=None if same else self.look.place)
        self.said = "The pin is taken out." if same else f"Pinned {self.look.place.label}; move on to compare."

    def _swap(self, v: dict[str, Any]) -> None:
        if self.look.pin is None:
            self.said = "Nothing is pinned yet: P pins the place where you stand."
        else:
            self.look = replace(self.look, place=self.look.pin, pin=self.look.place)

    def _blink(self, v: dict[str, Any]) -> None:
        self.look = replace(self.look, blink=not self.look.blink)

    def _standard(self, v: dict[str, Any]) -> None:
        place = self.look.place
        if place.cell not in self._standards:
            self._standards[place.cell] = list(self.night.classifier.standards(*plane.cell_codes(place.cell)))
        names = ["", *self._standards[place.cell]]
        at = names.index(place.standard) if place.standard in names else 0
        name = names[(at + int(v.get("step", 1))) % len(names)]
        self.look = replace(self.look, place=replace(place, standard=name))
        self.said = f"The real star {name}." if name else "Back to the interpolated template."

    def _measured(self, v: dict[str, Any]) -> None:
        self.look = replace(self.look, measured=not self.look.measured)

    def _names(self, v: dict[str, Any]) -> None:
        self.look = replace(self.look, names=not self.look.names)

    def _blur(self, v: dict[str, Any]) -> None:
        blur = self.look.blur_angstrom + BLUR_STEP_ANGSTROM * int(v.get("step", 1))
        self.look = replace(self.look, blur_angstrom=float(np.clip(blur, -3.0, 12.0)))

    def _velocity(self, v: dict[str, Any]) -> None:
        nudge = self.look.nudge_kms + VELOCITY_STEP_KMS * int(v.get("step", 1))
        self.look = replace(self.look, nudge_kms=float(np.clip(nudge, -400.0, 400.0)))

    def _plain(self, v: dict[str, Any]) -> None:
        self.look = replace(self.look, blur_angstrom=0.0, nudge_kms=0.0)

    def _enlarge(self, v: dict[str, Any]) -> None:
        self.look = replace(self.look, third=0 if v.get("whole") else (self.look.third + 1) % 4)

    def _flag(self, v: dict[str, Any]) -> None:
        name = str(v.get("name", ""))
        if name in FLAGS:
            self.look = replace(self.look, flags=self.look.flags ^ {name})

    def _theme(self, v: dict[str, Any]) -> None:
        self.dark = bool(v.get("dark", not self.dark))

    def _hello(self, v: dict[str, Any]) -> None:
        self.said = WELCOME
        self.dark = bool(v.get("dark", self.dark))
        self.who = str(v.get("who") or self.who)[:12]

    # ---- the queue ------------------------------------------------------------------------------------------------

    def _open(self, v: dict[str, Any]) -> None:
        index = int(v.get("star", self.index))
        if 0 <= index < len(self.night.stars) and self.night.stars[index].shown:
            self.index, self.editing = index, False
        else:
            self.said = "That star cannot be shown."

    def _step(self, by: int) -> None:
        queue = [k for k in self.night.queue if self.night.stars[k].shown]
        at = queue.index(self.index) + by
        if 0 <= at < len(queue):
            self.index, self.editing = queue[at], False
        else:
            self.said = "This is the last star." if by > 0 else "This is the first star."

    def _next(self, v: dict[str, Any]) -> None:
        self._step(1)

    def _previous(self, v: dict[str, Any]) -> None:
        self._step(-1)

    # ---- decisions ------------------------------------------------------------------------------------------------

    def _keep(self, action: Action, mk_type: str, v: dict[str, Any], cell: Cell | None) -> None:
        self.who = str(v.get("who", self.who)).strip()[:12]
        name = self.star.name
        flags = tuple(f for f in FLAGS if f in self.look.flags)
        kept = self.night.decide(self.index, action, mk_type, flags, str(v.get("remark", "")).strip(), self.who,
                                 None if cell is None else self.probability(cell))
        self._decided[name] = kept
        self.editing = False
        todo = self.night.undecided(self._decided)
        words = {"accept": f"{name} accepted as {mk_type}", "amend": f"{name} amended to {mk_type}",
                 "set aside": f"{name} set aside"}[action]
        self.said = f"{words}, kept. " + (f"{len(todo)} to go." if todo else "That was the last one.")
        if todo:
            later = self.night.queue[self.night.queue.index(self.index):]
            self.index = next((k for k in later if k in todo), todo[0])

    def _accept(self, v: dict[str, Any]) -> None:
        said = self.star.assignment
        if said is None or said.status != "typed":
            self.said = "The machine gave no MK type to accept: amend it (E) or set it aside (X)."
            return
        self._keep("accept", said.mk_type, v, self.best_cell())

    def _edit(self, v: dict[str, Any]) -> None:
        self.editing = True

    def _cancel(self, v: dict[str, Any]) -> None:
        self.editing = False

    def _amend(self, v: dict[str, Any]) -> None:
        from starfathom.classify.mktype import MKType

        text = str(v.get("type", "")).strip() or plane.cell_name(self.look.place.cell)
        mk_type = str(MKType.parse(text))
        self._keep("amend", mk_type, v, plane.cell_named(mk_type))

    def _aside(self, v: dict[str, Any]) -> None:
        self._keep("set aside", "", v, None)

    def _undo(self, v: dict[str, Any]) -> None:
        taken = self.night.log.undo(self.who)
        self._decided = self.night.decisions()
        if taken is None:
            self.said = "There is nothing to undo."
            return
        self.said = f"Taken back: {taken.name}, {taken.action} {taken.mk_type}".rstrip() + "."
        for k, star in enumerate(self.night.stars):
            if star.name == taken.name and star.shown:
                self.index = k
                self.look = replace(self.look, flags=frozenset(taken.flags) & frozenset(FLAGS))
