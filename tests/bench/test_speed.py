"""Full spectra against the plain script, side by side in one run. ``pytest -m bench -s``."""

from __future__ import annotations

import time

import numpy as np
import pytest

import thermo
from tests.bench import plain
from tests.bench.measure import best, in_own_process, lattice_mapping, ring_mapping

pytestmark = [pytest.mark.bench, pytest.mark.timeout(3600)]


def compare(mapping: dict, bonds: plain.Bonds, sites: int, repeats: int) -> float:
    model = thermo.read_model(mapping)
    levels = thermo.solve(model, method="full")  # warm: kernels compiled
    ours = best(lambda: thermo.solve(model, method="full"), repeats)
    start = time.perf_counter()
    reference = plain.all_levels(sites, bonds)
    theirs = time.perf_counter() - start
    ours = min(ours, best(lambda: thermo.solve(model, method="full"), repeats))
    expected = np.sort(np.concatenate([np.repeat(b.energy, b.weight) for b in reference]))
    found = np.repeat(levels.energy.values, levels.weight.values.astype(int))
    assert np.abs(found - expected).max() < 1e-10 * np.ptp(expected)
    assert not np.isnan(levels.total_spin.values).any()
    print(f"\n{sites} sites: plain {theirs:.2f} s, here {ours:.3f} s, ratio {theirs / ours:.0f}")
    return theirs / ours


def test_ring_of_14_with_total_spin_is_20_times_faster() -> None:
    assert compare(ring_mapping(14), plain.ring(14), 14, 5) >= 20


def test_ring_of_16_is_100_times_faster() -> None:
    assert compare(ring_mapping(16), plain.ring(16), 16, 3) >= 100


def test_square_of_4_by_4_is_100_times_faster() -> None:
    assert compare(lattice_mapping("square", [4, 4]), plain.square(4, 4), 16, 3) >= 100


SOLVE = """
import time
import thermo
from tests.bench.measure import ring_mapping
from thermo.spectrum import lapack
from thermo.spectrum.threads import thread_count
spent = [0.0]
original = lapack.eigenvalues
def timed(block, two_stage=None, threads=1):
    start = time.perf_counter()
    found = original(block, two_stage, threads)
    spent[0] += (time.perf_counter() - start) * threads
    return found
lapack.eigenvalues = timed
thermo.solve(thermo.read_model(ring_mapping(6)), method='full')
model = thermo.read_model(ring_mapping({sites}))
plan = thermo.survey(model)
spent[0] = 0.0
start = time.perf_counter()
levels = thermo.solve(model, method='full')
wall = time.perf_counter() - start
# Core seconds inside LAPACK over core seconds in all.
result = dict(wall=wall, lapack=spent[0] / (wall * thread_count()), planned=plan.memory_bytes,
              forecast=plan.seconds, ground=float(levels.energy.values[0]),
              levels=int(levels.sizes['level']), largest=plan.largest)
"""


def test_ring_of_20_is_lapack_and_little_else() -> None:
    found = in_own_process(SOLVE.format(sites=20))
    share = found["lapack"]
    print(
        f"\n20 sites: {found['wall']:.1f} s (forecast {found['forecast']:.0f} s), "
        f"{100 * share:.1f} % in LAPACK, peak {found['peak'] / 2**30:.2f} GiB "
        f"(planned {found['planned'] / 2**30:.2f} GiB), {found['levels']} levels"
    )
    assert found["ground"] == pytest.approx(-8.904386530, abs=2e-9)  # Bethe equations
    assert share >= 0.85
    assert found["peak"] < 6 * 2**30
    assert found["peak"] < 1.1 * found["planned"] + 2**28


def test_time_against_size() -> None:
    print("\nsites  largest block      levels     wall (s)  forecast (s)  peak (GiB)")
    for sites in range(10, 21):
        found = in_own_process(SOLVE.format(sites=sites))
        print(
            f"{sites:5d}  {found['largest']:13,d}  {found['levels']:10,d}  {found['wall']:11.3f}"
            f"  {found['forecast']:12.2f}  {found['peak'] / 2**30:10.2f}"
        )
        if found["wall"] > 5:
            assert 0.5 < found["forecast"] / found["wall"] < 2
