"""``correlations``: from a model to ⟨S_i·S_j⟩ of every class of pairs and to S(q)."""

from __future__ import annotations

import json
from collections.abc import Callable
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import ArrayLike, NDArray

from thermo import units as constants
from thermo.ensemble.correlations import level_averages, structure_weights
from thermo.ensemble.thermodynamics import axis_values, moment_unavailable
from thermo.errors import MemoryLimitError, UnavailableError
from thermo.model.positions import site_positions, wave_vectors, why_no_wave_vectors
from thermo.model.spin_model import SpinModel
from thermo.spectrum import planning
from thermo.spectrum.correlators import correlated_levels
from thermo.spectrum.labels import versions
from thermo.spectrum.memory import memory_limit, size_text
from thermo.symmetry.interaction import conserved, interaction
from thermo.symmetry.pairs import PairClasses, pair_classes

if TYPE_CHECKING:
    import xarray as xr

Array = NDArray[np.float64]


def correlations(
    model: SpinModel,
    temperature: ArrayLike,
    field: ArrayLike = 0.0,
    *,
    components: bool | None = None,
    memory: int | float | str | None = None,
    progress: Callable[[float, str], None] | None = None,
) -> xr.Dataset:
    """Thermal correlations ⟨S_i·S_j⟩ of every symmetry-distinct pair, and the structure factor.

    Parameters
    ----------
    temperature : (nT,) increasing, above zero, in K (in the energy unit if dimensionless).
    field : number or (nB,) increasing, along z, in T (g·field is the Zeeman energy of one unit
        of M if dimensionless). Other than zero only for models that conserve M and have one
        isotropic g, else UnavailableError.
    components : whether ⟨SᵃᵢSᵃⱼ⟩ along x, y and z are wanted as well; default: where the model
        is anisotropic. Without anisotropy and field they are a third of the whole; in a field
        True gives them, at the price of a spectrum resolved by M.
    memory, progress : as in ``solve``.

    Returns a dataset with dimensions temperature, field and pair_class: ``correlation`` (and
    ``correlation_xx``, ``_yy``, ``_zz``), dimensionless, averages of full products: ⟨S_i⟩·⟨S_j⟩
    of a magnetised cluster is not taken off. A class holds all pairs that the site permutations
    of H make alike, single sites (i = j) first; ``class_of_pair`` gives that of any two sites.
    For periodic clusters of a cell or a lattice also ``structure_factor`` over ``wave_vector``,
    S(q) = (1/N) Σ_ij e^{iq(r_i−r_j)} ⟨S_i·S_j⟩ per site, at the reciprocal vectors of the
    superlattice, over as many zones as the places in the cell need; where there is none, the
    attribute ``structure_factor_unavailable`` says why. Σ_q S(q) = (Q/N) Σ_i S_i(S_i+1) over
    these Q vectors.

    From the full spectrum: accuracy about 10⁻¹² of S². Cost: eigenvectors of every block, 5 to
    10 times the time of ``solve`` and three times its memory; MemoryLimitError before anything
    large is allocated, SpectrumError if a self-check fails.
    """
    from thermo.variables import build_correlations

    planning.check_model(model, "correlations")
    t = axis_values(temperature, "temperature", positive=True)
    b = axis_values(field, "field", positive=False)
    kept = conserved(interaction(model))
    if np.any(b != 0) and (reason := moment_unavailable(model, kept.name)) is not None:
        raise UnavailableError(f"correlations in a field are not available: {reason}")
    if components is None:
        components = not kept.total_spin
    without = why_no_wave_vectors(model)
    q = wave_vectors(model) if without is None else np.empty((0, 1))
    # Counted before the work: the classes need no state.
    columns = len(pair_classes(interaction(model)).first) + len(q)
    _check_memory(len(t) * len(b), 4 if components else 1, columns, memory)
    found = correlated_levels(model, components, memory, progress)
    kelvin = constants.kelvin_per(model.energy_unit)
    zeeman = b * ((model.common_g or 0.0) * constants.tesla_to_energy(model.energy_unit))
    classes = found.classes
    arrays = _described(model, classes) | {"temperature": t, "field": b}
    if without is None:
        weights = structure_weights(classes.of_pair, site_positions(model), q, len(classes.first))
        arrays["wave_vector"] = q
    for name, values in found.values.items():
        suffix = "" if name == "total" else f"_{name}"
        average = level_averages(found.table, values, t / kelvin, zeeman)
        arrays["correlation" + suffix] = np.moveaxis(average, 0, -1)
        if without is None:
            arrays["structure_factor" + suffix] = np.einsum("qk,ktb->tbq", weights, average)
    attrs: dict[str, Any] = {
        "title": model.title,
        "method": "full",
        "energy_unit": model.energy_unit,
        "bond_term": model.bond_term,
        "n_sites": len(model.sites),
        "model_text": model.text,
        "model_digest": model.digest,
        "model_couplings": json.dumps({k: float(v) for k, v in model.couplings.items()}),
        "field_direction": "any" if kept.total_spin and not components else "z",
        "versions": json.dumps(versions()),
    }
    if without is not None:
        attrs["structure_factor_unavailable"] = without
    return build_correlations(arrays, attrs)


def _described(model: SpinModel, classes: PairClasses) -> dict[str, Any]:
    names = [site.name for site in model.sites]
    pairs = zip(classes.first.tolist(), classes.second.tolist(), strict=True)
    return {
        "pair_name": [names[i] if i == j else f"{names[i]} - {names[j]}" for i, j in pairs],
        "pair_first": classes.first,
        "pair_second": classes.second,
        "pair_count": classes.count,
        "site_name": names,
        "class_of_pair": classes.of_pair,
    }


def _check_memory(points: int, forms: int, columns: int, memory: int | float | str | None) -> None:
    """Refuse a grid that would not fit, with the arrays the sums need beside the result."""
    size, limit = 3 * 8 * points * forms * columns, memory_limit(memory)
    if size > limit:
        raise MemoryLimitError(
            f"correlations of {columns} pair classes and wave vectors at {points} temperatures "
            f"and fields need {size_text(size)} where the limit is {size_text(limit)}; give fewer "
            "of either, or do a few at a time"
        )
