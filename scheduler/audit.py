"""The independent check of a plan, from the plan alone.

Recomputes the unfolded graph from the design inside the plan, then every timing rule, every
conflict of units and registers, every count, the objective and the caps, and at last runs the
schedule on a model of the hardware against direct evaluation of the algorithm, bit for bit. It
shares no code with the side that finds plans, but for the iteration bound, which counts the pairs
of a proof. What it cannot check without a solver is whether a lower bound is true; it does check
that the plan's words about it agree with its numbers.
"""

from __future__ import annotations

import math
from collections import Counter, defaultdict
from collections.abc import Callable, Hashable, Iterator, Mapping
from dataclasses import dataclass
from fractions import Fraction
from pathlib import Path
from typing import TypeVar

from scheduler.design import Delivery, Design, design_from
from scheduler.errors import AuditError
from scheduler.graph import Graph, Kind, Operation, Source
from scheduler.loops import iteration_bound
from scheduler.plan import Copy, Lifetime, Plan, PlannedOperation, Status
from scheduler.simulation import Hardware, evaluate, format_for, stimuli

_MOST_NS = 1e-9  # relative; periods are the only inexact numbers of a plan


@dataclass(frozen=True)
class Check:
    """A rule that a plan keeps, and how much of it was looked at."""

    name: str
    fact: str


@dataclass(frozen=True)
class AuditReport:
    """Every check that a plan has passed, in order."""

    checks: tuple[Check, ...]


@dataclass(frozen=True)
class _Subject:
    """A plan with a schedule, its design, and its operations by copy."""

    plan: Plan
    design: Design
    graph: Graph
    parallelism: int
    cycles: int
    placed: Mapping[Copy, PlannedOperation]

    @property
    def edges(self) -> Iterator[tuple[Copy, Copy, int]]:
        """The unfolded graph: copy i of a reader takes sample i - w, that of a copy blocks ago."""
        for operation in self.graph.operations:
            for source in operation.operands:
                if isinstance(source, Source):
                    for i in range(self.parallelism):
                        ago, copy = divmod(i - source.delays, self.parallelism)
                        yield Copy(source.name, copy), Copy(operation.name, i), -ago

    def wait(self, source: Copy, target: Copy, delays: int) -> int:
        """Cycles from a result to its reading: D = N w - l(u) + s(v) - s(u)."""
        producer, reader = self.placed[source], self.placed[target]
        return self.cycles * delays - producer.latency + reader.start - producer.start


def audit(plan: Plan) -> AuditReport:
    """Checks a plan against the design that it carries.

    Raises:
        AuditError: it does not stand; the message names the first check that fails.
        InputError: the design inside it cannot be read.
    """
    design = design_from(plan.design, "the plan's design", Path())
    checks = [_checked("standing", _standing, plan)]
    if plan.has_schedule:
        subject = _subject(plan, design)
        checks += [_checked(name, rule, subject) for name, rule in _RULES]
    return AuditReport(tuple(checks))


_Subjected = TypeVar("_Subjected")


def _checked(name: str, rule: Callable[[_Subjected], str], subject: _Subjected) -> Check:
    try:
        return Check(name, rule(subject))
    except AuditError as error:
        raise AuditError(f"{name}: {error}") from error


def _must(holds: bool, complaint: str) -> None:
    if not holds:
        raise AuditError(complaint)


def _standing(plan: Plan) -> str:
    """The status, the value and the bound tell the same story."""
    title = plan.design["title"]
    _must(plan.title == title, f"the plan is called '{plan.title}', its design '{title}'")
    if not plan.has_schedule:
        _without_schedule(plan)
        return f"{plan.status}, no schedule to check"
    _must(plan.value is not None, "a plan has no value")
    _must(plan.bound is not None, "a plan has no bound")
    value, bound = plan.value or 0.0, plan.bound or 0.0
    if plan.status is Status.PROVEN:
        _must(bound == value, f"it is called proven, with a bound of {bound} under {value}")
    else:
        _must(bound < value, f"it is called open, with a bound of {bound} and a value of {value}")
    return f"{plan.status}, value {value:g}, bound {bound:g}"


