"""Physical constants (CODATA 2022) and every conversion between units.

k_B, e, h, c and N_A are exact by the definition of the SI (2019). The Bohr magneton is the
CODATA 2022 value (Mohr, Newell, Taylor and Tiesinga, CODATA recommended values 2022).

The electromagnetic CGS conversions use μ0 = 4π·10⁻⁷ N/A² exactly, because "emu" is defined by
it; the measured μ0 differs by 1.3·10⁻¹⁰, far below anything that matters here. So
1 emu/mol of susceptibility = 4π·10⁻⁶ m³/mol, and 1 emu/mol of moment = 10⁻³ A m²/mol.
"""

from __future__ import annotations

import math
import re
from collections.abc import Mapping
from types import MappingProxyType
from typing import Literal

from thermo.errors import UnitsError

BOLTZMANN = 1.380649e-23  # J/K, exact
ELEMENTARY_CHARGE = 1.602176634e-19  # C, exact
PLANCK = 6.62607015e-34  # J s, exact
LIGHT_SPEED = 299_792_458.0  # m/s, exact
AVOGADRO = 6.02214076e23  # 1/mol, exact
BOHR_MAGNETON = 9.2740100657e-24  # J/T
VACUUM_PERMEABILITY = 1.25663706127e-6  # N/A^2, measured; conversions use MU_0_EMU
MU_0_EMU = 4e-7 * math.pi  # N/A^2, the value that defines the emu

GAS_CONSTANT = BOLTZMANN * AVOGADRO  # J/(mol K)
R = GAS_CONSTANT

MEV = ELEMENTARY_CHARGE * 1e-3  # J
WAVENUMBER = PLANCK * LIGHT_SPEED * 100  # J, of 1 cm^-1
GIGAHERTZ = PLANCK * 1e9  # J

#: k_B in meV/K and in cm^-1/K.
BOLTZMANN_MEV = BOLTZMANN / MEV
BOLTZMANN_WAVENUMBER = BOLTZMANN / WAVENUMBER
#: μ_B/k_B in K/T: the temperature of one Bohr magneton in one tesla.
BOHR_MAGNETON_KELVIN = BOHR_MAGNETON / BOLTZMANN

#: 1 emu/mol (= 1 cm3/mol Gaussian) of susceptibility in m3/mol.
CHI_SI_PER_EMU = 4e-6 * math.pi
#: 1 emu/mol of magnetic moment in A m2/mol.
MOMENT_SI_PER_EMU = 1e-3

#: N_A μ_B, one Bohr magneton per ion, in A m2/mol and in emu/mol.
MOLAR_BOHR_MAGNETON = AVOGADRO * BOHR_MAGNETON
MOLAR_BOHR_MAGNETON_EMU = MOLAR_BOHR_MAGNETON / MOMENT_SI_PER_EMU
#: N_A μ_B²/k_B in m3 K/mol and emu K/mol: the Curie constant of spin ½ with g = 2.
CURIE = AVOGADRO * MU_0_EMU * BOHR_MAGNETON**2 / BOLTZMANN
CURIE_EMU = CURIE / CHI_SI_PER_EMU
#: μ_eff = EFFECTIVE_MOMENT · sqrt(χT), in μ_B with χT in emu K/mol.
EFFECTIVE_MOMENT = math.sqrt(3 / CURIE_EMU)

EnergyUnit = Literal["K", "meV", "cm-1", "1"]
#: Units a model file may use; "1" is dimensionless, k_B = μ_B = 1.
ENERGY_UNITS: tuple[str, ...] = ("K", "meV", "cm-1", "1")
UNITS_SYSTEMS: tuple[str, ...] = ("molar-si", "molar-cgs", "reduced")

_KELVIN_PER: Mapping[str, float] = MappingProxyType(
    {
        "K": 1.0,
        "meV": MEV / BOLTZMANN,
        "cm-1": WAVENUMBER / BOLTZMANN,
        "GHz": GIGAHERTZ / BOLTZMANN,
        "T": BOHR_MAGNETON_KELVIN,
    }
)

