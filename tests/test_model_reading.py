"""Model files: the three ways agree, texts come back, and each fault is one sentence."""

import copy
import json
import re

import numpy as np
import pytest

from thermo.errors import ModelError
from thermo.model import read_model, read_model_text

LADDER = """
format = 1
title = "three rungs"
energy_unit = "K"
bond_term = "-2J S.S"
ions_per_formula = 2
[couplings]
J_leg = 70.0
J_rung = 140.0
"""
LISTED = (
    LADDER
    + "".join(
        f'[[site]]\nname = "{name}{k}"\nspin = 0.5\ng = 2.1\n' for k in range(3) for name in "AB"
    )
    + "".join(
        f'[[bond]]\nsites = ["{a}{k}", "{b}{(k + step) % 3}"]\ncoupling = "{c}"\n'
        for k in range(3)
        for a, b, step, c in (
            ("A", "A", 1, "J_leg"),
            ("B", "B", 1, "J_leg"),
            ("A", "B", 0, "J_rung"),
        )
    )
)
CELL = (
    LADDER
    + """
[cell]
repeat = [3]
boundary = "periodic"
[[cell.site]]
name = "A"
spin = 0.5
g = 2.1
[[cell.site]]
name = "B"
spin = "1/2"
g = [2.1, 2.1, 2.1]
[[cell.bond]]
sites = ["A", "A"]
offset = [1]
coupling = "J_leg"
[[cell.bond]]
sites = ["B", "B"]
offset = [1]
coupling = "J_leg"
[[cell.bond]]
sites = ["A", "B"]
coupling = "J_rung"
"""
)
NAMED = (
    LADDER
    + """
[lattice]
name = "ladder"
size = [3]
boundary = "periodic"
spin = 0.5
g = [[2.1, 0, 0], [0, 2.1, 0], [0, 0, 2.1]]
couplings = { leg = "J_leg", rung = "J_rung" }
"""
)


@pytest.mark.parametrize("text", [LISTED, CELL, NAMED], ids=["listed", "cell", "named"])
def test_the_three_ways_give_one_cluster(text, tmp_path):
    model = read_model_text(text)
    assert model.digest == read_model_text(CELL).digest
    assert model.title == "three rungs"
    assert model.ions_per_formula == 2
    assert not model.notes
    assert len(model.bonds) == 9
    assert np.allclose(model.bonds[0].matrix, -2 * np.eye(3))
    assert model.common_g == 2.1
    path = tmp_path / "model.toml"
    path.write_text(text, encoding="utf-8")
    again = read_model(path)
    assert again.digest == model.digest
    assert again.source == str(path)
    assert read_model_text(again.text).digest == model.digest


def simple():
    """A dimer as a mapping, spoilt in one place by each test of a fault."""
    return {
        "format": 1,
        "energy_unit": "K",
        "bond_term": "+J S.S",
        "couplings": {"J_leg": 70.0, "J_rung": 140.0},
        "site": [{"name": "a", "spin": 0.5}, {"name": "b", "spin": 1, "g": 2.1}],
        "bond": [
            {"sites": ["a", "b"], "coupling": "J_leg"},
            {"sites": [0, 1], "coupling": "J_rung", "form": "xy"},
        ],
        "ion": [{"sites": ["b"], "coupling": "J_leg", "form": "axial"}],
    }


def celled():
    return {
        "format": 1,
        "energy_unit": "1",
        "bond_term": "+J S.S",
        "couplings": {"J": 1.0},
        "cell": {
            "repeat": [2, 3],
            "boundary": "periodic",
            "site": [{"name": "A", "spin": 0.5}],
            "bond": [{"sites": ["A", "A"], "offset": [0, 1], "coupling": "J"}],
        },
    }


def latticed():
    return {
        "format": 1,
        "energy_unit": "1",
        "bond_term": "+J S.S",
        "couplings": {"J": 1.0},
        "lattice": {"name": "square", "size": [3, 3], "spin": 0.5, "couplings": {"nearest": "J"}},
    }


def test_a_mapping_and_its_json_text_round_trip(tmp_path):
    for source in (simple(), celled(), latticed()):
        model = read_model(source)
        assert json.loads(model.text) == source
        assert read_model_text(model.text).digest == model.digest
    array = simple()
    array["site"][0] = {"name": "a", "spin": np.float64(0.5), "g": 2 * np.eye(3)}
    array["bond"] = tuple(array["bond"])
    assert read_model(array).digest == read_model(simple()).digest


