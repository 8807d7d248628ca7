"""Lanczos recursions for eight columns at once: H·X, its three terms, and overlaps.

A column is one (character, vector) pair of one M; a tile is eight of them, so one pass over
the links serves eight characters or vectors. Rows are gathered, never scattered: ranges of
rows can be given to threads, and no sum depends on how many there are. Row r of a tile holds
eight real parts, then eight imaginary ones: two cache lines.

With s_r elements fixing orbit r, a tile holds Z = √s·X of the orbit states' amplitudes X, so
that (H Z)_r = d_r Z_r + Σ a* χ(g) Z_t needs no roots; inner products then carry 1/s_r.

Lanczos 1950; without re-orthogonalisation the weights of the Ritz values stay right, a
converged one only turns up several times (Paige 1976; Greenbaum 1989).
"""

from __future__ import annotations

import functools
import itertools
from collections.abc import Callable, Sequence
from concurrent.futures import ThreadPoolExecutor
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from thermo.hilbert.jit import fast_kernel, prefetch
from thermo.hilbert.sparse import SparseLinks

# Columns of a tile. The kernel below is written out for it: eight lanes stay in registers.
WIDTH = 8
# Rows whose contributions to a sum are added up before they meet the others'.
CHUNK = 1024
# Links between asking for a row and using it: a row beyond the cache takes as long to come.
AHEAD = 16
# A residual vector this much shorter than H's scale is rounding: the Krylov space is complete.
EXHAUSTED = 1e-13

Vector = NDArray[np.float64]
Tile = NDArray[np.float64]

# Legend: r row, t target row, g phase code, p link, k column; V current, U previous and next.


# fmt: off
@fast_kernel
def _multiply(start, target, code, diagonal, F, scale, back, V, U, lo, hi):
    """U ← scale·(H V) − back·U on rows lo:hi."""
    m0, m1, m2, m3 = scale[0], scale[1], scale[2], scale[3]
    m4, m5, m6, m7 = scale[4], scale[5], scale[6], scale[7]
    n0, n1, n2, n3 = back[0], back[1], back[2], back[3]
    n4, n5, n6, n7 = back[4], back[5], back[6], back[7]
    last = target.shape[0] - 1
    for row in range(lo, hi):
        # Unsigned indices need no test for counting from the end.
        r = np.uintp(row)
        d = diagonal[r]
        x0, y0 = d * V[r, 0], d * V[r, 8]
        x1, y1 = d * V[r, 1], d * V[r, 9]
        x2, y2 = d * V[r, 2], d * V[r, 10]
        x3, y3 = d * V[r, 3], d * V[r, 11]
        x4, y4 = d * V[r, 4], d * V[r, 12]
        x5, y5 = d * V[r, 5], d * V[r, 13]
        x6, y6 = d * V[r, 6], d * V[r, 14]
        x7, y7 = d * V[r, 7], d * V[r, 15]
        for p in range(start[row], start[row + 1]):
            ahead = np.uintp(target[min(p + AHEAD, last)])
            prefetch(V, ahead, 0)
            prefetch(V, ahead, WIDTH)
            t, g = np.uintp(target[p]), np.uintp(code[p])
            c0, s0, a0, b0 = F[g, 0], F[g, 8], V[t, 0], V[t, 8]
            c1, s1, a1, b1 = F[g, 1], F[g, 9], V[t, 1], V[t, 9]
            c2, s2, a2, b2 = F[g, 2], F[g, 10], V[t, 2], V[t, 10]
            c3, s3, a3, b3 = F[g, 3], F[g, 11], V[t, 3], V[t, 11]
            c4, s4, a4, b4 = F[g, 4], F[g, 12], V[t, 4], V[t, 12]
            c5, s5, a5, b5 = F[g, 5], F[g, 13], V[t, 5], V[t, 13]
            c6, s6, a6, b6 = F[g, 6], F[g, 14], V[t, 6], V[t, 14]
            c7, s7, a7, b7 = F[g, 7], F[g, 15], V[t, 7], V[t, 15]
            x0 += c0 * a0 - s0 * b0
            x1 += c1 * a1 - s1 * b1
            x2 += c2 * a2 - s2 * b2
            x3 += c3 * a3 - s3 * b3
            x4 += c4 * a4 - s4 * b4
            x5 += c5 * a5 - s5 * b5
            x6 += c6 * a6 - s6 * b6
            x7 += c7 * a7 - s7 * b7
            y0 += c0 * b0 + s0 * a0
            y1 += c1 * b1 + s1 * a1
            y2 += c2 * b2 + s2 * a2
            y3 += c3 * b3 + s3 * a3
            y4 += c4 * b4 + s4 * a4
            y5 += c5 * b5 + s5 * a5
            y6 += c6 * b6 + s6 * a6
            y7 += c7 * b7 + s7 * a7
        x0 = m0 * x0 - n0 * U[r, 0]
        x1 = m1 * x1 - n1 * U[r, 1]
        x2 = m2 * x2 - n2 * U[r, 2]
        x3 = m3 * x3 - n3 * U[r, 3]
        x4 = m4 * x4 - n4 * U[r, 4]
        x5 = m5 * x5 - n5 * U[r, 5]
        x6 = m6 * x6 - n6 * U[r, 6]
        x7 = m7 * x7 - n7 * U[r, 7]
        y0 = m0 * y0 - n0 * U[r, 8]
        y1 = m1 * y1 - n1 * U[r, 9]
        y2 = m2 * y2 - n2 * U[r, 10]
        y3 = m3 * y3 - n3 * U[r, 11]
        y4 = m4 * y4 - n4 * U[r, 12]
        y5 = m5 * y5 - n5 * U[r, 13]
        y6 = m6 * y6 - n6 * U[r, 14]
        y7 = m7 * y7 - n7 * U[r, 15]
        U[r, 0] = x0
        U[r, 1] = x1
        U[r, 2] = x2
        U[r, 3] = x3
        U[r, 4] = x4
        U[r, 5] = x5
        U[r, 6] = x6
        U[r, 7] = x7
        U[r, 8] = y0
        U[r, 9] = y1
        U[r, 10] = y2
        U[r, 11] = y3
        U[r, 12] = y4
        U[r, 13] = y5
        U[r, 14] = y6
        U[r, 15] = y7


