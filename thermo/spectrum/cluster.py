"""Pieces of work through dask.distributed: on other machines, or in processes of this one.

A piece is sent by name (a function of a module and plain arguments), is done again when its
worker dies, and sets its own number of threads, since a worker's own settings do not reach them.
"""

from __future__ import annotations

import contextlib
import logging
import os
import shutil
import signal
import sys
import tempfile
import time
from collections.abc import Callable, Generator, Iterator, Mapping, Sequence
from typing import TYPE_CHECKING, Any

from numpy.typing import NDArray

from thermo.errors import UnavailableError, WorkerError
from thermo.spectrum.threads import blas_threads, thread_count

Arrays = Mapping[str, NDArray[Any]]

if TYPE_CHECKING:
    from thermo.spectrum.executors import Distributed

CONNECT_SECONDS = 10
CLOSE_SECONDS = 5
OWN_SECONDS = 60
_POLL = 0.1
_LOOK = 2.0  # seconds between looks at who is working
_FETCH_SECONDS = 60


def in_cluster(
    pieces: Sequence[Any],
    solve: Callable[[Any], Arrays],
    executor: Distributed,
    beat: Callable[[str], None],
) -> Generator[tuple[int, Arrays], None, None]:
    """(index, arrays) as pieces finish; ``beat(note)`` is called several times a second.

    Raises UnavailableError without the library, WorkerError where no scheduler answers, it is
    lost, or a piece takes worker after worker with it.
    """
    from thermo.variables import software_version

    _require_library()
    with _quiet(), _client(executor) as (client, threads):
        futures, version = {}, software_version()
        for index, piece in enumerate(pieces):
            future = client.submit(
                _task, solve, piece, threads, version, pure=False, priority=-index
            )
            futures[future] = index
        # Whatever is not fetched is given up when the client closes.
        own = executor.workers is not None
        labels = [piece.label for piece in pieces]
        for future, result in _finished(client, futures, labels, beat, own):
            yield futures.pop(future), result


def _task(
    solve: Callable[[Any], Arrays],
    piece: Any,
    threads: int | None,
    version: str,
) -> dict[str, NDArray[Any]]:
    """What a worker does for one piece."""
    from thermo.variables import software_version

    installed = software_version()
    if version != installed:
        import platform

        raise WorkerError(
            f"a worker on {platform.node()} has version {installed} of this program and "
            f"{version} asks; install the same version everywhere"
        )
    with piece_threads(threads):
        return dict(solve(piece))


@contextlib.contextmanager
def piece_threads(threads: int | None) -> Iterator[None]:
    """Bound all thread pools inside a worker; None: its own PARTITA_THREADS, else one."""
    if threads is None:
        threads = thread_count() if os.environ.get("PARTITA_THREADS") else 1
    os.environ["PARTITA_THREADS"] = str(threads)
    numba = sys.modules.get("numba")
    if numba is None:
        os.environ["NUMBA_NUM_THREADS"] = str(threads)
    else:
        numba.set_num_threads(min(threads, numba.config.NUMBA_NUM_THREADS))
    with blas_threads(threads):
        yield


def _require_library() -> None:
    try:
        import distributed  # noqa: F401
    except ImportError:
        raise UnavailableError(
            "work beyond this process needs the library dask.distributed, which is not here; "
            "install partita with its extra: pip install 'partita[distributed]'"
        ) from None


@contextlib.contextmanager
def _quiet() -> Iterator[None]:
    """The library's running commentary kept off the terminal; faults arrive as exceptions."""
    logger = logging.getLogger("distributed")
    level = logger.level
    logger.setLevel(logging.CRITICAL + 1)
    try:
        yield
    finally:
        logger.setLevel(level)


