"""The effective atoms of helium, compiled: lines of He I, their fields, net flows.

Equations and names: levelnet/history/helium.py and levelnet/escape/helium_treatment.py. Where
hydrogen absorbs, ln(P/S) of each line, S the escape probability of Sobolev, is a cubic B-spline in
three numbers that are the same for all lines: ln of n_HeI/H, of n_HI/H, and of T_r.
"""

import math
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from .compile import inlined, kernel
from .effective import (
    BY_DENSITY,
    BY_ELECTRONS,
    BY_GROUND,
    BY_HUBBLE,
    BY_IONIZED,
    BY_MATTER,
    BY_RADIATION,
    DEPARTURE,
    EXCESS,
    IONIZED,
    LOSS,
    LOSS_COLUMN,
    LOSS_MASS,
    LOSS_TEMPERATURE,
    Atom,
    Room,
    read_table,
    solve_kept,
    stage_flow,
)

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]

# Rows of `HeliumLines.line`.
RATE, DEPTH, ENERGY, DELAY, CONTINUUM = range(5)
# Rows of `LineRoom.kept`: derivatives of the losses by ln n_HI, and of the excess.
LOSS_HYDROGEN, EXCESS_GROUND, EXCESS_TIME, EXCESS_HYDROGEN = range(4)
# Elements of a flow: itself, by ln of n_e, of both fractions and of T_m, by ln a, by ln n_HI.
VALUE, BY_ELECTRON, BY_ION, BY_NEUTRAL, BY_HEAT, BY_TIME, BY_HYDROGEN = range(7)


class HeliumLines(NamedTuple):
    """Lines of He I to its ground state.

    upper, lit_by (n_lines,): kept level; line above that feeds it, or -1; line (5, n_lines): A in
    s^-1, tau H/n_1 in cm^3/s, energy over k in K, delay in ln a, ln of c times the cross section of
    H I; escape (n_lines, n_column, n_hydrogen, n_temperature): B-spline coefficients, of shape
    (1, 1, 1, 1) where P = S; axis (3, 2): first node and spacing; absorbs: whether hydrogen does;
    decay, decay_rate: kept level that decays by two photons, s^-1.
    """

    upper: IntArray
    lit_by: IntArray
    line: FloatArray
    escape: FloatArray
    axis: FloatArray
    absorbs: int
    decay: int
    decay_rate: float


class Memory(NamedTuple):
    """Accepted steps: times (n,), ln of the distortion on red sides (n, n_lines), ln(n_HI/H) (n,).

    taken (1,): how many there are.
    """

    time: FloatArray
    red: FloatArray
    hydrogen: FloatArray
    taken: IntArray


class LineRoom(NamedTuple):
    """Working arrays.

    kept (4, n_kept); line (2, n_lines): depth, ln of the distortion on the blue side; basis
    (3, 2, 4): weights along each axis and their slopes; first (3,): cell; scale (3,): 1, or less
    below an axis; outside (1,): nonzero after a look-up above an axis; knot (2, 4).
    """

    kept: FloatArray
    line: FloatArray
    basis: FloatArray
    first: IntArray
    scale: FloatArray
    outside: IntArray
    knot: FloatArray


class Place(NamedTuple):
    """Surroundings of helium; electrons per helium nucleus, hydrogen = ln(n_HI/H in s/cm^3)."""

    log_scale: float
    radiation_k: float
    ratio: float
    density: float
    hubble: float
    hubble_slope: float
    electrons: float
    hydrogen: float


@kernel
def make_line_room(n_kept: int, n_lines: int) -> LineRoom:
    """Allocate the working arrays."""
    return LineRoom(
        np.zeros((4, n_kept)),
        np.zeros((2, n_lines)),
        np.zeros((3, 2, 4)),
        np.zeros(3, np.int64),
        np.ones(3),
        np.zeros(1, np.int64),
        np.zeros((2, 4)),
    )


