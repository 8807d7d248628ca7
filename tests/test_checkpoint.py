"""Checkpoints: what was kept is kept, whatever ends the program; what is not ours is refused."""

from __future__ import annotations

import contextlib
import os
import random
import shutil
import signal
import sqlite3
import subprocess
import sys
import time
from collections.abc import Iterator
from pathlib import Path

import numpy as np
import pytest

from tests import pieces
from thermo.errors import CheckpointError
from thermo.spectrum.checkpoint import Checkpoint, discard

ROOT = Path(__file__).resolve().parent.parent
RUN = {"model": "a" * 64, "seed": 1, "steps": 200, "program version": "0.1.0"}

# Saves pieces from the one given on, and says of each that it was kept.
SAVER = """
import sys
from tests import pieces
from thermo.errors import CheckpointError
from thermo.spectrum.checkpoint import Checkpoint
first, size = int(sys.argv[2]), int(sys.argv[3])
try:
    with Checkpoint(sys.argv[1], {"seed": 1}) as kept:
        for n in range(first, 100_000):
            kept.save(f"piece-{n}", pieces.arrays(n, size))
            print(n, flush=True)
except CheckpointError as fault:
    print(fault, flush=True)
"""


def saver(path: Path, first: int = 0, size: int = 500, before: str = "") -> subprocess.Popen[str]:
    return subprocess.Popen(
        [sys.executable, "-c", before + SAVER, str(path), str(first), str(size)],
        cwd=ROOT,
        stdout=subprocess.PIPE,
        text=True,
    )


def told(path: Path, identity: dict[str, str | int | float] = RUN) -> str:
    """The one sentence with which a file is refused, and that it is left as it was."""
    before = path.read_bytes() if path.is_file() else None
    with pytest.raises(CheckpointError) as caught, Checkpoint(path, identity):
        pass
    assert (path.read_bytes() if path.is_file() else None) == before
    text = str(caught.value)
    assert "\n" not in text
    assert len(text) < 400
    return text


# ---------------------------------------------------------------- records


def test_records_come_back_to_the_last_bit(tmp_path: Path) -> None:
    path = tmp_path / "run.partial"
    with Checkpoint(path, RUN) as kept:
        assert kept.keys() == []
        assert kept.load("piece-0") is None
        for n in (2, 0, 1):
            kept.save(f"piece-{n}", pieces.arrays(n))
        kept.save("piece-1", pieces.arrays(7))
        kept.save("piece-1", pieces.arrays(1))
    with Checkpoint(path, RUN) as kept:
        assert kept.keys() == ["piece-0", "piece-1", "piece-2"]
        for n in range(3):
            found = kept.load(f"piece-{n}")
            assert found is not None
            assert pieces.same(found, n)
    assert [p.name for p in tmp_path.iterdir()] == ["run.partial"]
    discard(path)
    discard(path)
    assert list(tmp_path.iterdir()) == []


@pytest.mark.parametrize(
    "array",
    [
        np.array([np.nan, -0.0, np.inf, 5e-324]),
        np.array([1 + 2j, -3j]),
        np.arange(12, dtype=">i2").reshape(3, 4).T,
        np.zeros((0, 3), dtype=bool),
        np.array(2**63, dtype=np.uint64),
        np.asfortranarray(np.random.default_rng(1).normal(size=(4, 5))),
        np.array(["M = ½"]),
    ],
)
def test_any_plain_array(tmp_path: Path, array: np.ndarray) -> None:
    with Checkpoint(tmp_path / "c", RUN) as kept:
        kept.save("a/b c", {"file": array})
        found = kept.load("a/b c")
    assert found is not None
    assert pieces.equal(found, {"file": array})


def test_objects_are_no_arrays(tmp_path: Path) -> None:
    with Checkpoint(tmp_path / "c", RUN) as kept:
        kept.save("one", pieces.arrays(1))
        with pytest.raises(ValueError, match="Object arrays"):
            kept.save("two", {"x": np.array([{}, None])})
        assert kept.keys() == ["one"]


def test_one_without_records_leaves_no_file(tmp_path: Path) -> None:
    path = tmp_path / "c"
    with Checkpoint(path, RUN):
        assert path.exists()
    assert list(tmp_path.iterdir()) == []
    path.touch()  # as a run killed at its very start leaves it
    with Checkpoint(path, RUN):
        pass
    assert list(tmp_path.iterdir()) == []


def test_a_closed_one_says_so(tmp_path: Path) -> None:
    kept = Checkpoint(tmp_path / "c", RUN)
    kept.close()
    kept.close()
    with pytest.raises(CheckpointError, match="is closed"):
        kept.keys()


