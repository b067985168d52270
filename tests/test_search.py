"""The search finds the smallest hardware, and proves only what is proven."""

from __future__ import annotations

import random
import time
from collections.abc import Callable
from fractions import Fraction
from typing import Any

import networkx as nx
import pytest
from brute_force import Puzzle, TooMuchError, smallest_cost
from datapaths import biquads, datapath, fir

from scheduler import solver
from scheduler.datapath import Datapath, Pair
from scheduler.plan import Copy
from scheduler.search import MANNERS, Finding, Progress, search
from scheduler.solver import Outcome, Program, Stop

REAL = solver.minimise


def random_path(seed: int) -> tuple[Datapath, int]:
    """A graph of two to five operations with ports, and the largest J to look at."""
    rng = random.Random(seed)
    count = rng.randint(2, 5)
    names = [f"v{i}" for i in range(count)]
    units: dict[str, str | None] = {"x": None}
    units |= {name: rng.choice(["adder", "adder", "multiplier"]) for name in names}
    edges = []
    for place, name in enumerate(names):
        for _ in range(2 if units[name] == "adder" else 1):
            source = rng.choice(["x", *names])
            loop = source in names and names.index(source) >= place
            edges.append((source, name, rng.randint(1 if loop else 0, 2)))
    units["y"] = None
    edges.append((rng.choice(names), "y", rng.randint(0, 1)))
    rates = [Fraction(1), Fraction(3, 2), Fraction(2), Fraction(5, 2), Fraction(3), Fraction(4)]
    path = datapath(
        units,
        edges,
        cycles_per_sample=rng.choice(rates),
        inputs=("x",),
        outputs=("y",),
        multiplier_busy=rng.choice([1, 2]),
        serial=rng.random() < 0.7,
        area={"adder": 2, "multiplier": rng.choice([3, 5])},
    )
    return path, rng.choice([1, 2]) if count < 5 else 1


def loop_bound(path: Datapath) -> Fraction:
    """The iteration bound by listing every loop."""
    delays: dict[tuple[Any, Any], int] = {}
    for source, target, count in path.edges:
        delays[source, target] = min(count, delays.get((source, target), count))
    bounds = [
        Fraction(
            sum(path.latency[name] for name in loop),
            sum(delays[ends] for ends in zip(loop, [*loop[1:], loop[0]], strict=True)),
        )
        for loop in nx.simple_cycles(nx.DiGraph(list(delays)))
    ]
    return max(bounds, default=Fraction(0))


def puzzle_of(path: Datapath, parallelism: int) -> Puzzle:
    return Puzzle(
        kind=dict(path.unit),
        latency=dict(path.latency),
        busy={name: path.busy(name) for name in path.unit},
        area={name: kind.area for name, kind in path.kinds.items()},
        register_area=path.register_area,
        edges=tuple((str(u), str(v), w) for u, v, w in path.edges),
        inputs=path.inputs,
        outputs=path.outputs,
        cycles_per_sample=path.slowest,
        parallelism=parallelism,
        serial=path.serial,
    )


@pytest.mark.parametrize("batch", range(30))
def test_it_agrees_with_trying_everything(batch: int) -> None:
    """Ten random graphs a batch; those too large to try everything on are left out, few as are."""
    compared = 0
    for seed in range(10 * batch, 10 * batch + 10):
        path, parallelism = random_path(seed)
        try:
            wanted = smallest_cost(puzzle_of(path, parallelism), most=200)
        except TooMuchError:
            continue
        compared += 1
        bound = loop_bound(path)
        if bound > path.slowest:
            assert wanted is None, f"seed {seed}"
            continue
        finding = search(path, parallelism=parallelism, bound=bound)
        assert finding.finished
        assert finding.bound == wanted, f"seed {seed}"
        assert (finding.best.cost if finding.best else None) == wanted, f"seed {seed}"
    assert compared >= 6


def test_the_same_question_gets_the_same_schedule() -> None:
    path = biquads(2, cycles_per_sample=5)
    first, second = (search(path, parallelism=2, bound=Fraction(4)) for _ in range(2))
    assert first == second


def test_a_plan_at_the_floor_over_all_holds_for_every_parallelism() -> None:
    finding = search(fir(4, cycles_per_sample=4), parallelism=1, bound=Fraction(0))
    assert finding.every_parallelism == (not finding.by_solver)


def test_a_higher_parallelism_saves_units_where_the_cycles_are_not_whole() -> None:
    """Three products in 3/2 cycles: three units at J = 1, two at J = 2."""
    path = fir(3, cycles_per_sample=Fraction(3, 2))
    alone = search(path, parallelism=1, bound=Fraction(0)).best
    two = search(path, parallelism=2, bound=Fraction(0)).best
    assert alone is not None and two is not None
    assert (alone.units["multiplier"], two.units["multiplier"]) == (3, 2)
    assert two.pair == Pair(2, 3)


