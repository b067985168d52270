"""Iteration bounds, loops and critical paths of published graphs."""

from collections import Counter
from fractions import Fraction

import networkx as nx
import pytest
from reader import Published, read

from scheduler.graph import Edge
from scheduler.loops import critical_loops, iteration_bound
from scheduler.transforms import critical_path, path_matrices

# Fifth-order elliptic wave filter, statement list of the 1992 high-level-synthesis workshop
# benchmarks (Kung, Whitehouse and Kailath, VLSI and Modern Signal Processing, 1985). The graph was
# read in public copies of the listing; the numbers are from memory, recomputed.
ARITHMETIC = {"add", "mul"}


@pytest.fixture
def elliptic() -> Published:
    return read("elliptic_wave_filter")


def among_operations(graph: Published) -> list[Edge]:
    return [e for e in graph.edges if {graph.kinds[e.source], graph.kinds[e.target]} <= ARITHMETIC]


def operation_times(graph: Published, multiplication: int) -> dict[str, int]:
    times = {"add": 1, "mul": multiplication}
    return {node: times[kind] for node, kind in graph.kinds.items() if kind in ARITHMETIC}


def test_the_elliptic_filter_has_its_published_operations(elliptic: Published) -> None:
    counted = Counter(kind for kind in elliptic.kinds.values() if kind in ARITHMETIC)

    assert counted == elliptic.fact("ops") == {"add": 26, "mul": 8}
    direct = {(e.source, e.target) for e in among_operations(elliptic) if e.delays == 0}
    assert len(direct) == elliptic.fact("dag_edges") == 47


def test_the_elliptic_filter_is_17_long_and_14_deep(elliptic: Published) -> None:
    edges = among_operations(elliptic)
    long, _ = critical_path(edges, operation_times(elliptic, multiplication=2))
    deep, path = critical_path(edges, operation_times(elliptic, multiplication=1))

    assert long == elliptic.fact("critical_path") == 17
    assert deep == len(path) == elliptic.fact("critical_path_unit") == 14


@pytest.mark.parametrize(("multiplication", "bound"), [(1, 13), (2, 16), (3, 19), (4, 22), (5, 25)])
def test_the_elliptic_filter_is_bound_by_its_multiplications(
    elliptic: Published, multiplication: int, bound: int
) -> None:
    times = operation_times(elliptic, multiplication)

    assert iteration_bound(among_operations(elliptic), times) == bound


def test_the_elliptic_filter_is_bound_by_16_with_its_ports_too(elliptic: Published) -> None:
    bound = Fraction(elliptic.fact("iteration_bound"))

    assert iteration_bound(elliptic.edges, elliptic.times) == bound == 16


def test_all_operations_of_the_elliptic_filter_lie_on_one_knot_of_loops(
    elliptic: Published,
) -> None:
    knots = nx.strongly_connected_components(
        nx.DiGraph((e.source, e.target) for e in among_operations(elliptic))
    )

    assert max(map(len, knots)) == 34


@pytest.mark.parametrize(
    "name",
    [
        "textbook_loop_bound_6",  # Parhi 1999, sec. 2.3, Fig. 2.1(b); read
        "textbook_three_loops",  # Parhi 1999, sec. 2.4, Fig. 2.2; read, delays from memory
        "textbook_two_loops",  # Parhi 1999, Fig. 2.3(b); values read, drawing from memory
        "textbook_retiming",  # Parhi 1999, secs. 4.1-4.4; graph from memory, recomputed
        "textbook_node_longer_than_bound",  # Parhi 1999, sec. 5.5.1, Fig. 5.6; read, graph our own
        "textbook_folded_biquad",  # Parhi 1999, sec. 6.2, Fig. 6.3; graph from memory
        "ring_4_3",  # Parhi 1999, sec. 5.5.1; bound from memory, graph our own
        "two_biquads",  # size as in Chao, LaPaugh and Sha 1997; from memory, recomputed
        "recursion_direct",  # textbook fact, from memory, recomputed
        "recursion_reassociated",  # textbook fact, from memory, recomputed
    ],
)
def test_graphs_have_their_published_bounds(name: str) -> None:
    graph = read(name)

    assert iteration_bound(graph.edges, graph.times) == Fraction(graph.fact("iteration_bound"))


# Parhi 1999, sec. 2.4, Fig. 2.2 (loop list and bounds read), and Fig. 2.3(b) (values read).
@pytest.mark.parametrize("name", ["textbook_three_loops", "textbook_two_loops"])
def test_each_loop_has_its_published_bound(name: str) -> None:
    graph = read(name)
    loops = nx.simple_cycles(nx.DiGraph((e.source, e.target) for e in graph.edges))
    bounds = [iteration_bound(edges_within(graph, set(loop)), graph.times) for loop in loops]

    assert sorted(bounds) == sorted(map(Fraction, graph.fact("loop_bounds")))


def edges_within(graph: Published, nodes: set[str]) -> list[Edge]:
    return [edge for edge in graph.edges if {edge.source, edge.target} <= nodes]


def test_the_critical_loop_of_the_three_is_the_one_of_4_over_2() -> None:
    # Parhi 1999, sec. 2.4, Fig. 2.2: loop bounds 4/2, 5/3, 5/4; read.
    graph = read("textbook_three_loops")

    assert critical_loops(graph.edges, graph.times) == [("1", "4", "2")]


def test_longest_paths_between_the_delays_are_the_published_first_matrix() -> None:
    # Parhi 1999, sec. 2.4: L(1) of the longest path matrix algorithm; from memory, recomputed.
    graph = read("textbook_three_loops")
    chain = graph.document["delay_chain"]
    places = range(1, chain["length"] + 1)
    ends = {f"{side} {place}": 0 for side in ("out of", "into") for place in places}
    direct = [edge for edge in graph.edges if edge.delays == 0]
    direct.append(Edge(chain["after"], "into 1", 0))
    direct += [Edge(f"out of {place}", f"into {place + 1}", 0) for place in places[:-1]]
    direct += [Edge(f"out of {place}", node, 0) for place, node in chain["taps"].items()]
    _, times = path_matrices(direct, {**ends, **graph.times})

    assert times[:4, 4:8].tolist() == graph.fact("lpm_L1")


@pytest.mark.parametrize(
    ("name", "longest"),
    [
        ("textbook_loop_bound_6", 6),  # Parhi 1999, sec. 2.3, Fig. 2.1(b); read
        ("two_biquads", 7),  # from memory; the arrangement of the adders may differ
    ],
)
def test_critical_paths_are_as_published(name: str, longest: int) -> None:
    graph = read(name)

    assert critical_path(graph.edges, graph.times)[0] == graph.fact("critical_path") == longest


def test_the_two_biquads_have_their_published_operations() -> None:
    # Size as in Chao, LaPaugh and Sha, IEEE TCAD 1997; from memory.
    graph = read("two_biquads")

    assert Counter(graph.kinds.values()) == graph.fact("ops")
