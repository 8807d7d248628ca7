"""H as look-up tables over windows of a configuration's bits, for walking from it quickly.

Most pairs of sites allow no move in a given configuration (parallel spins ½, digits at their
end). A window is two fields of neighbouring sites, at most 8 bits together; its bits select,
in one look-up, the diagonal and the list of possible moves of all pairs that lie inside.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from thermo.hilbert.encoding import Encoding, Ints
from thermo.hilbert.operators import MoveTables

WINDOW_BITS = 8
#: Moves are copied in blocks of this many, so the lists end in as many unused entries.
BLOCK = 8

Unsigned = NDArray[np.uint64]
Amplitudes = NDArray[np.float64] | NDArray[np.complex128]
# Sites first … last−1 of the one and of the other field.
Window = tuple[int, int, int, int]


@dataclass(frozen=True, eq=False)
class WindowTables:
    """X = (H − center)/scale by windows w of the bits of configuration c.

    Its entry is e = base + ((c >> ``shift``) & ``mask``)·``stride`` + ((c >> ``shift_2``) &
    ``mask_2``), each (windows,). ``energy[e]`` is its diagonal, to which ``constant`` is to be
    added once; its moves are ``start[e]`` … ``start[e] + count[e]`` − 1, ``delta`` (modulo 2⁶⁴)
    being what they add to c and ``amplitude`` their matrix element, real where all are.
    ``most`` is the largest number of moves of any configuration, ``mean`` their average over
    all bit patterns.
    """

    shift: Unsigned
    mask: Unsigned
    shift_2: Unsigned
    mask_2: Unsigned
    stride: Unsigned
    base: Unsigned
    energy: NDArray[np.float64]
    start: Unsigned
    count: Unsigned
    delta: Unsigned
    amplitude: Amplitudes
    constant: float
    most: int
    mean: float

    @property
    def arrays(self) -> tuple[Any, ...]:
        """The fields in the order in which the kernel takes them."""
        return (
            self.shift, self.mask, self.shift_2, self.mask_2, self.stride, self.base,
            self.energy, self.start, self.count, self.delta, self.amplitude,
            self.constant, self.most,
        )  # fmt: skip


def _candidates(widths: Ints) -> list[Window]:
    """Every window of at most 8 bits whose second field cannot be longer."""
    ends = np.concatenate([[0], np.cumsum(widths)])
    n = len(widths)
    found = []
    for first in range(n):
        for last in range(first + 1, n + 1):
            room = WINDOW_BITS - (ends[last] - ends[first])
            if room < 0:
                break
            found.append((first, last, last, last))
            for start in range(last + 1, n):
                stop = int(np.searchsorted(ends, ends[start] + room, side="right")) - 1
                if stop > start:
                    found.append((first, last, start, stop))
    return found


def choose_windows(widths: Ints, pairs: list[tuple[int, int]]) -> list[tuple[Window, Ints]]:
    """Few windows that hold every pair of sites, and which pairs (indices) each is to serve.

    ``widths``: bits per site. Greedy: the next window holds the most pairs still left. Cost:
    some 10⁴ windows times the number of pairs.
    """
    i, j = np.array(pairs, dtype=np.int64).reshape(-1, 2).T
    chosen: list[tuple[Window, Ints]] = []
    own_bits = np.where(i == j, widths[i], widths[i] + widths[j])
    left = own_bits <= WINDOW_BITS
    for k in np.flatnonzero(~left):
        a, b = min(pairs[k]), max(pairs[k])
        chosen.append(((a, a + 1, b, b + 1 if b > a else b), np.array([k])))
    if not left.any():
        return chosen
    windows = _candidates(widths)
    site = np.arange(len(widths))
    fields = np.array(windows)[:, :, None]
    inside = ((site >= fields[:, 0]) & (site < fields[:, 1])) | (
        (site >= fields[:, 2]) & (site < fields[:, 3])
    )
    holds = inside[:, i] & inside[:, j]
    gain = holds[:, left].sum(axis=1)
    while left.any():
        best = int(np.argmax(gain))
        served = np.flatnonzero(holds[best] & left)
        left[served] = False
        gain -= holds[:, served].sum(axis=1)
        used = np.zeros(len(widths), dtype=bool)
        used[i[served]] = used[j[served]] = True
        chosen.append((_trimmed(windows[best], used), served))
    return chosen


def _trimmed(window: Window, used: NDArray[np.bool_]) -> Window:
    """The window without unused sites at the ends of its fields."""
    bounds: list[int] = []
    for first, last in (window[:2], window[2:]):
        sites = first + np.flatnonzero(used[first:last])
        bounds += [int(sites[0]), int(sites[-1]) + 1] if len(sites) else [last, last]
    return bounds[0], bounds[1], bounds[2], bounds[3]


def window_tables(
    encoding: Encoding,
    moves: MoveTables,
    amplitudes: NDArray[np.complex128],
    diagonals: NDArray[np.float64],
    center: float,
    scale: float,
) -> WindowTables:
    """Tables of X = (H − center)/scale for one row of ``MoveTables.combined``."""
    shift, mask, dimension = encoding.shift, encoding.mask, encoding.dimension
    widths = np.array([int(m).bit_length() for m in mask], dtype=np.int64)
    terms: dict[tuple[int, int], tuple[list[int], list[int]]] = {}
    for kind, sites in enumerate(
        (zip(moves.diagonal_i, moves.diagonal_j, strict=True),
         zip(moves.site_i, moves.site_j, strict=True))
    ):  # fmt: skip
        for k, (a, b) in enumerate(sites):
            terms.setdefault((int(a), int(b)), ([], []))[kind].append(k)
    pairs = sorted(terms)
    fields: list[list[int]] = []
    energy, count, entry, delta, amplitude = [], [], [], [], []
    base = most = 0
    mean = 0.0
    for (first, last, start, stop), served in choose_windows(widths, pairs):
        bits, bits_2 = int(widths[first:last].sum()), int(widths[start:stop].sum())
        low, low_2 = (int(shift[s]) if s < len(shift) else 0 for s in (first, start))
        codes = np.arange(1 << (bits + bits_2))
        digits: dict[int, Ints] = {}
        for s in [*range(first, last), *range(start, stop)]:
            place = shift[s] - low + bits_2 if s < last else shift[s] - low_2
            digits[s] = (codes >> place) & mask[s]
        # Patterns beyond 2S of a site never occur; they get neither energy nor moves.
        valid = np.all([digits[s] < dimension[s] for s in digits], axis=0)
        own_energy = np.zeros(len(codes))
        own_count = np.zeros(len(codes), dtype=np.int64)
        for i, j in (pairs[k] for k in served):
            local = digits[i] if i == j else digits[i] * dimension[j] + digits[j]
            local = np.where(valid, local, 0)
            for k in terms[i, j][0]:
                own_energy += diagonals[moves.diagonal_offset[k] + local]
            for k in terms[i, j][1]:
                # Amplitudes vanish where a digit would leave its range: no move needs a check.
                values = np.where(valid, amplitudes[moves.offset[k] + local], 0)
                able = np.flatnonzero(values)
                step = (int(moves.step_i[k]) << int(shift[i])) + (
                    int(moves.step_j[k]) << int(shift[j])
                )
                entry.append(base + able)
                delta.append(np.full(len(able), step, dtype=np.int64))
                amplitude.append(values[able])
                own_count[able] += 1
        fields.append([low, (1 << bits) - 1, low_2, (1 << bits_2) - 1, 1 << bits_2, base])
        energy.append(np.where(valid, own_energy, 0) / scale)
        count.append(own_count)
        most += int(own_count.max())
        mean += float(own_count[valid].mean())
        base += len(codes)
    none: list[NDArray[Any]] = [np.zeros(0, dtype=np.int64)]
    entries = np.concatenate([*entry, *none])
    order = np.argsort(entries, kind="stable")
    spare = np.zeros(BLOCK, dtype=np.int64)
    counts = np.concatenate([*count, *none])
    found = np.concatenate([*amplitude, *none])[order].astype(np.complex128) / scale
    found = np.concatenate([found, spare])
    low_bits, masks, low_bits_2, masks_2, strides, bases = (
        np.array(fields, dtype=np.uint64).reshape(-1, 6).T.copy()
    )
    return WindowTables(
        low_bits,
        masks,
        low_bits_2,
        masks_2,
        strides,
        bases,
        energy=np.concatenate([*energy, *none]).astype(np.float64),
        start=(np.cumsum(counts) - counts).astype(np.uint64),
        count=counts.astype(np.uint64),
        delta=np.concatenate([np.concatenate([*delta, *none])[order], spare]).view(np.uint64),
        amplitude=found if np.any(found.imag) else found.real.copy(),
        constant=-center / scale,
        most=most,
        mean=mean,
    )
