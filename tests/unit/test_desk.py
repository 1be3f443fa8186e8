"""The desk without a browser: the plane, the windows, the queue, what keys do, what the page is told."""

from __future__ import annotations

from itertools import pairwise

import numpy as np
import pytest
from desk_fakes import WAVE, FakeClassifier, lines, make_night, read

from starfathom.classify.assignment import Assignment, Criterion
from starfathom.classify.errors import RequestError
from starfathom.desk import plane, texts
from starfathom.desk.gather import beside, gather
from starfathom.desk.needs import distance_scatter, need
from starfathom.desk.night import name_stars
from starfathom.desk.palette import DARK, LIGHT, ramp
from starfathom.desk.scatter import TABLE, template_scatter
from starfathom.desk.session import Session
from starfathom.desk.windows import Mark, choose_marks, known_marks, misfit, rms, windows_for, within
from starfathom.templates.subtypes import CLASSES, SUBTYPES


def posterior(**cells: float) -> np.ndarray:
    p = np.zeros((len(SUBTYPES), len(CLASSES)))
    for name, share in cells.items():
        p[plane.cell_named(name.replace("_", " "))] = share
    return p / p.sum()


# the plane -----------------------------------------------------------------------------------------------------------

def test_cells_and_their_names():
    for i in range(plane.N_TYPES):
        for j in range(plane.N_CLASSES):
            assert plane.cell_named(plane.cell_name((i, j))) == (i, j)
            assert plane.cell_near(*plane.cell_codes((i, j))) == (i, j)
    assert plane.cell_named("G2") is None and plane.cell_named("DA") is None and plane.cell_named("K6 V") is None
    assert plane.cell_name(plane.cell_near(42.2, float("nan"))) == "G2 V"
    assert plane.clamp((-3, 99)) == (0, plane.N_CLASSES - 1)


def test_peaks_and_the_rival():
    p = posterior(G2_V=0.40, G3_V=0.20, K0_III=0.30, M0_V=0.001)
    p[plane.cell_named("G2.5 V")] = 0.35
    names = [plane.cell_name(c) for c in plane.peaks(p)]
    assert names == ["G2 V", "K0 III"]                         # the shoulder and the speck are no peaks
    dwarf, giant = CLASSES.index("V"), CLASSES.index("III")
    assert plane.cell_name(plane.rival(p, dwarf)) == "K0 III"
    assert plane.cell_name(plane.rival(p, giant)) == "G2 V"
    assert plane.rival(posterior(G2_V=1.0), dwarf) is None


def test_a_level_ridge_has_one_peak():
    p = np.zeros((len(SUBTYPES), len(CLASSES)))
    p[40:44, 7] = 0.25
    assert len(plane.peaks(p)) == 1


def test_the_inner_set_is_the_smallest():
    p = posterior(G2_V=0.5, G3_V=0.3, G4_V=0.15, G5_V=0.05)
    assert [plane.inner_set(p, share).sum() for share in (0.4, 0.79, 0.9, 0.99)] == [1, 2, 3, 4]


# windows and misfit --------------------------------------------------------------------------------------------------

def test_windows_follow_the_evidence_and_stay_within_reach():
    evidence = [Criterion("a", 1, 0.1, "", 0.5, features=("CaII_K", "Hdelta")), Criterion("b", 1, 0.1, "", 0.1),
                Criterion("c", 1, 0.1, "", 0.2, features=("SrII_4077", "FeI_4064", "OI_7774", "no_such_line"))]
    windows = windows_for(evidence, known_marks(), 3800.0, 6800.0)
    assert all(w.lo_angstrom < w.hi_angstrom for w in windows)
    assert all(a.hi_angstrom <= b.lo_angstrom for a, b in pairwise(windows))
    named = {m.key: w for w in windows for m in w.marks}
    assert set(named) == {"CaII_K", "Hdelta", "SrII_4077", "FeI_4064"}
    assert named["SrII_4077"] is named["FeI_4064"]             # neighbours share a window
    assert set(named["SrII_4077"].criteria) >= {"c"} and named["CaII_K"].criteria == ("a",)
    for w in windows:
        assert all(w.lo_angstrom < m.at_angstrom < w.hi_angstrom for m in w.marks)


def test_many_criteria_leave_room_to_see():
    evidence = [Criterion(m.key, 1, 0.1, "", 0.1, features=(m.key,)) for m in known_marks()]
    windows = windows_for(evidence, known_marks(), 3600.0, 9000.0)
    assert 1 < len(windows) <= 9


