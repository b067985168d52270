"""Plans, limits and audits as a person reads them.

Everything here returns things that rich can print and that fit themselves into whatever width they
are given; nothing prints, and nothing checks whether a plan stands. The answer comes first, then
tables, then what the proof rests on. Colour carries no meaning.
"""

from __future__ import annotations

from collections import defaultdict
from collections.abc import Iterable, Iterator, Mapping, Sequence
from dataclasses import dataclass
from fractions import Fraction
from itertools import groupby
from typing import TYPE_CHECKING

from rich.box import SIMPLE_HEAD
from rich.cells import cell_len
from rich.console import Group
from rich.table import Table
from rich.text import Text

from scheduler.plan import Lifetime, Plan, PlannedOperation, Proof, Status
from scheduler.quantities import format_frequency, format_number, format_time

if TYPE_CHECKING:
    from rich.console import Console, ConsoleOptions, JustifyMethod, RenderableType, RenderResult

    from scheduler.audit import AuditReport
    from scheduler.floors import BlockLimits
    from scheduler.limits import Limits

CAUTION = (  # a line each at 80 columns
    "An estimate before synthesis; the technology flow signs off timing, area, power.\n"
    "If failure can hurt, functional-safety standards and licensed practice decide."
)
IDLE, STILL_BUSY = "-", "|"
_GAP = 2  # between columns
_MOST_PAIRS = 12  # listed by their J and N


# ---- a plan ----------------------------------------------------------------------------------


def plan_report(plan: Plan, report: AuditReport) -> RenderableType:
    """The whole answer.

    Args:
        plan: of any status.
        report: the checks that it has passed.
    """
    parts = [headline(plan), _facts(_around(plan))]
    if plan.has_schedule:
        parts += [_units(plan), _schedule(plan), _operations(plan), _ports(plan)]
        parts += [_registers(plan), _lifetimes(plan)]
    return _spaced([*parts, _facts(_grounds(plan, report)), Text(CAUTION, "italic")])


def headline(plan: Plan) -> Text:
    """The answer in a sentence: what to build, at which clock, and how well it is proven."""
    text = _plain(f"{plan.title}: ", style="bold")
    if not plan.has_schedule:
        return text.append_text(_plain(f"{plan.status}. {_sentence(plan.reason)}"))
    area = _number(plan.value or 0.0)
    return text.append_text(_plain(f"{_hardware(plan)} (area {area}) {_pace(plan)}. {_rank(plan)}"))


def _hardware(plan: Plan) -> str:
    units = [_several(count, name) for name, count in plan.units.items()]
    return ", ".join([*units, _several(plan.registers or 0, "register")])


def _pace(plan: Plan) -> str:
    block = f"J = {plan.parallelism}, N = {plan.cycles}"
    if plan.clock_period_ns is None:
        return f"with {block}"
    hertz = 10**9 / Fraction(plan.clock_period_ns)
    return f"at {format_frequency(hertz)}, {block}"


def _rank(plan: Plan) -> str:
    """How the plan stands among all others."""
    if plan.status is Status.PROVEN:
        scope = "for every J" if plan.proof.every_parallelism else f"for {_copies(plan)}"
        return f"Proven: nothing smaller meets the rate, {scope}."
    value, bound = plan.value or 0.0, plan.bound or 0.0
    gap = _gap(Fraction(value), Fraction(bound))
    return f"Open: nothing below {_number(bound)} exists, a gap of {gap}."


def _gap(value: Fraction, bound: Fraction) -> str:
    """The share of a plan's area that is not proven to be needed."""
    gap = float((value - bound) / value) if value else 0.0
    return "under 0.1%" if 0 < gap < 0.001 else f"{gap:.1%}"


def _around(plan: Plan) -> Iterator[tuple[str, Sequence[str]]]:
    """What keeps the hardware from being smaller, what was asked, and how long an answer takes."""
    yield "Binding", plan.proof.binding
    yield "Asked", [_asked(plan)]
    if plan.latency is not None:
        time = ""
        if plan.clock_period_ns is not None:
            seconds = plan.latency * Fraction(plan.clock_period_ns) / 10**9
            time = f" ({format_time(seconds)})" if seconds > 0 else ""
        takes = _several(plan.latency, "cycle")
        yield "Latency", [f"{takes}{time} from a block's first input to its last output"]


