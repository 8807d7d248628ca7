"""Profile intervals: how far a parameter can move while all others follow it.

A parameter's profile is χ² minimised over all others; its interval of level p runs to where the
profile has risen by the quantile of χ² with one degree of freedom (Venzon and Moolgavkar, Appl.
Stat. 37, 87 (1988)). Unlike the standard error it knows of curvature and of bounds. Least squares
with one parameter held find it in some 5 evaluations for each end, since they know the exact
slopes of every point; where they do not, and the study asks for the interval, MINOS of Minuit has
a try (James and Roos, Comput. Phys. Commun. 10, 343 (1975), by iminuit), which knows the slopes of
χ² only and takes 15 times as many.
"""

from __future__ import annotations

import math
import time
from collections.abc import Callable
from dataclasses import replace

import numpy as np
from numpy.typing import NDArray

from thermo.errors import StudyError
from thermo.fit.minimise import settle
from thermo.fit.problem import Problem, make_problem
from thermo.fit.result import RISE, FitResult, Interval

Vector = NDArray[np.float64]

# A bound this many standard errors away is felt.
NEAR = 3.0
# Correlations from here on bend a profile.
STRONG = 0.95
# Profiles nobody asked for may take so many seconds, at so many evaluations each.
PATIENCE = 20.0
EVALUATIONS = 60
# A profile ends within this share of its rise.
CLOSE = 2e-3
STEPS = 14
# From so many standard errors on, an end counts as infinite.
FAR = 1e3
TOLERANCE = 1e-6
# Evaluations that MINOS may take where least squares found no end.
CALLS = 1000


def add_profiles(
    result: FitResult, which: str = "auto", progress: Callable[[float, str], None] | None = None
) -> FitResult:
    """The result with the profile intervals it needs.

    ``which``: "auto" for parameters that the study asks for, and those near a bound or strongly
    correlated where a spectrum takes little time; "asked"; "none"; "all". Cost: some 30
    evaluations, each a spectrum where couplings move against each other, per parameter.
    """
    names = list(result.free_names)
    if which == "none" or not result.converged or not result.identifiable:
        return result
    asked = [n for n in names if which == "all" or n in result.study.asked]
    needy = [n for n in _needy(result) if n not in asked] if which == "auto" else []
    if not asked and not needy:
        return result
    problem = make_problem(result.study, result.forward, None)
    theta = np.array([result[n].value for n in names])
    skipped: list[str] = []
    if needy and _seconds(problem, theta) * EVALUATIONS * len(needy) > PATIENCE:
        needy, skipped = [], needy
    found: dict[str, tuple[Interval, ...]] = {}
    lower = False
    until = time.perf_counter() + PATIENCE
    for count, name in enumerate(wanted := [*asked, *needy]):
        if name in needy and time.perf_counter() > until:
            skipped.append(name)
            continue
        if progress is not None:
            progress(count / len(wanted), f"profile of {name}")
        found[name], better = _profile(problem, theta, names.index(name), result)
        lower |= better
    cautions = list(result.cautions)
    if lower:
        cautions.insert(
            0,
            "a profile led to a lower minimum than the fit: its values and errors are not the "
            "last word; start the fit elsewhere, or try starts = 20 in the study",
        )
    if skipped:
        cautions.append(
            f"profile intervals of {', '.join(skipped)}, whose standard errors may mislead, "
            f"were left out, since they take more than {PATIENCE:.0f} s; name them in the study's "
            "profile to have them"
        )
    return replace(
        result,
        parameters=tuple(
            replace(e, intervals=found[e.name]) if e.name in found else e for e in result.parameters
        ),
        cautions=tuple(cautions),
        n_solves=result.forward.cache.n_solves,
    )


def _needy(result: FitResult) -> list[str]:
    """Free parameters whose standard error may mislead: near a bound, strongly correlated, or all
    with one at its bound, since the others' errors then know nothing of its leaving it."""
    if result.at_bound:
        return list(result.free_names)
    found = []
    correlation = np.nan_to_num(result.correlation) - np.eye(len(result.free_names))
    for k, name in enumerate(result.free_names):
        e = result[name]
        reach = NEAR * e.standard_error
        near = e.value - e.lower < reach or e.upper - e.value < reach
        strong = bool(np.any(np.abs(correlation[k]) > STRONG))
        if near or strong:
            found.append(name)
    return found


def _seconds(problem: Problem, theta: Vector) -> float:
    """What one evaluation takes at new couplings."""
    lower, upper = problem.parameters.bounds
    moved = np.clip(theta * (1 + 1e-5 * np.arange(1, len(theta) + 1)), lower, upper)
    start = time.perf_counter()
    problem.residuals(moved)
    return time.perf_counter() - start


def _profile(
    problem: Problem, theta: Vector, k: int, result: FitResult
) -> tuple[tuple[Interval, ...], bool]:
    """The intervals of one parameter, and whether a lower minimum was met."""
    scale = result.scatter
    found, better = held(problem, theta, k, result, scale)
    lost = any(math.isnan(end) for i in found for end in (i.lower, i.upper))
    asked = result.free_names[k] in result.study.asked
    if lost and asked and not better and not result.at_bound:
        return minos(problem, theta, k, result, scale) or (found, False)
    return found, better


