"""From parameters to predicted points and their exact slopes, one diagonalisation for each new
direction of the couplings.

Per mole of ions, with ρ the share of paramagnetic impurities and s the set's scale:
    χ/s = χ0 + (1−ρ) χ_spins(T; c, g) + ρ C_imp/(T−θ),
    M/s = χ0 B/μ0 + (1−ρ) M_spins + ρ M_imp,
    C/s = (1−ρ) C_spins + ρ C_imp_spins(T, B) + C_lattice,
where the impurities are free ions like the model's own (each kind with its share) or of a stated
spin: at B = 0 their Curie constant is that of the mean S(S+1), in a field they follow Brillouin
functions. The spins may feel the mean field of neighbouring clusters (fit/surroundings.py).
Susceptibility measured at a field above zero is M/B.
"""

from __future__ import annotations

import dataclasses
import os
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from thermo import units
from thermo.ensemble.slopes import PointSums
from thermo.errors import UnavailableError
from thermo.fit.differences import DifferenceSums
from thermo.fit.measured import MAGNETIC, Measured
from thermo.fit.parameters import Values
from thermo.fit.roles import (
    CHI0,
    DEBYE,
    FRACTION,
    IMPURITY_G,
    INTERCLUSTER,
    WEISS,
    G,
    einstein_names,
)
from thermo.fit.spectra import Solver, SpectrumCache
from thermo.fit.surroundings import (
    Natural,
    Response,
    coupled_clusters,
    debye,
    einstein,
    free_ions,
    lone_clusters,
)
from thermo.model.spin_model import SpinModel
from thermo.model.terms import BOND_TERMS

if TYPE_CHECKING:
    from thermo.fit.study import Study

__all__ = ["Forward", "Points", "Solver", "check_available", "make_forward", "set_points"]

Vector = NDArray[np.float64]


@dataclass(frozen=True, eq=False)
class Points:
    """Where one quantity is wanted: temperatures [K] and fields [T] of shape (n,), and ``per``.

    ``names`` maps roles ("chi0", "weiss_temperature" …) to the parameters that play them for
    these points, where those are not called like the role; ``scales`` are the parameters that
    multiply the points.
    """

    quantity: str
    temperature: Vector
    field: Vector
    per: str
    names: Mapping[str, str] = dataclasses.field(default_factory=dict)
    scales: tuple[str, ...] = ()


def set_points(data: Measured) -> Points:
    """The points of a data set."""
    return Points(
        data.quantity, data.temperature, data.field, data.per, data.parameter_names, data.scales
    )


def make_forward(
    study: Study, solver: Solver, cache: str | os.PathLike[str] | None = None
) -> Forward:
    """The forward model of a study; ``cache`` names a folder that keeps its spectra."""
    p = study.parameters.by_name
    return Forward(
        study.model,
        solver,
        p[CHI0].to_si,
        to_si={name: q.to_si for name, q in p.items() if q.role == CHI0},
        impurity_spin={name: q.spin for name, q in p.items() if q.role == FRACTION},
        lattice_atoms=study.lattice_atoms,
        cache=cache,
    )


@dataclass(frozen=True, eq=False)
class Prediction:
    """Points with their derivatives: ``value`` (n,), ``slopes`` (n, n_free); where asked for,
    the ``parts`` of the value, each (n,), and the points that lie where the model's clusters
    or impurities would order, ``beyond``."""

    value: Vector
    slopes: Vector
    parts: Mapping[str, Vector]
    beyond: NDArray[np.bool_]