def test_defaults():
    source = simple()
    for site in source["site"]:
        del site["name"]
    source["bond"][0]["sites"] = ["0", "1"]
    source["ion"] = []
    model = read_model(source)
    assert model.title == "untitled"
    assert model.sites[0].name == "0"
    assert model.sites[0].g[0, 0] == 2.0
    assert model.ions_per_formula == 1


def test_62_spins_are_read_and_63_are_not():
    source = latticed()
    source["lattice"]["size"] = [31, 2]
    assert len(read_model(source).sites) == 62
    source["lattice"]["size"] = [9, 7]
    with pytest.raises(ModelError, match="62-bit limit"):
        read_model(source)
    source["lattice"] |= {"size": [8, 4], "spin": 1}  # two bits each
    with pytest.raises(ModelError, match="64 bits"):
        read_model(source)


def test_notes_on_what_has_no_effect():
    source = simple()
    source["couplings"]["J_far"] = 1.0
    source["ion"][0]["sites"] = ["a", "b"]
    source["bond"][1] = {
        "sites": [0, 1],
        "coupling": "J_rung",
        "form": "antisymmetric",
        "vector": [0, 0, 0],
    }
    model = read_model(source)
    notes = "\n".join(model.notes)
    assert "couplings.J_far: no bond" in notes
    assert "ion[0]: on a spin 1/2" in notes
    assert "bond[1]: its matrix is zero" in notes
    assert len(model.notes) == 3
    assert [ion.site for ion in model.ions] == [1]
    assert len(model.bonds) == 1


def test_a_bond_listed_again_in_reverse_is_told():
    source = celled()
    source["cell"]["bond"].append({"sites": ["A", "A"], "offset": [0, -1], "coupling": "J"})
    assert "cell.bond[1]: repeats cell.bond[0]" in "\n".join(read_model(source).notes)


MISSING = object()
NAN, INF = float("nan"), float("inf")

