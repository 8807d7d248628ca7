"""Exact Tr X^k over one M, the walks from its representatives shared out over threads."""

from __future__ import annotations

import functools
import math

import numpy as np
from numpy.typing import NDArray

from thermo.errors import RangeError
from thermo.hilbert import walks, windows
from thermo.hilbert.encoding import Encoding
from thermo.hilbert.operators import MoveTables
from thermo.hilbert.orbits import Orbits
from thermo.spectrum.tasks import run_tasks
from thermo.spectrum.threads import thread_count

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
) -> NDArray[np.float64]:
    """Tr X^k over all configurations of one M, X = (H − center)/scale, k = 0 … order.

    ``tables``: one row of ``MoveTables.combined``; ``group_order``: number of symmetry elements
    that made the orbits. Order 0 to 8. Bit for bit the same for any number of workers (None:
    ``thread_count()``). Cost: about (moves per configuration)^(order/2) steps per representative.
    """
    if not 0 <= order <= walks.HIGHEST_ORDER:
        raise RangeError(f"trace order {order} is outside 0 to {walks.HIGHEST_ORDER}")
    prepared = windows.window_tables(encoding, moves, *tables, center, scale)
    weights = group_order / orbits.stabiliser
    count = len(orbits.representatives)
    step = _CHUNKS_AT_ONCE * walks.CHUNK_ROWS
    tasks = [
        functools.partial(
            walks.chunk_moments,
            prepared, orbits.representatives, weights, order, (low, min(low + step, count)),
        )
        for low in range(0, count, step)
    ]  # fmt: skip
    parts: list[NDArray[np.float64]] = [np.zeros((0, order + 1))] * len(tasks)
    for index, sums in run_tasks(tasks, thread_count() if workers is None else workers):
        parts[index] = sums
    joined = np.concatenate([np.zeros((1, order + 1)), *parts])
    return np.array([math.fsum(column) for column in joined.T])