@fast_kernel
def _alignment(share, V, U, lo, hi, out):
    """Re⟨V, U⟩ on rows lo:hi (one chunk at most) into ``out`` (8,)."""
    q0 = q1 = q2 = q3 = q4 = q5 = q6 = q7 = 0.0
    for row in range(lo, hi):
        r = np.uintp(row)
        w = share[r]
        a0, b0, x0, y0 = V[r, 0], V[r, 8], U[r, 0], U[r, 8]
        a1, b1, x1, y1 = V[r, 1], V[r, 9], U[r, 1], U[r, 9]
        a2, b2, x2, y2 = V[r, 2], V[r, 10], U[r, 2], U[r, 10]
        a3, b3, x3, y3 = V[r, 3], V[r, 11], U[r, 3], U[r, 11]
        a4, b4, x4, y4 = V[r, 4], V[r, 12], U[r, 4], U[r, 12]
        a5, b5, x5, y5 = V[r, 5], V[r, 13], U[r, 5], U[r, 13]
        a6, b6, x6, y6 = V[r, 6], V[r, 14], U[r, 6], U[r, 14]
        a7, b7, x7, y7 = V[r, 7], V[r, 15], U[r, 7], U[r, 15]
        q0 += w * (a0 * x0 + b0 * y0)
        q1 += w * (a1 * x1 + b1 * y1)
        q2 += w * (a2 * x2 + b2 * y2)
        q3 += w * (a3 * x3 + b3 * y3)
        q4 += w * (a4 * x4 + b4 * y4)
        q5 += w * (a5 * x5 + b5 * y5)
        q6 += w * (a6 * x6 + b6 * y6)
        q7 += w * (a7 * x7 + b7 * y7)
    out[0] = q0
    out[1] = q1
    out[2] = q2
    out[3] = q3
    out[4] = q4
    out[5] = q5
    out[6] = q6
    out[7] = q7


@fast_kernel
def _forbid(rows, mask, U, lo, hi):
    """Zero the columns in which an orbit carries no state: only rounding can be there."""
    for i in range(rows.shape[0]):
        if lo <= rows[i] < hi:
            for k in range(WIDTH):
                U[rows[i], k] *= mask[i, k]
                U[rows[i], k + WIDTH] *= mask[i, k]


