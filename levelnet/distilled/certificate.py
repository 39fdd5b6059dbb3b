"""The certificate of a table: its errors, measured against the exact network.

Rates are compared with exact reductions at random points; histories with the full network of the
same size, its own series in ln T_r on other nodes and with every T_m by dot products, in the
setup's cosmology and in two invented ones far from it.
"""

from __future__ import annotations

import dataclasses
import math
from collections.abc import Callable
from dataclasses import dataclass

import numpy as np

from ..arrays import FloatArray, frozen_array
from ..background.cosmology import Cosmology
from ..errors import LevelnetError
from ..escape.lines import Lines
from ..history.helium_atom import HeliumAtoms
from ..history.integrate import handover_of, integrate_slow, setup_handover, slow_equations
from ..history.setup import Setup
from ..network.rates import RateConstants
from ..network.reduced import KeptLevels, Reduced
from ..network.scaled import with_scales
from ..network.tabulation import TabulatedReduction
from .effective import EffectiveRates, log_capture, log_exchange, log_photo
from .helium_errors import fresh_equations, helium_errors
from .history import history_from_table
from .kept import HELIUM_FRACTIONS
from .nodes import NodeSource, outline
from .series import COLLISIONS_K
from .table import EffectiveTable

Progress = Callable[[str, float], None]

SEED = 20_260_101
RADIATION_POINTS, _MATTER_POINTS = 32, 16
FIRST_REDSHIFT, LAST_REDSHIFT, HELIUM_REDSHIFT = 1600.0, 20.0, 8000.0
_REDSHIFTS = 80
# Both histories are stepped better than a table of the default tolerance errs; with helium, whose
# full history takes a minute at that, nearly so.
_STEPPING, _STEPPING_HELIUM = 1e-8, 1e-7

# Invented: little baryonic matter in a fast, warm universe, and much of it in a slow, cool one;
# little helium in the first and much in the second, as far as fits of its abundance go.
FAR_COSMOLOGIES = (
    Cosmology(
        hubble_km_s_mpc=85.0,
        baryon_density_h2=0.008,
        matter_density_h2=0.3,
        cmb_temperature_k=3.0,
        helium_mass_fraction=HELIUM_FRACTIONS[0],
        effective_neutrinos=6.0,
    ),
    Cosmology(
        hubble_km_s_mpc=50.0,
        baryon_density_h2=0.06,
        matter_density_h2=0.08,
        cmb_temperature_k=2.4,
        helium_mass_fraction=HELIUM_FRACTIONS[1],
        effective_neutrinos=1.0,
    ),
)


@dataclass(frozen=True, slots=True, eq=False)
class Certificate:
    """Measured errors of a table.

    Attributes
    ----------
    seed : int
        Of the random points.
    n_points : int
        How many pairs of T_r and T_m; uniform in ln T_r and ln(T_m/T_r) over the table.
    rate_names : tuple of str
        "recombination 2s", "photoionization 2s", ..., "exchange 2p-2s", ...; with helium
        "He I recombination 2 1S", ..., "He II ..." and, where hydrogen absorbs in the lines,
        "He I escape 2 1P-1 1S", ...
    largest_error, rms_error : ndarray, shape (n_rates,)
        Of the ln of each rate against exact reductions; exchange downward.
    cosmologies : tuple of str
        "setup", then the far ones, each with its parameters.
    redshift : ndarray, shape (n_redshift,)
        Where histories are compared, descending from 1600 (with helium 8000) to 20, as far as the
        table reaches.
    history_error : ndarray, shape (n_cosmologies, n_redshift)
        Relative error of x_e of the distilled history (:func:`levelnet.history_from_table`) against
        the full network; NaN where the table does not reach, or hydrogen has no channel to the
        ground state. Both are stepped to 1e-8, with helium to 1e-7.
    """

    seed: int
    n_points: int
    rate_names: tuple[str, ...]
    largest_error: FloatArray
    rms_error: FloatArray
    cosmologies: tuple[str, ...]
    redshift: FloatArray
    history_error: FloatArray

    def __post_init__(self) -> None:
        """Check shapes and make every array read-only."""
        for name in ("largest_error", "rms_error"):
            frozen_array(self, name, (len(self.rate_names),))
        frozen_array(self, "redshift", (len(self.redshift),))
        frozen_array(self, "history_error", (len(self.cosmologies), len(self.redshift)))

    @property
    def largest_rate_error(self) -> float:
        """Largest error of the ln of any rate."""
        return float(self.largest_error.max())

    @property
    def largest_history_error(self) -> FloatArray:
        """Largest relative error of x_e in each cosmology, shape (n_cosmologies,)."""
        seen = ~np.isnan(self.history_error)
        largest = np.where(seen, np.abs(self.history_error), 0.0).max(axis=1)
        return np.where(seen.any(axis=1), largest, np.nan)


