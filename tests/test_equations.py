"""Difference equations: read as Python reads arithmetic, refused with a place and a way out."""

import operator
import time
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from fractions import Fraction
from pathlib import Path

import pytest
from hypothesis import given
from hypothesis import strategies as st

from scheduler.equations import (
    LONGEST_TEXT,
    Equation,
    Operator,
    Tap,
    Term,
    parse_equations,
)
from scheduler.errors import InputError
from scheduler.writing import write_equations

ARITHMETIC = {
    Operator.ADD: operator.add,
    Operator.SUBTRACT: operator.sub,
    Operator.MULTIPLY: operator.mul,
}
X, X1, Y1, HALF = Tap("x", 0), Tap("x", 1), Tap("y", 1), Fraction(1, 2)
ADD, SUBTRACT, MULTIPLY = Operator.ADD, Operator.SUBTRACT, Operator.MULTIPLY


def postfix(expression: str) -> tuple[Term, ...]:
    (equation,) = parse_equations(f"y[n] = {expression}", ["x"], ["y"])
    return equation.postfix


def fault(text: str, inputs: Sequence[str] = ("x",), outputs: Sequence[str] = ("y",)) -> InputError:
    with pytest.raises(InputError) as caught:
        parse_equations(text, inputs, outputs)
    return caught.value


def evaluate(terms: Sequence[Term], samples: Mapping[Tap, Fraction]) -> Fraction:
    stack: list[Fraction] = []
    for term in terms:
        if isinstance(term, Operator):
            right, left = stack.pop(), stack.pop()
            stack.append(ARITHMETIC[term](left, right))
        else:
            stack.append(samples[term] if isinstance(term, Tap) else term)
    (value,) = stack
    return value


# What is read


@pytest.mark.parametrize(
    ("expression", "expected"),
    [
        ("x[n]", (X,)),
        ("x[n-1]", (X1,)),
        ("x [ n - 1 ]", (X1,)),
        ("x[n-0]", (X,)),
        ("x[n-001]", (X1,)),
        ("x[n-1000000]", (Tap("x", 1_000_000),)),
        ("x[n] + x[n-1] + y[n-1]", (X, X1, ADD, Y1, ADD)),
        ("x[n] - x[n-1] + y[n-1]", (X, X1, SUBTRACT, Y1, ADD)),
        ("x[n] - (x[n-1] + y[n-1])", (X, X1, Y1, ADD, SUBTRACT)),
        ("x[n] + x[n-1]*y[n-1]", (X, X1, Y1, MULTIPLY, ADD)),
        ("(x[n] + x[n-1])*y[n-1]", (X, X1, ADD, Y1, MULTIPLY)),
        ("x[n]*x[n-1]*y[n-1]", (X, X1, MULTIPLY, Y1, MULTIPLY)),
        ("+x[n]", (X,)),
        ("((x[n]))", (X,)),
    ],
)
def test_operations_go_by_precedence_and_from_left_to_right(
    expression: str, expected: tuple[Term, ...]
) -> None:
    assert postfix(expression) == expected


@pytest.mark.parametrize(
    ("expression", "expected"),
    [
        ("0.5*x[n]", (HALF, X, MULTIPLY)),
        ("-0.5*x[n]", (-HALF, X, MULTIPLY)),
        ("-(0.25 + 0.25)*x[n]", (-HALF, X, MULTIPLY)),
        ("2*-0.25*x[n]", (-HALF, X, MULTIPLY)),
        ("--0.5*x[n]", (HALF, X, MULTIPLY)),
        ("x[n]*(1 - 0.5)", (X, HALF, MULTIPLY)),
        ("x[n]*0.5*0.5", (X, HALF, MULTIPLY, HALF, MULTIPLY)),
        ("5e-1", (HALF,)),
        (".5", (HALF,)),
        ("50.E-2", (HALF,)),
        ("1e-3 - 1e-3", (Fraction(0),)),
    ],
)
def test_numbers_alone_become_one_exact_number(expression: str, expected: tuple[Term, ...]) -> None:
    assert postfix(expression) == expected


@pytest.mark.parametrize(
    ("expression", "expected"),
    [
        ("-x[n]", (Fraction(0), X, SUBTRACT)),
        ("-x[n]*0.5", (Fraction(0), X, SUBTRACT, HALF, MULTIPLY)),
        ("0.5*-x[n]", (HALF, Fraction(0), X, SUBTRACT, MULTIPLY)),
        ("x[n] - -x[n-1]", (X, Fraction(0), X1, SUBTRACT, SUBTRACT)),
        ("--x[n]", (Fraction(0), Fraction(0), X, SUBTRACT, SUBTRACT)),
        ("-(x[n] + x[n-1])", (Fraction(0), X, X1, ADD, SUBTRACT)),
    ],
)
def test_a_minus_before_a_signal_is_a_subtraction_from_zero(
    expression: str, expected: tuple[Term, ...]
) -> None:
    assert postfix(expression) == expected


