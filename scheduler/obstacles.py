"""In words, why loops, counts and caps alone make a requirement impossible.

Where nothing here forbids it, it may still be impossible: caps on registers and on whole
schedules are the search's work.
"""

from __future__ import annotations

import math
from collections.abc import Hashable
from itertools import count

import networkx as nx

from scheduler.design import Caps, Design
from scheduler.floors import BlockLimits, Load, load_of, loops_of
from scheduler.graph import Edge, Kind, delay_free
from scheduler.quantities import format_number
from scheduler.transforms import critical_path


def which_forbids(design: Design) -> str | None:
    """In words, why loops and caps alone make a requirement impossible.

    Args:
        design: algorithm, requirement, caps and technology.

    Returns:
        The loop or cap that forbids it, without a full stop; None where none does, which does not
        yet mean that a plan exists.

    Example:
        "the loop w -> w.1 -> w.2 -> w takes 4 cycles per sample, the rate leaves 3.5"
    """
    return forbidden(load_of(design), design)


def forbidden(load: Load, design: Design) -> str | None:
    """The same, for a load that has been counted already."""
    caps = design.caps
    return (
        _loop_forbids(load)
        or _count_forbids(load, caps)
        or _no_cycles(load, caps)
        or _every_block_forbids(load, caps)
        or _path_forbids(load, design)
    )


def _loop_forbids(load: Load) -> str | None:
    if load.bound <= load.rate:
        return None
    loop = loops_of(load, most=1)[0]
    rate, bound = format_number(load.rate), format_number(loop.bound)
    takes = f"{loop.latency} cycles per sample"
    if loop.delays > 1:
        takes = f"{loop.latency} cycles for {loop.delays} samples, {bound} per sample"
    return f"the loop {loop} takes {takes}, the rate leaves {rate}"


def _count_forbids(load: Load, caps: Caps) -> str | None:
    for unit, operations in load.units.items():
        floor, most = load.over_all[unit.name], caps.units.get(unit.name)
        if most is not None and floor > most:
            return (
                f"{_several(operations, 'operation')} of {_several(unit.busy, 'cycle')} in "
                f"{format_number(load.rate)} cycles per sample need {floor} of unit "
                f"'{unit.name}' at any parallelism, its cap is {most}"
            )
    return None


def _no_cycles(load: Load, caps: Caps) -> str | None:
    """Whether no J within its cap leaves any N; some J beyond it always does."""
    most = caps.parallelism
    if any(load.cycles(j) for j in range(1, most + 1)):
        return None
    enough = next(j for j in count(most + 1) if load.cycles(j))
    if most * load.rate < 1:
        needs = "takes a whole cycle at the least"
    elif most * load.rate < load.longest_busy:
        needs = f"keeps a unit busy for {_several(load.longest_busy, 'cycle')}"
    else:
        needs = f"needs {format_number(load.bound)} cycles per sample in its loops"
    return (
        f"the clock leaves {format_number(load.rate)} cycles per sample, so no block of up to "
        f"{_several(most, 'sample')} (the cap on parallelism) has a whole number of cycles that "
        f"suffices for an algorithm that {needs}; a parallelism of {enough} would do"
    )


def _every_block_forbids(load: Load, caps: Caps) -> str | None:
    blocks = (load.block(j) for j in range(1, caps.parallelism + 1))
    reasons = [(block, _block_forbids(block, caps)) for block in blocks if block.cycles]
    if not all(reason for _, reason in reasons):
        return None
    parts = [f"with parallelism {block.parallelism} {reason}" for block, reason in reasons]
    more = [f"and so on up to {caps.parallelism}"] if len(parts) > 3 else []
    return "no parallelism up to its cap fits the other caps: " + ", ".join([*parts[:3], *more])


def _block_forbids(block: BlockLimits, caps: Caps) -> str | None:
    """Which cap is too low for a block that takes all the cycles it can: fewer need no less."""
    for name, floor in block.units.items():
        most = caps.units.get(name)
        if most is not None and floor > most:
            return f"it takes {floor} of unit '{name}' and the cap is {most}"
    if caps.area is not None and block.area is not None and block.area > caps.area:
        needed, cap = format_number(block.area), format_number(caps.area)
        return f"the units alone take an area of {needed} and the cap is {cap}"
    return None


def _path_forbids(load: Load, design: Design) -> str | None:
    most = _latency_cap(design)
    if most is None:
        return None
    longest, path = critical_path(*_from_input_to_output(load))
    if longest <= most:
        return None
    names = " -> ".join(map(str, path))
    return f"the path {names} takes {longest} cycles, the cap on the latency leaves {most}"


def _latency_cap(design: Design) -> int | None:
    """The cap on the latency in cycles of the fastest clock; slower clocks leave fewer."""
    caps, needs = design.caps, design.requirement
    most = [] if caps.latency_cycles is None else [caps.latency_cycles]
    if caps.latency_time is not None and needs.sample_rate is not None:
        most.append(math.floor(caps.latency_time * needs.sample_rate * needs.cycles_per_sample))
    return min(most, default=None)


def _from_input_to_output(load: Load) -> tuple[list[Edge], dict[Hashable, int]]:
    """The operations, and edges among them, on paths without a delay that a sample goes through."""
    direct = delay_free(load.graph.edges)
    after, before = set(), set()
    for port in (op for op in load.graph.of_kind(Kind.INPUT) if op.name in direct):
        after |= nx.descendants(direct, port.name) | {port.name}
    for port in (op for op in load.graph.of_kind(Kind.OUTPUT) if op.name in direct):
        before |= nx.ancestors(direct, port.name) | {port.name}
    between = {name: time for name, time in load.latency.items() if name in after & before}
    edges = [e for e in load.graph.edges if e.source in between and e.target in between]
    return edges, between


def _several(number: int, noun: str) -> str:
    return f"{number} {noun}" if number == 1 else f"{number} {noun}s"
