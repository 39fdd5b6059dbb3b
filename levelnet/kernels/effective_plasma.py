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
    DONE,
    GAMMA,
    GROW,
    OUT_OF_RANGE,
    SAFETY,
    SHRINK,
    STAGE_A,
    STAGE_C,
    STAGE_NODE,
    STAGE_TIME,
    STEP_TOO_SMALL,
    TOO_MANY_STEPS,
    Atom,
    Room,
    Universe,
    hubble_at,
    interpolate,
    make_room,
    solve_many,
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
    add_logs,
    first_flow,
    make_line_room,
    remember,
    second_flow,
)

FloatArray = NDArray[np.float64]

# Elements of `Plasma.limits`.
COLDEST_K, EBB, PULL, GONE, FADING = range(5)
# A status besides those of hydrogen: line depths outside the table of escape probabilities.
OUTSIDE_ESCAPE = 5


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
    """Working arrays: rate (4,), matrix (4, 4), drift (4,), flow (2, 7), row (3, 7) and rooms."""

    rate: FloatArray
    matrix: FloatArray
    drift: FloatArray
    flow: FloatArray
    row: FloatArray
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
        np.zeros((3, 7)),
        make_room(plasma.hydrogen.level.shape[1], plasma.hydrogen.lower.shape[0]),
        make_room(count, plasma.first.lower.shape[0]),
        make_room(plasma.second.level.shape[1], plasma.second.lower.shape[0]),
        make_line_room(count, plasma.lines.upper.shape[0]),
    )


@kernel
def make_memory(steps: int, n_lines: int) -> Memory:
    """Allocate the memory of a run."""
    return Memory(np.empty(steps), np.empty((steps, n_lines)), np.empty(steps), np.zeros(1, np.int64))


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
    """Rate of b and its derivatives by the levels of He II; share and rest are those of `charged`."""
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
def _saha_row(plasma: Plasma, place: Place, b: float, row: FloatArray) -> None:
    """Rate of b and its derivatives where it is pulled to Saha equilibrium at T_m."""
    matter_k = place.radiation_k * math.exp(place.ratio)
    reach = plasma.saha[2, 1] / matter_k
    there = plasma.saha[2, 0] + 1.5 * math.log(matter_k) - reach
    there -= math.log(place.electrons * place.density)
    pull = plasma.limits[PULL]
    row[0], row[1], row[2], row[3] = pull * (there - b), 0.0, -pull, -pull
    row[4], row[5], row[6] = pull * (1.5 + reach), pull * (1.5 - reach), 0.0


@inlined
def _helium(
    plasma: Plasma, place: Place, a: float, b: float, memory: Memory, desk: Desk, slopes: bool
) -> None:
    """Rows 0 and 1 of ``desk.row``: rates of a and b, with `slopes` their derivatives."""
    row, limits = desk.row, plasma.limits
    full, fading = _ramp(math.log(place.radiation_k / limits[COLDEST_K]) / limits[EBB])
    if full == 0.0:
        row[:] = 0.0
        return
    charged, neutral = split_odds(a)
    share, rest = split_odds(b)
    single, double = charged * rest, charged * share
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
    part, turn = _ramp((b - limits[GONE]) / (limits[FADING] - limits[GONE]))
    if plasma.levels == 0 or part == 0.0:
        _saha_row(plasma, place, b, row[1])
    else:
        second_flow(plasma.second, place, double, single, desk.second, slopes, desk.flow[1])
        _second_row(place, neutral, charged, share, rest, desk)
        if part < 1.0:
            _saha_row(plasma, place, b, row[2])
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
    return ionized + plasma.universe.today[2] * charged * (rest + 2.0 * share)


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
    _helium(plasma, place, state[2], state[3], memory, desk, slopes)
    scale = -1.0 / (hubble * ions * ground)
    particles = 1.0 + helium + electrons
    compton = plasma.hydrogen.constants[4] * radiation_k**4 * electrons / particles / hubble
    cooling = compton * math.expm1(-v)
    rate[0], rate[1] = scale * flow, -1.0 + cooling
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
    matrix[0, 0] = scale * (ground * (by[BY_IONIZED] - flow) - ions * (by[BY_GROUND] - flow))
    matrix[0, 1] = scale * by[BY_MATTER]
    matrix[1, 1] = -compton * math.exp(-state[1])
    moved = by[BY_RADIATION] + by[BY_MATTER]
    drift[0] = scale * (-moved - 3.0 * by[BY_DENSITY] + hubble_slope * (by[BY_HUBBLE] - flow))
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
            through = scale * by[BY_ELECTRONS]
        elif i == 1:
            through = cooling * (1.0 + helium) / (1.0 + helium + electrons)
        else:
            through = row[i - 2, 3]
        matrix[i, 0] += through * by_u
        matrix[i, 2] += through * by_a
        matrix[i, 3] += through * by_b


