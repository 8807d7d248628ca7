"""Sectors in, levels out: planning, full and sampled spectra, LAPACK."""

from thermo.spectrum.full import FullSolver, solve_full
from thermo.spectrum.surveying import Plan, SectorPlan, survey

__all__ = ["FullSolver", "Plan", "SectorPlan", "solve_full", "survey"]
