"""Sampled spectra against full ones: by the statistics of their error bars, never by a tolerance.

Seeds are fixed, so that a run either always passes or always fails; how far a statistic may
stray is set by its own scatter over the seeds.
"""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from scipy import stats

import thermo
from tests.pieces import equal
from tests.sampled_runs import curves_of, errors_of, exact_curves, sample, solver_of, tables
from tests.sampling import sectors_of
from tests.solving import lattice_mapping
from tests.strategies import Cluster, ring
from thermo.model.level_table import table_from_dataset
from thermo.spectrum.executors import Local
from thermo.spectrum.harvest import harvest

TEMPERATURES = [0.05, 0.1, 0.2, 0.35, 0.5, 0.7, 1.0, 2.0, 4.0]


def irregular(n: int, seed: int = 5, form="isotropic") -> Cluster:
    """No symmetry but what the form conserves: different couplings around a ring and across."""
    rng = np.random.default_rng(seed)
    pairs = [(i, (i + 1) % n) for i in range(n)] + [(i, (i + 4) % n) for i in range(0, n, 3)]
    couplings = {
        f"J{k}": round(float(v), 3) for k, v in enumerate(rng.uniform(0.5, 1.5, len(pairs)))
    }
    return Cluster(
        (0.5,) * n, tuple((i, j, f"J{k}", form) for k, (i, j) in enumerate(pairs)), couplings
    )


def anisotropic(n: int) -> Cluster:
    """An XXZ ring whose two couplings alternate."""
    form = ((1.0, 0.0, 0.0), (0.0, 1.0, 0.0), (0.0, 0.0, 1.6))
    bonds = tuple((i, (i + 1) % n, "J" if i % 2 else "K", form) for i in range(n))
    return Cluster((0.5,) * n, bonds, {"J": 1.0, "K": 0.6})


MIXED = Cluster(
    (0.5, 1.0, 0.5, 1.5, 1.0, 0.5, 1.0),
    (*((i, (i + 1) % 7, "J", "isotropic") for i in range(7)), (0, 3, "K", "isotropic")),
    {"J": 1.0, "K": 0.4}, ((3, "K", "axial"),),
)  # fmt: skip
TILTED = ("antisymmetric", (0.3, -0.5, 0.4))
CLUSTERS = {
    "ring": (ring(12), {"steps": 24}),
    "spin 1 ring": (ring(7, 1.0), {"steps": 30}),
    "spin 3/2 ring": (ring(5, 1.5), {"steps": 16}),
    "mixed spins": (MIXED, {"steps": 50, "full_below": 60}),
    "irregular": (irregular(10), {"steps": 50, "full_below": 50}),
    "unequal XXZ": (anisotropic(10), {"steps": 24}),
    "kagome": (lattice_mapping("kagome", [2, 2], {"nearest": 1.0}), {"steps": 30}),
    "M not conserved": (
        Cluster((0.5,) * 8, irregular(8).bonds + tuple(
            (i, (i + 1) % 8, "D", TILTED) for i in range(8)
        ), irregular(8).couplings | {"D": 0.3}),
        {"steps": 50},
    ),
}  # fmt: skip


def mapping_of(given) -> dict:
    return given.mapping() if isinstance(given, Cluster) else given


def check_statistics(found, seeds: int) -> None:
    """No bias, and as many bars that reach the truth as there should be.

    Where most seeds have nothing left to sample their bars are at the floor that rounding sets:
    they may then reach the truth too often, not too seldom.
    """
    noisy = np.median(np.abs(found.deviation), axis=0) / found.exact > 1e-10
    assert noisy.any()
    assert np.abs(found.bias[noisy]).max() < stats.t.ppf(1 - 1e-4, seeds - 1)
    # Of a share p of n seeds: p ± √(p(1−p)/n), four of which no seed should ever leave.
    allowed = 4 * (0.6827 * 0.3173 / seeds) ** 0.5
    assert np.abs(found.coverage[noisy] - 0.6827).max() < allowed
    assert found.coverage.min() > 0.6827 - allowed


