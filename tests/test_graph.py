"""From equations to the graph: one operation for each operator, aliases followed, loops named."""

import time
from collections.abc import Sequence
from fractions import Fraction

import pytest
from hypothesis import given
from hypothesis import strategies as st

from scheduler.equations import Operator, parse_equations
from scheduler.errors import InputError
from scheduler.graph import Edge, Graph, Kind, Operation, Source, graph_of
from scheduler.structures import equations_text


def graph(text: str, inputs: Sequence[str] = ("x",), outputs: Sequence[str] = ("y",)) -> Graph:
    return graph_of(parse_equations(text, inputs, outputs), inputs, outputs)


def refused(text: str) -> str:
    with pytest.raises(InputError) as caught:
        graph(text)
    return str(caught.value)


# Operations and edges


def test_each_operator_is_an_operation_and_the_last_bears_the_signal() -> None:
    made = graph("w[n] = x[n] + 0.5*w[n-1] - 0.25*w[n-2]\ny[n] = w[n] + w[n-1]")
    assert made.operations == (
        Operation("x", Kind.INPUT),
        Operation("w.1", Kind.MULTIPLY, (Fraction(1, 2), Source("w", 1))),
        Operation("w.2", Kind.ADD, (Source("x", 0), Source("w.1", 0))),
        Operation("w.3", Kind.MULTIPLY, (Fraction(1, 4), Source("w", 2))),
        Operation("w", Kind.SUBTRACT, (Source("w.2", 0), Source("w.3", 0))),
        Operation("y", Kind.ADD, (Source("w", 0), Source("w", 1))),
        Operation("y.out", Kind.OUTPUT, (Source("y", 0),)),
    )


def test_every_operand_that_is_a_result_is_an_edge() -> None:
    made = graph("y[n] = 0.5*x[n-3] - y[n-1]")
    assert made.edges == (
        Edge("x", "y.1", 3),
        Edge("y.1", "y", 0),
        Edge("y", "y", 1),
        Edge("y", "y.out", 0),
    )


def test_a_signal_used_twice_in_an_operation_is_two_edges() -> None:
    made = graph("y[n] = x[n]*x[n]")
    assert made.edges[:2] == (Edge("x", "y", 0), Edge("x", "y", 0))


def test_a_negated_signal_is_taken_away_from_zero() -> None:
    made = graph("y[n] = -x[n]")
    assert made.by_name["y"] == Operation("y", Kind.SUBTRACT, (Fraction(0), Source("x", 0)))


def test_only_ports_need_no_unit() -> None:
    made = graph("y[n] = 0.5*x[n] + u[n]", inputs=["x", "u"])
    assert [operation.name for operation in made.operations if operation.is_port] == [
        "x",
        "u",
        "y.out",
    ]


@given(st.lists(st.sampled_from("+-*"), min_size=1, max_size=30))
def test_there_are_as_many_operations_as_operators(symbols: list[str]) -> None:
    text = "y[n] = x[n]" + "".join(f" {symbol} x[n-1]" for symbol in symbols)
    (equation,) = parse_equations(text, ["x"], ["y"])
    made = graph(text)
    for operator in Operator:
        count = sum(term == operator for term in equation.postfix)
        assert len(made.of_kind(Kind(operator))) == count
    assert len(made.operations) == len(symbols) + 2


# Other names of signals


def test_an_equation_without_an_operation_is_another_name() -> None:
    made = graph("a[n] = x[n-1]\nb[n] = a[n-2]\ny[n] = 0.5*b[n-3]")
    assert made.by_name["y"].operands == (Fraction(1, 2), Source("x", 6))
    assert "a" not in made.by_name
    assert "b" not in made.by_name


def test_an_output_may_be_another_name() -> None:
    made = graph("w[n] = 2*x[n]\ny[n] = w[n-1]")
    assert made.by_name["y.out"].operands == (Source("w", 1),)


def test_an_output_may_be_an_input() -> None:
    made = graph("w[n] = 2*x[n]", outputs=["x"])
    assert made.by_name["x.out"].operands == (Source("x", 0),)


def test_a_signal_that_is_only_itself_is_refused() -> None:
    assert "only ever a copy of itself" in refused("a[n] = b[n-1]\nb[n] = a[n]\ny[n] = a[n]")


def test_a_constant_cannot_be_a_signal() -> None:
    message = refused("half[n] = 0.25 + 0.25\ny[n] = half[n]*x[n]")
    assert message == "signal 'half' is a constant; write the number where it is used"


def test_a_constant_cannot_leave() -> None:
    assert "signal 'y' is a constant" in refused("y[n] = 3")


# Loops without a delay


def test_a_loop_without_a_delay_is_named() -> None:
    message = refused("a[n] = x[n] + b[n]\nb[n] = 2*a[n]\ny[n] = a[n]")
    assert "the loop a -> b -> a has no delay" in message or "b -> a -> b" in message
    assert "delay one of its signals by a sample, as in y[n-1]" in message


def test_a_signal_that_needs_itself_at_once_is_named() -> None:
    assert "the loop y -> y has no delay" in refused("y[n] = x[n] + y[n]")


def test_a_loop_through_another_name_is_seen() -> None:
    assert "the loop y -> y has no delay" in refused("a[n] = y[n]\ny[n] = x[n] + a[n]")


def test_one_delay_anywhere_makes_a_loop_computable() -> None:
    made = graph("a[n] = x[n] + b[n]\nb[n] = 2*a[n-1]\ny[n] = a[n]")
    assert Edge("a", "b", 1) in made.edges


# Graphs that no equation makes


def test_operations_have_names_of_their_own() -> None:
    with pytest.raises(InputError, match="two operations are named 'x'; rename one"):
        Graph((Operation("x", Kind.INPUT), Operation("x", Kind.INPUT)))


def test_an_operation_has_as_many_operands_as_its_kind_takes() -> None:
    with pytest.raises(InputError, match=r"'y' \(add\) has 1 operands instead of 2"):
        Graph((Operation("x", Kind.INPUT), Operation("y", Kind.ADD, (Source("x", 0),))))


@pytest.mark.parametrize("name", ["nobody", "x.out"])
def test_an_operand_is_somebodys_result(name: str) -> None:
    with pytest.raises(InputError, match=f"reads '{name}', which has no result"):
        Graph(
            (
                Operation("x", Kind.INPUT),
                Operation("x.out", Kind.OUTPUT, (Source("x", 0),)),
                Operation("y", Kind.ADD, (Source("x", 0), Source(name, 0))),
            )
        )


def test_no_operand_comes_from_the_future() -> None:
    with pytest.raises(InputError, match="reads a future sample of 'x'; delays are 0 or more"):
        Graph((Operation("x", Kind.INPUT), Operation("x.out", Kind.OUTPUT, (Source("x", -1),))))


# Size


@pytest.mark.parametrize("structure", ["fir-direct", "fir-transposed"])
def test_512_taps_are_a_graph_in_less_than_a_second(structure: str) -> None:
    taps = [Fraction(count, 1024) for count in range(1, 513)]
    start = time.process_time()
    made = graph(equations_text(structure, taps))
    assert time.process_time() - start < 1
    assert len(made.of_kind(Kind.ADD)) == 511
    assert len(made.of_kind(Kind.MULTIPLY)) == 512
