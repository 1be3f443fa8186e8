"""The command line: every command's door, exit codes, one sentence for every fault, help at once."""

from __future__ import annotations

import json
import os
import subprocess
import sys
import time
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from starfathom import cli
from starfathom.classify.assignment import COLUMNS, Assignment
from starfathom.classify.errors import SpectrumError, StarfathomError
from starfathom.templates.subtypes import CLASSES, SUBTYPES

COMMANDS = ("classify", "lines", "sheet", "desk", "distance", "run", "demo", "plan", "templates")


def call(*arguments: str) -> int:
    """Exit code of the command line; standard output and error are pytest's to capture."""
    try:
        cli.main(arguments)
    except SystemExit as end:
        return int(end.code or 0)
    return 0


class FakeClassifier:
    """Types every readable spectrum G2 V; remembers what it was asked."""

    asked: Any = None
    loaded: Any = None

    @classmethod
    def load(cls, without_libraries: Any = (), without_stars: Any = ()) -> FakeClassifier:
        FakeClassifier.loaded = (without_libraries, without_stars)
        return cls()

    def classify_many(self, spectra: Any, settings: Any) -> list[Assignment]:
        FakeClassifier.asked = settings
        posterior = np.zeros((len(SUBTYPES), len(CLASSES)))
        posterior[50, 7] = 1.0
        return [
            Assignment(status="failed", reason=str(s)) if isinstance(s, SpectrumError) else
            Assignment(status="typed", object_kind="star", mk_type="G2 V", t_code=42.0, posterior=posterior, snr=50.0)
            for s in spectra
        ]  # fmt: skip


@pytest.fixture
def fake(monkeypatch: pytest.MonkeyPatch) -> type[FakeClassifier]:
    from starfathom.classify import engine

    monkeypatch.setattr(engine, "Classifier", FakeClassifier)
    return FakeClassifier


@pytest.fixture
def spectrum(tmp_path: Path) -> Path:
    path = tmp_path / "star.dat"
    wave = np.arange(3800.0, 7000.0, 2.0)
    np.savetxt(path, np.c_[wave, 1 + 0.1 * np.sin(wave / 50), np.full_like(wave, 0.01)])
    return path


# Help and start-up --------------------------------------------------------------------------------------------------


def test_help_names_every_command(capsys: pytest.CaptureFixture[str]) -> None:
    assert call("--help") == 0
    out = capsys.readouterr().out
    for command in COMMANDS:
        assert f"  {command} " in out
    assert "..." not in out.split("Commands:")[1].split("Exit codes")[0], "a command's description is cut off"


@pytest.mark.parametrize("command", COMMANDS)
def test_every_command_has_help(command: str, capsys: pytest.CaptureFixture[str]) -> None:
    assert call(command, "--help") == 0
    assert "Usage: starfathom" in capsys.readouterr().out


def test_help_loads_nothing_heavy() -> None:
    call_help = "try: cli.main(['--help'])\nexcept SystemExit: pass\n"
    code = f"import sys; from starfathom import cli\n{call_help}print(*sys.modules)"
    out = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True).stdout
    loaded = {name.split(".")[0] for name in out.split("Exit codes")[1].split()}
    assert not loaded & {"numpy", "astropy", "scipy", "specutils", "matplotlib", "pyarrow", "bokeh", "dask"}


def test_help_answers_at_once() -> None:
    def seconds(times: int, *command: str) -> float:
        best = float("inf")
        for _ in range(times):
            start = time.perf_counter()
            subprocess.run([sys.executable, *command], capture_output=True, check=True)
            best = min(best, time.perf_counter() - start)
        return best

    assert seconds(3, "-m", "starfathom", "--help") < 0.5 * seconds(1, "-c", "import specutils")


def test_version(capsys: pytest.CaptureFixture[str]) -> None:
    assert call("--version") == 0
    assert capsys.readouterr().out.startswith("starfathom ")


# classify -----------------------------------------------------------------------------------------------------------


