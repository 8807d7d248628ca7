"""Weighted least squares within bounds, from one start or from many."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.optimize import least_squares

from thermo.errors import StudyError
from thermo.fit.identify import combination, covariance_of, not_fixed, weak_names
from thermo.fit.problem import Problem
from thermo.fit.starts import FOLLOWED, further_starts, suspicious

Vector = NDArray[np.float64]

MAX_EVALUATIONS = 300
# Relative tolerances of cost, step and gradient: tight, since an evaluation without a solve is
# cheap and rounding in the levels is about 1e-14.
TOLERANCE = 1e-10
# A further start is followed roughly, and to the end only where it leads lower by this share.
EVALUATIONS_FOLLOWING = 30
TOLERANCE_FOLLOWING = 1e-5
LOWER = 1e-3
# A parameter this near a bound, in standard errors, that is still pushed outward, is at it.
NEAR_BOUND = 1e-2
# A coupling this many times all starts and temperatures has probably run away.
FAR = 30.0


@dataclass(frozen=True, eq=False)
class Minimum:
    """Where the minimiser ended. Arrays run over the free parameters.

    ``bound`` is −1, 0 or 1 (at lower, none, at upper). ``covariance`` is NaN in the rows and
    columns of parameters at a bound, and everywhere if the data do not fix the parameters: those
    named in ``weak`` then, of which the data do not depend at all on those in ``idle`` here.
    ``unfixed`` says which changes together leave the data as they are; ``singular_values`` are
    those of the Jacobian with columns of length one, of the parameters not at a bound.
    """

    theta: Vector
    residuals: Vector
    jacobian: Vector
    covariance: Vector
    bound: NDArray[np.int64]
    converged: bool
    identifiable: bool
    weak: str
    unfixed: str
    singular_values: Vector
    idle: tuple[str, ...]
    message: str
    n_starts: int


@dataclass(frozen=True, eq=False)
class End:
    """Where one start led."""

    theta: Vector
    bound: NDArray[np.int64]
    residuals: Vector
    converged: bool
    message: str

    @property
    def chi_square(self) -> float:
        return float(self.residuals @ self.residuals)


def minimise(problem: Problem, starts: int, always: bool = False) -> Minimum:
    """Least squares from the study's start and, where that minimum is suspicious or ``always``,
    from up to ``starts`` others; the lowest minimum found."""
    with np.errstate(all="ignore"):  # each point and slope is checked to be finite
        return _minimise(problem, starts, always)


def _minimise(problem: Problem, starts: int, always: bool) -> Minimum:
    end, n_starts, message = _lowest(problem, starts, always)
    theta, bound, residuals = end.theta, end.bound, end.residuals
    jacobian = problem.slopes(theta)
    inside = np.flatnonzero(bound == 0)
    covariance = np.full((len(theta), len(theta)), np.nan)
    part, singular, weak = covariance_of(jacobian[:, inside], problem.forward.cache.exact)
    covariance[np.ix_(inside, inside)] = part
    loose, idle = not_fixed(problem, theta, residuals, jacobian, covariance, inside)
    if loose:
        covariance[:] = np.nan
    free = [problem.parameters.free[k] for k in inside]
    names = [p.name for p in free]
    return Minimum(
        theta=theta,
        residuals=residuals,
        jacobian=jacobian,
        covariance=covariance,
        bound=bound,
        converged=end.converged,
        identifiable=weak is None and not loose,
        weak=(
            " and ".join(loose)
            if loose or weak is None
            else " and ".join(weak_names(weak, names, theta[inside]))
        ),
        unfixed=(
            ""
            if loose or weak is None
            else combination(weak, names, [p.unit for p in free], theta[inside])
        ),
        singular_values=singular,
        idle=idle,
        message=message,
        n_starts=n_starts,
    )


def _lowest(problem: Problem, starts: int, always: bool) -> tuple[End, int, str]:
    """The lowest end of all starts tried, how many these were, and how it was reached."""
    best = settle(problem, problem.parameters.start)
    doubtful = _doubtful(problem, best)
    others = further_starts(problem.parameters, starts) if doubtful or always else []
    if not others:
        return best, 1, best.message
    better = False
    heights = [_height(problem, theta, k, len(others)) for k, theta in enumerate(others)]
    # Asked for in any case, half of them are followed.
    followed = max(FOLLOWED, len(others) // 2) if always else FOLLOWED
    for k in np.argsort(heights, kind="stable")[:followed]:
        problem.stage = f"from further start {k + 1} of {len(others)}: "
        end = _follow(problem, others[k], best.chi_square)
        if end is not None:
            best, better = end, True
            if not always and not _doubtful(problem, best):
                break
    problem.stage = ""
    outcome = "this minimum is lower" if better else "none led lower"
    why = ", since the first led to a doubtful minimum," if doubtful else ""
    tried = f"{1 + len(others)} starts were tried{why}"
    return best, 1 + len(others), f"{best.message}; {tried} and {outcome}"


def _doubtful(problem: Problem, end: End) -> bool:
    parameters, sets = problem.parameters, problem.sets
    couplings = [
        problem.forward.couplings(parameters.values(t)) for t in (parameters.start, end.theta)
    ]
    size, far = (float(np.abs(c).max(initial=0.0)) for c in couplings)
    return (
        not end.converged
        or far > FAR * max(size, problem.hottest)
        or suspicious(parameters, end.bound, sets, end.residuals, problem.weighted)
    )


def _height(problem: Problem, theta: Vector, k: int, count: int) -> float:
    """χ² at the k-th further start, infinite where a tie has no value there."""
    problem.stage = f"further start {k + 1} of {count}: "
    try:
        residuals = problem.residuals(theta)
    except StudyError:
        return math.inf
    chi_square = float(residuals @ residuals)
    return chi_square if math.isfinite(chi_square) else math.inf


def _follow(problem: Problem, start: Vector, to_beat: float) -> End | None:
    """Where a further start leads, or None: not lower, or to where the model has no value."""
    try:
        theta, _, _ = descend(problem, start, (), TOLERANCE_FOLLOWING, EVALUATIONS_FOLLOWING)
        rough = problem.residuals(theta)
        if not rough @ rough < (1 - LOWER) * to_beat:
            return None
        return settle(problem, theta)
    except StudyError:
        return None


def settle(
    problem: Problem,
    start: Vector,
    held: tuple[int, ...] = (),
    tolerance: float = TOLERANCE,
    evaluations: int = MAX_EVALUATIONS,
) -> End:
    """Trust-region reflective least squares (Branch, Coleman and Li 1999, as in SciPy).

    Parameters that end at a bound are put on it and the others are fitted again, so the result is
    a minimum on that bound and not one that still creeps towards it. Those ``held`` stay as they
    are.
    """
    lower, upper = problem.parameters.bounds
    theta, converged, message = descend(problem, start, held, tolerance, evaluations)
    bound = np.zeros(len(theta), dtype=np.int64)
    for _ in range(len(theta)):
        new = _pushed(problem, theta, bound, lower, upper)
        new[list(held)] = 0
        if not np.any(new):
            break
        bound += new
        theta = np.where(bound < 0, lower, np.where(bound > 0, upper, theta))
        fixed = (*np.flatnonzero(bound).tolist(), *held)
        theta, converged, message = descend(problem, theta, fixed, tolerance, evaluations)
    return End(theta, bound, problem.residuals(theta), converged, message)


def descend(
    problem: Problem,
    start: Vector,
    held: tuple[int, ...],
    tolerance: float = TOLERANCE,
    evaluations: int = MAX_EVALUATIONS,
) -> tuple[Vector, bool, str]:
    """Minimise over all parameters but those held; theta, whether it converged, and how."""
    lower, upper = problem.parameters.bounds
    moving = np.array([k for k in range(len(start)) if k not in held], dtype=np.int64)
    if not moving.size:
        return start, True, "every free parameter sits at a bound"

    def full(x: Vector) -> Vector:
        theta = start.copy()
        theta[moving] = x
        return theta

    last = start

    def residuals(x: Vector) -> Vector:
        nonlocal last
        last = full(x)
        return problem.residuals(last)

    try:
        found = least_squares(
            residuals,
            start[moving],
            jac=lambda x: problem.slopes(full(x))[:, moving],
            bounds=(lower[moving], upper[moving]),
            method="trf",
            x_scale="jac",
            ftol=tolerance,
            xtol=tolerance,
            gtol=tolerance,
            max_nfev=evaluations,
        )
    except (ArithmeticError, ValueError):  # SciPy's words for numbers that are not finite
        raise problem.ran_away(last) from None
    how = {
        0: f"stopped after {evaluations} evaluations without settling",
        1: "the gradient vanished",
        2: "chi square no longer changed",
        3: "the parameters no longer changed",
        4: "chi square and the parameters no longer changed",
    }
    return full(found.x), found.status > 0, how.get(int(found.status), str(found.message))


def _pushed(
    problem: Problem, theta: Vector, bound: NDArray[np.int64], lower: Vector, upper: Vector
) -> NDArray[np.int64]:
    """−1 or 1 for each parameter that has newly run into its lower or upper bound."""
    new = np.zeros(len(theta), dtype=np.int64)
    near = np.minimum(theta - lower, upper - theta)
    if not np.any(np.isfinite(near) & (bound == 0)):
        return new
    jacobian = problem.slopes(theta)
    residuals = problem.residuals(theta)
    gradient = jacobian.T @ residuals
    # Error of one parameter with the others held: a lower limit of its standard error.
    error = 1 / np.maximum(np.linalg.norm(jacobian, axis=0), 1e-300)
    if not problem.weighted:
        error *= np.sqrt(residuals @ residuals / max(len(residuals) - len(theta), 1))
    for k in np.flatnonzero(bound == 0):
        size = max(abs(theta[k]), 1e-300)
        if theta[k] - lower[k] <= max(NEAR_BOUND * error[k], 1e-8 * size) and gradient[k] > 0:
            new[k] = -1
        if upper[k] - theta[k] <= max(NEAR_BOUND * error[k], 1e-8 * size) and gradient[k] < 0:
            new[k] = 1
    return new
