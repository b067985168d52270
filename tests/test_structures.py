"""Structures: what is made of coefficients filters as scipy does, at no needless cost."""

import operator
from collections.abc import Callable, Mapping, Sequence
from decimal import Decimal
from fractions import Fraction
from pathlib import Path

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy import signal

from scheduler.equations import Equation, Operator, Tap, Term, parse_equations
from scheduler.errors import InputError
from scheduler.graph import Graph, Kind, graph_of
from scheduler.structures import STRUCTURES, equations_text, read_coefficients

ARITHMETIC = {
    Operator.ADD: operator.add,
    Operator.SUBTRACT: operator.sub,
    Operator.MULTIPLY: operator.mul,
}
BIQUADS = [name for name in STRUCTURES if name.startswith("biquads")]
FLAT = [name for name in STRUCTURES if not name.startswith("biquads")]

# Zeros and ones are what the structures treat apart, so they come up often.
coefficient = st.sampled_from([0, 1, -1]).map(Fraction) | st.integers(-99, 99).map(
    lambda hundredths: Fraction(hundredths, 100)
)
coefficient_lists = st.lists(coefficient, min_size=1, max_size=8).filter(any)
biquad_rows = st.lists(
    st.tuples(coefficient, coefficient, coefficient, st.just(Fraction(1)), coefficient, coefficient)
    .filter(lambda row: any(row[:3]))
    .map(list),
    min_size=1,
    max_size=3,
)
samples = st.lists(st.integers(-100, 100).map(Fraction), min_size=12, max_size=12)


# Exact evaluation, sample by sample


def filtered(text: str, x: Sequence[Fraction]) -> list[float]:
    """The output of the equations, computed exactly from rest."""
    bodies = {equation.signal: equation for equation in parse_equations(text, ["x"], ["y"])}
    values = {("x", time): sample for time, sample in enumerate(x)}
    for time in range(len(x)):
        for name in bodies:
            settle(name, time, bodies, values)
    return [float(values["y", time]) for time in range(len(x))]


def settle(
    name: str,
    time: int,
    bodies: Mapping[str, Equation],
    values: dict[tuple[str, int], Fraction],
) -> Fraction:
    """The value of a signal at a time, with whatever it needs at that very time."""
    if time < 0:
        return Fraction(0)
    if (name, time) not in values:
        values[name, time] = evaluate(
            bodies[name].postfix, lambda tap: settle(tap.signal, time - tap.delay, bodies, values)
        )
    return values[name, time]


def evaluate(terms: Sequence[Term], sample: Callable[[Tap], Fraction]) -> Fraction:
    stack: list[Fraction] = []
    for term in terms:
        if isinstance(term, Operator):
            right, left = stack.pop(), stack.pop()
            stack.append(ARITHMETIC[term](left, right))
        else:
            stack.append(sample(term) if isinstance(term, Tap) else term)
    (value,) = stack
    return value


def floats(numbers: Sequence[Fraction]) -> list[float]:
    return [float(number) for number in numbers]


def close(expected: object) -> object:
    return pytest.approx(expected, rel=1e-9, abs=1e-5)


def graph(text: str) -> Graph:
    return graph_of(parse_equations(text, ["x"], ["y"]), ["x"], ["y"])


def polynomial(reflections: Sequence[Fraction]) -> list[Fraction]:
    """A(z) of reflection coefficients by the step-up recursion of Levinson and Durbin.

    A_m(z) = A_{m-1}(z) + k_m z^-m A_{m-1}(1/z) (Proakis and Manolakis, Digital Signal Processing;
    from memory).
    """
    a = [Fraction(1)]
    for k in reflections:
        padded = [*a, Fraction(0)]
        a = [low + k * high for low, high in zip(padded, reversed(padded), strict=True)]
    return a


# The same output as scipy.signal


@pytest.mark.parametrize("structure", ["fir-direct", "fir-transposed"])
@given(b=coefficient_lists, x=samples)
def test_a_fir_filters_as_lfilter_does(
    structure: str, b: list[Fraction], x: list[Fraction]
) -> None:
    expected = signal.lfilter(floats(b), [1.0], floats(x))
    assert filtered(equations_text(structure, b), x) == close(expected)


@pytest.mark.parametrize("structure", BIQUADS)
@given(rows=biquad_rows, x=samples)
def test_biquads_filter_as_sosfilt_does(
    structure: str, rows: list[list[Fraction]], x: list[Fraction]
) -> None:
    expected = signal.sosfilt([floats(row) for row in rows], floats(x))
    assert filtered(equations_text(structure, rows), x) == close(expected)


