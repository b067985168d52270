"""Plans, audits and limits on paper: they fit, lose nothing, and say what is so."""

from __future__ import annotations

import io
from collections.abc import Iterator
from dataclasses import replace
from fractions import Fraction
from itertools import pairwise
from typing import Any

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from rich.console import Console

from scheduler.audit import AuditReport, Check
from scheduler.floors import BlockLimits, Loop
from scheduler.limits import Limits
from scheduler.plan import (
    Copy,
    Lifetime,
    Plan,
    PlannedEdge,
    PlannedOperation,
    Proof,
    SolverVerdict,
    Status,
)
from scheduler.report import audit_report, headline, limits_report, plan_report, progress_line

AUDITED = AuditReport((Check("rate", "4 cycles for 2 samples"), Check("caps", "all kept")))
DESIGN = {
    "requirement": {"sample_rate": "2 MHz", "clock": "5 MHz", "delivery": "serial"},
    "caps": {"multiplier": 1, "latency": "3 us", "parallelism": 2},
    "technology": {
        "title": "Hand-made",
        "unit": {"adder": {"area": 1}, "multiplier": {"area": "8.25"}},
        "register": {"area": 0.5},
    },
}


def placed(
    name: str, copy: int, on: tuple[str, int] | None, start: int, cycles: int, busy: int = 1
) -> PlannedOperation:
    unit, instance = on or (None, None)
    stage, slot = divmod(start, cycles)
    busy = busy if on else 0
    return PlannedOperation(name, copy, unit, instance, start, slot, stage, busy, busy)


TWO_COPIES = Plan(
    title="Two copies",
    status=Status.PROVEN,
    value=10.25,
    bound=10.25,
    design=DESIGN,
    parallelism=2,
    cycles=4,
    clock_period_ns=250.0,
    sample_period_ns=500.0,
    units={"adder": 1, "multiplier": 1},
    registers=2,
    latency=11,
    operations=(
        placed("x", 0, None, 0, 4),
        placed("x", 1, None, 2, 4),
        placed("m", 0, ("multiplier", 0), -1, 4, busy=2),
        placed("m", 1, ("multiplier", 0), 5, 4, busy=2),
        placed("a.1", 0, ("adder", 0), 6, 4),
        placed("a.1", 1, ("adder", 0), 9, 4),
        placed("y.out", 0, None, 9, 4),
        placed("y.out", 1, None, 11, 4),
    ),
    edges=(
        PlannedEdge(Copy("a.1", 0), Copy("y.out", 0), 0),
        PlannedEdge(Copy("a.1", 1), Copy("y.out", 1), 0),
    ),
    lifetimes=(
        Lifetime(Copy("m", 0), 2, (0, 0, 1, 1)),
        Lifetime(Copy("a.1", 0), 8, (0,)),
    ),
    proof=Proof(
        pairs=6,
        by_floor=5,
        by_solver=(SolverVerdict(2, 4, 10.25, 2),),
        binding=("4 of the 4 cycles of 1 x multiplier are taken; 0 could not hold them",),
    ),
)


def with_schedule(operations: tuple[PlannedOperation, ...], units: dict[str, int], n: int) -> Plan:
    several = {op.copy for op in operations} - {0}
    j = 2 if several else 1
    return replace(
        TWO_COPIES, operations=operations, units=units, cycles=n, parallelism=j, lifetimes=()
    )


