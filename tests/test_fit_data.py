"""Data as measured: samples, masks, units per gram and of whole samples; and bad studies."""

from __future__ import annotations

import numpy as np
import pytest

from tests.fitting import MOMENT, R, dimer_chi, dimer_heat, dimer_moments, write_csv
from tests.test_fit_surroundings import T, data, study_of
from thermo import errors
from thermo.fit import fit, read_study
from thermo.units import molar_twin


def one_set(tmp_path, header, values, **more):
    write_csv(tmp_path / "x.csv", header, *values)
    table = {"name": "x", "file": str(tmp_path / "x.csv"), "quantity": "susceptibility",
             "units": "emu/mol", "columns": {"temperature": "T", "value": "v"},
             "absolute_uncertainty": 1e-5}  # fmt: skip
    return read_study(study_of(tmp_path, [table | more], {"J": {}})).sets[0]


# ---------------------------------------------------------------- masks


def test_ranges_to_leave_out_and_of_field(tmp_path):
    t = np.arange(1.0, 11.0)
    found = one_set(tmp_path, "T,v", [t, t], leave_out=[[2.5, 4.0], [9, 20]], range=[2, 30])
    assert found.temperature.tolist() == [2, 5, 6, 7, 8]
    assert found.n_masked == 5
    assert one_set(tmp_path, "T,v", [t, t], leave_out=[3, 4]).n_points == 8
    b = np.arange(10.0)
    found = one_set(tmp_path, "T,v,B", [t, t, b], field_range=[2.5, 6],
                    columns={"temperature": "T", "value": "v", "field": "B"})  # fmt: skip
    assert found.field.tolist() == [3, 4, 5, 6]


def test_flags(tmp_path):
    path = tmp_path / "flags.csv"
    path.write_text("T,v,q\n1,1,\n2,1,0\n3,1,x\n4,1,ok\n5,1,sat\n")
    table = {"file": str(path), "columns": {"temperature": "T", "value": "v", "flag": "q"}}
    assert one_set(tmp_path, "T,v", [[1], [1]], **table).temperature.tolist() == [1, 2]
    found = one_set(tmp_path, "T,v", [[1], [1]], **table, flags=["ok", "x"])
    assert found.temperature.tolist() == [3, 4]
    assert found.line.tolist() == [4, 5]
    assert one_set(tmp_path, "T,v", [[1], [1]], **table, flags="sat").n_points == 1
    with pytest.raises(errors.DataError, match=r"no row has a flag.*'none'"):
        one_set(tmp_path, "T,v", [[1], [1]], **table, flags=["none"])


# ---------------------------------------------------------------- amounts


def test_units_per_gram_and_of_whole_samples(tmp_path):
    chi = dimer_chi(T, 42.5, 2.1)
    for units, value, more in (
        ("emu/g", chi / 250, {}),
        ("emu/(g Oe)", chi / 250, {}),
        ("m3/kg", chi * 4e-6 * np.pi / 0.25, {}),
        ("emu/Oe", chi / 250 * 13.2e-3, {"mass": 13.2}),
    ):
        found = one_set(tmp_path, "T,v", [T, value], units=units, molar_mass=250.0,
                        absolute_uncertainty=2e-6, **more)  # fmt: skip
        np.testing.assert_allclose(found.value / (4e-6 * np.pi), chi, rtol=1e-12)
        share = {"emu/Oe": 250 / 13.2e-3, "m3/kg": 0.25 / (4e-6 * np.pi)}.get(units, 250.0)
        np.testing.assert_allclose(found.uncertainty / (4e-6 * np.pi), 2e-6 * share, rtol=1e-12)
        assert "mol" in found.units
    heat = dimer_heat(T, 42.5)
    found = one_set(tmp_path, "T,v", [T, heat / 250 * 5e-3 * 1e6], quantity="specific_heat",
                    units="uJ/K", molar_mass=250.0, mass=5.0)  # fmt: skip
    np.testing.assert_allclose(found.value, heat, rtol=1e-12)
    found = one_set(tmp_path, "T,v", [T, heat / 250 * 1e3], quantity="specific_heat",
                    units="mJ/(g K)", molar_mass=250.0)  # fmt: skip
    np.testing.assert_allclose(found.value, heat, rtol=1e-12)
    assert molar_twin("magnetization", "emu") == ("emu/mol", "sample", 1.0)
    assert molar_twin("magnetization", "muB") is None


