"""The effective atom, compiled whole: patches, kept levels, the history and its derivatives.

Everything a millisecond history needs stands in this one file, for a kernel calls only its own
file. Temperatures enter as T' = T/(a^2 m), a and m the fine-structure constant and the reduced mass
over their laboratory values: all that the constants change is then a factor on each rate.
"""

import math
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from .compile import inlined, kernel

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]

# Rows of `Room.vector`, each over the kept levels.
LOG_CAPTURE, SLOPE_RADIATION, SLOPE_MATTER, LOG_PHOTO, SLOPE_PHOTO = 0, 1, 2, 3, 4
CAPTURE, LIFT, PHOTO, LOSS, LOSS_COLUMN, LOSS_TEMPERATURE = 5, 6, 7, 8, 9, 10
LOSS_STRUCTURE, LOSS_MASS, SOURCE, DEPARTURE = 11, 12, 13, 14
FATE, IONIZED, LOSS_FOLDED, PHOTO_FOLDED, EXIT = 15, 16, 17, 18, 19
# What a level takes from the ground state beyond equilibrium; not 0 in lines of helium alone.
EXCESS = 20
N_VECTORS = 21

# Elements of `Room.slope`: derivatives of the net flow by the logarithm named; ln of the scale
# factor on each recombination (with its inverse), each exchange and the two-photon rate follow.
BY_RADIATION, BY_MATTER, BY_DENSITY, BY_HUBBLE, BY_ELECTRONS, BY_IONIZED, BY_GROUND = range(7)
BY_STRUCTURE, BY_MASS, BY_SCALES = 7, 8, 9

# ln of the slowest rate in s^-1 that is told from 0.
_SLOWEST = -300.0

# Columns of `Universe.drive`.
DRIVE_TEMPERATURE, DRIVE_DENSITY, DRIVE_HELIUM, DRIVE_STRUCTURE, DRIVE_MASS = 0, 1, 2, 3, 4
DRIVE_COMPTON, DRIVE_SCALE, N_DRIVES = 5, 6, 7

# Statuses of a history.
DONE, NO_START, TOO_MANY_STEPS, STEP_TOO_SMALL, OUT_OF_RANGE = range(5)

# Whether slopes are wanted beside values. A plain True or False in a call is a type of its own to
# numba, which would compile the longest kernels once for each; elements of an array are not.
VALUES, SLOPES = np.array([False, True])

# The Rosenbrock scheme of levelnet/numerics/stepping.py; a test holds them equal.
STAGE_A = np.array(
    [
        [0.0, 0.0, 0.0, 0.0],
        [1.544000000000000, 0.0, 0.0, 0.0],
        [0.9466785280815826, 0.2557011698983284, 0.0, 0.0],
        [3.314825187068521, 2.896124015972201, 0.9986419139977817, 0.0],
        [1.221224509226641, 6.019134481288629, 12.53708332932087, -0.6878860361058950],
    ]
)
STAGE_C = np.array(
    [
        [0.0, 0.0, 0.0, 0.0, 0.0],
        [-5.668800000000000, 0.0, 0.0, 0.0, 0.0],
        [-2.430093356833875, -0.2063599157091915, 0.0, 0.0, 0.0],
        [-0.1073529058151375, -9.594562251023355, -20.47028614809616, 0.0, 0.0],
        [7.496443313967647, -10.24680431464352, -33.99990352819905, 11.70890893206160, 0.0],
        [
            8.083246795921522,
            -7.981132988064893,
            -31.52159432874371,
            16.31930543123136,
            -6.058818238834054,
        ],
    ]
)
STAGE_NODE = np.array([0.0, 0.386, 0.21, 0.63, 1.0, 1.0])
STAGE_TIME = np.array([0.25, -0.1043, 0.1035, -0.03620000000000023, 0.0, 0.0])
GAMMA, SHRINK, GROW, SAFETY = 0.25, 0.2, 5.0, 0.9

# Radau IIA of order 5 (Hairer & Wanner 1996, Solving Ordinary Differential Equations II, table
# IV.5.6; held by a test of the order conditions).
_R6 = math.sqrt(6.0)
RADAU_NODE = np.array([(4.0 - _R6) / 10.0, (4.0 + _R6) / 10.0, 1.0])
RADAU_A = np.array(
    [
        [(88 - 7 * _R6) / 360, (296 - 169 * _R6) / 1800, (-2 + 3 * _R6) / 225],
        [(296 + 169 * _R6) / 1800, (88 + 7 * _R6) / 360, (-2 - 3 * _R6) / 225],
        [(16 - _R6) / 36, (16 + _R6) / 36, 1.0 / 9.0],
    ]
)
# Points through which the accepted steps are interpolated.
STENCIL = 6
# T_r between which a start is looked for, and the factor between trials, as in the full history.
COLDEST_K, HOTTEST_K, FACTOR = 1100.0, 25_000.0, 1.05