def test_classify_writes_rows_in_the_order_given(
    fake: type[FakeClassifier], spectrum: Path, tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    from astropy.table import Table

    other = tmp_path / "other.dat"
    other.write_bytes(spectrum.read_bytes())
    broken = tmp_path / "broken.dat"
    broken.write_text("not a spectrum\n")
    out = tmp_path / "results.ecsv"
    assert call("classify", str(other), str(broken), str(spectrum), "-o", str(out)) == 1
    table = Table.read(out)
    assert table.colnames == [c[0] for c in COLUMNS]
    assert list(table["file"]) == [str(other), str(broken), str(spectrum)]
    assert list(table["status"]) == ["typed", "failed", "typed"]
    printed = capsys.readouterr().out
    assert "G2 V" in printed and "2 typed, 1 failed" in printed and str(out) in printed
    assert call("classify", str(spectrum), "-o", str(out)) == 0


def test_classify_json_is_json_and_nothing_else(
    fake: type[FakeClassifier], spectrum: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    assert call("classify", str(spectrum), "--json") == 0
    (star,) = json.loads(capsys.readouterr().out)
    assert star["mk_type"] == "G2 V" and star["p_V"] == 1.0 and star["velocity_kms"] is None
    assert star["evidence"] == []


def test_classify_hands_the_options_on(fake: type[FakeClassifier], spectrum: Path) -> None:
    assert call("classify", str(spectrum), "--vacuum", "--fwhm", "5", "--velocity", "-12.5", "--without", "MILES, x",
                "--without-star", "71683,HIP 8102") == 0  # fmt: skip
    assert fake.loaded == (("miles", "x"), (71683, 8102))
    assert (fake.asked.medium, fake.asked.fwhm_angstrom, fake.asked.velocity_kms) == ("vacuum", 5.0, -12.5)


@pytest.mark.parametrize(("arguments", "words"), [
    (["--air", "--vacuum"], "exclude each other"),
    (["--fwhm", "-3"], "above 0"),
    (["--fwhm", "nan"], "above 0"),
    (["--fwhm", "5", "--resolution", "1000"], "say the same thing"),
    (["--velocity", "1e9"], "below 20000"),
    (["--without-star", "HD 1"], "not a HIP number"),
    (["-o", "out.xlsx"], "names no table format"),
    (["-o", "no/such/folder/out.csv"], "does not exist"),
    (["--read-as", "nonsense"], "nonsense"),
])  # fmt: skip
def test_classify_refuses_bad_calls(
    fake: type[FakeClassifier], spectrum: Path, arguments: list[str], words: str, capsys: pytest.CaptureFixture[str]
) -> None:
    assert call("classify", str(spectrum), *arguments) == 2
    error = capsys.readouterr().err
    assert words in error and "Traceback" not in error and error.startswith("starfathom: ") and error.count("\n") == 1


def test_many_stars_get_a_line_each(
    fake: type[FakeClassifier], spectrum: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    assert call("classify", *[str(spectrum)] * 50) == 0
    lines = capsys.readouterr().out.splitlines()
    assert len(lines) == 51 and lines[-1] == "50 stars: 50 typed."


# distance -----------------------------------------------------------------------------------------------------------


def test_distance_prints_a_block(capsys: pytest.CaptureFixture[str]) -> None:
    assert (
        call("distance", "--type", "A2 V", "--mag", "V=7.31,0.01", "--mag", "B=7.42,0.01", "--parallax", "5.9,0.3") == 0
    )
    out = capsys.readouterr().out
    for words in ("A2 V   (type as given)", "distance", "68 %", "95 %", "Rsun", "errors", "parallax"):
        assert words in out


def test_distance_json(capsys: pytest.CaptureFixture[str]) -> None:
    assert call("distance", "--type", "A2 V", "--mag", "V=7.31", "--json") == 0
    told = json.loads(capsys.readouterr().out)
    assert told["mk_type"] == "A2 V" and 100 < told["distance_pc"] < 250
    assert {"step", "sigma_mag", "per_cent", "share"} <= set(told["budget"][0])
    assert isinstance(told["cautions"], list)


@pytest.mark.parametrize("arguments", [
    ["--mag", "V=abc"], ["--mag", "V"], ["--mag", "V=99"], ["--mag", "V=9,-1"], ["--mag", "V=9,.1,.1"],
    ["--mag", "W=9"],
    [], ["--mag", "V=9", "--mag", "V=10"], ["--mag", "V=9", "--parallax", "3"], ["--mag", "V=9", "--parallax", "3,0"],
    ["--mag", "V=9", "--ebv", "x,1"], ["--mag", "V=9", "--scale", "nonsense"], ["--mag", "V=9", "--prior", "nonsense"],
    ["--mag", "V=9", "--rv", "-3"], ["--mag", "V=9", "--parallax", "nan,1"],
    ["--mag", "V=9", "--dec", "99", "--ra", "1"],
])  # fmt: skip
def test_distance_refuses_bad_calls(arguments: list[str], capsys: pytest.CaptureFixture[str]) -> None:
    assert call("distance", "--type", "A2 V", *arguments) == 2
    error = capsys.readouterr().err
    assert error.startswith("starfathom: ") and error.count("\n") == 1


@pytest.mark.parametrize("mk_type", ["XX", "DA", "", "A2", "sdB", "C5,4"])
def test_distance_refuses_types_without_a_place_on_the_scale(mk_type: str, capsys: pytest.CaptureFixture[str]) -> None:
    assert call("distance", "--type", mk_type, "--mag", "V=9") == 2
    assert capsys.readouterr().err.count("\n") == 1


# run ----------------------------------------------------------------------------------------------------------------


def test_run_from_types(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    listed = tmp_path / "list.csv"
    listed.write_text("name,mk_type,V,e_V,note\na,G2 V,9,0.01,x\nb,K0 III,8,0.01,y\n")
    assert call("run", str(listed), "-o", str(tmp_path / "out"), "--no-report", "--formats", "csv,ecsv") == 0
    said = capsys.readouterr()
    assert "K0 III" in said.out and "2 stars: 2 typed." in said.out and "results.csv" in said.out
    assert said.err == "Columns not used: note\n"
    assert sorted(p.name for p in (tmp_path / "out").iterdir()) == [
        "budget.csv", "budget.ecsv", "record.lock", "record.sqlite", "results.csv", "results.ecsv", "run.json",
    ]  # fmt: skip
    assert call("run", str(listed), "-o", str(tmp_path / "out"), "--no-report") == 2
    assert call("run", str(listed), "-o", str(tmp_path / "out"), "--no-report", "--resume", "-q") == 0


def test_run_with_a_missing_spectrum_fails_that_row_only(
    fake: type[FakeClassifier], spectrum: Path, tmp_path: Path
) -> None:
    import csv

    listed = tmp_path / "list.csv"
    listed.write_text(f"name,spectrum,V\na,{spectrum.name},9\nb,not_there.fits,8\nc,,8\n")
    assert call("run", str(listed), "-o", str(tmp_path / "out"), "--no-report", "--formats", "csv", "-q") == 1
    with open(tmp_path / "out" / "results.csv", newline="") as stream:
        rows = list(csv.DictReader(stream))
    assert [r["status"] for r in rows] == ["typed", "failed", "failed"]
    assert "not_there.fits" in rows[1]["reason"]
    assert float(rows[0]["distance_pc"]) > 0 and rows[1]["distance_pc"] == ""


@pytest.mark.parametrize(("text", "arguments"), [
    ("name,mk_type,V\na,G2 V,9\na,G2 V,9\n", []),
    ("name,mk_type,V\na,G2 V,bright\n", []),
    ("name,mk_type,V\na,Q2 V,9\n", []),
    ("name,mk_type,V\na,G2 V,9\n", ["--seed", "-1"]),
    ("name,mk_type,V\na,G2 V,9\n", ["--workers", "0"]),
    ("name,mk_type,V\na,G2 V,9\n", ["--scale", "nonsense"]),
    ("name,mk_type,V\na,G2 V,9\n", ["--formats", "xlsx"]),
    ("name,mk_type,V\na,G2 V,9\n", ["--resume"]),
])  # fmt: skip
def test_run_rejects_the_call(
    tmp_path: Path, text: str, arguments: list[str], capsys: pytest.CaptureFixture[str]
) -> None:
    listed = tmp_path / "list.csv"
    listed.write_text(text)
    assert call("run", str(listed), "-o", str(tmp_path / "out"), "--no-report", *arguments) == 2
    error = capsys.readouterr().err
    assert error.startswith("starfathom: ") and error.count("\n") == 1
    assert not (tmp_path / "out").exists(), "a rejected call must leave nothing behind"


# The door -----------------------------------------------------------------------------------------------------------


@pytest.mark.parametrize(("fault", "code", "words"), [
    (StarfathomError("The disk is full."), 1, "The disk is full."),
    (KeyboardInterrupt(), 130, "--resume"),
    (ZeroDivisionError("division by zero"), 1, "ZeroDivisionError"),
])  # fmt: skip
def test_faults_end_in_a_sentence(
    fault: BaseException, code: int, words: str, capsys: pytest.CaptureFixture[str], monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.delenv("STARFATHOM_DEBUG", raising=False)

    def broken() -> None:
        raise fault

    with pytest.raises(SystemExit) as end:
        cli._guarded(broken)
    assert end.value.code == code
    assert words in capsys.readouterr().err


def test_a_reader_that_leaves_early_is_no_fault(tmp_path: Path) -> None:
    code = ("import sys\nfrom starfathom import cli\n"
            "def talk():\n    for i in range(100000): print('line', i)\n    sys.stdout.flush()\n"
            "cli._guarded(talk)")  # fmt: skip
    done = subprocess.run(f'{sys.executable} -c "{code}" | head -1', shell=True, capture_output=True, text=True)
    assert done.stdout == "line 0\n" and done.stderr == ""


def test_output_survives_a_terminal_without_unicode(tmp_path: Path) -> None:
    listed = tmp_path / "list.csv"
    listed.write_text("name,mk_type,V\na,G2 V,9\n")
    command = [sys.executable, "-m", "starfathom", "run", str(listed), "-o", str(tmp_path / "out"), "--no-report"]
    done = subprocess.run(command,
                          capture_output=True, env=os.environ | {"PYTHONIOENCODING": "koi8-r"})  # fmt: skip
    assert done.returncode == 0 and b"+-" in done.stdout


# Commands that other rooms carry out ---------------------------------------------------------------------------------


def test_lines_sheet_and_desk_hand_their_options_on(monkeypatch: pytest.MonkeyPatch, spectrum: Path) -> None:
    from starfathom import desk, lines_command, sheet

    seen: list[Any] = []
    monkeypatch.setattr(lines_command, "run", lambda *a, **k: seen.append((a, k)))
    monkeypatch.setattr(sheet, "run", lambda *a, **k: seen.append((a, k)))
    monkeypatch.setattr(desk, "serve", lambda *a: seen.append(a))
    assert call("lines", "a.fits", "--fwhm", "5", "--vacuum", "--reference", "--json") == 0
    assert call("sheet", "a.fits", "--with", "G2 V", "-o", "a.pdf", "--velocity", "12") == 0
    assert call("desk", "a.fits", "b.fits", "--port", "8123", "--no-browser") == 0
    lines, page, served = seen
    assert lines[0] == ("a.fits",)
    assert lines[1] | {"fwhm_angstrom": 5.0, "medium": "vacuum", "reference": True, "as_json": True} == lines[1]
    assert page == (("a.fits", "G2 V", "a.pdf"), {"medium": None, "fwhm_angstrom": None, "velocity_kms": 12.0})
    assert served == (["a.fits", "b.fits"], 8123, False)


def test_lines_refuses_a_bad_output_before_the_work(spectrum: Path) -> None:
    assert call("lines", str(spectrum), "-o", "lines.xlsx") == 2


def test_demo_carries_its_targets_and_starts_afresh(
    fake: type[FakeClassifier], tmp_path: Path, monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]
) -> None:
    monkeypatch.setattr(cli, "_write_report", lambda run_dir: run_dir / "report.html")
    folder = tmp_path / "demo_report"
    for _ in range(2):
        assert call("demo", "-o", str(folder)) == 0
        out = capsys.readouterr().out
        assert "TH17-01" in out and "19 stars" in out and str(folder / "report.html") in out
    other = tmp_path / "precious"
    other.mkdir()
    (other / "file").write_text("x")
    assert call("demo", "-o", str(other)) == 2
    assert (other / "file").exists()


def test_long_runs_are_summed_up(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    listed = tmp_path / "list.csv"
    listed.write_text("name,mk_type,V\n" + "".join(f"s{i},G2 V,9\n" for i in range(50)))
    assert call("run", str(listed), "-o", str(tmp_path / "out"), "--no-report", "--formats", "csv") == 0
    out = capsys.readouterr().out
    assert out.splitlines()[0] == "50 stars: 50 typed." and "s17" not in out


CONTRACT = {
    "classify": "-o --air --vacuum --fwhm --resolution --velocity --read-as --without --without-star --json",
    "lines": "-o --fwhm --reference",
    "sheet": "--with -o",
    "desk": "--port --no-browser",
    "distance": "--type --mag --parallax --scale --prior --rv --json",
    "run": "-o --workers --scheduler --resume --seed --scale --prior --without --without-star",
    "plan": "--types --fwhm --range --want --json",
}


@pytest.mark.parametrize("command", CONTRACT)
def test_options_that_others_rely_on(command: str, capsys: pytest.CaptureFixture[str]) -> None:
    assert call(command, "--help") == 0
    words = capsys.readouterr().out.replace(",", " ").split()
    assert not [option for option in CONTRACT[command].split() if option not in words]


def test_the_templates_commands_are_there(capsys: pytest.CaptureFixture[str]) -> None:
    assert call("templates", "--help") == 0
    words = capsys.readouterr().out.split()
    assert {"coverage", "show", "add", "check"} <= set(words)


@pytest.mark.parametrize(
    ("arguments", "word"),
    [
        (("distance", "--type", "G2 V", "--mag", "V=10", "--seed", "-1"), "--seed"),
        (("distance", "--type", "G2 V", "--mag", "V=10", "--ra", "40"), "--dec"),
        (("distance", "--type", "G2 V", "--mag", "V=10", "--ra", "nan", "--dec", "5"), "not on the sky"),
        (("distance", "--type", "G2 V", "--mag", "V=10", "--parallax", "1e300,1"), "mas"),
        (("distance", "--type", "G2 V", "--mag", "V=10", "--ebv", "99,0.1"), "E(B-V)"),
        (("desk", "--port", "99999", "--no-browser", "star.txt"), "--port"),
    ],
)
def test_impossible_numbers_are_rejected(
    arguments: tuple[str, ...], word: str, capsys: pytest.CaptureFixture[str]
) -> None:
    assert call(*arguments) == 2
    assert word in capsys.readouterr().err


@pytest.mark.parametrize(("option", "value"), [("--rv", "99"), ("--scheduler", "foo")])
def test_run_rejects_impossible_settings(
    option: str, value: str, tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    targets = tmp_path / "list.csv"
    targets.write_text("name,mk_type,V\na,G2 V,10\n")
    assert call("run", str(targets), "-o", str(tmp_path / "run"), "-q", "--no-report", option, value) == 2
    assert capsys.readouterr().err.startswith(f"starfathom: {option} {value}")


def test_target_list_in_another_encoding_says_so(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    targets = tmp_path / "list.csv"
    targets.write_bytes("name,mk_type,V\nétoile,G2 V,10\n".encode("latin1"))
    assert call("run", str(targets), "-o", str(tmp_path / "run"), "-q") == 2
    assert "UTF-8" in capsys.readouterr().err
