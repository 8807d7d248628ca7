"""From parameters to predicted points and their slopes, with as few diagonalisations as possible.

Multiplying all couplings by λ multiplies all energies by λ, so a spectrum is found once for each
*direction* of the couplings and used at T/λ; a reversed direction only turns it upside down. Of
the k slopes by k couplings, the one along the couplings themselves comes from the temperature
alone (Euler's theorem on homogeneous functions), so k − 1 take solves.

Per mole of ions, with ρ the paramagnetic fraction:
    χ = χ0 + (1−ρ) χ_spins(T; c, g) + ρ C_imp/T,    C = (1−ρ) C_spins + ρ C_imp_spins(T, B),
    M = χ0 B/μ0 + (1−ρ) M_spins + ρ M_imp,
where the impurities are free ions like the model's own, each kind with its share: at B = 0 their
Curie constant is that of the mean S(S+1), in a field they follow Brillouin functions.
Susceptibility measured at a field above zero is M/B.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, replace
from typing import Protocol

import numpy as np
from numpy.typing import NDArray

from thermo import units
from thermo.ensemble import cluster_curves
from thermo.errors import UnavailableError
from thermo.fit.measured import MAGNETIC
from thermo.fit.parameters import CHI0, FRACTION, G, Values
from thermo.model.level_table import LevelTable
from thermo.model.spin_model import SpinModel

Vector = NDArray[np.float64]

# Directions closer than this are the same: far above rounding, far below any step taken.
SAME_DIRECTION = 1e-13
# Tables kept at once, counted in levels; some 16 MiB per million and array.
MAX_LEVELS_KEPT = 8_000_000
# Five-point differences in the scale and in g cost no solve: error about step^4.
SMOOTH_STEP = 1e-3


class Solver(Protocol):
    """What finds levels for given couplings."""

    def table(self, couplings: Mapping[str, float] | None = None) -> LevelTable:
        """All levels of the cluster."""


@dataclass(frozen=True)
class _Known:
    direction: Vector
    table: LevelTable


class SpectrumCache:
    """Levels by the direction of the couplings; ``n_solves`` counts real diagonalisations."""

    def __init__(self, solver: Solver, names: Sequence[str]) -> None:
        self.solver = solver
        self.names = tuple(names)
        self.n_solves = 0
        self.resolved = ""  # what the last table found resolves, as in a LevelTable
        self._known: list[_Known] = []

    def levels(self, couplings: Vector) -> tuple[LevelTable, float]:
        """The table for the couplings' direction, and the scale λ its energies are to be
        multiplied by (largest |coupling|; 1 where all vanish)."""
        scale = float(np.abs(couplings).max(initial=0.0))
        if scale == 0:
            # Without couplings all energies vanish: any table serves, with its energies at zero.
            some = self._known[0].table if self._known else self._solve(couplings)
            return replace(some, energy=np.zeros_like(some.energy)), 1.0
        direction = couplings / scale
        for k, known in enumerate(self._known):
            if np.abs(known.direction - direction).max(initial=0.0) <= SAME_DIRECTION:
                self._known.insert(0, self._known.pop(k))
                return known.table, scale
        for known in self._known:
            if np.abs(known.direction + direction).max(initial=0.0) <= SAME_DIRECTION:
                flipped = _upside_down(known.table)
                self._keep(_Known(direction, flipped))
                return flipped, scale
        table = self._solve(direction)
        self._keep(_Known(direction, table))
        return table, scale

    def _solve(self, couplings: Vector) -> LevelTable:
        self.n_solves += 1
        table = self.solver.table(
            {name: float(c) for name, c in zip(self.names, couplings, strict=True)}
        )
        self.resolved = table.resolved
        return table

    def _keep(self, known: _Known) -> None:
        self._known.insert(0, known)
        while len(self._known) > 1 and (
            sum(len(k.table.energy) for k in self._known) > MAX_LEVELS_KEPT or len(self._known) > 64
        ):
            self._known.pop()


@dataclass(frozen=True, eq=False)
class Points:
    """Where one quantity is wanted: temperatures [K] and fields [T] of shape (n,), and ``per``."""

    quantity: str
    temperature: Vector
    field: Vector
    per: str


class Forward:
    """Predictions of a model, in SI (or as they are for a dimensionless model)."""

    def __init__(self, model: SpinModel, solver: Solver, chi0_to_si: float = 1.0) -> None:
        """``chi0_to_si`` takes the values' chi0 to SI per mole of ions."""
        self.model = model
        self.chi0_to_si = chi0_to_si
        self.cache = SpectrumCache(solver, tuple(model.couplings))
        unit = model.energy_unit
        self.kelvin = units.kelvin_per(unit)
        self.tesla = units.tesla_to_energy(unit)
        reduced = unit == "1"
        self.per_formula = model.ions_per_formula
        # SI per mole of ions from the natural per-ion values.
        self.curie = 1.0 if reduced else units.CURIE
        self.moment = 1.0 if reduced else units.MOLAR_BOHR_MAGNETON
        self.gas = 1.0 if reduced else units.R
        self.mu_0 = 1.0 if reduced else units.MU_0_EMU
        spins, count = np.unique(model.spins, return_counts=True)
        self.spin_shares = tuple(zip(spins.tolist(), (count / count.sum()).tolist(), strict=True))

    def couplings(self, values: Values) -> Vector:
        """The couplings among the values, in the model's order, shape (P,)."""
        return np.array([values.value[name] for name in self.model.couplings], dtype=np.float64)

    def predict(self, points: Points, values: Values) -> Vector:
        """The quantity at the points, shape (n,)."""
        table, scale = self.cache.levels(self.couplings(values))
        g, chi0, fraction = self._nuisance(values)
        spins, free = self._parts(points, table, scale, g)
        return self._mix(points, spins, free, chi0, fraction)

    def jacobian(
        self, sets: Sequence[Points], values: Values, step: float, central: bool
    ) -> Vector:
        """Slopes of all sets' points, one after the other, by the free parameters: (N, n_free).

        ``step`` is the relative step for the directions of the couplings that need solves, taken
        on one side, or on both (``central``) at twice the solves.
        """
        names = tuple(self.model.couplings)
        c = self.couplings(values)
        tangents = np.array([values.slope[name] for name in names], dtype=np.float64)
        n_free = tangents.shape[1] if names else len(values.slope[G])
        table, scale = self.cache.levels(c)
        g, chi0, fraction = self._nuisance(values)
        n = sum(len(p.temperature) for p in sets)
        along = np.zeros((n, n_free))
        by_scale, rest = np.zeros(n), np.zeros((n, n_free))
        base = np.zeros(n)
        for rows, points in _rows(sets):
            spins, free = self._parts(points, table, scale, g)
            base[rows] = self._mix(points, spins, free, chi0, fraction)

            def shifted(ds: float, dg: float, points: Points = points) -> Vector:
                s, f = self._parts(points, table, scale * (1 + ds), g * (1 + dg))
                return self._mix(points, s, f, 0.0, fraction)

            if np.any(tangents):
                by_scale[rows] = _five_point(shifted, 1.0, 0.0)
            for name, slope in (
                (CHI0, self.chi0_part(points)),
                (FRACTION, free - spins),
            ):
                rest[rows] += np.outer(slope, values.slope[name])
            # At g = 0 every quantity is at its least and the slope vanishes.
            if np.any(values.slope[G]) and g != 0:
                by_g = (
                    _five_point(shifted, 0.0, 1.0)
                    if np.any(points.field > 0)
                    else _zero_field_power(points) * self._mix(points, spins, free, 0.0, fraction)
                ) / g
                rest[rows] += np.outer(by_g, values.slope[G])
        self._along_couplings(sets, values, c, tangents, by_scale, base, step, central, along)
        return along + rest

    def _along_couplings(
        self,
        sets: Sequence[Points],
        values: Values,
        c: Vector,
        tangents: Vector,
        by_scale: Vector,
        base: Vector,
        step: float,
        central: bool,
        out: Vector,
    ) -> None:
        """Fill ``out`` (N, n_free) with the slopes through the couplings."""
        size = float(np.abs(c).max(initial=0.0))
        moving = [k for k in range(tangents.shape[1]) if np.any(tangents[:, k])]
        if not moving:
            return
        saved, weight = _saved(c, tangents, moving)
        for k in moving:
            if k == saved:
                continue
            d = tangents[:, k]
            length = step * (size or 1.0) / float(np.abs(d).max())
            ahead = self._all(sets, values, c + length * d)
            if central:
                out[:, k] = (ahead - self._all(sets, values, c - length * d)) / (2 * length)
            else:
                out[:, k] = (ahead - base) / length
        if saved is not None:
            others = sum((weight[k] * out[:, k] for k in moving if k != saved), np.zeros(len(base)))
            out[:, saved] = (by_scale - others) / weight[saved]

    def _all(self, sets: Sequence[Points], values: Values, c: Vector) -> Vector:
        table, scale = self.cache.levels(c)
        g, chi0, fraction = self._nuisance(values)
        parts = []
        for points in sets:
            spins, free = self._parts(points, table, scale, g)
            parts.append(self._mix(points, spins, free, chi0, fraction))
        return np.concatenate(parts)

    def _nuisance(self, values: Values) -> tuple[float, float, float]:
        g = values.value[G]
        # Without a common g only zero-field specific heat is fitted, where g plays no part.
        return (g if np.isfinite(g) else 0.0, values.value[CHI0], values.value[FRACTION])

    def _mix(
        self, points: Points, spins: Vector, free: Vector, chi0: float, fraction: float
    ) -> Vector:
        return (1 - fraction) * spins + fraction * free + chi0 * self.chi0_part(points)

    def chi0_part(self, points: Points) -> Vector:
        """The quantity that chi0 = 1, in the unit of the parameter, makes."""
        per = self._per(points) * self.chi0_to_si
        if points.quantity == "susceptibility":
            return np.full(len(points.temperature), per)
        if points.quantity == "chi_T":
            return per * points.temperature
        if points.quantity == "magnetization":
            return per * points.field / self.mu_0
        return np.zeros(len(points.temperature))

    def _per(self, points: Points) -> float:
        return self.per_formula if points.per == "formula" else 1.0

    def _parts(
        self, points: Points, table: LevelTable, scale: float, g: float
    ) -> tuple[Vector, Vector]:
        """The quantity if all ions were in clusters, and if all were free; each (n,)."""
        check_available(points, table.resolved)
        temperature = points.temperature / self.kelvin
        zeeman = g * self.tesla * points.field
        cluster = _cluster_moments(table, temperature / scale, zeeman / scale)
        ions = _free_moments(self.spin_shares, temperature, zeeman)
        return (
            self._natural_to_si(points, cluster, g),
            self._natural_to_si(points, ions, g),
        )

    def _natural_to_si(self, points: Points, natural: Sequence[Vector], g: float) -> Vector:
        """From (C/k_B, ⟨M⟩, variance of M) per ion to the quantity per mole."""
        heat, moment, variance = natural
        T, B, per = points.temperature, points.field, self._per(points)
        if points.quantity == "specific_heat":
            return per * self.gas * heat
        if points.quantity == "specific_heat_over_T":
            return per * self.gas * heat / T
        if points.quantity == "magnetization":
            return per * self.moment * g * moment
        in_field = B > 0
        safe = np.where(in_field, B, 1.0)
        chi = np.where(
            in_field,
            self.mu_0 * self.moment * g * moment / safe,
            self.curie * g**2 * variance / T,
        )
        return per * (chi * T if points.quantity == "chi_T" else chi)


