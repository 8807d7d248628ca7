"""Fits of sampled spectra: common random vectors make χ² smooth, and the answer the exact one
within what the vectors leave open."""

from __future__ import annotations

import numpy as np
import pytest

from tests.fitting import write_csv
from thermo import errors
from thermo.fit import fit, read_study
from thermo.fit.forward import make_forward, set_points
from thermo.fit.sampled_levels import SampledLevels
from thermo.spectrum.full import FullSolver
from thermo.spectrum.settings import Settings

T = np.geomspace(15.0, 200.0, 25)
MODEL = {
    "format": 1, "title": "ring of eight", "energy_unit": "K", "bond_term": "+J S.S",
    "couplings": {"J1": 30.0, "J2": 12.0},
    "lattice": {"name": "chain", "size": [8], "spin": 0.5,
                "couplings": {"nearest": "J1", "next": "J2"}},
}  # fmt: skip
TRUE = np.array([36.0, 9.0])
# Poor on purpose: nothing exact, few traces, so that there is noise to see.
POOR = Settings(vectors=4, steps=12, full_below=0, exact_states=0, trace_order=4)


@pytest.fixture
def study(tmp_path):
    write_csv(tmp_path / "chi.csv", "T,v", T, 0 * T + 1e-3)
    mapping = {
        "format": 1, "title": "eight", "model": MODEL, "window": "off",
        "data": [{"name": "chi", "file": str(tmp_path / "chi.csv"), "quantity": "susceptibility",
                  "units": "emu/mol", "relative_uncertainty": 0.01,
                  "columns": {"temperature": "T", "value": "v"}}],
        "parameters": {"J1": {}, "J2": {}},
    }  # fmt: skip
    found = read_study(mapping)
    forward = make_forward(found, FullSolver(found.model))
    (data,) = found.sets
    chi = forward.predict(set_points(data), found.parameters.values(TRUE)) / data.to_si
    write_csv(tmp_path / "chi.csv", "T,v", T, chi)
    return read_study(mapping)


def test_common_vectors_let_the_minimiser_settle(study):
    exact = fit(study)
    np.testing.assert_allclose([exact[n].value for n in ("J1", "J2")], TRUE, rtol=1e-7)
    found = []
    for seed in (1, 2):
        solver = SampledLevels(study.model, Settings(**{**vars(POOR), "seed": seed}))
        result = fit(study, solver=solver, profiles="none")
        assert result.converged
        again = fit(study, solver=solver, profiles="none")
        assert again["J1"].value == result["J1"].value
        found.append(np.array([result[n].value for n in ("J1", "J2")]))
        # What the vectors' noise in χ does to J, by the slopes of the exact fit.
        (data,), values = study.sets, study.parameters.values(TRUE)
        points = set_points(data)
        noise = make_forward(study, solver).predict(points, values) - data.value
        slopes = make_forward(study, FullSolver(study.model)).evaluate(points, values).slopes
        weighted = slopes / data.uncertainty[:, None]
        shift = -np.linalg.lstsq(weighted, noise / data.uncertainty)[0]
        np.testing.assert_allclose(found[-1] - TRUE, shift, rtol=0.3, atol=0.05)
        assert np.abs(shift).max() > 0.02
    assert np.abs(found[0] - found[1]).max() > 0.02  # other vectors, another shift


def test_without_memory_for_eigenvectors_slopes_are_differences_and_told(study, monkeypatch):
    exact = fit(study)
    monkeypatch.setattr(FullSolver, "can_slope", False)
    result = fit(study)
    assert any("exceed the memory limit" in c for c in result.cautions)
    assert result["J1"].value == pytest.approx(exact["J1"].value, rel=1e-7)
    assert result.n_solves > 2 * exact.n_solves


def test_by_default_a_sampled_fit_is_pinned_to_the_exact_one(study):
    result = fit(study, method="sampled", profiles="none")
    np.testing.assert_allclose([result[n].value for n in ("J1", "J2")], TRUE, rtol=1e-4)
    assert any("levels are sampled" in c for c in result.cautions)
    assert result.to_dataset().attrs["method"] == "sampled"
    with pytest.raises(errors.RangeError, match="method"):
        fit(study, method="lanczos")
