"""The radiation field resolved in frequency: one step of its cells, and the march through time.

Cells are numbered by ascending frequency and all equally wide in ln nu; a step of time carries
every packet of photons through one cell and on into the next one below. Occupation numbers are
departures from the blackbody at T_r (Wien), so that equilibrium is zero everywhere and nothing
large is subtracted. Populations and conditions are those of the middle of the step.

In a cell that levels i share, each absorbs alpha_i = x_1s g_i a_i and emits alpha_i y D_i, with
y = exp((E_Lya - E)/kT_r) of the cell, y_i that of the level, D_i = d_i/(x_1s g_i y_i) and d_i the
departure of its population. A packet of p photons per unit occupation and second goes as

    p (f_out - f_in) = sum_i alpha_i y D_i - A f_mean + scattering,     A = sum_i alpha_i.

Without scattering f_mean = f_eq + (f_in - f_eq) g with g = (1 - exp(-tau))/tau, tau = A/p: the
exact mean over the cell. With it f_mean = theta f_out + (1 - theta) f_in, and neighbours are
coupled.
"""

import math
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from .compile import kernel

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]

DONE, SINGULAR, NOT_CONVERGED = 0, 1, 2
# Places in the series of a `Path`, after what it holds of levels and pairs.
HELIUM, LOG_HUBBLE, LOG_LAG, LOG_DECAY = -4, -3, -2, -1
# Places in the report of a `Track`.
STEPS, ELIMINATIONS, PHOTON_ERROR, ATOM_ERROR = 0, 1, 2, 3
# Places in what one step hands on to the next besides the field: changes of x_HI in the last four
# steps, the latest first, slope of the secant, x_HII and x_HI.
N_GAINS, SLOPE, IONIZED, NEUTRAL, N_CARRIED = 4, 4, 5, 6, 7
# Exchange with the neighbours in one step above which the mean of a cell leans to its end, so that
# the field does not ring for long. Leaning is of first order: at 30 it was worth 3e-5 in x_e on any
# grid, at 1000 less than 1e-6.
STIFF = 1000.0
# tau of a cell above which its mean is not taken from a series.
THICK = 0.02


class Cells(NamedTuple):
    """The frequency grid and what levels do in its cells.

    Attributes
    ----------
    offset : ndarray, shape (n_cells,)
        ln(nu/nu_Lya) of the middle of each cell, ascending and evenly spaced.
    growth : ndarray, shape (n_cells,)
        (nu/nu_Lya)^3.
    weight : ndarray, shape (n_levels, n_cells), s^-1
        Two-photon or Raman rate of each level integrated over the cell, without the soft photon's
        factor.
    level : ndarray of int, shape (n_levels,)
        Position of these levels among the kept ones.
    gap_ev : ndarray, shape (n_levels,), eV
        Energy of the level less that of Lyman-alpha.
    line_cell, line_upper : ndarray of int, shape (n_lines,)
        Cell and upper level of each open line, Lyman-alpha first.
    line_depth : ndarray, shape (n_lines,), cm^3 s^-1
        Sobolev optical depth times H/n_1s.
    conductance : ndarray, shape (n_scattering + 1,)
        Scattering between neighbours around Lyman-alpha in the unit of the moment; the first and
        the last, towards cells without scattering, are zero.
    first_scattering : int
        Lowest of these cells.
    energy_ev : float, eV
        Of Lyman-alpha.
    step : float
        Width of a cell in ln nu.
    forget_above : int
        1 where lines above Lyman-alpha see a blackbody, forget their photons and let others pass.
    """

    offset: FloatArray
    growth: FloatArray
    weight: FloatArray
    level: IntArray
    gap_ev: FloatArray
    line_cell: IntArray
    line_upper: IntArray
    line_depth: FloatArray
    conductance: FloatArray
    first_scattering: int
    energy_ev: float
    step: float
    forget_above: int


class Room(NamedTuple):
    """The field, which carries over from step to step, and work space.

    Attributes
    ----------
    field : ndarray, shape (n_cells,)
        Departure of the occupation number of the packet that enters each cell.
    boltzmann : ndarray, shape (n_cells,)
        y in the middle of each cell in the middle of the step.
    unit, scaled : ndarray, shape (n_levels, n_cells), s^-1
        alpha_i/x_1s, and work space.
    absorption, mean, kept_back, lit : ndarray, shape (n_cells,)
        A; g y; (1 - g) y/A; g f_in. All but A are zero in cells with scattering.
    theta : ndarray, shape (n_scattering,)
        Weight of f_out in the mean.
    response : ndarray, shape (n_scattering, n_levels + 2)
        Mean field of cells with scattering: per unit D of each level, without any, and per unit
        occupation of the core of Lyman-alpha.
    line_share : ndarray, shape (n_lines,)
        1 - exp(-tau) of the lines.
    """

    field: FloatArray
    boltzmann: FloatArray
    unit: FloatArray
    scaled: FloatArray
    absorption: FloatArray
    mean: FloatArray
    kept_back: FloatArray
    lit: FloatArray
    theta: FloatArray
    response: FloatArray
    line_share: FloatArray


