"""The window of trust: where the size of a periodic cluster shows, and what a fit does about it.

The numbers are invented; clusters larger than the one fitted stand for the endless lattice.
"""

from __future__ import annotations

import math

import numpy as np
import pytest

import thermo
from tests.fitting import write_csv, write_dimer
from tests.rivals import network
from thermo.errors import StudyError
from thermo.fit import fit, read_study
from thermo.fit.window import lower_edges, shifts
from thermo.units import CHI_SI_PER_EMU

T = np.geomspace(4.0, 250.0, 50)
TRUE = {"J": 60.0, "g": 2.1}
ONE_PARAMETER = np.ones((5, 1))


# ---------------------------------------------------------------- the edge as a piece of algebra


def edge(deviation, slopes=None):
    t = np.arange(1.0, 1.0 + len(deviation))
    J = np.zeros((len(t), 1)) if slopes is None else np.asarray(slopes, dtype=float)
    return lower_edges([t], [np.asarray(deviation, dtype=float)], [J])[0]


def test_the_edge_lies_above_the_last_point_that_disagrees():
    assert edge([2, 0.1, 1.5, 0.2, 0.1]) == 4
    assert edge([0.9, 0.2, -0.9, 0.2, 0.1]) == 0
    assert edge([0, 0, 0, 0, -1.01]) == math.inf


def test_differences_far_below_the_errors_still_add_up():
    """Of n points with slope 1 the mean is off by the mean difference d, its error is 1/√n."""
    assert edge(np.full(5, 0.4), ONE_PARAMETER) == 0  # 0.4·√5 = 0.89
    assert edge(np.full(5, 0.5), ONE_PARAMETER) == 2  # 0.5·√5 = 1.12, 0.5·√4 = 1
    # Without a parameter that could move, they do not.
    assert edge(np.full(5, 0.9)) == 0


def test_the_set_that_deviates_most_at_its_coldest_point_yields_first():
    t = np.arange(1.0, 6.0)
    first, second = lower_edges(
        [t, t],
        [np.full(5, 0.2), np.array([0.95, 0.95, 0.95, 0, 0])],
        [ONE_PARAMETER, ONE_PARAMETER],
    )
    assert first == 0
    assert second > 0


def test_points_of_one_temperature_stay_together():
    t = np.array([5.0, 5.0, 5.0])
    assert lower_edges([t], [np.array([0.1, 0.1, 1.2])], [np.zeros((3, 1))]) == [math.inf]


def test_shifts_are_those_of_a_linear_fit():
    """Against the normal equations: fit d as if it were data, and divide by the errors."""
    rng = np.random.default_rng(1)
    J, d = rng.standard_normal((30, 3)) * [1, 1e-5, 1e4], rng.standard_normal(30)
    inverse = np.linalg.inv(J.T @ J)
    expected = inverse @ (J.T @ d) / np.sqrt(np.diag(inverse))
    np.testing.assert_allclose(shifts(J, d), expected, rtol=1e-9)
    # A parameter nothing depends on is not moved, and too few points say nothing.
    np.testing.assert_allclose(shifts(np.c_[J, np.zeros(30)], d)[:3], expected, rtol=1e-9)
    assert shifts(np.c_[J, np.zeros(30)], d)[3] == 0
    assert np.all(np.isinf(shifts(J[:3], d[:3])))


# ---------------------------------------------------------------- fits


def ring_chi(size):
    curves = thermo.curves(thermo.solve(thermo.read_model(network("uniform chain", size))), T)
    return curves["susceptibility"].values[:, 0] / CHI_SI_PER_EMU


@pytest.fixture(scope="module")
def long_chain():
    return ring_chi(16)


def study(folder, chi, error, size=8, **more):
    write_csv(folder / "chi.csv", "T,chi,error", T, chi, error)
    data = {
        "name": "chi",
        "file": str(folder / "chi.csv"),
        "quantity": "susceptibility",
        "units": "emu/mol",
        "columns": {"temperature": "T", "value": "chi", "uncertainty": "error"},
    }
    for key in ("range",):
        if key in more:
            data[key] = more.pop(key)
    model = network("uniform chain", size)
    model |= more.pop("model", {})
    return {
        "format": 1,
        "model": model,
        "data": [data],
        "parameters": {"J": {"start": 50.0, "lower": 1.0, "upper": 200.0}, "g": {"lower": 1.5}},
        **more,
    }


