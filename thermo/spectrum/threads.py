"""How many threads the work may use, and the BLAS libraries' share of them."""

from __future__ import annotations

import contextlib
import functools
import os
import threading
from collections.abc import Iterator
from typing import Any

from thermo.errors import RangeError


def thread_count() -> int:
    """Threads to use: PARTITA_THREADS, else the cores this process may run on."""
    text = os.environ.get("PARTITA_THREADS", "")
    if text:
        if not (text.isascii() and text.isdecimal() and len(text) <= 4 and int(text) > 0):
            raise RangeError(
                f"PARTITA_THREADS is {text[:40]!r}, not a number of threads; set a whole number "
                "from 1 to 9999"
            )
        return int(text)
    if hasattr(os, "sched_getaffinity"):
        return len(os.sched_getaffinity(0))
    return os.cpu_count() or 1


@functools.cache
def _thread_pools() -> Any:
    import scipy.linalg  # noqa: F401  both OpenBLAS copies must be loaded to be found
    import threadpoolctl

    return threadpoolctl.ThreadpoolController()


_blas_lock = threading.Lock()
_blas_users: list[Any] = []


@contextlib.contextmanager
def blas_threads(count: int) -> Iterator[None]:
    """Limit every BLAS of this process to ``count`` threads for a while.

    The limit is the process's, so of concurrent users the last to come sets it and the last to
    leave puts back what the first found.
    """
    with _blas_lock:
        limiter = _thread_pools().limit(limits=count, user_api="blas")
        _blas_users.append(_blas_users[0] if _blas_users else limiter)
    try:
        yield
    finally:
        with _blas_lock:
            first = _blas_users.pop()
            if not _blas_users:
                first.restore_original_limits()
