"""Unfolding of published graphs, alone and with retiming."""

from fractions import Fraction
from itertools import count

import pytest
from reader import Published, read

from scheduler.floors import cycles_range
from scheduler.graph import Edge
from scheduler.loops import iteration_bound
from scheduler.transforms import critical_path, least_period_by_retiming, unfold


@pytest.mark.parametrize(
    ("name", "copies"),
    [
        ("textbook_unfold_9", 2),  # Parhi 1999, sec. 5.1: y(n) = a y(n-9) + x(n); read
        ("textbook_unfold_37", 4),  # Parhi 1999, sec. 5.2; from memory, recomputed
    ],
)
def test_unfolding_leaves_the_published_delays(name: str, copies: int) -> None:
    graph = read(name)
    named = {
        f"{source}{i}->{target}{k}": delays
        for (source, i), (target, k), delays in unfold(graph.edges, copies)
    }

    assert named == graph.fact("unfold")


def least_period(graph: Published, copies: int) -> int:
    times = {(node, i): time for node, time in graph.times.items() for i in range(copies)}
    return least_period_by_retiming(unfold(graph.edges, copies), times)[0]


@pytest.mark.parametrize(
    ("name", "copies"),
    [
        # Parhi 1999, sec. 5.5.1, Fig. 5.6: two samples in 6 where a node of 4 alone forbids one in
        # 3; facts read, the graph is our own smallest one with the same numbers.
        ("textbook_node_longer_than_bound", 2),
        # Parhi 1999, sec. 5.5.1: a bound of 4/3 is reached by three samples in 4; from memory, the
        # graph is our own.
        ("ring_4_3", 3),
    ],
)
def test_unfolded_graphs_are_retimed_to_their_published_bound(name: str, copies: int) -> None:
    graph = read(name)
    times = {(node, i): time for node, time in graph.times.items() for i in range(copies)}
    bound = Fraction(graph.fact("unfolded_bound"))

    assert iteration_bound(unfold(graph.edges, copies), times) == bound
    assert least_period(graph, copies) == graph.fact("unfolded_min_period") == bound


def test_the_ring_reaches_its_bound_at_no_parallelism_below_3() -> None:
    # Parhi 1999, sec. 5.5.1; from memory, the graph is our own.
    ring = read("ring_4_3")
    one, two, three = (Fraction(least_period(ring, copies), copies) for copies in (1, 2, 3))

    assert min(one, two) > Fraction(4, 3)
    assert three == Fraction(4, 3)


def test_a_bound_of_4_3_and_a_node_of_6_need_a_parallelism_of_6() -> None:
    # Parhi 1999, sec. 5.5.1: the least J with a whole J * 4/3 that is not below 6; from memory.
    bound = Fraction(4, 3)
    least = next(
        j for j in count(1) if cycles_range(j, bound, longest_busy=6, cycles_per_sample=bound)
    )

    assert least == read("textbook_min_unfolding").fact("min_unfolding") == 6


def direct_form(taps: int) -> tuple[list[Edge], dict[str, int]]:
    """A direct-form FIR filter: x[n-k] times a constant, added up in a chain."""
    times = {"x": 0, **{f"m{k}": 2 for k in range(taps)}, **{f"a{k}": 1 for k in range(1, taps)}}
    edges = [Edge("x", f"m{k}", k) for k in range(taps)]
    for k in range(1, taps):
        edges += [Edge(f"a{k - 1}" if k > 1 else "m0", f"a{k}", 0), Edge(f"m{k}", f"a{k}", 0)]
    return edges, times


# The two below are the trade's common practice in J-way block processing; no source.


@pytest.mark.parametrize("copies", [2, 3, 4])
def test_unfolding_a_direct_form_leaves_its_critical_path_and_multiplies_its_operations(
    copies: int,
) -> None:
    edges, times = direct_form(taps=6)
    unfolded = unfold(edges, copies)
    copied = {(node, i): time for node, time in times.items() for i in range(copies)}

    assert critical_path(unfolded, copied)[0] == critical_path(edges, times)[0] == 7
    assert {end for edge in unfolded for end in edge[:2]} == set(copied)


@pytest.mark.parametrize("copies", [2, 3, 4])
def test_one_delay_of_an_unfolded_graph_is_as_many_samples_as_there_are_copies(copies: int) -> None:
    block_late = unfold([Edge("u", "v", copies)], copies)

    assert block_late == [Edge(("u", i), ("v", i), 1) for i in range(copies)]
