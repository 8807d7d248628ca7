"""What a user may write on the command line, read and checked before any long work starts."""

from __future__ import annotations

import os
import tempfile
from collections.abc import Iterable
from pathlib import Path
from typing import TYPE_CHECKING, Any

from thermo.errors import FileFormatError, MemoryLimitError, RangeError
from thermo.storage import check_name, write_failure

if TYPE_CHECKING:
    import xarray as xr
    from numpy.typing import NDArray

PICTURES = (".png", ".svg", ".pdf")
LARGEST_GRID = 1_000_000
_ARRAYS = 16  # of one number a point: what curves hold at their peak, measured


def brief(text: str, longest: int = 60) -> str:
    """What a user wrote, short enough to stand in a sentence."""
    return text if len(text) <= longest else text[: longest - 4] + " ..."


def small_int(text: str) -> int | None:
    """A whole number of at most nine plain digits, or None."""
    digits = text.strip()
    if digits.isascii() and digits.isdecimal() and len(digits) <= 9:
        return int(digits)
    return None


def parse_grid(text: str, what: str) -> NDArray[Any]:
    """Numbers meant by a grid: start:stop:count, log start:stop:count, a list, or a file.

    Returns a strictly increasing array, shape (n,); temperatures are positive. Raises RangeError.
    """
    import numpy as np

    option = f"--{what} {brief(text)!r}"
    shape = 'write "start:stop:count", "log start:stop:count" or a list like "2,5,10"'
    words = text.strip()
    if os.path.isfile(words):  # unlike Path.is_file, not upset by a text too long for a name
        values = _column(Path(words), what)
    elif ":" in words:
        logarithmic = words.lower().startswith("log")
        parts = (words[3:].lstrip(" :") if logarithmic else words).split(":")
        if len(parts) != 3:
            raise RangeError(f"{option} has {len(parts)} parts where a grid has three; {shape}")
        start, stop = (_number(part, option, shape) for part in parts[:2])
        count = small_int(parts[2])
        if count is None or not 1 <= count <= LARGEST_GRID:
            raise RangeError(
                f"{option} asks for {brief(parts[2].strip())!r} points; give a whole number from "
                f"1 to {LARGEST_GRID}"
            )
        if logarithmic and min(start, stop) <= 0:
            raise RangeError(f"{option} is logarithmic and must start above zero; raise its start")
        spaced = np.geomspace if logarithmic else np.linspace
        values = spaced(start, stop, count)
        if count > 1 and not stop > start:
            raise RangeError(f"{option} does not rise from start to stop; put the smaller first")
    else:
        values = np.array([_number(part, option, shape) for part in words.split(",")])
    if what == "temperature" and values.min() <= 0:
        raise RangeError(
            f"{option} has the temperature {values.min():g}, and temperatures must be above zero; "
            "leave it out or raise it"
        )
    falls = np.flatnonzero(np.diff(values) <= 0)
    if falls.size:
        first = falls[0]
        raise RangeError(
            f"{option} has {values[first + 1]:g} after {values[first]:g}; "
            f"give each {what} once, in rising order"
        )
    return values


def default_temperatures(levels: xr.Dataset) -> NDArray[Any]:
    """200 temperatures, shape (200,), over the decades where a spectrum does something.

    They run from 0.02 to 20 times the width of the spectrum per site, a measure of its couplings;
    1 to 300 where the levels do not spread at all. In K, or in the energy unit when dimensionless.
    """
    import numpy as np

    from thermo.units import kelvin_per

    energy = levels["energy"].values
    kelvin = kelvin_per(levels.attrs["energy_unit"])
    width = float(energy.max() - energy.min()) * kelvin / int(levels.attrs["n_sites"])
    low, high = (0.02 * width, 20 * width) if width > 0 else (1.0, 300.0)
    return np.geomspace(float(f"{low:.2g}"), float(f"{high:.2g}"), 200)


def _number(text: str, where: str, shape: str) -> float:
    try:
        value = float(text)
    except ValueError:
        word = brief(text.strip())
        raise RangeError(f"{where} has {word!r} where a number belongs; {shape}") from None
    if value - value != 0:
        raise RangeError(f"{where} has {value}, which is not a finite number; {shape}")
    return value


