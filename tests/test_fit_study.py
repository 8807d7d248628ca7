"""Every way a study or its data can be wrong: one sentence, the right class, the place named."""

from __future__ import annotations

import math

import numpy as np
import pytest

from tests.fitting import MODEL, STUDY, write_csv, write_dimer
from thermo.errors import DataError, ModelError, PartitaError, StudyError, UnitsError
from thermo.fit import fit, read_study

CHI = 'units = "emu/mol"\n'
HEAT = STUDY[STUDY.index('[[data]]\nname = "heat"') : STUDY.index("[parameters]")]
J = "J = { start = 30.0, lower = 1.0, upper = 200.0 }"
G = "g = { start = 2.0, lower = 1.5, upper = 3.0 }"


def told(error: BaseException) -> str:
    text = str(error)
    assert "\n" not in text
    assert len(text) < 400
    return text


BAD_STUDIES = {
    # The study's own keys
    "no format": (STUDY.replace("format = 1\n", ""), StudyError, ["study.toml: format is missing"]),
    "another format": (STUDY.replace("format = 1", "format = 2"), StudyError, ["format = 2"]),
    "true for a format": (STUDY.replace("format = 1", "format = true"), StudyError, ["True"]),
    "unknown key": ("titel = 'x'\n" + STUDY, StudyError, ["titel", "did you mean 'title'"]),
    "unknown key in a set": (
        STUDY.replace(CHI, CHI + "rnage = [1, 2]\n", 1), StudyError, ["data[0].rnage", "'range'"]
    ),
    "misspelt required key": (
        STUDY.replace("quantity", "quantitty", 1), StudyError, ["data[0].quantity", "'quantitty'"]
    ),
    "unknown key in a parameter": (
        STUDY.replace(G, "g = { start = 2.0, uper = 3.0 }"), StudyError,
        ["parameters.g.uper", "'upper'"],
    ),
    "unknown key in columns": (
        STUDY.replace("value = 2", "value = 2, errors = 3"), StudyError, ["data[1].columns.errors"]
    ),
    "no model": (STUDY.replace('model = "model.toml"\n', ""), StudyError, ["model is missing"]),
    "model file missing": (
        STUDY.replace('"model.toml"', '"other.toml"'), PartitaError, ["other.toml"]
    ),
    "no data": (
        STUDY.replace(STUDY[STUDY.index("[[data]]") : STUDY.index("[parameters]")], ""),
        StudyError, ["data is missing"],
    ),
    "data as one table": (
        STUDY.replace(HEAT, "").replace("[[data]]", "[data]"), StudyError, ["[[data]]"]
    ),
    "no parameters": (STUDY[: STUDY.index("[parameters]")], StudyError, ["parameters is missing"]),
    "not TOML": (STUDY + "= 3\n", StudyError, ["not valid TOML"]),
    "two sets of one name": (STUDY.replace('"heat"', '"chi"'), StudyError, ["'chi'", "rename"]),
    "unknown quantity": (
        STUDY.replace('"susceptibility"', '"susceptability"'), StudyError,
        ["data[0].quantity", "did you mean 'susceptibility'"],
    ),
    "unknown delimiter": (STUDY.replace('";"', '"|"'), StudyError, ["data[1].delimiter"]),
    "unknown direction": (
        STUDY.replace(CHI, CHI + 'direction = "x"\n'), StudyError, ["data[0].direction"]
    ),
    "unknown per": (STUDY.replace(CHI, CHI + 'per = "atom"\n'), StudyError, ["data[0].per"]),
    "unit of another quantity": (
        STUDY.replace('"emu/mol"', '"J/(mol K)"'), UnitsError, ["study.toml: data[0].units"]
    ),
    "unknown unit of temperature": (
        STUDY.replace(CHI, CHI + 'temperature_unit = "C"\n'), UnitsError, ["temperature_unit"]
    ),
    "dimensionless data for a model in kelvin": (
        STUDY.replace('"emu/mol"', '"1"'), UnitsError, ["data[0].units"]
    ),
    "a name though there is no header": (
        STUDY.replace("value = 2", 'value = "C"'), StudyError, ["data[1].columns.value", "header"]
    ),
    "column number zero": (
        STUDY.replace("value = 2", "value = 0"), StudyError, ["data[1].columns.value", "from 1"]
    ),
    "column number too large": (
        STUDY.replace("value = 2", "value = 4"), DataError, ["heat.csv", "column 4"]
    ),
    "two kinds of uncertainty": (
        STUDY.replace(CHI, CHI + "relative_uncertainty = 0.01\n"), StudyError, ["only uncertainty"]
    ),
    "zero relative uncertainty": (
        STUDY.replace(', uncertainty = "error"', "").replace(CHI, CHI + "relative_uncertainty=0\n"),
        StudyError, ["data[0].relative_uncertainty", "above zero"],
    ),
    "negative absolute uncertainty": (
        STUDY.replace(', uncertainty = "error"', "")
        .replace(CHI, CHI + "absolute_uncertainty = -1e-5\n"),
        StudyError, ["data[0].absolute_uncertainty", "above zero"],
    ),
    "one set with uncertainties, one without": (
        STUDY.replace(", uncertainty = 3", ""), StudyError, ["'chi'", "'heat'", "both or neither"]
    ),
    "descending range": (
        STUDY.replace(CHI, CHI + "range = [50, 10]\n"), StudyError, ["data[0].range", "ascending"]
    ),
    "range of three": (
        STUDY.replace(CHI, CHI + "range = [1, 2, 3]\n"), StudyError, ["data[0].range", "pair"]
    ),
    "no overlap": (
        STUDY.replace(CHI, CHI + "range = [400, 500]\n"), DataError,
        ["chi.csv", "no overlap", "4 to 300 K", "[400, 500] K"],
    ),
    "negative field": (STUDY.replace(CHI, CHI + "field = -1\n"), StudyError, ["data[0].field"]),
    "infinite field": (STUDY.replace(CHI, CHI + "field = inf\n"), StudyError, ["not a finite"]),
    "temperature twice": (
        STUDY.replace(CHI, CHI + "temperature = 4.0\n"), StudyError, ["data[0].temperature"]
    ),
    "magnetization without a field": (
        STUDY.replace('"susceptibility"', '"magnetization"'), StudyError, ["data[0].field"]
    ),
    # Parameters
    "unknown parameter": (
        STUDY.replace("chi0 = ", "chi_0 = "), StudyError, ["parameters.chi_0", "'chi0'"]
    ),
    "a number for a parameter": (
        STUDY.replace(G, "g = 2.1"), StudyError, ["parameters.g must be a table"]
    ),
    "start outside": (
        STUDY.replace(J, "J = { start = 300.0, lower = 1.0, upper = 200.0 }"), StudyError,
        ["parameters.J.start", "300", "1 to 200"],
    ),
    "the model's value outside": (
        STUDY.replace(J, "J = { lower = 50.0, upper = 200.0 }"), StudyError,
        ["parameters.J.lower", "30", "50 to 200"],
    ),
    "bounds crossed": (
        STUDY.replace(J, "J = { start = 30.0, lower = 90.0, upper = 20.0 }"), StudyError,
        ["parameters.J.lower", "not below"],
    ),
    "bounds equal": (
        STUDY.replace(J, "J = { start = 30.0, lower = 30.0, upper = 30.0 }"), StudyError,
        ["parameters.J.lower", "not below"],
    ),
    "NaN": (STUDY.replace(J, "J = { start = nan }"), StudyError, ["parameters.J.start", "finite"]),
    "infinite bound": (
        STUDY.replace(J, "J = { start = 30.0, upper = inf }"), StudyError, ["parameters.J.upper"]
    ),
    "text for a number": (
        STUDY.replace(J, 'J = { start = "thirty" }'), StudyError, ["parameters.J.start", "number"]
    ),
    "fixed and started": (
        STUDY.replace(J, "J = { fixed = 30.0, start = 20.0 }"), StudyError, ["parameters.J.start"]
    ),
    "fixed and tied": (
        STUDY.replace(J, 'J = { fixed = 30.0, tied = "g" }'), StudyError, ["parameters.J.tied"]
    ),
    "a fraction above one": (
        STUDY.replace("upper = 0.5 }", "upper = 1.5 }"), StudyError,
        ["paramagnetic_fraction.upper", "0 to 1"],
    ),
    "a negative g": (STUDY.replace(G, "g = { fixed = -2.0 }"), StudyError, ["parameters.g.fixed"]),
    "a tie in a circle": (
        STUDY.replace(J, 'J = { tied = "2*x" }\nx = { tied = "J/2" }'), StudyError,
        ["study.toml", "circle", "J -> x -> J"],
    ),
    "a tie that calls": (
        STUDY.replace(J, "J = { tied = \"open('x')\" }"), StudyError, ["parameters.J.tied", "call"]
    ),
    "a unit of chi0 that does not fit": (
        STUDY.replace("chi0 = { start = 0.0 }", 'chi0 = { unit = "K" }'), UnitsError,
        ["parameters.chi0.unit"],
    ),
    "an auxiliary parameter without a start": (
        STUDY.replace(J, 'J = { tied = "2*x" }\nx = {}'), StudyError, ["parameters.x.start"]
    ),
    "nothing is free": (
        STUDY[: STUDY.index("[parameters]")] + "[parameters]\n", StudyError, ["nothing to fit"]
    ),
    "g free with specific heat alone": (
        STUDY.replace(STUDY[STUDY.index("[[data]]") : STUDY.index(HEAT)], "")
        .replace("chi0 = { start = 0.0 }\n", ""),
        StudyError, ["parameters.g is free", "nothing in the data depends on it"],
    ),
    "chi0 free with specific heat alone": (
        STUDY.replace(STUDY[STUDY.index("[[data]]") : STUDY.index(HEAT)], "").replace(G, ""),
        StudyError, ["parameters.chi0 is free"],
    ),
    "fewer points than parameters": (
        STUDY.replace(HEAT, "").replace(CHI, CHI + "range = [4, 4.9]\n"), DataError,
        ["3 points", "4 free parameters"],
    ),
}  # fmt: skip


