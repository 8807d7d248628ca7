"""Full spectra with magnetic moments: any interaction, any g, a field along any direction.

Site permutations that keep the interaction *and* every site's g tensor commute with H and with
all components of the moment at any field, so blocks of their characters hold every matrix element
that is not zero. M is not used: a tilted field or a transverse moment would not keep it.
"""

from __future__ import annotations

import functools
from collections.abc import Callable
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from thermo.errors import MemoryLimitError
from thermo.hilbert import blocks, encoding, operators
from thermo.hilbert.moments import one_site_operator, pair_sums
from thermo.hilbert.orbits import Links, Orbits, find_links, find_orbits
from thermo.model.level_table import LevelTable, energy_scale
from thermo.model.response_table import CLASSES, ResponseTable, check_response, gap_edges
from thermo.model.spin_model import SpinModel
from thermo.spectrum import lapack, planning
from thermo.spectrum.full import energy_bounds
from thermo.spectrum.memory import memory_limit, size_text
from thermo.spectrum.tasks import run_tasks
from thermo.spectrum.threads import blas_threads, thread_count
from thermo.symmetry.abelian import AbelianGroup, choose_abelian, cycles
from thermo.symmetry.automorphisms import automorphism_group, colour_matrix
from thermo.symmetry.interaction import Interaction, interaction

# From this dimension on a block is worth all threads.
ALONE_FROM = 1000

Array = NDArray[np.float64]
Progress = Callable[[float, str], None]


def moment_symmetry(model: SpinModel) -> AbelianGroup:
    """An abelian group of site permutations that keep H and every site's g tensor."""
    terms = interaction(model)
    tensors = {i: site.g for i, site in enumerate(model.sites)}
    zero = np.zeros((3, 3))
    size = max(float(np.abs(g).max()) for g in tensors.values())
    # One more channel of single-site tensors, g, parts sites that differ in it.
    both = Interaction(
        terms.twice_spin,
        {key: np.stack([a[0], zero]) for key, a in terms.pair.items()},
        {i: np.stack([terms.ion[i][0] if i in terms.ion else zero, g]) for i, g in tensors.items()},
        ("total", "g"),
        np.append(terms.scale, size),
    )
    colours = colour_matrix(both)
    kept = tuple(
        t for t in model.translations if np.array_equal(colours[np.ix_(t, t)], colours)
    )  # a lattice's translations may not keep g
    return choose_abelian(automorphism_group(colours), kept, False)


def linear_tensor(vector: Array) -> NDArray[np.complex128]:
    """The D (3, 3) for which Σ_xy S_x D_xy S_y = v·S, from [S_x, S_y] = i S_z."""
    x, y, z = vector
    return -1j * np.array([[0, z, -y], [-z, 0, x], [y, -x, 0]])


@dataclass(frozen=True, eq=False)
class _Block:
    """One character's block: exponents of the character, states, blocks with its spectrum."""

    phases: NDArray[np.int64]
    dimension: int
    star: int


