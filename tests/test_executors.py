"""Pieces of work in threads and through dask: the same arrays, whatever happens on the way."""

from __future__ import annotations

import functools
import os
import re
import signal
import sys
import tempfile
import threading
import time
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import psutil
import pytest

from tests import pieces
from tests.pieces import Piece
from thermo.errors import RangeError, UnavailableError, WorkerError
from thermo.spectrum import cluster
from thermo.spectrum.checkpoint import Checkpoint
from thermo.spectrum.executors import (
    Distributed,
    Executor,
    Local,
    check_executor,
    run_pieces,
)

SIX = [Piece(n, cost=6 - n) for n in range(6)]
RUN = {"seed": 1}


def right(found: dict[str, dict[str, Any]], wanted: list[Piece]) -> bool:
    return list(found) == [p.key for p in wanted] and all(
        pieces.same(found[p.key], p.number) for p in wanted
    )


class Stop(Exception):  # noqa: N818
    """Raised by a progress callback, as Ctrl-C does in the command."""


# ---------------------------------------------------------------- in threads


@pytest.mark.parametrize("workers", [1, 2, 8])
def test_threads(workers: int) -> None:
    assert right(run_pieces(SIX, pieces.solve, executor=Local(workers)), SIX)


def test_no_pieces() -> None:
    assert run_pieces([], pieces.solve, progress=lambda _f, _t: None) == {}


def test_two_pieces_of_one_key_are_a_fault_of_the_program() -> None:
    with pytest.raises(ValueError, match="same key"):
        run_pieces([Piece(1), Piece(1)], pieces.solve)


def test_no_more_at_once_than_memory_allows() -> None:
    now, most, lock = 0, 0, threading.Lock()

    def solve(piece: Piece) -> dict[str, Any]:
        nonlocal now, most
        with lock:
            now += 1
            most = max(most, now)
        time.sleep(0.02)
        with lock:
            now -= 1
        return pieces.arrays(piece.number)

    run_pieces(SIX, solve, executor=Local(4), workers=2)
    assert most == 2
    run_pieces(SIX, solve, executor=Local(1), workers=2)
    assert most == 2


def test_what_was_finished_is_not_done_again(tmp_path: Path) -> None:
    path, done = tmp_path / "c", tmp_path / "done"
    done.mkdir()
    solve = functools.partial(pieces.solve_and_count, folder=str(done))
    with Checkpoint(path, RUN) as kept:
        with pytest.raises(ArithmeticError, match="piece 3"):
            run_pieces(
                SIX, functools.partial(pieces.fail_at, number=3), executor=Local(1), checkpoint=kept
            )
        assert kept.keys() == ["piece-0", "piece-1", "piece-2"]
        found = run_pieces(SIX[::-1], solve, checkpoint=kept)
        assert right(found, SIX[::-1])
        assert sorted(p.name[0] for p in done.iterdir()) == ["3", "4", "5"]
    with Checkpoint(path, RUN) as kept:
        assert right(run_pieces(SIX, solve, checkpoint=kept), SIX)
    assert len(list(done.iterdir())) == 3


def test_a_damaged_record_is_done_again(tmp_path: Path) -> None:
    path = tmp_path / "c"
    with Checkpoint(path, RUN) as kept:
        run_pieces(SIX, pieces.solve, checkpoint=kept)
    content = bytearray(path.read_bytes())
    place = content.index(pieces.arrays(4)["energy"].tobytes()[:64])
    content[place] ^= 128
    path.write_bytes(bytes(content))
    with Checkpoint(path, RUN) as kept:
        assert right(run_pieces(SIX, pieces.solve, checkpoint=kept), SIX)
        assert kept.damaged == set()


def test_progress(tmp_path: Path) -> None:
    told: list[tuple[float, str]] = []
    with Checkpoint(tmp_path / "c", RUN) as kept:
        run_pieces(SIX[:2], pieces.solve, checkpoint=kept)
        run_pieces(
            SIX,
            functools.partial(pieces.solve, seconds=0.3),
            executor=Local(2),
            checkpoint=kept,
            progress=lambda fraction, text: told.append((fraction, text)),
            share=(0.2, 0.8),
        )
    fractions = [fraction for fraction, _ in told]
    assert fractions == sorted(fractions)
    # 11 of the 21 units of cost were there already.
    assert fractions[0] == pytest.approx(0.2 + 0.6 * 11 / 21)
    assert fractions[-1] == pytest.approx(0.8)
    assert told[0][1] == "2 of 6 pieces were kept, 4 left"
    assert re.fullmatch(r"number [45] done, 0 left", told[-1][1])
    halfway = [text for _, text in told if text.startswith(("number 2 done", "number 3 done"))]
    assert any("left, " in text and text.endswith("s") for text in halfway)


