"""Graphs to and from networkx, GraphML and node-link JSON."""

import json
from fractions import Fraction
from pathlib import Path
from typing import Any

import networkx as nx
import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from scheduler.equations import parse_equations
from scheduler.errors import InputError
from scheduler.graph import OPERAND_COUNT, Graph, Kind, Operand, Operation, Source, graph_of
from scheduler.interchange import (
    from_networkx,
    from_node_link,
    node_link,
    read_graph,
    to_networkx,
    write_graph,
)

ENDINGS = (".graphml", ".json")
BIQUAD = "w[n] = x[n] - 0.6414*w[n-2] + 1.561*w[n-1]\ny[n] = w[n] + w[n-1] - w[n]*0.1"
NAMES = st.text(
    st.characters(exclude_categories=["C", "Zl", "Zp"]).filter(str.isprintable),
    min_size=1,
    max_size=8,
)
CONSTANTS = st.builds(
    Fraction, st.integers(-(10**25), 10**25), st.sampled_from([1, 2, 10**4, 10**25])
)


def biquad() -> Graph:
    return graph_of(parse_equations(BIQUAD, ["x"], ["y"]), ["x"], ["y"])


@st.composite
def graphs(draw: st.DrawFn) -> Graph:
    """Graphs with parallel edges, loops, several ports, and names of any printable text."""
    names = draw(st.lists(NAMES, min_size=1, max_size=8, unique=True))
    kinds = [draw(st.sampled_from(Kind)) for _ in names]
    results = [(i, name) for i, name in enumerate(names) if kinds[i] is not Kind.OUTPUT]
    return Graph(
        tuple(
            Operation(name, kind, draw(operands(i, kind, results)))
            for i, (name, kind) in enumerate(zip(names, kinds, strict=True))
        )
    )


@st.composite
def operands(
    draw: st.DrawFn, place: int, kind: Kind, results: list[tuple[int, str]]
) -> tuple[Operand, ...]:
    """Results of any operation, later ones with a delay, and a constant at the most."""
    made: list[Operand] = []
    for _ in range(OPERAND_COUNT[kind]):
        has_constant = any(isinstance(operand, Fraction) for operand in made)
        if not has_constant and draw(st.integers(0, 2)) == 0:
            made.append(draw(CONSTANTS))
            continue
        if not results:
            return draw(st.nothing())
        source, name = draw(st.sampled_from(results))
        made.append(Source(name, draw(st.integers(0, 3)) + (source >= place)))
    return tuple(made)


# There and back


@given(graphs())
def test_a_graph_comes_back_from_networkx(graph: Graph) -> None:
    assert from_networkx(to_networkx(graph)) == graph


@given(graphs())
def test_a_graph_comes_back_from_its_node_link_text(graph: Graph) -> None:
    assert from_node_link(json.loads(json.dumps(node_link(graph)))) == graph


@pytest.mark.parametrize("ending", ENDINGS)
@settings(suppress_health_check=[HealthCheck.function_scoped_fixture], max_examples=50)
@given(graph=graphs())
def test_a_graph_comes_back_from_its_file(tmp_path: Path, ending: str, graph: Graph) -> None:
    path = tmp_path / f"graph{ending}"
    write_graph(graph, path)
    assert read_graph(path) == graph


@given(graphs())
def test_networkx_reads_our_node_link_data_as_the_same_graph(graph: Graph) -> None:
    read = nx.node_link_graph(node_link(graph), edges="edges")
    assert nx.utils.graphs_equal(read, to_networkx(graph))


@pytest.mark.parametrize("edges", ["edges", "links"])
def test_node_link_data_of_networkx_is_read_under_both_of_its_names(edges: str) -> None:
    data = nx.node_link_data(to_networkx(biquad()), edges=edges)
    assert from_node_link(data) == biquad()


# The attributes


def test_attributes_are_kind_constant_delays_and_operand() -> None:
    made = to_networkx(biquad())
    assert made.nodes["x"] == {"kind": "input"}
    assert made.nodes["w.1"] == {"kind": "multiply", "constant": "0.6414", "constant_operand": 0}
    assert made.nodes["y.2"] == {"kind": "multiply", "constant": "0.1", "constant_operand": 1}
    assert list(made.edges("x", data=True)) == [("x", "w.2", {"delays": 0, "operand": 0})]
    assert list(made.in_edges("w.2", data=True))[1][2] == {"delays": 0, "operand": 1}


