"""Windows: between which cycles an operation can start, without asking a solver.

A schedule may be shifted as a whole, so one start can be set to 0 (the pin). The longest paths
between it and the others bound their starts: on loops from both sides. And where registers are
capped, the flow that proves the compact bound says how much room there is: every cycle by which
an arc is longer than needed costs its flow in register cycles, and all together may cost no more
than is to spare (reduced-cost tightening, well known in integer programming). Both hold for one
pair (J, N) only.
"""

from __future__ import annotations

from collections.abc import Hashable, Iterable, Mapping, Sequence
from typing import Any

import networkx as nx
import numpy as np
from numpy.typing import NDArray

from scheduler.compact import Compact, longest_paths
from scheduler.datapath import Block, Datapath, Pair
from scheduler.formulation import Window
from scheduler.plan import Copy

_MOST_PINS = 600  # operations of a component; for more than these any of them is the pin


def windows(
    block: Block, solved: Compact, pin: Copy, *, longest: int, spare: int | None = None
) -> dict[Copy, Window]:
    """Bounds the starts relative to the pin.

    Args:
        block: the unfolded graph.
        solved: its compact program.
        pin: the anchor whose start is set to 0.
        longest: the most cycles for which a wanted plan holds any value in registers.
        spare: register cycles that a wanted plan may have beyond the compact minimum (registers
            * N less `solved.register_cycles`); None where registers are not capped.

    Returns:
        A window for every anchor; where one is empty (its first cycle after its last) no wanted
        plan exists. Parts of the graph that no edge joins to the pin are pinned by themselves,
        to a slot of their own choice: by whole blocks they can be shifted at will.
    """
    differences = list(_differences(block, solved, longest, spare))
    anchors = dict.fromkeys(anchor.copy for anchor in block.anchors.values())
    found = _between(differences, pin, 0)
    if spare is not None:
        for node, room in _rooms(solved, pin, spare).items():
            near_pin = solved.starts[node] - solved.starts[pin]
            low, high = found[node]
            found[node] = Window(max(low, near_pin - room), min(high, near_pin + room))
    for anchor in anchors:
        if anchor not in found:
            found |= _between(differences, anchor, block.pair.cycles - 1)
    return {copy: found[copy] for copy in anchors}


def longest_ever(block: Block) -> int:
    """Cycles beyond which no value need be held where registers are not capped at all.

    With the slots of a schedule given, stages can be chosen as longest paths, each of whose edges
    adds no more than its latency and one block.
    """
    cycles, latency = block.pair.cycles, block.datapath.latency
    delays = max((edge.delays for edge in block.edges), default=0)
    offsets = max((anchor.offset for anchor in block.anchors.values()), default=0)
    return sum(latency[name] + cycles + offsets for name, _ in block.copies) + cycles * (delays + 1)


def _differences(
    block: Block, solved: Compact, longest: int, spare: int | None
) -> Iterable[tuple[Hashable, Hashable, int]]:
    """What holds between two positions: (tail, head, least head - tail)."""
    cycles, latency = block.pair.cycles, block.datapath.latency
    for arc in solved.arcs:
        yield arc.tail, arc.head, arc.blocks * cycles + arc.cycles
    for source, target, delays in block.edges:
        (start, late), (read, later) = block.anchors[source], block.anchors[target]
        far = longest + latency[source.name] - delays * cycles + late - later
        yield read, start, -far
    if spare is not None:
        for arc, flow in solved.tight.items():
            yield arc.head, arc.tail, -arc.blocks * cycles - arc.cycles - spare // flow


def _between(
    differences: Iterable[tuple[Hashable, Hashable, int]], pin: Copy, play: int
) -> dict[Hashable, Window]:
    """Windows of all that is joined to the pin, whose own start lies between 0 and `play`."""
    differences = list(differences)
    first = longest_paths(differences, pin)
    before = longest_paths(((head, tail, far) for tail, head, far in differences), pin)
    return {v: Window(far, play - before[v]) for v, far in first.items() if v in before}


def near(block: Block, solved: Compact, pin: Copy, width: int) -> dict[Copy, Window]:
    """Windows of `width` cycles to either side of the compact program's own starts.

    They prove nothing: they show a solver where good schedules lie.
    """
    anchors = dict.fromkeys(anchor.copy for anchor in block.anchors.values())
    middle = {copy: solved.starts[copy] - solved.starts[pin] for copy in anchors}
    found = {copy: Window(start - width, start + width) for copy, start in middle.items()}
    return {**found, pin: Window(0, 0)}


def central(datapath: Datapath, pair: Pair) -> str | None:
    """The loop operation relative to which the others of its component have the least room.

    It makes the best pin: on the elliptic wave filter it decides between a tenth of a second and
    minutes. Only the largest component counts; None without loops.
    """
    graph: Any = nx.DiGraph((edge.source, edge.target) for edge in datapath.edges)
    looped = [part for part in nx.strongly_connected_components(graph) if len(part) > 1]
    most = max(map(len, looped), default=0)
    largest = [part for part in looped if len(part) == most]
    names = [name for name in datapath.latency if largest and name in largest[0]]
    if not names or len(names) > _MOST_PINS:
        return names[0] if names else None
    far = _longest_between(datapath, pair, names)
    room = np.minimum(-(far + far.T), pair.cycles * pair.parallelism)
    return names[int(np.argmin(room.sum(axis=1)))]


def _longest_between(datapath: Datapath, pair: Pair, names: Sequence[str]) -> NDArray[np.int64]:
    """Longest paths between operations of a component, in cycles / J (Floyd and Warshall)."""
    index = {name: number for number, name in enumerate(names)}
    far = np.full((len(names), len(names)), -(2**40), dtype=np.int64)
    np.fill_diagonal(far, 0)
    for source, target, delays in datapath.edges:
        if source in index and target in index:
            length = datapath.latency[str(source)] * pair.parallelism - delays * pair.cycles
            ends = index[str(source)], index[str(target)]
            far[ends] = max(far[ends], length)
    for k in range(len(names)):
        np.maximum(far, far[:, k, None] + far[None, k, :], out=far)
    return far


def size(found: Mapping[Copy, Window], block: Block) -> int:
    """How many staircase variables are left free by windows: the smaller, the easier."""
    cycles = block.pair.cycles
    widths = {anchor.copy: cycles for anchor in block.anchors.values()}
    widths |= {copy: min(cycles, last - first) for copy, (first, last) in found.items()}
    return sum(widths.values())


def _rooms(solved: Compact, pin: Copy, spare: int) -> dict[Hashable, int]:
    """How far each node can be from its compact start, seen from the pin.

    Along a path of arcs that each carry at least `flow`, the cycles beyond need add up to no more
    than spare / flow. The widest such paths are those of a maximum spanning tree.
    """
    support: Any = nx.Graph()
    support.add_node(pin)
    for arc, flow in solved.tight.items():
        if not support.has_edge(arc.tail, arc.head) or support[arc.tail][arc.head]["flow"] < flow:
            support.add_edge(arc.tail, arc.head, flow=flow)
    tree: Any = nx.maximum_spanning_tree(support, weight="flow")
    narrowest: dict[Hashable, float] = {pin: float("inf")}
    for tail, head in nx.bfs_edges(tree, pin):
        narrowest[head] = min(narrowest[tail], tree[tail][head]["flow"])
    return {node: int(spare // flow) if node != pin else 0 for node, flow in narrowest.items()}