def test_above_the_edge_a_small_cluster_gives_the_constants_of_a_long_one(tmp_path, long_chain):
    error = 0.003 * long_chain
    result = fit(study(tmp_path, long_chain, error))
    window = result.window
    assert window.status == "checked"
    assert (window.sites, window.other) == (8, 10)
    assert 0 < window.lower["chi"] < 45
    assert window.cut["chi"] == result.sets[0].data.temperature.min()
    assert result.n_points == len(T) - result.n_masked
    assert result.n_masked == window.excluded["chi"].n_points > 5
    # No noise was added, so what is left is the size's: below one standard error.
    for name, true in TRUE.items():
        assert abs(result[name].value - true) < result[name].standard_error, name
    assert any("were left out" in caution and "10 sites" in caution for caution in result.cautions)
    # All points together spoil the fit.
    spoilt = fit(study(tmp_path, long_chain, error, window="off"))
    assert spoilt.n_points == len(T)
    assert max(abs(spoilt[n].value - t) / spoilt[n].standard_error for n, t in TRUE.items()) > 5
    assert spoilt.window.status == "off"


def test_the_edge_follows_the_error_of_the_data(tmp_path, long_chain):
    edges = [
        fit(study(tmp_path, long_chain, share * long_chain)).window.lower["chi"]
        for share in (0.0005, 0.005, 0.05)
    ]
    assert edges[0] > edges[1] > edges[2]


def test_a_stated_range_and_tell_keep_the_points_and_say_so(tmp_path, long_chain):
    error = 0.003 * long_chain
    for more in ({"range": [1.0, 500.0]}, {"window": "tell"}):
        result = fit(study(tmp_path, long_chain, error, **more))
        assert result.n_points == len(T)
        assert result.window.lower["chi"] > 0
        assert result.window.cut == {"chi": 0.0}
        assert any("but were kept as the study asks" in c for c in result.cautions)


@pytest.mark.parametrize(
    ("model", "status", "edge"),
    [
        ({"finite": True}, "finite", 0.0),
        ({"lattice": {**network("uniform chain", 8)["lattice"], "boundary": "open"}}, "open", 0.0),
    ],
)
def test_what_is_no_lattice_has_no_edge(tmp_path, long_chain, model, status, edge):
    result = fit(study(tmp_path, long_chain, 0.003 * long_chain, model=model))
    assert result.window.status == status
    assert result.window.lower["chi"] == edge
    assert result.n_points == len(T)


def test_a_molecule_given_site_by_site_is_taken_as_it_is(tmp_path):
    result = fit(write_dimer(tmp_path, noise=1.0))
    assert result.window.status == "listed"
    assert "taken as all there is" in str(result.window)


def test_a_lattice_without_another_size_is_told(tmp_path, long_chain):
    """A 2×2 kagome has no other cluster to compare with that is small enough."""
    kagome = {"name": "kagome", "size": [2, 2], "spin": 0.5, "couplings": {"nearest": "J"}}
    result = fit(study(tmp_path, long_chain, 0.2 * long_chain, model={"lattice": kagome}))
    assert result.window.status == "unknown"
    assert math.isnan(result.window.lower["chi"])
    assert any("is not known" in caution for caution in result.cautions)


def test_all_data_outside_the_window_is_one_sentence(tmp_path, long_chain):
    cold = study(tmp_path, long_chain, 1e-3 * long_chain)
    few = T < 12
    write_csv(tmp_path / "chi.csv", "T,chi,error", T[few], long_chain[few], 1e-3 * long_chain[few])
    with pytest.raises(StudyError, match="all data lie outside the window of trust") as fault:
        fit(cold)
    assert "8-site" in str(fault.value)
    assert "finite = true" in str(fault.value)
    assert "\n" not in str(fault.value)


