"""What a sampled spectrum costs, and the settings that are left to the program.

The choices made here depend on the model and the settings alone, not on the machine: the same
command gives the same levels everywhere.
"""

from __future__ import annotations

import functools
import math
import time
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from thermo.errors import MemoryLimitError
from thermo.hilbert import tile
from thermo.hilbert.sparse import SparseLinks
from thermo.spectrum import planning
from thermo.spectrum.memory import size_text
from thermo.spectrum.settings import LARGEST_TRACE_ORDER, Settings
from thermo.symmetry.sectors import MagneticSector, SymmetryPlan

# Vectors of a sector that travel together and know their overlaps; more come in such families.
LARGEST_FAMILY = 4
# Sectors up to this dimension are diagonalised in any case: it costs next to nothing.
SMALLEST_SAMPLED = 400
# Larger ones too, while all of them cost no more than this share of the sampling.
FULL_SHARE = 0.25
LARGEST_FULL = 4000
# The traces may cost this much of what the vectors do.
TRACE_SHARE = 1.5

# Seconds on the machine these were measured on (tests/bench/), one thread: per link, column and
# step in the cache and beyond it; per row, column and vector of a family; per link found and
# symmetry element; per link of a local walk; per tridiagonal matrix of 100
# steps; to begin.
_LINK, _FAR_LINK, _ROW = 1.05e-9, 1.7e-9, 0.8e-9
_CACHE_BYTES = 16 * 2**20
_FIND, _WALK, _RITZ, _BEGIN = 8.0e-9, 8.0e-9, 2.0e-3, 0.5
_PROBE_SECONDS = 0.0027


def family_size(vectors: int) -> int:
    """How many vectors of a sector travel together: all of up to four, else four."""
    return min(vectors, LARGEST_FAMILY)


