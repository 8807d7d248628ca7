"""Curves with units: from a levels dataset to a labelled grid in temperature and field."""

from __future__ import annotations

from collections.abc import Sequence
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import ArrayLike, NDArray

from thermo import units as constants
from thermo.ensemble.canonical import ClusterCurves, cluster_curves
from thermo.ensemble.jackknife import cluster_errors, why_no_errors
from thermo.errors import RangeError, UnavailableError, UnitsError
from thermo.model.level_table import model_from_dataset, table_from_dataset
from thermo.model.spin_model import SpinModel
from thermo.model.traces import total_matrices

if TYPE_CHECKING:
    import xarray as xr

    from thermo.model.level_table import LevelTable

CALORIC = ("internal_energy", "free_energy", "entropy", "specific_heat")
MAGNETIC = ("susceptibility", "magnetization")
# What a file says of its standard errors.
ERRORS = (
    "jackknife over random vectors, widened by Student's factor so that one standard error covers "
    "68.27 %"
)
# Temperatures and fields beyond these would under- or overflow when squared.
SMALLEST, LARGEST = 1e-60, 1e60

Array = NDArray[np.float64]


def moment_unavailable(model: SpinModel, resolved: str) -> str | None:
    """Why χ and M cannot be had from a model's levels, or None when they can."""
    if resolved not in ("total_spin", "magnetic_number"):
        return (
            "the model does not conserve M, so its levels do not fix the magnetic moment; "
            "only energy, C, S and F are available"
        )
    if model.common_g is None:
        return (
            "g differs between sites or directions, so M is not the magnetic moment; give all "
            "sites one isotropic g, or use energy, C, S and F only"
        )
    return None


def axis_values(values: ArrayLike, what: str, positive: bool) -> Array:
    """A coordinate as a strictly increasing 1-D array of finite numbers, or a RangeError."""
    try:
        axis = np.atleast_1d(np.asarray(values, dtype=np.float64))
    except (TypeError, ValueError):
        raise RangeError(f"{what} holds something that is not a number; give numbers") from None
    if axis.ndim != 1 or not len(axis):
        raise RangeError(f"{what} must be one number or a list of them; it has shape {axis.shape}")
    bad = ~np.isfinite(axis) | (np.abs(axis) > LARGEST) | (positive & (axis < SMALLEST))
    if np.any(bad):
        k = int(np.flatnonzero(bad)[0])
        need = f"a number from {SMALLEST:g}" if positive else f"a number from {-LARGEST:g}"
        need += f" to {LARGEST:g}"
        raise RangeError(f"{what}[{k}] is {axis[k]:g}; it must be {need}")
    if np.any(np.diff(axis) <= 0):
        k = int(np.flatnonzero(np.diff(axis) <= 0)[0])
        raise RangeError(
            f"{what} does not increase from entry {k} ({axis[k]:g}) to entry {k + 1} "
            f"({axis[k + 1]:g}); sort it and drop repeats"
        )
    return axis


