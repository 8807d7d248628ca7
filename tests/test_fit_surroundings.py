"""What surrounds the spins, against closed forms, and every slope of the forward model."""

from __future__ import annotations

import math
import subprocess

import mpmath
import numpy as np
import pytest

import thermo
from tests import fitting
from tests.conftest import command_path
from tests.fitting import CURIE, MODEL, MU_B, R, dimer_chi, dimer_heat, dimer_moments, write_csv
from thermo import errors
from thermo.fit import fit, read_study
from thermo.fit.forward import Forward, Points, make_forward, set_points
from thermo.fit.parameters import Values
from thermo.fit.surroundings import debye, einstein, free_ions
from thermo.spectrum.full import FullSolver

T = np.geomspace(3.0, 250.0, 40)
EMU = 4e-6 * math.pi
# N_A mu_B^2/k_B g^2 of one bond's mean field: lambda = zJ'/(N_A g^2 mu_B^2), K to emu/mol.
LAMBDA = 1 / CURIE


def data(folder, quantity="susceptibility", name=None, values=None, **more):
    name = name or quantity
    units = {"susceptibility": "emu/mol", "specific_heat": "J/(mol K)", "magnetization": "muB"}
    values = np.full(len(T), 1e-3) if values is None else values
    write_csv(folder / f"{name}.csv", "T,v", T, values)
    table = {"name": name, "file": str(folder / f"{name}.csv"), "quantity": quantity,
             "units": units[quantity], "columns": {"temperature": "T", "value": "v"},
             "absolute_uncertainty": 1e-5}  # fmt: skip
    return table | more


def study_of(folder, sets, parameters, model=MODEL, **more):
    (folder / "model.toml").write_text(model)
    return {"format": 1, "model": str(folder / "model.toml"), "data": sets,
            "parameters": parameters, **more}  # fmt: skip


def forward_of(study):
    return make_forward(study, FullSolver(study.model))


def predicted(study, theta=None):
    theta = study.parameters.start if theta is None else theta
    values = study.parameters.values(np.asarray(theta, dtype=float))
    forward = forward_of(study)
    return [forward.predict(set_points(d), values) / d.to_si for d in study.sets]


# ---------------------------------------------------------------- closed forms


def test_impurities_of_their_own_spin_g_and_weiss_temperature(tmp_path):
    parameters = {
        "J": {"start": 42.5}, "g": {"fixed": 2.13},
        "paramagnetic_fraction": {"start": 0.03, "spin": 2.5},
        "weiss_temperature": {"start": -1.7}, "impurity_g": {"start": 1.99},
    }  # fmt: skip
    study = read_study(study_of(tmp_path, [data(tmp_path)], parameters))
    (found,) = predicted(study)
    free = CURIE * 1.99**2 * 2.5 * 3.5 / 3 / (T + 1.7)
    np.testing.assert_allclose(found, 0.97 * dimer_chi(T, 42.5, 2.13) + 0.03 * free, rtol=1e-9)


def test_impurities_in_a_field_obey_maxwell():
    """∂S/∂B = ∂M/∂T of an ion that saturates, with θ: C must fit M, whatever the form."""
    t, theta = np.array([2.0, 5.0]), -1.3

    def of(temperature, h):
        return free_ions(((2.5, 1.0),), temperature, h, theta).value

    for h in (0.7, 6.0):
        field = np.full(2, h)
        # ∂C/∂h = T ∂²M/∂T², by differences of eighth-digit accuracy.
        d = 1e-3
        c = (of(t, field + d).heat - of(t, field - d).heat) / (2 * d)
        m = [of(t + k * d, field).moment for k in (-1, 0, 1)]
        np.testing.assert_allclose(c, t * (m[0] - 2 * m[1] + m[2]) / d**2, rtol=1e-5)


@pytest.mark.parametrize(("term", "factor"), [("+J S.S", 1), ("-J S.S", -1), ("+2J S.S", 2),
                                          ("-2J S.S", -2)])  # fmt: skip
