"""Which pairs (J, N) to solve, in which order, and when the answer is proven.

Pairs are taken by their floors. A pair is first asked for a plan that costs no more than its
floor, then for anything cheaper than the best plan so far, always within windows that no such
plan can leave. Pairs whose floor reaches the best plan need no solving.

What the solver claims is not believed at once. A plan is checked row by row; a claim that there
is none counts only once a second run, without preprocessing and with another random seed, has
claimed the same. A run that ends at a deadline claims nothing.
"""

from __future__ import annotations

import time
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, field, replace
from fractions import Fraction

from scheduler import solver
from scheduler.binding import bind_instances, lifetimes, most_alive
from scheduler.compact import Compact, compact
from scheduler.datapath import Block, Datapath, Pair, block_of
from scheduler.formulation import Cut, Model, Question, Window, formulate
from scheduler.overall import floor_over_all
from scheduler.pairs import Pairs, pairs_of
from scheduler.plan import Copy
from scheduler.solver import Manner, Stop
from scheduler.windows import central, longest_ever, near, size, windows

MANNERS = (Manner(), Manner(preprocess="off", seed=7919))
"""How a claim is asked for twice: the runs share neither preprocessing nor random seed."""

_NEAR_NODES = 30


@dataclass(frozen=True)
class Schedule:
    """Starts of every copy at one pair, and what they cost in the datapath's measure."""

    pair: Pair
    starts: Mapping[Copy, int]
    instances: Mapping[Copy, int]
    units: Mapping[str, int]
    registers: int
    cost: int


@dataclass(frozen=True)
class Progress:
    """What a search is at, for who watches it.

    Attributes:
        pair: the pair being solved.
        best: area of the best plan so far; None while there is none.
        bound: area that every plan has at the least, as far as proven.
        seconds: since the search began.
    """

    pair: Pair
    best: Fraction | None
    bound: Fraction
    seconds: float


@dataclass
class Finding:
    """What a search has found and proven so far.

    Attributes:
        best: the cheapest schedule found; None if there is none.
        bound: proven floor under the cost of every schedule; None once nothing is possible.
        finished: whether every pair is accounted for.
        pairs: how many pairs the requirement allows.
        by_solver: pairs that rest on two solver runs, with the cost that each cannot go below
            (None where it has no schedule at all).
        unsettled: pairs that are neither ruled out by a floor nor solved.
        every_parallelism: whether the bound holds for every J whatever the cap.
    """

    best: Schedule | None = None
    bound: int | None = 0
    finished: bool = False
    pairs: int = 0
    by_solver: dict[Pair, int | None] = field(default_factory=dict)
    unsettled: int = 0
    every_parallelism: bool = False


@dataclass
class Search:
    """A search under way: what is known, and the clock that ends it."""

    datapath: Datapath
    pairs: Pairs
    deadline: float | None
    watch: Callable[[Progress], None] | None
    finding: Finding
    began: float = field(default_factory=time.monotonic)

    @property
    def below(self) -> int | None:
        """A plan has to cost less than this to be of interest."""
        return None if self.finding.best is None else self.finding.best.cost

    def seconds_left(self) -> float | None:
        """Seconds until the deadline, never negative; None without one."""
        return None if self.deadline is None else max(0.0, self.deadline - time.monotonic())

    @property
    def time_is_up(self) -> bool:
        """Whether the deadline has passed."""
        return self.deadline is not None and time.monotonic() >= self.deadline

    def keep(self, schedule: Schedule) -> None:
        """Keeps a schedule if it is the best so far."""
        if self.below is None or schedule.cost < self.below:
            self.finding.best = schedule

    def tell(self, pair: Pair) -> None:
        """Reports progress to whoever watches."""
        if self.watch is not None:
            measure, best = self.datapath.measure, self.below
            area = None if best is None else best * measure
            bound = (self.finding.bound or 0) * measure
            self.watch(Progress(pair, area, bound, time.monotonic() - self.began))


