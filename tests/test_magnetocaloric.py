"""What a change of field does: closed forms, sum rules, and a plain twin in 40 digits or dense."""

import mpmath
import numpy as np
import pytest
from typer.testing import CliRunner

import thermo
from tests import naive
from thermo import units
from thermo.cli import app
from thermo.ensemble.magnetocaloric import magnetocaloric
from thermo.errors import RangeError, UnavailableError, UnitsError


def model(spins, bonds=(), unit="1", couplings=None, **more):
    return thermo.read_model({
        "format": 1, "energy_unit": unit, "bond_term": "+J S.S",
        "couplings": couplings or {"J": 1.0},
        "site": [{"name": str(k), "spin": s, "g": 2.0} for k, s in enumerate(spins)],
        "bond": [{"sites": [str(a), str(b)], "coupling": "J", "form": f} for a, b, f in bonds],
        **more,
    })  # fmt: skip


def reduced(spins, bonds, t, b, **more):
    levels = thermo.solve(model(spins, bonds), method="full")
    return magnetocaloric(levels, t, b, "reduced", g=1.0, **more)


def values(dataset, name):
    return dataset[name].values


@pytest.mark.parametrize("spin", [0.5, 1.0, 2.5])
def test_free_spins_have_isentropes_of_constant_t_over_b(spin):
    """Exact: S of a paramagnet depends on B/T alone, so T/B is constant and Γ = 1/B."""
    t, b = np.array([0.3, 1.0, 4.0]), np.array([0.01, 0.5, 1.0, 3.0])
    found = reduced([spin] * 2, [], t, b, start=1.0)
    np.testing.assert_allclose(
        values(found, "isentrope_temperature"), t[:, None] * b[None, :], rtol=1e-9
    )
    np.testing.assert_allclose(
        values(found, "gruneisen_ratio"), np.broadcast_to(1 / b, (3, 4)), rtol=1e-9
    )
    change = values(found, "adiabatic_temperature_change")
    np.testing.assert_allclose(change, t[:, None] * (b - 1), rtol=1e-8, atol=1e-14)


@pytest.mark.parametrize("spin", [0.5, 1.0, 2.5])
def test_saturation_takes_all_the_entropy_of_free_spins(spin):
    """ΔS = −R ln(2S + 1) per mole of ions."""
    levels = thermo.solve(model([spin] * 2, unit="K"), method="full")
    found = magnetocaloric(levels, [1.0], [0.0, 1000.0])
    expected = -units.GAS_CONSTANT * np.log(2 * spin + 1)
    np.testing.assert_allclose(values(found, "entropy_change")[0], [0, expected], rtol=1e-12)
    assert found["entropy_change"].attrs["units"] == "J mol-1 K-1"


def test_no_temperature_keeps_less_entropy_than_the_ground_level():
    """From a field down to none, free spins have ln 2 at any temperature: nothing is reached."""
    found = reduced([0.5], [], [1.0], [0.0, 1.0], start=1.0)
    assert np.isnan(values(found, "isentrope_temperature")[0, 0])
    assert values(found, "isentrope_temperature")[0, 1] == 1.0


def dimer(t, b):
    """S, M and C of Z = 1 + e^{−1/T}(1 + 2 cosh(b/T)), by 40-digit derivatives of T ln Z."""
    with mpmath.workdps(40):

        def log_z(t, b):
            return mpmath.log(1 + mpmath.exp(-1 / t) * (1 + 2 * mpmath.cosh(b / t)))

        def free(t, b):
            return -t * log_z(t, b)

        t, b = mpmath.mpf(t), mpmath.mpf(b)
        entropy = -mpmath.diff(free, (t, b), (1, 0))
        slope = -mpmath.diff(free, (t, b), (1, 1))
        heat = -t * mpmath.diff(free, (t, b), (2, 0))
        return [float(x) for x in (entropy, slope, heat)]


