"""The report's pages: ``report.html`` for the run, ``stars/star-0001.html`` and so on for the stars."""

from __future__ import annotations

import json
import math
from html import escape
from pathlib import Path
from typing import Any

from starfathom.classify.errors import StarfathomError
from starfathom.decisions import FILE_NAME, Decision
from starfathom.desk import plane
from starfathom.desk.palette import DARK, LIGHT
from starfathom.desk.texts import figures
from starfathom.desk.windows import known_marks
from starfathom.report import pictures
from starfathom.report.gather import KINDS, STAR_PAGES, RunResult, StarResult, read_run, spectrum_path
from starfathom.tables import write_text_aside

PAGES = Path(__file__).parent / "pages"
FOLDER = "stars"
ACTIONS = {"accept": "✓ accepted", "amend": "✎ amended", "set aside": "✕ set aside", "undo": "↶ taken back"}


def write_report(run_dir: str | Path) -> Path:
    """Write the report of a finished run into its folder; return the path of its first page.

    Raises
    ------
    RequestError : the folder holds no run, or cannot be written
    """
    run = read_run(run_dir)
    with_page = run.stars if len(run.stars) <= STAR_PAGES else []
    paged = {s.number for s in with_page}
    if with_page:
        (run.folder / FOLDER).mkdir(exist_ok=True)
        artist = SpectrumArtist(run.folder, run.facts)
        for k, star in enumerate(with_page):
            before = with_page[k - 1] if k else None
            after = with_page[k + 1] if k + 1 < len(with_page) else None
            write_text_aside(run.folder / FOLDER / star.page, star_page(star, artist, before, after))
    first = run.folder / "report.html"
    write_text_aside(first, front_page(run, paged))
    return first


# ---- frame ----------------------------------------------------------------------------------------------------------

def _page(title: str, body: str, script: str = "") -> str:
    css = (PAGES / "report.css").read_text(encoding="utf-8").replace("LIGHT", LIGHT.css()).replace("DARK", DARK.css())
    return ('<!DOCTYPE html>\n<html lang="en"><head><meta charset="utf-8">'
            '<meta name="viewport" content="width=device-width, initial-scale=1">'
            "<meta http-equiv=\"Content-Security-Policy\" content=\"default-src 'none'; style-src 'unsafe-inline'; "
            "script-src 'unsafe-inline'; img-src data:\">"
            f"<title>{escape(title)}</title><style>{css}</style></head><body>{body}"
            + (f"<script>{script}</script>" if script else "") + "</body></html>\n")


def _section(title: str, body: str, css: str = "") -> str:
    if not body:
        return ""
    return f'<section class="{css}"><h2>{escape(title)}</h2>{body}</section>'


def _fixed(value: float, decimals: int) -> str:
    """A number to so many decimals; "–" where there is none."""
    return f"{value:.{decimals}f}".replace("-", "−") if math.isfinite(value) else "–"


def _plus_minus(star: StarResult, column: str, digits: int = 3, decimals: int | None = None) -> str:
    value, error = star.number_of(column), star.number_of(column + "_err")
    if decimals is not None:
        return _fixed(value, decimals) + (f" ± {_fixed(error, decimals)}" if math.isfinite(error) else "")
    return figures(value, digits) + (f" ± {figures(error, 2)}" if math.isfinite(value) and math.isfinite(error) else "")


def _span(star: StarResult) -> str:
    lo, hi = star.number_of("distance_lo_pc"), star.number_of("distance_hi_pc")
    return f"{figures(lo)} to {figures(hi)}" if math.isfinite(lo) and math.isfinite(hi) else ""


def _type(star: StarResult) -> str:
    if star.text_of("status") == "typed":
        return escape(star.text_of("mk_type"))
    kind = star.text_of("object_kind")
    kind = star.text_of("other_type") or kind if kind in ("white dwarf", "unknown", "") else kind
    return f'<span class="soft">{escape(kind if kind not in ("", "unknown") else star.text_of("status"))}</span>'


def _hand(star: StarResult) -> str:
    d = star.decision
    return "" if d is None else escape(ACTIONS[d.action] + (f" by {d.who}" if d.who else ""))


# ---- the run --------------------------------------------------------------------------------------------------------

