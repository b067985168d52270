"""Plans, limits and audits as a person reads them.

Everything here returns things that rich can print, at the width it is given; nothing prints. The
answer comes first, then tables, then what the proof rests on. Colour carries no meaning.
"""

from __future__ import annotations

from collections import defaultdict
from collections.abc import Iterable, Iterator, Sequence
from fractions import Fraction
from itertools import groupby

from rich.box import SIMPLE_HEAD
from rich.console import Group, RenderableType
from rich.table import Table
from rich.text import Text

from scheduler.audit import AuditReport
from scheduler.floors import BlockLimits
from scheduler.limits import Limits
from scheduler.plan import Lifetime, Plan, PlannedOperation, Status
from scheduler.quantities import format_frequency, format_number

CAUTION = (
    "An estimate before synthesis: timing, area and power are signed off with the technology's own "
    "flow.\nWhere a failure can hurt someone, the functional-safety standard of the field and "
    "licensed practice decide."
)
IDLE, STILL_BUSY = "-", "|"


# ---- a plan ----------------------------------------------------------------------------------


def plan_report(plan: Plan, report: AuditReport, width: int = 80) -> RenderableType:
    """The whole answer.

    Args:
        plan: of any status.
        report: the checks that it has passed.
        width: columns to fit into.
    """
    parts: list[RenderableType] = [headline(plan)]
    if plan.has_schedule:
        parts += [_units(plan), *_schedule(plan, width), *_operations(plan, width)]
        parts += [*_registers(plan, width), *_lifetimes(plan, width)]
    parts += [_proof(plan), _audited(report), Text(CAUTION, style="italic")]
    return Group(*_spaced(parts))


def _spaced(parts: Iterable[RenderableType]) -> Iterator[RenderableType]:
    for number, part in enumerate(parts):
        if number:
            yield Text()
        yield part


def headline(plan: Plan) -> Text:
    """The answer in a sentence: what to build, at which clock, and how well it is proven."""
    text = Text(f"{plan.title}: ", style="bold")
    if not plan.has_schedule:
        return text.append(f"{plan.status}. {_sentence(plan.reason)}")
    bound = plan.bound or 0.0
    text.append(f"{_hardware(plan)}, area {plan.value:g}, {_pace(plan)}. ")
    if plan.status is Status.PROVEN:
        scope = "for every J" if plan.proof.every_parallelism else "up to the cap on J"
        return text.append(f"Proven: nothing smaller meets the rate, {scope}.")
    gap = ((plan.value or 0.0) - bound) / (plan.value or 1.0)
    return text.append(f"Open: nothing below {bound:g} exists, a gap of {gap:.1%}.")


def _sentence(words: str) -> str:
    return words[:1].upper() + words[1:] + "."


def _hardware(plan: Plan) -> str:
    units = [_several(count, name) for name, count in plan.units.items()]
    return ", ".join([*units, _several(plan.registers or 0, "register")])


def _several(count: int, noun: str) -> str:
    return f"{count} {noun}" if count == 1 else f"{count} {noun}s"


def _pace(plan: Plan) -> str:
    block = f"J = {plan.parallelism}, N = {plan.cycles}"
    if plan.clock_period_ns is None:
        return block
    hertz = Fraction(10**9) / Fraction(plan.clock_period_ns)
    return f"clock {format_frequency(hertz.limit_denominator(10**6))}, {block}"


def _table(title: str) -> Table:
    return Table(
        title=Text(title, style="bold"),
        title_justify="left",
        box=SIMPLE_HEAD,
        pad_edge=False,
        show_edge=False,
    )


def _units(plan: Plan) -> RenderableType:
    table = _table("Units")
    for name in ("unit", "instances", "operations a block", "cycles taken", "use"):
        table.add_column(name, justify="left" if name == "unit" else "right", overflow="fold")
    for name, count in plan.units.items():
        mine = [op for op in plan.operations if op.unit == name]
        taken, there = sum(op.busy for op in mine), count * (plan.cycles or 1)
        cells = [name, str(count), str(len(mine)), f"{taken} of {there}", f"{taken / there:.0%}"]
        table.add_row(*map(Text, cells))
    return table


def _label(plan: Plan, op: PlannedOperation) -> str:
    """An operation in a cell: its name, its copy where there are several, its stage if not 0."""
    copy = f"({op.copy})" if (plan.parallelism or 1) > 1 else ""
    return f"{op.name}{copy}" + (f" r{op.stage}" if op.stage else "")


