"""A fit with exact slopes against the same with differences, in one run. ``pytest -m bench -s``.

12 spins, χ(T) and C(T) with 300 points, two couplings, g, χ0 and the paramagnetic fraction; the
points are made here (invented). Differences are those of a plain script, which solves the cluster
at every change of a parameter, and of one that at least solves only where a direction of the
couplings is new.
"""

from __future__ import annotations

import time
from dataclasses import replace

import numpy as np
import pytest
from scipy.optimize import least_squares

import thermo
from tests.fitting import CURIE, R, write_csv
from thermo.fit import fit, read_study
from thermo.fit.forward import make_forward
from thermo.fit.minimise import TOLERANCE
from thermo.fit.problem import make_problem
from thermo.spectrum.full import FullSolver

pytestmark = [pytest.mark.bench, pytest.mark.timeout(3600)]

TRUE = {"J1": 95.0, "J2": 38.0}


def lattice(name, size, roles, couplings):
    return {"format": 1, "title": name, "energy_unit": "K", "bond_term": "+J S.S",
            "couplings": couplings,
            "lattice": {"name": name, "size": size, "spin": 0.5, "g": 2.1,
                        "couplings": roles}}  # fmt: skip


LADDER = lattice("ladder", [6], {"rung": "J1", "leg": "J2"}, {"J1": 70.0, "J2": 50.0})
RIVALS = {
    "ladder": LADDER,
    "alternating chain": lattice("chain", [12], {"strong": "J1", "weak": "J2"},
                                 {"J1": 70.0, "J2": 50.0}),
    "chain with next neighbours": lattice("chain", [12], {"nearest": "J1", "next": "J2"},
                                          {"J1": 70.0, "J2": 20.0}),
}  # fmt: skip


def study(folder, **more):
    """Two tables of 150 points each from the ladder itself, with noise."""
    rng = np.random.default_rng(2)
    T = np.geomspace(8.0, 300.0, 150)
    levels = thermo.solve(thermo.read_model(LADDER).with_couplings(TRUE))
    curves = thermo.curves(levels, temperature=T, units="molar-cgs", g=2.08)
    spins = curves["susceptibility"].values[:, 0]
    chi = 0.98 * spins + 0.02 * CURIE * 2.08**2 / (4 * T) - 6e-5
    heat = 0.98 * curves["specific_heat"].values[:, 0]
    errors = 0.004 * chi, 0.01 * heat + 0.002 * R
    tables = []
    for name, value, error, units in (("susceptibility", chi, errors[0], "emu/mol"),
                                      ("specific_heat", heat, errors[1], "J/(mol K)")):  # fmt: skip
        noisy = value + error * rng.standard_normal(150)
        write_csv(folder / f"{name}.csv", "T,v,e", T, noisy, error)
        columns = {"temperature": "T", "value": "v", "uncertainty": "e"}
        tables.append({"name": name, "file": str(folder / f"{name}.csv"), "quantity": name,
                       "units": units, "range": [8, 300], "columns": columns})  # fmt: skip
    parameters = {
        "J1": {"start": 70.0}, "J2": {"start": 50.0}, "g": {"start": 2.0}, "chi0": {},
        "paramagnetic_fraction": {"start": 0.005},
    }  # fmt: skip
    return {"format": 1, "title": "bench", "data": tables, "window": "off",
            "parameters": parameters} | more  # fmt: skip


class Plain:
    """Levels without slopes, counted; solved anew at every call."""

    def __init__(self, model):
        self.inner, self.calls = FullSolver(model), 0

    def table(self, couplings=None):
        self.calls += 1
        return self.inner.table(couplings)


def by_differences(found, jac, keep):
    """Time and solves of the same least squares with SciPy's differences."""
    start = time.perf_counter()
    solver = Plain(found.model)
    problem = make_problem(found, make_forward(found, solver), None)
    lower, upper = found.parameters.bounds

    def residuals(theta):
        if not keep:
            problem.forward.cache._known.clear()
        return problem.residuals(theta)

    end = least_squares(residuals, found.parameters.start, jac=jac, bounds=(lower, upper),
                        x_scale="jac", xtol=TOLERANCE, ftol=TOLERANCE, gtol=TOLERANCE)  # fmt: skip
    return time.perf_counter() - start, solver.calls, end


def test_exact_slopes_take_a_fraction_of_the_solves_and_of_the_time(tmp_path):
    found = read_study(study(tmp_path, model=LADDER))
    fit(found, profiles="none")  # warm: kernels compiled
    times = []
    for _ in range(3):
        start = time.perf_counter()
        result = fit(found, profiles="none")
        times.append(time.perf_counter() - start)
    ours = min(times)
    print(f"\nexact slopes: {ours:.2f} s, {result.n_solves} solves; {result.message}")
    rows = {}
    for name, jac, keep in (("one-sided, plain", "2-point", False),
                            ("one-sided, kept", "2-point", True),
                            ("two-sided, plain", "3-point", False),
                            ("two-sided, kept", "3-point", True)):  # fmt: skip
        tries = [by_differences(found, jac, keep) for _ in range(3)]
        seconds, solves, end = min(tries, key=lambda t: t[0])
        rows[name] = solves / result.n_solves, seconds / ours
        print(
            f"differences, {name}: {seconds:.2f} s, {solves} solves; "
            f"ratios {rows[name][1]:.1f} in time, {rows[name][0]:.1f} in solves; "
            f"χ² {2 * end.cost:.6f} against {result.chi_square:.6f}"
        )
        best = np.array([result[n].value for n in result.free_names])
        error = np.array([result[n].standard_error for n in result.free_names])
        assert np.abs((end.x - best) / error).max() < 1e-2
    assert rows["one-sided, plain"][0] >= 5
    assert rows["one-sided, plain"][1] >= 3


def test_three_candidates_take_less_than_a_minute(tmp_path):
    start = time.perf_counter()
    for name, mapping in RIVALS.items():
        found = replace(read_study(study(tmp_path, model=mapping)))
        one = time.perf_counter()
        result = fit(found)
        print(
            f"\n{name}: {time.perf_counter() - one:.1f} s, {result.n_solves} solves, "
            f"reduced χ² {result.reduced_chi_square:.2f}"
        )
    seconds = time.perf_counter() - start
    print(f"three candidates, profiles and further starts included: {seconds:.1f} s")
    assert seconds < 60