# ---------------------------------------------------------------- whose it is


@pytest.mark.parametrize(
    ("change", "words"),
    [
        ({"seed": 2}, ["seed is 1 there and 2 here"]),
        ({"steps": 100, "seed": 3}, ["seed is 1", "steps is 200 there and 100 here"]),
        ({"model": "b" * 64}, ["its model is different"]),
        ({"program version": "0.2.0"}, ["program version is 0.1.0 there and 0.2.0 here"]),
        ({"trace_order": 6}, ["trace order is not stated there and 6 here"]),
    ],
)
def test_another_run_is_refused(
    tmp_path: Path, change: dict[str, str | int | float], words: list[str]
) -> None:
    path = tmp_path / "run.partial"
    with Checkpoint(path, RUN) as kept:
        kept.save("one", pieces.arrays(1))
    text = told(path, RUN | change)
    assert "belongs to another run" in text
    assert "run.partial" in text
    for word in words:
        assert word in text
    with Checkpoint(path, RUN) as kept:
        assert kept.keys() == ["one"]


def test_foreign_files(tmp_path: Path) -> None:
    text = tmp_path / "notes.txt"
    text.write_text("not a database\n" * 100)
    assert "not a checkpoint" in told(text)
    short = tmp_path / "short"
    short.write_bytes(b"SQLite format 3\0")
    assert "not a checkpoint" in told(short)
    foreign = tmp_path / "other.db"
    with contextlib.closing(sqlite3.connect(foreign)) as database:
        database.execute("PRAGMA journal_mode = WAL")
        database.execute("CREATE TABLE pieces (key, data, checksum)")
        database.commit()
    assert "not a checkpoint" in told(foreign)
    assert "not a regular file" in told(tmp_path)
    assert "not a regular file" in told(Path("/dev/null"))
    assert "does not exist" in told(tmp_path / "no" / "c")
    assert sorted(p.name for p in tmp_path.iterdir()) == ["notes.txt", "other.db", "short"]


@pytest.mark.parametrize("damage", ["cut", "zeroed", "table"])
def test_damaged_files(tmp_path: Path, damage: str) -> None:
    path = tmp_path / "c"
    with Checkpoint(path, RUN) as kept:
        for n in range(20):
            kept.save(f"piece-{n}", pieces.arrays(n))
    if damage == "table":
        with contextlib.closing(sqlite3.connect(path)) as database:
            database.execute("DROP TABLE identity")
            database.commit()
    else:
        content = path.read_bytes()
        cut = content[:5000] if damage == "cut" else content[:100] + bytes(len(content) - 100)
        path.write_bytes(cut)
    text = told(path)
    assert "damaged or was cut short" in text
    assert "delete this one" in text


def test_a_flipped_bit_costs_one_piece(tmp_path: Path) -> None:
    path = tmp_path / "c"
    with Checkpoint(path, RUN) as kept:
        for n in range(20):
            kept.save(f"piece-{n}", pieces.arrays(n))
    content = bytearray(path.read_bytes())
    place = content.index(pieces.arrays(11)["energy"].tobytes()[:64])
    content[place + 5] ^= 1
    path.write_bytes(bytes(content))
    with Checkpoint(path, RUN) as kept:
        good = [n for n in range(20) if (a := kept.load(f"piece-{n}")) and pieces.same(a, n)]
        assert good == [n for n in range(20) if n != 11]
        assert kept.damaged == {"piece-11"}
        kept.save("piece-11", pieces.arrays(11))
        assert kept.damaged == set()
        again = kept.load("piece-11")
    assert again is not None
    assert pieces.same(again, 11)


# ---------------------------------------------------------------- two programs


def test_one_program_at_a_time(tmp_path: Path) -> None:
    path, link = tmp_path / "c", tmp_path / "link"
    link.symlink_to(path)
    process = saver(path)
    assert process.stdout is not None
    try:
        assert process.stdout.readline() == "0\n"
        with pytest.raises(CheckpointError, match="in use by another run"):
            Checkpoint(path, {"seed": 1})
        assert process.stdout.readline() != ""
    finally:
        process.kill()
        process.communicate()
    with Checkpoint(path, {"seed": 1}) as kept:  # a dead program's lock is nobody's
        for place in (path, link):
            with pytest.raises(CheckpointError, match="in use by another run"):
                Checkpoint(place, {"seed": 1})
        other = saver(path)
        assert "in use by another run" in other.communicate(timeout=30)[0]
        assert kept.keys()


# ---------------------------------------------------------------- kill -9


