"""The integer program says what it should, row by row and as a whole."""

from __future__ import annotations

from dataclasses import replace
from fractions import Fraction
from itertools import pairwise

import pytest
from datapaths import biquads, datapath, fir

from scheduler.datapath import Datapath, Pair, block_of
from scheduler.formulation import Cut, Question, Window, formulate
from scheduler.plan import Copy
from scheduler.search import search
from scheduler.solver import Manner, Program, Stop, minimise

PLAIN = Manner(preprocess="off")


def anything(path: Datapath, parallelism: int = 1) -> Question:
    """No floors and no ceiling; the first start is 0 and the others lie within reach."""
    copies = [Copy(name, i) for name in path.latency for i in range(parallelism)]
    reach = dict.fromkeys(copies, Window(-20, 20)) | {copies[0]: Window(0, 0)}
    return Question(dict.fromkeys(path.kinds, 0), 0, windows=reach)


def solved(
    path: Datapath, pair: Pair, question: Question | None = None
) -> tuple[dict[Copy, int], dict[str, int], int]:
    """Starts, units and registers of the optimum of one pair."""
    model = formulate(block_of(path, pair), question or anything(path, pair.parallelism))
    outcome = minimise(model.program, manner=PLAIN)
    assert outcome.point is not None
    units = {name: outcome.point[variable] for name, variable in model.units.items()}
    return model.starts(outcome.point), units, outcome.point[model.registers]


def test_staircases_fall_by_one_over_a_period_wherever_the_start() -> None:
    path = datapath({"a": "adder"}, [], cycles_per_sample=5)
    for start in (-7, -5, 0, 3, 4, 12):
        window = {Copy("a", 0): Window(start, start)}
        starts, _, _ = solved(path, Pair(1, 5), Question({"adder": 0}, 0, windows=window))
        assert starts == {Copy("a", 0): start}


def test_a_chain_waits_for_its_latencies() -> None:
    starts, units, registers = solved(fir(2, cycles_per_sample=4), Pair(1, 4))
    order = [starts[Copy(name, 0)] for name in ("x", "m0", "a1", "y")]
    gaps = [later - earlier for earlier, later in pairwise(order)]
    assert all(gap >= least for gap, least in zip(gaps, (0, 2, 1), strict=True))
    assert units == {"adder": 1, "multiplier": 1}
    assert registers >= 1


def test_operations_share_a_unit_in_different_slots() -> None:
    path = datapath({f"m{i}": "multiplier" for i in range(3)}, [], cycles_per_sample=3)
    starts, units, _ = solved(path, Pair(1, 3))
    assert units == {"multiplier": 1}
    assert {start % 3 for start in starts.values()} == {0, 1, 2}


def test_a_busy_unit_is_busy_for_all_its_cycles() -> None:
    path = datapath(
        {f"m{i}": "multiplier" for i in range(3)}, [], cycles_per_sample=6, multiplier_busy=2
    )
    starts, units, _ = solved(path, Pair(1, 6))
    assert units == {"multiplier": 1}
    slots = sorted(start % 6 for start in starts.values())
    assert slots[1] - slots[0] >= 2 and slots[2] - slots[1] >= 2 and slots[0] + 6 - slots[2] >= 2


@pytest.mark.parametrize("serial", [True, False])
def test_samples_of_a_block_arrive_evenly_or_at_once(serial: bool) -> None:
    path = fir(2, cycles_per_sample=Fraction(5, 3), serial=serial)
    starts, _, _ = solved(path, Pair(3, 5))
    for port in ("x", "y"):
        offsets = [starts[Copy(port, i)] - starts[Copy(port, 0)] for i in range(3)]
        assert offsets == ([0, 2, 4] if serial else [0, 0, 0])


def test_inputs_of_one_sample_arrive_together() -> None:
    path = datapath(
        {"x": None, "z": None, "m": "multiplier", "a": "adder"},
        [("x", "m", 0), ("m", "a", 0), ("z", "a", 0)],
        cycles_per_sample=3,
        inputs=("x", "z"),
    )
    starts, _, registers = solved(path, Pair(1, 3))
    assert starts[Copy("x", 0)] == starts[Copy("z", 0)]
    assert registers == 1  # z waits two cycles for the product


