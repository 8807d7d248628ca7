"""The command ``partita`` from model to picture, its start-up, and the package's lazy names."""

from __future__ import annotations

import csv
import importlib.metadata
import io
import math
import os
import re
import subprocess
import sys
import time
from pathlib import Path

import numpy as np
import pytest

import thermo
from tests.conftest import Command, command_path
from tests.test_bad_input import CHI, MODEL, RING, STUDY
from thermo import cli, errors
from thermo.arguments import parse_grid

ROOT = Path(__file__).resolve().parent.parent
DEMO = ROOT / "data_demo"
GAS_CONSTANT = 8.31446261815324  # J/(mol K), exact in the SI since 2019 (N_A k_B; CODATA 2022)
HEAVY = ("numpy", "scipy", "numba", "xarray", "netCDF4", "pandas", "matplotlib", "pydantic", "rich")


def table(text: str) -> dict[str, list[float]]:
    """Columns of a CSV by the first word of their header."""
    lines = [line for line in text.splitlines() if not line.startswith("#")]
    rows = list(csv.reader(io.StringIO("\n".join(lines))))
    names = [re.split(r"[^A-Za-z_]", name)[0] for name in rows[0]]
    return {name: [float(row[k]) for row in rows[1:]] for k, name in enumerate(names)}


@pytest.fixture(scope="module")
def folder(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """A directory with a model, its levels, its curves and a study."""
    folder = tmp_path_factory.mktemp("pair")
    (folder / "model.toml").write_text(MODEL)
    (folder / "study.toml").write_text(STUDY)
    (folder / "chi.csv").write_text(CHI)
    for line in ("solve model.toml -o levels.nc", "curves levels.nc -t 2:50:25 -o curves.nc"):
        subprocess.run([command_path(), *line.split()], cwd=folder, check=True, capture_output=True)
    return folder


# ---------------------------------------------------------------- start-up


def test_help_within_half_a_second(partita: Command) -> None:
    took = []
    for _ in range(5):
        started = time.perf_counter()
        assert partita("--help").returncode == 0
        took.append(time.perf_counter() - started)
    assert min(took) < 0.5


@pytest.mark.parametrize("code", ["import thermo", "import thermo.cli"])
def test_start_up_loads_nothing_heavy(code: str) -> None:
    done = subprocess.run(
        [sys.executable, "-c", f"{code}, sys; print(*sys.modules)"],
        capture_output=True,
        text=True,
        check=True,
    )
    assert not set(HEAVY) & set(done.stdout.split())


def test_import_is_quick() -> None:
    line = "import time; t = time.perf_counter(); import thermo; print(time.perf_counter() - t)"
    took = [
        float(subprocess.run([sys.executable, "-c", line], capture_output=True).stdout)
        for _ in range(5)
    ]
    assert min(took) < 0.1


# ---------------------------------------------------------------- the package's names


def test_every_public_name_loads() -> None:
    assert set(thermo.__all__) <= set(dir(thermo))
    for name in thermo.__all__:
        assert getattr(thermo, name) is not None
        assert name == "errors" or callable(getattr(thermo, name))
    with pytest.raises(AttributeError, match="melt"):
        _ = thermo.melt


def test_modules_answer_as_attributes() -> None:
    code = "import thermo, sys; assert 'thermo.model' not in sys.modules; "
    code += (
        "print(thermo.model.reading.__doc__); thermo.units.BOLTZMANN; help(thermo.model.reading)"
    )
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)
    assert "Every key of a model file" in done.stdout


@pytest.mark.parametrize(
    "first", ["import thermo.fit", "from thermo.fit import read_study", "thermo.read_study"]
)
def test_fit_is_the_function_and_the_package(first: str) -> None:
    code = (
        f"import thermo; {first}; import thermo.fit as package; import inspect; "
        "assert callable(thermo.fit) and callable(package.fit) and package.read_study; "
        "assert 'study' in inspect.signature(package.fit).parameters"
    )
    subprocess.run([sys.executable, "-c", code], check=True)


def test_one_version(partita: Command) -> None:
    assert thermo.__version__ == importlib.metadata.version("partita")
    assert partita("--version").stdout == f"partita {thermo.__version__}\n"


# ---------------------------------------------------------------- help