def test_without_uncertainties_the_scatter_stands_in(tmp_path, long_chain):
    rng = np.random.default_rng(2)
    noisy = long_chain * (1 + 0.01 * rng.standard_normal(len(T)))
    content = study(tmp_path, noisy, 0.01 * long_chain)
    del content["data"][0]["columns"]["uncertainty"]
    result = fit(content)
    assert result.error_basis == "scatter"
    assert result.window.status == "checked"
    assert 0 < result.window.cut["chi"] < 30


def test_the_dataset_holds_the_window_and_the_points_left_out(tmp_path, long_chain):
    result = fit(study(tmp_path, long_chain, 0.003 * long_chain))
    thermo.write(result.to_dataset(), tmp_path / "fit.nc")
    found = thermo.read(tmp_path / "fit.nc", "fit")
    assert float(found["dataset_window"][0]) == result.window.lower["chi"]
    assert found.sizes["excluded_point"] == result.window.excluded["chi"].n_points
    assert float(found["excluded_temperature"].max()) < float(found["temperature"].min())
    assert found.attrs["window"] == str(result.window)
    assert len(found.attrs["model_digest"]) == 64
    thermo.plot(found, tmp_path / "fit.png")


def test_a_second_fit_of_a_study_is_the_same(tmp_path, long_chain):
    content = study(tmp_path, long_chain, 0.003 * long_chain)
    first, second = fit(read_study(content)), fit(read_study(content))
    assert first["J"].value == second["J"].value
    assert first["J"].start == 50.0


def test_a_sampled_fit_has_its_window_too(tmp_path, long_chain):
    content = study(tmp_path, long_chain, 0.003 * long_chain)
    full, sampled = fit(content), fit(content, method="sampled", profiles="none")
    assert sampled.window.status == "checked"
    # So small a cluster is sampled without noise, its states all being exact ones.
    assert sampled.window.cut == full.window.cut
    assert sampled["J"].value == pytest.approx(full["J"].value, rel=1e-5)


def test_the_command_tells_of_points_left_out_and_of_none_left(partita, tmp_path, long_chain):
    head = 'format = 1\nenergy_unit = "K"\nbond_term = "+J S.S"\ncouplings = { J = 60.0 }\n'
    ring = '[lattice]\nname = "chain"\nsize = [8]\nspin = 0.5\ng = 2.1\n'
    ring += 'couplings = { nearest = "J" }\n'
    (tmp_path / "ring.toml").write_text(head + ring)
    (tmp_path / "study.toml").write_text(
        'format = 1\nmodel = "ring.toml"\n[[data]]\nname = "chi"\nfile = "chi.csv"\n'
        'quantity = "susceptibility"\nunits = "emu/mol"\n'
        'columns = { temperature = "T", value = "chi", uncertainty = "error" }\n'
        "[parameters]\nJ = { start = 50.0, lower = 1.0, upper = 200.0 }\n"
    )
    for few, code in ((T > 0, 0), (T < 12, 3)):
        chi = long_chain[few]
        write_csv(tmp_path / "chi.csv", "T,chi,error", T[few], chi, 0.002 * chi)
        done = partita("fit", "study.toml", "-o", f"{code}.nc")
        assert done.returncode == code, done.stderr
        assert ("were left out" if code == 0 else "outside the window of trust") in done.stderr
        assert (tmp_path / f"{code}.nc").exists() == (code == 0)
    assert len(done.stderr.strip().splitlines()) == 1
    # The same numbers from a molecule, which has no other size, are fitted whole.
    (tmp_path / "ring.toml").write_text("finite = true\n" + head + ring)
    assert partita("fit", "study.toml", "-o", "molecule.nc").returncode == 0


def test_a_busy_machine_chooses_the_same_other_cluster(tmp_path, long_chain, monkeypatch):
    from thermo.fit.trust import find_relative

    found = read_study(study(tmp_path, long_chain, 0.003 * long_chain))
    quick = find_relative(found)
    monkeypatch.setattr("thermo.spectrum.planning._speed_factor", lambda: 1e6)
    slow = find_relative(found)
    assert len(quick.model.sites) == len(slow.model.sites) == 10
