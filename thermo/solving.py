"""``solve``: from a model to its levels, by whichever method suits it."""

from __future__ import annotations

import os
from collections.abc import Callable, Sequence
from typing import TYPE_CHECKING

from thermo.errors import RangeError
from thermo.model.level_table import LevelTable
from thermo.model.spin_model import SpinModel
from thermo.spectrum import planning, surveying
from thermo.spectrum.executors import Executor
from thermo.spectrum.full import solve_full
from thermo.spectrum.settings import Settings, check_sampling

if TYPE_CHECKING:
    import xarray as xr

Progress = Callable[[float, str], None]


def solve(
    model: SpinModel,
    method: str = "auto",
    *,
    vectors: int | None = None,
    steps: int = Settings.steps,
    seed: int = Settings.seed,
    full_below: int | None = None,
    exact_states: int | None = None,
    trace_order: int | None = Settings.trace_order,
    accuracy: float | None = None,
    accuracy_range: Sequence[float] | None = None,
    memory: int | float | str | None = None,
    checkpoint: str | os.PathLike[str] | None = None,
    executor: Executor | None = None,
    progress: Progress | None = None,
) -> xr.Dataset:
    """Solve a model: the levels dataset that ``curves`` takes.

    ``method``: "full" diagonalises every block, "sampled" takes random vectors for the large
    ones, "auto" is full where that fits into memory and takes minutes at most, else sampled.
    ``memory``: limit in bytes or as text ("4 GiB"), None for what is free.
    ``progress(fraction, text)`` is called as the work goes on.

    For sampled spectra: ``vectors`` random vectors per sector (None: 2, or more where they cost
    nothing), ``steps`` Lanczos steps each, ``seed``; sectors up to dimension ``full_below`` are
    solved fully (None: what pays off); at most ``exact_states`` converged states at each edge of
    a sector enter exactly (None: all); weights reproduce the traces up to H^``trace_order``
    (None: 6, or less where that would cost more than the vectors).
    ``accuracy``: the relative standard error of C and χ to reach by adding vectors, over the
    temperatures ``accuracy_range`` = (low, high) in the unit that curves have (None: from a
    tenth of the largest coupling to ten times it). ``checkpoint``: a file that keeps finished
    pieces, so that a killed run goes on. ``executor``: ``Local(workers)`` or ``Distributed(...)``.
    Neither changes the levels.

    Raises MemoryLimitError before allocating what does not fit, SpectrumError if the
    self-check fails, RangeError for a setting out of range.
    """
    planning.check_model(model, "solve")
    if method not in ("full", "auto", "sampled"):
        raise RangeError(f"method {method!r} is unknown; use 'full', 'sampled' or 'auto'")
    settings = check_sampling(vectors, steps, seed, full_below, exact_states, trace_order, accuracy)
    if accuracy_range is not None and accuracy is None:
        raise RangeError(
            "an accuracy range without an accuracy has no effect; give the accuracy to reach, for "
            "example 0.01"
        )
    if method == "auto":
        method = surveying.survey(
            model, memory, vectors=vectors, steps=steps, full_below=full_below
        ).method
    if method in ("full", "none"):  # the latter is refused there, with the reason
        return solve_full(model, memory, progress)
    from thermo.spectrum.sampled_run import solve_sampled

    worst_error = None
    if settings.accuracy is not None:
        from thermo.ensemble.accuracy import temperature_range
        from thermo.ensemble.accuracy import worst_error as measure

        low, high = temperature_range(model, accuracy_range)

        def worst_error(table: LevelTable) -> float:
            return float(measure(table, low, high))

    return solve_sampled(
        model, settings,
        memory=memory, checkpoint=checkpoint, executor=executor, progress=progress,
        worst_error=worst_error,
    )  # fmt: skip
