"""Long work: done in a thread, shown by a bar to whoever watches, left at once on Ctrl-C."""

from __future__ import annotations

import contextlib
import sys
import threading
import time
from collections.abc import Callable, Iterator
from pathlib import Path
from typing import Any, TypeVar

from thermo.errors import CheckpointError, WorkerError
from thermo.messages import note
from thermo.process import Signals

Result = TypeVar("Result")
_LEAVE = 8.0  # seconds in which work that is to end may do so by itself


class Bar:
    """A progress bar on a terminal, shown only once the work has taken two seconds.

    Elsewhere, as in the log of a batch queue, a line every ten minutes.
    """

    patience = 2.0
    log_every = 600.0

    def __init__(self) -> None:
        self.started = time.monotonic()
        self.done = 0.0
        self.text = "preparing"
        self.told = float("-inf")
        self.stopping = False
        self.logged = self.started
        self.bar: Any = None
        self.task: Any = None

    def report(self, done: float, text: str) -> None:
        if self.stopping:
            raise Interrupted
        self.done, self.text, self.told = done, text, time.monotonic()

    def refresh(self) -> None:
        if self.bar is None:
            now = time.monotonic()
            if not sys.stderr.isatty():
                if now - self.logged > self.log_every:
                    self.logged = now
                    note(f"{100 * self.done:.0f} % done: {self.text}")
                return
            if now - self.started < self.patience:
                return
            from rich.console import Console
            from rich.progress import BarColumn, Progress, TaskProgressColumn, TextColumn
            from rich.progress import TimeElapsedColumn as Elapsed

            columns = (
                BarColumn(30),
                TaskProgressColumn(),
                Elapsed(),
                TextColumn("{task.description}"),
            )
            self.bar = Progress(*columns, console=Console(stderr=True), transient=True)
            self.task = self.bar.add_task("", total=1.0)
            self.bar.start()
        self.bar.update(self.task, completed=self.done, description=self.text)

    def close(self) -> None:
        if self.bar is not None:
            self.bar.stop()


class Interrupted(BaseException):
    """Ctrl-C while the worker thread still computes: the process must not wait for it.

    Raised in that thread as well when it next reports, so that it can put its things away.
    """

    kept: str | None = None


@contextlib.contextmanager
def keeping(checkpoint: Path) -> Iterator[None]:
    """Whatever ends the work, the user learns where its finished part is, if there is one."""
    try:
        yield
    except (CheckpointError, WorkerError):  # these say it themselves
        raise
    except BaseException as fault:
        if checkpoint.exists():
            kept = (
                f"what was finished is kept in {checkpoint}, and the same command goes on from it"
            )
            if isinstance(fault, (Interrupted, KeyboardInterrupt)):
                fault.kept = kept  # type: ignore[union-attr]
            else:
                note(kept)
        raise


def work(task: Callable[[Callable[[float, str], None]], Result]) -> Result:
    """Run a long task in its own thread, so that Ctrl-C and the bar need not wait for LAPACK."""
    bar = Bar()
    result: list[Result] = []
    faults: list[BaseException] = []

    def body() -> None:
        try:
            result.append(task(bar.report))
        except BaseException as fault:
            faults.append(fault)
        finally:
            ended.set()

    # Not Thread.join: broken off by a signal, it takes the thread for ended (Python 3.11).
    ended = threading.Event()
    began = time.monotonic()
    try:
        threading.Thread(target=body, daemon=True).start()
        while not ended.wait(0.1):
            # The exception of a signal that came during a finaliser is lost; the signal is not.
            if Signals.time > began:
                raise KeyboardInterrupt
            bar.refresh()
    except KeyboardInterrupt:
        bar.stopping = True
        if time.monotonic() - bar.told < 1.0:  # it reports often: let it put its things away
            with contextlib.suppress(KeyboardInterrupt):
                ended.wait(_LEAVE)
        raise Interrupted from None
    finally:
        bar.close()
    if faults:
        raise faults[0]
    return result[0]