@kernel
def saha_state(plasma: Plasma, s: float, state: FloatArray) -> None:
    """Saha equilibrium of every ion at T_m = T_r into `state`."""
    universe, saha = plasma.universe, plasma.saha
    log_t = universe.today[0] - s
    kelvin = math.exp(log_t)
    log_density = math.log(universe.today[1]) - 3.0 * s
    helium = universe.today[2]
    # ln(n_e/n_H) by Newton's method: its excess over itself falls with it, never slower than 1.
    low, high = -200.0, math.log1p(2.0 * helium) + 1e-9
    middle = high
    state[1] = 0.0
    for _ in range(80):
        log_electrons = log_density + middle
        state[0] = saha[0, 0] + 1.5 * log_t - saha[0, 1] / kelvin - log_electrons
        once = saha[1, 0] + 1.5 * log_t - saha[1, 1] / kelvin - log_electrons
        state[3] = saha[2, 0] + 1.5 * log_t - saha[2, 1] / kelvin - log_electrons
        state[2] = once + add_logs(0.0, state[3])
        electrons = electrons_of(plasma, state)
        excess = math.log(electrons) - middle
        if abs(excess) < 1e-15:
            break
        if excess > 0.0:
            low = middle
        else:
            high = middle
        ions, ground = split_odds(state[0])
        charged, neutral = split_odds(state[2])
        share, rest = split_odds(state[3])
        falling = ions * ground + helium * charged * share * rest
        falling += helium * charged * neutral * (rest + 2.0 * share) * (1.0 + share)
        moved = middle + excess / (1.0 + falling / electrons)
        middle = moved if low < moved < high else 0.5 * (low + high)


@kernel
def lagging_state(
    plasma: Plasma, s: float, memory: Memory, desk: Desk, state: FloatArray
) -> float:
    """Saha equilibrium with its lag into `state`; gives the largest lag of an ion in a network."""
    step = 1e-4
    drift, before = np.empty((4, 1)), np.empty(4)
    saha_state(plasma, s - step, before)
    saha_state(plasma, s + step, state)
    for i in range(4):
        drift[i, 0] = (state[i] - before[i]) / (2.0 * step)
    saha_state(plasma, s, state)
    _ = evaluate(plasma, s, state, memory, desk, True)
    largest = 0.0
    for i in range(4):
        watched = i == 0 or i == 2 or (i == 3 and plasma.levels == 1)
        if watched:
            held = desk.matrix[i, i]
            largest = max(largest, abs(drift[i, 0] / held) if held != 0.0 else math.inf)
    drift[1, 0] = 1.0
    matrix = desk.matrix.copy()
    if matrix[2, 2] == 0.0:  # helium is held
        matrix[2, 2] = matrix[3, 3] = 1.0
        drift[2, 0] = drift[3, 0] = 0.0
    if matrix[0, 0] == 0.0:
        return math.inf
    solve_many(matrix, drift)
    for i in range(4):
        state[i] += drift[i, 0]
    return largest


@kernel
def find_start(
    plasma: Plasma, top_k: float, bottom_k: float, tolerance: float, memory: Memory, desk: Desk
) -> float:
    """Give s to start from: the last below `top_k` down to which all lags stay within `tolerance`.

    At the top they need not: the state there has its lag to first order.
    """
    state = np.empty(4)
    s, step = plasma.universe.today[0] - math.log(top_k), 0.02
    end = plasma.universe.today[0] - math.log(bottom_k)
    while s + step < end:
        if not lagging_state(plasma, s + step, memory, desk, state) < tolerance:
            break
        s += step
    return s


@kernel
def _step(
    plasma: Plasma,
    s: float,
    h: float,
    point: FloatArray,
    stages: FloatArray,
    inverse: FloatArray,
    memory: Memory,
    desk: Desk,
) -> None:
    """One Rosenbrock step from `point` into stages[7], its error into stages[8].

    `desk` holds the Jacobian and stages[6] the rate at the start.
    """
    matrix = np.empty((4, 4))
    for i in range(4):
        for j in range(4):
            matrix[i, j] = -desk.matrix[i, j]
            inverse[i, j] = 0.0
        matrix[i, i] += 1.0 / (h * GAMMA)
        inverse[i, i] = 1.0
    solve_many(matrix, inverse)
    at, right = stages[7], np.empty(4)
    at[:] = point
    for k in range(6):
        if k > 0:
            if k < 5:
                at[:] = point
                for j in range(k):
                    for i in range(4):
                        at[i] += STAGE_A[k, j] * stages[j, i]
            else:
                for i in range(4):
                    at[i] += stages[4, i]
            for i in range(4):
                if not abs(at[i]) < 700.0:
                    stages[8, :] = 1e300
                    return
            _ = evaluate(plasma, s + STAGE_NODE[k] * h, at, memory, desk, False)
        for i in range(4):
            value = stages[6, i] if k == 0 else desk.rate[i]
            right[i] = value + h * STAGE_TIME[k] * desk.drift[i]
            for j in range(k):
                right[i] += STAGE_C[k, j] / h * stages[j, i]
        for i in range(4):
            stages[k, i] = 0.0
            for j in range(4):
                stages[k, i] += inverse[i, j] * right[j]
    for i in range(4):
        at[i] += stages[5, i]
        stages[8, i] = stages[5, i]


