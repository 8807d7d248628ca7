"""The registry of every variable in every file; it builds and checks the datasets.

Six kinds of file: ``levels`` (a solved spectrum), ``curves`` (its thermodynamics),
``correlations``, ``magnetocaloric`` (what a change of field does), ``fit`` and ``comparison``
(rival candidates fitted to the same points); their tables are in ``thermo.variable_tables``.
Each holds CF-1.11 root attributes, and ``content`` =
its kind. On disk molar quantities are SI: "cm3 mol-1" would read as 10⁻⁶ m³/mol to a units
library, 4π wrong for a CGS susceptibility.
"""

from __future__ import annotations

import os
from collections.abc import Mapping
from datetime import UTC, datetime
from importlib import metadata
from typing import Any

import numpy as np
import xarray as xr
from numpy.typing import ArrayLike, NDArray

from thermo import units
from thermo.errors import FileFormatError, UnitsError
from thermo.variable_tables import REGISTRY as REGISTRY
from thermo.variable_tables import SAMPLED_ATTRS, SAMPLED_VARIABLES, Variable

CONVENTIONS = "CF-1.11"
CONTENT_VERSION = 1
ERROR_SUFFIX = "_standard_error"

#: How a units system writes each derived unit; "{energy}" and "{per_energy}" follow energy_unit.
_MOLAR_SI = {
    "@temperature": "K",
    "@field": "T",
    "@energy": "J mol-1",
    "@entropy": "J mol-1 K-1",
    "@susceptibility": "m3 mol-1",
    "@moment": "A m2 mol-1",
    "@moment_slope": "A m2 mol-1 K-1",
    "@per_field": "T-1",
}
_SYSTEMS: dict[str, dict[str, str]] = {
    "molar-si": _MOLAR_SI,
    "molar-cgs": _MOLAR_SI
    | {"@susceptibility": "emu mol-1", "@moment": "emu mol-1"}
    | {"@moment_slope": "emu mol-1 K-1"},
    "reduced": {
        "@temperature": "K",
        "@field": "T",
        "@energy": "{energy}",
        "@entropy": "1",
        "@susceptibility": "{per_energy}",
        "@moment": "1",
        "@moment_slope": "K-1",
        "@per_field": "T-1",
    },
}
_PER_ENERGY = {"K": "K-1", "meV": "meV-1", "cm-1": "cm", "1": "1"}


#: Root attributes a file of each kind cannot do without.
REQUIRED_ATTRS: dict[str, tuple[str, ...]] = {
    "levels": ("energy_unit", "method", "resolved", "n_sites", "model_text", "model_digest"),
    "curves": ("energy_unit", "units_system", "per"),
    "fit": ("energy_unit",),
    "comparison": ("energy_unit", "verdict", "conclusion"),
    "correlations": ("energy_unit", "n_sites", "model_text", "model_digest"),
    "magnetocaloric": ("energy_unit", "units_system", "per", "start_field"),
}
_TITLES = {
    "levels": "Energy levels of a spin cluster",
    "curves": "Thermodynamics of a spin cluster",
    "fit": "Fit of a spin cluster to measured curves",
    "comparison": "Rival spin clusters fitted to the same measured points",
    "correlations": "Thermal correlations of a spin cluster",
    "magnetocaloric": "What a change of field does to a spin cluster",
}
_COMMENTS = {
    "levels": "Each level stands for `weight` states of the whole cluster.",
    "curves": "Molar quantities are SI and per mole of what the attribute `per` names.",
    "fit": "Each dataset is given in its own units, which dataset_units names; "
    "temperatures are in K and fields in T unless the model is dimensionless.",
    "comparison": "Each dataset is given in its own units, which dataset_units names.",
    "correlations": "Spins are counted in units of hbar, moments and form factors left out; "
    "averages are not reduced by those of the single spins.",
    "magnetocaloric": "Molar quantities are per mole of what the attribute `per` names; changes "
    "are counted from the field `start_field`.",
}


