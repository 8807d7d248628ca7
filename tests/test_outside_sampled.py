"""Sampled spectra against values from outside: Bethe equations, series, free fermions, Ising."""

from __future__ import annotations

import mpmath
import numpy as np
import pytest
from mpmath import mpf

import thermo
from tests import references as ref
from tests.sampled_runs import solver_of
from tests.solving import lattice_mapping
from tests.strategies import ring
from thermo.ensemble.canonical import cluster_curves
from thermo.ensemble.jackknife import cluster_errors
from thermo.model.level_table import table_from_dataset
from thermo.spectrum.harvest import harvest, ritz_pairs

# --- Ground states of rings -----------------------------------------------------------------


def ground_state(sites: int, steps: int) -> float:
    """Lowest exact level of M = 0 among the momenta 0 and π, the only ones that stand alone."""
    solver = solver_of(ring(sites).mapping(), vectors=2, steps=steps, full_below=0)
    index = next(k for k, m in enumerate(solver.plan.magnetic) if m.twice_m == 0)
    magnetic = solver.plan.magnetic[index]
    alone = [k for k, tile in enumerate(solver.tiles(magnetic)) if any(s.star == 1 for s in tile)]
    levels = []
    for piece in solver.pieces():
        if piece.kind != "tile" or piece.magnetic != index or piece.index not in alone:
            continue
        found = solver.solve(piece)
        for position, sector in enumerate(solver.tiles(magnetic)[piece.index]):
            members = []
            for k in (2 * position, 2 * position + 1):
                n = int(found["length"][k])
                members.append(
                    ritz_pairs(found["alpha"][:n, k], found["beta"][:n, k], found["dots"][:n, :, k])
                )
            crop = harvest([members], sector.dimension, 2 * solver.half_width)
            lowest = min(m.value[0] for m in members)
            if len(crop.exact):
                levels.append(crop.exact[0])
                assert crop.exact[0] < lowest + 1e-6  # nothing below the exact ones
    return min(levels) * solver.unit


@pytest.mark.parametrize("sites", [16, 18, 20, 22, 24])
def test_ring_ground_states_from_the_bethe_equations(sites: int) -> None:
    """Bethe, Z. Phys. 71, 205 (1931); solved here to sixteen digits."""
    energy = ground_state(sites, 120)
    exact = ref.bethe_ground_state(sites)
    assert exact == pytest.approx(ref.RING_GROUND_STATES[sites], abs=1e-9)
    assert energy == pytest.approx(exact, abs=1e-9)


@pytest.mark.long
@pytest.mark.timeout(1800)
@pytest.mark.parametrize("sites", [26, 28])
def test_ground_states_of_larger_rings(sites: int) -> None:
    assert ground_state(sites, 150) == pytest.approx(ref.bethe_ground_state(sites), abs=1e-9)


# --- Curves of twenty sites ------------------------------------------------------------------


class Curves:
    """C, χT and ln Z of a cluster with their errors at temperatures, from one seed."""

    def __init__(self, mapping, temperature, **settings):
        levels = thermo.solve(thermo.read_model(mapping), method="sampled", **settings)
        assert (levels["vector"].values >= 0).sum() > 100
        table = table_from_dataset(levels)
        t = np.asarray(temperature, dtype=float)
        found = cluster_curves(table, t, np.zeros(1))
        error = cluster_errors(table, t, np.zeros(1))
        self.heat, self.heat_error = found.specific_heat[:, 0], error.specific_heat[:, 0]
        self.chi_t, self.chi_t_error = found.moment_variance[:, 0], error.moment_variance[:, 0]
        self.log_z = -found.free_energy[:, 0] / t
        self.log_z_error = error.free_energy[:, 0] / t


def check_within(found, error, exact, most=0.01) -> None:
    """Within the bars as bars go, and not because they are wide."""
    z = (found - exact) / error
    assert np.abs(z).max() < 4
    assert np.sqrt(np.mean(z**2)) < 2
    assert (error / np.abs(exact)).max() < most


COLD = np.array([0.1, 0.2, 0.3, 0.5, 0.7, 1.0, 2.0, 5.0])


@pytest.fixture(scope="module")
def heisenberg_ring():
    temperature = np.array([2.0, 2.5, 3.0, 4.0, 6.0, 10.0])
    return temperature, Curves(ring(20).mapping(), temperature)


