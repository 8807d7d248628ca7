"""Canonical sums: levels in, curves of one cluster out, stable at every temperature.

A level's states differ only in M, so a field along the conserved axis shifts them by −hM and
the whole (T, B) surface comes from one pass over the levels per temperature: within each
group of levels with the same magnetic numbers, Z, the mean energy and its variance are taken
once; the groups' few states are then combined for every field.

All sums are over positive terms or squares of centred differences, with energies counted from
the lowest: nothing overflows, and C and χ keep their relative accuracy at both ends.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from thermo.model.level_table import LevelTable

# Levels nearer to the ground level than this fraction of the spectrum's width are the ground
# level: what rounding splits must not be resolved as T → 0.
DEGENERACY = 1e-12
# Elements handled at once; keeps the working set in cache.
_CHUNK = 1_000_000

Array = NDArray[np.float64]


@dataclass(frozen=True, eq=False)
class ClusterCurves:
    """Curves of one cluster, each (nT, nB), k_B = 1, energies in the table's unit.

    ``moment`` is ⟨M⟩ and ``moment_variance`` ⟨M²⟩ − ⟨M⟩², M = Σ Sᶻ; both None where the
    levels do not resolve M. The moment is g μ_B ⟨M⟩, its differential susceptibility
    g² μ_B² · moment_variance / T.
    """

    internal_energy: Array
    free_energy: Array
    entropy: Array
    specific_heat: Array
    moment: Array | None
    moment_variance: Array | None


@dataclass(frozen=True, eq=False)
class _Groups:
    """Levels sorted by magnetic numbers: ``order`` (L,) indexes the table.

    ``excess`` (L,) energies above the group's lowest, ``weight`` (L,) per state of the group;
    ``lowest`` (K,) each group's lowest above the ``ground`` level and ``lowest_weight`` (K,) the
    weight there; ``m`` and ``owner`` (J,) list each group's states; energies within
    ``tolerance`` of the ground level count as equal.
    """

    excess: Array
    weight: Array
    start: NDArray[np.int64]
    owner_of_level: NDArray[np.int64]
    lowest: Array
    lowest_weight: Array
    ground: float
    tolerance: float
    m: Array
    owner: NDArray[np.int64]
    order: NDArray[np.int64]


def _group(table: LevelTable) -> _Groups:
    if table.resolved == "total_spin":
        label = table.twice_spin
    elif table.resolved == "magnetic_number":
        label = table.twice_m
    else:
        label = np.zeros(len(table.energy), dtype=np.int64)
    order = np.lexsort((table.energy, label))
    # A sampled level may stand for nothing, and then cannot be the ground level.
    order = order[table.weight[order] > 0]
    label = label[order]
    values, start = np.unique(label, return_index=True)
    owner_of_level = np.searchsorted(values, label)
    energy = table.energy[order]
    ground = float(energy.min())
    tolerance = DEGENERACY * float(energy.max() - ground)
    lowest = energy[start] - ground
    excess = energy - energy[start][owner_of_level]
    lowest[lowest <= tolerance] = 0.0
    excess[excess <= tolerance] = 0.0
    m: list[float] = []
    owner: list[int] = []
    states = np.empty(len(values))
    for k, twice in enumerate(values.tolist()):
        if table.resolved == "total_spin":
            members = [x / 2 for x in range(-twice, twice + 1, 2)]
        elif table.resolved == "magnetic_number" and twice > 0:
            members = [-twice / 2, twice / 2]
        else:
            members = [0.0]
        m += members
        owner += [k] * len(members)
        states[k] = len(members)
    weight = table.weight[order] / states[owner_of_level]
    lowest_weight = np.add.reduceat(weight * (excess == 0), start)
    return _Groups(
        excess, weight, start, owner_of_level, lowest, lowest_weight, ground, tolerance,
        np.array(m), np.array(owner), order,
    )  # fmt: skip


def _group_sums(groups: _Groups, temperature: Array) -> tuple[Array, Array, Array, Array]:
    """Z without the group's lowest level, Z, mean and variance of the excess energy of every
    group, each (nT, K)."""
    shape = (len(temperature), len(groups.start))
    z, mean, variance = np.empty(shape), np.empty(shape), np.empty(shape)
    excited = np.empty(shape)
    above = groups.excess > 0
    step = max(1, _CHUNK // len(groups.excess))
    for first in range(0, len(temperature), step):
        part = slice(first, first + step)
        # The difference of two exponents below −745 is nothing either way.
        exponent = np.maximum(-groups.excess / temperature[part, None], -800.0)
        p = groups.weight * np.exp(exponent)
        z[part] = np.add.reduceat(p, groups.start, axis=1)
        excited[part] = np.add.reduceat(p * above, groups.start, axis=1)
        mean[part] = np.add.reduceat(p * groups.excess, groups.start, axis=1) / z[part]
        centred = groups.excess - mean[part][:, groups.owner_of_level]
        variance[part] = np.add.reduceat(p * centred**2, groups.start, axis=1) / z[part]
    return excited, z, mean, variance


def cluster_curves(table: LevelTable, temperature: Array, field: Array) -> ClusterCurves:
    """Thermodynamics of one cluster on a grid of temperatures and fields.

    ``temperature`` (nT,) > 0 and ``field`` (nB,), the Zeeman energy g μ_B B per unit of M,
    both in the table's energy unit. A field other than zero needs levels that resolve M.
    Cost: one exponential per level and temperature; fields are nearly free.
    """
    temperature = np.asarray(temperature, dtype=np.float64)
    field = np.asarray(field, dtype=np.float64)
    groups = _group(table)
    excited, z, mean, variance = _group_sums(groups, temperature)
    shape = (len(temperature), len(field))
    energy, free, entropy = np.empty(shape), np.empty(shape), np.empty(shape)
    heat = np.empty(shape)
    moment, moment_variance = np.empty(shape), np.empty(shape)
    t = temperature[:, None]
    excited, z, mean, variance = (a[:, groups.owner] for a in (excited, z, mean, variance))
    positive = np.flatnonzero(groups.m > 0)
    # The state of the same group with −M.
    opposite = {(int(k), m): j for j, (k, m) in enumerate(zip(groups.owner, groups.m, strict=True))}
    negative = np.array(
        [opposite[int(groups.owner[j]), -groups.m[j]] for j in positive], dtype=np.int64
    )
    for b, h in enumerate(field):
        lowest = groups.lowest[groups.owner] - h * groups.m
        base = lowest.min()
        lowest = lowest - base
        at_ground = lowest <= groups.tolerance
        lowest[at_ground] = 0.0
        # Every term is between 0 and the number of states, the lowest at least its weight.
        boltzmann = np.exp(np.maximum(-lowest / t, -800.0))
        q = z * boltzmann
        total = q.sum(axis=1)
        p = q / total[:, None]
        # ln Z = ln(ground weight) + ln(1 + the rest): the rest may be far below rounding.
        ground_weight = groups.lowest_weight[groups.owner][at_ground].sum()
        rest = np.where(at_ground, excited * boltzmann, q).sum(axis=1)
        relative = lowest + mean
        u = (p * relative).sum(axis=1)
        energy[:, b] = groups.ground + base + u
        log_z = np.log(ground_weight) + np.log1p(rest / ground_weight)
        free[:, b] = groups.ground + base - temperature * log_z
        entropy[:, b] = log_z + u / temperature
        spread = (p * (variance + (relative - u[:, None]) ** 2)).sum(axis=1)
        heat[:, b] = spread / temperature**2
        # p(M) − p(−M) from their ratio e^{−2|h|M/T}, exact for the smallest field.
        favoured = positive if h >= 0 else negative
        bias = -np.expm1(-2 * abs(h) * groups.m[positive] / t)
        m = np.sign(h) * (p[:, favoured] * bias * groups.m[positive]).sum(axis=1)
        moment[:, b] = m
        moment_variance[:, b] = (p * (groups.m - m[:, None]) ** 2).sum(axis=1)
    known = table.resolved in ("total_spin", "magnetic_number")
    return ClusterCurves(
        internal_energy=energy,
        free_energy=free,
        entropy=entropy,
        specific_heat=heat,
        moment=moment if known else None,
        moment_variance=moment_variance if known else None,
    )
