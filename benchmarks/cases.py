"""The cases that are measured: a name, and how to make its design."""

from __future__ import annotations

import json
from collections.abc import Callable
from dataclasses import dataclass
from fractions import Fraction
from pathlib import Path

from scheduler.design import Design, design_from, design_of
from scheduler.graph import Graph, Kind, Operand, Operation, Source

PUBLISHED = Path(__file__).parent.parent / "tests" / "published" / "data"
UNPIPELINED = "unit-time-unpipelined"


@dataclass(frozen=True)
class Case:
    """One line of the table.

    Attributes:
        name: what is planned, and at which rate.
        make: builds the design.
        target: seconds within which it is to be proven on one core.
    """

    name: str
    make: Callable[[], Design]
    target: float


def elliptic(cycles: int, parallelism: int, technology: str) -> Design:
    """The fifth-order elliptic wave filter, a published benchmark graph of 34 operations.

    Its list of statements names no coefficients; a stand-in multiplies by 1/2 everywhere.
    """
    data = json.loads((PUBLISHED / "elliptic_wave_filter.json").read_text(encoding="utf-8"))
    kinds = {"in": Kind.INPUT, "out": Kind.OUTPUT, "add": Kind.ADD, "mul": Kind.MULTIPLY}
    operands: dict[str, list[Operand]] = {node["id"]: [] for node in data["nodes"]}
    for edge in data["edges"]:
        operands[edge["to"]].append(Source(edge["from"], edge["delays"]))
    for node in data["nodes"]:
        if node["kind"] == "mul":
            operands[node["id"]].append(Fraction(1, 2))
    graph = Graph(
        tuple(
            Operation(node["id"], kinds[node["kind"]], tuple(operands[node["id"]]))
            for node in data["nodes"]
        )
    )
    return design_of(
        graph,
        cycles_per_sample=cycles,
        title=f"Elliptic wave filter at {cycles}",
        technology=technology,
        caps={"parallelism": parallelism},
    )


def structure(kind: str, coefficients: list[object], cycles: int, parallelism: int) -> Design:
    """A filter of one of the shipped structures."""
    tables = {
        "title": f"{kind} at {cycles}",
        "algorithm": {"structure": kind, "coefficients": coefficients},
        "requirement": {"cycles_per_sample": str(cycles)},
        "caps": {"parallelism": parallelism},
        "technology": {"use": "unit-time"},
    }
    return design_from(tables, kind, Path())


def biquads(sections: int, cycles: int, parallelism: int) -> Design:
    """Sections of five multiplications and four additions each."""
    rows: list[object] = [
        [0.25, 0.125 + k / 64, 0.25, 1, -1.5 + k / 64, 0.75 - k / 128] for k in range(sections)
    ]
    return structure("biquads-direct-2", rows, cycles, parallelism)


def taps(count: int, cycles: int, parallelism: int) -> Design:
    """A direct-form filter without symmetry."""
    return structure("fir-direct", [(k + 3) / 1024 for k in range(count)], cycles, parallelism)


def registry() -> list[Case]:
    """Every case, in the order of the table."""
    return [
        *(
            Case(
                f"elliptic, N <= {n}, {words}",
                lambda n=n, technology=technology: elliptic(n, 1, technology),
                1.0,
            )
            for words, technology in (("pipelined", "unit-time"), ("unpipelined", UNPIPELINED))
            for n in range(16, 22)
        ),
        *(
            Case(
                f"elliptic, {n} cycles, J <= {j}",
                lambda n=n, j=j: elliptic(n, j, "unit-time"),
                seconds,
            )
            for j, seconds in ((2, 2.0), (4, 5.0))
            for n in (16, 17)
        ),
        Case("8 biquads, 10 cycles", lambda: biquads(8, 10, 1), 15.0),
        Case("20 biquads, 10 cycles", lambda: biquads(20, 10, 1), 10.0),
        Case("128 taps, 8 cycles", lambda: taps(128, 8, 1), 5.0),
    ]
