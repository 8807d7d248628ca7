"""The lattices known by name: one entry of data each, expanded by the same code as any cell.

To add one, add an entry to LATTICES: the basis sites, how many directions repeat, and for each
role the bonds of one cell as (from, to, offset of the cell of "to"), each bond once. Bonds that
carry a vector or an asymmetric matrix run from the first site to the second. ``positions`` and
``vectors`` (in units of the nearest or cell distance) serve the structure factor, and the tests,
which find the neighbours again by distance.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from math import sqrt
from typing import Any

from thermo.model.cells import Cell
from thermo.model.checks import Table, fault, listing, near, show, string
from thermo.model.positions import fractional
from thermo.model.repetition import read_boundary, read_superlattice
from thermo.model.spin_model import Matrix
from thermo.model.terms import (
    DEFAULT_G,
    BondTerm,
    IonTerm,
    bond_matrix,
    known_coupling,
    read_g,
    read_ion_term,
    read_spin,
)

RoleBonds = tuple[tuple[str, str, tuple[int, ...]], ...]


@dataclass(frozen=True)
class Lattice:
    """A named lattice as data."""

    name: str
    basis: tuple[str, ...]
    roles: Mapping[str, RoleBonds]
    vectors: tuple[tuple[float, ...], ...]
    positions: tuple[tuple[float, ...], ...]
    size_counts_sites: bool = False

    @property
    def dimension(self) -> int:
        """The number of directions that repeat."""
        return len(self.vectors)


def _same(*offsets: tuple[int, ...], site: str = "A") -> RoleBonds:
    return tuple((site, site, offset) for offset in offsets)


def _from_to(a: str, b: str, *offsets: tuple[int, ...]) -> RoleBonds:
    return tuple((a, b, offset) for offset in offsets)


_HALF = sqrt(3) / 2
_HEX = ((1.0, 0.0), (0.5, _HALF))
_HEX_STEPS = ((1, 0), (0, 1), (1, -1))

LATTICES: tuple[Lattice, ...] = (
    Lattice(
        name="chain",
        basis=("A",),
        roles={"nearest": _same((1,)), "next": _same((2,))},
        vectors=((1.0,),),
        positions=((0.0,),),
        size_counts_sites=True,
    ),
    # The same name with the roles of an alternating chain, whose cell holds two sites.
    Lattice(
        name="chain",
        basis=("A", "B"),
        roles={
            "strong": _from_to("A", "B", (0,)),
            "weak": _from_to("B", "A", (1,)),
            "next": _same((1,)) + _same((1,), site="B"),
        },
        vectors=((2.0,),),
        positions=((0.0,), (1.0,)),
        size_counts_sites=True,
    ),
    Lattice(
        name="ladder",
        basis=("A", "B"),
        roles={
            "leg": _same((1,)) + _same((1,), site="B"),
            "rung": _from_to("A", "B", (0,)),
            "diagonal": _from_to("A", "B", (1,)) + _from_to("B", "A", (1,)),
        },
        vectors=((1.0, 0.0),),
        positions=((0.0, 0.0), (0.0, 1.0)),
    ),
    Lattice(
        name="square",
        basis=("A",),
        roles={"nearest": _same((1, 0), (0, 1)), "diagonal": _same((1, 1), (1, -1))},
        vectors=((1.0, 0.0), (0.0, 1.0)),
        positions=((0.0, 0.0),),
    ),
    Lattice(
        name="triangular",
        basis=("A",),
        roles={"nearest": _same(*_HEX_STEPS), "next": _same((1, 1), (2, -1), (-1, 2))},
        vectors=_HEX,
        positions=((0.0, 0.0),),
    ),
    Lattice(
        name="honeycomb",
        basis=("A", "B"),
        roles={
            "nearest": _from_to("A", "B", (0, 0), (-1, 0), (0, -1)),
            "next": _same(*_HEX_STEPS) + _same(*_HEX_STEPS, site="B"),
        },
        vectors=_HEX,
        positions=((0.0, 0.0), (0.5, _HALF / 3)),
    ),
    Lattice(
        name="kagome",
        basis=("A", "B", "C"),
        roles={
            "nearest": _from_to("A", "B", (0, 0), (-1, 0))
            + _from_to("A", "C", (0, 0), (0, -1))
            + _from_to("B", "C", (0, 0), (1, -1)),
            "next": _from_to("A", "B", (0, -1), (-1, 1))
            + _from_to("A", "C", (-1, 0), (1, -1))
            + _from_to("B", "C", (1, 0), (0, -1)),
        },
        vectors=_HEX,
        positions=((0.0, 0.0), (0.5, 0.0), (0.25, _HALF / 2)),
    ),
    Lattice(
        name="cubic",
        basis=("A",),
        roles={
            "nearest": _same((1, 0, 0), (0, 1, 0), (0, 0, 1)),
            "next": _same((1, 1, 0), (1, -1, 0), (1, 0, 1), (1, 0, -1), (0, 1, 1), (0, 1, -1)),
        },
        vectors=((1.0, 0.0, 0.0), (0.0, 1.0, 0.0), (0.0, 0.0, 1.0)),
        positions=((0.0, 0.0, 0.0),),
    ),
)

KEYS = ("name", "size", "boundary", "spin", "g", "couplings", "ions")


def read_lattice(value: object, couplings: Mapping[str, float], factor: float) -> Cell:
    """The cell and repetition of a [lattice] table."""
    table = Table(value, "lattice", KEYS)
    name = string(table.need("name", "the name of a lattice, such as 'chain'"), "lattice.name")
    if name not in (names := list(dict.fromkeys(entry.name for entry in LATTICES))):
        raise fault("lattice.name", f"there is no lattice {show(name)}; {near(name, names)}")
    given = table.need("couplings", "a coupling for each role in use")
    lattice = choose(name, given)
    need = "the number of sites" if lattice.size_counts_sites else "the number of cells"
    superlattice = read_superlattice(
        table.need("size", f"{need} along each direction, such as {[4] * lattice.dimension}"),
        "lattice.size",
        len(lattice.basis) if lattice.size_counts_sites else 1,
        lattice.dimension,
    )
    periodic = read_boundary(
        table.get("boundary", "periodic"), "lattice.boundary", len(superlattice)
    )
    bonds = []
    roles = Table(given, "lattice.couplings", list(lattice.roles))
    for role in roles.values:
        bonds += read_role(lattice, role, roles, couplings, factor)
    ions: list[IonTerm] = []
    for k, entry in enumerate(listing(table.get("ions", []), "lattice.ions", "a list of tables")):
        term = Table(entry, f"lattice.ions[{k}]", ("coupling", "form", "matrix"))
        ions += read_ion_term(term, range(len(lattice.basis)), couplings)
    return Cell(
        names=lattice.basis,
        spins=read_basis_spins(table, lattice),
        g=read_basis_g(table, lattice),
        bonds=tuple(bonds),
        ions=tuple(ions),
        superlattice=superlattice,
        periodic=periodic,
        path="lattice.size",
        positions=fractional(lattice.vectors, lattice.positions),
    )


def choose(name: str, given: object) -> Lattice:
    """The entry of this name whose roles fit; the error names what each offers."""
    entries = [entry for entry in LATTICES if entry.name == name]
    if not isinstance(given, dict):
        raise fault(
            "lattice.couplings",
            f'{show(given)} is not a table; write it as {{ {next(iter(entries[0].roles))} = "J" }}',
        )
    for entry in entries:
        if set(given) <= set(entry.roles):
            return entry
    known = list(dict.fromkeys(role for entry in entries for role in entry.roles))
    for role in given:
        if role not in known:
            raise fault(
                f"lattice.couplings.{role}",
                f"the {name} lattice has no such role; {near(role, known)}",
            )
    offers = " or ".join(", ".join(entry.roles) for entry in entries)
    raise fault(
        "lattice.couplings",
        f"the roles {', '.join(given)} do not go together on a {name}; choose among {offers}",
    )


def read_role(
    lattice: Lattice, role: str, roles: Table, couplings: Mapping[str, float], factor: float
) -> list[BondTerm]:
    """The bonds of one role: a coupling's name, a table with its form, or a list of these."""
    given = roles.get(role)
    path = roles.at(role)
    entries: list[tuple[str, Any]] = [(path, given)]
    if isinstance(given, list):
        if not given:
            raise fault(path, "names no coupling; give one or leave the role out")
        entries = [(f"{path}[{k}]", entry) for k, entry in enumerate(given)]
    bonds = []
    for where, entry in entries:
        plain = isinstance(entry, str)
        if not plain and not isinstance(entry, dict):
            raise fault(
                where,
                f"{show(entry)} is not a coupling; give its name in quotes, or a "
                "table such as {coupling = 'J', form = 'ising'}",
            )
        term = Table(
            {"coupling": entry} if plain else entry, where, ("coupling", "form", "vector", "matrix")
        )
        coupling = known_coupling(
            term.need("coupling", "the name of one in [couplings]"),
            where if plain else term.at("coupling"),
            couplings,
        )
        a = bond_matrix(term, factor)
        bonds += [
            BondTerm(lattice.basis.index(m), lattice.basis.index(n), offset, coupling, a, where)
            for m, n, offset in lattice.roles[role]
        ]
    return bonds


