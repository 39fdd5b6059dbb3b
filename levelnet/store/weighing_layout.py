"""Everything in a file that holds a weighing; see :mod:`levelnet.store.layout`."""

from __future__ import annotations

from dataclasses import replace

from . import layout
from .schema import Group, Kind, Layout, Variable, describe


def _position(name: str, long_name: str) -> Variable:
    return Variable(name, (name,), "1", long_name, "", "int64", "n l" if name == "level" else "")


def _level(name: str, units: str, long_name: str, kind: Kind = "float64") -> Variable:
    field = f"levels.{name}_ev" if units == "eV" else f"levels.{name}"
    coordinates = "" if name in {"n", "l"} else "n l"
    return Variable(name, ("level",), units, long_name, field, kind, coordinates)


def _end(name: str, over: str, long_name: str) -> Variable:
    return Variable(name, (over,), "1", f"position of the {long_name}", name, "int64")


def _value(field: str) -> Variable:
    # The targets have units of their own, so that the array has none.
    text = "value of the target, in the unit that `unit` names"
    return Variable("value", ("target",), "", text, field)


def _weight(name: str, of: str, over: str = "", field: str = "") -> Variable:
    """Derivative of ln of each target by ln of a rate."""
    dimensions = ("target", over) if over else ("target",)
    text = f"d ln(target) / d ln({of})"
    coordinates = "n l" if over == "level" else ""
    return Variable(name, dimensions, "1", text, field or name, coordinates=coordinates)


def _text(name: str, over: str, long_name: str, field: str) -> Variable:
    return Variable(name, (over,), "", long_name, field, "text")


WEIGHING = Group(
    "weighing",
    "derivatives of ln of each target by ln of every rate, the other rates held; a rate and its "
    "inverse scale together",
    (
        _text("target", "target", "scalar of the history", "targets"),
        _text("unit", "target", "unit of the value of the target", "units"),
        _value("value"),
        _position("level", "position of the level, from 0"),
        _level("n", "1", "principal quantum number", "int64"),
        _level("l", "1", "orbital quantum number; -1 for a whole shell", "int64"),
        _level("statistical_weight", "1", "statistical weight, nuclear spin not counted"),
        _level("energy", "eV", "energy above the ground state"),
        _level("ionization_energy", "eV", "energy that ionizes the level"),
        _position("transition", "position of the dipole transition, from 0"),
        _end("upper", "transition", "upper level of the dipole transition"),
        _end("lower", "transition", "lower level of the dipole transition"),
        _text("line", "line", "line to the ground state whose photons escape", "lines"),
        _end("line_upper", "line", "upper level of the line to the ground state"),
        _text("parameter", "parameter", "parameter of the cosmology", "parameters"),
        _weight("bound_bound", "strength of the dipole transition", "transition"),
        _weight("bound_free", "cross section of the level", "level"),
        _weight("escape", "rate at which photons of the line escape", "line"),
        _weight("two_photon", "2s-1s two-photon rate"),
        _weight("compton", "Compton rate between matter and radiation temperature"),
        _weight("cosmology", "parameter", "parameter", "parameter"),
    ),
)

BUDGET = Group(
    "budget",
    "error of each target that follows from the uncertainties of rates",
    (
        _text("target", "target", "scalar of the history", "budget.targets"),
        _text("unit", "target", "unit of the value of the target", "budget.units"),
        _value("budget.value"),
        _text("group", "group", "rates that err together", "budget.groups"),
        _text("source", "group", "where their uncertainty comes from", "budget.sources"),
        _text("row", "row", "what was assumed: selector, sigma, group", "budget.rows"),
        Variable(
            "contribution",
            ("target", "group"),
            "1",
            "relative change of the target by one sigma of the group, signed",
            "budget.contribution",
        ),
        Variable("sigma", ("target",), "1", "relative 1-sigma error of the target", "budget.sigma"),
    ),
)


def _helium(part: str, what: str, *more: Variable) -> tuple[Variable, ...]:
    """Levels, transitions and their derivatives of one ion of helium, in field `part`."""

    def level(name: str, units: str, long_name: str, kind: Kind = "float64") -> Variable:
        own = _level(name, units, long_name, kind)
        return replace(own, field=f"{part}.{own.field}")

    def end(name: str, over: str, long_name: str) -> Variable:
        return replace(_end(name, over, long_name), field=f"{part}.{name}")

    spin = (level("spin", "1", "total spin, 0 or 1", "int64"),) if part == "helium" else ()
    return (
        _text("target", "target", "scalar of the history", "targets"),
        _position("level", "position of the level, from 0"),
        level("n", "1", "principal quantum number", "int64"),
        level("l", "1", "orbital quantum number", "int64"),
        *spin,
        level("statistical_weight", "1", "statistical weight, nuclear spin not counted"),
        level("energy", "eV", "energy above the ground state"),
        level("ionization_energy", "eV", "energy that ionizes the level"),
        _position("transition", "position of the dipole transition, from 0"),
        end("upper", "transition", "upper level of the dipole transition"),
        end("lower", "transition", "lower level of the dipole transition"),
        *more,
        _weight("bound_bound", "strength of the transition", "transition", f"{part}.bound_bound"),
        _weight("bound_free", "cross section of the level", "level", f"{part}.bound_free"),
        _weight("two_photon", f"two-photon rate of {what}", "", f"{part}.two_photon"),
    )


HELIUM = Group(
    "helium",
    "derivatives of ln of each target by ln of every rate of He I",
    _helium(
        "helium",
        "2 1S",
        _text("line", "line", "line to 1 1S whose photons escape", "helium.lines"),
        replace(
            _end("line_upper", "line", "upper term of the line to 1 1S"), field="helium.line_upper"
        ),
        _weight("line_strength", "Einstein A of the line to 1 1S", "line", "helium.strength"),
        _weight(
            "escape",
            "rate at which photons of the line escape, depth held",
            "line",
            "helium.escape",
        ),
        _weight(
            "absorption",
            "cross section of H I 1s inside the lines of He I and between them",
            "",
            "helium.absorption",
        ),
    ),
)

HELIUM_ION = Group(
    "helium_ion",
    "derivatives of ln of each target by ln of every rate of He II",
    _helium(
        "helium_ion",
        "2s",
        _weight("escape", "rate at which photons of 2p-1s escape", "", "helium_ion.escape"),
    ),
)

WEIGHING_LAYOUT = Layout(
    "levelnet weighing",
    1,
    "a weighing",
    layout.ROOT_ATTRIBUTES,
    (WEIGHING, layout.NOTES),
    (HELIUM, HELIUM_ION, BUDGET),
)


def describe_weighing_layout() -> str:
    """Return the layout as text: one line for each group, dataset and attribute of the file."""
    return describe(WEIGHING_LAYOUT, (*WEIGHING_LAYOUT.required, *WEIGHING_LAYOUT.optional))
