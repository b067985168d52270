"""Unfolding, retiming and folding of signal-flow graphs.

Plain data in and out: edges with whole numbers of delays, and times of nodes in any one unit
(cycles here, units of combinational time in a textbook). Nothing here knows about units or
clocks, and nothing checks that the graph computes anything sensible.
"""

from __future__ import annotations

from collections.abc import Hashable, Iterable, Mapping, Sequence
from typing import Any

import networkx as nx
import numpy as np
from numpy.typing import NDArray

from scheduler.errors import InputError
from scheduler.graph import Edge

Whole = NDArray[np.int64]
Truth = NDArray[np.bool_]
_FAR = 2**61


def unfold(edges: Iterable[Edge], copies: int) -> list[Edge]:
    """The graph that works on `copies` (J) samples at a time.

    Every node u becomes J nodes (u, 0) .. (u, J - 1); an edge u -> v with w delays becomes the
    edges (u, i) -> (v, (i + w) mod J) with floor((i + w) / J) delays, each now a block of J
    samples. The sum of delays stays as it was, and every loop keeps its bound per sample.

    Args:
        edges: the graph; parallel edges are kept.
        copies: J, 1 or more.

    Returns:
        J edges for every edge, in the order of `edges`, copy 0 first.

    Raises:
        InputError: for J below 1.

    Example:
        >>> [edge.delays for edge in unfold([Edge("u", "v", 37)], 4)]
        [9, 9, 9, 10]

    Reference:
        Parhi and Messerschmitt, IEEE Transactions on Computers 40(2), 1991.
    """
    if copies < 1:
        raise InputError(f"a graph cannot be unfolded {copies} times", remedy="J is 1 or more")
    return [
        Edge((source, i), (target, (i + delays) % copies), (i + delays) // copies)
        for source, target, delays in edges
        for i in range(copies)
    ]


def retime(edges: Iterable[Edge], values: Mapping[Hashable, int]) -> list[Edge]:
    """The graph with its delays moved: an edge u -> v has w + r(v) - r(u) of them afterwards.

    Args:
        edges: the graph.
        values: r of every node that has an edge.

    Returns:
        The edges in the same order.

    Raises:
        InputError: where an edge would have fewer than 0 delays.

    Reference:
        Leiserson and Saxe, Algorithmica 6, 1991.
    """
    moved = [Edge(u, v, w + values[v] - values[u]) for u, v, w in edges]
    for edge in moved:
        if edge.delays < 0:
            raise InputError(
                f"retiming leaves {edge.delays} delays on the edge {edge.source} -> {edge.target}",
                remedy="r may rise along an edge by any amount, and fall by its delays at most",
            )
    return moved


def folded_delay(
    edge: Edge,
    cycles: int,
    latency: Mapping[Hashable, int],
    start: Mapping[Hashable, int],
) -> int:
    """Cycles for which a value waits on an edge once the graph is folded: D(u -> v).

    D = N w - l(u) + s(v) - s(u), with s = N r + t. Below 0 the value would come too late; that is
    for the caller to judge.

    Args:
        edge: u -> v with w delays.
        cycles: N, the folding factor.
        latency: l, cycles.
        start: s, start cycles.

    Reference:
        Parhi, Wang and Brown, IEEE Journal of Solid-State Circuits 27(1), 1992.
    """
    source, target, delays = edge
    return cycles * delays - latency[source] + start[target] - start[source]


def critical_path(
    edges: Iterable[Edge], times: Mapping[Hashable, int]
) -> tuple[int, tuple[Hashable, ...]]:
    """The longest path without a delay, through a host of time 0 too where there is one.

    Args:
        edges: the graph.
        times: time of every node, 0 or more.

    Returns:
        Its time and its nodes; 0 and none for an empty graph.

    Raises:
        InputError: for a loop without a delay.
    """
    direct = _direct(edges, times)
    order = _topological(direct)
    ready: dict[Hashable, int] = {}
    before: dict[Hashable, Hashable] = {}
    for node in order:
        slowest = max(direct.predecessors(node), key=ready.__getitem__, default=None)
        if slowest is not None:
            before[node] = slowest
        ready[node] = times[node] + (0 if slowest is None else ready[slowest])
    if not ready:
        return 0, ()
    path = [max(reversed(order), key=ready.__getitem__)]  # on to a host or port of time 0
    while path[-1] in before:
        path.append(before[path[-1]])
    return ready[path[0]], tuple(reversed(path))


def _direct(edges: Iterable[Edge], times: Mapping[Hashable, int]) -> Any:
    """The edges without delays, between all nodes, as a directed graph of networkx."""
    direct = nx.DiGraph()
    direct.add_nodes_from(times)
    direct.add_edges_from((u, v) for u, v, w in edges if w == 0)
    return direct


def _topological(direct: Any) -> list[Hashable]:
    try:
        return list(nx.topological_sort(direct))
    except nx.NetworkXUnfeasible:
        raise undelayed([source for source, _ in nx.find_cycle(direct)]) from None


def undelayed(loop: Sequence[Hashable]) -> InputError:
    """What is wrong with a loop that has no delay."""
    return InputError(
        f"the loop {loop_text(loop)} has no delay, so no sample of it can ever be computed",
        remedy="delay one of its signals by a sample",
    )


def loop_text(loop: Sequence[Hashable]) -> str:
    """A loop as messages name it, 'w -> w.1 -> w'; the middle of a long one is left out."""
    names = [str(node) for node in loop]
    if len(names) > 12:
        names[6:-5] = [f"({len(names) - 11} more)"]
    return " -> ".join([*names, str(loop[0])])


def path_matrices(edges: Iterable[Edge], times: Mapping[Hashable, int]) -> tuple[Whole, Whole]:
    """Fewest delays between all nodes (W), and the longest time of the paths with so few (D).

    Args:
        edges: the graph.
        times: time of every node, 0 or more; its order is that of rows and columns.

    Returns:
        W and D, n x n whole numbers: row u, column v, for paths from u to v with the times of both
        ends counted. On the diagonal 0 and the node's own time; -1 in both where there is no path.

    Raises:
        InputError: for a loop without a delay, or numbers that overflow.

    Reference:
        Leiserson and Saxe, Algorithmica 6, 1991, algorithm WD, on Floyd and Warshall's scheme.
    """
    edges = list(edges)
    _topological(_direct(edges, times))
    time = np.array(list(times.values()), dtype=np.int64)
    step = sum(times.values()) + 1  # a path without a loop takes less: delays decide, then time
    pairs = _shortest(_lengths(edges, times, step))
    reached = pairs < _FAR
    delays = np.where(reached, -(-pairs // step), -1)
    return delays, np.where(reached, delays * step - pairs + time, -1)


def _lengths(edges: Sequence[Edge], times: Mapping[Hashable, int], step: int) -> Whole:
    """Each edge's delays and the time of its source in one number, w * step - d(u)."""
    index = {node: number for number, node in enumerate(times)}
    if step * (1 + sum(edge.delays for edge in edges)) > _FAR // 2:
        raise InputError("delays and times are too large for path matrices of 64-bit numbers")
    lengths = np.full((len(index), len(index)), _FAR)
    np.fill_diagonal(lengths, 0)
    for u, v, w in edges:
        if u != v:
            at = index[u], index[v]
            lengths[at] = min(lengths[at], w * step - times[u])
    return lengths


def _shortest(lengths: Whole) -> Whole:
    """Shortest paths between all pairs; from `_FAR` / 2 on there is none."""
    for via in range(len(lengths)):
        np.minimum(lengths, lengths[:, via, None] + lengths[via], out=lengths)
    lengths[lengths >= _FAR // 2] = _FAR
    return lengths


def least_period_by_retiming(
    edges: Iterable[Edge], times: Mapping[Hashable, int]
) -> tuple[int, dict[Hashable, int]]:
    """The least critical path that retiming can reach, and a retiming that reaches it.

    Every node may be retimed, ports included, so delays may enter between them (pipelining); tie
    ports to a host node to forbid that. n x n matrices: for a few hundred nodes.

    Args:
        edges: the graph.
        times: time of every node, 0 or more.

    Returns:
        The period, and r of every node, 0 or more.

    Raises:
        InputError: as for `path_matrices`.

    Reference:
        Leiserson and Saxe, Algorithmica 6, 1991, algorithm OPT1: the period is an entry of D; for
        a trial period c, r(u) - r(v) <= W(u, v), less 1 where D(u, v) > c.
    """
    delays, time = path_matrices(edges, times)
    reached = delays >= 0
    periods = np.unique(time[reached])
    low, high = 0, len(periods) - 1
    values = np.zeros(len(delays), dtype=np.int64)  # do for the largest entry
    while low < high:
        middle = (low + high) // 2
        found = _retiming(delays, time > periods[middle], reached)
        if found is None:
            low = middle + 1
        else:
            high, values = middle, found
    period = int(periods[low]) if times else 0
    return period, dict(zip(times, values.tolist(), strict=True))


def _retiming(delays: Whole, too_long: Truth, reached: Truth) -> Whole | None:
    """Values r that put a delay on every path that is too long; None where there are none.

    r(v) >= r(u) - W(u, v), plus 1 where the path from u to v is too long.
    """
    rise = np.where(reached, too_long - delays, -_FAR)
    values = np.zeros(len(delays), dtype=np.int64)
    for _ in range(len(delays)):  # Bellman and Ford's rounds
        risen = np.maximum(values, (values[:, None] + rise).max(axis=0))
        if (risen == values).all():
            return values
        values = risen
    return None
