"""Figures of a loop's response: overshoot, rise and settling after a setpoint step, errors after a load step."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from loopfit.core.arrays import Array
from loopfit.core.errors import UsageError
from loopfit.loop.gains import Gains


@dataclass(frozen=True, slots=True, kw_only=True)
class SetpointFigures:
    """Of a step from `initial` to rest at `final`, times from the step; None where the figure does not exist."""

    overshoot_percent: float
    peak_value: float
    peak_time_s: float | None
    rise_time_s: float | None
    settling_time_s: float | None


@dataclass(frozen=True, slots=True, kw_only=True)
class LoadFigures:
    """Of e = setpoint - measurement after a load step, up to the last time: integrals of e and |e|, largest departure.

    `peak` is the departure of the measurement from the setpoint, with its sign.
    """

    integrated_error: float
    absolute_error: float
    peak: float
    peak_time_s: float


def setpoint_figures(
    time: Array, measurement: Array, *, initial: float, final: float, band_percent: float = 2.0
) -> SetpointFigures:
    """Return the figures of a response to a setpoint step at time 0, without noise.

    Between the points of the grid crossings are taken on a straight line, the peak on a parabola: the errors are of
    the order of the grid interval squared, and cubed for the peak's height.

    Parameters
    ----------
    time, measurement : (n,) arrays
        Rising, s; at least three points.
    initial, final : float
        Rest values, different.
    band_percent : float
        Of the change, for settling.
    """
    _check(time, measurement)
    if not abs(final - initial) > 0.0:
        raise UsageError("the figures of a step need a change: initial and final value are the same")
    part = (measurement - initial) / (final - initial)
    height, at = _peak(time, part)
    beyond = height > 1.0 + 1e-9 and at is not None
    low, high = _first_above(time, part, 0.1), _first_above(time, part, 0.9)
    return SetpointFigures(
        overshoot_percent=100.0 * (height - 1.0) if beyond else 0.0,
        peak_value=initial + (final - initial) * height,
        peak_time_s=at if beyond else None,
        rise_time_s=None if low is None or high is None else high - low,
        settling_time_s=_last_entry(time, part, band_percent / 100.0),
    )


def load_figures(time: Array, measurement: Array, setpoint: float) -> LoadFigures:
    """Return the figures of a response to a load step at time 0, by the trapezoidal rule between sign changes."""
    _check(time, measurement)
    error = setpoint - measurement
    a, b, step = error[:-1], error[1:], np.diff(time)
    plain = 0.5 * (np.abs(a) + np.abs(b)) * step
    # a straight line through zero encloses two triangles
    changes = a * b < 0
    total = np.where(changes, np.abs(a) + np.abs(b), 1.0)
    plain = np.where(changes, 0.5 * (a * a + b * b) / total * step, plain)
    side = -1.0 if error[np.argmax(np.abs(error))] > 0 else 1.0
    height, at = _peak(time, -side * error)
    return LoadFigures(
        integrated_error=float(np.sum(0.5 * (a + b) * step)),
        absolute_error=float(np.sum(plain)),
        peak=side * height,
        peak_time_s=float(time[-1]) if at is None else at,
    )


def load_integrated_error(gains: Gains, load_step: float = 1.0) -> float | None:
    """Return the integral of e = setpoint - measurement after a load step on a stable loop, to infinity.

    -load / ki whatever the plant is, for the integral term must end at minus the load (Astrom and Hagglund, PID
    Controllers, 2nd ed. 1995, section 4.7). None without integral action: the error does not go away.
    """
    return None if gains.ki == 0.0 else -load_step / gains.ki


def _check(time: Array, values: Array) -> None:
    if time.ndim != 1 or time.shape != values.shape or time.size < 3 or not np.all(np.diff(time) > 0):
        raise UsageError("figures need at least three times, rising, and one value for each")
    if not np.all(np.isfinite(values)):
        raise UsageError("the response runs out of numbers: the loop is unstable")


def _peak(time: Array, values: Array) -> tuple[float, float | None]:
    """Return the largest value and its time, None for the time when it is the last; a parabola through three points."""
    top = int(np.argmax(values))
    if top == values.size - 1:
        return float(values[top]), None
    if top == 0:
        return float(values[0]), float(time[0])
    (left, right), here = (time[[top - 1, top + 1]] - time[top]), float(values[top])
    down, up = (values[[top - 1, top + 1]] - here).tolist()
    bend = (up / right - down / left) / (right - left)
    tilt = up / right - bend * right
    if not bend < 0.0:
        return here, float(time[top])
    at = float(np.clip(-0.5 * tilt / bend, left, right))
    return float(here + tilt * at + bend * at * at), float(time[top] + at)


def _first_above(time: Array, values: Array, level: float) -> float | None:
    above = np.flatnonzero(values >= level)
    if above.size == 0:
        return None
    first = int(above[0])
    return float(time[0]) if first == 0 else _crossing(time, values, first - 1, level)


def _last_entry(time: Array, part: Array, band: float) -> float | None:
    outside = np.flatnonzero(~(np.abs(part - 1.0) <= band))
    if outside.size == 0:
        return float(time[0])
    last = int(outside[-1])
    if last == time.size - 1:
        return None
    return _crossing(time, part, last, 1.0 + (band if part[last] > 1.0 else -band))


def _crossing(time: Array, values: Array, i: int, level: float) -> float:
    rise = values[i + 1] - values[i]
    return float(time[i] + (time[i + 1] - time[i]) * ((level - values[i]) / rise if rise != 0.0 else 1.0))
