"""The three pictures on the desk: the spectrum, the plane, the strip of windows; and how they follow the session."""

from __future__ import annotations

import json
from typing import Any

import numpy as np
from bokeh.core.properties import value
from bokeh.events import Pan, Tap
from bokeh.models import (
    ColumnDataSource,
    FixedTicker,
    HoverTool,
    LinearColorMapper,
    PanTool,
    Range1d,
    WheelZoomTool,
)
from bokeh.plotting import figure
from numpy.typing import NDArray

from starfathom.classify.errors import StarfathomError
from starfathom.desk import plane, texts
from starfathom.desk.palette import PALETTES, Palette, ramp
from starfathom.desk.session import Comparison, Session
from starfathom.desk.windows import Window, choose_marks, within
from starfathom.templates.subtypes import CLASSES, LETTERS, SUBTYPES

FloatArray = NDArray[np.float64]

FONT = "system-ui, 'DejaVu Sans', sans-serif"
CLIP_SIGMA = 6.0          # ribbons are cut off here
SPECTRUM_POINTS = 2600    # more pixels than this are averaged in pairs for the overall picture
PLAIN_LEVELS = {-0.5: "−3 σ", 0: "0", 0.5: "+3 σ"}
SPECTRUM_SOURCES = ("star", "here", "pin", "rail", "rail_lines", "bands", "names", "name_ticks")
STRIP_SOURCES = ("w_star", "w_here", "w_pin", "ribbon_here", "ribbon_pin", "cards", "levels", "marks", "titles",
                 "tells", "size_here", "size_pin", "worst")
PLANE_CELLS = 30          # subtypes on view


