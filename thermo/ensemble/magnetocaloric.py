"""Field and temperature together: entropy change, isentropes and the Grüneisen ratio.

All from the canonical sums over one table of levels, without differences between grid points:
(∂M/∂T)_B = cov(E, M)/T² with E the energy in the field, and (∂S/∂ ln T)_B = C leads along an
isentrope. Γ_B = −(∂M/∂T)_B / C_B = (1/T)(∂T/∂B)_S (Zhu, Garst, Rosch and Si, Phys. Rev. Lett.
91, 066404 (2003)).
"""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import ArrayLike, NDArray

from thermo import units as constants
from thermo.ensemble.canonical import ClusterCurves, _group, _group_sums, cluster_curves
from thermo.ensemble.thermodynamics import _in_energy, _with_units, axis_values, moment_unavailable
from thermo.errors import RangeError, UnavailableError, UnitsError
from thermo.model.level_table import model_from_dataset, table_from_dataset

if TYPE_CHECKING:
    import xarray as xr

    from thermo.model.level_table import LevelTable

Array = NDArray[np.float64]
# An isentrope is followed this far beyond the temperatures asked for, and no further.
REACH = 1e4
_STEPS = 200


def moment_slope(table: LevelTable, temperature: Array, field: Array) -> Array:
    """∂⟨M⟩/∂T at constant field, (nT, nB), M = Σ Sᶻ.

    ``temperature`` (nT,) > 0 and ``field`` (nB,), g μ_B B per unit of M, in the table's energy
    unit; the levels must resolve M. Levels ±M are taken in pairs, whose difference is known
    exactly, so small fields cost no accuracy. Cost: as ``cluster_curves``.
    """
    groups = _group(table)
    _, z, mean, _ = (a[:, groups.owner] for a in _group_sums(groups, temperature))
    slot = {(int(k), m): j for j, (k, m) in enumerate(zip(groups.owner, groups.m, strict=True))}
    up = np.flatnonzero(groups.m > 0)
    down = np.array([slot[int(groups.owner[j]), -groups.m[j]] for j in up], dtype=np.int64)
    m, t = groups.m[up], temperature[:, None]
    slope = np.zeros((len(temperature), len(field)))
    for b, h in enumerate(field):
        sign, size = np.sign(h), abs(float(h))
        first, second = (up, down) if h >= 0 else (down, up)
        lowest = groups.lowest[groups.owner] - h * groups.m
        lowest = lowest - lowest.min()
        lowest[lowest <= groups.tolerance] = 0.0
        q = z * np.exp(np.maximum(-lowest / t, -800.0))
        p = q / q.sum(axis=1)[:, None]
        energy = lowest + mean
        u = (p * energy).sum(axis=1)[:, None]
        # p(+)(E(+) − u) − p(−)(E(−) − u), with E(+) − E(−) = −2|h|M
        bias = -p[:, first] * np.expm1(-2 * size * m / t)
        pairs = bias * (energy[:, first] - u) - 2 * size * m * p[:, second]
        slope[:, b] = sign * (m * pairs).sum(axis=1) / temperature**2
    return slope


def isentropes(table: LevelTable, temperature: Array, field: Array, start: float) -> Array:
    """The temperature reached at each field from each of ``temperature`` at the field ``start``,
    (nT, nB), entropy kept; units as in ``moment_slope``.

    NaN where no temperature between 1/REACH of the lowest and REACH times the highest has that
    entropy, as when the ground level keeps more. Cost: some ten ``cluster_curves`` per field.
    """
    wanted = cluster_curves(table, temperature, np.array([start])).entropy[:, 0]
    found = np.full((len(temperature), len(field)), np.nan)
    ends = np.log([temperature[0] / REACH, temperature[-1] * REACH])
    for b, h in enumerate(field):
        if h == start:
            found[:, b] = temperature
            continue
        at = np.array([h])
        bottom, top = cluster_curves(table, np.exp(ends), at).entropy[:, 0]
        inside = np.flatnonzero((wanted > bottom) & (wanted < top))
        low, high = np.full(len(inside), ends[0]), np.full(len(inside), ends[1])
        x = np.log(temperature[inside])
        for _ in range(_STEPS if len(inside) else 0):
            curve = cluster_curves(table, np.exp(x), at)
            miss = curve.entropy[:, 0] - wanted[inside]
            low, high = np.where(miss < 0, x, low), np.where(miss < 0, high, x)
            heat = curve.specific_heat[:, 0]
            with np.errstate(all="ignore"):
                newton = x - miss / heat
            good = (newton > low) & (newton < high) & (heat > 0)
            following = np.where(good, newton, (low + high) / 2)
            following = np.where(miss == 0, x, following)
            done = bool(np.all(np.abs(following - x) <= 1e-14 * np.maximum(1, np.abs(x))))
            x = following
            if done:
                break
        found[inside, b] = np.exp(x)
    return found


