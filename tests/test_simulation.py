"""The model of the hardware computes what the algorithm says, to the last bit, or says why not."""

from __future__ import annotations

import math
import random
from collections.abc import Sequence
from dataclasses import replace
from fractions import Fraction
from pathlib import Path

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from plans import random_plan
from scipy import signal

from scheduler.design import Algorithm, Design, design_from, find_design, load_design
from scheduler.equations import parse_equations
from scheduler.errors import AuditError
from scheduler.graph import Kind, graph_of
from scheduler.plan import Copy, Lifetime, Plan, PlannedOperation, Status
from scheduler.planning import plan as planned
from scheduler.simulation import Format, Hardware, Stream, evaluate, format_for, stimuli
from scheduler.structures import STRUCTURES, Coefficients, equations_text

PLAIN = Format(24, 16)
ONE = 1 << 16
LOW, HIGH = -(1 << 23), (1 << 23) - 1

# ---- numbers -----------------------------------------------------------------------------------


class TestNumbers:
    @given(st.integers(-(2**60), 2**60))
    def test_the_lowest_bits_are_kept(self, number: int) -> None:
        """As numpy casts to 32 bits."""
        with np.errstate(all="ignore"):
            assert Format(32, 16).wrap(number) == int(np.int64(number).astype(np.int32))

    @given(st.integers(1, 16), st.integers(-(2**140), 2**140))
    def test_the_lowest_bits_are_read_as_python_reads_bytes(self, count: int, number: int) -> None:
        lowest = (number % 256**count).to_bytes(count, "big")
        wrapped = Format(8 * count, 4).wrap(number)
        assert wrapped == int.from_bytes(lowest, "big", signed=True)

    @given(st.integers(-(2**99), 2**99 - 1), st.integers(-(2**59), 2**59))
    def test_a_hundred_bits_are_exact(self, left: int, right: int) -> None:
        wide, size = Format(100, 60), 2**100
        wanted = {
            "add": left + right,
            "subtract": left - right,
            "multiply": math.floor(Fraction(left * right, 2**60)),
        }
        for kind, exact in wanted.items():
            (result,) = wide.apply(kind, (left,), (right,))
            assert (result - exact) % size == 0
            assert -size // 2 <= result < size // 2

    @given(st.fractions(min_value=-4, max_value=4))
    def test_no_constant_is_more_than_half_a_step_away(self, value: Fraction) -> None:
        for form in (PLAIN, Format(100, 60)):
            assert abs(form.constant(value) - value * 2**form.fraction) <= Fraction(1, 2)

    def test_one_step_above_the_largest_is_the_smallest(self) -> None:
        assert PLAIN.apply("add", (HIGH,), (1,)) == (LOW,)
        assert PLAIN.apply("subtract", (LOW,), (1,)) == (HIGH,)

    def test_a_subtraction_takes_the_second_from_the_first(self) -> None:
        assert PLAIN.apply("subtract", (7, 0), (2, 5)) == (5, -5)

    def test_a_product_is_cut_off_towards_minus_infinity(self) -> None:
        assert PLAIN.apply("multiply", (ONE // 2,), (3,)) == (1,)
        assert PLAIN.apply("multiply", (ONE // 2,), (-3,)) == (-2,)

    def test_a_product_that_is_too_large_wraps(self) -> None:
        """100 * 2 = 200, which 8 bits before the point hold as 200 - 256."""
        assert PLAIN.apply("multiply", (100 * ONE,), (2 * ONE,)) == (-56 * ONE,)

    @pytest.mark.parametrize(
        ("value", "steps"),
        [("1/131072", 1), ("-1/131072", 0), ("3/131072", 2), ("0.1", 6554), ("-0.1", -6554)],
    )
    def test_a_constant_goes_to_the_nearest_step_and_up_from_halfway(
        self, value: str, steps: int
    ) -> None:
        assert PLAIN.constant(Fraction(value)) == steps

    @pytest.mark.parametrize(
        ("value", "width"),
        [("127.99999", 24), ("128", 25), ("-127.99999", 24), ("-129", 25), ("1000", 27)],
    )
    def test_the_format_is_as_wide_as_the_largest_constant_needs(
        self, value: str, width: int
    ) -> None:
        graph = graph_of(parse_equations(f"y[n] = {value}*x[n]", ["x"], ["y"]), ["x"], ["y"])
        form = format_for(graph)
        assert form == Format(width, 16)
        number = form.constant(Fraction(value))
        assert form.wrap(number) == number

    def test_the_stimuli_are_extremes_an_impulse_a_step_and_noise(self) -> None:
        made = stimuli(["x", "u"], 50, PLAIN)
        lanes = list(zip(*made["x"], strict=True))
        assert lanes[0] == (LOW,) * 50
        assert lanes[1] == (HIGH,) * 50
        assert lanes[2] == (HIGH, LOW) * 25
        assert lanes[3] == (ONE, *(0,) * 49)
        assert lanes[4] == (ONE,) * 50
        assert len({*lanes[5], *lanes[6]}) == 100
        assert made["u"] != made["x"]
        assert made == stimuli(["x", "u"], 50, PLAIN)


# ---- the algorithm -----------------------------------------------------------------------------


def algorithm(
    text: str, inputs: Sequence[str] = ("x",), outputs: Sequence[str] = ("y",)
) -> Algorithm:
    equations = parse_equations(text, inputs, outputs)
    graph = graph_of(equations, inputs, outputs)
    return Algorithm(graph, equations, tuple(inputs), tuple(outputs))


def without_equations(of: Algorithm) -> Algorithm:
    ports = of.graph.of_kind(Kind.OUTPUT)
    return replace(of, equations=(), outputs=tuple(port.name for port in ports))


def one_lane(*numbers: int) -> Stream:
    return [(number,) for number in numbers]


SOS = [[0.25, 0.5, 0.25, 1, -0.9, 0.5], [0.5, -0.25, 0.125, 1, 0.3, 0.6]]
TAPS = [1, 0.3, -0.4, 0.1, 0.05]
REFLECTIONS = [0.5, -0.3, 0.2]


def coefficients_for(structure: str) -> Coefficients:
    if structure.startswith("biquads"):
        return SOS
    return REFLECTIONS if structure.startswith("lattice") else TAPS


def filtered_by_scipy(structure: str, x: np.ndarray) -> np.ndarray:
    if structure.startswith("biquads"):
        return np.asarray(signal.sosfilt(SOS, x))
    if structure == "all-pole":
        return np.asarray(signal.lfilter([1], TAPS, x))
    return np.asarray(signal.lfilter(TAPS, [1], x))


def largest_error(structure: str, form: Format) -> float:
    """How far a structure's output ever is from scipy's, for noise between -1 and 1."""
    of = algorithm(equations_text(structure, coefficients_for(structure)))
    noise = np.random.default_rng(3).integers(-(2**12), 2**12, 150)  # exact in every format here
    samples = one_lane(*(int(value) << (form.fraction - 12) for value in noise))
    y = evaluate(of, {"x": samples}, len(samples), form)["y"]
    wanted = filtered_by_scipy(structure, noise / 2**12)
    return float(np.abs([value / 2**form.fraction for (value,) in y] - wanted).max())


class TestTheAlgorithm:
    @pytest.mark.parametrize("structure", [s for s in STRUCTURES if "lattice" not in s])
    def test_a_structure_filters_as_scipy_does_but_for_what_is_cut_off(
        self, structure: str
    ) -> None:
        """scipy.signal.lfilter and sosfilt; the bound is 120 steps of the last fraction bit.

        Ten products at most; each is off by one step that is cut off and by half a step of its
        coefficient, times values below 4; no gain from there to the output is above 4.
        """
        for form in (Format(64, 40), PLAIN):
            assert 0 < largest_error(structure, form) < 120 / 2**form.fraction
        assert largest_error(structure, Format(64, 48)) < 120 / 2**48

    @pytest.mark.parametrize("structure", STRUCTURES)
    def test_a_structure_and_its_graph_agree_on_every_signal(self, structure: str) -> None:
        of = algorithm(equations_text(structure, coefficients_for(structure)))
        inputs = stimuli(["x"], 40, PLAIN)
        by_text = evaluate(of, inputs, 40, PLAIN)
        by_graph = evaluate(without_equations(of), inputs, 40, PLAIN)
        assert by_graph.pop("y.out") == by_text["y"]
        assert len(by_graph) > 5
        assert by_graph == {name: by_text[name] for name in by_graph}

    def test_samples_before_the_first_are_zero(self) -> None:
        streams = evaluate(algorithm("y[n] = x[n-3]"), {"x": one_lane(5, 6, 7, 8)}, 4, PLAIN)
        assert streams["y"] == one_lane(0, 0, 0, 5)

    def test_every_operation_of_an_equation_is_told_by_its_name(self) -> None:
        of = algorithm("y[n] = (x[n] + 1)*2 - x[n-1]")
        streams = evaluate(of, {"x": one_lane(ONE, 3 * ONE)}, 2, PLAIN)
        assert streams["y.1"] == one_lane(2 * ONE, 4 * ONE)
        assert streams["y.2"] == one_lane(4 * ONE, 8 * ONE)
        assert streams["y"] == one_lane(4 * ONE, 7 * ONE)

    def test_equations_are_computed_in_the_order_in_which_they_need_each_other(self) -> None:
        of = algorithm("y[n] = a[n] + b[n]\na[n] = b[n] - x[n]\nb[n] = x[n] + x[n]")
        streams = evaluate(of, {"x": one_lane(10)}, 1, PLAIN)
        assert (streams["b"], streams["a"], streams["y"]) == ([(20,)], [(10,)], [(30,)])

    @given(st.lists(st.integers(-9, 9), min_size=1, max_size=6), st.integers(0, 2**32))
    def test_a_filter_of_whole_coefficients_is_an_exact_convolution(
        self, taps: list[int], seed: int
    ) -> None:
        """numpy.convolve; with small samples nothing wraps and nothing is cut off."""
        samples = [random.Random(seed + n).randint(-ONE, ONE) for n in range(20)]
        text = "y[n] = " + " + ".join(f"({c})*x[n-{k}]" for k, c in enumerate(taps))
        streams = evaluate(algorithm(text), {"x": one_lane(*samples)}, 20, PLAIN)
        assert [value for (value,) in streams["y"]] == list(np.convolve(samples, taps)[:20])

    def test_a_resonator_is_close_to_what_floating_point_gives(self) -> None:
        """scipy.signal.lfilter; 16 fraction bits, and a gain of less than 10 for rounding."""
        of = algorithm("y[n] = 0.25*x[n] + 1.5*y[n-1] - 0.75*y[n-2]")
        noise = np.random.default_rng(7).uniform(-1, 1, 200)
        samples = [int(value) for value in np.floor(noise * ONE)]
        streams = evaluate(of, {"x": one_lane(*samples)}, 200, PLAIN)
        wanted = signal.lfilter([0.25], [1, -1.5, 0.75], np.array(samples) / ONE)
        assert np.abs(np.array(streams["y"])[:, 0] / ONE - wanted).max() < 30 / ONE

    def test_stimuli_side_by_side_do_not_meet(self) -> None:
        of = algorithm("y[n] = 0.3*x[n] + 0.9*y[n-1]")
        both = stimuli(["x"], 30, PLAIN)
        together = evaluate(of, both, 30, PLAIN)
        for lane in range(7):
            alone = {"x": one_lane(*(value[lane] for value in both["x"]))}
            assert evaluate(of, alone, 30, PLAIN)["y"] == [(v[lane],) for v in together["y"]]

    @pytest.mark.parametrize(
        "text",
        [
            "y[n] = 0.7*x[n] - 0.3*x[n-2]*y[n-1]",
            "y[n] = (x[n] + w[n-1])*(x[n-1] - 2)\nw[n] = y[n-2]",
            "y[n] = 3 - x[n]",
        ],
    )
    def test_equations_and_their_graph_compute_the_same(self, text: str) -> None:
        of = algorithm(text)
        inputs = stimuli(["x"], 40, PLAIN)
        by_text = evaluate(of, inputs, 40, PLAIN)
        by_graph = evaluate(without_equations(of), inputs, 40, PLAIN)
        assert by_graph["y.out"] == by_text["y"]
        inner = [op.name for op in of.graph.operations if not op.is_port]
        assert {name: by_graph[name] for name in inner} == {name: by_text[name] for name in inner}

    def test_an_algorithm_without_inputs_runs_by_itself(self) -> None:
        streams = evaluate(algorithm("y[n] = y[n-1] + 1", inputs=()), {}, 3, PLAIN)
        assert streams["y"] == one_lane(ONE, 2 * ONE, 3 * ONE)


# ---- the hardware ------------------------------------------------------------------------------


def design(text: str, cycles: str) -> Design:
    tables = {
        "title": "By hand",
        "algorithm": {"inputs": ["x"], "outputs": ["y"], "equations": text},
        "requirement": {"cycles_per_sample": cycles},
        "technology": {"use": "unit-time"},
    }
    return design_from(tables, "a test", Path())


def port(name: str, start: int, n: int) -> PlannedOperation:
    return PlannedOperation(name, 0, None, None, start, start % n, start // n, 0, 0)


def adder(name: str, start: int, n: int, instance: int = 0) -> PlannedOperation:
    return PlannedOperation(name, 0, "adder", instance, start, start % n, start // n, 1, 1)


def multiplier(name: str, start: int, n: int, busy: int = 1) -> PlannedOperation:
    return PlannedOperation(name, 0, "multiplier", 0, start, start % n, start // n, 2, busy)


def held(name: str, first: int, *registers: int) -> Lifetime:
    return Lifetime(Copy(name, 0), first, registers)


def by_hand(text: str, n: int, operations: Sequence[PlannedOperation], *lives: Lifetime) -> Plan:
    """A plan of one sample a block; only what the model of the hardware looks at is filled in."""
    return Plan(
        title="By hand",
        status=Status.OPEN,
        value=1.0,
        bound=0.0,
        design=design(text, str(n)).document(),
        parallelism=1,
        cycles=n,
        operations=tuple(operations),
        lifetimes=lives,
    )


def run(plan: Plan, samples: Sequence[int]) -> dict[str, list[int]]:
    """What every operation of a plan of one sample a block computes."""
    graph = design_from(plan.design, "a plan", Path()).algorithm.graph
    results = Hardware(plan, graph, PLAIN, len(samples)).run({"x": one_lane(*samples)})
    return {name: [value for (value,) in stream] for name, stream in results.items()}


LOOP = "y[n] = x[n] + 0.5*y[n-1]"


def loop(x: int = 2, product: int = 0, total: int = 2, out: int = 3) -> list[PlannedOperation]:
    """The loop in three cycles, its two operations back to back."""
    return [
        port("x", x, 3),
        multiplier("y.1", product, 3),
        adder("y", total, 3),
        port("y.out", out, 3),
    ]


def two_products(second: int) -> Plan:
    """Two products one after the other on a multiplier that is busy for two of four cycles."""
    operations = [
        port("x", 0, 4),
        multiplier("y.1", 0, 4, busy=2),
        multiplier("y", second, 4, busy=2),
        port("y.out", second + 2, 4),
    ]
    waits = [0] * (second - 2)
    lives = [held("y.1", 3, *waits)] if waits else []
    return by_hand("y[n] = 2*x[n] * 3", 4, operations, *lives)


class TestTheHardware:
    def test_a_loop_that_is_just_in_time_needs_no_register(self) -> None:
        results = run(by_hand(LOOP, 3, loop()), [8, 0, 0, 16, 0])
        assert results["y.out"] == [8, 4, 2, 17, 8]
        assert results["y.1"] == [0, 4, 2, 1, 8]

    def test_a_sample_that_comes_early_is_read_from_its_register(self) -> None:
        """In register 1 for a cycle, then in register 0."""
        plan = by_hand(LOOP, 3, loop(x=0), held("x", 1, 1, 0))
        assert run(plan, [8, 0, 0, 16, 0])["y.out"] == [8, 4, 2, 17, 8]

    def test_an_early_sample_without_a_register_is_lost(self) -> None:
        with pytest.raises(AuditError, match=r"^y\(0\) finds no x\(0\) of block 0 in cycle 2$"):
            run(by_hand(LOOP, 3, loop(x=0)), [8, 0])

    def test_a_register_that_lets_go_too_soon_is_noticed(self) -> None:
        with pytest.raises(AuditError, match=r"^y\(0\) finds no x\(0\) of block 0 in cycle 2$"):
            run(by_hand(LOOP, 3, loop(x=0), held("x", 1, 0)), [8, 0])

    def test_a_register_that_takes_up_too_late_finds_nothing(self) -> None:
        with pytest.raises(AuditError, match=r"^register 0 finds no x\(0\) of block 0 in cycle 2$"):
            run(by_hand(LOOP, 3, loop(x=0), held("x", 2, 0)), [8, 0])

    def test_a_result_read_before_it_is_there_is_noticed(self) -> None:
        """The product leaves the multiplier in cycle 2, the sum would start in cycle 1."""
        with pytest.raises(AuditError, match=r"^y\(0\) finds no y.1\(0\) of block 0 in cycle 1$"):
            run(by_hand(LOOP, 3, loop(x=1, total=1)), [8, 0])

    def test_what_comes_before_time_zero_reads_as_zero_though_it_was_never_there(self) -> None:
        """The first product reads y of block -1; every later one has to find its y."""
        plan = by_hand(LOOP, 3, loop(product=-1, x=1, total=1, out=2))
        assert run(plan, [8, 0, 0])["y.out"] == [8, 4, 2]
        late = by_hand(LOOP, 3, loop(product=-2))
        with pytest.raises(AuditError, match=r"^y.1\(0\) finds no y\(0\) of block 0 in cycle 1$"):
            run(late, [8, 0])

    def test_two_values_in_one_register_are_noticed(self) -> None:
        """x of one block is held while that of the next arrives."""
        text = "y[n] = x[n] + x[n-1]"
        operations = [port("x", 0, 2), adder("y", 0, 2), port("y.out", 1, 2)]
        assert run(by_hand(text, 2, operations, held("x", 1, 0, 0)), [1, 2, 3])["y"] == [1, 3, 5]
        late = [port("x", 0, 2), adder("y", 1, 2), port("y.out", 2, 2)]
        fine = by_hand(text, 2, late, held("x", 1, 0, 1, 1))
        assert run(fine, [1, 2, 3])["y"] == [1, 3, 5]
        with pytest.raises(AuditError, match=r"^register 0 is to hold both x\(0\) of block"):
            run(by_hand(text, 2, late, held("x", 1, 0, 0, 0)), [1, 2, 3])

    def test_two_operations_on_one_unit_in_one_cycle_are_noticed(self) -> None:
        text = "y[n] = x[n] + x[n-1] + x[n-2]"
        lives = [held("x", 1, 0, 1), held("y.1", 2, 3)]
        wrong = [port("x", 0, 1), adder("y.1", 0, 1), adder("y", 1, 1), port("y.out", 2, 1)]
        with pytest.raises(AuditError, match=r"starts on a unit that is busy in cycle 1$"):
            run(by_hand(text, 1, wrong, *lives), [1, 2, 3])

    def test_a_unit_that_is_busy_for_two_cycles_takes_nothing_in_the_second(self) -> None:
        """The second product in cycles 2 and 3 leaves the next block's first one alone."""
        assert run(two_products(second=2), [1, 2])["y"] == [6, 12]
        with pytest.raises(AuditError, match=r"^y.1\(0\) starts on a unit .* busy in cycle 4$"):
            run(two_products(second=3), [1, 2])

    @given(st.integers(0, 10**9))
    @settings(max_examples=60)
    def test_a_plan_of_any_graph_computes_the_algorithm_to_the_last_bit(self, seed: int) -> None:
        """Unfolded, folded, retimed; serial and block; starts before zero; by no solver's hand."""
        plan = random_plan(random.Random(seed))
        assert plan.parallelism is not None
        of = design_from(plan.design, "a plan", Path()).algorithm
        form = format_for(of.graph)
        inputs = stimuli(of.inputs, 12 * plan.parallelism, form)
        wanted = evaluate(of, inputs, 12 * plan.parallelism, form)
        assert Hardware(plan, of.graph, form, 12).run(inputs) == wanted

    @given(st.integers(0, 10**9))
    @settings(max_examples=30)
    def test_a_value_that_is_let_go_a_cycle_too_soon_is_missed(self, seed: int) -> None:
        plan = random_plan(random.Random(seed))
        of = design_from(plan.design, "a plan", Path()).algorithm
        form = format_for(of.graph)
        for index, life in enumerate(plan.lifetimes):
            shorter = replace(life, registers=life.registers[:-1])
            lives = (*plan.lifetimes[:index], shorter, *plan.lifetimes[index + 1 :])
            blocks = 12 + len(life.registers)
            inputs = stimuli(of.inputs, blocks * (plan.parallelism or 1), form)
            with pytest.raises(AuditError, match="finds no"):
                Hardware(replace(plan, lifetimes=lives), of.graph, form, blocks).run(inputs)


@pytest.fixture(scope="module")
def gearbox() -> Plan:
    """What the planner makes of a shipped design."""
    return planned(load_design(find_design("gearbox-vibration-band")))


def run_all(plan: Plan, blocks: int = 6) -> None:
    """Runs a plan of one sample a block and compares all that it computes."""
    of = design_from(plan.design, "a plan", Path()).algorithm
    form = format_for(of.graph)
    inputs = stimuli(of.inputs, blocks, form)
    results = Hardware(plan, of.graph, form, blocks).run(inputs)
    assert results == evaluate(without_equations(of), inputs, blocks, form)


def with_operation(plan: Plan, op: PlannedOperation, **changed: int | None) -> Plan:
    operations = [replace(each, **changed) if each is op else each for each in plan.operations]
    return replace(plan, operations=tuple(operations))


class TestTheHardwareOfAPlannedDesign:
    def test_computes_the_algorithm_to_the_last_bit(self, gearbox: Plan) -> None:
        assert gearbox.parallelism == 1
        run_all(gearbox, blocks=40)

    def test_a_register_that_another_value_has_is_noticed(self, gearbox: Plan) -> None:
        """Every step of every value, moved to each register that is taken in that slot."""
        n = gearbox.cycles or 0
        taken = {
            ((life.first + age) % n, register)
            for life in gearbox.lifetimes
            for age, register in enumerate(life.registers)
        }
        moved = 0
        for index, life in enumerate(gearbox.lifetimes):
            for age, right in enumerate(life.registers):
                slot = (life.first + age) % n
                for wrong in {register for at, register in taken if at == slot} - {right}:
                    registers = (*life.registers[:age], wrong, *life.registers[age + 1 :])
                    lives = list(gearbox.lifetimes)
                    lives[index] = replace(life, registers=registers)
                    with pytest.raises(AuditError, match=f"register {wrong} is to hold both"):
                        run_all(replace(gearbox, lifetimes=tuple(lives)))
                    moved += 1
        assert moved > len(gearbox.lifetimes)

    def test_an_instance_that_another_operation_has_is_noticed(self, gearbox: Plan) -> None:
        pairs = [
            (op, other)
            for op in gearbox.operations
            for other in gearbox.operations
            if op is not other and op.unit is not None
            if (op.unit, op.slot) == (other.unit, other.slot)
        ]
        assert pairs
        for op, other in pairs:
            assert op.instance != other.instance
            with pytest.raises(AuditError, match="starts on a unit that is busy"):
                run_all(with_operation(gearbox, op, instance=other.instance))
            swapped = with_operation(gearbox, other, instance=op.instance)
            run_all(with_operation(swapped, op, instance=other.instance))  # nobody minds

    def test_whatever_starts_a_cycle_early_is_noticed(self, gearbox: Plan) -> None:
        """Its operands are not there, or its own result is gone when it is read."""
        for op in gearbox.operations:
            with pytest.raises(AuditError, match=r"finds no|busy"):
                run_all(with_operation(gearbox, op, start=op.start - 1))
