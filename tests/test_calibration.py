"""Weights of sampled levels against exact traces."""

from __future__ import annotations

import dataclasses

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from tests import naive_sampling
from tests.sampling import extent, full_table, sampled_table
from thermo.ensemble.canonical import cluster_curves
from thermo.errors import SpectrumError
from thermo.model.calibration import (
    NEGLIGIBLE,
    calibrate,
    calibrated_table,
    chebyshev_moments,
    trace_misfit,
)

SIZES = ((0, 1, 80), (0, 2, 60), (2, 2, 90), (4, 4, 30))


def invented(seed, sizes=SIZES):
    return naive_sampling.invented_sectors(np.random.default_rng(seed), sizes)


def one_group(seed, vectors=2, **choice):
    sectors = invented(seed, ((2, 2, 90), (2, 4, 70)))
    levels, _ = naive_sampling.sampled_levels(
        sectors, vectors, np.random.default_rng(seed), **choice
    )
    center, scale = extent(sectors)
    moments = naive_sampling.exact_moments(sectors, 2, center, scale, 6)
    return levels, moments, center, scale


def powers(energy, weight, center, scale, highest=6):
    x = (energy - center) / scale
    return np.array([weight @ x**k for k in range(highest + 1)])


@given(st.integers(0, 200), st.integers(1, 5), st.sampled_from([0, 10]))
def test_all_traces_up_to_the_degree_hold(seed, vectors, exact_low):
    levels, moments, center, scale = one_group(seed, vectors, exact_low=exact_low)
    energy, raw, sampled = levels["energy"], levels["raw"], levels["unit"] >= 0
    weight, degree = calibrate(energy, raw, sampled, moments, center, scale)
    assert 0 <= degree <= 6
    np.testing.assert_allclose(
        powers(energy, weight, center, scale)[: degree + 1],
        moments[: degree + 1],
        atol=1e-12 * moments[0],
    )
    assert np.all(weight >= 0)
    np.testing.assert_array_equal(weight[~sampled], raw[~sampled])


def test_the_weights_are_those_of_the_normal_equations():
    levels, moments, center, scale = one_group(3, exact_low=5)
    sampled = levels["unit"] >= 0
    weight, degree = calibrate(levels["energy"], levels["raw"], sampled, moments, center, scale)
    assert degree == 6
    slow = naive_sampling.calibrated(
        levels["energy"], levels["raw"], sampled, moments, center, scale, 6
    )
    np.testing.assert_allclose(weight, slow, rtol=1e-8)


def test_the_factor_is_the_smallest_change_that_meets_the_traces():
    """Deville and Särndal: of all weights that meet the totals, the least Σ (w − d)²/d."""
    levels, moments, center, scale = one_group(11)
    raw, energy = levels["raw"], levels["energy"]
    weight, degree = calibrate(energy, raw, np.ones(len(raw), bool), moments, center, scale)
    assert degree == 6
    x = (energy - center) / scale
    basis = np.array([x**k for k in range(7)])
    # A direction that changes no total.
    rng = np.random.default_rng(0)
    step = rng.normal(size=len(raw)) * raw
    step -= raw * (np.linalg.solve((basis * raw) @ basis.T, basis @ step) @ basis)
    np.testing.assert_allclose(basis @ step, 0, atol=1e-9)
    distance = [np.sum((weight + t * step - raw) ** 2 / raw) for t in (-1e-3, 0.0, 1e-3)]
    assert distance[1] < min(distance[0], distance[2])


def test_too_few_levels_lower_the_degree():
    energy = np.array([-1.0, 0.2, 0.9])
    moments = powers(energy, np.array([3.0, 5.0, 4.0]), 0.0, 1.0)
    weight, degree = calibrate(energy, np.full(3, 4.0), np.ones(3, bool), moments, 0.0, 1.0)
    assert degree == 2  # three weights, and traces of three powers fix them
    np.testing.assert_allclose(weight, [3.0, 5.0, 4.0], rtol=1e-12)


def test_negative_weights_are_never_given():
    """The raw weights sit at the wrong end; the polynomial that would mend it turns negative."""
    energy = np.linspace(-1, 1, 50)
    exact = np.exp(4 * energy)
    raw = np.exp(-4 * energy) * exact.sum() / np.exp(-4 * energy).sum()
    moments = powers(energy, exact, 0.0, 1.0)
    weight, degree = calibrate(energy, raw, np.ones(50, bool), moments, 0.0, 1.0)
    assert np.all(weight >= 0)
    assert degree < 6
    np.testing.assert_allclose(
        powers(energy, weight, 0.0, 1.0)[: degree + 1], moments[: degree + 1], atol=1e-10 * 50
    )
    unbounded = naive_sampling.calibrated(
        energy, raw, np.ones(50, bool), moments, 0.0, 1.0, degree + 1
    )
    assert np.any(unbounded < 0)