def front_page(run: RunResult, paged: set[int]) -> str:
    """The first page, whole."""
    stars, tally = run.stars, run.tally
    total = tally.status.total()
    counts = [(total, "stars"), (tally.status["typed"], "with an MK type"), (tally.status["refused"], "refused"),
              (tally.status["failed"], "failed"), (tally.with_distance, "with a distance"),
              (tally.by_hand, "decided by hand")]
    title = run.folder.resolve().name
    head = (f'<h1>{escape(title)} <small>report of a run</small></h1><ul class="numbers">'
            + "".join(f"<li><b>{n}</b>{escape(what)}</li>" for n, what in counts) + "</ul>")
    if total <= len(stars):
        diagram = pictures.hr_diagram(stars, {s.number: f"{FOLDER}/{s.page}" for s in stars if s.number in paged})
        words = "Hollow: there is a caution. Bars: one standard deviation."
    else:
        diagram = pictures.crowded_hr_diagram(tally.diagram)
        words = "The darker, the more stars."
    hint = f'<p class="soft">{words}</p>' if diagram else ""
    body = (head + '<div class="pair">' + _section("Stars that want a look", _wanted(run, paged))
            + _section("H–R diagram", diagram + hint) + "</div>"
            + _section("Every star", _table(stars, paged, total), "table")
            + _section("Tables", _tables(run)) + _section("Settings and versions", _facts(run.facts)))
    return _page(title, body, (PAGES / "report.js").read_text(encoding="utf-8"))


def _link(star: StarResult, paged: set[int]) -> str:
    name = escape(star.name)
    return f'<a href="{FOLDER}/{star.page}">{name}</a>' if star.number in paged else name


def _wanted(run: RunResult, paged: set[int]) -> str:
    wanted = run.wanted
    if not wanted:
        return "<p>None: every type is clear, or decided by hand.</p>"
    rows = []
    for s in wanted:
        why = s.need.why
        if math.isfinite(s.need.percent):
            why += f"; its type leaves the distance open by {s.need.percent:.0f} %"
        first = s.text_of("reason") or (s.cautions[0] if s.cautions else "")
        first = first if len(first) <= 110 else first[:first.rfind(" ", 0, 108)] + " …"
        rows.append(f'<tr><td>{_link(s, paged)}</td><td class="type">{_type(s)}</td><td>{escape(why)}'
                    f'<div class="soft">{escape(first)}</div></td></tr>')
    heads = "<tr><th>star</th><th>type</th><th>why</th></tr>"
    return (f"<table><thead>{heads}</thead><tbody>{''.join(rows)}</tbody></table>"
            f'<p class="soft">To look at them: <code>starfathom desk {escape(run.folder.name)}</code></p>')


HEADS: tuple[tuple[str, str], ...] = (
    ("star", ""), ("type", ""), ("± subtype", "num"), ("S/N", "num"), ("distance, pc", "num"), ("68 %", "num"),
    ("E(B−V)", "num"), ("T<sub>eff</sub>, K", "num"), ("log L/L<sub>☉</sub>", "num"), ("R/R<sub>☉</sub>", "num"),
    ("by hand", ""), ("flags and cautions", ""))


def _table(stars: list[StarResult], paged: set[int], total: int) -> str:
    heads = "".join(f'<th class="{css}"><button>{name}</button></th>' for name, css in HEADS)
    rows = []
    for s in stars:
        t_code = s.number_of("t_code")
        numbers = [("t_code_err", 2), ("snr", 3), ("distance_pc", 3)]
        cells = [f"<td>{_link(s, paged)}</td>",
                 f'<td class="type" data-v="{_raw(t_code)}">{_type(s)}</td>']
        cells += [_cell(s.number_of(c), digits) for c, digits in numbers]
        lo, hi, mid = (s.number_of(c) for c in ("distance_lo_pc", "distance_hi_pc", "distance_pc"))
        width = (hi - lo) / mid if math.isfinite(mid) and mid > 0 else float("nan")
        cells.append(f'<td class="num soft" data-v="{_raw(width)}">{_span(s)}</td>')
        ebv, log_lum = s.number_of("ebv"), s.number_of("log_lum_lsun")
        cells += [_cell(ebv, text=_fixed(ebv, 2)), _cell(s.number_of("teff_k"), 3),
                  _cell(log_lum, text=_fixed(log_lum, 2)), _cell(s.number_of("radius_rsun"), 3)]
        cells.append(f"<td>{_hand(s)}</td>")
        notes = [escape(f) for f in s.text_of("flags").split(",") if f]
        if s.text_of("reason"):
            notes.append(f'<span class="soft">{escape(s.text_of("reason"))}</span>')
        elif s.cautions:
            more = f" (+{len(s.cautions) - 1})" if len(s.cautions) > 1 else ""
            notes.append(f'<span class="soft">{escape(s.cautions[0])}{more}</span>')
        cells.append(f"<td>{'; '.join(notes)}</td>")
        kinds = [s.text_of("status"), *(["caution"] if s.cautions else []), *(["hand"] if s.decision else [])]
        rows.append(f'<tr data-is="{escape(" ".join(kinds))}">{"".join(cells)}</tr>')
    cut = f"<p>The first {len(stars)} of {total}; all are in the tables below.</p>" if total > len(stars) else ""
    choices = (("", "all"), ("typed", "typed"), ("refused", "refused"), ("failed", "failed"),
               ("caution", "with a caution"), ("hand", "decided by hand"))
    options = "".join(f'<option value="{v}">{name}</option>' for v, name in choices)
    return (f'{cut}<div class="filter"><input id="words" type="search" placeholder="filter by any word" '
            f'aria-label="filter"><select id="only" aria-label="which stars">{options}</select>'
            f'<span id="shown" class="soft"></span></div><table id="stars"><thead><tr>{heads}</tr></thead>'
            f"<tbody>{''.join(rows)}</tbody></table>")