class Moment(NamedTuple):
    """Conditions in the middle of a step.

    Attributes
    ----------
    radiation_kt_ev, matter_kt_ev : float, eV
        k T.
    packet_per_s : float, s^-1
        8 pi nu^3 H/(c^3 n_H) at Lyman-alpha: photons per hydrogen nucleus and unit occupation that
        the expansion carries past it in a second.
    column : float, cm^-3 s
        n_H / H.
    scattering_per_s : float, s^-1
        Unit of the scattering conductances at x_1s = 1.
    ground : float
        x_1s.
    """

    radiation_kt_ev: float
    matter_kt_ev: float
    packet_per_s: float
    column: float
    scattering_per_s: float
    ground: float


@kernel
def boltzmann_factor(energy_ev: float, offset: float, kt_ev: float) -> float:
    """Y of a cell, held inside the doubles: beyond, the soft photon's part is 0 anyway."""
    exponent = -energy_ev * math.expm1(offset) / kt_ev
    return math.exp(min(700.0, max(-700.0, exponent)))


@kernel
def begin(cells: Cells, kt_ev: float, room: Room) -> None:
    """Fill the Boltzmann factors of the first step, and empty the field."""
    for j in range(cells.offset.shape[0]):
        room.boltzmann[j] = boltzmann_factor(cells.energy_ev, cells.offset[j], kt_ev)
        room.field[j] = 0.0


@kernel
def unit_absorption(cells: Cells, kt_ev: float, weight_ratio: FloatArray, room: Room) -> None:
    """alpha_i/x_1s of every level in every cell at one T_r."""
    y = room.boltzmann
    for i in range(cells.level.shape[0]):
        own = math.exp(-cells.gap_ev[i] / kt_ev)
        strength = weight_ratio[cells.level[i]] * own
        weight, unit = cells.weight[i], room.unit[i]
        for j in range(y.shape[0]):
            # Equal where the soft photon has no energy left; there the weight is zero.
            unit[j] = strength * weight[j] / max(abs(y[j] - own), 1e-300)


@kernel
def _depths(cells: Cells, moment: Moment, room: Room) -> None:
    """A, and for cells without scattering the mean field's weights."""
    n_levels, n_cells = room.unit.shape
    total = room.absorption
    for j in range(n_cells):
        total[j] = 0.0
    for i in range(n_levels):
        unit = room.unit[i]
        for j in range(n_cells):
            total[j] += moment.ground * unit[j]
    # Thin cells first, without a branch, so that the loop is compiled to vectors.
    for j in range(n_cells):
        per_packet = 1.0 / (moment.packet_per_s * cells.growth[j])
        tau = total[j] * per_packet
        rest = 0.5 - tau * (1.0 / 6.0 - tau * (1.0 / 24.0 - tau * (1.0 / 120.0)))
        mean = 1.0 - tau * rest
        room.mean[j] = mean * room.boltzmann[j]
        room.kept_back[j] = rest * per_packet * room.boltzmann[j]
        room.lit[j] = mean * room.field[j]
    for j in range(n_cells):
        if total[j] >= THICK * moment.packet_per_s * cells.growth[j]:
            tau = total[j] / (moment.packet_per_s * cells.growth[j])
            mean = -math.expm1(-tau) / tau
            room.mean[j] = mean * room.boltzmann[j]
            room.kept_back[j] = (1.0 - mean) / total[j] * room.boltzmann[j]
            room.lit[j] = mean * room.field[j]
    first = cells.first_scattering
    for j in range(first, first + room.theta.shape[0]):
        room.mean[j] = room.kept_back[j] = room.lit[j] = 0.0


