"""The slow twin itself against closed forms, so that it may judge the package."""

from __future__ import annotations

from itertools import combinations

import numpy as np
import pytest
from mpmath import mpf

from tests import naive
from tests import references as ref

SOME_TEMPERATURES = ref.TEMPERATURES[::4]


def ring_bonds(n, matrix=naive.ISOTROPIC):
    """Bonds of a ring; two sites share one bond here."""
    return [(i, (i + 1) % n, matrix) for i in range(n if n > 2 else 1)]


def states(spins, bonds, ions=()):
    """All energies with their M, from the blocks of H."""
    blocks = naive.levels_by_magnetic_number(spins, naive.hamiltonian(spins, bonds, ions))
    energy = np.concatenate(list(blocks.values()))
    m = np.concatenate([np.full(len(e), k) for k, e in blocks.items()])
    return energy, m


@pytest.mark.parametrize("spin", [0.5, 1, 1.5, 2, 2.5])
def test_spin_matrices_obey_the_algebra(spin):
    """[Sx, Sy] = i Sz and S^2 = s(s+1): the definition of a spin."""
    sx, sy, sz = naive.spin_matrices(spin)
    assert np.allclose(sx @ sy - sy @ sx, 1j * sz, atol=1e-14)
    assert np.allclose(sx @ sx + sy @ sy + sz @ sz, spin * (spin + 1) * np.eye(len(sz)))


CLUSTERS = {
    "dimer": (ref.DIMER, [0.5] * 2, [(0, 1)]),
    "equilateral trimer": (ref.EQUILATERAL_TRIMER, [0.5] * 3, [(0, 1), (1, 2), (0, 2)]),
    "linear trimer": (ref.LINEAR_TRIMER, [0.5] * 3, [(0, 1), (1, 2)]),
    "four-ring": (ref.FOUR_RING, [0.5] * 4, [(0, 1), (1, 2), (2, 3), (3, 0)]),
    "spin-1 dimer": (ref.SPIN_1_DIMER, [1, 1], [(0, 1)]),
    "spin-5/2 dimer": (ref.spin_dimer(5), [2.5, 2.5], [(0, 1)]),
    "complete graph of 6": (ref.complete_graph(6), [0.5] * 6, list(combinations(range(6), 2))),
}
DEGENERATE = {"equilateral trimer", "complete graph of 6"}


@pytest.mark.parametrize("name", CLUSTERS)
def test_clusters(name):
    """Bleaney and Bowers (1952), Kambe (1950): exact."""
    form, spins, pairs = CLUSTERS[name]
    energy, m = states(spins, [(i, j, naive.ISOTROPIC) for i, j in pairs])
    for t in SOME_TEMPERATURES:
        got = naive.canonical(energy, m, t)
        # 1e-14 J of rounding in a level is 1e-14/T in a weight; and where the ground level is
        # degenerate, its states differ by that much, which is a C of (1e-14/T)^2 of their own.
        noise = (1e-14 / t) ** 2 if name in DEGENERATE else 0.0
        assert got.specific_heat == pytest.approx(
            form.specific_heat(t), rel=1e-11, abs=max(noise, 1e-300)
        )
        assert got.moment_variance / t == pytest.approx(
            form.susceptibility(t), rel=1e-11, abs=1e-300
        )
        assert got.free_energy == pytest.approx(form.free_energy(t), rel=1e-12)
        assert got.internal_energy == pytest.approx(form.internal_energy(t), rel=1e-12)
        assert got.entropy == pytest.approx(form.entropy(t), rel=1e-11, abs=1e-300)


def test_the_references_agree_with_each_other():
    """Different closed forms of one cluster (exact)."""
    for t in SOME_TEMPERATURES:
        assert ref.DIMER.specific_heat(t) == pytest.approx(ref.dimer_specific_heat(t), rel=1e-14)
        for one, other in [
            (ref.DIMER, ref.complete_graph(2)),
            (ref.DIMER, ref.spin_dimer(1)),
            (ref.EQUILATERAL_TRIMER, ref.complete_graph(3)),
            (ref.SPIN_1_DIMER, ref.spin_dimer(2)),
        ]:
            assert one.specific_heat(t) == pytest.approx(other.specific_heat(t), rel=1e-14)
            assert one.susceptibility(t) == pytest.approx(other.susceptibility(t), rel=1e-14)
    # The listed maxima of the dimer, per spin.
    assert ref.DIMER.susceptibility(ref.DIMER_CHI_MAX_AT) / 2 == pytest.approx(
        ref.DIMER_CHI_MAX, abs=6e-9
    )
    assert ref.DIMER.specific_heat(ref.DIMER_C_MAX_AT) / 2 == pytest.approx(
        ref.DIMER_C_MAX, abs=6e-9
    )


