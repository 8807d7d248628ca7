"""Candidates compete: criteria, verdicts, and what to measure next. All data are invented."""

from __future__ import annotations

import io
import math
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest

import thermo
from tests.fitting import CURIE, dimer_chi
from tests.rivals import network, parameters, rival_study
from thermo.errors import PartitaError, StudyError, UnitsError
from thermo.fit.candidates import compare, criteria, read_rivals
from thermo.fit.residual_tests import chance, durbin_watson, runs_score
from thermo.fit.verdict import conclude
from thermo.units import CHI_SI_PER_EMU

T = np.geomspace(8.0, 300.0, 60)


def chain_chi(J, K, size=16):
    model = thermo.read_model(network("alternating chain", size, J=J, K=K))
    curves = thermo.curves(thermo.solve(model), T)
    return curves["susceptibility"].values[:, 0] / CHI_SI_PER_EMU


@pytest.fixture(scope="module")
def alternating():
    return chain_chi(70.0, 28.0)


def noisy(chi, error, seed):
    return chi + error * np.random.default_rng(seed).standard_normal(len(chi))


def dimer_study(folder, chi, error, **more):
    """Closed-form points against two molecules: a dimer, and a pair of dimers coupled."""
    square = {
        **network("dimer"),
        "couplings": {"J": 60.0, "K": 10.0},
        "site": [{"spin": 0.5, "g": 2.1}] * 4,
        "bond": [
            {"sites": [0, 1], "coupling": "J"},
            {"sites": [2, 3], "coupling": "J"},
            {"sites": [1, 2], "coupling": "K"},
            {"sites": [3, 0], "coupling": "K"},
        ],
    }
    content = rival_study(folder, T, chi, error, ("dimer",), **more)
    content["candidate"].append(
        {"name": "square", "model": square, "parameters": parameters("ladder")}
    )
    return content


# ---------------------------------------------------------------- tests of residuals


def test_runs_against_the_textbook():
    """Twelve of one sign and eight of the other: mean and variance by Wald and Wolfowitz."""
    up, down = 12, 8
    n = up + down
    signs = np.array([1, 1, -1, -1, 1, 1, 1, -1, 1, 1, -1, -1, -1, 1, 1, 1, 1, -1, 1, -1.0])
    assert (signs > 0).sum() == up
    runs = 1 + sum(a != b for a, b in zip(signs[1:], signs[:-1], strict=True))
    mean = 2 * up * down / n + 1
    variance = 2 * up * down * (2 * up * down - n) / (n**2 * (n - 1))
    assert runs_score(signs) == pytest.approx((runs - mean) / math.sqrt(variance), rel=1e-12)
    assert runs_score(np.ones(20)) == -math.inf
    assert math.isnan(runs_score(np.ones(5)))
    assert math.isnan(runs_score(np.zeros(50)))


def test_durbin_watson_and_the_chance_of_chi_square():
    assert durbin_watson(np.array([1.0, -1.0, 1.0, -1.0])) == pytest.approx(3.0)
    assert durbin_watson(np.array([1.0, 1.0, 1.0])) == 0
    assert math.isnan(durbin_watson(np.zeros(4)))
    # With two degrees of freedom the chance is exp(-χ²/2), exactly.
    assert chance(5.0, 2) == pytest.approx(math.exp(-2.5), rel=1e-12)
    assert math.isnan(chance(5.0, 0))


# ---------------------------------------------------------------- criteria


def test_criteria_are_those_of_their_authors(tmp_path):
    error = 0.01 * dimer_chi(T, 60.0, 2.1)
    chi = noisy(dimer_chi(T, 60.0, 2.1), error, 3)
    found = compare(dimer_study(tmp_path, chi, error))
    n = 60
    for c in found.candidates:
        k, chi_square = c.n_parameters, c.result.chi_square
        aicc, bic = criteria(c.result)
        assert aicc == pytest.approx(chi_square + 2 * k + 2 * k * (k + 1) / (n - k - 1), rel=1e-12)
        assert bic == pytest.approx(chi_square + k * math.log(n), rel=1e-12)
    for weight in ("aicc_weight", "bic_weight"):
        assert sum(getattr(c, weight) for c in found.candidates) == pytest.approx(1, rel=1e-12)
    a, b = found.candidates
    assert a.aicc == 0
    assert b.aicc_weight / a.aicc_weight == pytest.approx(math.exp(-b.aicc / 2), rel=1e-9)