def check_available(points: Points, resolved: str) -> None:
    """Refuse what levels without magnetic numbers cannot give (``resolved`` of a LevelTable)."""
    if resolved in ("total_spin", "magnetic_number"):
        return
    in_field = bool(np.any(points.field > 0))
    if points.quantity in MAGNETIC or in_field:
        where = " in a field" if in_field and points.quantity not in MAGNETIC else ""
        raise UnavailableError(
            f"{points.quantity}{where} needs a magnetic moment that is conserved along the field, "
            "and this model does not conserve M; fit zero-field specific heat only"
        )


def _upside_down(table: LevelTable) -> LevelTable:
    """The levels of −H, in ascending order if they were."""
    return replace(
        table,
        energy=-table.energy[::-1],
        weight=table.weight[::-1],
        twice_spin=table.twice_spin[::-1],
        twice_m=table.twice_m[::-1],
    )


def _rows(sets: Sequence[Points]) -> list[tuple[slice, Points]]:
    ends = np.cumsum([len(p.temperature) for p in sets])
    return [
        (slice(int(end) - len(p.temperature), int(end)), p)
        for end, p in zip(ends, sets, strict=True)
    ]


def _saved(c: Vector, tangents: Vector, moving: Sequence[int]) -> tuple[int | None, Vector]:
    """Which slope the scale gives for free: if c = Σ a_k tangent_k, that with the largest share.

    Returns its index (None where c is not in the span) and the a_k, shape (n_free,).
    """
    weight = np.zeros(tangents.shape[1])
    size = float(np.linalg.norm(c))
    if size == 0:
        return None, weight
    D = tangents[:, moving]
    length = np.linalg.norm(D, axis=0)
    a = np.linalg.lstsq(D / length, c, rcond=1e-10)[0]
    if np.linalg.norm((D / length) @ a - c) > 1e-12 * size:
        return None, weight
    weight[list(moving)] = a / length
    return moving[int(np.argmax(np.abs(a)))], weight


