"""Invented datasets for the tests of pictures, tables and exports; none is a check value."""

from __future__ import annotations

from itertools import product

import numpy as np
import xarray as xr

from thermo import units, variables

MODEL = {
    "model_text": 'format = 1\ntitle = "made-up"\n',
    "model_digest": "0" * 64,
    "bond_term": "+J S.S",
    "title": "made-up",
    "ions_per_formula": 2.0,
    "method": "full",
}


def dimer_in_field(
    temperature: np.ndarray, field: np.ndarray, coupling: float = 40.0, g: float = 2.1
) -> dict[str, np.ndarray]:
    """Two spins ½ (J in K, temperature in K, field in T), per mole of ions, SI; textbook sums."""
    m = np.array([0.0, -1.0, 0.0, 1.0])
    e = coupling * np.array([-0.75, 0.25, 0.25, 0.25])
    zeeman = g * units.BOHR_MAGNETON_KELVIN
    level = e - zeeman * field[:, None] * m
    x = level / temperature[:, None, None]
    low = x.min(axis=-1, keepdims=True)
    p = np.exp(low - x)
    z = p.sum(axis=-1)
    p /= z[..., None]
    u = (p * level).sum(axis=-1)
    t = temperature[:, None]
    heat = ((p * level**2).sum(axis=-1) - u**2) / t**2
    free = -t * (np.log(z) - low[..., 0])
    mean_m = (p * m).sum(axis=-1)
    variance = (p * m**2).sum(axis=-1) - mean_m**2
    per_ion = 0.5
    return {
        "internal_energy": per_ion * units.R * u,
        "free_energy": per_ion * units.R * free,
        "entropy": per_ion * units.R * (u - free) / t,
        "specific_heat": per_ion * units.R * heat,
        "susceptibility": per_ion * units.CURIE * g**2 * variance / t,
        "magnetization": per_ion * units.MOLAR_BOHR_MAGNETON * g * mean_m,
    }


def curves(
    temperature: np.ndarray, field: np.ndarray, magnetic: bool = True, errors: bool = False
) -> xr.Dataset:
    """The dimer's curves on a grid, molar SI per mole of ions."""
    values = dimer_in_field(temperature, field)
    attrs = MODEL | {"energy_unit": "K", "per": "ion"}
    if not magnetic:
        del values["susceptibility"], values["magnetization"]
        attrs["unavailable"] = "the model does not conserve M"
    wrong = {k: 0.03 * np.abs(v) for k, v in values.items()} if errors else None
    return variables.build_curves(temperature, field, values, "molar-si", attrs, wrong)


def reduced_curves(energy_unit: str = "1") -> xr.Dataset:
    """Free spins ½ with invented numbers, reduced units."""
    t = np.geomspace(0.02, 20, 50)
    values = {
        "specific_heat": (t / (1 + t**2))[:, None],
        "entropy": (np.log(2) * t / (1 + t))[:, None],
        "susceptibility": (0.25 / (1 + t))[:, None],
    }
    attrs = MODEL | {"energy_unit": energy_unit, "per": "site"}
    return variables.build_curves(t, [0.0], values, "reduced", attrs)


def levels(n_sites: int = 8, resolved: str = "total_spin") -> xr.Dataset:
    """Ising-like made-up levels of a few spins with invented S or M labels."""
    states = np.array(list(product((0.5, -0.5), repeat=n_sites)))
    m = np.abs(states.sum(axis=1))
    energy = 70 * (states * np.roll(states, 1, axis=1)).sum(axis=1)
    energy = energy + 9 * np.sin(np.arange(m.size))  # spread
    none = np.full(m.size, np.nan)
    arrays = {
        "energy": energy,
        "weight": 2 * m + 1 if resolved == "total_spin" else np.ones(m.size),
        "total_spin": m if resolved == "total_spin" else none,
        "magnetic_number": m if resolved == "magnetic_number" else none,
        "vector": np.full(m.size, -1),
        "sector": np.zeros(m.size),
    }
    blocks = {"dimension": [m.size], "multiplicity": [1], "magnetic_number": [0], "real": [1]}
    attrs = MODEL | {"energy_unit": "K", "resolved": resolved, "n_sites": n_sites}
    return variables.build_levels(arrays, blocks, attrs)


