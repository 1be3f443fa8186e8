"""The recipes of shipped tables: what they make is what is shipped, and they say so when it is not."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest

from starfathom.templates import foreign_recipe, recipe
from starfathom.templates.library import DATA, LIBRARY_FILE, load_library, read_catalogue


@pytest.fixture
def shipped(monkeypatch: pytest.MonkeyPatch) -> dict[str, np.ndarray]:
    """The shipped library in place of what the recipe builds from downloads."""
    with np.load(DATA / LIBRARY_FILE) as z:
        arrays = {k: z[k] for k in z.files}
    c = load_library().catalogue
    rows = [dict(zip(c, values)) for values in zip(*(v.tolist() for v in c.values()))]
    monkeypatch.setattr(recipe, "build", lambda: (arrays, rows))
    return arrays


def test_a_written_library_reads_back(shipped, tmp_path: Path):
    recipe.write(tmp_path)
    with np.load(tmp_path / LIBRARY_FILE) as z:
        np.testing.assert_array_equal(z["codes"], shipped["codes"])
    again, first = read_catalogue(tmp_path / "catalogue.ecsv"), read_catalogue()
    assert list(again) == list(first)
    for name, column in first.items():
        np.testing.assert_array_equal(again[name], column, err_msg=name)
    head = (tmp_path / "catalogue.ecsv").read_text()[:8000]
    assert "unit: mas" in head and "licence" in head, "units and sources travel in the header"


def test_checking_a_library_says_whether_it_agrees(shipped, monkeypatch: pytest.MonkeyPatch, capsys):
    monkeypatch.setattr("sys.argv", ["recipe", "--check"])
    assert recipe.main() == 0
    assert "spectra agree with the shipped file" in capsys.readouterr().out
    shipped["codes"] = shipped["codes"].copy()
    shipped["codes"][5, 1000] += 1
    assert recipe.main() == 1
    assert "DIFFER" in capsys.readouterr().out


@pytest.mark.registry
@pytest.mark.slow
def test_the_recipe_of_foreign_objects_makes_the_shipped_file_again(monkeypatch: pytest.MonkeyPatch, tmp_path: Path,
                                                                    capsys):
    built = foreign_recipe.build()
    monkeypatch.setattr(foreign_recipe, "build", lambda: built)
    monkeypatch.setattr("sys.argv", ["recipe", "--check"])
    assert foreign_recipe.main() == 0, capsys.readouterr().out
    assert "agree with" in capsys.readouterr().out
    built["kind"] = built["kind"][:-1]
    assert foreign_recipe.main() == 1
    monkeypatch.setattr("sys.argv", ["recipe"])
    monkeypatch.setattr(foreign_recipe, "FILE", tmp_path / "foreign.npz")
    assert foreign_recipe.main() == 0
    with np.load(tmp_path / "foreign.npz") as z:
        assert len(z["kind"]) == len(built["kind"])


def test_far_spectra_keep_the_mean_flux_and_end_where_the_data_do():
    """Coarse pixels hold the mean of a linear spectrum; outside the data there is nothing."""
    wave = np.arange(1500.0, 6000.0, 1.0)
    row = foreign_recipe._far_row(wave, wave / 3000.0).astype(float)
    at = np.exp(np.log(900.0) + foreign_recipe.LN_COARSE_STEP * np.arange(len(row)))
    inside = (at > 1520) & (at < 5950)
    ratio = row[inside] / at[inside]
    np.testing.assert_allclose(ratio, ratio.mean(), rtol=1e-3)
    assert not row[at < 1490].any() and not row[at > 6010].any()
    assert np.median(row[row > 0]) == pytest.approx(1.0, abs=0.01)


def test_the_table_of_metal_lines_is_what_the_library_gives():
    import csv

    from starfathom.classify import oddities

    with oddities.FILE.open() as fh:
        shipped = list(csv.DictReader(line for line in fh if not line.startswith("#")))
    made = oddities.fit_table()
    assert [(r["rung"], r["line"]) for r in made] == [(r["rung"], r["line"]) for r in shipped]
    for a, b in zip(made, shipped):
        np.testing.assert_allclose([float(a[k]) for k in ("c4", "scatter")], [float(b[k]) for k in ("c4", "scatter")],
                                   rtol=0.02, atol=2e-4, err_msg=f"{a['line']} at {a['rung']} A")


def test_the_scatter_of_templates_is_measured_beyond_the_noise(tmp_path: Path, monkeypatch: pytest.MonkeyPatch):
    """A classifier whose templates are off by a known 3 per cent finds 3 per cent, in every cell, at every width."""
    from types import SimpleNamespace

    from starfathom.classify.grid import WAVE
    from starfathom.desk import scatter

    n = 80
    rng = np.random.default_rng(2)
    library = SimpleNamespace(flux=np.ones((n, len(WAVE))), valid=np.ones((n, len(WAVE)), bool), catalogue={
        "kind": np.full(n, "normal"), "doubtful": np.zeros(n), "fwhm_angstrom": np.full(n, 2.5),
        "t_code": np.linspace(1, 69, n)})
    codes = rng.permutation(np.repeat(np.arange(5.0, 70.0, 10.0), 12))[:n]
    noise = 0.02

    class Known:
        def __init__(self) -> None:
            self.library = library

        def classify_many(self, spectra, settings):
            return [SimpleNamespace(status="typed" if i else "refused", t_code=codes[i], lum_code=5.0)
                    for i in range(len(spectra))]

        def prepare(self, spectrum, settings):
            off = 0.03 * rng.standard_normal(len(WAVE)) + noise * rng.standard_normal(len(WAVE))
            return SimpleNamespace(rectified=1 + off, valid=np.ones(len(WAVE), bool), wave_angstrom=WAVE,
                                   sigma=np.full(len(WAVE), noise))

        def template(self, t_code, lum_code, ready):
            return np.ones(len(WAVE))

    table = scatter.measure(Known(), n)
    np.testing.assert_allclose(table, 0.03, rtol=0.12)
    scatter.write(table, tmp_path / "scatter.ecsv")
    from astropy.table import Table

    back = Table.read(tmp_path / "scatter.ecsv", format="ascii.ecsv")
    assert str(back["wave_lo"].unit) == "Angstrom"
    got = np.array([back[f"fwhm_{f:g}"] for f in scatter.FWHM_ANGSTROM]).T.reshape(table.shape)
    np.testing.assert_allclose(got, table, atol=5.1e-5)
