"""Exact moments by local walks against dense powers, spectra by M, and closed forms."""

from __future__ import annotations

from math import comb

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

import thermo
from tests import naive
from tests.strategies import (
    ANY_FORMS,
    ION_FORMS,
    SETTINGS,
    UNIAXIAL_FORMS,
    UNIAXIAL_IONS,
    Cluster,
    clusters,
    complete,
    ring,
    symmetric_clusters,
)
from thermo.errors import RangeError
from thermo.hilbert import encoding, operators, walks, windows
from thermo.hilbert.orbits import find_orbits
from thermo.spectrum.moments import exact_moments, orbit_images, walk_links
from thermo.symmetry.automorphisms import automorphism_group, colour_matrix
from thermo.symmetry.sectors import plan_symmetry


class Prepared:
    """The plan, orbits and move tables of a cluster, M by M, for its own couplings."""

    def __init__(self, cluster: Cluster, **switches: bool):
        self.plan = plan_symmetry(
            thermo.read_model(cluster.mapping()), use_total_spin=False, **switches
        )
        terms = self.plan.terms
        self.code = encoding.encode(terms.twice_spin)
        channels = len(terms.scale)
        self.moves = operators.move_tables(
            self.code, dict(terms.pair), dict(terms.ion), channels, self.plan.conserved.modulus
        )
        self.tables = self.moves.combined(np.ones(channels))

    def orbits(self, magnetic):
        elements = magnetic.elements
        images = encoding.element_tables(self.code, elements.permutations, elements.reversed)
        halves = encoding.half_lists(
            self.code,
            self.plan.terms.twice_spin,
            magnetic.twice_m,
            self.plan.conserved.modulus,
        )
        return find_orbits(self.code, halves, images, magnetic.orbits)

    def images(self, magnetic, orbits):
        group = automorphism_group(colour_matrix(self.plan.terms))
        return orbit_images(self.code, orbits, magnetic.elements, group.generators)

    def moments(self, magnetic, center=0.0, scale=1.0, order=6, workers=1, folded=False):
        orbits = self.orbits(magnetic)
        return exact_moments(
            self.code, orbits, magnetic.elements.order, self.moves, self.tables,
            center, scale, order, workers, self.images(magnetic, orbits) if folded else (),
        )  # fmt: skip


def states_of(cluster: Cluster, magnetic, modulus: int) -> np.ndarray:
    """Which product states of the twin belong to one M or class of M."""
    twice = np.rint(2 * naive.magnetic_numbers(cluster.spins)).astype(int)
    if modulus:
        return np.flatnonzero((twice - magnetic.twice_m) % (2 * modulus) == 0)
    return np.flatnonzero(twice == magnetic.twice_m)


def check(cluster: Cluster, center: float, order: int, **switches: bool) -> None:
    """Every M of a cluster against traces of dense powers of its block."""
    prepared = Prepared(cluster, **switches)
    dense = cluster.hamiltonian()
    scale = max(float(np.abs(dense).sum(axis=1).max()), 0.5)  # bounds every level
    for magnetic in prepared.plan.magnetic:
        states = states_of(cluster, magnetic, prepared.plan.conserved.modulus)
        block = dense[np.ix_(states, states)]
        expected = naive.power_traces(block, center, scale, order)
        bound = (1 + abs(center) / scale) ** np.arange(order + 1)
        for folded in (False, True):
            found = prepared.moments(magnetic, center, scale, order, folded=folded)
            assert found.shape == (order + 1,)
            assert found[0] == len(states)
            assert (np.abs(found - expected) <= 1e-12 * len(states) * bound).all()


ORDERS = st.integers(0, walks.HIGHEST_ORDER)
CENTERS = st.sampled_from([0.0, -1.25, 0.7])


@SETTINGS
@given(clusters(UNIAXIAL_FORMS, UNIAXIAL_IONS, largest=260), CENTERS, ORDERS)
def test_uniaxial_clusters(cluster: Cluster, center: float, order: int) -> None:
    check(cluster, center, order)


@SETTINGS
@given(clusters(ANY_FORMS, ION_FORMS, largest=120), CENTERS, ORDERS)
def test_clusters_of_any_form(cluster: Cluster, center: float, order: int) -> None:
    check(cluster, center, order)


@SETTINGS
@given(symmetric_clusters(ANY_FORMS, ION_FORMS, largest=260), CENTERS, st.booleans())
def test_symmetric_clusters(cluster: Cluster, center: float, grouped: bool) -> None:
    check(cluster, center, 6, use_permutations=grouped)


