"""Canonical sums at single points, with their exact derivatives by couplings and field.

For a parameter x of H, E′ = ⟨n|∂H/∂x|n⟩ of each level and δ the deviation from a mean,
    ∂⟨E⟩/∂x = ⟨E′⟩ − β⟨δE δE′⟩,          ∂S/∂x = −β²⟨δE δE′⟩,
    ∂C/∂x = β²(2⟨δE δE′⟩ − β⟨δE² δE′⟩),  ∂⟨M⟩/∂x = −β⟨δM δE′⟩,  ∂⟨δM²⟩/∂x = −β⟨δM² δE′⟩,
and likewise for a field along M, whose E′ is −M. All follow from d Tr f(H)/dx = Tr f′(H) ∂H/∂x,
which holds through crossings and for degenerate levels, whatever basis they were found in.

As in canonical.py the levels of one magnetic number are summed once for each temperature; a
point's field then only combines the groups' few states.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, fields

import numpy as np
from numpy.typing import NDArray

from thermo.ensemble.canonical import _CHUNK, _group
from thermo.model.level_table import LevelTable

Array = NDArray[np.float64]


@dataclass(frozen=True, eq=False)
class PointValues:
    """One cluster at n points: internal energy, entropy, C/k_B, ⟨M⟩, ⟨δM²⟩ and ⟨δM δE⟩.

    Each of shape (n,), or (k, n) for derivatives by k slopes; k_B = 1, energies in the table's
    unit, E with the Zeeman energy in it.
    """

    energy: Array
    entropy: Array
    heat: Array
    moment: Array
    variance: Array
    mixed: Array


@dataclass(frozen=True, eq=False)
class PointSlopes:
    """Values (n,) with derivatives ``by_slope`` (k, n) and ``by_field`` (n,), the latter by the
    Zeeman energy per unit of M."""

    value: PointValues
    by_slope: PointValues
    by_field: PointValues


@dataclass(frozen=True, eq=False)
class _States:
    """States (J,) that the groups' levels stand for: their group, M, how many are alike, the mean
    of their M², and the pairs with M > 0 and −M."""

    owner: NDArray[np.int64]
    m: Array
    count: NDArray[np.int64] | Array
    square: Array
    positive: NDArray[np.int64]
    negative: NDArray[np.int64]


class PointSums:
    """Sums over the levels at given temperatures, ready to be asked at any fields.

    ``temperature`` (n,) > 0 of the points, in the table's energy unit; ``slopes`` (k, L) are
    ∂E/∂x of the table's levels for k parameters (None: none). Cost: one exponential and 3 + 3k
    multiplications for each level and different temperature.
    """

    def __init__(self, table: LevelTable, temperature: Array, slopes: Array | None = None) -> None:
        groups = _group(table)
        self._groups = groups
        self._temperature = temperature
        given = np.empty((0, len(table.energy))) if slopes is None else slopes
        s = np.asarray(given, dtype=np.float64)[:, groups.order]
        self._k = len(s)
        # Slopes count from their group's lowest level, and those from the ground group's.
        first = s[:, groups.start]
        self._reference = first[:, int(np.argmin(groups.lowest))]
        self._first = first - self._reference[:, None]
        s = s - first[:, groups.owner_of_level]
        a = groups.excess
        self._columns = np.vstack([np.ones_like(a), a > 0, a, a * a, s, a * s, a * a * s]).T
        different, self._row = np.unique(temperature, return_inverse=True)
        sums, k = self._group_sums(different), self._k
        # Of each group at each temperature, (nT, K): Z, Z without the lowest level, mean and
        # variance of the excess; (k, nT, K): mean slope, its covariance with the excess, and
        # ⟨δa² δs⟩.
        self._z, self._excited = sums[..., 0], sums[..., 1]
        moments = np.moveaxis(sums[..., 2:] / sums[..., :1], -1, 0)
        self._mean = np.ascontiguousarray(moments[0])
        self._variance = np.maximum(moments[1] - self._mean**2, 0.0)
        self._slope, a_s, aa_s = (moments[2 + i * k : 2 + (i + 1) * k] for i in range(3))
        self._cross = a_s - self._mean * self._slope
        self._third = aa_s - self._slope * moments[1] - 2 * self._mean * self._cross
        count = np.bincount(groups.owner)
        square = np.bincount(groups.owner, groups.m**2) / count
        none = np.empty(0, dtype=np.int64)
        # In no field a group's states are alike: one of them then stands for all.
        self._alike = _States(
            np.arange(len(count)), np.zeros(len(count)), count, square, none, none
        )
        self._apart = _States(
            groups.owner, groups.m, np.ones(len(groups.m)), groups.m**2,
            *_pairs(groups.m, groups.owner),
        )  # fmt: skip

    def _group_sums(self, temperature: Array) -> Array:
        """Σ w e^{−a/T} × columns for every group, (nT, K, columns)."""
        groups, columns = self._groups, self._columns
        ends = np.append(groups.start[1:], len(groups.excess))
        found = np.empty((len(temperature), len(ends), columns.shape[1]))
        step = max(1, _CHUNK // len(groups.excess))
        for first in range(0, len(temperature), step):
            part = slice(first, first + step)
            exponent = np.maximum(-groups.excess / temperature[part, None], -800.0)
            p = groups.weight * np.exp(exponent)
            for g, (start, end) in enumerate(zip(groups.start, ends, strict=True)):
                found[part, g] = p[:, start:end] @ columns[start:end]
        return found

    def at(self, field: Array) -> PointSlopes:
        """The cluster at Zeeman energies ``field`` (n,) per unit of M, one for each point."""
        h = np.asarray(field, dtype=np.float64)
        step = max(1, _CHUNK // (len(self._groups.m) * (5 + 3 * self._k)))
        parts = [slice(first, first + step) for first in range(0, max(len(h), 1), step)]
        found = [self._at(h[part], part) for part in parts]
        return found[0] if len(found) == 1 else _joined(found)

    def _at(self, h: Array, part: slice) -> PointSlopes:
        groups, row = self._groups, self._row[part]
        states = self._apart if np.any(h) else self._alike
        owner = states.owner
        t = self._temperature[part]
        beta = 1 / t
        # (n, J) for each state j of each group, or (k, n, J).
        z, excited = self._z[row][:, owner], self._excited[row][:, owner]
        mean, variance = self._mean[row][:, owner], self._variance[row][:, owner]
        cross, third, s = (a[:, row][:, :, owner] for a in (self._cross, self._third, self._slope))

        floor = groups.lowest[owner]
        lowest = floor - h[:, None] * states.m
        base = lowest.min(axis=1)
        lowest = lowest - base[:, None]
        at_ground = lowest <= groups.tolerance
        lowest[at_ground] = 0.0
        boltzmann = states.count * np.exp(np.maximum(-lowest * beta[:, None], -800.0))
        q = z * boltzmann
        p = q / q.sum(axis=1)[:, None]
        relative = lowest + mean
        u = np.einsum("nj,nj->n", p, relative)
        x = relative - u[:, None]
        # ln Z = ln(ground weight) + ln(1 + the rest): the rest may be far below rounding.
        ground_weight = (groups.lowest_weight[owner] * states.count * at_ground).sum(axis=1)
        rest = np.where(at_ground, excited * boltzmann, q).sum(axis=1)
        log_z = np.log(ground_weight) + np.log1p(rest / ground_weight)

        # p(M) − p(−M) from their ratio e^{−2|h|M/T}, exact for the smallest field.
        size = states.m[states.positive]
        favoured = np.where((h >= 0)[:, None], p[:, states.positive], p[:, states.negative])
        bias = -np.expm1(-2 * np.abs(h * beta)[:, None] * size)
        odd = np.sign(h)[:, None] * favoured * bias * size
        m = odd.sum(axis=1)
        mu = states.m - m[:, None]
        p_mu = p * mu
        p_mu2 = p_mu * mu if len(states.positive) else p * states.square
        var_m = p_mu2.sum(axis=1)
        # Without the field's part, so that M's odd sums see what both signs share.
        shared = floor + mean
        shared = shared[:, states.positive] - np.einsum("nj,nj->n", p, shared)[:, None]
        mixed = np.einsum("nj,nj->n", odd, shared) - h * var_m
        spread = variance + x**2
        value = PointValues(
            energy=groups.ground + base + u,
            entropy=log_z + u * beta,
            heat=np.einsum("nj,nj->n", p, spread) * beta**2,
            moment=m,
            variance=var_m,
            mixed=mixed,
        )

        y = self._first[:, None, owner] + s
        average = np.einsum("nj,knj->kn", p, y)
        y = y - average[..., None]
        c_y = cross + x * y
        covariance = np.einsum("nj,knj->kn", p, c_y)
        cubic = np.einsum("nj,knj->kn", p, third + 2 * x * cross + spread * y)
        with_m = np.einsum("nj,knj->kn", odd, y[:, :, states.positive])
        by_slope = PointValues(
            energy=self._reference[:, None] + average - beta * covariance,
            entropy=-(beta**2) * covariance,
            heat=beta**2 * (2 * covariance - beta * cubic),
            moment=-beta * with_m,
            variance=-beta * np.einsum("nj,knj->kn", p_mu2, y),
            mixed=with_m - beta * np.einsum("nj,knj->kn", p_mu, c_y),
        )
        by_field = PointValues(
            energy=-m + beta * mixed,
            entropy=beta**2 * mixed,
            heat=beta**2 * (-2 * mixed + beta * np.einsum("nj,nj->n", p_mu, spread)),
            moment=beta * var_m,
            variance=beta * np.einsum("nj,nj->n", p_mu2, mu),
            mixed=-var_m + beta * np.einsum("nj,nj->n", p_mu2, x),
        )
        return PointSlopes(value, by_slope, by_field)


def _joined(parts: Sequence[PointSlopes]) -> PointSlopes:
    """The same, of all points one after the other."""

    def join(values: Sequence[PointValues]) -> PointValues:
        names = [f.name for f in fields(PointValues)]
        return PointValues(
            **{n: np.concatenate([getattr(v, n) for v in values], axis=-1) for n in names}
        )

    return PointSlopes(
        join([p.value for p in parts]),
        join([p.by_slope for p in parts]),
        join([p.by_field for p in parts]),
    )


def _pairs(m: Array, owner: NDArray[np.int64]) -> tuple[NDArray[np.int64], NDArray[np.int64]]:
    """The states with M > 0, and of each the one of the same group with −M."""
    opposite = {(int(k), float(x)): j for j, (k, x) in enumerate(zip(owner, m, strict=True))}
    positive = np.flatnonzero(m > 0)
    negative = [opposite[int(owner[j]), -float(m[j])] for j in positive]
    return positive, np.array(negative, dtype=np.int64)
