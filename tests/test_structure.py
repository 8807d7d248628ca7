"""Crystal structures: shells against closed forms, model files read back, and bad CIFs.

Cell constants from memory: MnO a = 4.445 Å (rock salt; Wyckoff, Crystal Structures, 1963);
KCuF3 a = 5.8569, c = 7.8487, x = 0.2276 in I4/mcm (Buttner, Maslen and Spadaccini, Acta Cryst. B
46, 131 (1990)).
"""

from math import pi, sqrt

import numpy as np
import pytest
from typer.testing import CliRunner

import thermo
from thermo.cli import app
from thermo.errors import FileFormatError, ModelError
from thermo.structure import find_shells, model_text, read_ion, read_repeat, read_structure

CELL = """data_{name}
_cell_length_a {a}
_cell_length_b {a}
_cell_length_c {c}
_cell_angle_alpha 90
_cell_angle_beta 90
_cell_angle_gamma 90
_symmetry_space_group_name_H-M '{group}'
_chemical_formula_sum '{formula}'
_cell_formula_units_Z 4
loop_
_atom_site_label
_atom_site_type_symbol
_atom_site_fract_x
_atom_site_fract_y
_atom_site_fract_z
_atom_site_occupancy
"""
A = 4.445
MNO = CELL.format(name="MnO", a=A, c=A, group="F m -3 m", formula="Mn O") + (
    "Mn1 Mn2+ 0 0 0 1\nO1 O2- 0.5 0.5 0.5 1\n"
)
KCUF3 = CELL.format(name="KCuF3", a="5.8569(2)", c=7.8487, group="I 4/m c m", formula="Cu F3 K") + (
    "Cu1 Cu2+ 0 0.5 0 1\nK1 K1+ 0 0 0.25 1\nF1 F1- 0 0.5 0.25 1\nF2 F1- 0.2276 0.7276 0 1\n"
)


@pytest.fixture
def crystal(tmp_path):
    def read(text, *ions):
        path = tmp_path / "crystal.cif"
        path.write_text(text)
        return read_structure(path, [read_ion(ion) for ion in ions or ("Mn2+",)])

    return read


