"""Mistakes a user makes, each through the installed command.

Each must end in one sentence on standard error, its documented exit code, and no file under the
name that was asked for. The models and numbers here are invented.
"""

from __future__ import annotations

import errno
import os
import subprocess
import tempfile
import time
from collections.abc import Iterator
from pathlib import Path

import pytest

from tests.conftest import Command, command_path

MODEL = """
format = 1
title = "pair"
energy_unit = "K"
bond_term = "+J S.S"
[couplings]
J = 10.0
[[site]]
name = "a"
spin = 0.5
g = 2.1
[[site]]
name = "b"
spin = 0.5
g = 2.1
[[bond]]
sites = ["a", "b"]
coupling = "J"
"""
RING = """
format = 1
energy_unit = "K"
bond_term = "+J S.S"
[couplings]
J = 10.0
[lattice]
name = "chain"
size = [{n}]
boundary = "periodic"
spin = 0.5
couplings = {{ nearest = "J" }}
"""
STUDY = """
format = 1
model = "model.toml"
[[data]]
name = "chi"
file = "chi.csv"
quantity = "susceptibility"
units = "emu/mol"
columns = { temperature = "T", value = "chi" }
relative_uncertainty = 0.02
[parameters.J]
start = 10.0
lower = 1.0
upper = 50.0
"""
CHI = "T,chi\n2,0.001\n5,0.03\n10,0.05\n20,0.03\n"


def refused(done: subprocess.CompletedProcess[str], code: int, *words: str) -> str:
    """The one sentence of a refusal, which names everything in ``words``."""
    lines = [line for line in done.stderr.splitlines() if line.strip()]
    told = [line for line in lines if not line.startswith("partita: note: ")]
    assert done.returncode == code, done.stderr
    assert "Traceback" not in done.stderr
    assert len(told) == 1, done.stderr
    assert told[0].startswith("partita: ")
    for word in words:
        assert word in told[0], told[0]
    assert done.stdout == ""
    return told[0]


def solve(partita: Command, folder: Path, model: str | bytes) -> subprocess.CompletedProcess[str]:
    content = model.encode() if isinstance(model, str) else model
    (folder / "model.toml").write_bytes(content)
    done = partita("solve", "model.toml", "-o", "levels.nc")
    assert sorted(p.name for p in folder.iterdir()) == ["model.toml"]
    return done


BAD_MODELS = {
    "unknown key": (MODEL.replace("title =", "titel ="), ["titel", "title"]),
    "unknown key of a bond": (MODEL + 'strength = "J"\n', ["bond[0]", "strength"]),
    "misspelt coupling": (MODEL.replace('coupling = "J"', 'coupling = "j1"'), ["bond[0]", "'j1'"]),
    "unknown site": (MODEL.replace('["a", "b"]', '["a", "c"]'), ["bond[0]", "'c'"]),
    "site out of range": (MODEL.replace('["a", "b"]', "[0, 2]"), ["bond[0]", "2"]),
    "bond to itself": (MODEL.replace('["a", "b"]', '["a", "a"]'), ["bond[0]", "'a'"]),
    "NaN": (MODEL.replace("J = 10.0", "J = nan"), ["couplings.J", "nan"]),
    "infinity": (MODEL.replace("J = 10.0", "J = inf"), ["couplings.J", "inf"]),
    "infinite g": (MODEL.replace("g = 2.1", "g = -inf", 1), ["site[0]", "g", "inf"]),
    "non-symmetric g": (
        MODEL.replace("g = 2.1", "g = [[2,0.1,0],[0,2,0],[0,0,2]]", 1),
        ["site[0]", "g", "symmetric"],
    ),
    "negative spin": (MODEL.replace("spin = 0.5", "spin = -0.5", 1), ["site[0]", "spin", "-0.5"]),
    "quarter spin": (MODEL.replace("spin = 0.5", "spin = 0.25", 1), ["site[0]", "spin", "0.25"]),
    "empty cluster": (MODEL[: MODEL.index("[[site]]")], ["site"]),
    "an endless spin": (
        MODEL.replace("spin = 0.5", 'spin = "1e99999999"', 1),
        ["site[0]", "spin", "1e99999999"],
    ),
    "half a character": (
        '{"format": 1, "title": "\\ud800", "energy_unit": "K"}',
        ["title", "\\ud800"],
    ),
    "missing bond_term": (MODEL.replace('bond_term = "+J S.S"\n', ""), ["bond_term"]),
    "unknown energy unit": (MODEL.replace('"K"', '"kelvin"'), ["energy_unit", "kelvin"]),
    "text for a number": (MODEL.replace("J = 10.0", 'J = "ten"'), ["couplings.J", "'ten'"]),
    "not TOML": ("J = = 3\n", ["model.toml"]),
    "not text": (b"\xff\xfe\x00\x01", ["model.toml"]),
    "an empty file": ("", ["format"]),
}