@pytest.mark.parametrize(
    "caps",
    [{"most": {"multiplier": 1}}, {"registers_most": 0}, {"area_most": 30}, {"latency_cycles": 3}],
)
def test_caps_that_cannot_be_kept_leave_nothing(caps: dict[str, Any]) -> None:
    path = biquads(1, cycles_per_sample=4, **caps)
    finding = search(path, parallelism=2, bound=Fraction(4))
    assert (finding.best, finding.finished, finding.bound) == (None, True, None)


def test_caps_that_can_be_kept_are_kept() -> None:
    free = search(biquads(1, cycles_per_sample=5), parallelism=1, bound=Fraction(4)).best
    assert free is not None
    latency = free.starts[Copy("y", 0)] - free.starts[Copy("x", 0)]
    path = biquads(1, cycles_per_sample=5, latency_cycles=latency - 1)
    capped = search(path, parallelism=1, bound=Fraction(4)).best
    if capped is not None:
        assert capped.starts[Copy("y", 0)] - capped.starts[Copy("x", 0)] < latency
        assert capped.cost >= free.cost


# ---- what is not believed --------------------------------------------------------------------


@pytest.fixture
def lying(monkeypatch: pytest.MonkeyPatch) -> Callable[[Callable[..., Outcome]], None]:
    def put(minimise: Callable[..., Outcome]) -> None:
        monkeypatch.setattr(solver, "minimise", minimise)

    return put


HARD = biquads(2, cycles_per_sample=5)
"""Its floor is not reached, so that its proof rests on the solver."""


def test_a_false_claim_of_the_first_manner_is_found_out_by_the_second(
    lying: Callable[[Callable[..., Outcome]], None],
) -> None:
    honest = search(HARD, parallelism=1, bound=Fraction(4))
    assert honest.best is not None and honest.by_solver

    def deny(program: Program, **options: Any) -> Outcome:
        if options["manner"] == MANNERS[0]:
            return Outcome(Stop.INFEASIBLE, None, None)
        return REAL(program, **options)

    lying(deny)
    assert search(HARD, parallelism=1, bound=Fraction(4)).best is not None
    assert search(HARD, parallelism=1, bound=Fraction(4)).bound == honest.bound


def test_every_claim_that_a_proof_rests_on_is_made_in_both_manners(
    lying: Callable[[Callable[..., Outcome]], None],
) -> None:
    claims = []

    def listen(program: Program, **options: Any) -> Outcome:
        outcome = REAL(program, **options)
        if options["nodes"] is None and outcome.stop is not Stop.LIMIT:
            claims.append(options["manner"])
        return outcome

    lying(listen)
    finding = search(HARD, parallelism=1, bound=Fraction(4))
    assert len(finding.by_solver) >= 1
    assert set(claims) == set(MANNERS)
    assert MANNERS[0].seed != MANNERS[1].seed
    assert MANNERS[0].preprocess != MANNERS[1].preprocess == "off"


@pytest.mark.parametrize("manner", MANNERS)
def test_a_run_that_hits_a_limit_proves_nothing_even_before_the_deadline(
    lying: Callable[[Callable[..., Outcome]], None], manner: solver.Manner
) -> None:
    def give_up(program: Program, **options: Any) -> Outcome:
        if options["manner"] == manner and options["nodes"] is None:
            return Outcome(Stop.LIMIT, None, 10**6)
        return REAL(program, **options)

    lying(give_up)
    finding = search(HARD, parallelism=1, bound=Fraction(4))
    assert not finding.finished
    assert finding.bound is not None
    if finding.best is not None:
        assert finding.bound < finding.best.cost


def test_no_time_at_all_leaves_an_open_answer() -> None:
    finding = search(HARD, parallelism=2, bound=Fraction(4), time_limit=0.0)
    assert not finding.finished


def test_a_time_limit_is_kept() -> None:
    path = biquads(30, cycles_per_sample=Fraction(21, 2))
    began = time.monotonic()
    finding = search(path, parallelism=4, bound=Fraction(4), time_limit=1.0)
    assert time.monotonic() - began < 1.0 + 2.0
    assert not finding.finished
    assert finding.bound is not None and finding.bound > 0


def test_what_was_found_is_at_hand_when_the_search_is_interrupted() -> None:
    finding = Finding()

    def stop(progress: Progress) -> None:
        if progress.best is not None:
            raise KeyboardInterrupt

    with pytest.raises(KeyboardInterrupt):
        search(HARD, parallelism=2, bound=Fraction(4), watch=stop, finding=finding)
    assert finding.best is not None
    assert not finding.finished
