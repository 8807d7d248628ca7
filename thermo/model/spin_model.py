"""The one model object: sites, bonds, ion terms and named couplings, in internal conventions.

H = Σ_p c_p H_p − μ_B B·Σ_i g_i S_i,  H_p = Σ_bonds S_iᵀ A S_j + Σ_ions S_iᵀ D S_i,
each bond once; the sign and factor of the file's own ``bond_term`` are already inside A.
"""

from __future__ import annotations

import hashlib
import json
from collections.abc import Mapping
from dataclasses import dataclass, field, replace

import numpy as np
from numpy.typing import NDArray

from thermo.errors import ModelError

Matrix = NDArray[np.float64]


@dataclass(frozen=True, eq=False)
class Site:
    """A magnetic ion: its name, its spin (½, 1, 3⁄2 …) and its 3×3 g tensor."""

    name: str
    spin: float
    g: Matrix

    @property
    def dimension(self) -> int:
        """Number of states, 2S + 1."""
        return round(2 * self.spin) + 1


@dataclass(frozen=True, eq=False)
class Bond:
    """One term c·S_iᵀ A S_j: the sites' indices i ≠ j, the coupling's name, and A (3×3)."""

    i: int
    j: int
    coupling: str
    matrix: Matrix


@dataclass(frozen=True, eq=False)
class Ion:
    """One term c·S_iᵀ D S_i of a single site; D (3×3) is symmetric."""

    site: int
    coupling: str
    matrix: Matrix


@dataclass(frozen=True, eq=False)
class SpinModel:
    """A cluster of interacting spins.

    ``couplings`` maps each name to its value in ``energy_unit`` ("K", "meV", "cm-1" or "1").
    ``translations`` holds site permutations (image of each site index) that the cell's
    repetition suggests as symmetries; whoever uses one checks it first.
    ``notes`` are sentences the user should be told (a bond that meets its own image, a zero
    term). ``text`` is the model's source, from which ``read_model_text`` makes it again.
    ``finite`` says that the cluster is all there is, a molecule; else ``superlattice`` (rows, in
    cells) and ``periodic`` (one for each row) tell how a cell was repeated, empty without a cell.
    ``basis`` holds the positions of the cell's sites in units of its vectors, empty where they
    are not known; further numbers than there are rows run across the repeating directions.
    """

    title: str
    energy_unit: str
    bond_term: str
    couplings: Mapping[str, float]
    sites: tuple[Site, ...]
    bonds: tuple[Bond, ...]
    ions: tuple[Ion, ...]
    text: str
    translations: tuple[tuple[int, ...], ...] = ()
    notes: tuple[str, ...] = ()
    ions_per_formula: float = 1.0
    source: str = field(default="mapping")
    finite: bool = False
    superlattice: tuple[tuple[int, ...], ...] = ()
    periodic: tuple[bool, ...] = ()
    basis: tuple[tuple[float, ...], ...] = ()

    @property
    def spins(self) -> NDArray[np.float64]:
        """The sites' spins, shape (N,)."""
        return np.array([site.spin for site in self.sites])

    @property
    def common_g(self) -> float | None:
        """The one isotropic g of all sites, or None where g differs between sites or directions."""
        first = self.sites[0].g[0, 0]
        if all(np.allclose(s.g, first * np.eye(3), rtol=1e-12, atol=0) for s in self.sites):
            return float(first)
        return None

    @property
    def n_states(self) -> int:
        """Dimension of the Hilbert space, Π(2S_i + 1)."""
        product = 1
        for site in self.sites:
            product *= site.dimension
        return product

    def with_couplings(self, values: Mapping[str, float]) -> SpinModel:
        """The same model with some couplings changed; names it does not have are an error."""
        unknown = sorted(set(values) - set(self.couplings))
        if unknown:
            known = ", ".join(self.couplings)
            raise ModelError(f"coupling {unknown[0]!r} is not in the model; it has {known}")
        changed = {name: float(values.get(name, old)) for name, old in self.couplings.items()}
        for name, value in changed.items():
            if not np.isfinite(value):
                raise ModelError(f"coupling {name} = {value} is not a finite number; give one")
        return replace(self, couplings=changed)

    @property
    def digest(self) -> str:
        """SHA-256 of everything that enters the Hamiltonian and the moment."""
        canonical = {
            "energy_unit": self.energy_unit,
            "couplings": {name: float(v) for name, v in sorted(self.couplings.items())},
            "sites": [[s.spin, s.g.tolist()] for s in self.sites],
            "bonds": [[b.i, b.j, b.coupling, b.matrix.tolist()] for b in self.bonds],
            "ions": [[t.site, t.coupling, t.matrix.tolist()] for t in self.ions],
            "ions_per_formula": self.ions_per_formula,
        }
        return hashlib.sha256(json.dumps(canonical, sort_keys=True).encode()).hexdigest()
