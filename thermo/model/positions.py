"""Where the sites of a repeated cell are, and the wave vectors a periodic cluster has.

Positions are in units of the cell's vectors, wave vectors in those of its reciprocal vectors
(h, k, l; times 2π), so that a phase is 2π q·r and no length is needed. Numbers beyond the
repeating directions (the width of a ladder) run across them, in the unit of the lattice's entry.
"""

from __future__ import annotations

from collections.abc import Sequence
from fractions import Fraction
from itertools import product
from math import prod

import numpy as np
from numpy.typing import NDArray

from thermo.model.cells import Superlattice
from thermo.model.checks import fault, listing, number
from thermo.model.spin_model import SpinModel

Position = tuple[float, ...]
# Two sites nearer than this are on one place; a multiple of 1/z nearer than this is one.
CLOSE = 1e-6
LARGEST_DENOMINATOR = 12
MOST_POINTS = 4096


def read_position(value: object, path: str, dimension: int) -> Position:
    """The position of a site in its cell: one number for each direction that repeats."""
    shape = "one number for each direction that repeats, in units of the cell's vectors"
    entries = listing(value, path, shape)
    if len(entries) != dimension:
        raise fault(path, f"has {len(entries)} entries; give {dimension}, {shape}")
    return tuple(number(x, f"{path}[{k}]") for k, x in enumerate(entries))


def check_positions(positions: Sequence[Position], names: Sequence[str], path: str) -> None:
    """Refuse positions of some sites only, and two sites on one place."""
    if positions and len(positions) != len(names):
        raise fault(
            path,
            f"{len(positions)} of {len(names)} sites have a position; give it for all or for none",
        )
    for j, here in enumerate(positions):
        for i, there in enumerate(positions[:j]):
            step = np.subtract(here, there)
            if np.all(np.abs(step - np.round(step)) < CLOSE):
                raise fault(
                    f"{path}[{j}].position",
                    f"{names[j]!r} is on the place of {names[i]!r}; give each site its own",
                )


def fractional(
    vectors: Sequence[Sequence[float]], positions: Sequence[Sequence[float]]
) -> tuple[Position, ...]:
    """Positions in units of the cell's vectors, and of unit vectors across them where the
    positions have more numbers than there are vectors."""
    rows = np.eye(len(positions[0]))
    rows[: len(vectors)] = vectors
    found = np.array(positions) @ np.linalg.inv(rows)
    # Thirds and halves to the last bit, so that symmetric points are so too.
    return tuple(
        tuple(float(Fraction(x).limit_denominator(LARGEST_DENOMINATOR)) for x in row)
        for row in found.tolist()
    )


def why_no_wave_vectors(model: SpinModel) -> str | None:
    """Why a model has no structure factor, or None where it has one."""
    if not model.superlattice:
        return (
            "the model lists its sites without a cell, so it has no wave vectors; state it as "
            "[cell] or [lattice]"
        )
    if not all(model.periodic):
        return "the cluster has open ends, so its correlations do not depend on distance alone"
    if not model.basis and len(model.sites) > abs(Superlattice(model.superlattice).det):
        return (
            "the cell holds several sites whose places are not known; give each [[cell.site]] "
            "its position"
        )
    return None


def _basis(model: SpinModel) -> tuple[Position, ...]:
    return model.basis or ((0.0,) * len(model.superlattice),)


def site_positions(model: SpinModel) -> NDArray[np.float64]:
    """Positions (N, D) of all sites of a repeated cell, in units of the cell's vectors."""
    basis = np.array(_basis(model))
    cells = np.array(Superlattice(model.superlattice).cells(), dtype=np.float64)
    across = basis.shape[1] - cells.shape[1]
    cells = np.concatenate([cells, np.zeros((len(cells), across))], axis=1)
    places: NDArray[np.float64] = (cells[:, None, :] + basis[None]).reshape(-1, basis.shape[1])
    return places


def wave_vectors(model: SpinModel) -> NDArray[np.float64]:
    """The wave vectors (Q, D) at which a periodic cluster's structure factor may be asked.

    All reciprocal vectors of the superlattice, over as many zones as it takes until the sites'
    own phases come round: then Σ_q S(q) = (Q/N) Σ_i S_i(S_i+1). Of places that are no simple
    fractions, one zone.
    """
    basis = np.array(_basis(model))
    basis = basis - basis[0]
    lattice = Superlattice(model.superlattice)
    d, sign = lattice.dimension, (1 if lattice.det > 0 else -1)
    columns = Superlattice(tuple(zip(*model.superlattice, strict=True)))
    size = abs(lattice.det)
    one = [
        [Fraction(sign * sum(a * b for a, b in zip(row, n, strict=True)) % size, size)
         for row in lattice.adjugate]
        for n in columns.cells()
    ]  # fmt: skip
    steps = [_denominator(basis[:, k]) for k in range(basis.shape[1])]
    zones = [range(step or 1) for step in steps[:d]]
    across: list[list[Fraction]] = []
    for k, step in enumerate(steps[d:], start=d):
        width = 1 if step is None else round(float(np.ptp(basis[:, k])) * step) + 1
        across.append([Fraction((step or 1) * j, width) for j in range(width)])
    if size * prod(map(len, zones)) * prod(map(len, across)) > MOST_POINTS:
        zones, across = [range(1)] * d, [[Fraction(0)]] * len(across)
    points = [
        [*(q + z for q, z in zip(inside, zone, strict=True)), *beside]
        for inside in one
        for zone in product(*zones)
        for beside in product(*across)
    ]
    return np.array([[float(x) for x in point] for point in sorted(points)])


def _denominator(places: NDArray[np.float64]) -> int | None:
    """The smallest z for which all places are multiples of 1/z, None beyond simple fractions."""
    for z in range(1, LARGEST_DENOMINATOR + 1):
        if np.all(np.abs(places * z - np.round(places * z)) < CLOSE * z):
            return z
    return None
