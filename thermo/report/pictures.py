"""Pictures of curves, levels and fits for a journal's column: PNG (300 dpi), SVG or PDF."""

from __future__ import annotations

import os
from collections.abc import Sequence
from typing import Any

import numpy as np
import xarray as xr
from matplotlib.axes import Axes
from matplotlib.collections import LineCollection
from matplotlib.ticker import MaxNLocator

from thermo.errors import FileFormatError, RangeError, UnavailableError
from thermo.report import style
from thermo.report.comparison_picture import draw_comparison
from thermo.report.correlation_picture import draw_correlations
from thermo.report.fit_picture import draw_fit
from thermo.report.numbers import grouped, typeset
from thermo.report.quantities import (
    CURVE_QUANTITIES,
    DEFAULT_PANELS,
    SYMBOLS,
    Quantity,
    axis_label,
    names,
    per_note,
    power_of_thousand,
    pretty_unit,
    quantity,
)
from thermo.units import MOLAR_BOHR_MAGNETON, MOMENT_SI_PER_EMU
from thermo.variables import convert_curves

_MOST_LEVELS = 3000  # bars of a column of levels that a page can still tell apart
_ISOTHERMS = 6


def plot(
    dataset: xr.Dataset,
    path: str | os.PathLike[str],
    what: str | Sequence[str] | None = None,
    units_system: str | None = None,
    title: str | None = None,
    scale: str | None = None,
) -> None:
    """Draw a dataset of any kind into a .png, .svg or .pdf file.

    ``what`` chooses the panels: for curves one or several (a list, or names with commas) of
    specific_heat, specific_heat_over_T, entropy, susceptibility, chi_T, magnetization (over the
    field), internal_energy, free_energy; for a fit the name of a data set; for a comparison the
    same, or "next", what to measure; for levels "levels" or "density"; for correlations "pairs" or
    "structure". All there is by default.
    ``units_system`` converts molar curves to "molar-si" or "molar-cgs". ``scale`` "linear" or
    "log" sets the temperature axis; by default it is linear for evenly spaced temperatures and
    logarithmic for geometric ones, or others that span over 1.5 decades. Raises FileFormatError,
    UnavailableError, UnitsError or RangeError.
    """
    style.check_suffix(path)
    chosen = names(what)
    kind = str(dataset.attrs.get("content"))
    if kind not in _DRAWN:
        known = ", ".join(_DRAWN)
        raise FileFormatError(f"only datasets of these kinds can be drawn: {known}")
    if scale not in (None, "linear", "log"):
        raise RangeError(f"the scale {scale!r} is unknown; use linear or log")
    if scale is not None and kind == "levels":
        raise UnavailableError("a picture of levels has no temperature axis; leave the scale out")
    if kind == "curves" and units_system is not None:
        dataset = convert_curves(dataset, units_system)
    with style.style():
        if kind == "levels":
            figure = _draw_levels(dataset, chosen)
        else:
            figure = _DRAWN[kind](dataset, chosen, scale)
        if title:
            figure.suptitle(title, fontsize=9)
        style.save(figure, path)