@kernel
def locate(lines: HeliumLines, axis: int, x: float, room: LineRoom) -> None:
    """Find the cell of x on an axis, with the B-splines there.

    Below the columns ln(P/S) is linear in either to the accuracy of the table: P goes to S.
    """
    low, spacing = lines.axis[axis, 0], lines.axis[axis, 1]
    cells = lines.escape.shape[axis + 1] - 3
    room.scale[axis] = 1.0
    if axis < 2 and x < low:
        room.scale[axis] = math.exp(max(x - low, -700.0))
        x = low
    at = (x - low) / spacing
    if at < -1e-9 or at > cells + 1e-9:
        room.outside[0] = 1
    i = min(max(int(at), 0), cells - 1)
    t = min(max(at - i, 0.0), 1.0)
    u = 1.0 - t
    value, slope = room.basis[axis, 0], room.basis[axis, 1]
    value[0], value[3] = u * u * u / 6.0, t * t * t / 6.0
    value[1] = 2.0 / 3.0 - t * t * (1.0 - 0.5 * t)
    value[2] = 2.0 / 3.0 - u * u * (1.0 - 0.5 * u)
    slope[0], slope[3] = -0.5 * u * u / spacing, 0.5 * t * t / spacing
    slope[1] = t * (1.5 * t - 2.0) / spacing
    slope[2] = u * (2.0 - 1.5 * u) / spacing
    room.first[axis] = i


@kernel
def gain(lines: HeliumLines, k: int, room: LineRoom) -> tuple[float, float, float, float]:
    """Ln(P/S) of a line at the cell located, and its derivatives along the three axes."""
    value, by_0, by_1, by_2 = 0.0, 0.0, 0.0, 0.0
    first, basis = room.first, room.basis
    for a in range(4):
        row, row_1, row_2 = 0.0, 0.0, 0.0
        for b in range(4):
            inner, inner_2 = 0.0, 0.0
            for c in range(4):
                one = lines.escape[k, first[0] + a, first[1] + b, first[2] + c]
                inner += one * basis[2, 0, c]
                inner_2 += one * basis[2, 1, c]
            row += basis[1, 0, b] * inner
            row_1 += basis[1, 1, b] * inner
            row_2 += basis[1, 0, b] * inner_2
        value += basis[0, 0, a] * row
        by_0 += basis[0, 1, a] * row
        by_1 += basis[0, 0, a] * row_1
        by_2 += basis[0, 0, a] * row_2
    scale = room.scale[0] * room.scale[1]
    by_0 = value if room.scale[0] < 1.0 else by_0
    by_1 = value if room.scale[1] < 1.0 else by_1
    return scale * value, scale * by_0, scale * by_1, scale * by_2


@kernel
def gain_value(lines: HeliumLines, k: int, room: LineRoom) -> float:
    """Ln(P/S) alone."""
    value, first, basis = 0.0, room.first, room.basis
    for a in range(4):
        row = 0.0
        for b in range(4):
            inner = 0.0
            for c in range(4):
                one = lines.escape[k, first[0] + a, first[1] + b, first[2] + c]
                inner += one * basis[2, 0, c]
            row += basis[1, 0, b] * inner
        value += basis[0, 0, a] * row
    return float(room.scale[0] * room.scale[1] * value)


@kernel
def _look_back(memory: Memory, time: float, knot: FloatArray) -> int:
    """Weights (and slopes) of the cubic through the four nearest steps; gives the first of them."""
    count = memory.taken[0]
    above = count
    while above > 0 and memory.time[above - 1] > time:
        above -= 1
    first = min(max(0, above - 2), max(0, count - 4))
    size = min(4, count)
    for k in range(4):
        weight, rise = 1.0, 0.0
        if k >= size:
            weight = 0.0
        else:
            for j in range(size):
                if j != k:
                    gap = memory.time[first + k] - memory.time[first + j]
                    rise = (rise * (time - memory.time[first + j]) + weight) / gap
                    weight *= (time - memory.time[first + j]) / gap
        knot[0, k], knot[1, k] = weight, rise
    return int(first)


