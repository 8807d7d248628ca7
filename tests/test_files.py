"""Datasets and files: built, checked, written whole or not at all, read back or refused."""

from __future__ import annotations

import os
import subprocess
import tempfile
import warnings
from collections.abc import Iterator
from pathlib import Path

import netCDF4
import numpy as np
import pytest
import xarray as xr

from thermo import storage, units, variables
from thermo.errors import FileFormatError, UnitsError

MODEL = {
    "model_text": 'format = 1\ntitle = "made-up dimer"\n',
    "model_digest": "0" * 64,
    "model_couplings": '{"J": 100.0}',
    "energy_unit": "K",
    "bond_term": "+J S.S",
    "title": "made-up dimer",
    "n_sites": 2,
    "ions_per_formula": 2.0,
}


def dimer_levels() -> xr.Dataset:
    """Two spins ½ with J = 100 K: a singlet at −75 K, a triplet at 25 K."""
    return variables.build_levels(
        {
            "energy": [-75.0, 25.0],
            "weight": [1, 3],
            "total_spin": [0.0, 1.0],
            "magnetic_number": [np.nan, np.nan],
            "vector": [-1, -1],
            "sector": [0, 0],
        },
        {"dimension": [2], "multiplicity": [1], "magnetic_number": [0], "real": [1]},
        MODEL | {"method": "full", "resolved": "total_spin", "seed": -1},
    )


def dimer_curves(
    system: str = "molar-si", fields: tuple[float, ...] = (0.0, 1.0), errors: bool = False
) -> xr.Dataset:
    """Closed form of the dimer at B = 0, repeated for every field; only its layout matters."""
    t = np.linspace(5.0, 300.0, 60)
    x = 100.0 / t
    chi = units.CURIE_EMU * 4 / (t * (3 + np.exp(x)))
    heat = units.R * 3 * x**2 * np.exp(x) / (3 + np.exp(x)) ** 2 / 2
    entropy = units.R / 2 * (np.log(1 + 3 * np.exp(-x)) + 3 * x / (3 + np.exp(x)))
    scale = units.CHI_SI_PER_EMU if system == "molar-si" else 1.0
    shape = (t.size, len(fields))
    columns = {
        "specific_heat": heat,
        "entropy": entropy,
        "susceptibility": chi * scale,
    }
    values = {k: np.broadcast_to(v[:, None], shape) for k, v in columns.items()}
    values["magnetization"] = values["susceptibility"] * np.array(fields) * 0.8
    wrong = {"susceptibility": 0.01 * values["susceptibility"]} if errors else None
    attrs = MODEL | {"per": "ion", "method": "full"}
    return variables.build_curves(t, fields, values, system, attrs, wrong)


def dimer_fit() -> xr.Dataset:
    """An invented fit of two data sets, four points in all."""
    return variables.build_fit(
        {
            "parameter_name": ["J", "g", "rho"],
            "parameter_units": ["K", "1", "1"],
            "parameter_tie": ["", "", ""],
            "parameter_role": [1, 1, 0],
            "value": [100.3, 2.11, 0.0],
            "standard_error": [0.4, 0.003, np.nan],
            "start": [80.0, 2.0, 0.0],
            "lower_bound": [0.0, 1.5, -np.inf],
            "upper_bound": [np.inf, 3.0, np.inf],
            "at_bound": [0, 0, 0],
            "correlation": [[1.0, 0.4, np.nan], [0.4, 1.0, np.nan], [np.nan] * 3],
            "temperature": [10.0, 20.0, 30.0, 10.0],
            "field": [0.1, 0.1, 0.1, 0.0],
            "observed": [1.0e-3, 2.0e-3, 1.5e-3, 0.4],
            "uncertainty": [1e-5, 1e-5, 1e-5, 0.01],
            "predicted": [1.01e-3, 1.99e-3, 1.5e-3, 0.41],
            "residual": [-1e-5, 1e-5, 0.0, -0.01],
            "point_dataset": [0, 0, 0, 1],
            "dataset_name": ["chi", "heat"],
            "dataset_quantity": ["susceptibility", "specific_heat"],
            "dataset_units": ["emu/mol", "J/(mol K)"],
            "dataset_per": ["ion", "formula"],
            "dataset_chi_square": [2.0, 1.0],
            "chi_square": 3.0,
            "reduced_chi_square": 1.5,
            "degrees_of_freedom": 2,
            "evaluations": 7,
            "converged": 1,
        },
        {"energy_unit": "K", "title": "made-up fit"},
    )


DATASETS = {
    "levels": dimer_levels,
    "curves": lambda: dimer_curves(errors=True),
    "fit": dimer_fit,
}


