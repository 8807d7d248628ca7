"""Physical units, end to end: a textbook compound, Curie constants, entropies, saturation.

Numbers are CODATA 2022 and printed values, written out here and not taken from the package.
"""

from __future__ import annotations

import math
from functools import cache

import numpy as np
import pytest
from scipy.optimize import minimize_scalar

import thermo
from tests import references as ref
from tests.strategies import Cluster, ring, uniform


@cache
def dimer(gap, unit="cm-1", g=2.0):
    """Levels of two spins 1/2 with this singlet-triplet gap."""
    cluster = uniform([0.5, 0.5], [(0, 1)], value=gap, energy_unit=unit, g=g)
    return thermo.solve(thermo.read_model(cluster.mapping()), method="full")


def at(levels, temperature, name, field=0.0, **how):
    """One number of one curve."""
    data = thermo.curves(levels, temperature=[temperature], field=[field], **how)
    return float(data[name].values[0, 0])


def hump(levels, low, high, name="susceptibility", **how):
    """The temperature of a curve's maximum."""
    found = minimize_scalar(
        lambda t: -at(levels, t, name, **how),
        bounds=(low, high),
        method="bounded",
        options={"xatol": 1e-6},
    )
    return float(found.x)


@pytest.mark.parametrize("gap", ref.COPPER_ACETATE_GAPS)
def test_copper_acetate(gap):
    """Copper(II) acetate monohydrate: Bleaney and Bowers, Proc. R. Soc. A 214, 451 (1952), with
    2J = 286 (susceptibility) to 296 cm-1 (later work) has its hump near 255 K (from memory)."""
    found = hump(dimer(gap), 100.0, 500.0, units="molar-cgs")
    # Exact: kT = 0.62361801 gap at the maximum; 1 cm-1 = 1.438776878 K (CODATA 2022).
    want = gap * ref.KELVIN_PER_WAVENUMBER * ref.DIMER_CHI_MAX_AT
    assert found == pytest.approx(want, rel=1e-6)
    # The gap from the hump is only as good as "near 255 K": within 5 %.
    assert found == pytest.approx(ref.COPPER_ACETATE_HUMP, rel=0.05)


def test_copper_acetate_by_the_printed_formula():
    """chi per mole of copper = (N g^2 mu_B^2/kT) / (3 + exp(gap/kT)), the Bleaney-Bowers
    equation with N mu_B^2/k = 0.3751480951 emu K/mol (1952; exact)."""
    gap, g = 296.0, 2.16
    for t in [60.0, 255.0, 300.0, 1000.0]:
        x = gap * ref.KELVIN_PER_WAVENUMBER / t
        want = ref.CURIE_HALF_EMU * g**2 / t / (3 + math.exp(x))
        got = at(dimer(gap, g=g), t, "susceptibility", units="molar-cgs")
        # Ten printed digits of the conversion, times x ~ 7 in the exponent.
        assert got == pytest.approx(want, rel=4e-9)
        both = at(dimer(gap, g=g), t, "susceptibility", units="molar-si")
        assert both == pytest.approx(4e-6 * math.pi * got, rel=1e-12)
    # The room-temperature moment of the acetate is about 1.4 mu_B per copper (from memory).
    chi_t = 300.0 * at(dimer(gap, g=g), 300.0, "susceptibility", units="molar-cgs")
    assert 2.827869 * math.sqrt(chi_t) == pytest.approx(1.40, abs=0.03)


@pytest.mark.parametrize(
    ("unit", "kelvin"),
    [("K", 1.0), ("meV", ref.KELVIN_PER_MEV), ("cm-1", ref.KELVIN_PER_WAVENUMBER)],
)
def test_energy_units(unit, kelvin):
    """One gap of 100 K written in each unit gives one curve (CODATA 2022)."""
    levels = dimer(100.0 / kelvin, unit)
    for t in [20.0, 62.361801, 300.0]:
        x = 100.0 / t
        heat = ref.GAS_CONSTANT * 3 * x**2 * math.exp(x) / (3 + math.exp(x)) ** 2 / 2
        chi = ref.CURIE_HALF_SI * 4 / t / (3 + math.exp(x))
        assert at(levels, t, "specific_heat") == pytest.approx(heat, rel=5e-9)
        assert at(levels, t, "susceptibility") == pytest.approx(chi, rel=2e-6)  # six digits
        energy = ref.GAS_CONSTANT * 100.0 * (0.25 - 1 / (1 + 3 * math.exp(-x))) / 2
        assert at(levels, t, "internal_energy") == pytest.approx(energy, rel=5e-9)


@pytest.mark.parametrize("spin", [0.5, 1.0, 1.5, 2.0, 2.5])
def test_curie_constants(spin):
    """chi T -> (N g^2 mu_B^2/3k) S(S+1) when hot: 0.3751480951 emu K/mol for spin 1/2, g = 2
    (CODATA 2022); the well-known 0.375, 1.00, 1.88, 3.00, 4.38."""
    cluster = uniform([spin, spin], [(0, 1)], value=1e-6, energy_unit="K", g=2.0)
    levels = thermo.solve(thermo.read_model(cluster.mapping()), method="full")
    want = ref.CURIE_HALF_EMU * spin * (spin + 1) / 0.75
    chi_t = 100.0 * at(levels, 100.0, "susceptibility", units="molar-cgs")
    assert chi_t == pytest.approx(want, rel=1e-7)  # a Weiss temperature of 1e-6 K in 100 K
    chi_t = 100.0 * at(levels, 100.0, "susceptibility", units="molar-si")
    assert chi_t == pytest.approx(ref.CURIE_HALF_SI * spin * (spin + 1) / 0.75, rel=1e-6)
    # R ln(2S+1), and saturation at 2 S mu_B: N_A mu_B = 5584.94 emu/mol.
    entropy = at(levels, 100.0, "entropy")
    assert entropy == pytest.approx(ref.GAS_CONSTANT * math.log(2 * spin + 1), rel=1e-9)
    moment = at(levels, 0.1, "magnetization", field=20.0, units="molar-cgs")
    assert moment == pytest.approx(ref.AVOGADRO_MU_B_EMU * 2 * spin, rel=2e-6)  # six digits
    moment = at(levels, 0.1, "magnetization", field=20.0, units="molar-si")
    assert moment == pytest.approx(ref.AVOGADRO_MU_B_EMU * 2e-3 * spin, rel=2e-6)


