"""Orbits of configurations under the symmetry elements, and the links H makes between them.

Both are the same for every character of one M: they are built once, and any block is then
filled by table look-up.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from thermo.hilbert.encoding import Encoding, HalfLists, Ints
from thermo.hilbert.jit import kernel
from thermo.hilbert.operators import MoveTables

# Legend: c configuration, g element, k chunk, r representative, m move.


@kernel
def _image(c, tables, g, chunk_shift, chunk_mask):
    image = np.int64(0)
    for k in range(chunk_shift.shape[0]):
        image += tables[g, k, (c >> chunk_shift[k]) & chunk_mask[k]]
    return image


@kernel
def _smallest_image(c, tables, chunk_shift, chunk_mask):
    """The representative of c's orbit and the first element that carries c to it."""
    best, element = c, 0
    for g in range(1, tables.shape[0]):
        image = _image(c, tables, g, chunk_shift, chunk_mask)
        if image < best:
            best, element = image, g
    return best, element


@kernel
def _locate(representatives, value):
    low, high = 0, representatives.shape[0] - 1
    while low < high:
        middle = (low + high) >> 1
        if representatives[middle] < value:
            low = middle + 1
        else:
            high = middle
    return low


@kernel
def _representatives(
    high, partner, low, low_start, tables, chunk_shift, chunk_mask, found, stabilisers
):
    """Fill ``found`` with each orbit's smallest member, ascending, and ``stabilisers`` with how
    many elements fix it; returns their number, and goes on counting past the arrays' end."""
    count = 0
    for h in range(high.shape[0]):
        if partner[h] < 0:
            continue
        for position in range(low_start[partner[h]], low_start[partner[h] + 1]):
            c = high[h] + low[position]
            fixed, smallest = 1, True
            for g in range(1, tables.shape[0]):
                image = _image(c, tables, g, chunk_shift, chunk_mask)
                if image < c:
                    smallest = False
                    break
                if image == c:
                    fixed += 1
            if smallest:
                if count < found.shape[0]:
                    found[count] = c
                    stabilisers[count] = fixed
                count += 1
    return count


@kernel
def _fixing(representatives, start, tables, chunk_shift, chunk_mask, elements):
    """The non-trivial elements that fix each representative, ``start[r]:start[r+1]``."""
    for r in range(representatives.shape[0]):
        position = start[r]
        if position == start[r + 1]:
            continue
        for g in range(1, tables.shape[0]):
            c = representatives[r]
            if _image(c, tables, g, chunk_shift, chunk_mask) == c:
                elements[position] = g
                position += 1


@kernel
def _links(
    representatives, tables, chunk_shift, chunk_mask, dimension, shift, mask,
    site_i, site_j, step_i, step_j, targets, elements,
):  # fmt: skip
    for r in range(representatives.shape[0]):
        c = representatives[r]
        for m in range(site_i.shape[0]):
            i, j = site_i[m], site_j[m]
            targets[r, m] = -1
            a = ((c >> shift[i]) & mask[i]) + step_i[m]
            b = ((c >> shift[j]) & mask[j]) + step_j[m]
            if a < 0 or a >= dimension[i] or b < 0 or b >= dimension[j]:
                continue
            moved = c + (step_i[m] << shift[i]) + (step_j[m] << shift[j])
            best, element = _smallest_image(moved, tables, chunk_shift, chunk_mask)
            targets[r, m] = _locate(representatives, best)
            elements[r, m] = element


@kernel
def _images(representatives, table, tables, chunk_shift, chunk_mask, targets, elements):
    for r in range(representatives.shape[0]):
        moved = _image(representatives[r], table, 0, chunk_shift, chunk_mask)
        best, element = _smallest_image(moved, tables, chunk_shift, chunk_mask)
        targets[r] = _locate(representatives, best)
        elements[r] = element


@dataclass(frozen=True, eq=False)
class Orbits:
    """Orbits of one M: representatives ascending (R,), and which elements fix each.

    ``fixing[start[r]:start[r+1]]`` are the non-trivial elements fixing representative r;
    ``stabiliser`` (R,) counts them with the identity.
    """

    representatives: Ints
    stabiliser: Ints
    start: Ints
    fixing: Ints

    def allowed(self, phases: Ints) -> NDArray[np.bool_]:
        """Which orbits carry a state of the character with the given exponents (R,)."""
        forbidden = np.concatenate([[0], np.cumsum(phases[self.fixing] != 0)])
        allowed: NDArray[np.bool_] = forbidden[self.start[1:]] == forbidden[self.start[:-1]]
        return allowed


@dataclass(frozen=True, eq=False)
class Links:
    """Where each move takes each representative: ``targets`` (R, moves), −1 where it cannot
    act, and the ``elements`` that carry the moved configuration to its representative."""

    targets: NDArray[np.int32]
    elements: NDArray[np.uint16]


def find_orbits(encoding: Encoding, halves: HalfLists, tables: Ints, expected: int) -> Orbits:
    """All orbits of one M. Cost: a few look-ups per configuration, no list of them all."""
    found = np.empty(expected, dtype=np.int64)
    stabiliser = np.empty(expected, dtype=np.int64)
    place = (encoding.chunk_shift, encoding.chunk_mask)
    count = _representatives(
        halves.high, halves.partner, halves.low, halves.low_start, tables, *place, found, stabiliser
    )
    if count != expected:
        raise RuntimeError(f"found {count} orbits where the group theory says {expected}")
    start = np.concatenate([[0], np.cumsum(stabiliser - 1)]).astype(np.int64)
    fixing = np.empty(start[-1], dtype=np.int64)
    _fixing(found, start, tables, *place, fixing)
    return Orbits(found, stabiliser, start, fixing)


def find_links(encoding: Encoding, orbits: Orbits, tables: Ints, moves: MoveTables) -> Links:
    """The links of every representative under every move."""
    shape = (len(orbits.representatives), len(moves.site_i))
    targets = np.empty(shape, dtype=np.int32)
    elements = np.zeros(shape, dtype=np.uint16)
    _links(
        orbits.representatives, tables, encoding.chunk_shift, encoding.chunk_mask,
        encoding.dimension, encoding.shift, encoding.mask,
        moves.site_i, moves.site_j, moves.step_i, moves.step_j, targets, elements,
    )  # fmt: skip
    return Links(targets, elements)


def find_images(encoding: Encoding, orbits: Orbits, tables: Ints, table: Ints) -> Links:
    """Representative and element of the image of each representative under one permutation."""
    targets = np.empty(len(orbits.representatives), dtype=np.int32)
    elements = np.zeros(len(orbits.representatives), dtype=np.uint16)
    place = (encoding.chunk_shift, encoding.chunk_mask)
    _images(orbits.representatives, table, tables, *place, targets, elements)
    return Links(targets, elements)
