"""The window of trust: above which temperature a periodic cluster speaks for its lattice.

A finite cluster follows the infinite lattice down to where its size shows. The same lattice is
therefore solved on another cluster as well (a larger one where that is cheap, else a smaller one)
and both are held against the data. At and above a set's lower edge
- their predictions agree within each point's uncertainty, and
- all their differences together would move no fitted parameter by more than its standard error:
  to first order the shift is (JᵀJ)⁻¹Jᵀd, with J the slopes and d the differences, both
  over the uncertainties. Differences far below the uncertainties still add up.
"""

from __future__ import annotations

import contextlib
import math
from collections.abc import Callable, Container, Mapping, Sequence
from dataclasses import dataclass, fields, replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from thermo.errors import MemoryLimitError, StudyError
from thermo.fit.forward import Forward, Points, make_forward, set_points
from thermo.fit.measured import Measured
from thermo.fit.parameters import Parameters
from thermo.fit.residual_tests import chance
from thermo.fit.result import FitResult
from thermo.fit.study import Study
from thermo.fit.window import Window, kelvin, lower_edges, shifts, window_cautions
from thermo.model.resizing import can_resize, larger, smaller
from thermo.model.spin_model import SpinModel

Vector = NDArray[np.float64]
#: Fits a study; the flag says that it starts where an earlier fit ended.
FitOnce = Callable[[Study, bool], FitResult]

# A larger cluster is cheap up to so many states and seconds of all its blocks.
CHEAP_STATES = 2**17
CHEAP_SECONDS = 3.0
MOST_SECONDS = 60.0
# The cut and the fit depend on each other; they settle in two or three turns.
TURNS = 5
# Points that a new cut would bring back are worth another turn from this share of all on.
WORTH_ANOTHER = 0.05
# Without stated uncertainties: no scatter counts as smaller than this share of the mean.
LEAST_SCATTER = 1e-3
# A χ² this improbable rules a candidate out whatever its rivals do.
HOPELESS = 1e-9


def fit_in_window(study: Study, fit_once: FitOnce, memory: int | float | str | None) -> FitResult:
    """Fit a study above its window's lower edge (``window`` "auto"), or only find that edge.

    Raises StudyError where no data are left, and whatever ``fit_once`` raises.
    """
    relative = None if study.window == "off" else find_relative(study, memory)
    if relative is None:
        result, window = fit_once(study, False), without_edge(study)
        told = (str(window),) if window.status == "unknown" else ()
        return replace(result, window=window, cautions=(*result.cautions, *told))
    keep = {data.name: np.ones(data.n_points, dtype=bool) for data in study.sets}
    edges: Mapping[str, float] = {}
    moved: Mapping[str, float] = {}
    first: FitResult | None = None
    for turn in range(TURNS):
        if first is None:
            first = result = fit_once(study, False)
        else:
            result = again(masked(study, keep), result, first, fit_once)
        edges, moved = find_edges(study, result, relative)
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
    window = _window(study, keep, edges, moved, relative.model)
    return replace(
        result, window=window, cautions=(*result.cautions, *window_cautions(study, window))
    )


def again(study: Study, last: FitResult, first: FitResult, fit_once: FitOnce) -> FitResult:
    """A fit of other points from where the last one ended, told as one from the study's starts."""
    value = {e.name: e.value for e in last.parameters}
    warm = Parameters(
        replace(p, start=min(max(value[p.name], p.lower), p.upper)) if p.status == "free" else p
        for p in study.parameters.all
    )
    start = {e.name: e.start for e in first.parameters}
    result = fit_once(replace(study, parameters=warm, starts=None), True)
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


def find_relative(study: Study, memory: int | float | str | None = None) -> Relative | None:
    """A larger cluster of the lattice where that is cheap, else the largest smaller one that can be
    diagonalised in a minute (of a sampled cluster the next may not); None for neither."""
    from thermo.spectrum.full import FullSolver
    from thermo.spectrum.planning import block_cost

    if not can_resize(study.model):
        return None
    bigger = larger(study.model, CHEAP_STATES)
    found = bigger or smaller(study.model)
    while found is not None:
        limit = CHEAP_SECONDS if found is bigger else MOST_SECONDS
        with contextlib.suppress(MemoryLimitError):
            solver = FullSolver(found, memory)
            # On a reference machine: the same cluster, and result, whatever else this one does.
            if sum(block_cost(s.dimension, s.real) for s in solver.plan.sectors) <= limit:
                return Relative(found, make_forward(replace(study, model=found), solver))
        found = smaller(study.model if found is bigger else found)
    return None


