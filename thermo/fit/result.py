"""What a fit found: values with errors, residuals, and honest words about both."""

from __future__ import annotations

import json
import math
from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import ArrayLike, NDArray

from thermo.errors import RangeError, StudyError
from thermo.fit.cautions import find_cautions
from thermo.fit.doubts import of_residuals, of_solver, of_surroundings
from thermo.fit.forward import Forward, Points
from thermo.fit.measured import QUANTITIES, Measured
from thermo.fit.minimise import Minimum
from thermo.fit.parameters import Values
from thermo.fit.problem import Problem
from thermo.fit.residual_tests import along, durbin_watson, outliers, runs_score
from thermo.fit.strict import did_you_mean
from thermo.fit.study import Study
from thermo.model.spin_model import SpinModel
from thermo.numbers import plain, with_uncertainty
from thermo.units import quantity_factor

if TYPE_CHECKING:
    import xarray as xr

    from thermo.fit.window import Window

Vector = NDArray[np.float64]

CURVE_POINTS = 240
#: Levels of intervals, and the rise of χ² that belongs to each (one degree of freedom).
RISE = {0.68: 0.988946, 0.95: 3.841459}
# Residuals below this share of their uncertainties say nothing.
NOTICED = 0.1


@dataclass(frozen=True)
class Interval:
    """A profile interval: ``level`` 0.68 or 0.95 and its ends, NaN where an end was not found and
    infinite where there is none; whether an end is the parameter's bound (and might lie beyond).
    """

    level: float
    lower: float
    upper: float
    lower_at_bound: bool = False
    upper_at_bound: bool = False


@dataclass(frozen=True)
class Estimate:
    """One parameter after the fit, in ``unit``.

    ``status`` "free", "fixed" or "tied" (then ``expression``); ``at_bound`` −1, 0, 1 for lower,
    none, upper. ``standard_error`` is NaN for a fixed parameter and wherever it would mean
    nothing; ``reason`` then says why. ``prior`` (value, error) is what was known beforehand, and
    ``usual_prior`` that this is the program's supposition, not the study's. ``intervals`` are
    its profile intervals, where they were looked for.
    """

    name: str
    role: str
    status: str
    unit: str
    value: float
    standard_error: float
    start: float
    lower: float
    upper: float
    at_bound: int
    expression: str
    reason: str
    prior: tuple[float, float] | None = None
    usual_prior: bool = False
    intervals: tuple[Interval, ...] = ()

    def interval(self, level: float) -> Interval | None:
        """The profile interval of a level, 0.68 or 0.95; None where it was not looked for."""
        return next((i for i in self.intervals if i.level == level), None)

    def confidence(self, level: float) -> tuple[float, float]:
        """The ends of an interval of level 0.68 or 0.95: the profile's where there is one, else
        from the standard error; NaN where neither is known."""
        found = self.interval(level)
        if found is not None:
            return found.lower, found.upper
        width = math.sqrt(RISE[level]) * self.standard_error
        return self.value - width, self.value + width

    def __str__(self) -> str:
        """Like "J = -42.00(16) cm-1", with what else there is to know in brackets."""
        unit = "" if self.unit == "1" else f" {self.unit}"
        remark = self.reason
        if self.at_bound:
            remark = f"at its {'lower' if self.at_bound < 0 else 'upper'} bound"
        elif self.status == "tied":
            remark = f"= {self.expression}" + (f"; {self.reason}" if self.reason else "")
        text = f"{self.name} = {with_uncertainty(self.value, self.standard_error)}{unit}"
        return text + (f" ({remark})" if remark else "")


