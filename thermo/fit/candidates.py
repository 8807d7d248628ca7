"""Rival models fitted to the same points, and what the data say between them.

A study that lists rivals has no ``model``; its keys, besides those of ``thermo.fit.study``:

    [[candidate]]    name             required; no two share one
                     model            required: the path of a model file, or the model as a table
                     parameters       a table like [parameters], for this candidate alone; the
                                      study's own [parameters] hold for all candidates, a coupling
                                      there, or in profile, for those that have it
    [[instrument]]   what could be measured next (default: what was, as precisely)
                     name             default: the quantity
                     quantity, units, per    as in [[data]]
                     temperature      required: [lowest, highest] in K
                     field            required for a magnetization: [lowest, highest] in T, or one
                                      field; default 0
                     relative_uncertainty, absolute_uncertainty (in units)    one of them or both,
                                      which then add in quadrature

All candidates are fitted to the same points: those that the window of trust of every one of them
leaves, and then, should some fall there, those that the windows of the others leave. They are
weighed by the corrected Akaike criterion (Akaike, IEEE Trans. Autom. Control 19,
716 (1974); Hurvich and Tsai, Biometrika 76, 297 (1989)) and the Bayesian one (Schwarz, Ann. Stat.
6, 461 (1978)). With n points, k free parameters and stated uncertainties, AICc = χ² + 2k +
2k(k+1)/(n−k−1) and BIC = χ² + k ln n; without, χ² becomes n ln(RSS/n) and the scatter counts as
one parameter more.
"""

from __future__ import annotations

import math
import os
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, replace
from typing import TYPE_CHECKING

import numpy as np

from thermo.errors import RangeError, StudyError
from thermo.fit import PROFILES, full_solver, single_fit
from thermo.fit.next_point import Instrument, Proposal, from_data, propose, read_instruments
from thermo.fit.profiles import add_profiles
from thermo.fit.residual_tests import (
    COMFORTABLE,
    FEW_RUNS,
    UNLIKELY,
    along,
    durbin_watson,
    noticed_runs,
)
from thermo.fit.result import FitResult
from thermo.fit.starts import FURTHER_STARTS
from thermo.fit.strict import Section, did_you_mean
from thermo.fit.study import Content, Study, build_study, load_content
from thermo.fit.trust import SharedCut, chance_of, cut_alike, fit_in_window, shared_cut
from thermo.fit.verdict import conclude
from thermo.model import read_model

if TYPE_CHECKING:
    import xarray as xr

Progress = Callable[[float, str], None]


@dataclass(frozen=True, eq=False)
class Rivals:
    """A study of one or more candidates, as read."""

    title: str
    source: str
    text: str
    names: tuple[str, ...]
    studies: tuple[Study, ...]
    instruments: tuple[Instrument, ...]


@dataclass(frozen=True, eq=False)
class Candidate:
    """One candidate after its fit; ``result`` is the fit.

    ``aicc`` and ``bic`` are less the lowest of all candidates (``aicc`` NaN with too few points),
    and the weights share out 1. ``probability`` is that of a χ² as large by chance (NaN without
    stated uncertainties); ``runs`` and ``durbin_watson`` hold one number for each data set.
    ``standing``: the data leave it standing; ``remark`` says why, or why not.
    """

    name: str
    result: FitResult
    aicc: float
    bic: float
    aicc_weight: float
    bic_weight: float
    probability: float
    runs: Mapping[str, float]
    durbin_watson: Mapping[str, float]
    standing: bool = True
    remark: str = ""

    @property
    def n_parameters(self) -> int:
        """Number of free parameters."""
        return len(self.result.free_names)

    @property
    def adequate(self) -> bool:
        """Whether neither χ² nor the runs of the residuals speak against it.

        A trend well within the uncertainties speaks against these, not against the model.
        """
        return not self.probability < UNLIKELY and (
            not self.trending or self.probability > COMFORTABLE
        )

    @property
    def trending(self) -> tuple[str, ...]:
        """Data sets whose residuals have too few runs for chance."""
        return tuple(name for name, score in self.runs.items() if score < FEW_RUNS)


@dataclass(frozen=True, eq=False, repr=False)
class Comparison:
    """What the data say between candidates, the best first.

    ``conclusion``: "preferred" (one is left standing), "undecided" (several cannot be told
    apart), "none" (none describes the data) or "single" (there was but one). ``verdict`` says it
    in words. ``proposals`` are where the candidates left standing differ most, the best first.
    """

    title: str
    source: str
    text: str
    candidates: tuple[Candidate, ...]
    conclusion: str
    verdict: str
    proposals: tuple[Proposal, ...]
    cautions: tuple[str, ...]

    def __getitem__(self, name: str) -> Candidate:
        """The candidate of this name."""
        for candidate in self.candidates:
            if candidate.name == name:
                return candidate
        names = [c.name for c in self.candidates]
        raise StudyError(f"there is no candidate {name!r}; {did_you_mean(name, names)}")

    @property
    def best(self) -> Candidate:
        """The candidate with the lowest criterion, whether or not others stand beside it."""
        return self.candidates[0]

    @property
    def standing(self) -> tuple[Candidate, ...]:
        """The candidates the data leave standing."""
        return tuple(c for c in self.candidates if c.standing)

    def __repr__(self) -> str:
        """The verdict, then a line for each candidate."""
        lines = [self.verdict]
        for c in self.candidates:
            lines.append(
                f"  {c.name}: χ² = {c.result.chi_square:.5g}, {c.n_parameters} parameters, "
                f"ΔAICc = {c.aicc:.3g}, ΔBIC = {c.bic:.3g}; {c.remark}"
            )
        lines += [f"Next: {proposal}" for proposal in self.proposals[:1]]
        lines += [f"Caution: {caution}" for caution in self.cautions]
        return "\n".join(lines)

    def to_dataset(self) -> xr.Dataset:
        """The comparison as a dataset (see thermo.variables), with smooth curves to draw."""
        from thermo.fit.comparison_dataset import comparison_dataset

        return comparison_dataset(self)