@pytest.mark.parametrize("case", BAD_MODELS)
def test_bad_model(partita: Command, tmp_path: Path, case: str) -> None:
    model, words = BAD_MODELS[case]
    sentence = refused(solve(partita, tmp_path, model), 3, *words)
    assert "model.toml" in sentence  # where the fault is


def test_sixty_spins_are_surveyed_but_not_solved(partita: Command, tmp_path: Path) -> None:
    (tmp_path / "ring.toml").write_text(RING.format(n=60))
    assert partita("survey", "ring.toml").returncode == 0
    started = time.monotonic()
    done = partita("solve", "ring.toml", "--memory", "2 GiB", "-o", "levels.nc")
    refused(done, 5, "985 538 189 951 356", "2.0 GiB", "smaller cluster")
    assert time.monotonic() - started < 20
    assert not (tmp_path / "levels.nc").exists()


# ---------------------------------------------------------------- data and studies


BAD_STUDIES = {
    "unreadable CSV": ({"chi.csv": b"T,chi\n\xff\xfe\x00"}, ["chi.csv"]),
    "missing CSV": ({"chi.csv": None}, ["chi.csv"]),
    "ragged CSV": ({"chi.csv": CHI + "30,0.02,7\n"}, ["chi.csv", "line 6"]),
    "decimal commas": (
        {"chi.csv": CHI.replace(",", ";").replace(".", ","), "study.toml": 'delimiter = ";"'},
        ["chi.csv", "line 2", "decimal comma", "0.001"],
    ),
    "decimal commas between commas": (
        {"chi.csv": CHI.replace("0.03", "0,03")},
        ["chi.csv", "line 3", "decimal comma"],
    ),
    "wrong column": ({"chi.csv": CHI.replace("T,chi", "T,X")}, ["chi.csv", "'chi'", "'X'"]),
    "text in a cell": ({"chi.csv": CHI.replace("0.05", "n/a")}, ["chi.csv", "line 4", "'n/a'"]),
    "NaN in a cell": ({"chi.csv": CHI.replace("0.05", "nan")}, ["chi.csv", "line 4", "nan"]),
    "unsorted temperatures": ({"chi.csv": CHI + "4,0.02\n"}, ["chi.csv", "line 6", "4 K"]),
    "negative temperature": ({"chi.csv": CHI.replace("\n2,", "\n-2,")}, ["chi.csv", "-2 K"]),
    "no data": ({"chi.csv": "T,chi\n"}, ["chi.csv", "no rows"]),
    "unit of another quantity": ({"study.toml": ("emu/mol", "J/(mol K)")}, ["J/(mol K)", "units"]),
    "unknown unit": ({"study.toml": ("emu/mol", "furlong")}, ["furlong", "units"]),
    "no overlap": ({"study.toml": "range = [400, 500]"}, ["chi.csv", "2 to 20 K", "400"]),
    "unknown key": ({"study.toml": "wieght = 2"}, ["wieght"]),
    "unknown parameter": ({"study.toml": ("parameters.J]", "parameters.K]")}, ["parameters.K"]),
    "a tie that is a program": (
        {"study.toml": ("start = 10.0\nlower = 1.0\nupper = 50.0", "tied = \"__import__('os')\"")},
        ["parameters.J"],
    ),
    "start outside its bounds": ({"study.toml": ("start = 10.0", "start = 99.0")}, ["99", "50"]),
}