class Forward:
    """Predictions of a model, in SI (or as they are for a dimensionless model)."""

    def __init__(
        self,
        model: SpinModel,
        solver: Solver,
        chi0_to_si: float = 1.0,
        *,
        to_si: Mapping[str, float] | None = None,
        impurity_spin: Mapping[str, float] | None = None,
        lattice_atoms: float = 0.0,
        cache: str | os.PathLike[str] | None = None,
    ) -> None:
        """``chi0_to_si`` takes the values' chi0 to SI per mole of ions, ``to_si`` those of other
        names; ``impurity_spin`` gives fractions' spins by name (NaN: the model's ions);
        ``lattice_atoms`` the atoms per ion of the lattice's heat."""
        self.model = model
        self.chi0_to_si = {CHI0: chi0_to_si, **(to_si or {})}
        self.impurity_spin = dict(impurity_spin or {})
        self.lattice_atoms = lattice_atoms
        self.cache = SpectrumCache(solver, tuple(model.couplings), model, cache)
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
        self.bond_factor = BOND_TERMS[model.bond_term]

    def couplings(self, values: Values) -> Vector:
        """The couplings among the values, in the model's order, shape (P,)."""
        return np.array([values.value[name] for name in self.model.couplings], dtype=np.float64)

    def predict(self, points: Points, values: Values) -> Vector:
        """The quantity at the points, shape (n,)."""
        return self.evaluate(points, values, slopes=False).value

    def jacobian(self, sets: Sequence[Points], values: Values) -> Vector:
        """Exact slopes of all sets' points, one after the other, by the free parameters:
        (N, n_free)."""
        return np.concatenate([self.evaluate(points, values).slopes for points in sets])

    def evaluate(self, points: Points, values: Values, slopes: bool = True) -> Prediction:
        """The quantity at the points with its exact slopes (none without ``slopes``)."""
        known = _Known(points, values)
        n_free = len(next(iter(values.slope.values()))) if values.slope else 0
        tangents = self._tangents(values, n_free) if slopes else np.empty((len(values.value), 0))
        moving = np.flatnonzero(tangents.any(axis=0)) if slopes else np.empty(0, dtype=np.int64)
        out = np.zeros((len(points.temperature), n_free if slopes else 0))

        def add(name: str, slope: Vector) -> None:
            if slopes and name in values.slope:
                out[:] += np.outer(slope, values.slope[name])

        spins, imp = _Part(), _Part()
        beyond = self._spins(points, known, tangents[:, moving] if slopes else None, spins)
        rho, chi0 = known(FRACTION), known(CHI0)
        if rho != 0 or known.moves(FRACTION):
            self._impurities(points, known, imp)
            beyond = beyond | (points.temperature <= known(WEISS))
        constant = self.chi0_part(points)
        lattice, by_lattice = self._lattice(points, known)
        parts = {
            "spins": (1 - rho) * spins.value,
            "impurities": rho * imp.value + np.zeros(len(out)),
            "chi0": chi0 * constant,
            "lattice": lattice,
        }
        bare = sum(parts.values(), np.zeros(len(out)))
        if slopes:
            out[:, moving] += (1 - rho) * spins.along.T
            for role, slope in spins.slopes.items():
                add(known.name(role), (1 - rho) * slope)
            for role, slope in imp.slopes.items():
                add(known.name(role), rho * slope)
            add(known.name(FRACTION), imp.value - spins.value)
            add(known.name(CHI0), constant)
            for name, slope in by_lattice.items():
                add(name, slope)
        scale = known.scale
        if slopes:
            out *= scale
            for name in points.scales:
                add(name, bare * (scale / values.value[name]))
        return Prediction(
            bare * scale, out, {name: part * scale for name, part in parts.items()}, beyond
        )

    def chi0_part(self, points: Points) -> Vector:
        """The quantity that chi0 = 1, in the unit of the parameter, makes."""
        name = points.names.get(CHI0, CHI0)
        per = self._per(points) * self.chi0_to_si.get(name, self.chi0_to_si[CHI0])
        if points.quantity == "susceptibility":
            return np.full(len(points.temperature), per)
        if points.quantity == "chi_T":
            return per * points.temperature
        if points.quantity == "magnetization":
            return per * points.field / self.mu_0
        return np.zeros(len(points.temperature))

    def _per(self, points: Points) -> float:
        return self.per_formula if points.per == "formula" else 1.0

    def _tangents(self, values: Values, n_free: int) -> Vector:
        """∂c_p/∂θ_k, (P, n_free)."""
        names = tuple(self.model.couplings)
        if not names:
            return np.empty((0, n_free))
        return np.array([values.slope[name] for name in names], dtype=np.float64)

    def _spins(
        self, points: Points, known: _Known, tangents: Vector | None, out: _Part
    ) -> NDArray[np.bool_]:
        """The part of the clusters' spins; where they would order."""
        c = self.couplings(known.values)
        t = points.temperature / self.kelvin
        sums = self._sums(c, tangents, t)
        check_available(points, self.cache.resolved)
        g, a = known(G), self.bond_factor * known(INTERCLUSTER)
        h = g * self.tesla * points.field
        n = len(self.model.sites)
        ordered = np.zeros(len(t), dtype=bool)
        if a != 0 or known.moves(INTERCLUSTER):
            largest = float(self.model.spins.mean())
            found, ordered = coupled_clusters(sums.at, t, h, n, a, largest)
        else:
            found = lone_clusters(sums.at(h), t, n)
        self._to_si(points, found, g, G, out)
        if known.moves(INTERCLUSTER):
            by_a = self._quantity(points, found.by_extra, g)
            out.slopes[INTERCLUSTER] = self.bond_factor * by_a
        return ordered

    def _sums(self, c: Vector, tangents: Vector | None, t: Vector) -> PointSums | DifferenceSums:
        if tangents is not None and tangents.size and not self.cache.exact:
            return DifferenceSums(self.cache, c, tangents, t)
        wanted = tangents is not None and tangents.size > 0
        found, scale = self.cache.spectrum(c, wanted)
        table = found.scaled(scale)
        if not wanted or tangents is None or found.slopes is None:
            return PointSums(table, t)
        return PointSums(table, t, tangents.T @ found.slopes)

    def _impurities(self, points: Points, known: _Known, out: _Part) -> None:
        role = IMPURITY_G if known.has(IMPURITY_G) else G
        g = known(role)
        spin = self.impurity_spin.get(known.name(FRACTION), np.nan)
        shares = self.spin_shares if np.isnan(spin) else ((spin, 1.0),)
        t = points.temperature / self.kelvin
        h = g * self.tesla * points.field
        found = free_ions(shares, t, h, known(WEISS) / self.kelvin)
        self._to_si(points, found, g, role, out)
        out.slopes[WEISS] = self._quantity(points, found.by_extra, g) / self.kelvin

    def _to_si(self, points: Points, found: Response, g: float, role: str, out: _Part) -> None:
        """From natural values per ion to the quantity per mole, with its slopes along the
        couplings and by g, directly and through the field's energy."""
        out.value = self._quantity(points, found.value, g)
        out.along = self._quantity(points, found.along, g)
        through = self._quantity(points, found.by_field, g) * (self.tesla * points.field)
        # M ∝ g·m, and χ ∝ g² at zero field.
        direct = np.zeros(len(points.field))
        if points.quantity == "magnetization":
            direct = self._quantity(points, found.value, 1.0)
        elif points.quantity in MAGNETIC:
            power = np.where(points.field > 0, 1.0, 2.0 * g)
            direct = power * self._quantity(points, found.value, 1.0)
        out.slopes[role] = through + direct

    def _quantity(self, points: Points, natural: Natural, g: float) -> Vector:
        """SI per mole from natural values; linear in them, so slopes go the same way."""
        T, B, per = points.temperature, points.field, self._per(points)
        if points.quantity == "specific_heat":
            return per * self.gas * natural.heat
        if points.quantity == "specific_heat_over_T":
            return per * self.gas * natural.heat / T
        if points.quantity == "magnetization":
            return per * self.moment * g * natural.moment
        in_field = B > 0
        safe = np.where(in_field, B, 1.0)
        chi = np.where(
            in_field,
            self.mu_0 * self.moment * g * natural.moment / safe,
            self.curie * g**2 * natural.chi / self.kelvin,
        )
        return per * (chi * T if points.quantity == "chi_T" else chi)

    def _lattice(self, points: Points, known: _Known) -> tuple[Vector, dict[str, Vector]]:
        """The lattice's heat and its slopes by Debye and Einstein temperatures and shares."""
        T = points.temperature
        zero = np.zeros(len(T))
        if self.lattice_atoms == 0 or not points.quantity.startswith("specific_heat"):
            return zero, {}
        size = 3 * self.lattice_atoms * self.gas * self._per(points)
        weight = size / T if points.quantity == "specific_heat_over_T" else size + zero
        smooth, by_debye = debye(T, known(DEBYE))
        rest, value, slopes = 1.0, zero, {}
        for temperature, share in einstein_names(known.values.value):
            f = known(share)
            mode, by_mode = einstein(T, known(temperature))
            value = value + f * mode
            slopes[temperature] = weight * f * by_mode
            slopes[share] = weight * (mode - smooth)
            rest -= f
        slopes[DEBYE] = weight * rest * by_debye
        return weight * (value + rest * smooth), slopes


class _Known:
    """The values of the roles at one set of points."""

    def __init__(self, points: Points, values: Values) -> None:
        self.points, self.values = points, values

    def name(self, role: str) -> str:
        return self.points.names.get(role, role)

    def has(self, role: str) -> bool:
        return self.name(role) in self.values.value

    def __call__(self, role: str) -> float:
        value = self.values.value.get(self.name(role), 0.0)
        # Without a common g only zero-field specific heat is fitted, where g plays no part.
        return value if np.isfinite(value) else 0.0

    def moves(self, role: str) -> bool:
        """Whether the role depends on a free parameter."""
        slope = self.values.slope.get(self.name(role))
        return slope is not None and bool(np.any(slope))

    @property
    def scale(self) -> float:
        return float(np.prod([self.values.value[name] for name in self.points.scales]))


class _Part:
    """A part of the quantity: value (n,), slopes along the couplings (k, n) and by roles (n,)."""

    def __init__(self) -> None:
        self.value: Vector = np.zeros(1)
        self.along: Vector = np.empty((0, 1))
        self.slopes: dict[str, Vector] = {}


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
