"""What a run gives back: the ionization history, level populations, lines, and how it went."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from ..arrays import FloatArray, frozen_array
from ..atomic.helium_levels import HeliumLevels
from ..atomic.levels import LevelSet
from ..errors import InputError, Outcome, SolveError
from ..markup import html_table
from .helium_record import HeliumFigures
from .line_figures import LineFigures
from .samples import sample_rows
from .setup import Setup

if TYPE_CHECKING:
    import xarray

Levels = LevelSet | HeliumLevels


@dataclass(frozen=True, slots=True, eq=False)
class SpeciesPopulations:
    """Level populations of one species at every output redshift.

    Attributes
    ----------
    name : str
        The species: "H I", "He I", "He II".
    levels : LevelSet or HeliumLevels
        Quantum numbers, weights and energies, shape (n_levels,).
    population : ndarray, shape (n_redshift, n_levels), dimensionless
        Atoms in the level per hydrogen nucleus; below 1e-300 it is 0 by statement.
    log_departure : ndarray, shape (n_redshift, n_levels), dimensionless
        Natural logarithm of the departure coefficient b = x / x_Saha, with x_Saha the
        Saha-Boltzmann population at T_m with the actual n_e and n_ion. NaN where helium is held as
        it is (T_r below 1400 K), and only there, for the ground state too, since the ions are no
        longer followed; excited levels then have population 0.
    """

    name: str
    levels: Levels
    population: FloatArray
    log_departure: FloatArray

    def __post_init__(self) -> None:
        """Check shapes and make every array read-only."""
        shape = (len(self.population), len(self.levels))
        frozen_array(self, "population", shape)
        frozen_array(self, "log_departure", shape)


@dataclass(frozen=True, slots=True, eq=False)
class Channels:
    """How the recombined atoms reached the ground state.

    Attributes
    ----------
    names : tuple of str
        "2s-1s" (two photons), then the Lyman lines that exchange photons: "2p-1s", "3p-1s", ...
    net_rate_per_s : ndarray, shape (n_redshift, n_channels), s^-1
        Net transitions to the ground state per hydrogen nucleus.
    share : ndarray, shape (n_redshift, n_channels), dimensionless
        Each channel's part of the net rate at that redshift; sums to 1. NaN while hydrogen is in
        Saha equilibrium (its lag below a tenth of the relative accuracy), where the net rate is
        zero within rounding.
    cumulative_share : ndarray, shape (n_redshift, n_channels), dimensionless
        Each channel's part of all net recombinations since the start of the integration; sums to 1.
        NaN likewise.
    """

    names: tuple[str, ...]
    net_rate_per_s: FloatArray
    share: FloatArray
    cumulative_share: FloatArray

    def __post_init__(self) -> None:
        """Check shapes and make every array read-only."""
        shape = (len(self.share), len(self.names))
        for name in ("net_rate_per_s", "share", "cumulative_share"):
            frozen_array(self, name, shape)


@dataclass(frozen=True, slots=True, eq=False)
class RadiationField:
    """The radiation field around the Lyman lines, where the line treatment resolves it.

    Attributes
    ----------
    redshift : ndarray, shape (n_spectra,), dimensionless
        Where it is kept, descending: ends of steps, within half a step of output redshifts.
    photon_energy_ev : ndarray, shape (n_energies,), eV
        From half of Lyman-alpha to the Lyman limit, ascending.
    log_distortion : ndarray, shape (n_spectra, n_energies), dimensionless
        Natural logarithm of u, the occupation number over that of the blackbody at T_r.
    """

    redshift: FloatArray
    photon_energy_ev: FloatArray
    log_distortion: FloatArray

    def __post_init__(self) -> None:
        """Check shapes and make every array read-only."""
        shape = (len(self.redshift), len(self.photon_energy_ev))
        frozen_array(self, "redshift", shape[:1])
        frozen_array(self, "photon_energy_ev", shape[1:])
        frozen_array(self, "log_distortion", shape)
        if not (
            np.all(np.diff(self.redshift) < 0.0) and np.all(np.diff(self.photon_energy_ev) > 0.0)
        ):
            raise ValueError("RadiationField: redshift must descend, photon_energy_ev ascend")

    def to_xarray(self) -> xarray.Dataset:
        """The field over redshift and photon energy as an xarray Dataset (needs the extra)."""
        from .labelled import field_dataset

        return field_dataset(self)


@dataclass(frozen=True, slots=True)
class Milestones:
    """Numbers that sum up a history; NaN where the grid does not reach the event.

    All integrals run over the integrated range only, from the lowest output redshift up; there is
    no reionization in them. Definitions: g(eta) = (d tau/d eta) exp(-tau), eta conformal time.

    Attributes
    ----------
    last_scattering_redshift : float
        z_* where the optical depth from `redshift_end` is 1; NaN where x_e is still above 0.01 at
        `redshift_end`, since most of the optical depth then lies below.
    visibility_peak_redshift : float
        Where g(eta) peaks.
    visibility_width : float
        Full width at half maximum of g(eta), in redshift.
    half_ionized_redshift : float
        Where x_e = 0.5 (hydrogen).
    last_scattering_time_s : float
        Cosmic time at z_*, s.
    transition_duration_s : float
        Time from x_e = 0.9 to x_e = 0.1 (hydrogen), s.
    """

    last_scattering_redshift: float
    visibility_peak_redshift: float
    visibility_width: float
    half_ionized_redshift: float
    last_scattering_time_s: float
    transition_duration_s: float


@dataclass(frozen=True, slots=True)
class Diagnostics:
    """How the run went.

    Attributes
    ----------
    handover_redshift : float
        Where Saha equilibrium hands over to the integration.
    handover_departure : float
        Relative lag of the neutral fraction there behind Saha equilibrium; the integration starts
        with this lag, and with that of the matter temperature, already in.
    steps, rejected_steps, evaluations : int
        Counts of the integration.
    nodes : int
        Reductions of the network at Chebyshev nodes in ln T_r (0 in direct mode).
    interpolation_error : float
        Largest error, off the nodes, of the ln of any reduced rate that matters (0 in direct mode).
    conservation_error : float
        Largest relative imbalance of the populations at the output redshifts.
    slowest_relaxation_hubble : float
        Slowest relaxation rate of the kept levels over the Hubble rate, smallest over the outputs;
        the quasi-steady assumption needs it far above 1.
    photon_number_error, atom_number_error : float
        Largest relative imbalance of the photon number and of the atom number over all steps; 0
        where the line treatment carries no radiation field.
    frequency_step : float
        Step of the radiation field in ln(photon energy); 0 where there is none.
    frequency_error : float
        Relative error of x_e that this step leaves, an estimate; 0 where there is none, infinite
        where the coarser march behind it failed.
    """

    handover_redshift: float
    handover_departure: float
    steps: int
    rejected_steps: int
    evaluations: int
    nodes: int
    interpolation_error: float
    conservation_error: float
    slowest_relaxation_hubble: float
    photon_number_error: float = 0.0
    atom_number_error: float = 0.0
    frequency_step: float = 0.0
    frequency_error: float = 0.0


HISTORY_ARRAYS = (
    "free_electron_fraction",
    "ionized_hydrogen_fraction",
    "neutral_hydrogen_fraction",
    "neutral_helium_fraction",
    "singly_ionized_helium_fraction",
    "doubly_ionized_helium_fraction",
    "matter_temperature_k",
    "radiation_temperature_k",
    "hydrogen_density_cm3",
    "hubble_rate_per_s",
    "cosmic_time_s",
    "optical_depth",
    "visibility",
)
"""Arrays over the redshift, besides it."""


@dataclass(frozen=True, slots=True, eq=False)
class History:
    """One ionization history; every array has shape (n_redshift,), redshift descending.

    Attributes
    ----------
    setup : Setup
        What was asked.
    outcome : Outcome
        How it ended.
    redshift : ndarray, dimensionless
        Output redshifts, descending.
    free_electron_fraction : ndarray, dimensionless
        n_e / n_H, all hydrogen nuclei.
    ionized_hydrogen_fraction, neutral_hydrogen_fraction : ndarray, dimensionless
        Of hydrogen nuclei; both to full relative precision, neither formed as 1 - x.
    neutral_helium_fraction : ndarray, dimensionless
        Of helium nuclei.
    singly_ionized_helium_fraction : ndarray, dimensionless
        Of helium nuclei.
    doubly_ionized_helium_fraction : ndarray, dimensionless
        Of helium nuclei.
    matter_temperature_k, radiation_temperature_k : ndarray, K
        Temperatures.
    hydrogen_density_cm3 : ndarray, cm^-3
        All hydrogen nuclei.
    hubble_rate_per_s : ndarray, s^-1
        Expansion rate.
    cosmic_time_s : ndarray, s
        Time since the Big Bang.
    optical_depth : ndarray, dimensionless
        Thomson optical depth from `redshift_end` up to this redshift; no reionization.
    visibility : ndarray, Mpc^-1
        g(eta) = (d tau / d eta) exp(-tau) per comoving megaparsec.
    species : tuple of SpeciesPopulations
        Level populations.
    channels : Channels
        How atoms reached the ground state.
    lines : LineFigures
        Validity of the line treatment.
    milestones : Milestones
        Numbers that sum it up.
    diagnostics : Diagnostics
        How the run went.
    notes : tuple of str
        What a user must know before relying on the result.
    field : RadiationField or None
        The field at some of the output redshifts, where the line treatment resolves it.
    helium : HeliumFigures or None
        Channels and lines of helium, where it recombines.
    """

    setup: Setup
    outcome: Outcome
    redshift: FloatArray
    free_electron_fraction: FloatArray
    ionized_hydrogen_fraction: FloatArray
    neutral_hydrogen_fraction: FloatArray
    neutral_helium_fraction: FloatArray
    singly_ionized_helium_fraction: FloatArray
    doubly_ionized_helium_fraction: FloatArray
    matter_temperature_k: FloatArray
    radiation_temperature_k: FloatArray
    hydrogen_density_cm3: FloatArray
    hubble_rate_per_s: FloatArray
    cosmic_time_s: FloatArray
    optical_depth: FloatArray
    visibility: FloatArray
    species: tuple[SpeciesPopulations, ...]
    channels: Channels
    lines: LineFigures
    milestones: Milestones
    diagnostics: Diagnostics
    notes: tuple[str, ...] = ()
    field: RadiationField | None = None
    helium: HeliumFigures | None = None

    def __post_init__(self) -> None:
        """Check shapes and make every array read-only."""
        for name in ("redshift", *HISTORY_ARRAYS):
            frozen_array(self, name, (len(self.redshift),))

    def require_converged(self) -> None:
        """Raise SolveError, carrying this history, unless the outcome is CONVERGED."""
        if not self.outcome.ok:
            raise SolveError(self.outcome.value, self, self.outcome)

    def populations(self, species: str) -> FloatArray:
        """Populations per hydrogen nucleus of `species` ("H I"), shape (n_redshift, n_levels)."""
        return self._species(species).population

    def log_departures(self, species: str) -> FloatArray:
        """Natural log of the departure coefficients, shape (n_redshift, n_levels)."""
        return self._species(species).log_departure

    def levels(self, species: str) -> Levels:
        """Quantum numbers, weights and energies of the levels of `species`."""
        return self._species(species).levels

    def _species(self, name: str) -> SpeciesPopulations:
        for one in self.species:
            if one.name == name:
                return one
        known = ", ".join(f'"{one.name}"' for one in self.species)
        raise InputError(f'species "{name}": not in this history; known: {known or "none"}')

    def to_xarray(self) -> xarray.Dataset:
        """The result as an xarray Dataset (needs the xarray extra).

        Returns
        -------
        xarray.Dataset
            The arrays over redshift; populations, ln of departure coefficients and quantum numbers
            of each species ("population_h_i", ...); the channels of hydrogen; the radiation field,
            if there is one, over redshifts of its own. Each says `units` and `long_name`; the
            whole names title, setup and its digest, outcome, notes and the version of levelnet.
        """
        from .labelled import history_dataset

        return history_dataset(self)

    def __repr__(self) -> str:
        """One line: the range, the size, the outcome."""
        return (
            f"<History z = {self.redshift[0]:g} to {self.redshift[-1]:g}, "
            f"{len(self.redshift)} redshifts, hydrogen n_max = {self.setup.hydrogen.n_max}, "
            f"z_* = {self.milestones.last_scattering_redshift:.2f}: {self.outcome.value}>"
        )

    def _repr_html_(self) -> str:
        """Show a small table in a notebook."""
        rows = (
            (
                f"{self.redshift[k]:.1f}",
                f"{self.free_electron_fraction[k]:.6g}",
                f"{self.matter_temperature_k[k]:.6g}",
            )
            for k in sample_rows(self.redshift, "hydrogen" if self.helium is None else "both")
        )
        return html_table(repr(self)[1:-1], ("z", "x_e", "T_m (K)"), rows)
