"""The table of effective rates: local power series in ln T_r and ln(T_m/T_r).

With x = ln T_r and y = ln(T_m/T_r), the table holds ln A_i(T_r, T_r) over x, the departure h_i of
ln A_i = ln A_i(T_r, T_r) + y h_i(x, y), so that T_m = T_r is exact, and the ln of the downward
exchange rates with the Boltzmann factor of their barrier kept out. Photoionization is never stored:
it follows from ln A_i(T_r, T_r) by detailed balance. Everything in the arrays belongs to the atom
with measured constants; changed ones scale temperatures and rates on the way in and out.
"""

from __future__ import annotations

import dataclasses
import math
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any, NamedTuple

import numpy as np
from numpy.typing import ArrayLike

from ..arrays import BoolArray, FloatArray, IntArray, frozen_array
from ..atomic.detailed_balance import SahaCoefficients, saha_coefficients
from ..atomic.physics import Physics, Scales, scales
from ..errors import RangeError
from ..history.setup import Setup
from ..markup import html_table
from ..network.reduced import KeptLevels, ReducedRates
from ..network.scaled import scaled_levels, scaled_rates
from .effective import NEVER, EffectiveRates

if TYPE_CHECKING:
    import xarray

    from .certificate import Certificate
    from .helium_escape import LineTable
    from .stage import StageTable

COLLISIONS_K = 8000.0
"""Matter above this and above the radiation would be ionized by collisions, which are left out."""
# Temperatures may miss the ends of the table by this much in the logarithm: rounding.
_SLACK = 1e-12


class LocalSeries(NamedTuple):
    """The table's series at some temperatures; leading axes are those of the temperatures.

    Attributes
    ----------
    equilibrium, equilibrium_slope : ndarray, shape (..., n_kept)
        ln A_i(T_r, T_r) and its derivative by x.
    departure, departure_slope_x, departure_slope_y : ndarray, shape (..., n_kept)
        h_i and its derivatives.
    exchange, exchange_slope : ndarray, shape (..., n_pairs)
        ln of the downward exchange rate times exp(barrier/kT_r), and its derivative by x.
    """

    equilibrium: FloatArray
    equilibrium_slope: FloatArray
    departure: FloatArray
    departure_slope_x: FloatArray
    departure_slope_y: FloatArray
    exchange: FloatArray
    exchange_slope: FloatArray


