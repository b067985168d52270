"""The Python interface: what is promised can be imported, and the main job runs from it."""

from __future__ import annotations

import importlib
import subprocess
import sys

import scheduler
from scheduler.planning import plan


def test_every_name_promised_is_there_and_comes_from_one_room() -> None:
    for name in scheduler.__all__:
        assert getattr(scheduler, name) is not None
    rooms = [room for room, names in scheduler._ROOMS.items() for _ in names]
    assert len(rooms) == len(scheduler.__all__)
    assert all(importlib.import_module(f"scheduler.{room}") for room in set(rooms))


def test_a_graph_is_built_planned_and_read() -> None:
    graph = scheduler.graph_of(
        scheduler.parse_equations("y[n] = x[n] + 0.5*y[n-1]", ["x"], ["y"]), ["x"], ["y"]
    )
    found = plan(scheduler.design_of(graph, cycles_per_sample=3))
    assert found.status is scheduler.Status.PROVEN
    assert found.units == {"adder": 1, "multiplier": 1}
    assert found.value == 9.0  # 8 and 1, and no register: the loop takes all three cycles


def test_limits_start_without_the_solver_side_and_pandas() -> None:
    code = (
        "import sys; from scheduler.cli import main; main(['limits', 'gearbox-vibration-band']);"
        "print([m for m in ('pulp', 'pandas', 'scheduler.search') if m in sys.modules])"
    )
    done = subprocess.run(
        [sys.executable, "-c", code], capture_output=True, text=True, check=True, timeout=60
    )
    assert done.stdout.splitlines()[-1] == "[]"
