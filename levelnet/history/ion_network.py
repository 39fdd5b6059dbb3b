"""The levels of one ion of helium at one time: how fast it recombines, and what that hangs on."""

from __future__ import annotations

import math
from abc import ABC, abstractmethod
from dataclasses import dataclass
from typing import Generic, NamedTuple, TypeVar

from ..arrays import FloatArray
from ..background.conditions import Conditions
from ..escape.helium_lines import HeliumGroundLines
from ..escape.helium_shares import with_factors
from ..escape.helium_treatment import HeliumTreatment, Seen
from ..escape.treatment import LineTreatment, ResonanceLines
from ..network.coupling import GroundCoupling, with_decay, with_line_factors
from ..network.gradient import FlowGradient, flow_slopes, net_flow_gradient
from ..network.reduced import Reduced
from ..network.solve import log_boltzmann_populations, solve_kept
from ..numerics.chebyshev import ChebyshevSeries
from .local import Local

Lines = TypeVar("Lines", bound=ResonanceLines)
Treatment = TypeVar("Treatment")


class Around(NamedTuple):
    """What helium needs to know of its surroundings.

    Attributes
    ----------
    radiation_temperature_k, matter_temperature_k : float, K
        T_r and T_m.
    helium_density_cm3, hubble_rate_per_s : float
        n_He and H.
    electrons_per_helium : float
        n_e/n_He.
    hubble_slope : float
        d ln H/d ln a.
    neutral_hydrogen_cm3 : float, cm^-3
        n_HI; of no account to Saha equilibrium.
    log_scale : float
        ln a, to which the run's memory of the lines is referred.
    """

    radiation_temperature_k: float
    matter_temperature_k: float
    helium_density_cm3: float
    hubble_rate_per_s: float
    electrons_per_helium: float
    hubble_slope: float
    neutral_hydrogen_cm3: float = 0.0
    log_scale: float = 0.0


class Flow(NamedTuple):
    """Net recombinations per nucleus and second, with their derivatives.

    Attributes
    ----------
    value : float, s^-1
        F.
    by_electrons, by_ion, by_ground, by_matter : float, s^-1
        By ln of n_e, of both fractions, and of T_m.
    by_time : float, s^-1
        By ln a with the state held, less F d ln H/d ln a, which the prefactor 1/H takes.
    by_neutral_hydrogen : float, s^-1
        By ln n_HI.
    """

    value: float
    by_electrons: float
    by_ion: float
    by_ground: float
    by_matter: float
    by_time: float
    by_neutral_hydrogen: float


