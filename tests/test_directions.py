"""Curves along an axis and of a powder: against the twin, each other, and mistakes."""

from __future__ import annotations

import io
from dataclasses import replace

import numpy as np
import pytest
from scipy.integrate import lebedev_rule

import thermo
from tests import naive_response
from tests.strategies import Cluster, ring
from tests.test_moments import with_g
from thermo import directions
from thermo.errors import RangeError, UnitsError
from thermo.spectrum.moment_levels import MomentSolver

PAIRS = ("xx", "yy", "zz", "xy", "xz", "yz")
T = np.array([0.3, 1.0, 6.0])

TWO = Cluster(
    (1.0, 0.5),
    ((0, 1, "J", ((0.8, 0.3, 0.0), (-0.3, 1.0, 0.2), (0.0, -0.2, 1.3))),),
    {"J": 1.0, "D": -0.7},
    ((0, "D", "axial"),),
)
TILTED = [
    np.array([[2.0, 0.1, 0.0], [0.1, 2.2, 0.3], [0.0, 0.3, 1.8]]),
    np.array([[1.9, 0.0, -0.2], [0.0, 2.0, 0.0], [-0.2, 0.0, 2.4]]),
]


def read(cluster, g):
    return thermo.read_model(with_g(cluster, g))


def test_along_an_axis_against_the_twin():
    fields, axis = [0.0, 0.4, 1.5], np.array([0.6, 0.0, -0.8])
    found = thermo.directional_curves(read(TWO, TILTED), T, fields, 2.5 * axis, "reduced")
    assert found.attrs["field_direction"] == "[0.6, 0, -0.8]"
    for k, b in enumerate(fields):
        twin = naive_response.responses(*TWO.naive_terms(), TILTED, T, b * axis)
        for i, (moment, chi, heat, entropy) in enumerate(twin):
            point = {name: found[name].values[i, k] for name in found.data_vars}
            assert 2 * point["magnetization"] == pytest.approx(moment @ axis, abs=1e-12)
            assert 2 * point["susceptibility"] == pytest.approx(axis @ chi @ axis, rel=1e-10)
            for a, letter in enumerate("xyz"):
                assert 2 * point[f"magnetization_{letter}"] == pytest.approx(moment[a], abs=1e-12)
            for letters in PAIRS:
                a, c = ("xyz".index(x) for x in letters)
                assert 2 * point[f"susceptibility_{letters}"] == pytest.approx(chi[a, c], abs=1e-9)
            assert 2 * point["specific_heat"] == pytest.approx(heat, abs=1e-11)
            assert 2 * point["entropy"] == pytest.approx(entropy, abs=1e-11)


def test_powder_against_a_fine_rule():
    """A plain sum over Lebedev's rule of degree 131 with the twin in every direction."""
    fields = [0.0, 0.7]
    found = thermo.directional_curves(read(TWO, TILTED), T, fields, "powder", "reduced")
    assert found.attrs["powder_converged"] == "yes"
    nodes, weights = lebedev_rule(131)
    weights = weights / weights.sum()
    total = np.zeros((len(T), 4))
    m, still = naive_response.moments(TWO.spins, TILTED), TWO.hamiltonian()
    for n, w in zip(nodes.T, weights, strict=True):
        if (n[2], n[1], n[0]) < (0.0, 0.0, 0.0):
            continue  # n and −n are alike
        in_field = still - 0.7 * sum(x * a for x, a in zip(n, m, strict=True))
        twin = naive_response.canonical(in_field, m, T)
        for i, (moment, chi, heat, entropy) in enumerate(twin):
            total[i] += 2 * w * np.array([moment @ n, n @ chi @ n, heat, entropy])
    names = ("magnetization", "susceptibility", "specific_heat", "entropy")
    for k, name in enumerate(names):
        wrong = np.abs(2 * found[name].values[:, 1] - total[:, k]).max()
        assert wrong <= 1e-6 * np.abs(total[:, k]).max()
    for i, (_, chi, _, _) in enumerate(naive_response.canonical(still, m, T)):
        mean = np.trace(chi) / 3
        assert 2 * found["susceptibility"].values[i, 0] == pytest.approx(mean, rel=1e-12)


