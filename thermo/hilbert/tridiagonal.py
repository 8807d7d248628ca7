"""Eigenvalues of a tridiagonal matrix with a few rows of its eigenvectors, in O(m²).

Lanczos needs of each eigenvector its first and last component and its product with a few given
rows, not the m² numbers of all of them (Golub and Welsch, Math. Comp. 23, 221 (1969)). Implicit
QL steps with Wilkinson's shift (Dubrulle, Martin and Wilkinson, Numer. Math. 12, 377 (1968)).
"""

from __future__ import annotations

import math

import numpy as np
from numpy.typing import NDArray

from thermo.hilbert.jit import kernel

# Implicit QL takes about two steps per eigenvalue; sixty mean that the input is not finite.
_MOST_STEPS = 60


@kernel
def _implicit_ql(d, e, rows):
    """Diagonalise in place: ``d`` (m,) becomes the eigenvalues, ``rows`` (m, k) = Qᵀ·rows.

    ``e`` (m,), its last entry 0, couples neighbours; False where a value does not converge.
    """
    n = d.shape[0]
    for low in range(n):
        steps = 0
        while True:
            high = low
            while high < n - 1:
                scale = abs(d[high]) + abs(d[high + 1])
                if abs(e[high]) <= 2.3e-16 * scale:
                    break
                high += 1
            if high == low:
                break
            if steps == _MOST_STEPS:
                return False
            steps += 1
            g = (d[low + 1] - d[low]) / (2.0 * e[low])
            r = math.hypot(g, 1.0)
            g = d[high] - d[low] + e[low] / (g + math.copysign(r, g))
            sine, cosine, shift = 1.0, 1.0, 0.0
            split = False
            for i in range(high - 1, low - 1, -1):
                f, b = sine * e[i], cosine * e[i]
                r = math.hypot(f, g)
                e[i + 1] = r
                if r == 0.0:  # the matrix falls apart here
                    d[i + 1] -= shift
                    e[high] = 0.0
                    split = True
                    break
                sine, cosine = f / r, g / r
                g = d[i + 1] - shift
                r = (d[i] - g) * sine + 2.0 * cosine * b
                shift = sine * r
                d[i + 1] = g + shift
                g = cosine * r - b
                for k in range(rows.shape[1]):
                    x, y = rows[i, k], rows[i + 1, k]
                    rows[i + 1, k] = sine * x + cosine * y
                    rows[i, k] = cosine * x - sine * y
            if split:
                continue
            d[low] -= shift
            e[low] = g
            e[high] = 0.0
    return True


def eigen_rows(
    alpha: NDArray[np.float64], beta: NDArray[np.float64], rows: NDArray[np.float64]
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Eigenvalues (m,), ascending, and ``rows`` (m, k) in the eigenvectors' basis, Qᵀ·rows.

    ``alpha`` (m,) is the diagonal, ``beta`` (m − 1,) its neighbours; the column (1, 0, …, 0) of
    ``rows`` gives the first components of all eigenvectors. Cost: O(m²·k).
    """
    d, out = np.array(alpha, dtype=np.float64), np.array(rows, dtype=np.float64, order="C")
    e = np.append(np.asarray(beta, dtype=np.float64), 0.0)
    if not _implicit_ql(d, e, out):
        raise RuntimeError("a tridiagonal matrix has no finite eigenvalues")
    order = np.argsort(d, kind="stable")
    return d[order], out[order]
