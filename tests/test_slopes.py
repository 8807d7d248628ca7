"""Exact slopes of levels and of canonical sums, against the complex step and closed forms."""

from __future__ import annotations

import mpmath
import numpy as np
import pytest

import thermo
from tests import naive, naive_slopes
from thermo.ensemble.slopes import PointSums
from thermo.errors import MemoryLimitError, SpectrumError, UnavailableError
from thermo.model.level_slopes import SlopedLevels, check_slopes
from thermo.spectrum.full import FullSolver

ISO = naive.ISOTROPIC
ION_1 = naive.axial(1.0)
SKEW = naive.antisymmetric([0.0, 0.0, 1.0])
TILTED = naive.antisymmetric([0.3, 0.5, -0.2])
SHAPE = np.array([[0.7, 0.2, 0.1], [-0.1, 0.4, 0.3], [0.25, -0.3, 1.1]])
# What is conserved, spins, bonds (i, j, coupling, matrix, form), ions, couplings.
CASES = {
    "isotropic": (
        "total_spin", [0.5] * 5,
        [(0, 1, "J1", ISO), (1, 2, "J1", ISO), (2, 3, "J1", ISO),
         (3, 4, "J2", ISO), (4, 0, "J2", ISO), (0, 2, "J3", ISO)],
        [], {"J1": 1.0, "J2": 0.6, "J3": -0.35},
    ),
    "mixed spins": (
        "total_spin", [1.0, 0.5, 1.0, 0.5],
        [(0, 1, "J1", ISO), (1, 2, "J1", ISO), (2, 3, "J2", ISO),
         (3, 0, "J2", ISO)],
        [], {"J1": 0.8, "J2": 1.3},
    ),
    "ring": (  # degenerate levels, complex characters made real, stars
        "total_spin", [0.5] * 6,
        [(i, (i + 1) % 6, "J1", ISO) for i in range(6)]
        + [(i, (i + 2) % 6, "J2", ISO) for i in range(6)],
        [], {"J1": 1.0, "J2": 0.5},
    ),
    "xy and ising": (
        "magnetic_number", [0.5] * 5,
        [(i, (i + 1) % 5, "Jxy", naive.XY) for i in range(5)]
        + [(i, (i + 1) % 5, "Jz", naive.ISING) for i in range(5)],
        [], {"Jxy": 1.0, "Jz": -0.4},
    ),
    "axial ion": (
        "magnetic_number", [1.0, 1.0, 1.0],
        [(0, 1, "J", ISO), (1, 2, "J", ISO)],
        [(i, "D", ION_1) for i in range(3)], {"J": 0.9, "D": -0.7},
    ),
    "antisymmetric along z": (  # complex blocks with M conserved
        "magnetic_number", [0.5] * 4,
        [(i, (i + 1) % 4, "J", ISO) for i in range(4)]
        + [(i, (i + 1) % 4, "d", SKEW) for i in range(4)],
        [], {"J": 1.0, "d": 0.45},
    ),
    "rhombic ion": (
        "parity", [1.0, 1.0],
        [(0, 1, "J", ISO)],
        [(0, "D", ION_1), (1, "D", ION_1), (0, "E", naive.RHOMBIC), (1, "E", naive.RHOMBIC)],
        {"J": 1.1, "D": 0.5, "E": 0.3},
    ),
    "tilted and matrix": (
        "none", [0.5, 0.5, 1.0],
        [(0, 1, "J", ISO), (0, 1, "d", TILTED), (1, 2, "A", SHAPE)],
        [], {"J": 1.0, "d": 0.5, "A": 0.8},
    ),
}  # fmt: skip


def _model(case):
    _, spins, bonds, ions, couplings = CASES[case]
    return thermo.read_model(
        {
            "format": 1, "title": case, "energy_unit": "1", "bond_term": "+J S.S",
            "couplings": couplings,
            "site": [{"name": f"s{i}", "spin": s} for i, s in enumerate(spins)],
            "bond": [{"sites": [f"s{i}", f"s{j}"], "coupling": n, "matrix": np.asarray(A).tolist()}
                     for i, j, n, A in bonds],
            "ion": [{"sites": [f"s{i}"], "coupling": n, "matrix": np.asarray(D).tolist()}
                    for i, n, D in ions],
        }
    )  # fmt: skip