@pytest.fixture
def large() -> Plan:
    """400 operations in 60 cycles on 40 instances, 90 registers all in use."""
    operations = tuple(
        placed(f"s{i}.3", 0, (("adder", "multiplier")[i % 2], i % 40 // 2), start, 60)
        for i in range(400)
        for start in (60 * (i % 7) + i // 40 * 6 + i % 5,)
    )
    lives = tuple(Lifetime(Copy(f"s{i}.3", 0), i + 1, (i,) * 60) for i in range(90))
    plan = with_schedule(operations, {"adder": 20, "multiplier": 20}, 60)
    return replace(plan, registers=90, lifetimes=lives)


def shown(thing: object, width: int = 80) -> str:
    file = io.StringIO()
    Console(file=file, width=width, color_system=None, legacy_windows=False).print(thing)
    return file.getvalue()


def on_one_line(thing: object) -> str:
    return " ".join(shown(thing).split())


def blocks(text: str, title: str) -> Iterator[list[str]]:
    """The lines of each table under a title, from its heads on."""
    for part in text.split("\n" + title)[1:]:
        yield part.split("\n\n")[0].splitlines()[1:]


def columns(text: str, title: str) -> dict[str, list[str]]:
    """The cells under each head of a table of left-justified columns, all its blocks together."""
    read: dict[str, list[str]] = {}
    for heads, rule, *rows in blocks(text, title):
        body = rows[: next((i for i, row in enumerate(rows) if not row.startswith(" ")), None)]
        assert set(rule) == {"\N{BOX DRAWINGS LIGHT HORIZONTAL}"}
        names = [name for name in heads.split("  ") if name.strip()]
        starts = [heads.index(f"  {name.strip()}") + 2 for name in names[1:]]
        for name, (start, end) in zip(names[1:], pairwise([*starts, len(heads)]), strict=True):
            read[name.strip()] = [row[start:end].strip() for row in body]
    return read


# ---- the answer ------------------------------------------------------------------------------


def test_the_answer_comes_first_in_words() -> None:
    assert shown(plan_report(TWO_COPIES, AUDITED)).startswith("Two copies: 1 adder, 1 multiplier")
    assert headline(TWO_COPIES).plain == (
        "Two copies: 1 adder, 1 multiplier, 2 registers (area 10.25) at 4 MHz, J = 2, N = 4. "
        "Proven: nothing smaller meets the rate, for J up to 2."
    )


def test_a_proof_for_every_parallelism_says_so() -> None:
    proof = replace(TWO_COPIES.proof, every_parallelism=True)
    assert headline(replace(TWO_COPIES, proof=proof)).plain.endswith("the rate, for every J.")


def test_abstract_time_has_no_clock() -> None:
    requirement = {"cycles_per_sample": "5/2", "delivery": "serial"}
    abstract = replace(
        TWO_COPIES, clock_period_ns=None, design={**DESIGN, "requirement": requirement}
    )
    text = on_one_line(plan_report(abstract, AUDITED))
    assert "(area 10.25) with J = 2, N = 4." in text
    assert "Asked 5/2 cycles per sample, multiplier up to 1" in text
    assert "Latency 11 cycles from a block's first input" in text


def test_what_binds_what_was_asked_and_the_latency_follow() -> None:
    text = on_one_line(plan_report(TWO_COPIES, AUDITED))
    assert "Binding 4 of the 4 cycles of 1 x multiplier are taken; 0 could not hold them" in text
    assert "Asked 2 MHz samples, clock up to 5 MHz, multiplier up to 1, latency up to 3 us" in text
    assert "Latency 11 cycles (2.75 us) from a block's first input to its last output" in text


def test_an_open_answer_is_never_called_proven_and_shows_its_gap() -> None:
    opened = replace(TWO_COPIES, status=Status.OPEN, bound=8.2)
    assert "Open: nothing below 8.2 exists, a gap of 20.0%." in headline(opened).plain
    assert "Proven" not in shown(plan_report(opened, AUDITED))


def test_a_gap_that_is_there_is_never_rounded_to_none() -> None:
    close = replace(TWO_COPIES, status=Status.OPEN, value=200_000.5, bound=200_000.0)
    assert "nothing below 200000 exists, a gap of under 0.1%" in headline(close).plain


@pytest.mark.parametrize("status", [Status.NONE, Status.IMPOSSIBLE])
def test_an_answer_without_a_plan_gives_its_reason_and_no_tables(status: Status) -> None:
    bare = Plan(
        "Nothing", status, None, None, DESIGN, reason="the loop w -> w.1 -> w takes 3 cycles"
    )
    text = on_one_line(plan_report(bare, AUDITED))
    assert text.startswith(f"Nothing: {status}. The loop w -> w.1 -> w takes 3 cycles. Asked")
    assert "Schedule" not in text
    assert "Hardware" not in text


def test_the_proof_the_audit_and_the_caution_close_the_report() -> None:
    text = shown(plan_report(TWO_COPIES, AUDITED))
    words = " ".join(text.split())
    assert "5 of 6 pairs (J, N) by exact floors" in words
    assert (
        "1 of 6 pairs (J, N) by 2 solver runs each, unlike in preprocessing and seed: (2, 4)"
        in (words)
    )
    assert "Audit 2 checks stand, without a solver: rate, caps" in words
    *_, first, last = text.splitlines()
    assert first.startswith("An estimate before synthesis; ")
    assert "functional-safety standards" in last


def test_pairs_that_are_not_settled_are_counted_and_long_lists_cut() -> None:
    verdicts = tuple(SolverVerdict(1, n, None, 2) for n in range(20))
    proof = Proof(pairs=30, by_floor=0, by_solver=verdicts)
    words = on_one_line(plan_report(replace(TWO_COPIES, proof=proof), AUDITED))
    assert "(1, 10), (1, 11), and 8 more" in words
    assert "10 of 30 pairs (J, N) not settled" in words


# ---- tables ----------------------------------------------------------------------------------


def test_use_is_cycles_taken_of_cycles_there() -> None:
    lines = shown(plan_report(TWO_COPIES, AUDITED)).splitlines()
    assert ["adder", "1", "2", "2", "of", "4", "50%", "1"] in map(str.split, lines)
    assert ["multiplier", "1", "2", "4", "of", "4", "100%", "8.25"] in map(str.split, lines)
    assert ["register", "2", "-", "5", "of", "8", "62%", "1"] in map(str.split, lines)


def test_the_schedule_names_copy_and_stage_and_goes_on_while_busy() -> None:
    text = shown(plan_report(TWO_COPIES, AUDITED))
    assert columns(text, "Schedule") == {
        "adder 0": ["-", "a.1(1) r2", "a.1(0) r1", "-"],
        "multiplier 0": ["|", "m(1) r1", "|", "m(0) r-1"],  # busy round the end of the block
    }
    assert "(i): copy i; r1: for the block before, and so on" in text
    assert "| still busy; - idle" in text


def test_a_plan_of_one_copy_does_not_number_it() -> None:
    plan = with_schedule((placed("m", 0, ("adder", 0), 3, 4),), {"adder": 1}, 4)
    text = shown(plan_report(plan, AUDITED))
    assert columns(text, "Schedule") == {"adder 0": ["-", "-", "-", "m"]}
    assert "copy" not in text


def test_retiming_value_and_folding_order_of_every_operation_are_listed() -> None:
    lines = list(map(str.split, shown(plan_report(TWO_COPIES, AUDITED)).splitlines()))
    assert ["m(0)", "multiplier", "0", "-1", "-1", "3"] in lines
    assert ["a.1(1)", "adder", "0", "9", "2", "1"] in lines


def test_ports_say_when_samples_come_and_go() -> None:
    lines = list(map(str.split, shown(plan_report(TWO_COPIES, AUDITED)).splitlines()))
    assert ["x(1)", "in", "2", "0", "2"] in lines
    assert ["y.out(1)", "out", "11", "2", "3"] in lines


def test_registers_show_what_they_hold_and_of_which_block() -> None:
    text = shown(plan_report(TWO_COPIES, AUDITED))
    assert columns(text, "Registers") == {
        "R0": ["a.1(0) r2", "-", "m(0)", "m(0)"],
        "R1": ["m(0) r1", "m(0) r1", "-", "-"],
    }
    assert ["m(0)", "2", "5", "R0", "x2,", "R1", "x2"] in map(str.split, text.splitlines())


def test_many_registers_take_a_row_each() -> None:
    lives = tuple(Lifetime(Copy("v", 0), 1 + r, (r,)) for r in range(5))
    text = shown(plan_report(replace(TWO_COPIES, registers=5, lifetimes=lives), AUDITED))
    assert columns(text, "Registers") == {
        "0": ["-", "-", "-", "v(0) r1", "-"],
        "1": ["v(0)", "-", "-", "-", "v(0) r1"],
        "2": ["-", "v(0)", "-", "-", "-"],
        "3": ["-", "-", "v(0)", "-", "-"],
    }


def test_no_registers_and_no_units_make_no_empty_tables() -> None:
    wires = replace(
        TWO_COPIES, operations=TWO_COPIES.operations[:1], units={}, registers=0, lifetimes=()
    )
    text = shown(plan_report(wires, AUDITED))
    assert "No value waits in a register." in text
    assert "Schedule" not in text
    assert "lifetimes" not in text


@pytest.mark.parametrize("width", [40, 80, 132])
def test_a_large_plan_fits_and_loses_nothing(large: Plan, width: int) -> None:
    text = shown(plan_report(large, AUDITED), width)
    assert max(map(len, text.splitlines())) <= width
    assert "\N{HORIZONTAL ELLIPSIS}" not in text
    grid = columns(text, "Schedule")
    assert len(grid) == 40
    for op in large.operations:
        cell = f"{op.name} r{op.stage}" if op.stage else op.name
        assert grid[f"{op.unit} {op.instance}"][op.slot] == cell
    assert all(f"{op.name} " in text[text.index("Operations") :] for op in large.operations)


def test_a_large_plan_stays_compact(large: Plan) -> None:
    text = shown(plan_report(large, AUDITED))
    listed = text[text.index("Operations") : text.index("Registers")]
    assert len(listed.splitlines()) < 210


NAMES = st.text("abw[]/.:1", min_size=1, max_size=12)


@settings(max_examples=40, deadline=None)
@given(st.data(), st.integers(1, 12), st.integers(1, 9), st.integers(40, 120))
def test_any_schedule_can_be_read_back_from_its_table(
    data: st.DataObject, instances: int, cycles: int, width: int
) -> None:
    starts = data.draw(
        st.dictionaries(
            st.tuples(st.integers(0, instances - 1), st.integers(0, cycles - 1)),
            st.tuples(NAMES, st.integers(-2, 12), st.integers(0, 1)),
            min_size=1,
        )
    )
    operations = tuple(
        placed(name, copy, ("unit", instance), stage * cycles + slot, cycles)
        for (instance, slot), (name, stage, copy) in starts.items()
    )
    plan = with_schedule(operations, {"unit": instances}, cycles)
    design = {**DESIGN, "technology": {**DESIGN["technology"], "unit": {"unit": {"area": 1}}}}
    text = shown(plan_report(replace(plan, design=design), AUDITED), width)
    grid = columns(text, "Schedule")
    several = plan.parallelism == 2
    wanted = {f"unit {i}": ["-"] * cycles for i in range(instances)}
    for op in operations:
        label = f"{op.name}({op.copy})" if several else op.name
        cell = f"{label} r{op.stage}" if op.stage else label
        wanted[f"unit {op.instance}"][op.slot] = cell
    assert grid == wanted


def test_names_are_neither_markup_nor_commands_to_the_terminal() -> None:
    odd = replace(TWO_COPIES, title="Odd [b]and[/b] [/x] \x1b[31mred\nend")
    text = shown(plan_report(odd, AUDITED))
    assert "Odd [b]and[/b] [/x] " in text
    assert "\x1b" not in text


def test_an_audit_lists_every_check_with_what_it_found() -> None:
    text = shown(audit_report(TWO_COPIES, AUDITED))
    assert "2 checks stand" in text
    assert ["rate", "4", "cycles", "for", "2", "samples"] in map(str.split, text.splitlines())


# ---- limits and progress ---------------------------------------------------------------------


LIMITS = Limits(
    iteration_bound=Fraction(7, 3),
    loops=(Loop(("w", "w.1", "w.2"), 7, 3),),
    cycles_per_sample=Fraction(5, 2),
    least_cycles_per_sample=Fraction(5, 2),
    critical_path=9,
    path=("w", "y"),
    least_period=3,
    blocks=(
        BlockLimits(1, range(0), {}, None),
        BlockLimits(2, range(5, 6), {"adder": 2, "multiplier": 1}, Fraction(10)),
        BlockLimits(3, range(5, 8), {"adder": 1, "multiplier": 1}, Fraction(19, 2)),
    ),
    units_over_all={"adder": 1, "multiplier": 1},
    forbidden=None,
)


def test_limits_name_bound_loops_and_floors() -> None:
    text = shown(limits_report("Limited", LIMITS))
    words = " ".join(text.split())
    assert words.startswith("Limited: nothing here forbids the rate, which leaves 2.5 cycles per")
    assert "Iteration bound 7/3 cycles per sample" in words
    assert "Critical loops w -> w.1 -> w.2 -> w: 7 cycles, 3 delays" in words
    assert "Longest path 9 cycles as written, 3 at the least after retiming" in words
    lines = list(map(str.split, text.splitlines()))
    assert ["1", "none", "-", "-", "-"] in lines
    assert ["2", "5", "2", "1", "10"] in lines
    assert ["3", "5", "to", "7", "1", "1", "9.5"] in lines
    assert ["any", "1", "1"] in lines


def test_limits_that_forbid_say_so_first() -> None:
    forbidden = replace(LIMITS, forbidden="the loop w -> w takes 3 cycles, the rate leaves 2")
    text = on_one_line(limits_report("Limited", forbidden))
    assert text.startswith(
        "Limited: impossible. The loop w -> w takes 3 cycles, the rate leaves 2."
    )


def test_limits_without_a_loop_say_so() -> None:
    loopless: dict[str, Any] = {"iteration_bound": Fraction(0), "loops": (), "least_period": None}
    text = on_one_line(limits_report("Limited", replace(LIMITS, **loopless)))
    assert "it has no loop." in text
    assert "Longest path 9 cycles as written Fewest units" in text


def test_many_kinds_of_units_are_split_into_blocks_that_fit() -> None:
    names = [f"pipelined multiplier {i}" for i in range(8)]
    blocks_ = (BlockLimits(1, range(1, 4), dict.fromkeys(names, 3), Fraction(24)),)
    many = replace(LIMITS, blocks=blocks_, units_over_all=dict.fromkeys(names, 1))
    text = shown(limits_report("Limited", many))
    assert max(map(len, text.splitlines())) <= 80
    assert all(name in text for name in names)


def test_progress_tells_pair_best_bound_gap_and_seconds() -> None:
    line = progress_line(3.2, (1, 5), None, Fraction(20))
    assert line == "3 s: J = 1, N = 5, no plan yet, none below 20"
    line = progress_line(3.2, (1, 5), Fraction(25), Fraction(20))
    assert line == "3 s: J = 1, N = 5, best 25, none below 20, gap 20.0%"
