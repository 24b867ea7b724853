"""The swings of an oscillation about rest: where they turn, how far, how long each lasts."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from loopfit.core.arrays import Array

_CLEAR = 4.0  # noise levels a swing must reach


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Swings:
    """Successive swings.

    `turns` and `heights` (k,): instants and heights of the turning points, heights positive; `passes` (k + 1,):
    instants at which the motion passes rest around them, s.
    """

    turns: Array
    heights: Array
    passes: Array

    @property
    def half_periods(self) -> Array:
        """Duration of each swing, s."""
        return np.diff(self.passes)


def find_swings(time: Array, departure: Array, noise: float) -> Swings:
    """Return the swings of a motion about rest.

    Passages of rest count once the motion has been clear of the noise on both sides; each is interpolated
    between the rows around it.

    Parameters
    ----------
    time : (n,) array
        Rising, s.
    departure : (n,) array
        Measurement minus its rest value.
    noise : float
        Fast noise of a row, rms.
    """
    clear = np.flatnonzero(np.abs(departure) > _CLEAR * noise)
    empty = np.zeros(0)
    if clear.size < 2:
        return Swings(turns=empty, heights=empty, passes=empty)
    sides = np.sign(departure[clear])
    changes = np.flatnonzero(sides[1:] != sides[:-1])
    passes = []
    for i in changes:
        a, b = int(clear[i]), int(clear[i + 1])
        passes.append(_passage(time[a : b + 1], departure[a : b + 1]))
    turns, heights = [], []
    firsts, lasts = np.searchsorted(time, passes[:-1]), np.searchsorted(time, passes[1:], side="right")
    for first, last in zip(firsts.tolist(), lasts.tolist(), strict=True):
        if first >= last:
            return Swings(turns=empty, heights=empty, passes=empty)
        top, when = _turning_point(time[first:last], np.abs(departure[first:last]))
        heights.append(top)
        turns.append(when)
    return Swings(turns=np.array(turns), heights=np.array(heights), passes=np.array(passes))


def _passage(t: Array, y: Array) -> float:
    """Return when the rows pass zero, by the straight line of time over height."""
    later, height = t - t[0], y - y.mean()
    slope = float(height @ later) / float(height @ height)
    return float(min(max(t[0] + later.mean() - slope * y.mean(), t[0]), t[-1]))


def _turning_point(t: Array, y: Array) -> tuple[float, float]:
    """Return height and instant of the top, by a parabola through the rows around it."""
    near = np.flatnonzero(y > 0.7 * y.max())
    if near.size < 4:
        top = int(np.argmax(y))
        return float(y[top]), float(t[top])
    middle = float(t[near].mean())
    x, heights = t[near] - middle, y[near]
    # least squares on a constant, x, and x^2 made orthogonal to both
    square = x * x
    level, tilt = float(square.mean()), float(square @ x) / float(x @ x)
    bend = square - level - tilt * x
    c2 = float(bend @ heights) / float(bend @ bend)
    if c2 >= 0:
        return float(y.max()), float(t[int(np.argmax(y))])
    c1 = float(x @ heights) / float(x @ x) - c2 * tilt
    c0 = float(heights.mean()) - c2 * level
    at = min(max(-0.5 * c1 / c2, float(x[0])), float(x[-1]))
    return c0 + c1 * at + c2 * at * at, at + middle
