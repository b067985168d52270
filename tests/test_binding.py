"""Bindings use as little hardware as there can be, and nothing meets anything on it."""

from __future__ import annotations

from collections import Counter
from collections.abc import Iterable, Mapping
from itertools import combinations_with_replacement, pairwise

from hypothesis import assume, given
from hypothesis import strategies as st

from scheduler.binding import allocate_registers, bind_instances, lifetimes, most_alive
from scheduler.datapath import BlockEdge
from scheduler.plan import Copy, Lifetime

# ---- instances ---------------------------------------------------------------------------------


def operations(*starts: int) -> dict[Copy, int]:
    return {Copy(f"v{i}", 0): start for i, start in enumerate(starts)}


def slots_of(start: int, busy: int, cycles: int) -> set[int]:
    return {cycle % cycles for cycle in range(start, start + busy)}


def fewest(starts: Iterable[int], busy: int, cycles: int) -> int:
    """The fewest instances, by trying every binding."""
    arcs = [slots_of(start, busy, cycles) for start in starts]

    def binds(rest: list[set[int]], taken: list[set[int]]) -> bool:
        if not rest:
            return True
        arc, *others = rest
        empty_tried = False
        for place, busy_slots in enumerate(taken):
            if busy_slots & arc or (not busy_slots and empty_tried):
                continue
            empty_tried |= not busy_slots
            if binds(others, [*taken[:place], busy_slots | arc, *taken[place + 1 :]]):
                return True
        return False

    return next(count for count in range(len(arcs) + 1) if binds(arcs, [set()] * count))


def highest_load(starts: Iterable[int], busy: int, cycles: int) -> int:
    load = Counter(slot for start in starts for slot in slots_of(start, busy, cycles))
    return max(load.values(), default=0)


def is_binding(
    bound: Mapping[Copy, int] | None, starts: Mapping[Copy, int], busy: int, cycles: int, most: int
) -> bool:
    """Every operation on an instance that is there, and no two on one in the same slot."""
    if bound is None or bound.keys() != starts.keys():
        return False
    places = [
        (bound[copy], slot) for copy in starts for slot in slots_of(starts[copy], busy, cycles)
    ]
    return len(places) == len(set(places)) and set(bound.values()) <= set(range(most))


@st.composite
def arcs(
    draw: st.DrawFn, most_operations: int, busy: int | None = None
) -> tuple[list[int], int, int]:
    """Starts, busy cycles and the period."""
    cycles = draw(st.integers(busy or 1, 16))
    busy = busy or draw(st.integers(1, cycles))
    starts = draw(st.lists(st.integers(-20, 40), max_size=most_operations))
    return starts, busy, cycles


