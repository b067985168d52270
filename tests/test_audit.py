"""A plan that stands passes; a plan with anything changed in it does not."""

from __future__ import annotations

import ast
import copy
from collections.abc import Callable, Iterable, Iterator
from dataclasses import replace
from itertools import pairwise
from pathlib import Path
from typing import Any

import pytest

import scheduler.audit
from scheduler.audit import audit
from scheduler.design import Design, design_from, find_design, load_design
from scheduler.errors import AuditError, InputError
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
from scheduler.planning import plan
from scheduler.simulation import Format, Hardware, Value

GEARBOX, BEARING = "gearbox-vibration-band", "bearing-emission-band"
FRACTIONAL, UNPIPELINED = "an average at 5/2 cycles a sample", "a resonator on slow multipliers"
ADAPTIVE, OSCILLATOR = "an adaptive gain with two inputs", "an oscillator without inputs"


def written(title: str, equations: str, cycles: str, **options: Any) -> Design:
    """A design of equations in abstract time, with its single output y."""
    tables = {
        "title": title,
        "algorithm": {
            "inputs": options.get("inputs", ["x"]),
            "outputs": ["y"],
            "equations": equations,
        },
        "requirement": {"cycles_per_sample": cycles},
        "caps": options.get("caps", {"parallelism": 1}),
        "technology": {"use": options.get("technology", "unit-time")},
    }
    return design_from(tables, title, Path())


def design_called(name: str) -> Design:
    match name:
        case "an average at 5/2 cycles a sample":
            text = "y[n] = 0.125*x[n] + 0.25*x[n-1] + 0.5*x[n-2] + 0.25*x[n-3] + 0.125*x[n-4]"
            return written(name, text, "5/2", caps={"parallelism": 2})
        case "a resonator on slow multipliers":
            text = "y[n] = x[n] + 1.25*y[n-1] - 0.5*y[n-2]"
            return written(name, text, "5", technology="unit-time-unpipelined")
        case "an adaptive gain with two inputs":
            text = "w[n] = w[n-1] + 0.125*e[n-1]*x[n-1]\ne[n] = d[n] - w[n]*x[n]\ny[n] = w[n]*x[n]"
            return written(name, text, "8", inputs=["x", "d"])
        case "an oscillator without inputs":
            return written(name, "y[n] = 1.5*y[n-1] - y[n-2]", "5", inputs=[])
    return load_design(find_design(name))


@pytest.fixture(
    scope="module",
    params=[GEARBOX, BEARING, FRACTIONAL, UNPIPELINED, ADAPTIVE, OSCILLATOR],
)
def sound(request: pytest.FixtureRequest) -> Plan:
    """A plan that stands, one for every kind of design."""
    return plan(design_called(request.param))


@pytest.fixture(scope="module")
def gearbox() -> Plan:
    return plan(design_called(GEARBOX))


@pytest.fixture(scope="module")
def bearing() -> Plan:
    return plan(design_called(BEARING))


@pytest.fixture(scope="module")
def oscillator() -> Plan:
    return plan(design_called(OSCILLATOR))


@pytest.fixture(scope="module")
def impossible() -> Plan:
    return plan(design_called("oil-pressure-notch"))


# ---- changing a plan ---------------------------------------------------------------------------

Mutant = tuple[object, Plan]
"""What was changed, and the changed plan."""


def with_operation(before: Plan, old: PlannedOperation, new: PlannedOperation) -> Plan:
    changed = tuple(new if op is old else op for op in before.operations)
    return replace(before, operations=changed)


def with_edge(before: Plan, index: int, *edges: PlannedEdge) -> Plan:
    changed = (*before.edges[:index], *edges, *before.edges[index + 1 :])
    return replace(before, edges=changed)


def with_lifetime(before: Plan, index: int, *lives: Lifetime) -> Plan:
    changed = (*before.lifetimes[:index], *lives, *before.lifetimes[index + 1 :])
    return replace(before, lifetimes=changed)


def with_caps(before: Plan, **caps: object) -> Plan:
    return with_table(before, "caps", **caps)


def with_table(before: Plan, name: str, **entries: object) -> Plan:
    design = copy.deepcopy(dict(before.design))
    design[name] |= entries
    return replace(before, design=design)


def moved(before: Plan, op: PlannedOperation, cycles: int) -> Plan:
    """An operation at another time, its start, slot and stage in agreement."""
    return with_operation(before, op, at(op, op.start + cycles, period(before)))


def at(op: PlannedOperation, start: int, cycles: int) -> PlannedOperation:
    stage, slot = divmod(start, cycles)
    return replace(op, start=start, stage=stage, slot=slot)


def period(of: Plan) -> int:
    assert of.cycles is not None
    return of.cycles