@contextlib.contextmanager
def _client(executor: Distributed) -> Iterator[tuple[Any, int | None]]:
    """A connected client, and the threads for each piece (None: left to the worker)."""
    from distributed import Client, LocalCluster

    with contextlib.ExitStack() as stack:
        threads = None
        address: Any = executor.address
        if executor.workers is not None:
            threads = max(1, thread_count() // executor.workers)
            # The library leaves settings meant for its workers in this process as well.
            stack.callback(_restore, dict(os.environ))
            # Not in the directory of the user, and gone afterwards.
            folder = tempfile.mkdtemp(prefix="partita-workers-")
            stack.callback(shutil.rmtree, folder, ignore_errors=True)
            address = LocalCluster(
                n_workers=executor.workers,
                threads_per_worker=1,
                processes=True,
                host="127.0.0.1",
                dashboard_address="127.0.0.1:0",  # else a second cluster is told of the port
                local_directory=folder,
                memory_limit=0,  # planned before the run; a killed worker would only try again
                silence_logs=logging.CRITICAL + 1,
            )
            stack.callback(_end, address)
        elif "://" not in address:
            address = f"tcp://{address}"
        try:
            client = Client(address, timeout=CONNECT_SECONDS, set_as_default=False)
        except (OSError, TimeoutError, ValueError) as fault:
            raise WorkerError(
                f"no scheduler answers at {executor.address} within {CONNECT_SECONDS} s; check "
                "the address, and that the scheduler runs and can be reached from here"
            ) from fault
        stack.callback(client.close, timeout=CLOSE_SECONDS)
        if executor.workers is not None:
            client.register_plugin(_plugin())
        yield client, threads


def _restore(environment: Mapping[str, str]) -> None:
    for name in set(os.environ) - set(environment):
        del os.environ[name]
    os.environ.update(environment)


def _end(cluster: Any) -> None:
    """End our own workers at once: a piece at hand is done again, and would take its time."""
    for nanny in cluster.workers.values():
        nanny.close_gracefully()  # it would start another worker else
        with contextlib.suppress(OSError, TypeError):  # has ended already, or never began
            os.kill(nanny.pid, signal.SIGKILL)
    cluster.close(timeout=CLOSE_SECONDS)


def _plugin() -> Any:
    from distributed import WorkerPlugin

    class Uninterrupted(WorkerPlugin):  # type: ignore[misc]
        """Ctrl-C in a terminal reaches every process; the workers leave it to ours."""

        name = "partita-uninterrupted"

        def setup(self, worker: Any) -> None:
            signal.signal(signal.SIGINT, signal.SIG_IGN)

    return Uninterrupted()


def _finished(
    client: Any,
    futures: Mapping[Any, int],
    labels: Sequence[str],
    beat: Callable[[str], None],
    own: bool,
) -> Iterator[tuple[Any, Arrays]]:
    """Futures with their arrays as they finish, with a heartbeat while none does.

    Workers of a scheduler may come and go; our ``own`` are missed when they are not started again.
    """
    from distributed import as_completed

    waiting, left = as_completed(list(futures), loop=client.loop), len(futures)
    looked = manned = time.monotonic()
    note = ""
    while left:
        batch = waiting.next_batch(block=False)
        for future in batch:
            result = _result(future, labels[futures[future]])
            if result is None:
                waiting.add(future)
            else:
                left -= 1
                yield future, result
        if batch:
            continue
        if time.monotonic() - looked > _LOOK:
            looked = time.monotonic()
            if client.nthreads():
                manned, note = looked, ""
            elif own and looked - manned > OWN_SECONDS:
                raise WorkerError(
                    "the processes for the work have ended and cannot be started again; free "
                    "memory or ask for fewer workers"
                )
            else:
                note = "no worker is there"
        beat(note)
        time.sleep(_POLL)


def _result(future: Any, label: str) -> Arrays | None:
    """The arrays; None where the worker died with them, before they were fetched: the scheduler
    has the piece done again, and the future finishes once more."""
    from distributed import KilledWorker

    if future.status == "finished":
        try:
            result: Arrays = future.result(timeout=_FETCH_SECONDS)
            return result
        except TimeoutError:
            return None
        except OSError as fault:
            raise _lost() from fault
        except Exception:
            # It was lost on the way, and doing it again has failed: told below.
            if future.status not in ("error", "cancelled"):
                raise
    if future.status in ("pending", "lost"):
        return None
    if future.status != "error":
        raise _lost()
    failure = future.exception()
    if isinstance(failure, KilledWorker):
        raise WorkerError(
            f"the piece {label} ended {failure.allowed_failures + 1} workers one after the other, "
            "most likely for lack of memory; run fewer of them on a machine"
        )
    if isinstance(failure, ImportError):
        raise WorkerError(
            f"a worker cannot load what it needs ({failure}); install this program, in the same "
            "version, where the workers run"
        )
    raise failure


def _lost() -> WorkerError:
    return WorkerError("the connection to the scheduler was lost; start it again")