@pytest.mark.parametrize(
    ("more", "error", "words"),
    [
        ({"units": "emu/g"}, errors.StudyError, "molar_mass is missing"),
        ({"units": "emu/Oe", "molar_mass": 250.0}, errors.StudyError, "mass is missing"),
        ({"units": "emu/g", "molar_mass": 250.0, "mass": 3.0}, errors.StudyError, "no part"),
        ({"molar_mass": 250.0}, errors.StudyError, "has no part in a value in 'emu/mol'"),
        ({"units": "emu/g", "molar_mass": -1.0}, errors.StudyError, "above zero"),
        ({"units": "emu", "molar_mass": 250.0, "mass": 1.0}, errors.StudyError, "has no part"),
        ({"units": "J/g", "molar_mass": 250.0}, errors.StudyError, "has no part"),
        ({"units": "J/g"}, errors.UnitsError, "does not fit susceptibility"),
        ({"sample": "A 1"}, errors.StudyError, "not a word"),
        ({"scale_error": 2.0}, errors.StudyError, "between 0 and 1"),
        ({"flags": ["ok"]}, errors.StudyError, "columns.flag"),
        ({"leave_out": [[4, 3]]}, errors.StudyError, "not ascending"),
        ({"leave_out": [[0, 1000]]}, errors.DataError, "together leave no point"),
        ({"field_range": [1, 2]}, errors.DataError, "no overlap of the data, 0 to 0 T"),
        ({"columns": {"temperature": "T", "value": "v", "flag": "q"}}, errors.DataError,
         "no column 'q' for the flag"),
    ],
)  # fmt: skip
def test_bad_data_tables_are_one_sentence(tmp_path, more, error, words):
    with pytest.raises(error, match=words) as caught:
        one_set(tmp_path, "T,v", [T, T], **more)
    assert "\n" not in str(caught.value)


# ---------------------------------------------------------------- many sets at once


