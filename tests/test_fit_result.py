"""What a fit says of itself: cautions, further starts, and the result in a few lines."""

from __future__ import annotations

import dataclasses
import math
import re

import numpy as np
import pytest

import thermo
from tests.fitting import STUDY, write_dimer
from thermo.errors import RangeError
from thermo.fit import fit, read_study
from thermo.fit.cautions import _groups
from thermo.fit.forward import Forward, Points
from thermo.fit.starts import further_starts, suspicious
from thermo.numbers import with_uncertainty
from thermo.spectrum.full import FullSolver

T = np.geomspace(3.0, 200.0, 40)


def pair(spin: float = 1, **couplings: float) -> dict:
    """Two spins with exchange J and, if it is among the couplings, an axial ion term D."""
    model = {
        "format": 1, "energy_unit": "K", "bond_term": "+J S.S", "couplings": couplings,
        "site": [{"name": name, "spin": spin, "g": 2.1} for name in "ab"],
        "bond": [{"sites": ["a", "b"], "coupling": "J"}],
    }  # fmt: skip
    if "D" in couplings:
        model["ion"] = [{"sites": ["a", "b"], "coupling": "D", "form": "axial"}]
    return model


def study_of(folder, model: dict, parameters: dict, error: float = 0.005, **more) -> dict:
    """A study of the model's own susceptibility, with a noise of ``error`` of each value."""
    built = thermo.read_model(model)
    forward = Forward(built, FullSolver(built), chi0_to_si=1.0)
    quantity = more.get("quantity", "susceptibility")
    field = np.full(len(T), more.get("field", 0.0))
    names = read_study_values(model, built)
    value = forward.predict(Points(quantity, T, field, "ion"), names)
    noisy = value * (1 + error * np.random.default_rng(3).standard_normal(len(T)))
    rows = zip(T, noisy, error * np.abs(value), strict=True)
    path = folder / "data.csv"
    path.write_text("T,value,error\n" + "\n".join(",".join(map(repr, map(float, r))) for r in rows))
    columns = {"temperature": "T", "value": "value", "uncertainty": "error"}
    data = {"name": "chi", "file": str(path), "quantity": quantity, "columns": columns,
            "units": "m3/mol"} | more  # fmt: skip
    return {"format": 1, "model": model, "data": [data], "parameters": parameters}


def read_study_values(model: dict, built):
    from thermo.fit.parameters import read_parameters
    from thermo.fit.strict import Section

    free = {name: {} for name in built.couplings}
    parameters = read_parameters(Section(free, "parameters", "test"), built)
    return parameters.values(parameters.start)


# ---------------------------------------------------------------- direction of the field


def test_an_anisotropic_model_says_for_which_direction_its_moment_is(tmp_path) -> None:
    model = pair(J=20.0, D=6.0)
    free = {"J": {"start": 15.0}, "D": {"start": 4.0}}

    def anisotropic(result) -> list[str]:
        return [c for c in result.cautions if "anisotropic" in c]

    (caution,) = anisotropic(fit(study_of(tmp_path, model, free)))
    assert "χ and M are for a field along z" in caution
    assert "powder data are an average this version does not make" in caution
    assert "'chi'" in caution
    assert not anisotropic(fit(study_of(tmp_path, model, free, direction="z")))
    heat = {"quantity": "specific_heat", "units": "J/(mol K)"}
    assert not anisotropic(fit(study_of(tmp_path, model, free, **heat)))
    assert anisotropic(fit(study_of(tmp_path, model, free, field=5.0, **heat)))
    xy = pair(J=20.0)
    xy["bond"][0]["form"] = "xy"
    assert anisotropic(fit(study_of(tmp_path, xy, {"J": {"start": 15.0}})))
    # Of an isotropic one nothing is said, with or without a direction.
    for more in ({}, {"direction": "z"}):
        result = fit(study_of(tmp_path, pair(J=20.0), {"J": {"start": 15.0}}, **more))
        assert result.cautions == ()