def curves(
    levels: xr.Dataset,
    temperature: ArrayLike,
    field: ArrayLike = 0.0,
    units: str = "molar-si",
    *,
    per: str = "ion",
    g: float | None = None,
    variables: Sequence[str] | None = None,
) -> xr.Dataset:
    """Thermodynamic curves of a levels dataset on a grid of temperatures and fields.

    Parameters
    ----------
    levels : dataset from ``solve`` or ``read_levels``.
    temperature : (nT,) increasing, above zero, in K (in the energy unit if dimensionless).
    field : number or (nB,) increasing, magnetic field in T (g·field is the Zeeman energy of
        one unit of M if dimensionless). Other than zero only for models that conserve M and
        have one isotropic g.
    units : "molar-si" (J mol⁻¹, J mol⁻¹ K⁻¹, m³ mol⁻¹, A m² mol⁻¹), "molar-cgs" (magnetic
        quantities in emu mol⁻¹, caloric ones as before) or "reduced" (per site, k_B = μ_B = 1,
        energies in the model's unit). A dimensionless model has reduced units only.
    per : "ion" or "formula" (the model's ``ions_per_formula`` ions), for molar units.
    g : replaces the model's common g.
    variables : names wanted; default all that the model allows. Asking for susceptibility or
        magnetization of a model that does not fix them raises UnavailableError.

    Returns a dataset with dimensions temperature, field: internal_energy, free_energy, entropy,
    specific_heat, and where defined susceptibility (∂M/∂B at constant T, so the usual χ at
    B = 0) and magnetization; where the model is not isotropic these are along z, and the
    attribute ``field_direction`` says "z" instead of "any". Accuracy is that of the
    levels, about 10⁻¹² relative for full ones. Sampled levels give each variable a
    ``<name>_standard_error``: the exact value of this cluster lies within one of it in 68 % of
    cases (thermo/ensemble/jackknife.py). With one random vector it is missing and the attribute
    ``error_unavailable`` says why. Cost: one exponential per level and temperature, twice that
    for sampled levels.
    """
    from thermo.variables import build_curves

    model = model_from_dataset(levels)
    table = table_from_dataset(levels)
    t = axis_values(temperature, "temperature", positive=True)
    b = axis_values(field, "field", positive=False)
    constants.check_units_system(units)
    if per not in ("ion", "formula"):
        raise RangeError(f"per={per!r} is unknown; use 'ion' or 'formula'")
    if model.energy_unit == "1" and units != "reduced":
        raise UnitsError(
            f"the model is dimensionless, so it has no {units} curves; use units='reduced', or "
            "give the model an energy unit"
        )
    known = (*CALORIC, *MAGNETIC)
    wanted = tuple(variables) if variables is not None else known
    for name in wanted:
        if name not in known:
            raise RangeError(f"variable {name!r} is unknown; choose from {', '.join(known)}")
    reason = moment_unavailable(model, table.resolved)
    if g is not None and not (np.isfinite(g) and g != 0):
        raise RangeError(f"g = {g} is not a finite number other than zero; give one, such as 2.0")
    moment_g = g if g is not None else model.common_g
    if reason is not None:
        asked = [v for v in MAGNETIC if variables is not None and v in wanted]
        if asked:
            raise UnavailableError(f"{asked[0]} is not available: {reason}")
        if np.any(b != 0):
            raise UnavailableError(f"curves in a field are not available: {reason}")
        wanted = tuple(v for v in wanted if v in CALORIC)
    found = grid_curves(table, model.energy_unit, t, b, moment_g)
    values = _with_units(found, model, t, units, per, moment_g)
    attrs = {k: v for k, v in levels.attrs.items() if isinstance(v, str | int | float)}
    for own in (
        "content", "content_version", "Conventions", "comment", "references", "trace_center",
        "trace_scale",
    ):  # fmt: skip
        attrs.pop(own, None)
    attrs["per"] = "site" if units == "reduced" else per
    attrs["g"] = float(moment_g) if moment_g is not None else "not common to all sites"
    if reason is not None:
        attrs["unavailable"] = reason
    else:
        # Without full rotational symmetry the levels fix the moment along z only.
        attrs["field_direction"] = "any" if _isotropic(model, table.resolved) else "z"
    errors: dict[str, Array] = {}
    wrong = grid_errors(table, model.energy_unit, t, b, moment_g, found)
    if wrong is not None:
        # Every conversion is a factor, so an error takes its size.
        factored = _with_units(wrong, model, t, units, per, moment_g)
        errors = {name: np.abs(array) for name, array in factored.items()}
        attrs["standard_errors"] = ERRORS
        if (why := why_no_errors(table)) is not None:
            attrs["error_unavailable"] = why
    chosen = [k for k in known if k in wanted]
    return build_curves(
        t, b, {k: values[k] for k in chosen}, units, attrs, {k: errors[k] for k in chosen if errors}
    )


def _isotropic(model: SpinModel, resolved: str) -> bool:
    """Whether all directions of a field are alike; levels that resolve M alone do not say."""
    if resolved == "total_spin":
        return True
    pairs, ions = total_matrices(model)
    matrices = [*pairs.values(), *ions.values()]
    scale = max((float(np.abs(a).max()) for a in matrices), default=0.0)
    return all(np.abs(a - a[0, 0] * np.eye(3)).max() <= 1e-12 * scale for a in matrices)


def grid_curves(
    table: LevelTable, energy_unit: str, temperature: Array, field: Array, g: float | None
) -> ClusterCurves:
    """Cluster curves for temperatures in K and fields in T (both in energy units if "1")."""
    return cluster_curves(table, *_in_energy(energy_unit, temperature, field, g))


def grid_errors(
    table: LevelTable,
    energy_unit: str,
    temperature: Array,
    field: Array,
    g: float | None,
    curves: ClusterCurves | None = None,
) -> ClusterCurves | None:
    """Standard errors of ``grid_curves``, which are ``curves`` if at hand; None for a full
    spectrum."""
    return cluster_errors(table, *_in_energy(energy_unit, temperature, field, g), curves)


def _in_energy(
    energy_unit: str, temperature: Array, field: Array, g: float | None
) -> tuple[Array, Array]:
    t = temperature / constants.kelvin_per(energy_unit)
    return t, field * ((g or 0.0) * constants.tesla_to_energy(energy_unit))


def _with_units(
    found: ClusterCurves, model: SpinModel, t: Array, units: str, per: str, g: float | None
) -> dict[str, Array]:
    sites = len(model.sites)
    share = 1 / sites
    if units != "reduced" and per == "formula":
        share = model.ions_per_formula / sites
    kelvin = constants.kelvin_per(model.energy_unit)
    values = {
        "internal_energy": found.internal_energy * share,
        "free_energy": found.free_energy * share,
        "entropy": found.entropy * share,
        "specific_heat": found.specific_heat * share,
    }
    if found.moment is not None and found.moment_variance is not None and g is not None:
        values["magnetization"] = found.moment * (g * share)
        values["susceptibility"] = found.moment_variance * (g**2 * share) / t[:, None]
    if units == "reduced":
        if "susceptibility" in values:
            values["susceptibility"] = values["susceptibility"] * kelvin  # T in the energy unit
        return values
    gas = constants.GAS_CONSTANT
    factor = {
        "internal_energy": gas * kelvin,
        "free_energy": gas * kelvin,
        "entropy": gas,
        "specific_heat": gas,
        "magnetization": constants.MOLAR_BOHR_MAGNETON,
        "susceptibility": constants.CURIE,
    }
    if units == "molar-cgs":
        factor["magnetization"] /= constants.MOMENT_SI_PER_EMU
        factor["susceptibility"] /= constants.CHI_SI_PER_EMU
    return {name: array * factor[name] for name, array in values.items()}
