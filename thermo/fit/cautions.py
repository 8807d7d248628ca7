"""What to know before a fit's numbers are used, each in one sentence."""

from __future__ import annotations

import math
from collections.abc import Sequence
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from thermo.fit.minimise import Minimum
from thermo.fit.study import Study
from thermo.numbers import plain

if TYPE_CHECKING:
    from thermo.fit.result import Estimate

Vector = NDArray[np.float64]

# Correlations from here on are told.
STRONG = 0.95
# A parameter with less than this share of a weak direction is not named in it.
SHARE = 0.1


def find_cautions(
    study: Study,
    minimum: Minimum,
    estimates: Sequence[Estimate],
    covariance: Vector,
    resolved: str,
    scale: float,
) -> tuple[str, ...]:
    """The cautions of a fit, the gravest first.

    ``covariance`` (n_free, n_free) is NaN where there is none; ``resolved`` is that of the levels
    (see LevelTable); ``scale`` is the root of the reduced χ², or 1 with stated uncertainties.
    """
    found = []
    if not minimum.converged:
        found.append(f"the fit did not converge: it {minimum.message}")
    for e in estimates:
        if e.at_bound:
            side, bound = ("lower", e.lower) if e.at_bound < 0 else ("upper", e.upper)
            found.append(
                f"{e.name} sits at its {side} bound {bound:g}: it has no standard error, and "
                "those of the others hold only with it fixed there"
            )
    idle = [e for e in estimates if e.name in minimum.idle]
    for e in idle:
        unit = "" if e.unit == "1" else f" {e.unit}"
        found.append(
            f"{e.name} ran away to where the data do not depend on it, {plain(e.value, 3)}{unit}: "
            "no standard errors; start it elsewhere, give it bounds, or fix it"
        )
    if not minimum.identifiable and not idle:
        together = f" (they hardly notice {minimum.unfixed} together)" if minimum.unfixed else ""
        found.append(
            f"the data do not fix {minimum.weak} separately{together}: no standard errors; fix "
            "one of them"
        )
    found += _of_direction(study, resolved)
    found += _of_size(study, minimum, scale)
    found += _of_correlation(study, covariance)
    return tuple(found)


def _of_direction(study: Study, resolved: str) -> list[str]:
    """Anisotropic models give moments along z only, which powder data are not."""
    silent = [data.name for data in study.sets if data.feels_direction and not data.direction]
    if resolved != "magnetic_number" or not silent:
        return []
    return [
        "the model is anisotropic: χ and M are for a field along z; powder data are an average "
        f"this version does not make; if {_listed([repr(name) for name in silent])} "
        f"{'was' if len(silent) == 1 else 'were'} measured on a crystal along z, state "
        'direction = "z" there'
    ]


def _of_size(study: Study, minimum: Minimum, scale: float) -> list[str]:
    """What χ² says of the model and of the uncertainties."""
    dof = study.degrees_of_freedom
    if not study.weighted:
        return [
            "no uncertainties were stated: each set was weighted by its mean magnitude, the "
            f"standard errors come from the residuals' scatter ({100 * scale:.2g} % of that "
            "magnitude), and chi square says nothing about the model"
        ]
    if dof <= 0:
        return []
    reduced = float(minimum.residuals @ minimum.residuals) / dof
    # Five standard deviations of a reduced chi square.
    spread = 5 * math.sqrt(2 / dof)
    if reduced > 1 + spread:
        tried = f" ({minimum.n_starts} were tried)" if minimum.n_starts > 1 else ""
        return [
            f"reduced chi square is {reduced:.3g}: this minimum does not describe the data "
            "within their uncertainties and the standard errors are too small; try other "
            f"starts{tried}, the other signs among them, or another model"
        ]
    if reduced < 1 - spread:
        return [
            f"reduced chi square is {reduced:.3g}: the stated uncertainties are larger than "
            "the scatter of the data, or their errors are not independent"
        ]
    return []


def _of_correlation(study: Study, covariance: Vector) -> list[str]:
    """One sentence for each connected group of strongly correlated parameters."""
    free = study.parameters.free
    error = np.sqrt(np.diag(covariance))
    # Without a covariance, at a bound, or with exact points that leave no scatter: none.
    known = [k for k in range(len(free)) if np.isfinite(error[k]) and error[k] > 0]
    correlation = np.eye(len(free))
    at = np.ix_(known, known)
    correlation[at] = covariance[at] / np.outer(error[known], error[known])
    found = []
    for group in _groups(np.abs(correlation) > STRONG):
        part = correlation[np.ix_(group, group)]
        largest = float(np.abs(part - np.eye(len(group))).max())
        # The long axis of the error ellipsoid: what may move together, here by one standard
        # deviation of that combination.
        length, axes = np.linalg.eigh(part)
        axis = axes[:, -1] * math.copysign(1.0, axes[np.argmax(np.abs(axes[:, -1])), -1])
        steps = [
            f"{free[k].name} by {_signed(share * math.sqrt(length[-1]) * error[k])}"
            + ("" if free[k].unit == "1" else f" {free[k].unit}")
            for k, share in zip(group, axis, strict=True)
            if abs(share) > SHARE
        ]
        found.append(
            f"{_listed([free[k].name for k in group])} are strongly correlated (|r| up to "
            f"{largest:.4f}): the data hardly notice a change of {_listed(steps)} together"
        )
    return found


def _groups(linked: NDArray[np.bool_]) -> list[list[int]]:
    """The connected groups of two and more, in order; ``linked`` (n, n) is symmetric."""
    reach = linked
    for _ in range(len(linked).bit_length()):  # each turn doubles the length of the paths
        reach = reach @ reach
    groups = {tuple(np.flatnonzero(row).tolist()) for row in reach}
    return [list(group) for group in sorted(groups) if len(group) > 1]


def _signed(number: float) -> str:
    return ("+" if number > 0 else "") + plain(number, 2)


def _listed(names: Sequence[str]) -> str:
    return " and ".join([", ".join(names[:-1]), names[-1]] if len(names) > 1 else names)