class TestInstances:
    def test_small_cases_need_what_trying_everything_says(self) -> None:
        """Every set of up to five operations in up to six cycles."""
        for cycles in range(1, 7):
            for busy in range(1, cycles + 1):
                for count in range(6):
                    for slots in combinations_with_replacement(range(cycles), count):
                        needed = fewest(slots, busy, cycles)
                        starts = operations(*slots)
                        bound = bind_instances(starts, busy, cycles, needed)
                        assert is_binding(bound, starts, busy, cycles, needed), (
                            slots,
                            busy,
                            cycles,
                        )
                        if needed:
                            assert bind_instances(starts, busy, cycles, needed - 1) is None

    @given(arcs(most_operations=9))
    def test_larger_cases_need_what_trying_everything_says(
        self, case: tuple[list[int], int, int]
    ) -> None:
        slots, busy, cycles = case
        needed, starts = fewest(slots, busy, cycles), operations(*slots)
        for most in range(len(slots) + 1):
            bound = bind_instances(starts, busy, cycles, most)
            if most < needed:
                assert bound is None
            else:
                assert is_binding(bound, starts, busy, cycles, most)

    @given(arcs(most_operations=80, busy=1))
    def test_one_busy_cycle_needs_the_highest_load(self, case: tuple[list[int], int, int]) -> None:
        slots, busy, cycles = case
        assert_needs(highest_load(slots, 1, cycles), slots, busy, cycles)

    @given(arcs(most_operations=80, busy=2))
    def test_two_busy_cycles_need_the_highest_load_or_what_the_count_says(
        self, case: tuple[list[int], int, int]
    ) -> None:
        """An instance holds floor(N / 2); besides the load that is all there is to it.

        Arcs of two slots are edges of a ring of N nodes, and multigraphs on an odd ring are
        coloured with max(degree, ceil(edges / floor(N / 2))) colours (from memory).
        """
        slots, busy, cycles = case
        assume(cycles > 2)
        held = -(-len(slots) // (cycles // 2))
        assert_needs(max(highest_load(slots, 2, cycles), held), slots, busy, cycles)

    def test_five_that_cover_every_slot_twice_need_three(self) -> None:
        assert highest_load(range(5), 2, 5) == 2
        assert_needs(3, range(5), 2, 5)

    def test_three_of_two_cycles_in_three_need_three(self) -> None:
        assert_needs(3, [0, 1, 2], 2, 3)

    def test_an_operation_that_straddles_the_period_can_share_the_instance_of_any_other(
        self,
    ) -> None:
        """The one in slots 4 and 0 goes with 2, 3; giving it 1, 2 because they fit fails."""
        assert_needs(2, [1, 2, 3, 4], 2, 5)
        assert_needs(2, [1, 2, 3, 4, 5, 6], 2, 7)

    def test_neither_load_nor_count_tells_what_three_busy_cycles_need(self) -> None:
        """Five in nine cycles: load 2, and two instances could hold six."""
        assert highest_load([0, 1, 3, 5, 7], 3, 9) == 2
        assert_needs(3, [0, 1, 3, 5, 7], 3, 9)

    def test_operations_busy_for_the_whole_period_share_nothing(self) -> None:
        assert_needs(4, [0, 0, 2, 4], 5, 5)

    def test_an_operation_busy_for_longer_than_the_period_fits_nowhere(self) -> None:
        assert bind_instances(operations(0), 3, 2, 5) is None

    def test_nothing_needs_nothing(self) -> None:
        assert bind_instances({}, 1, 4, 0) == {}
        assert bind_instances(operations(0), 1, 4, 0) is None

    def test_stages_do_not_matter(self) -> None:
        near, far = operations(1, 2, 3, 4), operations(-9, 12, 3, -96)
        assert [s % 5 for s in near.values()] == [s % 5 for s in far.values()]
        assert bind_instances(near, 2, 5, 2) == bind_instances(far, 2, 5, 2)

    def test_the_order_in_which_operations_come_does_not_matter(self) -> None:
        starts = operations(3, 0, 5, 5, 1, 2)
        turned = dict(reversed(starts.items()))
        assert bind_instances(starts, 2, 7, 3) == bind_instances(turned, 2, 7, 3)

    def test_no_instance_is_left_without_work_where_there_is_enough(self) -> None:
        bound = bind_instances(operations(0, 2, 4, 6), 1, 8, 3)
        assert bound is not None
        assert set(bound.values()) == {0, 1, 2}

    def test_five_hundred_operations_on_full_instances_are_bound(self) -> None:
        """Sixteen instances of 100 cycles, each with 33 operations of 3, all staggered."""
        starts = operations(*(7 * lane + 3 * place for lane in range(16) for place in range(33)))
        assert is_binding(bind_instances(starts, 3, 100, 16), starts, 3, 100, 16)
        assert bind_instances(starts, 3, 100, 15) is None


def assert_needs(count: int, slots: Iterable[int], busy: int, cycles: int) -> None:
    starts = operations(*slots)
    assert is_binding(bind_instances(starts, busy, cycles, count), starts, busy, cycles, count)
    if count:
        assert bind_instances(starts, busy, cycles, count - 1) is None


# ---- lifetimes ---------------------------------------------------------------------------------

U, V, W = Copy("u", 0), Copy("v", 0), Copy("w", 0)
LATENCY = {"x": 0, "u": 1, "v": 2, "w": 1}


class TestLifetimes:
    def test_a_result_is_held_from_the_cycle_after_it_leaves_to_the_last_reading(self) -> None:
        starts = {U: 3, V: 6, W: 8}
        edges = [BlockEdge(U, V, 0), BlockEdge(U, W, 0)]
        assert lifetimes(starts, LATENCY, edges, 10) == {U: range(5, 9)}

    def test_a_delay_of_a_block_is_a_period(self) -> None:
        edges = [BlockEdge(U, V, 2)]
        assert lifetimes({U: 3, V: 1}, LATENCY, edges, 10) == {U: range(5, 22)}

    def test_a_result_that_is_read_as_it_leaves_needs_no_register(self) -> None:
        assert lifetimes({U: 3, V: 4}, LATENCY, [BlockEdge(U, V, 0)], 10) == {}

    def test_a_sample_that_is_read_as_it_arrives_needs_none_and_is_held_from_then_on(self) -> None:
        x = Copy("x", 1)
        edges = [BlockEdge(x, V, 0)]
        assert lifetimes({x: 5, V: 5}, LATENCY, edges, 10) == {}
        assert lifetimes({x: 5, V: 7}, LATENCY, edges, 10) == {x: range(6, 8)}

    def test_a_result_that_nobody_reads_needs_none(self) -> None:
        assert lifetimes({U: 0}, LATENCY, [], 10) == {}

    def test_starts_before_zero_are_as_good_as_any(self) -> None:
        edges = [BlockEdge(U, V, 0)]
        assert lifetimes({U: -7, V: -2}, LATENCY, edges, 4) == {U: range(-5, -1)}

    def test_published_lifetimes_need_two_registers(self) -> None:
        """Parhi, VLSI Digital Signal Processing Systems, 1999, section 6.3.1, first example."""
        held = {Copy(name, 0): range(*ends) for name, ends in
                {"a": (1, 5), "b": (2, 8), "c": (5, 8)}.items()}  # fmt: skip
        assert most_alive(held, 100) == 2

    def test_nothing_held_needs_no_register(self) -> None:
        assert most_alive({}, 3) == 0
        assert allocate_registers({}, 3) == ()

    @given(st.data())
    def test_in_blocks_of_one_cycle_they_are_the_delays_of_retiming(
        self, data: st.DataObject
    ) -> None:
        """At N = 1 an edge holds w + r(v) - r(u) - l(u), the longest of a result's edges counting.

        Leiserson and Saxe, Algorithmica 6, 1991.
        """
        names = ["u", "v", "w", "x"]
        stage = {name: data.draw(st.integers(-3, 3)) for name in names}
        edges = [
            (u, v, LATENCY[u] + stage[u] - stage[v] + data.draw(st.integers(0, 3)))
            for u in names
            for v in data.draw(st.lists(st.sampled_from(names), max_size=3))
        ]
        longest: dict[str, int] = {}
        for u, v, w in edges:
            longest[u] = max(longest.get(u, 0), w + stage[v] - stage[u] - LATENCY[u])
        held = lifetimes(
            {Copy(name, 0): start for name, start in stage.items()},
            LATENCY,
            [BlockEdge(Copy(u, 0), Copy(v, 0), w) for u, v, w in edges],
            1,
        )
        assert most_alive(held, 1) == sum(longest.values())

    @given(st.data())
    def test_the_most_alive_are_what_counting_starts_says(self, data: st.DataObject) -> None:
        """K_v(x) + w - K_u(x - l(u)) values on u -> v in cycle x, the longest of u's counting.

        K(x) = floor((s - x) / N) + 1 counts an operation's starts from cycle x on.
        """
        names, cycles = ["u", "v", "w", "x"], data.draw(st.integers(1, 7))
        start = {name: data.draw(st.integers(-9, 20)) for name in names}

        def starts(name: str, x: int) -> int:
            return (start[name] - x) // cycles + 1

        edges = [
            (u, v, -((start[v] - start[u] - LATENCY[u]) // cycles) + data.draw(st.integers(0, 2)))
            for u in names
            for v in data.draw(st.lists(st.sampled_from(names), max_size=3))
        ]
        alive: Counter[int] = Counter()
        for x in range(cycles):
            for u in names:
                on_edges = [starts(v, x) + w - starts(u, x - LATENCY[u])
                            for source, v, w in edges if source == u]  # fmt: skip
                alive[x] += max(on_edges, default=0)
        held = lifetimes(
            {Copy(name, 0): cycle for name, cycle in start.items()},
            LATENCY,
            [BlockEdge(Copy(u, 0), Copy(v, 0), w) for u, v, w in edges],
            cycles,
        )
        assert most_alive(held, cycles) == max(alive.values())


# ---- registers ---------------------------------------------------------------------------------


@st.composite
def held_values(draw: st.DrawFn) -> tuple[dict[Copy, range], int]:
    """Cycles in which values are held, some for longer than the period, and the period."""
    cycles = draw(st.integers(1, 8))
    lives = draw(st.lists(st.tuples(st.integers(-9, 20), st.integers(1, 3 * cycles)), max_size=12))
    held = {Copy(f"v{i}", i % 3): range(first, first + n) for i, (first, n) in enumerate(lives)}
    return held, cycles


def contents(lives: Iterable[Lifetime], cycles: int, blocks: range) -> dict[tuple[int, int], str]:
    """What stands in each register in each cycle, block after block; nothing may meet."""
    there: dict[tuple[int, int], str] = {}
    for life in lives:
        for block in blocks:
            for age, register in enumerate(life.registers):
                place = (life.first + age + block * cycles, register)
                assert place not in there, f"{life.value} and {there[place]} meet in {place}"
                there[place] = f"{life.value} of block {block}"
    return there


class TestRegisters:
    @given(held_values())
    def test_every_value_has_a_register_for_all_its_life_and_shares_it_with_none(
        self, case: tuple[dict[Copy, range], int]
    ) -> None:
        held, cycles = case
        lives = allocate_registers(held, cycles)
        assert {
            life.value: range(life.first, life.first + len(life.registers)) for life in lives
        } == held
        contents(lives, cycles, range(5))

    @given(held_values())
    def test_there_are_as_many_as_values_alive_at_once_block_after_block(
        self, case: tuple[dict[Copy, range], int]
    ) -> None:
        held, cycles = case
        lives = allocate_registers(held, cycles)
        alive = Counter(
            cycle + block * cycles
            for life in held.values()
            for cycle in life
            for block in range(60)
        )
        used = {register for life in lives for register in life.registers}
        assert most_alive(held, cycles) == max(alive.values(), default=0)
        assert used == set(range(max(alive.values(), default=0)))

    @given(held_values())
    def test_values_move_only_from_the_last_slot_to_the_first(
        self, case: tuple[dict[Copy, range], int]
    ) -> None:
        held, cycles = case
        for life in allocate_registers(held, cycles):
            for cycle, (before, after) in enumerate(pairwise(life.registers), life.first + 1):
                assert before == after or cycle % cycles == 0

    def test_a_value_that_outlives_its_block_stays_where_it_is_if_it_can(self) -> None:
        held = {U: range(1, 3), V: range(2, 6), W: range(3, 5)}
        lives = {life.value: life.registers for life in allocate_registers(held, 4)}
        assert lives[V] == (lives[V][0],) * 4

    def test_a_value_that_lives_for_periods_moves_along_a_chain(self) -> None:
        (life,) = allocate_registers({U: range(6)}, 2)
        assert sorted(life.registers) == [0, 0, 1, 1, 2, 2]
        assert [a == b for a, b in pairwise(life.registers)] == [True, False, True, False, True]

    def test_published_lifetimes_are_given_two_registers(self) -> None:
        """Parhi 1999, section 6.3.1, first example; blocks too far apart to overlap."""
        held = {U: range(1, 5), V: range(2, 8), W: range(5, 8)}
        lives = allocate_registers(held, 100)
        contents(lives, 100, range(3))
        assert {register for life in lives for register in life.registers} == {0, 1}

    def test_a_3_by_3_transposer_is_given_four_registers_at_a_latency_of_four(self) -> None:
        """Parhi 1999, section 6.3, from memory: row by row in, column by column out."""
        arrives = {Copy(name, 0): cycle for cycle, name in enumerate("abcdefghi")}
        leaves = {Copy(name, 0): cycle for cycle, name in enumerate("adgbehcfi")}
        latency = max(arrives[value] - leaves[value] for value in arrives)
        assert latency == 4
        outputs = {Copy(f"{v.name}.out", 0): leaves[v] + latency for v in leaves}
        edges = [BlockEdge(v, Copy(f"{v.name}.out", 0), 0) for v in arrives]
        held = lifetimes(arrives | outputs, {v.name: 0 for v in arrives}, edges, 9)
        assert most_alive(held, 9) == 4
        lives = allocate_registers(held, 9)
        contents(lives, 9, range(4))
        assert {register for life in lives for register in life.registers} == {0, 1, 2, 3}

    def test_at_one_cycle_a_block_they_are_shift_registers(self) -> None:
        first, second = allocate_registers({U: range(3), V: range(5, 7)}, 1)
        assert sorted(first.registers + second.registers) == [0, 1, 2, 3, 4]
