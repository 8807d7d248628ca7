"""Small strict checks of input values; each fault is one sentence led by the path to the key."""

from __future__ import annotations

import difflib
import math
from collections.abc import Iterable, Sequence
from typing import Any

import numpy as np

from thermo.errors import ModelError
from thermo.model.spin_model import Matrix


def show(value: object) -> str:
    """The value as it should stand in a sentence: on one line and not too long."""
    try:
        shown = repr(value)
    except (RecursionError, ValueError):  # endless nesting, or thousands of digits
        return "this value"
    return shown if len(shown) <= 60 else shown[:56] + " ..."


def fault(path: str, sentence: str) -> ModelError:
    """The error to raise for the key at ``path``."""
    return ModelError(f"{path}: {sentence}" if path else sentence)


def near(name: object, known: Iterable[str]) -> str:
    """A hint in words: the closest known name, or all of them."""
    known = list(known)
    close = difflib.get_close_matches(str(name), known, n=1, cutoff=0.6)
    if close:
        return f"did you mean {close[0]!r}?"
    return f"it can be {', '.join(map(repr, known))}" if known else "there are none here"


class Table:
    """One table of the input: its keys are checked against those allowed when it is made."""

    def __init__(self, value: object, path: str, allowed: Sequence[str]) -> None:
        if not isinstance(value, dict):
            raise fault(
                path,
                f"{show(value)} is not a table; give one with keys of {allowed[0]!r} and so on"
                if allowed
                else f"{show(value)} is not a table; give one",
            )
        self.path = path
        self.values: dict[str, Any] = value
        for key in value:
            if key not in allowed:
                raise fault(self.at(key), f"unknown key; {near(key, allowed)}")

    def at(self, key: object) -> str:
        """The path of a key of this table."""
        name = key if isinstance(key, str) and key.replace("-", "_").isidentifier() else show(key)
        return f"{self.path}.{name}" if self.path else str(name)

    def get(self, key: str, default: Any = None) -> Any:
        """The key's value, or the default where it is left out."""
        return self.values.get(key, default)

    def has(self, key: str) -> bool:
        """Whether the key is given."""
        return key in self.values

    def need(self, key: str, what: str) -> Any:
        """The key's value; where it is missing the error says what to give."""
        if key not in self.values:
            raise fault(self.at(key), f"missing; give {what}")
        return self.values[key]


def number(value: object, path: str) -> float:
    """A finite real number; true and false are not numbers."""
    if isinstance(value, bool) or not isinstance(value, int | float):
        hint = ", without quotes" if isinstance(value, str) else ""
        raise fault(path, f"{show(value)} is not a number; give one{hint}")
    try:
        result = float(value)
    except OverflowError:
        result = math.inf
    if not math.isfinite(result):
        raise fault(path, f"{show(value)} is not a finite number; give one")
    if abs(result) > 1e30:  # squares of products of two such numbers must not overflow
        raise fault(path, f"{show(value)} is too large to compute with; give one below 1e30")
    return result


def whole(value: object, path: str) -> int:
    """A whole number."""
    if isinstance(value, bool) or not isinstance(value, int):
        raise fault(path, f"{show(value)} is not a whole number; give one, such as 4")
    if abs(value) > 10**9:
        raise fault(path, f"{show(value)} is far too large; give a small whole number")
    return value


def word(value: object, path: str, choices: Sequence[str]) -> str:
    """One word of a fixed choice."""
    if not isinstance(value, str) or value not in choices:
        raise fault(path, f"{show(value)} is not known; {near(value, choices)}")
    return value


def string(value: object, path: str) -> str:
    """A text that is not empty."""
    if not isinstance(value, str) or not value.strip():
        raise fault(path, f"{show(value)} is not a name or text; give one in quotes")
    if any("\ud800" <= c <= "\udfff" for c in value):
        raise fault(path, f"{show(value)} holds half a character (a surrogate); write it whole")
    return value


def listing(value: object, path: str, what: str) -> list[Any]:
    """A list; the error says of what."""
    if not isinstance(value, list):
        raise fault(path, f"{show(value)} is not a list; give {what}")
    return value


def vector(value: object, path: str) -> Matrix:
    """Three finite numbers, shape (3,)."""
    entries = listing(value, path, "three numbers [x, y, z]")
    if len(entries) != 3:
        raise fault(path, f"has {len(entries)} entries; give three numbers [x, y, z]")
    return np.array([number(x, f"{path}[{k}]") for k, x in enumerate(entries)])


def matrix(value: object, path: str) -> Matrix:
    """A real matrix, shape (3, 3)."""
    rows = listing(value, path, "three rows of three numbers")
    if len(rows) != 3 or any(not isinstance(row, list) or len(row) != 3 for row in rows):
        raise fault(path, "is not a 3x3 matrix; give three rows of three numbers")
    return np.array([vector(row, f"{path}[{k}]") for k, row in enumerate(rows)])


def symmetric_matrix(value: object, path: str, why: str) -> Matrix:
    """A real symmetric matrix, shape (3, 3); ``why`` tells why it must be symmetric."""
    given = matrix(value, path)
    scale = float(np.abs(given).max())
    for a, b in ((0, 1), (0, 2), (1, 2)):
        # A relative 1e-9 lets values through that were computed elsewhere and rounded.
        if abs(given[a, b] - given[b, a]) > 1e-9 * scale:
            raise fault(
                path,
                f"the matrix is not symmetric (entry [{a}][{b}] is {given[a, b]:g}, "
                f"[{b}][{a}] is {given[b, a]:g}); {why}",
            )
    result: Matrix = (given + given.T) / 2
    return result
