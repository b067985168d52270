"""Technologies: what ships, what a file may say, and every fault told with its key."""

from dataclasses import replace
from fractions import Fraction
from pathlib import Path
from typing import Any

import pytest
from hypothesis import given
from hypothesis import strategies as st

import scheduler.technology
from scheduler.errors import InputError
from scheduler.graph import Kind
from scheduler.technology import (
    Technology,
    Unit,
    load_technology,
    models_folder,
    plain_number,
    shipped,
    technology_from,
)

ADDER = {"performs": ["add", "subtract"], "latency": 1, "busy": 1, "area": 1}
MULTIPLIER = {"performs": ["multiply"], "latency": 2, "busy": 1, "area": 8}
UNIT_TIME = """
title = "Of my own"
[unit.adder]
performs = ["add", "subtract"]
latency = 1
busy = 1
area = 0.1
[register]
area = 0.30000000000000000001
"""


def tables(**adder: Any) -> dict[str, Any]:
    return {"title": "a test", "unit": {"adder": ADDER | adder}, "register": {"area": 0.5}}


def without(document: dict[str, Any], *path: str) -> dict[str, Any]:
    *outer, last = path
    for key in outer:
        document = document[key]
    del document[last]
    return document


def refused(document: Any) -> str:
    with pytest.raises(InputError) as caught:
        technology_from(document, "a.toml")
    return str(caught.value)


def unreadable(path: Path) -> str:
    with pytest.raises(InputError) as caught:
        load_technology(str(path), Path())
    return str(caught.value)


# What ships


def test_unit_time_is_as_promised() -> None:
    adder = Unit("adder", frozenset({Kind.ADD, Kind.SUBTRACT}), 1, 1, Fraction(1))
    multiplier = Unit("multiplier", frozenset({Kind.MULTIPLY}), 2, 1, Fraction(8))
    built = load_technology("unit-time", Path())
    assert built.units == (adder, multiplier)
    assert built.register_area == Fraction(1, 2)


def test_unpipelined_is_unit_time_with_the_multiplier_busy_for_two_cycles() -> None:
    pipelined, plain = (
        load_technology(name, Path()) for name in ("unit-time", "unit-time-unpipelined")
    )
    adder, multiplier = pipelined.units
    assert plain.units == (adder, replace(multiplier, busy=2))
    assert plain.register_area == pipelined.register_area


@pytest.mark.parametrize("installed", [False, True])
def test_models_are_found_in_a_checkout_and_in_an_installed_package(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch, installed: bool
) -> None:
    package = tmp_path / "scheduler"
    models = (package if installed else tmp_path) / "models"
    package.mkdir()
    models.mkdir()
    monkeypatch.setattr(scheduler.technology, "__file__", str(package / "technology.py"))
    assert models_folder() == models