def test_help_documents_every_exit_code(partita: Command) -> None:
    text = partita("--help").stdout
    family = [e for e in vars(errors).values() if isinstance(e, type)]
    codes = {e.exit_code for e in family if issubclass(e, errors.PartitaError)}
    for code in codes | {0, 2, 129, 130, 143}:
        assert re.search(rf"^ +{code} +\w", text, re.MULTILINE), code


@pytest.mark.parametrize("width", [80, 120])
@pytest.mark.parametrize(
    "command", ["", "survey", "solve", "curves", "correlations", "fit", "plot", "export"]
)
def test_help_fits_the_terminal(partita: Command, command: str, width: int) -> None:
    environment = {**os.environ, "COLUMNS": str(width)}
    done = partita(*command.split(), "--help", env=environment)
    assert done.returncode == 0
    assert max(map(len, done.stdout.splitlines())) <= width
    assert "..." not in done.stdout.replace("[OPTIONS] COMMAND [ARGS]...", "")


def test_the_bare_command_shows_its_help(partita: Command) -> None:
    assert partita().stdout == partita("--help").stdout


# ---------------------------------------------------------------- from model to picture


def test_survey(partita: Command, folder: Path) -> None:
    done = partita("survey", "model.toml", cwd=folder)
    assert (done.returncode, done.stderr) == (0, "")
    assert "pair" in done.stdout
    assert "J" in done.stdout


def test_solve_is_quiet_and_overwrites(partita: Command, folder: Path, tmp_path: Path) -> None:
    (tmp_path / "levels.nc").write_text("older")
    done = partita("solve", folder / "model.toml", "-o", "levels.nc", "--threads", "1")
    assert (done.returncode, done.stdout, done.stderr) == (0, "", "")
    energy = np.sort(thermo.read(tmp_path / "levels.nc", "levels")["energy"].values)
    # Singlet at -3J/4, triplet at J/4 (two spins 1/2, H = J S.S).
    assert energy == pytest.approx([-7.5, 2.5], abs=1e-12)


def test_curves_to_standard_output(partita: Command, folder: Path, tmp_path: Path) -> None:
    done = partita("curves", "levels.nc", "-t", "2,5,10", cwd=folder)
    assert (done.returncode, done.stderr) == (0, "")
    found = table(done.stdout)
    assert found["temperature"] == [2, 5, 10]
    assert partita("curves", folder / "levels.nc", "-t", "2,5,10", "-o", "c.nc").returncode == 0
    exact = thermo.read(tmp_path / "c.nc", "curves")["specific_heat"].values[:, 0]
    assert found["specific_heat"] == pytest.approx(exact, rel=5e-7)  # seven digits
    for temperature, heat in zip(found["temperature"], exact, strict=True):
        # A level with weight 1 and one with weight 3 at the gap J = 10 K (Schottky).
        x = 10 / temperature
        z = 1 + 3 * math.exp(-x)
        of_the_pair = GAS_CONSTANT * x * x * 3 * math.exp(-x) / z**2
        assert heat == pytest.approx(of_the_pair / 2, rel=1e-8)  # per mole of ions


@pytest.mark.parametrize("suffix", ["nc", "csv"])
def test_curves_to_a_file(partita: Command, folder: Path, tmp_path: Path, suffix: str) -> None:
    arguments = ["-t", "log 1:100:7", "-b", "0:7:3", "--units", "molar-cgs"]
    done = partita("curves", folder / "levels.nc", *arguments, "-o", f"curves.{suffix}")
    assert (done.returncode, done.stdout, done.stderr) == (0, "", "")
    written = tmp_path / f"curves.{suffix}"
    if suffix == "nc":
        found = thermo.read(written, "curves")
        assert dict(found.sizes) == {"temperature": 7, "field": 3}
        assert found["temperature"].values == pytest.approx(np.geomspace(1, 100, 7))
    else:
        found = table(written.read_text())
        assert len(found["temperature"]) == 21
        assert "emu" in written.read_text()


def test_temperatures_left_out_are_told(partita: Command, folder: Path) -> None:
    done = partita("curves", "levels.nc", cwd=folder)
    assert done.returncode == 0
    assert done.stderr.startswith("partita: note: ")
    assert "--temperature" in done.stderr
    values = table(done.stdout)["temperature"]
    assert values[0] < 0.2  # well below the gap of 10 K
    assert values[-1] > 50  # well above it


