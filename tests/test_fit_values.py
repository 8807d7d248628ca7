"""What a fit returns, against closed forms and an independent minimiser."""

from __future__ import annotations

import math

import numpy as np
import pytest
from scipy.optimize import curve_fit

import thermo
from tests import fitting
from tests.fitting import CURIE, MODEL, MU_B, TRUE, R, dimer_chi, dimer_heat, write_csv, write_dimer
from thermo import errors
from thermo.fit import fit, read_study
from thermo.fit.forward import Forward, Points
from thermo.fit.surroundings import free_ions
from thermo.spectrum.full import FullSolver


def test_a_dimer_with_impurities_is_recovered(tmp_path):
    result = fit(write_dimer(tmp_path))
    for name, true in TRUE.items():
        # The points are exact; what is left is the constants' ten digits.
        assert result[name].value == pytest.approx(true, rel=2e-8), name
    assert result.converged
    assert result.trustworthy
    assert result.at_bound == ()
    assert result.n_points == 120
    assert result.degrees_of_freedom == 116
    assert result.chi_square < 1e-9
    assert result.error_basis == "stated"


def test_the_minimum_and_its_covariance_are_those_of_another_minimiser(tmp_path):
    study = read_study(write_dimer(tmp_path, noise=1.0))
    result = fit(study)
    chi, heat = study.sets
    emu = chi.to_si
    T = np.concatenate([chi.temperature, heat.temperature])
    first = np.arange(len(T)) < chi.n_points

    def closed(x, J, g, chi0, rho):
        return np.where(first, 1e3 * dimer_chi(x, J, g, chi0 / 1e3, rho), dimer_heat(x, J, rho))

    best, covariance = curve_fit(
        closed,
        T,
        np.concatenate([1e3 * chi.value / emu, heat.value]),
        p0=[30, 2, 0, 0.005],
        sigma=np.concatenate([1e3 * chi.uncertainty / emu, heat.uncertainty]),
        absolute_sigma=True,
        method="lm",
        ftol=1e-13,
        xtol=1e-13,
        gtol=1e-13,
    )
    scale = np.array([1, 1, 1e-3, 1])
    assert result.free_names == ("J", "g", "chi0", "paramagnetic_fraction")
    error = np.sqrt(np.diag(covariance)) * scale
    found = np.array([result[name].value for name in result.free_names])
    assert np.abs(found - best * scale).max() < 1e-4 * np.abs(error).max()
    np.testing.assert_array_less(np.abs(found - best * scale) / error, 1e-4)
    np.testing.assert_allclose(
        [result[name].standard_error for name in result.free_names], error, rtol=1e-5
    )
    np.testing.assert_allclose(
        result.correlation,
        covariance / np.outer(error / scale, error / scale),
        rtol=0,
        atol=1e-5,
    )
    np.testing.assert_allclose(np.diag(result.correlation), 1, rtol=1e-12)
    assert 0.6 < result.reduced_chi_square < 1.5
    assert sum(item.chi_square for item in result.sets) == pytest.approx(result.chi_square)


def test_errors_from_the_scatter_where_none_are_stated(tmp_path):
    study = write_dimer(tmp_path, noise=1.0).read_text()
    study = study.replace(', uncertainty = "error"', "").replace(", uncertainty = 3", "")
    (tmp_path / "study.toml").write_text(study)
    result = fit(tmp_path / "study.toml")
    assert result.error_basis == "scatter"
    assert math.isnan(result.reduced_chi_square)
    assert result.chi_square == pytest.approx(result.degrees_of_freedom)
    assert any("no uncertainties were stated" in caution for caution in result.cautions)
    for name, true in TRUE.items():
        assert abs(result[name].value - true) < 5 * result[name].standard_error
    # The same as stating any equal relative-to-mean errors and scaling by the reduced χ².
    other = study.replace('units = "emu/mol"\n', 'units = "emu/mol"\nabsolute_uncertainty = {}\n')
    chi, heat = read_study(tmp_path / "study.toml").sets
    other = other.replace("{}", repr(float(np.mean(np.abs(chi.value)) / chi.to_si)))
    other = other.replace(
        'units = "J/(mol K)"\n',
        f'units = "J/(mol K)"\nabsolute_uncertainty = {float(np.mean(np.abs(heat.value)))!r}\n',
    )
    (tmp_path / "study.toml").write_text(other)
    stated = fit(tmp_path / "study.toml")
    for name in result.free_names:
        assert result[name].value == pytest.approx(stated[name].value, rel=1e-9)
        assert result[name].standard_error == pytest.approx(
            stated[name].standard_error * math.sqrt(stated.reduced_chi_square), rel=1e-6
        )


