"""Levels as plain arrays, the check every spectrum must pass, and reading levels back.

A spectrum is a table of levels with weights; full and sampled spectra share it.
"""

from __future__ import annotations

import json
import os
from dataclasses import dataclass, replace
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from thermo.errors import FileFormatError, PartitaError, SpectrumError
from thermo.model.calibration import Sampling, sampling_from_dataset, trace_misfit
from thermo.model.spin_model import SpinModel
from thermo.model.traces import exact_traces

if TYPE_CHECKING:
    import xarray as xr

# Relative misfit of the traces that rounding can cause; real faults are many orders larger.
TRACE_TOLERANCE = 1e-9


@dataclass(frozen=True, eq=False)
class LevelTable:
    """Levels of one cluster, energies ascending, in the model's energy unit.

    ``energy``, ``weight`` (number of states) have shape (L,). ``twice_spin`` (2S) and
    ``twice_m`` (2|M|) are −1 where not resolved; ``resolved`` says which holds for the table:
    "total_spin" (a level counts its 2S+1 states), "magnetic_number" (it counts both signs of
    M), or "parity" / "none" (the magnetic moment is not known from the levels). ``sampling``
    says where the levels of a sampled spectrum come from; None for a full one.
    """

    energy: NDArray[np.float64]
    weight: NDArray[np.float64]
    twice_spin: NDArray[np.int64]
    twice_m: NDArray[np.int64]
    resolved: str
    n_sites: int
    sampling: Sampling | None = None

    def scaled(self, factor: float) -> LevelTable:
        """The table of factor·H, factor > 0."""
        if not factor > 0:
            raise SpectrumError(f"levels cannot be scaled by {factor}; use a positive number")
        sampling = self.sampling.scaled(factor) if self.sampling is not None else None
        return replace(self, energy=self.energy * factor, sampling=sampling)

    def upside_down(self) -> LevelTable:
        """The table of −H."""
        return replace(
            self,
            energy=-self.energy[::-1],
            weight=self.weight[::-1],
            twice_spin=self.twice_spin[::-1],
            twice_m=self.twice_m[::-1],
            sampling=self.sampling.upside_down() if self.sampling is not None else None,
        )


RESOLVED = ("total_spin", "magnetic_number", "parity", "none")


def energy_scale(model: SpinModel) -> float:
    """The largest coupling times tensor element, in the energy unit; 0 without any term."""
    terms = [(bond.coupling, bond.matrix) for bond in model.bonds]
    terms += [(ion.coupling, ion.matrix) for ion in model.ions]
    return max((abs(model.couplings[c]) * float(np.abs(a).max()) for c, a in terms), default=0.0)


def _mean_square_m(table: LevelTable) -> float | None:
    """Tr M² over the number of states, from the levels' labels; None where M is not resolved."""
    if table.resolved == "total_spin":
        square = table.twice_spin * (table.twice_spin + 2) / 12
    elif table.resolved == "magnetic_number":
        square = table.twice_m**2 / 4
    else:
        return None
    return float(table.weight @ square / table.weight.sum())


def check_levels(table: LevelTable, model: SpinModel) -> None:
    """Hold a spectrum against Σw = Π(2S+1), Tr H, Tr H² and, where M is resolved, Tr M².

    Sampled levels need to meet Tr H and Tr H² only where they were calibrated to them; the
    traces they claim to meet, they must. Raises SpectrumError on a mismatch. Cost: one pass over
    the levels.
    """
    unit = energy_scale(model) or 1.0
    scaled = model.with_couplings({name: c / unit for name, c in model.couplings.items()})
    n_states, mean, mean_square = exact_traces(scaled)
    found_states = float(table.weight.sum())
    share = table.weight / n_states
    found_mean = float(share @ (table.energy / unit))
    found_square = float(share @ (table.energy / unit) ** 2)
    # Terms that cancel to rounding count as zero (symmetry/interaction.py).
    scale = max(mean_square, 1e-20)
    faults = []
    square_m = _mean_square_m(table)
    exact_m = float(np.sum(model.spins * (model.spins + 1)) / 3)
    if square_m is not None and not abs(square_m - exact_m) <= TRACE_TOLERANCE * exact_m:
        faults.append(f"a mean square of M of {square_m:.10g} instead of {exact_m:.10g}")
    if not abs(found_states - n_states) <= TRACE_TOLERANCE * n_states:
        faults.append(f"{found_states:.10g} states instead of {n_states}")
    order = 2 if table.sampling is None else int(table.sampling.orders.min(initial=2))
    if order >= 1 and not abs(found_mean - mean) <= TRACE_TOLERANCE * scale**0.5:
        faults.append(f"a mean energy of {found_mean * unit:.10g} instead of {mean * unit:.10g}")
    if order >= 2 and not abs(found_square - mean_square) <= TRACE_TOLERANCE * scale:
        found, exact = found_square**0.5 * unit, mean_square**0.5 * unit
        faults.append(f"a root mean square energy of {found:.10g} instead of {exact:.10g}")
    if table.sampling is not None and not trace_misfit(table, table.sampling) <= TRACE_TOLERANCE:
        faults.append("weights that do not reproduce the traces they were calibrated to")
    if faults:
        raise SpectrumError(
            f"the levels fail their check against the model: {', '.join(faults)}; "
            "they are not a result, solve the model again"
        )


