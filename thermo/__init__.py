"""Partita: the finite-temperature thermodynamics of interacting spins.

>>> import thermo
>>> model = thermo.read_model("model.toml")                        # doctest: +SKIP
>>> levels = thermo.solve(model)                                   # doctest: +SKIP
>>> curves = thermo.curves(levels, temperature=[2.0, 10.0, 50.0])  # doctest: +SKIP

Every name below is loaded when it is first used, so ``import thermo`` itself is quick.
"""

from __future__ import annotations

import sys
from importlib import import_module
from types import ModuleType
from typing import TYPE_CHECKING, Any

from thermo import errors

if TYPE_CHECKING:
    from thermo.correlating import correlations
    from thermo.directions import directional_curves
    from thermo.ensemble import curves
    from thermo.ensemble.magnetocaloric import magnetocaloric
    from thermo.fit import fit, read_study
    from thermo.fit.candidates import compare
    from thermo.model import read_model
    from thermo.model.level_table import read_checked as read
    from thermo.model.level_table import read_levels
    from thermo.report import export_csv, export_latex, html_report, plot
    from thermo.solving import solve
    from thermo.spectrum import survey
    from thermo.spectrum.executors import Distributed, Local
    from thermo.storage import write_dataset as write

__version__ = "0.1.0"

__all__ = [
    "Distributed",
    "Local",
    "compare",
    "correlations",
    "curves",
    "directional_curves",
    "errors",
    "export_csv",
    "export_latex",
    "fit",
    "html_report",
    "magnetocaloric",
    "plot",
    "read",
    "read_levels",
    "read_model",
    "read_study",
    "solve",
    "survey",
    "write",
]

_HOMES = {
    "Distributed": ("thermo.spectrum.executors", "Distributed"),
    "Local": ("thermo.spectrum.executors", "Local"),
    "compare": ("thermo.fit.candidates", "compare"),
    "correlations": ("thermo.correlating", "correlations"),
    "curves": ("thermo.ensemble", "curves"),
    "directional_curves": ("thermo.directions", "directional_curves"),
    "export_csv": ("thermo.report", "export_csv"),
    "export_latex": ("thermo.report", "export_latex"),
    "fit": ("thermo.fit", "fit"),
    "html_report": ("thermo.report", "html_report"),
    "magnetocaloric": ("thermo.ensemble.magnetocaloric", "magnetocaloric"),
    "plot": ("thermo.report", "plot"),
    "read": ("thermo.model.level_table", "read_checked"),
    "read_levels": ("thermo.model.level_table", "read_levels"),
    "read_model": ("thermo.model", "read_model"),
    "read_study": ("thermo.fit", "read_study"),
    "solve": ("thermo.solving", "solve"),
    "survey": ("thermo.spectrum", "survey"),
    "write": ("thermo.storage", "write_dataset"),
}

# Modules that answer as attributes too, for help(thermo.model.reading) and the like.
_MODULES = ("ensemble", "model", "report", "spectrum", "storage", "units", "variables")


class _FitPackage(ModuleType):
    """The subpackage ``thermo.fit``, which can be called like the function of that name."""

    def __call__(self, *args: Any, **kwargs: Any) -> Any:
        """Fit a study; see :func:`thermo.fit.fit`."""
        return self.fit(*args, **kwargs)


class _Package(ModuleType):
    def __setattr__(self, name: str, value: Any) -> None:
        # Importing thermo.fit puts the module where the function thermo.fit should be, so
        # that module answers to calls as well: whatever was imported first, both uses work.
        if name == "fit" and isinstance(value, ModuleType):
            value.__class__ = _FitPackage
        super().__setattr__(name, value)


sys.modules[__name__].__class__ = _Package


def __getattr__(name: str) -> Any:
    """Load a public name from its own module on first use (PEP 562)."""
    if name in _MODULES:
        return import_module(f"thermo.{name}")
    if name not in _HOMES:
        raise AttributeError(f"module 'thermo' has no attribute {name!r}")
    home, attribute = _HOMES[name]
    module = import_module(home)
    if name == "fit":
        return module
    value = getattr(module, attribute)
    globals()[name] = value
    return value


def __dir__() -> list[str]:
    return sorted({*__all__, *_MODULES, "__version__"})
