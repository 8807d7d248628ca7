"""Cells and named lattices: neighbours, superlattices, boundaries, translations."""

import itertools
from collections import Counter

import numpy as np
import pytest

from thermo.errors import ModelError
from thermo.model import read_model
from thermo.model.lattices import LATTICES


def lattice(name, size, couplings=None, **more):
    couplings = couplings or {"nearest": "J1"}
    return read_model(
        {
            "format": 1,
            "energy_unit": "1",
            "bond_term": "+J S.S",
            "couplings": {"J1": 1.0, "J2": 0.5, "J3": 0.25},
            "lattice": {"name": name, "size": size, "spin": 0.5, "couplings": couplings} | more,
        }
    )


def degrees(model, coupling="J1"):
    count = Counter()
    for bond in model.bonds:
        if bond.coupling == coupling:
            count[bond.i] += 1
            count[bond.j] += 1
    return {count[site] for site in range(len(model.sites))}


def pairs(model, coupling=None):
    chosen = [b for b in model.bonds if coupling in (None, b.coupling)]
    return Counter(tuple(sorted((b.i, b.j))) for b in chosen)


def told(model):
    return [note for note in model.notes if "no bond or ion term uses it" not in note]


# Coordination numbers: facts of elementary geometry.
@pytest.mark.parametrize(
    ("name", "size", "roles", "expected"),
    [
        ("chain", [5], ("nearest", "next"), (2, 2)),
        ("chain", [10], ("strong", "weak", "next"), (1, 1, 2)),
        ("ladder", [5], ("leg", "rung", "diagonal"), (2, 1, 2)),
        ("square", [5, 3], ("nearest", "diagonal"), (4, 4)),
        ("triangular", [5, 5], ("nearest", "next"), (6, 6)),
        ("honeycomb", [5, 5], ("nearest", "next"), (3, 6)),
        ("kagome", [4, 4], ("nearest", "next"), (4, 4)),
        ("cubic", [3, 3, 3], ("nearest", "next"), (6, 12)),
    ],
)
def test_coordination_numbers(name, size, roles, expected):
    couplings = {role: f"J{k + 1}" for k, role in enumerate(roles)}
    model = lattice(name, size, couplings)
    for k, number in enumerate(expected):
        assert degrees(model, f"J{k + 1}") == {number}


@pytest.mark.parametrize("entry", LATTICES, ids=lambda e: f"{e.name}-{'-'.join(e.roles)}")
def test_bonds_of_a_role_are_all_pairs_at_one_distance(entry):
    """Each shell found again from the positions, so a wrong offset cannot pass."""
    vectors, positions = np.array(entry.vectors), np.array(entry.positions)

    def key(a, b, offset):
        back = tuple(-c for c in offset)
        return min((a, b, offset), (b, a, back))

    for role, bonds in entry.roles.items():
        listed = [key(entry.basis.index(a), entry.basis.index(b), offset) for a, b, offset in bonds]
        assert len(set(listed)) == len(listed), role
        lengths = {
            round(float(np.linalg.norm(np.array(o) @ vectors + positions[b] - positions[a])), 9)
            for a, b, o in listed
        }
        assert len(lengths) == 1, role
        if role in ("leg", "rung", "strong", "weak"):
            continue  # chosen by direction, not by distance alone
        near = {
            key(a, b, o)
            for a, b in itertools.product(range(len(positions)), repeat=2)
            for o in itertools.product(range(-3, 4), repeat=entry.dimension)
            if round(float(np.linalg.norm(np.array(o) @ vectors + positions[b] - positions[a])), 9)
            in lengths
        }
        assert near == set(listed), role


@pytest.mark.parametrize(
    ("size", "cells"),
    [
        ([4, 4], 16),
        ([[3, 1], [-1, 3]], 10),
        ([[3, 3], [-3, 3]], 18),
        ([[4, 2], [-2, 4]], 20),
        ([[1, 3], [3, -1]], 10),
        ([[-4, 0], [0, -3]], 12),
        ([[103, 1], [10, 0]], 10),
    ],
)
def test_superlattices_of_the_square(size, cells):
    model = lattice("square", size)
    assert len(model.sites) == cells
    assert len(model.bonds) == 2 * cells
    assert degrees(model) == {4}
    assert len({site.name for site in model.sites}) == cells


def test_the_4x4_square_has_32_different_bonds():
    model = lattice("square", [4, 4])
    assert len(pairs(model)) == 32
    assert set(pairs(model).values()) == {1}
    assert not told(model)
    assert model.sites[1].name == "A[0,1]"


def test_tilted_square_is_the_cell_expected_by_hand():
    """The 10-site square [[3,1],[-1,3]] is Z/10 with steps 1 and 3 (x + 3y or its mirror)."""
    model = lattice("square", [[3, 1], [-1, 3]])
    y_step = next(
        p for p in model.translations if p[model_index(model, (0, 0))] == model_index(model, (0, 1))
    )
    x_step = next(p for p in model.translations if p is not y_step)
    here, x_images = 0, []
    for _ in range(10):
        x_images.append(here)
        here = x_step[here]
    assert here == 0
    assert len(set(x_images)) == 10
    # Moving by (3, 1) is no move at all: three x steps undo one y step.
    site = 0
    for step in (x_step, x_step, x_step, y_step):
        site = step[site]
    assert site == 0


def model_index(model, cell, name="A"):
    return [s.name for s in model.sites].index(f"{name}[{','.join(map(str, cell))}]")