@dataclass(frozen=True, eq=False)
class SetResult:
    """One data set after the fit; arrays of shape (n,) in SI (see ``data``).

    ``uncertainty`` is what weighed the points; where the study states none, it is the scatter
    found. ``residual`` is observed less fitted, ``chi_square`` the sum of their squares over
    ``uncertainty`` squared.
    """

    data: Measured
    fitted: Vector
    residual: Vector
    uncertainty: Vector
    chi_square: float

    @property
    def standardised(self) -> Vector:
        """Residuals over their uncertainty, field by field along the temperature, (n,)."""
        safe = np.where(self.uncertainty > 0, self.uncertainty, 1.0)
        order = along(self.data.temperature, self.data.field)
        found: Vector = (self.residual / safe)[order]
        return found

    @property
    def runs_score(self) -> float:
        """Runs of one sign less those expected, in standard deviations; below −3 is a trend."""
        return runs_score(self.standardised)

    @property
    def durbin_watson(self) -> float:
        """Near 2 for independent residuals, near 0 where each is like the one before."""
        return durbin_watson(self.standardised)

    @property
    def outliers(self) -> tuple[int, ...]:
        """Indices of points too far off to be chance (1 % for the whole set), worst first."""
        safe = np.where(self.uncertainty > 0, self.uncertainty, 1.0)
        return outliers(self.residual / safe)


