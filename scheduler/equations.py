"""Difference equations: from text to one postfix form a signal.

A reader of its own for a small language: `w[n] = x[n] + 0.5*w[n-1]`, one equation a line. Nothing
of the text is ever executed, and time grows in proportion to its length. Loops without a delay are
not looked for here: they show only in the graph.
"""

from __future__ import annotations

import difflib
import keyword
import re
from bisect import bisect_right
from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass, field
from enum import StrEnum
from fractions import Fraction
from functools import cached_property
from typing import NamedTuple, NoReturn

from scheduler.errors import InputError
from scheduler.quantities import exact_number, is_too_large, shortened

LONGEST_TEXT = 1_000_000
"""Characters."""

LONGEST_NAME = 100
"""Characters."""

DEEPEST_NESTING = 100
"""Parentheses within parentheses."""

LONGEST_DELAY = 10**6
"""Samples."""


class Operator(StrEnum):
    """What an operation does with the two operands before it in the postfix form."""

    ADD = "add"
    SUBTRACT = "subtract"
    MULTIPLY = "multiply"


@dataclass(frozen=True)
class Tap:
    """The value of `signal`, `delay` >= 0 samples ago; `str()` is `s[n-3]`."""

    signal: str
    delay: int

    def __str__(self) -> str:
        return f"{self.signal}[n-{self.delay}]" if self.delay else f"{self.signal}[n]"


Term = Tap | Fraction | Operator


@dataclass(frozen=True)
class Equation:
    """`signal`[n] = the value of `postfix`; `line` is where it stands, which does not make it."""

    signal: str
    postfix: tuple[Term, ...]
    line: int = field(compare=False)


def parse_equations(
    text: str, inputs: Sequence[str], outputs: Sequence[str]
) -> tuple[Equation, ...]:
    """Reads difference equations, one a line.

    `+`, `-` and `*` have their usual precedence and go left to right; a sign binds tighter than
    `*`. What consists of numbers alone is computed at once, exactly, so `-0.5*x[n]` is one
    multiplication; a minus before a signal is a subtraction from 0. `#` starts a comment, and a
    line break inside parentheses or after an operator or `=` goes on with the equation.

    Args:
        text: the equations, in any order.
        inputs: names of the signals that come from outside.
        outputs: names of the signals that leave.

    Returns:
        The equations in the order of the text; every signal is an input or defined exactly once.

    Raises:
        InputError: for the first fault, at "line 3, column 14" (both counted from 1).
    """
    _check_ports(inputs, "input")
    _check_ports(outputs, "output")
    if len(text) > LONGEST_TEXT:
        raise InputError(
            f"the equations are longer than {LONGEST_TEXT} characters",
            remedy="split the algorithm into several designs",
        )
    source = _Source(text)
    reader = _Reader(source)
    for statement in _statements(source):
        reader.read(statement)
    if not reader.equations:
        raise InputError("there is no equation", remedy="write one, as in y[n] = 0.5*x[n]")
    _check_signals(reader, inputs, outputs)
    return tuple(reader.equations.values())


# Names of signals


_NAME = re.compile(r"[A-Za-z_][A-Za-z0-9_]*")


def _name_fault(name: str) -> str:
    """Why a name cannot be a signal's; empty where it can."""
    if not isinstance(name, str) or not _NAME.fullmatch(name):
        return "is not a name of ASCII letters, digits and underscores"
    if keyword.iskeyword(name):
        return "is a reserved word"
    if len(name) > LONGEST_NAME:
        return f"is longer than {LONGEST_NAME} characters"
    return ""


def _check_ports(names: Sequence[str], what: str) -> None:
    seen: set[str] = set()
    for name in names:
        shown = shortened(str(name))
        if fault := _name_fault(name):
            raise InputError(f"{what} '{shown}' {fault}", remedy="choose a name such as x or x_2")
        if name in seen:
            raise InputError(f"{what} '{shown}' stands twice", remedy=f"name each {what} once")
        seen.add(name)


def _check_signals(reader: _Reader, inputs: Sequence[str], outputs: Sequence[str]) -> None:
    for name in inputs:
        if name in reader.defined:
            reader.source.refuse(
                reader.defined[name],
                f"'{name}' is an input and has an equation too",
                "take it out of the inputs or rename the signal",
            )
    known = [*reader.defined, *inputs]
    _check_used(reader, known)
    names = set(known)
    for name in outputs:
        if name not in names:
            raise InputError(
                f"output '{name}' has no equation", remedy=_near(name, known, f"define {name}[n]")
            )


