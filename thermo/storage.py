"""Files are written whole or not at all, and read back checked.

Everything goes to a temporary name beside its target, is synced, then renamed over it; whatever
interrupts this (a full disk, Ctrl-C) leaves the old file, if any, and no other.
"""

from __future__ import annotations

import contextlib
import errno
import os
import shutil
import stat
import tempfile
import uuid
from collections.abc import Iterator
from pathlib import Path
from typing import TYPE_CHECKING, Any

from thermo.errors import FileFormatError

if TYPE_CHECKING:
    import xarray as xr

_REASONS = {
    errno.ENOSPC: "the disk is full; free some space or choose another place",
    errno.EDQUOT: "the disk quota is used up; free some space or choose another place",
    errno.EACCES: "permission is denied; choose a place you may write to",
    errno.EPERM: "permission is denied; choose a place you may write to",
    errno.EROFS: "the file system is read-only; choose another place",
    errno.ENOENT: "its directory does not exist; create it first",
    errno.ENOTDIR: "its directory is not a directory; choose another place",
    errno.EISDIR: "it is a directory; give a file name",
    errno.ENAMETOOLONG: "the name is too long; choose a shorter one",
}
_HARDLY_FREE = 1 << 20  # bytes


def write_failure(target: str | os.PathLike[str], error: OSError) -> FileFormatError:
    """The one sentence that tells why a target cannot be written."""
    reason = _REASONS.get(error.errno or 0, f"{error.strerror or error}; choose another place")
    if error.errno == errno.ENOENT and os.path.isdir(os.path.dirname(os.path.realpath(target))):
        reason = "that place takes no new files; choose another place"
    name = os.fspath(target)
    shown = name if len(name) <= 300 else name[:296] + " ..."
    return FileFormatError(f"cannot write {shown}: {reason}")


def check_name(path: str | os.PathLike[str]) -> None:
    """FileFormatError for a name that the netCDF library cannot take: it must be UTF-8."""
    try:
        os.fspath(path).encode()
    except UnicodeEncodeError:
        raise FileFormatError(
            f"the name {os.fspath(path)!r} is not UTF-8, which netCDF files need; rename the file "
            "or its directory"
        ) from None


@contextlib.contextmanager
def atomic_path(target: str | os.PathLike[str]) -> Iterator[Path]:
    """Yield a temporary path with the target's suffix; move it over the target at the end.

    The file is synced before it is renamed. Any exception, KeyboardInterrupt included, removes
    the temporary file and leaves the target as it was. OSErrors become a FileFormatError. A
    link is followed; a device such as /dev/stdout is written through.
    """
    final = Path(os.path.realpath(target))
    check_name(final)
    try:
        if final.is_dir():
            raise IsADirectoryError(errno.EISDIR, "is a directory")
        through = final.exists() and not final.is_file()
        folder = Path(tempfile.gettempdir()) if through else final.parent
        # The stem is cut so that a long name stays within the file system's 255 bytes.
        temporary = folder / f".{final.stem[:40]}-{uuid.uuid4().hex[:12]}{final.suffix}"
    except OSError as error:
        raise write_failure(target, error) from error
    try:
        os.close(os.open(temporary, os.O_CREAT | os.O_EXCL | os.O_WRONLY, 0o666))
        yield temporary
        if through:
            with temporary.open("rb") as source, final.open("wb") as sink:
                shutil.copyfileobj(source, sink)
        else:
            _sync(temporary, os.O_RDWR)
            if final.exists():
                os.chmod(temporary, stat.S_IMODE(final.stat().st_mode))
            os.replace(temporary, final)
            with contextlib.suppress(OSError):  # some network file systems cannot sync these
                _sync(folder, os.O_RDONLY)
    except OSError as error:
        raise write_failure(target, error) from error
    finally:
        with contextlib.suppress(OSError):
            # Emptied first: after a failure the HDF5 library keeps the file open, and its blocks.
            os.truncate(temporary, 0)
            temporary.unlink()


def _sync(path: Path, flags: int) -> None:
    handle = os.open(path, flags)
    try:
        os.fsync(handle)
    finally:
        os.close(handle)


