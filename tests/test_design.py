"""Designs: what a file may say, what the command line changes, and every fault with its place."""

import json
from collections.abc import Callable
from fractions import Fraction
from pathlib import Path
from typing import Any

import pytest
from hypothesis import given
from hypothesis import strategies as st

from scheduler.design import (
    Caps,
    Changes,
    Delivery,
    Design,
    Requirement,
    design_from,
    design_of,
    find_design,
    load_design,
)
from scheduler.equations import parse_equations
from scheduler.errors import InputError
from scheduler.graph import graph_of
from scheduler.interchange import node_link, write_graph
from scheduler.structures import equations_text
from scheduler.technology import load_technology

SUM = "y[n] = x[n] + 0.5*x[n-1]"
FILE = '''
title = "A short sum"
[algorithm]
inputs = ["x"]
outputs = ["y"]
equations = """
w[n] = x[n] + 0.5*x[n-1]   # halves
y[n] = w[n-1]
"""
[requirement]
sample_rate = "2 MHz"
clock = "50 MHz"
[caps]
multiplier = 2
area = 12000.5
registers = 40
latency = 60
parallelism = 8
[technology]
use = "unit-time"
'''
REAL = {"sample_rate": "2 MHz", "clock": "50 MHz"}
UNIT_TIME = load_technology("unit-time", Path()).document()


def tables(**changes: Any) -> dict[str, Any]:
    return {
        "title": "a test",
        "algorithm": {"inputs": ["x"], "outputs": ["y"], "equations": SUM},
        "requirement": {"cycles_per_sample": "4"},
        "technology": {"use": "unit-time"},
    } | changes


def built(changes: Changes | None = None, folder: Path | None = None, **tabled: Any) -> Design:
    return design_from(tables(**tabled), "a.toml", folder or Path(), changes or Changes())


def refused(act: Callable[[], object]) -> str:
    with pytest.raises(InputError) as caught:
        act()
    return str(caught.value)


def there_and_back(design: Design) -> Design:
    return design_from(json.loads(json.dumps(design.document())), "a plan", Path("nowhere"))


# The whole file


def test_a_file_is_read_as_it_stands(tmp_path: Path) -> None:
    path = tmp_path / "short.toml"
    path.write_text(FILE, encoding="utf-8")
    design = load_design(path)
    assert design.title == "A short sum"
    assert [str(edge.target) for edge in design.algorithm.graph.edges] == ["w.1", "w", "w", "y.out"]
    assert (design.algorithm.inputs, design.algorithm.outputs) == (("x",), ("y",))
    assert design.requirement == Requirement(Fraction(25), Fraction(2 * 10**6), Fraction(5 * 10**7))
    assert design.caps == Caps({"multiplier": 2}, Fraction(24001, 2), 40, 60, None, 8)
    assert design.technology == load_technology("unit-time", Path())


def test_caps_are_optional_and_parallelism_is_4_where_nothing_is_said() -> None:
    assert built().caps == Caps({}, None, None, None, None, 4)


def test_a_missing_folder_or_file_is_told(tmp_path: Path) -> None:
    missing = tmp_path / "no.toml"
    assert refused(lambda: load_design(missing)) == (
        f"{missing}: there is no such file; check its name"
    )
    assert refused(lambda: load_design(tmp_path)) == f"{tmp_path}: this is a folder; name a file"


def test_a_syntax_error_is_told_with_its_line(tmp_path: Path) -> None:
    path = tmp_path / "a.toml"
    path.write_text('title = "a"\nclock = 50 MHz\n', encoding="utf-8")
    assert refused(lambda: load_design(path)).startswith(f"{path}: this is not TOML: ")
    assert "line 2" in refused(lambda: load_design(path))


