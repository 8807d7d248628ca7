"""Profile intervals, identifiability, cautions of residuals and surroundings, further starts."""

from __future__ import annotations

import math

import numpy as np
import pytest

from tests.fitting import CURIE, TRUE, R, dimer_chi, dimer_heat, write_dimer
from tests.test_fit_surroundings import T, data, model_of, study_of
from thermo import errors
from thermo.fit import fit, read_study
from thermo.fit.problem import make_problem
from thermo.fit.profiles import held, minos
from thermo.fit.result import RISE
from thermo.fit.surroundings import debye


def noisy(folder, seed=1, sigma=2e-4, **more):
    rng = np.random.default_rng(seed)
    chi = dimer_chi(T, 42.5, 2.13) + sigma * rng.standard_normal(len(T))
    return data(folder, values=chi, absolute_uncertainty=sigma, **more)


def parts(result):
    problem = make_problem(result.study, result.forward, None)
    return problem, np.array([result[n].value for n in result.free_names])


def test_the_levels_are_quantiles_of_chi_square():
    from scipy.stats import chi2

    for level, rise in RISE.items():
        assert rise == pytest.approx(chi2.ppf(level, 1), rel=1e-6)


def test_profiles_of_a_linear_model_are_its_standard_errors(tmp_path):
    """χ is linear in chi0: the profile is a parabola."""
    result = fit(study_of(tmp_path, [noisy(tmp_path)], {"J": {"fixed": 42.5}, "chi0": {}}),
                 profiles="all")  # fmt: skip
    e = result["chi0"]
    for level, width in ((0.68, 0.994458), (0.95, 1.959964)):
        interval = e.interval(level)
        assert interval.lower == pytest.approx(e.value - width * e.standard_error, rel=3e-3)
        assert interval.upper == pytest.approx(e.value + width * e.standard_error, rel=3e-3)
        assert not interval.lower_at_bound
        assert not interval.upper_at_bound


def test_profiles_are_those_of_minos(tmp_path):
    """Two ways to the same ends: least squares with one parameter held, and Minuit's."""
    parameters = {"J": {"start": 40.0}, "g": {}, "chi0": {}}
    result = fit(study_of(tmp_path, [noisy(tmp_path, sigma=1e-3)], parameters), profiles="none")
    problem, theta = parts(result)
    for k in range(3):
        one, _ = held(problem, theta, k, result, 1.0)
        other, _ = minos(problem, theta, k, result, 1.0)
        error = result[result.free_names[k]].standard_error
        for a, b in zip(one, other, strict=True):
            assert a.lower == pytest.approx(b.lower, abs=5e-3 * error)
            assert a.upper == pytest.approx(b.upper, abs=5e-3 * error)
    # The profile of J is skew where the standard error is not.
    first = held(problem, theta, 0, result, 1.0)[0][1]
    assert abs(first.upper + first.lower - 2 * theta[0]) > 0.02 * (first.upper - first.lower)


def test_a_profile_ends_at_the_bound(tmp_path):
    """No impurities in the data: the fraction is at or near 0, which its interval includes."""
    at_bound = 0
    for seed in range(4):
        result = fit(study_of(tmp_path, [noisy(tmp_path, seed)],
                              {"J": {"start": 40.0}, "paramagnetic_fraction": {}}))  # fmt: skip
        e = result["paramagnetic_fraction"]
        assert e.intervals, "near a bound: looked for without being asked"
        wide = e.interval(0.95)
        assert wide.lower == 0
        assert wide.lower_at_bound
        assert 0 < wide.upper < 0.1
        at_bound += bool(e.at_bound)
        if e.at_bound:
            assert math.isnan(e.standard_error)
            assert e.interval(0.68).upper < wide.upper
    assert at_bound


def test_profiles_where_asked_for(tmp_path):
    sets = [noisy(tmp_path)]
    parameters = {"J": {"start": 40.0}, "g": {}}
    plain = fit(study_of(tmp_path, sets, parameters))
    assert plain["J"].intervals == ()
    asked = fit(study_of(tmp_path, sets, parameters, profile=["J"]))
    assert [i.level for i in asked["J"].intervals] == [0.68, 0.95]
    assert asked["g"].intervals == ()
    assert fit(study_of(tmp_path, sets, parameters, profile=["J"]), profiles="none")[
        "J"
    ].intervals == ()  # fmt: skip
    with pytest.raises(errors.StudyError, match="profile names 'K'"):
        read_study(study_of(tmp_path, sets, parameters, profile=["K"]))
    with pytest.raises(errors.RangeError, match="profiles"):
        fit(study_of(tmp_path, sets, parameters), profiles="some")


def test_profiles_without_stated_uncertainties_use_the_scatter(tmp_path):
    sets = [noisy(tmp_path)]
    stated = dict(sets[0])
    del sets[0]["absolute_uncertainty"]
    parameters = {"J": {"start": 40.0}, "g": {}}
    scatter = fit(study_of(tmp_path, sets, parameters), profiles="all")
    size = float(np.mean(np.abs(scatter.sets[0].data.value))) / scatter.sets[0].data.to_si
    stated["absolute_uncertainty"] = scatter.scatter * size
    known = fit(study_of(tmp_path, [stated], parameters), profiles="all")
    for name in ("J", "g"):
        for a, b in zip(scatter[name].intervals, known[name].intervals, strict=True):
            error = known[name].standard_error
            assert a.lower == pytest.approx(b.lower, abs=0.01 * error)
            assert a.upper == pytest.approx(b.upper, abs=0.01 * error)