@pytest.mark.parametrize("case", BAD_STUDIES)
def test_bad_studies(tmp_path, case: str) -> None:
    text, fault, words = BAD_STUDIES[case]
    assert text != STUDY
    path = write_dimer(tmp_path, study=text)
    with pytest.raises(fault) as caught:
        read_study(path)
    sentence = told(caught.value)
    for word in words:
        assert word in sentence, sentence
    assert "study.toml" in sentence or ".csv" in sentence or isinstance(caught.value, ModelError)


ROWS = "# a comment\nT (K),chi,error\n\n4,0.1,0.01\n5,0.2,0.01\n6,0.3,0.01\n7,0.2,0.01\n"
BAD_TABLES = {
    "a decimal comma": (ROWS.replace("0.2,", "0,2,", 1), ["line 5", "4 cells", "decimal comma"]),
    "a quoted decimal comma": (
        ROWS.replace("0.2,", '"0,2",', 1), ["line 5", "column 'chi'", "decimal comma", "0.2"]
    ),
    "a trailing delimiter": (ROWS.replace("0.2,0.01", "0.2,0.01,", 1), ["line 5", "4 cells"]),
    "a short row": (ROWS.replace("0.2,0.01", "0.2", 1), ["line 5", "2 cells where 3"]),
    "a text": (
        ROWS.replace("0.2", "high", 1), ["'high' is not a number; correct or remove line 5"]
    ),
    "underscores": (ROWS.replace("0.2", "1_0", 1), ["line 5", "'1_0'"]),
    "an empty cell": (ROWS.replace("0.2", "", 1), ["line 5", "empty"]),
    "NaN": (ROWS.replace("0.2", "nan", 1), ["line 5", "not a finite"]),
    "infinity": (ROWS.replace("0.2", "-inf", 1), ["line 5", "not a finite"]),
    "too large for a number": (ROWS.replace("0.2", "1e999", 1), ["line 5", "not a finite"]),
    "unsorted": (ROWS.replace("\n6", "\n4.5"), ["line 6", "4.5 K", "sort"]),
    "repeated": (ROWS.replace("\n6", "\n5"), ["line 6", "5 K", "repeats"]),
    "zero temperature": (ROWS.replace("\n4", "\n0"), ["line 4", "0 K", "above zero"]),
    "negative temperature": (ROWS.replace("\n4", "\n-4"), ["line 4", "-4 K", "above zero"]),
    "zero uncertainty": (ROWS.replace("0.2,0.01", "0.2,0", 1), ["line 5", "uncertainty 0"]),
    "negative uncertainty": (ROWS.replace("0.2,0.01", "0.2,-1", 1), ["line 5", "uncertainty -1"]),
    "column missing": (ROWS.replace("chi", "X"), ["'chi'", "'X'"]),
    "column misspelt": (ROWS.replace("chi", "Chi"), ["'chi'", "did you mean 'Chi'"]),
    "column twice": (ROWS.replace("error", "chi"), ["line 2", "'chi' twice"]),
    "another delimiter": (
        ROWS.replace(",", ";"), ["the header holds ';': set delimiter = \";\""]
    ),
    "tabs": (ROWS.replace(",", "\t"), ["holds tabs", 'set delimiter = "tab"']),
    "spaces": (ROWS.replace(",", "  "), ["single column", 'delimiter = "space"']),
    "a header that is a comment": (
        ROWS.replace("T (K)", "# T (K)"), ["looks like data", "header = false", "comment"]
    ),
    "no rows": (ROWS[: ROWS.index("\n4")], ["no rows"]),
    "nothing": ("", ["no rows"]),
    "an open quotation": (ROWS.replace("0.2,", '"0.2,', 1), ["line 5", "quotation"]),
    "not text": (b"\xff\xfe\x00\x01", ["UTF-8"]),
}  # fmt: skip