def test_unknown_tables_and_keys_are_told_with_the_nearest_known_one() -> None:
    assert refused(lambda: built(cap={})) == (
        "a.toml: the key 'cap' is unknown; did you mean 'caps'?"
    )
    assert refused(lambda: built(requirement={"sample_rates": "1 MHz", "clock": "1 MHz"})) == (
        "a.toml: [requirement]: the key 'sample_rates' is unknown; did you mean 'sample_rate'?"
    )


def test_what_is_no_table_is_told() -> None:
    assert refused(lambda: built(caps=3)) == (
        "a.toml: [caps]: a number stands where a table belongs"
    )
    assert refused(lambda: design_from([], "a.json", Path())) == (  # type: ignore[arg-type]
        "a.json: a list stands where a table belongs"
    )


def test_a_missing_title_is_told() -> None:
    assert refused(lambda: design_from({}, "a.toml", Path())).startswith("a.toml: ")
    untitled = {key: value for key, value in tables().items() if key != "title"}
    assert refused(lambda: design_from(untitled, "a.toml", Path())) == (
        "a.toml: 'title' is missing; add it"
    )


# The algorithm


def test_a_structure_is_what_its_equations_are() -> None:
    made = built(algorithm={"structure": "fir-direct", "coefficients": [0.5, "0.25", 1]})
    text = equations_text("fir-direct", ["0.5", "0.25", "1"])
    by_hand = built(algorithm={"inputs": ["x"], "outputs": ["y"], "equations": text})
    assert made == by_hand
    assert made.document()["algorithm"]["equations"] == text


def test_coefficients_may_stand_in_a_file_beside_the_design(tmp_path: Path) -> None:
    (tmp_path / "numbers.csv").write_text("0.5, 0.25\n1\n", encoding="utf-8")
    algorithm = {"structure": "fir-direct", "coefficients": "numbers.csv"}
    assert built(folder=tmp_path, algorithm=algorithm) == built(
        algorithm={"structure": "fir-direct", "coefficients": [0.5, 0.25, 1]}
    )


@pytest.mark.parametrize("name", ["graph.json", "graph.graphml"])
def test_a_graph_may_stand_in_a_file_beside_the_design_or_inside(tmp_path: Path, name: str) -> None:
    graph = graph_of(parse_equations(SUM, ["x"], ["y"]), ["x"], ["y"])
    write_graph(graph, tmp_path / name)
    from_file = built(folder=tmp_path, algorithm={"graph": name})
    assert from_file.algorithm.graph == graph
    assert (from_file.algorithm.inputs, from_file.algorithm.outputs) == (("x",), ("y.out",))
    assert from_file == built(algorithm={"graph": node_link(graph)})


@pytest.mark.parametrize(
    ("algorithm", "told"),
    [
        ({}, "[algorithm]: there is no algorithm; give exactly one of equations, structure, graph"),
        (
            {"equations": SUM, "graph": "a.json"},
            "[algorithm]: equations and graph stand side by side; give exactly one of",
        ),
        ({"equations": SUM, "outputs": ["y"]}, "[algorithm]: 'inputs' is missing; add it"),
        (
            {"equations": SUM, "inputs": "x", "outputs": ["y"]},
            "[algorithm] inputs: this is not a list of texts; write one such as",
        ),
        (
            {"equations": "y[n] = x[n] * z[n]", "inputs": ["x"], "outputs": ["y"]},
            "[algorithm] equations: line 1, column 15: signal 'z' is used but never defined",
        ),
        (
            {"equations": "y[n] = x[n] + y[n]", "inputs": ["x"], "outputs": ["y"]},
            "[algorithm] equations: the loop y -> y has no delay",
        ),
        (
            {"equations": 3, "inputs": ["x"], "outputs": ["y"]},
            "[algorithm] equations: a number stands where text belongs; put it into quotes",
        ),
        ({"structure": "fir-direct"}, "[algorithm]: 'coefficients' is missing; add it"),
        (
            {"structure": "fir-direct", "coefficients": 3},
            "[algorithm] coefficients: this is no list of numbers; write one, or name a file",
        ),
        (
            {"structure": "fir", "coefficients": [1]},
            "[algorithm]: structure 'fir' is unknown; the structures are fir-direct",
        ),
        (
            {"structure": "fir-direct", "coefficients": [1], "inputs": ["x"]},
            "[algorithm]: the key 'inputs' is unknown; known here: structure, coefficients",
        ),
        (
            {"structure": "fir-direct", "coefficients": "no.csv"},
            "[algorithm] coefficients: no.csv: the coefficients cannot be read",
        ),
        (
            {"structure": "fir-direct", "coefficients": "a\0b"},
            "[algorithm] coefficients: this is not one line of text",
        ),
        ({"graph": "no.json"}, "[algorithm] graph: no.json: there is no such file"),
        ({"graph": "no.dot"}, "[algorithm] graph: no.dot: a graph cannot be kept in a file"),
        ({"graph": 3}, "[algorithm] graph: this is not a directed graph in node-link form"),
        (
            {"graph": {"nodes": [{"id": "a", "kind": "add"}], "edges": []}},
            "[algorithm] graph: operation 'a' (add) has 0 operands instead of 2",
        ),
    ],
)
def test_a_faulty_algorithm_is_told(algorithm: dict[str, Any], told: str) -> None:
    assert refused(lambda: built(algorithm=algorithm)).startswith(f"a.toml: {told}")


