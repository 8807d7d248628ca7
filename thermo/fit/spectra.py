"""Spectra by the direction of the couplings, kept in memory and, where asked, on disk.

Multiplying all couplings by λ > 0 multiplies all energies by λ and leaves their slopes as they
are; a reversed direction turns the spectrum upside down. So one solve serves a whole line.
"""

from __future__ import annotations

import hashlib
import json
import os
import tempfile
import zipfile
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Protocol

import numpy as np
from numpy.typing import NDArray

from thermo.errors import FileFormatError, SpectrumError
from thermo.model.level_slopes import SlopedLevels, check_slopes
from thermo.model.level_table import LevelTable, check_levels
from thermo.model.spin_model import SpinModel

Vector = NDArray[np.float64]

# Directions closer than this are the same: far above rounding, far below any step taken.
SAME_DIRECTION = 1e-13
# Numbers kept at once in levels and slopes; some 250 MiB.
MAX_NUMBERS_KEPT = 32_000_000
MAX_SPECTRA_KEPT = 256
# Kept files are read by this version of their layout only.
DISK_VERSION = 1


class Solver(Protocol):
    """What finds levels for given couplings.

    A solver that also has ``sloped(couplings) -> SlopedLevels`` gives exact derivatives; without
    it (or with ``can_slope`` false) they are taken by differences of solves.
    """

    def table(self, couplings: Mapping[str, float] | None = None) -> LevelTable:
        """All levels of the cluster."""


@dataclass(frozen=True, eq=False)
class Spectrum:
    """Levels for one direction of the couplings (largest |c| = 1), with ``slopes`` (P, L) by
    each coupling, or None where the solver gives levels only."""

    direction: Vector
    table: LevelTable
    slopes: Vector | None

    @property
    def size(self) -> int:
        """Numbers held."""
        return self.table.energy.size * 4 + (0 if self.slopes is None else self.slopes.size)

    def scaled(self, scale: float) -> LevelTable:
        """The levels at ``scale`` times the direction; all zero for scale 0."""
        if scale == 0:
            return replace(self.table, energy=np.zeros_like(self.table.energy), sampling=None)
        return self.table.scaled(scale)

    def reversed(self) -> Spectrum:
        """The spectrum of −H: energies change sign, slopes (of the same states) do not."""
        slopes = None if self.slopes is None else self.slopes[:, ::-1]
        return Spectrum(-self.direction, self.table.upside_down(), slopes)


class SpectrumCache:
    """Spectra by direction; ``n_solves`` counts real diagonalisations.

    ``folder`` keeps them on disk as well (made if need be; FileFormatError where it cannot be).
    """

    def __init__(
        self,
        solver: Solver,
        names: Sequence[str],
        model: SpinModel | None = None,
        folder: str | os.PathLike[str] | None = None,
    ) -> None:
        self.solver = solver
        self.names = tuple(names)
        self.n_solves = 0
        self.resolved = ""  # what the last table found resolves, as in a LevelTable
        self.exact = hasattr(solver, "sloped") and bool(getattr(solver, "can_slope", True))
        self._known: list[Spectrum] = []
        self._disk = None if folder is None or model is None else _Disk(folder, model)

    def spectrum(self, couplings: Vector, slopes: bool = False) -> tuple[Spectrum, float]:
        """The spectrum for the couplings' direction, and the scale λ ≥ 0 its energies are to be
        multiplied by (the largest |coupling|; 0 where all vanish). With ``slopes``, those are in
        it where the solver has any."""
        slopes = slopes and self.exact
        scale = float(np.abs(couplings).max(initial=0.0))
        if scale == 0:
            # Without couplings all energies vanish: any spectrum serves, scaled by nothing.
            usable = [k for k in self._known if k.slopes is not None or not slopes]
            return (usable[0] if usable else self._find(couplings, slopes)), 0.0
        direction = couplings / scale
        for sign in (1, -1):
            for k, known in enumerate(self._known):
                same = np.abs(known.direction - sign * direction).max(initial=0.0) <= SAME_DIRECTION
                if same and (known.slopes is not None or not slopes):
                    self._known.insert(0, self._known.pop(k))
                    return (known if sign > 0 else known.reversed()), scale
        return self._find(direction, slopes), scale

    def _find(self, direction: Vector, slopes: bool) -> Spectrum:
        found = None if self._disk is None else self._disk.read(direction, slopes)
        if found is None:
            found = self._solve(direction, slopes)
            if self._disk is not None:
                self._disk.write(found)
        self.resolved = found.table.resolved
        self._known.insert(0, found)
        while len(self._known) > 1 and (
            sum(k.size for k in self._known) > MAX_NUMBERS_KEPT
            or len(self._known) > MAX_SPECTRA_KEPT
        ):
            self._known.pop()
        return found

    def _solve(self, direction: Vector, slopes: bool) -> Spectrum:
        self.n_solves += 1
        couplings = {name: float(c) for name, c in zip(self.names, direction, strict=True)}
        if not slopes:
            return Spectrum(direction, self.solver.table(couplings), None)
        found: SlopedLevels = self.solver.sloped(couplings)  # type: ignore[attr-defined]
        order = [found.names.index(name) for name in self.names]
        return Spectrum(direction, found.table, found.slopes[order])