def test_operands_without_a_position_take_what_is_left_in_the_order_of_the_edges() -> None:
    made = nx.DiGraph()
    made.add_nodes_from([("x", {"kind": "input"}), ("z", {"kind": "input"})])
    made.add_node("d", kind="subtract")
    made.add_node("m", kind="multiply", constant="0.5")
    made.add_edge("z", "d", delays=1)
    made.add_edge("x", "d", delays=0)
    made.add_edge("d", "m", delays=0)
    graph = from_networkx(made)
    assert graph.by_name["d"].operands == (Source("z", 1), Source("x", 0))
    assert graph.by_name["m"].operands == (Fraction(1, 2), Source("d", 0))
    made.edges["z", "d"]["operand"] = 1
    assert from_networkx(made).by_name["d"].operands == (Source("x", 0), Source("z", 1))


def test_names_need_not_be_text_and_numbers_may_be_floats_or_text() -> None:
    made = nx.DiGraph()
    made.add_node(1, kind="input", label="of no interest")
    made.add_node(2, kind="multiply", constant=0.1, constant_operand=1.0)
    made.add_edge(1, 2, delays="3", operand=0, weight=7)
    assert from_networkx(made).operations == (
        Operation("1", Kind.INPUT),
        Operation("2", Kind.MULTIPLY, (Source("1", 3), Fraction(1, 10))),
    )


def test_a_number_in_json_is_exact(tmp_path: Path) -> None:
    path = tmp_path / "a.json"
    text = json.dumps(node_link(biquad()))
    path.write_text(text.replace('"0.6414"', "0.64140000000000000000001"), encoding="utf-8")
    constant = read_graph(path).by_name["w.1"].operands[0]
    assert constant == Fraction(64140000000000000000001, 10**23)


def test_graphml_of_another_program_is_read_with_its_defaults(tmp_path: Path) -> None:
    path = tmp_path / "foreign.graphml"
    path.write_text(FOREIGN, encoding="utf-8")
    assert read_graph(path).operations == (
        Operation("a", Kind.INPUT),
        Operation("b", Kind.ADD, (Source("a", 0), Source("b", 2))),
        Operation("c", Kind.OUTPUT, (Source("b", 0),)),
    )


FOREIGN = """<?xml version="1.0" encoding="UTF-8"?>
<graphml xmlns="http://graphml.graphdrawing.org/xmlns">
  <key id="k" for="node" attr.name="kind" attr.type="string"><default>add</default></key>
  <key id="w" for="edge" attr.name="delays" attr.type="double"><default>0</default></key>
  <graph edgedefault="directed">
    <node id="a"><data key="k">input</data></node>
    <node id="b"/>
    <node id="c"><data key="k">output</data></node>
    <edge source="a" target="b"/>
    <edge source="b" target="b"><data key="w">2.0</data></edge>
    <edge source="b" target="c"/>
  </graph>
</graphml>
"""


# What cannot be written


def refused_graph(*operations: Operation) -> str:
    with pytest.raises(InputError) as caught:
        to_networkx(Graph(operations))
    return str(caught.value)


def test_a_graph_that_the_form_cannot_hold_is_refused() -> None:
    half, third, x = Fraction(1, 2), Fraction(1, 3), Operation("x", Kind.INPUT)
    alone = Operation("c", Kind.MULTIPLY, (half, half))
    endless = Operation("c", Kind.MULTIPLY, (third, Source("x", 0)))
    assert refused_graph(alone).startswith("operation 'c' has constants alone as operands")
    assert "1/3 cannot be written exactly" in refused_graph(x, endless)
    assert "'two\\nlines' cannot be the name" in refused_graph(Operation("two\nlines", Kind.INPUT))


@pytest.mark.parametrize("act", [lambda path: write_graph(biquad(), path), read_graph])
def test_only_two_endings_are_known(tmp_path: Path, act: Any) -> None:
    with pytest.raises(InputError, match=r"ends in '\.dot'; use \.graphml or \.json"):
        act(tmp_path / "a.dot")


def test_a_file_that_cannot_be_written_is_told(tmp_path: Path) -> None:
    with pytest.raises(InputError, match="the file cannot be written"):
        write_graph(biquad(), tmp_path / "missing" / "a.json")


# What cannot be read


def data(**changes: Any) -> dict[str, Any]:
    return {
        "nodes": [{"id": "x", "kind": "input"}, {"id": "y", "kind": "output"}],
        "edges": [{"source": "x", "target": "y", "delays": 0}],
    } | changes