class Atom(NamedTuple):
    """The table and what turns it into rates (temperatures T', see above).

    span (4,): ln T' and ln(T_m/T_r), low and high of each; equilibrium, exchange, departure: local
    power series; lower, upper (n_pairs,): kept levels of each pair; pair (3, n_pairs): barrier and
    rise over k in K, ln of the weight ratio; level (4, n_kept): ln(g/2), energy over k, Saha
    offset, ionization energy over k; line_upper (n_lines,); line (3, n_lines): A in s^-1, tau H/n_1
    in cm^3/s, energy over k; mode: 0 closed, 1 open, 2 Sobolev; two_photon (n_x, degree + 1): ln of
    the stimulation factor; scale (n_kept + n_pairs,): ln of the scale factors; constants (7,):
    two-photon rate in s^-1, ln(a^2 m), ln of the factors on recombination and on photoionization
    and exchange, Compton rate over T_r^4 in s^-1 K^-4, offset of ln S, ionization energy over k.
    """

    span: FloatArray
    equilibrium: FloatArray
    exchange: FloatArray
    departure: FloatArray
    lower: IntArray
    upper: IntArray
    pair: FloatArray
    level: FloatArray
    line_upper: IntArray
    line: FloatArray
    mode: int
    two_photon: FloatArray
    scale: FloatArray
    constants: FloatArray


class Universe(NamedTuple):
    """The background over s = ln a.

    today (6,): ln T_r, n_H in cm^-3, n_He/n_H, first node of s, spacing, T_r in K; log_hubble
    (n_nodes, 2): ln H and its slope; drive (n_parameters, 7): what each parameter does to ln
    T_r, ln n_H, n_He/n_H, ln a, ln m, the ln of the Compton rate, and the scale factor it is
    (or -1); hubble_drive (n_nodes, n_parameters): d ln H by each parameter.
    """

    today: FloatArray
    log_hubble: FloatArray
    drive: FloatArray
    hubble_drive: FloatArray


class Room(NamedTuple):
    """Working arrays: vector (21, n_kept), matrix (3, n_kept, n_kept), slope, linear (2, 3)."""

    vector: FloatArray
    matrix: FloatArray
    slope: FloatArray
    linear: FloatArray


@kernel
def make_room(n_kept: int, n_pairs: int) -> Room:
    """Allocate the working arrays."""
    return Room(
        np.zeros((N_VECTORS, n_kept)),
        np.zeros((3, n_kept, n_kept)),
        np.zeros(BY_SCALES + n_kept + n_pairs + 1),
        np.zeros((2, 3)),
    )


@inlined
def _patch(series: FloatArray, t: float) -> tuple[float, float]:
    """Value and derivative by t of a power series."""
    value, slope = series[-1], 0.0
    for p in range(series.shape[0] - 2, -1, -1):
        slope = slope * t + value
        value = value * t + series[p]
    return value, slope


@inlined
def _value(series: FloatArray, t: float) -> float:
    """Value of a power series."""
    value = float(series[-1])
    for p in range(series.shape[0] - 2, -1, -1):
        value = value * t + series[p]
    return value


@inlined
def _value_two(series: FloatArray, t: float, w: float) -> float:
    """Value of a double power series in t (first index) and w."""
    value = 0.0
    for p in range(series.shape[0] - 1, -1, -1):
        value = value * t + _value(series[p], w)
    return value


@inlined
def _patch_two(series: FloatArray, t: float, w: float) -> tuple[float, float, float]:
    """Value and derivatives by t (first index) and w of a double power series."""
    value = by_t = by_w = 0.0
    for p in range(series.shape[0] - 1, -1, -1):
        inner, inner_slope = series[p, -1], 0.0
        for q in range(series.shape[1] - 2, -1, -1):
            inner_slope = inner_slope * w + inner
            inner = inner * w + series[p, q]
        by_t = by_t * t + value
        value = value * t + inner
        by_w = by_w * t + inner_slope
    return value, by_t, by_w


@inlined
def _cell(x: float, low: float, high: float, count: int) -> tuple[int, float, float]:
    """Cell of x, place in it on [-1, 1], and d place/d x."""
    per = count / (high - low)
    at = (x - low) * per
    cell = min(max(int(at), 0), count - 1)
    return cell, 2.0 * (at - cell) - 1.0, 2.0 * per


@inlined
def _rate(log_rate: float) -> float:
    """Rate from its ln; 0 long before products of rates are so small that arithmetic is slow."""
    return math.exp(log_rate) if log_rate > _SLOWEST else 0.0


@inlined
def read_table(atom: Atom, x: float, inverse: float, y: float, room: Room, slopes: bool) -> None:
    """Rates and slopes at ln T' = x, 1/T' = inverse and ln(T_m/T_r) = y into `room`."""
    vector, matrix = room.vector, room.matrix
    n_kept = vector.shape[1]
    cell, t, per_x = _cell(x, atom.span[0], atom.span[1], atom.equilibrium.shape[0])
    row, w, per_y = _cell(y, atom.span[2], atom.span[3], atom.departure.shape[1])
    for i in range(n_kept):
        reach = atom.level[3, i] * inverse
        if slopes:
            base, base_slope = _patch(atom.equilibrium[cell, i], t)
            h, by_t, by_w = _patch_two(atom.departure[cell, row, i], t, w)
            base_slope *= per_x
            vector[SLOPE_MATTER, i] = h + y * by_w * per_y
            vector[SLOPE_RADIATION, i] = base_slope + y * by_t * per_x - vector[SLOPE_MATTER, i]
            vector[SLOPE_PHOTO, i] = base_slope + 1.5 + reach
        else:
            base = _value(atom.equilibrium[cell, i], t)
            h = _value_two(atom.departure[cell, row, i], t, w)
        base += atom.scale[i]
        vector[LOG_CAPTURE, i] = base + y * h + atom.constants[2]
        vector[LOG_PHOTO, i] = base - (atom.level[2, i] - 1.5 * x + reach) + atom.constants[3]
        vector[PHOTO, i] = _rate(vector[LOG_PHOTO, i])
        matrix[0, i, i] = matrix[1, i, i] = 0.0
    for k in range(atom.lower.shape[0]):
        i, j = atom.lower[k], atom.upper[k]
        barrier, rise = atom.pair[0, k] * inverse, atom.pair[1, k] * inverse
        if slopes:
            down, down_slope = _patch(atom.exchange[cell, k], t)
            matrix[1, j, i] = down_slope * per_x + barrier
            matrix[1, i, j] = down_slope * per_x + barrier + rise
        else:
            down = _value(atom.exchange[cell, k], t)
        down += atom.scale[n_kept + k] + atom.constants[3] - barrier
        matrix[0, j, i] = _rate(down)
        matrix[0, i, j] = _rate(down + atom.pair[2, k] - rise)


