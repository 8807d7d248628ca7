"""Numbers as people read them: a value with its uncertainty, a size, a duration."""

from __future__ import annotations

import math
import re

from thermo.numbers import SUPERSCRIPTS, plain, with_uncertainty

__all__ = ["duration", "grouped", "plain", "size", "typeset", "with_uncertainty"]


def grouped(count: float) -> str:
    """A whole number with thin groups of three: 1 048 576; over 10¹⁵ with an exponent."""
    if abs(count) >= 1e15:
        return plain(float(count), 4)
    return f"{round(count):,}".replace(",", "\u202f")


def size(n_bytes: float) -> str:
    """Bytes in binary units: 512 B, 3.2 MiB, 38 GiB; in words where no machine has as much."""
    amount = float(n_bytes)
    for unit in ("B", "KiB", "MiB", "GiB", "TiB", "PiB"):
        if abs(amount) < 1024:
            return f"{amount:.0f} {unit}" if unit == "B" or amount >= 10 else f"{amount:.1f} {unit}"
        amount /= 1024
    return "far beyond any machine"


def duration(seconds: float) -> str:
    """An estimate of time, rounded as an estimate deserves: about 2 min."""
    if not math.isfinite(seconds):
        return "unknown"
    if seconds < 1:
        return "under 1 s"
    years = seconds / (365.25 * 86400)
    if years > 1000:
        return "over 1000 years"
    for limit, step, unit in (
        (90, 1, "s"),
        (90 * 60, 60, "min"),
        (36 * 3600, 3600, "h"),
        (730 * 86400, 86400, "days"),
    ):
        if seconds < limit:
            amount = seconds / step
            return f"about {amount:.1f} {unit}" if amount < 3 else f"about {amount:.0f} {unit}"
    return f"about {years:.1f} years" if years < 3 else f"about {years:.0f} years"


def typeset(text: str) -> str:
    """A number or unit as plain text sets it: true minus, raised powers (cm⁻¹, m³/mol), μ_B."""
    raised = re.sub(r"(?<=[^\W\d_])-?\d+\b", lambda found: found[0].translate(SUPERSCRIPTS), text)
    return raised.replace("-", "\u2212").replace("muB", "μ_B")
