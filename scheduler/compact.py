"""The compact bound: how few registers any schedule at a given rate can need.

Without the rows that count units, the fewest register cycles of a block are a program over
differences of starts: minimise the sum of last read less start, every edge u -> v kept. Its dual
is a minimum-cost flow with whole supplies, which the network simplex method solves in whole
numbers only, so that nothing has to be believed.

Averaging a schedule of the unfolded graph over its copies and over all shifts leaves one start
per operation that keeps every precedence at T = N / J cycles per sample. So the program of the
graph as written, at T, bounds the registers of every J at that ratio; and a flow that is best at
one T is still a valid bound at every other, linear in 1/T: a `Certificate`.

It says nothing about units; their floors stand in `datapath` and `limits`.
"""

from __future__ import annotations

from collections.abc import Hashable, Iterable, Mapping
from dataclasses import dataclass
from fractions import Fraction
from typing import Any, NamedTuple

import networkx as nx

from scheduler.datapath import Block
from scheduler.plan import Copy


class Arc(NamedTuple):
    """position[head] - position[tail] >= blocks * N + cycles."""

    tail: Hashable
    head: Hashable
    blocks: int
    cycles: int


@dataclass(frozen=True)
class Certificate:
    """A proven floor of the registers: constant + slope * J / N at every pair (J, N)."""

    constant: int
    slope: int

    def registers(self, rate: Fraction) -> Fraction:
        """The floor at T cycles per sample, not yet rounded up."""
        return self.constant + self.slope / rate


@dataclass(frozen=True)
class Compact:
    """The compact program of a block, solved.

    Attributes:
        register_cycles: exact minimum of the sum, over the values of a block, of the cycles for
            which each needs a register; registers >= register_cycles / N.
        certificate: the same flow as a bound for other rates (blocks of J = 1 only).
        starts: starts that attain it, by copy, in the unit of the block's cycles.
        tight: arcs that cost `flow` register cycles for every cycle they are longer than needed.
        arcs: every arc, for who wants to tighten windows.
    """

    register_cycles: int
    certificate: Certificate
    starts: Mapping[Hashable, int]
    tight: Mapping[Arc, int]
    arcs: tuple[Arc, ...]


def compact(block: Block, *, rate: Fraction | None = None) -> Compact | None:
    """Solves the compact program of a block exactly.

    Args:
        block: the unfolded graph of a pair (J, N).
        rate: T, for a block of J = 1 as the average of blocks at that many cycles per sample;
            the block's own pair by default. All lengths are then in cycles / T's denominator.

    Returns:
        None where no schedule exists at that rate.
    """
    cycles, scale = (block.pair.cycles, 1) if rate is None else rate.as_integer_ratio()
    arcs = tuple(_arcs(block))
    lengths = _Lengths(cycles, scale)
    try:  # on a flow without bound, which is what too slow a loop means, the simplex may not end
        longest_paths((arc.tail, arc.head, lengths.of(arc)) for arc in arcs)
    except nx.NetworkXUnbounded:
        return None
    demands = _demands(block)
    flow = _least_cost_flow(demands, arcs, lengths)
    held = sum(
        block.anchors[source].offset + block.datapath.latency[source.name]
        for source in _sources(block)
    )  # what lies between a start and the first cycle that needs a register
    certificate = Certificate(
        sum(amount * arc.blocks for arc, amount in flow.items()),
        sum(amount * arc.cycles for arc, amount in flow.items()) - held,
    )
    return Compact(
        certificate.constant * cycles + certificate.slope * scale,
        certificate,
        dict.fromkeys(demands, 0) | _positions(arcs, flow, lengths),
        flow,
        arcs,
    )


class _Lengths(NamedTuple):
    """What a block and a cycle count for."""

    block: int
    cycle: int

    def of(self, arc: Arc) -> int:
        return arc.blocks * self.block + arc.cycles * self.cycle


def _sources(block: Block) -> Iterable[Copy]:
    """The copies whose value is read by somebody."""
    return dict.fromkeys(edge.source for edge in block.edges)


def _arcs(block: Block) -> Iterable[Arc]:
    """Precedence, last reads, and the cap on latency, as differences between anchors."""
    for source, target, delays in block.edges:
        start, late = block.anchors[source]
        read, later = block.anchors[target]
        latency = block.datapath.latency[source.name]
        yield Arc(start, read, -delays, latency + late - later)
        yield Arc(read, ("last read", source), delays, later)
    most = block.datapath.latency_most(block.pair)
    if most is not None:
        for first, last in block.port_spans:
            entry, leaving = block.anchors[first], block.anchors[last]
            yield Arc(leaving.copy, entry.copy, 0, leaving.offset - entry.offset - most)


def _demands(block: Block) -> dict[Hashable, int]:
    """Minimise the sum of (last read - start): +1 at every last read, -1 at every start."""
    demand: dict[Hashable, int] = {anchor.copy: 0 for anchor in block.anchors.values()}
    for source in _sources(block):
        demand["last read", source] = 1
        demand[block.anchors[source].copy] -= 1
    return demand


def _least_cost_flow(
    demand: Mapping[Hashable, int], arcs: Iterable[Arc], lengths: _Lengths
) -> dict[Arc, int]:
    longest: dict[tuple[Hashable, Hashable], Arc] = {}
    for arc in arcs:
        known = longest.get(arc[:2])
        if known is None or lengths.of(known) < lengths.of(arc):
            longest[arc[:2]] = arc
    network: Any = nx.DiGraph()
    network.add_nodes_from((node, {"demand": amount}) for node, amount in demand.items())
    network.add_edges_from((*ends, {"weight": -lengths.of(arc)}) for ends, arc in longest.items())
    _, flow = nx.network_simplex(network)
    return {arc: flow[arc.tail][arc.head] for arc in longest.values() if flow[arc.tail][arc.head]}


def _positions(arcs: Iterable[Arc], flow: Iterable[Arc], lengths: _Lengths) -> dict[Hashable, int]:
    """Positions that keep every arc, with equality where there is flow.

    Midway between the earliest and the latest such positions, rounded down: rounding all of them
    the same way keeps every whole-numbered difference.
    """
    differences = [(arc.tail, arc.head, lengths.of(arc)) for arc in arcs]
    differences += [(arc.head, arc.tail, -lengths.of(arc)) for arc in flow]
    early = longest_paths(differences)
    late = longest_paths((head, tail, length) for tail, head, length in differences)
    return {node: (early[node] - late[node]) // 2 for node in early}


def longest_paths(
    differences: Iterable[tuple[Hashable, Hashable, int]], origin: Hashable = None
) -> dict[Hashable, int]:
    """Longest distances from `origin` over (tail, head, length), or from every node at once.

    Nodes that `origin` does not reach are left out. There must be no cycle of positive length.
    """
    graph: Any = nx.DiGraph()
    for tail, head, length in differences:
        if not graph.has_edge(tail, head) or graph[tail][head]["weight"] > -length:
            graph.add_edge(tail, head, weight=-length)
    everywhere = ("everywhere",)
    if origin is None:
        graph.add_edges_from([(everywhere, node, {"weight": 0}) for node in list(graph)])
    start = everywhere if origin is None else origin
    if start not in graph:
        return {start: 0}
    far = nx.single_source_bellman_ford_path_length(graph, start)
    return {node: -length for node, length in far.items() if node is not everywhere}
