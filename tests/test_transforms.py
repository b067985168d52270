"""Unfolding, retiming, folding delays and periods, against brute force on small graphs."""

from collections.abc import Mapping
from itertools import pairwise, product

import networkx as nx
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from scheduler.errors import InputError
from scheduler.graph import Edge
from scheduler.loops import iteration_bound
from scheduler.transforms import (
    critical_path,
    folded_delay,
    least_period_by_retiming,
    loop_text,
    path_matrices,
    retime,
    unfold,
)

RING = [Edge("a", "b", 0), Edge("b", "c", 0), Edge("c", "a", 2)]
TIMES = {"a": 1, "b": 2, "c": 1}


@st.composite
def timed_graphs(draw: st.DrawFn, most: int = 5) -> tuple[list[Edge], dict[int, int]]:
    """Graphs without delay-free loops: an edge that does not lead to a later node has a delay."""
    nodes = st.integers(0, draw(st.integers(0, most - 1)))
    ends = draw(st.lists(st.tuples(nodes, nodes, st.integers(0, 2)), max_size=2 * most))
    edges = [Edge(u, v, w if u < v else w + 1) for u, v, w in ends]
    return edges, {node: draw(st.integers(0, 3)) for node in range(most)}


def all_copies(times: Mapping[int, int], copies: int) -> dict[tuple[int, int], int]:
    return {(node, i): time for node, time in times.items() for i in range(copies)}


def test_unfolding_by_one_changes_names_only() -> None:
    assert unfold(RING, 1) == [Edge((u, 0), (v, 0), w) for u, v, w in RING]


def test_unfolding_keeps_parallel_edges() -> None:
    twice = [Edge("a", "b", 1), Edge("a", "b", 1)]

    assert len(unfold(twice, 3)) == 6


def test_nothing_is_unfolded_zero_times() -> None:
    with pytest.raises(InputError, match="cannot be unfolded 0 times"):
        unfold(RING, 0)


@settings(deadline=None)  # the machine may be busy
@given(timed_graphs(), st.integers(1, 5))
def test_unfolding_keeps_the_sum_of_delays(
    graph: tuple[list[Edge], dict[int, int]], copies: int
) -> None:
    edges, _ = graph

    assert sum(e.delays for e in unfold(edges, copies)) == sum(e.delays for e in edges)


@settings(deadline=None)  # the machine may be busy
@given(timed_graphs(), st.integers(1, 5))
def test_unfolding_multiplies_the_iteration_bound(
    graph: tuple[list[Edge], dict[int, int]], copies: int
) -> None:
    edges, times = graph
    unfolded = unfold(edges, copies)

    assert iteration_bound(unfolded, all_copies(times, copies)) == copies * iteration_bound(
        edges, times
    )


@settings(deadline=None)  # the machine may be busy
@given(timed_graphs(), st.integers(1, 5), st.integers(0, 30))
def test_unfolded_edges_join_the_same_samples(
    graph: tuple[list[Edge], dict[int, int]], copies: int, sample: int
) -> None:
    # Node v reads in sample n what u computed in sample n - w, whichever copies compute them.
    edges, _ = graph
    into = {(e.target, n): [] for e in edges for n in range(copies)}
    for (u, i), (v, k), blocks in unfold(edges, copies):
        into[v, k].append((u, i - copies * blocks - k))
    for v in {e.target for e in edges}:
        read = sorted((u, -w) for u, target, w in edges if target == v)

        assert sorted(into[v, sample % copies]) == read


@settings(deadline=None)  # the machine may be busy
@given(timed_graphs(), st.lists(st.integers(-2, 2), min_size=5, max_size=5))
def test_retiming_moves_delays_or_is_refused(
    graph: tuple[list[Edge], dict[int, int]], values: list[int]
) -> None:
    edges, _ = graph
    expected = [w + values[v] - values[u] for u, v, w in edges]
    if min(expected, default=0) < 0:
        with pytest.raises(InputError, match="retiming leaves -"):
            retime(edges, dict(enumerate(values)))
    else:
        assert [e.delays for e in retime(edges, dict(enumerate(values)))] == expected


def test_a_folded_delay_is_the_wait_between_a_result_and_its_use() -> None:
    start = {"a": 1, "b": 3}

    assert folded_delay(Edge("a", "b", 0), 10, {"a": 2}, start) == 0
    assert folded_delay(Edge("a", "b", 2), 10, {"a": 2}, start) == 20
    assert folded_delay(Edge("a", "b", 0), 10, {"a": 3}, start) == -1


def test_the_critical_path_is_named_from_its_beginning() -> None:
    assert critical_path(RING, TIMES) == (4, ("a", "b", "c"))


