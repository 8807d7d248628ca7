"""Exact low moments of H within one M, by short walks from every representative.

With X = (H − c)/w Hermitian, the trace of a power over all configurations of one M is a sum
over the representatives of the orbits, Tr X^{2k} = Σ_r |orbit r| ‖X^k|r⟩‖² and
Tr X^{2k+1} = Σ_r |orbit r| ⟨X^k r|X^{k+1} r⟩, because the elements of the group commute with H.
X^k|r⟩ lives on the few configurations that k moves reach, so it is kept as a short list with a
hash table beside it; nothing of the size of the sector is held.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from thermo.hilbert.encoding import Encoding, Ints
from thermo.hilbert.jit import fast_kernel
from thermo.hilbert.operators import MoveTables
from thermo.hilbert.orbits import Orbits
from thermo.hilbert.windows import WindowTables, window_tables

#: Rows are summed in chunks of this size, whoever computes them, so that rounding never depends
#: on how the work was shared out.
CHUNK_ROWS = 1024
HIGHEST_ORDER = 8
_FIRST_BITS = 12
# Slots per configuration in the hash table: a miss costs a mispredicted branch, room nothing.
_SPARSE = 8

# Everything that indexes an array is unsigned: a signed index costs a test for wrapping round.
U0, U1, U2, U3, U4, U5, U6, U7, U8 = (np.uint64(k) for k in range(9))
# Fibonacci hashing (Knuth, The Art of Computer Programming 3, 6.4): 2⁶⁴ over the golden ratio.
GOLD = np.uint64(0x9E3779B97F4A7C15)

# Legend: c configuration, w window, e entry of a window, n place in the list of configurations
# reached (1 is the representative; 0 stands for an empty slot), k link.


@fast_kernel
def _slots(config, reached, size):
    """A hash table of ``size`` slots that holds the places 1 … reached−1."""
    slots = np.zeros(size, dtype=np.uint32)
    mask = np.uint64(size - 1)
    drop = np.uint64(64)
    while size > 1:
        size >>= 1
        drop -= U1
    for n in range(U1, reached):
        slot = (config[n] * GOLD) >> drop
        while slots[slot] != 0:
            slot = (slot + U1) & mask
        slots[slot] = n
    return slots, mask, drop


@fast_kernel
def _longer(array, size):
    """The array with zeros after it, at least doubled."""
    result = np.zeros(max(size, U2 * np.uint64(array.shape[0])), dtype=array.dtype)
    result[: array.shape[0]] = array
    return result


@fast_kernel
def _overlap(left, right, count):
    """Re Σ left*·right, in four sums that do not wait for each other; zeros lie beyond."""
    a = b = c = d = 0.0
    for n in range(U0, count, U4):
        a += (np.conj(left[n]) * right[n]).real
        b += (np.conj(left[n + U1]) * right[n + U1]).real
        c += (np.conj(left[n + U2]) * right[n + U2]).real
        d += (np.conj(left[n + U3]) * right[n + U3]).real
    return (a + b) + (c + d)


@fast_kernel
def _walk_sums(
    representatives, weights, low, high, order, sums,
    shift, mask, shift_2, mask_2, stride, base, energy, start, count, delta, amplitude,
    constant, most,
):  # fmt: skip
    """Add Σ weight·⟨r|X^k|r⟩ over the rows low … high−1 to ``sums`` (order + 1,)."""
    windows = shift.shape[0]
    applications = (order + 1) // 2
    size = 1 << _FIRST_BITS
    room = np.uint64(size // _SPARSE)
    config = np.zeros(room + U8, dtype=np.uint64)
    slots, slot_mask, drop = _slots(config, U1, size)
    now = np.zeros(room + U8, dtype=amplitude.dtype)
    then = np.zeros(room + U8, dtype=amplitude.dtype)
    own = np.zeros(room + U8)
    first = np.zeros(room + U8, dtype=np.uint64)
    target = np.zeros(size, dtype=np.uint32)
    element = np.zeros(size, dtype=amplitude.dtype)
    steps = np.zeros(most + 8, dtype=np.uint64)
    values = np.zeros(most + 8, dtype=amplitude.dtype)
    for r in range(low, high):
        weight = weights[r]
        if weight == 0:
            continue
        sums[0] += weight
        config[1] = np.uint64(representatives[r])
        slots[(config[1] * GOLD) >> drop] = 1
        now[1] = 1
        known, reached, links = U1, U2, U0
        for step in range(1, applications + 1):
            last = step == applications
            present = reached
            for n in range(U1, known):
                value = now[n]
                then[n] += own[n] * value
                for k in range(first[n], first[n + U1]):
                    then[target[k]] += element[k] * value
            for n in range(known, present):
                c, value = config[n], now[n]
                diagonal = constant
                found = U0
                for w in range(windows):
                    e = base[w] + ((c >> shift[w]) & mask[w]) * stride[w]
                    e += (c >> shift_2[w]) & mask_2[w]
                    diagonal += energy[e]
                    q, to, more = start[e], found, count[e]
                    found += more
                    # Whole blocks are copied: what is too much is overwritten by the next.
                    while True:
                        s0, s1, s2, s3 = delta[q], delta[q + U1], delta[q + U2], delta[q + U3]
                        s4, s5, s6, s7 = delta[q + U4], delta[q + U5], delta[q + U6], delta[q + U7]
                        v0, v1, v2, v3 = (
                            amplitude[q], amplitude[q + U1], amplitude[q + U2], amplitude[q + U3],
                        )  # fmt: skip
                        v4, v5, v6, v7 = (
                            amplitude[q + U4], amplitude[q + U5],
                            amplitude[q + U6], amplitude[q + U7],
                        )  # fmt: skip
                        steps[to], steps[to + U1], steps[to + U2], steps[to + U3] = s0, s1, s2, s3
                        steps[to + U4], steps[to + U5] = s4, s5
                        steps[to + U6], steps[to + U7] = s6, s7
                        values[to], values[to + U1] = v0, v1
                        values[to + U2], values[to + U3] = v2, v3
                        values[to + U4], values[to + U5] = v4, v5
                        values[to + U6], values[to + U7] = v6, v7
                        if more <= U8:
                            break
                        q, to, more = q + U8, to + U8, more - U8
                own[n] = diagonal
                then[n] += diagonal * value
                if reached + found > room:
                    while reached + found > room:
                        size *= 2
                        room = np.uint64(size // _SPARSE)
                    slots, slot_mask, drop = _slots(config, reached, size)
                    config = _longer(config, room + U8)
                    now = _longer(now, room + U8)
                    then = _longer(then, room + U8)
                    own = _longer(own, room + U8)
                    first = _longer(first, room + U8)
                if links + found > np.uint64(target.shape[0]):
                    target = _longer(target, links + found)
                    element = _longer(element, links + found)
                for k in range(found):
                    moved = c + steps[k]
                    slot = (moved * GOLD) >> drop
                    place = np.uint64(slots[slot])
                    while place != U0 and config[place] != moved:
                        slot = (slot + U1) & slot_mask
                        place = np.uint64(slots[slot])
                    # No branch, as whether it is new can hardly be guessed: an old one's entries
                    # are written over with themselves.
                    new = place == U0
                    place = reached if new else place
                    reached += np.uint64(new)
                    slots[slot] = place
                    config[place] = moved
                    then[place] += values[k] * value
                    target[links + k] = place
                    element[links + k] = values[k]
                first[n] = links
                # The links of the last application are not needed again.
                if not last:
                    links += found
                first[n + U1] = links
            known = present
            sums[2 * step - 1] += weight * _overlap(now, then, present)
            if 2 * step <= order:
                sums[2 * step] += weight * _overlap(then, then, reached)
            now[:present] = 0
            now, then = then, now
        now[:reached] = 0
        if reached * np.uint64(64) > np.uint64(size):
            slots[:] = 0
        else:
            for n in range(U1, reached):
                slot = (config[n] * GOLD) >> drop
                while slots[slot] != 0:
                    slots[slot] = 0
                    slot = (slot + U1) & slot_mask


def chunk_moments(
    tables: WindowTables,
    representatives: Ints,
    weights: NDArray[np.float64],
    order: int,
    rows: tuple[int, int],
) -> NDArray[np.float64]:
    """Σ weight·⟨r|X^k|r⟩ over each chunk of 1024 rows of the range, shape (chunks, order + 1).

    A range that starts at a multiple of 1024 gives the same bits as any other such range that
    holds the chunk. Rows of weight 0 cost nothing. Releases the interpreter.
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
    tables = window_tables(encoding, moves, amplitudes, diagonals, center, scale)
    stop = len(orbits.representatives) if rows[1] is None else rows[1]
    weights = group_order / orbits.stabiliser
    sums = chunk_moments(tables, orbits.representatives, weights, order, (rows[0], stop))
    return np.array([np.sum(column) for column in sums.T])
