"""What to measure next: where the candidates still standing differ most.

For each instrument, over its temperatures and fields, the two candidates furthest apart are found
in units of the uncertainty such a comparison would have: the instrument's precision, and what the
fits' own parameters leave open of each prediction (first order, from the covariance), added in
quadrature. Points where the size of a periodic cluster shows by more than the precision are
passed over.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from itertools import combinations

import numpy as np
from numpy.typing import NDArray

from thermo.errors import StudyError, UnavailableError
from thermo.fit.forward import Points
from thermo.fit.measured import QUANTITIES
from thermo.fit.result import FitResult
from thermo.fit.strict import Section
from thermo.fit.study import Content
from thermo.fit.trust import find_relative, slopes_of
from thermo.numbers import plain
from thermo.units import quantity_factor, unit_name

Vector = NDArray[np.float64]

N_TEMPERATURES, N_FIELDS = 48, 6
# Below this many uncertainties no single point decides.
ENOUGH = 3.0
# Without a stated one, an instrument's precision is that of the data, but not below this share.
LEAST_PRECISION = 1e-3


@dataclass(frozen=True)
class Instrument:
    """What could be measured: a quantity over ranges of temperature [K] and field [T].

    Its standard uncertainty at the value y is √((relative·y)² + absolute²), with ``absolute`` in
    SI. ``stated``: by the study, not inferred from its data.
    """

    name: str
    quantity: str
    units: str
    per: str
    to_si: float
    temperature: tuple[float, float]
    field: tuple[float, float]
    relative: float
    absolute: float
    stated: bool = True

    def precision(self, value: Vector) -> Vector:
        """The standard uncertainty at these values, SI."""
        return np.hypot(self.relative * value, self.absolute)

    def grid(self) -> Points:
        """The points looked at, (n,): temperatures evenly in the logarithm, fields evenly."""
        low, high = self.temperature
        temperature = np.geomspace(low, high, N_TEMPERATURES if high > low else 1)
        start, stop = self.field
        field = np.linspace(start, stop, N_FIELDS if stop > start else 1)
        T, B = np.meshgrid(temperature, field, indexing="ij")
        return Points(self.quantity, T.ravel(), B.ravel(), self.per)


@dataclass(frozen=True, eq=False)
class Proposal:
    """Where one instrument tells candidates apart best.

    ``separation``: the difference of ``first`` and ``second``, the two furthest apart there, over
    its standard uncertainty; ``bare`` counts the instrument's precision alone. ``predicted``
    [SI] holds each candidate's value there, by name, ``precision`` [SI] the instrument's.
    ``grid`` are the points looked at, (n,), and ``map`` the separation at each, NaN where a
    cluster's size shows.
    """

    instrument: Instrument
    temperature: float
    field: float
    separation: float
    bare: float
    first: str
    second: str
    predicted: Mapping[str, float]
    precision: float
    grid: Points
    map: Vector

    def __str__(self) -> str:
        """In a sentence or two."""
        i = self.instrument
        kelvin, tesla = ("", "") if i.units == "1" else (" K", " T")
        at = f"{'T = ' if i.units == '1' else ''}{plain(self.temperature, 3)}{kelvin}"
        if i.field[1] > 0:
            at += f" and {'B = ' if i.units == '1' else ''}{plain(self.field, 3)}{tesla}"
        unit = "" if i.units == "1" else f" {i.units}".replace("muB", "μB")
        if i.per == "formula":
            unit += " per formula unit"
        values = " and ".join(
            f"{plain(self.predicted[name] / i.to_si, 4)}{unit} for {name!r}"
            for name in (self.first, self.second)
        )
        text = (
            f"{i.name} at {at}: {values}, where it can be measured to "
            f"{plain(self.precision / i.to_si, 2)}{unit}; they are "
            f"{plain(self.separation, 3)} standard uncertainties apart"
        )
        if self.separation < ENOUGH:
            text += ", too few for one point to decide"
        return text


def read_instruments(content: Content, reduced: bool) -> tuple[Instrument, ...]:
    """The [[instrument]] tables of a study; StudyError or UnitsError for the first fault."""
    raw = content.table.get("instrument", [])
    if isinstance(raw, Mapping | str) or not isinstance(raw, Sequence):
        raise StudyError(f"{content.name}: instrument must be [[instrument]] tables")
    found: list[Instrument] = []
    for k, item in enumerate(raw):
        section = Section(item, f"instrument[{k}]", content.name)
        quantity = section.word("quantity", QUANTITIES)
        name = section.text("name", "a name", quantity.replace("_", " "))
        units = section.text("units", "the unit of its values")
        per = section.word("per", ("ion", "formula"), "ion")
        relative = section.number("relative_uncertainty", "a fraction such as 0.01", 0.0)
        absolute = section.number("absolute_uncertainty", f"a number in {units}", 0.0)
        if min(relative, absolute) < 0 or relative + absolute == 0:
            raise section.fail(
                "relative_uncertainty",
                "or absolute_uncertainty must be above zero and neither below; state how "
                "precisely it measures",
            )
        section.raw("temperature", "[lowest, highest] in K")
        temperature = section.interval("temperature", "[lowest, highest] in K")
        if temperature is None or temperature[0] <= 0:
            raise section.fail("temperature", "must begin above zero; give [lowest, highest] in K")
        field = _field(section, quantity)
        section.close()
        if name in (i.name for i in found):
            raise section.fail("name", f"= {name!r} is that of another instrument; rename one")
        to_si = quantity_factor(quantity, units, reduced)
        found.append(
            Instrument(
                name, quantity, unit_name(quantity, units, reduced), per, to_si, temperature,
                field, relative, absolute * to_si,
            )
        )  # fmt: skip
    return tuple(found)


def _field(section: Section, quantity: str) -> tuple[float, float]:
    """The range of fields; one number is a range of one."""
    what = "[lowest, highest] in T, or one field"
    if isinstance(section.content.get("field"), int | float):
        only = section.number("field", what)
        field = (only, only)
    else:
        field = section.interval("field", what) or (0.0, 0.0)
    if field[0] < 0:
        raise section.fail("field", f"begins at {field[0]:g}; give magnitudes from zero upwards")
    if quantity == "magnetization" and field[1] == 0:
        raise section.fail("field", "is missing, and a magnetization needs one; give its range")
    return field


def from_data(result: FitResult) -> tuple[Instrument, ...]:
    """What was measured, over the same temperatures and fields and as precisely."""
    found: list[Instrument] = []
    for item in result.sets:
        data = item.data
        size = float(np.median(np.abs(data.value)))
        precision = float(np.median(item.uncertainty)) if size else 0.0
        relative = max(precision / size if size else 0.0, LEAST_PRECISION)
        found.append(
            Instrument(
                data.name,
                data.quantity,
                data.units,
                data.per,
                data.to_si,
                (float(data.temperature.min()), float(data.temperature.max())),
                (float(data.field.min()), float(data.field.max())),
                relative,
                # Where the quantity is small its error is that of the smallest.
                float(np.min(item.uncertainty)),
                stated=False,
            )
        )
    return tuple(found)


def propose(
    standing: Sequence[tuple[str, FitResult]],
    instruments: Sequence[Instrument],
    memory: int | float | str | None = None,
) -> tuple[Proposal, ...]:
    """One proposal for each instrument that can tell the candidates apart, the best first.

    ``standing``: names and fits of two or more candidates. An instrument whose quantity a
    candidate cannot give (a susceptibility without a conserved moment) is passed over.
    Cost: one diagonalisation of each cluster and of its other size.
    """
    relatives = [find_relative(result.study, memory) for _, result in standing]
    found = []
    for instrument in instruments:
        points = instrument.grid()
        try:
            predicted = np.array([r.forward.predict(points, r.values) for _, r in standing])
            spread = np.array([_spread(points, result) for _, result in standing])
        except UnavailableError:
            continue
        precision = instrument.precision(np.mean(np.abs(predicted), axis=0))
        trusted = np.ones(len(precision), dtype=bool)
        for (_, result), relative, own in zip(standing, relatives, predicted, strict=True):
            if relative is not None:
                other = relative.forward.predict(points, result.values)
                trusted &= _from_above(points, np.abs(other - own) <= precision)
        pairs = list(combinations(range(len(standing)), 2))
        apart = np.array(
            [
                np.abs(predicted[a] - predicted[b])
                / np.sqrt(precision**2 + spread[a] ** 2 + spread[b] ** 2)
                for a, b in pairs
            ]
        )
        separation = np.where(trusted, apart.max(axis=0), np.nan)
        if not np.any(separation > 0):
            continue
        best = int(np.nanargmax(separation))
        a, b = pairs[int(np.argmax(apart[:, best]))]
        found.append(
            Proposal(
                instrument,
                float(points.temperature[best]),
                float(points.field[best]),
                float(separation[best]),
                float(abs(predicted[a, best] - predicted[b, best]) / precision[best]),
                standing[a][0],
                standing[b][0],
                {name: float(p[best]) for (name, _), p in zip(standing, predicted, strict=True)},
                float(precision[best]),
                points,
                separation,
            )
        )
    return tuple(sorted(found, key=lambda proposal: -proposal.separation))


def _from_above(points: Points, good: NDArray[np.bool_]) -> NDArray[np.bool_]:
    """Where ``good`` (n,) holds at a point and at every higher temperature of its field: below
    the highest bad one, curves of two sizes that happen to cross prove nothing."""
    found = good.copy()
    for field in np.unique(points.field):
        at = points.field == field
        bad = points.temperature[at & ~good]
        if bad.size:
            found[at & (points.temperature <= bad.max())] = False
    return found


def _spread(points: Points, result: FitResult) -> Vector:
    """The standard uncertainty of a fit's prediction, (n,) in SI; held parameters add nothing."""
    slopes = slopes_of(points, result)
    covariance = np.nan_to_num(result.covariance, nan=0.0)
    variance: Vector = np.einsum("ni,ij,nj->n", slopes, covariance, slopes)
    return np.sqrt(np.maximum(variance, 0.0))
