"""Arrays that are handed on are read-only."""

from __future__ import annotations

from typing import TypeAlias

import numpy as np
from numpy.typing import ArrayLike, NDArray

Array: TypeAlias = NDArray[np.float64]


def read_only(values: ArrayLike) -> Array:
    """Return a float array that nobody can write to; a writable input is copied."""
    array = np.asarray(values, dtype=np.float64)
    if array.flags.writeable:
        array = array.copy()
        array.flags.writeable = False
    return array
