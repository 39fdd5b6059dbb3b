"""Numbers as a page writes them, and the sections that every result has."""

from __future__ import annotations

import math
import re
import textwrap
from collections.abc import Iterable

import numpy as np

from ...background.parameters import helium_mass_fraction
from ...errors import Outcome
from ...history.result import Channels, RadiationField
from ...history.setup import Setup
from ...quantities import OBSERVABLES
from ...studies.requirement import Finding
from .content import UNKNOWN, Block, Facts, Listing, Origin, Section, Statements

_LIBRARIES = ("numpy", "scipy", "numba", "h5py")
_NUMBERS = re.compile(r"\[\n((?:    [-+.0-9e]+,\n)+)\]")  # an array, a number a line
_WIDTH = 88
SPOKEN = 3
"""How many of a ranking a text alternative tells."""
_LONGEST_SETUP = 8000  # characters: an expansion table may stand inside


def one_line(text: str) -> str:
    """Fold a text that a user wrote into one line."""
    return " ".join(text.split())


def sentence(text: str) -> str:
    """Make a sentence of a text; a symbol such as x_e at its beginning stays what it is."""
    first = text.split(maxsplit=1)[0]
    return f"{text if '_' in first else text[0].upper() + text[1:]}."


def study_headline(outcome: Outcome, open_question: str) -> tuple[bool | None, str, str]:
    """How a study ended: whether it may be used, the sentence, and the word before it.

    Parameters
    ----------
    outcome : Outcome
        Of the histories behind it, all together.
    open_question : str
        What they do not tell of what was asked; empty where they do.
    """
    if not outcome.ok:
        return False, outcome.value, ""
    histories = f"every history {outcome.value}"
    if not open_question:
        return True, histories, ""
    return None, f"{histories}, but {open_question}", "Question left open"


def number(value: float, form: str = ".6g", unit: str = "", absent: str = "not reached") -> str:
    """Format a number; NaN has no value: `absent` says why, the outputs not reaching it if not."""
    if not math.isfinite(value):
        return absent
    return f"{value:{form}} {unit}".rstrip()


def signed_percent(value: float) -> str:
    """Write a relative difference in per cent, with its sign."""
    return f"{100.0 * value:+.3g} %" if math.isfinite(value) else "not known"


def unit_text(unit: str) -> str:
    """Write a unit; that of pure numbers is nothing."""
    return "" if unit == "1" else unit


def observable_label(name: str) -> str:
    """Name of an observable in a row of its own."""
    return OBSERVABLES[name].label if name in OBSERVABLES else name


def asked_section(prefix: str, setup: Setup, more: tuple[tuple[str, str], ...] = ()) -> Section:
    """What was asked: the choices that decide most.

    Parameters
    ----------
    prefix : str
        Of the chapter.
    setup : Setup
        The setup.
    more : tuple of (str, str)
        What was asked besides.
    """
    universe, grid, lines = setup.cosmology, setup.grid, setup.lines
    rows = [
        ("Hubble constant", f"{universe.hubble_km_s_mpc:g} km/s/Mpc"),
        ("baryons, Omega h^2", f"{universe.baryon_density_h2:g}"),
        ("baryons and dark matter, Omega h^2", f"{universe.matter_density_h2:g}"),
        ("background today", f"{universe.cmb_temperature_k:g} K"),
        ("helium by mass", f"{helium_mass_fraction(universe):.6g}"),
        ("neutrino species", f"{universe.effective_neutrinos:g}"),
        ("hydrogen", _atom(setup)),
        ("helium", _helium(setup)),
        ("Lyman lines", f"{lines.hydrogen}; open: {lines.lyman_lines}"),
        ("2s-1s decay", f"{lines.two_photon}, {setup.two_photon_rate_per_s:g} per s"),
        ("redshifts", f"{grid.redshift_start:g} to {grid.redshift_end:g}"),
        ("accuracy", f"{setup.accuracy.relative:g} (relative)"),
        ("setup digest", setup.digest),
    ]
    return Section(f"{prefix}-asked", "What was asked", (Facts((*rows, *more)),))


def _atom(setup: Setup) -> str:
    top, n_max = setup.hydrogen.highest_resolved, setup.hydrogen.n_max
    shells = f", whole shells above n = {top}" if top < n_max else ", every l"
    return f"n_max = {n_max}{shells}, {setup.hydrogen.energies} energies"


