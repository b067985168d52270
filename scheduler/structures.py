"""From a filter's coefficients to the text of its difference equations, in a named structure.

The text leads into the graph on the one way that hand-written equations take. The input is always
x and the output y. Whether the filter is stable, or a structure suits its word lengths, is not
checked here.

A coefficient of exactly 0 leaves its term out; exactly 1 or -1 costs no multiplication. In a
recursion the newest sample is added last: the loop through it then holds a single addition, where
adding it first would put all of them into the loop and lower the sample rate that can be reached.

Signs are those of scipy.signal (lfilter, sosfilt): B(z) = b0 + b1 z^-1 + ... and
A(z) = a0 + a1 z^-1 + ..., so feedback is subtracted. Reflection coefficients are those of
A_m(z) = A_{m-1}(z) + k_m z^-m A_{m-1}(1/z), as in Proakis and Manolakis, "Digital Signal
Processing"; Oppenheim and Schafer, "Discrete-Time Signal Processing", give them the other sign.
"""

from __future__ import annotations

import re
from collections.abc import Callable, Mapping, Sequence
from decimal import Decimal
from fractions import Fraction
from itertools import pairwise
from numbers import Real
from pathlib import Path
from typing import TypeGuard

from scheduler.equations import Tap
from scheduler.errors import InputError
from scheduler.quantities import decimal_text, exact_number, is_too_large, shortened

Number = Fraction | Decimal | str | int | float
Coefficients = Sequence[Number] | Sequence[Sequence[Number]]

_Row = tuple[Fraction, ...]
_Sum = list[tuple[Fraction, Tap]]
"""Coefficients and the samples that they multiply."""

_Writer = Callable[[Coefficients], list[str]]

_ONE = Fraction(1)
_ROW_LENGTH = 6


def equations_text(structure: str, coefficients: Coefficients) -> str:
    """The difference equations of a filter, one a line, from input x to output y.

    Args:
        structure: a name among STRUCTURES, which says what its coefficients are.
        coefficients: numbers, or rows of numbers as `read_coefficients` gives them (rows of six
            for biquads; for all other structures rows are read one after the other). A float is
            taken as the shortest decimal that denotes it, so 0.1 is exactly 1/10.

    Raises:
        InputError: for an unknown structure and for coefficients that do not fit it.
    """
    if structure not in _STRUCTURES:
        raise InputError(
            f"structure '{shortened(structure)}' is unknown",
            remedy=f"the structures are {', '.join(_STRUCTURES)}",
        )
    if not len(coefficients):
        raise InputError("there are no coefficients", remedy="give at least one")
    write = _STRUCTURES[structure][1]
    return "".join(f"{line}\n" for line in write(coefficients))


def read_coefficients(path: Path) -> tuple[_Row, ...]:
    """The rows of numbers in a text file, separated by commas or blanks; `#` starts a comment.

    Raises:
        InputError: for a file that cannot be read, that holds no number, or that holds anything
            but numbers (with its name and the line).
    """
    try:
        text = path.read_text(encoding="utf-8-sig")
    except (OSError, UnicodeDecodeError) as error:
        raise InputError(
            "the coefficients cannot be read",
            place=str(path),
            remedy=f"check that it is a text file ({_reason(error)})",
        ) from None
    lines = (line.partition("#")[0].strip() for line in text.splitlines())
    rows = tuple(
        _read_row(line, f"{path}: line {number}") for number, line in enumerate(lines, 1) if line
    )
    if not rows:
        raise InputError(
            "the file holds no coefficient", place=str(path), remedy="write one number a line"
        )
    return rows


def _reason(error: OSError | UnicodeDecodeError) -> str:
    return error.strerror or "unreadable" if isinstance(error, OSError) else "not in UTF-8"


def _read_row(line: str, place: str) -> _Row:
    return tuple(_exact(entry, place) for entry in re.split(r"\s*,\s*|\s+", line))


# Coefficients as exact numbers


def _exact(value: object, place: str) -> Fraction:
    """The exact value of a coefficient that a finite decimal number can denote."""
    try:
        return _converted(value)
    except InputError as fault:
        raise fault.within(place) from None


def _converted(value: object) -> Fraction:
    if isinstance(value, int | Fraction) and not isinstance(value, bool):
        return _decimal(Fraction(value))
    if isinstance(value, str | Decimal):
        return exact_number(str(value))
    if isinstance(value, Real) and not isinstance(value, bool):
        return exact_number(repr(float(value)))
    raise InputError(
        f"'{shortened(str(value))}' is not a number", remedy="write a decimal number such as 0.25"
    )