@pytest.mark.parametrize(
    ("name", "size", "boundary", "bonds"),
    [
        ("chain", [6], "open", 5),
        ("square", [3, 4], "open", 2 * 4 + 3 * 3),
        ("square", [3, 4], ["periodic", "open"], 3 * 4 + 3 * 3),
        ("square", [3, 4], ["open", "periodic"], 2 * 4 + 3 * 4),
        ("cubic", [2, 2, 2], "open", 12),
        ("kagome", [2, 2], "open", 4 * 3 + 2 + 2 + 1),
    ],
)
def test_open_boundaries(name, size, boundary, bonds):
    model = lattice(name, size, boundary=boundary)
    assert len(model.bonds) == bonds
    assert not told(model)


def test_open_direction_of_a_tilted_cell_cuts_along_its_row():
    periodic = lattice("square", [[3, 3], [-2, 2]])
    strip = lattice("square", [[3, 3], [-2, 2]], boundary=["periodic", "open"])
    assert set(pairs(strip)) < set(pairs(periodic))
    assert len(strip.translations) == 1
    assert_symmetry(strip)


def assert_symmetry(model):
    bonds = pairs(model)
    for image in model.translations:
        assert sorted(image) == list(range(len(model.sites)))
        moved = Counter()
        for (i, j), count in bonds.items():
            moved[tuple(sorted((image[i], image[j])))] += count
        assert moved == bonds


@pytest.mark.parametrize(
    ("name", "size", "boundary", "count"),
    [
        ("chain", [6], "periodic", 1),
        ("chain", [6], "open", 0),
        ("square", [4, 4], "periodic", 2),
        ("square", [4, 4], ["open", "periodic"], 1),
        ("kagome", [3, 2], "periodic", 2),
        ("cubic", [3, 2, 2], "periodic", 3),
        ("square", [[3, 1], [-1, 3]], "periodic", 2),
    ],
)
def test_translations_are_symmetries(name, size, boundary, count):
    model = lattice(name, size, boundary=boundary)
    assert len(model.translations) == count
    assert_symmetry(model)


def test_chain_sizes_count_sites():
    assert len(lattice("chain", [8]).sites) == 8
    alternating = lattice("chain", [8], {"strong": "J1", "weak": "J2"})
    assert len(alternating.sites) == 8
    assert pairs(alternating) == pairs(lattice("chain", [8]))
    with pytest.raises(ModelError, match="multiple of 2"):
        lattice("chain", [7], {"strong": "J1", "weak": "J2"})


def test_short_periods_are_told():
    ring = lattice("chain", [2])
    assert len(ring.bonds) == 2
    assert len(told(ring)) == 1
    assert "changes the physics" in told(ring)[0]
    assert "2 times" in told(ring)[0]
    assert "4 pairs" in told(lattice("square", [2, 2]))[0]
    assert "3 pairs" in told(lattice("square", [2, 3], boundary=["periodic", "open"]))[0]
    # J1 round one way and J2 round the other join the same pair: told as well.
    mixed = lattice("chain", [3], {"nearest": "J1", "next": "J2"})
    assert "by J2 and J1" in told(mixed)[0] or "by J1 and J2" in told(mixed)[0]


def test_a_bond_to_its_own_image_becomes_a_constant_and_is_told():
    model = lattice("square", [1, 4])
    assert len(model.bonds) == 4
    assert len(model.ions) == 4
    assert np.allclose(model.ions[0].matrix, np.eye(3))
    assert "back to itself" in told(model)[0]
    skew = {"coupling": "J1", "form": "antisymmetric", "vector": [0, 0, 1]}
    with pytest.raises(ModelError, match=r"lattice\.couplings\.nearest: .*no meaning"):
        lattice("chain", [1], {"nearest": skew})


def test_several_couplings_in_one_role_and_their_direction():
    skew = {"coupling": "J2", "form": "antisymmetric", "vector": [0, 0, 1]}
    model = lattice("chain", [4], {"nearest": ["J1", skew]})
    assert len(model.bonds) == 8
    assert not told(model)
    assert {(b.i, b.j) for b in model.bonds} == {(0, 1), (1, 2), (2, 3), (3, 0)}
    twice = lattice("chain", [4], {"nearest": ["J1", "J1"]})
    assert "repeats" in told(twice)[0]


def test_spins_and_g_of_the_basis():
    model = lattice(
        "ladder",
        [2],
        {"rung": "J1"},
        boundary="open",
        spin=[0.5, "3/2"],
        g={"A": 2.1, "B": [2, 2, 2.2]},
    )
    assert list(model.spins) == [0.5, 1.5, 0.5, 1.5]
    assert model.sites[1].g[2, 2] == 2.2
    named = lattice(
        "ladder",
        [2],
        {"rung": "J1"},
        boundary="open",
        spin={"A": 0.5, "B": 1.5},
        g={"A": 2.1, "B": [2, 2, 2.2]},
    )
    assert named.digest == model.digest


def test_ion_terms_on_all_sites():
    model = lattice("chain", [4], spin=1, ions=[{"coupling": "J2", "form": "axial"}])
    assert [ion.site for ion in model.ions] == [0, 1, 2, 3]


def test_cell_of_any_dimension():
    for dimension in (1, 2, 3):
        model = read_model(
            {
                "format": 1,
                "energy_unit": "K",
                "bond_term": "+J S.S",
                "couplings": {"J": 1.0},
                "cell": {
                    "repeat": [3] * dimension,
                    "site": [{"spin": 0.5}],
                    "bond": [{"sites": [0, 0], "offset": [1] * dimension, "coupling": "J"}],
                },
            }
        )
        assert len(model.sites) == len(model.bonds) == 3**dimension
        assert degrees(model, "J") == {2}
