"""Everything in a file that holds a study of the escape. See :mod:`levelnet.store.layout`."""

from __future__ import annotations

import dataclasses

from . import layout
from .level_layout import OBSERVABLE, OBSERVABLE_UNIT, QUESTION, REDSHIFT
from .schema import Group, Kind, Layout, Variable, describe

_BAR = "relative numerical error of the reference: "


def _by_variant(
    name: str, units: str, long_name: str, *more: str, kind: Kind = "float64"
) -> Variable:
    own = "observable" if name == "observable_value" else name
    return Variable(name, ("variant", *more), units, long_name, f"variants.{own}", kind)


def _by_switch(name: str, long_name: str) -> Variable:
    return Variable(name, ("switch",), "1", long_name, f"switches.{name}", "int64")


def _one(name: str, long_name: str, field: str) -> Variable:
    return Variable(name, (), "1", long_name, field, "int64")


_SWITCH = Variable(
    "switch", ("switch",), "", "name, in the order of adding", "switches.name", "text"
)

VARIANTS = Group(
    "variants",
    "histories that differ in their lines only",
    (
        REDSHIFT,
        OBSERVABLE,
        OBSERVABLE_UNIT,
        layout.CHANNEL,
        Variable("variant", ("variant",), "", "name of the variant", "variants.name", "text"),
        _by_variant("lines", "", "table [lines] of its setup, as TOML", kind="text"),
        _by_variant(
            "intercombination_rate_per_s", "s-1", "rate of 2 3P1 to 1 1S of He I; NaN: inert"
        ),
        _by_variant("outcome", "", "how it ended: name of an Outcome", kind="text"),
        _SWITCH,
        _by_variant("switched_on", "1", "1 for a switch that is on", "switch", kind="int64"),
        _by_variant(
            "free_electron_fraction", "1", "free electrons per hydrogen nucleus", "redshift"
        ),
        _by_variant("matter_temperature_k", "K", "matter temperature", "redshift"),
        _by_variant(
            "observable_value",
            "",
            "observable, in the unit that observable_unit names",
            "observable",
        ),
        _by_variant(
            "cumulative_share",
            "1",
            "part of all net recombinations to the last redshift",
            "channel",
        ),
        Variable(
            "treatment",
            ("treatment",),
            "1",
            "position of a treatment without a field",
            "treatments",
            "int64",
        ),
        _one("reference", "position of the reference", "reference"),
    ),
)
SWITCHES = Group(
    "switches",
    "what is switched on and off in the reference: positions of variants",
    (
        _SWITCH,
        _one("base", "every switch off", "switches.base"),
        _by_switch("alone", "this switch on (and what it needs)"),
        _by_switch("removed", "all switches on but this one (and what needs it)"),
        _by_switch("cumulative", "this and all switches before it on"),
    ),
)
REFERENCE = Group(
    "reference",
    "the reference: its numerical errors, and how atoms reached the ground state",
    (
        REDSHIFT,
        OBSERVABLE,
        Variable(
            "free_electron_fraction_error",
            ("redshift",),
            "1",
            f"{_BAR}free_electron_fraction",
            "reference_error.free_electron_fraction",
        ),
        Variable(
            "matter_temperature_k_error",
            ("redshift",),
            "1",
            f"{_BAR}matter_temperature_k",
            "reference_error.matter_temperature_k",
        ),
        Variable(
            "observable_error",
            ("observable",),
            "1",
            f"{_BAR}observable",
            "reference_error.observable",
        ),
        *(one for one in layout.CHANNELS.variables if one is not layout.REDSHIFT),
    ),
)


def _of_helium(group: Group) -> Group:
    """The same group of the nested study of the lines of He I, on the same grid."""
    shared = (REDSHIFT, OBSERVABLE, OBSERVABLE_UNIT)
    variables = tuple(
        one
        if one in shared or not one.field
        else dataclasses.replace(one, field=f"helium.{one.field}")
        for one in group.variables
    )
    return Group(f"helium_{group.name}", f"lines of He I: {group.description}", variables)


ESCAPE_LAYOUT = Layout(
    "levelnet study of escape",
    1,
    "a study of the escape",
    layout.ROOT_ATTRIBUTES,
    (VARIANTS, SWITCHES, REFERENCE),
    (
        layout.FIELD,
        QUESTION,
        *(_of_helium(one) for one in (VARIANTS, SWITCHES, REFERENCE, QUESTION)),
    ),
)


def describe_escape_layout() -> str:
    """Return the layout as text: one line for each group, dataset and attribute of the file."""
    return describe(ESCAPE_LAYOUT, (*ESCAPE_LAYOUT.required, *ESCAPE_LAYOUT.optional))
