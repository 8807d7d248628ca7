"""The command solve with sampled spectra: its options, what it keeps, how it goes on."""

from __future__ import annotations

import os
import signal
import subprocess
import time
from pathlib import Path

import pytest

import thermo
from tests.conftest import Command, command_path
from tests.test_bad_input import MODEL, RING, refused
from tests.test_resume import same_levels
from thermo import arguments, errors

SAMPLED = ("solve", "ring.toml", "-o", "levels.nc", "--method", "sampled", "--steps", "40")


@pytest.fixture
def ring(tmp_path: Path) -> Path:
    (tmp_path / "ring.toml").write_text(RING.format(n=12))
    return tmp_path


def names(folder: Path) -> list[str]:
    return sorted(p.name for p in folder.iterdir())


def test_every_option_arrives(partita: Command, ring: Path) -> None:
    options = "--vectors 3 --steps 30 --seed 7 --full-below 12 --exact-states 2 --trace-order 4"
    done = partita(*SAMPLED[:6], *options.split(), "--threads", "1", "--memory", "4 GiB")
    assert (done.returncode, done.stderr) == (0, "")
    assert names(ring) == ["levels.nc", "ring.toml"]
    attrs = thermo.read_levels(ring / "levels.nc").attrs
    assert attrs["method"] == "sampled"
    wanted = {"steps": 30, "seed": 7, "full_below": 12, "exact_states": 2, "trace_order": 4}
    assert {name: attrs[name] for name in wanted} == wanted
    assert attrs["vectors"] >= 3  # whole families of vectors


def test_a_checkpoint_that_was_asked_for_stays(partita: Command, ring: Path) -> None:
    arguments = (*SAMPLED, "--full-below", "10", "--checkpoint", "mine")
    assert partita(*arguments).returncode == 0
    assert names(ring) == ["levels.nc", "mine", "ring.toml"]
    first = thermo.read_levels(ring / "levels.nc")
    assert partita(*arguments).returncode == 0
    same_levels(thermo.read_levels(ring / "levels.nc"), first)
    told = refused(partita(*arguments, "--seed", "3"), 4, "mine", "seed is 1 there and 3 here")
    assert "belongs to another run" in told
    assert names(ring) == ["levels.nc", "mine", "ring.toml"]


BAD = {
    "steps": (["--steps", "1"], 3, ["steps is 1", "whole number from 10"]),
    "steps in words": (["--steps", "many"], 2, ["--steps", "integer"]),
    "vectors": (["--vectors", "0"], 3, ["vectors is 0"]),
    "seed": (["--seed", "-1"], 3, ["seed is -1"]),
    "orders": (["--trace-order", "9"], 3, ["trace_order is 9", "from 0 to 6"]),
    "accuracy": (["--accuracy", "2"], 3, ["accuracy is 2", "between 0 and 1"]),
    "range of one": (["--accuracy-range", "5"], 3, ["--accuracy-range '5'", "low:high"]),
    "range that falls": (["--accuracy-range", "5:1"], 3, ["does not rise"]),
    "range from zero": (["--accuracy-range", "0:1"], 3, ["does not rise from above zero"]),
    "scheduler": (["--scheduler", "nowhere"], 3, ["'nowhere'", "host:port"]),
    "both": (["--scheduler", "a:1", "--workers", "2"], 3, ["one of the two"]),
    "workers": (["--workers", "0"], 3, ["workers is 0"]),
    "onto the output": (["--checkpoint", "./levels.nc"], 4, ["also the output"]),
    "onto the model": (["--checkpoint", "ring.toml"], 4, ["also the model"]),
    "in a directory": (["--checkpoint", "."], 4, ["not a regular file"]),
    "no directory": (["--checkpoint", "no/c"], 4, ["no/c", "does not exist"]),
}


@pytest.mark.parametrize("name", BAD)
def test_mistakes(partita: Command, ring: Path, name: str) -> None:
    options, code, words = BAD[name]
    refused(partita(*SAMPLED, *options), code, *words)
    assert names(ring) == ["ring.toml"]


def test_what_does_not_go_with_full(partita: Command, ring: Path) -> None:
    done = partita(*SAMPLED[:4], "--method", "full", "--full-below", "3", "--seed", "2")
    refused(done, 3, "--seed and --full-below cannot go with --method full")
    # Where the method is chosen, options that came to nothing are told.
    done = partita(*SAMPLED[:4], "--seed", "2", "--workers", "1")
    assert done.returncode == 0
    assert done.stderr.splitlines() == [
        "partita: note: the full spectrum was at hand, so --seed and --workers had no effect"
    ]
    assert names(ring) == ["levels.nc", "ring.toml"]