def test_every_line_is_an_equation_that_knows_its_line() -> None:
    text = "# a filter\nw[n] = x[n] + 0.5*w[n-1]  # recursive\n\ny[n] = w[n]\n"
    first, second = parse_equations(text, ["x"], ["y"])
    assert (first.signal, first.line) == ("w", 2)
    assert (second.signal, second.line) == ("y", 4)


@pytest.mark.parametrize(
    "text",
    [
        "y[n] = x[n] + x[n-1]",
        "y[n] =\nx[n] + x[n-1]",
        "y[n] = x[n] +  # and\n\n  # so on\n x[n-1]",
        "y[n] = (x[n]\n + x[n-1]\n)",
        "y[n] = x[n] +\r\nx[n-1]\r\n",
        "y[n] = x[n] +\rx[n-1]\r",
        "\ty[n]\t=\tx[n]\t+\tx[n-1]\t",
    ],
)
def test_a_line_goes_on_after_an_operator_and_inside_parentheses(text: str) -> None:
    (equation,) = parse_equations(text, ["x"], ["y"])
    assert equation.postfix == (X, X1, ADD)


def test_equations_are_equal_wherever_they_stand() -> None:
    assert Equation("y", (X,), line=1) == Equation("y", (X,), line=7)


def test_an_output_may_be_an_input() -> None:
    assert len(parse_equations("w[n] = x[n]", ["x"], ["x", "w"])) == 1


# The same value as Python's own arithmetic


@dataclass(frozen=True)
class Sample:
    """An expression as text, and what Python makes of the same arithmetic."""

    text: str
    value: Fraction
    binding: int  # 1 a sum, 2 a product, 3 a sign, 4 anything that needs no parentheses


SAMPLES = {Tap(name, k): Fraction(k * 7 - 11, 8) for name in ("x", "y") for k in range(1, 5)}
taps = st.sampled_from([Sample(str(tap), value, 4) for tap, value in SAMPLES.items()])
numbers = st.decimals(0, 50, places=2).map(lambda d: Sample(f"{d}", Fraction(d), 4))
BINDING = {"+": 1, "-": 1, "*": 2}
PYTHON = {"+": operator.add, "-": operator.sub, "*": operator.mul}


def enclosed(sample: Sample, binding: int) -> str:
    return sample.text if sample.binding >= binding else f"({sample.text})"


def joined(left: Sample, symbol: str, right: Sample) -> Sample:
    binding = BINDING[symbol]
    text = f"{enclosed(left, binding)} {symbol} {enclosed(right, binding + 1)}"
    return Sample(text, PYTHON[symbol](left.value, right.value), binding)


def signed(sample: Sample) -> Sample:
    return Sample(f"-{enclosed(sample, 3)}", -sample.value, 3)


expressions = st.recursive(
    taps | numbers,
    lambda inner: st.one_of(
        st.builds(joined, inner, st.sampled_from("+-*"), inner),
        st.builds(signed, inner),
        inner.map(lambda sample: Sample(f"({sample.text})", sample.value, 4)),
    ),
    max_leaves=25,
)


@given(expressions)
def test_an_expression_has_the_value_that_python_gives_it(sample: Sample) -> None:
    assert evaluate(postfix(sample.text), SAMPLES) == sample.value


@given(expressions)
def test_numbers_are_never_left_to_be_computed(sample: Sample) -> None:
    terms = postfix(sample.text)
    for left, right, last in zip(terms, terms[1:], terms[2:], strict=False):
        both = isinstance(left, Fraction) and isinstance(right, Fraction)
        assert not (both and isinstance(last, Operator))


@given(expressions)
def test_a_written_equation_is_read_as_the_same(sample: Sample) -> None:
    equations = parse_equations(f"y[n] = {sample.text}", ["x"], ["y"])
    assert parse_equations(write_equations(equations), ["x"], ["y"]) == equations


@given(expressions)
def test_a_written_equation_is_nested_no_deeper(sample: Sample) -> None:
    equations = parse_equations(f"y[n] = {sample.text}", ["x"], ["y"])
    assert deepest(write_equations(equations)) <= deepest(sample.text)