@pytest.mark.parametrize("case", CASES)
def test_slopes_of_curves_against_the_complex_step(case):
    resolved, spins, bonds, ions, couplings = CASES[case]
    found = FullSolver(_model(case)).sloped()
    assert found.table.resolved == resolved
    assert found.names == tuple(couplings)
    by_name = naive_slopes.parts(spins, bonds, ions, couplings)
    in_field = resolved in ("total_spin", "magnetic_number")
    points = [(0.25, 0.0), (0.7, 0.0), (3.0, 0.0), (40.0, 0.0)]
    if in_field:
        points += [(0.25, 0.4), (0.7, -1.2), (2.5, 0.9), (5.0, 6.0)]
    T, h = np.array(points).T
    sums = PointSums(found.table, T, found.slopes).at(h)
    for n, (t, field) in enumerate(points):
        value, by_slope, by_field = naive_slopes.slopes(by_name, couplings, spins, t, field)
        for k, what in enumerate(naive_slopes.NAMES):
            if not in_field and what in ("moment", "variance", "mixed"):
                continue
            expected = [value[k], by_field[k], *(by_slope[name][k] for name in couplings)]
            shown = [
                getattr(sums.value, what)[n], getattr(sums.by_field, what)[n],
                *getattr(sums.by_slope, what)[:, n],
            ]  # fmt: skip
            if not in_field:
                del expected[1], shown[1]
            # Some slopes vanish by symmetry: small against the largest of their kind.
            size = max(1e-3, np.abs(expected).max())
            np.testing.assert_allclose(shown, expected, rtol=1e-7, atol=1e-10 * size)


@pytest.mark.parametrize("case", CASES)
def test_slopes_sum_to_the_energy_and_survive_reversal(case):
    model = _model(case)
    found = FullSolver(model).sloped()
    c = np.array(list(model.couplings.values()))
    np.testing.assert_allclose(c @ found.slopes, found.table.energy, rtol=0, atol=1e-12)
    # Levels alone and levels with slopes are the same levels.
    table = FullSolver(model).table()
    np.testing.assert_allclose(found.table.energy, table.energy, rtol=0, atol=1e-12)
    np.testing.assert_array_equal(np.sort(found.table.weight), np.sort(table.weight))


def test_levels_that_cross_keep_exact_sums():
    """Dimer plus free spin pair at the coupling where levels of one block cross: sums stay smooth
    and equal those a step aside (no difference of a level is ever taken)."""
    model = thermo.read_model(
        {
            "format": 1, "title": "two dimers", "energy_unit": "1", "bond_term": "+J S.S",
            "couplings": {"Ja": 1.0, "Jb": 1.0},
            "site": [{"name": n, "spin": 0.5} for n in "abcd"],
            "bond": [{"sites": ["a", "b"], "coupling": "Ja"},
                     {"sites": ["c", "d"], "coupling": "Jb"}],
        }
    )  # fmt: skip
    solver = FullSolver(model)
    T, h = np.array([0.2, 0.5, 2.0]), np.array([0.0, 0.3, 0.0])

    def dimer(J, t, b):
        """C of one dimer at 40 digits, and its derivative."""

        def heat(x):
            e = [mpmath.mpf(-3) / 4 * x, x / 4 - b, x / 4, x / 4 + b]
            w = [mpmath.exp(-(v - e[0]) / t) for v in e]
            z = sum(w)
            mean = sum(a * v for a, v in zip(w, e, strict=True)) / z
            return sum(a * (v - mean) ** 2 for a, v in zip(w, e, strict=True)) / z / t**2

        with mpmath.workdps(40):
            return float(heat(mpmath.mpf(J))), float(mpmath.diff(heat, mpmath.mpf(J)))

    for Jb in (1.0, 1.0 + 1e-9, 1.0 + 1e-4, 3.0):
        found = solver.sloped({"Jb": Jb})
        sums = PointSums(found.table, T, found.slopes).at(h)
        for n in range(3):
            a, b = dimer(1.0, T[n], h[n]), dimer(Jb, T[n], h[n])
            np.testing.assert_allclose(sums.value.heat[n], a[0] + b[0], rtol=1e-12)
            np.testing.assert_allclose(sums.by_slope.heat[:, n], [a[1], b[1]], rtol=1e-10)


def test_frozen_clusters_keep_their_slopes_relative_accuracy():
    """At T = Δ/200 the specific heat is 1e-83: its logarithmic slope must still be right."""
    model = thermo.read_model(
        {"format": 1, "title": "dimer", "energy_unit": "1", "bond_term": "+J S.S",
         "couplings": {"J": 1.0}, "site": [{"name": n, "spin": 0.5} for n in "ab"],
         "bond": [{"sites": ["a", "b"], "coupling": "J"}]}
    )  # fmt: skip
    found = FullSolver(model).sloped()
    t = 1 / 200
    sums = PointSums(found.table, np.array([t]), found.slopes).at(np.zeros(1))
    # C = 3x²e^{-x}, V = 2e^{-x}: d ln C/dJ = (2/x − 1)/t, d ln V/dJ = −1/t (x = J/t).
    x = 1 / t
    assert sums.by_slope.heat[0, 0] / sums.value.heat[0] == pytest.approx((2 / x - 1) / t)
    assert sums.by_slope.variance[0, 0] / sums.value.variance[0] == pytest.approx(-1 / t)


