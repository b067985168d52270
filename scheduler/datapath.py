"""What is to be scheduled, in whole numbers, and its unfolding for one pair (J, N).

A `Datapath` is a design boiled down to latencies, busy times, areas and caps. A `Block` is its
unfolded graph with the ports tied together: copy i of an input or output starts a fixed number of
cycles after copy 0, so each of them has an `anchor`, the copy whose start decides its own.
"""

from __future__ import annotations

import math
from collections import defaultdict
from collections.abc import Iterator, Mapping
from dataclasses import dataclass
from fractions import Fraction
from functools import cached_property
from typing import NamedTuple, cast

from scheduler.design import Delivery, Design
from scheduler.floors import unit_floor
from scheduler.graph import Edge, Kind
from scheduler.plan import Copy
from scheduler.transforms import unfold


class Pair(NamedTuple):
    """A block of J samples (`parallelism`) in N clock cycles (`cycles`)."""

    parallelism: int
    cycles: int

    @property
    def rate(self) -> Fraction:
        """T = N / J, the cycles that one sample may take."""
        return Fraction(self.cycles, self.parallelism)


class Anchor(NamedTuple):
    """The copy that decides another one's start, and by how many cycles it comes first."""

    copy: Copy
    offset: int


@dataclass(frozen=True)
class UnitKind:
    """A kind of unit: whole-numbered area, busy cycles, and the most there may be."""

    area: int
    busy: int
    operations: tuple[str, ...]
    most: int | None

    def floor(self, pair: Pair) -> int:
        """Units that the operations of a block need at the least; needs busy <= N."""
        return unit_floor(len(self.operations), self.busy, pair.parallelism, pair.cycles)


@dataclass(frozen=True)
class Datapath:
    """A design in whole numbers.

    Attributes:
        latency: cycles of every operation, by name, in the graph's order; 0 for ports.
        unit: the unit kind that performs it; None for ports.
        edges: the graph before unfolding, each different edge once.
        inputs, outputs: names of the ports.
        serial: the samples of a block come one after another rather than at once.
        kinds: the unit kinds in use, by name.
        register_area: whole-numbered, in the same measure as the units' areas.
        measure: that measure, in the technology's unit of area.
        registers_most, area_most: caps; None where there is none.
        latency_cycles, latency_samples: caps on the latency, in cycles and in sample periods.
        slowest: the most cycles a sample may take (clock over sample rate).
    """

    latency: Mapping[str, int]
    unit: Mapping[str, str | None]
    edges: tuple[Edge, ...]
    inputs: tuple[str, ...]
    outputs: tuple[str, ...]
    serial: bool
    kinds: Mapping[str, UnitKind]
    register_area: int
    measure: Fraction
    registers_most: int | None
    area_most: int | None
    latency_cycles: int | None
    latency_samples: Fraction | None
    slowest: Fraction

    @property
    def longest_busy(self) -> int:
        """No period can be shorter than the longest busy time."""
        return max((kind.busy for kind in self.kinds.values()), default=1)

    def busy(self, name: str) -> int:
        """Cycles for which an operation keeps its unit; 0 for ports."""
        unit = self.unit[name]
        return 0 if unit is None else self.kinds[unit].busy

    def latency_most(self, pair: Pair) -> int | None:
        """The cap on the latency in cycles of a pair; None where there is none."""
        caps = [] if self.latency_cycles is None else [self.latency_cycles]
        if self.latency_samples is not None:
            caps.append(math.floor(self.latency_samples * pair.rate))
        return min(caps, default=None)

    def cost(self, units: Mapping[str, int], registers: int) -> int:
        """Area of a set of units and registers, in the whole-numbered measure."""
        area = sum(kind.area * units[name] for name, kind in self.kinds.items())
        return area + self.register_area * registers


