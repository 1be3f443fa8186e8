"""One wheel holds everything: the package works from it, outside the checkout and inside."""

from __future__ import annotations

import os
import shutil
import subprocess
import sys
import zipfile
from pathlib import Path

import pytest

ROOT = Path(__file__).parents[2]
#: Folder -> name of the package it installs as, below ``starfathom``.
FOLDERS = {"run": "", "classify": "classify", "distance": "distance", "templates": "templates",
           "demo_spectra": "demo_spectra"}  # fmt: skip


@pytest.fixture(scope="module")
def unpacked(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """The wheel's contents, in a folder that can stand in for site-packages."""
    folder = tmp_path_factory.mktemp("wheel")
    source = folder / "source"
    # From a copy: the build leaves files where it works, and other tests are at work in the checkout.
    for name in FOLDERS:
        shutil.copytree(ROOT / name, source / name, ignore=shutil.ignore_patterns("__pycache__"))
    for name in ("pyproject.toml", "README.md", "LICENSE", "DATA-LICENSES.md"):
        shutil.copy(ROOT / name, source)
    command = [sys.executable, "-m", "pip", "wheel", "--quiet", "--no-deps", "--wheel-dir", str(folder), str(source)]
    done = subprocess.run(command, capture_output=True, text=True)
    assert done.returncode == 0, done.stderr[-2000:]
    (wheel,) = folder.glob("*.whl")
    with zipfile.ZipFile(wheel) as packed:
        packed.extractall(folder / "site")
    return folder / "site"


def run(unpacked: Path, cwd: Path, *arguments: str) -> str:
    """Standard output of a fresh interpreter that finds the wheel first."""
    environment = os.environ | {"PYTHONPATH": str(unpacked)}
    done = subprocess.run([sys.executable, *arguments], capture_output=True, text=True, cwd=cwd, env=environment)
    assert done.returncode == 0, done.stderr[-2000:]
    return done.stdout


@pytest.mark.registry
@pytest.mark.slow
def test_imports_in_the_checkout_and_out(unpacked: Path, tmp_path: Path) -> None:
    for place in (ROOT, tmp_path):
        code = "import starfathom.classify, starfathom.distance, starfathom.templates; print(starfathom.__file__)"
        assert run(unpacked, place, "-c", code).startswith(str(unpacked))


@pytest.mark.registry
@pytest.mark.slow
def test_carries_its_data_types_and_licences(unpacked: Path) -> None:
    names = {str(p.relative_to(unpacked)) for p in unpacked.rglob("*") if p.is_file()}
    assert {"starfathom/py.typed", "starfathom/demo_spectra/targets.ecsv"} < names
    assert any(n.endswith("licenses/DATA-LICENSES.md") for n in names)
    # Every data file of the source is in the wheel too.
    for folder, package in FOLDERS.items():
        for path in (ROOT / folder).rglob("*"):
            if path.is_file() and "data" in path.parts and "__pycache__" not in path.parts:
                assert str(Path("starfathom", package, path.relative_to(ROOT / folder))) in names, path


@pytest.mark.registry
@pytest.mark.slow
def test_the_demonstration_runs_from_the_wheel(unpacked: Path, tmp_path: Path) -> None:
    out = run(unpacked, tmp_path, "-m", "starfathom", "demo", "-o", "report")
    assert "19 stars" in out and (tmp_path / "report" / "results.ecsv").exists()
