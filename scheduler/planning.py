"""From a design to its plan: the main job, from end to end.

Looks for obstacles that need no solver, searches, binds the schedule to registers, puts the plan
together, and audits it. No plan leaves here that does not stand.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator
from dataclasses import dataclass
from fractions import Fraction

from scheduler.audit import AuditReport, audit
from scheduler.binding import allocate_registers, lifetimes
from scheduler.datapath import Datapath, block_of, copies_of, datapath_of
from scheduler.design import Design
from scheduler.floors import Load, load_of, loops_of
from scheduler.obstacles import forbidden
from scheduler.plan import (
    Copy,
    Plan,
    PlannedEdge,
    PlannedOperation,
    Proof,
    SolverVerdict,
    Status,
)
from scheduler.quantities import format_number
from scheduler.search import MANNERS, Finding, Progress, Schedule, search
from scheduler.transforms import unfold

Watch = Callable[[Progress], None]


@dataclass(frozen=True)
class Answer:
    """A plan and the checks that it has passed."""

    plan: Plan
    report: AuditReport


class Stopped(KeyboardInterrupt):
    """The user stopped the search; `answer` is the best so far, None if there is none."""

    def __init__(self, answer: Answer | None) -> None:
        super().__init__()
        self.answer = answer


def plan(design: Design, *, time_limit: float | None = None, watch: Watch | None = None) -> Plan:
    """The smallest hardware for a design: `answer` without the list of checks."""
    return answer(design, time_limit=time_limit, watch=watch).plan


def answer(
    design: Design, *, time_limit: float | None = None, watch: Watch | None = None
) -> Answer:
    """Finds the smallest hardware for a design, proves it as far as time allows, and audits it.

    Args:
        design: algorithm, requirement, caps and technology.
        time_limit: seconds after which the search ends with what it has.
        watch: called with the search's progress now and then.

    Returns:
        A plan of any status; "impossible" and "none" come with a reason.

    Raises:
        Stopped: on KeyboardInterrupt, with the best plan so far.
        SolverError: the solver cannot be used.
        AuditError: the plan found does not stand, which is a fault of this program.
    """
    load = load_of(design)
    obstacle = forbidden(load, design)
    if obstacle is not None:
        return _audited(_without_schedule(design, Status.IMPOSSIBLE, obstacle, Proof()))
    datapath, finding = datapath_of(design), Finding()
    try:
        search(
            datapath,
            parallelism=design.caps.parallelism,
            bound=load.bound,
            time_limit=time_limit,
            watch=watch,
            finding=finding,
        )
    except KeyboardInterrupt:
        best = _plan(design, load, datapath, finding) if finding.best is not None else None
        raise Stopped(None if best is None else _audited(best)) from None
    return _audited(_plan(design, load, datapath, finding))


def _audited(found: Plan) -> Answer:
    return Answer(found, audit(found))


def _plan(design: Design, load: Load, datapath: Datapath, finding: Finding) -> Plan:
    proof = _proof(load, datapath, finding)
    if finding.best is not None:
        return _with_schedule(design, datapath, finding, finding.best, proof)
    if finding.finished:
        return _without_schedule(design, Status.IMPOSSIBLE, _caps_conflict(design, finding), proof)
    reason = "no plan was found within the time limit, and none was ruled out"
    return _without_schedule(design, Status.NONE, reason, proof)


def _without_schedule(design: Design, status: Status, reason: str, proof: Proof) -> Plan:
    return Plan(
        title=design.title,
        status=status,
        value=None,
        bound=None,
        design=design.document(),
        sample_period_ns=_sample_period(design),
        proof=proof,
        reason=reason,
    )


def _with_schedule(
    design: Design, datapath: Datapath, finding: Finding, best: Schedule, proof: Proof
) -> Plan:
    block, cycles = block_of(datapath, best.pair), best.pair.cycles
    held = lifetimes(best.starts, datapath.latency, block.edges, cycles)
    sample = _sample_period(design)
    # stopped at the very moment in which the bound was reached, it is proven all the same
    proven = finding.finished or best.cost <= (finding.bound or 0)
    return Plan(
        title=design.title,
        status=Status.PROVEN if proven else Status.OPEN,
        value=_area(datapath, best.cost),
        bound=_area(datapath, best.cost if proven else finding.bound or 0),
        design=design.document(),
        parallelism=best.pair.parallelism,
        cycles=cycles,
        clock_period_ns=None if sample is None else sample * best.pair.parallelism / cycles,
        sample_period_ns=sample,
        units=dict(best.units),
        registers=best.registers,
        latency=max((best.starts[b] - best.starts[a] for a, b in block.port_spans), default=None),
        operations=tuple(_placed(datapath, best, copy) for copy in block.copies),
        edges=tuple(_edges(design, best)),
        lifetimes=allocate_registers(held, cycles),
        proof=proof,
    )


def _placed(datapath: Datapath, best: Schedule, copy: Copy) -> PlannedOperation:
    stage, slot = divmod(best.starts[copy], best.pair.cycles)
    return PlannedOperation(
        name=copy.name,
        copy=copy.number,
        unit=datapath.unit[copy.name],
        instance=best.instances.get(copy),
        start=best.starts[copy],
        slot=slot,
        stage=stage,
        latency=datapath.latency[copy.name],
        busy=datapath.busy(copy.name),
    )


def _edges(design: Design, best: Schedule) -> Iterator[PlannedEdge]:
    """The unfolded graph, an edge for every operand."""
    for edge in unfold(design.algorithm.graph.edges, best.pair.parallelism):
        yield PlannedEdge(*copies_of(edge), edge.delays)


def _sample_period(design: Design) -> float | None:
    rate = design.requirement.sample_rate
    return None if rate is None else float(Fraction(10**9) / rate)


def _area(datapath: Datapath, cost: int) -> float:
    return float(cost * datapath.measure)


def _proof(load: Load, datapath: Datapath, finding: Finding) -> Proof:
    verdicts = tuple(
        SolverVerdict(
            pair.parallelism,
            pair.cycles,
            None if cost is None else _area(datapath, cost),
            len(MANNERS),
        )
        for pair, cost in finding.by_solver.items()
    )
    return Proof(
        pairs=finding.pairs,
        by_floor=finding.pairs - finding.unsettled - len(verdicts),
        by_solver=verdicts,
        every_parallelism=finding.every_parallelism,
        binding=tuple(_binding(load, datapath, finding)),
    )


def _binding(load: Load, datapath: Datapath, finding: Finding) -> Iterator[str]:
    """In words, what keeps the hardware from being smaller."""
    best = finding.best
    if best is None:
        return
    j, n = best.pair
    for name, kind in datapath.kinds.items():
        floor, taken = kind.floor(best.pair), j * len(kind.operations) * kind.busy
        count = best.units[name]
        share = f"{taken} of the {count * n} cycles of {count} x {name} are taken"
        if count == floor:
            yield f"{share}; {count - 1} could not hold them"
        else:
            yield f"{share}; {floor} could hold them, but not when they are due"
    if load.bound and j * load.bound > n - 1:
        loop, rate = loops_of(load, most=1)[0], format_number(Fraction(n, j))
        yield f"the loop {loop} needs {format_number(load.bound)} of {rate} cycles per sample"


def _caps_conflict(design: Design, finding: Finding) -> str:
    """Why a search that went through every pair found nothing: the caps, all together."""
    caps = design.document()["caps"]
    named = [f"{name} = {value}" for name, value in caps.items() if name != "parallelism"]
    kept = f"the cap {named[0]}" if len(named) == 1 else f"the caps {', '.join(named)} together"
    return (
        f"no schedule keeps {kept}, for any of the {finding.pairs} choices of J up to "
        f"{design.caps.parallelism} and N that keep the rate"
    )
