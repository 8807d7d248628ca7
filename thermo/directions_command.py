"""What ``partita directions`` takes and does."""

from __future__ import annotations

import sys
import time
from typing import Annotated

import typer

from thermo.arguments import (
    brief,
    check_grid_memory,
    check_source,
    check_target,
    grid_files,
    parse_grid,
)
from thermo.errors import RangeError
from thermo.messages import confirm, note, tell_notes
from thermo.options import Memory, ModelFile, Per, TableOutput, Temperatures, Threads, Units
from thermo.process import set_threads
from thermo.progress import work

WORDS = ("x", "y", "z", "powder")

Fields = Annotated[
    str, typer.Option("--field", "-b", metavar="GRID", help='Fields in T, for example "0,1,5".')
]
Axis = Annotated[
    str,
    typer.Option(
        "--axis",
        "-a",
        metavar="AXIS",
        help='Where the field points: x, y, z, a direction "1,1,0" in the frame of the model\'s '
        "matrices, or powder.",
    ),
]
UnitsWord = Annotated[
    Units | None,
    typer.Option(help="Units of the curves; default: molar-si, or reduced without a unit."),
]
PerWord = Annotated[Per, typer.Option(help="Per mole of magnetic ions or of formula units.")]


def parse_axis(text: str) -> str | list[float]:
    """A word, or the numbers of a direction; RangeError where it is neither."""
    word = text.strip()
    if word in WORDS:
        return word
    shape = 'write x, y, z, powder or a direction like "1,1,0"'
    parts = word.strip("[]").split(",")
    try:
        vector = [float(part) for part in parts]
    except ValueError:
        raise RangeError(f"--axis {brief(text)!r} is no direction; {shape}") from None
    if len(vector) != 3:
        raise RangeError(f"--axis {brief(text)!r} has {len(vector)} of three numbers; {shape}")
    return vector


def run_directions(
    model: ModelFile,
    temperature: Temperatures,
    field: Fields = "0",
    axis: Axis = "z",
    units: UnitsWord = None,
    per: PerWord = Per.ion,
    memory: Memory = None,
    threads: Threads = None,
    output: TableOutput = None,
) -> None:
    """Find curves along any axis, or of a powder.

    For any exchange, single-ion terms and g tensors: the moment's three components and the tensor
    of the susceptibility, from the full spectrum at each field; or their powder average.
    """
    temperatures, fields = parse_grid(temperature, "temperature"), parse_grid(field, "field")
    direction = parse_axis(axis)
    check_source(model)
    if output is not None:
        sources = (model, *grid_files(temperature, field))
        check_target(output, (".nc", ".csv"), sources=sources)
    check_grid_memory(len(temperatures), len(fields))
    set_threads(threads)
    import thermo

    spins = thermo.read_model(model)
    tell_notes(spins.notes)
    system = units or (Units.reduced if spins.energy_unit == "1" else Units.si)
    started = time.monotonic()
    found = work(
        lambda report: thermo.directional_curves(
            spins,
            temperatures,
            fields,
            direction,
            system.value,
            per=per.value,
            memory=memory,
            progress=report,
        )
    )
    if found.attrs.get("powder_converged") == "no":
        note(
            f"the powder average still changed by {found.attrs['powder_change']:.1e} of the "
            "largest values at its finest rule; levels cross in some directions, so take higher "
            "temperatures or other fields where that is too much"
        )
    if output is None:
        thermo.export_csv(found, sys.stdout)
        return
    if output.suffix.lower() == ".csv":
        thermo.export_csv(found, output)
    else:
        thermo.write(found, output)
    confirm(
        f"wrote {output}: {len(temperatures)} temperatures × {len(fields)} fields, "
        f"{found.attrs['field_direction']}, {time.monotonic() - started:.1f} s"
    )