def test_any_mix_of_sets_of_two_samples(tmp_path):
    """χ, χT, M(B) at two temperatures, C and C/T at two fields: one fit, every value back."""
    J, g, rho = 21.0, 2.14, {"A": 0.02, "B": 0.05}
    t = np.geomspace(2.0, 120.0, 30)
    B = np.linspace(1.0, 30.0, 30)
    free = fitting_free(g)

    def write(name, header, *columns):
        write_csv(tmp_path / f"{name}.csv", header, *columns)
        return {"name": name, "file": str(tmp_path / f"{name}.csv")}

    chi = dimer_chi(t, J, g, 0.0, rho["A"])
    sets = [
        write("chi", "T,v", t, 1.02 * chi)
        | {"quantity": "susceptibility", "units": "emu/mol", "sample": "A", "scale_error": 0.05,
           "columns": {"temperature": "T", "value": "v"}},
        write("chiT", "T,v", t, t * dimer_chi(t, J, g, 0.0, rho["B"]))
        | {"quantity": "chi_T", "units": "emu K/mol", "sample": "B",
           "columns": {"temperature": "T", "value": "v"}},
    ]  # fmt: skip
    for kelvin in (1.8, 5.0):
        moment = (1 - rho["A"]) * dimer_moments(kelvin, B, J, g)[0] / 2
        moment = moment + rho["A"] * free(kelvin, B)[0]
        sets.append(
            write(f"m{kelvin:.0f}", "B,v", B, g * moment)
            | {"quantity": "magnetization", "units": "muB", "temperature": kelvin, "sample": "A",
               "columns": {"field": "B", "value": "v"}}
        )  # fmt: skip
    for tesla in (0.0, 9.0):
        heat = (1 - rho["B"]) * dimer_moments(t, tesla + 0 * t, J, g)[1] / 2
        heat = heat + rho["B"] * free(t, tesla)[1]
        sets.append(
            write(f"c{tesla:.0f}", "T,v", t, R * heat / t)
            | {"quantity": "specific_heat_over_T", "units": "J/(mol K2)", "field": tesla,
               "sample": "B", "columns": {"temperature": "T", "value": "v"}}
        )  # fmt: skip
    # An offset, since C vanishes towards T = 0 and a relative error alone would be zero weight.
    sets = [s | {"absolute_uncertainty": 1e-4} for s in sets]
    parameters = {"J": {"start": 30.0}, "g": {"start": 2.0}, "paramagnetic_fraction_A": {},
                  "paramagnetic_fraction_B": {}}  # fmt: skip
    result = fit(study_of(tmp_path, sets, parameters))
    # The scale's prior, 1 ± 0.05, pulls by the share of its information, below 10⁻⁵.
    assert result["J"].value == pytest.approx(J, rel=2e-5)
    assert result["g"].value == pytest.approx(g, rel=2e-5)
    assert result["scale_chi"].value == pytest.approx(1.02, rel=1e-4)
    for sample in "AB":
        found = result[f"paramagnetic_fraction_{sample}"].value
        assert found == pytest.approx(rho[sample], rel=1e-3)
    assert result.n_solves == 1
    first = result.predict("chi_T", t, units="emu K/mol", sample="B")
    np.testing.assert_allclose(first, t * dimer_chi(t, J, g, 0.0, rho["B"]), rtol=1e-3)
    with pytest.raises(errors.RangeError, match="sample 'C' is unknown"):
        result.predict("chi_T", t, sample="C")
    assert MOMENT


def fitting_free(g):
    """(M, C/R) of a free spin ½ in a field, by its two levels."""
    from tests.fitting import MU_B

    def values(t, b):
        y = g * MU_B * b / (2 * t)
        return np.tanh(y) / 2, (y / np.cosh(y)) ** 2

    return values


# ---------------------------------------------------------------- bad studies


