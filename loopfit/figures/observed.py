"""Figures of a step response read from the record itself, without a model."""

from __future__ import annotations

import math
from dataclasses import dataclass
from statistics import NormalDist

import numpy as np
from numpy.typing import ArrayLike

from loopfit.core.arrays import Array
from loopfit.core.quantity import Quantity
from loopfit.figures.course import Course, crossing_time, decay_ratio, peak, rise_time, settling_time
from loopfit.figures.rest import LAST_SWING, moving_rows, resting_value, room_for_a_swing
from loopfit.figures.smoothing import MOST_BLOCKS, Curve, blocks, long_variance, smooth

_FEWEST_ROWS = 16
_FEWEST_ROWS_APART = 40  # for a part of the record to be smoothed by itself


@dataclass(frozen=True, slots=True, kw_only=True)
class Observed:
    """What the record shows, times in s from the step; None where a figure does not exist or cannot be read.

    An overshoot that cannot be told from noise is 0, with the interval up to what may be hidden.
    """

    initial_value: Quantity | None
    final_value: Quantity | None
    peak_value: Quantity | None
    overshoot_percent: Quantity | None
    peak_time_s: Quantity | None
    rise_time_s: Quantity | None
    settling_time_s: Quantity | None
    delay_time_s: Quantity | None
    decay_ratio: Quantity | None
    steady_state_deviation: Quantity | None


def observe(
    time: ArrayLike,
    measurement: ArrayLike,
    step_time: float,
    *,
    setpoint_after: float | None = None,
    band: float = 0.02,
    confidence: float = 0.95,
    noise_rms: float | None = None,
) -> Observed:
    """Read the figures of a step response off its record.

    Parameters
    ----------
    time : (n,) float
        Rising, s; the sampling may be uneven. Rows before the step help to know the noise and the start.
    measurement : (n,) float
        Measurement at those times, finite.
    step_time : float
        Instant of the step, s.
    setpoint_after : float, optional
        Setpoint after the step, for the steady-state deviation.
    band : float
        Settling band as a fraction of the change.
    confidence : float
        Of each interval, as a fraction.
    noise_rms : float, optional
        Known scatter of the rows, for example from the resolution; the noise is taken to be at least that.

    Returns
    -------
    Observed
        Figures with their intervals.

    Notes
    -----
    The record is smoothed (see smoothing), and each figure's interval holds the figures of all curves in a band
    about the smoothed one that covers the whole course at the stated confidence: rather too wide than too
    narrow. A long rest at the end is set apart before the response is smoothed; there it shows the noise.

    Without rows before the step, coloured noise and swings of a few rows each cannot be told apart, and the
    intervals may then be too narrow.
    """
    time, measurement = np.asarray(time, dtype=np.float64), np.asarray(measurement, dtype=np.float64)
    first = int(np.searchsorted(time, step_time))
    before, since, after = measurement[:first], time[first:] - step_time, measurement[first:]
    if after.size < _FEWEST_ROWS:
        return _nothing()
    quantile = NormalDist().inv_cdf(0.5 + confidence / 2)
    rows = moving_rows(since, after, _FEWEST_ROWS_APART)
    quiet = max(before, after[rows:], key=len)
    curve = smooth(since[:rows], after[:rows], quiet, noise_rms or 0.0)
    initial = _initial(before, curve, quantile)
    _, values, count = blocks(since, after)
    final = resting_value(values, initial.value, curve.long_variance / count, quantile)
    if final is None:
        return _nothing(initial)
    change = abs(final.value - initial.value)
    moving = np.flatnonzero(np.abs(curve.value - final.value) > LAST_SWING * change + quantile * curve.error)
    if moving.size:
        final = room_for_a_swing(final, change, float(curve.time[moving[-1]]), float(since[-1]))
    deviation = None if setpoint_after is None else final.scaled(-1.0).shifted(setpoint_after)
    start, end = (_half_width(level) / change if change > 0 else math.inf for level in (initial, final))
    if not math.hypot(start, end) < 1:
        return _nothing(initial, final, deviation)
    change = final.value - initial.value

    def course(part: Curve) -> Course:
        return Course(
            time=part.time,
            height=(part.value - initial.value) / change,
            error=part.error / abs(change),
            interval=part.interval,
            freedom=part.freedom,
            start=start,
            end=end,
            confidence=confidence,
        )

    near, tail = course(curve), None
    seen = near.time[np.abs(near.height - 1) > near.quantile() * near.error]
    # a swing lost in the noise may follow the last that is seen, and lasts about as long
    rest = int(np.searchsorted(since, 2.5 * seen[-1])) if seen.size else since.size
    if since.size - rest >= _FEWEST_ROWS_APART:
        tail = course(smooth(since[rest:], after[rest:], before, noise_rms or 0.0))
    rise = rise_time(near)
    if rise is None or rise.value < near.interval:  # all of it between two rows
        return _nothing(initial, final, deviation)
    height, overshoot, moment = peak(near)
    return Observed(
        initial_value=initial,
        final_value=final,
        peak_value=height.scaled(change).shifted(initial.value),
        overshoot_percent=overshoot.scaled(100.0),
        peak_time_s=moment,
        rise_time_s=rise,
        settling_time_s=settling_time(near, tail, band),
        delay_time_s=crossing_time(near, 0.5),
        decay_ratio=decay_ratio(near) if moment is not None else None,
        steady_state_deviation=deviation,
    )


def _nothing(
    initial: Quantity | None = None, final: Quantity | None = None, deviation: Quantity | None = None
) -> Observed:
    return Observed(
        initial_value=initial,
        final_value=final,
        peak_value=None,
        overshoot_percent=None,
        peak_time_s=None,
        rise_time_s=None,
        settling_time_s=None,
        delay_time_s=None,
        decay_ratio=None,
        steady_state_deviation=deviation,
    )


def _half_width(level: Quantity) -> float:
    return (level.high - level.low) / 2


def _initial(before: Array, curve: Curve, quantile: float) -> Quantity:
    """Return the value before the step: mean of the rows there, or where the curve begins."""
    if before.size == 0:
        value, error = float(curve.value[0]), float(curve.error[0])
    else:
        last = before[-MOST_BLOCKS:]
        variance = max(curve.long_variance, long_variance(last))
        value, error = float(before.mean()), math.sqrt(variance / before.size)
    return Quantity(value, value - quantile * error, value + quantile * error)
