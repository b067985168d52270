"""The command line: reads words, calls one room, prints what it returns.

    0 a plan was found     2 bad usage or input     4 nothing found in time     130 interrupted
    1 anything else        3 proven impossible      5 an audited plan does not stand

Results go to stdout, progress and complaints to stderr. Rooms are imported where they are used,
so that `limits` starts without the solver side.
"""

from __future__ import annotations

import argparse
import contextlib
import json
import math
import os
import signal
import sys
import time
from collections.abc import Callable, Mapping, Sequence
from importlib.metadata import version
from pathlib import Path
from types import FrameType
from typing import TYPE_CHECKING, Any, NoReturn

from scheduler.errors import AuditError, FoldwrightError, ImpossibleError, InputError

if TYPE_CHECKING:
    from rich.console import Console, RenderableType

    from scheduler.design import Design
    from scheduler.limits import Limits
    from scheduler.planning import Answer
    from scheduler.search import Progress

INTERRUPTED = 130
_CODES = {InputError: 2, ImpossibleError: 3, AuditError: 5}
EXAMPLES = """examples:
  foldwright plan gearbox.toml
  foldwright plan gearbox.toml --clock "80 MHz" --cap multiplier=1
  foldwright plan gearbox.toml --time-limit 60 --save gearbox.json
  foldwright limits gearbox.toml --cycles-per-sample 33/2
  foldwright audit gearbox.json"""


def run() -> NoReturn:
    """The `foldwright` command."""
    for name in (signal.SIGINT, signal.SIGTERM):
        signal.signal(name, _interrupt)
    sys.exit(main(sys.argv[1:]))


def _interrupt(_: int, __: FrameType | None) -> NoReturn:
    with contextlib.suppress(OSError):
        print("foldwright: stopping; once more stops at once", file=sys.stderr, flush=True)  # noqa: T201
    raise KeyboardInterrupt


def main(words: Sequence[str]) -> int:
    """Runs one command.

    Args:
        words: the command line without the program's name.

    Returns:
        The exit code.
    """
    try:
        options = _parser().parse_args(words)
        code = int(options.command(options))
        sys.stdout.flush()
    except FoldwrightError as error:
        return _complain(error, _CODES.get(type(error), 1))
    except KeyboardInterrupt:
        return INTERRUPTED
    except OSError as error:  # the way to stdout is closed or full, and nothing more can be sent
        with contextlib.suppress(OSError):
            os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())
        if isinstance(error, BrokenPipeError):
            return 0
        return _complain(f"the result cannot be written: {error.strerror or error}", 1)
    except Exception as error:
        return _complain(f"internal error, please report it: {type(error).__name__}: {error}", 1)
    return code


def _complain(sentence: object, code: int) -> int:
    words = " ".join(str(sentence).split())
    with contextlib.suppress(OSError):
        print(f"foldwright: {words}", file=sys.stderr)  # noqa: T201
    return code


class _Parser(argparse.ArgumentParser):
    """A parser whose complaints are one sentence."""

    def error(self, message: str) -> NoReturn:
        raise InputError(message, remedy=f"see `{self.prog} --help`")


def _parser() -> argparse.ArgumentParser:
    parser = _Parser(
        prog="foldwright",
        description="The smallest hardware that runs an algorithm at its sample rate, proven.",
        epilog=EXAMPLES,
        formatter_class=argparse.RawDescriptionHelpFormatter,
    )
    parser.add_argument(
        "--version", action="version", version=f"foldwright {version('foldwright')}"
    )
    commands = parser.add_subparsers(metavar="COMMAND", required=True)
    plan = _command(commands, "plan", _plan, "find the smallest hardware and print the plan")
    _add_design(plan)
    plan.add_argument("--time-limit", metavar="SECONDS", type=_seconds, help="stop the search then")
    plan.add_argument("--save", metavar="FILE", type=Path, help="also write the plan as JSON")
    limits = _command(commands, "limits", _limits, "what loops and counts say, without a solver")
    _add_design(limits)
    audit = _command(commands, "audit", _audit, "check a saved plan against its design")
    audit.add_argument("plan", metavar="PLAN.json", type=Path)
    for each in (plan, limits, audit):
        each.add_argument("--json", action="store_true", help="print the result as JSON, alone")
    return parser