def test_a_value_with_several_readers_is_held_until_the_last() -> None:
    """Three delays of one sample each at N = 1: three registers, not one for every reader."""
    taps = [("x", "a", 1), ("x", "b", 2), ("x", "c", 3)]
    path = datapath(
        {"x": None, "a": "adder", "b": "adder", "c": "adder"},
        taps,
        cycles_per_sample=1,
        inputs=("x",),
    )
    question = Question(
        {"adder": 0}, 0, windows={Copy(name, 0): Window(0, 0) for name in path.latency}
    )
    assert solved(path, Pair(1, 1), question)[2] == 3


def test_a_cap_on_the_latency_holds() -> None:
    model = formulate(
        block_of(fir(3, cycles_per_sample=3, latency_cycles=3), Pair(1, 3)),
        anything(fir(3, cycles_per_sample=3)),
    )
    assert minimise(model.program, manner=PLAIN).stop is Stop.INFEASIBLE
    starts, _, _ = solved(fir(3, cycles_per_sample=3, latency_cycles=4), Pair(1, 3))
    assert starts[Copy("y", 0)] - starts[Copy("x", 0)] <= 4


def test_a_ceiling_on_the_cost_and_caps_hold() -> None:
    path = biquads(1, cycles_per_sample=5)
    _, units, registers = solved(path, Pair(1, 5))
    best = path.cost(units, registers)
    low = replace(anything(path), cost_most=best - 1)
    program = formulate(block_of(path, Pair(1, 5)), low).program
    assert minimise(program, manner=PLAIN).stop is Stop.INFEASIBLE
    capped = biquads(1, cycles_per_sample=5, area_most=best - 1)
    program = formulate(block_of(capped, Pair(1, 5)), anything(capped)).program
    assert minimise(program, manner=PLAIN).stop is Stop.INFEASIBLE


def test_a_cut_moves_an_operation_or_adds_a_unit() -> None:
    path = datapath({"a": "adder", "b": "adder"}, [], cycles_per_sample=2)
    window = {Copy("a", 0): Window(0, 0), Copy("b", 0): Window(1, 1)}
    cut = Cut("adder", ((Copy("a", 0), 0), (Copy("b", 0), 1)), 1)
    _, units, _ = solved(path, Pair(1, 2), Question({"adder": 0}, 0, windows=window))
    assert units == {"adder": 1}
    question = Question({"adder": 0}, 0, windows=window, cuts=(cut,))
    assert solved(path, Pair(1, 2), question)[1] == {"adder": 2}


def one_program(path: Datapath, pairs: list[Pair]) -> Program:
    """A single program over several pairs: a selector for each, of which one is set.

    The cost is at least that of the selected pair; the others are let off by a big number.
    """
    whole = Program()
    cost = whole.variable(0, None, 1)
    chosen = []
    for pair in pairs:
        fewest = {name: kind.floor(pair) for name, kind in path.kinds.items()}
        question = replace(anything(path, pair.parallelism), units=fewest)
        model = formulate(block_of(path, pair), question)
        first = len(whole.cost)
        for low, high in zip(model.program.lower, model.program.upper, strict=True):
            whole.variable(low, high)
        for row in model.program.rows:
            terms = [(first + variable, factor) for variable, factor in row.terms]
            whole.row(terms, low=row.low, high=row.high)
        selector = whole.variable(0, 1)
        chosen.append(selector)
        costs = [(first + v, -c) for v, c in enumerate(model.program.cost) if c]
        whole.row([(cost, 1), (selector, -1000), *costs], low=-1000)
    whole.row([(selector, 1) for selector in chosen], low=1, high=1)
    return whole


@pytest.mark.parametrize(
    ("path", "parallelism", "bound"),
    [
        (biquads(1, cycles_per_sample=Fraction(9, 2)), 2, Fraction(4)),
        (fir(3, cycles_per_sample=Fraction(3, 2)), 2, Fraction(0)),
        (fir(3, cycles_per_sample=Fraction(3, 2), multiplier_busy=2), 2, Fraction(0)),
        (fir(4, cycles_per_sample=Fraction(3)), 1, Fraction(0)),
    ],
)
def test_one_program_with_selectors_over_all_pairs_has_the_same_optimum(
    path: Datapath, parallelism: int, bound: Fraction
) -> None:
    pairs = [
        Pair(j, n)
        for j in range(1, parallelism + 1)
        for n in range(1, int(j * path.slowest) + 1)
        if n >= j * bound and n >= path.longest_busy
    ]
    assert len(pairs) > 1
    found = search(path, parallelism=parallelism, bound=bound).best
    assert found is not None
    assert minimise(one_program(path, pairs), manner=PLAIN).bound == found.cost
