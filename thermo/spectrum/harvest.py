"""What Lanczos recursions know: Ritz levels with weights, and which of them are exact.

A Lanczos run from a random vector r gives Ritz values θ_j with weights |⟨r|ψ_j⟩|². At the edges
of the spectrum some have converged: those are eigenvalues of H. Of a converged one the weight
that is expected, its degeneracy over the dimension, need not be estimated: if its degeneracy is
known, it enters as an exact level and its share is taken out of the random vectors. What is left
of them samples the other states only, as if the vectors had been drawn orthogonal to the exact
ones (Morita and Tohyama, Phys. Rev. Research 2, 013205 (2020)); here no eigenvector is ever
formed.

The degeneracy of E within a sector is the rank of the matrix ⟨r_a|P|r_b⟩ over random vectors,
P the projector on E's eigenspace: the rank is the degeneracy once it is less than the number of
vectors. The matrix follows from overlaps ⟨r_a|v_j⟩ kept along the recursion of r_b.

Without re-orthogonalisation a converged Ritz value comes several times; the sums over such a
cluster are right (Greenbaum, Lin. Alg. Appl. 113, 7 (1989)).
"""

from __future__ import annotations

import itertools
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from thermo.errors import SpectrumError
from thermo.hilbert.tridiagonal import eigen_rows

Vector = NDArray[np.float64]

# A Ritz value with a residual below this, in units of the spectrum's width, is an eigenvalue to
# the square of it over the gap.
CONVERGED = 1e-9
# Ritz values closer than this (in the same unit) belong to one eigenvalue.
SAME_LEVEL = 1e-8
# Eigenvalues of a normalised Gram matrix of random projections below the first are zero, above
# the second not, between them it cannot tell. Rounding leaves 1e-8 as a rule, more where a
# projection is faint beside that on a close neighbour; eigenvalues that are not zero are of
# order one, and fall below the first once in several million.
SINGULAR, REGULAR = 1e-7, 1e-5
# The halves of a Gram matrix are found independently: they differ as it errs.
ASYMMETRIC = 1e-6
# A projection shorter than this (squared) is known too badly to count states with.
FAINT = 1e-13


@dataclass(frozen=True, eq=False)
class Ritz:
    """Ritz pairs of one column: values ascending (m,), the start vector's components in them
    (m,), residuals (m,), and the partners' overlaps with the Ritz vectors (F, m)."""

    value: Vector
    component: Vector
    residual: Vector
    overlap: NDArray[np.complex128]


def ritz_pairs(alpha: Vector, beta: Vector, dots: NDArray[np.complex128]) -> Ritz:
    """Diagonalise one tridiagonal matrix; ``alpha``, ``beta`` (m,), ``dots`` (m, F)."""
    steps, partners = dots.shape
    rows = np.zeros((steps, 2 + 2 * partners))
    rows[0, 0] = rows[-1, 1] = 1.0
    rows[:, 2 : 2 + partners], rows[:, 2 + partners :] = dots.real, dots.imag
    value, turned = eigen_rows(alpha, beta[:-1], rows)
    overlap = turned[:, 2 : 2 + partners] + 1j * turned[:, 2 + partners :]
    return Ritz(value, turned[:, 0], np.abs(beta[-1] * turned[:, 1]), overlap.T)


@dataclass(frozen=True, eq=False)
class _Cluster:
    energy: float
    low: int
    high: int


def _clusters(ritz: Ritz, width: float) -> list[_Cluster]:
    """Runs of Ritz values that belong to one converged eigenvalue."""
    found = []
    edges = np.flatnonzero(np.diff(ritz.value) > SAME_LEVEL * width) + 1
    bounds = [0, *edges.tolist(), len(ritz.value)]
    for low, high in itertools.pairwise(bounds):
        best = low + int(np.argmin(ritz.residual[low:high]))
        if ritz.residual[best] < CONVERGED * width:
            weight = ritz.component[low:high] ** 2
            if weight.sum() > FAINT:
                energy = float(ritz.value[low:high] @ weight / weight.sum())
                found.append(_Cluster(energy, low, high))
    return found


