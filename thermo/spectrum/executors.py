"""Pieces of long work, done here in threads or on other machines, each kept as it finishes.

What comes back depends only on the pieces, never on workers, machines or order. The process
that calls ``run_pieces`` alone holds the checkpoint; workers only compute.
"""

from __future__ import annotations

import contextlib
import functools
import operator
import re
import time
from collections.abc import Callable, Generator, Iterator, Mapping, Sequence
from dataclasses import dataclass
from typing import Any, Protocol, TypeVar

import numpy as np
from numpy.typing import NDArray

from thermo.errors import RangeError, WorkerError
from thermo.numbers import duration
from thermo.spectrum.checkpoint import Checkpoint
from thermo.spectrum.tasks import run_tasks
from thermo.spectrum.threads import thread_count

Arrays = dict[str, NDArray[Any]]
Progress = Callable[[float, str], None]
Finished = Generator[tuple[int, Mapping[str, NDArray[Any]]], None, None]
MOST_WORKERS = 9999


class Piece(Protocol):
    """An independent piece of work: small, picklable, and its key names it for ever.

    ``label`` is what a user reads ("M = 0, character 3"); ``cost`` is in any unit, the same for
    all pieces of one run; remaining time follows from it.
    """

    @property
    def key(self) -> str: ...

    @property
    def label(self) -> str: ...

    @property
    def cost(self) -> float: ...


P = TypeVar("P", bound=Piece)
Solve = Callable[[P], Mapping[str, NDArray[Any]]]


@dataclass(frozen=True)
class Local:
    """Work in this process: so many pieces side by side; None: one for each thread to use."""

    workers: int | None = None

    def __post_init__(self) -> None:
        _check_workers(self.workers, optional=True)

    @property
    def at_once(self) -> int:
        """Pieces this machine holds in memory at the same time."""
        return self.workers or thread_count()


@dataclass(frozen=True)
class Distributed:
    """Work through dask.distributed: at a scheduler's address, or so many processes here.

    ``address``: "host:port", "tcp://host:port" or "tls://host:port" of a running scheduler. Or
    ``workers``: a cluster of that many new processes on this machine for the time of the run; a
    Python script that asks for it must have its calls under ``if __name__ == "__main__":``.
    Needs the extra ``distributed``. Code and results travel as pickles: use a scheduler only in
    a network you trust.
    """

    address: str | None = None
    workers: int | None = None

    def __post_init__(self) -> None:
        if (self.address is None) == (self.workers is None):
            raise RangeError(
                "distributed work needs either the address of a scheduler or a number of workers "
                "to start on this machine; give one of the two"
            )
        _check_workers(self.workers, optional=True)
        if self.address is not None and not re.fullmatch(
            r"((tcp|tls)://)?([\w.-]+|\[[0-9A-Fa-f:.]+\]):[0-9]{1,5}", str(self.address)
        ):
            shown = str(self.address)[:60]
            raise RangeError(
                f"the scheduler's address is {shown!r}, which is none; give it as host:port or "
                "tcp://host:port, as the scheduler says when it starts"
            )

    @property
    def at_once(self) -> int:
        """Pieces this machine holds in memory at the same time (at an address: one)."""
        return self.workers or 1


Executor = Local | Distributed


def check_executor(executor: Executor | None) -> Executor:
    """The executor to use (None: ``Local()``); RangeError for anything that is none."""
    if executor is None:
        return Local()
    if not isinstance(executor, (Local, Distributed)):
        raise RangeError(
            f"executor is {str(executor)[:60]!r}; give thermo.Local(workers) or "
            "thermo.Distributed(address=... or workers=...)"
        )
    return executor


def _check_workers(workers: Any, optional: bool) -> None:
    if workers is None and optional:
        return
    try:
        number = operator.index(workers)
    except TypeError:
        number = 0
    if isinstance(workers, bool) or not 1 <= number <= MOST_WORKERS:
        raise RangeError(
            f"workers is {repr(workers)[:40]}; give a whole number from 1 to {MOST_WORKERS}"
        )


# ---------------------------------------------------------------- the run


