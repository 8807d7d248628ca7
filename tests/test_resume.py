"""Sampled spectra that are killed, resumed or done elsewhere are the same to the last bit."""

from __future__ import annotations

import os
import subprocess
import sys
from pathlib import Path
from typing import Any

import numpy as np
import psutil
import pytest

import thermo
from tests.solving import lattice_mapping
from thermo.errors import CheckpointError

ROOT = Path(__file__).resolve().parent.parent
MODEL = lattice_mapping("ladder", [8], {"rung": 1.0, "leg": 0.7})
SETTINGS: dict[str, Any] = {"method": "sampled", "steps": 40, "vectors": 2, "full_below": 40}

# Kills its own children at random moments of a solve, until ten were hit in the middle of it.
KILLER = """
import os, random, signal, sys, time
import thermo
from tests.test_resume import MODEL, SETTINGS
from thermo.spectrum import sampled

model, path, out = thermo.read_model(MODEL), sys.argv[1], sys.argv[2]
thermo.solve(model, **SETTINGS)  # compiles


def slowly(*arguments, solve=sampled.solve_piece):
    time.sleep(0.05)  # so that most of the time goes into pieces, as in long runs
    return solve(*arguments)


sampled.solve_piece = slowly
started = time.monotonic()
thermo.solve(model, **SETTINGS)
whole = time.monotonic() - started
chance, hits, sizes = random.Random(20260402), 0, []
for attempt in range(200):
    child = os.fork()
    if child == 0:
        levels = thermo.solve(model, checkpoint=path, **SETTINGS)
        thermo.write(levels, out)
        os._exit(0)
    if hits == 10:
        assert os.waitpid(child, 0)[1] == 0
        break
    time.sleep(chance.uniform(0.25, 0.7) * whole)
    os.kill(child, signal.SIGKILL)
    hits += os.waitpid(child, 0)[1] == signal.SIGKILL
    sizes.append(os.path.getsize(path) if os.path.exists(path) else 0)
    if os.path.exists(out):  # it had come to its end: from the beginning again
        os.unlink(out)
        os.unlink(path)
print(hits, *sizes)
"""


def same_levels(one: Any, other: Any) -> None:
    """Two datasets agree in every bit, but for when they were made."""
    assert list(one.variables) == list(other.variables)
    for name in one.variables:
        a, b = one[name], other[name]
        assert (a.dtype, a.shape, repr(a.attrs)) == (b.dtype, b.shape, repr(b.attrs)), name
        assert a.values.tobytes() == b.values.tobytes(), name
    assert {**one.attrs, "history": ""} == {**other.attrs, "history": ""}


@pytest.fixture(scope="module")
def reference() -> Any:
    return thermo.solve(thermo.read_model(MODEL), **SETTINGS)


def test_killed_at_ten_moments(tmp_path: Path, reference: Any) -> None:
    done = subprocess.run(
        [sys.executable, "-W", "error", "-c", KILLER, str(tmp_path / "c"), str(tmp_path / "l.nc")],
        cwd=ROOT,
        capture_output=True,
        text=True,
        env={**os.environ, "PARTITA_THREADS": "1"},
        check=False,
    )
    assert done.returncode == 0, done.stderr
    hits, *sizes = map(int, done.stdout.split())
    assert hits == 10
    assert len({size for size in sizes if size}) > 3  # killed at more than one stage
    resumed = thermo.read_levels(tmp_path / "l.nc")
    thermo.write(reference, tmp_path / "reference.nc")
    same_levels(resumed, thermo.read_levels(tmp_path / "reference.nc"))


def test_neither_threads_nor_checkpoints_change_a_bit(tmp_path: Path, reference: Any) -> None:
    model, path = thermo.read_model(MODEL), tmp_path / "c"
    same_levels(thermo.solve(model, executor=thermo.Local(3), **SETTINGS), reference)
    told: list[str] = []
    for _ in range(2):
        found = thermo.solve(
            model, checkpoint=path, progress=lambda _f, text: told.append(text), **SETTINGS
        )
        same_levels(found, reference)
    assert told[-1].startswith(f"{told[-1].split()[0]} of {told[-1].split()[0]} pieces were kept")


@pytest.mark.parametrize(
    ("change", "words"),
    [
        ({"seed": 2}, "seed is 1 there and 2 here"),
        ({"steps": 41}, "steps is 40 there and 41 here"),
        ({"trace_order": 4}, "trace order is 6 there and 4 here"),
    ],
)
def test_other_settings_are_refused(tmp_path: Path, change: dict[str, Any], words: str) -> None:
    model = thermo.read_model(lattice_mapping("chain", [10], {"nearest": 1.0}))
    first = {"method": "sampled", "steps": 40, "full_below": 10}
    thermo.solve(model, checkpoint=tmp_path / "c", **first)
    with pytest.raises(CheckpointError, match=words):
        thermo.solve(model, checkpoint=tmp_path / "c", **{**first, **change})


def test_another_model_is_refused(tmp_path: Path) -> None:
    settings = {"method": "sampled", "steps": 40, "full_below": 10}
    for value, refused in ((1.0, False), (1.1, True)):
        model = thermo.read_model(lattice_mapping("chain", [10], {"nearest": value}))
        if refused:
            with pytest.raises(CheckpointError, match=r"its (model is|couplings are) different"):
                thermo.solve(model, checkpoint=tmp_path / "c", **settings)
        else:
            thermo.solve(model, checkpoint=tmp_path / "c", **settings)


def test_a_worker_killed_in_its_task(tmp_path: Path, reference: Any) -> None:
    killed: list[int] = []

    def progress(fraction: float, _text: str) -> None:
        if not killed and 0 < fraction < 0.8:
            children = psutil.Process().children(recursive=True)
            worker = next(p for p in children if "spawn_main" in " ".join(p.cmdline()))
            worker.kill()
            killed.append(worker.pid)

    found = thermo.solve(
        thermo.read_model(MODEL),
        executor=thermo.Distributed(workers=2),
        checkpoint=tmp_path / "c",
        progress=progress,
        **SETTINGS,
    )
    assert killed
    same_levels(found, reference)
    assert np.all(np.isfinite(found["energy"].values))
