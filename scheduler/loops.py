"""Loops: the iteration bound of a graph, and the loops that attain it.

Exact arithmetic throughout. Nothing here knows about units or rates.
"""

from __future__ import annotations

from collections.abc import Hashable, Iterable, Iterator, Mapping, Sequence
from dataclasses import dataclass
from fractions import Fraction
from itertools import islice
from typing import Any

import networkx as nx
import numpy as np
from numpy.typing import NDArray

from scheduler.graph import Edge
from scheduler.transforms import undelayed

Whole = NDArray[Any]  # of 64-bit whole numbers, or of Python's own where those overflow
_FIT = 2**62


def iteration_bound(edges: Iterable[Edge], latency: Mapping[Hashable, int]) -> Fraction:
    """The cycles per sample that the slowest loop needs: the largest latency / delays of a loop.

    Args:
        edges: the graph; of parallel edges the one with the fewest delays counts.
        latency: l, cycles of every operation that has an edge.

    Returns:
        The bound in cycles per sample; 0 when there is no loop.

    Raises:
        InputError: for a loop that takes cycles and has no delay.

    Example:
        >>> iteration_bound([Edge("a", "m", 3), Edge("m", "a", 0)], {"a": 1, "m": 3})
        Fraction(4, 3)

    Reference:
        Renfors and Neuvo, IEEE Transactions on Circuits and Systems 28(3), 1981, for the bound.
        It is found by longest paths at a trial ratio that rises to that of any loop above it
        (Dinkelbach, Management Science 13(7), 1967; for graphs: Lawler, Combinatorial
        Optimization, 1976, section 3.13).
    """
    return _bound(_cyclic(edges, latency))[0]


def critical_loops(
    edges: Iterable[Edge], latency: Mapping[Hashable, int], most: int = 10
) -> list[tuple[Hashable, ...]]:
    """The loops that attain the iteration bound; all of them where there are no more than `most`.

    At the bound no loop is longer than the longest paths allow, so the loops that attain it are
    those of the edges that such paths need in full.

    Args:
        edges: as for `iteration_bound`.
        latency: likewise.
        most: how many loops to name.

    Returns:
        Loops by length; each starts with that one of its nodes which comes first in `edges`.

    Raises:
        InputError: as for `iteration_bound`.
    """
    part = _cyclic(edges, latency)
    bound, heights = _bound(part)
    tight = heights[part.source] + part.costs(bound) == heights[part.target]
    ends = zip(part.source[tight].tolist(), part.target[tight].tolist(), strict=True)
    loops = islice(nx.simple_cycles(nx.DiGraph(ends)), most)  # lazily: there may be millions
    turned = sorted((_turned(loop) for loop in loops), key=lambda loop: (len(loop), loop))
    return [tuple(part.nodes[index] for index in loop) for loop in turned]


def _turned(loop: Sequence[int]) -> list[int]:
    """The loop, started from its least node."""
    first = loop.index(min(loop))
    return [*loop[first:], *loop[:first]]


@dataclass(frozen=True)
class _Cyclic:
    """The edges of a graph that lie on loops, as arrays over edges in the order of their targets.

    Attributes:
        nodes: what the indices stand for, in the order in which `edges` named them.
        source, target: indices of nodes.
        starts: where each target's edges begin; every node has some.
        latency, delays: l of the source and w, as Python's whole numbers.
    """

    nodes: tuple[Hashable, ...]
    source: Whole
    target: Whole
    starts: Whole
    latency: Whole
    delays: Whole

    def costs(self, ratio: Fraction) -> Whole:
        """Lengths of the edges that make loops above the ratio positive, times its denominator."""
        costs: Whole = ratio.denominator * self.latency - ratio.numerator * self.delays
        longest = max(map(abs, costs), default=0) * 4 * (len(self.nodes) + 1)
        return costs.astype(np.int64) if longest < _FIT else costs