def build_levels(
    arrays: Mapping[str, ArrayLike], sectors: Mapping[str, ArrayLike], attrs: Mapping[str, Any]
) -> xr.Dataset:
    """A levels dataset from its per-level and per-sector arrays.

    ``arrays``: energy (in attrs["energy_unit"]), weight, total_spin, magnetic_number, vector,
    sector, each (L,). ``sectors``: dimension, multiplicity, magnetic_number, real, each (B,)
    (with or without a leading "sector_"). Sampled levels (attrs["method"] = "sampled") add
    raw_weight (L,), trace_magnetic_number (G,), trace (G, K+1), trace_order_used (G,), and the
    attributes trace_center and trace_scale (energies), vectors, steps and seed. Raises
    FileFormatError where they do not fit.
    """
    prefix = "sector_"
    per_block = {k if k.startswith(prefix) else prefix + k: v for k, v in sectors.items()}
    return _build("levels", {**arrays, **per_block}, attrs)


def build_curves(
    temperature: ArrayLike,
    field: ArrayLike,
    values: Mapping[str, ArrayLike],
    units_system: str,
    attrs: Mapping[str, Any],
    errors: Mapping[str, ArrayLike] | None = None,
) -> xr.Dataset:
    """A curves dataset on the grid temperature (nT,) × field (nB,), both strictly increasing.

    ``values`` maps internal_energy, free_energy, entropy, specific_heat, susceptibility,
    magnetization (those there are) to (nT, nB) arrays in ``units_system``; ``errors`` maps some
    of the same names to their standard errors. ``attrs`` needs energy_unit and per ("ion",
    "formula" or "site").
    """
    arrays: dict[str, ArrayLike] = {"temperature": temperature, "field": field, **values}
    for name, error in (errors or {}).items():
        arrays[name + ERROR_SUFFIX] = error
    system = units.check_units_system(units_system)
    return _build("curves", arrays, {**attrs, "units_system": system})


def build_fit(arrays: Mapping[str, Any], attrs: Mapping[str, Any]) -> xr.Dataset:
    """A fit dataset; ``arrays`` maps the names in REGISTRY["fit"] to arrays or lists.

    P parameters: parameter_name, parameter_units, parameter_tie (text, "" if none), value,
    standard_error, start, lower_bound, upper_bound, at_bound (−1, 0, 1), parameter_role
    (0 fixed, 1 free, 2 tied), and correlation (P, P). N points of all datasets one after the
    other: temperature (K), field (T), observed, uncertainty, predicted, residual (each in its
    dataset's own units), point_dataset. D datasets: dataset_name, dataset_quantity,
    dataset_units, dataset_chi_square and, where known, dataset_per ("ion" or "formula").
    Numbers: chi_square, reduced_chi_square, degrees_of_freedom, evaluations, converged.
    Optional smooth lines for pictures: curve_temperature, curve_field, curve_predicted,
    curve_dataset.
    """
    return _build("fit", arrays, attrs)


def build_comparison(arrays: Mapping[str, Any], attrs: Mapping[str, Any]) -> xr.Dataset:
    """A comparison dataset; ``arrays`` maps the names in REGISTRY["comparison"] to arrays.

    ``attrs`` needs energy_unit (that of the candidates, "K" where they differ), verdict (a
    sentence) and conclusion ("preferred", "undecided", "none" or "single").
    """
    return _build("comparison", arrays, attrs)


def build_correlations(arrays: Mapping[str, Any], attrs: Mapping[str, Any]) -> xr.Dataset:
    """A correlations dataset; ``arrays`` maps the names in REGISTRY["correlations"] to arrays.

    ``attrs`` needs energy_unit, n_sites, model_text and model_digest.
    """
    return _build("correlations", arrays, attrs)


