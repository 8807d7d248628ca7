"""Reading a model file: strict, and every fault is one sentence with the path to the key.

Every key of a model file (positions in lists count from 0):

    format = 1                    required
    title = "..."                 default "untitled"
    energy_unit                   required: "K", "meV", "cm-1", or "1" (dimensionless)
    bond_term                     required: "+J S.S", "-J S.S", "+2J S.S" or "-2J S.S"
    ions_per_formula = 1          magnetic ions in one formula unit
    finite = false                true: the cluster is all there is (a molecule, a ring too), so no
                                  temperature is too low for its size
    [couplings]  name = value     required; in the energy unit; a name is letters, digits and _

and one of the three ways to state the cluster:

    [[site]]     name             default: its position
                 spin             required: 0.5, 1, 1.5 ... or "1/2"
                 g                default 2.0; a number, three principal values, a 3x3 matrix
    [[bond]]     sites            required: two names or positions
                 coupling         required: a name in [couplings]
                 form             "isotropic" (default), "xy", "ising", "antisymmetric"
                 vector           d of d.(Si x Sj), with the antisymmetric form only
                 matrix           A of Si.A.Sj, 3x3, instead of form
    [[ion]]      sites            required: names or positions, one term on each
                 coupling         required; bond_term plays no part: the term is +c S.D.S
                 form             "axial" Sz^2 - S(S+1)/3, "rhombic" Sx^2 - Sy^2
                 matrix           D, 3x3 symmetric, instead of form

    [cell]       repeat           required: cells along each of 1 to 3 directions, or the integer
                                  matrix whose rows are the superlattice vectors, in cells
                 boundary         "periodic" (default) or "open", or one word for each direction
    [[cell.site]], [[cell.bond]], [[cell.ion]]    as above, and in a bond
                 offset           the cell of its second site, default the same cell
                 position         of a site in units of the cell's vectors, one number for each
                                  direction; for all sites or none; only S(q) needs it

    [lattice]    name             required: chain, ladder, square, triangular, honeycomb,
                                  kagome, cubic
                 size             required: as repeat; a chain's counts its sites, a ladder's
                                  its rungs, the others' their cells
                 boundary         as in [cell]
                 spin             required: one, a list, or a table by site (A, B, C) of the cell
                 g                default 2.0; as at a site for all, or a table by site
                 couplings        required: role = "J", or = {coupling = "J", form = ...}, or a
                                  list of these. Roles: chain nearest, next, or strong, weak,
                                  next; ladder leg, rung, diagonal (both of them); square
                                  nearest, diagonal; the others nearest, next
                 ions             a list of {coupling = ..., form = ...}, each on all sites
"""

from __future__ import annotations

import json
import os
import tomllib
from collections.abc import Mapping
from pathlib import Path
from typing import Any

import numpy as np

from thermo.errors import ModelError
from thermo.model.cells import Cell, expand
from thermo.model.checks import Table, fault, listing, number, show, string, whole, word
from thermo.model.lattices import read_lattice
from thermo.model.positions import check_positions, read_position
from thermo.model.repetition import read_boundary, read_superlattice
from thermo.model.spin_model import SpinModel
from thermo.model.terms import (
    BOND_TERMS,
    DEFAULT_G,
    read_bonds,
    read_couplings,
    read_g,
    read_ions,
    read_spin,
)

ENERGY_UNITS = ("K", "meV", "cm-1", "1")
KEYS = (
    "format",
    "title",
    "energy_unit",
    "bond_term",
    "ions_per_formula",
    "finite",
    "couplings",
    "site",
    "bond",
    "ion",
    "cell",
    "lattice",
)
MAX_BYTES = 8_000_000  # far beyond any model; keeps a wrong file from being read to its end


def read_model(source: str | os.PathLike[str] | Mapping[str, Any]) -> SpinModel:
    """The model in a TOML (or JSON) file, or in a mapping of the same shape.

    ModelError tells the first fault in one sentence, led by the file's name and the path to
    the key. The cost is negligible.
    """
    if isinstance(source, Mapping):
        try:
            data = plain(source)
        except RecursionError:
            raise ModelError("the mapping is nested without end; give plain tables") from None
        # NaN is refused by build; until then the text only has to exist.
        return build(data, json.dumps(data, ensure_ascii=False), "mapping")
    if not isinstance(source, str | os.PathLike):
        raise ModelError(f"{show(source)} is not a model; give the path of a file or a mapping")
    path = os.fspath(source)
    text = read_text(path)
    try:
        return build(parse(text), text, path)
    except ModelError as error:
        raise ModelError(f"{path}: {error}") from None


