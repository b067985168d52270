"""Small builders of datapaths for the tests of the solver side."""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from fractions import Fraction

from scheduler.datapath import Datapath, UnitKind
from scheduler.graph import Edge

LATENCY = {"adder": 1, "multiplier": 2}
AREA = {"adder": 2, "multiplier": 16}
"""Unit-time areas in half units: 1 and 8, with a register of 1/2."""


def datapath(
    units: Mapping[str, str | None],
    edges: Iterable[tuple[str, str, int]],
    *,
    cycles_per_sample: Fraction | int,
    inputs: tuple[str, ...] = (),
    outputs: tuple[str, ...] = (),
    multiplier_busy: int = 1,
    serial: bool = True,
    area: Mapping[str, int] = AREA,
    most: Mapping[str, int] | None = None,
    registers_most: int | None = None,
    area_most: int | None = None,
    latency_cycles: int | None = None,
) -> Datapath:
    """A unit-time datapath: an operation's unit by its name (None for ports), and the edges."""
    busy = {"adder": 1, "multiplier": multiplier_busy}
    kinds = {
        kind: UnitKind(
            area[kind],
            busy[kind],
            tuple(name for name, unit in units.items() if unit == kind),
            (most or {}).get(kind),
        )
        for kind in area
        if kind in units.values()
    }
    return Datapath(
        latency={name: LATENCY.get(unit or "", 0) for name, unit in units.items()},
        unit=dict(units),
        edges=tuple(Edge(*edge) for edge in edges),
        inputs=inputs,
        outputs=outputs,
        serial=serial,
        kinds=kinds,
        register_area=1,
        measure=Fraction(1, 2),
        registers_most=registers_most,
        area_most=area_most,
        latency_cycles=latency_cycles,
        latency_samples=None,
        slowest=Fraction(cycles_per_sample),
    )


def biquads(sections: int, **options: object) -> Datapath:
    """A cascade of direct-form II sections: 5 multiplications and 4 additions each."""
    units: dict[str, str | None] = {"x": None}
    edges: list[tuple[str, str, int]] = []
    before = "x"
    for k in range(sections):
        m = [f"m{k}.{i}" for i in range(5)]
        a = [f"a{k}.{i}" for i in range(4)]
        units |= dict.fromkeys(m, "multiplier") | dict.fromkeys(a, "adder")
        edges += [
            (before, a[0], 0), (m[0], a[0], 0), (a[0], a[1], 0), (m[1], a[1], 0),
            (a[1], m[0], 1), (a[1], m[1], 2), (a[1], m[2], 0), (a[1], m[3], 1), (a[1], m[4], 2),
            (m[2], a[2], 0), (m[3], a[2], 0), (a[2], a[3], 0), (m[4], a[3], 0),
        ]  # fmt: skip
        before = a[3]
    units["y"] = None
    edges.append((before, "y", 0))
    return datapath(units, edges, inputs=("x",), outputs=("y",), **options)  # type: ignore[arg-type]


def fir(taps: int, **options: object) -> Datapath:
    """A direct-form FIR filter: a chain of additions."""
    units: dict[str, str | None] = {"x": None, "m0": "multiplier"}
    edges = [("x", "m0", 0)]
    before = "m0"
    for k in range(1, taps):
        units |= {f"m{k}": "multiplier", f"a{k}": "adder"}
        edges += [("x", f"m{k}", k), (before, f"a{k}", 0), (f"m{k}", f"a{k}", 0)]
        before = f"a{k}"
    units["y"] = None
    edges.append((before, "y", 0))
    return datapath(units, edges, inputs=("x",), outputs=("y",), **options)  # type: ignore[arg-type]
