"""A plan file holds all of its plan, is written whole or not at all, and is read with suspicion."""

from __future__ import annotations

import errno
import json
import math
import os
from collections.abc import Callable, Iterator, Mapping
from functools import reduce
from operator import getitem
from pathlib import Path
from typing import Any

import pytest

from scheduler.audit import audit
from scheduler.design import Design, design_from, find_design, load_design
from scheduler.errors import InputError
from scheduler.plan import Plan, Proof, SolverVerdict, Status
from scheduler.planfile import load_plan, plan_document, plan_from, save_plan
from scheduler.planning import plan

SHIPPED = ["gearbox-vibration-band", "bearing-emission-band", "oil-pressure-notch"]
FIVE_TAPS = "y[n] = 0.125*x[n] + 0.25*x[n-1] + 0.5*x[n-2] + 0.25*x[n-3] + 0.125*x[n-4]"
WRITTEN: Mapping[str, tuple[str, list[str], str, str]] = {
    "average": (FIVE_TAPS, ["x"], "5/2", "unit-time"),
    "pair": ("y[n] = 0.25*x[n] + 0.5*x[n-1]", ["x"], "2", "unit-time"),
    "resonator": ("y[n] = x[n] + 1.25*y[n-1]", ["x"], "5", "unit-time-unpipelined"),
    "adaptive": ("w[n] = w[n-1] + d[n]*x[n]\ny[n] = w[n]*x[n]", ["x", "d"], "8", "unit-time"),
    "oscillator": ("y[n] = 1.5*y[n-1] - y[n-2]", [], "5", "unit-time"),
}


def design_called(name: str) -> Design:
    if name in SHIPPED:
        return load_design(find_design(name))
    equations, inputs, cycles, technology = WRITTEN[name]
    tables = {
        "title": name,
        "algorithm": {"inputs": inputs, "outputs": ["y"], "equations": equations},
        "requirement": {"cycles_per_sample": cycles},
        "caps": {"parallelism": 2},
        "technology": {"use": technology},
    }
    return design_from(tables, name, Path())


@pytest.fixture(scope="module", params=[*SHIPPED, *WRITTEN])
def planned(request: pytest.FixtureRequest) -> Plan:
    """A plan of every kind, an impossible one among them."""
    return plan(design_called(request.param))


@pytest.fixture(scope="module")
def small() -> Plan:
    """A plan whose proof has a solver's verdicts too, one of them without a bound."""
    found = plan(design_called("pair"))
    verdicts = (SolverVerdict(1, 2, found.value, 2), SolverVerdict(2, 5, None, 2))
    binding = ("3 of 5 cycles", "two words with an umlaut: für")
    return Plan(**{**vars(found), "proof": Proof(4, 2, verdicts, True, binding)})


@pytest.fixture(scope="module")
def impossible() -> Plan:
    return plan(design_called("oil-pressure-notch"))


def complaint(path: Path) -> str:
    """What is said of a file that is no plan: one line, its path in front."""
    with pytest.raises(InputError) as caught:
        load_plan(path)
    message = str(caught.value)
    assert message.startswith(str(path))
    assert len(message.splitlines()) == 1
    return message


# ---- saving and loading ------------------------------------------------------------------------