@pytest.mark.parametrize(
    ("cluster", "g"),
    [
        (replace(ring(3, spin=1.0), ions=((0, "J", "axial"),)), [np.diag([2.0, 2.0, 2.3])] * 3),
        (replace(ring(3, spin=1.0), ions=((0, "J", "rhombic"),)), [np.diag([1.9, 2.0, 2.3])] * 3),
        (ring(3), [1.0 * np.eye(3), 2.0 * np.eye(3), 2.0 * np.eye(3)]),
        (TWO, TILTED),
    ],
    ids=["axial", "rhombic", "isotropic", "none"],
)
def test_directions_said_to_be_alike_are(cluster, g):
    model = read(cluster, g)
    alike, solver = directions._Directions(model), MomentSolver(model)
    rng = np.random.default_rng(0)
    for n in rng.normal(size=(6, 3)):
        n = n / np.linalg.norm(n)
        other = np.array(alike.representative(n))
        assert np.linalg.norm(other) == pytest.approx(1.0)
        energies = [solver.solve(0.8 * x, x[None]).levels.energy for x in (n, other)]
        assert energies[0] == pytest.approx(energies[1], abs=1e-10)


def test_the_number_of_directions_falls_with_symmetry():
    nodes = lebedev_rule(31)[0].T
    counts = []
    for g in (np.eye(3), np.diag([1, 1, 2.0]), np.diag([1, 3, 2.0]), TILTED[0]):
        alike = directions._Directions(read(ring(3), [g] * 3))
        counts.append(len({alike.representative(n) for n in nodes}))
    assert counts[0] == 1
    assert counts[0] < counts[1] < counts[2] < counts[3] == len(nodes) // 2


def test_isotropic_models_take_the_short_way_and_only_they(monkeypatch):
    """The short way agrees with the general one, and is not taken for unequal or tensor g."""
    cluster, fields = ring(5), [0.0, 0.6]
    axis = [1.0, 2.0, -2.0]
    model = read(cluster, [2 * np.eye(3)] * 5)
    short = thermo.directional_curves(model, T, fields, axis, "reduced")
    used = []
    monkeypatch.setattr(directions, "_isotropic_points", lambda *a: used.append(a))
    for g in ([np.eye(3)] + [2 * np.eye(3)] * 4, [np.diag([2.0, 2.0, 2.1])] * 5):
        thermo.directional_curves(read(cluster, g), T, fields, axis, "reduced")
    assert not used
    monkeypatch.setattr(directions, "isotropic", lambda model: False)
    long = thermo.directional_curves(model, T, fields, axis, "reduced")
    assert list(short.data_vars) == list(long.data_vars)
    for name in short.data_vars:
        assert short[name].values == pytest.approx(long[name].values, rel=1e-9, abs=1e-12)
    powder = {"temperature": T, "field": fields, "axis": "powder", "units": "reduced"}
    slow = thermo.directional_curves(model, **powder)
    monkeypatch.undo()
    quick = thermo.directional_curves(model, **powder)
    for name in quick.data_vars:
        assert quick[name].values == pytest.approx(slow[name].values, rel=1e-9, abs=1e-12)


def test_along_z_agrees_with_the_curves_of_levels():
    """Where M is conserved the levels' own curves along z are an independent way."""
    cluster = replace(ring(4, form="xy"), g=2.1, energy_unit="K")
    model = thermo.read_model(cluster.mapping())
    levels = thermo.solve(model, method="full")
    for units in ("molar-si", "molar-cgs", "reduced"):
        for per in ("ion", "formula"):
            here = thermo.directional_curves(model, T, [-1.0, 0.0, 2.0], "z", units, per=per)
            there = thermo.curves(levels, T, [-1.0, 0.0, 2.0], units, per=per)
            for name in there.data_vars:
                assert here[name].attrs["units"] == there[name].attrs["units"]
                size = np.abs(there[name].values).max()
                assert here[name].values == pytest.approx(there[name].values, abs=1e-10 * size)