FAULTS = [
    # where in the mapping, the value put there, what the sentence must say
    (simple, "bond_trem", "+J S.S", r"^bond_trem: unknown key; did you mean 'bond_term'\?"),
    (simple, "bond.1.couplng", "J", r"^bond\[1\]\.couplng: unknown key; did you mean 'coupling'"),
    (simple, "site.0.mass", 1, r"^site\[0\]\.mass: unknown key; it can be 'name', 'spin', 'g'"),
    (celled, "cell.shape", 1, r"^cell\.shape: unknown key"),
    (latticed, "lattice.colour", 1, r"^lattice\.colour: unknown key"),
    (simple, "format", MISSING, r"^format: missing; give format = 1"),
    (simple, "format", 2, r"^format: 2 is not a format this version reads"),
    (simple, "format", True, r"^format: True is not a whole number"),
    (simple, "bond_term", MISSING, r"^bond_term: missing; .*'-2J S\.S'"),
    (simple, "bond_term", "J S.S", r"^bond_term: 'J S\.S' is not known; .*'\+J S\.S', '-J"),
    (simple, "energy_unit", MISSING, r"^energy_unit: missing"),
    (simple, "energy_unit", "cm^-1", r"^energy_unit: .*did you mean 'cm-1'"),
    (simple, "energy_unit", 1, r"^energy_unit: 1 is not known"),
    (simple, "couplings", MISSING, r"^couplings: missing"),
    (simple, "couplings", [1.0], r"^couplings: \[1\.0\] is not a table"),
    (simple, "couplings.J_leg", NAN, r"^couplings\.J_leg: nan is not a finite number"),
    (simple, "couplings.J_leg", INF, r"^couplings\.J_leg: inf is not a finite number"),
    (simple, "couplings.J_leg", True, r"^couplings\.J_leg: True is not a number"),
    (simple, "couplings.J_leg", "70", r"^couplings\.J_leg: '70' is not a number; .*quotes"),
    (simple, "couplings.J'", 1.0, r"^couplings: \"J'\" cannot name a coupling"),
    (simple, "couplings.lambda", 1.0, r"^couplings: 'lambda' cannot name a coupling"),
    (simple, "title", 3, r"^title: 3 is not a name or text"),
    (simple, "ions_per_formula", 0, r"^ions_per_formula: 0 is not positive"),
    (simple, "ions_per_formula", NAN, r"^ions_per_formula: nan"),
    (
        simple,
        "bond.0.coupling",
        "J_lge",
        r"^bond\[0\]\.coupling: 'J_lge' is not in \[couplings\] \(it has J_leg, J_rung\); "
        r"did you mean 'J_leg'\?$",
    ),
    (simple, "bond.0.coupling", "X", r"^bond\[0\]\.coupling: .*correct the name or add it"),
    (simple, "bond.0.coupling", MISSING, r"^bond\[0\]\.coupling: missing"),
    (simple, "bond.0.coupling", 3.0, r"^bond\[0\]\.coupling: 3\.0 is not a name"),
    (simple, "bond.0.sites", MISSING, r"^bond\[0\]\.sites: missing"),
    (simple, "bond.0.sites", ["a"], r"^bond\[0\]\.sites: names 1 site\(s\), but a bond joins two"),
    (simple, "bond.0.sites", ["a", "c"], r"^bond\[0\]\.sites\[1\]: there is no site 'c'"),
    (simple, "bond.0.sites", [0, 2], r"^bond\[0\]\.sites\[1\]: site index 2 is out of range"),
    (simple, "bond.0.sites", [-1, 0], r"^bond\[0\]\.sites\[0\]: site index -1 is out of range"),
    (simple, "bond.0.sites", [0, True], r"^bond\[0\]\.sites\[1\]: True is not a site"),
    (simple, "bond.0.sites", ["a", 0], r"^bond\[0\]\.sites: joins site 'a' to itself"),
    (simple, "bond.0.form", "heisenberg", r"^bond\[0\]\.form: 'heisenberg' is not known; "),
    (simple, "bond.0.form", "isotropc", r"^bond\[0\]\.form: .*did you mean 'isotropic'"),
    (simple, "bond.0.form", "antisymmetric", r"^bond\[0\]\.vector: missing"),
    (simple, "bond.0.vector", [0, 0, 1], r"^bond\[0\]\.vector: has no meaning with the form"),
    (simple, "bond.0.offset", [1], r"^bond\[0\]\.offset: unknown key"),
    (simple, "bond.0.matrix", [[1, 0], [0, 1]], r"^bond\[0\]\.matrix: is not a 3x3 matrix"),
    (
        simple,
        "bond.0.matrix",
        [[1, 0, 0], [0, NAN, 0], [0, 0, 1]],
        r"^bond\[0\]\.matrix\[1\]\[1\]: nan",
    ),
    (simple, "bond.1.matrix", [[1, 0, 0]] * 3, r"^bond\[1\]\.form: stands beside a matrix"),
    (simple, "bond", {"sites": [0, 1]}, r"^bond: .* is not a list; give one \[\[bond\]\]"),
    (simple, "bond.0", 5, r"^bond\[0\]: 5 is not a table"),
    (simple, "site", [], r"^site: the cluster is empty"),
    (simple, "site", MISSING, r"^the file states no cluster"),
    (simple, "site.1.name", "a", r"^site\[1\]\.name: 'a' is the name of site\[0\] already"),
    (simple, "site.0.spin", MISSING, r"^site\[0\]\.spin: missing"),
    (simple, "site.0.spin", -0.5, r"^site\[0\]\.spin: -0\.5 is not a spin"),
    (simple, "site.0.spin", 0.25, r"^site\[0\]\.spin: 0\.25 is not a spin; .*multiple of 1/2"),
    (simple, "site.0.spin", 0, r"^site\[0\]\.spin: 0 is not a spin"),
    (simple, "site.0.spin", "1/4", r"^site\[0\]\.spin: '1/4' is not a spin"),
    (simple, "site.0.spin", "1/0", r"^site\[0\]\.spin: '1/0' is not a spin"),
    (simple, "site.0.spin", "half", r"^site\[0\]\.spin: 'half' is not a spin"),
    (simple, "site.0.spin", NAN, r"^site\[0\]\.spin: nan is not a finite number"),
    (simple, "site.0.spin", True, r"^site\[0\]\.spin: True is not a number"),
    (simple, "site.0.spin", 1e20, r"^site: .*62-bit limit"),
    (simple, "site.0.spin", 1e300, r"^site\[0\]\.spin: 1e\+300 is too large"),
    (simple, "couplings.J_leg", 10**400, r"^couplings\.J_leg: the number has hundreds of digits"),
    (
        simple,
        "site.0.g",
        [[2, 0.1, 0], [0, 2, 0], [0, 0, 2]],
        r"^site\[0\]\.g: the matrix is not symmetric \(entry \[0\]\[1\] is 0\.1, \[1\]\[0\] is 0\)",
    ),
    (simple, "site.0.g", 0, r"^site\[0\]\.g: g is zero"),
    (simple, "site.0.g", NAN, r"^site\[0\]\.g: nan"),
    (simple, "site.0.g", [2, 2], r"^site\[0\]\.g: has 2 entries"),
    (simple, "site.0.g", [2, 2, True], r"^site\[0\]\.g\[2\]: True is not a number"),
    (simple, "site.0.g", [[2, 0, 0], [0, 2, 0]], r"^site\[0\]\.g: is not a 3x3 matrix"),
    (simple, "site.0.g", 2 + 1j, r"^site\[0\]\.g: \(2\+1j\) has no place in a model"),
    (simple, "ion.0.form", MISSING, r"^ion\[0\]\.form: missing"),
    (simple, "ion.0.form", "uniaxial", r"^ion\[0\]\.form: .*did you mean 'axial'"),
    (simple, "ion.0.coupling", "D", r"^ion\[0\]\.coupling: 'D' is not in"),
    (simple, "ion.0.sites", [], r"^ion\[0\]\.sites: names no site"),
    (simple, "ion.0.sites", ["b", 1], r"^ion\[0\]\.sites\[1\]: site 'b' is named twice"),
    (
        simple,
        "ion.0",
        {"sites": [1], "coupling": "J_leg", "matrix": [[0, 1, 0]] + [[0] * 3] * 2},
        r"^ion\[0\]\.matrix: the matrix is not symmetric",
    ),
    (simple, "lattice", {}, r"^lattice: stands beside site, but .* one way"),
    (celled, "bond", [], r"^bond: stands beside cell, .*cell\.bond"),
    (celled, "cell.repeat", MISSING, r"^cell\.repeat: missing"),
    (celled, "cell.repeat", [2, 0], r"^cell\.repeat\[1\]: 0 is not a positive number"),
    (celled, "cell.repeat", [2, 1.5], r"^cell\.repeat\[1\]: 1\.5 is not a whole number"),
    (celled, "cell.repeat", [2, True], r"^cell\.repeat\[1\]: True is not a whole number"),
    (celled, "cell.repeat", [[1, 2], [2, 4]], r"^cell\.repeat: its rows are not independent"),
    (celled, "cell.repeat", [[1, 2], [2]], r"^cell\.repeat\[1\]: .*not a row of a square"),
    (celled, "cell.repeat", [1] * 4, r"^cell\.repeat: has 4 entries; give 1 to 3"),
    (celled, "cell.repeat", [10**9, 10**9], r"^cell\.repeat: .*62-bit limit"),
    (celled, "cell.repeat", [2], r"^cell\.bond\[0\]\.offset: has 2 entries"),
    (celled, "cell.boundary", "closed", r"^cell\.boundary: 'closed' is not known"),
    (celled, "cell.boundary", ["open"], r"^cell\.boundary: has 1 entries"),
    (
        celled,
        "cell.bond.0.offset",
        [0, 0],
        r"^cell\.bond\[0\]\.sites: joins .* to itself; .*offset",
    ),
    (celled, "cell.bond.0.offset", [0, 0.5], r"^cell\.bond\[0\]\.offset\[1\]: 0\.5 is not a whole"),
    (celled, "cell.site", [], r"^cell\.site: the cluster is empty"),
    (latticed, "lattice.name", "squre", r"^lattice\.name: .*did you mean 'square'"),
    (latticed, "lattice.name", MISSING, r"^lattice\.name: missing"),
    (latticed, "lattice.size", [3], r"^lattice\.size: has 1 entries; give 2"),
    (latticed, "lattice.size", MISSING, r"^lattice\.size: missing"),
    (latticed, "lattice.spin", MISSING, r"^lattice\.spin: missing"),
    (latticed, "lattice.spin", [0.5, 1], r"^lattice\.spin: has 2 entries"),
    (latticed, "lattice.g", {"B": 2.0}, r"^lattice\.g\.B: unknown key"),
    (latticed, "lattice.couplings", MISSING, r"^lattice\.couplings: missing"),
    (latticed, "lattice.couplings", "J", r"^lattice\.couplings: 'J' is not a table"),
    (
        latticed,
        "lattice.couplings.diagnal",
        "J",
        r"^lattice\.couplings\.diagnal: .*no such role; did you mean 'diagonal'",
    ),
    (latticed, "lattice.couplings.nearest", "K", r"^lattice\.couplings\.nearest: 'K' is not in"),
    (latticed, "lattice.couplings.nearest", 1.0, r"^lattice\.couplings\.nearest: 1\.0 is not a c"),
    (latticed, "lattice.couplings.nearest", [], r"^lattice\.couplings\.nearest: names no coupling"),
    (
        latticed,
        "lattice.couplings.nearest",
        ["J", {"coupling": "J", "form": "x"}],
        r"^lattice\.couplings\.nearest\[1\]\.form: 'x' is not known",
    ),
    (
        latticed,
        "lattice",
        {"name": "chain", "size": [4], "spin": 1, "couplings": {"nearest": "J", "weak": "J"}},
        r"^lattice\.couplings: the roles nearest, weak do not go together",
    ),
]


