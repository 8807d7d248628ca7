"""Weighted least squares within bounds, and what the minimum says about the parameters."""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray
from scipy.optimize import least_squares

from thermo.errors import DataError, StudyError
from thermo.fit.forward import Forward, Points, set_points
from thermo.fit.measured import MAGNETIC
from thermo.fit.parameters import Parameters
from thermo.fit.roles import CHI0
from thermo.fit.starts import FOLLOWED, further_starts, suspicious
from thermo.fit.study import Study

Vector = NDArray[np.float64]

MAX_EVALUATIONS = 300
# Relative tolerances of cost, step and gradient: tight, since an evaluation without a solve is
# cheap and rounding in the levels is about 1e-14.
TOLERANCE = 1e-12
# A further start is followed roughly, and to the end only where it leads lower by this share.
EVALUATIONS_FOLLOWING = 30
TOLERANCE_FOLLOWING = 1e-5
LOWER = 1e-3
# A parameter this near a bound, in standard errors, that is still pushed outward, is at it.
NEAR_BOUND = 1e-2
# A relative change of the data below this is the differences' own error, or unmeasurable.
IDLE = 1e-5
# Squares of residuals and slopes up to here are finite.
FINITE = 1e140
# A standard error this many times what the parameter could be at all: the data do not fix it.
NOT_FIXED = 10.0
# A coupling this many times all starts and temperatures has probably run away.
FAR = 30.0
# Below this, the smallest singular value of the column-normalised Jacobian is only error.
SINGULAR = 1e-6


