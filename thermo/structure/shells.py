"""Neighbour shells: the pairs of magnetic ions that symmetry makes one, sorted by distance."""

from __future__ import annotations

from dataclasses import dataclass
from itertools import product

import numpy as np
from numpy.typing import NDArray

from thermo.errors import ModelError
from thermo.structure.crystal import SAME, Crystal

Array = NDArray[np.float64]
# An atom bridges two ions when it lies within the sum of covalent radii and this of both (Å).
SLACK = 0.5
MAX_LINKS = 200_000


@dataclass(frozen=True, order=True)
class Link:
    """A pair: atom ``a`` of one cell and atom ``b`` of the cell ``offset`` away."""

    a: int
    b: int
    offset: tuple[int, int, int]

    def canonical(self) -> Link:
        """The same pair, whichever end it was seen from."""
        x, y, z = self.offset
        return min(self, Link(self.b, self.a, (-x, -y, -z)))


@dataclass(frozen=True)
class Bridge:
    """An atom bonded to both ions of a pair: its label, and the angle there in degrees."""

    label: str
    angle: float


@dataclass(frozen=True)
class Shell:
    """Pairs that symmetry makes equal: ``links`` are those of one cell, each once.

    ``neighbours`` gives, for each label of the ions, how many such pairs one ion takes part in;
    ``bridges`` are those of one pair.
    """

    name: str
    distance: float
    links: tuple[Link, ...]
    neighbours: tuple[tuple[str, int], ...]
    bridges: tuple[Bridge, ...]


def find_shells(crystal: Crystal, cutoff: float) -> list[Shell]:
    """The shells of the magnetic ions up to ``cutoff`` Å, named J1, J2, ... by distance.

    Two pairs belong to one shell when a symmetry operation of the crystal leads from one to the
    other, so equal distances may be different shells. ModelError for a cutoff that is not
    positive or has no pair below it. Cost: pairs times operations.
    """
    if not 0 < cutoff < 1000:
        raise ModelError(f"the distance {cutoff:g} is not usable; give one in Å, such as 6")
    places = np.array([atom.place for atom in crystal.atoms])
    links = _links(crystal, places, cutoff)
    if not links:
        raise ModelError(f"no two magnetic ions are within {cutoff:g} Å; give a larger distance")
    orbits = _orbits(crystal, places, links)
    ranked = sorted((_length(crystal, places, orbit[0]), orbit) for orbit in orbits)
    return [
        Shell(f"J{n}", length, tuple(orbit), _counts(crystal, orbit),
              tuple(_bridges(crystal, places, orbit[0])))
        for n, (length, orbit) in enumerate(ranked, start=1)
    ]  # fmt: skip


def _length(crystal: Crystal, places: Array, link: Link) -> float:
    step = (places[link.b] + link.offset - places[link.a]) @ crystal.axes
    return round(float(np.linalg.norm(step)), 9)


def _reach(crystal: Crystal, cutoff: float) -> list[int]:
    """How many cells away along each axis an atom within ``cutoff`` can be."""
    inverse = np.linalg.inv(crystal.axes)
    return [int(np.ceil(cutoff * np.linalg.norm(inverse[:, k]))) + 1 for k in range(3)]


def _links(crystal: Crystal, places: Array, cutoff: float) -> set[Link]:
    magnetic = crystal.magnetic
    cells = list(product(*(range(-n, n + 1) for n in _reach(crystal, cutoff))))
    if len(cells) * len(magnetic) ** 2 > 50 * MAX_LINKS:
        raise ModelError(f"within {cutoff:g} Å are too many pairs; give a smaller distance")
    grid = np.array(cells, dtype=np.float64)
    found: set[Link] = set()
    for a in magnetic:
        for b in magnetic:
            steps = (places[b] + grid - places[a]) @ crystal.axes
            lengths = np.linalg.norm(steps, axis=1)
            for k in np.flatnonzero((lengths <= cutoff + 1e-6) & (lengths > 1e-6)):
                x, y, z = cells[k]
                found.add(Link(a, b, (x, y, z)).canonical())
    return found


def _orbits(crystal: Crystal, places: Array, links: set[Link]) -> list[list[Link]]:
    images = []  # of every magnetic ion by every operation: the ion it becomes, and the cell
    for rotation, shift in zip(crystal.rotations, crystal.shifts, strict=True):
        table = {}
        for a in crystal.magnetic:
            moved = rotation @ places[a] + shift
            for b in crystal.magnetic:
                step = moved - places[b]
                cell = np.rint(step)
                if np.linalg.norm((step - cell) @ crystal.axes) < SAME:
                    table[a] = (b, cell.astype(int))
                    break
            else:
                raise ModelError(
                    "its symmetry operations do not carry the ions into each other; correct them"
                )
        images.append((rotation, table))
    left = set(links)
    orbits = []
    for link in sorted(links):
        if link not in left:
            continue
        orbit, front = {link}, [link]
        while front:  # the listed operations need not be a group: close the set
            one = front.pop()
            for rotation, table in images:
                a, start = table[one.a]
                b, end = table[one.b]
                turned = np.rint(rotation @ np.array(one.offset)).astype(int) + end - start
                x, y, z = turned.tolist()
                other = Link(a, b, (x, y, z)).canonical()
                if other not in orbit:
                    orbit.add(other)
                    front.append(other)
        left -= orbit
        orbits.append(sorted(orbit))
    return orbits


def _counts(crystal: Crystal, orbit: list[Link]) -> tuple[tuple[str, int], ...]:
    ends = [end for link in orbit for end in (link.a, link.b)]
    counts: dict[str, int] = {}
    for k in dict.fromkeys(ends):
        counts.setdefault(crystal.atoms[k].label, ends.count(k))
    return tuple(counts.items())


def _bridges(crystal: Crystal, places: Array, link: Link) -> list[Bridge]:
    import gemmi

    radius = {a.element: gemmi.Element(a.element).covalent_r for a in crystal.atoms}
    first, second = crystal.atoms[link.a], crystal.atoms[link.b]
    start = places[link.a] @ crystal.axes
    end = (places[link.b] + link.offset) @ crystal.axes
    cells = np.array(list(product(*(range(-n, n + 1) for n in _reach(crystal, 6.0)))), dtype=float)
    found = []
    for k, atom in enumerate(crystal.atoms):
        if atom.ion is not None or gemmi.Element(atom.element).is_metal:
            continue
        spots = (places[k] + cells) @ crystal.axes
        to_start, to_end = start - spots, end - spots
        p, q = np.linalg.norm(to_start, axis=1), np.linalg.norm(to_end, axis=1)
        close = (p <= radius[first.element] + radius[atom.element] + SLACK) & (
            q <= radius[second.element] + radius[atom.element] + SLACK
        )
        for n in np.flatnonzero(close & (p > SAME) & (q > SAME)):
            cosine = float(to_start[n] @ to_end[n] / (p[n] * q[n]))
            angle = float(np.degrees(np.arccos(np.clip(cosine, -1, 1))))
            found.append(Bridge(atom.label, round(angle, 6)))
    return sorted(found, key=lambda b: (b.label, b.angle))
