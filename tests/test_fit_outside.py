"""Fits against the outside: an independent minimiser, and constants from the literature."""

from __future__ import annotations

import numpy as np
import pytest
from iminuit import Minuit

from tests.fitting import CURIE, MODEL, write_csv
from tests.test_fit_surroundings import T, data, model_of, study_of
from thermo.fit import fit, read_study
from thermo.fit.forward import make_forward, set_points
from thermo.spectrum.full import FullSolver
from thermo.units import convert_energy


def test_the_minimum_and_its_covariance_are_minuits(tmp_path):
    """Two couplings, ties, priors, a scale and impurities; Minuit sees χ² only, written out here,
    and takes its own differences. Noise is small, so that its Hessian is JᵀJ."""
    parameters = {
        "J1": {"start": -10.0}, "J2": {"tied": "-0.4*J1 + x"}, "x": {"start": 0.3},
        "g": {"start": 2.1, "prior": [2.08, 0.02]}, "chi0": {"start": 1e-4},
        "paramagnetic_fraction": {"start": 0.03},
    }  # fmt: skip
    rng = np.random.default_rng(8)
    sets = [data(tmp_path, name="chi", scale_error=0.03), data(tmp_path, "specific_heat")]
    study = read_study(study_of(tmp_path, sets, parameters, model_of("isotropic")))
    p = study.parameters
    forward = make_forward(study, FullSolver(study.model))
    truth = np.array([-12.0, 0.5, 2.1, 1e-4, 0.05, 1.01])
    assert [q.name for q in p.free] == [
        "J1", "g", "chi0", "paramagnetic_fraction", "scale_chi", "x"
    ]  # fmt: skip
    truth = truth[[0, 2, 3, 4, 5, 1]]
    for k, d in enumerate(study.sets):
        values = forward.predict(set_points(d), p.values(truth)) / d.to_si
        error = 3e-3 * np.abs(values).max()
        sets[k] = sets[k] | {"absolute_uncertainty": float(error)}
        noisy = values + error * rng.standard_normal(len(T))
        write_csv(tmp_path / f"{d.name}.csv", "T,v", T, noisy)
    study = read_study(study_of(tmp_path, sets, parameters, model_of("isotropic")))
    result = fit(study, profiles="none")

    def chi_square(theta):
        values = p.values(np.asarray(theta))
        total = ((2.08 - values.value["g"]) / 0.02) ** 2
        total += ((1 - values.value["scale_chi"]) / 0.03) ** 2
        for d in study.sets:
            total += np.sum(
                ((d.value - forward.predict(set_points(d), values)) / d.uncertainty) ** 2
            )
        return total

    best = np.array([result[n].value for n in result.free_names])
    errors = np.array([result[n].standard_error for n in result.free_names])
    minuit = Minuit(chi_square, best + 0.8 * errors, name=result.free_names)
    minuit.errors = errors
    minuit.strategy = 2
    minuit.tol = 1e-4
    minuit.migrad()
    minuit.hesse()
    assert minuit.valid
    assert np.abs((np.array(minuit.values) - best) / errors).max() < 1e-2
    np.testing.assert_allclose(np.array(minuit.errors), errors, rtol=1e-2)
    theirs = np.array(minuit.covariance)
    theirs = theirs / np.outer(minuit.errors, minuit.errors)
    np.testing.assert_allclose(result.correlation, theirs, rtol=0, atol=2e-2)
    # The tied coupling's error by propagation of Minuit's covariance.
    slope = p.values(best).slope["J2"]
    error = float(np.sqrt(slope @ np.array(minuit.covariance) @ slope))
    assert result["J2"].standard_error == pytest.approx(error, rel=2e-2)
    total = result.chi_square + ((2.08 - result["g"].value) / 0.02) ** 2
    total += ((1 - result["scale_chi"].value) / 0.03) ** 2
    assert total == pytest.approx(minuit.fval, rel=1e-6)


def test_copper_acetate_in_the_units_and_the_sign_of_its_literature(tmp_path):
    """Copper(II) acetate monohydrate: a singlet-triplet gap −2J of 296 cm⁻¹ with g = 2.16 and
    60·10⁻⁶ emu/mol Cu of temperature-independent paramagnetism (Figgis and Martin, J. Chem. Soc.
    3837 (1956) and later work give −2J of 286 to 298; all from memory). No open points at hand:
    they are made here from these constants by the formula of Bleaney and Bowers (1952)."""
    gap, g, constant, rho = 296.0, 2.16, 60e-6, 0.003
    t = np.linspace(80.0, 400.0, 65)
    x = convert_energy(gap, "cm-1", "K") / t
    spins = CURIE * g**2 / (t * (3 + np.exp(x)))
    chi = (1 - rho) * spins + rho * CURIE * g**2 / (4 * t) + constant
    rng = np.random.default_rng(1952)
    error = 2e-6
    write_csv(tmp_path / "chi.csv", "T,v", t, chi + error * rng.standard_normal(len(t)))
    model = MODEL.replace('"K"', '"cm-1"').replace('"+J S.S"', '"-2J S.S"')
    model = model.replace("J = 30.0", "J = -100.0")
    table = {"name": "chi", "file": str(tmp_path / "chi.csv"), "quantity": "susceptibility",
             "units": "emu/mol", "absolute_uncertainty": error,
             "columns": {"temperature": "T", "value": "v"}}  # fmt: skip
    parameters = {"J": {}, "g": {"start": 2.1}, "chi0": {"fixed": constant},
                  "paramagnetic_fraction": {}}  # fmt: skip
    result = fit(study_of(tmp_path, [table], parameters, model), profiles="all")
    assert result.trustworthy
    for name, true in (("J", -gap / 2), ("g", g), ("paramagnetic_fraction", rho)):
        low, high = result[name].confidence(0.95)
        assert low < true < high, name
        assert high - low < 5 * result[name].standard_error
    assert result["J"].standard_error < 0.5
    # The hump of the literature, near 255 K.
    fine = np.linspace(200, 320, 241)
    assert 250 < fine[np.argmax(result.predict("susceptibility", fine))] < 275
