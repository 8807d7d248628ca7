"""Studies of rival networks for the tests; all numbers are invented, none is a check value."""

from __future__ import annotations

from pathlib import Path

import numpy as np

from tests.fitting import write_csv

NETWORKS = {
    "dimer": {
        "couplings": {"J": 60.0},
        "finite": True,
        "site": [{"spin": 0.5, "g": 2.1}, {"spin": 0.5, "g": 2.1}],
        "bond": [{"sites": [0, 1], "coupling": "J"}],
    },
    "uniform chain": {
        "couplings": {"J": 60.0},
        "lattice": {"name": "chain", "size": [12], "couplings": {"nearest": "J"}},
    },
    "alternating chain": {
        "couplings": {"J": 60.0, "K": 30.0},
        "lattice": {"name": "chain", "size": [12], "couplings": {"strong": "J", "weak": "K"}},
    },
    "ladder": {
        "couplings": {"J": 60.0, "K": 30.0},
        "lattice": {"name": "ladder", "size": [6], "couplings": {"rung": "J", "leg": "K"}},
    },
}


def network(name: str, size: int | None = None, **couplings: float) -> dict:
    """The model of a network as a mapping."""
    entry = NETWORKS[name]
    model = {"format": 1, "title": name, "energy_unit": "K", "bond_term": "+J S.S", **entry}
    model["couplings"] = {**entry["couplings"], **couplings}
    if "lattice" in model:
        lattice = {**model["lattice"], "spin": 0.5, "g": 2.1}
        if size is not None:
            lattice["size"] = [size]
        model["lattice"] = lattice
    return model


def parameters(name: str) -> dict:
    """Bounds for the couplings of a network, and g."""
    found = {"J": {"start": 60.0, "lower": 1.0, "upper": 300.0}, "g": {"lower": 1.8, "upper": 2.4}}
    if "K" in NETWORKS[name]["couplings"]:
        found["K"] = {"start": 30.0, "lower": 0.0, "upper": 200.0}
    return found


def rival_study(
    folder: Path,
    temperature: np.ndarray,
    chi: np.ndarray,
    error: np.ndarray,
    names: tuple[str, ...] = tuple(NETWORKS),
    **more: object,
) -> dict:
    """A study of these networks, its one table (emu/mol) written to ``folder``."""
    write_csv(folder / "chi.csv", "T,chi,error", temperature, chi, error)
    return {
        "format": 1,
        "title": "invented",
        "candidate": [
            {"name": name, "model": network(name), "parameters": parameters(name)}
            for name in names
        ],
        "data": [
            {
                "name": "chi",
                "file": str(folder / "chi.csv"),
                "quantity": "susceptibility",
                "units": "emu/mol",
                "columns": {"temperature": "T", "value": "chi", "uncertainty": "error"},
            }
        ],
        "parameters": {},
        **more,
    }  # fmt: skip
