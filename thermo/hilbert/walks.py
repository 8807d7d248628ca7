"""Exact low moments of H within one M, by short walks from every representative.

With X = (H − c)/w Hermitian, the trace of a power over all configurations of one M is a sum
over the representatives of the orbits, Tr X^{2k} = Σ_r |orbit r| ‖X^k|r⟩‖² and
Tr X^{2k+1} = Σ_r |orbit r| ⟨X^k r|X^{k+1} r⟩, because the elements of the group commute with H.
X^k|r⟩ lives on the few configurations that k moves reach, so it is kept as a short list with a
hash table beside it; nothing of the size of the sector is held.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from thermo.hilbert.encoding import Encoding, Ints
from thermo.hilbert.jit import kernel
from thermo.hilbert.operators import MoveTables
from thermo.hilbert.orbits import Orbits

#: Rows are summed in chunks of this size, whoever computes them, so that rounding never depends
#: on how the work was shared out.
CHUNK_ROWS = 1024
HIGHEST_ORDER = 8

# Legend: c configuration, t term (a pair of sites or one site), e entry of a term's table.


@dataclass(frozen=True, eq=False)
class WalkTables:
    """X as tables for walking: of every term the diagonal and the moves, by its two digits.

    Digits (a, b) of term t have the entry e = ``base[t]`` + a·``stride[t]`` + b, with
    ``energy[e]`` and ``count[e]`` moves from e·``width`` on: ``delta`` is what they add to the
    configuration, ``amplitude`` (real where H is) their matrix element.
    """

    shift_i: Ints
    mask_i: Ints
    shift_j: Ints
    mask_j: Ints
    stride: Ints
    base: Ints
    energy: NDArray[np.float64]
    count: Ints
    delta: Ints
    amplitude: NDArray[np.float64] | NDArray[np.complex128]
    width: int
    constant: float

    @property
    def arrays(self) -> tuple[Any, ...]:
        """The fields in the order in which the kernels take them."""
        return (
            self.shift_i, self.mask_i, self.shift_j, self.mask_j, self.stride, self.base,
            self.energy, self.count, self.delta, self.amplitude, self.width, self.constant,
        )  # fmt: skip


def walk_tables(
    encoding: Encoding,
    moves: MoveTables,
    amplitudes: NDArray[np.complex128],
    diagonals: NDArray[np.float64],
    center: float,
    scale: float,
) -> WalkTables:
    """Tables of X = (H − center)/scale for one row of ``MoveTables.combined``."""
    keys = sorted(
        {(int(i), int(j)) for i, j in zip(moves.site_i, moves.site_j, strict=True)}
        | {(int(i), int(j)) for i, j in zip(moves.diagonal_i, moves.diagonal_j, strict=True)}
    )
    place = {key: t for t, key in enumerate(keys)}
    d = encoding.dimension
    stride = np.array([1 if i == j else d[j] for i, j in keys], dtype=np.int64)
    size = np.array([d[i] if i == j else d[i] * d[j] for i, j in keys], dtype=np.int64)
    base = np.concatenate([[0], np.cumsum(size)]).astype(np.int64)
    total = int(base[-1])
    energy = np.zeros(total)
    for k, key in enumerate(zip(moves.diagonal_i, moves.diagonal_j, strict=True)):
        t = place[int(key[0]), int(key[1])]
        o = moves.diagonal_offset[k]
        energy[base[t] : base[t + 1]] += diagonals[o : o + size[t]] / scale
    count = np.zeros(total, dtype=np.int64)
    found: list[tuple[Ints, Ints, int, NDArray[np.complex128]]] = []
    for m, key in enumerate(zip(moves.site_i, moves.site_j, strict=True)):
        i, j = int(key[0]), int(key[1])
        t = place[i, j]
        values = amplitudes[moves.offset[m] : moves.offset[m] + size[t]] / scale
        entries = np.flatnonzero(values)
        # Amplitudes vanish where a digit would leave its range, so no move needs a check.
        delta = (int(moves.step_i[m]) << int(encoding.shift[i])) + (
            int(moves.step_j[m]) << int(encoding.shift[j])
        )
        found.append((base[t] + entries, count[base[t] + entries], delta, values[entries]))
        count[base[t] + entries] += 1
    width = max(1, int(count.max(initial=0)))
    delta_table = np.zeros(total * width, dtype=np.int64)
    amplitude_table = np.zeros(total * width, dtype=np.complex128)
    for entries, rank, delta, values in found:
        delta_table[entries * width + rank] = delta
        amplitude_table[entries * width + rank] = values
    real = not np.any(amplitude_table.imag)
    i_of = np.array([i for i, _ in keys], dtype=np.int64)
    j_of = np.array([j for _, j in keys], dtype=np.int64)
    return WalkTables(
        encoding.shift[i_of],
        encoding.mask[i_of],
        encoding.shift[j_of],
        np.where(i_of == j_of, 0, encoding.mask[j_of]),
        stride,
        base[:-1],
        energy,
        count,
        delta_table,
        amplitude_table.real.copy() if real else amplitude_table,
        width,
        -center / scale,
    )


@kernel
def _rebuild(config, count, size):
    """A larger empty hash table with the first ``count`` configurations put in."""
    keys = np.full(size, -1, dtype=np.int64)
    index = np.zeros(size, dtype=np.int64)
    bits = 0
    while (1 << bits) < size:
        bits += 1
    for n in range(count):
        slot = ((config[n] * 7046029254386353131) >> (64 - bits)) & (size - 1)
        while keys[slot] >= 0:
            slot = (slot + 1) & (size - 1)
        keys[slot] = config[n]
        index[slot] = n
    return keys, index, 64 - bits


@kernel
def _longer(array, size):
    result = np.zeros(size, dtype=array.dtype)
    result[: array.shape[0]] = array
    return result


@kernel
def _walk_sums(
    representatives, weights, low, high, order, sums,
    shift_i, mask_i, shift_j, mask_j, stride, base,
    energy, count, delta, amplitude, width, constant,
):  # fmt: skip
    """Add Σ weight·⟨r|X^k|r⟩ over the rows low … high−1 to ``sums`` (order + 1,)."""
    terms = shift_i.shape[0]
    applications = (order + 1) // 2
    size = 1024
    config = np.empty(size // 2, dtype=np.int64)
    keys, index, shift = _rebuild(config, 0, size)
    now = np.zeros(size // 2, dtype=amplitude.dtype)
    then = np.zeros(size // 2, dtype=amplitude.dtype)
    own = np.zeros(size // 2)
    first = np.zeros(size // 2 + 1, dtype=np.int64)
    link_target = np.zeros(size, dtype=np.int64)
    link_amplitude = np.zeros(size, dtype=amplitude.dtype)
    active = np.zeros(terms * width + width, dtype=np.int64)
    for r in range(low, high):
        weight = weights[r]
        if weight == 0:
            continue
        sums[0] += weight
        config[0] = representatives[r]
        slot = ((config[0] * 7046029254386353131) >> shift) & (size - 1)
        keys[slot] = config[0]
        index[slot] = 0
        now[0] = 1
        known, reached = 0, 1
        for step in range(1, applications + 1):
            last = step == applications
            present = reached
            for n in range(present):
                then[n] = 0
            for n in range(present):
                value = now[n]
                if n < known:
                    then[n] += own[n] * value
                    for k in range(first[n], first[n + 1]):
                        then[link_target[k]] += link_amplitude[k] * value
                    continue
                c = config[n]
                diagonal = constant
                found = 0
                for t in range(terms):
                    e = base[t] + ((c >> shift_i[t]) & mask_i[t]) * stride[t]
                    e += (c >> shift_j[t]) & mask_j[t]
                    diagonal += energy[e]
                    for k in range(width):
                        active[found + k] = e * width + k
                    found += count[e]
                own[n] = diagonal
                then[n] += diagonal * value
                if 2 * (reached + found) > size:
                    while 2 * (reached + found) > size:
                        size *= 2
                    keys, index, shift = _rebuild(config, reached, size)
                    config = _longer(config, size // 2)
                    now = _longer(now, size // 2)
                    then = _longer(then, size // 2)
                    own = _longer(own, size // 2)
                    first = _longer(first, size // 2 + 1)
                start = first[n]
                if not last and start + found > link_target.shape[0]:
                    link_target = _longer(link_target, 2 * (start + found))
                    link_amplitude = _longer(link_amplitude, 2 * (start + found))
                for k in range(found):
                    e = active[k]
                    moved = c + delta[e]
                    slot = ((moved * 7046029254386353131) >> shift) & (size - 1)
                    while keys[slot] >= 0 and keys[slot] != moved:
                        slot = (slot + 1) & (size - 1)
                    if keys[slot] < 0:
                        keys[slot] = moved
                        index[slot] = reached
                        config[reached] = moved
                        then[reached] = 0
                        reached += 1
                    target = index[slot]
                    then[target] += amplitude[e] * value
                    if not last:
                        link_target[start + k] = target
                        link_amplitude[start + k] = amplitude[e]
                first[n + 1] = start + found
            known = present
            odd = 0.0
            for n in range(present):
                odd += (np.conj(now[n]) * then[n]).real
            even = 0.0
            for n in range(reached):
                even += (np.conj(then[n]) * then[n]).real
            sums[2 * step - 1] += weight * odd
            if 2 * step <= order:
                sums[2 * step] += weight * even
            now, then = then, now
        for n in range(reached):
            slot = ((config[n] * 7046029254386353131) >> shift) & (size - 1)
            while keys[slot] >= 0:
                keys[slot] = -1
                slot = (slot + 1) & (size - 1)


def chunk_moments(
    tables: WalkTables,
    representatives: Ints,
    weights: NDArray[np.float64],
    order: int,
    rows: tuple[int, int],
) -> NDArray[np.float64]:
    """Σ weight·⟨r|X^k|r⟩ over each chunk of 1024 rows of the range, shape (chunks, order + 1).

    The range must start at a multiple of 1024 for results that do not depend on it. Rows of
    weight 0 cost nothing. Releases the interpreter.
    """
    starts = range(rows[0], rows[1], CHUNK_ROWS)
    sums = np.zeros((len(starts), order + 1))
    for k, start in enumerate(starts):
        stop = min(start + CHUNK_ROWS, rows[1])
        _walk_sums(representatives, weights, start, stop, order, sums[k], *tables.arrays)
    return sums


def moments(
    encoding: Encoding,
    orbits: Orbits,
    group_order: int,
    moves: MoveTables,
    amplitudes: NDArray[np.complex128],
    diagonals: NDArray[np.float64],
    center: float,
    scale: float,
    order: int = 6,
    rows: tuple[int, int | None] = (0, None),
) -> NDArray[np.float64]:
    """Σ over the representatives of ``rows`` of |orbit|·⟨r|X^k|r⟩, X = (H − center)/scale, for
    k = 0 … order (at most 8), shape (order + 1,); all rows together give Tr X^k over the M.

    ``amplitudes``, ``diagonals``: one row of ``MoveTables.combined``.
    """
    tables = walk_tables(encoding, moves, amplitudes, diagonals, center, scale)
    stop = len(orbits.representatives) if rows[1] is None else rows[1]
    weights = group_order / orbits.stabiliser
    sums = chunk_moments(tables, orbits.representatives, weights, order, (rows[0], stop))
    return np.array([np.sum(column) for column in sums.T])