@dataclass(eq=False)
class Problem:
    """Residuals (observed less predicted, over the uncertainty) of a study's N points, then
    those of its priors (what was known less the value, over its error)."""

    parameters: Parameters
    forward: Forward
    sets: tuple[Points, ...]
    observed: Vector
    sigma: Vector
    weighted: bool
    n_evaluations: int = 0
    progress: Callable[[float, str], None] | None = None
    stage: str = ""
    _first: bool = field(default=True, repr=False)
    _last: tuple[bytes, Vector, Vector, bool] | None = field(default=None, repr=False)

    def residuals(self, theta: Vector) -> Vector:
        """(observed − predicted)/σ of points and priors, shape (N + priors,)."""
        return self._at(theta, slopes=self.forward.cache.exact)[0]

    def slopes(self, theta: Vector) -> Vector:
        """Exact derivatives of the residuals by the free parameters, (N + priors, n_free)."""
        jacobian = self._at(theta, slopes=True)[1]
        if not (np.abs(jacobian) < FINITE).all():
            raise self.ran_away(theta)
        if self._first:
            self._first = False
            self._refuse_idle(theta, jacobian)
        return jacobian

    def _at(self, theta: Vector, slopes: bool) -> tuple[Vector, Vector]:
        """Residuals and slopes, worked out together (these cost no more solves, if they are
        exact) and kept for the next question."""
        key = theta.tobytes()
        if self._last is not None and self._last[0] == key and not (slopes and not self._last[3]):
            return self._last[1], self._last[2]
        if not np.all(np.isfinite(theta)) or np.abs(theta).max(initial=0.0) > FINITE:
            raise self.ran_away(theta)
        values = self.parameters.values(theta)
        try:
            found = [self.forward.evaluate(points, values, slopes) for points in self.sets]
        except OverflowError:
            raise self.ran_away(theta) from None
        residuals = (self.observed - np.concatenate([f.value for f in found])) / self.sigma
        jacobian = -np.concatenate([f.slopes for f in found]) / self.sigma[:, None]
        for p in self.parameters.priors:
            if p.prior is not None:
                known, error = p.prior
                residuals = np.append(residuals, (known - values.value[p.name]) / error)
                slope = values.slope[p.name][None] / error
                jacobian = np.vstack([jacobian, -slope[:, : jacobian.shape[1]]])
        if not (np.abs(residuals) < FINITE).all():
            raise self.ran_away(theta)
        if self._last is None or self._last[0] != key:
            self.n_evaluations += 1
        self._last = (key, residuals, jacobian, slopes)
        if self.progress is not None:
            # The number of steps is not known beforehand; this creeps towards the end.
            done = 1 - 1 / (1 + self.n_evaluations / 10)
            solves = self.forward.cache.n_solves
            text = f"chi square {float(residuals @ residuals):.6g}, {solves} spectra"
            self.progress(done, self.stage + text)
        return residuals, jacobian

    def ran_away(self, theta: Vector) -> StudyError:
        """The error where the model's points, or their slopes, are no longer usable numbers."""
        free, start = self.parameters.free, self.parameters.start
        if np.array_equal(theta, start):
            shown = ", ".join(f"{p.name} = {x:g}" for p, x in zip(free, start, strict=True))
            return StudyError(
                f"at the start, {shown}, the model and the data over their uncertainties are too "
                "far apart to compute with; check the starts, the units and the uncertainties"
            )
        far = np.abs(theta) / np.maximum(np.abs(start), 1e-3 * np.abs(start).max(initial=1.0))
        k = int(np.argmax(np.where(np.isfinite(far), far, np.inf)))
        return StudyError(
            f"parameters.{free[k].name} ran away from its start {start[k]:g} to {theta[k]:g}, "
            "where the model gives no usable numbers; give it bounds, another start or a fixed "
            "value"
        )

    def reach(self, theta: Vector) -> Vector:
        """By how much each free parameter could at all differ, (n_free,); NaN where any size may.

        A coupling by itself, its start, the largest coupling or the highest temperature; an
        auxiliary parameter by what changes a coupling so; χ0, ρ and their like, which the data
        depend on linearly or which have limits, cannot run away.
        """
        p = self.parameters
        now, then = p.values(theta), p.values(p.start)
        scale = max(float(np.abs(self.forward.couplings(v)).max(initial=0.0)) for v in (now, then))
        scale = max(scale, self.hottest)
        found = np.maximum(np.abs(theta), np.abs(p.start))
        names = list(self.forward.model.couplings)
        for k, parameter in enumerate(p.free):
            if parameter.role == "weiss_temperature":
                found[k] = max(found[k], self.hottest * self.forward.kelvin)
            elif parameter.role == "intercluster_coupling":
                found[k] = max(found[k], scale)
            elif parameter.role not in ("coupling", "auxiliary", "g"):
                found[k] = math.nan
            elif parameter.role != "g":
                steep = max((abs(float(now.slope[name][k])) for name in names), default=0.0)
                found[k] = max(found[k], scale / steep if steep > 0 else 0.0)
        return found

    @property
    def hottest(self) -> float:
        """The highest temperature of the points, in the model's energy unit."""
        highest = max(float(points.temperature.max()) for points in self.sets)
        return highest / self.forward.kelvin

    def _refuse_idle(self, theta: Vector, jacobian: Vector) -> None:
        values = self.parameters.values(theta)
        largest = float(np.abs(self.forward.couplings(values)).max(initial=0.0))
        for k, parameter in enumerate(self.parameters.free):
            if parameter.role not in ("coupling", "g", "paramagnetic_fraction", "auxiliary"):
                continue  # whether it matters was known from the quantities
            reach = max(abs(float(theta[k])), largest if parameter.role == "coupling" else 1.0)
            moved = float(np.linalg.norm(jacobian[:, k])) * reach
            if moved < IDLE * float(np.linalg.norm(self.observed / self.sigma)):
                raise StudyError(
                    f"the data do not change with parameters.{parameter.name} at its start "
                    f"{theta[k]:g}; fix it, or start it elsewhere"
                )