@pytest.mark.parametrize("h", [0.0, 0.37])
@pytest.mark.parametrize("n", [5, 6, 7])
def test_xx_rings(n, h):
    """Lieb, Schultz and Mattis (1961), Katsura (1962): exact."""
    energy, m = states([0.5] * n, ring_bonds(n, naive.XY))
    for t in [0.05, 0.4, 3.0]:
        want = ref.in_field(lambda x, b: ref.xx_ring_log_z(n, x, b), t, h)
        check(naive.canonical(energy, m, t, h), want, t)


@pytest.mark.parametrize("n", [2, 5, 6])
def test_xx_open_chains(n):
    """Lieb, Schultz and Mattis (1961): exact."""
    bonds = [(i, i + 1, naive.XY) for i in range(n - 1)]
    energy, m = states([0.5] * n, bonds)
    for t in [0.05, 0.4, 3.0]:
        want = ref.in_field(lambda x, b: ref.xx_open_log_z(n, x, b), t, 0.37)
        check(naive.canonical(energy, m, t, 0.37), want, t)


@pytest.mark.parametrize("sign", [1, -1])
@pytest.mark.parametrize("n", [3, 5, 6])
def test_ising_rings(n, sign):
    """Ising (1925), transfer matrix: exact."""
    energy, m = states([0.5] * n, ring_bonds(n, sign * naive.ISING))
    for t in [0.05, 0.4, 3.0]:
        want = ref.in_field(lambda x, b: ref.ising_ring_log_z(n, x, b, sign), t, 0.21)
        check(naive.canonical(energy, m, t, 0.21), want, t)
        plain = (2 * np.cosh(sign / 4 / t)) ** n + (-2 * np.sinh(sign / 4 / t)) ** n
        assert naive.canonical(energy, m, t).log_partition == pytest.approx(np.log(plain))


def check(got, want, t):
    """Averages of the twin against a dictionary of closed-form curves."""
    assert got.free_energy == pytest.approx(want["free_energy"], rel=1e-12)
    assert got.internal_energy == pytest.approx(want["internal_energy"], rel=1e-11)
    assert got.entropy == pytest.approx(want["entropy"], rel=1e-10)
    assert got.specific_heat == pytest.approx(want["specific_heat"], rel=1e-10)
    # At h = 0 the moment vanishes only as far as the levels of +M and -M are equal: 1e-14/T.
    assert got.moment == pytest.approx(want["magnetization"], rel=1e-10, abs=1e-14 / t)
    assert got.moment_variance / t == pytest.approx(want["susceptibility"], rel=1e-10)


def test_antisymmetric_bond():
    """Two spins 1/2 with d.(S1 x S2): levels -|d|/2, 0, 0, |d|/2 (exact, by hand)."""
    matrix = naive.antisymmetric([0.3, -0.4, 1.2])
    levels = naive.spectrum(naive.hamiltonian([0.5, 0.5], [(0, 1, matrix)]))
    assert np.allclose(levels, [-0.65, 0, 0, 0.65], atol=1e-15)
    # The cross product itself, along each axis.
    left, right = naive.spin_matrices(0.5), naive.spin_matrices(1)
    for axis in range(3):
        u, v = (axis + 1) % 3, (axis + 2) % 3
        cross = np.kron(left[u], right[v]) - np.kron(left[v], right[u])
        unit = np.eye(3)[axis]
        got = naive.hamiltonian([0.5, 1], [(0, 1, naive.antisymmetric(unit))])
        assert np.allclose(got, cross, atol=1e-15)


