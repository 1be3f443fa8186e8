"""Small pictures as SVG text; colours come from the page by class names, and so follow light, dark and print."""

from __future__ import annotations

import math
from collections.abc import Iterable, Sequence
from html import escape

import numpy as np
from numpy.typing import NDArray

FloatArray = NDArray[np.float64]


def ticks_between(lo: float, hi: float, about: int = 6) -> list[float]:
    """Round numbers from ``lo`` to ``hi`` (either way round), some ``about`` of them."""
    low, high = min(lo, hi), max(lo, hi)
    if not (math.isfinite(low) and math.isfinite(high)) or high <= low:
        return [lo]
    raw = (high - low) / max(1, about)
    power = 10.0 ** math.floor(math.log10(raw))
    step = next(m * power for m in (1, 2, 2.5, 5, 10) if m * power >= raw * 0.999)
    first = math.ceil(low / step - 1e-9)
    return [round(k * step, 10) for k in range(first, math.floor(high / step + 1e-9) + 1)]


class Plot:
    """One picture with straight axes. Every method adds to it and returns it; ``str()`` gives the SVG.

    Parameters
    ----------
    width, height : pixels, axes' labels included
    x, y : (lo, hi) in data units; hi < lo turns an axis round
    left, bottom, top, right : margins, pixels
    title : said to those who cannot see it
    """

    def __init__(self, width: float, height: float, x: tuple[float, float], y: tuple[float, float], *,
                 left: float = 46, bottom: float = 34, top: float = 8, right: float = 8, title: str = "") -> None:
        self.width, self.height = width, height
        self._x, self._y = x, y
        self._box = (left, top, width - right, height - bottom)
        self._parts: list[str] = []
        self._title = title

    def px(self, x: float) -> float:
        """Pixel of a data x."""
        a, b = self._x
        return self._box[0] + (x - a) / (b - a) * (self._box[2] - self._box[0])

    def py(self, y: float) -> float:
        """Pixel of a data y."""
        a, b = self._y
        return self._box[3] - (y - a) / (b - a) * (self._box[3] - self._box[1])

    def line(self, x: Sequence[float] | FloatArray, y: Sequence[float] | FloatArray, css: str = "ink") -> Plot:
        """A line, broken where either is not finite."""
        path, pen = [], "M"
        for a, b in zip(np.asarray(x, float), np.asarray(y, float)):
            if not (np.isfinite(a) and np.isfinite(b)):
                pen = "M"
                continue
            path.append(f"{pen}{self.px(float(a)):.1f} {self.py(float(b)):.1f}")
            pen = "L"
        self._parts.append(f'<path class="line {css}" d="{"".join(path)}"/>')
        return self

    def area(self, x: FloatArray, y: FloatArray, base: float = 0.0, css: str = "shade") -> Plot:
        """A filled area down to ``base``."""
        points = [(x[0], base), *zip(x, y), (x[-1], base)]
        path = "L".join(f"{self.px(float(a)):.1f} {self.py(float(b)):.1f}" for a, b in points)
        self._parts.append(f'<path class="fill {css}" d="M{path}Z"/>')
        return self

    def bar(self, x0: float, x1: float, y0: float, y1: float, css: str = "shade", opacity: float = 1.0,
            note: str = "") -> Plot:
        """A box between two corners."""
        a, b = sorted((self.px(x0), self.px(x1)))
        c, d = sorted((self.py(y0), self.py(y1)))
        title = f"<title>{escape(note)}</title>" if note else ""
        fade = "" if opacity >= 1 else f' opacity="{opacity:.2f}"'
        self._parts.append(f'<rect class="{css}" x="{a:.1f}" y="{c:.1f}" width="{b - a:.1f}" '
                           f'height="{d - c:.1f}"{fade}>{title}</rect>')
        return self

    def dot(self, x: float, y: float, css: str = "dot", radius: float = 4, note: str = "", link: str = "") -> Plot:
        """A disc, with a link if given."""
        title = f"<title>{escape(note)}</title>" if note else ""
        mark = f'<circle class="{css}" cx="{self.px(x):.1f}" cy="{self.py(y):.1f}" r="{radius}">{title}</circle>'
        self._parts.append(f'<a href="{escape(link)}">{mark}</a>' if link else mark)
        return self

    def text(self, x: float, y: float, text: str, css: str = "label", anchor: str = "start", dx: float = 0,
             dy: float = 0, turn: bool = False) -> Plot:
        """Words at a data point, moved by pixels."""
        a, b = self.px(x) + dx, self.py(y) + dy
        rotate = f' transform="rotate(-90 {a:.1f} {b:.1f})"' if turn else ""
        self._parts.append(f'<text class="{css}" x="{a:.1f}" y="{b:.1f}" text-anchor="{anchor}"{rotate}>'
                           f"{escape(text)}</text>")
        return self

    def x_axis(self, ticks: Iterable[tuple[float, str]], name: str = "") -> Plot:
        """The lower axis with its ticks as (value, text)."""
        left, _, right, base = self._box
        self._parts.append(f'<path class="axis" d="M{left:.1f} {base:.1f}H{right:.1f}"/>')
        for value, text in ticks:
            x = self.px(value)
            if left - 1 <= x <= right + 1:
                self._parts.append(f'<path class="axis" d="M{x:.1f} {base:.1f}v4"/><text class="label" x="{x:.1f}" '
                                   f'y="{base + 15:.1f}" text-anchor="middle">{escape(text)}</text>')
        if name:
            self._parts.append(f'<text class="label" x="{(left + right) / 2:.1f}" y="{base + 29:.1f}" '
                               f'text-anchor="middle">{escape(name)}</text>')
        return self

    def y_axis(self, ticks: Iterable[tuple[float, str]], name: str = "") -> Plot:
        """The left axis with its ticks as (value, text)."""
        left, top, _, base = self._box
        self._parts.append(f'<path class="axis" d="M{left:.1f} {top:.1f}V{base:.1f}"/>')
        for value, text in ticks:
            y = self.py(value)
            if top - 1 <= y <= base + 1:
                self._parts.append(f'<path class="axis" d="M{left:.1f} {y:.1f}h-4"/><text class="label" '
                                   f'x="{left - 7:.1f}" y="{y + 4:.1f}" text-anchor="end">{escape(text)}</text>')
        if name:
            y = (top + base) / 2
            self._parts.append(f'<text class="label" x="12" y="{y:.1f}" text-anchor="middle" '
                               f'transform="rotate(-90 12 {y:.1f})">{escape(name)}</text>')
        return self

    def __str__(self) -> str:
        title = f"<title>{escape(self._title)}</title>" if self._title else ""
        return (f'<svg viewBox="0 0 {self.width:g} {self.height:g}" width="{self.width:g}" role="img">{title}'
                f'{"".join(self._parts)}</svg>')
