"""Sampled levels in files, and what curves, tables, pictures and fits make of them."""

from __future__ import annotations

import csv
import io

import numpy as np
import pytest

import thermo
from tests.sampling import sampled_dataset, sectors_of, table_of
from tests.solving import lattice_mapping
from thermo import units
from thermo.ensemble.accuracy import worst_error
from thermo.ensemble.canonical import cluster_curves
from thermo.ensemble.jackknife import cluster_errors
from thermo.errors import FileFormatError, SpectrumError
from thermo.fit.spectra import SpectrumCache
from thermo.model.level_table import check_levels, table_from_dataset
from thermo.report import print_curves
from thermo.report.pictures import plot
from thermo.variables import convert_curves

RING = lattice_mapping("chain", [8], {"nearest": 40.0}) | {"energy_unit": "K"}
SMALL = {"full_below": 6, "exact_low": 1}
NAMES = (
    "internal_energy", "free_energy", "entropy", "specific_heat", "susceptibility",
    "magnetization",
)  # fmt: skip
T, B = np.array([3.0, 10.0, 40.0, 300.0]), np.array([0.0, 5.0])


@pytest.fixture(scope="module")
def levels():
    return sampled_dataset(RING, **SMALL)


def changed(levels, name, edit):
    other = levels.copy(deep=True)
    edit(other[name].values)
    return other


def test_a_file_gives_the_same_table_back(levels, tmp_path):
    thermo.write(levels, tmp_path / "levels.nc")
    again = thermo.read_levels(tmp_path / "levels.nc")
    first, second = table_from_dataset(levels), table_from_dataset(again)
    assert first.sampling is not None
    for name in ("unit", "group", "raw_weight", "unit_sector", "moments", "orders"):
        np.testing.assert_array_equal(
            getattr(first.sampling, name), getattr(second.sampling, name), err_msg=name
        )
    assert first.sampling.center == second.sampling.center
    assert first.sampling.scale == second.sampling.scale
    np.testing.assert_array_equal(
        thermo.curves(levels, T, B).specific_heat_standard_error,
        thermo.curves(again, T, B).specific_heat_standard_error,
    )


def test_units_of_vectors_and_groups_of_m_come_back(levels):
    sampling = table_from_dataset(levels).sampling
    sector, vector = levels["sector"].values, levels["vector"].values
    for unit, owner in enumerate(sampling.unit_sector):
        mine = sampling.unit == unit
        assert set(sector[mine]) == {owner}
        assert len(set(vector[mine])) == 1
    assert len(sampling.unit_sector) == 4 * len(set(sector[vector >= 0]))
    number = levels["trace_magnetic_number"].values
    np.testing.assert_array_equal(number[sampling.group], levels["magnetic_number"].values)


def test_groups_come_back_where_m_is_not_conserved(levels):
    """No magnetic number tells them apart then; their numbers of states do."""
    unnamed = levels.assign(
        trace_magnetic_number=("trace_group", np.full(levels.sizes["trace_group"], np.nan)),
        sector_magnetic_number=("block", np.full(levels.sizes["block"], np.nan)),
    )
    np.testing.assert_array_equal(
        table_from_dataset(unnamed).sampling.group, table_from_dataset(levels).sampling.group
    )
    wrong = changed(unnamed, "trace", lambda t: t.__setitem__((0, 0), t[0, 0] + 1))
    with pytest.raises(FileFormatError, match="do not fit together"):
        table_from_dataset(wrong)
    mixed = levels.assign(trace_magnetic_number=unnamed["trace_magnetic_number"])
    with pytest.raises(FileFormatError, match="do not fit together"):
        table_from_dataset(mixed)


@pytest.mark.parametrize(
    ("name", "edit"),
    [
        ("weight", lambda w: np.multiply(w, np.where(np.arange(len(w)) == 30, 1.001, 1), out=w)),
        ("trace", lambda t: t.__setitem__((1, 5), t[1, 5] * 1.001)),
        ("energy", lambda e: e.__setitem__(40, e[40] + 0.01)),
    ],
)
def test_a_changed_file_is_found_out(levels, tmp_path, name, edit):
    thermo.write(changed(levels, name, edit), tmp_path / "levels.nc")
    with pytest.raises(SpectrumError, match="solve the model again"):
        thermo.read_levels(tmp_path / "levels.nc")


def test_traces_need_hold_only_as_far_as_calibrated(tmp_path):
    raw = sampled_dataset(RING, order=0, **SMALL)
    thermo.write(raw, tmp_path / "levels.nc")
    table = table_from_dataset(thermo.read_levels(tmp_path / "levels.nc"))
    full = sampled_dataset(RING, **SMALL)
    claims = full.assign(weight=full["raw_weight"])
    with pytest.raises(SpectrumError):
        check_levels(table_from_dataset(claims), thermo.read_model(RING))
    assert np.all(table.sampling.orders == 0)