@pytest.mark.parametrize(("n", "spin"), [(12, 0.5), (8, 1.0), (6, 1.5)])
def test_rings_against_their_levels(n: int, spin: float) -> None:
    cluster = ring(n, spin)
    prepared = Prepared(cluster)
    levels = thermo.solve(thermo.read_model(cluster.mapping()), method="full")
    energy, total = levels["energy"].values, levels["total_spin"].values
    multiplets = np.rint(levels["weight"].values / (2 * total + 1))
    width = float(np.abs(energy).max())
    for magnetic in prepared.plan.magnetic:
        present = total >= magnetic.twice_m / 2  # each multiplet has this M once
        powers = (energy[present, None] / width) ** np.arange(9)
        found = prepared.moments(magnetic, 0.0, width, 8)
        expected = multiplets[present] @ powers
        assert np.abs(found - expected).max() < 1e-12 * expected[0]


@pytest.mark.parametrize("n", [12, 16])
def test_ring_in_closed_form(n: int) -> None:
    """Spin-1/2 ring with u spins up, by counting configurations: Tr H is n/4 times the sum of
    s_i s_{i+1}; Tr H^2 adds the squared diagonal, products of two or four different signs, and
    a flip and back, (1/2)^2, for each antiparallel bond."""
    prepared = Prepared(ring(n))
    for magnetic in prepared.plan.magnetic:
        up = (n + magnetic.twice_m) // 2
        # Σ over configurations of the product of k different signs, by how many of them are up.

        def signs(k: int, up: int = up) -> int:
            return sum(
                (-1) ** (k - a) * comb(k, a) * comb(n - k, up - a) for a in range(up + 1) if a <= k
            )

        anti = 2 * comb(n - 2, up - 1) if up else 0
        first = n / 4 * signs(2)
        # Diagonal: the same bond, a neighbouring one (2), any other (n - 3); n/16 each.
        second = n / 16 * (comb(n, up) + 2 * signs(2) + (n - 3) * signs(4)) + n / 4 * anti
        found = prepared.moments(magnetic, order=2)
        assert found == pytest.approx([comb(n, up), first, second], rel=1e-14, abs=1e-10)


def test_every_number_of_threads_gives_the_same_bits(monkeypatch) -> None:
    prepared = Prepared(ring(14), use_permutations=False)  # several chunks
    monkeypatch.setattr("thermo.spectrum.moments._CHUNKS_AT_ONCE", 1)
    magnetic = prepared.plan.magnetic[0]
    one = prepared.moments(magnetic, -0.3, 7.1, workers=1)
    for workers in (2, 3, 5):
        assert np.array_equal(prepared.moments(magnetic, -0.3, 7.1, workers=workers), one)
    monkeypatch.setattr("thermo.spectrum.moments._CHUNKS_AT_ONCE", 3)
    assert np.array_equal(prepared.moments(magnetic, -0.3, 7.1, workers=2), one)


def test_rows_add_up() -> None:
    prepared = Prepared(ring(10))
    magnetic = prepared.plan.magnetic[0]
    orbits = prepared.orbits(magnetic)
    count = len(orbits.representatives)
    arguments = (prepared.code, orbits, magnetic.elements.order, prepared.moves, *prepared.tables)
    whole = walks.moments(*arguments, -0.2, 3.0)
    parts = [
        walks.moments(*arguments, -0.2, 3.0, 6, rows)
        for rows in ((0, 5), (5, 5), (5, count - 1), (count - 1, None))
    ]
    assert np.sum(parts, axis=0) == pytest.approx(whole, rel=1e-13)
    assert np.array_equal(parts[1], np.zeros(7))


def test_orders_agree() -> None:
    prepared = Prepared(ring(8, 1.0))
    magnetic = prepared.plan.magnetic[1]
    whole = prepared.moments(magnetic, 0.4, 9.0, 8)
    for order in range(8):
        assert prepared.moments(magnetic, 0.4, 9.0, order) == pytest.approx(
            whole[: order + 1], rel=1e-13
        )
    with pytest.raises(RangeError, match="trace order 9"):
        prepared.moments(magnetic, order=9)
    with pytest.raises(RangeError, match=r"trace scale 0\.0"):
        prepared.moments(magnetic, scale=0.0)


def test_no_terms_at_all() -> None:
    prepared = Prepared(Cluster((0.5, 1.0), (), {"J": 1.0}))
    for magnetic in prepared.plan.magnetic:
        n = magnetic.configurations
        assert prepared.moments(magnetic, 2.0, 4.0, 3).tolist() == [n, -n / 2, n / 4, -n / 8]


