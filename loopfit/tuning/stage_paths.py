"""Ways from one set of gains to another: kp, ki, kd at shares of the way, and how many stages the way needs."""

from __future__ import annotations

import math
from collections.abc import Callable

import numpy as np

from loopfit.core.arrays import Array

Path = Callable[[Array, Array, Array], Array]  # from, to, shares, (3,) each

_FACTOR = 2.0  # a stage changes no gain or time by more, where that many stages are allowed
_SMALL = 1.2  # changes up to this factor go in one stage


def geometric(a: Array, b: Array, share: Array) -> Array:
    """Each gain by equal factors; one that appears, goes or changes sign straight."""
    same = a * b > 0.0
    ratio = np.where(same, b / np.where(same, a, 1.0), 1.0)
    return np.where(same, a * ratio**share, straight(a, b, share))


def straight(a: Array, b: Array, share: Array) -> Array:
    """Each gain by equal differences."""
    return np.asarray(a + (b - a) * share)


def by_times(a: Array, b: Array, share: Array) -> Array:
    """Straight in gain, integral time and derivative time; a term that appears or goes straight in its own gain."""
    out = straight(a, b, share)
    if a[0] * b[0] > 0.0:
        if a[1] * b[1] > 0.0:
            out[1] = out[0] / straight(a[0] / a[1], b[0] / b[1], share[1])
        if a[2] * b[2] > 0.0:
            out[2] = out[0] * straight(a[2] / a[0], b[2] / b[0], share[2])
    return out


def needed(a: Array, b: Array, most: int) -> int:
    """Return how many stages are needed for the factors of gains and times; a term that appears asks for two."""
    pairs = [(a[k], b[k]) for k in range(3)]
    if a[0] and b[0]:
        pairs += [(a[k] / a[0], b[k] / b[0]) for k in (1, 2)]
    largest = max((abs(math.log(y / x)) for x, y in pairs if x and y), default=0.0)
    if largest <= math.log(_SMALL) and all((x == 0.0) == (y == 0.0) for x, y in pairs):
        return 1
    return int(np.clip(math.ceil(largest / math.log(_FACTOR) - 1e-6), min(2, most), most))
