"""The command ``partita``: glue between files, the terminal and the library, nothing numeric.

Results go to files or to standard output; progress, notes and errors go to standard error.
Nothing slow is imported until a command needs it.
"""

from __future__ import annotations

import os
import re
import sys
import time
from collections.abc import Sequence
from pathlib import Path
from typing import TYPE_CHECKING, Annotated, Any

import typer

from thermo import __version__
from thermo.arguments import (
    PICTURES,
    brief,
    check_checkpoint,
    check_grid_memory,
    check_source,
    check_target,
    default_temperatures,
    grid_files,
    option_names,
    parse_grid,
    parse_range,
)
from thermo.errors import FileFormatError, PartitaError, RangeError
from thermo.further_commands import COMMANDS
from thermo.messages import confirm, note, say, tell_attributes, tell_notes
from thermo.options import (
    Accuracy,
    AccuracyRange,
    AnyFile,
    CheckpointFile,
    ExactStates,
    FullBelow,
    KeepFolder,
    Memory,
    Method,
    MethodWord,
    ModelFile,
    Per,
    PictureFile,
    ReportFile,
    Scale,
    Scheduler,
    Seed,
    Steps,
    Threads,
    TraceOrder,
    Units,
    Vectors,
    Workers,
)
from thermo.process import catch_signals, drop, ending, open_streams, set_threads
from thermo.progress import Interrupted, keeping, work

if TYPE_CHECKING:
    import xarray as xr

EXIT_CODES = """\b
Exit codes:
  0    done
  1    unexpected fault of the program
  2    command line not understood
  3    model, study, data or argument not usable
  4    file cannot be read or written
  5    not enough memory
  6    a spectrum failed its own check
  7    a scheduler or its workers failed
  129  ended by SIGHUP
  130  interrupted (Ctrl-C)
  143  ended by SIGTERM"""

app = typer.Typer(
    name="partita",
    add_completion=False,
    pretty_exceptions_enable=False,
    rich_markup_mode=None,
    context_settings={"help_option_names": ["-h", "--help"], "max_content_width": 100},
)


def _show_version(value: bool) -> None:
    if value:
        print(f"partita {__version__}")
        raise typer.Exit


@app.callback(invoke_without_command=True, epilog=EXIT_CODES)
def _partita(
    context: typer.Context,
    version: Annotated[
        bool,
        typer.Option("--version", callback=_show_version, is_eager=True, help="Show the version."),
    ] = False,
) -> None:
    """Finite-temperature thermodynamics of interacting spins.

    From a model file to its spectrum (survey, solve) or its spins' correlations, from the spectrum
    to curves (curves, plot, export), from measured curves to exchange constants (fit).
    """
    if context.invoked_subcommand is None:
        print(context.get_help())


@app.command()
def survey(
    model: ModelFile,
    method: MethodWord = Method.auto,
    vectors: Vectors = None,
    steps: Steps = None,
    full_below: FullBelow = None,
    memory: Memory = None,
) -> None:
    """Show what a model conserves, its blocks, and the work ahead."""
    check_source(model)
    import thermo
    from thermo.report import print_plan

    options = {"vectors": vectors, "steps": steps, "full_below": full_below}
    given: dict[str, Any] = {k: value for k, value in options.items() if value is not None}
    spins = thermo.read_model(model)
    print_plan(thermo.survey(spins, memory=memory, method=method.value, **given))


