"""Memory: how much may be used, and how a size is said."""

from __future__ import annotations

import re

import psutil

from thermo.errors import RangeError

GIB = 2**30
# Left to the system and the program itself.
MARGIN = GIB // 2
_UNITS = {"": 1, "B": 1, "KB": 10**3, "MB": 10**6, "GB": 10**9, "TB": 10**12}
_UNITS |= {"KIB": 2**10, "MIB": 2**20, "GIB": 2**30, "TIB": 2**40}


def memory_limit(memory: int | float | str | None) -> int:
    """The limit in bytes: a number of bytes, a text like "4 GiB", or None for what is free."""
    if memory is None:
        free = int(psutil.virtual_memory().available)
        return max(free - max(MARGIN, free // 10), free // 4)
    if isinstance(memory, str):
        match = re.fullmatch(r"\s*([0-9]*\.?[0-9]+)\s*([A-Za-z]*)\s*", memory)
        unit = match.group(2).upper() if match else "?"
        if match is None or unit not in _UNITS:
            raise RangeError(
                f"memory limit {memory!r} is not a size; write a number with a unit, e.g. '4 GiB'"
            )
        memory = float(match.group(1)) * _UNITS[unit]
    if not 0 < memory < float("inf"):
        raise RangeError(f"memory limit {memory} is not a positive size; write e.g. '4 GiB'")
    return int(memory)


def size_text(size: float) -> str:
    """A size in words: "38 GiB", "640 MiB"."""
    for unit in ("bytes", "KiB", "MiB", "GiB", "TiB"):
        if size < 1000 or unit == "TiB":
            break
        size /= 1024
    if size >= 1e6:
        return f"{size:.1e} {unit}"
    return f"{size:.0f} {unit}" if size >= 10 or unit == "bytes" else f"{size:.1f} {unit}"
