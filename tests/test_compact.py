"""The compact bound: exact, and below every schedule."""

from __future__ import annotations

from collections.abc import Hashable
from fractions import Fraction

import numpy as np
import pytest
from datapaths import biquads, datapath, fir
from hypothesis import given
from hypothesis import strategies as st
from scipy.optimize import linprog

from scheduler.compact import Compact, compact, longest_paths
from scheduler.datapath import Block, Datapath, Pair, block_of


def solved(block: Block, rate: Fraction | None = None) -> Compact:
    found = compact(block, rate=rate)
    assert found is not None
    return found


def by_linear_program(path: Datapath, rate: Fraction) -> float | None:
    """Register cycles of one sample by scipy's simplex: starts and lifetimes as real numbers."""
    names = list(path.latency)
    sources = list(dict.fromkeys(edge.source for edge in path.edges))
    columns = len(names) + len(sources)
    rows, sides = [], []
    for source, target, delays in path.edges:
        slack = float(delays * rate - path.latency[source])  # D = slack + s(v) - s(u)
        held = np.zeros(columns)
        if source != target:
            held[names.index(target)], held[names.index(source)] = 1, -1
        rows.append(-held)
        sides.append(slack)
        lifetime = held.copy()
        lifetime[len(names) + sources.index(source)] = -1
        rows.append(lifetime)
        sides.append(-slack)
    for other in path.inputs[1:]:
        for sign in (1, -1):
            row = np.zeros(columns)
            row[names.index(path.inputs[0])], row[names.index(other)] = sign, -sign
            rows.append(row)
            sides.append(0.0)
    costs = np.concatenate([np.zeros(len(names)), np.ones(len(sources))])
    answer = linprog(costs, A_ub=np.array(rows), b_ub=sides, bounds=(None, None))
    return float(answer.fun) if answer.status == 0 else None


@st.composite
def graphs(draw: st.DrawFn) -> Datapath:
    """Small graphs, loops and parallel edges included, with two inputs."""
    names = [f"v{i}" for i in range(draw(st.integers(1, 6)))]
    units: dict[str, str | None] = {"x": None, "z": None}
    units |= {name: draw(st.sampled_from(["adder", "multiplier"])) for name in names}
    edges = []
    for place, name in enumerate(names):
        for _ in range(draw(st.integers(1, 2))):
            source = draw(st.sampled_from(["x", "z", *names]))
            loop = source in names and names.index(source) >= place
            edges.append((source, name, draw(st.integers(1 if loop else 0, 3))))
    units["y"] = None
    edges.append((names[-1], "y", 0))
    return datapath(units, edges, cycles_per_sample=9, inputs=("x", "z"), outputs=("y",))


@given(graphs(), st.fractions(1, 6, max_denominator=4))
def test_it_is_the_optimum_of_the_linear_program(path: Datapath, rate: Fraction) -> None:
    wanted = by_linear_program(path, rate)
    found = compact(block_of(path, Pair(1, 1)), rate=rate)
    if found is None:
        assert wanted is None
    else:
        assert wanted == pytest.approx(found.register_cycles / rate.denominator, abs=1e-6)


@given(graphs(), st.integers(1, 3), st.integers(1, 9))
def test_an_unfolded_block_needs_no_fewer_than_the_average(
    path: Datapath, parallelism: int, cycles: int
) -> None:
    pair = Pair(parallelism, cycles)
    found = compact(block_of(path, pair))
    average = compact(block_of(path, Pair(1, 1)), rate=pair.rate)
    assert average is not None or found is None
    if found is not None and average is not None:
        assert found.register_cycles >= average.certificate.registers(pair.rate) * cycles


@given(graphs(), st.fractions(1, 6, max_denominator=4), st.fractions(1, 6, max_denominator=4))
def test_a_certificate_holds_at_every_other_rate(
    path: Datapath, here: Fraction, there: Fraction
) -> None:
    block = block_of(path, Pair(1, 1))
    one, other = compact(block, rate=here), compact(block, rate=there)
    if one is not None and other is not None:
        best = other.certificate.registers(there)
        assert one.certificate.registers(there) <= best
        assert best == Fraction(other.register_cycles, there.numerator)


@given(graphs(), st.integers(1, 3), st.integers(4, 12))
def test_its_starts_attain_it(path: Datapath, parallelism: int, cycles: int) -> None:
    block = block_of(path, Pair(parallelism, cycles))
    found = compact(block)
    if found is None:
        return
    held: dict[Hashable, int] = {}
    for source, target, delays in block.edges:
        (start, late), (read, later) = block.anchors[source], block.anchors[target]
        wait = (
            found.starts[read] + later + delays * cycles
            - found.starts[start] - late - path.latency[source.name]
        )  # fmt: skip
        assert wait >= 0
        held[source] = max(held.get(source, 0), wait)
    assert sum(held.values()) == found.register_cycles


def test_no_schedule_where_a_loop_is_too_slow() -> None:
    ring = datapath(
        {"a": "adder", "m": "multiplier"}, [("a", "m", 1), ("m", "a", 0)], cycles_per_sample=9
    )
    assert compact(block_of(ring, Pair(1, 2))) is None
    assert compact(block_of(ring, Pair(1, 3))) is not None


def test_a_cap_on_the_latency_is_kept() -> None:
    def capped(most: int) -> Compact | None:
        return compact(block_of(fir(4, cycles_per_sample=4, latency_cycles=most), Pair(1, 4)))

    assert capped(4) is None  # a product and three sums take five cycles
    assert capped(5) is not None


def test_a_cascade_costs_a_whole_number_of_register_cycles_a_section() -> None:
    """No outside source: each section adds the same, so the bound is linear in their number."""
    one, two, three = (
        solved(block_of(biquads(n, cycles_per_sample=10), Pair(1, 10))).register_cycles
        for n in (1, 2, 3)
    )
    assert three - two == two - one > 0


def test_longest_paths_from_one_node_leave_out_what_it_does_not_reach() -> None:
    differences = [("a", "b", 2), ("a", "b", 5), ("b", "c", -1), ("d", "a", 3)]
    assert longest_paths(differences, "a") == {"a": 0, "b": 5, "c": 4}
    assert longest_paths(differences) == {"a": 3, "b": 8, "c": 7, "d": 0}