def test_ion_terms():
    """One spin 1 with D(Sz^2 - 2/3) + E(Sx^2 - Sy^2): -2D/3, D/3 -+ E (textbook, exact)."""
    d, e = 0.7, 0.2
    ions = [(0, d * naive.axial(1) + e * naive.RHOMBIC)]
    levels = naive.spectrum(naive.hamiltonian([1], [], ions))
    assert np.allclose(levels, sorted([-2 * d / 3, d / 3 - e, d / 3 + e]), atol=1e-15)


def test_multiplets_account_for_every_state():
    """Levels by total spin, each 2S+1 times, are the whole spectrum."""
    spins = [0.5, 1, 1.5, 0.5]
    bonds = [(0, 1, naive.ISOTROPIC), (1, 2, -0.3 * naive.ISOTROPIC), (2, 3, 0.8 * naive.ISOTROPIC)]
    matrix = naive.hamiltonian(spins, bonds)
    by_spin = naive.levels_by_total_spin(spins, matrix)
    repeated = [np.repeat(e, round(2 * s) + 1) for s, e in by_spin.items()]
    assert np.allclose(np.sort(np.concatenate(repeated)), naive.spectrum(matrix), atol=1e-13)


def test_field_shifts_levels_or_is_diagonalised():
    """Levels E - bM against a diagonalisation in the field: the same averages."""
    spins = [1, 0.5, 1]
    bonds = [(0, 1, np.diag([1.0, 1.0, 0.4])), (1, 2, -0.7 * naive.ISOTROPIC)]
    ions = [(0, 0.3 * naive.axial(1))]
    energy, m = states(spins, bonds, ions)
    for t, b in [(0.2, 0.6), (2.0, -1.1)]:
        shifted = naive.canonical(energy, m, t, b)
        direct = naive.canonical_in_field(spins, bonds, ions, t, b)
        exact = naive.canonical(energy, m, t, b, exact=True)
        for name in vars(shifted):
            assert getattr(shifted, name) == pytest.approx(getattr(direct, name), rel=1e-11)
            assert getattr(shifted, name) == pytest.approx(getattr(exact, name), rel=1e-14)


@pytest.mark.parametrize("n", ref.RING_GROUND_STATES)
def test_bethe_equations(n):
    """The listed ring energies are the Bethe solutions; the small ones also diagonalised."""
    assert ref.bethe_ground_state(n) == pytest.approx(ref.RING_GROUND_STATES[n], abs=6e-10)
    if n <= 8:
        levels = naive.spectrum(naive.hamiltonian([0.5] * n, ring_bonds(n)))
        assert levels[0] == pytest.approx(ref.bethe_ground_state(n), abs=1e-12)


def test_infinite_xx_chain_peaks_where_listed():
    """Katsura (1962); the peak redone from the closed forms. chi = T C - u at h = 0."""
    at = ref.xx_infinite(ref.XX_PEAK_AT)
    assert at["specific_heat"] == pytest.approx(ref.XX_PEAK_C, abs=6e-9)
    assert at["susceptibility"] == pytest.approx(ref.XX_PEAK_CHI, abs=6e-9)
    for t in [ref.XX_PEAK_AT - 1e-3, ref.XX_PEAK_AT + 1e-3]:
        assert ref.xx_infinite(t)["specific_heat"] < at["specific_heat"]
        assert ref.xx_infinite(t)["susceptibility"] < at["susceptibility"]
    want = ref.XX_PEAK_AT * at["specific_heat"] - at["internal_energy"]
    assert at["susceptibility"] == pytest.approx(want, rel=1e-12)
    # A long ring is the infinite chain at high temperature.
    ring = ref.in_field(lambda x, b: ref.xx_ring_log_z(40, x, b), 0.5, 0.3)
    infinite = ref.xx_infinite(0.5, 0.3)
    for name in ("free_energy", "internal_energy", "specific_heat", "susceptibility"):
        assert ring[name] / 40 == pytest.approx(infinite[name], rel=1e-9)


def test_infinite_ising_chain():
    """A long ring is the infinite chain (Ising 1925)."""
    ring = ref.in_field(lambda x, b: ref.ising_ring_log_z(200, x, b), 0.5, 0.0)
    for name, value in ref.ising_infinite(0.5).items():
        assert ring[name] / 200 == pytest.approx(value, rel=1e-12)
    assert float(ref.ising_ring_log_z(3, mpf(1))) > 0