class _Disk:
    """Spectra of one model in a folder, one file each, written whole or not at all."""

    def __init__(self, folder: str | os.PathLike[str], model: SpinModel) -> None:
        self.folder = Path(folder)
        self.model = model
        self.names = tuple(model.couplings)
        # All that fixes the spectrum but the couplings' values.
        bare = model.with_couplings(dict.fromkeys(model.couplings, 1.0))
        self.digest = bare.digest
        try:
            self.folder.mkdir(parents=True, exist_ok=True)
            with tempfile.TemporaryFile(dir=self.folder):
                pass
        except OSError as error:
            raise FileFormatError(
                f"{self.folder}: spectra cannot be kept there ({error.strerror}); name another "
                "folder"
            ) from None

    def _path(self, direction: Vector) -> Path:
        rounded = [f"{c:.11e}" for c in direction]
        key = json.dumps([DISK_VERSION, self.digest, self.names, rounded])
        return self.folder / f"spectrum-{hashlib.sha256(key.encode()).hexdigest()[:32]}.npz"

    def read(self, direction: Vector, slopes: bool) -> Spectrum | None:
        """A kept spectrum, checked against the model like a fresh one; None where there is none
        that is whole, right and has what is asked for."""
        try:
            with (
                self._path(direction).open("rb") as file,
                np.load(file, allow_pickle=False) as kept,
            ):
                kept_direction = kept["direction"]
                if np.abs(kept_direction - direction).max(initial=0.0) > SAME_DIRECTION:
                    return None
                table = LevelTable(
                    kept["energy"], kept["weight"], kept["twice_spin"], kept["twice_m"],
                    str(kept["resolved"]), int(kept["n_sites"]),
                )  # fmt: skip
                by_coupling = kept["slopes"] if "slopes" in kept.files else None
            if slopes and by_coupling is None:
                return None
            values = dict(zip(self.names, direction.tolist(), strict=True))
            here = self.model.with_couplings(values)
            check_levels(table, here)
            if by_coupling is not None:
                check_slopes(SlopedLevels(table, self.names, by_coupling), here)
        except (OSError, ValueError, KeyError, EOFError, zipfile.BadZipFile, SpectrumError):
            return None
        return Spectrum(direction, table, by_coupling)

    def write(self, found: Spectrum) -> None:
        """Keep a full spectrum; a disk that is full is no reason to lose the fit."""
        table = found.table
        if table.sampling is not None:
            return
        arrays = {
            "direction": found.direction, "energy": table.energy, "weight": table.weight,
            "twice_spin": table.twice_spin, "twice_m": table.twice_m,
            "resolved": np.array(table.resolved), "n_sites": np.array(table.n_sites),
        }  # fmt: skip
        if found.slopes is not None:
            arrays["slopes"] = found.slopes
        temporary = None
        try:
            with tempfile.NamedTemporaryFile(dir=self.folder, delete=False) as file:
                temporary = Path(file.name)
                np.savez(file, **arrays)  # type: ignore[arg-type]
            temporary.replace(self._path(found.direction))
        except OSError:
            if temporary is not None:
                temporary.unlink(missing_ok=True)
