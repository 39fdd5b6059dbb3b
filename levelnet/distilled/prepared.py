"""A table as the compiled history sees it: rates, lines and constants packed in arrays."""

from __future__ import annotations

import math
from collections.abc import Mapping
from functools import lru_cache

import numpy as np

from .. import constants as const
from ..arrays import FloatArray
from ..atomic.physics import Physics, Scales, scales
from ..background.matter import compton_rate_per_s, saha_log_odds
from ..errors import InputError
from ..escape.lines import Lines
from ..history.atom import resonance_lines
from ..kernels.effective import Atom
from .kept import check_without_field
from .stimulation import stimulation_polynomials
from .table import EffectiveTable

_MODES = {"closed": 0, "open": 1, "sobolev": 2}
_LETTERS = "spdfghiklmnoqrtuv"
# ln of a rate scale factor may reach this: the network is then far from any atom.
_LARGEST_SCALE = 1e6


def rate_names(table: EffectiveTable) -> tuple[str, ...]:
    """Names of the effective rates that may be scaled.

    Parameters
    ----------
    table : EffectiveTable
        The table.

    Returns
    -------
    tuple of str
        "recombination_2s", ... (each with its photoionization, which follows from it by detailed
        balance), "exchange_2s_2p", ... (both directions), and "two_photon".
    """
    level = [
        f"{n}{_LETTERS[l] if l < len(_LETTERS) else f'_{l}_'}"
        for n, l in zip(table.kept.n.tolist(), table.kept.l.tolist(), strict=True)
    ]
    pairs = zip(table.lower.tolist(), table.upper.tolist(), strict=True)
    return (
        *(f"recombination_{name}" for name in level),
        *(f"exchange_{level[i]}_{level[j]}" for i, j in pairs),
        "two_photon",
    )


def choose_physics(
    table: EffectiveTable,
    fine_structure_change: float | None,
    electron_mass_change: float | None,
) -> Physics:
    """Constants asked for; those of the table where None."""
    own = table.setup.physics
    return Physics(
        own.fine_structure_change
        if fine_structure_change is None
        else float(fine_structure_change),
        own.electron_mass_change if electron_mass_change is None else float(electron_mass_change),
    )


def scale_factors(table: EffectiveTable, rate_scales: Mapping[str, float] | None) -> FloatArray:
    """Natural log of the scale factor on each rate, in the order of :func:`rate_names`."""
    names = rate_names(table)
    result = np.zeros(len(names))
    for name, value in (rate_scales or {}).items():
        if name not in names:
            raise InputError(f"rate_scales: {name!r} is no rate; allowed: {', '.join(names)}")
        if not 1.0 / _LARGEST_SCALE <= value <= _LARGEST_SCALE:
            raise InputError(
                f"rate_scales: {name} = {value:g}: allowed are {1.0 / _LARGEST_SCALE:g} to "
                f"{_LARGEST_SCALE:g}"
            )
        result[names.index(name)] = math.log(value)
    return result


def make_atom(
    table: EffectiveTable,
    lines: Lines | None = None,
    two_photon_rate_per_s: float | None = None,
    physics: Physics | None = None,
    scale: FloatArray | None = None,
) -> Atom:
    """Pack a table with its lines, constants and scale factors.

    Raises
    ------
    InputError
        If lines are asked for whose upper level the table does not keep, or the rate is negative.
    """
    if two_photon_rate_per_s is None:
        two_photon_rate_per_s = table.setup.two_photon_rate_per_s
    if not 0.0 <= two_photon_rate_per_s <= 1e6:
        raise InputError(
            f"two_photon_rate_per_s = {two_photon_rate_per_s:g}: allowed are 0 to 1e6 s^-1"
        )
    chosen = table.setup.lines if lines is None else lines
    check_without_field(chosen)
    measured = _measured_atom(table, chosen)
    constants = measured.constants.copy()
    factor = scales(table.setup.physics if physics is None else physics)
    ln_scale = np.zeros(len(rate_names(table))) if scale is None else scale
    constants[0] = two_photon_rate_per_s * factor.two_photon_rate * math.exp(ln_scale[-1])
    constants[1] = math.log(factor.energy)
    constants[2] = math.log(factor.recombination)
    constants[3] = math.log(factor.line_rate)
    constants[4] *= factor.compton_rate
    # (a m)^3, the inverse volume that a thermal wavelength cubed gains at T'.
    constants[5] += 1.5 * math.log(factor.energy * factor.reduced_mass)
    # A ~ a^5 m; tau ~ A/energy^3.
    line = measured.line * np.array(
        [[factor.line_rate], [factor.line_rate / factor.energy**3], [1.0]]
    )
    return measured._replace(constants=constants, line=line, scale=ln_scale[:-1].copy())


