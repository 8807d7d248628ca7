"""Constants and conversions against the printed CODATA 2022 values and scipy's own tables."""

from __future__ import annotations

import math

import pytest
import scipy.constants as codata

from thermo import units
from thermo.errors import UnitsError

# CODATA 2022 and what follows from it, as printed to the digits given; last column: half a unit
# of the last printed digit.
PRINTED = [
    ("k_B in meV/K", units.BOLTZMANN_MEV, 0.08617333262, 5e-12),
    ("k_B in cm-1/K", units.BOLTZMANN_WAVENUMBER, 0.6950348005, 5e-11),
    ("K per meV", units.kelvin_per("meV"), 11.60451812, 5e-9),
    ("K per cm-1", units.kelvin_per("cm-1"), 1.438776878, 5e-10),
    ("K per GHz", units.kelvin_per("GHz"), 0.0479924307, 5e-11),
    ("mu_B/k_B in K/T", units.BOHR_MAGNETON_KELVIN, 0.6717138147, 5e-11),
    ("R", units.R, 8.314462618, 5e-10),
    ("R ln 2", units.R * math.log(2), 5.763146322, 5e-10),
    ("N_A mu_B in emu/mol", units.MOLAR_BOHR_MAGNETON_EMU, 5584.94, 5e-3),
    ("Curie constant in emu K/mol", units.CURIE_EMU, 0.3751480951, 5e-11),
    ("Curie constant in m3 K/mol", units.CURIE, 4.71425e-6, 5e-12),
    ("mu_eff over sqrt(chi T)", units.EFFECTIVE_MOMENT, 2.827869, 5e-7),
]


@pytest.mark.parametrize(("name", "value", "printed", "half_digit"), PRINTED)
def test_constant_agrees_with_codata_2022(
    name: str, value: float, printed: float, half_digit: float
) -> None:
    assert abs(value - printed) <= half_digit, name


@pytest.mark.parametrize(
    ("ours", "theirs"),
    [
        (units.BOLTZMANN, "Boltzmann constant"),
        (units.PLANCK, "Planck constant"),
        (units.LIGHT_SPEED, "speed of light in vacuum"),
        (units.AVOGADRO, "Avogadro constant"),
        (units.ELEMENTARY_CHARGE, "elementary charge"),
    ],
)
def test_exact_constants_are_those_of_the_si(ours: float, theirs: str) -> None:
    assert ours == codata.value(theirs)


def test_measured_constants_match_scipy_within_either_edition() -> None:
    # scipy carries CODATA 2018 or 2022 by its version; the two differ by 2e-9 relative in μ_B.
    assert pytest.approx(codata.value("Bohr magneton"), rel=3e-9) == units.BOHR_MAGNETON
    assert (
        pytest.approx(codata.value("vacuum mag. permeability"), rel=1e-9)
        == units.VACUUM_PERMEABILITY
    )
    assert pytest.approx(units.VACUUM_PERMEABILITY, rel=2e-10) == units.MU_0_EMU


def test_zeeman_energy_in_every_energy_unit() -> None:
    assert units.tesla_to_energy("1") == 1.0
    assert units.tesla_to_energy("K") == pytest.approx(0.6717138147, abs=5e-11)
    # CODATA 2022: μ_B = 5.7883817982e-5 eV/T = 46.686447719 m^-1/T.
    assert units.tesla_to_energy("meV") == pytest.approx(5.7883817982e-2, rel=1e-10)
    assert units.tesla_to_energy("cm-1") == pytest.approx(0.46686447719, rel=1e-10)


@pytest.mark.parametrize("unit", ["K", "meV", "cm-1", "GHz", "T"])
def test_energies_convert_there_and_back(unit: str) -> None:
    there = units.convert_energy(3.7, unit, "meV")
    assert units.convert_energy(there, "meV", unit) == pytest.approx(3.7, rel=1e-15)


def test_dimensionless_energy_stays_dimensionless() -> None:
    assert units.convert_energy(2.0, "1", "1") == 2.0
    with pytest.raises(UnitsError, match="no physical scale"):
        units.convert_energy(2.0, "1", "K")


