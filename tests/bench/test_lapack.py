"""The two-stage path against numpy where it is used, and where the crossovers lie."""

from __future__ import annotations

from concurrent.futures import ThreadPoolExecutor
from functools import partial

import numpy as np
import pytest

from tests.bench.measure import best
from thermo.spectrum import lapack
from thermo.spectrum.threads import blas_threads, thread_count

pytestmark = [pytest.mark.bench, pytest.mark.timeout(3600)]


def block(n: int, complex_block: bool) -> np.ndarray:
    rng = np.random.default_rng(n)
    a = rng.standard_normal((n, n))
    if complex_block:
        a = a + 1j * rng.standard_normal((n, n))
    return np.asfortranarray(a + a.conj().T)


def in_place(a: np.ndarray, two_stage: bool) -> np.ndarray:
    """Eigenvalues of a copy, whose time counts too."""
    return lapack.eigenvalues(a.copy(order="F"), two_stage)


def side_by_side(a: np.ndarray) -> None:
    """Two blocks at once, one thread each, as the solver does it."""
    with blas_threads(1), ThreadPoolExecutor(2) as pool:
        list(pool.map(lambda _: in_place(a, True), range(2)))


@pytest.mark.parametrize("factor", [1.0, 1.25])
@pytest.mark.parametrize("kind", ["real", "complex"])
@pytest.mark.parametrize("way", ["side by side", "alone"])
def test_two_stage_beats_numpy_where_it_is_used(way: str, kind: str, factor: float) -> None:
    assert lapack.two_stage_works()
    thresholds = lapack.SIDE_BY_SIDE if way == "side by side" else lapack.ALONE
    n = round(thresholds[kind] * factor)
    a = block(n, kind == "complex")
    numpy_time, ours = np.inf, np.inf
    for _ in range(3 if n < 5000 else 2):  # taken in turns, as the machine's speed drifts
        with blas_threads(thread_count()):
            numpy_time = min(numpy_time, best(partial(np.linalg.eigvalsh, a), 1))
            if way == "alone":
                ours = min(ours, best(partial(in_place, a, True), 1))
        if way == "side by side":
            ours = min(ours, best(partial(side_by_side, a), 1) / 2)
    print(f"\n{way}, {kind} {n}: numpy {numpy_time:.2f} s, two-stage {ours:.2f} s a block, "
          f"ratio {numpy_time / ours:.2f}")  # fmt: skip
    assert numpy_time / ours >= 1.4


def test_crossover_table() -> None:
    print("\n   n  kind     numpy    one-stage  two-stage (s)")
    for n in (500, 1000, 1500, 2000, 3000, 4000, 5000):
        for kind in ("real", "complex"):
            if kind == "complex" and n > 3000:
                continue
            a = block(n, kind == "complex")
            with blas_threads(thread_count()):
                times = [
                    best(partial(np.linalg.eigvalsh, a), 2),
                    best(partial(in_place, a, False), 2),
                    best(partial(in_place, a, True), 2),
                ]
            print(f"{n:5d}  {kind:8s}" + "".join(f"{t:10.3f}" for t in times))
