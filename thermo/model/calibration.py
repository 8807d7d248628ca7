"""Calibration: weights of sampled levels that give every known trace of H exactly.

A random vector estimates Tr f(H) with noise, while Tr Hᵏ is known for small k. The weights of the
sampled levels of one |M| are multiplied by 1 + q(x), x = (E − c)/w, q the polynomial of lowest
degree with which exact and sampled levels together give all known traces: the regression
estimator of survey statistics (Deville and Särndal, J. Am. Stat. Assoc. 87, 376 (1992)). The
table of levels stays a table of levels, and its curves carry the cluster's high-temperature
series through the order of the traces.
"""

from __future__ import annotations

import functools
from dataclasses import dataclass, replace
from typing import TYPE_CHECKING

import numpy as np
from numpy.polynomial import chebyshev
from numpy.typing import NDArray

from thermo.errors import FileFormatError, SpectrumError

if TYPE_CHECKING:
    import xarray as xr

    from thermo.model.level_table import LevelTable

# A sampled level that stands for fewer states is a spurious copy of another or rounding; counted,
# it would only stand in the way of positive weights.
NEGLIGIBLE = 1e-9
# A polynomial this small at all sampled levels, relative to T_k, adds nothing new: there are no
# more levels than lower degrees can fit.
_DEPENDENT = 1e-9

Array = NDArray[np.float64]
Integers = NDArray[np.int64]


@dataclass(frozen=True, eq=False)
class Sampling:
    """Where the levels of a sampled table come from, and what their weights must reproduce.

    Of L levels: ``unit`` (L,) is the index of the random vector of one sector that a level came
    from, −1 for an exact one; ``group`` (L,) the index of its |M|; ``raw_weight`` (L,) the number
    of states it stands for before calibration (the weight itself for an exact level).
    ``unit_sector`` (U,) gives each unit's sector. ``moments`` (G, K+1) are the exact traces of
    xᵏ, k = 0 … K, over all states of a group (exact levels and both signs of M in them),
    x = (E − center)/scale in the table's energy unit. ``orders`` (G,) is the highest order of
    trace that the group's weights reproduce.
    """

    unit: Integers
    group: Integers
    raw_weight: Array
    unit_sector: Integers
    moments: Array
    center: float
    scale: float
    orders: Integers

    def scaled(self, factor: float) -> Sampling:
        """The same for the levels of factor·H, factor > 0."""
        return replace(self, center=self.center * factor, scale=self.scale * factor)

    def upside_down(self) -> Sampling:
        """The same for the levels of −H in reverse order."""
        signs = (-1.0) ** np.arange(self.moments.shape[1])
        return replace(
            self,
            unit=self.unit[::-1],
            group=self.group[::-1],
            raw_weight=self.raw_weight[::-1],
            moments=self.moments * signs,
            center=-self.center,
        )


def calibrate(
    energy: Array,
    raw_weight: Array,
    is_sampled: NDArray[np.bool_],
    moments: Array,
    center: float,
    scale: float,
) -> tuple[Array, int]:
    """Calibrated weights of one group's levels, and the degree of the polynomial.

    ``energy``, ``raw_weight`` ≥ 0 and ``is_sampled`` have shape (L,); ``moments`` (K+1,) are the
    exact traces of xᵏ over the group, x = (energy − center)/scale, which should lie in [−1, 1].
    Only sampled weights change. Where a factor 1 + q would be negative at a level of positive
    weight, or the levels are too few, the degree is the next lower one that serves: the traces
    up to the returned degree then hold. −1: not even the number of states can be met (nothing is
    changed). A group without sampled levels of any weight returns K. Cost: O(L K²).
    """
    weight = np.array(raw_weight, dtype=np.float64)
    highest = len(moments) - 1
    if not np.any(weight[is_sampled] > 0):
        return weight, highest
    basis = chebyshev_values((energy - center) / scale, highest)
    sampled = basis[is_sampled]
    positive = weight[is_sampled] > 0
    r, coefficients = orthonormal(basis, weight, is_sampled, moments)
    best: Array = np.ones(len(sampled))
    degree = -1
    for k in range(len(r)):
        # Evaluated from x, as P itself is inaccurate where a weight is tiny.
        q = sampled[:, : k + 1] @ np.linalg.solve(r[: k + 1, : k + 1], coefficients[: k + 1])
        if not np.any(1 + q[positive] < 0):
            best, degree = np.asarray(1 + q, dtype=np.float64), k
    weight[is_sampled] *= best
    return weight, degree


def orthonormal(
    basis: Array, raw_weight: Array, is_sampled: NDArray[np.bool_], moments: Array
) -> tuple[Array, Array]:
    """Polynomials orthonormal under a group's sampled weights, and the q that calibrates them.

    Returns r (n, n), upper triangular, and b (n,), n ≤ K+1 (fewer where the levels are too few):
    with ``basis`` (L, K+1) = T_k(x), the columns of P = basis·r⁻¹ are orthonormal under the
    sampled levels' raw weights and q = P·b. Each b_k follows from the traces up to k alone, so a
    lower degree is a shorter sum.
    """
    missing = chebyshev_moments(moments) - raw_weight @ basis
    r = _triangle(np.sqrt(raw_weight[is_sampled])[:, None] * basis[is_sampled])
    return r, np.asarray(np.linalg.solve(r.T, missing[: len(r)]), dtype=np.float64)


