"""What a full spectrum costs: memory, time, and whether it fits."""

from __future__ import annotations

import functools
import time

import numpy as np

from thermo.errors import MemoryLimitError, ModelError
from thermo.model.spin_model import SpinModel
from thermo.spectrum.memory import size_text
from thermo.symmetry.sectors import MagneticSector, SymmetryPlan

# Seconds of one eigenvalue call as a n² + b n³ on the machine these were measured on (two
# cores, tests/bench/test_lapack.py); survey rescales them by a short probe.
_QUADRATIC, _CUBIC, _COMPLEX_FACTOR = 2.5e-8, 2.7e-11, 3.5
_PROBE_SIZE, _PROBE_SECONDS = 500, 0.0085
_LINK_SECONDS = 3e-9
_START_SECONDS = 0.15
# Bytes per representative and move: int32 target, uint16 element.
_LINK_BYTES = 6
# Representative, its stabiliser, its slots and weights in the real basis.
_ORBIT_BYTES = 100
# The interpreter with every library loaded.
BASE_BYTES = 230 * 2**20


def move_count(plan: SymmetryPlan) -> int:
    """Number of moves H (with the total-spin shift) makes from a configuration, at most."""
    n = plan.terms.n_sites
    if plan.conserved.total_spin:
        return n * (n - 1)
    per_pair = {0: 2, 2: 4, 1: 8}[plan.conserved.modulus]
    return per_pair * len(plan.terms.pair) + 4 * len(plan.terms.ion)


def block_bytes(dimension: int, real: bool, slopes: bool = False) -> int:
    """Memory of a dense block while its eigenvalues (and eigenvectors, for slopes) are found."""
    item = 8 if real else 16
    if slopes:  # the block, and LAPACK's work of twice its size
        return item * dimension * (3 * dimension + 120)
    return item * dimension * (dimension + 120)


def sector_bytes(
    magnetic: MagneticSector, moves: int, n_sites: int, at_once: int, slopes: bool = False
) -> int:
    """Peak memory for all blocks of one M: orbits, links, the half lists, the largest blocks."""
    orbits = magnetic.orbits * (_ORBIT_BYTES + moves * _LINK_BYTES)
    halves = 40 * int(magnetic.configurations**0.5 + 1) * n_sites
    blocks = sorted(
        (block_bytes(s.dimension, s.real, slopes) for s in magnetic.sectors), reverse=True
    )
    return orbits + halves + sum(blocks[:at_once])


def memory_needed(plan: SymmetryPlan, at_once: int = 1, slopes: bool = False) -> int:
    """Peak memory of a full solution (with its slopes) with so many blocks at once, bytes."""
    moves = move_count(plan)
    peak = max(sector_bytes(m, moves, plan.terms.n_sites, at_once, slopes) for m in plan.magnetic)
    rows = 64 + (16 * len(plan.terms.names) if slopes else 0)
    levels = rows * sum(s.dimension for s in plan.sectors)
    return peak + levels + BASE_BYTES


def refuse_if_too_large(plan: SymmetryPlan, limit: int, slopes: bool = False) -> None:
    """Raise MemoryLimitError, before anything is allocated, when a full solution cannot fit."""
    needed = memory_needed(plan, slopes=slopes)
    if needed <= limit:
        return
    if needed < 2 * BASE_BYTES:
        raise base_exceeds(needed, limit)
    largest = max(plan.sectors, key=lambda s: block_bytes(s.dimension, s.real))
    size = f"{grouped(largest.dimension)} states ({'real' if largest.real else 'complex'})"
    raise MemoryLimitError(
        f"the largest block has {size}, so the full spectrum "
        f"needs {size_text(needed)} where the limit is {size_text(limit)}; take a smaller "
        "cluster, keep more symmetry (equal couplings, isotropic or axial terms), or raise the "
        "memory limit if the machine has more"
    )


def base_exceeds(needed: int, limit: int) -> MemoryLimitError:
    """The refusal where it is not the model that is too large for the limit."""
    return MemoryLimitError(
        f"the program itself needs about {size_text(BASE_BYTES)} and this model "
        f"{size_text(needed - BASE_BYTES)} more, where the limit is {size_text(limit)}; raise "
        "the memory limit"
    )


def grouped(count: int) -> str:
    """A count with its thousands apart, in powers of ten beyond all use."""
    return f"{count:,}".replace(",", " ") if count < 10**15 else f"{count:.1e}"


@functools.cache
def _speed_factor() -> float:
    """This machine's time for a block relative to the one the constants come from."""
    from thermo.spectrum.lapack import eigenvalues

    rng = np.random.default_rng(0)
    block = np.asfortranarray(rng.standard_normal((_PROBE_SIZE, _PROBE_SIZE)))
    best = np.inf
    for _ in range(4):
        trial = block.copy(order="F")
        start = time.perf_counter()
        eigenvalues(trial)
        best = min(best, time.perf_counter() - start)
    return float(best) / _PROBE_SECONDS


def block_cost(dimension: int, real: bool) -> float:
    """Seconds for one block on the reference machine."""
    n = float(dimension)
    return (_QUADRATIC * n**2 + _CUBIC * n**3) * (1.0 if real else _COMPLEX_FACTOR)


def time_needed(plan: SymmetryPlan) -> float:
    """Seconds of a full solution on this machine: a probe of LAPACK scales known constants."""
    blocks = sum(block_cost(s.dimension, s.real) for s in plan.sectors)
    links = sum(m.orbits * m.elements.order for m in plan.magnetic) * move_count(plan)
    scan = sum(m.configurations for m in plan.magnetic) * 4
    return _START_SECONDS + _speed_factor() * (blocks + _LINK_SECONDS * (links + scan))


def check_model(model: object, caller: str) -> None:
    """Refuse anything but a SpinModel, with the way to get one."""
    if not isinstance(model, SpinModel):
        raise ModelError(
            f"{caller} takes a model, not {type(model).__name__}; make one with read_model(path), "
            "which takes a mapping as well"
        )