@dataclass(frozen=True, eq=False, repr=False)
class FitResult:
    """The outcome of a fit.

    ``covariance`` and ``correlation`` run over ``free_names``, in the parameters' units, NaN for
    those at a bound. ``error_basis`` "stated": errors follow from the stated uncertainties, and
    ``reduced_chi_square`` tests the model; "scatter": none were stated, errors follow from the
    residuals' own scatter (errors scaled by the root of the reduced χ²) and
    ``reduced_chi_square`` is NaN, because it then tests nothing. ``n_solves`` counts
    diagonalisations of the cluster, ``n_evaluations`` model curves, ``n_starts`` the starts tried,
    all from beginning to end. ``converged`` is about the minimiser only; ``trustworthy`` asks all
    the questions at once. ``singular_values`` are those of the Jacobian with columns of length
    one, descending: a small last one says that a combination of parameters is hardly fixed, and
    ``unfixed`` names it where it is not fixed at all. ``print(result)`` gives it in a few lines.
    """

    study: Study
    parameters: tuple[Estimate, ...]
    free_names: tuple[str, ...]
    covariance: Vector
    correlation: Vector
    chi_square: float
    reduced_chi_square: float
    degrees_of_freedom: int
    n_points: int
    n_masked: int
    error_basis: str
    converged: bool
    identifiable: bool
    message: str
    n_starts: int
    cautions: tuple[str, ...]
    sets: tuple[SetResult, ...]
    n_solves: int
    n_evaluations: int
    forward: Forward
    values: Values
    window: Window | None = None
    singular_values: Vector = field(default_factory=lambda: np.empty(0))
    unfixed: str = ""

    def __repr__(self) -> str:
        """Values with errors, χ² and cautions, a line each."""
        if math.isfinite(self.reduced_chi_square):
            test = f"reduced χ² = {plain(self.reduced_chi_square, 4)}"
        else:
            test = "reduced χ² unknown, since no uncertainties are stated"
        state = "converged" if self.converged else "NOT converged"
        lines = [
            f"Fit of {self.study.title}",
            *(f"  {e}" for e in self.parameters if math.isfinite(e.value)),
            f"χ² = {plain(self.chi_square, 5)} with {self.degrees_of_freedom} degrees of freedom, "
            f"{test}; {state}",
            *(f"Caution: {caution}" for caution in self.cautions),
        ]
        return "\n".join(lines)

    def __getitem__(self, name: str) -> Estimate:
        """The estimate of a parameter by its name."""
        for estimate in self.parameters:
            if estimate.name == name:
                return estimate
        raise StudyError(
            f"the fit has no parameter {name!r}; "
            + did_you_mean(name, [e.name for e in self.parameters])
        )

    @property
    def at_bound(self) -> tuple[str, ...]:
        """Names of the parameters that sit at a bound."""
        return tuple(e.name for e in self.parameters if e.at_bound)

    @property
    def trustworthy(self) -> bool:
        """Converged, no bound hit, all fixed by the data; not that the model is right."""
        return self.converged and self.identifiable and not self.at_bound

    @property
    def scatter(self) -> float:
        """The root of the reduced χ² where no uncertainties are stated (relative to each set's
        mean magnitude); 1 where they are."""
        if self.error_basis == "stated":
            return 1.0
        sums = 0.0
        for item in self.sets:
            size = float(np.mean(np.abs(item.data.value)))
            sums += float(item.residual @ item.residual) / size**2
        return math.sqrt(sums / self.degrees_of_freedom)

    @property
    def couplings(self) -> Mapping[str, float]:
        """The fitted couplings, in the model's energy unit."""
        return {e.name: e.value for e in self.parameters if e.role == "coupling"}

    @property
    def model(self) -> SpinModel:
        """The model with the fitted couplings (its g is still the model file's)."""
        return self.study.model.with_couplings(self.couplings)

    def predict(
        self,
        quantity: str,
        temperature: ArrayLike,
        field: ArrayLike = 0.0,
        per: str = "ion",
        units: str | None = None,
        sample: str = "",
    ) -> Vector:
        """The fitted model's curve, with all that surrounds the spins (of ``sample``, where the
        study has several), but no scale error of a measurement.

        ``temperature`` [K, above zero] and ``field`` [T, from zero] broadcast against each
        other; the result has their common shape, in ``units`` (default SI) per mole of ``per``
        ("ion" or "formula"). No solve is needed. Raises RangeError, UnitsError, UnavailableError.
        """
        if quantity not in QUANTITIES:
            raise RangeError(
                f"quantity {quantity!r} is unknown; {did_you_mean(quantity, QUANTITIES)}"
            )
        if per not in ("ion", "formula"):
            raise RangeError(f"per = {per!r} is unknown; use 'ion' or 'formula'")
        try:
            T, B = np.broadcast_arrays(
                np.asarray(temperature, dtype=np.float64), np.asarray(field, dtype=np.float64)
            )
        except ValueError:
            raise RangeError(
                "temperature and field must be numbers whose shapes fit together"
            ) from None
        if not np.all(np.isfinite(T)) or np.any(T <= 0):
            raise RangeError("every temperature must be a finite number above zero")
        if not np.all(np.isfinite(B)) or np.any(B < 0):
            raise RangeError("every field must be a finite number from zero upwards")
        factor = 1.0
        if units is not None:
            factor = quantity_factor(quantity, units, reduced=self.study.reduced)
        points = Points(quantity, np.ravel(T), np.ravel(B), per, self._names_of(sample))
        return self.forward.predict(points, self.values).reshape(T.shape) / factor

    def _names_of(self, sample: str) -> Mapping[str, str]:
        for data in self.study.sets:
            if data.sample == sample:
                return data.parameter_names
        if not sample:
            return {}
        known = sorted({data.sample for data in self.study.sets if data.sample})
        raise RangeError(f"sample {sample!r} is unknown; {did_you_mean(sample, known)}")

    def to_dataset(self) -> xr.Dataset:
        """The result as a ``fit`` dataset (see thermo.variables), with smooth curves to draw."""
        from thermo.fit.dataset import fit_dataset

        return fit_dataset(self)

    def attributes(self) -> dict[str, str | int | float]:
        """What the dataset says of the fit in words and numbers."""
        model = self.study.model
        return {
            "title": self.study.title,
            "energy_unit": model.energy_unit,
            "bond_term": model.bond_term,
            "n_sites": len(model.sites),
            "ions_per_formula": float(model.ions_per_formula),
            "model_text": model.text,
            "model_digest": model.digest,
            "model_couplings": json.dumps(dict(self.couplings)),
            "study_text": self.study.text,
            "method": str(getattr(self.forward.cache.solver, "method", "full")),
            "error_basis": self.error_basis,
            "message": self.message,
            "cautions": "\n".join(self.cautions),
            "spectra_solved": self.n_solves,
            "starts_tried": self.n_starts,
            "points_masked": self.n_masked,
        }


