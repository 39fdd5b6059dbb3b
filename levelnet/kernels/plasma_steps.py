"""A history of hydrogen and helium from tables, compiled: its start and its steps."""

import math
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from .compile import borrowed, inlined, kernel
from .effective import (
    DONE,
    GAMMA,
    GROW,
    OUT_OF_RANGE,
    SAFETY,
    SHRINK,
    SLOPES,
    STAGE_A,
    STAGE_C,
    STAGE_NODE,
    STAGE_TIME,
    STEP_TOO_SMALL,
    TOO_MANY_STEPS,
    VALUES,
    interpolate,
    solve_many,
    split_odds,
)
from .effective_helium import (
    Memory,
    Place,
    add_logs,
    remember,
)
from .effective_plasma import (
    COLDEST_K,
    NETWORK,
    OF_FIRST,
    OF_HYDROGEN,
    OF_SECOND,
    SAHA,
    Desk,
    Plasma,
    choose_modes,
    electrons_of,
    evaluate,
    make_desk,
    make_memory,
)

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]

# A status besides those of hydrogen: line depths outside the table of escape probabilities.
OUTSIDE_ESCAPE = 5


class Steps(NamedTuple):
    """Accepted steps: time (n,), and mode (n, 3) by which each ion is followed from there.

    given: 0 where a run is to choose them, 1 where it is to take them.
    """

    time: FloatArray
    mode: IntArray
    given: int


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
def lagging_state(plasma: Plasma, s: float, memory: Memory, desk: Desk, state: FloatArray) -> float:
    """Saha equilibrium with its lag into `state`; gives the largest lag of an ion in a network."""
    step = 1e-4
    drift, before = np.empty((4, 1)), np.empty(4)
    saha_state(plasma, s - step, before)
    saha_state(plasma, s + step, state)
    for i in range(4):
        drift[i, 0] = (state[i] - before[i]) / (2.0 * step)
    saha_state(plasma, s, state)
    _ = evaluate(plasma, s, state, memory, desk, SLOPES)
    largest = 0.0
    for i in range(4):
        if i != 1 and (i < 3 or plasma.levels == 1):
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


@inlined
def find_start(
    plasma: Plasma, top_k: float, bottom_k: float, tolerance: float, memory: Memory, desk: Desk
) -> float:
    """Give s to start from: the last below `top_k` down to which all lags stay within `tolerance`.

    At the top they need not: the state there has its lag to first order.
    """
    state = np.empty(4)
    s, step = plasma.universe.today[0] - math.log(top_k), 0.04
    end = plasma.universe.today[0] - math.log(bottom_k)
    while s + step < end:
        if not lagging_state(plasma, s + step, memory, desk, state) < tolerance:
            break
        s += step
    return float(s)


@inlined
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
            _ = evaluate(plasma, s + STAGE_NODE[k] * h, at, memory, desk, VALUES)
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


@inlined
def _slack(log_odds: float, most: float) -> float:
    """How much more a fraction may err that is far below 1 per cent: up to `most` times."""
    least = math.exp(-abs(log_odds))
    return min(most, max(1.0, math.sqrt(0.01 / least))) if least > 1e-30 else most


@inlined
def _open_step(
    plasma: Plasma,
    now: float,
    point: FloatArray,
    steps: Steps,
    number: int,
    memory: Memory,
    desk: Desk,
) -> Place:
    """Slopes where a step starts, remembered by lines.

    How each ion is followed is chosen and put into `steps`, or, where given, taken from there.
    """
    desk.lines.outside[0] = 0
    for ion in (OF_HYDROGEN, OF_FIRST):
        if desk.mode[ion] == SAHA:  # only for one step
            desk.mode[ion] = NETWORK
    place = evaluate(plasma, now, point, memory, desk, SLOPES)
    if place.radiation_k > plasma.limits[COLDEST_K] and desk.mode[OF_FIRST] == NETWORK:
        _, neutral = split_odds(point[2])
        remember(plasma.first, plasma.lines, place, neutral, memory, desk.first, desk.lines)
    changed, mode = False, steps.mode[number]
    if steps.given > 0:
        for ion in range(3):
            changed = changed or desk.mode[ion] != mode[ion]
            desk.mode[ion] = mode[ion]
    else:
        changed = choose_modes(plasma, place, point, desk)
        mode[:] = desk.mode
    if changed:
        place = evaluate(plasma, now, point, memory, desk, SLOPES)
    return place