def test_curves_without_a_moment_are_told(partita: Command, tmp_path: Path) -> None:
    (tmp_path / "model.toml").write_text(MODEL.replace("g = 2.1", "g = [2.0, 2.1, 2.3]", 1))
    assert partita("solve", "model.toml", "-o", "levels.nc").returncode == 0
    done = partita("curves", "levels.nc", "-t", "2,5")
    assert done.returncode == 0
    assert done.stderr.startswith("partita: note: no susceptibility")
    assert set(table(done.stdout)) >= {"specific_heat", "entropy"}
    assert "susceptibility" not in table(done.stdout)
    refusal = partita("curves", "levels.nc", "-t", "2,5", "-b", "0,1")
    assert (refusal.returncode, refusal.stdout) == (3, "")
    assert "g differs" in refusal.stderr


def test_temperatures_from_a_file(partita: Command, folder: Path, tmp_path: Path) -> None:
    (tmp_path / "grid.txt").write_text("# K\n2\n\n5.5\n")
    done = partita("curves", folder / "levels.nc", "-t", "grid.txt")
    assert table(done.stdout)["temperature"] == [2, 5.5]


@pytest.mark.parametrize("file", ["levels.nc", "curves.nc"])
def test_export(partita: Command, folder: Path, tmp_path: Path, file: str) -> None:
    shown = partita("export", folder / file)
    assert (shown.returncode, shown.stderr) == (0, "")
    assert partita("export", folder / file, "-o", "table.csv").returncode == 0
    assert (tmp_path / "table.csv").read_text() == shown.stdout


@pytest.mark.parametrize(
    ("suffix", "start"), [("png", b"\x89PNG"), ("svg", b"<?xml"), ("pdf", b"%PDF")]
)
def test_plot(partita: Command, folder: Path, tmp_path: Path, suffix: str, start: bytes) -> None:
    done = partita("plot", folder / "curves.nc", "-o", f"picture.{suffix}")
    assert (done.returncode, done.stdout, done.stderr) == (0, "", "")
    assert (tmp_path / f"picture.{suffix}").read_bytes().startswith(start)


def test_plot_scales(partita: Command, folder: Path, tmp_path: Path) -> None:
    for scale in ("linear", "log"):
        done = partita("plot", folder / "curves.nc", "--scale", scale, "-o", f"{scale}.svg")
        assert (done.returncode, done.stderr) == (0, "")
    linear, log = ((tmp_path / f"{s}.svg").read_text() for s in ("linear", "log"))
    assert linear != log
    done = partita("plot", folder / "curves.nc", "--scale", "square")
    assert done.returncode == 2
    assert "--scale" in done.stderr


def test_export_of_chosen_columns(partita: Command, folder: Path) -> None:
    done = partita("export", folder / "curves.nc", "--what", "specific_heat,chi_T")
    assert list(table(done.stdout)) == ["temperature", "field", "specific_heat", "chi_T"]


def test_plot_names_its_picture(partita: Command, folder: Path, tmp_path: Path) -> None:
    assert partita("plot", folder / "curves.nc").returncode == 0
    assert [p.name for p in tmp_path.iterdir()] == ["curves.png"]


def test_fit(partita: Command, folder: Path, tmp_path: Path) -> None:
    study = folder / "study.toml"
    done = partita("fit", study, "-o", "fit.nc", "--picture", "fit.png")
    assert done.returncode == 0
    # Four invented points need not lie on any curve: the note says so.
    assert all(line.startswith("partita: note: ") for line in done.stderr.splitlines())
    assert re.search(r"\bJ\b", done.stdout)
    assert max(map(len, done.stdout.splitlines())) <= 100
    assert sorted(p.name for p in tmp_path.iterdir()) == ["fit.nc", "fit.png"]
    assert thermo.read(tmp_path / "fit.nc").attrs["content"] == "fit"
    assert partita("export", "fit.nc").returncode == 0
    assert partita("plot", "fit.nc", "-o", "again.png").returncode == 0


def test_notes_on_a_model_are_told(partita: Command, tmp_path: Path) -> None:
    (tmp_path / "two.toml").write_text(RING.format(n=2))
    done = partita("solve", "two.toml", "-o", "levels.nc")
    # Two sites in a ring are joined twice, which changes the physics: told, once.
    assert done.returncode == 0
    assert done.stderr.count("partita: note: ") == len(done.stderr.splitlines()) >= 1


