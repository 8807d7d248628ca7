"""Tables for the terminal: the plan of a spectrum, the result of a fit, the shape of curves.

They go to standard output; to a file without colour, and with no blanks at the ends of lines.
"""

from __future__ import annotations

import math
from collections.abc import Mapping
from typing import Any

import numpy as np
import xarray as xr
from rich import box
from rich.console import Console
from rich.table import Table
from rich.text import Text

from thermo.report.export import flag_word
from thermo.report.numbers import duration, grouped, plain, size, with_uncertainty
from thermo.report.quantities import (
    MAGNETIC,
    Quantity,
    along_z,
    by_scatter,
    dataset_per,
    direction_note,
    quantity,
    share,
    unit_of,
)

_PIPE_WIDTH = 100  # columns, when nobody's window sets them


def _console(console: Console | None) -> Console:
    if console is not None:
        return console
    found = Console(highlight=False, soft_wrap=False)
    if not found.is_terminal and found.width == 80:
        found = Console(highlight=False, width=_PIPE_WIDTH)
    return found


def show(console: Console | None, *parts: Table | str) -> None:
    """Print tables and lines of text; a file gets whole lines, without blanks at their ends."""
    out = _console(console)
    with out.capture() as capture:
        for part in parts:
            if isinstance(part, str):
                out.print(Text(part), soft_wrap=not out.is_terminal)
            else:
                out.print(part)
    lines = capture.get()
    if not out.is_terminal:
        lines = "\n".join(line.rstrip(" ") for line in lines.split("\n"))
    out.file.write(lines)
    out.file.flush()


def new_sheet(title: str, *columns: str, right: tuple[str, ...] = ()) -> Table:
    """An empty table in the house's style; the columns in ``right`` are numbers."""
    sheet = Table(title=title or None, title_justify="left", box=box.SIMPLE_HEAD, pad_edge=False,
                  title_style="bold", show_header=any(columns))  # fmt: skip
    for column in columns:
        sheet.add_column(column, justify="right" if column in right else "left", overflow="fold",
                         no_wrap=column == "value")  # fmt: skip
    return sheet


def print_plan(plan: Any, console: Console | None = None) -> None:
    """Print what a survey found; ``plan`` is the survey's Plan (anything with its as_dict())."""
    facts: Mapping[str, Any] = plan.as_dict()
    sheet = Table(box=None, show_header=False, pad_edge=False, padding=(0, 2, 0, 0))
    sheet.add_column(style="bold", no_wrap=True)
    sheet.add_column(overflow="fold")
    for name, text in plan_rows(facts):
        sheet.add_row(Text(name), Text(text))
    show(console, sheet, *(f"Note: {note}" for note in facts.get("notes") or ()))


def _many(count: Any, noun: str) -> str:
    number = count if isinstance(count, int) else len(count)
    return f"{grouped(number)} {noun}{'' if number == 1 else 's'}"


_METHODS = {"none": "none: neither a full nor a sampled spectrum fits"}


def plan_rows(facts: Mapping[str, Any]) -> list[tuple[str, str]]:
    """The plan as (name, text) pairs, in the order they are told."""
    rows = []
    if facts.get("title"):
        rows.append(("model", str(facts["title"])))
    rows.append(
        ("sites, bonds", f"{_many(facts['sites'], 'site')}, {_many(facts['bonds'], 'bond')}")
    )
    couplings = facts.get("couplings")
    if isinstance(couplings, Mapping):
        unit = str(facts.get("energy_unit", "1"))
        tail = "" if unit == "1" else f" {unit}"
        rows.append(
            ("couplings", ", ".join(f"{k} = {v:g}{tail}" for k, v in couplings.items()) or "none")
        )
    elif isinstance(couplings, list | tuple):
        rows.append(("couplings", ", ".join(str(c) for c in couplings) or "none"))
    elif couplings is not None:
        rows.append(("couplings", str(couplings)))
    rows.append(("states", grouped(facts["n_states"])))
    words = {
        "total_spin": "total spin S (and M)",
        "magnetic_number": "magnetic number M",
        "parity": "parity of M",
        "none": "nothing",
    }
    conserved = str(facts.get("conserved", "none"))
    rows.append(("conserved", words.get(conserved, conserved)))
    group = f"{grouped(facts['group_order'])} site permutations" if facts.get("group_order") else ""
    if facts.get("abelian_order"):
        group += f"; {grouped(facts['abelian_order'])} used to split blocks"
        group += ", with spin reversal" if facts.get("spin_reversal") else ""
    if group:
        rows.append(("symmetry", group))
    if facts.get("sectors"):
        rows.append(("blocks", blocks_text(facts["sectors"])))
    if facts.get("memory_bytes") is not None:
        limit = facts.get("memory_limit")
        needed = size(facts["memory_bytes"])
        link = " of" if needed[0].isdigit() else ";"
        rows.append(("memory", needed + (f"{link} {size(limit)} allowed" if limit else "")))
    if facts.get("seconds") is not None:
        rows.append(("time", duration(float(facts["seconds"]))))
    if facts.get("method"):
        method = str(facts["method"])
        text = _METHODS.get(method, method)
        if method == "sampled":
            text += f": {_sampled_text(facts)}"
        rows.append(("method", text))
    return rows