@kernel
def _couple_far(
    cells: Cells, ground: float, share: FloatArray, room: Room, loss: FloatArray, source: FloatArray
) -> None:
    """Add all cells without scattering; `share` turns d of a level into D."""
    n_levels, n_cells = room.unit.shape
    for i in range(n_levels):
        unit, scaled = room.unit[i], room.scaled[i]
        for j in range(n_cells):
            scaled[j] = unit[j] * room.kept_back[j]
    leak, lit = np.dot(room.unit, room.mean), np.dot(room.unit, room.lit)
    for i in range(n_levels):
        own = cells.level[i]
        loss[own, own] += ground * leak[i] * share[i]
        source[own] += ground * lit[i]
        for k in range(i):
            other = cells.level[k]
            joined = ground * ground * np.dot(room.unit[i], room.scaled[k])
            loss[own, own] += joined * share[i]
            loss[own, other] -= joined * share[k]
            loss[other, other] += joined * share[k]
            loss[other, own] -= joined * share[i]


@kernel
def _scattering_system(
    cells: Cells, moment: Moment, room: Room, diagonal: FloatArray, down: FloatArray, up: FloatArray
) -> None:
    """Rows of the cells around Lyman-alpha: diagonal, couplings, and right sides in `response`."""
    n, n_levels = room.theta.shape[0], cells.level.shape[0]
    first, core, D = cells.first_scattering, cells.line_cell[0], cells.step
    half = cells.energy_ev * math.sinh(0.5 * D)
    unit = moment.scattering_per_s * moment.ground
    blackbody = math.exp(-cells.energy_ev / moment.radiation_kt_ev)
    for k in range(n):
        diagonal[k] = room.absorption[first + k]
        down[k] = up[k] = 0.0
        for i in range(n_levels + 2):
            room.response[k, i] = 0.0
        for i in range(n_levels):
            room.response[k, i] = (
                moment.ground * room.unit[i, first + k] * room.boltzmann[first + k]
            )
    for k in range(1, n):
        # Between cell k - 1 and cell k; the exponential is taken half-way.
        j = first + k
        energy = half * math.exp(cells.offset[j] - 0.5 * D)
        rise = math.exp(energy / moment.matter_kt_ev)
        flux = unit * cells.conductance[k]
        diagonal[k - 1] += flux / rise
        up[k - 1] = flux * rise
        diagonal[k] += flux * rise
        down[k] = flux / rise
        push = energy / moment.matter_kt_ev - energy / moment.radiation_kt_ev
        level = blackbody * math.sqrt(room.boltzmann[j - 1]) * math.sqrt(room.boltzmann[j])
        drift = 2.0 * flux * math.sinh(push) * level
        room.response[k - 1, n_levels] += drift
        room.response[k, n_levels] -= drift
    for k in range(n):
        packet = moment.packet_per_s * cells.growth[first + k]
        tau = room.absorption[first + k] / packet
        theta = 0.5 + tau / 12.0
        if tau > 0.05:
            theta = -1.0 / math.expm1(-tau) - 1.0 / tau
        stiff = (diagonal[k] / packet) ** 2
        theta = max(theta, 0.5 + 0.5 * stiff / (stiff + STIFF * STIFF))
        room.theta[k] = theta
        diagonal[k] += packet / theta
        room.response[k, n_levels] += packet / theta * room.field[first + k]
    k = core - first
    diagonal[k], down[k], up[k] = 1.0, 0.0, 0.0
    for i in range(n_levels + 1):
        room.response[k, i] = 0.0
    room.response[k, n_levels + 1] = 1.0


@kernel
def _respond(cells: Cells, moment: Moment, room: Room) -> None:
    """Solve the cells around Lyman-alpha for all right sides at once (tridiagonal)."""
    n, columns = room.response.shape
    diagonal, down, up = np.empty(n), np.empty(n), np.empty(n)
    _scattering_system(cells, moment, room, diagonal, down, up)
    for k in range(1, n):
        factor = down[k] / diagonal[k - 1]
        diagonal[k] -= factor * up[k - 1]
        for i in range(columns):
            room.response[k, i] += factor * room.response[k - 1, i]
    for i in range(columns):
        room.response[n - 1, i] /= diagonal[n - 1]
    for k in range(n - 2, -1, -1):
        for i in range(columns):
            above = up[k] * room.response[k + 1, i]
            room.response[k, i] = (room.response[k, i] + above) / diagonal[k]