def magnetocaloric(
    levels: xr.Dataset,
    temperature: ArrayLike,
    field: ArrayLike,
    units: str = "molar-si",
    *,
    start: float = 0.0,
    per: str = "ion",
    g: float | None = None,
) -> xr.Dataset:
    """What a change of field does, from a levels dataset.

    Parameters as of ``curves``; ``start`` is the field (T) from which changes are counted. The
    dataset has dimensions temperature, field: entropy_change S(T, B) − S(T, start);
    isentrope_temperature, reached at B from T at ``start`` with the entropy kept, and
    adiabatic_temperature_change, that less T (both missing where no temperature has that
    entropy); magnetization_slope (∂M/∂T)_B; gruneisen_ratio Γ_B = −(∂M/∂T)_B/C (missing
    where C vanishes). Accuracy is that of the levels; sampled ones carry no standard errors here,
    and the attribute error_unavailable says so. Raises UnavailableError where the levels do not
    fix the moment, RangeError, UnitsError.
    """
    from thermo.variables import build_magnetocaloric

    model, table = model_from_dataset(levels), table_from_dataset(levels)
    t = axis_values(temperature, "temperature", positive=True)
    b = axis_values(field, "field", positive=False)
    origin = axis_values(start, "start", positive=False)
    if len(origin) != 1:
        raise RangeError("start is a list; give the one field from which changes are counted")
    constants.check_units_system(units)
    if per not in ("ion", "formula"):
        raise RangeError(f"per={per!r} is unknown; use 'ion' or 'formula'")
    if model.energy_unit == "1" and units != "reduced":
        raise UnitsError(
            f"the model is dimensionless, so it has no {units} values; use units='reduced', or "
            "give the model an energy unit"
        )
    if (reason := moment_unavailable(model, table.resolved)) is not None:
        raise UnavailableError(f"changes with the field are not available: {reason}")
    moment_g = g if g is not None else model.common_g
    if moment_g is None or not np.isfinite(moment_g) or moment_g == 0:
        raise RangeError(f"g = {g} is not a finite number other than zero; give one, such as 2.0")
    unit = model.energy_unit
    kelvin = constants.kelvin_per(unit)
    in_energy, zeeman = _in_energy(unit, t, b, moment_g)
    first = _in_energy(unit, t, origin, moment_g)[1]
    here = cluster_curves(table, in_energy, zeeman)
    change = here.entropy - cluster_curves(table, in_energy, first).entropy
    slope = moment_slope(table, in_energy, zeeman)
    reached = isentropes(table, in_energy, zeeman, float(first[0])) * kelvin
    reached[:, b == origin[0]] = t[:, None]
    per_tesla = moment_g * constants.tesla_to_energy(unit)
    with np.errstate(all="ignore"):
        ratio = -slope * per_tesla / here.specific_heat
    ratio = np.where(np.isfinite(ratio), ratio + 0.0, np.nan)  # + 0.0: no "-0"
    # Curves that are not wanted are zero; the others pass through the one conversion of units.
    none = np.zeros_like(slope)
    raw = ClusterCurves(none, none, change, none, slope / kelvin, none)
    converted = _with_units(raw, model, t, units, per, moment_g)
    attrs = {
        key: levels.attrs[key]
        for key in ("energy_unit", "method", "n_sites", "model_text", "model_digest", "title",
                    "seed", "vectors", "history")
        if key in levels.attrs
    }  # fmt: skip
    attrs |= {
        "per": "site" if units == "reduced" else per,
        "g": float(moment_g),
        "start_field": float(origin[0]),
    }
    if levels.attrs["method"] == "sampled":
        attrs["error_unavailable"] = "standard errors of changes with the field are not worked out"
    arrays = {
        "temperature": t,
        "field": b,
        "entropy_change": converted["entropy"],
        "isentrope_temperature": reached,
        "adiabatic_temperature_change": reached - t[:, None],
        "magnetization_slope": converted["magnetization"],
        "gruneisen_ratio": ratio,
    }
    return build_magnetocaloric(arrays, attrs | {"units_system": units})