@kernel
def _slack(log_odds: float) -> float:
    """How much more a fraction may err that is far below 1 per cent: up to 100 times."""
    least = math.exp(-abs(log_odds))
    return min(100.0, max(1.0, math.sqrt(0.01 / least))) if least > 1e-30 else 100.0


@kernel
def _integrate(
    plasma: Plasma,
    end: float,
    tolerance: FloatArray,
    longest: float,
    first_step: float,
    memory: Memory,
    times: FloatArray,
    states: FloatArray,
    desk: Desk,
) -> tuple[int, int, int]:
    """Steps from times[0] to `end`; gives the status, the number of points and of rejections."""
    stages, inverse, slack = np.zeros((9, 4)), np.zeros((4, 4)), np.ones(4)
    point = states[0].copy()
    now, h = times[0], first_step
    count, rejected = 1, 0
    while now < end:
        desk.lines.outside[0] = 0
        place = evaluate(plasma, now, point, memory, desk, True)
        if desk.lines.outside[0] != 0:
            return OUTSIDE_ESCAPE, count, rejected
        if place.radiation_k > plasma.limits[COLDEST_K]:
            _, neutral = split_odds(point[2])
            remember(
                plasma.first, plasma.lines, place, neutral, memory, desk.first, desk.lines
            )
        stages[6, :] = desk.rate
        slack[2], slack[3] = _slack(point[2]), _slack(point[3])
        while True:
            if count + rejected >= times.shape[0]:
                return TOO_MANY_STEPS, count, rejected
            pieces = max(1.0, math.ceil((end - now) / h - 0.1))
            if place.radiation_k > plasma.limits[COLDEST_K]:
                pieces = max(pieces, math.ceil((end - now) / longest))
            trial = (end - now) / pieces
            _step(plasma, now, trial, point, stages, inverse, memory, desk)
            size = 0.0
            for i in range(4):
                part = abs(stages[8, i]) / (tolerance[i] * slack[i])
                size = max(size, part) if part < 1e300 else 1e300
            factor = min(GROW, max(SHRINK, SAFETY * max(size, 1e-12) ** -0.25))
            if size <= 1.0:
                break
            rejected += 1
            h = trial * factor
            if h < 1e-13 * max(1.0, abs(now)):
                return STEP_TOO_SMALL, count, rejected
        point[:] = stages[7]
        narrow = plasma.first if place.radiation_k > plasma.limits[COLDEST_K] else plasma.hydrogen
        if not narrow.span[2] <= point[1] <= narrow.span[3]:
            return OUT_OF_RANGE, count, rejected
        h = trial * factor if pieces > 1.0 or factor < 1.0 else max(h, trial * factor)
        now = end if pieces == 1.0 else now + trial
        times[count] = now
        states[count, :] = point
        count += 1
    return DONE, count, rejected


@kernel
def plasma_history(
    plasma: Plasma,
    outputs: FloatArray,
    grid: FloatArray,
    range_k: FloatArray,
    start_tolerance: float,
    tolerance: FloatArray,
    longest: float,
    first_step: float,
    states: FloatArray,
    grid_states: FloatArray,
    report: FloatArray,
    max_steps: int,
) -> int:
    """Integrate one history down to the last of `outputs`.

    `outputs` and `grid`, each ascending s = ln a, none above the last output; the states there go
    to `states` and `grid_states` (n, 4). range_k (2,): T_r between which the start is looked for;
    tolerance (4,): local errors; longest: no step with helium is longer. `report` (6,) receives s
    of the start, the lag there, the numbers of accepted and rejected steps, the last s reached, and
    v there. Gives a status.
    """
    desk = make_desk(plasma)
    memory = make_memory(max_steps + 1, plasma.lines.upper.shape[0])
    times, points = np.empty(max_steps + 1), np.empty((max_steps + 1, 4))
    start = find_start(plasma, range_k[0], range_k[1], start_tolerance, memory, desk)
    report[0], report[1] = start, lagging_state(plasma, start, memory, desk, points[0])
    above = _above(plasma, outputs, start, memory, desk, states)
    grid_above = _above(plasma, grid, start, memory, desk, grid_states)
    times[0] = start
    status, count, rejected = DONE, 1, 0
    if above < outputs.shape[0]:
        status, count, rejected = _integrate(
            plasma, outputs[-1], tolerance, longest, first_step, memory, times, points, desk
        )
    report[2], report[3], report[4] = count - 1, rejected, times[count - 1]
    report[5] = points[count - 1, 1]
    if status != DONE or count == 1:
        return status
    interpolate(times[:count], points[:count], outputs, above, states)
    interpolate(times[:count], points[:count], grid, grid_above, grid_states)
    return status


@kernel
def _above(
    plasma: Plasma,
    outputs: FloatArray,
    start: float,
    memory: Memory,
    desk: Desk,
    states: FloatArray,
) -> int:
    """Fill in the outputs above the start, in equilibrium; gives how many there are."""
    count = 0
    while count < outputs.shape[0] and outputs[count] <= start:
        _ = lagging_state(plasma, outputs[count], memory, desk, states[count])
        count += 1
    return count