def search(
    datapath: Datapath,
    *,
    parallelism: int,
    bound: Fraction,
    time_limit: float | None = None,
    watch: Callable[[Progress], None] | None = None,
    finding: Finding | None = None,
) -> Finding:
    """Finds the cheapest schedule over every J up to the cap and every N the rate allows.

    Args:
        datapath: what is to be scheduled.
        parallelism: largest J.
        bound: iteration bound in cycles per sample.
        time_limit: seconds after which the search ends with what it has.
        watch: called now and then; what it raises ends the search.
        finding: filled as the search goes, so that it is at hand when the search is interrupted.

    Raises:
        SolverError: the solver cannot be used.
    """
    finding = Finding() if finding is None else finding
    pairs = pairs_of(datapath, parallelism, bound)
    finding.pairs = len(pairs)
    deadline = None if time_limit is None else time.monotonic() + time_limit
    state = Search(datapath, pairs, deadline, watch, finding)
    try:
        finding.finished = _settle(state)
    finally:
        finding.unsettled = pairs.unsettled(state.below)
    if finding.finished:
        finding.bound = state.below
        if finding.best is not None:
            floor = floor_over_all(datapath, bound, finding.best.cost)
            finding.every_parallelism = floor >= finding.best.cost
    return finding


def _settle(state: Search) -> bool:
    """Takes pair after pair until none is left that could win; False if the time runs out."""
    while (ahead := state.pairs.next(state.below)) is not None:
        pair, floor = ahead
        state.finding.bound = floor
        if state.time_is_up:
            return False
        if not state.pairs.tighten(pair.rate) and not _solve(state, pair):
            return False
    return True


# ---- one pair --------------------------------------------------------------------------------


