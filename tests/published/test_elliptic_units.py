"""Unit counts of the fifth-order elliptic wave filter, proven smallest by the program.

Graph: 1992 high-level-synthesis workshop benchmark statement list (orig. Kung, Whitehouse and
Kailath, VLSI and Modern Signal Processing, 1985), read in public copies of the listing.
The list names no coefficients; a stand-in multiplies by 1/2, which no count depends on.
"""

from __future__ import annotations

from fractions import Fraction

import pytest
from reader import read

from scheduler.datapath import datapath_of
from scheduler.design import Design, design_of
from scheduler.errors import FoldwrightError
from scheduler.graph import Graph, Kind, Operand, Operation, Source
from scheduler.plan import Plan, Status
from scheduler.planning import plan
from scheduler.search import search

KINDS = {"in": Kind.INPUT, "out": Kind.OUTPUT, "add": Kind.ADD, "mul": Kind.MULTIPLY}
PIPELINED, UNPIPELINED = "unit-time", "unit-time-unpipelined"


def elliptic_graph() -> Graph:
    data = read("elliptic_wave_filter").document
    operands: dict[str, list[Operand]] = {node["id"]: [] for node in data["nodes"]}
    for edge in data["edges"]:
        operands[edge["to"]].append(Source(edge["from"], edge["delays"]))
    for node in data["nodes"]:
        if node["kind"] == "mul":
            operands[node["id"]].append(Fraction(1, 2))
    return Graph(
        tuple(
            Operation(node["id"], KINDS[node["kind"]], tuple(operands[node["id"]]))
            for node in data["nodes"]
        )
    )


def design(cycles: int, technology: str, **caps: int) -> Design:
    return design_of(
        elliptic_graph(),
        cycles_per_sample=cycles,
        technology=technology,
        caps={"parallelism": 1, **caps},
    )


def proven(cycles: int, technology: str, **caps: int) -> Plan:
    found = plan(design(cycles, technology, **caps))
    assert found.status in (Status.PROVEN, Status.IMPOSSIBLE)
    return found


# Chao, LaPaugh and Sha, IEEE TCAD 16(3), 1997, overlapped iterations with retiming: least N for
# given units. Values from memory; each confirmed by an independent calculation.
OVERLAPPED = [
    (PIPELINED, {"adder": 3, "multiplier": 1}, 16),
    (PIPELINED, {"adder": 2, "multiplier": 1}, 17),
    (UNPIPELINED, {"adder": 3, "multiplier": 2}, 16),
    (UNPIPELINED, {"adder": 2, "multiplier": 2}, 17),
    (UNPIPELINED, {"adder": 2, "multiplier": 1}, 19),
]


@pytest.mark.parametrize(("technology", "units", "least"), OVERLAPPED)
def test_published_units_suffice_at_their_least_cycles(
    technology: str, units: dict[str, int], least: int
) -> None:
    assert dict(proven(least, technology).units) == units


@pytest.mark.parametrize(("technology", "units", "least"), OVERLAPPED)
def test_published_units_do_not_suffice_with_a_cycle_less(
    technology: str, units: dict[str, int], least: int
) -> None:
    assert proven(least - 1, technology, **units).status is Status.IMPOSSIBLE


@pytest.mark.parametrize("technology", [PIPELINED, UNPIPELINED])
def test_one_adder_and_one_multiplier_need_28_cycles(technology: str) -> None:
    """No source: computed twice by unlike programs, and open after 420 s for a third."""
    caps = {"adder": 1, "multiplier": 1}
    assert proven(27, technology, **caps).status is Status.IMPOSSIBLE
    found = plan(design(28, technology, **caps), time_limit=3)  # any plan will do
    assert dict(found.units) == caps


# Paulin and Knight, IEEE TCAD 8(6), 1989; Hwang, Lee and Hsu, IEEE TCAD 10(4), 1991: units for one
# iteration at a time in T steps. Values from memory, each confirmed by an independent calculation.
ONE_AT_A_TIME = [
    (UNPIPELINED, 17, 3, 3),
    (UNPIPELINED, 18, 2, 2),
    (UNPIPELINED, 19, 2, 2),
    (UNPIPELINED, 21, 2, 1),
    (PIPELINED, 17, 3, 2),
    (PIPELINED, 18, 3, 1),
    (PIPELINED, 18, 2, 2),
    (PIPELINED, 19, 2, 1),
]


def fits_one_at_a_time(technology: str, steps: int, adders: int, multipliers: int) -> bool:
    """Whether one iteration fits: what was delayed comes in at the start and leaves at the end."""
    inner = []
    for op in elliptic_graph().operations:
        operands = tuple(
            Source(f"{operand.name}.before", 0)
            if isinstance(operand, Source) and operand.delays
            else operand
            for operand in op.operands
        )
        inner.append(Operation(op.name, op.kind, operands))
    delayed = {
        operand.name
        for op in elliptic_graph().operations
        for operand in op.operands
        if isinstance(operand, Source) and operand.delays
    }
    ports = [Operation(f"{name}.before", Kind.INPUT) for name in sorted(delayed)]
    ports += [Operation(f"{n}.after", Kind.OUTPUT, (Source(n, 0),)) for n in sorted(delayed)]
    asked = design_of(
        Graph((*ports, *inner)),
        cycles_per_sample=steps,
        technology=technology,
        caps={"adder": adders, "multiplier": multipliers, "latency": steps},
    )
    # no N below the number of steps: iterations do not overlap
    return search(datapath_of(asked), parallelism=1, bound=Fraction(steps)).best is not None


@pytest.mark.parametrize(("technology", "steps", "adders", "multipliers"), ONE_AT_A_TIME)
def test_published_units_are_the_fewest_for_one_iteration_at_a_time(
    technology: str, steps: int, adders: int, multipliers: int
) -> None:
    assert fits_one_at_a_time(technology, steps, adders, multipliers)
    assert not fits_one_at_a_time(technology, steps, adders - 1, multipliers)
    if multipliers > 1:
        assert not fits_one_at_a_time(technology, steps, adders, multipliers - 1)


# Facts of the graph: registers by the convention of this program, no outside source. The
# cheapest plan at 17 cycles holds for every N <= 17 and is audited bit for bit.
def test_seventeen_cycles_cost_two_adders_one_multiplier_and_eight_registers() -> None:
    found = proven(17, PIPELINED)
    assert (found.value, found.registers) == (14.0, 8)


def test_counting_is_not_binding() -> None:
    """Three multiplications busy 2 cycles at N = 3: two units cover every slot, three are needed.

    Design fact (counting is not binding), computed; no outside source.
    """
    graph = Graph(
        (
            Operation("x", Kind.INPUT),
            *(
                Operation(f"m{i}", Kind.MULTIPLY, (Source("x", 0), Fraction(1, 2)))
                for i in range(3)
            ),
            *(Operation(f"y{i}", Kind.OUTPUT, (Source(f"m{i}", 0),)) for i in range(3)),
        )
    )
    asked = design_of(graph, cycles_per_sample=3, technology=UNPIPELINED, caps={"parallelism": 1})
    assert plan(asked).units["multiplier"] == 3
    capped = design_of(
        graph,
        cycles_per_sample=3,
        technology=UNPIPELINED,
        caps={"parallelism": 1, "multiplier": 2},
    )
    assert plan(capped).status is Status.IMPOSSIBLE


def test_no_error_is_hidden_by_the_helpers() -> None:
    with pytest.raises(FoldwrightError):
        design(17, "no such technology")
