"""Spin models: sites, bonds, named couplings, the model file and the named lattices."""

from thermo.model.reading import read_model, read_model_text
from thermo.model.spin_model import Bond, Ion, Site, SpinModel
from thermo.model.traces import exact_traces, total_matrices

__all__ = [
    "Bond",
    "Ion",
    "Site",
    "SpinModel",
    "exact_traces",
    "read_model",
    "read_model_text",
    "total_matrices",
]
