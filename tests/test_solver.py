"""The solver is run, watched and not believed."""

from __future__ import annotations

import itertools
import os
import sys
import tempfile
import textwrap
import time
from collections.abc import Callable
from pathlib import Path

import pytest
from hypothesis import given
from hypothesis import strategies as st

from scheduler.errors import SolverError
from scheduler.solver import Manner, Program, Progress, Stop, bundled_cbc, minimise

PLAIN = Manner(preprocess="off")


def small_program() -> Program:
    """Minimise 3a + 2b with a + b >= 3 and a - b <= 1, both from 0 to 9: b = 3 costs 6."""
    program = Program()
    a, b = program.variable(0, 9, 3), program.variable(0, 9, 2)
    program.row([(a, 1), (b, 1)], low=3)
    program.row([(a, 1), (b, -1)], high=1)
    return program


@pytest.fixture
def fake(tmp_path: Path) -> Callable[[str], list[str]]:
    """Makes a solver program out of a few lines of Python."""

    def make(body: str) -> list[str]:
        script = tmp_path / "solver.py"
        script.write_text(textwrap.dedent(body), encoding="utf-8")
        return [sys.executable, str(script)]

    return make


def answering(text: str, log: str = "") -> str:
    return f"""
        import pathlib
        print({log!r})
        pathlib.Path("solution.txt").write_text({text!r})
    """


class TestRunningCbc:
    def test_finds_the_optimum(self) -> None:
        outcome = minimise(small_program())
        assert (outcome.stop, outcome.point, outcome.bound) == (Stop.FINISHED, (0, 3), 6)

    def test_says_when_there_is_no_solution(self) -> None:
        program = small_program()
        program.row([(0, 1), (1, 1)], high=2)
        for manner in (Manner(), PLAIN):
            assert minimise(program, manner=manner).stop is Stop.INFEASIBLE

    def test_bounds_may_be_negative_or_missing(self) -> None:
        program = Program()
        low, free = program.variable(-7, None, 1), program.variable(None, None, 1)
        program.row([(low, 1), (free, 1)], low=-20, high=5)
        program.row([(free, 1)], low=-13)
        assert minimise(program).bound == -20

    def test_a_row_on_fixed_variables_alone_needs_no_solver(self) -> None:
        program = Program()
        fixed = program.variable(2, 2, 1)
        program.row([(fixed, 3)], low=7)
        assert minimise(program, command=["no such program"]).stop is Stop.INFEASIBLE

    def test_works_in_a_temporary_folder_with_a_space_and_leaves_nothing(
        self, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
    ) -> None:
        folder = tmp_path / "with a space"
        folder.mkdir()
        monkeypatch.setattr(tempfile, "tempdir", str(folder))
        assert minimise(small_program()).bound == 6
        assert list(folder.iterdir()) == []

    @given(
        st.lists(st.tuples(st.integers(-3, 3), st.integers(-3, 3), st.integers(-4, 6)), max_size=3),
        st.tuples(st.integers(-3, 3), st.integers(-3, 3)),
    )
    def test_agrees_with_trying_every_point(
        self, rows: list[tuple[int, int, int]], costs: tuple[int, int]
    ) -> None:
        program = Program()
        variables = [program.variable(-2, 3, cost) for cost in costs]
        for *coefficients, low in rows:
            program.row(zip(variables, coefficients, strict=True), low=low)
        points = itertools.product(range(-2, 4), repeat=2)
        values = [
            costs[0] * x + costs[1] * y
            for x, y in points
            if all(a * x + b * y >= low for a, b, low in rows)
        ]
        assert minimise(program, manner=PLAIN).bound == min(values, default=None)


