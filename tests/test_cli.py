"""The command line, run as a process the way a user runs it."""

from __future__ import annotations

import json
import os
import signal
import subprocess
import sys
import textwrap
from collections.abc import Callable
from pathlib import Path
from typing import Any

import pytest

FOLDWRIGHT = [sys.executable, "-m", "scheduler"]
ROOT = Path(__file__).parent.parent

DESIGN = """
title = "Test"
[algorithm]
inputs = ["x"]
outputs = ["y"]
equations = '''
w[n] = x[n] + 0.5*w[n-1]
y[n] = w[n] + w[n-1]
'''
[requirement]
sample_rate = "2 MHz"
clock = "8 MHz"
[technology]
use = "unit-time"
"""


def foldwright(*words: str, **options: Any) -> subprocess.CompletedProcess[str]:
    environment = {**os.environ, "PYTHONPATH": str(ROOT), "COLUMNS": "80"}
    return subprocess.run(
        [*FOLDWRIGHT, *words],
        capture_output=True,
        text=True,
        encoding="utf-8",
        timeout=100,
        check=False,
        env=environment,
        **options,
    )


@pytest.fixture
def write(tmp_path: Path) -> Callable[[str], str]:
    def put(text: str, name: str = "design.toml") -> str:
        path = tmp_path / name
        path.write_text(text, encoding="utf-8")
        return str(path)

    return put


def test_a_plan_is_found_printed_saved_and_audited(
    write: Callable[[str], str], tmp_path: Path
) -> None:
    saved = tmp_path / "plan.json"
    planned = foldwright("plan", write(DESIGN), "--save", str(saved))
    assert planned.returncode == 0, planned.stderr
    assert planned.stdout.startswith("Test: 1 adder, 1 multiplier")
    assert "Proven" in planned.stdout
    assert planned.stderr == ""
    audited = foldwright("audit", str(saved))
    assert audited.returncode == 0
    assert "The plan stands" in audited.stdout


def test_json_stands_alone_on_stdout_and_keeps_the_contract(write: Callable[[str], str]) -> None:
    planned = foldwright("plan", write(DESIGN), "--json")
    document = json.loads(planned.stdout)
    assert document["format"] == "foldwright-plan"
    assert document["version"] == 1
    assert document["status"] == "proven"
    assert document["objective"]["value"] == document["objective"]["bound"]
    assert document["clock_period_ns"] == pytest.approx(
        500 * document["parallelism"] / document["cycles"]
    )
    limits = json.loads(foldwright("limits", write(DESIGN), "--json").stdout)
    assert limits["iteration_bound"] == "3"


def test_requirements_caps_and_technology_can_be_changed(write: Callable[[str], str]) -> None:
    design = write(DESIGN)
    slow = json.loads(foldwright("plan", design, "--json", "--sample-rate", "250 kHz").stdout)
    assert slow["sample_period_ns"] == 4000
    abstract = foldwright("plan", design, "--json", "--cycles-per-sample", "7/2")
    assert json.loads(abstract.stdout)["clock_period_ns"] is None
    words = ["--technology", "unit-time-unpipelined", "--cap", "parallelism=1", "--json"]
    other = json.loads(foldwright("plan", design, *words).stdout)
    assert other["parallelism"] == 1
    assert {op["busy"] for op in other["operations"] if op["unit"] == "multiplier"} == {2}


def test_impossible_is_exit_3_with_the_loop_by_name(write: Callable[[str], str]) -> None:
    planned = foldwright("plan", write(DESIGN), "--clock", "4 MHz")
    assert planned.returncode == 3
    assert "the loop w -> w.1 -> w takes 3 cycles" in " ".join(planned.stdout.lower().split())
    document = json.loads(foldwright("plan", write(DESIGN), "--clock", "4 MHz", "--json").stdout)
    assert document["status"] == "impossible"
    assert "w.1" in document["reason"]
    assert foldwright("limits", write(DESIGN), "--clock", "4 MHz").returncode == 3


def test_caps_that_conflict_are_impossible(write: Callable[[str], str]) -> None:
    planned = foldwright("plan", write(DESIGN), "--cap", "registers=0")
    assert planned.returncode == 3
    assert "registers" in planned.stdout