@inlined
def _blue_side(
    lines: HeliumLines, k: int, place: Place, memory: Memory, knot: FloatArray
) -> tuple[float, float, float]:
    """Ln of the distortion that lights line k, its slope in ln a, and by ln n_HI."""
    above, delay = lines.lit_by[k], lines.line[DELAY, k]
    then = place.log_scale - delay
    if memory.taken[0] == 0 or then <= memory.time[0]:
        return 0.0, 0.0, 0.0
    first = _look_back(memory, then, knot)
    sent, sent_slope, column, column_slope = 0.0, 0.0, 0.0, 0.0
    for j in range(min(4, memory.taken[0])):
        sent += knot[0, j] * memory.red[first + j, above]
        sent_slope += knot[1, j] * memory.red[first + j, above]
        column += knot[0, j] * memory.hydrogen[first + j]
        column_slope += knot[1, j] * memory.hydrogen[first + j]
    if lines.absorbs == 0:
        return sent, sent_slope, 0.0
    # The depth between the lines grows exponentially from its value at the line above, then.
    start = math.exp(column + lines.line[CONTINUUM, above])
    end = math.exp(place.hydrogen + lines.line[CONTINUUM, k])
    rise = place.hydrogen + lines.line[CONTINUUM, k] - column - lines.line[CONTINUUM, above]
    if abs(rise) > 1e-3:
        mean = (end - start) / rise
        by_end, by_start = (end - mean) / rise, (mean - start) / rise
    else:
        mean = start * (1.0 + rise * (0.5 + rise / 6.0))
        by_end, by_start = start * (0.5 + rise / 3.0), start * (0.5 + rise / 6.0)
    depth = delay * mean
    left, filled = sent - depth, -math.expm1(-depth)
    value = add_logs(left, math.log(filled)) if filled > 0.0 else left
    of_sent = math.exp(left - value)
    by_depth = math.exp(-depth - value) - of_sent
    moved = by_end * (-3.0 - place.hubble_slope) + by_start * column_slope
    return value, of_sent * sent_slope + by_depth * delay * moved, by_depth * delay * by_end


@kernel
def add_logs(a: float, b: float) -> float:
    """Ln of the sum of two numbers from their ln."""
    return max(a, b) + math.log1p(math.exp(-abs(a - b)))


@inlined
def _sobolev(depth: float) -> tuple[float, float]:
    """Escape probability and d ln of it by ln depth."""
    if depth > 1e-8:
        through = -math.expm1(-depth)
        return through / depth, depth * (1.0 - through) / through - 1.0
    return 1.0 - 0.5 * depth, -0.5 * depth


@inlined
def _couple(
    atom: Atom,
    lines: HeliumLines,
    place: Place,
    ground: float,
    memory: Memory,
    vector: FloatArray,
    room: LineRoom,
    slopes: bool,
) -> None:
    """Losses of the kept levels of He I to its ground state, and what they take from it."""
    for row in range(LOSS, LOSS_MASS + 1):
        vector[row, :] = 0.0
    vector[EXCESS, :] = 0.0
    kept = room.kept
    kept[:] = 0.0
    inverse = 1.0 / place.radiation_k
    column = place.density * ground / place.hubble
    tabulated = lines.escape.shape[1] > 1
    if tabulated:
        here = math.log(column), place.hydrogen, math.log(place.radiation_k)
        for axis in range(3):
            locate(lines, axis, here[axis], room)
    for k in range(lines.upper.shape[0]):
        i = lines.upper[k]
        exponent = lines.line[ENERGY, k] * inverse
        filled = math.exp(-exponent)
        emitted = 1.0 / (1.0 - filled)
        depth = lines.line[DEPTH, k] * column
        chance, slope = _sobolev(depth)
        more, by_column, by_hydrogen, by_heat = 0.0, 0.0, 0.0, 0.0
        if tabulated and not slopes:
            more = gain_value(lines, k, room)
        elif tabulated:
            more, by_column, by_hydrogen, by_heat = gain(lines, k, room)
        rate = lines.line[RATE, k] * emitted * chance * math.exp(more)
        vector[LOSS, i] += rate
        vector[LOSS_COLUMN, i] += rate * (slope + by_column)
        vector[LOSS_TEMPERATURE, i] += rate * (by_heat + exponent * filled * emitted)
        kept[LOSS_HYDROGEN, i] += rate * by_hydrogen
        room.line[0, k], room.line[1, k] = depth, 0.0
        if lines.lit_by[k] < 0:
            continue
        blue, blue_slope, blue_hydrogen = _blue_side(lines, k, place, memory, room.knot)
        room.line[1, k] = blue
        rate = lines.line[RATE, k] * chance
        extra = rate * (math.exp(blue - exponent) - filled) * emitted
        vector[LOSS, i] += extra
        vector[LOSS_COLUMN, i] += extra * slope
        vector[LOSS_TEMPERATURE, i] += extra * exponent * emitted
        excited = atom.level[1, i] * inverse
        boltzmann = rate * ground * math.exp(atom.level[0, i] - excited)
        lit, lift = boltzmann * math.exp(blue), boltzmann * math.expm1(blue)
        vector[EXCESS, i] += lift
        kept[EXCESS_GROUND, i] += lift * (1.0 + slope)
        kept[EXCESS_TIME, i] += (
            lift * (slope * (-3.0 - place.hubble_slope) - excited) + lit * blue_slope
        )
        kept[EXCESS_HYDROGEN, i] += lit * blue_hydrogen
    vector[LOSS, lines.decay] += lines.decay_rate


