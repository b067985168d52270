"""The smallest cost by trying everything: the reference for the search, sharing no code with it.

For every pair (J, N) the graph is unfolded, and costs are tried from small to large. A cost is
tried by placing one operation's copy after another at every start that keeps precedence and at
which units and registers so far fit the cost.
"""

from __future__ import annotations

import math
from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from fractions import Fraction

Node = tuple[str, int]


@dataclass(frozen=True)
class Puzzle:
    """A graph with its times and areas, in plain data. `kind` None marks a port."""

    kind: dict[str, str | None]
    latency: dict[str, int]
    busy: dict[str, int]
    area: dict[str, int]
    register_area: int
    edges: tuple[tuple[str, str, int], ...]
    inputs: tuple[str, ...]
    outputs: tuple[str, ...]
    cycles_per_sample: Fraction
    parallelism: int
    serial: bool = True


def smallest_cost(puzzle: Puzzle, most: int) -> int | None:
    """The least cost over all pairs, or None if none is at most `most`."""
    pairs = [
        (j, n)
        for j in range(1, puzzle.parallelism + 1)
        for n in range(1, math.floor(j * puzzle.cycles_per_sample) + 1)
        if all(puzzle.busy[name] <= n for name in puzzle.kind)
    ]
    boards = [Board(puzzle, j, n) for j, n in pairs]
    boards = [board for board in boards if board.loops_fit()]
    for cost in range(most + 1):
        if any(board.can(cost) for board in boards):
            return cost
    return None


class TooMuchError(Exception):
    """More placements than a test has time for."""


MOST_PLACEMENTS = 20_000


class Board:
    """One unfolded graph on which starts are tried."""

    def __init__(self, puzzle: Puzzle, j: int, n: int) -> None:
        self.puzzle, self.n = puzzle, n
        self.placements = 0
        self.offset: dict[Node, int] = {}
        self.root: dict[Node, Node] = {}
        for name in puzzle.kind:
            for i in range(j):
                late = math.ceil(Fraction(i * n, j)) if puzzle.serial else 0
                port = name in puzzle.inputs or name in puzzle.outputs
                self.offset[name, i] = late if port else 0
                base = puzzle.inputs[0] if name in puzzle.inputs else name
                self.root[name, i] = (base, 0) if port else (name, i)
        self.edges = [
            ((u, i), (v, (i + w) % j), (i + w) // j)
            for u, v, w in sorted(set(puzzle.edges))
            for i in range(j)
        ]
        self.order = self._order()
        self.fewest = {kind: self._fewest(kind, j) for kind in puzzle.area}
        self.fewest_area = sum(puzzle.area[kind] * least for kind, least in self.fewest.items())

    def _fewest(self, kind: str, j: int) -> int:
        """Units that the count of operations alone asks for."""
        mine = [name for name, its in self.puzzle.kind.items() if its == kind]
        held = min((self.n // self.puzzle.busy[name] for name in mine), default=1)
        return math.ceil(j * len(mine) / held)

    def _order(self) -> list[Node]:
        """Roots, each next to an earlier one where the graph allows."""
        near: dict[Node, set[Node]] = {root: set() for root in self.root.values()}
        for u, v, _ in self.edges:
            a, b = self.root[u], self.root[v]
            near[a].add(b)
            near[b].add(a)
        order: list[Node] = []
        while len(order) < len(near):
            rest = [root for root in sorted(near) if root not in order]
            touching = [root for root in rest if near[root] & set(order)]
            order.append((touching or rest)[0])
        return order

    def loops_fit(self) -> bool:
        """No loop takes longer than its delays give: Floyd and Warshall's longest paths."""
        roots = self.order
        far = {(a, b): -math.inf for a in roots for b in roots}
        for u, v, w in self.edges:
            a, b = self.root[u], self.root[v]
            length = self._latency(u) - w * self.n + self.offset[u] - self.offset[v]
            far[a, b] = max(far[a, b], length)
        for k in roots:
            for a in roots:
                for b in roots:
                    far[a, b] = max(far[a, b], far[a, k] + far[k, b])
        self.far = far
        return all(far[a, a] <= 0 for a in roots)

    def _latency(self, node: Node) -> int:
        return self.puzzle.latency[node[0]]

    def can(self, cost: int) -> bool:
        """Whether a schedule of at most this cost exists."""
        return cost >= self.fewest_area and self._place({}, cost)

    def _place(self, starts: dict[Node, int], cost: int) -> bool:
        self.placements += 1
        if self.placements > MOST_PLACEMENTS:
            raise TooMuchError
        if self._cost(starts) > cost:
            return False
        if len(starts) == len(self.order):
            return True
        root = self.order[len(starts)]
        for start in self._candidates(root, starts, cost):
            starts[root] = start
            if self._place(starts, cost):
                return True
            del starts[root]
        return False

    def _candidates(self, root: Node, starts: dict[Node, int], cost: int) -> Iterator[int]:
        """Starts that keep precedence, and lifetimes that `cost` worth of registers can hold."""
        low, high = -math.inf, math.inf
        for other, start in starts.items():
            low = max(low, start + self.far[other, root])
            high = min(high, start - self.far[root, other])
        registers = (cost - self.fewest_area) // self.puzzle.register_area
        longest = registers * self.n
        for u, v, w in self.edges:
            a, b = self.root[u], self.root[v]
            shift = w * self.n - self._latency(u) + self.offset[v] - self.offset[u]
            if a == root and b in starts:
                low = max(low, starts[b] + shift - longest)
            if b == root and a in starts:
                high = min(high, starts[a] - shift + longest)
        if math.isinf(low) and math.isinf(high):
            return iter(range(self.n))
        if math.isinf(low):
            low = high - self.n + 1
        if math.isinf(high):
            high = low + self.n - 1
        return iter(range(int(low), int(high) + 1))

    def _cost(self, roots: dict[Node, int]) -> int:
        starts = {
            node: roots[root] + self.offset[node]
            for node, root in self.root.items()
            if root in roots
        }
        areas = sum(
            area * max(self.fewest[kind], self._units(kind, starts))
            for kind, area in self.puzzle.area.items()
        )
        return areas + self.puzzle.register_area * self._registers(starts)

    def _units(self, kind: str, starts: dict[Node, int]) -> int:
        arcs = [
            frozenset((start + k) % self.n for k in range(self.puzzle.busy[node[0]]))
            for node, start in starts.items()
            if self.puzzle.kind[node[0]] == kind
        ]
        return next(k for k in range(len(arcs) + 1) if _colourable(arcs, k, []))

    def _registers(self, starts: dict[Node, int]) -> int:
        last: dict[Node, int] = {}
        for u, v, w in self.edges:
            if u in starts and v in starts:
                last[u] = max(last.get(u, -(10**9)), starts[v] + w * self.n)
        alive = [0] * self.n
        for u, end in last.items():
            for cycle in range(starts[u] + self._latency(u) + 1, end + 1):
                alive[cycle % self.n] += 1
        return max(alive)


def _colourable(arcs: Sequence[frozenset[int]], colours: int, used: list[set[int]]) -> bool:
    if not arcs:
        return True
    first, rest = arcs[0], arcs[1:]
    for slots in used:
        if not slots & first and _colourable(
            rest, colours, [s | first if s is slots else s for s in used]
        ):
            return True
    return len(used) < colours and _colourable(rest, colours, [*used, set(first)])