@pytest.mark.parametrize(
    ("parameters", "more", "words"),
    [
        ({"J": {"prior": [40, 0]}}, {}, "prior has the error 0, which is not above zero"),
        ({"J": {"prior": [40]}}, {}, "not a pair of numbers"),
        ({"J": {"fixed": 40, "prior": [40, 1]}}, {}, "prior does not go with fixed"),
        ({"J": {}, "scale_y": {}}, {}, "scale_y scales no data set or sample.*scale_susc"),
        ({"J": {}, "weiss_temperature": {}}, {}, "weiss_temperature is free, but nothing"),
        ({"J": {}, "paramagnetic_fraction": {}, "weiss_temperature": {"start": 4.0}}, {},
         "puts the start 4 outside its bounds"),
        ({"J": {}, "paramagnetic_fraction": {}, "weiss_temperature": {"upper": 5.0}}, {},
         "lies outside what weiss_temperature can be, 2.85 downwards"),
        ({"J": {}, "paramagnetic_fraction": {"spin": 0.3}}, {}, "spin = 0.3 is no spin"),
        ({"J": {}, "chi0": {"spin": 0.5}}, {}, "chi0.spin is not a known key"),
        ({"J": {}, "debye_temperature": {}}, {}, r"add \[lattice_heat\]"),
        ({"J": {}}, {"lattice_heat": {"atoms": 4}}, "needs parameters.debye_temperature"),
        ({"J": {}, "debye_temperature": {}}, {"lattice_heat": {"atoms": 4}},
         "debye_temperature is free, but nothing"),
        ({"J": {}, "debye_temperature": {"fixed": 1.0}, "einstein_temperature": {"fixed": 1.0}},
         {"lattice_heat": {"atoms": 4}}, "needs its partner parameters.einstein_share"),
        ({"J": {}, "debye_temperature": {"fixed": 1.0}, "einstein_share_2": {"fixed": 0.1}},
         {"lattice_heat": {"atoms": 4}}, "needs its partner parameters.einstein_temperature_2"),
        ({"J": {}, "debye_temperature": {}}, {"lattice_heat": {"atoms": -4}}, "no number of atoms"),
        ({"J": {}, "debye_temperature": {}}, {"lattice_heat": {"atom": 4}}, "atoms is missing"),
        ({"J": {}, "impurity_g": {"fixed": -1.0}}, {}, "no g factor"),
        ({"J": {"tied": "g + g_2"}, "g": {"tied": "J"}}, {}, "not a parameter"),
        ({"J": {"tied": "2*g"}, "g": {"tied": "J/2"}, "chi0": {}}, {}, "go in a circle"),
        ({"J": {"tied": "abs(g)"}, "g": {}}, {}, "contains a call"),
        ({"J": {}}, {"profile": "g"}, "profile names 'g', which is not a free parameter"),
        ({"J": {}}, {"profile": [3]}, "not a list of texts"),
    ],
)  # fmt: skip
def test_bad_studies_are_one_sentence(tmp_path, parameters, more, words):
    with pytest.raises(errors.StudyError, match=words) as caught:
        read_study(study_of(tmp_path, [data(tmp_path)], parameters, **more))
    assert "\n" not in str(caught.value)
    assert len(str(caught.value)) < 400 + len(str(tmp_path))


def test_priors_and_scales_need_uncertainties(tmp_path):
    bare = data(tmp_path)
    del bare["absolute_uncertainty"]
    for table, parameters, words in (
        (bare, {"J": {"prior": [40, 1]}}, "J has a prior, which cannot be weighed"),
        (bare | {"scale_error": 0.1}, {"J": {}}, "scale_susceptibility has a scale_error"),
        (bare, {"J": {}, "scale_susceptibility": {}}, "cannot be told from g without a prior"),
    ):
        with pytest.raises(errors.StudyError, match=words):
            read_study(study_of(tmp_path, [table], parameters))


def test_sets_in_units_that_contradict_each_other_are_refused(tmp_path):
    """The same curve once said to be in emu and once in SI."""
    chi = dimer_chi(T, 42.5, 2.1)
    sets = [data(tmp_path, name="one", values=chi), data(tmp_path, name="two", values=chi)]
    read_study(study_of(tmp_path, sets, {"J": {}, "g": {}}))
    sets[1] |= {"units": "m3/mol"}
    with pytest.raises(errors.DataError, match=r"'one' and 'two' .* a factor of 7.96e\+04; check"):
        read_study(study_of(tmp_path, sets, {"J": {}, "g": {}}))
    product = data(tmp_path, name="three", values=chi * T)
    product |= {"quantity": "chi_T", "units": "emu K/mol"}
    read_study(study_of(tmp_path, [sets[0], product], {"J": {}, "g": {}}))
    product |= {"units": "m3 K/mol"}
    with pytest.raises(errors.DataError, match="'one' and 'three'"):
        read_study(study_of(tmp_path, [sets[0], product], {"J": {}, "g": {}}))


def test_a_coupling_called_like_a_role_is_refused(tmp_path):
    from tests.fitting import MODEL

    model = MODEL.replace("J = 30.0", "scale = 1.0\nweiss_temperature = 2.0\nJ = 30.0")
    with pytest.raises(errors.StudyError, match="name of a fit parameter"):
        read_study(study_of(tmp_path, [data(tmp_path)], {"J": {}}, model))