def test_every_mark_lies_in_its_window():
    evidence = [Criterion(m.key, 1, 0.1, "", 0.1, features=(m.key,)) for m in known_marks()]
    for k in range(len(evidence)):
        for w in windows_for(evidence[k:k + 1], known_marks(), 3600.0, 9000.0):
            assert all(w.lo_angstrom < m.at_angstrom < w.hi_angstrom for m in w.marks), w
            assert "Lick" not in w.title


def test_misfit_is_in_sigmas():
    ready = FakeClassifier().prepare(read("G2_V.txt"))
    same = misfit(ready, lines(42.0, 5.0), scatter=0.0)
    # noise of 0.01 put in, 0.01 told: a chi of one, to the statistics of the number of pixels
    assert rms(same) == pytest.approx(1.0, abs=4 / np.sqrt(2 * len(WAVE)))
    other = misfit(ready, lines(50.0, 5.0), scatter=0.0)
    near = np.abs(WAVE - 4861.3) < 1.0
    # the template's H beta is 0.048 shallower, so the star lies 4.8 sigma lower there
    assert np.mean(other[near]) == pytest.approx(-4.8, abs=4 / np.sqrt(near.sum()))
    assert np.isnan(misfit(ready, np.full(WAVE.shape, np.nan), 0.01)).all()
    # scatter and noise in quadrature
    assert rms(misfit(ready, lines(42.0, 5.0), 0.02)) == pytest.approx(rms(same) / np.sqrt(5), rel=1e-6)


def test_the_scatter_of_templates_comes_from_its_table():
    text = [line for line in TABLE.read_text(encoding="utf-8").splitlines() if line.startswith("G,4500,4900,")]
    at_3, at_5, at_9 = (float(v) for v in text[0].split(",")[3:])
    middle = np.array([4700.0])
    assert template_scatter(middle, 45.0, 3.0)[0] == pytest.approx(at_3)
    assert template_scatter(middle, 45.0, 50.0)[0] == pytest.approx(at_9)
    between = template_scatter(middle, 45.0, np.sqrt(15.0))[0]
    assert between == pytest.approx((at_3 + at_5) / 2)
    everywhere = [template_scatter(WAVE, t, 5.0) for t in (0.0, 20.0, 45.0, 69.0)]
    assert all((s > 0.001).all() and (s < 0.2).all() for s in everywhere)


def test_within_a_window_are_its_pixels():
    window = windows_for([Criterion("a", 1, 0, "", 1, features=("CaII_K",))], known_marks(), 3800, 6800)[0]
    cut = WAVE[within(WAVE, window)]
    assert cut[0] >= window.lo_angstrom and cut[-1] < window.hi_angstrom and len(cut) > 20


def test_names_do_not_crowd_and_fit_the_type():
    marks = choose_marks(known_marks(), WAVE, lines(42.0, 1.0), 3800.0, 6800.0, "G")
    waves = [m.wave_angstrom for m in marks]
    assert {"H beta", "Ca II K"} <= {m.name for m in marks}
    assert min(np.diff(waves)) > (6800 - 3800) / 33
    assert all(m.serves("G") for m in marks)
    mark = Mark("x", "x", 1, 0, 2, types="O9-B7")
    assert [letter for letter in "OBAFGKM" if mark.serves(letter)] == ["O", "B"]


# the queue -----------------------------------------------------------------------------------------------------------

def test_need_is_what_the_distance_stands_to_lose():
    def said(p, **more):
        return Assignment(status="typed", posterior=p, t_code_err=0.5, **more)

    sure = need(said(posterior(G2_V=1.0)))
    subtype = need(said(posterior(G2_V=0.5, G3_V=0.5)))
    giant_or_dwarf = need(said(posterior(K0_V=0.6, K0_III=0.4)))
    refused = need(Assignment(status="refused", object_kind="galaxy"))
    failed = need(Assignment(status="failed"))
    assert failed.score < sure.score < subtype.score < giant_or_dwarf.score < refused.score
    assert giant_or_dwarf.why == "V or III" and "galaxy" in refused.why


def test_distance_scatter_against_the_formula():
    grid = np.full((len(SUBTYPES), len(CLASSES)), np.nan)
    grid[plane.cell_named("K0 V")], grid[plane.cell_named("K0 III")] = 5.9, 0.7
    # two points 5.2 mag apart, half each: sigma 2.6 mag, times 0.2 ln 10
    got = distance_scatter(posterior(K0_V=0.5, K0_III=0.5), grid)
    assert got == pytest.approx(100 * 0.2 * np.log(10) * 2.6, rel=1e-3)


