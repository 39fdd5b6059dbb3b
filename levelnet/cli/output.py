"""Results as text for people and as plain values for JSON."""

from __future__ import annotations

import dataclasses
import json
import math
from collections.abc import Callable, Sequence
from pathlib import Path
from typing import TYPE_CHECKING, Any, Literal

from ..constants import SECONDS_PER_YEAR
from ..quantities import OBSERVABLES
from .console import harmless
from .helium_output import helium_fraction_columns, helium_line_rows, helium_text, helium_values
from .line_output import line_rows, line_values

if TYPE_CHECKING:
    from ..history.result import Diagnostics, History, RadiationField
    from ..history.setup import Setup

_CHANNELS_SHOWN = 6


def print_result(
    as_json: bool,
    values: Callable[[], dict[str, Any]],
    text: Callable[[], str],
    *,
    file: Path | None = None,
    written: Sequence[Path] | None = None,
    seconds: float | None = None,
    time: str = "",
) -> None:
    """Print a result for programs or for people, with its file, what was written and the time.

    Parameters
    ----------
    as_json : bool
        JSON in place of text.
    values, text : callable
        Give the one and the other; only one of them is called.
    file : Path or None
        Where the result is.
    written : sequence of Path or None
        Files that the command made beside it.
    seconds : float or None, s
        How long the work took.
    time : str
        What people are told in place of `seconds`.
    """
    if as_json:
        more = {"file": file, "written": written, "seconds": seconds}
        print_json(values() | {name: one for name, one in more.items() if one is not None})
        return
    print(harmless(text()))  # titles and names come from files
    rows = [] if file is None else [("file", str(file))]
    rows += [("written", str(path)) for path in written or ()]
    if seconds is not None:
        rows.append(("time", time or time_text(seconds)))
    for label, said in rows:
        print(harmless(row(label, said)))


def print_json(values: object) -> None:
    """Print `values` as JSON; what is not a number becomes null, as JSON knows no NaN."""
    print(json.dumps(_plain(values), indent=2, allow_nan=False))


def _plain(value: Any) -> Any:
    if isinstance(value, dict):
        return {str(key): _plain(one) for key, one in value.items()}
    if isinstance(value, list | tuple):
        return [_plain(one) for one in value]
    if hasattr(value, "tolist"):  # arrays and numpy scalars
        return _plain(value.tolist())
    if isinstance(value, float) and not math.isfinite(value):
        return None
    return value if isinstance(value, str | int | float | bool | None) else str(value)


def plain_values(record: Any) -> Any:
    """Take records apart into plain mappings of their fields."""
    if dataclasses.is_dataclass(record):
        return {
            one.name: plain_values(getattr(record, one.name)) for one in dataclasses.fields(record)
        }
    return record


def size_text(memory_bytes: float) -> str:
    """Bytes as MB, GB or TB, in powers of 1000."""
    for unit, size in (("TB", 1e12), ("GB", 1e9)):
        if memory_bytes >= size:
            return f"{memory_bytes / size:.1f} {unit}"
    return f"{memory_bytes / 1e6:.0f} MB"


def time_text(seconds: float) -> str:
    """Seconds as a person says them."""
    if seconds < 120.0:
        return f"{seconds:.1f} s" if seconds < 10.0 else f"{seconds:.0f} s"
    if seconds < 7200.0:
        return f"{seconds / 60.0:.0f} min"
    return f"{seconds / 3600.0:.1f} h"


