"""Tables of effective rates and their histories as text for people and as values for JSON."""

from __future__ import annotations

import math
from typing import TYPE_CHECKING, Any

from ..quantities import OBSERVABLES
from .helium_table_output import (
    fraction_columns,
    fraction_values,
    helium_lines,
    helium_values,
    kept_names,
)
from .output import aligned, atom_size, row

if TYPE_CHECKING:
    from ..distilled.fast import FastHistory
    from ..distilled.species import AtomName
    from ..distilled.stage import StageTable
    from ..distilled.table import EffectiveTable
    from ..history.setup import Setup

_SAMPLES_K = (
    25000.0,
    18000.0,
    13000.0,
    9000.0,
    6000.0,
    4000.0,
    3000.0,
    2000.0,
    1000.0,
    300.0,
    100.0,
    30.0,
)


def table_values(table: EffectiveTable) -> dict[str, Any]:
    """Collect what the summary of a table shows."""
    import numpy as np

    from ..distilled.about import level_names

    setup, proof = table.setup, table.certificate
    values: dict[str, Any] = {
        "title": setup.title,
        "setup_digest": setup.digest,
        "hydrogen_n_max": setup.hydrogen.n_max,
        "hydrogen_resolve_l_to": setup.hydrogen.highest_resolved,
        "helium": helium_values(table),
        "kept_levels": level_names(table.kept),
        "tolerance": table.tolerance,
        "radiation_temperature_range_k": list(table.radiation_range_k),
        "temperature_ratio_range": [math.exp(table.ratio_low), math.exp(table.ratio_high)],
        "cells": list(table.departure.shape[:2]),
        "n_coefficients": sum(a.size for a in (table.equilibrium, table.exchange, table.departure)),
        "rates": rate_values(table),
        "certificate": None,
    }
    if proof is not None:
        errors = np.abs(proof.history_error)
        values["certificate"] = {
            "n_points": proof.n_points,
            "largest_error": dict(zip(proof.rate_names, proof.largest_error, strict=True)),
            "rms_error": dict(zip(proof.rate_names, proof.rms_error, strict=True)),
            "largest_history_error": {
                name: float(np.nanmax(one)) if np.any(np.isfinite(one)) else math.nan
                for name, one in zip(proof.cosmologies, errors, strict=True)
            },
        }
    return values


def table_summary(table: EffectiveTable) -> str:
    """Return the summary of a table as lines of plain text."""
    values = table_values(table)
    low, high = values["radiation_temperature_range_k"]
    least, most = values["temperature_ratio_range"]
    n_x, n_y = values["cells"]
    lines = [
        table.setup.title or "(no title)",
        row(
            "effective rates",
            f"setup {values['setup_digest']}: hydrogen {atom_size(table.setup)}, kept "
            + ", ".join(values["kept_levels"]),
        ),
        *helium_lines(table),
        row("range", f"T_r = {low:g} to {high:g} K, T_m/T_r = {least:g} to {most:g}"),
        row(
            "size",
            f"{n_x} x {n_y} cells, {values['n_coefficients']} coefficients, tolerance "
            f"{table.tolerance:g} in each logarithm",
        ),
        "",
        *_rate_lines(values["rates"]),
        "",
        *_certificate_lines(values["certificate"]),
    ]
    return "\n".join(lines)


def rate_values(table: EffectiveTable) -> dict[str, dict[str, Any]]:
    """Collect logarithms to base ten of the rates at a few temperatures, T_m = T_r, by atom.

    Of each atom that the table holds: `temperature_k`, the names of the first kept `levels`, and
    over both `log10_recombination_cm3_per_s` and `log10_photoionization_per_s`.
    """
    import numpy as np

    from ..distilled.species import scales_of

    held: dict[AtomName, EffectiveTable | StageTable | None] = {
        "H I": table,
        "He I": table.helium,
        "He II": table.helium_ion,
    }
    values: dict[str, dict[str, Any]] = {}
    for name, part in held.items():
        if part is None:
            continue
        unit = scales_of(table.setup, name).energy
        low, high = (math.exp(x) * unit for x in (part.log_low, part.log_high))
        wanted = np.array([t for t in _SAMPLES_K if low <= t <= high] or [high])
        rates = table.effective_rates(wanted, wanted, name)
        names = kept_names(rates.kept_levels)[: 4 if name == "He I" else 3]
        logs = (rates.log_recombination, rates.log_photoionization)
        capture, photo = (one[:, : len(names)] / math.log(10.0) for one in logs)
        values[name] = {
            "temperature_k": wanted,
            "levels": names,
            "log10_recombination_cm3_per_s": capture,
            "log10_photoionization_per_s": photo,
        }
    return values