class TestRoundTrip:
    def test_a_plan_is_the_same_after_it_went_through_json(self, planned: Plan) -> None:
        text = json.dumps(plan_document(planned), allow_nan=False)
        assert plan_from(json.loads(text), "text") == planned

    def test_a_plan_is_the_same_after_it_went_through_a_file(
        self, planned: Plan, tmp_path: Path
    ) -> None:
        path = tmp_path / "plan.json"
        save_plan(planned, path)
        assert load_plan(path) == planned
        assert audit(load_plan(path)) == audit(planned)

    def test_the_proof_is_the_same_too(self, small: Plan, tmp_path: Path) -> None:
        path = tmp_path / "plan.json"
        save_plan(small, path)
        assert load_plan(path).proof == small.proof

    def test_saving_again_gives_the_same_bytes(self, planned: Plan, tmp_path: Path) -> None:
        first, second = tmp_path / "first.json", tmp_path / "second.json"
        save_plan(planned, first)
        save_plan(load_plan(first), second)
        assert first.read_bytes() == second.read_bytes()

    @pytest.mark.parametrize("status", [Status.OPEN, Status.NONE])
    def test_any_status_can_be_saved(self, small: Plan, status: Status, tmp_path: Path) -> None:
        changed = Plan(**{**vars(small), "status": status, "bound": 0.1, "reason": "time's up"})
        save_plan(changed, tmp_path / "plan.json")
        assert load_plan(tmp_path / "plan.json") == changed

    def test_the_design_inside_stands_alone(self, planned: Plan) -> None:
        text = json.dumps(plan_document(planned)["design"])
        design = design_from(json.loads(text), "text", Path("/no/such/folder"))
        assert design.document() == planned.design

    def test_names_from_all_over_the_world_are_kept(self, small: Plan, tmp_path: Path) -> None:
        changed = Plan(**{**vars(small), "title": 'Schwingung "größer" \\ 振動\n\u2028'})
        save_plan(changed, tmp_path / "plan.json")
        assert load_plan(tmp_path / "plan.json") == changed


# ---- the contract ------------------------------------------------------------------------------

NUMBER = (float, int)
NONE = type(None)
TOP: Mapping[str, tuple[type, ...]] = {
    "format": (str,), "version": (int,), "title": (str,), "status": (str,), "reason": (str,),
    "objective": (dict,), "parallelism": (int,), "cycles": (int,),
    "clock_period_ns": (float, NONE), "sample_period_ns": (float, NONE),
    "units": (dict,), "registers": (int,), "latency": (int, NONE), "operations": (list,),
    "edges": (list,), "lifetimes": (list,), "proof": (dict,), "design": (dict,),
}  # fmt: skip
OPERATION: Mapping[str, tuple[type, ...]] = {
    "name": (str,), "copy": (int,), "unit": (str, NONE), "instance": (int, NONE), "start": (int,),
    "slot": (int,), "stage": (int,), "latency": (int,), "busy": (int,),
}  # fmt: skip
WITHOUT_SCHEDULE = ("parallelism", "cycles", "registers", "latency", "clock_period_ns")


def as_read(of: Plan) -> dict[str, Any]:
    """The document as a reader of the file gets it."""
    return json.loads(json.dumps(plan_document(of)))  # type: ignore[no-any-return]


class TestContract:
    def test_every_key_is_there_with_its_type(self, planned: Plan) -> None:
        document = as_read(planned)
        assert document.keys() == TOP.keys()
        wrong = [key for key, value in document.items() if type(value) not in TOP[key]]
        assert wrong == ([] if planned.has_schedule else wrong_without_schedule(document))

    def test_the_file_says_what_it_is(self, planned: Plan) -> None:
        document = as_read(planned)
        assert (document["format"], document["version"]) == ("foldwright-plan", 1)
        assert document["status"] in ("proven", "open", "impossible", "none")
        assert document["objective"].keys() == {"value", "bound"}

    def test_a_plan_with_a_schedule_has_numbers_for_its_area(self, small: Plan) -> None:
        objective = as_read(small)["objective"]
        assert {type(number) for number in objective.values()} == {float}
        assert objective["value"] == objective["bound"]

    def test_an_impossible_one_gives_its_reason_and_nothing_else(self, impossible: Plan) -> None:
        document = as_read(impossible)
        assert document["status"] == "impossible"
        assert document["reason"].startswith("the loop state")
        assert document["objective"] == {"value": None, "bound": None}
        assert [document[key] for key in WITHOUT_SCHEDULE] == [None] * len(WITHOUT_SCHEDULE)
        assert document["operations"] == document["edges"] == document["lifetimes"] == []

    def test_every_operation_has_its_keys(self, planned: Plan) -> None:
        for row in as_read(planned)["operations"]:
            assert row.keys() == OPERATION.keys()
            assert [key for key, value in row.items() if type(value) not in OPERATION[key]] == []

    def test_a_port_is_an_operation_without_a_unit(self, small: Plan) -> None:
        port = next(row for row in as_read(small)["operations"] if row["name"] == "x")
        ways = {key: port[key] for key in ("unit", "instance", "latency", "busy")}
        assert ways == {"unit": None, "instance": None, "latency": 0, "busy": 0}

    def test_every_edge_joins_two_operations_of_the_plan(self, planned: Plan) -> None:
        document = as_read(planned)
        there = [[row["name"], row["copy"]] for row in document["operations"]]
        for edge in document["edges"]:
            assert edge.keys() == {"from", "to", "delays"}
            assert edge["from"] in there
            assert edge["to"] in there
            assert type(edge["delays"]) is int

    def test_units_are_counted_by_their_names(self, small: Plan) -> None:
        assert as_read(small)["units"] == dict(small.units)
        assert small.units

    def test_clock_and_sample_periods_are_told_in_nanoseconds(self) -> None:
        document = as_read(plan(design_called("bearing-emission-band")))
        assert document["sample_period_ns"] == pytest.approx(1e9 / 1.536e6)
        assert document["clock_period_ns"] == pytest.approx(1e9 / 1.024e6)