@inlined
def _couple(atom: Atom, x: float, inverse: float, column: float, room: Room) -> None:
    """Loss of each kept level to the ground state; column = n_1s/H in s/cm^3."""
    vector = room.vector
    for row in range(LOSS, LOSS_MASS + 1):
        for i in range(vector.shape[1]):
            vector[row, i] = 0.0
    for k in range(atom.line_upper.shape[0]):
        i = atom.line_upper[k]
        exponent = atom.line[2, k] * inverse
        filled = math.exp(-exponent)
        chance, slope = 1.0, 0.0
        if atom.mode == 0:
            chance = 0.0
        elif atom.mode == 2:
            depth = atom.line[1, k] * column
            if depth > 1e-8:
                through = -math.expm1(-depth)
                chance = through / depth
                slope = depth * (1.0 - through) / through - 1.0
            else:
                slope = -0.5 * depth
                chance = 1.0 + slope
        rate = atom.line[0, k] * chance / (1.0 - filled)
        vector[LOSS, i] += rate
        vector[LOSS_COLUMN, i] += rate * slope
        vector[LOSS_TEMPERATURE, i] += rate * exponent * filled / (1.0 - filled)
        # A ~ a^5 m, tau ~ A lambda^3 ~ a^-1 m^-2.
        vector[LOSS_STRUCTURE, i] += rate * (5.0 - slope)
        vector[LOSS_MASS, i] += rate * (1.0 - 2.0 * slope)
    rate = atom.constants[0]
    if atom.two_photon.shape[1] > 1:
        cell, t, per = _cell(x, atom.span[0], atom.span[1], atom.two_photon.shape[0])
        factor, slope = _patch(atom.two_photon[cell], t)
        rate *= math.exp(factor)
        vector[LOSS_TEMPERATURE, 0] += rate * slope * per
    vector[LOSS, 0] += rate
    vector[LOSS_STRUCTURE, 0] += 8.0 * rate
    vector[LOSS_MASS, 0] += rate
    room.slope[-1] = rate


@inlined
def _eliminate(room: Room) -> None:
    """Fates of an atom in each kept level, by elimination without a single subtraction.

    Grassmann, Taksar & Heyman 1985, Oper. Res. 33, 1107: with the exits carried along, no diagonal
    is ever the difference of large rates.
    """
    vector, rate, folded = room.vector, room.matrix[0], room.matrix[2]
    n = vector.shape[1]
    for i in range(n):
        vector[LOSS_FOLDED, i] = vector[LOSS, i]
        vector[PHOTO_FOLDED, i] = vector[PHOTO, i]
        for j in range(n):
            folded[i, j] = rate[i, j]
    for m in range(n - 1, -1, -1):
        total = vector[LOSS_FOLDED, m] + vector[PHOTO_FOLDED, m]
        for j in range(m):
            total += folded[m, j]
        vector[EXIT, m] = total
        for i in range(m):
            part = folded[i, m] / total
            vector[LOSS_FOLDED, i] += part * vector[LOSS_FOLDED, m]
            vector[PHOTO_FOLDED, i] += part * vector[PHOTO_FOLDED, m]
            for j in range(m):
                if j != i:
                    folded[i, j] += part * folded[m, j]
    for m in range(n):
        ground, ions = vector[LOSS_FOLDED, m], vector[PHOTO_FOLDED, m]
        for j in range(m):
            ground += folded[m, j] * vector[FATE, j]
            ions += folded[m, j] * vector[IONIZED, j]
        vector[FATE, m] = ground / vector[EXIT, m]
        vector[IONIZED, m] = ions / vector[EXIT, m]


@kernel
def net_flow(
    atom: Atom,
    radiation_k: float,
    ratio: float,
    density: float,
    hubble: float,
    electrons: float,
    ions: float,
    ground: float,
    room: Room,
    slopes: bool,
) -> float:
    """Net recombinations per hydrogen nucleus and second; slopes into ``room.slope``.

    The arguments are T_r in K, ln(T_m/T_r), n_H in cm^-3, H in s^-1, and n_e, n_HII and n_1s over
    n_H.
    """
    return stage_flow(
        atom, radiation_k, ratio, density, hubble, electrons, ions, ground, room, slopes
    )


@inlined
def stage_flow(
    atom: Atom,
    radiation_k: float,
    ratio: float,
    density: float,
    hubble: float,
    electrons: float,
    ions: float,
    ground: float,
    room: Room,
    slopes: bool,
) -> float:
    """As :func:`net_flow`, of any stage: nuclei, ions and ground states are those of its own."""
    x = math.log(radiation_k) - atom.constants[1]
    inverse = math.exp(atom.constants[1]) / radiation_k
    read_table(atom, x, inverse, ratio, room, slopes)
    _couple(atom, x, inverse, density * ground / hubble, room)
    return solve_kept(atom, inverse, density * electrons * ions, ground, room, slopes)


