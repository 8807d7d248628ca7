"""Slow, obvious twins of everything the package computes, from textbook definitions.

Nothing here imports the package. Operators are Kronecker products, spectra come from a dense
eigenvalue routine, canonical averages are plain sums over all states. Energies, temperatures
and Zeeman energies share one unit with k_B = 1. Dimensions of a few thousand at most.
"""

from __future__ import annotations

from dataclasses import dataclass

import mpmath
import numpy as np
from scipy import sparse

ISOTROPIC = np.eye(3)
XY = np.diag([1.0, 1.0, 0.0])
ISING = np.diag([0.0, 0.0, 1.0])


def antisymmetric(vector):
    """The 3x3 matrix A with S_i^T A S_j = d.(S_i x S_j)."""
    x, y, z = vector
    return np.array([[0.0, z, -y], [-z, 0.0, x], [y, -x, 0.0]])


def axial(spin):
    """The 3x3 matrix D with S^T D S = Sz^2 - S(S+1)/3 for one spin.

    S.S = S(S+1), so the constant is a third of the unit matrix.
    """
    assert spin > 0
    return np.diag([-1.0, -1.0, 2.0]) / 3


RHOMBIC = np.diag([1.0, -1.0, 0.0])


def spin_matrices(spin):
    """Sx, Sy, Sz of one spin in the basis m = s, s-1, ..., -s (any quantum-mechanics textbook):
    <m+1|S+|m> = sqrt(s(s+1) - m(m+1))."""
    m = np.arange(spin, -spin - 0.5, -1.0)
    raising = np.diag(np.sqrt(spin * (spin + 1) - m[1:] * (m[1:] + 1)), k=1)
    lowering = raising.T
    return (raising + lowering) / 2, (raising - lowering) / 2j, np.diag(m)


def kron_all(spins, local):
    """The product operator with matrix ``local[i]`` on site i and the identity elsewhere."""
    result = sparse.identity(1, format="csr")
    for site, spin in enumerate(spins):
        dimension = round(2 * spin) + 1
        factor = local.get(site, np.eye(dimension))
        result = sparse.kron(result, sparse.csr_matrix(factor), format="csr")
    return result


def hamiltonian(spins, bonds=(), ions=(), field=None, g=None):
    """Dense H; see ``sparse_hamiltonian``."""
    return sparse_hamiltonian(spins, bonds, ions, field, g).toarray()


def sparse_hamiltonian(spins, bonds=(), ions=(), field=None, g=None):
    """H = sum S_i^T A S_j + sum S_i^T D S_i - sum_i b^T g_i S_i.

    bonds: (i, j, A); ions: (i, D); field: the vector mu_B B in energy units; g: one number or
    3x3 matrix per site (1 if left out).
    """
    dimension = int(np.prod([round(2 * s) + 1 for s in spins]))
    total = sparse.csr_matrix((dimension, dimension), dtype=complex)
    for i, j, matrix in bonds:
        left, right = spin_matrices(spins[i]), spin_matrices(spins[j])
        for a in range(3):
            for b in range(3):
                if matrix[a][b] != 0:
                    total = total + matrix[a][b] * kron_all(spins, {i: left[a], j: right[b]})
    for i, matrix in ions:
        own = spin_matrices(spins[i])
        for a in range(3):
            for b in range(3):
                if matrix[a][b] != 0:
                    total = total + matrix[a][b] * kron_all(spins, {i: own[a] @ own[b]})
    if field is not None:
        for i in range(len(spins)):
            own = spin_matrices(spins[i])
            tensor = np.eye(3) if g is None else np.asarray(g[i]) * np.eye(3)
            if g is not None and np.ndim(g[i]) == 2:
                tensor = np.asarray(g[i])
            vector = np.asarray(field) @ tensor
            for a in range(3):
                if vector[a] != 0:
                    total = total - vector[a] * kron_all(spins, {i: own[a]})
    return total


def total_spin_operators(spins):
    """Dense total Sx, Sy, Sz."""
    sums = []
    for a in range(3):
        sums.append(sum(kron_all(spins, {i: spin_matrices(s)[a]}) for i, s in enumerate(spins)))
    return [s.toarray() for s in sums]


def spectrum(matrix):
    """All eigenvalues, ascending."""
    if np.abs(matrix.imag).max() == 0:
        matrix = matrix.real
    return np.linalg.eigvalsh(matrix)


def magnetic_numbers(spins):
    """Sz of each product state, in the order of the Kronecker basis."""
    total = np.zeros(1)
    for spin in spins:
        m = np.arange(spin, -spin - 0.5, -1.0)
        total = (total[:, None] + m[None, :]).ravel()
    return total


def levels_by_magnetic_number(spins, matrix):
    """{M: ascending energies}, M of both signs; refuses an H that does not conserve Sz."""
    m = magnetic_numbers(spins)
    crossing = np.abs(matrix) * (np.abs(m[:, None] - m[None, :]) > 0.25)
    if crossing.max() > 1e-12 * max(1.0, np.abs(matrix).max()):
        raise ValueError("this Hamiltonian does not conserve Sz")
    found = {}
    for value in np.unique(m):
        states = np.flatnonzero(m == value)
        found[float(value)] = spectrum(matrix[np.ix_(states, states)])
    return found


