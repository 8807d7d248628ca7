"""Pictures, CSV and tables: what they show, in which units, and that they are made whole."""

from __future__ import annotations

import csv
import io
import os
from pathlib import Path
from types import SimpleNamespace
from typing import Any

import numpy as np
import pytest
from rich.console import Console

import tests.report_samples as samples
from thermo import units, variables
from thermo.errors import FileFormatError, UnavailableError, UnitsError
from thermo.report import export_csv, plot, print_curves, print_fit, print_plan
from thermo.report.numbers import duration, grouped, plain, size, with_uncertainty
from thermo.report.quantities import axis_label, power_of_thousand, pretty_unit, quantity

TEMPERATURE = np.geomspace(2, 100, 12)
FIELD = np.array([0.0, 10.0, 20.0])


def printed(show: Any, subject: Any, width: int = 100) -> str:
    stream = io.StringIO()
    show(subject, Console(file=stream, width=width))
    return stream.getvalue()


def table(dataset: Any, **options: Any) -> list[dict[str, str]]:
    stream = io.StringIO()
    export_csv(dataset, stream, **options)
    return list(csv.DictReader(io.StringIO(stream.getvalue())))


# ---------------------------------------------------------------- numbers


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
    assert [duration(s) for s in (0.01, 12.3, 118, 7300, 3e5, 1e9, float("inf"))] == [
        "under 1 s", "about 12 s", "about 2.0 min", "about 2.0 h", "about 3 days",
        "about 32 years", "unknown",
    ]  # fmt: skip
    assert grouped(1048576) == "1\u202f048\u202f576"
    assert grouped(2**80) == "1.209×10²⁴"
    assert plain(0.25) == "0.25"


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


# ---------------------------------------------------------------- pictures

PICTURES: dict[str, Any] = {
    "one field": lambda: samples.curves(TEMPERATURE, FIELD[:1]),
    "three fields": lambda: samples.curves(TEMPERATURE, FIELD, errors=True),
    "colour bar": lambda: samples.curves(TEMPERATURE[:4], np.linspace(0, 30, 12)),
    "no moment": lambda: samples.curves(TEMPERATURE, FIELD[:1], magnetic=False),
    "one temperature": lambda: samples.curves(TEMPERATURE[:1], FIELD),
    "reduced": samples.reduced_curves,
    "levels by S": lambda: samples.levels(6),
    "levels by M": lambda: samples.levels(5, "magnetic_number"),
    "levels unresolved": lambda: samples.levels(5, "none"),
    "fit": samples.fit,
    "fit without uncertainties": lambda: samples.fit(smooth=False, uncertainties=False),
    "fit in several fields": lambda: samples.fit(several_fields=True),
}
MAGIC = {".png": b"\x89PNG", ".svg": b"<?xml", ".pdf": b"%PDF"}


@pytest.mark.parametrize("name", list(PICTURES))
def test_every_dataset_can_be_drawn(name: str, tmp_path: Path) -> None:
    path = tmp_path / "picture.svg"
    plot(PICTURES[name](), path)
    assert path.stat().st_size > 5000
    assert os.listdir(tmp_path) == ["picture.svg"]


@pytest.mark.parametrize("suffix", list(MAGIC))
def test_picture_formats_and_size(suffix: str, tmp_path: Path) -> None:
    path = tmp_path / f"p{suffix}"
    plot(samples.curves(TEMPERATURE, FIELD), path, what="specific_heat", title="made-up")
    assert path.read_bytes().startswith(MAGIC[suffix])
    if suffix == ".png":
        width = int.from_bytes(path.read_bytes()[16:20], "big")
        assert width == pytest.approx(86 / 25.4 * 300, abs=2)  # one journal column at 300 dpi


@pytest.mark.parametrize("suffix", [".svg", ".pdf"])
def test_same_data_same_picture(suffix: str, tmp_path: Path) -> None:
    curves = samples.curves(TEMPERATURE, FIELD)
    for name in ("a", "b"):
        plot(curves, tmp_path / f"{name}{suffix}", what="entropy")
    assert (tmp_path / f"a{suffix}").read_bytes() == (tmp_path / f"b{suffix}").read_bytes()


