"""What is asked: an algorithm, a requirement, caps and a technology.

A design is a TOML file, or the same tables as plain data, which a saved plan carries along.
Whether any hardware can meet it is not decided here.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from enum import StrEnum
from fractions import Fraction
from pathlib import Path
from typing import Any

from scheduler.equations import Equation, parse_equations
from scheduler.errors import InputError
from scheduler.graph import Graph, Kind, graph_of
from scheduler.interchange import from_node_link, node_link, read_graph
from scheduler.quantities import (
    FREQUENCY_UNITS,
    TIME_UNITS,
    decimal_text,
    parse_frequency,
    parse_ratio,
    parse_time,
    shortened,
)
from scheduler.structures import equations_text, read_coefficients
from scheduler.technology import (
    RESOURCES,
    Table,
    Technology,
    exists,
    load_technology,
    placed,
    plain_number,
    read_toml,
    shipped,
    technology_of,
)
from scheduler.writing import write_equations

DEFAULT_PARALLELISM = 4
LARGEST_PARALLELISM = 64


class Delivery(StrEnum):
    """How the J samples of a block come and go: one after another, evenly, or all at once."""

    SERIAL = "serial"
    BLOCK = "block"


@dataclass(frozen=True)
class Algorithm:
    """What is to be computed.

    Attributes:
        equations: where the graph was made from; empty when it came as a graph.
        inputs, outputs: names of signals, or of ports when it came as a graph.
    """

    graph: Graph
    equations: tuple[Equation, ...]
    inputs: tuple[str, ...]
    outputs: tuple[str, ...]

    def document(self) -> dict[str, Any]:
        """The algorithm's table in a design: equations, or the graph in node-link form."""
        if not self.equations:
            return {"graph": node_link(self.graph)}
        return {
            "inputs": list(self.inputs),
            "outputs": list(self.outputs),
            "equations": write_equations(self.equations),
        }


@dataclass(frozen=True)
class Requirement:
    """How fast samples come.

    Attributes:
        cycles_per_sample: cycles of the fastest clock that a sample may take, above 0.
        sample_rate, clock: in Hz; both None in abstract time.
        delivery: how the samples of a block come and go.
    """

    cycles_per_sample: Fraction
    sample_rate: Fraction | None = None
    clock: Fraction | None = None
    delivery: Delivery = Delivery.SERIAL

    def document(self) -> dict[str, Any]:
        """The requirement's table in a design."""
        delivery = {"delivery": str(self.delivery)}
        if self.sample_rate is None or self.clock is None:
            return {"cycles_per_sample": str(self.cycles_per_sample), **delivery}
        return {
            "sample_rate": _exact_text(self.sample_rate, FREQUENCY_UNITS),
            "clock": _exact_text(self.clock, FREQUENCY_UNITS),
            **delivery,
        }


@dataclass(frozen=True)
class Caps:
    """The most of everything that a plan may take; None where there is no cap.

    Attributes:
        units: by unit name; units without a cap are left out.
        area: in the technology's unit of area.
        latency_cycles, latency_time: of a block, in cycles or in seconds; one of them at most.
        parallelism: the largest J to consider.
    """

    units: Mapping[str, int] = field(default_factory=dict)
    area: Fraction | None = None
    registers: int | None = None
    latency_cycles: int | None = None
    latency_time: Fraction | None = None
    parallelism: int = DEFAULT_PARALLELISM

    def document(self) -> dict[str, Any]:
        """The caps' table in a design."""
        resources = {
            "area": None if self.area is None else plain_number(self.area),
            "registers": self.registers,
            "latency": self.latency_cycles,
        }
        if self.latency_time is not None:
            resources["latency"] = _exact_text(self.latency_time, TIME_UNITS)
        given = {name: value for name, value in resources.items() if value is not None}
        return {**self.units, **given, "parallelism": self.parallelism}


@dataclass(frozen=True)
class Design:
    """Everything that is asked; its technology performs every operation of its graph."""

    title: str
    algorithm: Algorithm
    requirement: Requirement
    caps: Caps
    technology: Technology

    def document(self) -> dict[str, Any]:
        """The design as plain data that stands alone; `design_from` reads it as an equal design."""
        return {
            "title": self.title,
            "algorithm": self.algorithm.document(),
            "requirement": self.requirement.document(),
            "caps": self.caps.document(),
            "technology": self.technology.document(),
        }


@dataclass(frozen=True)
class Changes:
    """What the command line changes in a design; None where the design stands.

    A change of cycles per sample takes the place of sample rate and clock, and the other way
    round; of sample rate and clock one alone can be changed. The technology is a name, or a path
    relative to the folder in which the program runs.
    """

    sample_rate: str | None = None
    clock: str | None = None
    cycles_per_sample: str | None = None
    caps: Mapping[str, str] = field(default_factory=dict)
    technology: str | None = None


