"""Tables of measured data: stated columns, nothing guessed, every cell checked."""

from __future__ import annotations

import csv
import dataclasses
import math
import os
import re
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from thermo.errors import DataError, UnitsError
from thermo.fit.amounts import read_amount
from thermo.fit.masks import read_masks
from thermo.fit.strict import Section, did_you_mean
from thermo.units import quantity_factor, unit_name

Vector = NDArray[np.float64]

#: Quantities a data set may hold, by their names in thermo.units.
QUANTITIES = ("susceptibility", "chi_T", "specific_heat", "specific_heat_over_T", "magnetization")
#: Quantities that need a conserved moment and one common g.
MAGNETIC = ("susceptibility", "chi_T", "magnetization")
DELIMITERS: Mapping[str, str] = {",": ",", ";": ";", "tab": "\t", "space": " "}
COMMENT = "#"
#: Sizes of numbers that can be used: squares and quotients of them are finite.
SMALLEST, LARGEST = 1e-100, 1e100


@dataclass(frozen=True, eq=False)
class Measured:
    """One data set, its used points in SI units (numbers as they are for a dimensionless model).

    ``temperature`` [K], ``field`` [T], ``value`` and ``uncertainty`` [SI unit of the quantity,
    per mole of ``per``] have shape (n,), as has ``line``, the line of each point in the file.
    ``uncertainty`` is None where the study states none. ``to_si`` takes the file's unit to SI.
    ``direction`` of the field in the model's axes is "z", or "" where the study states none.
    ``sample`` is the word for what was measured, "" where the study states none; ``scale_error``
    the relative error all points share (mass), None for none. ``parameter_names`` and ``scales``
    say which parameters play which roles for the set (fit/roles.py).
    """

    name: str
    file: str
    quantity: str
    units: str
    per: str
    temperature: Vector
    field: Vector
    value: Vector
    uncertainty: Vector | None
    line: NDArray[np.int64]
    n_masked: int
    to_si: float
    direction: str = ""
    sample: str = ""
    scale_error: float | None = None
    parameter_names: Mapping[str, str] = dataclasses.field(default_factory=dict)
    scales: tuple[str, ...] = ()

    @property
    def n_points(self) -> int:
        """Number of points that enter the fit."""
        return len(self.value)

    @property
    def word(self) -> str:
        """The set's name as a word, for names of parameters: "chi (run 2)" is "chi_run_2"."""
        return re.sub(r"\W+", "_", self.name).strip("_")

    @property
    def own_scale(self) -> str:
        """The name its own scale would have."""
        return f"scale_{self.word}"

    @property
    def feels_direction(self) -> bool:
        """Whether the field's direction matters to what was measured."""
        return self.quantity in MAGNETIC or bool(np.any(self.field > 0))


@dataclass(frozen=True)
class _Rows:
    """The cells of a table: a line number for each row, and the columns wanted from each."""

    path: str
    lines: list[int]
    cells: list[list[str]]
    header: list[str] | None
    delimiter: str