@pytest.mark.parametrize(
    "name", ["raw_weight", "trace", "trace_magnetic_number", "trace_order_used"]
)
def test_half_a_sampled_file_is_refused(levels, name):
    with pytest.raises(FileFormatError, match=name):
        thermo.write(levels.drop_vars(name), "never.nc")


@pytest.mark.parametrize("name", ["trace_center", "trace_scale", "vectors", "seed"])
def test_a_sampled_file_needs_its_numbers(levels, name):
    other = levels.copy()
    del other.attrs[name]
    with pytest.raises(FileFormatError, match=name):
        thermo.write(other, "never.nc")


def test_a_full_file_holds_nothing_of_it(levels):
    with pytest.raises(FileFormatError, match="belongs to sampled levels"):
        thermo.write(levels.assign_attrs(method="full"), "never.nc")


@pytest.mark.parametrize(
    ("name", "edit"),
    [
        ("raw_weight", lambda w: w.__setitem__(3, -1.0)),
        ("trace_order_used", lambda o: o.__setitem__(0, 7)),
        ("trace_order_used", lambda o: o.__setitem__(0, -1)),
        ("sector", lambda s: s.__setitem__(0, 1000)),
    ],
)
def test_numbers_out_of_range_are_refused(levels, name, edit):
    with pytest.raises(FileFormatError, match="solve the model again"):
        table_from_dataset(changed(levels, name, edit))


def test_every_curve_has_its_error_in_its_units(levels):
    table = table_from_dataset(levels)
    g = thermo.read_model(RING).common_g
    zeeman = g * units.BOHR_MAGNETON_KELVIN * B
    error = cluster_errors(table, T, zeeman)
    curves = thermo.curves(levels, T, B)
    for name in NAMES:
        beside = curves[f"{name}_standard_error"]
        assert curves[name].attrs["ancillary_variables"] == beside.name
        assert beside.attrs["units"] == curves[name].attrs["units"]
        assert np.all(beside >= 0)
    assert np.all(curves.magnetization_standard_error.sel(field=0) == 0)  # by symmetry
    per_site = units.GAS_CONSTANT / 8
    np.testing.assert_allclose(
        curves.specific_heat_standard_error, error.specific_heat * per_site, rtol=1e-9
    )
    np.testing.assert_allclose(
        curves.internal_energy_standard_error, error.internal_energy * per_site, rtol=1e-9
    )
    np.testing.assert_allclose(
        curves.susceptibility_standard_error,
        error.moment_variance * g**2 * units.CURIE / 8 / T[:, None],
        rtol=1e-9,
    )
    np.testing.assert_allclose(
        curves.magnetization_standard_error,
        error.moment * g * units.MOLAR_BOHR_MAGNETON / 8,
        rtol=1e-9,
    )


@pytest.mark.parametrize("system", ["molar-cgs", "reduced"])
def test_errors_follow_their_values_through_units(levels, system):
    si, other = thermo.curves(levels, T, B), thermo.curves(levels, T, B, units=system)
    for name in NAMES:
        ratio = [c[f"{name}_standard_error"] / abs(c[name]) for c in (si, other)]
        np.testing.assert_allclose(ratio[1], ratio[0], rtol=1e-10)
    if system == "molar-cgs":
        back = convert_curves(other, "molar-si")
        np.testing.assert_allclose(
            back.susceptibility_standard_error, si.susceptibility_standard_error, rtol=1e-12
        )
    # A negative g turns the moment, not its error.
    turned = thermo.curves(levels, T, B, units=system, g=-2.0)
    assert np.all(turned.magnetization_standard_error >= 0)


def test_curves_are_within_their_errors_of_the_full_spectrum(levels):
    found, full = thermo.curves(levels, T, B), thermo.curves(thermo.solve(
        thermo.read_model(RING), method="full"), T, B)  # fmt: skip
    for name in NAMES:
        z = (found[name] - full[name]) / found[f"{name}_standard_error"]
        assert float(abs(z).where(found[name] != 0, 0).max()) < 4, name
        assert float(abs(z).max()) > 1e-3, name  # the bars are not simply huge
    # Same model, same directions: M alone is resolved here, total spin there.
    assert found.attrs["field_direction"] == full.attrs["field_direction"] == "any"


def test_an_anisotropic_model_says_so():
    mapping = lattice_mapping("chain", [6], {"nearest": (40.0, "xy")}) | {"energy_unit": "K"}
    found = thermo.curves(sampled_dataset(mapping, **SMALL), T)
    assert found.attrs["field_direction"] == "z"


