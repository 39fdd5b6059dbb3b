"""Checked records: frozen, strict, and every complaint in one line with its path."""

from __future__ import annotations

import dataclasses
from typing import Annotated, Literal

import numpy as np
import pytest
from pydantic import Field

from levelnet.errors import InputError, LevelnetError
from levelnet.records import TUPLES, build, checked_record, from_mapping


@checked_record
class Inner:
    """A part."""

    count: Annotated[int, Field(ge=2, le=10)]
    kind: Literal["red", "blue"] = "red"


@checked_record
class Outer:
    """A whole."""

    inner: Annotated[Inner, from_mapping(Inner)]
    width_cm: Annotated[float, Field(gt=0.0)] = 1.5
    on: bool = False

    def __post_init__(self) -> None:
        """Check the rule about two fields."""
        if self.inner.kind == "blue" and self.on:
            raise ValueError("inner.kind = blue: cannot be on")


def complaint(**values: object) -> str:
    with pytest.raises(InputError) as caught:
        Outer(**values)  # type: ignore[arg-type]
    return str(caught.value)


def test_a_record_is_a_frozen_dataclass() -> None:
    one = Outer(Inner(3))
    assert dataclasses.asdict(one) == {
        "inner": {"count": 3, "kind": "red"},
        "width_cm": 1.5,
        "on": False,
    }
    with pytest.raises(dataclasses.FrozenInstanceError):
        one.width_cm = 2.0  # type: ignore[misc]
    assert dataclasses.replace(one, on=True).on


@checked_record
class Table:
    """Rows of numbers."""

    rows: Annotated[tuple[tuple[float, ...], ...], TUPLES]


def test_lists_and_arrays_become_tuples() -> None:
    expected = ((1.0, 2.0), (3.0, 4.0))
    for given in (
        expected,
        [[1.0, 2.0], [3.0, 4.0]],
        np.array(expected),
        [np.array([1.0, 2.0]), (3.0, 4.0)],
    ):
        assert Table(given).rows == expected
    assert build(Table, {"rows": [[1.0, 2.0], [3.0, 4.0]]}).rows == expected
    for wrong in (1.0, "12", {1.0: 2.0}, [1.0]):
        with pytest.raises(InputError, match="rows"):
            Table(wrong)  # type: ignore[arg-type]


def test_records_compare_by_value_and_hash() -> None:
    assert Outer(Inner(3)) == Outer(Inner(3))
    assert Outer(Inner(3)) != Outer(Inner(4))
    assert len({Outer(Inner(3)), Outer(Inner(3))}) == 1


def test_replace_checks_again() -> None:
    with pytest.raises(InputError, match="count = 99"):
        dataclasses.replace(Inner(3), count=99)


def test_a_part_may_be_a_mapping() -> None:
    assert Outer(inner={"count": 3}) == Outer(Inner(3))  # type: ignore[arg-type]


def test_an_input_error_is_a_value_error() -> None:
    assert issubclass(InputError, ValueError)
    assert issubclass(InputError, LevelnetError)


@pytest.mark.parametrize(
    ("values", "parts"),
    [
        ({"inner": Inner(3), "width_cm": -1.0}, ["width_cm = -1.0", "greater than 0"]),
        ({"inner": Inner(3), "width_cm": float("nan")}, ["width_cm = nan", "finite"]),
        ({"inner": Inner(3), "width_cm": float("inf")}, ["width_cm = inf", "finite"]),
        ({"inner": Inner(3), "width_cm": "1.0"}, ["width_cm = '1.0'", "number"]),
        ({"inner": Inner(3), "width_cm": True}, ["width_cm = True", "number"]),
        ({"inner": Inner(3), "on": 1}, ["on = 1", "boolean"]),
        ({"inner": {"count": 1}}, ["count = 1", "greater than or equal to 2"]),
        ({"inner": {"count": 2.5}}, ["count = 2.5", "integer"]),
        ({"inner": {"count": True}}, ["count = True", "integer"]),
        ({"inner": {"count": 3, "kind": "pink"}}, ["kind = 'pink'", "'red' or 'blue'"]),
        ({"inner": {}}, ["count: missing"]),
        ({}, ["inner: missing"]),
        ({"inner": Inner(3), "colour": 1}, ["colour: unknown key"]),
        ({"inner": Inner(3, "blue"), "on": True}, ["inner.kind = blue: cannot be on"]),
    ],
)
def test_a_bad_value_is_one_clear_line(values: dict[str, object], parts: list[str]) -> None:
    text = complaint(**values)
    assert "\n" not in text
    for part in parts:
        assert part in text
    for jargon in ("pydantic", "validation error", "function-", "Value error"):
        assert jargon not in text


def test_positional_arguments_are_named() -> None:
    with pytest.raises(InputError, match="count = 1: "):
        Inner(1)


def test_building_lists_every_complaint_with_its_path() -> None:
    values = {"inner": {"count": 1, "kind": "pink", "x": 0}, "width_cm": 0.0, "on": "yes"}
    with pytest.raises(InputError) as caught:
        build(Outer, values)
    text = str(caught.value)
    for part in (
        "inner.count = 1",
        "inner.kind = 'pink'",
        "inner.x",
        "width_cm = 0.0",
        "on = 'yes'",
    ):
        assert part in text
    assert len(text.split("; ")) == 5
    assert "\n" not in text


def test_building_gives_the_record() -> None:
    assert build(Outer, {"inner": {"count": 4}, "on": True}) == Outer(Inner(4), on=True)