def test_a_molecular_field_takes_the_models_sign_and_factor(tmp_path, term, factor):
    J, z = 42.5 / factor, 6.0 / factor  # antiferromagnetic either way
    model = MODEL.replace('"+J S.S"', f'"{term}"')
    parameters = {"J": {"start": J}, "g": {"fixed": 2.13},
                  "intercluster_coupling": {"start": z}}  # fmt: skip
    study = read_study(study_of(tmp_path, [data(tmp_path)], parameters, model))
    (found,) = predicted(study)
    bare = dimer_chi(T, 42.5, 2.13)
    expected = bare / (1 + 6.0 * LAMBDA / 2.13**2 * bare)
    np.testing.assert_allclose(found, expected, rtol=1e-9)


def test_a_molecular_field_at_field_is_self_consistent(tmp_path):
    B = np.geomspace(0.5, 60.0, 40)
    a, J, g, t = 7.0, 20.0, 2.2, 3.0
    write_csv(tmp_path / "m.csv", "B,v", B, np.full(40, 0.1))
    table = {"name": "m", "file": str(tmp_path / "m.csv"), "quantity": "magnetization",
             "units": "muB", "temperature": t, "absolute_uncertainty": 1e-3,
             "columns": {"field": "B", "value": "v"}}  # fmt: skip
    for strength in (a, -2.0):
        parameters = {"J": {"start": J}, "g": {"fixed": g},
                      "intercluster_coupling": {"start": strength}}  # fmt: skip
        study = read_study(study_of(tmp_path, [table], parameters))
        (found,) = predicted(study)
        m = found / g
        felt = B - strength * m / (g * MU_B)
        moment, _ = dimer_moments(t + 0 * B, felt, J, g)
        np.testing.assert_allclose(m, moment / 2, rtol=1e-8)


def test_the_heat_in_a_molecular_field_is_that_of_its_own_entropy():
    """C = T dS/dT of the self-consistent state, S that of the cluster in the field it feels."""
    model = thermo.read_model(
        {"format": 1, "title": "dimer", "energy_unit": "1", "bond_term": "+J S.S",
         "couplings": {"J": 1.0}, "site": [{"name": n, "spin": 0.5, "g": 1.0} for n in "ab"],
         "bond": [{"sites": ["a", "b"], "coupling": "J"}]}
    )  # fmt: skip
    for a, h in ((0.8, 1.1), (-0.3, 0.6), (1.5, 0.2)):

        def entropy(t, a=a, h=h):
            def m(x):
                e = [mpmath.mpf(-3) / 4, mpmath.mpf(1) / 4 - x, mpmath.mpf(1) / 4,
                     mpmath.mpf(1) / 4 + x]  # fmt: skip
                w = [mpmath.exp(-v / t) for v in e]
                z = sum(w)
                u = sum(p * v for p, v in zip(w, e, strict=True)) / z
                return (w[1] - w[3]) / z / 2, mpmath.log(z) + u / t

            x = mpmath.findroot(lambda x: x - h + a * m(x)[0], h)
            return m(x)[1]

        with mpmath.workdps(30):
            expected = [float(t * mpmath.diff(entropy, t) / 2) for t in (mpmath.mpf("0.6"), 2)]
        forward = Forward(model, FullSolver(model))
        values = Values({"J": 1.0, "g": 1.0, "intercluster_coupling": a, "chi0": 0.0,
                         "paramagnetic_fraction": 0.0}, {})  # fmt: skip
        t = np.array([0.6, 2.0])
        found = forward.predict(Points("specific_heat", t, np.full(2, h), "ion"), values)
        np.testing.assert_allclose(found, expected, rtol=1e-10)


