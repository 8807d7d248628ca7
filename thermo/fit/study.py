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
                 columns          required: temperature, value, uncertainty, field, flag, each
                                  the header of a column or its number from 1; value is required
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
                 field_range      [lowest, highest] field to use, in T
                 leave_out        [[from, to], ...] temperatures not to use, in K
                 molar_mass       in g/mol, of what per counts, for units per gram ("emu/g",
                                  "J/(g K)"), and then also
                 mass             in mg, for units of the whole sample ("emu", "emu/Oe", "uJ/K")
                 flags            the flags of rows to use, where columns names a flag column;
                                  left out: rows whose flag is empty or 0
                 sample           a word; parameters named after it (g_A, chi0_A,
                                  paramagnetic_fraction_A, weiss_temperature_A, impurity_g_A,
                                  scale_A) are those of the sets of sample A
                 scale_error      a relative error that all points share (mass, holder): the set's
                                  parameter scale_NAME, started at 1 with that error as its prior
                 relative_uncertainty, absolute_uncertainty
                                  of all rows (a fraction; or in units) instead of a column;
                                  every set states its uncertainties, or none does

    [parameters] the model's couplings, g, chi0, paramagnetic_fraction, what else surrounds the
                 spins (below), and names of your own that ties use. What is left out is fixed at
                 the model's value, or at 0. Each is
                 a table with the keys start, lower, upper: free, from the model's value where
                                  no start is given, without bounds where none are
                 fixed            its value, or
                 tied             an expression of + - * / ( ), numbers and other parameters
                 prior            [value, error]: what is known beforehand of a free or tied
                                  parameter (g from resonance); needs stated uncertainties.
                                  false: not even the usual one (below)
                 spin             of paramagnetic_fraction only: the impurities' spin; left out,
                                  they are free ions of the model's own kinds
                 unit             of chi0 only: a unit of susceptibility, default "emu/mol"
                 per              of chi0 only: "ion" or "formula", default that of the magnetic
                                  data sets if they agree, else "ion"

    [lattice_heat]  adds the lattice to specific heats
                 atoms            required: the fixed number of atoms
                 per              of which mole: "formula" (default) or "ion"

    profile      names of parameters whose profile intervals are wanted in any case
    starts       how many further starts, spread over the bounds, to try in any case; left out,
                 six where the first minimum is doubtful

Parameters of what surrounds the spins; free, without prior and bounds, some have a usual prior:

    weiss_temperature             θ of the impurities, C/(T−θ), in K; usual prior 0 ± 5 K
    impurity_g                    their g, where it is not the common one; usual prior 2.0 ± 0.1
    intercluster_coupling         zJ′, the couplings of one ion to those of other clusters added
                                  up, in the model's energy unit and with its bond_term: these act
                                  as a mean field (above any order only)
    scale_NAME                    multiplies the set or sample of that name; usual prior 1 ± 0.05
    debye_temperature             of [lattice_heat], in K, required with it
    einstein_temperature, einstein_share; einstein_temperature_2, einstein_share_2; ...
                                  modes taken from Debye's: their temperature in K and share of all

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
from dataclasses import dataclass, replace
from pathlib import Path

from thermo.errors import StudyError
from thermo.fit.measured import MAGNETIC, Measured, read_measured
from thermo.fit.parameters import Parameters, read_parameters
from thermo.fit.roles import names_for, scales_for
from thermo.fit.strict import Section
from thermo.fit.study_checks import check_study
from thermo.model import read_model
from thermo.model.spin_model import SpinModel

FORMAT = 1
WINDOWS = ("auto", "tell", "off")


@dataclass(frozen=True, eq=False)
class Study:
    """What to fit: a model, data sets (already read and in SI units) and parameters.

    ``window`` is "auto", "tell" or "off"; ``ranged`` names the sets whose range the study states.
    ``lattice_atoms`` is the number of atoms per magnetic ion whose lattice has heat, 0 for none;
    ``asked`` names the parameters whose profile intervals are asked for, ``starts`` is the number
    of further starts to try in any case (None: only in doubt).
    """

    title: str
    source: str
    text: str
    model: SpinModel
    sets: tuple[Measured, ...]
    parameters: Parameters
    window: str = "auto"
    ranged: frozenset[str] = frozenset()
    lattice_atoms: float = 0.0
    asked: tuple[str, ...] = ()
    starts: int | None = None

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

    @property
    def degrees_of_freedom(self) -> int:
        """Points and priors less free parameters."""
        parameters = self.parameters
        return self.n_points + len(parameters.priors) - len(parameters.free)


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
    lattice = section.raw("lattice_heat", "a table") if section.has("lattice_heat") else None
    asked = section.words("profile", "names of parameters") or ()
    starts = section.count("starts", "a number of further starts", 1000)
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
        Section(raw_parameters, "parameters", name),
        model,
        per.pop() if len(per) == 1 else "ion",
        sets,
    )
    known = parameters.by_name
    sets = tuple(
        replace(data, parameter_names=names_for(data, known), scales=scales_for(data, known))
        for data in sets
    )
    ranged = frozenset(
        data.name for data, item in zip(sets, raw_data, strict=True) if "range" in item
    )
    atoms = 0.0 if lattice is None else _atoms(Section(lattice, "lattice_heat", name), model)
    study = Study(
        title, name, content.text, model, sets, parameters, window, ranged, atoms, asked, starts
    )
    check_study(study)
    return study


def _atoms(section: Section, model: SpinModel) -> float:
    """Atoms per magnetic ion that take part in the lattice's heat."""
    atoms = section.number("atoms", "the number of atoms per ion or formula unit")
    per = section.word("per", ("ion", "formula"), "formula")
    section.close()
    if not 0 < atoms <= 1e6:
        raise section.fail("atoms", f"= {atoms:g} is no number of atoms; give one above zero")
    return atoms / (model.ions_per_formula if per == "formula" else 1.0)


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