NO_CHANGES = Changes()


def _exact_text(value: Fraction, units: Mapping[str, Fraction]) -> str:
    """A quantity as exact text, in the largest unit that leaves no zero before the point."""
    fitting = (unit for unit, scale in units.items() if value >= scale)
    unit = next(fitting, [*units][-1])
    return f"{decimal_text(value / units[unit])} {unit}"


# Where designs come from


def find_design(text: str) -> Path:
    """The file that a design's path, or the bare name of a shipped one, stands for.

    Raises:
        InputError: it is neither.
    """
    path = Path(text)
    if exists(path):
        return path
    known = shipped("designs")
    if text not in known:
        raise InputError(
            f"there is no design '{shortened(text, 100)}'",
            remedy=f"name a file, or a shipped one: {', '.join(known)}",
        )
    return known[text]


def load_design(path: Path, changes: Changes = NO_CHANGES) -> Design:
    """Reads a design.

    Args:
        path: the TOML file; what it refers to is found relative to it.
        changes: from the command line.

    Raises:
        InputError: for the first fault, with the file or the option and the place.
    """
    return design_from(read_toml(path), str(path), path.parent, changes)


def design_from(
    document: Mapping[str, Any], place: str, folder: Path, changes: Changes = NO_CHANGES
) -> Design:
    """Builds a design from its tables.

    Args:
        document: as TOML or `Design.document` gives it.
        place: the file that faults are told with.
        folder: what paths in the document are relative to.
        changes: from the command line.

    Raises:
        InputError: for the first fault.
    """
    table = Table(document, place)
    table.only("title", "algorithm", "requirement", "caps", "technology")
    return _design(table, _algorithm(table.table("algorithm"), folder), folder, changes)


def design_of(
    graph: Graph,
    *,
    cycles_per_sample: Fraction | int | str,
    title: str = "A graph",
    technology: str = "unit-time",
    caps: Mapping[str, int | str] | None = None,
) -> Design:
    """A design of a graph at hand, in abstract time.

    Args:
        graph: what is to be computed.
        cycles_per_sample: above 0.
        title: what its plans are called.
        technology: the name of a shipped one, or a path.
        caps: by the names that the file has.

    Raises:
        InputError: as `design_from`.
    """
    tables = {
        "title": title,
        "requirement": {"cycles_per_sample": str(cycles_per_sample)},
        "caps": caps or {},
        "technology": {"use": technology},
    }
    return _design(Table(tables, shortened(title)), _algorithm_of(graph), Path(), NO_CHANGES)


def _design(table: Table, algorithm: Algorithm, folder: Path, changes: Changes) -> Design:
    title = table.line("title")
    requirement = _requirement(_changed_requirement(table.table("requirement"), changes))
    technology = _technology(table.table("technology"), folder, changes.technology)
    _check_performed(algorithm.graph, technology, table.table("algorithm").at())
    caps = _caps(_changed_caps(table.table("caps"), changes), technology, requirement)
    return Design(title, algorithm, requirement, caps, technology)


# The algorithm


_FORMS = ("equations", "structure", "graph")


def _algorithm(table: Table, folder: Path) -> Algorithm:
    given = [form for form in _FORMS if form in table]
    if len(given) != 1:
        table.refuse(
            "",
            f"{' and '.join(given)} stand side by side" if given else "there is no algorithm",
            f"give exactly one of {', '.join(_FORMS)}",
        )
    if "equations" in table:
        return _from_equations(table)
    return _from_structure(table, folder) if "structure" in table else _from_graph(table, folder)


def _from_equations(table: Table) -> Algorithm:
    table.only("equations", "inputs", "outputs")
    text, inputs, outputs = table.text("equations"), table.texts("inputs"), table.texts("outputs")
    with placed(table.at("equations")):
        return _equations_algorithm(text, inputs, outputs)


def _equations_algorithm(text: str, inputs: tuple[str, ...], outputs: tuple[str, ...]) -> Algorithm:
    equations = parse_equations(text, inputs, outputs)
    return Algorithm(graph_of(equations, inputs, outputs), equations, inputs, outputs)


def _from_structure(table: Table, folder: Path) -> Algorithm:
    table.only("structure", "coefficients")
    structure, coefficients = table.line("structure"), table.value("coefficients")
    if isinstance(coefficients, str):
        path = folder / table.line("coefficients")
        with placed(table.at("coefficients")):
            coefficients = read_coefficients(path)
    elif not isinstance(coefficients, list):
        table.refuse("coefficients", "this is no list of numbers", "write one, or name a file")
    with placed(table.at()):
        return _equations_algorithm(equations_text(structure, coefficients), ("x",), ("y",))


