"""One step of a field resolved in frequency, set up by hand: grid, conditions, work space."""

from __future__ import annotations

import math
from functools import lru_cache
from typing import Any, NamedTuple

import numpy as np

from levelnet import constants as const
from levelnet.background.conditions import Conditions
from levelnet.errors import Outcome
from levelnet.escape.cells import frequency_cells
from levelnet.escape.frequency_step import fitted_step
from levelnet.escape.lines import Lines
from levelnet.escape.resolved import ResolvedField
from levelnet.history.atom import build_ladder, resonance_lines
from levelnet.history.equations import SlowEquations
from levelnet.history.march import make_room
from levelnet.history.march_path import make_path
from levelnet.history.setup import Setup
from levelnet.kernels import transfer as kernel
from levelnet.kernels.transfer import Cells, Moment, Path
from levelnet.network.ladder import Ladder
from levelnet.network.reduced import KeptLevels
from levelnet.network.tabulation import live_reduction
from levelnet.numerics.stepping import Trajectory
from tests.small_runs import RECOMBINING, small_setup

# What the accuracy asked by default gives, and a coarse grid for laws that hold on any.
DEFAULT_STEP, COARSE_STEP = 1.7e-4, 1e-3
NOTHING = {name: False for name in ("feedback", "excited_two_photon", "raman", "scattering")}
SWITCHES: dict[str, tuple[str, dict[str, Any]]] = {
    "lines alone": ("spontaneous", NOTHING),
    "feedback": ("spontaneous", NOTHING | {"feedback": True}),
    "stimulated": ("stimulated", NOTHING),
    "distorted": ("distorted", NOTHING),
    "excited": ("spontaneous", NOTHING | {"excited_two_photon": True}),
    "raman": ("spontaneous", NOTHING | {"raman": True}),
    "scattering": ("spontaneous", NOTHING | {"scattering": True}),
    "all": ("distorted", {}),
}


class Atom(NamedTuple):
    """What a grid is made from."""

    setup: Setup
    ladder: Ladder
    kept: KeptLevels
    cells: Cells


@lru_cache(maxsize=32)
def atom(which: str = "all", step: float = COARSE_STEP, lyman: int = 3, n_max: int = 5) -> Atom:
    """Hydrogen and its grid with one set of switches."""
    two_photon, transfer = SWITCHES[which]
    lines = Lines(hydrogen="transfer", two_photon=two_photon, lyman_lines=lyman, transfer=transfer)
    # Nonrelativistic, as the grid is, so that a line has the energy of the middle of its cell.
    setup = small_setup(n_max, 400.0, lines=lines, hydrogen={"energies": "nonrelativistic"})
    ladder = build_ladder(setup, keeps=lines.field_levels)
    cells = frequency_cells(
        ladder.kept,
        resonance_lines(ladder.kept, lyman),
        lines,
        fitted_step(step),
        setup.two_photon_rate_per_s,
    )
    return Atom(setup, ladder, ladder.kept, cells)


def moment(cells: Cells, matter: float = 0.98, around: Conditions = RECOMBINING) -> Moment:
    """Conditions with T_m = `matter` T_r; packets and scattering from first principles.

    The scattering unit is D of Fokker-Planck theory at unit distance in ln nu, n_1s c sigma k T_m/
    (m_H c^2) per x_1s, times the photon modes 8 pi nu^3/c^3 per hydrogen nucleus.
    """
    kt = const.BOLTZMANN_EV_K * around.radiation_temperature_k
    frequency_hz = cells.energy_ev / const.PLANCK_EV_S
    wavelength_cm = const.SPEED_OF_LIGHT_CM_S / frequency_hz
    einstein_a = float(cells.line_depth[0]) * 8.0 * math.pi / wavelength_cm**3 / 3.0
    modes = 8.0 * math.pi / wavelength_cm**3 / around.hydrogen_density_cm3
    wing = einstein_a / (4.0 * math.pi**2 * frequency_hz**2)
    sigma = 3.0 * wavelength_cm**2 / (8.0 * math.pi) * einstein_a * wing
    rest_ev = const.HYDROGEN_ATOM_MASS_G * const.SPEED_OF_LIGHT_CM_S**2 / const.ERG_PER_EV
    per_s = around.hydrogen_density_cm3 * const.SPEED_OF_LIGHT_CM_S * sigma * matter * kt / rest_ev
    return Moment(
        kt,
        matter * kt,
        modes * around.hubble_rate_per_s,
        around.hydrogen_density_cm3 / around.hubble_rate_per_s,
        per_s * modes,
        around.ground_fraction,
    )


def weight_ratio(kept: KeptLevels) -> np.ndarray:
    """Statistical weights over that of the ground state."""
    return kept.statistical_weight / 2.0


