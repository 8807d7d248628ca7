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
    ring,
    symmetric_clusters,
)
from thermo.errors import RangeError
from thermo.hilbert import encoding, operators, walks
from thermo.hilbert.orbits import find_orbits
from thermo.spectrum.moments import exact_moments
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

    def moments(self, magnetic, center=0.0, scale=1.0, order=6, workers=1):
        return exact_moments(
            self.code, self.orbits(magnetic), magnetic.elements.order, self.moves, self.tables,
            center, scale, order, workers,
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
    scale = max(float(np.abs(naive.spectrum(dense)).max()), 0.5)
    for magnetic in prepared.plan.magnetic:
        states = states_of(cluster, magnetic, prepared.plan.conserved.modulus)
        block = dense[np.ix_(states, states)]
        expected = naive.power_traces(block, center, scale, order)
        found = prepared.moments(magnetic, center, scale, order)
        assert found.shape == (order + 1,)
        assert found[0] == len(states)
        bound = (1 + abs(center) / scale) ** np.arange(order + 1)
        assert (np.abs(found - expected) <= 1e-12 * len(states) * bound).all()


ORDERS = st.integers(0, walks.HIGHEST_ORDER)
CENTERS = st.sampled_from([0.0, -1.25, 0.7])


@SETTINGS
@given(clusters(UNIAXIAL_FORMS, UNIAXIAL_IONS), CENTERS, ORDERS)
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


def test_no_terms_at_all() -> None:
    prepared = Prepared(Cluster((0.5, 1.0), (), {"J": 1.0}))
    for magnetic in prepared.plan.magnetic:
        n = magnetic.configurations
        assert prepared.moments(magnetic, 2.0, 4.0, 3).tolist() == [n, -n / 2, n / 4, -n / 8]
