"""Full spectra: LAPACK paths, memory limits, survey, tasks, the self-check."""

from __future__ import annotations

import threading
import time

import numpy as np
import pytest

from thermo.errors import MemoryLimitError, RangeError, SpectrumError
from thermo.model import read_model
from thermo.model.level_table import check_levels, table_from_dataset
from thermo.solving import solve
from thermo.spectrum import FullSolver, lapack, solve_full, survey
from thermo.spectrum.memory import memory_limit, size_text
from thermo.spectrum.tasks import run_tasks


def ring(n: int, **more):
    return read_model(
        {
            "format": 1,
            "energy_unit": "K",
            "bond_term": "+J S.S",
            "couplings": {"J": 10.0, "J2": 1.0},
            "lattice": {
                "name": "chain",
                "size": [n],
                "spin": 0.5,
                "couplings": {"nearest": "J", "next": "J2"},
                **more,
            },
        }
    )


def random_block(n: int, complex_block: bool) -> np.ndarray:
    rng = np.random.default_rng(n)
    a = rng.standard_normal((n, n))
    if complex_block:
        a = a + 1j * rng.standard_normal((n, n))
    return np.asfortranarray(a + a.conj().T)


@pytest.mark.parametrize("complex_block", [False, True])
@pytest.mark.parametrize("two_stage", [False, True])
@pytest.mark.parametrize("n", [1, 2, 3, 40, 300])
def test_lapack_paths_agree_with_numpy(n: int, two_stage: bool, complex_block: bool) -> None:
    block = random_block(n, complex_block)
    expected = np.linalg.eigvalsh(block)
    block[np.triu_indices(n, 1)] = np.nan  # only the lower triangle may be read
    found = lapack.eigenvalues(block, two_stage)
    assert np.abs(found - expected).max() < 1e-13 * n * np.abs(expected).max()


def test_without_the_library_numpy_does_the_work(monkeypatch) -> None:
    monkeypatch.setattr(lapack, "_library", lambda: None)
    block = random_block(30, True)
    expected = np.linalg.eigvalsh(block)
    assert np.abs(lapack.eigenvalues(block, True) - expected).max() < 1e-12


def test_a_two_stage_routine_that_lies_is_not_used(monkeypatch) -> None:
    honest = lapack._call

    def lying(library, block, two_stage):
        return honest(library, block, two_stage) + (0.1 if two_stage else 0.0)

    monkeypatch.setattr(lapack, "_call", lying)
    lapack.two_stage_works.cache_clear()
    try:
        assert not lapack.two_stage_works()
        block = random_block(30, False)
        expected = np.linalg.eigvalsh(block)
        assert np.abs(lapack.eigenvalues(block, True) - expected).max() < 1e-12
    finally:
        monkeypatch.undo()
        lapack.two_stage_works.cache_clear()


def test_too_large_a_block_is_refused_before_it_is_allocated() -> None:
    started = time.perf_counter()
    with pytest.raises(MemoryLimitError, match=r"needs .* where the limit is 100 MiB"):
        solve(ring(20), memory="100 MiB")
    assert time.perf_counter() - started < 5
    with pytest.raises(MemoryLimitError, match=r"EiB|TiB"):
        solve(ring(60))


def test_memory_limit_reads_sizes() -> None:
    assert memory_limit("4 GiB") == 4 * 2**30
    assert memory_limit("1.5GB") == 1_500_000_000
    assert memory_limit("500MB") == 500 * 10**6
    assert memory_limit("1.5 gib") == 3 * 2**29
    assert memory_limit("2G") == memory_limit("2 Gi") == 2**31
    assert memory_limit(1000) == 1000
    with pytest.raises(RangeError, match="with a unit"):
        memory_limit("4")  # bytes or GiB?
    assert memory_limit(None) > 2**20
    for wrong in ("four", "-1 GiB", "4 parsecs", 0, -5, float("nan"), float("inf")):
        with pytest.raises(RangeError):
            memory_limit(wrong)
    assert size_text(38.4 * 2**30) == "38 GiB"
    assert size_text(999) == "999 bytes"
    assert size_text(1.5 * 2**20) == "1.5 MiB"


