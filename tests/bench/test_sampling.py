"""Sampled spectra against the plain script, side by side in one run. ``pytest -m bench -s``."""

from __future__ import annotations

import time
from concurrent.futures import ThreadPoolExecutor

import numpy as np
import pytest
import scipy.sparse as sp

import thermo
from tests.bench import plain_sampling
from tests.bench.measure import best, in_own_process, ring_mapping
from thermo.ensemble import cluster_curves
from thermo.hilbert import tile
from thermo.model.level_table import table_from_dataset
from thermo.spectrum import sampled, sampling_plan
from thermo.spectrum.settings import Settings
from thermo.spectrum.threads import thread_count
from thermo.symmetry.sectors import plan_symmetry

pytestmark = [pytest.mark.bench, pytest.mark.timeout(7200)]

TEMPERATURES = np.array([0.1, 0.2, 0.3, 0.5, 1.0, 2.0])


def test_time_times_variance_is_50_times_less_than_plain() -> None:
    """20-site ring, C and χ at six temperatures, the whole solution against vectors alone."""
    model = thermo.read_model(ring_mapping(20))
    matrices = plain_sampling.blocks(20)  # building them is not counted
    runs = 24
    thermo.solve(model, method="sampled")  # warm: kernels compiled
    ours, theirs = [], []
    seconds = {"here": 0.0, "plain": 0.0}
    for seed in range(runs):
        start = time.perf_counter()
        levels = thermo.solve(model, method="sampled", seed=seed)
        seconds["here"] += time.perf_counter() - start
        found = cluster_curves(table_from_dataset(levels), TEMPERATURES, np.zeros(1))
        ours.append([found.specific_heat[:, 0], found.moment_variance[:, 0]])
        start = time.perf_counter()
        rough = plain_sampling.sample(matrices, np.random.default_rng(seed))
        seconds["plain"] += time.perf_counter() - start
        theirs.append(plain_sampling.curves(rough, TEMPERATURES))
    # Standard deviations over the mean of all our runs, which are far more precise.
    mean = np.mean(ours, axis=0)
    spread = {
        "here": np.std(ours, axis=0, ddof=1) / mean,
        "plain": np.sqrt(np.mean((np.array(theirs) - mean) ** 2, axis=0)) / mean,
    }
    gain = (spread["plain"] / spread["here"]) ** 2 * seconds["plain"] / seconds["here"]
    print(f"\nper run: plain {seconds['plain'] / runs:.2f} s, here {seconds['here'] / runs:.2f} s")
    for name, row in (("C", 0), ("chi", 1)):
        for t, a, b, g in zip(
            TEMPERATURES, spread["plain"][row], spread["here"][row], gain[row], strict=True
        ):
            print(f"{name} at T/J = {t}: plain {100 * a:.3g} %, here {100 * b:.2g} %, gain {g:.3g}")
    print(f"smallest gain {gain.min():.3g}")
    assert gain.min() >= 50


def _shared(sites: int) -> tuple[sampled.SampledSolver, sampled._Shared]:
    model = thermo.read_model(ring_mapping(sites))
    plan = plan_symmetry(model, use_total_spin=False)
    settings = sampling_plan.complete(plan, Settings(full_below=0))
    solver = sampled.SampledSolver(model, settings, 1)
    middle = next(k for k, m in enumerate(solver.plan.magnetic) if m.twice_m == 0)
    return solver, solver.share(middle)