@pytest.mark.parametrize("kind", list(DATASETS))
def test_written_file_reads_back_the_same(kind: str, tmp_path: Path) -> None:
    dataset = DATASETS[kind]()
    path = tmp_path / "x.nc"
    storage.write_dataset(dataset, path)
    back = storage.read_dataset(path, kind)
    assert set(back.variables) == set(dataset.variables)
    assert set(back.coords) == set(dataset.coords)
    for name in dataset.variables:
        np.testing.assert_array_equal(back[name].values, dataset[name].values)
        assert back[name].attrs.get("units") == dataset[name].attrs.get("units")
    assert back.attrs.keys() == dataset.attrs.keys()
    assert os.listdir(tmp_path) == ["x.nc"]
    # and what was read can be written again
    storage.write_dataset(back, path)
    assert storage.read_dataset(path).attrs["content"] == kind


@pytest.mark.parametrize("kind", list(DATASETS))
@pytest.mark.filterwarnings("ignore")  # the checker's own and its libraries'
def test_cf_checker_finds_nothing(
    kind: str, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    import requests

    def no_network(*_: object, **__: object) -> None:
        raise AssertionError("the checker reached for the network")

    monkeypatch.setattr(requests.Session, "request", no_network)
    from compliance_checker.runner import CheckSuite

    path = tmp_path / f"{kind}.nc"
    storage.write_dataset(DATASETS[kind](), path)
    CheckSuite.load_all_available_checkers()
    suite = CheckSuite()
    source = suite.load_dataset(str(path))
    try:
        scores, broken = suite.run_all(source, ["cf:1.11"])["cf:1.11"]
    finally:
        source.close()
    found = [
        f"weight {result.weight}: {message}"
        for result in scores
        if result.value is not True and result.value[0] < result.value[1]
        for message in result.msgs
    ]
    assert not broken
    assert not found, "\n".join(found)


def test_units_are_udunits() -> None:
    cf_units = pytest.importorskip("cf_units")
    for dataset in (dimer_levels(), dimer_curves(), dimer_curves(errors=True), dimer_fit()):
        for name, variable in dataset.variables.items():
            if "units" in variable.attrs:
                cf_units.Unit(variable.attrs["units"]), name
    for energy in units.ENERGY_UNITS:
        attrs = {"energy_unit": energy, "units_system": "reduced"}
        for variable in variables.REGISTRY["curves"].values():
            cf_units.Unit(variables.units_of(variable, attrs))


def test_cgs_curves_lie_on_disk_in_si(tmp_path: Path) -> None:
    cgs = dimer_curves("molar-cgs")
    assert cgs["susceptibility"].attrs["units"] == "emu mol-1"
    storage.write_dataset(cgs, tmp_path / "c.nc")
    back = storage.read_dataset(tmp_path / "c.nc", "curves")
    assert back.attrs["units_system"] == "molar-si"
    assert back["susceptibility"].attrs["units"] == "m3 mol-1"
    assert back["magnetization"].attrs["units"] == "A m2 mol-1"
    ratio = back["susceptibility"].values / cgs["susceptibility"].values
    np.testing.assert_allclose(ratio, 4e-6 * np.pi, rtol=1e-14)
    again = variables.convert_curves(back, "molar-cgs")
    np.testing.assert_allclose(again["magnetization"], cgs["magnetization"], rtol=1e-14)
    assert back["susceptibility"].attrs["units"] == "m3 mol-1"  # the input is left alone
    with pytest.raises(UnitsError, match="cannot become reduced"):
        variables.convert_curves(back, "reduced")


def test_standard_errors_are_named_and_converted() -> None:
    si = dimer_curves(errors=True)
    assert si["susceptibility"].attrs["ancillary_variables"] == "susceptibility_standard_error"
    cgs = variables.convert_curves(si, "molar-cgs")
    error = cgs["susceptibility_standard_error"]
    assert error.attrs["units"] == "emu mol-1"
    np.testing.assert_allclose(error, 0.01 * cgs["susceptibility"], rtol=1e-13)


def test_attributes_of_a_source_file_do_not_leak() -> None:
    levels = dimer_levels()
    attrs = {**levels.attrs, "per": "formula"}
    curves = variables.build_curves([1.0], [0.0], {"entropy": [[1.0]]}, "molar-si", attrs)
    assert curves.attrs["content"] == "curves"
    assert curves.attrs["title"] == "Thermodynamics of a spin cluster: made-up dimer"
    assert curves.attrs["history"].count("\n") == 1
    assert "SI" in curves.attrs["comment"]
    assert "formula units" in curves["entropy"].attrs["comment"]


@pytest.mark.parametrize("kind", list(DATASETS))
def test_further_attributes_are_kept(kind: str, tmp_path: Path) -> None:
    further = {"field_direction": "z", "cautions": "", "made_by": "Ångström", "spectra_solved": 3}
    source = DATASETS[kind]()
    dataset = variables._build(
        kind, {n: v.values for n, v in source.variables.items()}, source.attrs | further
    )
    storage.write_dataset(dataset, tmp_path / "x.nc")
    back = storage.read_dataset(tmp_path / "x.nc", kind)
    assert {name: back.attrs[name] for name in further} == further


@pytest.mark.parametrize(
    ("change", "says"),
    [
        ({"energy": [np.nan, 1.0]}, "energy holds values that are not finite"),
        ({"weight": [1.0, 2.0, 3.0]}, "do not fit together"),
        ({"energy": [[1.0], [2.0]]}, "do not fit together"),
        ({"vector": [0.5, 1.0]}, "vector must hold whole numbers"),
        ({"energy": ["a", "b"]}, "not numbers"),
        ({"colour": [1, 2]}, "no variable named 'colour'"),
    ],
)
def test_wrong_levels_are_refused(change: dict[str, object], says: str) -> None:
    good = dimer_levels()
    arrays = {n: good[n].values for n in good.variables if good[n].dims == ("level",)}
    blocks = {n: good[n].values for n in good.variables if good[n].dims == ("block",)}
    with pytest.raises(FileFormatError, match=says):
        variables.build_levels({**arrays, **change}, blocks, good.attrs)


@pytest.mark.parametrize("value", [None, True, {"a": 1}, [1, 2]])
def test_attributes_netcdf_cannot_hold_are_refused(value: object) -> None:
    with pytest.raises(FileFormatError, match="text and numbers only"):
        variables.build_curves(
            [1.0], [0.0], {}, "molar-si", {"energy_unit": "K", "per": "ion", "x": value}
        )


@pytest.mark.parametrize("axis", [[], [2.0, 1.0], [1.0, 1.0], [0.0, 1.0], [-1.0, 1.0]])
def test_wrong_temperature_axis_is_refused(axis: list[float]) -> None:
    with pytest.raises(FileFormatError, match="variable temperature"):
        variables.build_curves(axis, [0.0], {}, "molar-si", {"energy_unit": "K", "per": "ion"})


def damage_attribute(path: Path) -> None:
    with netCDF4.Dataset(path, "a") as file:
        file.delncattr("model_digest")


def damage_units(path: Path) -> None:
    with netCDF4.Dataset(path, "a") as file:
        file["energy"].units = "meV"


def damage_values(path: Path) -> None:
    with netCDF4.Dataset(path, "a") as file:
        file["energy"][0] = np.inf


def damage_length(path: Path) -> None:
    path.write_bytes(path.read_bytes()[:-200])


def damage_start(path: Path) -> None:
    path.write_bytes(path.read_bytes()[:100])


def replace_by_text(path: Path) -> None:
    path.write_text("temperature,chi\n1,2\n")


def replace_by_nothing(path: Path) -> None:
    path.write_bytes(b"")


def replace_by_foreign(path: Path) -> None:
    path.unlink()
    with netCDF4.Dataset(path, "w") as file:
        file.createDimension("time", 2)
        file.createVariable("energy", "f8", ("time",))[:] = [1.0, 2.0]


def replace_by_curves(path: Path) -> None:
    storage.write_dataset(dimer_curves(), path)


def remove(path: Path) -> None:
    path.unlink()


def replace_by_directory(path: Path) -> None:
    path.unlink()
    path.mkdir()


@pytest.mark.parametrize(
    ("damage", "says"),
    [
        (damage_attribute, "attribute model_digest is missing"),
        (damage_units, "energy is in 'meV'; it needs 'K'"),
        (damage_values, "not finite"),
        (damage_length, "damaged or cut short"),
        (damage_start, "damaged or cut short"),
        (replace_by_text, "is not a Partita levels file: it is not netCDF"),
        (replace_by_nothing, "is not a Partita levels file: it is not netCDF"),
        (replace_by_foreign, "is not a Partita levels file: it was written by something else"),
        (replace_by_curves, "is not a Partita levels file: it holds curves"),
        (remove, "does not exist"),
        (replace_by_directory, "is a directory"),
    ],
)
def test_damaged_or_foreign_file_is_one_sentence(damage: object, says: str, tmp_path: Path) -> None:
    path = tmp_path / "x.nc"
    storage.write_dataset(dimer_levels(), path)
    damage(path)  # type: ignore[operator]
    with pytest.raises(FileFormatError, match=says) as caught:
        storage.read_dataset(path, "levels")
    assert str(path) in str(caught.value)
    assert "\n" not in str(caught.value)


def test_interrupted_write_leaves_the_old_file(tmp_path: Path) -> None:
    target = tmp_path / "table.csv"
    target.write_text("old")

    def half_way() -> None:
        with storage.atomic_path(target) as temporary:
            temporary.write_text("half")
            raise KeyboardInterrupt

    with pytest.raises(KeyboardInterrupt):
        half_way()
    assert target.read_text() == "old"
    assert os.listdir(tmp_path) == ["table.csv"]


def test_interrupt_while_writing_a_dataset(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    def interrupted(*_: object) -> None:
        raise KeyboardInterrupt

    monkeypatch.setattr(os, "fsync", interrupted)
    with pytest.raises(KeyboardInterrupt):
        storage.write_dataset(dimer_levels(), tmp_path / "x.nc")
    assert os.listdir(tmp_path) == []


def test_target_keeps_its_mode_and_links_are_followed(tmp_path: Path) -> None:
    real, link = tmp_path / "real.csv", tmp_path / "link.csv"
    real.write_text("old")
    real.chmod(0o640)
    link.symlink_to(real)
    with storage.atomic_path(link) as temporary:
        assert temporary.suffix == ".csv"
        temporary.write_text("new")
    assert link.is_symlink()
    assert real.read_text() == "new"
    assert real.stat().st_mode & 0o777 == 0o640


@pytest.mark.parametrize(
    ("target", "says"),
    [
        ("no/such/x.nc", "its directory does not exist; create it first"),
        ("", "it is a directory"),
        ("file/x.nc", "its directory is not a directory"),
        ("a" * 300 + ".nc", "the name is too long"),
    ],
)
def test_unwritable_target_is_one_sentence(target: str, says: str, tmp_path: Path) -> None:
    (tmp_path / "file").write_text("")
    with pytest.raises(FileFormatError, match=says):
        storage.write_dataset(dimer_levels(), tmp_path / target)
    assert os.listdir(tmp_path) == ["file"]


@pytest.mark.skipif(os.geteuid() == 0, reason="root may write anywhere")
def test_forbidden_directory(tmp_path: Path) -> None:
    (tmp_path / "locked").mkdir(mode=0o500)
    with pytest.raises(FileFormatError, match="permission is denied"):
        storage.write_dataset(dimer_levels(), tmp_path / "locked" / "x.nc")


@pytest.mark.skipif(not Path("/dev/full").exists(), reason="no /dev/full here")
def test_full_device() -> None:
    with pytest.raises(FileFormatError, match="the disk is full"):
        storage.write_dataset(dimer_levels(), "/dev/full")
    assert Path("/dev/full").is_char_device()


@pytest.fixture(params=["4k", "64k", "128k"])
def tiny_disk(request: pytest.FixtureRequest) -> Iterator[Path]:
    # Outside pytest's own folders: another run may clear those while this is mounted.
    place = Path(tempfile.mkdtemp(prefix="tiny-disk-"))
    size = request.param
    made = subprocess.run(
        ["mount", "-t", "tmpfs", "-o", f"size={size}", "tmpfs", str(place)], capture_output=True
    )
    if made.returncode:
        place.rmdir()
        pytest.skip("mounting a small disk needs root")
    yield place
    subprocess.run(["umount", "--lazy", str(place)], check=True)
    place.rmdir()


def test_full_disk_leaves_nothing_behind(tiny_disk: Path) -> None:
    count = 20_000
    noise = np.random.default_rng(1).normal(size=count)  # does not compress
    ones = np.ones(count)
    big = variables.build_levels(
        {
            "energy": noise, "weight": ones, "total_spin": ones, "magnetic_number": ones,
            "vector": -ones, "sector": 0 * ones,
        },
        {"dimension": [count], "multiplicity": [1], "magnetic_number": [0], "real": [1]},
        dimer_levels().attrs,
    )  # fmt: skip
    target = tiny_disk / "x.nc"
    with pytest.raises(FileFormatError, match="the disk is full; free some space"):
        storage.write_dataset(big, target)
    assert os.listdir(tiny_disk) == []
    state = os.statvfs(tiny_disk)
    assert state.f_bavail >= state.f_blocks - 1  # the space is given back as well


def test_no_warning_on_the_way(tmp_path: Path) -> None:
    with warnings.catch_warnings():
        warnings.simplefilter("error")
        storage.write_dataset(dimer_fit(), tmp_path / "f.nc")
        storage.read_dataset(tmp_path / "f.nc", "fit")
