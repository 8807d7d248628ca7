"""Magnetic moments between the eigenvectors of a block, summed over pairs of states per level.

With X = V† m V, a level n gets from every other state k of its block Re(X_nk* X'_nk) and the same
over E_k − E_n, kept apart by the size of the gap: what is wanted of them at a temperature T
depends on the gap over T (thermo/model/response_table.py).
"""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy import sparse

from thermo.hilbert.encoding import Encoding, Ints
from thermo.hilbert.jit import kernel
from thermo.hilbert.operators import MoveTables
from thermo.hilbert.orbits import Links, Orbits

# Rows of X handled at once, in elements: keeps the extra memory small beside the block's.
_ROWS = 2_000_000

# Legend: X[a, row, k] moment a between state first + row and state k; c class of gaps.


@kernel
def _pair_sums(X, first, energy, edges, near, far):
    n_states = energy.shape[0]
    n_moments = X.shape[0]
    for row in range(X.shape[1]):
        n = first + row
        for direction in (-1, 1):
            c = 0
            k = n + direction
            while 0 <= k < n_states:
                gap = energy[k] - energy[n]
                # Gaps grow outwards, as energies ascend.
                while c < edges.shape[0] - 1 and abs(gap) > edges[c]:
                    c += 1
                pair = 0
                for a in range(n_moments):
                    for b in range(a, n_moments):
                        x, y = X[a, row, k], X[b, row, k]
                        product = x.real * y.real + x.imag * y.imag
                        near[n, c, pair] += product
                        if c > 0:
                            far[n, c, pair] += product / gap
                        pair += 1
                k += direction


def one_site_operator(
    encoding: Encoding,
    orbits: Orbits,
    links: Links,
    moves: MoveTables,
    amplitudes: NDArray[np.complex128],
    diagonals: NDArray[np.float64],
    phases: Ints,
    modulus: int,
) -> sparse.csr_array:
    """A symmetric sum of single-site operators in one character's orbit states, (n, n) Hermitian.

    ``amplitudes``, ``diagonals``: one row of MoveTables.combined, zero for pairs of sites. The
    basis is that of ``dense_block`` for complex blocks, and for real ones of a real character.
    Cost: one pass over the representatives for each move of one site.
    """
    allowed = orbits.allowed(phases)
    slots = np.where(allowed, np.cumsum(allowed) - 1, -1)
    character = np.exp(2j * np.pi * phases / modulus)
    root = np.sqrt(orbits.stabiliser.astype(np.float64))
    own = np.flatnonzero(allowed)
    c = orbits.representatives[own]
    n = len(own)
    diagonal = np.zeros(n, dtype=complex)
    for i, j, offset in zip(moves.diagonal_i, moves.diagonal_j, moves.diagonal_offset, strict=True):
        if i == j:
            diagonal += diagonals[offset + ((c >> encoding.shift[i]) & encoding.mask[i])]
    rows, columns, values = [np.arange(n)], [np.arange(n)], [diagonal]
    for m, (i, j) in enumerate(zip(moves.site_i, moves.site_j, strict=True)):
        offset = moves.offset[m]
        if i != j or not np.any(amplitudes[offset : offset + encoding.dimension[i]]):
            continue
        target = links.targets[own, m]
        used = (target >= 0) & (slots[target] >= 0)
        target, source = target[used], own[used]
        digit = (c[used] >> encoding.shift[i]) & encoding.mask[i]
        phase = np.conj(character[links.elements[source, m]])
        rows.append(slots[target])
        columns.append(slots[source])
        values.append(amplitudes[offset + digit] * phase * (root[target] / root[source]))
    place = (np.concatenate(rows), np.concatenate(columns))
    return sparse.csr_array(sparse.coo_array((np.concatenate(values), place), shape=(n, n)))


def pair_sums(
    operators: list[sparse.csr_array],
    energy: NDArray[np.float64],
    vectors: NDArray[Any],
    edges: NDArray[np.float64],
) -> tuple[NDArray[np.float64], NDArray[np.float64], NDArray[np.float64]]:
    """Diagonal moments (n, K), and pair sums ``near`` and ``far`` (n, C, P), P = K(K+1)/2.

    ``energy`` (n,) ascends, ``vectors`` (n, n) holds the eigenvectors as columns, ``edges`` (C,)
    the upper end of each class of gaps; class 0 counts as degenerate and has no ``far``. Cost:
    8n³ operations for each of the K operators, memory of K + 1 blocks beside the vectors.
    """
    n, count = len(energy), len(operators)
    pairs = count * (count + 1) // 2
    diagonal = np.empty((n, count))
    near, far = np.zeros((n, len(edges), pairs)), np.zeros((n, len(edges), pairs))
    moved = [m @ vectors for m in operators]
    rows = max(1, _ROWS // n)
    for first in range(0, n, rows):
        part = slice(first, min(first + rows, n))
        left = vectors[:, part].conj().T
        found = np.array([left @ y for y in moved], dtype=complex)
        index = np.arange(part.stop - first)
        diagonal[part] = found[:, index, first + index].real.T
        _pair_sums(found, first, energy, edges, near, far)
    return diagonal, near, far