@inlined
def solve_kept(
    atom: Atom, inverse: float, pairs: float, ground: float, room: Room, slopes: bool
) -> float:
    """Net flow from the rates and losses in `room`; pairs = n_e n_ion over the nuclei, cm^-3."""
    _eliminate(room)
    vector = room.vector
    log_ratio = math.log(ground / pairs)
    flow = 0.0
    for i in range(vector.shape[1]):
        boltzmann = log_ratio + atom.level[0, i] - atom.level[1, i] * inverse
        excess = math.expm1(vector[LOG_PHOTO, i] - vector[LOG_CAPTURE, i] + boltzmann)
        capture = math.exp(vector[LOG_CAPTURE, i]) * pairs
        vector[CAPTURE, i] = capture
        vector[LIFT, i] = capture * (1.0 + excess)
        vector[SOURCE, i] = -capture * excess
        flow += vector[FATE, i] * vector[SOURCE, i] - vector[IONIZED, i] * vector[EXCESS, i]
    if slopes:
        depart(room)
        _differentiate(atom, inverse, room)
    return flow


@inlined
def depart(room: Room) -> None:
    """Departures of the kept levels from Boltzmann equilibrium with the ground state."""
    vector, folded = room.vector, room.matrix[2]
    n = vector.shape[1]
    for i in range(n):
        vector[DEPARTURE, i] = vector[SOURCE, i] + vector[EXCESS, i]
    for m in range(n - 1, 0, -1):
        share = vector[DEPARTURE, m] / vector[EXIT, m]
        for i in range(m):
            vector[DEPARTURE, i] += folded[m, i] * share
    for m in range(n):
        total = vector[DEPARTURE, m]
        for j in range(m):
            total += folded[j, m] * vector[DEPARTURE, j]
        vector[DEPARTURE, m] = total / vector[EXIT, m]


@inlined
def _differentiate(atom: Atom, inverse: float, room: Room) -> None:
    """Derivatives of the net flow, as `flow_slopes` in levelnet/network/gradient.py, and more."""
    vector, rate, rate_slope, slope = room.vector, room.matrix[0], room.matrix[1], room.slope
    n = vector.shape[1]
    two_photon = slope[-1]
    for k in range(BY_SCALES):
        slope[k] = 0.0
    captured = lifted = undone = 0.0
    for i in range(n):
        fate, again, d = vector[FATE, i], vector[IONIZED, i], vector[DEPARTURE, i]
        capture, lift = fate * vector[CAPTURE, i], fate * vector[LIFT, i]
        lost = fate * vector[PHOTO, i] * d
        captured += capture
        lifted += lift
        undone += lost
        slope[BY_RADIATION] += (
            capture * vector[SLOPE_RADIATION, i]
            - lift * (vector[SLOPE_PHOTO, i] + atom.level[1, i] * inverse)
            - lost * vector[SLOPE_PHOTO, i]
            + again * vector[LOSS_TEMPERATURE, i] * d
        )
        slope[BY_MATTER] += capture * vector[SLOPE_MATTER, i]
        slope[BY_DENSITY] += again * vector[LOSS_COLUMN, i] * d
        slope[BY_STRUCTURE] += again * vector[LOSS_STRUCTURE, i] * d
        slope[BY_MASS] += again * vector[LOSS_MASS, i] * d
        slope[BY_SCALES + i] = fate * vector[SOURCE, i] - lost
    spread = 0.0
    for k in range(atom.lower.shape[0]):
        i, j = atom.lower[k], atom.upper[k]
        gain = vector[FATE, i] - vector[FATE, j]
        if vector[FATE, i] + vector[FATE, j] > 1.0:
            gain = vector[IONIZED, j] - vector[IONIZED, i]
        up = rate[i, j] * vector[DEPARTURE, i] * gain
        down = -rate[j, i] * vector[DEPARTURE, j] * gain
        slope[BY_RADIATION] -= up * rate_slope[i, j] + down * rate_slope[j, i]
        slope[BY_SCALES + n + k] = -(up + down)
        spread += up + down
    column = slope[BY_DENSITY]
    slope[BY_DENSITY] = captured + column
    slope[BY_HUBBLE] = -column
    slope[BY_ELECTRONS] = slope[BY_IONIZED] = captured
    slope[BY_GROUND] = column - lifted
    moved = slope[BY_RADIATION] + slope[BY_MATTER]
    inverse_rates = lifted + undone + spread
    slope[BY_STRUCTURE] += 2.0 * captured - 5.0 * inverse_rates - 2.0 * moved
    slope[BY_MASS] += -2.0 * captured - inverse_rates - moved
    slope[-1] = vector[IONIZED, 0] * two_photon * vector[DEPARTURE, 0]


@kernel
def split_odds(odds: float) -> tuple[float, float]:
    """Ionized and neutral fraction from u, each to full precision."""
    small = math.exp(-abs(odds))
    if odds > 0.0:
        return 1.0 / (1.0 + small), small / (1.0 + small)
    return small / (1.0 + small), 1.0 / (1.0 + small)


@kernel
def hubble_at(universe: Universe, s: float) -> tuple[float, float]:
    """Interpolate ln H and its slope by s: cubic Hermite."""
    nodes = universe.log_hubble
    step = universe.today[4]
    at = (s - universe.today[3]) / step
    k = min(max(int(at), 0), nodes.shape[0] - 2)
    t = at - k
    rise = nodes[k + 1, 0] - nodes[k, 0]
    first, last = step * nodes[k, 1] - rise, step * nodes[k + 1, 1] - rise
    bend = first * (1.0 - t) - last * t
    value = nodes[k, 0] + t * (rise + (1.0 - t) * bend)
    slope = rise + (1.0 - 2.0 * t) * bend - t * (1.0 - t) * (first + last)
    return value, slope / step