def test_dimer_in_closed_form():
    """Bleaney and Bowers (1952): levels 0 and J − bM, J = 1."""
    t, b = np.array([0.1, 0.4, 2.0]), np.array([1e-4, 0.3, 1.0, 2.0])
    found = reduced([0.5, 0.5], [(0, 1, "isotropic")], t, b)
    for i, j in np.ndindex(3, 4):
        entropy, slope, heat = dimer(t[i], b[j])
        start = dimer(t[i], 0)[0]
        change = 2 * values(found, "entropy_change")[i, j]
        assert change == pytest.approx(entropy - start, rel=1e-9, abs=1e-13)
        assert 2 * values(found, "magnetization_slope")[i, j] == pytest.approx(slope, rel=1e-10)
        assert values(found, "gruneisen_ratio")[i, j] == pytest.approx(-slope / heat, rel=1e-9)
        reached = values(found, "isentrope_temperature")[i, j]
        if b[j] == 1.0 and start < np.log(2):  # the levels cross: two states at T = 0
            assert np.isnan(reached)
        else:
            assert dimer(reached, b[j])[0] == pytest.approx(start, rel=1e-9)


def test_dimer_cools_towards_its_level_crossing_and_warms_beyond():
    found = reduced([0.5, 0.5], [(0, 1, "isotropic")], [0.1], [0.9, 1.1], start=0.9)
    below, above = values(found, "gruneisen_ratio")[0]
    assert below < 0 < above


@pytest.mark.parametrize("seed", range(6))
def test_against_the_twin_on_random_clusters(seed):
    random = np.random.default_rng(seed)
    spins = random.choice([0.5, 1.0, 1.5], 4).tolist()
    forms = ["isotropic", "xy", "ising"] if seed % 2 else ["isotropic"]
    bonds = [(a, b, str(random.choice(forms))) for a in range(4) for b in range(a)]
    tensors = {"isotropic": naive.ISOTROPIC, "xy": naive.XY, "ising": naive.ISING}
    t, b = np.array([0.2, 1.0, 5.0]), np.array([-0.7, 0.0, 0.4, 2.0])
    found = reduced(spins, bonds, t, b, start=0.4)
    h = naive.hamiltonian(spins, [(i, j, tensors[f]) for i, j, f in bonds])
    sz = naive.magnetic_numbers(spins)

    def averages(temperature, field):
        energy, vectors = np.linalg.eigh(h - field * np.diag(sz))
        p = np.exp(-(energy - energy[0]) / temperature)
        p = p / p.sum()
        moment = (abs(vectors) ** 2 * sz[:, None]).sum(axis=0)
        entropy = -(p[p > 0] * np.log(p[p > 0])).sum()
        slope = ((p * energy * moment).sum() - (p @ energy) * (p @ moment)) / temperature**2
        heat = ((p * energy**2).sum() - (p @ energy) ** 2) / temperature**2
        return entropy, slope, heat

    for i, j in np.ndindex(3, 4):
        entropy, slope, heat = averages(t[i], b[j])
        start = averages(t[i], 0.4)[0]
        assert 4 * values(found, "entropy_change")[i, j] == pytest.approx(
            entropy - start, abs=1e-10
        )
        assert 4 * values(found, "magnetization_slope")[i, j] == pytest.approx(slope, abs=1e-9)
        ratio = values(found, "gruneisen_ratio")[i, j]
        assert ratio == pytest.approx(-slope / heat, rel=1e-8, abs=1e-9)
        reached = values(found, "isentrope_temperature")[i, j]
        if np.isfinite(reached):
            assert averages(reached, b[j])[0] == pytest.approx(start, abs=1e-10)


def test_slopes_add_up_to_the_entropy_between_two_fields():
    """Maxwell: ∫ (∂M/∂T) dB = ΔS, by Gauss and Legendre, in molar SI."""
    bonds = [(0, 1, "isotropic"), (1, 2, "isotropic")]
    levels = thermo.solve(model([0.5] * 3, bonds, "K", {"J": 7.0}), method="full")
    x, w = np.polynomial.legendre.leggauss(40)
    fields = 2.0 + 3.0 * (x + 1)
    slopes = magnetocaloric(levels, [2.0, 5.0], fields, start=2.0)["magnetization_slope"].values
    whole = magnetocaloric(levels, [2.0, 5.0], [8.0], start=2.0)["entropy_change"].values
    np.testing.assert_allclose(slopes @ (3.0 * w), whole[:, 0], rtol=1e-6)


