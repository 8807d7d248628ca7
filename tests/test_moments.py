"""Levels with moments against the dense twin: any form, any g, any field; and their limits."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

import thermo
from tests import naive_response
from tests.strategies import ANY_FORMS, ION_FORMS, SETTINGS, Cluster, clusters, ring
from tests.strategies import symmetric_clusters as regular_clusters
from thermo.ensemble.response import response
from thermo.errors import MemoryLimitError, SpectrumError
from thermo.model.response_table import SWITCH, check_response, gap_edges
from thermo.spectrum.moment_levels import MomentSolver, moment_symmetry

TEMPERATURES = np.array([0.02, 0.3, 2.0, 40.0, 1e5])


def with_g(cluster, tensors):
    """The cluster's mapping with one g tensor per site."""
    mapping = cluster.mapping()
    for site, g in zip(mapping["site"], tensors, strict=True):
        site["g"] = np.asarray(g).tolist()
    return mapping


def tensors(count):
    """That many symmetric g tensors, positive definite or not."""
    element = st.integers(-4, 4).map(lambda k: k / 4)
    one = st.tuples(*[element] * 6).map(
        lambda v: np.array([[2 + v[0], v[3], v[4]], [v[3], 2 + v[1], v[5]], [v[4], v[5], 2 + v[2]]])
    )
    return st.lists(one, min_size=count, max_size=count)


def field_vectors():
    element = st.sampled_from([0.0, 0.4, -1.3, 0.01])
    return st.tuples(element, element, element).map(np.array)


def compare(cluster, g, field, tolerance=1e-10):
    model = thermo.read_model(with_g(cluster, g))
    table = MomentSolver(model).solve(field)
    found = response(table, TEMPERATURES)
    twin = naive_response.responses(*cluster.naive_terms(), g, TEMPERATURES, field)
    for k, t in enumerate(TEMPERATURES):
        moment, chi, heat, entropy = twin[k]
        saturation = sum(np.abs(x).sum() * s for x, s in zip(g, cluster.spins, strict=True))
        assert np.abs(found.moment[k] - moment).max() <= 1e-11 * saturation
        # The twin's own rounding in a saturated moment's variance.
        slack = tolerance * np.abs(chi).max() + 1e-13 * saturation**2 / t
        assert np.abs(found.tensor[k] - chi).max() <= slack
        assert found.caloric.specific_heat[k, 0] == pytest.approx(heat, abs=1e-10)
        assert found.caloric.entropy[k, 0] == pytest.approx(entropy, abs=1e-10)


@settings(SETTINGS, max_examples=30)
@given(st.data())
def test_any_cluster_against_the_twin(data):
    cluster = data.draw(clusters(ANY_FORMS, ION_FORMS, largest=120))
    cluster = replace(cluster, g=1.0)
    g = data.draw(tensors(len(cluster.spins)))
    compare(cluster, g, data.draw(field_vectors()))


@settings(SETTINGS, max_examples=30)
@given(st.data())
def test_symmetric_clusters_against_the_twin(data):
    cluster = data.draw(regular_clusters(ANY_FORMS, ION_FORMS, largest=120))
    kinds = data.draw(tensors(2))
    if data.draw(st.booleans()):
        g = [kinds[0]] * len(cluster.spins)
    else:
        g = [kinds[i % 2] for i in range(len(cluster.spins))]
    compare(cluster, g, data.draw(field_vectors()))


def test_six_mixed_spins():
    """Six spins from 1/2 to 5/2 with every form at once (1440 states)."""
    matrix = ((0.3, 0.1, -0.2), (0.4, -0.5, 0.2), (0.0, 0.3, 0.8))
    cluster = Cluster(
        (0.5, 1.0, 1.5, 2.0, 0.5, 0.5),
        (
            (0, 1, "J", "isotropic"), (1, 2, "J", ("antisymmetric", (0.2, -0.4, 0.7))),
            (2, 3, "K", "xy"), (3, 4, "K", "ising"), (4, 5, "J", matrix), (5, 0, "K", "isotropic"),
        ),
        {"J": 1.0, "K": -0.6},
        ((1, "J", "axial"), (2, "K", "rhombic")),
    )  # fmt: skip
    rng = np.random.default_rng(3)
    g = [2 * np.eye(3) + 0.2 * (a + a.T) for a in rng.normal(size=(6, 3, 3))]
    model = thermo.read_model(with_g(cluster, g))
    for field in (np.zeros(3), np.array([0.5, -0.3, 0.2])):
        found = response(MomentSolver(model).solve(field), np.array([0.7]))
        moment, chi, heat, entropy = naive_response.response(*cluster.naive_terms(), g, 0.7, field)
        assert found.moment[0] == pytest.approx(moment, abs=1e-10)
        assert found.tensor[0] == pytest.approx(chi, rel=1e-10, abs=1e-10)
        assert found.caloric.specific_heat[0, 0] == pytest.approx(heat, abs=1e-10)
        assert found.caloric.entropy[0, 0] == pytest.approx(entropy, abs=1e-10)