# The requirement


@pytest.mark.parametrize(
    ("requirement", "cycles"),
    [
        ({"cycles_per_sample": "33/2"}, Fraction(33, 2)),
        ({"cycles_per_sample": 17}, Fraction(17)),
        ({"cycles_per_sample": 0.1}, Fraction(1, 10)),
        ({"sample_rate": "3 MHz", "clock": "0.1 GHz"}, Fraction(100, 3)),
    ],
)
def test_cycles_per_sample_are_exact(requirement: dict[str, Any], cycles: Fraction) -> None:
    assert built(requirement=requirement).requirement.cycles_per_sample == cycles


def test_samples_come_one_after_another_unless_the_design_says_block() -> None:
    assert built().requirement.delivery is Delivery.SERIAL
    block = {"cycles_per_sample": "4", "delivery": "block"}
    assert built(requirement=block).requirement.delivery is Delivery.BLOCK


@pytest.mark.parametrize(
    ("requirement", "told"),
    [
        ({}, ": 'sample_rate' is missing; give sample_rate and clock, or cycles_per_sample"),
        ({"sample_rate": "2 MHz"}, ": 'clock' is missing; give sample_rate and clock, or cyc"),
        (
            {"cycles_per_sample": "4", "clock": "2 MHz"},
            " cycles_per_sample: cycles_per_sample stands beside a sample rate or a clock",
        ),
        ({"cycles_per_sample": "0"}, " cycles_per_sample: the ratio '0' is not above zero"),
        ({"cycles_per_sample": "1/0"}, " cycles_per_sample: '1/0' divides by zero"),
        ({"cycles_per_sample": True}, " cycles_per_sample: 'True' is not a number"),
        ({"cycles_per_sample": []}, " cycles_per_sample: '[]' is not a number"),
        (REAL | {"clock": 50}, " clock: a number stands where text belongs; put it into quotes"),
        (REAL | {"clock": "50"}, " clock: '50' is not a frequency; write a number and a unit"),
        (REAL | {"clock": "50 ns"}, " clock: 'ns' is not a unit of frequency"),
        (REAL | {"sample_rate": "-2 MHz"}, " sample_rate: the frequency '-2 MHz' is not above"),
        (REAL | {"delivery": "burst"}, " delivery: 'burst' is no way to deliver a block; use on"),
    ],
)
def test_a_faulty_requirement_is_told(requirement: dict[str, Any], told: str) -> None:
    assert refused(lambda: built(requirement=requirement)).startswith(
        f"a.toml: [requirement]{told}"
    )


# The caps