@pytest.mark.parametrize("case", BAD_STUDIES)
def test_bad_study(partita: Command, tmp_path: Path, case: str) -> None:
    changes, words = BAD_STUDIES[case]
    study, chi = STUDY, changes.get("chi.csv", CHI)
    change = changes.get("study.toml", ())
    if isinstance(change, tuple) and change:
        study = STUDY.replace(*change)
    elif change:
        study = STUDY.replace("relative_uncertainty", f"{change}\nrelative_uncertainty")
    (tmp_path / "model.toml").write_text(MODEL)
    (tmp_path / "study.toml").write_text(study)
    if chi is not None:
        (tmp_path / "chi.csv").write_bytes(chi if isinstance(chi, bytes) else chi.encode())
    before = sorted(tmp_path.iterdir())
    done = partita("fit", "study.toml", "-o", "fit.nc", "--picture", "fit.png")
    refused(done, 3, *words)
    assert sorted(tmp_path.iterdir()) == before


# ---------------------------------------------------------------- arguments


@pytest.fixture(scope="module")
def levels(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """A good levels file."""
    folder = tmp_path_factory.mktemp("levels")
    (folder / "model.toml").write_text(MODEL)
    arguments = [command_path(), "solve", "model.toml", "-o", "levels.nc"]
    subprocess.run(arguments, cwd=folder, check=True, capture_output=True)
    return folder / "levels.nc"


@pytest.mark.parametrize(
    ("arguments", "word"),
    [
        (["-t", "10,5,2"], "rising order"),
        (["-t", "-3,5"], "above zero"),
        (["-t", "0:10:11"], "above zero"),
        (["-t", "10:2:5"], "smaller first"),
        (["-t", "2:10"], "three"),
        (["-t", "2:10:many"], "'many'"),
        (["-t", "2:10:0"], "'0'"),
        (["-t", "log 0:10:5"], "logarithmic"),
        (["-t", "2;5"], "'2;5'"),
        (["-t", "2,nan"], "nan"),
        (["-t", "2,inf"], "inf"),
        (["-t", "1:2:²"], "'²' points"),
        (["-t", "1:2:" + "9" * 5000], "999 ...'"),
        (["-t", "9" * 5000], "inf"),
        (["-t", "2," + "x" * 5000], "xxx ...'"),
        (["-b", "1,0"], "rising order"),
        (["-b", "strong"], "'strong'"),
        (["--g", "nan"], "nan"),
        (["--g", "0"], "--g 0"),
    ],
)
def test_bad_grid(partita: Command, levels: Path, arguments: list[str], word: str) -> None:
    assert len(refused(partita("curves", levels, *arguments), 3, word)) < 300


def test_a_grid_longer_than_a_file_name(partita: Command, levels: Path) -> None:
    grid = ",".join(map(str, range(1, 2000)))
    done = partita("curves", levels, "-t", grid)
    assert (done.returncode, done.stderr) == (0, "")


def test_a_grid_beyond_memory_is_refused(partita: Command, levels: Path) -> None:
    started = time.monotonic()
    done = partita("curves", levels, "-t", "1:300:1000000", "-b", "0:10:1000000")
    refused(done, 5, "1000000 temperatures × 1000000 fields", "116 TiB", "fewer")
    assert time.monotonic() - started < 20


@pytest.mark.parametrize("size", ["four GiB", "4 GiBi", "0", "-1 GB", "nan", "inf MB", ""])
def test_bad_memory(partita: Command, tmp_path: Path, size: str) -> None:
    (tmp_path / "model.toml").write_text(MODEL)
    refused(partita("survey", "model.toml", "--memory", size), 3, "memory limit")


@pytest.mark.parametrize(
    ("arguments", "word"),
    [
        (["solve"], "MODEL"),
        (["solve", "model.toml"], "--output"),
        (["melt", "model.toml"], "'melt'"),
        (["curves", "levels.nc", "--units", "furlongs"], "'--units': 'furlongs' is not one of"),
        (["m" * 5000], "mmm ..."),
        (["solve", "model.toml", "-o", "x.nc", "--threads", "9" * 5000], "--threads"),
        (["solve", "model.toml", "-o", "x.nc", "--threads", "0"], "--threads"),
        (["survey", "model.toml", "--colour"], "--colour"),
    ],
)
def test_misuse_of_the_command_line(partita: Command, arguments: list[str], word: str) -> None:
    assert len(refused(partita(*arguments), 2, word, "--help")) < 300


# ---------------------------------------------------------------- files


@pytest.mark.parametrize("command", ["curves", "plot", "export"])
@pytest.mark.parametrize("kind", ["text", "cut short", "damaged", "foreign", "empty"])
def test_not_a_file_of_ours(
    partita: Command, levels: Path, tmp_path: Path, command: str, kind: str
) -> None:
    given = tmp_path / "given.nc"
    whole = levels.read_bytes()
    if kind == "text":
        given.write_text("these are not the levels\n")
    elif kind == "cut short":
        given.write_bytes(whole[: len(whole) // 2])
    elif kind == "damaged":
        middle = len(whole) // 3
        given.write_bytes(whole[:middle] + bytes(2000) + whole[middle + 2000 :])
    elif kind == "empty":
        given.touch()
    else:
        import xarray as xr

        xr.Dataset({"rain": ("day", [1.0, 2.0])}).to_netcdf(given, engine="netcdf4")
    target = {"curves": "out.csv", "plot": "out.png", "export": "out.csv"}[command]
    refused(partita(command, "given.nc", "-o", target), 4, "given.nc")
    assert not (tmp_path / target).exists()


def test_curves_of_curves(partita: Command, levels: Path, tmp_path: Path) -> None:
    assert partita("curves", levels, "-t", "2:20:5", "-o", "curves.nc").returncode == 0
    refused(partita("curves", "curves.nc", "-t", "2:20:5"), 4, "curves.nc", "levels")


def test_altered_levels_fail_their_check(partita: Command, levels: Path, tmp_path: Path) -> None:
    import netCDF4

    given = tmp_path / "given.nc"
    given.write_bytes(levels.read_bytes())
    with netCDF4.Dataset(given, "a") as file:
        file["energy"][0] += 0.5
    refused(partita("curves", "given.nc", "-t", "2:20:5"), 6, "given.nc")


@pytest.mark.parametrize("command", ["survey", "solve", "curves", "fit", "plot", "export"])
def test_missing_input(partita: Command, tmp_path: Path, command: str) -> None:
    output = ["-o", "out.nc"] if command == "solve" else []
    refused(partita(command, "absent.nc", *output), 4, "absent.nc", "does not exist")
    refused(partita(command, ".", *output), 4, "directory")
    refused(partita(command, "a" * 5000, *output), 4, "aaa ...", "does not exist")


@pytest.mark.parametrize(
    ("target", "word"),
    [
        ("absent/levels.nc", "does not exist"),
        ("model.toml/levels.nc", "not a directory"),
        ("/proc/levels.nc", "/proc/levels.nc"),
        ("levels.txt", ".nc"),
        ("levels", ".nc"),
        ("folder.nc", "folder.nc"),
    ],
)
def test_unwritable_target(partita: Command, tmp_path: Path, target: str, word: str) -> None:
    (tmp_path / "model.toml").write_text(MODEL)
    (tmp_path / "folder.nc").mkdir()
    before = sorted(tmp_path.rglob("*"))
    refused(partita("solve", "model.toml", "-o", target), 4, target, word)
    assert sorted(tmp_path.rglob("*")) == before


def test_a_target_is_refused_before_the_work(partita: Command, tmp_path: Path) -> None:
    (tmp_path / "ring.toml").write_text(RING.format(n=20))
    started = time.monotonic()
    refused(partita("solve", "ring.toml", "-o", "absent/levels.nc"), 4)
    assert time.monotonic() - started < 3


def test_the_input_is_not_overwritten(partita: Command, levels: Path) -> None:
    before = levels.read_bytes()
    refused(partita("curves", levels, "-t", "2,5", "-o", levels), 4, "also the input")
    assert levels.read_bytes() == before


def test_a_grid_file_is_not_overwritten(partita: Command, levels: Path, tmp_path: Path) -> None:
    grid = tmp_path / "grid.csv"
    grid.write_text("2\n5\n")
    for option in ("-t", "-b"):
        done = partita("curves", levels, "-t", "3,4", option, "grid.csv", "-o", "grid.csv")
        refused(done, 4, "grid.csv", "also the input")
    assert grid.read_text() == "2\n5\n"


def test_names_that_are_not_utf8(partita: Command, levels: Path, tmp_path: Path) -> None:
    odd = os.fsdecode(b"odd\xff.nc")
    try:
        (tmp_path / odd).write_bytes(levels.read_bytes())
    except OSError:
        pytest.skip("this file system takes UTF-8 names only")
    (tmp_path / "model.toml").write_text(MODEL)
    refused(partita("solve", "model.toml", "-o", odd), 4, "not UTF-8")
    refused(partita("curves", odd, "-t", "2,5"), 4, "not UTF-8")
    refused(partita("curves", levels, "-t", "2,5", "-o", odd[:-3] + ".csv"), 4, "not UTF-8")
    assert len(list(tmp_path.iterdir())) == 2


@pytest.fixture
def full_disk() -> Iterator[Path]:
    """A file system of 64 KiB with 12 KiB left, where this user may mount one."""
    # Not under tmp_path: another pytest that cleans up old directories would trip over the mount.
    disk = Path(tempfile.mkdtemp(prefix="partita-disk-"))
    try:
        mounted = subprocess.run(
            ["mount", "-t", "tmpfs", "-o", "size=64k", "tmpfs", disk], capture_output=True
        )
    except FileNotFoundError:
        pytest.skip("no mount command")
    if mounted.returncode:
        pytest.skip("mounting is not permitted")
    try:
        (disk / "filler").write_bytes(bytes(52 * 1024))
        yield disk
    finally:
        subprocess.run(["umount", disk], check=True)
        disk.rmdir()


def test_full_disk(partita: Command, levels: Path, full_disk: Path) -> None:
    done = partita("curves", levels, "-t", "1:300:9999", "-o", full_disk / "curves.nc")
    refused(done, 4, "curves.nc", "full")
    done = partita("curves", levels, "-t", "1:300:9999", "-o", full_disk / "curves.csv")
    refused(done, 4, "curves.csv", "full")
    done = partita("plot", levels, "-o", full_disk / "picture.png")
    refused(done, 4, "picture.png", "full")
    assert [p.name for p in full_disk.iterdir()] == ["filler"]


@pytest.mark.skipif(not Path("/dev/full").exists(), reason="no /dev/full here")
def test_full_standard_output(partita: Command, levels: Path) -> None:
    with open("/dev/full", "w") as full:
        done = partita(
            "curves",
            levels,
            "-t",
            "2,5",
            capture_output=False,
            stdout=full,
            stderr=subprocess.PIPE,
        )
    done.stdout = ""
    refused(done, 4, os.strerror(errno.ENOSPC).lower())


def test_a_reader_that_stops_early_is_no_fault(levels: Path) -> None:
    line = (
        f"'{command_path()}' curves '{levels}' -t 1:300:9999 | head -n 1; exit ${{PIPESTATUS[0]}}"
    )
    done = subprocess.run(["bash", "-c", line], capture_output=True, text=True)
    assert (done.returncode, done.stderr) == (0, "")
    assert len(done.stdout.splitlines()) == 1
