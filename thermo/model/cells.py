"""A unit cell and its repetition, expanded to sites, bonds, ion terms and translations.

Coordinates of cells are rows of whole numbers. The superlattice is the set of integer
combinations of the rows of L (shape (d, d)); a cell x lies in the cluster when its fractional
coordinates x L⁻¹ all lie in [0, 1). All of this is exact integer arithmetic. A list of sites
without a cell is the case d = 0: one cell, no offsets.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from itertools import product
from math import gcd

import numpy as np

from thermo.errors import ModelError
from thermo.model.checks import fault
from thermo.model.spin_model import Bond, Ion, Matrix, Site
from thermo.model.terms import BondTerm, IonTerm

Vector = tuple[int, ...]
MAX_BITS = 62  # a configuration is one signed 64-bit integer, with room for a flag


@dataclass(frozen=True)
class Cell:
    """What is repeated, and how: L by rows, and for each row whether it is periodic."""

    names: tuple[str, ...]
    spins: tuple[float, ...]
    g: tuple[Matrix, ...]
    bonds: tuple[BondTerm, ...]
    ions: tuple[IonTerm, ...]
    superlattice: tuple[Vector, ...] = ()
    periodic: tuple[bool, ...] = ()
    path: str = "site"
    positions: tuple[tuple[float, ...], ...] = ()  # of the sites, in cell vectors; () if not known


@dataclass(frozen=True)
class Cluster:
    """The expanded cell."""

    sites: tuple[Site, ...]
    bonds: tuple[Bond, ...]
    ions: tuple[Ion, ...]
    translations: tuple[tuple[int, ...], ...]
    notes: tuple[str, ...]


class Superlattice:
    """Whole-number vectors modulo the rows of L."""

    def __init__(self, rows: Sequence[Vector]) -> None:
        self.rows = tuple(rows)
        self.dimension = len(rows)
        self.det = determinant(rows)
        self.adjugate = adjugate(rows)

    def split(self, x: Vector) -> tuple[Vector, Vector]:
        """The cell of the cluster that x falls on, and how often x winds around each row."""
        d = self.dimension
        winding = tuple(
            sum(x[k] * self.adjugate[k][m] for k in range(d)) // self.det for m in range(d)
        )
        inside = tuple(x[m] - sum(winding[k] * self.rows[k][m] for k in range(d)) for m in range(d))
        return inside, winding

    def cells(self) -> list[Vector]:
        """All |det L| cells of the cluster, sorted, so that the last coordinate runs fastest."""
        found = {self.split((0,) * self.dimension)[0]}
        front = list(found)
        while front:
            x = front.pop()
            for step in unit_vectors(self.dimension):
                y = self.split(added(x, step))[0]
                if y not in found:
                    found.add(y)
                    front.append(y)
        return sorted(found)


def unit_vectors(dimension: int) -> list[Vector]:
    """The unit steps."""
    return [tuple(int(k == m) for m in range(dimension)) for k in range(dimension)]


def added(x: Vector, y: Vector) -> Vector:
    """x + y"""
    return tuple(a + b for a, b in zip(x, y, strict=True))


def determinant(rows: Sequence[Vector]) -> int:
    """The exact determinant of a small integer matrix (1 for the empty one)."""
    if not rows:
        return 1
    return sum((-1) ** m * rows[0][m] * determinant(_minor(rows, 0, m)) for m in range(len(rows)))


def adjugate(rows: Sequence[Vector]) -> tuple[Vector, ...]:
    """The exact adjugate: det(L) L⁻¹."""
    d = len(rows)
    return tuple(
        tuple((-1) ** (k + m) * determinant(_minor(rows, m, k)) for m in range(d)) for k in range(d)
    )


def _minor(rows: Sequence[Vector], k: int, m: int) -> tuple[Vector, ...]:
    return tuple(row[:m] + row[m + 1 :] for n, row in enumerate(rows) if n != k)


def expand(cell: Cell) -> Cluster:
    """The whole cluster: cell by cell, each bond once; ModelError beyond the 62-bit limit."""
    lattice = Superlattice(cell.superlattice)
    check_size(cell, abs(lattice.det))
    cells = lattice.cells()
    first = {x: n * len(cell.names) for n, x in enumerate(cells)}
    sites = tuple(
        Site(name + _label(x), spin, g)
        for x in cells
        for name, spin, g in zip(cell.names, cell.spins, cell.g, strict=True)
    )
    names = [site.name for site in sites]
    notes = repeated_terms(cell)
    bonds: list[Bond] = []
    ions: list[Ion] = []
    images: dict[tuple[int, int], dict[Vector, str]] = {}
    own_images: dict[str, str] = {}
    empty: dict[str, str] = {}
    for x in cells:
        for term in cell.bonds:
            y, winding = lattice.split(added(x, term.offset))
            crossing = (w and not p for w, p in zip(winding, cell.periodic, strict=True))
            if any(crossing):
                continue
            i, j = first[x] + term.a, first[y] + term.b
            if i == j:
                own_images[term.path] = own_image(term, names[i])
                ions += effective_ion(i, sites[i].spin, term.coupling, term.matrix)
            elif not term.matrix.any():
                empty[term.path] = f"{term.path}: its matrix is zero, so it is left out."
            else:
                bonds.append(Bond(i, j, term.coupling, term.matrix))
                step = term.offset if i < j else tuple(-c for c in term.offset)
                images.setdefault((min(i, j), max(i, j)), {})[step] = term.coupling
        for ion in cell.ions:
            i = first[x] + ion.site
            kept = effective_ion(i, sites[i].spin, ion.coupling, ion.matrix)
            ions += kept
            if sites[i].spin == 0.5:
                rest = "only shifts all energies" if kept else "does nothing and is left out"
                empty[f"{ion.path}@{ion.site}"] = (
                    f"{ion.path}: on a spin 1/2 such as {names[i]!r} this term {rest}."
                )
            elif not kept:
                empty[ion.path] = f"{ion.path}: its matrix is zero, so it is left out."
    notes += [*own_images.values(), *double_joints(images, names), *empty.values()]
    translations = find_translations(cell, lattice, first)
    return Cluster(sites, tuple(bonds), tuple(ions), translations, tuple(notes))


def check_size(cell: Cell, n_cells: int) -> None:
    """ModelError when the configurations of n_cells cells do not fit into 62 bits."""
    bits = n_cells * sum(round(2 * spin).bit_length() for spin in cell.spins)
    if bits > MAX_BITS:
        raise fault(
            cell.path,
            f"the cluster of {n_cells * len(cell.names)} sites needs {bits} "
            f"bits for one configuration, beyond the 62-bit limit (a spin 1/2 takes one, "
            "a spin 1 two); make it smaller",
        )


def effective_ion(site: int, spin: float, coupling: str, d: Matrix) -> list[Ion]:
    """The ion term, or its equal where it is simpler: for spin ½, Sᵀ D S = Tr D/4 exactly."""
    if spin == 0.5:
        d = np.eye(3) * (np.trace(d) / 3)
        # The axial form's trace is zero but for rounding.
        d = np.where(np.abs(d) < 1e-15, 0.0, d)
    return [Ion(site, coupling, d)] if d.any() else []


def own_image(term: BondTerm, name: str) -> str:
    """The note for a bond from a site to its own image, S_iᵀ A S_i; an error if not Hermitian."""
    if not np.array_equal(term.matrix, term.matrix.T):
        raise ModelError(
            f"{term.path}: the period is so short that the bond leads from {name!r} back to "
            "itself, where its antisymmetric part has no meaning; lengthen the period or open it"
        )
    return (
        f"{term.path}: the period is so short that the bond leads from {name!r} back to itself; "
        "it becomes a term of that one site (a constant where isotropic), which changes the "
        "physics."
    )


def double_joints(images: dict[tuple[int, int], dict[Vector, str]], names: list[str]) -> list[str]:
    """A note when pairs of sites are joined through more than one image."""
    twice = [(pair, steps) for pair, steps in images.items() if len(steps) > 1]
    if not twice:
        return []
    (i, j), steps = twice[0]
    by = " and ".join(dict.fromkeys(steps.values()))
    pairs = "1 pair of sites is" if len(twice) == 1 else f"{len(twice)} pairs of sites are"
    return [
        f"The period is so short that {pairs} joined through several images (such as "
        f"{names[i]!r} and {names[j]!r}, by {by}, {len(steps)} times); their couplings add, "
        "which changes the physics."
    ]


def repeated_terms(cell: Cell) -> list[str]:
    """A note for each bond or ion term of the cell that states an earlier one again."""
    notes: list[str] = []
    seen: dict[tuple[object, ...], str] = {}
    entries: list[tuple[str, tuple[object, ...]]] = []
    for bond in cell.bonds:
        back = tuple(-c for c in bond.offset)
        forward = (bond.a, bond.b, bond.offset)
        if forward <= (bond.b, bond.a, back):
            a = bond.matrix
        else:
            forward, a = (bond.b, bond.a, back), bond.matrix.T
        entries.append((bond.path, (*forward, bond.coupling, *(a + 0.0).ravel())))
    for ion in cell.ions:
        entries.append((ion.path, (ion.site, ion.coupling, *(ion.matrix + 0.0).ravel())))
    for path, key in entries:
        if key in seen:
            notes.append(
                f"{path}: repeats {seen[key]} (same sites, coupling and form); the two "
                "add, so delete one if it was meant once."
            )
        seen.setdefault(key, path)
    return list(dict.fromkeys(notes))


def find_translations(
    cell: Cell, lattice: Superlattice, first: dict[Vector, int]
) -> tuple[tuple[int, ...], ...]:
    """Site permutations that generate the translations of the periodic directions."""
    if all(cell.periodic):
        steps = unit_vectors(lattice.dimension)
    else:
        # Beside an open direction only steps along the periodic rows keep the cluster in place.
        rows = [r for r, p in zip(cell.superlattice, cell.periodic, strict=True) if p]
        steps = [tuple(c // gcd(*row) for c in row) for row in rows]
    n = len(cell.names)
    found = []
    for step in steps:
        image = [0] * (n * len(first))
        for x, a in product(first, range(n)):
            image[first[x] + a] = first[lattice.split(added(x, step))[0]] + a
        if image != sorted(image) and tuple(image) not in found:
            found.append(tuple(image))
    return tuple(found)


def _label(x: Vector) -> str:
    return "[" + ",".join(map(str, x)) + "]" if x else ""
