"""Pairs (J, N) and the floors under them."""

from __future__ import annotations

from dataclasses import replace
from fractions import Fraction

import numpy as np
import pytest
from datapaths import biquads, datapath, fir

from scheduler.compact import compact
from scheduler.datapath import Datapath, Pair, block_of
from scheduler.overall import floor_over_all
from scheduler.pairs import Pairs, certificate_at, pairs_of


def listed(pairs: Pairs) -> list[Pair]:
    return [Pair(int(j), int(n)) for j, n in zip(pairs.parallelism, pairs.cycles, strict=True)]


def test_cycles_run_from_what_loops_need_to_what_the_rate_allows() -> None:
    pairs = pairs_of(biquads(1, cycles_per_sample=Fraction(9, 2)), 3, Fraction(4))
    assert listed(pairs) == [(1, 4), (2, 8), (2, 9), (3, 12), (3, 13)]


def test_no_period_is_shorter_than_a_busy_unit() -> None:
    pairs = pairs_of(fir(3, cycles_per_sample=2, multiplier_busy=2), 1, Fraction(0))
    assert listed(pairs) == [(1, 2)]


def test_the_least_floor_comes_first_and_small_blocks_before_large_ones() -> None:
    pairs = pairs_of(biquads(2, cycles_per_sample=5), 2, Fraction(4))
    taken = []
    while (ahead := pairs.next(None)) is not None:
        taken.append(ahead)
        pairs.close(ahead[0])
    floors = [floor for _, floor in taken]
    assert floors == sorted(floors)
    assert taken[0][0] == (1, 5)
    assert {pair for pair, _ in taken} == {(1, 4), (1, 5), (2, 8), (2, 9), (2, 10)}


def test_floors_rise_to_units_and_registers() -> None:
    path = biquads(2, cycles_per_sample=5)
    pairs = pairs_of(path, 1, Fraction(4))
    assert pairs.tighten(Fraction(5))
    assert not pairs.tighten(Fraction(5))
    found = compact(block_of(path, Pair(1, 5)))
    assert found is not None
    registers = -(-found.register_cycles // 5)
    # ten multiplications and eight additions in five cycles
    assert pairs.next(None) == (Pair(1, 5), 2 * 16 + 2 * 2 + registers)


def test_pairs_beyond_a_cap_are_out() -> None:
    path = biquads(2, cycles_per_sample=5, most={"multiplier": 2})
    pairs = pairs_of(path, 1, Fraction(4))
    assert pairs.next(None) == (Pair(1, 5), 36)
    pairs.close(Pair(1, 5))
    assert pairs.next(None) is None
    path = biquads(2, cycles_per_sample=5, registers_most=1)
    pairs = pairs_of(path, 1, Fraction(4))
    pairs.tighten(Fraction(5))
    assert pairs.next(None) is None


def test_nothing_below_the_best_plan_is_left() -> None:
    pairs = pairs_of(biquads(1, cycles_per_sample=5), 1, Fraction(4))
    assert pairs.next(below=1) is None
    assert pairs_of(biquads(1, cycles_per_sample=3), 1, Fraction(4)).next(None) is None


def every_floor(path: Datapath, parallelism: int, bound: Fraction) -> int:
    """The least floor over all pairs, each with its own certificate."""
    pairs = pairs_of(path, parallelism, bound)
    for pair in listed(pairs):
        pairs.tighten(pair.rate)
    return int(np.min(pairs.floors))


@pytest.mark.parametrize(
    ("path", "bound"),
    [
        (biquads(1, cycles_per_sample=Fraction(9, 2)), Fraction(4)),
        (biquads(2, cycles_per_sample=Fraction(7)), Fraction(4)),
        (fir(6, cycles_per_sample=Fraction(5, 2)), Fraction(0)),
        (fir(5, cycles_per_sample=Fraction(2, 3)), Fraction(0)),
    ],
)
def test_the_floor_over_all_is_below_every_pair(path: Datapath, bound: Fraction) -> None:
    floor = floor_over_all(path, bound, enough=10**6)
    assert 0 < floor <= every_floor(path, 6, bound)
    assert floor_over_all(path, bound, enough=floor) == floor
    assert floor_over_all(path, bound, enough=floor - 1) == floor - 1


def test_the_floor_over_all_of_a_path_without_units() -> None:
    path = datapath(
        {"x": None, "y": None}, [("x", "y", 3)], cycles_per_sample=4, inputs=("x",), outputs=("y",)
    )
    assert floor_over_all(path, Fraction(0), enough=10) <= 3


def test_certificates_ignore_caps_on_the_latency() -> None:
    path = fir(4, cycles_per_sample=4)
    capped = replace(path, latency_cycles=1)
    assert certificate_at(capped, Fraction(4)) == certificate_at(path, Fraction(4)) is not None
