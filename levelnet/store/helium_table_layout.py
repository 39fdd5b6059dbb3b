"""Groups of helium in the file of a table of effective rates, or of a history made from one."""

from __future__ import annotations

from . import layout
from .schema import Group, Kind, Variable

_LINE = ("line",)


def _stage(field: str, name: str, species: str) -> Group:
    """Effective rates of one stage, stored as those of hydrogen in group `table`."""

    def number(one: str, long_name: str) -> Variable:
        return Variable(one, (), "1", long_name, f"{field}.{one}")

    def count(one: str, long_name: str) -> Variable:
        return Variable(one, (one,), "1", long_name, "", "int64")

    def level(one: str, units: str, long_name: str, kind: Kind = "float64") -> Variable:
        return Variable(one, ("level",), units, long_name, f"{field}.{one}", kind)

    def pair(one: str, units: str, long_name: str, kind: Kind = "float64") -> Variable:
        return Variable(one, ("pair",), units, long_name, f"{field}.{one}", kind)

    def series(one: str, axes: tuple[str, ...], long_name: str) -> Variable:
        return Variable(one, axes, "1", long_name, f"{field}.{one}")

    return Group(
        name,
        f"effective rates of {species}, stored as those of hydrogen",
        (
            number("log_low", "lowest ln(T_r/K)"),
            number("log_high", "highest ln(T_r/K)"),
            number("ratio_low", "lowest ln(T_m/T_r)"),
            number("ratio_high", "highest ln(T_m/T_r)"),
            count("cell", "cell of ln(T_r/K), from 0"),
            count("ratio_cell", "cell of ln(T_m/T_r), from 0"),
            count("level", "position of the kept level, from 0"),
            count("pair", "position of the pair of kept levels, from 0"),
            count("power", "power of t in the cell of ln(T_r/K)"),
            count("ratio_power", "power of t in the cell of ln(T_m/T_r)"),
            series(
                "equilibrium",
                ("cell", "level", "power"),
                "natural logarithm of recombination in cm3 s-1 at T_m = T_r",
            ),
            series(
                "exchange",
                ("cell", "pair", "power"),
                "natural logarithm of downward exchange in s-1 times exp(barrier/T_r); -700: none",
            ),
            series(
                "departure",
                ("cell", "ratio_cell", "level", "power", "ratio_power"),
                "change of the logarithm of recombination with T_m, over ln(T_m/T_r)",
            ),
            level("n", "1", "principal quantum number", "int64"),
            level("l", "1", "orbital quantum number", "int64"),
            level("spin", "1", "total spin of He I; 0 for He II", "int64"),
            level("statistical_weight", "1", "statistical weight"),
            level("energy_ev", "eV", "energy above the ground state"),
            level("ionization_energy_ev", "eV", "energy that ionizes the level"),
            pair("lower", "1", "position of the lower level", "int64"),
            pair("upper", "1", "position of the upper level", "int64"),
            pair("barrier_k", "K", "barrier over the Boltzmann constant"),
            pair("rise_k", "K", "energy difference over the Boltzmann constant"),
            pair("log_weight_ratio", "1", "natural logarithm of upper over lower weight"),
        ),
    )


def _line(name: str, units: str, long_name: str, kind: Kind = "float64") -> Variable:
    return Variable(name, _LINE, units, long_name, f"helium_lines.{name}", kind)


def _one(name: str, units: str, long_name: str, kind: Kind = "float64") -> Variable:
    return Variable(name, (), units, long_name, f"helium_lines.{name}", kind)


def _along(name: str, long_name: str) -> Variable:
    return Variable(name, (name,), "1", long_name, "", "int64")


HELIUM = _stage("helium", "helium", "He I")
HELIUM_ION = _stage("helium_ion", "helium_ion", "He II")
HELIUM_LINES = Group(
    "helium_lines",
    "lines of He I to its ground state; ln(P/S) of each, S = (1 - exp(-tau))/tau, as uniform cubic "
    "B-splines of ln(n_HeI/H), ln(n_HI/H) and ln(T_r/K)",
    (
        Variable("line", _LINE, "", "name of the line", "helium_lines.names", "text"),
        _line("upper", "1", "position of the upper level", "int64"),
        _line("lit_by", "1", "position of the line whose light it sees; -1: none", "int64"),
        _line("einstein_a_per_s", "s-1", "spontaneous rate times the share of the term"),
        _line("energy_ev", "eV", "photon energy"),
        _line("weight_ratio", "1", "weight of the upper term over that of the ground state"),
        _line("cross_section_cm2", "cm2", "photoionization cross section of H I at the line"),
        _one("absorbs", "1", "1: hydrogen absorbs in the lines and between them", "int64"),
        _one("decay", "1", "position of the level that decays by two photons", "int64"),
        _one("decay_rate_per_s", "s-1", "its rate"),
        _one("ion_ev", "eV", "ionization energy of He II"),
        _along("column", "coefficient along ln(n_HeI/H), from 0"),
        _along("hydrogen", "coefficient along ln(n_HI/H), from 0"),
        _along("temperature", "coefficient along ln(T_r/K), from 0"),
        _along("direction", "the three directions: n_HeI/H, n_HI/H (s cm-3), T_r (K)"),
        _along("grid", "0: first node, 1: spacing"),
        Variable(
            "escape",
            ("line", "column", "hydrogen", "temperature"),
            "1",
            "B-spline coefficients of ln(P/S); one number: P = S",
            "helium_lines.escape",
        ),
        Variable(
            "axis",
            ("direction", "grid"),
            "1",
            "first node and spacing of the natural logarithms",
            "helium_lines.axis",
        ),
        _line("escape_error", "1", "largest error of ln P at random points"),
        _line("escape_rms", "1", "root mean square of the same errors"),
    ),
)


def _fraction(name: str, long_name: str) -> Variable:
    return Variable(name, ("redshift",), "1", long_name, f"helium.{name}")


HELIUM_HISTORY = Group(
    "helium",
    "ionization of helium; without this group it is neutral",
    (
        layout.REDSHIFT,
        _fraction("neutral_helium_fraction", "neutral part of the helium nuclei"),
        _fraction("singly_ionized_helium_fraction", "singly ionized part of the helium nuclei"),
        _fraction("doubly_ionized_helium_fraction", "doubly ionized part of the helium nuclei"),
    ),
)