def test_without_uncertainties_the_scatter_is_one_parameter_more(tmp_path):
    error = 0.01 * dimer_chi(T, 60.0, 2.1)
    chi = noisy(dimer_chi(T, 60.0, 2.1), error, 3)
    content = dimer_study(tmp_path, chi, error)
    del content["data"][0]["columns"]["uncertainty"]
    found = compare(content)
    n = 60
    for c in found.candidates:
        r = c.result.sets[0].residual / np.mean(np.abs(c.result.sets[0].data.value))
        k = c.n_parameters + 1
        expected = n * math.log(r @ r / n) + 2 * k + 2 * k * (k + 1) / (n - k - 1)
        assert criteria(c.result)[0] == pytest.approx(expected, rel=1e-12)
        assert math.isnan(c.probability)
    assert found.conclusion == "undecided"


def test_a_prior_counts_as_one_more_point(tmp_path):
    error = 0.01 * dimer_chi(T, 60.0, 2.1)
    content = dimer_study(tmp_path, noisy(dimer_chi(T, 60.0, 2.1), error, 3), error)
    for entry in content["candidate"]:
        entry["parameters"]["g"] = {"prior": [2.0, 0.01]}
    for c in compare(content, profiles="none").candidates:
        pull = (c.result["g"].value - 2.0) / 0.01
        assert abs(pull) > 1
        badness = c.result.chi_square + pull**2
        assert criteria(c.result)[1] == pytest.approx(
            badness + c.n_parameters * math.log(61), rel=1e-9
        )
        assert c.probability == pytest.approx(chance(badness, 61 - c.n_parameters), rel=1e-6)


# ---------------------------------------------------------------- verdicts


def test_a_simpler_model_inside_a_richer_one_is_never_ruled_out_by_it(tmp_path):
    """Points of a dimer: the square with K free contains it, so the two cannot be told apart."""
    error = 0.01 * dimer_chi(T, 60.0, 2.1)
    found = compare(dimer_study(tmp_path, noisy(dimer_chi(T, 60.0, 2.1), error, 1), error))
    assert found.conclusion == "undecided"
    assert "cannot be told apart" in found.verdict
    assert "'dimer' needs the fewest parameters, 2" in found.verdict
    assert {c.name for c in found.standing} == {"dimer", "square"}


def test_all_are_fitted_to_the_same_points(tmp_path, alternating):
    error = 0.001 * alternating
    found = compare(rival_study(tmp_path, T, noisy(alternating, error, 0), error))
    kept = [c.result.sets[0].data.temperature for c in found.candidates]
    assert len(kept[0]) < len(T)
    for other in kept[1:]:
        np.testing.assert_array_equal(kept[0], other)
    assert len(found.cautions) == 1
    assert "left out for all candidates" in found.cautions[0]
    assert all("were left out" not in c for r in found.candidates for c in r.result.cautions)
    # The uniform chain fails by itself, and its large cluster effects cost the others nothing.
    assert "'uniform chain' shows" not in found.cautions[0]


@pytest.mark.parametrize("seed", [0, 1])
def test_the_right_network_or_none(tmp_path, alternating, seed):
    right_or_open(tmp_path, alternating, [seed])


@pytest.mark.long
@pytest.mark.timeout(3000)
def test_the_right_network_or_none_over_fifty_draws(tmp_path, alternating):
    """Decided in most draws, and never for a wrong network."""
    assert right_or_open(tmp_path, alternating, range(50)) >= 35


@pytest.mark.long
@pytest.mark.timeout(3000)
def test_noise_too_large_to_tell_is_told_over_fifty_draws(tmp_path):
    right_or_open(tmp_path, chain_chi(70.0, 45.0), range(100, 150), noise=0.02)