@given(rest=st.lists(coefficient, max_size=6), x=samples)
def test_an_all_pole_filter_filters_as_lfilter_does(
    rest: list[Fraction], x: list[Fraction]
) -> None:
    a = [Fraction(1), *rest]
    expected = signal.lfilter([1.0], floats(a), floats(x))
    assert filtered(equations_text("all-pole", a), x) == close(expected)


@given(k=coefficient_lists, x=samples)
def test_a_fir_lattice_filters_as_its_polynomial_does(k: list[Fraction], x: list[Fraction]) -> None:
    expected = signal.lfilter(floats(polynomial(k)), [1.0], floats(x))
    assert filtered(equations_text("lattice-fir", k), x) == close(expected)


@given(k=coefficient_lists, x=samples)
def test_an_all_pole_lattice_filters_as_its_polynomial_does(
    k: list[Fraction], x: list[Fraction]
) -> None:
    expected = signal.lfilter([1.0], floats(polynomial(k)), floats(x))
    assert filtered(equations_text("lattice-all-pole", k), x) == close(expected)


def test_a_designed_filter_goes_through_all_biquads() -> None:
    sos = signal.butter(6, 0.3, output="sos")
    x = [Fraction(1), *[Fraction(0)] * 30]
    for structure in BIQUADS:
        assert filtered(equations_text(structure, sos), x) == pytest.approx(
            signal.sosfilt(sos, floats(x)), abs=1e-12
        )


# What the text looks like, and what it costs


@pytest.mark.parametrize(
    ("structure", "coefficients", "text"),
    [
        ("fir-direct", [0.5, 0, -0.25], "y[n] = 0.5*x[n] - 0.25*x[n-2]\n"),
        ("fir-direct", [1, -1, "1e-20"], "y[n] = x[n] - x[n-1] + 1e-20*x[n-2]\n"),
        ("fir-direct", [-1, 0.5], "y[n] = 0.5*x[n-1] - x[n]\n"),
        ("fir-direct", [-1], "y[n] = -x[n]\n"),
        (
            "fir-transposed",
            [0.5, 0, 0.25, 0],
            "y[n] = 0.5*x[n] + s1[n-1]\ns1[n] = s2[n-1]\ns2[n] = 0.25*x[n]\n",
        ),
        ("all-pole", [1, -0.5, 0.25], "y[n] = x[n] - 0.25*y[n-2] + 0.5*y[n-1]\n"),
        (
            "biquads-direct-1",
            [[1, 2, 1, 1, -0.5, 0.25]],
            "y[n] = x[n] + 2*x[n-1] + x[n-2] - 0.25*y[n-2] + 0.5*y[n-1]\n",
        ),
        (
            "biquads-direct-2",
            [[1, 2, 1, 1, -0.5, 0.25], [1, 0, 0, 1, 0.5, 0]],
            (
                "w1[n] = x[n] - 0.25*w1[n-2] + 0.5*w1[n-1]\n"
                "y1[n] = w1[n] + 2*w1[n-1] + w1[n-2]\n"
                "w2[n] = y1[n] - 0.5*w2[n-1]\n"
                "y[n] = w2[n]\n"
            ),
        ),
        (
            "biquads-transposed-2",
            [[1, 2, 1, 1, -0.5, 0.25]],
            (
                "y[n] = x[n] + u1[n-1]\n"
                "u1[n] = 2*x[n] + v1[n-1] + 0.5*y[n]\n"
                "v1[n] = x[n] - 0.25*y[n]\n"
            ),
        ),
        ("biquads-transposed-2", [[3, 0, 0, 1, 0, 0]], "y[n] = 3*x[n]\n"),
        (
            "lattice-fir",
            [0.5, 0.25],
            "f1[n] = x[n] + 0.5*x[n-1]\ng1[n] = x[n-1] + 0.5*x[n]\ny[n] = f1[n] + 0.25*g1[n-1]\n",
        ),
        (
            "lattice-all-pole",
            [0.5, 0.25],
            "f1[n] = x[n] - 0.25*g1[n-1]\ny[n] = f1[n] - 0.5*y[n-1]\ng1[n] = y[n-1] + 0.5*y[n]\n",
        ),
    ],
)
def test_the_text_reads_as_a_person_would_write_it(
    structure: str, coefficients: list[float], text: str
) -> None:
    assert equations_text(structure, coefficients) == text