def write_dataset(dataset: xr.Dataset, path: str | os.PathLike[str]) -> None:
    """Check a dataset against the registry and write it as netCDF-4, molar curves in SI."""
    from thermo.variables import to_storage_units, validate

    validate(dataset, str(dataset.attrs.get("content")))
    with atomic_path(path) as temporary:
        try:
            _write_netcdf(to_storage_units(dataset), temporary)
        except RuntimeError as error:
            # The HDF5 library says "HDF error" for a full disk as for anything else.
            state = os.statvfs(temporary.parent)
            full = state.f_bavail * state.f_frsize < _HARDLY_FREE
            code = errno.ENOSPC if full else errno.EIO
            raise OSError(code, f"the netCDF library could not write it ({error})") from error


def _write_netcdf(dataset: xr.Dataset, path: Path) -> None:
    import netCDF4
    import numpy as np

    from thermo.variables import lookup

    kind = str(dataset.attrs["content"])
    names = [str(name) for name in dataset.variables]
    labels = [n for n in names if (v := lookup(kind, n)) is not None and v.label]
    file = netCDF4.Dataset(path, "w", format="NETCDF4")
    try:
        for dim, size in dataset.sizes.items():
            file.createDimension(str(dim), size)
        for name in names:
            array, known = dataset[name], lookup(kind, name)
            text = known is not None and known.dtype == "str"
            options: dict[str, Any] = {}
            if array.ndim and not text:
                options = {"zlib": True, "complevel": 4, "shuffle": True}
            if known is not None and not known.finite and not text:
                options["fill_value"] = np.nan
            variable = file.createVariable(
                name, str if text else array.dtype, [str(d) for d in array.dims], **options
            )
            attrs = dict(array.attrs)
            beside = [n for n in labels if n != name and set(dataset[n].dims) <= set(array.dims)]
            if beside and name not in labels:
                attrs["coordinates"] = " ".join(beside)
            variable.setncatts(attrs)
            variable[...] = array.values.astype(object) if text else array.values
        file.setncatts(dataset.attrs)
    except BaseException:
        with contextlib.suppress(RuntimeError):  # the first failure is the one to tell
            file.close()
        raise
    file.close()


def read_dataset(path: str | os.PathLike[str], kind: str | None = None) -> xr.Dataset:
    """Read a file of the given kind (any kind if None) into memory, checked.

    Raises FileFormatError where the file is missing, damaged, foreign or of another kind.
    """
    import xarray as xr

    from thermo.variables import REGISTRY, validate

    where = os.fspath(path)
    wanted = f"a Partita {kind} file" if kind else "a Partita file"
    check_name(Path(path).absolute())
    # Looked at first: the netCDF library would take a name with "://" for an address.
    if Path(path).is_dir():
        raise FileFormatError(f"{where} is a directory, not {wanted}; give a file")
    if not Path(path).exists():
        raise FileFormatError(f"{where} does not exist; give the path of {wanted}")
    try:
        with Path(path).open("rb") as probe:
            probe.read(8)
    except OSError as error:
        raise FileFormatError(f"{where} cannot be read: {error.strerror}") from error
    try:
        with xr.open_dataset(
            Path(path).absolute(), engine="netcdf4", decode_times=False, decode_timedelta=False
        ) as opened:
            dataset = opened.load()
    except (OSError, RuntimeError, ValueError, KeyError, AttributeError, TypeError) as error:
        raise FileFormatError(
            f"{where} is not {wanted}: it is not netCDF, or it is damaged or cut short; "
            "write it again"
        ) from error
    content = dataset.attrs.get("content")
    if kind is not None and content in REGISTRY and content != kind:
        raise FileFormatError(f"{where} is not {wanted}: it holds {content}; give a {kind} file")
    if content not in REGISTRY:
        raise FileFormatError(f"{where} is not {wanted}: it was written by something else")
    try:
        validate(dataset, str(content))
    except FileFormatError as error:
        raise FileFormatError(f"{where} cannot be used: {error}") from None
    return dataset
