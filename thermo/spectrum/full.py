"""Full spectra: every block dense, eigenvalues by LAPACK, levels with exact multiplicities."""

from __future__ import annotations

import functools
from collections.abc import Callable, Iterator, Mapping
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from thermo.errors import SpectrumError, UnavailableError
from thermo.hilbert import blocks, encoding, operators
from thermo.hilbert.orbits import Links, Orbits, find_images, find_links, find_orbits
from thermo.hilbert.slopes import block_slopes
from thermo.model.level_slopes import (
    ExactMoments,
    SlopedLevels,
    check_slopes,
    exact_moments,
)
from thermo.model.level_table import LevelTable, check_levels, energy_scale
from thermo.model.spin_model import SpinModel
from thermo.model.traces import total_matrices
from thermo.spectrum import lapack, planning
from thermo.spectrum.labels import levels_dataset
from thermo.spectrum.memory import memory_limit
from thermo.spectrum.tasks import run_tasks
from thermo.spectrum.threads import blas_threads, thread_count
from thermo.symmetry.sectors import MagneticSector, Sector, plan_symmetry

if TYPE_CHECKING:
    import xarray as xr

# From this dimension on a block is worth all threads when no other keeps them busy.
ALONE_FROM = 1000
# Σ n³ of blocks that are done before a thread would have started: some 10 ms.
AT_ONCE = 1e7
# Λ in units of the width of the energy bounds; above ½ the windows of different S are apart.
SHIFT = 0.6
# Pairs with more states than this get a bound in closed form.
LARGEST_LOCAL = 400

Progress = Callable[[float, str], None]


@dataclass(frozen=True, eq=False)
class _Structure:
    """What all blocks of one M share, whatever the couplings' values."""

    orbits: Orbits
    links: Links
    images: dict[bytes, Links]

    @property
    def nbytes(self) -> int:
        """Memory held."""
        return int(self.links.targets.nbytes + self.links.elements.nbytes)


