"""Canonical averages of what each level carries, on a grid of temperatures and fields."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from thermo.ensemble.canonical import _CHUNK, _group
from thermo.model.level_table import LevelTable

Array = NDArray[np.float64]


def level_averages(table: LevelTable, values: Array, temperature: Array, field: Array) -> Array:
    """⟨A⟩ = Σ p_n ⟨n|A|n⟩ for P observables, (P, nT, nB).

    ``values`` (P, L) are ⟨n|A|n⟩ of the table's levels, the same for every state that a level
    stands for (so even under a reversal of M, and with levels that resolve S a scalar).
    ``temperature`` (nT,) > 0 and ``field`` (nB,), the Zeeman energy per unit of M, are in the
    table's energy unit; a field other than zero needs levels that resolve M. All weights are
    positive, so errors are rounding of the largest value. Cost: one exponential and P
    multiplications for each level and temperature.
    """
    temperature = np.asarray(temperature, dtype=np.float64)
    field = np.asarray(field, dtype=np.float64)
    groups = _group(table)
    y = np.ascontiguousarray(np.asarray(values, dtype=np.float64)[:, groups.order].T)
    ends = np.append(groups.start[1:], len(groups.excess))
    z = np.empty((len(temperature), len(ends)))
    mean = np.empty((len(temperature), len(ends), y.shape[1]))
    step = max(1, _CHUNK // len(groups.excess))
    for first in range(0, len(temperature), step):
        part = slice(first, first + step)
        # Below −745 an exponential is nothing either way.
        exponent = np.maximum(-groups.excess / temperature[part, None], -800.0)
        p = groups.weight * np.exp(exponent)
        for g, (start, end) in enumerate(zip(groups.start, ends, strict=True)):
            z[part, g] = p[:, start:end].sum(axis=1)
            mean[part, g] = p[:, start:end] @ y[start:end] / z[part, g, None]
    found = np.empty((y.shape[1], len(temperature), len(field)))
    for b, h in enumerate(field):
        lowest = groups.lowest[groups.owner] - h * groups.m
        lowest = lowest - lowest.min()
        lowest[lowest <= groups.tolerance] = 0.0
        q = z[:, groups.owner] * np.exp(np.maximum(-lowest / temperature[:, None], -800.0))
        share = np.zeros_like(z)
        for state, owner in enumerate(groups.owner):
            share[:, owner] += q[:, state]
        share /= share.sum(axis=1, keepdims=True)
        found[:, :, b] = np.einsum("tg,tgp->pt", share, mean)
    return found


def structure_weights(
    of_pair: NDArray[np.int64], places: Array, wave_vectors: Array, n_classes: int
) -> Array:
    """Weights (Q, K) with S(q) = Σ_k weight[q, k] ⟨S_i·S_j⟩_k, S(q) = (1/N) Σ_ij cos(2π q·(r_i −
    r_j)) ⟨S_i·S_j⟩.

    ``of_pair`` (N, N) the class of each pair, ``places`` (N, D) in units of the cell's vectors,
    ``wave_vectors`` (Q, D) in units of their reciprocals. Cost: N² cosines for each q.
    """
    angle = 2 * np.pi * wave_vectors @ places.T
    flat, n = of_pair.ravel(), len(places)
    found = np.empty((len(angle), n_classes))
    for k, a in enumerate(angle):
        found[k] = np.bincount(flat, np.cos(a[:, None] - a[None]).ravel(), n_classes) / n
    return found
