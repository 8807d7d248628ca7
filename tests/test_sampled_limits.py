"""What a sampled solve refuses, tells, and reaches: accuracy, too few steps, memory."""

from __future__ import annotations

from typing import Any

import numpy as np
import pytest
from scipy.linalg import eigh_tridiagonal

import thermo
from thermo import errors
from thermo.ensemble.accuracy import temperature_range, worst_error
from thermo.hilbert.tridiagonal import eigen_rows
from thermo.model.level_table import table_from_dataset
from thermo.model.spin_model import SpinModel
from thermo.spectrum import sampling_plan
from thermo.spectrum.settings import Settings
from thermo.symmetry.sectors import plan_symmetry


def ring(sites: int, **lattice: Any) -> SpinModel:
    return thermo.read_model(
        {
            "format": 1, "energy_unit": "K", "bond_term": "+J S.S", "couplings": {"J": 10.0},
            "lattice": {"name": "chain", "size": [sites], "spin": 0.5,
                        "couplings": {"nearest": "J"}, **lattice},
        }
    )  # fmt: skip


def test_wanted_accuracy_is_reached_and_said() -> None:
    given: dict[str, Any] = {"method": "sampled", "full_below": 50, "steps": 40}
    first = thermo.solve(ring(14), **given)
    low, high = temperature_range(ring(14))
    before = worst_error(table_from_dataset(first), low, high)
    assert before > 0.0015
    levels = thermo.solve(ring(14), accuracy=0.0015, **given)
    assert levels.attrs["vectors"] > first.attrs["vectors"]
    assert levels.attrs["accuracy_wanted"] == 0.0015
    reached = worst_error(table_from_dataset(levels), low, high)
    assert levels.attrs["accuracy_reached"] == reached <= 0.0015
    # The vectors that were there first are still there.
    assert set(first.energy.values[first.vector.values == 0].round(9)) & set(
        levels.energy.values[levels.vector.values == 0].round(9)
    )


def test_accuracy_over_a_range_in_kelvin() -> None:
    model, given = ring(14), {"method": "sampled", "full_below": 50, "steps": 40}
    levels = thermo.solve(model, accuracy=0.004, accuracy_range=(30, 200), **given)
    assert levels.attrs["vectors"] == 2
    assert worst_error(table_from_dataset(levels), 30.0, 200.0) <= 0.004


@pytest.mark.parametrize(
    ("given", "words"),
    [
        ({"accuracy": 0.01, "vectors": 1}, "two or more"),
        ({"accuracy_range": (10, 300)}, "without an accuracy"),
        ({"accuracy": 0.01, "accuracy_range": (300, 10)}, "the lower first"),
        ({"steps": 2}, "from 10"),
        ({"memory": "1 KiB"}, "the program itself needs"),
    ],
)
def test_refused_in_one_sentence(given: dict[str, Any], words: str) -> None:
    with pytest.raises(errors.PartitaError, match=words) as found:
        thermo.solve(ring(10), method="sampled", **given)
    assert "\n" not in str(found.value)


def test_too_few_steps_are_told_and_passed_on() -> None:
    few = thermo.solve(ring(14), method="sampled", full_below=0, steps=10)
    assert "has not converged in 10 steps" in few.attrs["caution"]
    curves = thermo.curves(few, temperature=[10.0])
    assert curves.attrs["caution"] == few.attrs["caution"]
    enough = thermo.solve(ring(14), method="sampled", full_below=0, steps=80)
    assert "caution" not in enough.attrs


def test_half_the_memory_is_refused_or_planned_for() -> None:
    plan = plan_symmetry(ring(26), use_total_spin=False)
    settings = sampling_plan.complete(plan, Settings())
    roomy = sampling_plan.cost(plan, settings, 2**40, cores=4)
    assert (roomy.at_once, roomy.threads) == (4, 1)
    half = sampling_plan.cost(plan, settings, roomy.memory_bytes * 2 // 3, cores=4)
    assert half.memory_bytes <= roomy.memory_bytes * 2 // 3
    assert half.at_once < 4
    assert half.at_once * half.threads <= 4
    with pytest.raises(errors.MemoryLimitError, match="where the limit is"):
        sampling_plan.cost(plan, settings, roomy.memory_bytes // 4, cores=4)


@pytest.mark.parametrize("steps", [1, 2, 3, 40, 150])
def test_rows_of_eigenvectors_against_lapack(steps: int) -> None:
    rng = np.random.default_rng(steps)
    alpha, beta = rng.standard_normal(steps), np.abs(rng.standard_normal(steps - 1))
    rows = rng.standard_normal((steps, 3))
    value, turned = eigen_rows(alpha, beta, rows)
    expected, vectors = eigh_tridiagonal(alpha, beta)
    np.testing.assert_allclose(value, expected, atol=1e-12)
    np.testing.assert_allclose(np.abs(turned), np.abs(vectors.T @ rows), atol=1e-9)


def test_a_matrix_that_falls_apart() -> None:
    alpha, beta = np.array([1.0, 2.0, 3.0, 0.5]), np.array([0.3, 0.0, 0.2])
    rows = np.eye(4)[:, :1]
    value, turned = eigen_rows(alpha, beta, rows)
    expected, vectors = np.linalg.eigh(np.diag(alpha) + np.diag(beta, 1) + np.diag(beta, -1))
    np.testing.assert_allclose(value, expected, atol=1e-14)
    np.testing.assert_allclose(turned[:, 0] ** 2, vectors[0] ** 2, atol=1e-14)