def fault(changed: Plan) -> str | None:
    """What the audit has against a plan."""
    try:
        audit(changed)
    except AuditError as error:
        return str(error)
    return None


def accepted(mutants: Iterable[Mutant]) -> list[object]:
    """What was changed without the audit noticing; there has to be something to look at."""
    verdicts = [(what, fault(changed)) for what, changed in mutants]
    assert verdicts
    return [what for what, verdict in verdicts if verdict is None]


# ---- plans that stand --------------------------------------------------------------------------

CHECKS = [
    "standing", "rate", "operations", "edges", "precedence", "ports", "units", "registers",
    "latency", "objective", "caps", "proof", "bits",
]  # fmt: skip


class TestPlansThatStand:
    def test_a_plan_as_it_was_found_passes_every_check(self, sound: Plan) -> None:
        assert [check.name for check in audit(sound).checks] == CHECKS

    def test_the_checks_say_what_they_looked_at(self, gearbox: Plan) -> None:
        facts = {check.name: check.fact for check in audit(gearbox).checks}
        assert facts["operations"] == f"{len(gearbox.operations)} copies placed"
        assert facts["registers"].startswith(f"{gearbox.registers} registers")
        assert facts["bits"].endswith("all equal")

    def test_the_designs_here_are_of_the_kinds_that_they_are_for(
        self, gearbox: Plan, bearing: Plan, oscillator: Plan
    ) -> None:
        assert (gearbox.parallelism, bearing.parallelism) == (1, 3)
        assert bearing.design["requirement"]["delivery"] == "block"
        assert oscillator.latency is None
        fractional = plan(design_called(FRACTIONAL))
        assert (fractional.parallelism, fractional.cycles) == (2, 5)
        slow = plan(design_called(UNPIPELINED))
        assert max(op.busy for op in slow.operations) == 2

    @pytest.mark.parametrize("later", [-3, 1, 10])
    def test_a_plan_that_is_moved_as_a_whole_still_stands(self, sound: Plan, later: int) -> None:
        operations = (at(op, op.start + later, period(sound)) for op in sound.operations)
        lives = (replace(life, first=life.first + later) for life in sound.lifetimes)
        changed = replace(sound, operations=tuple(operations), lifetimes=tuple(lives))
        assert fault(changed) is None

    def test_the_order_in_which_a_plan_lists_things_is_free(self, sound: Plan) -> None:
        changed = replace(
            sound,
            operations=sound.operations[::-1],
            edges=sound.edges[::-1],
            lifetimes=sound.lifetimes[::-1],
            units=dict(reversed(sound.units.items())),
        )
        assert fault(changed) is None


# ---- operations --------------------------------------------------------------------------------


class TestOperationsThatWereChanged:
    @pytest.mark.parametrize("field", ["start", "slot", "stage", "latency", "busy", "copy"])
    @pytest.mark.parametrize("step", [-1, 1])
    def test_a_number_off_by_one_is_noticed(self, sound: Plan, field: str, step: int) -> None:
        assert not accepted(
            (op.key, with_operation(sound, op, replace(op, **{field: getattr(op, field) + step})))
            for op in sound.operations
        )

    @pytest.mark.parametrize("periods", [-1, 1])
    def test_a_start_off_by_a_whole_period_is_noticed(self, sound: Plan, periods: int) -> None:
        assert not accepted(
            (
                op.key,
                with_operation(sound, op, replace(op, start=op.start + periods * sound.cycles)),
            )
            for op in sound.operations
        )

    @pytest.mark.parametrize("step", [-1, 1])
    def test_a_slot_outside_the_period_is_noticed(self, sound: Plan, step: int) -> None:
        """The start is N * stage + slot all the same."""
        for op in sound.operations:
            slot = op.slot + step * period(sound)
            changed = with_operation(sound, op, replace(op, slot=slot, stage=op.stage - step))
            with pytest.raises(AuditError, match=r"^operations: .* is not in the period"):
                audit(changed)

    def test_another_unit_is_noticed(self, sound: Plan) -> None:
        names = [*sound.units, "abacus", None]
        assert not accepted(
            ((op.key, name), with_operation(sound, op, replace(op, unit=name)))
            for op in sound.operations
            for name in names
            if name != op.unit
        )

    def test_an_instance_that_is_not_there_is_noticed(self, sound: Plan) -> None:
        assert not accepted(
            ((op.key, odd), with_operation(sound, op, replace(op, instance=odd)))
            for op in sound.operations
            for odd in (-1, sound.units.get(op.unit or "", 0), None)
            if odd != op.instance
        )

    def test_an_instance_can_be_changed_to_one_that_is_idle_and_to_no_other(
        self, sound: Plan
    ) -> None:
        """Instances of a unit are alike: with an idle one it is another sound plan."""
        others = [
            (op, other)
            for op in sound.operations
            for other in neighbours(op.instance, sound.units.get(op.unit or "", 0))
        ]
        idle = {
            (op.key, other)
            for op, other in others
            if not busy_slots(sound, op.unit, other) & slots_of(sound, op)
        }
        kept = [
            ((op.key, other), with_operation(sound, op, replace(op, instance=other)))
            for op, other in others
        ]
        assert {what for what, changed in kept if fault(changed) is None} == idle

    def test_a_missing_one_is_noticed(self, sound: Plan) -> None:
        assert not accepted(
            (op.key, replace(sound, operations=tuple(o for o in sound.operations if o is not op)))
            for op in sound.operations
        )

    def test_a_doubled_one_is_noticed(self, sound: Plan) -> None:
        assert not accepted(
            (op.key, replace(sound, operations=(*sound.operations, op))) for op in sound.operations
        )

    def test_one_under_another_name_is_noticed(self, sound: Plan) -> None:
        assert not accepted(
            (op.key, with_operation(sound, op, replace(op, name="stranger")))
            for op in sound.operations
        )

    def test_two_of_a_kind_can_swap_their_names_only_if_they_start_together(
        self, gearbox: Plan
    ) -> None:
        """Two multiplications that start together swap their instances with their names."""
        workers = [op for op in gearbox.operations if op.unit == "multiplier"]
        for a, b in pairwise(sorted(workers, key=lambda op: op.start)):
            changed = with_operation(gearbox, a, replace(a, name=b.name))
            changed = with_operation(changed, b, replace(b, name=a.name))
            assert (fault(changed) is None) == (a.start == b.start)


