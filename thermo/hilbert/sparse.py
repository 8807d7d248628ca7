"""The links of one M as compressed rows, 6 bytes each: built once, used for every character.

Row r lists where H takes representative r. A link's code joins its amplitude's kind and the
symmetry element that carries the moved configuration to its representative: code = kind·G + g.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from thermo.hilbert.blocks import _diagonal
from thermo.hilbert.encoding import Encoding, Ints
from thermo.hilbert.jit import fast_kernel
from thermo.hilbert.operators import MoveTables
from thermo.hilbert.orbits import Orbits, _locate, _smallest_image

# Legend: r representative, t target, m move, l link.

Runner = Callable[[Callable[[int, int], None], int], None]


@fast_kernel
def _count(representatives, shift, mask, dimension, site_i, site_j, step_i, step_j, lo, hi, counts):
    for r in range(lo, hi):
        c = representatives[r]
        total = 0
        for m in range(site_i.shape[0]):
            a = ((c >> shift[site_i[m]]) & mask[site_i[m]]) + step_i[m]
            b = ((c >> shift[site_j[m]]) & mask[site_j[m]]) + step_j[m]
            if 0 <= a < dimension[site_i[m]] and 0 <= b < dimension[site_j[m]]:
                total += 1
        counts[r] = total


@fast_kernel
def _fill(
    representatives, tables, chunk_shift, chunk_mask, shift, mask, dimension,
    site_i, site_j, step_i, step_j, offset, kinds, start, target, code, lo, hi,
):  # fmt: skip
    order = tables.shape[0]
    for r in range(lo, hi):
        c = representatives[r]
        position = start[r]
        for m in range(site_i.shape[0]):
            i, j = site_i[m], site_j[m]
            digit_i, digit_j = (c >> shift[i]) & mask[i], (c >> shift[j]) & mask[j]
            a, b = digit_i + step_i[m], digit_j + step_j[m]
            if a < 0 or a >= dimension[i] or b < 0 or b >= dimension[j]:
                continue
            moved = c + (step_i[m] << shift[i]) + (step_j[m] << shift[j])
            best, element = _smallest_image(moved, tables, chunk_shift, chunk_mask)
            entry = offset[m] + digit_i
            if i != j:
                entry = offset[m] + digit_i * dimension[j] + digit_j
            target[position] = _locate(representatives, best)
            code[position] = kinds[entry] * order + element
            position += 1


@fast_kernel
def _diagonals(
    representatives, shift, mask, dimension, site_i, site_j, offset, values, lo, hi, out
):
    for r in range(lo, hi):
        out[r] = _diagonal(
            representatives[r], shift, mask, dimension, site_i, site_j, offset, values
        )


@dataclass(frozen=True, eq=False)
class SparseLinks:
    """Row r's links are ``start[r]:start[r+1]`` of ``target`` and ``code``."""

    start: Ints
    target: NDArray[np.int32]
    code: NDArray[np.uint16] | NDArray[np.int32]

    @property
    def nbytes(self) -> int:
        """Memory held."""
        return int(self.start.nbytes + self.target.nbytes + self.code.nbytes)


@dataclass(frozen=True, eq=False)
class Kinds:
    """The different amplitudes of a model's moves: ``index`` (A,) of each table entry, and the
    ``columns`` (P, K) of the amplitude table, one for each kind."""

    index: Ints
    columns: NDArray[np.complex128]


def amplitude_kinds(moves: MoveTables) -> Kinds:
    """Entries that are equal for every channel are one kind."""
    if moves.amplitudes.shape[1] == 0:
        return Kinds(np.zeros(0, dtype=np.int64), moves.amplitudes)
    columns, index = np.unique(moves.amplitudes, axis=1, return_inverse=True)
    return Kinds(np.asarray(index, dtype=np.int64).ravel(), columns)


def sparse_links(
    encoding: Encoding, orbits: Orbits, tables: Ints, moves: MoveTables, kinds: Kinds, run: Runner
) -> SparseLinks:
    """All links of one M. ``run(work, rows)`` calls work(lo, hi) over all rows, in threads if it
    likes. Cost: one smallest-image search per link."""
    rows = len(orbits.representatives)
    place = (encoding.shift, encoding.mask, encoding.dimension)
    step = (moves.site_i, moves.site_j, moves.step_i, moves.step_j)
    start = np.zeros(rows + 1, dtype=np.int64)
    run(lambda lo, hi: _count(orbits.representatives, *place, *step, lo, hi, start[1:]), rows)
    np.cumsum(start, out=start)
    codes = max(1, kinds.columns.shape[1]) * len(tables)
    target = np.empty(start[-1], dtype=np.int32)
    code = np.empty(start[-1], dtype=np.uint16 if codes <= 2**16 else np.int32)
    run(
        lambda lo, hi: _fill(
            orbits.representatives, tables, encoding.chunk_shift, encoding.chunk_mask, *place,
            *step, moves.offset, kinds.index, start, target, code, lo, hi,
        ),
        rows,
    )  # fmt: skip
    return SparseLinks(start, target, code)


def diagonal_energies(
    encoding: Encoding,
    orbits: Orbits,
    moves: MoveTables,
    diagonals: NDArray[np.float64],
    run: Runner,
) -> NDArray[np.float64]:
    """H's diagonal (R,) for one row of MoveTables.combined."""
    out = np.empty(len(orbits.representatives))
    place = (encoding.shift, encoding.mask, encoding.dimension)
    where = (moves.diagonal_i, moves.diagonal_j, moves.diagonal_offset, diagonals)
    run(lambda lo, hi: _diagonals(orbits.representatives, *place, *where, lo, hi, out), len(out))
    return out
