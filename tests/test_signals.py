"""A command that is told to end: at once, one sentence, the old file whole and no other left."""

from __future__ import annotations

import os
import pty
import signal
import subprocess
import sys
import time
from pathlib import Path

import pytest

from tests.conftest import command_path
from tests.test_bad_input import MODEL, RING

SLOW = """
import sys, time, thermo
from thermo import cli, storage

def slow(*_, **__):
    with storage.atomic_path("levels.nc") as temporary:
        temporary.write_bytes(b"half")
        print("busy", flush=True)
        time.sleep(60)

setattr(thermo, sys.argv.pop(1), slow)
cli.main()
"""


def start(folder: Path, code: str, *arguments: str) -> subprocess.Popen[str]:
    """A Python process that has said that it is busy."""
    process = subprocess.Popen(
        [sys.executable, "-c", code, *arguments],
        cwd=folder,
        stdout=subprocess.PIPE,
        stderr=subprocess.PIPE,
        text=True,
    )
    assert process.stdout is not None
    assert process.stdout.readline() == "busy\n"
    return process


@pytest.mark.parametrize("name", ["SIGINT", "SIGTERM", "SIGHUP"])
def test_signals_during_a_write(tmp_path: Path, name: str) -> None:
    (tmp_path / "model.toml").write_text(MODEL)
    (tmp_path / "levels.nc").write_bytes(b"older levels")
    arguments = ["write", "solve", "model.toml", "-o", "levels.nc"]
    process = start(tmp_path, SLOW, *arguments)
    number = signal.Signals[name]
    process.send_signal(number)
    if name != "SIGINT":
        process.send_signal(number)  # a closing terminal sends it twice
    out, told = process.communicate(timeout=30)
    assert process.returncode == 128 + number
    assert out == ""
    assert told.count("\n") == 1
    assert told.startswith(
        "partita: interrupted" if name == "SIGINT" else f"partita: ended by {name}"
    )
    assert (tmp_path / "levels.nc").read_bytes() == b"older levels"
    assert sorted(p.name for p in tmp_path.iterdir()) == ["levels.nc", "model.toml"]


def test_a_signal_during_the_work(tmp_path: Path) -> None:
    (tmp_path / "model.toml").write_text(MODEL)
    code = SLOW.replace('with storage.atomic_path("levels.nc") as temporary:', "if True:")
    code = code.replace('temporary.write_bytes(b"half")', "pass")
    process = start(tmp_path, code, "solve", "solve", "model.toml", "-o", "levels.nc")
    process.send_signal(signal.SIGTERM)
    _, told = process.communicate(timeout=30)
    assert (process.returncode, told.count("\n")) == (143, 1)
    assert [p.name for p in tmp_path.iterdir()] == ["model.toml"]


def test_a_signal_that_is_ignored_stays_ignored(tmp_path: Path) -> None:
    (tmp_path / "model.toml").write_text(MODEL)
    code = "import signal; signal.signal(signal.SIGHUP, signal.SIG_IGN)\n" + SLOW  # as nohup does
    arguments = ["write", "solve", "model.toml", "-o", "levels.nc"]
    process = start(tmp_path, code.replace("sleep(60)", "sleep(1)"), *arguments)
    process.send_signal(signal.SIGHUP)
    process.communicate(timeout=30)
    assert process.returncode == 0


def wait_until_busy(process: subprocess.Popen[bytes], seconds: float) -> None:
    """Until the process has used that much processor time: long past its start-up."""
    import psutil

    watched = psutil.Process(process.pid)
    deadline = time.monotonic() + 60
    while sum(watched.cpu_times()[:2]) < seconds:
        assert process.poll() is None, "the work ended before it could be interrupted"
        assert time.monotonic() < deadline
        time.sleep(0.05)


@pytest.mark.parametrize("terminal", [False, True], ids=["plain", "terminal"])
def test_interruption(tmp_path: Path, terminal: bool) -> None:
    (tmp_path / "ring.toml").write_text(RING.format(n=20))
    (tmp_path / "levels.nc").write_bytes(b"older levels")
    reader, writer = pty.openpty() if terminal else os.pipe()
    process = subprocess.Popen(
        [command_path(), "solve", "ring.toml", "--method", "full", "-o", "levels.nc"],
        cwd=tmp_path,
        stdin=subprocess.DEVNULL,
        stdout=subprocess.PIPE,
        stderr=writer,
    )
    os.close(writer)
    try:
        wait_until_busy(process, 6.0)
        process.send_signal(signal.SIGINT)
        sent = time.monotonic()
        assert process.wait(timeout=30) == 130
        assert time.monotonic() - sent < 5  # not only after the block at hand
    finally:
        process.kill()
    told = b""
    try:
        while chunk := os.read(reader, 65536):
            told += chunk
    except OSError:  # a terminal's end of file
        pass
    os.close(reader)
    assert process.stdout is not None
    assert process.stdout.read() == b""
    process.stdout.close()
    text = told.decode()
    assert "Traceback" not in text
    assert text.count("partita: interrupted") == 1
    if not terminal:
        assert len(text.strip().splitlines()) == 1
    assert (tmp_path / "levels.nc").read_bytes() == b"older levels"
    assert sorted(p.name for p in tmp_path.iterdir()) == ["levels.nc", "ring.toml"]


def test_a_signal_whose_exception_was_lost(tmp_path: Path) -> None:
    """An exception raised in a finaliser is swallowed; the work must end all the same."""
    (tmp_path / "model.toml").write_text(MODEL)
    lost = "from thermo import process\ndef handler(n, _):\n    process.Signals.last = "
    lost += "process.signal.Signals(n)\n    process.Signals.time = time.monotonic()\n"
    code = SLOW.replace("def slow", lost + "process._interrupt = handler\n\ndef slow")
    process = start(tmp_path, code, "solve", "solve", "model.toml", "-o", "levels.nc")
    process.send_signal(signal.SIGTERM)
    _, told = process.communicate(timeout=30)
    assert (process.returncode, told.count("\n")) == (143, 1)