def read_model_text(text: str) -> SpinModel:
    """The model in a text: TOML, or JSON where it starts with "{"; faults as in read_model."""
    if not isinstance(text, str):
        raise ModelError(f"{show(text)} is not the text of a model; give its TOML as a string")
    return build(parse(text), text, "text")


def read_text(path: str) -> str:
    """The text of a model file; ModelError where there is none."""
    try:
        with Path(path).open("rb") as stream:
            raw = stream.read(MAX_BYTES + 1)
    except (OSError, ValueError) as error:
        if Path(path).is_dir():
            raise ModelError(f"{path} is a directory; give the model file in it") from None
        reason = getattr(error, "strerror", None) or str(error)
        raise ModelError(
            f"the model file {path!r} cannot be read ({reason}); check the path"
        ) from None
    if len(raw) > MAX_BYTES:
        raise ModelError(
            f"{path} is larger than {MAX_BYTES // 1_000_000} MB, so it is no model "
            "file; give the TOML file"
        )
    try:
        text = raw.decode("utf-8-sig")
    except UnicodeDecodeError:
        text = "\0"
    if "\0" in text:
        raise ModelError(
            f"{path} is not a text in UTF-8, so it is no model file; give the TOML "
            "file, saved as UTF-8"
        )
    return text


def parse(text: str) -> dict[str, Any]:
    """The tables in a text of TOML, or of JSON where it starts with "{"."""
    is_json = text.lstrip().startswith("{")
    kind = "JSON" if is_json else "TOML"
    try:
        if not is_json:
            return tomllib.loads(text)
        data: dict[str, Any] = json.loads(text, object_pairs_hook=_no_duplicates)
        return data
    except (tomllib.TOMLDecodeError, json.JSONDecodeError) as error:
        message = str(error).replace("\n", " ")
    except (RecursionError, ValueError):
        # Lists nested without end, or an integer of thousands of digits.
        message = "it is nested too deeply or holds too long a number"
    raise ModelError(f"not valid {kind}: {message}; correct the text there") from None


def _no_duplicates(pairs: list[tuple[str, Any]]) -> dict[str, Any]:
    result = dict(pairs)
    if len(result) < len(pairs):
        names = [name for name, _ in pairs]
        twice = next(name for name in names if names.count(name) > 1)
        raise ModelError(f"the key {show(twice)} is given twice; give it once")
    return result


def plain(value: Any, path: str = "") -> Any:
    """A mapping's contents as dict, list, str, int, float and bool only."""
    if isinstance(value, Mapping):
        for key in value:
            if not isinstance(key, str):
                raise fault(path, f"{show(key)} is not a key; keys are strings")
        return {str(k): plain(v, f"{path}.{k}" if path else str(k)) for k, v in value.items()}
    if isinstance(value, np.ndarray | np.generic):
        value = value.tolist()
    if isinstance(value, list | tuple):
        return [plain(v, f"{path}[{k}]") for k, v in enumerate(value)]
    if isinstance(value, int) and value.bit_length() > 1000:
        raise fault(path, "the number has hundreds of digits; give a smaller one")
    if isinstance(value, str | int | float):
        return value
    raise fault(
        path, f"{show(value)} has no place in a model; give numbers, strings, lists and mappings"
    )