def vectors_used(settings: Settings) -> int:
    """Vectors per sector of complete settings: families are never split."""
    family = family_size(settings.vectors or 2)
    return -(-(settings.vectors or 2) // family) * family


def links_per_row(plan: SymmetryPlan, magnetic: MagneticSector) -> float:
    """Mean number of configurations that H links with one of this M."""
    dimension = plan.terms.twice_spin + 1
    modulus = plan.conserved.modulus
    steps = [(1, -1), (-1, 1)]
    if modulus:
        steps += [(1, 1), (-1, -1)]
    if modulus == 1:
        steps += [(1, 0), (-1, 0), (0, 1), (0, -1)]
    total = 0.0
    pairs: dict[tuple[int, int], int] = {}
    for i, j in plan.terms.pair:
        key = (int(dimension[i]), int(dimension[j]))
        pairs[key] = pairs.get(key, 0) + 1
    for (a, b), count in pairs.items():
        if modulus == 0:
            total += count * _moving_share(dimension, a, b, magnetic)
        else:
            total += count * sum(
                (1 - abs(s) / a) * (1 - abs(t) / b) for s, t in steps
            )  # fmt: skip
    if modulus:
        total += 2.0 * len(plan.terms.ion)
    return total


def _moving_share(dimension: NDArray[np.int64], a: int, b: int, magnetic: MagneticSector) -> float:
    """Expected number of moves ±1, ∓1 of a pair with dimensions a, b at this M."""
    others = dimension.tolist()
    others.remove(a)
    others.remove(b)
    counts = np.ones(1)
    for d in others:
        # Shares, not counts: these stay finite for any number of sites.
        counts = np.convolve(counts, np.full(d, 1.0 / d))
    pair = np.convolve(np.full(a, 1.0 / a), np.full(b, 1.0 / b))
    moving = np.convolve(np.full(a - 1, 1.0 / a), np.full(b - 1, 1.0 / b))
    digits = (int(np.sum(dimension - 1)) + magnetic.twice_m) // 2
    total = np.convolve(counts, pair)[digits]
    if total == 0:
        return 0.0
    one = np.convolve(counts, moving)
    return float(2 * one[digits - 1] / total) if 0 < digits <= len(one) else 0.0


def complete(plan: SymmetryPlan, settings: Settings) -> Settings:
    """The settings with vectors, ``full_below`` and ``trace_order`` filled in.

    Two vectors, or where the largest M has so few sectors that a tile would stay empty, as many
    as fill it. Sectors are solved fully while all that are cost less than a share of the rest.
    The order of the traces is six, or less where they cost more than the vectors.
    """
    below = settings.full_below
    if below is None:
        below = SMALLEST_SAMPLED
        probe = replace(settings, full_below=below, vectors=settings.vectors or 2, trace_order=0)
        budget = FULL_SHARE * _reference_seconds(plan, probe)
        costs: dict[int, float] = {}
        for s in plan.sectors:
            if s.dimension <= LARGEST_FULL:
                costs[s.dimension] = costs.get(s.dimension, 0.0) + planning.block_cost(
                    s.dimension, s.real
                )
        spent = 0.0
        for size, seconds in sorted(costs.items()):
            spent += seconds
            if size > below and spent > budget:
                break
            below = max(below, size)
    vectors = settings.vectors
    if vectors is None:
        most = max(sum(s.dimension > below for s in m.sectors) for m in plan.magnetic)
        vectors = 8 if most == 1 else 4 if most in (2, 3) else 2
    done = replace(
        settings, vectors=vectors, full_below=below, trace_order=settings.trace_order or 0
    )
    if settings.trace_order is not None:
        return done
    # Two orders more cost one more application of H to every walk.
    sampling = _reference_seconds(plan, done)
    magnetic = sampled_magnetic(plan, done)
    for order in range(LARGEST_TRACE_ORDER, 0, -2):
        if sum(trace_seconds(plan, m, order) for m in magnetic) <= TRACE_SHARE * sampling:
            return replace(done, trace_order=order)
    return done


@dataclass(frozen=True)
class Cost:
    """What sampling a model takes: pieces side by side, threads in each, bytes, seconds."""

    at_once: int
    threads: int
    memory_bytes: int
    seconds: float


def sampled_magnetic(plan: SymmetryPlan, settings: Settings) -> list[MagneticSector]:
    """Every M with a sector to sample."""
    below = settings.full_below or 0
    return [m for m in plan.magnetic if any(s.dimension > below for s in m.sectors)]


def shared_bytes(plan: SymmetryPlan, magnetic: MagneticSector) -> int:
    """Orbits, links and diagonal of one M."""
    links = links_per_row(plan, magnetic)
    code = 2 if len(magnetic.elements.permutations) * 64 <= 2**16 else 4
    return int(magnetic.orbits * (48 + links * (4 + code)))


def tile_bytes(magnetic: MagneticSector, family: int) -> int:
    """Memory of one tile at work: two Lanczos vectors, the partners, the weights."""
    return magnetic.orbits * (16 * tile.WIDTH * (family + 1) + 40)


def cost(plan: SymmetryPlan, settings: Settings, limit: int, cores: int) -> Cost:
    """The cost with complete settings on this machine; raises MemoryLimitError when a single
    tile does not fit into ``limit``."""
    family = family_size(settings.vectors or 2)
    moves = planning.move_count(plan)
    below = settings.full_below or 0
    magnetic = sampled_magnetic(plan, settings)

    def needed(at_once: int) -> int:
        peak = 0
        for m in plan.magnetic:
            small = [s for s in m.sectors if s.dimension <= below]
            here = 0
            if small:
                block = max(planning.block_bytes(s.dimension, s.real) for s in small)
                here += planning.sector_bytes(m, moves, plan.terms.n_sites, 0) + block * at_once
            if len(small) < len(m.sectors):
                tiles = -(-(len(m.sectors) - len(small)) * family // tile.WIDTH)
                busy = min(at_once, max(1, tiles))
                here += shared_bytes(plan, m) + busy * tile_bytes(m, family)
            peak = max(peak, here)
        levels = 96 * (settings.vectors or 2) * settings.steps
        levels *= sum(s.dimension > below for s in plan.sectors)
        return peak + levels + planning.BASE_BYTES

    at_once = cores
    while at_once > 1 and needed(at_once) > limit:
        at_once -= 1
    memory = needed(at_once)
    if memory > limit and memory < 2 * planning.BASE_BYTES:
        raise planning.base_exceeds(memory, limit)
    if memory > limit:
        largest = max(magnetic, key=lambda m: m.orbits, default=plan.magnetic[0])
        raise MemoryLimitError(
            f"sampling needs {size_text(memory)} where the limit is {size_text(limit)}: at the "
            f"largest M there are {planning.grouped(largest.orbits)} orbits of configurations"
            f" in tiles of {size_text(tile_bytes(largest, family))}; take fewer vectors "
            "(2), a smaller cluster, keep more symmetry, or raise the memory limit if the machine "
            "has more"
        )
    seconds = _reference_seconds(plan, settings) * speed_factor() / cores
    return Cost(at_once, max(1, cores // at_once), memory, seconds)


def full_seconds(magnetic: MagneticSector, below: int) -> float:
    """All sectors of one M up to a dimension, diagonalised."""
    small = [s for s in magnetic.sectors if s.dimension <= below]
    return sum(planning.block_cost(s.dimension, s.real) for s in small)


def build_seconds(plan: SymmetryPlan, magnetic: MagneticSector) -> float:
    """Orbits and links of one M."""
    return _FIND * magnetic.orbits * magnetic.elements.order * (1 + links_per_row(plan, magnetic))


def trace_seconds(plan: SymmetryPlan, magnetic: MagneticSector, order: int) -> float:
    """Exact traces of one M: walks from one representative of all that symmetry joins.

    With a moves per configuration, mostly of disjoint pairs, k of them in any order reach some
    a^k/k! configurations.
    """
    a = links_per_row(plan, magnetic)
    reached = links = 0.0
    for k in range((order + 1) // 2):
        reached = min(reached + a**k / math.factorial(k), float(magnetic.configurations))
        links += a * reached
    joined = max(1.0, 0.9 * plan.group_order / plan.abelian.order)
    return _WALK * magnetic.orbits * links / joined


def tile_seconds(plan: SymmetryPlan, magnetic: MagneticSector, family: int, steps: int) -> float:
    """One tile of one M, all its steps."""
    rows = float(magnetic.orbits)
    near = min(1.0, _CACHE_BYTES / (rows * 16 * tile.WIDTH))
    link = near * _LINK + (1 - near) * _FAR_LINK
    return steps * rows * tile.WIDTH * (links_per_row(plan, magnetic) * link + _ROW * family)


def _reference_seconds(plan: SymmetryPlan, settings: Settings) -> float:
    """Seconds of one thread of the reference machine."""
    vectors, below = settings.vectors or 2, settings.full_below or 0
    family = family_size(vectors)
    total = _BEGIN
    for m in plan.magnetic:
        sampled = sum(s.dimension > below for s in m.sectors)
        total += full_seconds(m, below)
        if not sampled:
            continue
        tiles = -(-sampled // (tile.WIDTH // family)) * -(-vectors // family)
        total += build_seconds(plan, m) + trace_seconds(plan, m, settings.trace_order or 0)
        total += tiles * tile_seconds(plan, m, family, settings.steps)
        total += sampled * vectors * _RITZ * (settings.steps / 100) ** 2
    return total


@functools.cache
def speed_factor() -> float:
    """This machine's time for Lanczos steps relative to the one the constants come from."""
    rows, per_row, steps = 4000, 12, 12
    rng = np.random.default_rng(0)
    target = rng.integers(0, rows, rows * per_row).astype(np.int32)
    links = SparseLinks(
        np.arange(rows + 1, dtype=np.int64) * per_row,
        target,
        np.zeros(rows * per_row, dtype=np.uint16),
    )
    structure = tile.Structure(links, np.ones(rows), np.ones(rows, dtype=np.int64))
    phases = np.ones((1, 2 * tile.WIDTH))
    partners = np.zeros((0, rows, 2 * tile.WIDTH))
    best = np.inf
    for _ in range(4):
        first = rng.standard_normal((rows, 2 * tile.WIDTH)) / (2 * rows) ** 0.5
        start = time.perf_counter()
        tile.lanczos(structure, phases, np.zeros((0, tile.WIDTH), bool), first, partners, steps)
        best = min(best, time.perf_counter() - start)
    return float(best) / _PROBE_SECONDS
