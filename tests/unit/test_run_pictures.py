"""Pictures of a run as files."""

from __future__ import annotations

import math
from pathlib import Path

import pytest

from starfathom import pictures
from starfathom.chain import RunSettings
from starfathom.classify.errors import RequestError
from starfathom.survey import run_survey
from starfathom.targets import TargetList


@pytest.fixture
def run_dir(tmp_path: Path) -> Path:
    listed = tmp_path / "list.csv"
    listed.write_text("name,mk_type,V,B\nsun,G2 V,10.1,10.8\ngiant,K0 III,9.1,10.2\ndwarf,DA,14,14\n")
    settings = RunSettings(n_samples=400)
    run_survey(TargetList(listed), tmp_path / "run", settings, workers=1, formats=["csv"], progress=False)
    return tmp_path / "run"


def test_the_diagram_stands_the_right_way_round(run_dir: Path) -> None:
    import matplotlib

    matplotlib.use("Agg")
    ax = pictures.hr_diagram(run_dir)
    left, right = ax.get_xlim()
    bottom, top = ax.get_ylim()
    assert left > right and top > bottom, "temperature increases to the left, luminosity upward"


def test_points_are_the_rows(run_dir: Path) -> None:
    from starfathom.record import open_record

    with open_record(run_dir) as record:
        rows = list(record.rows())
    stars = pictures.fathomings_of(rows)
    assert [s.name for s in stars] == ["sun", "giant"]
    assert stars[0].median("teff_k") == pytest.approx(rows[0]["teff_k"])
    assert stars[0].error("log_lum_lsun") == pytest.approx(rows[0]["log_lum_lsun_err"])


def test_nothing_to_draw_is_one_sentence(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    with pytest.raises(RequestError, match="holds no run"):
        pictures.hr_diagram(tmp_path)
    assert pictures.fathomings_of([{"name": "a", "mk_type": "", "teff_k": math.nan, "log_lum_lsun": math.nan}]) == []


def test_a_star_that_is_not_there_is_named(run_dir: Path, tmp_path: Path) -> None:
    with pytest.raises(RequestError, match="TH17-99"):
        pictures.main(str(run_dir), str(tmp_path / "out"), "TH17-99")
    assert (tmp_path / "out" / "hr_diagram.png").stat().st_size > 10_000


def test_a_spectrum_is_drawn_over_its_template_and_both_pictures_are_written(tmp_path: Path) -> None:
    import matplotlib

    matplotlib.use("Agg")
    import matplotlib.pyplot as plt

    from starfathom.demo_spectra import __file__ as demo

    spectra = sorted(p for p in Path(demo).parent.glob("th17_0*") if p.suffix in (".dat", ".txt", ".csv"))
    figure, ax = plt.subplots()
    pictures.over_template(spectra[0], ax)
    drawn = [line for line in ax.lines if len(line.get_xdata()) > 300]
    assert len(drawn) >= 2, "the star and its template"
    assert "template of" in ax.get_title(loc="left") and "rest" in ax.get_xlabel()
    plt.close(figure)
    listed = tmp_path / "one.csv"
    listed.write_text(f"name,spectrum,V,B\nTH17-10,{spectra[0]},10.1,10.8\n")
    run_survey(TargetList(listed), tmp_path / "one", RunSettings(n_samples=400), workers=1, formats=["csv"],
               progress=False)
    pictures.main(str(tmp_path / "one"), str(tmp_path / "out"))
    assert sorted(p.name for p in (tmp_path / "out").iterdir()) == ["hr_diagram.png", "spectrum.png"]
    assert (tmp_path / "out" / "spectrum.png").stat().st_size > 10_000