@dataclass(frozen=True, eq=False)
class Minimum:
    """Where the minimiser ended. Arrays run over the free parameters.

    ``bound`` is −1, 0 or 1 (at lower, none, at upper). ``covariance`` is NaN in the rows and
    columns of parameters at a bound, and everywhere if the data do not fix the parameters: those
    named in ``weak`` then, of which the data do not depend at all on those in ``idle`` here.
    """

    theta: Vector
    residuals: Vector
    jacobian: Vector
    covariance: Vector
    bound: NDArray[np.int64]
    converged: bool
    identifiable: bool
    weak: str
    idle: tuple[str, ...]
    message: str
    n_starts: int


@dataclass(frozen=True, eq=False)
class _End:
    """Where one start led."""

    theta: Vector
    bound: NDArray[np.int64]
    residuals: Vector
    converged: bool
    message: str

    @property
    def chi_square(self) -> float:
        return float(self.residuals @ self.residuals)


def make_problem(
    study: Study, forward: Forward, progress: Callable[[float, str], None] | None
) -> Problem:
    """The residuals of a study; without uncertainties each set is weighted by its mean size."""
    sigma = [
        data.uncertainty
        if data.uncertainty is not None
        else np.full(data.n_points, np.mean(np.abs(data.value)))
        for data in study.sets
    ]
    sets = tuple(set_points(data) for data in study.sets)
    _refuse_negative(study, forward, sets)
    observed = np.concatenate([data.value for data in study.sets])
    return Problem(
        study.parameters,
        forward,
        sets,
        observed,
        np.concatenate(sigma),
        study.weighted,
        progress=progress,
    )


def _refuse_negative(study: Study, forward: Forward, sets: tuple[Points, ...]) -> None:
    """Spins have no negative χ, C or M: data below zero throughout need a free χ0."""
    values = study.parameters.values(study.parameters.start)
    for data, points in zip(study.sets, sets, strict=True):
        name = points.names.get(CHI0, CHI0)
        if np.any(values.slope[name]):
            continue
        chi0 = values.value[name]
        spins = data.value - chi0 * forward.chi0_part(points)
        error = 0.0 if data.uncertainty is None else 3 * data.uncertainty
        if np.all(spins + error < 0):
            less = ", less the fixed chi0," if chi0 and data.quantity in MAGNETIC else ""
            hint = ", or leave chi0 free" if data.quantity in MAGNETIC else ""
            raise DataError(
                f"{data.file}: all values{less} are negative, which the {data.quantity} of spins "
                f"alone cannot be; check the sign and the correction for the sample's holder{hint}"
            )


def minimise(problem: Problem, starts: int) -> Minimum:
    """Least squares from the study's start and, where that minimum is suspicious, from up to
    ``starts`` others; the lowest minimum found."""
    with np.errstate(all="ignore"):  # each point and slope is checked to be finite
        return _minimise(problem, starts)


def _minimise(problem: Problem, starts: int) -> Minimum:
    end, n_starts, message = _lowest(problem, starts)
    theta, bound, residuals = end.theta, end.bound, end.residuals
    jacobian = problem.slopes(theta)
    inside = np.flatnonzero(bound == 0)
    covariance = np.full((len(theta), len(theta)), np.nan)
    part, weak = _covariance(jacobian[:, inside])
    covariance[np.ix_(inside, inside)] = part
    loose, idle = _not_fixed(problem, theta, residuals, jacobian, covariance, inside)
    if loose:
        covariance[:] = np.nan
    names = [problem.parameters.free[k].name for k in inside]
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
            else _combination(weak, names, theta[inside])
        ),
        idle=idle,
        message=message,
        n_starts=n_starts,
    )


def _lowest(problem: Problem, starts: int) -> tuple[_End, int, str]:
    """The lowest end of all starts tried, how many these were, and how it was reached."""
    best = _settle(problem, problem.parameters.start)
    others = further_starts(problem.parameters, starts) if _doubtful(problem, best) else []
    if not others:
        return best, 1, best.message
    better = False
    heights = [_height(problem, theta, k, len(others)) for k, theta in enumerate(others)]
    for k in np.argsort(heights, kind="stable")[:FOLLOWED]:
        problem.stage = f"from further start {k + 1} of {len(others)}: "
        end = _follow(problem, others[k], best.chi_square)
        if end is not None:
            best, better = end, True
            if not _doubtful(problem, best):
                break
    problem.stage = ""
    outcome = "this minimum is lower" if better else "none led lower"
    return (
        best,
        1 + len(others),
        f"{best.message}; {1 + len(others)} starts were tried, since the first led to a doubtful "
        f"minimum, and {outcome}",
    )