def test_a_tiny_field_keeps_its_slopes():
    found = FullSolver(_model("ring")).sloped()
    T = np.array([0.3, 1.0])
    tiny = PointSums(found.table, T, found.slopes).at(np.full(2, 1e-13))
    zero = PointSums(found.table, T, found.slopes).at(np.zeros(2))
    chi, slope = zero.value.variance / T, zero.by_slope.variance / T
    np.testing.assert_allclose(tiny.value.moment, 1e-13 * chi, rtol=1e-12)
    np.testing.assert_allclose(tiny.by_slope.moment, 1e-13 * slope, rtol=1e-11)


def test_many_points_at_once_are_the_points_one_by_one(monkeypatch):
    found = FullSolver(_model("isotropic")).sloped()
    rng = np.random.default_rng(3)
    T, h = rng.uniform(0.2, 3, 40), rng.uniform(-1, 1, 40)
    whole = PointSums(found.table, T, found.slopes).at(h)
    monkeypatch.setattr("thermo.ensemble.slopes._CHUNK", 700)
    cut = PointSums(found.table, T, found.slopes).at(h)
    for kind in ("value", "by_slope", "by_field"):
        for name in naive_slopes.NAMES:
            one, other = (getattr(getattr(x, kind), name) for x in (whole, cut))
            np.testing.assert_allclose(one, other, rtol=1e-12, atol=1e-15)


def test_without_couplings_and_without_slopes():
    model = _model("isotropic")
    found = FullSolver(model).sloped({"J1": 0.0, "J2": 0.0, "J3": 0.0})
    T, h = np.array([0.5, 2.0]), np.array([0.0, 0.6])
    sums = PointSums(found.table, T, found.slopes).at(h)
    spins, bonds, ions, _ = CASES["isotropic"][1:]
    by_name = naive_slopes.parts(spins, bonds, ions, model.couplings)
    zero = dict.fromkeys(model.couplings, 0.0)
    for n in range(2):
        value, by_slope, _ = naive_slopes.slopes(by_name, zero, spins, T[n], h[n])
        assert sums.value.heat[n] == pytest.approx(value[2], abs=1e-14)
        for k, name in enumerate(zero):
            np.testing.assert_allclose(
                [getattr(sums.by_slope, w)[k, n] for w in naive_slopes.NAMES],
                by_slope[name], rtol=1e-9, atol=1e-13,
            )  # fmt: skip
    bare = PointSums(found.table, T).at(h)
    assert bare.by_slope.heat.shape == (0, 2)


def test_wrong_slopes_fail_their_check():
    model = _model("xy and ising")
    found = FullSolver(model).sloped()
    check_slopes(found, model)
    swapped = SlopedLevels(found.table, found.names, found.slopes[::-1].copy())
    with pytest.raises(SpectrumError, match="fail their check"):
        check_slopes(swapped, model)
    # A fault that keeps the sum with the couplings: only the traces see it.
    c = np.array(list(model.couplings.values()))
    moved = found.slopes + np.outer([c[1], -c[0]], np.linspace(0, 1e-3, found.slopes.shape[1]))
    with pytest.raises(SpectrumError, match="the traces of coupling Jxy"):
        check_slopes(SlopedLevels(found.table, found.names, moved), model)


def test_memory_for_eigenvectors_is_asked_for_beforehand():
    model = thermo.read_model(
        {"format": 1, "title": "chain", "energy_unit": "1", "bond_term": "+J S.S",
         "couplings": {"J": 1.0},
         "lattice": {"name": "chain", "size": [18], "boundary": "open", "spin": 0.5,
                     "couplings": {"nearest": "J"}}}
    )  # fmt: skip
    from thermo.spectrum import planning

    plan = FullSolver(model).plan
    levels, slopes = planning.memory_needed(plan), planning.memory_needed(plan, slopes=True)
    assert slopes > levels + 1.9 * (levels - planning.BASE_BYTES) * 0.5
    tight = FullSolver(model, memory=(levels + slopes) // 2)
    assert not tight.can_slope
    with pytest.raises(MemoryLimitError, match="memory"):
        tight.sloped()
    assert FullSolver(model, memory=2 * slopes).can_slope
    with pytest.raises(UnavailableError):
        FullSolver(_model("ring"), generic=False).sloped()