def _rate_lines(rates: dict[str, dict[str, Any]]) -> list[str]:
    """One block of lines for each atom; the name of the atom where there are several."""
    import numpy as np

    lines: list[str] = []
    for name, one in rates.items():
        levels = one["levels"]
        heads = (*(f"log A_{level}" for level in levels), *(f"log B_{level}" for level in levels))
        numbers = np.hstack(
            [one["log10_recombination_cm3_per_s"], one["log10_photoionization_per_s"]]
        )
        body = [
            (f"{kelvin:g}", *(f"{value:.4f}" for value in line))
            for kelvin, line in zip(one["temperature_k"], numbers, strict=True)
        ]
        head = "T_r = T_m (K)" if len(rates) == 1 else f"{name}: T_r = T_m (K)"
        lines += ["", *aligned([(head, *heads), *body], right=True)]
    return lines[1:]


def _certificate_lines(proof: dict[str, Any] | None) -> list[str]:
    if proof is None:
        return [row("certificate", "none; the errors were not measured")]
    worst = max(proof["largest_error"], key=lambda name: proof["largest_error"][name])
    lines = [
        row(
            "certificate",
            f"largest error of a logarithm {proof['largest_error'][worst]:.1e} ({worst}), at "
            f"{proof['n_points']} random points",
        )
    ]
    for name, error in proof["largest_history_error"].items():
        figure = f"{error:.1e}" if math.isfinite(error) else "not known"
        lines.append(row("error of x_e", f"{figure} against the full network ({name})"))
    return lines


def distilled_values(history: FastHistory, setup: Setup | None) -> dict[str, Any]:
    """Collect a history made from a table, whole."""
    seen = history.observables
    given: dict[str, Any] = {} if setup is None else {"setup_digest": setup.digest}
    return given | {
        "outcome": history.outcome.name,
        "ok": history.outcome.ok,
        "start_redshift": history.start_redshift,
        "n_steps": history.n_steps,
        "n_rejected": history.n_rejected,
        "frequency_error": history.frequency_error,
        "notes": list(history.notes),
        "observables": None
        if seen is None
        else {
            "last_scattering_redshift": seen.last_scattering_redshift,
            "sound_horizon_mpc": seen.sound_horizon_mpc,
            "damping_per_mpc": seen.damping_per_mpc,
        },
        "history": {
            "redshift": history.redshift,
            "free_electron_fraction": history.free_electron_fraction,
            "neutral_hydrogen_fraction": history.neutral_hydrogen_fraction,
            "matter_temperature_k": history.matter_temperature_k,
            "radiation_temperature_k": history.radiation_temperature_k,
            **fraction_values(history),
        },
    }


def distilled_summary(history: FastHistory) -> str:
    """Return the summary of a history made from a table as lines of plain text."""
    from ..history.samples import sample_rows

    seen = history.observables
    lines = [row("outcome", history.outcome.value)]
    if seen is not None:
        for name, form in (
            ("last_scattering_redshift", "{:.3f}"),
            ("sound_horizon_mpc", "{:.3f} Mpc (comoving)"),
            ("damping_per_mpc", "{:.6f} per Mpc (comoving)"),
        ):
            label, value = OBSERVABLES[name].label, getattr(seen, name)
            lines.append(row(label, form.format(value) if math.isfinite(value) else "not reached"))
    more, fractions = fraction_columns(history)
    head = ("z", "x_e", "x_HI", *more, "T_m (K)", "T_r (K)")
    body = [
        (
            f"{history.redshift[k]:.2f}",
            f"{history.free_electron_fraction[k]:.6e}",
            f"{history.neutral_hydrogen_fraction[k]:.6e}",
            *(f"{values[k]:.6e}" for values in fractions),
            f"{history.matter_temperature_k[k]:.6g}",
            f"{history.radiation_temperature_k[k]:.6g}",
        )
        for k in sample_rows(history.redshift, "hydrogen" if history.helium is None else "both")
    ]
    steps = (
        f"{history.n_steps} steps ({history.n_rejected} rejected), from Saha equilibrium at z = "
    )
    how = [row("integration", f"{steps}{history.start_redshift:.2f}")]
    if history.field is not None:
        error = f"{history.frequency_error:.1e} in x_e from the frequency step"
        how.append(row("field", f"{len(history.field.redshift)} spectra; {error}"))
    how += [row("note", text) for text in history.notes]
    return "\n".join([*lines, "", *aligned([head, *body], right=True), "", *how])