def test_drawing_leaves_the_users_settings_alone(tmp_path: Path) -> None:
    import matplotlib as mpl

    with mpl.rc_context({"font.size": 17}):
        plot(samples.reduced_curves(), tmp_path / "a.png")
        assert mpl.rcParams["font.size"] == 17


@pytest.mark.parametrize(
    ("dataset", "what", "name", "says"),
    [
        (samples.levels, None, "p.bmp", r"end its name in \.png, \.svg or \.pdf"),
        (samples.levels, None, "p", r"end its name in"),
        (samples.levels, "colour", "p.png", "choose from levels, density"),
        (lambda: samples.levels(4, "none"), "levels", "p.png", "neither S nor M"),
        (samples.fit, "iron", "p.png", "no data set 'iron'; choose from chi, heat"),
        (samples.reduced_curves, "magnetization", "p.png", "hold no magnetization"),
        (samples.reduced_curves, "colour", "p.png", "choose from specific_heat"),
        (PICTURES["no moment"], "chi_T", "p.png", "the model does not conserve M"),
        (samples.levels, None, "no/p.png", "directory does not exist"),
    ],
)
def test_picture_that_cannot_be(
    dataset: Any, what: str | None, name: str, says: str, tmp_path: Path
) -> None:
    with pytest.raises((FileFormatError, UnavailableError), match=says):
        plot(dataset(), tmp_path / name, what=what)
    assert os.listdir(tmp_path) == []


def test_several_panels_by_name(tmp_path: Path) -> None:
    curves = samples.curves(TEMPERATURE, FIELD)
    plot(curves, tmp_path / "a.svg", what="chi_T, entropy", units_system="molar-cgs")
    plot(curves, tmp_path / "b.svg", what=["chi_T", "entropy"], units_system="molar-cgs")
    assert (tmp_path / "a.svg").read_bytes() == (tmp_path / "b.svg").read_bytes()


# ---------------------------------------------------------------- CSV


def test_curves_as_csv() -> None:
    curves = samples.curves(TEMPERATURE, FIELD, errors=True)
    rows = table(curves)
    assert len(rows) == 36
    assert list(rows[0])[:3] == ["temperature (K)", "field (T)", "internal_energy (J mol-1)"]
    assert "susceptibility_standard_error (m3 mol-1)" in rows[0]
    # the first field's whole curve, then the next
    assert [float(r["field (T)"]) for r in rows] == list(np.repeat(FIELD, 12))
    np.testing.assert_allclose(
        [float(r["specific_heat (J mol-1 K-1)"]) for r in rows],
        curves["specific_heat"].values.T.ravel(),
        rtol=1e-9,
    )
    assert all(len(cell) < 20 for row in rows for cell in row.values())


def test_curves_as_csv_in_other_units() -> None:
    rows = table(samples.curves(TEMPERATURE, FIELD), units_system="molar-cgs")
    si = table(samples.curves(TEMPERATURE, FIELD))
    ratio = float(si[5]["susceptibility (m3 mol-1)"]) / float(rows[5]["susceptibility (emu mol-1)"])
    assert ratio == pytest.approx(4e-6 * np.pi, rel=1e-8)
    assert "magnetization (emu mol-1)" in rows[0]
    with pytest.raises(UnitsError, match="cannot become molar-si"):
        table(samples.reduced_curves(), units_system="molar-si")
    assert "entropy (kB)" in table(samples.reduced_curves("K"))[0]
    assert "temperature" in table(samples.reduced_curves("1"))[0]


def test_levels_as_csv(tmp_path: Path) -> None:
    levels = samples.levels(5, "magnetic_number")
    export_csv(levels, tmp_path / "l.csv")
    with (tmp_path / "l.csv").open(newline="") as stream:
        rows = list(csv.DictReader(stream))
    assert len(rows) == 32
    assert rows[0]["total_spin"] == ""
    np.testing.assert_allclose(
        [float(r["energy (K)"]) for r in rows], levels["energy"], rtol=1e-12, atol=1e-12
    )
    with pytest.raises(UnitsError, match="its own units"):
        export_csv(levels, tmp_path / "m.csv", units_system="molar-si")
    assert os.listdir(tmp_path) == ["l.csv"]