def right_or_open(folder, chi, seeds, noise=0.005):
    decided = 0
    error = noise * chi + 5e-6
    for seed in seeds:
        study = rival_study(folder, T, noisy(chi, error, seed), error)
        found = compare(study, profiles="none")
        assert found.conclusion in ("preferred", "undecided"), (seed, found)
        assert found["alternating chain"].standing, (seed, found)
        if found.conclusion == "preferred":
            assert found.best.name == "alternating chain"
            assert "describes the data" in found.verdict
            decided += 1
        else:
            assert "cannot be told apart" in found.verdict
    return decided


def test_none_describes_points_of_another_kind(tmp_path):
    """A Curie law with a step is no network's susceptibility."""
    chi = CURIE / T * (1 + 0.2 * (T > 60))
    error = 0.01 * chi
    found = compare(rival_study(tmp_path, T, chi, error, ("dimer", "uniform chain")))
    assert found.conclusion == "none"
    assert "None of the candidates describes the data" in found.verdict
    assert found.standing == ()
    assert found.proposals == ()


def test_a_rival_whose_fit_did_not_converge_is_not_ruled_out(tmp_path):
    error = 0.003 * dimer_chi(T, 60.0, 2.1)
    chi = noisy(dimer_chi(T, 60.0, 2.1), error, 2)
    found = compare(rival_study(tmp_path, T, chi, error, ("dimer", "uniform chain")))
    assert found.conclusion == "preferred"
    assert found.best.name == "dimer"
    assert "did not converge" not in found.verdict
    bad = replace(found["uniform chain"], result=replace(
        found["uniform chain"].result, converged=False
    ))  # fmt: skip
    judged, conclusion, verdict = conclude([found.best, bad])
    assert conclusion == "undecided"
    assert "did not converge" in verdict
    assert judged[1].standing


def test_one_model_is_one_candidate(tmp_path):
    error = 0.01 * dimer_chi(T, 60.0, 2.1)
    chi = noisy(dimer_chi(T, 60.0, 2.1), error, 4)
    content = rival_study(tmp_path, T, chi, error, ("dimer",))
    entry = content.pop("candidate")[0]
    found = compare({**content, "model": entry["model"], "parameters": entry["parameters"]})
    assert found.conclusion == "single"
    assert "No rival was tried" in found.verdict


def test_shared_parameters_reach_those_that_have_them(tmp_path):
    content = rival_study(tmp_path, T, T, T, ("dimer", "ladder"))
    content["parameters"] = {"K": {"start": 5.0}, "chi0": {"start": 0.0}}
    content["profile"] = ["K", "g"]
    for entry in content["candidate"]:
        entry["parameters"].pop("K", None)
    rivals = read_rivals(content)
    free = [[p.name for p in s.parameters.free] for s in rivals.studies]
    assert free == [["J", "g", "chi0"], ["J", "K", "g", "chi0"]]
    assert [s.asked for s in rivals.studies] == [("g",), ("K", "g")]


# ---------------------------------------------------------------- files


def test_the_comparison_is_written_read_exported_and_drawn(tmp_path, alternating):
    error = 0.02 * alternating
    chi = noisy(alternating, error, 0)
    found = compare(rival_study(tmp_path, T, chi, error, ("alternating chain", "ladder")))
    thermo.write(found.to_dataset(), tmp_path / "comparison.nc")
    back = thermo.read(tmp_path / "comparison.nc", "comparison")
    assert back.attrs["verdict"] == found.verdict
    assert list(back["candidate_name"].values) == [c.name for c in found.candidates]
    lines = {}
    for what in ("candidates", "parameters", "points", "next"):
        stream = io.StringIO()
        thermo.export_csv(back, stream, what=what)
        lines[what] = stream.getvalue().splitlines()
    assert len(lines["candidates"]) == 3
    assert len(lines["points"]) == 1 + found.best.result.n_points
    assert len(lines["next"]) == 1 + sum(len(p.map) for p in found.proposals)
    for name, what in (("all.png", None), ("next.svg", "next"), ("chi.pdf", "chi")):
        thermo.plot(back, tmp_path / name, what=what)
        assert (tmp_path / name).stat().st_size > 1000
    with pytest.raises(PartitaError, match="no data set 'nothing'"):
        thermo.plot(back, tmp_path / "x.png", what="nothing")


