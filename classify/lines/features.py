"""The table of features: which lines and bands are measured, where, and what each is good for."""

from __future__ import annotations

import csv
from collections.abc import Iterator, Sequence
from dataclasses import dataclass, field
from importlib.resources import files
from typing import Literal

from starfathom.classify.errors import RequestError

Kind = Literal["line", "blend", "band", "mask"]
Interval = tuple[float, float]


@dataclass(frozen=True)
class Feature:
    """One line, blend, band or telluric mask; all wavelengths in angstrom, air, rest frame.

    Attributes
    ----------
    name, label : in code and tables; for people
    wavelength : rest wavelength
    window : closed interval the equivalent width is summed over
    blue, red : side bands of the pseudo-continuum; None where the definition has none
    kind : "line", "blend" (``components`` are fitted together), "band" (never fitted) or "mask" (telluric)
    components : ((label, wavelength), ...) of a blend
    tells, types : what it tells, for which types
    coarsest_fwhm : coarsest line spread at which it still tells it
    wings : widths at fixed depths are read off the data, not off a fit
    fixed : the windows are a definition, never widened for a coarse line spread
    citation : where wavelength and definition come from
    """

    name: str
    label: str
    wavelength: float
    window: Interval
    blue: Interval | None
    red: Interval | None
    kind: Kind = "line"
    components: tuple[tuple[str, float], ...] = ()
    tells: str = ""
    types: str = ""
    coarsest_fwhm: float = 15.0
    wings: bool = False
    fixed: bool = False
    citation: str = ""

    def __post_init__(self) -> None:
        if not self.window[0] < self.window[1]:
            raise RequestError(f"feature {self.name}: the window must run from a lower to a higher wavelength")
        if self.kind != "mask" and self.blue is None and self.red is None:
            raise RequestError(f"feature {self.name}: give at least one side band for the pseudo-continuum")

    @property
    def lines(self) -> tuple[tuple[str, float], ...]:
        """(label, wavelength) of what is fitted: the components of a blend, the line itself, nothing for a band."""
        if self.kind == "blend":
            return self.components
        return ((self.label, self.wavelength),) if self.kind == "line" else ()


@dataclass(frozen=True)
class FeatureTable(Sequence[Feature]):
    """An ordered, immutable set of features, found by number or by name."""

    features: tuple[Feature, ...]
    _by_name: dict[str, int] = field(init=False, repr=False, compare=False)
    _hash: int = field(init=False, repr=False, compare=False)

    def __post_init__(self) -> None:
        object.__setattr__(self, "_by_name", {f.name: i for i, f in enumerate(self.features)})
        object.__setattr__(self, "_hash", hash(self.features))
        if len(self._by_name) != len(self.features):
            raise RequestError("two features share one name")

    def __len__(self) -> int:
        return len(self.features)

    def __iter__(self) -> Iterator[Feature]:
        return iter(self.features)

    def __getitem__(self, key: int | str) -> Feature:  # type: ignore[override]
        return self.features[self.index_of(key) if isinstance(key, str) else key]

    def __hash__(self) -> int:
        return self._hash

    def index_of(self, name: str) -> int:
        """Column number of the feature ``name``; raises RequestError when there is none."""
        try:
            return self._by_name[name]
        except KeyError:
            raise RequestError(f"no feature is called {name!r}; the known ones are {', '.join(self.names)}") from None

    @property
    def names(self) -> tuple[str, ...]:
        return tuple(f.name for f in self.features)

    def select(self, *names: str) -> FeatureTable:
        """The named features, in the order asked for."""
        return FeatureTable(tuple(self[n] for n in names))


def _interval(lo: str, hi: str) -> Interval | None:
    return (float(lo), float(hi)) if lo and hi else None


def _components(text: str) -> tuple[tuple[str, float], ...]:
    pairs = (item.rsplit(":", 1) for item in text.split(";") if item)
    return tuple((label.strip(), float(wave)) for label, wave in pairs)


def load_features() -> FeatureTable:
    """Read ``data/features.ecsv``: everything measured, telluric masks included.

    The few columns needed are read with the csv module, since importing astropy.table costs more than measuring.
    """
    text = (files(__package__) / "data" / "features.ecsv").read_text(encoding="utf-8")
    rows = csv.DictReader(line for line in text.splitlines() if not line.startswith("#"))
    found = []
    for row in rows:
        window = _interval(row["window_lo"], row["window_hi"])
        assert window is not None, row["feature"]
        found.append(Feature(
            name=row["feature"], label=row["label"], wavelength=float(row["wavelength"]), window=window,
            blue=_interval(row["blue_lo"], row["blue_hi"]), red=_interval(row["red_lo"], row["red_hi"]),
            kind=row["kind"], components=_components(row["components"]),  # type: ignore[arg-type]
            tells=row["tells"], types=row["types"], coarsest_fwhm=float(row["coarsest_fwhm"]),
            wings=row["wings"] == "1", fixed=row["fixed"] == "1", citation=row["citation"]))
    return FeatureTable(tuple(found))


_ALL = load_features()
#: Everything measured, in the order of the table.
FEATURES = FeatureTable(tuple(f for f in _ALL if f.kind != "mask"))
#: Telluric bands, in the observer's frame (air).
TELLURIC = FeatureTable(tuple(f for f in _ALL if f.kind == "mask"))
