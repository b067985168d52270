"""Windows never shut out a plan that is wanted."""

from __future__ import annotations

from fractions import Fraction

import pytest
from datapaths import biquads, datapath
from test_compact import solved

from scheduler.datapath import Block, Pair, block_of
from scheduler.formulation import Question, formulate
from scheduler.plan import Copy
from scheduler.solver import minimise
from scheduler.windows import near, size, windows


def ring() -> Block:
    """a -> m -> a, 3 cycles round the loop and 5 to spend, read by an output."""
    path = datapath(
        {"a": "adder", "m": "multiplier", "y": None},
        [("a", "m", 0), ("m", "a", 1), ("a", "y", 0)],
        cycles_per_sample=5,
        outputs=("y",),
    )
    return block_of(path, Pair(1, 5))


def test_a_loop_bounds_its_operations_from_both_sides() -> None:
    block = ring()
    found = windows(block, solved(block), Copy("a", 0), longest=100)
    assert found[Copy("a", 0)] == (0, 0)
    assert found[Copy("m", 0)] == (1, 3)
    assert found[Copy("y", 0)] == (1, 101)


def test_registers_to_spare_bound_the_rest() -> None:
    block = ring()
    # the sum waits for nobody, the product for two cycles: the loop has five, needs three
    assert solved(block).register_cycles == 2
    found = windows(block, solved(block), Copy("a", 0), longest=100, spare=1)
    # with three register cycles in all, the output can read the sum three cycles late at most
    assert found == {Copy("a", 0): (0, 0), Copy("m", 0): (1, 3), Copy("y", 0): (1, 4)}


def test_parts_that_no_edge_joins_are_pinned_apart() -> None:
    path = datapath(
        {"a": "adder", "b": "adder"}, [("a", "a", 1), ("b", "b", 1)], cycles_per_sample=4
    )
    block = block_of(path, Pair(1, 4))
    found = windows(block, solved(block), Copy("a", 0), longest=8)
    assert found == {Copy("a", 0): (0, 0), Copy("b", 0): (0, 3)}


def test_near_windows_lie_round_the_compact_starts() -> None:
    block = ring()
    found = near(block, solved(block), Copy("a", 0), 2)
    assert found[Copy("a", 0)] == (0, 0)
    assert all(last - first in (0, 4) for first, last in found.values())


def test_narrower_windows_leave_fewer_variables() -> None:
    block = ring()
    wide = windows(block, solved(block), Copy("a", 0), longest=100)
    assert size(near(block, solved(block), Copy("a", 0), 1), block) < size(wide, block)
    assert size({}, block) == 3 * 5


@pytest.mark.parametrize("pair", [Pair(1, 7), Pair(2, 13)])
@pytest.mark.parametrize("extra", [0, 1])
def test_no_plan_within_the_register_budget_is_shut_out(pair: Pair, extra: int) -> None:
    """The optimum with windows is the optimum without, for every budget of registers."""
    path = biquads(1, cycles_per_sample=Fraction(7))
    block = block_of(path, pair)
    found = solved(block)
    units = {name: kind.floor(pair) for name, kind in path.kinds.items()}
    registers = -(-found.register_cycles // pair.cycles)
    most = path.cost(units, registers + extra)
    room = windows(
        block,
        found,
        Copy("x", 0),
        longest=(registers + extra) * pair.cycles,
        spare=(registers + extra) * pair.cycles - found.register_cycles,
    )
    free = windows(block, found, Copy("x", 0), longest=(registers + extra) * pair.cycles)
    narrow, wide = (
        minimise(formulate(block, Question(units, 0, most, each)).program) for each in (room, free)
    )
    assert all(free[v][0] <= low and high <= free[v][1] for v, (low, high) in room.items())
    assert (narrow.stop, narrow.bound) == (wide.stop, wide.bound)