def _asked(plan: Plan) -> str:
    needs, caps = plan.design["requirement"], dict(plan.design["caps"])
    if "cycles_per_sample" in needs:
        rate = f"{needs['cycles_per_sample']} cycles per sample"
    else:
        rate = f"{needs['sample_rate']} samples, clock up to {needs['clock']}"
    del caps["parallelism"]
    limits = [f"{name} up to {value}" for name, value in caps.items()]
    asked = ", ".join([rate, *limits, _copies(plan)])
    return f"{asked}; {plan.design['technology']['title']}"


def _copies(plan: Plan) -> str:
    most = plan.design["caps"]["parallelism"]
    return "J = 1" if most == 1 else f"J up to {most}"


def _units(plan: Plan) -> RenderableType:
    heads = ("unit", "instances", "operations a block", "cycles taken", "use", "area")
    technology = plan.design["technology"]
    rows = []
    for name, count in plan.units.items():
        mine = [op for op in plan.operations if op.unit == name]
        taken, there = sum(op.busy for op in mine), count * (plan.cycles or 1)
        cells = [name, str(count), str(len(mine)), f"{taken} of {there}"]
        use = f"{taken / there:.0%}" if there else IDLE
        rows.append([*cells, use, _area(count, technology["unit"][name]["area"])])
    count = plan.registers or 0
    held = sum(len(life.registers) for life in plan.lifetimes)
    there = count * (plan.cycles or 1)
    cells = ["register", str(count), IDLE, f"{held} of {there}"]
    use = f"{held / there:.0%}" if there else IDLE
    rows.append([*cells, use, _area(count, technology["register"]["area"])])
    return _Listing("Hardware", heads, rows, left=("unit",))


def _area(count: int, each: float | str) -> str:
    return format_number(count * Fraction(str(each)))


def _schedule(plan: Plan) -> RenderableType:
    """A row a cycle of the block, a column a unit instance."""
    cycles = plan.cycles or 1
    columns = {
        f"{name} {i}": [IDLE] * cycles for name, count in plan.units.items() for i in range(count)
    }
    placed = [(columns[f"{op.unit} {op.instance}"], op) for op in plan.operations if op.unit]
    for column, op in placed:
        for later in range(1, op.busy):
            column[(op.slot + later) % cycles] = STILL_BUSY
        column[op.slot] = _label(plan, op)
    notes = ["(i): copy i"] if (plan.parallelism or 1) > 1 else []
    if any(op.stage for _, op in placed):
        notes.append("r1: for the block before, and so on")
    notes += [f"{STILL_BUSY} still busy"] if any(op.busy > 1 for _, op in placed) else []
    caption = "; ".join([*notes, f"{IDLE} idle"])
    return _Grid("Schedule by cycle", "cycle", _numbers(cycles), columns, caption)


def _label(plan: Plan, op: PlannedOperation) -> str:
    """An operation in a cell: its name, its copy where there are several, its stage if not 0."""
    return _staged(_name(plan, op), op.stage)


def _name(plan: Plan, thing: PlannedOperation | Lifetime) -> str:
    """A copy of an operation; the number is left out where there is one copy only."""
    copy = thing.key if isinstance(thing, PlannedOperation) else thing.value
    return str(copy) if (plan.parallelism or 1) > 1 else copy.name


def _staged(name: str, stage: int) -> str:
    return f"{name} r{stage}" if stage else name


_STARTS = "s = N r + t: start cycle s, retiming value r (stage), folding order t (slot)"


def _operations(plan: Plan) -> RenderableType:
    """Retiming value and folding order of every operation."""
    rows = [
        [_name(plan, op), f"{op.unit} {op.instance}", *map(str, (op.start, op.stage, op.slot))]
        for op in plan.operations
        if op.unit is not None
    ]
    heads = ("operation", "on", "s", "r", "t")
    return _Listing("Operations", heads, rows, left=("operation", "on"), caption=_STARTS)