@pytest.mark.parametrize("case", BAD_TABLES)
def test_bad_tables(tmp_path, case: str) -> None:
    text, words = BAD_TABLES[case]
    path = write_dimer(tmp_path)
    (tmp_path / "chi.csv").write_bytes(text if isinstance(text, bytes) else text.encode())
    with pytest.raises(DataError) as caught:
        read_study(path)
    sentence = told(caught.value)
    for word in ["chi.csv", *words]:
        assert word in sentence, sentence


@pytest.mark.parametrize("make", ["missing", "folder"])
def test_a_data_file_that_cannot_be_read(tmp_path, make: str) -> None:
    path = write_dimer(tmp_path)
    (tmp_path / "chi.csv").unlink()
    if make == "folder":
        (tmp_path / "chi.csv").mkdir()
    with pytest.raises(DataError, match=r"chi\.csv"):
        read_study(path)
    with pytest.raises(StudyError, match="no such study"):
        read_study(tmp_path / "nothing.toml")
    with pytest.raises(StudyError, match="cannot be read"):
        read_study(tmp_path)


def test_relative_uncertainty_of_a_zero(tmp_path) -> None:
    path = write_dimer(tmp_path)
    text = STUDY.replace(', uncertainty = "error"', "")
    path.write_text(text.replace(CHI, CHI + "relative_uncertainty = 0.01\n"))
    (tmp_path / "chi.csv").write_text(ROWS.replace("0.2", "0", 1))
    with pytest.raises(DataError, match="line 5: a relative uncertainty of the value 0"):
        read_study(path)