def build_magnetocaloric(arrays: Mapping[str, Any], attrs: Mapping[str, Any]) -> xr.Dataset:
    """A magnetocaloric dataset; ``arrays`` maps the names in REGISTRY["magnetocaloric"] to arrays.

    ``attrs`` needs energy_unit, units_system, per and start_field.
    """
    return _build("magnetocaloric", arrays, attrs)


def _build(kind: str, arrays: Mapping[str, Any], attrs: Mapping[str, Any]) -> xr.Dataset:
    root = _root_attributes(kind, attrs)
    columns: dict[str, Any] = {}
    for name, data in arrays.items():
        variable = lookup(kind, name)
        if variable is None:
            raise FileFormatError(f"a {kind} file holds no variable named {name!r}")
        columns[name] = (variable.dims, _as_dtype(variable, data), _attributes(variable, root))
    for name in columns:
        base = name.removesuffix(ERROR_SUFFIX)
        if base != name and base in columns:
            columns[base][2]["ancillary_variables"] = name
    try:
        dataset = xr.Dataset(columns, attrs=root)
    except ValueError as error:
        raise FileFormatError(f"the arrays of a {kind} file do not fit together: {error}") from None
    labels = [n for n, v in REGISTRY[kind].items() if v.label and n in dataset]
    dataset = dataset.set_coords(labels)
    validate(dataset, kind)
    return dataset


def lookup(kind: str, name: str) -> Variable | None:
    """The registry's entry for a name, standard errors of curves included; None if unknown."""
    table = REGISTRY[kind]
    if name in table:
        return table[name]
    base = table.get(name.removesuffix(ERROR_SUFFIX)) if kind == "curves" else None
    if base is None or len(base.dims) < 2:
        return None
    return Variable(
        name, base.dims, base.dtype, base.units, f"standard error of {base.long_name}",
        required=False, finite=False,
    )  # fmt: skip


def units_of(variable: Variable, attrs: Mapping[str, Any]) -> str | None:
    """The variable's units in a dataset with these root attributes."""
    rule = variable.units
    if rule is None or not rule.startswith("@"):
        return rule
    energy = str(attrs.get("energy_unit", "K"))
    if rule == "@model_energy":
        return energy
    if energy == "1" and rule in ("@temperature", "@field", "@moment_slope", "@per_field"):
        return "1"
    text = _SYSTEMS[str(attrs.get("units_system", "molar-si"))][rule]
    return text.format(energy=energy, per_energy=_PER_ENERGY[energy])


def _attributes(variable: Variable, root: Mapping[str, Any]) -> dict[str, Any]:
    attrs: dict[str, Any] = {}
    unit = units_of(variable, root)
    if unit is not None:
        attrs["units"] = unit
    attrs["long_name"] = variable.long_name
    note = variable.note
    if variable.units in _SHARED:
        note = _share(variable.units, root)
    if note:
        attrs["comment"] = note
    if variable.flags:
        attrs["flag_values"] = np.array([v for v, _ in variable.flags], dtype=variable.dtype)
        attrs["flag_meanings"] = " ".join(word for _, word in variable.flags)
    if variable.ancillary:
        attrs["ancillary_variables"] = variable.ancillary
    return attrs


_SHARED = ("@energy", "@entropy", "@susceptibility", "@moment", "@moment_slope")


def _share(rule: str, root: Mapping[str, Any]) -> str:
    """Per what a thermodynamic quantity is counted, and in which natural unit when reduced."""
    if root.get("units_system") != "reduced":
        whole = {"ion": "magnetic ions", "formula": "formula units", "site": "sites"}
        return f"per mole of {whole.get(str(root.get('per')), str(root.get('per')))}"
    natural = {
        "@energy": "in energy_unit",
        "@entropy": "in units of k_B",
        "@susceptibility": "in units of mu_B^2 per energy_unit",
        "@moment": "in units of mu_B",
        "@moment_slope": "in units of mu_B per unit of temperature",
    }
    return f"per site, {natural[rule]}"


