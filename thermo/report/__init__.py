"""Pictures, tables and CSV of levels, curves and fits. Each is loaded when first used."""

from __future__ import annotations

from importlib import import_module
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from thermo.report.comparison_tables import print_comparison
    from thermo.report.export import export_csv
    from thermo.report.html import html_report
    from thermo.report.latex import export_latex
    from thermo.report.pictures import plot
    from thermo.report.tables import print_curves, print_fit, print_plan

__all__ = [
    "export_csv",
    "export_latex",
    "html_report",
    "plot",
    "print_comparison",
    "print_curves",
    "print_fit",
    "print_plan",
]

# matplotlib and rich take long to import; a table should not wait for the first.
_HOMES = {
    "export_csv": "thermo.report.export",
    "export_latex": "thermo.report.latex",
    "html_report": "thermo.report.html",
    "plot": "thermo.report.pictures",
    "print_comparison": "thermo.report.comparison_tables",
    "print_curves": "thermo.report.tables",
    "print_fit": "thermo.report.tables",
    "print_plan": "thermo.report.tables",
}


def __getattr__(name: str) -> Any:
    if name not in _HOMES:
        raise AttributeError(f"module {__name__!r} has no attribute {name!r}")
    return getattr(import_module(_HOMES[name]), name)