def test_the_queue_puts_the_neediest_first(tmp_path):
    night = make_night(tmp_path, "A0_V.txt", "broken.txt", "K0_III.txt", "galaxy.txt", "G2_V.txt")
    order = [night.stars[k].name for k in night.queue]
    assert order[0] == "galaxy" and order[-1] == "broken"
    scores = [night.stars[k].need.score for k in night.queue]
    assert scores == sorted(scores, reverse=True)


def test_a_long_night_is_not_sent_whole(tmp_path):
    session = Session(make_night(tmp_path, *(f"G2_V-{k}.txt" for k in range(300))), known_marks())
    session.do("open", {"star": 150})
    html = texts.queue_list(session)
    assert html.count("<li") <= texts.QUEUE_BEFORE + texts.QUEUE_AFTER + 2
    assert "G2_V-150<" in html and "before" in html and "more" in html
    session.do("next")
    assert session.star.name == "G2_V-151"


def test_a_long_run_brings_its_neediest(monkeypatch):
    from starfathom.desk import gather as gathering

    monkeypatch.setattr(gathering, "MOST_STARS", 2)
    rows = [{"name": f"s{k}", "file": "x" if k != 3 else "", "status": "typed", "distance_pc": 100.0,
             "distance_lo_pc": 100.0 - k, "distance_hi_pc": 100.0 + k} for k in range(6)]
    assert [r["name"] for r in gathering._rows_to_look_at(iter(rows), 6)] == ["s5", "s4"]
    assert len(gathering._rows_to_look_at(iter(rows), 2)) == 5


def test_names_are_as_short_as_keeps_them_apart():
    assert name_stars(["n/a.fits", "n/b.fits.gz"]) == ["a", "b"]
    assert name_stars(["n1/a.fits", "n2/a.fits"]) == ["n1/a.fits", "n2/a.fits"]
    assert name_stars(["n/a.fits", "n/a.txt", "n/c.txt"]) == ["n/a.fits", "n/a.txt", "c"]


def test_where_decisions_about_loose_files_are_kept():
    assert str(beside(["night/a.fits", "night/b.fits"])) == "night/decisions.jsonl"
    assert str(beside(["n1/a.fits", "n2/b.fits"])) == "decisions.jsonl"


@pytest.mark.parametrize("paths, words", [([], "name the spectra"), (["nowhere.fits"], "nowhere.fits")])
def test_nothing_to_show(paths, words):
    with pytest.raises(RequestError, match=words):
        gather(paths)


def test_a_folder_that_is_no_run(tmp_path):
    with pytest.raises(RequestError, match="run"):
        gather([str(tmp_path)])


# what keys do --------------------------------------------------------------------------------------------------------

@pytest.fixture
def session(tmp_path):
    return Session(make_night(tmp_path, "G2_V.txt", "K0_III.txt", "galaxy.txt", "broken.txt"), known_marks())


def at(session, name):
    k = next(k for k, star in enumerate(session.night.stars) if star.name == name)
    session.do("open", {"star": k})
    return session


def test_moving_about(session):
    at(session, "G2_V")
    assert session.look.place.label == "G2 V"
    session.do("move", {"right": 2})
    session.do("move", {"up": 1})
    assert session.look.place.label == "G3 IV"
    session.do("move", {"cell": [0, 0]})
    session.do("move", {"right": -5, "up": 5})
    assert session.look.place.label == "O2 Ia0"
    session.do("rival")
    assert session.look.place.label == "G4 III"
    session.do("best")
    assert session.look.place.label == "G2 V"
    session.do("peak")
    assert session.look.place.label == "G4 III" and "2 of 2" in session.said
    session.do("peak")
    assert session.look.place.label == "G2 V"


def test_the_template_nearer_in_type_fits_better(session):
    at(session, "G2_V")
    here = session.compare(session.look.place)
    session.do("pin")
    session.do("move", {"right": 16})
    far = session.compare(session.look.place)
    assert far.overall > here.overall and max(far.by_window) > 1.5 * max(here.by_window)
    assert session.compare(session.look.pin).overall == here.overall
    session.do("swap")
    assert session.look.place.label == "G2 V" and session.look.pin.label == "K0 V"
    session.do("swap")
    session.do("pin")
    session.do("pin")
    assert session.look.pin is None


