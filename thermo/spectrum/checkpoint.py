"""Finished pieces of long work, kept in one sqlite file so that a killed run can go on.

One record per piece: a key, named arrays, and a checksum over both. Each save is a transaction
that is on the disk when ``save`` returns (the data, and the directory that names the file), so a
run killed at any moment, a full disk or a power cut loses the piece at hand and none before it.
Holds its file's lock while open: one program at a time.
"""

from __future__ import annotations

import contextlib
import errno
import hashlib
import io
import json
import os
import sqlite3
import threading
import zipfile
from collections.abc import Iterator, Mapping
from pathlib import Path
from types import TracebackType
from typing import Any, Self

import numpy as np
from numpy.typing import NDArray

from thermo.errors import CheckpointError
from thermo.storage import write_failure

Arrays = dict[str, NDArray[Any]]
Identity = Mapping[str, str | int | float]

FORMAT = 1
APPLICATION = 0x50_41_52_54  # "PART": sqlite's mark of whose file this is
_HEADER = b"SQLite format 3\0"
_HARDLY_FREE = 1 << 16  # bytes
_GO_ON = "run the same command again"
_OTHER = "name another checkpoint or delete this one"

# Files open in this process. Its POSIX locks would not hold against itself, and a second handle,
# once closed, would take the first one's lock away.
_open_files: set[tuple[int, int]] = set()
_open_lock = threading.Lock()


