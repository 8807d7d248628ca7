"""Spins, g tensors, bond and ion terms as they stand in a model file, checked one by one."""

from __future__ import annotations

import keyword
import re
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from fractions import Fraction

import numpy as np

from thermo.model.checks import (
    Table,
    fault,
    listing,
    matrix,
    near,
    number,
    show,
    string,
    symmetric_matrix,
    vector,
    word,
)
from thermo.model.spin_model import Matrix

BOND_TERMS = {"+J S.S": 1.0, "-J S.S": -1.0, "+2J S.S": 2.0, "-2J S.S": -2.0}
BOND_FORMS = ("isotropic", "xy", "ising", "antisymmetric")
ION_FORMS = ("axial", "rhombic")
DEFAULT_G = 2.0
# Short by design: a fraction of an arbitrary text, such as "1e99999999", may never be done.
_SPIN = re.compile(r"[0-9]{1,4}(/[0-9]{1,4}|\.[0-9]{0,6})?|\.[0-9]{1,6}")


@dataclass(frozen=True)
class BondTerm:
    """A bond of the cell: basis sites a → b in the cell at ``offset``; A holds the bond_term."""

    a: int
    b: int
    offset: tuple[int, ...]
    coupling: str
    matrix: Matrix
    path: str


@dataclass(frozen=True)
class IonTerm:
    """An ion term of one basis site."""

    site: int
    coupling: str
    matrix: Matrix
    path: str


def read_couplings(value: object, path: str) -> dict[str, float]:
    """The named couplings and their values, in the file's energy unit."""
    if not isinstance(value, dict):
        raise fault(path, f"{show(value)} is not a table; give one line 'name = value' for each")
    for name in value:
        if not (isinstance(name, str) and name.isidentifier()) or keyword.iskeyword(name):
            raise fault(
                path,
                f"{show(name)} cannot name a coupling; use letters, digits and _, "
                "a letter first, and no reserved word such as 'lambda'",
            )
    return {name: number(entry, f"{path}.{name}") for name, entry in value.items()}


def read_spin(value: object, path: str) -> float:
    """A spin ½, 1, 3⁄2 …, as a number or as text such as "1/2"."""
    remedy = "give a positive multiple of 1/2, such as 0.5, 1 or 1.5"
    if isinstance(value, str):
        try:
            if _SPIN.fullmatch(value.strip()) is None:
                raise ValueError
            spin = float(Fraction(value.strip()))
        except (ValueError, ZeroDivisionError):
            raise fault(path, f"{show(value)} is not a spin; {remedy}") from None
    else:
        spin = number(value, path)
    if spin <= 0 or not float(2 * spin).is_integer():
        raise fault(path, f"{show(value)} is not a spin; {remedy}")
    return spin


def read_g(value: object, path: str) -> Matrix:
    """A g tensor, shape (3, 3), from a number, three principal values or a symmetric matrix."""
    if isinstance(value, list):
        if value and all(isinstance(row, list) for row in value):
            tensor = symmetric_matrix(value, path, "a g tensor must be symmetric: make them equal")
        elif len(value) == 3:
            tensor = np.diag(vector(value, path))
        else:
            raise fault(
                path,
                f"has {len(value)} entries; give a number, three principal values "
                "or a symmetric 3x3 matrix",
            )
    else:
        tensor = number(value, path) * np.eye(3)
    if not tensor.any():
        raise fault(path, "g is zero, so the site would carry no moment; give its g, such as 2.0")
    principal = np.linalg.eigvalsh(tensor)
    if np.abs(principal).min() <= 1e-12 * np.abs(principal).max():
        shown = ", ".join(f"{round(v, 12) + 0.0:g}" for v in principal)
        raise fault(
            path,
            f"has the principal values {shown}, and a g of zero is improper; give a small number, "
            "such as 0.001, for a direction that hardly carries a moment",
        )
    return tensor


def known_coupling(value: object, path: str, couplings: Mapping[str, float]) -> str:
    """The name of a coupling that the file has."""
    name = string(value, path)
    if name not in couplings:
        has = f" (it has {', '.join(couplings)})" if couplings else " (it is empty)"
        hint = near(name, couplings) if couplings else "add it there"
        if couplings and not hint.startswith("did"):
            hint = "correct the name or add it there"
        raise fault(path, f"{show(name)} is not in [couplings]{has}; {hint}")
    return name


def site_index(value: object, path: str, names: Sequence[str]) -> int:
    """The index of a site given by its name or by its index counted from 0."""
    if isinstance(value, str):
        if value not in names:
            shown = list(names) if len(names) <= 12 else [*names[:11], names[-1]]
            hint = near(value, names)
            if not hint.startswith("did"):
                hint = f"the names are {', '.join(map(repr, shown))}"
            raise fault(path, f"there is no site {show(value)}; {hint}")
        return list(names).index(value)
    if isinstance(value, bool) or not isinstance(value, int):
        raise fault(path, f"{show(value)} is not a site; give its name, or its index from 0")
    if not 0 <= value < len(names):
        raise fault(
            path,
            f"site index {show(value)} is out of range; with {len(names)} sites it "
            f"runs from 0 to {len(names) - 1}",
        )
    return value


