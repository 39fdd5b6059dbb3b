"""What complaints repeat of bad values."""

from __future__ import annotations

from levelnet.errors import cut_short


def test_long_values_are_cut_and_others_are_not() -> None:
    assert cut_short("x" * 60) == "x" * 60
    assert cut_short("x" * 61) == "x" * 60 + "..."
    assert cut_short("x" * 5, 4) == "xxxx..."
    assert cut_short("") == ""
