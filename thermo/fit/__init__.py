"""Fits of a spin model to measured curves."""

from __future__ import annotations

import os
from collections.abc import Callable, Mapping
from dataclasses import replace

from thermo.errors import RangeError
from thermo.fit.forward import Solver, check_available, make_forward, set_points
from thermo.fit.minimise import minimise
from thermo.fit.problem import make_problem
from thermo.fit.profiles import add_profiles
from thermo.fit.result import Estimate, FitResult, SetResult, make_result
from thermo.fit.starts import FURTHER_STARTS
from thermo.fit.study import Study, read_study
from thermo.fit.trust import FitOnce, fit_in_window, without_edge
from thermo.fit.window import Window

__all__ = ["Estimate", "FitResult", "SetResult", "Study", "Window", "fit", "read_study"]

PROFILES = ("auto", "asked", "all", "none")


def fit(
    study: Study | str | os.PathLike[str] | Mapping[str, object],
    progress: Callable[[float, str], None] | None = None,
    memory: int | float | str | None = None,
    solver: Solver | None = None,
    starts: int = FURTHER_STARTS,
    cache: str | os.PathLike[str] | None = None,
    profiles: str = "auto",
    method: str = "full",
) -> FitResult:
    """Fit a study: a ``Study``, or what ``read_study`` takes.

    ``progress`` is called with the share done (0 to 1, a guess) and a line of text. ``memory``
    limits the diagonalisation, in bytes. ``solver`` replaces the full diagonalisation by anything
    with a ``table(couplings) -> LevelTable`` method. ``starts`` is how many further starts may be
    tried, and only where the first minimum looks like a false one: a parameter at its bound,
    reduced χ² above 2, residuals of one sign in long runs, or no convergence. ``cache`` names a
    folder that keeps every spectrum found, for this fit and later ones of the same cluster.
    ``profiles`` says which parameters get profile intervals: "auto" (those the study asks for, and
    where it takes little time those near a bound or strongly correlated), "asked", "all", "none".
    ``method`` "sampled" is for clusters too large to diagonalise: random vectors, the same ones at
    every step, slopes by differences (see ``thermo.fit.sampled_levels``).

    A periodic cluster that is not ``finite`` is held against another size of its lattice, and by
    default (``window`` of the study) data sets without a stated range are fitted only above the
    temperature where its size shows; see ``thermo.fit.trust``. With a ``solver`` it is not.

    Cost: one diagonalisation (with eigenvectors, for the exact slopes) for each new direction of
    the couplings, and none for their slopes, or for a change of their common scale, g or anything
    else that surrounds the spins. Further starts take one each and those of the iterations of the
    best three. A ``solver`` without slopes takes two more for each independent coupling and step.

    Raises RangeError, StudyError (no data inside the window of trust, too), DataError, UnitsError,
    ModelError for the input, UnavailableError where the model cannot give what was measured,
    MemoryLimitError where a block is too large.
    """
    if isinstance(starts, bool) or not isinstance(starts, int) or not 0 <= starts <= 1000:
        raise RangeError(f"starts = {starts!r} must be a whole number from 0 to 1000")
    if profiles not in PROFILES:
        raise RangeError(f"profiles = {profiles!r} is unknown; use {', '.join(PROFILES)}")
    if method not in ("full", "sampled"):
        raise RangeError(f"method = {method!r} is unknown; use 'full' or 'sampled'")
    study = study if isinstance(study, Study) else read_study(study)
    if solver is not None:  # whose levels no other cluster is known to share
        found = _fit_once(study, solver, progress, starts, cache)
        return add_profiles(replace(found, window=without_edge(study)), profiles, progress)
    if method == "sampled":
        from thermo.fit.sampled_levels import SampledLevels

        levels: Solver = SampledLevels(study.model, memory=memory)
    else:
        levels = full_solver(study, memory)
    found = fit_in_window(study, single_fit(levels, progress, starts, cache), memory)
    return add_profiles(found, profiles, progress)


def full_solver(study: Study, memory: int | float | str | None = None) -> Solver:
    """The full diagonalisation of a study's model, held first against what was measured."""
    from thermo.spectrum.full import FullSolver

    full = FullSolver(study.model, memory)
    for data in study.sets:  # before hours are spent on a spectrum that cannot serve
        check_available(set_points(data), full.plan.resolved)
    return full


def single_fit(
    solver: Solver,
    progress: Callable[[float, str], None] | None,
    starts: int,
    cache: str | os.PathLike[str] | None = None,
) -> FitOnce:
    """Fits of one model's studies by one solver; the second and later ones start once."""
    return lambda study, again: _fit_once(study, solver, progress, 0 if again else starts, cache)


def _fit_once(
    study: Study,
    solver: Solver,
    progress: Callable[[float, str], None] | None,
    starts: int,
    cache: str | os.PathLike[str] | None,
) -> FitResult:
    """One fit of all the study's points."""
    forward = make_forward(study, solver, cache)
    problem = make_problem(study, forward, progress)
    always = study.starts is not None
    minimum = minimise(problem, study.starts if study.starts is not None else starts, always)
    return make_result(study, problem, minimum)
