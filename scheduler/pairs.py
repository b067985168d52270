"""The pairs (J, N) that a requirement allows, each with a floor under its cost.

The floor of a pair is the area of the fewest units that can hold its operations and of the fewest
registers that the certificates of the compact bound allow. It is exact arithmetic on whole
numbers; floors only ever rise, as certificates come in.
"""

from __future__ import annotations

from dataclasses import dataclass, field, replace
from fractions import Fraction

import numpy as np
from numpy.typing import NDArray

from scheduler.compact import Certificate, compact
from scheduler.datapath import Datapath, Pair, block_of
from scheduler.floors import cycles_range

Whole = NDArray[np.int64]
_NEVER = np.iinfo(np.int64).max
_SMALL = 4000  # staircase variables that are no trouble to the solver


@dataclass
class Pairs:
    """All pairs with their floors; the search takes them out one by one.

    Attributes:
        parallelism, cycles: J and N of every pair, two arrays of whole numbers.
        floors: floor under the cost of every pair; the largest number for pairs that are done.
    """

    datapath: Datapath
    parallelism: Whole
    cycles: Whole
    floors: Whole = field(init=False)
    _units: Whole = field(init=False)
    _registers: Whole = field(init=False)
    _asked: set[Fraction] = field(default_factory=set)

    def __post_init__(self) -> None:
        self._units = np.zeros_like(self.cycles)
        open_ = np.ones(len(self.cycles), dtype=bool)
        for kind in self.datapath.kinds.values():
            held = self.cycles // kind.busy
            count = -(-self.parallelism * len(kind.operations) // held)
            self._units += kind.area * count
            if kind.most is not None:
                open_ &= count <= kind.most
        self._registers = np.zeros_like(self.cycles)
        self.floors = np.where(open_, self._units, _NEVER)
        self._refresh()

    def __len__(self) -> int:
        return len(self.cycles)

    def tighten(self, rate: Fraction) -> bool:
        """Raises the floors by the certificate that is best at T; False if it was there already."""
        if rate in self._asked:
            return False
        self._asked.add(rate)
        certificate = certificate_at(self.datapath, rate)
        if certificate is None:
            self.floors[self.cycles * rate.denominator == self.parallelism * rate.numerator] = (
                _NEVER
            )
            return True
        slope = certificate.slope * self.parallelism
        np.maximum(
            self._registers, certificate.constant - (-slope // self.cycles), out=self._registers
        )
        self._refresh()
        return True

    def next(self, below: int | None) -> tuple[Pair, int] | None:
        """The pair to solve next and its floor, the least of all; None if all reach `below`.

        Of several, the one with the smallest J, and of those the one with the most cycles, for
        they leave the most room, as long as its program is small; else the smallest.
        """
        least = int(self.floors.min(initial=_NEVER))
        if least == _NEVER or (below is not None and least >= below):
            return None
        ties = np.flatnonzero(self.floors == least)
        ties = ties[self.parallelism[ties] == self.parallelism[ties].min()]
        stairs = len(self.datapath.latency) * self.parallelism[ties] * self.cycles[ties]
        small = ties[stairs <= _SMALL]
        index = small[np.argmax(self.cycles[small])] if len(small) else ties[0]
        return Pair(int(self.parallelism[index]), int(self.cycles[index])), least

    def unsettled(self, below: int | None) -> int:
        """How many pairs have a floor under `below` and are not taken out."""
        most = _NEVER if below is None else below
        return int(np.count_nonzero(self.floors < most))

    def close(self, pair: Pair) -> None:
        """Takes a pair out: it is solved or ruled out."""
        self.floors[(self.parallelism == pair.parallelism) & (self.cycles == pair.cycles)] = _NEVER

    def _refresh(self) -> None:
        """Floors from units and registers, and the caps they must keep."""
        datapath, still = self.datapath, self.floors != _NEVER
        cost = self._units + datapath.register_area * self._registers
        if datapath.registers_most is not None:
            still &= self._registers <= datapath.registers_most
        if datapath.area_most is not None:
            still &= cost <= datapath.area_most
        self.floors = np.where(still, cost, _NEVER)


def pairs_of(datapath: Datapath, parallelism: int, bound: Fraction) -> Pairs:
    """Every pair with J up to `parallelism` and N between what loops need and the rate allows.

    Args:
        datapath: what is to be scheduled.
        parallelism: largest J.
        bound: iteration bound, in cycles per sample.
    """
    js: list[Whole] = []
    ns: list[Whole] = []
    for j in range(1, parallelism + 1):
        n = np.array(
            cycles_range(j, bound, datapath.longest_busy, datapath.slowest), dtype=np.int64
        )
        js.append(np.full_like(n, j))
        ns.append(n)
    return Pairs(datapath, np.concatenate(js), np.concatenate(ns))


def certificate_at(datapath: Datapath, rate: Fraction) -> Certificate | None:
    """The compact bound of the graph as written at T cycles per sample; None if T is too small.

    Caps on the latency stay out of it, so that it holds at every rate.
    """
    free = replace(datapath, latency_cycles=None, latency_samples=None)
    solved = compact(block_of(free, Pair(1, 1)), rate=rate)
    return None if solved is None else solved.certificate
