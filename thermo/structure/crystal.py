"""Reading a crystal structure: cell, symmetry operations and atoms of a CIF, checked.

A CIF (Hall, Allen and Brown, Acta Cryst. A 47, 655 (1991)) states one atom of each
symmetry-related set; here they are all unfolded. Coordinates are fractions of the cell.
"""

from __future__ import annotations

import os
import re
from dataclasses import dataclass
from fractions import Fraction
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from thermo.errors import FileFormatError, ModelError

Array = NDArray[np.float64]
SAME = 0.3  # Å: images of one atom nearer than this are that atom, rounded off its special place
MAX_BYTES = 50_000_000
LENGTHS = ("_cell_length_a", "_cell_length_b", "_cell_length_c")
ANGLES = ("_cell_angle_alpha", "_cell_angle_beta", "_cell_angle_gamma")
OPERATIONS = ("_space_group_symop_operation_xyz", "_symmetry_equiv_pos_as_xyz")
GROUPS = (
    "_space_group_name_H-M_alt",
    "_space_group_name_h-m_alt",
    "_symmetry_space_group_name_H-M",
    "_symmetry_space_group_name_h-m",
)


@dataclass(frozen=True)
class Ion:
    """A magnetic ion as it was asked for: what it is called, its element, charge and spin."""

    name: str
    element: str
    charge: int | None
    spin: float


@dataclass(frozen=True)
class Atom:
    """One atom of the cell: the label it descends from, its element and place; its ion or None."""

    label: str
    element: str
    place: tuple[float, float, float]
    ion: Ion | None


@dataclass(frozen=True, eq=False)
class Crystal:
    """A unit cell: ``axes`` (3, 3) has the cell's vectors in Å as rows, ``rotations`` (G, 3, 3)
    and ``shifts`` (G, 3) are its symmetry operations on fractional coordinates."""

    title: str
    axes: Array
    rotations: Array
    shifts: Array
    atoms: tuple[Atom, ...]
    formula_units: int | None
    notes: tuple[str, ...]

    @property
    def magnetic(self) -> tuple[int, ...]:
        """Positions in ``atoms`` of the magnetic ions."""
        return tuple(k for k, atom in enumerate(self.atoms) if atom.ion is not None)


def read_ion(text: str) -> Ion:
    """The ion in "Cu2+", or with its spin stated, "Cu2+=1/2" or "Fe1=2" (a label of the file).

    Without a stated spin it is that of Hund's first rule: 3d ions at high spin and half-filled
    4f shells. ModelError where that does not tell.
    """
    import gemmi

    name, _, stated = (part.strip() for part in text.partition("="))
    match = re.fullmatch(r"([A-Z][a-z]?)(\d*)([+-]?)(\w*)", name)
    element = gemmi.Element(match[1]) if match else gemmi.Element("X")
    if match is None or element.atomic_number == 0:
        raise ModelError(
            f"--ion {text[:60]!r} is not an ion; write element and charge, such as Cu2+, or a "
            "label of the file with its spin, such as Cu1=1/2"
        )
    charge = None
    if match[3]:
        charge = int(match[2] or 1) * (1 if match[3] == "+" else -1)
    if stated:
        return Ion(name, element.name, charge, _spin(stated, text))
    spin = None if charge is None else _hund(element.atomic_number, charge)
    if spin is None:
        raise ModelError(
            f"--ion {text[:60]!r} does not tell the spin (known of 3d ions with their charge, at "
            f"high spin, and of half-filled 4f shells); state it, such as {name}=1/2"
        )
    return Ion(name, element.name, charge, spin)


def _spin(text: str, whole: str) -> float:
    try:
        value = Fraction(text)
    except (ValueError, ZeroDivisionError):
        value = Fraction(0)
    if value <= 0 or (2 * value).denominator != 1 or value > 20:
        raise ModelError(
            f"--ion {whole[:60]!r} has the spin {text[:20]!r}; give a multiple of 1/2, such as 3/2"
        )
    return float(value)


def _hund(number: int, charge: int) -> float | None:
    if 21 <= number <= 30:
        electrons = number - 18 - charge
        if 0 < electrons < 10:
            return min(electrons, 10 - electrons) / 2
    if 57 <= number <= 71 and number - 54 - charge == 7:
        return 3.5
    return None


