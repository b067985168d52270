"""The audit on plans of random graphs that no solver has seen: sound ones pass, others do not."""

from __future__ import annotations

import json
import random
from collections.abc import Iterator
from dataclasses import replace

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from plans import random_plan

from scheduler.audit import audit
from scheduler.errors import AuditError
from scheduler.plan import Plan, PlannedOperation
from scheduler.planfile import plan_document, plan_from

SEEDS = st.integers(0, 10**9)


@given(SEEDS)
@settings(max_examples=80)
def test_a_plan_that_keeps_every_rule_passes(seed: int) -> None:
    report = audit(random_plan(random.Random(seed)))
    assert [check.name for check in report.checks][-1] == "bits"


@given(SEEDS)
@settings(max_examples=40)
def test_a_plan_is_the_same_after_a_way_through_its_file(seed: int) -> None:
    plan = random_plan(random.Random(seed))
    written = json.dumps(plan_document(plan))
    assert plan_from(json.loads(written), "a plan") == plan


@given(SEEDS)
@settings(max_examples=15)
def test_a_plan_with_any_one_number_changed_does_not_pass(seed: int) -> None:
    rng = random.Random(seed)
    plan = random_plan(rng)
    for changed in changes(plan, rng.choice([-1, 1])):
        with pytest.raises(AuditError):
            audit(changed)


def changes(plan: Plan, step: int) -> Iterator[Plan]:
    """The plan with one number one off, for every number that stands for itself."""
    for index, op in enumerate(plan.operations):
        for field in ("start", "slot", "stage", "latency", "busy", "copy"):
            yield with_row(plan, "operations", index, off_by(op, field, step))
        yield with_row(plan, "operations", index, moved_off(op, plan))
    for index, edge in enumerate(plan.edges):
        yield with_row(plan, "edges", index, off_by(edge, "delays", step))
        yield replace(plan, edges=(*plan.edges[:index], *plan.edges[index + 1 :]))
        yield replace(plan, edges=(*plan.edges, edge))
    for index, life in enumerate(plan.lifetimes):
        yield with_row(plan, "lifetimes", index, off_by(life, "first", step))
        taken = (plan.registers, *life.registers[1:])
        yield with_row(plan, "lifetimes", index, replace(life, registers=taken))
    for field in ("parallelism", "cycles", "registers", "value"):
        yield off_by(plan, field, step)
    for name, count in plan.units.items():
        yield replace(plan, units={**plan.units, name: count + step})
    yield replace(plan, proof=off_by(plan.proof, "pairs", step))


def off_by(row: object, field: str, step: int) -> object:
    return replace(row, **{field: getattr(row, field) + step})


def moved_off(op: PlannedOperation, plan: Plan) -> PlannedOperation:
    """The operation on an instance that is not there."""
    return replace(op, instance=plan.units.get(op.unit or "", 0))


def with_row(plan: Plan, table: str, index: int, row: object) -> Plan:
    rows = getattr(plan, table)
    return replace(plan, **{table: (*rows[:index], row, *rows[index + 1 :])})
