"""Make the two tables of quorvite, an invented compound, from a cluster larger than the one fitted.

The spins are an eight-rung periodic ladder (16 sites); model.toml has six rungs. Added are a
temperature-independent susceptibility, free spins ½ in place of some of the copper, and normal
noise. Down to the lowest temperatures used here the two sizes differ by less than the noise.

Run it in this directory: python make_data.py (about half a minute; the same numbers every time).
"""

from __future__ import annotations

from pathlib import Path

import numpy as np

import thermo
from thermo.units import CHI_SI_PER_EMU, CURIE_EMU

TRUE = {
    "J_rung": 118.0,  # K
    "J_leg": 44.0,  # K
    "g": 2.09,
    "chi0": -4.5e-5,  # emu/mol Cu
    "paramagnetic_fraction": 0.015,
}
RUNGS = 8
SEED = 20240229
FOLDER = Path(__file__).parent


def ladder(rungs: int) -> dict[str, object]:
    """The model file as a mapping, for any number of rungs."""
    return {
        "format": 1,
        "title": f"{rungs}-rung ladder",
        "energy_unit": "K",
        "bond_term": "+J S.S",
        "couplings": {name: TRUE[name] for name in ("J_rung", "J_leg")},
        "lattice": {
            "name": "ladder",
            "size": [rungs],
            "boundary": "periodic",
            "spin": 0.5,
            "g": TRUE["g"],
            "couplings": {"rung": "J_rung", "leg": "J_leg"},
        },
    }


def exact(rungs: int, t_chi: np.ndarray, t_heat: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Susceptibility (emu/mol Cu) and spin specific heat (J/(mol Cu K)) without noise."""
    levels = thermo.solve(thermo.read_model(ladder(rungs)))
    chi = thermo.curves(levels, t_chi)["susceptibility"].values[:, 0] / CHI_SI_PER_EMU
    heat = thermo.curves(levels, t_heat)["specific_heat"].values[:, 0]
    rho = TRUE["paramagnetic_fraction"]
    free = CURIE_EMU * TRUE["g"] ** 2 / 4 / t_chi
    return TRUE["chi0"] + (1 - rho) * chi + rho * free, (1 - rho) * heat


def grids() -> tuple[np.ndarray, np.ndarray]:
    """Temperatures of the two measurements in K."""
    t_chi = np.concatenate([np.arange(8, 40, 1.0), np.arange(40, 100, 2.0), np.arange(100, 301, 4)])
    return t_chi, np.concatenate([np.arange(10, 40, 1.0), np.arange(40, 121, 2.0)])


def write(name: str, what: str, header: str, *columns: np.ndarray) -> None:
    """A table whose head says what it is."""
    lines = [
        "# Quorvite is an invented compound; these numbers were never measured.",
        f"# {what}; made by make_data.py (seed {SEED}).",
        header,
    ]
    lines += [",".join(f"{x:.6g}" for x in row) for row in zip(*columns, strict=True)]
    (FOLDER / name).write_text("\n".join(lines) + "\n", encoding="utf-8")


def main() -> None:
    """Write susceptibility.csv and specific_heat.csv beside this file."""
    t_chi, t_heat = grids()
    chi, heat = exact(RUNGS, t_chi, t_heat)
    chi_error = 0.007 * np.abs(chi) + 3e-6
    heat_error = 0.015 * heat + 0.02
    rng = np.random.default_rng(SEED)
    chi = chi + chi_error * rng.standard_normal(len(chi))
    heat = heat + heat_error * rng.standard_normal(len(heat))
    write(
        "susceptibility.csv",
        "Magnetic susceptibility at low field, per mole of copper",
        "T (K),chi (emu/mol Cu),error (emu/mol Cu)",
        t_chi, chi, chi_error,
    )  # fmt: skip
    write(
        "specific_heat.csv",
        "Specific heat of the spins, the lattice's share taken off, per mole of copper",
        "T (K),C (J/(mol Cu K)),error (J/(mol Cu K))",
        t_heat, heat, heat_error,
    )  # fmt: skip


if __name__ == "__main__":
    main()
