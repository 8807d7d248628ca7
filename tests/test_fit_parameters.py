"""Ties, the count of solves, slopes, bounds and what a fit says when it cannot know."""

from __future__ import annotations

import math

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

import thermo
from tests.fitting import CURIE, MODEL, STUDY, TRUE, dimer_chi, dimer_heat, write_csv, write_dimer
from thermo.errors import StudyError, UnavailableError
from thermo.fit import fit, read_study
from thermo.fit.forward import Forward, Points
from thermo.fit.parameters import Parameter, Parameters
from thermo.fit.ties import Dual, order_ties, parse_tie
from thermo.spectrum.full import FullSolver

T = np.geomspace(3.0, 300.0, 50)


def chain(sites: int = 6, g: float = 2.1, **couplings: float) -> dict:
    """A model of strong and weak bonds in turn, and a third coupling to next neighbours."""
    values = {"J1": 60.0, "J2": 25.0, "J3": 0.0} | couplings
    bonds = []
    for i in range(sites):
        bonds.append([i, (i + 1) % sites, "J1" if i % 2 == 0 else "J2"])
        bonds.append([i, (i + 2) % sites, "J3"])
    return {
        "format": 1,
        "title": "a ring of the tests",
        "energy_unit": "K",
        "bond_term": "+J S.S",
        "couplings": values,
        "site": [{"name": f"s{i}", "spin": 0.5, "g": g} for i in range(sites)],
        "bond": [{"sites": [f"s{i}", f"s{j}"], "coupling": c} for i, j, c in bonds],
    }


def study_of(folder, parameters, model=None, quantities=("susceptibility", "specific_heat")):
    """A study of points made by the package itself at the model's own values."""
    spins = thermo.read_model(model or chain())
    levels = thermo.solve(spins)
    curves = thermo.curves(levels, T)
    data = []
    for quantity in quantities:
        values = curves[quantity].values[:, 0]
        write_csv(folder / f"{quantity}.csv", "T,value", T, values)
        units = {"susceptibility": "m3/mol", "specific_heat": "J/(mol K)"}[quantity]
        data.append(
            {
                "name": quantity,
                "file": str(folder / f"{quantity}.csv"),
                "quantity": quantity,
                "units": units,
                "columns": {"temperature": "T", "value": "value"},
                "absolute_uncertainty": float(0.01 * np.abs(values).max()),
            }
        )
    return {"format": 1, "model": spins, "data": data, "parameters": parameters}


# ---------------------------------------------------------------- ties


@given(st.floats(0.1, 10), st.floats(0.1, 10))
def test_ties_and_their_slopes(a: float, b: float) -> None:
    known = {"a": 0, "b": 0, "t": 0}
    values = {"a": Dual(a, np.array([1.0, 0.0])), "b": Dual(b, np.array([0.0, 1.0]))}
    for text, value, slope in (
        ("0.5*a", 0.5 * a, (0.5, 0)),
        ("-a", -a, (-1, 0)),
        ("a + b - 1", a + b - 1, (1, 1)),
        ("a*(b + 2)", a * (b + 2), (b + 2, a)),
        ("a/b", a / b, (1 / b, -a / b**2)),
        ("+a/(a + b)", a / (a + b), (b / (a + b) ** 2, -a / (a + b) ** 2)),
        ("3", 3.0, (0, 0)),
        ("1e-3*a*a", 1e-3 * a * a, (2e-3 * a, 0)),
    ):
        found = parse_tie("t", text, known).evaluate(values)
        assert found.value == pytest.approx(value, rel=1e-13)
        np.testing.assert_allclose(found.gradient, slope, rtol=1e-12, atol=1e-14)