@dataclass(frozen=True, slots=True, eq=False)
class IonNetwork(ABC, Generic[Lines, Treatment]):
    """The levels of one ion stage and how they reach its ground state.

    Attributes
    ----------
    reduced : Reduced
        Its interior.
    lines : ResonanceLines, of He I HeliumGroundLines
        Lines to the ground state.
    treatment : LineTreatment, of He I HeliumTreatment
        How their photons escape.
    decay : int
        Position of the kept level that decays by two photons.
    decay_rate_per_s : float, s^-1
        Its spontaneous rate.
    stimulation : ChebyshevSeries or None
        Ln of the factor by which the blackbody speeds it up, over ln T_r; None: not at all.
    escape_factor : ndarray, shape (n_lines,), dimensionless, or None
        Overrides of the escape of each line; None: none.
    """

    reduced: Reduced
    lines: Lines
    treatment: Treatment
    decay: int
    decay_rate_per_s: float
    stimulation: ChebyshevSeries | None = None
    escape_factor: FloatArray | None = None

    def solve(self, conditions: Conditions, seen: Seen | None = None) -> Local:
        """Kept levels at these conditions; densities and fractions are those of the element.

        `seen` is for He I alone: what its lines see of hydrogen and of each other.
        """
        kept = self.reduced.kept
        rates = self.reduced.rates(
            conditions.radiation_temperature_k, conditions.matter_temperature_k
        )
        coupling = self._coupling(conditions, seen)
        return Local(conditions, rates, coupling, solve_kept(kept, rates, coupling, conditions))

    @abstractmethod
    def line_coupling(self, conditions: Conditions, seen: Seen | None) -> GroundCoupling:
        """Coupling of the lines to the ground state alone, overrides of their escape included."""

    def _coupling(self, conditions: Conditions, seen: Seen | None) -> GroundCoupling:
        lines = self.line_coupling(conditions, seen)
        radiation_k = conditions.radiation_temperature_k
        log_boltzmann = log_boltzmann_populations(
            self.reduced.kept, radiation_k, conditions.ground_fraction
        )
        here = math.exp(float(log_boltzmann[self.decay]))
        rate, slope = self.decay_at(radiation_k)
        return with_decay(lines, self.decay, rate, slope, here)

    def decay_at(self, radiation_temperature_k: float) -> tuple[float, float]:
        """Rate of the two-photon decay at T_r, s^-1, and its d ln/d ln T_r."""
        if self.stimulation is None:
            return self.decay_rate_per_s, 0.0
        value, slope = self.stimulation.evaluate(math.log(radiation_temperature_k))
        return self.decay_rate_per_s * math.exp(float(value[0])), float(slope[0])

    @staticmethod
    def conditions(around: Around, ion: float, ground: float) -> Conditions:
        """Give conditions of a stage with these fractions of ions and of ground states."""
        return Conditions(
            around.radiation_temperature_k,
            around.matter_temperature_k,
            around.helium_density_cm3,
            around.hubble_rate_per_s,
            around.electrons_per_helium,
            ion,
            ground,
        )

    def net_flow(
        self, around: Around, ion: float, ground: float, seen: Seen | None = None
    ) -> float:
        """Net recombinations per nucleus and second."""
        return self.solve(self.conditions(around, ion, ground), seen).solution.net_flow

    def flow(self, around: Around, ion: float, ground: float, seen: Seen | None = None) -> Flow:
        """Net recombinations and their derivatives."""
        conditions = self.conditions(around, ion, ground)
        here = self.solve(conditions, seen)
        gradient = net_flow_gradient(here.rates, here.coupling, here.solution)
        slopes = flow_slopes(self.reduced.kept, here.rates, here.coupling, conditions, gradient)
        value = here.solution.net_flow
        by_time = (
            -slopes.ln_radiation_temperature
            - slopes.ln_matter_temperature
            - 3.0 * slopes.ln_hydrogen_density
            + around.hubble_slope * (slopes.ln_hubble_rate - value)
        )
        by_continuum, by_excess, excess_by_time = _surroundings(here.coupling, gradient)
        by_time += excess_by_time - (3.0 + around.hubble_slope) * by_continuum
        return Flow(
            value,
            slopes.ln_electron_fraction,
            slopes.ln_ionized_fraction,
            slopes.ln_ground_fraction,
            slopes.ln_matter_temperature,
            by_time,
            by_continuum + by_excess,
        )


@dataclass(frozen=True, slots=True, eq=False)
class NeutralHelium(IonNetwork[HeliumGroundLines, HeliumTreatment]):
    """He I, whose lines meet neutral hydrogen and light one another."""

    def line_coupling(self, conditions: Conditions, seen: Seen | None) -> GroundCoupling:
        """Coupling of the lines to 1 1S alone; they see something always."""
        assert seen is not None
        kept = self.reduced.kept
        return with_factors(self.treatment, self.lines, kept, conditions, seen, self.escape_factor)


@dataclass(frozen=True, slots=True, eq=False)
class HeliumIon(IonNetwork[ResonanceLines, LineTreatment]):
    """He II, whose lines are treated as those of hydrogen and see the blackbody."""

    def line_coupling(self, conditions: Conditions, seen: Seen | None) -> GroundCoupling:
        """Coupling of the lines to 1s alone; they see nothing of other atoms."""
        assert seen is None
        lines = self.treatment.couple(self.lines, self.reduced.kept, conditions)
        if self.escape_factor is None:
            return lines
        return with_line_factors(lines, self.lines.upper, self.escape_factor)


def _surroundings(coupling: GroundCoupling, gradient: FlowGradient) -> tuple[float, float, float]:
    """Of a flow: by ln(n_HI/H) inside lines; by ln n_HI between them; by ln a of their fields."""
    inside, between, time = (
        coupling.slope_continuum,
        coupling.excess_by_continuum,
        coupling.excess_by_time,
    )
    return (
        0.0 if inside is None else float((gradient.loss * inside).sum()),
        0.0 if between is None else float(gradient.excess @ between),
        0.0 if time is None else float(gradient.excess @ time),
    )