def test_brillouin_function():
    """A free spin 3/2 in a field: M = g mu_B S B_S(g mu_B S B/kT) (Brillouin 1927, exact), with
    mu_B/k = 0.6717138147 K/T."""
    cluster = Cluster((1.5, 1.5), ((0, 1, "J", "isotropic"),), {"J": 0.0}, g=1.9, energy_unit="K")
    levels = thermo.solve(thermo.read_model(cluster.mapping()), method="full")
    for t, field in [(2.0, 1.0), (2.0, 7.0), (10.0, -5.0)]:
        y = 1.9 * ref.MU_B_OVER_K * field / t
        m = np.arange(-1.5, 2)
        p = np.exp(m * y) / np.exp(m * y).sum()
        want = ref.AVOGADRO_MU_B_EMU * 1.9 * float(p @ m)
        got = at(levels, t, "magnetization", field=field, units="molar-cgs")
        assert got == pytest.approx(want, rel=2e-6)
        slope = float(p @ m**2 - (p @ m) ** 2) * ref.CURIE_HALF_EMU * 1.9**2 / t
        chi = at(levels, t, "susceptibility", field=field, units="molar-cgs")
        assert chi == pytest.approx(slope, rel=1e-9)


def test_chain_hump_in_kelvin():
    """Bonner and Fisher, Phys. Rev. 135, A640 (1964): the hump of a uniform chain lies at
    T = 0.641 J (Johnston et al. 2000, from memory), read off a 12-ring in K; and the number
    chi_max T_max = 0.0941579 N g^2 mu_B^2/k holds whatever J is (same source, from memory)."""
    cluster = ring(12, value=70.2, energy_unit="K", g=2.1)
    levels = thermo.solve(thermo.read_model(cluster.mapping()), method="full")
    t = hump(levels, 20.0, 90.0, units="molar-cgs")
    assert t == pytest.approx(70.2 * ref.CHAIN_CHI_MAX_AT, rel=2e-3)
    product = t * at(levels, t, "susceptibility", units="molar-cgs")
    # N mu_B^2/k is four times the spin-1/2, g = 2 Curie constant over g^2 = 4: 0.3751.
    assert product == pytest.approx(4 * ref.CURIE_HALF_EMU / 4 * 2.1**2 * 0.0941579, rel=2e-3)


def test_entropy_is_the_area_under_c_over_t():
    """S(T2) - S(T1) = integral of C/T (second law), J/(mol K), and R ln 2 in all: 5.763146322."""
    levels = dimer(50.0, "K")
    logs = np.linspace(math.log(0.5), math.log(5e4), 4001)
    data = thermo.curves(levels, temperature=np.exp(logs))
    heat = data["specific_heat"].values[:, 0]
    area = float(np.trapezoid(heat, logs))
    entropy = data["entropy"].values[:, 0]
    # The trapezium rule on a smooth bump that ends flat converges faster than any power.
    assert area == pytest.approx(entropy[-1] - entropy[0], rel=1e-9)
    assert entropy[-1] == pytest.approx(ref.GAS_CONSTANT_LN2, rel=1e-6)


def test_thermodynamic_identities_in_field():
    """F = U - TS, S = -dF/dT, M = -dF/dB, chi = dM/dB, C = T dS/dT (thermodynamics), in SI."""
    cluster = uniform([1.0, 0.5, 1.0], [(0, 1), (1, 2)], "xy", 12.0, energy_unit="K", g=2.2)
    levels = thermo.solve(thermo.read_model(cluster.mapping()), method="full")
    t, field, step = 6.0, 4.0, 1e-3
    data = thermo.curves(
        levels, temperature=[t - step, t, t + step], field=[field - step, field, field + step]
    )
    value = {name: data[name].values for name in data.data_vars}

    def slope(name, axis):
        grid = np.take(value[name], 1, axis=1 - axis)
        return (grid[2] - grid[0]) / (2 * step)

    def middle(name):
        return value[name][1, 1]

    assert middle("free_energy") == pytest.approx(
        middle("internal_energy") - t * middle("entropy"), rel=1e-12
    )
    # Central differences of step 1e-3: relative error about (1e-3/6)^2.
    assert -slope("free_energy", 0) == pytest.approx(middle("entropy"), rel=1e-6)
    assert t * slope("entropy", 0) == pytest.approx(middle("specific_heat"), rel=1e-6)
    assert -slope("free_energy", 1) == pytest.approx(middle("magnetization"), rel=1e-6)
    # SI susceptibility is mu_0 dM/dB per mole, mu_0 = 4 pi 1e-7.
    assert 4e-7 * math.pi * slope("magnetization", 1) == pytest.approx(
        middle("susceptibility"), rel=1e-6
    )
