"""A comparison of candidates for the terminal."""

from __future__ import annotations

import math

import xarray as xr
from rich.console import Console
from rich.text import Text

from thermo.report.numbers import grouped, plain, with_uncertainty
from thermo.report.quantities import by_scatter
from thermo.report.tables import new_sheet, show


def print_comparison(comparison: xr.Dataset, console: Console | None = None) -> None:
    """Print the candidates with their criteria, their parameters, the verdict, and what next."""
    scatter = by_scatter(comparison)
    right = ("parameters", "χ²", "χ²/ν", "ΔAICc", "weight", "ΔBIC")
    shown = tuple(c for c in right if not (scatter and c.startswith("χ²")))
    rivals = new_sheet("Candidates", "name", *shown, "", right=shown)
    for k, name in enumerate(comparison["candidate_name"].values):
        chi = float(comparison["candidate_chi_square"][k])
        reduced = float(comparison["candidate_reduced_chi_square"][k])
        rivals.add_row(
            Text(str(name)),
            grouped(int(comparison["candidate_parameters"][k])),
            *([] if scatter else [plain(chi, 5), "" if math.isnan(reduced) else plain(reduced, 3)]),
            _number(float(comparison["candidate_aicc"][k])),
            f"{float(comparison['candidate_aicc_weight'][k]):.3f}",
            _number(float(comparison["candidate_bic"][k])),
            "" if int(comparison["candidate_standing"][k]) else "ruled out",
        )
    values = new_sheet("Parameters", "candidate", "name", "value", "units", "")
    last = ""
    for n, c in enumerate(comparison["parameter_candidate"].values):
        role = int(comparison["parameter_role"][n])
        owner = str(comparison["candidate_name"].values[c])
        unit = str(comparison["parameter_units"].values[n])
        if role == 0:
            continue
        values.add_row(
            Text("" if owner == last else owner),
            Text(str(comparison["parameter_name"].values[n])),
            with_uncertainty(float(comparison["value"][n]), float(comparison["standard_error"][n])),
            Text("" if unit == "1" else unit),
            "tied" if role == 2 else "",
        )
        last = owner
    told = [f"Verdict: {comparison.attrs['verdict']}"]
    proposals = str(comparison.attrs.get("proposals", "")).splitlines()
    told += [f"Measure next: {proposal}." for proposal in proposals[:1]]
    show(console, rivals, values, *told)


def _number(value: float) -> str:
    if math.isnan(value):
        return ""
    return f"{value:.0f}" if value >= 100 else plain(value, 3)
