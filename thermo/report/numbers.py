"""Numbers as people read them: a value with its uncertainty, a size, a duration."""

from __future__ import annotations

import math

_SUPERSCRIPTS = str.maketrans("-0123456789", "⁻⁰¹²³⁴⁵⁶⁷⁸⁹")


def with_uncertainty(value: float, error: float, digits: int = 2) -> str:
    """A value and its standard error in concise notation (GUM 7.2.2): 70.12(35), 1.20(3)×10⁻⁴.

    ``digits`` significant digits of the error are kept and the value is rounded alike. Without
    a usable error (zero, NaN, infinite) the value alone, to six digits.
    """
    if not math.isfinite(value):
        return str(value)
    if not math.isfinite(error) or error <= 0:
        return plain(value)
    # Rounding the error first: 0.0996 becomes 0.10, which has its first digit one place higher.
    rounded = float(f"{error:.{digits - 1}e}")
    place = math.floor(math.log10(rounded)) - digits + 1
    top = math.floor(math.log10(max(abs(value), rounded)))
    power = top if top < -3 or top > 5 else 0
    decimals = max(power - place, 0)
    scale = 10.0**power
    shown = round(value, -place) / scale
    last = rounded / scale
    inside = f"{last:.{decimals}f}"
    if decimals and last < 1:
        inside = str(round(rounded / 10.0**place))
    text = f"{shown:.{decimals}f}({inside})"
    return text + (f"×10{str(power).translate(_SUPERSCRIPTS)}" if power else "")


def plain(value: float, digits: int = 6) -> str:
    """A number to ``digits`` significant digits, with ×10ⁿ where an exponent is needed."""
    text = f"{value:.{digits}g}"
    if "e" not in text:
        return text
    mantissa, power = text.split("e")
    return f"{mantissa}×10{str(int(power)).translate(_SUPERSCRIPTS)}"


def grouped(count: float) -> str:
    """A whole number with thin groups of three: 1 048 576; over 10¹⁵ with an exponent."""
    if abs(count) >= 1e15:
        return plain(float(count), 4)
    return f"{round(count):,}".replace(",", "\u202f")


def size(n_bytes: float) -> str:
    """Bytes in binary units: 512 B, 3.2 MiB, 38 GiB."""
    amount = float(n_bytes)
    for unit in ("B", "KiB", "MiB", "GiB", "TiB"):
        if abs(amount) < 1024:
            return f"{amount:.0f} {unit}" if unit == "B" or amount >= 10 else f"{amount:.1f} {unit}"
        amount /= 1024
    return f"{amount:.3g} PiB"


def duration(seconds: float) -> str:
    """An estimate of time, rounded as an estimate deserves: about 2 min."""
    if not math.isfinite(seconds):
        return "unknown"
    if seconds < 1:
        return "under 1 s"
    for limit, step, unit in (
        (90, 1, "s"),
        (90 * 60, 60, "min"),
        (36 * 3600, 3600, "h"),
        (730 * 86400, 86400, "days"),
    ):
        if seconds < limit:
            amount = seconds / step
            return f"about {amount:.1f} {unit}" if amount < 3 else f"about {amount:.0f} {unit}"
    return f"about {plain(seconds / (365.25 * 86400), 2)} years"