class View:
    """Bokeh figures and data sources for one session; ``refresh`` brings all of it up to date in one message."""

    def __init__(self, session: Session) -> None:
        self.session = session
        self.page = ColumnDataSource(data={"id": [], "kind": [], "text": []}, name="page")
        self._sent: dict[Any, Any] = {}
        self._inks: list[tuple[Any, str, str]] = []       # (model, property, palette field)
        self._sources: dict[str, ColumnDataSource] = {}
        self.spectrum = self._figure("spectrum", [Range1d(start=3700, end=6800), Range1d(start=0, end=1.3)])
        self.plane = self._figure("plane", [Range1d(start=0, end=PLANE_CELLS), Range1d(start=-0.5, end=8.75)])
        self.strip = self._figure("strip", [Range1d(start=0, end=100), Range1d(start=-1.15, end=4.2)])
        self.blink_groups: dict[str, list[Any]] = {"star": [], "here": [], "pin": []}
        self._mapper = LinearColorMapper(palette=ramp(PALETTES["light"]), low=0.0, high=1.0)
        self._draw_spectrum()
        self._draw_plane()
        self._draw_strip()
        self._palette: Palette | None = None

    # ---- pictures -------------------------------------------------------------------------------------------------

    def _figure(self, name: str, ranges: list[Range1d]) -> Any:
        f = figure(name=name, x_range=ranges[0], y_range=ranges[1], sizing_mode="stretch_both", tools="",
                   toolbar_location=None, min_border=0, min_border_left=6, min_border_right=8, output_backend="canvas",
                   outline_line_color=None)
        self._ink(f, "background_fill_color", "card")
        self._ink(f, "border_fill_color", "card")
        f.grid.visible = False
        for axis in (*f.xaxis, *f.yaxis):
            axis.minor_tick_line_color = None
            axis.major_tick_in, axis.major_tick_out = 0, 4
            axis.major_label_text_font_size = "12px"
            axis.major_label_text_font = FONT
            axis.axis_label_text_font_size = "12px"
            axis.axis_label_text_font_style = "normal"
            axis.axis_label_text_font = FONT
            self._ink(axis, "axis_line_color", "faint")
            self._ink(axis, "major_tick_line_color", "soft")
            self._ink(axis, "major_label_text_color", "soft")
            self._ink(axis, "axis_label_text_color", "soft")
        return f

    def _ink(self, model: Any, prop: str, colour: str) -> Any:
        self._inks.append((model, prop, colour))
        return model

    def _source(self, key: str, *columns: str) -> ColumnDataSource:
        self._sources[key] = ColumnDataSource(data={c: [] for c in columns})
        return self._sources[key]

    def _line(self, fig: Any, key: str, colour: str, **style: Any) -> Any:
        r = fig.multi_line("x", "y", source=self._source(key, "x", "y"), **style) if style.pop("many", False) \
            else fig.line("x", "y", source=self._source(key, "x", "y"), **style)
        self._ink(r.glyph, "line_color", colour)
        return r

    def _text(self, fig: Any, key: str, colour: str, **style: Any) -> Any:
        r = fig.text("x", "y", "text", source=self._source(key, "x", "y", "text"),
                     text_font=value(FONT), **style)
        self._ink(r.glyph, "text_color", colour)
        return r

    def _quad(self, fig: Any, key: str, fill: str | None, line: str | None = None, **style: Any) -> Any:
        columns = ("left", "right", "bottom", "top")
        extra = ("alpha",) if style.get("fill_alpha") == "alpha" else ()
        r = fig.quad(*(), **{c: c for c in columns}, source=self._source(key, *columns, *extra), **style)
        for prop, colour in (("fill_color", fill), ("line_color", line)):
            if colour is None:
                setattr(r.glyph, prop, None)
            else:
                self._ink(r.glyph, prop, colour)
        return r

    def _draw_spectrum(self) -> None:
        f = self.spectrum
        f.extra_y_ranges = {"sigma": Range1d(start=-7.5, end=58.0)}
        sigma = {"y_range_name": "sigma"}
        self._quad(f, "bands", "paper", fill_alpha=1.0, **sigma)
        star = self._line(f, "star", "ink", line_width=1.4)
        here = self._line(f, "here", "here", line_width=1.4)
        pin = self._line(f, "pin", "pin", line_width=1.4, line_dash=[5, 3])
        ribbon = f.varea("x", "y1", "y2", source=self._source("rail", "x", "y1", "y2"), fill_alpha=0.75, **sigma)
        self._ink(ribbon.glyph, "fill_color", "here")
        zero = f.segment("x0", "y0", "x1", "y1", source=self._source("rail_lines", "x0", "y0", "x1", "y1"),
                         line_width=1, **sigma)
        self._ink(zero.glyph, "line_color", "soft")
        ticks = f.segment("x", "y0", "x", "y1", source=self._source("name_ticks", "x", "y0", "y1"), **sigma)
        self._ink(ticks.glyph, "line_color", "faint")
        names = f.text("x", "y", "text", source=self._source("names", "x", "y", "text", "tells"), angle=np.pi / 2,
                       text_font_size="11.5px", text_baseline="middle", text_font=value(FONT), text_align="right",
                       **sigma)
        self._ink(names.glyph, "text_color", "ink")
        self.blink_groups["star"].append(star)
        self.blink_groups["here"].append(here)
        self.blink_groups["pin"].append(pin)
        f.add_tools(HoverTool(renderers=[names], tooltips="@text: @tells", visible=False),
                    PanTool(dimensions="width"), zoom := WheelZoomTool(dimensions="width"))
        f.toolbar.active_scroll = zoom
        f.xaxis.axis_label = None
        f.yaxis.ticker.desired_num_ticks = 4
        f.yaxis.axis_label = "relative flux"

    def _draw_plane(self) -> None:
        f = self.plane
        f.image("image", x="x", y="y", dw="dw", dh="dh", color_mapper=self._mapper,
                source=self._source("shade", "image", "x", "y", "dw", "dh"))
        self._quad(f, "grid", None, "faint", line_width=1)
        self._quad(f, "set90", None, "ink", line_width=1.2)
        self._text(f, "cells", "ink", text_align="center", text_baseline="middle", text_font_size="11px")
        best = f.scatter("x", "y", source=self._source("best", "x", "y"), marker="diamond", size=13, line_width=2)
        self._ink(best.glyph, "line_color", "ink")
        self._ink(best.glyph, "fill_color", "card")
        self._quad(f, "pin_cell", None, "pin", line_width=3, line_dash=[6, 3])
        self._quad(f, "here_cell", None, "here", line_width=3.5)
        self._quad(f, "rail_share", "shade", None)
        self._quad(f, "rail_view", None, "soft", line_width=1)
        self._quad(f, "rail_here", "here", None)
        self._text(f, "rail_letters", "soft", text_align="center", text_baseline="middle", text_font_size="11px")
        f.xaxis.ticker = FixedTicker(ticks=[k + 0.5 for k, name in enumerate(SUBTYPES) if "." not in name])
        f.xaxis.major_label_overrides = {k + 0.5: name for k, name in enumerate(SUBTYPES)}
        f.yaxis.ticker = FixedTicker(ticks=list(range(len(CLASSES))))
        f.xaxis.major_tick_out = 2
        f.xaxis.major_label_text_font_size = "11px"
        f.yaxis.major_tick_out = 0
        f.add_tools(zoom := WheelZoomTool(dimensions="width"))
        f.toolbar.active_scroll = zoom
        f.on_event(Tap, self._pointed)
        f.on_event(Pan, self._pointed)
        self.on_point: Any = None

    def _pointed(self, event: Any) -> None:
        if self.on_point is None or event.x is None or event.y is None:
            return
        row = round(event.y)
        if -0.5 <= event.y < 7.5:
            self.on_point([int(np.floor(event.x)), len(CLASSES) - 1 - row])

    def _draw_strip(self) -> None:
        f = self.strip
        self._quad(f, "cards", "paper", None)
        self._quad(f, "worst", None, "here", line_width=2)
        for sign in ("here", "pin"):
            self._quad(f, f"ribbon_{sign}", sign, None, fill_alpha="alpha")
        lines = f.segment("x0", "y0", "x1", "y1", source=self._source("levels", "x0", "y0", "x1", "y1"), line_width=1)
        self._ink(lines.glyph, "line_color", "faint")
        marks = f.segment("x", "y0", "x", "y1", source=self._source("marks", "x", "y0", "y1"), line_dash=[2, 3])
        self._ink(marks.glyph, "line_color", "soft")
        star = self._line(f, "w_star", "ink", many=True, line_width=1.8)
        pin = self._line(f, "w_pin", "pin", many=True, line_width=1.6, line_dash=[5, 3])
        here = self._line(f, "w_here", "here", many=True, line_width=1.6)
        self.blink_groups["star"].append(star)
        self.blink_groups["here"].append(here)
        self.blink_groups["pin"].append(pin)
        self._text(f, "titles", "ink", text_font_size="12px", text_font_style="bold", text_baseline="top")
        self._text(f, "tells", "soft", text_font_size="11px", text_baseline="top")
        self._text(f, "size_here", "here", text_font_size="12px", text_font_style="bold", text_align="right",
                   text_baseline="middle")
        self._text(f, "size_pin", "pin", text_font_size="12px", text_font_style="bold", text_align="right",
                   text_baseline="middle")
        f.yaxis.ticker = FixedTicker(ticks=[-0.5, 0, 0.5])
        f.yaxis.major_label_overrides = PLAIN_LEVELS
        f.xaxis.major_tick_out = 2

    # ---- following the session ------------------------------------------------------------------------------------

    def refresh(self) -> None:
        """Bring pictures and words up to date; only what has changed is sent."""
        s = self.session
        self._put_palette()
        here = pinned = None
        if s.star.shown:
            try:
                here = s.compare(s.look.place)
                pinned = None if s.look.pin is None else s.compare(s.look.pin)
                self._put_spectrum(here, pinned)
                self._put_strip(here, pinned)
            except StarfathomError as error:
                s.said = str(error)
                self._blank()
        self._put_plane()
        self._put_words(here, pinned)

    def _blank(self) -> None:
        """Empty the pictures of the spectrum: better nothing than the star before under this one's name."""
        for key in (*SPECTRUM_SOURCES, *STRIP_SOURCES):
            self._put(key, {column: [] for column in self._sources[key].data})

    def words(self) -> dict[str, str]:
        """The words for the page as it is first sent."""
        return {key[0]: text for key, text in self._sent.items() if isinstance(key, tuple) and key[1] == "html"}

    def forget_words(self) -> None:
        """Send every word again at the next refresh: the page has only now begun to listen."""
        for key in [k for k in self._sent if isinstance(k, tuple) or k == "who"]:
            del self._sent[key]

    def _put(self, key: str, data: dict[str, Any], stamp: Any = None) -> None:
        """Send a data source, unless ``stamp`` (or the data itself) is what was sent last."""
        mark = data if stamp is None else stamp
        if key in self._sent and _same(self._sent[key], mark):
            return
        self._sent[key] = mark
        self._sources[key].data = data

    def _put_palette(self) -> None:
        palette = PALETTES["dark" if self.session.dark else "light"]
        if palette is self._palette:
            return
        self._palette = palette
        for model, prop, colour in self._inks:
            setattr(model, prop, getattr(palette, colour))
        self._mapper.palette = ramp(palette)

    def _put_spectrum(self, here: Comparison, pinned: Comparison | None) -> None:
        s, f = self.session, self.spectrum
        ready, look = s.prepared(), s.look
        reach = np.flatnonzero(ready.valid)
        if len(reach) == 0:
            return
        cut = slice(int(reach[0]), int(reach[-1]) + 1)
        wave = ready.wave_angstrom[cut]
        as_flux = _continuum(ready.flux, ready.rectified, ready.valid)[cut] if look.measured else np.ones(len(wave))
        star = np.where(ready.valid[cut], ready.rectified[cut], np.nan) * as_flux
        if look.measured:
            star = np.where(ready.valid[cut], ready.flux[cut], np.nan)
        step = max(1, int(np.ceil(len(wave) / SPECTRUM_POINTS)))
        view = (s.index, look.measured, look.nudge_kms)
        self._put("star", {"x": _thin(wave, step), "y": _thin(star, step)}, view)
        for key, c in (("here", here), ("pin", pinned)):
            data: dict[str, Any] = {"x": [], "y": []}
            if c is not None:
                data = {"x": _thin(wave, step), "y": _thin(c.template[cut] * as_flux, step)}
            self._put(key, data, (view, look.blur_angstrom, c.place if c else None))
        clipped = np.clip(np.nan_to_num(_thin(here.sigmas[cut], step)), -CLIP_SIGMA, CLIP_SIGMA)
        x = _thin(wave, step)
        self._put("rail", {"x": x, "y1": np.zeros(len(x)), "y2": clipped}, (view, look.blur_angstrom, here.place))
        lo, hi = float(wave[0]), float(wave[-1])
        self._put("rail_lines", {"x0": [lo], "x1": [hi], "y0": [0.0], "y1": [0.0]})
        self._put("bands", _boxes([(w.lo_angstrom, w.hi_angstrom, -7.5, 58.0) for w in s.windows()]))
        if look.third:
            width = (hi - lo) / 3
            lo, hi = lo + (look.third - 1) * width, lo + look.third * width
        stretch = (s.index, look.third)
        if self._sent.get("stretch") != stretch:
            self._sent["stretch"] = stretch
            f.x_range.update(start=lo, end=hi)
        on_view = star[(wave >= lo) & (wave <= hi)]
        low, high = np.nanpercentile(on_view, [0.3, 99.7]) if np.isfinite(on_view).any() else (0.0, 1.0)
        room = 0.1 * (high - low) + 0.01
        top = high + room + (0.95 * (high - low) if look.names else 0.0)
        bottom = low - room - 0.24 * (high - low)
        if self._sent.get("span") != (bottom, top):
            self._sent["span"] = (bottom, top)
            f.y_range.update(start=float(bottom), end=float(top))
        marks = choose_marks(s.marks, ready.wave_angstrom, here.template, lo, hi,
                             SUBTYPES[look.place.cell[0]][0]) if look.names else []
        self._put("names", {"x": [m.wave_angstrom for m in marks], "y": [57.0] * len(marks),
                            "text": [_short(m.name) for m in marks], "tells": [m.tells for m in marks]})
        self._put("name_ticks", {"x": [m.wave_angstrom for m in marks], "y0": [14.0] * len(marks),
                                 "y1": [40.0] * len(marks)})

    def _put_strip(self, here: Comparison, pinned: Comparison | None) -> None:
        s, f = self.session, self.strip
        ready, windows = s.prepared(), s.windows()
        gap = 5.0
        lefts = np.cumsum([0.0, *[w.hi_angstrom - w.lo_angstrom + gap for w in windows]])
        total = float(lefts[-1] - gap) if windows else 100.0
        bottom, top = (-3.3, 4.9) if pinned else (-1.15, 4.2)
        if self._sent.get("strip_span") != (total, bottom):
            self._sent["strip_span"] = (total, bottom)
            f.x_range.update(start=0.0, end=total)
            f.y_range.update(start=bottom, end=top)
            f.yaxis.ticker = FixedTicker(ticks=[0, -2.15] if pinned else [-0.5, 0, 0.5])
            f.yaxis.major_label_overrides = {0: "here", -2.15: "pin"} if pinned else PLAIN_LEVELS
        lines: dict[str, tuple[list[Any], list[Any]]] = {k: ([], []) for k in ("w_star", "w_here", "w_pin")}
        ribbons: dict[str, list[tuple[float, float, float, float]]] = {"here": [], "pin": []}
        shades: dict[str, list[float]] = {"here": [], "pin": []}
        ticks: dict[float, str] = {}
        mark_x: list[float] = []
        for w, left in zip(windows, lefts):
            cut = within(ready.wave_angstrom, w)
            x = ready.wave_angstrom[cut] - w.lo_angstrom + left
            star = np.where(ready.valid[cut], ready.rectified[cut], np.nan)
            low, high = (np.nanmin(star), np.nanmax(star)) if np.isfinite(star).any() else (0.0, 1.0)
            room = 0.12 * (high - low) + 0.004

            def flux(y: FloatArray, low: float = low - room, high: float = high + room) -> FloatArray:
                return np.clip(1.2 + 1.9 * (y - low) / (high - low), 1.05, 3.3)

            lines["w_star"][0].append(x)
            lines["w_star"][1].append(flux(star))
            for key, c, middle in (("here", here, 0.0), ("pin", pinned, -2.15)):
                if c is None:
                    continue
                lines["w_" + key][0].append(x)
                lines["w_" + key][1].append(flux(c.template[cut]))
                z = np.clip(c.sigmas[cut], -CLIP_SIGMA, CLIP_SIGMA)
                half = np.gradient(x) / 2 if len(x) > 1 else np.ones(len(x))
                for a, h, v in zip(x, half, z):
                    if np.isfinite(v):
                        y = middle + v / CLIP_SIGMA
                        ribbons[key].append((a - h, a + h, min(middle, y), max(middle, y)))
                        shades[key].append(0.30 if abs(v) < 1 else 0.6 if abs(v) < 3 else 1.0)
            for m in w.marks:
                at = float(m.at_angstrom - w.lo_angstrom + left)
                mark_x.append(at)
                # numbers nearer than that would run into each other
                if all(abs(at - other) > 14.0 for other in ticks):
                    ticks[at] = f"{m.at_angstrom:.0f}"
        for key, (xs, ys) in lines.items():
            self._put(key, {"x": xs, "y": ys}, ("always", object()))
        for key in ("here", "pin"):
            self._put(f"ribbon_{key}", {**_boxes(ribbons[key]), "alpha": shades[key]}, ("always", object()))
        edges = [(float(a), float(a + w.hi_angstrom - w.lo_angstrom)) for a, w in zip(lefts, windows)]
        self._put("cards", _boxes([(a, b, bottom + 0.05, top) for a, b in edges]))
        levels = [0.0, 0.5, -0.5] + ([-2.15, -1.65, -2.65] if pinned else [])
        self._put("levels", {"x0": [a for a, _ in edges for _ in levels], "x1": [b for _, b in edges for _ in levels],
                             "y0": levels * len(edges), "y1": levels * len(edges)})
        self._put("marks", {"x": mark_x, "y0": [bottom + 0.05] * len(mark_x), "y1": [3.2] * len(mark_x)})
        per_px = total / 1050.0
        self._put("titles", _labels([a + 1 for a, _ in edges], top - 0.05,
                                    [_fit(w.title, (b - a) / per_px / 7.2) for w, (a, b) in zip(windows, edges)]))
        self._put("tells", _labels([a + 1 for a, _ in edges], top - 0.09 * (top - bottom),
                                   [_fit(_tells(w), (b - a) / per_px / 6.0) for w, (a, b) in zip(windows, edges)]))
        self._put("size_here", _labels([b - 1 for _, b in edges], 0.85, [_sigma(v) for v in here.by_window]))
        self._put("size_pin", _labels([b - 1 for _, b in edges], -1.3,
                                      [_sigma(v) for v in pinned.by_window] if pinned else []))
        sizes = np.array([v if np.isfinite(v) else 0.0 for v in here.by_window])
        worst = [(*edges[int(sizes.argmax())], bottom + 0.05, top - 0.07)] if len(sizes) and sizes.max() > 1.5 else []
        self._put("worst", _boxes(worst))
        if self._sent.get("strip_ticks") != ticks:
            self._sent["strip_ticks"] = ticks
            f.xaxis.ticker = FixedTicker(ticks=sorted(ticks))
            f.xaxis.major_label_overrides = dict(ticks)

    def _put_plane(self) -> None:
        s, f = self.session, self.plane
        posterior = s.posterior
        here = s.look.place.cell
        n, m = plane.N_TYPES, plane.N_CLASSES
        p = np.zeros((n, m)) if posterior is None else posterior / posterior.sum()
        shade = np.sqrt(p / p.max()) if p.max() > 0 else p
        self._put("shade", {"image": [shade.T[::-1]], "x": [0.0], "y": [-0.5], "dw": [float(n)], "dh": [float(m)]},
                  ("shade", s.index, s.star.assignment is None))
        view = self._plane_view(p, here)
        if self._sent.get("plane_view") != view:
            self._sent["plane_view"] = view
            f.x_range.update(start=view[0], end=view[1])
        self._put("grid", _boxes([(0.0, float(n), m - 1 - j - 0.5, m - 1 - j + 0.5) for j in range(m)]))
        inner = plane.inner_set(p) if posterior is not None else np.zeros((n, m), bool)
        self._put("set90", _boxes([_box((int(i), int(j))) for i, j in zip(*np.nonzero(inner))]))
        best = s.best_cell()
        seen = [c for i, j in zip(*np.nonzero(p >= 0.015)) if (c := (int(i), int(j))) != best]
        self._put("cells", {"x": [i + 0.5 for i, _ in seen], "y": [float(m - 1 - j) for _, j in seen],
                            "text": [f"{100 * p[c]:.0f}" for c in seen]})
        self._put("best", {"x": [best[0] + 0.5] if best else [], "y": [m - 1 - best[1] + 0.0] if best else []})
        self._put("here_cell", _boxes([_box(here, 0.04)]))
        self._put("pin_cell", _boxes([_box(s.look.pin.cell, 0.1)] if s.look.pin else []))
        shares = p.sum(axis=0)
        labels = {m - 1 - j: f"{c}  {texts.per_cent(float(shares[j])) if shares[j] >= 0.005 else '  –  '}"
                  for j, c in enumerate(CLASSES)}
        if self._sent.get("class_labels") != labels:
            self._sent["class_labels"] = labels
            f.yaxis.major_label_overrides = labels
        self._put_rail(p.sum(axis=1), view, here[0])

    def _plane_view(self, p: FloatArray, here: plane.Cell) -> tuple[float, float]:
        """The stretch of subtypes on view: round the posterior, shifted as little as needed to hold the cursor."""
        old = self._sent.get("plane_view")
        if old is None or self._sent.get("plane_star") != self.session.index:
            self._sent["plane_star"] = self.session.index
            held = np.flatnonzero(plane.inner_set(p, 0.99).any(axis=1)) if p.any() else np.array([here[0]])
            middle = (held[0] + held[-1] + 1) / 2
            width = min(float(plane.N_TYPES), max(float(PLANE_CELLS), held[-1] - held[0] + 7.0))
            old = (middle - width / 2, middle + width / 2)
        lo, hi = old
        shift = min(0.0, here[0] - 1.5 - lo) + max(0.0, here[0] + 2.5 - hi)
        lo, hi = lo + shift, hi + shift
        back = max(0.0, -1.0 - lo) - max(0.0, hi - plane.N_TYPES - 1.0)
        return lo + back, hi + back

    def _put_rail(self, share: FloatArray, view: tuple[float, float], here: int) -> None:
        """The rail above the plane: all subtypes from O to M, where the probability is, what part is on view."""
        n = plane.N_TYPES
        scale = (view[1] - view[0]) * 0.98 / n
        left = view[0] + 0.01 * (view[1] - view[0])
        at = left + scale * np.arange(n + 1)
        top = share / share.max() if share.max() > 0 else share
        bars = [(at[k], at[k + 1], 7.75, 7.75 + 0.9 * top[k]) for k in range(n) if top[k] > 0.01]
        self._put("rail_share", _boxes(bars))
        a, b = (left + scale * min(max(v, 0.0), n) for v in view)
        self._put("rail_view", _boxes([(a, b, 7.7, 8.7)]))
        self._put("rail_here", _boxes([(at[here], at[here + 1], 7.7, 8.7)]))
        letters = [(letter, [k for k, name in enumerate(SUBTYPES) if name[0] == letter]) for letter in LETTERS]
        self._put("rail_letters", {"x": [float(at[k[0]] + at[k[-1] + 1]) / 2 for _, k in letters],
                                   "y": [8.2] * len(letters), "text": [name for name, _ in letters]})

    # ---- words ----------------------------------------------------------------------------------------------------

    def _words(self, here: Comparison | None, pinned: Comparison | None) -> dict[tuple[str, str], str]:
        s = self.session
        return {
            ("star", "html"): texts.star_tile(s),
            ("place", "html"): texts.place_tile(s, here, pinned),
            ("machine", "html"): texts.machine_tile(s),
            ("count", "html"): texts.count_line(s),
            ("queue", "html"): texts.queue_list(s),
            ("evidence", "html"): texts.evidence_table(s, here),
            ("legend", "html"): texts.legend(s),
            ("nudges", "html"): texts.nudges(s),
            ("view-name", "html"): "as measured" if s.look.measured else "rectified",
            ("flags", "html"): texts.flag_chips(s),
            ("accept", "html"): texts.accept_label(s),
            ("said", "html"): texts.escape(s.said),
            ("", "on"): texts.lit_buttons(s),
            ("", "class"): json.dumps({"dark": s.dark, "light": not s.dark, "editing": s.editing}),
            ("", "blink"): ("pin" if s.look.pin else "star") if s.look.blink else "",
        }

    def _put_words(self, here: Comparison | None, pinned: Comparison | None) -> None:
        s = self.session
        news: list[tuple[str, str, str]] = []
        for (key, kind), text in self._words(here, pinned).items():
            if self._sent.get((key, kind)) != text:
                self._sent[(key, kind)] = text
                news.append((key, kind, text))
        if self._sent.get("remark_of") != s.index:
            self._sent["remark_of"] = s.index
            news.append(("remark", "value", ""))
            news.append(("", "reveal", ""))
        if self._sent.get("who") != s.who:
            self._sent["who"] = s.who
            news.append(("who", "value", s.who))
        if s.editing and not self._sent.get("was_editing"):
            news += [("type", "value", plane.cell_name(s.look.place.cell)), ("type", "focus", "")]
        self._sent["was_editing"] = s.editing
        if news:
            ids, kinds, lines = zip(*news)
            self.page.data = {"id": list(ids), "kind": list(kinds), "text": list(lines)}