def _schedule(plan: Plan, width: int) -> Iterator[RenderableType]:
    """A row a cycle of the block, a column a unit instance, the ports last."""
    cycles = plan.cycles or 1
    columns: dict[str, list[str]] = {
        f"{name} {i}": [IDLE] * cycles for name, count in plan.units.items() for i in range(count)
    }
    ports: list[list[str]] = [[] for _ in range(cycles)]
    for op in plan.operations:
        if op.unit is None:
            ports[op.slot].append(_label(plan, op))
            continue
        column = columns[f"{op.unit} {op.instance}"]
        for later in range(1, op.busy):
            column[(op.slot + later) % cycles] = STILL_BUSY
        column[op.slot] = _label(plan, op)
    columns["ports"] = [", ".join(names) for names in ports]
    copies = ", (i) its copy" if (plan.parallelism or 1) > 1 else ""
    caption = f"Starts by cycle{copies}; r its stage where not 0; {IDLE} idle, {STILL_BUSY} busy."
    yield from _split("Schedule of one block", "cycle", columns, width, caption)


def _split(
    title: str, index: str, columns: dict[str, list[str]], width: int, caption: str = ""
) -> Iterator[RenderableType]:
    """A table in as many blocks as it takes to fit the width, each with the index in front."""
    rows = len(next(iter(columns.values()), []))
    blocks = list(_fitting(columns, width - max(len(index), len(str(rows))) - 2))
    for number, names in enumerate(blocks):
        part = f" ({number + 1} of {len(blocks)})" if len(blocks) > 1 else ""
        table = _table(title + part)
        table.add_column(index, justify="right", no_wrap=True)
        for name in names:
            table.add_column(Text(name), overflow="fold")
        for row in range(rows):
            table.add_row(str(row), *(Text(columns[name][row]) for name in names))
        yield table
    if caption:
        yield Text(caption)


def _fitting(columns: dict[str, list[str]], width: int) -> Iterator[list[str]]:
    """Names of columns, as many at a time as fit side by side."""
    names: list[str] = []
    used = 0
    for name, cells in columns.items():
        wide = max(map(len, [name, *cells])) + 2
        if names and used + wide > width:
            yield names
            names, used = [], 0
        names.append(name)
        used += wide
    if names:
        yield names


def _operations(plan: Plan, width: int) -> Iterator[RenderableType]:
    """Retiming value and folding order of every operation."""
    several = (plan.parallelism or 1) > 1
    heads = ["operation", *(["copy"] if several else []), "on", "start s", "slot t", "stage r"]
    rows = [
        [
            op.name,
            *([str(op.copy)] if several else []),
            "port" if op.unit is None else f"{op.unit} {op.instance}",
            *map(str, (op.start, op.slot, op.stage)),
        ]
        for op in plan.operations
    ]
    yield from _listed(
        "Operations",
        heads,
        rows,
        width,
        "s = N r + t: r is the retiming value, t the folding order.",
    )