def test_standards_go_round(session):
    at(session, "G2_V")
    seen = []
    for _ in range(3):
        session.do("standard")
        seen.append(session.look.place.standard)
    assert seen == ["Standard one", "Standard two", ""]
    session.do("standard", {"step": -1})
    assert session.look.place.standard == "Standard two"
    session.do("move", {"right": 1})
    assert session.look.place.standard == ""


def test_nudges_reach_the_comparison(session):
    at(session, "G2_V")
    session.do("velocity", {"step": 3})
    assert session.prepared().velocity_kms == 30.0
    session.do("blur", {"step": 2})
    assert session.prepared().fwhm_angstrom == 5.0 and session.prepared().velocity_kms == 30.0
    session.do("plain")
    assert session.prepared().fwhm_angstrom == 4.0 and session.prepared().velocity_kms == 0.0


def test_a_star_without_type_starts_where_a_template_is_near(session):
    at(session, "galaxy")
    assert session.best_cell() is None and session.posterior is None
    assert session.compare(session.look.place).overall > 0
    for command in ("best", "peak", "rival", "accept"):
        session.do(command)
        assert session.said.endswith(".")
    assert session.night.decisions() == {}


def test_a_broken_file_is_passed_over(session):
    at(session, "broken")
    assert session.star.name != "broken" and session.said
    session.do("nonsense")
    assert "nonsense" in session.said


def test_deciding_and_undoing(session):
    at(session, "G2_V")
    session.do("flag", {"name": "emission"})
    session.do("flag", {"name": "not a flag"})
    session.do("move", {"right": 2})
    session.do("edit")
    assert session.editing
    session.do("amend", {"type": "", "remark": " why ", "who": "ab"})
    kept = session.night.decisions()["G2_V"]
    assert (kept.mk_type, kept.flags, kept.remark, kept.who, kept.machine["mk_type"]) == (
        "G3 V", ("emission",), "why", "ab", "G2 V")
    assert kept.machine["probability"] == pytest.approx(0.0)
    assert session.star.name != "G2_V" and not session.editing
    session.do("undo")
    assert session.star.name == "G2_V" and session.night.decisions() == {}
    session.do("amend", {"type": "not a type"})
    assert "not a type" in session.said and session.night.decisions() == {}
    session.do("accept")
    assert session.night.decisions()["G2_V"].machine["probability"] == pytest.approx(0.6)


def test_a_night_ends(session):
    for _ in range(3):
        session.do("aside")
    assert "last one" in session.said
    session.do("next")
    assert len(session.night.decisions()) == 3
    again = Session(session.night, known_marks())
    assert again.star.shown


# what the page is told -----------------------------------------------------------------------------------------------

def test_nothing_from_outside_reaches_the_page_unescaped(tmp_path):
    evil = "G2_V-<script>alert('&')</script>"
    session = Session(make_night(tmp_path, evil + ".txt", "K0_III.txt"), known_marks())
    at(session, evil)
    session.do("aside", {"who": "<b>x</b>", "remark": "<i>"})
    session.do("previous")
    at(session, evil)
    here = session.compare(session.look.place)
    html = "".join([texts.star_tile(session), texts.place_tile(session, here, None), texts.queue_list(session),
                    texts.machine_tile(session), texts.evidence_table(session, here),
                    texts.legend(session), texts.flag_chips(session)])
    assert "<script" not in html and "<b>x" not in html and "&lt;script&gt;" in html


def test_numbers_read_well():
    assert [texts.figures(v) for v in (5230.0, 112.34, 0.01234, -0.035, 0.0, float("nan"), 1234567.0)] == [
        "5\u2009230", "112", "0.0123", "−0.0350", "0", "–", "1\u2009230\u2009000"]
    assert [texts.per_cent(p) for p in (None, 1.0, 0.997, 0.42, 0.004)] == ["–", "100 %", "> 99 %", "42 %", "< 1 %"]


def test_tension_counts_what_a_criterion_says(session):
    c = Criterion("a", 1, 0.1, "", t_code=42.0, t_code_err=1.0)
    assert texts.tension(c, plane.cell_named("G5 V")) == pytest.approx(3.0)
    assert np.isnan(texts.tension(Criterion("a", 1, 0.1, ""), (0, 0)))
    both = Criterion("a", 1, 0.1, "", t_code=45.0, t_code_err=1.0, lum_code=3.0, lum_code_err=0.5)
    assert texts.tension(both, plane.cell_named("G5 V")) == pytest.approx(4.0)


