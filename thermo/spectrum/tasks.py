"""Run independent pieces of work in threads that never keep an interrupted program alive."""

from __future__ import annotations

import queue
import threading
from collections.abc import Callable, Generator, Sequence
from typing import TypeVar

Result = TypeVar("Result")

# How often a waiting run tells how it stands, and can be stopped, in seconds.
HEARTBEAT = 0.25


def run_tasks(
    tasks: Sequence[Callable[[], Result]], workers: int, beat: Callable[[], None] | None = None
) -> Generator[tuple[int, Result], None, None]:
    """Yield (index, result) as tasks finish; the first exception is raised here.

    ``beat`` is called several times a second while the caller waits.

    The work must release the interpreter to gain from several workers. Threads are daemons
    and the caller waits in an interruptible way, so Ctrl-C takes effect at once even while
    LAPACK is busy. A caller that stops early leaves no task waiting to start.
    """
    waiting: queue.SimpleQueue[int] = queue.SimpleQueue()
    finished: queue.Queue[tuple[int, Result | None, BaseException | None]] = queue.Queue()
    stop = threading.Event()
    for index in range(len(tasks)):
        waiting.put(index)

    def work() -> None:
        while not stop.is_set():
            try:
                index = waiting.get_nowait()
            except queue.Empty:
                return
            try:
                finished.put((index, tasks[index](), None))
            except BaseException as fault:
                finished.put((index, None, fault))
                return

    for _ in range(min(workers, len(tasks))):
        threading.Thread(target=work, daemon=True).start()
    try:
        for _ in range(len(tasks)):
            while True:
                try:
                    index, result, fault = finished.get(timeout=None if beat is None else HEARTBEAT)
                    break
                except queue.Empty:
                    if beat is not None:
                        beat()
            if fault is not None:
                raise fault
            yield index, result  # type: ignore[misc]
    finally:
        stop.set()
