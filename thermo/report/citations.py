"""How to cite the methods behind a result, as a paper would."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

_ALWAYS = (
    "Physical constants: CODATA recommended values 2022 (Mohr, Newell, Taylor and Tiesinga).",
)
_FULL = "Levels: exact diagonalisation of every block, symmetries of sites and spins resolved."
_SAMPLED = (
    "Levels: finite-temperature Lanczos method, J. Jaklič and P. Prelovšek, Phys. Rev. B 49, 5065 "
    "(1994), with the lowest states exact, S. Morita and T. Tohyama, Phys. Rev. Research 2, 013205 "
    "(2020), and weights calibrated to exact traces, J.-C. Deville and C.-E. Särndal, J. Am. Stat. "
    "Assoc. 87, 376 (1992)."
)
_FIT = (
    "Least squares within bounds: M. A. Branch, T. F. Coleman and Y. Li, SIAM J. Sci. Comput. 21, "
    "1 (1999).",
    "Runs of the residuals: A. Wald and J. Wolfowitz, Ann. Math. Stat. 11, 147 (1940); "
    "correlation of neighbours: J. Durbin and G. S. Watson, Biometrika 37, 409 (1950).",
)
_PROFILES = "Profile intervals: F. James and M. Roos, Comput. Phys. Commun. 10, 343 (1975)."
_COMPARISON = (
    "Corrected Akaike criterion: H. Akaike, IEEE Trans. Autom. Control 19, 716 (1974); "
    "C. M. Hurvich and C.-L. Tsai, Biometrika 76, 297 (1989).",
    "Bayesian criterion: G. Schwarz, Ann. Stat. 6, 461 (1978).",
)


def citations(attrs: Mapping[str, Any], comparison: bool, profiles: bool = False) -> list[str]:
    """One entry for each method a fit (its root attributes) or a comparison rests on.

    ``profiles``: the fit has profile intervals.
    """
    version = str(attrs.get("source", "partita"))
    found = [f"Program: {version[:1].upper() + version[1:]}."]
    found.append(_SAMPLED if attrs.get("method") == "sampled" else _FULL)
    found += _FIT
    if profiles:
        found.append(_PROFILES)
    if comparison:
        found += _COMPARISON
    return [*found, *_ALWAYS]
