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
from thermo import units
from thermo.errors import FileFormatError, RangeError, UnavailableError, UnitsError
from thermo.report import export_csv, plot, print_curves, print_fit, print_plan
from thermo.report.quantities import (
    per_note,
)
from thermo.report.style import wants_log

TEMPERATURE = np.geomspace(2, 100, 12)
FIELD = np.array([0.0, 10.0, 20.0])


def printed(show: Any, subject: Any, width: int = 100, window: bool = False) -> str:
    """What is printed to a file, or to a colourless window."""
    stream = io.StringIO()
    show(subject, Console(file=stream, width=width, force_terminal=window, color_system=None))
    return stream.getvalue()


def table(dataset: Any, **options: Any) -> list[dict[str, str]]:
    stream = io.StringIO()
    export_csv(dataset, stream, **options)
    return list(csv.DictReader(io.StringIO(stream.getvalue())))


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
    "fit by the scatter": lambda: samples.fit(scatter=True),
    "along z": lambda: samples.curves(TEMPERATURE, FIELD).assign_attrs(field_direction="z"),
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
    assert list(rows[0])[:3] == [
        "temperature (K)", "field (T)", "internal_energy (J mol-1) per mole of ions",
    ]  # fmt: skip
    names = [name.split(" ")[0] for name in rows[0]]
    start = names.index("susceptibility")
    assert names[start : start + 4] == [
        "susceptibility", "susceptibility_standard_error", "chi_T", "chi_T_standard_error",
    ]  # fmt: skip
    assert "susceptibility_standard_error (m3 mol-1) per mole of ions" in rows[0]
    # the first field's whole curve, then the next
    assert [float(r["field (T)"]) for r in rows] == list(np.repeat(FIELD, 12))
    np.testing.assert_allclose(
        [float(r["specific_heat (J mol-1 K-1) per mole of ions"]) for r in rows],
        curves["specific_heat"].values.T.ravel(),
        rtol=5e-7,  # seven digits
    )
    np.testing.assert_allclose(
        [float(r["chi_T (m3 K mol-1) per mole of ions"]) for r in rows],
        (curves["susceptibility"] * curves["temperature"]).values.T.ravel(),
        rtol=5e-7,
    )
    assert all(len(cell) < 20 for row in rows for cell in row.values())


def test_chosen_columns_as_csv() -> None:
    curves = samples.curves(TEMPERATURE, FIELD)
    axes = ["temperature (K)", "field (T)"]
    heat, chi_t = "specific_heat (J mol-1 K-1)", "chi_T (emu K mol-1)"
    rows = table(curves, what="specific_heat, chi_T", units_system="molar-cgs")
    assert list(rows[0]) == [*axes, f"{heat} per mole of ions", f"{chi_t} per mole of ions"]
    assert rows == table(curves, what=["specific_heat", "chi_T"], units_system="molar-cgs")
    with pytest.raises(UnavailableError, match=r"'points' is no quantity of curves; choose from"):
        table(curves, what="points")
    with pytest.raises(UnavailableError, match="the model does not conserve M"):
        table(PICTURES["no moment"](), what="chi_T")


def test_tails_are_no_data_in_a_csv() -> None:
    heat = np.array([[8.8e-90], [-1e-45], [1e-12], [2.0], [np.nan]])
    curves = samples.curves(np.arange(1.0, 6.0), FIELD[:1])
    curves["specific_heat"].values[:] = heat
    rows = table(curves, what="specific_heat")
    assert [list(row.values())[-1] for row in rows] == ["0", "0", "1e-12", "2", ""]


