"""Canonical sums of levels with moments: the magnetisation vector and the χ tensor."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from thermo.ensemble.canonical import DEGENERACY, ClusterCurves, cluster_curves
from thermo.model.response_table import SWITCH, ResponseTable, pair_indices

# Elements handled at once.
_CHUNK = 2_000_000

Array = NDArray[np.float64]


@dataclass(frozen=True, eq=False)
class Response:
    """One cluster at one field, k_B = μ_B = 1, energies in the table's unit.

    ``caloric``: its energy, free energy, entropy and specific heat, each (nT, 1). ``moment``
    (nT, K) along the table's axes; ``tensor`` (nT, K, K) the static isothermal ∂⟨m_a⟩/∂b_b.
    """

    caloric: ClusterCurves
    moment: Array
    tensor: Array


def response(table: ResponseTable, temperature: Array) -> Response:
    """Moment and susceptibility at ``temperature`` (nT,), in the table's energy unit.

    Relative accuracy of χ: 10⁻¹⁰ of its largest element, at every T; the moment's is 10⁻¹⁵ of
    saturation. Cost: one exponential and 6 products by class of gaps for each level and T.
    """
    temperature = np.asarray(temperature, dtype=np.float64)
    excess = table.levels.energy - table.levels.energy.min()
    excess[excess <= DEGENERACY * excess.max()] = 0.0
    count = len(table.axes)
    index = pair_indices(count)
    moment = np.zeros((len(temperature), count))
    tensor = np.empty((len(temperature), count, count))
    limits = SWITCH * table.edges
    rows = max(1, _CHUNK // len(excess))
    for first in range(0, len(temperature), rows):
        part = slice(first, first + rows)
        t = temperature[part]
        p = table.levels.weight * np.exp(np.maximum(-excess / t[:, None], -800.0))
        p /= p.sum(axis=1, keepdims=True)
        mean = p @ table.moment if table.in_field else np.zeros((len(t), count))
        pairs = np.zeros((len(t), len(index)))
        for k, (a, b) in enumerate(index):
            for row in range(len(t)):
                off = table.moment[:, [a, b]] - mean[row, [a, b]]
                pairs[row, k] = p[row] @ (off[:, 0] * off[:, 1]) / t[row]
        for c, limit in enumerate(limits):
            degenerate = (t > limit) | (c == 0)
            if np.any(degenerate):
                chosen = p[degenerate]
                pairs[degenerate] += (chosen @ table.near[:, c]) / t[degenerate, None]
            if not np.all(degenerate):
                pairs[~degenerate] += 2 * (p[~degenerate] @ table.far[:, c])
        moment[part] = mean
        for k, (a, b) in enumerate(index):
            tensor[part, a, b] = tensor[part, b, a] = pairs[:, k]
    caloric = cluster_curves(table.levels, temperature, np.zeros(1))
    return Response(caloric, moment, tensor)