def _sampled_text(facts: Mapping[str, Any]) -> str:
    """Who is sampled: "132 blocks by 2 random vectors each, 38 small ones solved fully"."""
    blocks = [s if isinstance(s, Mapping) else vars(s) for s in facts.get("sectors") or ()]
    sampled = sum(b.get("method") == "sampled" for b in blocks)
    text = f"{_many(sampled, 'block')} by {_many(int(facts.get('vectors', 0)), 'random vector')}"
    text += " each" if sampled > 1 else ""
    full = len(blocks) - sampled
    return text + (f", {_many(full, 'small one')} solved fully" if full else "")


def blocks_text(sectors: Any) -> str:
    """The blocks in a line: "22, largest 4650 × 4650 real; 12 of them stand for 40"."""
    blocks = [s if isinstance(s, Mapping) else vars(s) for s in sectors]
    largest = max(blocks, key=lambda b: (b["dimension"], not b["real"]))
    n = grouped(largest["dimension"])
    text = f"{grouped(len(blocks))}, largest {n} × {n} {'real' if largest['real'] else 'complex'}"
    whole = sum(float(b.get("multiplicity", 1)) for b in blocks)
    if whole > len(blocks):
        text += f"; they stand for {grouped(whole)}"
    return text


def print_fit(fit: xr.Dataset, console: Console | None = None) -> None:
    """Print a fit dataset: parameters with standard errors, correlations, how each set fits.

    How: χ² where uncertainties were stated, else the scatter, since χ² is then fixed by it.
    """
    sheets = [_parameter_sheet(fit), _correlation_sheet(fit), _dataset_sheet(fit)]
    show(console, *(sheet for sheet in sheets if sheet is not None), *fit_verdict(fit))


def _dataset_sheet(fit: xr.Dataset) -> Table:
    scatter = by_scatter(fit)
    right = ("points", "scatter") if scatter else ("points", "χ²", "χ² per point")
    sheet = new_sheet("Data sets", "name", "quantity", "units", "per", *right, right=right)
    owner = fit["point_dataset"].values
    for n, name in enumerate(fit["dataset_name"].values):
        mine = owner == n
        count = int(np.count_nonzero(mine))
        if scatter:
            found = [_scatter(fit["observed"].values[mine], fit["residual"].values[mine])]
        else:
            chi = float(fit["dataset_chi_square"][n])
            found = [plain(chi, 4), plain(chi / count, 3) if count else ""]
        sheet.add_row(
            Text(str(name)),
            Text(str(fit["dataset_quantity"].values[n])),
            Text(str(fit["dataset_units"].values[n])),
            dataset_per(fit, n),
            grouped(count),
            *found,
        )
    return sheet


def _scatter(observed: Any, residual: Any) -> str:
    """Root mean square of the residuals as a share of the mean magnitude measured."""
    mean = float(np.mean(np.abs(observed))) if observed.size else 0.0
    if not mean:
        return ""
    return f"{plain(100 * math.sqrt(float(np.mean(residual**2))) / mean, 2)} % of the mean"


def fit_verdict(fit: xr.Dataset) -> list[str]:
    """What to know before believing the numbers: χ²/ν, convergence, bounds."""
    freedom = f"{grouped(int(fit['degrees_of_freedom']))} degrees of freedom"
    reduced = float(fit["reduced_chi_square"])
    ratio = f", reduced χ² = {plain(reduced, 4)}" if math.isfinite(reduced) else ""
    if by_scatter(fit):  # each χ² is then as large as the scatter makes it
        start = f"Errors from the scatter, with {freedom}"
    else:
        start = f"χ² = {plain(float(fit['chi_square']), 5)} with {freedom}{ratio}"
    lines = [
        f"{start}; "
        + ("converged" if int(fit["converged"]) else "NOT converged: do not use these values")
        + f" after {grouped(int(fit['evaluations']))} evaluations."
    ]
    told = str(fit.attrs.get("cautions", ""))
    stuck = [
        f"{name} ({flag_word(fit['at_bound'], n)})"
        for n, name in enumerate(fit["parameter_name"].values)
        if int(fit["at_bound"][n]) and f"{name} sits at" not in told
    ]
    if stuck:
        lines.append(
            f"At a bound: {', '.join(stuck)}; the standard errors and correlations then mean "
            "little, so widen the bound or fix the parameter."
        )
    return lines