def _raw(value: float) -> str:
    return repr(value) if math.isfinite(value) else ""


def _cell(value: float, digits: int = 3, text: str = "") -> str:
    return f'<td class="num" data-v="{_raw(value)}">{text or figures(value, digits)}</td>'


def _tables(run: RunResult) -> str:
    if not run.tables:
        return ""
    names = "".join(f'<dt><a href="{escape(p.name)}">{escape(p.name)}</a></dt>'
                    f'<dd>{KINDS.get(p.suffix, "in parts")}</dd>' for p in run.tables)
    log = run.folder / FILE_NAME
    if log.is_file():
        names += f'<dt><a href="{FILE_NAME}">{FILE_NAME}</a></dt><dd>every hand decision, one JSON object a line</dd>'
    return f'<dl class="facts">{names}</dl>'


def _facts(facts: dict[str, Any]) -> str:
    rows = []
    for key in sorted(facts):
        value = facts[key]
        items = sorted(value.items()) if isinstance(value, dict) else [("", value)]
        for name, v in items:
            shown = v if isinstance(v, str) else json.dumps(v, ensure_ascii=False)
            label = f"{key}: {name}" if name else key
            rows.append(f"<dt>{escape(label.replace('_', ' '))}</dt><dd>{escape(shown)}</dd>")
    return f'<dl class="facts">{"".join(rows)}</dl>'


# ---- one star -------------------------------------------------------------------------------------------------------

class SpectrumArtist:
    """Draws spectra over templates with the classifier of the run; loads it when the first is asked for."""

    def __init__(self, folder: Path, facts: dict[str, Any]) -> None:
        self._folder = folder
        self._asked: dict[str, Any] = facts.get("settings", {})
        self._facts = facts
        self._classifier: Any = None
        self._marks = known_marks()

    def draw(self, star: StarResult) -> str:
        """The picture, or one sentence why there is none, as HTML; "" for a star that never had a spectrum."""
        from starfathom.classify import Classifier, Settings
        from starfathom.classify.reading import read_plain

        path = star.text_of("file")
        if not path or star.text_of("status") == "failed":
            return ""
        if self._classifier is None:
            self._classifier = Classifier.load(
                without_libraries=tuple(self._asked.get("without_libraries", ())),
                without_stars=tuple(self._asked.get("without_stars", ())))
        target = (star.detail or {}).get("target") or {}
        settings = Settings(medium=self._asked.get("medium"), fwhm_angstrom=target.get("fwhm_angstrom"),
                            velocity_kms=target.get("velocity_kms"))
        try:
            found = spectrum_path(self._folder, self._facts, path)
            ready = self._classifier.prepare(read_plain(found, medium=self._asked.get("medium")), settings)
            t, lum = star.number_of("t_code"), star.number_of("lum_code")
            template = None
            if math.isfinite(t):
                template = self._classifier.template(t, lum if math.isfinite(lum) else 5.0, ready)
        except StarfathomError as error:
            return f"<p>{escape(str(error))}</p>"
        return pictures.spectrum(ready, template, t, self._marks)


