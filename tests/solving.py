"""From a cluster to reduced curves in one call, for the tests against outside values."""

from __future__ import annotations

import numpy as np

import thermo
from tests.strategies import Cluster


def lattice_mapping(name, size, couplings, spin=0.5, boundary="periodic", bond_term="+J S.S"):
    """A dimensionless model of a named lattice with g = 1; couplings: {role: value}, or
    {role: (value, form)}."""
    values, roles = {}, {}
    for role, given in couplings.items():
        value, form = given if isinstance(given, tuple) else (given, "isotropic")
        values[f"J_{role}"] = float(value)
        roles[role] = {"coupling": f"J_{role}", "form": form}
    return {
        "format": 1,
        "title": f"{name} of the tests",
        "energy_unit": "1",
        "bond_term": bond_term,
        "couplings": values,
        "lattice": {
            "name": name,
            "size": size,
            "boundary": boundary,
            "spin": spin,
            "g": 1.0,
            "couplings": roles,
        },
    }


def levels_of(cluster):
    """Solve a Cluster or a mapping in full."""
    mapping = cluster.mapping() if isinstance(cluster, Cluster) else cluster
    return thermo.solve(thermo.read_model(mapping), method="full")


def reduced(levels, temperature, field=0.0):
    """Curves per site with k_B = mu_B = 1 as {name: array (temperature, field)}."""
    temperature = np.atleast_1d(np.asarray(temperature, dtype=float))
    field = np.atleast_1d(np.asarray(field, dtype=float))
    data = thermo.curves(levels, temperature=temperature, field=field, units="reduced")
    return {
        name: data[name].transpose("temperature", "field").values
        for name in (
            "internal_energy",
            "free_energy",
            "entropy",
            "specific_heat",
            "susceptibility",
            "magnetization",
        )
        if name in data
    }


def repeated(levels):
    """Every state's energy, ascending, from the table of levels."""
    weight = np.rint(levels["weight"].values).astype(int)
    return np.sort(np.repeat(levels["energy"].values, weight))