def test_a_stop_is_noticed_while_a_piece_runs(tmp_path: Path) -> None:
    def progress(fraction: float, _text: str) -> None:
        if fraction > 0:
            raise Stop

    long = [Piece(0), Piece(1), Piece(2)]
    started = time.monotonic()
    with Checkpoint(tmp_path / "c", RUN) as kept:
        with pytest.raises(Stop):
            run_pieces(
                long,
                lambda p: pieces.solve(p, seconds=5.0 * p.number),
                executor=Local(2),
                checkpoint=kept,
                progress=progress,
            )
        assert kept.keys() == ["piece-0"]
    assert time.monotonic() - started < 3


# ---------------------------------------------------------------- what is no executor


@pytest.mark.parametrize(
    ("make", "words"),
    [
        (lambda: Local(0), "workers is 0"),
        (lambda: Local(2.5), "workers is 2.5"),
        (lambda: Local(True), "workers is True"),
        (lambda: Distributed(), "one of the two"),
        (lambda: Distributed("a:1", 2), "one of the two"),
        (lambda: Distributed(workers=-1), "workers is -1"),
        (lambda: Distributed("somewhere"), "'somewhere', which is none"),
        (lambda: Distributed("http://a:80"), "host:port"),
        (lambda: Distributed("a:1; rm"), "host:port"),
        (lambda: check_executor("threads"), "thermo.Local"),  # type: ignore[arg-type]
    ],
)
def test_bad_executors(make: Any, words: str) -> None:
    with pytest.raises(RangeError) as caught:
        make()
    assert words in str(caught.value)


@pytest.mark.parametrize(
    "address", ["node7:8786", "tcp://10.0.0.1:8786", "tls://[::1]:99", "a.b-c.org:1"]
)
def test_addresses(address: str) -> None:
    assert Distributed(address).at_once == 1