def _decimal(value: Fraction) -> Fraction:
    if is_too_large(value):
        raise InputError(
            "the number is too large or too fine",
            remedy="write a number of ordinary size and precision",
        )
    decimal_text(value)  # refuses 1/3, which no equation can state
    return value


def _is_row(entry: object) -> TypeGuard[Sequence[object]]:
    """True for lists, tuples and arrays."""
    return hasattr(entry, "__len__") and not isinstance(entry, str)


def _flat(coefficients: Coefficients) -> _Row:
    """All coefficients in one list; not all of them are 0."""
    entries: list[object] = []
    for entry in coefficients:
        entries.extend(entry if _is_row(entry) else [entry])
    flat = tuple(_exact(entry, f"coefficient {count}") for count, entry in enumerate(entries, 1))
    if not any(flat):
        raise InputError("all coefficients are 0", remedy="give at least one that is not")
    return flat


def _sections(coefficients: Coefficients) -> list[_Row]:
    return [_section(row, f"row {count}") for count, row in enumerate(coefficients, 1)]


def _section(row: object, place: str) -> _Row:
    """One row b0 b1 b2 a0 a1 a2 with a0 = 1, without its a0."""
    if not _is_row(row) or len(row) != _ROW_LENGTH:
        raise InputError(
            "a biquad is a row of six numbers", place=place, remedy="write b0, b1, b2, a0, a1, a2"
        )
    numbers = enumerate(row, 1)
    b0, b1, b2, a0, a1, a2 = (_exact(entry, f"{place}, number {count}") for count, entry in numbers)
    if a0 != 1:
        raise InputError("a0 is not 1", place=place, remedy="divide the row by its a0")
    if not any((b0, b1, b2)):
        raise InputError(
            "b0, b1 and b2 are all 0, so nothing passes", place=place, remedy="take the row away"
        )
    return b0, b1, b2, a1, a2


# The text of one equation


def _equation(signal: str, terms: _Sum) -> str:
    """`signal[n] = ...` without the terms that are 0."""
    kept = [term for term in terms if term[0]]
    # A sum that starts with -s[n] would cost a subtraction from 0: let another term come first.
    first = next((index for index, term in enumerate(kept) if term[0] != -1), 0)
    kept.insert(0, kept.pop(first))
    head, *tail = kept
    text = "".join([_signed(*head), *(_added(*term) for term in tail)])
    return f"{signal}[n] = {text}"


def _signed(coefficient: Fraction, sample: Tap) -> str:
    return f"-{_product(_ONE, sample)}" if coefficient == -1 else _product(coefficient, sample)


def _added(coefficient: Fraction, sample: Tap) -> str:
    return f" {'-' if coefficient < 0 else '+'} {_product(abs(coefficient), sample)}"


def _product(coefficient: Fraction, sample: Tap) -> str:
    return str(sample) if coefficient == 1 else f"{decimal_text(coefficient)}*{sample}"


# Filters without feedback


def _fir_direct(coefficients: Coefficients) -> list[str]:
    taps = enumerate(_flat(coefficients))
    return [_equation("y", [(b, Tap("x", delay)) for delay, b in taps])]


def _fir_transposed(coefficients: Coefficients) -> list[str]:
    """Partial sums s1, s2, ... travel towards the output, one sample a step."""
    taps = list(_flat(coefficients))
    while not taps[-1]:
        taps.pop()
    names = ["y", *(f"s{count}" for count in range(1, len(taps)))]
    x = Tap("x", 0)
    sums = [
        _equation(name, [(b, x), (_ONE, Tap(after, 1))])
        for b, (name, after) in zip(taps, pairwise(names), strict=False)
    ]
    return [*sums, _equation(names[-1], [(taps[-1], x)])]


# Filters with feedback


def _all_pole(coefficients: Coefficients) -> list[str]:
    a0, *rest = _flat(coefficients)
    if a0 != 1:
        raise InputError("a0 is not 1", place="coefficient 1", remedy="divide all of them by a0")
    feedback = [(-a, Tap("y", delay)) for delay, a in enumerate(rest, 1)]
    return [_equation("y", [(_ONE, Tap("x", 0)), *reversed(feedback)])]


def _cascade(section: Callable[[_Row, str, str, str], list[str]]) -> _Writer:
    """A writer of biquads in a row, from one of a single biquad.

    `section` gets its coefficients, the signals that it reads and makes, and its number.
    """

    def write(coefficients: Coefficients) -> list[str]:
        rows = _sections(coefficients)
        signals = ["x", *(f"y{count}" for count in range(1, len(rows))), "y"]
        ends = enumerate(pairwise(signals), 1)
        return [
            line
            for row, (count, (source, made)) in zip(rows, ends, strict=True)
            for line in section(row, source, made, str(count))
        ]

    return write