#: quantity -> unit -> factor to the quantity's SI unit (first of each row).
_FACTORS: Mapping[str, Mapping[str, float]] = MappingProxyType(
    {
        "temperature": {"K": 1.0, "mK": 1e-3},
        "field": {"T": 1.0, "mT": 1e-3, "kOe": 0.1, "Oe": 1e-4, "kG": 0.1, "G": 1e-4},
        "susceptibility": {
            "m3/mol": 1.0,
            "emu/mol": CHI_SI_PER_EMU,
            "cm3/mol": CHI_SI_PER_EMU,
            "emu/(mol Oe)": CHI_SI_PER_EMU,
        },
        "chi_T": {
            "m3 K/mol": 1.0,
            "emu K/mol": CHI_SI_PER_EMU,
            "cm3 K/mol": CHI_SI_PER_EMU,
            "emu K/(mol Oe)": CHI_SI_PER_EMU,
        },
        "specific_heat": {"J/(mol K)": 1.0, "mJ/(mol K)": 1e-3, "R": GAS_CONSTANT},
        "specific_heat_over_T": {"J/(mol K2)": 1.0, "mJ/(mol K2)": 1e-3},
        "entropy": {"J/(mol K)": 1.0, "mJ/(mol K)": 1e-3, "R": GAS_CONSTANT},
        "magnetization": {
            "A m2/mol": 1.0,
            "J/(mol T)": 1.0,
            "emu/mol": MOMENT_SI_PER_EMU,
            "muB": MOLAR_BOHR_MAGNETON,
        },
    }
)
#: Every quantity a column of measured data may hold.
QUANTITIES: tuple[str, ...] = tuple(_FACTORS)


def kelvin_per(energy_unit: str) -> float:
    """Kelvin in one ``energy_unit`` (energy/k_B); 1 for "K" and for the dimensionless "1".

    Also knows "GHz" (h·ν/k_B) and "T" (μ_B·B/k_B). Raises UnitsError for any other name.
    """
    if energy_unit == "1":
        return 1.0
    try:
        return _KELVIN_PER[energy_unit]
    except (KeyError, TypeError):
        raise UnitsError(
            f"energy unit {energy_unit!r} is not known; use one of {', '.join(ENERGY_UNITS)}"
        ) from None


def tesla_to_energy(energy_unit: str) -> float:
    """μ_B·(1 T) in ``energy_unit``; 1 for the dimensionless "1", where μ_B = 1."""
    if energy_unit == "1":
        return 1.0
    return BOHR_MAGNETON_KELVIN / kelvin_per(energy_unit)


def convert_energy(value: float, from_unit: str, to_unit: str) -> float:
    """``value`` in another of "K", "meV", "cm-1", "GHz", "T" (as k_B T, E, hcν̃, hν, μ_B B).

    The dimensionless "1" converts only to itself; anything else is a UnitsError.
    """
    if (from_unit == "1") != (to_unit == "1"):
        raise UnitsError(
            f"an energy in {from_unit!r} cannot become {to_unit!r}: a dimensionless energy has "
            "no physical scale; state the model in K, meV or cm-1"
        )
    return value * (kelvin_per(from_unit) / kelvin_per(to_unit))


def quantity_units(quantity: str) -> tuple[str, ...]:
    """The units of a measured quantity, its SI unit first; other spellings of them will do."""
    return tuple(_factors(quantity))


def quantity_factor(quantity: str, unit: str, reduced: bool | None = None) -> float:
    """Factor from ``unit`` to the SI unit of a measured quantity.

    SI units: susceptibility m3/mol, chi_T m3 K/mol, specific_heat and entropy J/(mol K),
    specific_heat_over_T J/(mol K2), magnetization A m2/mol, temperature K, field T. "muB" and "R"
    are per ion (or formula unit) and per mole of the same. Fields in Oe and G are taken as B,
    1 Oe -> 10⁻⁴ T; a susceptibility in emu/(mol Oe) is one in emu/mol.
    ``reduced=True`` accepts only "1" (factor 1), ``False`` everything but it, ``None`` both.
    Raises UnitsError where the unit does not fit the quantity.
    """
    name = unit_name(quantity, unit, reduced)
    return 1.0 if name == "1" else _factors(quantity)[name]


