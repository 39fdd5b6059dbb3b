"""The one list of everything in a levelnet file: names, types, dimensions, units, descriptions.

Writer, reader, text tables and documentation are driven by it; :func:`describe_layout` prints it.

Each variable names the field of the record it holds ("channels.share" of a History; "species."
stands for one :class:`SpeciesPopulations`). The coordinates are repeated in every group, because
xarray opens one group and does not look into the others. Units are in the notation of UDUNITS-2;
that library knows "megaparsec" and not "Mpc". No ``Conventions`` attribute is written, since no
checker has confirmed one.
"""

from __future__ import annotations

from ..history.labelled import HISTORY_LABELS
from .schema import Group, Kind, Layout, Variable, describe

LAYOUT_NAME = "levelnet history"
LAYOUT_VERSION = 1

# Group of each species, in the order of writing.
SPECIES_GROUPS = {"H I": "hydrogen", "He I": "helium", "He II": "helium_ion"}


def _z(name: str, units: str, long_name: str) -> Variable:
    return Variable(name, ("redshift",), units, long_name, name)


def _by_line(name: str, long_name: str) -> Variable:
    return Variable(name, ("redshift", "line"), "1", long_name, f"lines.{name}")


def _by_helium_line(name: str, long_name: str) -> Variable:
    return Variable(name, ("redshift", "line"), "1", long_name, f"helium.lines.{name}")


def _by_channel(name: str, units: str, long_name: str) -> Variable:
    return Variable(name, ("redshift", "channel"), units, long_name, f"channels.{name}")


def _milestone(name: str, units: str, long_name: str) -> Variable:
    return Variable(name, (), units, long_name, f"milestones.{name}")


def _diagnostic(name: str, long_name: str, kind: Kind = "float64") -> Variable:
    return Variable(name, (), "1", long_name, f"diagnostics.{name}", kind)


def _level(name: str, units: str, long_name: str, kind: Kind = "float64") -> Variable:
    coordinates = "" if name in {"n", "l"} else "n l"
    record_field = f"species.levels.{name}" + ("_ev" if units == "eV" else "")
    return Variable(name, ("level",), units, long_name, record_field, kind, coordinates)


def _of_helium(name: str, long_name: str, dimensions: tuple[str, ...] = ()) -> Variable:
    return Variable(name, dimensions, "1", long_name, f"helium.{name}")


def _population(name: str, long_name: str) -> Variable:
    dimensions = ("redshift", "level")
    return Variable(name, dimensions, "1", long_name, f"species.{name}", coordinates="n l")


REDSHIFT = _z("redshift", *HISTORY_LABELS["redshift"])

HISTORY = Group(
    "history",
    "ionization and thermal history; no reionization",
    tuple(_z(name, *said) for name, said in HISTORY_LABELS.items()),
)

LINES = Group(
    "lines",
    "validity figures of the line-escape treatment, per line and redshift",
    (
        REDSHIFT,
        Variable("line", ("line",), "", "upper and lower level of the line", "lines.names", "text"),
        _by_line("optical_depth", "Sobolev optical depth"),
        _by_line("escape_probability", "chance that a photon of the line escapes"),
        _by_line("share", "part of the net flow to the ground state"),
        _by_line("flow_response", "d ln net flow to the ground state by ln escape of the line"),
        _by_line("damping_parameter", "Voigt parameter, decay rate over 4 pi Doppler widths"),
        _by_line("thick_width_scattering", "width over frequency that is thick to scattering"),
        _by_line("thick_width_absorption", "width over frequency that is thick to true absorption"),
        _by_line("absorption_chance", "chance that a line photon is absorbed, not scattered"),
        _by_line("absorption_edge", "place over frequency where absorption of the wing reaches 1"),
        _by_line("source_slope", "d ln source function over blackbody by ln scale factor"),
        _by_line("source_change", "change of the source function over the thick width"),
        _by_line("recoil_gain", "relative gain of escape by recoil in the wings, estimate"),
        _by_line("log_blue_side", "ln of occupation over blackbody on the blue side"),
        _by_line("log_red_side", "ln of occupation over blackbody on the red side"),
        _by_line("unseen_feedback", "part of the line's drive missing from the line above"),
    ),
)

CHANNEL = Variable(
    "channel",
    ("channel",),
    "",
    "transition to the ground state; 2s-1s: two photons",
    "channels.names",
    "text",
)
CHANNELS = Group(
    "channels",
    "how recombined atoms reached the ground state",
    (
        REDSHIFT,
        CHANNEL,
        _by_channel("net_rate_per_s", "s-1", "net transitions per hydrogen nucleus"),
        _by_channel("share", "1", "part of the net rate at this redshift"),
        _by_channel("cumulative_share", "1", "part of all net recombinations so far"),
    ),
)

