"""Error bars of sampled curves: against replicates computed anew, and against the truth."""

from __future__ import annotations

import dataclasses

import numpy as np
import pytest

import thermo
from tests import naive_sampling
from tests.sampling import extent, full_table, sampled_table, sectors_of, table_of
from tests.solving import lattice_mapping
from thermo.ensemble import jackknife
from thermo.ensemble.accuracy import temperature_range, worst_error
from thermo.ensemble.canonical import cluster_curves
from thermo.ensemble.jackknife import cluster_errors, why_no_errors
from thermo.errors import RangeError

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
def test_every_replicate_computed_anew_gives_the_same_errors(monkeypatch, vectors, order, choice):
    for floor in ("_LEVEL_ROUNDING", "_CURVE_ROUNDING"):
        monkeypatch.setattr(jackknife, floor, 0.0)
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


def test_other_chunks_of_temperature_change_nothing(monkeypatch):
    table = sampled_table(invented(5), 3, 1)
    whole = stacked(cluster_errors(table, T, H))
    monkeypatch.setattr(jackknife, "_CHUNK", 1)
    # At the highest temperature the error is 10⁻¹¹ of the sums it comes from.
    np.testing.assert_allclose(stacked(cluster_errors(table, T, H)), whole, rtol=1e-9, atol=1e-14)


def test_exact_levels_have_no_errors():
    sectors = invented(5)
    assert cluster_errors(full_table(sectors), T, H) is None
    table = sampled_table(sectors, 2, 1, full_below=1000)
    assert cluster_errors(table, T, H) is None
    assert why_no_errors(table) is None
    assert worst_error(table, 0.1, 10) == 0


def test_one_vector_has_no_error_bar_and_says_why():
    table = sampled_table(invented(5), 1, 1)
    assert np.isnan(stacked(cluster_errors(table, T, H))).all()
    assert "vectors=2" in why_no_errors(table)
    assert worst_error(table, 0.1, 10) == np.inf
    assert why_no_errors(sampled_table(invented(5), 2, 1)) is None


def test_one_sector_of_one_vector_spoils_all():
    """Its scatter is not known, so no curve's is."""
    sectors = invented(5)
    levels, unit_sector = naive_sampling.sampled_levels(sectors, 2, np.random.default_rng(1))
    gone = levels["unit"] == 3
    levels = {name: values[~gone] for name, values in levels.items()}
    levels["unit"] = np.where(levels["unit"] > 3, levels["unit"] - 1, levels["unit"])
    levels["raw"][levels["unit"] == 2] *= 2
    table = table_of(levels, np.delete(unit_sector, 3), sectors)
    assert np.isnan(stacked(cluster_errors(table, T, H))).all()


def test_a_sector_that_left_only_exact_levels_does_not_count():
    """All states of a sampled sector may have been harvested: its units have no levels."""
    sectors = invented(5)
    levels, unit_sector = naive_sampling.sampled_levels(
        sectors, 2, np.random.default_rng(1), full_below=40
    )
    table = table_of(levels, unit_sector, sectors)
    longer = dataclasses.replace(
        table,
        sampling=dataclasses.replace(
            table.sampling, unit_sector=np.append(table.sampling.unit_sector, [3])
        ),
    )
    np.testing.assert_allclose(
        stacked(cluster_errors(longer, T, H)), stacked(cluster_errors(table, T, H)), rtol=1e-12
    )


def test_turned_over_and_scaled_tables_keep_their_errors():
    table = sampled_table(invented(5), 3, 1, exact_low=3)
    plain = cluster_errors(table, T, H)
    wide = cluster_errors(table.scaled(50.0), 50 * T, 50 * H)
    np.testing.assert_allclose(wide.specific_heat, plain.specific_heat, rtol=1e-8, atol=1e-15)
    np.testing.assert_allclose(wide.internal_energy, 50 * plain.internal_energy, rtol=1e-6)
    np.testing.assert_allclose(wide.moment_variance, plain.moment_variance, rtol=1e-8, atol=1e-14)
    twice = cluster_errors(table.upside_down().upside_down(), T, H)
    np.testing.assert_allclose(stacked(twice), stacked(plain), rtol=1e-6)
    over = cluster_errors(table.upside_down(), np.array([1e5]), np.zeros(1))
    hot = cluster_errors(table, np.array([1e5]), np.zeros(1))
    np.testing.assert_allclose(over.internal_energy, hot.internal_energy, rtol=1e-3)


def test_errors_are_not_below_rounding():
    """Where exact levels alone are populated vectors agree to all digits, levels do not."""
    table = sampled_table(invented(5), 2, 1, exact_low=20)
    t, h = np.array([0.01]), np.zeros(1)
    error, curve = cluster_errors(table, t, h), cluster_curves(table, t, h)
    width = np.ptp(table.energy)
    assert error.specific_heat[0, 0] >= 1e-14 * width / t[0] * curve.specific_heat[0, 0]
    assert error.specific_heat[0, 0] <= 1e-10 * curve.specific_heat[0, 0]


