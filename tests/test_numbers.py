"""Numbers, units and labels as people read them."""

from __future__ import annotations

import numpy as np
import pytest

import tests.report_samples as samples
from thermo import units, variables
from thermo.report.numbers import duration, grouped, plain, size, typeset, with_uncertainty
from thermo.report.quantities import (
    axis_label,
    power_of_thousand,
    pretty_unit,
    quantity,
)

TEMPERATURE = np.geomspace(2, 100, 12)
FIELD = np.array([0.0, 10.0, 20.0])


@pytest.mark.parametrize(
    ("value", "error", "text"),
    [
        (70.1234, 0.351, "70.12(35)"),
        (2.1014, 0.00396, "2.1014(40)"),
        (1.0, 0.0996, "1.00(10)"),
        (3.14159, 1.26, "3.1(1.3)"),
        (1234.0, 123.0, "1230(120)"),
        (0.0001234, 0.0000056, "1.234(56)×10⁻⁴"),
        (-6.1e-5, 3e-6, "-6.10(30)×10⁻⁵"),
        (0.0, 0.02, "0.000(20)"),
        (12.0, 30.0, "12(30)"),
        (5.0e7, 2.0e5, "5.000(20)×10⁷"),
        (70.1234, float("nan"), "70.1234"),
        (70.1234, 0.0, "70.1234"),
        (1e-9, 0.0, "1×10⁻⁹"),
        (float("nan"), 1.0, "nan"),
    ],
)
def test_value_with_its_uncertainty(value: float, error: float, text: str) -> None:
    assert with_uncertainty(value, error) == text


def test_sizes_durations_and_counts() -> None:
    assert [size(n) for n in (0, 1023, 1536, 38 * 2**30)] == ["0 B", "1023 B", "1.5 KiB", "38 GiB"]
    assert [size(n) for n in (2.0**59, 2.0**60, 7e31)] == [
        "512 PiB", "far beyond any machine", "far beyond any machine",
    ]  # fmt: skip
    assert [duration(s) for s in (0.01, 12.3, 118, 7300, 3e5, 1e9, 3e10, 4e10, 2e37)] == [
        "under 1 s", "about 12 s", "about 2.0 min", "about 2.0 h", "about 3 days",
        "about 32 years", "about 951 years", "over 1000 years", "over 1000 years",
    ]  # fmt: skip
    assert duration(float("inf")) == "unknown"
    assert grouped(1048576) == "1\u202f048\u202f576"
    assert grouped(2**80) == "1.209×10²⁴"
    assert plain(0.25) == "0.25"


@pytest.mark.parametrize(
    ("text", "shown"),
    [
        ("-42.00(16) cm-1", "−42.00(16) cm⁻¹"),
        ("-5.60(69)×10⁻⁵ emu/mol ion", "−5.60(69)×10⁻⁵ emu/mol ion"),
        ("1.5(2) m3 K/mol", "1.5(2) m³ K/mol"),
        ("2.1(1) mJ/(mol K2)", "2.1(1) mJ/(mol K²)"),
        ("0.1 muB", "0.1 μ_B"),
    ],
)
def test_numbers_and_units_as_text_sets_them(text: str, shown: str) -> None:
    assert typeset(text) == shown


def test_units_and_labels() -> None:
    assert pretty_unit("J mol-1 K-1") == r"$\mathrm{J}$ $\mathrm{mol}^{-1}$ $\mathrm{K}^{-1}$"
    assert pretty_unit("mJ/(mol K2)") == r"$\mathrm{mJ}$ $\mathrm{mol}^{-1}$ $\mathrm{K}^{-2}$"
    assert pretty_unit("muB") == r"$\mu_\mathrm{B}$"
    assert axis_label("T", "1") == "$T$"
    assert axis_label("T", "K") == r"$T$ ($\mathrm{K}$)"
    assert power_of_thousand([[1e-7], [np.nan]]) == -9
    assert power_of_thousand([[0.02, 3.0]]) == 0


def test_derived_quantities() -> None:
    curves = samples.curves(TEMPERATURE, FIELD, errors=True)
    chi_t = quantity(curves, "chi_T")
    np.testing.assert_allclose(chi_t.values, curves["susceptibility"] * TEMPERATURE[:, None])
    assert chi_t.unit == "m3 K mol-1"
    assert chi_t.error is not None
    assert quantity(curves, "specific_heat_over_T").unit == "J mol-1 K-2"
    cgs = variables.convert_curves(curves, "molar-cgs")
    assert quantity(cgs, "chi_T").unit == "emu K mol-1"
    # Reduced, in meV: k_B T in meV, so that χT is in μ_B².
    reduced = samples.reduced_curves("meV")
    expected = reduced["susceptibility"] * reduced["temperature"] / units.kelvin_per("meV")
    np.testing.assert_allclose(quantity(reduced, "chi_T").values, expected)