@kernel
def rate_of_slow(
    atom: Atom, universe: Universe, s: float, u: float, v: float, room: Room
) -> tuple[float, float]:
    """(du/ds, dv/ds) of u = ln(x_HII/x_HI) and v = ln(T_m/T_r) at s = ln a."""
    ions, ground = split_odds(u)
    log_hubble, _ = hubble_at(universe, s)
    hubble = math.exp(log_hubble)
    growth = math.exp(-s)
    radiation_k = universe.today[5] * growth
    density = universe.today[1] * growth**3
    flow = net_flow(atom, radiation_k, v, density, hubble, ions, ions, ground, room, VALUES)
    share = ions / (1.0 + universe.today[2] + ions)
    compton = atom.constants[4] * radiation_k**4 * share / hubble
    return -flow / (hubble * ions * ground), -1.0 + compton * math.expm1(-v)


@kernel
def linearize(
    atom: Atom, universe: Universe, s: float, u: float, v: float, room: Room, push: FloatArray
) -> tuple[float, float]:
    """(du/ds, dv/ds); derivatives by u, v, s into ``room.linear``, by parameters into `push`."""
    ions, ground = split_odds(u)
    log_hubble, hubble_slope = hubble_at(universe, s)
    hubble = math.exp(log_hubble)
    growth = math.exp(-s)
    radiation_k = universe.today[5] * growth
    density = universe.today[1] * growth**3
    flow = net_flow(atom, radiation_k, v, density, hubble, ions, ions, ground, room, SLOPES)
    by, out = room.slope, room.linear
    scale = -1.0 / (hubble * ions * ground)
    particles = 1.0 + universe.today[2] + ions
    compton = atom.constants[4] * radiation_k**4 * ions / particles / hubble
    cooling = compton * math.expm1(-v)
    moved = by[BY_RADIATION] + by[BY_MATTER]
    out[0, 0] = scale * (
        ground * (by[BY_ELECTRONS] + by[BY_IONIZED] - flow) - ions * (by[BY_GROUND] - flow)
    )
    out[0, 1] = scale * by[BY_MATTER]
    out[0, 2] = scale * (-moved - 3.0 * by[BY_DENSITY] + hubble_slope * (by[BY_HUBBLE] - flow))
    out[1, 0] = cooling * (1.0 + universe.today[2]) / particles * ground
    out[1, 1] = -compton * math.exp(-v)
    out[1, 2] = -cooling * (4.0 + hubble_slope)
    if push.shape[1] > 0:
        _hubble_push(universe, s, push)
        for p in range(push.shape[1]):
            drive = universe.drive[p]
            by_hubble = push[0, p]
            push[0, p] = scale * (
                moved * drive[DRIVE_TEMPERATURE]
                + by[BY_DENSITY] * drive[DRIVE_DENSITY]
                + (by[BY_HUBBLE] - flow) * by_hubble
                + by[BY_STRUCTURE] * drive[DRIVE_STRUCTURE]
                + by[BY_MASS] * drive[DRIVE_MASS]
            )
            if drive[DRIVE_SCALE] >= 0.0:
                push[0, p] += scale * by[BY_SCALES + int(drive[DRIVE_SCALE])]
            push[1, p] = cooling * (
                4.0 * drive[DRIVE_TEMPERATURE]
                - drive[DRIVE_HELIUM] / particles
                + drive[DRIVE_COMPTON]
                - by_hubble
            )
    return scale * flow, -1.0 + cooling


@kernel
def _hubble_push(universe: Universe, s: float, push: FloatArray) -> None:
    """D ln H by each parameter at s, by cubic interpolation, into the first row of `push`."""
    nodes = universe.hubble_drive
    at = (s - universe.today[3]) / universe.today[4]
    k = min(max(int(at) - 1, 0), nodes.shape[0] - 4)
    t = at - k
    a, b, c, d = t, t - 1.0, t - 2.0, t - 3.0
    first, second = -b * c * d / 6.0, a * c * d / 2.0
    third, last = -a * b * d / 2.0, a * b * c / 6.0
    for p in range(push.shape[1]):
        push[0, p] = (
            first * nodes[k, p]
            + second * nodes[k + 1, p]
            + third * nodes[k + 2, p]
            + last * nodes[k + 3, p]
        )


@kernel
def _saha(atom: Atom, universe: Universe, s: float) -> tuple[float, float, float, float]:
    """Saha equilibrium: u, its first two derivatives by ln S, and I/kT."""
    x = universe.today[0] - s - atom.constants[1]
    reach = atom.constants[6] * math.exp(-x)
    log_density = math.log(universe.today[1]) - 3.0 * s
    half = 0.5 * (atom.constants[5] + 1.5 * x - log_density - reach)
    if half > 300.0:
        return 2.0 * half, 1.0, 0.0, reach
    q = 0.5 * math.exp(half)
    root = math.sqrt(1.0 + q * q)
    return half + math.asinh(q), 0.5 * (1.0 + q / root), 0.25 * q / root**3, reach