def deepest(text: str) -> int:
    depth = most = 0
    for character in text:
        depth += (character == "(") - (character == ")")
        most = max(most, depth)
    return most


@pytest.mark.parametrize(
    "line",
    [
        "y[n] = x[n] + 1.561*y[n-1] - 0.6414*y[n-2]",
        "y[n] = (x[n] - x[n-1])*-x[n-2]*0.5",
        "y[n] = x[n] - (x[n-1] - x[n-2])",
        "y[n] = x[n]*(0.5*x[n-1])",
        "y[n] = -x[n] - --x[n-1]*-(x[n] + 1)",
        "y[n] = 0 - x[n]*x[n-1]",
        "y[n] = -0.5*x[n] + -1e-17",
    ],
)
def test_an_equation_is_written_as_a_person_would(line: str) -> None:
    assert write_equations(parse_equations(line, ["x"], ["y"])) == f"{line}\n"


def test_no_equation_can_be_written_with_a_third() -> None:
    with pytest.raises(InputError, match="round it to a decimal number first"):
        write_equations([Equation("y", (Fraction(1, 3), X, MULTIPLY), line=1)])


# What is refused, where, and with which way out


@pytest.mark.parametrize(
    ("text", "place", "what", "remedy"),
    [
        ("y[n] = 2*z[n]", (1, 10), "'z' is used but never defined", "add it to the inputs"),
        ("y[n] = gian[n]\ngain[n] = 2*x[n]", (1, 8), "never defined", "mean 'gain'?"),
        ("y[n] = x[n]\ny[n] = 1", (2, 1), "second time (first at line 1, column 1)", "rename"),
        ("x[n] = 1\ny[n] = x[n]", (1, 1), "an input and has an equation", "rename"),
        ("y[n] = x[n+1]", (1, 8), "'x[n+1]' is a future sample", "delay the other"),
        ("y[n+1] = x[n]", (1, 1), "'y[n+1]' is a future sample", "delay the other"),
        ("y[n-1] = x[n]", (1, 1), "not an equation of the form name[n]", "y[n] ="),
        ("2*y[n] = x[n]", (1, 1), "not an equation of the form name[n]", "y[n] ="),
        ("(y[n]) = x[n]", (1, 1), "not an equation of the form name[n]", "y[n] ="),
        ("y[n]", (1, 1), "not an equation of the form name[n]", "y[n] ="),
        ("= x[n]", (1, 1), "not an equation of the form name[n]", "y[n] ="),
        ("y = x[n]", (1, 1), "signal 'y' has no sample", "write y[n]"),
        ("y[n] = x[n]\n + x[n-1]", (2, 2), "cannot start with '+'", "end its line with"),
        ("y[n] = x", (1, 8), "signal 'x' has no sample", "write x[n]"),
        ("y[n] = x[3]", (1, 8), "'x[3]' is not a sample of 'x'", "x[n-3]"),
        ("y[n] = x[n-k]", (1, 8), "'x[n-k]' is not a sample of 'x'", "x[n-3]"),
        ("y[n] = x[n--1]", (1, 8), "is not a sample of 'x'", "x[n-3]"),
        ("y[n] = x[n-1.5]", (1, 8), "is not a sample of 'x'", "x[n-3]"),
        ("y[n] = x[]", (1, 8), "is not a sample of 'x'", "x[n-3]"),
        ("y[n] = x[n", (1, 8), "the '[' after 'x' is never closed", "x[n]"),
        ("y[n] = x[n-1000001]", (1, 8), "more than 1000000 samples", "shorter"),
        ("y[n] = x[n]/2", (1, 12), "division is not an operation", "0.5*x[n]"),
        ("y[n] = x[n]//2", (1, 12), "division is not an operation", "0.5*x[n]"),
        ("y[n] = x[n]**2", (1, 12), "power is not an operation", "x[n]*x[n]"),
        ("y[n] = x[n]^2", (1, 12), "power is not an operation", "x[n]*x[n]"),
        ("y[n] = 2*sin(x[n])", (1, 10), "'sin(...)' is a function call", "only +, - and *"),
        ("y[n] = x[n] @ 2", (1, 13), "character '@' (U+0040) has no place", "use names"),
        ("y[n] = x[n] \u2212 2", (1, 13), "(U+2212) has no place", "+ - *"),
        ("y[n] = x[n]\u200b", (1, 12), "'\\u200b' (U+200B) has no place", "use names"),
        ("\u200by[n] = x[n]", (1, 1), "'\\u200b' (U+200B) has no place", "use names"),
        ("y[n] = x[n]; 2", (1, 12), "character ';'", "use names"),
        ("y[n] = [n]", (1, 8), "'[' without a name", "x[n-1]"),
        ("y[n] = x[n]]", (1, 12), "']' without a '['", "x[n-1]"),
        ("y[n] = (x[n]", (1, 8), "this '(' is never closed", "close it"),
        ("y[n] = (x[n]\nw[n] = 2", (1, 8), "this '(' is never closed", "close it"),
        ("y[n] = (x[n] = 2)", (1, 8), "this '(' is never closed", "close it"),
        ("y[n] = x[n])", (1, 12), "this ')' closes nothing", "take it away"),
        ("y[n] = ()", (1, 9), "missing before ')'", "write one"),
        ("y[n] = x[n] + * 2", (1, 15), "missing before '*'", "write one"),
        ("y[n] = *2", (1, 8), "missing before '*'", "write one"),
        ("y[n] = x[n] +", (1, 13), "nothing follows '+'", "write a number or a signal"),
        ("y[n] =", (1, 6), "nothing follows '='", "write a number or a signal"),
        ("y[n] = x[n] +\nw[n] = 1", (2, 6), "a second '='", "one equation a line"),
        ("y[n] == x[n]", (1, 7), "a second '='", "one equation a line"),
        ("y[n] = 2 x[n]", (1, 10), "an operator is missing before 'x[n]'", "write +, - or *"),
        ("y[n] = 2x[n]", (1, 9), "an operator is missing before 'x[n]'", "write +, - or *"),
        ("y[n] = x[n](2)", (1, 12), "an operator is missing before '('", "write +, - or *"),
        ("y[n] = x[n] x[n]", (1, 13), "an operator is missing", "write +, - or *"),
        ("y[n] = 1.5.2", (1, 8), "'1.5.2' is not a number", "0.25"),
        ("y[n] = 1_000*x[n]", (1, 9), "operator is missing before '_000'", "write +"),
        ("lambda[n] = x[n]", (1, 1), "'lambda' is a reserved word", "choose a name"),
        ("y[n] = if[n]", (1, 8), "'if' is a reserved word", "choose a name"),
        ("y[n] = None", (1, 8), "'None' is a reserved word", "choose a name"),
        ("gr\u00fcn[n] = x[n]", (1, 1), "is not a name of ASCII letters", "choose a name"),
        ("y[n] = \u03b1[n]", (1, 8), "is not a name of ASCII letters", "choose a name"),
        ("y[n] = nan*x[n]", (1, 8), "'nan' is not a number", "finite"),
        ("y[n] = -inf", (1, 9), "'inf' is not a number", "finite"),
        ("y[n] = Infinity", (1, 8), "'Infinity' is not a number", "finite"),
        ("y[n] = 1e400*x[n]", (1, 8), "'1e400' is too large or too fine", "ordinary"),
        ("y[n] = 1e-400*x[n]", (1, 8), "'1e-400' is too large or too fine", "ordinary"),
        ("y[n] = 1e300*1e300*x[n]", (1, 13), "numbers alone is too large", "ordinary"),
        (f"y[n] = {'a' * 101}[n]", (1, 8), "is longer than 100 characters", "choose a name"),
        ("# first\n\r\n\ry[n] = $", (4, 8), "character '$'", "use names"),
        ("y[n] = x[n] +\n\n  (2*\n   &", (4, 4), "character '&'", "use names"),
    ],
)
def test_a_fault_says_where_what_and_a_way_out(
    text: str, place: tuple[int, int], what: str, remedy: str
) -> None:
    found = fault(text)
    assert found.place == f"line {place[0]}, column {place[1]}"
    assert what in found.what
    assert remedy in found.remedy
    assert str(found).isprintable()