def read_measured(section: Section, folder: Path, reduced: bool) -> Measured:
    """Read one ``[[data]]`` table of a study and the file it names.

    ``reduced`` says that the model is dimensionless, and with it every number of the table.
    Raises StudyError for the table's keys, UnitsError for its units, DataError for the file.
    """
    name = section.text("name", "a name for this data set")
    file = section.text("file", "the path of the data file, relative to the study")
    quantity = section.word("quantity", QUANTITIES)
    units = section.text("units", "the unit of the values")
    per = section.word("per", ("ion", "formula"), "ion")
    direction = section.word("direction", ("z",)) if section.has("direction") else ""
    delimiter = section.word("delimiter", tuple(DELIMITERS), ",")
    header = section.flag("header", True)
    stated = section.has("header")
    temperature_unit = section.text("temperature_unit", "K or mK", "1" if reduced else "K")
    field_unit = section.text("field_unit", "T, mT, Oe or kOe", "1" if reduced else "T")
    units, per_amount = read_amount(section, quantity, units, reduced)
    to_si = _factor(section, "units", quantity, units, reduced)
    to_kelvin = _factor(section, "temperature_unit", "temperature", temperature_unit, reduced)
    to_tesla = _factor(section, "field_unit", "field", field_unit, reduced)
    columns = Section(
        section.raw("columns", "temperature, value and, if there is one, uncertainty"),
        section.at("columns"),
        section.source,
    )
    roles = {"temperature": "the temperature", "value": "the measured values"}
    for optional in ("uncertainty", "field", "flag"):
        if columns.has(optional):
            roles[optional] = f"the {optional}"
    fixed_temperature = section.optional_number(
        "temperature", f"a temperature in {temperature_unit}"
    )
    fixed_field = section.optional_number("field", f"a field in {field_unit}")
    if fixed_temperature is not None:
        del roles["temperature"]
        if columns.has("temperature"):
            raise section.fail("temperature", "is given besides a temperature column; keep one")
        if fixed_temperature <= 0:
            raise section.fail("temperature", f"= {fixed_temperature:g} must lie above zero")
    if fixed_field is not None and "field" in roles:
        raise section.fail("field", "is given besides a field column; keep one of the two")
    if fixed_field is not None and fixed_field < 0:
        raise section.fail("field", f"= {fixed_field:g} is negative; give its magnitude")
    if quantity == "magnetization" and fixed_field is None and "field" not in roles:
        raise section.fail("field", "is missing, and a magnetization needs one; give columns.field")
    wanted = {role: _column(columns, role, what, header) for role, what in roles.items()}
    columns.close()
    relative = section.optional_number("relative_uncertainty", "a fraction such as 0.01")
    absolute = section.optional_number("absolute_uncertainty", f"a number in {units}")
    given = [relative is not None, absolute is not None, "uncertainty" in wanted]
    if sum(given) > 1:
        raise section.fail(
            "columns.uncertainty" if given[2] else "relative_uncertainty",
            "is not the only uncertainty stated; keep one of columns.uncertainty, "
            "relative_uncertainty and absolute_uncertainty",
        )
    for key, number in (("relative_uncertainty", relative), ("absolute_uncertainty", absolute)):
        if number is not None and number <= 0:
            raise section.fail(key, f"= {number:g} must be above zero")
    masks = read_masks(section, "flag" in roles)
    sample = section.identifier("sample", "a word for the sample, such as A or crystal_2")
    scale_error = section.optional_number("scale_error", "a fraction such as 0.02")
    if scale_error is not None and not 0 < scale_error < 1:
        raise section.fail(
            "scale_error", f"= {scale_error:g} is no fraction between 0 and 1; give e.g. 0.02"
        )
    section.close()

    rows = _read_rows(folder / file, DELIMITERS[delimiter], header, stated)
    numbers = {
        role: _numbers(rows, where, role) for role, where in wanted.items() if role != "flag"
    }
    flags = _texts(rows, wanted["flag"], "flag") if "flag" in wanted else None
    n = len(rows.lines)
    line = np.array(rows.lines, dtype=np.int64)
    value = numbers["value"] * per_amount
    # The stated units are those of the columns and of the values that stand for them.
    temperature = to_kelvin * (
        np.full(n, fixed_temperature) if fixed_temperature is not None else numbers["temperature"]
    )
    field = to_tesla * (numbers["field"] if "field" in numbers else np.full(n, fixed_field or 0.0))
    for what, unit, size in (("temperature", "K", temperature), ("field", "T", field),
                             (quantity, "SI units", value * to_si)):  # fmt: skip
        _check_size(rows.path, line, size, what, unit)
    _check_points(rows.path, line, temperature, field, "temperature" in numbers, "field" in numbers)
    uncertainty: Vector | None = None
    if relative is not None:
        uncertainty = relative * np.abs(value)
        zero = np.flatnonzero(uncertainty == 0)
        if zero.size:
            raise DataError(
                f"{rows.path}, line {line[zero[0]]}: a relative uncertainty of the value 0 is "
                "zero; state absolute_uncertainty or a column instead"
            )
    elif absolute is not None:
        uncertainty = np.full(n, absolute * per_amount)
    elif "uncertainty" in numbers:
        uncertainty = numbers["uncertainty"] * per_amount
        bad = np.flatnonzero(uncertainty <= 0)
        if bad.size:
            raise DataError(
                f"{rows.path}, line {line[bad[0]]}: the uncertainty {uncertainty[bad[0]]:g} is "
                "not above zero; give a positive one or take the point out"
            )
    if uncertainty is not None:
        _check_size(rows.path, line, uncertainty * to_si, "uncertainty", "SI units", zero=False)
    keep = masks.keep(rows.path, temperature, field, flags)
    return Measured(
        name=name,
        file=rows.path,
        quantity=quantity,
        units=unit_name(quantity, units, reduced),
        per=per,
        temperature=temperature[keep],
        field=field[keep],
        value=value[keep] * to_si,
        uncertainty=None if uncertainty is None else uncertainty[keep] * to_si,
        line=line[keep],
        n_masked=int(n - keep.sum()),
        to_si=to_si,
        direction=direction,
        sample=sample,
        scale_error=scale_error,
    )