def run_pieces(
    pieces: Sequence[P],
    solve: Solve[P],
    *,
    executor: Executor | None = None,
    workers: int | None = None,
    checkpoint: Checkpoint | None = None,
    progress: Progress | None = None,
    share: tuple[float, float] = (0.0, 1.0),
) -> dict[str, Arrays]:
    """Do every piece; {key: arrays} in the order of ``pieces``, whatever the order of the work.

    ``solve(piece)``: a function of a module (or a functools.partial of one), so that it can be
    pickled; it must give the same arrays each time it is called, in any process, since a piece is
    done again when its worker dies. Pieces are begun in the order given: put the costly first.
    ``executor``: None is ``Local()``. ``workers``: at most so many pieces side by side in
    this process (for the sake of memory); of no effect on other processes.
    Pieces that ``checkpoint`` holds already are not done again; each one that finishes is in it
    before the next is looked at. ``progress(fraction, text)`` is called several times a second,
    with fractions between the two of ``share``; what it raises ends the run.
    The first exception of a piece is raised here; what had finished is in the checkpoint.
    """
    keys = [piece.key for piece in pieces]
    if len(set(keys)) != len(keys):
        raise ValueError("two pieces have the same key")
    found: dict[str, Arrays] = {}
    if checkpoint is not None:
        for key in keys:
            if (kept := checkpoint.load(key)) is not None:
                found[key] = kept
    waiting = [piece for piece in pieces if piece.key not in found]
    clock = _Clock(pieces, waiting, progress, share)
    clock.beat("")
    if waiting:
        chosen = check_executor(executor)
        if isinstance(chosen, Local):
            at_once = min(chosen.at_once, workers or chosen.at_once)
            tasks = [functools.partial(solve, piece) for piece in waiting]
            finished = run_tasks(tasks, at_once, functools.partial(clock.beat, ""))
        else:
            from thermo.spectrum.cluster import in_cluster

            finished = in_cluster(waiting, solve, chosen, clock.beat)
        with contextlib.closing(finished), _saying_what_is_kept(checkpoint):
            for index, result in finished:
                piece = waiting[index]
                arrays = {name: np.asarray(array) for name, array in result.items()}
                if checkpoint is not None:
                    checkpoint.save(piece.key, arrays)
                found[piece.key] = arrays
                clock.finished(piece)
    return {key: found[key] for key in keys}


@contextlib.contextmanager
def _saying_what_is_kept(checkpoint: Checkpoint | None) -> Iterator[None]:
    try:
        yield
    except WorkerError as fault:
        if checkpoint is None:
            raise
        raise WorkerError(
            f"{fault}; what was finished is kept in {checkpoint.path}: run the same again to go on"
        ) from fault.__cause__


class _Clock:
    """How far a run is, and how long the rest will take at the pace so far."""

    def __init__(
        self,
        pieces: Sequence[Piece],
        waiting: Sequence[Piece],
        progress: Progress | None,
        share: tuple[float, float],
    ) -> None:
        self._progress, self._share = progress, share
        self._total = sum(max(p.cost, 0.0) for p in pieces) or 1.0
        self._todo = sum(max(p.cost, 0.0) for p in waiting)
        self._kept = self._total - self._todo if pieces else 0.0
        self._done = 0.0
        self._count, self._left = len(pieces), len(waiting)
        self._started = self._last = time.monotonic()
        self._text = f"{self._count - self._left} of {self._count} pieces were kept, "
        if self._left == self._count:
            self._text = ""

    def finished(self, piece: Piece) -> None:
        self._done += max(piece.cost, 0.0)
        self._left -= 1
        self._last = time.monotonic()
        self._text = f"{piece.label} done, "
        self.beat("")

    def beat(self, note: str) -> None:
        """Tell how far the run is, with a note about it if there is one."""
        if self._progress is None:
            return
        low, high = self._share
        fraction = min((self._kept + self._done) / self._total, 1.0)
        text = f"{self._text}{self._left} left"
        seconds = self._remaining()
        if seconds is not None:
            text += f", {duration(seconds)}"
        if note:
            text += f"; {note}"
        self._progress(low + (high - low) * fraction, text)

    def _remaining(self) -> float | None:
        """Seconds at the pace up to the last finished piece; None before the first."""
        spent = self._last - self._started
        if self._done <= 0 or self._left == 0:
            return None
        expected = spent * (self._todo - self._done) / self._done
        return max(expected - (time.monotonic() - self._last), 0.0)
