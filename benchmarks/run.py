"""Measures the cases and prints or writes the table.

    python benchmarks/run.py                measures all and prints the table
    python benchmarks/run.py --write        and puts it into benchmarks/results.md
    python benchmarks/run.py --smoke        a few quick ones; checks values, not times

Seconds are of wall clock, in one process that runs one solver at a time, the median of three.
"""

from __future__ import annotations

import argparse
import datetime as dt
import os
import statistics
import subprocess
import sys
import time
from pathlib import Path

from cases import Case, registry

from scheduler.plan import Plan, Status
from scheduler.planning import plan

RESULTS = Path(__file__).parent / "results.md"
SMOKE = {"elliptic, N <= 16, pipelined": 15.0, "128 taps, 8 cycles": 216.0}
"""Areas that the program has proven; the smoke run fails where one changes."""
REPEATS = 3
HEAD = (
    "| case | operations | J | N | area | bound | status | by solver | seconds | target |",
    "|---|---|---|---|---|---|---|---|---|---|",
)


def measured(case: Case, repeats: int) -> tuple[Plan, float]:
    """The plan of a case and the median of its seconds, the audit included."""
    design, seconds, found = case.make(), [], None
    for _ in range(repeats):
        began = time.perf_counter()
        found = plan(design)
        seconds.append(time.perf_counter() - began)
    assert found is not None
    return found, statistics.median(seconds)


def line(case: Case, found: Plan, seconds: float) -> str:
    cells = [
        case.name,
        sum(op.unit is not None for op in found.operations) // (found.parallelism or 1),
        found.parallelism,
        found.cycles,
        found.value,
        found.bound,
        found.status,
        len(found.proof.by_solver),
        f"{seconds:.2f}",
        f"{case.target:g}",
    ]
    return "| " + " | ".join(map(str, cells)) + " |"


def limits_seconds() -> float:
    """Start of the program to limits printed, as a process."""
    seconds = []
    for _ in range(5):
        began = time.perf_counter()
        subprocess.run(
            [sys.executable, "-m", "scheduler", "limits", "gearbox-vibration-band"],
            check=True,
            stdout=subprocess.DEVNULL,
        )
        seconds.append(time.perf_counter() - began)
    return statistics.median(seconds)


def smoke() -> None:
    for case in registry():
        if case.name in SMOKE:
            found, _ = measured(case, 1)
            assert found.status is Status.PROVEN, case.name
            assert found.value == SMOKE[case.name], (case.name, found.value)
            print(f"{case.name}: {found.value}, proven")


def table() -> list[str]:
    rows = list(HEAD)
    for case in registry():
        rows.append(line(case, *measured(case, REPEATS)))
        print(rows[-1], flush=True)
    cores = len(os.sched_getaffinity(0)) if hasattr(os, "sched_getaffinity") else os.cpu_count()
    rows += ["", f"Start of the program to `limits` printed: {limits_seconds():.2f} s."]
    rows += ["", f"{dt.date.today():%Y-%m-%d}, a machine of {cores} cores, one in use."]
    return rows


def main() -> None:
    parser = argparse.ArgumentParser(description="Measures foldwright.")
    parser.add_argument("--smoke", action="store_true")
    parser.add_argument("--write", action="store_true")
    options = parser.parse_args()
    if options.smoke:
        smoke()
        return
    rows = table()
    if options.write:
        text = "\n".join(["# Results", "", *rows, ""])
        RESULTS.write_text(text, encoding="utf-8")


if __name__ == "__main__":
    main()