def read_rivals(source: str | os.PathLike[str] | Mapping[str, object]) -> Rivals:
    """Read a study that lists candidates, or one model (then the only candidate).

    Errors as for ``read_study``; for two candidates of one name, and for candidates of which some
    are dimensionless and others not, StudyError.
    """
    content = load_content(source)
    if "candidate" not in content.table:
        study = build_study(content)
        return Rivals(
            study.title, study.source, study.text, (study.model.title,), (study,), ()
        )  # fmt: skip
    if "model" in content.table:
        raise StudyError(
            f"{content.name}: model stands beside candidate; list the model as one more "
            "[[candidate]], or take the candidates out"
        )
    entries = content.table["candidate"]
    if isinstance(entries, Mapping | str) or not isinstance(entries, Sequence) or not entries:
        raise StudyError(f"{content.name}: candidate must be one or more [[candidate]] tables")
    own = {k: v for k, v in content.table.items() if k not in ("candidate", "instrument")}
    shared = own.get("parameters", {})
    if not isinstance(shared, Mapping):
        raise StudyError(f"{content.name}: parameters must be a table of keys and values")
    read = [_read_entry(item, f"candidate[{k}]", content) for k, item in enumerate(entries)]
    names = [name for name, _, _ in read]
    for name in names:
        if names.count(name) > 1:
            raise StudyError(
                f"{content.name}: two candidates are called {name!r}; rename one of them"
            )
    couplings = {name for _, model, _ in read for name in model.couplings}
    studies = []
    for name, model, extra in read:
        others = couplings - set(model.couplings)
        mine = {k: v for k, v in shared.items() if k not in others}
        table = {**own, "model": model, "parameters": {**mine, **extra}}
        if isinstance(asked := own.get("profile"), Sequence) and not isinstance(asked, str):
            table["profile"] = [name for name in asked if name not in others]
        place = f"{content.name}, candidate {name!r}"
        studies.append(build_study(Content(table, place, content.folder, content.text)))
    if len({study.reduced for study in studies}) > 1:
        raise StudyError(
            f"{content.name}: some candidates are dimensionless and others are not, so the data "
            "cannot be in the units of both; give all models an energy unit"
        )
    instruments = read_instruments(content, studies[0].reduced)
    title = own.get("title")
    return Rivals(
        title if isinstance(title, str) else studies[0].title,
        content.name,
        content.text,
        tuple(names),
        tuple(studies),
        instruments,
    )


def _read_entry(item: object, path: str, content: Content):  # type: ignore[no-untyped-def]
    entry = Section(item, path, content.name)
    name = entry.text("name", "a name for this candidate").strip()
    raw = entry.raw("model", "the path of its model file, or its model as a table")
    extra = entry.content["parameters"] if entry.has("parameters") else {}
    entry.close()
    if not isinstance(extra, Mapping):
        raise entry.fail("parameters", "must be a table of keys and values")
    if isinstance(raw, str) and raw.strip():
        raw = content.folder / raw
    elif not isinstance(raw, Mapping):
        raise entry.fail("model", "is neither the path of a model file nor a table; give one")
    return name, read_model(raw), extra


