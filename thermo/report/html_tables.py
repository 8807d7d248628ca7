"""The tables of the HTML report, from a fit or a comparison dataset."""

from __future__ import annotations

import math

import numpy as np
import xarray as xr

from thermo.numbers import SUPERSCRIPTS
from thermo.report.conversions import coupling_kinds, forms
from thermo.report.export import flag_word
from thermo.report.html_parts import Cell, paragraph, table
from thermo.report.numbers import grouped, plain, typeset, with_uncertainty
from thermo.report.quantities import by_scatter

MINUS = str.maketrans("-", "\u2212")


def number(value: float, digits: int = 3) -> str:
    """A number with a true minus; "" for none."""
    return plain(value, digits).translate(MINUS) if not math.isnan(value) else ""


def gap(value: float) -> str:
    """A difference of criteria."""
    return f"{value:.0f}" if value >= 100 else number(value, 3)


def valued(value: float, error: float) -> str:
    """A value with its error and a true minus."""
    return with_uncertainty(value, error).translate(MINUS)


def candidates(comparison: xr.Dataset) -> str:
    """The candidates with their criteria, the best first."""
    heads = [Cell("candidate")]
    heads += [Cell(text, True) for text in ("free", "χ²", "χ²/ν", "chance")]
    heads += [Cell(text, True) for text in ("ΔAICc", "AICc weight", "ΔBIC", "BIC weight")]
    heads.append(Cell("finding"))
    rows, kinds = [], []
    for k, name in enumerate(comparison["candidate_name"].values):

        def value(key: str, k: int = k) -> float:
            return float(comparison[f"candidate_{key}"].values[k])

        scatter = by_scatter(comparison)
        probability = value("probability")
        chance = "" if math.isnan(probability) else (
            number(probability, 2) if probability >= 1e-6 else "< 10⁻⁶"
        )  # fmt: skip
        numbers = [
            grouped(value("parameters")),
            "" if scatter else number(value("chi_square"), 5),
            number(value("reduced_chi_square"), 3),
            chance,
            gap(value("aicc")),
            f"{value('aicc_weight'):.3f}",
            gap(value("bic")),
            f"{value('bic_weight'):.3f}",
        ]
        remark = str(comparison["candidate_remark"].values[k])
        told = [Cell(text, True) for text in numbers]
        rows.append([Cell(str(name)), *told, Cell(remark, kind="words")])
        kinds.append("" if int(comparison["candidate_standing"][k]) else "fallen")
    note = (
        "All fitted to the same points, the best first. Free: parameters fitted; chance: "
        "probability of a χ² as large; weights: shares of the criterion's evidence."
    )
    return table("", heads, rows, kinds) + paragraph(note, "soft")


def residual_tests(comparison: xr.Dataset) -> str:
    """For each candidate and data set: runs of the residuals and Durbin and Watson's number."""
    heads = [Cell("candidate"), Cell("data set"), Cell("runs (σ)", True),
             Cell("Durbin–Watson", True)]  # fmt: skip
    rows = []
    for k, name in enumerate(comparison["candidate_name"].values):
        for d, data in enumerate(comparison["dataset_name"].values):
            runs = float(comparison["candidate_runs"].values[k, d])
            watson = float(comparison["candidate_durbin_watson"].values[k, d])
            rows.append([Cell(str(name)), Cell(str(data)), Cell(number(runs, 2), True),
                         Cell(number(watson, 3), True)])  # fmt: skip
    return table("", heads, rows) + paragraph(
        "Runs below −3 mean a trend; Durbin–Watson is near 2 for independent residuals.", "soft"
    )