def make_result(study: Study, problem: Problem, minimum: Minimum) -> FitResult:
    """Turn a minimum into estimates with errors."""
    theta, free = minimum.theta, study.parameters.free
    values = study.parameters.values(theta)
    chi_square = float(minimum.residuals @ minimum.residuals)
    n_points, dof = study.n_points, study.degrees_of_freedom
    weighted = study.weighted
    # Without stated uncertainties the weights are only relative: their scale is the scatter.
    scale = 1.0 if weighted else math.sqrt(chi_square / dof)
    covariance = minimum.covariance * scale**2
    error = np.sqrt(np.diag(covariance))
    with np.errstate(invalid="ignore", divide="ignore"):
        correlation = covariance / np.outer(error, error)
    held = np.flatnonzero(minimum.bound)
    estimates = []
    for p in study.parameters.all:
        k = next((i for i, q in enumerate(free) if q.name == p.name), None)
        spread, reason = _error(values.slope[p.name], covariance, held, minimum, p.status)
        value = values.value[p.name]
        estimates.append(
            Estimate(
                name=p.name,
                role=p.role,
                status=p.status,
                unit=p.unit,
                value=value,
                standard_error=spread,
                start=study.parameters.values(study.parameters.start).value[p.name],
                lower=p.lower,
                upper=p.upper,
                at_bound=0 if k is None else int(minimum.bound[k]),
                expression=p.expression,
                reason=reason,
                prior=p.prior if p.status != "fixed" else None,
                usual_prior=p.usual,
            )
        )
    sets, first = [], 0
    for data in study.sets:
        rows = slice(first, first + data.n_points)
        first += data.n_points
        residual = minimum.residuals[rows] * problem.sigma[rows]
        # Noise-free points without uncertainties have no scatter to show.
        share = minimum.residuals[rows] / scale if scale > 0 else np.zeros(data.n_points)
        sets.append(
            SetResult(
                data=data,
                fitted=data.value - residual,
                residual=residual,
                uncertainty=problem.sigma[rows] * scale,
                chi_square=float(share @ share),
            )
        )
    reduced = chi_square / dof if weighted and dof > 0 else math.nan
    result = FitResult(
        study=study,
        parameters=tuple(estimates),
        free_names=tuple(p.name for p in free),
        covariance=covariance,
        correlation=correlation,
        chi_square=sum(item.chi_square for item in sets),
        reduced_chi_square=reduced,
        degrees_of_freedom=dof,
        n_points=n_points,
        n_masked=sum(data.n_masked for data in study.sets),
        error_basis="stated" if weighted else "scatter",
        converged=minimum.converged,
        identifiable=minimum.identifiable,
        message=minimum.message,
        n_starts=minimum.n_starts,
        cautions=(
            *find_cautions(
                study, minimum, estimates, covariance, problem.forward.cache.resolved, scale
            ),
            *_doubts(study, problem, values, sets),
        ),
        sets=tuple(sets),
        n_solves=problem.forward.cache.n_solves,
        n_evaluations=problem.n_evaluations,
        forward=problem.forward,
        values=values,
        singular_values=minimum.singular_values,
        unfixed=minimum.unfixed,
    )
    return result


def _doubts(
    study: Study, problem: Problem, values: Values, sets: list[SetResult]
) -> tuple[str, ...]:
    found = [problem.forward.evaluate(points, values, slopes=False) for points in problem.sets]
    told = of_solver(problem.forward.cache)
    told += of_surroundings(study.model, study.parameters, values, study.sets, found)
    for item in sets:
        scores = item.residual / np.where(item.uncertainty > 0, item.uncertainty, 1.0)
        # What rounding leaves of exact points is no trend.
        if study.weighted and float(np.abs(scores).max(initial=0.0)) > NOTICED:
            told += of_residuals(
                item.data, item.runs_score, item.durbin_watson, item.outliers, scores.tolist()
            )
    return tuple(told)


def _error(
    slope: Vector, covariance: Vector, held: NDArray[np.int64], minimum: Minimum, status: str
) -> tuple[float, str]:
    """Standard error of a parameter with this slope by the free ones, and why there is none."""
    moved = np.flatnonzero(slope)
    if status == "fixed":
        return math.nan, "fixed"
    if not moved.size:
        return math.nan, "tied to fixed values"
    if np.any(np.isin(moved, held)):
        return math.nan, "at a bound" if status == "free" else "tied to a parameter at a bound"
    if not minimum.identifiable:
        return math.nan, f"the data do not fix {minimum.weak}"
    return float(np.sqrt(slope[moved] @ covariance[np.ix_(moved, moved)] @ slope[moved])), ""
