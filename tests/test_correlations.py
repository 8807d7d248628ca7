"""Thermal correlations of pairs against dense twins, closed forms and sum rules."""

from __future__ import annotations

from itertools import combinations

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as hs

import thermo
from tests import naive_correlations
from tests.strategies import (
    ANY_FORMS,
    ION_FORMS,
    ISOTROPIC_FORMS,
    SETTINGS,
    UNIAXIAL_FORMS,
    UNIAXIAL_IONS,
    clusters,
    complete,
    ring,
    ring_pairs,
    symmetric_clusters,
    uniform,
)
from thermo.ensemble.correlations import level_averages
from thermo.errors import MemoryLimitError
from thermo.model.traces import total_matrices
from thermo.spectrum.correlators import correlated_levels

T = np.array([0.05, 0.4, 1.3, 20.0])
AXES = ("xx", "yy", "zz")


def averages(cluster, temperature=T, field=0.0, components=False):
    """{form: (nT, N, N)} of the package."""
    found = correlated_levels(thermo.read_model(cluster.mapping()), components)
    h = np.array([field])
    return {
        form: level_averages(found.table, values, np.asarray(temperature), h)[:, :, 0].T[
            :, found.classes.of_pair
        ]
        for form, values in found.values.items()
    }


def hold_against_twin(cluster, field=0.0, components=True):
    found = averages(cluster, field=field, components=components)
    size = max(s * (s + 1) for s in cluster.spins)
    twins = naive_correlations.correlations(*cluster.naive_terms(), T, field)
    for n, twin in enumerate(twins):
        np.testing.assert_allclose(found["total"][n], twin.sum(axis=0), rtol=0, atol=1e-9 * size)
        for a, form in enumerate(AXES if components else ()):
            np.testing.assert_allclose(found[form][n], twin[a], rtol=0, atol=1e-9 * size)


SMALL = SETTINGS.__class__(SETTINGS, max_examples=12)


@SMALL
@given(clusters(ANY_FORMS, ION_FORMS, largest=100))
def test_any_cluster_against_the_twin(cluster):
    hold_against_twin(cluster)


@SMALL
@given(symmetric_clusters(ANY_FORMS, ION_FORMS, largest=100))
def test_symmetric_clusters_against_the_twin(cluster):
    hold_against_twin(cluster)


@SMALL
@given(
    hs.one_of(
        clusters(ISOTROPIC_FORMS, None, largest=100),
        symmetric_clusters(ISOTROPIC_FORMS, None, largest=100),
    ),
    hs.sampled_from([0.0, 0.7, -2.1]),
)
def test_isotropic_clusters_by_total_spin_in_any_field(cluster, field):
    hold_against_twin(cluster, field, components=False)


@SMALL
@given(
    hs.one_of(
        clusters(UNIAXIAL_FORMS, UNIAXIAL_IONS, largest=100),
        symmetric_clusters(UNIAXIAL_FORMS, UNIAXIAL_IONS, largest=100),
    ),
    hs.sampled_from([0.3, -1.4]),
)
def test_uniaxial_clusters_in_a_field_against_the_twin(cluster, field):
    hold_against_twin(cluster, field)


def test_dimer_in_closed_form():
    # Bleaney and Bowers (1952): singlet at -3J/4 with S1.S2 = -3/4, triplet at J/4 with 1/4.
    x = 1.7 / T
    expected = 0.75 * (np.exp(-x) - 1) / (1 + 3 * np.exp(-x))
    found = averages(uniform([0.5, 0.5], [(0, 1)], value=1.7))["total"]
    np.testing.assert_allclose(found[:, 0, 1], expected, rtol=1e-12)
    np.testing.assert_allclose(found[:, 0, 0], 0.75, rtol=1e-14)


