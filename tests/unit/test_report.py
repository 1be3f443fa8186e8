"""The report: what is in it, that it needs nothing else, that names are harmless."""

from __future__ import annotations

import re
from html.parser import HTMLParser

import numpy as np
import pytest

from starfathom.classify.errors import RequestError
from starfathom.decisions import Decision, DecisionLog, log_path
from starfathom.desk import plane
from starfathom.record import BatchResult, create_record
from starfathom.report import write_report
from starfathom.report.gather import read_run
from starfathom.report.svg import Plot, ticks_between

EVIL = "<script>alert(1)</script> & \"co\""


def star(name: str, mk_type: str = "G2 V", status: str = "typed", **more) -> dict:
    from starfathom.chain import result_columns

    row = {c: float("nan") if decimals is not None else "" for c, _u, decimals, _d in result_columns()}
    row |= {"name": name, "status": status, "object_kind": "star", "mk_type": mk_type if status == "typed" else "",
            "t_code": 42.0, "t_code_err": 0.7, "snr": 80.0, "cautions": "Only one colour. It may be two stars."}
    if status == "typed":
        row |= {"distance_pc": 120.0, "distance_lo_pc": 100.0, "distance_hi_pc": 140.0, "teff_k": 5770.0,
                "teff_k_err": 100.0, "log_lum_lsun": 0.0, "log_lum_lsun_err": 0.1, "radius_rsun": 1.0, "ebv": 0.02}
    return row | more


def detail(name: str, **cells: float) -> dict:
    posterior = [[*plane.cell_named(c.replace("_", " ")), p] for c, p in cells.items()]
    criterion = {"name": "Ca II K / H delta", "value": 1.2, "error": 0.1, "points_to": "G1 to G4", "weight": 0.5,
                 "t_code": 43.0, "t_code_err": 1.0, "lum_code": float("nan"), "lum_code_err": float("nan"),
                 "features": ["CaII_K", "Hdelta"], "source": "own"}
    return {"name": name, "target": {"parallax": [8.4, 0.2], "magnitudes": {}}, "posterior": posterior,
            "evidence": [criterion], "distance_samples_pc": np.linspace(80, 160, 101).tolist()}


@pytest.fixture
def run_dir(tmp_path):
    rows = [star("a"), star(EVIL, "K0 III", distance_pc=800.0), star("g", status="refused", object_kind="galaxy",
                                                                     reason="Lines of a galaxy.", cautions="")]
    budget = [{"name": n, "step": s, "sigma_mag": v / 46, "per_cent": v} for n in ("a", EVIL)
              for s, v in (("subtype", 5.0), ("scale scatter", 12.0))]
    details = [detail("a", G2_V=0.9, G3_V=0.1), detail(EVIL, K0_III=0.6, K0_V=0.4), None]
    with create_record(tmp_path / "run") as record:
        record.set_facts({"settings": {"seed": 7, "scale": "own"}, "versions": {"starfathom": "9.9"},
                          "targets": "targets.csv", "targets_sha256": "abc", "batch_size": 32, "n_rows": 3})
        record.add(BatchResult(0, rows, budget, details))
    return tmp_path / "run"


class Outside(HTMLParser):
    """Collects what a page would load or link to."""

    def __init__(self) -> None:
        super().__init__()
        self.loads: list[str] = []
        self.links: list[str] = []
        self.tags: list[str] = []

    def handle_starttag(self, tag, attributes):
        self.tags.append(tag)
        for name, value in attributes:
            if name in ("src", "srcset", "data", "poster", "action") or (tag == "link" and name == "href"):
                self.loads.append(value)
            elif name == "href":
                self.links.append(value)


def pages(run_dir):
    return [run_dir / "report.html", *sorted((run_dir / "stars").glob("*.html"))]


def test_a_page_a_star_and_one_for_the_run(run_dir):
    assert write_report(run_dir) == run_dir / "report.html"
    assert [p.name for p in pages(run_dir)] == ["report.html", *(f"star-000{k}.html" for k in (1, 2, 3))]
    front, first, second, third = (p.read_text(encoding="utf-8") for p in pages(run_dir))
    assert "seed" in front and "9.9" in front and "<svg" in front
    for wanted in ("G2 V", "120", "100 to 140", "Only one colour.", "It may be two stars.", "Ca II K / H delta",
                   "G1 to G4", "scale scatter", "12.0 %", "probability of the distance", "probability of each type"):
        assert wanted in first, wanted
    assert "Lines of a galaxy." in third and "probability of the distance" not in third
    assert "K0 III" in second


