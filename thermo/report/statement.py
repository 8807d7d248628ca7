"""What a single fit amounts to, in words, from its dataset alone."""

from __future__ import annotations

import math

import numpy as np
import xarray as xr

from thermo.report.numbers import plain, typeset, with_uncertainty
from thermo.report.quantities import by_scatter

#: Chance below which a χ² or a score of the runs speaks against a model.
UNLIKELY = 1e-3
FEW_RUNS = -3.09
#: With a χ² more probable than this a trend lies within the uncertainties.
COMFORTABLE = 0.5


def fit_statement(fit: xr.Dataset) -> tuple[str, str, str]:
    """(kind, word, sentence): kind "good", "open" or "bad" as the page colours it."""
    if not int(fit["converged"]):
        return "bad", "no result", "The fit did not converge: do not use these values."
    trends = trending(fit)
    trend = (
        f"the residuals of {' and '.join(repr(name) for name in trends)} follow a trend"
        if trends
        else ""
    )
    if by_scatter(fit):
        if trend:
            return "bad", "does not fit", f"The model does not describe the data: {trend}."
        return (
            "open", "not tested",
            "The residuals show no trend, but without stated uncertainties χ² cannot test the "
            "model: the standard errors hold only if it is right.",
        )  # fmt: skip
    dof = int(fit["degrees_of_freedom"])
    chi = whole_chi_square(fit)
    chance = chance_of(fit)
    size = f"χ² = {plain(chi, 4)} with {dof} degrees of freedom"
    if chance < UNLIKELY:
        also = f", and {trend}" if trend else ""
        return (
            "bad", "does not fit",
            f"The model does not describe the data within their uncertainties: {size} is too "
            f"large for chance{also}. Do not use these constants.",
        )  # fmt: skip
    if trend and chance > COMFORTABLE:
        return (
            "open", "errors too large?",
            f"The model describes the data within their uncertainties ({size}), but {trend}: these "
            "uncertainties are too large, or not independent from point to point, and the standard "
            "errors with them.",
        )  # fmt: skip
    if trend:
        return "bad", "does not fit", f"The model misses something: {trend} ({size})."
    stuck = [
        str(name) for n, name in enumerate(fit["parameter_name"].values) if int(fit["at_bound"][n])
    ]
    if stuck:
        return (
            "open", "at a bound",
            f"The model describes the data ({size}), but with {', '.join(stuck)} at a bound: the "
            "other errors hold only with it fixed there.",
        )  # fmt: skip
    probable = f"{100 * chance:.2g} % chance of a larger one"
    return (
        "good", "describes the data",
        f"The model describes the data within their uncertainties: {size}, {probable}. "
        "That does not make it right: no rival was tried.",
    )  # fmt: skip


def chance_of(fit: xr.Dataset) -> float:
    """The probability of a χ² as large by chance; NaN where it is not known."""
    from scipy.stats import chi2

    dof = int(fit["degrees_of_freedom"])
    if by_scatter(fit) or dof <= 0:
        return math.nan
    return float(chi2.sf(whole_chi_square(fit), dof))


def whole_chi_square(fit: xr.Dataset) -> float:
    """χ² with the priors' share, which the degrees of freedom count too."""
    reduced, dof = float(fit["reduced_chi_square"]), int(fit["degrees_of_freedom"])
    return reduced * dof if math.isfinite(reduced) else float(fit["chi_square"])


def trending(fit: xr.Dataset) -> list[str]:
    """Names of the data sets whose residuals have too few runs for chance."""
    if "dataset_runs" not in fit:
        return []
    few = np.flatnonzero(fit["dataset_runs"].values < FEW_RUNS)
    return [str(fit["dataset_name"].values[k]) for k in few]


def key_values(fit: xr.Dataset) -> list[tuple[str, str]]:
    """The free and tied parameters as (name, value with its error and unit)."""
    found = []
    for n, name in enumerate(fit["parameter_name"].values):
        if int(fit["parameter_role"][n]) == 0:
            continue
        unit = str(fit["parameter_units"].values[n])
        value = with_uncertainty(float(fit["value"][n]), float(fit["standard_error"][n]))
        found.append((str(name), typeset(value if unit == "1" else f"{value} {unit}")))
    return found
