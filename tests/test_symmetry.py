"""Symmetry: groups against igraph's automorphism count, sectors against brute force."""

from __future__ import annotations

import math

import igraph
import numpy as np
import pytest

from thermo.model import SpinModel, read_model
from thermo.symmetry.abelian import choose_abelian
from thermo.symmetry.automorphisms import automorphism_group, colour_matrix
from thermo.symmetry.interaction import conserved, interaction
from thermo.symmetry.sectors import plan_symmetry


def lattice(name: str, size: list, role: str = "nearest", **more) -> SpinModel:
    return read_model(
        {
            "format": 1,
            "energy_unit": "1",
            "bond_term": "+J S.S",
            "couplings": {"J": 1.0},
            "lattice": {"name": name, "size": size, "spin": 0.5, "couplings": {role: "J"}, **more},
        }
    )


def cluster(spins: list[float], bonds: list[dict], couplings: dict, ions=()) -> SpinModel:
    return read_model(
        {
            "format": 1,
            "energy_unit": "1",
            "bond_term": "+J S.S",
            "couplings": couplings,
            "site": [{"spin": s} for s in spins],
            "bond": bonds,
            **({"ion": list(ions)} if ions else {}),
        }
    )


def graph_colours(graph: igraph.Graph, colours: list[int]) -> np.ndarray:
    matrix = np.array(graph.get_adjacency().data, dtype=np.int64)
    np.fill_diagonal(matrix, 10 + np.array(colours))
    return matrix


GRAPHS = {
    "petersen": igraph.Graph.Famous("Petersen"),
    "cubical": igraph.Graph.Famous("Cubical"),
    "dodecahedral": igraph.Graph.Famous("Dodecahedral"),
    "icosahedral": igraph.Graph.Famous("Icosahedral"),
    "frucht (no symmetry)": igraph.Graph.Famous("Frucht"),
    "ring": igraph.Graph.Ring(14),
    "path": igraph.Graph.Ring(9, circular=False),
    "complete": igraph.Graph.Full(11),
    "two rings": igraph.Graph.Ring(5) + igraph.Graph.Ring(5),
    "no edges": igraph.Graph(7),
    "tree": igraph.Graph.Tree(15, 2),
}


@pytest.mark.parametrize("name", GRAPHS)
@pytest.mark.parametrize("coloured", [False, True])
def test_group_order_agrees_with_igraph(name: str, coloured: bool) -> None:
    graph = GRAPHS[name]
    colours = [(i % 3 == 0) * 1 for i in range(graph.vcount())] if coloured else []
    colours = colours or [0] * graph.vcount()
    group = automorphism_group(graph_colours(graph, colours))
    assert group.order == graph.count_automorphisms(color=colours)


@pytest.mark.parametrize("seed", range(12))
def test_random_graphs_agree_with_igraph(seed: int) -> None:
    rng = np.random.default_rng(seed)
    pairs = np.argwhere(np.triu(rng.random((9, 9)) < 0.3, 1))
    graph = igraph.Graph(9, pairs.tolist())
    colours = [0] * 9
    assert automorphism_group(graph_colours(graph, colours)).order == graph.count_automorphisms(
        color=colours
    )


def test_elements_and_samples_are_automorphisms() -> None:
    colours = graph_colours(GRAPHS["cubical"], [0] * 8)
    group = automorphism_group(colours)
    elements = group.elements()
    assert len(np.unique(elements, axis=0)) == group.order == 48
    for p in [*elements, *group.sample(20)]:
        assert np.array_equal(colours[np.ix_(p, p)], colours)


def test_antisymmetric_exchange_turns_a_ring_one_way() -> None:
    # A uniform D·(S_i×S_j) around a ring forbids its reflections: 6 rotations are left.
    bonds = [
        {"sites": [i, (i + 1) % 6], "coupling": "D", "form": "antisymmetric", "vector": [0, 0, 1]}
        for i in range(6)
    ]
    model = cluster([0.5] * 6, bonds, {"D": 1.0})
    assert automorphism_group(colour_matrix(interaction(model))).order == 6


def test_colours_forgive_rounding_only() -> None:
    def order(last: float) -> int:
        bonds = [{"sites": [i, (i + 1) % 4], "coupling": f"J{i}"} for i in range(4)]
        model = cluster([0.5] * 4, bonds, {"J0": 0.3, "J1": 0.1 + 0.2, "J2": 0.3, "J3": last})
        return automorphism_group(colour_matrix(interaction(model))).order

    assert order(0.3) == 8
    assert order(0.3000001) == 2


def test_generic_symmetry_keeps_couplings_apart() -> None:
    model = lattice("ladder", [4], "leg", boundary="periodic")
    both = read_model(
        {
            "format": 1,
            "energy_unit": "1",
            "bond_term": "+J S.S",
            "couplings": {"Ja": 1.0, "Jb": 1.0},
            "lattice": {
                "name": "ladder",
                "size": [4],
                "spin": 0.5,
                "couplings": {"leg": "Ja", "rung": "Jb"},
            },
        }
    )
    assert model.n_states == both.n_states
    assert plan_symmetry(both).group_order == 48  # equal couplings: a cube
    assert plan_symmetry(both, generic=True).group_order == 16


