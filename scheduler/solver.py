"""CBC, watched and not believed: the only room that knows the solver.

`minimise` writes a program as an MPS file into a directory of its own, runs the CBC that PuLP
bundles as a process group of its own, kills the group at the deadline, and reads back what it
printed. Values are rounded to whole numbers and checked exactly against every row, so that a
returned solution is one whatever the solver's tolerances were. A verdict ("nothing better",
"infeasible") is only ever the solver's claim: who wants to rely on it asks again with another
`Manner` (see `search`).
"""

from __future__ import annotations

import contextlib
import ctypes
import os
import re
import signal
import subprocess
import sys
import tempfile
import time
from collections.abc import Callable, Iterable, Iterator, Sequence
from dataclasses import dataclass, field
from enum import StrEnum
from pathlib import Path

from scheduler.errors import SolverError

_TOLERANCE = 1e-5
_KILL_GRACE = 1.0
_POLL = 0.005


@dataclass(frozen=True)
class Row:
    """One constraint: low <= sum of coefficient * variable <= high; None where there is no side."""

    terms: tuple[tuple[int, int], ...]
    low: int | None = None
    high: int | None = None


@dataclass
class Program:
    """Minimise a whole-numbered cost over whole-numbered variables.

    Variables are numbers 0, 1, ...; every coefficient, bound and cost is an int.
    """

    lower: list[int | None] = field(default_factory=list)
    upper: list[int | None] = field(default_factory=list)
    cost: list[int] = field(default_factory=list)
    rows: list[Row] = field(default_factory=list)
    contradiction: bool = False

    def variable(self, low: int | None, high: int | None, cost: int = 0) -> int:
        """Adds a variable with its bounds and its share of the cost; returns its number."""
        self.lower.append(low)
        self.upper.append(high)
        self.cost.append(cost)
        return len(self.cost) - 1

    def row(
        self, terms: Iterable[tuple[int, int]], *, low: int | None = None, high: int | None = None
    ) -> None:
        """Adds a constraint on the sum of (variable, coefficient) terms.

        Equal variables are merged and fixed ones put in as numbers; a row without variables left
        is dropped where it holds and makes the program a `contradiction` where it does not.
        """
        merged: dict[int, int] = {}
        constant = 0
        for variable, coefficient in terms:
            fixed = self.upper[variable]
            if fixed is not None and fixed == self.lower[variable]:
                constant += coefficient * fixed
            else:
                merged[variable] = merged.get(variable, 0) + coefficient
        row = Row(
            tuple((v, c) for v, c in merged.items() if c),
            None if low is None else low - constant,
            None if high is None else high - constant,
        )
        if row.terms:
            self.rows.append(row)
        elif not _keeps(row, ()):
            self.contradiction = True

    def value(self, point: Sequence[int]) -> int:
        """The cost of a point."""
        return sum(cost * x for cost, x in zip(self.cost, point, strict=True) if cost)

    def holds(self, point: Sequence[int]) -> bool:
        """Whether a point keeps every bound and every row, exactly."""
        bounded = all(
            (low is None or low <= x) and (high is None or x <= high)
            for x, low, high in zip(point, self.lower, self.upper, strict=True)
        )
        return bounded and all(_keeps(row, point) for row in self.rows)


def _keeps(row: Row, point: Sequence[int]) -> bool:
    total = sum(coefficient * point[variable] for variable, coefficient in row.terms)
    return (row.low is None or row.low <= total) and (row.high is None or total <= row.high)


class Stop(StrEnum):
    """Why a run ended."""

    FINISHED = "finished"  # the solver claims to have searched everything
    INFEASIBLE = "infeasible"  # the solver claims that there is no solution
    LIMIT = "limit"  # of time or nodes; the solver claims nothing


@dataclass(frozen=True)
class Manner:
    """Settings in which two runs differ so that they do not share a fault.

    Attributes:
        preprocess: how CBC may rewrite the integer program before it searches ("sos" is its own
            default, "off" leaves it as it is).
        seed: random seed of both CBC and the simplex code under it.
    """

    preprocess: str = "sos"
    seed: int = 20011


@dataclass(frozen=True)
class Outcome:
    """What a run brought.

    Attributes:
        stop: why it ended.
        point: the best solution, checked exactly; None if there is none.
        bound: the cost below which the solver claims there is nothing; None if it made no claim.
        nodes: nodes of the search tree, as far as the log tells.
    """

    stop: Stop
    point: tuple[int, ...] | None
    bound: int | None
    nodes: int = 0


@dataclass(frozen=True)
class Progress:
    """What the log of a running solver says; None where it says nothing yet."""

    value: float | None
    bound: float | None


