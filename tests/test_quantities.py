"""Numbers and quantities: exact in both directions, and every fault with a way out."""

from decimal import Decimal
from fractions import Fraction

import pytest
from hypothesis import given
from hypothesis import strategies as st

from scheduler.errors import InputError
from scheduler.quantities import (
    FREQUENCY_UNITS,
    decimal_text,
    exact_number,
    format_frequency,
    format_time,
    parse_frequency,
    parse_ratio,
    parse_time,
    shortened,
)

PARSERS = {"frequency": parse_frequency, "time": parse_time, "ratio": parse_ratio}


@pytest.mark.parametrize(
    ("text", "hertz"),
    [
        ("2 MHz", 2_000_000),
        ("44.1 kHz", 44_100),
        ("44.1kHz", 44_100),
        ("  1e3 Hz ", 1000),
        (".5 GHz", 500_000_000),
        ("2. Hz", 2),
        ("+3 Hz", 3),
        ("250 mHz", Fraction(1, 4)),
    ],
)
def test_a_frequency_is_read_exactly_in_hertz(text: str, hertz: Fraction) -> None:
    assert parse_frequency(text) == hertz


@pytest.mark.parametrize(
    ("text", "seconds"),
    [
        ("3 us", Fraction(3, 10**6)),
        ("3 \u00b5s", Fraction(3, 10**6)),
        ("3 \u03bcs", Fraction(3, 10**6)),
        ("0.1 ns", Fraction(1, 10**10)),
        ("20 ps", Fraction(20, 10**12)),
        ("7 ms", Fraction(7, 1000)),
        ("1.5 s", Fraction(3, 2)),
    ],
)
def test_a_time_is_read_exactly_in_seconds(text: str, seconds: Fraction) -> None:
    assert parse_time(text) == seconds


@pytest.mark.parametrize(
    ("text", "value"),
    [("33/2", Fraction(33, 2)), ("17", 17), ("16.5", Fraction(33, 2)), (" 1 / 3 ", Fraction(1, 3))],
)
def test_a_ratio_is_read_exactly(text: str, value: Fraction) -> None:
    assert parse_ratio(text) == value


@pytest.mark.parametrize("what", PARSERS)
@pytest.mark.parametrize("number", ["0", "-2", "0.0", "-1e-3", "-0"])
def test_only_what_is_above_zero_is_a_quantity(what: str, number: str) -> None:
    unit = {"frequency": " MHz", "time": " us", "ratio": ""}[what]
    with pytest.raises(InputError, match=rf"the {what} .* is not above zero; write a positive"):
        PARSERS[what](number + unit)


@pytest.mark.parametrize("text", ["", "2", "MHz", "two MHz", "2 M Hz", "2,5 MHz", "1_0 Hz", "٣ Hz"])
def test_a_frequency_that_is_misspelt_is_met_with_an_example(text: str) -> None:
    with pytest.raises(InputError, match="write a number and a unit, as in '2 MHz'"):
        parse_frequency(text)


@pytest.mark.parametrize("text", ["nan s", "inf s", "-inf s", "1e5", "nan", "2 / 3 s"])
def test_a_time_that_is_no_number_is_met_with_an_example(text: str) -> None:
    with pytest.raises(InputError, match="write a number and a unit, as in '3 us'"):
        parse_time(text)


@pytest.mark.parametrize("text", ["", "nan", "inf", "1/nan", "1/", "/2", "1/2/3", "1 2", "0x10"])
def test_a_ratio_that_is_no_number_is_refused(text: str) -> None:
    with pytest.raises(InputError, match="is not a number; write a decimal number"):
        parse_ratio(text)


def test_a_ratio_divides_by_no_zero() -> None:
    with pytest.raises(InputError, match="'1/0' divides by zero"):
        parse_ratio("1/0")


@pytest.mark.parametrize("text", ["2 mhz", "2 MHZ", "2 Khz", "2 us"])
def test_a_wrong_unit_of_frequency_is_met_with_the_right_ones(text: str) -> None:
    with pytest.raises(InputError, match=r"not a unit of frequency; .*GHz, MHz, kHz, Hz, mHz"):
        parse_frequency(text)


