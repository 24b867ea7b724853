"""Figures of a smoothed step response, each read from all curves that lie in a band about it."""

from __future__ import annotations

import math
from dataclasses import dataclass
from statistics import NormalDist

import numpy as np
from numpy.typing import NDArray

from loopfit.core.arrays import Array
from loopfit.core.quantity import Quantity

_UNSEEN = 0.1  # of the time between readings: what the curve may do between them moves a crossing by less


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Course:
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

    def quantile(self, where: NDArray[np.bool_] | None = None) -> float:
        """Return the normal quantile that holds for all points together, or for those of `where`."""
        share = 1.0 if where is None else float(np.mean(where))
        return NormalDist().inv_cdf(1 - (1 - self.confidence) / (2 * max(share * self.freedom, 1.0)))

    def width(self, level: float | Array, where: NDArray[np.bool_] | None = None) -> Array:
        """Return half-widths (m,) of height minus a level, a fraction of the change."""
        curve = self.quantile(where) * self.error
        return np.sqrt(curve**2 + ((1 - level) * self.start) ** 2 + (level * self.end) ** 2)


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


def crossing_time(course: Course, level: float) -> Quantity | None:
    """Return when the response first reaches the level, a fraction of the change; None if it does not."""
    value = _first_at(course.time, course.height, level)
    if math.isinf(value):
        return None
    width = course.width(level)
    width = course.width(level, np.abs(course.height - level) < width)
    low = _first_at(course.time, course.height + width, level)
    high = _first_at(course.time, course.height - width, level)
    if low <= course.time[0]:  # it may have been before the first reading
        low = 0.0
    unseen = _UNSEEN * course.interval
    return Quantity.spanning(value, max(low - unseen, 0.0), high + unseen)


def rise_time(course: Course) -> Quantity | None:
    """Return the time between the first 10 % and the first 90 %; the errors of the two are independent."""
    lower, upper = crossing_time(course, 0.1), crossing_time(course, 0.9)
    if lower is None or upper is None:
        return None
    value = upper.value - lower.value
    low = value - math.hypot(upper.value - upper.low, lower.high - lower.value)
    high = value + math.hypot(upper.high - upper.value, lower.value - lower.low)
    return Quantity.spanning(max(value, 0.0), max(low, 0.0), high)


def _largest(values: Array) -> float:
    """Return the largest value, between points by the parabola through the top three."""
    at = int(np.argmax(values))
    if at in (0, values.size - 1):
        return float(values[at])
    before, top, after = (float(value) for value in values[at - 1 : at + 2])
    bend = before - 2 * top + after
    return top - (after - before) ** 2 / (8 * bend) if bend < 0 else top


def peak(course: Course) -> tuple[Quantity, Quantity, Quantity | None]:
    """Return peak height and overshoot as fractions of the change, and the time of the peak if there is one."""
    height = course.height
    possible = np.ones(height.size, dtype=bool)
    for _ in range(2):  # fewer places compete for the peak than the whole curve has
        band = course.quantile(possible) * course.error
        possible = height + band >= np.max(height - band)
    least, most = _largest(height - band), _largest(height + band)
    width = course.width(height, possible)
    low, high = _largest(height - width) - 1, max(_largest(height + width) - 1, 0.0)
    if not low > 0:
        return Quantity.spanning(1.0, 1 - course.end, max(most, 1 + course.end)), Quantity(0.0, 0.0, high), None
    # the first stretch that may hold the largest value and reaches it: later swings are lower
    inside = int(np.argmax(height >= np.max(height - band)))
    begin = inside - int(np.argmin(np.append(possible[inside::-1], False))) + 1
    end = inside + int(np.argmin(np.append(possible[inside:], False)))
    at = begin + int(np.argmax(height[begin:end]))
    moment = Quantity.spanning(course.time[at], course.time[max(begin - 1, 0)], course.time[min(end, height.size - 1)])
    top = _largest(height[begin:end])
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


def settling_time(near: Course, tail: Course | None, band: float) -> Quantity | None:
    """Return the last entry into the band; the bound is open where noise could hide an excursion to the end."""
    away, width = np.abs(near.height - 1), near.width(1.0)
    value = _last_beyond(near.time, away - np.maximum(band, width))
    if math.isinf(value):
        return None
    low, high = (_last_beyond(near.time, away + sign * width - band) for sign in (-1, 1))
    if tail is not None:
        late = _last_beyond(tail.time, np.abs(tail.height - 1) + tail.width(1.0) - band)
        high = late if late > 0 else min(high, float(tail.time[0]))
    return Quantity.spanning(value, low, high)


def decay_ratio(course: Course) -> Quantity:
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