def minimise(
    program: Program,
    *,
    seconds: float | None = None,
    nodes: int | None = None,
    manner: Manner = Manner(),
    watch: Callable[[Progress], None] | None = None,
    command: Sequence[str] | None = None,
) -> Outcome:
    """Runs the solver on a program.

    Args:
        program: what to minimise.
        seconds: wall-clock limit; the process is killed shortly after it.
        nodes: limit on the nodes of the search tree, the same on every machine.
        manner: settings of the run.
        watch: called now and then with what the log says; may raise, which ends the run.
        command: the solver program and its first arguments, the bundled CBC by default.

    Raises:
        SolverError: the solver is missing, died, or printed what cannot be read, or its solution
            does not keep the rows.
    """
    if program.contradiction:
        return Outcome(Stop.INFEASIBLE, None, None)
    with tempfile.TemporaryDirectory(prefix="foldwright-") as folder:
        home = Path(folder)
        (home / "program.mps").write_text("\n".join(_mps_lines(program)), encoding="ascii")
        deadline = None if seconds is None else time.monotonic() + seconds
        arguments = [*(command or bundled_cbc()), *_arguments(seconds, nodes, manner)]
        killed = _run(arguments, home, deadline, watch)
        return _outcome(program, home, killed=killed)


def bundled_cbc() -> list[str]:
    """The command that starts the CBC which PuLP brings.

    Raises:
        SolverError: it is not where it should be.
    """
    import pulp  # noqa: PLC0415  (slow to import, and needed only where something is solved)

    path = Path(pulp.PULP_CBC_CMD.pulp_cbc_path)
    if not path.is_file():
        raise SolverError(f"the solver CBC is not where PuLP should bring it ({path})")
    return [str(path)]


def _arguments(seconds: float | None, nodes: int | None, manner: Manner) -> list[str]:
    limit = [] if seconds is None else ["-seconds", f"{max(seconds, 0.01):.2f}"]
    limit += [] if nodes is None else ["-maxNodes", str(nodes)]
    return [
        "program.mps", "-timeMode", "elapsed", *limit,
        "-randomSeed", str(manner.seed), "-randomCbcSeed", str(manner.seed),
        "-preprocess", manner.preprocess,
        "-solve", "-solution", "solution.txt", "-quit",
    ]  # fmt: skip


def _run(
    arguments: Sequence[str],
    home: Path,
    deadline: float | None,
    watch: Callable[[Progress], None] | None,
) -> bool:
    """Runs a command in `home` to its end or the deadline; True if it had to be killed."""
    with (home / "log.txt").open("wb") as log:
        try:
            process = subprocess.Popen(  # noqa: S603  (the bundled solver, or a test's own program)
                arguments, cwd=home, stdin=subprocess.DEVNULL, stdout=log,
                stderr=subprocess.STDOUT, start_new_session=True, preexec_fn=_die_with_parent,  # noqa: PLW1509
            )  # fmt: skip
        except OSError as error:
            raise SolverError(f"the solver cannot be started: {error}") from error
        try:
            killed = _wait(process, home / "log.txt", deadline, watch)
        finally:
            _end(process)
    if not killed and process.returncode != 0:
        raise SolverError(f"the solver died with exit code {process.returncode}")
    return killed


def _die_with_parent() -> None:
    """Asks Linux to kill this process when its parent is gone, even by kill -9."""
    if sys.platform == "linux":
        ctypes.CDLL(None).prctl(1, signal.SIGKILL)  # 1: PR_SET_PDEATHSIG


def _wait(
    process: subprocess.Popen[bytes],
    log: Path,
    deadline: float | None,
    watch: Callable[[Progress], None] | None,
) -> bool:
    """Waits for the end of the process; True when the deadline came first."""
    pause, told = _POLL, time.monotonic()
    while True:
        with contextlib.suppress(subprocess.TimeoutExpired):
            process.wait(timeout=pause)
            return False
        now = time.monotonic()
        if deadline is not None and now > deadline + _KILL_GRACE:
            return True
        if watch is not None and now - told > 0.2:
            told = now
            watch(_progress(log.read_text(encoding="utf-8", errors="replace")))
        pause = min(2 * pause, 0.1)


def _end(process: subprocess.Popen[bytes]) -> None:
    """Kills what is left of the process group and reaps it."""
    with contextlib.suppress(ProcessLookupError, PermissionError):
        os.killpg(process.pid, signal.SIGKILL)
    process.wait()


# ---- writing ---------------------------------------------------------------------------------