def _ports(plan: Plan) -> RenderableType:
    """When samples come and go."""
    fed = {edge.target for edge in plan.edges}
    rows = [
        [
            _name(plan, op),
            "out" if op.key in fed else "in",
            *map(str, (op.start, op.stage, op.slot)),
        ]
        for op in plan.operations
        if op.unit is None
    ]
    return _Listing("Ports", ("port", "way", "s", "r", "t"), rows, left=("port", "way"))


def _registers(plan: Plan) -> RenderableType:
    """What each register holds in each cycle of the block."""
    cycles, count = plan.cycles or 1, plan.registers or 0
    if not count:
        return Text("No value waits in a register.")
    held = [[IDLE] * count for _ in range(cycles)]
    for life in plan.lifetimes:
        for cycle, register in enumerate(life.registers, life.first):
            ago, slot = divmod(cycle, cycles)
            held[slot][register] = _staged(_name(plan, life), ago)
    caption = f"r1: of the block before, and so on; {IDLE} empty"
    names = [f"R{register}" for register in range(count)]
    if count > cycles:
        columns = {str(c): held[c] for c in range(cycles)}
        return _Grid("Registers by cycle", "register", names, columns, caption)
    columns = {name: [row[i] for row in held] for i, name in enumerate(names)}
    return _Grid("Registers by cycle", "cycle", _numbers(cycles), columns, caption)


def _lifetimes(plan: Plan) -> RenderableType:
    """How long each value waits, and where."""
    rows = [
        [
            _name(plan, life),
            str(life.first),
            str(life.first + len(life.registers) - 1),
            _route(life.registers),
        ]
        for life in plan.lifetimes
    ]
    heads = ("value", "from", "to", "held in")
    caption = "From and to: cycles, counted as s is; R0 x3: three cycles in R0"
    return _Listing("Register lifetimes", heads, rows, left=("value", "held in"), caption=caption)


def _route(registers: Sequence[int], most: int = 3) -> str:
    """The registers that a value moves through, repeats counted, long routes cut short."""
    legs = [(register, len(list(stay))) for register, stay in groupby(registers)]
    words = [f"R{register}" + (f" x{stay}" if stay > 1 else "") for register, stay in legs]
    more = [f"and {len(words) - most} more"] if len(words) > most else []
    return ", ".join([*words[:most], *more])


def _grounds(plan: Plan, report: AuditReport) -> Iterator[tuple[str, Sequence[str]]]:
    """What the answer rests on."""
    yield "Proof", list(_proof(plan.proof)) or ["counts and loops alone, no solver"]
    names = ", ".join(check.name for check in report.checks)
    yield "Audit", [f"{_stands(report)}, without a solver: {names}"]


def _proof(proof: Proof) -> Iterator[str]:
    """How many pairs (J, N) are settled by what."""
    of_all = f"of {_several(proof.pairs, 'pair')} (J, N)"
    if proof.by_floor:
        floors = "exact floors: units counted, registers by the compact bound"
        yield f"{proof.by_floor} {of_all} by {floors}"
    runs: dict[int, list[str]] = defaultdict(list)
    for verdict in proof.by_solver:
        runs[verdict.runs].append(f"({verdict.parallelism}, {verdict.cycles})")
    for count, pairs in runs.items():
        each = f"{_several(count, 'solver run')} each, unlike in preprocessing and seed"
        yield f"{len(pairs)} {of_all} by {each}: {_first(pairs, _MOST_PAIRS)}"
    rest = proof.pairs - proof.by_floor - len(proof.by_solver)
    if rest:
        yield f"{rest} {of_all} not settled"


def _stands(report: AuditReport) -> str:
    count = len(report.checks)
    return "1 check stands" if count == 1 else f"{count} checks stand"


# ---- an audit --------------------------------------------------------------------------------


