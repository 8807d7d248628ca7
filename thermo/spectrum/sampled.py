"""Sampled spectra: finite-temperature Lanczos, pinned by exact levels and exact traces.

Every sector of M ≥ 0 that is too large to diagonalise is sampled by random vectors (Jaklič and
Prelovšek, Phys. Rev. B 49, 5065 (1994)). The edges of the spectrum enter as exact levels
(thermo/spectrum/harvest.py), and the weights of one M reproduce the exact traces of low powers
of H (thermo/model/calibration.py). The work falls into pieces that depend on nothing but the
model and the settings: any worker may do any piece, in any order, twice.
"""

from __future__ import annotations

import functools
import itertools
import threading
from collections.abc import Callable, Iterator, Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from thermo.hilbert import encoding, sparse, tile
from thermo.hilbert.orbits import Orbits, find_orbits
from thermo.model.calibration import NEGLIGIBLE, Sampling, calibrated_table
from thermo.model.level_table import LevelTable, energy_scale
from thermo.model.spin_model import SpinModel
from thermo.spectrum import sampling_plan
from thermo.spectrum.full import FullSolver, energy_bounds
from thermo.spectrum.harvest import CONVERGED, harvest, ritz_pairs
from thermo.spectrum.moments import exact_moments, orbit_images
from thermo.spectrum.sampling_plan import family_size
from thermo.spectrum.settings import Settings
from thermo.spectrum.tasks import run_tasks
from thermo.spectrum.threads import thread_count
from thermo.symmetry.automorphisms import automorphism_group, colour_matrix
from thermo.symmetry.sectors import MagneticSector, Sector

Arrays = dict[str, NDArray[Any]]


@dataclass(frozen=True)
class Piece:
    """One piece of work: ``kind`` "full" (all small sectors of an M), "traces" or "tile".

    ``magnetic`` is the index of the M, ``family`` and ``index`` say which tile. ``cost`` is a
    relative time, ``key`` names the record.
    """

    key: str
    label: str
    cost: float
    kind: str
    magnetic: int
    family: int = 0
    index: int = 0


@dataclass(frozen=True, eq=False)
class _Shared:
    """What all tiles of one M share."""

    orbits: Orbits
    structure: tile.Structure
    special: NDArray[np.int64]


def _given(value: int | None) -> int:
    """A setting that ``sampling_plan.complete`` has filled in."""
    if value is None:
        raise RuntimeError("the settings are not complete")
    return value