def test_a_map_with_a_repeated_pair(tmp_path) -> None:
    path = write_dimer(tmp_path)
    text = STUDY.replace("susceptibility", "magnetization").replace(
        'temperature = "T (K)"', 'temperature = "T (K)", field = "B"'
    )
    path.write_text(text)
    table = "T (K),B,chi,error\n5,1,0.1,1\n2,1,0.1,1\n5,2,0.1,1\n5,1,0.2,1\n"
    (tmp_path / "chi.csv").write_text(table)
    with pytest.raises(DataError, match="line 5: the temperature and field of line 2 are repeated"):
        read_study(path)
    (tmp_path / "chi.csv").write_text(table.replace("5,2", "5,-2"))
    with pytest.raises(DataError, match="line 4: the field -2 T is negative"):
        read_study(path)


def test_tables_in_every_layout_are_the_same(tmp_path) -> None:
    path = write_dimer(tmp_path)
    reference = read_study(path).sets[0]
    plain = (tmp_path / "chi.csv").read_text()
    for delimiter, word in (("\t", "tab"), (";", ";"), ("   ", "space")):
        text = plain.replace("T (K)", "T").replace(",", delimiter)
        (tmp_path / "chi.csv").write_text("\ufeff" + text.replace("\n", "\r\n"), encoding="utf-8")
        study = STUDY.replace('"T (K)"', '"T"').replace(CHI, CHI + f'delimiter = "{word}"\n', 1)
        path.write_text(study)
        found = read_study(path).sets[0]
        for name in ("temperature", "value", "uncertainty", "line"):
            np.testing.assert_array_equal(getattr(found, name), getattr(reference, name))
    # In other units, with a part of the points masked.
    T, chi, error = reference.temperature, reference.value, reference.uncertainty
    write_csv(tmp_path / "chi.csv", "T (K),chi,error", 1000 * T, chi, error)
    more = 'units = "m3/mol"\ntemperature_unit = "mK"\nrange = [10, 100]\n'
    path.write_text(STUDY.replace(CHI, more, 1))
    found = read_study(path).sets[0]
    inside = (T >= 10) & (T <= 100)
    assert (found.n_points, found.n_masked) == (inside.sum(), (~inside).sum())
    np.testing.assert_allclose(found.temperature, T[inside], rtol=1e-15)
    np.testing.assert_allclose(found.value, chi[inside], rtol=1e-15)