def build(data: dict[str, Any], text: str, source: str) -> SpinModel:
    """The model from parsed tables: checked, then expanded."""
    table = Table(data, "", KEYS)
    version = whole(table.need("format", "format = 1"), "format")
    if version != 1:
        raise fault("format", f"{version} is not a format this version reads; write format = 1")
    title = string(table.get("title", "untitled"), "title")
    unit = word(
        table.need("energy_unit", "one of 'K', 'meV', 'cm-1' or '1' (dimensionless)"),
        "energy_unit",
        ENERGY_UNITS,
    )
    offer = (
        "the term one bond adds to H, one of "
        + ", ".join(map(repr, BOND_TERMS))
        + ", since authors differ in the sign and factor of J"
    )
    bond_term = table.need("bond_term", offer)
    if not isinstance(bond_term, str) or bond_term not in BOND_TERMS:
        # No guess at the nearest spelling: it would be a guess at the sign.
        raise fault("bond_term", f"{show(bond_term)} is not known; give {offer}")
    per_formula = number(table.get("ions_per_formula", 1), "ions_per_formula")
    if per_formula <= 0:
        raise fault(
            "ions_per_formula",
            f"{per_formula:g} is not positive; give the number of "
            "magnetic ions in one formula unit",
        )
    finite = table.get("finite", False)
    if not isinstance(finite, bool):
        raise fault(
            "finite",
            f"{show(finite)} is neither true nor false; write true where the cluster is a "
            "molecule, false where it stands for an endless lattice",
        )
    couplings = read_couplings(
        table.need("couplings", "a table [couplings] with a line 'name = value' for each"),
        "couplings",
    )
    cluster = expand(cell := read_cluster(table, couplings, BOND_TERMS[bond_term]))
    used = {bond.coupling for bond in cell.bonds} | {ion.coupling for ion in cell.ions}
    notes = [
        f"couplings.{name}: no bond or ion term uses it, so its value has no effect."
        for name in couplings
        if name not in used
    ]
    largest = max((abs(couplings[name]) for name in used), default=0.0)
    notes += [
        f"couplings.{name}: below 10⁻¹⁰ of the largest, too weak to be told from rounding for sure."
        for name in couplings
        if name in used and 0 < abs(couplings[name]) < 1e-10 * largest
    ]
    return SpinModel(
        title=title,
        energy_unit=unit,
        bond_term=bond_term,
        couplings=couplings,
        sites=cluster.sites,
        bonds=cluster.bonds,
        ions=cluster.ions,
        text=text,
        translations=cluster.translations,
        notes=(*cluster.notes, *notes),
        ions_per_formula=per_formula,
        source=source,
        finite=finite,
        superlattice=cell.superlattice,
        periodic=cell.periodic,
        basis=cell.positions,
    )


def read_cluster(table: Table, couplings: Mapping[str, float], factor: float) -> Cell:
    """The cell of whichever of the three ways the file uses, and no more than one."""
    ways = [key for key in ("site", "cell", "lattice") if table.has(key)]
    if len(ways) > 1:
        raise fault(
            ways[1],
            f"stands beside {ways[0]}, but a file states its cluster in one way; "
            f"remove one of the two",
        )
    if not ways:
        raise ModelError(
            "the file states no cluster; give [[site]] and [[bond]], or [cell], or [lattice]"
        )
    for key in ("bond", "ion"):
        if table.has(key) and ways[0] != "site":
            inside = "cell." + key if ways[0] == "cell" else "lattice.couplings or lattice.ions"
            raise fault(
                key, f"stands beside {ways[0]}, where it belongs under {inside}; move it there"
            )
    if ways[0] == "lattice":
        return read_lattice(table.get("lattice"), couplings, factor)
    if ways[0] == "site":
        return read_cell(table, "", (), (), couplings, factor)
    cell = Table(table.get("cell"), "cell", ("repeat", "boundary", "site", "bond", "ion"))
    rows = read_superlattice(
        cell.need("repeat", "the number of cells along each direction, such as [4, 4]"),
        "cell.repeat",
    )
    periodic = read_boundary(cell.get("boundary", "periodic"), "cell.boundary", len(rows))
    return read_cell(cell, "cell.", rows, periodic, couplings, factor)


def read_cell(
    table: Table,
    prefix: str,
    rows: tuple[tuple[int, ...], ...],
    periodic: tuple[bool, ...],
    couplings: Mapping[str, float],
    factor: float,
) -> Cell:
    """The sites, bonds and ion terms listed one by one, of a cell or of the whole cluster."""
    names: list[str] = []
    spins, tensors, positions = [], [], []
    where = prefix + "site"
    for k, entry in enumerate(listing(table.get("site", []), where, f"one [[{where}]] for each")):
        keys = ("name", "spin", "g", "position") if rows else ("name", "spin", "g")
        site = Table(entry, f"{where}[{k}]", keys)
        name = string(site.get("name", str(k)), site.at("name"))
        if name in names:
            raise fault(
                site.at("name"),
                f"{show(name)} is the name of {where}"
                f"[{names.index(name)}] already; give each site its own",
            )
        names.append(name)
        spins.append(read_spin(site.need("spin", "the spin, such as 0.5"), site.at("spin")))
        tensors.append(read_g(site.get("g", DEFAULT_G), site.at("g")))
        if site.has("position"):
            positions.append(read_position(site.get("position"), site.at("position"), len(rows)))
    if not names:
        raise fault(where, f"the cluster is empty; give at least one [[{where}]]")
    check_positions(positions, names, where)
    bonds = read_bonds(table.get("bond", []), prefix + "bond", names, couplings, factor, len(rows))
    ions = read_ions(table.get("ion", []), prefix + "ion", names, couplings)
    return Cell(
        tuple(names),
        tuple(spins),
        tuple(tensors),
        tuple(bonds),
        tuple(ions),
        rows,
        periodic,
        prefix + ("repeat" if rows else "site"),
        tuple(positions),
    )
