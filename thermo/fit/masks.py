"""Which points of a data set are used: by ranges of temperature and field, and by flags."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from thermo.errors import DataError
from thermo.fit.strict import Section

Vector = NDArray[np.float64]
Pair = tuple[float, float]

# Cells of a flag column that mark nothing.
UNMARKED = ("", "0")


@dataclass(frozen=True)
class Masks:
    """What a ``[[data]]`` table says of the points to use; ``at`` is its path, for messages.

    ``window`` and ``fields`` are ranges to keep, ``left_out`` ranges of temperature to leave out,
    ``flags`` the flags to keep (None: those that mark nothing).
    """

    at: str
    window: Pair | None
    fields: Pair | None
    left_out: tuple[Pair, ...]
    flags: tuple[str, ...] | None

    def keep(
        self, path: str, temperature: Vector, field: Vector, flags: Sequence[str] | None
    ) -> NDArray[np.bool_]:
        """Which of the points [K, T] are used, (n,); none at all is a DataError."""
        keep = np.ones(len(temperature), dtype=bool)
        for name, values, unit, limits in (
            ("range", temperature, "K", self.window),
            ("field_range", field, "T", self.fields),
        ):
            if limits is None:
                continue
            inside = (values >= limits[0]) & (values <= limits[1])
            if not inside.any():
                raise DataError(
                    f"{path}: no overlap of the data, {values.min():g} to {values.max():g} {unit}, "
                    f"with {self.at}.{name} = [{limits[0]:g}, {limits[1]:g}] {unit}; change the "
                    "range"
                )
            keep &= inside
        for low, high in self.left_out:
            keep &= (temperature < low) | (temperature > high)
        if flags is not None:
            kept = UNMARKED if self.flags is None else self.flags
            marked = np.array([flag in kept for flag in flags], dtype=bool)
            if not marked.any():
                seen = ", ".join(repr(flag) for flag in dict.fromkeys(flags))[:60]
                raise DataError(
                    f"{path}: no row has a flag that {self.at} uses, "
                    f"{' or '.join(map(repr, kept))}, the flags being {seen}; state flags"
                )
            keep &= marked
        if not keep.any():
            raise DataError(
                f"{path}: the ranges and flags of {self.at} together leave no point; widen them"
            )
        return keep


def read_masks(section: Section, flagged: bool) -> Masks:
    """The mask keys of a ``[[data]]`` table; ``flagged`` says that it names a flag column."""
    window = section.interval("range", "[lowest, highest] temperature in K")
    fields = section.interval("field_range", "[lowest, highest] field in T")
    what = "pairs [from, to] of temperatures in K"
    left_out = section.intervals("leave_out", what)
    flags = section.words("flags", 'the flags of rows to use, such as ["ok"]')
    if flags is not None and not flagged:
        raise section.fail("flags", "needs the column they are in; give columns.flag")
    return Masks(section.path, window, fields, left_out, flags)