def sets(fit: xr.Dataset) -> str:
    """The data sets: points, χ² and the tests of their residuals."""
    scatter = by_scatter(fit)
    heads = [Cell("data set"), Cell("quantity"), Cell("units"), Cell("points", True)]
    heads += [] if scatter else [Cell("χ²", True)]
    tested = "dataset_runs" in fit and "dataset_durbin_watson" in fit
    heads += [Cell("runs (σ)", True), Cell("Durbin–Watson", True)] if tested else []
    rows = []
    owner = fit["point_dataset"].values
    for n, name in enumerate(fit["dataset_name"].values):
        row = [
            Cell(str(name)),
            Cell(str(fit["dataset_quantity"].values[n]).replace("_", " ")),
            Cell(str(fit["dataset_units"].values[n])),
            Cell(grouped(int(np.count_nonzero(owner == n))), True),
        ]
        if not scatter:
            row.append(Cell(number(float(fit["dataset_chi_square"][n]), 4), True))
        if tested:
            row.append(Cell(number(float(fit["dataset_runs"][n]), 2), True))
            row.append(Cell(number(float(fit["dataset_durbin_watson"][n]), 3), True))
        rows.append(row)
    note = "Runs below −3 mean a trend; Durbin–Watson is near 2 for independent residuals."
    return table("", heads, rows) + (paragraph(note, "soft") if tested else "")


def profiled(fit: xr.Dataset) -> bool:
    """Whether any profile interval was found."""
    ends = [name for name in ("lower_95", "upper_95") if name in fit]
    return any(bool(np.isfinite(fit[name].values).any()) for name in ends)


def parameters(fit: xr.Dataset) -> str:
    """Every parameter with its error, unit, start and bounds."""
    profiles = profiled(fit)
    heads = [Cell("parameter"), Cell("value", True), Cell("unit")]
    heads += [Cell("68 %", True), Cell("95 %", True)] if profiles else []
    heads += [Cell("start", True), Cell("bounds"), Cell("")]
    rows = []
    for n, name in enumerate(fit["parameter_name"].values):
        role = flag_word(fit["parameter_role"], n)
        stuck = flag_word(fit["at_bound"], n)
        tie = str(fit["parameter_tie"].values[n])
        remark = {"fixed": "fixed", "tied": f"= {tie}", "free": ""}[role]
        if stuck != "none":
            remark = f"at its {stuck} bound"
        prior = float(fit["prior"][n]) if "prior" in fit else math.nan
        if not math.isnan(prior):
            told = f"prior {valued(prior, float(fit['prior_error'][n]))}"
            remark = f"{remark}; {told}" if remark else told
        unit = str(fit["parameter_units"].values[n])
        free = role == "free"
        rows.append(
            [
                Cell(str(name)),
                Cell(valued(float(fit["value"][n]), float(fit["standard_error"][n])), True),
                Cell("" if unit == "1" else unit),
                *([Cell(_interval(fit, n, level), True) for level in (68, 95)] if profiles else []),
                Cell(number(float(fit["start"][n]), 5) if free else "", True),
                Cell(_bounds(fit, n) if free else ""),
                Cell(remark),
            ]
        )
    return table(
        "Values with standard errors of the last digits in brackets", heads, rows
    )  # fmt: skip


def _interval(fit: xr.Dataset, n: int, level: int) -> str:
    """A profile interval; "" where it was not looked for."""
    low, high = (float(fit[f"{end}_{level}"][n]) for end in ("lower", "upper"))
    return "" if math.isnan(low) and math.isnan(high) else between(low, high)


def between(low: float, high: float) -> str:
    """An interval to two digits of its width; "?" for an end not found, ∞ for none."""
    known = [abs(x) for x in (low, high) if math.isfinite(x)]
    largest = max(known, default=0.0)
    width = high - low if len(known) == 2 and high > low else largest
    if largest == 0 or width == 0:
        return " to ".join(_end(x, 0) for x in (low, high))
    top = math.floor(math.log10(largest))
    power = top if top < -3 or top > 5 else 0
    places = max(power - math.floor(math.log10(width)) + 1, 0)
    text = " to ".join(_end(x / 10.0**power, places) for x in (low, high))
    return f"({text})×10{str(power).translate(SUPERSCRIPTS)}" if power else text


def _end(value: float, places: int) -> str:
    if math.isnan(value):
        return "?"
    if math.isinf(value):
        return "\u221e" if value > 0 else "\u2212\u221e"
    text = f"{value:.{places}f}"
    return ("0" if not float(text) else text).translate(MINUS)