def test_nothing_in_time_is_exit_4(write: Callable[[str], str]) -> None:
    planned = foldwright("plan", "tachometer-smoothing", "--time-limit", "0.0001")
    assert planned.returncode == 4
    assert "time limit" in planned.stdout


def test_a_plan_with_a_gap_says_so(write: Callable[[str], str]) -> None:
    planned = foldwright(
        "plan", "gearbox-vibration-band", "--clock", "1433.6 kHz", "--time-limit", "3", "--json"
    )
    document = json.loads(planned.stdout)
    assert planned.returncode == 0
    assert document["status"] == "open"
    assert document["objective"]["bound"] < document["objective"]["value"]


def test_an_edited_plan_is_exit_5(write: Callable[[str], str], tmp_path: Path) -> None:
    saved = tmp_path / "plan.json"
    foldwright("plan", write(DESIGN), "--save", str(saved))
    document = json.loads(saved.read_text(encoding="utf-8"))
    document["operations"][2]["start"] += 1
    saved.write_text(json.dumps(document), encoding="utf-8")
    audited = foldwright("audit", str(saved))
    assert audited.returncode == 5
    assert "does not stand" in audited.stderr
    assert json.loads(foldwright("audit", str(saved), "--json").stdout)["stands"] is False


def test_idle_operations_are_noted_on_stderr(write: Callable[[str], str]) -> None:
    text = DESIGN.replace("y[n] =", "v[n] = 0.25*x[n]\ny[n] =").replace('["x"]', '["x", "u"]')
    planned = foldwright("limits", write(text))
    assert "operation 'v' reaches no output" in planned.stderr
    assert "input 'u' is not used" in planned.stderr


def edited(old: str, new: str) -> str:
    assert old in DESIGN
    return DESIGN.replace(old, new)


BAD_DESIGNS = {
    "a signal that is never defined": (edited("w[n-1]\n'''", "q[n-1]\n'''"), "'q'"),
    "a signal defined twice": (edited("y[n] =", "w[n] ="), "'w'"),
    "a loop without a delay": (edited("0.5*w[n-1]", "0.5*y[n]"), "no delay"),
    "a future sample": (edited("0.5*w[n-1]", "0.5*x[n+1]"), "future"),
    "a division": (edited("0.5*w[n-1]", "w[n-1]/2"), "divi"),
    "a call": (edited("0.5*w[n-1]", "abs(w[n-1])"), "abs"),
    "an exponent": (edited("0.5*w[n-1]", "w[n-1]**2"), "power"),
    "a keyword": (edited("w[n] = x[n] + 0.5*w[n-1]", "lambda[n] = x[n]"), "lambda"),
    "nan": (edited("0.5*", "nan*"), "nan"),
    "a number out of range": (edited("0.5*", "1e999999999*"), "1e999999999"),
    "no equations": (edited("w[n] = x[n] + 0.5*w[n-1]\ny[n] = w[n] + w[n-1]\n", ""), "equation"),
    "a megabyte of equations": (
        edited("w[n-1]\n'''", "w[n-1]" + " " * 1_000_001 + "\n'''"),
        "long",
    ),
    "ten thousand parentheses": (edited("0.5*", "(" * 10_000 + "0.5*"), "nest"),
    "a rate of zero": (edited('"2 MHz"', '"0 MHz"'), "0"),
    "a negative rate": (edited('"2 MHz"', '"-2 MHz"'), "-2"),
    "a rate without a unit": (edited('"2 MHz"', '"2"'), "unit"),
    "a rate that is no text": (edited('"2 MHz"', "2"), "sample_rate"),
    "a clock of zero": (edited('"8 MHz"', '"0 Hz"'), "clock"),
    "a TOML error": (edited("[algorithm]", "[algorithm"), "TOML"),
    "an unknown technology": (edited('"unit-time"', '"unobtainium"'), "unobtainium"),
    "an unknown key": (edited("sample_rate", "simple_rate"), "simple_rate"),
    "an unknown cap": (DESIGN + "\n[caps]\ndivider = 2\n", "divider"),
    "a negative cap": (DESIGN + "\n[caps]\nadder = -2\n", "adder"),
    "J of 0": (DESIGN + "\n[caps]\nparallelism = 0\n", "parallelism"),
    "J of a billion": (DESIGN + "\n[caps]\nparallelism = 1000000000\n", "parallelism"),
}