def _doubtful(problem: Problem, end: _End) -> bool:
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


def _follow(problem: Problem, start: Vector, to_beat: float) -> _End | None:
    """Where a further start leads, or None: not lower, or to where the model has no value."""
    try:
        theta, _, _ = _descend(problem, start, (), TOLERANCE_FOLLOWING, EVALUATIONS_FOLLOWING)
        rough = problem.residuals(theta)
        if not rough @ rough < (1 - LOWER) * to_beat:
            return None
        return _settle(problem, theta)
    except StudyError:
        return None


def _settle(problem: Problem, start: Vector) -> _End:
    """Trust-region reflective least squares (Branch, Coleman and Li 1999, as in SciPy).

    Parameters that end at a bound are put on it and the others are fitted again, so the result is
    a minimum on that bound and not one that still creeps towards it.
    """
    lower, upper = problem.parameters.bounds
    theta, converged, message = _descend(problem, start, ())
    bound = np.zeros(len(theta), dtype=np.int64)
    for _ in range(len(theta)):
        new = _pushed(problem, theta, bound, lower, upper)
        if not np.any(new):
            break
        bound += new
        theta = np.where(bound < 0, lower, np.where(bound > 0, upper, theta))
        theta, converged, message = _descend(problem, theta, tuple(np.flatnonzero(bound)))
    return _End(theta, bound, problem.residuals(theta), converged, message)


def _descend(
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


def _covariance(jacobian: Vector) -> tuple[Vector, Vector | None]:
    """(JᵀJ)⁻¹ by singular values, and the direction the data do not fix (None: all are fixed)."""
    n = jacobian.shape[1]
    if n == 0:
        return np.empty((0, 0)), None
    length = np.linalg.norm(jacobian, axis=0)
    length = np.where(length > 0, length, 1.0)
    _, singular, rotation = np.linalg.svd(jacobian / length, full_matrices=False)
    if singular.size < n or singular[-1] <= SINGULAR * singular[0]:
        return np.full((n, n), np.nan), rotation[-1] / length
    half = rotation.T / singular / length[:, None]
    return half @ half.T, None


def _not_fixed(
    problem: Problem,
    theta: Vector,
    residuals: Vector,
    jacobian: Vector,
    covariance: Vector,
    inside: NDArray[np.int64],
) -> tuple[list[str], tuple[str, ...]]:
    """Parameters whose errors exceed all they could be, and those of them that change nothing.

    The singular values cannot tell: each column is divided by its own length there, however
    small. A single column counts as nothing where the parameter's whole reach moves χ² by ≪ 1.
    """
    reach = problem.reach(theta)
    scale = 1.0
    if not problem.weighted:
        scale = math.sqrt(float(residuals @ residuals) / max(len(residuals) - len(theta), 1))
    length = np.linalg.norm(jacobian, axis=0)
    loose, idle = [], []
    for k in inside:
        name = problem.parameters.free[k].name
        if length[k] * reach[k] * NOT_FIXED < scale:
            idle.append(name)
            loose.append(name)
        elif scale * math.sqrt(covariance[k, k]) > NOT_FIXED * reach[k]:
            loose.append(name)
    return loose, tuple(idle)


def _combination(direction: Vector, names: list[str], theta: Vector) -> str:
    """The weak direction in words: the parameters that can move together unnoticed."""
    size = np.abs(theta)
    share = np.abs(direction) / np.where(size > 0, size, 1.0)
    share = share / share.max()
    return " and ".join(name for name, s in zip(names, share, strict=True) if s > 0.05)
