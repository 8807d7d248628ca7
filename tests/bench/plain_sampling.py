"""The plain sampled script to compare with: finite-temperature Lanczos without refinements.

H = J Σ S_i·S_j on a spin-½ ring, one scipy CSR matrix for each M ≥ 0, one real random vector at a
time, 100 Lanczos steps, weights dim·|⟨r|ψ⟩|² (Jaklič and Prelovšek 1994). No symmetry but M.
"""

from __future__ import annotations

import numpy as np
import scipy.sparse as sp
from scipy.linalg import eigh_tridiagonal

from tests.bench.plain import basis


def blocks(sites: int) -> list[tuple[float, sp.csr_matrix]]:
    """(M, matrix) for every M ≥ 0."""
    found = []
    for up in range((sites + 1) // 2, sites + 1):
        states = basis(sites, up)
        size = len(states)
        diagonal = np.zeros(size)
        rows, columns = [], []
        for i in range(sites):
            j = (i + 1) % sites
            differ = ((states >> i) ^ (states >> j)) & 1 == 1
            diagonal += np.where(differ, -0.25, 0.25)
            rows.append(np.flatnonzero(differ))
            columns.append(np.searchsorted(states, states[differ] ^ ((1 << i) | (1 << j))))
        row, column = np.concatenate(rows), np.concatenate(columns)
        off = sp.csr_matrix((np.full(len(row), 0.5), (row, column)), shape=(size, size))
        found.append((up - sites / 2, (off + sp.diags(diagonal)).tocsr()))
    return found


def sample(
    matrices: list[tuple[float, sp.csr_matrix]], rng: np.random.Generator, steps: int = 100
) -> list[tuple[float, np.ndarray, np.ndarray]]:
    """One vector per block: (M, Ritz energies, weights that count both signs of M)."""
    levels = []
    for m, matrix in matrices:
        size = matrix.shape[0]
        v = rng.standard_normal(size)
        v /= np.linalg.norm(v)
        before = np.zeros(size)
        alpha, beta = [], [0.0]
        for _ in range(min(steps, size)):
            w = matrix @ v - beta[-1] * before
            alpha.append(float(w @ v))
            w -= alpha[-1] * v
            beta.append(float(np.linalg.norm(w)))
            if beta[-1] < 1e-10:
                break
            before, v = v, w / beta[-1]
        energy, vectors = eigh_tridiagonal(np.array(alpha), np.array(beta[1 : len(alpha)]))
        levels.append((m, energy, size * vectors[0] ** 2 * (2 if m > 0 else 1)))
    return levels


def curves(
    levels: list[tuple[float, np.ndarray, np.ndarray]], temperature: np.ndarray
) -> tuple[np.ndarray, np.ndarray]:
    """Specific heat and T·χ of the whole ring."""
    energy = np.concatenate([e for _, e, _ in levels])
    weight = np.concatenate([w for _, _, w in levels])
    square = np.concatenate([np.full(len(e), m * m) for m, e, _ in levels])
    shifted = energy - energy.min()
    boltzmann = weight * np.exp(-shifted / temperature[:, None])
    z = boltzmann.sum(1)
    mean = boltzmann @ shifted / z
    heat = (boltzmann @ shifted**2 / z - mean**2) / temperature**2
    return heat, boltzmann @ square / z
