"""Commands that have a module of their own, in the order of ``partita --help``."""

from __future__ import annotations

from collections.abc import Callable

from thermo.correlations_command import run_correlations
from thermo.directions_command import run_directions
from thermo.magnetocaloric_command import run_magnetocaloric
from thermo.structure_command import run_structure

COMMANDS: dict[str, Callable[..., None]] = {
    "directions": run_directions,
    "caloric": run_magnetocaloric,
    "correlations": run_correlations,
    "structure": run_structure,
}