@pytest.mark.parametrize("name", CLUSTERS)
def test_curves_and_their_bars_against_the_full_spectrum(name: str) -> None:
    given, choice = CLUSTERS[name]
    seeds = 16
    settings = {"vectors": 4, "full_below": 0, "trace_order": 6} | choice
    check_statistics(sample(mapping_of(given), TEMPERATURES, range(seeds), **settings), seeds)


@pytest.mark.long
@pytest.mark.timeout(1800)
@pytest.mark.parametrize(
    ("mapping", "choice", "seeds"),
    [
        (lattice_mapping("square", [4, 4], {"nearest": 1.0}), {"vectors": 2}, 60),
        (lattice_mapping("triangular", [3, 4], {"nearest": 1.0}), {"vectors": 4}, 60),
        (ring(16).mapping(), {"vectors": 2}, 60),
        (ring(8, 1.5).mapping(), {"vectors": 2, "full_below": 100, "steps": 100}, 30),
        (ring(10, 1.0).mapping(), {"vectors": 2, "full_below": 100, "steps": 100}, 30),
    ],
    ids=["square 16", "triangular 12", "ring 16", "spin 3/2 ring 8", "spin 1 ring 10"],
)
def test_larger_clusters_against_the_full_spectrum(mapping, choice, seeds) -> None:
    settings = {"full_below": 20, "steps": 80, "trace_order": 6} | choice
    check_statistics(sample(mapping, TEMPERATURES, range(seeds), **settings), seeds)


@pytest.mark.long
@pytest.mark.timeout(1800)
def test_18_sites_of_kagome_against_the_full_spectrum() -> None:
    mapping = lattice_mapping("kagome", [3, 2], {"nearest": 1.0})
    found = sample(mapping, TEMPERATURES, range(12), vectors=2, full_below=200, steps=200)
    check_statistics(found, 12)


# --- Coverage -----------------------------------------------------------------------------------


def check_coverage(found) -> None:
    assert found.coverage.shape == (2, 5)
    assert (found.noise > 1e-9).all()
    assert found.coverage.min() >= 0.62
    assert found.coverage.max() <= 0.74
    # Curves are ratios, so their bias is of second order in the noise: a part of it only.
    assert np.abs(found.deviation.mean(axis=0) / found.exact / found.noise).max() < 0.25


@pytest.mark.parametrize(("vectors", "seeds"), [(4, 600), (16, 300)])
def test_bars_cover_68_per_cent(vectors: int, seeds: int) -> None:
    """C and χ of an irregular cluster of eight, sampled in three sectors, at five temperatures."""
    found = sample(
        irregular(8).mapping(), [0.2, 0.35, 0.7, 1.0, 2.0], range(seeds),
        vectors=vectors, steps=16, full_below=30, trace_order=6,
    )  # fmt: skip
    check_coverage(found)


@pytest.mark.long
@pytest.mark.timeout(1800)
@pytest.mark.parametrize("vectors", [4, 16])
def test_bars_cover_68_per_cent_of_a_ring(vectors: int) -> None:
    """Many sectors, each with its own noise: a ring of 14."""
    seeds = 320
    found = sample(
        ring(14).mapping(), [0.2, 0.35, 0.5, 1.0, 2.0], range(seeds),
        vectors=vectors, steps=40, full_below=30, trace_order=6,
    )  # fmt: skip
    check_coverage(found)


# --- Each ingredient ------------------------------------------------------------------------------


@pytest.fixture(scope="module")
def pinned_noise():
    return sample(
        irregular(9).mapping(), [0.7, 1.0, 2.0, 4.0], range(40),
        vectors=4, steps=60, full_below=40, trace_order=6,
    ).noise  # fmt: skip


@pytest.mark.parametrize(
    "off",
    [
        {"exact_states": 0},
        {"trace_order": 0},
        {"exact_states": 0, "trace_order": 0},
        {"exact_states": 1, "trace_order": 2},
    ],
    ids=["no exact states", "no traces", "vectors alone", "one exact state, two traces"],
)
def test_without_an_ingredient_there_is_more_noise_and_no_bias(off, pinned_noise) -> None:
    """At temperatures where the ratio of two noisy sums has no bias of its own to speak of."""
    temperature, seeds = [0.7, 1.0, 2.0, 4.0], 40
    mapping = irregular(9).mapping()
    common = {"vectors": 4, "steps": 60, "full_below": 40, "trace_order": 6}
    found = sample(mapping, temperature, range(seeds), **common | off)
    check_statistics(found, seeds)
    assert (found.noise > pinned_noise).all()


