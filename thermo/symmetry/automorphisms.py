"""Site permutations that leave an interaction unchanged.

The sites are the vertices of a complete graph whose edges (i, j) are coloured by the tensor
A_ij and whose vertices are coloured by spin and ion tensor. Its automorphisms are found by
colour refinement (Weisfeiler and Leman 1968) and backtracking along a stabiliser chain
(Sims 1970): generators and the order come out without listing the group.

A permutation p is an array with p[i] the image of site i; (p∘q)[i] = p[q[i]].
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from thermo.symmetry.interaction import RELATIVE_TOLERANCE, Interaction

Permutation = NDArray[np.int64]


def colour_matrix(terms: Interaction) -> NDArray[np.int64]:
    """Colours, shape (N, N): equal off-diagonal where the tensors agree (A_ji = A_ijᵀ),
    equal on the diagonal where spin and ion tensor agree."""
    n, channels = terms.n_sites, len(terms.scale)
    tensors = np.zeros((n, n, channels, 3, 3))
    for (i, j), a in terms.pair.items():
        tensors[i, j] = a
        tensors[j, i] = a.transpose(0, 2, 1)
    for i, d in terms.ion.items():
        tensors[i, i] = d
    labels = np.empty(tensors.shape, dtype=np.int64)
    for p in range(channels):
        values = tensors[:, :, p].ravel()
        order = np.argsort(values, kind="stable")
        # One label for each run of values that differ by rounding only.
        steps = np.diff(values[order]) > RELATIVE_TOLERANCE * max(terms.scale[p], 1e-300)
        ranks = np.empty(len(values), dtype=np.int64)
        ranks[order] = np.concatenate(([0], np.cumsum(steps)))
        labels[:, :, p] = ranks.reshape(n, n, 3, 3)
    spin = np.where(np.eye(n, dtype=bool), terms.twice_spin[:, None] + 1, 0)
    rows = np.concatenate([labels.reshape(n * n, -1), spin.reshape(n * n, 1)], axis=1)
    return np.unique(rows, axis=0, return_inverse=True)[1].reshape(n, n).astype(np.int64)


@dataclass
class Group:
    """A permutation group by its stabiliser chain.

    ``generators`` is strong for ``base``: those that fix base[:k] generate the stabiliser of
    base[:k]. ``transversals[k]`` maps each point of the orbit of base[k] to an element of that
    stabiliser carrying base[k] there.
    """

    degree: int
    base: list[int] = field(default_factory=list)
    generators: list[Permutation] = field(default_factory=list)
    transversals: list[dict[int, Permutation]] = field(default_factory=list)

    @property
    def order(self) -> int:
        """Number of elements."""
        product = 1
        for orbit in self.transversals:
            product *= len(orbit)
        return product

    def elements(self) -> NDArray[np.int64]:
        """All elements, shape (order, N); the identity first. For groups of modest order."""
        found = np.arange(self.degree)[None]
        for orbit in reversed(self.transversals):
            found = np.concatenate([u[found] for u in orbit.values()])
        return found

    def sample(self, count: int, seed: int = 0) -> NDArray[np.int64]:
        """``count`` uniformly random elements, shape (count, N), the same for the same seed."""
        rng = np.random.default_rng(seed)
        found = np.tile(np.arange(self.degree), (count, 1))
        for orbit in reversed(self.transversals):
            members = np.array(list(orbit.values()))
            chosen = members[rng.integers(len(members), size=count)]
            found = np.take_along_axis(chosen, found, axis=1)
        return found


def _refine(
    colours: NDArray[np.int64], left: NDArray[np.int64], right: NDArray[np.int64]
) -> tuple[NDArray[np.int64], NDArray[np.int64]] | None:
    """Refine two vertex colourings of one graph together until stable; None when they part."""
    n = len(left)
    count = len(np.unique(left))
    while True:
        width = int(max(left.max(), right.max())) + 1
        seen = np.concatenate([colours * width + left, colours * width + right])
        seen.sort(axis=1)
        rows = np.concatenate([np.concatenate([left, right])[:, None], seen], axis=1)
        labels = np.unique(rows, axis=0, return_inverse=True)[1].reshape(-1)
        left, right = labels[:n], labels[n:]
        if not np.array_equal(np.sort(left), np.sort(right)):
            return None
        refined = len(np.unique(left))
        if refined == count:
            return left, right
        count = refined


def _individualise(labels: NDArray[np.int64], vertex: int) -> NDArray[np.int64]:
    marked = 2 * labels
    marked[vertex] += 1
    return marked


def _first_cell(labels: NDArray[np.int64]) -> NDArray[np.int64] | None:
    """The vertices of the smallest cell with more than one vertex, or None if all are single."""
    sizes = np.bincount(labels)
    sizes = np.where(sizes > 1, sizes, np.iinfo(np.int64).max)
    cell = int(np.argmin(sizes))
    if sizes[cell] == np.iinfo(np.int64).max:
        return None
    return np.flatnonzero(labels == cell)


def _extend(
    colours: NDArray[np.int64], left: NDArray[np.int64], right: NDArray[np.int64]
) -> Permutation | None:
    """An automorphism that carries the colouring ``left`` to ``right``, by backtracking."""
    both = _refine(colours, left, right)
    if both is None:
        return None
    left, right = both
    cell = _first_cell(left)
    if cell is None:
        image = np.empty(len(left), dtype=np.int64)
        image[np.argsort(left)] = np.argsort(right)
        return image if np.array_equal(colours[np.ix_(image, image)], colours) else None
    marked = _individualise(left, int(cell[0]))
    for target in np.flatnonzero(right == left[cell[0]]):
        found = _extend(colours, marked, _individualise(right, int(target)))
        if found is not None:
            return found
    return None


def _orbit(point: int, generators: list[Permutation], degree: int) -> dict[int, Permutation]:
    """The orbit of a point, each member with an element that carries the point there."""
    reached = {point: np.arange(degree)}
    queue = [point]
    for current in queue:
        for g in generators:
            image = int(g[current])
            if image not in reached:
                reached[image] = g[reached[current]]
                queue.append(image)
    return reached


def automorphism_group(colours: NDArray[np.int64]) -> Group:
    """The automorphism group of a coloured complete graph.

    ``colours`` has shape (N, N), integers, not necessarily symmetric. Every generator is
    checked against the whole matrix. Cost: a few refinements of N² log N per base point for
    the clusters met in practice; worst case exponential, as for any known method.
    """
    n = len(colours)
    start = np.unique(np.diagonal(colours), return_inverse=True)[1].astype(np.int64)
    refined = _refine(colours, start, start)
    labels = start if refined is None else refined[0]
    base: list[int] = []
    levels: list[NDArray[np.int64]] = []
    while (cell := _first_cell(labels)) is not None:
        base.append(int(cell[0]))
        levels.append(labels)
        marked = _individualise(labels, base[-1])
        both = _refine(colours, marked, marked)
        labels = marked if both is None else both[0]
    group = Group(n, base)
    transversals: list[dict[int, Permutation]] = [{} for _ in base]
    for level in range(len(base) - 1, -1, -1):
        point, labels = base[level], levels[level]
        orbit = _orbit(point, group.generators, n)
        refuted: set[int] = set()
        for target in map(int, np.flatnonzero(labels == labels[point])):
            if target in orbit or target in refuted:
                continue
            found = _extend(colours, _individualise(labels, point), _individualise(labels, target))
            if found is None:
                # No element reaches this target, so none reaches its orbit.
                refuted.update(_orbit(target, group.generators, n))
            else:
                group.generators.append(found)
                orbit = _orbit(point, group.generators, n)
        transversals[level] = orbit
    group.transversals = transversals
    return group


def powers(p: Permutation) -> Iterator[Permutation]:
    """p, p², … up to the identity."""
    current = p
    identity = np.arange(len(p))
    while True:
        yield current
        if np.array_equal(current, identity):
            return
        current = p[current]
