"""What the fitted curves and residuals themselves say against a fit, each in one sentence."""

from __future__ import annotations

import math
from collections.abc import Sequence

import numpy as np

from thermo.fit.forward import Prediction
from thermo.fit.measured import Measured
from thermo.fit.parameters import Parameters, Values
from thermo.fit.residual_tests import FEW_RUNS
from thermo.fit.roles import CHI0, FRACTION, INTERCLUSTER
from thermo.fit.spectra import SpectrumCache
from thermo.model.spin_model import SpinModel
from thermo.numbers import plain

# Share of all ions' Curie constant from which "impurities" are no longer that.
MUCH = 0.15
# chi0, or the lattice, beyond this share of a set's points carries the fit.
MOST = 0.5
LEAST_SPINS = 0.05
# A molecular field from this share of the largest coupling on is no small correction.
STRONG_FIELD = 0.3
# A prior pulled so many of its errors away disagrees with the data.
PULLED = 3.0
# More outliers than this are not named one by one.
SHOWN = 3


def of_solver(cache: SpectrumCache) -> list[str]:
    """What the way the levels were found leaves out of the errors."""
    if getattr(cache.solver, "method", "full") == "sampled":
        return [
            "the levels are sampled: the standard errors leave out what the random vectors leave "
            "open; fit again with another seed, or more vectors, to see it"
        ]
    if hasattr(cache.solver, "sloped") and not cache.exact:
        return [
            "eigenvectors of the cluster exceed the memory limit: slopes were taken by "
            "differences, at two more spectra for each independent coupling and step"
        ]
    return []


def of_surroundings(
    model: SpinModel,
    parameters: Parameters,
    values: Values,
    sets: Sequence[Measured],
    found: Sequence[Prediction],
) -> list[str]:
    """Whether what surrounds the spins eats the signal; ``found`` are the sets' predictions."""
    told: list[str] = []
    known = parameters.by_name
    for data, prediction in zip(sets, found, strict=True):
        if prediction.beyond.any():
            told.append(
                f"at {int(prediction.beyond.sum())} of {data.n_points} points of {data.name!r} the "
                "fitted molecular field or Weiss temperature would order the spins, where neither "
                "holds: fit above that temperature, or bound the parameter"
            )
        parts = prediction.parts
        whole = sum((np.abs(part) for part in parts.values()), np.zeros(data.n_points))
        whole = np.where(whole > 0, whole, 1.0)
        name = data.parameter_names.get(CHI0, CHI0)
        if known[name].status != "fixed":
            count = int(np.count_nonzero(np.abs(parts["chi0"]) > MOST * whole))
            if count > MOST * data.n_points:
                told.append(
                    f"{name} makes most of {data.name!r} at {count} of its {data.n_points} points: "
                    "it is eating the signal; fix it at a known value or give it a prior"
                )
        lattice = parts["lattice"]
        if np.any(lattice) and float((np.abs(parts["spins"]) / whole).max()) < LEAST_SPINS:
            told.append(
                f"the spins make less than {100 * LEAST_SPINS:.0f} % of {data.name!r} at every "
                "point: the couplings rest on the form supposed for the lattice's heat"
            )
    told += _of_impurities(parameters, values, model)
    told += _of_field(parameters, values, model)
    for p in parameters.priors:
        if p.prior is None:
            continue
        off = (values.value[p.name] - p.prior[0]) / p.prior[1]
        if abs(off) > PULLED:
            what = "usual prior, not stated by the study," if p.usual else "prior"
            told.append(
                f"{p.name} ends {abs(off):.1f} errors {'above' if off > 0 else 'below'} its {what} "
                f"{plain(p.prior[0], 4)} ± {plain(p.prior[1], 2)}: data and prior disagree"
            )
    return told


def _of_impurities(parameters: Parameters, values: Values, model: SpinModel) -> list[str]:
    told = []
    casimir = float(np.mean(model.spins * (model.spins + 1)))
    for p in parameters.all:
        rho = values.value[p.name]
        if p.role != FRACTION or p.status == "fixed" or rho <= 0:
            continue
        own = casimir if math.isnan(p.spin) else p.spin * (p.spin + 1)
        share = rho * own / (rho * own + (1 - rho) * casimir)
        if share > MUCH:
            told.append(
                f"{p.name} = {plain(rho, 2)} carries {100 * share:.0f} % of the Curie constant: so "
                "much is hardly an impurity and may stand for spins that the model lacks"
            )
    return told


def _of_field(parameters: Parameters, values: Values, model: SpinModel) -> list[str]:
    p = parameters.by_name.get(INTERCLUSTER)
    if p is None or p.status == "fixed":
        return []
    largest = max((abs(values.value[name]) for name in model.couplings), default=0.0)
    size = abs(values.value[INTERCLUSTER])
    if size <= STRONG_FIELD * largest:
        return []
    return [
        f"{INTERCLUSTER} is {plain(size / largest, 2) if largest else 'many'} times the largest "
        "coupling: a mean field is no approximation there; put those neighbours into the cluster"
    ]


def of_residuals(
    data: Measured, runs: float, watson: float, outliers: Sequence[int], scores: Sequence[float]
) -> list[str]:
    """Trends and outliers of one set; ``scores`` are the residuals over their uncertainties."""
    told = []
    if runs < FEW_RUNS:
        how = "all of one sign" if math.isinf(runs) else f"{-runs:.1f} standard deviations too few"
        told.append(
            f"the residuals of {data.name!r} follow each other ({how} in the runs test, "
            f"Durbin-Watson {watson:.2f}): the model misses something there, and the standard "
            "errors are too small"
        )
    if outliers:
        shown = ", ".join(
            f"line {int(data.line[k])} ({plain(float(data.temperature[k]), 4)} K, "
            f"{plain(float(scores[k]), 2)} σ)"
            for k in outliers[:SHOWN]
        )
        more = f" and {len(outliers) - SHOWN} more" if len(outliers) > SHOWN else ""
        told.append(f"{data.name!r} has points too far off for chance: {shown}{more}")
    return told