def _bounds(fit: xr.Dataset, n: int) -> str:
    low, high = float(fit["lower_bound"][n]), float(fit["upper_bound"][n])
    if math.isinf(low) and math.isinf(high):
        return "none"
    if math.isinf(high):
        return f"≥ {number(low)}"
    if math.isinf(low):
        return f"≤ {number(high)}"
    return f"{number(low)} to {number(high)}"


def conversions(fit: xr.Dataset) -> str:
    """Each coupling in every sign convention and energy unit, the file's own marked."""
    kinds = coupling_kinds(fit)
    names = [str(name) for name in fit["parameter_name"].values]
    bond_term = str(fit.attrs.get("bond_term", ""))
    made = []
    for name, kind in kinds.items():
        if name not in names or kind == "none":
            continue
        n = names.index(name)
        value, error = float(fit["value"][n]), float(fit["standard_error"][n])
        found = forms(kind, bond_term, str(fit["parameter_units"].values[n]))
        units = list(dict.fromkeys(form.unit for form in found))
        heads = [Cell("H adds"), *(Cell("" if u == "1" else typeset(u), True) for u in units)]
        rows = []
        for term in dict.fromkeys(form.bond_term for form in found):
            row = [Cell(term.translate(MINUS) if term else name)]
            for form in found:
                if form.bond_term == term:
                    text = valued(form.factor * value, abs(form.factor) * error)
                    row.append(Cell(text, True, "own" if form.own else ""))
            rows.append(row)
        made.append(table(f"{name} ({_kind_words(kind)})", heads, rows, stack=False))
    if not made:
        return ""
    note = paragraph("Marked: as in the model file. Each bond counts once in all of them.", "soft")
    return "".join(made) + note


def _kind_words(kind: str) -> str:
    return {
        "bond": "coupling of bonds",
        "ion": "single-ion term, which has no sign convention",
        "both": "acts on bonds and ions at once, so only its unit is converted",
    }[kind]


def correlations(fit: xr.Dataset) -> str:
    """The lower triangle of the correlation matrix; "" for fewer than two parameters."""
    matrix = fit["correlation"].values
    known = [n for n in range(len(matrix)) if np.isfinite(matrix[n, n])]
    if len(known) < 2:
        return ""
    names = [str(fit["parameter_name"].values[n]) for n in known]
    heads = [Cell(""), *(Cell(name, True) for name in names[:-1])]
    rows = []
    for i, a in enumerate(known[1:], start=1):
        cells = [Cell(f"{matrix[a, b]:+.3f}".translate(MINUS), True) for b in known[:i]]
        rows.append([Cell(names[i]), *cells, *(Cell("") for _ in range(len(names) - 1 - i))])
    return table("Correlation of the estimates", heads, rows, stack=False)


def window(fit: xr.Dataset) -> str:
    """From which temperature each data set can be trusted, and how many points were left out."""
    if "dataset_window" not in fit or fit.attrs.get("window_status") != "checked":
        return ""
    gone = fit["excluded_dataset"].values if "excluded_dataset" in fit else np.empty(0)
    owner, temperature = fit["point_dataset"].values, fit["temperature"].values
    unit = str(fit["temperature"].attrs.get("units", "K")).replace("1", "")
    heads = [Cell("data set"), Cell("trusted from", True), Cell("fitted from", True),
             Cell("points left out", True)]  # fmt: skip
    rows = []
    for n, name in enumerate(fit["dataset_name"].values):
        edge = float(fit["dataset_window"][n])
        text = "everywhere" if edge == 0 else "nowhere" if math.isinf(edge) else (
            f"{number(edge, 4)} {unit}"
        )  # fmt: skip
        first = number(float(temperature[owner == n].min()), 4)
        rows.append([Cell(str(name)), Cell(text, True), Cell(f"{first} {unit}", True),
                     Cell(grouped(int(np.count_nonzero(gone == n))), True)])  # fmt: skip
    return table("", heads, rows)