def test_a_node_alone_is_a_path() -> None:
    assert critical_path([], {"a": 1, "b": 5}) == (5, ("b",))


def test_an_empty_graph_has_no_path_and_no_period() -> None:
    assert critical_path([], {}) == (0, ())
    assert least_period_by_retiming([], {}) == (0, {})


@settings(deadline=None)  # the machine may be busy
@given(timed_graphs())
def test_the_critical_path_is_the_longest_simple_path(
    graph: tuple[list[Edge], dict[int, int]],
) -> None:
    edges, times = graph
    direct = nx.DiGraph()
    direct.add_nodes_from(times)
    direct.add_edges_from((u, v) for u, v, w in edges if w == 0)
    paths = [
        path
        for u in times
        for v in times
        for path in ([[u]] if u == v else nx.all_simple_paths(direct, u, v))
    ]
    longest, path = critical_path(edges, times)

    assert longest == max(sum(times[node] for node in each) for each in paths)
    assert longest == sum(times[node] for node in path)
    assert all(direct.has_edge(*ends) for ends in pairwise(path))


DELAY_FREE = [Edge("a", "b", 0), Edge("b", "a", 0)]


def test_a_loop_without_delay_is_refused_by_its_name() -> None:
    for function in (critical_path, path_matrices, least_period_by_retiming):
        with pytest.raises(InputError, match=r"the loop (a -> b -> a|b -> a -> b) has no delay"):
            function(DELAY_FREE, {"a": 1, "b": 1})


def test_numbers_that_would_overflow_are_refused() -> None:
    with pytest.raises(InputError, match="too large"):
        path_matrices([Edge("a", "b", 2**40)], {"a": 2**30, "b": 1})


@settings(deadline=None)  # the machine may be busy
@given(timed_graphs())
def test_path_matrices_hold_the_fewest_delays_and_the_longest_time_with_so_few(
    graph: tuple[list[Edge], dict[int, int]],
) -> None:
    edges, times = graph
    delays, longest = path_matrices(edges, times)
    for u, v in product(times, times):
        paths = list(walks(edges, u, v))
        fewest = min((w for w, _ in paths), default=-1)
        slowest = max((sum(times[n] for n in p) for w, p in paths if w == fewest), default=-1)

        assert (delays[u, v], longest[u, v]) == (fewest, slowest)


def walks(edges: list[Edge], first: int, last: int) -> list[tuple[int, list[int]]]:
    """Delays and nodes of all paths that meet no node twice."""
    if first == last:
        return [(0, [first])]
    graph = nx.MultiDiGraph()
    graph.add_nodes_from([first, last])
    graph.add_weighted_edges_from(edges)
    found = nx.all_simple_edge_paths(graph, first, last)
    return [
        (sum(graph.edges[edge]["weight"] for edge in path), [first, *(v for _, v, _ in path)])
        for path in found
    ]


@settings(deadline=None)  # the machine may be busy
@given(timed_graphs(most=4))
def test_no_retiming_beats_the_least_period(graph: tuple[list[Edge], dict[int, int]]) -> None:
    # Each step of a longest path raises r by 1 at most, so four nodes need no r above 3.
    edges, times = graph
    period, values = least_period_by_retiming(edges, times)

    assert critical_path(retime(edges, values), times)[0] == period
    assert period == min(
        critical_path(retime(edges, r), times)[0]
        for r in (dict(enumerate(each)) for each in product(range(4), repeat=4))
        if all(w + r[v] - r[u] >= 0 for u, v, w in edges)
    )


@settings(deadline=None)  # the machine may be busy
@given(timed_graphs())
def test_the_least_period_is_within_one_node_of_the_iteration_bound(
    graph: tuple[list[Edge], dict[int, int]],
) -> None:
    # Papaefthymiou, Mathematical Systems Theory 27, 1994; from memory.
    edges, times = graph
    period, _ = least_period_by_retiming(edges, times)
    bound = iteration_bound(edges, times)

    assert bound <= period <= bound + max(times.values())


def test_pipelining_cuts_a_chain_to_its_longest_node() -> None:
    chain = [Edge(k, k + 1, 0) for k in range(200)]
    period, values = least_period_by_retiming(chain, {k: 1 + k % 3 for k in range(201)})

    assert period == 3
    assert min(values.values()) == 0


def test_long_loops_are_named_in_part() -> None:
    assert loop_text(["w", "w.1"]) == "w -> w.1 -> w"
    assert loop_text(range(40)) == (
        "0 -> 1 -> 2 -> 3 -> 4 -> 5 -> (29 more) -> 35 -> 36 -> 37 -> 38 -> 39 -> 0"
    )