def read_structure(path: str | os.PathLike[str], ions: list[Ion]) -> Crystal:
    """The crystal in a CIF, with ``ions`` marked as magnetic.

    FileFormatError where the file cannot be read or is cut, ModelError where what it states is
    no use: no cell, no symmetry, a magnetic ion on a partly occupied place, two atoms on one
    place, an ion that is not there. ``notes`` tells what was assumed. Cost: negligible.
    """
    import gemmi

    name = os.fspath(path)
    text = _text(name)
    try:
        document = gemmi.cif.read_string(text)
    except (ValueError, RuntimeError) as error:
        reason = " ".join(str(error).split())[:200]
        raise FileFormatError(
            f"{name} is no whole CIF ({reason}); it may be cut or damaged, so get it again"
        ) from None
    blocks = [b for b in document if b.find_values("_atom_site_fract_x")]
    if len(blocks) != 1:
        raise FileFormatError(
            f"{name} has {len(blocks)} data blocks with atoms (_atom_site_fract_x) where one "
            "belongs; it may be cut, or keep one block"
        )
    notes = []
    if not text.endswith(("\n", "\r")):
        notes.append("The CIF does not end with the end of a line, so it may have been cut.")
    try:
        return _crystal(blocks[0], ions, notes)
    except ModelError as error:
        raise ModelError(f"{name}: {error}") from None


def _text(name: str) -> str:
    try:
        with Path(name).open("rb") as stream:
            raw = stream.read(MAX_BYTES + 1)
    except (OSError, ValueError) as error:
        reason = getattr(error, "strerror", None) or str(error)
        raise FileFormatError(f"the CIF {name!r} cannot be read ({reason}); check it") from None
    if len(raw) > MAX_BYTES:
        raise FileFormatError(f"{name} is larger than any CIF of a crystal; check its name")
    try:
        return raw.decode("utf-8")
    except UnicodeDecodeError:
        return raw.decode("latin-1")


def _crystal(block: Any, ions: list[Ion], notes: list[str]) -> Crystal:
    import gemmi

    cell = gemmi.UnitCell(*(_cell_number(block, tag) for tag in (*LENGTHS, *ANGLES)))
    axes = np.array(cell.orth.mat.tolist(), dtype=np.float64).T
    if not cell.volume > 1e-3 or not np.isfinite(axes).all():
        raise ModelError("its cell has no volume; check the cell lengths and angles")
    rotations, shifts = _operations(block, notes)
    listed = _listed(block, ions, notes)
    atoms = _unfold(listed, rotations, shifts, axes)
    _check_formula(block, atoms, ions, notes)
    units = block.find_value("_cell_formula_units_Z")
    number = gemmi.cif.as_number(units) if units else np.nan
    whole = int(number) if np.isfinite(number) and number >= 1 and number == int(number) else None
    return Crystal(block.name, axes, rotations, shifts, tuple(atoms), whole, tuple(notes))


def _cell_number(block: Any, tag: str) -> float:
    import gemmi

    text = block.find_value(tag)
    value = gemmi.cif.as_number(text) if text else np.nan
    top = 180.0 if "angle" in tag else 1e4
    if not 0 < value < top:
        what = f"is {text}" if text else "is missing"
        raise ModelError(f"{tag} {what}, and without the cell there are no distances; add it")
    return float(value)


def _operations(block: Any, notes: list[str]) -> tuple[Array, Array]:
    import gemmi

    for tag in OPERATIONS:
        words = [gemmi.cif.as_string(w) for w in block.find_values(tag)]
        if words:
            try:
                operations = [gemmi.Op(w) for w in words]
            except (ValueError, RuntimeError):
                raise ModelError(
                    f"{tag} has an entry that is no operation such as 'x, -y, z+1/2'; correct it"
                ) from None
            break
    else:
        group = None
        for tag in GROUPS:
            word = block.find_value(tag)
            if word and gemmi.cif.as_string(word):
                name = gemmi.cif.as_string(word)
                group = gemmi.find_spacegroup_by_name(name)
                if group is None:
                    raise ModelError(
                        f"it lists no symmetry operations and the space group {name!r} is unknown; "
                        f"add {OPERATIONS[0]}"
                    )
                break
        if group is None:
            raise ModelError(
                "it states no symmetry operations and no space group, so most atoms would be "
                f"missing; add {OPERATIONS[0]} (only 'x, y, z' if all atoms are listed)"
            )
        notes.append(
            f"The CIF lists no symmetry operations; those of its space group {group.xhm()} "
            "are used."
        )
        operations = list(group.operations())
    rotations = np.array([o.rot for o in operations], dtype=np.float64) / gemmi.Op.DEN
    shifts = np.array([o.tran for o in operations], dtype=np.float64) / gemmi.Op.DEN
    return rotations, shifts


@dataclass(frozen=True, eq=False)
class _Listed:
    label: str
    element: str
    place: Array
    ion: Ion | None


