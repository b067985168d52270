"""Binding a schedule to hardware: which instance runs what, and which register holds what when.

Both are exact: `bind_instances` finds a binding to a given number of instances where there is one,
and `allocate_registers` never needs more registers than values are alive in some slot. Values may
move from one register to another between cycles (forward-backward allocation); what the moves
cost in multiplexers is not looked at.
"""

from __future__ import annotations

from bisect import bisect_left
from collections import Counter, defaultdict
from collections.abc import Iterable, Mapping, Sequence

from scheduler.datapath import BlockEdge
from scheduler.plan import Copy, Lifetime


def bind_instances(
    starts: Mapping[Copy, int], busy: int, cycles: int, most: int
) -> dict[Copy, int] | None:
    """Binds operations of one kind to instances; None only where `most` do not suffice.

    An operation is busy in slots t .. t + b - 1, taken modulo N: an arc of a circle, all arcs
    equally long. Of two instances that run unlike many operations, the merged operations can be
    dealt out anew, in turn, so that their numbers differ by one at most. Hence n operations fit on
    q instances iff they fit on r = n mod q instances with L + 1 operations each and q - r with L
    (L = floor(n / q)); and arcs that overlap at most r times can be dealt out to r instances in
    turn, for the arc r places on starts when this one is over. What remains is to pick the
    r (L + 1) operations of the first sort, so that of those which overlap at most r are picked and
    at most q - r are not: difference constraints on the number picked so far.

    Args:
        starts: start cycle of every copy, of any stage.
        busy: b, the same for all.
        cycles: N, at least b.
        most: q, instances at hand.

    Returns:
        Instance numbers from 0, by copy.

    Reference:
        The problem is the colouring of proper circular-arc graphs: Orlin, Bonuccelli and Bovet,
        SIAM Journal on Algebraic and Discrete Methods 2(2), 1981 (from memory).
    """
    if not starts or most < 1:
        return None if starts else {}
    if busy > cycles:
        return None
    order = sorted((start % cycles, copy) for copy, start in starts.items())
    rounds, longer = divmod(len(order), most)
    ends = _first_clear([slot for slot, _ in order], busy, cycles)
    if any(end - i > most for i, end in enumerate(ends)):  # so many overlap
        return None
    count = _picked_so_far(ends, longer, most - longer, longer * (rounds + 1))
    if count is None:
        return None
    bound: dict[Copy, int] = {}
    for i, (_, copy) in enumerate(order):
        picked = count[i + 1] > count[i]
        bound[copy] = count[i] % longer if picked else longer + (i - count[i]) % (most - longer)
    return bound


def _first_clear(slots: Sequence[int], busy: int, cycles: int) -> list[int]:
    """For each arc, in order, the first one after it that starts when it is over.

    Arc n of n is arc 0 a period later, and so on.
    """
    later = [*slots, *(slot + cycles for slot in slots)]
    return [bisect_left(later, slot + busy, lo=i + 1) for i, slot in enumerate(slots)]


def _picked_so_far(ends: Sequence[int], longer: int, shorter: int, total: int) -> list[int] | None:
    """How many arcs before each are picked; None where no choice keeps the limits.

    Shortest paths (Bellman and Ford) in the graph of the differences: of the arcs i .. end - 1,
    which all overlap, at most `longer` are picked and at most `shorter` are not.
    """
    n = len(ends)
    limits = [(n - 1, 0, 1 - total), (0, n - 1, total)]  # arc n - 1 is picked or not
    limits += [limit for i in range(n - 1) for limit in ((i, i + 1, 1), (i + 1, i, 0))]
    for i, end in enumerate(ends):
        round_, j = divmod(end, n)
        limits.append((i, j, longer - round_ * total))
        limits.append((j, i, round_ * total + shorter - (end - i)))
    count = [0] * n
    for _ in range(n + 1):
        before = count.copy()
        for i, j, most in limits:
            count[j] = min(count[j], count[i] + most)
        if count == before:
            return [each - count[0] for each in count] + [total]
    return None


def lifetimes(
    starts: Mapping[Copy, int],
    latency: Mapping[str, int],
    edges: Iterable[BlockEdge],
    cycles: int,
) -> dict[Copy, range]:
    """The cycles in which block 0's value of each copy needs a register.

    From the cycle after it leaves its unit to the last cycle in which somebody reads it; values
    that are read at once, or by nobody, are left out.

    Args:
        starts: s of every copy.
        latency: l of every operation, by name.
        edges: the unfolded graph.
        cycles: N.
    """
    last: dict[Copy, int] = {}
    for source, target, delays in edges:
        read = starts[target] + delays * cycles
        last[source] = max(read, last.get(source, read))
    held = {u: range(starts[u] + latency[u.name] + 1, end + 1) for u, end in last.items()}
    return {copy: cycles_held for copy, cycles_held in held.items() if cycles_held}


def most_alive(held: Mapping[Copy, range], cycles: int) -> int:
    """Registers that are needed: the most values held in any slot, blocks overlapping.

    Args:
        held: cycles in which each value is held, as `lifetimes` gives them.
        cycles: N.
    """
    alive = Counter(cycle % cycles for life in held.values() for cycle in life)
    return max(alive.values(), default=0)


_Places = dict[tuple[int, Copy], int]
"""The register that holds block 0's value of a copy in a cycle."""


def allocate_registers(held: Mapping[Copy, range], cycles: int) -> tuple[Lifetime, ...]:
    """Gives every value a register for every cycle of its life, as few as are alive at once.

    Slot by slot: a value stays where it is. A new one that outlives the block takes the register
    in which the next block expects it, if that is free, else the lowest free one. From the last
    slot to the first, values move to where the next block has its own.

    Args:
        held: cycles in which each value is held, as `lifetimes` gives them.
        cycles: N.
    """
    slots: dict[int, list[tuple[int, Copy]]] = defaultdict(list)
    for copy, life in held.items():
        for cycle in life:
            slots[cycle % cycles].append((cycle, copy))
    registers, places = most_alive(held, cycles), _Places()
    for slot in range(cycles):
        places |= _places(slots[slot], places, cycles, registers)
    return tuple(
        Lifetime(copy, life.start, tuple(places[cycle, copy] for cycle in life))
        for copy, life in held.items()
    )


def _places(
    alive: Iterable[tuple[int, Copy]], before: _Places, cycles: int, registers: int
) -> _Places:
    """Registers for the values of one slot, given those of the slots before it."""
    places: _Places = {}
    new: list[tuple[int, tuple[int, Copy]]] = []
    for cycle, copy in alive:
        stays = before.get((cycle - 1, copy)) if cycle % cycles else None
        if stays is not None:
            places[cycle, copy] = stays
        else:
            wanted = before.get((cycle + -cycle % cycles, copy), registers)
            new.append((wanted, (cycle, copy)))
    free = set(range(registers)) - set(places.values())
    for wanted, each in sorted(new, key=lambda pair: pair[0]):
        places[each] = wanted if wanted in free else min(free)
        free.remove(places[each])
    return places