def test_the_table_of_configurations_grows() -> None:
    """All pairs of n spins 1/2: E = (S(S+1) - 3n/4)/2, with C(n, n/2-S) - C(n, n/2-S-1)
    multiplets of each S. Room is made for 512 configurations at first; of the 3432 at M = 0
    two swaps reach 491, three 1716 and four 2941."""
    n = 14
    prepared = Prepared(complete(n), use_permutations=False)
    for magnetic in prepared.plan.magnetic[:2]:
        spin = np.arange(magnetic.twice_m // 2, n // 2 + 1)
        multiplets = np.array([comb(n, n // 2 - s) - comb(n, n // 2 - s - 1) if s < n // 2 else 1
                               for s in spin])  # fmt: skip
        energy = (spin * (spin + 1) - 3 * n / 4) / 2
        rows = (0, 8)
        orbits = prepared.orbits(magnetic)
        # Permutations carry any configuration of one M into any other: a few rows tell all.
        found = walks.moments(
            prepared.code, orbits, 1, prepared.moves, *prepared.tables, 1.0, 10.0, 8, rows
        )
        expected = multiplets @ ((energy[:, None] - 1.0) / 10.0) ** np.arange(9)
        assert found == pytest.approx(expected * 8 / comb(n, n // 2 + spin[0]), rel=1e-12)


@pytest.mark.parametrize(
    "cluster",
    [
        # Ten bits in one pair; nine in one site; a pair of seven bits between narrow sites.
        Cluster((8.0, 0.5, 9.0), ((0, 2, "J", "isotropic"), (1, 2, "J", "xy")), {"J": 0.2}),
        Cluster((140.0,), (), {"D": 0.01}, ((0, "D", "axial"), (0, "D", "rhombic"))),
        Cluster((3.5, 0.5, 0.5, 4.0), ((0, 3, "J", "isotropic"), (1, 2, "J", "ising")), {"J": 1.0}),
    ],
)
def test_spins_wider_than_a_window(cluster: Cluster) -> None:
    check(cluster, 0.3, 4)


@SETTINGS
@given(st.data())
def test_windows_hold_every_pair_once(data) -> None:
    widths = np.array(data.draw(st.lists(st.integers(1, 6), min_size=1, max_size=12)))
    site = st.integers(0, len(widths) - 1)
    pairs = sorted(data.draw(st.sets(st.tuples(site, site), max_size=20)))
    chosen = windows.choose_windows(widths, pairs)
    served = sorted(k for _, members in chosen for k in members)
    assert served == list(range(len(pairs)))
    for (first, last, start, stop), members in chosen:
        inside = {*range(first, last), *range(start, stop)}
        assert last <= start
        assert all(set(pairs[k]) <= inside for k in members)
        bits = sum(widths[s] for s in inside)
        assert bits <= windows.WINDOW_BITS or inside == set(pairs[members[0]])


def test_few_windows_serve_many_pairs() -> None:
    ring_of_24 = [(i, (i + 1) % 24) for i in range(24)]
    assert len(windows.choose_windows(np.ones(24, dtype=np.int64), ring_of_24)) <= 4


def test_links_foretold() -> None:
    """A ring of 24 has 12 moves per configuration on average. Counted with plain sets from 50
    random configurations, one, two and three moves reached 13, 90 and 427 by 12, 153
    and 1007 links."""
    prepared = Prepared(ring(24))
    arguments = (prepared.code, prepared.moves, prepared.tables)
    assert walk_links(*arguments, 6, 2704156) == pytest.approx(1172, rel=0.03)
    assert walk_links(*arguments, 2, 2704156) == pytest.approx(12, rel=0.02)
    assert walk_links(*arguments, 0, 2704156) == 0
    assert walk_links(*arguments, 6, 5) == pytest.approx(12 * (1 + 5 + 5), rel=0.02)


def test_the_kernel_without_the_compiler() -> None:
    for bond in ("isotropic", ("antisymmetric", (0.0, 0.0, 1.0))):
        cluster = Cluster((0.5, 1.0, 1.5, 0.5), ((0, 1, "J", "xy"), (1, 2, "J", bond)), {"J": 1.0})
        prepared = Prepared(cluster, use_permutations=False)
        orbits = prepared.orbits(prepared.plan.magnetic[1])
        tables = windows.window_tables(prepared.code, prepared.moves, *prepared.tables, 0.1, 2.0)
        rows = len(orbits.representatives)
        compiled = walks.chunk_moments(tables, orbits.representatives, np.ones(rows), 5, (0, rows))
        plain = np.zeros(6)
        with np.errstate(over="ignore"):  # hashes are meant to wrap round
            walks._walk_sums.py_func(
                orbits.representatives, np.ones(rows), 0, rows, 5, plain, *tables.arrays
            )
        assert plain == pytest.approx(compiled[0], rel=1e-13, abs=1e-13)