def luminance(colour: str) -> float:
    """Relative luminance, WCAG 2.2."""
    channels = [int(colour[k:k + 2], 16) / 255 for k in (1, 3, 5)]
    linear = [c / 12.92 if c <= 0.04045 else ((c + 0.055) / 1.055) ** 2.4 for c in channels]
    return 0.2126 * linear[0] + 0.7152 * linear[1] + 0.0722 * linear[2]


def contrast(a: str, b: str) -> float:
    high, low = sorted((luminance(a), luminance(b)), reverse=True)
    return (high + 0.05) / (low + 0.05)


@pytest.mark.parametrize("palette", [LIGHT, DARK])
def test_colours_can_be_read(palette):
    """WCAG 2.2 AA asks 4.5 for text; ink on the darkest shade is text too (the numbers in the cells)."""
    for text in (palette.ink, palette.soft, palette.here, palette.pin):
        assert contrast(text, palette.card) >= 4.5
    assert contrast(palette.ink, palette.shade) >= 4.5
    shades = [luminance(c) for c in ramp(palette)]
    assert shades == sorted(shades) or shades == sorted(shades, reverse=True)


#: Dichromats' views as linear RGB matrices: Vienot, Brettel & Mollon 1999 Color Res. Appl. 24, 243 (from memory).
DICHROMATS = {"protan": np.array([[0.11238, 0.88762, 0], [0.11238, 0.88762, 0], [0.00401, -0.00401, 1]]),
              "deutan": np.array([[0.29275, 0.70725, 0], [0.29275, 0.70725, 0], [-0.02234, 0.02234, 1]])}


@pytest.mark.parametrize("palette", [LIGHT, DARK])
@pytest.mark.parametrize("eye", sorted(DICHROMATS))
def test_orange_and_blue_stay_apart_for_every_eye(palette, eye):
    def seen(colour):
        c = np.array([int(colour[k:k + 2], 16) / 255 for k in (1, 3, 5)])
        return DICHROMATS[eye] @ np.where(c <= 0.04045, c / 12.92, ((c + 0.055) / 1.055) ** 2.4)

    colours = [seen(c) for c in (palette.here, palette.pin, palette.ink)]
    for k in range(3):
        assert np.linalg.norm(colours[k] - colours[k - 1]) > 0.15


# the pictures --------------------------------------------------------------------------------------------------------

def test_pictures_follow_and_never_show_another_star(tmp_path):
    from starfathom.desk.view import SPECTRUM_SOURCES, STRIP_SOURCES, View

    night = make_night(tmp_path, "G2_V.txt", "K0_III.txt")
    session = at(Session(night, known_marks()), "G2_V")
    view = View(session)
    view.refresh()
    sources = {k: view._sources[k] for k in (*SPECTRUM_SOURCES, *STRIP_SOURCES)}
    assert set(sources) <= set(view._sources)
    assert len(sources["star"].data["x"]) > 500 and len(sources["ribbon_here"].data["left"]) > 50
    template = np.array(sources["here"].data["y"])
    session.do("move", {"right": 6})
    view.refresh()
    assert not np.array_equal(template, sources["here"].data["y"])
    assert len(sources["pin"].data["x"]) == 0
    night._prepared.clear()
    for star in night.stars:
        if star.name == "K0_III":
            star.file = "broken.txt"                       # the file has gone since it was typed
    at(session, "K0_III")
    view.refresh()
    assert "broken.txt" in session.said
    assert all(len(column) == 0 for s in sources.values() for column in s.data.values())


def test_the_plane_shows_the_posterior_where_it_is(tmp_path):
    from starfathom.desk.view import View

    session = at(Session(make_night(tmp_path, "G2_V.txt"), known_marks()), "G2_V")
    view = View(session)
    view.refresh()
    image = view._sources["shade"].data["image"][0]
    i, j = plane.cell_named("G2 V")
    # rows count up from class V, columns are subtypes
    assert image.shape == (plane.N_CLASSES, plane.N_TYPES) and image[plane.N_CLASSES - 1 - j, i] == image.max() == 1.0
    cell = {k: v[0] for k, v in view._sources["here_cell"].data.items()}
    assert cell["left"] < i + 0.5 < cell["right"] and cell["bottom"] < 0.0 < cell["top"]
    low, high = view.plane.x_range.start, view.plane.x_range.end
    assert low < i < high
    for _ in range(30):
        session.do("move", {"right": -5})
        view.refresh()
    assert view.plane.x_range.start <= 0 < view.plane.x_range.end          # the view goes with the cursor
    assert view.plane.yaxis[0].major_label_overrides[0] == "V  70 %"
