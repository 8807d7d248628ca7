"""The one place that configures numba: where compiled kernels are kept, and how they compile.

numba's cache does not notice edits in other files, so its folder is named after a hash of all
kernel sources. It is looked for where caches of this user belong, then in the temporary
folder; with neither writable the kernels are compiled anew each time.
"""

from __future__ import annotations

import contextlib
import hashlib
import os
import tempfile
from collections.abc import Callable
from pathlib import Path
from typing import Any

import llvmlite.binding
import numba
import platformdirs


def _source_hash() -> str:
    digest = hashlib.sha256(numba.__version__.encode())
    for path in sorted(Path(__file__).parent.glob("*.py")):
        digest.update(path.read_bytes())
    return digest.hexdigest()[:16]


def _writable(folder: Path) -> bool:
    try:
        folder.mkdir(parents=True, exist_ok=True, mode=0o700)
        # Compiled code is loaded from here: nobody else may have put it there.
        if hasattr(os, "getuid") and folder.stat().st_uid != os.getuid():
            return False
        with tempfile.TemporaryFile(dir=folder):
            return True
    except OSError:
        return False


def cache_folder() -> Path | None:
    """The folder for compiled kernels, made if need be; None when no place is writable."""
    name = f"kernels-{_source_hash()}"
    user = os.getuid() if hasattr(os, "getuid") else 0
    places = [Path(tempfile.gettempdir()) / f"partita-{user}"]
    # A user may have neither a home folder nor an entry in the system's list.
    with contextlib.suppress(RuntimeError, KeyError):
        places.insert(0, Path(platformdirs.user_cache_dir("partita", appauthor=False)))
    for place in places:
        if _writable(place) and _writable(place / name):
            return place / name
    return None


# Unrolled columns become vector instructions only with this; it must be set before compiling.
numba.config.SLP_VECTORIZE = 1
_FOLDER = cache_folder()
if _FOLDER is not None and not os.environ.get("NUMBA_CACHE_DIR"):
    numba.config.CACHE_DIR = str(_FOLDER)


def kernel(function: Callable[..., Any]) -> Any:
    """Compile a kernel on plain arrays; it releases the interpreter while it runs."""
    return numba.njit(cache=_FOLDER is not None, nogil=True)(function)


def fast_kernel(function: Callable[..., Any]) -> Any:
    """Compile a kernel whose unrolled lines are to become vector instructions.

    Products and sums may fuse, but sums keep their order: results do not depend on how a loop
    is cut, and loops over links are not turned into slow gathers.
    """
    return numba.njit(
        cache=_FOLDER is not None,
        nogil=True,
        error_model="numpy",
        fastmath={"contract", "nnan", "ninf", "nsz"},
    )(function)


def _prefetch_intrinsic() -> Any:
    """An instruction that asks for a row of a 2-D array ahead of its use; it changes nothing."""
    from llvmlite import ir
    from numba import types
    from numba.core import cgutils

    def prefetch(typing: Any, array: Any, row: Any, column: Any) -> Any:
        def generate(context: Any, builder: Any, signature: Any, arguments: Any) -> Any:
            kind = signature.args[0]
            made = context.make_array(kind)(context, builder, arguments[0])
            pointer = cgutils.get_item_pointer(
                context, builder, kind, made, arguments[1:], wraparound=False, boundscheck=False
            )
            byte, word = ir.IntType(8).as_pointer(), ir.IntType(32)
            function = cgutils.get_or_insert_function(
                builder.module,
                ir.FunctionType(ir.VoidType(), [byte, word, word, word]),
                "llvm.prefetch.p0",
            )
            # For reading, to stay in every cache, data.
            flags = [word(0), word(3), word(1)]
            builder.call(function, [builder.bitcast(pointer, byte), *flags])
            return context.get_dummy_value()

        return types.void(array, row, column), generate

    return numba.extending.intrinsic(prefetch)


def _no_prefetch(array: Any, row: Any, column: Any) -> None:
    """Where the compiler has no such instruction, or nothing is compiled."""


if numba.config.DISABLE_JIT:
    prefetch = _no_prefetch
elif llvmlite.binding.llvm_version_info[0] < 17:
    prefetch = kernel(_no_prefetch)
else:
    prefetch = _prefetch_intrinsic()