def _without_schedule(plan: Plan) -> None:
    hardware = (plan.operations, plan.edges, plan.lifetimes, plan.units)
    numbers = (plan.parallelism, plan.cycles, plan.clock_period_ns, plan.registers, plan.latency)
    _must(plan.value is None, "an answer without a plan has a value")
    _must(plan.bound is None, "an answer without a plan has a bound")
    _must(not any(hardware), "an answer without a plan has hardware")
    _must(all(number is None for number in numbers), "an answer without a plan has a schedule")
    _must(bool(plan.reason), "an answer without a plan gives no reason")
    if plan.status is Status.IMPOSSIBLE:
        _must(_settled(plan) == plan.proof.pairs, "the proof leaves out a pair")
        cheapest = [verdict.bound for verdict in plan.proof.by_solver]
        _must(not any(each is not None for each in cheapest), "a pair of the proof has a plan")


def _settled(plan: Plan) -> int:
    """How many pairs the proof accounts for."""
    return plan.proof.by_floor + len(plan.proof.by_solver)


def _subject(plan: Plan, design: Design) -> _Subject:
    if plan.parallelism is None or plan.cycles is None or plan.parallelism < 1 or plan.cycles < 1:
        raise AuditError("rate: a plan needs J and N of 1 or more")
    if plan.parallelism > design.caps.parallelism:  # the copies below are as many
        raise AuditError(f"rate: J = {plan.parallelism} is over its cap")
    placed = {op.key: op for op in plan.operations}
    wanted = [
        Copy(op.name, i)
        for op in design.algorithm.graph.operations
        for i in range(plan.parallelism)
    ]
    if sorted(op.key for op in plan.operations) != sorted(wanted):
        raise AuditError("operations: not every copy of every operation stands there once")
    return _Subject(plan, design, design.algorithm.graph, plan.parallelism, plan.cycles, placed)


# ---- rules -----------------------------------------------------------------------------------


def _rate(s: _Subject) -> str:
    needs, plan = s.design.requirement, s.plan
    most = math.floor(s.parallelism * needs.cycles_per_sample)
    _must(s.cycles <= most, f"N = {s.cycles} is more than the {most} cycles of a block")
    sample = None if needs.sample_rate is None else Fraction(10**9) / needs.sample_rate
    clock = None if sample is None else sample * s.parallelism / s.cycles
    _must(_near(plan.sample_period_ns, sample), "the sample period is not that of the design")
    _must(_near(plan.clock_period_ns, clock), "the clock period is not J Ts / N")
    return f"{s.cycles} cycles for {s.parallelism} samples, {most} allowed"


def _near(stated: float | None, exact: Fraction | None) -> bool:
    if stated is None or exact is None:
        return stated is None and exact is None
    return math.isclose(stated, float(exact), rel_tol=_MOST_NS)


def _operations(s: _Subject) -> str:
    for op in s.placed.values():
        _must(op.start == s.cycles * op.stage + op.slot, f"{op.key}: start is not N * stage + slot")
        _must(0 <= op.slot < s.cycles, f"{op.key}: slot {op.slot} is not in the period")
        operation = s.graph.by_name[op.name]
        _must(
            (op.unit, op.latency, op.busy) == _timing(s, operation),
            f"{op.key}: wrong unit or times",
        )
        _must((op.instance is None) == operation.is_port, f"{op.key}: wrong kind of instance")
    return f"{len(s.placed)} copies placed"


def _timing(s: _Subject, operation: Operation) -> tuple[str | None, int, int]:
    if operation.is_port:
        return None, 0, 0
    unit = s.design.technology.unit_for(operation.kind)
    return unit.name, unit.latency, unit.busy


def _edges(s: _Subject) -> str:
    stated = Counter((edge.source, edge.target, edge.delays) for edge in s.plan.edges)
    wanted = Counter(s.edges)
    odd = next(iter((stated - wanted) + (wanted - stated)), None)
    _must(
        odd is None, f"the edge {odd and f'{odd[0]} -> {odd[1]}'} differs from the unfolded graph"
    )
    return f"{len(s.plan.edges)} edges as unfolded from the design"


def _precedence(s: _Subject) -> str:
    for source, target, delays in s.edges:
        wait = s.wait(source, target, delays)
        _must(wait >= 0, f"{target} reads {source} {-wait} cycles too early")
    return "no result is read before it is there"


