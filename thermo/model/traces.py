"""Exact traces of H from the couplings alone, against which every spectrum is checked."""

from __future__ import annotations

import numpy as np

from thermo.model.spin_model import Matrix, SpinModel


def total_matrices(
    model: SpinModel,
) -> tuple[dict[tuple[int, int], Matrix], dict[int, Matrix]]:
    """H at the model's couplings as one matrix for each pair and each site, in the energy unit.

    The first dict maps (i, j), i < j, to A (3×3) of S_iᵀ A S_j; the second maps a site to D
    (3×3, symmetric) of Sᵀ D S. Terms that vanish are left out.
    """
    pairs: dict[tuple[int, int], Matrix] = {}
    singles: dict[int, Matrix] = {}
    for bond in model.bonds:
        pair, a = (bond.i, bond.j), bond.matrix
        if bond.i > bond.j:
            pair, a = (bond.j, bond.i), bond.matrix.T
        pairs[pair] = pairs.get(pair, np.zeros((3, 3))) + model.couplings[bond.coupling] * a
    for ion in model.ions:
        d = model.couplings[ion.coupling] * ion.matrix
        singles[ion.site] = singles.get(ion.site, np.zeros((3, 3))) + d
    return (
        {pair: a for pair, a in pairs.items() if a.any()},
        {site: d for site, d in singles.items() if d.any()},
    )


def exact_traces(model: SpinModel) -> tuple[int, float, float]:
    """Number of states n, Tr H / n and Tr H² / n (energy unit, and its square), field zero.

    Closed forms, with s = S(S+1) and ⟨·⟩ = Tr/n: ⟨S^a S^b⟩ = δ_ab s/3, so a pair adds
    s_i s_j |A|²/9 to the variance; a site adds s Tr D/3 to the mean and, by rotational
    invariance of its traceless part D₀ (rank 2, and ⟨(S_z² − s/3)²⟩ = s(4s−3)/45),
    s(4s−3)|D₀|²/30 to the variance. Every cross term vanishes.
    """
    pairs, singles = total_matrices(model)
    casimir = [site.spin * (site.spin + 1) for site in model.sites]
    mean = variance = 0.0
    for (i, j), a in pairs.items():
        variance += casimir[i] * casimir[j] / 9 * float((a * a).sum())
    for site, d in singles.items():
        s = casimir[site]
        trace = float(np.trace(d))
        mean += s * trace / 3
        traceless = d - trace / 3 * np.eye(3)
        variance += s * (4 * s - 3) / 30 * float((traceless * traceless).sum())
    return model.n_states, mean, variance + mean * mean
