"""What an algorithm computes, bit for bit, and what the hardware of a plan computes.

Two's complement fixed point in whole numbers of Python, exact at any width. Until word lengths
are part of a design there is one format: 16 fraction bits and 24 bits in all, more where a
coefficient needs them. Sums wrap round; products are cut off below the last fraction bit (rounded
towards minus infinity) and wrap; constants are rounded half up to the nearest step.

A run works on several stimuli at once: a value is a tuple, one number for each. Samples before
time 0 are 0. Nothing here looks at units' areas or caps.
"""

from __future__ import annotations

import random
from collections import defaultdict
from collections.abc import Callable, Iterable, Iterator, Mapping, Sequence
from dataclasses import dataclass
from fractions import Fraction
from typing import TypeVar

import networkx as nx

from scheduler.design import Algorithm
from scheduler.equations import Equation, Operator, Tap
from scheduler.errors import AuditError
from scheduler.graph import Graph, Kind, Operation, Source
from scheduler.plan import Copy, Lifetime, Plan, PlannedOperation

Value = tuple[int, ...]
"""One number for every stimulus, in steps of the last fraction bit."""

Stream = list[Value]
"""The values of a signal, sample by sample."""


@dataclass(frozen=True)
class Format:
    """Fixed point in two's complement: `width` bits in all, `fraction` of them after the point."""

    width: int
    fraction: int

    def wrap(self, number: int) -> int:
        """The number that its lowest `width` bits stand for."""
        half = 1 << (self.width - 1)
        return ((number + half) & ((1 << self.width) - 1)) - half

    def constant(self, value: Fraction) -> int:
        """A constant in steps of the last fraction bit, rounded half up."""
        return (value * (1 << self.fraction) + Fraction(1, 2)).__floor__()

    def apply(self, kind: str, left: Value, right: Value) -> Value:
        """An operation on every stimulus."""
        return tuple(self._one(kind, a, b) for a, b in zip(left, right, strict=True))

    def _one(self, kind: str, left: int, right: int) -> int:
        if kind == Kind.MULTIPLY:
            return self.wrap((left * right) >> self.fraction)
        return self.wrap(left + right if kind == Kind.ADD else left - right)


def format_for(graph: Graph) -> Format:
    """The format: 24 bits, 16 of them a fraction, wider where a constant needs it."""
    base = Format(24, 16)
    constants = (o for op in graph.operations for o in op.operands if isinstance(o, Fraction))
    longest = max((base.constant(value).bit_length() for value in constants), default=0)
    return Format(max(base.width, longest + 1), base.fraction)


def stimuli(inputs: Iterable[str], samples: int, form: Format) -> dict[str, Stream]:
    """Samples for every input: extremes, an impulse, a step, and random ones from a fixed seed."""
    low, high = -(1 << (form.width - 1)), (1 << (form.width - 1)) - 1
    random_bits = random.Random(20011)  # noqa: S311  (no secret: the same stimuli every time)
    one = 1 << form.fraction
    return {
        name: [
            (
                low,
                high,
                low if n % 2 else high,
                one if n == 0 else 0,
                one,
                random_bits.randint(low, high),
                random_bits.randint(low, high),
            )
            for n in range(samples)
        ]
        for name in inputs
    }


# ---- the algorithm ---------------------------------------------------------------------------


def evaluate(
    algorithm: Algorithm, inputs: Mapping[str, Stream], samples: int, form: Format
) -> dict[str, Stream]:
    """The values of every signal, straight from the equations, or from the graph if there are none.

    Args:
        algorithm: what is computed.
        inputs: that many samples for every input.
        samples: how many to compute.
        form: how numbers are represented.

    Returns:
        A stream for every input, every signal that an equation defines, and every operation on
        the way to it (`w.1`, `w.2`, as the graph names them); without equations for every
        operation of the graph.
    """
    lanes = _lanes(inputs)
    if algorithm.equations:
        steps = _equation_steps(algorithm.equations, form, lanes)
    else:
        steps = _graph_steps(algorithm.graph, form, lanes)
    streams: dict[str, Stream] = defaultdict(list)
    streams |= {name: list(stream) for name, stream in inputs.items()}
    for n in range(samples):
        for step in steps:
            for name, value in step(streams, n):
                streams[name].append(value)
    return dict(streams)


Step = Callable[[Mapping[str, Stream], int], Iterator[tuple[str, Value]]]
"""Computes values of sample n, each with its name, from the streams so far."""


def _sample(streams: Mapping[str, Stream], name: str, n: int, lanes: int) -> Value:
    return streams[name][n] if n >= 0 else (0,) * lanes