@dataclass(frozen=True)
class SharedCut:
    """Where the points of rival fits begin: the edge of each data set, in K, and whose it is."""

    edges: Mapping[str, float]
    owners: Mapping[str, str]

    def cautions(self, study: Study) -> list[str]:
        """What to tell of the points it leaves out."""
        told = []
        for data in study.sets:
            edge = self.edges[data.name]
            lost = int(np.count_nonzero(data.temperature < edge))
            if lost:
                below = f", below {kelvin(edge, '' if study.reduced else 'K')},"
                told.append(
                    f"{lost} of {data.n_points} points of {data.name!r}"
                    + (below if math.isfinite(edge) else "")
                    + " were left out for all candidates: there the size of the cluster of "
                    f"{self.owners[data.name]!r} shows"
                )
        return told


def shared_cut(
    names: Sequence[str], results: Sequence[FitResult], fallen: Container[str]
) -> SharedCut:
    """The highest edges of all rivals' windows, but for those named in ``fallen``.

    A rival whose χ² in its own window is beyond all chance has fallen already, and takes no points
    from the others, as long as another has not.
    """
    windows = {n: r.window for n, r in zip(names, results, strict=True) if r.window is not None}
    alive = [n for n, r in zip(names, results, strict=True) if not chance_of(r) < HOPELESS]
    counted = [n for n in alive if n not in fallen] or [n for n in names if n not in fallen]
    sets = next(iter(windows.values())).cut
    owners = {s: max(counted, key=lambda n: windows[n].cut[s]) for s in sets}
    return SharedCut({s: windows[owner].cut[s] for s, owner in owners.items()}, owners)


def cut_alike(
    studies: Sequence[Study],
    results: Sequence[FitResult],
    fits: Sequence[FitOnce],
    shared: SharedCut,
) -> list[FitResult]:
    """Rival fits brought to the same points, those from the shared edges on.

    All studies hold the same data sets. Raises StudyError where no points are left.
    """
    windows = [result.window or without_edge(s) for result, s in zip(results, studies, strict=True)]
    cut = dict(shared.edges)
    found = []
    for study, result, window, fit_once in zip(studies, results, windows, fits, strict=True):
        told_alone = window_cautions(study, window)
        if dict(window.cut) == cut:
            kept = tuple(c for c in result.cautions if c not in told_alone)
            found.append(replace(result, cautions=kept))
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
    return found


def chance_of(result: FitResult) -> float:
    """The probability of a χ², priors included, as large by chance; NaN where not known."""
    dof = result.degrees_of_freedom
    return chance(result.reduced_chi_square * dof, dof)


def find_edges(
    study: Study, result: FitResult, relative: Relative
) -> tuple[dict[str, float], dict[str, float]]:
    """Each set's lower edge in K at the fitted parameters, and the parameters' shifts by what
    size is left at and above these edges; see ``Window``.

    Cost: one diagonalisation of the other cluster.
    """
    temperature, deviation, slopes = [], [], []
    for data in study.sets:
        points = set_points(data)
        error = error_of(data, result)
        own = result.forward.predict(points, result.values)
        other = relative.forward.predict(points, result.values)
        temperature.append(data.temperature)
        deviation.append((own - other) / error)
        slopes.append(slopes_of(points, result) / error[:, None])
    edges = lower_edges(temperature, deviation, slopes)
    keep = [t >= edge for t, edge in zip(temperature, edges, strict=True)]
    d = np.concatenate([x[m] for x, m in zip(deviation, keep, strict=True)])
    J = np.concatenate([x[m] for x, m in zip(slopes, keep, strict=True)])
    moved = {n: float(x) for n, x in zip(result.free_names, shifts(J, d), strict=True)}
    return dict(zip((data.name for data in study.sets), edges, strict=True)), moved


def error_of(data: Measured, result: FitResult) -> Vector:
    """The uncertainty of a set's points, (n,) in SI: as stated, or the scatter the fit found."""
    if data.uncertainty is not None:
        return data.uncertainty
    some = result.sets[0]
    scatter = float(some.uncertainty[0] / np.mean(np.abs(some.data.value)))
    size = float(np.mean(np.abs(data.value)))
    return np.full(data.n_points, max(scatter, LEAST_SCATTER) * size)


def slopes_of(points: Points, result: FitResult) -> Vector:
    """Exact slopes of a fit's prediction (SI) by its free parameters, (n, n_free).

    0 for a parameter without a standard error, at a bound say.
    """
    known = np.array([math.isfinite(result[name].standard_error) for name in result.free_names])
    slopes = result.forward.evaluate(points, result.values).slopes
    return np.where(known, slopes, 0.0)


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
    for entry in fields(data):
        value = getattr(data, entry.name)
        if isinstance(value, np.ndarray) and value.shape[:1] == mask.shape:
            changed[entry.name] = value[mask]
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
        f"only {left} of {study.n_points} points lie above the {kelvin(max(finite), unit)}"
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
    moved: Mapping[str, float],
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
        "checked", edges, cut, len(study.model.sites), len(other.sites), excluded, unit, moved
    )  # fmt: skip