@pytest.mark.parametrize(
    ("form", "expected"),
    [
        ({}, ("total_spin", True, True)),
        ({"form": "xy"}, ("magnetic_number", True, True)),
        ({"form": "ising"}, ("magnetic_number", True, True)),
        ({"form": "antisymmetric", "vector": [0, 0, 1]}, ("magnetic_number", False, False)),
        ({"form": "antisymmetric", "vector": [0, 1, 0]}, ("none", False, True)),
        ({"form": "antisymmetric", "vector": [1, 0, 0]}, ("none", True, False)),
        ({"matrix": [[1, 0, 0], [0, 2, 0], [0, 0, 3]]}, ("parity", True, True)),
        ({"matrix": [[1, 2, 0], [2, 1, 0], [0, 0, 3]]}, ("parity", False, False)),
        ({"matrix": [[1, 0, 1], [0, 1, 0], [1, 0, 1]]}, ("none", False, True)),
    ],
)
def test_what_each_form_conserves(form: dict, expected: tuple) -> None:
    bond = {"sites": [0, 1], "coupling": "J", **form}
    kept = conserved(interaction(cluster([0.5, 1.0], [bond], {"J": 1.0})))
    assert (kept.name, kept.reversal, kept.real) == expected


def test_two_forms_may_add_up_to_an_isotropic_one() -> None:
    bonds = [{"sites": [0, 1], "coupling": "J", "form": f} for f in ("xy", "ising")]
    assert conserved(interaction(cluster([0.5, 0.5], bonds, {"J": 0.7}))).total_spin


@pytest.mark.parametrize(
    ("name", "size", "translations"),
    [
        ("chain", [12], 12),
        ("square", [4, 4], 16),
        ("square", [[3, 1], [-1, 3]], 10),
        ("triangular", [3, 3], 9),
        ("honeycomb", [3, 3], 9),
        ("kagome", [3, 2], 6),
        ("cubic", [3, 3, 2], 18),
    ],
)
def test_lattice_groups(name: str, size: list, translations: int) -> None:
    model = lattice(name, size)
    colours = colour_matrix(interaction(model))
    # The edges' colours differ where a short period joins two sites twice: colour by line graph.
    strength = {(i, j): abs(a[0, 0, 0]) for (i, j), a in interaction(model).pair.items()}
    kinds = sorted(set(strength.values()))
    edges, labels = [], [0] * len(model.sites)
    for (i, j), value in strength.items():
        labels.append(1 + kinds.index(value))
        edges += [(i, len(labels) - 1), (len(labels) - 1, j)]
    graph = igraph.Graph(len(labels), edges)
    plan = plan_symmetry(model)
    assert automorphism_group(colours).order == graph.count_automorphisms(color=labels)
    assert plan.group_order == graph.count_automorphisms(color=labels)
    assert plan.abelian.order >= translations


def test_the_four_by_four_torus_is_the_four_dimensional_cube() -> None:
    assert plan_symmetry(lattice("square", [4, 4])).group_order == 384  # 2⁴·4!


@pytest.mark.parametrize("name", ["petersen", "cubical", "ring", "complete", "two rings", "tree"])
def test_characters_are_characters(name: str) -> None:
    graph = GRAPHS[name]
    group = automorphism_group(graph_colours(graph, [0] * graph.vcount()))
    a = choose_abelian(group, (), True)
    table = np.exp(2j * np.pi * a.exponents / a.modulus)
    assert np.abs(table @ table.conj().T - a.order * np.eye(a.order)).max() < 1e-9 * a.order
    index = {p.tobytes(): k for k, p in enumerate(a.elements)}
    for g in range(0, a.order, max(1, a.order // 7)):
        for h in range(a.order):
            product = index[a.elements[g][a.elements[h]].tobytes()]
            assert product == index[a.elements[h][a.elements[g]].tobytes()]  # abelian
            expected = (a.exponents[:, g] + a.exponents[:, h]) % a.modulus
            assert np.array_equal(a.exponents[:, product], expected)
    stars = a.stars(True)
    assert sorted(k for star in stars for k in star) == list(range(a.order))
    for star in stars:
        p = a.conjugating(star[0])
        if p is not None:
            inverse = np.argsort(p)
            for k, g in enumerate(a.elements):
                image = index[p[g[inverse]].tobytes()]
                assert (a.exponents[star[0], image] + a.exponents[star[0], k]) % a.modulus == 0


def test_every_ring_block_is_real_and_stars_pair_momenta() -> None:
    plan = plan_symmetry(lattice("chain", [10]))
    assert all(s.real for s in plan.sectors)
    assert sorted(s.star for s in plan.sectors if s.parity == 1) == [1, 1, 2, 2, 2, 2]


@pytest.mark.parametrize("spins", [[0.5] * 6, [1.0, 0.5] * 3, [1.0] * 4, [1.5, 0.5, 0.5]])
def test_sector_dimensions_fill_the_space(spins: list[float]) -> None:
    n = len(spins)
    bonds = [{"sites": [i, (i + 1) % n], "coupling": "J"} for i in range(n)]
    model = cluster(spins, bonds, {"J": 1.0})
    for switches in ({}, {"use_total_spin": False}, {"use_magnetization": False}):
        plan = plan_symmetry(model, **switches)
        if not plan.conserved.total_spin:
            assert sum(s.dimension * s.multiplicity for s in plan.sectors) == model.n_states
    counts = plan_symmetry(model, use_total_spin=False).magnetic
    for m in counts:
        digits = np.indices([round(2 * s) + 1 for s in spins]).reshape(n, -1)
        twice = (2 * digits - np.array([[round(2 * s)] for s in spins])).sum(axis=0)
        assert m.configurations == int((twice == m.twice_m).sum())


def test_sixty_spins_are_counted_without_being_listed() -> None:
    plan = plan_symmetry(lattice("chain", [60]))
    (zero,) = plan.magnetic
    assert zero.configurations == pytest.approx(math.comb(60, 30), rel=1e-12)
    # Nearly every configuration has a full orbit of 60 translations × reversal.
    assert zero.orbits == pytest.approx(math.comb(60, 30) / 120, rel=1e-4)
