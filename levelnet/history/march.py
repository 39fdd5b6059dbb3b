"""The march of a resolved field, stretch by stretch, so that one that was killed goes on.

A stretch that is finished is kept whole: what it left behind, and what the next one starts from.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from typing import NamedTuple

import numpy as np

from ..arrays import FloatArray, IntArray
from ..errors import Outcome, SolveError
from ..kernels import transfer as kernel
from ..kernels.transfer import Cells, Path, Room, Track
from ..pieces import Pieces, code_digest, content_key
from .cost import march_seconds

# ln a between records of what the field does; they are interpolated in between.
_RECORD = 1e-3
_MOST_ITERATIONS = 20
_FEWEST_RECORDS = 4  # for a cubic spline
# Of the change of x_HI in a step.
_TOLERANCE = 1e-9
# A stretch takes so long, or longer where there would be too many: each keeps the field anew, and
# with the finest cells a hundred of them take a tenth of the cache.
_STRETCH_S, _MOST_STRETCHES = 15.0, 100
# So often the kernel comes back, for whoever waits to be told or to interrupt.
_CALL_S = 0.5


class Marched(NamedTuple):
    """What one march gave.

    Attributes
    ----------
    time, state : ndarray, shapes (n_steps + 1,) and (n_steps + 1, 2)
        ln a, and u and v there.
    middle : ndarray, shape (n_records,)
        ln a of the records.
    spectrum_time : ndarray, shape (n_spectra,)
        ln a of the spectra.
    track : Track
        Records, spectra, report.
    outcome : Outcome
        How it ended.
    """

    time: FloatArray
    state: FloatArray
    middle: FloatArray
    spectrum_time: FloatArray
    track: Track
    outcome: Outcome


class Way(NamedTuple):
    """One march as the kernel takes it.

    Attributes
    ----------
    cells, path : Cells, Path
        The grid and the way.
    first : ndarray, shape (3,)
        ln a, u and v at the start.
    n_steps, stride : int
        Steps of the march, and from one record to the next.
    wanted : ndarray of int, shape (n_spectra,), ascending
        Steps after which the field is kept.
    """

    cells: Cells
    path: Path
    first: FloatArray
    n_steps: int
    stride: int
    wanted: IntArray

    @property
    def seconds(self) -> float:
        """Estimated time, in s."""
        return march_seconds(len(self.cells.offset), len(self.cells.level), self.n_steps)


def make_way(cells: Cells, path: Path, state: FloatArray, end: float, spectra: FloatArray) -> Way:
    """Lay out a march from equilibrium at the start of `path` past `end`.

    Parameters
    ----------
    cells, path : Cells, Path
        The grid and the way.
    state : ndarray, shape (2,)
        u and v at the start.
    end : float
        ln a.
    spectra : ndarray, shape (n_spectra,), ascending
        ln a near which the field is kept.
    """
    stride = max(1, round(_RECORD / cells.step))
    # So far beyond that the last record is: K and s change by per cents from one to the next.
    n_steps = math.ceil((end - path.start) / cells.step) + stride
    wanted = np.clip(np.rint((spectra - path.start) / cells.step), 1, n_steps).astype(np.int64)
    return Way(cells, path, np.array([path.start, *state]), n_steps, stride, wanted)


def make_room(cells: Cells) -> Room:
    """Work space for a grid."""
    n_levels, n_cells = cells.weight.shape
    n_scattering = len(cells.conductance) - 1
    cell, levels = np.zeros((6, n_cells)), np.zeros((2, n_levels, n_cells))
    return Room(
        cell[0],
        cell[1],
        levels[0],
        levels[1],
        cell[2],
        cell[3],
        cell[4],
        cell[5],
        np.zeros(n_scattering),
        np.zeros((n_scattering, n_levels + 2)),
        np.zeros(len(cells.line_cell)),
    )


def make_track(way: Way) -> Track:
    """Room for what a march leaves behind."""
    n_records = (way.n_steps - 1) // way.stride + 1
    n, n_lines = len(way.path.weight_ratio), len(way.cells.line_cell)
    return Track(
        np.zeros((way.n_steps + 1, 2)),
        np.zeros((n_records, n, n)),
        np.zeros((n_records, n)),
        np.zeros((n_records, n_lines, 2)),
        np.zeros((len(way.wanted), len(way.cells.offset))),
        np.zeros(4),
    )


def march(way: Way, pieces: Pieces | None, advance: Callable[[float], None]) -> Marched:
    """March, or take up a march; the same bits either way.

    Parameters
    ----------
    way : Way
        From :func:`make_way`.
    pieces : Pieces or None
        Where finished stretches are kept; None: nowhere.
    advance : callable
        Called now and then with the fraction that is done.

    Raises
    ------
    SolveError
        If a matrix is singular, or the march ends before there are enough records.
    """
    track, room, carried = make_track(way), make_room(way.cells), np.zeros(kernel.N_CARRIED)
    kept = _KeptStretches(way, pieces)
    status, length = kernel.DONE, _stretch_steps(way)
    for begin in range(0, way.n_steps, length):
        stretch = begin, min(begin + length, way.n_steps)
        parts = _parts(way, stretch, room, carried, track)
        if not kept.recall(stretch, parts):
            status = _go(way, stretch, room, carried, track, advance)
            if status != kernel.DONE:
                break
            kept.keep(stretch, parts)
        advance(stretch[1] / way.n_steps)
    return _marched(way, track, status)


def _stretch_steps(way: Way) -> int:
    """Steps of a stretch: whole strides, so that each record belongs to one."""
    count = max(1.0, min(way.seconds / _STRETCH_S, _MOST_STRETCHES))
    return way.stride * math.ceil(way.n_steps / count / way.stride)


def _parts(
    way: Way, stretch: tuple[int, int], room: Room, carried: FloatArray, track: Track
) -> dict[str, FloatArray]:
    """Views of all that one stretch fills in, and of all that the next one starts from."""
    begin, end = stretch
    records = slice(begin // way.stride, (end - 1) // way.stride + 1)
    spectra = slice(*np.searchsorted(way.wanted, stretch, side="right").tolist())
    return {
        "state": track.state[begin : end + 1],
        "loss": track.loss[records],
        "source": track.source[records],
        "sides": track.sides[records],
        "spectra": track.spectra[spectra],
        "report": track.report,
        "field": room.field,
        "boltzmann": room.boltzmann,
        "carried": carried,
    }


class _KeptStretches:
    """Finished stretches of one march, by their content; none without pieces."""

    def __init__(self, way: Way, pieces: Pieces | None) -> None:
        self._pieces = pieces
        if pieces is None:
            return
        # All that the kernel is given: whatever setup, table or treatment that came from.
        code = code_digest(("kernels", "history"))
        self._key = content_key("march", code, *way, _TOLERANCE, _MOST_ITERATIONS)

    def recall(self, stretch: tuple[int, int], parts: dict[str, FloatArray]) -> bool:
        """Fill the parts with what is kept; False, and nothing is changed, where it is not."""
        if self._pieces is None:
            return False
        found = self._pieces.get(content_key(self._key, *stretch))
        if found is None or set(found) != set(parts):
            return False
        if any(found[name].shape != part.shape for name, part in parts.items()):
            return False
        for name, part in parts.items():
            part[...] = found[name]
        return True

    def keep(self, stretch: tuple[int, int], parts: dict[str, FloatArray]) -> None:
        """Keep the parts of a stretch that is finished."""
        if self._pieces is not None:
            self._pieces.put(content_key(self._key, *stretch), parts)


def _go(
    way: Way,
    stretch: tuple[int, int],
    room: Room,
    carried: FloatArray,
    track: Track,
    advance: Callable[[float], None],
) -> int:
    """March one stretch, in calls short enough for an interrupt; the status of the last one."""
    length = max(1, math.ceil(way.n_steps * _CALL_S / way.seconds))
    status = kernel.DONE
    for begin in range(*stretch, length):
        now = begin, min(begin + length, stretch[1])
        limits = _TOLERANCE, _MOST_ITERATIONS
        status = kernel.march(
            way.cells,
            way.path,
            way.first,
            now,
            way.stride,
            way.wanted,
            limits,
            room,
            carried,
            track,
        )
        if status != kernel.DONE:
            break
        advance(now[1] / way.n_steps)
    return status


def _marched(way: Way, track: Track, status: int) -> Marched:
    if status == kernel.SINGULAR:
        raise SolveError(Outcome.SINGULAR.value, outcome=Outcome.SINGULAR)
    done = int(track.report[kernel.STEPS])
    outcome = Outcome.CONVERGED if status == kernel.DONE else Outcome.FIELD_NOT_SETTLED
    if done <= _FEWEST_RECORDS * way.stride:
        raise SolveError(outcome.value, outcome=outcome)
    step, (start, width) = np.arange(done + 1, dtype=float), (way.path.start, way.cells.step)
    return Marched(
        start + width * step,
        track.state[: done + 1],
        start + width * (step[: done : way.stride] + 0.5),
        start + width * way.wanted[way.wanted <= done].astype(float),
        track,
        outcome,
    )