@kernel
def equilibrium(
    atom: Atom, universe: Universe, s: float, room: Room, state: FloatArray, push: FloatArray
) -> float:
    """Saha equilibrium with its lag into `state`, its derivatives by parameters into `push`.

    Returns the lag of u behind the expansion alone; see levelnet/history/start.py.
    """
    odds, first, second, reach = _saha(atom, universe, s)
    pace = 1.5 - reach  # d ln S/ds
    drift = first * pace
    _ = linearize(atom, universe, s, odds, 0.0, room, push[:, :0])
    out = room.linear
    det = out[0, 0] * out[1, 1] - out[0, 1] * out[1, 0]
    state[0], state[1] = odds, 0.0
    if out[0, 0] == 0.0 or det == 0.0:
        return math.inf
    lag = drift / out[0, 0]
    state[0] += (drift * out[1, 1] - out[0, 1]) / det
    state[1] += (out[0, 0] - out[1, 0] * drift) / det
    if push.shape[1] > 0:
        _ = linearize(atom, universe, s, state[0], state[1], room, push)
        det = out[0, 0] * out[1, 1] - out[0, 1] * out[1, 0]
        for p in range(push.shape[1]):
            drive = universe.drive[p]
            warmer = drive[DRIVE_TEMPERATURE] - 2.0 * drive[DRIVE_STRUCTURE] - drive[DRIVE_MASS]
            log_s = (
                3.0 * (drive[DRIVE_STRUCTURE] + drive[DRIVE_MASS])
                + (1.5 + reach) * warmer
                - drive[DRIVE_DENSITY]
            )
            # S = J^-1 (dS/ds - df/dp), dS/ds from the equilibrium.
            a = second * pace * log_s + first * reach * warmer - push[0, p]
            b = -push[1, p]
            push[0, p] = (a * out[1, 1] - out[0, 1] * b) / det
            push[1, p] = (out[0, 0] * b - out[1, 0] * a) / det
    return float(lag)


@kernel
def _find_start(
    atom: Atom, universe: Universe, tolerance: float, room: Room, state: FloatArray
) -> float:
    """Find s of the lowest redshift where the lag is within `tolerance`; +inf if there is none."""
    none = np.zeros((2, 0))
    step = math.log(FACTOR)
    top = min(atom.span[1] + atom.constants[1], math.log(HOTTEST_K))
    log_radiation = math.log(COLDEST_K)
    good = False
    while log_radiation < top:
        s = universe.today[0] - log_radiation
        good = abs(equilibrium(atom, universe, s, room, state, none)) < tolerance
        if good:
            break
        log_radiation += step
    if not good:
        return math.inf
    low, high = log_radiation - step, log_radiation
    while high - low > 1e-3:
        middle = 0.5 * (low + high)
        s = universe.today[0] - middle
        if abs(equilibrium(atom, universe, s, room, state, none)) < tolerance:
            high = middle
        else:
            low = middle
    # Rounded up, so that the tolerance holds and the start is a plain number.
    redshift = math.expm1(high - universe.today[0])
    unit = 10.0 ** math.floor(math.log10(redshift) - 2.0)
    s = -math.log1p(math.ceil(redshift / unit) * unit)
    if universe.today[0] - s > atom.span[1] + atom.constants[1]:
        s = universe.today[0] - high
    return float(s)


@kernel
def _step(
    atom: Atom,
    universe: Universe,
    s: float,
    h: float,
    point: FloatArray,
    stages: FloatArray,
    room: Room,
) -> float:
    """One Rosenbrock step of `point` in place; returns the error estimate.

    ``room.linear`` holds the Jacobian and ``stages[6]`` the rate at the start.
    """
    out = room.linear
    diagonal = 1.0 / (h * GAMMA)
    j01, j10, d0, d1 = out[0, 1], out[1, 0], out[0, 2], out[1, 2]
    m00, m11 = diagonal - out[0, 0], diagonal - out[1, 1]
    det = m00 * m11 - j01 * j10
    u, v = point[0], point[1]
    f0, f1 = stages[6, 0], stages[6, 1]
    at0, at1 = u, v
    for k in range(6):
        if k > 0:
            if k < 5:
                at0, at1 = u, v
                for j in range(k):
                    at0 += STAGE_A[k, j] * stages[j, 0]
                    at1 += STAGE_A[k, j] * stages[j, 1]
            else:
                at0 += stages[4, 0]
                at1 += stages[4, 1]
            f0, f1 = rate_of_slow(atom, universe, s + STAGE_NODE[k] * h, at0, at1, room)
        r0, r1 = f0 + h * STAGE_TIME[k] * d0, f1 + h * STAGE_TIME[k] * d1
        for j in range(k):
            r0 += STAGE_C[k, j] / h * stages[j, 0]
            r1 += STAGE_C[k, j] / h * stages[j, 1]
        stages[k, 0] = (r0 * m11 + j01 * r1) / det
        stages[k, 1] = (m00 * r1 + j10 * r0) / det
    point[0], point[1] = at0 + stages[5, 0], at1 + stages[5, 1]
    return float(max(abs(stages[5, 0]), abs(stages[5, 1])))