class Checkpoint:
    """Open or create the checkpoint ``path`` of the run that ``identity`` describes.

    ``identity`` maps names to texts and numbers on which the records depend (the model's digest,
    seed, steps, version ...); the format of the records is added. Raises CheckpointError for a
    file of another identity, saying what differs; for one that is no checkpoint, is damaged, is
    in use, or is in a place that cannot be written. Use it in a ``with`` statement.
    A file that holds no record when it is closed is removed.
    """

    def __init__(self, path: str | os.PathLike[str], identity: Identity) -> None:
        self.path = Path(path)
        self._real = Path(os.path.realpath(path))
        self._lock = threading.Lock()
        self._inode: tuple[int, int] | None = None
        self._connection: sqlite3.Connection | None = None
        self.damaged: set[str] = set()
        wanted = {"record format": FORMAT, **identity}
        self._new = self._ours = False
        self._claim()
        try:
            # As an address, so that sqlite does not make the file again should it vanish.
            address = self._real.as_uri() + "?mode=rw"
            self._connection = sqlite3.connect(
                address, uri=True, timeout=1.0, isolation_level=None, check_same_thread=False
            )
            self._recognise(self._connection, wanted)
            self._ours = True
        except sqlite3.Error as fault:
            self.close()
            raise self._explained(fault) from fault
        except BaseException:
            self.close()
            raise

    # ------------------------------------------------------------ records

    def load(self, key: str) -> Arrays | None:
        """The arrays saved under ``key``; None if there are none, or they fail their checksum.

        A failed checksum puts the key into ``damaged``: the piece is then to be done again.
        """
        with self._using() as connection:
            query = "SELECT data, checksum FROM pieces WHERE key = ?"
            row = connection.execute(query, (key,)).fetchone()
        if row is None:
            return None
        data, checksum = row
        if not isinstance(data, bytes) or _checksum(key, data) != checksum:
            self.damaged.add(key)
            return None
        return _unpacked(data)

    def save(self, key: str, arrays: Mapping[str, NDArray[Any]]) -> None:
        """Keep arrays (numbers of any shape) under ``key``; on the disk on return.

        Raises CheckpointError where that fails, with all earlier records as they were.
        """
        data = _packed(arrays)
        values = (key, data, _checksum(key, data))
        with self._using() as connection:
            connection.execute("BEGIN IMMEDIATE")
            try:
                connection.execute("INSERT OR REPLACE INTO pieces VALUES (?, ?, ?)", values)
                connection.execute("COMMIT")
            except BaseException:
                with contextlib.suppress(sqlite3.Error):
                    connection.execute("ROLLBACK")
                raise
        self.damaged.discard(key)

    def keys(self) -> list[str]:
        """The keys of all records, sorted, those that are damaged included."""
        with self._using() as connection:
            rows = connection.execute("SELECT key FROM pieces ORDER BY key").fetchall()
        return [str(row[0]) for row in rows]

    def close(self) -> None:
        """Let go of the file; nothing is written, all records are on the disk already."""
        with self._lock:
            connection, self._connection = self._connection, None
            if connection is not None:
                with contextlib.suppress(sqlite3.Error):
                    if (self._new or self._ours) and _empty(connection):
                        self._remove()
                with contextlib.suppress(sqlite3.Error):
                    connection.close()
            elif self._new and self._inode is not None:
                self._remove()
            if self._inode is not None:
                with _open_lock:
                    _open_files.discard(self._inode)
                self._inode = None

    def __enter__(self) -> Self:
        return self

    def __exit__(
        self,
        kind: type[BaseException] | None,
        fault: BaseException | None,
        trace: TracebackType | None,
    ) -> None:
        self.close()

    # ------------------------------------------------------------ opening

    def _claim(self) -> None:
        """Make or look at the file before sqlite does."""
        real = self._real
        try:
            with contextlib.suppress(FileExistsError):
                os.close(os.open(real, os.O_CREAT | os.O_EXCL | os.O_RDWR, 0o666))
                self._new = True
                with contextlib.suppress(OSError):  # some network file systems cannot sync these
                    _sync_folder(real.parent)
            if not real.is_file():
                raise CheckpointError(
                    f"the checkpoint {self._name} is not a regular file; name another"
                )
            if not os.access(real, os.W_OK):
                raise PermissionError(errno.EACCES, "is read-only")
            state = real.stat()
        except OSError as fault:
            raise CheckpointError(str(write_failure(self.path, fault))) from fault
        inode = (state.st_dev, state.st_ino)
        with _open_lock:
            if inode in _open_files:
                raise self._in_use()
            _open_files.add(inode)
        self._inode = inode
        self._look()

    def _look(self) -> None:
        """Refuse a foreign file by its first bytes, before sqlite could change any of them."""
        if os.path.exists(os.fspath(self._real) + "-journal"):
            return  # the journal of a killed run must be played back first
        try:
            with self._real.open("rb") as file:
                start = file.read(100)
        except OSError as fault:
            self.close()
            raise CheckpointError(str(write_failure(self.path, fault))) from fault
        if start and not (
            start.startswith(_HEADER)
            and int.from_bytes(start[68:72], "big", signed=True) == APPLICATION
        ):
            self.close()
            raise self._foreign()

    def _recognise(self, connection: sqlite3.Connection, wanted: Identity) -> None:
        """Take the lock; write the identity into a new file, or hold it against an old one's."""
        # Exclusive: the first transaction's lock is kept until the end, and falls with the
        # process. A rollback journal works on network file systems, where shared memory does not.
        for pragma in ("locking_mode = EXCLUSIVE", "journal_mode = DELETE", "synchronous = EXTRA"):
            connection.execute(f"PRAGMA {pragma}").fetchall()
        connection.execute("BEGIN EXCLUSIVE")
        if _single(connection, "SELECT count(*) FROM sqlite_master") == 0:
            connection.execute(
                "CREATE TABLE identity (text TEXT NOT NULL, opened INTEGER NOT NULL)"
            )
            connection.execute(
                "CREATE TABLE pieces (key TEXT PRIMARY KEY, data BLOB NOT NULL, "
                "checksum TEXT NOT NULL)"
            )
            connection.execute("INSERT INTO identity VALUES (?, 1)", (json.dumps(wanted),))
            connection.execute(f"PRAGMA application_id = {APPLICATION}")
            connection.execute("COMMIT")
            return
        connection.execute("COMMIT")
        if _single(connection, "PRAGMA application_id") != APPLICATION:
            raise self._foreign()
        try:
            found = json.loads(_single(connection, "SELECT text FROM identity"))
            pairs = {str(k): v for k, v in found.items()}
        except (ValueError, TypeError, AttributeError):
            raise self._damage() from None
        differing = _differences(pairs, wanted)
        if differing:
            raise CheckpointError(
                f"the checkpoint {self._name} belongs to another run: {differing}; start as that "
                f"run was started, {_OTHER}"
            )
        # Whatever forbids writing should be met now, not when the first piece is finished; and
        # a change, unlike a write of what is there, also clears away a killed run's journal.
        connection.execute("UPDATE identity SET opened = opened + 1")

    def _remove(self) -> None:
        # While the lock is held, so that no other program has begun to use it.
        with contextlib.suppress(OSError):
            self._real.unlink()

    # ------------------------------------------------------------ faults

    @contextlib.contextmanager
    def _using(self) -> Iterator[sqlite3.Connection]:
        with self._lock:
            if self._connection is None:
                raise self._closed()
            try:
                yield self._connection
            except sqlite3.Error as fault:
                raise self._explained(fault) from fault

    @property
    def _name(self) -> str:
        name = os.fspath(self.path)
        return name if len(name) <= 300 else name[:296] + " ..."

    def _closed(self) -> CheckpointError:
        return CheckpointError(f"the checkpoint {self._name} is closed; open it again")

    def _in_use(self) -> CheckpointError:
        return CheckpointError(
            f"the checkpoint {self._name} is in use by another run; wait for it, end it, or name "
            "another checkpoint"
        )

    def _foreign(self) -> CheckpointError:
        return CheckpointError(
            f"{self._name} is not a checkpoint but another program's file; name another file"
        )

    def _damage(self) -> CheckpointError:
        return CheckpointError(f"the checkpoint {self._name} is damaged or was cut short; {_OTHER}")

    def _explained(self, fault: sqlite3.Error) -> CheckpointError:
        """The one sentence that tells what sqlite stumbled over."""
        code = getattr(fault, "sqlite_errorcode", None)
        primary = None if code is None else code & 0xFF
        if primary in (sqlite3.SQLITE_NOTADB, sqlite3.SQLITE_CORRUPT, sqlite3.SQLITE_ERROR):
            return self._damage()
        if primary in (sqlite3.SQLITE_BUSY, sqlite3.SQLITE_LOCKED):
            return self._in_use()
        if primary == sqlite3.SQLITE_TOOBIG:
            return CheckpointError(
                f"a finished piece is too large for the checkpoint {self._name}; take more, "
                "smaller pieces or go without a checkpoint"
            )
        reason, advice = str(fault), "look at the disk"
        if primary in (sqlite3.SQLITE_READONLY, sqlite3.SQLITE_PERM):
            reason, advice = "it cannot be written to", "change its permissions or name another"
        elif primary == sqlite3.SQLITE_CANTOPEN:
            reason = "it cannot be opened, or its directory cannot be written to"
            advice = "choose another place"
        elif primary == sqlite3.SQLITE_FULL or self._hardly_space():
            reason, advice = "the disk is full", "free some space"
        elif primary == sqlite3.SQLITE_IOERR:
            reason, advice = (
                "writing or reading fails (a limit of its size, or a fault)",
                ("look at the disk and its limits"),
            )
        return CheckpointError(
            f"the checkpoint {self._name} cannot be used: {reason}; what was finished is kept in "
            f"it: {advice}, then {_GO_ON}"
        )

    def _hardly_space(self) -> bool:
        with contextlib.suppress(OSError):
            state = os.statvfs(self._real.parent)
            return state.f_bavail * state.f_frsize < _HARDLY_FREE
        return False


