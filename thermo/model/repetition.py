"""How a cell repeats: the keys repeat or size, and boundary."""

from __future__ import annotations

from thermo.model.cells import determinant
from thermo.model.checks import fault, listing, show, whole, word

Rows = tuple[tuple[int, ...], ...]
BOUNDARIES = ("periodic", "open")


def read_superlattice(
    value: object, path: str, unit: int = 1, dimension: int | None = None
) -> Rows:
    """The rows of L, from a number, a list of positive numbers, or a square integer matrix.

    Entries count ``unit`` to a cell (2 where a chain's length counts the sites of a cell of
    two). ``dimension`` is the number of rows wanted; None allows 1 to 3.
    """
    given = [value] if isinstance(value, int) and not isinstance(value, bool) else value
    entries = listing(given, path, "the number of cells along each direction, or a matrix")
    wanted = f"{dimension}" if dimension else "1 to 3"
    if not (len(entries) == dimension if dimension else 1 <= len(entries) <= 3):
        raise fault(path, f"has {len(entries)} entries; give {wanted}, one for each direction")
    if any(isinstance(row, list) for row in entries):
        rows = []
        for k, row in enumerate(entries):
            if not isinstance(row, list) or len(row) != len(entries):
                raise fault(
                    f"{path}[{k}]",
                    f"{show(row)} is not a row of a square matrix; give "
                    f"{len(entries)} whole number(s) in brackets",
                )
            rows.append(tuple(whole(x, f"{path}[{k}][{m}]") for m, x in enumerate(row)))
        if determinant(rows) == 0:
            raise fault(path, "its rows are not independent, so it bounds no cluster; change one")
    else:
        lengths = [whole(x, f"{path}[{k}]") for k, x in enumerate(entries)]
        for k, length in enumerate(lengths):
            if length < 1:
                raise fault(f"{path}[{k}]", f"{length} is not a positive number; give 1 or more")
        rows = [
            tuple(n if k == m else 0 for m in range(len(lengths))) for k, n in enumerate(lengths)
        ]
    for k, row in enumerate(rows):
        for x in row:
            if x % unit:
                raise fault(
                    f"{path}[{k}]",
                    f"{x} sites do not fill cells of {unit}; give a multiple of {unit}",
                )
    return tuple(tuple(x // unit for x in row) for row in rows)


def read_boundary(value: object, path: str, dimension: int) -> tuple[bool, ...]:
    """Whether each row of L is periodic, from one word or one word for each."""
    if isinstance(value, list):
        if len(value) != dimension:
            raise fault(
                path,
                f"has {len(value)} entries; give one word, or {dimension} words, "
                "one for each direction",
            )
        return tuple(word(x, f"{path}[{k}]", BOUNDARIES) == "periodic" for k, x in enumerate(value))
    return (word(value, path, BOUNDARIES) == "periodic",) * dimension
