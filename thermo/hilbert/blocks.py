"""Dense blocks of H for one character, real symmetric where a basis makes them so.

The state of orbit r and character χ is |r,χ⟩ ∝ Σ_g χ*(g) g|r⟩. A move takes r to c = h t with
representative t; it contributes amplitude·χ(h)·√(s_t/s_r) to ⟨t,χ|H|r,χ⟩, s the number of
elements that fix an orbit's representative.

Real basis: with Θ = P·(complex conjugation), Θ² = 1, and Θ|r,χ⟩ = e^{iφ}|r′,χ⟩, the vectors
e^{iφ/2}|r⟩ (for r′ = r) and (|r⟩ + Θ|r⟩)/√2, i(|r⟩ − Θ|r⟩)/√2 (for a pair r < r′) are invariant
under Θ, so H between them is real.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from thermo.hilbert.encoding import Encoding, Ints
from thermo.hilbert.jit import kernel
from thermo.hilbert.operators import MoveTables
from thermo.hilbert.orbits import Links, Orbits

# Legend: r representative, t target, m move, H[row, column] with row ≥ column filled.


@kernel
def _diagonal(c, shift, mask, dimension, site_i, site_j, offset, values):
    total = 0.0
    for k in range(site_i.shape[0]):
        i, j = site_i[k], site_j[k]
        a = (c >> shift[i]) & mask[i]
        if i == j:
            total += values[offset[k] + a]
        else:
            total += values[offset[k] + a * dimension[j] + ((c >> shift[j]) & mask[j])]
    return total


@kernel
def _amplitude(c, m, shift, mask, dimension, site_i, site_j, offset, values):
    i, j = site_i[m], site_j[m]
    a = (c >> shift[i]) & mask[i]
    if i == j:
        return values[offset[m] + a]
    return values[offset[m] + a * dimension[j] + ((c >> shift[j]) & mask[j])]


@kernel
def _add_real(H, t, r, z, slots, weights):
    """Add the element z = ⟨t|H|r⟩ to the real block: Re(u_t* z u_r) over the real vectors u."""
    for x in range(2):
        row = slots[t, x]
        if row < 0:
            continue
        left = np.conj(weights[t, x]) * z
        for y in range(2):
            column = slots[r, y]
            if 0 <= column <= row:
                w = weights[r, y]
                H[row, column] += left.real * w.real - left.imag * w.imag


@kernel
def _fill_real(
    H, representatives, root_stabiliser, targets, elements, slots, weights, character,
    shift, mask, dimension, site_i, site_j, offset, amplitudes,
    diagonal_i, diagonal_j, diagonal_offset, diagonals,
):  # fmt: skip
    for r in range(representatives.shape[0]):
        if slots[r, 0] < 0:
            continue
        c = representatives[r]
        z = _diagonal(c, shift, mask, dimension, diagonal_i, diagonal_j, diagonal_offset, diagonals)
        _add_real(H, r, r, z + 0j, slots, weights)
        for m in range(targets.shape[1]):
            t = targets[r, m]
            if t < 0 or slots[t, 0] < 0:
                continue
            z = _amplitude(c, m, shift, mask, dimension, site_i, site_j, offset, amplitudes)
            z = z * np.conj(character[elements[r, m]]) * (root_stabiliser[t] / root_stabiliser[r])
            _add_real(H, t, r, z, slots, weights)


@kernel
def _fill_complex(
    H, representatives, root_stabiliser, targets, elements, slots, character,
    shift, mask, dimension, site_i, site_j, offset, amplitudes,
    diagonal_i, diagonal_j, diagonal_offset, diagonals,
):  # fmt: skip
    for r in range(representatives.shape[0]):
        column = slots[r]
        if column < 0:
            continue
        c = representatives[r]
        H[column, column] += _diagonal(
            c, shift, mask, dimension, diagonal_i, diagonal_j, diagonal_offset, diagonals
        )
        for m in range(targets.shape[1]):
            t = targets[r, m]
            if t < 0 or slots[t] < column:
                continue
            z = _amplitude(c, m, shift, mask, dimension, site_i, site_j, offset, amplitudes)
            z = z * np.conj(character[elements[r, m]]) * (root_stabiliser[t] / root_stabiliser[r])
            H[slots[t], column] += z


@dataclass(frozen=True, eq=False)
class RealBasis:
    """For each orbit up to two real basis vectors: columns ``slots`` (R, 2), −1 for none, and
    the orbit state's ``weights`` (R, 2) in them."""

    slots: NDArray[np.int64]
    weights: NDArray[np.complex128]


def real_basis(
    allowed: NDArray[np.bool_], images: Links | None, character: NDArray[np.complex128]
) -> RealBasis:
    """The Θ-invariant basis of a block; ``images`` None means P is the identity, χ real."""
    count = len(allowed)
    slots = np.full((count, 2), -1, dtype=np.int64)
    weights = np.zeros((count, 2), dtype=np.complex128)
    own = np.where(allowed, np.cumsum(allowed) - 1, -1)
    slots[:, 0] = own
    weights[:, 0] = 1.0
    if images is None:
        return RealBasis(slots, weights)
    partner = images.targets.astype(np.int64)
    # P r = h r′ with h the inverse of the element that carries P r to r′.
    phase = np.conj(character[images.elements])
    alone = partner == np.arange(count)
    weights[alone, 0] = np.sqrt(phase[alone])
    first = np.flatnonzero(allowed & (partner > np.arange(count)))
    second = partner[first]
    root = np.sqrt(0.5)
    slots[first, 1] = own[second]
    weights[first, 0] = root
    weights[first, 1] = 1j * root
    slots[second, 0] = own[first]
    slots[second, 1] = own[second]
    weights[second, 0] = root * phase[first]
    weights[second, 1] = -1j * root * phase[first]
    return RealBasis(slots, weights)


def dense_block(
    encoding: Encoding,
    orbits: Orbits,
    links: Links,
    moves: MoveTables,
    amplitudes: NDArray[np.complex128],
    diagonals: NDArray[np.float64],
    phases: Ints,
    modulus: int,
    images: Links | None,
    real: bool,
    out: NDArray[np.float64] | NDArray[np.complex128],
) -> None:
    """Fill the lower triangle of one block into ``out`` (n, n), Fortran order, zeroed here.

    ``amplitudes``, ``diagonals``: one row of MoveTables.combined. ``phases`` (G,) exponents of
    the character modulo ``modulus``. Cost: one visit per representative and move.
    """
    allowed = orbits.allowed(phases)
    character = np.exp(2j * np.pi * phases / modulus)
    root_stabiliser = np.sqrt(orbits.stabiliser.astype(np.float64))
    out[...] = 0
    tail = (
        encoding.shift, encoding.mask, encoding.dimension,
        moves.site_i, moves.site_j, moves.offset, amplitudes,
        moves.diagonal_i, moves.diagonal_j, moves.diagonal_offset, diagonals,
    )  # fmt: skip
    head = (out, orbits.representatives, root_stabiliser, links.targets, links.elements)
    if real:
        basis = real_basis(allowed, images, character)
        _fill_real(*head, basis.slots, basis.weights, character, *tail)
    else:
        slots = np.where(allowed, np.cumsum(allowed) - 1, -1)
        _fill_complex(*head, slots, character, *tail)