@pytest.mark.parametrize(
    ("text", "words"),
    [
        ("__import__('os').system('true')", "a call"),
        ("abs(J1)", "a call"),
        ("J1**2", "operator"),
        ("J1 % 2", "operator"),
        ("J1 // 2", "operator"),
        ("~J1", "operator"),
        ("J1.real", "other than arithmetic"),
        ("[J1]", "other than arithmetic"),
        ("J1 if J2 else J1", "other than arithmetic"),
        ("J1 < J2", "other than arithmetic"),
        ("(x := J1)", "other than arithmetic"),
        ("lambda: 1", "other than arithmetic"),
        ("'J1'", "not a number"),
        ("2j*J1", "not a number"),
        ("True*J1", "not a number"),
        ("1e999*J1", "too large"),
        ("9" * 400, "too large"),
        ("0.5*J11", "did you mean 'J1'"),
        ("0.5*Q", "known: J1, J2, J3"),
        ("0.5*", "not an arithmetic expression"),
        ("0,5*J1", "other than arithmetic"),
        ("J1; J2", "not an arithmetic expression"),
        ("J1\x00", "not an arithmetic expression"),
        ("(" * 250 + "J1" + ")" * 250, "characters"),
        ("(" * 240 + "J1" + ")" * 240, "not an arithmetic expression"),
    ],
)
def test_what_a_tie_may_not_be(text: str, words: str) -> None:
    with pytest.raises(StudyError, match=words) as caught:
        parse_tie("J3", text, {"J1": 0, "J2": 0, "J3": 0})
    assert "parameters.J3.tied" in str(caught.value)
    assert "\n" not in str(caught.value)


def test_ties_in_a_circle_and_in_any_order() -> None:
    known = {"a": 0, "b": 0, "c": 0, "d": 0}
    ties = {n: parse_tie(n, e, known) for n, e in (("a", "2*b"), ("b", "c + d"), ("c", "3*d"))}
    assert [tie.parameter for tie in order_ties(ties)] == ["c", "b", "a"]
    ties["c"] = parse_tie("c", "a", known)
    with pytest.raises(StudyError, match="circle, a -> b -> c -> a"):
        order_ties(ties)
    itself = {"a": parse_tie("a", "a + 1", known)}
    with pytest.raises(StudyError, match="circle, a -> a"):
        order_ties(itself)


def test_dividing_by_zero_is_told() -> None:
    def parameters(start: float) -> Parameters:
        return Parameters(
            [
                Parameter("a", "coupling", "free", "K", start),
                Parameter("b", "coupling", "tied", "K", math.nan, expression="1/a"),
            ]
        )

    with pytest.raises(StudyError, match="divides by zero at a = 0"):
        parameters(0.0)
    with pytest.raises(StudyError, match="divides by zero"):
        parameters(1.0).values(np.zeros(1))
    with pytest.raises(StudyError, match="not finite at a"):
        parameters(1.0).values(np.array([1e-310]))


def test_a_tied_coupling_follows_and_has_an_error(tmp_path) -> None:
    study = study_of(
        tmp_path,
        {"J1": {"start": 40.0, "lower": 1.0}, "J2": {"tied": "ratio*J1"}, "ratio": {"start": 0.7}},
    )
    result = fit(study)
    assert result["J1"].value == pytest.approx(60, rel=1e-6)
    assert result["ratio"].value == pytest.approx(25 / 60, rel=1e-6)
    assert result["J2"].value == pytest.approx(25, rel=1e-6)
    # The same fit in the couplings themselves gives the same error of J2.
    direct = fit(study_of(tmp_path, {"J1": {"start": 40.0}, "J2": {"start": 30.0}}))
    for name in ("J1", "J2"):
        assert result[name].standard_error == pytest.approx(direct[name].standard_error, rel=1e-4)
    assert result["J2"].status == "tied"
    assert list(result.to_dataset()["parameter_role"].values) == [1, 2, 0, 0, 0, 0, 1]


# ---------------------------------------------------------------- solves


class Counting:
    """A solver that counts."""

    def __init__(self, model) -> None:
        self.inner, self.calls = FullSolver(model), 0

    def table(self, couplings=None):
        self.calls += 1
        return self.inner.table(couplings)


@pytest.mark.parametrize(
    ("parameters", "solves"),
    [
        # All couplings move together: the scale alone, with everything else.
        ({"J1": {"start": 30.0}, "J2": {"tied": "J1*25/60"}}, 1),
        # One coupling besides zeros.
        ({"J1": {"start": 30.0}, "J2": {"fixed": 0.0}}, 1),
        # No coupling free.
        ({}, 1),
    ],
)
def test_scale_g_chi0_and_fraction_take_one_solve(tmp_path, parameters, solves) -> None:
    nuisance = {"g": {"start": 1.9}, "chi0": {}, "paramagnetic_fraction": {"start": 0.02}}
    study = read_study(study_of(tmp_path, parameters | nuisance))
    solver = Counting(study.model)
    result = fit(study, solver=solver)
    assert result.n_evaluations > 4
    assert solver.calls == result.n_solves == solves
    result.to_dataset()
    result.predict("susceptibility", T)
    assert solver.calls == solves


