"""Positions, wave vectors and the structure factor, against double sums and sum rules."""

from __future__ import annotations

import numpy as np
import pytest
import xarray as xr

import thermo
from tests import naive_correlations
from thermo.errors import (
    FileFormatError,
    MemoryLimitError,
    ModelError,
    RangeError,
    UnavailableError,
)
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


T = [0.1, 0.5, 2.0, 30.0]


def twin(model, temperature, field=0.0):
    """(nT, 3, N, N) of the dense twin, from the model's own terms."""
    bonds = [(b.i, b.j, model.couplings[b.coupling] * b.matrix) for b in model.bonds]
    ions = [(x.site, model.couplings[x.coupling] * x.matrix) for x in model.ions]
    return naive_correlations.correlations(
        [s.spin for s in model.sites], bonds, ions, temperature, field
    )


MODELS = {
    "ring": lattice("chain", [6]),
    "alternating spins": lattice("chain", [6], spin=[0.5, 1.0], couplings={"strong": "J",
                                                                         "weak": "J"}),
    "ladder": lattice("ladder", [3], couplings={"leg": "J", "rung": "J"}),
    "tilted square": lattice("square", [[2, 1], [-1, 2]]),
    "honeycomb": lattice("honeycomb", [[1, 1], [-1, 2]]),
    "kagome": lattice("kagome", [2, 1]),
    "xy chain of spins 1": lattice(
        "chain", [4], spin=1, couplings={"nearest": {"coupling": "J", "form": "xy"}}
    ),
    "Dzyaloshinskii chain": lattice(
        "chain", [5],
        couplings={"nearest": ["J", {"coupling": "J", "form": "antisymmetric",
                                     "vector": [0.2, 0.4, -0.3]}]},
    ),
    "cell with places": cell(
        [{"name": "A", "spin": 0.5, "position": [0.1]},
         {"name": "B", "spin": 1.0, "position": [0.4142]}], [3],
        [{"sites": ["A", "B"], "coupling": "J"},
         {"sites": ["B", "A"], "offset": [1], "coupling": "J", "form": "ising"}],
    ),
}  # fmt: skip


@pytest.mark.parametrize("name", MODELS)
def test_structure_factor_against_the_double_sum(name):
    model = MODELS[name]
    found = thermo.correlations(model, T)
    exact = twin(model, T)
    places = naive_places(model)
    of_pair = found["class_of_pair"].values
    whole = found["correlation"].values[:, 0][:, of_pair]
    np.testing.assert_allclose(whole, exact.sum(axis=1), atol=1e-10)
    for n in range(len(T)):
        for k, q in enumerate(found["wave_vector"].values):
            expected = naive_correlations.structure_factor(places, exact[n].sum(axis=0), q)
            assert abs(expected.imag) < 1e-10
            shown = found["structure_factor"].values[n, 0, k]
            assert shown == pytest.approx(expected.real, abs=1e-10)
            assert shown > -1e-12
            for a, axis in enumerate("xyz"):
                if f"structure_factor_{axis}{axis}" not in found:
                    continue
                part = naive_correlations.structure_factor(places, exact[n, a], q)
                shown = found[f"structure_factor_{axis}{axis}"].values[n, 0, k]
                assert shown == pytest.approx(part.real, abs=1e-10)


def naive_places(model):
    """Cell and basis site of each site from its name and the model's own text."""
    places = []
    for k, site in enumerate(model.sites):
        offset = [int(x) for x in site.name.split("[")[1].rstrip("]").split(",")]
        basis = model.basis[k % len(model.basis)] if model.basis else [0.0] * len(offset)
        places.append([*np.add(offset, basis[: len(offset)]), *basis[len(offset) :]])
    return places


@pytest.mark.parametrize("name", [n for n in MODELS if n != "cell with places"])
def test_sum_rule_over_all_wave_vectors(name):
    """Σ_q S(q) = (Q/N) Σ_i S_i(S_i+1): N S(S+1) with one site in a cell."""
    model = MODELS[name]
    found = thermo.correlations(model, T)
    spins = model.spins
    expected = found.sizes["q"] / len(spins) * np.sum(spins * (spins + 1))
    total = found["structure_factor"].sum("q").values[:, 0]
    np.testing.assert_allclose(total, expected, rtol=1e-12)
    if "structure_factor_xx" in found:
        parts = [found[f"structure_factor_{a}{a}"] for a in "xyz"]
        np.testing.assert_allclose(sum(parts), found["structure_factor"], atol=1e-12)


