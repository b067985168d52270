"""A floor under the cost of every pair (J, N) at once, whatever J: what no cap on J can hide.

In y = J / N, the samples done per cycle, the units are a staircase that rises with y, and the
certificates of the compact bound are straight lines under the registers. Only y from the asked
rate up to the inverse of the iteration bound can occur. Exact fractions throughout.
"""

from __future__ import annotations

import math
from collections.abc import Iterable, Sequence
from fractions import Fraction
from itertools import combinations

from scheduler.compact import Certificate
from scheduler.datapath import Datapath
from scheduler.pairs import certificate_at

_MOST_LINES = 40


def floor_over_all(datapath: Datapath, bound: Fraction, enough: int) -> int:
    """The floor, or `enough` as soon as the floor is known to be at least that.

    Args:
        datapath: what is to be scheduled.
        bound: iteration bound in cycles per sample; at most `datapath.slowest`.
        enough: a cost that somebody hopes to be the smallest.
    """
    if bound == 0 and not any(kind.area for kind in datapath.kinds.values()):
        return 0  # nothing keeps y from growing without end
    lines: list[Certificate] = []
    lowest = enough
    for first, last in _steps(datapath, bound):
        units = _unit_cost(datapath, last)
        if units >= lowest:  # it only rises from here
            break
        room = -(-(lowest - units) // datapath.register_area) if datapath.register_area else 0
        registers = _fewest_registers(datapath, first, last, lines, room)
        lowest = min(lowest, units + datapath.register_area * registers)
    return lowest


def _steps(datapath: Datapath, bound: Fraction) -> Iterable[tuple[Fraction, Fraction]]:
    """The treads of the staircase of unit costs, as intervals of y; endless without loops."""
    loads = [kind.busy * len(kind.operations) for kind in datapath.kinds.values() if kind.area]
    most = 1 / bound if bound else None
    first = 1 / datapath.slowest
    last = min((Fraction(math.ceil(load * first), load) for load in loads), default=most)
    while last is not None and (most is None or last < most):
        yield first, last
        first = last
        last = min(Fraction(math.floor(load * first) + 1, load) for load in loads)
    if most is not None:
        yield first, most


def _unit_cost(datapath: Datapath, y: Fraction) -> int:
    return sum(
        kind.area * math.ceil(kind.busy * len(kind.operations) * y)
        for kind in datapath.kinds.values()
    )


def _fewest_registers(
    datapath: Datapath, first: Fraction, last: Fraction, lines: list[Certificate], enough: int
) -> int:
    """The fewest registers for any y between `first` and `last`; adds the lines it needs."""
    y, least = _lowest_point(lines, first, last)
    while math.ceil(least) < enough and len(lines) < _MOST_LINES:
        line = certificate_at(datapath, 1 / y)
        if line is None or line.registers(1 / y) <= least:
            break
        lines.append(line)
        y, least = _lowest_point(lines, first, last)
    return math.ceil(least)


def _lowest_point(
    lines: Sequence[Certificate], first: Fraction, last: Fraction
) -> tuple[Fraction, Fraction]:
    """Where, between `first` and `last`, the largest of the lines is least, and its value."""
    crossings = [
        Fraction(a.constant - b.constant, b.slope - a.slope)
        for a, b in combinations(lines, 2)
        if a.slope != b.slope
    ]
    candidates = [first, last, *(y for y in crossings if first < y < last)]
    values = {
        y: max((line.registers(1 / y) for line in lines), default=Fraction(0)) for y in candidates
    }
    best = min(values, key=lambda y: (values[y], y))
    return best, values[best]
