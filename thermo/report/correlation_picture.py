"""Pictures of thermal correlations: pairs over temperature, and S(q) at a few temperatures."""

from __future__ import annotations

from fractions import Fraction
from typing import Any

import numpy as np
import xarray as xr
from matplotlib.axes import Axes

from thermo.errors import UnavailableError
from thermo.report import style
from thermo.report.quantities import axis_label

PANELS = ("pairs", "structure")
MOST_PAIRS = 10
MOST_POINTS = 14
TEMPERATURES = 6
_MARKERS = "os^Dv<>ph*"


def draw_correlations(found: xr.Dataset, chosen: list[str], scale: str | None = None) -> Any:
    """A figure of "pairs", "structure" or both, at the field nearest to zero."""
    for name in chosen:
        if name not in PANELS:
            raise UnavailableError(
                f"{name!r} cannot be drawn of correlations; choose from {', '.join(PANELS)}"
            )
    if "structure" in chosen and "structure_factor" not in found:
        why = found.attrs.get("structure_factor_unavailable", "compute them again")
        raise UnavailableError(f"the file holds no structure factor: {why}")
    panels = chosen or [p for p in PANELS if p == "pairs" or "structure_factor" in found]
    figure = style.new_figure(style.SINGLE if len(panels) == 1 else style.DOUBLE, 2.7)
    field = int(np.argmin(np.abs(found["field"].values)))
    for axes, name in zip(figure.subplots(1, len(panels), squeeze=False)[0], panels, strict=True):
        if name == "pairs":
            _pairs(axes, found, field, scale)
        else:
            _structure(axes, found, field)
    b, unit = float(found["field"].values[field]), str(found["field"].attrs["units"])
    where = f"$B$ = {b:g}" + ("" if unit == "1" else f" {unit}")
    figure.supxlabel(where, fontsize=6.5, color=style.GREY, x=0.99, ha="right")
    return figure


def _pairs(axes: Axes, found: xr.Dataset, field: int, scale: str | None) -> None:
    t = found["temperature"].values
    values = found["correlation"].values[:, field]
    pairs = np.flatnonzero(found["pair_first"].values != found["pair_second"].values)
    strongest = pairs[np.argsort(-np.abs(values[0, pairs]), kind="stable")]
    picked = sorted(strongest[:MOST_PAIRS])
    shades = style.Shades(np.arange(max(len(picked), 1)) + 1.0, "", "1")
    for n, k in enumerate(picked):
        count = int(found["pair_count"].values[k])
        label = f"{_plain(str(found['pair_name'].values[k]))}  ×{count}"
        colour = shades.map(n / max(len(picked) - 1, 1))
        marker = _MARKERS[n % len(_MARKERS)] if t.size < 12 else ""
        axes.plot(t, values[:, k], color=colour, label=label, marker=marker, markersize=2.5)
    axes.axhline(0, color=style.GREY, linewidth=0.5, zorder=0)
    axes.set_xlabel(axis_label("T", str(found["temperature"].attrs["units"])))
    left_out = len(pairs) - len(picked)
    axes.set_ylabel(r"$\langle \mathbf{S}_i\cdot\mathbf{S}_j\rangle$")
    if t.size > 1:
        axes.set_xlim(t[0], t[-1])
    if style.wants_log(t, scale):
        style.log_axis(axes)
    if len(picked):
        title = f"strongest of {len(pairs)} kinds" if left_out else None
        axes.legend(fontsize=6, title=title, title_fontsize=6)


def _structure(axes: Axes, found: xr.Dataset, field: int) -> None:
    t, q = found["temperature"].values, found["wave_vector"].values
    s = found["structure_factor"].values[:, field]
    rows = np.unique(np.linspace(0, t.size - 1, min(TEMPERATURES, t.size)).round().astype(int))
    shades = style.Shades(t[rows], "T", str(found["temperature"].attrs["units"]), reverse=True)
    if q.shape[1] == 1:
        x, order = q[:, 0], np.arange(len(q))
        if len(q) > 1:
            # All zones there are: the next begins as the first did.
            x, order = np.append(x, x[-1] + x[1] - x[0]), np.append(order, 0)
        axes.set_xlabel("$h$ (reciprocal lattice units)")
        left_out = 0
    else:
        order, left_out = _distinct(q, s)
        x = np.arange(len(order), dtype=float)
        labels = ["(" + " ".join(_fraction(c) for c in q[k]) + ")" for k in order]
        axes.set_xticks(x, labels, rotation=90 if len(order) > 5 else 0, fontsize=6)
        axes.tick_params(axis="x", which="minor", bottom=False, top=False)
        axes.set_xlabel("wave vector (reciprocal lattice units)")
    for n, row in enumerate(rows):
        axes.plot(x, s[row, order], color=shades.colour(n), label=shades.label(n),
                  marker=_MARKERS[n % len(_MARKERS)], markersize=3,
                  linewidth=1.0 if q.shape[1] == 1 else 0.4)  # fmt: skip
    axes.set_ylabel(r"$S(\mathbf{q})$ per site")
    axes.set_ylim(0, 1.08 * float(s[rows].max()))
    if not shades.single:
        axes.legend(title="$T$")
    if left_out:
        axes.set_title(f"strongest {len(order)} of {len(order) + left_out}", fontsize=7)


def _distinct(q: Any, s: Any) -> tuple[Any, int]:
    """One of each set of wave vectors with the same S at every temperature, in their own order;
    the strongest at the lowest temperature where they are many, and how many are left out."""
    scale = max(float(np.abs(s).max()), 1e-300)
    _, first = np.unique(np.round(s / scale, 9), axis=1, return_index=True)
    strongest = first[np.argsort(-s[0, first], kind="stable")][:MOST_POINTS]
    return np.sort(strongest), len(first) - len(strongest)


def _fraction(value: float) -> str:
    return str(Fraction(float(value)).limit_denominator(1000))


def _plain(text: str) -> str:
    """A name as it is: matplotlib would take $ for mathematics."""
    return text.replace("$", r"\$")