def test_one_product_is_3_times_faster_than_csr_at_a_quarter_of_the_memory() -> None:
    """H·X over all characters of M = 0 at 24 sites, per real column (a complex one is two)."""
    solver, shared = _shared(24)
    magnetic = next(m for m in solver.plan.magnetic if m.twice_m == 0)
    links, rows = shared.structure.links, shared.structure.rows
    order = magnetic.elements.order
    columns = [s for s in magnetic.sectors for _ in range(2)]  # two vectors of each character
    tiles = -(-len(columns) // tile.WIDTH)
    rng = np.random.default_rng(1)
    work = []
    for k in range(tiles):
        mine = columns[k * tile.WIDTH : (k + 1) * tile.WIDTH]
        phases = [np.exp(2j * np.pi * s.phases / magnetic.elements.modulus) for s in mine]
        phases += [np.ones(order, complex)] * (tile.WIDTH - len(mine))
        table = tile.phase_table(np.array([1.0]) @ solver.kinds.columns, phases)
        work.append((table, rng.standard_normal((rows, 16)), np.zeros((rows, 16))))
    one, none = np.ones(tile.WIDTH), np.zeros(tile.WIDTH)

    def product(k: int) -> None:
        table, x, y = work[k]
        tile.multiply(shared.structure, table, one, none, x, y, 0, rows)

    # The same sector's matrix for the character 1, real, one vector at a time.
    values = rng.standard_normal(len(links.target))
    csr = sp.csr_matrix((values, links.target, links.start), shape=(rows, rows))
    csr = (csr + sp.diags(shared.structure.diagonal)).tocsr()
    x = rng.standard_normal(rows)
    with ThreadPoolExecutor(thread_count()) as pool:
        list(pool.map(product, range(tiles)))
        ratios = []
        for _ in range(15):
            theirs = best(lambda: csr @ x, 10)
            ours = best(lambda: list(pool.map(product, range(tiles))), 3)
            ratios.append(theirs * 2 * len(columns) / ours)
    stream = np.zeros(20_000_000)
    other = np.ones_like(stream)
    bandwidth = 2 * stream.nbytes / best(lambda: np.copyto(stream, other), 5)
    item = 16  # the characters' matrices are complex but for four
    theirs_bytes = sum(
        len(links.target) * (4 + (8 if s.real and s.conjugating is not None else item))
        for s in magnetic.sectors
    )
    moved = tiles * (links.nbytes + 128 * len(links.target) + 2 * 128 * rows)
    elements = len(links.target) * 2 * len(columns) / ours
    print(
        f"\n24 sites, M = 0: {rows} orbits, {len(links.target)} links; per real column "
        f"{np.median(ratios):.2f} (from {min(ratios):.2f} to {max(ratios):.2f}) times faster than "
        f"one CSR product; {elements / 1e9:.2f}e9 elements/s; reads and writes "
        f"{moved / ours / 1e9:.1f} GB/s where copying moves {bandwidth / 1e9:.1f} GB/s; memory "
        f"{links.nbytes / 1e6:.1f} MB for all {len(magnetic.sectors)} characters, CSR "
        f"{csr.data.nbytes / 1e6 + csr.indices.nbytes / 1e6:.1f} MB for the real one, "
        f"{theirs_bytes / 1e6:.0f} MB for all"
    )
    assert np.median(ratios) >= 3
    assert links.nbytes <= theirs_bytes / 4


LARGE = """
import time
import thermo
from tests.bench.measure import {maker}
model = thermo.read_model({mapping})
plan = thermo.survey(model, method='sampled')
thermo.solve(thermo.read_model({small}), method='sampled', full_below=0)
start = time.perf_counter()
levels = thermo.solve(model, method='sampled', vectors=2)
result = dict(
    seconds=time.perf_counter() - start, forecast=plan.seconds, planned=plan.memory_bytes,
    energy=float(levels.energy.values[0]), levels=int(levels.sizes['level']),
)
"""


def complete(mapping: str, small: str, maker: str) -> dict:
    """Solve a cluster in its own process and tell what it took."""
    found = in_own_process(LARGE.format(mapping=mapping, small=small, maker=maker))
    print(
        f"\n{mapping}: {found['seconds']:.0f} s (forecast {found['forecast']:.0f} s), "
        f"{found['peak'] / 2**20:.0f} MiB (planned {found['planned'] / 2**20:.0f} MiB), "
        f"E0 = {found['energy']:.9f}, {found['levels']} levels"
    )
    assert 0.5 < found["forecast"] / found["seconds"] < 2
    assert 0.8 < found["planned"] / found["peak"] < 1.2
    return found


def test_ring_of_24_is_complete_in_minutes() -> None:
    found = complete("ring_mapping(24)", "ring_mapping(12)", "ring_mapping")
    assert abs(found["energy"] + 10.670014517) < 1e-8
    assert found["seconds"] < 300


def test_ring_of_28_is_complete_in_an_hour_and_8_gib() -> None:
    found = complete("ring_mapping(28)", "ring_mapping(12)", "ring_mapping")
    assert found["seconds"] < 3600
    assert found["peak"] < 8 * 2**30


def test_square_of_24_is_complete() -> None:
    mapping = "lattice_mapping('square', [6, 4])"
    complete(mapping, "lattice_mapping('square', [4, 3])", "lattice_mapping")


ONE_SECTOR = """
import functools, time
import thermo
from tests.bench.measure import ring_mapping
from thermo.spectrum import sampled, sampling_plan
from thermo.spectrum.executors import Local, run_pieces
from thermo.spectrum.settings import Settings
from thermo.spectrum.threads import blas_threads, thread_count
from thermo.symmetry.sectors import plan_symmetry
thermo.solve(thermo.read_model(ring_mapping(12)), method='sampled', full_below=0)
model = thermo.read_model(ring_mapping({sites}))
plan = plan_symmetry(model, use_total_spin=False)
settings = sampling_plan.complete(plan, Settings(steps={steps}))
cost = sampling_plan.cost(plan, settings, {limit} * 2**30, thread_count())
solver = sampled.SampledSolver(model, settings, cost.threads)
middle = next(k for k, m in enumerate(solver.plan.magnetic) if m.twice_m == {twice_m})
pieces = [p for p in solver.pieces() if p.magnetic == middle][:{most}]
start = time.perf_counter()
with blas_threads(1):
    found = run_pieces(
        pieces, functools.partial(sampled.solve_piece, model, settings, cost.threads),
        executor=Local(), workers=cost.at_once,
    )
seconds = time.perf_counter() - start
again = []
for _ in range({repeats}):
    start = time.perf_counter()
    sampled.solve_piece(model, settings, 1, pieces[0])
    again.append(time.perf_counter() - start)
share = sum(p.cost for p in pieces) / sum(p.cost for p in solver.pieces())
magnetic = solver.plan.magnetic[middle]
lowest = 0.0
if {most} > 10:
    for k, families in solver.ritz(magnetic, found):
        for family in families:
            lowest = min(lowest, min(r.value[0] for r in family))
result = dict(
    seconds=seconds, all=seconds / share, planned=cost.memory_bytes, energy=float(lowest),
    orbits=magnetic.orbits, states=magnetic.configurations, pieces=len(pieces),
    columns=sum(len(t) for t in solver.tiles(magnetic)) * solver.family,
    again=min(again, default=0.0),
)
"""


def test_ring_of_30_has_one_complete_sector() -> None:
    """All characters of M = 0 at 30 sites, two vectors each, and what all M would take."""
    found = in_own_process(
        ONE_SECTOR.format(sites=30, steps=150, limit=8, twice_m=0, most=10**6, repeats=0)
    )
    print(
        f"\n30 sites, M = 0: {found['orbits']} orbits, {found['pieces']} pieces in "
        f"{found['seconds']:.0f} s with {found['peak'] / 2**20:.0f} MiB; all M would take "
        f"{found['all'] / 60:.0f} min and {found['planned'] / 2**20:.0f} MiB; "
        f"E0 = {found['energy']:.9f}"
    )
    assert found["peak"] < 8 * 2**30


def test_cost_per_state_and_bond_is_flat() -> None:
    """One tile of M = 0 from 20 to 28 sites: seconds per column, step, state and bond."""
    flat = []
    for sites in range(20, 29, 2):
        repeats = max(3, 24 >> (sites - 20) // 2)
        found = in_own_process(
            ONE_SECTOR.format(sites=sites, steps=60, limit=8, twice_m=0, most=1, repeats=repeats)
        )
        flat.append(found["again"] / (60 * tile.WIDTH * found["orbits"] * sites))
        print(
            f"\n{sites} sites: {found['orbits']} orbits, one tile of 60 steps in "
            f"{found['again']:.2f} s: {flat[-1] * 1e9:.3f} ns per column, step, orbit and bond"
        )
    print(f"largest over smallest {max(flat) / min(flat):.2f}")


def test_accuracy_of_the_ring_of_24() -> None:
    """What two vectors leave of noise at 24 sites, by their own error bars."""
    levels = thermo.solve(thermo.read_model(ring_mapping(24)), method="sampled")
    curves = thermo.curves(levels, temperature=[0.05, *TEMPERATURES], units="reduced")
    for name in ("specific_heat", "susceptibility"):
        relative = 100 * curves[name + "_standard_error"] / curves[name]
        print(f"\n{name}: " + ", ".join(f"{float(e):.2g} %" for e in relative[:, 0]))
        assert float(relative.max()) < 3
