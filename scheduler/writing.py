"""Difference equations back to text, as the reader in `equations` takes them in.

The text reads as the same equations: parentheses stand only where they change what is computed.
"""

from __future__ import annotations

from collections.abc import Iterable
from fractions import Fraction
from typing import NamedTuple

from scheduler.equations import Equation, Operator, Tap, Term
from scheduler.quantities import decimal_text

_Part = tuple["_Part | str", ...]
"""Text in pieces that hold pieces: joining them once at the end takes linear time."""


class _Written(NamedTuple):
    """An operand as text: by itself, as part of a sum or on the left of `*`, and elsewhere."""

    loose: _Part | str
    factor: _Part | str
    tight: _Part | str
    is_zero: bool = False


def write_equations(equations: Iterable[Equation]) -> str:
    """The text of equations, one a line, that `parse_equations` reads as the same equations.

    Raises:
        InputError: for a number that has no finite decimal form, such as 1/3.
    """
    return "".join(
        f"{equation.signal}[n] = {_expression_text(equation.postfix)}\n" for equation in equations
    )


def _expression_text(postfix: Iterable[Term]) -> str:
    stack: list[_Written] = []
    for term in postfix:
        if isinstance(term, Operator):
            right, left = stack.pop(), stack.pop()
            stack.append(_WRITERS[term](left, right))
        else:
            stack.append(_written_operand(term))
    return _joined(stack.pop().loose)


def _written_operand(term: Tap | Fraction) -> _Written:
    text = str(term) if isinstance(term, Tap) else decimal_text(term)
    return _Written(text, text, text, is_zero=term == 0)


def _written_sum(left: _Written, right: _Written) -> _Written:
    loose = (left.loose, " + ", right.factor)
    closed = ("(", loose, ")")
    return _Written(loose, closed, closed)


def _written_difference(left: _Written, right: _Written) -> _Written:
    if left.is_zero:
        return _written_negation(right)
    loose = (left.loose, " - ", right.factor)
    closed = ("(", loose, ")")
    return _Written(loose, closed, closed)


def _written_negation(operand: _Written) -> _Written:
    """A minus sign, unless `0 - ...` spares the parentheses."""
    signed = ("-", operand.tight)
    loose = signed if operand.loose is operand.tight else ("0 - ", operand.factor)
    return _Written(loose, signed, signed)


def _written_product(left: _Written, right: _Written) -> _Written:
    text = (left.factor, "*", right.tight)
    return _Written(text, text, ("(", text, ")"))


_WRITERS = {
    Operator.ADD: _written_sum,
    Operator.SUBTRACT: _written_difference,
    Operator.MULTIPLY: _written_product,
}


def _joined(part: _Part | str) -> str:
    pieces: list[str] = []
    waiting: list[_Part | str] = [part]
    while waiting:
        piece = waiting.pop()
        if isinstance(piece, str):
            pieces.append(piece)
        else:
            waiting.extend(reversed(piece))
    return "".join(pieces)