def _draw_curves(curves: xr.Dataset, chosen: list[str], scale: str | None) -> Any:
    panels = chosen or [
        name
        for name in DEFAULT_PANELS
        if name in curves or (name == "chi_T" and "susceptibility" in curves)
    ]
    several = curves.sizes["field"] > 1
    if not chosen and several and "magnetization" in curves:
        panels.append("magnetization")
    if not panels:
        panels = [name for name in CURVE_QUANTITIES if name in curves]
    if not panels:
        raise UnavailableError("the curves hold no quantity that can be drawn")
    ready = [quantity(curves, name) for name in panels]

    columns = 1 if len(panels) == 1 else 2
    rows = -(-len(panels) // columns)
    width = style.SINGLE if columns == 1 else style.DOUBLE
    figure = style.new_figure(width, 0.25 + rows * (2.45 if columns == 1 else 2.2))
    grid = figure.subplots(rows, columns, squeeze=False).ravel()
    spare = grid[len(panels) :]
    for axes in spare:
        axes.set_axis_off()
    grid = grid[: len(panels)]
    fields = style.Shades(curves["field"].values, "B", str(curves["field"].attrs["units"]))
    over_temperature = []
    for axes, item in zip(grid, ready, strict=True):
        if item.name == "magnetization" and several:
            power = _over_field(axes, curves, item, spare[0] if len(spare) else None)
        else:
            power = _over_temperature(axes, curves, item, fields, scale)
            over_temperature.append(axes)
        if item.name == "magnetization":
            _bohr_magnetons(axes, curves, item, power)
    if over_temperature:
        fields.explain(figure, list(grid), over_temperature[0])
    figure.supxlabel(per_note(curves.attrs), fontsize=6.5, color=style.GREY, x=0.99, ha="right")
    return figure


def _over_temperature(
    axes: Axes, curves: xr.Dataset, item: Quantity, fields: style.Shades, scale: str | None
) -> int:
    """Draw a quantity at each field; the power of ten taken out of its axis."""
    t = curves["temperature"].values
    power = power_of_thousand([item.values])
    y = item.values / 10.0**power
    marker = "o" if t.size == 1 else ""
    for b in range(y.shape[1]):
        colour = fields.colour(b)
        axes.plot(t, y[:, b], color=colour, label=fields.label(b), marker=marker, markersize=3)
        if item.error is not None:
            _band(axes, t, y[:, b], item.error[:, b] / 10.0**power, colour)
    axes.set_ylabel(item.label(power))
    axes.set_xlabel(axis_label("T", str(curves["temperature"].attrs["units"])))
    if t.size > 1:
        axes.set_xlim(t[0], t[-1])
    if style.wants_log(t, scale):
        style.log_axis(axes)
    elif t.size > 1 and t[0] < 0.1 * t[-1]:
        axes.set_xlim(0, t[-1])
    _from_zero(axes, y)
    return power


def _band(axes: Axes, x: Any, y: Any, error: Any, colour: Any) -> None:
    """One standard error to both sides; a bar where there is one point only."""
    if len(x) == 1:
        axes.errorbar(x, y, error, color=colour, linewidth=0.8, capsize=2)
    else:
        axes.fill_between(x, y - error, y + error, color=colour, alpha=0.25, linewidth=0)


def _over_field(axes: Axes, curves: xr.Dataset, item: Quantity, spare: Axes | None) -> int:
    """Draw isotherms over the field; the power of ten taken out of the axis."""
    t, b = curves["temperature"].values, curves["field"].values
    # A few isotherms spread evenly over the grid's own spacing.
    picked = np.unique(np.linspace(0, t.size - 1, min(_ISOTHERMS, t.size)).round().astype(int))
    shades = style.Shades(t[picked], "T", str(curves["temperature"].attrs["units"]), reverse=True)
    power = power_of_thousand([item.values[picked]])
    y = item.values / 10.0**power
    marker = "o" if b.size < 12 else ""
    for n, row in enumerate(picked):
        axes.plot(b, y[row], color=shades.colour(n), label=shades.label(n), marker=marker,
                  markersize=2.5)  # fmt: skip
        if item.error is not None:
            _band(axes, b, y[row], item.error[row] / 10.0**power, shades.colour(n))
    axes.set_xlim(b[0], b[-1])
    axes.set_xlabel(axis_label("B", str(curves["field"].attrs["units"])))
    axes.set_ylabel(item.label(power))
    _from_zero(axes, y[picked])
    if shades.single:
        return power
    if spare is None:
        axes.legend(title="$T$", loc="best")
    else:  # isotherms fan out over the whole panel; the empty place beside it takes the legend
        spare.legend(*axes.get_legend_handles_labels(), title="$T$", loc="upper left")
    return power


def _bohr_magnetons(axes: Axes, curves: xr.Dataset, item: Quantity, power: int) -> None:
    """A second scale on the right: a molar magnetization in μ_B per ion or formula unit."""
    per = {"ion": "ion", "formula": "formula unit"}.get(str(curves.attrs["per"]))
    if item.unit == "1" or item.unit == "muB" or per is None:
        return
    one = MOLAR_BOHR_MAGNETON / (MOMENT_SI_PER_EMU if item.unit.startswith("emu") else 1)
    ratio = 10.0**power / one
    axes.tick_params(axis="y", which="both", right=False)

    def there(y: Any) -> Any:
        return y * ratio

    def back(y: Any) -> Any:
        return y / ratio

    right = axes.secondary_yaxis("right", functions=(there, back))
    right.set_ylabel(f"$M$ ({pretty_unit('muB')} per {per})")


def _from_zero(axes: Axes, values: Any) -> None:
    finite = values[np.isfinite(values)]
    if finite.size and finite.min() >= 0 and finite.max() > 0:
        axes.set_ylim(0, 1.08 * float(finite.max()))


def _draw_levels(levels: xr.Dataset, chosen: list[str]) -> Any:
    resolved = str(levels.attrs["resolved"])
    known = ["levels", "density"]
    for name in chosen:
        if name not in known:
            raise UnavailableError(
                f"{name!r} cannot be drawn of levels; choose from levels, density"
            )
    if resolved not in ("total_spin", "magnetic_number"):
        if chosen == ["levels"]:
            raise UnavailableError(
                "the levels carry neither S nor M to be drawn against; choose density"
            )
        chosen = ["density"]
    panels = chosen or known
    unit = str(levels.attrs["energy_unit"])
    energy = levels["energy"].values
    above = energy - energy.min()
    power = power_of_thousand([above])
    above = above / 10.0**power
    wide = style.SINGLE if len(panels) == 1 else style.DOUBLE
    figure = style.new_figure(wide, 3.2)
    grid = figure.subplots(1, len(panels), squeeze=False, sharey=True)[0]
    for axes, name in zip(grid, panels, strict=True):
        if name == "levels":
            _ladder(axes, levels, above, resolved)
        else:
            _density(axes, above, levels["weight"].values)
    grid[0].set_ylabel(axis_label("E - E_0", unit, power))
    top = float(above.max()) or 1.0
    grid[0].set_ylim(-0.02 * top, 1.02 * top)
    count, states = grouped(levels.sizes["level"]), grouped(float(levels["weight"].sum()))
    exact = int(np.count_nonzero(levels["vector"].values < 0))
    if exact < levels.sizes["level"]:
        count += f" levels ({grouped(exact)} exact, the others grey, sampled)"
    else:
        count += " levels"
    note = f"{count}, {states} states, $E_0$ = {typeset(f'{energy.min():.8g}')}"
    note += "" if unit == "1" else f" {typeset(unit)}"
    figure.supxlabel(note, fontsize=6.5, color=style.GREY, x=0.99, ha="right")
    return figure


def _ladder(axes: Axes, levels: xr.Dataset, above: Any, resolved: str) -> None:
    number = levels[resolved].values
    present = np.unique(number[np.isfinite(number)])
    step = float(np.diff(present).min()) if present.size > 1 else 1.0
    exact = levels["vector"].values < 0
    counts = levels["weight"].values > 0  # a sampled level may stand for nothing
    # Exact levels over the sampled ones, which are not levels of the cluster itself.
    for mine, colour in ((counts & ~exact, style.GREY), (counts & exact, style.BLUE)):
        segments = []
        for value in present:
            heights = above[mine & (number == value)]
            if heights.size > _MOST_LEVELS:  # bars closer than a pixel are one bar
                fine = float(above.max()) / _MOST_LEVELS
                heights = np.unique(np.round(heights / fine)) * fine
            half = 0.38 * step
            segments += [[(value - half, e), (value + half, e)] for e in heights]
        axes.add_collection(LineCollection(segments, colors=colour, linewidths=0.5))
    axes.set_xlim(present[0] - 0.6 * step, present[-1] + 0.6 * step)
    axes.xaxis.set_major_locator(MaxNLocator(integer=step == 1 and present[0] % 1 == 0))
    if present.size <= 12:
        axes.set_xticks(present, [f"{v:g}" if v % 1 == 0 else f"{2 * v:.0f}/2" for v in present])
    axes.tick_params(axis="x", which="minor", bottom=False, top=False)
    axes.set_xlabel("total spin $S$" if resolved == "total_spin" else "$|M|$")


def _density(axes: Axes, above: Any, weight: Any) -> None:
    bins = int(np.clip(4 * np.sqrt(above.size), 20, 120))
    top = float(above.max()) or 1.0
    counts, edges = np.histogram(above, bins=bins, range=(0, top), weights=weight)
    share = np.clip(counts, 0, None) / weight.sum() * 100
    axes.stairs(share, edges, orientation="horizontal", fill=True, color=style.BLUE, alpha=0.35)
    axes.stairs(share, edges, orientation="horizontal", color=style.BLUE, linewidth=0.8)
    axes.set_xlim(0, 1.08 * float(share.max()))
    axes.set_xlabel(f"share of all states (%) in each of {bins} intervals")


__all__ = ["SYMBOLS", "plot"]


_DRAWN: dict[str, Any] = {
    "curves": _draw_curves,
    "levels": _draw_levels,
    "fit": draw_fit,
    "comparison": draw_comparison,
    "correlations": draw_correlations,
}