def read_basis_spins(table: Table, lattice: Lattice) -> tuple[float, ...]:
    """One spin for all, a list with one for each basis site, or a table by their names."""
    given = table.need("spin", "the spin of its sites, such as 0.5")
    count = len(lattice.basis)
    if isinstance(given, dict):
        named = Table(given, "lattice.spin", lattice.basis)
        return tuple(
            read_spin(named.need(s, f"the spin of site {s!r}"), named.at(s)) for s in lattice.basis
        )
    if isinstance(given, list):
        if len(given) != count:
            raise fault(
                "lattice.spin",
                f"has {len(given)} entries; this {lattice.name} has "
                f"{count} site(s) in its cell, so give one number or {count}",
            )
        return tuple(read_spin(s, f"lattice.spin[{k}]") for k, s in enumerate(given))
    return (read_spin(given, "lattice.spin"),) * count


def read_basis_g(table: Table, lattice: Lattice) -> tuple[Matrix, ...]:
    """One g for all, as at a site, or a table by the names of the basis sites."""
    given = table.get("g", DEFAULT_G)
    if isinstance(given, dict):
        named = Table(given, "lattice.g", lattice.basis)
        return tuple(read_g(named.get(s, DEFAULT_G), named.at(s)) for s in lattice.basis)
    return (read_g(given, "lattice.g"),) * len(lattice.basis)
