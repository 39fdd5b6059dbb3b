"""Public functions and classes say what they take and give: kinds, shapes, units, sources."""

from __future__ import annotations

import dataclasses
import enum
import inspect
import re
from collections.abc import Callable
from typing import Any

import pytest

import levelnet

OBJECTS = {name: getattr(levelnet, name) for name in levelnet.__all__ if name != "__version__"}
FUNCTIONS = {name: one for name, one in OBJECTS.items() if inspect.isfunction(one)}
RECORDS = {name: one for name, one in OBJECTS.items() if dataclasses.is_dataclass(one)}

# These give numbers of physics, so they name a source.
COEFFICIENTS = (
    "einstein_a",
    "photoionization_cross_section",
    "recombination_coefficient",
    "photoionization_rate",
    "two_photon_rate",
    "two_photon_profile",
    "two_photon_spectrum_per_s_hz",
    "raman_spectrum_per_s_hz",
    "second_order_matrix_element",
    "lyman_resonances",
    "escape_probability",
)

UNIT = re.compile(
    r"dimensionless|\bs\^-1|\bcm\^|\beV\b|\bK\b|\bkm\b|\bMpc\b|\bs\b|\berg\b|\bcm\b|in units of"
)
# Kinds whose values are numbers of something; whole numbers count and have no unit.
NUMBER = re.compile(r"\bfloat\b|array")


def sections(text: str) -> dict[str, list[str]]:
    """Split a numpydoc docstring into its sections; "" holds what stands before the first."""
    lines = inspect.cleandoc(text).splitlines() or [""]
    found: dict[str, list[str]] = {"": []}
    current = ""
    for line, below in zip(lines, [*lines[1:], ""], strict=True):
        if line and re.fullmatch(r"-{3,}", below):
            current = line
            found[current] = []
        elif not re.fullmatch(r"-{3,}", line):
            found[current].append(line)
    return found


def entries(lines: list[str]) -> dict[str, tuple[str, str]]:
    """Read "names : kind" and what is said below: name -> (kind, all of its text)."""
    found: dict[str, tuple[str, str]] = {}
    names: list[str] = []
    for line in lines:
        head = re.match(r"(\S[^:]*?) ?: (.*)", line)
        if head and not line.startswith(" "):
            names = [name.strip(" *") for name in head[1].split(",")]
            found.update(dict.fromkeys(names, (head[2], head[2])))
        for name in names:
            kind, text = found[name]
            found[name] = (kind, text + " " + line.strip())
    return found


def lacks_unit(kind: str, text: str) -> bool:
    """Say whether an argument is a number without a unit."""
    return bool(NUMBER.search(kind)) and "int" not in kind and not UNIT.search(text)


def arguments(one: Callable[..., Any]) -> list[str]:
    """Name the arguments of a function or the fields of a record."""
    return [name for name in inspect.signature(one).parameters if name != "self"]


def documented(one: Any) -> dict[str, tuple[str, str]]:
    """Read what a function or record says of its arguments."""
    parts = sections(one.__doc__ or "")
    return entries(parts.get("Parameters", [])) | entries(parts.get("Attributes", []))


@pytest.mark.parametrize("name", sorted(OBJECTS))
def test_has_a_docstring(name: str) -> None:
    text = inspect.cleandoc(OBJECTS[name].__doc__ or "")
    first = text.partition("\n")[0]
    assert first.endswith((".", ".)")) or "; " in text, text
    assert text.isascii()
    # A dataclass without a docstring is given its signature as one.
    assert not text.startswith(f"{name}(")


@pytest.mark.parametrize("name", sorted(FUNCTIONS | RECORDS))
def test_every_argument_is_documented(name: str) -> None:
    one = OBJECTS[name]
    said = documented(one)
    assert [argument for argument in arguments(one) if argument not in said] == []
    assert set(said) <= set(arguments(one)), "documents an argument that is not there"


@pytest.mark.parametrize("name", sorted(FUNCTIONS | RECORDS))
def test_every_number_has_a_unit(name: str) -> None:
    said = documented(OBJECTS[name])
    assert [argument for argument, text in said.items() if lacks_unit(*text)] == []


@pytest.mark.parametrize("name", sorted(FUNCTIONS))
def test_says_what_it_gives_back(name: str) -> None:
    one = FUNCTIONS[name]
    if inspect.signature(one).return_annotation in (None, "None"):
        return
    said = " ".join(sections(one.__doc__ or "").get("Returns", []))
    assert said.strip()


@pytest.mark.parametrize("name", COEFFICIENTS)
def test_coefficients_name_source_unit_and_range(name: str) -> None:
    parts = sections(FUNCTIONS[name].__doc__ or "")
    # Somebody's work, with its year.
    assert re.search(r"\b(1[89]|20)\d\d\b", " ".join(parts.get("References", []))), "no References"
    assert UNIT.search(" ".join(parts["Returns"])), "Returns has no unit"


def test_parsing_finds_what_is_missing() -> None:
    # The checks above can fail: on a function that says too little.
    def bare(n: int, energy_ev: float) -> float:
        """Give a number.

        Parameters
        ----------
        n : int
            A quantum number.
        other : float
            Of something.
        """
        return n * energy_ev

    said = documented(bare)
    assert set(said) == {"n", "other"}
    assert arguments(bare) == ["n", "energy_ev"]
    assert [name for name, text in said.items() if lacks_unit(*text)] == ["other"]


def test_members_of_outcome_say_what_happened() -> None:
    assert issubclass(levelnet.Outcome, enum.Enum)
    for member in levelnet.Outcome:
        assert len(str(member.value).split()) > 3