def test_what_the_data_do_not_fix_is_named_with_its_numbers(tmp_path):
    """g and a scale of everything: only g²·scale is fixed, for small changes 2 dg/g = −ds/s."""
    result = fit(study_of(tmp_path, [noisy(tmp_path)],
                          {"J": {"start": 40.0}, "g": {},
                           "scale_susceptibility": {"prior": False}}))  # fmt: skip
    assert not result.identifiable
    assert result.singular_values[-1] < 1e-8 * result.singular_values[0]
    (told,) = [c for c in result.cautions if "do not fix" in c]
    assert "g and scale_susceptibility separately" in told
    step = -2 * result["scale_susceptibility"].value / result["g"].value
    assert result.unfixed.startswith("g by +1 and scale_susceptibility by ")
    assert float(result.unfixed.split()[-1].replace("−", "-")) == pytest.approx(step, rel=1e-2)
    # With the usual prior on the scale both are known, and g is no better known than it.
    held_ = fit(study_of(tmp_path, [noisy(tmp_path)],
                         {"J": {"start": 40.0}, "g": {}, "scale_susceptibility": {}}))  # fmt: skip
    assert held_.identifiable
    assert held_["g"].standard_error / held_["g"].value == pytest.approx(0.025, rel=0.05)


def test_a_trend_and_an_outlier_are_told(tmp_path):
    sigma = 2e-4
    good = fit(study_of(tmp_path, [noisy(tmp_path)], {"J": {"start": 40.0}, "g": {}}))
    assert not [c for c in good.cautions if "follow each other" in c or "chance" in c]
    assert abs(good.sets[0].runs_score) < 3
    assert 1.2 < good.sets[0].durbin_watson < 2.8
    wrong = noisy(tmp_path)
    chi = dimer_chi(T, 42.5, 2.13) + 6 * sigma * np.sin(3 * np.log(T))
    chi[20] += 40 * sigma
    wrong = data(tmp_path, values=chi, absolute_uncertainty=sigma)
    bad = fit(study_of(tmp_path, [wrong], {"J": {"start": 40.0}, "g": {}}))
    assert any("follow each other" in c and "runs test" in c for c in bad.cautions)
    (told,) = [c for c in bad.cautions if "too far off for chance" in c]
    assert f"line {20 + 3}" in told.split(",")[0]  # a comment, a header, and lines count from 1
    assert bad.sets[0].outliers[0] == 20


def test_surroundings_that_eat_the_signal_are_told(tmp_path):
    def cautions(values, parameters, quantity="susceptibility", sigma=1e-4, **more):
        sets = [data(tmp_path, quantity, values=values, absolute_uncertainty=sigma)]
        return " | ".join(fit(study_of(tmp_path, sets, parameters, **more)).cautions)

    chi = dimer_chi(T, 42.5, 2.13)
    assert "eating" not in cautions(chi + 1e-4, {"J": {}, "chi0": {}})
    flat = 0.01 * chi + 0.02
    assert "chi0 makes most of 'susceptibility'" in cautions(flat, {"J": {}, "chi0": {}})
    free = CURIE * 4 / (4 * T)
    assert "hardly an impurity" in cautions(
        0.5 * chi + 0.5 * free, {"J": {}, "paramagnetic_fraction": {}}
    )
    assert "mean field is no approximation" in cautions(
        chi / (1 + 60 / CURIE / 2.13**2 * chi),
        {"J": {"fixed": 42.5}, "intercluster_coupling": {"start": 1.0}, "g": {"fixed": 2.13}},
    )
    assert "ends 10.0 errors above its prior" in cautions(
        chi, {"J": {"fixed": 42.5}, "g": {"prior": [2.03, 0.01]}}, sigma=1e-7
    )
    heat = 3 * R * 2000 * debye(T, 300.0)[0] + dimer_heat(T, 42.5)
    told = cautions(heat, {"J": {"start": 40.0}, "debye_temperature": {}}, "specific_heat", 0.1,
                    lattice_heat={"atoms": 2000, "per": "ion"})  # fmt: skip
    assert "rest on the form supposed for the lattice" in told


def test_an_ordering_molecular_field_is_told_and_left_again(tmp_path):
    chi = dimer_chi(T, 5.0, 2.0)
    a = -0.2 * 5.0
    truth = chi / (1 + a / CURIE / 4 * chi)
    sets = [data(tmp_path, values=truth, absolute_uncertainty=1e-5)]
    parameters = {"J": {"start": 5.0}, "g": {"fixed": 2.0},
                  "intercluster_coupling": {"start": -4.5}}  # fmt: skip
    result = fit(study_of(tmp_path, sets, parameters))
    assert result["intercluster_coupling"].value == pytest.approx(a, rel=1e-4)
    wrong = {"J": {"fixed": 5.0}, "g": {}, "intercluster_coupling": {"fixed": -40.0}}
    held_ = fit(study_of(tmp_path, sets, wrong))
    assert any("would order" in c for c in held_.cautions)


def test_further_starts_in_any_case(tmp_path):
    study = study_of(tmp_path, [data(tmp_path, values=1e-2 / (T + 5))],
                     {"J1": {"lower": -60.0, "upper": 60.0}, "J2": {"lower": -60.0, "upper": 60.0}},
                     model_of("isotropic"), starts=4)  # fmt: skip
    result = fit(study)
    assert result.n_starts == 5
    assert "5 starts were tried" in result.message
    assert fit(study)["J1"].value == result["J1"].value
    for bad in (-1, 2.5, True, 5000):
        with pytest.raises(errors.StudyError, match="starts"):
            read_study(study | {"starts": bad})


def test_the_dimer_of_the_other_tests_is_without_doubts(tmp_path):
    result = fit(write_dimer(tmp_path, noise=1.0))
    for name, true in TRUE.items():
        interval = result[name].interval(0.95)
        if interval is not None:
            assert interval.lower < true < interval.upper
    assert "chance" not in " ".join(result.cautions)