def neighbours(number: int | None, count: int) -> set[int]:
    """The numbers beside one of 0..count-1, which stand for all the others."""
    return set() if number is None else {(number + step) % count for step in (-1, 1)} - {number}


def slots_of(of: Plan, op: PlannedOperation) -> set[int]:
    return {cycle % period(of) for cycle in range(op.start, op.start + op.busy)}


def busy_slots(of: Plan, unit: str | None, instance: int) -> set[int]:
    there = (op for op in of.operations if (op.unit, op.instance) == (unit, instance))
    return {slot for op in there for slot in slots_of(of, op)}


class TestOperationsThatWereMoved:
    """Start, slot and stage agree with each other; the plan round them is as it was.

    Moving an operation with readers by a cycle always changes the cycles in which its result is
    held, or lets it be read too early. Moving a port of a design with inputs changes the latency,
    or takes it out of step with the other ports. So no such move is sound by itself.
    """

    @pytest.mark.parametrize("cycles", [-1, 1])
    def test_by_a_cycle(self, sound: Plan, cycles: int) -> None:
        free = set() if sound.latency is not None else {Copy("y.out", 0)}
        assert not accepted(
            (op.key, moved(sound, op, cycles)) for op in sound.operations if op.key not in free
        )

    @pytest.mark.parametrize("periods", [-1, 1])
    def test_by_a_whole_period(self, sound: Plan, periods: int) -> None:
        free = set() if sound.latency is not None else {Copy("y.out", 0)}
        assert not accepted(
            (op.key, moved(sound, op, periods * period(sound)))
            for op in sound.operations
            if op.key not in free
        )

    def test_an_output_without_inputs_may_be_read_whenever_its_value_is_held(
        self, oscillator: Plan
    ) -> None:
        """Nothing is to be in step with it, and there is no latency that could change."""
        out = next(op for op in oscillator.operations if op.name.endswith(".out"))
        life = next(life for life in oscillator.lifetimes if life.value.name == "y")
        producer = next(op for op in oscillator.operations if op.name == "y")
        leaves = producer.start + producer.latency
        held = {leaves, *range(life.first, life.first + len(life.registers))}
        around = range(leaves - 3, max(held) + 4)
        sound_at = {n for n in around if fault(moved(oscillator, out, n - out.start)) is None}
        assert sound_at == held


# ---- edges -------------------------------------------------------------------------------------