def _ports(s: _Subject) -> str:
    serial = s.design.requirement.delivery is Delivery.SERIAL
    inputs, outputs = s.graph.of_kind(Kind.INPUT), s.graph.of_kind(Kind.OUTPUT)
    for port in (*inputs, *outputs):
        first = inputs[0] if port in inputs else port
        for i in range(s.parallelism):
            late = math.ceil(Fraction(i * s.cycles, s.parallelism)) if serial else 0
            due = s.placed[Copy(first.name, 0)].start + late
            at = s.placed[Copy(port.name, i)].start
            _must(at == due, f"port {port.name}({i}) is served in cycle {at}, due in {due}")
    return f"{len(inputs)} inputs and {len(outputs)} outputs, {s.design.requirement.delivery}"


def _units(s: _Subject) -> str:
    taken: dict[tuple[str, int, int], Copy] = {}
    for op in s.placed.values():
        if op.unit is None or op.instance is None:
            continue
        _must(op.unit in s.plan.units, f"{op.key} runs on a unit that the plan does not have")
        there = range(s.plan.units[op.unit])
        _must(op.instance in there, f"{op.key} runs on {op.unit} {op.instance}, which is not there")
        _must(op.busy <= s.cycles, f"{op.key} is busy for longer than the period")
        for cycle in range(op.start, op.start + op.busy):
            place = (op.unit, op.instance, cycle % s.cycles)
            other = taken.setdefault(place, op.key)
            _must(other == op.key, f"{op.key} and {other} meet on {op.unit} {op.instance}")
    for name, count in s.plan.units.items():
        used = {op.instance for op in s.placed.values() if op.unit == name}
        known = {unit.name for unit in s.design.technology.units}
        _must(name in known, f"the technology has no unit '{name}'")
        _must(len(used) == count, f"{len(used)} {name} are in use, the plan says {count}")
    return ", ".join(f"{count} {name}" for name, count in s.plan.units.items()) or "no units"


def _held(s: _Subject) -> dict[Copy, range]:
    """The cycles in which the values of block 0 are held, recomputed from the starts."""
    waits: dict[Copy, int] = defaultdict(int)
    for source, target, delays in s.edges:
        waits[source] = max(waits[source], s.wait(source, target, delays))
    out = {copy: s.placed[copy].start + s.placed[copy].latency + 1 for copy in waits}
    return {copy: range(out[copy], out[copy] + wait) for copy, wait in waits.items() if wait}


def _registers(s: _Subject) -> str:
    held = _held(s)
    lives = {life.value: life for life in s.plan.lifetimes}
    _must(len(lives) == len(s.plan.lifetimes), "a value has two lifetimes")
    _must(lives.keys() == held.keys(), "not every value that waits has a register")
    for copy, life in lives.items():
        stated = range(life.first, life.first + len(life.registers))
        _must(stated == held[copy], f"{copy} is held in other cycles than it lives")
    alive = Counter(cycle % s.cycles for life in held.values() for cycle in life)
    most = max(alive.values(), default=0)
    _must(
        s.plan.registers == most,
        f"{most} values are alive at once, the plan says {s.plan.registers}",
    )
    _check_places(s, lives, most)
    return f"{most} registers, {len(held)} values held"


def _check_places(s: _Subject, lives: Mapping[Copy, Lifetime], most: int) -> None:
    taken: dict[tuple[int, int], Copy] = {}
    for copy, life in lives.items():
        for cycle, register in enumerate(life.registers, life.first):
            _must(
                0 <= register < most, f"{copy} is held in register {register}, which is not there"
            )
            place = (cycle % s.cycles, register)
            _must(place not in taken, f"{copy} and {taken.get(place)} meet in register {register}")
            taken[place] = copy


def _latency(s: _Subject) -> str:
    inputs, outputs = s.graph.of_kind(Kind.INPUT), s.graph.of_kind(Kind.OUTPUT)
    latency = None
    if inputs and outputs:
        last = max(s.placed[Copy(port.name, s.parallelism - 1)].start for port in outputs)
        latency = last - s.placed[Copy(inputs[0].name, 0)].start
    _must(
        s.plan.latency == latency,
        f"the latency is {latency} cycles, the plan says {s.plan.latency}",
    )
    return "no port to port" if latency is None else f"{latency} cycles from port to port"


def _area(s: _Subject) -> Fraction:
    technology = s.design.technology
    area = technology.register_area * (s.plan.registers or 0)
    return area + sum(technology.unit(name).area * count for name, count in s.plan.units.items())


def _objective(s: _Subject) -> str:
    area = _area(s)
    _must(s.plan.value == float(area), f"the area is {float(area):g}, the plan says {s.plan.value}")
    return f"area {float(area):g}"


