"""How finely a resolved field is laid out in frequency, from the accuracy asked."""

from __future__ import annotations

import math

COLDEST_FIELD_K = 55.0
"""T_r below which factors of soft photons leave the doubles; changed constants scale it."""

# Error of x_e over the square of the step, all processes on. It only chooses the step: the error is
# measured in every run.
_ERROR_PER_STEP2 = 350.0
# The step is chosen for this many times the accuracy of the integration, which lies far below that
# of the physics; a step asked for is refused above so many times.
_CHOSEN, _REFUSED = 10.0, 1.1e3
_FINEST, _COARSEST = 5e-5, 1e-3
# Lyman lines nearer to each other than this many cells are not resolved: the grid ends below them.
_APART = 4.0


def chosen_step(relative: float) -> float:
    """D ln nu that suits an accuracy of the integration; both dimensionless."""
    step = math.sqrt(_CHOSEN * relative / _ERROR_PER_STEP2)
    return min(_COARSEST, max(_FINEST, step))


def coarsest_step(relative: float) -> float:
    """D ln nu above which a step is refused at an accuracy of the integration."""
    return math.sqrt(_REFUSED * relative / _ERROR_PER_STEP2)


def fitted_step(asked: float) -> float:
    """Largest d ln nu up to `asked` that puts Lyman-alpha and Lyman-beta in the middle of cells."""
    apart = math.log(32.0 / 27.0)
    return apart / math.ceil(apart / asked * (1.0 - 1e-12))


def highest_line(step: float) -> int:
    """Highest n whose Lyman line is still apart from the next one on the grid."""
    return max(3, min(int((2.0 / (_APART * step)) ** (1.0 / 3.0)), 40))
