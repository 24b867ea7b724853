"""Where a record comes to rest, and whether it has: mean of the tail with what may still be missing."""

from __future__ import annotations

import math

import numpy as np

from loopfit.core.arrays import Array
from loopfit.core.quantity import Quantity

_PARTS = (4, 5, 6, 8, 10, 14, 20)  # the record is cut into this many equal parts; the last three are compared
_FEWEST_POINTS = 3  # in a part
_STILL_MOVING = 0.05  # of the change; a tail that visibly drifts and may have more than this to go is not at rest
LAST_SWING = 0.02  # of the change
_DURATION = np.geomspace(0.5, 40.0, 80)  # of the record in time constants of the slowest part of the motion


def moving_rows(since: Array, values: Array, fewest: int) -> int:
    """Return how many rows hold the motion and as much rest again; the others are at rest to within the noise.

    The time is halved as long as the half given up scatters no more about the rest value than the last half
    of the record does.
    """
    half = int(np.searchsorted(since, since[-1] / 2))
    square = (values - values[half:].mean()) ** 2
    noise, count, limit = square[half:].mean(), values.size - half, values.size
    while half >= fewest:
        quarter = int(np.searchsorted(since, since[half] / 2))
        if half - quarter < _FEWEST_POINTS:
            break
        # mean squares of the two stretches differ by chance by this factor (coloured noise has fewer free rows)
        chance = 1 + 4 * math.sqrt(1 / max(half - quarter, 1) + 1 / count)
        if not square[quarter:half].mean() <= chance * noise:
            break
        limit, half = half, quarter
    return limit


def room_for_a_swing(final: Quantity, change: float, moving: float, end: float) -> Quantity:
    """Return the final value with room for a last small swing, on top of which a short record may end.

    A swing below 2 % of the change shows little at its top and lasts about as long as the motion before it. A
    record (up to `end`) at rest for 1.5 times as long as it moved needs no room; one just at rest needs 2 %.
    """
    if not moving > 0:
        return final
    room = LAST_SWING * change * max(1 - (end - moving) / (1.5 * moving), 0.0)
    return Quantity(final.value, final.low - room, final.high + room)


def resting_value(values: Array, start: float, variance: float, quantile: float) -> Quantity | None:
    """Return the value at which the record rests at its end, or None if it still moves.

    Parameters
    ----------
    values : (m,) float
        The record after the step, in equal intervals.
    start : float
        Value before the step.
    variance : float
        What one of `values` contributes to the variance of a long mean: variance of the mean x count.
    quantile : float
        Normal quantile of the wanted two-sided confidence.

    Notes
    -----
    The distance to rest is taken to die away as A exp(-t/T) or faster, with A at least the whole change. Every
    length of part bounds A for each T by the drift between neighbouring parts (the better of two
    neighbours, so that one accident of a swing's phase does no harm) plus its noise; the T that
    remain possible give the most that the mean of the last part can lack. The length with the narrowest
    interval is taken.
    """
    lengths = [(parts, values.size // parts) for parts in _PARTS if values.size // parts >= _FEWEST_POINTS]
    most = np.full(_DURATION.size, np.inf)  # the largest A that the drift allows, per T
    least = np.ones(_DURATION.size)  # the smallest A that explains the drift
    tails = []
    for parts, length in lengths:
        first, second, last = values[values.size - 3 * length :].reshape(3, length).mean(1)
        noise = quantile * math.sqrt(variance / length)
        ratio = np.exp(-_DURATION / parts)
        mean = ratio ** (parts - 1) * (1 - ratio) / -np.log(ratio)  # of exp(-t/T) over the last part
        error = noise * math.sqrt(2)
        change = max(abs(last - start), error, 1e-300)
        late, early = change * mean * (1 / ratio - 1), change * mean * (1 / ratio - 1) / ratio
        drifts = abs(last - second), abs(second - first)
        most = np.minimum(most, np.maximum((drifts[0] + error) / late, (drifts[1] + error) / early))
        least = np.maximum(least, np.maximum((drifts[0] - error) / late, (drifts[1] - error) / early))
        tails.append((float(last), noise, change * mean, drifts[0] > error))
    possible = most >= least
    if not possible.any() and np.any(least > 1):
        possible = least / most <= np.min(least / most) * 1.001  # swings: the nearest to a steady decay
        most = least
    best: tuple[float, float, bool] | None = None
    for last, noise, mean, drifting in tails:
        missing = float(np.max(np.where(possible, most * mean, 0.0)))
        if best is None or noise + missing < best[1]:
            best = (last, noise + missing, drifting and missing > _STILL_MOVING * abs(last - start))
    if best is None or best[2]:
        return None
    return Quantity(best[0], best[0] - best[1], best[0] + best[1])
