"""Random designs, and plans for them made without a solver: starts are drawn, then put right."""

from __future__ import annotations

import math
import random
from collections import defaultdict
from fractions import Fraction
from pathlib import Path

import networkx as nx

from scheduler.binding import allocate_registers, bind_instances, lifetimes, most_alive
from scheduler.datapath import BlockEdge
from scheduler.design import Design, design_from, design_of
from scheduler.graph import Graph, Kind, Operand, Operation, Source
from scheduler.plan import Copy, Plan, PlannedEdge, PlannedOperation, Proof, Status


def random_graph(rng: random.Random) -> Graph:
    """One to seven operations in loops and out of them, with up to two inputs and two outputs."""
    inputs = [f"x{i}" for i in range(rng.randint(0, 2))]
    names = [f"v{i}" for i in range(rng.randint(1, 7))]

    def operand(place: int) -> Operand:
        if rng.random() < 0.25:
            return Fraction(rng.randint(-300, 300), rng.choice([1, 4, 100]))
        name = rng.choice([*inputs, *names])
        delays = rng.choice([0, 0, 1, 1, 2, 5])
        looks_ahead = name in names and names.index(name) >= place
        return Source(name, max(delays, 1) if looks_ahead else delays)

    def inner(place: int) -> Operation:
        kind = rng.choice([Kind.ADD, Kind.SUBTRACT, Kind.MULTIPLY])
        left, right = operand(place), operand(place)
        if isinstance(left, Fraction) and isinstance(right, Fraction):
            right = Source(names[place], 1)  # graphs have no operation on constants alone
        return Operation(names[place], kind, (left, right))

    return Graph(
        (
            *(Operation(name, Kind.INPUT) for name in inputs),
            *(inner(place) for place in range(len(names))),
            *(
                Operation(f"y{i}", Kind.OUTPUT, (Source(rng.choice(names), rng.choice([0, 0, 1])),))
                for i in range(rng.randint(1, 2))
            ),
        )
    )


def loop_bound(design: Design) -> Fraction:
    """The iteration bound by listing every loop."""
    graph, technology = design.algorithm.graph, design.technology
    delays: dict[tuple[str, str], int] = {}
    for source, target, count in graph.edges:
        ends = (str(source), str(target))
        delays[ends] = min(count, delays.get(ends, count))
    bounds = [
        Fraction(
            sum(technology.unit_for(graph.by_name[name].kind).latency for name in loop),
            sum(delays[ends] for ends in zip(loop, [*loop[1:], loop[0]], strict=True)),
        )
        for loop in nx.simple_cycles(nx.DiGraph(list(delays)))
    ]
    return max(bounds, default=Fraction(0))


def random_design(rng: random.Random) -> Design:
    """A random graph at a rate that its loops keep, in serial or block delivery."""
    graph, technology = random_graph(rng), rng.choice(["unit-time", "unit-time-unpipelined"])
    bound = max(loop_bound(design_of(graph, cycles_per_sample=1, technology=technology)), 2)
    rate = bound + rng.choice(
        [Fraction(0), Fraction(1, 2), Fraction(2, 3), Fraction(1), Fraction(4)]
    )
    document = design_of(
        graph,
        cycles_per_sample=rate,
        technology=technology,
        caps={"parallelism": rng.randint(1, 3)},
    ).document()
    document["requirement"]["delivery"] = rng.choice(["serial", "block"])
    return design_from(document, "a random design", Path())


def pairs_of(design: Design) -> list[tuple[int, int]]:
    """Every J and N that loops, busy times and the rate allow."""
    bound, rate = loop_bound(design), design.requirement.cycles_per_sample
    kinds = {op.kind for op in design.algorithm.graph.operations if not op.is_port}
    busy = max(design.technology.unit_for(kind).busy for kind in kinds)
    return [
        (j, n)
        for j in range(1, design.caps.parallelism + 1)
        for n in range(busy, math.floor(j * rate) + 1)
        if n >= j * bound
    ]


def random_plan(rng: random.Random) -> Plan:
    """A plan of a random design, for any of its pairs, larger than it has to be."""
    while not (pairs := pairs_of(design := random_design(rng))):
        pass  # no J up to the cap fits the rate and the loops in whole cycles
    return plan_of(design, *rng.choice(pairs), rng)


