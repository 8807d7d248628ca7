"""Levels with what they say of the magnetic moment: its mean, and its response to a field.

The static (Kubo) susceptibility, with p_n = e^{−βE_n}/Z and X the moment between eigenstates, is
χ_ab = Σ_nk Re(X^a_nk X^b_kn) K_nk − β⟨m_a⟩⟨m_b⟩, K = (p_n − p_k)/(E_k − E_n), or βp_n for equal
energies (Van Vleck 1932; Kubo 1957). Both limits are sums over single levels: for a gap well
below T, K → β(p_n + p_k)/2 up to (gap/T)²/12; for any other gap the sum of 2 p_n/(E_k − E_n) over
n and k, which loses the digits of T/gap to cancellation. So each level keeps both sums, by decade
of the gap, and a temperature takes the first kind where T > ``SWITCH`` gap: either error is below
10⁻¹⁰ of the pair's part, at every T, and a table stays linear in the number of levels.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from thermo.errors import SpectrumError
from thermo.model.level_table import TRACE_TOLERANCE, LevelTable
from thermo.model.spin_model import SpinModel
from thermo.model.traces import exact_traces

# T over the upper end of a decade of gaps from which its states count as degenerate: then
# 1/(12 SWITCH²) = 9·10⁻¹¹ is left out, and below it 10·SWITCH·2⁻⁵³ = 3·10⁻¹¹ is lost.
SWITCH = 3e4
# Gaps below this fraction of the spectrum's width are none; the decades begin there.
DEGENERATE = 1e-12
CLASSES = 13

Array = NDArray[np.float64]


@dataclass(frozen=True, eq=False)
class ResponseTable:
    """Levels of H − b·m at one field b, with the moments m_a along K ``axes`` (K, 3).

    ``levels`` holds L levels, energies ascending. ``moment`` (L, K) is ⟨n|m_a|n⟩ in μ_B; ``near``
    (L, C, P) sums Re X^a_nk X^b_kn over the other states k by class of the gap, ``far`` the same
    over E_k − E_n (class 0: none), P = K(K+1)/2 pairs a ≤ b in the order 00, 01, …, 11, ….
    ``edges`` (C,) is the upper end of each class, in the energy unit. ``field`` (3,) is b = μ_B B.
    """

    levels: LevelTable
    moment: Array
    near: Array
    far: Array
    edges: Array
    axes: Array
    field: Array

    @property
    def in_field(self) -> bool:
        """Whether there is a field; without one the mean moment is zero by time reversal."""
        return bool(np.any(self.field))


def gap_edges(width: float) -> Array:
    """Upper ends (CLASSES,) of the classes of gaps for a spectrum no wider than ``width``."""
    return np.asarray(width * DEGENERATE * 10.0 ** np.arange(CLASSES), dtype=np.float64)


def pair_indices(count: int) -> list[tuple[int, int]]:
    """The pairs a ≤ b of ``count`` moments in the order that tables keep."""
    return [(a, b) for a in range(count) for b in range(a, count)]


def check_response(table: ResponseTable, model: SpinModel) -> None:
    """Hold a table against closed forms: number of states, Tr H, Tr H², Tr m_a m_b, Tr H m_a.

    With g the tensors and s = S(S+1): ⟨m_a m_b⟩ = Σ s (g gᵀ)_ab/3, and b adds ⟨(b·m)²⟩ to ⟨H²⟩ and
    −⟨(b·m) m_a⟩ to ⟨H m_a⟩; all else vanishes by time reversal. Raises SpectrumError.
    """
    n_states, mean, mean_square = exact_traces(model)
    share = table.levels.weight / n_states
    energy = table.levels.energy
    square = sum(s.spin * (s.spin + 1) / 3 * (s.g @ s.g.T) for s in model.sites)
    zeeman = float(table.field @ square @ table.field)
    scale = max(mean_square + zeeman, 1e-300)
    wanted = table.axes @ square @ table.axes.T
    size = float(np.trace(wanted)) or 1.0
    found = np.einsum("n,ncp->p", share, table.near)
    index = pair_indices(len(table.axes))
    found += [share @ (table.moment[:, a] * table.moment[:, b]) for a, b in index]
    exact = np.array([wanted[a, b] for a, b in index])
    mixed = (share * energy) @ table.moment + table.axes @ square @ table.field
    faults = (
        abs(share.sum() - 1),
        abs(share @ energy - mean) / scale**0.5,
        abs(share @ energy**2 - mean_square - zeeman) / scale,
        np.abs(found - exact).max() / size,
        np.abs(mixed).max() / (scale * size) ** 0.5 if table.in_field else 0.0,
    )
    names = ("number of states", "trace of H", "trace of H²", "trace of the squared moment",
             "trace of H times the moment")  # fmt: skip
    for name, fault in zip(names, faults, strict=True):
        if not fault <= TRACE_TOLERANCE:
            raise SpectrumError(
                f"the levels with their moments miss the {name} by {fault:.1e} of its size; they "
                "are not a result, please report it with the model file"
            )