@pytest.mark.parametrize(
    ("caps", "made"),
    [
        ({"adder": 0, "multiplier": 3}, Caps({"adder": 0, "multiplier": 3})),
        ({"area": 0.1}, Caps(area=Fraction(1, 10))),
        ({"area": "0.1"}, Caps(area=Fraction(1, 10))),
        ({"registers": "7"}, Caps(registers=7)),
        ({"latency": 0}, Caps(latency_cycles=0)),
        ({"latency": "60"}, Caps(latency_cycles=60)),
        ({"latency": "3 us"}, Caps(latency_time=Fraction(3, 10**6))),
        ({"parallelism": 64}, Caps(parallelism=64)),
    ],
)
def test_caps_are_taken_by_their_names(caps: dict[str, Any], made: Caps) -> None:
    assert built(requirement=REAL, caps=caps).caps == made


@pytest.mark.parametrize(
    ("caps", "told"),
    [
        (
            {"mutliplier": 1},
            (
                " mutliplier: there is nothing called 'mutliplier' to cap; what can be capped: "
                "adder, multiplier, area, registers, latency, parallelism"
            ),
        ),
        ({"adder": -1}, " adder: -1 is not a whole number of 0 or more"),
        ({"adder": 1.5}, " adder: 1.5 is not a whole number of 0 or more"),
        ({"adder": "many"}, " adder: 'many' is not a number"),
        ({"registers": False}, " registers: 'False' is not a number"),
        ({"area": -1}, " area: -1 is negative; write a number of 0 or more"),
        ({"area": float("inf")}, " area: 'inf' is not a number"),
        ({"parallelism": 0}, " parallelism: 0 is not a whole number from 1 to 64"),
        ({"parallelism": 65}, " parallelism: 65 is not a whole number from 1 to 64"),
        ({"latency": -1}, " latency: -1 is not a whole number of 0 or more"),
        ({"latency": ""}, " latency: '' is not a time"),
        ({"latency": "3 min"}, " latency: 'min' is not a unit of time"),
        (
            {"latency": "3 us"},
            (
                " latency: '3 us' is a time, and nothing says how long a cycle is; "
                "write the latency in cycles, or give sample_rate and clock"
            ),
        ),
    ],
)
def test_a_faulty_cap_is_told(caps: dict[str, Any], told: str) -> None:
    assert refused(lambda: built(caps=caps)).startswith(f"a.toml: [caps]{told}")


# The technology


def test_a_technology_may_stand_inside_the_design_or_beside_it(tmp_path: Path) -> None:
    path = tmp_path / "mine.toml"
    path.write_text('title = "Mine"\n[unit.all]\nperforms = ["add"]\n', encoding="utf-8")
    assert built(technology=UNIT_TIME) == built()
    assert refused(lambda: built(folder=tmp_path, technology={"use": "mine.toml"})) == (
        f"a.toml: [technology] use: {path}: [unit.all]: 'latency' is missing; add it"
    )


@pytest.mark.parametrize(
    ("technology", "told"),
    [
        ({}, "[technology]: 'use' is missing; add it"),
        ({"use": "tube"}, "[technology] use: there is no technology 'tube'; the shipped ones are"),
        ({"use": 3}, "[technology] use: a number stands where text belongs"),
        (
            {"use": "unit-time", "title": "a"},
            "[technology]: the key 'title' is unknown; known here: ",
        ),
        (UNIT_TIME | {"register": {}}, "[technology.register]: 'area' is missing; add it"),
        (
            UNIT_TIME | {"unit": {"adder": UNIT_TIME["unit"]["adder"] | {"busy": 0}}},
            "[technology.unit.adder] busy: 0 is not a whole number from 1 to 1000",
        ),
        (
            UNIT_TIME | {"unit": {"adder": UNIT_TIME["unit"]["adder"]}},
            (
                "[algorithm]: operation 'y.1': no unit of the technology 'Unit time, pipelined "
                "multiplier' performs 'multiply'"
            ),
        ),
    ],
)
def test_a_faulty_technology_is_told(technology: dict[str, Any], told: str) -> None:
    assert refused(lambda: built(technology=technology)).startswith(f"a.toml: {told}")


