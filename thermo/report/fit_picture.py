"""The picture of a fit: each data set with the fitted curve, and its residuals below."""

from __future__ import annotations

import textwrap
from collections.abc import Sequence
from typing import Any

import numpy as np
import xarray as xr
from matplotlib.axes import Axes

from thermo.errors import UnavailableError
from thermo.report import style
from thermo.report.numbers import plain, typeset, with_uncertainty
from thermo.report.quantities import (
    SYMBOLS,
    axis_label,
    by_scatter,
    dataset_share,
    power_of_thousand,
)

_NO_BREAK = "\u00a0"


def draw_fit(
    fit: xr.Dataset, chosen: list[str], scale: str | None = None, footer: bool = True
) -> Any:
    """A figure of the data sets named in ``chosen``, or of all; ``scale`` as for ``plot``.

    ``footer``: the parameters below it, and per what the values are.
    """
    names = [str(name) for name in fit["dataset_name"].values]
    for name in chosen:
        if name not in names:
            raise UnavailableError(
                f"the fit has no data set {name!r}; choose from {', '.join(names)}"
            )
    picked = [n for n, name in enumerate(names) if not chosen or name in chosen]
    columns = 1 if len(picked) == 1 else 2
    rows = -(-len(picked) // columns)
    width = style.SINGLE if columns == 1 else style.DOUBLE
    figure = style.new_figure(width, 0.35 + rows * 3.0)
    outer = figure.add_gridspec(rows, columns)
    for place, index in enumerate(picked):
        inner = outer[divmod(place, columns)].subgridspec(2, 1, height_ratios=(3, 1), hspace=0)
        upper = figure.add_subplot(inner[0])
        lower = figure.add_subplot(inner[1], sharex=upper)
        _draw_dataset(upper, lower, fit, index, names[index].replace("$", r"\$"), scale)
    lines = textwrap.wrap(
        summary(fit) if footer else "", width=66 if columns == 1 else 135,
        break_long_words=False, break_on_hyphens=False,
    )  # fmt: skip
    figure.supxlabel(
        "\n".join([*lines, per_what(fit, picked) if footer else ""]).strip().replace("$", r"\$"),
        fontsize=6.5, color=style.GREY, x=0.99, ha="right",
    )  # fmt: skip
    return figure


def summary(fit: xr.Dataset) -> str:
    """The parameters in concise notation and the reduced chi square, for a footer.

    Blanks inside an entry are no-break ones.
    """
    parts = []
    for n, name in enumerate(fit["parameter_name"].values):
        unit = str(fit["parameter_units"].values[n])
        text = with_uncertainty(float(fit["value"][n]), float(fit["standard_error"][n]))
        text = typeset(text if unit == "1" else f"{text} {unit}")
        at_bound = " (at its bound)" if int(fit["at_bound"][n]) else ""
        fixed = " (fixed)" if int(fit["parameter_role"][n]) == 0 else ""
        parts.append(f"{name} = {text}{at_bound}{fixed}")
    reduced = float(fit["reduced_chi_square"])
    if np.isfinite(reduced) and not by_scatter(fit):
        parts.append(f"χ²/ν = {plain(reduced, 3)}")
    if not int(fit["converged"]):
        parts.append("NOT CONVERGED")
    return ";  ".join(part.replace(" ", _NO_BREAK) for part in parts)


def per_what(fit: xr.Dataset, picked: list[int]) -> str:
    """Per what the data sets drawn are counted: once where it is the same for all."""
    shares = {n: dataset_share(fit, n) for n in picked}
    if len(set(shares.values())) == 1:
        return shares[picked[0]]
    return ";  ".join(
        f"{fit['dataset_name'].values[n]} {share}" for n, share in shares.items() if share
    )


def _draw_dataset(
    upper: Axes, lower: Axes, fit: xr.Dataset, index: int, name: str, scaling: str | None
) -> None:
    mine = np.flatnonzero(fit["point_dataset"].values == index)
    column = {
        key: fit[key].values[mine]
        for key in ("temperature", "field", "observed", "uncertainty", "predicted", "residual")
    }
    over = _abscissa(column)
    other = "field" if over == "temperature" else "temperature"
    power = power_of_thousand([column["observed"]])
    scale = 10.0**power
    x = column[over]
    sigma = column["uncertainty"]
    # Uncertainties that come from the residuals themselves are no measure for these.
    weighted = not by_scatter(fit) and bool(np.all(np.isfinite(sigma)) and np.all(sigma > 0))
    shades = style.Shades(
        np.unique(column[other]), SYMBOLS[other], str(fit[other].attrs.get("units", "1"))
    )
    few = shades.values.size <= style.MAX_LABELLED
    marker_size = 3.0 if mine.size < 80 else 2.2
    for n, value in enumerate(shades.values):
        these = column[other] == value
        colour = style.BLACK if shades.single else shades.colour(n)
        upper.errorbar(
            x[these], column["observed"][these] / scale,
            sigma[these] / scale if weighted else None,
            fmt="o", markersize=marker_size, markerfacecolor="none", markeredgewidth=0.7,
            color=colour, elinewidth=0.6, capsize=0, zorder=2,
            label=name if shades.single else (f"{name}, {shades.label(n)}" if few else None),
        )  # fmt: skip
        line_x, line_y = _line(fit, index, over, other, value, x[these],
                               column["predicted"][these])  # fmt: skip
        upper.plot(line_x, line_y / scale, color=style.VERMILION if shades.single else colour,
                   zorder=3, label="fit" if shades.single else None)  # fmt: skip
        left = column["residual"][these]
        lower.plot(x[these], left / sigma[these] if weighted else left / scale, "o",
                   markersize=marker_size - 0.5, markerfacecolor="none", markeredgewidth=0.7,
                   color=colour)  # fmt: skip
    gone, edge = untrusted(fit, index) if over == "temperature" else (None, 0.0)
    if gone is not None and gone[0].size:
        upper.plot(gone[0], gone[1] / scale, "x", markersize=marker_size, markeredgewidth=0.6,
                   color=style.GREY, zorder=1, label="left out")  # fmt: skip
    symbol = SYMBOLS.get(str(fit["dataset_quantity"].values[index]), r"\mathrm{value}")
    unit = str(fit["dataset_units"].values[index])
    upper.set_ylabel(axis_label(symbol, unit, power))
    upper.legend(loc="best")
    upper.tick_params(labelbottom=False)
    lower.axhline(0, color=style.GREY, linewidth=0.6, zorder=0)
    if weighted:
        lower.axhspan(-1, 1, color=style.GREY, alpha=0.15, linewidth=0, zorder=0)
    # Without uncertainties the residuals are in the unit and scale of the panel above.
    lower.set_ylabel(r"resid. ($\sigma$)" if weighted else "resid.")
    top = max(1.15 * float(np.abs(lower.dataLim.intervaly).max()), 2.0 if weighted else 0.0)
    if top > 0:
        lower.set_ylim(-top, top)
    lower.set_xlabel(axis_label(SYMBOLS[over], str(fit[over].attrs.get("units", "1"))))
    low, high = float(x.min()), float(x.max())
    if gone is not None and gone[0].size:
        low = min(low, float(gone[0].min()))
    margin = 0.03 * (high - low) or 1.0
    if over == "temperature" and style.wants_log(np.unique(x), scaling):
        upper.set_xlim(low / 1.1, high * 1.1)
        style.log_axis(upper)
        upper.tick_params(labelbottom=False)
    else:
        upper.set_xlim(low - margin, high + margin)
    shade_untrusted((upper, lower), edge)
    if np.all(column["observed"] >= 0):
        upper.set_ylim(bottom=0)
    upper.figure.align_ylabels([upper, lower])


def untrusted(fit: xr.Dataset, index: int) -> tuple[tuple[Any, Any], float]:
    """The points left out of a data set, as (temperature, value), and its window's lower edge."""
    gone: tuple[Any, Any] = (np.empty(0), np.empty(0))
    if "excluded_dataset" in fit:
        mine = fit["excluded_dataset"].values == index
        gone = (fit["excluded_temperature"].values[mine], fit["excluded_observed"].values[mine])
    edge = float(fit["dataset_window"][index]) if "dataset_window" in fit else 0.0
    return gone, edge


def shade_untrusted(panels: Sequence[Axes], edge: float, word: bool = True) -> None:
    """Shade temperatures below the window of trust, up to the panels' end where there is none.

    ``word``: say beside its edge what it is.
    """
    for n, axes in enumerate(panels):
        low, high = axes.get_xlim()
        if not edge > low:  # trusted throughout, or not known (NaN)
            continue
        end = min(edge, high)
        axes.axvspan(low, end, facecolor=style.ORANGE, alpha=0.13, linewidth=0, zorder=0)
        if n == 0:
            axes.axvline(end, color=style.ORANGE, linewidth=0.8, zorder=1)
        if n == 0 and word:
            axes.annotate(
                "cluster's size shows", (end, 0.03), xycoords=("data", "axes fraction"),
                xytext=(-2, 0), textcoords="offset points", rotation=90, fontsize=5.5,
                ha="right", va="bottom", color=style.GREY,
            )  # fmt: skip
        axes.set_xlim(low, high)


def _abscissa(column: dict[str, Any]) -> str:
    """The axis that varies more often along the data set: temperature, or field."""
    temperatures, fields = (np.unique(column[k]).size for k in ("temperature", "field"))
    return "field" if fields > temperatures else "temperature"


def _line(
    fit: xr.Dataset, index: int, over: str, other: str, value: float, x: Any, predicted: Any
) -> tuple[Any, Any]:
    """The fitted curve: the smooth one where the file holds it, else through the points."""
    if "curve_predicted" in fit:
        these = fit["curve_dataset"].values == index
        these &= np.isclose(fit[f"curve_{other}"].values, value, rtol=1e-9, atol=0)
        if np.count_nonzero(these) > 1:
            line_x = fit[f"curve_{over}"].values[these]
            order = np.argsort(line_x, kind="stable")
            return line_x[order], fit["curve_predicted"].values[these][order]
    order = np.argsort(x, kind="stable")
    return x[order], predicted[order]