def test_shells_of_rock_salt_are_those_of_the_fcc_lattice(crystal):
    shells = find_shells(crystal(MNO), 1.01 * A * sqrt(2.5))
    # fcc: 12 at a/√2, 6 at a, 24 at a√(3/2), 12 at a√2, 24 at a√(5/2)
    expected = [(12, 0.5), (6, 1.0), (24, 1.5), (12, 2.0), (24, 2.5)]
    assert [s.neighbours for s in shells] == [(("Mn1", count),) for count, _ in expected]
    np.testing.assert_allclose([s.distance for s in shells], [A * sqrt(x) for _, x in expected])
    assert [len(s.links) for s in shells] == [4 * count // 2 for count, _ in expected]
    # the two oxygens of an edge at 90°, the one between second neighbours at 180°
    assert [(b.label, b.angle) for b in shells[0].bridges] == [("O1", 90.0)] * 2
    assert [(b.label, b.angle) for b in shells[1].bridges] == [("O1", 180.0)]
    assert shells[3].bridges == ()


def test_shells_of_a_tetragonal_perovskite(crystal):
    first, second, *_ = find_shells(crystal(KCUF3, "Cu2+"), 5.0)
    assert first.distance == pytest.approx(7.8487 / 2, rel=1e-12)
    assert second.distance == pytest.approx(5.8569 / sqrt(2), rel=1e-9)
    assert [first.neighbours, second.neighbours] == [(("Cu1", 2),), (("Cu1", 4),)]
    assert [first.bridges[0].label, second.bridges[0].label] == ["F1", "F2"]


def test_neighbours_within_a_distance_against_a_plain_count(crystal):
    """Also for an oblique cell without symmetry: a list of all images, no more."""
    text = MNO.replace("alpha 90", "alpha 77").replace("gamma 90", "gamma 113")
    text = text.replace(f"length_b {A}", "length_b 5.3").replace("'F m -3 m'", "'P 1'")
    text = text.replace("Mn O", "Mn2 O").replace("Z 4", "Z 1") + "Mn2 Mn2+ 0.31 0.17 0.42 1\n"
    shells = find_shells(crystal(text), 9.0)
    alpha, gamma = 77 * pi / 180, 113 * pi / 180
    metric = np.array([
        [A * A, A * 5.3 * np.cos(gamma), 0],
        [A * 5.3 * np.cos(gamma), 5.3**2, 5.3 * A * np.cos(alpha)],
        [0, 5.3 * A * np.cos(alpha), A * A],
    ])  # fmt: skip
    places = [np.zeros(3), np.array([0.31, 0.17, 0.42])]
    found = []
    for a in places:
        for b in places:
            for cell in np.ndindex(11, 11, 11):
                step = b - a + np.array(cell) - 5
                length = sqrt(step @ metric @ step)
                if 1e-9 < length <= 9.0:
                    found.append(length)
    mine = sorted(s.distance for s in shells for _ in s.links for _end in "ab")
    np.testing.assert_allclose(mine, sorted(found), rtol=1e-8)


def test_rounded_coordinates_fall_on_their_special_places(crystal):
    text = CELL.format(name="x", a=5.0, c=6.0, group="P 63/m m c", formula="Mn").replace(
        "gamma 90", "gamma 120"
    )
    found = crystal(text.replace("Z 4", "Z 2") + "Mn1 Mn2+ 0.3333 0.6667 0.25 1\n")
    places = sorted(atom.place for atom in found.atoms)
    np.testing.assert_allclose(places, [[1 / 3, 2 / 3, 1 / 4], [2 / 3, 1 / 3, 3 / 4]], atol=1e-12)


def test_the_model_file_is_read_back_with_the_expected_bonds(crystal):
    found = crystal(KCUF3, "Cu2+")
    text, notes = model_text(found, find_shells(found, 4.2), read_repeat("1,1,0; -1,1,0; 0,0,1"))
    model = thermo.model.read_model_text(text)
    assert len(model.sites) == 8
    assert {site.spin for site in model.sites} == {0.5}
    names = [bond.coupling for bond in model.bonds]
    assert {name: names.count(name) for name in model.couplings} == {"J1": 8, "J2": 16}
    ends = [end for b in model.bonds if b.coupling == "J2" for end in (b.i, b.j)]
    assert {ends.count(k) for k in range(8)} == {4}
    assert model.ions_per_formula == 1
    assert any("several images" in note for note in notes)  # two cells along c only


def test_solving_a_written_model_gives_that_of_the_lattice_by_name(crystal):
    """The chain along c of KCuF3, four of them in one cell, against a ring of four."""
    found = crystal(KCUF3, "Cu2+")
    text, _ = model_text(found, find_shells(found, 4.0), read_repeat("1,1,2"))
    model = thermo.read_model(thermo_mapping(text.replace("J1 = 0.0", "J1 = 10.0")))
    ring = thermo.read_model({
        "format": 1, "energy_unit": "K", "bond_term": "+J S.S", "couplings": {"J": 10.0},
        "lattice": {"name": "chain", "size": [4], "spin": 0.5, "couplings": {"nearest": "J"}},
    })  # fmt: skip
    mine, other = (
        thermo.curves(thermo.solve(m), [2.0, 10.0])["susceptibility"].values for m in (model, ring)
    )
    np.testing.assert_allclose(mine, other, rtol=1e-10)


def thermo_mapping(text):
    import tomllib

    return tomllib.loads(text)


def test_a_pair_that_meets_its_own_image_is_refused(crystal):
    found = crystal(MNO)
    with pytest.raises(ModelError, match=r"too short for J2 \(4.4450 Å\).*repeat it more along"):
        model_text(found, find_shells(found, 4.5), read_repeat("1,1,1"))


@pytest.mark.parametrize(
    ("change", "message"),
    [
        (("Mn2+ 0 0 0 1", "Mn2+ 0 0 0 0.9"), "fills 0.9 of its place"),
        (("_cell_length_a 4.445\n", ""), "_cell_length_a is missing"),
        (("_cell_length_a 4.445", "_cell_length_a ?"), r"_cell_length_a is \?"),
        (("_symmetry_space_group_name_H-M 'F m -3 m'\n", ""), "states no symmetry operations"),
        (("F m -3 m", "F q -9"), "'F q -9' is unknown"),
        (("O1 O2- 0.5 0.5 0.5 1", "Fe1 Fe2+ 0 0 0.01 1"), "on one place"),
        (("Mn1 Mn2+ 0 0 0", "Mn1 Mn2+ 0 ? 0"), "has no coordinates"),
        (("'Mn O'", "'Mn2 O'"), "has 4 Mn where its formula tells 8"),
        (("Mn2+", "Mn3+"), "there is no ion 'Mn2[+]'.*Mn3[+], O2-"),
        (("Mn1 Mn2+", "Zz1 Zz2+"), "of no known element"),
    ],
)
def test_a_structure_of_no_use_is_told_in_one_sentence(crystal, change, message):
    assert change[0] in MNO
    with pytest.raises(ModelError, match=message) as caught:
        crystal(MNO.replace(*change))
    assert "\n" not in str(caught.value)


@pytest.mark.parametrize("length", range(0, len(MNO) - 24, 23))
def test_a_cif_cut_anywhere_is_refused(crystal, length):
    with pytest.raises((FileFormatError, ModelError)) as caught:
        crystal(MNO[:length])
    assert "\n" not in str(caught.value)


def test_a_cif_cut_in_its_last_line_is_told(crystal):
    assert any("may have been cut" in note for note in crystal(MNO[:-1]).notes)


@pytest.mark.parametrize(
    ("text", "spin"),
    [("Cu2+", 0.5), ("V4+", 0.5), ("Ni2+", 1), ("Cr3+", 1.5), ("Mn3+", 2), ("Fe3+", 2.5),
     ("Gd3+", 3.5), ("Ru3+=1/2", 0.5), ("Cu1=1/2", 0.5)],
)  # fmt: skip
def test_spins_of_free_ions(text, spin):
    """Hund's first rule (practice)."""
    assert read_ion(text).spin == spin


@pytest.mark.parametrize("text", ["", "Q2+", "Cu", "Ru3+", "Zn2+", "Cu2+=0", "Cu2+=1/3", "Cu2+=x"])
def test_ions_of_no_use(text):
    with pytest.raises(ModelError):
        read_ion(text)


@pytest.mark.parametrize("text", ["2", "2,2", "0,1,1", "a,b,c", "1,0,0;0,1,0", "1,0,0;1,0,0;0,0,1"])
def test_supercells_of_no_use(text):
    with pytest.raises(ModelError):
        read_repeat(text)


def test_the_command_lists_and_writes(tmp_path):
    cif, model = tmp_path / "k.cif", tmp_path / "k.toml"
    cif.write_text(KCUF3)
    done = CliRunner().invoke(
        app, ["structure", str(cif), "--ion", "Cu2+", "--within", "4.2", "--repeat", "1,1,2",
              "-o", str(model)],
    )  # fmt: skip
    assert done.exit_code == 0, done.output
    assert "J1   3.9244 Å; 2 of each Cu1; through F1 180.0°" in done.stdout
    assert set(thermo.read_model(model).couplings) == {"J1", "J2"}
    assert [p.name for p in sorted(tmp_path.iterdir())] == ["k.cif", "k.toml"]