@lru_cache(maxsize=32)
def _measured_atom(table: EffectiveTable, lines: Lines) -> Atom:
    """Everything that depends on the table and the lines alone, with measured constants."""
    kept, unit = table.kept, table.scales.energy
    energy_ev = kept.energy_ev / unit
    chosen = resonance_lines(kept, _line_count(table, lines), Scales())
    wavelength = chosen.wavelength_cm * unit
    depth = chosen.weight_ratio * chosen.einstein_a_per_s * wavelength**3 / (8.0 * math.pi)
    saha = table.saha
    two_photon = np.zeros((1, 1))
    if lines.two_photon == "stimulated":
        two_photon = stimulation_polynomials(
            table.log_low, table.log_high, len(table.equilibrium), float(energy_ev[0])
        )
    ionization_ev = float(energy_ev[0] + kept.ionization_energy_ev[0] / unit)
    return Atom(
        np.array([table.log_low, table.log_high, table.ratio_low, table.ratio_high]),
        _plain(table.equilibrium),
        _plain(table.exchange),
        _plain(table.departure),
        np.array(table.lower, dtype=np.int64),
        np.array(table.upper, dtype=np.int64),
        np.stack([table.barrier_k, table.rise_k, table.log_weight_ratio]),
        np.stack(
            [
                np.log(kept.statistical_weight / 2.0),
                energy_ev / const.BOLTZMANN_EV_K,
                saha.offset,
                saha.ionization_k,
            ]
        ),
        np.array(chosen.upper, dtype=np.int64),
        np.stack([chosen.einstein_a_per_s, depth, chosen.energy_ev / unit / const.BOLTZMANN_EV_K]),
        _MODES[lines.hydrogen],
        _plain(two_photon),
        np.zeros(len(kept) + len(table.lower)),
        _constants(ionization_ev),
    )


def _plain(values: FloatArray) -> FloatArray:
    """A contiguous writable copy: kernels are compiled once for each kind of array."""
    return np.array(values, dtype=np.float64, order="C")


def _constants(ionization_ev: float) -> FloatArray:
    """Elements of `Atom.constants` that do not wait for a choice."""
    at_k = 4000.0
    # ln S = offset + 1.5 ln T - ln n_H - I/kT, read off the function of the background.
    reach = ionization_ev / (const.BOLTZMANN_EV_K * at_k)
    odds = float(saha_log_odds(1e10, at_k, ionization_ev))
    # u = h + asinh(e^h/2) inverts to S = e^(2u)/(1 + e^u).
    log_s = 2.0 * odds - math.log1p(math.exp(odds))
    offset = log_s + math.log(1e10) + reach - 1.5 * math.log(at_k)
    compton = float(compton_rate_per_s(1.0, 1.0, 0.0)) * 2.0
    return np.array([0.0, 0.0, 0.0, 0.0, compton, offset, ionization_ev / const.BOLTZMANN_EV_K])


def _line_count(table: EffectiveTable, lines: Lines) -> int:
    """Lines asked for, all of which must start from a kept level."""
    wanted = lines.lyman_lines
    atom = table.setup.hydrogen
    if isinstance(wanted, str) and atom.highest_resolved < atom.n_max:
        raise InputError(
            f"lines.lyman_lines = {wanted!r}: only levels resolved in l can have open Lyman lines, "
            f"and this table has whole shells above n = {atom.highest_resolved}; give a number"
        )
    count = atom.n_max - 1 if isinstance(wanted, str) else int(wanted)
    kept = set(zip(table.kept.n.tolist(), table.kept.l.tolist(), strict=True))
    missing = [n for n in range(2, count + 2) if (n, 1) not in kept]
    if missing:
        raise InputError(
            f"lines.lyman_lines = {wanted!r}: needs {missing[0]}p, which this table does not keep; "
            f"distill with lyman_lines = {count} or keep it"
        )
    return count
