"""Curves with units: from a levels dataset to a labelled grid in temperature and field."""

from __future__ import annotations

from collections.abc import Sequence
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import ArrayLike, NDArray

from thermo import units as constants
from thermo.ensemble.canonical import ClusterCurves, cluster_curves
from thermo.errors import RangeError, UnavailableError, UnitsError
from thermo.model.level_table import model_from_dataset, table_from_dataset
from thermo.model.spin_model import SpinModel

if TYPE_CHECKING:
    import xarray as xr

    from thermo.model.level_table import LevelTable

CALORIC = ("internal_energy", "free_energy", "entropy", "specific_heat")
MAGNETIC = ("susceptibility", "magnetization")
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
    levels, about 10⁻¹² relative. Cost: one exponential per level and temperature.
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
    for own in ("content", "content_version", "Conventions", "comment", "references"):
        attrs.pop(own, None)
    attrs["per"] = "site" if units == "reduced" else per
    attrs["g"] = float(moment_g) if moment_g is not None else "not common to all sites"
    if reason is not None:
        attrs["unavailable"] = reason
    else:
        # Without full rotational symmetry the levels fix the moment along z only.
        attrs["field_direction"] = "any" if table.resolved == "total_spin" else "z"
    return build_curves(t, b, {k: values[k] for k in known if k in wanted}, units, attrs)


def grid_curves(
    table: LevelTable, energy_unit: str, temperature: Array, field: Array, g: float | None
) -> ClusterCurves:
    """Cluster curves for temperatures in K and fields in T (both in energy units if "1")."""
    t = temperature / constants.kelvin_per(energy_unit)
    h = field * ((g or 0.0) * constants.tesla_to_energy(energy_unit))
    return cluster_curves(table, t, h)


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
