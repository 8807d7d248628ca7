"""The window of trust: above which temperature a periodic cluster speaks for its lattice.

A finite cluster follows the infinite lattice down to where its size shows. The same lattice is
therefore solved on another cluster as well (a larger one where that is cheap, else a smaller one)
and both are held against the data: at and above a set's lower edge their predictions differ by so
little that all its points together notice less than one standard deviation, Σ(Δ/σ)² ≤ 1. No
fitted parameter can then be off by more than its own standard error for want of size.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, fields, replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from thermo.errors import MemoryLimitError, StudyError
from thermo.fit.forward import Forward, set_points
from thermo.fit.measured import Measured
from thermo.fit.parameters import Parameters
from thermo.fit.residual_tests import chance
from thermo.fit.result import FitResult
from thermo.fit.study import Study
from thermo.model.resizing import can_resize, larger, smaller
from thermo.model.spin_model import SpinModel
from thermo.numbers import plain

Vector = NDArray[np.float64]
#: Fits a study; the flag says that it starts where an earlier fit ended.
FitOnce = Callable[[Study, bool], FitResult]

# A larger cluster is cheap up to so many states and seconds.
CHEAP_STATES = 2**17
CHEAP_SECONDS = 3.0
# The cut and the fit depend on each other; they settle in two or three turns.
TURNS = 5
# Points that a new cut would bring back are worth another turn from this share of all on.
WORTH_ANOTHER = 0.05
# Without stated uncertainties: no scatter counts as smaller than this share of the mean.
LEAST_SCATTER = 1e-3
# A χ² this improbable rules a candidate out whatever its rivals do.
HOPELESS = 1e-9


@dataclass(frozen=True, eq=False)
class Window:
    """Where a fit's cluster can be trusted.

    ``status``: "checked"; "finite" (a molecule), "open" or "listed" (a cluster that is no period
    of a lattice), all three without an edge; "unknown" (no other size to compare with); "off".
    ``lower`` [K] holds each data set's edge: 0 where the size shows at no point of it, inf where
    at all, NaN where not known. ``cut`` [K] is where the fit's points begin because of it, 0
    where nothing was left out. ``sites`` are those of the cluster fitted and ``other`` those of
    the one compared with. ``excluded`` holds the points left out, by the name of their set.
    """

    status: str
    lower: Mapping[str, float]
    cut: Mapping[str, float]
    sites: int
    other: int
    excluded: Mapping[str, Measured]
    unit: str = "K"

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
        told = []
        for name, edge in self.lower.items():
            if edge == 0:
                told.append(f"its size shows at no point of {name!r}")
            elif math.isinf(edge):
                told.append(f"its size shows at every point of {name!r}")
            else:
                told.append(f"{name!r} can be trusted from {_kelvin(edge, self.unit)} on")
        text = "; ".join(told)
        return text[:1].upper() + text[1:] + "."


def fit_in_window(study: Study, fit_once: FitOnce, memory: int | float | str | None) -> FitResult:
    """Fit a study above its window's lower edge (``window`` "auto"), or only find that edge.

    Raises StudyError where no data are left, and whatever ``fit_once`` raises.
    """
    relative = None if study.window == "off" else find_relative(study.model, memory)
    if relative is None:
        result, window = fit_once(study, False), without_edge(study)
        told = (str(window),) if window.status == "unknown" else ()
        return replace(result, window=window, cautions=(*result.cautions, *told))
    keep = {data.name: np.ones(data.n_points, dtype=bool) for data in study.sets}
    edges: Mapping[str, float] = {}
    first: FitResult | None = None
    for turn in range(TURNS):
        if first is None:
            first = result = fit_once(study, False)
        else:
            result = again(masked(study, keep), result, first, fit_once)
        edges = find_edges(study, result, relative)
        if study.window != "auto":
            break
        wanted = {
            data.name: keep[data.name] if data.name in study.ranged
            else data.temperature >= edges[data.name]
            for data in study.sets
        }  # fmt: skip
        if turn > 1:  # two cuts that call each other: take both
            wanted = {name: mask & keep[name] for name, mask in wanted.items()}
        gained = sum(np.count_nonzero(mask & ~keep[name]) for name, mask in wanted.items())
        if all(np.all(mask | ~keep[name]) for name, mask in wanted.items()) and (
            gained <= WORTH_ANOTHER * study.n_points
        ):
            break
        refuse_if_nothing_is_left(study, wanted, edges, relative.model)
        keep = wanted
    window = _window(study, keep, edges, relative.model)
    return replace(result, window=window, cautions=(*result.cautions, *_cautions(study, window)))


def again(study: Study, last: FitResult, first: FitResult, fit_once: FitOnce) -> FitResult:
    """A fit of other points from where the last one ended, told as one from the study's starts."""
    value = {e.name: e.value for e in last.parameters}
    warm = Parameters(
        replace(p, start=min(max(value[p.name], p.lower), p.upper)) if p.status == "free" else p
        for p in study.parameters.all
    )
    start = {e.name: e.start for e in first.parameters}
    result = fit_once(replace(study, parameters=warm), True)
    return replace(
        result,
        study=study,
        parameters=tuple(replace(e, start=start[e.name]) for e in result.parameters),
        n_starts=first.n_starts,
        message=first.message,
        n_solves=last.n_solves + result.n_solves,
        n_evaluations=last.n_evaluations + result.n_evaluations,
    )


