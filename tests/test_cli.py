"""The command line, run as a process the way a user runs it, or as the function behind it."""

from __future__ import annotations

import argparse
import json
import os
import signal
import subprocess
import sys
import textwrap
from collections.abc import Callable
from fractions import Fraction
from pathlib import Path
from typing import Any

import pytest

from scheduler import cli, planfile, planning
from scheduler.datapath import Pair
from scheduler.errors import AuditError, InputError
from scheduler.search import Progress

FOLDWRIGHT = [sys.executable, "-m", "scheduler"]
ROOT = Path(__file__).parent.parent
Ask = Callable[..., tuple[int, Any]]
Write = Callable[[str], str]

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
def write(tmp_path: Path) -> Write:
    def put(text: str, name: str = "design.toml") -> str:
        path = tmp_path / name
        path.write_text(text, encoding="utf-8")
        return str(path)

    return put


def test_a_plan_is_found_printed_saved_and_audited(write: Write, tmp_path: Path) -> None:
    saved = tmp_path / "plan.json"
    planned = foldwright("plan", write(DESIGN), "--save", str(saved))
    assert planned.returncode == 0, planned.stderr
    assert planned.stdout.startswith("Test: 1 adder, 1 multiplier")
    assert "Proven" in planned.stdout
    assert planned.stderr == ""
    audited = foldwright("audit", str(saved))
    assert audited.returncode == 0
    assert "The plan stands" in audited.stdout


def test_json_stands_alone_on_stdout_and_keeps_the_contract(write: Write) -> None:
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


@pytest.fixture
def ask(capsys: pytest.CaptureFixture[str]) -> Ask:
    """The exit code and the JSON of a command, without a process of its own."""

    def run(*words: str) -> tuple[int, Any]:
        code = cli.main([*words, "--json"])
        return code, json.loads(capsys.readouterr().out)

    return run


def test_requirements_caps_and_technology_can_be_changed(write: Write, ask: Ask) -> None:
    design = write(DESIGN)
    _, slow = ask("plan", design, "--sample-rate", "250 kHz")
    assert slow["sample_period_ns"] == 4000
    _, fast = ask("limits", design, "--clock", "80 MHz")
    assert fast["cycles_per_sample"] == "40"
    _, abstract = ask("plan", design, "--cycles-per-sample", "7/2")
    assert abstract["clock_period_ns"] is None
    words = ["--technology", "unit-time-unpipelined", "--cap", "parallelism=1", "--cap", "adder=1"]
    _, other = ask("plan", design, *words)
    assert other["parallelism"] == 1
    assert other["units"]["adder"] == 1
    assert {op["busy"] for op in other["operations"] if op["unit"] == "multiplier"} == {2}


def test_impossible_is_exit_3_with_the_loop_by_name(
    write: Write, ask: Ask, capsys: pytest.CaptureFixture[str]
) -> None:
    words = [write(DESIGN), "--clock", "4 MHz"]
    assert cli.main(["plan", *words]) == 3
    shown = " ".join(capsys.readouterr().out.lower().split())
    assert shown.startswith("test: impossible. the loop w -> w.1 -> w takes 3 cycles")
    code, document = ask("plan", *words)
    assert code == 3
    assert document["status"] == "impossible"
    assert "w.1" in document["reason"]
    code, limits = ask("limits", *words)
    assert code == 3
    assert "w.1" in limits["impossible"]


def test_caps_that_conflict_are_impossible(write: Write, ask: Ask) -> None:
    code, document = ask("plan", write(DESIGN), "--cap", "registers=0")
    assert code == 3
    assert "registers" in document["reason"]


def test_nothing_in_time_is_exit_4(ask: Ask) -> None:
    code, document = ask("plan", "tachometer-smoothing", "--time-limit", "0.0001")
    assert code == 4
    assert document["status"] == "none"
    assert "time limit" in document["reason"]


def test_a_plan_with_a_gap_says_so(ask: Ask) -> None:
    words = ["gearbox-vibration-band", "--clock", "1433.6 kHz", "--time-limit", "3"]
    code, document = ask("plan", *words)
    assert code == 0
    assert document["status"] == "open"
    assert document["objective"]["bound"] < document["objective"]["value"]