def refused(document: object) -> str:
    with pytest.raises(InputError) as caught:
        from_node_link(document)
    return str(caught.value)


def edge(**changes: Any) -> dict[str, Any]:
    return data(edges=[{"source": "x", "target": "y", "delays": 0} | changes])


def node(**changes: Any) -> dict[str, Any]:
    return data(nodes=[{"id": "x", "kind": "input"}, {"id": "y", "kind": "output"} | changes])


@pytest.mark.parametrize(
    ("document", "told"),
    [
        ([], "this is not a directed graph in node-link form"),
        (data(directed=False), "this is not a directed graph in node-link form"),
        (data(nodes={}), "the graph has no list of nodes"),
        ({"nodes": []}, "the graph has no list of links"),
        (data(nodes=[{"kind": "input"}]), "entry 1 of the nodes lacks id"),
        (data(edges=[{"source": "x"}]), "entry 1 of the edges lacks source or target"),
        (data(edges=["x"]), "entry 1 of the edges lacks source or target"),
        (edge(target="z"), "an edge ends at 'z', which is no node"),
        (
            edge(delays=-1),
            "edge 'x' -> 'y': 'delays' is -1; write a whole number from 0 to 1000000",
        ),
        (edge(delays=0.5), "edge 'x' -> 'y': 'delays' is 0.5"),
        (edge(delays=True), "edge 'x' -> 'y': delays: 'True' is not a number"),
        (edge(operand=2), "edge 'x' -> 'y': 'operand' is 2; write a whole number from 0 to 1"),
        (
            node(kind="divide"),
            "node 'y' has the unknown kind 'divide'; use one of input, output, a",
        ),
        (node(kind=["add"]), "node 'y' has the unknown kind"),
        (node(id="x"), "two nodes are named 'x'"),
        (node(id=""), "'' cannot be the name of a node"),
        (node(id="a\nb"), "'a\\nb' cannot be the name of a node"),
        (node(constant="0.5"), "operation 'y' (output) has 2 operands instead of 1"),
        (node(constant="1/3"), "node 'y': constant: '1/3' is not a number"),
        (node(constant=float("inf")), "node 'y': constant: 'inf' is not a number"),
        (node(constant=1, constant_operand=3), "node 'y': 'constant_operand' is 3"),
    ],
)
def test_faulty_data_is_refused_in_one_sentence(document: object, told: str) -> None:
    assert refused(document).startswith(told)


def test_what_is_missing_is_told() -> None:
    assert refused(data(edges=[{"source": "x", "target": "y"}])) == (
        "edge 'x' -> 'y': 'delays' is missing; write 0 where there are none"
    )
    assert refused(data(nodes=[{"id": "x"}], edges=[])).startswith("node 'x' has no kind")


def test_two_operands_at_one_position_are_refused() -> None:
    two = [{"source": "x", "target": "y", "delays": 0, "operand": 0}] * 2
    assert refused(data(edges=two)) == "node 'y' has two operands at position 0"


def test_undirected_graphs_are_refused() -> None:
    with pytest.raises(InputError, match="the graph has no directions"):
        from_networkx(nx.Graph())


@pytest.mark.parametrize("ending", ENDINGS)
@pytest.mark.parametrize(
    "content",
    [
        b"",
        b"\xff\xfe\x00",
        b"<graphml",
        b"<a/>",
        b"{",
        b"[" * 100_000,
        b"9" * 5000,
        FOREIGN.replace("directed", "undirected").encode(),
        FOREIGN.replace("2.0", "two").encode(),
        FOREIGN.replace('target="c"', "").encode(),
        FOREIGN.replace('key="w"', 'key="z"').encode(),
    ],
)
def test_a_broken_file_is_refused_with_its_name(
    tmp_path: Path, ending: str, content: bytes
) -> None:
    path = tmp_path / f"a{ending}"
    path.write_bytes(content)
    with pytest.raises(InputError) as caught:
        read_graph(path)
    assert str(caught.value).startswith(f"{path}: ")


def test_files_that_are_not_there_are_told(tmp_path: Path) -> None:
    (tmp_path / "folder.json").mkdir()
    for name, told in (("no.json", "there is no such file"), ("folder.json", "this is a folder")):
        with pytest.raises(InputError, match=told):
            read_graph(tmp_path / name)
