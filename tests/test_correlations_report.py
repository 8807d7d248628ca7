"""Tables and pictures of correlations."""

from __future__ import annotations

import csv
import io

import numpy as np
import pytest

import thermo
from thermo.errors import RangeError, UnavailableError
from thermo.report import correlation_picture


def _model(size=6, form="isotropic", **more):
    return thermo.read_model(
        {
            "format": 1, "energy_unit": "K", "bond_term": "+J S.S", "couplings": {"J": 2.0},
            "lattice": {"name": "square" if isinstance(size, list) else "chain",
                        "size": size if isinstance(size, list) else [size], "spin": 0.5,
                        "couplings": {"nearest": {"coupling": "J", "form": form}}, **more},
        }
    )  # fmt: skip


T = [0.5, 1.0, 4.0]


@pytest.fixture(scope="module")
def ring():
    return thermo.correlations(_model(), T, [0.0, 2.0])


def _rows(found, what=None):
    stream = io.StringIO()
    thermo.export_csv(found, stream, what=what)
    return list(csv.reader(io.StringIO(stream.getvalue())))


def test_the_table_of_pairs(ring):
    header, *rows = _rows(ring)
    assert header == ["pair", "pairs alike", "temperature (K)", "field (T)", "correlation"]
    assert len(rows) == 4 * 3 * 2
    assert rows[0] == ["A[0]", "6", "0.5", "0", "0.75"]
    row = next(r for r in rows if r[0] == "A[0] - A[1]" and r[2:4] == ["4", "2"])
    assert float(row[4]) == pytest.approx(ring["correlation"].values[2, 1, 1], rel=1e-6)
    assert _rows(ring, "pairs") == [header, *rows]


def test_the_table_of_the_structure_factor(ring):
    header, *rows = _rows(ring, "structure")
    assert header == ["temperature (K)", "field (T)", "h", "structure_factor"]
    assert len(rows) == 6 * 3 * 2
    assert [r[2] for r in rows[:6]] == ["0", "0.1666666667", "0.3333333333", "0.5",
                                        "0.6666666667", "0.8333333333"]  # fmt: skip
    total = sum(float(r[3]) for r in rows[:6])
    assert total == pytest.approx(6 * 0.75, rel=1e-6)


def test_the_components_have_columns():
    found = thermo.correlations(_model([2, 2], form="xy"), T)
    assert _rows(found)[0][4:] == [
        "correlation", "correlation_xx", "correlation_yy", "correlation_zz"
    ]  # fmt: skip
    assert _rows(found, "structure")[0][2:4] == ["h", "k"]


def test_tables_and_pictures_that_there_are_not(tmp_path):
    found = thermo.correlations(_model(boundary="open"), T)
    with pytest.raises(UnavailableError, match="no structure factor: the cluster has open ends"):
        _rows(found, "structure")
    with pytest.raises(UnavailableError, match="no structure factor"):
        thermo.plot(found, tmp_path / "a.png", what="structure")
    with pytest.raises(UnavailableError, match="no table 'levels'; choose from pairs, structure"):
        _rows(found, "levels")
    with pytest.raises(UnavailableError, match="choose from pairs, structure"):
        thermo.plot(found, tmp_path / "a.png", what="specific_heat")
    with pytest.raises(RangeError, match="scale"):
        thermo.plot(found, tmp_path / "a.png", scale="cubic")
    assert not list(tmp_path.iterdir())


def test_pictures_of_all_shapes(ring, tmp_path):
    square = thermo.correlations(_model([2, 2], form="xy"), T)
    for n, (found, what, scale) in enumerate(
        ((ring, None, None), (ring, "structure", "log"), (square, None, "linear"),
         (thermo.correlations(_model(3, boundary="open"), 1.0), None, None),
         (thermo.correlations(_model(1), 1.0), None, None))
    ):  # fmt: skip
        thermo.plot(found, tmp_path / f"{n}.png", what=what, scale=scale)
        assert (tmp_path / f"{n}.png").stat().st_size > 5000


def test_wave_vectors_with_the_same_values_are_drawn_once():
    found = thermo.correlations(_model([4, 2]), T)
    q, s = found["wave_vector"].values, found["structure_factor"].values[:, 0]
    kept, left_out = correlation_picture._distinct(q, s)
    assert left_out == 0
    assert len(kept) < len(q)
    columns = {tuple(np.round(column, 8)) for column in s.T}
    assert len(columns) == len(kept)