@dataclass(frozen=True, eq=False)
class Relative:
    """The other cluster, ready to predict."""

    model: SpinModel
    forward: Forward


def find_relative(model: SpinModel, memory: int | float | str | None = None) -> Relative | None:
    """A larger cluster of the lattice where that is cheap, else a smaller one; None for neither."""
    from thermo.spectrum.full import FullSolver
    from thermo.spectrum.planning import time_needed

    if not can_resize(model):
        return None
    bigger = larger(model, CHEAP_STATES)
    for found in (bigger, smaller(model)):
        if found is None:
            continue
        try:
            solver = FullSolver(found, memory)
        except MemoryLimitError:
            continue
        if found is bigger and time_needed(solver.plan) > CHEAP_SECONDS:
            continue
        return Relative(found, Forward(found, solver))
    return None


def cut_alike(
    names: Sequence[str],
    studies: Sequence[Study],
    results: Sequence[FitResult],
    fits: Sequence[FitOnce],
) -> tuple[list[FitResult], list[str]]:
    """Rival fits brought to the same points, those that every one's window leaves, with cautions.

    A rival whose χ² in its own window is beyond all chance has fallen already, and takes no points
    from the others, as long as another has not. All studies hold the same data sets. Raises
    StudyError where no points are left.
    """
    windows = [result.window or without_edge(s) for result, s in zip(results, studies, strict=True)]
    alive = [not chance(r.chi_square, r.degrees_of_freedom) < HOPELESS or r.error_basis != "stated"
             for r in results]  # fmt: skip
    counted = [k for k, lives in enumerate(alive) if lives] or list(range(len(results)))
    cut, told = {}, []
    for data in studies[0].sets:
        cuts = [windows[k].cut[data.name] for k in counted]
        cut[data.name] = max(cuts)
        lost = int(np.count_nonzero(data.temperature < max(cuts)))
        if lost:
            below = f", below {_kelvin(max(cuts), windows[0].unit)},"
            told.append(
                f"{lost} of {data.n_points} points of {data.name!r}"
                + (below if math.isfinite(max(cuts)) else "")
                + " were left out for all candidates: there the size of the cluster of "
                f"{names[counted[cuts.index(max(cuts))]]!r} shows"
            )
    found = []
    for study, result, window, fit_once in zip(studies, results, windows, fits, strict=True):
        if dict(window.cut) == cut:
            found.append(result)
            continue
        keep = {data.name: data.temperature >= cut[data.name] for data in study.sets}
        left = sum(int(np.count_nonzero(mask)) for mask in keep.values())
        if left <= len(study.parameters.free):
            raise StudyError(
                f"{study.source}: the windows of trust of all candidates together leave {left} "
                f"points for {len(study.parameters.free)} parameters; take larger clusters, or "
                'set window = "tell"'
            )
        excluded = {
            data.name: select(data, ~keep[data.name])
            for data in study.sets
            if not keep[data.name].all()
        }
        fitted = again(masked(study, keep), result, result, fit_once)
        kept = (str(window),) if window.status == "unknown" else ()
        found.append(
            replace(
                fitted,
                window=replace(window, cut=cut, excluded=excluded),
                cautions=(*fitted.cautions, *kept),
            )
        )
    return found, told


def find_edges(study: Study, result: FitResult, relative: Relative) -> dict[str, float]:
    """Each set's lower edge in K at the fitted parameters; see ``Window.lower``.

    Cost: one diagonalisation of the other cluster.
    """
    relative.forward.chi0_to_si = result.forward.chi0_to_si
    edges = {}
    for data in study.sets:
        points = set_points(data)
        own = result.forward.predict(points, result.values)
        other = relative.forward.predict(points, result.values)
        edges[data.name] = lower_edge(data.temperature, (own - other) / error_of(data, result))
    return edges


def error_of(data: Measured, result: FitResult) -> Vector:
    """The uncertainty of a set's points, (n,) in SI: as stated, or the scatter the fit found."""
    if data.uncertainty is not None:
        return data.uncertainty
    some = result.sets[0]
    scatter = float(some.uncertainty[0] / np.mean(np.abs(some.data.value)))
    size = float(np.mean(np.abs(data.value)))
    return np.full(data.n_points, max(scatter, LEAST_SCATTER) * size)