def _lanes(streams: Mapping[str, Stream]) -> int:
    """How many stimuli run side by side."""
    return next((len(stream[0]) for stream in streams.values() if stream), 1)


def _in_order(names: Iterable[str], reads: Iterable[tuple[str, str]]) -> list[str]:
    """Names so that what is read in the same sample comes first."""
    graph = nx.DiGraph()
    graph.add_nodes_from(names)
    graph.add_edges_from(reads)
    return list(nx.lexicographical_topological_sort(graph))


def _equation_steps(equations: Sequence[Equation], form: Format, lanes: int) -> list[Step]:
    by_name = {equation.signal: equation for equation in equations}
    reads = [
        (term.signal, equation.signal)
        for equation in equations
        for term in equation.postfix
        if isinstance(term, Tap) and term.delay == 0 and term.signal in by_name
    ]
    return [_equation_step(by_name[name], form, lanes) for name in _in_order(by_name, reads)]


def _equation_step(equation: Equation, form: Format, lanes: int) -> Step:
    last = sum(isinstance(term, Operator) for term in equation.postfix)

    def step(streams: Mapping[str, Stream], n: int) -> Iterator[tuple[str, Value]]:
        stack: list[Value] = []
        done = 0
        for term in equation.postfix:
            if isinstance(term, Operator):
                right, left = stack.pop(), stack.pop()
                stack.append(form.apply(term, left, right))
                done += 1
                if done < last:
                    yield f"{equation.signal}.{done}", stack[-1]
            elif isinstance(term, Tap):
                stack.append(_sample(streams, term.signal, n - term.delay, lanes))
            else:
                stack.append((form.constant(term),) * lanes)
        yield equation.signal, stack.pop()

    return step


def _graph_steps(graph: Graph, form: Format, lanes: int) -> list[Step]:
    inner = {op.name: op for op in graph.operations if op.kind is not Kind.INPUT}
    reads = [
        (operand.name, op.name)
        for op in inner.values()
        for operand in op.operands
        if isinstance(operand, Source) and operand.delays == 0 and operand.name in inner
    ]
    return [_operation_step(inner[name], form, lanes) for name in _in_order(inner, reads)]


def _operation_step(operation: Operation, form: Format, lanes: int) -> Step:
    def step(streams: Mapping[str, Stream], n: int) -> Iterator[tuple[str, Value]]:
        values = [
            _sample(streams, operand.name, n - operand.delays, lanes)
            if isinstance(operand, Source)
            else (form.constant(operand),) * lanes
            for operand in operation.operands
        ]
        is_output = operation.kind is Kind.OUTPUT
        yield operation.name, values[0] if is_output else form.apply(operation.kind, *values)

    return step


# ---- the hardware ----------------------------------------------------------------------------

Tag = tuple[Copy, int]
"""Whose result a register holds: a copy of an operation, and the block it belongs to."""


_Thing = TypeVar("_Thing")


@dataclass(frozen=True)
class Held:
    """What stands in a register: whose result it is, and its value."""

    tag: Tag
    value: Value