@kernel
def _couple_near(
    cells: Cells,
    moment: Moment,
    share: FloatArray,
    core_share: float,
    room: Room,
    loss: FloatArray,
    source: FloatArray,
) -> None:
    """Add the cells with scattering, and what it carries out of the core of Lyman-alpha."""
    n, n_levels = room.theta.shape[0], cells.level.shape[0]
    first, core, upper = cells.first_scattering, cells.line_cell[0], cells.line_upper[0]
    for k in range(n):
        j = first + k
        if j == core:
            continue
        response, y = room.response[k], room.boltzmann[j]
        refill = moment.packet_per_s * cells.growth[j] / room.theta[k]
        lost = refill + room.absorption[j]
        for i in range(n_levels):
            own = cells.level[i]
            alpha = moment.ground * room.unit[i, j]
            for m in range(n_levels):
                loss[own, cells.level[m]] -= alpha * response[m] * share[m]
            loss[own, own] += alpha * y * share[i]
            loss[own, upper] -= alpha * response[n_levels + 1] * core_share
            source[own] += alpha * response[n_levels]
            # What leaves the core is what the packets gain less what levels give.
            loss[upper, own] += (lost * response[i] - alpha * y) * share[i]
        loss[upper, upper] += lost * response[n_levels + 1] * core_share
        source[upper] += refill * room.field[j] - lost * response[n_levels]


@kernel
def couple_field(
    cells: Cells,
    moment: Moment,
    weight_ratio: FloatArray,
    room: Room,
    loss: FloatArray,
    source: FloatArray,
) -> None:
    """Add to K and s what the field does to the kept levels over one step.

    The net flow to the ground state out of level i is (K d - s)_i, d the departures of populations
    per hydrogen nucleus from Boltzmann equilibrium with the ground state.
    """
    n_levels = cells.level.shape[0]
    share = np.empty(n_levels)
    for i in range(n_levels):
        own = math.exp(-cells.gap_ev[i] / moment.radiation_kt_ev)
        share[i] = 1.0 / (moment.ground * weight_ratio[cells.level[i]] * own)
    _depths(cells, moment, room)
    if n_levels:
        _couple_far(cells, moment.ground, share, room, loss, source)
    for line in range(cells.line_cell.shape[0]):
        upper, j = cells.line_upper[line], cells.line_cell[line]
        depth = cells.line_depth[line] * moment.column * moment.ground
        room.line_share[line] = -math.expm1(-depth)
        carried = moment.packet_per_s * cells.growth[j] * room.line_share[line]
        loss[upper, upper] += carried / (moment.ground * weight_ratio[upper])
        if line == 0 or not cells.forget_above:
            source[upper] += carried * room.field[j]
    if room.theta.shape[0]:
        _respond(cells, moment, room)
        upper = cells.line_upper[0]
        core_share = 1.0 / (moment.ground * weight_ratio[upper])
        _couple_near(cells, moment, share, core_share, room, loss, source)


@kernel
def advance_field(
    cells: Cells,
    moment: Moment,
    weight_ratio: FloatArray,
    departure: FloatArray,
    room: Room,
    sides: FloatArray,
) -> float:
    """Carry every packet through its cell and into the next one below, in place.

    `sides`, shape (n_lines, 2), is filled with the departures of the field on the blue and the red
    side of each line. Returns the photons gained per hydrogen nucleus and second, those that are
    forgotten at once among them.
    """
    n_levels, n_cells = room.unit.shape
    d = np.empty(n_levels)
    for i in range(n_levels):
        own = math.exp(-cells.gap_ev[i] / moment.radiation_kt_ev)
        # Emission alpha_i y D_i, with alpha_i = x_1s unit_i.
        d[i] = departure[cells.level[i]] / (weight_ratio[cells.level[i]] * own)
    out = room.scaled[0] if n_levels else np.empty(n_cells)
    for j in range(n_cells):
        out[j] = -room.absorption[j] * room.lit[j]
    for i in range(n_levels):
        unit = room.unit[i]
        for j in range(n_cells):
            # First times the mean, as in K: far below the line in a cold field it is as large as
            # the rest is small.
            out[j] += unit[j] * room.mean[j] * d[i]
    for j in range(n_cells):
        out[j] = room.field[j] + out[j] / (moment.packet_per_s * cells.growth[j])
    first, n = cells.first_scattering, room.theta.shape[0]
    core = departure[cells.line_upper[0]] / (moment.ground * weight_ratio[cells.line_upper[0]])
    for k in range(n):
        mean = room.response[k, n_levels] + room.response[k, n_levels + 1] * core
        for i in range(n_levels):
            mean += room.response[k, i] * d[i] / moment.ground
        out[first + k] = room.field[first + k] + (mean - room.field[first + k]) / room.theta[k]
    gained = 0.0
    for line in range(cells.line_cell.shape[0]):
        upper, j = cells.line_upper[line], cells.line_cell[line]
        own = departure[upper] / (moment.ground * weight_ratio[upper])
        if line == 0 or not cells.forget_above:
            out[j] = room.field[j] + (own - room.field[j]) * room.line_share[line]
            sides[line, 0], sides[line, 1] = room.field[j], out[j]
        else:
            sides[line, 0], sides[line, 1] = 0.0, own * room.line_share[line]
            gained += cells.growth[j] * sides[line, 1]
    for j in range(n_cells):
        gained += cells.growth[j] * (out[j] - room.field[j])
    # A packet keeps h nu/kT; y counts from Lyman-alpha, which does not redshift.
    top, kt = n_cells - 1, moment.radiation_kt_ev * math.exp(-cells.step)
    rise = math.exp(cells.energy_ev / kt * -math.expm1(-cells.step))
    for j in range(top):
        room.field[j] = out[j + 1]
        room.boltzmann[j] = min(room.boltzmann[j + 1] * rise, 1e304)
    room.field[top] = 0.0
    room.boltzmann[top] = boltzmann_factor(cells.energy_ev, cells.offset[top], kt)
    return gained * moment.packet_per_s


