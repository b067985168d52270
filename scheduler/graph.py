"""The signal-flow graph: operations, and edges that carry sample delays.

An operation reads its operands, each either the result of another operation some samples ago or a
constant. Inputs and outputs are operations too (ports): an input has no operand, an output has one.
Nothing here knows about time in cycles or about hardware.
"""

from __future__ import annotations

from collections.abc import Hashable, Iterable, Mapping
from dataclasses import dataclass
from enum import StrEnum
from fractions import Fraction
from functools import cached_property
from typing import NamedTuple

import networkx as nx

from scheduler.equations import Equation, Operator, Tap
from scheduler.errors import InputError


class Kind(StrEnum):
    """What an operation does. The arithmetic ones are named as technologies name them."""

    INPUT = "input"
    OUTPUT = "output"
    ADD = "add"
    SUBTRACT = "subtract"
    MULTIPLY = "multiply"


PORTS = frozenset({Kind.INPUT, Kind.OUTPUT})
OPERAND_COUNT = {
    Kind.INPUT: 0,
    Kind.OUTPUT: 1,
    Kind.ADD: 2,
    Kind.SUBTRACT: 2,
    Kind.MULTIPLY: 2,
}


class Edge(NamedTuple):
    """A value's way from `source` to `target`, `delays` (w) samples or blocks late.

    The ends are names of operations, or of copies of them once the graph is unfolded.
    """

    source: Hashable
    target: Hashable
    delays: int


@dataclass(frozen=True)
class Source:
    """An operand that is the result of operation `name`, `delays` >= 0 samples ago."""

    name: str
    delays: int


Operand = Source | Fraction


@dataclass(frozen=True)
class Operation:
    """A node of the graph: `operands` in order (the second of a subtraction is taken away)."""

    name: str
    kind: Kind
    operands: tuple[Operand, ...] = ()

    @property
    def is_port(self) -> bool:
        """True for inputs and outputs, which need no unit."""
        return self.kind in PORTS


@dataclass(frozen=True)
class Graph:
    """A signal-flow graph whose operations are checked to fit together.

    Raises:
        InputError: for a name that stands twice, an operand that is nobody's result, a wrong
            number of operands, or a loop without a delay.
    """

    operations: tuple[Operation, ...]

    def __post_init__(self) -> None:
        _check_names(self.operations)
        _check_operands(self.operations, self.by_name)
        _check_loops(self.edges)

    @cached_property
    def by_name(self) -> Mapping[str, Operation]:
        """The operations by their names."""
        return {operation.name: operation for operation in self.operations}

    @cached_property
    def edges(self) -> tuple[Edge, ...]:
        """One edge for every operand that is a result, in the order of the operands."""
        return tuple(
            Edge(operand.name, operation.name, operand.delays)
            for operation in self.operations
            for operand in operation.operands
            if isinstance(operand, Source)
        )

    def of_kind(self, *kinds: Kind) -> tuple[Operation, ...]:
        """The operations of the given kinds, in the graph's order."""
        return tuple(operation for operation in self.operations if operation.kind in kinds)


def _check_names(operations: Iterable[Operation]) -> None:
    seen: set[str] = set()
    for operation in operations:
        if operation.name in seen:
            raise InputError(
                f"two operations are named '{operation.name}'", remedy="rename one of them"
            )
        seen.add(operation.name)


def _check_operands(operations: Iterable[Operation], by_name: Mapping[str, Operation]) -> None:
    for operation in operations:
        wanted = OPERAND_COUNT[operation.kind]
        if len(operation.operands) != wanted:
            raise InputError(
                f"operation '{operation.name}' ({operation.kind}) has "
                f"{len(operation.operands)} operands instead of {wanted}",
                remedy="give each operand an edge or a constant",
            )
        for operand in operation.operands:
            if isinstance(operand, Source):
                _check_source(operation, operand, by_name)


def _check_source(operation: Operation, source: Source, by_name: Mapping[str, Operation]) -> None:
    known = by_name.get(source.name)
    if known is None or known.kind is Kind.OUTPUT:
        raise InputError(f"operation '{operation.name}' reads '{source.name}', which has no result")
    if source.delays < 0:
        raise InputError(
            f"operation '{operation.name}' reads a future sample of '{source.name}'",
            remedy="delays are 0 or more",
        )


def delay_free(edges: Iterable[Edge]) -> nx.DiGraph:
    """The edges without delays, as a directed graph of networkx."""
    return nx.DiGraph((edge.source, edge.target) for edge in edges if edge.delays == 0)


def _check_loops(edges: Iterable[Edge]) -> None:
    graph = delay_free(edges)
    if nx.is_directed_acyclic_graph(graph):  # in linear time; `find_cycle` is not where none is
        return
    loop = nx.find_cycle(graph)
    names = " -> ".join([*(str(edge[0]) for edge in loop), str(loop[0][0])])
    raise InputError(
        f"the loop {names} has no delay, so no sample of it can ever be computed",
        remedy="delay one of its signals by a sample, as in y[n-1]",
    )


def graph_of(equations: Iterable[Equation], inputs: Iterable[str], outputs: Iterable[str]) -> Graph:
    """Builds the graph of difference equations: one operation for each `*`, `+` and `-`.

    The last operation of an equation bears its signal's name, the ones before it the name and a
    number (`w.1`, `w.2`, in the order in which they are computed); the port of output `y` is
    named `y.out`. An equation without an operation (`y[n] = w[n-1]`) is another name of a signal.

    Args:
        equations: checked equations, every signal defined once.
        inputs: names of the input signals.
        outputs: names of the signals that leave.

    Raises:
        InputError: for a signal that is a constant or only ever itself, or a delay-free loop.
    """
    bodies = {equation.signal: equation for equation in equations}
    resolve = _Resolver(bodies)
    ports = [Operation(name, Kind.INPUT) for name in inputs]
    arithmetic = [op for body in bodies.values() for op in _operations_of(body, resolve)]
    leaving = [Operation(f"{name}.out", Kind.OUTPUT, (resolve(Tap(name, 0)),)) for name in outputs]
    return Graph((*ports, *arithmetic, *leaving))


@dataclass(frozen=True)
class _Resolver:
    """Follows signals that are only other names of signals to the operation behind them."""

    bodies: Mapping[str, Equation]

    def __call__(self, tap: Tap) -> Source:
        name, delays, seen = tap.signal, tap.delay, {tap.signal}
        while (body := self.bodies.get(name)) is not None and len(body.postfix) == 1:
            term = body.postfix[0]
            if not isinstance(term, Tap):
                raise InputError(
                    f"signal '{name}' is a constant", remedy="write the number where it is used"
                )
            name, delays = term.signal, delays + term.delay
            if name in seen:
                raise InputError(f"signal '{name}' is only ever a copy of itself")
            seen.add(name)
        return Source(name, delays)


def _operations_of(equation: Equation, resolve: _Resolver) -> Iterable[Operation]:
    """The operations of one equation, in the order in which its postfix form computes them."""
    stack: list[Operand] = []
    count = sum(isinstance(term, Operator) for term in equation.postfix)
    done = 0
    for term in equation.postfix:
        if isinstance(term, Operator):
            done += 1
            name = equation.signal if done == count else f"{equation.signal}.{done}"
            right, left = stack.pop(), stack.pop()
            yield Operation(name, Kind(term), (left, right))
            stack.append(Source(name, 0))
        else:
            stack.append(resolve(term) if isinstance(term, Tap) else term)
