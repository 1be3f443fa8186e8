"""What a person reads on the terminal: one compact block a star, in words, for a tired eye.

Blocks are made from table rows (the dicts of ``Assignment.row()`` and ``Fathoming.row()``), so that a star just
classified and one read back from a finished run look the same. Colour only underlines what the words say already.
"""

from __future__ import annotations

import math
import os
import re
import shutil
import sys
import textwrap
from collections.abc import Iterable, Mapping, Sequence
from typing import IO, Any, TypeGuard

Row = Mapping[str, Any]

MIN_WIDTH, MAX_WIDTH = 50, 110
LABEL_WIDTH = 10

#: Flag of a row whose type was not found but given (``chain.TYPE_GIVEN``).
GIVEN_FLAG = "type-given"

_STYLES = {"bold": "1", "dim": "2", "good": "1;32", "fair": "1;33", "poor": "1;31", "warn": "33"}

#: Least probability for each word.
_WORDS = ((0.95, "almost certainly"), (0.8, "very likely"), (0.6, "probably"), (0.4, "perhaps"), (0.0, "possibly"))


def width_of(stream: IO[str] | None = None) -> int:
    """Columns to write in: the terminal's, held between 50 and 110 (80 where there is no terminal)."""
    return max(MIN_WIDTH, min(MAX_WIDTH, shutil.get_terminal_size((80, 24)).columns))


def colour_wanted(stream: IO[str] | None = None) -> bool:
    """Colour only on a terminal, and not when NO_COLOR is set or the terminal is dumb."""
    stream = stream or sys.stdout
    return (
        bool(getattr(stream, "isatty", lambda: False)())
        and "NO_COLOR" not in os.environ
        and os.environ.get("TERM") != "dumb"
    )


def _styled(text: str, style: str, colour: bool) -> str:
    return f"\x1b[{_STYLES[style]}m{text}\x1b[0m" if colour else text


def _is_number(value: Any) -> TypeGuard[float]:
    return isinstance(value, int | float) and not isinstance(value, bool) and math.isfinite(value)


def in_words(probability: float) -> str:
    """A probability as a word, such as "very likely"."""
    return next(word for least, word in _WORDS if probability >= least)


def per_cent(probability: float) -> str:
    """A probability in whole per cent; never rounded up to certainty or down to impossibility."""
    if 0.99 < probability < 0.9995:
        return f"{100 * probability:.1f} %"
    if probability >= 0.9995:
        return "over 99.9 %"
    return "under 1 %" if probability < 0.01 else f"{100 * probability:.0f} %"


def class_sentence(row: Row) -> str:
    """Luminosity-class probabilities in words: "very likely V (88 %), possibly IV (11 %)"."""
    probabilities = sorted(
        ((float(v), k[2:]) for k, v in row.items() if k.startswith("p_") and _is_number(v)), reverse=True
    )
    told = [(p, name) for p, name in probabilities if p >= 0.03][:3]
    return ", ".join(f"{in_words(p)} {name} ({per_cent(p)})" for p, name in told)


def significant(value: float, error: float | None = None, digits: int = 2, most: int = 3) -> str:
    """``value`` to the decimal where ``error`` has its last of ``digits`` figures (three figures without an error),
    but to ``most`` decimals at the most."""
    if not _is_number(value):
        return "?"
    scale = error
    if scale is None or not _is_number(scale) or scale <= 0:
        scale, digits = abs(value), 3
    if scale == 0:
        return "0"
    decimals = min(most, digits - 1 - math.floor(math.log10(scale)))
    return f"{round(value, decimals):.{max(0, decimals)}f}"


def distance_text(parsec: float, step: float) -> str:
    """A distance as people write it, in pc or kpc, to the figures that ``step`` (its error, pc) makes sensible."""
    if not _is_number(parsec):
        return "?"
    if abs(parsec) >= 10000:
        return f"{significant(parsec / 1000, step / 1000)} kpc"
    return f"{significant(parsec, step)} pc"


def _with_error(row: Row, key: str, digits: int = 2, sign: bool = False) -> str:
    value, error = row.get(key), row.get(f"{key}_err")
    if not _is_number(value):
        return ""
    text = significant(value, error, digits)
    if sign and value > 0:
        text = f"+{text}"
    return f"{text} ± {significant(error, error, digits)}" if _is_number(error) else text


def _wrapped(label: str, text: str, width: int) -> list[str]:
    # A number and its unit stay on one line: hidden from the wrapping by a no-break space.
    whole = re.sub(r"(?<=\d) (?=%|pc\b|kpc\b|Å|K\b|km/s|sigma)", "\0", " ".join(text.split()))
    lines = textwrap.wrap(whole, width - LABEL_WIDTH - 2, break_long_words=True, break_on_hyphens=False) or [""]
    head = f"  {label:<{LABEL_WIDTH}}"
    rows = [head + lines[0], *(" " * len(head) + line for line in lines[1:])]
    return [row.replace("\0", " ") for row in rows]