class Path(NamedTuple):
    """What the march needs of the background and of the interior of the atom along the way.

    Attributes
    ----------
    start, spacing : float
        First node in ln a, and the distance of nodes.
    series : ndarray, shape (n_pieces, 4, n_stored)
        Cubic pieces in the distance from their lower node, highest power first, of: ln A_i at the
        reference T_m, its slope in ln T_m, ln of B_i x_B,i/x_1s, ln of the downward exchange of
        each pair; then, at `HELIUM`, `LOG_HUBBLE`, `LOG_LAG` and `LOG_DECAY`, the electrons of
        helium per hydrogen nucleus, ln H, ln of the reference T_m over T_r, ln of the 2s-1s rate
        that does not go through the field. Beyond the nodes the last piece goes on.
    lower, upper : ndarray of int, shape (n_pairs,)
        Pairs of kept levels.
    weight_ratio, energy_ev : ndarray, shape (n_kept,)
        Weight over that of the ground state, and energy above it.
    radiation_kt_ev, hydrogen_cm3, helium_ratio : float
        k T_r (eV) and n_H (cm^-3) today, n_He/n_H.
    compton : float
        Compton rate times (1 + f_He + x_e)/x_e over T_r^4, T_r over that of today.
    packet, scattering : float
        8 pi nu^3/c^3 at Lyman-alpha (cm^-3), and the unit of scattering conductances over
        8 pi nu^3/c^3 k T_m (cm^3 s^-1 eV^-1).
    """

    start: float
    spacing: float
    series: FloatArray
    lower: IntArray
    upper: IntArray
    weight_ratio: FloatArray
    energy_ev: FloatArray
    radiation_kt_ev: float
    hydrogen_cm3: float
    helium_ratio: float
    compton: float
    packet: float
    scattering: float


class Track(NamedTuple):
    """What the march leaves behind.

    Attributes
    ----------
    state : ndarray, shape (n_steps + 1, 2)
        u = ln(x_HII/x_HI) and v = ln(T_m/T_r) at the ends of steps.
    loss : ndarray, shape (n_records, n_kept, n_kept), s^-1
        K in the middle of every `stride`-th step, the first included, without the decay of 2s
        beside the field.
    source : ndarray, shape (n_records, n_kept), s^-1
        s less K x_B there.
    sides : ndarray, shape (n_records, n_lines, 2)
        Departures of the field on the blue and the red side of each line.
    spectra : ndarray, shape (n_spectra, n_cells)
        The field at the ends of the steps asked; packets stand at the upper edges of the cells.
    report : ndarray, shape (4,)
        At `STEPS`, `ELIMINATIONS`, `PHOTON_ERROR` and `ATOM_ERROR`: steps done, elimination count,
        largest relative imbalance of photons and of atoms.
    """

    state: FloatArray
    loss: FloatArray
    source: FloatArray
    sides: FloatArray
    spectra: FloatArray
    report: FloatArray


@kernel
def _stored(path: Path, time: float, values: FloatArray) -> None:
    """Evaluate the series at one time."""
    n_pieces, _, n_stored = path.series.shape
    piece = min(n_pieces - 1, max(0, int((time - path.start) / path.spacing)))
    x = time - path.start - piece * path.spacing
    c = path.series[piece]
    for i in range(n_stored):
        values[i] = ((c[0, i] * x + c[1, i]) * x + c[2, i]) * x + c[3, i]