def _check_used(reader: _Reader, known: Sequence[str]) -> None:
    names = set(known)
    for name, offset in reader.used.items():
        if name not in names:
            reader.source.refuse(
                offset,
                f"signal '{name}' is used but never defined",
                _near(name, known, "give it an equation or add it to the inputs"),
            )


def _near(name: str, known: Sequence[str], otherwise: str) -> str:
    """A way out of an unknown name: the known one that looks most like it."""
    near = difflib.get_close_matches(name, known, n=1)
    return f"did you mean '{near[0]}'?" if near else otherwise


# Tokens


class _Kind(StrEnum):
    """The tokens of the language, named as the groups of the pattern below."""

    SPACE = "space"
    LINE_END = "line_end"
    NUMBER = "number"
    TAP = "tap"
    NAME = "name"
    SYMBOL = "symbol"
    OTHER = "other"


# The quantifiers are possessive (`*+`): nothing is read twice, whatever the text.
_TOKEN = re.compile(
    r"""
      (?P<space>    (?:[^\S\r\n] | \#[^\r\n]*+)++ )
    | (?P<line_end> \r\n | \r | \n )
    | (?P<number>   \.?[0-9] (?:[eE][+-]?[0-9] | [0-9.])*+ )
    | (?P<tap>      [^\W\d]\w*+ [ \t]*+ \[ [^\[\]\r\n]*+ \] )
    | (?P<name>     [^\W\d]\w*+ )
    | (?P<symbol>   \*\* | // | [-+*()=] )
    | (?P<other>    . )
    """,
    re.VERBOSE | re.DOTALL,
)
_INDEX = re.compile(r"\s*n\s*(?:([-+])\s*([0-9]+)\s*)?")
_SIGNS = ("+", "-")
_OPERATORS = ("+", "-", "*")


class _Token(NamedTuple):
    kind: _Kind
    text: str
    offset: int


@dataclass(frozen=True)
class _Source:
    """The text, and where in it a token stands."""

    text: str

    @cached_property
    def line_starts(self) -> list[int]:
        return [0, *(end.end() for end in re.finditer(r"\r\n|\r|\n", self.text))]

    def line(self, offset: int) -> int:
        return bisect_right(self.line_starts, offset)

    def place(self, offset: int) -> str:
        line = self.line(offset)
        return f"line {line}, column {offset - self.line_starts[line - 1] + 1}"

    def refuse(self, offset: int, what: str, remedy: str) -> NoReturn:
        raise InputError(what, place=self.place(offset), remedy=remedy)

    def tokens(self) -> Iterator[_Token]:
        for match in _TOKEN.finditer(self.text):
            kind = _Kind(match.lastgroup or "other")
            if kind is not _Kind.SPACE:
                yield _Token(kind, match[0], match.start())


def _statements(source: _Source) -> Iterator[list[_Token]]:
    """The tokens of one equation after the other, without the line breaks."""
    statement: list[_Token] = []
    depth = 0
    for token in source.tokens():
        if token.kind is not _Kind.LINE_END:
            depth += (token.text == "(") - (token.text == ")")
            statement.append(token)
        elif statement and depth <= 0 and statement[-1].text not in ("=", *_OPERATORS):
            yield statement
            statement = []
    if statement:
        yield statement


# Expressions


class _Pending(NamedTuple):
    """An operator that waits for its right operand, or an open parenthesis (binding 0)."""

    operator: Operator | None
    binding: int
    offset: int


_BINARY = {
    "+": (Operator.ADD, 1),
    "-": (Operator.SUBTRACT, 1),
    "*": (Operator.MULTIPLY, 2),
}
_SIGN_BINDING = 3