def _parameter_sheet(fit: xr.Dataset) -> Table:
    sheet = new_sheet("Parameters", "name", "value", "units", "start", "bounds", "")
    for n, name in enumerate(fit["parameter_name"].values):
        role = flag_word(fit["parameter_role"], n)
        tie = str(fit["parameter_tie"].values[n])
        stuck = flag_word(fit["at_bound"], n)
        remark = {"fixed": "fixed", "tied": f"= {tie}", "free": ""}[role]
        if stuck != "none":
            remark = f"at its {stuck} bound"
        remark = "; ".join(part for part in (remark, *_known_of(fit, n)) if part)
        unit = str(fit["parameter_units"].values[n])
        free = role == "free"
        sheet.add_row(
            Text(str(name)),
            with_uncertainty(float(fit["value"][n]), float(fit["standard_error"][n])),
            Text("" if unit == "1" else unit),
            plain(float(fit["start"][n]), 5) if free else "",
            _bounds(float(fit["lower_bound"][n]), float(fit["upper_bound"][n])) if free else "",
            Text(remark),
        )
    return sheet


def _known_of(fit: xr.Dataset, n: int) -> list[str]:
    """Prior and 95 % interval of one parameter, where the fit has them."""
    found = []
    if "prior" in fit and math.isfinite(float(fit["prior"][n])):
        error = float(fit["prior_error"][n])
        found.append(f"prior {with_uncertainty(float(fit['prior'][n]), error)}")
    if "lower_95" in fit:
        low, high = float(fit["lower_95"][n]), float(fit["upper_95"][n])
        if not (math.isnan(low) and math.isnan(high)):
            ends = ["?" if math.isnan(x) else plain(x, 5) for x in (low, high)]
            found.append(f"95 %: {ends[0]} … {ends[1]}")
    return found


def _bounds(low: float, high: float) -> str:
    if math.isinf(low) and math.isinf(high):
        return "none"
    if math.isinf(high):
        return f"≥ {low:g}"
    if math.isinf(low):
        return f"≤ {high:g}"
    return f"{low:g} … {high:g}"


def _correlation_sheet(fit: xr.Dataset) -> Table | None:
    matrix = fit["correlation"].values
    rows = [n for n in range(len(matrix)) if np.isfinite(matrix[n, n])]
    if len(rows) < 2:
        return None
    names = [str(fit["parameter_name"].values[n]) for n in rows]
    if len(rows) > 7:  # wider than a page: the strong ones only
        sheet = new_sheet("Strongest correlations", "first", "second", "correlation",
                       right=("correlation",))  # fmt: skip
        pairs = [(a, b) for i, a in enumerate(rows) for b in rows[:i]]
        for a, b in sorted(pairs, key=lambda p: -abs(matrix[p]))[:10]:
            first, second = (str(fit["parameter_name"].values[k]) for k in (b, a))
            sheet.add_row(Text(first), Text(second), f"{matrix[a, b]:+.3f}")
        return sheet
    sheet = new_sheet("Correlations", "", *names[:-1], right=tuple(names))
    for i, a in enumerate(rows[1:], start=1):
        cells = [f"{matrix[a, b]:+.3f}" for b in rows[:i]]
        sheet.add_row(Text(names[i]), *cells)
    return sheet


def _curve_value(item: Quantity, t: int, b: int) -> str:
    """A value of a curve, with its standard error where that shows in six digits."""
    value = float(item.values[t, b])
    error = float(item.error[t, b]) if item.error is not None else math.nan
    return with_uncertainty(value, error) if error > 5e-7 * abs(value) else plain(value, 6)


def print_curves(curves: xr.Dataset, console: Console | None = None) -> None:
    """Print where C, χ and χT peak and where the entropy ends, for each field."""
    right = ("field", "largest value", "at temperature", "at the highest")
    sheet = new_sheet(f"Curves {share(curves.attrs)}", "quantity", "units", *right, right=right)
    temperature, field = curves["temperature"].values, curves["field"].values
    magnetic = False
    for name in ("specific_heat", "susceptibility", "chi_T", "entropy", "magnetization"):
        if name not in curves and not (name == "chi_T" and "susceptibility" in curves):
            continue
        magnetic |= name in MAGNETIC
        item = quantity(curves, name)
        for j, b in enumerate(field):
            column = item.values[:, j]
            top = int(np.argmax(column))
            edge = " (edge)" if top in (0, len(column) - 1) and len(column) > 1 else ""
            sheet.add_row(
                name, item.unit, f"{b:g} {unit_of(curves, 'field')}".removesuffix(" 1"),
                _curve_value(item, top, j), f"{temperature[top]:.5g}{edge}",
                _curve_value(item, -1, j),
            )  # fmt: skip
    direction = []
    if magnetic and along_z(curves.attrs):
        direction.append("B \u2225 z: the field, susceptibility and magnetization are along z.")
    elif magnetic and (note := direction_note(curves.attrs)):
        direction.append(f"{note}.")
    show(console, sheet, *direction)
