"""Free motion of a second-order system: its value, its extremes, and when it passes or stays within a level.

Everything is in units of tau, the sum of the two time constants. With r = T1 T2 / tau^2 = 1/(4 zeta^2) the
motion obeys r f'' + f' + f = 0. It is written here as f = c + b h with c(0) = 1, c'(0) = 0 (release from
rest at 1) and h = -c' (the impulse response), so f(0) = 1 and b stands for an initial velocity. Two facts do
most of the work:

- the error of a unit step response with the zero 1 + kappa s is this motion with b = -kappa;
- from any extreme on, the motion repeats c: f(x_e + x) = f(x_e) c(x). Finding a level after an extreme is
  therefore always the inverse of c, and the heights of successive extremes form a geometric series.

Roots are sought on log |f|, which is concave between zeros of f, so that Newton's and Halley's steps are
safe. Forms on both sides of r = 1/4 are even in the square root of the discriminant: no series is needed
between them. (Ogata, Modern Control Engineering, 5th ed. 2010, section 5-3, has the responses; the inverse
is our own.)
"""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
from numpy.typing import ArrayLike

from loopfit.core.arrays import Array

SMALLEST_SHAPE = 1e-15  # stands for r = 0: a second lag that no double precision figure can see
_TINY = 1e-300
_CUBIC = 1e-6  # a step below this share leaves an error of its cube


def broadcast(shape: ArrayLike, *others: ArrayLike) -> tuple[Array, ...]:
    """Return all arguments as float arrays of one form, the first (r) kept off 0."""
    r = np.maximum(np.asarray(shape, dtype=np.float64), SMALLEST_SHAPE)
    arrays = [np.asarray(other, dtype=np.float64) for other in others]
    if all(array.shape == r.shape for array in arrays):
        return r, *arrays
    return tuple(np.broadcast_arrays(r, *arrays))


def by_regime(under: Callable[..., Array], over: Callable[..., Array], *arrays: Array) -> Array:
    """Apply one function where r (the first array) is above 1/4, the other elsewhere.

    The functions get flat selections of all arrays; they may return (n,) or (k, n).
    """
    swings = arrays[0] > 0.25
    if swings.all():
        return under(*arrays)
    if not swings.any():
        return over(*arrays)
    first = under(*(array[swings] for array in arrays))
    result = np.empty(first.shape[:-1] + swings.shape)
    result[..., swings] = first
    result[..., ~swings] = over(*(array[~swings] for array in arrays))
    return result


def swing(r: Array) -> tuple[Array, Array]:
    """Return decay per radian of swing, a/w = 1/sqrt(4 r - 1), and the damped frequency w (r above 1/4)."""
    root = np.sqrt(4 * r - 1)
    return 1 / root, root / (2 * r)


def _lags(r: Array) -> tuple[Array, Array, Array]:
    """Return the larger and the smaller time constant and their difference (r up to 1/4)."""
    difference = np.sqrt(1 - 4 * r)
    larger = (1 + difference) / 2
    return larger, r / larger, difference


def _value_and_slope_under(r: Array, x: Array, b: Array) -> Array:
    _, w = swing(r)
    a = 0.5 / r
    decay = np.exp(-a * x)
    cosine, sine = decay * np.cos(w * x), decay * np.sin(w * x) / w
    return np.stack((cosine + (a + b / r) * sine, (b * cosine - (1 + a * b) * sine) / r))


def _value_and_slope_over(r: Array, x: Array, b: Array) -> Array:
    larger, smaller, difference = _lags(r)
    t = x / larger
    fast = np.maximum(difference * t / smaller, _TINY)
    decay, fallen = np.exp(-t), -np.expm1(-fast)
    share = t * fallen / fast
    impulse = decay * share / smaller
    curve = decay * (1 - fallen - share) / r
    return np.stack((decay * (1 + share) + b * impulse, -impulse + b * curve))


def value_and_slope(r: Array, x: Array, b: Array) -> Array:
    """Return f and df/dx, stacked (2, ...), for x from 0 on."""
    return by_regime(_value_and_slope_under, _value_and_slope_over, r, x, b)


def _extreme_under(r: Array, b: Array) -> Array:
    q, w = swing(r)
    # the angle in (0, pi] whose tangent is w b / (1 + a b), without cancellation near r = 1/4
    phase = np.arctan2(np.abs(b) / (2 * q), np.where(b > 0, 1.0, -1.0) * (r + b / 2))
    return np.stack((phase / w, 0.5 * np.log1p(b * (1 + b) / r) - q * phase))


def _extreme_over(r: Array, b: Array) -> Array:
    larger, smaller, difference = _lags(r)
    exists = (b > 0) | (b < -larger)
    b = np.where(exists, b, 1.0)
    slow = b / (smaller * (larger + b))
    ratio = np.maximum(difference * slow, _TINY)
    time = r * slow * np.log1p(ratio) / ratio
    height = 0.5 * np.log1p(b * (1 + b) / r) - 0.5 * time / r
    return np.where(exists, np.stack((time, height)), np.nan)


def first_extreme(r: Array, b: Array) -> Array:
    """Return time and log height of the first extreme after x = 0, stacked (2, ...); nan when there is none.

    Heights are of |f|. In an underdamped motion the following extremes come every pi/w, each exp(-pi a/w) of
    the one before; a motion with real lags has at most one. For b = 0 the extreme at x = 0 itself is not
    counted.
    """
    return by_regime(_extreme_under, _extreme_over, r, b)