def levels_by_total_spin(spins, matrix):
    """{S: ascending energies of the multiplets}, each multiplet once.

    In the states of M = S, those of total spin S are the eigenvectors of S^2 at S(S+1);
    H is diagonalised among them. It must commute with all of Sx, Sy, Sz (with S^2 alone is not
    enough: the XY dimer does that, and its triplet is split).
    """
    sx, sy, sz = total_spin_operators(spins)
    square = (sx @ sx + sy @ sy + sz @ sz).real
    for operator in (sx, sz):
        crossing = np.abs(matrix @ operator - operator @ matrix).max()
        if crossing > 1e-9 * max(1.0, np.abs(matrix).max()):
            raise ValueError("this Hamiltonian does not conserve the total spin")
    m = magnetic_numbers(spins)
    found = {}
    for value in np.unique(np.abs(m)):
        states = np.flatnonzero(m == value)
        numbers, vectors = np.linalg.eigh(square[np.ix_(states, states)])
        chosen = vectors[:, np.abs(numbers - value * (value + 1)) < 0.1]
        if chosen.shape[1]:
            block = matrix[np.ix_(states, states)]
            found[float(value)] = spectrum(chosen.conj().T @ block @ chosen)
    return found


@dataclass
class Averages:
    """Canonical averages of one cluster at one temperature and one field."""

    internal_energy: float
    free_energy: float
    entropy: float
    specific_heat: float
    moment: float
    moment_variance: float
    log_partition: float


def canonical(energy, magnetic_number, temperature, field=0.0, weight=None, exact=False):
    """Averages over states of energy E - field*M, each counted ``weight`` times.

    Sums are in extended precision, or with 50 digits of mpmath where ``exact``; variances are
    centred sums of positive terms, so that nothing cancels.
    """
    energy = np.asarray(energy)
    m = np.zeros(len(energy)) if magnetic_number is None else np.asarray(magnetic_number)
    n = np.ones(len(energy)) if weight is None else np.asarray(weight)
    if exact:
        return _canonical_mpmath(energy, m, n, temperature, field)
    t = np.longdouble(temperature)
    levels = energy.astype(np.longdouble) - np.longdouble(field) * m
    lowest = levels.min()
    boltzmann = n * np.exp(-(levels - lowest) / t)
    z = boltzmann.sum()
    p = boltzmann / z
    excess = (p * (levels - lowest)).sum()
    mean_m = (p * m).sum()
    ground = int(np.argmin(levels))
    # ln z = ln n_0 + ln(1 + rest/n_0), so that a frozen cluster's tiny entropy is not lost.
    log_z = np.log(n[ground]) + np.log1p(np.delete(boltzmann, ground).sum() / n[ground])
    return Averages(
        internal_energy=float(lowest + excess),
        free_energy=float(lowest - t * log_z),
        entropy=float(log_z + excess / t),
        specific_heat=float((p * (levels - lowest - excess) ** 2).sum() / t**2),
        moment=float(mean_m),
        moment_variance=float((p * (m - mean_m) ** 2).sum()),
        log_partition=float(log_z - lowest / t),
    )


def _canonical_mpmath(energy, m, n, temperature, field):
    with mpmath.workdps(50):
        t = mpmath.mpf(float(temperature))
        b = mpmath.mpf(float(field))
        number = [mpmath.mpf(float(x)) for x in m]
        levels = [mpmath.mpf(float(e)) - b * x for e, x in zip(energy, number, strict=True)]
        lowest = min(levels)
        boltzmann = [
            mpmath.mpf(float(w)) * mpmath.exp(-(e - lowest) / t)
            for e, w in zip(levels, n, strict=True)
        ]
        z = mpmath.fsum(boltzmann)
        p = [w / z for w in boltzmann]
        mean_e = mpmath.fdot(p, levels)
        mean_m = mpmath.fdot(p, number)
        var_e = mpmath.fsum(w * (e - mean_e) ** 2 for w, e in zip(p, levels, strict=True))
        var_m = mpmath.fsum(w * (x - mean_m) ** 2 for w, x in zip(p, number, strict=True))
        free = lowest - t * mpmath.log(z)
        return Averages(
            internal_energy=float(mean_e),
            free_energy=float(free),
            entropy=float((mean_e - free) / t),
            specific_heat=float(var_e / t**2),
            moment=float(mean_m),
            moment_variance=float(var_m),
            log_partition=float(mpmath.log(z) - lowest / t),
        )


def canonical_in_field(spins, bonds, ions, temperature, field):
    """The same averages from one diagonalisation of H - field*Sz with eigenvectors: nothing is
    assumed about the field's effect, except that M^2 commutes with H (for the variance)."""
    matrix = hamiltonian(spins, bonds, ions, field=(0.0, 0.0, field))
    energy, vectors = np.linalg.eigh(matrix)
    m = magnetic_numbers(spins)
    probability = np.abs(vectors) ** 2
    first, second = m @ probability, (m * m) @ probability
    p = np.exp(-(energy - energy[0]) / temperature)
    z = p.sum()
    p /= z
    mean_e = p @ energy
    return Averages(
        internal_energy=float(mean_e),
        free_energy=float(energy[0] - temperature * np.log(z)),
        entropy=float((mean_e - energy[0]) / temperature + np.log(z)),
        specific_heat=float(p @ (energy - mean_e) ** 2 / temperature**2),
        moment=float(p @ first),
        moment_variance=float(p @ second - (p @ first) ** 2),
        log_partition=float(np.log(z) - energy[0] / temperature),
    )


def power_traces(matrix, center, scale, order):
    """Tr ((H - center)/scale)^k for k = 0 ... order, by multiplying dense matrices."""
    shifted = (matrix - center * np.eye(len(matrix))) / scale
    power, traces = np.eye(len(matrix), dtype=complex), []
    for _ in range(order + 1):
        traces.append(np.trace(power).real)
        power = power @ shifted
    return np.array(traces)
