"""The printed sheet."""

from __future__ import annotations

import numpy as np
import pytest
from desk_fakes import FakeClassifier, read

from starfathom import sheet
from starfathom.classify.errors import RequestError
from starfathom.desk.windows import known_marks
from starfathom.sheet import Evidence


def evidence(name: str = "G2_V.txt", t_code: float = 42.0) -> Evidence:
    classifier, spectrum = FakeClassifier(), read(name)
    ready = classifier.prepare(spectrum)
    template = classifier.template(t_code, 5.0, ready) if np.isfinite(t_code) else np.full(ready.flux.shape, np.nan)
    return Evidence(name, classifier.classify_one(spectrum), ready, template, "G2 V", t_code, 5.0, known_marks())


def words(figure) -> str:
    from matplotlib.text import Text

    return "\n".join(t.get_text() for t in figure.findobj(Text))


def test_the_sheet_says_what_there_is_to_say():
    text = words(sheet.draw(evidence()))
    for wanted in ("G2_V.txt", "G2 V", "± 1.0 subtype", "compared with G2 V", "Ca II K", "Sr II 4077", "G1 to G4",
                   "class V", "1.2 ± 0.1", "S/N 90", "4.0 Å", "air (assumed)", "−3 σ"):
        assert wanted in text, wanted


def test_windows_show_star_template_and_ribbon():
    figure = sheet.draw(evidence(t_code=50.0))
    windows = [ax for ax in figure.axes if len(ax.patches) > 15]
    assert len(windows) >= 3                                   # one ribbon a window
    heights = np.concatenate([[p.get_height() for p in ax.patches] for ax in windows])
    assert np.abs(heights).max() > 3.0 and np.abs(heights).max() <= sheet.CLIP_SIGMA


@pytest.mark.parametrize("name", ["galaxy.txt", "G2_V.txt"])
def test_without_type_or_template_it_still_draws(name):
    text = words(sheet.draw(evidence(name, float("nan"))))
    assert "no template to compare" in text


@pytest.mark.parametrize("suffix", [".png", ".pdf", ".svg"])
def test_same_sheet_same_bytes(tmp_path, suffix):
    for k in (1, 2):
        sheet.save(sheet.draw(evidence()), tmp_path / f"{k}{suffix}")
    assert (tmp_path / f"1{suffix}").read_bytes() == (tmp_path / f"2{suffix}").read_bytes()
    assert (tmp_path / f"1{suffix}").stat().st_size > 10_000


def test_refused_in_a_sentence(tmp_path):
    with pytest.raises(RequestError, match=r"\.png"):
        sheet.run("x.fits", None, "sheet.docx")
    with pytest.raises(RequestError):
        sheet.gather("x.fits", "teapot")
    with pytest.raises(RequestError, match="cannot be written"):
        sheet.save(sheet.draw(evidence()), tmp_path / "no" / "such" / "sheet.png")
