"""Everything in a file that holds a table of effective rates, or a history made from one.

See :mod:`levelnet.store.layout`.
"""

from __future__ import annotations

from . import layout
from .helium_table_layout import HELIUM, HELIUM_HISTORY, HELIUM_ION, HELIUM_LINES
from .schema import Group, Kind, Layout, Variable, describe


def _number(name: str, units: str, long_name: str, kind: Kind = "float64") -> Variable:
    return Variable(name, (), units, long_name, name, kind)


def _position(name: str, long_name: str) -> Variable:
    return Variable(name, (name,), "1", long_name, "", "int64")


def _level(name: str, units: str, long_name: str, kind: Kind = "float64") -> Variable:
    field = f"kept.{name}_ev" if units == "eV" else f"kept.{name}"
    coordinates = "" if name in {"n", "l"} else "n l"
    return Variable(name, ("level",), units, long_name, field, kind, coordinates)


def _pair(name: str, units: str, long_name: str, kind: Kind = "float64") -> Variable:
    return Variable(name, ("pair",), units, long_name, name, kind)


def _rate_error(name: str, long_name: str) -> Variable:
    return Variable(name, ("rate",), "1", long_name, f"certificate.{name}")


LEVEL = _position("level", "position of the kept level, from 0")
PAIR = _position("pair", "position of the pair of kept levels, from 0")

TABLE = Group(
    "table",
    "logarithms of effective rates, measured constants, as power series in cells of x = ln(T_r/K) "
    "and y = ln(T_m/T_r), t running from -1 to 1 across each cell: "
    "ln A_i = equilibrium_i(x) + y departure_i(x, y); photoionization by detailed balance",
    (
        _number("tolerance", "1", "error asked of each logarithm"),
        _number("log_low", "1", "lowest ln(T_r/K)"),
        _number("log_high", "1", "highest ln(T_r/K)"),
        _number("ratio_low", "1", "lowest ln(T_m/T_r)"),
        _number("ratio_high", "1", "highest ln(T_m/T_r)"),
        _position("cell", "cell of ln(T_r/K), from 0"),
        _position("ratio_cell", "cell of ln(T_m/T_r), from 0"),
        LEVEL,
        PAIR,
        _position("power", "power of t in the cell of ln(T_r/K)"),
        _position("ratio_power", "power of t in the cell of ln(T_m/T_r)"),
        Variable(
            "equilibrium",
            ("cell", "level", "power"),
            "1",
            "natural logarithm of recombination in cm3 s-1 at T_m = T_r",
            "equilibrium",
        ),
        Variable(
            "exchange",
            ("cell", "pair", "power"),
            "1",
            "natural logarithm of downward exchange in s-1 times exp(barrier/T_r); -700: none",
            "exchange",
        ),
        Variable(
            "departure",
            ("cell", "ratio_cell", "level", "power", "ratio_power"),
            "1",
            "change of the logarithm of recombination with T_m, over ln(T_m/T_r)",
            "departure",
        ),
    ),
)

LEVELS = Group(
    "levels",
    "kept levels, with the energies of the constants in use",
    (
        LEVEL,
        _level("n", "1", "principal quantum number", "int64"),
        _level("l", "1", "orbital quantum number", "int64"),
        _level("statistical_weight", "1", "statistical weight 2 (2 l + 1)"),
        _level("energy", "eV", "energy above the ground state"),
        _level("ionization_energy", "eV", "energy that ionizes the level"),
    ),
)

PAIRS = Group(
    "pairs",
    "pairs of kept levels, measured constants",
    (
        PAIR,
        _pair("lower", "1", "position of the lower level", "int64"),
        _pair("upper", "1", "position of the upper level", "int64"),
        _pair("barrier_k", "K", "barrier over the Boltzmann constant"),
        _pair("rise_k", "K", "energy difference over the Boltzmann constant"),
        _pair("log_weight_ratio", "1", "natural logarithm of upper over lower weight"),
    ),
)

CERTIFICATE = Group(
    "certificate",
    "errors of the table, measured against the exact network",
    (
        Variable("seed", (), "1", "seed of the random points", "certificate.seed", "int64"),
        Variable("n_points", (), "1", "number of random points", "certificate.n_points", "int64"),
        Variable("rate", ("rate",), "", "name of the rate", "certificate.rate_names", "text"),
        _rate_error("largest_error", "largest error of the natural logarithm of the rate"),
        _rate_error("rms_error", "root mean square of the same errors"),
        Variable(
            "cosmology",
            ("cosmology",),
            "",
            "the setup, and two far from it",
            "certificate.cosmologies",
            "text",
        ),
        Variable("redshift", ("redshift",), "1", "redshift, descending", "certificate.redshift"),
        Variable(
            "history_error",
            ("cosmology", "redshift"),
            "1",
            "relative error of x_e of the distilled history against the full network",
            "certificate.history_error",
        ),
    ),
)

_ATTRIBUTES = {
    name: text
    for name, text in layout.ROOT_ATTRIBUTES.items()
    if name not in {"outcome", "outcome_text"}
}

TABLE_LAYOUT = Layout(
    "levelnet effective rates",
    1,
    "a table of effective rates",
    _ATTRIBUTES,
    (TABLE, LEVELS, PAIRS),
    (CERTIFICATE, HELIUM, HELIUM_ION, HELIUM_LINES),
)


def _z(name: str, units: str, long_name: str) -> Variable:
    return Variable(name, ("redshift",), units, long_name, name)


DISTILLED = Group(
    "history",
    "ionization and thermal history from a table of effective rates; no reionization",
    (
        layout.REDSHIFT,
        _z("free_electron_fraction", "1", "free electrons per hydrogen nucleus"),
        _z("ionized_hydrogen_fraction", "1", "ionized part of the hydrogen nuclei"),
        _z("neutral_hydrogen_fraction", "1", "neutral part of the hydrogen nuclei"),
        _z("matter_temperature_k", "K", "matter temperature"),
        _z("radiation_temperature_k", "K", "radiation temperature"),
    ),
)

RUN = Group(
    "run",
    "how the run went",
    (
        _number("start_redshift", "1", "redshift where Saha equilibrium is left"),
        _number("n_steps", "1", "steps of the integration", "int64"),
        _number("n_rejected", "1", "rejected steps of the integration", "int64"),
        _number("frequency_error", "1", "relative error of x_e from the frequency step; 0: none"),
    ),
)


def _observable(name: str, units: str, long_name: str) -> Variable:
    return Variable(name, (), units, long_name, f"observables.{name}")


OBSERVABLES = Group(
    "observables",
    "what an observer measures of the history; NaN where it does not reach the event",
    (
        _observable("last_scattering_redshift", "1", "redshift of unit optical depth"),
        _observable("sound_horizon_mpc", "megaparsec", "comoving sound horizon there"),
        _observable("damping_per_mpc", "megaparsec-1", "comoving damping wavenumber there"),
    ),
)

DISTILLED_LAYOUT = Layout(
    "levelnet distilled history",
    1,
    "a distilled history",
    layout.ROOT_ATTRIBUTES,
    (DISTILLED, RUN, layout.NOTES),
    (OBSERVABLES, layout.FIELD, HELIUM_HISTORY),
)


def describe_table_layout() -> str:
    """Return the layout as text: one line for each group, dataset and attribute of the file."""
    return describe(TABLE_LAYOUT, (*TABLE_LAYOUT.required, *TABLE_LAYOUT.optional))