def test_lattice_functions_against_their_integrals_and_limits():
    t = np.array([1.0, 9.9, 10.1, 40.0, 300.0, 3000.0])
    theta = 300.0
    value, slope = debye(t, theta)
    mode, by_mode = einstein(t, theta)
    with mpmath.workdps(25):
        for n, temperature in enumerate(t):

            def whole(x, temperature=temperature):
                x = x / mpmath.mpf(temperature)
                kernel = lambda y: y**4 * mpmath.exp(y) / (mpmath.exp(y) - 1) ** 2  # noqa: E731
                return 3 / x**3 * mpmath.quad(kernel, mpmath.linspace(0, x, 12))

            def single(x, temperature=temperature):
                x = x / mpmath.mpf(temperature)
                return x**2 * mpmath.exp(x) / (mpmath.exp(x) - 1) ** 2

            at = mpmath.mpf(theta)
            assert value[n] == pytest.approx(float(whole(at)), rel=1e-12)
            assert slope[n] == pytest.approx(float(mpmath.diff(whole, at)), rel=1e-11)
            assert mode[n] == pytest.approx(float(single(at)), rel=1e-13)
            assert by_mode[n] == pytest.approx(float(mpmath.diff(single, at)), rel=1e-11)
    # The T^3 law, 12 pi^4/5 N k_B (T/theta)^3 (Debye 1912), and Dulong and Petit's value.
    assert value[0] * 3 == pytest.approx(12 * math.pi**4 / 5 / theta**3, rel=1e-12)
    assert value[-1] == pytest.approx(1, abs=1e-3)


def test_the_lattice_and_the_spins_share_a_specific_heat(tmp_path):
    model = MODEL.replace("format = 1\n", "format = 1\nions_per_formula = 2\n")
    parameters = {
        "J": {"start": 42.5}, "debye_temperature": {"start": 210.0},
        "einstein_temperature": {"start": 480.0}, "einstein_share": {"start": 0.3},
        "einstein_temperature_2": {"start": 90.0}, "einstein_share_2": {"start": 0.1},
    }  # fmt: skip
    sets = [data(tmp_path, "specific_heat"),
            data(tmp_path, "specific_heat", "per formula", per="formula")]  # fmt: skip
    study = read_study(study_of(tmp_path, sets, parameters, model, lattice_heat={"atoms": 14}))
    ion, formula = predicted(study)
    lattice = 3 * R * 14 * (
        0.6 * debye(T, 210.0)[0] + 0.3 * einstein(T, 480.0)[0] + 0.1 * einstein(T, 90.0)[0]
    )  # fmt: skip
    np.testing.assert_allclose(formula, 2 * dimer_heat(T, 42.5) + lattice, rtol=1e-9)
    np.testing.assert_allclose(2 * ion, formula, rtol=1e-12)


def test_scales_multiply_a_set_and_a_sample(tmp_path):
    sets = [data(tmp_path, name="one", sample="A"), data(tmp_path, name="two", sample="A"),
            data(tmp_path, name="three", sample="B")]  # fmt: skip
    parameters = {"J": {"start": 42.5}, "g": {"fixed": 2.1}, "scale_A": {"start": 1.1},
                  "scale_two": {"start": 0.9}, "chi0_B": {"start": 2e-4}}  # fmt: skip
    study = read_study(study_of(tmp_path, sets, parameters))
    one, two, three = predicted(study)
    bare = dimer_chi(T, 42.5, 2.1)
    np.testing.assert_allclose(one, 1.1 * bare, rtol=1e-9)
    np.testing.assert_allclose(two, 0.99 * bare, rtol=1e-9)
    np.testing.assert_allclose(three, bare + 2e-4, rtol=1e-9)


# ---------------------------------------------------------------- every slope