@kernel
def _interior(path: Path, kt_ev: float, stored: FloatArray, matrix: FloatArray) -> None:
    """M of the kept levels, without what leads to the ground state."""
    n = path.weight_ratio.shape[0]
    for i in range(n):
        for k in range(n):
            matrix[i, k] = 0.0
        boltzmann = math.log(path.weight_ratio[i]) - path.energy_ev[i] / kt_ev
        matrix[i, i] = math.exp(stored[2 * n + i] - boltzmann)
    for pair in range(path.lower.shape[0]):
        low, high = path.lower[pair], path.upper[pair]
        down = math.exp(stored[3 * n + pair])
        ratio = path.weight_ratio[high] / path.weight_ratio[low]
        up = down * ratio * math.exp((path.energy_ev[low] - path.energy_ev[high]) / kt_ev)
        matrix[high, high] += down
        matrix[low, high] -= down
        matrix[low, low] += up
        matrix[high, low] -= up


@kernel
def solve_dense(matrix: FloatArray, right: FloatArray) -> bool:
    """Solve in place by elimination with scaled partial pivoting; False if singular."""
    n = right.shape[0]
    for i in range(n):
        largest = 0.0
        for k in range(n):
            largest = max(largest, abs(matrix[i, k]))
        if not 0.0 < largest < math.inf:
            return False
        for k in range(n):
            matrix[i, k] /= largest
        right[i] /= largest
    for i in range(n):
        pivot = i
        for k in range(i + 1, n):
            if abs(matrix[k, i]) > abs(matrix[pivot, i]):
                pivot = k
        if matrix[pivot, i] == 0.0:
            return False
        if pivot != i:
            for k in range(i, n):
                matrix[i, k], matrix[pivot, k] = matrix[pivot, k], matrix[i, k]
            right[i], right[pivot] = right[pivot], right[i]
        for k in range(i + 1, n):
            factor = matrix[k, i] / matrix[i, i]
            for m in range(i + 1, n):
                matrix[k, m] -= factor * matrix[i, m]
            right[k] -= factor * right[i]
    for i in range(n - 1, -1, -1):
        for k in range(i + 1, n):
            right[i] -= matrix[i, k] * right[k]
        right[i] /= matrix[i, i]
    return True


@kernel
def _matter_lag(before: float, compton: float, step: float) -> float:
    """V in the middle of a step that begins at `before`; Newton's iteration."""
    v = before
    for _ in range(20):
        excess = 2.0 * (v - before) + step * (1.0 - compton * math.expm1(-v))
        change = excess / (2.0 + step * compton * math.exp(-v))
        v -= change
        if abs(change) < 1e-14:
            break
    return v


class Balance(NamedTuple):
    """The kept levels in the middle of a step.

    Attributes
    ----------
    stored : ndarray, shape (n_stored,)
        The series of the path there.
    interior, loss : ndarray, shape (n_kept, n_kept), s^-1
        M and K.
    source, departure : ndarray, shape (n_kept,)
        s less K x_B (s^-1), and d.
    """

    stored: FloatArray
    interior: FloatArray
    loss: FloatArray
    source: FloatArray
    departure: FloatArray


class Slow(NamedTuple):
    """The slow variables in the middle of a step, and what the background says there.

    Attributes
    ----------
    hubble_per_s, hydrogen_cm3, radiation_kt_ev : float
        H, n_H, k T_r.
    electrons, ions, ground, lag : float
        x_e, x_HII, x_1s and v.
    """

    hubble_per_s: float
    hydrogen_cm3: float
    radiation_kt_ev: float
    electrons: float
    ions: float
    ground: float
    lag: float


@kernel
def _moment(path: Path, slow: Slow) -> Moment:
    """What the field needs to know of the conditions."""
    packet = path.packet / slow.hydrogen_cm3
    matter_kt = slow.radiation_kt_ev * math.exp(slow.lag)
    return Moment(
        slow.radiation_kt_ev,
        matter_kt,
        packet * slow.hubble_per_s,
        slow.hydrogen_cm3 / slow.hubble_per_s,
        path.scattering * path.packet * matter_kt,
        slow.ground,
    )


