"""Sectors in, levels out: planning, full spectra, LAPACK."""

from thermo.spectrum.full import FullSolver, solve, solve_full
from thermo.spectrum.planning import Plan, SectorPlan, survey

__all__ = ["FullSolver", "Plan", "SectorPlan", "solve", "solve_full", "survey"]