FORMS = {
    "isotropic": """
[[bond]]
sites = ["a", "b"]
coupling = "J1"
[[bond]]
sites = ["b", "c"]
coupling = "J2"
[[bond]]
sites = ["c", "d"]
coupling = "J1"
""",
    "xy, ising, ion": """
[[bond]]
sites = ["a", "b"]
coupling = "J1"
form = "xy"
[[bond]]
sites = ["b", "c"]
coupling = "J1"
form = "ising"
[[bond]]
sites = ["c", "d"]
coupling = "J1"
[[ion]]
sites = ["a", "b"]
coupling = "J2"
form = "axial"
""",
    "antisymmetric, matrix": """
[[bond]]
sites = ["a", "b"]
coupling = "J1"
matrix = [[1.0, 0.4, 0.0], [-0.4, 1.0, 0.0], [0.0, 0.0, 1.3]]
[[bond]]
sites = ["b", "c"]
coupling = "J1"
[[bond]]
sites = ["c", "d"]
coupling = "J2"
form = "antisymmetric"
vector = [0.0, 0.0, 1.0]
""",
}


def model_of(form):
    text = 'format = 1\ntitle = "four ions"\nenergy_unit = "K"\nbond_term = "-2J S.S"\n'
    text += "ions_per_formula = 2\n[couplings]\nJ1 = -12.0\nJ2 = 5.0\n"
    for name, spin in zip("abcd", (1.0, 1.0, 0.5, 0.5), strict=True):
        text += f'[[site]]\nname = "{name}"\nspin = {spin}\ng = 2.1\n'
    return text + FORMS[form]


@pytest.mark.parametrize(("form", "field"), [("isotropic", 0.0), *((form, 9.0) for form in FORMS)])
def test_every_slope_against_differences_of_high_order(tmp_path, form, field):
    quantities = ["susceptibility", "specific_heat"] + ["magnetization"] * (field > 0)
    sets = [data(tmp_path, q, field=field, sample="A", scale_error=0.05) for q in quantities]
    parameters = {
        "J1": {"start": -12.0}, "J2": {"start": 5.0}, "g": {"start": 2.1},
        "chi0": {"start": 1e-4}, "paramagnetic_fraction_A": {"start": 0.08, "spin": 1.5},
        "weiss_temperature": {"start": -0.8}, "impurity_g_A": {"start": 1.97},
        "intercluster_coupling": {"start": -1.5}, "debye_temperature": {"start": 180.0},
        "einstein_temperature": {"start": 320.0}, "einstein_share": {"start": 0.4},
        "scale_A": {"start": 1.07, "prior": [1, 0.1]},
    }  # fmt: skip
    study = read_study(
        study_of(tmp_path, sets, parameters, model_of(form), lattice_heat={"atoms": 20})
    )
    p, forward = study.parameters, forward_of(study)
    points = [
        Points(s.quantity, T[::6], s.field[::6], "formula", s.parameter_names, s.scales)
        for s in study.sets
    ]
    names = [q.name for q in p.free]
    assert len(names) == 12 + len(quantities)
    exact = [forward.evaluate(x, p.values(p.start)).slopes for x in points]
    for k in range(len(names)):
        h = 2e-3 * max(abs(p.start[k]), 1e-4)

        def at(n, k=k, h=h):
            theta = p.start.copy()
            theta[k] += n * h
            return [forward.predict(x, p.values(theta)) for x in points]

        weight = {1: 45, 2: -9, 3: 1}  # sixth order: error h^6
        ends = {n: at(n) for n in (-3, -2, -1, 1, 2, 3)}
        for s, slopes in enumerate(exact):
            found = sum(w * (ends[n][s] - ends[-n][s]) for n, w in weight.items()) / (60 * h)
            size = np.abs(found).max()
            np.testing.assert_allclose(slopes[:, k], found, rtol=1e-7, atol=2e-9 * size + 1e-300)


