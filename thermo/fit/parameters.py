"""The parameters of a fit: what is free, fixed or tied, and their values with exact slopes.

A fit has the model's couplings (in the model's energy unit), the common ``g``, ``chi0`` and
``paramagnetic_fraction``, where the study names them what else surrounds the spins (fit/roles.py),
and auxiliary names that exist only to be used in ties (a ratio, say).
"""

from __future__ import annotations

import math
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from thermo.errors import StudyError, UnitsError
from thermo.fit.measured import LARGEST, SMALLEST, Measured
from thermo.fit.roles import (
    CHI0,
    FRACTION,
    NUISANCE,
    check_names,
    limits_of,
    natural_value,
    role_of,
    unit_of,
    usual_prior,
)
from thermo.fit.strict import Section, did_you_mean
from thermo.fit.ties import Dual, Tie, order_ties, parse_tie
from thermo.model.spin_model import SpinModel
from thermo.units import quantity_factor, unit_name

Vector = NDArray[np.float64]


@dataclass(frozen=True)
class Parameter:
    """One parameter of a study.

    ``role`` is "coupling", "g", "chi0", "paramagnetic_fraction", another of fit/roles.py, or
    "auxiliary"; ``status`` is "free", "fixed" or "tied". ``start`` is the start or fixed value
    (NaN where tied), in ``unit``. ``to_si`` takes it to SI per mole of ions (chi0 only, whose unit
    names its mole; 1 otherwise). ``prior`` is what is known of it beforehand, (value, error), and
    ``usual`` says that the study does not state it; ``spin`` is that of the impurities it counts
    (NaN: the model's ions).
    """

    name: str
    role: str
    status: str
    unit: str
    start: float
    lower: float = -math.inf
    upper: float = math.inf
    expression: str = ""
    to_si: float = 1.0
    prior: tuple[float, float] | None = None
    usual: bool = False
    spin: float = math.nan


@dataclass(frozen=True, eq=False)
class Values:
    """All parameters at one point θ of the free ones, with their slopes.

    ``value[name]`` in the parameter's unit; ``slope[name]`` by the free parameters, (n_free,).
    """

    value: Mapping[str, float]
    slope: Mapping[str, Vector]


class Parameters:
    """The parameters of a study in order, and the map from free values to all values."""

    def __init__(self, parameters: Iterable[Parameter], source: str = "the study") -> None:
        self.all: tuple[Parameter, ...] = tuple(parameters)
        self.by_name: dict[str, Parameter] = {p.name: p for p in self.all}
        self.free: tuple[Parameter, ...] = tuple(p for p in self.all if p.status == "free")
        try:
            ties = {
                p.name: parse_tie(p.name, p.expression, self.by_name)
                for p in self.all
                if p.status == "tied"
            }
            self.ties: tuple[Tie, ...] = order_ties(ties)
            used = {name for tie in self.ties for name in tie.names}
            for p in self.all:
                if p.role == "auxiliary" and p.name not in used:
                    known = [q.name for q in self.all if q.role != "auxiliary"]
                    raise StudyError(
                        f"parameters.{p.name} is neither a coupling of the model nor used in a "
                        f"tie; {did_you_mean(p.name, known)}"
                    )
            self.values(self.start)
        except StudyError as error:
            raise StudyError(f"{source}: {error}") from None

    @property
    def priors(self) -> tuple[Parameter, ...]:
        """The parameters that have a prior and are not fixed."""
        return tuple(p for p in self.all if p.prior is not None and p.status != "fixed")

    @property
    def start(self) -> Vector:
        """Start values of the free parameters, shape (n_free,)."""
        return np.array([p.start for p in self.free], dtype=np.float64)

    @property
    def bounds(self) -> tuple[Vector, Vector]:
        """Lower and upper bounds of the free parameters, each of shape (n_free,)."""
        lower = np.array([p.lower for p in self.free], dtype=np.float64)
        return lower, np.array([p.upper for p in self.free], dtype=np.float64)

    def values(self, theta: Vector) -> Values:
        """Every parameter's value and slope at the free values ``theta``, shape (n_free,)."""
        n = len(self.free)
        duals: dict[str, Dual] = {}
        for k, p in enumerate(self.free):
            duals[p.name] = Dual(float(theta[k]), np.eye(n)[k])
        for p in self.all:
            if p.status == "fixed":
                duals[p.name] = Dual(p.start, np.zeros(n))
        for tie in self.ties:
            duals[tie.parameter] = tie.evaluate(duals)
        return Values(
            {p.name: duals[p.name].value for p in self.all},
            {p.name: duals[p.name].gradient for p in self.all},
        )