@fast_kernel
def _orthogonalise(share, step, V, U, lo, hi, square):
    """U ← U − step·V on rows lo:hi (one chunk at most), and ‖U‖² into ``square`` (8,)."""
    m0, m1, m2, m3 = step[0], step[1], step[2], step[3]
    m4, m5, m6, m7 = step[4], step[5], step[6], step[7]
    q0 = q1 = q2 = q3 = q4 = q5 = q6 = q7 = 0.0
    for row in range(lo, hi):
        r = np.uintp(row)
        w = share[r]
        x0, y0 = U[r, 0] - m0 * V[r, 0], U[r, 8] - m0 * V[r, 8]
        x1, y1 = U[r, 1] - m1 * V[r, 1], U[r, 9] - m1 * V[r, 9]
        x2, y2 = U[r, 2] - m2 * V[r, 2], U[r, 10] - m2 * V[r, 10]
        x3, y3 = U[r, 3] - m3 * V[r, 3], U[r, 11] - m3 * V[r, 11]
        x4, y4 = U[r, 4] - m4 * V[r, 4], U[r, 12] - m4 * V[r, 12]
        x5, y5 = U[r, 5] - m5 * V[r, 5], U[r, 13] - m5 * V[r, 13]
        x6, y6 = U[r, 6] - m6 * V[r, 6], U[r, 14] - m6 * V[r, 14]
        x7, y7 = U[r, 7] - m7 * V[r, 7], U[r, 15] - m7 * V[r, 15]
        U[r, 0] = x0
        U[r, 1] = x1
        U[r, 2] = x2
        U[r, 3] = x3
        U[r, 4] = x4
        U[r, 5] = x5
        U[r, 6] = x6
        U[r, 7] = x7
        U[r, 8] = y0
        U[r, 9] = y1
        U[r, 10] = y2
        U[r, 11] = y3
        U[r, 12] = y4
        U[r, 13] = y5
        U[r, 14] = y6
        U[r, 15] = y7
        q0 += w * (x0 * x0 + y0 * y0)
        q1 += w * (x1 * x1 + y1 * y1)
        q2 += w * (x2 * x2 + y2 * y2)
        q3 += w * (x3 * x3 + y3 * y3)
        q4 += w * (x4 * x4 + y4 * y4)
        q5 += w * (x5 * x5 + y5 * y5)
        q6 += w * (x6 * x6 + y6 * y6)
        q7 += w * (x7 * x7 + y7 * y7)
    square[0] = q0
    square[1] = q1
    square[2] = q2
    square[3] = q3
    square[4] = q4
    square[5] = q5
    square[6] = q6
    square[7] = q7


@fast_kernel
def _overlaps(share, P, U, lo, hi, dots):
    """⟨P, U⟩ on rows lo:hi (one chunk at most): real parts, then imaginary, into ``dots``."""
    q0 = q1 = q2 = q3 = q4 = q5 = q6 = q7 = 0.0
    p0 = p1 = p2 = p3 = p4 = p5 = p6 = p7 = 0.0
    for row in range(lo, hi):
        r = np.uintp(row)
        w = share[r]
        a0, b0, x0, y0 = P[r, 0], P[r, 8], U[r, 0], U[r, 8]
        a1, b1, x1, y1 = P[r, 1], P[r, 9], U[r, 1], U[r, 9]
        a2, b2, x2, y2 = P[r, 2], P[r, 10], U[r, 2], U[r, 10]
        a3, b3, x3, y3 = P[r, 3], P[r, 11], U[r, 3], U[r, 11]
        a4, b4, x4, y4 = P[r, 4], P[r, 12], U[r, 4], U[r, 12]
        a5, b5, x5, y5 = P[r, 5], P[r, 13], U[r, 5], U[r, 13]
        a6, b6, x6, y6 = P[r, 6], P[r, 14], U[r, 6], U[r, 14]
        a7, b7, x7, y7 = P[r, 7], P[r, 15], U[r, 7], U[r, 15]
        q0 += w * (a0 * x0 + b0 * y0)
        q1 += w * (a1 * x1 + b1 * y1)
        q2 += w * (a2 * x2 + b2 * y2)
        q3 += w * (a3 * x3 + b3 * y3)
        q4 += w * (a4 * x4 + b4 * y4)
        q5 += w * (a5 * x5 + b5 * y5)
        q6 += w * (a6 * x6 + b6 * y6)
        q7 += w * (a7 * x7 + b7 * y7)
        p0 += w * (a0 * y0 - b0 * x0)
        p1 += w * (a1 * y1 - b1 * x1)
        p2 += w * (a2 * y2 - b2 * x2)
        p3 += w * (a3 * y3 - b3 * x3)
        p4 += w * (a4 * y4 - b4 * x4)
        p5 += w * (a5 * y5 - b5 * x5)
        p6 += w * (a6 * y6 - b6 * x6)
        p7 += w * (a7 * y7 - b7 * x7)
    dots[0] = q0
    dots[1] = q1
    dots[2] = q2
    dots[3] = q3
    dots[4] = q4
    dots[5] = q5
    dots[6] = q6
    dots[7] = q7
    dots[8] = p0
    dots[9] = p1
    dots[10] = p2
    dots[11] = p3
    dots[12] = p4
    dots[13] = p5
    dots[14] = p6
    dots[15] = p7
