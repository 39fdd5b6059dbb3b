"""The slow variables: their rates of change and the analytic Jacobian.

The variables are u = ln(x_HII/x_HI) and v = ln(T_m/T_r), the time is s = ln a. Then x_HII and x_HI
follow from u to full relative precision at both ends, an absolute error of u is a relative error of
either fraction, and the tiny difference of the two temperatures is carried as such:

    du/ds = -F / (H x_HII x_HI),        F the net recombinations per hydrogen nucleus and second,
    dv/ds = -1 + (Gamma/H) (e^-v - 1),  Gamma the Compton rate.

The heat that recombining electrons take along is left out (common practice). Its bound, a change of
T_m by (dx_e/dt) / [(1 + f_He + x_e)(Gamma + 2H)], is 2.6e-5 near z = 880 and 1e-5 to 2e-5 below
(``python -m benchmarks.choices``).
"""

from __future__ import annotations

import math
from dataclasses import dataclass, replace
from typing import Any, NamedTuple

import numpy as np

from .. import constants as const
from ..arrays import FloatArray
from ..atomic.physics import UNCHANGED, Scales
from ..atomic.two_photon import stimulated_two_photon_factor
from ..background.conditions import Conditions
from ..background.cosmology import Cosmology
from ..background.matter import compton_rate_per_s
from ..errors import InputError
from ..escape.blue_side import BlueSide, Past, log_red_side
from ..escape.treatment import LineTreatment, ResonanceLines
from ..escape.two_photon import with_two_photon
from ..network.coupling import GroundCoupling, with_line_factors
from ..network.gradient import FlowGradient, FlowSlopes, flow_slopes, net_flow_gradient
from ..network.reduced import Reduced
from ..network.solve import solve_kept
from ..numerics.stepping import Slopes
from .helium import HeliumEquations
from .helium import Rates as HeliumRates
from .ion_network import Around
from .local import Local

# No variable is ever so large: fractions would leave the doubles.
_ASTRAY = 700.0


class Background(NamedTuple):
    """What the cosmology says at one time.

    Attributes
    ----------
    radiation_temperature_k : float, K
        T_r.
    hydrogen_density_cm3 : float, cm^-3
        n_H.
    hubble_rate_per_s : float, s^-1
        H.
    hubble_slope : float, dimensionless
        d ln H / d ln a.
    """

    radiation_temperature_k: float
    hydrogen_density_cm3: float
    hubble_rate_per_s: float
    hubble_slope: float


class Linearized(NamedTuple):
    """The equations at one time and state, to first order.

    Attributes
    ----------
    local : Local
        Everything there.
    rate : ndarray, shape (n,)
        (du/ds, dv/ds), with helium (da/ds, db/ds) too.
    matrix : ndarray, shape (n, n)
        Derivatives of the rates by the state.
    drift : ndarray, shape (n,)
        By s.
    gradient : FlowGradient
        Of the net flow to the ground state by the rates.
    slopes : FlowSlopes
        Of it by the conditions.
    """

    local: Local
    rate: FloatArray
    matrix: FloatArray
    drift: FloatArray
    gradient: FlowGradient
    slopes: FlowSlopes


def ionized_and_neutral(log_odds: float) -> tuple[float, float]:
    """x_HII and x_HI from u, each to full relative precision."""
    if log_odds > 0.0:
        odds = math.exp(-log_odds)
        return 1.0 / (1.0 + odds), odds / (1.0 + odds)
    odds = math.exp(log_odds)
    return odds / (1.0 + odds), 1.0 / (1.0 + odds)


