"""A fit's result as a dataset for files, tables and pictures."""

from __future__ import annotations

import math
from dataclasses import replace
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from thermo.fit.forward import Points, set_points
from thermo.fit.measured import Measured
from thermo.fit.provenance import check_arrays, check_attributes
from thermo.fit.result import CURVE_POINTS, RISE, Estimate, FitResult
from thermo.variables import build_fit

if TYPE_CHECKING:
    import xarray as xr

Vector = NDArray[np.float64]

ROLES = {"fixed": 0, "free": 1, "tied": 2}
# More lines than this in one picture tell nothing; a map's other fields go without.
MAX_LINES = 12


def fit_dataset(result: FitResult) -> xr.Dataset:
    """The ``fit`` dataset of a result: every set in the units of its own file."""
    shown = [e for e in result.parameters if np.isfinite(e.value)]
    arrays: dict[str, Any] = {
        "parameter_name": [e.name for e in shown],
        "parameter_units": [e.unit for e in shown],
        "parameter_tie": [e.expression for e in shown],
        "parameter_role": [ROLES[e.status] for e in shown],
        "value": [e.value for e in shown],
        "standard_error": [e.standard_error for e in shown],
        "start": [e.start for e in shown],
        "lower_bound": [e.lower for e in shown],
        "upper_bound": [e.upper for e in shown],
        "at_bound": [e.at_bound for e in shown],
        "correlation": _correlation(result, shown),
        "chi_square": result.chi_square,
        "reduced_chi_square": result.reduced_chi_square,
        "degrees_of_freedom": result.degrees_of_freedom,
        "evaluations": result.n_evaluations,
        "converged": int(result.converged),
        "prior": [math.nan if e.prior is None else e.prior[0] for e in shown],
        "prior_error": [math.nan if e.prior is None else e.prior[1] for e in shown],
        **_intervals(shown),
    }
    sets = result.sets
    data = [item.data for item in sets]
    arrays |= {
        "temperature": np.concatenate([d.temperature for d in data]),
        "field": np.concatenate([d.field for d in data]),
        "observed": np.concatenate([d.value / d.to_si for d in data]),
        "uncertainty": np.concatenate([item.uncertainty / item.data.to_si for item in sets]),
        "predicted": np.concatenate([item.fitted / item.data.to_si for item in sets]),
        "residual": np.concatenate([item.residual / item.data.to_si for item in sets]),
        "point_dataset": np.concatenate([np.full(d.n_points, k) for k, d in enumerate(data)]),
        "dataset_name": [d.name for d in data],
        "dataset_quantity": [d.quantity for d in data],
        "dataset_units": [d.units for d in data],
        "dataset_per": [d.per for d in data],
        "dataset_chi_square": [item.chi_square for item in sets],
    }
    lines = [(k, d, points) for k, d in enumerate(data) for points in fine_lines(d)]
    arrays |= {
        "curve_temperature": np.concatenate([p.temperature for _, _, p in lines]),
        "curve_field": np.concatenate([p.field for _, _, p in lines]),
        "curve_predicted": np.concatenate(
            [result.forward.predict(p, result.values) / d.to_si for _, d, p in lines]
        ),
        "curve_dataset": np.concatenate([np.full(len(p.field), k) for k, _, p in lines]),
    }
    arrays |= check_arrays(result)
    return build_fit(arrays, {**result.attributes(), **check_attributes(result)})


def _intervals(shown: list[Estimate]) -> dict[str, list[float]]:
    """The ends of the profile intervals, NaN where they were not looked for."""
    found: dict[str, list[float]] = {}
    for level in RISE:
        ends = [e.interval(level) for e in shown]
        name = f"{100 * level:.0f}"
        found[f"lower_{name}"] = [math.nan if i is None else i.lower for i in ends]
        found[f"upper_{name}"] = [math.nan if i is None else i.upper for i in ends]
    return found


def _correlation(result: FitResult, shown: list[Estimate]) -> Vector:
    """Correlations in the order of all parameters, NaN where there is none."""
    full = np.full((len(shown), len(shown)), np.nan)
    at = [[e.name for e in shown].index(name) for name in result.free_names]
    full[np.ix_(at, at)] = result.correlation
    return full


def fine_lines(data: Measured) -> list[Points]:
    """Fine grids that follow a set: over temperature at its fields, or over field."""
    fields, temperatures = np.unique(data.field), np.unique(data.temperature)
    over_temperature = len(fields) <= len(temperatures)
    lines = []
    for common in (fields if over_temperature else temperatures)[:MAX_LINES]:
        at = (data.field if over_temperature else data.temperature) == common
        x = (data.temperature if over_temperature else data.field)[at]
        fixed = np.full(CURVE_POINTS, common)
        if over_temperature:
            grid = np.geomspace(x.min(), x.max(), CURVE_POINTS)
            lines.append(replace(set_points(data), temperature=grid, field=fixed))
        else:
            grid = np.linspace(x.min(), x.max(), CURVE_POINTS)
            lines.append(replace(set_points(data), temperature=fixed, field=grid))
    return lines
