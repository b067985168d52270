"""Retiming of published graphs."""

from itertools import product

import pytest
from reader import Published, read

from scheduler.transforms import (
    critical_path,
    least_period_by_retiming,
    path_matrices,
    retime,
)

# Leiserson and Saxe, Retiming synchronous circuitry, Algorithmica 6, 1991, Fig. 1. The graph is
# from memory; 24 and 13 were read in course notes that cite the paper.


@pytest.fixture
def correlator() -> Published:
    return read("correlator")


def test_the_correlator_has_a_critical_path_of_24(correlator: Published) -> None:
    longest, _ = critical_path(correlator.edges, correlator.times)

    assert longest == correlator.fact("critical_path") == 24
    assert sum(edge.delays for edge in correlator.edges) == correlator.fact("registers")


def test_the_correlator_is_retimed_to_13(correlator: Published) -> None:
    period, values = least_period_by_retiming(correlator.edges, correlator.times)
    retimed = retime(correlator.edges, values)

    assert period == correlator.fact("min_period_retiming") == 13
    assert critical_path(retimed, correlator.times)[0] == 13


def test_the_correlator_reaches_9_where_no_path_runs_on_through_the_host(
    correlator: Published,
) -> None:
    # Computed, not published. The host falls into two nodes that are retimed alike, and all r of
    # the other nodes are tried: the delays between the halves keep them within -4..0.
    cut = [edge._replace(target="end") if edge.target == "h" else edge for edge in correlator.edges]
    times = {**correlator.times, "end": 0}
    others = [node for node in correlator.times if node != "h"]
    trials = (
        {"h": 0, "end": 0, **dict(zip(others, values, strict=True))}
        for values in product(range(-4, 1), repeat=len(others))
    )
    legal = (r for r in trials if all(w + r[v] - r[u] >= 0 for u, v, w in cut))
    least = min(critical_path(retime(cut, values), times)[0] for values in legal)

    assert least == correlator.fact("min_period_retiming_hostsplit") == 9


# Parhi, VLSI Digital Signal Processing Systems, Wiley 1999, secs. 4.1-4.4, Figs. 4.1 and 4.2:
# y(n) = a y(n-2) + b y(n-3) + x(n). The retiming was read; graph and matrices are from memory,
# recomputed.


@pytest.fixture
def recursion() -> Published:
    return read("textbook_retiming")


def test_the_published_retiming_shortens_the_critical_path_from_3_to_2(
    recursion: Published,
) -> None:
    retimed = retime(recursion.edges, recursion.fact("retiming"))

    assert critical_path(recursion.edges, recursion.times)[0] == 3
    assert recursion.fact("critical_path") == 3
    assert critical_path(retimed, recursion.times)[0] == 2
    assert recursion.fact("critical_path_retimed") == 2


def test_no_retiming_of_the_recursion_beats_the_published_one(recursion: Published) -> None:
    period, values = least_period_by_retiming(recursion.edges, recursion.times)

    assert period == recursion.fact("min_period_retiming") == 2
    assert values == recursion.fact("retiming")


def test_the_matrices_of_the_recursion_are_as_published(recursion: Published) -> None:
    delays, times = path_matrices(recursion.edges, recursion.times)

    assert delays.tolist() == recursion.fact("W")
    assert times.tolist() == recursion.fact("D")


@pytest.mark.parametrize(
    ("name", "period"),
    [
        ("textbook_node_longer_than_bound", 4),  # Parhi 1999, sec. 5.5.1, Fig. 5.6; read
        ("ring_4_3", 2),  # Parhi 1999, sec. 5.5.1; from memory, the graph is our own
    ],
)
def test_retiming_alone_stays_above_some_bounds(name: str, period: int) -> None:
    graph = read(name)
    least, _ = least_period_by_retiming(graph.edges, graph.times)

    assert least == graph.fact("min_period_retiming") == period