@dataclass(frozen=True, eq=False)
class Harvest:
    """One sector: exact levels with their degeneracies, and what each vector says of the rest.

    ``exact`` (n,), ``degeneracy`` (n,); ``energy`` and ``weight`` are lists over the vectors,
    the weights of a vector adding up to one.
    """

    exact: Vector
    degeneracy: NDArray[np.int64]
    energy: list[Vector]
    weight: list[Vector]


def _degeneracy(members: Sequence[tuple[Ritz, _Cluster]]) -> int | None:
    """The rank of the family's projections on one eigenspace; None where it cannot tell."""
    size = len(members)
    if size < 2:
        return None
    gram = np.zeros((size, size), dtype=np.complex128)
    for a, (ritz, cluster) in enumerate(members):
        part = slice(cluster.low, cluster.high)
        component = ritz.component[part]
        gram[a, a] = float(component @ component)
        for f in range(size - 1):
            gram[(a + f + 1) % size, a] = ritz.overlap[f, part] @ component
    norm = np.sqrt(np.diag(gram).real)
    if np.any(norm**2 < FAINT):
        return None
    gram /= np.outer(norm, norm)
    if np.abs(gram - gram.conj().T).max() > ASYMMETRIC:
        return None
    eigenvalue = np.linalg.eigvalsh((gram + gram.conj().T) / 2)
    rank = int(np.sum(eigenvalue > REGULAR))
    if np.sum(eigenvalue > SINGULAR) > rank:
        return None
    return rank if 0 < rank < size else None


def harvest(
    families: Sequence[Sequence[Ritz]],
    dimension: int,
    width: float,
    largest: int | None = None,
) -> Harvest:
    """Exact levels and remaining samples of one sector.

    ``families`` holds the Ritz pairs of the sector's vectors, those together whose mutual
    overlaps are known; ``width`` is that of H's spectrum, ``largest`` the most exact levels to
    take at each edge (None: all). A level is taken only if it converged in every vector.
    """
    vectors = [r for family in families for r in family]
    clusters = [_clusters(r, width) for r in vectors]
    places = [np.array([c.energy for c in found]) for found in clusters]
    exact: list[float] = []
    degeneracy: list[int] = []
    taken: list[list[_Cluster]] = [[] for _ in vectors]
    for candidate in clusters[0] if largest != 0 else []:
        same = []
        for found, place in zip(clusters, places, strict=True):
            near = np.flatnonzero(np.abs(place - candidate.energy) < SAME_LEVEL * width)
            if len(near) == 1:
                same.append(found[int(near[0])])
        if len(same) < len(vectors):
            continue
        ranks, first = [], 0
        for family in families:
            last = first + len(family)
            pairs = list(zip(family, same[first:last], strict=True))
            ranks.append(_degeneracy(pairs))
            first = last
        known = {r for r in ranks if r is not None}
        if len(known) != 1:
            continue
        exact.append(float(np.median([c.energy for c in same])))
        degeneracy.append(known.pop())
        for mine, cluster in zip(taken, same, strict=True):
            mine.append(cluster)
    keep = _edges(np.array(exact), vectors[0].value, largest)
    energy, weight = [], []
    for ritz, mine in zip(vectors, taken, strict=True):
        left = np.ones(len(ritz.value), dtype=bool)
        for k in np.flatnonzero(keep):
            left[mine[k].low : mine[k].high] = False
        square = ritz.component[left] ** 2
        energy.append(ritz.value[left])
        weight.append(square / square.sum() if square.sum() > 0 else square)
    counts = np.array(degeneracy, dtype=np.int64)[keep]
    if counts.sum() > dimension:
        raise SpectrumError(
            f"a sector of {dimension} states came out with {counts.sum()} exact ones; this is a "
            "fault of the program, please report it with the model file (exact_states = 0 goes "
            "around it)"
        )
    return Harvest(np.array(exact)[keep], counts, energy, weight)


def _edges(exact: Vector, values: Vector, largest: int | None) -> NDArray[np.bool_]:
    """Which exact levels to keep: the ``largest`` lowest and as many highest."""
    if largest is None:
        return np.ones(len(exact), dtype=bool)
    middle = 0.5 * (values[0] + values[-1])
    order = np.argsort(exact)
    low = [k for k in order if exact[k] <= middle][:largest]
    high = [k for k in order[::-1] if exact[k] > middle][:largest]
    keep = np.zeros(len(exact), dtype=bool)
    keep[[*low, *high]] = True
    return keep