def datapath_of(design: Design) -> Datapath:
    """Boils a design down to whole numbers; areas are scaled by their common denominator."""
    graph, technology, caps = design.algorithm.graph, design.technology, design.caps
    performers = {
        op.name: technology.unit_for(op.kind) for op in graph.operations if not op.is_port
    }
    operations: dict[str, list[str]] = defaultdict(list)
    for name, performer in performers.items():
        operations[performer.name].append(name)
    used = [unit for unit in technology.units if unit.name in operations]
    areas = [technology.register_area, *(unit.area for unit in used)]
    measure = Fraction(1, math.lcm(*(area.denominator for area in areas)))
    return Datapath(
        latency={
            op.name: performers[op.name].latency if op.name in performers else 0
            for op in graph.operations
        },
        unit={
            op.name: performers[op.name].name if op.name in performers else None
            for op in graph.operations
        },
        edges=tuple(dict.fromkeys(graph.edges)),
        inputs=tuple(op.name for op in graph.of_kind(Kind.INPUT)),
        outputs=tuple(op.name for op in graph.of_kind(Kind.OUTPUT)),
        serial=design.requirement.delivery is Delivery.SERIAL,
        kinds={
            unit.name: UnitKind(
                int(unit.area / measure),
                unit.busy,
                tuple(operations[unit.name]),
                caps.units.get(unit.name),
            )
            for unit in used
        },
        register_area=int(technology.register_area / measure),
        measure=measure,
        registers_most=caps.registers,
        area_most=None if caps.area is None else math.floor(caps.area / measure),
        latency_cycles=caps.latency_cycles,
        latency_samples=_samples(caps.latency_time, design.requirement.sample_rate),
        slowest=design.requirement.cycles_per_sample,
    )


def _samples(time: Fraction | None, rate: Fraction | None) -> Fraction | None:
    return None if time is None or rate is None else time * rate


class BlockEdge(NamedTuple):
    """An edge of the unfolded graph, `delays` blocks late."""

    source: Copy
    target: Copy
    delays: int


@dataclass(frozen=True)
class Block:
    """The unfolded graph of one pair.

    Attributes:
        datapath, pair: what it was unfolded from.
        edges: J edges for every edge of the graph.
    """

    datapath: Datapath
    pair: Pair
    edges: tuple[BlockEdge, ...]

    @cached_property
    def copies(self) -> tuple[Copy, ...]:
        """Every copy of every operation, in the graph's order."""
        copies = range(self.pair.parallelism)
        return tuple(Copy(name, i) for name in self.datapath.latency for i in copies)

    @cached_property
    def anchors(self) -> Mapping[Copy, Anchor]:
        """The anchor of every copy; its own for all that are no ports."""
        return {copy: self._anchor(copy) for copy in self.copies}

    def _anchor(self, copy: Copy) -> Anchor:
        name, index = copy
        if name in self.datapath.inputs:
            name = self.datapath.inputs[0]  # the inputs of one sample arrive together
        elif name not in self.datapath.outputs:
            return Anchor(copy, 0)
        j, n = self.pair
        return Anchor(Copy(name, 0), -(-index * n // j) if self.datapath.serial else 0)

    @property
    def port_spans(self) -> Iterator[tuple[Copy, Copy]]:
        """First input and last output, for every output: what a plan's latency runs between."""
        if self.datapath.inputs:
            first = Copy(self.datapath.inputs[0], 0)
            for name in self.datapath.outputs:
                yield first, Copy(name, self.pair.parallelism - 1)


def block_of(datapath: Datapath, pair: Pair) -> Block:
    """Unfolds a datapath for a pair."""
    edges = unfold(datapath.edges, pair.parallelism)
    return Block(datapath, pair, tuple(BlockEdge(*copies_of(edge), edge.delays) for edge in edges))


def copies_of(edge: Edge) -> tuple[Copy, Copy]:
    """The ends of an edge of an unfolded graph."""
    (source, i), (target, j) = cast("tuple[tuple[str, int], tuple[str, int]]", edge[:2])
    return Copy(source, i), Copy(target, j)