def _joined(label: str, pieces: Iterable[str], width: int) -> list[str]:
    """Pieces side by side with a gap, a new line where the next would not fit."""
    lines: list[str] = []
    for piece in (p for p in pieces if p):
        if lines and len(lines[-1]) + 3 + len(piece) <= width:
            lines[-1] += f"   {piece}"
        else:
            lines += _wrapped(label if not lines else "", piece, width)
    return lines


def _type_given(row: Row) -> bool:
    return GIVEN_FLAG in str(row.get("flags") or "").split(",")


def _harmless(row: Row) -> dict[str, Any]:
    """The row without control characters: a name out of a file must not steer the terminal."""
    return {k: re.sub(r"[\x00-\x1f\x7f-\x9f]+", " ", v) if isinstance(v, str) else v for k, v in row.items()}


def _headline(row: Row, width: int, colour: bool) -> str:
    name = str(row.get("name") or row.get("file") or "")
    status = row.get("status")
    if status == "typed":
        best = max((float(v) for k, v in row.items() if k.startswith("p_") and _is_number(v)), default=0.0)
        style = "good" if best >= 0.8 else "fair" if best >= 0.5 else "poor"
        shown = str(row.get("mk_type"))
        given = "   (type as given)" if _type_given(row) else ""
        return f"{_styled(name, 'bold', colour)}   {_styled(shown, style, colour)}{given}"
    kind = str(row.get("object_kind") or "")
    what = "not typed" if status == "refused" else "failed"
    other = str(row.get("other_type") or "")
    seen = "" if kind in ("", "unknown", "star") else f": {kind}{f', {other}' if other else ''}"
    return f"{_styled(name, 'bold', colour)}   {_styled(what + seen, 'poor' if status == 'failed' else 'fair', colour)}"


def _spectrum_lines(row: Row, width: int) -> list[str]:
    pieces = []
    if _is_number(row.get("snr")):
        window = f" ({row['snr_window']})" if row.get("snr_window") else ""
        pieces.append(f"S/N {significant(row['snr'], row['snr'] / 10, 1)} per Å{window}")
    if _is_number(row.get("fwhm_angstrom")):
        pieces.append(f"FWHM {row['fwhm_angstrom']:.1f} Å")
    if _is_number(row.get("velocity_kms")):
        error = row.get("velocity_err_kms")
        known = f" ± {error:.0f}" if _is_number(error) else ""
        pieces.append(f"{row['velocity_kms']:+.0f}{known} km/s")
    if row.get("wave_medium"):
        pieces.append(str(row["wave_medium"]))
    return _joined("spectrum", pieces, width)


def _distance_lines(row: Row, width: int) -> list[str]:
    if not _is_number(row.get("distance_pc")):
        return []
    low, high = row.get("distance_lo_pc", math.nan), row.get("distance_hi_pc", math.nan)
    low95, high95 = row.get("distance_lo95_pc", math.nan), row.get("distance_hi95_pc", math.nan)
    step = max(float(high) - float(low), 1e-9) / 2 if _is_number(low) and _is_number(high) else row["distance_pc"] / 10

    def span(a: Any, b: Any) -> str:
        return f"{distance_text(a, step).removesuffix(' pc').removesuffix(' kpc')} to {distance_text(b, step)}"

    return _joined(
        "distance",
        [f"{distance_text(row['distance_pc'], step)}", f"68 % {span(low, high)}", f"95 % {span(low95, high95)}"],
        width,
    )


def _parallax_line(row: Row, width: int) -> list[str]:
    sigma = row.get("parallax_sigma")
    if not _is_number(sigma):
        return []
    size = abs(float(sigma))
    words = "agrees" if size < 2 else "is in tension" if size < 3 else "disagrees"
    return _wrapped("parallax", f"{words} ({sigma:+.1f} sigma)", width)


def budget_sentence(budget: Sequence[Row]) -> str:
    """What contributed to the error of the distance, largest first, such as "scale scatter 14 %, class 6 %"."""
    told = [b for b in budget if b.get("step") != "total" and _is_number(b.get("per_cent"))]
    shares = sorted(((float(b["per_cent"]), str(b["step"])) for b in told), reverse=True)
    named = [f"{step} {value:.0f} %" for value, step in shares if value >= 1]
    return ", ".join(named) + (", the rest under 1 %" if named and len(shares) > len(named) else "")


def sentences_of(cautions: Any) -> list[str]:
    """Cautions, a text or a sequence of them, as single sentences."""
    text = cautions if isinstance(cautions, str) else " ".join(cautions or ())
    return [part.strip() for part in re.split(r"(?<=[.!?])\s+(?=[A-Z])", text) if part.strip()]


def common_cautions(rows: Sequence[Row]) -> tuple[str, ...]:
    """Cautions that most stars of a list share: better said once than at every star."""
    counts: dict[str, int] = {}
    for row in rows:
        for sentence in sentences_of(row.get("cautions")):
            counts[sentence] = counts.get(sentence, 0) + 1
    return tuple(sentence for sentence, n in counts.items() if n >= 4 and 2 * n > len(rows))


