"""Dummy pieces of work for the tests of checkpoints and executors."""

from __future__ import annotations

import os
import signal
import threading
import time
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray


@dataclass(frozen=True)
class Piece:
    """A dummy piece: its number decides its arrays."""

    number: int
    cost: float = 1.0

    @property
    def key(self) -> str:
        return f"piece-{self.number}"

    @property
    def label(self) -> str:
        return f"number {self.number}"


def arrays(number: int, size: int = 500) -> dict[str, NDArray[Any]]:
    """The arrays of a piece, from its number alone."""
    random = np.random.default_rng(number)
    return {
        "energy": random.normal(size=size),
        "weight": random.random((3, 2)),
        "count": np.array(number),
        "none": np.empty((0, 4), dtype=np.int32),
    }


def solve(piece: Piece, seconds: float = 0.0, size: int = 500) -> dict[str, NDArray[Any]]:
    time.sleep(seconds)
    return arrays(piece.number, size)


def slow_after(piece: Piece, number: int) -> dict[str, NDArray[Any]]:
    """Pieces after the given one take as long as a test may."""
    if piece.number > number:
        time.sleep(20)
    return arrays(piece.number)


def solve_and_count(piece: Piece, folder: str) -> dict[str, NDArray[Any]]:
    """Leaves a file for each time it is called."""
    name = f"{piece.number}-{time.monotonic_ns()}"
    (Path(folder) / name).touch()
    return arrays(piece.number)


def fail_at(piece: Piece, number: int) -> dict[str, NDArray[Any]]:
    if piece.number == number:
        raise ArithmeticError(f"piece {number} cannot be done")
    return arrays(piece.number)


def die_once(piece: Piece, number: int, mark: str) -> dict[str, NDArray[Any]]:
    """The worker that first takes up this piece is killed in the middle of it."""
    if piece.number == number:
        try:
            Path(mark).touch(exist_ok=False)
        except FileExistsError:
            return arrays(piece.number)
        time.sleep(0.2)
        os.kill(os.getpid(), signal.SIGKILL)
    return arrays(piece.number)


def die_with_its_results(piece: Piece, number: int, mark: str) -> dict[str, NDArray[Any]]:
    """The worker of this piece is killed at once after it has finished, results and all."""
    if piece.number == number:
        try:
            Path(mark).touch(exist_ok=False)
        except FileExistsError:
            return arrays(piece.number)
        threading.Timer(0.05, os.kill, (os.getpid(), signal.SIGKILL)).start()
    return arrays(piece.number)


def die_always(piece: Piece) -> dict[str, NDArray[Any]]:
    os.kill(os.getpid(), signal.SIGKILL)
    return {}


def tell_threads(piece: Piece) -> dict[str, NDArray[Any]]:
    """How many threads each pool of this process may use."""
    import numba
    import threadpoolctl

    from thermo.spectrum.threads import thread_count

    pools = [p["num_threads"] for p in threadpoolctl.threadpool_info() if p["user_api"] == "blas"]
    return {
        "threads": np.array([thread_count(), numba.get_num_threads(), *pools]),
        "process": np.array(os.getpid()),
    }


def same(found: dict[str, NDArray[Any]], number: int) -> bool:
    """Whether arrays are those of a piece, to the last bit, type and shape."""
    return equal(found, arrays(number))


def equal(one: dict[str, NDArray[Any]], other: dict[str, NDArray[Any]]) -> bool:
    """Whether two sets of arrays are the same to the last bit, in names, types and shapes."""
    return list(one) == list(other) and all(
        (a.dtype, a.shape, a.tobytes()) == (b.dtype, b.shape, b.tobytes())
        for a, b in zip(one.values(), other.values(), strict=True)
    )
