"""The table of effective rates: local power series in ln T_r and ln(T_m/T_r).

:mod:`levelnet.distilled.series` says what the series are and evaluates them. Everything in the
arrays belongs to the atom with measured constants; changed ones scale temperatures and rates on the
way in and out.
"""

from __future__ import annotations

import dataclasses
import math
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import ArrayLike

from ..arrays import FloatArray, IntArray, frozen_array
from ..atomic.detailed_balance import SahaCoefficients, saha_coefficients
from ..atomic.physics import Physics, Scales, scales
from ..errors import InputError
from ..history.setup import Setup
from ..markup import html_table
from ..network.reduced import KeptLevels, ReducedRates
from ..network.scaled import scaled_levels, scaled_rates
from .effective import EffectiveRates
from .series import exchange_of, local_series, position_in, rates_at
from .species import AtomName, atom_name, scales_of
from .stage import StageTable, stage_rates

if TYPE_CHECKING:
    import xarray

    from .certificate import Certificate
    from .helium_escape import LineTable


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
        here, temperature_k = local_series(self, x, y), math.exp(x)
        log_a = here.equilibrium + y * here.departure
        factor, saha = self.scales, self.saha
        down, up = exchange_of(self, here.exchange, temperature_k)
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
        self,
        radiation_temperature_k: ArrayLike,
        matter_temperature_k: ArrayLike,
        atom: str = "H I",
    ) -> EffectiveRates:
        """Rates and their logarithms at many temperatures.

        Parameters
        ----------
        radiation_temperature_k, matter_temperature_k : array_like, K
            Broadcast; within the range of the table, of helium within that of its own table
            (T_r = 1400 to 27500 K, T_m/T_r = 0.5 to 1.5); T_m of any atom up to 8000 K or T_r,
            whichever is higher.
        atom : "H I", "He I" or "He II"
            Whose rates; of helium where the table holds them.

        Returns
        -------
        EffectiveRates
            As :func:`levelnet.effective_rates` gives them, to `tolerance` in each logarithm. Those
            of helium with changed constants are scaled like those of hydrogen, exactly.

        Raises
        ------
        InputError
            For an atom that the table does not hold, and (RangeError) outside the range.
        """
        name = atom_name(atom)
        if name != "H I":
            stage, factor = self._stage(name), scales_of(self.setup, name)
            return stage_rates(stage, radiation_temperature_k, matter_temperature_k, name, factor)
        place = self._position(radiation_temperature_k, matter_temperature_k)
        return rates_at(self, self.kept, self.saha, self.scales, place)

    def _stage(self, atom: AtomName) -> StageTable:
        """Give the table of He I or He II; InputError where there is none."""
        stage = self.helium if atom == "He I" else self.helium_ion
        if stage is None:
            asked = 'helium.helium_ion = "network"'
            if self.helium is None:
                asked = "helium.n_max = 2 or above, in a universe with helium"
            raise InputError(
                f'atom = "{atom}": this table holds no rates of it; distil a setup with {asked}'
            )
        return stage

    def _position(
        self, radiation_temperature_k: ArrayLike, matter_temperature_k: ArrayLike
    ) -> tuple[FloatArray, FloatArray]:
        """Place x, y in the table; RangeError outside it."""
        unit = self.scales.energy
        return position_in(self, radiation_temperature_k, matter_temperature_k, unit)
