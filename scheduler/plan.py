"""The answer as data: a plan.

A plan holds everything that is needed to build the datapath and to check it: the schedule, the
binding to unit instances, the registers each value moves through, the edges of the unfolded
graph, the state of the proof, and the design itself. Nothing here judges whether it is right;
that is the audit's work.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from enum import StrEnum
from typing import Any, NamedTuple


class Status(StrEnum):
    """How an answer stands.

    PROVEN: a plan, and nothing smaller exists. OPEN: a plan, and a gap to the bound.
    IMPOSSIBLE: proven that no plan exists. NONE: no plan was found in the time given.
    """

    PROVEN = "proven"
    OPEN = "open"
    IMPOSSIBLE = "impossible"
    NONE = "none"


class Copy(NamedTuple):
    """Copy `number` (0..J-1) of operation `name` in the unfolded graph."""

    name: str
    number: int

    def __str__(self) -> str:
        return f"{self.name}({self.number})"


@dataclass(frozen=True)
class PlannedOperation:
    """One copy of an operation, placed.

    Attributes:
        unit, instance: the hardware it runs on; None for ports.
        start: start cycle s = N * stage + slot of block 0, in clock cycles.
        slot: folding order t, 0 <= t < N.
        stage: retiming value r; may be negative.
        latency, busy: l and b in cycles; 0 for ports.
    """

    name: str
    copy: int
    unit: str | None
    instance: int | None
    start: int
    slot: int
    stage: int
    latency: int
    busy: int

    @property
    def key(self) -> Copy:
        """Which copy of which operation this is."""
        return Copy(self.name, self.copy)


@dataclass(frozen=True)
class PlannedEdge:
    """An edge of the unfolded graph: `delays` whole blocks of N cycles late."""

    source: Copy
    target: Copy
    delays: int


@dataclass(frozen=True)
class Lifetime:
    """The registers through which block 0's value of an operation's copy moves.

    It is held in `registers[i]` during cycle `first + i`; the value of block k follows the same
    way k * N cycles later. `first` is the cycle after the value leaves its unit.
    """

    value: Copy
    first: int
    registers: tuple[int, ...]


@dataclass(frozen=True)
class SolverVerdict:
    """A pair (J, N) that the solver, not a floor, showed to hold nothing cheaper.

    Attributes:
        parallelism, cycles: the pair.
        bound: no plan of this pair costs less (area); None where it has no plan at all.
        runs: how many solver runs with unlike settings agreed.
    """

    parallelism: int
    cycles: int
    bound: float | None
    runs: int


@dataclass(frozen=True)
class Proof:
    """What the bound rests on.

    Attributes:
        pairs: number of pairs (J, N) that the requirement allows within the cap on J.
        by_floor: how many of them exact floors alone rule out (no solver's word needed).
        by_solver: the pairs that rest on solver runs.
        every_parallelism: true where the bound holds for every J, whatever the cap.
        binding: in words, what keeps the hardware from being smaller.
    """

    pairs: int = 0
    by_floor: int = 0
    by_solver: tuple[SolverVerdict, ...] = ()
    every_parallelism: bool = False
    binding: tuple[str, ...] = ()


@dataclass(frozen=True)
class Plan:
    """The answer to one design.

    Attributes:
        value, bound: area of this plan and the proven lower bound, in the technology's unit of
            area; equal when proven, None where there is none.
        parallelism, cycles: J and N; None without a schedule, as are units, registers, latency.
        clock_period_ns, sample_period_ns: None in abstract time.
        reason: in words, why nothing is possible or nothing was found; empty otherwise.
        design: the design document, complete, as `design.design_from` reads it.
    """

    title: str
    status: Status
    value: float | None
    bound: float | None
    design: Mapping[str, Any]
    parallelism: int | None = None
    cycles: int | None = None
    clock_period_ns: float | None = None
    sample_period_ns: float | None = None
    units: Mapping[str, int] = field(default_factory=dict)
    registers: int | None = None
    latency: int | None = None
    operations: tuple[PlannedOperation, ...] = ()
    edges: tuple[PlannedEdge, ...] = ()
    lifetimes: tuple[Lifetime, ...] = ()
    proof: Proof = field(default_factory=Proof)
    reason: str = ""

    @property
    def has_schedule(self) -> bool:
        """True where there is hardware to build."""
        return self.status in (Status.PROVEN, Status.OPEN)
