"""Levels with ⟨n|S_i·S_j|n⟩ for every class of pairs, from the exact slopes of a full spectrum.

The sum of S_i·S_j over a class of pairs commutes with every symmetry of H, so it may enter as
one more coupling, of value zero: nothing about the spectrum or its blocks changes, and the
slope of each level along that coupling is its expectation value. One number for each level and
class is kept, no vector.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from thermo.model.level_table import LevelTable
from thermo.model.spin_model import Bond, Ion, SpinModel
from thermo.spectrum import planning
from thermo.spectrum.full import FullSolver
from thermo.spectrum.memory import memory_limit
from thermo.symmetry.interaction import RELATIVE_TOLERANCE, interaction
from thermo.symmetry.pairs import PairClasses, pair_classes
from thermo.symmetry.sectors import plan_symmetry

# The model's own coupling in the merged model; what a user may call one cannot hold a space.
_OWN = "all terms"
_FORMS = {
    "total": np.eye(3),
    "xx": np.diag([1.0, 0.0, 0.0]),
    "yy": np.diag([0.0, 1.0, 0.0]),
    "zz": np.diag([0.0, 0.0, 1.0]),
}


@dataclass(frozen=True, eq=False)
class CorrelatedLevels:
    """The checked levels of a model with the mean ⟨n|·|n⟩ over each class of pairs.

    ``values`` maps "total" (S_i·S_j) and, where they were asked for, "xx", "yy" and "zz"
    (SᵃᵢSᵃⱼ) to arrays (K, L), dimensionless, in the order of ``classes`` and of ``table``.
    Within a degenerate level only the sum over it means something (as for all slopes).
    """

    table: LevelTable
    classes: PairClasses
    values: dict[str, NDArray[np.float64]]


def correlated_levels(
    model: SpinModel,
    components: bool = False,
    memory: int | float | str | None = None,
    progress: Callable[[float, str], None] | None = None,
) -> CorrelatedLevels:
    """All levels of a model, each with its correlations.

    ``components`` adds those along x, y and z; levels of an isotropic model then resolve M
    instead of the total spin, as a field would single out z. Raises MemoryLimitError before
    anything large is allocated, SpectrumError where the levels or their correlations fail the
    check against exact traces. Cost: about that of the levels with their eigenvectors, 5 to 10
    times the eigenvalues alone; n² operations for each pair class of a block of dimension n.
    """
    limit = memory_limit(memory)
    switches = {"use_total_spin": not components}
    plan = plan_symmetry(model, **switches)
    planning.refuse_if_too_large(plan, limit, slopes=True)
    classes = pair_classes(plan.terms)
    forms = _needed(plan.conserved.modulus == 0) if components else ("total",)
    probed = _with_probes(model, classes, forms)
    found = FullSolver(probed, limit, generic=True, **switches).sloped(progress=progress)
    row = {name: k for k, name in enumerate(found.names)}
    spins = model.spins
    casimir = spins[classes.first] * (spins[classes.first] + 1)
    own = classes.first == classes.second
    half = own & (spins[classes.first] == 0.5)
    values = {}
    for form in forms:
        means = np.empty((len(own), len(found.table.energy)))
        for k in range(len(own)):
            if own[k] and form == "total":
                means[k] = casimir[k]
            elif half[k]:
                means[k] = 0.25
            else:
                means[k] = found.slopes[row[f"{form} {k}"]] / classes.count[k]
        values[form] = means
    if components and "xx" not in values:
        values["xx"] = values["yy"] = (values["total"] - values["zz"]) / 2
    elif components:
        values["total"] = values["xx"] + values["yy"] + values["zz"]
    return CorrelatedLevels(found.table, classes, values)


def _needed(axial: bool) -> tuple[str, ...]:
    """What to ask of each level: where M is conserved, x and y are alike and break it alone."""
    return ("total", "zz") if axial else ("xx", "yy", "zz")


def _with_probes(model: SpinModel, classes: PairClasses, forms: tuple[str, ...]) -> SpinModel:
    """The model with its own terms merged into one coupling, and one of value zero for each
    class and form."""
    # Merged, so that couplings which happen to agree or cancel keep the symmetry that gives.
    terms = interaction(model)
    scale = float(max((np.abs(a).max() for a in terms.all_tensors()), default=0.0))
    unit = scale or 1.0

    def clean(a: NDArray[np.float64]) -> NDArray[np.float64]:
        merged: NDArray[np.float64] = a[0] / unit
        return np.where(np.abs(merged) <= RELATIVE_TOLERANCE, 0.0, merged)

    couplings = {_OWN: scale}
    bonds = [Bond(i, j, _OWN, clean(a)) for (i, j), a in sorted(terms.pair.items())]
    ions = [Ion(i, _OWN, clean(d)) for i, d in sorted(terms.ion.items())]
    spins = model.spins
    for form in forms:
        for k in range(len(classes.first)):
            name = f"{form} {k}"
            pairs = np.argwhere(np.triu(classes.of_pair == k))
            if classes.first[k] != classes.second[k]:
                couplings[name] = 0.0
                bonds += [Bond(int(i), int(j), name, _FORMS[form]) for i, j in pairs]
            elif form != "total" and spins[classes.first[k]] > 0.5:
                # (Sᵃ)² of one site; its sum over the axes and that of a spin ½ are constants.
                couplings[name] = 0.0
                ions += [Ion(int(i), name, _FORMS[form]) for i, _ in pairs]
    return replace(model, couplings=couplings, bonds=tuple(bonds), ions=tuple(ions))