def _zero_field_power(points: Points) -> int:
    """The power of g in the spins' part at B = 0 (a moment at B = 0 vanishes)."""
    return 2 if points.quantity in MAGNETIC else 0


def _five_point(shifted: Callable[[float, float], Vector], s: float, g: float) -> Vector:
    """d/dx of shifted(s·x, g·x) at x = 0 for a smooth function, error about SMOOTH_STEP**4."""
    h = SMOOTH_STEP
    near = shifted(s * h, g * h) - shifted(-s * h, -g * h)
    far = shifted(2 * s * h, 2 * g * h) - shifted(-2 * s * h, -2 * g * h)
    return (8 * near - far) / (12 * h)


def _cluster_moments(
    table: LevelTable, temperature: Vector, zeeman: Vector
) -> tuple[Vector, Vector, Vector]:
    """(C/k_B, ⟨M⟩, variance of M) per ion at the points (T, h), in the table's energy unit."""
    n = len(temperature)
    heat, moment, variance = np.zeros(n), np.zeros(n), np.zeros(n)
    fields, temperatures = np.unique(zeeman), np.unique(temperature)
    # One call per field or per temperature, whichever are fewer.
    by_field = len(fields) <= len(temperatures)
    for common in fields if by_field else temperatures:
        at = np.flatnonzero((zeeman if by_field else temperature) == common)
        fixed = np.array([common])
        grid = (temperature[at], fixed) if by_field else (fixed, zeeman[at])
        curves = cluster_curves(table, *grid)
        heat[at] = np.ravel(curves.specific_heat)
        if curves.moment is not None and curves.moment_variance is not None:
            moment[at] = np.ravel(curves.moment)
            variance[at] = np.ravel(curves.moment_variance)
    return heat / table.n_sites, moment / table.n_sites, variance / table.n_sites


def _free_moments(
    shares: Sequence[tuple[float, float]], temperature: Vector, zeeman: Vector
) -> tuple[Vector, Vector, Vector]:
    """(C/k_B, ⟨M⟩, variance of M) of a mean free ion, each (n,), by the sum over its states."""
    heat, moment, variance = (np.zeros(len(temperature)) for _ in range(3))
    x = zeeman / temperature
    for spin, share in shares:
        m = np.arange(round(2 * spin) + 1) - spin
        exponent = m[:, None] * x
        boltzmann = np.exp(exponent - exponent.max(axis=0))  # of either sign of g
        p = boltzmann / boltzmann.sum(axis=0)
        mean = m @ p
        # About the mean, so that nothing cancels where the ion is saturated.
        spread = np.sum((m[:, None] - mean) ** 2 * p, axis=0)
        moment += share * mean
        variance += share * spread
        heat += share * spread * x**2
    return heat, moment, variance
