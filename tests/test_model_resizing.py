"""Smaller and larger clusters of the same lattice, and the key that says there are none."""

from __future__ import annotations

import igraph
import pytest

import thermo
from thermo.errors import ModelError
from thermo.model.resizing import can_resize, larger, smaller


def model(name="chain", size=(12,), couplings=None, **more):
    couplings = couplings or {"nearest": "J"}
    content = {
        "format": 1,
        "energy_unit": "K",
        "bond_term": "-2J S.S",
        "couplings": {c: -1.5 - k for k, c in enumerate(dict.fromkeys(couplings.values()))},
        "lattice": {"name": name, "size": list(size), "spin": 0.5, "couplings": couplings},
    }
    for key, value in more.items():
        (content if key == "finite" else content["lattice"])[key] = value
    return thermo.read_model(content)


def sizes(found):
    small, large = smaller(found), larger(found, 2**16)
    return small and len(small.sites), large and len(large.sites)


@pytest.mark.parametrize(
    ("found", "expected"),
    [
        # Even rings with even ones, since an odd ring is frustrated.
        (model(), (10, 14)),
        (model(size=[7]), (5, 9)),  # half-integer total spin with half-integer
        (model(couplings={"strong": "J", "weak": "K"}), (10, 14)),
        # Five rungs along an antiferromagnetic leg would be frustrated.
        (model("ladder", [6], {"leg": "J", "rung": "K"}), (8, 16)),
        (model(size=[4]), (None, 6)),  # a ring of two is a doubled bond
        (model("square", [4, 4]), (10, None)),
        (model("honeycomb", [2, 3]), (8, 14)),
        (model("square", [6, 2], boundary=["periodic", "open"]), (8, 16)),
        (model(size=[6], spin=1), (4, 8)),
    ],
)
def test_the_relatives_of_a_cluster(found, expected):
    assert sizes(found) == expected


def graph(found):
    return igraph.Graph(len(found.sites), [(b.i, b.j) for b in found.bonds])


@pytest.mark.parametrize(
    "found", [model("square", [4, 4]), model("honeycomb", [2, 3]), model("triangular", [3, 4])]
)
def test_the_relative_is_the_same_lattice_without_short_loops(found):
    for relative in (smaller(found), larger(found, 2**18)):
        assert relative is not None
        assert set(graph(relative).degree()) == set(graph(found).degree())
        assert graph(relative).is_connected()
        assert graph(relative).is_simple()
        assert graph(relative).is_bipartite() == graph(found).is_bipartite()
        assert relative.couplings == found.couplings
        assert relative.bond_term == "-2J S.S"


def test_couplings_changed_after_reading_stay_changed():
    changed = model().with_couplings({"J": 7.0})
    assert smaller(changed).couplings == {"J": 7.0}


def test_a_cell_is_resized_like_the_lattice_it_is():
    chain = {
        "format": 1,
        "energy_unit": "K",
        "bond_term": "+J S.S",
        "couplings": {"J": 2.0},
        "cell": {
            "repeat": [8],
            "site": [{"spin": 0.5}],
            "bond": [{"sites": [0, 0], "offset": [1], "coupling": "J"}],
        },
    }
    assert sizes(thermo.read_model(chain)) == (6, 10)


def test_what_has_no_other_size():
    pair = {
        "format": 1,
        "energy_unit": "K",
        "bond_term": "+J S.S",
        "couplings": {"J": 2.0},
        "site": [{"spin": 0.5}, {"spin": 0.5}],
        "bond": [{"sites": [0, 1], "coupling": "J"}],
    }
    for found in (thermo.read_model(pair), model(finite=True), model(boundary="open")):
        assert not can_resize(found)
        assert sizes(found) == (None, None)


def test_the_key_finite_is_read_and_no_part_of_the_hamiltonian():
    assert model(finite=True).finite
    assert not model().finite
    assert model(finite=True).digest == model().digest
    with pytest.raises(ModelError, match="finite: 'yes' is neither true nor false"):
        model(finite="yes")