def parse_range(text: str) -> tuple[float, float]:
    """Two temperatures "low:high", both positive, rising. Raises RangeError."""
    option = f"--accuracy-range {brief(text)!r}"
    shape = 'write two temperatures, "low:high"'
    parts = text.split(":")
    if len(parts) != 2:
        raise RangeError(f"{option} is no range; {shape}")
    low, high = (_number(part, option, shape) for part in parts)
    if not 0 < low < high:
        raise RangeError(f"{option} does not rise from above zero; {shape}")
    return low, high


def option_names(names: Iterable[str]) -> str:
    """Options as they are written: "--full-below, --seed and --steps"."""
    written = ["--" + name.replace("_", "-") for name in names]
    return " and ".join(filter(None, [", ".join(written[:-1]), written[-1]]))


def check_checkpoint(given: Path | None, output: Path, model: Path) -> Path:
    """Where finished pieces are kept: the file given, else one beside the output."""
    if given is None:
        name = output.name + ".partial"
        if len(os.fsencode(name)) > 240:  # file systems take 255 bytes, sqlite adds its own
            name = output.name[:40] + ".partial"
        return output.with_name(name)
    for other, what in ((output, "output"), (model, "model")):
        if os.path.realpath(given) == os.path.realpath(other):
            raise FileFormatError(
                f"the checkpoint {brief(str(given), 200)} is also the {what}; choose another name"
            )
    return given


def _column(path: Path, what: str) -> NDArray[Any]:
    """One number a line; empty lines and lines that start with # are passed over."""
    import numpy as np

    try:
        lines = path.read_text(encoding="utf-8").splitlines()
    except UnicodeDecodeError:
        raise RangeError(f"{path} is not text; give a file with one {what} a line") from None
    rows = [(n, line.strip()) for n, line in enumerate(lines, start=1)]
    rows = [(n, line) for n, line in rows if line and not line.startswith("#")]
    shape = f"give one {what} a line, with a decimal point"
    if not rows:
        raise RangeError(f"{path} has no numbers; {shape}")
    return np.array([_number(line, f"{path}, line {n},", shape) for n, line in rows])


def grid_files(*texts: str | None) -> tuple[Path, ...]:
    """The files among grids as they were written; all others are numbers."""
    return tuple(Path(t.strip()) for t in texts if t is not None and os.path.isfile(t.strip()))


def check_grid_memory(n_temperatures: int, n_fields: int) -> None:
    """Refuse a grid whose curves would not fit into free memory, before anything is allocated."""
    from thermo.spectrum.memory import memory_limit, size_text

    size, free = 8 * _ARRAYS * n_temperatures * n_fields, memory_limit(None)
    if size > free:
        raise MemoryLimitError(
            f"curves at {n_temperatures} temperatures × {n_fields} fields need "
            f"{size_text(size)} of memory and {size_text(free)} is free; give fewer of either, "
            "or do a few fields at a time"
        )


def check_source(path: Path) -> None:
    """Refuse a missing file before anything slow is imported."""
    if os.path.isdir(path):
        raise FileFormatError(f"{path} is a directory where a file belongs; name a file in it")
    if not os.path.exists(path):
        name = brief(str(path), 200)
        raise FileFormatError(f"{name} does not exist; check the name and the directory")


def check_target(path: Path, suffixes: tuple[str, ...], sources: tuple[Path, ...]) -> None:
    """Refuse, before any work, a target that could not be written at its end."""
    if path.suffix.lower() not in suffixes:
        known = " or ".join(suffixes)
        raise FileFormatError(
            f"the output {brief(str(path), 200)} must end in {known}; change its name"
        )
    real = Path(os.path.realpath(path))
    check_name(real)
    if os.path.exists(real):
        if not real.is_file():
            raise FileFormatError(f"the output {path} is not a regular file; choose another name")
        if any(source.exists() and real.samefile(source) for source in sources):
            raise FileFormatError(f"the output {path} is also the input; choose another name")
    try:
        with tempfile.TemporaryFile(dir=real.parent) as probe:
            probe.write(bytes(4096))
            probe.flush()
    except OSError as fault:
        raise write_failure(path, fault) from None