# ---------------------------------------------------------------- correlations


def test_strongly_correlated_parameters_are_one_sentence(tmp_path) -> None:
    """Hot data fix hardly more than a Curie constant."""
    study = study_of(tmp_path, pair(J=20.0), {"J": {"start": 15.0}, "g": {}, "chi0": {}})
    study["data"][0]["range"] = [60, 200]
    result = fit(study)
    strong = [c for c in result.cautions if "correlated" in c]
    assert len(strong) == 1
    assert strong[0].startswith("J, g and chi0 are strongly correlated (|r| up to 0.98")
    assert "change of J by " in strong[0]
    assert " K, g by " in strong[0]
    # What it names is what χ² notices least: that step raises it by 1, and of J alone by much more.
    size = re.findall(r"by ([+-]\S+)", strong[0])
    (data,), parameters = result.sets, result.study.parameters
    best = np.array([result[name].value for name in result.free_names])
    points = Points("susceptibility", data.data.temperature, data.data.field, "ion")

    def rise(step) -> float:
        values = parameters.values(best + step)
        residual = (data.data.value - result.forward.predict(points, values)) / data.uncertainty
        return float(residual @ residual) - result.chi_square

    together = np.array([float(x) for x in size])
    assert rise(together) < 3  # its two digits are rounded
    assert rise(together * [1, 0, 0]) > 20


def test_groups_are_connected() -> None:
    linked = np.eye(7, dtype=bool)
    for a, b in ((0, 4), (4, 6), (6, 2), (1, 5)):
        linked[a, b] = linked[b, a] = True
    assert _groups(linked) == [[0, 2, 4, 6], [1, 5]]
    assert _groups(np.eye(3, dtype=bool)) == []
    assert _groups(np.eye(0, dtype=bool)) == []


# ---------------------------------------------------------------- further starts


def test_further_starts_are_the_same_each_time_and_within_bounds(tmp_path) -> None:
    path = write_dimer(tmp_path, study=STUDY.replace(
        "J = { start = 30.0, lower = 1.0, upper = 200.0 }",
        'J = { tied = "a+b+c+d" }\na = { start = 3.0, lower = 1.0, upper = 200.0 }\n'
        "b = { start = -4.0, upper = 40.0 }\nc = { start = 0.0 }\n"
        "d = { start = 5000.0, lower = 4000.0 }"))  # fmt: skip
    parameters = read_study(path).parameters
    starts = further_starts(parameters, 40)
    lower, upper = parameters.bounds
    for one, again in zip(starts, further_starts(parameters, 40), strict=True):
        np.testing.assert_array_equal(one, again)
        assert np.all(one > lower)
        assert np.all(one < upper)
        assert np.all(np.isfinite(one))
    names = [p.name for p in parameters.free]
    found = dict(zip(names, np.array(starts).T, strict=True))
    assert found["a"].max() > 150
    assert np.sum(found["a"] < 10) > 10
    assert found["b"].min() < -8
    assert found["b"].max() > 8
    assert found["c"].min() < 0 < found["c"].max()
    assert set(found["g"]) == {2.0}
    # Without couplings there is nothing to spread.
    path.write_text(STUDY.replace("J = { start = 30.0, lower = 1.0, upper = 200.0 }\n", ""))
    assert further_starts(read_study(path).parameters, 6) == []


def test_what_makes_a_minimum_suspicious(tmp_path) -> None:
    parameters = read_study(write_dimer(tmp_path)).parameters
    points = (Points("susceptibility", T, 0 * T, "ion"),)
    inside = np.zeros(4, dtype=np.int64)
    noise = np.random.default_rng(1).standard_normal(len(T))
    waves = 1.5 * np.sign(np.sin(np.arange(len(T)) / 5))

    def found(residuals, bound=inside, weighted=True) -> bool:
        return suspicious(parameters, bound, points, residuals, weighted)

    assert not found(noise)
    assert found(2 * noise)
    assert found(1.2 * waves / 1.5)
    assert not found(0.3 * waves)  # follows the data within the errors
    assert found(noise, np.array([1, 0, 0, 0]))
    assert not found(noise, np.array([0, 0, 0, -1]))  # no impurities at all
    assert found(noise, np.array([0, 0, 0, 1]))
    assert not found(noise, weighted=False)
    assert found(0.05 * waves, weighted=False)
    assert not found(1e-9 * waves, weighted=False)
    assert not found(np.zeros(len(T)), weighted=False)


