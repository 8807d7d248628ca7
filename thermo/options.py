"""The options of the commands: their words, and what may stand after them."""

from __future__ import annotations

from enum import StrEnum
from pathlib import Path
from typing import Annotated

import typer


class Method(StrEnum):
    auto = "auto"
    full = "full"
    sampled = "sampled"


class Units(StrEnum):
    si = "molar-si"
    cgs = "molar-cgs"
    reduced = "reduced"


class Scale(StrEnum):
    linear = "linear"
    log = "log"


class Per(StrEnum):
    ion = "ion"
    formula = "formula"


ModelFile = Annotated[Path, typer.Argument(metavar="MODEL", help="Model file (TOML or JSON).")]
MethodWord = Annotated[Method, typer.Option("--method", help="How to find the levels.")]
Memory = Annotated[
    str | None,
    typer.Option(metavar="SIZE", help='Memory limit, for example "4 GiB"; default: what is free.'),
]
Threads = Annotated[
    int | None,
    typer.Option(min=1, max=9999, metavar="N", help="Processor cores to use; default: all."),
]

# For sampled spectra; None leaves each to ``thermo.solve``.
Vectors = Annotated[
    int | None,
    typer.Option(
        metavar="N",
        help="Random vectors per sector, two or more for error bars; default: 2, or more where "
        "they cost nothing.",
    ),
]
Steps = Annotated[
    int | None, typer.Option(metavar="N", help="Lanczos steps per vector; default: 200.")
]
Seed = Annotated[int | None, typer.Option(metavar="N", help="Seed of the vectors; default: 1.")]
FullBelow = Annotated[
    int | None,
    typer.Option(
        metavar="DIM", help="Sectors up to this dimension are solved fully; default: what pays off."
    ),
]
ExactStates = Annotated[
    int | None,
    typer.Option(
        metavar="N",
        help="Most exact states at each edge of a sector, 0 for none; default: all that converge.",
    ),
]
TraceOrder = Annotated[
    int | None,
    typer.Option(
        metavar="K",
        help="Weights reproduce the traces up to H^K, 0 for none; default: 6, or less where that "
        "costs more than the vectors.",
    ),
]
Accuracy = Annotated[
    float | None,
    typer.Option(
        metavar="X",
        help="Add vectors until C and χ have this relative standard error, for example 0.01.",
    ),
]
AccuracyRange = Annotated[
    str | None,
    typer.Option(
        metavar="LOW:HIGH",
        help="Temperatures at which --accuracy must hold; default: a tenth of the largest "
        "coupling to ten times it.",
    ),
]
CheckpointFile = Annotated[
    Path | None,
    typer.Option(
        metavar="FILE",
        help="Keeps finished pieces, and goes on from those it has; default: beside the output "
        "(.partial), removed when done.",
    ),
]
Scheduler = Annotated[
    str | None,
    typer.Option(metavar="ADDRESS", help="Work through the Dask scheduler at host:port."),
]
Workers = Annotated[
    int | None,
    typer.Option(metavar="N", help="Work in N processes of this machine, through Dask."),
]
AnyFile = Annotated[
    Path,
    typer.Argument(metavar="FILE", help="Curves, correlations, fit, comparison or levels file."),
]
PictureFile = Annotated[
    Path | None,
    typer.Option(
        "--picture", metavar="FILE", help="Picture of data, fit and residuals (.png .svg .pdf)."
    ),
]
KeepFolder = Annotated[
    Path | None,
    typer.Option("--keep", metavar="FOLDER", help="Keeps spectra there for later fits."),
]
ReportFile = Annotated[
    Path | None,
    typer.Option("--report", metavar="FILE", help="The whole report as one page (.html)."),
]
Temperatures = Annotated[
    str,
    typer.Option(
        "--temperature",
        "-t",
        metavar="GRID",
        help='"start:stop:count", "log start:stop:count", a list "2,5,10", or a file with one '
        "number a line.",
    ),
]
TableOutput = Annotated[
    Path | None,
    typer.Option(
        "--output", "-o", metavar="FILE", help=".nc or .csv; default: CSV to standard output."
    ),
]