@pytest.mark.parametrize("mark", ["", "\ufeff"])
@pytest.mark.parametrize("end", ["\n", "\r\n", "\r"])
def test_the_marks_other_systems_leave_in_a_file_do_not_matter(tmp_path, mark, end) -> None:
    path = write_dimer(tmp_path)
    reference = read_study(path)
    for name in ("chi.csv", "heat.csv", "study.toml", "model.toml"):
        # TOML knows no lone carriage return.
        line = "\n" if name.endswith(".toml") and end == "\r" else end
        text = mark + (tmp_path / name).read_text().replace("\n", line)
        (tmp_path / name).write_bytes(text.encode())
    found = read_study(path)
    for one, other in zip(found.sets, reference.sets, strict=True):
        np.testing.assert_array_equal(one.value, other.value)
        np.testing.assert_array_equal(one.uncertainty, other.uncertainty)
    assert [p.name for p in found.parameters.free] == [p.name for p in reference.parameters.free]


def test_units_are_kept_as_the_program_spells_them(tmp_path) -> None:
    path = write_dimer(tmp_path)
    reference = read_study(path)
    path.write_text(STUDY.replace('"emu/mol"', '"emu mol-1"').replace("J/(mol K)", "J/mol/K"))
    study = read_study(path)
    assert [data.units for data in study.sets] == ["emu/mol", "J/(mol K)"]
    np.testing.assert_array_equal(study.sets[0].value, reference.sets[0].value)


