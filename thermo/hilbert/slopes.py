"""Slopes of a block's eigenvalues: ⟨n|H_p|n⟩ for every channel p, from the block's eigenvectors.

H_p is never stored: each representative and move contributes one element of it, which is summed
over all eigenvectors at once.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from thermo.hilbert.blocks import _amplitude, _diagonal, real_basis
from thermo.hilbert.encoding import Encoding, Ints
from thermo.hilbert.jit import kernel
from thermo.hilbert.operators import MoveTables
from thermo.hilbert.orbits import Links, Orbits

# Legend: V[state, n] eigenvectors as columns, out[p, n]; p channel; else as in blocks.py.


@kernel
def _gather_real(V, out, t, r, z, slots, weights):
    """Add ⟨t|H_p|r⟩ = z, and its transpose, to every eigenvector's sum."""
    for x in range(2):
        row = slots[t, x]
        if row < 0:
            continue
        left = np.conj(weights[t, x]) * z
        for y in range(2):
            column = slots[r, y]
            if 0 <= column <= row:
                w = weights[r, y]
                element = left.real * w.real - left.imag * w.imag
                if row > column:
                    element *= 2.0
                for n in range(out.shape[0]):
                    out[n] += element * V[row, n] * V[column, n]


@kernel
def _slopes_real(
    V, out, representatives, root_stabiliser, targets, elements, slots, weights, character,
    shift, mask, dimension, site_i, site_j, offset, amplitudes,
    diagonal_i, diagonal_j, diagonal_offset, diagonals,
):  # fmt: skip
    for r in range(representatives.shape[0]):
        if slots[r, 0] < 0:
            continue
        c = representatives[r]
        for p in range(out.shape[0]):
            d = _diagonal(
                c, shift, mask, dimension, diagonal_i, diagonal_j, diagonal_offset, diagonals[p]
            )
            if d != 0:
                _gather_real(V, out[p], r, r, d + 0j, slots, weights)
        for m in range(targets.shape[1]):
            t = targets[r, m]
            if t < 0 or slots[t, 0] < 0:
                continue
            factor = np.conj(character[elements[r, m]]) * (root_stabiliser[t] / root_stabiliser[r])
            for p in range(out.shape[0]):
                z = _amplitude(c, m, shift, mask, dimension, site_i, site_j, offset, amplitudes[p])
                if z != 0:
                    _gather_real(V, out[p], t, r, z * factor, slots, weights)


@kernel
def _gather_complex(V, out, row, column, z):
    if row == column:
        for n in range(out.shape[0]):
            v = V[row, n]
            out[n] += z.real * (v.real * v.real + v.imag * v.imag)
        return
    for n in range(out.shape[0]):
        w = z * V[column, n]
        out[n] += 2.0 * (V[row, n].real * w.real + V[row, n].imag * w.imag)


@kernel
def _slopes_complex(
    V, out, representatives, root_stabiliser, targets, elements, slots, character,
    shift, mask, dimension, site_i, site_j, offset, amplitudes,
    diagonal_i, diagonal_j, diagonal_offset, diagonals,
):  # fmt: skip
    for r in range(representatives.shape[0]):
        column = slots[r]
        if column < 0:
            continue
        c = representatives[r]
        for p in range(out.shape[0]):
            d = _diagonal(
                c, shift, mask, dimension, diagonal_i, diagonal_j, diagonal_offset, diagonals[p]
            )
            if d != 0:
                _gather_complex(V, out[p], column, column, d + 0j)
        for m in range(targets.shape[1]):
            t = targets[r, m]
            if t < 0 or slots[t] < column:
                continue
            factor = np.conj(character[elements[r, m]]) * (root_stabiliser[t] / root_stabiliser[r])
            for p in range(out.shape[0]):
                z = _amplitude(c, m, shift, mask, dimension, site_i, site_j, offset, amplitudes[p])
                if z != 0:
                    _gather_complex(V, out[p], slots[t], column, z * factor)


def block_slopes(
    encoding: Encoding,
    orbits: Orbits,
    links: Links,
    moves: MoveTables,
    n_channels: int,
    phases: Ints,
    modulus: int,
    images: Links | None,
    real: bool,
    vectors: NDArray[np.float64] | NDArray[np.complex128],
) -> NDArray[np.float64]:
    """Slopes (n_channels, n) of a block's eigenvalues by the first channels of ``moves``.

    ``vectors`` (n, n), C order, eigenvectors of ``dense_block``'s matrix as columns, in the same
    basis. Cost: n² operations for each move of a configuration, against n³ for the vectors.
    """
    n = vectors.shape[0]
    out = np.zeros((n_channels, n))
    if n_channels == 0:
        return out
    allowed = orbits.allowed(phases)
    character = np.exp(2j * np.pi * phases / modulus)
    root_stabiliser = np.sqrt(orbits.stabiliser.astype(np.float64))
    tail = (
        encoding.shift, encoding.mask, encoding.dimension,
        moves.site_i, moves.site_j, moves.offset,
        np.ascontiguousarray(moves.amplitudes[:n_channels]),
        moves.diagonal_i, moves.diagonal_j, moves.diagonal_offset,
        np.ascontiguousarray(moves.diagonals[:n_channels]),
    )  # fmt: skip
    head = (
        vectors, out, orbits.representatives, root_stabiliser, links.targets, links.elements
    )  # fmt: skip
    if real:
        basis = real_basis(allowed, images, character)
        _slopes_real(*head, basis.slots, basis.weights, character, *tail)
    else:
        slots = np.where(allowed, np.cumsum(allowed) - 1, -1)
        _slopes_complex(*head, slots, character, *tail)
    return out
