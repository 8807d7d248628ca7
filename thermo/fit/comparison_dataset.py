"""A comparison of candidates as a dataset for files, tables and pictures."""

from __future__ import annotations

import json
import math
from typing import TYPE_CHECKING, Any

import numpy as np

from thermo.fit.dataset import ROLES, fine_lines
from thermo.fit.provenance import excluded_arrays
from thermo.variables import build_comparison

if TYPE_CHECKING:
    import xarray as xr

    from thermo.fit.candidates import Comparison


def comparison_dataset(comparison: Comparison) -> xr.Dataset:
    """The ``comparison`` dataset: every data set and instrument in its own units."""
    candidates = comparison.candidates
    results = [c.result for c in candidates]
    sets = results[0].sets
    names = [item.data.name for item in sets]
    arrays: dict[str, Any] = {
        "candidate_name": [c.name for c in candidates],
        "candidate_model": [r.study.model.title for r in results],
        "candidate_bond_term": [r.study.model.bond_term for r in results],
        "candidate_digest": [r.study.model.digest for r in results],
        "candidate_remark": [c.remark for c in candidates],
        "candidate_parameters": [c.n_parameters for c in candidates],
        "candidate_chi_square": [r.chi_square for r in results],
        "candidate_reduced_chi_square": [r.reduced_chi_square for r in results],
        "candidate_probability": [c.probability for c in candidates],
        "candidate_aicc": [c.aicc for c in candidates],
        "candidate_bic": [c.bic for c in candidates],
        "candidate_aicc_weight": [c.aicc_weight for c in candidates],
        "candidate_bic_weight": [c.bic_weight for c in candidates],
        "candidate_converged": [int(r.converged) for r in results],
        "candidate_standing": [int(c.standing) for c in candidates],
        "candidate_runs": [[c.runs[n] for n in names] for c in candidates],
        "candidate_durbin_watson": [[c.durbin_watson[n] for n in names] for c in candidates],
    }
    shown = [
        (k, e) for k, r in enumerate(results) for e in r.parameters if np.isfinite(e.value)
    ]  # fmt: skip
    arrays |= {
        "parameter_candidate": [k for k, _ in shown],
        "parameter_name": [e.name for _, e in shown],
        "parameter_units": [e.unit for _, e in shown],
        "parameter_role": [ROLES[e.status] for _, e in shown],
        "value": [e.value for _, e in shown],
        "standard_error": [e.standard_error for _, e in shown],
    }
    data = [item.data for item in sets]
    stated = results[0].error_basis == "stated"
    lines = [(k, d, points) for k, d in enumerate(data) for points in fine_lines(d)]
    windows = [c.result.window for c in candidates if c.standing and c.result.window is not None]
    arrays |= {
        "temperature": np.concatenate([d.temperature for d in data]),
        "field": np.concatenate([d.field for d in data]),
        "observed": np.concatenate([d.value / d.to_si for d in data]),
        "uncertainty": np.concatenate(
            [s.uncertainty / s.data.to_si if stated else np.full(s.data.n_points, np.nan)
             for s in sets]
        ),
        "predicted": [
            np.concatenate([s.fitted / s.data.to_si for s in r.sets]) for r in results
        ],
        "point_dataset": np.concatenate([np.full(d.n_points, k) for k, d in enumerate(data)]),
        "dataset_name": names,
        "dataset_quantity": [d.quantity for d in data],
        "dataset_units": [d.units for d in data],
        "dataset_per": [d.per for d in data],
        "dataset_window": [_edge([w.lower[n] for w in windows]) for n in names],
        "curve_temperature": np.concatenate([p.temperature for _, _, p in lines]),
        "curve_field": np.concatenate([p.field for _, _, p in lines]),
        "curve_dataset": np.concatenate([np.full(len(p.field), k) for k, _, p in lines]),
        "curve_predicted": [
            np.concatenate([r.forward.predict(p, r.values) / d.to_si for _, d, p in lines])
            for r in results
        ],
    }  # fmt: skip
    if results[0].window is not None:
        arrays |= excluded_arrays(results[0].window, names)
    arrays |= _proposals(comparison)
    energy_units = {r.study.model.energy_unit for r in results}
    return build_comparison(
        arrays,
        {
            "title": comparison.title,
            "energy_unit": energy_units.pop() if len(energy_units) == 1 else "K",
            "verdict": comparison.verdict,
            "conclusion": comparison.conclusion,
            "cautions": "\n".join(comparison.cautions),
            "proposals": "\n".join(str(p) for p in comparison.proposals),
            "error_basis": results[0].error_basis,
            "candidate_texts": json.dumps(
                {c.name: c.result.study.model.text for c in candidates}, ensure_ascii=False
            ),
            "study_text": comparison.text,
        },
    )


def _edge(edges: list[float]) -> float:
    """The highest of the candidates' edges, NaN where one is not known."""
    if any(math.isnan(edge) for edge in edges) or not edges:
        return math.nan
    return max(edges)


def _proposals(comparison: Comparison) -> dict[str, Any]:
    found = comparison.proposals
    if not found:
        return {}
    names = [c.name for c in comparison.candidates]
    return {
        "proposal_name": [p.instrument.name for p in found],
        "proposal_quantity": [p.instrument.quantity for p in found],
        "proposal_units": [p.instrument.units for p in found],
        "proposal_per": [p.instrument.per for p in found],
        "proposal_temperature": [p.temperature for p in found],
        "proposal_field": [p.field for p in found],
        "proposal_separation": [p.separation for p in found],
        "proposal_precision": [p.precision / p.instrument.to_si for p in found],
        "proposal_first": [names.index(p.first) for p in found],
        "proposal_second": [names.index(p.second) for p in found],
        "proposal_predicted": [
            [p.predicted.get(name, math.nan) / p.instrument.to_si for p in found]
            for name in names
        ],
        "map_temperature": np.concatenate([p.grid.temperature for p in found]),
        "map_field": np.concatenate([p.grid.field for p in found]),
        "map_proposal": np.concatenate([np.full(len(p.map), k) for k, p in enumerate(found)]),
        "map_separation": np.concatenate([p.map for p in found]),
    }  # fmt: skip
