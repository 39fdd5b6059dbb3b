"""Hydrogen and helium together from tables, compiled: the history of the whole plasma.

The state is u = ln(x_HII/x_HI), v = ln(T_m/T_r), a = ln(x_HeII+III/x_HeI) and
b = ln(x_HeIII/x_HeII); the equations are those of levelnet/history/equations.py and helium.py.
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
    Atom,
    Room,
    Universe,
    hubble_at,
    make_room,
    split_odds,
    stage_flow,
)
from .effective_helium import (
    BY_ELECTRON,
    BY_HEAT,
    BY_HYDROGEN,
    BY_ION,
    BY_NEUTRAL,
    BY_TIME,
    VALUE,
    HeliumLines,
    LineRoom,
    Memory,
    Place,
    first_flow,
    make_line_room,
    second_flow,
)

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]

# Elements of `Plasma.limits`.
COLDEST_K, EBB, PULL, GONE, FADING = range(5)
# Elements of `Desk.mode`, and what they may be: levels, pull to Saha equilibrium, no change.
OF_HYDROGEN, OF_FIRST, OF_SECOND = range(3)
NETWORK, SAHA, HELD = range(3)
# ln of x_HeIII/x_HeII, and of x_HeII/x_HeI, below which a history no longer follows the levels:
# 1e-13 and 1e-15.
DOUBLE_GONE, SINGLE_GONE = -30.0, -34.5


class Plasma(NamedTuple):
    """The three effective atoms, the lines of He I, and the universe.

    levels: whether He II has a network, else it is in Saha equilibrium; saha (3, 2): of H, He I and
    He II, ln(ratio) = offset + 1.5 ln T - I/kT - ln n_e with I over k in K; limits (5,): T_r below
    which helium is held and from how far above its rates fade, the pull to Saha equilibrium in
    Hubble rates, and ln of x_HeIII/x_HeII between which it takes over.
    """

    hydrogen: Atom
    first: Atom
    second: Atom
    lines: HeliumLines
    universe: Universe
    levels: int
    saha: FloatArray
    limits: FloatArray


class Desk(NamedTuple):
    """Working arrays: rate (4,), matrix (4, 4), drift (4,), flow (2, 7), row (4, 7) and rooms.

    mode (3,): how H, He I and He II are followed; made so that all follow their levels.
    """

    rate: FloatArray
    matrix: FloatArray
    drift: FloatArray
    flow: FloatArray
    row: FloatArray
    mode: IntArray
    hydrogen: Room
    first: Room
    second: Room
    lines: LineRoom


@kernel
def make_desk(plasma: Plasma) -> Desk:
    """Allocate the working arrays."""
    count = plasma.first.level.shape[1]
    return Desk(
        np.zeros(4),
        np.zeros((4, 4)),
        np.zeros(4),
        np.zeros((2, 7)),
        np.zeros((4, 7)),
        np.zeros(3, np.int64),
        make_room(plasma.hydrogen.level.shape[1], plasma.hydrogen.lower.shape[0]),
        make_room(count, plasma.first.lower.shape[0]),
        make_room(plasma.second.level.shape[1], plasma.second.lower.shape[0]),
        make_line_room(count, plasma.lines.upper.shape[0]),
    )


@kernel
def make_memory(steps: int, n_lines: int) -> Memory:
    """Allocate the memory of a run."""
    red = np.empty((steps, n_lines))
    return Memory(np.empty(steps), red, np.empty(steps), np.zeros(1, np.int64))


@inlined
def _ramp(x: float) -> tuple[float, float]:
    """Smooth step from 0 at x = 0 to 1 at x = 1, and its slope."""
    x = min(max(x, 0.0), 1.0)
    return x * x * (3.0 - 2.0 * x), 6.0 * x * (1.0 - x)


@inlined
def _first_row(place: Place, neutral: float, charged: float, share: float, desk: Desk) -> None:
    """Rate of a and its derivatives: by a, b, ln n_e, v, ln a and ln n_HI."""
    flow, row = desk.flow[0], desk.row[0]
    scale = -1.0 / (place.hubble * neutral * charged)
    by_a = flow[BY_ION] * neutral - flow[BY_NEUTRAL] * charged - flow[VALUE] * (neutral - charged)
    row[0], row[1], row[2] = scale * flow[VALUE], scale * by_a, -scale * flow[BY_ION] * share
    row[3], row[4] = scale * flow[BY_ELECTRON], scale * flow[BY_HEAT]
    row[5], row[6] = scale * flow[BY_TIME], scale * flow[BY_HYDROGEN]


@inlined
def _second_row(
    place: Place, neutral: float, charged: float, share: float, rest: float, desk: Desk
) -> None:
    """Rate of b and its derivatives by the levels of He II; share and rest of `charged`."""
    first, second, row = desk.flow[0], desk.flow[1], desk.row[1]
    single, double = charged * rest, charged * share
    inverse = 1.0 / double + 1.0 / single
    fed = first[VALUE] / single
    scale = -1.0 / place.hubble
    by_a = (second[BY_ION] + second[BY_NEUTRAL] - second[VALUE]) * neutral * inverse
    by_a -= (first[BY_ION] * neutral - first[BY_NEUTRAL] * charged) / single - neutral * fed
    by_b = (second[BY_ION] * rest - second[BY_NEUTRAL] * share) * inverse
    by_b += second[VALUE] * (share / single - rest / double)
    by_b -= share * (fed - first[BY_ION] / single)
    row[0], row[1], row[2] = scale * (second[VALUE] * inverse - fed), scale * by_a, scale * by_b
    row[3] = scale * (second[BY_ELECTRON] * inverse - first[BY_ELECTRON] / single)
    row[4] = scale * (second[BY_HEAT] * inverse - first[BY_HEAT] / single)
    row[5] = scale * (second[BY_TIME] * inverse - first[BY_TIME] / single)
    row[6] = -scale * first[BY_HYDROGEN] / single


@inlined
def _saha_row(plasma: Plasma, place: Place, ion: int, value: float, row: FloatArray) -> None:
    """Rate of ln(ion/ground state) and derivatives where pulled to Saha equilibrium at T_m."""
    matter_k = place.radiation_k * math.exp(place.ratio)
    reach = plasma.saha[ion, 1] / matter_k
    there = plasma.saha[ion, 0] + 1.5 * math.log(matter_k) - reach
    there -= math.log(place.electrons * place.density)
    pull = plasma.limits[PULL]
    row[0], row[1], row[2], row[3] = pull * (there - value), 0.0, -pull, -pull
    row[4], row[5], row[6] = pull * (1.5 + reach), pull * (1.5 - reach), 0.0


@inlined
def _helium(
    plasma: Plasma, place: Place, a: float, b: float, memory: Memory, desk: Desk, slopes: bool
) -> None:
    """Rows 0 and 1 of ``desk.row``: rates of a and b, with `slopes` their derivatives."""
    row, limits = desk.row, plasma.limits
    full, fading = _ramp(math.log(place.radiation_k / limits[COLDEST_K]) / limits[EBB])
    if full == 0.0 or desk.mode[OF_FIRST] == HELD:
        row[:2] = 0.0
        return
    charged, neutral = split_odds(a)
    share, rest = split_odds(b)
    single, double = charged * rest, charged * share
    if desk.mode[OF_FIRST] == NETWORK:
        first_flow(
            plasma.first,
            plasma.lines,
            place,
            single,
            neutral,
            memory,
            desk.first,
            desk.lines,
            slopes,
            desk.flow[0],
        )
        _first_row(place, neutral, charged, share, desk)
    else:
        desk.flow[0, :] = 0.0
        _saha_row(plasma, place, 1, a - math.log1p(math.exp(min(b, 700.0))), row[0])
        row[0, 1], row[0, 2] = row[0, 2], -row[0, 2] * share
    part, turn = _ramp((b - limits[GONE]) / (limits[FADING] - limits[GONE]))
    if plasma.levels == 0 or part == 0.0 or desk.mode[OF_SECOND] == SAHA:
        _saha_row(plasma, place, 2, b, row[1])
    else:
        second_flow(plasma.second, place, double, single, desk.second, slopes, desk.flow[1])
        _second_row(place, neutral, charged, share, rest, desk)
        if part < 1.0:
            _saha_row(plasma, place, 2, b, row[2])
            apart = row[1, 0] - row[2, 0]
            for k in range(7):
                row[1, k] = part * row[1, k] + (1.0 - part) * row[2, k]
            row[1, 2] += turn / (limits[FADING] - limits[GONE]) * apart
    if full < 1.0:
        for i in range(2):
            now = row[i, 0]
            for k in range(7):
                row[i, k] *= full
            row[i, 5] -= fading / limits[EBB] * now


@kernel
def electrons_of(plasma: Plasma, state: FloatArray) -> float:
    """Give n_e/n_H of a state."""
    charged, _ = split_odds(state[2])
    share, rest = split_odds(state[3])
    ionized, _ = split_odds(state[0])
    return float(ionized + plasma.universe.today[2] * charged * (rest + 2.0 * share))


@kernel
def evaluate(
    plasma: Plasma, s: float, state: FloatArray, memory: Memory, desk: Desk, slopes: bool
) -> Place:
    """Rates of the state into ``desk.rate``, with `slopes` their derivatives beside it."""
    universe, rate = plasma.universe, desk.rate
    helium = universe.today[2]
    ions, ground = split_odds(state[0])
    v = state[1]
    log_hubble, hubble_slope = hubble_at(universe, s)
    hubble, growth = math.exp(log_hubble), math.exp(-s)
    radiation_k = universe.today[5] * growth
    density = universe.today[1] * growth**3
    electrons = electrons_of(plasma, state)
    place = Place(
        s,
        radiation_k,
        v,
        helium * density,
        hubble,
        hubble_slope,
        electrons / helium,
        math.log(density * ground / hubble),
    )
    flow = 0.0
    if desk.mode[OF_HYDROGEN] == NETWORK:
        flow = stage_flow(
            plasma.hydrogen,
            radiation_k,
            v,
            density,
            hubble,
            electrons,
            ions,
            ground,
            desk.hydrogen,
            slopes,
        )
    else:
        _saha_row(plasma, place, 0, state[0], desk.row[3])
    _helium(plasma, place, state[2], state[3], memory, desk, slopes)
    scale = -1.0 / (hubble * ions * ground)
    particles = 1.0 + helium + electrons
    compton = plasma.hydrogen.constants[4] * radiation_k**4 * electrons / particles / hubble
    cooling = compton * math.expm1(-v)
    rate[0] = scale * flow if desk.mode[OF_HYDROGEN] == NETWORK else desk.row[3, 0]
    rate[1] = -1.0 + cooling
    rate[2], rate[3] = desk.row[0, 0], desk.row[1, 0]
    if slopes:
        _linear(plasma, place, state, flow, electrons, compton, desk)
    return place


@inlined
def _linear(
    plasma: Plasma,
    place: Place,
    state: FloatArray,
    flow: float,
    electrons: float,
    compton: float,
    desk: Desk,
) -> None:
    """Derivatives of the rates by the state and by s, from those of the flows."""
    by, matrix, drift, row = desk.hydrogen.slope, desk.matrix, desk.drift, desk.row
    helium, hubble_slope = plasma.universe.today[2], place.hubble_slope
    ions, ground = split_odds(state[0])
    charged, neutral = split_odds(state[2])
    share, rest = split_odds(state[3])
    scale = -1.0 / (place.hubble * ions * ground)
    cooling = compton * math.expm1(-state[1])
    matrix[:] = 0.0
    if desk.mode[OF_HYDROGEN] == NETWORK:
        matrix[0, 0] = scale * (ground * (by[BY_IONIZED] - flow) - ions * (by[BY_GROUND] - flow))
        matrix[0, 1] = scale * by[BY_MATTER]
        moved = by[BY_RADIATION] + by[BY_MATTER]
        drift[0] = scale * (-moved - 3.0 * by[BY_DENSITY] + hubble_slope * (by[BY_HUBBLE] - flow))
        row[3, 3] = scale * by[BY_ELECTRONS]
    else:
        matrix[0, 0], matrix[0, 1], drift[0] = row[3, 2], row[3, 4], row[3, 5]
    matrix[1, 1] = -compton * math.exp(-state[1])
    drift[1] = -cooling * (4.0 + hubble_slope)
    for i in range(2):
        matrix[2 + i, 2], matrix[2 + i, 3] = row[i, 1], row[i, 2]
        matrix[2 + i, 1], drift[2 + i] = row[i, 4], row[i, 5]
        # ln x_HI falls by x_HII per unit of u.
        matrix[2 + i, 0] = -ions * row[i, 6]
    # By ln n_e, and ln n_e by u, a and b.
    of_helium = helium / electrons * charged
    by_u = ions * ground / electrons
    by_a = of_helium * neutral * (rest + 2.0 * share)
    by_b = of_helium * rest * share
    for i in range(4):
        if i == 0:
            through = row[3, 3]
        elif i == 1:
            through = cooling * (1.0 + helium) / (1.0 + helium + electrons)
        else:
            through = row[i - 2, 3]
        matrix[i, 0] += through * by_u
        matrix[i, 2] += through * by_a
        matrix[i, 3] += through * by_b


@kernel
def choose_modes(plasma: Plasma, place: Place, state: FloatArray, desk: Desk) -> bool:
    """Choose how each ion is followed from here, by the slopes just found; whether that changed.

    An ion that its levels return to Saha equilibrium faster than the pull does is pulled: either
    lags by less than 1e-7. Once hardly any He III or He II is left, it is pulled or held.
    """
    mode, changed = desk.mode, False
    for ion in range(2):
        if mode[ion] == NETWORK and desk.matrix[2 * ion, 2 * ion] < -plasma.limits[PULL]:
            mode[ion], changed = SAHA, True
    if mode[OF_SECOND] == NETWORK and state[3] < DOUBLE_GONE:
        mode[OF_SECOND], changed = SAHA, True
    if mode[OF_FIRST] == NETWORK and state[2] < SINGLE_GONE:
        mode[OF_FIRST], changed = HELD, True
    return changed