def _from_graph(table: Table, folder: Path) -> Algorithm:
    table.only("graph")
    graph = table.value("graph")
    if not isinstance(graph, str):
        with placed(table.at("graph")):
            return _algorithm_of(from_node_link(graph))
    path = folder / table.line("graph")
    with placed(table.at("graph")):
        return _algorithm_of(read_graph(path))


def _algorithm_of(graph: Graph) -> Algorithm:
    inputs, outputs = graph.of_kind(Kind.INPUT), graph.of_kind(Kind.OUTPUT)
    return Algorithm(graph, (), tuple(op.name for op in inputs), tuple(op.name for op in outputs))


# The requirement


_ABSTRACT, _REAL = ("cycles_per_sample",), ("sample_rate", "clock")


def _changed_requirement(table: Table, changes: Changes) -> Table:
    options = {key: getattr(changes, key) for key in (*_ABSTRACT, *_REAL)}
    given = {key: text for key, text in options.items() if text is not None}
    dropped: set[str] = set()
    if given.keys() & set(_ABSTRACT):
        dropped.update(_REAL)
    elif given:
        dropped.update(_ABSTRACT)
    return table.changed_by(
        given, {key: f"--{key.replace('_', '-')}" for key in given}, without=dropped
    )


def _requirement(table: Table) -> Requirement:
    table.only(*_ABSTRACT, *_REAL, "delivery")
    delivery = _delivery(table)
    if "cycles_per_sample" in table:
        if any(key in table for key in _REAL):
            table.refuse(
                "cycles_per_sample",
                "cycles_per_sample stands beside a sample rate or a clock",
                "give either cycles_per_sample alone or both of the others",
            )
        with placed(table.at("cycles_per_sample")):
            ratio = parse_ratio(str(table.value("cycles_per_sample")))
        return Requirement(ratio, delivery=delivery)
    for key in _REAL:
        if key not in table:
            table.refuse(
                "", f"'{key}' is missing", "give sample_rate and clock, or cycles_per_sample"
            )
    rate, clock = (_frequency(table, key) for key in _REAL)
    return Requirement(clock / rate, rate, clock, delivery)


def _delivery(table: Table) -> Delivery:
    if "delivery" not in table:
        return Delivery.SERIAL
    text = table.line("delivery")
    if text not in list(Delivery):
        table.refuse(
            "delivery",
            f"'{shortened(text)}' is no way to deliver a block",
            f"use one of {', '.join(Delivery)}",
        )
    return Delivery(text)


def _frequency(table: Table, key: str) -> Fraction:
    text = table.text(key)
    with placed(table.at(key)):
        return parse_frequency(text)


# The technology


def _technology(table: Table, folder: Path, changed: str | None) -> Technology:
    if changed is not None:
        with placed("--technology"):
            return load_technology(changed, Path())
    if "use" not in table and table.entries:
        return technology_of(table)
    table.only("use")
    text = table.line("use")
    with placed(table.at("use")):
        return load_technology(text, folder)


def _check_performed(graph: Graph, technology: Technology, place: str) -> None:
    for operation in graph.operations:
        if not operation.is_port:
            with placed(place), placed(f"operation '{shortened(operation.name)}'"):
                technology.unit_for(operation.kind)


# The caps


def _changed_caps(table: Table, changes: Changes) -> Table:
    return table.changed_by(changes.caps, {name: f"--cap {name}" for name in changes.caps})


def _caps(table: Table, technology: Technology, requirement: Requirement) -> Caps:
    names = [unit.name for unit in technology.units]
    for key in table.entries:
        if key not in (*names, *RESOURCES):
            table.refuse(
                key,
                f"there is nothing called '{shortened(key)}' to cap",
                f"what can be capped: {', '.join((*names, *RESOURCES))}",
            )
    cycles, seconds = _latency(table, requirement)
    return Caps(
        {name: table.whole(name, 0) for name in names if name in table},
        table.amount("area") if "area" in table else None,
        table.whole("registers", 0) if "registers" in table else None,
        cycles,
        seconds,
        table.whole("parallelism", 1, LARGEST_PARALLELISM)
        if "parallelism" in table
        else DEFAULT_PARALLELISM,
    )


def _latency(table: Table, requirement: Requirement) -> tuple[int | None, Fraction | None]:
    """The cap on the latency, in cycles or in seconds."""
    if "latency" not in table:
        return None, None
    value = table.value("latency")
    if not isinstance(value, str) or value.strip()[-1:].isdigit():
        return table.whole("latency", 0), None
    with placed(table.at("latency")):
        seconds = parse_time(value)
    if requirement.sample_rate is None:
        table.refuse(
            "latency",
            f"'{shortened(value)}' is a time, and nothing says how long a cycle is",
            "write the latency in cycles, or give sample_rate and clock",
        )
    return None, seconds