@kernel
def _integrate(
    atom: Atom,
    universe: Universe,
    end: float,
    tolerance: float,
    first_step: float,
    times: FloatArray,
    states: FloatArray,
    room: Room,
) -> tuple[int, int, int]:
    """Steps from times[0] to `end`; gives the status, the number of points and of rejections."""
    none = np.zeros((2, 0))
    stages = np.zeros((7, 2))
    point = states[0].copy()
    now, h = times[0], first_step
    count, rejected = 1, 0
    while now < end:
        u, v = point[0], point[1]
        stages[6, 0], stages[6, 1] = linearize(atom, universe, now, u, v, room, none)
        while True:
            if count + rejected >= times.shape[0]:
                return TOO_MANY_STEPS, count, rejected
            pieces = max(1.0, math.ceil((end - now) / h - 0.1))
            trial = (end - now) / pieces
            size = _step(atom, universe, now, trial, point, stages, room) / tolerance
            if not size < 1e300:
                size = 1e300
            factor = min(GROW, max(SHRINK, SAFETY * max(size, 1e-12) ** -0.25))
            if size <= 1.0:
                break
            rejected += 1
            point[0], point[1] = u, v
            h = trial * factor
            if h < 1e-13 * max(1.0, abs(now)):
                return STEP_TOO_SMALL, count, rejected
        if not atom.span[2] <= point[1] <= atom.span[3]:
            return OUT_OF_RANGE, count, rejected
        h = trial * factor if pieces > 1.0 or factor < 1.0 else max(h, trial * factor)
        now = end if pieces == 1.0 else now + trial
        times[count] = now
        states[count, 0], states[count, 1] = point[0], point[1]
        count += 1
    return DONE, count, rejected


@kernel
def _newton(
    times: FloatArray, values: FloatArray, first: int, size: int, table: FloatArray
) -> None:
    """Divided differences of `values` (n_points, n_columns) on `size` points from `first`."""
    for k in range(size):
        for c in range(values.shape[1]):
            table[k, c] = values[first + k, c]
    for order in range(1, size):
        for k in range(size - 1, order - 1, -1):
            over = 1.0 / (times[first + k] - times[first + k - order])
            for c in range(values.shape[1]):
                table[k, c] = (table[k, c] - table[k - 1, c]) * over


@kernel
def _newton_at(
    times: FloatArray, first: int, size: int, table: FloatArray, s: float, out: FloatArray
) -> None:
    """Evaluate what :func:`_newton` prepared."""
    for c in range(out.shape[0]):
        out[c] = table[size - 1, c]
    for k in range(size - 2, -1, -1):
        step = s - times[first + k]
        for c in range(out.shape[0]):
            out[c] = out[c] * step + table[k, c]


@kernel
def solve_many(matrix: FloatArray, right: FloatArray) -> None:
    """Gaussian elimination with row pivoting, in place; `right` has a column per system."""
    n, columns = matrix.shape[0], right.shape[1]
    for k in range(n):
        best = k
        for i in range(k + 1, n):
            if abs(matrix[i, k]) > abs(matrix[best, k]):
                best = i
        if best != k:
            for j in range(k, n):
                matrix[k, j], matrix[best, j] = matrix[best, j], matrix[k, j]
            for c in range(columns):
                right[k, c], right[best, c] = right[best, c], right[k, c]
        over = 1.0 / matrix[k, k]
        for i in range(k + 1, n):
            part = matrix[i, k] * over
            if part != 0.0:
                for j in range(k + 1, n):
                    matrix[i, j] -= part * matrix[k, j]
                for c in range(columns):
                    right[i, c] -= part * right[k, c]
    for k in range(n - 1, -1, -1):
        over = 1.0 / matrix[k, k]
        for c in range(columns):
            right[k, c] *= over
        for i in range(k):
            part = matrix[i, k]
            for c in range(columns):
                right[i, c] -= part * right[k, c]


