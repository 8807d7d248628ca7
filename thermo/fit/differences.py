"""Slopes by differences, for solvers that give levels only (sampled spectra, say).

Of the slopes along k directions of the couplings, that along the couplings themselves needs no
solve (Euler's theorem: it is a change of scale), so k − 1 take two each. A sampled solver must use
the same random vectors at every call, or the differences see its noise.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import fields

import numpy as np
from numpy.typing import NDArray

from thermo.ensemble.slopes import PointSlopes, PointSums, PointValues
from thermo.fit.spectra import SpectrumCache

Vector = NDArray[np.float64]

# Relative step of the couplings: two-sided, errors of the square.
STEP = 1e-4


class DifferenceSums:
    """What PointSums is, with slopes along ``tangents`` (P, k) taken by differences."""

    def __init__(
        self, cache: SpectrumCache, couplings: Vector, tangents: Vector, temperature: Vector
    ) -> None:
        size = float(np.abs(couplings).max(initial=0.0))
        found, scale = cache.spectrum(couplings)
        table = found.scaled(scale)
        # The slope of every level along the couplings is its energy.
        self._here = PointSums(table, temperature, table.energy[None])
        self._saved, self._weight = saved_direction(couplings, tangents)
        self._steps: list[tuple[int, float, PointSums, PointSums]] = []
        self._k = tangents.shape[1]
        for k in range(self._k):
            if k == self._saved or not np.any(tangents[:, k]):
                continue
            length = STEP * (size or 1.0) / float(np.abs(tangents[:, k]).max())
            ends = []
            for sign in (1, -1):
                there, scale = cache.spectrum(couplings + sign * length * tangents[:, k])
                ends.append(PointSums(there.scaled(scale), temperature))
            self._steps.append((k, length, ends[0], ends[1]))

    def at(self, field: Vector) -> PointSlopes:
        """As PointSums.at."""
        here = self._here.at(field)
        pairs = [(k, 2 * d, up.at(field), down.at(field)) for k, d, up, down in self._steps]
        found = {}
        for name in (f.name for f in fields(PointValues)):
            slope = np.zeros((self._k, len(field)))
            for k, width, up, down in pairs:
                slope[k] = (getattr(up.value, name) - getattr(down.value, name)) / width
            if self._saved is not None:
                others = self._weight @ slope
                along = getattr(here.by_slope, name)[0]
                slope[self._saved] = (along - others) / self._weight[self._saved]
            found[name] = slope
        return PointSlopes(here.value, PointValues(**found), here.by_field)


def saved_direction(c: Vector, tangents: Vector) -> tuple[int | None, Vector]:
    """Which slope the scale gives for free: if c = Σ a_k tangent_k, that with the largest share.

    Returns its index (None where c is not in the span) and the a_k, shape (k,).
    """
    weight = np.zeros(tangents.shape[1])
    size = float(np.linalg.norm(c))
    length = np.linalg.norm(tangents, axis=0)
    moving: Sequence[int] = np.flatnonzero(length).tolist()
    if size == 0 or not moving:
        return None, weight
    D = tangents[:, moving] / length[moving]
    a = np.linalg.lstsq(D, c, rcond=1e-10)[0]
    if np.linalg.norm(D @ a - c) > 1e-12 * size:
        return None, weight
    weight[moving] = a / length[moving]
    return moving[int(np.argmax(np.abs(a)))], weight