class TestEdgesThatWereChanged:
    @pytest.mark.parametrize("step", [-1, 1])
    def test_other_delays_are_noticed(self, sound: Plan, step: int) -> None:
        assert not accepted(
            (edge, with_edge(sound, i, replace(edge, delays=edge.delays + step)))
            for i, edge in enumerate(sound.edges)
        )

    @pytest.mark.parametrize("end", ["source", "target"])
    def test_another_end_is_noticed(self, sound: Plan, end: str) -> None:
        keys = [op.key for op in sound.operations]
        assert not accepted(
            ((edge, key), with_edge(sound, i, replace(edge, **{end: key})))
            for i, edge in enumerate(sound.edges)
            for key in (keys[0], keys[-1], Copy(getattr(edge, end).name, 99))
            if key != getattr(edge, end)
        )

    def test_a_missing_one_is_noticed(self, sound: Plan) -> None:
        assert not accepted((edge, with_edge(sound, i)) for i, edge in enumerate(sound.edges))

    def test_a_doubled_one_is_noticed(self, sound: Plan) -> None:
        assert not accepted(
            (edge, with_edge(sound, i, edge, edge)) for i, edge in enumerate(sound.edges)
        )


# ---- registers ---------------------------------------------------------------------------------


class TestLifetimesThatWereChanged:
    @pytest.mark.parametrize("step", [-1, 1])
    def test_another_count_of_registers_is_noticed(self, sound: Plan, step: int) -> None:
        assert sound.registers is not None
        assert fault(replace(sound, registers=sound.registers + step)) is not None

    @pytest.mark.parametrize("step", [-1, 1])
    def test_another_first_cycle_is_noticed(self, sound: Plan, step: int) -> None:
        assert not accepted(
            (life.value, with_lifetime(sound, i, replace(life, first=life.first + step)))
            for i, life in enumerate(sound.lifetimes)
        )

    @pytest.mark.parametrize(
        "change",
        [
            pytest.param(lambda life: [replace(life, registers=life.registers[:-1])], id="shorter"),
            pytest.param(
                lambda life: [replace(life, registers=(*life.registers, life.registers[-1]))],
                id="longer",
            ),
            pytest.param(
                lambda life: [
                    replace(life, first=life.first + 1, registers=life.registers[1:]),
                ],
                id="begun later",
            ),
            pytest.param(
                lambda life: [
                    replace(
                        life, first=life.first - 1, registers=(life.registers[0], *life.registers)
                    )
                ],
                id="begun earlier",
            ),
            pytest.param(lambda life: [replace(life, registers=())], id="emptied"),
            pytest.param(lambda life: [], id="removed"),
            pytest.param(lambda life: [life, life], id="doubled"),
            pytest.param(
                lambda life: [replace(life, value=Copy("stranger", 0))], id="of an unknown value"
            ),
            pytest.param(
                lambda life: [replace(life, value=Copy(life.value.name, life.value.number + 1))],
                id="of another copy",
            ),
        ],
    )
    def test_a_lifetime_that_was_changed_is_noticed(
        self, sound: Plan, change: Callable[[Lifetime], list[Lifetime]]
    ) -> None:
        assert not accepted(
            (life.value, with_lifetime(sound, i, *change(life)))
            for i, life in enumerate(sound.lifetimes)
        )

    def test_a_lifetime_too_many_is_noticed(self, sound: Plan) -> None:
        held = {life.value for life in sound.lifetimes}
        extra = [
            Lifetime(op.key, op.start + op.latency + 1, (0,))
            for op in sound.operations
            if op.key not in held
        ]
        assert not accepted(
            (life.value, replace(sound, lifetimes=(*sound.lifetimes, life))) for life in extra
        )

    def test_a_register_that_is_not_there_is_noticed(self, sound: Plan) -> None:
        count = sound.registers
        assert count is not None
        assert not accepted(other_registers(sound, lambda old: (-1, count)))

    def test_a_register_can_be_changed_to_one_that_is_free_and_to_no_other(
        self, sound: Plan
    ) -> None:
        """Registers are alike and any may be loaded from any: a free one is another sound plan."""
        taken = {
            ((life.first + age) % period(sound), register)
            for life in sound.lifetimes
            for age, register in enumerate(life.registers)
        }
        count = sound.registers or 0
        for (cycle, register), changed in other_registers(
            sound, lambda old: neighbours(old, count)
        ):
            is_free = (cycle % period(sound), register) not in taken
            assert (fault(changed) is None) == is_free


def other_registers(
    before: Plan, others: Callable[[int], Iterable[int]]
) -> Iterator[tuple[tuple[int, int], Plan]]:
    """Every value, in every cycle in which it is held, in each of some other registers."""
    for i, life in enumerate(before.lifetimes):
        for age, old in enumerate(life.registers):
            for register in others(old):
                moved_to = (*life.registers[:age], register, *life.registers[age + 1 :])
                changed = with_lifetime(before, i, replace(life, registers=moved_to))
                yield (life.first + age, register), changed


# ---- what the plan says of itself --------------------------------------------------------------


