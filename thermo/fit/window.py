"""What a comparison with another cluster says: the window of trust, and where it begins."""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from thermo.fit.measured import Measured
from thermo.fit.study import Study
from thermo.numbers import plain

Vector = NDArray[np.float64]

# The size may move no parameter by more than so many of its standard errors.
MOST_SHIFT = 1.0
# Singular values below this share of the largest leave a direction the data do not fix.
FLAT = 1e-6


@dataclass(frozen=True, eq=False)
class Window:
    """Where a fit's cluster can be trusted.

    ``status``: "checked"; "finite" (a molecule), "open" or "listed" (a cluster that is no period
    of a lattice), all three without an edge; "unknown" (no other size to compare with); "off".
    ``lower`` [K] holds each data set's edge: 0 where the size shows at no point of it, inf where
    at all, NaN where not known. ``cut`` [K] is where the fit's points begin because of it, 0
    where nothing was left out. ``sites`` are those of the cluster fitted and ``other`` those of
    the one compared with. ``excluded`` holds the points left out, by the name of their set.
    ``shift`` is by how many of its standard errors the size still moves each parameter at and
    above the edges.
    """

    status: str
    lower: Mapping[str, float]
    cut: Mapping[str, float]
    sites: int
    other: int
    excluded: Mapping[str, Measured]
    unit: str = "K"
    shift: Mapping[str, float] = field(default_factory=dict)

    def __str__(self) -> str:
        """In one or two sentences."""
        return f"{self._how()} {self._where()}".strip()

    def _how(self) -> str:
        if self.status == "checked":
            kind = "larger" if self.other > self.sites else "smaller"
            return f"The {self.sites}-site cluster was held against a {kind} one of {self.other}."
        return {
            "finite": f"The model is a finite molecule of {self.sites} ions: no temperature is "
            "too low for its size.",
            "open": f"The {self.sites}-site cluster is open, so it was taken as all there is.",
            "listed": f"The {self.sites} sites are listed one by one, so the cluster was taken "
            "as all there is.",
            "unknown": f"Whether the size of the {self.sites}-site cluster shows is not known: "
            "the same lattice has no other cluster to compare with.",
            "off": "Whether the cluster's size shows was not looked at.",
        }[self.status]

    def _where(self) -> str:
        if self.status != "checked":
            return ""
        told = ["its size shows in none of the data"] if not any(self.lower.values()) else []
        for name, edge in self.lower.items():
            if edge == 0 and any(self.lower.values()):
                told.append(f"its size shows at no point of {name!r}")
            elif math.isinf(edge):
                told.append(f"its size shows at every point of {name!r}")
            elif edge > 0:
                told.append(f"{name!r} can be trusted from {kelvin(edge, self.unit)} on")
        text = "; ".join(told)
        text = text[:1].upper() + text[1:] + "."
        if self.shift:
            name, most = max(self.shift.items(), key=lambda item: abs(item[1]))
            if math.isfinite(most):
                text += (
                    f" What is left of it moves no parameter by more than {plain(abs(most), 2)} "
                    f"standard errors ({name})."
                )
        return text


def lower_edges(
    temperature: Sequence[Vector], deviation: Sequence[Vector], slopes: Sequence[Vector]
) -> list[float]:
    """The lowest temperature of each set from which on upwards the size does not matter.

    For each set, ``temperature`` (n,), the clusters' difference over the uncertainty (n,), and the
    slopes by the parameters, over it too, (n, k). 0 where all points are good, inf where none.
    """
    edges = [_agreeing(t, d) for t, d in zip(temperature, deviation, strict=True)]
    while any(math.isfinite(edge) for edge in edges):
        keep = [t >= edge for t, edge in zip(temperature, edges, strict=True)]
        d = np.concatenate([x[m] for x, m in zip(deviation, keep, strict=True)])
        J = np.concatenate([x[m] for x, m in zip(slopes, keep, strict=True)])
        if np.abs(shifts(J, d)).max(initial=0.0) <= MOST_SHIFT:
            break
        lowest = [
            t[m].min() if m.any() else math.inf for t, m in zip(temperature, keep, strict=True)
        ]
        worst = [
            float(np.abs(x[t == low]).max(initial=-1.0))
            for t, x, low in zip(temperature, deviation, lowest, strict=True)
        ]
        k = int(np.argmax(worst))
        above = temperature[k][temperature[k] > lowest[k]]
        edges[k] = float(above.min()) if above.size else math.inf
    return edges


def _agreeing(temperature: Vector, deviation: Vector) -> float:
    """Where |deviation| ≤ 1 begins to hold for good; 0 for all points, inf for none."""
    bad = temperature[np.abs(deviation) > 1]
    if not bad.size:
        return 0.0
    good = temperature[temperature > bad.max()]
    return float(good.min()) if good.size else math.inf


def shifts(J: Vector, d: Vector) -> Vector:
    """First-order shifts of the parameters (k,) over their standard errors, by differences ``d``.

    J (n, k) and d (n,) are over the uncertainties. 0 for a parameter without slopes; inf where
    there are no more points than parameters.
    """
    length = np.linalg.norm(J, axis=0)
    found = np.zeros(J.shape[1])
    moving = np.flatnonzero(length)
    if not moving.size:
        return found
    if len(d) <= moving.size:
        found[moving] = math.inf
        return found
    u, singular, rotation = np.linalg.svd(J[:, moving] / length[moving], full_matrices=False)
    held = singular > FLAT * singular[0]
    half = rotation[held].T / singular[held]
    found[moving] = half @ (u[:, held].T @ d) / np.linalg.norm(half, axis=1)
    return found


def window_cautions(study: Study, window: Window) -> list[str]:
    """What to tell of points left out, or kept although the size shows there."""
    found = []
    for data in study.sets:
        edge, cut = window.lower[data.name], window.cut[data.name]
        below = data.temperature < edge
        if cut > 0:
            gone = window.excluded[data.name].n_points
            found.append(
                f"{gone} of {data.n_points} points of {data.name!r}"
                + (f", below {kelvin(cut, window.unit)}," if math.isfinite(cut) else "")
                + f" were left out: there the size of the {window.sites}-site cluster shows "
                f"(held against {window.other} sites)"
            )
        elif np.any(below):
            until = f" below {kelvin(edge, window.unit)}" if math.isfinite(edge) else ""
            found.append(
                f"{int(np.count_nonzero(below))} of {data.n_points} points of {data.name!r}"
                f"{until} lie where the size of the {window.sites}-site cluster shows (held "
                f"against {window.other} sites), but were kept as the study asks"
            )
    return found


def kelvin(temperature: float, unit: str) -> str:
    """A temperature as text."""
    return f"{plain(temperature, 4)} {unit}".strip()