def test_killed_at_any_moment(tmp_path: Path) -> None:
    chance = random.Random(20260401)
    path = tmp_path / "c"
    kept_so_far: set[int] = set()
    for attempt in range(10):
        # 60 000 numbers make each save long enough to be hit in its middle.
        process = saver(path, first=len(kept_so_far), size=60_000)
        assert process.stdout is not None
        assert process.stdout.readline() == f"{len(kept_so_far)}\n"
        time.sleep(chance.uniform(0.0, 0.15))
        process.send_signal(signal.SIGKILL)
        out, _ = process.communicate()
        confirmed = len(kept_so_far) + 1 + out.count("\n")
        with Checkpoint(path, {"seed": 1}) as kept:
            found = {int(key.split("-")[1]) for key in kept.keys()}  # noqa: SIM118
            assert found >= set(range(confirmed)), f"attempt {attempt} lost a kept piece"
            assert len(found) <= confirmed + 1
            for n in found - kept_so_far:
                record = kept.load(f"piece-{n}")
                assert record is not None
                assert pieces.equal(record, pieces.arrays(n, 60_000))
            assert kept.damaged == set()
        kept_so_far = found
    assert [p.name for p in tmp_path.iterdir()] == ["c"]


# ---------------------------------------------------------------- places that do not take it


@pytest.fixture
def small_disk(tmp_path: Path) -> Iterator[Path]:
    """A file system of one MiB of its own, where this user may mount one."""
    place = tmp_path / "disk"
    place.mkdir()
    mount = shutil.which("mount")
    command = [str(mount), "-t", "tmpfs", "-o", "size=1m", "none", str(place)]
    if mount is None or subprocess.run(command, capture_output=True).returncode:
        pytest.skip("no file system can be mounted here")
    try:
        yield place
    finally:
        subprocess.run(["umount", str(place)], check=True)


def check_kept(path: Path, size: int = 500) -> int:
    """All records of a checkpoint are whole; how many there are."""
    with Checkpoint(path, {"seed": 1}) as kept:
        keys = kept.keys()
        for key in keys:
            record = kept.load(key)
            assert record is not None
            assert pieces.equal(record, pieces.arrays(int(key.split("-")[1]), size))
        assert kept.damaged == set()
    return len(keys)


def test_a_full_disk(small_disk: Path) -> None:
    path = small_disk / "c"
    process = saver(path, size=5000)
    lines = process.communicate(timeout=30)[0].splitlines()
    assert "the disk is full" in lines[-1]
    assert "what was finished is kept" in lines[-1]
    assert lines[:-1] == [str(n) for n in range(len(lines) - 1)]
    assert len(lines) > 10
    # Room is made, and the run goes on.
    subprocess.run(["mount", "-o", "remount,size=4m", str(small_disk)], check=True)
    assert check_kept(path, 5000) == len(lines) - 1
    with Checkpoint(path, {"seed": 1}) as kept:
        kept.save("piece-0", pieces.arrays(0, 5000))


def test_a_full_disk_at_the_start(small_disk: Path) -> None:
    (small_disk / "filler").write_bytes(bytes(2**20))
    with pytest.raises(CheckpointError, match="the disk is full"):
        Checkpoint(small_disk / "c", RUN)
    assert [p.name for p in small_disk.iterdir()] == ["filler"]


def test_a_read_only_disk(small_disk: Path) -> None:
    with Checkpoint(small_disk / "c", RUN) as kept:
        kept.save("one", pieces.arrays(1))
    subprocess.run(["mount", "-o", "remount,ro", str(small_disk)], check=True)
    for name in ("c", "new"):
        with pytest.raises(CheckpointError, match=r"read-only|permission is denied"):
            Checkpoint(small_disk / name, RUN)


def test_a_limit_of_file_size(tmp_path: Path) -> None:
    path = tmp_path / "c"
    before = "import resource; resource.setrlimit(resource.RLIMIT_FSIZE, (500_000, 500_000))\n"
    lines = saver(path, before=before).communicate(timeout=30)[0].splitlines()
    assert "cannot be used" in lines[-1]
    assert "what was finished is kept" in lines[-1]
    assert len(lines) > 10
    assert check_kept(path) == len(lines) - 1


def test_a_directory_that_takes_no_journal(tmp_path: Path) -> None:
    path = tmp_path / "c"
    with Checkpoint(path, RUN) as kept:
        kept.save("one", pieces.arrays(1))
    os.mkdir(f"{path}-journal")
    with pytest.raises(CheckpointError, match=r"cannot be used"):
        Checkpoint(path, RUN)
