"""Records held against each other, to the bit: for whatever is written and read back, or split."""

from __future__ import annotations

import dataclasses
from typing import Any

import numpy as np


def assert_same(one: Any, other: Any) -> None:
    """Equal in every field, arrays to the bit."""
    assert type(one) is type(other)
    for field in dataclasses.fields(one):
        first, second = getattr(one, field.name), getattr(other, field.name)
        if isinstance(first, np.ndarray):
            assert first.dtype == second.dtype
            assert first.shape == second.shape
            assert first.tobytes() == second.tobytes(), field.name
            assert not second.flags.writeable
        elif dataclasses.is_dataclass(first) and field.name != "setup":
            assert_same(first, second)
        else:
            assert first == second, field.name