def _cyclic(edges: Iterable[Edge], latency: Mapping[Hashable, int]) -> _Cyclic:
    fewest = fewest_delays(edges)
    parts = nx.strongly_connected_components(nx.DiGraph(list(fewest)))
    of = {node: number for number, members in enumerate(parts) for node in members}
    kept = [ends for ends in fewest if of[ends[0]] == of[ends[1]]]
    nodes = tuple(dict.fromkeys(node for ends in kept for node in ends))
    index = {node: number for number, node in enumerate(nodes)}
    kept.sort(key=lambda ends: index[ends[1]])
    targets = np.array([index[ends[1]] for ends in kept], dtype=np.int64)
    return _Cyclic(
        nodes,
        np.array([index[ends[0]] for ends in kept], dtype=np.int64),
        targets,
        np.searchsorted(targets, np.arange(len(nodes))),
        np.array([latency[ends[0]] for ends in kept], dtype=object),
        np.array([fewest[ends] for ends in kept], dtype=object),
    )


def fewest_delays(edges: Iterable[Edge]) -> dict[tuple[Hashable, Hashable], int]:
    """The delays between two nodes, of parallel edges the fewest."""
    fewest: dict[tuple[Hashable, Hashable], int] = {}
    for source, target, delays in edges:
        fewest[source, target] = min(delays, fewest.get((source, target), delays))
    return fewest


def _bound(part: _Cyclic) -> tuple[Fraction, Whole]:
    """The iteration bound, and the longest paths at it, times its denominator."""
    bound = Fraction(0)
    while True:
        heights, higher = _longest(part, bound)
        if higher is None:
            return bound, heights
        bound = higher


def _longest(part: _Cyclic, ratio: Fraction) -> tuple[Whole, Fraction | None]:
    """Longest paths to every node at a ratio, or the ratio of a loop above it.

    Bellman and Ford's rounds. `best` holds the edge by which each node was raised last; a loop of
    such edges is longer than 0, so its ratio is above the given one. While paths still grow after
    as many rounds as there are nodes, there is such a loop.
    """
    costs = part.costs(ratio)
    heights = np.zeros(len(part.nodes), dtype=costs.dtype)
    best = np.full(len(part.nodes), -1)
    rounds = 0
    while True:
        heights, used = _round(part, costs, heights)
        if not used.size:
            return heights, None
        best[part.target[used]] = used
        rounds += 1
        if rounds >= len(part.nodes) or rounds & (rounds - 1) == 0:  # looking takes its time
            ratios = [_ratio(part, loop) for loop in _loops_back(best, part.source)]
            if ratios:
                return heights, max(ratios)


def _round(part: _Cyclic, costs: Whole, heights: Whole) -> tuple[Whole, Whole]:
    """The paths, one edge longer where that raises them, and the edges that do."""
    if not heights.size:
        return heights, heights
    reach = heights[part.source] + costs
    peaks = np.maximum.reduceat(reach, part.starts)
    raised = (reach == peaks[part.target]) & (reach > heights[part.target])
    return np.maximum(heights, peaks), np.flatnonzero(raised)


def _loops_back(best: Whole, source: Whole) -> Iterator[list[int]]:
    """The loops, as edges, of a graph where each node has one edge into it or none (-1)."""
    into, tails = best.tolist(), source.tolist()
    visit = [-1] * len(into)
    for start in range(len(into)):
        trail, node = [], start
        while node >= 0 and visit[node] < 0:
            visit[node] = start
            trail.append(node)
            node = tails[into[node]] if into[node] >= 0 else -1
        if node >= 0 and visit[node] == start:
            yield [into[member] for member in trail[trail.index(node) :]]


def _ratio(part: _Cyclic, loop: Sequence[int]) -> Fraction:
    if not any(part.delays[loop]):
        raise undelayed([part.nodes[part.source[edge]] for edge in reversed(loop)])
    return Fraction(sum(part.latency[loop]), sum(part.delays[loop]))
