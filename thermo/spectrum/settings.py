"""What a sampled spectrum may be told: checked once, then handed on as one object."""

from __future__ import annotations

import operator
from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

from thermo.errors import RangeError

# Sampled weights are moment-matched by a polynomial; beyond this degree the exact traces cost
# more than the noise they remove.
LARGEST_TRACE_ORDER = 6
LARGEST_COUNT = 1_000_000
LARGEST_DIMENSION = 2**31 - 1
LARGEST_SEED = 2**63 - 1


@dataclass(frozen=True)
class Settings:
    """The settings of a sampled spectrum.

    vectors: random vectors R per sector; with ``accuracy``, the number to begin with (None: 2,
    or as many as cost no more where there are few sectors).
    steps: Lanczos steps per vector. seed: of all random vectors, with sector and vector.
    full_below: sectors up to this dimension are solved fully (None: what pays off; 0: none).
    exact_states: most exact states per sector at each edge (None: all that converge; 0: none).
    trace_order: highest power of H whose exact trace the weights reproduce (0: none; None: 6, or
    less where traces would cost more than the vectors).
    accuracy: relative standard error to reach by adding vectors (None: as many as stated).
    """

    vectors: int | None = None
    steps: int = 200
    seed: int = 1
    full_below: int | None = None
    exact_states: int | None = None
    trace_order: int | None = None
    accuracy: float | None = None

    def identity(self) -> dict[str, str | int | float]:
        """What a finished piece of work depends on, for ``Checkpoint``.

        ``accuracy`` is left out: it only decides how many vectors there will be.
        """
        return {
            "vectors": "automatic" if self.vectors is None else self.vectors,
            "steps": self.steps,
            "seed": self.seed,
            "full_below": "automatic" if self.full_below is None else self.full_below,
            "exact_states": "all" if self.exact_states is None else self.exact_states,
            "trace_order": "automatic" if self.trace_order is None else self.trace_order,
        }


# name: (smallest, largest, None allowed, why and what to do)
_RANGES: Mapping[str, tuple[int, int, bool, str]] = {
    "vectors": (1, LARGEST_COUNT, True, "two or more give error bars"),
    "steps": (10, LARGEST_COUNT, False, "100 to 300 are usual"),
    "seed": (0, LARGEST_SEED, False, "the same seed gives the same levels"),
    "full_below": (0, LARGEST_DIMENSION, True, "0 samples every sector"),
    "exact_states": (0, LARGEST_COUNT, True, "0 takes none, leaving it out all that converge"),
    "trace_order": (0, LARGEST_TRACE_ORDER, True, "0 leaves the weights as they are sampled"),
}


def check_sampling(
    vectors: int | None = Settings.vectors,
    steps: int = Settings.steps,
    seed: int = Settings.seed,
    full_below: int | None = Settings.full_below,
    exact_states: int | None = Settings.exact_states,
    trace_order: int | None = Settings.trace_order,
    accuracy: float | None = Settings.accuracy,
) -> Settings:
    """The settings, each checked; RangeError names the first that cannot be."""
    counts = {
        "vectors": vectors,
        "steps": steps,
        "seed": seed,
        "full_below": full_below,
        "exact_states": exact_states,
        "trace_order": trace_order,
    }
    checked = {name: _whole(name, value) for name, value in counts.items()}
    wanted = None if accuracy is None else _accuracy(accuracy)
    if wanted is not None and checked["vectors"] == 1:
        raise RangeError(
            "an accuracy cannot be reached with families of one vector, which have no error bar; "
            "leave vectors out or give two or more"
        )
    return Settings(**checked, accuracy=wanted)


def _whole(name: str, value: Any) -> Any:
    low, high, optional, advice = _RANGES[name]
    if value is None and optional:
        return None
    wanted = f"give a whole number from {low} to {high} ({advice})"
    try:
        number = operator.index(value)
    except TypeError:
        number = None
    if number is None or isinstance(value, bool):
        raise RangeError(f"{name} is {_shown(value)}, which is not a whole number; {wanted}")
    if not low <= number <= high:
        raise RangeError(f"{name} is {_shown(number)}, which is out of range; {wanted}")
    return number


def _accuracy(value: Any) -> float:
    wanted = "give a number between 0 and 1 (0.01 is one per cent)"
    try:
        number = float(value) if not isinstance(value, (bool, str, bytes)) else None
    except (TypeError, ValueError, OverflowError):
        number = None
    if number is None:
        raise RangeError(f"accuracy is {_shown(value)}, which is not a number; {wanted}")
    if not 0 < number < 1:
        raise RangeError(f"accuracy is {number:g}, which no error bar can be; {wanted}")
    return number


def _shown(value: Any) -> str:
    if isinstance(value, int) and abs(value) > 10**30:  # its digits may be without end
        return "a number of more than thirty digits"
    text = repr(value)
    return text if len(text) <= 40 else text[:36] + " ..."
