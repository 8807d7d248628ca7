"""Levels with their slopes by the couplings, and the check that every such table must pass."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from thermo.errors import SpectrumError
from thermo.model.level_table import LevelTable, energy_scale
from thermo.model.spin_model import SpinModel
from thermo.model.traces import exact_traces

# Relative misfit of the sums that rounding can cause; real faults are many orders larger.
SLOPE_TOLERANCE = 1e-8


@dataclass(frozen=True, eq=False)
class SlopedLevels:
    """Levels and ⟨n|H_p|n⟩ = ∂E_n/∂c_p for the P couplings ``names``, ``slopes`` (P, L).

    Slopes are numbers without a unit (energy per coupling) in the order of ``table``. Within a
    degenerate level the eigenvectors are arbitrary, so single slopes there mean nothing; sums
    with equal weights over the level, which all canonical sums of slopes are, are exact:
    d Tr f(H)/dc_p = Tr f′(H) H_p.
    """

    table: LevelTable
    names: tuple[str, ...]
    slopes: NDArray[np.float64]


@dataclass(frozen=True, eq=False)
class ExactMoments:
    """Of a model's couplings: Tr H_p/n ``mean`` (P,), Tr H_p H_q/n ``gram`` (P, P), and the
    largest element of each H_p's tensors, ``largest`` (P,)."""

    mean: NDArray[np.float64]
    gram: NDArray[np.float64]
    largest: NDArray[np.float64]


def exact_moments(model: SpinModel) -> ExactMoments:
    """The exact traces that slopes are held against; halves of differences of squares are exact.

    Cost: one sum over the bonds for each pair of couplings.
    """
    names = tuple(model.couplings)
    bare = dict.fromkeys(names, 0.0)

    def traces(*shifted: str) -> tuple[float, float]:
        _, mean, square = exact_traces(model.with_couplings({**bare, **dict.fromkeys(shifted, 1)}))
        return mean, square

    single = [traces(name) for name in names]
    gram = np.diag([square for _, square in single])
    for p, first in enumerate(names):
        for q in range(p):
            both = traces(first, names[q])[1]
            gram[p, q] = gram[q, p] = (both - single[p][1] - single[q][1]) / 2
    largest = [_largest(model, name) for name in names]
    return ExactMoments(np.array([mean for mean, _ in single]), gram, np.array(largest))


def check_slopes(found: SlopedLevels, model: SpinModel, exact: ExactMoments | None = None) -> None:
    """Hold slopes against Σ c_p ∂E/∂c_p = E (Euler) and the traces of H_p and H·H_p.

    ``exact`` are the model's moments, where they are known already.
    Raises SpectrumError on a mismatch. Cost: a few passes over the levels.
    """
    unit = energy_scale(model) or 1.0
    table, c = found.table, np.array([model.couplings[name] for name in found.names]) / unit
    energy = table.energy / unit
    share = table.weight / table.weight.sum()
    scale = max(float(np.abs(energy).max()), 1e-10)
    # Eigenvectors of H, degenerate or not, give each level's own energy.
    misfit = float(np.abs(c @ found.slopes - energy).max()) if len(c) else 0.0
    if not misfit <= SLOPE_TOLERANCE * scale:
        raise SpectrumError(_sentence("their sum with the couplings is", misfit / scale))
    if exact is None:
        exact = exact_moments(model)
    order = [list(model.couplings).index(name) for name in found.names]
    cross = exact.gram[np.ix_(order, order)] @ c
    for k, (name, slope) in enumerate(zip(found.names, found.slopes, strict=True)):
        # A term may vanish to rounding: judged by what went into it.
        own = max(float(np.abs(slope).max()), 1e-6 * exact.largest[order[k]], 1e-100)
        faults = (
            abs(float(share @ slope) - exact.mean[order[k]]) / own,
            abs(float(share @ (slope * energy)) - cross[k]) / (own * scale),
        )
        if not max(faults) <= SLOPE_TOLERANCE:
            raise SpectrumError(_sentence(f"the traces of coupling {name} are", max(faults)))


def _largest(model: SpinModel, name: str) -> float:
    terms = [b.matrix for b in model.bonds if b.coupling == name]
    terms += [ion.matrix for ion in model.ions if ion.coupling == name]
    return max((float(np.abs(a).max()) for a in terms), default=0.0)


def _sentence(what: str, size: float) -> str:
    return (
        f"the slopes of the levels fail their check against the model ({what} off by "
        f"{size:.1e}); they are not a result, solve the model again"
    )