def _caps(s: _Subject) -> str:
    caps, plan = s.design.caps, s.plan
    for name, most in caps.units.items():
        _must(plan.units.get(name, 0) <= most, f"{name} is over its cap of {most}")
    if caps.registers is not None:
        _must((plan.registers or 0) <= caps.registers, "registers are over their cap")
    if caps.area is not None:
        _must(_area(s) <= caps.area, "area is over its cap")
    if plan.latency is not None:
        if caps.latency_cycles is not None:
            _must(plan.latency <= caps.latency_cycles, "latency is over its cap")
        rate = s.design.requirement.sample_rate
        if caps.latency_time is not None and rate is not None:
            time = plan.latency * Fraction(s.parallelism, s.cycles) / rate
            _must(time <= caps.latency_time, "latency is over its cap")
    return "all kept"


def _proof(s: _Subject) -> str:
    proof, pairs = s.plan.proof, _pairs(s)
    count = sum(map(len, pairs.values()))
    _must(proof.pairs == count, f"the rate allows {count} pairs, the proof says {proof.pairs}")
    _must(s.cycles in pairs[s.parallelism], "the plan's own J and N are no pair of the proof")
    _must(0 <= proof.by_floor <= proof.pairs, "the proof counts more pairs than there are")
    _must(_settled(s.plan) <= proof.pairs, "the proof counts a pair twice")
    _must(
        s.plan.status is not Status.PROVEN or _settled(s.plan) == proof.pairs,
        "the proof leaves out a pair",
    )
    told = Counter((verdict.parallelism, verdict.cycles) for verdict in proof.by_solver)
    for (j, n), times in told.items():
        _must(times == 1, f"the proof tells the pair J = {j}, N = {n} twice")
        _must(n in pairs.get(j, ()), f"the proof tells of J = {j}, N = {n}, which is no pair")
    for verdict in proof.by_solver:
        _must(verdict.runs >= 2, "the proof rests on a single solver run")
        least = math.inf if verdict.bound is None else verdict.bound
        _must(least >= (s.plan.value or 0.0), "a pair of the proof allows a cheaper plan")
    return f"{proof.pairs} pairs, {len(proof.by_solver)} of them by solver"


def _pairs(s: _Subject) -> dict[int, range]:
    """The N that loops, busy times and the rate leave, for every J within its cap."""
    latency: dict[Hashable, int] = {op.name: op.latency for op in s.placed.values()}
    bound = iteration_bound(s.graph.edges, latency)
    busy = max((op.busy for op in s.placed.values()), default=1)
    most = s.design.requirement.cycles_per_sample
    return {
        j: range(max(math.ceil(j * bound), busy, 1), math.floor(j * most) + 1)
        for j in range(1, s.design.caps.parallelism + 1)
    }


def _bits(s: _Subject) -> str:
    """The hardware computes what the algorithm says, every value of every operation."""
    form = format_for(s.graph)
    blocks = _depth(s) + 4 + 24 // s.parallelism
    samples = blocks * s.parallelism
    inputs = stimuli((op.name for op in s.graph.of_kind(Kind.INPUT)), samples, form)
    wanted = evaluate(s.design.algorithm, inputs, samples, form)
    got = Hardware(s.plan, s.graph, form, blocks).run(inputs)
    for name in got.keys() - wanted.keys():  # the port of an output, whose signal an equation has
        wanted[name] = wanted[name.removesuffix(".out")]
    for n in range(samples):
        for name, stream in got.items():
            want, have = wanted[name][n], stream[n]
            _must(want == have, f"{name} computes {have} for sample {n}, not {want}")
    return f"{len(got)} operations, {samples} samples of 7 stimuli, {form.width} bits: all equal"


def _depth(s: _Subject) -> int:
    """Blocks from the first start to the last reading of what belongs to one block."""
    first = min(op.start for op in s.placed.values())
    ends = [op.start + op.latency for op in s.placed.values()]
    ends += [life.first + len(life.registers) for life in s.plan.lifetimes]
    return (max(ends) - first) // s.cycles + 1


_RULES: tuple[tuple[str, Callable[[_Subject], str]], ...] = (
    ("rate", _rate),
    ("operations", _operations),
    ("edges", _edges),
    ("precedence", _precedence),
    ("ports", _ports),
    ("units", _units),
    ("registers", _registers),
    ("latency", _latency),
    ("objective", _objective),
    ("caps", _caps),
    ("proof", _proof),
    ("bits", _bits),
)