@kernel
def _integrate(
    plasma: Plasma,
    end: float,
    tolerance: FloatArray,
    longest: float,
    first_step: float,
    memory: Memory,
    steps: Steps,
    states: FloatArray,
    desk: Desk,
) -> tuple[int, int, int]:
    """Steps from the first of `steps` to `end`; gives status, number of points and of rejections.

    Steps given are those of a run before, which had what the tables hold; none is rejected.
    """
    plasma, memory, desk = borrowed(plasma), borrowed(memory), borrowed(desk)
    stages, inverse, slack = np.zeros((9, 4)), np.zeros((4, 4)), np.ones(4)
    point = states[0].copy()
    now, h = steps.time[0], first_step
    count, rejected = 1, 0
    while now < end:
        place = _open_step(plasma, now, point, steps, count - 1, memory, desk)
        if desk.lines.outside[0] != 0 and steps.given == 0:
            return OUTSIDE_ESCAPE, count, rejected
        # Only while lines light each other.
        limited = desk.mode[OF_FIRST] == NETWORK and place.radiation_k > plasma.limits[COLDEST_K]
        stages[6, :] = desk.rate
        slack[0] = _slack(max(point[0], 0.0), 100.0)  # what is left ionized at the end may not
        slack[2] = _slack(point[2], 4.0)
        slack[3] = 1e6 if desk.mode[OF_SECOND] == SAHA else _slack(point[3], 15.0)
        while True:
            if count + rejected >= steps.time.shape[0]:
                return TOO_MANY_STEPS, count, rejected
            pieces = max(1.0, math.ceil((end - now) / h - 0.1))
            if limited:
                pieces = max(pieces, math.ceil((end - now) / longest))
            trial = (end - now) / pieces if steps.given == 0 else steps.time[count] - now
            _step(plasma, now, trial, point, stages, inverse, memory, desk)
            size = 0.0
            for i in range(4):
                part = abs(stages[8, i]) / (tolerance[i] * slack[i])
                size = max(size, part) if part < 1e300 else 1e300
            factor = min(GROW, max(SHRINK, SAFETY * max(size, 1e-12) ** -0.25))
            if size <= 1.0 or (steps.given > 0 and size < 1e300):
                break
            rejected += 1
            h = trial * factor
            if steps.given > 0 or h < 1e-13 * max(1.0, abs(now)):
                return STEP_TOO_SMALL, count, rejected
        point[:] = stages[7]
        narrow = plasma.first if place.radiation_k > plasma.limits[COLDEST_K] else plasma.hydrogen
        if not narrow.span[2] <= point[1] <= narrow.span[3]:
            return OUT_OF_RANGE, count, rejected
        h = trial * factor if pieces > 1.0 or factor < 1.0 else max(h, trial * factor)
        if steps.given == 0:
            steps.time[count] = end if pieces == 1.0 else now + trial
        now = steps.time[count]
        states[count, :] = point
        count += 1
    return DONE, count, rejected


@inlined
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
    steps: Steps,
) -> int:
    """Integrate one history down to the last of `outputs`.

    `outputs` and `grid`, each ascending s = ln a, none above the last output; the states there go
    to `states` and `grid_states` (n, 4). range_k (2,): T_r between which the start is looked for;
    tolerance (4,): local errors; longest: no step with helium is longer. `report` (6,) receives s
    of the start, the lag there, the numbers of accepted and rejected steps, the last s reached, and
    v there; `steps` the steps, as many as it has room for. Gives a status.
    """
    desk, times = make_desk(plasma), steps.time
    memory = make_memory(times.shape[0], plasma.lines.upper.shape[0])
    points = np.empty((times.shape[0], 4))
    start = find_start(plasma, range_k[0], range_k[1], start_tolerance, memory, desk)
    report[0], report[1] = start, lagging_state(plasma, start, memory, desk, points[0])
    above = _above(plasma, outputs, start, memory, desk, states)
    grid_above = _above(plasma, grid, start, memory, desk, grid_states)
    times[0] = start
    status, count, rejected = DONE, 1, 0
    if above < outputs.shape[0]:
        status, count, rejected = _integrate(
            plasma, outputs[-1], tolerance, longest, first_step, memory, steps, points, desk
        )
    report[2], report[3], report[4] = count - 1, rejected, times[count - 1]
    report[5] = points[count - 1, 1]
    if status != DONE or count == 1:
        return status
    interpolate(times[:count], points[:count], outputs, above, states)
    interpolate(times[:count], points[:count], grid, grid_above, grid_states)
    return status


@kernel
def repeated_history(
    plasma: Plasma,
    outputs: FloatArray,
    grid: FloatArray,
    steps: Steps,
    states: FloatArray,
    grid_states: FloatArray,
) -> int:
    """Integrate once more along the steps of a run, which had perhaps another plasma.

    The start, the steps and how each ion is followed are given, so that the result is a smooth
    function of the plasma. Arguments as those of :func:`plasma_history`; `steps` hold no more than
    the run took. Gives a status.
    """
    desk, times = make_desk(plasma), steps.time
    count = times.shape[0]
    memory = make_memory(count, plasma.lines.upper.shape[0])
    points, none = np.empty((count, 4)), np.ones(4)
    _ = lagging_state(plasma, times[0], memory, desk, points[0])
    above = _above(plasma, outputs, times[0], memory, desk, states)
    grid_above = _above(plasma, grid, times[0], memory, desk, grid_states)
    if count == 1:
        return DONE
    status, _, _ = _integrate(plasma, times[-1], none, 1.0, 1.0, memory, steps, points, desk)
    if status == DONE:
        interpolate(times, points, outputs, above, states)
        interpolate(times, points, grid, grid_above, grid_states)
    return status
