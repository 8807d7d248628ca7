"""What may be drawn or printed of curves: symbols, labels, and the quantities derived from them."""

from __future__ import annotations

import re
from collections.abc import Iterable, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
import xarray as xr
from numpy.typing import NDArray

from thermo.errors import UnavailableError
from thermo.units import kelvin_per

Array = NDArray[np.float64]

SYMBOLS = {
    "temperature": "T",
    "field": "B",
    "specific_heat": "C",
    "specific_heat_over_T": "C/T",
    "entropy": "S",
    "susceptibility": r"\chi",
    "chi_T": r"\chi T",
    "magnetization": "M",
    "internal_energy": "U",
    "free_energy": "F",
    **{f"susceptibility_{ab}": rf"\chi_{{{ab}}}" for ab in ("xx", "yy", "zz", "xy", "xz", "yz")},
    **{f"magnetization_{a}": f"M_{a}" for a in "xyz"},
}
#: derived quantity -> (stored one, power of T it is multiplied by)
DERIVED = {"chi_T": ("susceptibility", 1), "specific_heat_over_T": ("specific_heat", -1)}
#: All that `what` may name for curves, in the order they are drawn.
CURVE_QUANTITIES = tuple(name for name in SYMBOLS if name not in ("temperature", "field"))
MAGNETIC = ("susceptibility", "chi_T", "magnetization")
DEFAULT_PANELS = ("specific_heat", "entropy", "susceptibility", "chi_T")


@dataclass(frozen=True)
class Quantity:
    """A quantity on the (temperature, field) grid with its symbol and unit, ready to draw."""

    name: str
    values: Array
    error: Array | None
    unit: str

    def label(self, factor_power: int = 0) -> str:
        """Axis label; the numbers drawn are the values over 10**factor_power."""
        return axis_label(SYMBOLS[self.name], self.unit, factor_power)


def quantity(curves: xr.Dataset, name: str) -> Quantity:
    """A stored or derived quantity of a curves dataset; UnavailableError where it has none."""
    stored, power = DERIVED.get(name, (name, 0))
    if name not in CURVE_QUANTITIES:
        raise UnavailableError(
            f"{name!r} is no quantity of curves; choose from {', '.join(CURVE_QUANTITIES)}"
        )
    if stored not in curves:
        why = curves.attrs.get("unavailable")
        raise UnavailableError(
            f"the curves hold no {stored}" + (f": {why}" if why else "; compute them with it")
        )
    factor = np.ones((1, 1))
    if power:
        temperature = curves["temperature"].values[:, None]
        if curves.attrs["units_system"] == "reduced":
            temperature = temperature / kelvin_per(str(curves.attrs["energy_unit"]))
        factor = temperature**power
    wrong = f"{stored}_standard_error"
    error = curves[wrong].values * factor if wrong in curves else None
    return Quantity(name, curves[stored].values * factor, error, unit_of(curves, name))


def unit_of(curves: xr.Dataset, name: str) -> str:
    """The unit of a column of curves as text; natural units named where it is reduced."""
    if name in ("temperature", "field"):
        return str(curves[name].attrs["units"])
    stored, power = DERIVED.get(name, (name, 0))
    energy = str(curves.attrs["energy_unit"])
    if curves.attrs["units_system"] != "reduced":
        unit = str(curves[stored].attrs["units"])
        if power:
            return {"chi_T": unit.replace(" mol-1", " K mol-1")}.get(name, "J mol-1 K-2")
        return unit
    if energy == "1":
        return "1"
    moment = "muB2"
    if "_" in stored and stored.split("_")[0] in MAGNETIC:  # a component has the whole's unit
        name = stored.split("_")[0]
    return {
        "internal_energy": energy,
        "free_energy": energy,
        "entropy": "kB",
        "specific_heat": "kB",
        "specific_heat_over_T": f"kB {_inverse(energy)}",
        "susceptibility": f"{moment} {_inverse(energy)}",
        "chi_T": moment,
        "magnetization": "muB",
    }[name]


def _inverse(energy: str) -> str:
    return {"K": "K-1", "meV": "meV-1", "cm-1": "cm"}[energy]