class FullSolver:
    """Full spectra of one model for many values of its couplings.

    Symmetries are those that hold for *every* value of the couplings (``generic``), so the
    orbits and links are found once and each further ``table`` call only fills and
    diagonalises. Raises MemoryLimitError before anything large is allocated.
    """

    def __init__(
        self,
        model: SpinModel,
        memory: int | float | str | None = None,
        generic: bool = True,
        refuse: bool = True,
        **switches: bool,
    ):
        """``refuse`` False leaves out the check of memory: single blocks are then solved."""
        self.model = model
        self._generic = generic
        self._limit = memory_limit(memory)
        self.plan = plan_symmetry(model, generic, **switches)
        if refuse:
            planning.refuse_if_too_large(self.plan, self._limit)
        terms = self.plan.terms
        self.encoding = encoding.encode(terms.twice_spin)
        pair, ion = dict(terms.pair), dict(terms.ion)
        n_channels = len(terms.scale)
        if self.plan.conserved.total_spin:
            # One more channel: S² without its constant, 2 Σ_{i<j} S_i·S_j.
            for i in range(terms.n_sites):
                for j in range(i + 1, terms.n_sites):
                    old = pair.get((i, j), np.zeros((n_channels, 3, 3)))
                    pair[i, j] = np.concatenate([old, 2 * np.eye(3)[None]])
            ion = {k: np.concatenate([d, np.zeros((1, 3, 3))]) for k, d in ion.items()}
            n_channels += 1
        self.moves = operators.move_tables(
            self.encoding, pair, ion, n_channels, self.plan.conserved.modulus
        )
        self._structures: dict[int, _Structure] = {}
        self._exact: ExactMoments | None = None

    def structure(self, magnetic: MagneticSector) -> _Structure:
        """Orbits, links and images of one M; kept for the next couplings while small."""
        if magnetic.twice_m in self._structures:
            return self._structures[magnetic.twice_m]
        code, elements = self.encoding, magnetic.elements
        tables = encoding.element_tables(code, elements.permutations, elements.reversed)
        halves = encoding.half_lists(
            code, self.plan.terms.twice_spin, magnetic.twice_m, self.plan.conserved.modulus
        )
        found = find_orbits(code, halves, tables, magnetic.orbits)
        links = find_links(code, found, tables, self.moves)
        identity = np.arange(code.n_sites)
        images: dict[bytes, Links] = {}
        for sector in magnetic.sectors:
            p = sector.conjugating
            if p is None or np.array_equal(p, identity) or p.tobytes() in images:
                continue
            table = encoding.element_tables(code, p[None], np.zeros(1, dtype=bool))
            images[p.tobytes()] = find_images(code, found, tables, table)
        structure = _Structure(found, links, images)
        held = sum(s.nbytes for s in self._structures.values())
        if self._generic and held + structure.nbytes < self._limit // 4:
            self._structures[magnetic.twice_m] = structure
        return structure

    def table(
        self, couplings: Mapping[str, float] | None = None, progress: Progress | None = None
    ) -> LevelTable:
        """The levels for the given couplings (the model's own where not named), checked."""
        return self.solve(couplings, progress)[0]

    def solve(
        self, couplings: Mapping[str, float] | None = None, progress: Progress | None = None
    ) -> tuple[LevelTable, NDArray[np.int64]]:
        """The checked levels and, for each, the index of its sector in ``plan.sectors``."""
        table, sectors, _ = self._solve(couplings, progress, slopes=False)
        return table, sectors

    @property
    def can_slope(self) -> bool:
        """Whether ``sloped`` fits in memory: eigenvectors take three blocks where levels take
        one."""
        return planning.memory_needed(self.plan, slopes=True) <= self._limit

    def sloped(
        self, couplings: Mapping[str, float] | None = None, progress: Progress | None = None
    ) -> SlopedLevels:
        """The checked levels with their slopes by every coupling, for generic solvers.

        Cost: one and a half (small blocks) to 3 times (large ones) that of the levels alone, and
        the memory of three blocks in place of one, for the eigenvectors. Raises MemoryLimitError
        where the eigenvectors do not fit.
        """
        if not self._generic:
            raise UnavailableError("slopes by the couplings need a solver with generic symmetries")
        planning.refuse_if_too_large(self.plan, self._limit, slopes=True)
        table, _, slopes = self._solve(couplings, progress, slopes=True)
        found = SlopedLevels(table, self.plan.terms.names, slopes)
        if self._exact is None:
            self._exact = exact_moments(self.model)
        check_slopes(found, self.model.with_couplings(couplings or {}), self._exact)
        return found

    def _solve(
        self, couplings: Mapping[str, float] | None, progress: Progress | None, slopes: bool
    ) -> tuple[LevelTable, NDArray[np.int64], NDArray[np.float64]]:
        given = self.model.with_couplings(couplings or {})
        # Energies in units of the largest term, so that no power of ten is too large or small.
        unit = energy_scale(given) or 1.0
        model = given.with_couplings({name: c / unit for name, c in given.couplings.items()})
        if self._generic:
            values = np.array([model.couplings[name] for name in self.plan.terms.names])
        else:
            values = np.array([1.0 / unit])
        low, high = energy_bounds(model)
        shift = 0.0
        if self.plan.conserved.total_spin:
            shift = SHIFT * (high - low) if high > low else 1.0
            values = np.append(values, shift)
        tables = self.moves.combined(values)
        costs = {id(s): planning.block_cost(s.dimension, s.real) for s in self.plan.sectors}
        total, done = sum(costs.values()), 0.0
        found: dict[int, NDArray[np.float64]] = {}
        for magnetic in self.plan.magnetic:
            structure = self.structure(magnetic)
            for sector, energies in self._blocks(magnetic, structure, tables, slopes):
                found[id(sector)] = energies
                done += costs[id(sector)]
                if progress is not None:
                    text = f"{len(found)} of {len(costs)} blocks"
                    progress(min(done / total, 1.0), text)
        table, sectors, by_coupling = self._collect(found, shift, low, high)
        check_levels(table, model)
        return table.scaled(unit), sectors, by_coupling

    def _blocks(
        self,
        magnetic: MagneticSector,
        structure: _Structure,
        tables: tuple[NDArray[np.complex128], NDArray[np.float64]],
        slopes: bool,
    ) -> Iterator[tuple[Sector, NDArray[np.float64]]]:
        ordered = sorted(magnetic.sectors, key=lambda s: -planning.block_cost(s.dimension, s.real))
        width = thread_count()
        if sum(s.dimension**3 for s in ordered) < AT_ONCE:
            with blas_threads(1):
                for s in ordered:
                    yield s, self.solve_block(s, magnetic, structure, tables, 1, slopes)
            return
        alone, together = self._schedule(ordered, structure, width, slopes)
        for group, workers, blas in ((alone, 1, width), (together, width, 1)):
            if not group:
                continue
            tasks = [
                functools.partial(self.solve_block, s, magnetic, structure, tables, blas, slopes)
                for s in group
            ]
            with blas_threads(blas):
                for index, energies in run_tasks(tasks, workers):
                    yield group[index], energies

    def _schedule(
        self, ordered: list[Sector], structure: _Structure, width: int, slopes: bool
    ) -> tuple[list[Sector], list[Sector]]:
        """Which blocks to solve alone with all threads, and which side by side with one each.

        Side by side is faster at every size, as no thread waits for another, but it holds
        ``width`` blocks in memory, and a large block left over at the end would run on one
        thread: the surplus goes first, alone.
        """
        free = self._limit - planning.BASE_BYTES - structure.nbytes
        fitting = [
            s for s in ordered if width * planning.block_bytes(s.dimension, s.real, slopes) <= free
        ]
        surplus = sum(s.dimension >= ALONE_FROM for s in fitting) % width
        together = fitting[surplus:]
        return [s for s in ordered if s not in together], together

    def solve_block(
        self,
        sector: Sector,
        magnetic: MagneticSector,
        structure: _Structure,
        tables: tuple[NDArray[np.complex128], NDArray[np.float64]],
        threads: int,
        slopes: bool,
    ) -> NDArray[np.float64]:
        """Row 0: the block's eigenvalues, ascending; with ``slopes`` then one row for each
        coupling, (1 + P, n)."""
        n = sector.dimension
        block: NDArray[Any] = np.empty((n, n), np.float64 if sector.real else complex, order="F")
        p = sector.conjugating
        images = structure.images.get(p.tobytes()) if p is not None else None
        states = (self.encoding, structure.orbits, structure.links, self.moves)
        phases, modulus = sector.phases, magnetic.elements.modulus
        blocks.dense_block(*states, *tables, phases, modulus, images, sector.real, block)
        if not slopes:
            return lapack.eigenvalues(block, threads=threads)[None]
        energies, vectors = lapack.eigensystem(block)
        count = len(self.plan.terms.names)
        by_coupling = block_slopes(*states, count, phases, modulus, images, sector.real, vectors)
        return np.concatenate([energies[None], by_coupling])

    def _collect(
        self, found: dict[int, NDArray[np.float64]], shift: float, low: float, high: float
    ) -> tuple[LevelTable, NDArray[np.int64], NDArray[np.float64]]:
        energy, weight, twice_spin, twice_m, index = [], [], [], [], []
        resolved = self.plan.resolved
        casimir = float(np.sum(self.plan.terms.twice_spin * (self.plan.terms.twice_spin + 2)) / 4)
        for k, sector in enumerate(self.plan.sectors):
            values = found[id(sector)][0]
            count = np.full(len(values), float(sector.multiplicity))
            spin = np.full(len(values), -1, dtype=np.int64)
            m = np.full(len(values), -1, dtype=np.int64)
            if resolved == "total_spin":
                shifted = values + shift * casimir
                spin = _spin_by_window(shifted, shift, low, high, sector.twice_m)
                # Rounding of the shift cannot carry a level beyond the rigorous bounds.
                values = np.clip(shifted - shift * spin * (spin + 2) / 4, low, high)
                count *= spin + 1
            elif resolved == "magnetic_number":
                m[:] = abs(sector.twice_m)
            energy.append(values)
            weight.append(count)
            twice_spin.append(spin)
            twice_m.append(m)
            index.append(np.full(len(values), k, dtype=np.int64))
        joined = np.concatenate(energy)
        order = np.argsort(joined, kind="stable")
        table = LevelTable(
            joined[order],
            np.concatenate(weight)[order],
            np.concatenate(twice_spin)[order],
            np.concatenate(twice_m)[order],
            resolved,
            self.plan.terms.n_sites,
        )
        slopes = np.concatenate([found[id(s)][1:] for s in self.plan.sectors], axis=1)
        return table, np.concatenate(index)[order], slopes[:, order]