class SampledSolver:
    """Pieces of one model's sampled spectrum, and how they make a table of levels.

    ``settings`` must be complete (``sampling_plan.complete``). ``threads``: those used within a
    piece, which change no result.
    """

    def __init__(self, model: SpinModel, settings: Settings, threads: int = 1):
        self.settings = settings
        self.model = model
        self.unit = energy_scale(model) or 1.0
        self.threads = threads
        self.unresolved = 0.0  # of the last table: see _unresolved
        self.families = -(-_given(settings.vectors) // family_size(_given(settings.vectors)))
        # Energies in units of the largest term, so that no power of ten is too large or small.
        scaled = model.with_couplings({n: c / self.unit for n, c in model.couplings.items()})
        self._full = FullSolver(model, generic=False, refuse=False, use_total_spin=False)
        self.plan = self._full.plan
        self.tables = self._full.moves.combined(np.array([1.0 / self.unit]))
        self.kinds = sparse.amplitude_kinds(self._full.moves)
        low, high = energy_bounds(scaled)
        self.center, self.half_width = 0.5 * (low + high), 0.5 * (high - low) or 1.0
        self.generators = automorphism_group(colour_matrix(self.plan.terms)).generators
        self._lock = threading.Lock()
        self._shared: tuple[int, _Shared] | None = None

    # -- which pieces there are ---------------------------------------------------------------

    def sampled_sectors(self, magnetic: MagneticSector) -> list[Sector]:
        """The sectors of one M that random vectors sample."""
        return [s for s in magnetic.sectors if s.dimension > _given(self.settings.full_below)]

    @property
    def family(self) -> int:
        """Vectors of a sector that travel together."""
        return family_size(_given(self.settings.vectors))

    @property
    def vectors(self) -> int:
        """Vectors per sector: families are never split."""
        return self.families * self.family

    def tiles(self, magnetic: MagneticSector) -> list[list[Sector]]:
        """The sectors of one M that share a tile."""
        chosen = self.sampled_sectors(magnetic)
        per_tile = tile.WIDTH // self.family
        return [chosen[k : k + per_tile] for k in range(0, len(chosen), per_tile)]

    def pieces(self) -> list[Piece]:
        """All pieces, one M after the other."""
        found = []
        below, steps = _given(self.settings.full_below), self.settings.steps
        for k, magnetic in enumerate(self.plan.magnetic):
            name = self._name(magnetic)
            sampled = self.sampled_sectors(magnetic)
            if sampled:
                cost = sampling_plan.tile_seconds(self.plan, magnetic, self.family, steps)
                for family in range(self.families):
                    for index in range(len(self.tiles(magnetic))):
                        key = f"{name}/tile/{family}/{index}"
                        label = f"{name}, vectors {family + 1}.{index + 1}"
                        found.append(Piece(key, label, cost, "tile", k, family, index))
                order = _given(self.settings.trace_order)
                walk = sampling_plan.trace_seconds(self.plan, magnetic, order)
                # Whoever is first at an M finds its links.
                walk += sampling_plan.build_seconds(self.plan, magnetic)
                found.append(Piece(f"{name}/traces", f"{name}, traces", walk, "traces", k))
            if len(sampled) < len(magnetic.sectors):
                cost = sampling_plan.full_seconds(magnetic, below)
                found.append(Piece(f"{name}/full", f"{name}, small sectors", cost, "full", k))
        return found

    def _name(self, magnetic: MagneticSector) -> str:
        twice = magnetic.twice_m
        number = f"{twice // 2}" if twice % 2 == 0 else f"{twice}/2"
        return f"M = {number}" if self.plan.conserved.modulus == 0 else f"class {number}"

    # -- doing a piece ------------------------------------------------------------------------

    def solve(self, piece: Piece) -> Arrays:
        """Do one piece. Depends on the model, the settings and the piece alone."""
        magnetic = self.plan.magnetic[piece.magnetic]
        if piece.kind == "full":
            return self._solve_small(magnetic)
        shared = self.share(piece.magnetic)
        if piece.kind == "traces":
            return self._solve_traces(magnetic, shared)
        return self._solve_tile(magnetic, shared, piece)

    def _solve_small(self, magnetic: MagneticSector) -> Arrays:
        structure = self._full.structure(magnetic)
        return {
            str(k): self._full.solve_block(sector, magnetic, structure, self.tables, 1, False)[0]
            for k, sector in enumerate(magnetic.sectors)
            if sector.dimension <= _given(self.settings.full_below)
        }

    def share(self, index: int) -> _Shared:
        """Orbits and links of one M, built by the first that asks."""
        with self._lock:
            if self._shared is None or self._shared[0] != index:
                self._shared = None
                self._shared = (index, self._build(self.plan.magnetic[index]))
            return self._shared[1]

    def _build(self, magnetic: MagneticSector) -> _Shared:
        code, elements = self._full.encoding, magnetic.elements
        tables = encoding.element_tables(code, elements.permutations, elements.reversed)
        halves = encoding.half_lists(
            code, self.plan.terms.twice_spin, magnetic.twice_m, self.plan.conserved.modulus
        )
        orbits = find_orbits(code, halves, tables, magnetic.orbits)
        run = functools.partial(_run_rows, thread_count())
        moves = self._full.moves
        links = sparse.sparse_links(code, orbits, tables, moves, self.kinds, run)
        diagonal = sparse.diagonal_energies(code, orbits, moves, self.tables[1], run)
        structure = tile.Structure(links, diagonal, orbits.stabiliser)
        return _Shared(orbits, structure, np.flatnonzero(orbits.stabiliser > 1))

    def _solve_traces(self, magnetic: MagneticSector, shared: _Shared) -> Arrays:
        # Symmetries that split no sector still save walks.
        images = orbit_images(
            self._full.encoding, shared.orbits, magnetic.elements, self.generators
        )
        moments = exact_moments(
            self._full.encoding, shared.orbits, magnetic.elements.order, self._full.moves,
            self.tables, self.center, self.half_width, _given(self.settings.trace_order),
            self.threads, images,
        )  # fmt: skip
        return {"moments": moments}

    def _solve_tile(self, magnetic: MagneticSector, shared: _Shared, piece: Piece) -> Arrays:
        size = self.family
        sectors = self.tiles(magnetic)[piece.index]
        elements = magnetic.elements
        identity = np.zeros(elements.order, dtype=np.int64)
        columns = [s for s in sectors for _ in range(size)]
        phases = [s.phases for s in columns] + [identity] * (tile.WIDTH - len(columns))
        rows = shared.structure.rows
        allowed = np.zeros((rows, tile.WIDTH), dtype=bool)
        first = np.zeros((rows, 2 * tile.WIDTH))
        root = np.sqrt(shared.orbits.stabiliser.astype(np.float64))
        for k, sector in enumerate(columns):
            if k % size == 0:
                mask = shared.orbits.allowed(sector.phases)
            allowed[:, k] = mask
            vector = piece.family * size + k % size
            x = self._random(sector, vector).standard_normal((2, rows))
            x *= mask / np.sqrt(np.sum(x[:, mask] ** 2))
            first[:, k], first[:, k + tile.WIDTH] = x[0] * root, x[1] * root
        partners = np.zeros((size - 1, rows, 2 * tile.WIDTH))
        lanes = np.arange(len(columns))
        for f in range(size - 1):
            other = lanes - lanes % size + (lanes + f + 1) % size
            partners[f][:, lanes] = first[:, other]
            partners[f][:, lanes + tile.WIDTH] = first[:, other + tile.WIDTH]
        values = np.array([1.0 / self.unit]) @ self.kinds.columns
        table = tile.phase_table(
            values, [np.exp(2j * np.pi * p / elements.modulus) for p in phases]
        )
        found = tile.lanczos(
            shared.structure, table, allowed[shared.special], first, partners,
            self.settings.steps, self.threads,
        )  # fmt: skip
        return {
            "alpha": found.alpha, "beta": found.beta, "dots": found.dots, "length": found.length,
        }  # fmt: skip

    def _random(self, sector: Sector, vector: int) -> np.random.Generator:
        """Numbers keyed by (seed, sector, vector): the same whatever else is drawn."""
        key = (self.settings.seed, abs(sector.twice_m), sector.character, sector.parity + 1, vector)
        return np.random.Generator(np.random.PCG64(np.random.SeedSequence(key)))

    # -- from pieces to levels ----------------------------------------------------------------

    def table(self, results: Mapping[str, Arrays]) -> tuple[LevelTable, NDArray[np.int64]]:
        """The calibrated levels from all pieces' results, and each one's index in
        ``plan.sectors``."""
        energy: list[NDArray[np.float64]] = []
        weight: list[NDArray[np.float64]] = []
        sector_of: list[NDArray[np.int64]] = []
        group_of: list[NDArray[np.int64]] = []
        unit_of: list[NDArray[np.int64]] = []
        unit_sector: list[int] = []
        moments = np.zeros((len(self.plan.magnetic), _given(self.settings.trace_order) + 1))
        number = 0
        lowest: list[tuple[float, float]] = []

        def add(e: Any, w: Any, sector: int, group: int, unit: int) -> None:
            energy.append(np.asarray(e, dtype=np.float64))
            weight.append(np.asarray(w, dtype=np.float64))
            for column, value in ((sector_of, sector), (group_of, group), (unit_of, unit)):
                column.append(np.full(len(energy[-1]), value, dtype=np.int64))

        for g, magnetic in enumerate(self.plan.magnetic):
            name = self._name(magnetic)
            mirror = 2.0 if magnetic.sectors[0].mirrored else 1.0
            small = results.get(f"{name}/full", {})
            ritz = dict(self.ritz(magnetic, results))
            lowest += [
                (float(r.value[0]), float(r.residual[0]))
                for families in ritz.values() for family in families for r in family
            ]  # fmt: skip
            for k, sector in enumerate(magnetic.sectors):
                if str(k) in small:
                    e = small[str(k)]
                    add(e, np.full(len(e), float(sector.multiplicity)), number, g, -1)
                else:
                    crop = harvest(
                        ritz[k], sector.dimension, 2 * self.half_width, self.settings.exact_states
                    )
                    add(crop.exact, crop.degeneracy * float(sector.multiplicity), number, g, -1)
                    rest = sector.dimension - int(crop.degeneracy.sum())
                    share = sector.multiplicity * rest / len(crop.energy)
                    for e, w in zip(crop.energy, crop.weight, strict=True):
                        add(e, share * w, number, g, len(unit_sector))
                        unit_sector.append(number)
                number += 1
            if f"{name}/traces" in results:
                moments[g] = mirror * results[f"{name}/traces"]["moments"]
        joined, raw, unit = np.concatenate(energy), np.concatenate(weight), np.concatenate(unit_of)
        # Spurious copies of converged levels stand for no states at all.
        order = np.flatnonzero((unit < 0) | (raw > NEGLIGIBLE))
        order = order[np.argsort(joined[order], kind="stable")]
        joined, raw, unit = joined[order], raw[order], unit[order]
        group = np.concatenate(group_of)[order]
        twice_m = np.array([abs(m.twice_m) for m in self.plan.magnetic])[group]
        if self.plan.conserved.modulus:
            twice_m = np.full(len(joined), -1, dtype=np.int64)
        for g in range(len(moments)):
            if not moments[g].any():  # no random vector here: whatever the levels give is exact
                mine = group == g
                x = (joined[mine] - self.center) / self.half_width
                moments[g] = [float(raw[mine] @ x**k) for k in range(moments.shape[1])]
        sampling = Sampling(
            unit, group, raw, np.array(unit_sector, dtype=np.int64),
            moments, self.center, self.half_width, np.zeros(len(moments), dtype=np.int64),
        )  # fmt: skip
        table = LevelTable(
            joined, raw, np.full(len(joined), -1, dtype=np.int64), twice_m,
            self.plan.resolved, self.plan.terms.n_sites,
        )  # fmt: skip
        self.unresolved = self._unresolved(joined[unit < 0], lowest)
        calibrated = calibrated_table(table, sampling)
        return calibrated.scaled(self.unit), np.concatenate(sector_of)[order]

    def _unresolved(self, exact: NDArray[np.float64], lowest: list[tuple[float, float]]) -> float:
        """How far the ground state may lie from what was found, in the model's energy unit."""
        value, residual = min(lowest, default=(np.inf, 0.0))
        if residual <= CONVERGED * 2 * self.half_width or np.min(exact, initial=np.inf) < value:
            return 0.0
        return residual * self.unit

    def ritz(
        self, magnetic: MagneticSector, results: Mapping[str, Arrays]
    ) -> Iterator[tuple[int, list[list[Any]]]]:
        """For each sampled sector of an M, its index there and the Ritz pairs by family."""
        size = self.family
        name = self._name(magnetic)
        place = {id(s): k for k, s in enumerate(magnetic.sectors)}
        for index, sectors in enumerate(self.tiles(magnetic)):
            for position, sector in enumerate(sectors):
                families = []
                for family in range(self.families):
                    found = results[f"{name}/tile/{family}/{index}"]
                    members = []
                    for k in range(position * size, (position + 1) * size):
                        n = int(found["length"][k])
                        members.append(
                            ritz_pairs(
                                found["alpha"][:n, k], found["beta"][:n, k], found["dots"][:n, :, k]
                            )
                        )
                    families.append(members)
                yield place[id(sector)], families


def _run_rows(workers: int, work: Callable[[int, int], None], rows: int) -> None:
    """Call work(lo, hi) over all rows, in ranges that threads share out."""
    edges = np.linspace(0, rows, 4 * workers + 1).round().astype(int)
    tasks = [functools.partial(work, int(a), int(b)) for a, b in itertools.pairwise(edges)]
    for _ in run_tasks(tasks, workers):
        pass


_solvers: dict[tuple[str, str, Settings], SampledSolver] = {}
_solvers_lock = threading.Lock()


def solve_piece(model: SpinModel, settings: Settings, threads: int, piece: Piece) -> Arrays:
    """Do one piece in any process: what pieces share there is found once."""
    key = (model.digest, str(sorted(model.couplings.items())), settings)
    with _solvers_lock:
        if key not in _solvers:
            _solvers.clear()
            _solvers[key] = SampledSolver(model, settings, threads)
        solver = _solvers[key]
    return solver.solve(piece)


def forget() -> None:
    """Let go of what ``solve_piece`` keeps in this process."""
    with _solvers_lock:
        _solvers.clear()