def history_values(history: History) -> dict[str, Any]:
    """Collect what the summary shows, under the names of the result's fields."""
    from ..history.samples import sample_rows

    marks, how, setup = history.milestones, history.diagnostics, history.setup
    rows = sample_rows(history.redshift, _atom(history))
    return {
        "title": setup.title,
        "setup_digest": setup.digest,
        "outcome": history.outcome.name,
        "ok": history.outcome.ok,
        "outcome_text": history.outcome.value,
        "hydrogen_n_max": setup.hydrogen.n_max,
        "hydrogen_resolve_l_to": setup.hydrogen.highest_resolved,
        "n_levels": {one.name: len(one.levels) for one in history.species},
        "n_redshifts": len(history.redshift),
        "milestones": {name: getattr(marks, name) for name in marks.__slots__},
        "samples": {
            name: getattr(history, name)[rows]
            for name in (
                "redshift",
                "free_electron_fraction",
                "neutral_hydrogen_fraction",
                "matter_temperature_k",
                "radiation_temperature_k",
            )
        },
        "line_figures": line_values(history, rows),
        "cumulative_channel_shares": dict(
            zip(history.channels.names, history.channels.cumulative_share[-1], strict=True)
        ),
        "diagnostics": {name: getattr(how, name) for name in how.__slots__},
        "helium": helium_values(history, rows),
        "field": field_values(history.field),
        "notes": list(history.notes),
    }


def field_values(field: RadiationField | None) -> dict[str, Any] | None:
    """Say how much of a field there is; its numbers are in the file."""
    if field is None:
        return None
    return {
        "n_spectra": len(field.redshift),
        "n_photon_energies": len(field.photon_energy_ev),
        "redshift_range": field.redshift[[0, -1]],
        "photon_energy_range_ev": field.photon_energy_ev[[0, -1]],
    }


def atom_size(setup: Setup) -> str:
    """Return highest n of hydrogen, and up to where it is resolved in l if not all the way."""
    n_max, top = setup.hydrogen.n_max, setup.hydrogen.highest_resolved
    return f"n_max = {n_max}" + (f", whole shells above n = {top}" if top < n_max else "")


def _helium_size(setup: Setup) -> str:
    """Highest n of helium, where it has levels."""
    return f"helium n_max = {setup.helium.n_max}, " if setup.helium_recombines else ""


def _atom(history: History) -> Literal["hydrogen", "both"]:
    """Whose recombination a summary shows."""
    return "hydrogen" if history.helium is None else "both"


def summary_text(history: History) -> str:
    """Return the summary of a history as lines of plain text."""
    setup = history.setup
    n_levels = sum(len(one.levels) for one in history.species)
    head = [
        setup.title or "(no title)",
        row(
            "setup",
            f"{setup.digest}: hydrogen {atom_size(setup)}, {_helium_size(setup)}{n_levels} levels, "
            f"lines {setup.lines.hydrogen}, z = {history.redshift[0]:g} to "
            f"{history.redshift[-1]:g} ({len(history.redshift)} outputs)",
        ),
        row("outcome", history.outcome.value),
        "",
    ]
    body = [*_milestone_lines(history), "", *_sample_lines(history), "", *_share_lines(history)]
    body += _helium_share_lines(history)
    if history.lines.names:
        from ..history.samples import sample_rows

        table = line_rows(history, sample_rows(history.redshift))
        body += ["", *aligned(table, right=True)]
    if of_helium := helium_line_rows(history):
        body += ["", *aligned(of_helium, right=True)]
    how = [*_diagnostic_lines(history), *_frequency_lines(history.diagnostics)]
    if helium := helium_text(history):
        how.append(row("helium", helium))
    return "\n".join([*head, *body, "", *how, *_field_lines(history.field), *_note_lines(history)])


def row(label: str, text: str) -> str:
    """Line of a summary."""
    return f"{label:<22}{text}"


def _milestone_lines(history: History) -> list[str]:
    marks = history.milestones
    age = marks.last_scattering_time_s / SECONDS_PER_YEAR
    years = marks.transition_duration_s / SECONDS_PER_YEAR
    last, peak, width = (
        OBSERVABLES[name].label
        for name in ("last_scattering_redshift", "visibility_peak_redshift", "visibility_width")
    )
    lines = (
        (last, marks.last_scattering_redshift, "{:.2f}", f"at {age:,.0f} years"),
        (peak, marks.visibility_peak_redshift, "z = {:.2f}", "of g(eta)"),
        (width, marks.visibility_width, "{:.2f}", "full width at half maximum in z"),
        ("half ionized", marks.half_ionized_redshift, "z = {:.2f}", "x_e = 0.5"),
        ("transition", years, "{:,.0f} years", "from x_e = 0.9 to 0.1"),
    )
    return [
        row(label, f"{form.format(value)}  ({what})" if math.isfinite(value) else "not reached")
        for label, value, form, what in lines
    ]