# Changes from the command line


def rates(changes: Changes, **requirement: str) -> Requirement:
    return built(changes, requirement=requirement).requirement


def test_a_new_clock_keeps_the_sample_rate_and_the_other_way_round() -> None:
    assert rates(Changes(clock="20 MHz"), **REAL) == rates(
        Changes(), sample_rate="2 MHz", clock="20 MHz"
    )
    assert rates(Changes(sample_rate="5 MHz"), **REAL) == rates(
        Changes(), sample_rate="5 MHz", clock="50 MHz"
    )


def test_cycles_per_sample_take_the_place_of_sample_rate_and_clock_and_the_other_way_round() -> (
    None
):
    abstract = Requirement(Fraction(5, 2))
    assert rates(Changes(cycles_per_sample="5/2"), **REAL) == abstract
    assert rates(Changes(**REAL), cycles_per_sample="5/2") == rates(Changes(), **REAL)


def test_changes_keep_the_delivery() -> None:
    changed = rates(Changes(cycles_per_sample="9"), cycles_per_sample="4", delivery="block")
    assert changed == Requirement(Fraction(9), delivery=Delivery.BLOCK)


def test_caps_from_the_command_line_go_before_those_of_the_file() -> None:
    changes = Changes(caps={"adder": "3", "latency": "7"})
    assert built(changes, caps={"adder": 2, "multiplier": 1}).caps == Caps(
        {"adder": 3, "multiplier": 1}, latency_cycles=7
    )