def test_spins_five_halves():
    cluster = replace(ring(3, spin=2.5, form="isotropic"), ions=((0, "J", "axial"),))
    compare(cluster, [np.diag([1.9, 2.0, 2.3])] * 3, np.array([0.3, 0.0, 0.1]))


@pytest.mark.parametrize("size", [10.0**-k for k in range(2, 16, 2)])
def test_nearly_degenerate_pairs(size):
    """χ stays continuous while an anisotropy that splits multiplets fades: every gap between
    rounding and one, on both sides of every switch."""
    base = ring(4, form="isotropic")
    bonds = (*base.bonds, (0, 1, "K", ((0.3, 0.1, 0.0), (0.1, -0.2, 0.4), (0.0, 0.4, 0.6))))
    cluster = replace(base, bonds=bonds, couplings={"J": 1.0, "K": size})
    g = [np.diag([1.0, 2.0, 3.0])] * 4
    table = MomentSolver(thermo.read_model(with_g(cluster, g))).solve(np.zeros(3))
    temperatures = np.geomspace(0.05, 1e7, 60)
    found = response(table, temperatures)
    twin = naive_response.responses(*cluster.naive_terms(), g, temperatures, np.zeros(3))
    for k, (_, chi, _, _) in enumerate(twin):
        assert np.abs(found.tensor[k] - chi).max() <= 3e-10 * np.abs(chi).max()


def test_a_fading_field_and_anisotropy():
    """χ goes over into its zero-field value: the change is of second order in the field, of
    first order in the anisotropy."""
    base = ring(4, form="isotropic")
    g = [np.diag([1.0, 2.0, 3.0]), 2 * np.eye(3)] * 2
    model = thermo.read_model(with_g(base, g))
    solver = MomentSolver(model)
    t = np.array([0.4, 3.0])
    still = response(solver.solve(np.zeros(3)), t).tensor
    size = np.abs(still).max()
    for b in (1e-2, 1e-4, 1e-6, 1e-9, 1e-12):
        weak = response(solver.solve(b * np.array([0.6, 0.0, 0.8])), t)
        assert np.abs(weak.tensor - still).max() <= 10 * b**2 * size + 3e-10 * size
        slope = weak.moment / b
        assert np.abs(slope - still @ [0.6, 0.0, 0.8]).max() <= (10 * b**2 + 1e-13 / b) * size
    for d in (1e-4, 1e-8, 1e-12):
        bonds = (*base.bonds, (0, 2, "K", "ising"))
        cluster = replace(base, bonds=bonds, couplings={"J": 1.0, "K": d})
        near = response(MomentSolver(thermo.read_model(with_g(cluster, g))).solve(np.zeros(3)), t)
        assert np.abs(near.tensor - still).max() <= (10 * d + 3e-10) * size


def test_sites_of_other_g_are_not_alike():
    cluster = ring(6)
    uniform = moment_symmetry(thermo.read_model(with_g(cluster, [2 * np.eye(3)] * 6)))
    alternating = [np.eye(3), np.diag([1.0, 1.0, 2.0])] * 3
    pairs = moment_symmetry(thermo.read_model(with_g(cluster, alternating)))
    alone = moment_symmetry(
        thermo.read_model(with_g(cluster, [k * np.eye(3) for k in range(1, 7)]))
    )
    assert uniform.order == 6
    assert pairs.order in (3, 2)
    assert alone.order == 1


def test_too_large_is_refused_before_anything_is_allocated():
    cluster = ring(16)
    model = thermo.read_model(with_g(cluster, [k * np.eye(3) for k in range(1, 17)]))
    with pytest.raises(MemoryLimitError, match="65 536 states"):
        MomentSolver(model, memory="1 GiB")


def test_a_damaged_table_fails_its_check():
    model = thermo.read_model(ring(4).mapping())
    table = MomentSolver(model).solve(np.array([0.0, 0.2, 0.1]))
    check_response(table, model)
    for damaged in (
        replace(table, moment=table.moment * (1 + 1e-6)),
        replace(table, near=table.near * (1 + 1e-6)),
        replace(table, levels=replace(table.levels, energy=table.levels.energy * (1 + 1e-6))),
        replace(table, levels=replace(table.levels, weight=table.levels.weight * (1 + 1e-6))),
    ):
        with pytest.raises(SpectrumError, match="not a result"):
            check_response(damaged, model)


def test_the_classes_of_gaps_cover_the_width():
    edges = gap_edges(7.0)
    assert edges[-1] == pytest.approx(7.0)
    # What is left out at the switch, and what is lost just below it.
    assert 1 / (12 * SWITCH**2) < 1e-10
    assert 10 * SWITCH * 2.0**-53 < 1e-10