def test_demo_within_ten_seconds(partita: Command, tmp_path: Path) -> None:
    """The second run; the first has to compile the kernels and may take 90 s."""
    arguments = ["fit", DEMO / "study.toml", "--picture", "fit.png"]
    fresh = {**os.environ, "XDG_CACHE_HOME": str(tmp_path / "cache")}
    fresh.pop("NUMBA_CACHE_DIR", None)
    for limit in (90, 10):
        started = time.perf_counter()
        assert partita(*arguments, env=fresh).returncode == 0
        assert time.perf_counter() - started < limit
    assert list((tmp_path / "cache").rglob("*.nbi"))  # the kernels were compiled here


# ---------------------------------------------------------------- the streams


@pytest.mark.parametrize("closed", ["2>&-", ">&- 2>&-", "<&- >&- 2>&-"])
def test_closed_streams(folder: Path, tmp_path: Path, closed: str) -> None:
    line = f"'{command_path()}' solve '{folder}/model.toml' -o levels.nc {closed}"
    assert subprocess.run(["sh", "-c", line], cwd=tmp_path).returncode == 0
    assert thermo.read(tmp_path / "levels.nc").attrs["content"] == "levels"
    line = f"'{command_path()}' solve absent.toml -o levels.nc {closed}"
    assert subprocess.run(["sh", "-c", line], cwd=tmp_path).returncode == 4


def test_a_terminal_of_few_characters(partita: Command, folder: Path) -> None:
    environment = {**os.environ, "PYTHONIOENCODING": "ascii"}
    done = partita("survey", folder / "model.toml", env=environment)
    assert (done.returncode, done.stderr) == (0, "")
    assert "1 ? 1 real" in done.stdout


# ---------------------------------------------------------------- faults


def test_an_unexpected_fault_is_one_sentence(
    monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str], tmp_path: Path
) -> None:
    def broken(source: object) -> None:
        raise ZeroDivisionError("on\ntwo lines")

    (tmp_path / "model.toml").write_text(MODEL)
    monkeypatch.setattr(thermo, "read_model", broken)
    arguments = ["solve", str(tmp_path / "model.toml"), "-o", str(tmp_path / "levels.nc")]
    assert cli.run(arguments) == 1
    told = capsys.readouterr().err
    assert told.count("\n") == 1
    assert "ZeroDivisionError: on two lines" in told
    assert "report" in told
    monkeypatch.setenv("PARTITA_DEBUG", "1")
    assert cli.run(arguments) == 1
    assert "Traceback" in capsys.readouterr().err


@pytest.mark.parametrize(
    ("fault", "code"),
    [
        (MemoryError(), 5),
        (OSError(28, "No space left on device", "x.nc"), 4),
        (KeyboardInterrupt(), 130),
        (errors.SpectrumError("the trace is off"), 6),
    ],
)
def test_exit_codes(
    monkeypatch: pytest.MonkeyPatch,
    capsys: pytest.CaptureFixture[str],
    tmp_path: Path,
    fault: BaseException,
    code: int,
) -> None:
    def broken(*_: object, **__: object) -> None:
        raise fault

    (tmp_path / "model.toml").write_text(MODEL)
    monkeypatch.setattr(thermo, "solve", broken)
    arguments = ["solve", str(tmp_path / "model.toml"), "-o", str(tmp_path / "levels.nc")]
    assert cli.run(arguments) == code
    told = capsys.readouterr().err
    assert told.startswith("partita: ")
    assert told.count("\n") == 1
    assert [p.name for p in tmp_path.iterdir()] == ["model.toml"]


# ---------------------------------------------------------------- what the user types


@pytest.mark.parametrize(
    ("text", "values"),
    [
        ("2:10:5", [2, 4, 6, 8, 10]),
        ("log 0.1:1000:5", [0.1, 1, 10, 100, 1000]),
        ("LOG: 1 : 100 : 3", [1, 10, 100]),
        ("7:7:1", [7]),
        ("2, 5 ,1e1", [2, 5, 10]),
        ("4.2", [4.2]),
    ],
)
def test_grid(text: str, values: list[float]) -> None:
    assert parse_grid(text, "temperature") == pytest.approx(values)


def test_fields_may_be_negative() -> None:
    assert parse_grid("-5:5:3", "field") == pytest.approx([-5, 0, 5])
