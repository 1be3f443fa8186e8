"""The words on the page, as HTML. Everything that comes from a file or a person is escaped here."""

from __future__ import annotations

import json
import math
from html import escape

from starfathom.classify.assignment import Assignment, Criterion
from starfathom.decisions import Decision
from starfathom.desk import plane
from starfathom.desk.session import FLAGS, Comparison, Place, Session


def per_cent(p: float | None) -> str:
    """A probability as text, never rounded to a false 0 or 100."""
    if p is None:
        return "–"
    if p >= 0.995:
        return "> 99 %" if p < 1.0 else "100 %"
    return f"{100 * p:.0f} %" if p >= 0.01 else "< 1 %"


def figures(value: float, digits: int = 3) -> str:
    """A number to so many figures, without an exponent; "–" where there is none."""
    if not math.isfinite(value):
        return "–"
    if value == 0:
        return "0"
    decimals = digits - 1 - math.floor(math.log10(abs(value)))
    return f"{round(value, decimals):,.{min(max(0, decimals), 6)}f}".replace(",", "\u2009").replace("-", "−")


def star_tile(s: Session) -> str:
    """Name of the star, and its decision if it has one."""
    decision = s.decided.get(s.star.name)
    said = s.star.assignment
    note = decision_words(decision) if decision else ("" if said is None else _conditions(said))
    return f'<div class="big" title="{escape(s.star.file)}">{escape(s.star.name)}</div><div class="what">{note}</div>'


def _conditions(said: Assignment) -> str:
    parts = []
    if math.isfinite(said.snr):
        parts.append(f"S/N {figures(said.snr, 2 if said.snr < 100 else 3)}")
    if math.isfinite(said.velocity_kms):
        parts.append(f"{said.velocity_kms:+.0f} km/s")
    if math.isfinite(said.fwhm_angstrom):
        parts.append(f"{said.fwhm_angstrom:.1f} Å")
    return " · ".join(parts)


def decision_words(d: Decision) -> str:
    """A decision in a few words."""
    words = {"accept": "accepted", "amend": f"amended to {d.mk_type}", "set aside": "set aside"}.get(d.action, d.action)
    return escape(words + (f" by {d.who}" if d.who else ""))


def place_tile(s: Session, here: Comparison | None, pinned: Comparison | None) -> str:
    """Where one stands, and what is pinned."""
    place = s.look.place
    probability = s.probability(place.cell)
    chance = "" if probability is None else f"probability {per_cent(probability)}"
    chance = " · ".join(x for x in (chance, _distance_words(s)) if x)
    fit = "" if here is None else f"misfit {here.overall:.2f} σ"
    top = f'here: <b>{escape(plane.cell_name(place.cell))}</b> <small>{chance}</small>'
    standard = f"real star {escape(place.standard)}" if place.standard else ""
    against = ""
    if pinned is not None and here is not None:
        against = (f'pinned <b class="pin">{escape(pinned.place.label)}</b> {pinned.overall:.2f} σ: '
                   f"{_preferred(here, pinned)}")
    under = " · ".join(x for x in (fit, against, standard) if x)
    return f'<div class="big">{top}</div><div class="what">{under}</div>'


def _distance_words(s: Session) -> str:
    """How far the star would be if it were of the type where one stands."""
    found = s.night.distance_if(s.index, plane.cell_name(s.look.place.cell))
    if found is None or not math.isfinite(found[0]):
        return ""
    middle, lo, hi = (figures(v) for v in found)
    return f'<span title="68 %: {lo} to {hi} pc">{middle} pc</span>'


def _run_distance(s: Session) -> str:
    """Where the run puts the star."""
    try:
        run = float(s.star.row.get("distance_pc", "nan"))
    except (TypeError, ValueError):
        run = float("nan")
    return f"run: {figures(run)} pc · " if math.isfinite(run) else ""


def _preferred(here: Comparison, pinned: Comparison) -> str:
    for_pin = sum(b < a - 0.1 for a, b in zip(here.by_window, pinned.by_window))
    for_here = sum(a < b - 0.1 for a, b in zip(here.by_window, pinned.by_window))
    return f"better in {for_pin} windows, worse in {for_here}"