def spoil(source, where, value):
    source = copy.deepcopy(source)
    *path, last = [int(k) if k.isdigit() else k for k in where.split(".")]
    place = source
    for key in path:
        place = place[key]
    if value is MISSING:
        del place[last]
    else:
        place[last] = value
    return source


@pytest.mark.parametrize(
    ("make", "where", "value", "says"),
    FAULTS,
    ids=[f"{m.__name__}-{w}-{k}" for k, (m, w, _, _) in enumerate(FAULTS)],
)
def test_each_fault_is_one_sentence(make, where, value, says):
    with pytest.raises(ModelError) as caught:
        read_model(spoil(make(), where, value))
    assert_sentence(str(caught.value))
    assert re.search(says, str(caught.value)), str(caught.value)


def assert_sentence(message):
    assert "\n" not in message
    assert len(message) < 400
    assert "; " in message, "it should say what to do"


@pytest.mark.parametrize(
    ("content", "says"),
    [
        (LADDER.replace("format = 1", "format 1"), r"not valid TOML: .*line 2, column"),
        ('{"format": 1,', "not valid JSON: .*line 1 column"),
        ('{"format": 1, "format": 1}', "'format' is given twice"),
        (LADDER.replace("70.0", "nan"), r"couplings\.J_leg: nan is not a finite"),
        (LADDER.replace("70.0", "1e999"), r"couplings\.J_leg: inf is not a finite"),
        (LADDER.replace("70.0", "2024-01-01"), r"couplings\.J_leg: .* is not a number"),
        (LADDER.replace("70.0", "70,0"), "not valid TOML: .*line 8"),
        ("a = " + "[" * 5000, "not valid TOML"),
        ("a = " + "1" * 5000, "not valid TOML"),
        (b"CDF\x01\x00\x00\xff\xfe", "is not a text in UTF-8"),
        ("format = 1\0", "is not a text in UTF-8"),
        ("", "format: missing"),
    ],
)
def test_unreadable_files(content, says, tmp_path):
    path = tmp_path / "model.toml"
    path.write_bytes(content if isinstance(content, bytes) else content.encode())
    with pytest.raises(ModelError, match=says) as caught:
        read_model(path)
    assert_sentence(str(caught.value))
    assert str(caught.value).startswith(str(path))