def test_linear_trimer_in_closed_form():
    # Kambe (1950): with S13 = S1 + S3, E = (J/2)[S(S+1) - S13(S13+1) - 3/4].
    outer = []
    inner = []
    for t in T:
        weights, ends, bonds = [], [], []
        for s13, s in ((0, 0.5), (1, 0.5), (1, 1.5)):
            energy = 0.5 * (s * (s + 1) - s13 * (s13 + 1) - 0.75)
            weights.append((2 * s + 1) * np.exp(-(energy + 1) / t))
            ends.append(0.5 * (s13 * (s13 + 1) - 1.5))
            bonds.append(energy / 2)
        outer.append(np.dot(weights, ends) / np.sum(weights))
        inner.append(np.dot(weights, bonds) / np.sum(weights))
    found = averages(uniform([0.5] * 3, [(0, 1), (1, 2)]))["total"]
    np.testing.assert_allclose(found[:, 0, 2], outer, rtol=1e-12, atol=1e-14)
    np.testing.assert_allclose(found[:, 0, 1], inner, rtol=1e-12, atol=1e-14)
    np.testing.assert_allclose(found[:, 1, 2], inner, rtol=1e-12, atol=1e-14)


@pytest.mark.parametrize(("n", "spin"), [(5, 0.5), (6, 0.5), (4, 1.0), (3, 2.5)])
def test_complete_graph_from_the_total_spin(n, spin):
    """Every pair is alike: N(N-1) <S_i.S_j> = <S(S+1)> - N s(s+1), E = (J/2)[S(S+1) - N s(s+1)]."""
    count = np.ones(1)
    for _ in range(n):
        count = np.convolve(count, np.ones(round(2 * spin) + 1))
    m = np.arange(len(count)) - n * spin
    own = n * spin * (spin + 1)
    for t, found in zip(T, averages(complete(n, spin))["total"], strict=True):
        z = total = 0.0
        for k in np.flatnonzero(m >= 0):
            s = m[k]
            multiplets = count[k] - (count[k + 1] if k + 1 < len(count) else 0)
            lowest = 0.0 if (n * spin) % 1 == 0 else 0.75
            weight = multiplets * (2 * s + 1) * np.exp(-0.5 * (s * (s + 1) - lowest) / t)
            z, total = z + weight, total + weight * s * (s + 1)
        expected = (total / z - own) / (n * (n - 1))
        off = found[~np.eye(n, dtype=bool)]
        np.testing.assert_allclose(off, expected, rtol=1e-11)


@SMALL
@given(clusters(ISOTROPIC_FORMS, None, largest=200))
def test_energy_is_the_sum_over_the_bonds(cluster):
    model = thermo.read_model(cluster.mapping())
    found = averages(cluster)["total"]
    pairs, singles = total_matrices(model)
    constant = sum(
        np.trace(d) / 3 * cluster.spins[i] * (cluster.spins[i] + 1) for i, d in singles.items()
    )
    energy = constant + sum(a[0, 0] * found[:, i, j] for (i, j), a in pairs.items())
    levels = thermo.solve(model, method="full")
    exact = thermo.curves(levels, T, units="reduced")["internal_energy"].values[:, 0]
    scale = max(1.0, float(np.abs(levels["energy"]).max()))
    np.testing.assert_allclose(energy, exact * len(cluster.spins), rtol=0, atol=1e-11 * scale)


@SMALL
@given(symmetric_clusters(ISOTROPIC_FORMS, None, largest=200))
def test_the_sum_of_all_pairs_is_the_susceptibility(cluster):
    """Σ_ij <S_i.S_j> = <S²> = 3 T χ / g², from the levels' own total spins."""
    model = thermo.read_model(cluster.mapping())
    total = averages(cluster)["total"].sum(axis=(1, 2))
    chi = thermo.curves(thermo.solve(model, method="full"), T, units="reduced")["susceptibility"]
    expected = 3 * T * chi.values[:, 0] * len(cluster.spins)
    scale = sum(cluster.spins) * (sum(cluster.spins) + 1)
    np.testing.assert_allclose(total, expected, rtol=0, atol=1e-11 * scale)


@pytest.mark.parametrize("spin", [0.5, 1.0, 1.5])
def test_high_temperatures_to_first_order(spin):
    """<S_i.S_j> = -J [s(s+1)]²/(3T) + O(T⁻²) on a bond, O(T⁻²) off it."""
    t = np.array([1e4, 1e5])
    found = averages(ring(4, spin, value=1.3), temperature=t)["total"]
    leading = -1.3 * (spin * (spin + 1)) ** 2 / (3 * t)
    # The next term is smaller by J/T times a number of order S².
    np.testing.assert_allclose(found[:, 0, 1], leading, rtol=20 / t[0])
    assert np.all(np.abs(found[:, 0, 2]) < 20 / t * np.abs(leading))
    change = (found[:, 0, 1] / leading - 1) * t
    np.testing.assert_allclose(change[0], change[1], rtol=1e-3)