def plan_of(design: Design, j: int, n: int, rng: random.Random) -> Plan:
    """A plan for a pair, from random starts that are moved back until everything is in time."""
    edges = _unfolded(design.algorithm.graph, j)
    starts = _starts(design, j, n, edges, rng)
    units, instances = _bind(design, starts, n)
    graph, technology = design.algorithm.graph, design.technology
    runs = {op.name: technology.unit_for(op.kind) for op in graph.operations if not op.is_port}
    held = lifetimes(starts, _latency(design), edges, n)
    area = sum(technology.unit(name).area * count for name, count in units.items())
    inputs, outputs = graph.of_kind(Kind.INPUT), graph.of_kind(Kind.OUTPUT)
    ends = [starts[Copy(op.name, j - 1)] for op in outputs]
    return Plan(
        title=design.title,
        status=Status.OPEN,
        value=float(area + technology.register_area * most_alive(held, n)),
        bound=0.0,
        design=design.document(),
        parallelism=j,
        cycles=n,
        units=units,
        registers=most_alive(held, n),
        latency=max(ends) - starts[Copy(inputs[0].name, 0)] if inputs else None,
        operations=tuple(
            PlannedOperation(
                name=copy.name,
                copy=copy.number,
                unit=runs[copy.name].name if copy.name in runs else None,
                instance=instances.get(copy),
                start=start,
                slot=start % n,
                stage=start // n,
                latency=runs[copy.name].latency if copy.name in runs else 0,
                busy=runs[copy.name].busy if copy.name in runs else 0,
            )
            for copy, start in starts.items()
        ),
        edges=tuple(PlannedEdge(*edge) for edge in edges),
        lifetimes=allocate_registers(held, n),
        proof=Proof(pairs=len(pairs_of(design))),
    )


def _latency(design: Design) -> dict[str, int]:
    return {
        op.name: 0 if op.is_port else design.technology.unit_for(op.kind).latency
        for op in design.algorithm.graph.operations
    }


def _unfolded(graph: Graph, j: int) -> list[BlockEdge]:
    """Copy i of the source is read by copy (i + w) mod J, floor((i + w) / J) blocks later."""
    return [
        BlockEdge(Copy(str(u), i), Copy(str(v), (i + w) % j), (i + w) // j)
        for u, v, w in graph.edges
        for i in range(j)
    ]


def _starts(
    design: Design, j: int, n: int, edges: list[BlockEdge], rng: random.Random
) -> dict[Copy, int]:
    graph, latency = design.algorithm.graph, _latency(design)
    starts = {Copy(op.name, i): rng.randint(-n, n) for op in graph.operations for i in range(j)}
    inputs = [op.name for op in graph.of_kind(Kind.INPUT)]
    tied = [[name] for op in graph.of_kind(Kind.OUTPUT) for name in [op.name]] + [inputs]
    serial = design.requirement.delivery == "serial"
    late = [math.ceil(Fraction(i * n, j)) if serial else 0 for i in range(j)]
    while True:
        before = dict(starts)
        for u, v, w in edges:
            starts[v] = max(starts[v], starts[u] + latency[u.name] - n * w)
        for group in tied:
            ports = [Copy(name, i) for name in group for i in range(j)]
            first = max((starts[port] - late[port.number] for port in ports), default=0)
            starts |= {port: first + late[port.number] for port in ports}
        if starts == before:
            return starts


def _bind(
    design: Design, starts: dict[Copy, int], n: int
) -> tuple[dict[str, int], dict[Copy, int]]:
    groups: dict[str, dict[Copy, int]] = defaultdict(dict)
    for copy, start in starts.items():
        operation = design.algorithm.graph.by_name[copy.name]
        if not operation.is_port:
            groups[design.technology.unit_for(operation.kind).name][copy] = start
    units: dict[str, int] = {}
    instances: dict[Copy, int] = {}
    for name, group in groups.items():
        busy = design.technology.unit(name).busy
        tries = ((q, bind_instances(group, busy, n, q)) for q in range(1, len(group) + 1))
        units[name], bound = next((q, bound) for q, bound in tries if bound is not None)
        instances |= bound
    return units, instances
