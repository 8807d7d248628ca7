"""Sampled tables without a solver: levels drawn by tests/naive_sampling.py, calibrated by us."""

from __future__ import annotations

import json

import numpy as np

import thermo
from tests.naive_sampling import exact_moments, sampled_levels
from thermo import variables
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


def sampled_dataset(mapping, vectors=4, seed=1, order=6, **choice):
    """The levels dataset of a model, as a sampled solve lays it out."""
    model = thermo.read_model(mapping)
    sectors = sectors_of(mapping)
    levels, unit_sector = sampled_levels(sectors, vectors, np.random.default_rng(seed), **choice)
    table = table_of(levels, unit_sector, sectors, order, len(model.sites))
    ascending = np.argsort(table.energy, kind="stable")
    # Vectors are numbered within their sector; unit −1, an exact level, is the last entry here.
    number = np.arange(len(unit_sector)) - np.searchsorted(unit_sector, unit_sector)
    number = np.append(number, -1)
    unit = levels["unit"]
    sampling = table.sampling
    columns = {
        "energy": table.energy,
        "weight": table.weight,
        "total_spin": np.full(len(unit), np.nan),
        "magnetic_number": table.twice_m / 2,
        "vector": number[unit],
        "sector": levels["sector"],
        "raw_weight": sampling.raw_weight,
    }
    return variables.build_levels(
        {name: column[ascending] for name, column in columns.items()}
        | {
            "trace_magnetic_number": sorted({m / 2 for m, _, _ in sectors}),
            "trace": sampling.moments,
            "trace_order_used": sampling.orders,
        },
        {
            "dimension": [len(e) for _, _, e in sectors],
            "multiplicity": [g for _, g, _ in sectors],
            "magnetic_number": [m / 2 for m, _, _ in sectors],
            "real": [1] * len(sectors),
        },
        {
            "title": model.title,
            "method": "sampled",
            "resolved": "magnetic_number",
            "model_text": model.text,
            "model_digest": model.digest,
            "model_couplings": json.dumps({k: float(v) for k, v in model.couplings.items()}),
            "energy_unit": model.energy_unit,
            "bond_term": model.bond_term,
            "n_sites": len(model.sites),
            "ions_per_formula": float(model.ions_per_formula),
            "trace_center": sampling.center,
            "trace_scale": sampling.scale,
            "vectors": vectors,
            "steps": 100,
            "seed": seed,
        },
    )