def _direct_1(row: _Row, source: str, made: str, _: str) -> list[str]:
    b0, b1, b2, a1, a2 = row
    forward = [(b0, Tap(source, 0)), (b1, Tap(source, 1)), (b2, Tap(source, 2))]
    return [_equation(made, [*forward, (-a2, Tap(made, 2)), (-a1, Tap(made, 1))])]


def _direct_2(row: _Row, source: str, made: str, count: str) -> list[str]:
    b0, b1, b2, a1, a2 = row
    w = f"w{count}"
    return [
        _equation(w, [(_ONE, Tap(source, 0)), (-a2, Tap(w, 2)), (-a1, Tap(w, 1))]),
        _equation(made, [(b0, Tap(w, 0)), (b1, Tap(w, 1)), (b2, Tap(w, 2))]),
    ]


def _transposed_2(row: _Row, source: str, made: str, count: str) -> list[str]:
    b0, b1, b2, a1, a2 = row
    u, v = f"u{count}", f"v{count}"
    x, y = Tap(source, 0), Tap(made, 0)
    has_v = bool(b2 or a2)
    has_u = has_v or bool(b1 or a1)
    sums = {
        made: [(b0, x), (Fraction(has_u), Tap(u, 1))],
        u: [(b1, x), (Fraction(has_v), Tap(v, 1)), (-a1, y)],
        v: [(b2, x), (-a2, y)],
    }
    return [_equation(name, terms) for name, terms in sums.items() if any(b for b, _ in terms)]


# Lattices


def _lattice_fir(coefficients: Coefficients) -> list[str]:
    """Stage m: f_m[n] = f_{m-1}[n] + k_m g_{m-1}[n-1], g_m[n] = g_{m-1}[n-1] + k_m f_{m-1}[n]."""
    reflections = _flat(coefficients)
    count = len(reflections)
    f = ["x", *(f"f{stage}" for stage in range(1, count)), "y"]
    g = ["x", *(f"g{stage}" for stage in range(1, count))]
    lines = []
    for stage, k in enumerate(reflections, 1):
        forward, backward = Tap(f[stage - 1], 0), Tap(g[stage - 1], 1)
        lines.append(_equation(f[stage], [(_ONE, forward), (k, backward)]))
        if stage < count:  # nobody reads the last g
            lines.append(_equation(g[stage], [(_ONE, backward), (k, forward)]))
    return lines


def _lattice_all_pole(coefficients: Coefficients) -> list[str]:
    """Stage m: f_{m-1}[n] = f_m[n] - k_m g_{m-1}[n-1], g_m[n] = g_{m-1}[n-1] + k_m f_{m-1}[n]."""
    reflections = _flat(coefficients)
    count = len(reflections)
    f = ["y", *(f"f{stage}" for stage in range(1, count)), "x"]
    g = ["y", *(f"g{stage}" for stage in range(1, count))]
    lines = []
    for stage in range(count, 0, -1):
        k, forward, backward = reflections[stage - 1], Tap(f[stage - 1], 0), Tap(g[stage - 1], 1)
        lines.append(_equation(f[stage - 1], [(_ONE, Tap(f[stage], 0)), (-k, backward)]))
        if stage < count:  # nobody reads the last g
            lines.append(_equation(g[stage], [(_ONE, backward), (k, forward)]))
    return lines


# The table of structures


_BIQUADS = "rows b0 b1 b2 a0 a1 a2 with a0 = 1, H(z) the product of B(z)/A(z)"
_REFLECTIONS = "reflection coefficients k1 k2 ..., k_m the last coefficient of A_m(z)"

_STRUCTURES: Mapping[str, tuple[str, _Writer]] = {
    "fir-direct": ("coefficients b0 b1 ..., H(z) = B(z)", _fir_direct),
    "fir-transposed": ("coefficients b0 b1 ..., H(z) = B(z)", _fir_transposed),
    "biquads-direct-1": (_BIQUADS, _cascade(_direct_1)),
    "biquads-direct-2": (_BIQUADS, _cascade(_direct_2)),
    "biquads-transposed-2": (_BIQUADS, _cascade(_transposed_2)),
    "all-pole": ("coefficients a0 a1 ... with a0 = 1, H(z) = 1/A(z)", _all_pole),
    "lattice-fir": (f"{_REFLECTIONS}, H(z) = A(z)", _lattice_fir),
    "lattice-all-pole": (f"{_REFLECTIONS}, H(z) = 1/A(z)", _lattice_all_pole),
}

STRUCTURES: Mapping[str, str] = {name: entry[0] for name, entry in _STRUCTURES.items()}
"""The known structures, and the coefficients that each takes."""