def _same(a: Any, b: Any) -> bool:
    try:
        return bool(a == b)
    except ValueError:
        return False


def _thin(y: FloatArray, step: int) -> FloatArray:
    """Average runs of ``step`` pixels."""
    n = len(y) // step * step
    return y if step == 1 else y[:n].reshape(-1, step).mean(axis=1)


def _continuum(flux: FloatArray, rectified: FloatArray, valid: NDArray[np.bool_]) -> FloatArray:
    """Flux over rectified flux, bridged where that says nothing."""
    ok = valid & (np.abs(rectified) > 0.05)
    x = np.arange(len(flux))
    return np.interp(x, x[ok], flux[ok] / rectified[ok]) if ok.any() else np.ones(len(flux))


def _boxes(boxes: list[Any]) -> dict[str, list[float]]:
    """(left, right, bottom, top) as columns."""
    return {c: [float(b[k]) for b in boxes] for k, c in enumerate(("left", "right", "bottom", "top"))}


def _box(cell: plane.Cell, inset: float = 0.0) -> tuple[float, float, float, float]:
    y = plane.N_CLASSES - 1 - cell[1]
    return cell[0] + inset, cell[0] + 1 - inset, y - 0.5 + inset, y + 0.5 - inset


def _labels(x: list[float], y: float, text: list[str]) -> dict[str, list[Any]]:
    return {"x": x[:len(text)], "y": [y] * len(text), "text": text}


def _sigma(v: float) -> str:
    return f"{v:.1f} σ" if np.isfinite(v) else ""


def _fit(text: str, letters: float) -> str:
    """Cut a text to what there is room for."""
    return text if len(text) <= letters else text[:max(1, int(letters) - 1)] + "…"


def _short(name: str) -> str:
    """A line's name without its company: "Ca II H" for "Ca II H + H epsilon"."""
    for cut in (" (", " + ", " / ", "-"):
        name = name.split(cut)[0]
    return name


def _tells(w: Window) -> str:
    return next((m.tells for m in w.marks if m.tells), ", ".join(w.criteria))
