"""Bounds, loops, floors and what they forbid, against brute force over all loops."""

import random
import time
from collections.abc import Mapping
from fractions import Fraction
from pathlib import Path
from typing import Any

import networkx as nx
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from scheduler.design import Design, design_from
from scheduler.errors import InputError
from scheduler.floors import cycles_range, unit_floor, unit_floor_over_all
from scheduler.graph import Edge
from scheduler.limits import limits_of
from scheduler.loops import critical_loops, iteration_bound
from scheduler.obstacles import which_forbids


@st.composite
def looped_graphs(draw: st.DrawFn) -> tuple[list[Edge], dict[int, int]]:
    """Graphs with parallel edges, self-loops and free operations, and no delay-free loop."""
    nodes = st.integers(0, draw(st.integers(0, 6)))
    ends = draw(st.lists(st.tuples(nodes, nodes, st.integers(0, 3)), max_size=18))
    edges = [Edge(u, v, w if u < v else w + 1) for u, v, w in ends]
    return edges, {node: draw(st.integers(0, 4)) for node in range(7)}


def ratios(edges: list[Edge], latency: Mapping[int, int]) -> dict[tuple[int, ...], Fraction]:
    """The ratio of every loop, by brute force; each from its least node."""
    fewest: dict[tuple[int, int], int] = {}
    for u, v, w in edges:
        fewest[u, v] = min(w, fewest.get((u, v), w))
    found = {}
    for loop in nx.simple_cycles(nx.DiGraph(fewest.keys())):
        ends = zip(loop, [*loop[1:], loop[0]], strict=True)
        ratio = Fraction(sum(latency[node] for node in loop), sum(fewest[pair] for pair in ends))
        found[turned(loop)] = ratio
    return found


def turned(loop: Any) -> tuple[int, ...]:
    first = loop.index(min(loop))
    return (*loop[first:], *loop[:first])


@settings(deadline=None)  # the machine may be busy
@given(looped_graphs())
def test_the_bound_is_the_largest_ratio_of_all_loops(
    graph: tuple[list[Edge], dict[int, int]],
) -> None:
    edges, latency = graph

    assert iteration_bound(edges, latency) == max(ratios(edges, latency).values(), default=0)


@settings(deadline=None)  # the machine may be busy
@given(looped_graphs())
def test_critical_loops_are_all_loops_of_the_largest_ratio(
    graph: tuple[list[Edge], dict[int, int]],
) -> None:
    edges, latency = graph
    by_loop = ratios(edges, latency)
    largest = max(by_loop.values(), default=0)
    named = [turned(loop) for loop in critical_loops(edges, latency, most=10**6)]

    assert sorted(named) == sorted(loop for loop, ratio in by_loop.items() if ratio == largest)


@settings(deadline=None)  # the machine may be busy
@given(looped_graphs(), st.integers(1, 10**12))
def test_scaling_latencies_scales_the_bound_beyond_64_bits(
    graph: tuple[list[Edge], dict[int, int]], factor: int
) -> None:
    edges, latency = graph
    huge = {node: factor**2 * cycles for node, cycles in latency.items()}

    assert iteration_bound(edges, huge) == factor**2 * iteration_bound(edges, latency)


def test_a_graph_without_loops_has_no_bound_and_no_critical_loop() -> None:
    chain = [Edge("a", "b", 0), Edge("b", "c", 3)]

    assert iteration_bound(chain, {"a": 1, "b": 1, "c": 1}) == 0
    assert critical_loops(chain, {"a": 1, "b": 1, "c": 1}) == []


def test_of_parallel_edges_the_one_with_the_fewest_delays_counts() -> None:
    edges = [Edge("a", "b", 0), Edge("b", "a", 3), Edge("b", "a", 1), Edge("b", "a", 2)]

    assert iteration_bound(edges, {"a": 1, "b": 2}) == 3
    assert critical_loops(edges, {"a": 1, "b": 2}) == [("a", "b")]


def test_a_loop_without_delay_is_refused_by_its_name() -> None:
    edges = [Edge("a", "b", 0), Edge("b", "c", 0), Edge("c", "a", 0)]

    with pytest.raises(
        InputError, match=r"the loop (a -> b -> c|b -> c -> a|c -> a -> b) -> . has"
    ):
        iteration_bound(edges, {"a": 1, "b": 1, "c": 1})


def test_loops_start_where_the_graph_does_and_the_shortest_comes_first() -> None:
    edges = [
        Edge("w", "far", 0),
        Edge("far", "z", 0),
        Edge("z", "w", 1),
        Edge("w", "near", 0),
        Edge("near", "w", 1),
    ]
    latency = {"w": 1, "far": 1, "z": 1, "near": 2}

    assert critical_loops(edges, latency) == [("w", "near"), ("w", "far", "z")]


def test_only_so_many_of_a_million_loops_are_named() -> None:
    edges = [Edge(60, 0, 1)]
    for k in range(0, 60, 3):  # twenty forks in a row: 2 ** 20 loops
        edges += [
            Edge(k, k + 1, 0),
            Edge(k, k + 2, 0),
            Edge(k + 1, k + 3, 0),
            Edge(k + 2, k + 3, 0),
        ]
    loops = critical_loops(edges, dict.fromkeys(range(61), 1), most=7)

    assert len(set(loops)) == 7
    assert {len(loop) for loop in loops} == {41}


