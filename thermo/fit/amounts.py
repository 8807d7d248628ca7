"""How much was measured: values per gram, or of a whole sample, as values per mole."""

from __future__ import annotations

from thermo.fit.strict import Section
from thermo.units import molar_twin


def read_amount(section: Section, quantity: str, units: str, reduced: bool) -> tuple[str, float]:
    """The unit per mole and the factor to it, from ``molar_mass`` [g/mol] and ``mass`` [mg].

    A unit per gram or kilogram needs the molar mass (of what ``per`` counts), one of the whole
    sample its mass besides; neither goes with a unit that is per mole already.
    """
    molar = section.optional_number("molar_mass", "the molar mass in g/mol")
    mass = section.optional_number("mass", "the sample's mass in mg")
    for key, number in (("molar_mass", molar), ("mass", mass)):
        if number is not None and number <= 0:
            raise section.fail(key, f"= {number:g} must be above zero")
    twin = None if reduced else molar_twin(quantity, units)
    if twin is None:
        for key, number in (("molar_mass", molar), ("mass", mass)):
            if number is not None:
                raise section.fail(
                    key, f"has no part in a value in {units!r}; leave it out or correct units"
                )
        return units, 1.0
    name, kind, factor = twin
    if molar is None:
        raise section.fail("molar_mass", f"is missing: a value in {units!r} needs it; give g/mol")
    if kind == "g":
        if mass is not None:
            raise section.fail("mass", f"has no part in a value in {units!r}; leave it out")
        return name, factor * molar
    if mass is None:
        raise section.fail("mass", f"is missing: {units!r} is of the whole sample; give it in mg")
    return name, factor * molar / (1e-3 * mass)
