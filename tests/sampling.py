"""Sampled tables without a solver: levels drawn by tests/naive_sampling.py, calibrated by us."""

from __future__ import annotations

import numpy as np

import thermo
from tests.naive_sampling import exact_moments, sampled_levels
from thermo.model.calibration import Sampling, calibrated_table
from thermo.model.level_table import LevelTable
from thermo.spectrum.full import FullSolver


def extent(sectors):
    """Centre and half width of the energies."""
    energy = np.concatenate([e for _, _, e in sectors])
    low, high = float(energy.min()), float(energy.max())
    return (low + high) / 2, (high - low) / 2 * 1.0001


def sampled_table(sectors, vectors, seed, order=6, n_sites=1, **choice):
    """A calibrated LevelTable of the sectors, from ``vectors`` random vectors each."""
    rng = np.random.default_rng(seed)
    levels, unit_sector = sampled_levels(sectors, vectors, rng, **choice)
    return table_of(levels, unit_sector, sectors, order, n_sites)


def table_of(levels, unit_sector, sectors, order=6, n_sites=1):
    center, scale = extent(sectors)
    present = sorted({m for m, _, _ in sectors})
    raw = LevelTable(
        levels["energy"],
        levels["raw"],
        np.full(len(levels["raw"]), -1),
        levels["twice_m"],
        "magnetic_number",
        n_sites,
    )
    sampling = Sampling(
        unit=levels["unit"],
        group=np.searchsorted(present, levels["twice_m"]),
        raw_weight=levels["raw"],
        unit_sector=unit_sector,
        moments=np.array([exact_moments(sectors, m, center, scale, order) for m in present]),
        center=center,
        scale=scale,
        orders=np.zeros(len(present), dtype=np.int64),
    )
    return calibrated_table(raw, sampling)


def sectors_of(mapping):
    """The sectors of a model, solved in full with M resolved: (twice_m, multiplicity, energies),
    multiplicity with both signs of M."""
    solver = FullSolver(thermo.read_model(mapping), generic=False, use_total_spin=False)
    table, index = solver.solve()
    return [
        (abs(sector.twice_m), float(table.weight[index == k][0]), table.energy[index == k])
        for k, sector in enumerate(solver.plan.sectors)
    ]


def full_table(sectors, n_sites=1):
    """The exact table of the same sectors."""
    energy = np.concatenate([e for _, _, e in sectors])
    weight = np.concatenate([np.full(len(e), g) for _, g, e in sectors])
    twice_m = np.concatenate([np.full(len(e), m) for m, _, e in sectors])
    return LevelTable(energy, weight, np.full(len(energy), -1), twice_m, "magnetic_number", n_sites)