def assert_one_sentence(done: subprocess.CompletedProcess[str], code: int, words: str) -> None:
    assert done.returncode == code, done.stderr
    assert done.stdout == ""
    assert done.stderr.startswith("foldwright: ")
    assert done.stderr.count("\n") == 1
    assert "Traceback" not in done.stderr
    assert words.lower() in done.stderr.lower()


@pytest.mark.parametrize("name", BAD_DESIGNS)
def test_a_bad_design_gets_one_sentence_with_its_place(
    write: Callable[[str], str], name: str
) -> None:
    text, words = BAD_DESIGNS[name]
    path = write(text)
    done = foldwright("limits", path)
    assert_one_sentence(done, 2, words)
    assert path in done.stderr
    assert len(done.stderr) < 600


@pytest.mark.parametrize(
    ("words", "complaint"),
    [
        (["plan"], "DESIGN"),
        (["plan", "no-such-file.toml"], "no-such-file"),
        (["plan", "gearbox-vibration-band", "--cap", "divider=2"], "divider"),
        (["plan", "gearbox-vibration-band", "--cap", "adder"], "multiplier=2"),
        (["plan", "gearbox-vibration-band", "--cap", "adder=many"], "many"),
        (["plan", "gearbox-vibration-band", "--clock", "fast"], "fast"),
        (["plan", "gearbox-vibration-band", "--cycles-per-sample", "0"], "0"),
        (["plan", "gearbox-vibration-band", "--cycles-per-sample", "nan"], "nan"),
        (["plan", "gearbox-vibration-band", "--time-limit", "0"], "seconds"),
        (["plan", "gearbox-vibration-band", "--time-limit", "inf"], "seconds"),
        (["plan", "gearbox-vibration-band", "--save", "no/such/folder/plan.json"], "folder"),
        (["audit", "no-such-plan.json"], "no-such-plan"),
        (["audit", "."], "directory"),
        (["limits", "."], "."),
        (["fold"], "fold"),
        (["plan", "gearbox-vibration-band", "--loud"], "--loud"),
        ([], "COMMAND"),
    ],
)
def test_bad_usage_gets_one_sentence(words: list[str], complaint: str) -> None:
    assert_one_sentence(foldwright(*words), 2, complaint)


def test_files_that_are_no_text_get_one_sentence(tmp_path: Path) -> None:
    path = tmp_path / "design.toml"
    path.write_bytes(b"\xff\xfe\x00title")
    assert_one_sentence(foldwright("plan", str(path)), 2, "UTF-8")
    assert_one_sentence(foldwright("audit", str(path)), 2, "UTF-8")


def test_a_plan_cut_off_gets_one_sentence(write: Callable[[str], str], tmp_path: Path) -> None:
    saved = tmp_path / "plan.json"
    foldwright("plan", write(DESIGN), "--save", str(saved))
    saved.write_text(saved.read_text(encoding="utf-8")[:700], encoding="utf-8")
    assert_one_sentence(foldwright("audit", str(saved)), 2, "cut off")


def test_nothing_in_the_equations_is_ever_executed(
    write: Callable[[str], str], tmp_path: Path
) -> None:
    trap = tmp_path / "trap"
    text = edited("0.5*w[n-1]", f'__import__("pathlib").Path("{trap}").touch()')
    assert foldwright("plan", write(text)).returncode == 2
    assert not trap.exists()


def test_help_shows_examples_and_version_is_told() -> None:
    shown = foldwright("--help")
    assert shown.returncode == 0
    assert "examples:" in shown.stdout
    assert max(map(len, shown.stdout.splitlines())) <= 80
    assert foldwright("--version").stdout.startswith("foldwright ")


