"""The interaction as tensors per pair of sites, and what it conserves.

Everything symmetry needs to know of a model is here: one 3×3 tensor (or one per named
coupling) for each pair of sites and for each ion.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from thermo.model.spin_model import SpinModel

# Two tensor elements closer than this fraction of the largest are the same number.
RELATIVE_TOLERANCE = 1e-12


@dataclass(frozen=True, eq=False)
class Interaction:
    """Tensors of a model, axis 0 running over P channels.

    ``pair[(i, j)]`` with i < j has shape (P, 3, 3) and stands for Σ_p c_p S_iᵀ A_p S_j;
    ``ion[i]`` likewise for c_p S_iᵀ D_p S_i. With ``generic`` channels there is one channel
    per named coupling (symmetric for *every* value of the couplings); otherwise P = 1 and the
    couplings' values are summed in. ``scale`` holds each channel's largest term.
    """

    twice_spin: NDArray[np.int64]
    pair: dict[tuple[int, int], NDArray[np.float64]]
    ion: dict[int, NDArray[np.float64]]
    names: tuple[str, ...]
    scale: NDArray[np.float64]

    @property
    def n_sites(self) -> int:
        """Number of sites N."""
        return len(self.twice_spin)

    def vanishing(self, tensor: NDArray[np.float64]) -> bool:
        """Whether a (P, …) array of tensor elements is zero to rounding in every channel."""
        flat = np.abs(tensor.reshape(len(self.scale), -1))
        return bool(np.all(flat <= RELATIVE_TOLERANCE * self.scale[:, None]))

    def all_tensors(self) -> list[NDArray[np.float64]]:
        """Every pair and ion tensor."""
        return [*self.pair.values(), *self.ion.values()]


def interaction(model: SpinModel, generic: bool = False) -> Interaction:
    """Collect a model's tensors; terms that cancel or have zero coupling are dropped.

    With ``generic`` the couplings stay apart, so whatever symmetry is found holds for all
    their values.
    """
    names = tuple(model.couplings)
    index = {name: p for p, name in enumerate(names)}
    n_channels = len(names)
    pair: dict[tuple[int, int], NDArray[np.float64]] = {}
    ion: dict[int, NDArray[np.float64]] = {}
    largest = np.zeros(n_channels)
    for bond in model.bonds:
        p = index[bond.coupling]
        largest[p] = max(largest[p], np.abs(bond.matrix).max())
        ordered = (bond.i, bond.j) if bond.i < bond.j else (bond.j, bond.i)
        matrix = bond.matrix if bond.i < bond.j else bond.matrix.T
        pair.setdefault(ordered, np.zeros((n_channels, 3, 3)))[index[bond.coupling]] += matrix
    for term in model.ions:
        p = index[term.coupling]
        largest[p] = max(largest[p], np.abs(term.matrix).max())
        ion.setdefault(term.site, np.zeros((n_channels, 3, 3)))[index[term.coupling]] += term.matrix
    if not generic:
        values = np.array([model.couplings[name] for name in names])
        pair = {key: np.tensordot(values, a, 1)[None] for key, a in pair.items()}
        ion = {key: np.tensordot(values, a, 1)[None] for key, a in ion.items()}
        # Terms may cancel; what is zero to rounding is judged by what went into the sums.
        largest = np.array([np.max(np.abs(values) * largest, initial=0.0)])
    scale = largest
    found = Interaction(
        twice_spin=np.array([round(2 * s.spin) for s in model.sites], dtype=np.int64),
        pair=pair,
        ion=ion,
        names=names if generic else ("total",),
        scale=scale,
    )
    keep_pair = {key: a for key, a in pair.items() if not found.vanishing(a)}
    # A quadrupole acts on spin 1 and above only; on spin ½ it is a constant, kept for its trace.
    keep_ion = {key: a for key, a in ion.items() if not found.vanishing(a)}
    return Interaction(found.twice_spin, keep_pair, keep_ion, found.names, scale)


@dataclass(frozen=True)
class Conserved:
    """What the interaction conserves.

    ``modulus`` says how: 0 means M itself; 2 means M modulo 2 (terms that change M change it
    by two); 1 means nothing. ``total_spin`` needs isotropic terms only. ``reversal`` is the
    twofold rotation about x, |m⟩ → |−m⟩ on every site. ``real`` says that H is real in the
    Sᶻ basis, so complex conjugation commutes with it.
    """

    modulus: int
    total_spin: bool
    reversal: bool
    real: bool

    @property
    def name(self) -> str:
        """The strongest conserved magnetic number, in words used by files and tables."""
        if self.total_spin:
            return "total_spin"
        return {0: "magnetic_number", 2: "parity", 1: "none"}[self.modulus]


def conserved(terms: Interaction) -> Conserved:
    """Decide what an interaction conserves from its tensors alone (no state is built)."""

    def zero(*elements: tuple[int, int]) -> bool:
        return all(
            terms.vanishing(np.stack([a[:, x, y] for x, y in elements], axis=1))
            for a in terms.all_tensors()
        )

    axial = all(
        terms.vanishing(
            np.stack([a[:, 0, 0] - a[:, 1, 1], a[:, 0, 1] + a[:, 1, 0]], axis=1),
        )
        for a in terms.all_tensors()
    )
    untilted = zero((0, 2), (2, 0), (1, 2), (2, 1))
    isotropic = all(
        terms.vanishing(a - np.trace(a, axis1=1, axis2=2)[:, None, None] * np.eye(3) / 3)
        for a in terms.all_tensors()
    )
    return Conserved(
        modulus=(0 if axial else 2) if untilted else 1,
        total_spin=isotropic,
        reversal=zero((0, 1), (1, 0), (0, 2), (2, 0)),
        real=zero((0, 1), (1, 0), (1, 2), (2, 1)),
    )