def test_missing_models_are_told(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(scheduler.technology, "__file__", str(tmp_path / "a" / "technology.py"))
    with pytest.raises(InputError, match="install the package again"):
        models_folder()


def test_every_shipped_technology_can_be_used() -> None:
    assert {"unit-time", "unit-time-unpipelined"} <= shipped("technology").keys()
    for name in shipped("technology"):
        assert load_technology(name, Path()).units


# Files


def test_a_file_is_found_relative_to_the_folder_and_read_exactly(tmp_path: Path) -> None:
    (tmp_path / "mine.toml").write_text(UNIT_TIME, encoding="utf-8")
    built = load_technology("mine.toml", tmp_path)
    assert built.title == "Of my own"
    assert built.unit("adder").area == Fraction(1, 10)
    assert built.register_area == Fraction(30000000000000000001, 10**20)


def test_a_file_may_have_any_ending(tmp_path: Path) -> None:
    (tmp_path / "mine.units").write_text(UNIT_TIME, encoding="utf-8")
    assert load_technology("mine.units", tmp_path).title == "Of my own"


@pytest.mark.parametrize("name", ["unit-tim", "../unit-time", "unit_time", "a" * 5000, "a\0b"])
def test_an_unknown_name_is_answered_with_the_shipped_ones(name: str) -> None:
    with pytest.raises(InputError, match=r"there is no technology .*unit-time, unit-time-unpip"):
        load_technology(name, Path())


def test_files_that_cannot_be_read_are_told_with_their_name(tmp_path: Path) -> None:
    broken, latin = tmp_path / "broken.toml", tmp_path / "latin.toml"
    broken.write_text("title = \n", encoding="utf-8")
    latin.write_bytes(b'title = "\xe9"')
    assert f"{tmp_path / 'no.toml'}: there is no such file" in unreadable(tmp_path / "no.toml")
    assert f"{tmp_path}: this is a folder" in unreadable(tmp_path)
    assert f"{broken}: this is not TOML: " in unreadable(broken)
    assert f"{latin}: the file is not in UTF-8" in unreadable(latin)


@pytest.mark.parametrize(
    "text",
    ["a = " + "9" * 5000, "a = " + "[" * 5000, "a = 1e999999999999999999999", "a = 1\na = 2"],
)
def test_monstrous_toml_is_refused_in_a_sentence(tmp_path: Path, text: str) -> None:
    path = tmp_path / "a.toml"
    path.write_text(text, encoding="utf-8")
    assert str(path) in unreadable(path)


# Looking things up


def test_a_unit_is_found_by_what_it_performs_and_by_its_name() -> None:
    built = load_technology("unit-time", Path())
    assert built.unit_for(Kind.SUBTRACT).name == "adder"
    assert built.unit_for(Kind.MULTIPLY) is built.unit("multiplier")


def test_what_nobody_performs_is_told() -> None:
    built = technology_from(tables(), "a.toml")
    with pytest.raises(InputError, match="no unit of the technology 'a test' performs 'multiply'"):
        built.unit_for(Kind.MULTIPLY)
    with pytest.raises(InputError, match=r"has no unit 'addr'; did you mean 'adder'\?"):
        built.unit("addr")


def test_a_unit_may_recover_for_longer_than_it_takes() -> None:
    unit = technology_from(tables(latency=1, busy=3), "a.toml").unit("adder")
    assert (unit.latency, unit.busy) == (1, 3)


# Faults


def test_sharing_costs_are_refused_until_a_plan_could_be_true_to_them() -> None:
    assert refused(tables() | {"multiplexer": {"input_area": 0.5}}) == (
        "a.toml: [multiplexer] input_area: what sharing costs is not yet part of the objective, "
        "so a plan would not be true; set it to 0"
    )
    free = technology_from(tables() | {"multiplexer": {"input_area": 0}}, "a.toml")
    assert free == technology_from(tables(), "a.toml")


@pytest.mark.parametrize(
    ("changed", "told"),
    [
        ({"latency": 0}, "latency: 0 is not a whole number from 1 to 1000"),
        ({"latency": -1}, "latency: -1 is not a whole number from 1 to 1000"),
        ({"latency": 1.5}, "latency: 1.5 is not a whole number from 1 to 1000"),
        ({"latency": 10**9}, "latency: 1000000000 is not a whole number from 1 to 1000"),
        ({"latency": True}, "latency: 'True' is not a number"),
        ({"latency": [1]}, "latency: '[1]' is not a number"),
        ({"busy": 0}, "busy: 0 is not a whole number from 1 to 1000"),
        ({"busy": "0.5"}, "busy: 0.5 is not a whole number from 1 to 1000"),
        ({"area": -0.5}, "area: -0.5 is negative"),
        ({"area": float("nan")}, "area: 'nan' is not a number"),
        ({"area": float("inf")}, "area: 'inf' is not a number"),
        ({"area": {}}, "area: '{}' is not a number"),
        ({"performs": []}, "performs: the unit performs nothing; name some of add, subtract"),
        ({"performs": "add"}, "performs: this is not a list of texts"),
        ({"performs": ["add", 1]}, "performs: this is not a list of texts"),
        ({"performs": ["ad"]}, "performs: 'ad' is not a kind of operation; did you mean 'add'?"),
        ({"performs": ["divide"]}, "performs: 'divide' is not a kind of operation; known here: a"),
        ({"performs": ["input"]}, "performs: 'input' is a port, which needs no unit"),
    ],
)
def test_a_faulty_unit_is_told_with_its_key(changed: dict[str, Any], told: str) -> None:
    assert refused(tables(**changed)).startswith(f"a.toml: [unit.adder] {told}")


@pytest.mark.parametrize("key", ["performs", "latency", "busy", "area"])
def test_a_missing_key_of_a_unit_is_told(key: str) -> None:
    document = tables()
    without(document, "unit", "adder", key)
    assert refused(document) == f"a.toml: [unit.adder]: '{key}' is missing; add it"


@pytest.mark.parametrize(
    ("path", "told"),
    [
        (("title",), "a.toml: 'title' is missing"),
        (("register",), "a.toml: [register]: 'area' is missing"),
        (("register", "area"), "a.toml: [register]: 'area' is missing"),
        (("unit",), "a.toml: unit: there is no unit; add one, as in [unit.adder]"),
        (("unit", "adder"), "a.toml: unit: there is no unit; add one, as in [unit.adder]"),
    ],
)
def test_a_missing_table_is_told(path: tuple[str, ...], told: str) -> None:
    document = tables()
    without(document, *path)
    assert refused(document).startswith(told)


def test_unknown_keys_are_told_with_the_nearest_known_one() -> None:
    assert refused(tables() | {"units": {}}) == (
        "a.toml: the key 'units' is unknown; did you mean 'unit'?"
    )
    assert refused(tables(stages=2)) == (
        "a.toml: [unit.adder]: the key 'stages' is unknown; "
        "known here: performs, latency, busy, area"
    )


def test_what_is_no_table_is_told() -> None:
    assert refused([]) == "a.toml: a list stands where a table belongs"
    assert (
        refused(tables() | {"unit": 3}) == "a.toml: [unit]: a number stands where a table belongs"
    )
    assert refused(tables() | {"register": "0.5"}).startswith("a.toml: [register]: a text stands")


@pytest.mark.parametrize("title", ["", "two\nlines", "\x1b[31mred"])
def test_a_title_is_one_line_that_can_be_shown(title: str) -> None:
    assert refused(tables() | {"title": title}).startswith("a.toml: title: this ")


def test_a_title_is_text() -> None:
    assert refused(tables() | {"title": 7}) == (
        "a.toml: title: a number stands where text belongs; put it into quotes"
    )


@pytest.mark.parametrize(
    "name", ["latency", "parallelism", "two words", "a=b", "", "1st", "a" * 41]
)
def test_a_unit_needs_a_name_that_a_cap_can_use(name: str) -> None:
    assert "a unit cannot be named" in refused(tables() | {"unit": {name: ADDER}})


def test_two_units_that_perform_the_same_are_refused_for_now() -> None:
    slow = MULTIPLIER | {"performs": ["multiply", "add"]}
    assert refused(tables() | {"unit": {"adder": ADDER, "slow": slow}}) == (
        "a.toml: [unit.slow] performs: 'add' is performed by unit 'adder' too, and a choice "
        "between units is not yet made; leave it to one of them"
    )


# As plain data


exact_areas = st.integers(0, 10**9).flatmap(
    lambda whole: st.integers(0, 25).map(lambda places: Fraction(whole, 10**places))
)


@given(exact_areas)
def test_a_number_stays_exact_as_plain_data(value: Fraction) -> None:
    plain = plain_number(value)
    assert Fraction(str(plain)) == value


def test_a_number_is_text_only_where_no_float_shows_its_digits() -> None:
    assert plain_number(Fraction(1, 2)) == 0.5
    assert plain_number(Fraction(1, 10)) == 0.1
    assert plain_number(Fraction(10**20 + 1, 10**20)) == "1.00000000000000000001"
    assert isinstance(plain_number(Fraction(2 * 10**320 + 1, 2)), str)


def units(name: str, *kinds: Kind) -> st.SearchStrategy[Unit]:
    times = st.integers(1, 9)
    return st.builds(Unit, st.just(name), st.just(frozenset(kinds)), times, times, exact_areas)


technologies = st.builds(
    Technology,
    st.just("a test"),
    st.tuples(units("adder", Kind.ADD, Kind.SUBTRACT), units("multiplier", Kind.MULTIPLY)),
    exact_areas,
)


@given(technologies)
def test_a_technology_comes_back_from_its_plain_data(technology: Technology) -> None:
    assert technology_from(technology.document(), "a test") == technology