def _mps_lines(program: Program) -> Iterator[str]:
    """The program in free MPS form, every bound of every variable spelt out."""
    yield "NAME foldwright FREE"
    yield "ROWS"
    yield " N cost"
    for index, row in enumerate(program.rows):
        yield f" {_sense(row)} r{index}"
    yield "COLUMNS"
    yield " MARK0 'MARKER' 'INTORG'"
    yield from _column_lines(program)
    yield " MARK1 'MARKER' 'INTEND'"
    yield "RHS"
    for index, row in enumerate(program.rows):
        side = row.high if row.low is None else row.low
        if side:
            yield f" RHS r{index} {side}"
    yield "RANGES"
    for index, row in enumerate(program.rows):
        if row.low is not None and row.high is not None and row.low != row.high:
            yield f" RNG r{index} {row.high - row.low}"
    yield "BOUNDS"
    for index, (low, high) in enumerate(zip(program.lower, program.upper, strict=True)):
        yield f" MI BND x{index}" if low is None else f" LO BND x{index} {low}"
        yield f" PL BND x{index}" if high is None else f" UP BND x{index} {high}"
    yield "ENDATA"
    yield ""


def _sense(row: Row) -> str:
    if row.low is None:
        return "L"
    return "E" if row.low == row.high else "G"


def _column_lines(program: Program) -> Iterator[str]:
    columns: list[list[str]] = [[] for _ in program.cost]
    for index, row in enumerate(program.rows):
        for variable, coefficient in row.terms:
            columns[variable].append(f"r{index} {coefficient}")
    for variable, (cost, entries) in enumerate(zip(program.cost, columns, strict=True)):
        yield f" x{variable} cost {cost}"
        for entry in entries:
            yield f" x{variable} {entry}"


# ---- reading ---------------------------------------------------------------------------------

_HEAD = re.compile(r"^(?P<words>.*?) - objective value (?P<value>\S+)$")
_RUNNING = re.compile(
    r"Cbc0010I After \d+ nodes.*?([-\d.e+]+) best solution, best possible ([-\d.e+]+)"
)


def _outcome(program: Program, home: Path, *, killed: bool) -> Outcome:
    log = (home / "log.txt").read_text(encoding="utf-8", errors="replace")
    answer = home / "solution.txt"
    if killed:
        return Outcome(Stop.LIMIT, None, None)
    if not answer.is_file():
        raise SolverError(f"the solver left no answer; its last words: {_last_words(log)}")
    head, *lines = answer.read_text(encoding="utf-8", errors="replace").splitlines() or [""]
    match = _HEAD.match(head)
    if match is None:
        raise SolverError(f"the solver's answer cannot be read: {head[:80]!r}")
    return _judge(program, match["words"], lines, log)


def _judge(program: Program, words: str, lines: Sequence[str], log: str) -> Outcome:
    """Turns the solver's words into an outcome; what is not understood is an error."""
    nodes = _number(log, r"Enumerated nodes:\s+(\d+)")
    if words in ("Infeasible", "Integer infeasible"):
        return Outcome(Stop.INFEASIBLE, None, None, int(nodes or 0))
    if words == "Optimal":
        point = _point(program, lines)
        return Outcome(Stop.FINISHED, point, program.value(point), int(nodes or 0))
    if words.startswith("Stopped on"):
        bound = _number(log, r"Lower bound:\s+(\S+)")
        point_or_none = None if "no integer solution" in words else _point(program, lines)
        whole = None if bound is None else int(-(-(bound - _TOLERANCE) // 1))
        return Outcome(Stop.LIMIT, point_or_none, whole, int(nodes or 0))
    raise SolverError(f"the solver ended with words nobody knows: {words[:80]!r}")


def _point(program: Program, lines: Sequence[str]) -> tuple[int, ...]:
    values = [0] * len(program.cost)
    try:
        for line in lines:
            _, name, value, *_ = line.replace("**", " ").split()
            values[int(name.removeprefix("x"))] = round(float(value))
    except (ValueError, IndexError, OverflowError) as error:
        raise SolverError(f"the solver's answer cannot be read: {line[:80]!r}") from error
    if not program.holds(values):
        raise SolverError("the solver's answer does not keep the constraints")
    return tuple(values)


def _number(text: str, pattern: str) -> float | None:
    match = re.search(pattern, text)
    if match is None:
        return None
    try:
        return float(match[1])
    except ValueError as error:
        raise SolverError(f"the solver's log cannot be read: {match[0]!r}") from error


def _progress(log: str) -> Progress:
    found = _RUNNING.findall(log)
    if not found:
        return Progress(None, None)
    value, bound = found[-1]
    return Progress(None if float(value) > 1e40 else float(value), float(bound))


def _last_words(log: str) -> str:
    lines = [line for line in log.splitlines() if line.strip()]
    return repr(lines[-1][:80]) if lines else "none"