@app.command()
def solve(
    model: ModelFile,
    output: Annotated[
        Path, typer.Option("--output", "-o", metavar="FILE", help="Where the levels go (.nc).")
    ],
    method: MethodWord = Method.auto,
    vectors: Vectors = None,
    steps: Steps = None,
    seed: Seed = None,
    full_below: FullBelow = None,
    exact_states: ExactStates = None,
    trace_order: TraceOrder = None,
    accuracy: Accuracy = None,
    accuracy_range: AccuracyRange = None,
    memory: Memory = None,
    threads: Threads = None,
    checkpoint: CheckpointFile = None,
    scheduler: Scheduler = None,
    workers: Workers = None,
) -> None:
    """Find the levels of a model and write them to a file.

    All of them, or (sampled) the outermost and random vectors for the rest. The options from
    --vectors to --accuracy-range and from --checkpoint on are for sampled spectra.
    """
    sampling = {
        "vectors": vectors,
        "steps": steps,
        "seed": seed,
        "full_below": full_below,
        "exact_states": exact_states,
        "trace_order": trace_order,
        "accuracy": accuracy,
        "accuracy_range": None if accuracy_range is None else parse_range(accuracy_range),
    }
    given: dict[str, Any] = {k: value for k, value in sampling.items() if value is not None}
    places = {"checkpoint": checkpoint, "scheduler": scheduler, "workers": workers}
    idle = [*given, *(name for name, value in places.items() if value is not None)]
    if method is Method.full and idle:
        raise RangeError(
            f"{option_names(idle)} cannot go with --method full; leave it out or take --method "
            "sampled"
        )
    check_source(model)
    check_target(output, (".nc",), sources=(model,))
    kept = check_checkpoint(checkpoint, output, model)
    set_threads(threads)
    import thermo
    from thermo.spectrum.checkpoint import discard

    if scheduler is not None or workers is not None:
        given["executor"] = thermo.Distributed(scheduler, workers)
    spins = thermo.read_model(model)
    tell_notes(spins.notes)
    started = time.monotonic()
    with keeping(kept):
        levels = work(
            lambda report: thermo.solve(
                spins,
                method=method.value,
                memory=memory,
                checkpoint=kept,
                progress=report,
                **given,
            )
        )
        thermo.write(levels, output)
    if levels.attrs["method"] == "full":
        if idle:
            note(f"the full spectrum was at hand, so {option_names(idle)} had no effect")
    elif checkpoint is None:
        discard(kept)
    tell_attributes(levels.attrs)
    confirm(
        f"wrote {output}: {len(spins.sites)} sites, {spins.n_states} states, "
        f"{levels.sizes['level']} levels, {time.monotonic() - started:.1f} s"
    )


@app.command()
def curves(
    levels: Annotated[Path, typer.Argument(metavar="LEVELS", help="Levels file from solve.")],
    temperature: Annotated[
        str | None,
        typer.Option(
            "--temperature",
            "-t",
            metavar="GRID",
            help='"start:stop:count", "log start:stop:count", a list "2,5,10", or a file with one '
            "number a line; default: from the width of the spectrum.",
        ),
    ] = None,
    field: Annotated[
        str,
        typer.Option("--field", "-b", metavar="GRID", help='Fields in T, for example "0,1,5".'),
    ] = "0",
    units: Annotated[
        Units | None,
        typer.Option(help="Units of the curves; default: molar-si, or reduced without a unit."),
    ] = None,
    per: Annotated[Per, typer.Option(help="Per mole of magnetic ions or of formula units.")] = (
        Per.ion
    ),
    g: Annotated[
        float | None, typer.Option("--g", metavar="G", help="Replaces the model's own common g.")
    ] = None,
    output: Annotated[
        Path | None,
        typer.Option(
            "--output", "-o", metavar="FILE", help=".nc or .csv; default: CSV to standard output."
        ),
    ] = None,
) -> None:
    """Turn levels into curves over temperature and field."""
    temperatures = None if temperature is None else parse_grid(temperature, "temperature")
    fields = parse_grid(field, "field")
    if g is not None and not 0 < g < float("inf"):
        raise RangeError(f"--g {g:g} is no g factor; give a finite number above zero")
    check_source(levels)
    if output is not None:
        sources = (levels, *grid_files(temperature, field))
        check_target(output, (".nc", ".csv"), sources=sources)
    import thermo

    spectrum = _read(levels, "levels")
    dimensionless = spectrum.attrs["energy_unit"] == "1"
    system = units or (Units.reduced if dimensionless else Units.si)
    if temperatures is None:
        temperatures = default_temperatures(spectrum)
        unit = "" if dimensionless else " K"
        note(
            f"{len(temperatures)} temperatures from {temperatures[0]:g} to "
            f"{temperatures[-1]:g}{unit}, from the width of the spectrum; "
            "--temperature sets others"
        )
    check_grid_memory(len(temperatures), len(fields))
    found = thermo.curves(spectrum, temperatures, fields, units=system.value, per=per.value, g=g)
    if found.attrs.get("field_direction") == "z":
        note("the model is anisotropic: fields, susceptibility and magnetization are along z")
    tell_attributes(found.attrs)
    if output is None or output.suffix.lower() == ".csv":
        thermo.export_csv(found, output or sys.stdout)
    else:
        thermo.write(found, output)
    if output is not None:
        confirm(f"wrote {output}: {len(temperatures)} temperatures × {len(fields)} fields")