# A public report (PuLP, issue 662): with its default preprocessing CBC 2.10.3 calls this feasible
# program infeasible when its numbers are written as 1.62e+04; written as 16200 it is solved.
def misjudged_program() -> Program:
    program = Program()
    c0, c1 = program.variable(0, 1, 1), program.variable(0, 1, 1)
    x0, x1, x2 = (program.variable(0, 1) for _ in range(3))
    program.row([(x0, 1), (c1, 1)], low=1, high=1)
    program.row([(x0, 1), (c0, 1)], low=1)
    program.row([(x1, 1), (c1, 1)], high=1)
    program.row([(c0, 1), (c1, 1)], high=1)
    program.row([(x2, 1)], low=1, high=1)
    program.row([(x1, 9000), (x2, 7200), (c1, 10800)], low=16200)
    return program


@pytest.fixture
def cbc_reading_exponents(fake: Callable[[str], list[str]]) -> list[str]:
    """The bundled CBC, handed the program with its numbers in exponent form."""
    return fake(f"""
        import pathlib, re, subprocess, sys
        file = pathlib.Path("program.mps")
        number = re.compile(r" (\\d+)$", re.MULTILINE)
        file.write_text(number.sub(lambda m: f" {{int(m[1]):.12e}}", file.read_text()))
        sys.exit(subprocess.run([*{bundled_cbc()!r}, *sys.argv[1:]]).returncode)
    """)


class TestFalseInfeasible:
    def test_default_preprocessing_denies_a_solution_that_exists(
        self, cbc_reading_exponents: list[str]
    ) -> None:
        program = misjudged_program()
        assert program.holds((0, 0, 1, 1, 1))
        assert minimise(program, command=cbc_reading_exponents).stop is Stop.INFEASIBLE

    def test_a_run_without_preprocessing_finds_it(self, cbc_reading_exponents: list[str]) -> None:
        outcome = minimise(misjudged_program(), manner=PLAIN, command=cbc_reading_exponents)
        assert outcome.bound == 0

    def test_whole_numbers_written_as_such_are_not_misjudged(self) -> None:
        assert minimise(misjudged_program()).bound == 0


class TestAnswersThatAreNotBelieved:
    def test_values_are_rounded_and_the_cost_is_counted_anew(
        self, fake: Callable[[str], list[str]]
    ) -> None:
        text = "Optimal - objective value 5.00000000\n 1 x1 2.999999999999998 0\n"
        outcome = minimise(small_program(), command=fake(answering(text)))
        assert (outcome.point, outcome.bound) == ((0, 3), 6)

    @pytest.mark.parametrize(
        ("text", "words"),
        [
            ("", "cannot be read"),
            ("no such form\n", "cannot be read"),
            ("Optimal - objective value 6\n 0 x0", "cannot be read"),
            ("Optimal - objective value 6\n 0 x7 1 0\n", "cannot be read"),
            ("Optimal - objective value 6\n 0 x1 nan 0\n", "cannot be read"),
            ("Optimal - objective value 6\n 0 x1 inf 0\n", "cannot be read"),
            ("Optimal - objective value 6\n 1 x1 1 0\n", "does not keep the constraints"),
            ("Optimal - objective value 6\n 1 x1 2.5 0\n", "does not keep the constraints"),
            ("Splendid - objective value 6\n", "words nobody knows"),
            ("Unbounded - objective value 6\n", "words nobody knows"),
        ],
    )
    def test_nonsense_is_an_error(
        self, fake: Callable[[str], list[str]], text: str, words: str
    ) -> None:
        with pytest.raises(SolverError, match=words):
            minimise(small_program(), command=fake(answering(text)))

    def test_no_answer_at_all_is_an_error(self, fake: Callable[[str], list[str]]) -> None:
        with pytest.raises(SolverError, match="no answer; its last words: 'hello'"):
            minimise(small_program(), command=fake("print('hello')"))

    def test_a_stop_on_a_limit_claims_nothing(self, fake: Callable[[str], list[str]]) -> None:
        text = "Stopped on time - objective value 8\n 0 x0 1 0\n 1 x1 4 0\n"
        outcome = minimise(small_program(), command=fake(answering(text)))
        assert (outcome.stop, outcome.point, outcome.bound) == (Stop.LIMIT, (1, 4), None)

    def test_values_without_a_solution_are_not_read(self, fake: Callable[[str], list[str]]) -> None:
        text = (
            "Stopped on time (no integer solution - continuous used) - objective value 5\n 1 x1 3 0"
        )
        outcome = minimise(small_program(), command=fake(answering(text)))
        assert (outcome.stop, outcome.point) == (Stop.LIMIT, None)