def test_a_coupling_that_changes_sign_needs_no_second_solve(tmp_path) -> None:
    study = read_study(
        study_of(tmp_path, {"J1": {"start": -5.0}, "J2": {"fixed": 0.0}},
                 chain(J1=4.0, J2=0.0), ("susceptibility",))
    )  # fmt: skip
    solver = Counting(study.model)
    result = fit(study, solver=solver)
    assert result["J1"].value == pytest.approx(4.0, rel=1e-8)
    assert solver.calls == 1


def test_two_couplings_take_two_solves_a_step(tmp_path) -> None:
    result = fit(study_of(tmp_path, {"J1": {"start": 45.0}, "J2": {"start": 35.0}, "g": {}}))
    assert result["J1"].value == pytest.approx(60, rel=1e-7)
    assert result["J2"].value == pytest.approx(25, rel=1e-7)
    # One for each new direction, one for its slope, and two at the end.
    assert result.n_solves <= 2 * result.n_evaluations + 2


@pytest.mark.parametrize(
    "parameters",
    [
        {"J1": {"start": 60.0}, "J2": {"start": 25.0}, "J3": {"start": -7.0}},
        {"J1": {"start": 60.0}, "J3": {"start": 5.0}},
        {"J1": {"start": 60.0}, "J2": {"tied": "x*J1"}, "x": {"start": 0.4},
         "J3": {"tied": "0.1*J1 - J2/8"}},
        {"J2": {"start": 25.0}, "g": {"start": 2.2}, "chi0": {"start": 1e-4},
         "paramagnetic_fraction": {"start": 0.1}},
    ],
)  # fmt: skip
@pytest.mark.parametrize("field", [0.0, 20.0])
def test_slopes_against_differences_of_whole_predictions(tmp_path, parameters, field) -> None:
    model = thermo.read_model(chain())
    study = read_study(study_of(tmp_path, parameters, chain()))
    forward = Forward(model, FullSolver(model), chi0_to_si=4e-6 * math.pi)
    t = np.array([4.0, 15.0, 60.0, 200.0])
    sets = [
        Points(quantity, t, np.full(4, field), "ion")
        for quantity in ("susceptibility", "chi_T", "specific_heat", "magnetization",
                         "specific_heat_over_T")
    ]  # fmt: skip
    p = study.parameters
    found = forward.jacobian(sets, p.values(p.start))

    def whole(theta):
        return np.concatenate([forward.predict(points, p.values(theta)) for points in sets])

    for k in range(len(p.free)):
        h = 3e-4 * max(abs(p.start[k]), 1e-3)
        step = h * np.eye(len(p.free))[k]
        near = whole(p.start + step) - whole(p.start - step)
        far = whole(p.start + 2 * step) - whole(p.start - 2 * step)
        slope = (8 * near - far) / (12 * h)
        for rows in np.split(np.arange(len(slope)), len(sets)):
            size = np.abs(slope[rows]).max()
            np.testing.assert_allclose(found[rows, k], slope[rows], rtol=0, atol=2e-7 * size)


# ---------------------------------------------------------------- bounds and unknowables


def test_a_parameter_at_its_bound_says_so(tmp_path) -> None:
    text = STUDY.replace("start = 30.0, lower = 1.0, upper = 200.0",
                         "start = 30.0, lower = 1.0, upper = 40.0")  # fmt: skip
    result = fit(write_dimer(tmp_path, noise=1.0, study=text))
    assert result["J"].value == 40.0
    assert result["J"].at_bound == 1
    assert math.isnan(result["J"].standard_error)
    assert result["J"].reason == "at a bound"
    assert result.at_bound == ("J",)
    assert not result.trustworthy
    assert result["g"].standard_error > 0
    assert np.isnan(result.correlation[0]).all()
    assert np.isfinite(result.correlation[1:, 1:]).all()
    assert any("upper bound 40" in caution for caution in result.cautions)
    assert list(result.to_dataset()["at_bound"].values) == [1, 0, 0, 0]