def unit_name(quantity: str, unit: str, reduced: bool | None = None) -> str:
    """``unit`` as ``quantity_units`` spells it: "J mol^-1 K^-1" is "J/(mol K)".

    The order of factors, and how exponents, products and quotients are written, do not matter.
    All that follows a "/" is below the line: "J/mol K" is J/(mol K), while "cm3/mol K", which
    some mean as cm3 K/mol, fits nothing. ``reduced`` and errors as for ``quantity_factor``.
    """
    factors = _factors(quantity)
    if unit == "1" and reduced is not False:
        return unit
    if reduced:
        raise UnitsError(
            f'unit {unit!r} of {quantity} does not fit a dimensionless model; use "1", '
            "or state the model's energies in K, meV or cm-1"
        )
    if unit in factors:
        return unit
    parsed = _parse(unit)
    for name in factors:
        if parsed and parsed == _parse(name):
            return name
    known = ", ".join(f'"{name}"' for name in factors)
    extra = '; "1" belongs to dimensionless models' if unit == "1" else ""
    raise UnitsError(f"unit {unit!r} does not fit {quantity}{extra}; use one of {known}")


# Written another way: powers and minus signs, dots between factors, and the Bohr magneton.
_SPELLING = str.maketrans("⁻⁰¹²³⁴⁵⁶⁷⁸⁹−–·⋅×*µ", "-0123456789--    μ")
_BOHR = {"muB", "mu_B", "μB", "μ_B", "uB", "u_B", "mub"}
_TOKEN = re.compile(r"\s*(?:([/()])|([^\W\d]+)(?:\s*\^\s*)?(-?\d{1,3})?)")


def _parse(unit: str) -> dict[str, int] | None:
    """Base names with their powers, {"J": 1, "mol": -1, "K": -1}; None if it is no unit."""
    text = str(unit).replace("**", "^").translate(_SPELLING).strip()
    powers: dict[str, int] = {}
    outer: list[int] = []  # the side of the line on which each open bracket stands
    start, side, at = 1, 1, 0
    while at < len(text):
        found = _TOKEN.match(text, at)
        if found is None:
            return None
        at = found.end()
        mark, name, power = found.groups()
        if mark == "/":
            side = -start
        elif mark == "(":
            outer += [start, side]
            start = side
        elif mark == ")":
            if not outer:
                return None
            side, start = outer.pop(), outer.pop()
        else:
            name = "muB" if name in _BOHR else name
            powers[name] = powers.get(name, 0) + side * int(power or 1)
    return None if outer else {name: power for name, power in powers.items() if power}


_PREFIX = {"m": 1e-3, "u": 1e-6, "μ": 1e-6}


def molar_twin(quantity: str, unit: str) -> tuple[str, str, float] | None:
    """A unit per gram, per kilogram or of a whole sample as the unit per mole it stands for.

    Returns the molar unit's name, "g" (of an amount of 1 g or 1 kg) or "sample", and the factor
    that takes a value in ``unit`` to the molar unit times 1 g/mol (for "sample": times 1 mol).
    None where it is neither: "emu/g" is ("emu/mol", "g", 1), "uJ/K" ("J/(mol K)", "sample", 1e-6).
    """
    powers = _parse(unit)
    if not powers or "mol" in powers:
        return None
    per, factor = "sample", 1.0
    for name, grams in (("g", 1.0), ("kg", 1000.0)):
        if powers.get(name) == -1:
            del powers[name]
            per, factor = "g", 1 / grams
            break
    for name in list(powers):
        if len(name) > 1 and name[0] in _PREFIX and name[1:] == "J" and powers[name] == 1:
            factor *= _PREFIX[name[0]]
            powers["J"] = powers.pop(name)
    magnetic = quantity in ("susceptibility", "chi_T")
    if per == "sample" and magnetic and "emu" in powers and "Oe" not in powers:
        return None  # a moment that was not yet divided by its field, most likely
    powers["mol"] = -1
    for name in _factors(quantity):
        if _parse(name) == powers:
            return name, per, factor
    return None


def check_units_system(units_system: str) -> str:
    """The name itself, or a UnitsError that lists the three there are."""
    if units_system not in UNITS_SYSTEMS:
        raise UnitsError(
            f"units {units_system!r} are not known; use one of {', '.join(UNITS_SYSTEMS)}"
        )
    return units_system


def _factors(quantity: str) -> Mapping[str, float]:
    try:
        return _FACTORS[quantity]
    except (KeyError, TypeError):
        raise UnitsError(
            f"quantity {quantity!r} is not known; use one of {', '.join(_FACTORS)}"
        ) from None