def _root_attributes(kind: str, attrs: Mapping[str, Any]) -> dict[str, Any]:
    version = software_version()
    title = str(attrs.get("title") or "").strip()
    for own in _TITLES.values():  # attributes copied from the file this one was made from
        title = title.removeprefix(own).removeprefix(": ")
    root: dict[str, Any] = {
        "Conventions": CONVENTIONS,
        "content": kind,
        "content_version": CONTENT_VERSION,
        "title": f"{_TITLES[kind]}: {title}" if title else _TITLES[kind],
        "source": f"partita {version}",
        "history": f"{_now()} partita {version}: {kind}",
        "comment": _COMMENTS[kind],
        "references": "Curves are canonical sums over the levels; constants are CODATA 2022.",
    }
    for name, value in attrs.items():
        if name in root and name not in ("comment", "references", "history"):
            continue  # title is above; the rest is this file's own
        if name == "comment" and value in _COMMENTS.values():
            continue
        if name == "history":
            root["history"] = f"{value}\n{root['history']}"
            continue
        plain = value.item() if isinstance(value, np.generic) else value
        if isinstance(plain, bool) or not isinstance(plain, str | int | float):
            raise FileFormatError(
                f"attribute {name} of a {kind} file is a {type(plain).__name__}; netCDF can "
                "hold text and numbers only"
            )
        root[name] = plain
    return root


def software_version() -> str:
    """The installed version, or "0" when run from a tree that is not installed."""
    try:
        return metadata.version("partita")
    except metadata.PackageNotFoundError:
        return "0"


def _now() -> str:
    # SOURCE_DATE_EPOCH (reproducible-builds.org) lets two runs write identical files.
    epoch = os.environ.get("SOURCE_DATE_EPOCH", "")
    moment = datetime.fromtimestamp(int(epoch), UTC) if epoch.isdigit() else datetime.now(UTC)
    return moment.strftime("%Y-%m-%dT%H:%M:%SZ")


def _as_dtype(variable: Variable, data: Any) -> NDArray[Any]:
    array = np.asarray(data)
    if variable.dtype == "str":
        return np.array(array.tolist(), dtype=object)
    if array.dtype.kind not in "biuf":
        raise FileFormatError(f"variable {variable.name} is {array.dtype}, not numbers")
    with np.errstate(invalid="ignore"):
        cast = array.astype(variable.dtype)
    if variable.dtype[0] == "i" and not np.array_equal(cast, array):
        raise FileFormatError(f"variable {variable.name} must hold whole numbers")
    return cast


def validate(dataset: xr.Dataset, kind: str) -> None:
    """Hold a dataset against the registry; the first misfit is a FileFormatError."""
    if kind not in REGISTRY:
        raise FileFormatError(f"there is no kind of file {kind!r}; use {', '.join(REGISTRY)}")
    content = dataset.attrs.get("content")
    if content != kind or not str(dataset.attrs.get("Conventions", "")).startswith("CF-"):
        what = f"it holds {content!r}" if content else "it has no Partita attributes"
        raise FileFormatError(f"not a Partita {kind} file: {what}")
    for name in REQUIRED_ATTRS[kind]:
        if name not in dataset.attrs:
            raise FileFormatError(f"not a Partita {kind} file: attribute {name} is missing")
    energy_unit, system = dataset.attrs["energy_unit"], dataset.attrs.get("units_system")
    if energy_unit not in units.ENERGY_UNITS:
        raise FileFormatError(f"attribute energy_unit is {energy_unit!r}, which is unknown")
    if system is not None and system not in units.UNITS_SYSTEMS:
        raise FileFormatError(f"attribute units_system is {system!r}, which is unknown")
    for name, variable in REGISTRY[kind].items():
        if variable.required and name not in dataset.variables:
            raise FileFormatError(f"not a Partita {kind} file: variable {name} is missing")
    for key, found in dataset.variables.items():
        known = lookup(kind, str(key))
        if known is None:
            raise FileFormatError(f"not a Partita {kind} file: unknown variable {key}")
        _check(known, found, dataset.attrs)
    if kind in ("curves", "correlations", "magnetocaloric"):
        _check_axes(dataset)
    if kind == "levels":
        _check_sampled(dataset)


