"""Helium among the slow variables: its two ionizations, their rates of change and derivatives.

The variables are a = ln[(x_HeII + x_HeIII)/x_HeI] and b = ln(x_HeIII/x_HeII), so that every
fraction follows to full relative precision. With F_1 and F_2 the net recombinations to HeI and to
HeII per helium nucleus and second, and y = 1 - x_HeI,

    da/ds = -F_1/(H x_HeI y),
    db/ds = -[F_2 (1/x_HeIII + 1/x_HeII) - F_1/x_HeII]/H.

Where the second ionization is in Saha equilibrium, b is pulled to its value there so fast that it
stays within 1e-7 of it; so it is in any case once x_HeIII is below 4e-18 of x_HeII, where the
levels of He II keep it 3e-3 (relative) above Saha equilibrium. Below T_r = 1400 K (in units of the
atom's energies, where constants are changed) both stand still.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, replace
from typing import NamedTuple

import numpy as np

from .. import constants as const
from ..arrays import FloatArray
from ..atomic.detailed_balance import log_saha_factor
from ..atomic.physics import UNCHANGED, Scales
from ..escape.blue_side import log_red_side
from ..escape.helium_continuum import continuum_depth
from ..escape.helium_past import HeliumPast
from ..escape.helium_treatment import Seen
from .ion_network import Around, Flow, HeliumIon, NeutralHelium
from .local import Local

COLDEST_K = 1400.0
"""T_r below which helium is held as it is, in K: x_HeII is below 1e-9 and falls no further."""

# Pull to Saha equilibrium in Hubble rates, and ln of x_HeIII/x_HeII between which it takes over
# from the levels of He II, which would only ask for short steps.
PULL, GONE, FADING = 1e9, -50.0, -40.0
# An ion whose share has this ln may be less exact, by a factor whose ln is at most the second.
_RARE, _SLACK = math.log(1e-9), math.log(1e3)
# From so far above COLDEST_K, in ln T_r, rates fade to nothing.
EBB = 0.05
ION_WEIGHT = 2.0  # of He+ in its ground state


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
class HeliumEquations:
    """The two ionizations of helium.

    Attributes
    ----------
    first : NeutralHelium
        He I.
    second : HeliumIon or None
        He II; None: Saha equilibrium.
    ionization_ev : tuple of float, eV
        Of He I and of He II, each from its ground state.
    past : HeliumPast or None
        What the run remembers of the lines of He I, where one lights another (`lines.fed`).
    scales : Scales
        What changed constants do to helium; all above holds it already.
    """

    first: NeutralHelium
    second: HeliumIon | None
    ionization_ev: tuple[float, float]
    past: HeliumPast | None = None
    scales: Scales = UNCHANGED

    @property
    def coldest_k(self) -> float:
        """T_r below which helium is held, K."""
        return COLDEST_K * self.scales.energy

    def held(self, radiation_temperature_k: float) -> bool:
        """Whether helium stands still at this T_r."""
        return radiation_temperature_k < self.coldest_k

    @staticmethod
    def fractions(state: FloatArray) -> HeliumFractions:
        """Fractions at (a, b)."""
        charged, neutral = _split(float(state[0]))
        double_share, single_share = _split(float(state[1]))
        return HeliumFractions(
            neutral, charged * single_share, charged * double_share, charged, double_share
        )

    def rate(self, around: Around, state: FloatArray) -> FloatArray:
        """Rates of change at (a, b), shape (2,): those of `rates`, at half the price."""
        x = self.fractions(state)
        full, _ = self.fading(around)
        if full == 0.0:
            return np.zeros(2)
        seen = self.seen(around)
        first = self.first.net_flow(around, x.single, x.neutral, seen)
        by_first = -first / (around.hubble_rate_per_s * x.neutral * x.charged)
        return full * np.array([by_first, self._upper_rate(around, x, float(state[1]), first)])

    def fading(self, around: Around) -> tuple[float, float]:
        """How much of the rates is left near `coldest_k`, and its slope by ln T_r."""
        left, slope = ramp(math.log(around.radiation_temperature_k / self.coldest_k) / EBB)
        return left, slope / EBB

    def part_of_levels(self, b: float) -> tuple[float, float]:
        """Part that the levels of He II have in the rate of b, and its slope by b.

        The rest has the pull to Saha equilibrium.
        """
        if self.second is None:
            return 0.0, 0.0
        part, slope = ramp((b - GONE) / (FADING - GONE))
        return part, slope / (FADING - GONE)

    def _upper_rate(self, around: Around, x: HeliumFractions, b: float, first: float) -> float:
        part, _ = self.part_of_levels(b)
        pulled = PULL * (self.saha_log_ratio(1, around) - b)
        if self.second is None or part == 0.0:
            return pulled
        second = self.second.net_flow(around, x.double, x.single)
        inverse = 1.0 / x.double + 1.0 / x.single
        levels = -(second * inverse - first / x.single) / around.hubble_rate_per_s
        return part * levels + (1.0 - part) * pulled

    def rates(self, around: Around, state: FloatArray) -> Rates:
        """Rates of change and derivatives at (a, b)."""
        x = self.fractions(state)
        full, slope = self.fading(around)
        if full == 0.0:
            return _stacked([0.0] * 7, [0.0] * 7)
        first = self.first.flow(around, x.single, x.neutral, self.seen(around))
        lowest = self._first_rates(around, x, first)
        highest = self._upper_rates(around, x, float(state[1]), first)
        found = _stacked(lowest, highest)
        if full == 1.0:
            return found
        fading = Rates(*(full * part for part in found))
        return fading._replace(by_time=fading.by_time - slope * found.rate)

    def _upper_rates(
        self, around: Around, x: HeliumFractions, b: float, first: Flow
    ) -> list[float]:
        """Rate of b and its derivatives: by the levels of He II, or by Saha equilibrium."""
        part, slope = self.part_of_levels(b)
        if self.second is None or part == 0.0:
            return self.saha_pull(around, b)
        levels = _second_rates(around, x, first, self.second.flow(around, x.double, x.single))
        if part == 1.0:
            return levels
        pulled = self.saha_pull(around, b)
        mixed = [part * n + (1.0 - part) * p for n, p in zip(levels, pulled, strict=True)]
        mixed[2] += slope * (levels[0] - pulled[0])
        return mixed

    def seen(self, around: Around) -> Seen:
        """What the lines of He I see of hydrogen and of each other."""
        hydrogen_cm3 = around.neutral_hydrogen_cm3
        if self.past is None:
            return Seen(hydrogen_cm3)
        depth = None
        if self.first.treatment.absorbs:
            depth = continuum_depth(self.past.lines, hydrogen_cm3, around.hubble_rate_per_s)
        return Seen(hydrogen_cm3, self.past.blue_side(around.log_scale, around.hubble_slope, depth))

    def longest_step(self, radiation_temperature_k: float) -> float:
        """No step in ln a from here may be longer, while one line lights another."""
        if self.past is None or self.held(radiation_temperature_k):
            return math.inf
        return self.past.longest_step

    @staticmethod
    def slack(state: FloatArray) -> FloatArray:
        """By how much a and b may be less exact than u, for an ion that is hardly there.

        1 while the rarer of two ions makes up a billionth of them, then as the inverse square root
        of its share, up to 1000.
        """
        log_share = -np.abs(state)
        return np.exp(np.clip(-0.5 * (log_share - _RARE), 0.0, _SLACK))

    def forgetful(self) -> HeliumEquations:
        """The same with nothing remembered yet of lines."""
        return self.knowing(0)

    def knowing(self, count: int) -> HeliumEquations:
        """The same with the first `count` remembered steps alone."""
        return self if self.past is None else replace(self, past=self.past.until(count))

    def first_local(self, around: Around, state: FloatArray) -> Local:
        """Kept levels of He I at (a, b)."""
        x = self.fractions(state)
        conditions = self.first.conditions(around, x.single, x.neutral)
        return self.first.solve(conditions, self.seen(around))

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
        if self.past is None or self.held(around.radiation_temperature_k):
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

    def saha_pull(self, around: Around, b: float) -> list[float]:
        """Rate of b that pulls it to Saha equilibrium, and its derivatives as in Rates."""
        matter_k = around.matter_temperature_k
        slope = -1.5 - self.ionization_ev[1] / (const.BOLTZMANN_EV_K * matter_k)
        pulled = self.saha_log_ratio(1, around) - b
        # Value, by a, by b, by ln n_e, by v, by ln a (T falls, n_e falls as a^-3).
        terms = (pulled, 0.0, -1.0, -1.0, -slope, slope + 3.0, 0.0)
        return [PULL * one for one in terms]

    def saha_log_ratio(self, stage: int, around: Around) -> float:
        """Ln of an ion over the stage below it (0: He II/He I) in Saha equilibrium at T_m."""
        electrons_cm3 = around.electrons_per_helium * around.helium_density_cm3
        # Ground state over ion: 1 over 2 for He I, 2 over 1 for He II, all over the electron's 2.
        weight = (1.0 / ION_WEIGHT, 2.0)[stage]
        log_factor = log_saha_factor(
            weight, self.ionization_ev[stage], around.matter_temperature_k, charge=2
        )
        # The thermal volume goes as the reduced mass to -3/2.
        return -float(log_factor) - math.log(electrons_cm3 * self.scales.reduced_mass**-1.5)


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


def ramp(x: float) -> tuple[float, float]:
    """Smooth step from 0 at x = 0 to 1 at x = 1, and its slope."""
    x = min(max(x, 0.0), 1.0)
    return x * x * (3.0 - 2.0 * x), 6.0 * x * (1.0 - x)


def _split(log_odds: float) -> tuple[float, float]:
    """Both parts of a whole from the ln of their ratio, the first the one above."""
    small = math.exp(-abs(log_odds))
    large = 1.0 / (1.0 + small)
    small *= large
    return (large, small) if log_odds > 0.0 else (small, large)