def star_page(star: StarResult, artist: SpectrumArtist, before: StarResult | None, after: StarResult | None) -> str:
    """One star's page, whole."""
    links = ['<a href="../report.html">whole run</a>']
    links += [f'<a href="{s.page}">{sign} {escape(s.name)}</a>' for s, sign in ((before, "←"), (after, "→")) if s]
    name = escape(star.name)
    said = star.assignment
    kind = _type(star)
    numbers = [("distance, pc", figures(star.number_of("distance_pc"))), ("68 %", _span(star)),
               ("E(B−V)", _plus_minus(star, "ebv", decimals=2)), ("T<sub>eff</sub>, K", _plus_minus(star, "teff_k")),
               ("log L/L<sub>☉</sub>", _plus_minus(star, "log_lum_lsun", decimals=2)),
               ("R/R<sub>☉</sub>", _plus_minus(star, "radius_rsun"))]
    shown = [(a, b) for a, b in numbers if b and not b.startswith("–")]
    head = (f"<nav>{''.join(links)}</nav><h1>{name} <small>{kind}</small></h1>"
            + (f"<p>{escape(star.text_of('reason'))}</p>" if star.text_of("reason") else "")
            + '<ul class="numbers">' + "".join(f"<li><b>{b}</b>{a}</li>" for a, b in shown) + "</ul>")
    decided = None if star.decision is None else plane.cell_named(star.decision.mk_type)
    if star.decision is not None and not star.decision.differs:
        decided = None
    cautions = "".join(f"<li>{escape(c)}</li>" for c in star.cautions)
    body = (head + _section("Keep in mind", f'<ul class="cautions">{cautions}</ul>' if cautions else "")
            + _section("What would settle it", _advice(star))
            + _section("Decided by hand", _decisions(star.decisions))
            + _section("Spectrum", artist.draw(star))
            + '<div class="pair">' + _section("Type", pictures.type_plane(said, decided) if said else "")
            + _section("Evidence", _evidence(star)) + _section("Distance", pictures.distance_curve(star))
            + _section("Budget", pictures.budget_bars(star.budget)) + "</div>"
            + _section("Everything", _everything(star)))
    return _page(star.name, body)


def _advice(star: StarResult) -> str:
    """What would help most, best first; nothing where a person has settled the type."""
    told = [] if star.decision is not None or star.detail is None else star.detail.get("advice", [])
    return "<ol>" + "".join(f"<li>{escape(t)}</li>" for t in told) + "</ol>" if told else ""


def _decisions(history: list[Decision]) -> str:
    if not history:
        return ""
    rows = []
    for d in history:
        machine = d.machine.get("mk_type") or d.machine.get("status") or ""
        rows.append(f"<tr><td>{escape(d.when[:16].replace('T', ' '))}</td><td>{escape(d.who)}</td>"
                    f"<td>{escape(ACTIONS[d.action])}</td><td class=\"type\">{escape(d.mk_type)}</td>"
                    f"<td>{escape(', '.join(d.flags))}</td><td>{escape(d.remark)}</td>"
                    f"<td>{escape(str(machine))}</td></tr>")
    heads = "".join(f"<th>{h}</th>" for h in ("when, UTC", "who", "what", "type", "flags", "why", "machine had said"))
    return f"<table><thead><tr>{heads}</tr></thead><tbody>{''.join(rows)}</tbody></table>"


def _evidence(star: StarResult) -> str:
    said = star.assignment
    if said is None or not said.evidence:
        return ""
    rows = []
    for c in sorted(said.evidence, key=lambda c: -c.weight):
        value = f"{c.value:.3g}" if math.isfinite(c.value) else "–"
        error = f" ± {c.error:.2g}" if math.isfinite(c.error) and c.error > 0 else ""
        rows.append(f'<tr><td title="{escape(c.source)}">{escape(c.name)}</td><td class="num">{value}{error}</td>'
                    f'<td>{escape(c.points_to)}</td><td class="num">{100 * c.weight:.0f} %</td></tr>')
    heads = '<th>criterion</th><th class="num">measured</th><th>points to</th><th class="num">say</th>'
    return f"<table><thead><tr>{heads}</tr></thead><tbody>{''.join(rows)}</tbody></table>"


def _everything(star: StarResult) -> str:
    from starfathom.chain import result_columns

    rows = []
    for column, unit, _decimals, meaning in result_columns():
        text = star.text_of(column)
        if text and text.lower() != "nan":
            rows.append(f"<dt title=\"{escape(meaning)}\">{escape(column)}</dt>"
                        f"<dd>{escape(text)}{' ' + escape(unit) if unit else ''} "
                        f'<span class="soft">{escape(meaning)}</span></dd>')
    return f'<dl class="facts">{"".join(rows)}</dl>'
