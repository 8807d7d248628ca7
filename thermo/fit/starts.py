"""Further starts for a fit whose first minimum looks like a false one.

χ² of exchange constants has several valleys (the other sign of a coupling, two couplings
exchanged); least squares finds the bottom of the one it starts in. Looked for is not the best of
all minima, which nothing finite can promise, but a way out of the commonest traps.
"""

from __future__ import annotations

import math
from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray

from thermo.fit.forward import Points
from thermo.fit.parameters import Parameter, Parameters
from thermo.fit.roles import FRACTION

Vector = NDArray[np.float64]

#: How many further starts are looked at, and how many of the best are followed.
FURTHER_STARTS = 6
FOLLOWED = 3
# What makes a minimum suspicious. The runs' limit is in standard deviations of their number, and
# only counts where the misfit is worth a better one.
MAX_REDUCED = 2.0
MIN_RUNS = -4.0
RUNS_REDUCED = 1.3
RUNS_SCATTER = 0.01
RUNS_POINTS = 20
# A parameter without bounds is sought up to this many times its start, on both sides of zero.
REACH = 3.0


def suspicious(
    parameters: Parameters,
    bound: NDArray[np.int64],
    sets: Sequence[Points],
    residuals: Vector,
    weighted: bool,
) -> bool:
    """Whether a minimum may be a false one.

    ``residuals`` (N,) in units of the points' uncertainties or, not ``weighted``, of their set's
    mean magnitude. Suspicious are a parameter at a bound (but not a paramagnetic fraction of 0),
    a reduced χ² far above 1, and residuals that follow each other's sign (Wald and Wolfowitz's
    runs, Ann. Math. Stat. 11, 147 (1940)).
    """
    for parameter, side in zip(parameters.free, bound, strict=True):
        none_at_all = parameter.role == FRACTION and side < 0 and parameter.lower == 0
        if side and not none_at_all:
            return True
    if weighted and residuals @ residuals > MAX_REDUCED * max(len(residuals) - len(bound), 1):
        return True
    first = 0
    for points in sets:
        part = residuals[first : first + len(points.field)]
        first += len(points.field)
        size = float(np.mean(part**2))
        matters = size > RUNS_REDUCED if weighted else size > RUNS_SCATTER**2
        order = np.lexsort((points.temperature, points.field))
        if matters and _runs(part[order]) < MIN_RUNS:
            return True
    return False


def _runs(residuals: Vector) -> float:
    """Number of runs of one sign, less that expected of chance, in standard deviations."""
    above = residuals > 0
    n, up = len(above), int(above.sum())
    if n < RUNS_POINTS:
        return 0.0
    if up in (0, n):
        return -math.inf
    runs = 1 + int(np.count_nonzero(above[1:] != above[:-1]))
    expected = 1 + 2 * up * (n - up) / n
    return (runs - expected) / math.sqrt((expected - 1) * (expected - 2) / (n - 1))


def further_starts(parameters: Parameters, count: int) -> list[Vector]:
    """``count`` starts of all free parameters, each (n_free,), always the same ones.

    Couplings and auxiliary parameters are spread evenly, by turns over what their bounds allow
    and over what lies near their starts; g, χ0 and ρ stay at theirs.
    """
    moved = [k for k, p in enumerate(parameters.free) if p.role in ("coupling", "auxiliary")]
    if not moved:
        return []
    # The additive recurrence of the generalised golden ratio: evenly spread in any dimension.
    ratio = 2.0
    for _ in range(60):
        ratio = (1 + ratio) ** (1 / (len(moved) + 1))
    step = ratio ** -np.arange(1.0, len(moved) + 1)
    scale = max((abs(parameters.free[k].start) for k in moved), default=0.0) or 1.0
    found = []
    for n in range(count):
        theta = parameters.start
        share = (0.5 + (n + 1) * step) % 1
        for k, s in zip(moved, share, strict=True):
            low, high = _box(parameters.free[k], scale, near=n % 2 == 1)
            theta[k] = low + s * (high - low)
        found.append(theta)
    return found


def _box(parameter: Parameter, scale: float, near: bool) -> tuple[float, float]:
    """Where to look for one parameter; ``scale`` is the size of the largest start."""
    low, high = parameter.lower, parameter.upper
    reach = REACH * (abs(parameter.start) or scale)
    if near or not math.isfinite(low):
        low = max(low, min(-reach, high - reach))
    if near or not math.isfinite(high):
        high = min(high, max(reach, low + reach))
    return low, high