def kind_words(said: Assignment) -> str:
    """What a star without an MK type is, in a word or two; "" when not known."""
    kind = "" if said.object_kind in ("", "unknown") else said.object_kind
    return said.other_type if kind in ("white dwarf", "") and said.other_type else kind


def machine_tile(s: Session) -> str:
    """What the machine says."""
    said = s.star.assignment
    if said is None:
        return '<div class="big">reading …</div>'
    if said.status != "typed":
        kind = kind_words(said)
        title = "machine: no MK type" + (f" <small>({escape(kind)})</small>" if kind else "")
        reason = escape(said.reason)
        return f'<div class="big">{title}</div><div class="what" title="{reason}">{reason}</div>'
    classes = ", ".join(f"{c} {per_cent(p)}" for c, p in
                        sorted(said.class_probabilities.items(), key=lambda x: -x[1])[:3] if p >= 0.01)
    flags = (" · " + escape(", ".join(said.flags))) if said.flags else ""
    inner = ", ".join(said.type_set_90[:6]) + (" …" if len(said.type_set_90) > 6 else "")
    whole = escape(", ".join(said.type_set_90))
    return (f'<div class="big">machine: {escape(said.mk_type)} '
            f'<small>± {said.t_code_err:.1f} subtype · {classes}</small></div>'
            f'<div class="what" title="{whole}">{_run_distance(s)}90 % sure it is one of {escape(inner)}{flags}</div>')


def count_line(s: Session) -> str:
    """How far through the night."""
    total = sum(star.shown for star in s.night.stars) if s.night.ready else len(s.night.stars)
    if not s.night.ready:
        return f"typing {s.night.typed} of {total} …"
    done = sum(star.name in s.decided for star in s.night.stars if star.shown)
    return f"{done} of {total} decided<br>neediest first"


#: Stars of the queue on the page before and after the one looked at; a long night is not sent whole at every step.
QUEUE_BEFORE, QUEUE_AFTER = 40, 80


def queue_list(s: Session) -> str:
    """The queue, neediest first, about the star being looked at."""
    queue = s.night.queue
    at = queue.index(s.index)
    first, last = max(0, at - QUEUE_BEFORE), min(len(queue), at + QUEUE_AFTER)
    rows = [f'<li class="shut"><span class="why">{first} before</span></li>'] if first else []
    for k in queue[first:last]:
        star, said = s.night.stars[k], s.night.stars[k].assignment
        decision = s.decided.get(star.name)
        say = "" if said is None else (said.mk_type or kind_words(said) or "–")
        mark, why = "", escape(star.need.why) if said is not None else "waiting"
        if decision is not None:
            mark = {"accept": "✓ ", "amend": "✎ ", "set aside": "✕ "}.get(decision.action, "")
            why = mark + decision_words(decision)
            say = decision.mk_type or "–"
        states = (("now", k == s.index), ("done", decision is not None), ("shut", not star.shown))
        css = " ".join(name for name, on in states if on)
        do = ' data-do="open"' if star.shown else ""
        rows.append(f'<li class="{css}"{do} data-star="{k}"><span class="name" title="{escape(star.file)}">'
                    f'{escape(star.name)}</span><span class="say">{escape(say)}</span>'
                    f'<span class="why">{why}</span></li>')
    if last < len(queue):
        rows.append(f'<li class="shut"><span class="why">{len(queue) - last} more</span></li>')
    return "".join(rows)


def evidence_table(s: Session, here: Comparison | None = None) -> str:
    """Every criterion: what it measured, where it points, whether it can live with the place; then the windows."""
    return _criteria(s) + (_window_words(s, here) if here is not None else "")


def _window_words(s: Session, here: Comparison) -> str:
    rows = []
    for w, size in zip(s.windows(), here.by_window):
        css = "no" if size > 2.0 else "yes"
        rows += [f'<tr><td>{escape(m.name)}</td><td>{escape(m.tells)}</td><td class="{css} num">{size:.1f} σ</td></tr>'
                 for m in w.marks]
    if not rows:
        return ""
    return f"<table><tr><th>window</th><th>tells</th><th class='num'>misfit</th></tr>{''.join(rows)}</table>"