def table_from_dataset(levels: xr.Dataset) -> LevelTable:
    """The plain arrays of a levels dataset."""

    def doubled(name: str) -> NDArray[np.int64]:
        values = np.asarray(levels[name].values, dtype=np.float64)
        return np.where(np.isnan(values), -1, np.round(2 * np.nan_to_num(values))).astype(np.int64)

    resolved = levels.attrs["resolved"]
    spin, m = doubled("total_spin"), doubled("magnetic_number")
    labelled = {"total_spin": spin, "magnetic_number": m}.get(str(resolved))
    if str(resolved) not in RESOLVED or (labelled is not None and np.any(labelled < 0)):
        raise FileFormatError(
            f"the levels are said to be resolved by {str(resolved)[:40]!r} but do not carry it; "
            "solve the model again"
        )
    return LevelTable(
        np.asarray(levels["energy"].values, dtype=np.float64),
        np.asarray(levels["weight"].values, dtype=np.float64),
        spin,
        m,
        str(resolved),
        int(levels.attrs["n_sites"]),
        sampling_from_dataset(levels),
    )


def model_from_dataset(levels: xr.Dataset) -> SpinModel:
    """The model a levels dataset was solved for, rebuilt from its attributes."""
    from thermo.model.reading import read_model_text

    try:
        model = read_model_text(str(levels.attrs["model_text"]))
        model = model.with_couplings(json.loads(str(levels.attrs["model_couplings"])))
    except (KeyError, ValueError, TypeError, AttributeError, PartitaError) as fault:
        raise FileFormatError(
            f"the model kept in the levels cannot be read ({fault}); solve the model again"
        ) from None
    return model


def read_levels(path: str | os.PathLike[str]) -> xr.Dataset:
    """Read a levels file and check it: digest of its model, number of states, traces.

    Raises FileFormatError for a foreign or damaged file, SpectrumError for levels that do not
    belong to the model they claim.
    """
    return read_checked(path, kind="levels")


def read_checked(path: str | os.PathLike[str], kind: str | None = None) -> xr.Dataset:
    """Read a Partita file of any kind, or of the stated one; levels must pass ``read_levels``'
    checks. Raises FileFormatError or SpectrumError, one sentence that leads with the file."""
    from thermo.storage import read_dataset

    dataset = read_dataset(path, kind=kind)
    if dataset.attrs["content"] != "levels":
        return dataset
    try:
        model = model_from_dataset(dataset)
        if model.digest != dataset.attrs["model_digest"]:
            raise FileFormatError(
                "the model's text and its digest disagree, so the file was changed after it was "
                "written; solve the model again"
            )
        for name, value in (
            ("n_sites", len(model.sites)),
            ("energy_unit", model.energy_unit),
            ("ions_per_formula", model.ions_per_formula),
        ):
            stored = dataset.attrs.get(name, "")
            if np.shape(stored) != () or stored != value:
                raise FileFormatError(
                    f"attribute {name} disagrees with the model kept in the file; solve the model "
                    "again"
                )
        check_levels(table_from_dataset(dataset), model)
    except PartitaError as fault:
        raise type(fault)(f"{os.fspath(path)}: {fault}") from None
    return dataset