def test_fit_as_csv() -> None:
    fit = samples.fit()
    points = table(fit)
    assert len(points) == 95
    assert points[0]["dataset"] == "chi"
    assert points[-1]["units of the values"] == "J/(mol K)"
    assert float(points[3]["observed"]) == pytest.approx(float(fit["observed"][3]), rel=1e-9)
    parameters = table(fit, what="parameters")
    assert [p["parameter"] for p in parameters] == ["J_leg", "g", "chi0", "rho", "J_rung"]
    assert [p["role"] for p in parameters] == ["free", "free", "free", "fixed", "tied"]
    assert parameters[3]["standard_error"] == ""
    assert parameters[4]["tie"] == "0.5*J_leg"
    with pytest.raises(UnavailableError, match="choose from points, parameters"):
        table(fit, what="colours")


def test_interrupted_export_leaves_nothing(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    def interrupted(*_: object) -> None:
        raise KeyboardInterrupt

    monkeypatch.setattr(os, "fsync", interrupted)
    with pytest.raises(KeyboardInterrupt):
        export_csv(samples.fit(), tmp_path / "f.csv")
    assert os.listdir(tmp_path) == []


# ---------------------------------------------------------------- tables


def made_up_plan(**change: Any) -> SimpleNamespace:
    facts: dict[str, Any] = {
        "sites": 16, "bonds": 16, "couplings": {"J": 100.0}, "energy_unit": "K",
        "conserved": "total_spin", "group_order": 32, "abelian_order": 32,
        "spin_reversal": True, "n_states": 65536, "memory_bytes": 3 * 2**28,
        "memory_limit": 2**32, "seconds": 125.0, "method": "full",
        "notes": ("a bond meets its own image",),
        "sectors": (
            {"label": "a", "magnetic_number": 0.0, "dimension": 810, "multiplicity": 1,
             "real": True},
            {"label": "b", "magnetic_number": 0.0, "dimension": 800, "multiplicity": 2,
             "real": False},
        ),
    }  # fmt: skip
    return SimpleNamespace(as_dict=lambda: facts | change)


def test_plan_tells_blocks_memory_and_time() -> None:
    text = printed(print_plan, made_up_plan())
    assert "2, largest 810 × 810 real; they stand for 3" in text
    assert "768 MiB of 4.0 GiB allowed" in text
    assert "about 2.1 min" in text
    assert "total spin S (and M)" in text
    assert "32 site permutations; 32 used to split blocks, with spin reversal" in text
    assert "Note: a bond meets its own image" in text
    assert "\x1b" not in text
    bare = printed(print_plan, made_up_plan(couplings=["J"], sectors=(), memory_limit=None))
    assert "J" in bare


def test_fit_table() -> None:
    text = printed(print_fit, samples.fit())
    assert "40.12(35)" in text
    assert "= 0.5*J_leg" in text
    assert "-0.800" in text
    assert "reduced χ² = 1.02; converged after 14 evaluations" in text
    assert "At a bound" not in text


def test_fit_table_warns_of_bounds_and_failure() -> None:
    fit = samples.fit()
    fit["at_bound"].values[0] = -1
    fit["converged"].values[()] = 0
    text = printed(print_fit, fit, width=200)
    assert "at its lower bound" in text
    assert "At a bound: J_leg (lower)" in text
    assert "NOT converged" in text


def test_tables_fit_a_narrow_window() -> None:
    for show, subject in (
        (print_plan, made_up_plan()),
        (print_fit, samples.fit()),
        (print_curves, samples.curves(TEMPERATURE, FIELD)),
    ):
        assert max(map(len, printed(show, subject, width=60).splitlines())) <= 60


def test_curves_table_tells_the_maxima() -> None:
    text = printed(print_curves, samples.curves(np.linspace(2, 100, 400), FIELD[:1]))
    # Dimer of J = 40 K: C has its maximum at T/J = 0.35149521, so at 14.06 K.
    line = next(row for row in text.splitlines() if "specific_heat" in row)
    assert "14.0" in line
    assert "(edge)" in text  # the entropy still rises at the end of the range
