"""The slow twin of moments in any direction: dense matrices, Kubo's formula pair by pair.

Nothing here imports the package. k_B = mu_B = 1.
"""

from __future__ import annotations

import numpy as np

from tests import naive


def moments(spins, g):
    """Dense m_a = sum_i sum_b g_i[a, b] S_i,b for a = x, y, z; g: one 3x3 matrix per site."""
    found = []
    for a in range(3):
        total = 0
        for i, spin in enumerate(spins):
            own = naive.spin_matrices(spin)
            for b in range(3):
                total = total + g[i][a][b] * naive.kron_all(spins, {i: own[b]})
        found.append(total.toarray())
    return found


def kubo_factor(x, temperature):
    """(1 - exp(-x))/x times 1/T, x = (E_k - E_n)/T, by its series for small x."""
    small = np.abs(x) < 1e-3
    safe = np.where(small, 1.0, x)
    series = 1 - x / 2 + x**2 / 6 - x**3 / 24 + x**4 / 120
    return np.where(small, series, -np.expm1(-safe) / safe) / temperature


def response(spins, bonds, ions, g, temperature, field):
    """(M, chi, C, S) at one temperature and the field vector mu_B B: M (3,), chi (3, 3)."""
    return responses(spins, bonds, ions, g, [temperature], field)[0]


def responses(spins, bonds, ions, g, temperatures, field):
    """The same at several temperatures, from one diagonalisation."""
    matrix = naive.hamiltonian(spins, bonds, ions, field=field, g=g)
    return canonical(matrix, moments(spins, g), temperatures)


def canonical(matrix, operators, temperatures):
    """The same for any H and its dense moments."""
    energy, vectors = np.linalg.eigh(matrix)
    x = [vectors.conj().T @ m @ vectors for m in operators]
    difference = energy[None, :] - energy[:, None]
    upper = np.triu(np.ones_like(difference), 1)
    found = []
    for t in temperatures:
        p = np.exp(-(energy - energy[0]) / t)
        z = p.sum()
        p = p / z
        mean = np.array([(p * np.diag(m).real).sum() for m in x])
        # p_n (1 - exp(-gap))/gap is symmetric in n and k; take the one with the larger p.
        factor = kubo_factor(np.maximum(difference / t, 0), t)
        weight = p[:, None] * factor * (2 * upper + np.eye(len(p)))
        chi = np.array([[(weight * (a * b.T).real).sum() for b in x] for a in x])
        chi = chi - np.outer(mean, mean) / t
        mean_energy = p @ energy
        heat = p @ (energy - mean_energy) ** 2 / t**2
        entropy = np.log(z) + (mean_energy - energy[0]) / t
        found.append((mean, chi, heat, entropy))
    return found