def test_a_wrong_unit_of_time_is_met_with_the_right_ones() -> None:
    with pytest.raises(InputError, match=r"'min' is not a unit of time; .*s, ms, us, ns, ps"):
        parse_time("2 min")


@pytest.mark.parametrize("text", ["1e999", "1e-999", "1e99999999999", "9" * 331, "1" * 10**6])
def test_an_absurd_number_is_refused_before_it_is_computed(text: str) -> None:
    with pytest.raises(InputError, match="too large or too fine") as caught:
        exact_number(text)
    assert len(str(caught.value)) < 200


def test_leading_zeros_of_an_exponent_are_harmless() -> None:
    assert exact_number("1e-0000000003") == Fraction(1, 1000)


@given(st.decimals(allow_nan=False, allow_infinity=False, places=12))
def test_numbers_are_read_as_decimal_reads_them(number: Decimal) -> None:
    assert exact_number(str(number)) == Fraction(number)


@given(st.integers(-(10**20), 10**20), st.integers(0, 40), st.integers(0, 40))
def test_decimal_text_is_exact(numerator: int, twos: int, fives: int) -> None:
    value = Fraction(numerator, 2**twos * 5**fives)
    assert exact_number(decimal_text(value)) == value
    assert Fraction(Decimal(decimal_text(value))) == value


@given(st.floats(allow_nan=False, allow_infinity=False, min_value=1e-250, max_value=1e250))
def test_floats_survive_as_their_shortest_text(number: float) -> None:
    value = exact_number(repr(number))
    assert float(decimal_text(value)) == number


@pytest.mark.parametrize(
    ("value", "text"),
    [
        (Fraction(201, 10000), "0.0201"),
        (Fraction(-1, 2), "-0.5"),
        (Fraction(1000), "1000"),
        (Fraction(0), "0"),
        (Fraction(15, 10**18), "1.5e-17"),
    ],
)
def test_decimal_text_is_short(value: Fraction, text: str) -> None:
    assert decimal_text(value) == text


def test_a_third_has_no_decimal_text() -> None:
    with pytest.raises(InputError, match=r"1/3 cannot be written exactly .*; round it"):
        decimal_text(Fraction(1, 3))


@pytest.mark.parametrize(
    ("hertz", "text"),
    [
        (Fraction(2 * 10**6), "2 MHz"),
        (Fraction(122_880_000), "122.88 MHz"),
        (Fraction(4 * 10**6, 3), "1.33333 MHz"),
        (Fraction(999_999_999, 1000), "1 MHz"),
        (Fraction(1000), "1 kHz"),
        (Fraction(1, 2), "500 mHz"),
        (Fraction(1, 10**4), "0.1 mHz"),
        (Fraction(2 * 10**12), "2000 GHz"),
    ],
)
def test_a_frequency_is_written_short(hertz: Fraction, text: str) -> None:
    assert format_frequency(hertz) == text


@pytest.mark.parametrize(
    ("seconds", "text"),
    [
        (Fraction(3, 10**6), "3 us"),
        (Fraction(1, 3), "333.333 ms"),
        (Fraction(90), "90 s"),
        (Fraction(625, 10**11), "6.25 ns"),
    ],
)
def test_a_time_is_written_short(seconds: Fraction, text: str) -> None:
    assert format_time(seconds) == text


@given(st.integers(1, 999_999), st.sampled_from([*FREQUENCY_UNITS]))
def test_a_frequency_of_six_digits_survives_writing(digits: int, unit: str) -> None:
    frequency = digits * FREQUENCY_UNITS[unit]
    assert parse_frequency(format_frequency(frequency)) == frequency


@given(st.fractions(min_value=Fraction(1, 10**12), max_value=10**6))
def test_a_written_time_is_right_to_six_digits(time: Fraction) -> None:
    written = parse_time(format_time(time))
    assert abs(written - time) <= time * Fraction(5, 10**6)


def test_a_quoted_text_is_short_and_printable() -> None:
    assert shortened("x" * 10**6) == "x" * 37 + "..."
    assert shortened("a\x1b[31m\n") == "a\\x1b[31m\\n"