def test_a_technology_from_the_command_line_is_relative_to_where_the_program_runs(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    unpipelined = load_technology("unit-time-unpipelined", Path())
    assert built(Changes(technology="unit-time-unpipelined")).technology == unpipelined
    source = find_design("tachometer-smoothing").parents[1] / "technology" / "unit-time.toml"
    (tmp_path / "mine.toml").write_bytes(source.read_bytes())
    monkeypatch.chdir(tmp_path)
    changed = built(Changes(technology="mine.toml"), folder=tmp_path / "elsewhere", technology={})
    assert changed == built()


@pytest.mark.parametrize(
    ("changes", "told"),
    [
        (Changes(clock="50"), "--clock: '50' is not a frequency"),
        (Changes(sample_rate="0 Hz"), "--sample-rate: the frequency '0 Hz' is not above zero"),
        (Changes(cycles_per_sample="x"), "--cycles-per-sample: 'x' is not a number"),
        (
            Changes(cycles_per_sample="3", clock="2 MHz"),
            "--cycles-per-sample: cycles_per_sample stands beside a sample rate or a clock",
        ),
        (Changes(caps={"adder": "x"}), "--cap adder: 'x' is not a number"),
        (Changes(caps={"ader": "1"}), "--cap ader: there is nothing called 'ader' to cap; what c"),
        (Changes(technology="tube"), "--technology: there is no technology 'tube'"),
    ],
)
def test_a_fault_from_the_command_line_is_told_with_its_option(changes: Changes, told: str) -> None:
    assert refused(lambda: built(changes, requirement=REAL)).startswith(told)


def test_a_clock_alone_does_not_make_a_requirement_of_abstract_time() -> None:
    assert refused(lambda: built(Changes(clock="2 MHz"))) == (
        "a.toml: [requirement]: 'sample_rate' is missing; "
        "give sample_rate and clock, or cycles_per_sample"
    )


def test_a_latency_in_time_does_not_survive_a_change_to_abstract_time() -> None:
    changes = Changes(cycles_per_sample="4")
    assert refused(lambda: built(changes, requirement=REAL, caps={"latency": "3 us"})).startswith(
        "a.toml: [caps] latency: '3 us' is a time"
    )


# As plain data


frequencies = st.builds(
    "{}{}e{} {}".format,
    st.integers(1, 10**6),
    st.sampled_from(["", ".5", ".123456789012345678901"]),
    st.integers(-3, 3),
    st.sampled_from(["Hz", "mHz", "kHz", "GHz"]),
)
requirements = st.one_of(
    st.fixed_dictionaries(
        {"cycles_per_sample": st.fractions(min_value=Fraction(1, 9), max_value=99).map(str)},
        optional={"delivery": st.sampled_from(["serial", "block"])},
    ),
    st.fixed_dictionaries({"sample_rate": frequencies, "clock": frequencies}),
)
caps = st.fixed_dictionaries(
    {},
    optional={
        "adder": st.integers(0, 9),
        "area": st.decimals(0, 10**6, allow_nan=False, places=3).map(str),
        "registers": st.integers(0, 99),
        "latency": st.integers(0, 99),
        "parallelism": st.integers(1, 64),
    },
)
algorithms = st.sampled_from(
    [
        {"inputs": ["x"], "outputs": ["y"], "equations": SUM},
        {"inputs": ["a", "b"], "outputs": ["c"], "equations": "c[n] = -(a[n] - 0.1*b[n-3])*c[n-1]"},
        {"structure": "biquads-direct-2", "coefficients": [[1, "0.1", 1, 1, "-0.7", "0.3"]]},
        {"graph": node_link(graph_of(parse_equations(SUM, ["x"], ["y"]), ["x"], ["y"]))},
    ]
)


@given(algorithms, requirements, caps)
def test_a_design_comes_back_from_its_document(
    algorithm: dict[str, Any], requirement: dict[str, str], caps: dict[str, Any]
) -> None:
    design = built(algorithm=algorithm, requirement=requirement, caps=caps)
    assert there_and_back(design) == design


def test_a_latency_in_time_comes_back_from_its_document() -> None:
    design = built(requirement=REAL, caps={"latency": "2.5 us"})
    assert design.document()["caps"] == {"latency": "2.5 us", "parallelism": 4}
    assert there_and_back(design) == design


def test_a_document_says_quantities_as_people_do() -> None:
    assert built(requirement=REAL).document()["requirement"] == REAL | {"delivery": "serial"}


def test_a_document_can_be_changed_like_a_file() -> None:
    changes = Changes(cycles_per_sample="9", caps={"adder": "1"})
    document = built(requirement=REAL).document()
    assert design_from(document, "a plan", Path("nowhere"), changes) == built(
        requirement={"cycles_per_sample": "9"}, caps={"adder": 1}
    )


# From Python, and by name


def test_a_graph_at_hand_makes_a_design() -> None:
    graph = graph_of(parse_equations(SUM, ["x"], ["y"]), ["x"], ["y"])
    made = design_of(graph, title="a test", cycles_per_sample=Fraction(4), caps={"adder": 1})
    assert made == built(algorithm={"graph": node_link(graph)}, caps={"adder": 1})
    assert there_and_back(made) == made


def test_a_graph_at_hand_is_checked_like_a_file() -> None:
    graph = graph_of(parse_equations(SUM, ["x"], ["y"]), ["x"], ["y"])
    assert refused(lambda: design_of(graph, cycles_per_sample=0)).startswith(
        "A graph: [requirement] cycles_per_sample: the ratio '0' is not above zero"
    )


def test_a_design_is_found_by_its_path_before_its_shipped_name(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.chdir(tmp_path)
    assert find_design("tachometer-smoothing").name == "tachometer-smoothing.toml"
    Path("tachometer-smoothing").touch()
    assert find_design("tachometer-smoothing") == Path("tachometer-smoothing")


@pytest.mark.parametrize("name", ["tachometer", "no/such.toml", "a" * 5000, "a\0b"])
def test_an_unknown_design_is_answered_with_the_shipped_ones(name: str) -> None:
    assert "or a shipped one: bearing-emission-band, gearbox" in refused(lambda: find_design(name))