# fmt: on


@fast_kernel
def _apply(start, target, code, diagonal, share, F, scale, back, V, U, overlap, lo, hi):
    """U ← scale·(H V) − back·U on rows lo:hi, and Re⟨V, U⟩ of each chunk."""
    for chunk in range(lo // CHUNK, (hi + CHUNK - 1) // CHUNK):
        first, last = max(lo, chunk * CHUNK), min(hi, (chunk + 1) * CHUNK)
        _multiply(start, target, code, diagonal, F, scale, back, V, U, first, last)
        _alignment(share, V, U, first, last, overlap[chunk])


@fast_kernel
def _advance(share, step, V, U, partners, square, products, lo, hi):
    """The next vector and its overlaps, chunk by chunk, while a chunk is in the cache."""
    for chunk in range(lo // CHUNK, (hi + CHUNK - 1) // CHUNK):
        first, last = max(lo, chunk * CHUNK), min(hi, (chunk + 1) * CHUNK)
        _orthogonalise(share, step, V, U, first, last, square[chunk])
        for f in range(partners.shape[0]):
            _overlaps(share, partners[f], U, first, last, products[chunk, f])


@dataclass(frozen=True, eq=False)
class Structure:
    """What the tiles of one M share: links, H's diagonal (R,), stabilisers' orders (R,)."""

    links: SparseLinks
    diagonal: Vector
    stabiliser: NDArray[np.int64]

    @property
    def rows(self) -> int:
        """Number of orbits R."""
        return len(self.diagonal)


def multiply(
    structure: Structure, phases: Tile, scale: Vector, back: Vector, V: Tile, U: Tile,
    lo: int, hi: int,
) -> None:  # fmt: skip
    """U ← scale·(H V) − back·U on rows lo:hi, column by column; ``scale``, ``back`` (8,)."""
    links = structure.links
    _multiply(
        links.start, links.target, links.code, structure.diagonal, phases, scale, back, V, U, lo, hi
    )


@dataclass(frozen=True, eq=False)
class Recursion:
    """Tridiagonal matrices of a tile: ``alpha`` (m, 8), ``beta`` (m, 8) with beta[j] coupling
    steps j and j+1, ``dots`` (m, partners, 8) the overlaps ⟨partner|v_j⟩, ``length`` (8,) how
    many steps each column took before its Krylov space was complete."""

    alpha: NDArray[np.float64]
    beta: NDArray[np.float64]
    dots: NDArray[np.complex128]
    length: NDArray[np.int64]


class Ranges:
    """Row ranges for a number of threads; results do not depend on that number."""

    def __init__(self, rows: int, workers: int) -> None:
        chunks = -(-rows // CHUNK)
        edges = np.linspace(0, chunks, max(1, min(workers, chunks)) + 1).round().astype(int) * CHUNK
        edges[-1] = rows
        self.ranges = [(int(a), int(b)) for a, b in itertools.pairwise(edges)]
        self.chunks = chunks
        self._pool = ThreadPoolExecutor(len(self.ranges) - 1) if len(self.ranges) > 1 else None

    def __call__(self, work: Callable[[int, int], Any]) -> None:
        """Run work(lo, hi) over all rows and wait."""
        waiting = []
        if self._pool is not None:
            waiting = [self._pool.submit(work, *r) for r in self.ranges[1:]]
        work(*self.ranges[0])
        for future in waiting:
            future.result()

    def close(self) -> None:
        """Let the threads go."""
        if self._pool is not None:
            self._pool.shutdown()


def phase_table(
    amplitudes: NDArray[np.complex128], characters: Sequence[NDArray[np.complex128]]
) -> Tile:
    """a*·χ(g) for every link code (kind·G + element) and column, shape (kinds·G, 16)."""
    order = len(characters[0])
    table = np.zeros((len(amplitudes) * order, 2 * WIDTH))
    for k, character in enumerate(characters):
        values = (np.conj(amplitudes)[:, None] * character[None, :]).ravel()
        table[:, k], table[:, k + WIDTH] = values.real, values.imag
    return table


def lanczos(
    structure: Structure,
    phases: Tile,
    allowed: NDArray[np.bool_],
    first: Tile,
    partners: NDArray[np.float64],
    steps: int,
    workers: int = 1,
) -> Recursion:
    """``steps`` Lanczos steps of every column of a tile.

    ``first`` (R, 16) holds the start vectors Z, normalised with 1/s, and is overwritten;
    ``allowed`` (S, 8) tells, for the S orbits with more than the identity fixing them, which
    columns have a state there; ``partners`` (F, R, 16) are vectors whose overlaps with every
    Lanczos vector are kept. Memory: ``first``, ``partners`` and one more tile. Cost: two
    complex multiply-adds per link, column and step.
    """
    links, rows = structure.links, structure.rows
    share = 1.0 / structure.stabiliser
    special = np.flatnonzero(structure.stabiliser > 1)
    mask = allowed.astype(np.float64)
    ranges = Ranges(rows, workers)
    alpha, beta = np.zeros((steps, WIDTH)), np.zeros((steps, WIDTH))
    dots = np.zeros((steps, len(partners), WIDTH), dtype=np.complex128)
    length = np.full(WIDTH, steps)
    current, other = first, np.zeros_like(first)
    overlap = np.zeros((ranges.chunks, WIDTH))
    square = np.zeros((ranges.chunks, WIDTH))
    products = np.zeros((ranges.chunks, len(partners), 2 * WIDTH))

    def orthogonalise(step: Vector) -> None:
        ranges(functools.partial(_advance, share, step, current, other, partners, square, products))

    def multiply(scale: Vector, back: Vector, lo: int, hi: int) -> None:
        _apply(
            links.start, links.target, links.code, structure.diagonal, share, phases,
            scale, back, current, other, overlap, lo, hi,
        )  # fmt: skip
        _forbid(special, mask, other, lo, hi)

    def kept(j: int, norm: Vector) -> None:
        total = products.sum(axis=0)
        scaled = np.divide(1.0, norm, out=np.zeros(WIDTH), where=norm > 0)
        dots[j] = (total[:, :WIDTH] + 1j * total[:, WIDTH:]) * scaled

    try:
        # The overlaps of the start vectors, by the same sums.
        current, other = other, current
        orthogonalise(np.zeros(WIDTH))
        norm = np.sqrt(square.sum(axis=0))
        kept(0, norm)
        current, other = other, current
        active = norm > 0
        length[~active] = 0
        before, size = np.ones(WIDTH), np.zeros(WIDTH)
        for j in range(steps):
            inverse = np.divide(1.0, norm, out=np.zeros(WIDTH), where=active)
            back = norm / before if j else np.zeros(WIDTH)
            overlap[...] = 0
            ranges(functools.partial(multiply, inverse, back * active))
            alpha[j] = overlap.sum(axis=0) * inverse
            orthogonalise(alpha[j] * inverse)
            before, norm = norm, np.sqrt(square.sum(axis=0))
            size = np.maximum(size, np.abs(alpha[j]) + norm)
            ended = active & (norm <= EXHAUSTED * size)
            length[ended] = j + 1
            active = active & ~ended
            before = np.where(active, before, 1.0)
            beta[j] = np.where(active, norm, 0.0)
            norm = beta[j]
            if not active.any():
                break
            if j + 1 < steps:
                kept(j + 1, norm)
            current, other = other, current
    finally:
        ranges.close()
    return Recursion(alpha, beta, dots, length)
