"""The model file of a structure: one named coupling for each shell, on a supercell."""

from __future__ import annotations

import json
from collections.abc import Sequence

from thermo.errors import ModelError
from thermo.model.cells import Superlattice
from thermo.model.reading import read_model_text
from thermo.model.repetition import Rows, read_superlattice
from thermo.structure.crystal import Crystal
from thermo.structure.shells import Shell


def read_repeat(text: str) -> Rows:
    """The supercell in "2,2,1" (cells along a, b, c) or "1,1,0; -1,1,0; 0,0,1" (its vectors)."""
    try:
        rows = [[int(word) for word in row.split(",")] for row in text.split(";")]
    except ValueError:
        raise ModelError(
            f'--repeat {text[:60]!r} is no supercell; write "2,2,1", or its vectors by rows, '
            '"1,1,0; -1,1,0; 0,0,1"'
        ) from None
    return read_superlattice(rows[0] if len(rows) == 1 else rows, "--repeat", 1, 3)


def model_text(crystal: Crystal, shells: Sequence[Shell], repeat: Rows) -> tuple[str, list[str]]:
    """The text of a model file, and notes of what a user must know of it.

    All couplings are 0, for the user or a fit to set. ModelError where the supercell is so short
    that a pair leads an ion to itself, or so large that no spectrum could be had.
    """
    lattice = Superlattice(repeat)
    for shell in shells:
        for link in shell.links:
            if link.a == link.b and not any(lattice.split(link.offset)[0]):
                raise ModelError(
                    f"--repeat: the supercell is too short for {shell.name} ({shell.distance:.4f} "
                    f"Å), whose pairs would lead from an ion to its own image; repeat it more "
                    f"along {_direction(link.offset)}, or give a shorter --within"
                )
    names = _names(crystal)
    notes: list[str] = []
    per_formula = 1
    n_ions = len(crystal.magnetic)
    if crystal.formula_units is None or n_ions % crystal.formula_units:
        notes.append("How many ions a formula unit has is not told; ions_per_formula is set to 1.")
    else:
        per_formula = n_ions // crystal.formula_units
    lines = [
        "# Neighbour shells of a crystal structure; set the couplings, all are 0 now.",
        "format = 1",
        f"title = {json.dumps(crystal.title or 'structure', ensure_ascii=False)}",
        'energy_unit = "K"',
        'bond_term = "+J S.S"',
        f"ions_per_formula = {per_formula}",
        "",
        "[couplings]",
    ]
    lines += [f"{shell.name} = 0.0  # {describe(shell)}" for shell in shells]
    lines += ["", "[cell]", f"repeat = {json.dumps([list(row) for row in repeat])}", ""]
    for k in crystal.magnetic:
        atom = crystal.atoms[k]
        spin = atom.ion.spin if atom.ion is not None else 0.0
        place = ", ".join(f"{x:.9g}" for x in atom.place)
        lines += [
            "[[cell.site]]",
            f'name = "{names[k]}"',
            f"spin = {spin}",
            f"position = [{place}]",
            "",
        ]
    for shell in shells:
        for link in shell.links:
            lines += [
                "[[cell.bond]]",
                f'sites = ["{names[link.a]}", "{names[link.b]}"]',
                f"offset = {list(link.offset)}",
                f'coupling = "{shell.name}"',
                "",
            ]
    text = "\n".join(lines)
    model = read_model_text(text)  # what is written can be read; it also tells doubled pairs
    notes += model.notes
    return text, notes


def describe(shell: Shell) -> str:
    """A shell in one line: distance, neighbours, bridges."""
    counts = ", ".join(f"{count} of each {label}" for label, count in shell.neighbours)
    bridges = ", ".join(f"{b.label} {b.angle:.1f}°" for b in shell.bridges)
    return f"{shell.distance:.4f} Å; {counts}; through {bridges or 'no single atom'}"


def _direction(offset: Sequence[int]) -> str:
    return " and ".join(axis for axis, step in zip("abc", offset, strict=True) if step)


def _names(crystal: Crystal) -> dict[int, str]:
    names: dict[int, str] = {}
    for k in crystal.magnetic:
        label = crystal.atoms[k].label
        clean = "".join(c for c in label if c.isalnum() or c == "_") or "ion"
        number = sum(crystal.atoms[m].label == label for m in crystal.magnetic if m <= k)
        names[k] = f"{clean}_{number}"
    return names
