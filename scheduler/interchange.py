"""Graphs to and from networkx, GraphML and node-link JSON.

A node has the attribute `kind` and, where an operand is a constant, `constant` (exact decimal
text) with `constant_operand` (its position, 0 where nothing is said). An edge has `delays` and
`operand`, the position of the operand that it is; edges without one take the positions that are
left, in their order. All other attributes are ignored on reading. Nothing is checked here that
`Graph` checks itself: wrong numbers of operands, loops without a delay.
"""

from __future__ import annotations

import json
from collections.abc import Hashable, Mapping
from decimal import Decimal
from fractions import Fraction
from io import BytesIO
from pathlib import Path
from typing import Any

import networkx as nx

from scheduler.errors import InputError
from scheduler.graph import OPERAND_COUNT, Graph, Kind, Operand, Operation, Source
from scheduler.quantities import decimal_text, exact_number, shortened

LONGEST_DELAY = 10**6
"""Samples; as in equations."""

LONGEST_NAME = 200
"""Characters."""


def to_networkx(graph: Graph) -> nx.MultiDiGraph:
    """The graph in networkx: a node for every operation, an edge for every operand.

    Raises:
        InputError: for an operation whose operands are all constants, and for a constant without
            a finite decimal form.
    """
    made = nx.MultiDiGraph()
    for operation in graph.operations:
        made.add_node(_name(operation.name), kind=str(operation.kind), **_constant(operation))
    for operation in graph.operations:
        for position, operand in enumerate(operation.operands):
            if isinstance(operand, Source):
                made.add_edge(operand.name, operation.name, delays=operand.delays, operand=position)
    return made


def _constant(operation: Operation) -> dict[str, str | int]:
    constants = [
        (position, operand)
        for position, operand in enumerate(operation.operands)
        if isinstance(operand, Fraction)
    ]
    if not constants:
        return {}
    if len(constants) > 1:
        raise InputError(
            f"operation '{operation.name}' has constants alone as operands",
            remedy="use its result as a constant instead",
        )
    position, constant = constants[0]
    return {"constant": decimal_text(constant), "constant_operand": position}


def from_networkx(nxgraph: nx.DiGraph) -> Graph:
    """The graph that a directed graph of networkx, with or without parallel edges, describes.

    Raises:
        InputError: for the first node or edge that cannot be read, and as `Graph` does.
    """
    if not nxgraph.is_directed():
        raise InputError("the graph has no directions", remedy="save it as a directed graph")
    return Graph(tuple(_operation(nxgraph, node) for node in nxgraph))


def _operation(nxgraph: nx.DiGraph, node: Hashable) -> Operation:
    attributes = nxgraph.nodes[node]
    name = _name(node)
    if "kind" not in attributes:
        raise InputError(f"node '{name}' has no kind", remedy=f"give it one of {_kinds()}")
    kind = attributes["kind"]
    if not isinstance(kind, str) or kind not in OPERAND_COUNT:
        raise InputError(
            f"node '{name}' has the unknown kind '{shortened(str(kind))}'",
            remedy=f"use one of {_kinds()}",
        )
    return Operation(name, Kind(kind), _operands(nxgraph, node))


def _kinds() -> str:
    return ", ".join(Kind)


def _name(node: Hashable) -> str:
    name = str(node)
    if not name.isprintable() or not 0 < len(name) <= LONGEST_NAME:
        raise InputError(
            f"'{shortened(name)}' cannot be the name of a node",
            remedy=f"use 1 to {LONGEST_NAME} printable characters",
        )
    return name


def _operands(nxgraph: nx.DiGraph, node: Hashable) -> tuple[Operand, ...]:
    """The operands of a node in order: first those that name their position, then the others."""
    placed, others = _constant_operand(nxgraph, node), []
    for source, _, attributes in nxgraph.in_edges(node, data=True):
        place = f"edge '{_name(source)}' -> '{_name(node)}'"
        operand = Source(_name(source), _whole(attributes, "delays", place, LONGEST_DELAY))
        if "operand" not in attributes:
            others.append(operand)
            continue
        position = _whole(attributes, "operand", place, 1)
        if position in placed:
            raise InputError(f"node '{_name(node)}' has two operands at position {position}")
        placed[position] = operand
    for operand in others:
        placed[next(free for free in range(len(placed) + 1) if free not in placed)] = operand
    return tuple(placed[position] for position in sorted(placed))


def _constant_operand(nxgraph: nx.DiGraph, node: Hashable) -> dict[int, Operand]:
    attributes = nxgraph.nodes[node]
    if "constant" not in attributes:
        return {}
    place = f"node '{_name(node)}'"
    position = 0
    if "constant_operand" in attributes:
        position = _whole(attributes, "constant_operand", place, 1)
    try:
        return {position: exact_number(str(attributes["constant"]))}
    except InputError as fault:
        raise fault.within(f"{place}: constant") from None


def _whole(attributes: Mapping[str, Any], key: str, place: str, most: int) -> int:
    if key not in attributes:
        raise InputError(f"'{key}' is missing", place=place, remedy="write 0 where there are none")
    shown = str(attributes[key])
    try:
        value = exact_number(shown)
    except InputError as fault:
        raise fault.within(f"{place}: {key}") from None
    if value.denominator != 1 or not 0 <= value <= most:
        raise InputError(
            f"'{key}' is {shortened(shown)}",
            place=place,
            remedy=f"write a whole number from 0 to {most}",
        )
    return value.numerator


# Node-link tables


def node_link(graph: Graph) -> dict[str, Any]:
    """The graph as plain data: the node-link form of networkx, its edges under "edges".

    Raises:
        InputError: as `to_networkx`.
    """
    made = to_networkx(graph)
    return {
        "directed": True,
        "multigraph": True,
        "graph": {},
        "nodes": [{**data, "id": node} for node, data in made.nodes(data=True)],
        "edges": [
            {**data, "source": source, "target": target, "key": key}
            for source, target, key, data in made.edges(keys=True, data=True)
        ],
    }