def test_no_bias_at_the_lowest_temperatures() -> None:
    """T = 0.05 J: the ground states are exact, so every seed has C and χ there to rounding."""
    temperature = [0.02, 0.05]
    mapping = ring(12).mapping()
    exact = exact_curves(mapping, np.array(temperature))
    for table in tables(mapping, range(3), vectors=2, steps=60, full_below=0):
        assert np.abs(curves_of(table, np.array(temperature)) / exact - 1).max() < 1e-9


# --- The estimator itself ------------------------------------------------------------------------


def projections(solver, seed: int):
    """⟨r|f(H)|r⟩ of the first sampled sector as (Ritz values, weights) of each vector."""
    solver.settings = replace(solver.settings, seed=seed)
    magnetic = solver.plan.magnetic[0]
    piece = next(p for p in solver.pieces() if p.kind == "tile" and p.magnetic == 0)
    k, families = next(iter(solver.ritz(magnetic, {piece.key: solver.solve(piece)})))
    crop = harvest(families, magnetic.sectors[k].dimension, 2 * solver.half_width, 0)
    return crop.energy, crop.weight


@pytest.mark.parametrize("temperature", [0.5, 2.0])
def test_variance_of_one_vector(temperature: float) -> None:
    """For complex Gaussian r the variance of ⟨r|A|r⟩ is Tr A² (exact; Gaussian moments).

    Ours is normalised: n = ⟨r|r⟩ is independent of ⟨r|A|r⟩/n, and E n² = d(d+1), so that the
    variance of d·⟨r|A|r⟩/n is [d Tr A² − (Tr A)²]/(d+1). Times an independent n/d the
    unnormalised estimator comes back, with Tr A².
    """
    mapping = irregular(8).mapping()
    solver = solver_of(
        mapping, vectors=4, steps=30, full_below=0, exact_states=0, trace_order=0
    )  # fmt: skip
    energy = sectors_of(mapping)[0][2] / solver.unit
    d = len(energy)
    values = np.exp(-(energy - energy[0]) / temperature)
    first, second = values.sum(), np.sum(values**2)
    variance = (d * second - first**2) / (d + 1)
    found = np.array(
        [
            d * (w @ np.exp(-(e - energy[0]) / temperature))
            for seed in range(120)
            for e, w in zip(*projections(solver, seed), strict=True)
        ]
    )
    n = len(found)
    assert n == 480
    assert abs(found.mean() - first) < 3.5 * (variance / n) ** 0.5
    scatter = found.var(ddof=1)
    uncertain = np.std((found - found.mean()) ** 2) / n**0.5
    assert abs(scatter - variance) < 3.5 * uncertain
    # The unnormalised estimator: E n² = d(d+1) turns [V + (Tr A)²]·(d+1)/d − (Tr A)² into Tr A².
    unnormalised = (scatter + first**2) * (d + 1) / d - first**2
    assert abs(unnormalised - second) < 3.5 * uncertain * (d + 1) / d


def test_traces_are_held_exactly() -> None:
    mapping = ring(10).mapping()
    sectors = sectors_of(mapping)
    for table in tables(mapping, range(4), vectors=2, steps=12, full_below=0, trace_order=6):
        orders = table.sampling.orders
        assert orders.max() == 6
        energy = np.concatenate([np.repeat(e[None], 1, axis=0)[0] for _, _, e in sectors])
        weight = np.concatenate([np.full(len(e), g) for _, g, e in sectors])
        lowest = min(int(k) for k, g in zip(orders, range(len(orders)), strict=True)
                     if np.any(table.sampling.unit[table.sampling.group == g] >= 0))  # fmt: skip
        size = np.abs(energy).max()
        for k in range(lowest + 1):
            exact = weight @ (energy / size) ** k
            assert table.weight @ (table.energy / size) ** k == pytest.approx(
                exact, abs=1e-10 * weight.sum()
            )
        # And so for each |M| by itself, through its own order.
        for twice_m, order in zip(range(0, 11, 2), orders, strict=True):
            mine = table.twice_m == twice_m
            for k in range(int(order) + 1):
                exact = sum(g * np.sum((e / size) ** k) for m, g, e in sectors if m == twice_m)
                assert table.weight[mine] @ (table.energy[mine] / size) ** k == pytest.approx(
                    exact, abs=1e-10 * weight.sum()
                )


