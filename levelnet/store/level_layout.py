"""Everything in a file that holds a study of truncations. See :mod:`levelnet.store.layout`."""

from __future__ import annotations

from . import layout
from .schema import Group, Kind, Layout, Variable, describe

_NOT_NUMBERS = "in the unit that observable_unit names"


def _position(name: str, long_name: str) -> Variable:
    return Variable(name, (name,), "1", long_name, "", "int64")


# Not that of a history, which every group of a history file repeats.
REDSHIFT = Variable("redshift", ("redshift",), "1", "redshift, descending", "redshift")
OBSERVABLE = Variable(
    "observable", ("observable",), "", "name of the observable", "observable_names", "text"
)
OBSERVABLE_UNIT = Variable(
    "observable_unit", ("observable",), "", "its unit; 1: none", "observable_units", "text"
)


def _low_level(name: str, long_name: str) -> Variable:
    return Variable(name, ("level",), "1", long_name, f"level_{name}", "int64")


def _rungs(name: str, description: str) -> Group:
    """Group of one ladder, whose record is the field `name` of the study."""

    def by_rung(
        key: str, units: str, long_name: str, *more: str, kind: Kind = "float64"
    ) -> Variable:
        own = "observable" if key == "observable_value" else key
        return Variable(key, ("rung", *more), units, long_name, f"{name}.{own}", kind)

    return Group(
        name,
        description,
        (
            _position("rung", "position of the rung, from 0"),
            REDSHIFT,
            OBSERVABLE,
            OBSERVABLE_UNIT,
            Variable(
                "population_redshift",
                ("population_redshift",),
                "1",
                "redshift of populations, descending",
                "population_redshift",
            ),
            _position("level", "position of the low level, from 0"),
            _low_level("n", "principal quantum number"),
            _low_level("l", "orbital quantum number"),
            by_rung("n_max", "1", "highest principal quantum number", kind="int64"),
            by_rung("resolve_l_to", "1", "highest n resolved in l", kind="int64"),
            by_rung(
                "free_electron_fraction", "1", "free electrons per hydrogen nucleus", "redshift"
            ),
            by_rung("matter_temperature_k", "K", "matter temperature", "redshift"),
            by_rung("observable_value", "", f"observable, {_NOT_NUMBERS}", "observable"),
            by_rung(
                "population",
                "1",
                "atoms in the level per hydrogen nucleus",
                "population_redshift",
                "level",
            ),
        ),
    )


def _estimates(start: str, *first: str) -> tuple[Variable, ...]:
    """Variables of a record `Estimates` at the field `start`, with leading dimensions `first`."""
    found = []
    for quantity, units, over, text in (
        ("free_electron_fraction", "1", "redshift", "free electrons per hydrogen nucleus"),
        ("matter_temperature_k", "K", "redshift", "matter temperature"),
        ("observable", "", "observable", f"observable, {_NOT_NUMBERS}"),
    ):
        for part, unit, long_name, kind in (
            ("value", units, text, "float64"),
            ("relative_error", "1", f"error bar over value: {text}", "float64"),
            ("exponent", "1", f"p of C (n_max + 1/2)^-p, NaN where none fits: {text}", "float64"),
            ("fitted", "1", f"1 where a law is fitted, else 0: {text}", "int64"),
        ):
            name = f"{quantity}_{part}"
            field = f"{start}.{quantity}.{part}"
            number: Kind = "int64" if kind == "int64" else "float64"
            found.append(Variable(name, (*first, over), unit, long_name, field, number))
    return tuple(found)


def _noise(name: str, over: str) -> Variable:
    long_name = f"error of the ratio of two rungs: {name}"
    return Variable(f"{name}_noise", (over,), "1", long_name, f"noise.{name}")


RUNGS = _rungs("rungs", "a ladder of n_max, each rung a history of its own")
LIMIT = Group(
    "limit",
    "carried from all rungs to infinitely many levels",
    (REDSHIFT, OBSERVABLE, OBSERVABLE_UNIT, *_estimates("limit")),
)
NOISE = Group(
    "noise",
    "numerical errors, upper bounds, measured on the two shortest rungs",
    (
        REDSHIFT,
        OBSERVABLE,
        _noise("free_electron_fraction", "redshift"),
        _noise("matter_temperature_k", "redshift"),
        _noise("observable", "observable"),
        Variable("common", (), "1", "largest error of x_e of a single rung", "noise.common"),
    ),
)
HELD_OUT = Group(
    "held_out",
    "the longest rungs as foreseen from the shorter ones",
    (
        _position("held_out", "position of the rung held out, from 0"),
        REDSHIFT,
        OBSERVABLE,
        OBSERVABLE_UNIT,
        Variable("n_max", ("held_out",), "1", "highest n of the rung", "held_out.n_max", "int64"),
        *_estimates("held_out.foreseen", "held_out"),
    ),
)
RESOLVED = _rungs("resolved", "a ladder of resolve_l_to at the longest n_max")
QUESTION = Group(
    "question",
    "what was asked of the study",
    (
        Variable("within", (), "1", "relative error of x_e that is allowed", "question.within"),
        Variable("low", (), "1", "lowest redshift that counts", "question.low"),
        Variable("high", (), "1", "highest redshift that counts", "question.high"),
        _position("requirement_line", "position of the line, from 0"),
        Variable(
            "requirement",
            ("requirement_line",),
            "",
            "requirement as TOML, its response within; no line where none was given",
            "question.requirement",
            "text",
        ),
    ),
)

LEVEL_LAYOUT = Layout(
    "levelnet study of levels",
    1,
    "a study of levels",
    layout.ROOT_ATTRIBUTES,
    (RUNGS, LIMIT, NOISE),
    (HELD_OUT, RESOLVED, QUESTION),
)


def describe_level_layout() -> str:
    """Return the layout as text: one line for each group, dataset and attribute of the file."""
    return describe(LEVEL_LAYOUT, (*LEVEL_LAYOUT.required, *LEVEL_LAYOUT.optional))