class Hardware:
    """The datapath of a plan, cycle by cycle: units with output registers, registers, ports."""

    def __init__(self, plan: Plan, graph: Graph, form: Format, blocks: int) -> None:
        assert plan.parallelism is not None and plan.cycles is not None  # noqa: S101, PT018
        self.parallelism, self.cycles, self.blocks = plan.parallelism, plan.cycles, blocks
        self.graph, self.form = graph, form
        self.placed = {op.key: op for op in plan.operations}
        self.lives = {life.value: life for life in plan.lifetimes}
        self.results: dict[Tag, Value] = {}
        self.outputs: dict[object, Held] = {}
        self.registers: dict[int, Held] = {}
        self.idle: dict[object, int] = {}  # the cycle from which a unit can start another
        self.lanes = 1

    def run(self, inputs: Mapping[str, Stream]) -> dict[str, Stream]:
        """Runs all blocks on the inputs.

        Returns:
            The results of every operation, sample by sample.

        Raises:
            AuditError: an operand is not where the plan says it is, or two values meet.
        """
        self.lanes = _lanes(inputs)
        operations, lives = self.placed.values(), self.lives.values()
        starting = self._by_slot((op.start, op) for op in operations)
        leaving = self._by_slot((op.start + op.latency, op) for op in operations)
        alive = self._by_slot(
            (life.first + age, (life, age)) for life in lives for age in range(len(life.registers))
        )
        last = max(op.start + op.latency for op in operations) + (self.blocks - 1) * self.cycles
        for cycle in range(min(op.start for op in operations), last + 1):
            self._clock(cycle, self._due(alive, cycle))
            self._emerge(self._due(leaving, cycle), inputs)
            for op, block in self._due(starting, cycle):
                self._start(op, block, cycle)
        return {
            name: [
                self.results[Copy(name, n % self.parallelism), n // self.parallelism]
                for n in range(self.blocks * self.parallelism)
            ]
            for name in self.graph.by_name
        }

    def _by_slot(self, timed: Iterable[tuple[int, _Thing]]) -> list[list[tuple[int, _Thing]]]:
        """Things with the cycle in which they come about in block 0, sorted into slots."""
        slots: list[list[tuple[int, _Thing]]] = [[] for _ in range(self.cycles)]
        for first, thing in timed:
            slots[first % self.cycles].append((first, thing))
        return slots

    def _due(
        self, slots: Sequence[Iterable[tuple[int, _Thing]]], cycle: int
    ) -> Iterator[tuple[_Thing, int]]:
        """What comes about in a cycle, with its block."""
        for first, thing in slots[cycle % self.cycles]:
            block = (cycle - first) // self.cycles
            if 0 <= block < self.blocks:
                yield thing, block

    def _clock(self, cycle: int, alive: Iterable[tuple[tuple[Lifetime, int], int]]) -> None:
        """The clock edge into a cycle: registers take up new values or hand on old ones."""
        after: dict[int, Held] = {}
        for (life, age), block in alive:
            tag, register = (life.value, block), life.registers[age]
            if age == 0:
                held = self.outputs.get(self._outlet(self.placed[life.value]))
            else:
                held = self.registers.get(life.registers[age - 1])
            if held is None or held.tag != tag:
                raise AuditError(f"register {register} finds no {_named(tag)} in cycle {cycle}")
            if register in after:
                raise AuditError(
                    f"register {register} is to hold both {_named(after[register].tag)} and "
                    f"{_named(tag)} in cycle {cycle}"
                )
            after[register] = held
        self.registers = after

    def _outlet(self, op: PlannedOperation) -> object:
        return (op.unit, op.instance) if op.unit is not None else op.key

    def _emerge(
        self,
        leaving: Iterable[tuple[PlannedOperation, int]],
        inputs: Mapping[str, Stream],
    ) -> None:
        """Results reach the output registers of their units, samples their input ports."""
        self.outputs = {}
        for op, block in leaving:
            tag = (op.key, block)
            if self.graph.by_name[op.name].kind is Kind.INPUT:
                self.results[tag] = inputs[op.name][block * self.parallelism + op.copy]
            elif self.graph.by_name[op.name].kind is Kind.OUTPUT:
                continue  # read and gone in the cycle in which it starts
            outlet = self._outlet(op)
            if outlet in self.outputs:
                raise AuditError(f"{_named(tag)} leaves its unit together with another result")
            self.outputs[outlet] = Held(tag, self.results[tag])

    def _start(self, op: PlannedOperation, block: int, cycle: int) -> None:
        operation, outlet = self.graph.by_name[op.name], self._outlet(op)
        if operation.kind is Kind.INPUT:
            return
        if cycle < self.idle.get(outlet, cycle):
            raise AuditError(f"{op.key} starts on a unit that is busy in cycle {cycle}")
        self.idle[outlet] = cycle + op.busy
        values = [
            self._read(operand, op, block, cycle)
            if isinstance(operand, Source)
            else (self.form.constant(operand),) * self.lanes
            for operand in operation.operands
        ]
        whole = operation.kind is not Kind.OUTPUT
        result = self.form.apply(operation.kind, *values) if whole else values[0]
        self.results[op.key, block] = result

    def _read(self, source: Source, op: PlannedOperation, block: int, cycle: int) -> Value:
        """An operand, from the only place where it can be in this cycle."""
        blocks_ago, copy = divmod(op.copy - source.delays, self.parallelism)
        producer, of_block = self.placed[Copy(source.name, copy)], block + blocks_ago
        if of_block < 0:
            return (0,) * self.lanes
        tag = (producer.key, of_block)
        age = cycle - (producer.start + producer.latency + of_block * self.cycles)
        held = None
        if age == 0:
            held = self.outputs.get(self._outlet(producer))
        elif (life := self.lives.get(producer.key)) is not None and 0 < age <= len(life.registers):
            held = self.registers.get(life.registers[age - 1])
        if held is None or held.tag != tag:
            raise AuditError(f"{op.key} finds no {_named(tag)} in cycle {cycle}")
        return held.value


def _named(tag: Tag) -> str:
    return f"{tag[0]} of block {tag[1]}"
