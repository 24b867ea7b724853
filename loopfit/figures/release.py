"""Exact figures of a release: the return to rest of a second-order system from a displaced start.

The motion is y = A (1 - g) + B h, with g the unit step response and h = dg/dx its derivative in units of
tau, the sum of the time constants; A is the displacement at the start and `ratio` = B/A carries the initial
velocity (0: let go from rest). Conventions as in unit_step; the decay ratio of a release is decay_ratio
there.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import ArrayLike

from loopfit.core.arrays import Array
from loopfit.figures.free_response import broadcast, last_entry, last_extreme_beyond, value_and_slope


def release_value(x: ArrayLike, r: ArrayLike, ratio: ArrayLike = 0.0) -> Array:
    """Return the motion at x >= 0 as a fraction of the displacement at the start."""
    r, x, ratio = broadcast(r, x, ratio)
    value: Array = value_and_slope(r, x, ratio)[0]
    return value


def release_settling_time(r: ArrayLike, band: ArrayLike = 0.02, ratio: ArrayLike = 0.0) -> Array:
    """Return the last entry into the band about rest, `band` (0 to 1) times the displacement at the start."""
    r, band, ratio = broadcast(r, band, ratio)
    return last_entry(r, ratio, band)


def release_crossings(r: ArrayLike, ratio: ArrayLike = 0.0, band: float = 0.0) -> Array:
    """Return how often the motion passes rest, counting passages after which it leaves the band again.

    With real lags (overdamped, critically damped) it passes at most once, and only when thrown towards rest
    faster than the slower lag allows. With the band left at 0 an underdamped motion passes without end:
    infinite.
    """
    r, ratio = broadcast(r, ratio)
    log_band = np.log(band) if band > 0 else -np.inf
    number = last_extreme_beyond(r, ratio, log_band)[0]
    # thrown away from rest, the first extreme comes before the first passage
    return np.maximum(np.where(ratio > 0, number, number + 1), 0.0)