def certify(
    table: EffectiveTable,
    source: NodeSource,
    reference: TabulatedReduction,
    tell: Progress,
    helium: HeliumAtoms | None = None,
) -> Certificate:
    """Measure the errors of a table.

    Parameters
    ----------
    table : EffectiveTable
        The table.
    source : NodeSource
        Gives exact reductions of the same atom.
    reference : TabulatedReduction
        The full network, by a series of its own, for the histories.
    tell : callable
        Progress.
    helium : HeliumAtoms, optional
        Helium behind the table, where it has it.
    """
    tell("certificate: rates", 0.0)
    n_points, names, errors = rate_errors(table, source)
    largest, rms = np.abs(errors).max(axis=0), np.sqrt(np.mean(errors**2, axis=0))
    first, count = FIRST_REDSHIFT, _REDSHIFTS
    if helium is not None:
        of_helium = helium_errors(table, helium)
        names = (*names, *of_helium.names)
        largest = np.concatenate([largest, of_helium.largest])
        rms = np.concatenate([rms, of_helium.rms])
        first, count = HELIUM_REDSHIFT, 2 * _REDSHIFTS
    redshift = np.geomspace(1.0 + first, 1.0 + LAST_REDSHIFT, count) - 1.0
    redshift[[0, -1]] = first, LAST_REDSHIFT
    labels, rows = [], []
    cosmologies = (table.setup.cosmology, *FAR_COSMOLOGIES)
    for k, cosmology in enumerate(cosmologies):
        tell("certificate: histories", k / len(cosmologies))
        labels.append("setup" if k == 0 else describe(cosmology))
        rows.append(_history_error(table, reference, cosmology, redshift, helium))
    return Certificate(
        SEED,
        n_points,
        names,
        largest,
        rms,
        tuple(labels),
        redshift,
        np.array(rows),
    )


def describe(cosmology: Cosmology) -> str:
    """One line with the parameters of a certificate's cosmology."""
    return (
        f"invented: H0 = {cosmology.hubble_km_s_mpc:g} km/s/Mpc, "
        f"omega_b = {cosmology.baryon_density_h2:g}, omega_m = {cosmology.matter_density_h2:g}, "
        f"T0 = {cosmology.cmb_temperature_k:g} K, Y = {cosmology.helium_mass_fraction:g}, "
        f"N_eff = {cosmology.effective_neutrinos:g}"
    )


def rate_errors(
    table: EffectiveTable, source: NodeSource, seed: int = SEED
) -> tuple[int, tuple[str, ...], FloatArray]:
    """Errors of the logarithms of a table at random points.

    Returns
    -------
    n_points : int
        Number of points.
    names : tuple of str
        Names of the rates.
    errors : ndarray, shape (n_points, n_rates)
        Table less exact reduction.
    """
    random = np.random.default_rng(seed)
    x = random.uniform(table.log_low, table.log_high, RADIATION_POINTS)
    highest = np.minimum(
        table.ratio_high, np.maximum(math.log(COLLISIONS_K) - x, 0.0)
    )  # measured constants: the series know no others
    share = random.uniform(0.0, 1.0, (_MATTER_POINTS, RADIATION_POINTS))
    radiation_k = np.exp(x)
    matter_k = radiation_k * np.exp(table.ratio_low + share * (highest - table.ratio_low))
    nodes = source.at(radiation_k)
    constants = outline(source.atom)[2]
    plain = table.with_constants()
    found = plain.effective_rates(radiation_k, matter_k)
    rows = []
    for k, node in enumerate(nodes):
        exact = _exact(plain.kept, constants, node, float(radiation_k[k]), matter_k[:, k])
        at = EffectiveRates(
            plain.kept,
            found.log_recombination[:, k],
            found.log_photoionization[:, k],
            found.log_exchange[:, k],
        )
        rows.append(_columns(at, table) - _columns(exact, table))
    errors = np.concatenate(rows)
    return len(errors), _names(table), np.where(np.isnan(errors), 0.0, errors)


