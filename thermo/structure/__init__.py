"""From a crystal structure to a model: ions, shells, and the model file of a supercell."""

from thermo.structure.crystal import Atom, Crystal, Ion, read_ion, read_structure
from thermo.structure.shells import Bridge, Link, Shell, find_shells
from thermo.structure.writing import model_text, read_repeat

__all__ = [
    "Atom",
    "Bridge",
    "Crystal",
    "Ion",
    "Link",
    "Shell",
    "find_shells",
    "model_text",
    "read_ion",
    "read_repeat",
    "read_structure",
]
