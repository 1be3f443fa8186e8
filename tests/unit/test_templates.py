"""The library commands and a user's own standards."""

from __future__ import annotations

import json
from pathlib import Path

import numpy as np
import pytest

from starfathom import templates_command
from starfathom.classify.errors import RequestError, SpectrumError, StarfathomError
from starfathom.templates import manifest, user
from starfathom.templates.coverage import FEW, as_text, cells, weak_places
from starfathom.templates.library import load_library


@pytest.fixture()
def own(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Path:
    monkeypatch.setenv("STARFATHOM_TEMPLATES", str(tmp_path / "own"))
    return tmp_path / "own"


def write_star(path: Path, name: str, noise: float = 0.005) -> Path:
    """A library star as a text file."""
    library = load_library()
    k = list(library.catalogue["star"]).index(name)
    ok = library.valid[k]
    flux = library.flux[k][ok] * (1 + np.random.default_rng(1).normal(0, noise, int(ok.sum())))
    np.savetxt(path, np.column_stack([library.wave_angstrom[ok], flux]))
    return path


def test_coverage_counts_every_typed_normal_star_once() -> None:
    library = load_library()
    grid = cells(library)
    assert sum(cell.stars for cell in grid) <= len(library)
    cell = next(c for c in grid if (c.types, c.lum_class) == ("K0-K1", "III"))
    c = library.catalogue
    here = (c["kind"] == "normal") & (c["t_code"] >= 50) & (c["t_code"] < 52) & (np.abs(c["lum_code"] - 3.01) < 0.5)
    names = {f"HIP {h}" if h > 0 else s for h, s in zip(c["hip"][here], c["star"][here])}
    assert cell.stars == len(names) > 20 and not cell.weak
    hypergiants = [c for c in grid if c.lum_class == "Ia0"]
    assert all(c.weak for c in hypergiants)
    assert any(line.startswith("Ia0: no star") for line in weak_places(grid))
    assert max(map(len, as_text(grid).splitlines())) <= 80
    assert all(c.weak for c in grid if c.stars < FEW)


def test_coverage_as_json(capsys: pytest.CaptureFixture[str]) -> None:
    templates_command.coverage(as_json=True)
    rows = json.loads(capsys.readouterr().out)
    assert {"types", "class", "stars", "libraries", "with_parallax", "weak"} == set(rows[0])


def test_show_a_star_a_number_and_a_type(capsys: pytest.CaptureFixture[str], tmp_path: Path) -> None:
    templates_command.show("hd 95418")
    by_name = capsys.readouterr().out
    assert "HD095418" in by_name and "Le Borgne" in by_name and "licence" in by_name
    templates_command.show("HIP 53910")
    assert "HD095418" in capsys.readouterr().out
    picture = tmp_path / "k3.png"
    templates_command.show("K3 III", str(picture))
    assert picture.read_bytes()[:4] == b"\x89PNG"
    with pytest.raises(RequestError, match="no star named"):
        templates_command.show("nonsense 77")
    with pytest.raises(RequestError, match="must end in"):
        templates_command.show("G2 V", str(tmp_path / "x.txt"))


def test_a_users_standard_is_named_at_once(own: Path, tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    from starfathom.classify.engine import Classifier
    from starfathom.classify.reading import read_plain

    path = write_star(tmp_path / "mine.txt", "HD083618")
    before = user.fingerprint(learned_only=False)
    templates_command.add(str(path), "K3 III", name="Ours 12", fwhm_angstrom=2.5)
    assert "one of your standards" in capsys.readouterr().out
    assert user.fingerprint(learned_only=False) != before == ""
    assert user.fingerprint() == "", "nothing learns from it unless asked"
    classifier = Classifier()
    spectrum = read_plain(str(path))
    answer = classifier.classify_one(spectrum)
    assert any(n.startswith("Ours 12") for n in answer.nearest)
    ready = classifier.prepare(spectrum)
    same = classifier.library_spectrum("Ours 12", ready) - ready.rectified
    assert np.nanstd(same[ready.valid]) < 0.02
    assert "Ours 12" in classifier.standards(53.0, 3.0, n=40)
    assert len(load_library()) == len(load_library().without(("user",)))


def test_learning_from_a_standard_changes_the_library_and_the_models(own: Path) -> None:
    from starfathom.classify.engine import Classifier

    library = load_library()
    k = list(library.catalogue["star"]).index("HD083618")
    user.save_standard("Ours 13", "K3 III", library.flux[k].astype(float), library.valid[k], 2.5, learn=True)
    grown = load_library()
    assert len(grown) == len(library) + 1 and grown.catalogue["library"][-1] == "user"
    assert Classifier()._folder() != Classifier(without_libraries=("user",))._folder()
    assert Classifier(without_libraries=("user",))._default
    (own / "Ours_13.npz").unlink()
    assert len(load_library()) == len(library)


def test_bad_standards_are_one_sentence(own: Path, tmp_path: Path) -> None:
    path = write_star(tmp_path / "s.txt", "HD083618")
    with pytest.raises(RequestError, match="luminosity class"):
        templates_command.add(str(path), "K3")
    with pytest.raises(RequestError, match="already"):
        templates_command.add(str(path), "K3 III", name="HD 083618")
    noisy = write_star(tmp_path / "noisy.txt", "HD083618", noise=0.3)
    with pytest.raises(SpectrumError, match="too low for a standard"):
        templates_command.add(str(noisy), "K3 III", name="poor")
    assert not own.exists() or not list(own.glob("*.npz"))


def test_shipped_files_fit_one_another() -> None:
    assert manifest._misfits() == []


def test_a_spoiled_file_is_found(monkeypatch: pytest.MonkeyPatch, tmp_path: Path) -> None:
    wanted = manifest.hashes()
    wanted["templates/data/library.npz"] = "0" * 64
    wanted["classify/data/model/rung_99.npz"] = "1" * 64
    spoiled = tmp_path / "manifest.json"
    spoiled.write_text(json.dumps(wanted))
    monkeypatch.setattr(manifest, "MANIFEST", spoiled)
    words = " ".join(manifest.faults())
    assert "library.npz is not the file that was shipped" in words and "rung_99.npz is missing" in words
    with pytest.raises(StarfathomError, match="faults in the shipped files"):
        templates_command.check()