def _factor(section: Section, key: str, quantity: str, unit: str, reduced: bool) -> float:
    try:
        return quantity_factor(quantity, unit, reduced=reduced)
    except UnitsError as error:
        raise UnitsError(f"{section.source}: {section.at(key)}: {error}") from None


def _column(columns: Section, role: str, what: str, header: bool) -> str | int:
    """A column's header name, or its index from 0 for a number (which counts from 1)."""
    value = columns.raw(role, f"the column of {what}, by its header or its number from 1")
    if isinstance(value, bool) or not isinstance(value, str | int):
        raise columns.fail(role, f"= {value!r} is neither a header name nor a column number")
    if isinstance(value, int):
        if value < 1:
            raise columns.fail(role, f"= {value} is not a column number; they count from 1")
        return value - 1
    if not header:
        raise columns.fail(
            role, f"= {value!r} names a header, but header = false; give a column number from 1"
        )
    return value.strip()


def _read_rows(path: Path, delimiter: str, header: bool, stated: bool) -> _Rows:
    """The table's cells; ``stated`` says that the study itself asks for a header, or for none."""
    shown = os.fspath(path)
    try:
        text = path.read_text(encoding="utf-8-sig")
    except FileNotFoundError:
        raise DataError(f"{shown}: there is no such data file; check the path") from None
    except UnicodeDecodeError:
        raise DataError(f"{shown}: this is not a UTF-8 text; save the table as CSV text") from None
    except (OSError, ValueError) as error:
        reason = getattr(error, "strerror", None) or "its name is not valid"
        raise DataError(f"{shown}: the data file cannot be read ({reason})") from None
    names: list[str] | None = None
    lines: list[int] = []
    cells: list[list[str]] = []
    width: int | None = None
    for number, line in enumerate(text.splitlines(), start=1):
        if not line.strip() or line.lstrip().startswith(COMMENT):
            continue
        row = _split(line, delimiter, shown, number)
        if header and names is None:
            names = row
            # Taken for a header, a row of data would be lost without a word.
            if not stated and any(row) and all(_is_float(cell) for cell in row if cell):
                raise DataError(
                    f"the first row of {shown}, line {number}, looks like data; "
                    "set header = false and give columns by number (a line that begins with "
                    f"{COMMENT!r} is a comment, not a header)"
                )
            repeated = [name for name in names if name and names.count(name) > 1]
            if repeated:
                raise DataError(
                    f"{shown}, line {number}: the header names {repeated[0]!r} twice; "
                    "rename one column"
                )
            width = len(row)
            continue
        width = len(row) if width is None else width
        if len(row) != width:
            hint = (
                " (a decimal comma? write a point, or state another delimiter)"
                if delimiter == "," and len(row) > width
                else ""
            )
            raise DataError(
                f"{shown}, line {number}: {len(row)} cells where {width} are expected{hint}; "
                "check the delimiter and the end of the line"
            )
        lines.append(number)
        cells.append(row)
    if not cells:
        raise DataError(f"{shown}: the file holds no rows of data; check that it is the right one")
    return _Rows(shown, lines, cells, names, delimiter)


def _split(line: str, delimiter: str, path: str, number: int) -> list[str]:
    if delimiter == " ":
        return line.split()
    try:
        row = next(csv.reader([line], delimiter=delimiter, strict=True))
    except csv.Error as error:
        raise DataError(
            f"{path}, line {number}: the row cannot be split into cells ({error}); "
            "check its quotation marks"
        ) from None
    return [cell.strip() for cell in row]


def _texts(rows: _Rows, where: str | int, role: str) -> list[str]:
    """One column as it stands, (n,)."""
    index = _index(rows, where, role)
    return [row[index] for row in rows.cells]


def _numbers(rows: _Rows, where: str | int, role: str) -> Vector:
    """One column as finite numbers, shape (n,)."""
    index = _index(rows, where, role)
    label = rows.header[index] if rows.header else f"{index + 1}"
    return np.array(
        [
            _number(row[index], rows.path, line, label)
            for row, line in zip(rows.cells, rows.lines, strict=True)
        ]
    )


def _index(rows: _Rows, where: str | int, role: str) -> int:
    """Where a column stands, counted from 0."""
    width = len(rows.cells[0])
    if isinstance(where, int):
        if where >= width:
            raise DataError(
                f"{rows.path}: column {where + 1} is asked for the {role}, but there are {width}; "
                "columns count from 1"
            )
        return where
    names = rows.header or []
    if where not in names:
        shown = ", ".join(repr(name) for name in names[:8]) + ", ..." * (len(names) > 8)
        raise DataError(
            f"{rows.path}: there is no column {where!r} for the {role} among {shown}; "
            + _header_hint(where, names, rows.delimiter)
        )
    return names.index(where)