def _listed(block: Any, ions: list[Ion], notes: list[str]) -> list[_Listed]:
    import gemmi

    table = block.find(
        "_atom_site_",
        ["label", "fract_x", "fract_y", "fract_z", "?type_symbol", "?occupancy"],
    )
    if not len(table):
        raise ModelError("its atoms lack labels or coordinates; add _atom_site_label and fract_*")
    found: list[_Listed] = []
    kinds: list[str] = []
    hit: set[str] = set()
    for row in table:
        label = row.str(0)
        kind = row.str(4) if row.has(4) and row.str(4) else label
        match = re.match(r"([A-Z][a-z]?)(?:(\d+)([+-])|([+-]))?", kind)
        element = gemmi.Element(match[1]) if match else gemmi.Element("X")
        if match and element.atomic_number == 0:
            element = gemmi.Element(match[1][0])
        if match is None or element.atomic_number == 0:
            raise ModelError(f"the atom {label!r} is of no known element; correct its type symbol")
        charge = None
        if match[3] or match[4]:
            charge = int(match[2] or 1) * (1 if (match[3] or match[4]) == "+" else -1)
        kinds.append(kind if charge is not None else f"{element.name} ({label})")
        place = np.array([gemmi.cif.as_number(row[k]) for k in (1, 2, 3)])
        if not np.isfinite(place).all():
            raise ModelError(f"the atom {label!r} has no coordinates; add them or remove it")
        ion = next((i for i in ions if _means(i, label, element.name, charge)), None)
        share = gemmi.cif.as_number(row[5]) if row.has(5) else 1.0
        if np.isfinite(share) and abs(share - 1) > 1e-6:
            if ion is not None:
                raise ModelError(
                    f"the magnetic ion {label!r} fills {share:g} of its place, and a model with "
                    "ions missing at random is not one cluster; give an ordered structure"
                )
            notes.append(f"{label} fills {share:g} of its place; it only shows in the bridges.")
        if ion is not None:
            hit.add(ion.name)
            if ion.charge is not None and charge is None:
                notes.append(f"The CIF states no charge of {label}; it is taken as {ion.name}.")
        found.append(_Listed(label, element.name, place, ion))
    for ion in ions:
        if ion.name not in hit:
            known = ", ".join(dict.fromkeys(kinds))[:200]
            raise ModelError(f"there is no ion {ion.name!r} in it; choose from {known}")
    return found


def _means(ion: Ion, label: str, element: str, charge: int | None) -> bool:
    if ion.name == label:
        return True
    bare = ion.charge is None and ion.name == ion.element
    alike = bare or (ion.charge is not None and charge in (None, ion.charge))
    return element == ion.element and alike


def _unfold(listed: list[_Listed], rotations: Array, shifts: Array, axes: Array) -> list[Atom]:
    atoms: list[Atom] = []
    places: list[Array] = []
    for entry in listed:
        # The mean over the operations that leave the atom in place puts it on its special
        # position exactly, where the file has rounded (0.3333).
        images = entry.place @ rotations.transpose(0, 2, 1) + shifts
        steps = images - entry.place
        steps -= np.rint(steps)
        near = np.linalg.norm(steps @ axes, axis=1) < SAME
        place = entry.place + (steps[near].mean(axis=0) if near.any() else 0)
        own: list[Array] = []
        for image in place @ rotations.transpose(0, 2, 1) + shifts:
            image = image - np.floor(image + 1e-9)
            if not any(_apart(image, other, axes) < SAME for other in own):
                own.append(image)
        for image in own:
            for other, atom in zip(places, atoms, strict=True):
                if _apart(image, other, axes) < SAME and (atom.ion or entry.ion):
                    raise ModelError(
                        f"the atoms {atom.label!r} and {entry.label!r} are on one place, and a "
                        "magnetic ion must have its place alone; remove one, or give an ordered "
                        "structure"
                    )
        places += own
        for image in own:
            x, y, z = image.tolist()
            atoms.append(Atom(entry.label, entry.element, (x, y, z), entry.ion))
    return atoms


def _apart(a: Array, b: Array, axes: Array) -> float:
    step = a - b
    return float(np.linalg.norm((step - np.rint(step)) @ axes))


def _check_formula(block: Any, atoms: list[Atom], ions: list[Ion], notes: list[str]) -> None:
    """A loop of atoms that was cut between two lines is still a CIF; its formula tells."""
    import gemmi

    text, units = (block.find_value(t) for t in ("_chemical_formula_sum", "_cell_formula_units_Z"))
    number = gemmi.cif.as_number(units) if units else np.nan
    if not text or not number > 0:
        return
    for word in gemmi.cif.as_string(text).split():
        match = re.fullmatch(r"([A-Z][a-z]?)(\d*\.?\d*)", word)
        if match is None:
            continue
        want = float(match[2] or 1) * number
        have = sum(atom.element == match[1] for atom in atoms)
        if abs(have - want) > 1e-3 * want:
            told = f"its cell has {have} {match[1]} where its formula tells {want:g}"
            if any(ion.element == match[1] for ion in ions):
                raise ModelError(f"{told}; it may be cut, or correct the formula")
            notes.append(f"The CIF is not whole: {told}.")
