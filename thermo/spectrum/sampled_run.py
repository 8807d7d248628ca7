"""A sampled spectrum from the first piece to the labelled table."""

from __future__ import annotations

import functools
import math
import os
from collections.abc import Callable
from dataclasses import replace
from typing import TYPE_CHECKING

from thermo.errors import RangeError
from thermo.model.level_table import LevelTable, check_levels
from thermo.model.spin_model import SpinModel
from thermo.spectrum import sampled, sampling_plan
from thermo.spectrum.checkpoint import Checkpoint
from thermo.spectrum.executors import Executor, Local, Progress, check_executor, run_pieces
from thermo.spectrum.labels import levels_dataset, versions
from thermo.spectrum.memory import memory_limit
from thermo.spectrum.settings import Settings
from thermo.spectrum.threads import blas_threads, thread_count
from thermo.symmetry.sectors import plan_symmetry

if TYPE_CHECKING:
    import xarray as xr

# The worst relative standard error of a table's curves, however the caller measures it.
WorstError = Callable[[LevelTable], float]

# With an accuracy to reach: vectors grow at most by this factor at once, to no more than this.
_GROWTH, _MOST_VECTORS = 4, 256
# Aim a little below the target: the error bar is itself an estimate.
_MARGIN = 1.2


def solve_sampled(
    model: SpinModel,
    settings: Settings | None = None,
    *,
    memory: int | float | str | None = None,
    checkpoint: str | os.PathLike[str] | None = None,
    executor: Executor | None = None,
    progress: Progress | None = None,
    worst_error: WorstError | None = None,
) -> xr.Dataset:
    """The levels dataset of a model's sampled spectrum.

    ``settings``: see ``Settings``. With ``settings.accuracy``, ``worst_error`` measures the table
    and vectors are added until it is reached; how far they came is in the attributes
    ``accuracy_wanted`` and ``accuracy_reached``. ``checkpoint`` keeps finished pieces in a file,
    ``executor`` says who does them; neither changes the levels. Cost: two complex multiply-adds
    per link of the orbits, sector, vector and step.
    """
    plan = plan_symmetry(model, use_total_spin=False)
    settings = sampling_plan.complete(plan, settings or Settings())
    if settings.accuracy is not None and worst_error is None:
        raise RangeError("an accuracy to reach needs a measure of it; use thermo.solve")
    chosen = check_executor(executor)
    local = isinstance(chosen, Local)
    cores = chosen.workers or thread_count() if isinstance(chosen, Local) else thread_count()
    limit = memory_limit(memory)
    if not isinstance(chosen, Local):
        # Each process does one piece with what belongs to it.
        cores, limit = 1, limit // chosen.at_once
    cost = sampling_plan.cost(plan, settings, limit, cores)
    threads = cost.threads if local else 1
    solver = sampled.SampledSolver(model, settings, threads)
    results: dict[str, sampled.Arrays] = {}
    reached = math.inf
    try:
        with _Kept(checkpoint, model, settings) as kept:
            while True:
                pieces = [p for p in solver.pieces() if p.key not in results]
                with blas_threads(1):
                    results |= run_pieces(
                        pieces,
                        functools.partial(sampled.solve_piece, model, settings, threads),
                        executor=chosen,
                        workers=cost.at_once,
                        checkpoint=kept,
                        progress=progress,
                    )
                table, sector = solver.table(results)
                check_levels(table, model)
                if settings.accuracy is None or worst_error is None:
                    break
                reached = worst_error(table)
                families = _more_families(solver, reached, settings.accuracy)
                if families == solver.families:
                    break
                solver.families = families
    finally:
        sampled.forget()
    attrs: dict[str, str | int | float] = {
        "method": "sampled",
        "seed": settings.seed,
        "vectors": solver.vectors,
        "steps": settings.steps,
        "full_below": settings.full_below or 0,
        "exact_states": -1 if settings.exact_states is None else settings.exact_states,
        "trace_order": settings.trace_order or 0,
    }
    if settings.accuracy is not None:
        attrs |= {"accuracy_wanted": settings.accuracy, "accuracy_reached": reached}
    if solver.unresolved:
        unit = "" if model.energy_unit == "1" else f" {model.energy_unit}"
        attrs["caution"] = (
            f"the ground state has not converged in {settings.steps} steps (residual "
            f"{solver.unresolved:.2g}{unit}), so curves at temperatures below some ten times that "
            "are biased beyond their error bars; take more steps"
        )
    return levels_dataset(model, solver.plan, table, sector, attrs)


def _more_families(solver: sampled.SampledSolver, reached: float, wanted: float) -> int:
    """How many families of vectors the next round should have; the same to stop."""
    most = max(solver.families, _MOST_VECTORS // solver.family)
    if reached <= wanted or not math.isfinite(reached):
        return solver.families
    needed = math.ceil(solver.families * (_MARGIN * reached / wanted) ** 2)
    return min(max(needed, solver.families + 1), _GROWTH * solver.families, most)


class _Kept:
    """The checkpoint of a run, or nothing."""

    def __init__(
        self, path: str | os.PathLike[str] | None, model: SpinModel, settings: Settings
    ) -> None:
        from thermo.variables import software_version

        self._checkpoint: Checkpoint | None = None
        if path is not None:
            couplings = ", ".join(f"{n} = {c!r}" for n, c in sorted(model.couplings.items()))
            identity = {
                "model": model.digest,
                "couplings": couplings,
                **replace(settings, accuracy=None).identity(),
                "version": software_version(),
                **versions(),
            }
            self._checkpoint = Checkpoint(path, identity)

    def __enter__(self) -> Checkpoint | None:
        return self._checkpoint

    def __exit__(self, *_: object) -> None:
        if self._checkpoint is not None:
            self._checkpoint.close()