def from_node_link(document: object) -> Graph:
    """The graph of plain data in node-link form, its edges under "edges" or "links".

    Raises:
        InputError: for data of another form, and as `from_networkx`.
    """
    if not isinstance(document, Mapping) or document.get("directed", True) is not True:
        raise InputError(
            "this is not a directed graph in node-link form", remedy='give it "nodes" and "edges"'
        )
    made = nx.MultiDiGraph()
    for node in _rows(document, "nodes", ("id",)):
        if _name(node["id"]) in made:
            raise InputError(f"two nodes are named '{_name(node['id'])}'", remedy="rename one")
        made.add_node(_name(node["id"]), **_attributes(node))
    for edge in _rows(document, "edges" if "edges" in document else "links", ("source", "target")):
        ends = _name(edge["source"]), _name(edge["target"])
        _check_ends(ends, made)
        made.add_edge(*ends, **_attributes(edge))
    return from_networkx(made)


def _rows(document: Mapping[str, Any], key: str, wanted: tuple[str, ...]) -> list[dict[str, Any]]:
    rows = document.get(key)
    if not isinstance(rows, list):
        raise InputError(f"the graph has no list of {key}", remedy=f'give it "{key}"')
    for count, row in enumerate(rows, 1):
        if not isinstance(row, Mapping) or not all(name in row for name in wanted):
            raise InputError(
                f"entry {count} of the {key} lacks {' or '.join(wanted)}",
                remedy=f"give it {' and '.join(wanted)}",
            )
    return rows


_KNOWN = ("kind", "constant", "constant_operand", "delays", "operand")


def _attributes(row: Mapping[str, Any]) -> dict[str, Any]:
    # Only what is read later: any other key could be an argument of networkx ("key", "attr").
    return {key: row[key] for key in _KNOWN if key in row}


def _check_ends(ends: tuple[str, str], made: nx.MultiDiGraph) -> None:
    for end in ends:
        if end not in made:
            raise InputError(f"an edge ends at '{end}', which is no node", remedy="add the node")


# Files


def read_graph(path: Path) -> Graph:
    """Reads a graph from a file: `.graphml`, or `.json` in node-link form.

    Raises:
        InputError: for another ending, a file that cannot be read, and what makes no graph.
    """
    readers = {".graphml": _graphml, ".json": _json}
    reader = readers.get(path.suffix.lower())
    if reader is None:
        raise _unknown_ending(path)
    content = read_bytes(path)
    try:
        return reader(content)
    except InputError as fault:
        raise fault.within(str(path)) from None


def _graphml(content: bytes) -> Graph:
    try:
        nxgraph = nx.read_graphml(BytesIO(content), force_multigraph=True)
    except Exception as error:
        # Broken XML, missing ends and unknown types surface as half a dozen unrelated exceptions.
        raise InputError(
            f"this is not GraphML: {shortened(str(error), 100)}", remedy="save the graph again"
        ) from None
    _fill_in(nxgraph)
    return from_networkx(nxgraph)


def _fill_in(nxgraph: nx.MultiDiGraph) -> None:
    """Writes the defaults that a GraphML file declares to where they hold; networkx does not."""
    for _, attributes in nxgraph.nodes(data=True):
        attributes.update({**nxgraph.graph["node_default"], **attributes})
    for *_, attributes in nxgraph.edges(data=True):
        attributes.update({**nxgraph.graph["edge_default"], **attributes})


def _json(content: bytes) -> Graph:
    try:
        document = json.loads(content, parse_float=Decimal)
    except (ValueError, ArithmeticError, RecursionError) as error:
        raise InputError(
            f"this is not JSON: {shortened(str(error), 100)}", remedy="save the graph again"
        ) from None
    return from_node_link(document)


def write_graph(graph: Graph, path: Path) -> None:
    """Writes a graph to a file, in the form that its ending names, as `read_graph` reads it.

    Raises:
        InputError: for another ending, a file that cannot be written, and as `to_networkx`.
    """
    writers = {".graphml": _graphml_text, ".json": _json_text}
    writer = writers.get(path.suffix.lower())
    if writer is None:
        raise _unknown_ending(path)
    content = writer(graph)
    try:
        path.write_text(content, encoding="utf-8")
    except OSError as error:
        raise InputError(
            f"the file cannot be written ({error.strerror})", place=str(path)
        ) from None


def _graphml_text(graph: Graph) -> str:
    # The plain writer: `nx.write_graphml` changes with whether lxml is installed.
    content = BytesIO()
    nx.write_graphml_xml(to_networkx(graph), content)
    return content.getvalue().decode("utf-8")


def _json_text(graph: Graph) -> str:
    return json.dumps(node_link(graph), indent=1) + "\n"


def _unknown_ending(path: Path) -> InputError:
    return InputError(
        f"a graph cannot be kept in a file that ends in '{shortened(path.suffix)}'",
        place=str(path),
        remedy="use .graphml or .json",
    )


def read_bytes(path: Path) -> bytes:
    """The content of a file.

    Raises:
        InputError: for a file that is missing or cannot be read, and for a folder.
    """
    try:
        return path.read_bytes()
    except FileNotFoundError:
        what, remedy = "there is no such file", "check its name"
    except IsADirectoryError:
        what, remedy = "this is a folder", "name a file"
    except (OSError, ValueError) as error:
        reason = getattr(error, "strerror", None) or str(error)
        what, remedy = f"the file cannot be read ({reason})", "check its name and its rights"
    raise InputError(what, place=str(path), remedy=remedy)
