"""How accurate the curves of sampled levels are: the largest relative error over a range."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np

from thermo import units
from thermo.ensemble.canonical import cluster_curves
from thermo.ensemble.jackknife import cluster_errors
from thermo.errors import RangeError
from thermo.model.level_table import LevelTable, energy_scale
from thermo.model.spin_model import SpinModel

# Temperatures looked at; error bars are smooth.
_POINTS = 41
# A range left out: these multiples of the largest coupling.
_LOW, _HIGH = 0.1, 10.0


def temperature_range(
    model: SpinModel, wanted: Sequence[float] | None = None
) -> tuple[float, float]:
    """Lowest and highest temperature, in the model's energy unit, over which accuracy counts.

    ``wanted`` = (low, high) in K (in the energy unit if dimensionless), None for a tenth of the
    largest coupling to ten times it. Raises RangeError where it is no such range.
    """
    if wanted is None:
        scale = energy_scale(model) or 1.0
        return _LOW * scale, _HIGH * scale
    try:
        low, high = (float(t) for t in wanted)
    except (TypeError, ValueError):
        raise RangeError(
            f"the accuracy's range {wanted!r} is not two temperatures; give (low, high)"
        ) from None
    if not 0 < low <= high < np.inf:
        raise RangeError(
            f"the accuracy's range from {low:g} to {high:g} is none; give two temperatures above "
            "zero, the lower first"
        )
    kelvin = units.kelvin_per(model.energy_unit)
    return low / kelvin, high / kelvin


def worst_error(table: LevelTable, low: float, high: float) -> float:
    """The largest relative standard error of C and χ (zero field) between two temperatures.

    ``low`` and ``high`` in the table's energy unit, on a logarithmic grid. 0 for exact levels,
    inf where there is no error bar (one vector). χ counts where the levels resolve M.
    """
    temperature = np.geomspace(low, high, _POINTS if high > low else 1)
    field = np.zeros(1)
    values = cluster_curves(table, temperature, field)
    errors = cluster_errors(table, temperature, field, values)
    if errors is None:
        return 0.0
    worst = 0.0
    for value, error in (
        (values.specific_heat, errors.specific_heat),
        (values.moment_variance, errors.moment_variance),
    ):
        if value is None or error is None:
            continue
        ratio = np.divide(error, np.abs(value), out=np.full_like(error, np.inf), where=value != 0)
        ratio[error == 0] = 0.0
        worst = max(worst, float(np.where(np.isnan(ratio), np.inf, ratio).max()))
    return worst