def audit_report(plan: Plan, report: AuditReport) -> RenderableType:
    """The checks that a saved plan has passed."""
    rows = [[check.name, check.fact] for check in report.checks]
    checks = _Listing("Checks", ("check", "found"), rows, left=("check", "found"))
    words = f"The plan stands, as far as can be told without a solver: {_stands(report)}."
    return _spaced([Text(words), headline(plan), checks])


# ---- limits ----------------------------------------------------------------------------------


def limits_report(title: str, limits: Limits) -> RenderableType:
    """What can be said of a design without a solver."""
    return _spaced([_verdict(title, limits), _facts(_bounds(limits)), _floors(limits)])


def _verdict(title: str, limits: Limits) -> Text:
    text = _plain(f"{title}: ", style="bold")
    if limits.forbidden is not None:
        return text.append_text(_plain(f"impossible. {_sentence(limits.forbidden)}"))
    asked, bound = map(format_number, (limits.cycles_per_sample, limits.iteration_bound))
    loops = f"its loops need {bound}" if limits.iteration_bound else "it has no loop"
    return text.append(
        f"nothing here forbids the rate, which leaves {asked} cycles per sample; {loops}."
    )


def _bounds(limits: Limits) -> Iterator[tuple[str, Sequence[str]]]:
    """Bounds that loops and paths set."""
    yield "Iteration bound", [f"{format_number(limits.iteration_bound)} cycles per sample"]
    yield (
        "Critical loops",
        [
            f"{loop}: {_several(loop.latency, 'cycle')}, {_several(loop.delays, 'delay')}"
            for loop in limits.loops
        ],
    )
    least = format_number(limits.least_cycles_per_sample)
    yield "Fewest cycles", [f"{least} per sample, for J up to {len(limits.blocks)}"]
    path = f"{_several(limits.critical_path, 'cycle')} as written"
    if limits.least_period is not None:
        path += f", {limits.least_period} at the least after retiming"
    yield "Longest path", [path]


def _floors(limits: Limits) -> RenderableType:
    names = list(limits.units_over_all)
    rows = [_block_cells(block, names) for block in limits.blocks]
    rows.append(["", *(str(limits.units_over_all[name]) for name in names), ""])
    heads = ["N", *names, "area from"]
    columns = {head: [row[i] for row in rows] for i, head in enumerate(heads)}
    index = [*(str(block.parallelism) for block in limits.blocks), "any"]
    caption = "Counted at the largest N; registers, and when operations are due, come on top"
    return _Grid("Fewest units", "J", index, columns, caption, justify="right")


def _block_cells(block: BlockLimits, names: Sequence[str]) -> list[str]:
    if not block.cycles:
        return ["none", *(IDLE for _ in names), IDLE]
    first, last = block.cycles[0], block.cycles[-1]
    span = str(first) if first == last else f"{first} to {last}"
    area = IDLE if block.area is None else format_number(block.area)
    return [span, *(str(block.units[name]) for name in names), area]


# ---- a search under way ----------------------------------------------------------------------


def progress_line(
    seconds: float, pair: tuple[int, int], best: Fraction | None, bound: Fraction
) -> str:
    """One line on a search under way."""
    at = f"{seconds:.0f} s: J = {pair[0]}, N = {pair[1]}"
    if best is None:
        return f"{at}, no plan yet, none below {format_number(bound)}"
    numbers = f"best {format_number(best)}, none below {format_number(bound)}"
    return f"{at}, {numbers}, gap {_gap(best, bound)}"


# ---- words -----------------------------------------------------------------------------------


def _sentence(words: str) -> str:
    return f"{words[:1].upper()}{words[1:]}."


def _several(count: int, noun: str) -> str:
    return f"{count} {noun}" if count == 1 else f"{count} {noun}s"


def _first(words: Sequence[str], most: int) -> str:
    more = [f"and {len(words) - most} more"] if len(words) > most else []
    return ", ".join([*words[:most], *more])


def _number(value: float) -> str:
    return format_number(Fraction(value).limit_denominator(1000))


def _numbers(count: int) -> list[str]:
    return list(map(str, range(count)))


def _plain(text: str, style: str = "") -> Text:
    """Text without markup, and without what a terminal would take for a command."""
    return Text("".join(c if c.isprintable() else "\N{REPLACEMENT CHARACTER}" for c in text), style)