def test_missing_files_and_foreign_arguments(tmp_path):
    for source, says in (
        (tmp_path / "none.toml", "No such file"),
        (tmp_path, "is a directory"),
        (7, "is not a model"),
        ("a\0b", "cannot be read"),
        (None, "is not a"),
    ):
        with pytest.raises(ModelError, match=says) as caught:
            read_model(source)
        assert_sentence(str(caught.value))
    with pytest.raises(ModelError, match="as a string"):
        read_model_text(3)
    endless = simple()
    endless["site"].append(endless)
    with pytest.raises(ModelError, match="without end"):
        read_model(endless)
    with pytest.raises(ModelError, match="keys are strings"):
        read_model({1: 2})


def test_a_file_with_a_byte_order_mark_is_read(tmp_path):
    path = tmp_path / "model.toml"
    path.write_bytes(b"\xef\xbb\xbf" + NAMED.encode())
    assert read_model(path).digest == read_model_text(NAMED).digest


def test_a_coupling_lost_in_rounding_is_told() -> None:
    def notes(weak: float) -> tuple[str, ...]:
        mapping = {
            "format": 1,
            "energy_unit": "1",
            "bond_term": "+J S.S",
            "couplings": {"strong": 1.0, "weak": weak},
            "site": [{"spin": 0.5}] * 3,
            "bond": [
                {"sites": [0, 1], "coupling": "strong"},
                {"sites": [1, 2], "coupling": "weak"},
            ],
        }
        return read_model(mapping).notes

    assert notes(1e-8) == notes(0.0) == ()
    assert len(notes(1e-11)) == 1
    assert "weak" in notes(1e-11)[0]
