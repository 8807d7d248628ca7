"""Slow, obvious derivatives of canonical averages: matrix exponentials and the complex step.

Nothing here imports the package. Every average is an analytic function of the couplings, so its
derivative at real c is Im f(c + iε)/ε with ε so small that no difference is ever taken (Squire and
Trapp, SIAM Rev. 40, 110 (1998)); no eigenvector is used. Hermitian matrices A + iB are written as
the real [[A, -B], [B, A]], which has each eigenvalue twice, so that i means the step only.
"""

from __future__ import annotations

import numpy as np
from scipy.linalg import expm

from tests import naive

STEP = 1e-30
NAMES = ("energy", "entropy", "heat", "moment", "variance", "mixed")


def real_form(matrix):
    """The real symmetric matrix of twice the size."""
    A, B = np.real(matrix), np.imag(matrix)
    return np.block([[A, -B], [B, A]])


def averages(H, M, temperature):
    """U, S, C, <M>, <dM^2>, <dM dE> of H with the field's energy in it (k_B = 1), shape (6,).

    H may carry a complex step. S is too large by ln 2.
    """
    shift = float(np.linalg.eigvalsh(H.real)[0])
    A = H - shift * np.eye(len(H))
    rho = expm(-A / temperature)
    z = np.trace(rho)

    def mean(X):
        return np.sum(X.T * rho) / z

    u, m = mean(A), mean(M)
    return np.array(
        [
            u + shift,
            np.log(z) + u / temperature,
            (mean(A @ A) - u * u) / temperature**2,
            m,
            mean(M @ M) - m * m,
            mean(M @ A) - m * u,
        ]
    )


def parts(spins, bonds, ions, names):
    """{name: H_p in real form}; bonds are (i, j, name, A), ions (i, name, D)."""
    return {
        name: real_form(
            naive.hamiltonian(
                spins,
                [(i, j, A) for i, j, n, A in bonds if n == name],
                [(i, D) for i, n, D in ions if n == name],
            )
        )
        for name in names
    }


def slopes(by_name, couplings, spins, temperature, field):
    """Averages (6,), their derivatives {name: (6,)} by the couplings and (6,) by the field, for
    H = sum_p c_p H_p - field Sz."""
    M = real_form(np.diag(naive.magnetic_numbers(spins)))
    H = sum(couplings[name] * part for name, part in by_name.items()) - field * M

    def step(direction):
        return averages(H + 1j * STEP * direction, M, temperature).imag / STEP

    value = averages(H, M, temperature)
    value[1] -= np.log(2)
    return value, {name: step(part) for name, part in by_name.items()}, step(-M)