def read_parameters(
    section: Section, model: SpinModel, chi0_per: str = "ion", sets: Sequence[Measured] = ()
) -> Parameters:
    """Read the ``[parameters]`` table; what it does not name stays at the model's value.

    ``chi0_per`` is what a mole of chi0 counts, "ion" or "formula", where the table does not say.
    ``sets`` are the data the parameters serve: their samples and names make names of parameters.
    """
    check_names(section, model, sets)
    names = [*model.couplings, *NUISANCE]
    names += [d.own_scale for d in sets if d.scale_error is not None]
    names += [name for name in section.content if name not in names]
    reader = _Reader(model, chi0_per, sets)
    found = []
    for name in names:
        if section.has(name):
            entry = Section(section.content[name], section.at(name), section.source)
            found.append(reader.read(entry, name))
        else:
            found.append(reader.default(name))
        _check_sizes(section, found[-1])
    return Parameters(found, section.source)


class _Reader:
    """Reads one parameter after the other, knowing the model and the data."""

    def __init__(self, model: SpinModel, chi0_per: str, sets: Sequence[Measured]) -> None:
        self.model, self.chi0_per, self.sets = model, chi0_per, sets
        self.weighted = all(d.uncertainty is not None for d in sets)

    def default(self, name: str) -> Parameter:
        """A parameter that the table does not name."""
        role = role_of(name, self.model, self.sets)
        unit, to_si = self._unit(None, role)
        errors = [d.scale_error for d in self.sets if d.own_scale == name]
        if role == "scale" and errors and errors[0] is not None:
            return Parameter(
                name, role, "free", unit, 1.0, *limits_of(role, self.sets), prior=(1.0, errors[0])
            )
        start = natural_value(name, role, self.model)
        return Parameter(name, role, "fixed", unit, start, to_si=to_si)

    def _unit(self, entry: Section | None, role: str) -> tuple[str, float]:
        if role == CHI0:
            return _chi0_unit(entry, self.model, self.chi0_per)
        return unit_of(role, self.model), 1.0

    def read(self, entry: Section, name: str) -> Parameter:
        """A parameter from its table."""
        role = role_of(name, self.model, self.sets)
        unit, to_si = self._unit(entry, role)
        spin = _spin(entry) if role == FRACTION else math.nan
        prior = _prior(entry)
        statuses = [key for key in ("fixed", "tied") if entry.has(key)]
        bounds = [key for key in ("start", "lower", "upper") if entry.has(key)]
        if len(statuses) > 1 or (statuses and bounds):
            keys = [*statuses, *bounds]
            raise entry.fail(
                keys[1],
                f"does not go with {keys[0]}; give fixed, or tied, or start with its bounds",
            )
        if statuses == ["tied"]:
            expression = entry.text("tied", 'an expression such as "0.5*J1"')
            entry.close()
            return Parameter(
                name, role, "tied", unit, math.nan, expression=expression, to_si=to_si,
                prior=prior, spin=spin,
            )  # fmt: skip
        if statuses == ["fixed"]:
            value = entry.number("fixed", "its value")
            entry.close()
            if prior:
                raise entry.fail("prior", "does not go with fixed; leave one of them out")
            _check_value(entry, "fixed", value, role)
            return Parameter(name, role, "fixed", unit, value, to_si=to_si, spin=spin)
        natural = prior[0] if prior else natural_value(name, role, self.model)
        default = None if role == "auxiliary" or math.isnan(natural) else natural
        start = entry.number("start", "a value to start from", default)
        low, high = limits_of(role, self.sets)
        lower = entry.number("lower", "a lower bound", low)
        upper = entry.number("upper", "an upper bound", high)
        entry.close()
        usual = None
        silent = not entry.has("prior") and not {"lower", "upper"} & set(bounds)
        if silent and self.weighted:
            usual = usual_prior(role, self.model)
        if lower < low or upper > high:
            key, value = ("lower", lower) if lower < low else ("upper", upper)
            limit = f"{low:g} to {high:g}" if math.isfinite(high) else f"{low:g} upwards"
            limit = limit if math.isfinite(low) else f"{high:g} downwards"
            raise entry.fail(key, f"= {value:g} lies outside what {name} can be, {limit}")
        if lower >= upper:
            raise entry.fail(
                "lower", f"= {lower:g} is not below upper = {upper:g}; change one of them"
            )
        if not lower <= start <= upper:
            stated = "start" in entry.content or not bounds
            raise entry.fail(
                ("prior" if prior and "start" not in bounds else "start") if stated else "lower",
                f"puts the start {start:g} outside its bounds, {lower:g} to {upper:g}; "
                "move the start or the bound",
            )
        _check_value(entry, "start", start, role)
        return Parameter(
            name, role, "free", unit, start, lower, upper,
            to_si=to_si, prior=prior or usual, usual=usual is not None, spin=spin,
        )  # fmt: skip