def _header_hint(where: str, names: Sequence[str], delimiter: str) -> str:
    """What may be wrong with a header that lacks a column."""
    if all(_is_float(name) for name in names):
        return (
            "its first row holds numbers, so set header = false and give columns by number "
            f"(a line that begins with {COMMENT!r} is a comment, not a header)"
        )
    if len(names) == 1 or delimiter == " ":  # split by the wrong character, if it holds another
        for word, mark in DELIMITERS.items():
            if mark not in (delimiter, " ") and any(mark in name for name in names):
                holds = "tabs" if word == "tab" else repr(word)
                return f'the header holds {holds}: set delimiter = "{word}"'
        if delimiter != " " and len(names[0].split()) > 1:
            return 'the header is a single column; if spaces part it, set delimiter = "space"'
    return did_you_mean(where, names)


def _number(cell: str, path: str, line: int, column: str) -> float:
    where = f"{path}, line {line}, column {column!r}"
    try:
        # float() would also take 1_000, which no table means.
        value = float(cell) if "_" not in cell else math.nan
        readable = "_" not in cell
    except ValueError:
        value, readable = math.nan, False
    if readable and math.isfinite(value):
        return value
    if not cell:
        raise DataError(f"{where}: the cell is empty; fill it or take the row out")
    if not readable:
        hint = f"correct or remove line {line}"
        if cell.count(",") == 1 and _is_float(cell.replace(",", ".")):
            hint = f"this looks like a decimal comma; write {cell.replace(',', '.')}"
        raise DataError(f"{where}: {cell!r} is not a number; {hint}")
    raise DataError(f"{where}: {cell!r} is not a finite number; take the row out")


def _is_float(text: str) -> bool:
    try:
        float(text)
    except ValueError:
        return False
    return True


def _check_points(
    path: str,
    line: NDArray[np.int64],
    temperature: Vector,
    field: Vector,
    temperature_column: bool,
    field_column: bool,
) -> None:
    bad = np.flatnonzero(temperature <= 0)
    if bad.size:
        raise DataError(
            f"{path}, line {line[bad[0]]}: the temperature {temperature[bad[0]]:g} K is not above "
            "zero; is temperature_unit right?"
        )
    bad = np.flatnonzero(field < 0)
    if bad.size:
        raise DataError(
            f"{path}, line {line[bad[0]]}: the field {field[bad[0]]:g} T is negative; "
            "give its magnitude"
        )
    if temperature_column and field_column:
        _check_pairs(path, line, temperature, field)
    elif temperature_column:
        _check_ascending(path, line, temperature, "temperature", "K")
    elif field_column:
        _check_ascending(path, line, field, "field", "T")
    elif len(line) > 1:
        raise DataError(f"{path}: all rows are at one temperature and field; name their column")


def _check_size(
    path: str, line: NDArray[np.int64], value: Vector, what: str, unit: str, zero: bool = True
) -> None:
    """Refuse what no measurement is and whose square is no finite number."""
    size = np.abs(value)
    bad = np.flatnonzero(~((size >= SMALLEST) & (size <= LARGEST)) & ~(zero & (size == 0)))
    if bad.size:
        raise DataError(
            f"{path}, line {line[bad[0]]}: the {what} is {value[bad[0]]:g} in {unit}, and only "
            f"sizes from {SMALLEST:g} to {LARGEST:g} can be used; check the numbers and their unit"
        )


def _check_ascending(
    path: str, line: NDArray[np.int64], value: Sequence[float] | Vector, what: str, unit: str
) -> None:
    step = np.diff(value)
    bad = np.flatnonzero(step <= 0)
    if bad.size:
        k = int(bad[0])
        how = "repeats" if step[k] == 0 else "falls below"
        what_to_do = (
            "average or take out repeated points"
            if step[k] == 0
            else f"sort the rows by ascending {what}"
        )
        raise DataError(
            f"{path}, line {line[k + 1]}: the {what} {value[k + 1]:g} {unit} {how} the one before "
            f"it ({value[k]:g} {unit}); {what_to_do}"
        )


def _check_pairs(path: str, line: NDArray[np.int64], temperature: Vector, field: Vector) -> None:
    """Rows on a (temperature, field) map may come in any order, each pair once."""
    order = np.lexsort((field, temperature))
    same = (np.diff(temperature[order]) == 0) & (np.diff(field[order]) == 0)
    if same.any():
        k = int(np.flatnonzero(same)[0])
        first, second = sorted((int(line[order[k]]), int(line[order[k + 1]])))
        raise DataError(
            f"{path}, line {second}: the temperature and field of line {first} are repeated; "
            "average or take out repeated points"
        )