def _fall_under(r: Array, depth: Array) -> Array:
    q, w = swing(r)
    square = 1 + q * q
    zero = np.pi / 2 + np.arctan(q)
    guess = (np.sqrt(2 * depth) + 0.8 * depth * q / np.sqrt(square)) / np.sqrt(square)
    phase = zero * np.tanh(guess / zero)
    # near the zero the motion is a straight line: half of where that line meets the level
    short_of_zero = zero - 0.5 * np.minimum(np.exp(np.minimum(q * zero - depth, 5)) / np.sqrt(square), zero)
    for _ in range(7):
        phase = np.where(phase < zero, phase, short_of_zero)
        sine = np.sin(phase)
        level = np.maximum(np.cos(phase) + q * sine, _TINY)
        value = np.log(level) - q * phase + depth
        steep = square * sine * sine
        # as _halley, with the slope -square sine / level and the curve -square / level^2 put in
        step = value * sine * level / np.maximum(steep + 0.5 * value, 0.5 * steep)
        phase = phase + step
        if not (np.abs(step) > _CUBIC * phase).any():
            break
    return phase / w


def _fall_over(r: Array, depth: Array) -> Array:
    larger, smaller, difference = _lags(r)
    share = smaller / larger
    rate = difference / smaller
    t = np.minimum(
        np.sqrt(2 * depth * share) + depth * (1 - 0.2 * share),
        depth - np.log(np.maximum(difference, _TINY) / larger),
    )
    for _ in range(4):
        fast = np.maximum(rate * t, _TINY)
        fallen = -np.expm1(-fast)
        part = t * fallen / fast
        slope = -part / ((1 + part) * share)
        t = t - _halley(np.log1p(part) - t + depth, slope, (fallen - 1) / ((1 + part) ** 2 * share))
    return t * larger


def _halley(value: Array, slope: Array, curve: Array) -> Array:
    """Return Halley's step, at most twice Newton's."""
    square = slope * slope
    return value * slope / np.maximum(square - 0.5 * value * curve, 0.5 * square)


def time_to_fall(r: Array, depth: Array) -> Array:
    """Return the time in which a motion falls from an extreme to exp(-depth) of it, on the same side of rest.

    A fixed number of cubically convergent steps: full precision down to a level of 0.1 % (depth 7) in every
    motion, and further down where r is below 1/4.
    """
    return by_regime(_fall_under, _fall_over, r, np.maximum(depth, 1e-30))


def time_to_descend(r: Array, b: Array, level: Array) -> Array:
    """Return when a motion that starts downwards (b <= 0) first comes from 1 to `level` < 1; nan if never.

    Newton's method inside a bracket, on log f for a level above rest. Only the first swing is searched: it
    holds the lowest value.
    """
    turn, height = first_extreme(r, b)
    above = level > 0
    depth = -np.log(np.where(above, level, 0.5))
    # a downward start only helps: the motion from rest reaches the level later
    high = np.where(above, np.fmin(turn, time_to_fall(r, depth)), turn)
    reached = above | (-np.exp(height) <= level)  # false as well where there is no extreme
    high = np.where(reached, high, 1.0)
    low, x, before = np.zeros_like(high), np.zeros_like(high), high.copy()
    moving = reached
    for _ in range(100):
        f, slope = value_and_slope(r, x, b)
        logarithmic = above & (f > 0)
        gap = np.where(logarithmic, np.log(np.where(logarithmic, f, 1.0)) + depth, f - level)
        slope = np.where(logarithmic, slope / np.where(logarithmic, f, 1.0), slope)
        low, high = np.where(gap > 0, x, low), np.where(gap > 0, high, x)
        step = -gap / np.minimum(slope, -1e-30)
        x_new = x + step
        safe = (x_new >= low) & (x_new <= high) & (np.abs(step) <= np.maximum(0.5 * before, 1e-9 * x))
        x_new = np.where(safe, x_new, 0.5 * (low + high))
        before = np.abs(x_new - x)
        x = np.where(moving, x_new, x)
        moving = moving & (before > 1e-12 * x)
        if not moving.any():
            break
    return np.where(reached, x, np.nan)


def last_extreme_beyond(r: Array, b: Array, log_band: ArrayLike) -> tuple[Array, Array, Array]:
    """Return number, time and log height of the last extreme beyond the band.

    Counted from 0 for the first after x = 0; -1 means none, except that for b = 0 it is the start itself, at
    x = 0. Time and height are nan where there is none. A band of 0 (log -inf) gives an infinite number in a
    swinging motion.
    """
    turn, height = first_extreme(r, b)
    swings = r > 0.25
    q, w = swing(np.where(swings, r, 1.0))
    number = np.where(swings, np.floor((height - log_band) / (np.pi * q)), np.where(height > log_band, 0.0, -1.0))
    number = np.maximum(number, -1.0)
    later = np.where(swings, number, 0.0)
    from_rest = (b == 0) & (number < 0)
    missing = (number < 0) & ~from_rest
    time = np.where(from_rest, 0.0, np.where(missing, np.nan, turn + later * np.pi / w))
    log_height = np.where(from_rest, 0.0, np.where(missing, np.nan, height - later * np.pi * q))
    return number, time, log_height


def last_entry(r: Array, b: Array, band: Array) -> Array:
    """Return when |f| comes within the band (between 0 and 1) for good.

    The last extreme beyond the band is found from the geometric series of heights, so thousands of swings
    cost no more than one; from there the motion falls as from rest.
    """
    log_band = np.log(band)
    _, start, height = last_extreme_beyond(r, b, log_band)
    found = ~np.isnan(start)
    time = np.asarray(start + time_to_fall(r, np.where(found, height - log_band, 1.0)))
    if found.all():
        return time
    # thrown towards rest and never beyond the band again: the entry lies in the first swing
    first = ~found
    time[first] = time_to_descend(r[first], b[first], band[first])
    return time