@pytest.mark.parametrize("quantity", ["susceptibility", "chi_T", "specific_heat",
                                      "specific_heat_over_T", "magnetization"])  # fmt: skip
@pytest.mark.parametrize("per", ["ion", "formula"])
def test_every_quantity_at_field_against_four_levels(tmp_path, quantity, per):
    model = thermo.read_model(_write_model(tmp_path, "ions_per_formula = 2\n"))
    emu = 4e-6 * math.pi
    forward = Forward(model, FullSolver(model), chi0_to_si=emu)
    study = read_study(
        _mapping(tmp_path, J={"start": 42.5}, g={"fixed": 2.13}, chi0={"fixed": -1.7e-4},
                 paramagnetic_fraction={"fixed": 0.021})
    )  # fmt: skip
    values = study.parameters.values(np.array([42.5]))
    T, B = np.array([2.0, 10.0, 60.0]), np.array([7.0, 3.0, 14.0])
    moment, heat = fitting.dimer_moments(T, B, 42.5, 2.13)
    x = 2.13 * MU_B * B / T
    free_moment, free_heat = np.tanh(x / 2) / 2, (x / 2) ** 2 / np.cosh(x / 2) ** 2
    rho, n = 0.021, 2 if per == "formula" else 1
    C = R * ((1 - rho) * heat / 2 + rho * free_heat)
    magnetization = fitting.MOMENT * 1e-3 * 2.13 * ((1 - rho) * moment / 2 + rho * free_moment)
    magnetization = magnetization - 1.7e-4 * 10 * B  # 1 emu/mol at 1 T = 10^4 Oe: 10 A m2/mol
    chi = 4e-7 * math.pi * magnetization / B
    expected = {
        "susceptibility": chi,
        "chi_T": chi * T,
        "specific_heat": C,
        "specific_heat_over_T": C / T,
        "magnetization": magnetization,
    }[quantity]
    found = forward.predict(Points(quantity, T, B, per), values)
    np.testing.assert_allclose(found, n * expected, rtol=1e-8)
    zero = forward.predict(Points(quantity, T, 0 * B, per), values)
    low = forward.predict(Points(quantity, T, 0 * B + 1e-3, per), values)
    if quantity == "magnetization":
        assert not zero.any()
    else:
        np.testing.assert_allclose(zero, low, rtol=1e-6, atol=1e-7)  # impurities at 1 mT
    if quantity == "susceptibility":
        np.testing.assert_allclose(
            zero, n * emu * dimer_chi(T, 42.5, 2.13, -1.7e-4, rho), rtol=1e-8
        )


def _free_moments(shares, T, zeeman):
    """(C/k_B, <M>, its slope by the field times T) of the mean free ion."""
    found = free_ions(shares, T, zeeman, 0.0)
    return found.value.heat, found.value.moment, found.by_field.moment * T


def test_free_ions_of_mixed_spins_follow_curie_and_saturate():
    shares = ((0.5, 0.25), (2.0, 0.75))
    T = np.array([3.0, 3.0])
    heat, moment, variance = _free_moments(shares, T, np.array([0.0, 3000.0]))
    assert variance[0] == pytest.approx((0.25 * 0.75 + 0.75 * 6) / 3)
    assert heat[0] == 0
    assert moment[1] == pytest.approx(0.25 * 0.5 + 0.75 * 2)
    # Brillouin's function, spin 2.
    x = 0.7
    heat, moment, variance = _free_moments(((2.0, 1.0),), np.ones(1), np.array([x]))
    brillouin = 2.5 / math.tanh(2.5 * x) - 0.5 / math.tanh(0.5 * x)
    assert moment[0] == pytest.approx(brillouin)


