"""``partita directions`` through the installed command: what it writes, and mistakes in words."""

from __future__ import annotations

import subprocess
import sys
from pathlib import Path

import pytest

import thermo

PARTITA = Path(sys.executable).with_name("partita")
MODEL = """
format = 1
title = "two ions of the tests"
energy_unit = "K"
bond_term = "+J S.S"
[couplings]
J = 3.0
D = 7.0
[[site]]
name = "a"
spin = 1
g = {g}
[[site]]
name = "b"
spin = 1
[[bond]]
sites = ["a", "b"]
coupling = "J"
[[ion]]
sites = ["a", "b"]
coupling = "D"
form = "axial"
"""


def partita(folder, *arguments, g="[2.1, 2.2, 2.4]"):
    (folder / "m.toml").write_text(MODEL.format(g=g))
    return subprocess.run(
        [PARTITA, "directions", "m.toml", *arguments],
        cwd=folder, capture_output=True, text=True, timeout=120, check=False,
    )  # fmt: skip


def test_file_and_table_agree_with_the_library(tmp_path):
    grid = ("-t", "2,10", "-b", "0,4", "--units", "molar-cgs", "--axis", "-1,0,1")
    assert partita(tmp_path, *grid, "-o", "c.nc").returncode == 0
    table = partita(tmp_path, *grid).stdout.splitlines()
    model = thermo.read_model(tmp_path / "m.toml")
    here = thermo.directional_curves(model, [2, 10], [0, 4], [-1, 0, 1], "molar-cgs")
    file = thermo.read(tmp_path / "c.nc", "curves")
    chi = here["susceptibility_xz"].values
    assert file["susceptibility_xz"].values * 1e6 / (4e0 * 3.141592653589793) == pytest.approx(chi)
    column = table[0].split(",").index("susceptibility_xz (emu mol-1) per mole of ions")
    found = [float(line.split(",")[column]) for line in table[1:]]
    assert found == pytest.approx(chi.T.ravel(), rel=1e-6)
    assert file.attrs["field_direction"] == "[-0.707107, 0, 0.707107]"


def test_powder(tmp_path):
    done = partita(tmp_path, "-t", "2", "-b", "3", "-a", "powder", "-o", "c.nc")
    assert done.returncode == 0, done.stderr
    file = thermo.read(tmp_path / "c.nc", "curves")
    assert file.attrs["powder_converged"] == "yes"
    assert "susceptibility_xx" not in file


@pytest.mark.parametrize(
    ("arguments", "code", "words"),
    [
        (("-t", "2", "--axis", "0,0,0"), 3, "length zero"),
        (("-t", "2", "--axis", "1,0"), 3, "2 of three numbers"),
        (("-t", "2", "--axis", "up"), 3, "no direction"),
        (("-t", "2", "--axis", "1,inf,0"), 3, "not finite"),
        (("-t", "0"), 3, "above zero"),
        (("-t", "2", "--memory", "1 MB"), 5, "raise the memory limit"),
        (("-t", "2", "--units", "grams"), 2, "grams"),
        (("-t", "2", "-o", "curves.txt"), 4, ".nc or .csv"),
    ],
)
def test_mistakes(tmp_path, arguments, code, words):
    done = partita(tmp_path, *arguments)
    assert done.returncode == code
    assert words in done.stderr
    assert "Traceback" not in done.stderr
    assert sorted(p.name for p in tmp_path.iterdir()) == ["m.toml"]


@pytest.mark.parametrize(
    ("g", "words"),
    [
        ("0.0", "no moment"),
        ("[0.0, 2.0, 2.0]", "principal values 0, 2, 2"),
        ("[[1.0, 1.0, 0.0], [1.0, 1.0, 0.0], [0.0, 0.0, 2.0]]", "principal values 0, 2, 2"),
        ("[[2.0, 1.0, 0.0], [-1.0, 2.0, 0.0], [0.0, 0.0, 2.0]]", "must be symmetric"),
    ],
)
def test_improper_g(tmp_path, g, words):
    done = partita(tmp_path, "-t", "2", g=g)
    assert done.returncode == 3
    assert words in done.stderr
    assert "site[0].g" in done.stderr
