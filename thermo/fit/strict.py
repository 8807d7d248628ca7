"""Strict reading of a study's tables: every key is known, every value checked, every path told."""

from __future__ import annotations

import difflib
import math
from collections.abc import Mapping, Sequence

from thermo.errors import StudyError


def did_you_mean(word: str, known: Sequence[str]) -> str:
    """A hint that ends a sentence about an unknown word."""
    close = difflib.get_close_matches(word, list(known), n=1, cutoff=0.6)
    if close:
        return f"did you mean {close[0]!r}?"
    return "use one of " + ", ".join(known) if known else "leave it out"


class Section:
    """One table of the study file: take its keys one by one, then ``close`` it."""

    def __init__(self, content: object, path: str, source: str) -> None:
        self.path = path
        self.source = source
        if not isinstance(content, Mapping):
            raise StudyError(f"{source}: {path or 'the study'} must be a table of keys and values")
        self.content: dict[str, object] = {str(key): value for key, value in content.items()}
        self.known: list[str] = []

    def at(self, key: str) -> str:
        """The path to a key, for messages."""
        return f"{self.path}.{key}" if self.path else key

    def fail(self, key: str, reason: str) -> StudyError:
        """The error for one key; the caller raises it."""
        return StudyError(f"{self.source}: {self.at(key)} {reason}")

    def has(self, key: str) -> bool:
        """Whether the key is given (it is known from now on)."""
        self.known.append(key)
        return key in self.content

    def raw(self, key: str, what: str) -> object:
        """A required value of any kind."""
        if not self.has(key):
            close = difflib.get_close_matches(key, list(self.content), n=1, cutoff=0.7)
            hint = f" (is {close[0]!r} a misspelling of it?)" if close else ""
            raise self.fail(key, f"is missing{hint}; give {what}")
        return self.content[key]

    def text(self, key: str, what: str, default: str | None = None) -> str:
        """A string; required unless there is a default."""
        if default is not None and not self.has(key):
            return default
        value = self.raw(key, what)
        if not isinstance(value, str) or not value.strip():
            raise self.fail(key, f"= {value!r} is not a text; give {what}")
        return value

    def word(self, key: str, words: Sequence[str], default: str | None = None) -> str:
        """One word of a list."""
        value = self.text(key, "one of " + ", ".join(words), default)
        if value not in words:
            raise self.fail(key, f"= {value!r} is unknown; {did_you_mean(value, words)}")
        return value

    def flag(self, key: str, default: bool) -> bool:
        """true or false."""
        value = self.content[key] if self.has(key) else default
        if not isinstance(value, bool):
            raise self.fail(key, f"= {value!r} is neither true nor false; write one of them")
        return value

    def number(self, key: str, what: str, default: float | None = None) -> float:
        """A finite number; required unless there is a default."""
        if default is not None and not self.has(key):
            return default
        return self._finite(key, self.raw(key, what), what)

    def optional_number(self, key: str, what: str) -> float | None:
        """A finite number or None where the key is not given."""
        return self.number(key, what) if self.has(key) else None

    def interval(self, key: str, what: str) -> tuple[float, float] | None:
        """Two finite numbers in ascending order, or None where the key is not given."""
        if not self.has(key):
            return None
        value = self.content[key]
        if not isinstance(value, Sequence) or isinstance(value, str) or len(value) != 2:
            raise self.fail(key, f"= {value!r} is not a pair of numbers; give {what}")
        low, high = (self._finite(key, item, what) for item in value)
        if low >= high:
            raise self.fail(key, f"= [{low:g}, {high:g}] is not ascending; give {what}")
        return low, high

    def intervals(self, key: str, what: str) -> tuple[tuple[float, float], ...]:
        """A list of ascending pairs, or a single one; empty where the key is not given."""
        if not self.has(key):
            return ()
        value = self.content[key]
        if not isinstance(value, Sequence) or isinstance(value, str):
            raise self.fail(key, f"= {value!r} is not a list; give {what}")
        items = value if value and all(isinstance(v, Sequence) for v in value) else [value]
        found = []
        for item in items:
            one = Section({key: item}, self.path, self.source).interval(key, what)
            found += [one] if one is not None else []
        return tuple(found)

    def words(self, key: str, what: str) -> tuple[str, ...] | None:
        """A list of texts (or one), None where the key is not given."""
        if not self.has(key):
            return None
        value = self.content[key]
        items = [value] if isinstance(value, str) else value
        if (
            not isinstance(items, Sequence)
            or not items
            or not all(isinstance(item, str) for item in items)
        ):
            raise self.fail(key, f"= {value!r} is not a list of texts; give {what}")
        return tuple(str(item).strip() for item in items)

    def count(self, key: str, what: str, most: int) -> int | None:
        """A whole number from 0 to ``most``; None where the key is not given."""
        if not self.has(key):
            return None
        value = self.content[key]
        if isinstance(value, bool) or not isinstance(value, int) or not 0 <= value <= most:
            raise self.fail(key, f"= {value!r} is not a whole number from 0 to {most}; give {what}")
        return value

    def identifier(self, key: str, what: str) -> str:
        """A word of letters, digits and _ that begins with a letter; "" where it is not given."""
        if not self.has(key):
            return ""
        word = self.text(key, what)
        if not word.isidentifier() or word.startswith("_"):
            raise self.fail(
                key, f"= {word!r} is not a word of letters, digits and underscores; give {what}"
            )
        return word

    def pair(self, key: str, what: str) -> tuple[float, float]:
        """Two finite numbers in any order; required."""
        value = self.raw(key, what)
        if not isinstance(value, Sequence) or isinstance(value, str) or len(value) != 2:
            raise self.fail(key, f"= {value!r} is not a pair of numbers; give {what}")
        first, second = (self._finite(key, item, what) for item in value)
        return first, second

    def close(self) -> None:
        """Refuse whatever key was never asked for."""
        known = sorted(set(self.known))
        for key in self.content:
            if key not in known:
                raise self.fail(key, f"is not a known key here; {did_you_mean(key, known)}")

    def _finite(self, key: str, value: object, what: str) -> float:
        if isinstance(value, bool) or not isinstance(value, int | float):
            raise self.fail(key, f"= {value!r} is not a number; give {what}")
        try:
            number = float(value)
        except OverflowError:
            number = math.inf
        if not math.isfinite(number):
            raise self.fail(key, f"= {value!r} is not a finite number; give {what}")
        return number
