"""The command line: reads words, calls one room, prints what it returns.

    0 a plan was found     2 bad usage or input     4 nothing found in time     130 interrupted
    1 anything else        3 proven impossible      5 an audited plan does not stand

Results go to stdout, progress and complaints to stderr. Rooms are imported where they are used,
so that `limits` starts without the solver side. Nothing is checked here but the options' form.
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
from collections.abc import Callable, Iterator, Mapping, Sequence
from pathlib import Path
from types import FrameType
from typing import TYPE_CHECKING, Any, NoReturn

from scheduler.errors import AuditError, FoldwrightError, InputError

if TYPE_CHECKING:
    from rich.console import RenderableType
    from rich.status import Status as Spinner

    from scheduler.design import Design
    from scheduler.limits import Limits
    from scheduler.planning import Answer
    from scheduler.search import Progress

INTERRUPTED = 130
_CODES = {InputError: 2, AuditError: 5}
_EXAMPLES = """examples:
  foldwright plan gearbox.toml
  foldwright plan gearbox.toml --clock "80 MHz" --cap multiplier=1
  foldwright plan gearbox.toml --time-limit 60 --save gearbox.json
  foldwright limits gearbox.toml --cycles-per-sample 33/2
  foldwright audit gearbox.json

exit codes:
  0 a plan was found    3 proven impossible        5 the plan does not stand
  2 bad usage or input  4 nothing found in time  130 interrupted
  1 anything else"""
_PLAN_EXAMPLES = """examples:
  foldwright plan gearbox.toml
  foldwright plan gearbox.toml --sample-rate "96 kHz" --cap latency="50 us"
  foldwright plan gearbox.toml --cap adder=2 --cap parallelism=8 --time-limit 60
  foldwright plan gearbox.toml --cycles-per-sample 33/2 --json"""
_LIMITS_EXAMPLES = """examples:
  foldwright limits gearbox.toml
  foldwright limits gearbox.toml --clock "40 MHz" --cap parallelism=16 --json"""
_AUDIT_EXAMPLES = """examples:
  foldwright plan gearbox.toml --save gearbox.json
  foldwright audit gearbox.json"""


def run() -> NoReturn:
    """The `foldwright` command."""
    _catch_signals()
    if sys.stderr is None:  # closed by the caller, as stdout may be
        sys.stderr = Path(os.devnull).open("w", encoding="utf-8")  # noqa: SIM115
    if sys.stdout is None:
        sys.exit(_complain("the result cannot be written: stdout is closed", 1))
    # so that a name that this terminal has no letters for can be shown all the same
    sys.stdout.reconfigure(errors="backslashreplace")  # type: ignore[union-attr]
    sys.exit(main(sys.argv[1:]))


def main(words: Sequence[str]) -> int:
    """Runs one command.

    Args:
        words: the command line without the program's name.

    Returns:
        The exit code.
    """
    try:
        options = _parser().parse_args(words)
        return int(options.command(options))
    except SystemExit as shown:  # help or version
        return int(shown.code or 0)
    except FoldwrightError as error:
        return _complain(error, _CODES.get(type(error), 1))
    except _CannotWriteError as error:
        return _give_up(error.cause)
    except KeyboardInterrupt:
        return INTERRUPTED
    except Exception as error:
        return _complain(f"internal error, please report it: {type(error).__name__}: {error}", 1)


def _catch_signals() -> None:
    """Ctrl-C, the end of the terminal, and a request to end all end the search in good order."""
    for name in (signal.SIGINT, signal.SIGTERM, signal.SIGHUP):
        if name != signal.SIGHUP or signal.getsignal(name) != signal.SIG_IGN:  # as under nohup
            signal.signal(name, _interrupt)


def _interrupt(number: int, _: FrameType | None) -> NoReturn:
    signal.signal(number, signal.default_int_handler)
    # not print: the signal may have come in the middle of one
    with contextlib.suppress(OSError):
        os.write(2, b"\nfoldwright: stopping; once more stops at once\n")
    raise KeyboardInterrupt


def _complain(sentence: object, code: int) -> int:
    """Says one sentence on stderr; returns the exit code given."""
    words = " ".join(str(sentence).split())
    shown = "".join(c if c.isprintable() else "\N{REPLACEMENT CHARACTER}" for c in words)
    with contextlib.suppress(OSError):
        print(f"foldwright: {shown}", file=sys.stderr, flush=True)  # noqa: T201
    return code


# ---- words -----------------------------------------------------------------------------------


class _Parser(argparse.ArgumentParser):
    """A parser whose complaints are one sentence, and whose options have one name each."""

    def __init__(self, **settings: Any) -> None:
        layout = argparse.RawDescriptionHelpFormatter
        super().__init__(formatter_class=layout, allow_abbrev=False, **settings)

    def error(self, message: str) -> NoReturn:
        raise InputError(message, remedy=f"see `{self.prog} --help`")

    def print_help(self, _: Any = None) -> None:
        _say(self.format_help())


class _ShowVersion(argparse.Action):
    """Looks the version up only when it is asked for."""

    def __call__(self, parser: argparse.ArgumentParser, *_: object, **__: object) -> NoReturn:
        from importlib.metadata import PackageNotFoundError, version  # noqa: PLC0415

        try:
            number = version("foldwright")
        except PackageNotFoundError:
            number = "of a folder that is not installed"
        _say(f"foldwright {number}\n")
        parser.exit()


def _parser() -> argparse.ArgumentParser:
    words = "The smallest hardware that runs an algorithm at its sample rate, proven."
    parser = _Parser(prog="foldwright", description=words, epilog=_EXAMPLES)
    parser.add_argument("--version", nargs=0, action=_ShowVersion, help="show the version and exit")
    commands = parser.add_subparsers(metavar="COMMAND", required=True)
    words = "find the smallest hardware and print the plan"
    plan = _command(commands, "plan", _plan, words, _PLAN_EXAMPLES)
    _add_design(plan)
    words = "end the search then, with the best plan so far"
    plan.add_argument("--time-limit", metavar="SECONDS", type=_seconds, help=words)
    plan.add_argument("--save", metavar="FILE", type=Path, help="also write the plan as JSON")
    words = "what loops and counts say, without a solver"
    limits = _command(commands, "limits", _limits, words, _LIMITS_EXAMPLES)
    _add_design(limits)
    words = "check a saved plan against its design, without a solver"
    audit = _command(commands, "audit", _audit, words, _AUDIT_EXAMPLES)
    audit.add_argument("plan", metavar="PLAN.json", type=Path, help="what `plan --save` wrote")
    for each in (plan, limits, audit):
        each.add_argument("--json", action="store_true", help="print the result as JSON, alone")
    return parser


def _command(
    commands: Any, name: str, action: Callable[[argparse.Namespace], int], words: str, examples: str
) -> argparse.ArgumentParser:
    parser: argparse.ArgumentParser = commands.add_parser(
        name, help=words, description=f"{words[0].upper()}{words[1:]}.", epilog=examples
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


# ---- designs ---------------------------------------------------------------------------------


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
    for warning in _warnings(design):
        _complain(f"note: {warning}", 0)
    return design


def _warnings(design: Design) -> Iterator[str]:
    """What a design holds for nothing."""
    idle = _idle(design)
    inputs = [name for name in idle if name in design.algorithm.inputs]
    operations = [name for name in idle if name not in inputs]
    if inputs:
        yield f"no output depends on {_named('input', inputs)}"
    if operations:
        yield f"no output depends on {_named('operation', operations)}; hardware is planned for it"


def _named(noun: str, names: Sequence[str], most: int = 8) -> str:
    quoted = [f"'{name}'" for name in names[:most]]
    more = [f"{len(names) - most} more"] if len(names) > most else []
    listed = ", ".join([*quoted, *more])
    return f"{noun} {listed}" if len(names) == 1 else f"{noun}s {listed}"


def _idle(design: Design) -> list[str]:
    """Operations and inputs that reach no output; none where the graph has no outputs at all."""
    from scheduler.graph import Kind, Source  # noqa: PLC0415

    graph = design.algorithm.graph
    outputs = graph.of_kind(Kind.OUTPUT)
    needed = {op.name for op in outputs}
    ahead = list(outputs)
    while ahead:
        sources = {operand.name for operand in ahead.pop().operands if isinstance(operand, Source)}
        ahead += [graph.by_name[name] for name in sources - needed]
        needed |= sources
    return [op.name for op in graph.operations if outputs and op.name not in needed]


# ---- commands --------------------------------------------------------------------------------


def _plan(options: argparse.Namespace) -> int:
    from scheduler.planning import Stopped, answer  # noqa: PLC0415

    design = _design(options)
    if options.save is not None:
        _check_savable(options.save)
    try:
        with _Watch() as watch:
            found = answer(design, time_limit=options.time_limit, watch=watch)
    except Stopped as stopped:
        if stopped.answer is None:
            return _complain("no plan had been found yet", INTERRUPTED)
        _deliver(stopped.answer, options)
        return INTERRUPTED
    except AuditError as error:
        return _complain(
            f"internal error, please report it: the plan found fails its audit, {error}", 1
        )
    return _deliver(found, options)


def _check_savable(path: Path) -> None:
    """Tells before a long search, not after it, that its plan could not be saved there.

    Raises:
        InputError: there is no such folder, it is closed, or no file but something else is there.
    """
    remedy = "choose a file in a folder that exists and can be written"
    if os.path.lexists(path) and not path.is_file():
        raise InputError("--save needs a file, and this is none", place=str(path), remedy=remedy)
    if not path.parent.is_dir() or not os.access(path.parent, os.W_OK):
        what = "the plan could not be saved in this folder"
        raise InputError(what, place=str(path), remedy=remedy)


def _deliver(found: Answer, options: argparse.Namespace) -> int:
    """Saves and prints an answer; the exit code that its status calls for."""
    from scheduler.plan import Status  # noqa: PLC0415

    try:
        if options.save is not None:
            from scheduler.planfile import save_plan  # noqa: PLC0415

            save_plan(found.plan, options.save)
    finally:  # what a long search has found is shown, even where it cannot be saved
        _print_answer(found, as_json=options.json)
    return {Status.IMPOSSIBLE: 3, Status.NONE: 4}.get(found.plan.status, 0)


def _print_answer(found: Answer, *, as_json: bool) -> None:
    if as_json:
        from scheduler.planfile import plan_document  # noqa: PLC0415

        _say_json(plan_document(found.plan))
    else:
        from scheduler.report import plan_report  # noqa: PLC0415

        _show(plan_report(found.plan, found.report))


def _limits(options: argparse.Namespace) -> int:
    from scheduler.limits import limits_of  # noqa: PLC0415

    design = _design(options)
    limits = limits_of(design)
    if options.json:
        _say_json(_limits_document(design.title, limits))
    else:
        from scheduler.report import limits_report  # noqa: PLC0415

        _show(limits_report(design.title, limits))
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
            _say_json({**document, "stands": False, "fault": str(error)})
        return _complain(f"{options.plan}: the plan does not stand; {error}", 5)
    except InputError as error:
        raise error.within(str(options.plan)) from error
    if options.json:
        checks = [{"name": check.name, "found": check.fact} for check in report.checks]
        _say_json({**document, "stands": True, "checks": checks})
    else:
        from scheduler.report import audit_report  # noqa: PLC0415

        _show(audit_report(plan, report))
    return 0


# ---- output ----------------------------------------------------------------------------------


class _CannotWriteError(Exception):
    """Stdout is closed or full: nothing more can be said there."""

    def __init__(self, cause: OSError) -> None:
        super().__init__()
        self.cause = cause


@contextlib.contextmanager
def _writing() -> Iterator[None]:
    """Where stdout is written to, and only there."""
    try:
        yield
    except OSError as error:
        raise _CannotWriteError(error) from error


def _say(text: str) -> None:
    with _writing():
        sys.stdout.write(text)
        sys.stdout.flush()


def _give_up(cause: OSError) -> int:
    """Ends quietly where the reader has gone, with a sentence where the result is lost."""
    with contextlib.suppress(OSError):  # or Python complains once more when it ends
        os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())
    if isinstance(cause, BrokenPipeError):
        return 0
    return _complain(f"the result cannot be written: {cause.strerror or cause}", 1)


def _say_json(document: Mapping[str, Any]) -> None:
    _say(json.dumps(document, indent=1, allow_nan=False) + "\n")


def _show(thing: RenderableType) -> None:
    """Renders for the terminal, or at 80 columns for a file, and writes that."""
    from rich.console import Console  # noqa: PLC0415

    console = Console(highlight=False)
    if not console.is_terminal and "COLUMNS" not in os.environ:
        console.width = 80
    with _writing(), console.capture() as text:  # rich writes an empty text as well
        console.print(thing)
    _say(text.get())


class _Watch:
    """Tells on stderr how a search is getting on, once it takes longer than a second.

    On a terminal a line that is kept up to date; elsewhere a line every few seconds.
    """

    def __init__(self) -> None:
        self.spinner: Spinner | None = None
        self.told = time.monotonic()

    def __enter__(self) -> _Watch:
        if sys.stderr.isatty():
            from rich.console import Console  # noqa: PLC0415

            console = Console(stderr=True)
            if not console.is_dumb_terminal:
                self.spinner = console.status("", spinner="line")
        return self

    def __call__(self, progress: Progress) -> None:
        from scheduler.report import progress_line  # noqa: PLC0415

        if progress.seconds < 1:
            return
        line = progress_line(progress.seconds, progress.pair, progress.best, progress.bound)
        if self.spinner is not None:
            self.spinner.update(line)
            self.spinner.start()
        elif time.monotonic() - self.told >= 5:
            self.told = time.monotonic()
            _complain(line, 0)

    def __exit__(self, *_: object) -> None:
        if self.spinner is not None:
            self.spinner.stop()
