"""The integer program of one pair (J, N): retiming, folding order, units and registers together.

Everything is said with staircase variables: for an operation that starts in cycle s,
K(x) = floor((s - x) / N) + 1 is one whole number for every slot x = 0..N-1, and
K(x + N) = K(x) - 1. In them

- a start in slot x is K(x) - K(x+1) = 1, and being busy in slot x is K(x-b+1) - K(x+1) = 1;
- precedence along u -> v with w delays is K_v(x + l) + w >= K_u(x) for every x;
- the values of u alive in slot x are the largest K_v(x) + w of its readers, less K_u(x - l).

The copies of a port share one staircase, shifted. The program holds units to cover every slot and
to count enough operations; that decides the binding to instances exactly for busy times of one
and two cycles. For longer ones the search checks the binding and asks again with `Cut`s.
"""

from __future__ import annotations

from collections import defaultdict
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass, field
from typing import NamedTuple

from scheduler.datapath import Block
from scheduler.plan import Copy
from scheduler.solver import Program


class Window(NamedTuple):
    """Earliest and latest start of a copy."""

    first: int
    last: int


class Cut(NamedTuple):
    """These operations, in these slots all together, need more than `units` of their kind."""

    kind: str
    slots: tuple[tuple[Copy, int], ...]
    units: int


@dataclass(frozen=True)
class Question:
    """What is asked of a block beyond its own rules.

    Attributes:
        units, registers: proven floors; registers None to leave registers out of the program, when
            only asked whether the units suffice.
        cost_most: only plans up to this cost are wanted; None for any.
        windows: earliest and latest starts of anchors.
        cuts: bindings known to fail.
    """

    units: Mapping[str, int]
    registers: int | None
    cost_most: int | None = None
    windows: Mapping[Copy, Window] = field(default_factory=dict)
    cuts: tuple[Cut, ...] = ()


Term = tuple[int, int]
"""A variable of the program and its coefficient."""


class Part(NamedTuple):
    """A term and a constant to be added to a row."""

    term: Term
    constant: int


@dataclass
class Model:
    """A program together with the way back from its points to starts."""

    block: Block
    program: Program = field(default_factory=Program)
    stairs: dict[Copy, list[int]] = field(default_factory=dict)
    units: dict[str, int] = field(default_factory=dict)
    registers: int = -1

    def step(self, copy: Copy, x: int, sign: int = 1) -> Part:
        """K(x) of a copy for any whole x, times `sign`."""
        anchor, offset = self.block.anchors[copy]
        turns, slot = divmod(x - offset, self.block.pair.cycles)
        return Part((self.stairs[anchor][slot], sign), -sign * turns)

    def add(
        self, parts: Iterable[Part], *more: Term, low: int | None = None, high: int | None = None
    ) -> None:
        """Adds the row low <= sum of parts and terms <= high."""
        terms, constant = list(more), 0
        for part in parts:
            terms.append(part.term)
            constant += part.constant
        self.program.row(
            terms,
            low=None if low is None else low - constant,
            high=None if high is None else high - constant,
        )

    def starts(self, point: Sequence[int]) -> dict[Copy, int]:
        """The start cycle s of every copy in a point of the program."""
        return {copy: self._start(copy, point) for copy in self.block.copies}

    def _start(self, copy: Copy, point: Sequence[int]) -> int:
        anchor, offset = self.block.anchors[copy]
        stairs = [point[variable] for variable in self.stairs[anchor]]
        slot = stairs.count(stairs[0]) - 1
        return self.block.pair.cycles * (stairs[0] - 1) + slot + offset


def formulate(block: Block, question: Question) -> Model:
    """Builds the program: minimise the area of units and registers of a block."""
    model = Model(block)
    for anchor in dict.fromkeys(anchor.copy for anchor in block.anchors.values()):
        _add_staircase(model, anchor, question.windows.get(anchor))
    _add_units(model, question)
    _add_precedence(model)
    _add_latency(model)
    if question.registers is not None:
        _add_registers(model, question.registers)
        _add_ceiling(model, question.cost_most)
    for cut in question.cuts:
        parts = [p for c, x in cut.slots for p in (model.step(c, x), model.step(c, x + 1, -1))]
        model.add(parts, (model.units[cut.kind], -1), high=len(cut.slots) - 1 - cut.units)
    return model


def _add_staircase(model: Model, anchor: Copy, window: Window | None) -> None:
    """One whole number a slot, falling by one over the period."""
    cycles = model.block.pair.cycles
    stairs = []
    for x in range(cycles):
        bounds = (None, None) if window is None else tuple((s - x) // cycles + 1 for s in window)
        stairs.append(model.program.variable(*bounds))
    model.stairs[anchor] = stairs
    for x in range(cycles if cycles > 1 else 0):
        model.add([model.step(anchor, x), model.step(anchor, x + 1, -1)], low=0)


def _add_units(model: Model, question: Question) -> None:
    """In no slot are more operations busy than there are units."""
    block = model.block
    for name, kind in block.datapath.kinds.items():
        copies = [Copy(op, i) for op in kind.operations for i in range(block.pair.parallelism)]
        most = len(copies) if kind.most is None else kind.most
        count = model.program.variable(question.units[name], most, kind.area)
        model.units[name] = count
        for x in range(block.pair.cycles):
            parts = [model.step(copy, x - kind.busy + 1) for copy in copies]
            parts += [model.step(copy, x + 1, -1) for copy in copies]
            model.add(parts, (count, -1), high=0)


def _add_precedence(model: Model) -> None:
    for source, target, delays in model.block.edges:
        latency = model.block.datapath.latency[source.name]
        for x in range(model.block.pair.cycles):
            parts = [model.step(target, x + latency), model.step(source, x, -1)]
            model.add(parts, low=-delays)


def _add_registers(model: Model, fewest: int) -> None:
    """In no slot are more values alive than there are registers."""
    datapath, cycles = model.block.datapath, model.block.pair.cycles
    model.registers = model.program.variable(
        fewest, datapath.registers_most, datapath.register_area
    )
    readers: dict[Copy, list[tuple[Copy, int]]] = defaultdict(list)
    for source, target, delays in model.block.edges:
        readers[source].append((target, delays))
    for x in range(cycles):
        alive = [_last_read(model, targets, x) for targets in readers.values()]
        alive += [model.step(u, x - datapath.latency[u.name], -1) for u in readers]
        model.add(alive, (model.registers, -1), high=0)


def _last_read(model: Model, readers: Sequence[tuple[Copy, int]], x: int) -> Part:
    """The largest K(x) + w among the readers of a value; a variable where there are several."""
    if len(readers) == 1:
        target, delays = readers[0]
        step = model.step(target, x)
        return Part(step.term, step.constant + delays)
    last = model.program.variable(None, None)
    for target, delays in readers:
        model.add([model.step(target, x, -1)], (last, 1), low=delays)
    return Part((last, 1), 0)


def _add_latency(model: Model) -> None:
    most = model.block.datapath.latency_most(model.block.pair)
    if most is None:
        return
    for first, last in model.block.port_spans:
        for x in range(model.block.pair.cycles):
            model.add([model.step(last, x + most), model.step(first, x, -1)], high=0)


def _add_ceiling(model: Model, cost_most: int | None) -> None:
    """Caps on the area, the user's and the one that a better plan than the best must keep."""
    datapath = model.block.datapath
    ceilings = [c for c in (datapath.area_most, cost_most) if c is not None]
    if ceilings:
        costs = [(model.units[name], kind.area) for name, kind in datapath.kinds.items()]
        model.add([], *costs, (model.registers, datapath.register_area), high=min(ceilings))