def minos(
    problem: Problem, theta: Vector, k: int, result: FitResult, scale: float
) -> tuple[tuple[Interval, ...], bool] | None:
    """Both intervals by MINOS; None where it does not succeed.

    ``scale`` is the root of the reduced χ² where no uncertainties are stated.
    """
    from iminuit import Minuit

    names = list(result.free_names)

    until = problem.n_evaluations + CALLS

    def cost(x: Vector) -> float:
        if problem.n_evaluations > until:
            raise RuntimeError("no end in sight")
        residuals = problem.residuals(np.asarray(x, dtype=np.float64))
        return float(residuals @ residuals) / scale**2

    def slope(x: Vector) -> Vector:
        at = np.asarray(x, dtype=np.float64)
        return 2 * problem.slopes(at).T @ problem.residuals(at) / scale**2

    fit = Minuit(cost, theta, grad=slope, name=names)
    fit.errordef = Minuit.LEAST_SQUARES
    fit.strategy = 0
    fit.tol = 0.1
    low, high = problem.parameters.bounds
    for n, name in enumerate(names):
        fit.limits[name] = (low[n], high[n])
        fit.errors[name] = result[name].standard_error
    try:
        fit.migrad()
        intervals = []
        for level in RISE:
            fit.minos(names[k], cl=level)
            ends = fit.merrors[names[k]]
            if ends.lower_new_min or ends.upper_new_min:
                return (), True
            sides = []
            for valid, at_limit, shift, bound in (
                (ends.lower_valid, ends.at_lower_limit, ends.lower, low[k]),
                (ends.upper_valid, ends.at_upper_limit, ends.upper, high[k]),
            ):
                if not valid and not at_limit:
                    return None
                end = float(bound) if at_limit else float(theta[k]) + shift
                sides.append((end, bool(at_limit)))
            intervals.append(Interval(level, sides[0][0], sides[1][0], sides[0][1], sides[1][1]))
    except (StudyError, ValueError, RuntimeError):
        return None
    return tuple(intervals), False


def held(
    problem: Problem, theta: Vector, k: int, result: FitResult, scale: float
) -> tuple[tuple[Interval, ...], bool]:
    """Both intervals by least squares with the parameter held, at a bound or not."""
    lower, upper = problem.parameters.bounds
    bottom = float(problem.residuals(theta) @ problem.residuals(theta))
    column = problem.slopes(theta)[:, k]
    error = result[result.free_names[k]].standard_error
    if not error > 0:
        error = scale / max(float(np.linalg.norm(column)), 1e-300)
    ends: dict[float, list[tuple[float, bool]]] = {level: [] for level in RISE}
    better = False
    for sign, bound in ((-1.0, lower[k]), (1.0, upper[k])):
        at = theta.copy()
        for level, rise in RISE.items():
            value, at_limit, at, new = _end(
                problem, theta, at, k, sign, bound, error, math.sqrt(rise) * scale, bottom
            )
            ends[level].append((value, at_limit))
            better |= new
    return (
        tuple(
            Interval(level, a[0], b[0], a[1], b[1]) for level, (a, b) in ends.items()
        ),
        better,
    )  # fmt: skip


def _end(
    problem: Problem,
    theta: Vector,
    start: Vector,
    k: int,
    sign: float,
    bound: float,
    error: float,
    wanted: float,
    bottom: float,
) -> tuple[float, bool, Vector, bool]:
    """Where the root of the profile's rise is ``wanted``: value, at the bound, the parameters
    there, and whether χ² fell instead. The root of the rise is nearly straight in the value."""
    reach = abs(bound - theta[k])
    if reach == 0:
        return float(bound), True, start, False
    inner, outer = (0.0, 0.0), (math.inf, math.inf)  # (distance, root of the rise) either side
    size = max(abs(start[k] - theta[k]), wanted * error)
    at = start
    for _ in range(STEPS):
        size = min(size, reach)
        if size > FAR * error:
            return sign * math.inf, False, at, False
        trial = at.copy()
        trial[k] = theta[k] + sign * size
        try:
            end = settle(problem, trial, (k,), TOLERANCE, 30)
            trial, residuals = end.theta, end.residuals
        except StudyError:
            return math.nan, False, at, False
        rise = float(residuals @ residuals) - bottom
        if rise < -CLOSE * wanted**2:
            return math.nan, False, at, True
        root = math.sqrt(max(rise, 0.0))
        at = trial
        if abs(root - wanted) <= CLOSE * wanted:
            return float(trial[k]), False, at, False
        if root < wanted:
            if size >= reach:
                return float(bound), True, at, False
            inner = (size, root)
        else:
            outer = (size, root)
        if math.isinf(outer[0]):
            size = size * wanted / root if root > 0.05 * wanted else 2 * size
            size = max(size, 1.05 * inner[0])
            continue
        # A little inside the straight line between the two, so that both ends close in.
        share = (wanted - inner[1]) / (outer[1] - inner[1])
        size = inner[0] + min(max(share, 0.05), 0.95) * (outer[0] - inner[0])
    return math.nan, False, at, False