def _sample_lines(history: History) -> list[str]:
    from ..history.samples import sample_rows

    rows = sample_rows(history.redshift, _atom(history))
    helium = helium_fraction_columns(history)
    head = ("z", "x_e", "x_HI", *helium, "T_m (K)", "T_r (K)")
    body = [
        (
            f"{history.redshift[k]:.2f}",
            f"{history.free_electron_fraction[k]:.6e}",
            f"{history.neutral_hydrogen_fraction[k]:.6e}",
            *(f"{column[k]:.6e}" for column in helium.values()),
            f"{history.matter_temperature_k[k]:.6g}",
            f"{history.radiation_temperature_k[k]:.6g}",
        )
        for k in rows
    ]
    return aligned([head, *body], right=True)


def _share_lines(history: History) -> list[str]:
    channels = history.channels
    ranked = sorted(
        zip(channels.names, channels.cumulative_share[-1], strict=True), key=lambda one: -one[1]
    )
    if math.isnan(ranked[0][1]):
        return [row("recombined through", "nothing yet: hydrogen is in Saha equilibrium")]
    shown = [f"{name} {100.0 * share:.3f} %" for name, share in ranked[:_CHANNELS_SHOWN]]
    rest = ranked[_CHANNELS_SHOWN:]
    if rest:
        total = 100.0 * sum(share for _, share in rest)
        shown.append(f"{len(rest)} more {total:.3f} %")
    return [row("recombined through", ", ".join(shown))]


def _helium_share_lines(history: History) -> list[str]:
    from ..history.helium_through import through_text

    text = through_text(history)
    return [row("He I through", text)] if text else []


def _diagnostic_lines(history: History) -> list[str]:
    how = history.diagnostics
    nodes = (
        f"{how.nodes} nodes, error {how.interpolation_error:.1e}"
        if how.nodes
        else "direct, no interpolation"
    )
    return [
        row(
            "integration",
            f"{how.steps} steps ({how.rejected_steps} rejected), {how.evaluations} evaluations, "
            f"relative tolerance {history.setup.accuracy.relative:g}",
        ),
        row("reduced network", nodes),
        row(
            "Saha hand-over",
            f"z = {how.handover_redshift:.2f}, departure {how.handover_departure:.1e}",
        ),
        row("conservation error", f"{how.conservation_error:.1e}"),
        row(
            "slowest relaxation",
            f"{how.slowest_relaxation_hubble:.3g} Hubble rates (quasi-steady needs far above 1)",
        ),
    ]


def _frequency_lines(how: Diagnostics) -> list[str]:
    """Figures of a treatment that resolves the field in frequency; the others have none."""
    if how.frequency_step <= 0.0:
        return []
    return [
        row(
            "frequency step",
            f"{how.frequency_step:.2e} in ln nu, relative error of x_e from it "
            f"{how.frequency_error:.1e} (estimate)",
        ),
        row("photon number error", f"{how.photon_number_error:.1e} in a step, largest"),
        row("atom number error", f"{how.atom_number_error:.1e} in a step, largest"),
    ]


def _field_lines(field: RadiationField | None) -> list[str]:
    if field is None:
        return []
    z, energy = field.redshift, field.photon_energy_ev
    where = f"z = {z[0]:g} to {z[-1]:g}, {energy[0]:.2f} to {energy[-1]:.2f} eV"
    return [row("spectra of the field", f"{len(z)}, {where} ({len(energy)} photon energies)")]


def _note_lines(history: History) -> list[str]:
    return [row("note", text) for text in history.notes]


def aligned(rows: Sequence[Sequence[str]], right: bool = False) -> list[str]:
    """Lines of a table with columns of equal width, two blanks apart."""
    widths = [max(len(row[k]) for row in rows) for k in range(len(rows[0]))]
    pad = str.rjust if right else str.ljust
    return [
        "  ".join(pad(cell, w) for cell, w in zip(row, widths, strict=True)).rstrip()
        for row in rows
    ]