def discard(path: str | os.PathLike[str]) -> None:
    """Remove a checkpoint that is no longer needed, with sqlite's journal; missing is fine."""
    for name in (os.fspath(path), os.fspath(path) + "-journal"):
        with contextlib.suppress(OSError):
            os.unlink(name)


def _differences(found: Mapping[str, Any], wanted: Mapping[str, Any]) -> str:
    """What differs, in words: "seed is 3 there and 1 here, ..."; empty if nothing does."""
    told = []
    for name in [*wanted, *(n for n in found if n not in wanted)]:
        there, here = found.get(name), wanted.get(name)
        if there == here:
            continue
        if name in ("model", "couplings"):
            told.append(f"its {name} {'are' if name.endswith('s') else 'is'} different")
        else:
            told.append(f"{name.replace('_', ' ')} is {_told(there)} there and {_told(here)} here")
    return ", ".join(told[:4]) + (" and more" if len(told) > 4 else "")


def _told(value: Any) -> str:
    text = "not stated" if value is None else str(value)
    return text if len(text) <= 60 else text[:56] + " ..."


def _single(connection: sqlite3.Connection, query: str) -> Any:
    row = connection.execute(query).fetchone()
    return None if row is None else row[0]


def _empty(connection: sqlite3.Connection) -> bool:
    try:
        return connection.execute("SELECT 1 FROM pieces LIMIT 1").fetchone() is None
    except sqlite3.OperationalError as fault:
        if fault.sqlite_errorcode == sqlite3.SQLITE_ERROR:  # not even a table
            return True
        raise


def _checksum(key: str, data: bytes) -> str:
    return hashlib.sha256(key.encode() + b"\0" + data).hexdigest()


def _packed(arrays: Mapping[str, NDArray[Any]]) -> bytes:
    memory = io.BytesIO()
    with zipfile.ZipFile(memory, "w") as archive:
        for name, array in arrays.items():
            with archive.open(f"{name}.npy", "w", force_zip64=True) as member:
                np.lib.format.write_array(member, np.asarray(array), allow_pickle=False)
    return memory.getvalue()


def _unpacked(data: bytes) -> Arrays:
    with np.load(io.BytesIO(data), allow_pickle=False) as file:
        return {name: file[name] for name in file.files}


def _sync_folder(folder: Path) -> None:
    handle = os.open(folder, os.O_RDONLY)
    try:
        os.fsync(handle)
    finally:
        os.close(handle)
