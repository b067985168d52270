"""A plan knows what it is about; whether it is right is for others to say."""

from __future__ import annotations

import pytest

from scheduler.plan import Copy, Plan, PlannedOperation, Status


def test_a_copy_is_named_by_its_operation_and_its_number() -> None:
    assert str(Copy("w.1", 3)) == "w.1(3)"


def test_copies_are_ordered_by_name_and_then_by_number() -> None:
    copies = [Copy("b", 0), Copy("a", 10), Copy("a", 2)]
    assert sorted(copies) == [Copy("a", 2), Copy("a", 10), Copy("b", 0)]


def test_an_operation_is_found_by_its_copy() -> None:
    placed = PlannedOperation("w", 2, "adder", 0, 7, 2, 1, 1, 1)
    assert placed.key == Copy("w", 2)


@pytest.mark.parametrize("status", Status)
def test_there_is_hardware_to_build_where_a_plan_was_found_proven_or_not(status: Status) -> None:
    found = Plan(title="A plan", status=status, value=None, bound=None, design={})
    assert found.has_schedule == (status in ("proven", "open"))


def test_the_statuses_are_the_words_of_the_plan_file() -> None:
    assert [str(status) for status in Status] == ["proven", "open", "impossible", "none"]
