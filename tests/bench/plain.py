"""The plain script to compare speed with: what a physicist writes in an afternoon.

All levels of an isotropic spin-1/2 cluster, H = sum J S_i.S_j, by dense numpy eigenvalues of
each M >= 0 block. Blocks are built with bit tricks and whole-array numpy (building takes a few
per cent of the time); no symmetry but M is used. It imports nothing from the package.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

Bonds = Sequence[tuple[int, int, float]]


@dataclass
class Levels:
    """Ascending energies of one M >= 0 block; each counts twice where M > 0."""

    magnetic_number: float
    energy: np.ndarray

    @property
    def weight(self) -> int:
        """States each level stands for."""
        return 2 if self.magnetic_number > 0 else 1


def basis(sites: int, up: int) -> np.ndarray:
    """All integers below 2^sites with ``up`` bits set, ascending."""
    numbers = np.arange(1 << sites, dtype=np.int64)
    return numbers[np.bitwise_count(numbers) == up]


def block(states: np.ndarray, bonds: Bonds) -> np.ndarray:
    """The dense block of H on these states."""
    size = len(states)
    matrix = np.zeros((size, size))
    rows = np.arange(size)
    diagonal = np.zeros(size)
    for i, j, coupling in bonds:
        differ = ((states >> i) ^ (states >> j)) & 1 == 1
        diagonal += np.where(differ, -coupling / 4, coupling / 4)
        partners = states[differ] ^ ((1 << i) | (1 << j))
        columns = np.searchsorted(states, partners)
        # Two bonds may join the same pair of states when they join the same pair of sites.
        matrix[rows[differ], columns] += coupling / 2
    matrix[rows, rows] += diagonal
    return matrix


def all_levels(sites: int, bonds: Bonds) -> list[Levels]:
    """The complete spectrum, block by block."""
    found = []
    for up in range((sites + 1) // 2, sites + 1):
        matrix = block(basis(sites, up), bonds)
        found.append(Levels(up - sites / 2, np.linalg.eigvalsh(matrix)))
    return found


def thermodynamics(levels: list[Levels], temperature: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """C and chi (g = mu_B = k_B = 1) of the cluster at zero field."""
    energy = np.concatenate([block.energy for block in levels])
    weight = np.concatenate([np.full(len(b.energy), b.weight) for b in levels])
    square = np.concatenate([np.full(len(b.energy), b.magnetic_number**2) for b in levels])
    p = weight * np.exp(-(energy - energy.min()) / temperature[:, None])
    p /= p.sum(axis=1, keepdims=True)
    mean = p @ energy
    spread = (p * (energy - mean[:, None]) ** 2).sum(axis=1)
    return spread / temperature**2, p @ square / temperature


def ring(sites: int, coupling: float = 1.0) -> Bonds:
    """Nearest-neighbour bonds of a ring."""
    return [(i, (i + 1) % sites, coupling) for i in range(sites)]


def square(width: int, height: int, coupling: float = 1.0) -> Bonds:
    """Nearest-neighbour bonds of a periodic square lattice, width and height above two."""
    bonds = []
    for y in range(height):
        for x in range(width):
            here = x + width * y
            bonds.append((here, (x + 1) % width + width * y, coupling))
            bonds.append((here, x + width * ((y + 1) % height), coupling))
    return bonds
