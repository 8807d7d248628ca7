"""Lanczos on tiles of eight columns against projected dense blocks and a plain recursion."""

from __future__ import annotations

import os
import subprocess
import sys

import numpy as np
import pytest
from hypothesis import given, settings

import thermo
from tests import naive
from tests.naive_sampling import plain_lanczos
from tests.strategies import (
    ANY_FORMS,
    ION_FORMS,
    SETTINGS,
    UNIAXIAL_FORMS,
    UNIAXIAL_IONS,
    Cluster,
    clusters,
    complete,
    ring,
    symmetric_clusters,
)
from thermo.hilbert import blocks, sparse, tile
from thermo.hilbert.orbits import find_links
from thermo.spectrum.sampled import SampledSolver
from thermo.spectrum.settings import Settings

FEWER = settings(SETTINGS, max_examples=15)


def solver_of(cluster: Cluster, **choice) -> SampledSolver:
    chosen = {"vectors": 2, "full_below": 0, "steps": 20, "trace_order": 6} | choice
    return SampledSolver(thermo.read_model(cluster.mapping()), Settings(**chosen))


class Basis:
    """The product states of a cluster as the solver's integers and as rows of the twin."""

    def __init__(self, cluster: Cluster, solver: SampledSolver):
        self.code = solver._full.encoding
        self.dimension = np.array([round(2 * s) + 1 for s in cluster.spins])
        self.place = np.cumprod([1, *self.dimension[:0:-1]])[::-1]

    def rows(self, digits: np.ndarray) -> np.ndarray:
        """Places in the Kronecker basis, where m falls and the first site is slowest."""
        return (self.dimension - 1 - digits) @ self.place

    def images(self, configuration: int, elements) -> np.ndarray:
        """Places of the images of one configuration under every element, from the definition:
        element g takes what is on site i to site p_g(i), then |m⟩ to |−m⟩ where it reverses."""
        digits = (configuration >> self.code.shift) & self.code.mask
        moved = np.empty((elements.order, len(digits)), dtype=np.int64)
        np.put_along_axis(
            moved, elements.permutations, np.tile(digits, (elements.order, 1)), axis=1
        )
        moved = np.where(elements.reversed[:, None], self.dimension - 1 - moved, moved)
        return self.rows(moved)


def projector(basis: Basis, shared, magnetic, sector) -> tuple[np.ndarray, np.ndarray]:
    """Columns |r,χ⟩ ∝ Σ_g χ*(g) g|r⟩ (zero where forbidden), and which of them exist."""
    character = np.exp(2j * np.pi * sector.phases / magnetic.elements.modulus)
    columns = np.zeros((int(basis.dimension.prod()), shared.structure.rows), dtype=complex)
    for r, c in enumerate(shared.orbits.representatives):
        np.add.at(columns[:, r], basis.images(int(c), magnetic.elements), character.conj())
    norm = np.linalg.norm(columns, axis=0)
    there = norm > 1e-9
    return columns / np.where(there, norm, 1.0) * there, there


def tile_phases(solver: SampledSolver, magnetic, sectors) -> np.ndarray:
    values = np.array([1.0 / solver.unit]) @ solver.kinds.columns
    phases = [s.phases for s in sectors]
    phases += [np.zeros(magnetic.elements.order, dtype=np.int64)] * (tile.WIDTH - len(phases))
    modulus = magnetic.elements.modulus
    return tile.phase_table(values, [np.exp(2j * np.pi * p / modulus) for p in phases])


def tile_mask(shared, sectors) -> np.ndarray:
    allowed = np.zeros((shared.structure.rows, tile.WIDTH), dtype=bool)
    for k, sector in enumerate(sectors):
        allowed[:, k] = shared.orbits.allowed(sector.phases)
    return allowed


def joined(X: np.ndarray, stabiliser: np.ndarray) -> np.ndarray:
    """A tile from complex amplitudes (R, ≤ 8)."""
    Z = np.sqrt(stabiliser)[:, None] * X
    result = np.zeros((len(X), 2 * tile.WIDTH))
    result[:, : X.shape[1]], result[:, tile.WIDTH : tile.WIDTH + X.shape[1]] = Z.real, Z.imag
    return result


def amplitudes_of(Z: np.ndarray, stabiliser: np.ndarray) -> np.ndarray:
    return (Z[:, : tile.WIDTH] + 1j * Z[:, tile.WIDTH :]) / np.sqrt(stabiliser)[:, None]


