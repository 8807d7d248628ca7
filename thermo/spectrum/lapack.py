"""Eigenvalues of dense symmetric and Hermitian blocks, in place, by LAPACK.

The OpenBLAS library inside the SciPy wheel also carries the two-stage reduction to
tridiagonal form (full to band, band to tridiagonal; Haidar, Ltaief and Dongarra 2011), which
LAPACK offers for eigenvalues only. It is reached through ctypes, tried on a small matrix
once, and used where it is faster; without it numpy does the same work.
"""

from __future__ import annotations

import ctypes
import functools
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from thermo.errors import SpectrumError

# Block sizes from which the two-stage reduction is at least 1.4 times faster than numpy: for
# blocks solved side by side with one thread each, and for one alone with all threads, where
# its serial second stage counts more (tests/bench/test_lapack.py).
SIDE_BY_SIDE = {"real": 3800, "complex": 2200}
ALONE = {"real": 6500, "complex": 3500}

Block = NDArray[np.float64] | NDArray[np.complex128]


@dataclass(frozen=True)
class _Library:
    """Entry points of the OpenBLAS inside the SciPy wheel."""

    handle: Any
    prefix: str


@functools.cache
def _library() -> _Library | None:
    import scipy.linalg  # noqa: F401  loads the library that is looked for below
    import threadpoolctl

    for found in threadpoolctl.threadpool_info():
        if found.get("internal_api") != "openblas" or "scipy.libs" not in found["filepath"]:
            continue
        try:
            handle = ctypes.CDLL(found["filepath"])
            for prefix in ("scipy_", ""):
                if hasattr(handle, f"{prefix}dsyevd_2stage_"):
                    return _Library(handle, prefix)
        except OSError:
            continue
    return None


def _call(
    library: _Library, block: Block, two_stage: bool, vectors: bool = False
) -> NDArray[np.float64]:
    """Eigenvalues of the lower triangle of a Fortran-ordered block, which is overwritten, with
    ``vectors`` (one stage only) by its eigenvectors as columns."""
    n = block.shape[0]
    complex_block = np.iscomplexobj(block)
    name = ("zheevd" if complex_block else "dsyevd") + ("_2stage_" if two_stage else "_")
    routine = getattr(library.handle, library.prefix + name)
    values = np.empty(n)
    info = ctypes.c_int(0)
    order = ctypes.c_int(n)

    def pointer(array: NDArray[Any]) -> ctypes.c_void_p:
        return array.ctypes.data_as(ctypes.c_void_p)

    def run(
        work: NDArray[Any], lwork: int, rwork: Any, lrwork: int, iwork: Any, liwork: int
    ) -> None:
        sizes = [(work, lwork)]
        if complex_block:
            sizes.append((rwork, lrwork))
        sizes.append((iwork, liwork))
        tail: list[Any] = []
        for array, size in sizes:
            tail += [pointer(array), ctypes.byref(ctypes.c_int(size))]
        routine(
            ctypes.c_char_p(b"V" if vectors else b"N"), ctypes.c_char_p(b"L"),
            ctypes.byref(order), pointer(block), ctypes.byref(order), pointer(values), *tail,
            ctypes.byref(info), ctypes.c_size_t(1), ctypes.c_size_t(1),
        )  # fmt: skip

    query, real_query = np.zeros(1, dtype=block.dtype), np.zeros(1)
    integer_query = np.zeros(1, dtype=np.int32)
    run(query, -1, real_query, -1, integer_query, -1)
    lwork, lrwork, liwork = int(query[0].real), int(real_query[0]), int(integer_query[0])
    run(
        np.empty(max(lwork, 1), dtype=block.dtype), lwork,
        np.empty(max(lrwork, 1)), lrwork, np.empty(max(liwork, 1), dtype=np.int32), liwork,
    )  # fmt: skip
    if info.value != 0:
        raise SpectrumError(
            f"LAPACK's {name.strip('_')} failed on a block of {n} states (code {info.value}); "
            "a number in the model may be too large or too small"
        )
    return values


@functools.cache
def two_stage_works() -> bool:
    """Whether the two-stage routines are there and agree with numpy on a small trial."""
    library = _library()
    if library is None:
        return False
    rng = np.random.default_rng(1)
    a = rng.standard_normal((150, 150)) + 1j * rng.standard_normal((150, 150))
    a += a.conj().T
    for trial in (a.real, a):
        found = _call(library, np.asfortranarray(trial.copy()), True)
        if np.abs(found - np.linalg.eigvalsh(trial)).max() > 1e-11 * 150:
            return False
    return True


def eigenvalues(
    block: Block, two_stage: bool | None = None, threads: int = 1
) -> NDArray[np.float64]:
    """Eigenvalues, ascending, of a block of which the lower triangle is filled.

    ``block`` (n, n), Fortran order, float64 or complex128, is overwritten. ``two_stage`` None
    chooses by size, knowing how many BLAS ``threads`` the caller has set. Cost: 4n³/3 operations
    (four times that if complex), memory no more than the block's own plus about 100 n.
    """
    n = block.shape[0]
    if n == 1:
        return np.array([block[0, 0].real])
    library = _library()
    if library is None:
        return np.asarray(np.linalg.eigvalsh(block), dtype=np.float64)
    if two_stage is None:
        kind = "complex" if np.iscomplexobj(block) else "real"
        two_stage = n >= (SIDE_BY_SIDE if threads == 1 else ALONE)[kind]
    return _call(library, block, two_stage and two_stage_works())


def eigensystem(block: Block) -> tuple[NDArray[np.float64], NDArray[Any]]:
    """Eigenvalues, ascending, and eigenvectors as columns (n, n), in C order.

    ``block`` (n, n), Fortran order with its lower triangle filled, is overwritten. Cost: about
    9n³ operations at most (four times that if complex), and memory of three blocks in all.
    """
    n = block.shape[0]
    if n == 1:
        return np.array([block[0, 0].real]), np.ones((1, 1), dtype=block.dtype)
    library = _library()
    if library is None:
        values, vectors = np.linalg.eigh(block, UPLO="L")
        return values, np.ascontiguousarray(vectors)
    values = _call(library, block, two_stage=False, vectors=True)
    return values, np.ascontiguousarray(block)
