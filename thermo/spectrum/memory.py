"""Memory: how much may be used, and how a size is said."""

from __future__ import annotations

import re

import psutil

from thermo.errors import RangeError

GIB = 2**30
# Left to the system and the program itself.
MARGIN = GIB // 2
_UNITS = {"B": 1}
for _power, _letter in enumerate("KMGT", start=1):
    _UNITS[f"{_letter}B"] = 1000**_power
    _UNITS |= dict.fromkeys((_letter, f"{_letter}I", f"{_letter}IB"), 1024**_power)


def memory_limit(memory: int | float | str | None) -> int:
    """The limit in bytes: a number of bytes, a text like "4 GiB", or None for what is free.

    A text needs its unit: "4" could be meant in bytes or in GiB.
    """
    if memory is None:
        free = int(psutil.virtual_memory().available)
        return max(free - max(MARGIN, free // 10), free // 4)
    if isinstance(memory, str):
        match = re.fullmatch(r"\s*([0-9]*\.?[0-9]+)\s*([A-Za-z]*)\s*", memory)
        unit = match.group(2).upper() if match else "?"
        if match is None or unit not in _UNITS:
            raise RangeError(
                f"memory limit {memory[:40]!r} is not a size; write a number with a unit, "
                "e.g. '4 GiB'"
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