def test_a_file_of_another_kind_where_pieces_would_go(partita: Command, ring: Path) -> None:
    (ring / "levels.nc.partial").write_text("mine")
    refused(partita(*SAMPLED), 4, "levels.nc.partial", "not a checkpoint")
    assert (ring / "levels.nc.partial").read_text() == "mine"


def test_no_scheduler(partita: Command, ring: Path) -> None:
    refused(partita(*SAMPLED, "--scheduler", "127.0.0.1:9"), 7, "no scheduler answers")
    assert names(ring) == ["ring.toml"]


def test_names_of_options_and_checkpoints() -> None:
    assert arguments.option_names(["seed"]) == "--seed"
    assert arguments.option_names(["a_b", "c", "d"]) == "--a-b, --c and --d"
    here = Path("levels.nc")
    assert arguments.check_checkpoint(None, here, Path("m")) == Path("levels.nc.partial")
    long = arguments.check_checkpoint(None, Path("é" * 120 + ".nc"), Path("m"))
    assert len(os.fsencode(long.name)) < 200


def test_exit_codes_of_the_new_faults() -> None:
    assert errors.CheckpointError("x").exit_code == 4
    assert errors.WorkerError("x").exit_code == 7


# ---------------------------------------------------------------- ended, and gone on


SLOW = """
import time
from thermo import cli
from thermo.spectrum import sampled

def slowly(*arguments, solve=sampled.solve_piece):
    time.sleep(0.3)
    return solve(*arguments)

sampled.solve_piece = slowly
cli.main()
"""


@pytest.mark.parametrize("name", ["SIGINT", "SIGTERM", "SIGKILL"])
def test_ended_and_gone_on(partita: Command, ring: Path, name: str) -> None:
    arguments = (*SAMPLED, "--full-below", "10")
    python = Path(command_path()).parent / "python"
    process = subprocess.Popen(
        [python, "-c", SLOW, *arguments], cwd=ring, stderr=subprocess.PIPE, text=True
    )
    partial = ring / "levels.nc.partial"
    deadline = time.monotonic() + 60
    while not partial.exists() or partial.stat().st_size <= 16384:
        assert process.poll() is None
        assert time.monotonic() < deadline
        time.sleep(0.02)
    process.send_signal(signal.Signals[name])
    _, told = process.communicate(timeout=30)
    if name != "SIGKILL":
        what = {"SIGINT": "interrupted", "SIGTERM": "ended by SIGTERM"}[name]
        assert told == (
            f"partita: {what}; what was finished is kept in levels.nc.partial, "
            "and the same command goes on from it\n"
        )
        assert process.returncode == 128 + signal.Signals[name]
        assert names(ring) == ["levels.nc.partial", "ring.toml"]
    refused(partita(*arguments, "--seed", "5"), 4, "levels.nc.partial", "seed is 1 there")
    assert partita(*arguments).returncode == 0
    assert names(ring) == ["levels.nc", "ring.toml"]
    resumed = thermo.read_levels(ring / "levels.nc")
    assert partita(*arguments).returncode == 0
    same_levels(resumed, thermo.read_levels(ring / "levels.nc"))


def test_two_at_once(partita: Command, ring: Path) -> None:
    arguments = (*SAMPLED, "--full-below", "10")
    python = Path(command_path()).parent / "python"
    process = subprocess.Popen([python, "-c", SLOW, *arguments], cwd=ring)
    try:
        partial = ring / "levels.nc.partial"
        while not partial.exists() or partial.stat().st_size <= 16384:
            assert process.poll() is None
            time.sleep(0.02)
        refused(partita(*arguments), 4, "in use by another run")
    finally:
        process.kill()
        process.wait()


def test_workers_of_this_machine(partita: Command, ring: Path) -> None:
    arguments = (*SAMPLED, "--full-below", "10")
    assert partita(*arguments).returncode == 0
    alone = thermo.read_levels(ring / "levels.nc")
    done = partita(*arguments, "--workers", "1")
    assert (done.returncode, done.stdout, done.stderr) == (0, "", "")
    same_levels(thermo.read_levels(ring / "levels.nc"), alone)
    assert names(ring) == ["levels.nc", "ring.toml"]


def test_survey_takes_them_too(partita: Command, ring: Path) -> None:
    (ring / "pair.toml").write_text(MODEL)
    done = partita("survey", "ring.toml", "--method", "sampled", "--vectors", "4")
    assert done.returncode == 0
    assert "sampled" in done.stdout