def test_hot_spins_scatter_the_same_everywhere():
    found = thermo.correlations(MODELS["kagome"], [1e8])
    np.testing.assert_allclose(found["structure_factor"], 0.75, rtol=1e-7)


def test_a_cold_ferromagnet_has_all_at_zero():
    model = MODELS["tilted square"].with_couplings({"J": -1.0})
    found = thermo.correlations(model, [1e-3])
    at_zero = np.all(found["wave_vector"].values == 0, axis=1)
    s = found["structure_factor"].values[0, 0]
    np.testing.assert_allclose(s[at_zero], 2.5 * 3.5 / 5, rtol=1e-12)
    # Each pair has 1/4: (1/N)[N·3/4 + (Σ_{i≠j} cos)/4] with Σ_{i≠j} cos = −N.
    np.testing.assert_allclose(s[~at_zero], 0.5, rtol=1e-12)


def test_in_a_field_in_kelvin_and_tesla():
    model = thermo.read_model(
        {
            "format": 1, "energy_unit": "K", "bond_term": "-2J S.S", "couplings": {"J": -3.0},
            "lattice": {"name": "chain", "size": [5], "spin": 0.5, "g": 2.1,
                        "couplings": {"nearest": "J"}},
        }
    )  # fmt: skip
    b = [-6.0, 0.0, 4.0]
    found = thermo.correlations(model, [1.5, 10.0], b, components=True)
    for n, field in enumerate(b):
        # mu_B/k_B = 0.6717138147 K/T, CODATA 2022.
        exact = twin(model, [1.5, 10.0], 2.1 * 0.6717138147 * field)
        of_pair = found["class_of_pair"].values
        for a, axis in enumerate("xyz"):
            shown = found[f"correlation_{axis}{axis}"].values[:, n][:, of_pair]
            np.testing.assert_allclose(shown, exact[:, a], atol=1e-9)
    whole = thermo.correlations(model, [1.5, 10.0], b)
    assert "correlation_zz" not in whole
    assert whole.attrs["field_direction"] == "any"
    np.testing.assert_allclose(whole["correlation"], found["correlation"], atol=1e-12)


def test_fields_that_the_levels_cannot_take():
    with pytest.raises(UnavailableError, match="does not conserve M"):
        thermo.correlations(MODELS["Dzyaloshinskii chain"], [1.0], [1.0])
    model = lattice("chain", [4], g={"A": [2.0, 2.0, 2.2]})
    with pytest.raises(UnavailableError, match="g differs"):
        thermo.correlations(model, [1.0], [1.0])
    assert "correlation" in thermo.correlations(model, [1.0])


def test_wrong_arguments_in_one_sentence():
    model = MODELS["ring"]
    with pytest.raises(RangeError, match=r"temperature\[0\]"):
        thermo.correlations(model, [0.0, 1.0])
    with pytest.raises(RangeError, match="field does not increase"):
        thermo.correlations(model, 1.0, [1.0, 0.0])
    with pytest.raises(ModelError, match="takes a model"):
        thermo.correlations("chain.toml", 1.0)
    with pytest.raises(MemoryLimitError, match="give fewer"):
        thermo.correlations(model, np.linspace(1, 2, 1000), np.arange(10000), memory="0.5 GiB")


def test_a_single_spin_and_an_open_chain():
    found = thermo.correlations(
        thermo.read_model(
            {"format": 1, "energy_unit": "1", "bond_term": "+J S.S", "couplings": {},
             "site": [{"spin": 1.5}]}
        ), T,
    )  # fmt: skip
    np.testing.assert_allclose(found["correlation"], 3.75)
    assert "structure_factor" not in found
    assert "without a cell" in found.attrs["structure_factor_unavailable"]
    found = thermo.correlations(lattice("chain", [4], boundary="open"), T)
    assert "open ends" in found.attrs["structure_factor_unavailable"]
    assert list(found["pair_name"].values[-2:]) == ["A[0] - A[3]", "A[1] - A[2]"]


def test_the_file_comes_back_as_it_was(tmp_path):
    for name in ("xy chain of spins 1", "ladder"):
        found = thermo.correlations(MODELS[name], T)
        thermo.write(found, tmp_path / "c.nc")
        back = thermo.read(tmp_path / "c.nc", "correlations")
        xr.testing.assert_identical(back, found)
        assert back.attrs["content"] == "correlations"
        for variable in back.data_vars.values():
            assert variable.attrs["long_name"]
    with pytest.raises(FileFormatError, match="it holds correlations; give a levels file"):
        thermo.read(tmp_path / "c.nc", "levels")
