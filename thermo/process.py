"""The process around a command: its standard streams, and the signals that end it."""

from __future__ import annotations

import contextlib
import io
import os
import signal
import sys
import time
from types import FrameType
from typing import Any, TextIO

_ECHO = 2.0  # seconds; a closing terminal and its shell each send a hang-up


class Signals:
    """The last signal that asked the command to end, and when it came."""

    last = signal.SIGINT
    time = float("-inf")


def catch_signals() -> None:
    """Let SIGTERM and SIGHUP take the way of Ctrl-C, so that no temporary file stays behind.

    One that is ignored already (as under nohup) stays ignored.
    """
    for number in (signal.SIGTERM, signal.SIGHUP):
        if signal.getsignal(number) == signal.SIG_DFL:
            signal.signal(number, _interrupt)


def _interrupt(number: int, _: FrameType | None) -> None:
    now = time.monotonic()
    if now - Signals.time > _ECHO:  # an echo must not break off the clean-up of the first
        Signals.last, Signals.time = signal.Signals(number), now
        raise KeyboardInterrupt


def ending() -> tuple[int, str]:
    """Exit code (128 + the signal's number) and words for what ended the command."""
    name = Signals.last.name
    return 128 + Signals.last, "interrupted" if name == "SIGINT" else f"ended by {name}"


def open_streams() -> None:
    """Give the process three standard streams that can be written to whatever the text.

    One that was closed (``2>&-``) leads nowhere: otherwise the next file opened would take its
    number, and get what libraries print. A character that the terminal lacks becomes "?".
    """
    for number, name in enumerate(("stdin", "stdout", "stderr")):
        try:
            os.fstat(number)
        except OSError:
            os.open(os.devnull, os.O_RDWR)  # takes the lowest free number: this one
        stream: Any = getattr(sys, name)
        if stream is None:
            mode = "w" if number else "r"
            stream = open(number, mode, encoding="utf-8", closefd=False)  # noqa: SIM115
            setattr(sys, name, stream)
        if number and isinstance(stream, io.TextIOWrapper):
            stream.reconfigure(errors="replace")


def drop(stream: TextIO) -> None:
    """Point a stream nowhere, so that the interpreter's last flush cannot fail again."""
    with contextlib.suppress(OSError, ValueError):
        null = os.open(os.devnull, os.O_WRONLY)
        os.dup2(null, stream.fileno())
        os.close(null)


def set_threads(threads: int | None) -> None:
    """Bound every thread pool; they read these when they are first loaded."""
    if threads is not None:
        pools = ("OMP_NUM_THREADS", "OPENBLAS_NUM_THREADS", "NUMBA_NUM_THREADS")
        os.environ.update(dict.fromkeys(("PARTITA_THREADS", *pools), str(threads)))
