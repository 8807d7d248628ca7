"""What the parameters of a fit can be, by name: their roles, units, limits and usual priors.

A role's parameter is called like the role; ``_SAMPLE`` behind it makes it that of one sample
(``sample`` of its data sets), ``scale_SET`` is that of one data set.
"""

from __future__ import annotations

import math
import re
from collections.abc import Iterator, Mapping, Sequence

from thermo.errors import StudyError
from thermo.fit.measured import MAGNETIC, Measured
from thermo.fit.strict import Section
from thermo.model.spin_model import SpinModel

G, CHI0, FRACTION = "g", "chi0", "paramagnetic_fraction"
WEISS, IMPURITY_G = "weiss_temperature", "impurity_g"
INTERCLUSTER = "intercluster_coupling"
DEBYE, EINSTEIN, EINSTEIN_SHARE = "debye_temperature", "einstein_temperature", "einstein_share"
SCALE = "scale"
#: Roles every fit has, fixed where a study does not name them.
NUISANCE = (G, CHI0, FRACTION)
#: Roles that may differ between samples.
OF_SAMPLE = (G, CHI0, FRACTION, WEISS, IMPURITY_G)
#: Roles that play a part where a study names them.
OPTIONAL = (WEISS, IMPURITY_G, INTERCLUSTER, DEBYE, EINSTEIN, EINSTEIN_SHARE)
LATTICE = (DEBYE, EINSTEIN, EINSTEIN_SHARE)

_EINSTEIN = re.compile(rf"({EINSTEIN}|{EINSTEIN_SHARE})(_[2-9])?")
# θ must stay below every temperature measured: C/(T−θ).
_BELOW = 0.95
_UNITS = {WEISS: "K", DEBYE: "K", EINSTEIN: "K"}
_NATURAL = {IMPURITY_G: 2.0, DEBYE: 300.0, EINSTEIN: 300.0, EINSTEIN_SHARE: 0.2, SCALE: 1.0}
_LIMITS = {
    G: (0.0, math.inf),
    IMPURITY_G: (0.0, math.inf),
    FRACTION: (0.0, 1.0),
    SCALE: (1e-3, 1e3),
    DEBYE: (1e-2, 1e5),
    EINSTEIN: (1e-2, 1e5),
    EINSTEIN_SHARE: (0.0, 1.0),
}


def owners(sets: Sequence[Measured]) -> dict[str, str]:
    """Words that may follow a role: samples' names, and data sets' names made into words."""
    found = dict.fromkeys((data.word for data in sets), "set")
    return found | {data.sample: "sample" for data in sets if data.sample}


def role_of(name: str, model: SpinModel, sets: Sequence[Measured] = ()) -> str:
    """The role of a parameter's name: "coupling", one of this module's, or "auxiliary"."""
    if name in model.couplings:
        return "coupling"
    if name in NUISANCE or name in OPTIONAL:
        return name
    match = _EINSTEIN.fullmatch(name)
    if match:
        return match.group(1)
    kinds = owners(sets)
    for role in (*OF_SAMPLE, SCALE):
        kind = kinds.get(name.removeprefix(role + "_")) if name.startswith(role + "_") else None
        if kind == "sample" or (kind == "set" and role == SCALE):
            return role
    return "auxiliary"


def check_names(section: Section, model: SpinModel, sets: Sequence[Measured]) -> None:
    """Refuse a model whose couplings are called like roles, and a scale of nothing."""
    for name in (*NUISANCE, *OPTIONAL):
        if name in model.couplings:
            raise StudyError(
                f"{section.source}: the model has a coupling {name!r}, which is the name of a "
                "fit parameter; rename the coupling in the model file"
            )
    for name in section.content:
        if name == SCALE or (
            name.startswith(SCALE + "_") and role_of(name, model, sets) == "auxiliary"
        ):
            words = ", ".join(f"{SCALE}_{word}" for word in owners(sets))
            raise section.fail(
                name, f"scales no data set or sample of this study; it can be {words}"
            )


def unit_of(role: str, model: SpinModel) -> str:
    """The unit a role is stated in (chi0 has its own)."""
    if role in ("coupling", INTERCLUSTER):
        return model.energy_unit
    return _UNITS.get(role, "1") if model.energy_unit != "1" else "1"


def natural_value(name: str, role: str, model: SpinModel) -> float:
    """The value a parameter has if the study says nothing of it."""
    if role == "coupling":
        return float(model.couplings[name])
    if role == G:
        g = model.common_g
        return math.nan if g is None else g
    return _NATURAL.get(role, 0.0)


def limits_of(role: str, sets: Sequence[Measured]) -> tuple[float, float]:
    """The lowest and highest value a role can have."""
    if role == WEISS:
        felt = [data.temperature.min() for data in sets if data.feels_direction]
        return -math.inf, _BELOW * float(min(felt)) if felt else math.inf
    return _LIMITS.get(role, (-math.inf, math.inf))


def usual_prior(role: str, model: SpinModel) -> tuple[float, float] | None:
    """What is supposed of a role where a study states neither prior nor bounds.

    A balance and a holder are good to some 5 %; impurities hardly interact; free ions of most
    kinds have g near 2 (practice).
    """
    known: Mapping[str, tuple[float, float]] = {SCALE: (1.0, 0.05), IMPURITY_G: (2.0, 0.1)}
    if role == WEISS and model.energy_unit != "1":
        return 0.0, 5.0
    return known.get(role)


def einstein_names(names: Mapping[str, object]) -> Iterator[tuple[str, str]]:
    """The names of each Einstein term's temperature and share among all names."""
    for suffix in ("", *(f"_{k}" for k in range(2, 10))):
        if EINSTEIN + suffix in names:
            yield EINSTEIN + suffix, EINSTEIN_SHARE + suffix


def magnetic(data: Measured) -> bool:
    """Whether a set measures the moment."""
    return data.quantity in MAGNETIC


def names_for(data: Measured, known: Mapping[str, object]) -> dict[str, str]:
    """The parameters that play the roles for a data set, where its sample has its own."""
    if not data.sample:
        return {}
    own = {role: f"{role}_{data.sample}" for role in OF_SAMPLE}
    return {role: name for role, name in own.items() if name in known}


def scales_for(data: Measured, known: Mapping[str, object]) -> tuple[str, ...]:
    """The parameters that multiply a data set: its own, and its sample's."""
    found = dict.fromkeys((data.own_scale, f"{SCALE}_{data.sample}"))
    return tuple(name for name in found if name in known)