def _command(
    commands: Any, name: str, action: Callable[[argparse.Namespace], int], words: str
) -> argparse.ArgumentParser:
    parser: argparse.ArgumentParser = commands.add_parser(
        name, help=words, description=words.capitalize() + "."
    )
    parser.set_defaults(command=action)
    return parser


def _add_design(parser: argparse.ArgumentParser) -> None:
    parser.add_argument("design", metavar="DESIGN", help="a TOML file, or a shipped design's name")
    parser.add_argument("--sample-rate", metavar="RATE", help='such as "96 kHz"')
    parser.add_argument("--clock", metavar="RATE", help='the fastest clock, such as "80 MHz"')
    parser.add_argument("--cycles-per-sample", metavar="T", help="abstract time, such as 33/2")
    parser.add_argument(
        "--cap", metavar="NAME=VALUE", action="append", default=[], type=_cap,
        help="at most so many of a unit, area, registers, latency, or parallelism (repeatable)",
    )  # fmt: skip
    parser.add_argument("--technology", metavar="NAME", help="a shipped one's name, or a file")


def _seconds(text: str) -> float:
    try:
        seconds = float(text)
    except ValueError:
        seconds = math.nan
    if not (math.isfinite(seconds) and seconds > 0):
        raise argparse.ArgumentTypeError(f"'{text}' is no number of seconds above 0")
    return seconds


def _cap(text: str) -> tuple[str, str]:
    name, equals, value = text.partition("=")
    if not (equals and name.strip() and value.strip()):
        raise argparse.ArgumentTypeError(f"'{text}' is no cap; write it as multiplier=2")
    return name.strip(), value.strip()


# ---- commands --------------------------------------------------------------------------------


def _design(options: argparse.Namespace) -> Design:
    from scheduler.design import Changes, find_design, load_design  # noqa: PLC0415

    changes = Changes(
        sample_rate=options.sample_rate,
        clock=options.clock,
        cycles_per_sample=options.cycles_per_sample,
        caps=dict(options.cap),
        technology=options.technology,
    )
    design = load_design(find_design(options.design), changes)
    for warning in _idle(design):
        _complain(f"note: {warning}", 0)
    return design


def _idle(design: Design) -> list[str]:
    """Operations that reach no output, and inputs that nobody reads."""
    from scheduler.graph import Kind, Source  # noqa: PLC0415

    graph = design.algorithm.graph
    outputs = graph.of_kind(Kind.OUTPUT)
    needed = {op.name for op in outputs}
    ahead = list(outputs)
    while ahead:
        sources = [o.name for o in ahead.pop().operands if isinstance(o, Source)]
        ahead += [graph.by_name[name] for name in sources if name not in needed]
        needed.update(sources)
    idle = [op for op in graph.operations if outputs and op.name not in needed]
    return [
        f"input '{op.name}' is not used" if op.kind is Kind.INPUT
        else f"operation '{op.name}' reaches no output, and takes hardware all the same"
        for op in idle
    ]  # fmt: skip


def _plan(options: argparse.Namespace) -> int:
    from scheduler.planning import Stopped, answer  # noqa: PLC0415

    design = _design(options)
    try:
        with _watching() as watch:
            found = answer(design, time_limit=options.time_limit, watch=watch)
    except Stopped as stopped:
        if stopped.answer is not None:
            _deliver(stopped.answer, options)
        return INTERRUPTED
    except AuditError as error:
        return _complain(
            f"internal error, please report it: the plan found fails its audit, {error}", 1
        )
    return _deliver(found, options)