# ---------------------------------------------------------------- mistakes


def instrument(**change):
    table = {
        "quantity": "specific_heat",
        "units": "J/(mol K)",
        "temperature": [2, 100],
        "relative_uncertainty": 0.01,
    }
    table |= change
    return {"instrument": [{k: v for k, v in table.items() if v is not None}]}


BAD = {
    "two of one name": ({"candidate": "twice"}, "two candidates are called 'dimer'"),
    "no table": ({"candidate": "ladder"}, "one or more [[candidate]] tables"),
    "none at all": ({"candidate": []}, "one or more [[candidate]] tables"),
    "model beside them": ({"model": "m.toml"}, "model stands beside candidate"),
    "no name": ({"candidate": [{"model": {}}]}, "candidate[0].name is missing"),
    "no model": ({"candidate": [{"name": "x"}]}, "candidate[0].model is missing"),
    "a model that is a number": ({"candidate": [{"name": "x", "model": 3}]}, "candidate[0].model"),
    "an unknown key": (
        {"candidate": [{"name": "x", "model": network("dimer"), "modell": 1}]},
        "did you mean 'model'?",
    ),
    "a parameter of none": ({"parameters": {"Q": {"start": 1.0}}}, "parameters.Q"),
    "mixed units": ({"candidate": "reduced"}, "dimensionless"),
    "instrument without precision": (instrument(relative_uncertainty=None), "how precisely"),
    "negative precision": (instrument(absolute_uncertainty=-1), "how precisely"),
    "instrument without range": (instrument(temperature=None), "instrument[0].temperature is miss"),
    "from zero": (instrument(temperature=[0, 5]), "must begin above zero"),
    "falling range": (instrument(temperature=[50, 5]), "is not ascending"),
    "moment without field": (
        instrument(quantity="magnetization", units="muB"),
        "a magnetization needs one",
    ),
    "negative field": (instrument(field=[-1, 5]), "magnitudes from zero"),
    "unknown quantity": (instrument(quantity="heat"), "instrument[0].quantity"),
    "unknown instrument key": (instrument(precision=3), "instrument[0].precision"),
    "instruments that are no tables": ({"instrument": 5}, "[[instrument]] tables"),
}


@pytest.mark.parametrize("name", BAD)
def test_a_mistake_is_one_sentence(tmp_path, name):
    change, words = BAD[name]
    content = rival_study(tmp_path, T, T, T, ("dimer", "uniform chain"))
    content = {**content, **change}
    if change.get("candidate") == "twice":
        content["candidate"] = [content_of("dimer"), content_of("dimer")]
    elif change.get("candidate") == "reduced":
        content["candidate"] = [content_of("dimer"), content_of("dimer", energy_unit="1")]
        content["candidate"][1]["name"] = "other"
    elif change.get("candidate") == "ladder":
        content["candidate"] = "ladder"
    with pytest.raises((StudyError, UnitsError)) as fault:
        read_rivals(content)
    if name != "mixed units":
        assert words in str(fault.value)
    assert "\n" not in str(fault.value)


def content_of(name, **change):
    return {
        "name": name,
        "model": {**network(name), **change},
        "parameters": parameters(name),
    }


def test_a_wrong_unit_of_an_instrument_is_told(tmp_path):
    content = rival_study(tmp_path, T, T, T, ("dimer",), **instrument(units="emu/mol"))
    with pytest.raises(UnitsError, match="specific_heat"):
        read_rivals(content)


def test_one_fit_does_not_take_candidates(tmp_path):
    content = rival_study(tmp_path, T, T, T, ("dimer",))
    with pytest.raises(StudyError, match="candidate lists rival models"):
        thermo.read_study(content)


def test_an_unknown_candidate_is_told(tmp_path):
    error = 0.1 * dimer_chi(T, 60.0, 2.1)
    found = compare(rival_study(tmp_path, T, dimer_chi(T, 60.0, 2.1), error, ("dimer",)))
    with pytest.raises(StudyError, match="no candidate 'timer'; did you mean 'dimer'"):
        found["timer"]