def wrong_without_schedule(document: Mapping[str, Any]) -> list[str]:
    """What is null where there is no schedule, and was to be a number."""
    return [key for key in document if key in ("parallelism", "cycles", "registers")]


# ---- writing -----------------------------------------------------------------------------------


def full_disk(monkeypatch: pytest.MonkeyPatch) -> None:
    """From now on every text is written half, and then there is no room."""
    write = Path.write_text

    def write_half(self: Path, data: str, *args: Any, **options: Any) -> int:
        write(self, data[: len(data) // 2], *args, **options)
        raise OSError(errno.ENOSPC, os.strerror(errno.ENOSPC))

    monkeypatch.setattr(Path, "write_text", write_half)


def refusal(of: Plan, path: Path) -> str:
    with pytest.raises(InputError) as caught:
        save_plan(of, path)
    message = str(caught.value)
    assert message.startswith(f"{path}: the plan cannot be saved")
    assert len(message.splitlines()) == 1
    return message


class TestSaving:
    def test_a_disk_that_fills_up_leaves_the_old_file_whole(
        self, small: Plan, impossible: Plan, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
    ) -> None:
        path = tmp_path / "plan.json"
        save_plan(impossible, path)
        before = path.read_bytes()
        with monkeypatch.context() as patch:
            full_disk(patch)
            assert "No space left on device" in refusal(small, path)
        assert path.read_bytes() == before
        assert load_plan(path) == impossible
        assert list(tmp_path.iterdir()) == [path]

    def test_a_disk_that_fills_up_leaves_no_new_file(
        self, small: Plan, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
    ) -> None:
        full_disk(monkeypatch)
        refusal(small, tmp_path / "plan.json")
        assert list(tmp_path.iterdir()) == []

    def test_a_replacement_that_fails_leaves_the_old_file_whole(
        self, small: Plan, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
    ) -> None:
        path = tmp_path / "plan.json"
        path.write_text("old", encoding="utf-8")

        def refuse(self: Path, target: Path) -> Path:
            raise PermissionError(errno.EACCES, os.strerror(errno.EACCES))

        monkeypatch.setattr(Path, "replace", refuse)
        assert "Permission denied" in refusal(small, path)
        assert path.read_text(encoding="utf-8") == "old"
        assert list(tmp_path.iterdir()) == [path]

    def test_a_folder_that_is_missing_is_named(self, small: Plan, tmp_path: Path) -> None:
        message = refusal(small, tmp_path / "missing" / "plan.json")
        assert "No such file or directory; choose a folder that exists" in message
        assert list(tmp_path.iterdir()) == []

    def test_a_folder_in_the_place_of_the_file_is_left_alone(
        self, small: Plan, tmp_path: Path
    ) -> None:
        path = tmp_path / "plan.json"
        path.mkdir()
        refusal(small, path)
        assert list(tmp_path.iterdir()) == [path]
        assert path.is_dir()

    def test_a_file_in_the_place_of_the_folder_is_left_alone(
        self, small: Plan, tmp_path: Path
    ) -> None:
        (tmp_path / "file").write_text("old", encoding="utf-8")
        refusal(small, tmp_path / "file" / "plan.json")
        assert (tmp_path / "file").read_text(encoding="utf-8") == "old"

    @pytest.mark.parametrize("place", [".", "/"])
    def test_a_folder_without_a_name_is_no_place(self, small: Plan, place: str) -> None:
        refusal(small, Path(place))

    def test_a_larger_old_file_is_replaced_altogether(self, small: Plan, tmp_path: Path) -> None:
        path = tmp_path / "plan.json"
        path.write_text("x" * 10**6, encoding="utf-8")
        save_plan(small, path)
        assert load_plan(path) == small
        assert list(tmp_path.iterdir()) == [path]


# ---- files that are no plans -------------------------------------------------------------------


@pytest.fixture
def saved(small: Plan, tmp_path: Path) -> Path:
    path = tmp_path / "plan.json"
    save_plan(small, path)
    return path


class TestFilesThatAreNoPlans:
    def test_a_missing_file(self, tmp_path: Path) -> None:
        assert "No such file or directory" in complaint(tmp_path / "missing.json")

    def test_a_folder(self, tmp_path: Path) -> None:
        assert "Is a directory" in complaint(tmp_path)

    @pytest.mark.parametrize("text", ["", "\n", " " * 1000])
    def test_an_empty_file(self, tmp_path: Path, text: str) -> None:
        path = tmp_path / "empty.json"
        path.write_text(text, encoding="utf-8")
        assert "is no JSON or is cut off" in complaint(path)

    def test_a_file_that_was_cut_off_anywhere(self, saved: Path) -> None:
        whole = saved.read_bytes()
        end = len(whole.rstrip())
        for length in [*range(0, end, 1 + end // 150), *range(end - 40, end)]:
            saved.write_bytes(whole[:length])
            assert "is no JSON or is cut off" in complaint(saved)

    def test_a_file_with_something_behind_the_plan(self, saved: Path) -> None:
        saved.write_bytes(saved.read_bytes() * 2)
        assert "is no JSON or is cut off" in complaint(saved)

    @pytest.mark.parametrize("data", [b"\xff\xfe{\x00}\x00", b'{"title": "gr\xf6\xdfer"}', b"\x80"])
    def test_a_file_that_is_not_utf_8(self, tmp_path: Path, data: bytes) -> None:
        path = tmp_path / "plan.json"
        path.write_bytes(data)
        assert "is not UTF-8 text" in complaint(path)

    @pytest.mark.parametrize(
        "text",
        [
            "null", "true", "7", "1e999", "NaN", '"foldwright-plan"', "[]", "{}", "[[1, 2], {}]",
            '{"format": "another", "version": 1}', '{"format": null}', '{"version": 1}',
            '{"format": ["foldwright-plan"], "version": 1}',
        ],
    )  # fmt: skip
    def test_json_of_another_kind(self, tmp_path: Path, text: str) -> None:
        path = tmp_path / "plan.json"
        path.write_text(text, encoding="utf-8")
        assert "this is no plan; 'format' is to be 'foldwright-plan'" in complaint(path)

    @pytest.mark.parametrize("version", [0, 2, -1, 1.5, "1", None, [1], {}, 10**30])
    def test_a_plan_of_another_version(self, saved: Path, version: object) -> None:
        change(saved, lambda document: document.update(version=version))
        assert "this is a plan of version" in complaint(saved)

    def test_a_plan_that_names_no_version(self, saved: Path) -> None:
        change(saved, lambda document: document.pop("version"))
        assert "this is a plan of version None, not 1" in complaint(saved)

    @pytest.mark.parametrize("opening", ["[", '{"a":', '{"format": "foldwright-plan", "design": ['])
    def test_nesting_without_end(self, tmp_path: Path, opening: str) -> None:
        path = tmp_path / "plan.json"
        path.write_text(opening * 100_000, encoding="utf-8")
        assert "is no JSON or is cut off" in complaint(path)

    def test_a_number_with_ten_thousand_digits(self, saved: Path) -> None:
        text = saved.read_text(encoding="utf-8").replace(
            '"version": 1', f'"version": {"1" * 10**4}'
        )
        saved.write_text(text, encoding="utf-8")
        complaint(saved)


def change(path: Path, edit: Callable[[dict[str, Any]], object]) -> None:
    """Edits the document in a file."""
    document = json.loads(path.read_text(encoding="utf-8"))
    edit(document)
    path.write_text(json.dumps(document), encoding="utf-8")


# ---- plans with something wrong in them --------------------------------------------------------

Spot = tuple[str | int, ...]
"""The way to a value in a document."""

READ_AS_THEY_ARE = ("format", "version", "design")


def spots(document: object, here: Spot = ()) -> Iterator[tuple[Spot, object]]:
    """Every value in a document outside its design, lists and tables included."""
    if here:
        yield here, document
    if isinstance(document, dict):
        for key, value in document.items():
            if here or key not in READ_AS_THEY_ARE:
                yield from spots(value, (*here, key))
    elif isinstance(document, list):
        for index, value in enumerate(document):
            yield from spots(value, (*here, index))


def complaint_if_any(path: Path) -> str | None:
    try:
        load_plan(path)
    except InputError as error:
        return str(error)
    return None


def read_although_wrong(
    of: Plan, path: Path, wrong: object, fits: Callable[[object], bool]
) -> list[Spot]:
    """Where a wrong value is read as if it were right, of all the places that it does not fit."""
    document = as_read(of)
    places = [spot for spot, value in [*spots(document)] if not fits(value)]
    assert places
    through = []
    for spot in places:
        *way, last = spot
        holder: Any = reduce(getitem, way, document)
        right, holder[last] = holder[last], wrong
        path.write_text(json.dumps(document), encoding="utf-8")
        holder[last] = right
        message = complaint_if_any(path)
        if message is None:
            through.append(spot)
        else:
            assert message.startswith(f"{path}: ")
            assert len(message.splitlines()) == 1
    return through


def is_number(value: object) -> bool:
    return isinstance(value, int | float) and not isinstance(value, bool)


class TestPlansWithSomethingWrong:
    @pytest.mark.parametrize("key", [key for key in TOP if key not in ("format", "version")])
    def test_a_missing_key_is_named(self, saved: Path, key: str) -> None:
        change(saved, lambda document: document.pop(key))
        assert f"the plan has no '{key}'" in complaint(saved)

    @pytest.mark.parametrize("key", ["value", "bound"])
    def test_a_missing_part_of_the_objective_is_named(self, saved: Path, key: str) -> None:
        change(saved, lambda document: document["objective"].pop(key))
        assert f"the plan has no '{key}'" in complaint(saved)

    @pytest.mark.parametrize("table", ["operations", "edges", "lifetimes"])
    def test_a_missing_key_of_a_row_is_named(self, saved: Path, small: Plan, table: str) -> None:
        whole = saved.read_bytes()
        for key in as_read(small)[table][-1]:
            saved.write_bytes(whole)
            change(saved, lambda document: document[table][-1].pop(key))  # noqa: B023
            assert f"the plan has no '{key}'" in complaint(saved)

    def test_a_missing_key_of_the_proof_is_named(self, saved: Path, small: Plan) -> None:
        whole = saved.read_bytes()
        for key in as_read(small)["proof"]:
            saved.write_bytes(whole)
            change(saved, lambda document: document["proof"].pop(key))  # noqa: B023
            assert f"the plan has no '{key}'" in complaint(saved)

    @pytest.mark.parametrize("text", ["7", "word", "two\nlines", "x" * 5000])
    def test_text_where_there_was_none(self, small: Plan, tmp_path: Path, text: str) -> None:
        def fits(value: object) -> bool:
            return value is None or isinstance(value, str | list)

        assert read_although_wrong(small, tmp_path / "plan.json", text, fits) == []

    @pytest.mark.parametrize("text", ["", "word"])
    def test_text_where_there_was_a_list(self, small: Plan, tmp_path: Path, text: str) -> None:
        def fits(value: object) -> bool:
            return not isinstance(value, list)

        assert read_although_wrong(small, tmp_path / "plan.json", text, fits) == []

    def test_a_table_where_there_was_a_list(self, small: Plan, tmp_path: Path) -> None:
        def fits(value: object) -> bool:
            return not isinstance(value, list)

        assert read_although_wrong(small, tmp_path / "plan.json", {}, fits) == []

    def test_a_number_where_there_was_none(self, small: Plan, tmp_path: Path) -> None:
        def fits(value: object) -> bool:
            return value is None or is_number(value)

        assert read_although_wrong(small, tmp_path / "plan.json", 1, fits) == []

    def test_a_truth_value_where_there_was_none(self, small: Plan, tmp_path: Path) -> None:
        def fits(value: object) -> bool:
            return isinstance(value, bool)

        for truth in (True, False):
            assert read_although_wrong(small, tmp_path / "plan.json", truth, fits) == []

    def test_a_fraction_where_there_was_a_whole_number(self, small: Plan, tmp_path: Path) -> None:
        def fits(value: object) -> bool:
            return value is None or isinstance(value, float)

        assert read_although_wrong(small, tmp_path / "plan.json", 1.0, fits) == []

    @pytest.mark.parametrize("number", [math.nan, math.inf, -math.inf])
    def test_numbers_that_are_none(self, small: Plan, tmp_path: Path, number: float) -> None:
        assert read_although_wrong(small, tmp_path / "plan.json", number, lambda value: False) == []

    def test_nothing_where_there_was_something(self, small: Plan, tmp_path: Path) -> None:
        """Some numbers may be null; nothing else may."""
        through = read_although_wrong(
            small, tmp_path / "plan.json", None, lambda value: is_number(value) or value is None
        )
        assert {spot[-1] for spot in through} == {"unit"}

    def test_a_status_that_nobody_knows(self, saved: Path) -> None:
        change(saved, lambda document: document.update(status="splendid"))
        assert "'splendid' is not a valid Status" in complaint(saved)

    @pytest.mark.parametrize("pair", [[], ["x"], ["x", 0, 0], [0, "x"], {"x": 0, "y": 1}, "xy"])
    @pytest.mark.parametrize("end", ["from", "to"])
    def test_an_end_of_an_edge_that_is_no_copy(self, saved: Path, end: str, pair: object) -> None:
        change(saved, lambda document: document["edges"][0].update({end: pair}))
        assert "the plan is damaged" in complaint(saved)

    def test_a_number_larger_than_any_float(self, saved: Path) -> None:
        change(saved, lambda document: document["objective"].update(value=10**400))
        assert "the plan is damaged" in complaint(saved)

    def test_a_version_in_two_lines(self, saved: Path) -> None:
        change(saved, lambda document: document.update(version="one\ntwo"))
        assert "this is a plan of version" in complaint(saved)

    @pytest.mark.parametrize("version", [True, 1.0])
    def test_a_version_that_only_equals_one(self, saved: Path, version: object) -> None:
        change(saved, lambda document: document.update(version=version))
        assert "this is a plan of version" in complaint(saved)

    def test_a_key_that_nobody_knows_is_left_alone(self, saved: Path, small: Plan) -> None:
        """The contract says "at least": later versions of 1 may say more."""
        change(saved, lambda document: document.update(colour="green"))
        assert load_plan(saved) == small