def test_chain_series_to_the_eleventh_order(heisenberg_ring) -> None:
    """A ring of 20 carries the infinite chain's series below K^20; what is cut off after K^11 is
    taken to be at most twice the last term that is known, from T = 2 J on."""
    temperature, found = heisenberg_ring
    k = 1 / temperature
    for value, error, series in (
        (4 * found.chi_t / 20, 4 * found.chi_t_error / 20, ref.CHAIN_CHI_SERIES),
        (found.heat / 20, found.heat_error / 20, ref.CHAIN_C_SERIES),
    ):
        exact = sum(float(c) * k**n for n, c in enumerate(series))
        last = max(abs(float(c)) * 2.0**-n for n, c in enumerate(series) if n > 8)
        cut = 2 * last * (2 * k) ** 12
        assert (np.abs(value - exact) < 4 * error + cut + 1e-13).all()
        assert (4 * error + cut < 1e-3 * np.abs(exact)).all()


def test_square_lattice_series_to_the_fifth_order() -> None:
    """20 sites, superlattice (4, 2), (−2, 4): the shortest way around is 6 bonds, so graphs of up
    to five bonds fit as they do on the infinite lattice, and K⁵ is right in ln Z and in χ; of K⁶,
    closed rings around the torus are new. Series: linked clusters, redone elsewhere.

    What is cut off is K⁶ times a coefficient that is read off at T = 50 J, doubled.
    """
    temperature = np.array([2.0, 2.5, 3.0, 4.0, 6.0, 10.0, 20.0, 50.0])
    k = 1 / temperature
    mapping = lattice_mapping("square", [[4, 2], [-2, 4]], {"nearest": 1.0})
    found = Curves(mapping, temperature)
    for value, error, series in (
        (found.log_z / 20 - np.log(2), found.log_z_error / 20, ref.SQUARE_LOG_Z_SERIES),
        (4 * found.chi_t / 20, 4 * found.chi_t_error / 20, ref.SQUARE_CHI_SERIES),
    ):
        missing = value - sum(float(c) * k**n for n, c in enumerate(series[:6]))
        # At T = 20 J the rest is K⁶ and little else: of order one, and it does not grow upwards,
        # as a wrong coefficient of any order up to five would make it.
        sixth = missing * temperature**6
        assert abs(sixth[-2]) < 0.2
        assert abs(sixth[-2] - sixth[-3]) < 0.5 * abs(sixth[-2]) + 0.02
        cut = 2 * max(abs(sixth[-2]), abs(float(series[6]))) * k**6
        assert (np.abs(missing) < 4 * error + cut + 1e-13).all()


def test_xx_ring_of_20_from_free_fermions() -> None:
    """Lieb, Schultz and Mattis 1961; Katsura 1962: exact for the ring."""
    found = Curves(ring(20, 0.5, "xy").mapping(), COLD)
    rows = [ref.in_field(lambda x, h: ref.xx_ring_log_z(20, x, h), t, 0.0) for t in COLD]
    heat = np.array([r["specific_heat"] for r in rows])
    chi_t = np.array([r["susceptibility"] for r in rows]) * COLD
    check_within(found.heat, found.heat_error, heat)
    check_within(found.chi_t, found.chi_t_error, chi_t)


def test_ising_ring_in_closed_form() -> None:
    """Every level is highly degenerate, so that nothing can be taken as exact; Ising 1925."""
    sites, temperature = 16, np.array([0.2, 0.5, 1.0, 2.0])
    found = Curves(ring(sites, 0.5, "ising").mapping(), temperature, vectors=4, full_below=100)
    with mpmath.workdps(ref.DIGITS):
        log_z = np.array([float(ref.ising_ring_log_z(sites, 1 / mpf(t))) for t in temperature])
        rows = [
            ref.in_field(lambda x, h: ref.ising_ring_log_z(sites, x, h), t, 0.0)
            for t in temperature
        ]
    heat = np.array([r["specific_heat"] for r in rows])
    chi_t = np.array([r["susceptibility"] for r in rows]) * temperature
    check_within(found.log_z, found.log_z_error, log_z)
    check_within(found.heat, found.heat_error, heat, most=0.1)
    check_within(found.chi_t, found.chi_t_error, chi_t, most=0.1)
