"""Levels as plain arrays, the check every spectrum must pass, and reading levels back.

A spectrum is a table of levels with weights; full and sampled spectra share it.
"""

from __future__ import annotations

import json
import os
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from thermo.errors import FileFormatError, PartitaError, SpectrumError
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
    M), or "parity" / "none" (the magnetic moment is not known from the levels).
    """

    energy: NDArray[np.float64]
    weight: NDArray[np.float64]
    twice_spin: NDArray[np.int64]
    twice_m: NDArray[np.int64]
    resolved: str
    n_sites: int

    def scaled(self, factor: float) -> LevelTable:
        """The table of factor·H, factor > 0."""
        if not factor > 0:
            raise SpectrumError(f"levels cannot be scaled by {factor}; use a positive number")
        return LevelTable(
            self.energy * factor,
            self.weight,
            self.twice_spin,
            self.twice_m,
            self.resolved,
            self.n_sites,
        )


def check_levels(table: LevelTable, model: SpinModel) -> None:
    """Hold a spectrum against Σw = Π(2S+1), Tr H and Tr H² of its model.

    Raises SpectrumError on a mismatch. Cost: one pass over the levels.
    """
    n_states, mean, mean_square = exact_traces(model)
    found_states = float(table.weight.sum())
    share = table.weight / n_states
    found_mean = float(share @ table.energy)
    found_square = float(share @ table.energy**2)
    scale = max(mean_square, 1e-300)
    faults = []
    if abs(found_states - n_states) > TRACE_TOLERANCE * n_states:
        faults.append(f"{found_states:.10g} states instead of {n_states}")
    if abs(found_mean - mean) > TRACE_TOLERANCE * scale**0.5:
        faults.append(f"a mean energy of {found_mean:.10g} instead of {mean:.10g}")
    if abs(found_square - mean_square) > TRACE_TOLERANCE * scale:
        faults.append(f"a mean square of {found_square:.10g} instead of {mean_square:.10g}")
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

    return LevelTable(
        np.asarray(levels["energy"].values, dtype=np.float64),
        np.asarray(levels["weight"].values, dtype=np.float64),
        doubled("total_spin"),
        doubled("magnetic_number"),
        str(levels.attrs["resolved"]),
        int(levels.attrs["n_sites"]),
    )


def model_from_dataset(levels: xr.Dataset) -> SpinModel:
    """The model a levels dataset was solved for, rebuilt from its attributes."""
    from thermo.model.reading import read_model_text

    try:
        model = read_model_text(str(levels.attrs["model_text"]))
        model = model.with_couplings(json.loads(str(levels.attrs["model_couplings"])))
    except (KeyError, ValueError, PartitaError) as fault:
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
        check_levels(table_from_dataset(dataset), model)
    except PartitaError as fault:
        raise type(fault)(f"{os.fspath(path)}: {fault}") from None
    return dataset