def fit(
    smooth: bool = True,
    uncertainties: bool = True,
    several_fields: bool = False,
    scatter: bool = False,
) -> xr.Dataset:
    """An invented fit: χ(T) in emu/mol and C(T) in J/(mol K), with noise.

    ``scatter``: no uncertainties were stated and those of the points are the residuals'.
    """
    random = np.random.default_rng(3)
    t1, t2 = np.linspace(2, 300, 60), np.geomspace(2, 60, 35)
    b1 = np.array([0.1, 15.0, 30.0]) if several_fields else np.array([0.1])
    chi = dimer_in_field(t1, b1)["susceptibility"] / units.CHI_SI_PER_EMU
    heat = dimer_in_field(t2, np.array([0.0]))["specific_heat"]
    predicted = np.concatenate([chi.T.ravel(), heat.ravel()])
    count = chi.size
    sigma = np.where(np.arange(predicted.size) < count, 4e-5, 0.05)
    observed = predicted + sigma * random.normal(size=predicted.size)
    which = (np.arange(predicted.size) >= count).astype(int)
    arrays = {
        "parameter_name": ["J_leg", "g", "chi0", "rho", "J_rung"],
        "parameter_units": ["K", "1", "emu/mol", "1", "K"],
        "parameter_tie": ["", "", "", "", "0.5*J_leg"],
        "parameter_role": [1, 1, 1, 0, 2],
        "value": [40.12, 2.101, -6.1e-5, 0.0, 20.06],
        "standard_error": [0.35, 0.004, 3e-6, np.nan, 0.175],
        "start": [50.0, 2.0, 0.0, 0.0, 25.0],
        "lower_bound": [0.0, 1.8, -np.inf, -np.inf, -np.inf],
        "upper_bound": [200.0, np.inf, np.inf, np.inf, np.inf],
        "at_bound": [0, 0, 0, 0, 0],
        "correlation": np.pad(
            [[1, 0.6, -0.2], [0.6, 1, -0.8], [-0.2, -0.8, 1]], (0, 2), constant_values=np.nan
        ),
        "temperature": np.concatenate([np.tile(t1, b1.size), t2]),
        "field": np.concatenate([np.repeat(b1, t1.size), 0 * t2]),
        "observed": observed,
        "uncertainty": sigma if uncertainties else np.full(sigma.size, np.nan),
        "predicted": predicted,
        "residual": observed - predicted,
        "point_dataset": which,
        "dataset_name": ["chi", "heat"],
        "dataset_quantity": ["susceptibility", "specific_heat"],
        "dataset_units": ["emu/mol", "J/(mol K)"],
        "dataset_per": ["ion", "ion"],
        "dataset_chi_square": [61.0, 33.0],
        "chi_square": 94.0,
        "reduced_chi_square": 1.02,
        "degrees_of_freedom": 92,
        "evaluations": 14,
        "converged": 1,
    }
    if smooth:
        fine = np.geomspace(2, 300, 200)
        f1 = dimer_in_field(fine, b1)["susceptibility"] / units.CHI_SI_PER_EMU
        f2 = dimer_in_field(fine, np.array([0.0]))["specific_heat"]
        arrays |= {
            "curve_temperature": np.tile(fine, b1.size + 1),
            "curve_field": np.repeat([*b1, 0.0], fine.size),
            "curve_predicted": np.concatenate([f1.T.ravel(), f2.ravel()]),
            "curve_dataset": np.repeat([0] * b1.size + [1], fine.size),
        }
    attrs = {"energy_unit": "K", "title": "made-up"}
    if scatter:
        attrs["error_basis"] = "scatter"
    return variables.build_fit(arrays, attrs)
