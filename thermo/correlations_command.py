"""What ``partita correlations`` takes and does."""

from __future__ import annotations

import sys
import time
from typing import Annotated

import typer

from thermo.arguments import check_source, check_target, grid_files, parse_grid
from thermo.errors import RangeError
from thermo.messages import confirm, note, tell_notes
from thermo.options import Memory, ModelFile, TableOutput, Temperatures, Threads
from thermo.process import set_threads
from thermo.progress import work

TABLES = ("pairs", "structure")

Fields = Annotated[
    str, typer.Option("--field", "-b", metavar="GRID", help='Fields along z in T, such as "0,1,5".')
]
Components = Annotated[
    bool | None,
    typer.Option(
        "--components/--no-components",
        help="Also, or not, the parts along x, y and z; default: where the model is anisotropic.",
    ),
]
What = Annotated[
    str | None,
    typer.Option(
        metavar="TABLE", help="Table of a CSV: pairs (default) or structure, the structure factor."
    ),
]


def run_correlations(
    model: ModelFile,
    temperature: Temperatures,
    field: Fields = "0",
    components: Components = None,
    what: What = None,
    memory: Memory = None,
    threads: Threads = None,
    output: TableOutput = None,
) -> None:
    """Find thermal correlations of spins, and S(q).

    Averages of S_i.S_j for every symmetry-distinct pair of sites, from the full spectrum, and of
    periodic clusters the static structure factor S(q) at their own wave vectors.
    """
    temperatures, fields = parse_grid(temperature, "temperature"), parse_grid(field, "field")
    table = output is None or output.suffix.lower() == ".csv"
    if what is not None and what not in TABLES:
        raise RangeError(f"--what {what!r} is unknown; choose from {', '.join(TABLES)}")
    if what is not None and not table:
        raise RangeError("--what chooses the table of a CSV, and an .nc file holds all; leave it")
    check_source(model)
    if output is not None:
        sources = (model, *grid_files(temperature, field))
        check_target(output, (".nc", ".csv"), sources=sources)
    set_threads(threads)
    import thermo

    spins = thermo.read_model(model)
    tell_notes(spins.notes)
    started = time.monotonic()
    found = work(
        lambda report: thermo.correlations(
            spins, temperatures, fields, components=components, memory=memory, progress=report
        )
    )
    if "structure_factor_unavailable" in found.attrs and what is None:
        note(f"no structure factor: {found.attrs['structure_factor_unavailable']}")
    if output is None:
        thermo.export_csv(found, sys.stdout, what=what)
        return
    if table:
        thermo.export_csv(found, output, what=what)
    else:
        thermo.write(found, output)
    points = found.sizes.get("q", 0)
    confirm(
        f"wrote {output}: {found.sizes['pair_class']} pair classes, {points} wave vectors, "
        f"{time.monotonic() - started:.1f} s"
    )
