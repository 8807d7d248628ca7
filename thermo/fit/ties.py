"""Ties between parameters: arithmetic on names, read by a whitelist and never evaluated as code.

Allowed are numbers, parameter names, + - * /, a leading minus or plus, and parentheses. A tie is
worked out together with its exact derivatives (forward differentiation), so the slope of a tied
coupling with respect to the free parameters costs nothing.
"""

from __future__ import annotations

import ast
import difflib
import math
import unicodedata
from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from thermo.errors import StudyError

Gradient = NDArray[np.float64]
MAX_LENGTH = 500
# A longer circle of ties is shown by its ends.
CIRCLE_SHOWN = 10

_ALLOWED = "use numbers, parameter names, + - * / and parentheses only"


@dataclass(frozen=True)
class Dual:
    """A number and its derivatives by the free parameters, shape (n_free,)."""

    value: float
    gradient: Gradient


@dataclass(frozen=True)
class Tie:
    """A parsed tie of one parameter to others."""

    parameter: str
    expression: str
    names: tuple[str, ...]
    tree: ast.expr

    def evaluate(self, values: Mapping[str, Dual]) -> Dual:
        """The tie's value and gradient; division by zero and overflow are a StudyError."""
        try:
            with np.errstate(all="ignore"):  # what is not finite is told below
                result = _evaluate(self.tree, values)
        except ZeroDivisionError:
            raise StudyError(
                f"parameters.{self.parameter}.tied = {self.expression!r} divides by zero at "
                f"{_state(self.names, values)}; keep the divisor away from zero by its bounds"
            ) from None
        if not (math.isfinite(result.value) and np.all(np.isfinite(result.gradient))):
            raise StudyError(
                f"parameters.{self.parameter}.tied = {self.expression!r} is not finite at "
                f"{_state(self.names, values)}; narrow the bounds of what it depends on"
            )
        return result


def parse_tie(parameter: str, expression: str, known: Mapping[str, object]) -> Tie:
    """Read one tie; ``known`` holds every parameter name it may use."""
    where = f"parameters.{parameter}.tied = {_short(expression)!r}"
    if len(expression) > MAX_LENGTH:
        raise StudyError(
            f"{where} has {len(expression)} characters where {MAX_LENGTH} are allowed; "
            "shorten it or tie through an auxiliary parameter"
        )
    try:
        tree = ast.parse(expression.strip(), mode="eval").body
    except (SyntaxError, ValueError, RecursionError, MemoryError):
        raise StudyError(f"{where} is not an arithmetic expression; {_ALLOWED}") from None
    # The parser normalises names (NFKC), so compare them in that form.
    normal = {unicodedata.normalize("NFKC", name): name for name in known}
    names: list[str] = []
    tree = _check(tree, where, normal, names)
    return Tie(parameter, expression, tuple(dict.fromkeys(names)), tree)


def order_ties(ties: Mapping[str, Tie]) -> tuple[Tie, ...]:
    """The ties in an order in which each only needs earlier ones; a circle is a StudyError."""
    ordered: list[Tie] = []
    done: set[str] = set()
    for first in ties:
        if first in done:
            continue
        # Depth first with a list of its own: a long chain of ties would exhaust Python's stack.
        trail = {first: iter(ties[first].names)}
        while trail:
            name = next(reversed(trail))
            needed = next(trail[name], None)
            if needed is None:
                del trail[name]
                done.add(name)
                ordered.append(ties[name])
            elif needed in trail:
                names = list(trail)
                circle = [*names[names.index(needed) :], needed]
                if len(circle) > CIRCLE_SHOWN:
                    circle[CIRCLE_SHOWN // 2 : -(CIRCLE_SHOWN // 2)] = ["..."]
                raise StudyError(
                    f"the ties go in a circle, {' -> '.join(circle)}, so none of these has a "
                    "value; make one of them free or fixed"
                )
            elif needed in ties and needed not in done:
                trail[needed] = iter(ties[needed].names)
    return tuple(ordered)


def _check(node: ast.expr, where: str, known: Mapping[str, str], names: list[str]) -> ast.expr:
    """Walk the tree, refuse what is not on the list, and put the study's own names into it."""
    if isinstance(node, ast.BinOp):
        if not isinstance(node.op, ast.Add | ast.Sub | ast.Mult | ast.Div):
            raise StudyError(f"{where} uses an operator that is not allowed; {_ALLOWED}")
        left = _check(node.left, where, known, names)
        right = _check(node.right, where, known, names)
        return ast.BinOp(left=left, op=node.op, right=right)
    if isinstance(node, ast.UnaryOp):
        if not isinstance(node.op, ast.UAdd | ast.USub):
            raise StudyError(f"{where} uses an operator that is not allowed; {_ALLOWED}")
        return ast.UnaryOp(op=node.op, operand=_check(node.operand, where, known, names))
    if isinstance(node, ast.Constant):
        number = node.value
        if isinstance(number, bool) or not isinstance(number, int | float):
            raise StudyError(f"{where} holds {number!r}, which is not a number; {_ALLOWED}")
        try:
            value = float(number)
        except OverflowError:
            value = math.inf
        if not math.isfinite(value):
            raise StudyError(f"{where} holds a number too large to use; write a smaller one")
        return ast.Constant(value=value)
    if isinstance(node, ast.Name):
        if node.id not in known:
            close = difflib.get_close_matches(node.id, list(known), n=1)
            hint = f"did you mean {known[close[0]]!r}?" if close else f"known: {', '.join(known)}"
            raise StudyError(f"{where} names {node.id!r}, which is not a parameter; {hint}")
        names.append(known[node.id])
        return ast.Name(id=known[node.id])
    kind = "a call" if isinstance(node, ast.Call) else "something other than arithmetic"
    raise StudyError(f"{where} contains {kind}, which is not allowed; {_ALLOWED}")


def _evaluate(node: ast.expr, values: Mapping[str, Dual]) -> Dual:
    if isinstance(node, ast.Name):
        return values[node.id]
    if isinstance(node, ast.Constant):
        size = next(iter(values.values())).gradient.shape if values else (0,)
        number = node.value
        return Dual(float(number) if isinstance(number, int | float) else math.nan, np.zeros(size))
    if isinstance(node, ast.UnaryOp):
        inner = _evaluate(node.operand, values)
        if isinstance(node.op, ast.USub):
            return Dual(-inner.value, -inner.gradient)
        return inner
    if not isinstance(node, ast.BinOp):  # pragma: no cover - _check lets nothing else through
        raise StudyError(f"a tie contains something other than arithmetic; {_ALLOWED}")
    a, b = _evaluate(node.left, values), _evaluate(node.right, values)
    if isinstance(node.op, ast.Add):
        return Dual(a.value + b.value, a.gradient + b.gradient)
    if isinstance(node.op, ast.Sub):
        return Dual(a.value - b.value, a.gradient - b.gradient)
    if isinstance(node.op, ast.Mult):
        return Dual(a.value * b.value, a.gradient * b.value + a.value * b.gradient)
    quotient = a.value / b.value
    return Dual(quotient, (a.gradient - quotient * b.gradient) / b.value)


def _state(names: tuple[str, ...], values: Mapping[str, Dual]) -> str:
    return ", ".join(f"{name} = {values[name].value:g}" for name in names) or "all values"


def _short(text: str) -> str:
    return text if len(text) <= 60 else text[:57] + "..."