def test_curves_as_csv_in_other_units() -> None:
    rows = table(samples.curves(TEMPERATURE, FIELD), units_system="molar-cgs")
    si = table(samples.curves(TEMPERATURE, FIELD))
    before = float(si[5]["susceptibility (m3 mol-1) per mole of ions"])
    after = float(rows[5]["susceptibility (emu mol-1) per mole of ions"])
    assert before / after == pytest.approx(4e-6 * np.pi, rel=1e-6)  # two roundings to 7 digits
    assert "magnetization (emu mol-1) per mole of ions" in rows[0]
    formula = samples.curves(TEMPERATURE, FIELD).assign_attrs(per="formula")
    assert "entropy (J mol-1 K-1) per mole of formula units" in table(formula)[0]
    with pytest.raises(UnitsError, match="cannot become molar-si"):
        table(samples.reduced_curves(), units_system="molar-si")
    assert "entropy (kB) per site" in table(samples.reduced_curves("K"))[0]
    assert list(table(samples.reduced_curves("1"))[0])[::3] == ["temperature", "entropy per site"]


def test_levels_as_csv(tmp_path: Path) -> None:
    levels = samples.levels(5, "magnetic_number")
    export_csv(levels, tmp_path / "l.csv")
    with (tmp_path / "l.csv").open(newline="") as stream:
        rows = list(csv.DictReader(stream))
    assert len(rows) == 32
    assert list(rows[0]) == ["energy (K)", "weight", "magnetic_number", "block"]
    assert "" not in rows[0].values()
    assert list(table(samples.levels(4, "none"))[0]) == ["energy (K)", "weight", "block"]
    assert "total_spin" in table(samples.levels(4))[0]
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
    assert {p["per"] for p in points} == {"ion"}
    assert {p["per"] for p in table(fit.drop_vars("dataset_per"))} == {""}
    assert "uncertainty (from the scatter)" in table(samples.fit(scatter=True))[0]
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
        text = printed(show, subject, width=60, window=True)
        assert max(map(len, text.splitlines())) <= 60
        assert "40.12(35)" in text or show is not print_fit  # numbers are not cut in two


def test_tables_in_a_file() -> None:
    note = "a bond meets its own image, " * 8 + "so the physics differs"
    for show, subject in (
        (print_plan, made_up_plan(notes=(note,))),
        (print_fit, samples.fit()),
        (print_curves, samples.curves(TEMPERATURE, FIELD)),
    ):
        lines = printed(show, subject, width=60).splitlines()
        assert lines
        assert [line for line in lines if line != line.rstrip()] == []
        assert show is not print_plan or lines[-1] == f"Note: {note}"


def test_plan_far_beyond_any_machine() -> None:
    plan = made_up_plan(method="none", memory_bytes=7e31, seconds=2.4e37, n_states=2**60)
    text = printed(print_plan, plan)
    assert "far beyond any machine; 4.0 GiB allowed" in text
    assert "over 1000 years" in text
    assert "1.153×10¹⁸" in text
    assert "none: neither a full nor a sampled spectrum fits" in text
    assert "e+" not in text


def test_fit_by_the_scatter_tells_no_chi_square() -> None:
    fit = samples.fit(scatter=True)
    text = printed(print_fit, fit)
    assert "χ²" not in text
    assert "converged after 14 evaluations" in text
    these = fit["point_dataset"].values == 0
    residual, observed = fit["residual"].values[these], fit["observed"].values[these]
    share = 100 * np.sqrt(np.mean(residual**2)) / np.mean(np.abs(observed))
    assert f"{share:.2g} % of the mean" in text


def test_bound_is_told_once() -> None:
    fit = samples.fit()
    fit["at_bound"].values[0] = -1
    told = fit.assign_attrs(cautions="J_leg sits at its lower bound 0: it has no standard error")
    assert "At a bound" in printed(print_fit, fit)
    assert "At a bound" not in printed(print_fit, told)