@pytest.mark.parametrize("spin", [0.5, 1.0, 2.0])
def test_a_ferromagnet_is_saturated_when_cold(spin):
    found = averages(ring(4, spin, value=-1.0), temperature=[1e-3])["total"][0]
    expected = np.full((4, 4), spin**2)
    np.fill_diagonal(expected, spin * (spin + 1))
    np.testing.assert_allclose(found, expected, rtol=1e-12)


def test_a_strong_field_saturates_the_component_along_it():
    found = averages(ring(5), temperature=[0.1], field=50.0, components=True)
    off = ~np.eye(5, dtype=bool)
    np.testing.assert_allclose(found["zz"][0][off], 0.25, rtol=1e-12)
    np.testing.assert_allclose(found["xx"][0][off], 0.0, atol=1e-14)


def test_classes_are_those_of_the_ring_and_no_finer():
    found = correlated_levels(thermo.read_model(ring(8).mapping())).classes
    assert found.n_self == 1
    np.testing.assert_array_equal(found.count, [8, 8, 8, 8, 4])
    distance = np.abs(np.subtract.outer(np.arange(8), np.arange(8)))
    distance = np.minimum(distance, 8 - distance)
    for k in range(5):
        assert len(np.unique(distance[found.of_pair == k])) == 1
    np.testing.assert_array_equal(found.of_pair, found.of_pair.T)


def test_couplings_that_happen_to_agree_keep_the_symmetry():
    pairs = ring_pairs(6)
    bonds = tuple((i, j, "J1" if i % 2 else "J2", "isotropic") for i, j in pairs)
    cluster = ring(6).__class__((0.5,) * 6, bonds, {"J1": 1.0, "J2": 1.0})
    assert len(correlated_levels(thermo.read_model(cluster.mapping())).classes.first) == 4
    cluster = ring(6).__class__((0.5,) * 6, bonds, {"J1": 1.0, "J2": 1.1})
    assert len(correlated_levels(thermo.read_model(cluster.mapping())).classes.first) == 5


def test_free_spins_are_uncorrelated():
    cluster = uniform([0.5, 1.0, 1.5], list(combinations(range(3), 2)), value=0.0)
    found = averages(cluster, components=True)
    own = np.diag([0.75, 2.0, 3.75])
    np.testing.assert_allclose(found["total"], np.broadcast_to(own, (4, 3, 3)), atol=1e-12)
    np.testing.assert_allclose(found["zz"], np.broadcast_to(own / 3, (4, 3, 3)), atol=1e-12)


@pytest.mark.parametrize("unit", [1e-9, 1e9])
def test_any_power_of_ten_of_the_energy_unit(unit):
    small = averages(ring(5, 1.0, value=unit), temperature=T * unit)["total"]
    np.testing.assert_allclose(small, averages(ring(5, 1.0))["total"], rtol=1e-10, atol=1e-12)


def test_too_large_is_refused_beforehand():
    with pytest.raises(MemoryLimitError, match="memory limit"):
        correlated_levels(thermo.read_model(ring(24).mapping()), memory="1 GiB")


#: Ground-state energies of rings, in J: Bethe's equations.
BETHE = {8: -3.651093409, 10: -4.515446354, 12: -5.387390917, 14: -6.263549534}


def test_cold_rings_approach_the_infinite_chain():
    """Bonds have Bethe's energy per site; second neighbours approach Takahashi's value
    1/4 - 4 ln 2 + (9/4) ζ(3) of the infinite chain (J. Phys. C 10, 1289 (1977); from memory)."""
    values = []
    for n, energy in BETHE.items():
        found = averages(ring(n), temperature=[1e-4])["total"][0]
        assert found[0, 1] == pytest.approx(energy / n, abs=1e-9)
        values.append([found[0, 1], found[0, 2]])
    powers = np.vander(1 / np.array(list(BETHE)) ** 2.0, 3)
    first, second = np.linalg.lstsq(powers, np.array(values), rcond=None)[0][-1]
    zeta3 = 1.2020569031595942
    assert first == pytest.approx(0.25 - np.log(2), rel=1e-4)
    # Logarithms in 1/N are left out of the fit.
    assert second == pytest.approx(0.25 - 4 * np.log(2) + 9 / 4 * zeta3, rel=1e-3)
