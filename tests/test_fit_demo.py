"""The demo: its tables are what its script makes, and its fit finds what went into them.

The data are invented; nothing here checks the physics, only that the parts fit together.
"""

from __future__ import annotations

import importlib.util
from pathlib import Path

import numpy as np
import pytest

from thermo.fit import fit

DEMO = Path(__file__).parents[1] / "data_demo"


@pytest.fixture(scope="module")
def script():
    spec = importlib.util.spec_from_file_location("make_data", DEMO / "make_data.py")
    module = importlib.util.module_from_spec(spec)
    spec.loader.exec_module(module)
    return module


def read(folder: Path, name: str) -> np.ndarray:
    return np.loadtxt(folder / name, delimiter=",", skiprows=3)


def test_the_tables_are_those_of_the_script_and_say_they_are_invented(
    script, tmp_path, monkeypatch
):
    monkeypatch.setattr(script, "FOLDER", tmp_path)
    script.main()
    for name in ("susceptibility.csv", "specific_heat.csv"):
        # Six digits are written, so the last may round either way on another machine.
        np.testing.assert_allclose(read(DEMO, name), read(tmp_path, name), rtol=2e-5)
        assert "invented" in (DEMO / name).read_text()
    for name in ("model.toml", "study.toml", "make_data.py"):
        assert "invented" in (DEMO / name).read_text()


def no_cautions(result):
    """None, and no point left out: against eight rungs the size of six shows nowhere."""
    assert result.cautions == ()
    assert result.window.status == "checked"
    assert (result.window.sites, result.window.other) == (12, 16)
    assert not any(result.window.cut.values())
    # Where the curves differ by up to 0.7 uncertainties, parameters move by up to one error.
    assert 0.3 < max(map(abs, result.window.shift.values())) < 1


def test_a_false_minimum_is_left_by_another_start_and_else_told(tmp_path):
    """From a leg coupling of the wrong sign the fit ends in another valley, and is led out of it;
    without further starts it says so."""
    text = (DEMO / "study.toml").read_text().replace("start = 60.0", "start = -100.0")
    text = text.replace("start = 100.0", "start = 450.0")
    text = text.replace('file = "', f'file = "{DEMO}/')
    text = text.replace('"model.toml"', f'"{DEMO}/model.toml"')
    (tmp_path / "study.toml").write_text(text)
    false = fit(tmp_path / "study.toml", starts=0, profiles="none")
    assert false["J_leg"].value < 0
    assert false.n_starts == 1
    assert false.reduced_chi_square > 2
    assert any("start" in caution for caution in false.cautions)
    result = fit(tmp_path / "study.toml")
    good = fit(DEMO / "study.toml")
    for name in good.free_names:
        assert result[name].value == pytest.approx(good[name].value, rel=1e-5)
    no_cautions(result)
    assert result.n_starts == 7
    assert "7 starts were tried" in result.message
    assert "this minimum is lower" in result.message
    assert result.n_solves > false.n_solves
    # A good first minimum costs nothing more than the fit above the window's edge.
    assert good.n_starts == 1
    assert good.n_solves <= 32
    assert "start" not in good.message


def test_the_smaller_cluster_serves_at_these_temperatures(script):
    grids = script.grids()
    errors = [read(DEMO, name)[:, 2] for name in ("susceptibility.csv", "specific_heat.csv")]
    for small, large, error in zip(
        script.exact(6, *grids), script.exact(8, *grids), errors, strict=True
    ):
        assert np.abs((small - large) / error).max() < 1


@pytest.mark.parametrize("start", [{}, {"J_rung": 200.0, "J_leg": 0.0}])
def test_the_fit_finds_what_went_in(script, tmp_path, start):
    text = (DEMO / "study.toml").read_text()
    for name, value in start.items():
        old = {"J_rung": "start = 100.0", "J_leg": "start = 60.0"}[name]
        assert old in text
        text = text.replace(old, f"start = {value}")
    text = text.replace('file = "', f'file = "{DEMO}/')
    text = text.replace('"model.toml"', f'"{DEMO}/model.toml"')
    (tmp_path / "study.toml").write_text(text)
    result = fit(tmp_path / "study.toml")
    assert result.trustworthy
    no_cautions(result)
    assert 0.8 < result.reduced_chi_square < 1.25
    for name, true in script.TRUE.items():
        assert abs(result[name].value - true) < 3 * result[name].standard_error, name
    # Two couplings: one solve for a step and one for its slope.
    assert result.n_solves <= 2 * result.n_evaluations + 2
