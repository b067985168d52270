"""Exact numbers, frequencies, times and ratios, to and from the text that people write.

No float is involved: "44.1 kHz" is exactly 44100. What this module does not check is whether a
quantity makes sense where it stands; that is for whoever reads the design.
"""

from __future__ import annotations

import re
from collections.abc import Mapping
from decimal import Decimal
from fractions import Fraction

from scheduler.errors import InputError

_UNSIGNED = r"(?:[0-9]+\.?[0-9]*|\.[0-9]+)(?:[eE][+-]?[0-9]+)?"
_NUMBER = re.compile(rf"[+-]?{_UNSIGNED}")
_QUANTITY = re.compile(rf"([+-]?{_UNSIGNED})\s*([^\W\d_]+)")
_EXPONENT = re.compile(r"[eE][+-]?0*([0-9]*)")

LONGEST_NUMBER = 2000
"""Characters of a number as written; more is refused before anything is computed."""

LARGEST_PART = 10**330
"""A number is kept as a fraction; numerator and denominator stay at or below this."""

FREQUENCY_UNITS: Mapping[str, Fraction] = {
    "GHz": Fraction(10**9),
    "MHz": Fraction(10**6),
    "kHz": Fraction(10**3),
    "Hz": Fraction(1),
    "mHz": Fraction(1, 10**3),
}
"""Units of frequency in Hz, the largest first."""

TIME_UNITS: Mapping[str, Fraction] = {
    "s": Fraction(1),
    "ms": Fraction(1, 10**3),
    "us": Fraction(1, 10**6),
    "ns": Fraction(1, 10**9),
    "ps": Fraction(1, 10**12),
}
"""Units of time in seconds, the largest first. A micro sign is read as the u."""

SIGNIFICANT_DIGITS = 6
"""Digits of a quantity in a table: enough for clocks such as 122.88 MHz and 983.04 MHz."""


def exact_number(text: str) -> Fraction:
    """The exact value of a decimal number, as in "-0.6414" or "1e-3".

    Raises:
        InputError: for anything else (nan and inf among it), and for numbers so long, so large or
            so fine that computing with them would take noticeable time.
    """
    number = text.strip()
    if len(number) > LONGEST_NUMBER:
        raise _out_of_range(number)
    if not _NUMBER.fullmatch(number):
        raise InputError(
            f"'{shortened(number)}' is not a number", remedy="write a decimal number such as 0.25"
        )
    exponent = _EXPONENT.search(number)
    if exponent is not None and len(exponent[1]) > 3:
        raise _out_of_range(number)
    value = Fraction(number)
    if is_too_large(value):
        raise _out_of_range(number)
    return value


def is_too_large(value: Fraction) -> bool:
    """True for a number too large, or too fine, to compute with."""
    return abs(value.numerator) > LARGEST_PART or value.denominator > LARGEST_PART


def _out_of_range(number: str) -> InputError:
    return InputError(
        f"the number '{shortened(number)}' is too large or too fine",
        remedy="write a number of ordinary size and precision",
    )


def decimal_text(value: Fraction) -> str:
    """The exact decimal text of a number, as short as `exact_number` can read it back.

    Raises:
        InputError: for a number without a finite decimal form, such as 1/3.
    """
    places = _decimal_places(value.denominator)
    if places is None:
        raise InputError(
            f"{shortened(str(value))} cannot be written exactly as a decimal number",
            remedy="round it to a decimal number first",
        )
    scaled = value.numerator * 10**places // value.denominator
    digits = tuple(int(digit) for digit in str(abs(scaled)))
    exact = Decimal((int(scaled < 0), digits, -places))
    return str(exact).lower().replace("e+", "e")


def _decimal_places(denominator: int) -> int | None:
    """The least k for which 10^k is a multiple of the denominator; None where there is none."""
    twos = (denominator & -denominator).bit_length() - 1
    rest, fives = denominator >> twos, 0
    while rest % 5 == 0:
        rest, fives = rest // 5, fives + 1
    return max(twos, fives) if rest == 1 else None


