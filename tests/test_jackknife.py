"""Error bars of sampled curves: against replicates computed anew, and against the truth."""

from __future__ import annotations

import dataclasses

import numpy as np
import pytest

from tests import naive_sampling
from tests.sampling import extent, full_table, sampled_table, sectors_of, table_of
from tests.solving import lattice_mapping
from thermo.ensemble.canonical import cluster_curves
from thermo.ensemble.jackknife import cluster_errors, why_no_errors

NAMES = (
    "internal_energy", "free_energy", "entropy", "specific_heat", "moment", "moment_variance",
)  # fmt: skip
T = np.array([0.02, 0.3, 1.0, 3.0, 20.0])
H = np.array([-0.7, 0.0, 1e-4, 2.0])


def invented(seed, sizes=((0, 1, 60), (0, 2, 50), (2, 2, 70), (2, 4, 40), (4, 2, 30))):
    return naive_sampling.invented_sectors(np.random.default_rng(seed), sizes)


def stacked(found):
    return np.array([getattr(found, name) for name in NAMES])


def naive_errors(sectors, levels, unit_sector, table, t, h):
    center, scale = extent(sectors)
    present = sorted({m for m, _, _ in sectors})
    highest = table.sampling.moments.shape[1] - 1
    moments = {m: naive_sampling.exact_moments(sectors, m, center, scale, highest) for m in present}
    degrees = dict(zip(present, table.sampling.orders.tolist(), strict=True))
    for m in present:
        if not np.any(levels["unit"][levels["twice_m"] == m] >= 0):
            degrees[m] = -1
    return naive_sampling.jackknife(levels, unit_sector, moments, center, scale, degrees, t, h)


@pytest.mark.parametrize(
    ("vectors", "order", "choice"),
    [
        (2, 6, {}),
        (3, 6, {"exact_low": 12}),
        (4, 3, {"full_below": 40}),
        (2, 0, {"full_below": 60, "exact_low": 5}),
    ],
)
def test_every_replicate_computed_anew_gives_the_same_errors(vectors, order, choice):
    sectors = invented(5)
    levels, unit_sector = naive_sampling.sampled_levels(
        sectors, vectors, np.random.default_rng(3), **choice
    )
    table = table_of(levels, unit_sector, sectors, order)
    assert np.any(table.sampling.orders >= min(order, 4))
    fast = stacked(cluster_errors(table, T, H))
    curves = stacked(cluster_curves(table, T, H))
    for i, t in enumerate(T):
        for b, h in enumerate(H):
            slow = naive_errors(sectors, levels, unit_sector, table, t, h)
            # Differences of curves computed anew lose what rounding takes from energies near 5,
            # from ⟨M⟩ as a sum of terms near 1, and from the curves themselves.
            terms = np.array([5, 5, 5 / t, 0, 1, 0])
            rounding = 1e-14 * terms + 1e-12 * np.abs(curves[:, i, b]) + 1e-25
            np.testing.assert_array_less(
                np.abs(fast[:, i, b] - slow), 1e-6 * slow + rounding, err_msg=f"{t} {h}"
            )