class TestNumbersThatWereChanged:
    @pytest.mark.parametrize("step", [-1, 1])
    def test_another_count_of_units_is_noticed(self, sound: Plan, step: int) -> None:
        assert not accepted(
            (name, replace(sound, units={**sound.units, name: count + step}))
            for name, count in sound.units.items()
        )

    def test_a_unit_that_was_left_out_is_noticed(self, sound: Plan) -> None:
        assert not accepted(
            (name, replace(sound, units={n: c for n, c in sound.units.items() if n != name}))
            for name in sound.units
        )

    @pytest.mark.parametrize("count", [-1, 0, 1])
    def test_an_unknown_unit_is_noticed(self, sound: Plan, count: int) -> None:
        changed = replace(sound, units={**sound.units, "abacus": count})
        with pytest.raises(AuditError, match=r"^units: .*abacus"):
            audit(changed)

    @pytest.mark.parametrize("field", ["value", "bound"])
    @pytest.mark.parametrize("step", [-0.5, 0.5])
    def test_another_area_or_bound_is_noticed(self, sound: Plan, field: str, step: float) -> None:
        assert fault(replace(sound, **{field: getattr(sound, field) + step})) is not None

    @pytest.mark.parametrize("step", [-0.5, 0.5])
    def test_an_area_and_a_bound_that_are_wrong_together_are_noticed(
        self, sound: Plan, step: float
    ) -> None:
        assert sound.value is not None
        wrong = sound.value + step
        with pytest.raises(AuditError, match=r"^objective: the area is"):
            audit(replace(sound, value=wrong, bound=wrong))

    @pytest.mark.parametrize("field", ["value", "bound"])
    def test_an_area_or_a_bound_that_is_not_told_is_named(self, sound: Plan, field: str) -> None:
        with pytest.raises(AuditError, match=f"^standing: a plan has no {field}"):
            audit(replace(sound, **{field: None}))

    @pytest.mark.parametrize("field", ["parallelism", "cycles", "registers"])
    def test_a_number_that_is_not_told_is_noticed(self, sound: Plan, field: str) -> None:
        assert fault(replace(sound, **{field: None})) is not None

    @pytest.mark.parametrize("field", ["parallelism", "cycles"])
    @pytest.mark.parametrize("step", [-1, 1])
    def test_another_rate_is_noticed(self, sound: Plan, field: str, step: int) -> None:
        assert fault(replace(sound, **{field: getattr(sound, field) + step})) is not None

    @pytest.mark.parametrize("field", ["parallelism", "cycles"])
    @pytest.mark.parametrize("number", [0, -1])
    def test_a_rate_without_sense_is_noticed(self, sound: Plan, field: str, number: int) -> None:
        with pytest.raises(AuditError, match=r"^rate: a plan needs J and N of 1 or more"):
            audit(replace(sound, **{field: number}))

    @pytest.mark.parametrize("field", ["clock_period_ns", "sample_period_ns"])
    def test_another_period_is_noticed(self, sound: Plan, field: str) -> None:
        stated = getattr(sound, field)
        others = [1.0, 0.0] if stated is None else [stated * 1.000001, stated / 2, -stated, None]
        assert not accepted((other, replace(sound, **{field: other})) for other in others)

    @pytest.mark.parametrize("step", [-1, 1])
    def test_another_latency_is_noticed(self, sound: Plan, step: int) -> None:
        wrong = step if sound.latency is None else sound.latency + step
        with pytest.raises(AuditError, match=r"^latency: the latency is"):
            audit(replace(sound, latency=wrong))

    def test_a_latency_is_told_where_there_is_one_and_only_there(self, sound: Plan) -> None:
        assert fault(replace(sound, latency=0 if sound.latency is None else None)) is not None