def test_an_edited_plan_is_exit_5(
    write: Write, ask: Ask, tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    saved = tmp_path / "plan.json"
    _, document = ask("plan", write(DESIGN), "--save", str(saved))
    assert json.loads(saved.read_text(encoding="utf-8")) == document
    document["operations"][2]["start"] += 1
    saved.write_text(json.dumps(document), encoding="utf-8")
    code = cli.main(["audit", str(saved)])
    assert_one_sentence(code, *capsys.readouterr(), "does not stand", wanted=5)
    code, verdict = ask("audit", str(saved))
    assert (code, verdict["stands"]) == (5, False)
    assert verdict["fault"]


def test_idle_operations_are_noted_on_stderr(write: Write) -> None:
    text = DESIGN.replace("y[n] =", "v[n] = 0.25*x[n]\ny[n] =").replace('["x"]', '["x", "u"]')
    planned = foldwright("limits", write(text))
    assert planned.stderr == (
        "foldwright: note: no output depends on input 'u'\n"
        "foldwright: note: no output depends on operation 'v'; hardware is planned for it\n"
    )
    assert planned.stdout.startswith("Test: ")


def test_many_idle_operations_are_named_in_one_line(
    write: Write, capsys: pytest.CaptureFixture[str]
) -> None:
    idle = "".join(f"v{i}[n] = 0.25*x[n]\n" for i in range(30))
    assert cli.main(["limits", write(DESIGN.replace("y[n] =", f"{idle}y[n] ="))]) == 0
    words = capsys.readouterr().err
    assert words.count("\n") == 1
    assert "'v0', 'v1'," in words
    assert "22 more" in words


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


def assert_one_sentence(code: int, out: str, err: str, words: str, *, wanted: int = 2) -> None:
    assert code == wanted, err
    assert out == ""
    assert err.startswith("foldwright: ")
    assert err.count("\n") == 1
    assert len(err) < 600
    assert "Traceback" not in err
    assert words.lower() in err.lower()


def assert_process_says(
    done: subprocess.CompletedProcess[str], words: str, *, wanted: int = 2
) -> None:
    assert_one_sentence(done.returncode, done.stdout, done.stderr, words, wanted=wanted)


@pytest.mark.parametrize("name", BAD_DESIGNS)
def test_a_bad_design_gets_one_sentence_with_its_place(
    write: Write, capsys: pytest.CaptureFixture[str], name: str
) -> None:
    text, words = BAD_DESIGNS[name]
    path = write(text)
    code = cli.main(["plan", path])
    out, err = capsys.readouterr()
    assert_one_sentence(code, out, err, words)
    assert path in err


def test_a_bad_design_gets_one_sentence_from_the_process_too(write: Write) -> None:
    text, words = BAD_DESIGNS["a rate of zero"]
    assert_process_says(foldwright("limits", write(text)), words)


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
        (["plan", "gearbox-vibration-band", "--time", "5"], "--time"),
        (["plan", "gearbox-vibration-band", "--time-limit", "soon"], "soon"),
        (["plan", "gearbox-vibration-band", "--clock", "0 Hz"], "--clock"),
        (["plan", "gearbox-vibration-band", "--clock", "80"], "unit"),
        (["plan", "gearbox-vibration-band", "--sample-rate=-1 MHz"], "--sample-rate"),
        (["plan", "gearbox-vibration-band", "--cap", "parallelism=0"], "parallelism"),
        (["plan", "gearbox-vibration-band", "--cap", "parallelism=1000000000"], "parallelism"),
        (["plan", "gearbox-vibration-band", "--technology", "unobtainium"], "unobtainium"),
        (["plan", "gearbox-vibration-band", "--save", "/dev/null"], "--save"),
        (["plan", "gearbox-vibration-band", "--save", "."], "--save"),
        (["plan", "a\x1b[31mb"], "a"),
        (["audit"], "PLAN.json"),
        (["audit", "/dev/null"], "JSON"),
        ([], "COMMAND"),
    ],
)
def test_bad_usage_gets_one_sentence(
    capsys: pytest.CaptureFixture[str], words: list[str], complaint: str
) -> None:
    code = cli.main(words)
    out, err = capsys.readouterr()
    assert_one_sentence(code, out, err, complaint)
    assert "\x1b" not in err


def test_bad_usage_gets_one_sentence_from_the_process_too() -> None:
    assert_process_says(foldwright("fold"), "fold")