@pytest.mark.parametrize(
    ("quantity", "unit", "factor"),
    [
        ("susceptibility", "emu/mol", 4e-6 * math.pi),
        ("susceptibility", "cm3/mol", 4e-6 * math.pi),
        ("susceptibility", "m3/mol", 1.0),
        ("chi_T", "emu K/mol", 4e-6 * math.pi),
        ("chi_T", "cm3 K/mol", 4e-6 * math.pi),
        ("specific_heat", "mJ/(mol K)", 1e-3),
        ("specific_heat", "R", 8.31446261815324),
        ("specific_heat_over_T", "mJ/(mol K2)", 1e-3),
        ("magnetization", "muB", 5.58493940253),
        ("magnetization", "emu/mol", 1e-3),
        ("temperature", "mK", 1e-3),
        ("field", "Oe", 1e-4),
        ("field", "kOe", 0.1),
        ("specific_heat", "1", 1.0),
    ],
)
def test_measured_units_to_si(quantity: str, unit: str, factor: float) -> None:
    assert units.quantity_factor(quantity, unit) == pytest.approx(factor, rel=1e-11)


SPELLINGS = {
    ("susceptibility", "cm3/mol"): ["cm3 mol-1", "mol-1 cm3", "cm³/mol", "cm^3 mol^-1"],
    ("susceptibility", "emu/mol"): ["emu mol-1", "emu mol**-1", "emu·mol⁻¹"],
    ("susceptibility", "m3/mol"): ["m3 mol-1", "m^3/mol"],
    ("susceptibility", "emu/(mol Oe)"): ["emu/mol/Oe", "emu/mol Oe", "emu mol-1 Oe-1"],
    ("chi_T", "cm3 K/mol"): ["cm3 K mol-1", "cm3 mol-1 K", "K cm³/mol", "(cm3/mol) K"],
    ("chi_T", "emu K/mol"): ["emu K mol-1", "emu·K·mol−1"],
    ("specific_heat", "J/(mol K)"): [
        "J mol-1 K-1", "J K-1 mol-1", "J/mol/K", "J/mol K", "J/(K*mol)", "J K⁻¹ mol⁻¹",
    ],
    ("specific_heat_over_T", "mJ/(mol K2)"): ["mJ mol-1 K-2", "mJ/mol K^2", "mJ/mol/K/K"],
    ("magnetization", "A m2/mol"): ["A m2 mol-1", "A m^2 mol^-1"],
    ("magnetization", "J/(mol T)"): ["J T-1 mol-1"],
    ("magnetization", "muB"): ["μB", "µB", "mu_B", "μ_B"],
}  # fmt: skip


@pytest.mark.parametrize(
    ("quantity", "name", "spelling"),
    [(*key, spelling) for key, spellings in SPELLINGS.items() for spelling in spellings],
)
def test_a_unit_however_it_is_spelt(quantity: str, name: str, spelling: str) -> None:
    assert units.unit_name(quantity, spelling) == name
    assert units.quantity_factor(quantity, spelling) == units.quantity_factor(quantity, name)


@pytest.mark.parametrize("unit", ["cm3/mol K", "cm3 K/(mol", "cm3 K mol-1)", "cm3 K", "()",
                                  "", "mol/(cm3 K)", "cm3 K mol-999999999999", "1e3"])  # fmt: skip
def test_what_is_no_unit_of_chi_T(unit: str) -> None:
    with pytest.raises(UnitsError, match="does not fit chi_T; use one of"):
        units.quantity_factor("chi_T", unit)


def test_units_of_one_quantity_are_all_told_apart() -> None:
    for quantity in units.QUANTITIES:
        for unit in units.quantity_units(quantity):
            assert units.unit_name(quantity, unit) == unit
            parsed = units._parse(unit)
            assert sum(units._parse(u) == parsed for u in units.quantity_units(quantity)) == 1


@pytest.mark.parametrize(
    ("quantity", "unit", "reduced", "says"),
    [
        ("susceptibility", "J/(mol K)", None, "does not fit susceptibility"),
        ("temperature", "C", None, 'use one of "K", "mK"'),
        ("specific_heat", "1", False, "belongs to dimensionless models"),
        ("specific_heat", "R", True, "does not fit a dimensionless model"),
        ("colour", "K", None, "quantity 'colour' is not known"),
    ],
)
def test_unit_that_does_not_fit(quantity: str, unit: str, reduced: bool | None, says: str) -> None:
    with pytest.raises(UnitsError, match=says):
        units.quantity_factor(quantity, unit, reduced=reduced)


def test_unknown_names_are_told() -> None:
    with pytest.raises(UnitsError, match="energy unit 'eV'"):
        units.kelvin_per("eV")
    with pytest.raises(UnitsError, match="molar-si"):
        units.check_units_system("imperial")
