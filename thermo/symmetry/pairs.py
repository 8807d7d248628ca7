"""Classes of pairs of sites that the symmetry of an interaction makes alike."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from thermo.symmetry.automorphisms import automorphism_group, colour_matrix
from thermo.symmetry.interaction import Interaction

Ints = NDArray[np.int64]


@dataclass(frozen=True, eq=False)
class PairClasses:
    """Orbits of the unordered pairs {i, j}, i = j included, under the site permutations.

    ``of_pair`` (N, N), symmetric, is the class of each pair; ``first``, ``second`` (K,) name one
    pair of each class, first ≤ second, and ``count`` (K,) its pairs. The classes of single
    sites (i = j) come first.
    """

    of_pair: Ints
    first: Ints
    second: Ints
    count: Ints

    @property
    def n_self(self) -> int:
        """Number of classes of single sites."""
        return int(np.sum(self.first == self.second))


def pair_classes(terms: Interaction) -> PairClasses:
    """The classes under the automorphism group of an interaction.

    Two pairs of one class have the same ⟨S_i·S_j⟩ at every temperature, and the same
    ⟨SᵃᵢSᵃⱼ⟩ for each axis a, in any field along an axis that all sites share. Cost: that of the
    group's generators, and N² for each of them a few times.
    """
    n = terms.n_sites
    index = np.arange(n * n, dtype=np.int64).reshape(n, n)
    label = np.minimum(index, index.T)
    group = automorphism_group(colour_matrix(terms))
    moved = [np.ix_(p, p) for g in group.generators for p in (g, np.argsort(g))]
    while True:
        lower = label
        for where in moved:
            lower = np.minimum(lower, lower[where])
        if np.array_equal(lower, label):
            break
        label = lower
    own = np.unique(np.diagonal(label))
    ordered = np.concatenate([own, np.setdiff1d(np.unique(label), own)])
    rank = np.empty(n * n, dtype=np.int64)
    rank[ordered] = np.arange(len(ordered))
    of_pair = rank[label]
    upper = of_pair[np.triu_indices(n)]
    count = np.bincount(upper, minlength=len(ordered))
    return PairClasses(of_pair, ordered // n, ordered % n, count.astype(np.int64))
