"""Many seeds of one sampled spectrum, and the statistics of their curves."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

import thermo
from tests.sampling import full_table, sectors_of
from thermo.ensemble.canonical import cluster_curves
from thermo.ensemble.jackknife import cluster_errors
from thermo.model.level_table import LevelTable, check_levels
from thermo.spectrum import sampling_plan
from thermo.spectrum.sampled import SampledSolver
from thermo.spectrum.settings import Settings
from thermo.symmetry.sectors import plan_symmetry

QUANTITIES = ("specific_heat", "moment_variance")


def solver_of(mapping, **settings) -> SampledSolver:
    model = thermo.read_model(mapping)
    plan = plan_symmetry(model, use_total_spin=False)
    return SampledSolver(model, sampling_plan.complete(plan, Settings(**settings)))


def tables(mapping, seeds, **settings) -> list[LevelTable]:
    """A table for each seed: what no seed changes is done once."""
    solver = solver_of(mapping, **settings)
    results: list[dict] = [{} for _ in seeds]
    for piece in solver.pieces():
        same = None if piece.kind == "tile" else solver.solve(piece)
        for seed, found in zip(seeds, results, strict=True):
            if same is None:
                solver.settings = replace(solver.settings, seed=seed)
                found[piece.key] = solver.solve(piece)
            else:
                found[piece.key] = same
    made = [solver.table(found)[0] for found in results]
    check_levels(made[0], solver.model)
    return made


def curves_of(table, temperature):
    """C and Var M of a cluster without field, (2, nT); M only where it is conserved."""
    found = cluster_curves(table, temperature, np.zeros(1))
    rows = [getattr(found, q) for q in QUANTITIES]
    return np.array([r[:, 0] for r in rows if r is not None])


def errors_of(table, temperature):
    found = cluster_errors(table, temperature, np.zeros(1))
    rows = [getattr(found, q) for q in QUANTITIES]
    return np.array([r[:, 0] for r in rows if r is not None])


def exact_curves(mapping, temperature):
    """The same from the full spectrum, M resolved where it is conserved."""
    model = thermo.read_model(mapping)
    plan = plan_symmetry(model, use_total_spin=False)
    sectors = sectors_of(mapping)
    table = full_table(sectors, len(model.sites))
    if plan.resolved != "magnetic_number":
        table = replace(table, resolved=plan.resolved, twice_m=np.full(len(table.energy), -1))
    return curves_of(table, temperature)


@dataclass
class Sample:
    """Deviations from the truth and error bars, (seeds, 2, nT)."""

    deviation: np.ndarray
    error: np.ndarray
    exact: np.ndarray

    @property
    def bias(self):
        """Mean deviation in units of its own standard error (Student, seeds − 1)."""
        n = len(self.deviation)
        return self.deviation.mean(axis=0) / (self.deviation.std(axis=0, ddof=1) / n**0.5)

    @property
    def coverage(self):
        """Share of seeds whose bar reaches the truth."""
        return (np.abs(self.deviation) <= self.error).mean(axis=0)

    @property
    def noise(self):
        """Standard deviation about the truth, relative."""
        return np.sqrt(np.mean(self.deviation**2, axis=0)) / self.exact


def sample(mapping, temperature, seeds, **settings) -> Sample:
    temperature = np.asarray(temperature, dtype=float)
    exact = exact_curves(mapping, temperature)
    made = tables(mapping, seeds, **settings)
    return Sample(
        np.array([curves_of(t, temperature) for t in made]) - exact,
        np.array([errors_of(t, temperature) for t in made]),
        exact,
    )
