"""Pair and ion tensors as tables: a diagonal and the moves between configurations.

A move takes a configuration to one other: it adds δ_i and δ_j to two digits, with an
amplitude that depends on those two digits only. Amplitudes are linear in the channels
(couplings), so changing a coupling changes tables of a few numbers and nothing else.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from thermo.hilbert.encoding import Encoding, Ints

Tensors = NDArray[np.float64]


def spin_matrices(twice_spin: int) -> NDArray[np.complex128]:
    """Sˣ, Sʸ, Sᶻ of one spin, shape (3, d, d), in the basis m = −S … S."""
    s = twice_spin / 2
    m = np.arange(twice_spin + 1) - s
    raising = np.zeros((twice_spin + 1, twice_spin + 1))
    k = np.arange(twice_spin)
    raising[k + 1, k] = np.sqrt(s * (s + 1) - m[:-1] * (m[:-1] + 1))
    lowering = raising.T
    return np.array([(raising + lowering) / 2, (raising - lowering) / 2j, np.diag(m)])


@dataclass(frozen=True, eq=False)
class MoveTables:
    """Moves and diagonal of H for P channels, as flat arrays that kernels take.

    Per move: ``site_i``, ``site_j`` (equal for a single-site move), ``step_i``, ``step_j``,
    ``offset`` of its amplitudes. Per diagonal term: ``diagonal_i``, ``diagonal_j``,
    ``diagonal_offset``. Amplitude of digits (a, b): entry offset + a·d_j + b of row p of
    ``amplitudes`` (P, A) complex, or of ``diagonals`` (P, D) real; a single-site term has
    b = 0 and d_j = 1. ``constant`` (P,) is what every configuration has in common.
    """

    site_i: Ints
    site_j: Ints
    step_i: Ints
    step_j: Ints
    offset: Ints
    diagonal_i: Ints
    diagonal_j: Ints
    diagonal_offset: Ints
    amplitudes: NDArray[np.complex128]
    diagonals: NDArray[np.float64]

    def combined(
        self, values: NDArray[np.float64]
    ) -> tuple[NDArray[np.complex128], NDArray[np.float64]]:
        """Amplitudes and diagonals for one set of coupling values (P,)."""
        return values @ self.amplitudes, values @ self.diagonals


def _band(matrices: NDArray[np.complex128], step: int) -> NDArray[np.complex128]:
    """⟨a + step|S^x|a⟩ for all a, shape (3, d), zero where a + step is no state."""
    d = matrices.shape[1]
    a = np.arange(d)
    inside = (a + step >= 0) & (a + step < d)
    band: NDArray[np.complex128] = matrices[:, (a + step).clip(0, d - 1), a] * inside
    return band


def _steps(
    left: NDArray[np.complex128], right: NDArray[np.complex128], tensors: Tensors, modulus: int
) -> dict[tuple[int, int], NDArray[np.complex128]]:
    """Tables (P, d_i, d_j) of Sᵀ A S over (a, b) for every step that keeps M (or its class)."""
    tables = {}
    for step_i in (-1, 0, 1):
        for step_j in (-1, 0, 1):
            change = step_i + step_j
            # A forbidden step can only come from rounding; it would leave the sector.
            if change if modulus == 0 else change % modulus:
                continue
            table = np.einsum("pxy,xa,yb->pab", tensors, _band(left, step_i), _band(right, step_j))
            if np.any(table):
                tables[step_i, step_j] = table
    return tables


def move_tables(
    encoding: Encoding,
    pair: Mapping[tuple[int, int], Tensors],
    ion: Mapping[int, Tensors],
    n_channels: int,
    modulus: int,
) -> MoveTables:
    """Tables of Σ S_iᵀ A_ij S_j + Σ S_iᵀ D_i S_i; tensors have shape (n_channels, 3, 3).

    ``modulus`` tells what the terms conserve (0: M, 2: M modulo 2, 1: nothing).
    """
    moves: list[tuple[int, int, int, int, NDArray[np.complex128]]] = []
    diagonal: list[tuple[int, int, Tensors]] = []
    spins = [spin_matrices(int(d) - 1) for d in encoding.dimension]

    def collect(i: int, j: int, tables: dict[tuple[int, int], NDArray[np.complex128]]) -> None:
        for (step_i, step_j), table in tables.items():
            flat = table.reshape(len(table), -1)
            if step_i == 0 and step_j == 0:
                diagonal.append((i, j, flat.real))
            else:
                moves.append((i, j, step_i, step_j, flat))

    # Most pairs of a cluster are alike; each kind is worked out once.
    known: dict[tuple[bytes, int, int], dict[tuple[int, int], NDArray[np.complex128]]] = {}
    for (i, j), a in sorted(pair.items()):
        key = (a.tobytes(), int(encoding.dimension[i]), int(encoding.dimension[j]))
        if key not in known:
            known[key] = _steps(spins[i], spins[j], a, modulus)
        collect(i, j, known[key])
    for i, d in sorted(ion.items()):
        operator = np.einsum("pxy,xab,ybc->pac", d, spins[i], spins[i])
        tables = {}
        for step in range(-2, 3):
            if step if modulus == 0 else step % modulus:
                continue
            table = np.stack([_band(o[None], step) for o in operator])[:, 0, :, None]
            if np.any(table):
                tables[step, 0] = table
        collect(i, i, tables)

    def column(values: list[int]) -> Ints:
        return np.array(values, dtype=np.int64)

    def offsets(tables: Sequence[NDArray[Any]]) -> Ints:
        sizes = [t.shape[1] for t in tables]
        return np.concatenate([[0], np.cumsum(sizes)]).astype(np.int64)[: len(tables)]

    amplitudes = [m[4] for m in moves]
    diagonals = [d[2] for d in diagonal]
    empty = np.zeros((n_channels, 0))
    return MoveTables(
        column([m[0] for m in moves]),
        column([m[1] for m in moves]),
        column([m[2] for m in moves]),
        column([m[3] for m in moves]),
        offsets(amplitudes),
        column([d[0] for d in diagonal]),
        column([d[1] for d in diagonal]),
        offsets(diagonals),
        np.concatenate([empty.astype(np.complex128), *amplitudes], axis=1),
        np.concatenate([empty, *diagonals], axis=1),
    )
