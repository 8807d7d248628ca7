"""The study file: which data, which model, which parameters. Read whole and checked at once.

Every key of a study file (positions in lists count from 0; paths are relative to the file):

    format = 1                    required
    title = "..."                 default: the file's name
    model                         required: the path of the model file
    window                        "auto" (default): a data set without a range is fitted above the
                                  temperature where the size of a periodic cluster shows in it;
                                  "tell": that temperature is only told; "off": not looked for

    [[data]]     name             required; no two sets share one
                 file             required: a text table in UTF-8; lines that begin with # are
                                  comments
                 quantity         required: "susceptibility", "chi_T", "specific_heat",
                                  "specific_heat_over_T", "magnetization"
                 units            required, and must fit the quantity (below)
                 per              what a mole counts, and of what muB is the moment: "ion"
                                  (default), or "formula", which holds ions_per_formula of them
                 delimiter        "," (default), ";", "tab", "space" (any number of them)
                 header           true (default): the first row names the columns; or false
                 columns          required: temperature, value, uncertainty, field, each the
                                  header of a column or its number from 1; value is required
                 temperature      of all rows, instead of its column
                 field            of all rows, instead of its column; default 0, and
                                  required for a magnetization. Above 0 a susceptibility means
                                  M/B, at 0 the zero-field limit
                 temperature_unit, field_unit    of the columns, or of temperature and field
                                  stated for all rows; default "K" and "T"
                 direction        of the field: "z", for a crystal measured along the model's z.
                                  Left out, a fit of an anisotropic model says what it assumed
                 range            [lowest, highest] temperature to use, in K whatever
                                  the temperature_unit
                 relative_uncertainty, absolute_uncertainty
                                  of all rows (a fraction; or in units) instead of a column;
                                  every set states its uncertainties, or none does

    [parameters] the model's couplings, g, chi0, paramagnetic_fraction, and names of your own
                 that ties use. What is left out is fixed at the model's value, or at 0. Each is
                 a table with the keys start, lower, upper: free, from the model's value where
                                  no start is given, without bounds where none are
                 fixed            its value, or
                 tied             an expression of + - * / ( ), numbers and other parameters
                 unit             of chi0 only: a unit of susceptibility, default "emu/mol"
                 per              of chi0 only: "ion" or "formula", default that of the magnetic
                                  data sets if they agree, else "ion"

Units, in any usual spelling (emu mol-1, J/mol/K, A m^2 mol^-1, μB):

    susceptibility                "m3/mol", "emu/mol", "cm3/mol", "emu/(mol Oe)"
    chi_T                         "m3 K/mol", "emu K/mol", "cm3 K/mol", "emu K/(mol Oe)"
    specific_heat                 "J/(mol K)", "mJ/(mol K)", "R"
    specific_heat_over_T          "J/(mol K2)", "mJ/(mol K2)"
    magnetization                 "A m2/mol", "J/(mol T)", "emu/mol", "muB"
    temperature                   "K", "mK"
    field                         "T", "mT", "Oe", "kOe", "G", "kG"; taken as B, 1 Oe as 10⁻⁴ T

A dimensionless model (energy_unit "1") takes "1" for all of them.

Instead of one model a study may list rivals, to be compared with ``thermo.compare``; see
``thermo.fit.candidates`` for the keys of [[candidate]] and [[instrument]].
"""

from __future__ import annotations

import os
import tomllib
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path

import numpy as np

from thermo.errors import DataError, StudyError, UnavailableError
from thermo.fit.measured import MAGNETIC, Measured, read_measured
from thermo.fit.parameters import CHI0, G, Parameters, read_parameters
from thermo.fit.strict import Section
from thermo.model import read_model
from thermo.model.spin_model import SpinModel

FORMAT = 1
WINDOWS = ("auto", "tell", "off")


@dataclass(frozen=True, eq=False)
class Study:
    """What to fit: a model, data sets (already read and in SI units) and parameters.

    ``window`` is "auto", "tell" or "off"; ``ranged`` names the sets whose range the study states.
    """

    title: str
    source: str
    text: str
    model: SpinModel
    sets: tuple[Measured, ...]
    parameters: Parameters
    window: str = "auto"
    ranged: frozenset[str] = frozenset()

    @property
    def reduced(self) -> bool:
        """Whether the model is dimensionless (energy unit "1") and the data with it."""
        return self.model.energy_unit == "1"

    @property
    def n_points(self) -> int:
        """Number of points that enter the fit."""
        return sum(data.n_points for data in self.sets)

    @property
    def weighted(self) -> bool:
        """Whether the data state their uncertainties."""
        return all(data.uncertainty is not None for data in self.sets)


def read_study(source: str | os.PathLike[str] | Mapping[str, object]) -> Study:
    """Read a study file (TOML), or a mapping of the same shape, with its model and its data.

    Paths in the file are relative to it; those of a mapping, to the working directory; a
    mapping's ``model`` may be a mapping itself or a SpinModel. Raises StudyError, DataError,
    UnitsError or ModelError, one sentence that leads with the file and the path to the key, and
    UnavailableError where the model cannot give what was measured.
    """
    content = load_content(source)
    if "candidate" in content.table:
        raise StudyError(
            f"{content.name}: candidate lists rival models where one fit takes one model; use "
            "compare (the command fit does by itself)"
        )
    return build_study(content)


