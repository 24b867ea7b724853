"""Exact figures of the unit step response of (1 + kappa tau s) / (r tau^2 s^2 + tau s + 1).

Times are in units of tau, the sum of the two time constants, from the moment the response starts to move
(the caller adds dead time); r = T1 T2 / tau^2 = 1/(4 zeta^2) is above 1/4 when underdamped, 1/4 when
critically damped, below when overdamped, and 0 for a first-order lag. Heights are fractions of the final
change, from 0 to 1. All functions take arrays that broadcast and return float arrays; nan where a figure
does not exist. r is at least 0 and kappa finite; neither is checked here. See free_response for the method.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import ArrayLike

from loopfit.core.arrays import Array
from loopfit.figures.free_response import (
    broadcast,
    first_extreme,
    last_entry,
    swing,
    time_to_descend,
    time_to_fall,
    value_and_slope,
)


def _plain(kappa: ArrayLike) -> bool:
    return isinstance(kappa, int | float) and kappa == 0


def step_value(x: ArrayLike, r: ArrayLike, kappa: ArrayLike = 0.0) -> Array:
    """Return the response at x; 0 before x = 0.

    With kappa and r = 0 together the response jumps to kappa at x = 0; there the value is the one before the
    jump.
    """
    r, x, kappa = broadcast(r, x, kappa)
    return np.where(x > 0, 1 - value_and_slope(r, np.maximum(x, 0.0), -kappa)[0], 0.0)


def _first_peak(r: Array, kappa: Array) -> tuple[Array, Array]:
    """Return time and log height of the first peak beyond the final value; nan, -inf when there is none."""
    time, height = first_extreme(r, -kappa)
    after_dip = (kappa < 0) & (r > 0.25)
    q, w = swing(np.where(after_dip, r, 1.0))
    time = np.where(after_dip, time + np.pi / w, np.where(kappa < 0, np.nan, time))
    height = np.where(after_dip, height - np.pi * q, height)
    return time, np.where(np.isnan(time), -np.inf, height)


def first_peak(r: ArrayLike, kappa: ArrayLike = 0.0) -> tuple[Array, Array]:
    """Return overshoot and peak time of the same responses together; see `overshoot` and `peak_time`."""
    r, kappa = broadcast(r, kappa)
    time, height = _first_peak(r, kappa)
    return np.exp(height), time


def overshoot(r: ArrayLike, kappa: ArrayLike = 0.0) -> Array:
    """Return the largest excursion beyond the final value, as a fraction of it; 0 when there is none.

    For kappa = 0, exp(-pi zeta / sqrt(1 - zeta^2)) (Ogata, Modern Control Engineering, 5th ed. 2010, section
    5-3). With real lags there is overshoot only when the zero is slower than both: kappa tau above the
    larger of them.
    """
    return first_peak(r, kappa)[0]


def peak_time(r: ArrayLike, kappa: ArrayLike = 0.0) -> Array:
    """Return the time of the first peak beyond the final value; nan when there is none."""
    return first_peak(r, kappa)[1]


def undershoot(r: ArrayLike, kappa: ArrayLike) -> Array:
    """Return the depth of the initial move away from the final value (kappa < 0), as a fraction; else 0."""
    r, kappa = broadcast(r, kappa)
    away = kappa < 0
    return np.where(away, np.expm1(np.where(away, first_extreme(r, -kappa)[1], 0.0)), 0.0)


def decay_ratio(r: ArrayLike) -> Array:
    """Return second over first overshoot peak, one full period apart; nan when overdamped or critical.

    exp(-2 pi zeta / sqrt(1 - zeta^2)), the same with any zero and for a release (logarithmic decrement,
    common practice).
    """
    (r,) = broadcast(r)
    swings = r > 0.25
    return np.where(swings, np.exp(-2 * np.pi * swing(np.where(swings, r, 1.0))[0]), np.nan)


def crossing_time(r: ArrayLike, level: ArrayLike, kappa: ArrayLike = 0.0) -> Array:
    """Return when the response first reaches `level` (1 is the final value); nan if it never does."""
    if _plain(kappa) and np.all(np.asarray(level) < 1):
        r, level = broadcast(r, level)
        return time_to_fall(r, -np.log1p(-level))
    r, level, kappa = broadcast(r, level, kappa)
    remaining = 1 - level
    # after the initial move away, the response is that of a release from the turning point
    dips = kappa < 0
    start, height = first_extreme(r, np.where(dips, -kappa, 1.0))
    start, height = np.where(dips, start, 0.0), np.where(dips, np.exp(height), 1.0)
    return start + time_to_descend(r, np.where(dips, 0.0, -kappa), remaining / height)


def rise_time(r: ArrayLike, kappa: ArrayLike = 0.0) -> Array:
    """Return the time from the first 10 % to the first 90 % of the final value."""
    r = np.asarray(r, dtype=np.float64)
    return crossing_time(r, 0.9, kappa) - crossing_time(r, 0.1, kappa)


def delay_time(r: ArrayLike, kappa: ArrayLike = 0.0) -> Array:
    """Return the time of the first 50 % of the final value."""
    return crossing_time(r, 0.5, kappa)


def settling_time(r: ArrayLike, band: ArrayLike = 0.02, kappa: ArrayLike = 0.0) -> Array:
    """Return the last entry into the band about the final value; `band` is a fraction between 0 and 1.

    As a function of r it jumps up where one more swing leaves the band.
    """
    r, band, kappa = broadcast(r, band, kappa)
    return last_entry(r, -kappa, band)