def test_chi0_counts_the_moles_of_its_data_only_where_they_agree(tmp_path) -> None:
    path = write_dimer(tmp_path)
    second = STUDY[STUDY.index("[[data]]") : STUDY.index('[[data]]\nname = "heat')]
    second = second.replace('name = "chi"', 'name = "more"').replace(CHI, CHI + 'per = "formula"\n')
    for text, unit in (
        (STUDY, "emu/mol ion"),
        (STUDY.replace(CHI, CHI + 'per = "formula"\n'), "emu/mol formula"),
        (STUDY.replace("[parameters]", second + "[parameters]"), "emu/mol ion"),
    ):
        path.write_text(text)
        assert read_study(path).parameters.by_name["chi0"].unit == unit
        # Also where it is not free.
        path.write_text(text.replace("chi0 = { start = 0.0 }\n", ""))
        assert read_study(path).parameters.by_name["chi0"].unit == unit


def test_data_per_formula_unit_are_twice_those_per_ion(tmp_path) -> None:
    path = write_dimer(tmp_path)
    one = fit(path)
    table = np.loadtxt(tmp_path / "chi.csv", delimiter=",", skiprows=2).T
    write_csv(tmp_path / "chi.csv", "T (K),chi,error", table[0], 2 * table[1], 2 * table[2])
    (tmp_path / "model.toml").write_text(MODEL.replace("format = 1", "format = 1\n"
                                                       "ions_per_formula = 2"))  # fmt: skip
    text = STUDY.replace(CHI, CHI + 'per = "formula"\n')
    path.write_text(text)
    two = fit(path)
    for name in one.free_names:
        # chi0 counts the moles its data do, and its unit says so.
        more = 2 if name == "chi0" else 1
        assert two[name].value == pytest.approx(more * one[name].value, rel=1e-7)
        assert two[name].standard_error == pytest.approx(more * one[name].standard_error, rel=1e-6)
    assert (one["chi0"].unit, two["chi0"].unit) == ("emu/mol ion", "emu/mol formula")
    path.write_text(text.replace("chi0 = { start = 0.0 }", 'chi0 = { per = "formula" }'))
    assert fit(path)["chi0"] == two["chi0"]
    si = 'chi0 = { start = 0.0, unit = "m3 mol-1", per = "ion" }'
    path.write_text(text.replace("chi0 = { start = 0.0 }", si))
    in_si = fit(path)["chi0"]
    assert in_si.unit == "m3/mol ion"
    assert in_si.value == pytest.approx(4e-6 * math.pi * one["chi0"].value, rel=1e-7)


def test_what_the_study_leaves_out_stays_at_the_models_values(tmp_path) -> None:
    path = write_dimer(tmp_path, study=STUDY[: STUDY.index(G)].replace(J, "J = {}"))
    study = read_study(path)
    assert [p.name for p in study.parameters.free] == ["J"]
    assert study.parameters.by_name["J"].start == 30.0
    assert study.parameters.by_name["g"].start == 2.0
    assert study.title == "invented points of a dimer"
    assert study.text.startswith("\nformat = 1")


def test_a_first_row_of_numbers_is_not_lost_as_a_header(tmp_path) -> None:
    path = write_dimer(tmp_path)
    path.write_text(STUDY.replace("header = false\n", ""))
    with pytest.raises(DataError, match=r"heat\.csv, line 2, looks like data; set header = false"):
        read_study(path)
    # A study that says so itself has numbers for the names of its columns.
    path.write_text(STUDY.replace("header = false\n", "header = true\n"))
    assert read_study(path).sets[1].n_points == 59


