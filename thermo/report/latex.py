"""A table for a paper: LaTeX that needs no package beyond a plain document."""

from __future__ import annotations

import math
import os
import re
from typing import TextIO

import xarray as xr

from thermo.errors import UnavailableError
from thermo.report.export import flag_word
from thermo.report.numbers import plain, with_uncertainty
from thermo.report.quantities import by_scatter
from thermo.storage import atomic_path

_ESCAPES = {
    "\\": r"\textbackslash{}", "{": r"\{", "}": r"\}", "$": r"\$", "&": r"\&", "#": r"\#",
    "%": r"\%", "_": r"\_", "~": r"\textasciitilde{}", "^": r"\textasciicircum{}",
    "<": r"\textless{}", ">": r"\textgreater{}",
}  # fmt: skip
_SYMBOLS = {
    "α": r"\alpha", "β": r"\beta", "γ": r"\gamma", "δ": r"\delta", "ε": r"\epsilon",
    "η": r"\eta", "θ": r"\theta", "κ": r"\kappa", "λ": r"\lambda", "μ": r"\mu", "µ": r"\mu",
    "ν": r"\nu", "π": r"\pi", "ρ": r"\rho", "σ": r"\sigma", "τ": r"\tau", "φ": r"\phi",
    "χ": r"\chi", "ψ": r"\psi", "ω": r"\omega", "Γ": r"\Gamma", "Δ": r"\Delta", "Θ": r"\Theta",
    "Λ": r"\Lambda", "Σ": r"\Sigma", "Φ": r"\Phi", "Ψ": r"\Psi", "Ω": r"\Omega", "·": r"\cdot",
    "×": r"\times", "≤": r"\le", "≥": r"\ge", "±": r"\pm", "∞": r"\infty", "⟂": r"\perp",
    "∥": r"\parallel",
}  # fmt: skip
_RAISED = dict(zip("⁻⁰¹²³⁴⁵⁶⁷⁸⁹", "-0123456789", strict=True))
_LOWERED = dict(zip("₀₁₂₃₄₅₆₇₈₉", "0123456789", strict=True))
_UNITS = {"K": "K", "meV": "meV", "cm-1": r"cm$^{-1}$", "1": "---", "muB": r"$\mu_\mathrm{B}$"}


def export_latex(dataset: xr.Dataset, target: str | os.PathLike[str] | TextIO) -> None:
    """Write a fit's parameters, or a comparison's candidates, as a LaTeX table environment.

    Values carry their standard errors in brackets. Every name is escaped. Raises
    UnavailableError for other datasets, FileFormatError where the file cannot be written.
    """
    kind = str(dataset.attrs.get("content"))
    if kind not in ("fit", "comparison"):
        raise UnavailableError(
            f"a LaTeX table is made of a fit or a comparison, and this is a {kind} file; "
            "export it as .csv"
        )
    text = _fit(dataset) if kind == "fit" else _comparison(dataset)
    if isinstance(target, str | os.PathLike):
        with atomic_path(target) as temporary:
            temporary.write_text(text, encoding="utf-8")
    else:
        target.write(text)


def escape(text: str) -> str:
    """Text that LaTeX sets as it is; what it has no letter for becomes a question mark."""
    found = []
    for character in text:
        if character in _ESCAPES:
            found.append(_ESCAPES[character])
        elif character in _SYMBOLS:
            found.append(f"${_SYMBOLS[character]}$")
        elif character in _RAISED:
            found.append(f"$^{{{_RAISED[character]}}}$")
        elif character in _LOWERED:
            found.append(f"$_{{{_LOWERED[character]}}}$")
        elif character in "\u2212\u2013\u2014":
            found.append("$-$" if character == "\u2212" else "--")
        elif character == "\u202f" or character.isspace():
            found.append(" ")
        elif ord(character) < 0x180 and character.isprintable():
            found.append(character)
        else:
            found.append("?")
    return "".join(found)


def number(value: float, error: float = math.nan, digits: int = 4) -> str:
    """A number, with its error where it has one, as mathematics; "---" for none."""
    if math.isnan(value):
        return "---"
    text = with_uncertainty(value, error) if error > 0 else plain(value, digits)
    match = re.fullmatch(r"(.*)×10([⁻⁰¹²³⁴⁵⁶⁷⁸⁹]+)", text)
    if match:
        power = "".join(_RAISED[c] for c in match[2])
        return rf"${match[1]} \times 10^{{{power}}}$"
    return f"${text}$"


def unit(text: str) -> str:
    """A unit as it stands in a table."""
    return _UNITS.get(text, escape(text))


def _fit(fit: xr.Dataset) -> str:
    rows = []
    for n, name in enumerate(fit["parameter_name"].values):
        role = flag_word(fit["parameter_role"], n)
        stuck = flag_word(fit["at_bound"], n)
        remark = {"fixed": "fixed", "free": "", "tied": ""}[role]
        if role == "tied":
            remark = "$=$ " + escape(str(fit["parameter_tie"].values[n]))
        if stuck != "none":
            remark = f"at its {stuck} bound"
        value = number(float(fit["value"][n]), float(fit["standard_error"][n]), 6)
        own = unit(str(fit["parameter_units"].values[n]))
        rows.append(f"{escape(str(name))} & {value} & {own} & {remark}")
    reduced = float(fit["reduced_chi_square"])
    test = f"; reduced $\\chi^2 = {plain(reduced, 3)}$" if not math.isnan(reduced) else ""
    term = str(fit.attrs.get("bond_term", ""))
    told = f" Each bond counts once and adds ${_term(term)}$ to $H$." if term else ""
    title = str(fit.attrs["title"]).partition(": ")[2] or "Fit"
    caption = (
        f"{escape(title)}: parameters with standard errors of their last digits, from "
        f"{fit.sizes['point']} points{test}.{told}"
    )
    return _table(caption, "lrll", "Parameter & Value & Unit &", rows)


def _comparison(found: xr.Dataset) -> str:
    rows = []
    scatter = by_scatter(found)
    for k, name in enumerate(found["candidate_name"].values):
        cells = [
            escape(str(name)),
            f"${int(found['candidate_parameters'][k])}$",
            "---" if scatter else number(float(found["candidate_chi_square"][k]), digits=5),
            number(float(found["candidate_aicc"][k]), digits=3),
            f"${float(found['candidate_aicc_weight'][k]):.3f}$",
            number(float(found["candidate_bic"][k]), digits=3),
            f"${float(found['candidate_bic_weight'][k]):.3f}$",
        ]
        rows.append(" & ".join(cells))
    title = str(found.attrs["title"]).partition(": ")[2] or "Comparison"
    caption = (
        f"{escape(title)}: candidates fitted to the same {found.sizes['point']} points. "
        f"{escape(str(found.attrs['verdict']))}"
    )
    head = (
        r"Candidate & $k$ & $\chi^2$ & $\Delta$AICc & $w_\mathrm{AICc}$ & $\Delta$BIC & "
        r"$w_\mathrm{BIC}$"
    )
    return _table(caption, "lrrrrrr", head, rows)


def _term(bond_term: str) -> str:
    return bond_term.replace("S.S", r"\,\mathbf{S}_i\cdot\mathbf{S}_j").lstrip("+")


def _table(caption: str, columns: str, head: str, rows: list[str]) -> str:
    body = " \\\\\n".join(rows)
    return (
        "\\begin{table}\n"
        f"\\caption{{{caption}}}\n"
        f"\\begin{{tabular}}{{{columns}}}\n\\hline\n{head} \\\\\n\\hline\n{body} \\\\\n\\hline\n"
        "\\end{tabular}\n\\end{table}\n"
    )