def test_no_impurities_sit_at_the_bound_or_within_their_error(tmp_path) -> None:
    seen = set()
    for seed in range(6):
        rng = np.random.default_rng(seed)
        chi = dimer_chi(T, 42.0, 2.1)
        write_csv(tmp_path / "chi.csv", "T,chi", T, chi * (1 + 0.01 * rng.standard_normal(len(T))))
        (tmp_path / "model.toml").write_text(MODEL)
        result = fit(
            {
                "format": 1,
                "model": str(tmp_path / "model.toml"),
                "data": [{"name": "chi", "file": str(tmp_path / "chi.csv"), "units": "emu/mol",
                          "quantity": "susceptibility", "relative_uncertainty": 0.01,
                          "columns": {"temperature": "T", "value": "chi"}}],
                "parameters": {"J": {}, "g": {}, "paramagnetic_fraction": {"start": 0.01}},
            }
        )  # fmt: skip
        rho = result["paramagnetic_fraction"]
        seen.add(rho.at_bound)
        if rho.at_bound:
            assert rho.value == 0.0
        else:
            assert 0 < rho.value < 5 * rho.standard_error
        assert result["J"].value == pytest.approx(42.0, abs=5 * result["J"].standard_error)
    assert seen == {-1, 0}


def test_one_free_parameter_at_its_bound(tmp_path) -> None:
    write_dimer(tmp_path)
    text = STUDY[: STUDY.index("[parameters]")]
    text += "[parameters]\nJ = { start = 10.0, lower = 1.0, upper = 20.0 }\n"
    (tmp_path / "study.toml").write_text(text)
    result = fit(tmp_path / "study.toml")
    assert result["J"].value == 20.0
    assert result["J"].at_bound == 1
    assert result.reduced_chi_square > 10
    assert any("reduced chi square" in caution for caution in result.cautions)


def test_what_the_data_do_not_fix_has_no_error(tmp_path) -> None:
    """Of a·b only the product is fixed."""
    result = fit(
        study_of(tmp_path, {"J1": {"tied": "a*b"}, "J2": {"tied": "a*b*25/60"},
                            "a": {"start": 5.0}, "b": {"start": 10.0}})
    )  # fmt: skip
    assert not result.identifiable
    assert not result.trustworthy
    assert result["J1"].value == pytest.approx(60, rel=1e-6)
    assert math.isnan(result["a"].standard_error)
    assert result["a"].reason == "the data do not fix a and b"
    assert any("do not fix a and b" in caution for caution in result.cautions)
    result.to_dataset()


def test_a_coupling_without_effect_is_refused(tmp_path) -> None:
    """Bonds between all sites of one dimer carry J; a coupling of S² constants does nothing."""
    model = chain(2)
    model["bond"] = [{"sites": ["s0", "s1"], "coupling": "J1"}]
    model["ion"] = [{"sites": ["s0"], "coupling": "D", "form": "axial"}]
    model["couplings"] = {"J1": 60.0, "D": 5.0}
    with pytest.raises(StudyError, match=r"do not change with parameters\.D"):
        fit(study_of(tmp_path, {"J1": {"start": 50.0}, "D": {"start": 5.0}}, model))


def test_a_model_whose_moment_is_not_conserved(tmp_path) -> None:
    model = chain(2)
    model["bond"] = [{"sites": ["s0", "s1"], "coupling": "J1",
                      "matrix": [[1, 0, 0], [0, 2, 0], [0, 0, 3]]}]  # fmt: skip
    model["couplings"] = {"J1": 60.0}
    # Its specific heat can be fitted …
    result = fit(study_of(tmp_path, {"J1": {"start": 50.0}}, model, ("specific_heat",)))
    assert result["J1"].value == pytest.approx(60, rel=1e-8)
    # … but not its susceptibility, nor its specific heat in a field.
    study = study_of(tmp_path, {"J1": {"start": 50.0}}, model, ("specific_heat",))
    study["data"][0]["field"] = 2.0
    with pytest.raises(UnavailableError, match="conserve"):
        fit(study)
    study["data"][0] |= {"quantity": "susceptibility", "units": "emu/mol", "field": 0.0}
    with pytest.raises(UnavailableError, match="conserve"):
        fit(study)


def test_a_model_whose_g_differs(tmp_path) -> None:
    model = chain(2)
    model["bond"] = [{"sites": ["s0", "s1"], "coupling": "J1"}]
    model["couplings"] = {"J1": 60.0}
    model["site"][0]["g"] = 2.2
    study = study_of(tmp_path, {"J1": {"start": 50.0}}, model, ("specific_heat",))
    result = fit(study)
    assert result["J1"].value == pytest.approx(60, rel=1e-8)
    assert "g" not in result.to_dataset()["parameter_name"].values
    study["data"][0] |= {"quantity": "susceptibility", "units": "emu/mol"}
    with pytest.raises(UnavailableError, match="one g"):
        read_study(study)


