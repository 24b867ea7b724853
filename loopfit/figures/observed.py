"""Figures of a step response read from the record itself, without a model."""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass
from statistics import NormalDist

import numpy as np
from numpy.typing import ArrayLike

from loopfit.core.arrays import Array
from loopfit.core.quantity import Quantity
from loopfit.figures.rest import resting_value
from loopfit.figures.smoothing import MOST_BLOCKS, Curve, blocks, long_variance, smooth

_FEWEST_ROWS = 16
_LAST_SWING = 0.02  # of the change
_UNSEEN = 0.1  # of the time between readings: what the curve may do between them moves a crossing by less
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


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class _Course:
    """The curve as a fraction of the change: times (m,), heights and their standard errors.

    `start` and `end` are the half-widths of the levels 0 and 1 at the wanted confidence.
    """

    time: Array
    height: Array
    error: Array
    interval: float
    freedom: float
    start: float
    end: float
    confidence: float

    def quantile(self, where: Array | None = None) -> float:
        """Return the normal quantile that holds for all points together, or for those of `where`."""
        share = 1.0 if where is None else float(np.mean(where))
        return NormalDist().inv_cdf(1 - (1 - self.confidence) / (2 * max(share * self.freedom, 1.0)))

    def width(self, level: float | Array, where: Array | None = None) -> Array:
        """Return half-widths (m,) of height minus a level, a fraction of the change."""
        curve = self.quantile(where) * self.error
        return np.sqrt(curve**2 + ((1 - level) * self.start) ** 2 + (level * self.end) ** 2)


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
    The record is smoothed (see smoothing), and each figure's interval holds the figures of all curves in a
    band about the smoothed one that covers the whole course at the stated confidence. The intervals are
    therefore rather too wide than too narrow. A long rest at the end is cut off before the
    response itself is smoothed again.
    """
    time, measurement = np.asarray(time, dtype=np.float64), np.asarray(measurement, dtype=np.float64)
    first = int(np.searchsorted(time, step_time))
    before, since, after = measurement[:first], time[first:] - step_time, measurement[first:]
    if after.size < _FEWEST_ROWS:
        return _nothing()
    quantile = NormalDist().inv_cdf(0.5 + confidence / 2)
    whole = smooth(since, after, before, noise_rms or 0.0)
    initial = _initial(before, whole, quantile)
    _, values, rows = blocks(since, after)
    final = resting_value(values, initial.value, whole.long_variance / rows, quantile)
    if final is None:
        return _nothing(initial)
    final = _followed_briefly(whole, initial.value, final, quantile)
    change = final.value - initial.value
    deviation = None if setpoint_after is None else final.scaled(-1.0).shifted(setpoint_after)
    start, end = (_half_width(level) / abs(change) if change != 0 else math.inf for level in (initial, final))
    if not math.hypot(start, end) < 1:
        return _nothing(initial, final, deviation)

    def course(rows: slice) -> _Course:
        curve = whole if rows == slice(None) else smooth(since[rows], after[rows], before, noise_rms or 0.0)
        return _Course(
            time=curve.time,
            height=(curve.value - initial.value) / change,
            error=curve.error / abs(change),
            interval=curve.interval,
            freedom=curve.freedom,
            start=start,
            end=end,
            confidence=confidence,
        )

    near, tail = _split(since, course)
    peak, overshoot, peak_time = _peak(near)
    return Observed(
        initial_value=initial,
        final_value=final,
        peak_value=peak.scaled(change).shifted(initial.value),
        overshoot_percent=overshoot.scaled(100.0),
        peak_time_s=peak_time,
        rise_time_s=_rise(near),
        settling_time_s=_settling(near, tail, band),
        delay_time_s=_crossing(near, 0.5),
        decay_ratio=_decay(near) if peak_time is not None else None,
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


def _followed_briefly(curve: Curve, start: float, final: Quantity, quantile: float) -> Quantity:
    """Return the final value with room for a last small swing, on top of which a short record may end.

    A swing within the band of 2 % shows little at its top and lasts about as long as the motion before it. A
    record at rest for 1.5 times as long as it moved needs no room; one just within the band needs 2 %.
    """
    change = abs(final.value - start)
    moving = np.abs(curve.value - final.value) > _LAST_SWING * change + quantile * curve.error
    last = float(curve.time[moving][-1]) if moving.any() else 0.0
    short = max(1 - (float(curve.time[-1]) - last) / (1.5 * last), 0.0) if last > 0 else 0.0
    room = _LAST_SWING * change * short
    return Quantity(final.value, final.low - room, final.high + room)


def _split(since: Array, course: Callable[[slice], _Course]) -> tuple[_Course, _Course | None]:
    """Return the course while it moves and, where there are rows for it, the course at rest after that."""
    near, rows = course(slice(None)), since.size
    for _ in range(4):
        moving = np.flatnonzero(np.abs(near.height - 1) > near.quantile() * near.error)
        still = int(np.searchsorted(since, near.time[moving[-1]])) if moving.size else 0
        rows_needed = max(2 * still, _FEWEST_ROWS_APART)
        if rows_needed > 0.6 * rows:
            break
        rows = rows_needed
        near = course(slice(rows))
    apart = since.size - still >= _FEWEST_ROWS_APART and still > 0
    return near, course(slice(still, None)) if apart else None


def _first_at(time: Array, height: Array, level: float | Array) -> float:
    """Return when the height first reaches the level, by straight lines; infinite if it does not."""
    gap = height - level
    index = int(np.argmax(gap >= 0))
    if not gap[index] >= 0:
        return math.inf
    if index == 0:
        return float(time[0])
    share = gap[index - 1] / (gap[index - 1] - gap[index])
    return float(time[index - 1] + share * (time[index] - time[index - 1]))


def _crossing(course: _Course, level: float) -> Quantity | None:
    value = _first_at(course.time, course.height, level)
    if math.isinf(value):
        return None
    width = course.width(level)
    width = course.width(level, np.abs(course.height - level) < width)
    low = _first_at(course.time, course.height + width, level)
    high = _first_at(course.time, course.height - width, level)
    unseen = _UNSEEN * course.interval
    return Quantity.spanning(value, max(low - unseen, 0.0), high + unseen)


def _rise(course: _Course) -> Quantity | None:
    lower, upper = _crossing(course, 0.1), _crossing(course, 0.9)
    if lower is None or upper is None:
        return None
    value = upper.value - lower.value
    low = value - math.hypot(upper.value - upper.low, lower.high - lower.value)
    high = value + math.hypot(upper.high - upper.value, lower.value - lower.low)
    return Quantity.spanning(max(value, 0.0), max(low, 0.0), high)


def _peak(course: _Course) -> tuple[Quantity, Quantity, Quantity | None]:
    """Return peak height and overshoot as fractions of the change, and the time of the peak if there is one."""
    height = course.height
    possible = np.ones(height.size, dtype=bool)
    for _ in range(2):  # fewer places compete for the peak than the whole curve has
        band = course.quantile(possible) * course.error
        possible = height + band >= np.max(height - band)
    least, most = float(np.max(height - band)), float(np.max(height + band))
    width = course.width(height, possible)
    low, high = float(np.max(height - width)) - 1, max(float(np.max(height + width)) - 1, 0.0)
    if not low > 0:
        return Quantity.spanning(1.0, 1 - course.end, max(most, 1 + course.end)), Quantity(0.0, 0.0, high), None
    # the first stretch that may hold the largest value: later swings are lower
    begin = int(np.argmax(possible))
    end = begin + int(np.argmin(np.append(possible[begin:], False)))
    at = begin + int(np.argmax(height[begin:end]))
    moment = Quantity.spanning(course.time[at], course.time[max(begin - 1, 0)], course.time[min(end, height.size - 1)])
    top = float(height[at])
    return Quantity.spanning(top, least, most), Quantity.spanning(top - 1, low, high), moment


def _last_beyond(time: Array, excess: Array) -> float:
    """Return when `excess` is above 0 for the last time; 0 if never, infinite if it is so at the end."""
    beyond = np.flatnonzero(excess > 0)
    if beyond.size == 0:
        return 0.0
    index = int(beyond[-1])
    if index == excess.size - 1:
        return math.inf
    share = excess[index] / (excess[index] - excess[index + 1])
    return float(time[index] + share * (time[index + 1] - time[index]))


def _settling(near: _Course, tail: _Course | None, band: float) -> Quantity | None:
    """Return the last entry into the band; the bound is open where noise could hide an excursion to the end."""
    away, width = np.abs(near.height - 1), near.width(1.0)
    value = _last_beyond(near.time, away - np.maximum(band, width))
    if math.isinf(value):
        return None
    low, high = (_last_beyond(near.time, away + sign * width - band) for sign in (-1, 1))
    if tail is not None:
        late = _last_beyond(tail.time, np.abs(tail.height - 1) + tail.width(1.0) - band)
        before_tail = near.time < tail.time[0]
        high = late if late > 0 else max(float(near.time[before_tail][-1]), value)
    return Quantity.spanning(value, low, high)


def _decay(course: _Course) -> Quantity:
    """Return second over first peak beyond the final value; 0 where the second cannot be told from rest."""
    excess, width = course.height - 1, course.width(course.height)
    first = int(np.argmax(excess))
    below = np.flatnonzero(excess[first:] < 0)
    if below.size == 0:
        return Quantity(0.0, 0.0, 1.0)
    trough = first + int(below[0])
    second = trough + int(np.argmax(excess[trough:]))
    low = max(float((excess[second] - width[second]) / (excess[first] + width[first])), 0.0)
    least = float(excess[first] - width[first])
    high = min(float(np.max((excess + width)[trough:])) / least, 1.0) if least > 0 else 1.0
    ratio = float(excess[second] / excess[first]) if low > 0 else 0.0
    return Quantity.spanning(ratio, low, max(high, 0.0))
