"""Long work: done in a thread, shown by a bar to whoever watches, left at once on Ctrl-C."""

from __future__ import annotations

import sys
import threading
import time
from collections.abc import Callable
from typing import Any, TypeVar

Result = TypeVar("Result")


class Bar:
    """A progress bar on a terminal, shown only once the work has taken two seconds."""

    patience = 2.0

    def __init__(self) -> None:
        self.started = time.monotonic()
        self.done = 0.0
        self.text = "preparing"
        self.bar: Any = None
        self.task: Any = None

    def report(self, done: float, text: str) -> None:
        self.done, self.text = done, text

    def refresh(self) -> None:
        if self.bar is None:
            if not sys.stderr.isatty() or time.monotonic() - self.started < self.patience:
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
    """Ctrl-C while the worker thread still computes: the process must not wait for it."""


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

    worker = threading.Thread(target=body, daemon=True)
    try:
        worker.start()
        while worker.is_alive():
            worker.join(0.1)
            bar.refresh()
    except KeyboardInterrupt:
        raise Interrupted from None
    finally:
        bar.close()
    if faults:
        raise faults[0]
    return result[0]
