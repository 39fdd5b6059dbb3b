"""A small history for tests of files and figures: invented numbers, nothing computed."""

from __future__ import annotations

import math

import numpy as np

from levelnet.atomic.levels import hydrogenic_levels
from levelnet.atomic.species import Hydrogen
from levelnet.background.cosmology import Cosmology
from levelnet.errors import Outcome
from levelnet.history.line_figures import LineFigures
from levelnet.history.result import (
    Channels,
    Diagnostics,
    History,
    Milestones,
    RadiationField,
    SpeciesPopulations,
)
from levelnet.history.setup import Grid, Setup

N_MAX = 5


def invented_setup(n_redshifts: int = 12) -> Setup:
    """An invented instrument's setup; the title has characters that text formats must survive."""
    return Setup(
        cosmology=Cosmology(67.9, 0.02241, 0.1425),
        hydrogen=Hydrogen(n_max=N_MAX),
        grid=Grid(redshift_start=1700.0, redshift_end=21.5, n_redshifts=n_redshifts),
        title='invented: "Lantern" array, \u03b1-test\nsecond line, # no comment',
    )


def invented_history(
    n_redshifts: int = 12,
    lines: tuple[str, ...] = ("2p-1s", "3p-1s"),
    notes: tuple[str, ...] = ("No reionization is included.", "b\u2081 is rounded\nto nothing", ""),
    field: RadiationField | None = None,
) -> History:
    """A history with random but physical-looking arrays; two milestones are NaN."""
    random = np.random.default_rng(20261201)
    z = np.exp(np.linspace(np.log(1701.0), np.log(22.5), n_redshifts)) - 1.0
    ionized = 2.3e-4 + 1.0 / (1.0 + np.exp(-(z - 1270.0) / 70.0)) * (1.0 - 2.4e-4)
    levels = hydrogenic_levels(N_MAX, "measured")

    def by(count: int) -> np.ndarray:
        return random.uniform(1e-12, 1.0, (n_redshifts, count))

    def shares(count: int) -> np.ndarray:
        values = by(count)
        return values / values.sum(axis=1, keepdims=True)

    populations = SpeciesPopulations(
        "H I", levels, by(len(levels)) * 1e-13, random.normal(0.0, 30.0, (n_redshifts, len(levels)))
    )
    ways = ("2s-1s", *lines)
    count = len(ways)
    zero = np.zeros(n_redshifts)
    of_field = () if field is None else (2.1e-13, 4.4e-14, 5e-2, 3.7e-5)
    return History(
        setup=invented_setup(n_redshifts),
        outcome=Outcome.CONVERGED,
        redshift=z,
        free_electron_fraction=ionized,
        ionized_hydrogen_fraction=ionized,
        neutral_hydrogen_fraction=1.0 / (1.0 + np.exp((z - 1270.0) / 70.0)),
        neutral_helium_fraction=zero + 1.0,
        singly_ionized_helium_fraction=zero,
        doubly_ionized_helium_fraction=zero,
        matter_temperature_k=2.7255 * (1.0 + z) ** 2 / (160.0 + z),
        radiation_temperature_k=2.7255 * (1.0 + z),
        hydrogen_density_cm3=1.9e-7 * (1.0 + z) ** 3,
        hubble_rate_per_s=1.2e-18 * (1.0 + z) ** 1.5,
        cosmic_time_s=5.5e17 * (1.0 + z) ** -1.5,
        optical_depth=np.maximum(0.0, (z / 1080.0) ** 14 * (1.0 - z[-1] / z)),
        visibility=5e-3 * np.exp(-(((z - 1080.0) / 90.0) ** 2)),
        species=(populations,),
        channels=Channels(ways, by(count), shares(count), shares(count)),
        lines=LineFigures(
            lines,
            *(by(len(lines)) * scale for scale in (1e8, 1e-8, 1.0, 1.0, 1e-3, 1.0, 1e-3, 1e-4)),
            *(by(len(lines)) * scale for scale in (1e-3, 30.0, 1e-2, 1e-2, 5.0, 9.0, 1e-2)),
        ),
        milestones=Milestones(1089.7, 1087.2, math.nan, 1274.3, math.nan, 5.1e12),
        diagnostics=Diagnostics(
            1688.5, 3.1e-7, 812, 23, 4127, 40, 5.4e-10, 1.2e-14, 3.3e4, *of_field
        ),
        notes=notes,
        field=field,
    )


def invented_field(
    redshift: tuple[float, ...] = (1400.0, 1200.0, 1000.0, 800.0, 600.0),
    frequency_step: float = 5e-4,
) -> RadiationField:
    """A field with a step at each Lyman line, wings, and free redshifting below; all invented.

    Between lines u is what the line above gave when the universe was smaller by the ratio of the
    photon energies; at a line it leads over to the line's own value, ln u = ((1600 - z)/250)^2,
    within a Lorentzian of width 1e-3 over frequency.
    """
    lines = np.array([0.75, 8.0 / 9.0, 15.0 / 16.0]) * 13.598286
    count = round(math.log(8.0 / 3.0) / frequency_step) + 1
    energy = np.geomspace(0.375, 1.0, count) * 13.598286

    def at_line(z: np.ndarray) -> np.ndarray:
        return (np.clip(1600.0 - z, 0.0, None) / 250.0) ** 2

    rows = []
    for z in redshift:
        above = np.searchsorted(lines, energy)
        emitted = lines[np.minimum(above, len(lines) - 1)]
        given = np.where(above < len(lines), at_line((1.0 + z) * emitted / energy - 1.0), 0.0)
        offset = np.min(np.abs(energy[:, None] / lines - 1.0), axis=1)
        share = 1.0 / (1.0 + (offset / 1e-3) ** 2)
        rows.append(share * at_line(np.full_like(energy, z)) + (1.0 - share) * given)
    return RadiationField(np.array(redshift), energy, np.array(rows))


def history_with_field() -> History:
    """An invented history that holds all that a result file can: the field too, coarse."""
    return invented_history(field=invented_field(frequency_step=5e-2))