def test_nothing_is_loaded_from_elsewhere_and_links_lead_somewhere(run_dir):
    (run_dir / "results.fits").write_bytes(b"x")
    write_report(run_dir)
    for page in pages(run_dir):
        seen = Outside()
        text = page.read_text(encoding="utf-8")
        seen.feed(text)
        assert seen.loads == []
        assert seen.links and all((page.parent / link).resolve().is_file() for link in seen.links), seen.links
        assert not re.search(r"https?://(?!www\.w3\.org)", text)


def test_names_do_no_harm(run_dir):
    write_report(run_dir)
    for page in pages(run_dir):
        text = page.read_text(encoding="utf-8")
        assert "<script>alert" not in text
        assert text.count("<script>") == (1 if page.name == "report.html" else 0)


def test_stars_that_want_a_look_come_first(run_dir):
    run = read_run(run_dir)
    assert [s.name for s in run.wanted] == ["g", EVIL]         # refused, then giant or dwarf; the clear one not at all
    DecisionLog(log_path(run_dir)).append(Decision("g", "set aside", remark="blend"))
    assert [s.name for s in read_run(run_dir).wanted] == [EVIL]


def test_hand_decisions_are_told(run_dir):
    log = DecisionLog(log_path(run_dir))
    log.append(Decision("a", "accept", "G2 V", who="xy", machine={"mk_type": "G2 V"}))
    log.undo("xy")
    log.append(Decision("a", "amend", "K0 V", ("composite",), "two sets of lines", "xy", machine={"mk_type": "G2 V"}))
    write_report(run_dir)
    text = pages(run_dir)[1].read_text(encoding="utf-8")
    for wanted in ("taken back", "amended", "two sets of lines", "composite", "by hand"):
        assert wanted in text, wanted
    assert "amended by xy" in pages(run_dir)[0].read_text(encoding="utf-8")


def test_same_run_same_report(run_dir):
    write_report(run_dir)
    first = [p.read_bytes() for p in pages(run_dir)]
    write_report(run_dir)
    assert [p.read_bytes() for p in pages(run_dir)] == first


def test_no_run_no_report(tmp_path):
    with pytest.raises(RequestError):
        write_report(tmp_path)


def test_large_runs_get_a_summary_alone(tmp_path, monkeypatch):
    from starfathom.report import gather

    monkeypatch.setattr(gather, "TABLE_ROWS", 550)
    rows = [star(f"s{k}", distance_hi_pc=130.0 + 5 * (k == 580), mk_type="G2 V" if k % 2 else "K0 III",
                 log_lum_lsun=0.01 * k) for k in range(600)]
    with create_record(tmp_path / "run") as record:
        record.set_facts({"settings": {}, "versions": {}})
        record.add(BatchResult(0, rows, []))
    write_report(tmp_path / "run")
    assert not list((tmp_path / "run").glob("stars/*.html"))
    text = (tmp_path / "run" / "report.html").read_text(encoding="utf-8")
    assert text.count("<tr data-is") == 550 and "The first 550 of 600" in text
    run = read_run(tmp_path / "run")
    assert run.wanted[0].name == "s580"                        # found, though it is not in the table
    assert run.tally.status.total() == 600 and run.tally.diagram.sum() == 600
    assert text.count('<rect class="dot"') == (run.tally.diagram > 0).sum()


# the pictures --------------------------------------------------------------------------------------------------------

@pytest.mark.parametrize("lo, hi", [(0, 1), (3700.2, 6812.9), (-0.003, 0.0011), (5, -5), (1e-9, 3e-9), (1e7, 4e7)])
def test_ticks_are_round_and_inside(lo, hi):
    ticks = ticks_between(lo, hi, 6)
    assert 2 <= len(ticks) <= 14
    assert all(min(lo, hi) - 1e-9 * abs(hi) <= t <= max(lo, hi) + 1e-9 * abs(hi) for t in ticks)
    steps = np.diff(ticks)
    assert np.allclose(steps, steps[0], rtol=1e-6)
    leading = steps[0] / 10.0 ** np.floor(np.log10(steps[0]))
    assert any(leading == pytest.approx(m, rel=1e-6) for m in (1, 2, 2.5, 5, 10))


def test_data_land_where_the_axes_say():
    plot = Plot(200, 100, (10, 0), (0, 5), left=20, right=10, top=5, bottom=15)
    assert (plot.px(10), plot.px(0)) == (20, 190)
    assert (plot.py(0), plot.py(5)) == (85, 5)
    broken = str(plot.line([10, 5, 0], [0, float("nan"), 5]))
    assert 'd="M20.0 85.0M190.0 5.0"' in broken                # a gap is a gap, not a bridge