@pytest.mark.parametrize("columns", ["60", "80", "200"])
def test_tables_keep_to_the_width_and_to_plain_text(columns: str) -> None:
    environment = {**os.environ, "PYTHONPATH": str(ROOT), "COLUMNS": columns, "NO_COLOR": "1"}
    for name in ("tachometer-smoothing", "gearbox-vibration-band"):
        shown = subprocess.run(
            [*FOLDWRIGHT, "plan", name, "--cap", "parallelism=2"],
            capture_output=True, encoding="utf-8", timeout=100, check=True, env=environment,
        ).stdout  # fmt: skip
        assert max(map(len, shown.splitlines())) <= int(columns)
        assert "\x1b" not in shown
        assert "\N{HORIZONTAL ELLIPSIS}" not in shown


def test_a_closed_pipe_is_quiet() -> None:
    command = " ".join([*FOLDWRIGHT, "plan", "gearbox-vibration-band"])
    environment = {**os.environ, "PYTHONPATH": str(ROOT)}
    done = subprocess.run(
        ["/bin/sh", "-c", f"{command} | head -n 1"],
        capture_output=True, encoding="utf-8", timeout=100, check=True, env=environment,
    )  # fmt: skip
    assert done.stderr == ""
    assert done.stdout.count("\n") == 1


@pytest.mark.skipif(not Path("/dev/full").exists(), reason="needs a device that is always full")
def test_a_full_disk_gets_one_sentence(write: Callable[[str], str]) -> None:
    with Path("/dev/full").open("w", encoding="utf-8") as full:
        done = subprocess.run(
            [*FOLDWRIGHT, "limits", write(DESIGN)],
            stdout=full, stderr=subprocess.PIPE, encoding="utf-8", timeout=100, check=False,
            env={**os.environ, "PYTHONPATH": str(ROOT)},
        )  # fmt: skip
    assert done.returncode == 1
    assert "cannot be written" in done.stderr
    assert "Traceback" not in done.stderr


def solvers_in(folder: Path) -> list[int]:
    """Processes that work in a folder's temporary directories."""
    found = []
    for process in Path("/proc").glob("[0-9]*"):
        try:
            if str(folder) in str((process / "cwd").readlink()):
                found.append(int(process.name))
        except OSError:
            continue
    return found


@pytest.mark.skipif(not Path("/proc/self").exists(), reason="looks processes up in /proc")
@pytest.mark.parametrize("sent", [signal.SIGINT, signal.SIGTERM])
def test_an_interrupted_search_shows_its_best_and_leaves_nothing(
    tmp_path: Path, sent: signal.Signals
) -> None:
    program = textwrap.dedent("""
        import os
        from scheduler import cli
        def told(self, progress):
            if progress.best is not None and not seen:
                seen.append(1)
                os.kill(os.getpid(), int(os.environ["SIGNAL_TO_SEND"]))
        seen = []
        cli._Progress.__call__ = told
        cli.run()
    """)
    environment = {**os.environ, "PYTHONPATH": str(ROOT), "TMPDIR": str(tmp_path)}
    environment["SIGNAL_TO_SEND"] = str(int(sent))
    words = ["plan", "gearbox-vibration-band", "--clock", "1433.6 kHz"]
    done = subprocess.run(
        [sys.executable, "-c", program, *words],
        capture_output=True, encoding="utf-8", timeout=100, check=False, env=environment,
    )  # fmt: skip
    assert done.returncode == 130, done.stderr
    assert "stopping" in done.stderr
    assert "Open: nothing below" in " ".join(done.stdout.split())
    assert "Traceback" not in done.stderr
    assert list(tmp_path.iterdir()) == []
    assert solvers_in(tmp_path) == []


def test_a_lost_solver_is_exit_1_with_a_sentence(tmp_path: Path) -> None:
    program = textwrap.dedent("""
        import os
        from scheduler import cli, solver
        solver.bundled_cbc = lambda: [os.environ["SOLVER_TO_START"]]
        cli.run()
    """)
    environment = {**os.environ, "PYTHONPATH": str(ROOT)}
    for command in ("/no/such/solver", "/bin/false"):
        done = subprocess.run(
            [sys.executable, "-c", program, "plan", "tachometer-smoothing"],
            capture_output=True, encoding="utf-8", timeout=100, check=False,
            env={**environment, "SOLVER_TO_START": command},
        )  # fmt: skip
        assert_one_sentence(done, 1, "solver")