@given(b=coefficient_lists)
def test_only_numbers_other_than_zero_and_one_are_multiplied_by(b: list[Fraction]) -> None:
    multiplied = [number for number in b if number not in (0, 1, -1)]
    for structure in ("fir-direct", "fir-transposed"):
        made = graph(equations_text(structure, b))
        assert len(made.of_kind(Kind.MULTIPLY)) == len(multiplied)


@given(b=coefficient_lists)
def test_a_fir_adds_once_less_than_it_has_terms(b: list[Fraction]) -> None:
    made = graph(equations_text("fir-direct", b))
    negated = set(b) <= {0, -1}  # there is no other term to begin with
    terms = sum(number != 0 for number in b)
    assert len(made.of_kind(Kind.ADD, Kind.SUBTRACT)) == terms - 1 + negated


@pytest.mark.parametrize("structure", [*FLAT, *BIQUADS])
def test_a_long_filter_gives_equations_that_are_accepted(structure: str) -> None:
    numbers = [1, *(0.001 * count for count in range(1, 100))]
    rows = [[0.5, -0.25, 0.125, 1, -0.3, 0.2]] * 50
    made = graph(equations_text(structure, rows if structure in BIQUADS else numbers))
    assert len(made.of_kind(Kind.MULTIPLY)) >= 97


@pytest.mark.parametrize(
    "third",
    [Fraction(3, 8), Decimal("0.375"), "0.375", 0.375, np.float64(0.375), np.float32(0.375)],
)
def test_a_coefficient_is_a_number_of_any_kind(third: object) -> None:
    text = equations_text("fir-direct", [1, 0, third])  # type: ignore[list-item]
    assert text == "y[n] = x[n] + 0.375*x[n-2]\n"


def test_a_float_is_its_shortest_decimal() -> None:
    assert equations_text("fir-direct", [np.float64(0.1)]) == "y[n] = 0.1*x[n]\n"


def test_rows_of_a_fir_are_read_one_after_the_other() -> None:
    assert equations_text("fir-direct", [[1, 2], [3]]) == equations_text("fir-direct", [1, 2, 3])


# What is refused


def refused(structure: str, coefficients: object) -> str:
    with pytest.raises(InputError) as caught:
        equations_text(structure, coefficients)  # type: ignore[arg-type]
    return str(caught.value)


def test_an_unknown_structure_is_met_with_the_known_ones() -> None:
    message = refused("cascade", [1])
    assert message.startswith("structure 'cascade' is unknown; the structures are fir-direct, ")
    assert all(name in message for name in STRUCTURES)


@pytest.mark.parametrize("structure", STRUCTURES)
def test_no_structure_is_made_of_nothing(structure: str) -> None:
    assert refused(structure, []) == "there are no coefficients; give at least one"


@pytest.mark.parametrize("structure", FLAT)
def test_no_structure_is_made_of_zeros(structure: str) -> None:
    assert "all coefficients are 0" in refused(structure, [0, "0.0", Decimal(0)])


@pytest.mark.parametrize("structure", BIQUADS)
@pytest.mark.parametrize("row", [[1, 2, 3], [1, 2, 3, 1, 2, 3, 4], 5, "123456"])
def test_a_biquad_has_six_numbers(structure: str, row: object) -> None:
    message = refused(structure, [[1, 2, 3, 1, 0, 0], row])
    assert message == "row 2: a biquad is a row of six numbers; write b0, b1, b2, a0, a1, a2"


@pytest.mark.parametrize("structure", BIQUADS)
def test_a_biquad_has_a0_of_one(structure: str) -> None:
    message = refused(structure, [[1, 2, 3, 2, 0, 0]])
    assert message == "row 1: a0 is not 1; divide the row by its a0"


@pytest.mark.parametrize("structure", BIQUADS)
def test_a_biquad_lets_something_pass(structure: str) -> None:
    assert "row 1: b0, b1 and b2 are all 0" in refused(structure, [[0, 0, 0, 1, 0.5, 0]])


def test_an_all_pole_filter_has_a0_of_one() -> None:
    assert refused("all-pole", [2, 1]) == "coefficient 1: a0 is not 1; divide all of them by a0"


@pytest.mark.parametrize(
    "number", [float("nan"), float("inf"), np.float64("-inf"), "nan", Decimal("inf"), "1/2", ""]
)
def test_a_coefficient_is_a_finite_number(number: object) -> None:
    assert "coefficient 2: '" in (message := refused("fir-direct", [1, number]))
    assert "is not a number; write a decimal number such as 0.25" in message