def _check(variable: Variable, found: xr.Variable, attrs: Mapping[str, Any]) -> None:
    name = variable.name
    if found.dims != variable.dims:
        raise FileFormatError(
            f"variable {name} has dimensions {found.dims}; it needs {variable.dims}"
        )
    if variable.dtype == "str":
        if found.dtype.kind not in "OUT":
            raise FileFormatError(f"variable {name} is {found.dtype}; it needs text")
        return
    if found.dtype != np.dtype(variable.dtype):
        raise FileFormatError(
            f"variable {name} is {found.dtype}; it needs {np.dtype(variable.dtype)}"
        )
    expected = units_of(variable, attrs)
    if found.attrs.get("units") != expected:
        raise FileFormatError(
            f"variable {name} is in {found.attrs.get('units')!r}; it needs {expected!r}"
        )
    if variable.finite and not np.all(np.isfinite(found.values)):
        raise FileFormatError(f"variable {name} holds values that are not finite")
    if variable.flags and not np.isin(found.values, [v for v, _ in variable.flags]).all():
        raise FileFormatError(f"variable {name} holds a value that is none of its flags")


def _check_sampled(dataset: xr.Dataset) -> None:
    """What only sampled levels have: all of it in their files, none of it in others."""
    sampled = dataset.attrs["method"] == "sampled"
    for name in SAMPLED_VARIABLES:
        if (name in dataset.variables) != sampled:
            what = "is missing" if sampled else "belongs to sampled levels, which these are not"
            raise FileFormatError(f"not a Partita levels file: variable {name} {what}")
    for name in SAMPLED_ATTRS if sampled else ():
        value = dataset.attrs.get(name)
        if not isinstance(value, int | float | np.integer | np.floating):
            raise FileFormatError(f"not a Partita levels file: attribute {name} is no number")


def _check_axes(dataset: xr.Dataset) -> None:
    for name in ("temperature", "field"):
        axis = dataset[name].values
        if axis.size == 0 or np.any(np.diff(axis) <= 0):
            raise FileFormatError(f"variable {name} must be strictly increasing and not empty")
    if dataset["temperature"].values[0] <= 0:
        raise FileFormatError("variable temperature must be above zero")


def convert_curves(dataset: xr.Dataset, units_system: str) -> xr.Dataset:
    """The same curves in "molar-si" or "molar-cgs"; reduced ones only stay as they are."""
    target = units.check_units_system(units_system)
    present = str(dataset.attrs["units_system"])
    if target == present:
        return dataset
    if "reduced" in (target, present):
        raise UnitsError(
            f"curves in {present} units cannot become {target}: compute them again from the "
            "levels with the units wanted"
        )
    sign = -1 if target == "molar-cgs" else 1
    converted = dataset.copy()
    converted.attrs = {**dataset.attrs, "units_system": target}
    for key in dataset.data_vars:
        variable = lookup(str(dataset.attrs["content"]), str(key))
        factor = {
            "@susceptibility": units.CHI_SI_PER_EMU,
            "@moment": units.MOMENT_SI_PER_EMU,
            "@moment_slope": units.MOMENT_SI_PER_EMU,
        }.get((variable.units or "") if variable else "")
        if variable is None or factor is None:
            continue
        array = dataset[key] * factor**sign
        array.attrs = {**dataset[key].attrs, "units": units_of(variable, converted.attrs)}
        converted[key] = array
    return converted


def to_storage_units(dataset: xr.Dataset) -> xr.Dataset:
    """The dataset as it goes to disk: curves in molar-cgs become molar-si, all else stays."""
    if dataset.attrs.get("units_system") == "molar-cgs":
        return convert_curves(dataset, "molar-si")
    return dataset