def _criteria(s: Session) -> str:
    said = s.star.assignment
    if said is None:
        return "<p>The machine has not come to this star yet.</p>"
    if not said.evidence:
        return f"<p>{escape(said.reason) or 'No criterion could be measured.'}</p>"
    pin = s.look.pin
    head = "<th>criterion</th><th class='num'>measured</th><th>points to</th><th>here</th>"
    head += "<th>pin</th>" if pin else ""
    rows = []
    for c in sorted(said.evidence, key=lambda c: -c.weight):
        cells = [f'<td title="{escape(c.source)}">{escape(c.name)}</td>', f'<td class="num">{_measured(c)}</td>',
                 f"<td>{escape(c.points_to)}</td>", _verdict(c, s.look.place, "")]
        if pin:
            cells.append(_verdict(c, pin, " pin"))
        cells.append(f'<td><span class="w" style="width:{round(44 * min(1.0, max(0.0, c.weight)))}px" '
                     f'title="{per_cent(c.weight)} of the say"></span></td>')
        rows.append("<tr>" + "".join(cells) + "</tr>")
    return f"<table><tr>{head}<th>say</th></tr>{''.join(rows)}</table>"


def _measured(c: Criterion) -> str:
    if not math.isfinite(c.value):
        return "–"
    return f"{c.value:.3g}" + (f" ± {c.error:.2g}" if math.isfinite(c.error) and c.error > 0 else "")


def tension(c: Criterion, cell: plane.Cell) -> float:
    """How many sigmas a criterion is from a cell; NaN when it says nothing of its own."""
    t, lum = plane.cell_codes(cell)
    pulls = [(a - b) / e for a, b, e in ((t, c.t_code, c.t_code_err), (lum, c.lum_code, c.lum_code_err))
             if math.isfinite(b) and math.isfinite(e) and e > 0]
    return max((abs(p) for p in pulls), default=float("nan"))


def _verdict(c: Criterion, place: Place, css: str) -> str:
    z = tension(c, place.cell)
    if not math.isfinite(z):
        return "<td></td>"
    return f'<td class="no{css}">off {z:.1f} σ</td>' if z > 2.0 else f'<td class="yes">fits {z:.1f} σ</td>'


def legend(s: Session) -> str:
    """Which line is which."""
    place, pin = s.look.place, s.look.pin
    text = f'<i>— star</i><i class="h">— {escape(place.standard or "template " + plane.cell_name(place.cell))}</i>'
    if pin is None:
        return text
    return text + f'<i class="p">- - {escape(pin.standard or "template " + plane.cell_name(pin.cell))}</i>'


def nudges(s: Session) -> str:
    """The nudges in force."""
    parts = []
    if s.look.blur_angstrom:
        parts.append(f"blur {s.look.blur_angstrom:+.1f} Å")
    if s.look.nudge_kms:
        parts.append(f"velocity {s.look.nudge_kms:+.0f} km/s")
    return ", ".join(parts)


def flag_chips(s: Session) -> str:
    """Flags a person may set."""
    return "".join(f'<button data-do="flag" data-name="{f}" aria-pressed="{str(f in s.look.flags).lower()}" '
                   f'class="{"on" if f in s.look.flags else ""}"><kbd>{k}</kbd> {f}</button>'
                   for k, f in enumerate(FLAGS, 1))


def accept_label(s: Session) -> str:
    """What accepting would accept."""
    said = s.star.assignment
    text = f"accept {said.mk_type}" if said is not None and said.mk_type else "accept"
    return f"<kbd>A</kbd> {escape(text)}"


def lit_buttons(s: Session) -> str:
    """Which switches are on, as JSON."""
    look = s.look
    return json.dumps({"measured": look.measured, "names": look.names, "blink": look.blink,
                       "standard": bool(look.place.standard), "pin": look.pin is not None})
