"""What can be known to be wrong with a study before anything is solved."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from thermo.errors import DataError, StudyError, UnavailableError
from thermo.fit.measured import MAGNETIC, Measured
from thermo.fit.roles import (
    CHI0,
    DEBYE,
    EINSTEIN,
    EINSTEIN_SHARE,
    FRACTION,
    IMPURITY_G,
    INTERCLUSTER,
    LATTICE,
    SCALE,
    WEISS,
    G,
)
from thermo.fit.strict import did_you_mean

if TYPE_CHECKING:
    from thermo.fit.study import Study

# Two sets of the same quantity this many times apart are in different units.
UNLIKE = 10.0
# Points that two sets must have in common to be compared.
FEWEST = 3


def check_study(study: Study) -> None:
    """Raise StudyError, DataError or UnavailableError for the first fault found."""
    name, sets, free = study.source, study.sets, study.parameters.free
    names = [data.name for data in sets]
    for repeated in (n for n in names if names.count(n) > 1):
        raise StudyError(f"{name}: two data sets are called {repeated!r}; rename one of them")
    if not free:
        raise StudyError(
            f"{name}: no parameter is free, so there is nothing to fit; "
            "give at least one a start and bounds instead of a fixed value"
        )
    stated = [data.name for data in sets if data.uncertainty is not None]
    silent = [data.name for data in sets if data.uncertainty is None]
    if stated and silent:
        raise StudyError(
            f"{name}: data set {stated[0]!r} states its uncertainties and {silent[0]!r} does not, "
            "so they cannot be weighed against each other; give both or neither"
        )
    if study.degrees_of_freedom < 0:
        raise DataError(
            f"{name}: {study.n_points} points are in use for {len(free)} free parameters; "
            "widen the range or fix parameters"
        )
    if not study.weighted:
        for data in sets:
            if not np.any(data.value):
                raise DataError(
                    f"{data.file}: all values are zero, which fixes no scale; "
                    "state an absolute_uncertainty in every data set"
                )
        if study.n_points == len(free):
            raise DataError(
                f"{name}: {study.n_points} points without uncertainties leave none to judge the "
                f"errors of {len(free)} parameters by; give uncertainties or fix a parameter"
            )
    felt = [data for data in sets if data.feels_direction]
    if study.model.common_g is None and felt:
        raise UnavailableError(
            f"{name}: data set {felt[0].name!r} needs one g common to all sites and directions, "
            "but the model's g differs; give the model one g, or fit zero-field specific heat only"
        )
    _check_alike(study)
    _check_priors(study)
    _check_lattice(study)
    for asked in study.asked:
        if asked not in {p.name for p in free}:
            known = [p.name for p in free]
            raise StudyError(
                f"{name}: profile names {asked!r}, which is not a free parameter; "
                + did_you_mean(asked, known)
            )
    slopes = study.parameters.values(study.parameters.start).slope
    unfelt = _unfelt(study)
    for k, parameter in enumerate(free):
        if not any(slope[k] for n, slope in slopes.items() if n not in unfelt):
            raise StudyError(
                f"{name}: parameters.{parameter.name} is free, but nothing in the data depends "
                "on it; fix it, or add data that do"
            )


def _check_alike(study: Study) -> None:
    """Two sets of one quantity at one field cannot differ by a factor of ten: units do."""
    for k, second in enumerate(study.sets):
        for first in study.sets[:k]:
            ratio = _ratio(study, first, second)
            if ratio is not None and not 1 / UNLIKE < ratio < UNLIKE:
                factor = max(ratio, 1 / ratio)
                raise DataError(
                    f"{study.source}: data sets {first.name!r} and {second.name!r} measure the "
                    f"same at the same temperatures but differ by a factor of {factor:.3g}; check "
                    "their units and per"
                )


def _ratio(study: Study, first: Measured, second: Measured) -> float | None:
    """Median of the second set over the first where both measure the same; None where not."""
    curves = []
    for data in (first, second):
        field = np.unique(data.field)
        if len(field) > 1 or data.quantity == "magnetization":
            return None
        value = data.value / (study.model.ions_per_formula if data.per == "formula" else 1.0)
        if data.quantity == "chi_T":
            value = value / data.temperature
        if data.quantity == "specific_heat_over_T":
            value = value * data.temperature
        order = np.argsort(data.temperature)
        curves.append((data.quantity.split("_")[0], data.temperature[order], value[order], field))
    (kind, t, v, b), (other, u, w, c) = curves
    same = {kind, other} <= {"susceptibility", "chi"} or kind == other == "specific"
    inside = (u >= t[0]) & (u <= t[-1])
    # A susceptibility at a small field is that at none; a specific heat is not.
    if not same or inside.sum() < FEWEST or (kind == "specific" and b[0] != c[0]):
        return None
    reference = np.interp(u[inside], t, v)
    usable = (reference != 0) & (w[inside] != 0)
    if usable.sum() < FEWEST:
        return None
    return float(np.median(np.abs(w[inside][usable] / reference[usable])))


def _check_priors(study: Study) -> None:
    """Priors are weighed against the points, whose uncertainties must then be known."""
    if study.weighted:
        return
    for p in study.parameters.priors:
        what = "a scale_error" if p.name in {d.own_scale for d in study.sets} else "a prior"
        raise StudyError(
            f"{study.source}: {p.name} has {what}, which cannot be weighed against data without "
            "uncertainties; state those of every data set"
        )
    for p in study.parameters.free:
        if p.role == SCALE:
            raise StudyError(
                f"{study.source}: {p.name} cannot be told from g without a prior, and a prior "
                "needs data with uncertainties; state those of every data set"
            )


def _check_lattice(study: Study) -> None:
    named = [p.name for p in study.parameters.all if p.role in LATTICE]
    if named and not study.lattice_atoms:
        raise StudyError(
            f"{study.source}: parameters.{named[0]} belongs to the lattice's heat; add "
            "[lattice_heat] with its number of atoms"
        )
    if study.lattice_atoms and DEBYE not in study.parameters.by_name:
        raise StudyError(
            f"{study.source}: lattice_heat needs parameters.{DEBYE}; give it a start in K"
        )
    for name in named:
        partner = name.replace(EINSTEIN, EINSTEIN_SHARE, 1)
        if partner == name:
            partner = name.replace(EINSTEIN_SHARE, EINSTEIN, 1)
        if partner != name and partner not in named:
            raise StudyError(
                f"{study.source}: parameters.{name} needs its partner parameters.{partner}; "
                "give both"
            )


def _unfelt(study: Study) -> set[str]:
    """Parameters that no point depends on, whatever their value."""
    known = study.parameters.by_name
    values = study.parameters.values(study.parameters.start)
    felt: set[str] = set()
    for data in study.sets:

        def name(role: str, data: Measured = data) -> str:
            return data.parameter_names.get(role, role)

        felt |= {*study.model.couplings, name(FRACTION), *data.scales}
        magnetic = data.quantity in MAGNETIC
        impurities = name(FRACTION)
        some = values.value[impurities] != 0 or bool(np.any(values.slope[impurities]))
        if magnetic:
            felt.add(name(CHI0))
        if data.feels_direction:
            felt |= {name(G), INTERCLUSTER}
            if some:
                felt |= {name(WEISS), name(IMPURITY_G)}
        if data.quantity.startswith("specific_heat"):
            felt |= {p.name for p in study.parameters.all if p.role in LATTICE}
    return set(known) - felt