def test_slopes_by_differences_are_near_the_exact_ones(tmp_path):
    """For solvers that give levels only."""

    class LevelsOnly:
        def __init__(self, model):
            self.inner = FullSolver(model)

        def table(self, couplings=None):
            return self.inner.table(couplings)

    parameters = {"J1": {"start": -12.0}, "J2": {"start": 5.0}, "g": {"start": 2.1}}
    sets = [data(tmp_path, "susceptibility", field=2.0), data(tmp_path, "specific_heat")]
    study = read_study(study_of(tmp_path, sets, parameters, model_of("isotropic")))
    values = study.parameters.values(study.parameters.start)
    exact, rough = forward_of(study), make_forward(study, LevelsOnly(study.model))
    assert exact.cache.exact
    assert not rough.cache.exact
    for points in map(set_points, study.sets):
        one, other = (f.evaluate(points, values).slopes for f in (exact, rough))
        size = np.abs(one).max(axis=0)
        np.testing.assert_allclose(other, one, rtol=0, atol=3e-7 * size.max())
    # One of the two directions is had from the scale.
    assert rough.cache.n_solves == 3
    assert exact.cache.n_solves == 1


# ---------------------------------------------------------------- fits


def test_fits_recover_what_points_were_made_with(tmp_path):
    """Points of the closed forms, all the surroundings in them; every number comes back."""
    free = CURIE * 2.0**2 * 2.5 * 3.5 / 3 / (T + 1.2)
    chi = 0.98 * dimer_chi(T, 42.5, 2.13) + 0.02 * free - 1.7e-4
    lattice = 3 * R * 7 * (0.75 * debye(T, 230.0)[0] + 0.25 * einstein(T, 500.0)[0])
    heat = 0.98 * dimer_heat(T, 42.5) + lattice
    sets = [data(tmp_path, values=1.03 * chi, sample="A", absolute_uncertainty=1e-6),
            data(tmp_path, name="again", values=chi, sample="B", absolute_uncertainty=1e-6),
            data(tmp_path, "specific_heat", values=heat, absolute_uncertainty=1e-3)]  # fmt: skip
    parameters = {
        "J": {"start": 30.0}, "g": {"start": 2.0}, "chi0": {},
        "paramagnetic_fraction": {"start": 0.01, "spin": 2.5},
        "weiss_temperature": {"prior": False}, "impurity_g": {"fixed": 2.0},
        "scale_A": {"prior": [1.0, 0.5]},
        "debye_temperature": {"start": 300.0}, "einstein_temperature": {"start": 400.0},
        "einstein_share": {"start": 0.4},
    }  # fmt: skip
    result = fit(study_of(tmp_path, sets, parameters, lattice_heat={"atoms": 14,
                                                                   "per": "formula"},
                          model=MODEL.replace("format = 1\n",
                                              "format = 1\nions_per_formula = 2\n")))  # fmt: skip
    assert result.converged
    true = {"J": 42.5, "g": 2.13, "chi0": -1.7e-4, "paramagnetic_fraction": 0.02,
            "weiss_temperature": -1.2, "debye_temperature": 230.0,
            "einstein_temperature": 500.0, "einstein_share": 0.25, "scale_A": 1.03}  # fmt: skip
    for name, value in true.items():
        # The prior of the scale pulls by its share of the information, some 1e-8.
        assert result[name].value == pytest.approx(value, rel=2e-5), name
    assert result.n_solves == 1


def test_a_prior_is_a_measurement(tmp_path):
    """A prior on g weighs like a point: the answer is the weighted mean, errors and all."""
    rng = np.random.default_rng(4)
    chi = dimer_chi(T, 42.5, 2.13) * (1 + 0.02 * rng.standard_normal(len(T)))
    sets = [data(tmp_path, values=chi, absolute_uncertainty=2e-4)]
    alone = fit(study_of(tmp_path, sets, {"g": {}, "J": {"fixed": 42.5}}))
    held = fit(study_of(tmp_path, sets, {"g": {"prior": [2.05, 0.01]}, "J": {"fixed": 42.5}}))
    w = np.array([alone["g"].standard_error, 0.01]) ** -2.0
    mean = (w @ [alone["g"].value, 2.05]) / w.sum()
    # χ ∝ g²: a weighted mean up to the curvature of the square.
    assert held["g"].value == pytest.approx(mean, abs=0.02 * abs(mean - 2.05))
    assert held["g"].standard_error == pytest.approx(w.sum() ** -0.5, rel=0.02)
    assert held["g"].prior == (2.05, 0.01)
    assert held.degrees_of_freedom == alone.degrees_of_freedom + 1
    tied = fit(study_of(tmp_path, sets, {"g": {"tied": "x + 0.0"}, "x": {"start": 2.0},
                                         "J": {"fixed": 42.5}}))  # fmt: skip
    assert tied["g"].value == pytest.approx(alone["g"].value, rel=1e-8)
    both = {"g": {"tied": "x", "prior": [2.05, 0.01]}, "x": {"start": 2.0}, "J": {"fixed": 42.5}}
    again = fit(study_of(tmp_path, sets, both))
    assert again["g"].value == pytest.approx(held["g"].value, rel=1e-8)


