"""Whether residuals look like noise: their runs, the likeness of neighbours, the outliers."""

from __future__ import annotations

import math

import numpy as np
from numpy.typing import NDArray

Vector = NDArray[np.float64]

#: Fewer points than this say nothing about runs.
FEWEST = 10
#: Chance of a score below this, or of a χ² as large, for a model that is right: 0.1 %.
UNLIKELY = 1e-3
FEW_RUNS = -3.09
#: With a χ² more probable than this a trend lies within the uncertainties: these are too large, or
#: not independent, and the trend speaks against them rather than the model.
COMFORTABLE = 0.5
#: What rounding leaves of exact points, in units of their uncertainties, is no trend.
NOTICED = 0.1


def along(temperature: Vector, field: Vector) -> NDArray[np.int64]:
    """The order in which residuals are followed: field by field, along the temperature; (n,)."""
    return np.lexsort((temperature, field))


def runs_score(residual: Vector) -> float:
    """Runs of one sign less those expected, in standard deviations; residuals (n,) in order.

    Wald and Wolfowitz, Ann. Math. Stat. 11, 147 (1940), in its normal approximation. Far below
    zero: a trend. NaN below FEWEST points or where all have one sign by exactness; −inf where
    all have one sign.
    """
    n, up = len(residual), int(np.count_nonzero(residual > 0))
    if n < FEWEST or not np.any(residual):
        return math.nan
    if up in (0, n):
        return -math.inf
    runs = 1 + int(np.count_nonzero((residual[1:] > 0) != (residual[:-1] > 0)))
    expected = 1 + 2 * up * (n - up) / n
    variance = (expected - 1) * (expected - 2) / (n - 1)
    return (runs - expected) / math.sqrt(variance) if variance > 0 else math.nan


def noticed_runs(residual: Vector) -> float:
    """``runs_score`` of residuals (n,) in order and in units of their uncertainties; NaN where all
    are so small that a trend among them matters to nobody."""
    if float(np.abs(residual).max(initial=0.0)) <= NOTICED:
        return math.nan
    return runs_score(residual)


def durbin_watson(residual: Vector) -> float:
    """Σ(r_{i+1} − r_i)²/Σ r_i² of residuals (n,) in order and in units of their uncertainties.

    Durbin and Watson, Biometrika 37, 409 (1950). Near 2 for independent ones; NaN without any.
    """
    size = float(residual @ residual)
    if len(residual) < 2 or size == 0:
        return math.nan
    return float(np.sum(np.diff(residual) ** 2)) / size


def outliers(residual: Vector) -> tuple[int, ...]:
    """Indices, worst first, of residuals (n,) in units of their uncertainties that are too large
    for chance: the largest of n normal ones gets there in 1 % of all sets (Bonferroni)."""
    from scipy.stats import norm

    n = len(residual)
    if not n:
        return ()
    limit = float(norm.isf(0.005 / n))
    worst = np.argsort(-np.abs(residual), kind="stable")
    return tuple(int(k) for k in worst if abs(residual[k]) > limit)


def chance(chi_square: float, degrees_of_freedom: int) -> float:
    """Probability of a χ² as large or larger by chance; NaN without degrees of freedom."""
    from scipy.stats import chi2

    if degrees_of_freedom <= 0 or not math.isfinite(chi_square):
        return math.nan
    return float(chi2.sf(chi_square, degrees_of_freedom))