def test_a_level_that_stands_for_nothing_does_not_lower_the_degree():
    levels, moments, center, scale = one_group(3)
    energy = np.append(levels["energy"], center + 3 * scale)  # far out, where q is negative
    for tiny, lowered in ((1e-300, True), (0.0, False)):
        raw = np.append(levels["raw"], tiny)
        weight, degree = calibrate(energy, raw, np.ones(len(raw), bool), moments, center, scale)
        plain, _ = calibrate(
            levels["energy"], levels["raw"], np.ones(len(raw) - 1, bool), moments, center, scale
        )
        assert (degree < 6) == lowered
        if not lowered:
            np.testing.assert_allclose(weight[:-1], plain, rtol=1e-10)


def test_tables_drop_spurious_levels_and_tell_the_orders():
    sectors = invented(5)
    table = sampled_table(sectors, 3, 1, full_below=40)
    np.testing.assert_array_equal(table.sampling.orders, 6)  # the group of exact levels too
    assert trace_misfit(table, table.sampling) < 1e-12
    raw = table.sampling.raw_weight.copy()
    ghost = int(np.flatnonzero(table.sampling.unit >= 0)[0])
    raw[ghost] = NEGLIGIBLE / 2
    again = calibrated_table(table, dataclasses.replace(table.sampling, raw_weight=raw))
    assert again.weight[ghost] == 0
    assert again.sampling.raw_weight[ghost] == 0
    assert trace_misfit(again, again.sampling) < 1e-12


def test_a_group_whose_sampled_levels_stand_for_nothing_is_exact():
    """All its states may have been found exactly, with copies of them left over."""
    levels, moments, center, scale = one_group(3, vectors=1, full_below=1000)
    energy = np.append(levels["energy"], levels["energy"][:3])
    raw = np.append(levels["raw"], np.zeros(3))
    weight, degree = calibrate(energy, raw, np.arange(len(raw)) >= 160, moments, center, scale)
    assert degree == 6
    np.testing.assert_array_equal(weight, raw)


def test_a_group_that_cannot_have_its_states_is_refused():
    sectors = invented(5, ((0, 1, 40),))
    table = sampled_table(sectors, 2, 1)
    wrong = dataclasses.replace(table.sampling, moments=-table.sampling.moments)
    with pytest.raises(SpectrumError, match="solve the model again"):
        calibrated_table(table, wrong)


def test_traces_of_chebyshev_polynomials_follow_from_powers():
    x = np.random.default_rng(1).uniform(-1, 1, size=30)
    by_angle = np.array([np.cos(k * np.arccos(x)).sum() for k in range(9)])
    np.testing.assert_allclose(chebyshev_moments(np.array([np.sum(x**k) for k in range(9)])),
                               by_angle, atol=1e-12)  # fmt: skip


def test_curves_at_high_temperature_are_exact_to_the_order_of_the_traces():
    sectors = invented(8)
    t = np.array([300.0])
    exact = cluster_curves(full_table(sectors), t, np.zeros(1))
    misfit = []
    for order in (0, 2, 4, 6):
        found = cluster_curves(sampled_table(sectors, 1, 4, order=order), t, np.zeros(1))
        misfit.append(float(abs(found.specific_heat / exact.specific_heat - 1)[0, 0]))
    # Two more orders gain about (width/T)².
    assert misfit[0] > 1e-2
    assert misfit[1] < misfit[0] / 5
    assert misfit[2] < misfit[1] * 1e-3
    assert misfit[3] < misfit[2] * 1e-2


def test_scaling_and_turning_over_keep_the_calibration():
    table = sampled_table(invented(6), 2, 2)
    for other in (table.scaled(3.7), table.upside_down(), table.upside_down().scaled(0.1)):
        again = calibrated_table(other, other.sampling)
        assert trace_misfit(other, other.sampling) < 1e-12
        np.testing.assert_array_equal(again.sampling.orders, table.sampling.orders)
        np.testing.assert_allclose(again.weight, other.weight, rtol=1e-9)