def test_the_ratio_is_the_slope_of_an_isentrope_in_tesla():
    levels = thermo.solve(model([1.0] * 2, [(0, 1, "isotropic")], "meV"), method="full")
    b, step = 3.0, 1e-4
    fields = [b - step, b, b + step]
    found = magnetocaloric(levels, [4.0, 20.0], fields, start=b)
    low, here, high = found["isentrope_temperature"].values.T
    slope = (high - low) / (2 * step) / here
    np.testing.assert_allclose(slope, found["gruneisen_ratio"].values[:, 1], rtol=1e-6)
    assert found["gruneisen_ratio"].attrs["units"] == "T-1"


def test_a_file_of_it_is_read_back(tmp_path):
    levels = thermo.solve(model([0.5] * 2, [(0, 1, "isotropic")], "K"), method="full")
    si, cgs = (magnetocaloric(levels, [1.0], [0.0, 1.0], u) for u in ("molar-si", "molar-cgs"))
    np.testing.assert_allclose(
        values(cgs, "magnetization_slope"), 1e3 * values(si, "magnetization_slope"), rtol=1e-14
    )
    for found in (si, cgs):
        thermo.write(found, tmp_path / "m.nc")
        back = thermo.read(tmp_path / "m.nc")
        for name in si.data_vars:
            np.testing.assert_allclose(back[name].values, si[name].values, rtol=1e-14)


def test_what_cannot_be_had_is_told():
    levels = thermo.solve(model([0.5]), method="full")
    with pytest.raises(UnitsError, match="dimensionless"):
        magnetocaloric(levels, [1.0], [1.0])
    with pytest.raises(RangeError, match="one field"):
        magnetocaloric(levels, [1.0], [1.0], "reduced", start=[0.0, 1.0])
    with pytest.raises(RangeError, match="g = 0"):
        magnetocaloric(levels, [1.0], [1.0], "reduced", g=0.0)
    twisted = model([1.0], couplings={"E": 1.0},
                    ion=[{"sites": ["0"], "coupling": "E", "form": "rhombic"}])  # fmt: skip
    with pytest.raises(UnavailableError, match="does not conserve M"):
        magnetocaloric(thermo.solve(twisted, method="full"), [1.0], [1.0], "reduced")


def test_sampled_levels_say_that_errors_are_missing():
    ring = thermo.read_model({
        "format": 1, "energy_unit": "K", "bond_term": "+J S.S", "couplings": {"J": 1.0},
        "lattice": {"name": "chain", "size": [12], "spin": 0.5, "couplings": {"nearest": "J"}},
    })  # fmt: skip
    levels = thermo.solve(ring, method="sampled", full_below=10)
    assert "error_unavailable" in magnetocaloric(levels, [1.0], [1.0]).attrs


def test_the_command_writes_a_table_and_a_file(tmp_path):
    levels, target = tmp_path / "levels.nc", tmp_path / "m.nc"
    thermo.write(thermo.solve(model([0.5] * 2, unit="K"), method="full"), levels)
    words = ["caloric", str(levels), "-b", "1,2", "-t", "3", "--from", "1"]
    done = CliRunner().invoke(app, words)
    assert done.exit_code == 0, done.output
    header, *rows = done.stdout.splitlines()[-3:]
    assert header.startswith("temperature (K),field (T),entropy_change (J mol-1 K-1)")
    column = header.split(",").index("isentrope_temperature (K)")
    assert [float(row.split(",")[column]) for row in rows] == pytest.approx([3, 6])
    assert CliRunner().invoke(app, [*words, "-o", str(target)]).exit_code == 0
    assert thermo.read(target).attrs["start_field"] == 1.0
