"""From a run to the desk and back: what is decided by hand is in the next output of the run, and in its report."""

from __future__ import annotations

import csv
import subprocess
import sys
from pathlib import Path

import pytest
from desk_driver import DeskProcess, Page

from starfathom.decisions import read

SPECTRA = Path(__file__).parents[2] / "demo_spectra"
COLUMNS = "name,spectrum,V,e_V,B,e_B\n"
STARS = ("near,th17_09.fits,10.217,0.015,10.873,0.020\ngiant,th17_10.ecsv,9.390,0.015,10.437,0.020\n"
         "spoiled,th17_12.dat,9.591,0.015,10.563,0.020\n")


def starfathom(*words: str | Path) -> None:
    command = [sys.executable, "-c", "from starfathom.cli import main; main()", *map(str, words)]
    done = subprocess.run(command, capture_output=True, text=True)
    assert done.returncode == 0, done.stderr


def results(run_dir: Path) -> dict[str, dict[str, str]]:
    with open(run_dir / "results.csv", encoding="utf-8", newline="") as f:
        return {row["name"]: row for row in csv.DictReader(f)}


@pytest.fixture(scope="module")
def run_dir(tmp_path_factory) -> Path:
    folder = tmp_path_factory.mktemp("flow")
    targets = folder / "targets.csv"
    targets.write_text(COLUMNS + STARS.replace(",th17", f",{SPECTRA}/th17"))
    starfathom("run", targets, "-o", folder / "run", "-q", "--workers", 1)
    return folder / "run"


def decide(page: Page, star: str) -> None:
    """Go to a star by its name in the queue."""
    page.run("[...document.querySelectorAll('#queue li')].find("
             "(li) => li.querySelector('.name').textContent === arguments[0]).click()", star)
    page.until("return document.querySelector('#star .big').textContent === arguments[0]", star)


def test_hand_decisions_reach_distances_and_report(chromium, run_dir):
    before = results(run_dir)
    desk = DeskProcess(run_dir)
    try:
        page = Page(chromium, desk.address)
        decide(page, "near")
        page.until("return document.getElementById('place').textContent.includes('pc')")   # what it would mean
        page.keys("e")
        page.until("return document.activeElement.id === 'type'")
        page.keys("G5 III", "\ue007")
        page.until("return document.getElementById('said').textContent.includes('near amended to G5 III')")
        decide(page, "spoiled")
        page.press("x", "said")
        assert page.severe() == []
    finally:
        desk.stop()
    assert {n: d.action for n, d in read(run_dir).items()} == {"near": "amend", "spoiled": "set aside"}

    starfathom("run", run_dir.parent / "targets.csv", "-o", run_dir, "--resume", "-q")
    after = results(run_dir)
    assert after["near"]["mk_type"] == "G5 III" != before["near"]["mk_type"]
    assert float(after["near"]["distance_pc"]) > 3 * float(before["near"]["distance_pc"])
    assert after["spoiled"]["status"] == "refused" and after["spoiled"]["distance_pc"] in ("", "nan")
    assert after["giant"] == before["giant"]

    chromium.get((run_dir / "report.html").as_uri())
    text = chromium.execute_script("return document.body.innerText")
    assert "amended" in text and "set aside" in text and "G5 III" in text


def test_the_report_opens_sorts_and_filters_without_a_server(chromium, run_dir):
    chromium.get_log("browser")
    chromium.get_log("performance")
    chromium.get((run_dir / "report.html").as_uri())

    def column(k: int) -> list[str]:
        return chromium.execute_script(
            "return [...document.querySelectorAll('#stars tbody tr')].filter((r) => !r.hidden)"
            ".map((r) => r.cells[arguments[0]].textContent)", k)

    def click(head: int) -> None:
        chromium.execute_script("document.querySelectorAll('#stars th button')[arguments[0]].click()", head)

    assert column(0) == ["near", "giant", "spoiled"]
    click(0)
    assert column(0) == ["giant", "near", "spoiled"]
    click(0)
    assert column(0) == ["spoiled", "near", "giant"]
    click(3)
    snr = [float(v) for v in column(3)]
    assert snr == sorted(snr)
    chromium.execute_script("const w = document.getElementById('words'); w.value = 'gia';"
                            "w.dispatchEvent(new Event('input'))")
    assert column(0) == ["giant"]
    link = chromium.execute_script("return document.querySelector('#stars a[href*=\"star-0002\"]').href")
    chromium.get(link)
    assert chromium.execute_script("return document.querySelector('h1').textContent").startswith("giant")
    assert chromium.execute_script("return document.querySelectorAll('svg').length") >= 3
    assert [e for e in chromium.get_log("browser") if e["level"] == "SEVERE"] == []
    for entry in chromium.get_log("performance"):
        assert '"url":"http' not in entry["message"], entry["message"]