def test_footers() -> None:
    from thermo.report.fit_picture import per_what, summary

    fit = samples.fit()
    fit["value"].values[0] = -42.0
    fit["parameter_units"].values[0] = "cm-1"
    first, *_ = summary(fit).split(";  ")
    assert first == "J_leg\u00a0=\u00a0−42.00(35)\u00a0cm⁻¹"
    assert per_what(fit, [0, 1]) == "per mole of ions"
    fit["dataset_per"].values[1] = "formula"
    assert per_what(fit, [0, 1]) == "chi per mole of ions;  heat per mole of formula units"
    assert per_what(fit, [1]) == "per mole of formula units"
    fit["dataset_units"].values[0] = "muB"
    assert per_what(fit, [0]) == "per ion"
    assert per_what(fit.drop_vars("dataset_per"), [0, 1]) == ""
    curves = samples.curves(TEMPERATURE, FIELD)
    assert per_note(curves.attrs) == "per mole of ions"
    assert per_note(curves.attrs | {"field_direction": "z"}) == "per mole of ions, B ∥ z"
    assert per_note(curves.attrs | {"field_direction": "any"}) == "per mole of ions"
    assert per_note(samples.reduced_curves("K").attrs) == "per site"


def test_direction_of_the_field_is_printed() -> None:
    curves = samples.curves(TEMPERATURE, FIELD)
    assert "∥" not in printed(print_curves, curves)
    assert "B ∥ z" in printed(print_curves, curves.assign_attrs(field_direction="z"))


@pytest.mark.parametrize(
    ("values", "scale", "logarithmic"),
    [
        (np.linspace(1, 300, 150), None, False),
        (np.geomspace(1, 300, 150), None, True),
        (np.geomspace(10, 50, 30), None, True),
        (np.geomspace(10, 12, 30), None, False),
        ([1.0, 2.0, 5.0, 10.0, 300.0], None, True),
        ([10.0, 20.0, 50.0], None, False),
        (np.linspace(1, 300, 150), "log", True),
        (np.geomspace(1, 300, 150), "linear", False),
        (np.linspace(0, 300, 150), "log", False),
        ([2.0], "log", False),
    ],
)
def test_scale_of_the_temperature_axis(values: Any, scale: str | None, logarithmic: bool) -> None:
    assert wants_log(values, scale) is logarithmic


def test_scale_of_a_picture(tmp_path: Path) -> None:
    curves = samples.curves(TEMPERATURE, FIELD[:1])
    plot(curves, tmp_path / "a.svg", what="entropy")
    plot(curves, tmp_path / "b.svg", what="entropy", scale="log")
    plot(curves, tmp_path / "c.svg", what="entropy", scale="linear")
    a, b, c = ((tmp_path / f"{name}.svg").read_bytes() for name in "abc")
    assert a == b != c
    plot(samples.fit(), tmp_path / "fit.svg", scale="linear")
    with pytest.raises(RangeError, match="'cubic' is unknown; use linear or log"):
        plot(curves, tmp_path / "d.svg", scale="cubic")
    with pytest.raises(UnavailableError, match="no temperature axis"):
        plot(samples.levels(4), tmp_path / "e.svg", scale="log")


def test_magnetization_in_bohr_magnetons_on_the_right(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    from thermo.report import style

    seen: list[Any] = []
    monkeypatch.setattr(style, "save", lambda figure, _: seen.append(figure))
    for system in ("molar-si", "molar-cgs"):
        plot(samples.curves(TEMPERATURE, FIELD), tmp_path / "m.png", "magnetization", system)
        axes = seen[-1].axes[0]
        seen[-1].draw_without_rendering()
        (right,) = axes.child_axes
        assert "per ion" in right.get_ylabel()
        power = 1000 if r"10^{3}" in axes.get_ylabel() else 1
        one = units.quantity_factor("magnetization", "muB") / (
            1 if system == "molar-si" else units.MOMENT_SI_PER_EMU
        )
        ratio = right.get_ylim()[1] / axes.get_ylim()[1]
        assert ratio == pytest.approx(power / one, rel=1e-9)


def test_curves_table_tells_the_maxima() -> None:
    text = printed(print_curves, samples.curves(np.linspace(2, 100, 400), FIELD[:1]))
    # Dimer of J = 40 K: C has its maximum at T/J = 0.35149521, so at 14.06 K.
    line = next(row for row in text.splitlines() if "specific_heat" in row)
    assert "14.0" in line
    assert "(edge)" in text  # the entropy still rises at the end of the range