def test_the_demo_of_rivals_says_what_its_readme_says():
    """Undecided above 40 K, with the uniform chain ruled out and something to measure next."""
    demo = Path(__file__).parents[1] / "data_demo"
    assert "invented" in (demo / "rivals.toml").read_text()
    found = compare(demo / "rivals.toml")
    assert found.conclusion == "undecided"
    assert {c.name for c in found.standing} == {"ladder", "alternating chain"}
    assert "Ruled out: 'uniform chain'" in found.verdict
    assert [p.instrument.name for p in found.proposals] == ["calorimeter", "magnetometer"]
    readme = " ".join((demo.parent / "README.md").read_text().split())
    assert found.verdict in readme
    assert str(found.proposals[0])[:60] in readme


def test_a_trend_within_the_errors_speaks_against_these(tmp_path):
    """A smooth wave far below the stated errors: the model stands, and the trend is told."""
    chi = dimer_chi(T, 60.0, 2.1)
    error = 0.05 * chi
    wave = chi * (1 + 0.012 * np.sin(np.linspace(0, 9, len(T))))
    (only,) = compare(rival_study(tmp_path, T, wave, error, ("dimer",)), profiles="none").candidates
    assert only.runs["chi"] < -3.09
    assert only.adequate
    assert "a trend in 'chi' within their errors" in only.remark
    # The same wave above the errors is the model's fault.
    (only,) = compare(
        rival_study(tmp_path, T, wave, 0.1 * error, ("dimer",)), profiles="none"
    ).candidates
    assert not only.adequate
    assert "follow a trend" in only.remark


def test_dimensionless_rivals_are_compared_and_reported(tmp_path):
    t = np.geomspace(0.1, 5, 40)
    chi = 1.1025 * 4 / t / (3 + np.exp(1 / t))  # per ion, g = 2.1, J = 1
    content = rival_study(tmp_path, t, chi, 0.05 * chi, ("dimer", "uniform chain"))
    for entry in content["candidate"]:
        entry["model"] |= {"energy_unit": "1", "couplings": {"J": 0.8}}
        entry["parameters"] = {"J": {"lower": 0.1, "upper": 3.0}, "g": {"lower": 1.0}}
    content["data"][0]["units"] = "1"
    content["instrument"] = [
        {
            "quantity": "magnetization",
            "units": "1",
            "temperature": [0.1, 2],
            "field": [0, 3],
            "absolute_uncertainty": 0.5,
        }
    ]
    found = compare(content, profiles="none")
    assert found.best.name == "dimer"
    fits = {c.name: c.result.to_dataset() for c in found.candidates}
    thermo.html_report(fits, tmp_path / "r.html", found.to_dataset())
    text = (tmp_path / "r.html").read_text()
    assert " K " not in text[text.index("<main>") : text.index("Where this comes from")]
    for proposal in found.proposals:
        assert "magnetization at T = " in str(proposal)


def test_what_has_fallen_no_longer_costs_the_others_points(tmp_path):
    """A frustrated chain shows its size far up; once it has fallen where all can be trusted, the
    others are compared on what their own windows leave."""
    model = network("uniform chain", 12)
    model["couplings"] = {"J": 60.0, "K": 10.0}
    model["lattice"] = {**model["lattice"], "couplings": {"nearest": "J", "next": "K"}}
    chi = chain_chi(70.0, 28.0)
    error = 0.002 * chi
    content = rival_study(tmp_path, T, noisy(chi, error, 0), error, ("alternating chain", "ladder"))
    pair = compare(content, profiles="none")
    content["candidate"].append(
        {"name": "frustrated", "model": model, "parameters": parameters("ladder")}
    )
    found = compare(content, profiles="none")
    assert not found["frustrated"].standing
    assert found["frustrated"].result.window.lower["chi"] > found.best.result.window.lower["chi"]
    assert found.best.name == pair.best.name == "alternating chain"
    assert found.best.result.n_points == pair.best.result.n_points
    assert {c.result.n_points for c in found.candidates} == {found.best.result.n_points}
    assert found.cautions == pair.cautions