@dataclass
class _Reader:
    """Reads statements into equations and notes where each signal is defined and first used.

    Operators wait on a stack of its own until their right operand is complete (the shunting-yard
    method, Dijkstra 1961), so nesting costs no recursion.
    """

    source: _Source
    equations: dict[str, Equation] = field(default_factory=dict)
    defined: dict[str, int] = field(default_factory=dict)
    used: dict[str, int] = field(default_factory=dict)
    postfix: list[Term] = field(default_factory=list)
    pending: list[_Pending] = field(default_factory=list)
    depth: int = 0

    def read(self, statement: list[_Token]) -> None:
        signal = self._left_side(statement)
        if signal in self.defined:
            first = self.source.place(self.defined[signal])
            self.source.refuse(
                statement[0].offset,
                f"signal '{signal}' is defined a second time (first at {first})",
                "rename one of the two",
            )
        self.defined[signal] = statement[0].offset
        line = self.source.line(statement[0].offset)
        self.equations[signal] = Equation(signal, self._right_side(statement), line)

    def _left_side(self, statement: list[_Token]) -> str:
        head = statement[0]
        if head.kind is _Kind.SYMBOL and head.text in _OPERATORS:
            self.source.refuse(
                head.offset,
                f"an equation cannot start with '{head.text}'",
                "to go on with the equation before, end its line with the operator",
            )
        if len(statement) < 2 or statement[1].text != "=" or head.kind is not _Kind.TAP:
            self._refuse_left_side(statement)
        tap = self._tap(head)
        if tap.delay:
            self._refuse_left_side(statement)
        return tap.signal

    def _refuse_left_side(self, statement: list[_Token]) -> NoReturn:
        head = statement[0]
        if head.kind in (_Kind.OTHER, _Kind.NAME):
            self._refuse_operand(head, statement[1].text if len(statement) > 1 else "")
        self.source.refuse(
            head.offset,
            "this is not an equation of the form name[n] = expression",
            "write the signal at sample n on the left, as in y[n] = 0.5*x[n]",
        )

    def _right_side(self, statement: list[_Token]) -> tuple[Term, ...]:
        self.postfix, self.pending, self.depth = [], [], 0
        following = [*(token.text for token in statement[3:]), ""]
        wants_operand = True
        for token, after in zip(statement[2:], following, strict=False):
            take = self._before_operand if wants_operand else self._after_operand
            wants_operand = take(token, after)
        if wants_operand:
            self.source.refuse(
                statement[-1].offset,
                f"nothing follows '{statement[-1].text}'",
                "write a number or a signal after it",
            )
        self._complete()
        if self.pending:
            self._refuse_open()
        return tuple(self.postfix)

    def _before_operand(self, token: _Token, following: str) -> bool:
        """Takes a token where an operand or its sign may stand; True while one is missing."""
        if token.kind is _Kind.NUMBER:
            self.postfix.append(self._number(token))
        elif token.kind is _Kind.TAP:
            tap = self._tap(token)
            self.used.setdefault(tap.signal, token.offset)
            self.postfix.append(tap)
        elif token.text == "(":
            self._open(token)
            return True
        elif token.text in _SIGNS:
            self._sign(token)
            return True
        else:
            self._refuse_operand(token, following)
        return False

    def _after_operand(self, token: _Token, following: str) -> bool:
        """Takes a token where an operator may stand; True when an operand has to follow."""
        if token.text in _BINARY:
            operator, binding = _BINARY[token.text]
            self._complete(binding)
            self.pending.append(_Pending(operator, binding, token.offset))
            return True
        if token.text != ")":
            self._refuse_operator(token, following)
        self._complete()
        if not self.pending:
            self.source.refuse(token.offset, "this ')' closes nothing", "take it away")
        self.pending.pop()
        self.depth -= 1
        return False

    def _open(self, token: _Token) -> None:
        self.depth += 1
        if self.depth > DEEPEST_NESTING:
            self.source.refuse(
                token.offset,
                f"parentheses are nested deeper than {DEEPEST_NESTING}",
                "give inner parts equations of their own",
            )
        self.pending.append(_Pending(None, 0, token.offset))

    def _sign(self, token: _Token) -> None:
        # A minus is a subtraction from a 0 that stands where the minus does; on a number both
        # fold into one negative number.
        if token.text == "-":
            self.postfix.append(Fraction(0))
            self.pending.append(_Pending(Operator.SUBTRACT, _SIGN_BINDING, token.offset))

    def _complete(self, binding: int = 1) -> None:
        """Moves waiting operators that bind at least as tightly into the postfix form."""
        while self.pending and self.pending[-1].binding >= binding:
            operator, _, offset = self.pending.pop()
            if operator is not None:
                self._apply(operator, offset)

    def _apply(self, operator: Operator, offset: int) -> None:
        left, right = self.postfix[-2:]
        if not (isinstance(left, Fraction) and isinstance(right, Fraction)):
            self.postfix.append(operator)
            return
        value = _computed(operator, left, right)
        if is_too_large(value):
            self.source.refuse(
                offset,
                "this result of numbers alone is too large or too fine",
                "write a number of ordinary size and precision",
            )
        self.postfix[-2:] = [value]

    def _number(self, token: _Token) -> Fraction:
        try:
            return exact_number(token.text)
        except InputError as fault:
            raise fault.within(self.source.place(token.offset)) from None

    def _tap(self, token: _Token) -> Tap:
        name, _, rest = token.text.partition("[")
        name = name.rstrip()
        if fault := _name_fault(name):
            self.source.refuse(
                token.offset,
                f"signal '{shortened(name)}' {fault}",
                "choose a name such as x or x_2",
            )
        return Tap(name, self._delay(token, name, rest[:-1]))

    def _delay(self, token: _Token, name: str, index: str) -> int:
        match = _INDEX.fullmatch(index)
        if match is None:
            self.source.refuse(
                token.offset,
                f"'{shortened(token.text)}' is not a sample of '{name}'",
                f"write {name}[n], or {name}[n-3] for three samples ago",
            )
        digits = (match[2] or "").lstrip("0")
        if match[1] == "+" and digits:
            self.source.refuse(
                token.offset,
                f"'{shortened(token.text)}' is a future sample of '{name}'",
                "delay the other signals instead",
            )
        if len(digits) > 7 or int(digits or 0) > LONGEST_DELAY:
            self.source.refuse(
                token.offset,
                f"'{shortened(token.text)}' is delayed by more than {LONGEST_DELAY} samples",
                "use a shorter delay",
            )
        return int(digits or 0)

    def _refuse_operand(self, token: _Token, following: str) -> NoReturn:
        what, remedy = _operand_fault(token, following)
        self.source.refuse(token.offset, what, remedy)

    def _refuse_operator(self, token: _Token, following: str) -> NoReturn:
        # The next equation has begun, and a parenthesis of this one is still open.
        if self.depth and "=" in (token.text, following):
            self._complete()
            self._refuse_open()
        what, remedy = _operator_fault(token)
        self.source.refuse(token.offset, what, remedy)

    def _refuse_open(self) -> NoReturn:
        self.source.refuse(self.pending[-1].offset, "this '(' is never closed", "close it with ')'")


