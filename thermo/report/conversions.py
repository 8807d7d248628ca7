"""A coupling in the other sign conventions and energy units of the literature."""

from __future__ import annotations

from dataclasses import dataclass

import xarray as xr

from thermo.errors import PartitaError
from thermo.model.reading import read_model_text
from thermo.model.terms import BOND_TERMS
from thermo.units import convert_energy

ENERGY_UNITS = ("K", "meV", "cm-1")


@dataclass(frozen=True)
class Form:
    """One way to state a coupling; multiply the file's value and error by ``factor``."""

    bond_term: str
    unit: str
    factor: float
    own: bool


def coupling_kinds(fit: xr.Dataset) -> dict[str, str]:
    """Of each coupling of a fit: "bond", "ion", "both" or "none", from the model it was made with.

    Empty where the file holds no model that can be read.
    """
    try:
        model = read_model_text(str(fit.attrs.get("model_text", "")))
    except PartitaError:
        return {}
    bonds = {bond.coupling for bond in model.bonds}
    ions = {ion.coupling for ion in model.ions}
    kinds = {(True, False): "bond", (False, True): "ion", (True, True): "both"}
    return {name: kinds.get((name in bonds, name in ions), "none") for name in model.couplings}


def forms(kind: str, bond_term: str, unit: str) -> list[Form]:
    """Every way to state a coupling of this kind, by convention and then by unit.

    A single-ion term has no sign convention (its ``bond_term`` is ""), nor is one converted that
    acts on bonds and ions at once. A dimensionless coupling keeps its unit.
    """
    terms = list(BOND_TERMS) if kind == "bond" and bond_term in BOND_TERMS else [""]
    units = [unit] if unit == "1" else list(ENERGY_UNITS)
    found = []
    for term in terms:
        sign = BOND_TERMS[bond_term] / BOND_TERMS[term] if term else 1.0
        for other in units:
            factor = sign * (convert_energy(1.0, unit, other) if unit != other else 1.0)
            found.append(Form(term, other, factor, term in ("", bond_term) and other == unit))
    return found