def test_magnetization_over_field_and_a_map(tmp_path):
    """M(B) at one temperature and a (T, B) map of M fix J and g."""
    model = _write_model(tmp_path)
    B = np.linspace(0, 40, 41)
    moment, _ = fitting.dimer_moments(3.0 + 0 * B, B, 20.0, 2.2)
    write_csv(tmp_path / "m.csv", "B (kOe),M", 10 * B, 2.2 * moment / 2)
    T, field = (a.ravel() for a in np.meshgrid([5.0, 2.0, 9.0], [1.0, 10.0, 20.0]))
    moment, _ = fitting.dimer_moments(T, field, 20.0, 2.2)
    write_csv(tmp_path / "map.csv", "T,B,M", 1000 * T, field, fitting.MOMENT * 2.2 * moment / 2)
    result = fit(
        {
            "format": 1,
            "model": str(model),
            "data": [
                {
                    "name": "M(B)", "file": str(tmp_path / "m.csv"), "quantity": "magnetization",
                    "units": "muB", "temperature": 3.0, "field_unit": "kOe",
                    "columns": {"field": "B (kOe)", "value": "M"}, "absolute_uncertainty": 1e-3,
                },
                {
                    "name": "map", "file": str(tmp_path / "map.csv"), "quantity": "magnetization",
                    "units": "emu/mol", "temperature_unit": "mK", "relative_uncertainty": 1e-3,
                    "columns": {"temperature": "T", "field": "B", "value": "M"},
                },
            ],
            "parameters": {"J": {"start": 25.0}, "g": {}},
        }
    )  # fmt: skip
    assert result["J"].value == pytest.approx(20.0, rel=1e-7)
    assert result["g"].value == pytest.approx(2.2, rel=1e-8)
    assert result.n_solves == 1
    dataset = result.to_dataset()
    assert set(np.unique(dataset["curve_dataset"])) == {0, 1}


def test_predictions_of_the_result(tmp_path):
    result = fit(write_dimer(tmp_path))
    T = np.array([[5.0, 50.0], [100.0, 200.0]])
    chi = result.predict("susceptibility", T, units="emu/mol")
    np.testing.assert_allclose(chi, dimer_chi(T, **TRUE), rtol=1e-7)
    assert result.predict("chi_T", 50.0, units="emu K/mol", per="ion").shape == ()
    solves = result.forward.cache.n_solves
    assert solves == result.n_solves == 1
    assert result.model.couplings["J"] == result["J"].value
    for wrong in (
        lambda: result.predict("chi", 5.0),
        lambda: result.predict("chi_T", 0.0),
        lambda: result.predict("chi_T", np.nan),
        lambda: result.predict("chi_T", 5.0, -1.0),
        lambda: result.predict("chi_T", [1.0, 2.0], [1.0, 2.0, 3.0]),
        lambda: result.predict("chi_T", 5.0, per="atom"),
    ):
        with pytest.raises(errors.RangeError):
            wrong()
    with pytest.raises(errors.UnitsError):
        result.predict("chi_T", 5.0, units="J/(mol K)")
    with pytest.raises(errors.StudyError, match="did you mean 'chi0'"):
        result["chi"]


def test_the_dataset_holds_the_fit_in_the_units_of_the_files(tmp_path):
    result = fit(write_dimer(tmp_path, noise=1.0))
    dataset = result.to_dataset()
    assert list(dataset["parameter_name"].values) == ["J", "g", "chi0", "paramagnetic_fraction"]
    first = dataset["point_dataset"].values == 0
    table = np.loadtxt(tmp_path / "chi.csv", delimiter=",", skiprows=2)
    np.testing.assert_allclose(dataset["observed"].values[first], table[:, 1], rtol=1e-13)
    np.testing.assert_allclose(dataset["uncertainty"].values[first], table[:, 2], rtol=1e-13)
    np.testing.assert_allclose(
        dataset["residual"], dataset["observed"] - dataset["predicted"], rtol=0, atol=1e-12
    )
    curve = dataset["curve_dataset"].values == 0
    T = dataset["curve_temperature"].values[curve]
    best = {name: result[name].value for name in TRUE}
    np.testing.assert_allclose(
        dataset["curve_predicted"].values[curve], dimer_chi(T, **best), rtol=1e-8
    )


def test_a_dimensionless_model(tmp_path):
    T = np.geomspace(0.1, 10, 40)
    spins = 0.9 * 4 / (T * (3 + np.exp(1.3 / T))) + 0.1 * 4 / (4 * T)
    write_csv(tmp_path / "chi.csv", "T,chi", T, spins)
    text = MODEL.replace('"K"', '"1"').replace("J = 30.0", "J = 1.0")
    (tmp_path / "model.toml").write_text(text)
    result = fit(
        {
            "format": 1,
            "model": str(tmp_path / "model.toml"),
            "data": [{"name": "chi", "file": str(tmp_path / "chi.csv"), "units": "1",
                      "quantity": "susceptibility", "relative_uncertainty": 0.01,
                      "columns": {"temperature": "T", "value": "chi"}}],
            "parameters": {"J": {}, "paramagnetic_fraction": {}},
        }
    )  # fmt: skip
    assert result["J"].value == pytest.approx(1.3, rel=1e-9)
    assert result["paramagnetic_fraction"].value == pytest.approx(0.1, rel=1e-9)
    assert result.to_dataset()["curve_temperature"].attrs["units"] == "1"


