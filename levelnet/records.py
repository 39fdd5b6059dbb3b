"""Checked records: the parts of a setup, validated on construction and when read from text.

One decorator, :func:`checked_record`, makes a frozen dataclass whose fields are checked by pydantic
(types strictly, ranges from ``Annotated``), and turns its complaints into one :class:`InputError`.
"""

from __future__ import annotations

import dataclasses
import functools
import json
from collections.abc import Callable, Mapping, Sequence
from typing import Any, TypeVar, dataclass_transform

import numpy as np
from pydantic import (
    BeforeValidator,
    ConfigDict,
    Field,
    TypeAdapter,
    ValidationError,
    ValidationInfo,
)
from pydantic.dataclasses import dataclass as pydantic_dataclass

from .errors import InputError, cut_short

T = TypeVar("T")
MOST_COMPLAINTS = 20
"""How many complaints one line lists; further ones are counted."""

_CONFIG = ConfigDict(extra="forbid", strict=True, allow_inf_nan=False, arbitrary_types_allowed=True)


@dataclass_transform(frozen_default=True)
def checked_record(cls: type[T]) -> type[T]:
    """Make `cls` a frozen dataclass whose fields are checked; bad values raise InputError."""
    record: Any = pydantic_dataclass(frozen=True, config=_CONFIG)(cls)
    plain_init: Callable[..., None] = record.__init__

    @functools.wraps(plain_init)
    def checked_init(self: object, *args: object, **kwargs: object) -> None:
        try:
            plain_init(self, *args, **kwargs)
        except ValidationError as error:
            raise InputError(explain(error, record)) from None

    record.__init__ = checked_init
    checked: type[T] = record
    return checked


def as_tuples(value: object) -> object:
    """Make tuples of lists and arrays, nested ones too: the strict check of a tuple refuses them.

    Text brings lists, and so may a caller from Python.
    """
    if isinstance(value, np.ndarray):
        value = value.tolist()
    return tuple(as_tuples(one) for one in value) if isinstance(value, list | tuple) else value


TUPLES = BeforeValidator(as_tuples)
"""Mark of a field that holds tuples and may be given lists or arrays."""
FIRST_FAULT: Any = Field(fail_fast=True)
"""Mark of a tuple of any length: its first bad value is told, since each takes a kilobyte."""


def from_mapping(cls: type) -> BeforeValidator:
    """Let a field that holds a `cls` also be given as a plain mapping from Python."""

    def convert(value: object, info: ValidationInfo) -> object:
        # Text goes through JSON mode, where pydantic nests by itself and keeps the full path.
        if info.mode == "python" and isinstance(value, Mapping):
            return build(cls, value)
        if isinstance(value, Mapping):  # text has lists where records hold tuples
            return {k: as_tuples(v) for k, v in value.items()}
        return value

    return BeforeValidator(convert)


def build(cls: type[T], values: Mapping[str, object]) -> T:
    """Make a checked record from nested mappings; one InputError lists every complaint."""
    made = attempt(cls, values)
    if isinstance(made, Complaints):
        raise InputError(_listed(made))
    return made


class Complaints(tuple[str, ...]):
    """Everything wrong with the values of a record, one text each."""


def attempt(cls: type[T], values: Mapping[str, object]) -> T | Complaints:
    """Make a checked record from nested mappings, or say every complaint."""
    # Through JSON, where strict checking still lets a mapping stand for a nested record.
    text = json.dumps(values, default=str)
    try:
        return TypeAdapter(cls).validate_json(text)
    except ValidationError as error:
        return Complaints(_complaint(item, None) for item in error.errors(include_url=False))


def _listed(complaints: Sequence[str]) -> str:
    """All complaints as one text; what goes beyond a page is counted."""
    more = len(complaints) - MOST_COMPLAINTS
    further = [f"and {more} further complaints"] if more > 0 else []
    return "; ".join([*complaints[:MOST_COMPLAINTS], *further])


def explain(error: ValidationError, record: Any = None) -> str:
    """Say every complaint of `error`, each as path, value, and what is allowed."""
    return _listed([_complaint(item, record) for item in error.errors(include_url=False)])


def _complaint(item: Any, record: Any) -> str:
    location = [part for part in item["loc"] if not str(part).startswith("function-")]
    if record is not None and location and isinstance(location[0], int):
        # A positional argument: name it.
        location[0] = dataclasses.fields(record)[location[0]].name
    path = ".".join(cut_short(str(part)) for part in location)
    if not path:  # a rule about several fields; its text names them
        return str(item["msg"]).removeprefix("Value error, ")
    if item["type"] in {"unexpected_keyword_argument", "extra_forbidden"}:
        return f"{path}: unknown key"
    if item["type"] in {"missing", "missing_argument"}:
        return f"{path}: missing"
    message = str(item["msg"]).removeprefix("Value error, ")
    if isinstance(item["input"], dict):
        return f"{path}: {message}"
    return f"{path} = {cut_short(repr(item['input']))}: {message[0].lower()}{message[1:]}"
