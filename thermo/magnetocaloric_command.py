"""What ``partita caloric`` takes and does."""

from __future__ import annotations

import sys
from pathlib import Path
from typing import Annotated

import typer

from thermo.arguments import (
    check_grid_memory,
    check_source,
    check_target,
    default_temperatures,
    grid_files,
    parse_grid,
)
from thermo.errors import RangeError
from thermo.messages import confirm, note
from thermo.options import Per, Units

LevelsFile = Annotated[Path, typer.Argument(metavar="LEVELS", help="Levels file from solve.")]
Fields = Annotated[
    str, typer.Option("--field", "-b", metavar="GRID", help='Fields in T, such as "0:7:15".')
]
Temperatures = Annotated[
    str | None,
    typer.Option(
        "--temperature",
        "-t",
        metavar="GRID",
        help='"start:stop:count", "log start:stop:count", a list "2,5,10", or a file with one '
        "number a line; default: from the width of the spectrum.",
    ),
]
Start = Annotated[
    float, typer.Option("--from", metavar="B", help="Field in T from which changes are counted.")
]
UnitsWord = Annotated[
    Units | None, typer.Option(help="Units; default: molar-si, or reduced without a unit.")
]
PerWord = Annotated[Per, typer.Option(help="Per mole of magnetic ions or of formula units.")]
GFactor = Annotated[
    float | None, typer.Option("--g", metavar="G", help="Replaces the model's own common g.")
]
Output = Annotated[
    Path | None,
    typer.Option(
        "--output", "-o", metavar="FILE", help=".nc or .csv; default: CSV to standard output."
    ),
]


def run_magnetocaloric(
    levels: LevelsFile,
    field: Fields,
    temperature: Temperatures = None,
    start: Start = 0.0,
    units: UnitsWord = None,
    per: PerWord = Per.ion,
    g: GFactor = None,
    output: Output = None,
) -> None:
    """Find what a change of field does.

    Entropy and adiabatic temperature change, isentropes, and the magnetic Grueneisen ratio.
    """
    temperatures = None if temperature is None else parse_grid(temperature, "temperature")
    fields = parse_grid(field, "field")
    if g is not None and not 0 < g < float("inf"):
        raise RangeError(f"--g {g:g} is no g factor; give a finite number above zero")
    if not abs(start) < float("inf"):
        raise RangeError(f"--from {start:g} is no field; give a finite number of tesla")
    check_source(levels)
    if output is not None:
        check_target(output, (".nc", ".csv"), (levels, *grid_files(temperature, field)))
    import thermo

    spectrum = thermo.read(levels, "levels")
    dimensionless = spectrum.attrs["energy_unit"] == "1"
    system = units or (Units.reduced if dimensionless else Units.si)
    if temperatures is None:
        temperatures = default_temperatures(spectrum)
        note(f"temperatures from {temperatures[0]:g} to {temperatures[-1]:g}, from the spectrum")
    check_grid_memory(len(temperatures), len(fields))
    found = thermo.magnetocaloric(
        spectrum, temperatures, fields, system.value, start=start, per=per.value, g=g
    )
    if "error_unavailable" in found.attrs:
        note(f"no error bars: {found.attrs['error_unavailable']}")
    missing = int(found["isentrope_temperature"].isnull().sum())
    if missing:
        note(f"{missing} isentrope temperatures are missing: none has the entropy at --from")
    if output is None or output.suffix.lower() == ".csv":
        thermo.export_csv(found, output or sys.stdout)
    else:
        thermo.write(found, output)
    if output is not None:
        confirm(f"wrote {output}: {len(temperatures)} temperatures × {len(fields)} fields")
