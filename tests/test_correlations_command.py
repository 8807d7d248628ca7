"""The command ``partita correlations`` as a user meets it."""

from __future__ import annotations

import csv
import io
from pathlib import Path

import numpy as np
import pytest

import thermo
from tests.conftest import Command

RING = """\
format = 1
title = "ring of six"
energy_unit = "K"
bond_term = "+J S.S"
[couplings]
J = 10.0
[lattice]
name = "chain"
size = [6]
spin = 0.5
couplings = { nearest = "J" }
"""
PAIR = """\
format = 1
energy_unit = "K"
bond_term = "+J S.S"
[couplings]
J = 10.0
D = 2.0
[[site]]
name = "a"
spin = 1
[[site]]
name = "b"
spin = 1
[[bond]]
sites = ["a", "b"]
coupling = "J"
[[ion]]
sites = ["a", "b"]
coupling = "D"
form = "rhombic"
"""


@pytest.fixture
def ring(tmp_path: Path) -> Path:
    path = tmp_path / "ring.toml"
    path.write_text(RING)
    return path


def test_a_table_on_standard_output(partita: Command, ring: Path) -> None:
    done = partita("correlations", str(ring), "-t", "5,50")
    assert done.returncode == 0
    assert done.stderr == ""
    header, *rows = csv.reader(io.StringIO(done.stdout))
    assert header == ["pair", "pairs alike", "temperature (K)", "field (T)", "correlation"]
    found = thermo.correlations(thermo.read_model(ring), [5.0, 50.0])
    np.testing.assert_allclose(
        [float(r[4]) for r in rows], found["correlation"].values[:, 0].T.ravel(), rtol=1e-6
    )


def test_a_file_then_its_tables_and_picture(partita: Command, ring: Path) -> None:
    folder = ring.parent
    done = partita("correlations", str(ring), "-t", "log 1:100:9", "-b", "0,5", "-o", "c.nc",
                   "--components", cwd=folder)  # fmt: skip
    assert done.returncode == 0, done.stderr
    stored = thermo.read(folder / "c.nc", "correlations")
    assert {"correlation_zz", "structure_factor_xx"} <= set(stored.data_vars)
    assert partita("export", "c.nc", "-o", "pairs.csv", cwd=folder).returncode == 0
    done = partita("export", "c.nc", "--what", "structure", cwd=folder)
    direct = partita("correlations", str(ring), "-t", "log 1:100:9", "-b", "0,5", "--what",
                     "structure", "--components", cwd=folder)  # fmt: skip
    assert done.stdout == direct.stdout
    assert done.stdout.startswith("temperature (K),field (T),h,structure_factor,structure_factor_")
    assert partita("plot", "c.nc", cwd=folder).returncode == 0
    assert (folder / "c.png").stat().st_size > 10_000
    assert partita("correlations", str(ring), "-t", "5", "-o", "p.csv", cwd=folder).returncode == 0
    assert (folder / "p.csv").read_text().startswith("pair,")


def test_a_molecule_is_told_that_it_has_no_wave_vectors(partita: Command, tmp_path: Path) -> None:
    (tmp_path / "pair.toml").write_text(PAIR)
    done = partita("correlations", "pair.toml", "-t", "5", cwd=tmp_path)
    assert done.returncode == 0
    assert done.stderr.count("\n") == 1
    assert "note: no structure factor: the model lists its sites without a cell" in done.stderr
    assert done.stdout.splitlines()[0].endswith(
        "correlation,correlation_xx,correlation_yy,correlation_zz"
    )


@pytest.mark.parametrize(
    ("line", "code", "sentence"),
    [
        ("ring.toml", 2, "temperature"),
        ("ring.toml -t 0:5:2", 3, "temperatures must be above zero"),
        ("none.toml -t 5", 4, "none.toml does not exist"),
        ("ring.toml -t 5 -o c.png", 4, "must end in .nc or .csv"),
        ("ring.toml -t 5 -o c.nc --what pairs", 3, "an .nc file holds all"),
        ("ring.toml -t 5 --what S", 3, "choose from pairs, structure"),
        ("pair.toml -t 5 -b 1", 3, "correlations in a field are not available"),
        ("pair.toml -t 5 --what structure", 3, "no structure factor"),
        ("ring.toml -t 5 --memory 1MiB", 5, "limit"),
    ],
)
def test_faults_are_one_sentence(
    partita: Command, tmp_path: Path, line: str, code: int, sentence: str
) -> None:
    (tmp_path / "ring.toml").write_text(RING)
    (tmp_path / "pair.toml").write_text(PAIR)
    done = partita("correlations", *line.split(), cwd=tmp_path)
    assert done.returncode == code
    assert sentence in done.stderr
    assert len(done.stderr.strip().splitlines()) == 1
    assert done.stdout == ""
    assert sorted(p.name for p in tmp_path.iterdir()) == ["pair.toml", "ring.toml"]
