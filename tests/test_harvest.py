"""Exact levels from random recursions: eigenvalues with the right degeneracies, never others."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

import thermo
from tests.naive_sampling import several_lanczos
from tests.solving import lattice_mapping
from tests.strategies import Cluster, complete, ring
from thermo.spectrum import sampling_plan
from thermo.spectrum.harvest import Harvest, harvest, ritz_pairs
from thermo.spectrum.sampled import SampledSolver
from thermo.spectrum.settings import Settings

# Exact levels are right to this share of the spectrum's width.
EXACT = 1e-11


def crop_of(energy, counts, vectors, steps, seed, families=1, largest=None, width=None):
    """Harvest a diagonal matrix with the given eigenvalues; also each vector's true shares of
    the eigenspaces, (R, n)."""
    rng = np.random.default_rng(seed)
    diagonal = np.repeat(energy, counts)
    edges = np.concatenate([[0], np.cumsum(counts)[:-1]])
    found, shares = [], []
    for _ in range(families):
        r, alpha, beta, dots = several_lanczos(diagonal, vectors, steps, rng)
        found.append([ritz_pairs(alpha[:, k], beta[:, k], dots[:, :, k]) for k in range(vectors)])
        shares.append(np.add.reduceat(np.abs(r) ** 2, edges, axis=1))
    width = energy.max() - energy.min() if width is None else width
    return harvest(found, len(diagonal), width, largest), np.concatenate(shares)


def check_exact(crop: Harvest, energy, counts, accuracy=EXACT) -> None:
    width = energy.max() - energy.min()
    for level, g in zip(crop.exact, crop.degeneracy, strict=True):
        nearest = int(np.argmin(np.abs(energy - level)))
        assert abs(energy[nearest] - level) < accuracy * width
        assert g == counts[nearest], (level, g, counts[nearest])
    assert len(np.unique(crop.exact)) == len(crop.exact)
    for weight in crop.weight:
        assert (weight >= 0).all()
        assert weight.sum() == pytest.approx(1, abs=1e-12) or (weight == 0).all()


@pytest.mark.parametrize(
    ("vectors", "families", "levels", "steps", "seeds"),
    [
        (2, 1, 60, 60, 40),
        (2, 1, 25, 200, 40),
        (3, 1, 60, 90, 30),
        (4, 1, 60, 400, 12),
        (4, 1, 200, 120, 12),
        (4, 2, 60, 100, 12),
    ],
)
def test_degeneracies_are_right_for_every_seed(vectors, families, levels, steps, seeds):
    certain = 0
    for seed in range(seeds):
        rng = np.random.default_rng(seed)
        energy = np.sort(rng.normal(size=levels))
        counts = rng.choice([1, 1, 2, 3, 4, 6], size=levels)
        crop, _ = crop_of(energy, counts, vectors, steps, seed, families)
        check_exact(crop, energy, counts)
        # What only the number of vectors could tell from more is never claimed.
        assert (crop.degeneracy < vectors).all()
        certain += len(crop.exact)
    assert certain > 2 * seeds


@pytest.mark.parametrize("vectors", [2, 3, 4])
def test_the_whole_of_a_small_space_is_found(vectors):
    """60 states and 400 steps: ghosts of ghosts, and every level that can be told is there."""
    for seed in range(8):
        rng = np.random.default_rng(seed)
        energy = np.sort(rng.normal(size=30))
        counts = np.tile([1, 2, 3], 10)
        crop, shares = crop_of(energy, counts, vectors, 400, seed)
        check_exact(crop, energy, counts)
        left = counts >= vectors
        assert len(crop.exact) == (~left).sum()
        if not left.any():  # rounding is all the vectors have left, and it stands for no state
            continue
        for v in range(vectors):
            # Ghosts share the weight of the level that they copy: none is lost or made.
            place = np.abs(crop.energy[v][:, None] - energy[left]).argmin(axis=1)
            sums = np.bincount(place, crop.weight[v], minlength=left.sum())
            expected = shares[v][left] / shares[v][left].sum()
            assert np.abs(sums - expected).max() < 1e-9
            strong = crop.weight[v] > 1e-9
            nearest = np.abs(crop.energy[v][:, None] - energy).min(axis=1)
            assert nearest[strong].max() < 1e-9


def test_weights_of_unconverged_vectors_are_what_the_vector_has_left():
    """Sums over the rest: ⟨r|H^k|r⟩ without the exact states, from the vectors themselves."""
    for seed in range(10):
        rng = np.random.default_rng(seed)
        energy = np.sort(rng.normal(size=150))
        counts = rng.choice([1, 2, 3], size=150)
        crop, shares = crop_of(energy, counts, 4, 70, seed)
        assert 0 < len(crop.exact) < 100
        taken = np.abs(energy[:, None] - crop.exact).min(axis=1) < 1e-9
        for v in range(4):
            rest = np.where(taken, 0, shares[v])
            rest /= rest.sum()
            for k in range(12):
                assert crop.weight[v] @ crop.energy[v] ** k == pytest.approx(
                    rest @ energy**k, rel=1e-8, abs=1e-8
                )


@pytest.mark.parametrize("splitting", [1e-12, 1e-10, 1e-9, 1e-8, 1e-7, 1e-6])
@pytest.mark.parametrize("steps", [50, 120, 300])
def test_levels_that_nearly_coincide(splitting, steps):
    """Pairs closer than can be told count as one level of both; farther ones as themselves."""
    for vectors in (2, 3, 4):
        for seed in range(6):
            rng = np.random.default_rng(seed)
            base = np.sort(rng.normal(size=40))
            energy = np.sort(np.concatenate([base, base[::4] + splitting * np.ptp(base)]))
            counts = np.ones(len(energy), dtype=int)
            width = np.ptp(energy)
            crop, _ = crop_of(energy, counts, vectors, steps, seed)
            # The levels that a certified one stands for lie within what counts as the same.
            total = 0
            for level, g in zip(crop.exact, crop.degeneracy, strict=True):
                near = np.abs(energy - level) < 2.1e-8 * width
                close = np.abs(energy - level) < max(1e-10, 1.1 * splitting) * width
                assert g in (near.sum(), 1)
                assert close.any()
                if g == 1 and near.sum() > 1:  # then it is one of them, told from the other
                    assert np.abs(energy - level).min() < 1e-10 * width
                total += g
            assert len(np.unique(crop.exact)) == len(crop.exact)
            # No state counted twice: each window of levels holds at least what is claimed of it.
            for level in crop.exact:
                here = np.abs(crop.exact - level) < 3e-8 * width
                there = np.abs(energy - level) < 3e-8 * width
                assert crop.degeneracy[here].sum() <= there.sum()


def test_the_number_of_exact_states_is_kept_to():
    energy = np.sort(np.random.default_rng(1).normal(size=80))
    counts = np.ones(80, dtype=int)
    everything, _ = crop_of(energy, counts, 3, 80, 1)
    assert len(everything.exact) > 12
    middle = 0.5 * (energy[0] + energy[-1])
    for largest in (0, 1, 3, 1000):
        crop, _ = crop_of(energy, counts, 3, 80, 1, largest=largest)
        low, high = crop.exact[crop.exact <= middle], crop.exact[crop.exact > middle]
        whole_low = everything.exact[everything.exact <= middle]
        whole_high = everything.exact[everything.exact > middle]
        assert np.array_equal(np.sort(low), np.sort(whole_low)[:largest])
        assert np.array_equal(np.sort(high)[::-1], np.sort(whole_high)[::-1][:largest])
    none, shares = crop_of(energy, counts, 3, 80, 1, largest=0)
    assert len(none.exact) == 0
    assert none.weight[0] @ none.energy[0] == pytest.approx(shares[0] @ energy, abs=1e-12)


def test_one_vector_takes_nothing():
    """Its Gram matrix has rank 1 whatever the degeneracy."""
    energy = np.sort(np.random.default_rng(2).normal(size=50))
    crop, _ = crop_of(energy, np.ones(50, dtype=int), 1, 50, 2)
    assert len(crop.exact) == 0


def test_spaces_of_one_and_two_states():
    for counts in ([1], [1, 1], [2], [3, 1]):
        energy = np.array([-1.0, 2.0])[: len(counts)]
        counts = np.array(counts)
        diagonal = np.repeat(energy, counts)
        rng = np.random.default_rng(3)
        steps = len(counts)  # what the kernel takes before it says that the space is complete
        r, alpha, beta, dots = several_lanczos(diagonal, 2, steps, rng)
        beta[-1] = 0.0
        pairs = [ritz_pairs(alpha[:, k], beta[:, k], dots[:, :, k]) for k in range(2)]
        crop = harvest([pairs], len(diagonal), 3.0)
        single = counts == 1
        assert crop.exact == pytest.approx(energy[single], abs=1e-14)
        assert (crop.degeneracy == 1).all()
        assert r.shape == (2, len(diagonal))


# --- Clusters whose sectors carry degenerate levels ------------------------------------------

CLUSTERS = {
    "free spins": Cluster((0.5,) * 6, ((0, 1, "J", "isotropic"),), {"J": 1.0}),
    "complete graph": complete(8),
    "kagome": lattice_mapping("kagome", [2, 2], {"nearest": 1.0}),
    "honeycomb": lattice_mapping("honeycomb", [2, 2], {"nearest": 1.0}),
    "square": lattice_mapping("square", [3, 3], {"nearest": 1.0}),
    "spin 1": ring(6, 1.0),
}


def sector_levels(solver: SampledSolver):
    """(key, energies ascending) of every sector by the path of full spectra, in solver units."""
    for index, magnetic in enumerate(solver.plan.magnetic):
        structure = solver._full.structure(magnetic)
        for k, sector in enumerate(magnetic.sectors):
            energy = solver._full.solve_block(sector, magnetic, structure, solver.tables, 1, False)
            yield (index, k), np.sort(energy[0])


def check_cluster(mapping, vectors, steps, seeds) -> tuple[int, int]:
    """Every exact level of every sector; how many were certain, and the largest degeneracy."""
    model = thermo.read_model(mapping)
    settings = Settings(vectors=vectors, steps=steps, full_below=0, trace_order=0)
    solver = SampledSolver(model, settings)
    known = dict(sector_levels(solver))
    certain, largest = 0, 0
    for seed in seeds:
        solver.settings = replace(settings, seed=seed)
        results = {p.key: solver.solve(p) for p in solver.pieces() if p.kind == "tile"}
        for index, magnetic in enumerate(solver.plan.magnetic):
            for k, families in solver.ritz(magnetic, results):
                width = 2 * solver.half_width
                crop = harvest(families, magnetic.sectors[k].dimension, width)
                energy = known[index, k]
                for level, g in zip(crop.exact, crop.degeneracy, strict=True):
                    assert np.abs(energy - level).min() < 1e-12 * width
                    assert np.sum(np.abs(energy - level) < 1e-9 * width) == g
                certain += len(crop.exact)
                largest = max(largest, int(crop.degeneracy.max(initial=0)))
    return certain, largest


@pytest.mark.parametrize("name", CLUSTERS)
@pytest.mark.parametrize(("vectors", "steps"), [(2, 30), (4, 60), (8, 40)])
def test_exact_levels_of_clusters(name, vectors, steps):
    given = CLUSTERS[name]
    mapping = given.mapping() if isinstance(given, Cluster) else given
    certain, largest = check_cluster(mapping, vectors, steps, range(2))
    assert certain > 0
    if name in ("free spins", "complete graph", "kagome") and vectors > 2:
        assert largest > 1


def test_families_keep_their_size_beside_each_other():
    """Eight vectors are two families of four: a level must be certain in both."""
    model = thermo.read_model(complete(8).mapping())
    plan = SampledSolver(model, Settings(vectors=8, full_below=0, trace_order=0))
    assert (plan.family, plan.families, plan.vectors) == (4, 2, 8)
    assert sampling_plan.family_size(3) == 3


@pytest.mark.long
@pytest.mark.parametrize("name", ["kagome", "square 4x4", "complete graph"])
def test_exact_levels_of_clusters_for_many_seeds(name):
    mapping = (
        lattice_mapping("square", [4, 4], {"nearest": 1.0})
        if name == "square 4x4"
        else CLUSTERS[name].mapping()
        if name == "complete graph"
        else CLUSTERS[name]
    )
    for vectors in (2, 3, 4):
        certain, _ = check_cluster(mapping, vectors, 120, range(25))
        assert certain > 500
