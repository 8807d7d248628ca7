"""The look of the pictures: column widths, fonts, colours, and how a figure becomes a file."""

from __future__ import annotations

import os
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import Any

import matplotlib as mpl
import numpy as np
from matplotlib.axes import Axes
from matplotlib.backends.backend_agg import FigureCanvasAgg
from matplotlib.cm import ScalarMappable
from matplotlib.colors import ListedColormap, LogNorm, Normalize
from matplotlib.figure import Figure
from matplotlib.ticker import FuncFormatter, LogLocator, NullFormatter

from thermo.errors import FileFormatError
from thermo.storage import atomic_path

SINGLE = 86 / 25.4  # inches, one journal column
DOUBLE = 178 / 25.4  # two
SUFFIXES = (".png", ".svg", ".pdf")
MAX_LABELLED = 8

# Okabe and Ito's colours, told apart with every common colour blindness.
BLACK, ORANGE, BLUE, GREEN, VERMILION = "#000000", "#E69F00", "#0072B2", "#009E73", "#D55E00"
GREY = "#777777"

_RC: dict[str, Any] = {
    "font.family": "DejaVu Sans",
    "font.size": 7.5,
    "mathtext.fontset": "dejavusans",
    "axes.labelsize": 8,
    "axes.titlesize": 8,
    "axes.linewidth": 0.7,
    "lines.linewidth": 1.2,
    "xtick.direction": "in",
    "ytick.direction": "in",
    "xtick.top": True,
    "ytick.right": True,
    "xtick.minor.visible": True,
    "ytick.minor.visible": True,
    "legend.frameon": False,
    "legend.fontsize": 7,
    "legend.handlelength": 1.6,
    "axes.unicode_minus": True,
    "savefig.dpi": 300,
    "pdf.fonttype": 42,
    # With a fixed salt and no date the same data give the same file.
    "svg.hashsalt": "partita",
}


@contextmanager
def style() -> Iterator[None]:
    """The pictures' settings on top of matplotlib's defaults, whatever the user's own are."""
    with mpl.rc_context():
        mpl.rcdefaults()
        params: Any = mpl.rcParams  # its type lists every key
        params.update(_RC)
        yield


def check_suffix(path: str | os.PathLike[str]) -> str:
    """The picture's suffix, in lower case; a FileFormatError for one that is not drawn."""
    suffix = Path(path).suffix.lower()
    if suffix not in SUFFIXES:
        raise FileFormatError(
            f"a picture cannot be written as {os.fspath(path)!r}; "
            f"end its name in {', '.join(SUFFIXES[:-1])} or {SUFFIXES[-1]}"
        )
    return suffix


def new_figure(width: float, height: float) -> Figure:
    """A figure of this size in inches that no pyplot state knows of."""
    figure = Figure(figsize=(width, height), layout="constrained")
    FigureCanvasAgg(figure)
    return figure


def save(figure: Figure, path: str | os.PathLike[str]) -> None:
    """Write the figure whole, in the format of the path's suffix, without a date."""
    kind = check_suffix(path)[1:]
    metadata = {"svg": {"Date": None}, "pdf": {"CreationDate": None}, "png": {}}[kind]
    with atomic_path(path) as temporary:
        figure.savefig(temporary, format=kind, metadata=metadata)


def spans_decades(values: Any) -> bool:
    """Whether positive values span so much that only a logarithmic axis shows them."""
    array = np.asarray(values, dtype=float)
    return array.size > 1 and bool(array.min() > 0 and array.max() / array.min() > 10**1.5)


def wants_log(values: Any, scale: str | None = None) -> bool:
    """Whether an axis of these increasing values is drawn logarithmically.

    ``scale`` "log" or "linear" decides where given (values from zero on stay linear). Otherwise
    the grid does: evenly spaced is linear, geometric is logarithmic over a factor of 4 or more,
    and anything else is so where it spans over 1.5 decades.
    """
    array = np.asarray(values, dtype=float)
    if array.size < 2 or array[0] <= 0 or scale == "linear":
        return False
    if scale == "log":
        return True
    if array.size > 2 and _even(array):
        return False
    return spans_decades(array) or (
        array.size > 2 and _even(np.log(array)) and bool(array[-1] >= 4 * array[0])
    )


def _even(values: Any) -> bool:
    """Whether steps are alike to 5 %, as of a grid, or of a controlled run's temperatures."""
    steps = np.diff(values)
    return float(np.ptp(steps)) <= 0.05 * float(np.abs(steps).mean())


def log_axis(axes: Axes) -> None:
    """A logarithmic x axis with plain numbers at 1, 2, 5 (or the decades, over three of them)."""
    axes.set_xscale("log")
    low, high = axes.get_xlim()
    axes.xaxis.set_major_formatter(FuncFormatter(lambda x, _: f"{x:g}"))
    axes.xaxis.set_minor_formatter(NullFormatter())
    if high / low < 10**2.2:
        axes.xaxis.set_major_locator(LogLocator(subs=(1, 2, 5)))


class Shades:
    """Colours in perceptual order for a row of values, with a legend or a colour bar for them."""

    def __init__(self, values: Any, symbol: str, unit: str, reverse: bool = False) -> None:
        """``values`` increase; ``symbol`` and ``unit`` name them."""
        self.values = np.asarray(values, dtype=float)
        self.symbol, self.unit = symbol, unit
        # The pale end of viridis is left off: it does not show on white.
        scale = mpl.colormaps["viridis"](np.linspace(0.0, 0.88, 256))
        self.map = ListedColormap(scale[::-1] if reverse else scale)
        low, high = float(self.values[0]), float(self.values[-1])
        if low > 0 and spans_decades(self.values):
            self.norm: Normalize = LogNorm(low, high)
        else:
            self.norm = Normalize(low, high if high > low else low + 1)

    @property
    def single(self) -> bool:
        """Whether there is but one value, which needs neither legend nor bar."""
        return self.values.size == 1

    def colour(self, index: int) -> Any:
        """The colour of one value; blue where there is but one."""
        if self.single:
            return BLUE
        if self.values.size <= MAX_LABELLED:  # evenly apart, however the values lie
            return self.map(index / (self.values.size - 1))
        return self.map(self.norm(self.values[index]))

    def label(self, index: int) -> str | None:
        """The legend's text for one value; None where a colour bar tells it."""
        if self.single or self.values.size > MAX_LABELLED:
            return None
        unit = "" if self.unit == "1" else f" {self.unit}"
        return f"{self.values[index]:.3g}{unit}"

    def explain(self, figure: Figure, axes: Any, legend_in: Axes) -> None:
        """Add the legend or the colour bar."""
        if self.single:
            return
        if self.values.size <= MAX_LABELLED:
            legend_in.legend(title=f"${self.symbol}$")
            return
        unit = "" if self.unit == "1" else f" ({self.unit})"
        bar = figure.colorbar(ScalarMappable(self.norm, self.map), ax=axes, aspect=30, pad=0.015)
        bar.set_label(f"${self.symbol}${unit}")
        bar.outline.set_linewidth(0.6)