def _prior(entry: Section) -> tuple[float, float] | None:
    """[value, error], None where the study says nothing, or false."""
    if not entry.has("prior") or entry.content["prior"] is False:
        return None
    pair = entry.pair("prior", "[value, error], or false for none")
    if pair[1] <= 0:
        raise entry.fail("prior", f"has the error {pair[1]:g}, which is not above zero")
    return pair


def _spin(entry: Section) -> float:
    spin = entry.optional_number("spin", "the impurities' spin, such as 2.5")
    if spin is None:
        return math.nan
    if not 0.5 <= spin <= 10 or 2 * spin != round(2 * spin):
        raise entry.fail("spin", f"= {spin:g} is no spin of an ion; give 0.5, 1, 1.5 and so on")
    return spin


def _check_sizes(section: Section, p: Parameter) -> None:
    """Refuse numbers whose squares are not finite; 0, NaN (tied) and no bound are welcome."""
    value = "fixed" if p.status == "fixed" else "start"
    for key, number in ((value, p.start), ("lower", p.lower), ("upper", p.upper)):
        bare = number == 0 or math.isnan(number) or (math.isinf(number) and key != value)
        if not bare and not SMALLEST <= abs(number) <= LARGEST:
            raise section.fail(
                f"{p.name}.{key}",
                f"= {number:g} is of no size that can be used, {SMALLEST:g} to {LARGEST:g}; "
                "write another, or 0",
            )


def _check_value(entry: Section, key: str, value: float, role: str) -> None:
    if role in ("g", "impurity_g") and value <= 0:
        raise entry.fail(key, f"= {value:g} is no g factor; give one above zero")
    if role in ("scale", "debye_temperature", "einstein_temperature") and value <= 0:
        raise entry.fail(key, f"= {value:g} must be above zero")
    if role == "einstein_share" and not 0 <= value <= 1:
        raise entry.fail(key, f"= {value:g} is no share of the lattice's modes; give 0 to 1")
    if role == "paramagnetic_fraction" and not 0 <= value <= 1:
        raise entry.fail(key, f"= {value:g} is no fraction; give one from 0 to 1")


def _chi0_unit(entry: Section | None, model: SpinModel, per: str) -> tuple[str, float]:
    """chi0's unit with its mole, "emu/mol ion", and the factor to SI per mole of magnetic ions."""
    reduced = model.energy_unit == "1"
    unit = "1" if reduced else "emu/mol"
    if entry is not None:
        stated = entry.text("unit", "the unit of chi0", unit)
        per = entry.word("per", ("ion", "formula"), per)
        try:
            unit = unit_name("susceptibility", stated, reduced)
        except UnitsError as error:
            raise UnitsError(f"{entry.source}: {entry.at('unit')}: {error}") from None
    factor = quantity_factor("susceptibility", unit, reduced)
    if per == "formula":
        factor /= model.ions_per_formula
    return (unit if reduced else f"{unit} {per}"), factor
