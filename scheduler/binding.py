"""Binding a schedule to hardware: which instance runs what, and which register holds what when.

Both are exact: `bind_instances` finds a binding to a given number of instances where there is one,
and `allocate_registers` never needs more registers than values are alive in some slot. Values may
move from one register to another between cycles (forward-backward allocation); what the moves
cost in multiplexers is not looked at.
"""

from __future__ import annotations

from collections import Counter, defaultdict
from collections.abc import Iterable, Mapping
from dataclasses import dataclass

from scheduler.datapath import BlockEdge
from scheduler.plan import Copy, Lifetime


@dataclass
class _Instance:
    """An instance while operations are dealt out: idle from `free` until `due`, in slots."""

    free: int
    due: int


def bind_instances(
    starts: Mapping[Copy, int], busy: int, cycles: int, most: int
) -> dict[Copy, int] | None:
    """Binds operations of one kind to instances; None only where `most` do not suffice.

    An operation is busy in slots t .. t + b - 1, taken modulo N: an arc of a circle. Cut at slot
    0, an arc that runs over the cut takes an instance of its own, which is free again after it
    and due before its next start. The others are dealt out in the order of their slots, each to
    the idle instance that is due soonest but late enough. As all arcs are equally long, an
    instance that is due later is at least as good for every arc still to come, so no other choice
    could do better.

    Args:
        starts: start cycle of every copy, of any stage.
        busy: b, the same for all.
        cycles: N, at least b.
        most: instances at hand.

    Returns:
        Instance numbers from 0, by copy.

    Reference:
        The problem is the colouring of proper circular-arc graphs: Orlin, Bonuccelli and Bovet,
        SIAM Journal on Algebraic and Discrete Methods 2(2), 1981 (from memory).
    """
    slots = sorted((start % cycles, copy) for copy, start in starts.items())
    instances = [_Instance(0, cycles) for _ in range(most)]
    bound: dict[Copy, int] = {}
    for number, (slot, copy) in enumerate(each for each in slots if each[0] + busy > cycles):
        if number == most:
            return None
        instances[number] = _Instance(slot + busy - cycles, slot)
        bound[copy] = number
    for slot, copy in slots:
        if copy in bound:
            continue
        idle = [
            (instance.due, number)
            for number, instance in enumerate(instances)
            if instance.free <= slot and instance.due >= slot + busy
        ]
        if not idle:
            return None
        bound[copy] = min(idle)[1]
        instances[bound[copy]].free = slot + busy
    return bound


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


def allocate_registers(held: Mapping[Copy, range], cycles: int) -> tuple[Lifetime, ...]:
    """Gives every value a register for every cycle of its life, as few as are alive at once.

    Slot by slot: a value stays where it is, new ones take the lowest free register. From the last
    slot to the first they move to where the next block has its own.

    Args:
        held: cycles in which each value is held, as `lifetimes` gives them.
        cycles: N.
    """
    slots: dict[int, list[tuple[int, Copy]]] = defaultdict(list)
    for copy, life in held.items():
        for cycle in life:
            slots[cycle % cycles].append((cycle, copy))
    place: dict[tuple[int, Copy], int] = {}
    for slot in range(cycles):
        alive = slots[slot]
        staying = {} if slot == 0 else {
            each: place[each[0] - 1, each[1]] for each in alive if (each[0] - 1, each[1]) in place
        }  # fmt: skip
        free = iter(sorted(set(range(len(alive) + len(staying))) - set(staying.values())))
        for each in alive:
            place[each] = staying[each] if each in staying else next(free)
    return tuple(
        Lifetime(copy, life.start, tuple(place[cycle, copy] for cycle in life))
        for copy, life in held.items()
    )