@dataclass(frozen=True)
class _Task:
    """One pair with what is known of it: its unfolded graph, compact program, and floors.

    Registers None leaves registers out of the question.
    """

    block: Block
    solved: Compact
    units: Mapping[str, int]
    registers: int | None
    pins: tuple[Copy, ...]
    cuts: list[Cut] = field(default_factory=list)
    seen: dict[int | None, dict[Copy, Window]] = field(default_factory=dict)
    posed: list[Question] = field(default_factory=list)
    models: list[Model] = field(default_factory=list)

    @property
    def floor(self) -> int:
        """No schedule of this pair costs less."""
        return self.block.datapath.cost(self.units, self.registers or 0)

    def registers_most(self, most: int | None) -> int | None:
        """Registers that a plan of cost `most` can have; None where nothing limits them."""
        datapath = self.block.datapath
        caps = [] if datapath.registers_most is None else [datapath.registers_most]
        if most is not None and datapath.register_area:
            caps.append((most - datapath.cost(self.units, 0)) // datapath.register_area)
        return min(caps, default=None)

    def windows(self, most: int | None) -> dict[Copy, Window]:
        """The tightest windows that no plan of at most this cost can leave; the last are kept."""
        if most not in self.seen:
            self.seen.clear()
            self.seen[most] = self._windows(most)
        return self.seen[most]

    def _windows(self, most: int | None) -> dict[Copy, Window]:
        registers, cycles = self.registers_most(most), self.block.pair.cycles
        spare = None if registers is None else registers * cycles - self.solved.register_cycles
        longest = longest_ever(self.block) if registers is None else registers * cycles
        found = [
            windows(self.block, self.solved, pin, longest=longest, spare=spare) for pin in self.pins
        ]
        return min(found, key=lambda each: size(each, self.block))

    def model(self, most: int | None, found: Mapping[Copy, Window]) -> Model:
        """The program for a question; the last one is kept, for it is mostly asked twice."""
        question = Question(self.units, self.registers, most, found, tuple(self.cuts))
        if question not in self.posed:
            self.posed[:] = [question]
            self.models[:] = [formulate(self.block, question)]
        return self.models[0]


def _solve(state: Search, pair: Pair) -> bool:
    """Solves a pair or rules it out; False where the time ran out before."""
    state.tell(pair)
    block = block_of(state.datapath, pair)
    solved = compact(block)
    if solved is not None:
        units = {name: kind.floor(pair) for name, kind in state.datapath.kinds.items()}
        registers = -(-solved.register_cycles // pair.cycles)
        task = _Task(block, solved, units, registers, _pins(block))
        if _within_caps(task) and not _exhaust(state, task):
            return False
    state.pairs.close(pair)
    return True


def _pins(block: Block) -> tuple[Copy, ...]:
    """Starts worth setting to 0: that of the inputs, and a central one of the largest loops."""
    datapath = block.datapath
    first = datapath.inputs[0] if datapath.inputs else next(iter(datapath.latency))
    middle = central(datapath, block.pair)
    return tuple(Copy(name, 0) for name in (first, middle) if name is not None)


def _within_caps(task: _Task) -> bool:
    datapath = task.block.datapath
    registers, area = datapath.registers_most, datapath.area_most
    return (registers is None or (task.registers or 0) <= registers) and (
        area is None or task.floor <= area
    )


def _exhaust(state: Search, task: _Task) -> bool:
    """Looks for ever cheaper plans of a pair until both manners claim that there is none.

    Returns False where the time ran out before.
    """
    if state.below is None and not _find_some(state, task):
        state.finding.by_solver[task.block.pair] = None
        return True
    claimed: set[Manner] = set()
    while state.below is None or task.floor < state.below:
        manner = next((each for each in MANNERS if each not in claimed), None)
        if manner is None:
            state.finding.by_solver[task.block.pair] = state.below
            break
        before = state.below
        most = None if before is None else before - 1
        if _ask(state, task, most, task.windows(most), manner=manner) is Stop.LIMIT:
            return False
        # a better plan makes what was claimed of the one before it worthless
        claimed = {manner} if state.below != before else {*claimed, manner}
    return True


def _find_some(state: Search, task: _Task) -> bool:
    """A first plan, quickly; False where both manners claim that no units suffice.

    Close to the compact starts, at the floor or at any cost. Where the caps leave nothing there,
    the registers are left out to see whether the units suffice at all, which is far easier.
    """
    block, pin, floor = task.block, task.pins[0], task.floor
    for width in (1, 2):
        _ask(state, task, floor, near(block, task.solved, pin, width), nodes=_NEAR_NODES)
        if state.below == floor:
            return True
    width = max(2, block.pair.cycles // 4)
    _ask(state, task, None, near(block, task.solved, pin, width), nodes=_NEAR_NODES)
    if state.below is not None or state.datapath.registers_most is not None:
        return True
    easy = replace(task, registers=None, posed=[], models=[])
    found = easy.windows(None)
    return any(
        _ask(state, easy, None, found, manner=manner) is not Stop.INFEASIBLE for manner in MANNERS
    )


def _ask(
    state: Search,
    task: _Task,
    most: int | None,
    found: Mapping[Copy, Window],
    *,
    manner: Manner = MANNERS[0],
    nodes: int | None = None,
) -> Stop:
    """Asks the solver for the cheapest plan within windows and keeps it if it is the best yet."""
    if any(first > last for first, last in found.values()):
        return Stop.INFEASIBLE
    while not state.time_is_up:
        model = task.model(most, found)
        outcome = solver.minimise(
            model.program,
            seconds=state.seconds_left(),
            nodes=nodes,
            manner=manner,
            watch=lambda _: state.tell(task.block.pair),
        )
        if outcome.point is None:
            return outcome.stop
        schedule = _schedule(task, model, outcome.point)
        if schedule is not None:
            state.keep(schedule)
            return outcome.stop
    return Stop.LIMIT


def _schedule(task: _Task, model: Model, point: Sequence[int]) -> Schedule | None:
    """Reads a point and binds it; where binding fails, notes the cut that says so.

    Units and registers are counted anew from the starts: a run that stopped early may have left
    more of them in its point than it needs.
    """
    datapath, pair = task.block.datapath, task.block.pair
    starts = model.starts(point)
    units: dict[str, int] = {}
    instances: dict[Copy, int] = {}
    for name, kind in datapath.kinds.items():
        mine = {c: starts[c] for c in starts if datapath.unit[c.name] == name}
        most = point[model.units[name]]
        bound = _bind(mine, kind.busy, pair.cycles, task.units[name], most)
        if bound is None:
            slots = tuple((copy, start % pair.cycles) for copy, start in mine.items())
            task.cuts.append(Cut(name, slots, most))
            return None
        units[name] = max(bound.values()) + 1
        instances |= bound
    held = lifetimes(starts, datapath.latency, task.block.edges, pair.cycles)
    registers = most_alive(held, pair.cycles)
    return Schedule(pair, starts, instances, units, registers, datapath.cost(units, registers))


def _bind(
    starts: Mapping[Copy, int], busy: int, cycles: int, fewest: int, most: int
) -> dict[Copy, int] | None:
    """A binding to as few instances as possible, at least `fewest`; None beyond `most`."""
    tries = (bind_instances(starts, busy, cycles, count) for count in range(fewest, most + 1))
    return next((bound for bound in tries if bound is not None), None)