for _name, _run in COMMANDS.items():
    app.command(_name)(_run)


@app.command()
def fit(
    study: Annotated[Path, typer.Argument(metavar="STUDY", help="Study file (TOML).")],
    output: Annotated[
        Path | None,
        typer.Option("--output", "-o", metavar="FILE", help="Where the result goes (.nc)."),
    ] = None,
    picture: PictureFile = None,
    report: ReportFile = None,
    keep: KeepFolder = None,
    memory: Memory = None,
    threads: Threads = None,
) -> None:
    """Fit exchange constants to measured curves; compare rivals."""
    check_source(study)
    if output is not None:
        check_target(output, (".nc",), sources=(study,))
    if picture is not None:
        check_target(picture, PICTURES, sources=(study,))
    if report is not None:
        check_target(report, (".html", ".htm"), sources=(study,))
    set_threads(threads)
    from thermo.fit_command import run_fit

    run_fit(study, output, picture, report, memory, keep)


@app.command()
def plot(
    file: AnyFile,
    output: Annotated[
        Path | None,
        typer.Option(
            "--output",
            "-o",
            metavar="FILE",
            help="Picture (.png .svg .pdf); default: FILE with .png, in this directory.",
        ),
    ] = None,
    what: Annotated[
        str | None,
        typer.Option(
            metavar="NAMES",
            help='Curves to draw, for example "specific_heat,chi_T", or the name of a data set of '
            'a fit or comparison, or "next" of the latter; default: all there is.',
        ),
    ] = None,
    units: Annotated[
        Units | None, typer.Option(help="Units of the curves; default: those of the file.")
    ] = None,
    scale: Annotated[
        Scale | None, typer.Option(help="Temperature axis; default: as the grid is spaced.")
    ] = None,
) -> None:
    """Draw the curves, the fit or the levels of a file."""
    check_source(file)
    target = Path(file.with_suffix(".png").name) if output is None else output
    check_target(target, PICTURES, sources=(file,))
    import thermo

    system = None if units is None else units.value
    thermo.plot(_read(file), target, what=what, units_system=system, scale=scale and scale.value)
    confirm(f"wrote {target}")


@app.command()
def export(
    file: AnyFile,
    output: Annotated[
        Path | None,
        typer.Option(
            "--output",
            "-o",
            metavar="FILE",
            help=".csv, or .tex (a fit's parameters, a comparison's candidates); default: CSV to "
            "standard output.",
        ),
    ] = None,
    what: Annotated[
        str | None,
        typer.Option(
            metavar="NAMES",
            help='Columns of curves, for example "specific_heat,chi_T"; of a fit: points (default) '
            "or parameters; of a comparison: candidates (default), parameters, points or next; of "
            "correlations: pairs (default) or structure.",
        ),
    ] = None,
    units: Annotated[
        Units | None, typer.Option(help="Units of the curves; default: those of the file.")
    ] = None,
) -> None:
    """Write a file's table as CSV, units in its header, or LaTeX."""
    check_source(file)
    if output is not None:
        check_target(output, (".csv", ".tex"), sources=(file,))
    import thermo

    system = None if units is None else units.value
    if output is not None and output.suffix.lower() == ".tex":
        if what is not None or system is not None:
            raise RangeError(
                "a LaTeX table holds what it holds, in its own units; leave --what and --units out"
            )
        thermo.export_latex(_read(file), output)
    else:
        target = sys.stdout if output is None else output
        thermo.export_csv(_read(file), target, units_system=system, what=what)
    if output is not None:
        confirm(f"wrote {output}")