def _caution_lines(row: Row, said: Sequence[str], width: int, colour: bool) -> list[str]:
    text = " ".join(s for s in sentences_of(row.get("cautions")) if s not in said)
    return [_styled(line, "warn", colour) for line in _wrapped("careful", text, width)] if text else []


def _finding_lines(row: Row, width: int) -> list[str]:
    """What the spectrum said: class probabilities, remark, nearest templates."""
    lines: list[str] = []
    if not _type_given(row):
        error = row.get("t_code_err")
        subtype = f"subtype ± {significant(error, error)}" if _is_number(error) else ""
        lines += _joined("class", [class_sentence(row), subtype], width)
    if row.get("remark"):
        lines += _wrapped("seen", str(row["remark"]), width)
    if row.get("nearest"):
        lines += _wrapped("like", ", ".join(str(row["nearest"]).split(",")), width)
    return lines


def _star_lines(row: Row, width: int) -> list[str]:
    """What follows for the star: dust, distance, temperature, luminosity, radius."""
    absolute, ebv = _with_error(row, "abs_mag_v", sign=True), _with_error(row, "ebv")
    doubt = "" if row.get("abs_mag_v_ok", True) else " (beyond where parallaxes check it)"
    a_v = significant(row["a_v"], row.get("a_v_err"), most=2) if _is_number(row.get("a_v")) else ""
    dust = [f"E(B-V) {ebv}" if ebv else "", f"A_V {a_v}" if a_v else ""]
    temperature, luminosity = _with_error(row, "teff_k"), _with_error(row, "log_lum_lsun", sign=True)
    radius = _with_error(row, "radius_rsun")
    physics = [f"Teff {temperature} K" if temperature else "", f"log L {luminosity}" if luminosity else "",
               f"R {radius} Rsun" if radius else ""]  # fmt: skip
    return [
        *_joined("M_V", [f"{absolute} from the spectrum{doubt}" if absolute else ""], width),
        *_joined("dust", dust, width),
        *_distance_lines(row, width),
        *_joined("star", physics, width),
        *_parallax_line(row, width),
    ]


def star_block(row: Row, budget: Sequence[Row] = (), *, width: int = 80, colour: bool = False,
               said: Sequence[str] = ()) -> str:  # fmt: skip
    """All that matters about one star as a few lines of text.

    Parameters
    ----------
    row : a row of a results table, with or without the columns of the distance
    budget : the star's rows of the error budget (``step``, ``per_cent``)
    width : columns to write in
    colour : whether to use ANSI colour
    said : cautions told elsewhere, to be left out here
    """
    row = _harmless(row)
    typed = row.get("status") == "typed"
    lines = [_headline(row, width, colour)]
    if row.get("reason"):
        lines += _wrapped("because", str(row["reason"]), width)
    if typed:
        lines += _finding_lines(row, width)
    lines += _spectrum_lines(row, width)
    flags = [flag.strip() for flag in str(row.get("flags") or "").split(",") if flag.strip() not in ("", GIVEN_FLAG)]
    if flags:
        lines += _wrapped("flags", ", ".join(flags), width)
    if typed:
        lines += _star_lines(row, width)
        shares = budget_sentence(budget)
        if shares:
            lines += _wrapped("errors", shares, width)
        lines += _caution_lines(row, said, width, colour)
        if row.get("advice"):
            lines += _wrapped("next", str(row["advice"]), width)
    return "\n".join(lines)


def one_line(row: Row, *, width: int = 80, colour: bool = False) -> str:
    """One star on one line, for long lists: name, type or outcome, distance."""
    row = _harmless(row)
    name = str(row.get("name") or row.get("file") or "")
    if row.get("status") == "typed":
        what, style = str(row.get("mk_type")), "bold"
        low, high = row.get("distance_lo_pc"), row.get("distance_hi_pc")
        step = (high - low) / 2 if _is_number(low) and _is_number(high) else math.nan
        far = distance_text(row["distance_pc"], step) if _is_number(row.get("distance_pc")) else ""
    else:
        what, style, far = f"{row.get('status')}: {row.get('reason')}", "warn", ""
    room = max(12, width // 3)
    return f"{name[-room:]:<{room}} {_styled(f'{what[: width - room - 14]:<12}', style, colour)} {far}".rstrip()


def summary(counts: Mapping[str, int]) -> str:
    """How many stars were typed, refused and failed, in one sentence."""
    typed = counts["rows"] - counts["refused"] - counts["failed"]
    parts = [f"{typed} typed"]
    if counts["refused"]:
        parts.append(f"{counts['refused']} refused (readable, but no normal star or too poor to say)")
    if counts["failed"]:
        parts.append(f"{counts['failed']} failed")
    stars = "star" if counts["rows"] == 1 else "stars"
    return f"{counts['rows']} {stars}: {', '.join(parts)}."