def _spin_by_window(
    shifted: NDArray[np.float64], shift: float, low: float, high: float, twice_m: int
) -> NDArray[np.int64]:
    """2S of each eigenvalue E + Λ S(S+1): the one S whose window [low, high] holds it."""
    slack = 0.25 * (2 * shift - (high - low))
    largest = np.sqrt(max(float(shifted.max() - low) / shift, 0.0) + 1.0) + 2
    ladder = np.arange(twice_m, 2 * int(largest) + 3, 2)
    floors = shift * ladder * (ladder + 2) / 4 + low - slack
    place = np.searchsorted(floors, shifted, side="right") - 1
    spin: NDArray[np.int64] = ladder[place.clip(0)]
    inside = shifted - shift * spin * (spin + 2) / 4
    if np.any(place < 0) or np.any(inside > high + slack):
        raise SpectrumError(
            "an eigenvalue lies in the window of no total spin; a coupling may be too large "
            "or too small for double precision"
        )
    return spin


def energy_bounds(model: SpinModel) -> tuple[float, float]:
    """Bounds of the spectrum: the sums of every pair's and ion's own extreme eigenvalues (for
    pairs of large spins, a wider bound)."""
    pairs, ions = total_matrices(model)
    low = high = 0.0
    twice = [round(2 * s.spin) for s in model.sites]

    @functools.cache
    def pair_extremes(key: bytes, a: int, b: int) -> tuple[float, float]:
        matrix = np.frombuffer(key).reshape(3, 3)
        if (a + 1) * (b + 1) > LARGEST_LOCAL:
            # |Σ_k σ_k (u_k·S)(v_k·S)| ≤ Σ_k σ_k s t over the singular values σ.
            reach = float(np.linalg.svd(matrix, compute_uv=False).sum()) * a * b / 4
            return -reach, reach
        s, t = operators.spin_matrices(a), operators.spin_matrices(b)
        local = np.einsum("xy,xac,ybd->abcd", matrix, s, t).reshape((a + 1) * (b + 1), -1)
        ends = np.linalg.eigvalsh(local)
        return float(ends[0]), float(ends[-1])

    for (i, j), a in pairs.items():
        bottom, top = pair_extremes(np.ascontiguousarray(a).tobytes(), twice[i], twice[j])
        low, high = low + bottom, high + top
    for i, d in ions.items():
        s = operators.spin_matrices(twice[i])
        ends = np.linalg.eigvalsh(np.einsum("xy,xab,ybc->ac", d, s, s))
        low, high = low + float(ends[0]), high + float(ends[-1])
    return low, high


def solve_full(
    model: SpinModel,
    memory: int | float | str | None = None,
    progress: Progress | None = None,
    **switches: bool,
) -> xr.Dataset:
    """The levels dataset of a model's full spectrum.

    ``switches`` (use_total_spin, use_magnetization, use_permutations) turn symmetries off; the
    result is the same, only slower. Cost: 4n³/3 operations per block of dimension n, four
    times that for a complex one; peak memory is that of the largest block and its links.
    """
    solver = FullSolver(model, memory, generic=False, **switches)
    table, sector = solver.solve(progress=progress)
    return levels_dataset(model, solver.plan, table, sector, {"method": "full", "seed": -1})
