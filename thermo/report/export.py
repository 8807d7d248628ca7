"""Tables as plain CSV: one header row with units, then numbers."""

from __future__ import annotations

import csv
import os
from collections.abc import Iterable, Iterator, Sequence
from typing import Any, TextIO

import numpy as np
import xarray as xr

from thermo.errors import FileFormatError, UnavailableError, UnitsError
from thermo.report.quantities import unit_of
from thermo.storage import atomic_path
from thermo.variables import ERROR_SUFFIX, convert_curves, lookup

_CURVE_DIGITS = 10
_LEVEL_DIGITS = 13  # gaps between levels are what matters, and they may be small

Table = tuple[list[str], Iterator[Sequence[str]]]


def export_csv(
    dataset: xr.Dataset,
    target: str | os.PathLike[str] | TextIO,
    units_system: str | None = None,
    what: str | None = None,
) -> None:
    """Write a curves, levels or fit dataset as CSV to a path (whole or not at all) or a stream.

    Curves: one row for each temperature and field; ``units_system`` converts molar ones to
    "molar-si" or "molar-cgs". Levels: one row each. A fit: ``what`` is "points" (the default:
    data, prediction and residual of each) or "parameters". A missing value is an empty cell.
    """
    header, rows = _table(dataset, units_system, what)
    if isinstance(target, str | os.PathLike):
        with (
            atomic_path(target) as temporary,
            temporary.open("w", encoding="utf-8", newline="") as stream,
        ):
            _write(stream, header, rows)
    else:
        _write(target, header, rows)


def _write(stream: TextIO, header: list[str], rows: Iterable[Sequence[str]]) -> None:
    writer = csv.writer(stream, lineterminator="\n")
    writer.writerow(header)
    writer.writerows(rows)


def _table(dataset: xr.Dataset, units_system: str | None, what: str | None) -> Table:
    kind = str(dataset.attrs.get("content"))
    tables = {"curves": ["curves"], "levels": ["levels"], "fit": ["points", "parameters"]}
    if kind not in tables:
        raise FileFormatError("only levels, curves and fit datasets can be exported")
    chosen = what or tables[kind][0]
    if chosen not in tables[kind]:
        raise UnavailableError(
            f"a {kind} file has no table {chosen!r}; choose from {', '.join(tables[kind])}"
        )
    if kind == "curves":
        if units_system is not None:
            dataset = convert_curves(dataset, units_system)
        return _curves(dataset)
    if units_system is not None:
        raise UnitsError(f"a {kind} file is exported in its own units; leave the units out")
    return {"levels": _levels, "points": _points, "parameters": _parameters}[chosen](dataset)


def _number(value: float, digits: int = _CURVE_DIGITS) -> str:
    return "" if np.isnan(value) else f"{value:.{digits}g}"


def _head(name: str, unit: str | None) -> str:
    return name if unit in (None, "1") else f"{name} ({unit})"


def _curves(curves: xr.Dataset) -> Table:
    names = [
        str(n) for n in curves.data_vars if (v := lookup("curves", str(n))) and len(v.dims) == 2
    ]
    header = [_head(n, unit_of(curves, n)) for n in ("temperature", "field")]
    header += [_head(n, unit_of(curves, n.removesuffix(ERROR_SUFFIX))) for n in names]
    temperature, field = curves["temperature"].values, curves["field"].values
    columns = [curves[n].values for n in names]

    def rows() -> Iterator[list[str]]:
        # All temperatures of one field together: each block is one curve to plot.
        for j, b in enumerate(field):
            for i, t in enumerate(temperature):
                yield [_number(t), _number(b), *(_number(c[i, j]) for c in columns)]

    return header, rows()


def _levels(levels: xr.Dataset) -> Table:
    unit = str(levels.attrs["energy_unit"])
    names = ("energy", "weight", "total_spin", "magnetic_number", "vector", "sector")
    header = [_head(n, unit if n == "energy" else None) for n in names]
    columns = [levels[n].values for n in names]
    return header, (
        [_number(v, _LEVEL_DIGITS) if v.dtype.kind == "f" else str(v) for v in row]
        for row in zip(*columns, strict=True)
    )


def _points(fit: xr.Dataset) -> Table:
    numbers = ("temperature", "field", "observed", "uncertainty", "predicted", "residual")
    header = ["dataset", "quantity", "units of the values"]
    header += [_head(n, fit[n].attrs.get("units")) for n in numbers]
    texts = [fit[f"dataset_{n}"].values for n in ("name", "quantity", "units")]
    columns = [fit[n].values for n in numbers]
    return header, (
        [*(str(text[d]) for text in texts), *(_number(c[i]) for c in columns)]
        for i, d in enumerate(fit["point_dataset"].values)
    )


def _parameters(fit: xr.Dataset) -> Table:
    numbers = ("value", "standard_error", "start", "lower_bound", "upper_bound")
    header = ["parameter", "units", *numbers, "at_bound", "role", "tie"]

    def rows() -> Iterator[list[str]]:
        for i in range(fit.sizes["parameter"]):
            yield [
                str(fit["parameter_name"].values[i]),
                str(fit["parameter_units"].values[i]),
                *(_number(float(fit[n].values[i])) for n in numbers),
                flag_word(fit["at_bound"], i),
                flag_word(fit["parameter_role"], i),
                str(fit["parameter_tie"].values[i]),
            ]

    return header, rows()


def flag_word(flags: xr.DataArray, index: int) -> str:
    """The meaning of one value of a flag variable (CF §3.5)."""
    values: list[Any] = np.atleast_1d(flags.attrs["flag_values"]).tolist()
    words = str(flags.attrs["flag_meanings"]).split()
    return words[values.index(int(flags.values[index]))]