def test_a_replicate_that_cannot_be_calibrated_is_linearised():
    """Two vectors of five levels: one alone has fewer levels than traces to meet."""
    sectors = invented(7, ((0, 1, 5), (0, 1, 60)))
    small = naive_sampling.invented_sectors(np.random.default_rng(2), ((0, 1, 4),))
    lone = [*small, (2, 2, np.linspace(-2, 2, 9))]
    for case in (sectors, lone):
        table = sampled_table(case, 2, 3)
        errors = stacked(cluster_errors(table, T[1:], H))
        assert np.isfinite(errors).all()


def test_the_worst_error_is_that_of_the_curves():
    table = sampled_table(invented(5), 4, 1)
    t = np.geomspace(0.5, 5.0, 400)
    curve, error = (f(table, t, np.zeros(1)) for f in (cluster_curves, cluster_errors))
    heat = (error.specific_heat / curve.specific_heat).max()
    chi = (error.moment_variance / curve.moment_variance).max()
    assert worst_error(table, 0.5, 5.0) == pytest.approx(max(heat, chi), rel=0.02)
    assert worst_error(table, 5.0, 5.0) < worst_error(table, 0.5, 5.0)


def test_the_range_of_an_accuracy():
    model = thermo.read_model(
        lattice_mapping("chain", [4], {"nearest": 3.0}) | {"energy_unit": "meV"}
    )
    low, high = temperature_range(model)
    assert (low, high) == pytest.approx((0.3, 30.0))
    # CODATA: 1 meV is 11.60451812 K.
    assert temperature_range(model, (11.60451812, 23.2)) == pytest.approx((1.0, 2.0), rel=1e-3)
    for wrong in ((2.0, 1.0), (0.0, 1.0), (1.0,), "hot", (1.0, np.inf), (np.nan, 1.0)):
        with pytest.raises(RangeError, match="give"):
            temperature_range(model, wrong)


RING = lattice_mapping("chain", [12], {"nearest": 1.0})
# An invented cluster without any symmetry but M: few sectors, so few degrees of freedom.
LOPSIDED = {
    "format": 1,
    "title": "no symmetry",
    "energy_unit": "1",
    "bond_term": "+J S.S",
    "couplings": {f"J{k}": j for k, j in enumerate((1.0, 0.7, 0.4, 1.2, 0.9, 0.5, 0.8, 1.1))},
    "site": [{"name": f"s{i}", "spin": 0.5} for i in range(8)],
    "bond": [
        {"sites": [f"s{i}", f"s{j}"], "coupling": f"J{k}"}
        for k, (i, j) in enumerate(((0, 1), (1, 2), (2, 3), (3, 4), (4, 5), (5, 6), (6, 7), (1, 5)))
    ],
}
COVERED_AT = np.array([0.2, 0.5, 1.0, 3.0])


def coverage(mapping, vectors, seeds, **choice):
    """Share of seeds whose error bar covers the exact value, (6, nT)."""
    sectors = sectors_of(mapping)
    field = np.array([0.5])
    exact = stacked(cluster_curves(full_table(sectors), COVERED_AT, field))[..., 0]
    z = []
    for seed in range(seeds):
        table = sampled_table(sectors, vectors, seed, **choice)
        curve = cluster_curves(table, COVERED_AT, field)
        error = stacked(cluster_errors(table, COVERED_AT, field, curve))[..., 0]
        z.append((stacked(curve)[..., 0] - exact) / error)
    return np.mean(np.abs(z) <= 1, axis=0)


def check_coverage(covered, low, high, seeds):
    # Three standard deviations of a share of so many seeds, one way or the other, on top.
    slack = 3 * np.sqrt(0.68 * 0.32 / seeds)
    assert covered.min() > low - slack, covered.round(3)
    assert covered.max() < high + slack, covered.round(3)
    assert low < covered.mean() < high, covered.mean()


@pytest.mark.parametrize("vectors", [2, 4])
def test_error_bars_cover_the_truth_in_two_of_three(vectors):
    seeds = 300
    choice = {"full_below": 24, "exact_low": 6}
    check_coverage(coverage(RING, vectors, seeds, **choice), 0.65, 0.71, seeds)


@pytest.mark.long
@pytest.mark.parametrize("vectors", [2, 4, 16])
@pytest.mark.parametrize("order", [0, 6])
@pytest.mark.parametrize("exact_low", [0, 6])
def test_error_bars_cover_the_truth_over_a_thousand_seeds(vectors, order, exact_low):
    seeds = 1000
    choice = {"full_below": 24, "order": order, "exact_low": exact_low}
    check_coverage(coverage(RING, vectors, seeds, **choice), 0.65, 0.71, seeds)


@pytest.mark.long
@pytest.mark.parametrize("vectors", [2, 4, 16])
@pytest.mark.parametrize("order", [0, 6])
def test_error_bars_cover_the_truth_with_few_sectors(vectors, order):
    seeds = 1000
    choice = {"full_below": 8, "order": order, "exact_low": 3}
    check_coverage(coverage(LOPSIDED, vectors, seeds, **choice), 0.64, 0.72, seeds)


def test_bars_without_students_factor_cover_too_little(monkeypatch):
    """Why the factor is there: five sectors of two vectors each."""
    seeds = 300
    choice = {"full_below": 8, "exact_low": 3}
    assert coverage(LOPSIDED, 2, seeds, **choice).mean() > 0.62
    monkeypatch.setattr("scipy.special.stdtrit", lambda nu, p: np.ones_like(nu))
    assert coverage(LOPSIDED, 2, seeds, **choice).mean() < 0.60