def test_unequal_g_of_isotropic_exchange_is_not_m():
    """A dimer with g = 2 and 3: Δg mixes singlet and triplet, so χ stays finite at T → 0:
    χ = Δg²/(2J), with E_t − E_s = J and ⟨s|m|t₀⟩ = Δg/2."""
    model = read(Cluster((0.5, 0.5), ((0, 1, "J", "isotropic"),), {"J": 1.0}), [
        2 * np.eye(3), 3 * np.eye(3)
    ])  # fmt: skip
    found = thermo.directional_curves(model, [0.01], 0.0, "powder", "reduced")
    assert 2 * found["susceptibility"].values[0, 0] == pytest.approx(0.5, rel=1e-10)


def test_files_and_tables(tmp_path):
    model = thermo.read_model(replace(ring(3, form="ising"), energy_unit="meV").mapping())
    found = thermo.directional_curves(model, [5.0, 20.0], [0.0, 5.0], [1, 1, 0], "molar-cgs")
    thermo.write(found, tmp_path / "curves.nc")
    again = thermo.read(tmp_path / "curves.nc", "curves")
    assert again["susceptibility_xy"].attrs["units"] == "m3 mol-1"
    assert again.attrs["field_direction"] == "[0.707107, 0.707107, 0]"
    table = io.StringIO()
    thermo.export_csv(again, table, units_system="molar-cgs")
    head = table.getvalue().splitlines()[0]
    assert "susceptibility_xy (emu mol-1) per mole of ions" in head
    assert "magnetization_z (emu mol-1) per mole of ions" in head
    reduced = thermo.directional_curves(model, [5.0, 20.0], 0.0, "x", "reduced")
    table = io.StringIO()
    thermo.export_csv(reduced, table)
    assert "susceptibility_xx (muB2 meV-1) per site" in table.getvalue()
    thermo.plot(found, tmp_path / "a.png", what="susceptibility_xx,magnetization_x")


@pytest.mark.parametrize(
    ("changed", "kind", "words"),
    [
        ({"axis": [0, 0, 0]}, RangeError, "length zero"),
        ({"axis": [1, 2]}, RangeError, "three numbers"),
        ({"axis": [1, 2, float("nan")]}, RangeError, "not finite"),
        ({"axis": "diagonal"}, RangeError, "'diagonal' is unknown"),
        ({"axis": ["a", "b", "c"]}, RangeError, "not a number"),
        ({"temperature": [0.0, 1.0]}, RangeError, r"temperature\[0\]"),
        ({"field": [1.0, 0.0]}, RangeError, "does not increase"),
        ({"units": "molar-si"}, UnitsError, "dimensionless"),
        ({"per": "kg"}, RangeError, "per='kg'"),
        ({"tolerance": 0.0}, RangeError, "tolerance"),
    ],
)
def test_one_sentence_for_a_mistake(changed, kind, words):
    given = {"temperature": T, "field": 0.0, "axis": "z", "units": "reduced"} | changed
    with pytest.raises(kind, match=words) as fault:
        thermo.directional_curves(read(TWO, TILTED), **given)
    assert "\n" not in str(fault.value)


def test_a_very_long_or_short_axis():
    for size in (1e300, 1e-300):
        assert directions.read_axis([size, 0, size]) == pytest.approx([0.5**0.5, 0, 0.5**0.5])


def test_components_that_symmetry_forbids_are_zero():
    model = read(ring(4, form="ising"), [np.diag([2.0, 2.0, 2.4])] * 4)
    found = thermo.directional_curves(model, T, [0.0, 0.5], "x", "reduced")
    for name in ("susceptibility_xy", "susceptibility_xz", "magnetization_y", "magnetization_z"):
        assert not np.any(found[name].values)
    assert np.all(found["magnetization_x"].values[:, 1] > 0)


def test_improper_arguments_leave_no_other_way_in():
    """A levels dataset, or nothing, is not a model."""
    with pytest.raises(thermo.errors.ModelError, match="directional_curves takes a model"):
        thermo.directional_curves(None, T)