@kernel
def _sensitivities(
    atom: Atom,
    universe: Universe,
    times: FloatArray,
    states: FloatArray,
    found: FloatArray,
    room: Room,
) -> None:
    """Solve dS/ds = J S + df/dp along the steps: Radau IIA, one linear solve a step.

    `found` has shape (n_points, 2 n_parameters); row 0 holds the start.
    """
    n, n_parameters = times.shape[0], universe.drive.shape[0]
    size = min(STENCIL, n)
    table, here = np.zeros((STENCIL, 2)), np.zeros(2)
    push = np.zeros((2, n_parameters))
    matrix, right = np.zeros((6, 6)), np.zeros((6, n_parameters))
    for k in range(n - 1):
        first = min(max(k - size // 2 + 1, 0), n - size)
        _newton(times, states, first, size, table)
        h = times[k + 1] - times[k]
        for row in range(6):
            for p in range(n_parameters):
                right[row, p] = found[k, (row % 2) * n_parameters + p]
        for j in range(3):
            s = times[k] + RADAU_NODE[j] * h
            _newton_at(times, first, size, table, s, here)
            _ = linearize(atom, universe, s, here[0], here[1], room, push)
            for i in range(3):
                weight = h * RADAU_A[i, j]
                for a in range(2):
                    for b in range(2):
                        same = 1.0 if i == j and a == b else 0.0
                        matrix[2 * i + a, 2 * j + b] = same - weight * room.linear[a, b]
                    for p in range(n_parameters):
                        right[2 * i + a, p] += weight * push[a, p]
        solve_many(matrix, right)
        for p in range(n_parameters):
            found[k + 1, p] = right[4, p]
            found[k + 1, n_parameters + p] = right[5, p]


@kernel
def interpolate(
    times: FloatArray, values: FloatArray, outputs: FloatArray, skip: int, out: FloatArray
) -> None:
    """Values at ascending outputs from number `skip` on, by local polynomials of degree 5."""
    n = times.shape[0]
    size = min(STENCIL, n)
    table = np.zeros((STENCIL, values.shape[1]))
    k, first = -1, 0
    for m in range(skip, outputs.shape[0]):
        at = max(k, 0)
        while at < n - 2 and outputs[m] > times[at + 1]:
            at += 1
        if at != k:
            k = at
            first = min(max(k - size // 2 + 1, 0), n - size)
            _newton(times, values, first, size, table)
        _newton_at(times, first, size, table, outputs[m], out[m])


@kernel
def _above(
    atom: Atom,
    universe: Universe,
    start: float,
    outputs: FloatArray,
    room: Room,
    states: FloatArray,
    slopes: FloatArray,
) -> int:
    """Fill in the outputs above the start, in equilibrium; gives how many there are."""
    n_parameters = universe.drive.shape[0]
    push = np.zeros((2, n_parameters))
    count = 0
    while count < outputs.shape[0] and outputs[count] <= start:
        _ = equilibrium(atom, universe, outputs[count], room, states[count], push)
        for p in range(n_parameters):
            slopes[count, p] = push[0, p]
            slopes[count, n_parameters + p] = push[1, p]
        count += 1
    return count


@kernel
def effective_history(
    atom: Atom,
    universe: Universe,
    outputs: FloatArray,
    grid: FloatArray,
    start_tolerance: float,
    tolerance: float,
    first_step: float,
    max_steps: int,
    states: FloatArray,
    slopes: FloatArray,
    grid_states: FloatArray,
    grid_slopes: FloatArray,
    report: FloatArray,
) -> int:
    """Integrate one history down to the last of `outputs`.

    `outputs` and `grid`, each ascending s = ln a, none above the last output; u and v there go to
    `states` and `grid_states` (n, 2), their derivatives by the parameters to `slopes` and
    `grid_slopes` (n, 2 n_parameters), first all of u, then all of v. `report` (6,) receives s of
    the start, the lag there, the numbers of accepted and rejected steps, the last s reached, and v
    there. Gives a status.
    """
    n_parameters = universe.drive.shape[0]
    room = make_room(atom.level.shape[1], atom.lower.shape[0])
    times, points = np.empty(max_steps + 1), np.empty((max_steps + 1, 2))
    start = _find_start(atom, universe, start_tolerance, room, points[0])
    if start == math.inf:
        return NO_START
    above = _above(atom, universe, start, outputs, room, states, slopes)
    grid_above = _above(atom, universe, start, grid, room, grid_states, grid_slopes)
    push = np.zeros((2, n_parameters))
    report[0], report[1] = start, abs(equilibrium(atom, universe, start, room, points[0], push))
    times[0] = start
    status, count, rejected = DONE, 1, 0
    if above < outputs.shape[0]:
        status, count, rejected = _integrate(
            atom, universe, outputs[-1], tolerance, first_step, times, points, room
        )
    report[2], report[3], report[4] = count - 1, rejected, times[count - 1]
    report[5] = points[count - 1, 1]
    if status != DONE or count == 1:
        return status
    times, points = times[:count], points[:count]
    interpolate(times, points, outputs, above, states)
    interpolate(times, points, grid, grid_above, grid_states)
    if n_parameters > 0:
        found = np.empty((count, 2 * n_parameters))
        for p in range(n_parameters):
            found[0, p], found[0, n_parameters + p] = push[0, p], push[1, p]
        _sensitivities(atom, universe, times, points, found, room)
        interpolate(times, found, outputs, above, slopes)
        interpolate(times, found, grid, grid_above, grid_slopes)
    return status


@kernel
def local_rates(
    atom: Atom, helium: float, place: FloatArray, room: Room, rates: FloatArray, by: FloatArray
) -> None:
    """Bare dx_e/dt and dT_m/dt with all partial derivatives.

    `place` (5,): n_H in cm^-3, x_e, T_m in K, T_r in K, H in s^-1; `helium` = n_He/n_H, neutral.
    `rates` (2,) receives dx_e/dt in s^-1 and dT_m/dt in K/s; `by` (2, 9 + n_scales) their
    derivatives by the five of `place`, `helium`, ln a, ln m, the ln of the Compton rate, and the ln
    of each scale factor.
    """
    density, electrons, matter_k, radiation_k, hubble = place
    ground = 1.0 - electrons
    ratio = math.log(matter_k / radiation_k)
    flow = net_flow(
        atom, radiation_k, ratio, density, hubble, electrons, electrons, ground, room, SLOPES
    )
    g = room.slope
    particles = 1.0 + helium + electrons
    compton = atom.constants[4] * radiation_k**4 * electrons / particles
    heat = compton * (radiation_k - matter_k)
    rates[0], rates[1] = -flow, heat - 2.0 * hubble * matter_k
    by[:] = 0.0
    by[0, 0] = -g[BY_DENSITY] / density
    by[0, 1] = -(g[BY_ELECTRONS] + g[BY_IONIZED]) / electrons + g[BY_GROUND] / ground
    by[0, 2] = -g[BY_MATTER] / matter_k
    by[0, 3] = -g[BY_RADIATION] / radiation_k
    by[0, 4] = -g[BY_HUBBLE] / hubble
    by[0, 6], by[0, 7] = -g[BY_STRUCTURE], -g[BY_MASS]
    for k in range(by.shape[1] - 9):
        by[0, 9 + k] = -g[BY_SCALES + k]
    by[1, 1] = heat * (1.0 + helium) / (particles * electrons)
    by[1, 2] = -compton - 2.0 * hubble
    by[1, 3] = 4.0 * heat / radiation_k + compton
    by[1, 4] = -2.0 * matter_k
    by[1, 5] = -heat / particles
    by[1, 8] = heat