def _read(file: Path, kind: str | None = None) -> xr.Dataset:
    """Read any file of ours; levels are held against their model as well."""
    import thermo

    advice = {
        ".toml": "is a text file; solve a model first and give its levels (.nc)",
        ".json": "is a text file; solve a model first and give its levels (.nc)",
        ".csv": "is a table for other programs and cannot be read back; give the .nc file",
    }.get(file.suffix.lower())
    if advice is not None:
        raise FileFormatError(f"{file} {advice}")
    return thermo.read(file, kind)


# ---------------------------------------------------------------- faults to sentences


def run(arguments: Sequence[str]) -> int:
    """Run one command line; the exit code. Every fault becomes one sentence on standard error."""
    try:
        code = app(list(arguments), prog_name="partita", standalone_mode=False)
        sys.stdout.flush()
    except PartitaError as fault:
        say(str(fault))
        return _leave(fault, fault.exit_code)
    except typer.Abort as fault:
        return _interrupted(fault)
    except KeyboardInterrupt as fault:
        return _interrupted(fault)
    except MemoryError as fault:
        say(
            "the machine ran out of memory; close other programs, or take a smaller cluster or one "
            "that conserves more"
        )
        return _leave(fault, 5)
    except (BrokenPipeError, SystemExit):
        # Whoever read the output has had enough (partita export … | head): not a fault. Typer
        # turns it into SystemExit, which nothing else here raises.
        drop(sys.stdout)
        return 0
    except OSError as fault:
        where = brief(os.fsdecode(fault.filename or "standard output"), 200)
        reason = (fault.strerror or str(fault)).lower()
        say(f"{where}: {reason}; free space, or check the name and its permissions")
        drop(sys.stdout)
        return _leave(fault, 4)
    except Exception as fault:
        # Misuse of the command line, by whichever class this version of typer raises.
        usage = getattr(fault, "format_message", None)
        if usage is not None:
            command = getattr(getattr(fault, "ctx", None), "command_path", "partita")
            told = str(usage()).rstrip(".").replace("Value error, ", "")
            told = re.sub(r"\S{61,}", lambda long: brief(long[0]), told)
            say(f"{told}; see {command} --help")
            return 2
        say(
            f"unexpected fault ({type(fault).__name__}: {fault}); please report it, with the "
            "output of the same command run with PARTITA_DEBUG=1 in the environment"
        )
        return _leave(fault, 1)
    if code == 130:
        return _interrupted(KeyboardInterrupt())
    return code if isinstance(code, int) else 0


def _interrupted(fault: BaseException) -> int:
    code, what = ending()
    # Typer's own exception may stand for the one that knows what is kept.
    kept = getattr(fault, "kept", None) or getattr(fault.__cause__, "kept", None)
    say(f"{what}; {kept or 'no file is left half written'}")
    return _leave(fault, code)


def _leave(fault: BaseException, code: int) -> int:
    if os.environ.get("PARTITA_DEBUG") == "1":
        import traceback

        traceback.print_exception(fault)
    return code


def main() -> None:
    """Entry point of the command."""
    import warnings

    open_streams()
    catch_signals()
    if os.environ.get("PARTITA_DEBUG") != "1":
        warnings.simplefilter("ignore")
    try:
        code = run(sys.argv[1:])
    except (Interrupted, KeyboardInterrupt) as fault:
        # A thread deep in compiled code cannot be stopped: leave without waiting for it.
        code = _interrupted(fault)
        os._exit(code)
    sys.exit(code)


if __name__ == "__main__":
    main()