def test_the_sign_of_an_ion_term_is_found_from_the_wrong_one(tmp_path) -> None:
    model = pair(J=20.0, D=30.0)
    free = {"J": {"start": 150.0, "lower": -200, "upper": 200},
            "D": {"start": -150.0, "lower": -200, "upper": 200}}  # fmt: skip
    study = study_of(tmp_path, model, free, direction="z")
    result = fit(study)
    assert result["J"].value == pytest.approx(20.0, abs=5 * result["J"].standard_error)
    assert result["D"].value == pytest.approx(30.0, abs=5 * result["D"].standard_error)
    assert result.reduced_chi_square < 2


def test_a_bound_that_stands_in_the_way_is_told_after_all_starts(tmp_path) -> None:
    text = STUDY.replace("upper = 200.0", "upper = 35.0")
    result = fit(write_dimer(tmp_path, noise=1.0, study=text))
    assert result.at_bound == ("J",)
    assert result.n_starts == 7
    assert "none led lower" in result.message
    assert result.n_solves == 1  # one coupling alone: its scale needs no second spectrum
    assert any("(7 were tried)" in caution for caution in result.cautions)
    assert result.to_dataset().attrs["starts_tried"] == 7


@pytest.mark.parametrize("starts", [-1, 1.5, True, None, "6", 10**6])
def test_starts_that_are_no_number_of_starts(tmp_path, starts) -> None:
    with pytest.raises(RangeError, match="whole number"):
        fit(write_dimer(tmp_path), starts=starts)


# ---------------------------------------------------------------- the result in words


def test_a_result_prints_in_a_few_lines(tmp_path) -> None:
    result = fit(write_dimer(tmp_path, noise=1.0))
    text = str(result)
    assert text == repr(result)
    lines = text.splitlines()
    assert lines[0] == "Fit of invented points of a dimer"
    assert lines[1] == f"  {result['J']}"
    assert len(lines) == 6 + len(result.cautions)
    assert "emu/mol ion" in text
    assert "reduced χ² = " in lines[5]
    assert lines[5].endswith("; converged")
    for caution in result.cautions:
        assert f"Caution: {caution}" in lines


def test_an_estimate_prints_as_it_is_quoted(tmp_path) -> None:
    estimate = dataclasses.replace(
        fit(write_dimer(tmp_path))["J"], value=-42.0, standard_error=0.16, unit="cm-1"
    )
    assert str(estimate) == "J = -42.00(16) cm-1"
    fixed = dataclasses.replace(
        estimate, name="g", unit="1", value=2.0, standard_error=math.nan, reason="fixed"
    )
    assert str(fixed) == "g = 2 (fixed)"
    stuck = dataclasses.replace(fixed, value=3.0, at_bound=1, reason="at a bound")
    assert str(stuck) == "g = 3 (at its upper bound)"
    tied = dataclasses.replace(estimate, status="tied", expression="2*x")
    assert str(tied) == "J = -42.00(16) cm-1 (= 2*x)"
    bare = dataclasses.replace(tied, standard_error=math.nan, reason="tied to fixed values")
    assert str(bare) == "J = -42 cm-1 (= 2*x; tied to fixed values)"


def test_an_absurdly_small_error_does_not_print_a_hundred_digits() -> None:
    assert len(with_uncertainty(41.25, 1e-90)) < 20
    assert with_uncertainty(41.25, 1e-90) == "41.25"