def _exact(
    kept: KeptLevels,
    constants: RateConstants,
    node: FloatArray,
    radiation_k: float,
    matter_k: FloatArray,
) -> EffectiveRates:
    photo = log_photo(constants, node, radiation_k)
    exchange = log_exchange(constants, node[: len(constants.lower)], radiation_k)
    count = len(matter_k)
    return EffectiveRates(
        kept,
        log_capture(constants, node, matter_k),
        np.broadcast_to(photo, (count, *photo.shape)),
        np.broadcast_to(exchange, (count, *exchange.shape)),
    )


def _columns(rates: EffectiveRates, table: EffectiveTable) -> FloatArray:
    """Logarithms as columns; exchange that does not exist is 0 in both."""
    exchange = rates.log_exchange[:, table.upper, table.lower]
    return np.concatenate(
        [
            rates.log_recombination,
            rates.log_photoionization,
            np.where(np.isneginf(exchange), 0.0, exchange),
        ],
        axis=1,
    )


def _names(table: EffectiveTable) -> tuple[str, ...]:
    levels = [level_name(n, l) for n, l in zip(table.kept.n, table.kept.l, strict=True)]
    pairs = zip(table.upper.tolist(), table.lower.tolist(), strict=True)
    return (
        *(f"recombination {level}" for level in levels),
        *(f"photoionization {level}" for level in levels),
        *(f"exchange {levels[upper]}-{levels[lower]}" for upper, lower in pairs),
    )


def level_name(n: int, l: int) -> str:
    """Spectroscopic name where there is a letter: 2s, 3d, else "(n, l)"."""
    letters = "spdfghik"
    return f"{n}{letters[l]}" if l < len(letters) else f"({n}, {l})"


def _history_error(
    table: EffectiveTable,
    reference: TabulatedReduction,
    cosmology: Cosmology,
    redshift: FloatArray,
    helium: HeliumAtoms | None,
) -> FloatArray:
    """Relative error of x_e at `redshift`; NaN where table or history do not reach."""
    error = np.full(len(redshift), np.nan)
    low, high = table.radiation_range_k
    kelvin = cosmology.radiation_temperature_k(redshift)
    inside = (kelvin >= low) & (kelvin <= high)
    if inside.sum() < 2:
        return error
    stepping = _STEPPING if helium is None else _STEPPING_HELIUM
    accuracy = dataclasses.replace(table.setup.accuracy, relative=stepping)
    # A field changes none of the rates; Sobolev's treatment weighs them as well.
    chosen = table.setup.lines
    lines = chosen if chosen.transfer is None else Lines(lyman_lines=chosen.lyman_lines)
    setup = dataclasses.replace(table.setup, cosmology=cosmology, accuracy=accuracy, lines=lines)
    try:
        reduced = with_scales(reference, table.scales)
        full = _full_history(setup, reduced, redshift[inside], helium)
        fast = history_from_table(
            table, cosmology, redshifts=redshift[inside], lines=lines, relative=stepping
        )
    except LevelnetError:  # no channel to the ground state, or a start beyond the table
        return error
    error[inside] = fast.free_electron_fraction / full - 1.0
    return error


def _full_history(
    setup: Setup, reduced: Reduced, redshift: FloatArray, helium: HeliumAtoms | None
) -> FloatArray:
    """x_e at `redshift` from the full network; NaN above the hand-over and below the end."""
    equations = slow_equations(setup, reduced, helium=fresh_equations(helium))
    handover = handover_of(setup, equations) if helium else setup_handover(setup)
    trajectory = integrate_slow(setup, equations, handover, redshift, lambda stage, fraction: None)
    time, wanted = trajectory.time, -np.log1p(redshift)
    nearest = np.argmin(np.abs(time[None, :] - wanted[:, None]), axis=1)
    electrons = [equations.electron_fraction(state) for state in trajectory.state[nearest]]
    return np.where(np.abs(time[nearest] - wanted) < 1e-12, electrons, np.nan)
