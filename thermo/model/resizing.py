"""The same lattice on a smaller or a larger cluster, to see where a cluster's size shows.

A cluster of N sites follows the infinite lattice's high-temperature series up to the length of
its shortest loop around the period (in bonds). So of all clusters with as many cells the one with
the longest such loop is taken, and nothing is compared that differs for another reason: where
the cluster is bipartite its relative is, and both have an integer or both a half-integer total
spin.
"""

from __future__ import annotations

import json
from collections import deque
from collections.abc import Iterator
from itertools import product
from math import gcd
from typing import Any

from thermo.errors import ModelError
from thermo.model.cells import Cell, Superlattice, added, determinant
from thermo.model.checks import Table
from thermo.model.lattices import choose
from thermo.model.reading import KEYS, build, parse, read_cluster
from thermo.model.spin_model import SpinModel
from thermo.model.terms import BOND_TERMS

Vector = tuple[int, ...]
Rows = tuple[Vector, ...]

# Loops around the period are followed up to so many bonds, far beyond any cluster solved here.
LONGEST_LOOP = 24
# Shorter loops join two sites twice, or a site to itself.
SHORTEST_LOOP = 3
# A relative with loops as long must have at most this share of the cells, or their inverse more.
CLEARLY = 2 / 3


def can_resize(model: SpinModel) -> bool:
    """Whether the model is a repeated cell, periodic along some direction, and not a molecule."""
    return not model.finite and any(model.periodic)


def smaller(model: SpinModel) -> SpinModel | None:
    """The largest sensible cluster below the model's, with its couplings; None where none is."""
    cells = abs(determinant(model.superlattice))
    return _relative(model, range(cells - 1, 0, -1)) if can_resize(model) else None


def larger(model: SpinModel, most_states: int) -> SpinModel | None:
    """The smallest sensible cluster beyond the model's with at most so many states, or None."""
    if not can_resize(model):
        return None
    cells = abs(determinant(model.superlattice))
    per_cell = model.n_states ** (1 / cells)
    most = cells
    while per_cell ** (most + 1) <= most_states * (1 + 1e-9):
        most += 1
    return _relative(model, range(cells + 1, most + 1))


def _relative(model: SpinModel, sizes: range) -> SpinModel | None:
    data = parse(model.text)
    cell = read_cluster(Table(data, "", KEYS), model.couplings, BOND_TERMS[model.bond_term])
    loops = _Loops(cell)
    cells = abs(determinant(model.superlattice))
    own = loops.shortest(model.superlattice)
    bipartite = loops.bipartite(model.superlattice)
    half = round(2 * sum(cell.spins))  # twice the largest total spin of one cell
    for n in sizes:
        if (n - cells) * half % 2:
            continue
        fitting = [
            (loops.shortest(rows), -loops.count(rows), rows)
            for rows in _clusters(model, n)
            if not bipartite or loops.bipartite(rows)
        ]
        if not fitting:
            continue
        loop, _, rows = max(fitting, key=lambda entry: entry[:2])
        if loop < min(SHORTEST_LOOP, own):
            continue
        longer = n > cells
        clearly = n * CLEARLY >= cells if longer else n <= cells * CLEARLY
        if clearly or (loop > own if longer else loop < own) or own > LONGEST_LOOP:
            try:
                return _rebuilt(model, data, rows)
            except ModelError:  # too many sites for one configuration's 62 bits
                return None
    return None