class MomentSolver:
    """Levels with moments of one model, at as many fields as wanted.

    Symmetry and links are found once. Raises MemoryLimitError before anything large is allocated.
    """

    def __init__(self, model: SpinModel, memory: int | float | str | None = None):
        self.model = model
        self._limit = memory_limit(memory)
        self._group = moment_symmetry(model)
        terms = interaction(model)
        self._twice_spin = terms.twice_spin
        self._orbit_count, self._dimensions = self._count()
        pair = {key: np.stack([a[0], *np.zeros((3, 3, 3))]) for key, a in terms.pair.items()}
        zero = np.zeros((3, 3))
        # Channels: H, then the moment along x, y, z: m_a = Σ_i Σ_b g_ab S_b.
        ion: dict[int, Any] = {
            i: np.stack([terms.ion[i][0] if i in terms.ion else zero, *map(linear_tensor, site.g)])
            for i, site in enumerate(model.sites)
        }
        self._code = encoding.encode(terms.twice_spin)
        self._moves = operators.move_tables(self._code, pair, ion, 4, 1)
        self._refuse()

    def _count(self) -> tuple[int, NDArray[np.int64]]:
        """Number of orbits, and the dimension of every character's block."""
        fixed = np.array(
            [
                float(np.prod([self._twice_spin[c[0]] + 1.0 for c in cycles(p)]))
                for p in self._group.elements
            ]
        )
        table = np.exp(-2j * np.pi * self._group.exponents / self._group.modulus)
        dimensions = np.rint((table @ fixed).real / len(fixed)).astype(np.int64)
        return round(float(fixed.mean())), dimensions

    @property
    def largest_block(self) -> int:
        """States of the largest block."""
        return int(self._dimensions.max())

    def _needed(self) -> int:
        n = self.largest_block
        # The vectors, three moments times them, and one more block; LAPACK needs fewer.
        block = 16 * n * (5 * n + 200)
        links = self._orbit_count * (100 + 6 * len(self._moves.site_i))
        rows = 8 * (12 * CLASSES + 8) * int(self._dimensions.sum())
        return block + links + 2 * rows + planning.BASE_BYTES

    def _refuse(self) -> None:
        needed = self._needed()
        if needed > self._limit:
            if needed < 2 * planning.BASE_BYTES:
                raise MemoryLimitError(
                    f"the program itself needs about {size_text(planning.BASE_BYTES)} and this "
                    f"model {size_text(needed - planning.BASE_BYTES)} more, where the limit is "
                    f"{size_text(self._limit)}; raise the memory limit"
                )
            raise MemoryLimitError(
                f"the largest block with its moments has {planning.grouped(self.largest_block)} "
                f"states and needs {size_text(needed)} where the limit is "
                f"{size_text(self._limit)}; take a smaller cluster, one with more equal sites, or "
                "raise the memory limit if the machine has more"
            )

    @functools.cached_property
    def _structure(self) -> tuple[Orbits, Links]:
        plain = np.zeros(self._group.order, dtype=bool)
        tables = encoding.element_tables(self._code, self._group.elements, plain)
        total = int(self._twice_spin.sum()) % 2
        halves = encoding.half_lists(self._code, self._twice_spin, total, 1)
        orbits = find_orbits(self._code, halves, tables, self._orbit_count)
        return orbits, find_links(self._code, orbits, tables, self._moves)

    def solve(
        self, field: Array, axes: Array | None = None, progress: Progress | None = None
    ) -> ResponseTable:
        """Levels and moments at the field b = μ_B B (3,), in the model's energy unit.

        ``axes`` (K, 3): the directions of the moments wanted, x, y, z if left out. Cost: for each
        block about 40n³ operations for its vectors and 8n³ for each moment. Raises SpectrumError
        where the result fails its check.
        """
        field = np.asarray(field, dtype=np.float64)
        axes = np.eye(3) if axes is None else np.asarray(axes, dtype=np.float64)
        reach = sum(s.spin * float(np.linalg.norm(s.g.T @ field)) for s in self.model.sites)
        # Energies in units of the largest term.
        unit = max(energy_scale(self.model), reach) or 1.0
        low, high = energy_bounds(self.model)
        width = (high - low + 2 * reach) / unit or 1.0
        edges = gap_edges(width)
        hamiltonian = self._moves.combined(np.concatenate([[1.0], -field]) / unit)
        moments = [self._moves.combined(np.concatenate([[0.0], axis])) for axis in axes]
        work = self._blocks(not np.any(field))
        width_of = thread_count()
        if width_of * (self._needed() - planning.BASE_BYTES) > self._limit:
            width_of = 1
        costs = np.array([float(b.dimension) ** 3 for b in work])
        found: dict[int, tuple[Array, ...]] = {}
        alone = [k for k, b in enumerate(work) if b.dimension >= ALONE_FROM or width_of == 1]
        together = [k for k in range(len(work)) if k not in set(alone)]
        for group, workers, blas in ((alone, 1, thread_count()), (together, width_of, 1)):
            tasks = [
                functools.partial(self._solve_block, work[k], hamiltonian, moments, edges)
                for k in group
            ]
            with blas_threads(blas):
                for index, result in run_tasks(tasks, workers):
                    found[group[index]] = result
                    if progress is not None:
                        done = costs[list(found)].sum() / costs.sum()
                        progress(min(float(done), 1.0), f"{len(found)} of {len(work)} blocks")
        weight = np.concatenate([np.full(b.dimension, float(b.star)) for b in work])
        energy, moment, near, far = (
            np.concatenate([found[k][part] for k in range(len(work))]) for part in range(4)
        )
        order = np.argsort(energy, kind="stable")
        unknown = np.full(len(energy), -1, dtype=np.int64)
        levels = LevelTable(
            energy[order] * unit, weight[order], unknown, unknown, "none", len(self.model.sites)
        )
        table = ResponseTable(
            levels, moment[order], near[order], far[order] / unit, edges * unit, axes, field
        )
        check_response(table, self.model)
        return table

    def _blocks(self, zero_field: bool) -> list[_Block]:
        """The blocks to solve; without a field time reversal pairs a character with χ*."""
        return [
            _Block(self._group.exponents[star[0]], int(self._dimensions[star[0]]), len(star))
            for star in self._group.stars(real_hamiltonian=zero_field)
            if self._dimensions[star[0]]
        ]

    def _solve_block(
        self,
        block: _Block,
        hamiltonian: tuple[NDArray[np.complex128], Array],
        moments: list[tuple[NDArray[np.complex128], Array]],
        edges: Array,
    ) -> tuple[Array, ...]:
        orbits, links = self._structure
        n, modulus = block.dimension, self._group.modulus
        states = (self._code, orbits, links, self._moves)
        real = bool(np.all(2 * block.phases % modulus == 0)) and not np.any(hamiltonian[0].imag)
        matrix: NDArray[Any] = np.empty((n, n), np.float64 if real else complex, order="F")
        blocks.dense_block(*states, *hamiltonian, block.phases, modulus, None, real, matrix)
        energy, vectors = lapack.eigensystem(matrix)
        del matrix
        operators_found = [one_site_operator(*states, *m, block.phases, modulus) for m in moments]
        return energy, *pair_sums(operators_found, energy, vectors, edges)