OPEN = STUDY.replace(", lower = 1.0, upper = 200.0", "").replace(", lower = 1.5, upper = 3.0", "")
SIZES = {
    "values near zero": (OPEN, 1e-300, 1.0, DataError, ["line 3", "susceptibility is", "unit"]),
    "enormous values": (OPEN, 1e150, 1.0, DataError, ["line 3", "susceptibility is"]),
    "tiny uncertainties": (OPEN, 1.0, 1e-200, DataError, ["line 3", "the uncertainty is"]),
    "enormous uncertainties": (OPEN, 1.0, 1e150, DataError, ["line 3", "the uncertainty is"]),
    "uncertainties without digits": (OPEN, 1.0, 1e-315, DataError, ["line 3", "uncertainty"]),
    "uncertainties that hide all": (OPEN, 1.0, 1e90, StudyError, ["do not change with"]),
    "chi0 start": (
        OPEN.replace("chi0 = { start = 0.0", "chi0 = { start = 1e300"), 1.0, 1.0, StudyError,
        ["parameters.chi0.start = 1e+300"],
    ),
    "g start": (
        OPEN.replace("g = { start = 2.0", "g = { start = 1e200"), 1.0, 1.0, StudyError,
        ["parameters.g.start = 1e+200"],
    ),
    "a bound": (
        OPEN.replace("J = { start = 30.0", "J = { start = 30.0, upper = 1e300"), 1.0, 1.0,
        StudyError, ["parameters.J.upper = 1e+300"],
    ),
    "a g far off": (
        OPEN.replace("g = { start = 2.0", "g = { start = 1e90"), 1.0, 1.0, StudyError,
        ["at the start", "g = 1e+90", "too far apart"],
    ),
    "negative throughout": (
        OPEN.replace("chi0 = { start = 0.0 }\n", ""), -1.0, 1.0, DataError,
        ["chi.csv: all values are negative", "susceptibility of spins alone", "chi0 free"],
    ),
    "negative less chi0": (
        OPEN.replace("chi0 = { start = 0.0 }", "chi0 = { fixed = 1.0 }"), 1.0, 1e-3, DataError,
        ["all values, less the fixed chi0, are negative"],
    ),
}  # fmt: skip


def scaled(folder, study: str, values: float, errors: float):
    path = write_dimer(folder, study=study)
    T, chi, error = np.loadtxt(folder / "chi.csv", delimiter=",", skiprows=2).T
    write_csv(folder / "chi.csv", "T (K),chi,error", T, values * chi, errors * error)
    return path


@pytest.mark.parametrize("starts", [0, 6])
@pytest.mark.parametrize("case", SIZES)
def test_numbers_of_no_usable_size(tmp_path, case: str, starts: int) -> None:
    text, values, errors, fault, words = SIZES[case]
    with pytest.raises(fault) as caught:
        fit(scaled(tmp_path, text, values, errors), starts=starts)
    for word in words:
        assert word in told(caught.value)


@pytest.mark.parametrize("starts", [0, 6])
def test_far_off_starts_and_data_end_in_a_result_or_a_sentence(tmp_path, starts: int) -> None:
    """Whatever comes out is neither a traceback nor a warning, and says that the fit is bad."""
    for text, values, errors in (
        (OPEN, -1.0, 1.0),
        (OPEN, 1.0, 1e-90),
        (OPEN, 1e-90, 1e-90),
        (OPEN.replace("start = 0.0", "start = 1e90"), 1.0, 1.0),
        (OPEN.replace("J = { start = 30.0", "J = { start = -1e5"), 1.0, 1.0),
        (OPEN.replace("chi0 = { start = 0.0 }\n", ""), -1.0, 1e7),
    ):
        try:
            result = fit(scaled(tmp_path, text, values, errors), starts=starts)
        except (StudyError, DataError) as error:
            told(error)
        else:
            assert result.cautions


@pytest.mark.parametrize("window", ["auto", "tell", "off"])
def test_the_window_and_the_sets_with_a_stated_range_are_kept(tmp_path, window):
    path = write_dimer(tmp_path)
    text = path.read_text().replace('name = "heat"', 'name = "heat"\nrange = [2.0, 500.0]')
    path.write_text(text.replace("format = 1", f'format = 1\nwindow = "{window}"', 1))
    study = read_study(path)
    assert study.window == window
    assert study.ranged == {"heat"}