MILESTONES = Group(
    "milestones",
    "numbers that sum up the history; NaN where the grid does not reach the event",
    (
        _milestone("last_scattering_redshift", "1", "redshift of unit optical depth"),
        _milestone("visibility_peak_redshift", "1", "redshift where the visibility peaks"),
        _milestone("visibility_width", "1", "full width at half maximum of the visibility"),
        _milestone("half_ionized_redshift", "1", "redshift where half the hydrogen is ionized"),
        _milestone("last_scattering_time_s", "s", "cosmic time at unit optical depth"),
        _milestone("transition_duration_s", "s", "time from x_e = 0.9 to x_e = 0.1"),
    ),
)

DIAGNOSTICS = Group(
    "diagnostics",
    "how the run went",
    (
        _diagnostic("handover_redshift", "redshift where Saha equilibrium is left"),
        _diagnostic(
            "handover_departure", "relative difference of the neutral fraction at the hand-over"
        ),
        _diagnostic("steps", "steps of the integration", "int64"),
        _diagnostic("rejected_steps", "rejected steps of the integration", "int64"),
        _diagnostic("evaluations", "evaluations of the equations", "int64"),
        _diagnostic("nodes", "nodes in ln T_r where the network was reduced", "int64"),
        _diagnostic("interpolation_error", "largest error off the nodes of ln of any reduced rate"),
        _diagnostic("conservation_error", "largest relative imbalance of the populations"),
        _diagnostic(
            "slowest_relaxation_hubble", "slowest relaxation rate over the Hubble rate, smallest"
        ),
        _diagnostic(
            "photon_number_error",
            "largest relative imbalance of the photons in a step; 0: no field",
        ),
        _diagnostic(
            "atom_number_error", "largest relative imbalance of the atoms in a step; 0: no field"
        ),
        _diagnostic("frequency_step", "step of the field in ln of photon energy; 0: no field"),
        _diagnostic("frequency_error", "relative error of x_e from the frequency step, estimated"),
    ),
)

NOTES = Group(
    "notes",
    "what a user must know before relying on the result",
    (Variable("note", ("note",), "", "statements, in order", "notes", "text"),),
)

FIELD = Group(
    "field",
    "radiation field around the Lyman lines, where the line treatment resolves it",
    (
        # Not REDSHIFT: the field is kept at some of the outputs only.
        Variable(
            "redshift", ("redshift",), "1", "redshift of a spectrum, descending", "field.redshift"
        ),
        Variable(
            "photon_energy",
            ("photon_energy",),
            "eV",
            "photon energy from half of Lyman-alpha to the Lyman limit, ascending",
            "field.photon_energy_ev",
        ),
        Variable(
            "log_distortion",
            ("redshift", "photon_energy"),
            "1",
            "natural logarithm of occupation number over that of the blackbody at T_r",
            "field.log_distortion",
        ),
    ),
)

SPECIES_VARIABLES = (
    REDSHIFT,
    Variable("level", ("level",), "1", "position of the level, from 0", "", "int64", "n l"),
    _level("n", "1", "principal quantum number", "int64"),
    _level("l", "1", "orbital quantum number; -1 stands for a whole shell", "int64"),
    _level(
        "statistical_weight",
        "1",
        "statistical weight 2 (2 l + 1), of a whole shell 2 n^2; nuclear spin not counted",
    ),
    _level("energy", "eV", "energy above the ground state"),
    _level("ionization_energy", "eV", "energy that ionizes the level"),
    _population("population", "atoms in the level per hydrogen nucleus"),
    _population(
        "log_departure",
        "natural logarithm of population over Saha-Boltzmann population at matter temperature",
    ),
)

# Of He I: terms of two spins, and weights of a two-electron atom.
HELIUM_VARIABLES = (
    *SPECIES_VARIABLES[:4],
    Variable("s", ("level",), "1", "total spin, 0 or 1", "species.levels.spin", "int64", "n l"),
    _level("statistical_weight", "1", "statistical weight (2 s + 1) (2 l + 1)"),
    *SPECIES_VARIABLES[5:],
)