@pytest.mark.parametrize("text", ["", "\n\n", "  # nothing but a comment"])
def test_a_text_without_equations_is_refused(text: str) -> None:
    assert "there is no equation" in str(fault(text))


def test_an_output_that_nobody_makes_is_refused() -> None:
    assert "output 'z' has no equation; define z[n]" in str(fault("w[n] = x[n]", outputs=["z"]))


def test_an_output_that_is_misspelt_is_met_with_the_near_name() -> None:
    found = fault("result[n] = x[n]", outputs=["resutl"])
    assert str(found) == "output 'resutl' has no equation; did you mean 'result'?"


@pytest.mark.parametrize("name", ["1x", "", "x y", "w.1", "\u00fc", "x\n", 3])
@pytest.mark.parametrize("what", ["input", "output"])
def test_a_port_needs_a_proper_name(name: str, what: str) -> None:
    ports = {"inputs": ["x"], "outputs": ["y"], f"{what}s": [name]}
    found = fault("y[n] = 1", **ports)
    assert found.what.startswith(f"{what} '")
    assert "is not a name of ASCII letters" in found.what


def test_a_port_is_no_reserved_word() -> None:
    assert "input 'in' is a reserved word" in str(fault("y[n] = 1", inputs=["in"]))


def test_ports_stand_once() -> None:
    assert "input 'x' stands twice" in str(fault("y[n] = 1", inputs=["x", "x"]))
    assert "output 'y' stands twice" in str(fault("y[n] = 1", outputs=["y", "y"]))