def test_curves_keep_their_errors_in_files(levels, tmp_path):
    curves = thermo.curves(levels, T, B, units="molar-cgs")
    thermo.write(curves, tmp_path / "curves.nc")
    again = thermo.read(tmp_path / "curves.nc", "curves")
    np.testing.assert_allclose(
        again.susceptibility_standard_error,
        curves.susceptibility_standard_error * units.CHI_SI_PER_EMU,
        rtol=1e-12,
    )
    assert "68.27 %" in again.attrs["standard_errors"]
    assert "trace_center" not in again.attrs


def test_one_vector_gives_curves_without_error_bars(tmp_path):
    curves = thermo.curves(sampled_dataset(RING, vectors=1, **SMALL), T, B)
    assert np.isnan(curves.specific_heat_standard_error).all()
    assert np.isfinite(curves.specific_heat).all()
    assert "one random vector" in curves.attrs["error_unavailable"]
    thermo.write(curves, tmp_path / "curves.nc")
    thermo.read(tmp_path / "curves.nc", "curves")
    plot(curves, tmp_path / "curves.png")
    text = io.StringIO()
    thermo.export_csv(curves, text)
    rows = list(csv.DictReader(io.StringIO(text.getvalue())))
    name = "specific_heat_standard_error (J mol-1 K-1) per mole of ions"
    assert {row[name] for row in rows} == {""}


def test_exact_curves_have_no_error_columns():
    everything = sampled_dataset(RING, full_below=1000)
    curves = thermo.curves(everything, T)
    assert not [n for n in curves if str(n).endswith("_standard_error")]
    assert "standard_errors" not in curves.attrs
    assert worst_error(table_from_dataset(everything), 1.0, 100.0) == 0


def test_chosen_variables_alone_have_errors(levels):
    curves = thermo.curves(levels, T, variables=["entropy"])
    assert set(curves.data_vars) == {"entropy", "entropy_standard_error"}


def test_tables_and_pictures_show_the_errors(levels, tmp_path, capsys):
    curves = thermo.curves(levels, T, B)
    text = io.StringIO()
    thermo.export_csv(curves, text, what="chi_T")
    row = next(csv.DictReader(io.StringIO(text.getvalue())))
    chi_t, error = (float(v) for k, v in row.items() if k.startswith("chi_T"))
    ratio = float(curves.susceptibility_standard_error[0, 0] / curves.susceptibility[0, 0])
    assert error / chi_t == pytest.approx(ratio, rel=1e-5)
    print_curves(curves)
    heat = next(line for line in capsys.readouterr().out.splitlines() if "specific_heat" in line)
    assert "(" in heat  # the value with its error, as in 3.17(17)
    listed = io.StringIO()
    thermo.export_csv(levels, listed)
    rows = list(csv.DictReader(io.StringIO(listed.getvalue())))
    assert [int(row["vector"]) for row in rows] == levels["vector"].values.tolist()
    for name, dataset in (("curves", curves), ("levels", levels)):
        plot(dataset, tmp_path / f"{name}.png")
        assert (tmp_path / f"{name}.png").stat().st_size > 5000


class _Sampler:
    """Levels of a ring from the same random vectors whatever the couplings."""

    def table(self, couplings=None):
        mapping = lattice_mapping("chain", [8], {"nearest": couplings["J_nearest"]})
        return table_from_dataset(sampled_dataset(mapping, **SMALL))


def test_fits_can_scale_and_turn_sampled_levels():
    cache = SpectrumCache(_Sampler(), ["J_nearest"])
    t, h = np.array([0.5, 2.0]), np.array([0.0, 1.0])
    for coupling in (1.0, 2.5, -1.5, 0.0):
        spectrum, scale = cache.spectrum(np.array([coupling]))
        table = spectrum.scaled(scale)
        curve = cluster_curves(table, t, h)
        assert np.isfinite(curve.specific_heat).all()
        if coupling:
            error = cluster_errors(table, t, h, curve)
            sectors = sectors_of(lattice_mapping("chain", [8], {"nearest": coupling}))
            exact = _exact(sectors, t, h)
            z = (curve.specific_heat - exact.specific_heat) / error.specific_heat
            assert np.abs(z).max() < 5
    assert cache.n_solves == 1


def _exact(sectors, t, h):
    levels = {
        "energy": np.concatenate([e for _, _, e in sectors]),
        "raw": np.concatenate([np.full(len(e), g) for _, g, e in sectors]),
        "twice_m": np.concatenate([np.full(len(e), m) for m, _, e in sectors]),
    }
    levels["unit"] = np.full(len(levels["energy"]), -1)
    return cluster_curves(table_of(levels, np.empty(0, dtype=np.int64), sectors), t, h)
