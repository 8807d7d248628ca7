"""A table of levels with everything its file must say."""

from __future__ import annotations

import json
import platform
from collections.abc import Mapping
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from thermo.model.level_table import LevelTable
from thermo.model.spin_model import SpinModel
from thermo.symmetry.sectors import SymmetryPlan

if TYPE_CHECKING:
    import xarray as xr


def versions() -> dict[str, str]:
    """Versions of what the numbers depend on."""
    import numba
    import scipy

    return {
        "python": platform.python_version(),
        "numpy": np.__version__,
        "scipy": scipy.__version__,
        "numba": numba.__version__,
    }


def levels_dataset(
    model: SpinModel,
    plan: SymmetryPlan,
    table: LevelTable,
    sector: NDArray[np.int64],
    attrs: Mapping[str, Any],
) -> xr.Dataset:
    """Label a table of levels; ``sector`` (L,) are indices into ``plan.sectors``, ``attrs`` must
    give the method and the seed."""
    from thermo.variables import build_levels

    def halved(twice: NDArray[np.int64]) -> NDArray[np.float64]:
        return np.where(twice < 0, np.nan, twice / 2)

    known_m = plan.conserved.modulus == 0
    arrays: dict[str, Any] = {
        "energy": table.energy,
        "weight": table.weight,
        "total_spin": halved(table.twice_spin),
        "magnetic_number": halved(table.twice_m),
        "vector": np.full(len(table.energy), -1),
        "sector": sector,
    }
    more: dict[str, Any] = {}
    if (sampling := table.sampling) is not None:
        # The vectors of a sector are numbered from 0; unit counts them through all sectors.
        first = np.searchsorted(sampling.unit_sector, sampling.unit_sector)
        number = np.arange(len(first)) - first
        sampled = sampling.unit >= 0
        arrays["vector"][sampled] = number[sampling.unit[sampled]]
        arrays["raw_weight"] = sampling.raw_weight
        arrays["trace"] = sampling.moments
        arrays["trace_order_used"] = sampling.orders
        arrays["trace_magnetic_number"] = [
            abs(m.twice_m) / 2 if known_m else np.nan for m in plan.magnetic
        ]
        more = {"trace_center": sampling.center, "trace_scale": sampling.scale}
    return build_levels(
        arrays,
        {
            "dimension": [s.dimension for s in plan.sectors],
            "multiplicity": [float(s.multiplicity) for s in plan.sectors],
            "magnetic_number": [s.twice_m / 2 if known_m else np.nan for s in plan.sectors],
            "real": [int(s.real) for s in plan.sectors],
        },
        {
            "title": model.title,
            "resolved": table.resolved,
            "model_text": model.text,
            "model_digest": model.digest,
            "model_couplings": json.dumps({k: float(v) for k, v in model.couplings.items()}),
            "energy_unit": model.energy_unit,
            "bond_term": model.bond_term,
            "n_sites": len(model.sites),
            "ions_per_formula": float(model.ions_per_formula),
            "versions": json.dumps(versions()),
            **more,
            **attrs,
        },
    )