class TestStandingsThatWereChanged:
    @pytest.mark.parametrize("status", [Status.OPEN, Status.IMPOSSIBLE, Status.NONE])
    def test_a_proven_plan_under_another_status_is_noticed(
        self, sound: Plan, status: Status
    ) -> None:
        assert sound.status is Status.PROVEN
        with pytest.raises(AuditError, match=r"^standing: "):
            audit(replace(sound, status=status, reason="no reason"))

    def test_an_open_plan_stands_and_is_not_proven(self, sound: Plan) -> None:
        assert sound.value is not None
        changed = replace(sound, status=Status.OPEN, bound=sound.value - 0.5)
        assert fault(changed) is None
        with pytest.raises(AuditError, match=r"^standing: it is called proven"):
            audit(replace(changed, status=Status.PROVEN))

    def test_an_impossible_plan_passes(self, impossible: Plan) -> None:
        assert impossible.status is Status.IMPOSSIBLE
        assert [check.name for check in audit(impossible).checks] == ["standing"]

    def test_an_impossible_plan_with_hardware_is_noticed(
        self, impossible: Plan, gearbox: Plan
    ) -> None:
        numbers = [
            "value", "bound", "parallelism", "cycles", "clock_period_ns", "registers", "latency",
        ]  # fmt: skip
        assert not accepted(
            [
                ("operations", replace(impossible, operations=gearbox.operations)),
                ("one operation", replace(impossible, operations=gearbox.operations[:1])),
                ("units", replace(impossible, units={"adder": 1})),
                ("edges", replace(impossible, edges=gearbox.edges)),
                ("lifetimes", replace(impossible, lifetimes=gearbox.lifetimes)),
                *((name, replace(impossible, **{name: 1})) for name in numbers),
                ("no reason", replace(impossible, reason="")),
            ]
        )

    def test_an_impossibility_with_a_pair_unsettled_or_solved_is_noticed(
        self, impossible: Plan
    ) -> None:
        refuted, solved = SolverVerdict(1, 2, None, 2), SolverVerdict(1, 2, 3.0, 2)
        assert fault(replace(impossible, proof=Proof(1, 0, (refuted,)))) is None
        assert not accepted(
            (proof, replace(impossible, proof=proof))
            for proof in (Proof(2, 0, (refuted,)), Proof(1, 0), Proof(1, 0, (solved,)))
        )

    def test_a_plan_under_another_title_than_its_design_is_noticed(
        self, sound: Plan, impossible: Plan
    ) -> None:
        for titled in (sound, impossible):
            with pytest.raises(AuditError, match=r"^standing: the plan is called 'Another'"):
                audit(replace(titled, title="Another"))

    @pytest.mark.parametrize("status", [Status.PROVEN, Status.OPEN])
    def test_an_impossible_plan_is_no_plan(self, impossible: Plan, status: Status) -> None:
        assert fault(replace(impossible, status=status)) is not None


# ---- caps, requirement and technology ----------------------------------------------------------


class TestDesignsThatWereTightened:
    def test_caps_at_what_the_plan_takes_are_kept(self, sound: Plan) -> None:
        caps: dict[str, object] = {"area": sound.value, "registers": sound.registers, **sound.units}
        if sound.latency is not None:
            caps["latency"] = sound.latency
        assert fault(with_caps(sound, **caps)) is None

    def test_a_cap_below_what_the_plan_takes_is_noticed(self, sound: Plan) -> None:
        assert sound.value is not None and sound.registers is not None
        caps: dict[str, object] = {"area": sound.value - 0.5, "registers": sound.registers - 1}
        caps |= {name: count - 1 for name, count in sound.units.items()}
        if sound.latency is not None:
            caps["latency"] = sound.latency - 1
        for name, most in caps.items():
            with pytest.raises(AuditError, match=f"^caps: {name} (is|are) over"):
                audit(with_caps(sound, **{name: most}))

    def test_a_cap_on_the_latency_in_seconds_counts_the_cycles_of_the_block(
        self, bearing: Plan
    ) -> None:
        """6 cycles of 1.024 MHz are 5.859375 us."""
        assert fault(with_caps(bearing, latency="5.859375 us")) is None
        with pytest.raises(AuditError, match=r"^caps: latency is over its cap"):
            audit(with_caps(bearing, latency="5.859374 us"))

    def test_a_block_larger_than_its_cap_is_noticed(self, bearing: Plan) -> None:
        with pytest.raises(AuditError, match=r"^rate: J = 3 is over its cap"):
            audit(with_caps(bearing, parallelism=2))

    def test_samples_that_come_faster_are_noticed(self, gearbox: Plan) -> None:
        with pytest.raises(AuditError, match=r"^rate: N = 10 is more than the 9 cycles"):
            audit(with_table(gearbox, "requirement", clock="1.0239 MHz"))

    def test_another_delivery_is_noticed(self, bearing: Plan) -> None:
        with pytest.raises(AuditError, match=r"^ports: "):
            audit(with_table(bearing, "requirement", delivery="serial"))

    def test_other_coefficients_alone_are_no_fault_of_the_schedule(self, oscillator: Plan) -> None:
        equations = str(oscillator.design["algorithm"]["equations"])
        changed = equations.replace("1.5", "1.25")
        assert changed != equations
        assert fault(with_table(oscillator, "algorithm", equations=changed)) is None

    def test_another_algorithm_is_noticed(self, oscillator: Plan) -> None:
        equations = str(oscillator.design["algorithm"]["equations"])
        changed = equations.replace("n-2", "n-3")
        assert changed != equations
        assert fault(with_table(oscillator, "algorithm", equations=changed)) is not None

    def test_a_design_that_cannot_be_read_is_bad_input(self, gearbox: Plan) -> None:
        with pytest.raises(InputError, match=r"^the plan's design"):
            audit(replace(gearbox, design={"title": "Nothing"}))