def _triangle(rows: Array) -> Array:
    """R of the QR of the leading columns that are linearly independent, (n, n)."""
    norm = np.linalg.norm(rows, axis=0)
    r: Array = np.asarray(np.linalg.qr(rows, mode="r"))
    diagonal = np.abs(np.diag(r))
    weak = np.flatnonzero(~(diagonal > _DEPENDENT * norm[: len(diagonal)]))
    n = int(weak[0]) if len(weak) else len(diagonal)
    return r[:n, :n]


def chebyshev_values(x: Array, highest: int) -> Array:
    """T_k(x) for k = 0 … highest, (L, highest + 1)."""
    return np.asarray(chebyshev.chebvander(x, highest), dtype=np.float64)


def chebyshev_moments(moments: Array) -> Array:
    """Traces of T_k(x) from those of xᵏ, along the last axis."""
    return np.asarray(moments @ _coefficients(moments.shape[-1]).T)


@functools.cache
def _coefficients(n: int) -> Array:
    """Row k: T_k in powers of x, from T_k = 2x T_{k−1} − T_{k−2}."""
    table = np.zeros((n, n))
    for k in range(n):
        if k < 2:
            table[k, k] = 1
        else:
            table[k, 1:] = 2 * table[k - 1, :-1]
            table[k] -= table[k - 2]
    return table


def calibrated_table(table: LevelTable, sampling: Sampling) -> LevelTable:
    """The table with calibrated weights and ``sampling``, its ``orders`` filled in.

    ``table`` gives energies and labels; its weights are not looked at, nor ``sampling.orders``.
    Sampled levels of fewer than 10⁻⁹ states get weight 0.
    Raises SpectrumError where a group cannot even be given its number of states.
    """
    sampled = sampling.unit >= 0
    raw = np.where(sampled & (sampling.raw_weight < NEGLIGIBLE), 0.0, sampling.raw_weight)
    weight = raw.copy()
    orders = np.zeros(len(sampling.moments), dtype=np.int64)
    for g, moments in enumerate(sampling.moments):
        mine = np.flatnonzero(sampling.group == g)
        weight[mine], orders[g] = calibrate(
            table.energy[mine],
            raw[mine],
            sampled[mine],
            moments,
            sampling.center,
            sampling.scale,
        )
        if orders[g] < 0:
            raise SpectrumError(
                f"the sampled levels of group {g} cannot be given {moments[0]:g} states in all; "
                "they are not a result, solve the model again"
            )
    sampling = replace(sampling, raw_weight=raw, orders=orders)
    return replace(table, weight=weight, sampling=sampling)


def trace_misfit(table: LevelTable, sampling: Sampling) -> float:
    """The largest misfit of the traces of T_k(x) that the weights should reproduce, relative to
    the number of states of the group."""
    worst = 0.0
    for g, moments in enumerate(sampling.moments):
        mine = sampling.group == g
        x = (table.energy[mine] - sampling.center) / sampling.scale
        highest = int(sampling.orders[g])
        found = table.weight[mine] @ chebyshev_values(x, highest)
        misfit = np.abs(found - chebyshev_moments(moments)[: highest + 1])
        worst = max(worst, float(misfit.max()) / max(float(moments[0]), 1.0))
    return worst


def sampling_from_dataset(levels: xr.Dataset) -> Sampling | None:
    """Where the levels of a sampled dataset come from; None for a full one.

    Raises FileFormatError where the parts do not fit together.
    """
    if levels.attrs["method"] != "sampled":
        return None
    vector = levels["vector"].values.astype(np.int64)
    sector = levels["sector"].values.astype(np.int64)
    if np.any((sector < 0) | (sector >= levels.sizes["block"])):
        raise FileFormatError("a level's sector is none of the file's; solve the model again")
    group = _group_of_sector(levels)[sector]
    sampled = vector >= 0
    pairs = np.stack([sector[sampled], vector[sampled]], axis=1)
    units, place = np.unique(pairs, axis=0, return_inverse=True)
    unit = np.full(len(vector), -1, dtype=np.int64)
    unit[sampled] = place.reshape(-1)
    raw = np.asarray(levels["raw_weight"].values, dtype=np.float64)
    orders = levels["trace_order_used"].values.astype(np.int64)
    moments = np.asarray(levels["trace"].values, dtype=np.float64)
    center, scale = float(levels.attrs["trace_center"]), float(levels.attrs["trace_scale"])
    if np.any(raw < 0) or np.any(orders < 0) or np.any(orders >= moments.shape[1]) or not scale > 0:
        raise FileFormatError(
            "the weights, traces or orders of the sampled levels are out of range; "
            "solve the model again"
        )
    return Sampling(unit, group, raw, units[:, 0].copy(), moments, center, scale, orders)


def _group_of_sector(levels: xr.Dataset) -> Integers:
    number = levels["trace_magnetic_number"].values
    own = np.abs(levels["sector_magnetic_number"].values)
    if not np.any(np.isnan(own)):
        same = own[:, None] == number
        if np.all(same.sum(axis=1) == 1):
            return np.asarray(np.argmax(same, axis=1), dtype=np.int64)
    elif np.all(np.isnan(own)) and np.all(np.isnan(number)):
        # Nothing conserved tells groups apart, but sectors are listed group by group, and the
        # trace of order 0 is a group's number of states.
        states = levels["sector_dimension"].values * levels["sector_multiplicity"].values
        last = np.rint(np.cumsum(levels["trace"].values[:, 0]))
        end = np.rint(np.cumsum(states))
        if np.all(np.isin(last, end)) and last[-1] == end[-1]:
            return np.asarray(np.searchsorted(last, end), dtype=np.int64)
    raise FileFormatError(
        "the sectors of the sampled levels and their groups of traces do not fit together; "
        "solve the model again"
    )