def dense_by_thermo(solver: SampledSolver, shared, magnetic, sector) -> np.ndarray:
    code, full = solver._full.encoding, solver._full
    elements = magnetic.elements
    images = blocks_tables(code, elements)
    out = np.zeros((sector.dimension, sector.dimension), dtype=complex, order="F")
    blocks.dense_block(
        code, shared.orbits, find_links(code, shared.orbits, images, full.moves), full.moves,
        solver.tables[0], solver.tables[1], sector.phases, elements.modulus, None, False, out,
    )  # fmt: skip
    lower = np.tril(out)
    return lower + np.tril(out, -1).conj().T


def blocks_tables(code, elements):
    from thermo.hilbert import encoding

    return encoding.element_tables(code, elements.permutations, elements.reversed)


def check_product(cluster: Cluster) -> None:
    """H·X of every sector against ⟨r,χ|H|t,χ⟩ of the twin and of the path of full spectra."""
    solver = solver_of(cluster)
    basis = Basis(cluster, solver)
    dense = cluster.hamiltonian() / solver.unit
    rng = np.random.default_rng(1)
    size = max(1.0, np.abs(dense).sum(axis=1).max())
    for index, magnetic in enumerate(solver.plan.magnetic):
        shared = solver.share(index)
        structure, rows = shared.structure, shared.structure.rows
        states = 0
        for first in range(0, len(magnetic.sectors), tile.WIDTH):
            sectors = magnetic.sectors[first : first + tile.WIDTH]
            table, mask = tile_phases(solver, magnetic, sectors), tile_mask(shared, sectors)
            X, Y = (
                (a[0] + 1j * a[1]) * mask for a in rng.standard_normal((2, 2, rows, tile.WIDTH))
            )
            V, U = joined(X, structure.stabiliser), joined(Y, structure.stabiliser)
            scale, back = rng.uniform(-2, 2, (2, tile.WIDTH))
            tile.multiply(structure, table, scale, back, V, U, 0, rows)
            found = amplitudes_of(U, structure.stabiliser)
            for k, sector in enumerate(sectors):
                P, there = projector(basis, shared, magnetic, sector)
                assert np.array_equal(there, mask[:, k])
                assert there.sum() == sector.dimension
                states += sector.dimension * sector.star
                block = P.conj().T @ (dense @ P)
                assert np.abs(dense @ P - P @ block).max() < 1e-12 * size  # it is a block
                expected = scale[k] * (block @ X[:, k]) - back[k] * Y[:, k]
                assert np.abs((found[:, k] - expected)[there]).max() < 1e-12 * size
                own = dense_by_thermo(solver, shared, magnetic, sector)
                assert np.abs(own - block[np.ix_(there, there)]).max() < 1e-12 * size
        assert states == magnetic.configurations


@FEWER
@given(clusters(UNIAXIAL_FORMS, UNIAXIAL_IONS, largest=300))
def test_products_of_uniaxial_clusters(cluster: Cluster) -> None:
    check_product(cluster)


@FEWER
@given(clusters(ANY_FORMS, ION_FORMS, largest=130))
def test_products_of_clusters_of_any_form(cluster: Cluster) -> None:
    check_product(cluster)


@FEWER
@given(symmetric_clusters(ANY_FORMS, ION_FORMS, largest=260))
def test_products_of_symmetric_clusters(cluster: Cluster) -> None:
    check_product(cluster)


@pytest.mark.parametrize(
    "cluster",
    [ring(8), ring(5, 1.0), ring(4, 1.5), complete(7), ring(3, 2.5), ring(4, 2.0, "xy")],
    ids=["ring of 8", "spin 1", "spin 3/2", "complete graph", "spin 5/2", "spin 2, XY"],
)
def test_products_of_rings_and_a_complete_graph(cluster: Cluster) -> None:
    check_product(cluster)


# --- The recursion -------------------------------------------------------------------------


