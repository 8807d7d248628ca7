"""What ``partita structure`` takes and does."""

from __future__ import annotations

import os
from pathlib import Path
from typing import Annotated

import typer

from thermo.arguments import check_source, check_target
from thermo.errors import RangeError
from thermo.messages import confirm, tell_notes

CifFile = Annotated[Path, typer.Argument(metavar="FILE", help="Crystal structure (CIF).")]
Ions = Annotated[
    list[str],
    typer.Option(
        "--ion",
        metavar="ION",
        help='Magnetic ion, such as Cu2+, or with its spin "Cu2+=1/2"; give one for each kind.',
    ),
]
Within = Annotated[
    float, typer.Option(metavar="D", help="Longest distance of two ions, in angstrom.")
]
Repeat = Annotated[
    str | None,
    typer.Option(
        metavar="CELLS", help='Supercell: "2,2,1", or its vectors, "1,1,0; -1,1,0; 0,0,1".'
    ),
]
Output = Annotated[
    Path | None,
    typer.Option("--output", "-o", metavar="FILE", help="Model file to write (.toml)."),
]


def run_structure(
    cif: CifFile,
    ion: Ions,
    within: Within = 6.0,
    repeat: Repeat = None,
    output: Output = None,
) -> None:
    """List a crystal's neighbour shells, and write a model file.

    Pairs of magnetic ions that the crystal's symmetry makes equal share one coupling.
    """
    if (repeat is None) != (output is None):
        raise RangeError("--repeat and --output belong together; give both, or neither to list")
    check_source(cif)
    if output is not None:
        check_target(output, (".toml",), sources=(cif,))
    from thermo.storage import write_failure
    from thermo.structure import find_shells, model_text, read_ion, read_repeat, read_structure
    from thermo.structure.writing import describe

    crystal = read_structure(cif, [read_ion(word) for word in ion])
    tell_notes(crystal.notes)
    shells = find_shells(crystal, within)
    for shell in shells:
        print(f"{shell.name:4} {describe(shell)}; {len(shell.links)} a cell")
    if output is None or repeat is None:
        return
    text, notes = model_text(crystal, shells, read_repeat(repeat))
    tell_notes(notes)
    part = output.with_name(output.name + ".part")
    try:
        part.write_text(text, encoding="utf-8")
        os.replace(part, output)  # whole or not at all
    except OSError as fault:
        part.unlink(missing_ok=True)
        raise write_failure(output, fault) from None
    confirm(f"wrote {output}: {len(shells)} couplings, all 0; set them, or fit them")