def lower_edge(temperature: Vector, deviation: Vector) -> float:
    """The lowest temperature from which on upwards Σ deviation² ≤ 1; 0 for all, inf for none."""
    steps, index = np.unique(temperature, return_inverse=True)
    share = np.bincount(index, weights=deviation**2)
    total = np.cumsum(share[::-1])[::-1]
    good = total <= 1
    if good.all():
        return 0.0
    return float(steps[good][0]) if good.any() else math.inf


def masked(study: Study, keep: Mapping[str, NDArray[np.bool_]]) -> Study:
    """The study with only the points kept; a set without any is left out."""
    sets = tuple(
        select(data, keep[data.name]) for data in study.sets if np.any(keep[data.name])
    )  # fmt: skip
    return replace(study, sets=sets)


def select(data: Measured, mask: NDArray[np.bool_]) -> Measured:
    """The points of a set where ``mask`` (n,) holds."""
    if mask.all():
        return data
    changed: dict[str, Any] = {}
    for field in fields(data):
        value = getattr(data, field.name)
        if isinstance(value, np.ndarray) and value.shape[:1] == mask.shape:
            changed[field.name] = value[mask]
    lost = int(mask.size - np.count_nonzero(mask))
    return replace(data, **changed, n_masked=data.n_masked + lost)


def refuse_if_nothing_is_left(
    study: Study,
    keep: Mapping[str, NDArray[np.bool_]],
    edges: Mapping[str, float],
    other: SpinModel,
) -> None:
    """StudyError where the window leaves no data, or fewer points than parameters."""
    left = sum(int(np.count_nonzero(mask)) for mask in keep.values())
    if left > len(study.parameters.free) or left >= study.n_points:
        return
    finite = [edge for edge in edges.values() if math.isfinite(edge)]
    sites, unit = len(study.model.sites), study.model.energy_unit
    what = (
        f"only {left} of {study.n_points} points lie above the {_kelvin(max(finite), unit)}"
        if left and finite
        else "all data lie outside the window of trust, at temperatures"
    )
    raise StudyError(
        f"{study.source}: {what} where the {sites}-site cluster's size shows (held against "
        f"{len(other.sites)} sites); take a larger cluster, write finite = true in the model if "
        'it is a molecule, or set window = "tell"'
    )


def without_edge(study: Study) -> Window:
    """The window of a study that was not, or cannot be, compared with another size."""
    model = study.model
    if model.finite:
        status = "finite"
    elif not model.superlattice:
        status = "listed"
    elif not any(model.periodic):
        status = "open"
    else:
        status = "off" if study.window == "off" else "unknown"
    edge = math.nan if status in ("unknown", "off") else 0.0
    names = [data.name for data in study.sets]
    return Window(
        status, dict.fromkeys(names, edge), dict.fromkeys(names, 0.0), len(model.sites), 0, {}
    )


def _window(
    study: Study,
    keep: Mapping[str, NDArray[np.bool_]],
    edges: Mapping[str, float],
    other: SpinModel,
) -> Window:
    excluded = {
        data.name: select(data, ~keep[data.name])
        for data in study.sets
        if not keep[data.name].all()
    }
    cut = {}
    for data in study.sets:
        mask = keep[data.name]
        left = data.temperature[mask]
        cut[data.name] = 0.0 if mask.all() else float(left.min()) if left.size else math.inf
    # What was left out last is the edge told: the one found after it may lie a point lower.
    edges = {name: max(edge, cut[name]) for name, edge in edges.items()}
    unit = "" if study.reduced else "K"
    return Window(
        "checked", edges, cut, len(study.model.sites), len(other.sites), excluded, unit
    )  # fmt: skip


def _cautions(study: Study, window: Window) -> list[str]:
    found = []
    for data in study.sets:
        edge, cut = window.lower[data.name], window.cut[data.name]
        below = data.temperature < edge
        if cut > 0:
            gone = window.excluded[data.name].n_points
            found.append(
                f"{gone} of {data.n_points} points of {data.name!r}"
                + (f", below {_kelvin(cut, window.unit)}," if math.isfinite(cut) else "")
                + f" were left out: there the size of the {window.sites}-site cluster shows "
                f"(held against {window.other} sites)"
            )
        elif np.any(below):
            until = f" below {_kelvin(edge, window.unit)}" if math.isfinite(edge) else ""
            found.append(
                f"{int(np.count_nonzero(below))} of {data.n_points} points of {data.name!r}"
                f"{until} lie where the size of the {window.sites}-site cluster shows (held "
                f"against {window.other} sites), but were kept as the study asks"
            )
    return found


def _kelvin(temperature: float, unit: str) -> str:
    return f"{plain(temperature, 4)} {unit}".strip()
