"""Closed-form traces and total matrices against tiny dense matrices built here with kron."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from thermo.model import exact_traces, read_model, total_matrices


def spin_matrices(spin):
    """Textbook S_x, S_y, S_z in the basis m = S … −S."""
    m = np.arange(spin, -spin - 1, -1)
    up = np.diag(np.sqrt(spin * (spin + 1) - m[1:] * (m[1:] + 1)), 1)
    return [(up + up.T) / 2, (up - up.T) / 2j, np.diag(m)]


def dense(model):
    dims = [round(2 * s + 1) for s in model.spins]

    def embed(operators):
        total = np.eye(1)
        for site, d in enumerate(dims):
            total = np.kron(total, operators.get(site, np.eye(d)))
        return total

    h = np.zeros((np.prod(dims),) * 2, dtype=complex)
    spins = [spin_matrices(s) for s in model.spins]
    for bond in model.bonds:
        for a in range(3):
            for b in range(3):
                term = embed({bond.i: spins[bond.i][a], bond.j: spins[bond.j][b]})
                h += model.couplings[bond.coupling] * bond.matrix[a, b] * term
    for ion in model.ions:
        s = spins[ion.site]
        local = sum(ion.matrix[a, b] * s[a] @ s[b] for a in range(3) for b in range(3))
        h += model.couplings[ion.coupling] * embed({ion.site: local})
    return h


def base(**more):
    return {"format": 1, "energy_unit": "K", "bond_term": "+J S.S"} | more


def check(model):
    h = dense(model)
    assert np.allclose(h, h.conj().T)
    n, mean, square = exact_traces(model)
    scale = np.trace(h @ h).real / len(h)
    assert n == len(h)
    assert mean == pytest.approx(np.trace(h).real / len(h), abs=1e-12 * max(1, scale))
    assert square == pytest.approx(scale, rel=1e-12, abs=1e-12)


@st.composite
def clusters(draw):
    number = st.floats(-3, 3, allow_nan=False).map(lambda x: round(x, 3))
    spins = draw(st.lists(st.sampled_from([0.5, 1.0, 1.5, 2.0]), min_size=2, max_size=4))
    if np.prod([2 * s + 1 for s in spins]) > 200:
        spins = spins[:2]
    n = len(spins)
    matrix = st.lists(st.lists(number, min_size=3, max_size=3), min_size=3, max_size=3)
    bonds = []
    for _ in range(draw(st.integers(0, 5))):
        i = draw(st.integers(0, n - 1))
        j = draw(st.integers(0, n - 2))
        bond = {"sites": [i, j + (j >= i)], "coupling": draw(st.sampled_from("ab"))}
        form = draw(st.sampled_from(["isotropic", "xy", "ising", "antisymmetric", "matrix"]))
        if form == "matrix":
            bond["matrix"] = draw(matrix)
        else:
            bond["form"] = form
        if form == "antisymmetric":
            bond["vector"] = draw(st.lists(number, min_size=3, max_size=3))
        bonds.append(bond)
    ions = []
    for _ in range(draw(st.integers(0, 3))):
        ion = {"sites": [draw(st.integers(0, n - 1))], "coupling": draw(st.sampled_from("ab"))}
        form = draw(st.sampled_from(["axial", "rhombic", "matrix"]))
        if form == "matrix":
            m = np.array(draw(matrix))
            ion["matrix"] = (m + m.T).tolist()
        else:
            ion["form"] = form
        ions.append(ion)
    return base(
        couplings={"a": draw(number), "b": draw(number)},
        bond_term=draw(st.sampled_from(["+J S.S", "-J S.S", "+2J S.S", "-2J S.S"])),
        site=[{"spin": s} for s in spins],
        bond=bonds,
        ion=ions,
    )


@settings(max_examples=60, deadline=None)
@given(clusters())
def test_traces_of_random_clusters(source):
    check(read_model(source))


def test_forms_are_the_textbook_operators():
    sites = [{"spin": 1.0}, {"spin": 0.5}]
    s, t = spin_matrices(1.0), spin_matrices(0.5)
    product = [[np.kron(s[a], t[b]) for b in range(3)] for a in range(3)]
    x, y, z = 0.3, -0.7, 1.1
    cross = (
        x * (product[1][2] - product[2][1])
        + y * (product[2][0] - product[0][2])
        + z * (product[0][1] - product[1][0])
    )
    expected = {
        "isotropic": product[0][0] + product[1][1] + product[2][2],
        "xy": product[0][0] + product[1][1],
        "ising": product[2][2],
        "antisymmetric": cross,
    }
    for form, operator in expected.items():
        bond = {"sites": [0, 1], "coupling": "J", "form": form}
        if form == "antisymmetric":
            bond["vector"] = [x, y, z]
        for term, factor in (("+J S.S", 1), ("-J S.S", -1), ("+2J S.S", 2), ("-2J S.S", -2)):
            model = read_model(base(couplings={"J": 1.5}, site=sites, bond=[bond], bond_term=term))
            assert np.allclose(dense(model), factor * 1.5 * operator), (form, term)


def test_ion_forms_keep_their_sign_whatever_the_bond_term():
    sx, sy, sz = spin_matrices(1.5)
    expected = {"axial": sz @ sz - 1.5 * 2.5 / 3 * np.eye(4), "rhombic": sx @ sx - sy @ sy}
    for form, operator in expected.items():
        model = read_model(
            base(
                couplings={"D": 2.0},
                bond_term="-2J S.S",
                site=[{"spin": 1.5}],
                ion=[{"sites": [0], "coupling": "D", "form": form}],
            )
        )
        assert np.allclose(dense(model), 2 * operator)


def test_ion_on_spin_half_is_its_constant():
    matrix = [[1, 2, 0], [2, 3, 0], [0, 0, -1]]
    model = read_model(
        base(
            couplings={"D": 2.0},
            site=[{"spin": 0.5}],
            ion=[{"sites": [0], "coupling": "D", "matrix": matrix}],
        )
    )
    assert np.allclose(dense(model), 2 * 3 / 4 * np.eye(2))
    check(model)


def test_total_matrices_sum_both_directions_and_drop_zeros():
    skew = {"coupling": "b", "form": "antisymmetric", "vector": [0, 0, 1]}
    model = read_model(
        base(
            couplings={"a": 2.0, "b": 3.0, "off": 0.0},
            site=[{"spin": 1}] * 3,
            bond=[
                {"sites": [1, 0], "coupling": "a"},
                {"sites": [1, 0]} | skew,
                {"sites": [0, 1]} | skew,
                {"sites": [0, 2], "coupling": "off"},
            ],
            ion=[
                {"sites": [2], "coupling": "a", "form": "axial"},
                {"sites": [1], "coupling": "off", "form": "axial"},
            ],
        )
    )
    pairs, singles = total_matrices(model)
    assert list(pairs) == [(0, 1)]
    assert np.allclose(pairs[0, 1], 2 * np.eye(3))
    assert list(singles) == [2]
    assert np.allclose(singles[2], np.diag([-2, -2, 4]) / 3)


def test_translated_cell_with_own_image_has_the_right_traces():
    model = read_model(
        base(
            couplings={"J": 1.3},
            cell={
                "repeat": [1, 3],
                "site": [{"spin": 1}],
                "bond": [
                    {"sites": [0, 0], "offset": [1, 0], "coupling": "J", "form": "ising"},
                    {"sites": [0, 0], "offset": [0, 1], "coupling": "J"},
                ],
            },
        )
    )
    check(model)