def planted(operations: int, edges: int, seed: int) -> tuple[list[Edge], dict[int, int]]:
    """Dense random loops, none above 3 cycles per sample, and one planted at 11/3 among them.

    An edge u -> v outside the planted loop has so many delays that 3 w + h(v) - h(u) >= l(u) for
    heights h drawn beforehand: summed round a loop, 3 * delays >= latency.
    """
    draw = random.Random(seed)
    latency = {node: draw.randint(1, 4) for node in range(operations)}
    height = {node: draw.randint(0, 40) for node in range(operations)}
    found = []
    for _ in range(edges):
        u, v = draw.randrange(5, operations), draw.randrange(5, operations)
        slack = latency[u] + height[u] - height[v]
        found.append(Edge(u, v, max(0, -(-slack // 3))))
    latency |= {0: 2, 1: 2, 2: 3, 3: 2, 4: 2}
    loop = [Edge(0, 1, 0), Edge(1, 2, 1), Edge(2, 3, 0), Edge(3, 4, 1), Edge(4, 0, 1)]
    ways = [Edge(9, 0, 0), Edge(4, 9, 100)]  # the planted loop is knotted into the others
    return [*found, *loop, *ways], latency


@pytest.mark.parametrize(("operations", "edges"), [(1000, 2200), (1000, 8000)])
def test_a_loop_planted_among_a_thousand_operations_is_found_at_once(
    operations: int, edges: int
) -> None:
    graph, latency = planted(operations, edges, seed=edges)
    began = time.process_time()
    bound, loops = iteration_bound(graph, latency), critical_loops(graph, latency)

    assert bound == Fraction(11, 3)
    assert loops == [(0, 1, 2, 3, 4)]
    assert time.process_time() - began < 1


def test_a_ring_of_a_thousand_operations_is_one_loop() -> None:
    ring = [Edge(k, (k + 1) % 1000, int(k % 7 == 0)) for k in range(1000)]

    assert iteration_bound(ring, dict.fromkeys(range(1000), 2)) == Fraction(2000, 143)
    assert critical_loops(ring, dict.fromkeys(range(1000), 2)) == [tuple(range(1000))]


@settings(deadline=None)  # the machine may be busy
@given(st.integers(1, 20), st.integers(1, 4), st.integers(1, 4), st.integers(4, 30))
def test_a_unit_floor_is_the_fewest_units_that_hold_all_operations(
    operations: int, busy: int, parallelism: int, cycles: int
) -> None:
    floor = unit_floor(operations, busy, parallelism, cycles)
    held = len(range(busy, cycles + 1, busy))  # busy intervals, end to end, within N

    assert floor * held >= parallelism * operations
    assert (floor - 1) * held < parallelism * operations


@settings(deadline=None)  # the machine may be busy
@given(st.integers(1, 20), st.integers(1, 4), st.integers(1, 4), st.integers(4, 30))
def test_the_floor_over_all_parallelisms_is_below_each_of_them(
    operations: int, busy: int, parallelism: int, cycles: int
) -> None:
    over_all = unit_floor_over_all(operations, busy, Fraction(cycles, parallelism))

    assert over_all <= unit_floor(operations, busy, parallelism, cycles)


def test_a_fractional_rate_is_met_by_the_parallelism_that_makes_it_whole() -> None:
    third = Fraction(4, 3)

    assert [list(cycles_range(j, third, 1, third)) for j in (1, 2, 3)] == [[], [], [4]]
    assert unit_floor_over_all(8, 1, Fraction(17, 2)) == 1
    assert unit_floor_over_all(9, 1, Fraction(17, 2)) == 2


def test_a_block_is_as_long_as_its_longest_operation_keeps_a_unit() -> None:
    assert cycles_range(1, Fraction(3, 2), longest_busy=4, cycles_per_sample=Fraction(6)) == range(
        4, 7
    )


BIQUAD = """
w[n] = x[n] + 1.561*w[n-1] - 0.6414*w[n-2]
y[n] = 0.0201*w[n] + 0.0402*w[n-1] + 0.0201*w[n-2]
"""
SUM = "y[n] = x[n] + x[n-1] + x[n-2]"


def design(
    cycles_per_sample: str,
    equations: str = BIQUAD,
    technology: str = "unit-time",
    **caps: int,
) -> Design:
    document: dict[str, Any] = {
        "title": "a test",
        "algorithm": {"inputs": ["x"], "outputs": ["y"], "equations": equations},
        "requirement": {"cycles_per_sample": cycles_per_sample},
        "caps": caps,
        "technology": {"use": technology},
    }
    return design_from(document, "a test", Path())


def test_the_limits_of_a_biquad() -> None:
    # Five multiplications and four additions; the loop of w[n-1] takes 2 + 1 + 1 cycles.
    limits = limits_of(design("4", parallelism=2))

    assert limits.iteration_bound == limits.least_cycles_per_sample == 4
    assert [(loop.latency, loop.delays) for loop in limits.loops] == [(4, 1)]
    assert limits.loops[0].bound == 4
    assert limits.critical_path == 8
    assert limits.path[0] in {"x", "w.1"}
    assert limits.least_period == 4
    assert limits.units_over_all == {"adder": 1, "multiplier": 2}
    assert limits.rate_is_possible
    assert limits.forbidden is None


def test_each_parallelism_has_its_cycles_and_floors() -> None:
    one, two = limits_of(design("9/2", parallelism=2)).blocks

    assert (one.parallelism, one.cycles) == (1, range(4, 5))
    assert one.units == {"adder": 1, "multiplier": 2}
    assert one.area == 1 * 1 + 2 * 8
    assert (two.parallelism, two.cycles) == (2, range(8, 10))
    assert two.units == {"adder": 1, "multiplier": 2}


def test_an_algorithm_without_loops_is_bound_by_nothing_but_the_clock() -> None:
    limits = limits_of(design("3", equations=SUM))

    assert limits.iteration_bound == 0
    assert limits.loops == ()
    assert limits.least_cycles_per_sample == Fraction(1, 4)
    assert limits.least_period == 1


def test_a_large_graph_is_not_retimed() -> None:
    long = "y[n] = " + " + ".join(f"x[n-{k}]" for k in range(400))

    assert limits_of(design("8", equations=long)).least_period is None


def test_nothing_is_forbidden_where_there_is_room() -> None:
    assert which_forbids(design("16", multiplier=2, adder=2, latency=30, area=40)) is None


def test_a_loop_that_is_slower_than_the_rate_is_named_with_its_cycles() -> None:
    reason = which_forbids(design("7/2"))

    assert reason is not None
    assert reason.startswith("the loop w")
    assert reason.endswith(" takes 4 cycles per sample, the rate leaves 3.5")


def test_a_loop_of_several_samples_is_named_with_all_of_them() -> None:
    slow = "w[n] = x[n] + 0.5*w[n-3]\ny[n] = w[n]"

    assert which_forbids(design("1/2", equations=slow)) == (
        "the loop w -> w.1 -> w takes 3 cycles for 3 samples, 1 per sample, the rate leaves 0.5"
    )


def test_a_cap_on_a_unit_below_its_floor_is_named() -> None:
    assert which_forbids(design("4", multiplier=1)) == (
        "5 operations of 1 cycle in 4 cycles per sample need 2 of unit 'multiplier' at any "
        "parallelism, its cap is 1"
    )


def test_a_unit_may_be_too_few_for_every_parallelism_within_its_cap() -> None:
    # Nine additions in 9/2 cycles per sample: two adders are enough only for even parallelisms.
    nine = "y[n] = " + " + ".join(f"x[n-{k}]" for k in range(10))

    assert which_forbids(design("9/2", equations=nine, adder=2)) is None
    assert which_forbids(design("9/2", equations=nine, adder=2, parallelism=1)) == (
        "no parallelism up to its cap fits the other caps: with parallelism 1 it takes 3 of unit "
        "'adder' and the cap is 2"
    )


def test_units_may_be_too_large_for_the_cap_on_the_area() -> None:
    reason = which_forbids(design("4", area=16, parallelism=1))

    assert reason == (
        "no parallelism up to its cap fits the other caps: with parallelism 1 the units alone "
        "take an area of 17 and the cap is 16"
    )


def test_a_clock_slower_than_the_samples_needs_parallelism() -> None:
    assert which_forbids(design("1/2", equations=SUM)) is None
    reason = which_forbids(design("1/2", equations=SUM, parallelism=1))

    assert reason is not None
    assert reason.startswith("the clock leaves 0.5 cycles per sample")
    assert reason.endswith("takes a whole cycle at the least; a parallelism of 2 would do")


def test_a_unit_that_is_busy_for_longer_than_a_block_needs_parallelism() -> None:
    product = "y[n] = 0.5*x[n]"
    reason = which_forbids(
        design("1", equations=product, technology="unit-time-unpipelined", parallelism=1)
    )

    assert reason is not None
    assert reason.endswith("keeps a unit busy for 2 cycles; a parallelism of 2 would do")


def test_a_bound_between_whole_cycles_needs_parallelism() -> None:
    ring = "w[n] = x[n-1] + 0.5*w[n-2]\ny[n] = w[n]"
    reason = which_forbids(design("3/2", equations=ring, parallelism=1))

    assert which_forbids(design("3/2", equations=ring, parallelism=2)) is None
    assert reason is not None
    assert reason.endswith("needs 1.5 cycles per sample in its loops; a parallelism of 2 would do")


def test_a_path_longer_than_the_cap_on_the_latency_is_named() -> None:
    # Two additions of w, then a product and two additions of y.
    assert which_forbids(design("16", latency=5)) == (
        "the path x -> w.2 -> w -> y.1 -> y.3 -> y -> y.out takes 6 cycles, the cap on the latency "
        "leaves 5"
    )
    assert which_forbids(design("16", latency=6)) is None