def test_peak_memory_is_what_was_planned() -> None:
    import resource

    plan = survey(ring(16))
    assert plan.memory_bytes < 2**28
    before = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss * 1024
    solve(ring(16))
    after = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss * 1024
    assert after - before < plan.memory_bytes + 2**27


def test_survey_tells_what_solve_does() -> None:
    plan = survey(ring(12))
    assert (plan.sites, plan.bonds, plan.conserved) == (12, 24, "total_spin")
    assert (plan.group_order, plan.abelian_order, plan.spin_reversal) == (24, 12, True)
    assert plan.method == "full"
    assert plan.n_states == 4096
    levels = solve(ring(12))
    assert sorted(levels.sector_dimension.values) == sorted(s.dimension for s in plan.sectors)
    assert plan.largest == levels.sector_dimension.values.max()
    assert plan.as_dict()["couplings"] == {"J": 10.0, "J2": 1.0}
    assert 0 < plan.seconds < 60
    large = survey(ring(60))
    assert large.method == "none"
    assert any("sampling needs" in note for note in large.notes)


def test_unknown_method_is_refused_in_one_sentence() -> None:
    with pytest.raises(RangeError, match="'full', 'sampled' or 'auto'"):
        solve(ring(4), method="exact")


def test_one_solver_serves_many_couplings() -> None:
    solver = FullSolver(ring(10))
    for j2 in (0.0, 2.5, 10.0, -3.0):
        table = solver.table({"J2": j2})
        direct = table_from_dataset(solve_full(ring(10).with_couplings({"J2": j2})))
        expected = np.repeat(direct.energy, direct.weight.astype(int))
        found = np.repeat(table.energy, table.weight.astype(int))
        assert np.abs(np.sort(found) - np.sort(expected)).max() < 1e-11 * 40


def test_self_check_catches_a_wrong_spectrum() -> None:
    model = ring(6)
    table = table_from_dataset(solve(model))
    check_levels(table, model)
    for name, change in (("energy", 1e-6), ("weight", 1e-6)):
        wrong = getattr(table, name).copy()
        wrong[3] += change
        fields = {**table.__dict__, name: wrong}
        with pytest.raises(SpectrumError, match="fail their check"):
            check_levels(type(table)(**fields), model)
    with pytest.raises(SpectrumError):
        check_levels(table, model.with_couplings({"J": 10.0001}))


def test_progress_runs_from_something_to_one() -> None:
    seen: list[float] = []
    solve(ring(10), progress=lambda done, text: seen.append(done))
    assert seen == sorted(seen)
    assert seen[-1] == pytest.approx(1.0)


def test_tasks_raise_what_a_worker_raises_and_start_no_more() -> None:
    started = []

    def task(k: int):
        def run() -> int:
            started.append(k)
            time.sleep(0.01)
            if k == 2:
                raise SpectrumError("third")
            return k

        return run

    with pytest.raises(SpectrumError, match="third"):
        list(run_tasks([task(k) for k in range(100)], 2))
    time.sleep(0.1)
    assert len(started) < 20
    assert dict(run_tasks([task(k) for k in (0, 1, 5)], 2)) == {0: 0, 1: 1, 2: 5}
    assert threading.active_count() < 10


def test_extreme_energy_scales_survive() -> None:
    reference = solve(ring(8).with_couplings({"J": 1.0, "J2": 0.3})).energy.values
    for scale in (1e-12, 1e12):
        scaled = solve(ring(8).with_couplings({"J": scale, "J2": 0.3 * scale})).energy.values
        assert np.abs(scaled / scale - reference).max() < 1e-12


def test_no_interaction_at_all_is_a_paramagnet() -> None:
    levels = solve(ring(5).with_couplings({"J": 0.0, "J2": 0.0}))
    assert levels.weight.values.sum() == 32
    assert np.abs(levels.energy.values).max() < 1e-12


