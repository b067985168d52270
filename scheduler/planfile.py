"""A plan as a JSON file: written whole or not at all, and read back with every value checked.

Checked is the form only; whether the plan in it stands is the audit's work.
"""

from __future__ import annotations

import contextlib
import json
import math
import os
from collections.abc import Mapping
from dataclasses import asdict
from pathlib import Path
from typing import Any, TypeVar

from scheduler.errors import InputError
from scheduler.plan import (
    Copy,
    Lifetime,
    Plan,
    PlannedEdge,
    PlannedOperation,
    Proof,
    SolverVerdict,
    Status,
)
from scheduler.quantities import shortened

FORMAT = "foldwright-plan"
VERSION = 1


def plan_document(plan: Plan) -> dict[str, Any]:
    """A plan as plain data, the form of its JSON file."""
    return {
        "format": FORMAT,
        "version": VERSION,
        "title": plan.title,
        "status": str(plan.status),
        "reason": plan.reason,
        "objective": {"value": plan.value, "bound": plan.bound},
        "parallelism": plan.parallelism,
        "cycles": plan.cycles,
        "clock_period_ns": plan.clock_period_ns,
        "sample_period_ns": plan.sample_period_ns,
        "latency": plan.latency,
        "units": dict(plan.units),
        "registers": plan.registers,
        "operations": [asdict(op) for op in plan.operations],
        "edges": [
            {"from": list(edge.source), "to": list(edge.target), "delays": edge.delays}
            for edge in plan.edges
        ],
        "lifetimes": [
            {"value": list(life.value), "first": life.first, "registers": list(life.registers)}
            for life in plan.lifetimes
        ],
        "proof": {
            **asdict(plan.proof),
            "by_solver": [asdict(verdict) for verdict in plan.proof.by_solver],
            "binding": list(plan.proof.binding),
        },
        "design": plan.design,
    }


def plan_from(document: object, place: str) -> Plan:
    """Reads a plan from plain data.

    Args:
        document: what `plan_document` made.
        place: what to call it in messages.

    Raises:
        InputError: it is no plan, or one of another version, or something in it is missing or of
            the wrong kind.
    """
    if not isinstance(document, dict) or document.get("format") != FORMAT:
        raise InputError("this is no plan", place=place, remedy=f"'format' is to be '{FORMAT}'")
    stated = document.get("version")
    if type(stated) is not int or stated != VERSION:
        raise InputError(
            f"this is a plan of version {shortened(str(stated))}, not {VERSION}",
            place=place,
            remedy="make it anew from its design",
        )
    try:
        return _plan(document)
    except KeyError as error:
        raise InputError(f"the plan has no {error}", place=place, remedy=_REMEDY) from error
    except (TypeError, ValueError, AttributeError, OverflowError) as error:
        raise InputError(f"the plan is damaged ({error})", place=place, remedy=_REMEDY) from error


_REMEDY = "save it again with `foldwright plan --save`"


def _plan(document: Mapping[str, Any]) -> Plan:
    return Plan(
        title=_is(str, document["title"]),
        status=Status(document["status"]),
        value=_number(document["objective"]["value"]),
        bound=_number(document["objective"]["bound"]),
        design=_is(dict, document["design"]),
        parallelism=_whole_or_none(document["parallelism"]),
        cycles=_whole_or_none(document["cycles"]),
        clock_period_ns=_number(document["clock_period_ns"]),
        sample_period_ns=_number(document["sample_period_ns"]),
        units={_is(str, name): _whole(count) for name, count in document["units"].items()},
        registers=_whole_or_none(document["registers"]),
        latency=_whole_or_none(document["latency"]),
        operations=tuple(_operation(row) for row in _is(list, document["operations"])),
        edges=tuple(
            PlannedEdge(_copy(row["from"]), _copy(row["to"]), _whole(row["delays"]))
            for row in _is(list, document["edges"])
        ),
        lifetimes=tuple(
            Lifetime(
                _copy(row["value"]),
                _whole(row["first"]),
                tuple(map(_whole, _is(list, row["registers"]))),
            )
            for row in _is(list, document["lifetimes"])
        ),
        proof=_proof(document["proof"]),
        reason=_is(str, document["reason"]),
    )


def _operation(row: Mapping[str, Any]) -> PlannedOperation:
    return PlannedOperation(
        name=_is(str, row["name"]),
        copy=_whole(row["copy"]),
        unit=None if row["unit"] is None else _is(str, row["unit"]),
        instance=_whole_or_none(row["instance"]),
        start=_whole(row["start"]),
        slot=_whole(row["slot"]),
        stage=_whole(row["stage"]),
        latency=_whole(row["latency"]),
        busy=_whole(row["busy"]),
    )


def _proof(row: Mapping[str, Any]) -> Proof:
    return Proof(
        pairs=_whole(row["pairs"]),
        by_floor=_whole(row["by_floor"]),
        by_solver=tuple(
            SolverVerdict(
                _whole(each["parallelism"]),
                _whole(each["cycles"]),
                _number(each["bound"]),
                _whole(each["runs"]),
            )
            for each in _is(list, row["by_solver"])
        ),
        every_parallelism=_is(bool, row["every_parallelism"]),
        binding=tuple(_is(str, line) for line in _is(list, row["binding"])),
    )


_Kind = TypeVar("_Kind")


def _is(kind: type[_Kind], value: object) -> _Kind:
    if not isinstance(value, kind):
        raise TypeError(f"{value!r:.40} is no {kind.__name__}")
    return value


def _whole(value: object) -> int:
    if isinstance(value, bool):
        raise TypeError(f"{value} is no int")
    return _is(int, value)


def _whole_or_none(value: object) -> int | None:
    return None if value is None else _whole(value)


def _number(value: object) -> float | None:
    if value is None:
        return None
    number = float(_is(float, value) if isinstance(value, float) else _whole(value))
    if not math.isfinite(number):
        raise ValueError(f"{number} is not finite")
    return number


def _copy(value: object) -> Copy:
    name, index = _is(list, value)
    return Copy(_is(str, name), _whole(index))


def save_plan(plan: Plan, path: Path) -> None:
    """Writes a plan as JSON: whole or not at all, whatever was there before.

    Raises:
        InputError: the file cannot be written.
    """
    text = json.dumps(plan_document(plan), indent=1, allow_nan=False) + "\n"
    aside = path.parent / f".foldwright-{os.getpid()}.part"
    try:
        aside.write_text(text, encoding="utf-8")
        aside.replace(path)
    except OSError as error:
        raise InputError(
            f"the plan cannot be saved: {error.strerror or error}",
            place=str(path),
            remedy="choose a folder that exists, can be written, and has room",
        ) from error
    finally:
        with contextlib.suppress(OSError):
            aside.unlink(missing_ok=True)


def load_plan(path: Path) -> Plan:
    """Reads a plan file.

    Raises:
        InputError: it cannot be read, is cut off, or is no plan.
    """
    try:
        document = json.loads(path.read_bytes().decode("utf-8"))
    except OSError as error:
        raise InputError(
            f"the plan cannot be read: {error.strerror or error}", place=str(path)
        ) from error
    except UnicodeDecodeError as error:
        raise InputError("the file is not UTF-8 text", place=str(path), remedy=_REMEDY) from error
    except (json.JSONDecodeError, RecursionError, ValueError) as error:
        where = f", line {error.lineno}" if isinstance(error, json.JSONDecodeError) else ""
        raise InputError(
            "the file is no JSON or is cut off", place=f"{path}{where}", remedy=_REMEDY
        ) from error
    return plan_from(document, str(path))