def bond_matrix(table: Table, factor: float) -> Matrix:
    """A of S_iᵀ A S_j from the keys form, vector and matrix; shape (3, 3), bond_term applied.

    Adding 0.0 turns −0.0 into 0.0, which would otherwise enter the digest.
    """
    if table.has("matrix"):
        for other in ("form", "vector"):
            if table.has(other):
                raise fault(
                    table.at(other),
                    "stands beside a matrix, which says it all; give one or the other",
                )
        return factor * matrix(table.get("matrix"), table.at("matrix")) + 0.0
    form = word(table.get("form", "isotropic"), table.at("form"), BOND_FORMS)
    if form == "antisymmetric":
        x, y, z = vector(
            table.need("vector", "the vector [x, y, z] of d·(Si x Sj)"), table.at("vector")
        )
        return factor * np.array([[0.0, z, -y], [-z, 0.0, x], [y, -x, 0.0]]) + 0.0
    if table.has("vector"):
        raise fault(
            table.at("vector"),
            f"has no meaning with the form {form!r}; leave it out or write form = 'antisymmetric'",
        )
    diagonal = {"isotropic": (1.0, 1.0, 1.0), "xy": (1.0, 1.0, 0.0), "ising": (0.0, 0.0, 1.0)}
    return factor * np.diag(diagonal[form]) + 0.0


def ion_matrix(table: Table) -> Matrix:
    """D of Sᵀ D S from the keys form and matrix, shape (3, 3); bond_term plays no part."""
    if table.has("matrix"):
        if table.has("form"):
            raise fault(
                table.at("form"), "stands beside a matrix, which says it all; give one or the other"
            )
        return symmetric_matrix(
            table.get("matrix"),
            table.at("matrix"),
            "the matrix of an ion term must be: make the two entries equal",
        )
    form = word(
        table.need("form", f"one of {', '.join(map(repr, ION_FORMS))}, or a matrix"),
        table.at("form"),
        ION_FORMS,
    )
    if form == "axial":
        return np.diag([-1.0, -1.0, 2.0]) / 3
    return np.diag([1.0, -1.0, 0.0])


def read_bonds(
    value: object,
    path: str,
    names: Sequence[str],
    couplings: Mapping[str, float],
    factor: float,
    dimension: int,
) -> list[BondTerm]:
    """All [[bond]] or [[cell.bond]] entries; ``offset`` is a key only where dimension > 0."""
    keys = ["sites", "coupling", "form", "vector", "matrix"] + ["offset"] * (dimension > 0)
    bonds = []
    for k, entry in enumerate(listing(value, path, f"one [[{path}]] for each bond")):
        table = Table(entry, f"{path}[{k}]", keys)
        sites = listing(
            table.need("sites", "the names of its two sites"),
            table.at("sites"),
            "the names of two sites",
        )
        if len(sites) != 2:
            raise fault(
                table.at("sites"),
                f"names {len(sites)} site(s), but a bond joins two; give two names",
            )
        a, b = (site_index(s, f"{table.at('sites')}[{m}]", names) for m, s in enumerate(sites))
        offset = read_offset(table, dimension)
        if a == b and not any(offset):
            far = " or give the offset of the cell it leads to" if dimension else ""
            raise fault(
                table.at("sites"),
                f"joins site {names[a]!r} to itself; name two different sites{far}",
            )
        coupling = known_coupling(
            table.need("coupling", "the name of one in [couplings]"),
            table.at("coupling"),
            couplings,
        )
        bonds.append(BondTerm(a, b, offset, coupling, bond_matrix(table, factor), table.path))
    return bonds


def read_offset(table: Table, dimension: int) -> tuple[int, ...]:
    """The cell offset of a bond, zero where it is left out."""
    path = table.at("offset")
    offset = listing(table.get("offset", [0] * dimension), path, "whole numbers of cells")
    if len(offset) != dimension:
        raise fault(
            path,
            f"has {len(offset)} entries; the cell repeats in {dimension} "
            "direction(s), so give as many",
        )
    numbers = [number(x, f"{path}[{k}]") for k, x in enumerate(offset)]
    for k, x in enumerate(numbers):
        if not x.is_integer():
            raise fault(f"{path}[{k}]", f"{x:g} is not a whole number of cells; give one")
    return tuple(int(x) for x in numbers)


def read_ions(
    value: object, path: str, names: Sequence[str], couplings: Mapping[str, float]
) -> list[IonTerm]:
    """All [[ion]] or [[cell.ion]] entries, one term for each site named."""
    ions = []
    for k, entry in enumerate(listing(value, path, f"one [[{path}]] for each term")):
        table = Table(entry, f"{path}[{k}]", ["sites", "coupling", "form", "matrix"])
        sites = listing(
            table.need("sites", "the names of its sites"),
            table.at("sites"),
            "the names of its sites",
        )
        if not sites:
            raise fault(table.at("sites"), "names no site; give at least one")
        indices = [site_index(s, f"{table.at('sites')}[{m}]", names) for m, s in enumerate(sites)]
        for m, index in enumerate(indices):
            if index in indices[:m]:
                raise fault(
                    f"{table.at('sites')}[{m}]",
                    f"site {names[index]!r} is named twice; name it once",
                )
        ions += read_ion_term(table, indices, couplings)
    return ions


def read_ion_term(
    table: Table, indices: Sequence[int], couplings: Mapping[str, float]
) -> list[IonTerm]:
    """The same ion term on each of the sites."""
    coupling = known_coupling(
        table.need("coupling", "the name of one in [couplings]"), table.at("coupling"), couplings
    )
    d = ion_matrix(table)
    return [IonTerm(index, coupling, d, table.path) for index in indices]