@dataclass(frozen=True, slots=True, eq=False)
class EffectiveTable:
    """Effective rates of one setup over T_r and T_m; a `Reduced` that histories can integrate.

    Attributes
    ----------
    setup : Setup
        What was distilled, and the constants in use.
    kept : KeptLevels
        The kept levels, with the energies of the constants in use.
    tolerance : float, dimensionless
        Error asked of the ln of each rate.
    log_low, log_high : float, dimensionless
        Range of x = ln(T_r/K).
    ratio_low, ratio_high : float, dimensionless
        Range of y = ln(T_m/T_r).
    equilibrium : ndarray, shape (n_x, n_kept, degree + 1), dimensionless
        ln A_i(T_r, T_r), A in cm^3 s^-1: power series in t from -1 to 1 in cell k of x,
        x = log_low + (k + (t + 1)/2) dx, lowest power first.
    exchange : ndarray, shape (n_x, n_pairs, degree + 1), dimensionless
        ln of the downward exchange rate (s^-1) times exp(barrier/kT_r); NEVER where there is none.
    departure : ndarray, shape (n_x, n_y, n_kept, degree + 1, degree + 1), dimensionless
        h_i, powers of t in x, then powers of t in y.
    lower, upper : ndarray of int, shape (n_pairs,)
        Pairs of kept levels.
    barrier_k, rise_k : ndarray, shape (n_pairs,), K
        Barrier and energy difference of each pair over the Boltzmann constant.
    log_weight_ratio : ndarray, shape (n_pairs,), dimensionless
        ln of the weight of the upper level over that of the lower.
    certificate : Certificate or None
        Measured errors.
    helium : StageTable or None
        Effective rates of He I; None: helium is neutral and inert.
    helium_ion : StageTable or None
        Those of He II; None: Saha equilibrium, or no helium.
    helium_lines : LineTable or None
        Lines of He I to its ground state, with its rates.
    """

    setup: Setup
    kept: KeptLevels
    tolerance: float
    log_low: float
    log_high: float
    ratio_low: float
    ratio_high: float
    equilibrium: FloatArray
    exchange: FloatArray
    departure: FloatArray
    lower: IntArray
    upper: IntArray
    barrier_k: FloatArray
    rise_k: FloatArray
    log_weight_ratio: FloatArray
    certificate: Certificate | None = None
    helium: StageTable | None = None
    helium_ion: StageTable | None = None
    helium_lines: LineTable | None = None

    def __post_init__(self) -> None:
        """Check shapes and make every array read-only."""
        n_x, n_kept, order = self.equilibrium.shape
        n_pairs, n_y = n_kept * (n_kept - 1) // 2, self.departure.shape[1]
        frozen_array(self, "equilibrium", (n_x, n_kept, order))
        frozen_array(self, "exchange", (n_x, n_pairs, order))
        frozen_array(self, "departure", (n_x, n_y, n_kept, order, order))
        for name in ("lower", "upper"):
            frozen_array(self, name, (n_pairs,), np.int64)
        for name in ("barrier_k", "rise_k", "log_weight_ratio"):
            frozen_array(self, name, (n_pairs,))
        if (self.helium is None) != (self.helium_lines is None):
            raise ValueError("helium and helium_lines: one is of no use without the other")

    def to_xarray(self) -> xarray.Dataset:
        """The coefficients as they stand in the file, over cells and powers (needs the extra)."""
        import xarray

        arrays: dict[str, Any] = {
            "equilibrium": (("cell", "level", "power"), self.equilibrium),
            "exchange": (("cell", "pair", "power"), self.exchange),
            "departure": (
                ("cell", "ratio_cell", "level", "power", "ratio_power"),
                self.departure,
            ),
            "lower": ("pair", self.lower),
            "upper": ("pair", self.upper),
        }
        levels = {name: ("level", getattr(self.kept, name)) for name in ("n", "l")}
        return xarray.Dataset(arrays, coords=levels)

    def _repr_html_(self) -> str:
        """Show the range and the measured errors in a notebook."""
        low, high = self.radiation_range_k
        rows = [("T_r", f"{low:g} to {high:g} K"), ("tolerance", f"{self.tolerance:g}")]
        proof = self.certificate
        if proof is not None:
            rows.append(("largest error of a logarithm", f"{proof.largest_rate_error:.1e}"))
            errors = zip(proof.cosmologies, proof.largest_history_error.tolist(), strict=True)
            rows += [
                (f"error of x_e, {name}", f"{error:.1e}" if math.isfinite(error) else "not known")
                for name, error in errors
            ]
        caption = f"Effective rates, hydrogen n_max = {self.setup.hydrogen.n_max}"
        return html_table(caption, ("", ""), rows)

    @property
    def scales(self) -> Scales:
        """What the constants of the setup do to energies and rates."""
        return scales(self.setup.physics)

    @property
    def radiation_range_k(self) -> tuple[float, float]:
        """Lowest and highest T_r, K, with the constants in use."""
        unit = self.scales.energy
        return math.exp(self.log_low) * unit, math.exp(self.log_high) * unit

    @property
    def saha(self) -> SahaCoefficients:
        """Saha coefficients of the kept levels with the measured constants."""
        ionization = self.kept.ionization_energy_ev / self.scales.energy
        return saha_coefficients(self.kept.statistical_weight, ionization)

    def with_constants(
        self, fine_structure_change: float = 0.0, electron_mass_change: float = 0.0
    ) -> EffectiveTable:
        """Give the same table for other constants of nature.

        Parameters
        ----------
        fine_structure_change, electron_mass_change : float, -0.2 to 0.2 (dimensionless)
            Relative to the measured constants, whatever this table's are.

        Returns
        -------
        EffectiveTable
            Shares the arrays. Exact: A_i(T_r, T_m) = a^2 m^-2 A_i^0(T_r/(a^2 m), T_m/(a^2 m)), and
            so on; see :class:`levelnet.atomic.physics.Scales`. The range of temperatures moves by
            a^2 m. The certificate's rate errors hold as they stand.
        """
        physics = Physics(fine_structure_change, electron_mass_change)
        now = scales(physics).energy / self.scales.energy
        kept = scaled_levels(self.kept, dataclasses.replace(self.scales, energy=now))
        setup = dataclasses.replace(self.setup, physics=physics)
        return dataclasses.replace(self, setup=setup, kept=kept)

    def rates(self, radiation_temperature_k: float, matter_temperature_k: float) -> ReducedRates:
        """Effective rates with their slopes, as histories want them; RangeError outside."""
        x, y = self._position(radiation_temperature_k, matter_temperature_k)
        here, temperature_k = self._series(x, y), math.exp(x)
        log_a = here.equilibrium + y * here.departure
        factor, saha = self.scales, self.saha
        down, up = self._log_exchange(here.exchange, temperature_k)
        exchange, slope = np.zeros((2, len(self.kept), len(self.kept)))
        i, j = self.lower, self.upper
        exchange[j, i], exchange[i, j] = np.exp(down), np.exp(up)
        slope[j, i] = here.exchange_slope + self.barrier_k / temperature_k
        slope[i, j] = slope[j, i] + self.rise_k / temperature_k
        by_matter = here.departure + y * here.departure_slope_y
        rates = ReducedRates(
            np.exp(log_a),
            here.equilibrium_slope + y * here.departure_slope_x - by_matter,
            by_matter,
            here.equilibrium - saha.log_factor(temperature_k),
            here.equilibrium_slope + 1.5 + saha.ionization_k / temperature_k,
            exchange,
            slope,
        )
        return scaled_rates(rates, factor)

    def effective_rates(
        self, radiation_temperature_k: ArrayLike, matter_temperature_k: ArrayLike
    ) -> EffectiveRates:
        """Rates and their logarithms at many temperatures, K, which broadcast; RangeError outside.

        Returns
        -------
        EffectiveRates
            As :func:`levelnet.effective_rates` gives them, to `tolerance` in each logarithm.
        """
        x, y = self._position(radiation_temperature_k, matter_temperature_k)
        here, temperature_k = self._series(x, y), np.exp(x)[..., None]
        factor, n = self.scales, len(self.kept)
        down, up = self._log_exchange(here.exchange, temperature_k)
        exchange = np.full((*np.shape(x), n, n), -np.inf)
        exchange[..., self.upper, self.lower] = down
        exchange[..., self.lower, self.upper] = up
        return EffectiveRates(
            self.kept,
            here.equilibrium + y[..., None] * here.departure + math.log(factor.recombination),
            here.equilibrium - self.saha.log_factor(temperature_k) + math.log(factor.line_rate),
            exchange + math.log(factor.line_rate),
        )

    def _log_exchange(
        self, stored: FloatArray, temperature_k: float | FloatArray
    ) -> tuple[FloatArray, FloatArray]:
        """Ln of the exchange rates down and up, measured constants; -inf where there are none."""
        # A series that stands for NEVER is a constant; nothing real comes near it.
        down = np.where(stored > NEVER + 1.0, stored - self.barrier_k / temperature_k, -np.inf)
        return down, down + self.log_weight_ratio - self.rise_k / temperature_k

    def _position(
        self, radiation_temperature_k: ArrayLike, matter_temperature_k: ArrayLike
    ) -> tuple[FloatArray, FloatArray]:
        """Place x, y in the table; RangeError outside it."""
        radiation, matter = np.broadcast_arrays(
            np.asarray(radiation_temperature_k, float), np.asarray(matter_temperature_k, float)
        )
        with np.errstate(invalid="ignore", divide="ignore"):
            x = np.log(radiation / self.scales.energy)
            y = np.log(matter / radiation)
        _refuse_outside(
            (x >= self.log_low - _SLACK) & (x <= self.log_high + _SLACK),
            radiation,
            "T_r = {:g} K",
            "{:g} to {:g} K".format(*self.radiation_range_k),
        )
        _refuse_outside(
            (y >= self.ratio_low - _SLACK) & (y <= self.ratio_high + _SLACK),
            matter / radiation,
            "T_m/T_r = {:g}",
            f"{math.exp(self.ratio_low):g} to {math.exp(self.ratio_high):g}",
        )
        hottest = COLLISIONS_K * self.scales.energy
        _refuse_outside(
            matter <= np.maximum(hottest, radiation) * (1.0 + _SLACK),
            matter,
            "T_m = {:g} K",
            f"up to {hottest:g} K or T_r, whichever is higher; collisional ionization is left out",
        )
        return x, y

    def _series(self, x: FloatArray, y: FloatArray) -> LocalSeries:
        n_x, n_y = self.departure.shape[:2]
        i, t, stretch_x = _cell(x, self.log_low, self.log_high, n_x)
        j, u, stretch_y = _cell(y, self.ratio_low, self.ratio_high, n_y)
        power_t, slope_t = _powers(t, self.equilibrium.shape[-1])
        power_u, slope_u = _powers(u, self.equilibrium.shape[-1])
        equilibrium, exchange, departure = (
            self.equilibrium[i],
            self.exchange[i],
            self.departure[i, j],
        )
        along_y = np.einsum("...kpq,...q->...kp", departure, power_u)
        by_y = np.einsum("...kpq,...q->...kp", departure, slope_u)
        return LocalSeries(
            _sum(equilibrium, power_t),
            _sum(equilibrium, slope_t) * stretch_x,
            _sum(along_y, power_t),
            _sum(along_y, slope_t) * stretch_x,
            _sum(by_y, power_t) * stretch_y,
            _sum(exchange, power_t),
            _sum(exchange, slope_t) * stretch_x,
        )


def _sum(coefficients: FloatArray, power: FloatArray) -> FloatArray:
    return np.asarray(np.einsum("...kp,...p->...k", coefficients, power))


def _cell(x: FloatArray, low: float, high: float, count: int) -> tuple[IntArray, FloatArray, float]:
    """Cell of each x, position t in it from -1 to 1, and dt/dx."""
    place = (np.asarray(x) - low) * (count / (high - low))
    cell = np.clip(np.floor(place), 0, count - 1).astype(np.int64)
    return cell, np.clip(2.0 * (place - cell) - 1.0, -1.0, 1.0), 2.0 * count / (high - low)


def _powers(t: FloatArray, count: int) -> tuple[FloatArray, FloatArray]:
    """Powers of t and their derivatives, shape (..., count)."""
    order = np.arange(count)
    power = t[..., None] ** order
    slope = np.zeros_like(power)
    slope[..., 1:] = order[1:] * power[..., :-1]
    return power, slope


def _refuse_outside(good: BoolArray, value: FloatArray, text: str, allowed: str) -> None:
    bad = ~np.asarray(good, bool)
    if bad.any():
        raise RangeError(
            f"{text.format(value[bad].flat[0])}: outside the table; allowed: {allowed}"
        )
