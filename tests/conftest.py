"""Settings all tests share: no display, repeatable random examples, the installed command."""

from __future__ import annotations

import os
import shutil
import subprocess
import sys
from collections.abc import Callable
from pathlib import Path

import pytest
from hypothesis import HealthCheck, settings

os.environ.setdefault("MPLBACKEND", "Agg")

# The same examples on every run and machine; a slow machine is no failure.
settings.register_profile(
    "partita",
    derandomize=True,
    deadline=None,
    database=None,
    suppress_health_check=[HealthCheck.too_slow],
)
settings.load_profile("partita")

Command = Callable[..., subprocess.CompletedProcess[str]]


def command_path() -> str:
    """The installed command, from the environment that runs the tests."""
    found = shutil.which("partita", path=str(Path(sys.executable).parent))
    if found is None:
        pytest.fail("the command partita is not installed beside this Python; run pip install -e .")
    return found


@pytest.fixture
def partita(tmp_path: Path) -> Command:
    """Run the installed command in a fresh directory and give back its finished process."""

    def call(*arguments: object, **options: object) -> subprocess.CompletedProcess[str]:
        return subprocess.run(
            [command_path(), *map(str, arguments)],
            **{
                "capture_output": True,
                "text": True,
                "cwd": tmp_path,
                "stdin": subprocess.DEVNULL,
                "timeout": 120,
                "check": False,
                **options,
            },
        )

    return call