# ---- the proof ---------------------------------------------------------------------------------


@pytest.fixture
def by_solver(gearbox: Plan) -> Plan:
    """A plan whose proof rests on two runs of a solver for one pair."""
    assert gearbox.value is not None
    verdicts = (SolverVerdict(1, 10, gearbox.value, 2), SolverVerdict(2, 20, None, 2))
    pairs = gearbox.proof.pairs
    return replace(gearbox, proof=Proof(pairs=pairs, by_floor=pairs - 2, by_solver=verdicts))


class TestProofsThatWereChanged:
    def test_a_proof_by_solver_stands(self, by_solver: Plan) -> None:
        assert audit(by_solver).checks[CHECKS.index("proof")].fact.endswith("2 of them by solver")

    @pytest.mark.parametrize(
        ("words", "change"),
        [
            ("a single solver run", {"runs": 1}),
            ("a single solver run", {"runs": 0}),
            ("allows a cheaper plan", {"bound": 21.0}),
            ("allows a cheaper plan", {"bound": -1.0}),
        ],
    )
    def test_a_verdict_that_proves_nothing_is_noticed(
        self, by_solver: Plan, words: str, change: dict[str, Any]
    ) -> None:
        for i, verdict in enumerate(by_solver.proof.by_solver):
            verdicts = list(by_solver.proof.by_solver)
            verdicts[i] = replace(verdict, **change)
            proof = replace(by_solver.proof, by_solver=tuple(verdicts))
            with pytest.raises(AuditError, match=f"^proof: .*{words}"):
                audit(replace(by_solver, proof=proof))

    def test_a_pair_that_was_left_out_is_noticed(self, by_solver: Plan) -> None:
        proof = replace(by_solver.proof, by_solver=by_solver.proof.by_solver[:1])
        with pytest.raises(AuditError, match=r"^proof: the proof leaves out a pair"):
            audit(replace(by_solver, proof=proof))

    @pytest.mark.parametrize("step", [-1, 1])
    @pytest.mark.parametrize("field", ["pairs", "by_floor"])
    def test_another_count_of_pairs_is_noticed(self, sound: Plan, field: str, step: int) -> None:
        number = getattr(sound.proof, field) + step
        with pytest.raises(AuditError, match=r"^proof: "):
            audit(replace(sound, proof=replace(sound.proof, **{field: number})))

    @pytest.mark.parametrize("more", [-1, 1, 1000])
    def test_pairs_that_the_design_does_not_have_are_noticed(self, sound: Plan, more: int) -> None:
        """The counts agree with each other, and not with the rate and the cap on J."""
        pairs = sound.proof.pairs + more
        with pytest.raises(AuditError, match=r"^proof: the rate allows \d+ pairs"):
            audit(replace(sound, proof=replace(sound.proof, pairs=pairs, by_floor=pairs)))

    @pytest.mark.parametrize(
        ("pair", "words"), [((1, 10), "twice"), ((1, 11), "is no pair"), ((5, 50), "is no pair")]
    )
    def test_a_verdict_on_a_pair_that_is_not_open_is_noticed(
        self, by_solver: Plan, pair: tuple[int, int], words: str
    ) -> None:
        first = by_solver.proof.by_solver[0]
        verdicts = (first, SolverVerdict(*pair, None, 2))
        with pytest.raises(AuditError, match=f"^proof: the proof tells .*{words}"):
            audit(replace(by_solver, proof=replace(by_solver.proof, by_solver=verdicts)))

    def test_an_open_plan_may_leave_out_pairs_and_not_count_them_twice(
        self, by_solver: Plan
    ) -> None:
        proof, opened = by_solver.proof, replace(by_solver, status=Status.OPEN, bound=1.0)
        assert fault(replace(opened, proof=replace(proof, by_floor=3))) is None
        with pytest.raises(AuditError, match=r"^proof: the proof counts a pair twice"):
            audit(replace(opened, proof=replace(proof, by_floor=proof.pairs)))


# ---- the hardware model ------------------------------------------------------------------------


class Crooked(Format):
    """Arithmetic whose additions are one step too large."""

    def apply(self, kind: str, left: Value, right: Value) -> Value:
        exact = super().apply(kind, left, right)
        return tuple(self.wrap(number + 1) for number in exact) if kind == "add" else exact


def crooked(of: Plan, graph: Any, form: Format, blocks: int) -> Hardware:
    return Hardware(of, graph, Crooked(form.width, form.fraction), blocks)


