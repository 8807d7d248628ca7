"""Slow twins of thermal correlations and structure factors. Nothing here imports the package."""

from __future__ import annotations

import numpy as np

from tests import naive


def correlations(spins, bonds, ions, temperatures, field=0.0):
    """<S_i^a S_j^a> for every axis and pair at each temperature, (nT, 3, N, N): dense operators
    traced with the density matrix of H - field*Sz, from its eigenvectors."""
    matrix = naive.hamiltonian(spins, bonds, ions, field=(0.0, 0.0, field))
    energy, vectors = np.linalg.eigh(matrix)
    p = np.exp(-(energy - energy[0]) / np.asarray(temperatures)[:, None])
    p /= p.sum(axis=1, keepdims=True)
    densities = [(vectors * weights) @ vectors.conj().T for weights in p]
    n = len(spins)
    found = np.empty((len(p), 3, n, n))
    for a in range(3):
        local = [naive.kron_all(spins, {i: naive.spin_matrices(s)[a]}) for i, s in enumerate(spins)]
        for i in range(n):
            for j in range(n):
                # Tr(rho X) = sum of the elementwise product of rho and X transposed.
                product = (local[i] @ local[j]).tocoo()
                for t, rho in enumerate(densities):
                    found[t, a, i, j] = np.sum(rho[product.col, product.row] * product.data).real
    return found


def structure_factor(positions, correlation, q):
    """(1/N) sum_ij exp(2 pi i q.(r_i - r_j)) <S_i.S_j>, by the double sum."""
    total = 0.0 + 0.0j
    for i, left in enumerate(positions):
        for j, right in enumerate(positions):
            phase = np.exp(2j * np.pi * np.dot(q, np.subtract(left, right)))
            total += phase * correlation[i][j]
    return total / len(positions)