# --- What results may depend on ------------------------------------------------------------------

SAMPLED = {"method": "sampled", "vectors": 4, "steps": 30, "full_below": 20}


def same_levels(one, other) -> bool:
    return all(
        one[v].dtype == other[v].dtype and one[v].values.tobytes() == other[v].values.tobytes()
        for v in one.data_vars
    )


def test_threads_and_workers_change_nothing(monkeypatch) -> None:
    model = thermo.read_model(irregular(12).mapping())
    found = []
    for threads, executor in ((1, None), (2, None), (1, Local(1)), (2, Local(2)), (2, Local(1))):
        monkeypatch.setenv("PARTITA_THREADS", str(threads))
        found.append(thermo.solve(model, executor=executor, seed=3, **SAMPLED))
    assert (found[0]["vector"].values >= 0).sum() > 100
    for other in found[1:]:
        assert same_levels(found[0], other)


def test_a_seed_is_a_result() -> None:
    model = thermo.read_model(ring(12).mapping())
    one, again, other = (thermo.solve(model, seed=s, **SAMPLED) for s in (7, 7, 8))
    assert same_levels(one, again)
    assert one.sizes != other.sizes or not same_levels(one, other)


def test_vectors_are_keyed_by_seed_sector_and_number() -> None:
    """Vector 0 … 3 of a sector are the same whether there are four or eight, and sectors that
    others of the plan are sampled beside do not matter."""
    mapping = irregular(10).mapping()
    four = solver_of(mapping, vectors=4, steps=20, full_below=0, seed=5)
    eight = solver_of(mapping, vectors=8, steps=20, full_below=0, seed=5)
    fewer = solver_of(mapping, vectors=4, steps=20, full_below=130, seed=5)
    two = solver_of(mapping, vectors=2, steps=20, full_below=0, seed=5)
    for piece in four.pieces():
        if piece.kind == "tile":
            assert equal(four.solve(piece), eight.solve(piece))
    large = next(p for p in fewer.pieces() if p.kind == "tile")
    alone = fewer.solve(large)
    beside = four.solve(next(p for p in four.pieces() if p.magnetic == large.magnetic))
    assert alone["alpha"].shape == beside["alpha"].shape
    assert np.array_equal(alone["alpha"][:, :4], beside["alpha"][:, :4])
    # Two vectors travel in other company but are the first two of the four.
    first = two.solve(next(p for p in two.pieces() if p.kind == "tile"))
    whole = four.solve(next(p for p in four.pieces() if p.kind == "tile"))
    assert np.array_equal(first["alpha"][:, :2], whole["alpha"][:, :2])
    pair = first["alpha"][:, 2:4], whole["alpha"][:, 4:6]  # the next sector
    assert np.array_equal(*pair)


def test_the_dataset_and_the_table_are_the_same_levels() -> None:
    model = thermo.read_model(ring(10).mapping())
    levels = thermo.solve(model, seed=2, **SAMPLED)
    table = table_from_dataset(levels)
    own = tables(ring(10).mapping(), [2], vectors=4, steps=30, full_below=20)[0]
    temperature = np.array([0.3, 1.0])
    assert np.array_equal(curves_of(table, temperature), curves_of(own, temperature))
    assert np.allclose(errors_of(table, temperature), errors_of(own, temperature), rtol=1e-9)


def test_full_below_everything_is_the_full_spectrum() -> None:
    mapping = MIXED.mapping()
    temperature = np.array(TEMPERATURES)
    (table,) = tables(mapping, [1], full_below=10**6)
    assert curves_of(table, temperature) == pytest.approx(
        exact_curves(mapping, temperature), rel=1e-10
    )