def pair_model(first: float, second: float):
    """Two separate dimers of very different strength."""
    return read_model(
        {
            "format": 1,
            "energy_unit": "1",
            "bond_term": "+J S.S",
            "couplings": {"a": first, "b": second},
            "site": [{"spin": 0.5}] * 4,
            "bond": [{"sites": [0, 1], "coupling": "a"}, {"sites": [2, 3], "coupling": "b"}],
        }
    )


def test_a_weak_bond_is_kept_whatever_the_scale() -> None:
    for scale in (1.0, 1e-6, 1e9):
        energies = solve(pair_model(scale, 1e-9 * scale)).energy.values / scale
        lowest = np.unique(np.round(energies - energies[0], 12))[1]
        assert lowest == pytest.approx(1e-9, rel=1e-3)


def test_couplings_that_cancel_to_rounding_are_no_interaction() -> None:
    mapping = {
        "format": 1,
        "energy_unit": "1",
        "bond_term": "+J S.S",
        "couplings": {"a": 0.1 + 0.2, "b": -0.1, "c": -0.2},
        "site": [{"spin": 0.5}] * 2,
        "bond": [{"sites": [0, 1], "coupling": name} for name in "abc"],
    }
    assert np.abs(solve(read_model(mapping)).energy.values).max() < 1e-15


@pytest.mark.parametrize("scale", [1e-200, 1e-90, 1e90])
def test_any_power_of_ten(scale: float) -> None:
    energies = solve(ring(4).with_couplings({"J": scale, "J2": 0.0})).energy.values
    assert energies[0] == pytest.approx(-2 * scale, rel=1e-12)  # the four-ring's ground state


def test_wrong_spin_labels_fail_the_check() -> None:
    model = ring(6)
    table = table_from_dataset(solve(model))
    for change in (0, table.twice_spin + 2):
        labels = np.zeros_like(table.twice_spin) + change
        with pytest.raises(SpectrumError, match="mean square of M"):
            check_levels(type(table)(**{**table.__dict__, "twice_spin": labels}), model)


def test_large_spins() -> None:
    def dimer(spin: float):
        return read_model(
            {
                "format": 1,
                "energy_unit": "1",
                "bond_term": "+J S.S",
                "couplings": {"J": 1.0},
                "site": [{"spin": spin}] * 2,
                "bond": [{"sites": [0, 1], "coupling": "J"}],
            }
        )

    for spin in (10.0, 30.0, 150.0):
        levels = solve(dimer(spin))
        s = np.arange(2 * spin + 1)
        expected = (s * (s + 1) - 2 * spin * (spin + 1)) / 2  # Kambe 1950
        found = np.repeat(levels.energy.values, levels.weight.values.astype(int))
        expected = np.repeat(expected, (2 * s + 1).astype(int))
        assert np.abs(np.sort(found) - expected).max() < 1e-12 * 2 * spin**2


@pytest.mark.parametrize(
    "bonds",
    [
        [],
        [(2 * i, 2 * i + 1) for i in range(15)],
        [(i, j) for i in range(30) for j in range(i)],
    ],
    ids=["free", "dimers", "complete"],
)
def test_huge_groups_are_surveyed_in_seconds(bonds: list[tuple[int, int]]) -> None:
    mapping = {
        "format": 1,
        "energy_unit": "1",
        "bond_term": "+J S.S",
        "couplings": {"J": 1.0},
        "site": [{"spin": 0.5}] * 30,
    }
    if bonds:
        mapping["bond"] = [{"sites": list(b), "coupling": "J"} for b in bonds]
    started = time.perf_counter()
    plan = survey(read_model(mapping))
    assert plan.abelian_order > 50
    assert time.perf_counter() - started < 30


def test_concurrent_solves_leave_the_threads_as_they_were() -> None:
    import threadpoolctl

    def blas() -> list[int]:
        return [
            p["num_threads"] for p in threadpoolctl.threadpool_info() if p["user_api"] == "blas"
        ]

    solve(ring(8))
    before = blas()
    workers = [threading.Thread(target=lambda: solve(ring(9))) for _ in range(8)]
    for w in workers:
        w.start()
    for w in workers:
        w.join()
    assert blas() == before