def test_files_that_are_no_text_get_one_sentence(
    tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    path = tmp_path / "design.toml"
    path.write_bytes(b"\xff\xfe\x00title")
    for command in ("plan", "limits", "audit"):
        code = cli.main([command, str(path)])
        assert_one_sentence(code, *capsys.readouterr(), "UTF-8")


def test_a_plan_cut_off_gets_one_sentence(
    write: Write, tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    saved = tmp_path / "plan.json"
    cli.main(["plan", write(DESIGN), "--save", str(saved)])
    capsys.readouterr()
    whole = saved.read_text(encoding="utf-8")
    for length in (0, 1, 700, len(whole) - 3):
        saved.write_text(whole[:length], encoding="utf-8")
        code = cli.main(["audit", str(saved)])
        assert_one_sentence(code, *capsys.readouterr(), "cut off")


def test_a_plan_file_of_something_else_gets_one_sentence(
    write: Write, capsys: pytest.CaptureFixture[str]
) -> None:
    for text in ("[]", "{}", '{"format": "foldwright-plan", "version": 99}', "null"):
        code = cli.main(["audit", write(text, "plan.json")])
        assert_one_sentence(code, *capsys.readouterr(), "plan.json")


def test_nothing_in_the_equations_is_ever_executed(write: Write, tmp_path: Path) -> None:
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


@pytest.mark.parametrize("command", ["plan", "limits", "audit"])
def test_every_command_shows_examples_and_explains_every_argument(
    capsys: pytest.CaptureFixture[str], command: str
) -> None:
    assert cli.main([command, "--help"]) == 0
    shown = capsys.readouterr().out
    assert f"foldwright {command} gearbox" in shown
    assert max(map(len, shown.splitlines())) <= 80
    for parser in (cli._parser(), *_commands(cli._parser())):
        for argument in parser._actions:
            assert argument.help or argument.choices, argument


def _commands(parser: argparse.ArgumentParser) -> list[argparse.ArgumentParser]:
    return [each for action in parser._actions for each in (action.choices or {}).values()]


@pytest.mark.parametrize("columns", ["60", "80", "200"])
def test_tables_keep_to_the_width_and_to_plain_text(
    write: Write,
    monkeypatch: pytest.MonkeyPatch,
    capsys: pytest.CaptureFixture[str],
    columns: str,
) -> None:
    monkeypatch.setenv("COLUMNS", columns)
    for words in (["plan", write(DESIGN)], ["limits", "oil-pressure-notch"]):
        cli.main(words)
        shown = capsys.readouterr().out
        assert max(map(len, shown.splitlines())) <= int(columns)
        assert "\x1b" not in shown
        assert "\N{HORIZONTAL ELLIPSIS}" not in shown


def test_a_file_gets_80_columns_whatever_the_terminal_has(
    monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]
) -> None:
    monkeypatch.delenv("COLUMNS", raising=False)
    monkeypatch.setattr(os, "get_terminal_size", lambda *_: os.terminal_size((200, 50)))
    cli.main(["limits", "oil-pressure-notch"])
    assert 70 < max(map(len, capsys.readouterr().out.splitlines())) <= 80


@pytest.mark.parametrize("words", [["limits", "gearbox-vibration-band"], ["--help"]])
def test_a_closed_pipe_is_quiet(words: list[str]) -> None:
    reader, writer = os.pipe()
    os.close(reader)
    done = subprocess.run(
        [*FOLDWRIGHT, *words],
        stdout=writer, stderr=subprocess.PIPE, encoding="utf-8", timeout=100, check=False,
        env={**os.environ, "PYTHONPATH": str(ROOT)},
    )  # fmt: skip
    os.close(writer)
    assert (done.returncode, done.stderr) == (0, "")


@pytest.mark.skipif(not Path("/dev/full").exists(), reason="needs a device that is always full")
@pytest.mark.parametrize("unbuffered", ["", "1"])
@pytest.mark.parametrize("words", [[], ["--json"], ["--help"]])
def test_a_full_disk_gets_one_sentence(write: Write, words: list[str], unbuffered: str) -> None:
    environment = {**os.environ, "PYTHONPATH": str(ROOT), "PYTHONUNBUFFERED": unbuffered}
    with Path("/dev/full").open("w", encoding="utf-8") as full:
        done = subprocess.run(
            [*FOLDWRIGHT, "limits", write(DESIGN), *words],
            stdout=full, stderr=subprocess.PIPE, encoding="utf-8", timeout=100, check=False,
            env=environment,
        )  # fmt: skip
    assert_one_sentence(done.returncode, "", done.stderr, "cannot be written", wanted=1)


def in_a_shell(command: str, **environment: str) -> subprocess.CompletedProcess[str]:
    return subprocess.run(
        ["/bin/sh", "-c", f"{' '.join(FOLDWRIGHT)} {command}"],
        capture_output=True, encoding="utf-8", timeout=100, check=False,
        env={**os.environ, "PYTHONPATH": str(ROOT), **environment},
    )  # fmt: skip


def test_closed_streams_are_no_internal_errors() -> None:
    done = in_a_shell("limits gearbox-vibration-band >&-")
    assert_process_says(done, "stdout is closed", wanted=1)
    done = in_a_shell("limits no-such-design 2>&-")
    assert (done.returncode, done.stdout, done.stderr) == (2, "", "")


def test_letters_that_stdout_does_not_have_are_shown_another_way(
    write: Write,
) -> None:
    path = write(DESIGN.replace('"Test"', '"T\N{LATIN SMALL LETTER U WITH DIAERESIS}st"'))
    done = in_a_shell(f"limits {path}", PYTHONIOENCODING="ascii")
    assert done.returncode == 0
    assert done.stdout.startswith("T\\xfcst: ")


def test_limits_start_without_the_solver_side() -> None:
    program = textwrap.dedent("""
        import sys
        from scheduler import cli
        assert cli.main(["limits", "gearbox-vibration-band"]) == 0
        loaded = sorted({"pulp", "scheduler.solver", "scheduler.audit"} & set(sys.modules))
        sys.exit(f"loaded: {loaded}" if loaded else 0)
    """)
    done = subprocess.run(
        [sys.executable, "-c", program],
        capture_output=True, encoding="utf-8", timeout=100, check=False,
        env={**os.environ, "PYTHONPATH": str(ROOT)},
    )  # fmt: skip
    assert done.returncode == 0, done.stderr


def test_a_plan_that_fails_its_own_audit_is_not_shown(
    write: Write,
    tmp_path: Path,
    monkeypatch: pytest.MonkeyPatch,
    capsys: pytest.CaptureFixture[str],
) -> None:
    def fails(_: object) -> None:
        raise AuditError("units: two operations meet")

    monkeypatch.setattr(planning, "audit", fails)
    saved = tmp_path / "plan.json"
    code = cli.main(["plan", write(DESIGN), "--save", str(saved)])
    assert_one_sentence(code, *capsys.readouterr(), "internal error", wanted=1)
    assert not saved.exists()


def test_an_unexpected_error_is_one_sentence_with_its_name(
    write: Write,
    monkeypatch: pytest.MonkeyPatch,
    capsys: pytest.CaptureFixture[str],
) -> None:
    def fails(*_: object, **__: object) -> None:
        raise ZeroDivisionError("something\nwent wrong")

    monkeypatch.setattr(planning, "answer", fails)
    code = cli.main(["plan", write(DESIGN)])
    words = "ZeroDivisionError: something went wrong"
    assert_one_sentence(code, *capsys.readouterr(), words, wanted=1)


def test_a_plan_that_cannot_be_saved_is_printed_all_the_same(
    write: Write,
    tmp_path: Path,
    monkeypatch: pytest.MonkeyPatch,
    capsys: pytest.CaptureFixture[str],
) -> None:
    def fails(*_: object) -> None:
        raise InputError("the disk is full")

    monkeypatch.setattr(planfile, "save_plan", fails)
    code = cli.main(["plan", write(DESIGN), "--save", str(tmp_path / "plan.json")])
    out, err = capsys.readouterr()
    assert code == 2
    assert out.startswith("Test: 1 adder")
    assert err == "foldwright: the disk is full\n"


def test_progress_in_a_pipe_is_a_line_every_few_seconds(
    monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]
) -> None:
    now = [100.0]
    monkeypatch.setattr(cli.time, "monotonic", lambda: now[0])
    with cli._Watch() as watch:
        for second in range(12):
            now[0] = 100.0 + second
            watch(Progress(Pair(2, 5), Fraction(25), Fraction(20), float(second)))
    line = "J = 2, N = 5, best 25, none below 20, gap 20.0%"
    assert capsys.readouterr() == ("", f"foldwright: 5 s: {line}\nfoldwright: 10 s: {line}\n")


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
@pytest.mark.parametrize("sent", [signal.SIGINT, signal.SIGTERM, signal.SIGHUP])
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
        cli._Watch.__call__ = told
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
    assert "Proven" not in done.stdout
    assert "Traceback" not in done.stderr
    assert list(tmp_path.iterdir()) == []
    assert solvers_in(tmp_path) == []


def test_an_interrupt_before_the_first_plan_says_that_there_is_none(
    write: Write,
    monkeypatch: pytest.MonkeyPatch,
    capsys: pytest.CaptureFixture[str],
) -> None:
    def stops(*_: object, **__: object) -> None:
        raise planning.Stopped(None)

    monkeypatch.setattr(planning, "answer", stops)
    assert cli.main(["plan", write(DESIGN)]) == 130
    assert capsys.readouterr() == ("", "foldwright: no plan had been found yet\n")


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
        assert_process_says(done, "solver", wanted=1)
