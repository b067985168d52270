"""Folding of published graphs, and the registers that a schedule needs."""

from collections import defaultdict

import pytest
from reader import Published, read

from scheduler.floors import unit_floor
from scheduler.graph import Edge
from scheduler.transforms import folded_delay, retime


def registers(
    edges: list[Edge], latency: dict[str, int], start: dict[str, int], cycles: int
) -> int:
    """The most values alive in any one of N cycles, a value counted once for all its readers.

    In cycle x there are K_v(x) + w - K_u(x - l(u)) values alive on an edge u -> v, where K counts
    the starts of an operation from a cycle on: K_v(x) = floor((s(v) - x) / N) + 1.
    """

    def starts(node: str, x: int) -> int:
        return (start[node] - x) // cycles + 1

    most = 0
    for x in range(cycles):
        alive: dict[str, int] = defaultdict(int)
        for u, v, w in edges:
            alive[u] = max(alive[u], starts(v, x) + w - starts(u, x - latency[u]))
        most = max(most, sum(alive.values()))
    return most


# Parhi, VLSI Digital Signal Processing Systems, Wiley 1999, secs. 6.2-6.4.1, Figs. 6.3 and 6.5: a
# biquad folded by 4. The folding equation (Parhi, Wang and Brown 1992) and the 6 registers were
# read; graph, order, retiming and folded delays are from memory, consistent when recomputed.


@pytest.fixture
def biquad() -> Published:
    return read("textbook_folded_biquad")


@pytest.fixture
def start(biquad: Published) -> dict[str, int]:
    order, retiming = biquad.document["folding"]["order"], biquad.fact("retiming")
    return {node: 4 * retiming[node] + order[node] for node in order}


def folded_delays(biquad: Published, start: dict[str, int]) -> dict[str, int]:
    stages = biquad.document["folding"]["P"]
    latency = {node: stages[kind] for node, kind in biquad.kinds.items()}
    return {
        f"{edge.source}-{edge.target}": folded_delay(edge, 4, latency, start)
        for edge in biquad.edges
    }


def test_all_eleven_folded_delays_of_the_biquad_are_as_published(
    biquad: Published, start: dict[str, int]
) -> None:
    delays = folded_delays(biquad, start)

    assert len(delays) == 11
    assert delays == biquad.fact("folded_delays")


def test_retiming_first_and_folding_by_the_order_alone_is_the_same(
    biquad: Published, start: dict[str, int]
) -> None:
    # As the book does it: retime the graph, then fold it.
    order = biquad.document["folding"]["order"]
    retimed = retime(biquad.edges, biquad.fact("retiming"))
    delays = {f"{e.source}-{e.target}": folded_delay(e, 4, biquad.times, order) for e in retimed}

    assert delays == biquad.fact("folded_delays")


def test_without_retiming_the_biquad_cannot_be_folded_in_this_order(biquad: Published) -> None:
    order = biquad.document["folding"]["order"]

    assert min(folded_delay(e, 4, biquad.times, order) for e in biquad.edges) < 0


def test_the_folded_biquad_needs_one_adder_and_one_multiplier(biquad: Published) -> None:
    order = biquad.document["folding"]["order"]
    for kind, units in biquad.fact("units").items():
        slots = [order[node] for node, its in biquad.kinds.items() if its == kind]

        assert sorted(slots) == [0, 1, 2, 3]
        assert unit_floor(len(slots), busy=1, parallelism=1, cycles=4) == units == 1


def test_a_chain_of_registers_behind_each_unit_has_6(
    biquad: Published, start: dict[str, int]
) -> None:
    longest: dict[str, int] = defaultdict(int)
    for edge in biquad.edges:
        kind = biquad.kinds[edge.source]
        longest[kind] = max(longest[kind], folded_delay(edge, 4, biquad.times, start))

    assert sum(longest.values()) == biquad.fact("registers_shared_chain") == 6


def test_sharing_registers_by_lifetimes_leaves_2(biquad: Published, start: dict[str, int]) -> None:
    needed = registers(list(biquad.edges), dict(biquad.times), start, cycles=4)

    assert needed == biquad.fact("registers_min") == 2


def test_published_lifetimes_need_2_registers() -> None:
    # Parhi 1999, sec. 6.3.1, first example: lifetimes read, the most at a time counted.
    example = read("textbook_lifetimes")
    edges, start = [], {}
    for value, alive in example.document["live"].items():
        edges.append(Edge(value, f"reader of {value}", 0))
        start |= {value: alive[0] - 2, f"reader of {value}": alive[-1]}
    latency = dict.fromkeys(example.document["live"], 1)

    assert registers(edges, latency, start, cycles=100) == example.fact("registers_min") == 2


def test_a_3_by_3_transposer_has_a_latency_of_4_and_4_registers() -> None:
    # Parhi 1999, sec. 6.3: row by row in, column by column out; from memory.
    example = read("textbook_transposer")
    order = example.document["lifetimes"]
    arrives = {value: cycle for cycle, value in enumerate(order["in_order"])}
    leaves = {value: cycle for cycle, value in enumerate(order["out_order"])}
    edges = [Edge(value, f"{value}.out", 0) for value in arrives]
    ports = dict.fromkeys(arrives, 0)

    def starts(latency: int) -> dict[str, int]:
        return arrives | {f"{value}.out": cycle + latency for value, cycle in leaves.items()}

    def in_time(latency: int) -> bool:
        start = starts(latency)
        return all(folded_delay(edge, order["period"], ports, start) >= 0 for edge in edges)

    least = next(latency for latency in range(order["period"]) if in_time(latency))

    assert least == example.fact("latency") == 4
    needed = registers(edges, ports, starts(least), order["period"])
    assert needed == example.fact("registers_min") == 4


def test_three_operations_of_two_cycles_need_three_units_in_three_cycles() -> None:
    # By the count of busy cycles, 6 in 3, two would do. No source: it shows on trying.
    assert unit_floor(operations=3, busy=2, parallelism=1, cycles=3) == 3