def test_without_the_library(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setitem(sys.modules, "distributed", None)
    with pytest.raises(UnavailableError, match=r"pip install 'partita\[distributed\]'"):
        run_pieces(SIX, pieces.solve, executor=Distributed(workers=1))


# ---------------------------------------------------------------- through dask


def settings_of_environment() -> dict[str, str]:
    return {k: v for k, v in os.environ.items() if not k.startswith("PYTEST")}


def told(process: psutil.Process) -> str:
    try:
        return " ".join(process.cmdline())
    except psutil.Error:  # has ended
        return ""


@pytest.fixture
def nothing_left(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Iterator[None]:
    """No process, no folder and no changed environment is left by a run."""
    monkeypatch.setattr(tempfile, "tempdir", str(tmp_path))
    environment = settings_of_environment()
    children = set(psutil.Process().children(recursive=True))
    yield
    assert list(tmp_path.glob("partita-workers-*")) == []
    assert settings_of_environment() == environment
    # The interpreter's own process that tracks shared resources stays; killed ones may take a
    # moment to vanish.
    left = set(psutil.Process().children(recursive=True)) - children
    _, alive = psutil.wait_procs([p for p in left if "resource_tracker" not in told(p)], timeout=3)
    assert alive == []


@pytest.mark.usefixtures("nothing_left")
@pytest.mark.parametrize("how", ["die_once", "die_with_its_results"])
def test_a_worker_killed_in_its_task(tmp_path: Path, how: str) -> None:
    mark = tmp_path / "mark"
    solve = functools.partial(getattr(pieces, how), number=1, mark=str(mark))
    with Checkpoint(tmp_path / "c", RUN) as kept:
        found = run_pieces(SIX, solve, executor=Distributed(workers=2), checkpoint=kept)
        assert mark.exists()
        assert right(found, SIX)
        assert kept.keys() == sorted(p.key for p in SIX)
    assert run_pieces(SIX, pieces.solve).keys() == found.keys()


@pytest.mark.usefixtures("nothing_left")
def test_workers_that_cannot_be_started_again(monkeypatch: pytest.MonkeyPatch) -> None:
    import distributed

    clusters: list[Any] = []

    class Watched(distributed.LocalCluster):  # type: ignore[misc]
        def __init__(self, **options: Any) -> None:
            super().__init__(**options)
            clusters.append(self)

    def progress(fraction: float, _text: str) -> None:
        if fraction > 0:
            for nanny in clusters.pop().workers.values() if clusters else ():
                nanny.close_gracefully()
                os.kill(nanny.pid, signal.SIGKILL)

    monkeypatch.setattr(distributed, "LocalCluster", Watched)
    monkeypatch.setattr(cluster, "OWN_SECONDS", 1)
    monkeypatch.setattr(cluster, "_LOOK", 0.2)
    slow = functools.partial(pieces.slow_after, number=0)
    with pytest.raises(WorkerError, match="cannot be started again"):
        run_pieces(SIX, slow, executor=Distributed(workers=1), progress=progress)


@pytest.mark.usefixtures("nothing_left")
def test_a_piece_that_kills_every_worker(tmp_path: Path) -> None:
    import dask

    with (
        dask.config.set({"distributed.scheduler.allowed-failures": 1}),
        Checkpoint(tmp_path / "c", RUN) as kept,
        pytest.raises(WorkerError) as caught,
    ):
        run_pieces(SIX[:1], pieces.die_always, executor=Distributed(workers=1), checkpoint=kept)
    assert "number 0 ended 2 workers" in str(caught.value)
    assert f"kept in {tmp_path / 'c'}" in str(caught.value)


@pytest.fixture
def as_it_was() -> Iterator[None]:
    """The environment put back after a cluster that is the test's own."""
    before = dict(os.environ)
    yield
    cluster._restore(before)


@pytest.mark.usefixtures("as_it_was")
def test_faults_and_stops_of_a_cluster(tmp_path: Path) -> None:
    def progress(fraction: float, _text: str) -> None:
        if fraction > 0:
            raise Stop

    from distributed import LocalCluster

    with LocalCluster(
        n_workers=1,
        threads_per_worker=2,
        dashboard_address="127.0.0.1:0",
        local_directory=str(tmp_path),
        env={"PARTITA_THREADS": "3"},
        silence_logs=60,
    ) as running:
        there: Executor = Distributed(running.scheduler_address)
        assert right(run_pieces(SIX, pieces.solve, executor=there), SIX)
        threads = run_pieces(SIX[:2], pieces.tell_threads, executor=there)
        for found in threads.values():
            assert found["threads"][0] == 3
            assert max(found["threads"][1:]) <= 3
            assert found["process"] != os.getpid()
        with pytest.raises(ArithmeticError, match="piece 3 cannot be done"):
            run_pieces(SIX, functools.partial(pieces.fail_at, number=3), executor=there)
        started = time.monotonic()
        with pytest.raises(Stop):
            run_pieces(
                SIX,
                functools.partial(pieces.slow_after, number=0),
                executor=there,
                progress=progress,
            )
        assert time.monotonic() - started < 3
        assert len(running.scheduler.tasks) <= 2  # those at hand; all others were given up


@pytest.mark.usefixtures("as_it_was")
def test_a_lost_scheduler(tmp_path: Path) -> None:
    from distributed import LocalCluster

    running = LocalCluster(
        n_workers=1,
        threads_per_worker=1,
        dashboard_address="127.0.0.1:0",
        local_directory=str(tmp_path / "w"),
        silence_logs=60,
    )
    closer = threading.Thread(target=running.close)

    def progress(fraction: float, _text: str) -> None:
        if fraction > 0 and not closer.is_alive():
            closer.start()

    try:
        with Checkpoint(tmp_path / "c", RUN) as kept:
            with pytest.raises(WorkerError, match="connection to the scheduler was lost"):
                run_pieces(
                    SIX,
                    functools.partial(pieces.slow_after, number=0),
                    executor=Distributed(running.scheduler_address),
                    checkpoint=kept,
                    progress=progress,
                )
            assert kept.keys() == ["piece-0"]
    finally:
        closer.join()
        running.close()


def test_no_scheduler(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(cluster, "CONNECT_SECONDS", 1)
    with pytest.raises(WorkerError, match=r"no scheduler answers at 127\.0\.0\.1:9 within 1 s"):
        run_pieces(SIX, pieces.solve, executor=Distributed("127.0.0.1:9"))


def test_workers_of_another_version() -> None:
    with pytest.raises(WorkerError, match="install the same version everywhere"):
        cluster._task(pieces.solve, Piece(1), 1, "0.0.1")


class Future:
    """A stand-in for a future of the library, whose state changes when it is fetched."""

    def __init__(self, status: str, raises: BaseException | None = None, then: str = "") -> None:
        self.status, self.raises, self.then = status, raises, then or status

    def result(self, timeout: float) -> dict[str, Any]:
        assert timeout > 0
        self.status = self.then
        if self.raises is not None:
            raise self.raises
        return pieces.arrays(1)

    def exception(self) -> BaseException:
        return ModuleNotFoundError("No module named 'thermo'")


@pytest.mark.parametrize(
    ("future", "found"),
    [
        (Future("finished"), "arrays"),
        (Future("pending"), "again"),
        (Future("lost"), "again"),
        (Future("finished", TimeoutError(), "pending"), "again"),
        (Future("finished", OSError("comm closed")), "scheduler was lost"),
        (Future("finished", RuntimeError("lost on the way"), "cancelled"), "scheduler was lost"),
        (Future("cancelled"), "scheduler was lost"),
        (Future("error"), "cannot load what it needs"),
        (Future("finished", RuntimeError("lost on the way"), "error"), "cannot load"),
    ],
)
def test_every_state_of_a_future(future: Future, found: str) -> None:
    if found == "arrays":
        assert pieces.same(dict(cluster._result(future, "x") or {}), 1)
    elif found == "again":
        assert cluster._result(future, "x") is None
    else:
        with pytest.raises(WorkerError, match=found):
            cluster._result(future, "x")