def _helium(setup: Setup) -> str:
    if not setup.helium_recombines:
        return "neutral and inert"
    lines = setup.lines.helium or "sobolev"
    return f"n_max = {setup.helium.n_max}, lines {lines}, He II by {setup.helium.helium_ion}"


def trust_section(prefix: str, blocks: tuple[Block, ...], notes: tuple[str, ...]) -> Section:
    """How far to trust it: warnings and notes first, then the figures behind them."""
    said = Statements(tuple(one_line(one) for one in notes))
    return Section(f"{prefix}-trust", "How far to trust it", (said, *blocks))


def origin_section(prefix: str, origin: Origin) -> Section:
    """What made the file."""
    rows = [
        ("file", origin.name),
        ("layout", f"{origin.text('layout')}, version {origin.text('layout_version')}"),
        ("levelnet", origin.text("levelnet_version")),
        *((name, origin.text(f"{name}_version")) for name in _LIBRARIES),
        ("constants", origin.text("codata_edition")),
        ("setup digest", origin.text("setup_digest")),
        ("digest of the content", origin.text("digest")),
    ]
    blocks: list[Block] = [Facts(tuple(one for one in rows if one[1] != UNKNOWN))]
    if "setup" in origin.attributes:  # a sweep has one for each case
        blocks.append(_whole_setup(origin.text("setup")))
    checksums = Listing(
        "Atomic tables shipped with that version, and their sha256",
        origin.text("table_checksums"),
    )
    return Section(f"{prefix}-origin", "Where it comes from", (*blocks, checksums))


def _whole_setup(toml: str) -> Listing:
    text = _NUMBERS.sub(_wrapped, toml)
    if len(text) > _LONGEST_SETUP:
        text = f"{text[:_LONGEST_SETUP]}\n# cut here; the result file holds all of it"
    return Listing("The whole setup as TOML, defaults included", text.rstrip("\n"))


def _wrapped(array: re.Match[str]) -> str:
    """Several numbers of an array of TOML in each line, so that a long list reads as one."""
    numbers = " ".join(array[1].split()).removesuffix(",")
    filled = textwrap.fill(numbers, _WIDTH, initial_indent="    ", subsequent_indent="    ")
    return f"[\n{filled},\n]"


def short_name(target: str) -> str:
    """Head of a column of a target."""
    return OBSERVABLES[target].short if target in OBSERVABLES else target


def limit_text(one: Finding) -> str:
    """Head of a column of a demand."""
    return f"{short_name(one.name)}, at most {one.limit:g} {one.unit}"


def largest_said(what: str, pairs: Iterable[tuple[str, float]]) -> str:
    """Say the largest of some numbers with their names; nothing where all are 0."""
    ranked = sorted((one for one in pairs if one[1] != 0.0), key=lambda one: -abs(one[1]))
    if not ranked:
        return ""
    shown = ", ".join(f"{name} {value:+.3g}" for name, value in ranked[:SPOKEN])
    return f"Largest {what}: {shown}."


def most_through(channels: Channels) -> str:
    """Say which channel most atoms took; nothing where none has recombined."""
    if math.isnan(float(channels.cumulative_share[-1].max())):
        return ""
    first = int(np.argmax(channels.cumulative_share[-1]))
    share = 100.0 * channels.cumulative_share[-1, first]
    return f"Most atoms, {share:.2f} %, went through {channels.names[first]}."


def spectrum_said(field: RadiationField) -> tuple[str, str]:
    """Title and text alternative of the figure of a field."""
    return "Spectrum of the radiation field", (
        "Occupation number of photons over that of the blackbody, against photon energy from half "
        "of Lyman-alpha to the Lyman limit, and close to Lyman-alpha, at a few redshifts. "
        f"{largest_distortion(field)}"
    )


def largest_distortion(field: RadiationField) -> str:
    """Say where a field differs most from the blackbody."""
    row, column = np.unravel_index(np.argmax(field.log_distortion), field.log_distortion.shape)
    return (
        f"Its largest logarithm is {field.log_distortion[row, column]:.3g}, at "
        f"{field.photon_energy_ev[column]:.3f} eV and z = {field.redshift[row]:.0f}."
    )
