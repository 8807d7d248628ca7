"""Pictures of a comparison: the candidates' curves and residuals, and what to measure next."""

from __future__ import annotations

from typing import Any

import numpy as np
import xarray as xr
from matplotlib.axes import Axes

from thermo.errors import UnavailableError
from thermo.report import style
from thermo.report.fit_picture import shade_untrusted, untrusted
from thermo.report.quantities import SYMBOLS, axis_label, power_of_thousand

COLOURS = (style.VERMILION, style.BLUE, style.GREEN, style.ORANGE)
DASHES = ("-", "--", "-.", ":")
# Residuals of more candidates than this are not drawn.
MOST_RESIDUALS = 4
# Names up to so many letters stand two in a row.
SHORT = 28
NEXT = "next"


def draw_comparison(comparison: xr.Dataset, chosen: list[str], scale: str | None = None) -> Any:
    """A figure of the data sets named, or of all; or of "next", what to measure."""
    if chosen == [NEXT]:
        return draw_next(comparison)
    names = [str(name) for name in comparison["dataset_name"].values]
    for name in chosen:
        if name not in names:
            raise UnavailableError(
                f"the comparison has no data set {name!r}; choose from {', '.join(names)} or {NEXT}"
            )
    picked = [n for n, name in enumerate(names) if not chosen or name in chosen]
    residuals = min(comparison.sizes["candidate"], MOST_RESIDUALS)
    columns = 1 if len(picked) == 1 else 2
    rows = -(-len(picked) // columns)
    width = style.SINGLE if columns == 1 else style.DOUBLE
    figure = style.new_figure(width, rows * (2.3 + 0.55 * residuals))
    outer = figure.add_gridspec(rows, columns)
    for place, index in enumerate(picked):
        inner = outer[divmod(place, columns)].subgridspec(
            residuals + 1, 1, height_ratios=(3.4, *[1] * residuals), hspace=0
        )
        upper = figure.add_subplot(inner[0])
        lower = [figure.add_subplot(inner[k + 1], sharex=upper) for k in range(residuals)]
        _draw_dataset(upper, lower, comparison, index, names[index], scale)
    return figure


def _draw_dataset(
    upper: Axes, lower: list[Axes], found: xr.Dataset, index: int, name: str, scaling: str | None
) -> None:
    mine = found["point_dataset"].values == index
    line = found["curve_dataset"].values == index
    temperature, field = found["temperature"].values[mine], found["field"].values[mine]
    over = "field" if np.unique(field).size > np.unique(temperature).size else "temperature"
    x = field if over == "field" else temperature
    line_x = found[f"curve_{over}"].values[line]
    other = found["curve_temperature" if over == "field" else "curve_field"].values[line]
    observed = found["observed"].values[mine]
    sigma = found["uncertainty"].values[mine]
    weighted = bool(np.all(np.isfinite(sigma)))
    power = power_of_thousand([observed])
    unit = 10.0**power
    upper.errorbar(
        x, observed / unit, sigma / unit if weighted else None, fmt="o", markersize=2.4,
        markerfacecolor="none", markeredgewidth=0.6, color=style.BLACK, elinewidth=0.5, zorder=2,
        label=_plain(name),
    )  # fmt: skip
    standing = found["candidate_standing"].values
    for c, candidate in enumerate(found["candidate_name"].values):
        colour, dash = COLOURS[c % len(COLOURS)], DASHES[c // len(COLOURS) % len(DASHES)]
        y = found["curve_predicted"].values[c][line]
        fallen = "" if standing[c] else " (ruled out)"
        for n, value in enumerate(np.unique(other)):
            at = other == value
            upper.plot(
                line_x[at], y[at] / unit, dash, color=colour, linewidth=1.0, zorder=3,
                label=f"{_plain(str(candidate))}{fallen}" if n == 0 else None,
            )  # fmt: skip
        if c >= len(lower):
            continue
        left = observed - found["predicted"].values[c][mine]
        y = left / sigma if weighted else left / unit
        lower[c].plot(x, y, "o", markersize=1.9, markerfacecolor="none", markeredgewidth=0.6,
                      color=colour)  # fmt: skip
        lower[c].axhline(0, color=style.GREY, linewidth=0.6, zorder=0)
        top = max(1.2 * float(np.abs(y).max()), 2.5 if weighted else 0.0) or 1.0
        lower[c].set_ylim(-top, top)
        lower[c].tick_params(labelbottom=c == len(lower) - 1)
    lower[len(lower) // 2].set_ylabel(r"residual ($\sigma$)" if weighted else "residual")
    symbol = SYMBOLS.get(str(found["dataset_quantity"].values[index]), r"\mathrm{value}")
    upper.set_ylabel(axis_label(symbol, str(found["dataset_units"].values[index]), power))
    upper.tick_params(labelbottom=False)
    lower[-1].set_xlabel(axis_label(SYMBOLS[over], str(found[over].attrs.get("units", "1"))))
    gone, edge = untrusted(found, index) if over == "temperature" else ((x[:0], x[:0]), 0.0)
    upper.plot(gone[0], gone[1] / unit, "x", markersize=2.4, markeredgewidth=0.6,
               color=style.GREY, zorder=1, label="left out" if gone[0].size else None)  # fmt: skip
    low, high = float(np.concatenate([x, gone[0]]).min()), float(x.max())
    # Above the panel, where no candidate's curve can run through it.
    longest = max(len(text) for text in upper.get_legend_handles_labels()[1])
    upper.legend(
        loc="lower left", bbox_to_anchor=(0, 1), fontsize=6.5, borderaxespad=0.2,
        ncols=2 if longest <= SHORT else 1,
    )  # fmt: skip
    if over == "temperature" and style.wants_log(np.unique(x), scaling):
        upper.set_xlim(low / 1.1, high * 1.1)
        style.log_axis(upper)
        upper.tick_params(labelbottom=False)
    else:
        margin = 0.03 * (high - low) or 1.0
        upper.set_xlim(low - margin, high + margin)
    shade_untrusted((upper, *lower), edge, word=False)
    if np.all(observed >= 0):
        upper.set_ylim(bottom=0)
    upper.figure.align_ylabels([upper, *lower])


def draw_next(found: xr.Dataset, only: int | None = None) -> Any:
    """Over temperature, by how many uncertainties the candidates would differ; a panel for each
    instrument, or for ``only`` one. UnavailableError where nothing was proposed."""
    if "proposal_name" not in found:
        raise UnavailableError(
            "the comparison proposes no measurement, since no two candidates are left standing"
        )
    shown = range(found.sizes["proposal"]) if only is None else [only]
    count = len(shown)
    columns = 1 if count == 1 else 2
    rows = -(-count // columns)
    width = style.SINGLE if columns == 1 else style.DOUBLE
    figure = style.new_figure(width, 0.2 + 2.3 * rows)
    grid = figure.subplots(rows, columns, squeeze=False).ravel()
    for axes in grid[count:]:
        axes.set_axis_off()
    for axes, p in zip(grid, shown, strict=False):
        _draw_proposal(figure, axes, found, p)
    return figure


def _draw_proposal(figure: Any, axes: Axes, found: xr.Dataset, p: int) -> None:
    mine = found["map_proposal"].values == p
    t, b = found["map_temperature"].values[mine], found["map_field"].values[mine]
    apart = found["map_separation"].values[mine]
    fields, temperatures = np.unique(b), np.unique(t)
    units = {k: str(found[k].attrs.get("units", "1")) for k in ("temperature", "field")}
    over = "temperature" if temperatures.size > 1 else "field"
    x, other = (t, b) if over == "temperature" else (b, t)
    shades = style.Shades(fields if over == "temperature" else temperatures,
                          SYMBOLS["field" if over == "temperature" else "temperature"],
                          units["field" if over == "temperature" else "temperature"])  # fmt: skip
    for n, value in enumerate(shades.values):
        at = other == value
        axes.plot(x[at], apart[at], color=shades.colour(n), label=shades.label(n))
    best = (float(found["proposal_temperature"][p]), float(found["proposal_field"][p]))
    axes.plot([best[0] if over == "temperature" else best[1]],
              [float(found["proposal_separation"][p])], "*", color=style.VERMILION,
              markersize=8, zorder=5)  # fmt: skip
    first, second = (
        _plain(str(found["candidate_name"].values[int(found[f"proposal_{k}"][p])]))
        for k in ("first", "second")
    )
    axes.set_title(
        f"{_plain(str(found['proposal_name'].values[p]))}: {first} against {second}", fontsize=7
    )
    axes.set_xlabel(axis_label(SYMBOLS[over], units[over]))
    axes.set_ylabel("difference (uncertainties)")
    if x.size > 1 and over == "temperature" and style.spans_decades(temperatures):
        axes.set_xlim(float(x.min()), float(x.max()))
        style.log_axis(axes)
    axes.set_ylim(bottom=0)
    axes.axhline(3, color=style.GREY, linewidth=0.6, linestyle=":", zorder=0)
    shades.explain(figure, axes, axes)


def _plain(text: str) -> str:
    """A name as it is: a dollar sign would begin mathematics."""
    return text.replace("$", r"\$")