_WHOLE = {"ion": "ions", "formula": "formula units"}
_ONE = {"ion": "per ion", "formula": "per formula unit"}
_NAMES = {"muB": r"\mu_\mathrm{B}", "kB": r"k_\mathrm{B}", "R": "R"}


def pretty_unit(unit: str) -> str:
    """A unit such as "J mol-1 K-1" or "mJ/(mol K2)" as mathtext with negative powers."""
    above, _, below = unit.partition("/")
    parts = [(token, 1) for token in above.split()]
    parts += [(token, -1) for token in below.strip("()").split()]
    shown = []
    for token, sign in parts:
        match = re.fullmatch(r"([A-Za-zµμ]+)(-?\d+)?", token)
        if match is None:
            shown.append(token)
            continue
        name = _NAMES.get(match[1], rf"\mathrm{{{match[1]}}}")
        power = sign * int(match[2] or 1)
        shown.append(f"${name}$" if power == 1 else f"${name}^{{{power}}}$")
    return " ".join(shown)


def axis_label(symbol: str, unit: str, factor_power: int = 0) -> str:
    """An axis label "symbol (unit)", with a power of ten before the unit where it is scaled."""
    factor = f"$10^{{{factor_power}}}$ " if factor_power else ""
    inside = factor + (pretty_unit(unit) if unit != "1" else "")
    return f"${symbol}$ ({inside.strip()})" if inside else f"${symbol}$"


def power_of_thousand(arrays: Iterable[Any]) -> int:
    """The power of ten, a multiple of 3, to take out of an axis; 0 while numbers are handy."""
    finite = [np.abs(a)[np.isfinite(a)] for a in (np.asarray(x, dtype=float) for x in arrays)]
    top = max((float(a.max()) for a in finite if a.size), default=0.0)
    if top == 0 or 0.01 <= top < 1e4:
        return 0
    return int(3 * np.floor(np.log10(top) / 3))


def names(what: str | Sequence[str] | None) -> list[str]:
    """The names of a list, or of text with commas between them; none for None."""
    if what is None:
        return []
    parts = what.split(",") if isinstance(what, str) else what
    return list(dict.fromkeys(part.strip() for part in parts if part.strip()))


def share(attrs: Any) -> str:
    """Per what the curves are counted: "per mole of ions", "per site"."""
    if attrs.get("units_system") == "reduced":
        return "per site"
    return f"per mole of {_WHOLE.get(str(attrs.get('per')), str(attrs.get('per')))}"


def per_note(attrs: Any) -> str:
    """What to know of all curves of a picture: per what, natural units, the field's direction."""
    text = share(attrs)
    if attrs.get("units_system") == "reduced" and attrs.get("energy_unit") == "1":
        text += ", $k_B = \\mu_B = 1$"
    if direction := direction_note(attrs):
        text += f", {direction}"
    if "error_unavailable" in attrs:
        return text + ", sampled by one vector: no error bars"
    return text + (", sampled: bands are standard errors" if "standard_errors" in attrs else "")


def direction_note(attrs: Any) -> str:
    """Where the field points, "B ∥ z" or "powder"; nothing where all directions are alike."""
    axis = str(attrs.get("field_direction", "any"))
    return {"any": "", "powder": "powder"}.get(axis, f"B \u2225 {axis}")


def along_z(attrs: Any) -> bool:
    """Whether field and moment are along z because the model is anisotropic."""
    return bool(attrs.get("field_direction") == "z")


def dataset_share(fit: xr.Dataset, index: int) -> str:
    """Per what a data set of a fit is counted; "" where the file does not say."""
    per = dataset_per(fit, index)
    if not per or fit.attrs.get("energy_unit") == "1":
        return "per site" if per == "ion" else _ONE.get(per, "")
    unit = str(fit["dataset_units"].values[index])
    return f"per mole of {_WHOLE[per]}" if unit == "R" or "mol" in unit else _ONE[per]


def dataset_per(fit: xr.Dataset, index: int) -> str:
    """A fit's ``dataset_per`` ("ion" or "formula"); "" where the file does not say."""
    per = str(fit["dataset_per"].values[index]) if "dataset_per" in fit else ""
    return per if per in _ONE else ""


def by_scatter(fit: xr.Dataset) -> bool:
    """Whether no uncertainties were stated, so that the residuals' scatter stands in for them."""
    return fit.attrs.get("error_basis") == "scatter"