def shortened(text: str, most: int = 40) -> str:
    """The text in printable characters, cut to `most` of them: what a message may quote."""
    plain = text[: most + 1].encode("unicode_escape").decode() if not text.isprintable() else text
    return plain if len(plain) <= most else f"{plain[: most - 3]}..."


def parse_frequency(text: str) -> Fraction:
    """A frequency in Hz, from text such as "2 MHz".

    Raises:
        InputError: for a missing or unknown unit, and for anything that is not above zero.
    """
    return _parse_quantity(text, "frequency", FREQUENCY_UNITS, "'2 MHz'")


def parse_time(text: str) -> Fraction:
    """A time in seconds, from text such as "3 us".

    Raises:
        InputError: for a missing or unknown unit, and for anything that is not above zero.
    """
    return _parse_quantity(text, "time", TIME_UNITS, "'3 us'")


def _parse_quantity(text: str, what: str, units: Mapping[str, Fraction], example: str) -> Fraction:
    remedy = f"write a number and a unit, as in {example}"
    match = _QUANTITY.fullmatch(text.strip()) if len(text) <= LONGEST_NUMBER else None
    if match is None:
        raise InputError(f"'{shortened(text)}' is not a {what}", remedy=remedy)
    number, unit = match.groups()
    scale = units.get(re.sub("[\u00b5\u03bc]", "u", unit))
    if scale is None:
        raise InputError(
            f"'{shortened(unit)}' is not a unit of {what}",
            remedy=f"{remedy}; the units are {', '.join(units)}",
        )
    return _above_zero(exact_number(number), text, what) * scale


def parse_ratio(text: str) -> Fraction:
    """A ratio above zero, from text such as "17", "16.5" or "33/2".

    Raises:
        InputError: for anything that is not above zero, and for a division by zero.
    """
    numerator, slash, denominator = text.partition("/")
    if not slash:
        return _above_zero(exact_number(numerator), text, "ratio")
    value, divisor = exact_number(numerator), exact_number(denominator)
    if divisor == 0:
        raise InputError(f"'{shortened(text)}' divides by zero", remedy="write a ratio as in 33/2")
    return _above_zero(value / divisor, text, "ratio")


def _above_zero(value: Fraction, text: str, what: str) -> Fraction:
    if value <= 0:
        raise InputError(
            f"the {what} '{shortened(text)}' is not above zero", remedy=f"write a positive {what}"
        )
    return value


def format_frequency(frequency: Fraction) -> str:
    """A frequency given in Hz as short text for tables, as in "122.88 MHz"."""
    return _format(frequency, FREQUENCY_UNITS)


def format_time(time: Fraction) -> str:
    """A time given in seconds as short text for tables, as in "3 us"."""
    return _format(time, TIME_UNITS)


def _format(value: Fraction, units: Mapping[str, Fraction]) -> str:
    # Rounding comes first, so that 999.9999 kHz turns into 1 MHz and not into 1000 kHz.
    value = _rounded(value)
    fitting = (unit for unit, scale in units.items() if value >= scale)
    unit = next(fitting, [*units][-1])
    return f"{decimal_text(value / units[unit])} {unit}"


def _rounded(value: Fraction) -> Fraction:
    """The value to SIGNIFICANT_DIGITS digits, ties to even."""
    step = Fraction(1)
    while value >= step * 10**SIGNIFICANT_DIGITS:
        step *= 10
    while 0 < value < step * 10 ** (SIGNIFICANT_DIGITS - 1):
        step /= 10
    return round(value / step) * step


def format_number(value: Fraction) -> str:
    """A fraction for messages: 4, 3.5, 8/3, or 1133.79 where nothing short is exact."""
    if value.denominator == 1:
        return str(value.numerator)
    if 1000 % value.denominator == 0:
        return f"{float(value):.3f}".rstrip("0")
    return str(value) if value.denominator < 100 else f"{float(value):.6g}"
