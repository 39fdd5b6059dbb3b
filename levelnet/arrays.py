"""Array checks shared by all records: right type and shape, finite, and read-only."""

from typing import Any

import numpy as np
from numpy.typing import NDArray

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]
BoolArray = NDArray[np.bool_]


def frozen_array(record: Any, name: str, shape: tuple[int, ...], dtype: type = np.float64) -> None:
    """Check field `name` of a frozen record against `shape` and mark it read-only.

    A frozen dataclass alone does not freeze an array; a mistake in shape is the program's, so it
    raises ValueError and not an InputError.
    """
    # In C order, for sums over other strides round differently: a record that is written and read
    # back must give the same bits.
    values: NDArray[Any] = np.array(getattr(record, name), dtype=dtype, order="C")
    if values.shape != shape:
        raise ValueError(f"{type(record).__name__}.{name}: shape {values.shape}, expected {shape}")
    values.flags.writeable = False
    object.__setattr__(record, name, values)