def test_usual_priors_are_told_and_can_be_refused(tmp_path):
    sets = [data(tmp_path, values=dimer_chi(T, 42.5, 2.1), scale_error=0.02)]
    nuisance = {"J": {}, "paramagnetic_fraction": {}, "weiss_temperature": {}, "impurity_g": {}}
    p = read_study(study_of(tmp_path, sets, nuisance)).parameters.by_name
    assert p["weiss_temperature"].prior == (0.0, 5.0)
    assert p["weiss_temperature"].usual
    assert p["weiss_temperature"].upper < T.min()
    assert p["impurity_g"].prior == (2.0, 0.1)
    assert p["scale_susceptibility"].prior == (1.0, 0.02)
    assert not p["scale_susceptibility"].usual
    nuisance |= {"weiss_temperature": {"prior": False}, "impurity_g": {"lower": 1.9, "upper": 2.1}}
    p = read_study(study_of(tmp_path, sets, nuisance)).parameters.by_name
    assert p["weiss_temperature"].prior is None
    assert p["impurity_g"].prior is None


def test_spectra_kept_on_disk_serve_the_next_fit(tmp_path):
    folder = tmp_path / "kept"
    sets = [data(tmp_path, values=1e-3 * T**0.1)]
    study = read_study(
        study_of(tmp_path, sets, {"J1": {"start": -12.0}, "J2": {"start": 5.0}},
                 model_of("isotropic"))
    )  # fmt: skip
    first = fit(study, cache=folder)
    assert first.n_solves > 2
    again = fit(study, cache=folder)
    assert again.n_solves == 0
    assert again["J1"].value == first["J1"].value
    # A damaged file, and one of other numbers, are solved again.
    kept = sorted(folder.glob("spectrum-*.npz"))
    kept[0].write_bytes(kept[0].read_bytes()[:200])
    with np.load(kept[1]) as old:
        arrays = dict(old)
    arrays["energy"] = arrays["energy"] * 1.001
    np.savez(kept[1], **arrays)
    assert fit(study, cache=folder).n_solves == 2
    assert not list(folder.glob("tmp*"))
    blocked = tmp_path / "file"
    blocked.write_text("")
    with pytest.raises(errors.FileFormatError, match="cannot be kept"):
        fit(study, cache=blocked / "x")


def test_the_constants_of_the_molecular_field():
    assert pytest.approx(thermo.units.CURIE_EMU, rel=1e-9) == CURIE
    assert fitting.CURIE == CURIE


def test_the_command_keeps_spectra(tmp_path):
    study = fitting.write_dimer(tmp_path)
    command = [command_path(), "fit", str(study), "--keep", str(tmp_path / "kept")]
    for _ in range(2):
        done = subprocess.run(command, capture_output=True, text=True, timeout=120)
        assert done.returncode == 0, done.stderr
        assert len(list((tmp_path / "kept").glob("spectrum-*.npz"))) == 1
    command[-1] = str(study)
    done = subprocess.run(command, capture_output=True, text=True, timeout=120)
    assert done.returncode == 4
    assert done.stderr.count("\n") == 1
    assert "spectra cannot be kept there" in done.stderr
