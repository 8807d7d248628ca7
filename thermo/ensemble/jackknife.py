"""Error bars of the curves of sampled levels: a jackknife over random vectors.

Sectors are strata: their noise is independent. One unit (a random vector of one sector) at a
time is left out, the other R − 1 of its sector stand for it, and the calibration of its |M| is
done again, at the degree of the full table. With f_sv a curve without unit v of sector s,

    variance = Σ_s (R_s − 1)/R_s Σ_v (f_sv − mean_v f_sv)²

(Miller, Biometrika 61, 1 (1974)). Few vectors estimate a variance badly, so the root is widened
by Student's factor for 68.27 % with ν effective degrees of freedom (Satterthwaite, Biometrics
Bull. 2, 110 (1946)),

    ν = (Σ v_s)² / Σ [v_s²/(ν_s + 1)] − 1,  ν_s = R_s − 1, v_s the share of sector s:

Satterthwaite's own form has ν_s and 0 for ν_s + 1 and 1, which covers too much as the v_s are
estimates, and the unbiased one ν_s + 2 and 2, too little where the curves are not linear in
them. Between the two the bars were measured to cover 68 % (tests/test_jackknife.py).

A replicate is linear in the sums of each unit, Σ raw e^{−ε/T} P_k(x) ε^m, and only its own |M|
changes: one pass over the levels serves all of them.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from thermo.ensemble.canonical import ClusterCurves, cluster_curves
from thermo.model.calibration import Sampling, chebyshev_values, orthonormal
from thermo.model.level_table import LevelTable

Array = NDArray[np.float64]
Integers = NDArray[np.int64]

# A replicate whose Gram matrix (1 for the full table) has an eigenvalue below this is linearised.
_SOUND = 1e-6
# Levels and traces are accurate to these shares of the spectrum's width and of a curve, so no
# error is smaller, however well the vectors agree.
_LEVEL_ROUNDING, _CURVE_ROUNDING = 1e-14, 1e-13
# Probability below +1 standard deviation of a normal distribution.
_ONE_SIGMA = 0.8413447460685429
# Numbers held at once.
_CHUNK = 4_000_000


@dataclass(frozen=True, eq=False)
class _Group:
    """One |M|: its exact and sampled levels, energies ``excess`` above its ``lowest``.

    ``columns`` (L, n+1): 1 and the polynomials P_k at the sampled levels, which are sorted by
    unit; ``start`` (u,) where each unit's begin. ``factor`` (n+1,) are the coefficients of 1 + q.
    For each unit, ``replicate`` (u, n+1) are those of its replicate, ``linear`` (u,) tells
    that they are a linearised step, ``stratum`` (u,) is its sector's and ``vectors`` (u,) how
    many that has. ``m`` lists a level's magnetic numbers, of equal weight.
    """

    units: Integers
    stratum: Integers
    vectors: Integers
    lowest: float
    excess: Array
    raw: Array
    columns: Array
    start: Integers
    exact_excess: Array
    exact_weight: Array
    factor: Array
    replicate: Array
    linear: NDArray[np.bool_]
    m: Array


def why_no_errors(table: LevelTable) -> str | None:
    """Why a sampled table has no error bars, in a sentence; None where it has, or is exact."""
    sampling = table.sampling
    if sampling is None or not np.any(sampling.unit >= 0):
        return None
    _, vectors = _strata(sampling)
    if np.any(vectors < 2):
        return "one random vector alone tells nothing of its scatter; sample with vectors=2 or more"
    return None


def _strata(sampling: Sampling) -> tuple[Integers, Integers]:
    """Of the sampled units (U,): their stratum 0 … S−1, −1 for a unit of a sector that left no
    sampled level; and the number of units of each stratum (S,)."""
    present = np.unique(sampling.unit_sector[sampling.unit[sampling.unit >= 0]])
    place = np.searchsorted(present, sampling.unit_sector).clip(max=max(len(present) - 1, 0))
    known = len(present) > 0
    stratum = np.where(known & (present[place] == sampling.unit_sector), place, -1)
    return stratum.astype(np.int64), np.bincount(stratum[stratum >= 0], minlength=len(present))


def cluster_errors(
    table: LevelTable, temperature: Array, field: Array, curves: ClusterCurves | None = None
) -> ClusterCurves | None:
    """Standard errors of ``cluster_curves`` on the same grid, each (nT, nB).

    Half the width of a 68.27 % interval, and not below what rounding leaves uncertain;
    ``curves`` are those of the same grid where they are at hand. None for a table without
    sampled levels; NaN throughout where a sector has one vector only (``why_no_errors``), and at
    temperatures where a replicate has no positive Z. Cost: one exponential and 3(K+2)
    multiplications for each sampled level and temperature, some 50 for each unit, temperature
    and field, and the curves where they are not given.
    """
    sampling = table.sampling
    if sampling is None or not np.any(sampling.unit >= 0):
        return None
    temperature = np.asarray(temperature, dtype=np.float64)
    field = np.asarray(field, dtype=np.float64)
    known = table.resolved == "magnetic_number"
    found = np.full((6, len(temperature), len(field)), np.nan)
    stratum, vectors = _strata(sampling)
    if not np.any(vectors < 2):
        groups = [_group(table, sampling, g, stratum, vectors) for g in _groups_of(sampling)]
        units = np.concatenate([g.units for g in groups])
        order = np.argsort(stratum[units], kind="stable")
        strata, first = np.unique(stratum[units][order], return_index=True)
        deleted = _Deleted(order, first, vectors[strata])
        per_level = max(
            len(table.energy), sum(6 * g.columns.shape[1] * len(g.units) for g in groups)
        )
        step = max(1, _CHUNK // per_level)
        for begin in range(0, len(temperature), step):
            part = slice(begin, begin + step)
            found[:, part] = _errors(groups, deleted, temperature[part], field)
    rounding = _rounding(table, temperature, curves or cluster_curves(table, temperature, field))
    found = np.hypot(found, rounding)
    return ClusterCurves(
        internal_energy=found[0],
        free_energy=found[1],
        entropy=found[2],
        specific_heat=found[3],
        moment=found[4] if known else None,
        moment_variance=found[5] if known else None,
    )


def _rounding(table: LevelTable, t: Array, curves: ClusterCurves) -> Array:
    """What rounding leaves uncertain of the six curves, (6, nT, nB): a level off by ε changes
    populations by ε/T of themselves."""
    level = _LEVEL_ROUNDING * float(table.energy.max() - table.energy.min())
    share = _CURVE_ROUNDING + level / t[:, None]
    energy = curves.internal_energy
    nothing = np.zeros_like(energy)
    return np.array(
        [
            np.full_like(energy, level) + _CURVE_ROUNDING * np.abs(energy),
            np.full_like(energy, level) + _CURVE_ROUNDING * np.abs(curves.free_energy),
            share * np.abs(curves.entropy),
            share * curves.specific_heat,
            nothing if curves.moment is None else share * np.abs(curves.moment),
            nothing if curves.moment_variance is None else share * curves.moment_variance,
        ]
    )


def _groups_of(sampling: Sampling) -> list[int]:
    return [int(g) for g in np.unique(sampling.group)]


def _group(
    table: LevelTable, sampling: Sampling, group: int, stratum: Integers, vectors: Integers
) -> _Group:
    mine = np.flatnonzero(sampling.group == group)
    unit = sampling.unit[mine]
    order = np.argsort(unit, kind="stable")
    mine, unit = mine[order], unit[order]
    energy, raw = table.energy[mine], sampling.raw_weight[mine]
    lowest = float(energy.min())
    sampled = unit >= 0
    moments = sampling.moments[group]
    x = (energy - sampling.center) / sampling.scale
    basis = chebyshev_values(x, len(moments) - 1)
    r, b = orthonormal(basis, raw, sampled, moments)
    n = min(int(sampling.orders[group]) + 1, len(b)) if np.any(sampled) else 0
    r, b = r[:n, :n], b[:n]
    inside = basis[sampled][:, :n] @ np.linalg.inv(r) if n else np.empty((int(sampled.sum()), 0))
    columns = np.hstack([np.ones((len(inside), 1)), inside])
    units, start = np.unique(unit[sampled], return_index=True)
    its_stratum = stratum[units]
    its_vectors = vectors[its_stratum]
    replicate, linear = _calibrated_again(
        columns[:, 1:], raw[sampled], start, b, its_stratum, its_vectors
    )
    twice = int(table.twice_m[mine[0]]) if table.resolved == "magnetic_number" else 0
    return _Group(
        units=units,
        stratum=its_stratum,
        vectors=its_vectors,
        lowest=lowest,
        excess=energy[sampled] - lowest,
        raw=raw[sampled],
        columns=columns,
        start=start,
        exact_excess=energy[~sampled] - lowest,
        exact_weight=raw[~sampled],
        factor=np.append(1.0, b),
        replicate=replicate,
        linear=linear,
        m=np.array([-twice / 2, twice / 2]) if twice else np.zeros(1),
    )


def _calibrated_again(
    p: Array, raw: Array, start: Integers, b: Array, stratum: Integers, vectors: Integers
) -> tuple[Array, NDArray[np.bool_]]:
    """Coefficients of 1 + q of each unit's replicate, (u, n+1), and which are linearised.

    The replicate's Gram matrix and missing traces follow from sums over units, as P (L, n) is
    orthonormal under the full table. Where it is singular, or would make a weight negative, the
    first order of the change takes its place: calibrating it anew at a lower degree would jump.
    """
    n, u = len(b), len(start)
    if not u:
        return np.empty((0, n + 1)), np.empty(0, dtype=bool)
    weighted = raw[:, None] * p
    first = np.add.reduceat(weighted, start, axis=0)
    square = np.empty((u, n, n))
    ends = np.append(start[1:], len(raw))
    for k, (begin, end) in enumerate(zip(start, ends, strict=True)):
        square[k] = weighted[begin:end].T @ p[begin:end]
    gram = _without(square, stratum, vectors)
    trace = _without(first, stratum, vectors)
    step = -trace - gram @ b  # what b lacks in the first order
    linear = np.zeros(u, dtype=bool)
    found = np.tile(b, (u, 1))
    if n:
        full = np.eye(n) + gram
        linear = np.linalg.eigvalsh(full)[:, 0] < _SOUND
        full[linear] = np.eye(n)
        found += np.linalg.solve(full, step[..., None])[..., 0]
        rows = max(1, _CHUNK // len(raw))
        for begin in range(0, u, rows):
            part = slice(begin, begin + rows)
            linear[part] |= (1 + found[part] @ p[raw > 0].T < 0).any(axis=1)
        found[linear] = b + step[linear]
    return np.hstack([np.ones((u, 1)), found]), linear


def _without(sums: Array, stratum: Integers, vectors: Integers) -> Array:
    """Change of a total when each unit (first axis) in turn is left out and the others of its
    stratum, ``vectors`` in all, stand for it: Σ_s/(R−1) − R/(R−1)·(its own)."""
    local, place = np.unique(stratum, return_inverse=True)
    total = np.zeros((len(local), *sums.shape[1:]))
    np.add.at(total, place, sums)
    r = vectors.astype(np.float64).reshape(-1, *(1,) * (sums.ndim - 1))
    return np.asarray((total[place] - r * sums) / (r - 1))


@dataclass(frozen=True, eq=False)
class _Deleted:
    """How replicates fall into strata: ``order`` sorts them, ``first`` (S,) where each begins,
    ``vectors`` (S,) how many it has."""

    order: Integers
    first: Integers
    vectors: Integers

    def errors(self, change: Array) -> Array:
        """Standard errors (nT,) of the changes (U, nT) of a curve."""
        from scipy.special import stdtrit

        r = self.vectors[:, None].astype(np.float64)
        change = change[self.order]
        mean = np.add.reduceat(change, self.first, axis=0) / r
        owner = np.repeat(np.arange(len(self.first)), self.vectors)
        deviation = change - mean[owner]
        share = (r - 1) / r * np.add.reduceat(deviation**2, self.first, axis=0)
        variance = share.sum(axis=0)
        # Shares relative to the largest, as their squares may underflow.
        relative = share / np.where(share.max(axis=0) > 0, share.max(axis=0), 1.0)
        squares = (relative**2 / r).sum(axis=0)
        with np.errstate(invalid="ignore"):
            freedom = relative.sum(axis=0) ** 2 / np.where(squares > 0, squares, np.nan) - 1
            wide = stdtrit(freedom, _ONE_SIGMA)
        return np.asarray(np.where(variance == 0, 0.0, np.sqrt(variance) * wide))


def _errors(groups: list[_Group], deleted: _Deleted, t: Array, field: Array) -> Array:
    """Errors of the six curves, (6, nT, nB)."""
    sums = [_sums(group, t) for group in groups]
    units = sum(len(g.units) for g in groups)
    found = np.empty((6, len(t), len(field)))
    for b, h in enumerate(field):
        z, energy, square, first, second = (np.zeros((units, len(t))) for _ in range(5))
        total, states = _totals(groups, sums, t, float(h))
        at = 0
        for group, (_, change), (a0, a1, a2, b1, b2) in zip(groups, sums, states, strict=True):
            rows = slice(at, at + len(group.units))
            at += len(group.units)
            s0, s1, s2 = change
            z[rows] = a0 * s0
            energy[rows] = a0 * s1 + a1 * s0
            square[rows] = a0 * s2 + 2 * a1 * s1 + a2 * s0
            first[rows] = b1 * s0
            second[rows] = b2 * s0
        spread, m_spread = total[1], total[2]
        relative = z / total[0]
        relative[relative <= -1] = np.nan
        with np.errstate(invalid="ignore"):
            whole = 1 + relative
            log_z = np.log1p(relative)
            u = energy / total[0] / whole
            heat = (square / total[0] - spread * relative) / whole - u**2
            m = first / total[0] / whole
            variance = (second / total[0] - m_spread * relative) / whole - m**2
            changes = (u, t * log_z, log_z + u / t, heat / t**2, m, variance)
            for k, change in enumerate(changes):
                found[k, :, b] = deleted.errors(change)
    return found


def _sums(group: _Group, t: Array) -> tuple[Array, Array]:
    """Σ w e^{−ε/T} ε^m of the group, (3, nT), and their changes in each replicate, (3, u, nT)."""
    powers = group.exact_excess[:, None] ** np.arange(3) * group.exact_weight[:, None]
    full = (_boltzmann(group.exact_excess, t) @ powers).T
    n, u = group.columns.shape[1], len(group.units)
    if not u:
        return full, np.empty((3, 0, len(t)))
    columns = group.raw[:, None] * group.columns
    columns = np.hstack([columns * (group.excess**m)[:, None] for m in range(3)])
    unit = np.empty((u, len(t), 3 * n))
    for k, part in enumerate(_slices(group.start, len(group.raw))):
        unit[k] = _boltzmann(group.excess[part], t) @ columns[part]
    del columns
    whole = unit.sum(axis=0).reshape(len(t), 3, n)
    full = full + (whole @ group.factor).T
    lost = _without(unit, group.stratum, group.vectors).reshape(u, len(t), 3, n)
    use = np.where(group.linear[:, None], group.factor, group.replicate)
    change = np.einsum("utmk,uk->mut", lost, use, optimize=True)
    change += np.einsum("tmk,uk->mut", whole, group.replicate - group.factor, optimize=True)
    return full, change


def _slices(start: Integers, total: int) -> Iterator[slice]:
    for begin, end in zip(start, np.append(start[1:], total), strict=True):
        yield slice(int(begin), int(end))


def _boltzmann(excess: Array, t: Array) -> Array:
    return np.asarray(np.exp(np.maximum(-excess / t[:, None], -800.0)))


def _totals(
    groups: list[_Group], sums: list[tuple[Array, Array]], t: Array, h: float
) -> tuple[tuple[Array, Array, Array], list[tuple[Array, ...]]]:
    """Z, variance of E and of M in a field, (nT,) each, and what the group's sums are multiplied
    by in the sums of states, energies from their mean and their squares, M from its mean and its
    squares: five (nT,) for each group."""
    base = min(group.lowest - abs(h) * float(np.abs(group.m).max()) for group in groups)
    weights, offsets = [], []
    z, energy, moment = (np.zeros(len(t)) for _ in range(3))
    for group, (full, _) in zip(groups, sums, strict=True):
        offset = group.lowest - base - h * group.m
        q = _boltzmann(offset, t) / len(group.m)
        weights.append(q)
        offsets.append(offset)
        z += q.sum(axis=1) * full[0]
        energy += q.sum(axis=1) * full[1] + (q @ offset) * full[0]
        moment += (q @ group.m) * full[0]
    # Without a field ⟨M⟩ vanishes in every replicate, and rounding must not say otherwise.
    mean, m = energy / z, moment / z if h else np.zeros(len(t))
    spread, m_spread = np.zeros(len(t)), np.zeros(len(t))
    states: list[tuple[Array, ...]] = []
    for group, (full, _), q, offset in zip(groups, sums, weights, offsets, strict=True):
        o, d = offset - mean[:, None], group.m - m[:, None]
        a0, a1, a2 = q.sum(axis=1), (q * o).sum(axis=1), (q * o**2).sum(axis=1)
        b1 = (q * d).sum(axis=1) if h else np.zeros(len(t))
        b2 = (q * d**2).sum(axis=1)
        spread += a0 * full[2] + 2 * a1 * full[1] + a2 * full[0]
        m_spread += b2 * full[0]
        states.append((a0, a1, a2, b1, b2))
    return (z, np.asarray(spread / z), np.asarray(m_spread / z)), states
