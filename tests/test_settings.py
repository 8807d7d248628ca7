"""Settings of a sampled spectrum: what is taken, and one sentence for what is not."""

from __future__ import annotations

import math
from fractions import Fraction

import numpy as np
import pytest

from thermo.errors import RangeError
from thermo.spectrum.settings import Settings, check_sampling


def test_defaults() -> None:
    assert check_sampling() == Settings(None, 200, 1, None, None, None, None)


def test_whole_numbers_of_any_library() -> None:
    found = check_sampling(np.int32(4), np.int64(50), np.uint8(0), 300, 0, 0, np.float32(0.25))
    assert found == Settings(4, 50, 0, 300, 0, 0, 0.25)
    assert all(type(v) is int for v in found.identity().values())


@pytest.mark.parametrize(
    ("name", "value", "words"),
    [
        ("vectors", 0, "out of range"),
        ("vectors", 2.0, "2.0, which is not a whole number"),
        ("vectors", True, "True"),
        ("steps", None, "None"),
        ("steps", 1, "1"),
        ("steps", "200", "'200'"),
        ("seed", -1, "-1"),
        ("seed", 2**63, "out of range"),
        pytest.param("seed", 10**5000, "more than thirty digits", id="endless"),
        ("full_below", -5, "-5"),
        ("full_below", math.nan, "nan"),
        ("exact_states", -1, "-1"),
        ("exact_states", [3], "[3]"),
        ("trace_order", 7, "from 0 to 6"),
        ("trace_order", "x" * 500, "..."),
        ("accuracy", 0, "between 0 and 1"),
        ("accuracy", 1.5, "1.5"),
        ("accuracy", math.nan, "nan"),
        ("accuracy", "1 %", "'1 %'"),
        ("accuracy", True, "True"),
        ("accuracy", 10**400, "not a number"),
    ],
)
def test_what_cannot_be_is_said_in_one_sentence(name: str, value: object, words: str) -> None:
    with pytest.raises(RangeError) as caught:
        check_sampling(**{name: value})  # type: ignore[arg-type]
    told = str(caught.value)
    assert told.startswith(f"{name} is ")
    assert words in told
    assert "; give " in told
    assert len(told) < 200
    assert "\n" not in told


def test_accuracy_may_be_any_real_number() -> None:
    assert check_sampling(accuracy=Fraction(1, 100)).accuracy == 0.01  # type: ignore[arg-type]
