"""Tables that fit, and say what is so."""

from __future__ import annotations

import io
import re
from dataclasses import replace
from fractions import Fraction

import pytest
from rich.console import Console

from scheduler.audit import audit
from scheduler.design import design_from, find_design, load_design
from scheduler.limits import limits_of
from scheduler.plan import Plan, Status
from scheduler.planning import plan
from scheduler.report import audit_report, headline, limits_report, plan_report, progress_line


@pytest.fixture(scope="module")
def gearbox() -> Plan:
    return plan(load_design(find_design("gearbox-vibration-band")))


@pytest.fixture(scope="module")
def wide() -> Plan:
    """Seventeen unit instances in ten cycles."""
    tables = {
        "title": "Wide [b]and[/b] [/x]",
        "algorithm": {"structure": "fir-direct", "coefficients": list(range(2, 92))},
        "requirement": {"cycles_per_sample": "10"},
        "caps": {"parallelism": 1},
        "technology": {"use": "unit-time"},
    }
    return plan(design_from(tables, "a test", find_design("gearbox-vibration-band").parent))


def shown(thing: object, width: int = 80) -> str:
    console = Console(file=io.StringIO(), width=width, color_system=None, legacy_windows=False)
    console.print(thing)
    return console.file.getvalue()  # type: ignore[attr-defined]


def test_the_answer_comes_first_in_words(gearbox: Plan) -> None:
    words = " ".join(headline(gearbox).plain.split())
    assert words.startswith("Gearbox vibration band: 2 adders, 2 multipliers, 7 registers")
    assert "clock 1.024 MHz, J = 1, N = 10" in words
    assert words.endswith("Proven: nothing smaller meets the rate, for every J.")


def test_an_open_answer_shows_its_gap(gearbox: Plan) -> None:
    opened = replace(gearbox, status=Status.OPEN, bound=20.0)
    assert "Open: nothing below 20 exists, a gap of 7.0%." in headline(opened).plain


def test_no_answer_gives_its_reason(gearbox: Plan) -> None:
    none = replace(gearbox, status=Status.NONE, operations=(), reason="the time was up")
    assert headline(none).plain.endswith("none. The time was up.")


@pytest.mark.parametrize("width", [50, 80, 160])
def test_wide_tables_are_split_and_lose_nothing(wide: Plan, width: int) -> None:
    text = shown(plan_report(wide, audit(wide), width), width)
    assert max(map(len, text.splitlines())) <= width
    assert "\N{HORIZONTAL ELLIPSIS}" not in text
    for name, count in wide.units.items():
        for instance in range(count):
            assert re.search(rf"\b{name} {instance}\b", text)
    starts = text[text.index("Schedule") : text.index("Operations")]
    for op in wide.operations:
        assert op.name in starts


def test_names_with_brackets_are_shown_as_they_are(wide: Plan) -> None:
    assert "Wide [b]and[/b] [/x]" in shown(plan_report(wide, audit(wide)))


def test_every_operation_stands_in_its_cycle_and_column(gearbox: Plan) -> None:
    text = shown(plan_report(gearbox, audit(gearbox), 120), 120)
    lines = text[text.index("Schedule") :].splitlines()
    heads, rows = lines[1], lines[3 : 3 + (gearbox.cycles or 0)]
    for op in gearbox.operations:
        if op.unit is not None:
            at = heads.index(f"{op.unit} {op.instance}")
            stage = f" r{op.stage}" if op.stage else ""
            assert rows[op.slot][at:].startswith(f"{op.name}{stage} ")


def test_the_caution_and_the_audit_are_told(gearbox: Plan) -> None:
    text = " ".join(shown(plan_report(gearbox, audit(gearbox))).split())
    assert "An estimate before synthesis" in text
    assert "functional-safety standard" in text
    assert "Audited without a solver, 13 checks stand" in text
    assert "13 checks passed" in shown(audit_report(gearbox, audit(gearbox)))


def test_limits_name_the_loops_and_the_reason() -> None:
    design = load_design(find_design("oil-pressure-notch"))
    text = " ".join(shown(limits_report(design.title, limits_of(design))).split())
    assert "impossible. The loop state -> state.3 -> state takes 3 cycles" in text
    assert "Iteration bound: 3 cycles per sample" in text


def test_progress_tells_the_best_the_bound_and_the_gap() -> None:
    line = progress_line(3.2, (1, 5), None, Fraction(20))
    assert line == "3 s: J = 1, N = 5, no plan yet, none below 20"
    line = progress_line(3.2, (1, 5), Fraction(25), Fraction(20))
    assert line == "3 s: J = 1, N = 5, best 25, none below 20, gap 20.0%"