@dataclass(frozen=True, slots=True, eq=False)
class SlowEquations:
    """The right-hand side of one run.

    Attributes
    ----------
    cosmology : Cosmology
        The background.
    reduced : Reduced
        The interior of the atom.
    lines : ResonanceLines
        Lines to the ground state.
    treatment : LineTreatment
        How their photons escape.
    two_photon_rate_per_s : float, s^-1
        Spontaneous 2s-1s rate.
    two_photon_mode : str
        "spontaneous" or "stimulated"; "distorted" where the treatment holds the decay of 2s.
    scales : Scales
        What changed constants do to Compton scattering and to Saha equilibrium; rates, energies and
        lines above hold it already.
    escape_factor : ndarray, shape (n_lines,), dimensionless, or None
        Overrides of the escape of each line; None: none.
    past : Past or None
        What the run remembers of the lines' red sides, where the treatment sees blue sides.
    helium : HeliumEquations or None
        Where helium recombines too; None: it is neutral and inert.

    Notes
    -----
    The state is (u, v), with helium (u, v, a, b).
    """

    cosmology: Cosmology
    reduced: Reduced
    lines: ResonanceLines
    treatment: LineTreatment
    two_photon_rate_per_s: float
    two_photon_mode: str
    scales: Scales = UNCHANGED
    escape_factor: FloatArray | None = None
    past: Past | None = None
    helium: HeliumEquations | None = None

    def decay_rate_per_s(self, radiation_temperature_k: float) -> float:
        """2s-1s rate, stimulated by the blackbody if the setup says so."""
        rate = self.two_photon_rate_per_s
        if self.two_photon_mode == "spontaneous":
            return rate
        gap_ev = float(self.reduced.kept.energy_ev[0])
        return rate * float(stimulated_two_photon_factor(radiation_temperature_k, gap_ev))

    def background(self, log_scale: float) -> Background:
        """Background quantities at s = ln a."""
        redshift = math.expm1(-log_scale)
        return Background(
            float(self.cosmology.radiation_temperature_k(redshift)),
            float(self.cosmology.hydrogen_density_cm3(redshift)),
            float(self.cosmology.hubble_rate_per_s(redshift)),
            -float(self.cosmology.hubble_log_slope(redshift)),
        )

    def local(self, log_scale: float, state: FloatArray) -> Local:
        """Solve the kept levels at one time and state."""
        around = self.background(log_scale)
        ionized, neutral = ionized_and_neutral(float(state[0]))
        conditions = Conditions(
            around.radiation_temperature_k,
            around.radiation_temperature_k * math.exp(state[1]),
            around.hydrogen_density_cm3,
            around.hubble_rate_per_s,
            self.electron_fraction(state),
            ionized,
            neutral,
        )
        kept = self.reduced.kept
        rates = self.reduced.rates(
            conditions.radiation_temperature_k, conditions.matter_temperature_k
        )
        coupling = with_two_photon(
            self.line_coupling(conditions, self._blue_side(log_scale, around)),
            kept,
            conditions,
            self.two_photon_rate_per_s,
            self.two_photon_mode,
        )
        return Local(conditions, rates, coupling, solve_kept(kept, rates, coupling, conditions))

    def electron_fraction(self, state: FloatArray) -> float:
        """n_e/n_H (dimensionless) of a state."""
        ionized, _ = ionized_and_neutral(float(state[0]))
        return ionized + self.helium_electrons(state)

    def helium_electrons(self, state: FloatArray) -> float:
        """Electrons of helium per hydrogen nucleus (dimensionless) of a state."""
        if self.helium is None:
            return 0.0
        return self.cosmology.helium_ratio() * self.helium.fractions(state[2:]).electrons

    def _blue_side(self, log_scale: float, around: Background) -> BlueSide | None:
        return None if self.past is None else self.past.blue_side(log_scale, around.hubble_slope)

    def longest_step(self, log_scale: float) -> float:
        """No step from here in ln a may be longer, or its end would need what lies inside it."""
        own = math.inf if self.past is None else self.past.longest_step
        if self.helium is None:
            return own
        radiation_k = self.cosmology.radiation_temperature_k(math.expm1(-log_scale))
        return min(own, self.helium.longest_step(float(radiation_k)))

    def forgetful(self) -> SlowEquations:
        """The same with nothing remembered yet of lines."""
        helium = None if self.helium is None else self.helium.forgetful()
        past = None if self.past is None else self.past.until(0)
        return replace(self, past=past, helium=helium)

    def remember(self, log_scale: float, state: FloatArray) -> None:
        """Keep what an accepted step sends to the lines below, if the treatment asks for it."""
        if self.helium is not None:
            self.helium.remember(self.helium_around(log_scale, state), state[2:])
        if self.past is None:
            return
        here = self.local(log_scale, state)
        depth = here.coupling.validity.get("optical_depth")
        if depth is None:
            raise InputError(
                f'line treatment "{self.treatment.name}": it sees_blue_side, so validity must hold '
                '"optical_depth", one value per open line'
            )
        blue = self.past.blue_side(log_scale, 0.0).log_distortion
        red = log_red_side(*self.line_state(here), depth, blue)
        self.past.remember(log_scale, red)

    def line_state(self, here: Local) -> tuple[FloatArray, FloatArray]:
        """Ln departure of each upper level from Boltzmann at T_r, and line energy over k T_r."""
        departure = here.solution.log_population - here.solution.log_boltzmann
        kt = const.BOLTZMANN_EV_K * here.conditions.radiation_temperature_k
        return departure[self.lines.upper], self.lines.energy_ev / kt

    def line_coupling(self, conditions: Conditions, blue: BlueSide | None = None) -> GroundCoupling:
        """Coupling of the lines alone, without the two-photon channel."""
        kept = self.reduced.kept
        if blue is None:
            coupling = self.treatment.couple(self.lines, kept, conditions)
        else:
            seeing: Any = self.treatment  # it asked for a past, so it takes the blue side
            coupling = seeing.couple(self.lines, kept, conditions, blue)
        if self.escape_factor is None:
            return coupling
        return with_line_factors(coupling, self.lines.upper, self.escape_factor)

    def rate(self, log_scale: float, state: FloatArray) -> FloatArray:
        """(du/ds, dv/ds), with helium (da/ds, db/ds) too; NaN where a trial step is far off."""
        if np.abs(state).max() > _ASTRAY:
            return np.full(len(state), np.nan)
        here = self.local(log_scale, state)
        rate = self._rate_of(here, state)
        if self.helium is None:
            return rate
        around = self.helium_around(log_scale, state)
        return np.append(rate, self.helium.rate(around, state[2:]))

    def _rate_of(self, here: Local, state: FloatArray) -> FloatArray:
        c = here.conditions
        return np.array(
            [
                -here.solution.net_flow
                / (c.hubble_rate_per_s * c.ionized_fraction * c.ground_fraction),
                -1.0 + self._compton_per_hubble(c) * math.expm1(-state[1]),
            ]
        )

    def helium_around(self, log_scale: float, state: FloatArray) -> Around:
        """What helium sees at one time and state."""
        around, ratio = self.background(log_scale), self.cosmology.helium_ratio()
        return Around(
            around.radiation_temperature_k,
            around.radiation_temperature_k * math.exp(state[1]),
            ratio * around.hydrogen_density_cm3,
            around.hubble_rate_per_s,
            self.electron_fraction(state) / ratio,
            around.hubble_slope,
            around.hydrogen_density_cm3 * ionized_and_neutral(float(state[0]))[1],
            log_scale,
        )

    def _helium_rates(self, log_scale: float, state: FloatArray) -> HeliumRates:
        assert self.helium is not None
        return self.helium.rates(self.helium_around(log_scale, state), state[2:])

    def jacobian(self, log_scale: float, state: FloatArray) -> tuple[FloatArray, FloatArray]:
        """Derivatives of the rates by the state, shape (n, n), and by s, shape (n,)."""
        here = self.linearized(log_scale, state)
        return here.matrix, here.drift

    def slopes(self, log_scale: float, state: FloatArray) -> Slopes:
        """The rates with the derivatives of `jacobian`."""
        here = self.linearized(log_scale, state)
        return Slopes(here.rate, here.matrix, here.drift)

    def linearized(self, log_scale: float, state: FloatArray) -> Linearized:
        """Rates, their slopes, and what the net flow hangs on, at one time and state."""
        here = self.local(log_scale, state)
        gradient = net_flow_gradient(here.rates, here.coupling, here.solution)
        slopes = flow_slopes(
            self.reduced.kept, here.rates, here.coupling, here.conditions, gradient
        )
        c, flow = here.conditions, here.solution.net_flow
        hubble_slope = self.background(log_scale).hubble_slope
        scale = -1.0 / (c.hubble_rate_per_s * c.ionized_fraction * c.ground_fraction)
        by_odds, by_time = self._flow_derivatives(slopes, c, flow, hubble_slope)
        if here.coupling.excess_by_time is not None:
            by_time += float(gradient.excess @ here.coupling.excess_by_time)
        compton = self._compton_per_hubble(c)
        cooling = compton * math.expm1(-state[1])
        # Rows of u and v: by ln n_e, and by u and v with n_e held.
        helium = self.cosmology.helium_ratio()
        share = (1.0 + helium) / (1.0 + helium + c.electron_fraction)
        by_electrons = np.array([scale * slopes.ln_electron_fraction, cooling * share])
        own = np.array(
            [
                [scale * by_odds, scale * slopes.ln_matter_temperature],
                [0.0, -compton * math.exp(-state[1])],
            ]
        )
        drift = np.array([scale * by_time, cooling * (-4.0 - hubble_slope)])
        rate = self._rate_of(here, state)
        electrons = self.electrons_by(c, state)
        if self.helium is None:
            matrix = own + np.outer(by_electrons, electrons)
            return Linearized(here, rate, matrix, drift, gradient, slopes)
        found = self._helium_rates(log_scale, state)
        matrix = np.zeros((4, 4))
        matrix[:2, :2], matrix[2:, 2:] = own, found.by_own
        matrix[2:, 1] = found.by_matter
        # ln x_HI falls by x_HII per unit of u.
        matrix[2:, 0] = -c.ionized_fraction * found.by_neutral_hydrogen
        matrix += np.outer(np.append(by_electrons, found.by_electrons), electrons)
        return Linearized(
            here,
            np.append(rate, found.rate),
            matrix,
            np.append(drift, found.by_time),
            gradient,
            slopes,
        )

    def electrons_by(self, c: Conditions, state: FloatArray) -> FloatArray:
        """Derivatives of ln n_e by the state, dimensionless."""
        hydrogen = c.ionized_fraction * c.ground_fraction / c.electron_fraction
        if self.helium is None:
            return np.array([hydrogen, 0.0])
        share = self.cosmology.helium_ratio() / c.electron_fraction
        helium = share * self.helium.fractions(state[2:]).electrons_by
        return np.array([hydrogen, 0.0, *helium])

    def _flow_derivatives(
        self, slopes: FlowSlopes, c: Conditions, flow: float, hubble_slope: float
    ) -> tuple[float, float]:
        """Derivatives of F, less what the prefactor 1/(H x_HII x_HI) takes, by u and by s."""
        by_odds = c.ground_fraction * (slopes.ln_ionized_fraction - flow) - c.ionized_fraction * (
            slopes.ln_ground_fraction - flow
        )
        by_time = (
            -slopes.ln_radiation_temperature
            - slopes.ln_matter_temperature
            - 3.0 * slopes.ln_hydrogen_density
            + hubble_slope * (slopes.ln_hubble_rate - flow)
        )
        return by_odds, by_time

    def _compton_per_hubble(self, c: Conditions) -> float:
        rate = compton_rate_per_s(
            c.radiation_temperature_k, c.electron_fraction, self.cosmology.helium_ratio()
        )
        return float(rate) * self.scales.compton_rate / c.hubble_rate_per_s