@pytest.mark.parametrize("thing", [None, True, 1j, [[1]], {"b": 1}])
def test_a_coefficient_is_a_number_at_all(thing: object) -> None:
    assert "is not a number" in refused("fir-direct", [[1, thing]])
    assert "row 1, number 2: '" in refused("biquads-direct-1", [[1, thing, 0, 1, 0, 0]])


def test_a_third_has_to_be_rounded_first() -> None:
    message = refused("fir-direct", [1, Fraction(1, 3)])
    assert message.startswith("coefficient 2: 1/3 cannot be written exactly as a decimal number")


@pytest.mark.parametrize(
    "number",
    [10**5000, "1e999", Decimal("1e-5000"), Fraction(1, 2**5000)],
    ids=["integer", "text", "decimal", "fraction"],
)
def test_an_absurd_coefficient_is_refused(number: object) -> None:
    message = refused("fir-direct", [number])
    assert "too large or too fine" in message
    assert len(message) < 200


# Files of coefficients


def written(folder: Path, text: str) -> Path:
    path = folder / "taps.csv"
    path.write_text(text, encoding="utf-8")
    return path


def test_a_file_holds_one_number_a_line(tmp_path: Path) -> None:
    path = written(tmp_path, "# taps\n0.5\n\n -0.25 # middle\n1e-3\n")
    assert read_coefficients(path) == (
        (Fraction(1, 2),),
        (Fraction(-1, 4),),
        (Fraction(1, 1000),),
    )
    text = equations_text("fir-direct", read_coefficients(path))
    assert text == "y[n] = 0.5*x[n] - 0.25*x[n-1] + 0.001*x[n-2]\n"


@pytest.mark.parametrize("separator", [",", ", ", " , ", " ", "\t"])
def test_a_file_holds_rows_of_biquads(tmp_path: Path, separator: str) -> None:
    path = written(tmp_path, separator.join(["1", "2", "1", "1", "-0.5", "0.25"]) + "\r\n")
    text = equations_text("biquads-direct-1", read_coefficients(path))
    assert text == "y[n] = x[n] + 2*x[n-1] + x[n-2] - 0.25*y[n-2] + 0.5*y[n-1]\n"


def test_a_file_of_numpy_is_read(tmp_path: Path) -> None:
    sos = signal.butter(4, 0.2, output="sos")
    np.savetxt(tmp_path / "sos.csv", sos, delimiter=",")
    assert np.array(read_coefficients(tmp_path / "sos.csv"), dtype=float).tolist() == sos.tolist()


def test_a_byte_order_mark_is_no_number(tmp_path: Path) -> None:
    assert read_coefficients(written(tmp_path, "\ufeff0.5\n")) == ((Fraction(1, 2),),)


@pytest.mark.parametrize(
    ("text", "line", "what"),
    [
        ("0.5\nb1\n", 2, "'b1' is not a number"),
        ("0.5\n\n# x\nnan\n", 4, "'nan' is not a number"),
        ("1,,2\n", 1, "'' is not a number"),
        ("1,2,\n", 1, "'' is not a number"),
        ("1;2\n", 1, "'1;2' is not a number"),
        ("1\n1e999\n", 2, "too large or too fine"),
    ],
)
def test_a_fault_in_a_file_is_shown_with_its_line(
    tmp_path: Path, text: str, line: int, what: str
) -> None:
    path = written(tmp_path, text)
    with pytest.raises(InputError) as caught:
        read_coefficients(path)
    assert caught.value.place == f"{path}: line {line}"
    assert what in caught.value.what
    assert caught.value.remedy


def test_a_file_without_numbers_is_refused(tmp_path: Path) -> None:
    path = written(tmp_path, "# nothing yet\n\n")
    with pytest.raises(InputError, match="holds no coefficient; write one number a line"):
        read_coefficients(path)


def test_a_file_that_is_missing_is_refused_by_name(tmp_path: Path) -> None:
    with pytest.raises(InputError, match=r"absent\.csv: .*cannot be read; .*No such file"):
        read_coefficients(tmp_path / "absent.csv")


def test_a_folder_is_no_file(tmp_path: Path) -> None:
    with pytest.raises(InputError, match=r"cannot be read; .*directory"):
        read_coefficients(tmp_path)


def test_a_file_that_is_not_text_is_refused(tmp_path: Path) -> None:
    (tmp_path / "taps.bin").write_bytes(b"\xff\xfe\x00")
    with pytest.raises(InputError, match=r"cannot be read; .*not in UTF-8"):
        read_coefficients(tmp_path / "taps.bin")
