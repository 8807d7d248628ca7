"""The residuals of a study, with their exact slopes, as a minimiser wants them."""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from thermo.errors import DataError, StudyError
from thermo.fit.forward import Forward, Points, set_points
from thermo.fit.measured import MAGNETIC
from thermo.fit.parameters import Parameters
from thermo.fit.roles import CHI0
from thermo.fit.study import Study

Vector = NDArray[np.float64]

# A relative change of the data below this is rounding, or unmeasurable.
IDLE = 1e-5
# Squares of residuals and slopes up to here are finite.
FINITE = 1e140


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