def test_progress_is_told_and_rises(tmp_path) -> None:
    told: list[tuple[float, str]] = []
    fit(write_dimer(tmp_path), progress=lambda done, text: told.append((done, text)))
    shares = [done for done, _ in told]
    assert shares == sorted(shares)
    assert shares[0] >= 0
    assert shares[-1] < 1
    assert "chi square" in told[0][1]


def test_the_fraction_replaces_spins_rather_than_adding_them(tmp_path) -> None:
    """At high temperature free and coupled spins have one Curie constant."""
    result = fit(write_dimer(tmp_path))
    hot = result.predict("chi_T", 1e7, units="emu K/mol") - TRUE["chi0"] * 1e7
    assert hot == pytest.approx(CURIE * TRUE["g"] ** 2 / 4, rel=1e-4)
    np.testing.assert_allclose(
        result.predict("specific_heat", T), dimer_heat(T, TRUE["J"], 0.021), rtol=1e-6
    )


# ---------------------------------------------------------------- runaways


def triangle(folder, **starts) -> dict:
    """Three spins ½, J = −60 on two bonds and J2 = 35 on the third, g = 2.2; χ without noise."""
    model = {
        "format": 1, "energy_unit": "K", "bond_term": "+J S.S",
        "couplings": {"J": -60.0, "J2": 35.0},
        "site": [{"name": name, "spin": 0.5, "g": 2.2} for name in "abc"],
        "bond": [{"sites": list(pair), "coupling": c}
                 for pair, c in (("ab", "J"), ("bc", "J"), ("ac", "J2"))],
    }  # fmt: skip
    hot = np.linspace(2.0, 300.0, 40)
    spins = thermo.read_model(model)
    chi = thermo.curves(thermo.solve(spins), hot)["susceptibility"].values[:, 0]
    write_csv(folder / "chi.csv", "T,value", hot, chi)
    data = {"name": "chi", "file": str(folder / "chi.csv"), "quantity": "susceptibility",
            "units": "m3/mol", "relative_uncertainty": 1e-3,
            "columns": {"temperature": "T", "value": "value"}}  # fmt: skip
    parameters = {name: {"start": start} for name, start in starts.items()} | {"g": {}}
    return {"format": 1, "model": spins, "data": [data], "parameters": parameters}


def test_a_fit_that_ran_away_says_so_and_is_led_back_by_other_starts(tmp_path) -> None:
    study = triangle(tmp_path, J=-70.0, J2=20.0)
    lost = fit(study, starts=0)
    assert abs(lost["J"].value) > 1000
    assert not lost.identifiable
    assert not lost.trustworthy
    assert math.isnan(lost["J"].standard_error)
    assert "do not fix J" in lost["J"].reason
    assert any("J ran away to where the data do not depend on it" in c for c in lost.cautions)
    assert np.isnan(lost.covariance).all()
    lost.to_dataset()
    found = fit(study)
    assert found.trustworthy
    assert found["J"].value == pytest.approx(-60, rel=1e-6)
    assert found["J2"].value == pytest.approx(35, rel=1e-6)


def test_a_small_value_known_to_be_small_is_no_runaway(tmp_path) -> None:
    """An error larger than the value and its start is a result where it is below the others."""
    model = chain(J3=0.0)
    study = study_of(tmp_path, {"J1": {"start": 50.0}, "J3": {"start": 0.01}, "chi0": {}}, model)
    result = fit(study)
    assert abs(result["J3"].value) < result["J3"].standard_error
    assert result.trustworthy
    assert abs(result["chi0"].value) < result["chi0"].standard_error


def test_a_long_chain_of_ties_and_a_long_circle() -> None:
    known = {f"x{k}": 0 for k in range(1501)}
    ties = {f"x{k}": parse_tie(f"x{k}", f"x{k + 1}", known) for k in range(1500)}
    assert [tie.parameter for tie in order_ties(ties)] == [f"x{k}" for k in range(1499, -1, -1)]
    ties["x1500"] = parse_tie("x1500", "x0", known)
    with pytest.raises(StudyError, match="circle, x0 -> x1") as caught:
        order_ties(ties)
    assert len(str(caught.value)) < 250