def test_a_dimer_in_wavenumbers_has_its_hump_where_copper_acetate_has(tmp_path):
    """The copper(II) acetate dimer: a singlet-triplet gap of about 286-296 cm^-1 and a hump of χ
    near 255 K (Bleaney and Bowers 1952; from memory)."""
    text = MODEL.replace('"K"', '"cm-1"').replace("J = 30.0", "J = 291.0")
    (tmp_path / "model.toml").write_text(text)
    model = thermo.read_model(tmp_path / "model.toml")
    forward = Forward(model, FullSolver(model))
    study = _mapping(tmp_path, J={"start": 291.0})
    values = read_study(study).parameters.values(np.array([291.0]))
    T = np.arange(200.0, 320.0, 0.5)
    chi = forward.predict(Points("susceptibility", T, 0 * T, "ion"), values)
    assert 250 < T[np.argmax(chi)] < 268


def _write_model(folder, extra=""):
    path = folder / "model.toml"
    path.write_text(MODEL.replace("format = 1\n", "format = 1\n" + extra))
    return path


def _mapping(folder, **parameters):
    write_csv(folder / "one.csv", "T,chi", [1.0, 2.0, 3.0, 4.0, 5.0], [1e-2] * 5)
    return {
        "format": 1,
        "model": str(folder / "model.toml"),
        "data": [{"name": "chi", "file": str(folder / "one.csv"), "quantity": "susceptibility",
                  "units": "emu/mol", "columns": {"temperature": "T", "value": "chi"}}],
        "parameters": parameters,
    }  # fmt: skip


def test_the_constants_here_agree_with_the_packages():
    from thermo import units

    assert pytest.approx(CURIE, rel=1e-9) == units.CURIE_EMU
    assert pytest.approx(fitting.MOMENT, rel=1e-8) == units.MOLAR_BOHR_MAGNETON_EMU


@pytest.mark.parametrize("shares", [((0.5, 1.0),), ((0.5, 0.25), (2.0, 0.75))])
def test_free_ions_of_negative_g_in_any_field(shares):
    """The moment is odd in g, and neither sign overflows, however cold it is."""
    T, field = np.array([1e-3, 2.0]), np.array([3000.0, 3.0])
    up, down = _free_moments(shares, T, field), _free_moments(shares, T, -field)
    for one, other, sign in zip(up, down, (1, -1, 1), strict=True):
        np.testing.assert_allclose(other, sign * one, rtol=1e-12)


def test_a_model_of_negative_g_at_field_is_fitted_like_one_of_positive(tmp_path):
    B = np.linspace(0.5, 30, 30)
    moment, _ = fitting.dimer_moments(1.5 + 0 * B, B, 20.0, 2.2)
    moment = 0.97 * moment / 2 + 0.03 * np.tanh(2.2 * MU_B * B / 3) / 2
    write_csv(tmp_path / "m.csv", "B,M", B, 2.2 * moment)
    data = {"name": "M", "file": str(tmp_path / "m.csv"), "quantity": "magnetization",
            "units": "muB", "temperature": 1.5, "absolute_uncertainty": 1e-4,
            "columns": {"field": "B", "value": "M"}}  # fmt: skip
    for g in ("2.2", "-2.2"):
        path = tmp_path / "model.toml"
        path.write_text(MODEL.replace("spin = 0.5", f"spin = 0.5\ng = {g}"))
        parameters = {"J": {"start": 24.0}, "paramagnetic_fraction": {"start": 0.01}}
        study = {"format": 1, "model": str(path), "data": [data], "parameters": parameters}
        result = fit(study)
        assert result["J"].value == pytest.approx(20.0, rel=1e-6)
        assert result["paramagnetic_fraction"].value == pytest.approx(0.03, rel=1e-6)


def test_stated_units_apply_to_values_stated_for_all_rows(tmp_path):
    study = _mapping(tmp_path, J={"start": 20.0})
    _write_model(tmp_path)
    (data,) = study["data"]
    data |= {"field": 15, "field_unit": "kOe"}
    (found,) = read_study(study).sets
    np.testing.assert_allclose(found.field, 1.5, rtol=1e-12)
    write_csv(tmp_path / "one.csv", "B,M", [1.0, 2.0, 3.0], [0.1, 0.2, 0.3])
    del data["field"]
    data |= {"quantity": "magnetization", "temperature": 1800, "temperature_unit": "mK",
             "columns": {"field": "B", "value": "M"}, "range": [1, 2]}  # fmt: skip
    (found,) = read_study(study).sets
    np.testing.assert_allclose(found.temperature, 1.8, rtol=1e-12)
    np.testing.assert_allclose(found.field, [0.1, 0.2, 0.3], rtol=1e-12)
