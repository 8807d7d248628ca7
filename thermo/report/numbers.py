"""Numbers as people read them: a value with its uncertainty, a size, a duration."""

from __future__ import annotations

import re

from thermo.numbers import SUPERSCRIPTS, duration, plain, with_uncertainty

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


def typeset(text: str) -> str:
    """A number or unit as plain text sets it: true minus, raised powers (cm⁻¹, m³/mol), μ_B."""
    raised = re.sub(r"(?<=[^\W\d_])-?\d+\b", lambda found: found[0].translate(SUPERSCRIPTS), text)
    return raised.replace("-", "\u2212").replace("muB", "μ_B")
