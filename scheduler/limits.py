"""What can be said of a design without a solver, gathered for one look.

The iteration bound and its loops, the cycles open to every parallelism J, floors under the number
of units, and what they forbid. A requirement that passes here may still be impossible.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from fractions import Fraction

from scheduler.design import Design
from scheduler.floors import BlockLimits, Loop, cycles_range, load_of, loops_of
from scheduler.obstacles import forbidden
from scheduler.transforms import critical_path, least_period_by_retiming

_RETIMED = 300  # operations; for more than these the least period takes too long


@dataclass(frozen=True)
class Limits:
    """What loops and counts say about a design.

    Attributes:
        iteration_bound: cycles per sample that the slowest loop needs; 0 without loops.
        loops: loops that attain it, ten at the most.
        cycles_per_sample: T, what the requirement leaves.
        least_cycles_per_sample: the least T that leaves cycles to some J within its cap.
        critical_path: cycles of the longest path without a delay, in the graph as written.
        path: the operations on it.
        least_period: the least critical path that retiming and pipelining can reach; None for a
            graph too large to find it in a moment.
        blocks: what is open to every J within its cap.
        units_over_all: floor of every unit in use, over all J at once.
        forbidden: why the requirement is impossible; None where nothing here forbids it.
    """

    iteration_bound: Fraction
    loops: tuple[Loop, ...]
    cycles_per_sample: Fraction
    least_cycles_per_sample: Fraction
    critical_path: int
    path: tuple[str, ...]
    least_period: int | None
    blocks: tuple[BlockLimits, ...]
    units_over_all: Mapping[str, int]
    forbidden: str | None

    @property
    def rate_is_possible(self) -> bool:
        """Whether some J within its cap has cycles to run in, caps on hardware aside."""
        return any(block.cycles for block in self.blocks)


def limits_of(design: Design) -> Limits:
    """Everything this module can say about a design; a second for thousands of operations.

    Args:
        design: algorithm, requirement, caps and technology; its graph may have any size.

    Returns:
        Bounds, floors, and what they forbid; cycles of the clock at the rate that is asked.
    """
    load = load_of(design)
    edges, copies = load.graph.edges, range(1, design.caps.parallelism + 1)
    longest, path = critical_path(edges, load.latency)
    small = len(load.latency) <= _RETIMED
    return Limits(
        iteration_bound=load.bound,
        loops=loops_of(load),
        cycles_per_sample=load.rate,
        least_cycles_per_sample=min(
            Fraction(cycles_range(j, load.bound, load.longest_busy, Fraction(0)).start, j)
            for j in copies
        ),
        critical_path=longest,
        path=tuple(map(str, path)),
        least_period=least_period_by_retiming(edges, load.latency)[0] if small else None,
        blocks=tuple(load.block(j) for j in copies),
        units_over_all=load.over_all,
        forbidden=forbidden(load, design),
    )
