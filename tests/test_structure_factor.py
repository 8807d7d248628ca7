"""Positions, wave vectors and the structure factor, against double sums and sum rules."""

from __future__ import annotations

import numpy as np
import pytest

import thermo
from thermo.errors import ModelError
from thermo.model.lattices import LATTICES
from thermo.model.positions import site_positions, wave_vectors, why_no_wave_vectors


def lattice(name, size, role="nearest", spin=0.5, **more):
    couplings = more.pop("couplings", {role: "J"})
    return thermo.read_model(
        {
            "format": 1, "energy_unit": "1", "bond_term": "+J S.S", "couplings": {"J": 1.0},
            "lattice": {"name": name, "size": size, "spin": spin, "couplings": couplings, **more},
        }
    )  # fmt: skip


def cell(sites, repeat, bonds=(), **more):
    return thermo.read_model(
        {
            "format": 1, "energy_unit": "1", "bond_term": "+J S.S", "couplings": {"J": 1.0},
            "cell": {"repeat": repeat, "site": sites, "bond": list(bonds), **more},
        }
    )  # fmt: skip


PERIODIC = [
    ("chain", [6], "nearest", 6),
    ("chain", [8], "strong", 8),
    ("ladder", [4], "leg", 8),
    ("square", [[2, 2], [-2, 2]], "nearest", 8),
    ("square", [[3, 1], [1, -3]], "nearest", 10),
    ("triangular", [[1, 1], [-1, 2]], "nearest", 3),
    ("honeycomb", [2, 2], "nearest", 36),
    ("kagome", [[2, 0], [1, 2]], "nearest", 16),
    ("cubic", [2, 2, 1], "nearest", 4),
]


@pytest.mark.parametrize(("name", "size", "role", "count"), PERIODIC)
def test_wave_vectors_fit_the_cluster_and_tell_its_sites_apart(name, size, role, count):
    model = lattice(name, size, role)
    places, q = site_positions(model), wave_vectors(model)
    assert len(places) == len(model.sites)
    assert len(q) == count
    d = len(model.superlattice)
    windings = q[:, :d] @ np.array(model.superlattice).T
    np.testing.assert_allclose(windings, np.round(windings), atol=1e-12)
    phases = np.exp(2j * np.pi * q @ places.T)
    np.testing.assert_allclose(phases.conj().T @ phases, count * np.eye(len(places)), atol=1e-10)


@pytest.mark.parametrize("entry", LATTICES, ids=lambda e: f"{e.name} {'-'.join(e.roles)}")
def test_positions_are_those_of_the_lattice(entry):
    """Positions put back into lengths are the entry's own, cell by cell."""
    size = [4] if entry.dimension == 1 else [2] * entry.dimension
    model = lattice(entry.name, size, couplings=dict.fromkeys(entry.roles, "J"))
    vectors = np.eye(len(entry.positions[0]))
    vectors[: entry.dimension] = entry.vectors
    back = site_positions(model) @ vectors
    n = len(entry.basis)
    np.testing.assert_allclose(back[:n] - back[0], np.subtract(entry.positions, entry.positions[0]))
    np.testing.assert_allclose(back[n:] - back[:-n], np.repeat(back[n::n] - back[:-n:n], n, axis=0))


def test_positions_of_a_cell_in_a_file():
    model = cell(
        [{"name": "A", "spin": 0.5, "position": [0.0, 0.1]},
         {"name": "B", "spin": 1.0, "position": [0.25, 0.6]}],
        [2, 2],
    )  # fmt: skip
    np.testing.assert_allclose(
        site_positions(model)[:4], [[0, 0.1], [0.25, 0.6], [0, 1.1], [0.25, 1.6]]
    )
    # Four cells, a quarter along the first axis, a half along the second.
    assert len(wave_vectors(model)) == 4 * 4 * 2
    # No simple fraction: one zone.
    model = cell([{"spin": 0.5, "position": [0.0]}, {"spin": 0.5, "position": [0.31830988]}], [4])
    assert len(wave_vectors(model)) == 4


def test_positions_that_cannot_be():
    half = {"spin": 0.5, "position": [0.5]}
    with pytest.raises(ModelError, match=r"cell\.site\[1\]\.position: '1' is on the place of '0'"):
        cell([half, {"spin": 0.5, "position": [1.5]}], [3])
    with pytest.raises(ModelError, match="1 of 2 sites have a position"):
        cell([half, {"spin": 0.5}], [3])
    with pytest.raises(ModelError, match="has 1 entries; give 2"):
        cell([half], [3, 3])
    with pytest.raises(ModelError, match="not a list"):
        cell([{"spin": 0.5, "position": 0.5}], [3])
    with pytest.raises(ModelError, match=r"cell\.site\[0\]\.position\[0\]"):
        cell([{"spin": 0.5, "position": [float("nan")]}], [3])
    with pytest.raises(ModelError, match="position"):  # without a cell there is nothing to fill
        thermo.read_model(
            {"format": 1, "energy_unit": "1", "bond_term": "+J S.S", "couplings": {},
             "site": [half]}
        )  # fmt: skip


def test_models_without_wave_vectors_say_why():
    assert why_no_wave_vectors(lattice("chain", [6])) is None
    assert "open ends" in str(why_no_wave_vectors(lattice("chain", [6], boundary="open")))
    assert "position" in str(why_no_wave_vectors(cell([{"spin": 0.5}, {"spin": 0.5}], [3])))
    assert why_no_wave_vectors(cell([{"spin": 0.5}], [3])) is None
    single = {"format": 1, "energy_unit": "1", "bond_term": "+J S.S", "couplings": {},
              "site": [{"spin": 0.5}]}  # fmt: skip
    assert "without a cell" in str(why_no_wave_vectors(thermo.read_model(single)))
