"""What to measure next: where candidates differ most, against closed forms; data are invented."""

from __future__ import annotations

import math

import numpy as np
import pytest

from tests.fitting import dimer_chi, dimer_heat
from tests.rivals import network, rival_study
from tests.test_candidates import T, chain_chi, noisy
from thermo.fit.candidates import compare
from thermo.fit.next_point import Instrument, propose
from thermo.units import CHI_SI_PER_EMU


@pytest.fixture(scope="module")
def alternating():
    return chain_chi(70.0, 28.0)


def test_the_proposal_is_where_closed_forms_differ_most(tmp_path):
    """Two dimers of fixed J, 62 and 64 K, over a grid: C by its closed form at every point."""
    error = 0.2 * dimer_chi(T, 63.0, 2.1)
    content = rival_study(tmp_path, T, noisy(dimer_chi(T, 63.0, 2.1), error, 0), error, ("dimer",))
    content["candidate"] = [
        {"name": f"{J:g} K", "model": network("dimer"), "parameters": {"J": {"fixed": J}, "g": {}}}
        for J in (62.0, 64.0)
    ]
    content["instrument"] = [
        {
            "name": "calorimeter",
            "quantity": "specific_heat",
            "units": "J/(mol K)",
            "temperature": [2, 100],
            "relative_uncertainty": 0.02,
            "absolute_uncertainty": 0.01,
        }
    ]
    found = compare(content)
    assert found.conclusion == "undecided"
    (proposal,) = found.proposals
    t = proposal.grid.temperature
    low, high = dimer_heat(t, 62.0), dimer_heat(t, 64.0)
    # C does not depend on g, the one free parameter, so only the instrument's precision counts.
    precision = np.hypot(0.02 * (low + high) / 2, 0.01)
    expected = np.abs(low - high) / precision
    np.testing.assert_allclose(proposal.map, expected, rtol=1e-9)
    assert proposal.temperature == t[np.argmax(expected)]
    assert proposal.separation == proposal.bare == pytest.approx(expected.max(), rel=1e-9)
    assert proposal.field == 0
    assert "calorimeter at" in str(proposal)


def test_the_fits_own_uncertainties_are_counted(tmp_path):
    """χ of a dimer with free g at fixed J goes as g², so its relative spread is 2 δg/g."""
    error = 0.05 * dimer_chi(T, 63.0, 2.1)
    content = rival_study(tmp_path, T, noisy(dimer_chi(T, 63.0, 2.1), error, 0), error, ("dimer",))
    content["candidate"] = [
        {"name": f"{J:g} K", "model": network("dimer"), "parameters": {"J": {"fixed": J}, "g": {}}}
        for J in (60.0, 66.0)
    ]
    found = compare(content)
    tool = Instrument(
        "x", "susceptibility", "emu/mol", "ion", CHI_SI_PER_EMU, (20.0, 200.0), (0.0, 0.0), 0.01, 0
    )
    (proposal,) = propose([(c.name, c.result) for c in found.candidates], [tool])
    at = proposal.temperature
    values = [c.result.predict("susceptibility", [at])[0] for c in found.candidates]
    spread = [
        v * 2 * c.result["g"].standard_error / c.result["g"].value
        for v, c in zip(values, found.candidates, strict=True)
    ]
    noise = 0.01 * np.mean(values)
    expected = abs(values[0] - values[1]) / math.sqrt(noise**2 + spread[0] ** 2 + spread[1] ** 2)
    assert proposal.separation == pytest.approx(expected, rel=1e-6)
    assert proposal.bare > proposal.separation


def test_where_the_size_shows_nothing_is_proposed(tmp_path, alternating):
    error = 0.02 * alternating
    content = rival_study(
        tmp_path, T, noisy(alternating, error, 0), error, ("alternating chain", "ladder"),
        instrument=[
            {"quantity": "specific_heat", "units": "J/(mol K)", "temperature": [0.5, 100],
             "relative_uncertainty": 0.01},
            {"quantity": "magnetization", "units": "muB", "temperature": [2, 20],
             "field": [1, 60], "absolute_uncertainty": 0.01},
        ],
    )  # fmt: skip
    found = compare(content)
    assert {p.instrument.name for p in found.proposals} == {"specific heat", "magnetization"}
    for proposal in found.proposals:
        known = np.isfinite(proposal.map)
        assert known.any()
        for field in np.unique(proposal.grid.field):
            at = proposal.grid.field == field
            order = np.argsort(proposal.grid.temperature[at])
            # Trusted from some temperature upwards, never in islands below it.
            assert np.all(np.diff(known[at][order].astype(int)) >= 0)
    heat = next(p for p in found.proposals if p.instrument.quantity == "specific_heat")
    assert not np.isfinite(heat.map[np.argmin(heat.grid.temperature)])