def test_a_fault_can_be_put_into_its_file() -> None:
    found = fault("y[n] = $").within("filter.toml")
    assert str(found).startswith("filter.toml: line 1, column 8: the character '$'")


# Hostile texts


def test_parentheses_nest_a_hundred_deep_and_no_deeper() -> None:
    assert postfix("(" * 100 + "x[n]" + ")" * 100) == (X,)
    assert len(postfix("(x[n])" + " + (x[n])" * 200)) == 401
    found = fault("y[n] = " + "(" * 10_000 + "x[n]" + ")" * 10_000)
    assert found.place == "line 1, column 108"
    assert "deeper than 100; give inner parts equations" in str(found)


def test_a_million_characters_are_read_and_one_more_is_refused() -> None:
    text = "y[n] = x[n]" + " + x[n-1]" * 60_000
    equations = parse_equations(text.ljust(LONGEST_TEXT), ["x"], ["y"])
    assert len(equations[0].postfix) == 120_001
    assert "longer than 1000000 characters" in str(fault(text.ljust(LONGEST_TEXT + 1)))


@pytest.mark.parametrize(
    "text",
    [
        "y[n] = " + "9" * 100_000,
        "y[n] = 1e" + "9" * 100_000,
        "y[n] = 1." + "0" * 100_000 + "1",
        "y[n] = " + "9*" * 50_000 + "9",
        "y[n] = " + "1e" * 50_000,
        "y[n] = " + "a" * 100_000,
        "y[n] = " + "a[" * 50_000,
        "y[n] = a" + " " * 100_000,
        "y[n] = a[n" + " " * 100_000 + "n]",
        "y[n] = a[n-" + "9" * 100_000 + "]",
        "y[n] = " + "(" * 100_000,
        "y[n] = " + "(\n" * 50_000,
        "y[n] = " + "-" * 100_000,
        "".join(f"a{count}[n] = x[n]\n" for count in range(20_000)) + "y[n] = b7[n]",
    ],
    ids=lambda text: text[:14] + "...",
)
def test_no_text_takes_long_to_refuse_or_says_much(text: str) -> None:
    start = time.perf_counter()
    assert len(str(fault(text))) < 250
    # Each takes a fraction of a second; a quadratic method takes far longer than the limit.
    assert time.perf_counter() - start < 5


def test_a_long_row_of_signs_is_read_without_recursion() -> None:
    assert len(postfix("-" * 20_000 + "x[n]")) == 40_001


@pytest.mark.parametrize(
    "expression",
    [
        "__import__('os').system('touch executed')",
        "open('executed', 'w')",
        "(lambda: open('executed', 'w'))()",
        "exec(\"open('executed', 'w')\")",
        "[open('executed', 'w') for _ in 'a'][0]",
        "x[n] if open('executed', 'w') else 0",
        "x[open('executed', 'w')]",
        "x[__import__('pathlib').Path('executed').touch()]",
        "f\"{open('executed', 'w')}\"",
        "`touch executed`",
    ],
)
def test_nothing_of_the_text_is_ever_executed(
    expression: str, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.chdir(tmp_path)
    with pytest.raises(InputError):
        postfix(expression)
    with pytest.raises(InputError):
        parse_equations(f"{expression} = x[n]", ["x"], ["y"])
    with pytest.raises(InputError):
        parse_equations("y[n] = 1", [expression], ["y"])
    assert not [*tmp_path.iterdir()]


@given(st.text(st.sampled_from("xyn[]()+-*/=^.19e# \n\u00fc"), max_size=60))
def test_whatever_is_written_is_read_or_refused(text: str) -> None:
    try:
        equations = parse_equations(text, ["x"], [])
    except InputError:
        return
    assert parse_equations(write_equations(equations), ["x"], []) == equations