@inlined
def _gather(flow: float, hubble_slope: float, room: Room, out: FloatArray) -> None:
    """Derivatives of a flow from those by what the table and the lines hang on."""
    by = room.slope
    out[VALUE] = flow
    out[BY_ELECTRON], out[BY_ION] = by[BY_ELECTRONS], by[BY_IONIZED]
    out[BY_NEUTRAL], out[BY_HEAT] = by[BY_GROUND], by[BY_MATTER]
    out[BY_TIME] = -by[BY_RADIATION] - by[BY_MATTER] - 3.0 * by[BY_DENSITY]
    out[BY_TIME] += hubble_slope * (by[BY_HUBBLE] - flow)
    out[BY_HYDROGEN] = 0.0


@inlined
def first_flow(
    atom: Atom,
    lines: HeliumLines,
    place: Place,
    single: float,
    neutral: float,
    memory: Memory,
    room: Room,
    line_room: LineRoom,
    slopes: bool,
    out: FloatArray,
) -> None:
    """Net recombinations to He I per nucleus and second and, with `slopes`, their derivatives."""
    x, inverse = math.log(place.radiation_k), 1.0 / place.radiation_k
    read_table(atom, x, inverse, place.ratio, room, slopes)
    _couple(atom, lines, place, neutral, memory, room.vector, line_room, slopes)
    room.slope[-1] = 0.0
    pairs = place.density * place.electrons * single
    flow = solve_kept(atom, inverse, pairs, neutral, room, slopes)
    out[VALUE] = flow
    if not slopes:
        return
    _gather(flow, place.hubble_slope, room, out)
    vector, kept = room.vector, line_room.kept
    for i in range(vector.shape[1]):
        inside = vector[IONIZED, i] * kept[LOSS_HYDROGEN, i] * vector[DEPARTURE, i]
        out[BY_HYDROGEN] += inside - vector[IONIZED, i] * kept[EXCESS_HYDROGEN, i]
        out[BY_TIME] -= (3.0 + place.hubble_slope) * inside
        out[BY_TIME] -= vector[IONIZED, i] * kept[EXCESS_TIME, i]
        out[BY_NEUTRAL] -= vector[IONIZED, i] * kept[EXCESS_GROUND, i]


@inlined
def second_flow(
    atom: Atom,
    place: Place,
    double: float,
    single: float,
    room: Room,
    slopes: bool,
    out: FloatArray,
) -> None:
    """Net recombinations to He II per nucleus and second and, with `slopes`, their derivatives."""
    flow = stage_flow(
        atom,
        place.radiation_k,
        place.ratio,
        place.density,
        place.hubble,
        place.electrons,
        double,
        single,
        room,
        slopes,
    )
    out[VALUE] = flow
    if slopes:
        _gather(flow, place.hubble_slope, room, out)


@kernel
def remember(
    atom: Atom,
    lines: HeliumLines,
    place: Place,
    neutral: float,
    memory: Memory,
    room: Room,
    line_room: LineRoom,
) -> None:
    """Keep what an accepted step, whose slopes have just been found, sends to lines below."""
    here = memory.taken[0]
    memory.time[here], memory.hydrogen[here] = place.log_scale, place.hydrogen
    for k in range(lines.upper.shape[0]):
        i = lines.upper[k]
        level = atom.level[0, i] - atom.level[1, i] / place.radiation_k
        above = room.vector[DEPARTURE, i] / (neutral * math.exp(level))
        departure = math.log1p(max(above, -1.0 + 1e-15))
        exponent = lines.line[ENERGY, k] / place.radiation_k
        own = departure + math.log(-math.expm1(-exponent))
        own -= math.log1p(-math.exp(min(departure - exponent, -1e-12)))
        depth, blue = line_room.line[0, k], line_room.line[1, k]
        lost = -math.expm1(-depth)
        memory.red[here, k] = add_logs(own + math.log(lost), blue - depth) if lost else blue
    memory.taken[0] = here + 1
