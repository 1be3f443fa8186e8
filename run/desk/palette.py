"""Colours and their meaning, the same on the desk, the sheet and in the report.

Three inks carry everything: *ink* for the star and for what the machine says, *here* (orange) for the place where one
stands, *pin* (blue) for the place one has pinned. Orange and blue stay apart for every common colour vision, and
differ in lightness and in line style, so that a grey print says the same.
"""

from __future__ import annotations

from dataclasses import dataclass


@dataclass(frozen=True)
class Palette:
    """Colours as ``#rrggbb``."""

    paper: str
    card: str
    ink: str
    soft: str
    faint: str
    here: str
    pin: str
    shade: str      # the posterior at its peak

    def css(self) -> str:
        """The colours as CSS custom properties."""
        return "".join(f"--{k}:{v};" for k, v in vars(self).items())


LIGHT = Palette(paper="#eef1f3", card="#ffffff", ink="#12181f", soft="#55616e", faint="#d4dae0",
                here="#c24e00", pin="#0a62b8", shade="#8fa6c4")
DARK = Palette(paper="#0c1014", card="#141a20", ink="#e8ecef", soft="#98a5b1", faint="#2b343d",
               here="#ff9a4d", pin="#6fb9ff", shade="#47617f")
PALETTES = {"light": LIGHT, "dark": DARK}


def ramp(palette: Palette, n: int = 64) -> list[str]:
    """``n`` colours from the card to the shade, even in each channel."""
    a, b = (_rgb(c) for c in (palette.card, palette.shade))
    return ["#" + "".join(f"{round(x + (y - x) * k / (n - 1)):02x}" for x, y in zip(a, b)) for k in range(n)]


def _rgb(colour: str) -> tuple[int, int, int]:
    return int(colour[1:3], 16), int(colour[3:5], 16), int(colour[5:7], 16)