def _computed(operator: Operator, left: Fraction, right: Fraction) -> Fraction:
    if operator is Operator.MULTIPLY:
        return left * right
    return left + right if operator is Operator.ADD else left - right


# What a token does wrong where it stands: the fault and the way out


def _operand_fault(token: _Token, following: str) -> tuple[str, str]:
    if token.kind is _Kind.NAME:
        return _name_alone_fault(token.text, following)
    if token.kind is _Kind.OTHER or token.text in _SYMBOL_FAULTS:
        return _operator_fault(token)
    return f"a number or a signal is missing before '{token.text}'", "write one there"


def _name_alone_fault(name: str, following: str) -> tuple[str, str]:
    shown = shortened(name)
    if name.lower() in ("nan", "inf", "infinity"):
        return f"'{shown}' is not a number to compute with", "write a finite number"
    if following == "(":
        return f"'{shown}(...)' is a function call", "only +, - and * are operations"
    if fault := _name_fault(name):
        return f"'{shown}' {fault}", "choose a name such as x or x_2"
    if following == "[":
        return f"the '[' after '{shown}' is never closed", f"write {shown}[n] or {shown}[n-1]"
    return f"signal '{shown}' has no sample", f"write {shown}[n] or {shown}[n-1]"


_SYMBOL_FAULTS: Mapping[str, tuple[str, str]] = {
    "/": ("division is not an operation", "multiply by the reciprocal, as in 0.5*x[n]"),
    "//": ("division is not an operation", "multiply by the reciprocal, as in 0.5*x[n]"),
    "**": ("a power is not an operation", "multiply the signal by itself, as in x[n]*x[n]"),
    "^": ("a power is not an operation", "multiply the signal by itself, as in x[n]*x[n]"),
    "=": (
        "a second '=' in one equation",
        "write one equation a line; a line that ends with an operator goes on",
    ),
    "[": ("a '[' without a name before it", "write a sample of a signal as in x[n-1]"),
    "]": ("a ']' without a '[' before it", "write a sample of a signal as in x[n-1]"),
}


def _operator_fault(token: _Token) -> tuple[str, str]:
    if token.text in _SYMBOL_FAULTS:
        return _SYMBOL_FAULTS[token.text]
    shown = shortened(token.text)
    if token.kind is _Kind.OTHER:
        code = f"U+{ord(token.text):04X}"
        return (
            f"the character '{shown}' ({code}) has no place in an equation",
            "use names, numbers, + - * and parentheses",
        )
    return f"an operator is missing before '{shown}'", "write +, - or * between the two"
