"""``directional_curves``: magnetisation vector, χ tensor and caloric curves for any interaction,
any g, a field along any axis, or a powder."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import ArrayLike, NDArray

from thermo import units as constants
from thermo.ensemble.response import Response, response
from thermo.ensemble.thermodynamics import axis_values, grid_curves
from thermo.errors import RangeError, UnitsError
from thermo.model.spin_model import SpinModel
from thermo.model.traces import total_matrices
from thermo.spectrum.full import FullSolver
from thermo.spectrum.moment_levels import MomentSolver
from thermo.spectrum.planning import check_model

if TYPE_CHECKING:
    import xarray as xr

AXES = ("x", "y", "z")
PAIRS = ((0, 0, "xx"), (1, 1, "yy"), (2, 2, "zz"), (0, 1, "xy"), (0, 2, "xz"), (1, 2, "yz"))
CALORIC = ("internal_energy", "free_energy", "entropy", "specific_heat")
# Degrees of Lebedev's rules (Lebedev and Laikov 1999) that are tried, each about twice as many
# points as the one before; all have positive weights.
DEGREES = (5, 9, 15, 21, 31, 41, 53, 71, 95, 131)
# The finer of two rules that agree to this is taken; its own error is smaller still.
POWDER_TOLERANCE = 1e-7
RELATIVE_TOLERANCE = 1e-12
# Components below this fraction of the largest are rounding, far below the accuracy promised.
NOISE = 1e-13

Array = NDArray[np.float64]
Progress = Callable[[float, str], None]


def read_axis(axis: str | Sequence[float] | Array) -> Array | None:
    """The unit vector (3,) an axis means, None for a powder; RangeError for anything else."""
    if isinstance(axis, str):
        if axis == "powder":
            return None
        if axis in AXES:
            chosen: Array = np.eye(3)[AXES.index(axis)]
            return chosen
        raise RangeError(f"axis {axis[:40]!r} is unknown; use 'x', 'y', 'z', 'powder' or [x, y, z]")
    try:
        vector = np.asarray(axis, dtype=np.float64)
    except (TypeError, ValueError):
        raise RangeError("axis holds something that is not a number; give [x, y, z]") from None
    if vector.shape != (3,):
        raise RangeError(f"axis has shape {vector.shape}; give three numbers [x, y, z]")
    if not np.all(np.isfinite(vector)):
        raise RangeError(f"axis {vector.tolist()} is not finite; give three finite numbers")
    largest = float(np.abs(vector).max())
    if largest == 0:
        raise RangeError("axis [0, 0, 0] has length zero, so it is no direction; give another")
    vector = vector / largest
    unit: Array = vector / np.linalg.norm(vector)
    return unit


def axis_name(axis: Array | None) -> str:
    """How files and pictures name an axis: "z", "[0.6, 0, 0.8]" or "powder"."""
    if axis is None:
        return "powder"
    for k, name in enumerate(AXES):
        if np.array_equal(axis, np.eye(3)[k]):
            return name
    return "[" + ", ".join(f"{x:.6g}" for x in axis) + "]"


@dataclass(frozen=True, eq=False)
class _Point:
    """One cluster at one field for all temperatures, k_B = μ_B = 1, in the energy unit.

    Every array (nT,); ``vector`` (nT, 3) and ``tensor`` (nT, 3, 3) None in a powder's field.
    """

    caloric: dict[str, Array]
    moment: Array
    susceptibility: Array
    vector: Array | None = None
    tensor: Array | None = None

    def scalars(self) -> dict[str, Array]:
        return {
            **self.caloric,
            "magnetization": self.moment,
            "susceptibility": self.susceptibility,
        }


def directional_curves(
    model: SpinModel,
    temperature: ArrayLike,
    field: ArrayLike = 0.0,
    axis: str | Sequence[float] | Array = "z",
    units: str = "molar-si",
    *,
    per: str = "ion",
    tolerance: float = POWDER_TOLERANCE,
    memory: int | float | str | None = None,
    progress: Progress | None = None,
) -> xr.Dataset:
    """Thermodynamic curves of a model with the field along an axis, or of its powder.

    Parameters
    ----------
    model : from ``read_model``; any bond and ion forms, any g, also different by site.
    temperature : (nT,) increasing, above zero, in K (in the energy unit if dimensionless).
    field : number or (nB,) increasing, in T (μ_B·field is an energy if dimensionless).
    axis : "x", "y", "z", or [x, y, z] of any length in the frame of the model's matrices;
        "powder" averages over all directions.
    units, per : as for ``curves``.
    tolerance : where the powder average may stop: two rules agree to this, relative to each
        curve's largest value.
    memory : limit in bytes or as text ("4 GiB"), None for what is free.

    Returns a curves dataset (temperature, field): internal_energy, free_energy, entropy,
    specific_heat, magnetization and susceptibility (∂M/∂B at constant T) along the field; for an
    axis also the vector magnetization_x, _y, _z and the tensor susceptibility_xx, _yy, _zz, _xy,
    _xz, _yz = ∂M_a/∂B_b, symmetric. At zero field these are Van Vleck's sums (Van Vleck 1932;
    Kubo 1957), and a powder's χ is exactly a third of the trace; the tensor is then that of the
    single crystal. A powder's averages are over crystallites that cannot turn.

    Accuracy: χ to 10⁻¹⁰ of its largest element. A powder's error is in the attribute
    ``powder_change`` (the last two rules' largest difference relative to a curve's largest value;
    the result's own error is well below it), and ``powder_converged`` says "yes" or "no".

    Cost: one diagonalisation with vectors in blocks of the site permutations for each field and
    each direction that symmetry does not relate; where all exchange is isotropic and g is one
    number, a single spectrum for everything. Raises RangeError, UnitsError, MemoryLimitError.
    """
    check_model(model, "directional_curves")
    t = axis_values(temperature, "temperature", positive=True)
    b = axis_values(field, "field", positive=False)
    along = read_axis(axis)
    constants.check_units_system(units)
    if per not in ("ion", "formula"):
        raise RangeError(f"per={per!r} is unknown; use 'ion' or 'formula'")
    if model.energy_unit == "1" and units != "reduced":
        raise UnitsError(
            f"the model is dimensionless, so it has no {units} curves; use units='reduced', or "
            "give the model an energy unit"
        )
    if not 0 < tolerance < 1:
        raise RangeError(f"tolerance {tolerance:g} is not between 0 and 1; give one, such as 1e-7")
    kelvin = constants.kelvin_per(model.energy_unit)
    energies = t / kelvin, b * constants.tesla_to_energy(model.energy_unit)
    attrs: dict[str, str | int | float] = {}
    if isotropic(model) and model.common_g is not None:
        found = _isotropic_points(model, model.common_g, t, b, along, memory, progress)
    elif along is None:
        found, more = _powder_points(model, *energies, tolerance, memory, progress)
        attrs |= more
    else:
        found = _axis_points(model, *energies, along, memory, progress)
    return _dataset(found, model, t, b, axis_name(along), units, per, attrs)


def isotropic(model: SpinModel) -> bool:
    """Whether every pair and ion tensor is a multiple of the unit matrix."""
    pairs, ions = total_matrices(model)
    matrices = [*pairs.values(), *ions.values()]
    scale = max((float(np.abs(a).max()) for a in matrices), default=0.0)
    return all(
        np.abs(a - a[0, 0] * np.eye(3)).max() <= RELATIVE_TOLERANCE * scale for a in matrices
    )


def _isotropic_points(
    model: SpinModel,
    g: float,
    t: Array,
    b: Array,
    along: Array | None,
    memory: int | float | str | None,
    progress: Progress | None,
) -> list[_Point]:
    """All directions are alike and total spin is conserved: one spectrum serves every field."""
    table = FullSolver(model, memory, generic=False).table(progress=progress)
    found = grid_curves(table, model.energy_unit, t, b, g)
    energy = t / constants.kelvin_per(model.energy_unit)
    points = []
    for k, strength in enumerate(b * constants.tesla_to_energy(model.energy_unit)):
        caloric = {name: getattr(found, name)[:, k] for name in CALORIC}
        if found.moment is None or found.moment_variance is None:  # pragma: no cover
            raise RangeError("the levels do not resolve the magnetic number; solve them anew")
        moment = g * found.moment[:, k]
        chi = g**2 * found.moment_variance[:, k] / energy
        if along is None:
            tensor = chi[:, None, None] * np.eye(3) if strength == 0 else None
            points.append(_Point(caloric, moment, chi, None, tensor))
            continue
        # Across the field the moment turns as a whole: χ⊥ = M/B.
        across = chi if strength == 0 else moment / strength
        onto = np.outer(along, along)
        tensor = chi[:, None, None] * onto + across[:, None, None] * (np.eye(3) - onto)
        points.append(_Point(caloric, moment, chi, moment[:, None] * along, tensor))
    return points


def _caloric(found: Response) -> dict[str, Array]:
    return {name: getattr(found.caloric, name)[:, 0] for name in CALORIC}


def _axis_points(
    model: SpinModel,
    t: Array,
    b: Array,
    along: Array,
    memory: int | float | str | None,
    progress: Progress | None,
) -> list[_Point]:
    solver = MomentSolver(model, memory)
    points = []
    for k, strength in enumerate(b):
        inner = None if progress is None else _part(progress, k, len(b))
        found = response(solver.solve(strength * along, progress=inner), t)
        points.append(
            _Point(
                _caloric(found),
                found.moment @ along,
                np.einsum("tab,a,b->t", found.tensor, along, along),
                found.moment,
                found.tensor,
            )
        )
    return points


def _part(progress: Progress, k: int, count: int) -> Progress:
    return lambda share, text: progress((k + share) / count, f"field {k + 1} of {count}, {text}")


class _Directions:
    """Directions that a model's own symmetry makes equal, by one representative of each.

    n and −n always are (time reversal); so are images under those twofold rotations about x, y, z
    that keep every tensor, under all rotations about z, or under all rotations.
    """

    def __init__(self, model: SpinModel):
        pairs, ions = total_matrices(model)
        groups = [[*pairs.values(), *ions.values()], [site.g for site in model.sites]]
        scaled = [a / max(float(np.abs(a).max()) for a in group) for group in groups for a in group]
        self._flips = [
            np.array(s)
            for s in ((1, 1, 1), (1, -1, -1), (-1, 1, -1), (-1, -1, 1))
            if all(np.abs(a * np.outer(s, s) - a).max() <= RELATIVE_TOLERANCE for a in scaled)
        ]
        quarter = np.array([[0.0, -1.0, 0.0], [1.0, 0.0, 0.0], [0.0, 0.0, 1.0]])
        # A 3×3 tensor kept by a turn of 45° about z is kept by all, as its parts have |m| ≤ 2.
        eighth = np.array([[1.0, -1.0, 0.0], [1.0, 1.0, 0.0], [0.0, 0.0, 2**0.5]]) / 2**0.5
        self._axial = self._kept(scaled, eighth)
        self._all = self._axial and self._kept(scaled, quarter[[2, 0, 1]][:, [2, 0, 1]])

    @staticmethod
    def _kept(tensors: list[Array], turn: Array) -> bool:
        return all(np.abs(turn @ a @ turn.T - a).max() <= RELATIVE_TOLERANCE for a in tensors)

    def representative(self, n: Array) -> tuple[float, float, float]:
        """The direction that stands for n (3,), rounded to 10⁻¹² so that equal ones meet."""
        if self._all:
            return 0.0, 0.0, 1.0
        if self._axial:
            z = round(abs(float(n[2])), 12)
            return round(max(1 - z * z, 0.0) ** 0.5, 12), 0.0, z
        images = [tuple(np.round(sign * s * n, 12) + 0.0) for s in self._flips for sign in (1, -1)]
        x, y, z = max(images)
        return float(x), float(y), float(z)


def _powder_points(
    model: SpinModel,
    t: Array,
    b: Array,
    tolerance: float,
    memory: int | float | str | None,
    progress: Progress | None,
) -> tuple[list[_Point], dict[str, str | int | float]]:
    solver = MomentSolver(model, memory)
    directions = _Directions(model)
    points, worst, highest = [], 0.0, 0
    for k, strength in enumerate(b):
        inner = None if progress is None else _part(progress, k, len(b))
        if strength == 0:
            found = response(solver.solve(np.zeros(3), progress=inner), t)
            chi = np.trace(found.tensor, axis1=1, axis2=2) / 3
            points.append(_Point(_caloric(found), np.zeros(len(t)), chi, None, found.tensor))
            continue
        point, change, degree = _average(solver, directions, t, float(strength), tolerance, inner)
        points.append(point)
        worst, highest = max(worst, change), max(highest, degree)
    attrs: dict[str, str | int | float] = {
        "powder_converged": "yes" if worst <= tolerance else "no",
        "powder_change": worst,
        "powder_degree": highest,
    }
    return points, attrs


def _average(
    solver: MomentSolver,
    directions: _Directions,
    t: Array,
    strength: float,
    tolerance: float,
    progress: Progress | None,
) -> tuple[_Point, float, int]:
    """The powder's curves at one field, the change at the last step, the degree of its rule."""
    from scipy.integrate import lebedev_rule

    solved: dict[tuple[float, float, float], dict[str, Array]] = {}

    def at(n: tuple[float, float, float]) -> dict[str, Array]:
        if n not in solved:
            axis = np.array(n) / np.linalg.norm(n)
            found = response(solver.solve(strength * axis, axis[None]), t)
            chi = found.tensor[:, 0, 0]
            solved[n] = _Point(_caloric(found), found.moment[:, 0], chi).scalars()
        return solved[n]

    before: dict[str, Array] | None = None
    change = np.inf
    for degree in DEGREES:
        nodes, weights = lebedev_rule(degree)
        shares: dict[tuple[float, float, float], float] = {}
        for n, w in zip(nodes.T, weights / weights.sum(), strict=True):
            key = directions.representative(n)
            shares[key] = shares.get(key, 0.0) + float(w)
        mean: dict[str, Array] = {}
        for done, (key, share) in enumerate(shares.items()):
            for name, values in at(key).items():
                mean[name] = mean.get(name, np.zeros(len(t))) + share * values
            if progress is not None:
                progress(done / len(shares), f"powder of {len(shares)} directions")
        if before is not None:
            change = max(
                float(np.abs(mean[name] - before[name]).max() / (np.abs(mean[name]).max() or 1.0))
                for name in mean
            )
        before = mean
        if change <= tolerance or len(shares) == 1:
            change = 0.0 if len(shares) == 1 else change
            break
    caloric = {name: mean[name] for name in CALORIC}
    return _Point(caloric, mean["magnetization"], mean["susceptibility"]), change, degree


def _without_noise(components: Array, axes: tuple[int, ...]) -> Array:
    """Components that symmetry forbids come out as rounding; they are set to zero."""
    largest = np.abs(components).max(axis=axes, keepdims=True)
    return np.where(np.abs(components) <= NOISE * largest, 0.0, components)


def _dataset(
    points: list[_Point],
    model: SpinModel,
    t: Array,
    b: Array,
    axis: str,
    units: str,
    per: str,
    more: dict[str, str | int | float],
) -> xr.Dataset:
    from thermo.variables import build_curves, software_version

    values = {name: [p.scalars()[name] for p in points] for name in points[0].scalars()}
    vectors = [p.vector for p in points if p.vector is not None]
    tensors = [p.tensor for p in points if p.tensor is not None]
    if len(vectors) == len(points):
        for a, letter in enumerate(AXES):
            values[f"magnetization_{letter}"] = [_without_noise(v, (1,))[:, a] for v in vectors]
    if len(tensors) == len(points):
        for i, j, letters in PAIRS:
            values[f"susceptibility_{letters}"] = [
                _without_noise(v, (1, 2))[:, i, j] for v in tensors
            ]
    share = 1 / len(model.sites)
    if units != "reduced" and per == "formula":
        share *= model.ions_per_formula
    kelvin = constants.kelvin_per(model.energy_unit)
    factor = dict.fromkeys(("internal", "free", "entropy", "specific"), constants.GAS_CONSTANT)
    factor["internal"] *= kelvin
    factor["free"] *= kelvin
    factor["magnetization"] = constants.MOLAR_BOHR_MAGNETON
    # Per energy unit here, per kelvin in the constant.
    factor["susceptibility"] = constants.CURIE / kelvin
    if units == "molar-cgs":
        factor["magnetization"] /= constants.MOMENT_SI_PER_EMU
        factor["susceptibility"] /= constants.CHI_SI_PER_EMU
    if units == "reduced":
        factor = dict.fromkeys(factor, 1.0)
    arrays = {
        name: np.array(rows).T * (share * factor[name.split("_")[0]])
        for name, rows in values.items()
    }
    g = model.common_g
    attrs: dict[str, str | int | float] = {
        "title": model.title,
        "energy_unit": model.energy_unit,
        "bond_term": model.bond_term,
        "method": "full",
        "n_sites": len(model.sites),
        "model_text": model.text,
        "model_digest": model.digest,
        "per": "site" if units == "reduced" else per,
        "g": float(g) if g is not None else "not common to all sites",
        "field_direction": axis,
        "made_with": f"partita {software_version()}",
        **more,
    }
    return build_curves(t, b, arrays, units, attrs)
