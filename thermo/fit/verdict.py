"""What the data decide between candidates, in one word and in a few sentences."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import replace
from typing import TYPE_CHECKING

from thermo.fit.residual_tests import UNLIKELY
from thermo.numbers import plain

if TYPE_CHECKING:
    from thermo.fit.candidates import Candidate

#: A candidate falls only where both criteria are this much above the lowest: a factor of 150 in
#: likelihood, so that no verdict hangs on a lucky draw of the noise or on which criterion is used.
DECISIVE = 10.0


def conclude(ranked: Sequence[Candidate]) -> tuple[list[Candidate], str, str]:
    """The candidates with ``standing`` and ``remark``, the conclusion, and the verdict in words.

    ``ranked`` has the lowest criterion first.
    """
    judged = [_judged(c) for c in ranked]
    standing = [c for c in judged if c.standing]
    if not any(c.adequate for c in standing):
        judged = [_inadequate(c) if c.standing else c for c in judged]
        return judged, "none" if len(judged) > 1 else "single", _none(judged)
    if len(judged) == 1:
        return judged, "single", _single(judged[0])
    if len(standing) == 1:
        return judged, "preferred", _preferred(judged)
    return judged, "undecided", _undecided(judged, standing)


def _judged(c: Candidate) -> Candidate:
    if not c.result.converged:
        return replace(c, standing=True, remark="its fit did not converge, so it is not ruled out")
    gap = min(c.bic, c.bic if math.isnan(c.aicc) else c.aicc)
    if gap >= DECISIVE:
        return replace(c, standing=False, remark=f"ruled out: {_less_likely(gap)}")
    return replace(c, standing=True, remark=_how_well(c))


def _how_well(c: Candidate) -> str:
    if c.adequate:
        text = "describes the data"
        if math.isnan(c.probability):
            text = "its residuals show no trend"
        elif c.trending:
            text += (
                f", with a trend in {_listed([repr(n) for n in c.trending])} within their errors"
            )
    else:
        text = _against(c)
    stuck = c.result.at_bound
    return text + (f"; {', '.join(stuck)} at a bound" if stuck else "")


def _against(c: Candidate) -> str:
    """What speaks against a candidate by itself."""
    told = []
    if c.probability < UNLIKELY:
        told.append(
            f"χ² of {plain(c.result.chi_square, 4)} with {c.result.degrees_of_freedom} degrees "
            "of freedom is too large for chance"
        )
    if c.trending:
        who = _listed([repr(name) for name in c.trending])
        told.append(f"the residuals of {who} follow a trend")
    return " and ".join(told)


def _inadequate(c: Candidate) -> Candidate:
    return replace(c, standing=False, remark=_against(c) or c.remark)


def _none(judged: Sequence[Candidate]) -> str:
    best = judged[0]
    who = "None of the candidates describes the data" if len(judged) > 1 else (
        f"{best.name!r} does not describe the data"
    )  # fmt: skip
    which = f" of {best.name!r}, the least bad," if len(judged) > 1 else ""
    reason = _against(best).replace("χ² of", f"χ²{which} of", 1)
    if not reason.startswith("χ²") and which:
        reason = f"with {best.name!r}, the least bad, {reason}"
    return (
        f"{who}: {reason}. Look for a missing coupling, an impurity, a wrong unit or too small "
        "uncertainties; do not use these constants."
    )


def _single(c: Candidate) -> str:
    text = f"{c.name!r} describes the data"
    if math.isnan(c.probability):
        return (
            f"{c.name!r} leaves no trend in the residuals; without stated uncertainties nothing "
            "more can be said. No rival was tried."
        )
    return f"{text}{_chi(c)}. No rival was tried."


def _preferred(judged: Sequence[Candidate]) -> str:
    best, second = judged[0], judged[1]
    gap = min(second.bic, second.bic if math.isnan(second.aicc) else second.aicc)
    others = "the other candidate does" if len(judged) == 2 else "the other candidates do"
    return (
        f"{best.name!r} describes the data{_chi(best)} and {others} not: the next, "
        f"{second.name!r}, is {_less_likely(gap)}."
    )


def _undecided(judged: Sequence[Candidate], standing: Sequence[Candidate]) -> str:
    names = _listed([repr(c.name) for c in standing])
    text = f"{names} cannot be told apart by these data"
    loose = [c for c in standing if not c.result.converged]
    if loose:
        text += f" (the fit of {_listed([repr(c.name) for c in loose])} did not converge)"
    else:
        gaps = max(c.bic if math.isnan(c.aicc) else c.aicc for c in standing)
        text += f" (their criteria differ by {plain(gaps, 2)}, and {DECISIVE:g} would decide)"
    fewest = min(c.n_parameters for c in standing)
    simple = [c for c in standing if c.n_parameters == fewest]
    if len(simple) == 1 and len(standing) > 1:
        text += f"; {simple[0].name!r} needs the fewest parameters, {fewest}"
    bad = [c for c in standing if not c.adequate]
    if bad:
        text += f"; {_listed([repr(c.name) for c in bad])} fits poorly all the same"
    fallen = [repr(c.name) for c in judged if not c.standing]
    if fallen:
        text += f". Ruled out: {_listed(fallen)}"
    return text + "."


def _chi(c: Candidate) -> str:
    reduced = c.result.reduced_chi_square
    return f" (reduced χ² = {plain(reduced, 3)})" if math.isfinite(reduced) else ""


def _less_likely(gap: float) -> str:
    factor = math.exp(min(gap, 60.0) / 2)
    much = f"{factor:.0f} times" if factor < 1e4 else "more than 10 000 times"
    return f"{much} less likely than the best"


def _listed(names: Sequence[str]) -> str:
    return " and ".join([", ".join(names[:-1]), names[-1]] if len(names) > 1 else names)