def compare(
    source: Rivals | str | os.PathLike[str] | Mapping[str, object],
    progress: Progress | None = None,
    memory: int | float | str | None = None,
    starts: int = FURTHER_STARTS,
    profiles: str = "auto",
    cache: str | os.PathLike[str] | None = None,
) -> Comparison:
    """Fit every candidate of a study to the same points and say what the data decide.

    ``progress``, ``memory``, ``starts``, ``profiles`` and ``cache`` as for ``fit``, the profiles
    for candidates left standing. Cost: one or two fits for each candidate, and for each left
    standing two diagonalisations and its profiles.
    Raises what ``fit`` raises, with the candidate's name.
    """
    if isinstance(starts, bool) or not isinstance(starts, int) or not 0 <= starts <= 1000:
        raise RangeError(f"starts = {starts!r} must be a whole number from 0 to 1000")
    if profiles not in PROFILES:
        raise RangeError(f"profiles = {profiles!r} is unknown; use {', '.join(PROFILES)}")
    rivals = source if isinstance(source, Rivals) else read_rivals(source)
    count = len(rivals.names)
    solvers = [full_solver(study, memory) for study in rivals.studies]

    def told(k: int) -> Progress | None:
        if progress is None:
            return None
        return lambda done, text: progress((k + done) / count, f"{rivals.names[k]}: {text}")

    fits = [single_fit(solver, told(k), starts, cache) for k, solver in enumerate(solvers)]
    alone = [
        fit_in_window(study, fit_once, memory)
        for study, fit_once in zip(rivals.studies, fits, strict=True)
    ]
    fallen: dict[str, Candidate] = {}
    shared: SharedCut | None = None
    while (now := shared_cut(rivals.names, alone, fallen)) != shared:
        shared = now
        results = cut_alike(rivals.studies, alone, fits, shared)
        candidates, conclusion, verdict = conclude(_ranked(rivals.names, results, fallen))
        # What fell on the points that every window leaves no longer costs the others points.
        if conclusion in ("preferred", "undecided"):
            fallen |= {c.name: c for c in candidates if not c.standing}
    candidates = [
        replace(c, result=add_profiles(c.result, profiles, told(rivals.names.index(c.name))))
        if c.standing
        else c
        for c in candidates
    ]
    standing = [c for c in candidates if c.standing]
    proposals: tuple[Proposal, ...] = ()
    if conclusion == "undecided":
        instruments = rivals.instruments or from_data(standing[0].result)
        proposals = propose([(c.name, c.result) for c in standing], instruments, memory)
    return Comparison(
        rivals.title,
        rivals.source,
        rivals.text,
        tuple(candidates),
        conclusion,
        verdict,
        proposals,
        tuple(shared.cautions(rivals.studies[0]) if shared else ()),
    )


def _ranked(
    names: Sequence[str], results: Sequence[FitResult], fallen: Mapping[str, Candidate]
) -> list[Candidate]:
    """The candidates with their criteria and residual tests, the lowest criterion first.

    Those that have ``fallen`` on fewer points stay at least as far above the others.
    """
    known = [criteria(result) for result in results]
    alive = [k for k, name in enumerate(names) if name not in fallen]
    least_aicc, least_bic = (min(known[k][i] for k in alive) for i in (0, 1))
    aicc = [max(a, least_aicc + fallen[n].aicc) if n in fallen else a
            for n, (a, _) in zip(names, known, strict=True)]  # fmt: skip
    bic = [max(b, least_bic + fallen[n].bic) if n in fallen else b
           for n, (_, b) in zip(names, known, strict=True)]  # fmt: skip
    found = []
    for k, (name, result) in enumerate(zip(names, results, strict=True)):
        runs, watson = {}, {}
        for item in result.sets:
            order = along(item.data.temperature, item.data.field)
            share = (item.residual / item.uncertainty)[order] if np.all(item.uncertainty > 0) else (
                item.residual[order]
            )  # fmt: skip
            runs[item.data.name] = noticed_runs(share)
            watson[item.data.name] = durbin_watson(share)
        found.append(
            Candidate(
                name,
                result,
                aicc[k] - np.nanmin(aicc) if not math.isnan(aicc[k]) else math.nan,
                bic[k] - min(bic),
                _weights(aicc)[k],
                _weights(bic)[k],
                chance_of(result),
                runs,
                watson,
            )
        )
    by_aicc = not any(math.isnan(value) for value in aicc)
    return sorted(found, key=lambda c: c.aicc if by_aicc else c.bic)


def criteria(result: FitResult) -> tuple[float, float]:
    """(AICc, BIC) of a fit, up to what is common to all fits of the same points.

    AICc is NaN where there are too few points for its correction.
    """
    k = len(result.free_names)
    # A prior counts as one more point, in χ² and among the degrees of freedom.
    n = result.degrees_of_freedom + k
    badness = result.chi_square
    if result.error_basis == "stated" and result.degrees_of_freedom > 0:
        badness = result.reduced_chi_square * result.degrees_of_freedom
    if result.error_basis != "stated":
        k += 1
        squares = 0.0
        for item in result.sets:
            squares += float(np.sum((item.residual / np.mean(np.abs(item.data.value))) ** 2))
        # Below rounding all fits are as good.
        badness = n * math.log(max(squares / n, 1e-24))
    bic = badness + k * math.log(n)
    if n - k - 1 <= 0:
        return math.nan, bic
    return badness + 2 * k + 2 * k * (k + 1) / (n - k - 1), bic


def _weights(values: Sequence[float]) -> list[float]:
    """exp(−Δ/2), shared out to 1; 0 for NaN."""
    numbers = np.array(values, dtype=np.float64)
    known = np.isfinite(numbers)
    share = np.zeros(len(numbers))
    if known.any():
        share[known] = np.exp(-(numbers[known] - numbers[known].min()) / 2)
        share /= share.sum()
    return [float(x) for x in share]


__all__ = [
    "Candidate",
    "Comparison",
    "Rivals",
    "compare",
    "criteria",
    "read_rivals",
]
