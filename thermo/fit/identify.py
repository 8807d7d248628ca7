"""Which parameters, and which combinations of them, the data fix at a minimum."""

from __future__ import annotations

import math
from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray

from thermo.fit.problem import Problem
from thermo.numbers import plain

Vector = NDArray[np.float64]

# A standard error this many times what the parameter could be at all: the data do not fix it.
NOT_FIXED = 10.0
# Below this, the smallest singular value of the column-normalised Jacobian is only rounding, or
# the error of differences.
SINGULAR, SINGULAR_DIFFERENCES = 1e-9, 1e-6
# Parameters with less than this share of a weak direction are not named.
NAMED = 0.05


def covariance_of(jacobian: Vector, exact: bool) -> tuple[Vector, Vector, Vector | None]:
    """(JᵀJ)⁻¹, the singular values of J with columns of length one, descending, and the direction
    the data do not fix (None: all are fixed). ``exact`` says that no difference is in J."""
    n = jacobian.shape[1]
    if n == 0:
        return np.empty((0, 0)), np.empty(0), None
    length = np.linalg.norm(jacobian, axis=0)
    length = np.where(length > 0, length, 1.0)
    _, singular, rotation = np.linalg.svd(jacobian / length, full_matrices=False)
    limit = SINGULAR if exact else SINGULAR_DIFFERENCES
    if singular.size < n or singular[-1] <= limit * singular[0]:
        weak = np.linalg.svd(jacobian / length)[2][-1]
        return np.full((n, n), np.nan), singular, weak / length
    half = rotation.T / singular / length[:, None]
    return half @ half.T, singular, None


def not_fixed(
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


def weak_names(direction: Vector, names: Sequence[str], theta: Vector) -> list[str]:
    """The parameters that can move together unnoticed along a direction (n,)."""
    share = _shares(direction, theta)
    return [name for name, s in zip(names, share, strict=True) if s > NAMED]


def combination(
    direction: Vector, names: Sequence[str], units: Sequence[str], theta: Vector
) -> str:
    """The weak direction in numbers: "J1 by +1 K and J2 by -0.98 K"."""
    kept = np.flatnonzero(_shares(direction, theta) > NAMED).tolist()
    step = direction / direction[kept[0]]
    words = [
        f"{names[k]} by {'+' if step[k] > 0 else ''}{plain(float(step[k]), 3)}"
        + ("" if units[k] == "1" else f" {units[k]}")
        for k in kept
    ]
    return " and ".join([", ".join(words[:-1]), words[-1]] if len(words) > 1 else words)


def _shares(direction: Vector, theta: Vector) -> Vector:
    size = np.abs(theta)
    share = np.abs(direction) / np.where(size > 0, size, 1.0)
    found: Vector = share / share.max()
    return found