class TestLosingTheSolver:
    def test_a_missing_program(self) -> None:
        with pytest.raises(SolverError, match="cannot be started"):
            minimise(small_program(), command=["/no/such/solver"])

    @pytest.mark.parametrize("body", ["raise SystemExit(3)", "import os; os.abort()"])
    def test_a_crash(self, fake: Callable[[str], list[str]], body: str) -> None:
        with pytest.raises(SolverError, match="died with exit code"):
            minimise(small_program(), command=fake(body))


STUBBORN = """
    import pathlib, signal, subprocess, sys
    signal.signal(signal.SIGTERM, signal.SIG_IGN)
    signal.signal(signal.SIGINT, signal.SIG_IGN)
    child = subprocess.Popen([sys.executable, "-c", "input()"], stdin=subprocess.PIPE)
    pathlib.Path({where!r}).write_text(str(child.pid))
    words = "3 on tree, 9 best solution, best possible 4.5 (0.1 seconds)"
    print("Cbc0010I After 7 nodes,", words, flush=True)
    signal.pause()
"""


def is_gone(pid: int) -> bool:
    """Whether a killed process has ended, given two seconds to do so."""
    until = time.monotonic() + 2
    while is_running(pid):
        if time.monotonic() > until:
            return False
    return True


def is_running(pid: int) -> bool:
    try:
        state = Path(f"/proc/{pid}/stat").read_text(encoding="ascii").rsplit(")", 1)[1].split()[0]
    except FileNotFoundError:
        return False
    return state != "Z"


@pytest.mark.skipif(not Path("/proc/self").exists(), reason="looks processes up in /proc")
class TestStopping:
    def test_a_solver_that_overruns_its_limit_is_killed_with_its_children(
        self, fake: Callable[[str], list[str]], tmp_path: Path
    ) -> None:
        note = tmp_path / "pid"
        began = time.monotonic()
        outcome = minimise(
            small_program(), seconds=0.5, command=fake(STUBBORN.format(where=str(note)))
        )
        assert outcome.stop is Stop.LIMIT
        assert time.monotonic() - began < 0.5 + 2
        assert is_gone(int(note.read_text(encoding="ascii")))

    def test_whoever_watches_can_end_the_run(
        self, fake: Callable[[str], list[str]], tmp_path: Path, monkeypatch: pytest.MonkeyPatch
    ) -> None:
        folder = tmp_path / "temporary"
        folder.mkdir()
        monkeypatch.setattr(tempfile, "tempdir", str(folder))
        note = tmp_path / "pid"
        seen: list[Progress] = []

        def watch(progress: Progress) -> None:
            seen.append(progress)
            if progress.bound is not None:
                raise KeyboardInterrupt

        with pytest.raises(KeyboardInterrupt):
            minimise(small_program(), watch=watch, command=fake(STUBBORN.format(where=str(note))))
        assert seen[-1] == Progress(9.0, 4.5)
        assert is_gone(int(note.read_text(encoding="ascii")))
        assert list(folder.iterdir()) == []

    def test_the_child_is_no_member_of_our_process_group(
        self, fake: Callable[[str], list[str]], tmp_path: Path
    ) -> None:
        note = tmp_path / "group"
        body = f"""
            import os, pathlib
            pathlib.Path({str(note)!r}).write_text(str(os.getpgrp()))
            pathlib.Path("solution.txt").write_text("Infeasible - objective value 0")
        """
        minimise(small_program(), command=fake(body))
        assert int(note.read_text(encoding="ascii")) != os.getpgrp()