class TestTheModelOfTheHardware:
    def test_adders_that_are_off_by_one_are_noticed(
        self, gearbox: Plan, monkeypatch: pytest.MonkeyPatch
    ) -> None:
        monkeypatch.setattr(scheduler.audit, "Hardware", crooked)
        with pytest.raises(AuditError, match=r"^bits: .* computes \(.*\) for sample 0, not \("):
            audit(gearbox)

    def test_every_sample_is_compared(self, gearbox: Plan, monkeypatch: pytest.MonkeyPatch) -> None:
        """A fault in the last sample of the last stimulus of one signal alone is seen too."""

        class Tired(Hardware):
            def run(self, inputs: Any) -> Any:
                results = super().run(inputs)
                *lanes, last = results["y.out"][-1]
                results["y.out"] = [*results["y.out"][:-1], (*lanes, last ^ 1)]
                return results

        monkeypatch.setattr(scheduler.audit, "Hardware", Tired)
        with pytest.raises(AuditError, match=r"^bits: y.out computes"):
            audit(gearbox)

    @pytest.mark.parametrize("name", [FRACTIONAL, UNPIPELINED, ADAPTIVE])
    def test_it_notices_by_itself_what_is_lost_or_read_at_the_wrong_time(
        self, name: str, monkeypatch: pytest.MonkeyPatch
    ) -> None:
        """With every other rule silent: the two halves of the audit back each other up."""
        rules = [rule for rule in scheduler.audit._RULES if rule[0] == "bits"]
        monkeypatch.setattr(scheduler.audit, "_RULES", tuple(rules))
        before = plan(design_called(name))
        assert [check.name for check in audit(before).checks] == ["standing", "bits"]
        assert not accepted(
            (life.value, with_lifetime(before, i, replace(life, registers=life.registers[:-1])))
            for i, life in enumerate(before.lifetimes)
        )
        read = {edge.source for edge in before.edges}
        assert not accepted(
            (op.key, moved(before, op, cycles))
            for op in before.operations
            for cycles in (-1, 1, period(before))
            if op.key in read
        )


# ---- independence ------------------------------------------------------------------------------

PACKAGE = Path(scheduler.audit.__file__).parent


def imported_by(module: str) -> set[str]:
    """The modules of the package that one of them names in its imports, wherever they stand."""
    tree = ast.parse((PACKAGE / f"{module}.py").read_text(encoding="utf-8"))
    names: set[str] = set()
    for node in ast.walk(tree):
        if isinstance(node, ast.Import):
            names |= {alias.name for alias in node.names}
        elif isinstance(node, ast.ImportFrom):
            assert node.level == 0
            names |= {node.module or "", *(f"{node.module}.{alias.name}" for alias in node.names)}
    parts = [name.split(".") for name in names if name.split(".")[0] == "scheduler"]
    inner = {part[1] for part in parts if len(part) > 1}
    return {name for name in inner if (PACKAGE / f"{name}.py").exists()}


def reached_from(module: str) -> set[str]:
    seen, ahead = {"__init__", module}, {"__init__", module}
    while ahead:
        ahead = {name for each in ahead for name in imported_by(each)} - seen
        seen |= ahead
    return seen


class TestIndependence:
    SEARCHING = frozenset(
        ["formulation", "solver", "search", "compact", "windows", "pairs", "overall", "binding"]
    )

    def test_the_audit_shares_no_code_with_the_side_that_finds_plans(self) -> None:
        assert not reached_from("audit") & self.SEARCHING

    def test_the_side_that_finds_plans_would_have_been_seen(self) -> None:
        assert reached_from("planning") >= self.SEARCHING


# ---- every rule has something to say -----------------------------------------------------------


class TestEveryRule:
    def test_each_check_is_the_first_to_notice_something(
        self, gearbox: Plan, bearing: Plan, by_solver: Plan
    ) -> None:
        op = gearbox.operations[0]
        worker = next(op for op in gearbox.operations if op.unit == "adder")
        out = next(op for op in bearing.operations if op.name == "y.out" and op.copy == 1)
        changed = {
            "standing": replace(gearbox, bound=0.0),
            "rate": replace(gearbox, clock_period_ns=1.0),
            "operations": with_operation(gearbox, op, replace(op, busy=3)),
            "edges": replace(gearbox, edges=gearbox.edges[1:]),
            "precedence": moved(gearbox, worker, -100),
            "ports": moved(bearing, out, 1),
            "units": with_operation(gearbox, worker, replace(worker, instance=2)),
            "registers": replace(gearbox, lifetimes=gearbox.lifetimes[1:]),
            "latency": replace(gearbox, latency=1),
            "objective": replace(gearbox, value=1.0, bound=1.0),
            "caps": with_caps(gearbox, registers=0),
            "proof": replace(by_solver, proof=replace(by_solver.proof, by_floor=0)),
        }
        assert {name: (fault(plan) or "").split(":")[0] for name, plan in changed.items()} == {
            name: name for name in changed
        }