@dataclass(frozen=True)
class Content:
    """A study's table before it is checked: where it comes from, and the folder of its paths."""

    table: Mapping[str, object]
    name: str
    folder: Path
    text: str


def load_content(source: str | os.PathLike[str] | Mapping[str, object]) -> Content:
    """The table of a study file, or a mapping as it is; StudyError where there is none."""
    if isinstance(source, Mapping):
        return Content(source, "study", Path(), "")
    name, text = os.fspath(source), _load(Path(source))
    try:
        return Content(tomllib.loads(text), name, Path(source).parent, text)
    except (tomllib.TOMLDecodeError, RecursionError) as error:
        raise StudyError(f"{name}: this is not valid TOML ({error}); correct it") from None


def build_study(content: Content) -> Study:
    """The study of one model, checked; errors as for ``read_study``."""
    name, folder = content.name, content.folder
    section = Section(content.table, "", name)
    version = section.raw("format", f"the version of the study format, {FORMAT}")
    if version != FORMAT or isinstance(version, bool):
        raise section.fail("format", f"= {version!r} is not known; this program reads {FORMAT}")
    title = section.text("title", "a title", Path(name).stem)
    raw_model = section.raw("model", "the path of the model file, relative to the study")
    raw_data = section.raw("data", "at least one [[data]] table")
    raw_parameters = section.raw("parameters", "a [parameters] table")
    window = section.word("window", WINDOWS, "auto")
    section.close()

    if isinstance(raw_model, SpinModel):
        model = raw_model
    elif isinstance(raw_model, Mapping):
        model = read_model(raw_model)
    elif isinstance(raw_model, str) and raw_model.strip():
        model = read_model(folder / raw_model)
    else:
        raise section.fail("model", "must be the path of a model file; give one")
    if isinstance(raw_data, Mapping) or not isinstance(raw_data, Sequence) or not raw_data:
        raise section.fail("data", "must be one or more [[data]] tables; give at least one")
    sets = tuple(
        read_measured(Section(item, f"data[{k}]", name), folder, model.energy_unit == "1")
        for k, item in enumerate(raw_data)
    )
    # χ0 counts the moles the data do, unless they differ or its own table says otherwise.
    per = {data.per for data in sets if data.quantity in MAGNETIC}
    parameters = read_parameters(
        Section(raw_parameters, "parameters", name), model, per.pop() if len(per) == 1 else "ion"
    )
    ranged = frozenset(
        data.name for data, item in zip(sets, raw_data, strict=True) if "range" in item
    )
    study = Study(title, name, content.text, model, sets, parameters, window, ranged)
    _check(study)
    return study


def _load(path: Path) -> str:
    try:
        return path.read_text(encoding="utf-8-sig")
    except FileNotFoundError:
        raise StudyError(f"{path}: there is no such study file; check the path") from None
    except UnicodeDecodeError:
        raise StudyError(f"{path}: this is not a UTF-8 text file; is it a study?") from None
    except (OSError, ValueError) as error:
        reason = getattr(error, "strerror", None) or "its name is not valid"
        raise StudyError(f"{path}: the study cannot be read ({reason})") from None


def _check(study: Study) -> None:
    """What can be known to be wrong before anything is solved."""
    name, sets, free = study.source, study.sets, study.parameters.free
    names = [data.name for data in sets]
    for repeated in (n for n in names if names.count(n) > 1):
        raise StudyError(f"{name}: two data sets are called {repeated!r}; rename one of them")
    if not free:
        raise StudyError(
            f"{name}: no parameter is free, so there is nothing to fit; "
            "give at least one a start and bounds instead of a fixed value"
        )
    stated = [data.name for data in sets if data.uncertainty is not None]
    silent = [data.name for data in sets if data.uncertainty is None]
    if stated and silent:
        raise StudyError(
            f"{name}: data set {stated[0]!r} states its uncertainties and {silent[0]!r} does not, "
            "so they cannot be weighed against each other; give both or neither"
        )
    if study.n_points < len(free):
        raise DataError(
            f"{name}: {study.n_points} points are in use for {len(free)} free parameters; "
            "widen the range or fix parameters"
        )
    if not study.weighted:
        for data in sets:
            if not np.any(data.value):
                raise DataError(
                    f"{data.file}: all values are zero, which fixes no scale; "
                    "state an absolute_uncertainty in every data set"
                )
        if study.n_points == len(free):
            raise DataError(
                f"{name}: {study.n_points} points without uncertainties leave none to judge the "
                f"errors of {len(free)} parameters by; give uncertainties or fix a parameter"
            )
    magnetic = [data for data in sets if data.quantity in MAGNETIC]
    felt = [data for data in sets if data.feels_direction]
    if study.model.common_g is None and felt:
        raise UnavailableError(
            f"{name}: data set {felt[0].name!r} needs one g common to all sites and directions, "
            "but the model's g differs; give the model one g, or fit zero-field specific heat only"
        )
    slopes = study.parameters.values(study.parameters.start).slope
    unfelt = {n for n, by in ((G, felt), (CHI0, magnetic)) if not by}
    unfelt |= {p.name for p in study.parameters.all if p.role == "auxiliary"}
    for k, parameter in enumerate(free):
        if not any(slope[k] for n, slope in slopes.items() if n not in unfelt):
            raise StudyError(
                f"{name}: parameters.{parameter.name} is free, but nothing in the data depends "
                "on it; fix it, or add data that do"
            )
