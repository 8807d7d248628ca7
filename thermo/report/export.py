"""Tables as plain CSV: one header row with units and per what they are, then numbers."""

from __future__ import annotations

import csv
import os
from collections.abc import Callable, Iterable, Iterator, Sequence
from typing import Any, TextIO

import numpy as np
import xarray as xr

from thermo.errors import FileFormatError, UnavailableError, UnitsError
from thermo.report.quantities import by_scatter, dataset_per, names, quantity, share, unit_of
from thermo.storage import atomic_path
from thermo.variables import ERROR_SUFFIX, convert_curves, lookup

_AXIS_DIGITS = 10  # a grid's own points, which must stay apart
_CURVE_DIGITS = 7
_NOTHING = 1e-30  # of a column's largest value: tails of exp(-E/T), which only look like data
_LEVEL_DIGITS = 13  # gaps between levels are what matters, and they may be small

Table = tuple[list[str], Iterator[Sequence[str]]]


def export_csv(
    dataset: xr.Dataset,
    target: str | os.PathLike[str] | TextIO,
    units_system: str | None = None,
    what: str | Sequence[str] | None = None,
) -> None:
    """Write a dataset of any kind as CSV to a path (whole or not at all) or a stream.

    Curves: one row for each temperature and field, values to 7 significant digits (the file
    holds all) and 0 below 10⁻³⁰ of their column's largest; ``units_system`` converts molar ones
    to "molar-si" or "molar-cgs", and ``what`` chooses columns by name (a list, or names with
    commas: "specific_heat,chi_T"), by default all stored ones and chi_T. Levels: energy, weight
    (number of states), S or M where resolved, block, and of sampled levels the random vector (−1:
    exact), one row each. A fit: ``what`` is
    "points" (the default: data, prediction and residual of each) or "parameters". A comparison:
    "candidates" (the default), "parameters", "points" or "next", what to measure. Correlations:
    "pairs" (the default) or "structure", S(q). Magnetocaloric
    values: all, one row for each temperature and field. A missing value is an empty cell. Raises
    FileFormatError, UnavailableError or UnitsError.
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


def _table(
    dataset: xr.Dataset, units_system: str | None, what: str | Sequence[str] | None
) -> Table:
    kind = str(dataset.attrs.get("content"))
    chosen = names(what)
    if kind == "curves":
        if units_system is not None:
            dataset = convert_curves(dataset, units_system)
        return _curves(dataset, chosen)
    tables = _TABLES.get(kind)
    if tables is None:
        known = ", ".join(["curves", *_TABLES])
        raise FileFormatError(f"only datasets of these kinds can be exported: {known}")
    if units_system is not None:
        raise UnitsError(f"a {kind} file is exported in its own units; leave the units out")
    name = ",".join(chosen) or next(iter(tables))
    if name not in tables:
        raise UnavailableError(
            f"a {kind} file has no table {name!r}; choose from {', '.join(tables)}"
        )
    return tables[name](dataset)


def _number(value: float, digits: int = _AXIS_DIGITS) -> str:
    return "" if np.isnan(value) else f"{value:.{digits}g}"


def _head(name: str, unit: str | None) -> str:
    return name if unit in (None, "1") else f"{name} ({unit})"


def _curves(curves: xr.Dataset, chosen: list[str]) -> Table:
    stored = [
        str(n) for n in curves.data_vars if (v := lookup("curves", str(n))) and len(v.dims) == 2
    ]
    if not chosen:
        chosen = [n for n in stored if not n.endswith(ERROR_SUFFIX)]
        if "susceptibility" in chosen:
            chosen.insert(chosen.index("susceptibility") + 1, "chi_T")
    header = [_head(n, unit_of(curves, n)) for n in ("temperature", "field")]
    per = share(curves.attrs)
    columns = []
    for name in chosen:
        item = quantity(curves, name)
        header.append(f"{_head(name, item.unit)} {per}")
        columns.append(_without_tails(item.values))
        if item.error is not None:
            header.append(f"{_head(name + ERROR_SUFFIX, item.unit)} {per}")
            columns.append(item.error)
    temperature, field = curves["temperature"].values, curves["field"].values

    def rows() -> Iterator[list[str]]:
        # All temperatures of one field together: each block is one curve to plot.
        for j, b in enumerate(field):
            for i, t in enumerate(temperature):
                point = [_number(v, _AXIS_DIGITS) for v in (t, b)]
                yield [*point, *(_number(c[i, j], _CURVE_DIGITS) for c in columns)]

    return header, rows()


def _without_tails(values: Any) -> Any:
    finite = np.abs(values[np.isfinite(values)])
    smallest = _NOTHING * finite.max() if finite.size else 0.0
    return np.where(np.abs(values) < smallest, 0.0, values)


def _magnetocaloric(dataset: xr.Dataset) -> Table:
    named = [str(n) for n in dataset.data_vars]
    per = share(dataset.attrs)
    molar = ("entropy_change", "magnetization_slope")
    units = [str(dataset[n].attrs["units"]) for n in named]
    header = [_head(n, str(dataset[n].attrs["units"])) for n in ("temperature", "field")]
    header += [
        f"{_head(n, u)} {per}" if n in molar else _head(n, u)
        for n, u in zip(named, units, strict=True)
    ]
    columns = [dataset[n].values for n in named]
    temperature, field = dataset["temperature"].values, dataset["field"].values

    def rows() -> Iterator[list[str]]:
        for j, b in enumerate(field):
            for i, t in enumerate(temperature):
                point = [_number(t), _number(b)]
                yield [*point, *(_number(c[i, j], _CURVE_DIGITS) for c in columns)]

    return header, rows()


def _levels(levels: xr.Dataset) -> Table:
    resolved = str(levels.attrs["resolved"])
    header = [_head("energy", str(levels.attrs["energy_unit"])), "weight"]
    columns = [levels["energy"].values, levels["weight"].values]
    if resolved in ("total_spin", "magnetic_number"):
        header.append(resolved)
        columns.append(levels[resolved].values)
    header.append("block")
    columns.append(levels["sector"].values)
    if np.any(levels["vector"].values >= 0):
        header.append("vector")
        columns.append(levels["vector"].values)
    return header, (
        [_number(v, _LEVEL_DIGITS) if v.dtype.kind == "f" else str(v) for v in row]
        for row in zip(*columns, strict=True)
    )


def _points(fit: xr.Dataset) -> Table:
    numbers = ("temperature", "field", "observed", "uncertainty", "predicted", "residual")
    header = ["dataset", "quantity", "units of the values", "per"]
    header += [_head(n, fit[n].attrs.get("units")) for n in numbers]
    if by_scatter(fit):
        header[header.index("uncertainty")] = "uncertainty (from the scatter)"
    texts: list[Any] = [fit[f"dataset_{n}"].values for n in ("name", "quantity", "units")]
    texts.append([dataset_per(fit, d) for d in range(fit.sizes["dataset"])])
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


def _comparison_points(found: xr.Dataset) -> Table:
    names = [str(name) for name in found["candidate_name"].values]
    numbers = ("temperature", "field", "observed", "uncertainty")
    header = ["dataset", "quantity", "units of the values", "per"]
    header += [_head(n, found[n].attrs.get("units")) for n in numbers]
    header += [f"predicted by {name}" for name in names]
    texts = [found[f"dataset_{n}"].values for n in ("name", "quantity", "units", "per")]
    columns = [found[n].values for n in numbers] + list(found["predicted"].values)
    return header, (
        [*(str(text[d]) for text in texts), *(_number(c[i]) for c in columns)]
        for i, d in enumerate(found["point_dataset"].values)
    )


def _candidates(found: xr.Dataset) -> Table:
    numbers = ("parameters", "chi_square", "reduced_chi_square", "probability", "aicc", "bic",
               "aicc_weight", "bic_weight")  # fmt: skip
    heads = {"aicc": "AICc less the lowest", "bic": "BIC less the lowest"}
    header = ["candidate", *(heads.get(n, n) for n in numbers), "converged", "standing", "remark"]

    def rows() -> Iterator[list[str]]:
        for k in range(found.sizes["candidate"]):
            yield [
                str(found["candidate_name"].values[k]),
                *(_number(float(found[f"candidate_{n}"].values[k])) for n in numbers),
                flag_word(found["candidate_converged"], k),
                flag_word(found["candidate_standing"], k),
                str(found["candidate_remark"].values[k]),
            ]

    return header, rows()


def _candidate_parameters(found: xr.Dataset) -> Table:
    header = ["candidate", "parameter", "units", "value", "standard_error", "role"]

    def rows() -> Iterator[list[str]]:
        for i, c in enumerate(found["parameter_candidate"].values):
            yield [
                str(found["candidate_name"].values[c]),
                str(found["parameter_name"].values[i]),
                str(found["parameter_units"].values[i]),
                *(_number(float(found[n].values[i])) for n in ("value", "standard_error")),
                flag_word(found["parameter_role"], i),
            ]

    return header, rows()


def _next(found: xr.Dataset) -> Table:
    """Every point looked at, with the difference there: what the picture "next" draws."""
    if "proposal_name" not in found:
        raise UnavailableError(
            "the comparison proposes no measurement, since no two candidates are left standing"
        )
    axes = ("temperature", "field")
    header = ["measurement", *(_head(n, found[n].attrs.get("units")) for n in axes)]
    header.append("difference over its uncertainty")
    columns = [found[f"map_{n}"].values for n in (*axes, "separation")]
    return header, (
        [str(found["proposal_name"].values[p]), *(_number(c[i], _CURVE_DIGITS) for c in columns)]
        for i, p in enumerate(found["map_proposal"].values)
    )


def _correlation_pairs(found: xr.Dataset) -> Table:
    """One row for each pair class, temperature and field: one class after the other."""
    kinds = [n for n in ("", "_xx", "_yy", "_zz") if f"correlation{n}" in found]
    header = ["pair", "pairs alike", *_grid_heads(found), *(f"correlation{n}" for n in kinds)]
    columns = [found[f"correlation{n}"].values for n in kinds]
    count = found["pair_count"].values
    return header, (
        [str(name), str(count[k]), *point, *(_number(c[i, j, k], _CURVE_DIGITS) for c in columns)]
        for k, name in enumerate(found["pair_name"].values)
        for i, j, point in _grid_points(found)
    )


def _structure_factor(found: xr.Dataset) -> Table:
    """One row for each wave vector, temperature and field: all of one grid point together."""
    if "structure_factor" not in found:
        why = found.attrs.get("structure_factor_unavailable", "compute it again")
        raise UnavailableError(f"the file holds no structure factor: {why}")
    kinds = [n for n in ("", "_xx", "_yy", "_zz") if f"structure_factor{n}" in found]
    q = found["wave_vector"].values
    header = [*_grid_heads(found), *("hkl"[: q.shape[1]]), *(f"structure_factor{n}" for n in kinds)]
    columns = [found[f"structure_factor{n}"].values for n in kinds]
    return header, (
        [*point, *map(_number, q[k]), *(_number(c[i, j, k], _CURVE_DIGITS) for c in columns)]
        for i, j, point in _grid_points(found)
        for k in range(len(q))
    )


def _grid_heads(found: xr.Dataset) -> list[str]:
    return [_head(n, str(found[n].attrs["units"])) for n in ("temperature", "field")]


def _grid_points(found: xr.Dataset) -> Iterator[tuple[int, int, list[str]]]:
    """All temperatures of one field together."""
    for j, b in enumerate(found["field"].values):
        for i, t in enumerate(found["temperature"].values):
            yield i, j, [_number(t), _number(b)]


_TABLES: dict[str, dict[str, Callable[[xr.Dataset], Table]]] = {
    "magnetocaloric": {"values": _magnetocaloric},
    "levels": {"levels": _levels},
    "correlations": {"pairs": _correlation_pairs, "structure": _structure_factor},
    "fit": {"points": _points, "parameters": _parameters},
    "comparison": {
        "candidates": _candidates,
        "parameters": _candidate_parameters,
        "points": _comparison_points,
        "next": _next,
    },
}


def flag_word(flags: xr.DataArray, index: int) -> str:
    """The meaning of one value of a flag variable (CF §3.5)."""
    values: list[Any] = np.atleast_1d(flags.attrs["flag_values"]).tolist()
    words = str(flags.attrs["flag_meanings"]).split()
    return words[values.index(int(flags.values[index]))]