def _clusters(model: SpinModel, cells: int) -> Iterator[Rows]:
    """Superlattices of so many cells, open directions left as they are."""
    rows = model.superlattice
    if all(model.periodic):
        yield from _hermite(len(rows), cells)
        return
    for k, (row, periodic) in enumerate(zip(rows, model.periodic, strict=True)):
        step = gcd(*row)
        whole = abs(determinant(rows))
        if periodic and cells * step % whole == 0:
            scale = cells * step // whole
            yield (*rows[:k], tuple(x // step * scale for x in row), *rows[k + 1 :])


def _hermite(dimension: int, cells: int) -> Iterator[Rows]:
    """Every sublattice of this index once, as upper triangular rows."""
    for diagonal in product(_divisors(cells), repeat=dimension):
        size = 1
        for d in diagonal:
            size *= d
        if size != cells:
            continue
        places = [(i, j) for i in range(dimension) for j in range(i + 1, dimension)]
        for above in product(*(range(diagonal[j]) for _, j in places)):
            entry = dict(zip(places, above, strict=True))
            yield tuple(
                tuple(diagonal[i] if i == j else entry.get((i, j), 0) for j in range(dimension))
                for i in range(dimension)
            )


def _divisors(n: int) -> list[int]:
    return [d for d in range(1, n + 1) if n % d == 0]


class _Loops:
    """How far, in bonds, a site of the endless lattice is from its images in other cells."""

    def __init__(self, cell: Cell) -> None:
        self.dimension = len(cell.superlattice)
        steps: dict[int, list[tuple[int, Vector]]] = {a: [] for a in range(len(cell.names))}
        for bond in cell.bonds:
            steps[bond.a].append((bond.b, bond.offset))
            steps[bond.b].append((bond.a, tuple(-x for x in bond.offset)))
        self.steps, self.periodic = steps, cell.periodic
        self.two_coloured = True
        self.distance: dict[Vector, int] = {}
        for start in steps:
            self._spread(start)

    def _spread(self, start: int) -> None:
        """Breadth first from one site, as far as memory is no question."""
        origin = (0,) * self.dimension
        seen = {(start, origin): 0}
        front = deque([(start, origin)])
        limit = {0: 0, 1: LONGEST_LOOP, 2: LONGEST_LOOP // 2}.get(self.dimension, 6)
        while front:
            a, x = front.popleft()
            far = seen[a, x]
            for b, offset in self.steps[a]:
                there = (b, added(x, offset))
                if there in seen:
                    self.two_coloured &= (seen[there] - far) % 2 == 1
                elif far < limit:
                    seen[there] = far + 1
                    front.append(there)
        for (a, x), far in seen.items():
            if a == start and any(x):
                self.distance[x] = min(far, self.distance.get(x, far))

    def _around(self, rows: Rows) -> list[int]:
        """Lengths of the loops that close around the periodic rows."""
        lattice = Superlattice(rows)
        origin = (0,) * self.dimension
        found = []
        for x, far in self.distance.items():
            inside, winding = lattice.split(x)
            if inside == origin and not any(
                w and not p for w, p in zip(winding, self.periodic, strict=True)
            ):
                found.append(far)
        return found

    def shortest(self, rows: Rows) -> int:
        """Bonds of the shortest loop around the period; beyond LONGEST_LOOP where none is."""
        return min(self._around(rows), default=LONGEST_LOOP + 1)

    def count(self, rows: Rows) -> int:
        """How many loops are as short as the shortest."""
        around = self._around(rows)
        return around.count(min(around)) if around else 0

    def bipartite(self, rows: Rows) -> bool:
        """Whether every loop of the cluster has an even number of bonds."""
        return self.two_coloured and all(far % 2 == 0 for far in self._around(rows))


def _rebuilt(model: SpinModel, data: dict[str, Any], rows: Rows) -> SpinModel:
    """The model read again with another repetition, its couplings as they are now."""
    if "lattice" in data:
        table = dict(data["lattice"])
        lattice = choose(table["name"], table["couplings"])
        unit = len(lattice.basis) if lattice.size_counts_sites else 1
        table["size"] = [[x * unit for x in row] for row in rows]
        changed = {**data, "lattice": table}
    else:
        changed = {**data, "cell": {**data["cell"], "repeat": [list(row) for row in rows]}}
    text = json.dumps(changed, ensure_ascii=False)
    found = build(changed, text, model.source)
    return found.with_couplings(model.couplings)