def _listed(
    title: str, heads: Sequence[str], rows: Sequence[Sequence[str]], width: int, caption: str
) -> Iterator[RenderableType]:
    """A list of rows, side by side in as many columns of rows as fit."""
    wide = sum(max(len(row[i]) for row in [heads, *rows]) + 2 for i in range(len(heads)))
    beside = max(1, min((width + 2) // (wide + 2), -(-len(rows) // 8)))
    height = -(-len(rows) // beside)
    table = _table(title)
    for _ in range(beside):
        for number, head in enumerate(heads):
            table.add_column(head, justify="left" if number == 0 else "right", overflow="fold")
    for line in range(height):
        cells = [cell for row in rows[line::height] for cell in row]
        table.add_row(*map(Text, cells))
    yield table
    yield Text(caption)


def _registers(plan: Plan, width: int) -> Iterator[RenderableType]:
    """What each register holds in each cycle of the block."""
    cycles, count = plan.cycles or 1, plan.registers or 0
    held = [[IDLE] * count for _ in range(cycles)]
    for life in plan.lifetimes:
        for age, register in enumerate(life.registers):
            held[(life.first + age) % cycles][register] = _value(plan, life)
    if not count:
        yield Text("No registers beside those of the units.")
    elif count > cycles:
        rows = {f"cycle {c}": held[c] for c in range(cycles)}
        yield from _split("Registers", "register", rows, width)
    else:
        columns = {f"R{r}": [held[c][r] for c in range(cycles)] for r in range(count)}
        yield from _split("Registers", "cycle", columns, width)


def _value(plan: Plan, life: Lifetime) -> str:
    return str(life.value) if (plan.parallelism or 1) > 1 else life.value.name


def _lifetimes(plan: Plan, width: int) -> Iterator[RenderableType]:
    heads = ["value", "from", "to", "in registers"]
    rows = [
        [
            _value(plan, life),
            str(life.first),
            str(life.first + len(life.registers) - 1),
            _route(life.registers),
        ]
        for life in plan.lifetimes
    ]
    if rows:
        caption = "Cycles counted from the first block's cycle 0; R0 x3 is three cycles in R0."
        yield from _listed("Register lifetimes", heads, rows, width, caption)


def _route(registers: Sequence[int], most: int = 3) -> str:
    """The registers that a value moves through, repeats counted, long routes cut short."""
    legs = [(register, len(list(stay))) for register, stay in groupby(registers)]
    words = [f"R{register}" + (f" x{stay}" if stay > 1 else "") for register, stay in legs]
    return ", ".join(words[:most]) + (f", {len(words) - most} more" if len(words) > most else "")


def _proof(plan: Plan) -> RenderableType:
    proof = plan.proof
    lines = [f"- {line}" for line in proof.binding]
    if proof.binding:
        lines.insert(0, "What binds")
    if proof.pairs:
        lines.append("What the bound rests on")
        lines.append(
            f"- {proof.by_floor} of {_several(proof.pairs, 'pair')} (J, N) by exact floors: units "
            "counted, registers by the compact bound"
        )
        runs: dict[int, list[str]] = defaultdict(list)
        for verdict in proof.by_solver:
            runs[verdict.runs].append(f"({verdict.parallelism}, {verdict.cycles})")
        lines += [
            f"- {_several(len(pairs), 'pair')} by {count} solver runs that share neither "
            f"preprocessing nor seed: {', '.join(pairs)}"
            for count, pairs in runs.items()
        ]
        rest = proof.pairs - proof.by_floor - len(proof.by_solver)
        lines += [f"- {_several(rest, 'pair')} not settled"] if rest else []
    return Text("\n".join(lines) if lines else "The bound needs no solver.")


def _audited(report: AuditReport) -> RenderableType:
    names = ", ".join(check.name for check in report.checks)
    return Text(f"Audited without a solver, {len(report.checks)} checks stand: {names}.")


# ---- an audit --------------------------------------------------------------------------------


def audit_report(plan: Plan, report: AuditReport) -> RenderableType:
    """The checks that a saved plan has passed."""
    table = _table("Checks")
    table.add_column("check", no_wrap=True)
    table.add_column("found", overflow="fold")
    for check in report.checks:
        table.add_row(Text(check.name), Text(check.fact))
    words = f"The plan stands: {len(report.checks)} checks passed without a solver."
    return Group(headline(plan), Text(), Text(words), Text(), table)


# ---- limits ----------------------------------------------------------------------------------


def limits_report(title: str, limits: Limits) -> RenderableType:
    """What can be said of a design without a solver."""
    return Group(*_spaced([_verdict(title, limits), _loops(limits), _floors(limits)]))


def _verdict(title: str, limits: Limits) -> Text:
    text = Text(f"{title}: ", style="bold")
    if limits.forbidden is not None:
        return text.append(f"impossible. {_sentence(limits.forbidden)}")
    asked, bound = map(format_number, (limits.cycles_per_sample, limits.iteration_bound))
    return text.append(
        f"nothing here forbids the rate. It leaves {asked} cycles per sample, loops need {bound}."
    )


def _loops(limits: Limits) -> RenderableType:
    least = format_number(limits.least_cycles_per_sample)
    lines = [
        f"Iteration bound: {format_number(limits.iteration_bound)} cycles per sample",
        *(
            f"- loop {loop}: {_several(loop.latency, 'cycle')}, {_several(loop.delays, 'delay')}"
            for loop in limits.loops
        ),
        f"Least cycles per sample up to the cap on J: {least}",
        f"Longest path as written: {_several(limits.critical_path, 'cycle')}"
        + (
            f"; {limits.least_period} at the least after retiming"
            if limits.least_period is not None
            else ""
        ),
    ]
    return Text("\n".join(lines))


def _floors(limits: Limits) -> RenderableType:
    table = _table("Fewest units, counted at the largest N")
    names = list(limits.units_over_all)
    for head in ("J", "cycles N", *names, "area at least"):
        table.add_column(Text(head), justify="right", overflow="fold")
    for block in limits.blocks:
        table.add_row(*map(Text, _block_cells(block, names)))
    over_all = [str(limits.units_over_all[name]) for name in names]
    table.add_row(*map(Text, ["any", "", *over_all, ""]))
    return table


def _block_cells(block: BlockLimits, names: Sequence[str]) -> list[str]:
    if not block.cycles:
        return [str(block.parallelism), "none", *(IDLE for _ in names), IDLE]
    first, last = block.cycles[0], block.cycles[-1]
    span = str(first) if first == last else f"{first} to {last}"
    area = IDLE if block.area is None else format_number(block.area)
    return [str(block.parallelism), span, *(str(block.units[name]) for name in names), area]


def progress_line(
    seconds: float, pair: tuple[int, int], best: Fraction | None, bound: Fraction
) -> str:
    """One line on a search under way."""
    at = f"{seconds:.0f} s: J = {pair[0]}, N = {pair[1]}"
    if best is None:
        return f"{at}, no plan yet, none below {format_number(bound)}"
    gap = float((best - bound) / best) if best else 0.0
    return f"{at}, best {format_number(best)}, none below {format_number(bound)}, gap {gap:.1%}"
