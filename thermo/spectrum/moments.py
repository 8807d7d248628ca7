"""Exact Tr X^k over one M, the walks from its representatives shared out over threads."""

from __future__ import annotations

import functools
import math
from collections.abc import Iterable, Sequence

import numpy as np
from numpy.typing import NDArray
from scipy import sparse

from thermo.errors import RangeError
from thermo.hilbert import walks, windows
from thermo.hilbert.encoding import Encoding, element_tables
from thermo.hilbert.operators import MoveTables
from thermo.hilbert.orbits import Orbits, find_images
from thermo.spectrum.tasks import run_tasks
from thermo.spectrum.threads import thread_count
from thermo.symmetry.sectors import SymmetryElements

# Chunks that a thread takes at a time: enough to make starting it free, few enough to share.
_CHUNKS_AT_ONCE = 8


def exact_moments(
    encoding: Encoding,
    orbits: Orbits,
    group_order: int,
    moves: MoveTables,
    tables: tuple[NDArray[np.complex128], NDArray[np.float64]],
    center: float,
    scale: float,
    order: int = 6,
    workers: int | None = None,
    images: Sequence[NDArray[np.integer]] = (),
) -> NDArray[np.float64]:
    """Tr X^k over all configurations of one M, X = (H − center)/scale, k = 0 … order.

    ``tables``: one row of ``MoveTables.combined``; ``group_order``: number of symmetry elements
    that made the orbits; order 0 to 8. ``images`` (``orbit_images``) names further symmetries,
    which save walks. Bit for bit the same for any number of workers (None: ``thread_count()``).
    Cost: ``walk_links`` links of some 6 ns for each representative that is left.
    """
    if not 0 <= order <= walks.HIGHEST_ORDER:
        raise RangeError(f"trace order {order} is outside 0 to {walks.HIGHEST_ORDER}")
    if not (math.isfinite(scale) and scale > 0):
        raise RangeError(f"trace scale {scale} is not a positive number")
    prepared = windows.window_tables(encoding, moves, *tables, center, scale)
    weights = group_order / orbits.stabiliser
    rows, weights = _folded(weights, images)
    walked = np.ascontiguousarray(orbits.representatives[rows])
    step = _CHUNKS_AT_ONCE * walks.CHUNK_ROWS
    tasks = [
        functools.partial(
            walks.chunk_moments, prepared, walked, weights, order, (low, min(low + step, len(rows)))
        )
        for low in range(0, len(rows), step)
    ]
    parts: list[NDArray[np.float64]] = [np.zeros((0, order + 1))] * len(tasks)
    for index, sums in run_tasks(tasks, thread_count() if workers is None else workers):
        parts[index] = sums
    joined = np.concatenate([np.zeros((1, order + 1)), *parts])
    return np.array([math.fsum(column) for column in joined.T])


def orbit_images(
    encoding: Encoding,
    orbits: Orbits,
    elements: SymmetryElements,
    permutations: Iterable[NDArray[np.int64]],
) -> list[NDArray[np.int32]]:
    """Which orbit each site permutation carries each representative into, (orbits,) each.

    ``elements`` made the orbits. The permutations must leave H as it is (generators of the
    automorphism group, say); those among the elements are left out. Cost: one look-up per
    representative and element, far below that of a walk.
    """
    tables = element_tables(encoding, elements.permutations, elements.reversed)
    known = {p.tobytes() for p in elements.permutations}
    upright = np.zeros(1, dtype=bool)
    return [
        find_images(encoding, orbits, tables, element_tables(encoding, p[None], upright)).targets
        for p in permutations
        if p.tobytes() not in known
    ]


def _folded(
    weights: NDArray[np.float64], images: Sequence[NDArray[np.integer]]
) -> tuple[NDArray[np.int64], NDArray[np.float64]]:
    """One row of each set of orbits that symmetries carry into each other, and the sets' weights.

    A symmetry P gives ⟨Pr|X^k|Pr⟩ = ⟨r|X^k|r⟩, so one walk serves all of them.
    """
    count = len(weights)
    rows = np.arange(count, dtype=np.int64)
    if not images:
        return rows, weights
    ends = np.concatenate(images).astype(np.int64)
    joins = sparse.coo_array((np.ones(len(ends)), (np.tile(rows, len(images)), ends)), (count,) * 2)
    _, labels = sparse.csgraph.connected_components(joins, directed=False)
    _, first = np.unique(labels, return_index=True)
    total = np.bincount(labels, weights=weights).astype(np.float64)
    order = np.argsort(first)
    return first[order].astype(np.int64), total[order]


def walk_links(
    encoding: Encoding,
    moves: MoveTables,
    tables: tuple[NDArray[np.complex128], NDArray[np.float64]],
    order: int,
    configurations: int,
) -> float:
    """About how many links the walks from one representative follow: the measure of their cost.

    With a moves per configuration, mostly of disjoint pairs, k of them in any order reach some
    a^k/k! configurations, at most ``configurations``.
    """
    a = windows.window_tables(encoding, moves, *tables, 0.0, 1.0).mean
    reached = links = 0.0
    for k in range((order + 1) // 2):
        reached = min(reached + a**k / math.factorial(k), float(configurations))
        links += a * reached
    return links
