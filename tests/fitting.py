"""Studies for the tests of the fit: invented numbers made from closed forms, written to a folder.

Nothing here imports the package. The dimer of two spins ½, H = +J S1·S2 (Bleaney and Bowers,
Proc. R. Soc. A 214, 451 (1952)), in emu and kelvin with the constants of CODATA 2022.
"""

from __future__ import annotations

from pathlib import Path

import numpy as np

CURIE = 0.3751480951  # N_A mu_B^2/k_B in emu K/mol
R = 8.314462618  # J/(mol K)
MU_B = 0.6717138147  # mu_B/k_B in K/T
MOMENT = 6.02214076e23 * 9.2740100657e-24 * 1e3  # N_A mu_B in emu/mol

TRUE = {"J": 42.5, "g": 2.13, "chi0": -1.7e-4, "paramagnetic_fraction": 0.021}

MODEL = """
format = 1
title = "invented dimer"
energy_unit = "K"
bond_term = "+J S.S"
[couplings]
J = 30.0
[[site]]
name = "a"
spin = 0.5
[[site]]
name = "b"
spin = 0.5
[[bond]]
sites = ["a", "b"]
coupling = "J"
"""

STUDY = """
format = 1
title = "invented points of a dimer"
model = "model.toml"

[[data]]
name = "chi"
file = "chi.csv"
quantity = "susceptibility"
units = "emu/mol"
columns = { temperature = "T (K)", value = "chi", uncertainty = "error" }

[[data]]
name = "heat"
file = "heat.csv"
quantity = "specific_heat"
units = "J/(mol K)"
columns = { temperature = 1, value = 2, uncertainty = 3 }
delimiter = ";"
header = false

[parameters]
J = { start = 30.0, lower = 1.0, upper = 200.0 }
g = { start = 2.0, lower = 1.5, upper = 3.0 }
chi0 = { start = 0.0 }
paramagnetic_fraction = { start = 0.005, lower = 0.0, upper = 0.5 }
"""


def dimer_chi(T, J, g, chi0=0.0, paramagnetic_fraction=0.0):
    """Susceptibility at zero field, emu per mole of ions."""
    spins = CURIE * g**2 / T / (3 + np.exp(J / T))
    free = CURIE * g**2 / (4 * T)
    return chi0 + (1 - paramagnetic_fraction) * spins + paramagnetic_fraction * free


def dimer_heat(T, J, paramagnetic_fraction=0.0):
    """Specific heat at zero field, J/(mol K), per mole of ions."""
    x = J / T
    return (1 - paramagnetic_fraction) * R * 1.5 * x**2 * np.exp(x) / (3 + np.exp(x)) ** 2


def dimer_moments(T, B, J, g):
    """(⟨M⟩, C/k_B) of one dimer in a field B (T) by its four levels."""
    h = g * MU_B * B
    energy = np.array([0 * h, J - h, J + 0 * h, J + h])
    m = np.array([0.0, 1.0, 0.0, -1.0])[:, None]
    p = np.exp(-(energy - energy.min(axis=0)) / T)
    p = p / p.sum(axis=0)
    mean = (energy * p).sum(axis=0)
    return (m * p).sum(axis=0), ((energy - mean) ** 2 * p).sum(axis=0) / T**2


def write_csv(path: Path, header: str | None, *columns, delimiter: str = ",") -> None:
    """Columns of numbers at full precision."""
    lines = ["# invented numbers, made for a test"] + ([header] if header else [])
    lines += [delimiter.join(repr(float(x)) for x in row) for row in zip(*columns, strict=True)]
    path.write_text("\n".join(lines) + "\n")


def write_dimer(folder: Path, noise: float = 0.0, seed: int = 5, study: str = STUDY) -> Path:
    """The study above with its files; the path of the study."""
    rng = np.random.default_rng(seed)
    T = np.geomspace(4.0, 300.0, 60)
    chi, heat = dimer_chi(T, **TRUE), dimer_heat(T, TRUE["J"], TRUE["paramagnetic_fraction"])
    chi_error, heat_error = 0.01 * np.abs(chi) + 1e-5, 0.01 * heat + 0.01
    chi = chi + noise * chi_error * rng.standard_normal(len(T))
    heat = heat + noise * heat_error * rng.standard_normal(len(T))
    write_csv(folder / "chi.csv", "T (K),chi,error", T, chi, chi_error)
    write_csv(folder / "heat.csv", None, T, heat, heat_error, delimiter=";")
    (folder / "model.toml").write_text(MODEL)
    (folder / "study.toml").write_text(study)
    return folder / "study.toml"
