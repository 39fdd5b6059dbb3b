"""Helium among the slow variables: its two ionizations, their rates of change and derivatives.

The variables are a = ln[(x_HeII + x_HeIII)/x_HeI] and b = ln(x_HeIII/x_HeII), so that every
fraction follows to full relative precision. With F_1 and F_2 the net recombinations to HeI and to
HeII per helium nucleus and second, and y = 1 - x_HeI,

    da/ds = -F_1/(H x_HeI y),
    db/ds = -[F_2 (1/x_HeIII + 1/x_HeII) - F_1/x_HeII]/H.

Where the second ionization is in Saha equilibrium, b is pulled to its value there so fast that it
stays within 1e-7 of it; so it is in any case once x_HeIII is below 4e-18 of x_HeII, where the
levels of He II keep it 3e-3 (relative) above Saha equilibrium. Below T_r = 1400 K both stand still.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Any, NamedTuple

import numpy as np

from .. import constants as const
from ..arrays import FloatArray
from ..atomic.detailed_balance import log_saha_factor
from ..background.conditions import Conditions
from ..escape.blue_side import log_red_side
from ..escape.helium_continuum import continuum_depth
from ..escape.helium_past import HeliumPast
from ..escape.helium_treatment import HeliumTreatment, Seen
from ..escape.treatment import LineTreatment, ResonanceLines
from ..network.coupling import GroundCoupling, with_decay
from ..network.gradient import FlowGradient, flow_slopes, net_flow_gradient
from ..network.reduced import Reduced
from ..network.solve import log_boltzmann_populations, solve_kept
from .local import Local

COLDEST_K = 1400.0
"""T_r below which helium is held as it is, in K: x_HeII is below 1e-9 and falls no further."""

# Pull to Saha equilibrium in Hubble rates, and ln of x_HeIII/x_HeII between which it takes over
# from the levels of He II, which would only ask for short steps.
_PULL, _GONE, _FADING = 1e9, -50.0, -40.0
# An ion whose share has this ln may be less exact, by a factor whose ln is at most the second.
_RARE, _SLACK = math.log(1e-6), math.log(1e3)
# From so far above COLDEST_K, in ln T_r, rates fade to nothing.
_EBB = 0.05
ION_WEIGHT = 2.0  # of He+ in its ground state


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


class HeliumFractions(NamedTuple):
    """Of helium nuclei, each to full relative precision, and what they are made of.

    Attributes
    ----------
    neutral, single, double : float
        x_HeI, x_HeII, x_HeIII.
    charged : float
        y.
    double_share : float
        x_HeIII/y.
    """

    neutral: float
    single: float
    double: float
    charged: float
    double_share: float

    @property
    def electrons(self) -> float:
        """Electrons per helium nucleus."""
        return self.single + 2.0 * self.double

    @property
    def electrons_by(self) -> FloatArray:
        """Derivatives of `electrons` by a and b."""
        mixed = self.single * self.double / self.charged
        return np.array([self.neutral * self.electrons, mixed])


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


class Rates(NamedTuple):
    """(da/ds, db/ds) and their derivatives; shapes (2,), (2, 2), (2,), (2,), (2,), (2,).

    Attributes
    ----------
    rate : ndarray
        The rates.
    by_own : ndarray
        By a and b, with n_e held.
    by_electrons, by_matter, by_time, by_neutral_hydrogen : ndarray
        By ln n_e, by v, by ln a, by ln n_HI.
    """

    rate: FloatArray
    by_own: FloatArray
    by_electrons: FloatArray
    by_matter: FloatArray
    by_time: FloatArray
    by_neutral_hydrogen: FloatArray


@dataclass(frozen=True, slots=True, eq=False)
class IonNetwork:
    """The levels of one ion stage and how they reach its ground state.

    Attributes
    ----------
    reduced : Reduced
        Its interior.
    lines : ResonanceLines
        Lines to the ground state.
    treatment : LineTreatment, or HeliumTreatment for He I
        How their photons escape.
    decay : int
        Position of the kept level that decays by two photons.
    decay_rate_per_s : float, s^-1
        Its rate.
    """

    reduced: Reduced
    lines: ResonanceLines
    treatment: LineTreatment | HeliumTreatment
    decay: int
    decay_rate_per_s: float

    def solve(self, conditions: Conditions, seen: Seen | None = None) -> Local:
        """Kept levels at these conditions; densities and fractions are those of the element.

        `seen` is for a HeliumTreatment alone.
        """
        kept = self.reduced.kept
        rates = self.reduced.rates(
            conditions.radiation_temperature_k, conditions.matter_temperature_k
        )
        coupling = self._coupling(conditions, seen)
        return Local(conditions, rates, coupling, solve_kept(kept, rates, coupling, conditions))

    def _coupling(self, conditions: Conditions, seen: Seen | None) -> GroundCoupling:
        kept = self.reduced.kept
        treatment: Any = self.treatment  # He I takes lines of its own, and what they see
        if seen is None:
            lines = treatment.couple(self.lines, kept, conditions)
        else:
            lines = treatment.couple(self.lines, kept, conditions, seen)
        log_boltzmann = log_boltzmann_populations(
            kept, conditions.radiation_temperature_k, conditions.ground_fraction
        )
        here = math.exp(float(log_boltzmann[self.decay]))
        return with_decay(lines, self.decay, self.decay_rate_per_s, 0.0, here)

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


@dataclass(frozen=True, slots=True, eq=False)
class HeliumEquations:
    """The two ionizations of helium.

    Attributes
    ----------
    first : IonNetwork
        He I, with a HeliumTreatment.
    second : IonNetwork or None
        He II; None: Saha equilibrium.
    ionization_ev : tuple of float, eV
        Of He I and of He II, each from its ground state.
    past : HeliumPast or None
        What the run remembers of the lines of He I, where one lights another (`lines.fed`).
    """

    first: IonNetwork
    second: IonNetwork | None
    ionization_ev: tuple[float, float]
    past: HeliumPast | None = None

    @staticmethod
    def fractions(state: FloatArray) -> HeliumFractions:
        """Fractions at (a, b)."""
        charged, neutral = _split(float(state[0]))
        double_share, single_share = _split(float(state[1]))
        return HeliumFractions(
            neutral, charged * single_share, charged * double_share, charged, double_share
        )

    def rates(self, around: Around, state: FloatArray) -> Rates:
        """Rates of change and derivatives at (a, b)."""
        x = self.fractions(state)
        full, slope = _ramp(math.log(around.radiation_temperature_k / COLDEST_K) / _EBB)
        if full == 0.0:
            return _stacked([0.0] * 7, [0.0] * 7)
        first = self.first.flow(around, x.single, x.neutral, self._seen(around))
        lowest = self._first_rates(around, x, first)
        highest = self._upper_rates(around, x, float(state[1]), first)
        found = _stacked(lowest, highest)
        if full == 1.0:
            return found
        fading = Rates(*(full * part for part in found))
        return fading._replace(by_time=fading.by_time - slope / _EBB * found.rate)

    def _upper_rates(
        self, around: Around, x: HeliumFractions, b: float, first: Flow
    ) -> list[float]:
        """Rate of b and its derivatives: by the levels of He II, or by Saha equilibrium."""
        part, slope = _ramp((b - _GONE) / (_FADING - _GONE))
        if self.second is None or part == 0.0:
            return self._saha_rates(around, b)
        levels = _second_rates(around, x, first, self.second.flow(around, x.double, x.single))
        if part == 1.0:
            return levels
        pulled = self._saha_rates(around, b)
        mixed = [part * n + (1.0 - part) * p for n, p in zip(levels, pulled, strict=True)]
        mixed[2] += slope / (_FADING - _GONE) * (levels[0] - pulled[0])
        return mixed

    def _seen(self, around: Around) -> Seen:
        """What the lines of He I see of hydrogen and of each other."""
        hydrogen_cm3 = around.neutral_hydrogen_cm3
        if self.past is None:
            return Seen(hydrogen_cm3)
        depth = None
        if isinstance(self.first.treatment, HeliumTreatment) and self.first.treatment.absorbs:
            depth = continuum_depth(self.past.lines, hydrogen_cm3, around.hubble_rate_per_s)
        return Seen(hydrogen_cm3, self.past.blue_side(around.log_scale, around.hubble_slope, depth))

    def longest_step(self, radiation_temperature_k: float) -> float:
        """No step in ln a from here may be longer, while one line lights another."""
        if self.past is None or radiation_temperature_k < COLDEST_K:
            return math.inf
        return self.past.longest_step

    @staticmethod
    def slack(state: FloatArray) -> FloatArray:
        """By how much a and b may be less exact than u, for an ion that is hardly there.

        1 while the rarer of two ions makes up a millionth of them, then as the inverse square root
        of its share, up to 1000.
        """
        log_share = -np.abs(state)
        return np.exp(np.clip(-0.5 * (log_share - _RARE), 0.0, _SLACK))

    def first_local(self, around: Around, state: FloatArray) -> Local:
        """Kept levels of He I at (a, b)."""
        x = self.fractions(state)
        conditions = self.first.conditions(around, x.single, x.neutral)
        return self.first.solve(conditions, self._seen(around))

    def line_figures(self, around: Around, state: FloatArray) -> dict[str, FloatArray]:
        """Validity figures of the lines of He I at (a, b), shape (n_lines,) each.

        Those of the treatment, with the ln of the distortion of the field on both sides,
        "log_blue_side" and "log_red_side".
        """
        here, lines = self.first_local(around, state), self.first.lines
        departure = here.solution.log_population - here.solution.log_boltzmann
        kt = const.BOLTZMANN_EV_K * around.radiation_temperature_k
        figures = here.coupling.validity
        blue = figures.get("log_blue_side", np.zeros(len(lines.names)))
        red = log_red_side(
            departure[lines.upper], lines.energy_ev / kt, figures["optical_depth"], blue
        )
        return {**figures, "log_blue_side": blue, "log_red_side": red}

    def remember(self, around: Around, state: FloatArray) -> None:
        """Keep what an accepted step sends to lines below, until helium is held."""
        if self.past is None or around.radiation_temperature_k < COLDEST_K:
            return
        depth = continuum_depth(
            self.past.lines, around.neutral_hydrogen_cm3, around.hubble_rate_per_s
        )
        self.past.remember(
            around.log_scale, self.line_figures(around, state)["log_red_side"], depth
        )

    @staticmethod
    def _first_rates(around: Around, x: HeliumFractions, flow: Flow) -> list[float]:
        scale = -1.0 / (around.hubble_rate_per_s * x.neutral * x.charged)
        by_a = flow.by_ion * x.neutral - flow.by_ground * x.charged
        by_a -= flow.value * (x.neutral - x.charged)
        by_b = -flow.by_ion * x.double_share
        terms = (
            flow.value,
            by_a,
            by_b,
            flow.by_electrons,
            flow.by_matter,
            flow.by_time,
            flow.by_neutral_hydrogen,
        )
        return [scale * one for one in terms]

    def _saha_rates(self, around: Around, b: float) -> list[float]:
        matter_k = around.matter_temperature_k
        slope = -1.5 - self.ionization_ev[1] / (const.BOLTZMANN_EV_K * matter_k)
        pulled = self.saha_log_ratio(1, around) - b
        # Value, by a, by b, by ln n_e, by v, by ln a (T falls, n_e falls as a^-3).
        terms = (pulled, 0.0, -1.0, -1.0, -slope, slope + 3.0, 0.0)
        return [_PULL * one for one in terms]

    def saha_log_ratio(self, stage: int, around: Around) -> float:
        """Ln of an ion over the stage below it (0: He II/He I) in Saha equilibrium at T_m."""
        electrons_cm3 = around.electrons_per_helium * around.helium_density_cm3
        # Ground state over ion: 1 over 2 for He I, 2 over 1 for He II, all over the electron's 2.
        weight = (1.0 / ION_WEIGHT, 2.0)[stage]
        log_factor = log_saha_factor(
            weight, self.ionization_ev[stage], around.matter_temperature_k, charge=2
        )
        return -float(log_factor) - math.log(electrons_cm3)


def _second_rates(around: Around, x: HeliumFractions, first: Flow, second: Flow) -> list[float]:
    q, inverse = x.double_share, 1.0 / x.double + 1.0 / x.single
    lost, fed = second.value * inverse, first.value / x.single
    by_a = (second.by_ion + second.by_ground - second.value) * x.neutral * inverse
    by_a -= (first.by_ion * x.neutral - first.by_ground * x.charged) / x.single - x.neutral * fed
    by_b = (second.by_ion * (1.0 - q) - second.by_ground * q) * inverse
    by_b += second.value * (q / x.single - (1.0 - q) / x.double)
    by_b -= q * (fed - first.by_ion / x.single)
    terms = (
        lost - fed,
        by_a,
        by_b,
        second.by_electrons * inverse - first.by_electrons / x.single,
        second.by_matter * inverse - first.by_matter / x.single,
        second.by_time * inverse - first.by_time / x.single,
        -first.by_neutral_hydrogen / x.single,
    )
    return [-one / around.hubble_rate_per_s for one in terms]


def _stacked(first: list[float], second: list[float]) -> Rates:
    rows = np.array([first, second])
    return Rates(rows[:, 0], rows[:, 1:3], rows[:, 3], rows[:, 4], rows[:, 5], rows[:, 6])


def _ramp(x: float) -> tuple[float, float]:
    """Smooth step from 0 at x = 0 to 1 at x = 1, and its slope."""
    x = min(max(x, 0.0), 1.0)
    return x * x * (3.0 - 2.0 * x), 6.0 * x * (1.0 - x)


def _split(log_odds: float) -> tuple[float, float]:
    """Both parts of a whole from the ln of their ratio, the first the one above."""
    small = math.exp(-abs(log_odds))
    large = 1.0 / (1.0 + small)
    small *= large
    return (large, small) if log_odds > 0.0 else (small, large)