def _deliver(found: Answer, options: argparse.Namespace) -> int:
    """Saves and prints an answer; the exit code that its status calls for."""
    from scheduler.plan import Status  # noqa: PLC0415
    from scheduler.planfile import plan_document, save_plan  # noqa: PLC0415

    if options.save is not None:
        save_plan(found.plan, options.save)
    if options.json:
        _print_json(plan_document(found.plan))
    else:
        from scheduler.report import plan_report  # noqa: PLC0415

        _show(lambda width: plan_report(found.plan, found.report, width))
    return {Status.IMPOSSIBLE: 3, Status.NONE: 4}.get(found.plan.status, 0)


def _limits(options: argparse.Namespace) -> int:
    from scheduler.limits import limits_of  # noqa: PLC0415

    design = _design(options)
    limits = limits_of(design)
    if options.json:
        _print_json(_limits_document(design.title, limits))
    else:
        from scheduler.report import limits_report  # noqa: PLC0415

        _show(lambda _: limits_report(design.title, limits))
    return 0 if limits.forbidden is None else 3


def _limits_document(title: str, limits: Limits) -> dict[str, Any]:
    return {
        "format": "foldwright-limits",
        "version": 1,
        "title": title,
        "iteration_bound": str(limits.iteration_bound),
        "loops": [
            {"operations": list(loop.operations), "latency": loop.latency, "delays": loop.delays}
            for loop in limits.loops
        ],
        "cycles_per_sample": str(limits.cycles_per_sample),
        "least_cycles_per_sample": str(limits.least_cycles_per_sample),
        "critical_path": limits.critical_path,
        "least_period": limits.least_period,
        "units": dict(limits.units_over_all),
        "blocks": [
            {
                "parallelism": block.parallelism,
                "cycles": [block.cycles[0], block.cycles[-1]] if block.cycles else None,
                "units": dict(block.units),
                "area": None if block.area is None else float(block.area),
            }
            for block in limits.blocks
        ],
        "impossible": limits.forbidden,
    }


def _audit(options: argparse.Namespace) -> int:
    from scheduler.audit import audit  # noqa: PLC0415
    from scheduler.planfile import load_plan  # noqa: PLC0415

    plan = load_plan(options.plan)
    document: dict[str, Any] = {"format": "foldwright-audit", "version": 1}
    try:
        report = audit(plan)
    except AuditError as error:
        if options.json:
            _print_json({**document, "stands": False, "fault": str(error)})
        return _complain(f"{options.plan}: the plan does not stand; {error}", 5)
    except InputError as error:
        raise error.within(str(options.plan)) from error
    if options.json:
        checks = [{"name": check.name, "found": check.fact} for check in report.checks]
        _print_json({**document, "stands": True, "checks": checks})
    else:
        from scheduler.report import audit_report  # noqa: PLC0415

        _show(lambda _: audit_report(plan, report))
    return 0


# ---- output ----------------------------------------------------------------------------------


def _print_json(document: Mapping[str, Any]) -> None:
    sys.stdout.write(json.dumps(document, indent=1) + "\n")


def _console(stream: Any) -> Console:
    from rich.console import Console  # noqa: PLC0415

    return Console(file=stream, highlight=False, soft_wrap=False)


def _show(render: Callable[[int], RenderableType]) -> None:
    console = _console(sys.stdout)
    console.print(render(console.width))


class _Progress:
    """A line on stderr while a search takes longer than a second."""

    def __init__(self) -> None:
        self.console = _console(sys.stderr)
        self.status = self.console.status("") if self.console.is_terminal else None
        self.told = time.monotonic()

    def __call__(self, progress: Progress) -> None:
        from scheduler.report import progress_line  # noqa: PLC0415

        if progress.seconds < 1:
            return
        line = progress_line(progress.seconds, progress.pair, progress.best, progress.bound)
        if self.status is not None:
            self.status.update(line)
            self.status.start()
        elif time.monotonic() - self.told >= 5:
            self.told = time.monotonic()
            self.console.print(f"foldwright: {line}", markup=False)


@contextlib.contextmanager
def _watching() -> Any:
    progress = _Progress()
    try:
        yield progress
    finally:
        if progress.status is not None:
            progress.status.stop()