def boltzmann_populations(one: Atom, now: Moment) -> np.ndarray:
    """Populations in equilibrium with the ground state at T_r."""
    return now.ground * weight_ratio(one.kept) * np.exp(-one.kept.energy_ev / now.radiation_kt_ev)


def blackbody(cells: Cells, kt_ev: float) -> np.ndarray:
    """Occupation number (Wien) in the middle of every cell."""
    return np.exp(-cells.energy_ev * np.exp(cells.offset) / kt_ev)


class Step:
    """One step: the room is filled, K and s are there, the packets may go on."""

    def __init__(self, one: Atom, now: Moment, field: np.ndarray, cells: Cells | None = None):
        """Let the field couple the levels."""
        self.one, self.now = one, now
        self.cells = cells or one.cells
        self.ratio = weight_ratio(one.kept)
        self.room = make_room(self.cells)
        kernel.begin(self.cells, now.radiation_kt_ev, self.room)
        self.room.field[:] = field
        self.couple()

    def couple(self) -> None:
        """Work out K and s of the field as it is now, at the same temperature again."""
        n, kt = len(self.one.kept), self.now.radiation_kt_ev
        boltzmann = np.exp(-self.cells.energy_ev * np.expm1(self.cells.offset) / kt)
        self.room.boltzmann[:] = boltzmann
        self.loss, self.source = np.zeros((n, n)), np.zeros(n)
        kernel.unit_absorption(self.cells, kt, self.ratio, self.room)
        kernel.couple_field(self.cells, self.now, self.ratio, self.room, self.loss, self.source)

    def net(self, departure: np.ndarray) -> np.ndarray:
        """Net flow of each level to the ground state."""
        return self.loss @ departure - self.source

    def advance(self, departure: np.ndarray) -> tuple[float, np.ndarray, np.ndarray]:
        """Photons gained, the field as it leaves the cells (less the lowest), sides of lines."""
        sides = np.empty((len(self.cells.line_cell), 2))
        gained = kernel.advance_field(self.cells, self.now, self.ratio, departure, self.room, sides)
        return gained, self.room.field[:-1].copy(), sides


def path_of(one: Atom, matter: float = 0.98, redshift: float = 1100.0) -> Path:
    """The way around one redshift with T_m = `matter` T_r, from the network itself."""
    lines = resonance_lines(one.kept, len(one.cells.line_cell))
    setup, middle = one.setup, -math.log1p(redshift)
    equations = SlowEquations(
        setup.cosmology,
        live_reduction(one.ladder),
        lines,
        ResolvedField(),
        setup.two_photon_rate_per_s,
        "stimulated" if setup.lines.two_photon == "distorted" else setup.lines.two_photon,
    )
    time = middle + np.linspace(-0.1, 0.1, 5)
    lag = np.stack([np.zeros(5), np.full(5, math.log(matter))], axis=1)
    reference = Trajectory(time, lag, Outcome.CONVERGED, 0, 0)
    return make_path(
        equations, reference, middle - 0.02, middle + 0.02, setup.lines.two_photon != "distorted"
    )


def steady_escape(width: float, recoil: bool = True) -> tuple[float, Step, tuple[float, float]]:
    """Escape over Sobolev's once a constant source, T and H have made the field stationary.

    Scattering alone acts. The volume nu^3/n_H of a packet is held constant too, as it is in truth.

    Parameters
    ----------
    width : float
        d ln nu asked.
    recoil : bool
        False: temperatures far above the photon's energy, at the same diffusion.

    Returns
    -------
    escape : float
    step : Step
        The last one.
    law : (float, float)
        h nu/kT, and D_nu delta^2/H with D_nu the diffusion at the distance delta from the line,
        both in ln nu.
    """
    one = atom("scattering", width, lyman=1)
    cells, now = one.cells, moment(one.cells, 1.0)
    law = (
        cells.energy_ev / now.radiation_kt_ev,
        now.scattering_per_s * now.ground / now.packet_per_s,
    )
    if not recoil:
        now = now._replace(radiation_kt_ev=1e30, matter_kt_ev=1e30)
    first = cells.first_scattering
    below = cells.offset[first : first + len(cells.conductance)] - 0.5 * cells.step
    flat = cells._replace(
        growth=np.ones_like(cells.growth), conductance=cells.conductance * np.exp(-3.0 * below)
    )
    upper, departure = cells.line_upper[0], np.zeros(len(one.kept))
    departure[upper] = now.ground * weight_ratio(one.kept)[upper]
    step = Step(one, now, np.zeros(len(cells.offset)), flat)
    escape = 0.0
    for _ in range(math.ceil(0.15 / cells.step)):
        step.couple()
        escape = step.net(departure)[upper] / now.packet_per_s
        step.advance(departure)
    return float(escape), step, law
