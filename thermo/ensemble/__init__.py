"""Canonical sums: levels in, curves out, whatever way the levels were found."""

from thermo.ensemble.canonical import ClusterCurves, cluster_curves
from thermo.ensemble.thermodynamics import curves, grid_curves, moment_unavailable

__all__ = ["ClusterCurves", "cluster_curves", "curves", "grid_curves", "moment_unavailable"]
