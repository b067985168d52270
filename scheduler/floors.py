"""Floors under the number of units: what sheer counts ask for, in exact arithmetic.

Where in the block the loops leave room for an operation is not looked at, nor are registers.
"""

from __future__ import annotations

import math
from collections import Counter
from collections.abc import Hashable, Mapping
from dataclasses import dataclass
from fractions import Fraction

from scheduler.design import Design
from scheduler.graph import Graph
from scheduler.loops import critical_loops, fewest_delays, iteration_bound
from scheduler.technology import Unit
from scheduler.transforms import loop_text


def unit_floor(operations: int, busy: int, parallelism: int, cycles: int) -> int:
    """Units that J copies of some operations need at the least: ceil(J n / floor(N / b)).

    A unit holds at most floor(N / b) operations, for none may straddle its own next round.

    Args:
        operations: n, operations of the graph that run on this unit.
        busy: b, cycles for which each keeps it.
        parallelism: J.
        cycles: N, at least b.
    """
    return -(-parallelism * operations // (cycles // busy))


def unit_floor_over_all(operations: int, busy: int, cycles_per_sample: Fraction) -> int:
    """Units that are needed whatever the parallelism: ceil(n b / T), T cycles per sample."""
    return math.ceil(operations * busy / cycles_per_sample)


def cycles_range(
    parallelism: int, bound: Fraction, longest_busy: int, cycles_per_sample: Fraction
) -> range:
    """The cycles N that a block of J samples can take; empty where there are none.

    Args:
        parallelism: J.
        bound: iteration bound, cycles per sample.
        longest_busy: cycles for which the slowest unit in use is kept by one operation.
        cycles_per_sample: T, what the rate leaves.
    """
    first = max(math.ceil(parallelism * bound), longest_busy, 1)
    return range(first, math.floor(parallelism * cycles_per_sample) + 1)


@dataclass(frozen=True)
class Loop:
    """A loop of operations: `latency` cycles and `delays` samples round it."""

    operations: tuple[str, ...]
    latency: int
    delays: int

    @property
    def bound(self) -> Fraction:
        """Cycles per sample that it needs."""
        return Fraction(self.latency, self.delays)

    def __str__(self) -> str:
        return loop_text(self.operations)


@dataclass(frozen=True)
class BlockLimits:
    """What is open to one parallelism.

    Attributes:
        parallelism: J.
        cycles: the cycles N that a block can take; may be empty.
        units: floor of every unit in use, at the largest N; none where `cycles` is empty.
        area: of those units; None where `cycles` is empty.
    """

    parallelism: int
    cycles: range
    units: Mapping[str, int]
    area: Fraction | None


@dataclass(frozen=True)
class Load:
    """What a design asks of the hardware.

    Attributes:
        graph: the algorithm.
        latency: l of every operation, in cycles.
        units: the units in use, and how many operations run on each.
        bound: iteration bound, in cycles per sample.
        rate: T, the cycles per sample that the requirement leaves.
    """

    graph: Graph
    latency: Mapping[Hashable, int]
    units: Mapping[Unit, int]
    bound: Fraction
    rate: Fraction

    @property
    def longest_busy(self) -> int:
        """Cycles for which the slowest unit in use is kept by one operation."""
        return max((unit.busy for unit in self.units), default=1)

    @property
    def over_all(self) -> dict[str, int]:
        """Floor of every unit in use, over all J at once."""
        return {
            unit.name: unit_floor_over_all(operations, unit.busy, self.rate)
            for unit, operations in self.units.items()
        }

    def cycles(self, parallelism: int) -> range:
        """The cycles N that a block of J samples can take."""
        return cycles_range(parallelism, self.bound, self.longest_busy, self.rate)

    def block(self, parallelism: int) -> BlockLimits:
        """What is open to one parallelism."""
        cycles = self.cycles(parallelism)
        if not cycles:
            return BlockLimits(parallelism, cycles, {}, None)
        floors = {
            unit: unit_floor(operations, unit.busy, parallelism, cycles[-1])
            for unit, operations in self.units.items()
        }
        area = sum((unit.area * floor for unit, floor in floors.items()), Fraction(0))
        return BlockLimits(
            parallelism, cycles, {unit.name: floor for unit, floor in floors.items()}, area
        )


def load_of(design: Design) -> Load:
    """Counts what a design asks of its technology's units."""
    graph, technology = design.algorithm.graph, design.technology
    runs = {op.name: technology.unit_for(op.kind) for op in graph.operations if not op.is_port}
    used = Counter(runs.values())
    latency: dict[Hashable, int] = {
        op.name: runs[op.name].latency if op.name in runs else 0 for op in graph.operations
    }
    return Load(
        graph,
        latency,
        {unit: used[unit] for unit in technology.units if unit in used},
        iteration_bound(graph.edges, latency),
        design.requirement.cycles_per_sample,
    )


def loops_of(load: Load, most: int = 10) -> tuple[Loop, ...]:
    """The loops that attain the iteration bound, with what they take."""
    fewest = fewest_delays(load.graph.edges)
    return tuple(
        Loop(
            tuple(map(str, loop)),
            sum(load.latency[name] for name in loop),
            sum(fewest[ends] for ends in zip(loop, (*loop[1:], loop[0]), strict=True)),
        )
        for loop in critical_loops(load.graph.edges, load.latency, most)
    )