@kernel
def _flow(cells: Cells, path: Path, slow: Slow, room: Room, balance: Balance) -> float:
    """Net recombinations per hydrogen nucleus and second; NaN if the matrix is singular."""
    stored, loss, source, departure = (
        balance.stored,
        balance.loss,
        balance.source,
        balance.departure,
    )
    n = departure.shape[0]
    for i in range(n):
        source[i] = 0.0
        for k in range(n):
            loss[i, k] = 0.0
    loss[0, 0] = math.exp(stored[LOG_DECAY])
    couple_field(cells, _moment(path, slow), path.weight_ratio, room, loss, source)
    log_pairs = math.log(slow.hydrogen_cm3) + (math.log(slow.electrons) + math.log(slow.ions))
    for i in range(n):
        log_capture = stored[i] + stored[n + i] * (slow.lag - stored[LOG_LAG]) + log_pairs
        log_lift = stored[2 * n + i] + math.log(slow.ground)
        departure[i] = source[i] - math.exp(log_capture) * math.expm1(log_lift - log_capture)
    matrix = balance.interior + loss
    if not solve_dense(matrix, departure):
        return math.nan
    total = 0.0
    for i in range(n):
        total -= source[i]
        for k in range(n):
            total += loss[i, k] * departure[k]
    return total


@kernel
def _fractions(log_odds: float) -> tuple[float, float]:
    """x_HII and x_HI from u."""
    small = math.exp(-abs(log_odds))
    large = 1.0 / (1.0 + small)
    small *= large
    return (large, small) if log_odds > 0.0 else (small, large)


class Attempt(NamedTuple):
    """How a step went.

    Attributes
    ----------
    gain, miss : float
        Change of x_HI over the step, and by how much the flow in its middle makes it another.
    slope : float
        Derivative of the second by the first; negative.
    flow : float, s^-1
        Net recombinations per hydrogen nucleus.
    slow : Slow
        The middle of the step.
    eliminations : int
        Of the field and the levels; 0 if a matrix was singular.
    done : bool
        Whether the miss is within the tolerance.
    """

    gain: float
    miss: float
    slope: float
    flow: float
    slow: Slow
    eliminations: int
    done: bool


@kernel
def _settle(
    cells: Cells,
    path: Path,
    here: Slow,
    fractions: tuple[float, float],
    guess: float,
    slope: float,
    limits: tuple[float, int],
    room: Room,
    balance: Balance,
) -> Attempt:
    """Find the change of x_HI over one step by the secant method.

    `here` holds v at the start of the step; `fractions` x_HII and x_HI there; `limits` the relative
    tolerance of the change, and the iterations allowed.
    """
    ionized, neutral = fractions
    hubble = here.hubble_per_s
    compton = path.compton * (here.radiation_kt_ev / path.radiation_kt_ev) ** 4 / hubble
    before, last_guess, last_miss = here.lag, 0.0, 0.0
    flow, miss, slow = 0.0, math.inf, here
    for count in range(limits[1]):
        if not -neutral < guess < ionized:
            guess = max(-0.5 * neutral, min(0.5 * ionized, guess))
        ions, ground = ionized - 0.5 * guess, neutral + 0.5 * guess
        electrons = ions + balance.stored[-4]
        share = electrons / (1.0 + path.helium_ratio + electrons)
        v = _matter_lag(before, compton * share, cells.step)
        slow = Slow(hubble, here.hydrogen_cm3, here.radiation_kt_ev, electrons, ions, ground, v)
        flow = _flow(cells, path, slow, room, balance)
        if not math.isfinite(flow):
            return Attempt(guess, miss, slope, flow, slow, 0, False)
        miss = flow * cells.step / hubble - guess
        if abs(miss) <= limits[0] * max(abs(guess), 1e-9 * min(neutral, ionized)):
            return Attempt(guess, miss, slope, flow, slow, count + 1, True)
        if count and guess != last_guess:  # equal where both were held inside the fractions
            slope = min((miss - last_miss) / (guess - last_guess), -1e-3)
        last_guess, last_miss = guess, miss
        guess -= miss / slope
    return Attempt(guess, miss, slope, flow, slow, limits[1], False)


@kernel
def _record(
    step: int,
    stride: int,
    balance: Balance,
    sides: FloatArray,
    gained: float,
    attempt: Attempt,
    track: Track,
) -> None:
    """Leave behind what one step did, and how well photons and atoms were counted."""
    n, decay = balance.departure.shape[0], math.exp(balance.stored[LOG_DECAY])
    if step % stride == 0:
        record = step // stride
        for i in range(n):
            track.source[record, i] = balance.source[i]
            for k in range(n):
                track.loss[record, i, k] = balance.loss[i, k]
        track.loss[record, 0, 0] -= decay
        track.sides[record] = sides
    flow = max(abs(attempt.flow), 1e-300)
    missing = abs(gained + decay * balance.departure[0] - attempt.flow) / flow
    track.report[STEPS] = step + 1.0
    track.report[ELIMINATIONS] += attempt.eliminations
    unsettled = abs(attempt.miss) / max(abs(attempt.gain), 1e-300)
    track.report[PHOTON_ERROR] = max(track.report[PHOTON_ERROR], missing)
    track.report[ATOM_ERROR] = max(track.report[ATOM_ERROR], unsettled)