# ---- layout ----------------------------------------------------------------------------------


def _spaced(parts: Sequence[RenderableType]) -> Group:
    """Parts one under the other, an empty line between them; empty listings are left out."""
    shown = [part for part in parts if not isinstance(part, _Listing | _Grid) or part]
    return Group(*[each for part in shown for each in (Text(), part)][1:])


def _facts(facts: Iterable[tuple[str, Sequence[str]]]) -> RenderableType:
    """Labels with their lines beside them, long lines going on under themselves."""
    table = Table.grid(padding=(0, _GAP, 0, 0))
    table.add_column(no_wrap=True)
    table.add_column(overflow="fold")
    for label, lines in facts:
        for number, line in enumerate(lines):
            table.add_row(_plain("" if number else label), _plain(line))
    return table


def _table() -> Table:
    padding = (0, _GAP - 1, 0, 0)
    return Table(box=SIMPLE_HEAD, padding=padding, pad_edge=False, show_edge=False)


def _title(words: str) -> Text:
    return Text(words, style="bold")


def _width(cells: Iterable[str]) -> int:
    """Columns that the widest cell takes, and the gap after it."""
    return max(map(cell_len, cells), default=0) + _GAP


@dataclass(frozen=True)
class _Grid:
    """A table as wide as it has to be, shown in blocks that fit, each with the index in front."""

    title: str
    head: str
    index: Sequence[str]
    columns: Mapping[str, Sequence[str]]
    caption: str
    justify: JustifyMethod = "left"

    def __bool__(self) -> bool:
        return bool(self.columns)

    def __rich_console__(self, console: Console, options: ConsoleOptions) -> RenderResult:
        room = options.max_width + _GAP - _width([self.head, *self.index])
        blocks = list(self._fitting(room))
        for number, names in enumerate(blocks, 1):
            part = f" ({number} of {len(blocks)})" if len(blocks) > 1 else ""
            yield _title(self.title + part)
            yield self._block(names)
            yield Text(self.caption if number == len(blocks) else "")

    def _fitting(self, room: int) -> Iterator[list[str]]:
        """Names of columns, as many at a time as fit side by side."""
        names: list[str] = []
        used = 0
        for name, cells in self.columns.items():
            wide = _width([name, *cells])
            if names and used + wide > room:
                yield names
                names, used = [], 0
            names.append(name)
            used += wide
        yield names

    def _block(self, names: Sequence[str]) -> Table:
        table = _table()
        table.add_column(self.head, justify="right", no_wrap=True)
        for name in names:
            table.add_column(_plain(name), justify=self.justify, overflow="fold")
        for row, label in enumerate(self.index):
            table.add_row(label, *(_plain(self.columns[name][row]) for name in names))
        return table


@dataclass(frozen=True)
class _Listing:
    """Rows of the same kind, set side by side in as many columns of rows as fit."""

    title: str
    heads: Sequence[str]
    rows: Sequence[Sequence[str]]
    left: Sequence[str]
    caption: str = ""

    def __bool__(self) -> bool:
        return bool(self.rows)

    def __rich_console__(self, console: Console, options: ConsoleOptions) -> RenderResult:
        wide = sum(_width(cells) for cells in zip(self.heads, *self.rows, strict=True))
        fitting = (options.max_width + 2 * _GAP) // (wide + _GAP)
        beside = max(1, min(fitting, -(-len(self.rows) // 8)))
        height = -(-len(self.rows) // beside)
        yield _title(self.title)
        yield self._table(beside, height)
        if self.caption:
            yield Text(self.caption)

    def _table(self, beside: int, height: int) -> Table:
        table = _table()
        for number in range(beside):
            if number:
                table.add_column()
            for head in self.heads:
                justify: JustifyMethod = "left" if head in self.left else "right"
                table.add_column(head, justify=justify, overflow="fold")
        for line in range(height):
            groups = [list(map(_plain, row)) for row in self.rows[line::height]]
            table.add_row(*[cell for row in groups for cell in (Text(), *row)][1:])
        return table