def start(shared, sectors, rng) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Normalised amplitudes (R, 8) with zeros where forbidden, the tile, its mask."""
    mask = tile_mask(shared, sectors)
    a = rng.standard_normal((2, *mask.shape))
    X = (a[0] + 1j * a[1]) * mask
    norm = np.linalg.norm(X, axis=0)
    X /= np.where(norm > 0, norm, 1)
    return X, joined(X, shared.structure.stabiliser), mask


TWISTED = Cluster(
    (0.5,) * 8,
    tuple((i, (i + 1) % 8, "J", "isotropic") for i in range(8))
    + tuple((i, (i + 1) % 8, "D", ("antisymmetric", (0.0, 0.0, 1.0))) for i in range(8)),
    {"J": 1.0, "D": 0.4},
)
MIXED = Cluster(
    (0.5, 1.0, 1.5, 0.5, 1.0),
    ((0, 1, "J", "isotropic"), (1, 2, "K", "xy"), (2, 3, "J", "ising"), (3, 4, "K", "isotropic"),
     (4, 0, "J", ((1.0, 0.0, 0.0), (0.0, 1.0, 0.0), (0.0, 0.0, -0.5)))),
    {"J": 1.0, "K": -0.7}, ((2, "K", "axial"),),
)  # fmt: skip
TILTED = Cluster(
    (0.5, 1.0, 0.5, 1.0, 0.5),
    ((0, 1, "J", ("antisymmetric", (1.0, 0.5, -0.5))), (1, 2, "J", "isotropic"),
     (2, 3, "J", "isotropic"), (3, 4, "J", ((1.0, 0.5, 0.0), (0.0, -1.0, 0.5), (0.5, 0.0, 2.0)))),
    {"J": 1.0}, ((1, "J", "rhombic"),),
)  # fmt: skip
RECURSIONS = {
    "ring": ring(8), "spin 1": ring(5, 1.0), "twisted": TWISTED, "mixed": MIXED,
    "tilted": TILTED,
    "parity only": ring(6, 0.5, ((1.0, 0.0, 0.0), (0.0, 0.4, 0.0), (0.0, 0.0, 0.2))),
}  # fmt: skip


@pytest.mark.parametrize("name", RECURSIONS)
def test_recursion_against_full_vectors(name: str) -> None:
    cluster = RECURSIONS[name]
    solver = solver_of(cluster)
    basis = Basis(cluster, solver)
    H = naive.sparse_hamiltonian(*cluster.naive_terms()) / solver.unit
    rng = np.random.default_rng(2)
    for index, magnetic in enumerate(solver.plan.magnetic):
        shared = solver.share(index)
        sectors = list(magnetic.sectors[: tile.WIDTH])
        X, first, mask = start(shared, sectors, rng)
        others = [start(shared, sectors, rng) for _ in range(2)]
        # Until rounding tells: a space must not be nearly used up.
        steps = 12
        found = tile.lanczos(
            shared.structure, tile_phases(solver, magnetic, sectors), mask[shared.special],
            first, np.array([o[1] for o in others]), steps,
        )  # fmt: skip
        for k, sector in enumerate(sectors):
            P, _ = projector(basis, shared, magnetic, sector)
            alpha, beta, dots = plain_lanczos(
                lambda v, H=H: H @ v, P @ X[:, k], [P @ o[0][:, k] for o in others], steps
            )
            use = min(len(alpha), max(1, sector.dimension // 2))
            assert np.abs(found.alpha[:use, k] - alpha[:use]).max() < 1e-9
            assert np.abs(found.beta[: use - 1, k] - beta[: use - 1]).max(initial=0) < 1e-9
            assert np.abs(found.dots[:use, :, k] - dots[:use]).max() < 1e-8
        assert (found.length[len(sectors) :] == 0).all()


@pytest.mark.parametrize("name", RECURSIONS)
def test_recursion_is_a_gauss_quadrature(name: str) -> None:
    """Σ_j w_j θ_j^k = ⟨r|H^k|r⟩ for k < 2·steps, by powers of the dense block."""
    cluster = RECURSIONS[name]
    solver = solver_of(cluster)
    basis = Basis(cluster, solver)
    H = naive.sparse_hamiltonian(*cluster.naive_terms()) / solver.unit
    for index, magnetic in enumerate(solver.plan.magnetic):
        shared = solver.share(index)
        sectors = list(magnetic.sectors[-tile.WIDTH :])
        X, first, mask = start(shared, sectors, np.random.default_rng(3))
        found = tile.lanczos(
            shared.structure, tile_phases(solver, magnetic, sectors), mask[shared.special],
            first, np.zeros((0, *first.shape)), 6,
        )  # fmt: skip
        for k, sector in enumerate(sectors):
            n = found.length[k]
            T = np.diag(found.alpha[:n, k])
            T += np.diag(found.beta[: n - 1, k], 1) + np.diag(found.beta[: n - 1, k], -1)
            P, _ = projector(basis, shared, magnetic, sector)
            v = P @ X[:, k]
            size = max(1.0, abs(H).sum(axis=1).max())
            for power in range(12):
                moment = np.linalg.matrix_power(T, power)[0, 0]
                expected = np.vdot(P @ X[:, k], v).real
                assert abs(moment - expected) < 1e-12 * size**power
                v = H @ v


def irregular(n: int, seed: int = 5) -> Cluster:
    """No symmetry but M: a ring with different couplings and a few chords."""
    rng = np.random.default_rng(seed)
    pairs = [(i, (i + 1) % n) for i in range(n)] + [(i, (i + 4) % n) for i in range(0, n, 3)]
    names = {f"J{k}": round(float(v), 3) for k, v in enumerate(rng.uniform(0.5, 1.5, len(pairs)))}
    bonds = tuple((i, j, f"J{k}", "isotropic") for k, (i, j) in enumerate(pairs))
    return Cluster((0.5,) * n, bonds, names)


def test_several_chunks_an_odd_number_of_rows_and_threads() -> None:
    """14 sites without symmetry, M = 1: 3003 rows are three chunks of rows."""
    cluster = irregular(14)
    solver = solver_of(cluster)
    index = next(k for k, m in enumerate(solver.plan.magnetic) if m.twice_m == 2)
    magnetic, shared = solver.plan.magnetic[index], solver.share(index)
    structure, rows = shared.structure, shared.structure.rows
    assert rows == 3003
    assert rows > 2 * tile.CHUNK
    sectors = list(magnetic.sectors) * tile.WIDTH
    assert len(sectors) == tile.WIDTH
    H = naive.sparse_hamiltonian(*cluster.naive_terms()) / solver.unit
    basis = Basis(cluster, solver)
    digits = (
        shared.orbits.representatives[:, None] >> basis.code.shift[None, :]
    ) & basis.code.mask[None, :]
    place = basis.rows(digits)
    block = H[place][:, place]
    table = tile_phases(solver, magnetic, sectors)
    rng = np.random.default_rng(4)
    X, first, mask = start(shared, sectors, rng)
    partner = start(shared, sectors, rng)
    one, zero = np.ones(tile.WIDTH), np.zeros(tile.WIDTH)
    U = np.zeros_like(first)
    tile.multiply(structure, table, one, zero, first, U, 0, rows)
    assert np.abs(amplitudes_of(U, structure.stabiliser) - block @ X).max() < 1e-13

    results = [
        tile.lanczos(
            structure, table, mask[shared.special], first.copy(), partner[1][None], 25, workers
        )
        for workers in (1, 2, 3, 5)
    ]
    for other in results[1:]:
        for name in ("alpha", "beta", "dots", "length"):
            assert np.array_equal(getattr(results[0], name), getattr(other, name))
    for k in (0, 3, 7):
        alpha, beta, dots = plain_lanczos(lambda v: block @ v, X[:, k], [partner[0][:, k]], 25)
        assert np.abs(results[0].alpha[:, k] - alpha).max() < 1e-11
        assert np.abs(results[0].beta[:-1, k] - beta[:-1]).max() < 1e-11
        assert np.abs(results[0].dots[:, :, k] - dots).max() < 1e-11


def test_threads_start_at_a_chunk() -> None:
    for rows in (1, 5, 1023, 1024, 1025, 3003, 10000):
        for workers in (1, 2, 3, 7):
            ranges = tile.Ranges(rows, workers)
            covered = [r for low, high in ranges.ranges for r in range(low, high)]
            assert covered == list(range(rows))
            assert all(low % tile.CHUNK == 0 for low, _ in ranges.ranges)
            ranges.close()


def test_a_column_does_not_know_the_others() -> None:
    solver = solver_of(TWISTED)
    magnetic, shared = solver.plan.magnetic[0], solver.share(0)
    sectors = list(magnetic.sectors[: tile.WIDTH])
    assert len(sectors) > 3
    X, first, mask = start(shared, sectors, np.random.default_rng(6))
    partner = start(shared, sectors, np.random.default_rng(7))[1]
    whole = tile.lanczos(
        shared.structure, tile_phases(solver, magnetic, sectors), mask[shared.special],
        first.copy(), partner[None], 30,
    )  # fmt: skip
    for k in range(len(sectors)):
        for lane in (0, 5, 7):
            # Alone in another lane, the others zero.
            moved, beside = np.zeros_like(first), np.zeros_like(first)
            for a, b in ((k, lane), (k + tile.WIDTH, lane + tile.WIDTH)):
                moved[:, b], beside[:, b] = first[:, a], partner[:, a]
            allowed = np.zeros_like(mask)
            allowed[:, lane] = mask[:, k]
            single = tile.lanczos(
                shared.structure, tile_phases(solver, magnetic, [sectors[k]] * tile.WIDTH),
                allowed[shared.special], moved, beside[None], 30,
            )  # fmt: skip
            assert np.array_equal(single.alpha[:, lane], whole.alpha[:, k])
            assert np.array_equal(single.beta[:, lane], whole.beta[:, k])
            assert np.array_equal(single.dots[:, :, lane], whole.dots[:, :, k])
            assert single.length[lane] == whole.length[k]
            rest = np.delete(np.arange(tile.WIDTH), lane)
            assert (single.length[rest] == 0).all()
            assert (single.alpha[:, rest] == 0).all()
    assert X.shape == mask.shape


def test_forbidden_orbits_stay_empty() -> None:
    solver = solver_of(ring(12))
    magnetic, shared = solver.plan.magnetic[0], solver.share(0)
    sectors = list(magnetic.sectors[: tile.WIDTH])
    _, first, mask = start(shared, sectors, np.random.default_rng(8))
    assert not mask[:, : len(sectors)].all()
    tile.lanczos(
        shared.structure, tile_phases(solver, magnetic, sectors), mask[shared.special],
        first, np.zeros((0, *first.shape)), 60,
    )  # fmt: skip
    # ``first`` is one of the two vectors that the recursion goes on with.
    forbidden = ~mask
    assert (first[:, : tile.WIDTH][forbidden] == 0).all()
    assert (first[:, tile.WIDTH :][forbidden] == 0).all()
    assert np.isfinite(first).all()


@pytest.mark.parametrize("n", [4, 6])
def test_a_small_space_is_used_up(n: int) -> None:
    """The steps taken are the number of different eigenvalues in the sector, and the Ritz values
    are these eigenvalues. Complete graphs have few."""
    cluster = complete(n)
    solver = solver_of(cluster)
    basis = Basis(cluster, solver)
    dense = cluster.hamiltonian() / solver.unit
    seen = set()
    for index, magnetic in enumerate(solver.plan.magnetic):
        shared = solver.share(index)
        sectors = list(magnetic.sectors[: tile.WIDTH])
        _, first, mask = start(shared, sectors, np.random.default_rng(9))
        found = tile.lanczos(
            shared.structure, tile_phases(solver, magnetic, sectors), mask[shared.special],
            first, np.zeros((0, *first.shape)), 40,
        )  # fmt: skip
        for k, sector in enumerate(sectors):
            P, there = projector(basis, shared, magnetic, sector)
            energy = np.linalg.eigvalsh((P.conj().T @ dense @ P)[np.ix_(there, there)])
            different = energy[np.append(True, np.diff(energy) > 1e-9)]
            length = int(found.length[k])
            assert length == len(different)
            seen.add(length)
            T = np.diag(found.alpha[:length, k])
            T += np.diag(found.beta[: length - 1, k], 1) + np.diag(found.beta[: length - 1, k], -1)
            assert np.abs(np.linalg.eigvalsh(T) - different).max() < 1e-12
            assert (found.beta[length - 1 :, k] == 0).all()
    assert seen >= {1, 2}


def test_links_hold_a_symmetric_matrix_in_six_bytes_each() -> None:
    solver = solver_of(ring(10))
    links = solver.share(0).structure.links
    assert isinstance(links, sparse.SparseLinks)
    assert links.nbytes == 8 * len(links.start) + 6 * len(links.target)


SCRIPT = """
import numpy as np
from tests.strategies import ring
from tests.test_tile import MIXED, TILTED, TWISTED, solver_of
for cluster in (ring(6), MIXED, TILTED):
    solver = solver_of(cluster, steps=4)
    for piece in solver.pieces()[:5]:
        for name, values in solver.solve(piece).items():
            if np.iscomplexobj(values):
                values = np.concatenate([values.real.ravel(), values.imag.ravel()])
            print(piece.key, name, *map(repr, np.asarray(values, dtype=float).ravel().tolist()))
"""


def test_kernels_give_the_same_without_the_compiler() -> None:
    def run(disable: str) -> list[tuple[str, np.ndarray]]:
        done = subprocess.run(
            [sys.executable, "-c", SCRIPT],
            env={**os.environ, "NUMBA_DISABLE_JIT": disable},
            capture_output=True,
            text=True,
            check=False,
        )
        assert done.returncode == 0, done.stderr
        rows = [line.split() for line in done.stdout.splitlines()]
        # Keys hold blanks: numbers begin after the name.
        names = ("alpha", "beta", "dots", "length", "moments")
        at = [next(i for i, w in enumerate(row) if w in names) for row in rows]
        return [
            (" ".join(row[: i + 1]), np.array(row[i + 1 :], dtype=float))
            for row, i in zip(rows, at, strict=True)
        ]

    compiled, plain = run("0"), run("1")
    assert len(compiled) == len(plain) > 15
    for (name, a), (other, b) in zip(compiled, plain, strict=True):
        assert name == other
        assert a.shape == b.shape
        assert np.abs(a - b).max(initial=0) < 1e-9, name