@kernel
def march(
    cells: Cells,
    path: Path,
    first: FloatArray,
    stretch: tuple[int, int],
    stride: int,
    spectrum_steps: IntArray,
    limits: tuple[float, int],
    room: Room,
    carried: FloatArray,
    track: Track,
) -> int:
    """March from equilibrium through time, one cell a step, everything implicit.

    A march may be cut anywhere into calls for one stretch after the other, to the same bits.

    Parameters
    ----------
    cells, path : Cells, Path
        The grid and the way.
    first : ndarray, shape (3,)
        ln a, u and v at the start.
    stretch : (int, int)
        Steps done before, and when this call ends; from 0 the march begins.
    stride : int
        Steps from one record to the next.
    spectrum_steps : ndarray of int, ascending
        Steps after which the field is kept.
    limits : (float, int)
        Tolerance of the change of x_HI in a step, relative, and the iterations allowed in a step.
    room, carried : Room; ndarray, shape (7,)
        Work space, and with `field` and `boltzmann` of the first what a step hands on to the next.
    track : Track
        Results.
    """
    n = path.weight_ratio.shape[0]
    balance = Balance(
        np.empty(path.series.shape[2]),
        np.empty((n, n)),
        np.empty((n, n)),
        np.empty(n),
        np.empty(n),
    )
    sides = np.empty((cells.line_cell.shape[0], 2))
    if stretch[0] == 0:
        track.state[0, 0], track.state[0, 1] = first[1], first[2]
        begin(cells, path.radiation_kt_ev * math.exp(-first[0] - 0.5 * cells.step), room)
        carried[:N_GAINS], carried[SLOPE] = 0.0, -1.0
        carried[IONIZED], carried[NEUTRAL] = _fractions(first[1])
    gains, fractions = carried[:N_GAINS], (carried[IONIZED], carried[NEUTRAL])
    kept = 0
    while kept < spectrum_steps.shape[0] and spectrum_steps[kept] <= stretch[0]:
        kept += 1
    for step in range(stretch[0], stretch[1]):
        middle = first[0] + (step + 0.5) * cells.step
        kt = path.radiation_kt_ev * math.exp(-middle)
        _stored(path, middle, balance.stored)
        unit_absorption(cells, kt, path.weight_ratio, room)
        _interior(path, kt, balance.stored, balance.interior)
        hydrogen = path.hydrogen_cm3 * math.exp(-3.0 * middle)
        v = track.state[step, 1]
        electrons = fractions[0] + balance.stored[HELIUM]
        hubble = math.exp(balance.stored[LOG_HUBBLE])
        here = Slow(hubble, hydrogen, kt, electrons, fractions[0], fractions[1], v)
        guess = gains[0]
        if step > 5:  # as a cubic goes on
            guess = 4.0 * gains[0] - 6.0 * gains[1] + 4.0 * gains[2] - gains[3]
        slope = carried[SLOPE]
        attempt = _settle(cells, path, here, fractions, guess, slope, limits, room, balance)
        if not attempt.done:
            return NOT_CONVERGED if attempt.eliminations else SINGULAR
        carried[SLOPE] = attempt.slope
        moment = _moment(path, attempt.slow)
        gained = advance_field(cells, moment, path.weight_ratio, balance.departure, room, sides)
        _record(step, stride, balance, sides, gained, attempt, track)
        for k in range(N_GAINS - 1, 0, -1):
            gains[k] = gains[k - 1]
        gains[0] = attempt.gain
        fractions = (fractions[0] - attempt.gain, fractions[1] + attempt.gain)
        carried[IONIZED], carried[NEUTRAL] = fractions
        track.state[step + 1, 0] = math.log(fractions[0] / fractions[1])
        track.state[step + 1, 1] = 2.0 * attempt.slow.lag - v
        while kept < spectrum_steps.shape[0] and spectrum_steps[kept] == step + 1:
            track.spectra[kept] = room.field
            kept += 1
    return DONE
