"""The weights of a large atom, kept on the way, so that a weighing that was killed goes on."""

from __future__ import annotations

import time

import numpy as np

from ..arrays import FloatArray
from ..history.level_pieces import setup_key
from ..history.setup import Setup
from ..network.weights import NodeWeights
from ..pieces import Pieces

# A sum is kept no more often than this, and not at all where writing it would cost more than some
# seconds or crowd everything else out of the pieces.
_PERIOD_S = 15.0
_MOST_BYTES = 400e6


class KeptWeights:
    """A sum over reductions that can be taken up where it was left.

    Parameters
    ----------
    pieces : Pieces or None
        Where it is kept.
    setup : Setup
        The history that is weighed.
    temperature_k, by_result : ndarray, shapes (n_nodes,) and (n_nodes, n_sets, n_results)
        T_r of the reductions, and what each is differentiated with.
    total : NodeWeights
        The sum, zero yet; set to what is kept, bit for bit.

    Attributes
    ----------
    done : int
        Reductions that are in the sum.
    """

    def __init__(
        self,
        pieces: Pieces | None,
        setup: Setup,
        temperature_k: FloatArray,
        by_result: FloatArray,
        total: NodeWeights,
    ) -> None:
        size = sum(one.nbytes for one in total)
        self._pieces = pieces if size <= _MOST_BYTES else None
        self._total, self._written, self.done = total, time.monotonic(), 0
        if self._pieces is None:
            return
        # What is differentiated names the history's steps and the targets.
        self._key = setup_key("weights", setup, temperature_k, by_result)
        self._recall()

    def _recall(self) -> None:
        assert self._pieces is not None
        found = self._pieces.get(self._key)
        if found is None or set(found) != {"done", "bound_bound", "bound_free"}:
            return
        if any(found[name].shape != one.shape for name, one in self._total._asdict().items()):
            return
        for name, one in self._total._asdict().items():
            one[...] = found[name]
        self.done = int(found["done"])

    def note(self, done: int) -> None:
        """Keep the sum, now that so many reductions are in it, if it is time."""
        now = time.monotonic()
        if self._pieces is None or now - self._written < _PERIOD_S:
            return
        self._pieces.put(self._key, {"done": np.array(done), **self._total._asdict()})
        self.done, self._written = done, time.monotonic()