HELIUM = Group(
    "helium_recombination",
    "how He II recombined to He I; NaN where helium is held as it is",
    (
        REDSHIFT,
        Variable(
            "channel",
            ("channel",),
            "",
            "term and ground state; 2 1S-1 1S: two photons",
            "helium.channels",
            "text",
        ),
        Variable(
            "net_rate_per_s",
            ("redshift", "channel"),
            "s-1",
            "net transitions to the ground state per hydrogen nucleus",
            "helium.net_rate_per_s",
        ),
        Variable(
            "settling_hubble",
            ("redshift",),
            "1",
            "rate at which deviations of the ionization of He I die out, over the expansion rate",
            "helium.settling_hubble",
        ),
        _of_helium("handover_departure", "relative lag of x_HeI at the hand-over"),
        _of_helium("handover_ion_departure", "relative lag of x_HeII/x_HeIII at the hand-over"),
        Variable("nodes", (), "1", "reductions of He I and He II", "helium.nodes", "int64"),
        _of_helium("interpolation_error", "largest error off the nodes of ln of any reduced rate"),
        _of_helium("conservation_error", "largest relative imbalance of the populations"),
        _of_helium("closure_error", "largest miss in sums of fractions, and in charge over x_e"),
    ),
)

HELIUM_LINES = Group(
    "helium_lines",
    "validity figures of the lines of He I to its ground state; NaN where helium is held as it is",
    (
        REDSHIFT,
        Variable(
            "line", ("line",), "", "level or term and ground state", "helium.lines.names", "text"
        ),
        _by_helium_line("optical_depth", "Sobolev optical depth"),
        _by_helium_line("escape_probability", "chance that a photon of the line escapes"),
        _by_helium_line("share", "part of the net flow to the ground state"),
        _by_helium_line("flow_response", "d ln net flow to the ground state by ln escape"),
        _by_helium_line("damping_parameter", "Voigt parameter of the natural width"),
        _by_helium_line("incoherent_fraction", "chance that a line photon is lost, not scattered"),
        _by_helium_line("thick_width_scattering", "width over frequency thick to scattering"),
        _by_helium_line("thick_width_absorption", "width over frequency thick to absorption"),
        _by_helium_line("continuum_depth", "depth of the H I continuum per ln of frequency"),
        _by_helium_line("continuum_in_core", "depth of the H I continuum in a Doppler width"),
        _by_helium_line("continuum_in_line", "depth of the H I continuum where the line is thick"),
        _by_helium_line("escape_change", "relative change of escape with all that is known of it"),
        _by_helium_line("log_blue_side", "ln of occupation over blackbody on the blue side"),
        _by_helium_line("log_red_side", "ln of occupation over blackbody on the red side"),
        _by_helium_line("unseen_feedback", "part of the line's drive missing from the line above"),
        _by_helium_line("escape_error", "relative change of x_e by escape_change, estimate"),
        _by_helium_line("feedback_error", "relative change of x_e by unseen_feedback, estimate"),
    ),
)

FIXED_GROUPS = (HISTORY, LINES, CHANNELS, MILESTONES, DIAGNOSTICS, NOTES)

# Attributes of the file as a whole; all are text but the layout version.
ROOT_ATTRIBUTES = {
    "layout": "name of this layout",
    "layout_version": "integer; a reader refuses a newer one",
    "setup": "the whole setup as TOML text",
    "setup_digest": "sixteen hexadecimal digits that name the setup",
    "outcome": "how the run ended: name of an Outcome",
    "outcome_text": "the same as one sentence",
    "levelnet_version": "version that wrote the file",
    "numpy_version": "version at writing",
    "scipy_version": "version at writing",
    "numba_version": "version at writing",
    "h5py_version": "version at writing",
    "codata_edition": "edition of the physical constants",
    "table_checksums": "one line per atomic table: name and sha256",
    "digest": "sha256 over names, shapes, units, attributes and data of everything else",
}


def species_group(species: str) -> Group:
    """Return the group that holds the populations of `species` ("H I")."""
    description = f"levels of {species}: quantum numbers, energies, populations"
    variables = HELIUM_VARIABLES if species == "He I" else SPECIES_VARIABLES
    return Group(SPECIES_GROUPS[species], description, variables, species)


HISTORY_LAYOUT = Layout(
    LAYOUT_NAME,
    LAYOUT_VERSION,
    "a history",
    ROOT_ATTRIBUTES,
    FIXED_GROUPS,
    (*(species_group(name) for name in SPECIES_GROUPS), FIELD, HELIUM, HELIUM_LINES),
)


def groups_of(
    species: tuple[str, ...], with_field: bool = False, with_helium: bool = False
) -> tuple[Group, ...]:
    """All groups of a file with these species and parts, in the order of writing."""
    some = (HISTORY, *(species_group(name) for name in species), *FIXED_GROUPS[1:])
    return (*some, *[FIELD] * with_field, *[HELIUM, HELIUM_LINES] * with_helium)


def describe_layout() -> str:
    """Return the layout as text: one line for each group, dataset and attribute of the file."""
    return describe(HISTORY_LAYOUT, groups_of(tuple(SPECIES_GROUPS), True, True))
